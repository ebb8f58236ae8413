"""The built-in head: linear, or one hidden layer of rectified units, over standardized features.

Parameters of K heads lie in one flat float32 array (K, P), with views for each part, so that an update
touches one array. Letters: K heads, N or B rows, D features, H hidden units, C classes, P parameters.
"""

from dataclasses import dataclass
from functools import cached_property

import numpy as np

# Parts start at multiples of 16 floats (64 bytes), so that each head's products see the same alignment.
ALIGNMENT = 16


@dataclass(frozen=True)
class HeadLayout:
    """Where each part of a head lies in its flat parameters; `hidden_units` 0 is a linear head."""

    n_features: int
    hidden_units: int
    n_classes: int

    @cached_property
    def shapes(self):
        """Shape of each part, by name."""
        width = self.hidden_units or self.n_features
        shapes = {}
        if self.hidden_units:
            shapes["hidden_weights"] = (self.n_features, self.hidden_units)
            shapes["hidden_bias"] = (1, self.hidden_units)
        shapes["output_weights"] = (width, self.n_classes)
        shapes["output_bias"] = (1, self.n_classes)
        return shapes

    @cached_property
    def offsets(self):
        """First flat index of each part, by name, and of the end."""
        offsets, at = {}, 0
        for name, shape in self.shapes.items():
            offsets[name] = at
            at += -(-shape[0] * shape[1] // ALIGNMENT) * ALIGNMENT
        return {**offsets, "end": at}

    @property
    def n_flat(self):
        """Length of the flat parameters, padding included."""
        return self.offsets["end"]

    @property
    def operations_per_row(self):
        """Floating-point operations of one row's forward and backward pass in training."""
        width = self.hidden_units or self.n_features
        return 2 * (2 * self.n_features * self.hidden_units + (3 if self.hidden_units else 2) * width * self.n_classes)

    @property
    def forward_operations_per_row(self):
        """Floating-point operations of one row's forward pass."""
        width = self.hidden_units or self.n_features
        return 2 * (self.n_features * self.hidden_units + width * self.n_classes)

    def parts(self, flat):
        """Return the parts of flat parameters (K, P) as views (K, rows, columns), by name."""
        views = {}
        for name, (rows, columns) in self.shapes.items():
            at = self.offsets[name]
            views[name] = flat[:, at:at + rows * columns].reshape(len(flat), rows, columns)
        return views

    def flatten(self, arrays, prefix=""):
        """Return flat parameters (1, P) from a dict of arrays that may hold fewer classes; the rest is zero."""
        flat = np.zeros((1, self.n_flat), np.float32)
        for name, view in self.parts(flat).items():
            array = arrays.get(prefix + name)
            if array is not None:
                view[0, :, :array.shape[1]] = array
        return flat


def new_head(n_features, hidden_units, rng):
    """Return the parts of a head with no classes yet: hidden weights drawn after He et al. 2015, biases 0."""
    width = hidden_units or n_features
    head = {"output_weights": np.zeros((width, 0), np.float32), "output_bias": np.zeros((1, 0), np.float32)}
    if hidden_units:
        deviation = np.float32(np.sqrt(2 / n_features))
        head["hidden_weights"] = deviation * rng.standard_normal((n_features, hidden_units), dtype=np.float32)
        head["hidden_bias"] = np.zeros((1, hidden_units), np.float32)
    return head


def hidden_features(head, Z):
    """Return what the output layer sees of rows Z (N, D): (N, H), or Z itself for a linear head."""
    if "hidden_weights" not in head:
        return Z
    activations = Z @ head["hidden_weights"]
    activations += head["hidden_bias"]
    return np.maximum(activations, 0, out=activations)


def head_logits(head, Z):
    """Return the outputs (N, C) of one head, a dict of parts, for rows Z (N, D)."""
    return hidden_features(head, Z) @ head["output_weights"] + head["output_bias"]


def softmax(logits, temperature=1.0):
    """Return class probabilities along the last axis of (..., N, C)."""
    return softmax_in_place(logits * np.float32(1 / temperature))


def softmax_in_place(logits):
    """Turn logits (..., N, C) into probabilities, in the same memory; return them."""
    # On short rows argmax is several times faster than max.
    first = np.arange(0, logits.size, logits.shape[-1]).reshape(logits.shape[:-1])
    logits -= logits.take(first + logits.argmax(axis=-1))[..., None]
    np.exp(logits, out=logits)
    # A product with ones sums short rows several times faster than a reduction.
    logits /= logits @ np.ones((logits.shape[-1], 1), logits.dtype)
    return logits


def fisher_diagonal(head, Z):
    """Return the exact diagonal Fisher information of a softmax head, averaged over rows Z (N, D), part by part.

    Labels are summed over with the model's own probabilities p. For output weight (h, c) it is the mean of
    p_c (1 - p_c) a_h^2; for hidden weight (d, h) the mean of x_d^2 times the variance under p of the output
    weights of unit h, where the unit is active. Martens 2020, "New Insights and Perspectives on the Natural
    Gradient Method", section 5, from memory; own derivation, checked against finite differences in the tests.
    """
    features = hidden_features(head, Z)
    p = softmax(features @ head["output_weights"] + head["output_bias"])
    spread = p * (1 - p)
    n_rows = len(Z)
    fisher = {
        "output_weights": (features**2).T @ spread / n_rows,
        "output_bias": spread.mean(axis=0, keepdims=True),
    }
    if "hidden_weights" in head:
        mean = p @ head["output_weights"].T
        variance = p @ (head["output_weights"] ** 2).T - mean**2
        variance = np.maximum(variance, 0) * (features > 0)
        fisher["hidden_weights"] = (Z**2).T @ variance / n_rows
        fisher["hidden_bias"] = variance.mean(axis=0, keepdims=True)
    return fisher


def backpropagate(head, Z, output_gradient):
    """Return the gradient, part by part, of a loss whose gradient at the outputs (N, C) is given."""
    features = hidden_features(head, Z)
    gradient = {
        "output_weights": features.T @ output_gradient,
        "output_bias": output_gradient.sum(axis=0, keepdims=True),
    }
    if "hidden_weights" in head:
        inner = (output_gradient @ head["output_weights"].T) * (features > 0)
        gradient["hidden_weights"] = Z.T @ inner
        gradient["hidden_bias"] = inner.sum(axis=0, keepdims=True)
    return gradient


def push_forward(head, Z, direction):
    """Return the change (N, C) of the outputs per step along `direction`, a dict of parts (Jacobian times vector)."""
    features = hidden_features(head, Z)
    change = features @ direction["output_weights"] + direction["output_bias"]
    if "hidden_weights" in head:
        inner = (Z @ direction["hidden_weights"] + direction["hidden_bias"]) * (features > 0)
        change += inner @ head["output_weights"]
    return change


def top_curvature(head, Z, output_curvature, *, iterations=6, rng):
    """Return the largest eigenvalue of the Gauss-Newton matrix of a mean loss over rows Z, by power iteration.

    Parameters
    ----------
    head : dict of parts
    Z : ndarray of shape (N, D)
    output_curvature : callable
        Takes changes of the outputs (N, C), returns the Hessian of each row's loss at the outputs times them.
    iterations : int
    rng : numpy Generator
        Draws the starting vector.

    Notes
    -----
    Schraudolph 2002, "Fast Curvature Matrix-Vector Products", from memory: G v = J' H_out J v. Six rounds come near
    from below: within a few percent as a rule, within a quarter where the first eigenvalues are close.
    """
    names = [name for name in head if name in ("hidden_weights", "hidden_bias", "output_weights", "output_bias")]
    vector = {name: rng.standard_normal(head[name].shape, dtype=np.float32) for name in names}
    value = 0.0
    for _ in range(iterations):
        length = np.sqrt(sum(float(np.vdot(part, part)) for part in vector.values()))
        if not 0 < length < np.inf:
            return value
        vector = {name: part / np.float32(length) for name, part in vector.items()}
        product = backpropagate(head, Z, output_curvature(push_forward(head, Z, vector)) / np.float32(len(Z)))
        value = sum(float(np.vdot(vector[name], product[name])) for name in names)
        vector = product
    return value
