"""The map as a picture: a decimated copy, its scale, its north, its coordinates."""

from __future__ import annotations

import io
import math
from collections.abc import Sequence
from pathlib import Path

import numpy as np
import rasterio
from numpy.typing import NDArray
from PIL import Image
from pyproj import CRS, Geod, Transformer
from rasterio.enums import Resampling
from rasterio.errors import RasterioError

from classify.errors import DataError
from classify.raster.grid import Grid
from classify.raster.sources import open_raster
from classify.report.facts import ClassFact, Layer, MapFact

# Long side of a picture: sharp on a full-width print at 200 dots per inch, and small enough to carry four layers.
LONG_SIDE_PX = 1600
_TICKS = 4
_PIECE_ROWS = 2048
_LOGO_PX = 600
# Highest value of reach.tif that is still within reach of the training data.
_WITHIN = 100


def map_fact(folder: Path, classes: Sequence[ClassFact], more: Sequence[Layer], low_percent: int = 50) -> MapFact:
    """Pictures and placing of the map in `folder` (cover.tif, confidence.tif and reach.tif where present).

    more: layers made elsewhere (the scene itself), of the size that `picture_shape` gives. Raises DataError.
    """
    cover = folder / "cover.tif"
    grid, codes = read_small(cover)
    layers = [Layer("cover", _cover_png(codes, classes), "image/png"), *more]
    low_share = beyond_share = None
    if (folder / "confidence.tif").is_file():
        _, percent = read_small(folder / "confidence.tif")
        layers.append(Layer("confidence", _percent_png(percent), "image/png"))
        low_share = _share(folder / "confidence.tif", slice(0, low_percent))
    if (folder / "reach.tif").is_file():
        _, reach = read_small(folder / "reach.tif")
        layers.append(Layer("reach", _reach_png(reach), "image/png"))
        beyond_share = _share(folder / "reach.tif", slice(_WITHIN + 1, None))
    pixel_m, north_deg = ground_frame(grid)
    height, width = codes.shape
    return MapFact(
        size_yx=grid.shape_yx, picture_yx=(height, width), layers=tuple(layers),
        step_m=(pixel_m[0] * grid.height / height, pixel_m[1] * grid.width / width), pixel_m=pixel_m,
        north_deg=north_deg, crs=crs_name(grid), x_ticks=_ticks(grid, across=True), y_ticks=_ticks(grid, across=False),
        low_percent=low_percent, low_share=low_share, beyond_share=beyond_share, tidied=_is_tidied(cover),
    )  # fmt: skip


def _is_tidied(cover: Path) -> bool:
    with open_raster(str(cover)) as source:
        return "TIDIED" in source.tags()


def picture_shape(height: int, width: int) -> tuple[int, int]:
    """Shape (rows, columns) of the pictures of a map; small maps keep their pixels."""
    factor = min(1.0, LONG_SIDE_PX / max(height, width))
    return max(1, round(height * factor)), max(1, round(width * factor))


def read_small(path: Path) -> tuple[Grid, NDArray[np.uint8]]:
    """The grid of a raster and its first band decimated from the overviews, uint8 (h, w). Raises DataError."""
    try:
        with open_raster(str(path)) as source:
            grid = Grid(source.crs, source.transform, source.height, source.width)
            shape = picture_shape(source.height, source.width)
            return grid, source.read(1, out_shape=shape, resampling=Resampling.nearest)
    except RasterioError as error:
        raise DataError(f"the raster cannot be read: {error}", where=str(path),
                        fix="run 'landassay classify' again") from error  # fmt: skip


def read_grid(path: Path) -> Grid:
    """The grid of a raster. Raises DataError."""
    with open_raster(str(path)) as source:
        return Grid(source.crs, source.transform, source.height, source.width)


def ground_frame(grid: Grid) -> tuple[tuple[float, float], float]:
    """Ground size of the pixel at the centre (down, across) in metres, and true north clockwise from up, degrees.

    Distances are geodesics on the ellipsoid of the CRS.
    """
    crs = CRS.from_user_input(grid.crs)
    to_degrees = Transformer.from_crs(crs, crs.geodetic_crs or "EPSG:4326", always_xy=True)
    geod = crs.get_geod() or Geod(ellps="WGS84")
    row, col = grid.height / 2, grid.width / 2
    corners = [grid.transform @ (col + dx, row + dy) for dx, dy in ((0, 0), (1, 0), (0, 1))]
    (lon, lat), across, down = (to_degrees.transform(x, y) for x, y in corners)
    across_m = geod.inv(lon, lat, *across)[2]
    azimuth, _, down_m = geod.inv(lon, lat, *down)
    # Down the picture is "azimuth"; up is its opposite, so north lies that much to the left of up.
    north = -((azimuth + 180 + 180) % 360 - 180)
    return (float(down_m), float(across_m)), float(north)


def crs_name(grid: Grid) -> str:
    """Name and authority code of a CRS: "WGS 84 / UTM zone 33N (EPSG:32633)"."""
    crs = CRS.from_user_input(grid.crs)
    authority = crs.to_authority()
    return f"{crs.name} ({':'.join(authority)})" if authority else crs.name


def _ticks(grid: Grid, *, across: bool) -> tuple[tuple[float, str], ...]:
    """Round coordinates along the lower or the left edge: place 0..1 from the upper left corner, label."""
    left, bottom, right, top = grid.bounds
    start, end = (left, right) if across else (bottom, top)
    if grid.transform.b or grid.transform.d:
        # A rotated grid has no constant coordinate along its edges.
        return ()
    step = nice_step((end - start) / _TICKS)
    first = math.ceil(start / step)
    values = [(first + i) * step for i in range(int((end - first * step) / step) + 1)]
    degrees = CRS.from_user_input(grid.crs).is_geographic
    places = max(0, -math.floor(math.log10(step)))
    labels = [_degrees(v, places, across) if degrees else f"{v:,.{places}f}".replace(",", "\u202f") for v in values]
    share = [(v - start) / (end - start) for v in values]
    return tuple((s if across else 1 - s, label) for s, label in zip(share, labels, strict=True))


def _degrees(value: float, places: int, across: bool) -> str:
    side = ("E", "W") if across else ("N", "S")
    return f"{abs(value):.{places}f}° {side[0] if value >= 0 else side[1]}"


def nice_step(rough: float) -> float:
    """The nearest step of 1, 2 or 5 times a power of ten that is not below `rough`."""
    power = 10.0 ** math.floor(math.log10(rough))
    return next(m * power for m in (1, 2, 5, 10) if m * power >= rough * 0.999)


def _cover_png(codes: NDArray[np.uint8], classes: Sequence[ClassFact]) -> bytes:
    palette = np.full((256, 3), 128, dtype=np.uint8)
    for c in classes:
        palette[c.code] = [int(c.colour[i : i + 2], 16) for i in (1, 3, 5)]
    return _png(codes, palette)


def _percent_png(percent: NDArray[np.uint8]) -> bytes:
    """Per cent as lightness, dark where low; 255 is transparent."""
    return _png(percent, _shades(np.clip(np.arange(256) / 100, 0, 1)), clear=255)


def _reach_png(reach: NDArray[np.uint8]) -> bytes:
    """Light within reach of the training data (1..100), ever darker beyond (101..254); 255 is transparent."""
    beyond = np.clip((np.arange(256) - _WITHIN) / 60, 0, 1)
    return _png(reach, _shades(np.where(beyond > 0, 0.6 - 0.6 * beyond, 1.0)), clear=255)


def _shades(lightness: NDArray[np.float64]) -> NDArray[np.uint8]:
    """A palette of one hue, so that it reads in grey, for a lightness 0..1 of each value, uint8 (256, 3)."""
    low, high = np.array([58.0, 12.0, 43.0]), np.array([250.0, 246.0, 236.0])
    palette: NDArray[np.uint8] = np.rint(low + (high - low) * lightness[:, None]).astype(np.uint8)
    return palette


def _png(values: NDArray[np.uint8], palette: NDArray[np.uint8], clear: int = 0) -> bytes:
    image = Image.fromarray(values)
    image.putpalette(palette.tobytes())
    buffer = io.BytesIO()
    image.save(buffer, "PNG", optimize=True, transparency=clear)
    return buffer.getvalue()


def read_logo(path: Path) -> bytes:
    """A logo as PNG bytes, whatever picture it was. Raises DataError when it is not a picture."""
    try:
        with Image.open(path) as image:
            image.thumbnail((_LOGO_PX, _LOGO_PX))
            buffer = io.BytesIO()
            image.convert("RGBA").save(buffer, "PNG", optimize=True)
            return buffer.getvalue()
    except (OSError, ValueError, Image.DecompressionBombError) as error:
        raise DataError("the logo is not a picture that can be read", where=str(path),
                        fix="give a PNG, JPEG or TIFF file under [report] logo") from error  # fmt: skip


def _share(path: Path, part: slice) -> float | None:
    """Share of the pixels with a value (0..254) whose value lies in `part`, from all pixels, in strips."""
    inside = total = 0
    with open_raster(str(path)) as source:
        for row in range(0, source.height, _PIECE_ROWS):
            rows = min(_PIECE_ROWS, source.height - row)
            values = source.read(1, window=rasterio.windows.Window(0, row, source.width, rows))
            tally = np.bincount(values.ravel(), minlength=256)[:255]
            inside, total = inside + int(tally[part].sum()), total + int(tally.sum())
    return inside / total if total else None
