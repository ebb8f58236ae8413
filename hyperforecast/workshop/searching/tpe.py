"""The tree-structured Parzen estimator (TPE) in the unit cube.

Reference: Bergstra, Bardenet, Bengio & Kegl 2011, "Algorithms for Hyper-Parameter Optimization"
(formulas from memory), with the constants of the authors' program of 2013 (from memory) for the size of
the good set and the number of candidates. l(x) is the density of the good attempts, g(x) that of the
rest; both are products over dimensions of one-dimensional mixtures: the uniform prior and, with the
same weight, one Gaussian cut off at the cube's edges for each attempt.

Choices of our own. A Gaussian's width is the larger distance to its neighbours (the edges count as
such), as in the paper, but kept within `WIDTHS`: good settings form a narrow curved ridge, and two good
attempts far apart would otherwise be smeared over the whole cube. Proposals that are still being tried
count among the bad attempts, so that proposals made side by side keep apart.
"""

import math

import numpy as np
from scipy.special import logsumexp, ndtr, ndtri

MOST_GOOD = 25
CANDIDATES = 24
WIDTHS = (0.01, 0.07)


def count_good(n):
    """Return the size of the good set among n attempts: ceil(sqrt(n) / 4), at most 25."""
    ceil_of_root = math.isqrt(n - 1) + 1 if n else 0
    return min(-(-ceil_of_root // 4), MOST_GOOD)


def expected_improvement(log_l, log_g, gamma):
    """Return (gamma + (1 - gamma) g / l)^-1, to which the expected improvement is proportional.

    Parameters
    ----------
    log_l, log_g : array
        Logarithms of both densities.
    gamma : float in [0, 1]
        Share of good attempts; bounds the result by 1 / gamma.
    """
    return 1.0 / (gamma + (1.0 - gamma) * np.exp(log_g - log_l))


class ParzenDensity:
    """Density on the unit cube: a product of one-dimensional mixtures of cut-off Gaussians and the uniform prior.

    Parameters
    ----------
    centers : array of shape (n, D)
        Attempts, n >= 0; without any the density is uniform.
    """

    def __init__(self, centers):
        self._centers = centers
        order = np.argsort(centers, axis=0, kind="stable")
        edges = np.zeros((1, centers.shape[1]))
        gaps = np.diff(np.concatenate([edges, np.take_along_axis(centers, order, axis=0), edges + 1.0]), axis=0)
        widths = np.empty_like(centers)
        np.put_along_axis(widths, order, np.maximum(gaps[:-1], gaps[1:]), axis=0)
        self._widths = np.clip(widths, *WIDTHS)
        self._below = ndtr(-centers / self._widths)
        self._inside = ndtr((1.0 - centers) / self._widths) - self._below

    def sample(self, n, rng):
        """Return n draws, shape (n, D)."""
        n_centers, n_dimensions = self._centers.shape
        component = rng.integers(n_centers + 1, size=(n, n_dimensions))
        draws = rng.random((n, n_dimensions))
        row, dimension = np.nonzero(component < n_centers)
        at = component[row, dimension], dimension
        quantile = self._below[at] + draws[row, dimension] * self._inside[at]
        draws[row, dimension] = np.clip(self._centers[at] + self._widths[at] * ndtri(quantile), 0.0, 1.0)
        return draws

    def log_density(self, points):
        """Return the logarithm of the density at points of shape (n, D): shape (n,)."""
        z = (points[:, None, :] - self._centers) / self._widths
        gaussians = -0.5 * z**2 - np.log(math.sqrt(2.0 * math.pi) * self._widths * self._inside)
        prior = np.zeros((len(points), 1, points.shape[1]))
        mixtures = logsumexp(np.concatenate([prior, gaussians], axis=1), axis=1)
        return mixtures.sum(axis=1) - points.shape[1] * math.log(len(self._centers) + 1)


def propose(points, scores, pending, rng):
    """Return the next point to try, shape (D,): of 24 draws from l the one with the greatest expected improvement.

    Parameters
    ----------
    points : array of shape (n, D)
        Attempts made, in the unit cube; n may be 0.
    scores : array of shape (n,)
        Higher is better; NaN, a failure, is never good.
    pending : array of shape (m, D)
        Points that are being tried; m may be 0.
    rng : numpy.random.Generator
    """
    # NaN sorts to the end, so failures are the worst.
    order = np.argsort(-scores, kind="stable")
    n_good = min(count_good(len(points)), int(np.count_nonzero(~np.isnan(scores))))
    good = ParzenDensity(points[order[:n_good]])
    bad = ParzenDensity(np.concatenate([points[order[n_good:]], pending]))
    candidates = good.sample(CANDIDATES, rng)
    gamma = n_good / max(len(points) + len(pending), 1)
    improvement = expected_improvement(good.log_density(candidates), bad.log_density(candidates), gamma)
    return candidates[np.argmax(improvement)]
