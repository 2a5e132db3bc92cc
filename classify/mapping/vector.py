"""The patches of a class map as polygons in a GeoPackage, read in strips: no seam shows, memory holds a strip.

Patches hang together over pixel edges. Those that touch the lower edge of a strip are kept until the strips below have
brought the rest of them; all others are written at once. Shapes are put together in whole pixels, where a union is
exact, and placed on the map at the end.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import geopandas as gpd
import numpy as np
import pyogrio
import shapely
from numpy.typing import NDArray
from rasterio.features import shapes
from shapely.affinity import affine_transform
from shapely.geometry import shape

from classify.files import replacing, write_errors
from classify.mapping.blocks import NO_CLASS, rounded_areas_m2
from classify.mapping.byte_raster import ByteRaster
from classify.mapping.patches import find_patches
from classify.progress import SILENT, Progress
from classify.raster.grid import Grid, Window
from classify.raster.written import check_layer
from classify.settings import ClassSettings
from classify.settings.model import M2_PER_UNIT

_LAYER = "cover"
_STRIP_PIXELS = 8_000_000
_WRITE_EVERY = 20_000
# GeoPackage stores when it was written; a fixed date keeps the same map the same bytes.
_FIXED_DATE = {"OGR_CURRENT_DATE": "2000-01-01T00:00:00.000Z"}


@dataclass
class _Patch:
    """A patch so far: its class, its shapes in (column, row), pixels and ground area."""

    code: int
    parts: list[Any] = field(default_factory=list)
    pixels: int = 0
    area_m2: float = 0.0

    def take(self, other: _Patch) -> None:
        self.parts += other.parts
        self.pixels += other.pixels
        self.area_m2 += other.area_m2


def write_polygons(
    source: ByteRaster, target: Path, classes: Sequence[ClassSettings], unit: str, progress: Progress = SILENT
) -> None:
    """Write layer "cover" with code, name, pixels, area (ground area in `unit`) per patch. Raises OutputError."""
    names = {c.code: c.name for c in classes}
    area_column = f"area_{unit}"
    waiting: list[_Patch] = []

    def flush(path: Path) -> int:
        frame = gpd.GeoDataFrame(
            {
                "code": [p.code for p in waiting],
                "name": [names.get(p.code, "") for p in waiting],
                "pixels": [p.pixels for p in waiting],
                area_column: [p.area_m2 / M2_PER_UNIT[unit] for p in waiting],
            },
            geometry=[_placed(p, source.grid) for p in waiting],
            crs=source.grid.crs,
        )
        with write_errors(target, RuntimeError):  # which every error of pyogrio is
            pyogrio.write_dataframe(
                frame, path, layer=_LAYER, driver="GPKG", append=path.exists(), geometry_type="Polygon"
            )
        waiting.clear()
        return len(frame)

    before = {key: pyogrio.get_gdal_config_option(key) for key in _FIXED_DATE}
    with replacing(target) as temporary:
        try:
            pyogrio.set_gdal_config_options(_FIXED_DATE)
            written = 0
            for patch in _patches(source, progress):
                waiting.append(patch)
                if len(waiting) >= _WRITE_EVERY:
                    written += flush(temporary)
            if waiting or not temporary.exists():
                written += flush(temporary)
            check_layer(temporary, _LAYER, written)
        finally:
            pyogrio.set_gdal_config_options(before)


def _patches(source: ByteRaster, progress: Progress) -> Iterator[_Patch]:
    """Every patch of a class, once, as soon as it is whole."""
    grid = source.grid
    rows = max(1, _STRIP_PIXELS // grid.width)
    starts = range(0, grid.height, rows)
    open_patches: list[_Patch] = []
    # For each column, which open patch reaches the bottom of the strips so far; -1 for none.
    bottom = np.full(grid.width, -1, dtype=np.int64)
    with progress.task("Drawing polygons", len(starts)) as task:
        for row in starts:
            window = Window(row, 0, min(rows, grid.height - row), grid.width)
            codes = source.read(window)
            labels, sizes_m2, classes = find_patches(codes, rounded_areas_m2(grid, window), False)
            here = _shapes_of(labels, sizes_m2, classes, row)
            root = _joined(open_patches, here, bottom, labels[0])
            bottom, open_patches, whole = _sorted_out(root, labels[-1], classes)
            yield from whole
            task.advance()
    yield from open_patches


def _shapes_of(
    labels: NDArray[np.int32], sizes_m2: NDArray[np.float64], classes: NDArray[np.uint8], row: int
) -> list[_Patch]:
    """The patches of one strip, by label; those of no data have no shape."""
    pixels = np.bincount(labels.ravel(), minlength=len(classes))
    found = [
        _Patch(int(code), [], int(count), float(size))
        for code, count, size in zip(classes, pixels, sizes_m2, strict=True)
    ]
    valid = classes[labels] != NO_CLASS
    for geometry, label in shapes(labels, mask=valid, connectivity=4):
        found[int(label)].parts.append(affine_transform(shape(geometry), (1, 0, 0, 1, 0, row)))
    return found


def _joined(
    open_patches: list[_Patch], here: list[_Patch], bottom: NDArray[np.int64], top: NDArray[np.int32]
) -> list[_Patch]:
    """For each label of the strip its patch, put together with open patches above that it touches.

    Open patches that nothing touches are appended: they are whole.
    """
    owner = list(range(len(open_patches) + len(here)))

    def find(index: int) -> int:
        while owner[index] != index:
            owner[index] = owner[owner[index]]
            index = owner[index]
        return index

    touching = np.flatnonzero(bottom >= 0)
    for above, label in sorted(set(zip(bottom[touching].tolist(), top[touching].tolist(), strict=True))):
        if open_patches[above].code == here[label].code:
            one, other = find(above), find(len(open_patches) + label)
            owner[max(one, other)] = min(one, other)
    all_patches = [*open_patches, *here]
    for index, patch in enumerate(all_patches):
        if (root := find(index)) != index:
            all_patches[root].take(patch)
    by_label = [all_patches[find(len(open_patches) + label)] for label in range(len(here))]
    return by_label + [patch for index, patch in enumerate(open_patches) if find(index) == index]


def _sorted_out(
    patches: list[_Patch], last_row: NDArray[np.int32], classes: NDArray[np.uint8]
) -> tuple[NDArray[np.int64], list[_Patch], list[_Patch]]:
    """Which open patch each column of the last row belongs to, the open patches, and those that are whole."""
    number: dict[int, int] = {}
    still_open: list[_Patch] = []
    bottom = np.full(len(last_row), -1, dtype=np.int64)
    for label in np.unique(last_row):
        if classes[label] == NO_CLASS:
            continue
        patch = patches[label]
        if id(patch) not in number:
            number[id(patch)] = len(still_open)
            still_open.append(patch)
        bottom[last_row == label] = number[id(patch)]
    unique = {id(patch): patch for patch in patches if patch.code != NO_CLASS and id(patch) not in number}
    return bottom, still_open, _in_reading_order(unique.values())


def _in_reading_order(patches: Iterable[_Patch]) -> list[_Patch]:
    return sorted(patches, key=lambda p: min((part.bounds[1], part.bounds[0]) for part in p.parts))


def _placed(patch: _Patch, grid: Grid) -> Any:  # noqa: ANN401 - a shapely polygon
    whole = patch.parts[0]
    if len(patch.parts) > 1:
        # Corners left where strips met are taken out again.
        whole = shapely.simplify(shapely.union_all(patch.parts), 0)
    t = grid.transform
    return affine_transform(whole, (t.a, t.b, t.d, t.e, t.c, t.f))
