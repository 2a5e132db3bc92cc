"""Natural and false colour pictures of the scene on the map's frame, to look at the map beside what it was made of."""

from __future__ import annotations

import io
from collections.abc import Sequence
from pathlib import Path
from typing import Literal

import numpy as np
from affine import Affine
from numpy.typing import NDArray
from PIL import Image
from rasterio.enums import Resampling
from rasterio.errors import RasterioError
from rasterio.vrt import WarpedVRT

from classify.errors import LandassayError
from classify.raster.grid import Grid
from classify.raster.scene import BandSource, open_scene
from classify.raster.sources import open_raster
from classify.report.facts import Layer
from classify.report.picture import picture_shape, read_grid
from classify.settings import Project

# Roles shown as red, green and blue; the first set whose bands are all there is taken.
_SHOWN: dict[Literal["natural", "false"], tuple[tuple[str, str, str], ...]] = {
    "natural": (("red", "green", "blue"),),
    "false": (("swir_1", "nir", "red"), ("nir", "red", "green")),
}
_QUALITY = 84


def scene_layers(project: Project, cover: Path) -> tuple[Layer, ...]:
    """Natural and false colour layers, as far as the scene's bands allow; none when the scene is no longer there."""
    try:
        bands = {band.role: band for band in open_scene(project.scene, project).bands}
        chosen = {
            kind: roles
            for kind, sets in _SHOWN.items()
            for roles in [next((s for s in sets if all(role in bands for role in s)), None)]
            if roles is not None
        }
        grid = read_grid(cover)
        grey = {
            role: _stretched(_decimated(bands[role], grid)) for role in sorted({r for s in chosen.values() for r in s})
        }
    except (LandassayError, RasterioError):
        # The pictures are for orientation only; numbers never come from them, so a report is made without.
        return ()
    return tuple(Layer(kind, _composite([grey[r] for r in roles]), "image/jpeg") for kind, roles in chosen.items())


def _composite(channels: Sequence[NDArray[np.uint8]]) -> bytes:
    buffer = io.BytesIO()
    Image.fromarray(np.dstack(channels)).save(buffer, "JPEG", quality=_QUALITY, optimize=True)
    return buffer.getvalue()


def _decimated(band: BandSource, grid: Grid) -> NDArray[np.float32]:
    """Stored numbers of a band on the picture's pixels, float32 (h, w), NaN where there is no data.

    Nearest neighbours, as the warper's smoother kernels read every pixel of a large scene to fill a small picture.
    """
    height, width = picture_shape(grid.height, grid.width)
    transform = grid.transform @ Affine.scale(grid.width / width, grid.height / height)
    smooth = height == grid.height and width == grid.width
    with (
        open_raster(band.path) as source,
        WarpedVRT(source, crs=grid.crs, transform=transform, width=width, height=height, nodata=band.nodata,
                  resampling=Resampling.bilinear if smooth else Resampling.nearest) as view,
    ):  # fmt: skip
        values = view.read(band.band, masked=True).astype(np.float32)
    return np.ma.filled(values, np.nan)


def _stretched(values: NDArray[np.float32]) -> NDArray[np.uint8]:
    """Grey values between the 2nd and the 98th percentile; white where there is no data."""
    known = values[np.isfinite(values)]
    low, high = np.percentile(known, (2, 98)) if known.size else (0.0, 1.0)
    scaled = 255 * (values - low) / max(high - low, 1e-9)
    return np.where(np.isfinite(values), np.clip(scaled, 0, 255), 255).astype(np.uint8)
