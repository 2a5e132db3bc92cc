"""Reading a scene block by block against the raster library's bare reads of the same files, as stored."""

from __future__ import annotations

import tempfile
from collections.abc import Callable
from functools import partial
from pathlib import Path

import numpy as np
import rasterio
from affine import Affine
from measure import alternate

from classify.raster.scene import Scene, open_scene
from classify.settings import parse_project

SIDE_PX = 2000
BLOCK_PX = 512
FINE = ("blue", "green", "red", "nir")
COARSE = ("red_edge_1", "red_edge_2", "red_edge_3", "nir_narrow", "swir_1", "swir_2")


def make(folder: Path, side_px: int) -> None:
    rng = np.random.default_rng(0)
    for role in (*FINE, *COARSE, "mask"):
        pixel = 10 if role in FINE else 20
        side = side_px * 10 // pixel
        values = rng.integers(1000, 6000, (side, side), dtype=np.uint16)
        if role == "mask":
            values = (values < 1500).astype(np.uint8)
        with rasterio.open(
            folder / f"{role}.tif", "w", driver="GTiff", width=side, height=side, count=1, dtype=values.dtype,
            crs="EPSG:32734", transform=Affine(pixel, 0, 6e5, 0, -pixel, 6.4e6), tiled=True, compress="deflate",
        ) as target:  # fmt: skip
            target.write(values, 1)


def scene_of(folder: Path, **changes: object) -> Scene:
    scene = {"scale": 1e-4, "bands": {role: f"{role}.tif" for role in (*FINE, *COARSE)}, **changes}
    project = parse_project(
        {"project": {"title": "bench"}, "scene": scene, "training": {"polygons": "t", "label": "l"},
         "class": [{"code": 1, "name": "a"}, {"code": 2, "name": "b"}]}, folder / "project.toml",
    )  # fmt: skip
    return open_scene(project.scene, project)


def read_scene(scene: Scene) -> None:
    with scene.open() as reader:
        for window in scene.grid.blocks(BLOCK_PX):
            reader.read(window)


def read_bare(folder: Path) -> None:
    """The same blocks of the same files, as stored, without scale, resampling or mask."""
    for role in (*FINE, *COARSE):
        with rasterio.open(folder / f"{role}.tif") as source:
            step = BLOCK_PX if role in FINE else BLOCK_PX // 2
            for row in range(0, source.height, step):
                for col in range(0, source.width, step):
                    high, wide = min(step, source.height - row), min(step, source.width - col)
                    source.read(1, window=rasterio.windows.Window(col, row, wide, high))


def rows(quick: bool) -> list[dict[str, object]]:
    """Seconds per megapixel of each way to read, and its ratio to bare reads."""
    side = 800 if quick else SIDE_PX
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        make(folder, side)
        mask = {"file": "mask.tif", "reject": [1]}
        cases = {
            "coarser bands by nearest": {"resampling": "nearest"},
            "coarser bands bilinear": {},
            "bilinear, mask": {"mask": mask},
            "bilinear, mask with 100 m buffer": {"mask": {**mask, "buffer_m": 100}},
        }
        works: dict[str, Callable[[], object]] = {"bare reads of the files": partial(read_bare, folder)}
        works |= {label: partial(read_scene, scene_of(folder, **keys)) for label, keys in cases.items()}
        seconds = alternate(works, repeats=2 if quick else 5)
    bare, megapixels = seconds["bare reads of the files"], side**2 / 1e6
    return [
        {"ten bands": label, "seconds": took, "s per megapixel": took / megapixels, "ratio": took / bare}
        for label, took in seconds.items()
    ]
