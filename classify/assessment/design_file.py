"""The recorded design of a drawn sample, design.json: strata with their areas, and the key from point id to stratum."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pandas as pd

from classify.assessment.sample import DESIGN_KINDS, DesignKind
from classify.errors import DataError
from classify.files import read_json


@dataclass(frozen=True, slots=True, eq=False)
class RecordedDesign:
    """How a sample was drawn. strata: columns stratum, area_m2, pixels. stratum_of: point id -> stratum."""

    kind: DesignKind
    strata: pd.DataFrame
    stratum_of: Mapping[str, str]


def read_design(path: Path) -> RecordedDesign:
    """Read design.json as it was written when the sample was drawn. Raises DataError."""
    content = read_json(path)
    try:
        strata = pd.DataFrame(content["strata"])[["stratum", "area_m2", "pixels"]]
        key = {str(point): str(entry["stratum"]) for point, entry in content["points"].items()}
        return RecordedDesign(_kind(content), strata.astype({"stratum": str, "area_m2": float}), key)
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
