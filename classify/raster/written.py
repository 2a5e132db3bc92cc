"""Read back what GDAL has written: when a disk fills, it says so in some places and ends as if all were well in others.

To be called on the temporary file inside `files.replacing`, which turns the OSError raised here into an OutputError.
"""

from __future__ import annotations

import errno
import sqlite3
from collections.abc import Callable
from contextlib import closing
from pathlib import Path

import numpy as np
import rasterio
from numpy.typing import NDArray
from rasterio.errors import RasterioError

from classify.raster.grid import Grid, Window

_ROWS_PX = 512


def check_raster(path: Path, grid: Grid, values: Callable[[Window], NDArray[np.uint8]]) -> None:
    """Raise OSError unless the one band at `path` holds `values` (of a window of `grid`, uint8 (h, w)), and its
    overviews can be read."""
    try:
        with rasterio.open(path) as written:
            levels = len(written.overviews(1))
            for window in grid.blocks(_ROWS_PX):
                if not np.array_equal(written.read(1, window=window.to_rasterio()), values(window)):
                    raise _cut_short()
        for level in range(levels):
            with rasterio.open(path, overview_level=level) as overview:
                for _, block in overview.block_windows(1):
                    overview.read(1, window=block)
    except RasterioError:
        raise _cut_short() from None


def check_layer(path: Path, layer: str, count: int) -> None:
    """Raise OSError unless the GeoPackage is sound and has so many features in `layer` and in its spatial index."""
    try:
        with closing(sqlite3.connect(f"{path.absolute().as_uri()}?mode=ro&immutable=1", uri=True)) as file:
            whole = file.execute("PRAGMA quick_check").fetchone()[0] == "ok"
            tables = (layer, f"rtree_{layer}_geom")
            counts = [file.execute(f'SELECT count(*) FROM "{table}"').fetchone()[0] for table in tables]
    except sqlite3.Error:
        whole, counts = False, []
    if not whole or counts != [count, count]:
        raise _cut_short()


def _cut_short() -> OSError:
    return OSError(errno.EIO, "it cannot be read back as it was written, as happens when a disk is full")
