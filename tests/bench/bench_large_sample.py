"""A sample of 100 000 points in 40 classes: drawn, labelled elsewhere and taken in, exported, assessed, and paged.

Each step is done for a tenth of the points too: "times the tenth" is 10 where time grows with the number of points, 100
where it would grow with its square. Memory is that of a process of its own.
"""

from __future__ import annotations

import resource
import tempfile
import time
from collections.abc import Callable
from concurrent.futures import ProcessPoolExecutor
from multiprocessing import get_context
from pathlib import Path

import numpy as np
import pandas as pd
import rasterio
from affine import Affine

from classify.assessment.design_file import read_design
from classify.assessment.draw import DrawOptions
from classify.assessment.project_sample import SampleRequest, add_to_sample, draw_sample
from classify.assessment.reference import assess_project
from classify.interpret.export import export_labels
from classify.interpret.import_labels import import_labels
from classify.interpret.journal import Label
from classify.interpret.session import open_session
from classify.raster.scene import open_scene
from classify.settings import Project, load_project

CLASSES = 40


def make_project(folder: Path, size: int) -> Project:
    """A scene of one band and a map of 40 classes in patches of 50 pixels."""
    random = np.random.default_rng(1)
    patches = random.integers(1, CLASSES + 1, (size // 50, size // 50)).astype(np.uint8)
    codes = np.kron(patches, np.ones((50, 50), np.uint8))
    profile = {"driver": "GTiff", "count": 1, "height": size, "width": size, "crs": "EPSG:32734", "tiled": True,
               "transform": Affine(10, 0, 600_000, 0, -10, 6_500_000), "compress": "deflate"}  # fmt: skip
    (folder / "outputs" / "map").mkdir(parents=True)
    for name, values in (("outputs/map/cover.tif", codes), ("red.tif", codes.astype(np.uint16) * 100)):
        with rasterio.open(folder / name, "w", dtype=values.dtype, nodata=0, **profile) as target:
            target.write(values, 1)
    count = np.bincount(codes.ravel(), minlength=CLASSES + 1)
    rows = [f"{code},class {code},{count[code]},{count[code] * 100}" for code in range(1, CLASSES + 1)]
    (folder / "outputs/map/areas.csv").write_text("code,name,pixels,area_m2\n" + "\n".join(rows) + "\n")
    classes = "\n".join(f'[[class]]\ncode = {code}\nname = "class {code}"' for code in range(1, CLASSES + 1))
    (folder / "project.toml").write_text(
        '[project]\ntitle = "A large sample"\n[scene.bands]\n'
        'red = { file = "red.tif", scale = 0.0001, nodata = 0, wavelength_nm = 665 }\n'
        f'{classes}\n[training]\npolygons = "none.gpkg"\nlabel = "cover"\n'
        '[reference]\npoints = "outputs/sample/reference.gpkg"\nlabel = "observed"\n'
    )
    return load_project(folder)


def labels(folder: Path) -> Path:
    """What somebody labelled elsewhere: nine in ten as mapped."""
    design = read_design(folder / "outputs/sample/design.json")
    table = pd.read_csv(folder / "outputs/sample/points.csv")
    wrong = np.random.default_rng(2).random(len(table)) < 0.1
    mapped = [design.stratum_of[str(i)] for i in table["id"]]
    path = folder / "field.csv"
    table.assign(observed=np.where(wrong, "class 7", mapped)).to_csv(path, index=False)
    return path


def steps(folder: Path, points: int) -> dict[str, Callable[[], object]]:
    """The steps in their order, each of which finds what those before have left."""
    project, outputs = load_project(folder), folder / "outputs"

    def page() -> None:
        session = open_session(project, outputs, open_scene(project.scene, project).grid, "Ada")
        assert len(session.overview()["points"]) == points + points // 10
        for i in list(session.places)[:100]:
            seen = session.said(i)["revision"]
            session.label(i, Label("class 7"), seen)
        for _ in range(100):
            session.journal.undo()
        session.journal.close()

    return {
        "draw": lambda: draw_sample(project, outputs, SampleRequest(DrawOptions(seed=1), points)),
        "add a tenth": lambda: add_to_sample(project, outputs, points // 10, 1),
        "import": lambda: import_labels(project, outputs, labels(folder), "Ada"),
        "import another's": lambda: import_labels(project, outputs, folder / "field.csv", "Bea"),
        "export": lambda: export_labels(outputs, [c.name for c in project.classes]),
        "assess": lambda: assess_project(project, outputs),
        "page: list, 100 labels, 100 undone": page,
    }


def run(folder: Path, points: int) -> tuple[dict[str, float], float]:
    """Seconds of each step, and MiB that the process has needed at most."""
    seconds = {}
    for name, step in steps(folder, points).items():
        start = time.perf_counter()
        step()
        seconds[name] = time.perf_counter() - start
    return seconds, resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024


def rows(quick: bool) -> list[dict[str, object]]:
    points, found = 10_000 if quick else 100_000, []
    for number in (points // 10, points):
        with tempfile.TemporaryDirectory() as name, ProcessPoolExecutor(1, mp_context=get_context("spawn")) as pool:
            pool.submit(make_project, Path(name), 1000 if quick else 4000).result()
            found.append(pool.submit(run, Path(name), number).result())
    (tenth, _), (whole, peak) = found
    return [
        {"step": step, "points": points, "seconds": s, "times the tenth": s / tenth[step], "peak MiB": peak}
        for step, s in whole.items()
    ]
