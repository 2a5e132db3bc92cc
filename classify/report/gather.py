"""Read what the stages have written and turn it into `ReportFacts`. The only part of this room that reads a project."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from classify import __version__
from classify.assessment.intervals import Estimate
from classify.assessment.reference import read_areas
from classify.errors import DataError
from classify.files import read_json
from classify.models.card_check import check_card
from classify.report.facts import (
    AccuracyFacts,
    ClassFact,
    Heading,
    MapFact,
    ModelFacts,
    Provenance,
    RegionFact,
    ReportFacts,
    StageKey,
    StratumFact,
)
from classify.report.picture import map_fact, read_logo
from classify.report.sample import sample_facts
from classify.report.scene_picture import scene_layers
from classify.settings import Project
from classify.settings.model import M2_PER_UNIT
from classify.shapes import AssessmentRecord, RunRecord, read_shaped

_MADE_BY: dict[StageKey, str] = {
    "train": "model/model.json", "classify": "map/cover.tif", "assess": "assessment/assessment.json",
}  # fmt: skip


def gather_facts(project: Project, outputs: Path) -> ReportFacts:
    """Everything that `outputs` holds about `project`. A stage that has not run is named in `missing`.

    Raises DataError when a file that is there cannot be read.
    """
    missing = tuple(stage for stage, path in _MADE_BY.items() if not (outputs / path).is_file())
    record = _record(outputs / "run.json", RunRecord, "run") or {}
    classes = _classes(project, outputs)
    card = _card(outputs / _MADE_BY["train"])
    assessment = _record(outputs / _MADE_BY["assess"], AssessmentRecord, "assess")
    sample, points = (None, ()) if assessment is None else sample_facts(project, outputs, assessment)
    return ReportFacts(
        heading=Heading(
            project.project.title,
            project.project.client,
            project.project.author,
            _date(record),
            __version__,
            None if project.report.logo is None else read_logo(Path(project.path(project.report.logo))),
        ),
        language=project.report.language,
        unit=project.report.area_unit,
        level=project.report.confidence_level,
        classes=classes,
        map=None if "classify" in missing else _map(project, outputs / "map", classes),
        accuracy=None if assessment is None else accuracy_facts(assessment, outputs / _MADE_BY["assess"]),
        model=None if card is None else _model(card),
        review=_review(_json(outputs / "training" / "review.json")),
        points=points,
        provenance=_provenance(project, record),
        missing=missing,
        warnings=_warnings(record),
        sections=None if project.report.sections is None else tuple(project.report.sections),
        response_design=project.report.response_design,
        sample=sample,
    )


def accuracy_facts(content: Mapping[str, Any], path: Path) -> AccuracyFacts:
    """The content of assessment.json as values. Raises DataError when something is missing from it."""
    try:
        classes = tuple(str(name) for name in content["classes"])
        return AccuracyFacts(
            evidence=content["evidence"], level=float(content["confidence_level"]), unit=str(content["area_unit"]),
            total_area=float(content["total_area"]), design_kind=str(content["design"]["kind"]), classes=classes,
            strata=tuple(StratumFact(s["stratum"], s["area"], s["n"]) for s in content["design"]["strata"]),
            counts=tuple(tuple(row) for row in content["matrix_counts"]),
            shares=tuple(tuple(row) for row in content["matrix_area_proportions"]),
            overall=_estimate(content["overall_accuracy"]), users=_by_class(content["users_accuracy"], classes),
            producers=_by_class(content["producers_accuracy"], classes), f1=_by_class(content["f1"], classes),
            mapped={name: content["area"][name]["mapped"] for name in classes},
            area=_by_class(content["area"], classes), kappa=_estimate(content["kappa"]),
            quantity=content["quantity_disagreement"], allocation=content["allocation_disagreement"],
            warnings=tuple(content["warnings"]), **_extras(content, classes),
        )  # fmt: skip
    except (KeyError, TypeError, ValueError, AttributeError) as error:
        raise DataError(f"this assessment lacks {error}", where=str(path),
                        fix="run 'landassay assess' again") from error  # fmt: skip


def _extras(content: Mapping[str, Any], classes: Sequence[str]) -> dict[str, Any]:
    """What only some samples have: strata after the draw, clusters, reservations, second labels, points that could not
    be labelled, regions."""
    either, unlabelled = content.get("either_label"), content.get("unlabelled")
    design = content["design"]
    found: dict[str, Any] = {
        "clusters": design["cluster_count"], "post_stratified": bool(design["post_stratified"]),
        "reservations": tuple(design["reservations"]),
    }  # fmt: skip
    if either is not None:
        found["either"] = _estimate(either["overall_accuracy"])
    if unlabelled is not None:
        bounds = unlabelled["overall_accuracy"]
        found["unlabelled"] = int(unlabelled["points"])
        found["unlabelled_bounds"] = (bounds["if_all_wrong"], bounds["if_all_right"])
    found["regions"] = tuple(
        RegionFact(name, r["n"], _estimate(r["overall_accuracy"]), _by_class(r["area"], classes))
        for name, r in content.get("regions", {}).items()
    )
    return found


def _estimate(content: Mapping[str, Any]) -> Estimate:
    keys = ("estimate", "standard_error", "lower", "upper", "interval")
    return Estimate(**{key: content.get(key) for key in keys})


def _by_class(content: Mapping[str, Any], classes: Sequence[str]) -> dict[str, Estimate]:
    return {name: _estimate(content[name]) for name in classes}


def _map(project: Project, folder: Path, classes: Sequence[ClassFact]) -> MapFact:
    return map_fact(folder, classes, scene_layers(project, folder / "cover.tif"))


def _classes(project: Project, outputs: Path) -> tuple[ClassFact, ...]:
    path = outputs / "map" / "areas.csv"
    areas = {row["code"]: row for row in read_areas(path).to_dict("records")} if path.is_file() else {}
    per_unit = M2_PER_UNIT[project.report.area_unit]
    return tuple(
        ClassFact(
            c.code, c.name, c.colour or "#808080", c.material,
            int(areas[c.code]["pixels"]) if c.code in areas else None,
            float(areas[c.code]["area_m2"]) / per_unit if c.code in areas else None,
        )
        for c in project.classes
    )  # fmt: skip


def _model(card: Mapping[str, Any]) -> ModelFacts:
    training = card.get("training", {})
    return ModelFacts(
        kind=str(card.get("kind", "")), features=tuple(card.get("features", ())),
        classes=tuple(str(c["name"]) for c in card.get("classes", ())),
        polygons=training.get("polygons"), pixels=training.get("pixels"), settings=card.get("settings", {}),
        screening=card.get("screening"), calibration=card.get("calibration"), importance=card.get("importance"),
        warnings=tuple(card.get("warnings", ())),
    )  # fmt: skip


def _review(review: Mapping[str, Any] | None) -> dict[str, Any] | None:
    """What the report takes from the training review: spectra by class and how well pairs of classes part."""
    return None if review is None else {key: review[key] for key in ("bands", "classes", "separability")}


def _provenance(project: Project, record: Mapping[str, Any]) -> Provenance:
    stages = record.get("stages", {})
    return Provenance(
        inputs=tuple((path, e.get("bytes"), e.get("sha256")) for path, e in record.get("inputs", {}).items()),
        versions={"landassay": str(record.get("landassay", __version__)), **record.get("versions", {})},
        system=str(record.get("system", "")), seed=project.project.seed,
        # The report's own time is not part of what it reports: the same results give the same document.
        stages=tuple((n, str(s["finished"]), float(s["seconds"])) for n, s in stages.items() if n != "report"),
        settings=project.model_dump(mode="json", by_alias=True, exclude_defaults=True), project_file=project.file.name,
    )  # fmt: skip


def _warnings(record: Mapping[str, Any]) -> tuple[tuple[str, str], ...]:
    """Warnings of stages as recorded, each once; those of the assessment come with the assessment itself."""
    listed = [
        (name, text) for name, stage in record.get("stages", {}).items() if name in ("review", "train", "classify")
        for text in stage.get("warnings", ())
    ]  # fmt: skip
    return tuple({text: (name, text) for name, text in reversed(listed)}.values())[::-1]


def _date(record: Mapping[str, Any]) -> str:
    times = [str(s["finished"]) for name, s in record.get("stages", {}).items() if name != "report"]
    return max(times)[:10] if times else ""


def _json(path: Path) -> dict[str, Any] | None:
    return read_json(path) if path.is_file() else None


def _record(path: Path, shape: type, command: str) -> dict[str, Any] | None:
    return read_shaped(path, shape, fix=f"run 'landassay {command}' again") if path.is_file() else None


def _card(path: Path) -> dict[str, Any] | None:
    card = _json(path)
    if card is not None:
        check_card(card, str(path))
    return card
