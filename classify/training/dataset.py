"""The training set as a value: pixels with their polygon, their class and their features; and its file."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
from affine import Affine
from numpy.typing import NDArray
from rasterio.crs import CRS

from classify.errors import DataError, Problem
from classify.files import replacing
from classify.raster.grid import Grid

_SCHEMA = 1
_KEY = b"landassay"
_BAND = "band: "
_PLACE = ("polygon", "code", "row", "col")


@dataclass(frozen=True, eq=False)
class TrainingSet:
    """Labelled pixels, ordered by polygon, row and column.

    features: float32 (n, f), finite. codes: uint8 (n,), class codes. polygon: int32 (n,), numbers of polygons.
    rows, cols: int32 (n,), the pixel on `grid`. feature_names: f names in order. table: one row per polygon, with
    `polygon`, `code`, `class_name`, `area_m2` and counts of pixels: `pixels` (centres inside), `conflicting` (claimed
    by another class as well), `repeated` (counted for another polygon of the class), `invalid` (masked or without a
    feature), `used`; `clear_share` = 1 - invalid / pixels (NaN without pixels); `row`, `col`, the middle.
    reflectance: float32 (n, b), every band of the scene at the same pixels, for the review and for other features; NaN
    where a band that no feature needs has no value. roles: their b roles. wavelengths_nm: their centres, NaN unknown.
    conflicts: `polygon`, `other`, `pixels`, one row per pair of polygons of different classes that overlap.
    """

    features: NDArray[np.float32]
    codes: NDArray[np.uint8]
    polygon: NDArray[np.int32]
    rows: NDArray[np.int32]
    cols: NDArray[np.int32]
    feature_names: tuple[str, ...]
    table: pd.DataFrame
    grid: Grid
    reflectance: NDArray[np.float32]
    roles: tuple[str, ...]
    wavelengths_nm: tuple[float, ...]
    conflicts: pd.DataFrame = field(default_factory=lambda: pd.DataFrame({"polygon": [], "other": [], "pixels": []}))
    problems: tuple[Problem, ...] = ()

    @property
    def class_codes(self) -> NDArray[np.uint8]:
        """Codes that have pixels, ascending, uint8 (k,)."""
        return np.unique(self.codes)

    def by_polygon(self) -> dict[int, slice]:
        """Where each polygon's pixels stand, by polygon number."""
        numbers, first = np.unique(self.polygon, return_index=True)
        return {
            int(number): slice(int(start), int(stop))
            for number, start, stop in zip(numbers, first, [*first[1:], len(self.polygon)], strict=True)
        }

    def subset(self, keep: NDArray[Any]) -> TrainingSet:
        """The same set with only the pixels that `keep` (mask or indices, in order) selects; the table is kept."""
        per_pixel = ("features", "codes", "polygon", "rows", "cols", "reflectance")
        return replace(self, **{name: getattr(self, name)[keep] for name in per_pixel})

    def with_features(self, columns: Sequence[int]) -> TrainingSet:
        """The same pixels with only some features, by their places in order."""
        names = tuple(self.feature_names[place] for place in columns)
        return replace(self, features=np.ascontiguousarray(self.features[:, list(columns)]), feature_names=names)

    def digest(self) -> str:
        """SHA-256 (hexadecimal) of pixels, labels and feature names: equal sets have the same, whatever the file."""
        digest = hashlib.sha256(json.dumps(list(self.feature_names)).encode())
        for array in (self.features, self.codes, self.polygon, self.rows, self.cols):
            digest.update(np.ascontiguousarray(array).tobytes())
        return digest.hexdigest()


def write_pixels(training: TrainingSet, path: Path, recipe: Mapping[str, Any] | None = None) -> None:
    """Write a training set with all that is needed to fit it again elsewhere.

    One column per feature and per band ("band: red") beside `polygon`, `code`, `row`, `col`; polygon table, conflicts,
    grid and `recipe` (its JSON) go into the file's metadata. Raises OutputError.
    """
    columns: dict[str, Any] = dict(
        zip(_PLACE, (training.polygon, training.codes, training.rows, training.cols), strict=True)
    )
    for number, name in enumerate(training.feature_names):
        columns[name] = np.ascontiguousarray(training.features[:, number])
    grid = training.grid
    for number, role in enumerate(training.roles):
        columns[_BAND + role] = np.ascontiguousarray(training.reflectance[:, number])
    extra = {
        "schema": _SCHEMA,
        "features": list(training.feature_names),
        "recipe": recipe,
        "roles": list(training.roles),
        "wavelengths_nm": [None if np.isnan(nm) else nm for nm in training.wavelengths_nm],
        "grid": {"crs": grid.crs.to_wkt(), "transform": list(grid.transform)[:6], "shape_yx": list(grid.shape_yx)},
        "polygons": json.loads(training.table.to_json(orient="records", double_precision=15)),
        "conflicts": json.loads(training.conflicts.to_json(orient="records")),
        "problems": [[p.what, p.where, p.fix, p.severity] for p in training.problems],
    }
    table = pa.table(columns).replace_schema_metadata({_KEY: json.dumps(extra).encode()})
    with replacing(path) as temporary:
        pq.write_table(table, temporary, compression="zstd")


def read_pixels(path: Path) -> TrainingSet:
    """Read what `write_pixels` wrote. Raises DataError."""
    try:
        table = pq.read_table(path)
        extra = json.loads((table.schema.metadata or {})[_KEY])
        if extra["schema"] != _SCHEMA:
            raise DataError(
                f"this file follows schema {extra['schema']}, not {_SCHEMA}", where=str(path), fix="train again"
            )
        place = {name: table[name].to_numpy() for name in _PLACE}
        names = tuple(extra["features"])
        roles = tuple(extra["roles"])
        features = np.stack([table[name].to_numpy() for name in names], axis=1)
        reflectance = np.stack([table[_BAND + role].to_numpy() for role in roles], axis=1)
        grid = Grid(CRS.from_wkt(extra["grid"]["crs"]), Affine(*extra["grid"]["transform"]), *extra["grid"]["shape_yx"])
    except FileNotFoundError as error:
        raise DataError("there is no such file", where=str(path), fix="train first") from error
    except (OSError, pa.ArrowException, KeyError, ValueError, TypeError) as error:
        raise DataError(f"this is not a file of training pixels: {error}", where=str(path)) from error
    return TrainingSet(
        features=features,
        codes=place["code"],
        polygon=place["polygon"],
        rows=place["row"],
        cols=place["col"],
        feature_names=names,
        table=pd.DataFrame(extra["polygons"]),
        grid=grid,
        reflectance=reflectance,
        roles=roles,
        wavelengths_nm=tuple(np.nan if nm is None else nm for nm in extra["wavelengths_nm"]),
        conflicts=pd.DataFrame(extra["conflicts"], columns=["polygon", "other", "pixels"]),
        problems=tuple(Problem(*parts) for parts in extra["problems"]),
    )
