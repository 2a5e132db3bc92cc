"""The recorded design of a drawn sample, design.json: strata with their areas, and the key from point id to stratum."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from classify.assessment.sample import DESIGN_KINDS, DesignKind
from classify.errors import DataError
from classify.files import read_json


@dataclass(frozen=True, slots=True, eq=False)
class RecordedDesign:
    """How a sample was drawn. strata: columns stratum, area_m2, pixels, clusters (NaN where points were drawn singly).

    stratum_of: point id -> stratum, of all points that are to be labelled. cluster_of: point id -> the segment that was
    drawn as one unit; empty where points were drawn singly. replaced: ids of points that others stand in for.
    """

    kind: DesignKind
    strata: pd.DataFrame
    stratum_of: Mapping[str, str]
    cluster_of: Mapping[str, str]
    replaced: frozenset[str]


def read_design(path: Path) -> RecordedDesign:
    """Read design.json as it was written when the sample was drawn. Raises DataError."""
    content = read_json(path)
    try:
        strata = pd.DataFrame(content["strata"])
        if "clusters" not in strata.columns:
            strata["clusters"] = np.nan
        strata = strata[["stratum", "area_m2", "pixels", "clusters"]].astype({"stratum": str, "area_m2": float})
        points = {str(point): entry for point, entry in content["points"].items()}
        replaced = frozenset(point for point, entry in points.items() if "replaced_by" in entry)
        key = {point: str(entry["stratum"]) for point, entry in points.items() if point not in replaced}
        segments = {point: str(points[point]["segment"]) for point in key if "segment" in points[point]}
        return RecordedDesign(_kind(content), strata, key, segments, replaced)
    except (KeyError, TypeError, ValueError, AttributeError) as error:
        raise DataError(
            f"this is not a recorded design ({type(error).__name__}: {error})", where=str(path),
            fix="name the design.json that was written when the sample was drawn",
        ) from error  # fmt: skip


def _kind(content: Mapping[str, Any]) -> DesignKind:
    """ "stratified random" and the like, by its first words."""
    written = str(content["kind"])
    found = [kind for kind in DESIGN_KINDS if written.startswith(kind)]
    if not found:
        raise ValueError(f"kind {written!r} is none of {', '.join(DESIGN_KINDS)}")
    return found[0]
