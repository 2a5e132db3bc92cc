"""The lie of the land: random fields, the river, heights, drainage and the light on slopes.

All arrays are float32 on cells of CELL_M, rows downwards, shape (CELL_ROWS, CELL_COLS); lengths are metres from the
upper left corner. The river runs from west to east, north is up and the sun stands in the north.
"""

from __future__ import annotations

import heapq
from dataclasses import dataclass
from functools import cache
from typing import Final

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

Field = NDArray[np.float32]

CELL_M: Final = 5.0
CELL_ROWS, CELL_COLS = 1200, 1400
DAM_X_M: Final = 1750.0  # the dam across the river; the reservoir lies west of it


@dataclass(frozen=True, slots=True)
class Terrain:
    """Where each cell lies, in metres. x, y: from the upper left corner. river: distance from the river's middle.
    across: the same, negative on the northern bank. downstream: x of the nearest place of the river. height. drained:
    catchment in coarse cells."""

    x: Field
    y: Field
    river: Field
    across: Field
    downstream: Field
    height: Field
    drained: Field


def smooth_noise(rng: np.random.Generator, scale_m: float, shape_yx: tuple[int, int] = (CELL_ROWS, CELL_COLS)) -> Field:
    """A random field of unit variance and zero mean that varies over about `scale_m`."""
    step = max(1, round(scale_m / CELL_M / 4))
    coarse = (shape_yx[0] // step + 12, shape_yx[1] // step + 12)
    field = ndimage.gaussian_filter(rng.standard_normal(coarse), scale_m / CELL_M / step / 2.5, mode="wrap")
    if step > 1:
        rows, cols = (_finer(n, step)[:keep] for n, keep in zip(coarse, shape_yx, strict=True))
        field = rows @ field @ cols.T
    field = field[: shape_yx[0], : shape_yx[1]]
    return np.asarray((field - field.mean()) / field.std(), dtype=np.float32)


@cache
def _finer(count: int, step: int) -> NDArray[np.float64]:
    """Matrix that interpolates `count` values to `step` times as many by cubic splines, (count * step, count)."""
    matrix: NDArray[np.float64] = ndimage.zoom(np.eye(count), (step, 1), order=3, mode="grid-wrap", grid_mode=True)
    return matrix


def rough_noise(rng: np.random.Generator, scale_m: float, octaves: int = 5) -> Field:
    """Sum of smooth fields, each finer and weaker than the one before: outlines as of real terrain."""
    total = sum(smooth_noise(rng, scale_m / 2**k) * 0.55**k for k in range(octaves))
    return np.asarray(total / np.std(total), dtype=np.float32)


def river_y(x_m: NDArray[np.float64]) -> NDArray[np.float64]:
    """Distance south (m) of the river's middle at `x_m` metres east."""
    bends = 260 * np.sin(x_m / 610 + 0.4) + 95 * np.sin(x_m / 233 + 1.9) + 45 * np.sin(x_m / 118)
    return np.asarray(2700 + 0.16 * x_m + bends)


def build(rng: np.random.Generator) -> Terrain:
    """A valley with a meandering river between hills that dry streams have cut."""
    y, x = ((np.indices((CELL_ROWS, CELL_COLS)) + 0.5) * CELL_M).astype(np.float32)
    along = np.arange(-200, CELL_COLS * CELL_M + 200, 4.0)
    bank = np.ones((CELL_ROWS, CELL_COLS), dtype=bool)
    cols, rows = (along / CELL_M).astype(int), (river_y(along) / CELL_M).astype(int)
    inside = (cols >= 0) & (cols < CELL_COLS) & (rows >= 0) & (rows < CELL_ROWS)
    bank[rows[inside], cols[inside]] = False
    distance, nearest = ndimage.distance_transform_edt(bank, return_indices=True)
    river = (distance * CELL_M).astype(np.float32)
    across = np.sign(y - nearest[0] * CELL_M).astype(np.float32) * river
    height = _height(river, rough_noise(rng, 1500), x)
    drained = drainage(height)
    height -= 11 * ndimage.gaussian_filter(np.clip(np.log10(drained) - 1.2, 0, 1.6), 9)
    return Terrain(x, y, river, across, (nearest[1] * CELL_M).astype(np.float32), height, drained)


def _height(river_m: Field, relief: Field, x: Field) -> Field:
    valley = 95 * (1 - np.exp(-((river_m / 1150) ** 2)))
    hills = relief * (5 + 58 * (1 - np.exp(-((river_m / 900) ** 2))))
    gorge = 42 * np.exp(-(((x - DAM_X_M) / 330) ** 2)) * (1 - np.exp(-((river_m / 150) ** 2)))
    return np.asarray(valley + hills + gorge + 14 * (1 - x / x.max()), dtype=np.float32)


def drainage(height: Field, step: int = 4) -> Field:
    """Catchment of each place in coarse cells of `step` cells, by flooding the terrain from its rim (priority flood):
    every coarse cell drains to the one from which the flood reached it."""
    coarse = ndimage.gaussian_filter(height, step)[step // 2 :: step, step // 2 :: step]
    rows, cols = coarse.shape
    level = coarse.ravel().tolist()
    parent = [-1] * len(level)
    seen = [min(n // cols, rows - 1 - n // cols, n % cols, cols - 1 - n % cols) == 0 for n in range(len(level))]
    heap = [(level[n], n) for n in range(len(level)) if seen[n]]
    heapq.heapify(heap)
    order = []
    while heap:
        flood, here = heapq.heappop(heap)
        order.append(here)
        row, col = divmod(here, cols)
        for r, c in ((row - 1, col), (row + 1, col), (row, col - 1), (row, col + 1), (row - 1, col - 1),
                     (row - 1, col + 1), (row + 1, col - 1), (row + 1, col + 1)):  # fmt: skip
            there = r * cols + c
            if 0 <= r < rows and 0 <= c < cols and not seen[there]:
                seen[there], parent[there] = True, here
                heapq.heappush(heap, (max(flood, level[there]), there))
    catchment = [1.0] * len(level)
    for here in reversed(order):
        if parent[here] >= 0:
            catchment[parent[here]] += catchment[here]
    grid = np.array(catchment, np.float32).reshape(rows, cols)
    return np.asarray(grid.repeat(step, axis=0).repeat(step, axis=1))


def shade(height: Field) -> Field:
    """Illumination of slopes relative to flat ground, with the sun 40 degrees high in the north-north-east; softened as
    after a terrain correction that leaves some of it in."""
    down_y, down_x = np.gradient(ndimage.gaussian_filter(height, 2.0), CELL_M)
    elevation, azimuth = np.deg2rad(40.0), np.deg2rad(25.0)
    sun = np.sin(elevation), np.cos(elevation) * np.sin(azimuth), -np.cos(elevation) * np.cos(azimuth)
    cosine = (sun[0] - sun[1] * down_x - sun[2] * down_y) / np.sqrt(1 + down_x**2 + down_y**2)
    return np.asarray(np.clip(1 + 0.85 * (cosine / sun[0] - 1), 0.55, 1.35), dtype=np.float32)
