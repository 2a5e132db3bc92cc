"""From cells to a scene: mixed spectra, point spread, noise, gradient, clouds, digital numbers; and the truth."""

from __future__ import annotations

import csv
from dataclasses import dataclass
from pathlib import Path
from typing import Final

import numpy as np
import rasterio
from affine import Affine
from numpy.typing import NDArray
from scipy import ndimage

from maker.landscape import CLAY, COVERS, GRASS, PASTURE, ROOFS, SAND, WATER, WOODLAND, Landscape
from maker.terrain import CELL_COLS, CELL_M, CELL_ROWS, Field, smooth_noise

CRS: Final = "EPSG:32734"
ORIGIN_XY_M: Final = (641200.0, 6471800.0)
FINE_M, COARSE_M = 10, 20
FINE_BANDS: Final = ("blue", "green", "red", "nir")
COARSE_BANDS: Final = ("red_edge_1", "red_edge_2", "red_edge_3", "nir_narrow", "swir_1", "swir_2")
SCALE, OFFSET = 0.0004, -0.02  # reflectance = stored * SCALE + OFFSET; stored 0 is no data
NOISE: Final = 0.0022  # standard deviation of reflectance, besides 1 % of the signal

# The mask's own codes; project.toml rejects all but CLEAR.
NO_OBSERVATION, CLEAR, THIN_CLOUD, CLOUD, SHADOW = 0, 10, 20, 30, 40
CLOUDS_XYR_M: Final = ((1180, 880, 330), (2050, 1350, 210), (5750, 3350, 260), (3900, 5230, 300))
SHADOW_SHIFT_XY_M: Final = (-190.0, 430.0)  # away from a sun in the north-north-east


@dataclass(frozen=True, slots=True)
class MadeScene:
    """bands: role -> uint16 (rows, cols) at 10 or 20 m. mask: uint8 at 20 m. truth: uint8 cover at 10 m.
    purity: float32 at 10 m, the share of each pixel's area that its true cover has."""

    bands: dict[str, NDArray[np.uint16]]
    mask: NDArray[np.uint8]
    truth: NDArray[np.uint8]
    purity: Field

    @property
    def clear(self) -> NDArray[np.bool_]:
        """bool at 10 m: neither masked nor outside the swath, which the bands cut off more finely than the mask."""
        unmasked = (self.mask == CLEAR).repeat(2, axis=0).repeat(2, axis=1)
        return np.asarray(unmasked & (self.bands[FINE_BANDS[0]] > 0))

    def reflectance(self) -> Field:
        """float32 (10, rows, cols) at 10 m, coarse bands repeated, in the order FINE_BANDS, COARSE_BANDS."""
        layers = [self.bands[role].astype(np.float32) for role in FINE_BANDS]
        layers += [self.bands[role].astype(np.float32).repeat(2, axis=0).repeat(2, axis=1) for role in COARSE_BANDS]
        return np.stack(layers) * np.float32(SCALE) + np.float32(OFFSET)


def transform(pixel_m: float) -> Affine:
    """Pixel corners to CRS units for pixels of `pixel_m`."""
    return Affine(pixel_m, 0, ORIGIN_XY_M[0], 0, -pixel_m, ORIGIN_XY_M[1])


def read_spectra(path: Path) -> dict[str, dict[str, NDArray[np.float32]]]:
    """Role -> cover name -> reflectance of its variants (float32, (k,)), from spectra.csv."""
    found: dict[str, dict[str, list[float]]] = {}
    with path.open(newline="", encoding="utf-8") as stream:
        for row in csv.DictReader(stream):
            for role in (*FINE_BANDS, *COARSE_BANDS):
                found.setdefault(role, {}).setdefault(row["cover"], []).append(float(row[role]))
    return {role: {cover: np.array(v, np.float32) for cover, v in covers.items()} for role, covers in found.items()}


def build(rng: np.random.Generator, land: Landscape, spectra_csv: Path) -> MadeScene:
    """All bands, the mask and the truth."""
    spectra = read_spectra(spectra_csv)
    texture = _texture(rng, land)
    opacity, shadow = _clouds(rng)
    haze = 0.5 + 0.5 * np.tanh(1.2 * smooth_noise(rng, 4200))
    tilt = np.linspace(-1, 1, CELL_COLS, dtype=np.float32)[None, :] * 0.05
    bands = {}
    for role in (*FINE_BANDS, *COARSE_BANDS):
        pixel_m = FINE_M if role in FINE_BANDS else COARSE_M
        cells = _cell_reflectance(land, spectra[role]) * texture * land.shade * (1 + tilt)
        # Haze adds light where wavelengths are short; a cloud is bright in all bands, a little less in the last two.
        glow = {"blue": 0.020, "green": 0.012, "red": 0.008}.get(role, 0.002)
        white = {"swir_1": 0.42, "swir_2": 0.33}.get(role, 0.62)
        cells = (cells * (1 - 0.72 * shadow) + glow * haze) * (1 - opacity) + white * opacity
        bands[role] = _digitise(rng, _spread(cells, pixel_m), pixel_m)
    truth, purity = _truth(land)
    return MadeScene(bands, _mask(rng, opacity, shadow), truth, purity)


def write(made: MadeScene, folder: Path) -> None:
    """scene/*.tif and truth.tif, without time stamps, so that a second run writes the same bytes."""
    for role, stored in made.bands.items():
        write_raster(folder / "scene" / f"{role}.tif", stored, FINE_M if role in FINE_BANDS else COARSE_M, nodata=0)
    write_raster(folder / "scene" / "mask.tif", made.mask, COARSE_M)
    write_raster(folder / "truth.tif", made.truth, FINE_M, nodata=0)


def write_raster(path: Path, values: NDArray[np.unsignedinteger], pixel_m: int, nodata: int | None = None) -> None:
    """One compressed band on the scene's grid."""
    path.parent.mkdir(parents=True, exist_ok=True)
    profile = {
        "driver": "GTiff", "height": values.shape[0], "width": values.shape[1], "count": 1, "dtype": values.dtype,
        "crs": CRS, "transform": transform(pixel_m), "nodata": nodata, "compress": "deflate", "zlevel": 7,
        "predictor": 2, "tiled": True, "blockxsize": 256, "blockysize": 256,
    }  # fmt: skip
    with rasterio.open(path, "w", **profile) as target:
        target.write(values, 1)


def _cell_reflectance(land: Landscape, variants: dict[str, NDArray[np.float32]]) -> Field:
    """float32 cells of one band: open land as a blend of grass and soils, other covers between their variants."""
    result = np.zeros(land.cover.shape, np.float32)

    def between(code: int, where: NDArray[np.bool_]) -> Field:
        values = variants[COVERS[code]]
        return np.asarray(np.interp(land.vigour[where], np.linspace(0, 1, len(values)), values), dtype=np.float32)

    open_land = (land.cover >= GRASS) & (land.cover <= SAND)
    for share, code in zip(land.blend, (GRASS, CLAY, SAND), strict=True):
        result[open_land] += share[open_land] * between(code, open_land)
    for code in (PASTURE, WOODLAND, ROOFS, WATER):
        chosen = land.cover == code
        result[chosen] = between(code, chosen)
    return result


def _texture(rng: np.random.Generator, land: Landscape) -> Field:
    """Brightness of each cell relative to its cover's mean: slow drifts, grain of the cover, leaf and roof glints."""
    grain = np.zeros(8, np.float32)
    grain[list(COVERS)] = [0.05, 0.13, 0.07, 0.06, 0.05, 0.14, 0.02]
    drift = 0.08 * smooth_noise(rng, 380) + 0.04 * smooth_noise(rng, 90)
    # Roofs differ from one square of nine cells to the next, about the size of a lot.
    lots = rng.random((CELL_ROWS // 9 + 1, CELL_COLS // 9 + 1), dtype=np.float32).repeat(9, axis=0).repeat(9, axis=1)
    roofs = np.where(land.cover == ROOFS, 0.5 * (lots[:CELL_ROWS, :CELL_COLS] - 0.5), 0)
    noise = rng.standard_normal(land.cover.shape, dtype=np.float32)
    return np.asarray(np.clip(1 + drift + roofs + grain[land.cover] * noise, 0.3, 1.9), dtype=np.float32)


def _spread(cells: Field, pixel_m: int) -> Field:
    """Cells blurred by the instrument, then averaged over each pixel."""
    step = int(pixel_m / CELL_M)
    blurred = ndimage.gaussian_filter(cells, 0.40 * step)
    return np.asarray(blurred.reshape(CELL_ROWS // step, step, CELL_COLS // step, step).mean(axis=(1, 3)))


def _digitise(rng: np.random.Generator, reflectance: Field, pixel_m: int) -> NDArray[np.uint16]:
    noise = rng.standard_normal(reflectance.shape, dtype=np.float32) * (NOISE + 0.01 * reflectance)
    stored: NDArray[np.uint16] = np.clip(np.rint((reflectance + noise - OFFSET) / SCALE), 1, 65535).astype(np.uint16)
    stored[_outside_swath(reflectance.shape, pixel_m)] = 0
    return stored


def _outside_swath(shape_yx: tuple[int, ...], pixel_m: int) -> NDArray[np.bool_]:
    """The slanting edge of the swath cuts off the south-eastern corner."""
    rows, cols = np.indices(shape_yx[:2])
    return np.asarray((CELL_COLS * CELL_M - (cols + 0.5) * pixel_m) * 3.2 < (rows + 0.5) * pixel_m - 4900)


def _clouds(rng: np.random.Generator) -> tuple[Field, Field]:
    """(opacity, shadow), float32 0..1 on cells: ragged cumulus and its shadow on the ground."""
    y, x = (np.indices((CELL_ROWS, CELL_COLS), dtype=np.float32) + 0.5) * CELL_M
    ragged = smooth_noise(rng, 240) * 0.22 + smooth_noise(rng, 80) * 0.10 + smooth_noise(rng, 30) * 0.04
    density = np.zeros_like(x)
    for cx, cy, radius in CLOUDS_XYR_M:
        density = np.maximum(density, 1.25 - np.hypot(x - cx, (y - cy) * 1.25) / radius)
    opacity = np.clip(2.2 * (density + ragged * (density > 0.02) - 0.25), 0, 0.97)
    shift = (round(SHADOW_SHIFT_XY_M[1] / CELL_M), round(SHADOW_SHIFT_XY_M[0] / CELL_M))
    shadow = ndimage.gaussian_filter(ndimage.shift(opacity, shift, order=0), 3)
    return opacity.astype(np.float32), shadow.astype(np.float32)


def _mask(rng: np.random.Generator, opacity: Field, shadow: Field) -> NDArray[np.uint8]:
    """The mask as a processor would deliver it: a little generous around clouds, blind to the faintest haze."""
    step = int(COARSE_M / CELL_M)
    block = (CELL_ROWS // step, step, CELL_COLS // step, step)
    opaque, dark = opacity.reshape(block).mean(axis=(1, 3)), shadow.reshape(block).mean(axis=(1, 3))
    mask = np.full(opaque.shape, CLEAR, np.uint8)
    mask[ndimage.binary_dilation(dark > 0.15, iterations=1)] = SHADOW
    mask[ndimage.binary_dilation(opaque > 0.02, iterations=2)] = THIN_CLOUD
    mask[opaque > 0.35] = CLOUD
    mask[_outside_swath(mask.shape, COARSE_M)] = NO_OBSERVATION
    return mask


def _truth(land: Landscape) -> tuple[NDArray[np.uint8], Field]:
    """The cover with the largest share of each 10 m pixel; a tie goes to the one that also surrounds the pixel."""
    step = int(FINE_M / CELL_M)
    shares = []
    for code in COVERS:
        is_code = (land.cover == code).astype(np.float32)
        around = ndimage.uniform_filter(is_code, 3 * step)
        both = (is_code + 1e-3 * around).reshape(CELL_ROWS // step, step, CELL_COLS // step, step).mean(axis=(1, 3))
        shares.append(both)
    stack = np.stack(shares)
    codes = np.array(list(COVERS), np.uint8)
    return codes[stack.argmax(axis=0)], np.clip(np.floor(stack.max(axis=0) * 100) / 100, 0, 1).astype(np.float32)
