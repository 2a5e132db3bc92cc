"""Classify a scene block by block and write the map, its confidence, its reach and its areas.

Memory is bounded by the block size and the number of workers, never by the scene. Every block is stored as soon as it
is computed, so that a run that was killed goes on where it was; the finished files are made from the stored blocks, so
that the same inputs give the same bytes whatever the number of workers, the block size, the engine or interruptions.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterable, Mapping, Sequence
from contextlib import closing
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import joblib
import pandas as pd

from classify import __version__
from classify.errors import DataError, Problem
from classify.mapping.blocks import BlockWork, LayerName, Tally
from classify.mapping.engines import Engine, Threads
from classify.mapping.finish import Delivery, deliver
from classify.mapping.tidy import AS_IT_IS, TidyOptions
from classify.mapping.unfinished import Unfinished, open_unfinished
from classify.models import TrainedModel
from classify.progress import SILENT, Progress
from classify.raster.grid import Grid, Window
from classify.raster.guard import is_remote
from classify.raster.scene import Scene
from classify.raster.sources import open_raster
from classify.settings import ClassSettings, Project
from classify.settings.model import M2_PER_UNIT

_BLOCK_PX, _LARGEST_BLOCK_PX = 512, 1024
# A grid with more pixels than this is a mistake in the settings (the whole land surface at 10 m has fewer).
_MOST_PIXELS = 2**41


@dataclass(frozen=True, slots=True)
class MapOptions:
    """jobs: threads, unless an engine is given. block_px: side of a block; None: as the files are tiled.

    confidence, reach: write these layers too. tidy: what is done to the class map. polygons: write its patches as
    polygons too. skip_unreadable: map a block that cannot be read as no data and count it, instead of stopping. engine:
    where blocks are computed.
    """

    jobs: int = 1
    block_px: int | None = None
    confidence: bool = True
    area_unit: str = "ha"
    reach: bool = False
    tidy: TidyOptions = AS_IT_IS
    polygons: bool = False
    skip_unreadable: bool = False
    engine: Engine | None = None

    @classmethod
    def of(cls, project: Project, jobs: int = 1) -> MapOptions:
        """As the project file says."""
        given = project.map
        tidy = TidyOptions(given.minimum_unit_ha * M2_PER_UNIT["ha"], given.neighbours, given.majority)
        return cls(
            jobs=jobs, confidence=given.confidence, area_unit=project.report.area_unit, reach=given.reach, tidy=tidy,
            polygons=given.polygons,
        )  # fmt: skip


@dataclass(frozen=True, slots=True)
class MapResult:
    """What was written.

    files: path by layer; among them "raw", the class map as the model gave it, if it was tidied. areas: of the tidied
    map, one row per class with code, name, pixels, area_m2, area, unit and, with reach, beyond_reach_pixels.
    unmapped_pixels, unmapped_m2: without a class (masked, no data, outside). resumed_blocks: taken over from a run that
    was interrupted. unreadable_blocks: mapped as no data. warnings: what the user should know, these among them.
    """

    files: Mapping[str, Path]
    areas: pd.DataFrame
    unmapped_pixels: int
    unmapped_m2: float
    resumed_blocks: int = 0
    unreadable_blocks: int = 0
    warnings: tuple[Problem, ...] = ()

    @property
    def cover(self) -> Path:
        """The class map."""
        return self.files["cover"]

    @property
    def confidence(self) -> Path | None:
        """The confidence map, if it was asked for."""
        return self.files.get("confidence")


def classify_scene(
    model: TrainedModel,
    scene: Scene,
    folder: Path,
    *,
    classes: Iterable[ClassSettings],
    options: MapOptions | None = None,
    progress: Progress = SILENT,
) -> MapResult:
    """Classify every valid pixel of `scene`; write cover.tif, areas.csv and the layers asked for into `folder`.

    Raises DataError when a band cannot be read, OutputError when a result cannot be written; then none of the files
    of an earlier map is changed, and the next call with the same model and scene goes on where this one was.
    """
    options, classes = options or MapOptions(), list(classes)
    _check_grid(scene.grid)
    work = BlockWork(model, scene, _layers(model, options), options.skip_unreadable)
    windows = list(scene.grid.blocks(options.block_px or block_side_px(scene)))
    engine = options.engine or Threads(options.jobs)
    with open_unfinished(folder, scene.grid, work.layers, windows, _origin(work)) as store:
        resumed = len(store.tallies)
        if resumed:
            progress.note(f"Going on where an earlier run was: {resumed} of {len(windows)} blocks are done")
        _compute(work, engine, store, windows, progress)
        wanted = Delivery(classes, options.tidy, options.polygons, options.area_unit, options.jobs)
        delivered = deliver(store, folder, windows, wanted, progress)
        store.remove()
    return MapResult(
        files=delivered.files,
        areas=delivered.areas,
        unmapped_pixels=delivered.unmapped.pixels,
        unmapped_m2=delivered.unmapped.area_m2,
        resumed_blocks=resumed,
        unreadable_blocks=sum(bool(tally.unreadable) for tally in delivered.tallies),
        warnings=(*engine.warnings, *_unreadable(delivered.tallies, windows)),
    )


def block_side_px(scene: Scene) -> int:
    """Side of blocks that whole tiles of the scene's files fill, so that no tile is decoded twice: 512 to 1024 pixels.

    Blocks of 512 where files are not tiled, or not on the map's grid.
    """
    sides = []
    for path in dict.fromkeys(band.path for band in scene.bands if band.native == scene.grid):
        with open_raster(path) as dataset:
            height, width = dataset.block_shapes[0]
        if height == width and height <= _LARGEST_BLOCK_PX:
            sides.append(height * -(-_BLOCK_PX // height))
    return max((side for side in sides if side <= _LARGEST_BLOCK_PX), default=_BLOCK_PX)


def _layers(model: TrainedModel, options: MapOptions) -> tuple[LayerName, ...]:
    wanted: list[LayerName] = ["cover"]
    if options.confidence:
        wanted.append("confidence")
    if options.reach and model.reach is not None:
        wanted.append("reach")
    return tuple(wanted)


def _compute(work: BlockWork, engine: Engine, store: Unfinished, windows: Sequence[Window], progress: Progress) -> None:
    missing = [(number, window) for number, window in enumerate(windows) if number not in store.tallies]
    with progress.task("Classifying", len(windows)) as task:
        task.advance(len(windows) - len(missing))
        with closing(engine.run(work, missing)) as blocks:
            for block in blocks:
                store.store(block)
                task.advance()


def _check_grid(grid: Grid) -> None:
    if grid.height < 1 or grid.width < 1 or grid.height * grid.width > _MOST_PIXELS:
        raise DataError(
            f"the grid of the map would have {grid.height} rows and {grid.width} columns", where="scene.grid",
            fix="check the pixel size asked for and the extent of the first band",
        )  # fmt: skip


def origin_digest(model: TrainedModel, scene: Scene, options: MapOptions, classes: Iterable[ClassSettings]) -> str:
    """A fingerprint of all that a map follows from: the same for two calls only if they give the same files."""
    work = BlockWork(model, scene, _layers(model, options), options.skip_unreadable)
    delivery = [str(options.tidy), options.polygons, options.area_unit, work.layers, [c.model_dump() for c in classes]]
    return hashlib.sha256(json.dumps([_origin(work), delivery], sort_keys=True).encode()).hexdigest()


def _origin(work: BlockWork) -> dict[str, Any]:
    """What a stored block is made from, as plain data: if any of it changes, blocks are made anew."""
    scene, card, reach = work.scene, work.model.card, work.model.reach
    files = {
        path: _stamp(path) for path in sorted({b.path for b in scene.bands} | {m.path for m in scene.masks.values()})
    }
    described = repr((scene.grid, scene.bands, sorted(scene.masks.items()), scene.resampling, scene.composite))
    return {
        "landassay": __version__,
        "model": card.get("model_sha256") or joblib.hash(work.model.estimator),
        "calibration": card["calibration"]["temperature"],
        "recipe": hashlib.sha256(json.dumps(work.model.recipe.to_json(), sort_keys=True).encode()).hexdigest(),
        "reach": hashlib.sha256(reach.to_bytes()).hexdigest() if reach and "reach" in work.layers else None,
        "scene": hashlib.sha256(described.encode()).hexdigest(),
        "files": files,
        "skip_unreadable": work.skip_unreadable,
    }


def _stamp(path: str) -> list[int] | None:
    if is_remote(path) or not Path(path).is_file():
        return None
    facts = Path(path).stat()
    return [facts.st_size, facts.st_mtime_ns]


def _unreadable(tallies: Sequence[Tally], windows: Sequence[Window]) -> list[Problem]:
    failed = [(tally, window) for tally, window in zip(tallies, windows, strict=True) if tally.unreadable]
    if not failed:
        return []
    pixels = sum(window.height * window.width for _, window in failed)
    return [
        Problem(
            f"{len(failed)} of {len(windows)} blocks ({pixels} pixels) could not be read and are no data in the map; "
            f"the first: {failed[0][0].unreadable}",
            severity="warning",
        )
    ]
