"""Three finished projects for tests of the report, written without running the pipeline.

The first carries the worked example of Olofsson et al. 2014 (Remote Sensing of Environment 148, section 5; counts and
mapped areas from memory), the second 25 classes with long and hostile names, the third no reference sample.
"""

from __future__ import annotations

from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import rasterio
from affine import Affine

from classify.assessment import assess_project
from classify.files import write_json
from classify.settings import Project, load_project

TRANSFORM = Affine(30, 0, 500_000, 0, -30, 4_200_000)
CHANGE = ("Deforestation", "Forest gain", "Stable forest", "Stable non-forest")
CHANGE_PIXELS = (200_000, 150_000, 3_200_000, 6_450_000)
CHANGE_COUNTS = ((66, 0, 5, 4), (0, 55, 8, 12), (1, 0, 153, 11), (2, 1, 9, 313))
HOSTILE = (
    "<script>alert(1)</script>", "=1+1", "@SUM(A1)", "Wald & Wiese", '"quoted" \'name\'', "مراعٍ مروية",
    "Forêt mésophile à canopée fermée, régénérée depuis plus de vingt ans", "{braces} *stars* #set $x$ _under_",
    "草地", "Tree 🌳 savanna", "-2+3", "Überschwemmungsfläche",
)  # fmt: skip


def change_project(folder: Path) -> Project:
    """The published worked example."""
    return _finish(folder, "Forest change, Upper Tansy Valley", CHANGE, CHANGE_PIXELS, CHANGE_COUNTS)


def many_classes_project(folder: Path) -> Project:
    """25 classes, hostile and long names, a matrix with a few confusions."""
    names = (*HOSTILE, *(f"Class with a rather long descriptive name, number {i}" for i in range(len(HOSTILE), 25)))
    random = np.random.default_rng(5)
    pixels = tuple(int(value) for value in random.integers(2_000, 400_000, 25))
    counts = np.diag(random.integers(18, 50, 25)) + random.binomial(3, 0.08, (25, 25))
    return _finish(folder, "Ground cover in twenty-five classes <b>&", names, pixels, counts.tolist())


def screening_project(folder: Path) -> Project:
    """Trained and mapped, without a reference sample."""
    return _finish(
        folder, "Ground cover, Sorrel Basin", ("Pasture", "Bare soil", "Water"), (90_000, 55_000, 7_000), None
    )


def _finish(folder, title, names, pixels, counts) -> Project:
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "project.toml").write_text(_toml(title, names, counts is not None), encoding="utf-8")
    project, outputs = load_project(folder), folder / "outputs"
    codes = _map(outputs / "map", project, pixels)
    write_json(outputs / "model" / "model.json", _card(project))
    write_json(outputs / "run.json", _record())
    if counts is not None:
        _sample(folder, project, codes, pixels, counts)
        assess_project(project, outputs)
    return project


def _sample(folder: Path, project: Project, codes: np.ndarray, pixels, counts) -> None:
    """Points on pixels of the map class they were drawn from, labelled so that their matrix is `counts`."""
    random = np.random.default_rng(2)
    names = [c.name for c in project.classes]
    records, strata = [], {}
    for i, row in enumerate(counts):
        rows, cols = np.nonzero(codes == i + 1)
        chosen = random.choice(len(rows), sum(row), replace=len(rows) < sum(row))
        labels = np.repeat(np.arange(len(row)), row)
        for place, label in zip(chosen, labels, strict=True):
            x, y = TRANSFORM @ (cols[place] + 0.5, rows[place] + 0.5)
            records.append((str(len(records) + 1), names[label], x, y))
            strata[records[-1][0]] = {"stratum": names[i]}
    ids, observed, x, y = zip(*records, strict=True)
    frame = gpd.GeoDataFrame({"id": ids, "observed": observed}, geometry=gpd.points_from_xy(x, y), crs="EPSG:32633")
    frame.to_file(folder / "reference.gpkg")
    listed = [
        {"stratum": n, "mapped_as": n, "area_m2": 900.0 * count, "pixels": int(count), "n": sum(row)}
        for n, count, row in zip(names, pixels, counts, strict=True)
    ]
    write_json(folder / "design.json", {"schema": 1, "kind": "stratified random", "strata": listed, "points": strata})


def _toml(title: str, names, with_reference: bool) -> str:
    classes = "\n".join(f"[[class]]\ncode = {i}\nname = {_quoted(n)}" for i, n in enumerate(names, start=1))
    section = '[reference]\npoints = "reference.gpkg"\nlabel = "observed"\ndesign = "design.json"'
    reference = section if with_reference else ""
    return f"""
[project]
title = {_quoted(title)}
client = "Sorrel Basin Water Board"
author = "Land survey desk (invented)"
seed = 7
[scene.bands]
red = "red.tif"
nir = "nir.tif"
{classes}
[training]
polygons = "training.gpkg"
label = "cover"
{reference}
[report]
interval = "normal"
"""


def _quoted(text: str) -> str:
    return '"' + text.replace("\\", "\\\\").replace('"', '\\"') + '"'


def _map(folder: Path, project: Project, pixels) -> np.ndarray:
    """A map of patches whose class shares follow `pixels`, its confidence, and the areas of the whole."""
    height, width = 300, 420
    rows, cols = np.mgrid[:height, :width]
    field = np.sin(rows / 23) + np.cos(cols / 31 + rows / 57) + 0.4 * np.sin(cols / 7) * np.cos(rows / 9)
    edges = np.quantile(field, np.cumsum(pixels) / np.sum(pixels))
    codes = np.minimum(1 + np.searchsorted(edges, field), len(pixels)).astype(np.uint8)
    codes[:30, :50] = 0
    percent = np.clip(40 + 60 * np.abs(np.sin(field * 3)), 0, 100).astype(np.uint8)
    percent[codes == 0] = 255
    folder.mkdir(parents=True, exist_ok=True)
    for name, values, nodata in (("cover", codes, 0), ("confidence", percent, 255)):
        with rasterio.open(
            folder / f"{name}.tif",
            "w",
            driver="GTiff",
            dtype="uint8",
            count=1,
            height=height,
            width=width,
            crs="EPSG:32633",
            transform=TRANSFORM,
            nodata=nodata,
        ) as target:
            target.write(values, 1)
    table = pd.DataFrame({
        "code": [c.code for c in project.classes], "name": [c.name for c in project.classes], "pixels": pixels,
        "area_m2": [900.0 * count for count in pixels], "area": [0.09 * count for count in pixels], "unit": "ha",
    })  # fmt: skip
    table.to_csv(folder / "areas.csv", index=False)
    return codes


def _card(project: Project) -> dict:
    k = len(project.classes)
    counts = (np.diag(np.arange(k) * 7 + 90) + 2).tolist()
    right = [counts[i][i] for i in range(k)]
    return {
        "schema": 1, "kind": "random forest", "needs": ["red", "nir"], "features": ["red", "nir", "ndvi"],
        "recipe": {}, "versions": {}, "model_sha256": "ab" * 32,
        "classes": [{"code": c.code, "name": c.name, "colour": c.colour} for c in project.classes],
        "training": {
            "polygons": 4 * k, "pixels": 200 * k,
            "quantiles": {"values": {name: [0.1, 0.2, 0.3] for name in ("red", "nir", "ndvi")}},
        },
        "settings": {"trees": 300},
        "calibration": {"temperature": 1.2, "error": 0.021},
        "warnings": ["class 'Water' has few polygons"],
        "screening": {
            "evidence": "held-out training polygons", "screening_accuracy": 0.934, "folds": 5, "repeats": 3,
            "kept_whole": "polygons", "held_out_pixels": int(np.sum(counts)), "leaky_split_accuracy": 0.981,
            "class_codes": [c.code for c in project.classes], "counts": counts, "unscreened_codes": [], "notes": [],
            "share_found": [r / sum(row) for r, row in zip(right, counts, strict=True)],
            "share_right": [r / sum(col) for r, col in zip(right, zip(*counts, strict=True), strict=True)],
        },
    }  # fmt: skip


def _record() -> dict:
    stage = {"finished": "2026-06-11T09:30:00+00:00", "seconds": 12.5, "warnings": []}
    return {
        "landassay": "0.1.0", "seed": 7, "system": "Linux", "versions": {"python": "3.12.4", "numpy": "2.1.0"},
        "inputs": {"red.tif": {"bytes": 1234567, "sha256": "ab" * 32}, "/vsicurl/far.tif": {"sha256": None}},
        "stages": {"train": stage, "classify": {**stage, "warnings": ["band red has 3 % no data"]}, "assess": stage},
    }  # fmt: skip
