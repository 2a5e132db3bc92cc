"""Raster files as sources of bands: opened, looked at and described; every fault a clear error with its file."""

from __future__ import annotations

import os
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any

import numpy as np
import rasterio
from numpy.typing import NDArray
from rasterio._err import CPLE_BaseError
from rasterio.enums import Interleaving, MaskFlags
from rasterio.errors import NotGeoreferencedWarning, RasterioError

from classify.errors import DataError
from classify.raster.grid import Grid, Window
from classify.raster.guard import check_path, driver_of, is_remote, leads_to, reachable
from classify.raster.remote import check_landing

# An address that does not answer, or sends less than 100 bytes a second for 20 s, is given up instead of hanging.
REMOTE_OPTIONS = {
    "GDAL_HTTP_CONNECTTIMEOUT": "15",
    "GDAL_HTTP_LOW_SPEED_TIME": "20",
    "GDAL_HTTP_LOW_SPEED_LIMIT": "100",
    "GDAL_HTTP_MAX_RETRY": "2",
    "GDAL_HTTP_RETRY_DELAY": "1",
    "GDAL_DISABLE_READDIR_ON_OPEN": "EMPTY_DIR",
}

# Decoded blocks that are kept. By default it would be a share of the machine's memory, whatever the block size.
_CACHE_BYTES = 256 << 20

# What a raster may claim to be. A header of a few bytes can claim anything, and work would be planned by it.
_MOST_PIXELS = 10**11
_MOST_BANDS = 5000
# One stored piece is decoded whole, however small a window is asked for.
_MOST_PIECE_BYTES = 1 << 30
# No CRS of the earth counts farther than this from its origin, be it in millimetres.
_FARTHEST = 1e12
# Virtual rasters of virtual rasters, and so on.
_MOST_STEPS = 3


@dataclass(frozen=True, slots=True)
class BandSource:
    """One band of a scene.

    role: its name in formulas. path, band: where it is stored, bands counted from 1. scale, offset: reflectance =
    stored * scale + offset. nodata: stored value that is no data, NaN for not-a-number, None if there is none.
    wavelength_nm: centre wavelength, if known. native: the grid it is stored on. flagged: the file carries its own
    mask (an alpha band or a mask band), which is honoured. date: the name of its date, whose mask holds for it, or None
    for an ancillary raster, which no mask rejects. categorical: values are codes, not quantities.
    """

    role: str
    path: str
    band: int
    scale: float
    offset: float
    nodata: float | None
    wavelength_nm: float | None
    native: Grid
    flagged: bool = False
    date: str | None = ""
    categorical: bool = False


@dataclass(frozen=True, slots=True)
class RasterFacts:
    """What a raster file says of itself. Sequences are by band; scale 1 and offset 0 mean that it says nothing.

    wavelengths_nm: centre wavelengths. good: False for bands that an imaging spectrometer's bad-band list leaves out.
    """

    path: str
    native: Grid
    count: int
    dtypes: tuple[str, ...]
    nodata: tuple[float | None, ...]
    scales: tuple[float, ...]
    offsets: tuple[float, ...]
    flagged: tuple[bool, ...]
    descriptions: tuple[str, ...]
    colours: tuple[str, ...]
    wavelengths_nm: tuple[float | None, ...]
    good: tuple[bool, ...]


@contextmanager
def gdal_errors(path: str, doing: str) -> Iterator[None]:
    """Turn errors of the raster library into a DataError about `path`."""
    try:
        yield
    except (RasterioError, CPLE_BaseError) as error:
        reason = str(error.__cause__ or error).strip().replace("\n", " ")
        if is_remote(path):
            fix = "check the address, your access to it and the network"
        else:
            fix = "the file may be cut off or damaged; copy it again from its source"
        raise DataError(f"{doing}: {reason}", where=path, fix=fix) from error


def _gdal_options(path: str) -> rasterio.Env:
    """Options of the raster library while a file is opened or read: nothing but this file is asked of the network."""
    cache = {} if "GDAL_CACHEMAX" in os.environ else {"GDAL_CACHEMAX": _CACHE_BYTES}
    only = {"CPL_VSIL_CURL_ALLOWED_FILENAME": reachable(path) or "nothing"}
    return rasterio.Env(**cache, **only, **(REMOTE_OPTIONS if is_remote(path) else {}))


def open_raster(path: str) -> rasterio.DatasetReader:
    """Open a raster for reading, once it and all that it leads to were found fit. Raises DataError."""
    return _open(path, depth=0)


def _open(path: str, depth: int) -> rasterio.DatasetReader:
    check_path(path)
    if reachable(path).startswith("/vsicurl/"):
        check_landing(reachable(path).removeprefix("/vsicurl/"))
    if depth > _MOST_STEPS:
        raise DataError(
            "virtual rasters lead on to each other without end", where=path, fix="name their rasters instead"
        )
    for other in leads_to(path):
        _open(other, depth + 1).close()
    driver = driver_of(path, led_to=depth > 0)
    with gdal_errors(path, "this raster cannot be opened"), _gdal_options(path):
        dataset = rasterio.open(path, driver=driver)
    try:
        with gdal_errors(path, "what this raster says of itself cannot be read"):
            _refuse_unfit(dataset, path)
    except DataError:
        dataset.close()
        raise
    return dataset


def _refuse_unfit(dataset: rasterio.DatasetReader, path: str) -> None:
    """Refuse what could not be worked with, or would lead elsewhere."""
    if dataset.tags(ns="OVERVIEWS").get("OVERVIEW_FILE"):
        raise DataError("this raster's metadata lead on to another file for its overviews", where=path,
                        fix="write it out as a new GeoTIFF without them")  # fmt: skip
    rows, cols = dataset.shape
    if rows * cols > _MOST_PIXELS or dataset.count > _MOST_BANDS:
        what = f"this raster claims {rows} by {cols} pixels in {dataset.count} bands, more than can be worked with"
        raise DataError(what, where=path, fix="cut it into sheets, or keep only the bands that are needed")
    height, width = dataset.block_shapes[0]
    together = dataset.count if dataset.interleaving == Interleaving.pixel else 1
    piece = height * width * np.dtype(dataset.dtypes[0]).itemsize * together
    if piece > _MOST_PIECE_BYTES:
        what = f"this raster is stored in pieces of {height} by {width} pixels ({piece / 2**30:.1f} GiB each)"
        raise DataError(what, where=path, fix="write it anew in tiles of 256 or 512 pixels")


def read_window(dataset: rasterio.DatasetReader, path: str, bands: list[int], part: Window) -> NDArray[np.generic]:
    """Stored values (bands, h, w) of a window inside the file. Raises DataError."""
    with gdal_errors(path, f"reading rows {part.row} to {part.row + part.height - 1} failed"), _gdal_options(path):
        stored: NDArray[np.generic] = dataset.read(bands, window=part.to_rasterio())
    return stored


def describe(path: str) -> RasterFacts:
    """Read what a file says of itself. Raises DataError for a file that cannot be opened or has no place on earth."""
    with warnings.catch_warnings():
        # Said below, as an error of ours.
        warnings.simplefilter("ignore", NotGeoreferencedWarning)
        dataset = open_raster(path)
    with dataset, gdal_errors(path, "what this raster says of itself cannot be read"):
        if dataset.crs is None:
            raise DataError(
                "this raster has no coordinate reference system", where=path,
                fix="assign it the CRS it was made in (for instance with a GIS), do not guess one",
            )  # fmt: skip
        if not _has_place(dataset):
            raise DataError(
                "this raster has no georeferencing (no pixel size or origin)", where=path,
                fix="export it again with georeferencing, or add its world file",
            )  # fmt: skip
        outside = {MaskFlags.per_dataset, MaskFlags.alpha}
        return RasterFacts(
            path=path,
            native=Grid(dataset.crs, dataset.transform, dataset.height, dataset.width),
            count=dataset.count,
            dtypes=tuple(dataset.dtypes),
            nodata=tuple(dataset.nodatavals),
            scales=_scales(dataset),
            offsets=tuple(dataset.offsets),
            flagged=tuple(bool(outside & set(flags)) for flags in dataset.mask_flag_enums),
            descriptions=tuple(text or "" for text in dataset.descriptions),
            colours=tuple(colour.name for colour in dataset.colorinterp),
            wavelengths_nm=tuple(_wavelength_nm(dataset, index) for index in dataset.indexes),
            good=_good_bands(dataset),
        )


def _has_place(dataset: rasterio.DatasetReader) -> bool:
    """Whether the transform brings pixels to places: invertible, with corners that can be reckoned with."""
    transform = dataset.transform
    corners = [transform @ corner for corner in ((0, 0), (dataset.width, 0), (0, dataset.height))]
    within = all(abs(value) < _FARTHEST for corner in corners for value in corner)  # false for NaN
    return within and not transform.is_identity and not transform.is_degenerate and abs(transform.determinant) > 1e-30


def _scales(dataset: rasterio.DatasetReader) -> tuple[float, ...]:
    """Scales by band; those of a cube's header are given as what reflectance was multiplied by."""
    factor = dataset.tags(ns="ENVI").get("reflectance_scale_factor", "")
    try:
        multiplied = float(factor) if factor else 1.0
    except ValueError:
        multiplied = 1.0
    own = [float(scale) for scale in dataset.scales]
    if multiplied <= 0 or multiplied == 1 or any(scale != 1 for scale in own):
        return tuple(own)
    return (1 / multiplied,) * len(own)


def _wavelength_nm(dataset: rasterio.DatasetReader, band: int) -> float | None:
    """Centre wavelength from the band's metadata: GDAL's own item in micrometres, else the header's with its unit."""
    own, header = dataset.tags(band, ns="IMAGERY"), dataset.tags(band)
    text, unit = own.get("CENTRAL_WAVELENGTH_UM"), "micrometers"
    if text is None:
        text, unit = (
            header.get("wavelength"),
            header.get("wavelength_units", dataset.tags().get("wavelength_units", "")),
        )
    try:
        value = float(text) if text is not None else 0.0
    except ValueError:
        return None
    if not 0 < value < 1e6:
        return None
    # Without a unit: optical wavelengths are below 30 in micrometres and above 200 in nanometres.
    in_micrometres = unit.casefold().startswith(("micro", "um", "µm")) or (not unit and value < 30)
    return round(value * 1000, 3) if in_micrometres else value


def _good_bands(dataset: rasterio.DatasetReader) -> tuple[bool, ...]:
    """The header's bad-band list ("bbl", 1 good and 0 bad), if there is one of the right length; else all are good."""
    listed = dataset.tags(ns="ENVI").get("bbl", "").strip(" {}")
    flags = [item.strip() not in ("0", "0.0", "0.00") for item in listed.split(",")] if listed else []
    return tuple(flags) if len(flags) == dataset.count else (True,) * dataset.count


def to_reflectance(stored: NDArray[Any], source: BandSource) -> NDArray[np.float32]:
    """float32 reflectance of stored values, NaN for no data; a function of each value alone."""
    exact_in_float32 = stored.dtype == np.float32 or (stored.dtype.kind in "iu" and stored.dtype.itemsize <= 2)
    kind: type[np.floating[Any]] = np.float32 if exact_in_float32 else np.float64
    values: NDArray[Any] = stored.astype(kind)
    if source.scale != 1 or source.offset != 0:
        values = values * kind(source.scale) + kind(source.offset)
    result = values.astype(np.float32, copy=False)
    if stored.dtype.kind == "f":
        result[~np.isfinite(stored)] = np.nan
    if source.nodata is not None and not np.isnan(source.nodata):
        # Compared as stored, where the value is exact; a float32 file may declare it with more digits than it holds.
        no_data = stored.dtype.type(source.nodata) if stored.dtype.kind == "f" else source.nodata
        result[stored == no_data] = np.nan
    return result


class OpenFiles:
    """Open files of one thread, each opened once and when first needed."""

    def __init__(self) -> None:
        self._open: dict[str, rasterio.DatasetReader] = {}

    def get(self, path: str) -> rasterio.DatasetReader:
        """The open file. Raises DataError."""
        if path not in self._open:
            self._open[path] = open_raster(path)
        return self._open[path]

    def close(self) -> None:
        """Close all."""
        for dataset in self._open.values():
            dataset.close()
        self._open.clear()


def own_mask(dataset: Any, path: str, band: int, part: Window) -> NDArray[np.bool_]:  # noqa: ANN401 - a rasterio dataset
    """bool (h, w): pixels that the file's own mask or alpha band calls invalid. Raises DataError."""
    with gdal_errors(path, "reading its mask failed"), _gdal_options(path):
        return np.asarray(dataset.read_masks(band, window=part.to_rasterio()) == 0)
