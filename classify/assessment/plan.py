"""A plan for a reference sample: every allocation compared at one size, or at the sizes that reach a target."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from classify.assessment.columns import Labels, faults, numbers, require_columns
from classify.assessment.design import (
    ALLOCATIONS,
    FEWEST,
    Allocation,
    Design,
    Measure,
    PlannedStratum,
    Quantity,
    allocate,
    best_half_width,
    check_design,
    conjectured_make_up,
    least_total,
    pilot_make_up,
)
from classify.assessment.options import TableName
from classify.assessment.reference import read_areas
from classify.errors import DataError, Problem, SampleError, raise_if_errors
from classify.files import read_json, write_json
from classify.settings import Project
from classify.settings.model import M2_PER_UNIT
from classify.tables import read_table

PLAN_CAUTION = (
    "Half-widths are expectations under the conjectured accuracies; those of the sample itself will differ. Where "
    "results decide on rights, payments or safety, agree size and design beforehand with those who will rely on them."
)


@dataclass(frozen=True, slots=True)
class PlanRequest:
    """What is wanted: a number of points, or a half-width of one quantity (as a proportion, or in the unit of area).

    floor: least points per stratum of the allocation "floor". allocation: the one to draw by.
    """

    points: int | None = None
    half_width: float | None = None
    measure: Measure = "overall accuracy"
    class_name: str | None = None
    allocation: Allocation = "floor"
    floor: int = 50


@dataclass(frozen=True, slots=True)
class Plan:
    """The comparison. sizes: points per stratum by allocation. alone: half-width that as many points would buy if they
    served that one quantity only. curve: (points in all, half-width by allocation) of the target quantity."""

    design: Design
    request: PlanRequest
    target: Quantity
    sizes: Mapping[Allocation, tuple[int, ...]]
    alone: tuple[float, ...]
    curve: tuple[tuple[int, Mapping[Allocation, float]], ...]
    area_unit: str
    basis: str

    def half_widths(self, quantity: Quantity) -> dict[Allocation, float]:
        """Expected half-width of a quantity under each allocation."""
        return {how: self.design.half_width(quantity, sizes) for how, sizes in self.sizes.items()}

    def to_json(self) -> dict[str, Any]:
        """Plain data, as in plan.json."""
        names = [s.name for s in self.design.strata]
        quantities = [
            {"quantity": q.measure, "class": q.class_name, "conjectured": q.value, "half_width": self.half_widths(q),
             "half_width_alone": alone}
            for q, alone in zip(self.design.quantities, self.alone, strict=True)
        ]  # fmt: skip
        return {
            "schema": 1, "basis": self.basis, "confidence_level": self.design.level, "area_unit": self.area_unit,
            "target": {"quantity": self.target.measure, "class": self.target.class_name,
                       "half_width": self.request.half_width, "points": self.request.points},
            "chosen": self.request.allocation, "floor": self.request.floor,
            "strata": [{"stratum": s.name, "mapped_as": s.mapped_as, "area": s.area, "pixels": s.pixels,
                        "make_up": dict(zip(self.design.classes, s.make_up, strict=True))} for s in self.design.strata],
            "allocations": {how: dict(zip(names, sizes, strict=True)) for how, sizes in self.sizes.items()},
            "points": {how: sum(sizes) for how, sizes in self.sizes.items()},
            "quantities": quantities,
            "curve": [{"points": n, "half_width": dict(widths)} for n, widths in self.curve],
            "cautions": [PLAN_CAUTION],
        }  # fmt: skip


def make_plan(design: Design, request: PlanRequest, *, area_unit: str = "", basis: str = "") -> Plan:
    """Compare all allocations. Raises SampleError when the strata or the request do not allow it."""
    check_design(design)
    target = design.quantity(request.measure, request.class_name)
    if (request.points is None) == (request.half_width is None):
        raise SampleError("the plan needs either a number of points or a half-width to reach")
    if request.half_width is not None and not request.half_width > 0:
        raise SampleError("a half-width to reach must be more than 0")
    sizes: dict[Allocation, tuple[int, ...]] = {}
    for how in ALLOCATIONS:
        total = request.points
        if total is None:
            assert request.half_width is not None
            total = least_total(design, target, request.half_width, how, floor=request.floor)
        sizes[how] = allocate(design, total, how, floor=request.floor)
    spent = sum(sizes[request.allocation])
    alone = tuple(best_half_width(design, q, spent) for q in design.quantities)
    return Plan(design, request, target, sizes, alone, _curve(design, request, target, spent), area_unit, basis)


def write_plan(plan: Plan, folder: Path) -> Path:
    """Write plan.json into `folder`; returns its path. Raises OutputError."""
    path = folder / "plan.json"
    write_json(path, plan.to_json())
    return path


def read_planned_sizes(path: Path, how: Allocation | None) -> dict[str, int]:
    """Points per stratum of a plan, under the allocation it chose or another. Raises DataError."""
    content = read_json(path)
    try:
        return {str(s): int(n) for s, n in content["allocations"][how or content["chosen"]].items()}
    except (KeyError, TypeError, ValueError, AttributeError) as error:
        raise DataError("this is not a plan of a sample", where=str(path), fix="run 'landassay plan' again") from error


def project_design(
    project: Project, outputs: Path, accuracies: Mapping[str, float], usual: float, pilot: Path | None
) -> tuple[Design, str]:
    """The strata of the project's map with conjectured accuracies, and a sentence on what they rest on.

    accuracies: user's accuracy by class; usual: that of the others. pilot: assessment.json of an earlier sample of the
    same classes, which then gives the make-up instead. Raises DataError, SampleError.
    """
    path = outputs / "map" / "areas.csv"
    areas = read_areas(path)
    areas = areas[areas["area_m2"] > 0]
    unit = M2_PER_UNIT[project.report.area_unit]
    names = [str(name) for name in areas["name"]]
    given = [float(a) / unit for a in areas["area_m2"]]
    pixels = [int(n) for n in areas["pixels"]]
    return _design(names, given, pixels, accuracies, usual, pilot, project.report.confidence_level, str(path))


def table_design(
    path: Path, accuracies: Mapping[str, float], usual: float, pilot: Path | None, level: float
) -> tuple[Design, str]:
    """The same from a table with columns stratum and area, and optional pixels and accuracy, where strata are the map's
    classes. Raises DataError, SampleError."""
    table, name = read_table(path), TableName(str(path), 2)
    require_columns(table, ["stratum", "area"], name)
    labels = Labels.of(table["stratum"])
    areas, problems = numbers(table, "area", name)
    pixels, found = numbers(table, "pixels", name, whole=True)
    users, more = numbers(table, "accuracy", name)
    again = table["stratum"].str.strip().duplicated().to_numpy()
    problems += [*found, *more, *faults(again, labels, "stratum", name, lambda value: f"{value!r} is listed twice")]
    raise_if_errors(problems, SampleError)
    names = [labels.text(i) for i in range(len(table))]
    stated = {n: float(u) for n, u in zip(names, users, strict=True) if np.isfinite(u)}
    counts = [int(n) if np.isfinite(n) else None for n in pixels]
    return _design(names, [float(a) for a in areas], counts, {**stated, **accuracies}, usual, pilot, level, str(path))


def _design(  # noqa: PLR0917 - the parts of a design
    names: Sequence[str], areas: Sequence[float], pixels: Sequence[int | None], accuracies: Mapping[str, float],
    usual: float, pilot: Path | None, level: float, where: str,
) -> tuple[Design, str]:  # fmt: skip
    strange = sorted(set(accuracies) - set(names))
    if strange:
        raise SampleError(f"an accuracy is given for {strange[0]!r}, which is no stratum", where=where,
                          fix=f"strata are {', '.join(map(repr, names))}")  # fmt: skip
    users = [accuracies.get(name, usual) for name in names]
    make_up = conjectured_make_up(areas, users)
    basis = "conjectured user's accuracies; errors fall to the other classes in proportion to their areas"
    if pilot is not None:
        counts = _pilot_counts(pilot, names)
        make_up = pilot_make_up(counts, make_up)
        basis = f"a pilot sample of {int(counts.sum())} points ({pilot.name})"
    strata = tuple(
        PlannedStratum(name, area, shares, name, count)
        for name, area, shares, count in zip(names, areas, make_up, pixels, strict=True)
    )
    design = Design(strata, tuple(names), level)
    check_design(design, where)
    return design, basis


def _pilot_counts(path: Path, names: Sequence[str]) -> np.ndarray[Any, np.dtype[np.int64]]:
    content = read_json(path)
    try:
        classes = [str(c) for c in content["classes"]]
        counts = np.array(content["matrix_counts"], dtype=np.int64).reshape(len(classes), len(classes))
    except (KeyError, TypeError, ValueError) as error:
        raise DataError("this is not an assessment", where=str(path), fix="name an assessment.json") from error
    problems = [Problem(f"the pilot does not know class {n!r}", str(path)) for n in names if n not in classes]
    raise_if_errors(problems, SampleError)
    order = [classes.index(name) for name in names]
    return np.asarray(counts[np.ix_(order, order)])


def _curve(
    design: Design, request: PlanRequest, target: Quantity, spent: int
) -> tuple[tuple[int, Mapping[Allocation, float]], ...]:
    """From a quarter of the points to three times as many, in even steps of their logarithm."""
    least = FEWEST * len(design.strata)
    most = min(
        [3 * spent, *([sum(s.pixels or 0 for s in design.strata)] if all(s.pixels for s in design.strata) else [])]
    )
    steps = np.unique(np.geomspace(max(least, spent / 4), max(least, most), 25).round().astype(int))
    result = []
    for n in steps:
        widths: dict[Allocation, float] = {}
        for how in ALLOCATIONS:
            try:
                widths[how] = design.half_width(target, allocate(design, int(n), how, floor=request.floor))
            except SampleError:
                continue  # more points than one stratum can give under this allocation: its curve ends there
        result.append((int(n), widths))
    return tuple(result)
