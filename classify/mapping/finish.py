"""From stored blocks to delivered files: the tidied map, COGs, polygons, areas."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path

import pandas as pd

from classify.files import replacing
from classify.mapping.blocks import NO_CLASS, NO_PERCENT, Count, LayerName, Tally, add_up, tally
from classify.mapping.byte_raster import ByteRaster
from classify.mapping.tidy import TidyOptions, tidy
from classify.mapping.unfinished import Unfinished, write_errors
from classify.mapping.vector import write_polygons
from classify.mapping.writer import Layer, write_cog
from classify.progress import Progress
from classify.raster.grid import Window
from classify.settings import ClassSettings
from classify.settings.model import M2_PER_UNIT
from classify.tables import csv_text
from classify.threads import stoppable_pool


@dataclass(frozen=True, slots=True)
class Delivery:
    """What is to be delivered: classes, how the map is tidied, whether as polygons too, unit of areas, threads."""

    classes: Sequence[ClassSettings]
    tidy: TidyOptions
    polygons: bool
    area_unit: str
    jobs: int


@dataclass(frozen=True, slots=True)
class Delivered:
    """Paths by layer, areas by class, what is without a class, and tallies of the delivered map by block."""

    files: Mapping[str, Path]
    areas: pd.DataFrame
    unmapped: Count
    tallies: Sequence[Tally]


def deliver(
    store: Unfinished, folder: Path, windows: Sequence[Window], wanted: Delivery, progress: Progress
) -> Delivered:
    """Write every file of the map into `folder`, each whole or not at all. Raises OutputError, SettingsError."""
    rasters: dict[str, ByteRaster] = {name: store.raster(name) for name in store.layers}
    layers = {name: layer_of(name, wanted.classes) for name in store.layers}
    tallies = [store.tallies[number] for number in range(len(windows))]
    delivered: dict[str, tuple[ByteRaster, Layer]] = {name: (rasters[name], layers[name]) for name in store.layers}
    if wanted.tidy:
        delivered["raw"] = rasters["cover"], layers["cover"]
        with write_errors(folder):
            final = tidy(rasters["cover"], store.folder, wanted.tidy, jobs=wanted.jobs, progress=progress)
            tallies = _tallies(store, final, windows, tallies, wanted.jobs)
        tags = {**layers["cover"].tags, "TIDIED": str(wanted.tidy)}
        delivered["cover"] = final, replace(layers["cover"], description="cover class, tidied", tags=tags)
    files = {name: folder / f"{name}.tif" for name in delivered}
    with progress.task("Writing the map", len(files)) as task:
        for name, (raster, layer) in delivered.items():
            write_cog(raster, files[name], layer)
            task.advance()
    if wanted.polygons:
        files["polygons"] = folder / "cover.gpkg"
        write_polygons(delivered["cover"][0], files["polygons"], wanted.classes, wanted.area_unit, progress)
    _remove_old(folder, files)
    total = add_up(tallies)
    areas = _area_table(total, wanted.classes, wanted.area_unit, reach="reach" in store.layers)
    with replacing(folder / "areas.csv") as temporary:
        temporary.write_bytes(csv_text(areas).encode())
    return Delivered(files, areas, total.get(NO_CLASS, Count(NO_CLASS, 0, 0.0, 0)), tallies)


def layer_of(name: LayerName, classes: Sequence[ClassSettings]) -> Layer:
    """How a layer is stored; the class map carries colours and names."""
    if name == "confidence":
        return Layer(NO_PERCENT, "average", "probability that the model gives to the mapped class, percent")
    if name == "reach":
        description = "distance from the training data in percent of the threshold: above 100 is beyond their reach"
        return Layer(NO_PERCENT, "average", description)
    return Layer(
        nodata=NO_CLASS,
        overviews="mode",
        description="cover class",
        colours={c.code: c.colour or "#808080" for c in classes},
        categories={NO_CLASS: "no data", **{c.code: c.name for c in classes}},
        tags={f"CLASS_{c.code}": c.name for c in classes},
    )


def _tallies(
    store: Unfinished, cover: ByteRaster, windows: Sequence[Window], computed: Sequence[Tally], jobs: int
) -> list[Tally]:
    """Tallies of the tidied map."""

    def one(window: Window, before: Tally) -> Tally:
        codes = cover.read(window)
        reach = store.raster("reach").read(window) if "reach" in store.layers else None
        return tally(store.grid, window, codes, reach, before.unreadable)

    with stoppable_pool(jobs) as pool:
        return list(pool.map(one, windows, computed))


def _remove_old(folder: Path, files: Mapping[str, Path]) -> None:
    """Delete what an earlier map wrote and this one does not have: it would belong to another map."""
    for name in ("raw.tif", "confidence.tif", "reach.tif", "cover.gpkg"):
        if folder / name not in files.values():
            (folder / name).unlink(missing_ok=True)
            (folder / f"{name}.aux.xml").unlink(missing_ok=True)


def _area_table(
    total: Mapping[int, Count], classes: Sequence[ClassSettings], unit: str, *, reach: bool
) -> pd.DataFrame:
    found = [(c, total.get(c.code, Count(c.code, 0, 0.0, 0))) for c in classes]
    rows = [(c.code, c.name, n.pixels, n.area_m2, n.area_m2 / M2_PER_UNIT[unit], unit, n.beyond) for c, n in found]
    table = pd.DataFrame(rows, columns=["code", "name", "pixels", "area_m2", "area", "unit", "beyond_reach_pixels"])
    return table if reach else table.drop(columns="beyond_reach_pixels")
