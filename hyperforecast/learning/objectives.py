"""What each method asks of the outputs: gradients and curvature of its loss at the logits.

All functions work on K heads side by side, logits (K, B, C), y (B,) or (K, B). The anchor is the part of the loss
that holds on to the old model; its weight is the setting `regularization`. EWC's anchor acts on the parameters
and is added by the training loop.
"""

import numpy as np

from hyperforecast.learning.head import softmax, softmax_in_place

# Of the softened outputs in LwF and WA: Li & Hoiem 2016, "Learning without Forgetting", from memory.
TEMPERATURE = 2.0
# Added to the logits of classes that a loss leaves out.
LEFT_OUT = np.float32(-1e30)


def distillation(student, teacher, *, temperature=TEMPERATURE):
    """Return T^2 KL(teacher || student) of softened outputs per row, shape (..., N).

    Parameters
    ----------
    student, teacher : ndarrays of shape (..., N, C)
        Logits.

    Notes
    -----
    Hinton, Vinyals & Dean 2015, "Distilling the Knowledge in a Neural Network", section 2.1: the factor T^2 keeps
    the gradient's size independent of the temperature. The gradient at the student is T (p_student - p_teacher).
    """
    p = softmax(teacher, temperature)
    log_ratio = np.log(p) - np.log(softmax(student, temperature))
    return temperature**2 * (p * log_ratio).sum(axis=-1)


class Objective:
    """The loss of one method at one boundary, seen from the outputs.

    Parameters
    ----------
    method : str
    n_classes, n_old : int
        Classes seen, and those of them seen before.
    arrived : ndarray of int
        Codes of the classes in the increment.

    Notes
    -----
    EWC: cross-entropy over all classes seen. LwF: cross-entropy over the classes of the increment (all classes, if
    it brings a single one, where its own loss would vanish) and distillation of the old outputs. WA: cross-entropy
    over all classes and the same distillation. iCaRL: a logistic loss per class, with labels for the classes of the
    increment and the old model's outputs as targets for the other old ones.
    """

    def __init__(self, method, *, n_classes, n_old, arrived):
        self.method = method
        self.n_old = n_old
        self.left_out = None
        if method == "lwf" and len(arrived) > 1 and len(arrived) < n_classes:
            self.left_out = np.full(n_classes, LEFT_OUT)
            self.left_out[arrived] = 0
        # iCaRL's old classes without new rows follow the old model; the others follow the labels.
        self.followed = np.setdiff1d(np.arange(n_old), arrived, assume_unique=True)

    @property
    def distils(self):
        """Whether the old model's outputs enter the loss."""
        return self.method != "ewc" and self.n_old > 0

    def targets(self, old_logits):
        """Return what the loss wants of the old outputs (N, n_old): probabilities."""
        if self.method == "icarl":
            return logistic(old_logits)
        return softmax(old_logits, TEMPERATURE)

    def output_gradient(self, logits, y, targets, strength):
        """Return the gradient of every row's loss at the logits (K, B, C); the logits are overwritten.

        Parameters
        ----------
        logits : ndarray of shape (K, B, C)
        y : ndarray of shape (B,) or (K, B)
        targets : ndarray of shape (B, n_old) or (K, B, n_old), or None
        strength : ndarray of shape (K, 1, 1)
            The weight of the anchor.
        """
        n_heads, n_rows, n_classes = logits.shape
        if self.method == "icarl":
            gradient = logistic(logits)
            followed = None
            if self.distils:
                followed = (gradient[:, :, self.followed] - targets[..., self.followed]) * strength
            _subtract_one_hot(gradient, y)
            if followed is not None:
                gradient[:, :, self.followed] = followed
            return gradient
        anchor = None
        if self.distils:
            anchor = softmax(logits[:, :, :self.n_old], TEMPERATURE)
            anchor -= targets
            anchor *= strength * np.float32(TEMPERATURE)
        if self.left_out is not None:
            logits += self.left_out
        softmax_in_place(logits)
        _subtract_one_hot(logits, y)
        if anchor is not None:
            logits[:, :, :self.n_old] += anchor
        return logits

    def loss_curvature(self, logits):
        """Return a function: output changes (N, C) -> Hessian of each row's unanchored loss there, times them."""
        if self.method == "icarl":
            p = logistic(logits)
            weight = p * (1 - p)
            weight[:, self.followed] = 0
            return lambda change: weight * change
        return _softmax_curvature(softmax(logits if self.left_out is None else logits + self.left_out))

    def anchor_curvature(self, logits):
        """Return the same for the anchor at regularization 1, for the methods that distil."""
        if self.method == "icarl":
            p = logistic(logits)
            weight = np.zeros_like(p)
            weight[:, self.followed] = (p * (1 - p))[:, self.followed]
            return lambda change: weight * change
        # T^2 from the loss and 1/T^2 from softening cancel.
        p = np.zeros_like(logits)
        p[:, :self.n_old] = softmax(logits[:, :self.n_old], TEMPERATURE)
        return _softmax_curvature(p)


def logistic(logits):
    """Return 1 / (1 + exp(-logits)), written so that it cannot overflow."""
    return 0.5 * (1 + np.tanh(0.5 * logits))


def _softmax_curvature(p):
    return lambda change: p * (change - (p * change).sum(axis=-1, keepdims=True))


def _subtract_one_hot(values, y):
    n_heads, n_rows, n_classes = values.shape
    places = np.arange(n_heads * n_rows).reshape(n_heads, n_rows) * n_classes + y
    values.reshape(-1)[places] -= 1
