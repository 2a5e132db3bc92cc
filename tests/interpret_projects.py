"""A miniature project whose sample of 40 points is drawn, and the page's server as a process of its own."""

from __future__ import annotations

import atexit
import shutil
import subprocess
import sys
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from functools import cache
from pathlib import Path

import numpy as np
import rasterio
from click.testing import CliRunner
from small_project import CRS, TRANSFORM, make_small_project, truth_indices

from classify.cli.main import cli


def drawn_project(folder: Path) -> Path:
    """A copy of the project, made in a folder that is not there yet."""
    shutil.copytree(_template(), folder)
    return folder


@cache
def _template() -> Path:
    """Write the project, a map that is right but for its names' order, and the sample: once for all tests."""
    folder = Path(tempfile.mkdtemp(prefix="landassay-tests-"))
    atexit.register(shutil.rmtree, folder, ignore_errors=True)
    make_small_project(folder)
    codes = np.array([1, 2, 5])[truth_indices()]
    (folder / "outputs" / "map").mkdir(parents=True)
    with rasterio.open(
        folder / "outputs" / "map" / "cover.tif", "w", driver="GTiff", count=1, dtype="uint8", nodata=0, crs=CRS,
        height=codes.shape[0], width=codes.shape[1], transform=TRANSFORM,
    ) as target:  # fmt: skip
        target.write(codes.astype(np.uint8), 1)
    args = ["draw", "--project", str(folder), "--points", "40", "--floor", "10", "--quiet"]
    assert CliRunner().invoke(cli, args, catch_exceptions=False).exit_code == 0
    return folder


@contextmanager
def served(folder: Path, *args: str) -> Iterator[tuple[subprocess.Popen[str], str]]:
    """The running server and the address it printed; killed at the end if it still runs."""
    command = [sys.executable, "-m", "classify", "interpret", "--project", str(folder), "--no-browser", *args]
    with subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True) as process:
        try:
            assert process.stdout is not None and process.stderr is not None
            address = process.stdout.readline().strip()
            assert address, process.stderr.read()
            yield process, address
        finally:
            process.kill()
