"""What is computed of one block, on whatever machine: layers of the map and a tally of its pixels and ground areas.

A pixel's result does not depend on the block it is computed in, nor on the thread or machine.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, field
from queue import Empty, SimpleQueue
from typing import Any, Literal, NamedTuple

import numpy as np
from numpy.typing import NDArray

from classify.errors import DataError
from classify.models import TrainedModel
from classify.raster.area import ground_areas_m2
from classify.raster.grid import Grid, Window
from classify.raster.scene import Scene, SceneReader

LayerName = Literal["cover", "confidence", "reach"]
Layers = Mapping[LayerName, NDArray[np.uint8]]

NO_CLASS = 0
NO_PERCENT = 255
NO_VALUE: Mapping[LayerName, int] = {"cover": NO_CLASS, "confidence": NO_PERCENT, "reach": NO_PERCENT}
# Reach in percent up to this is within what the training data cover.
WITHIN_REACH = 100
# Pixels labelled at a time; between such parts a block can be stopped. A second with the slowest models.
_ROWS = 16_384


class Stopped(Exception):  # noqa: N818 - not an error: someone asked for it
    """The work was asked to stop."""


class Count(NamedTuple):
    """Of one class code (0: no class): pixels, their ground area, and how many of them are beyond reach."""

    code: int
    pixels: int
    area_m2: float
    beyond: int


@dataclass(frozen=True, slots=True)
class Tally:
    """What a block holds: counts of the codes that occur. unreadable: what could not be read, or ""."""

    counts: tuple[Count, ...]
    unreadable: str = ""

    def to_json(self) -> dict[str, Any]:
        """Plain data."""
        return {"counts": self.counts, "unreadable": self.unreadable}

    @classmethod
    def from_json(cls, content: Mapping[str, Any]) -> Tally:
        """What `to_json` gave."""
        return cls(tuple(Count(*count) for count in content["counts"]), str(content["unreadable"]))


@dataclass(frozen=True, slots=True)
class Block:
    """One computed block: its number and window, layers uint8 (h, w) by name, and its tally."""

    number: int
    window: Window
    layers: Layers
    tally: Tally


@dataclass(frozen=True)
class BlockWork:
    """How blocks of one scene become blocks of its map. Can be sent to other machines.

    layers: which to make; always "cover". skip_unreadable: a block that cannot be read becomes no data and is counted.
    """

    model: TrainedModel
    scene: Scene
    layers: tuple[LayerName, ...] = ("cover",)
    skip_unreadable: bool = False
    _readers: SimpleQueue[SceneReader] = field(default_factory=SimpleQueue, compare=False, repr=False)

    def read(self, window: Window) -> dict[str, NDArray[np.float32]] | str:
        """Reflectance by role with the halo that the features need, or, if it may be skipped, why there is none.

        Raises DataError naming file and rows.
        """
        recipe = self.model.recipe
        try:
            with self._reader() as reader:
                return reader.read(window, recipe.needs, halo_px=recipe.halo_px)
        except DataError as error:
            if self.skip_unreadable:
                return str(error)
            raise

    def compute(
        self,
        number: int,
        window: Window,
        bands: dict[str, NDArray[np.float32]] | str,
        stopped: Callable[[], bool] = lambda: False,
    ) -> Block:
        """The block from what `read` gave. Raises Stopped soon after `stopped` says so."""
        layers = {name: np.full(window.shape_yx, NO_VALUE[name], dtype=np.uint8) for name in self.layers}
        if isinstance(bands, str):
            return Block(number, window, layers, self._tally(window, layers, bands))
        features = self.model.recipe.compute(bands)
        rows, cols = np.nonzero(np.isfinite(features).all(axis=0))
        for start in range(0, len(rows), _ROWS):
            if stopped():
                raise Stopped
            at = rows[start : start + _ROWS], cols[start : start + _ROWS]
            self._label(np.ascontiguousarray(features[:, at[0], at[1]].T), at, layers)
        return Block(number, window, layers, self._tally(window, layers))

    def close(self) -> None:
        """Close all files."""
        while not self._readers.empty():
            self._readers.get().close()

    def _label(
        self,
        pixels: NDArray[np.float32],
        at: tuple[NDArray[np.intp], NDArray[np.intp]],
        layers: Layers,
    ) -> None:
        if "confidence" in layers:
            codes, probabilities = self.model.predict_both(pixels)
            layers["confidence"][at] = np.rint(100 * probabilities.max(axis=1)).astype(np.uint8)
        else:
            codes = self.model.predict(pixels)
        layers["cover"][at] = codes
        if "reach" in layers and self.model.reach is not None:
            layers["reach"][at] = self.model.reach.percent(pixels)

    def _tally(self, window: Window, layers: Layers, unreadable: str = "") -> Tally:
        return tally(self.scene.grid, window, layers["cover"], layers.get("reach"), unreadable)

    @contextmanager
    def _reader(self) -> Iterator[SceneReader]:
        # A reader belongs to one thread at a time: an idle one is handed on, and opened only when there is none.
        try:
            reader = self._readers.get_nowait()
        except Empty:
            reader = self.scene.open()
        try:
            yield reader
        finally:
            self._readers.put(reader)

    def __getstate__(self) -> dict[str, object]:
        return {name: value for name, value in self.__dict__.items() if name != "_readers"}

    def __setstate__(self, state: dict[str, object]) -> None:
        self.__dict__.update(state, _readers=SimpleQueue())


def tally(
    grid: Grid, window: Window, cover: NDArray[np.uint8], reach: NDArray[np.uint8] | None = None, unreadable: str = ""
) -> Tally:
    """Count codes and reach, uint8 (h, w), of a window."""
    codes = cover.ravel()
    pixels = np.bincount(codes, minlength=256)
    area_m2 = np.bincount(codes, rounded_areas_m2(grid, window).ravel(), minlength=256)
    beyond = np.zeros(256, dtype=np.int64)
    if reach is not None:
        far = (reach.ravel() > WITHIN_REACH) & (reach.ravel() != NO_PERCENT)
        beyond = np.bincount(codes[far], minlength=256)
    present = np.flatnonzero(pixels)
    columns = (values[present].tolist() for values in (pixels, area_m2, beyond))
    counts = tuple(Count(*row) for row in zip(present.tolist(), *columns, strict=True))
    return Tally(counts, unreadable)


def add_up(tallies: Iterable[Tally]) -> dict[int, Count]:
    """The whole map's counts by code, the same however it was cut into blocks."""
    by_code: dict[int, list[Count]] = {}
    for found in tallies:
        for count in found.counts:
            by_code.setdefault(count.code, []).append(count)
    return {
        code: Count(
            code, sum(c.pixels for c in counts), math.fsum(c.area_m2 for c in counts), sum(c.beyond for c in counts)
        )
        for code, counts in by_code.items()
    }


def rounded_areas_m2(grid: Grid, window: Window) -> NDArray[np.float64]:
    """Ground areas float64 (h, w), rounded to a power of two some billionth of a pixel's area.

    Sums of such numbers are exact in float64 up to 2^22 pixels, more than a block has, and so are sums of those with
    math.fsum: totals do not depend on how the scene was cut into blocks.
    """
    centre = Window(grid.height // 2, grid.width // 2, 1, 1)
    about_m2 = float(ground_areas_m2(grid, centre)[0, 0])
    quantum_m2 = 2.0 ** (math.floor(math.log2(about_m2)) - 30) if about_m2 > 0 else 2.0**-30
    return np.asarray(np.rint(ground_areas_m2(grid, window) / quantum_m2) * quantum_m2)
