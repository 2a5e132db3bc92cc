"""Stages of a project: what each needs and makes, which are stale, and how they are run in order.

What makes a stage stale is in `record`. A stage rests on the results of earlier ones by content, not by name: after
`train` has made another model, the map is stale; after it has made the same one again, it is not.
"""

from __future__ import annotations

import shutil
import time
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any, Literal

from classify.assessment import assess_project
from classify.errors import DataError, Problem
from classify.features import Recipe, scene_recipe
from classify.files import read_json, write_json
from classify.lock import writing
from classify.mapping.classify_scene import MapOptions, classify_scene
from classify.mapping.engines import cluster
from classify.mapping.many import ManyResult, classify_many, find_scenes, time_of
from classify.mapping.stac import ItemFacts, identifier, rename_item, write_item
from classify.models import check_scene, fit_model, inspect_training, load_model, save_model
from classify.models.card_check import check_card
from classify.progress import SILENT, Progress
from classify.raster.scene import open_scene
from classify.record import Record, Snapshot
from classify.report import gather_facts, write_report, write_review
from classify.settings import Project
from classify.training import PixelCaps, TrainingSet, extract_pixels, read_polygons, write_pixels

StageName = Literal["review", "train", "classify", "assess", "report"]
State = Literal["done", "stale", "missing", "not asked for"]


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
    """What a stage says when it ends: a summary for people and programs, and warnings that travel to the report.

    whole: False if something was left out (unreadable blocks), so that the stage does not count as done.
    """

    summary: dict[str, Any]
    warnings: tuple[Problem, ...] = ()
    whole: bool = True


@dataclass(frozen=True, slots=True)
class Stage:
    """One stage.

    sections: parts of the project file that it reads. inputs: files of the user, as written there. reads: results of
    earlier stages, below outputs/; it cannot run without those in `needs`. outputs: what it always makes; extras: what
    it may make besides. scratch: a folder in which it keeps what it needs to go on after an interruption. renew: brings
    outputs up to date with settings that do not make the stage stale, and says which it changed.
    """

    name: StageName
    sections: tuple[str, ...]
    inputs: Callable[[Project], list[str]]
    outputs: tuple[str, ...]
    work: Callable[[Job], StageResult]
    needs: tuple[str, ...] = ()
    reads: tuple[str, ...] = ()
    extras: tuple[str, ...] = ()
    scratch: str | None = None
    renew: Callable[[Job], tuple[str, ...]] = lambda job: ()
    wanted: Callable[[Project], bool] = field(default=lambda project: True)

    @property
    def results_read(self) -> tuple[str, ...]:
        """All results of earlier stages that it reads."""
        return (*self.needs, *self.reads)


@dataclass(frozen=True, slots=True)
class StageStatus:
    """State of a stage and, unless it is done, why."""

    name: StageName
    state: State
    why: str = ""


def status(project: Project) -> list[StageStatus]:
    """State of every stage, in order, without running anything."""
    record, waiting = Record(project), set[StageName]()
    result = []
    for stage in STAGES:
        found = _own_status(stage, project, record)
        if found.state in ("stale", "missing"):
            waiting.add(stage.name)
        elif found.state == "done" and (before := _earlier(stage) & waiting):
            found = StageStatus(stage.name, "stale", f"it rests on {', '.join(sorted(before))}, to be done again")
            waiting.add(stage.name)
        result.append(found)
    return result


def model_facts(project: Project) -> dict[str, Any] | None:
    """What the project's model is and needs, from model.json alone; None without one. The model is not opened."""
    path = project.folder / "outputs" / "model" / "model.json"
    if not path.is_file():
        return None
    card = read_json(path)
    check_card(card, str(path))
    return {
        "kind": card["kind"], "needs": card["needs"], "features": card["features"],
        "classes": [c["name"] for c in card["classes"]], "versions": card["versions"],
        "screening_accuracy": card["screening"].get("screening_accuracy"),
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
    stage cannot go on; stages before it keep their results and their record. One process at a time: raises OutputError
    while another one writes this project's outputs.
    """
    results: dict[StageName, StageResult | None] = {}
    with writing(job.outputs, job.progress, rooms=_ROOMS):
        for stage in STAGES:
            if (stages is not None and stage.name not in stages) or not stage.wanted(job.project):
                continue
            if not force and _own_status(stage, job.project, Record(job.project)).state == "done":
                results[stage.name] = None
                for output in stage.renew(job):
                    Record(job.project).renewed(stage.name, output)
                if stage.scratch is not None:
                    # Of a run that was interrupted and would have made something else, or the same again.
                    shutil.rmtree(job.outputs / stage.scratch, ignore_errors=True)
            else:
                _require_earlier(stage, job.project)
                results[stage.name] = _run_stage(stage, job)
            done(stage.name, results[stage.name])
    return results


def _run_stage(stage: Stage, job: Job) -> StageResult:
    outdated = [s for s in status(job.project) if s.name in _earlier(stage) and s.state == "stale"]
    before = _snapshot(stage, job.project, Record(job.project))
    start = time.perf_counter()
    result = stage.work(job)
    after = _snapshot(stage, job.project, Record(job.project))
    if after.fingerprint != before.fingerprint:
        result = replace(result, warnings=(*result.warnings, _changed_meanwhile(stage, before, after)), whole=False)
    said = (
        Problem(
            f"'{s.name}' is stale ({s.why}); this rests on its earlier result",
            "",
            "'landassay run' does both",
            "warning",
        )
        for s in outdated
    )
    result = replace(result, warnings=(*result.warnings, *said))
    made = [path for path in (*stage.outputs, *stage.extras) if (job.outputs / path).is_file()]
    Record(job.project).add(
        stage.name, before, made,
        seconds=time.perf_counter() - start, warnings=result.warnings, whole=result.whole,
    )  # fmt: skip
    return result


def _changed_meanwhile(stage: Stage, before: Snapshot, after: Snapshot) -> Problem:
    changed = [path for path, facts in before.inputs.items() if facts["sha256"] != after.digest(path)]
    return Problem(
        f"this was changed while '{stage.name}' read it, so that nobody can tell what the result rests on: it counts "
        "as stale",
        ", ".join(changed) or "results of earlier stages", "once the files are at rest, 'landassay run' does it again",
        "warning",
    )  # fmt: skip


def _require_earlier(stage: Stage, project: Project) -> None:
    for path in stage.needs:
        if not (project.folder / "outputs" / path).is_file():
            earlier = next(s.name for s in STAGES if path in s.outputs)
            raise DataError(
                f"'{stage.name}' needs the result of '{earlier}', which is missing",
                where=str(project.folder / "outputs" / path),
                fix=f"run 'landassay {earlier}' first, or 'landassay run' for everything",
            )


def _earlier(stage: Stage) -> set[StageName]:
    """The stages whose results a stage reads."""
    return {s.name for s in STAGES if set(stage.results_read) & {*s.outputs, *s.extras}}


def _own_status(stage: Stage, project: Project, record: Record) -> StageStatus:
    """State of a stage by what lies there now, whatever earlier stages are yet to do."""
    if not stage.wanted(project):
        return StageStatus(stage.name, "not asked for", "the project file has no section for it")
    lacking = [
        path for path in (*stage.outputs, *record.outputs(stage.name))
        if not (project.folder / "outputs" / path).is_file()
    ]  # fmt: skip
    if lacking:
        return StageStatus(stage.name, "missing", f"outputs/{lacking[0]} is not there")
    if record.fingerprint(stage.name) != _snapshot(stage, project, record).fingerprint:
        return StageStatus(stage.name, "stale", "its inputs, its settings or an earlier result have changed")
    if (altered := record.altered(stage.name)) is not None:
        return StageStatus(stage.name, "stale", f"outputs/{altered} is not as this stage left it")
    return StageStatus(stage.name, "done")


def _snapshot(stage: Stage, project: Project, record: Record) -> Snapshot:
    return record.snapshot(stage.sections, stage.inputs(project), stage.results_read)


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
    project = job.project
    scene = open_scene(project.scene, project)
    recipe = scene_recipe(project, scene, job.progress)
    polygons = read_polygons(project, scene.grid)
    training = extract_pixels(polygons, scene, recipe, job.jobs, job.progress, caps=PixelCaps.of(project))
    return training, recipe, (*scene.warnings, *training.problems)


def _classify(job: Job) -> StageResult:
    project = job.project
    model = load_model(job.outputs / "model")
    scene = open_scene(project.scene, project)
    findings = check_scene(model, scene)
    folder = job.outputs / "map"
    with _map_options(job) as options:
        result = classify_scene(model, scene, folder, classes=project.classes, options=options, progress=job.progress)
    when, source = time_of([band.path for band in scene.bands])
    item = ItemFacts(identifier(_title(job)), _title(job), when, source, {})
    files = {**result.files, "areas": folder / "areas.csv"}
    write_item(folder / "item.json", item, scene.grid, files, project.classes)
    summary = {
        "areas": result.areas.to_dict("records"),
        "unmapped_pixels": result.unmapped_pixels,
        "unmapped_m2": result.unmapped_m2,
    }
    return StageResult(summary, (*scene.warnings, *findings, *result.warnings), whole=not result.unreadable_blocks)


def _title(job: Job) -> str:
    return job.project.project.title


def _name_map(job: Job) -> tuple[str, ...]:
    path = "map/item.json"
    return (path,) if rename_item(job.outputs / path, identifier(_title(job)), _title(job)) else ()


def map_scenes(job: Job, sources: Sequence[str], folder: Path, *, overwrite: bool = False) -> ManyResult:
    """Map many scenes with the project's model into `folder`. Raises LandassayError if none of it can be begun."""
    _require_earlier(next(stage for stage in STAGES if stage.name == "classify"), job.project)
    scenes = find_scenes(sources, job.project)
    model = load_model(job.outputs / "model")
    rooms = [scene.name for scene in scenes]
    with _map_options(job) as options, writing(folder, job.progress, rooms=rooms):
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
        "review", ("project.title", "project.seed", "scene", "classes", "training", "features", "report.language"),
        _training_inputs, ("training/review.json", "training/review.html"), _review,
    ),
    Stage(
        "train", ("project.seed", "scene", "classes", "training", "features", "model"), _training_inputs,
        ("training/pixels.parquet", "model/model.skops", "model/model.json"), _train,
        extras=("model/reach.npz",),
    ),
    Stage(
        "classify", ("scene", "classes", "map", "report.area_unit"), _scene_inputs,
        ("map/cover.tif", "map/areas.csv", "map/item.json"), _classify,
        needs=("model/model.json", "model/model.skops"), reads=("model/reach.npz",),
        extras=("map/confidence.tif", "map/reach.tif", "map/raw.tif", "map/cover.gpkg"), renew=_name_map,
        scratch="map/.unfinished",
    ),
    Stage(
        "assess",
        ("project.seed", "classes", "reference", "report.confidence_level", "report.interval", "report.area_unit"),
        _reference_inputs,
        ("assessment/assessment.json", "assessment/accuracy.csv", "assessment/areas.csv", "assessment/matrix.csv",
         "assessment/strata.csv"), _assess,
        needs=("map/cover.tif", "map/areas.csv"), wanted=lambda project: project.reference is not None,
    ),
    Stage(
        "report", ("project", "classes", "report"),
        lambda project: [project.report.logo] if project.report.logo else [],
        ("report/report.html", "report/report.pdf", "report/tables.xlsx", "report/manifest.json"), _report,
        needs=("model/model.json", "map/cover.tif", "map/areas.csv"),
        reads=("training/review.json", "map/confidence.tif", "map/reach.tif", "assessment/assessment.json"),
        extras=("report/data/facts.json", "report/data/areas.csv", "report/data/points.csv", "report/data/strata.csv",
                "report/data/method.json", "report/data/assessment.json"),
    ),
)  # fmt: skip
_ROOMS = sorted({Path(output).parts[0] for stage in STAGES for output in stage.outputs})
