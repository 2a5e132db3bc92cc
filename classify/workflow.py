"""Stages of a project: what each needs and makes, which are stale, and the record that lets a result be repeated.

A stage is up to date when its outputs exist and its fingerprint - input files by SHA-256, the settings it reads, the
fingerprints of the stages before it, the version of this package - equals the one recorded in run.json.
"""

from __future__ import annotations

import hashlib
import json
import platform
import time
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field, replace
from datetime import UTC, datetime
from functools import cache
from importlib.metadata import version
from pathlib import Path
from typing import Any, Literal

from classify import __version__
from classify.assessment import assess_project
from classify.errors import DataError, Problem
from classify.features import Recipe, build_recipe, fit_recipe, scene_facts
from classify.files import read_json, remove_leftovers, sha256, write_json
from classify.mapping.classify_scene import MapOptions, classify_scene
from classify.mapping.engines import cluster
from classify.mapping.many import ManyResult, classify_many, find_scenes, time_of
from classify.mapping.stac import ItemFacts, identifier, write_item
from classify.models import check_scene, fit_model, inspect_training, load_model, save_model
from classify.progress import SILENT, Progress
from classify.raster.scene import open_scene
from classify.report import gather_facts, write_report, write_review
from classify.settings import Project
from classify.training import PixelCaps, TrainingSet, extract_pixels, read_polygons, write_pixels

StageName = Literal["review", "train", "classify", "assess", "report"]
State = Literal["done", "stale", "missing", "not asked for"]

_LIBRARIES = ("numpy", "scipy", "pandas", "scikit-learn", "rasterio", "geopandas", "pyproj", "shapely", "skops")


@dataclass(frozen=True, slots=True)
class Job:
    """One project at work: its settings, how many workers, where progress goes.

    cluster: address of a Dask scheduler that maps instead of this machine. skip_unreadable: map what cannot be read as
    no data.
    """

    project: Project
    jobs: int = 1
    progress: Progress = SILENT
    cluster: str | None = None
    skip_unreadable: bool = False

    @property
    def outputs(self) -> Path:
        """The folder of everything that is written."""
        return self.project.folder / "outputs"


@dataclass(frozen=True, slots=True)
class StageResult:
    """What a stage says when it ends: a summary for people and programs, and warnings that travel to the report."""

    summary: dict[str, Any]
    warnings: tuple[Problem, ...] = ()


@dataclass(frozen=True, slots=True)
class Stage:
    """One stage. `sections` are the parts of the project file it reads; `inputs` the files; `outputs` what it makes."""

    name: StageName
    after: tuple[StageName, ...]
    sections: tuple[str, ...]
    inputs: Callable[[Project], list[str]]
    outputs: tuple[str, ...]
    work: Callable[[Job], StageResult]
    wanted: Callable[[Project], bool] = field(default=lambda project: True)


@dataclass(frozen=True, slots=True)
class StageStatus:
    """State of a stage and, unless it is done, why."""

    name: StageName
    state: State
    why: str = ""


def status(project: Project) -> list[StageStatus]:
    """State of every stage, in order, without running anything."""
    now, record = _snapshot(project), _read_record(project)
    return [_status(stage, project, now.fingerprints[stage.name], record) for stage in STAGES]


def model_facts(project: Project) -> dict[str, Any] | None:
    """What the project's model is and needs, from model.json alone; None without one. The model is not opened."""
    path = project.folder / "outputs" / "model" / "model.json"
    if not path.is_file():
        return None
    card = read_json(path)
    return {
        "kind": card.get("kind"), "needs": card.get("needs", []), "features": card.get("features", []),
        "classes": [c.get("name") for c in card.get("classes", [])], "versions": card.get("versions", {}),
        "screening_accuracy": card.get("screening", {}).get("screening_accuracy"),
    }  # fmt: skip


def run(
    job: Job,
    stages: Sequence[StageName] | None = None,
    *,
    force: bool = False,
    done: Callable[[StageName, StageResult | None], None] = lambda name, result: None,
) -> dict[StageName, StageResult | None]:
    """Run the named stages (default: all) that are stale, in order. A stage that is up to date gives None.

    `done` is called after each, so that a caller can show results as they come. Raises LandassayError from whichever
    stage cannot go on; stages before it keep their results and their record.
    """
    results: dict[StageName, StageResult | None] = {}
    for stage in STAGES:
        if (stages is not None and stage.name not in stages) or not stage.wanted(job.project):
            continue
        state = next(s for s in status(job.project) if s.name == stage.name)
        if state.state == "done" and not force:
            results[stage.name] = None
        else:
            _require_earlier(stage, job.project)
            results[stage.name] = _run_stage(stage, job)
        done(stage.name, results[stage.name])
    return results


def _run_stage(stage: Stage, job: Job) -> StageResult:
    for name in {Path(output).parent for output in stage.outputs}:
        if (job.outputs / name).is_dir():
            remove_leftovers(job.outputs / name)
    # Taken before the work: if an input changes meanwhile, the stage counts as stale afterwards.
    before = _snapshot(job.project)
    start = time.perf_counter()
    result = stage.work(job)
    _record(stage, job.project, before, result, time.perf_counter() - start)
    return result


def _require_earlier(stage: Stage, project: Project) -> None:
    for earlier in (s for s in STAGES if s.name in stage.after):
        lacking = [path for path in earlier.outputs if not (project.folder / "outputs" / path).is_file()]
        if lacking and earlier.wanted(project):
            raise DataError(
                f"'{stage.name}' needs the result of '{earlier.name}', which is missing",
                where=str(project.folder / "outputs" / lacking[0]),
                fix=f"run 'landassay {earlier.name}' first, or 'landassay run' for everything",
            )


# --- the stages -----------------------------------------------------------------------------------------------------


def _review(job: Job) -> StageResult:
    training, _, warnings = _training_pixels(job)
    content = inspect_training(training, job.project, job.jobs, job.progress).to_json()
    write_json(job.outputs / "training" / "review.json", content)
    write_review(content, job.outputs / "training", job.project.report.language)
    return StageResult({"suspects": content["suspects"], "separability": content["separability"]}, warnings)


def _train(job: Job) -> StageResult:
    project = job.project
    training, recipe, warnings = _training_pixels(job)
    model = fit_model(training, project, recipe, project.project.seed, job.jobs, job.progress)
    write_pixels(training, job.outputs / "training" / "pixels.parquet", recipe=recipe.to_json())
    save_model(model, job.outputs / "model")
    summary = {
        "polygons": len(training.table), "pixels": len(training.codes), "features": list(recipe.names),
        "screening": model.card["screening"],
    }  # fmt: skip
    known = {warning.what for warning in warnings}
    said = (Problem(text, severity="warning") for text in model.card["warnings"] if text not in known)
    return StageResult(summary, (*warnings, *said))


def _training_pixels(job: Job) -> tuple[TrainingSet, Recipe, tuple[Problem, ...]]:
    project, seed = job.project, job.project.project.seed
    scene = open_scene(project.scene, project)
    recipe = build_recipe(project.features, scene.roles, scene_facts(scene))
    recipe = fit_recipe(recipe, scene, seed, job.progress)
    polygons = read_polygons(project, scene.grid)
    settings = project.training
    caps = PixelCaps(settings.pixels_per_polygon, settings.pixels_per_class, seed=seed)
    training = extract_pixels(polygons, scene, recipe, job.jobs, job.progress, caps=caps)
    return training, recipe, (*scene.warnings, *training.problems)


def _classify(job: Job) -> StageResult:
    project = job.project
    model = load_model(job.outputs / "model")
    scene = open_scene(project.scene, project)
    findings = check_scene(model, scene)
    folder = job.outputs / "map"
    with _map_options(job) as options:
        result = classify_scene(
            model, scene, folder, classes=project.classes, options=options, progress=job.progress
        )
    when, source = time_of([band.path for band in scene.bands])
    item = ItemFacts(identifier(project.project.title), project.project.title, when, source, {})
    files = {**result.files, "areas": folder / "areas.csv"}
    write_item(folder / "item.json", item, scene.grid, files, project.classes)
    summary = {
        "areas": result.areas.to_dict("records"),
        "unmapped_pixels": result.unmapped_pixels,
        "unmapped_m2": result.unmapped_m2,
    }
    return StageResult(summary, (*scene.warnings, *findings))


def map_scenes(job: Job, sources: Sequence[str], folder: Path, *, overwrite: bool = False) -> ManyResult:
    """Map many scenes with the project's model into `folder`. Raises LandassayError if none of it can be begun."""
    _require_earlier(next(stage for stage in STAGES if stage.name == "classify"), job.project)
    scenes = find_scenes(sources, job.project)
    model = load_model(job.outputs / "model")
    with _map_options(job) as options:
        return classify_many(
            model, job.project, scenes, folder, options=options, overwrite=overwrite, progress=job.progress
        )


@contextmanager
def _map_options(job: Job) -> Iterator[MapOptions]:
    options = replace(MapOptions.of(job.project, job.jobs), skip_unreadable=job.skip_unreadable)
    if job.cluster is None:
        yield options
        return
    with cluster(job.cluster) as engine:
        yield replace(options, engine=engine)


def _assess(job: Job) -> StageResult:
    assessment = assess_project(job.project, job.outputs)
    content = assessment.to_json()
    return StageResult(content, tuple(Problem(text, severity="warning") for text in content["warnings"]))


def _report(job: Job) -> StageResult:
    written = write_report(gather_facts(job.project, job.outputs), job.outputs / "report")
    return StageResult({"files": [str(path) for path in written]})


def _scene_inputs(project: Project) -> list[str]:
    return project.scene.files


def _training_inputs(project: Project) -> list[str]:
    return [*_scene_inputs(project), *_with_companions(project, project.training.polygons)]


def _reference_inputs(project: Project) -> list[str]:
    reference = project.reference
    if reference is None:
        return []
    # A sample that was drawn here brings its own design.
    design = reference.design or "outputs/sample/design.json"
    there = reference.design is not None or Path(project.path(design)).is_file()
    return _with_companions(project, reference.points) + ([design] if there else [])


def _with_companions(project: Project, written: str) -> list[str]:
    """A vector file as written, and the files that belong to it: a Shapefile keeps its labels in a .dbf."""
    if not written.lower().endswith(".shp"):
        return [written]
    stem = written[: -len(".shp")]
    return [written] + [stem + end for end in (".dbf", ".shx", ".prj") if Path(project.path(stem + end)).is_file()]


STAGES: tuple[Stage, ...] = (
    Stage(
        "review", (), ("project.title", "project.seed", "scene", "classes", "training", "features", "report.language"),
        _training_inputs, ("training/review.json", "training/review.html"), _review,
    ),
    Stage(
        "train", (), ("project.seed", "scene", "classes", "training", "features", "model"),
        _training_inputs,
        ("training/pixels.parquet", "model/model.skops", "model/model.json"), _train,
    ),
    Stage(
        "classify", ("train",), ("scene", "classes", "map", "report.area_unit"), _scene_inputs,
        ("map/cover.tif", "map/areas.csv"), _classify,
    ),
    Stage(
        "assess", ("classify",),
        ("project.seed", "classes", "reference", "report.confidence_level", "report.interval", "report.area_unit"),
        _reference_inputs,
        ("assessment/assessment.json",), _assess, lambda project: project.reference is not None,
    ),
    Stage("report", ("review", "train", "classify", "assess"), ("project", "classes", "report"), lambda project: [],
          ("report/report.html", "report/report.pdf", "report/tables.xlsx"), _report),
)  # fmt: skip


# --- what is stale --------------------------------------------------------------------------------------------------


def _status(stage: Stage, project: Project, fingerprint: str, record: Mapping[str, Any]) -> StageStatus:
    if not stage.wanted(project):
        return StageStatus(stage.name, "not asked for", "the project file has no section for it")
    lacking = [path for path in stage.outputs if not (project.folder / "outputs" / path).is_file()]
    if lacking:
        return StageStatus(stage.name, "missing", f"outputs/{lacking[0]} is not there")
    known = record.get("stages", {}).get(stage.name, {})
    if known.get("fingerprint") != fingerprint:
        return StageStatus(stage.name, "stale", "its inputs, settings or an earlier stage have changed")
    return StageStatus(stage.name, "done")


@dataclass(frozen=True, slots=True)
class _Snapshot:
    """Inputs (path as written -> size, time of change, SHA-256) and fingerprints of all stages at one moment."""

    inputs: dict[str, dict[str, Any]]
    fingerprints: dict[str, str]


def _snapshot(project: Project) -> _Snapshot:
    known = _read_record(project).get("inputs", {})
    wanted = [stage for stage in STAGES if stage.wanted(project)]
    inputs = {path: _input(project, path, known) for stage in wanted for path in stage.inputs(project)}
    settings = project.model_dump(mode="json")
    fingerprints: dict[str, str] = {}
    for stage in STAGES:
        parts = {
            "version": __version__,
            "settings": {name: _section(settings, name) for name in stage.sections},
            "inputs": {path: inputs[path]["sha256"] for path in stage.inputs(project) if path in inputs},
            "earlier": {name: fingerprints[name] for name in stage.after},
        }
        fingerprints[stage.name] = hashlib.sha256(json.dumps(parts, sort_keys=True).encode()).hexdigest()
    return _Snapshot(inputs, fingerprints)


def _section(settings: Mapping[str, Any], dotted: str) -> Any:  # noqa: ANN401 - any setting
    for key in dotted.split("."):
        settings = settings[key]
    return settings


def _input(project: Project, written: str, known: Mapping[str, Any]) -> dict[str, Any]:
    """Size, time and hash of an input file; the recorded hash is kept while size and time of change are the same."""
    path = project.path(written)
    file = Path(path)
    if path.startswith("/vsi") or "://" in path or not file.is_file():
        # Remote files have no cheap hash: the address stands for the content.
        return {"sha256": None}
    facts = file.stat()
    before: dict[str, Any] = known.get(written, {})
    if before.get("bytes") == facts.st_size and before.get("modified_ns") == facts.st_mtime_ns:
        return before
    digest = _hash_once(file, facts.st_size, facts.st_mtime_ns)
    return {"bytes": facts.st_size, "modified_ns": facts.st_mtime_ns, "sha256": digest}


@cache
def _hash_once(file: Path, size: int, modified_ns: int) -> str:  # size and time are part of the key
    return sha256(file)


def _read_record(project: Project) -> dict[str, Any]:
    path = project.folder / "outputs" / "run.json"
    if not path.is_file():
        return {}
    try:
        return read_json(path)
    except DataError:
        # A damaged record only means that every stage counts as stale; it is written anew by the next run.
        return {}


def _record(stage: Stage, project: Project, before: _Snapshot, result: StageResult, seconds: float) -> None:
    outputs = project.folder / "outputs"
    stages = _read_record(project).get("stages", {})
    stages[stage.name] = {
        "fingerprint": before.fingerprints[stage.name],
        "finished": datetime.now(UTC).isoformat(timespec="seconds"),
        "seconds": round(seconds, 2),
        "outputs": {path: sha256(outputs / path) for path in stage.outputs},
        "warnings": [str(warning) for warning in result.warnings],
    }
    record = {
        "schema": 1,
        "landassay": __version__,
        "project_file": project.file.name,
        "seed": project.project.seed,
        "settings": project.model_dump(mode="json", by_alias=True),
        "versions": {"python": platform.python_version(), **{name: version(name) for name in _LIBRARIES}},
        "system": platform.system(),
        "inputs": before.inputs,
        "stages": stages,
    }
    write_json(outputs / "run.json", record)
