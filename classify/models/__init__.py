"""Models: fitted, screened on held-out polygons, and kept in a file that is safe to open."""

from classify.models.checks import check_classes, check_scene
from classify.models.fit import fit_model
from classify.models.inspect import inspect_training
from classify.models.reach import Reach
from classify.models.screening import Screening
from classify.models.store import load_model, save_model
from classify.models.trained import TrainedModel
from classify.models.validate import ScreenOptions, screen

__all__ = [
    "Reach",
    "ScreenOptions",
    "Screening",
    "TrainedModel",
    "check_classes",
    "check_scene",
    "fit_model",
    "inspect_training",
    "load_model",
    "save_model",
    "screen",
]
