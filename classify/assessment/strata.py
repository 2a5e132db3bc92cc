"""The table of strata, checked."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from classify.assessment.columns import Labels, blanks, faults, numbers, require_columns
from classify.assessment.options import AssessmentOptions, TableName
from classify.assessment.sample import NO_LABEL, Stratum
from classify.errors import Problem, SampleError, raise_if_errors

WHOLE_AREA = "whole area"


def read_strata(strata: pd.DataFrame | None, options: AssessmentOptions) -> tuple[Stratum, ...]:
    """Strata in the order of their table; a single one of area 1 where there is no table.

    Columns: stratum and area, or pixels with `options.pixel_area`; optional mapped_as, pixels, clusters. Raises
    SampleError listing every problem.
    """
    if strata is None:
        return (Stratum(WHOLE_AREA, 1.0),)
    name = options.strata
    require_columns(strata, ["stratum"], name)
    labels = Labels.of(strata["stratum"])
    problems = blanks(labels, "stratum", name)
    again = pd.Series(labels.codes).duplicated().to_numpy() & ~labels.blank
    problems += faults(again, labels, "stratum", name, lambda value: f"stratum {value!r} is listed twice")
    pixels, found = numbers(strata, "pixels", name, whole=True)
    problems += found
    clusters, found = numbers(strata, "clusters", name, whole=True)
    problems += found
    areas, found = _areas(strata, pixels, options)
    raise_if_errors([*problems, *found], SampleError)
    if not areas.sum() > 0:
        raise SampleError("the areas of the strata add up to 0", where=name.name)
    mapped = Labels.of(strata["mapped_as"]).renamed(options.merge) if "mapped_as" in strata.columns else None
    return tuple(
        Stratum(
            labels.text(i), float(areas[i]), _whole(pixels[i]), _whole(clusters[i]),
            (mapped.text(i) or None) if mapped else None,
        )
        for i in range(len(strata))
    )  # fmt: skip


def recognise_classes(
    strata: tuple[Stratum, ...],
    stratum: NDArray[np.int64],
    mapped: NDArray[np.int64],
    classes: tuple[str, ...],
    merge: Mapping[str, str],
) -> tuple[Stratum, ...]:
    """Strata that carry the names of classes, and whose points are all mapped so, are those classes of the map."""
    place = {name: i for i, name in enumerate(classes)}
    own = np.array([place.get(merge.get(s.name, s.name), NO_LABEL) for s in strata])
    on_map = mapped != NO_LABEL
    if any(s.mapped_as is not None for s in strata) or not np.array_equal(own[stratum[on_map]], mapped[on_map]):
        return strata
    return tuple(
        s if c == NO_LABEL else replace(s, mapped_as=classes[c]) for s, c in zip(strata, own.tolist(), strict=True)
    )


def mapped_areas(
    strata: tuple[Stratum, ...], classes: tuple[str, ...], options: AssessmentOptions
) -> tuple[float | None, ...]:
    """Mapped area per class: as given, else from strata that are map classes; None where neither says it."""
    given: list[tuple[str, float | None]] = [(options.merge.get(n, n), a) for n, a in options.mapped_area.items()]
    given = given or [(s.mapped_as, s.area) for s in strata if s.mapped_as is not None]
    known: dict[str, float | None] = {}
    for name, area in given:
        before = known.get(name, 0.0)
        known[name] = None if area is None or before is None else before + area
    # Where every stratum is a map class, a class without a stratum is not on the map.
    elsewhere = 0.0 if options.mapped_area or all(s.mapped_as is not None for s in strata) else None
    return tuple(known.get(name, elsewhere) for name in classes)


def _areas(
    strata: pd.DataFrame, pixels: NDArray[np.float64], options: AssessmentOptions
) -> tuple[NDArray[np.float64], list[Problem]]:
    name = options.strata
    if "area" in strata.columns:
        areas, problems = numbers(strata, "area", name)
        return areas, problems or _missing(areas, "area", name)
    if "pixels" not in strata.columns:
        raise SampleError(
            "the table has neither a column 'area' nor 'pixels'", where=name.name,
            fix=f"its columns are {', '.join(map(repr, map(str, strata.columns)))}",
        )  # fmt: skip
    if options.pixel_area is None:
        raise SampleError(
            "strata give pixels, but the area of a pixel is not known", where=name.column("pixels"),
            fix="say it with --pixel-area (in Python: pixel_area), in the unit that results are wanted in",
        )  # fmt: skip
    return pixels * options.pixel_area, _missing(pixels, "pixels", name)


def _missing(values: NDArray[np.float64], column: str, name: TableName) -> list[Problem]:
    return [Problem("the area is missing", name.row(int(i), column)) for i in np.flatnonzero(np.isnan(values))]


def _whole(value: float) -> int | None:
    return None if np.isnan(value) else int(value)
