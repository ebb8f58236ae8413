"""Small neural networks over descriptors and settings, evaluated with numpy alone.

The good region of settings is a thin curved valley. Trees cut it into steps, networks bend along it; the mean of both
orders settings better than either.

Letters: K networks, F features, Q knots, I inputs, H and J hidden units, n rows.
"""

import numpy as np

from hyperforecast.checks import InputError
from hyperforecast.storage import stored_array

NETWORK_LAYERS = ("weights_1", "bias_1", "weights_2", "bias_2", "weights_3", "bias_3")


class NetworkEnsemble:
    """The mean of networks with two hidden layers of rectified units and one output.

    Every feature is bent by a line through its knots and cut at the outermost two, so that outliers do no harm. Where
    one is missing (NaN) its input is 0; features that were missing in the records have a second input, which says so.

    Parameters
    ----------
    knots, scores : ndarrays of shape (F, Q)
        Values of each feature, in ascending order, and the inputs that stand for them.
    gaps : ndarray of shape (G,), int
        Features with a second input. There are I = F + G inputs.
    layers : dict of str to ndarray
        By the names in `NETWORK_LAYERS`: (K, I, H), (K, H), (K, H, J), (K, J), (K, J), (K,).
    """

    def __init__(self, knots, scores, gaps, layers):
        self.knots, self.scores = knots.astype(np.float64), scores.astype(np.float64)
        self.gaps = gaps.astype(np.intp)
        self.layers = {name: layers[name].astype(np.float64) for name in NETWORK_LAYERS}

    @property
    def n_features(self):
        """Number of features F."""
        return len(self.knots)

    def inputs(self, X):
        """Return what the networks see of features X (n, F): (n, I)."""
        return bend(X, self.knots, self.scores, self.gaps)

    def predict(self, X):
        """Return the mean output (n,) for features X (n, F), NaN allowed."""
        layers = self.layers
        hidden = np.maximum(self.inputs(X) @ layers["weights_1"] + layers["bias_1"][:, None], 0)
        hidden = np.maximum(hidden @ layers["weights_2"] + layers["bias_2"][:, None], 0)
        return (hidden @ layers["weights_3"][:, :, None] + layers["bias_3"][:, None, None]).mean(axis=0)[:, 0]

    def restrict(self, vector, fixed):
        """Return the ensemble over the features that are not `fixed`, the others being as in `vector` (F,)."""
        vector, fixed = np.asarray(vector, np.float64), np.asarray(fixed, bool)
        gap_fixed = fixed[self.gaps]
        settled = np.concatenate([fixed, gap_fixed])
        weights = self.layers["weights_1"]
        bias = self.layers["bias_1"] + (self.inputs(vector[None])[:, settled] @ weights[:, settled])[:, 0]
        place = np.cumsum(~fixed) - 1
        return NetworkEnsemble(self.knots[~fixed], self.scores[~fixed], place[self.gaps[~gap_fixed]],
                               {**self.layers, "weights_1": weights[:, ~settled], "bias_1": bias})

    def to_arrays(self, prefix):
        """Return the ensemble as a dict of compact arrays whose names begin with `prefix`."""
        return {f"{prefix}knots": self.knots.astype(np.float32), f"{prefix}scores": self.scores.astype(np.float32),
                f"{prefix}gaps": self.gaps.astype(np.int32),
                **{prefix + name: part.astype(np.float32) for name, part in self.layers.items()}}

    @classmethod
    def from_arrays(cls, arrays, prefix):
        """Return the ensemble in arrays of `to_arrays`; `InputError` if they hold none."""
        def read(name, kinds, *shape):
            array = stored_array(arrays, prefix + name, kinds=kinds, shape=shape)
            if kinds == "f" and not np.isfinite(array).all():
                raise InputError(prefix + name, "must be finite", "NaN or infinity")
            return array

        knots = read("knots", "f", None, None)
        scores, gaps = read("scores", "f", *knots.shape), read("gaps", "i", None)
        if not knots.shape[1] or (np.diff(knots, axis=1) < 0).any():
            raise InputError(f"{prefix}knots", "must ascend", "others")
        if len(gaps) and not 0 <= gaps.min() <= gaps.max() < len(knots):
            raise InputError(f"{prefix}gaps", f"must be features below {len(knots)}", "others")
        layers = {"weights_1": read("weights_1", "f", None, len(knots) + len(gaps), None)}
        n_networks, _, width = layers["weights_1"].shape
        layers["weights_2"] = read("weights_2", "f", n_networks, width, None)
        second = layers["weights_2"].shape[2]
        for name, shape in (("bias_1", (n_networks, width)), ("bias_2", (n_networks, second)),
                            ("weights_3", (n_networks, second)), ("bias_3", (n_networks,))):
            layers[name] = read(name, "f", *shape)
        if not n_networks:
            raise InputError(f"{prefix}weights_1", "must hold at least one network", "none")
        return cls(knots, scores, gaps, layers)


def bend(X, knots, scores, gaps):
    """Return the inputs (n, I) of features X (n, F), see `NetworkEnsemble`."""
    missing = np.isnan(X)
    bent = np.stack([np.interp(*one) for one in zip(np.where(missing, 0.0, X).T, knots, scores)], axis=1)
    return np.hstack([np.where(missing, 0.0, bent), missing[:, gaps]])
