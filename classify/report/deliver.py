"""The folder that is handed over: the documents, the tables their numbers come from, and a manifest of fingerprints.

`data/` holds what a reader needs to derive every number again: the labelled points and strata (or the matrix), how they
were assessed, the result, and the facts that the documents were set from.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, fields
from pathlib import Path
from typing import Any

import pandas as pd

from classify.assessment.intervals import Estimate
from classify.files import read_json, sha256, write_json, write_text
from classify.report.facts import (
    AccuracyFacts,
    ClassFact,
    Heading,
    ModelFacts,
    Provenance,
    RegionFact,
    ReportFacts,
    StratumFact,
)
from classify.tables import csv_text

MANIFEST = "manifest.json"
FACTS, ASSESSMENT, METHOD = "data/facts.json", "data/assessment.json", "data/method.json"
POINTS, STRATA, AREAS = "data/points.csv", "data/strata.csv", "data/areas.csv"
# Pictures and what is drawn from them are checked by fingerprint alone.
_NOT_STORED = ("map", "points", "sample")


def write_data(facts: ReportFacts, folder: Path) -> list[Path]:
    """Write the tables that the report's numbers come from. Returns the paths. Raises OutputError."""
    content = {f.name: getattr(facts, f.name) for f in fields(facts) if f.name not in _NOT_STORED}
    plain = {name: asdict(v) if hasattr(v, "__dataclass_fields__") else v for name, v in content.items()}
    plain["heading"].pop("logo")
    plain["classes"] = [asdict(c) for c in facts.classes]
    written = [folder / FACTS]
    write_json(written[0], {"schema": 1, **plain})
    if facts.map is not None:
        areas = pd.DataFrame([(c.code, c.name, c.pixels, c.mapped, facts.unit) for c in facts.classes],
                             columns=["code", "name", "pixels", "area", "unit"])  # fmt: skip
        written.append(_csv(folder / AREAS, areas))
    if facts.sample is not None:
        written += [_csv(folder / POINTS, facts.sample.points), _csv(folder / STRATA, facts.sample.strata)]
        write_json(folder / METHOD, facts.sample.method)
        write_json(folder / ASSESSMENT, facts.sample.assessment)
        written += [folder / METHOD, folder / ASSESSMENT]
    return written


def write_manifest(folder: Path, written: list[Path]) -> Path:
    """Write the fingerprints of all delivered files. Raises OutputError."""
    listed = {path.relative_to(folder).as_posix(): sha256(path) for path in sorted(written)}
    write_json(folder / MANIFEST, {"schema": 1, "files": listed})
    return folder / MANIFEST


def read_facts(folder: Path) -> ReportFacts:
    """The facts of a delivered report, without its pictures and points. Raises DataError."""
    content = read_json(folder / FACTS)
    accuracy, model = content["accuracy"], content["model"]
    return ReportFacts(
        heading=Heading(**content["heading"]),
        language=content["language"], unit=content["unit"], level=content["level"],
        classes=tuple(ClassFact(**c) for c in content["classes"]), map=None,
        accuracy=None if accuracy is None else _accuracy(accuracy),
        model=None if model is None else ModelFacts(**_tuples(model)),
        review=content["review"], points=(), provenance=_provenance(content["provenance"]),
        missing=tuple(content["missing"]), warnings=tuple((s, t) for s, t in content["warnings"]),
        sections=None if content["sections"] is None else tuple(content["sections"]),
        response_design=content["response_design"],
    )  # fmt: skip


def _csv(path: Path, table: pd.DataFrame) -> Path:
    write_text(path, csv_text(table))
    return path


def _accuracy(content: Mapping[str, Any]) -> AccuracyFacts:
    plain = dict(content)
    for key in ("users", "producers", "f1", "area"):
        plain[key] = {name: Estimate(**value) for name, value in content[key].items()}
    for key in ("overall", "kappa"):
        plain[key] = Estimate(**content[key])
    for key in ("counts", "shares"):
        plain[key] = tuple(tuple(row) for row in content[key])
    if content["either"] is not None:
        plain["either"] = Estimate(**content["either"])
    plain["regions"] = tuple(
        RegionFact(r["region"], r["n"], Estimate(**r["overall"]), {n: Estimate(**a) for n, a in r["area"].items()})
        for r in content["regions"]
    )
    plain["strata"] = tuple(StratumFact(**s) for s in content["strata"])
    return AccuracyFacts(**_tuples(plain))


def _provenance(content: Mapping[str, Any]) -> Provenance:
    plain = dict(content)
    plain["inputs"] = tuple(tuple(row) for row in content["inputs"])
    plain["stages"] = tuple(tuple(row) for row in content["stages"])
    return Provenance(**plain)


def _tuples(content: Mapping[str, Any]) -> dict[str, Any]:
    return {key: tuple(value) if isinstance(value, list) else value for key, value in content.items()}
