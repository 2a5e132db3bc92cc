"""The pipeline on a large scene: against its parts, by workers, and starting up."""

from __future__ import annotations

import os
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np
import rasterio
from measure import alternate
from rasterio.windows import Window as RasterWindow
from sklearn.ensemble import RandomForestClassifier

BANDS = ("blue", "green", "red", "nir", "swir_1", "swir_2")
CLASSES = 8
PROJECT = """
[project]
title = "Benchmark"
[scene]
scale = 0.0001
[scene.bands]
{bands}
{classes}
[training]
polygons = "none.gpkg"
label = "cover"
[features]
indices = ["ndvi", "ndmi"]
"""

# A process of its own, so that its peak of resident memory is that of this work alone.
CHILD = """
import json, resource, sys, time
from pathlib import Path
folder, jobs, what = Path(sys.argv[1]), int(sys.argv[2]), sys.argv[3]
sys.path.insert(0, {here!r})
import bench_pipeline as bench
model, scene, project = bench.opened(folder)
start = time.perf_counter()
bench.WORKS[what](model, scene, project, folder, jobs)
seconds = time.perf_counter() - start
print(json.dumps([seconds, resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024]))
"""


def rows(quick: bool) -> list[dict[str, object]]:
    side, trees = (1100, 30) if quick else (5000, 200)
    found: list[dict[str, object]] = []
    with tempfile.TemporaryDirectory() as place:
        folder = Path(place)
        make_scene(folder, side)
        make_model(folder, trees)
        works = {"reading alone": (2, "read"), "features and inference alone": (2, "infer")}
        works |= {f"map, jobs {jobs}": (jobs, "map") for jobs in (2, 1, 4)}
        seconds = {}
        for name, (jobs, what) in works.items():
            seconds[name], peak = measured(folder, jobs, what)
            found.append({
                "work": f"{name}, {side} x {side}", "jobs": jobs, "seconds": seconds[name],
                "pixels/s": side * side / seconds[name], "peak MiB": peak,
            })  # fmt: skip
        longer = max(seconds["reading alone"], seconds["features and inference alone"])
        found[2]["share outside the longer"] = round(1 - longer / seconds["map, jobs 2"], 3)
    for command in ("--help", "classify --help", "status --project /nonexistent"):
        call = [sys.executable, "-m", "classify", *command.split()]
        seconds = alternate({"start": lambda call=call: subprocess.run(call, capture_output=True, check=False)})
        found.append({"work": f"landassay {command}", "seconds": seconds["start"]})
    return found


def measured(folder: Path, jobs: int, what: str) -> tuple[float, float]:
    import json

    code = CHILD.format(here=str(Path(__file__).resolve().parent))
    call = [sys.executable, "-c", code, str(folder), str(jobs), what]
    done = subprocess.run(call, stdout=subprocess.PIPE, text=True, check=True, env={**os.environ})
    seconds, peak = json.loads(done.stdout.splitlines()[-1])
    return seconds, peak


def make_scene(folder: Path, side: int) -> None:
    """Six bands of 16 bits in tiles: fields of 40 pixels with noise, a strip without data."""
    random = np.random.default_rng(1)
    levels = random.integers(300, 5000, (CLASSES, len(BANDS)))
    profile = {
        "driver": "GTiff", "dtype": "uint16", "count": len(BANDS), "height": side, "width": side, "nodata": 0,
        "crs": "EPSG:32633", "transform": rasterio.Affine(10, 0, 400_000, 0, -10, 5_000_000), "tiled": True,
        "blockxsize": 512, "blockysize": 512, "compress": "deflate", "zlevel": 1, "interleave": "pixel",
        "bigtiff": "if_safer",
    }  # fmt: skip
    with rasterio.open(folder / "scene.tif", "w", **profile) as target:
        for row in range(0, side, 512):
            height = min(512, side - row)
            fields = random.integers(0, CLASSES, (height // 40 + 1, side // 40 + 1))
            codes = np.kron(fields, np.ones((40, 40), dtype=np.int64))[:height, :side]
            noise = random.normal(0, 200, (height, side, 1)) + random.integers(-150, 150, (height, side, 1))
            values = np.clip(levels[codes] + noise, 1, 10_000).astype(np.uint16)
            values[:, : side // 50] = 0
            target.write(np.moveaxis(values, -1, 0), window=RasterWindow(0, row, side, height))


def make_model(folder: Path, trees: int) -> None:
    import joblib

    random = np.random.default_rng(2)
    bands = "\n".join(f'{role} = {{ file = "scene.tif", band = {i} }}' for i, role in enumerate(BANDS, 1))
    classes = "\n".join(f'[[class]]\ncode = {c}\nname = "Class {c}"' for c in range(1, CLASSES + 1))
    (folder / "project.toml").write_text(PROJECT.format(bands=bands, classes=classes), encoding="utf-8")
    x = random.normal(0.25, 0.12, (20_000, len(BANDS) + 2)).astype(np.float32)
    y = np.digitize(x[:, :3].sum(axis=1) + random.normal(0, 0.08, len(x)), np.linspace(0.4, 1.1, CLASSES - 1)) + 1
    forest = RandomForestClassifier(trees, random_state=0, n_jobs=-1).fit(x, y.astype(np.uint8))
    joblib.dump(forest.set_params(n_jobs=None), folder / "forest.joblib")


def opened(folder: Path):
    import joblib

    from classify.features import build_recipe, scene_facts
    from classify.models import TrainedModel
    from classify.raster.scene import open_scene
    from classify.settings import load_project

    project = load_project(folder)
    scene = open_scene(project.scene, project)
    recipe = build_recipe(project.features, scene.roles, scene_facts(scene))
    card = {"calibration": {"temperature": 0.8}, "classes": []}
    model = TrainedModel(joblib.load(folder / "forest.joblib"), card, recipe)
    model.predict_both(np.zeros((70, len(recipe.names)), dtype=np.float32))  # compiled before the clock starts
    return model, scene, project


def _map(model, scene, project, folder, jobs) -> None:
    from classify.mapping.classify_scene import MapOptions, classify_scene

    out = folder / f"map_{time.time_ns()}"
    classify_scene(model, scene, out, classes=project.classes, options=MapOptions(jobs=jobs))


def _read(model, scene, project, folder, jobs) -> None:
    from classify.mapping.blocks import BlockWork

    work = BlockWork(model, scene)
    _in_threads(work.read, list(scene.grid.blocks(512)), jobs)


def _infer(model, scene, project, folder, jobs) -> None:
    """Features and inference of as many blocks as the scene has, of one block in memory."""
    from classify.mapping.blocks import BlockWork
    from classify.raster.grid import Window

    work = BlockWork(model, scene, ("cover", "confidence"))
    middle = Window(scene.grid.height // 2 - 256, scene.grid.width // 2 - 256, 512, 512)
    bands = work.read(middle)
    count = -(-scene.grid.height * scene.grid.width // 512**2)
    _in_threads(lambda number: work.compute(number, middle, dict(bands)), list(range(count)), jobs)


def _in_threads(work, items, jobs) -> None:
    from concurrent.futures import ThreadPoolExecutor

    with ThreadPoolExecutor(jobs) as pool:
        for _ in pool.map(work, items):
            pass


WORKS = {"map": _map, "read": _read, "infer": _infer}
