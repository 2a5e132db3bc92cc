"""Pictures and spectra around a point, made from the scene alone: no map is ever opened here."""

from __future__ import annotations

import io
import threading
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np
from numpy.typing import NDArray
from PIL import Image

from classify.raster.grid import Window
from classify.raster.scene import Scene

# Roles tried for red, green and blue of the screen, by name of the view; the first set that the scene has is taken.
_VIEWS: dict[str, tuple[tuple[str, str, str], ...]] = {
    "Natural colour": (("red", "green", "blue"),),
    "False colour": (("nir", "red", "green"), ("nir_narrow", "red", "green"), ("nir", "green", "blue")),
    "Short-wave infrared": (("swir_2", "nir", "red"), ("swir_1", "nir", "red")),
}
_SIDES_PX = (15, 31, 63, 127, 255)
_FARTHEST_PX = 512
_NO_DATA = (38, 44, 47)
# Windows and their side for the scene's own range of values.
_PROBES, _PROBE_PX = 7, 48


@dataclass(frozen=True, slots=True)
class View:
    """One way to look at one date. roles: layers shown as red, green and blue."""

    key: str
    title: str
    date: str
    roles: tuple[str, str, str]


@dataclass(frozen=True, slots=True)
class Look:
    """How a picture is wanted. side_px: pixels across; shift_yx: of its middle from the point, in pixels; low and high:
    percentiles of the scene's values that become black and white; local: percentiles of the picture itself instead."""

    side_px: int = 31
    shift_yx: tuple[int, int] = (0, 0)
    low: float = 2.0
    high: float = 98.0
    local: bool = False

    @property
    def is_sound(self) -> bool:
        """Whether a page of ours could have asked for it."""
        near = all(abs(s) <= _FARTHEST_PX for s in self.shift_yx)
        return self.side_px in _SIDES_PX and near and 0 <= self.low < self.high <= 100


class Pictures:
    """Pictures of a scene. Thread-safe: every thread reads through its own reader; recent pictures are kept."""

    def __init__(self, scene: Scene) -> None:
        self.scene = scene
        self._local = threading.local()
        self.views = {view.key: view for view in _views(scene)}
        self._range = self._probe()
        self.picture = lru_cache(maxsize=256)(self._picture)
        self.spectrum = lru_cache(maxsize=1024)(self._spectrum)

    @property
    def sides_px(self) -> tuple[int, ...]:
        """Widths that pictures come in, in pixels."""
        return _SIDES_PX

    def _picture(self, row: int, col: int, view: str, look: Look) -> bytes:
        """PNG (side_px x side_px, one picture pixel per scene pixel) around a pixel of the grid."""
        roles, half = self.views[view].roles, look.side_px // 2
        top, left = row + look.shift_yx[0] - half, col + look.shift_yx[1] - half
        layers = self._reader().read(Window(top, left, look.side_px, look.side_px), roles)
        planes = [self._bytes(layers[role], role, look) for role in roles]
        missing = np.any([np.isnan(layers[role]) for role in roles], axis=0)
        image = np.stack(planes, axis=-1)
        image[missing] = _NO_DATA
        out = io.BytesIO()
        Image.fromarray(image).save(out, "PNG", compress_level=1)
        return out.getvalue()

    def _spectrum(self, row: int, col: int) -> list[dict[str, Any]]:
        """Reflectance against wavelength at a pixel, one entry per date: date, bands of role, wavelength_nm and value
        (None where invalid)."""
        bands = [band for band in self.scene.bands if band.date is not None]
        layers = self._reader().read(Window(row, col, 1, 1), [band.role for band in bands])
        dates: dict[str, list[dict[str, Any]]] = {}
        for band in bands:
            value = float(layers[band.role][0, 0])
            dates.setdefault(band.date or "", []).append(
                {"role": band.role.partition("@")[0], "wavelength_nm": band.wavelength_nm,
                 "value": round(value, 4) if np.isfinite(value) else None}
            )  # fmt: skip
        return [
            {"date": date, "bands": sorted(found, key=lambda b: (b["wavelength_nm"] is None, b["wavelength_nm"] or 0))}
            for date, found in dates.items()
        ]

    def _reader(self) -> Any:  # noqa: ANN401 - a SceneReader, kept per thread
        if not hasattr(self._local, "reader"):
            self._local.reader = self.scene.open()
        return self._local.reader

    def _bytes(self, layer: NDArray[np.float32], role: str, look: Look) -> NDArray[np.uint8]:
        if look.local and np.isfinite(layer).any():
            low, high = np.nanpercentile(layer, [look.low, look.high])
        else:
            known = self._range[role]
            low, high = np.interp([look.low, look.high], np.linspace(0, 100, len(known)), known)
        share = (np.nan_to_num(layer, nan=0.0) - low) / max(high - low, 1e-6)
        return np.asarray(np.clip(np.round(share * 255), 0, 255), dtype=np.uint8)

    def _probe(self) -> Mapping[str, NDArray[np.float64]]:
        """Percentiles 0..100 of each layer shown, from windows spread over the scene: one range for all points, so that
        the same ground looks the same everywhere."""
        roles = sorted({role for view in self.views.values() for role in view.roles})
        grid = self.scene.grid
        values: dict[str, list[NDArray[np.float32]]] = {role: [] for role in roles}
        for row in np.linspace(0, max(grid.height - _PROBE_PX, 0), _PROBES).astype(int):
            for col in np.linspace(0, max(grid.width - _PROBE_PX, 0), _PROBES).astype(int):
                layers = self._reader().read(Window(int(row), int(col), _PROBE_PX, _PROBE_PX), roles)
                for role in roles:
                    layer = layers[role]
                    values[role].append(layer[np.isfinite(layer)])
        found: dict[str, NDArray[np.float64]] = {}
        for role in roles:
            sample = np.concatenate(values[role])
            found[role] = (
                np.percentile(sample, np.arange(101)).astype(np.float64) if len(sample) else np.linspace(0, 1, 101)
            )
        return found


def _views(scene: Scene) -> list[View]:
    roles = set(scene.roles)
    dates = ["", *sorted({role.partition("@")[2] for role in roles if "@" in role})]
    views: list[View] = []
    for date in dates:
        end = f"@{date}" if date else ""
        for title, choices in _VIEWS.items():
            found = next((c for c in choices if all(role + end in roles for role in c)), None)
            if found is not None:
                first, second, third = (role + end for role in found)
                views.append(View(f"v{len(views)}", title, date, (first, second, third)))
    if not views:
        plain = [role for role in scene.roles if "@" not in role] or list(scene.roles)
        views.append(View("v0", "First bands", "", _three(plain)))
    return views


def _three(roles: Sequence[str]) -> tuple[str, str, str]:
    picked = [roles[min(i, len(roles) - 1)] for i in (2, 1, 0)]
    return picked[0], picked[1], picked[2]
