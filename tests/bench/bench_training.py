"""Extracting 10 000 polygons from a whole ten-band scene; tuning on one and on all cores; reach of a million pixels."""

from __future__ import annotations

import os
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

import geopandas as gpd
import numpy as np
import rasterio
import rasterio.mask
import shapely
from affine import Affine

from classify.features import build_recipe
from classify.models import ScreenOptions
from classify.models.reach import fit_reach
from classify.models.tuning import choose, draw_settings, load_space
from classify.raster.grid import Window
from classify.raster.scene import Scene, open_scene
from classify.settings import Project, parse_project
from classify.training import PolygonSet, TrainingSet, extract_pixels, read_polygons
from classify.training.pixels import BLOCK_PX
from classify.training.spans import pixels_inside

ROLES = ("blue", "green", "red", "red_edge_1", "red_edge_2", "red_edge_3", "nir", "nir_narrow", "swir_1", "swir_2")
# Polygons that the loop over single masks is timed on; its time is scaled up to all of them.
LOOP_SAMPLE = 400


def make(folder: Path, side_px: int, polygons: int) -> Project:
    random = np.random.default_rng(0)
    tile = random.integers(1000, 1256, (len(ROLES), 512, 512), dtype=np.uint16)
    transform = Affine(10, 0, 600_000, 0, -10, 6_400_000)
    with rasterio.open(
        folder / "scene.tif", "w", driver="GTiff", width=side_px, height=side_px, count=len(ROLES), dtype="uint16",
        crs="EPSG:32734", transform=transform, tiled=True, blockxsize=512, blockysize=512, compress="lzw",
        interleave="band", BIGTIFF="IF_SAFER",
    ) as target:  # fmt: skip
        for row in range(0, side_px, 512):
            for col in range(0, side_px, 512):
                height, width = min(512, side_px - row), min(512, side_px - col)
                shade = np.uint16(7 * ((row + 3 * col) // 512 % 97))
                target.write(tile[:, :height, :width] + shade, window=((row, row + height), (col, col + width)))
    x, y = random.uniform(600_100, 600_000 + 10 * side_px - 200, (2, polygons))
    y -= 600_000 - (6_400_000 - 10 * side_px)
    shapes = [
        shapely.Point(*xy).buffer(r)
        for xy, r in zip(zip(x, y, strict=True), random.uniform(25, 60, polygons), strict=True)
    ]
    labels = random.choice(["a", "b", "c"], polygons)
    gpd.GeoDataFrame({"cover": labels}, geometry=shapes, crs="EPSG:32734").to_parquet(folder / "training.parquet")
    bands = {role: {"file": "scene.tif", "band": number, "scale": 1e-4} for number, role in enumerate(ROLES, start=1)}
    classes = [{"code": code, "name": name} for code, name in enumerate("abc", start=1)]
    data = {
        "project": {"title": "bench"}, "scene": {"bands": bands}, "class": classes,
        "training": {"polygons": "training.parquet", "label": "cover"}, "features": {"indices": ["ndvi", "ndti"]},
    }  # fmt: skip
    return parse_project(data, folder / "project.toml")


def read_touched(scene: Scene, polygons: PolygonSet) -> int:
    """Read every block that a polygon touches, whole, on one core, and do nothing with it."""
    _, row, col = pixels_inside(polygons.frame.geometry.to_numpy(), scene.grid)
    blocks = np.unique(np.stack([row // BLOCK_PX, col // BLOCK_PX], axis=1), axis=0) * BLOCK_PX
    with scene.open() as reader:
        for top, left in blocks.tolist():
            reader.read(
                Window(top, left, min(BLOCK_PX, scene.grid.height - top), min(BLOCK_PX, scene.grid.width - left))
            )
    return len(blocks)


def loop_of_masks(folder: Path, polygons: PolygonSet, count: int) -> None:
    with rasterio.open(folder / "scene.tif") as source:
        for shape in polygons.frame.geometry[:count]:
            values, _ = rasterio.mask.mask(source, [shape], crop=True, filled=False)
            values.reshape(len(ROLES), -1)


def seconds(work: Callable[[], object]) -> float:
    start = time.perf_counter()
    work()
    return time.perf_counter() - start


def extraction(folder: Path, quick: bool) -> tuple[list[dict[str, object]], TrainingSet]:
    side_px, number = (2745, 625) if quick else (10_980, 10_000)
    project = make(folder, side_px, number)
    scene = open_scene(project.scene, project)
    recipe = build_recipe(project.features, scene.roles)
    polygons = read_polygons(project, scene.grid)
    read_touched(scene, polygons)
    # In turn, twice, and the faster of each: both find the file in the system's cache.
    read, extract, all_cores = np.inf, np.inf, np.inf
    cores = os.cpu_count() or 1
    for _ in range(2):
        read = min(read, seconds(lambda: read_touched(scene, polygons)))
        extract = min(extract, seconds(lambda: extract_pixels(polygons, scene, recipe)))
        all_cores = min(all_cores, seconds(lambda: extract_pixels(polygons, scene, recipe, jobs=cores)))
    sampled = min(LOOP_SAMPLE, number)
    loop = seconds(lambda: loop_of_masks(folder, polygons, sampled)) * number / sampled
    table = [
        {"work": "read the touched blocks", "seconds": read, "times reading": 1.0},
        {"work": f"extract {number} polygons, {side_px} px", "seconds": extract, "times reading": extract / read},
        {"work": f"one mask per polygon (from {sampled})", "seconds": loop, "times reading": loop / read},
        {"work": "extraction is faster than the loop by", "times": loop / extract},
        {"work": f"the same with {cores} jobs", "seconds": all_cores, "times": loop / all_cores},
    ]  # fmt: skip
    return table, extract_pixels(polygons, scene, recipe)


def rows(quick: bool) -> list[dict[str, object]]:
    with tempfile.TemporaryDirectory() as folder:
        table, training = extraction(Path(folder), quick)
    few = training.subset(np.arange(len(training.codes)) % max(1, len(training.codes) // 4000) == 0)
    wanted = [
        ("random forest", params) for params in draw_settings("random forest", 3 if quick else 8, 1, load_space())
    ]
    cores = os.cpu_count() or 1
    one, all_of_them = (seconds(lambda jobs=jobs: choose(few, wanted, ScreenOptions(jobs=jobs))) for jobs in (1, cores))
    table.append({"work": f"tuning, {len(wanted)} forests, 1 job", "seconds": one, "times": 1.0})
    table.append(
        {"work": f"tuning, {len(wanted)} forests, {cores} jobs", "seconds": all_of_them, "times": one / all_of_them}
    )
    reach = fit_reach(few)
    assert reach is not None
    pixels = (
        np.random.default_rng(1)
        .normal(0.1, 0.02, (100_000 if quick else 1_000_000, few.features.shape[1]))
        .astype(np.float32)
    )
    reach.of(pixels[:10])
    took = seconds(lambda: reach.of(pixels))
    table.append(
        {"work": f"reach of {len(pixels)} pixels, 1 core", "seconds": took, "us per pixel": 1e6 * took / len(pixels)}
    )
    return table
