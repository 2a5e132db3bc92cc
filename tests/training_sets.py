"""Training sets made of normal classes whose polygons differ among themselves, as real ones do."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
from affine import Affine
from rasterio.crs import CRS

from classify.features import Recipe, build_recipe
from classify.raster.grid import Grid
from classify.settings import Project, parse_project
from classify.training import TrainingSet

ROLES = ("blue", "green", "red", "nir")
GRID = Grid(CRS.from_epsg(32633), Affine(10, 0, 500_000, 0, -10, 4_600_000), 400, 400)
CENTRES = np.array(
    [[0.04, 0.08, 0.05, 0.40], [0.12, 0.17, 0.24, 0.32], [0.06, 0.05, 0.03, 0.02], [0.10, 0.15, 0.19, 0.30]]
)


def training_set(
    polygons: tuple[int, ...] = (8, 8, 8), pixels: int = 25, between: float = 0.02, within: float = 0.01, seed: int = 1
) -> TrainingSet:
    """Classes 1, 2, ... with so many polygons each; between, within: spread of polygon means and of their pixels."""
    random = np.random.default_rng(seed)
    codes = np.repeat(np.arange(1, len(polygons) + 1), polygons)
    means = CENTRES[codes - 1] + random.normal(0, between, (len(codes), 4))
    corner = random.integers(0, 390, (len(codes), 2))
    number = np.repeat(np.arange(1, len(codes) + 1), pixels).astype(np.int32)
    place = np.tile(np.arange(pixels), len(codes))
    features = (means[number - 1] + random.normal(0, within, (len(number), 4))).astype(np.float32)
    table = pd.DataFrame(
        {
            "polygon": np.arange(1, len(codes) + 1), "code": codes, "class_name": [f"class {c}" for c in codes],
            "area_m2": 100.0 * pixels, "pixels": pixels, "row": corner[:, 0] + 2.0, "col": corner[:, 1] + 2.0,
            "conflicting": 0, "repeated": 0, "invalid": 0, "clear_share": 1.0, "used": pixels,
        }
    )  # fmt: skip
    return TrainingSet(
        features=features,
        codes=codes[number - 1].astype(np.uint8),
        polygon=number,
        rows=(corner[number - 1, 0] + place // 5).astype(np.int32),
        cols=(corner[number - 1, 1] + place % 5).astype(np.int32),
        feature_names=ROLES,
        table=table,
        grid=GRID,
        reflectance=features.copy(),
        roles=ROLES,
        wavelengths_nm=(490.0, 560.0, 665.0, 842.0),
    )


def project_of(training: TrainingSet, **model: object) -> Project:
    """A project with the classes of a training set and these [model] settings."""
    data = {
        "project": {"title": "t", "seed": 5},
        "scene": {"bands": {role: f"{role}.tif" for role in ROLES}},
        "class": [{"code": int(c), "name": f"class {c}"} for c in np.unique(training.table["code"])],
        "training": {"polygons": "p.gpkg", "label": "cover"},
        "model": {"trees": 20, **model},
    }
    return parse_project(data, Path("project.toml").absolute())


def recipe_of(project: Project) -> Recipe:
    """Its recipe: the four bands."""
    return build_recipe(project.features, ROLES)
