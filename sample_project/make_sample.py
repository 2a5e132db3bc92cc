"""Makes the sample project from a seed: the Sorrel Basin, an invented place with invented data.

python make_sample.py [--seed N] [--out FOLDER] [--clean]

Writes scene/*.tif, training.gpkg, planted_faults.json, first_map.tif, reference.gpkg, reference_design.json and
truth.tif into FOLDER (default: beside this file). A second run writes the same bytes. `--clean` leaves the planted
faults out of the training polygons. The project file and spectra.csv are not touched.
"""

from __future__ import annotations

import argparse
import hashlib
import json
from pathlib import Path
from typing import Any, Final

import geopandas as gpd
import numpy as np
import pyogrio
from maker import landscape, reference, scene, training

HERE: Final = Path(__file__).resolve().parent
SEED: Final = 20260611


def build(seed: int = SEED) -> scene.MadeScene:
    """The basin and its scene, nothing written."""
    land = landscape.build(np.random.default_rng((seed, 1)))
    return scene.build(np.random.default_rng((seed, 2)), land, HERE / "spectra.csv")


def write(made: scene.MadeScene, folder: Path, seed: int = SEED, *, clean: bool = False) -> None:
    """Write the scene with its training polygons, first map and reference sample, replacing what is in `folder`."""
    folder.mkdir(parents=True, exist_ok=True)
    scene.write(made, folder)

    good = training.draw(np.random.default_rng((seed, 3)), made)
    polygons, faults = (good, []) if clean else training.plant_faults(good, made)
    write_layer(folder / "training.gpkg", training.frame(polygons))
    write_json(folder / "planted_faults.json", {"schema": 1, "polygons": len(polygons), "faults": faults})

    mapped = reference.first_map(made, training.labels(good, made))
    scene.write_raster(folder / "first_map.tif", mapped, scene.FINE_M, nodata=0)
    drawn = reference.sample(seed, made, mapped)
    drawn.design["map"]["sha256"] = hashlib.sha256((folder / "first_map.tif").read_bytes()).hexdigest()
    write_layer(folder / "reference.gpkg", drawn.points)
    write_json(folder / "reference_design.json", drawn.design)


def write_layer(path: Path, frame: gpd.GeoDataFrame) -> None:
    """A GeoPackage of one layer, without the time of day, so that a second run writes the same bytes."""
    path.unlink(missing_ok=True)
    pyogrio.set_gdal_config_options({"OGR_CURRENT_DATE": "2026-06-11T00:00:00.000Z"})
    try:
        frame.to_file(path, driver="GPKG", layer=path.stem, engine="pyogrio")
    finally:
        pyogrio.set_gdal_config_options({"OGR_CURRENT_DATE": None})


def write_json(path: Path, content: dict[str, Any]) -> None:
    """JSON with \\n line ends on every system."""
    path.write_bytes((json.dumps(content, indent=1, ensure_ascii=False) + "\n").encode("utf-8"))


def main() -> None:
    """Read the command line and make the project."""
    parser = argparse.ArgumentParser(description="Make the data of the sample project from a seed.")
    parser.add_argument("--seed", type=int, default=SEED)
    parser.add_argument("--out", type=Path, default=HERE)
    parser.add_argument("--clean", action="store_true", help="plant no faults among the training polygons")
    given = parser.parse_args()
    write(build(given.seed), given.out, given.seed, clean=given.clean)
    print(f"written to {given.out}")


if __name__ == "__main__":
    main()
