"""The whole job under load: 10 000 polygons of 40 classes, 200 features, 100 000 reference points; and a quarter of it.

Each stage runs as a command of its own, so that its peak of resident memory is its own. "growth" is the time over that
of a quarter of the polygons and points; 4 is proportional.
"""

from __future__ import annotations

import tempfile
from itertools import combinations
from pathlib import Path

import geopandas as gpd
import numpy as np
import rasterio
import shapely
from affine import Affine
from bench_memory import run

ROLES = ("blue", "green", "red", "red_edge_1", "red_edge_2", "red_edge_3", "nir", "nir_narrow", "swir_1", "swir_2")
CLASSES, FEATURES, SIDE_PX, PATCH_PX, PIXEL_M = 40, 200, 2000, 20, 10.0
TRANSFORM = Affine(PIXEL_M, 0, 600_000, 0, -PIXEL_M, 6_400_000)
STAGES = ("check --review", "train", "classify", "draw", "assess", "report", "status")


def make(folder: Path, polygons: int, trees: int) -> None:
    """A scene of square patches of one class each; a polygon lies within a patch of its class."""
    random = np.random.default_rng(7)
    patches = random.integers(0, CLASSES, (SIDE_PX // PATCH_PX, SIDE_PX // PATCH_PX))
    spectra = random.uniform(0.02, 0.5, (CLASSES, len(ROLES)))
    truth = np.kron(patches, np.ones((PATCH_PX, PATCH_PX), dtype=np.int64))
    with rasterio.open(
        folder / "scene.tif", "w", driver="GTiff", width=SIDE_PX, height=SIDE_PX, count=len(ROLES), dtype="uint16",
        crs="EPSG:32734", transform=TRANSFORM, tiled=True, compress="lzw", interleave="band",
    ) as target:  # fmt: skip
        for band in range(len(ROLES)):
            values = spectra[truth, band] + random.normal(0, 0.015, truth.shape)
            target.write(np.clip(values * 10_000, 1, 60_000).astype(np.uint16), band + 1)
    np.save(folder / "truth.npy", truth.astype(np.uint8) + 1)
    chosen = random.permutation(patches.size)[:polygons]
    row, col = np.divmod(chosen, patches.shape[1])
    left, top = TRANSFORM.c + (col * PATCH_PX + 6) * PIXEL_M, TRANSFORM.f - (row * PATCH_PX + 6) * PIXEL_M
    shapes = shapely.box(left, top - 50, left + 50, top)
    labels = [f"class {code + 1:02d}" for code in patches[row, col]]
    gpd.GeoDataFrame({"cover": labels}, geometry=shapes, crs="EPSG:32734").to_file(folder / "training.gpkg")
    pairs = list(combinations(ROLES, 2))
    formulas = [f"({a} - {b}) / ({a} + {b})" for a, b in pairs]
    formulas += [f"{a} / {b}" for a, b in pairs] + [f"{b} / {a}" for a, b in pairs] + [f"{a} * {b}" for a, b in pairs]
    formulas += [f"{role} ^ 2" for role in ROLES]
    text = '[project]\ntitle = "Load"\nclient = "Sorrel Basin Water Board"\nseed = 3\n[scene.bands]\n'
    text += "".join(
        f'{role} = {{ file = "scene.tif", band = {band}, scale = 0.0001, nodata = 0 }}\n'
        for band, role in enumerate(ROLES, 1)
    )
    text += "".join(f'[[class]]\ncode = {code}\nname = "class {code:02d}"\n' for code in range(1, CLASSES + 1))
    text += '[training]\npolygons = "training.gpkg"\nlabel = "cover"\n[features]\n[features.formulas]\n'
    text += "".join(f'f{n} = "{formula}"\n' for n, formula in enumerate(formulas[: FEATURES - len(ROLES)]))
    text += f'[model]\nkind = "random forest"\ntrees = {trees}\nrepeats = 1\n'
    (folder / "project.toml").write_text(text, encoding="utf-8")


def label_points(folder: Path) -> None:
    """What an interpreter without fault would say at the points drawn."""
    found = next((folder / "outputs").rglob("points.gpkg"))
    points = gpd.read_file(found).to_crs("EPSG:32734")
    truth = np.load(folder / "truth.npy")
    col, row = (~TRANSFORM) * (points.geometry.x.to_numpy(), points.geometry.y.to_numpy())
    points["observed"] = [f"class {code:02d}" for code in truth[row.astype(int), col.astype(int)]]
    points.to_file(folder / "points.gpkg")
    design = found.with_name("design.json").relative_to(folder).as_posix()
    with (folder / "project.toml").open("a", encoding="utf-8") as project:
        project.write(f'[reference]\npoints = "points.gpkg"\nlabel = "observed"\ndesign = "{design}"\n')


def chain(polygons: int, points: int, trees: int) -> dict[str, tuple[float, float]]:
    found = {}
    with tempfile.TemporaryDirectory() as place:
        folder = Path(place)
        make(folder, polygons, trees)
        for stage in STAGES:
            found[stage] = run(folder, *(f"draw --points {points}" if stage == "draw" else stage).split())
            if stage == "draw":
                label_points(folder)
    return found


def rows(quick: bool) -> list[dict[str, object]]:
    polygons, points, trees = (800, 8000, 20) if quick else (10_000, 100_000, 100)
    part, whole = chain(polygons // 4, points // 4, trees), chain(polygons, points, trees)
    return [
        {
            "work": stage, "polygons": polygons, "points": points, "classes": CLASSES, "features": FEATURES,
            "seconds": whole[stage][0], "peak MiB": whole[stage][1],
            "growth": round(whole[stage][0] / part[stage][0], 2),
        }
        for stage in STAGES
    ]  # fmt: skip
