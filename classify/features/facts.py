"""What features need to know of a scene besides its layers: wavelengths, the size of a pixel on the ground."""

from __future__ import annotations

import math
import re
from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray
from pyproj import Geod, Transformer

from classify.features.terrain import PixelVectors
from classify.raster.grid import Grid
from classify.raster.scene import Scene

# A step across a few pixels is long against rounding and short against the curvature of the ground.
_STEP_PX = 8


# Names that formulas give to bands by their wavelength.
NEAR_NM = re.compile(r"nm_(?P<nm>[0-9]{3,5})(@(?P<date>[A-Za-z0-9_]+))?")
NEAR_ENOUGH_NM = 10


@dataclass(frozen=True)
class SceneFacts:
    """wavelengths_nm: centre wavelength of layers that have one. ancillary: layers that are no reflectance bands.

    pixel_m: ground metres east and north of a step of one column, then of one row; None if unknown. shape_yx: rows and
    columns of the scene; None if unknown.
    """

    wavelengths_nm: Mapping[str, float] = field(default_factory=dict)
    ancillary: frozenset[str] = frozenset()
    pixel_m: PixelVectors | None = None
    shape_yx: tuple[int, int] | None = None

    def band_near(self, name: str) -> str | None:
        """The band that a name such as nm_531, or nm_531@wet, stands for: the nearest within 10 nm; None if none is."""
        match = NEAR_NM.fullmatch(name)
        if match is None:
            return None
        wanted, date = float(match["nm"]), match["date"] or ""
        apart = {role: abs(nm - wanted) for role, nm in self.wavelengths_nm.items() if role.partition("@")[2] == date}
        role = min(apart, key=lambda role: apart[role], default=None)
        return role if role is not None and apart[role] <= NEAR_ENOUGH_NM else None


NO_FACTS = SceneFacts()


def describe_band(name: str) -> str:
    """How to call a band that is missing."""
    match = NEAR_NM.fullmatch(name)
    return f"a band within {NEAR_ENOUGH_NM} nm of {match['nm']} nm" if match else f"band {name!r}"


def scene_facts(scene: Scene) -> SceneFacts:
    """The facts of a scene."""
    stored = {band.role for band in scene.bands}
    bands = {role: scene.band(role) for role in scene.roles if role in stored or _is_composite(scene, role)}
    return SceneFacts(
        {role: band.wavelength_nm for role, band in bands.items() if band.wavelength_nm is not None},
        frozenset(role for role in scene.roles if role not in bands or bands[role].date is None),
        ground_vectors_m(scene.grid),
        scene.grid.shape_yx,
    )


def _is_composite(scene: Scene, role: str) -> bool:
    return scene.composite is not None and role in scene.composite.roles


def ground_vectors_m(grid: Grid) -> PixelVectors:
    """Ground metres to true east and north of one column and of one row, on the ellipsoid, at the middle of the grid.

    Exact for that place. A scene in degrees that spans a degree of latitude is off by about a hundredth at its edges.
    """
    middle_row, middle_col = np.array([grid.height // 2]), np.array([grid.width // 2])
    to_lonlat = Transformer.from_crs(grid.crs.to_wkt(), "EPSG:4326", always_xy=True)
    ellipsoid = to_lonlat.source_crs.ellipsoid if to_lonlat.source_crs else None
    geod = Geod(a=ellipsoid.semi_major_metre, b=ellipsoid.semi_minor_metre) if ellipsoid else Geod(ellps="WGS84")

    def lonlat(row: NDArray[np.int64], col: NDArray[np.int64]) -> tuple[float, float]:
        x, y = grid.xy(row, col)
        lon, lat = to_lonlat.transform(x[0], y[0])
        return float(lon), float(lat)

    start = lonlat(middle_row, middle_col)
    vectors: list[float] = []
    for rows, cols in ((0, _STEP_PX), (_STEP_PX, 0)):
        azimuth, _, distance = geod.inv(*start, *lonlat(middle_row + rows, middle_col + cols))
        bearing = math.radians(azimuth)
        vectors += [distance * math.sin(bearing) / _STEP_PX, distance * math.cos(bearing) / _STEP_PX]
    return vectors[0], vectors[1], vectors[2], vectors[3]
