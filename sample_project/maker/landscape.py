"""The invented Sorrel Basin as cells of 5 m: which cover each cell is, and what it reflects.

All arrays lie on the cells of `terrain`. Each painter lays its covers over those painted before.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from maker import terrain
from maker.terrain import CELL_COLS, CELL_M, DAM_X_M, Field, Terrain, rough_noise, smooth_noise

Chosen = NDArray[np.bool_]

PASTURE, WOODLAND, GRASS, CLAY, SAND, ROOFS, WATER = range(1, 8)
COVERS: Final = {
    PASTURE: "Irrigated pasture", WOODLAND: "Woodland", GRASS: "Dry grass", CLAY: "Clay loam", SAND: "Sandy soil",
    ROOFS: "Roofs and paving", WATER: "Water",
}  # fmt: skip

# Strips of parcels beside the river: distances of their edges from its middle, negative on the northern bank.
STRIPS_M: Final = (-900.0, -640.0, -455.0, -300.0, -165.0, -45.0, 45.0, 150.0, 270.0, 430.0, 610.0, 900.0)
PIVOTS_XYR_M: Final = ((3330, 1560, 330), (4130, 1490, 260), (5930, 4940, 300), (2700, 4560, 235))
FARM_DAMS_XYR_M: Final = ((5200, 880, 46), (1450, 5080, 62), (6270, 2180, 55), (3300, 5420, 40))
TOWN_XY_M: Final = (4700.0, 4130.0)
TOWN_TURN: Final = 0.32  # radians by which the streets are turned
HOUSE_LOT_M, YARD_LOT_M = 55.0, 110.0
# Dry grass, clay loam and sandy soil in a ploughed, a sandy and a resting parcel, and on the balks between parcels.
PLOUGHED, SANDY, RESTING, BALK = (0.08, 0.84, 0.08), (0.10, 0.15, 0.75), (0.82, 0.14, 0.04), (0.60, 0.25, 0.15)


@dataclass(frozen=True, slots=True)
class Landscape:
    """cover: uint8 numbers of COVERS, (rows, cols). vigour: float32 0..1, where a cell lies between the variants of its
    cover. blend: float32 (3, rows, cols), shares of dry grass, clay loam and sandy soil in open land. shade: float32
    illumination relative to flat ground. The painters write into the first three."""

    cover: NDArray[np.uint8]
    vigour: Field
    blend: Field
    shade: Field

    def paint(self, where: Chosen, cover: int, vigour: Field | float | None = None) -> None:
        """Cover some cells; `vigour` is one number or a whole field, None leaves it as it was."""
        self.cover[where] = cover
        if vigour is not None:
            self.vigour[where] = np.broadcast_to(np.asarray(vigour, np.float32), where.shape)[where]

    def mix(self, where: Chosen, shares: tuple[float, float, float]) -> None:
        """Cover some cells with open land of one mixture, named by its largest share."""
        self.blend[:, where] = np.array(shares, np.float32)[:, None]
        self.cover[where] = GRASS + int(np.argmax(shares))

    def crop(self, box: tuple[slice, slice]) -> Landscape:
        """A view of some rows and columns; painting it paints this."""
        return Landscape(self.cover[box], self.vigour[box], self.blend[:, box[0], box[1]], self.shade[box])


def build(rng: np.random.Generator) -> Landscape:
    """The whole landscape."""
    place = terrain.build(rng)
    land = _open_land(rng, place)
    for painter in (_woods, _fields, _pivots, _water, _town, _roads, _farmsteads):
        painter(rng, land, place)
    return land


def _open_land(rng: np.random.Generator, place: Terrain) -> Landscape:
    """Dry grass, clay loam and sandy soil grade into each other: grass thins out, soil coarsens."""
    high = np.tanh((place.height - 45) / 20)
    grass = 0.62 + 0.42 * rough_noise(rng, 620) + 0.10 * smooth_noise(rng, 40) + 0.10 * high
    coarse = 0.38 + 0.34 * rough_noise(rng, 1100, 4) + 0.05 * smooth_noise(rng, 60)
    # Dry washes carry sand down to the river; the larger the catchment, the wider.
    width = np.clip((np.log10(place.drained) - 2.3) / 1.2, 0, 1)
    wash = np.clip(2.6 * ndimage.gaussian_filter(width, 2.5) * (1 + 0.5 * smooth_noise(rng, 150)), 0, 1)
    grass_share = np.clip(1 / (1 + np.exp(-14.0 * (grass - 0.5))) - wash, 0, 1)
    sand_share = np.clip(1 / (1 + np.exp(-12.0 * (coarse - 0.5))) + wash, 0, 1)
    blend = np.stack([grass_share, (1 - grass_share) * (1 - sand_share), (1 - grass_share) * sand_share])
    vigour = np.clip(0.5 + 0.25 * rough_noise(rng, 420), 0, 1)
    cover = (GRASS + blend.argmax(axis=0)).astype(np.uint8)
    return Landscape(cover, vigour.astype(np.float32), blend.astype(np.float32), terrain.shade(place.height))


def _woods(rng: np.random.Generator, land: Landscape, place: Terrain) -> None:
    """Closed woods on the slopes that face south and along the river, single trees in the grass between."""
    down_y, _ = np.gradient(ndimage.gaussian_filter(place.height, 12.0), CELL_M)
    moist = rough_noise(rng, 520) - 2.2 * np.clip(down_y, -0.4, 0.4) + 0.9 * np.exp(-((place.river / 70) ** 2))
    crowns = rng.random(land.cover.shape, dtype=np.float32)
    density = 1 / (1 + np.exp(-9.0 * (moist - 1.05)))
    trees = (density > 0.03 + 0.94 * crowns) | ((crowns < 0.018) & (moist > -0.6))
    land.paint(trees, WOODLAND, np.clip(1 - density + 0.25 * rng.standard_normal(land.cover.shape), 0, 1))


def _fields(rng: np.random.Generator, land: Landscape, place: Terrain) -> None:
    """Irrigated parcels on the valley floor: strips parallel to the river, cut across it at uneven widths."""
    floor = (place.river > 45) & (place.downstream > DAM_X_M + 120) & (place.height < 25 + 4 * smooth_noise(rng, 300))
    strip = np.digitize(place.across, STRIPS_M)
    parcels, balks = np.zeros(land.cover.shape, np.int32), np.zeros(land.cover.shape, bool)
    for number in range(1, len(STRIPS_M)):
        cuts = np.cumsum(rng.uniform(120, 420, 60)) + DAM_X_M
        skewed = place.downstream + rng.uniform(-0.25, 0.25) * (place.across - STRIPS_M[number - 1])
        parcel = np.digitize(skewed, cuts)
        here = floor & (strip == number)
        balk = np.abs(skewed - cuts[np.clip(parcel, 0, 59)]) < 6
        balk |= np.abs(place.across - STRIPS_M[number]) < 6
        parcels[here], balks[here] = (number * 100 + parcel + 1)[here], balk[here]
    base = int(rng.integers(2**32))
    for number, box in enumerate(ndimage.find_objects(parcels), start=1):
        if box is not None:
            # Each parcel has its own generator: one more or less, by rounding elsewhere, leaves the others alone.
            _plant(np.random.default_rng((base, number)), land.crop(box), parcels[box] == number, balks[box])


def _plant(rng: np.random.Generator, land: Landscape, parcel: Chosen, balk: Chosen) -> None:
    """One parcel: watered, ploughed, sandy or resting; some have a hedge of trees along their edge."""
    if parcel.sum() < 120:
        return
    use = int(rng.choice(4, p=[0.69, 0.15, 0.06, 0.10]))
    edge, body = parcel & balk, parcel & ~balk
    land.paint(body, PASTURE, float(np.clip(rng.beta(1.6, 1.8) + 0.10 * rng.standard_normal(), 0, 1)))
    if use > 0:
        land.mix(body, (PLOUGHED, SANDY, RESTING)[use - 1])
    land.mix(edge, BALK)
    if rng.random() < 0.3:
        land.paint(edge & (rng.random(parcel.shape) < 0.75), WOODLAND)


def _pivots(rng: np.random.Generator, land: Landscape, place: Terrain) -> None:
    """Round fields watered by a turning arm, in sectors of different growth."""
    for cx, cy, radius in PIVOTS_XYR_M:
        start, ploughed = rng.uniform(-np.pi, np.pi), rng.random() < 0.6
        phase = (np.arctan2(place.y - cy, place.x - cx) - start) % (2 * np.pi)
        disc = np.hypot(place.x - cx, place.y - cy) < radius
        land.paint(disc, PASTURE, np.where(phase < 2.2, 0.15, 0.65))
        if ploughed:
            land.mix(disc & (phase > 5.0), PLOUGHED)


def _water(rng: np.random.Generator, land: Landscape, place: Terrain) -> None:
    """The reservoir floods all below its level, the river feeds and leaves it, some farm dams lie in the hills."""
    wobble = smooth_noise(rng, 160)
    west = place.x < DAM_X_M
    parts, _ = ndimage.label((place.height < 21) & west)
    lake_no = parts[int(terrain.river_y(np.array([900.0]))[0] / CELL_M), int(900 / CELL_M)]
    lake = ndimage.binary_opening(parts == lake_no, iterations=3)
    beach = ndimage.binary_dilation(lake, iterations=7) & west & (smooth_noise(rng, 120) > -0.3)
    bars = (place.river < 38 + 16 * wobble) & ~west & (smooth_noise(rng, 260) > 0.7)
    land.paint(beach | bars, SAND)
    water = lake | (place.river < 17 + 6 * wobble)
    depth = ndimage.gaussian_filter(lake.astype(np.float32), 14)
    for cx, cy, radius in FARM_DAMS_XYR_M:
        water |= np.hypot(place.x - cx, (place.y - cy) * 1.3) < radius * (1 + 0.15 * wobble)
    land.paint(water, WATER, np.clip(1.15 - depth, 0.25, 1))
    crest = (np.abs(place.x - DAM_X_M - 6) < 11) & (place.height < 26) & (place.river < 330)
    land.paint(crest, ROOFS, 0.9)


def _town(rng: np.random.Generator, land: Landscape, place: Terrain) -> None:
    """Streets on a turned grid, houses in gardens, and large flat roofs and yards in one quarter."""
    x, y = place.x - TOWN_XY_M[0], place.y - TOWN_XY_M[1]
    u = x * np.cos(TOWN_TURN) + y * np.sin(TOWN_TURN)
    v = y * np.cos(TOWN_TURN) - x * np.sin(TOWN_TURN)
    town = np.hypot(u / 620, v / 400) + 0.12 * smooth_noise(rng, 250) < 1
    yards = u > 130
    lot = np.where(yards, YARD_LOT_M, HOUSE_LOT_M)
    lot_u, lot_v = np.floor(u / lot).astype(int) % 64, np.floor(v / lot).astype(int) % 64
    in_u, in_v = np.mod(u, lot) / lot, np.mod(v, lot) / lot
    kind, tint, size, bare = rng.random((4, 64, 64), dtype=np.float32)[:, lot_u, lot_v]
    house = town & (np.abs(in_u - 0.55) < 0.24 + 0.16 * size) & (np.abs(in_v - 0.55) < 0.26 + 0.1 * tint)
    garden, green = town & ~house, smooth_noise(rng, 45)
    land.mix(garden & (bare < 0.5), RESTING)
    land.mix(garden & (bare >= 0.5), PLOUGHED)
    land.paint(garden & (green > 0.9), WOODLAND)
    land.paint(garden & (green < -0.9), PASTURE)
    sheds = np.where(tint < 0.45, 0.0, 0.95)
    homes = np.where(tint < 0.22, 0.05, 0.5)
    land.paint(house & (kind < 0.85), ROOFS, np.where(yards, sheds, homes))
    land.paint(town & (np.minimum(in_u, in_v) * lot < 9), ROOFS, 1.0)


def _roads(_: np.random.Generator, land: Landscape, place: Terrain) -> None:
    """Two sealed roads that meet near the town, with bridges, and a sandy track across the north."""
    x, y = place.x, place.y
    around_town = 260 * np.exp(-(((x - TOWN_XY_M[0]) / 500) ** 2))
    sealed = np.abs(y - (5350 - 0.52 * x + 120 * np.sin(x / 700) + around_town)) < 8
    northward = (np.abs(x - (4460 + 150 * np.sin(y / 640) + 0.05 * y)) < 8) & (y < TOWN_XY_M[1])
    track = np.abs(y - (1150 + 0.13 * x + 150 * np.sin(x / 480))) < 6
    land.paint(track & (land.cover != WATER) & (land.cover != PASTURE), SAND)
    land.paint(sealed | northward, ROOFS, 1.0)


def _farmsteads(rng: np.random.Generator, land: Landscape, place: Terrain) -> None:
    """Barns and yards among the fields of the valley."""
    for _ in range(16):
        along, across = rng.uniform(DAM_X_M + 200, CELL_COLS * CELL_M - 200), rng.choice([-1, 1]) * rng.uniform(90, 420)
        half_length, half_width, roof = rng.uniform(18, 42), rng.uniform(14, 34), rng.choice([0.0, 0.4, 0.5])
        yard = (np.abs(place.downstream - along) < half_length) & (np.abs(place.across - across) < half_width)
        land.paint(yard & (land.cover != WATER), ROOFS, float(roof))
