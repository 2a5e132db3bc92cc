"""Training polygons drawn as by hand on the scene, and the faults planted among them."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Final

import geopandas as gpd
import numpy as np
from numpy.typing import NDArray
from rasterio.features import geometry_mask, rasterize
from scipy import ndimage
from shapely import affinity
from shapely.geometry import Polygon

from maker.landscape import CLAY, COVERS, GRASS, PASTURE, ROOFS, SAND, WATER, WOODLAND
from maker.scene import CRS, FINE_M, SHADOW, MadeScene, transform

TRAINING_CRS: Final = "EPSG:4326"
WANTED: Final = {PASTURE: 14, WOODLAND: 13, GRASS: 18, CLAY: 15, SAND: 14, ROOFS: 12, WATER: 8}
REACH_M: Final = {PASTURE: 85, WOODLAND: 75, GRASS: 95, CLAY: 80, SAND: 70, ROOFS: 40, WATER: 60}
SPACING_PX: Final = 14  # no other polygon of the class has its middle nearer than this


@dataclass(frozen=True, slots=True)
class Drawn:
    """One polygon on the scene's CRS with the cover that its drawer gives it."""

    shape: Polygon
    code: int


def draw(rng: np.random.Generator, made: MadeScene) -> list[Drawn]:
    """Faultless polygons, class by class, well spread, each inside one patch of its cover."""
    clear = ndimage.binary_erosion(made.clear, iterations=4)
    polygons: list[Drawn] = []
    # Lots for every pixel beforehand: one that rounding on another machine covers otherwise changes no other polygon.
    lots = rng.random(made.truth.shape)
    for code, count in WANTED.items():
        # A drawer picks what looks like the cover throughout: the same after the majority of the neighbours.
        looks = ndimage.median_filter((made.truth == code).astype(np.uint8), 3).astype(bool)
        depth = ndimage.distance_transform_edt(looks & clear)
        wanted_depth = 2.0 if code == ROOFS else 3.0
        free = depth >= wanted_depth
        for _ in range(count):
            row, col = divmod(int(np.argmax(np.where(free, lots, -1))), free.shape[1])
            hand = np.random.default_rng((row, col))
            polygons.append(Drawn(_outline(hand, looks & clear, (row, col), REACH_M[code]), code))
            free[max(0, row - SPACING_PX) : row + SPACING_PX, max(0, col - SPACING_PX) : col + SPACING_PX] = False
    # In the order in which someone working through the scene from north to south would have drawn them.
    return sorted(polygons, key=lambda drawn: (-drawn.shape.centroid.y // 900, drawn.shape.centroid.x))


def _outline(rng: np.random.Generator, inside: NDArray[np.bool_], start: tuple[int, int], reach_m: float) -> Polygon:
    """Corners at uneven directions and distances, none quite as far as the patch reaches."""
    row, col = start[0] + rng.uniform(0.2, 0.8), start[1] + rng.uniform(0.2, 0.8)
    corners = int(rng.integers(6, 11))
    turns = (np.arange(corners) + rng.uniform(-0.3, 0.3, corners)) * 2 * np.pi / corners
    reach_px = reach_m / FINE_M * rng.uniform(0.55, 1.0)
    lean, slim = rng.uniform(0, np.pi), rng.uniform(1.0, 1.75)
    points = []
    for turn in turns:
        length, limit = 0.6, reach_px / np.hypot(np.cos(turn - lean) / slim, np.sin(turn - lean) * slim)
        while length < limit:
            r, c = int(row + np.sin(turn) * length), int(col + np.cos(turn) * length)
            if not (0 <= r < inside.shape[0] and 0 <= c < inside.shape[1] and inside[r, c]):
                break
            length += 0.25
        length = max(0.9, length * rng.uniform(0.72, 0.95))
        points.append(transform(FINE_M) @ (col + np.cos(turn) * length, row + np.sin(turn) * length))
    return Polygon(points)


def plant_faults(polygons: list[Drawn], made: MadeScene) -> tuple[list[Drawn], list[dict[str, Any]]]:
    """The same polygons with three faults, and what they are. Numbers count polygons from 1 in the file's order."""
    faulty = list(polygons)
    # Mislabelled: a polygon of clay loam of middling size is called dry grass, like it up to the near infrared.
    clays = [n for n, drawn in enumerate(faulty) if drawn.code == CLAY]
    wrong = sorted(clays, key=lambda n: faulty[n].shape.area)[len(clays) // 2]
    faulty[wrong] = Drawn(faulty[wrong].shape, GRASS)
    # Overlap: a polygon of sandy soil laid half over one of dry grass.
    grasses = [n for n, drawn in enumerate(faulty) if drawn.code == GRASS and n != wrong]
    under = max(grasses, key=lambda n: faulty[n].shape.area)
    shape = faulty[under].shape
    small, width = affinity.scale(shape, 0.8, 0.7), shape.bounds[2] - shape.bounds[0]
    shifted = (affinity.translate(small, part * width, 0) for part in np.arange(0.5, 0.0, -0.05))
    moved = next(other for other in shifted if other.intersection(shape).area > 0.4 * other.area)
    faulty.append(Drawn(moved, SAND))
    cloudy = _half_under_cloud(made)
    faulty.append(cloudy)
    faults: list[dict[str, Any]] = [
        {"fault": "mislabelled", "polygon": wrong + 1, "given": COVERS[GRASS], "true": COVERS[CLAY]},
        {"fault": "overlap with conflicting labels", "polygon": len(faulty) - 1, "given": COVERS[SAND],
         "overlaps": under + 1, "overlaps_given": COVERS[GRASS],
         "overlap_share": round(moved.intersection(shape).area / moved.area, 3)},
        {"fault": "half under cloud", "polygon": len(faulty), "given": COVERS[cloudy.code],
         "masked_share": round(masked_share(cloudy.shape, made), 3)},
    ]  # fmt: skip
    return faulty, faults


def masked_share(shape: Polygon, made: MadeScene) -> float:
    """Share of the pixels whose centre the shape holds that the mask rejects."""
    inside = geometry_mask([shape], made.truth.shape, transform(FINE_M), invert=True)
    return float((~made.clear)[inside].mean())


def _half_under_cloud(made: MadeScene) -> Drawn:
    """A polygon across the edge of a cloud's mask, on the ground where it lies deepest in one open cover."""
    cloud = ~made.clear & ~(made.mask == SHADOW).repeat(2, axis=0).repeat(2, axis=1)
    edge = made.clear & ndimage.binary_dilation(cloud)
    best, place = 0.0, (0, 0, GRASS)
    for code in (GRASS, CLAY, PASTURE):
        depth = ndimage.distance_transform_edt(made.truth == code) * edge
        # Away from the scene's rim and the swath's edge, where the mask says "no observation" and not "cloud".
        depth[:, -130:] = 0
        if depth.max() > best:
            best = float(depth.max())
            place = *divmod(int(depth.argmax()), depth.shape[1]), code
    row, col, code = place
    radius = min(best * 0.9, 9.0)
    outline = ((0.95, 0.2), (0.8, 1.1), (1.0, 2.0), (0.85, 3.0), (0.95, 3.9), (0.75, 4.7), (1.0, 5.6))
    corners = [(col + 0.5 + radius * far * np.cos(t), row + 0.5 + radius * far * np.sin(t)) for far, t in outline]
    return Drawn(Polygon([transform(FINE_M) @ corner for corner in corners]), code)


def frame(polygons: list[Drawn]) -> gpd.GeoDataFrame:
    """The table of training.gpkg: `site` S001 ... in the file's order, `cover`, geometry in degrees."""
    columns = {"site": [f"S{n:03d}" for n in range(1, len(polygons) + 1)], "cover": [COVERS[p.code] for p in polygons]}
    table = gpd.GeoDataFrame(columns, geometry=[p.shape for p in polygons], crs=CRS).to_crs(TRAINING_CRS)
    return table


def labels(polygons: list[Drawn], made: MadeScene) -> NDArray[np.uint8]:
    """uint8 (rows, cols): the cover that polygons give to clear pixels, 0 elsewhere."""
    shapes = [(drawn.shape, drawn.code) for drawn in polygons]
    burnt = rasterize(shapes, made.truth.shape, transform=transform(FINE_M), dtype="uint8")
    return np.where(made.clear, burnt, 0).astype(np.uint8)
