"""Descriptors of the old model as it meets the new rows; the trainer supplies them, or they are missing.

The built-in trainer computes them in `hyperforecast.learning.trainer.HeadTrainer.facts`.
"""

import numpy as np

from hyperforecast.describing.registry import descriptor


@descriptor("model")
def confidence_new(view):
    """Mean largest probability that the old model gives new rows, over old classes. Unit: probability."""
    return view.fact("confidence_new")


@descriptor("model")
def entropy_new(view):
    """Mean entropy of those probabilities over the log of the number of old classes. Unit: share of the maximum."""
    return view.fact("entropy_new")


@descriptor("model")
def largest_logit_new(view):
    """Mean largest output of the old model on new rows. Unit: logits."""
    return view.fact("largest_logit_new")


@descriptor("model")
def loss_exemplars(view):
    """Mean cross-entropy of the model on old rows, outputs for new classes added at zero. Unit: nats."""
    return view.fact("loss_exemplars")


@descriptor("model")
def gradient_norm_new(view):
    """Length of the gradient of the new rows' mean loss. Unit: loss per parameter."""
    return view.fact("gradient_norm_new")


@descriptor("model")
def gradient_norm_exemplars(view):
    """Length of the gradient of the old rows' mean loss. Unit: loss per parameter."""
    return view.fact("gradient_norm_exemplars")


@descriptor("model")
def gradient_cosine(view):
    """Cosine of the angle between the two gradients; below 0 learning the new undoes the old. Unit: -1 to 1.

    Lopez-Paz & Ranzato 2017, "Gradient Episodic Memory", from memory: the sign tells interference.
    """
    return view.fact("gradient_cosine")


@descriptor("model")
def curvature_new(view):
    """Largest eigenvalue of the Gauss-Newton matrix of the new rows' loss, by power iteration. Unit: 1 / learning rate.

    Schraudolph 2002, "Fast Curvature Matrix-Vector Products", from memory.
    """
    return view.fact("curvature_new")


@descriptor("model")
def curvature_exemplars(view):
    """The same of the old rows' loss. Unit: 1 / learning rate."""
    return view.fact("curvature_exemplars")


@descriptor("model")
def anchor_curvature(view):
    """Largest eigenvalue of the anchor's Hessian at regularization 1: largest importance, or of the distillation loss.

    Unit: 1 / learning rate.
    """
    return view.fact("anchor_curvature")


@descriptor("model")
def importance_mean(view):
    """EWC: mean importance of the old weights. Unit: 1 / squared weight. Kirkpatrick et al. 2017, eq. 3."""
    return view.fact("importance_mean")


@descriptor("model")
def output_weight_norm(view):
    """Mean length of the output weights of old classes. Unit: logits per feature."""
    return view.fact("output_weight_norm")


@descriptor("model")
def output_bias_spread(view):
    """Standard deviation of the output biases of old classes. Unit: logits."""
    return view.fact("output_bias_spread")


@descriptor("model")
def hidden_weight_norm(view):
    """Root mean square of the hidden layer's weights; missing for a linear head. Unit: activation per feature."""
    return view.fact("hidden_weight_norm")


@descriptor("model")
def active_share_new(view):
    """Share of hidden units that are active, over new rows; missing for a linear head. Unit: share."""
    return view.fact("active_share_new")


@descriptor("model")
def feature_norm_new(view):
    """Mean length of what the output layer sees of new rows. Unit: activations."""
    return view.fact("feature_norm_new")


@descriptor("model")
def log_curvature_ratio(view):
    """Decimal logarithm of the exemplars' curvature over the new rows'. Unit: decades."""
    return np.log10(view.fact("curvature_exemplars") / view.fact("curvature_new"))
