"""Classify a scene block by block and write the map, its confidence and its areas.

Memory is bounded by the block size and the number of workers, never by the scene. Blocks are computed by several
threads (each with its own file handles) and written in order by the calling one, so that the same inputs give the
same bytes whatever the number of workers.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Generator, Iterable, Iterator
from concurrent.futures import Future, ThreadPoolExecutor
from contextlib import ExitStack, closing
from dataclasses import dataclass
from itertools import islice
from pathlib import Path
from queue import SimpleQueue
from typing import TypeVar

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from classify.files import replacing
from classify.mapping.writer import NO_CLASS, NO_PERCENT, BlockWriter, Layer, cog_writer
from classify.models import TrainedModel
from classify.progress import SILENT, Progress
from classify.raster.area import ground_areas_m2
from classify.raster.grid import Grid, Window
from classify.raster.scene import Scene, SceneReader
from classify.settings import ClassSettings
from classify.settings.model import M2_PER_UNIT

_In = TypeVar("_In")
_Out = TypeVar("_Out")


@dataclass(frozen=True, slots=True)
class MapOptions:
    """jobs: threads that read and compute. block_px: side of a block. confidence: write confidence.tif too."""

    jobs: int = 1
    block_px: int = 512
    confidence: bool = True
    area_unit: str = "ha"


@dataclass(frozen=True, slots=True)
class MapResult:
    """What was written.

    cover: path of the class map. confidence: path of the confidence map, or None. areas: one row per class with code,
    name, pixels, area_m2, area and unit. unmapped_pixels: pixels without a class (masked, no data, outside).
    """

    cover: Path
    confidence: Path | None
    areas: pd.DataFrame
    unmapped_pixels: int
    unmapped_m2: float


@dataclass(frozen=True, slots=True)
class _Block:
    """One computed block: codes uint8 (h, w), percent uint8 (h, w) or None, pixels and area by code (256,)."""

    window: Window
    codes: NDArray[np.uint8]
    percent: NDArray[np.uint8] | None
    pixels: NDArray[np.int64]
    area_m2: NDArray[np.float64]


def classify_scene(
    model: TrainedModel,
    scene: Scene,
    folder: Path,
    *,
    classes: Iterable[ClassSettings],
    options: MapOptions | None = None,
    progress: Progress = SILENT,
) -> MapResult:
    """Classify every valid pixel of `scene` and write cover.tif, confidence.tif and areas.csv into `folder`.

    Raises DataError when a band cannot be read, OutputError when a result cannot be written; then none of the files
    of an earlier map is changed.
    """
    options, classes = options or MapOptions(), list(classes)
    windows = list(scene.grid.blocks(options.block_px))
    quantum_m2 = _area_quantum_m2(scene.grid)
    tallies: list[tuple[NDArray[np.int64], NDArray[np.float64]]] = []
    with ExitStack() as stack:
        cover = stack.enter_context(cog_writer(folder / "cover.tif", scene.grid, cover_layer(classes)))
        confidence = None
        if options.confidence:
            confidence = stack.enter_context(cog_writer(folder / "confidence.tif", scene.grid, CONFIDENCE_LAYER))
        task = stack.enter_context(progress.task("Classifying", len(windows)))
        for block in stack.enter_context(closing(_computed(model, scene, windows, options, quantum_m2))):
            _store(block, cover, confidence)
            tallies.append((block.pixels, block.area_m2))
            task.advance()
    areas = _area_table(tallies, classes, options.area_unit)
    with replacing(folder / "areas.csv") as temporary:
        areas.to_csv(temporary, index=False, lineterminator="\n")
    return MapResult(
        cover=folder / "cover.tif",
        confidence=folder / "confidence.tif" if options.confidence else None,
        areas=areas,
        unmapped_pixels=sum(int(pixels[NO_CLASS]) for pixels, _ in tallies),
        unmapped_m2=sum(float(area[NO_CLASS]) for _, area in tallies),
    )


CONFIDENCE_LAYER = Layer(
    nodata=NO_PERCENT,
    overviews="average",
    description="share of the model's votes for the mapped class, percent",
)


def cover_layer(classes: Iterable[ClassSettings]) -> Layer:
    """How the class map is stored: colours and names by code."""
    classes = list(classes)
    return Layer(
        nodata=NO_CLASS,
        overviews="mode",
        description="cover class",
        colours={c.code: c.colour or "#808080" for c in classes},
        categories={NO_CLASS: "no data", **{c.code: c.name for c in classes}},
        tags={f"CLASS_{c.code}": c.name for c in classes},
    )


def _store(block: _Block, cover: BlockWriter, confidence: BlockWriter | None) -> None:
    cover.write(block.window, block.codes)
    if confidence is not None and block.percent is not None:
        confidence.write(block.window, block.percent)


def _computed(
    model: TrainedModel, scene: Scene, windows: list[Window], options: MapOptions, quantum_m2: float
) -> Generator[_Block, None, None]:
    # A reader belongs to one thread at a time; the queue hands an idle one to whichever thread starts a block.
    with ExitStack() as stack:
        readers: SimpleQueue[SceneReader] = SimpleQueue()
        for _ in range(options.jobs):
            readers.put(stack.enter_context(scene.open()))

        def compute(window: Window) -> _Block:
            reader = readers.get()
            try:
                layers = reader.read(window, model.recipe.needs, halo_px=model.recipe.halo_px)
            finally:
                readers.put(reader)
            codes, percent = _labels(model, model.recipe.compute(layers), options)
            areas = np.rint(ground_areas_m2(scene.grid, window) / quantum_m2) * quantum_m2
            flat = codes.ravel()
            area_m2 = np.bincount(flat, areas.ravel(), minlength=256).astype(np.float64)
            return _Block(window, codes, percent, np.bincount(flat, minlength=256), area_m2)

        yield from _in_order(compute, windows, options.jobs)


def _in_order(work: Callable[[_In], _Out], items: Iterable[_In], jobs: int) -> Iterator[_Out]:
    """Results of `work` in the order of `items`, with at most 2 * jobs of them under way or waiting."""
    remaining = iter(items)
    with ThreadPoolExecutor(jobs) as pool:
        waiting: list[Future[_Out]] = [pool.submit(work, item) for item in islice(remaining, 2 * jobs)]
        try:
            while waiting:
                yield waiting.pop(0).result()
                waiting.extend(pool.submit(work, item) for item in islice(remaining, 1))
        finally:
            for future in waiting:
                future.cancel()


def _labels(
    model: TrainedModel, features: NDArray[np.float32], options: MapOptions
) -> tuple[NDArray[np.uint8], NDArray[np.uint8] | None]:
    """Features (n_features, h, w) to codes and percent (h, w). A pixel with any missing feature is no data."""
    valid = np.isfinite(features).all(axis=0)
    rows = np.ascontiguousarray(features[:, valid].T)
    codes = np.full(valid.shape, NO_CLASS, dtype=np.uint8)
    percent = np.full(valid.shape, NO_PERCENT, dtype=np.uint8) if options.confidence else None
    if len(rows) and percent is None:
        codes[valid] = model.predict(rows)
    elif len(rows) and percent is not None:
        codes[valid], probabilities = model.predict_both(rows)
        percent[valid] = np.rint(100 * probabilities.max(axis=1)).astype(np.uint8)
    return codes, percent


def _area_quantum_m2(grid: Grid) -> float:
    """A power of two about a millionth of a pixel's area, to which pixel areas are rounded.

    Sums of its multiples are exact in float64 up to 2^32 pixels, so that totals do not depend on how the scene was cut
    into blocks; the rounding of each pixel is far below what a pixel's area is known to.
    """
    centre = Window(grid.height // 2, grid.width // 2, 1, 1)
    area_m2 = float(ground_areas_m2(grid, centre)[0, 0])
    return 2.0 ** (math.floor(math.log2(area_m2)) - 20) if area_m2 > 0 else 2.0**-20


def _area_table(
    tallies: list[tuple[NDArray[np.int64], NDArray[np.float64]]], classes: list[ClassSettings], unit: str
) -> pd.DataFrame:
    rows = []
    for c in classes:
        area_m2 = sum(float(area[c.code]) for _, area in tallies)
        pixels = sum(int(count[c.code]) for count, _ in tallies)
        rows.append((c.code, c.name, pixels, area_m2, area_m2 / M2_PER_UNIT[unit], unit))
    return pd.DataFrame(rows, columns=["code", "name", "pixels", "area_m2", "area", "unit"])
