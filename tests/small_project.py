"""A whole project in miniature, made in well under a second: four bands, three classes, a mask, a reference sample."""

from __future__ import annotations

import json
from pathlib import Path

import geopandas as gpd
import numpy as np
import rasterio
from affine import Affine
from shapely.geometry import box

HEIGHT, WIDTH, PIXEL_M = 96, 120, 10.0
TRANSFORM = Affine(PIXEL_M, 0, 500_000, 0, -PIXEL_M, 4_200_000)
CRS = "EPSG:32633"
NAMES = ("Pasture", "Bare soil", "Water")
# Reflectance by class in blue, green, red, near infrared; digital numbers are ten thousand times that.
SPECTRA = np.array([[0.03, 0.07, 0.04, 0.45], [0.12, 0.17, 0.24, 0.32], [0.06, 0.05, 0.03, 0.01]])
ROLES = ("blue", "green", "red", "nir")

PROJECT = """
[project]
title = "A miniature of the Sorrel Basin"
client = "Sorrel Basin Water Board"
seed = 11

[scene.bands]
blue = { file = "bands.tif", band = 1, scale = 0.0001, nodata = 0, wavelength_nm = 490 }
green = { file = "bands.tif", band = 2, scale = 0.0001, nodata = 0, wavelength_nm = 560 }
red = { file = "bands.tif", band = 3, scale = 0.0001, nodata = 0, wavelength_nm = 665 }
nir = { file = "bands.tif", band = 4, scale = 0.0001, nodata = 0, wavelength_nm = 842 }

[scene.mask]
file = "mask.tif"
reject = [3]

[[class]]
code = 1
name = "Pasture"
[[class]]
code = 2
name = "Bare soil"
[[class]]
code = 5
name = "Water"

[training]
polygons = "training.gpkg"
label = "cover"

[features]
indices = ["ndvi"]

[model]
kind = "random forest"
trees = 30
repeats = 1
importance = false

[reference]
points = "reference.gpkg"
label = "observed"
"""


def truth_indices() -> np.ndarray:
    """True class index 0..2 of each pixel (h, w): soil west, pasture east, a lake in the middle."""
    rows, cols = np.mgrid[:HEIGHT, :WIDTH]
    truth = np.where(cols < 55 + 8 * np.sin(rows / 9), 1, 0)
    truth[(rows - 48) ** 2 + (cols - 60) ** 2 < 18**2] = 2
    return truth


def make_small_project(folder: Path, *, project: str = PROJECT) -> Path:
    """Write the project into `folder` (made if needed) and return it."""
    folder.mkdir(parents=True, exist_ok=True)
    random = np.random.default_rng(3)
    truth = truth_indices()
    reflectance = SPECTRA[truth] * random.normal(1, 0.12, (HEIGHT, WIDTH, 1))
    reflectance += random.normal(0, 0.015, (*truth.shape, 4))
    numbers = np.clip(np.moveaxis(reflectance, -1, 0) * 10_000, 1, 65_535).astype(np.uint16)
    numbers[:, :3, :5] = 0
    _write(folder / "bands.tif", numbers)
    mask = np.zeros((1, HEIGHT, WIDTH), dtype=np.uint8)
    mask[0, 70:80, 90:105] = 3
    _write(folder / "mask.tif", mask)
    _training(truth).to_file(folder / "training.gpkg", layer="training")
    _reference(truth, random).to_file(folder / "reference.gpkg", layer="reference")
    (folder / "project.toml").write_text(project, encoding="utf-8")
    return folder


def pixel_box(row: int, col: int, height: int, width: int):
    """A rectangle of whole pixels as a shape."""
    x0, y0 = TRANSFORM @ (col, row)
    x1, y1 = TRANSFORM @ (col + width, row + height)
    return box(x0, y1, x1, y0)


def _training(truth: np.ndarray) -> gpd.GeoDataFrame:
    corners = [(r, c) for r in range(4, 90, 12) for c in range(6, 112, 13)]
    pure = [(r, c) for r, c in corners if np.ptp(truth[r : r + 6, c : c + 6]) == 0]
    return gpd.GeoDataFrame(
        {"cover": [NAMES[truth[r, c]] for r, c in pure]}, geometry=[pixel_box(r, c, 6, 6) for r, c in pure], crs=CRS
    )


def _reference(truth: np.ndarray, random: np.random.Generator) -> gpd.GeoDataFrame:
    chosen = random.choice(HEIGHT * WIDTH, 150, replace=False)
    rows, cols = np.unravel_index(chosen, truth.shape)
    x, y = TRANSFORM @ (cols + 0.5, rows + 0.5)
    labels = truth[rows, cols].copy()
    wrong = random.random(len(labels)) < 0.04
    labels[wrong] = (labels[wrong] + 1) % 3
    return gpd.GeoDataFrame(
        {"id": range(1, len(x) + 1), "observed": [NAMES[i] for i in labels]},
        geometry=gpd.points_from_xy(x, y), crs=CRS,
    )  # fmt: skip


def _write(path: Path, values: np.ndarray) -> None:
    with rasterio.open(
        path, "w", driver="GTiff", count=len(values), height=HEIGHT, width=WIDTH, dtype=values.dtype, crs=CRS,
        transform=TRANSFORM, compress="deflate",
    ) as target:  # fmt: skip
        target.write(values)


def read_json(path: Path) -> dict:
    """A JSON file."""
    return json.loads(path.read_text(encoding="utf-8"))
