"""Models: fitted, screened on held-out polygons, and kept in a file that is safe to open."""

from classify.models.fit import fit_model
from classify.models.screening import Screening
from classify.models.store import load_model, save_model
from classify.models.trained import TrainedModel
from classify.models.validate import ScreenOptions, screen

__all__ = ["ScreenOptions", "Screening", "TrainedModel", "fit_model", "load_model", "save_model", "screen"]
