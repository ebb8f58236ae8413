"""The learner. Read exemplars, boundary, head, objectives, side_by_side, trainer, attempts, class_care in turn."""

from hyperforecast.learning.attempts import (
    CHUNK_ROWS, accuracies, check_accuracies, class_probabilities, close_boundary, predict_codes, try_settings,
)
from hyperforecast.learning.boundary import (
    Boundary, Carryover, ClassSummaries, boundary_seed, class_limits, open_boundary, present_codes, standardize,
)
from hyperforecast.learning.class_care import merge_classes, rename_class, without_class
from hyperforecast.learning.exemplars import Exemplars, choose_exemplars, herd, unit_rows
from hyperforecast.learning.objectives import distillation
from hyperforecast.learning.trainer import Attempt, HeadTrainer, Job, Trainer, align_weights

__all__ = [
    "Attempt", "Boundary", "CHUNK_ROWS", "Carryover", "ClassSummaries", "Exemplars", "HeadTrainer", "Job", "Trainer",
    "accuracies", "align_weights", "boundary_seed", "check_accuracies", "choose_exemplars", "class_limits",
    "class_probabilities", "close_boundary", "distillation", "herd", "merge_classes", "open_boundary", "predict_codes",
    "present_codes", "rename_class", "standardize", "try_settings", "unit_rows", "without_class",
]
