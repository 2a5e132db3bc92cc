"""The project file as typed models, and the presets that ship in configs/."""

from classify.settings.features import FeatureSettings
from classify.settings.load import load_project, parse_project, project_schema
from classify.settings.model import (
    ClassSettings,
    MapSettings,
    ModelSettings,
    Project,
    ReferenceSettings,
    ReportSettings,
    TrainingSettings,
)
from classify.settings.presets import configs_folder, load_preset, preset_names
from classify.settings.scene import (
    AncillarySettings,
    BandSettings,
    CompositeSettings,
    DateSettings,
    MaskSettings,
    SceneSettings,
)

__all__ = [
    "AncillarySettings",
    "BandSettings",
    "ClassSettings",
    "CompositeSettings",
    "DateSettings",
    "FeatureSettings",
    "MapSettings",
    "MaskSettings",
    "ModelSettings",
    "Project",
    "ReferenceSettings",
    "ReportSettings",
    "SceneSettings",
    "TrainingSettings",
    "configs_folder",
    "load_preset",
    "load_project",
    "parse_project",
    "preset_names",
    "project_schema",
]
