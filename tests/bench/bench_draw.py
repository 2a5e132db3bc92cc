"""Drawing 1000 points from a map of 20 000 x 20 000 pixels, against reading the map once."""

from __future__ import annotations

import multiprocessing
import resource
import tempfile
from collections.abc import Callable
from concurrent.futures import ProcessPoolExecutor
from pathlib import Path
from typing import Any

import numpy as np
import rasterio
from affine import Affine
from measure import alternate
from rasterio.windows import Window as RasterWindow
from scipy import ndimage

from classify.assessment.draw import DrawOptions, draw_units, population_of

NAMES = {code: f"class {code}" for code in range(1, 8)}


def make_map(path: Path, size: int) -> None:
    """Smooth patches of seven classes with 4 % of scattered pixels, in tiles as a map is written."""
    random = np.random.default_rng(1)
    field = ndimage.gaussian_filter(random.normal(size=(2000, 2000)), 6, mode="wrap")
    patch = np.digitize(field, np.quantile(field, [0.02, 0.1, 0.3, 0.55, 0.8, 0.95])).astype(np.uint8) + 1
    profile = {"driver": "GTiff", "count": 1, "dtype": "uint8", "height": size, "width": size, "crs": "EPSG:32734",
               "transform": Affine(10, 0, 600_000, 0, -10, 6_500_000), "tiled": True, "blockxsize": 512,
               "blockysize": 512, "compress": "deflate", "nodata": 0}  # fmt: skip
    with rasterio.open(path, "w", **profile) as target:
        for row in range(0, size, 2000):
            for col in range(0, size, 2000):
                part = np.roll(patch, (row // 7, col // 3), (0, 1))
                part[random.random(part.shape) < 0.04] = random.integers(1, 8)
                height, width = min(2000, size - row), min(2000, size - col)
                target.write(part[:height, :width], 1, window=RasterWindow(col, row, width, height))


def read_once(path: Path) -> None:
    with rasterio.Env(GDAL_CACHEMAX=64 << 20), rasterio.open(path) as source:
        for row in range(0, source.height, 512):
            source.read(1, window=RasterWindow(0, row, source.width, min(512, source.height - row)))


def draw(path: Path, jobs: int) -> float:
    """Draw 1000 points; MiB that the process has needed at most."""
    options = DrawOptions(seed=1, jobs=jobs)
    sizes = dict.fromkeys(NAMES.values(), 1000 // 7)
    draw_units(population_of(path, NAMES, options), lambda _: sizes, max(sizes.values()), options)
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024


def alone(work: Callable[..., Any], *args: object) -> Any:
    """What `work` returns in a process of its own, where nothing else takes memory."""
    with ProcessPoolExecutor(1, mp_context=multiprocessing.get_context("spawn")) as pool:
        return pool.submit(work, *args).result()


def rows(quick: bool) -> list[dict[str, object]]:
    size = 4000 if quick else 20_000
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "cover.tif"
        alone(make_map, path, size)
        # Before this process grows: a new one starts with the peak of the one that started it.
        peaks = {f"draw, {jobs} job{'s' * (jobs > 1)}": alone(draw, path, jobs) for jobs in (1, 2)}
        works = {
            "read once": lambda: read_once(path), "draw, 1 job": lambda: draw(path, 1),
            "draw, 2 jobs": lambda: draw(path, 2),
        }  # fmt: skip
        found = alternate(works, repeats=1 if quick else 5)
    return [
        {"work": name, "pixels": size**2, "seconds": s, "times reading": s / found["read once"],
         "peak MiB": peaks.get(name)}
        for name, s in found.items()
    ]  # fmt: skip
