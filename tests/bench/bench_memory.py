"""Peak resident memory of `landassay classify` by size of the scene: a small one repeated, confidence and reach on."""

from __future__ import annotations

import os
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np
import rasterio
from rasterio.windows import Window as RasterWindow

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))
from small_project import HEIGHT, WIDTH, make_small_project

TILE_PX = 512
JOBS = 2


def rows(quick: bool) -> list[dict[str, object]]:
    sides = (1100, 2200) if quick else (5000, 20_000)
    found: list[dict[str, object]] = []
    with tempfile.TemporaryDirectory() as place:
        folder = make_small_project(Path(place) / "project")
        run(folder, "train")
        for side in sides:
            repeat(folder / "bands.tif", side)
            repeat(folder / "mask.tif", side)
            seconds, peak = run(folder, "classify")
            found.append({
                "work": f"landassay classify --jobs {JOBS}, {side} x {side}", "seconds": seconds,
                "pixels/s": side**2 / seconds, "peak MiB": peak,
                "ratio of peaks": round(peak / found[0]["peak MiB"], 2) if found else None,
            })  # fmt: skip
    return found


def run(folder: Path, *command: str) -> tuple[float, float]:
    """Seconds and peak MiB of a command in a process of its own."""
    call = [sys.executable, "-m", "classify", *command, "--project", str(folder), "--jobs", str(JOBS), "--quiet"]
    start = time.perf_counter()
    process = subprocess.Popen(call)
    _, status, usage = os.wait4(process.pid, 0)
    if status:
        raise RuntimeError(f"{command[0]} failed")
    return time.perf_counter() - start, usage.ru_maxrss / 1024


def repeat(path: Path, side: int) -> None:
    """Put the upper left part of a raster side by side with itself until it has `side` rows and columns, in tiles."""
    with rasterio.open(path) as source:
        values, profile = source.read(window=RasterWindow(0, 0, WIDTH, HEIGHT)), source.profile
    tiling = {"tiled": True, "blockxsize": TILE_PX, "blockysize": TILE_PX, "interleave": "pixel"}
    profile |= {"height": side, "width": side, "zlevel": 1, "bigtiff": "if_safer", **tiling}
    strip = np.tile(values, (1, 1 + TILE_PX // HEIGHT, -(-side // WIDTH)))[:, :, :side]
    new = path.with_name("new.tif")
    with rasterio.open(new, "w", **profile) as target:
        for row in range(0, side, TILE_PX):
            height = min(TILE_PX, side - row)
            shifted = np.roll(strip, -row % HEIGHT, axis=1)[:, :height]
            target.write(shifted, window=RasterWindow(0, row, side, height))
    new.replace(path)
