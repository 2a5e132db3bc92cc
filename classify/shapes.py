"""The shapes of records that stages leave for each other: what a later stage takes for granted of a file of JSON.

A record may come from a colleague, a merge of two folders or an editor. It is checked once, where it is read, with one
message; nothing after that has to doubt it. Keys that are not named here may be there as well.
"""

from __future__ import annotations

from functools import cache
from pathlib import Path
from typing import Any, NotRequired

from pydantic import TypeAdapter, ValidationError
from typing_extensions import TypedDict

from classify.errors import DataError
from classify.files import read_json
from classify.text import plain


class _File(TypedDict):
    sha256: str | None
    bytes: NotRequired[int | None]
    modified_ns: NotRequired[int | None]


class _Stage(TypedDict):
    fingerprint: NotRequired[str | None]
    finished: str
    seconds: float
    outputs: NotRequired[dict[str, str | None]]
    warnings: list[str]


class RunRecord(TypedDict, total=False):
    """run.json: what each stage rested on and made."""

    landassay: str
    system: str
    versions: dict[str, str]
    inputs: dict[str, _File]
    results: dict[str, _File]
    stages: dict[str, _Stage]


class _MapDrawnFrom(TypedDict):
    file: str
    sha256: str
    grid: list[float]


class _Unit(TypedDict):
    kind: str
    side_px: int


class _Stratum(TypedDict):
    stratum: str
    area_m2: float
    pixels: int
    n: int


class _Point(TypedDict):
    stratum: str
    row: int
    col: int
    replaced_by: NotRequired[int]
    reason: NotRequired[str]


class Design(TypedDict):
    """design.json: the map, the strata and the place of every point, as `draw` writes them."""

    kind: str
    seed: int
    map: _MapDrawnFrom
    unit: _Unit
    apart_m: float
    strata: list[_Stratum]
    points: dict[str, _Point]
    reserves: dict[str, list[Any]]
    draws: list[dict[str, int]]
    notes: list[str]
    cautions: list[str]


class _Estimate(TypedDict, total=False):
    estimate: float | None
    standard_error: float | None
    lower: float | None
    upper: float | None
    interval: str | None


class _Area(_Estimate):
    mapped: float | None


class _AssessedStratum(TypedDict):
    stratum: str
    area: float
    n: int


class _AssessedDesign(TypedDict):
    kind: str
    strata: list[_AssessedStratum]
    cluster_count: int | None
    post_stratified: bool
    reservations: list[str]


class AssessmentRecord(TypedDict):
    """assessment.json, as far as the report shows it."""

    classes: list[str]
    evidence: str
    confidence_level: float
    area_unit: str
    total_area: float
    design: _AssessedDesign
    matrix_counts: list[list[float]]
    matrix_area_proportions: list[list[float]]
    overall_accuracy: _Estimate
    users_accuracy: dict[str, _Estimate]
    producers_accuracy: dict[str, _Estimate]
    f1: dict[str, _Estimate]
    area: dict[str, _Area]
    kappa: _Estimate
    quantity_disagreement: float | None
    allocation_disagreement: float | None
    warnings: list[str]


def read_shaped(path: Path, shape: type, *, fix: str) -> dict[str, Any]:
    """Read a JSON object and hold it against the shape of a record. fix: what to do if it is another.

    Raises DataError.
    """
    content = read_json(path)
    try:
        _adapter(shape).validate_python(content, strict=True)
    except ValidationError as error:
        first = error.errors(include_url=False, include_input=False)[0]
        place = plain(".".join(map(str, first["loc"])))[:200]
        raise DataError(f"this is not as it was written: {place}: {first['msg']}", where=str(path), fix=fix) from error
    return content


@cache
def _adapter(shape: type) -> TypeAdapter[Any]:
    return TypeAdapter(shape)
