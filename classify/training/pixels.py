"""From polygons to a training set: claim pixels, settle overlaps, read only the touched blocks, compute features."""

from __future__ import annotations

import threading
from collections.abc import Iterator
from contextlib import ExitStack
from dataclasses import dataclass, replace

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from classify.errors import Problem, TrainingError
from classify.features.facts import scene_facts
from classify.features.recipe import Recipe
from classify.progress import SILENT, Progress
from classify.raster.grid import Window
from classify.raster.reader import Scene, SceneReader
from classify.settings import Project
from classify.threads import stoppable_pool
from classify.training.dataset import TrainingSet
from classify.training.draws import even_draw
from classify.training.polygons import PolygonSet, polygon_list
from classify.training.spans import pixels_inside

BLOCK_PX = 512
# Within a block, features that look at neighbours are computed on tiles of this size, only where polygons are.
_TILE_PX = 64


@dataclass(frozen=True)
class PixelCaps:
    """At most so many pixels per polygon and per class (None: all), drawn evenly over polygons by `seed`."""

    per_polygon: int | None = None
    per_class: int | None = None
    seed: int = 0

    @classmethod
    def of(cls, project: Project) -> PixelCaps:
        """What a project file asks for."""
        settings = project.training
        return cls(settings.pixels_per_polygon, settings.pixels_per_class, project.project.seed)


@dataclass(frozen=True, eq=False)
class _Claims:
    """Pixels claimed by polygons after overlaps are settled. index: row of the frame; int64 (n,) each."""

    index: NDArray[np.int64]
    row: NDArray[np.int64]
    col: NDArray[np.int64]
    table: pd.DataFrame
    conflicts: pd.DataFrame


def extract_pixels(
    polygons: PolygonSet,
    scene: Scene,
    recipe: Recipe,
    jobs: int = 1,
    progress: Progress = SILENT,
    *,
    caps: PixelCaps = PixelCaps(),
) -> TrainingSet:
    """Features of every pixel whose centre lies in a polygon; the same whatever `jobs` is.

    Pixels claimed by two classes are listed and left out; pixels claimed twice by one class count once, for the
    polygon with the lower number. Pixels with a missing or non-finite feature are left out and counted. Raises
    TrainingError when nothing is left, or when a feature has no value anywhere.
    """
    claims = _claim(polygons)
    features, reflectance = _read_features(claims, scene, recipe, jobs, progress)
    finite = np.isfinite(features)
    valid = finite.all(axis=1)
    table = claims.table
    table["invalid"] = np.bincount(claims.index[~valid], minlength=len(table))
    with np.errstate(invalid="ignore"):
        table["clear_share"] = 1 - table["invalid"] / table["pixels"].where(table["pixels"] > 0)
    _refuse_nothing_left(finite, recipe.names)
    frame = polygons.frame
    training = TrainingSet(
        features=features[valid],
        codes=frame["code"].to_numpy(np.uint8)[claims.index[valid]],
        polygon=frame["polygon"].to_numpy(np.int32)[claims.index[valid]],
        rows=claims.row[valid].astype(np.int32),
        cols=claims.col[valid].astype(np.int32),
        feature_names=recipe.names,
        table=table,
        grid=polygons.grid,
        reflectance=reflectance[valid],
        roles=scene.roles,
        wavelengths_nm=_wavelengths_nm(scene),
        conflicts=claims.conflicts,
    )
    training = training.subset(_capped(training, caps))
    used = training.table["polygon"].map(pd.Series(training.polygon).value_counts()).fillna(0).astype(int)
    training.table["used"] = used
    return replace(training, problems=(*polygons.problems, *_findings(training)))


def _wavelengths_nm(scene: Scene) -> tuple[float, ...]:
    """Centre of each role's band, NaN where it has none.

    Bands of further dates have none either: a signature, and what a material must show, is of one date.
    """
    known = scene_facts(scene).wavelengths_nm
    return tuple(np.nan if "@" in role else known.get(role, np.nan) for role in scene.roles)


def _claim(polygons: PolygonSet) -> _Claims:
    frame = polygons.frame
    index, row, col = pixels_inside(frame.geometry.to_numpy(), polygons.grid)
    table = frame[["polygon", "code", "class_name", "area_m2"]].copy()
    count = len(table)
    inside = np.bincount(index, minlength=count)
    table["pixels"] = inside
    with np.errstate(invalid="ignore", divide="ignore"):
        table["row"] = np.bincount(index, row, minlength=count) / inside
        table["col"] = np.bincount(index, col, minlength=count) / inside
    pixel = row * polygons.grid.width + col
    order = np.lexsort((index, pixel))
    pixel, owner = pixel[order], index[order]
    code = frame["code"].to_numpy()[owner]
    first = np.r_[True, pixel[1:] != pixel[:-1]] if len(pixel) else np.zeros(0, dtype=bool)
    group = np.cumsum(first) - 1
    mixed = np.zeros(first.sum(), dtype=bool)
    np.logical_or.at(mixed, group, code != code[first][group])
    conflicting = mixed[group]
    repeated = ~first & ~conflicting
    table["conflicting"] = np.bincount(owner[conflicting], minlength=count)
    table["repeated"] = np.bincount(owner[repeated], minlength=count)
    numbers = frame["polygon"].to_numpy()
    conflicts = _pairs(numbers[owner[conflicting]], code[conflicting], group[conflicting])
    kept = np.sort(order[first & ~conflicting])
    return _Claims(index[kept], row[kept], col[kept], table, conflicts)


def _pairs(numbers: NDArray[np.int32], code: NDArray[np.uint8], group: NDArray[np.int64]) -> pd.DataFrame:
    """Pairs of polygons of different classes that claim the same pixels, with how many."""
    claims = pd.DataFrame({"group": group, "polygon": numbers, "code": code})
    both = claims.merge(claims, on="group", suffixes=("", "_other"))
    both = both[(both["polygon"] < both["polygon_other"]) & (both["code"] != both["code_other"])]
    pairs = both.groupby(["polygon", "polygon_other"], as_index=False).size()
    pairs.columns = pd.Index(["polygon", "other", "pixels"])
    return pairs.sort_values(["pixels", "polygon", "other"], ascending=[False, True, True], ignore_index=True)


def _read_features(
    claims: _Claims, scene: Scene, recipe: Recipe, jobs: int, progress: Progress
) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
    """Features (n, f) and reflectance (n, b), float32, in the order of `claims`; NaN where invalid."""
    across = -(-scene.grid.width // BLOCK_PX)
    block = (claims.row // BLOCK_PX) * across + claims.col // BLOCK_PX
    order = np.argsort(block, kind="stable")
    groups = np.split(order, np.flatnonzero(np.diff(block[order])) + 1) if len(order) else []
    features = np.full((len(block), len(recipe.names)), np.nan, dtype=np.float32)
    reflectance = np.full((len(block), len(scene.roles)), np.nan, dtype=np.float32)
    local = threading.local()
    with ExitStack() as stack, progress.task("Reading training pixels", len(groups)) as task:
        lock = threading.Lock()

        def read(chosen: NDArray[np.int64]) -> None:
            # GDAL handles belong to one thread, so each worker opens the scene for itself, once.
            if not hasattr(local, "reader"):
                with lock:
                    local.reader = stack.enter_context(scene.open())
            row, col = claims.row[chosen], claims.col[chosen]
            features[chosen], reflectance[chosen] = _read_block(row, col, scene, local.reader, recipe)
            task.advance()

        with stoppable_pool(max(jobs, 1)) as pool:
            list(pool.map(read, groups))
    return features, reflectance


def _read_block(
    row: NDArray[np.int64], col: NDArray[np.int64], scene: Scene, reader: SceneReader, recipe: Recipe
) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
    """Features (n, f) and reflectance (n, b) of pixels of one block."""
    window = _bounding(row, col)
    halo = recipe.halo_px
    roles = tuple(dict.fromkeys((*scene.roles, *recipe.needs)))
    layers = reader.read(window, roles=roles, halo_px=halo)
    row, col = row - window.row, col - window.col
    picked = {role: layer[row + halo, col + halo] for role, layer in layers.items()}
    reflectance = np.stack([picked[role] for role in scene.roles], axis=1)
    if halo == 0:
        # Without neighbours a feature depends on its own pixel alone: compute it only where polygons are.
        return recipe.compute({role: picked[role][None, :] for role in recipe.needs})[:, 0, :].T, reflectance
    features = np.empty((len(row), len(recipe.names)), dtype=np.float32)
    for chosen in _tiles(row, col):
        tile = _bounding(row[chosen], col[chosen])
        # `layers` already reach `halo` beyond the window, so a tile grown by the halo starts at its own row and column.
        part = np.s_[tile.row : tile.row + tile.height + 2 * halo, tile.col : tile.col + tile.width + 2 * halo]
        computed = recipe.compute({role: layers[role][part] for role in recipe.needs})
        features[chosen] = computed[:, row[chosen] - tile.row, col[chosen] - tile.col].T
    return features, reflectance


def _tiles(row: NDArray[np.int64], col: NDArray[np.int64]) -> Iterator[NDArray[np.int64]]:
    key = (row // _TILE_PX) * (BLOCK_PX // _TILE_PX + 1) + col // _TILE_PX
    order = np.argsort(key, kind="stable")
    yield from np.split(order, np.flatnonzero(np.diff(key[order])) + 1)


def _bounding(row: NDArray[np.int64], col: NDArray[np.int64]) -> Window:
    first_row, first_col = int(row.min()), int(col.min())
    return Window(first_row, first_col, int(row.max()) - first_row + 1, int(col.max()) - first_col + 1)


def _refuse_nothing_left(finite: NDArray[np.bool_], names: tuple[str, ...]) -> None:
    if not len(finite):
        raise TrainingError(
            "no polygon holds the centre of a pixel, or all their pixels are in conflict",
            fix="draw larger polygons, and do not let polygons of different classes overlap",
        )
    dead = [name for place, name in enumerate(names) if not finite[:, place].any()]
    if len(dead) == len(names):
        raise TrainingError(
            "every training pixel is masked or without data", fix="check the mask codes and where the polygons lie"
        )
    if dead:
        raise TrainingError(
            f"no training pixel has a value for: {', '.join(dead)}",
            fix="remove these features or mend the bands they are made of",
        )
    if not finite.all(axis=1).any():
        raise TrainingError(
            "no training pixel has a value for all features", fix="remove the features that are mostly missing"
        )


def _capped(training: TrainingSet, caps: PixelCaps) -> NDArray[np.int64]:
    kept = np.arange(len(training.codes))
    for numbers, most in ((training.polygon, caps.per_polygon), (training.codes, caps.per_class)):
        if most is None:
            continue
        parts = []
        for number in np.unique(numbers[kept]):
            mine = kept[numbers[kept] == number]
            parts.append(mine[even_draw(training.polygon[mine], most, caps.seed + int(number))])
        kept = np.sort(np.concatenate(parts))
    return kept


def _findings(training: TrainingSet) -> list[Problem]:
    table, found = training.table, []

    def warn(rows: pd.Series[bool], what: str, fix: str) -> None:
        if rows.any():
            found.append(
                Problem(f"{polygon_list(table.loc[rows, 'polygon'])} {what}", "training polygons", fix, "warning")
            )

    warn(table["pixels"] == 0, "holding no pixel centre", "draw them larger than a pixel")
    masked = (table["pixels"] > 0) & (table["clear_share"] == 0)
    warn(masked, "wholly masked or without data", "they add nothing; draw others where the scene is clear")
    half = (table["clear_share"] <= 0.75) & (table["clear_share"] > 0)
    warn(
        half, "with a quarter or more of their pixels masked or without data", "what is left may be haze or cloud edge"
    )
    for pair in training.conflicts.itertuples():
        found.append(
            Problem(
                f"polygons {pair.polygon} and {pair.other} of different classes claim the same pixels ({pair.pixels})",
                "training polygons",
                "these pixels are left out; redraw one of the two, or exclude it",
                "warning",
            )
        )
    return found
