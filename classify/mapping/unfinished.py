"""Blocks of a map that is not finished, kept so that a killed run goes on where it was.

A folder beside the map holds one plain file of bytes per layer, row by row as on the grid, and a journal with one line
per stored block: its tally and the checksums of its bytes. A block counts only if its line is whole and its bytes have
these checksums, so that no kill and no power cut between any two writes can leave a wrong pixel. The journal's first
line says what the map is made from; if that is not what is being made now, the folder is started afresh.
"""

from __future__ import annotations

import json
import shutil
import zlib
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager, suppress
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, TextIO

from classify.errors import OutputError
from classify.mapping.blocks import Block, LayerName, Tally
from classify.mapping.byte_raster import ByteRaster
from classify.raster.grid import Grid, Window

FOLDER = ".unfinished"
_JOURNAL = "journal.jsonl"


@dataclass(eq=False)
class Unfinished:
    """Use `open_unfinished`. tallies: of the blocks stored so far, by number."""

    folder: Path
    grid: Grid
    layers: tuple[LayerName, ...]
    tallies: dict[int, Tally] = field(default_factory=dict)
    _journal: TextIO | None = None

    def raster(self, layer: LayerName) -> ByteRaster:
        """What is stored of a layer."""
        return ByteRaster(self.folder / f"{layer}.bytes", self.grid)

    def store(self, block: Block) -> None:
        """Keep a block. Raises OutputError, for instance when the disk is full."""
        assert self._journal is not None
        sums = {}
        with write_errors(self.folder):
            for layer in self.layers:
                sums[layer] = zlib.crc32(block.layers[layer].tobytes())
                self.raster(layer).write(block.window, block.layers[layer])
            line = {"block": block.number, "sums": sums, **block.tally.to_json()}
            self._journal.write(json.dumps(line) + "\n")
            self._journal.flush()
        self.tallies[block.number] = block.tally

    def remove(self) -> None:
        """Delete the folder: the map is finished."""
        self.close()
        shutil.rmtree(self.folder, ignore_errors=True)

    def close(self) -> None:
        """Keep what is stored for another run."""
        if self._journal is not None:
            self._journal.close()
            self._journal = None


@contextmanager
def open_unfinished(
    folder: Path, grid: Grid, layers: Sequence[LayerName], windows: Sequence[Window], origin: Mapping[str, Any]
) -> Iterator[Unfinished]:
    """Go on with the blocks in folder/FOLDER if they have the same `origin` (plain data), else start afresh.

    Raises OutputError when nothing can be written there.
    """
    place = folder / FOLDER
    store = Unfinished(place, grid, tuple(layers))
    header = json.dumps({"origin": origin, "layers": list(layers), "blocks": len(windows)}, sort_keys=True)
    with write_errors(folder):
        lines = _journal_lines(place / _JOURNAL)
        if next(lines, None) != header or any(not store.raster(layer).path.is_file() for layer in layers):
            shutil.rmtree(place, ignore_errors=True)
            place.mkdir(parents=True)
            for layer in layers:
                store.raster(layer).create()
            (place / _JOURNAL).write_text(header + "\n", encoding="utf-8")
        else:
            kept = [line for line in lines if _holds(store, windows, line)]
            # Written anew: the last line may be torn, and a line added to it would be lost.
            temporary = place / (_JOURNAL + ".new")
            temporary.write_text("\n".join([header, *kept]) + "\n", encoding="utf-8")
            temporary.replace(place / _JOURNAL)
        store._journal = (place / _JOURNAL).open("a", encoding="utf-8")
    try:
        yield store
    finally:
        with suppress(OSError):
            store.close()


def _holds(store: Unfinished, windows: Sequence[Window], line: str) -> bool:
    """Whether a journal line is whole and true; then its tally is taken over."""
    try:
        entry = json.loads(line)
        number, sums, tally = int(entry["block"]), entry["sums"], Tally.from_json(entry)
        window = windows[number]
    except (ValueError, KeyError, TypeError, IndexError):
        return False
    if any(zlib.crc32(store.raster(layer).read(window).tobytes()) != sums.get(layer) for layer in store.layers):
        return False
    store.tallies[number] = tally
    return True


def _journal_lines(path: Path) -> Iterator[str]:
    try:
        with path.open(encoding="utf-8", errors="replace") as stream:
            for line in stream:
                yield line.rstrip("\n")
    except FileNotFoundError:
        return


@contextmanager
def write_errors(folder: Path) -> Iterator[None]:
    """Turn failures to write into an OutputError about `folder`."""
    try:
        yield
    except OSError as error:
        reason = error.strerror or str(error)
        fix = "free some space or choose a folder you may write to; the same command then goes on where it was"
        raise OutputError(f"the map cannot be written: {reason}", where=str(folder), fix=fix) from error
