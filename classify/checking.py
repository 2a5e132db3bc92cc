"""Read everything a project names, touch nothing, and list every problem at once.

Each part is read as far as the ones it rests on allow; a part that fails leaves its findings and the next one goes on.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, TypeVar

from classify.assessment.reference import read_labels
from classify.errors import LandassayError, Problem
from classify.features import Recipe, SceneFacts, build_recipe, index_availability, scene_facts, scene_recipe
from classify.models import check_classes
from classify.progress import SILENT, Progress
from classify.raster.scene import Scene, open_scene
from classify.settings import Project
from classify.training import PixelCaps, TrainingSet, extract_pixels, read_polygons

_T = TypeVar("_T")


@dataclass(slots=True)
class CheckResult:
    """What a check found. Parts that could not be read are None.

    problems: all findings, errors and warnings, each once. reference: number of labelled points by class name.
    """

    scene: Scene | None = None
    recipe: Recipe | None = None
    training: TrainingSet | None = None
    reference: dict[str, int] | None = None
    problems: list[Problem] = field(default_factory=list)

    @property
    def errors(self) -> list[Problem]:
        """Findings that stop the work."""
        return [problem for problem in self.problems if problem.severity == "error"]

    def to_json(self) -> dict[str, Any]:
        """Plain data for programs."""
        return {
            "scene": None if self.scene is None else _scene_facts(self.scene),
            "features": None if self.recipe is None else list(self.recipe.names),
            "training": None if self.training is None else balance(self.training),
            "reference": self.reference,
            "problems": [
                {"severity": p.severity, "where": p.where, "what": p.what, "fix": p.fix} for p in self.problems
            ],
        }


def check_project(project: Project, jobs: int = 1, progress: Progress = SILENT) -> CheckResult:
    """Check scene, features, training polygons and reference sample of a project.

    Writes nothing; what is wrong with the input is in the result, not raised.
    """
    result = CheckResult()
    scene = result.scene = _attempt(result, lambda: open_scene(project.scene, project))
    recipe = result.recipe = _attempt(result, lambda: _recipe(project, scene, progress))
    if scene is not None:
        _add(result, scene.warnings)
        polygons = _attempt(result, lambda: read_polygons(project, scene.grid))
        if polygons is not None and recipe is not None:
            caps = PixelCaps.of(project)
            result.training = _attempt(
                result, lambda: extract_pixels(polygons, scene, recipe, jobs, progress, caps=caps)
            )
        if result.training is not None:
            _add(result, result.training.problems)
            _add(result, check_classes(result.training, project))
    if project.reference is not None:
        result.reference = _attempt(result, lambda: read_labels(project))
    return result


def check_indices(project: Project) -> list[dict[str, str]]:
    """Every index of the catalogue with name, title, what it shows and, where this scene cannot compute it, the reason.

    Raises DataError or SettingsError when the scene cannot be opened.
    """
    scene = open_scene(project.scene, project)
    return [
        {"name": a.index.name, "title": a.index.title, "shows": a.index.shows, "reason": a.reason}
        for a in index_availability(scene.roles, scene_facts(scene))
    ]


def _recipe(project: Project, scene: Scene | None, progress: Progress) -> Recipe:
    """The recipe, fitted if there is a scene; without one, of those features that the settings alone can judge."""
    wanted = project.features
    if scene is not None:
        return scene_recipe(project, scene, progress)
    if wanted.terrain or wanted.absorption or wanted.smoothing or wanted.components:  # and what is made from them
        rest: dict[str, Any] = {
            "terrain": [],
            "absorption": [],
            "smoothing": None,
            "components": None,
            "formulas": {},
            "texture": [],
        }
        wanted = wanted.model_copy(update=rest)
    promised = project.scene
    dated = [f"{role}@{date.name}" for date in promised.dates for role in date.bands]
    own = [f"{role}@{promised.date}" for role in promised.bands] if promised.date else []
    others = [*promised.ancillary, *(["clear_count"] if promised.composite else [])]
    return build_recipe(wanted, (*promised.bands, *others, *own, *dated), SceneFacts(ancillary=frozenset(others)))


def balance(training: TrainingSet) -> list[dict[str, Any]]:
    """By class: polygons, pixels used, ground area of the polygons (m2), share of their pixels that is clear."""
    rows = []
    for name, polygons in training.table.groupby("class_name", sort=False):
        pixels, invalid = int(polygons["pixels"].sum()), int(polygons["invalid"].sum())
        rows.append(
            {
                "class": str(name),
                "polygons": len(polygons),
                "pixels": int(polygons["used"].sum()),
                "area_m2": round(float(polygons["area_m2"].sum()), 1),
                "clear_share": round(1 - invalid / pixels, 4) if pixels else None,
            }
        )
    return rows


def _attempt(result: CheckResult, read: Callable[[], _T]) -> _T | None:
    try:
        return read()
    except LandassayError as error:
        _add(result, error.problems)
        return None


def _add(result: CheckResult, problems: Any) -> None:  # noqa: ANN401 - any iterable of problems
    result.problems.extend(problem for problem in problems if problem not in result.problems)


def _scene_facts(scene: Scene) -> dict[str, Any]:
    return {
        "crs": scene.grid.crs.to_string(),
        "rows": scene.grid.height,
        "columns": scene.grid.width,
        "pixel_size_xy": [abs(scene.grid.transform.a), abs(scene.grid.transform.e)],
        "bands": [
            {
                "role": band.role, "file": Path(band.path).name, "band": band.band, "scale": band.scale,
                "offset": band.offset, "wavelength_nm": band.wavelength_nm,
            }
            for band in scene.bands
        ],
    }  # fmt: skip
