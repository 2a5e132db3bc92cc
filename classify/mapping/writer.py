"""Write class rasters as Cloud-Optimised GeoTIFFs, block by block, crash-safe.

A COG cannot be written in place: its overviews come first. Blocks go to a plain tiled GeoTIFF under a temporary name;
when the last one is in, GDAL's COG driver copies it to a second temporary name, which is renamed over the target.
"""

from __future__ import annotations

import xml.etree.ElementTree as ET
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Literal

import numpy as np
import rasterio
import rasterio.shutil
from numpy.typing import NDArray
from rasterio.errors import RasterioError
from rasterio.io import DatasetWriter

from classify.errors import OutputError
from classify.files import replacing, write_bytes
from classify.raster.grid import Grid, Window

TILE_PX = 512
NO_CLASS = 0
NO_PERCENT = 255


@dataclass(frozen=True, slots=True)
class Layer:
    """How one output raster is stored: uint8, one band.

    nodata: the value of pixels without a result. overviews: resampling of the pyramid ("mode" for classes, "average"
    for quantities). colours and categories: by pixel value, for class rasters. tags: plain text kept inside the file.
    """

    nodata: int
    overviews: Literal["mode", "average"]
    description: str
    colours: Mapping[int, str] = field(default_factory=dict)
    categories: Mapping[int, str] = field(default_factory=dict)
    tags: Mapping[str, str] = field(default_factory=dict)


class BlockWriter:
    """Takes windows of one raster in any order. Used from one thread."""

    def __init__(self, dataset: DatasetWriter, target: Path) -> None:
        self._dataset, self._target = dataset, target

    def write(self, window: Window, values: NDArray[np.uint8]) -> None:
        """Store `values` (uint8, (h, w)) at `window`. Raises OutputError, for instance when the disk is full."""
        try:
            self._dataset.write(values, 1, window=window.to_rasterio())
        except RasterioError as error:
            raise OutputError(f"cannot be written: {error}", where=str(self._target), fix="free some space") from error


@contextmanager
def cog_writer(target: Path, grid: Grid, layer: Layer) -> Iterator[BlockWriter]:
    """Open `target` for block-wise writing; it appears as a valid COG when the context ends well, else not at all.

    Raises OutputError when something cannot be written.
    """
    with replacing(target) as finished, _scratch(target) as scratch:
        try:
            with rasterio.open(scratch, "w", **_scratch_profile(grid, layer)) as dataset:
                _describe(dataset, layer)
                yield BlockWriter(dataset, target)
            _copy_to_cog(scratch, finished, layer)
        except RasterioError as error:
            raise OutputError(f"cannot be written: {error}", where=str(target), fix="free some space") from error
    if layer.categories:
        write_bytes(target.with_name(target.name + ".aux.xml"), category_sidecar(layer))


@contextmanager
def _scratch(target: Path) -> Iterator[Path]:
    # A copy that never takes the target's place: removed whatever happens.
    scratch = target.with_name(f".{target.stem}.blocks.landassay-part.tif")
    try:
        yield scratch
    finally:
        scratch.unlink(missing_ok=True)


def _scratch_profile(grid: Grid, layer: Layer) -> dict[str, object]:
    return {
        "driver": "GTiff", "dtype": "uint8", "count": 1, "crs": grid.crs, "transform": grid.transform,
        "height": grid.height, "width": grid.width, "nodata": layer.nodata, "tiled": True,
        "blockxsize": TILE_PX, "blockysize": TILE_PX, "compress": "zstd", "zstd_level": 1, "bigtiff": "if_safer",
        "sparse_ok": True,
    }  # fmt: skip


def _describe(dataset: DatasetWriter, layer: Layer) -> None:
    dataset.set_band_description(1, layer.description)
    if layer.colours:
        table = {value: (*_rgb(colour), 255) for value, colour in layer.colours.items()}
        dataset.write_colormap(1, {layer.nodata: (0, 0, 0, 0), **table})
    if layer.tags:
        dataset.update_tags(**layer.tags)


def _copy_to_cog(source: Path, target: Path, layer: Layer) -> None:
    # Deflate rather than zstd in the delivered file: every reader of GeoTIFF has it.
    rasterio.shutil.copy(
        source, target, driver="COG", compress="deflate", blocksize=TILE_PX, overview_resampling=layer.overviews,
        overview_compress="deflate", bigtiff="if_safer", num_threads=1,
    )  # fmt: skip


def _rgb(colour: str) -> tuple[int, int, int]:
    return int(colour[1:3], 16), int(colour[3:5], 16), int(colour[5:7], 16)


def category_sidecar(layer: Layer) -> bytes:
    """Class names as the XML side file that GDAL-based programs read beside a GeoTIFF (it has no room inside)."""
    root = ET.Element("PAMDataset")
    band = ET.SubElement(root, "PAMRasterBand", band="1")
    names = ET.SubElement(band, "CategoryNames")
    for value in range(max(layer.categories) + 1):
        ET.SubElement(names, "Category").text = layer.categories.get(value, "")
    table = ET.SubElement(band, "GDALRasterAttributeTable", tableType="thematic")
    # Column types and usages as GDAL numbers them: type 0 integer, 2 text; usage 5 minmax, 2 name.
    columns: Sequence[tuple[str, str, str]] = (("Value", "0", "5"), ("Class", "2", "2"))
    for index, (name, kind, usage) in enumerate(columns):
        definition = ET.SubElement(table, "FieldDefn", index=str(index))
        for tag, text in (("Name", name), ("Type", kind), ("Usage", usage)):
            ET.SubElement(definition, tag).text = text
    for index, (value, name) in enumerate(sorted(layer.categories.items())):
        row = ET.SubElement(table, "Row", index=str(index))
        ET.SubElement(row, "F").text = str(value)
        ET.SubElement(row, "F").text = name
    ET.indent(root)
    return bytes(ET.tostring(root, encoding="utf-8", xml_declaration=True))
