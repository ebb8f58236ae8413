"""Which classes come in which increment, when the seed decides."""

import numpy as np

from hyperforecast.checks import InputError

FIRST_CLASSES = (2, 10)
LATER_CLASSES = (1, 12)
MOST_RETURNING = 3


def most_classes(n_increments, largest=None):
    """Return how many classes `n_increments` increments can hold, later ones `largest` each (12 by default)."""
    return FIRST_CLASSES[1] + (largest or LATER_CLASSES[1]) * (n_increments - 1)


def deal_classes(labels, n_increments, rng, *, recurring=0.0, largest=None):
    """Deal labels to increments at random: 2 to 10 to the first, 1 to `largest` (12 by default) to each later one.

    Parameters
    ----------
    labels : sequence of labels
        Those beyond what the increments can hold are left out.
    n_increments : int, 2 or more
    rng : numpy Generator
    recurring : float in [0, 1]
        Probability that a later increment also brings back one to three old classes.

    Returns
    -------
    list of lists of labels

    Raises
    ------
    InputError
        If there are fewer labels than one for each increment and one more.
    """
    if len(labels) < n_increments + 1:
        raise InputError("increments", f"must be at most {len(labels) - 1}, with {len(labels)} classes", n_increments)
    sizes = np.array([FIRST_CLASSES[0]] + [LATER_CLASSES[0]] * (n_increments - 1))
    full = np.array([FIRST_CLASSES[1]] + [largest or LATER_CLASSES[1]] * (n_increments - 1))
    # From very uneven increments to even ones.
    weights = rng.dirichlet(np.full(n_increments, rng.choice([0.7, 3.0, 100.0])))
    for _ in range(min(len(labels), most_classes(n_increments, largest)) - sizes.sum()):
        open_weights = np.where(sizes < full, weights + 1e-9, 0)
        sizes[rng.choice(n_increments, p=open_weights / open_weights.sum())] += 1
    order = [labels[at] for at in rng.permutation(len(labels))[:sizes.sum()]]
    ends = np.cumsum(sizes)
    increments = [order[end - size:end] for end, size in zip(ends, sizes)]
    for t in range(1, n_increments):
        if rng.random() < recurring:
            old = order[:ends[t - 1]]
            chosen = rng.permutation(len(old))[:rng.integers(1, MOST_RETURNING + 1)]
            increments[t] = increments[t] + [old[at] for at in chosen]
    return increments
