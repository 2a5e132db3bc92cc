"""Write rasters of bytes as Cloud-Optimised GeoTIFFs, crash-safe.

A COG cannot be written in place: its overviews come first. Blocks are gathered in a plain file of bytes; when the last
one is in, GDAL's COG driver copies it, described by a small XML file, to a temporary name, which is renamed over the
target.
"""

from __future__ import annotations

import xml.etree.ElementTree as ET
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Literal

import rasterio
import rasterio.shutil
from rasterio._err import CPLE_BaseError  # GDAL's own errors, which a copy lets through as they are
from rasterio.errors import RasterioError

from classify.files import replacing, write_bytes
from classify.mapping.byte_raster import ByteRaster
from classify.raster.written import check_raster
from classify.threads import aside

TILE_PX = 512
# Decoded blocks that are kept while a file is copied: a row of tiles; more does not make it faster.
_CACHE_BYTES = 32 << 20


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


def write_cog(source: ByteRaster, target: Path, layer: Layer) -> None:
    """Write `target` as a valid COG of all bytes of `source`, and class names beside it. Raises OutputError."""
    described = source.path.with_suffix(".vrt")
    with replacing(target, RasterioError, CPLE_BaseError) as finished:
        try:
            described.write_bytes(_virtual_raster(source, layer))
            aside(lambda: _copy(described, finished, source, layer))
        finally:
            described.unlink(missing_ok=True)
    if layer.categories:
        write_bytes(target.with_name(target.name + ".aux.xml"), category_sidecar(layer))


def _copy(described: Path, target: Path, source: ByteRaster, layer: Layer) -> None:
    with rasterio.Env(GDAL_CACHEMAX=_CACHE_BYTES):
        # Deflate rather than zstd in the delivered file: every reader of GeoTIFF has it.
        rasterio.shutil.copy(
            described, target, driver="COG", compress="deflate", blocksize=TILE_PX, overview_resampling=layer.overviews,
            overview_compress="deflate", bigtiff="if_safer", num_threads=1,
        )  # fmt: skip
        check_raster(target, source.grid, source.read)


def _virtual_raster(source: ByteRaster, layer: Layer) -> bytes:
    """The XML by which GDAL reads a plain file of bytes as a georeferenced raster."""
    grid = source.grid
    root = ET.Element("VRTDataset", rasterXSize=str(grid.width), rasterYSize=str(grid.height))
    ET.SubElement(root, "SRS", dataAxisToSRSAxisMapping="1,2").text = grid.crs.to_wkt()
    ET.SubElement(root, "GeoTransform").text = ", ".join(repr(float(value)) for value in grid.transform.to_gdal())
    if layer.tags:
        metadata = ET.SubElement(root, "Metadata")
        for key, text in layer.tags.items():
            ET.SubElement(metadata, "MDI", key=key).text = text
    band = ET.SubElement(root, "VRTRasterBand", dataType="Byte", band="1", subClass="VRTRawRasterBand")
    ET.SubElement(band, "Description").text = layer.description
    ET.SubElement(band, "NoDataValue").text = str(layer.nodata)
    if layer.colours:
        ET.SubElement(band, "ColorInterp").text = "Palette"
        table = ET.SubElement(band, "ColorTable")
        for value in range(max(layer.colours) + 1):
            rgb = _rgb(layer.colours[value]) if value in layer.colours else (0, 0, 0)
            entry = dict(zip(("c1", "c2", "c3"), map(str, rgb), strict=True))
            ET.SubElement(table, "Entry", entry, c4="0" if value == layer.nodata else "255")
    ET.SubElement(band, "SourceFilename", relativeToVRT="1").text = source.path.name
    for tag, step in (("ImageOffset", 0), ("PixelOffset", 1), ("LineOffset", grid.width)):
        ET.SubElement(band, tag).text = str(step)
    return bytes(ET.tostring(root, encoding="utf-8"))


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
