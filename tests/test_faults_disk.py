"""A disk that is full or may not be written to: one message, nothing half, and the next run goes on."""

from __future__ import annotations

import os
import resource
import shutil
from contextlib import contextmanager
from pathlib import Path

import numpy as np
import pytest
from affine import Affine
from click.testing import CliRunner
from forked_commands import commands
from rasterio.crs import CRS
from small_project import PROJECT, make_small_project

from classify.cli.main import cli
from classify.errors import OutputError
from classify.files import TEMPORARY_SUFFIX
from classify.lock import LOCK_FILE
from classify.mapping.byte_raster import ByteRaster
from classify.mapping.vector import write_polygons
from classify.mapping.writer import Layer, write_cog
from classify.progress import SILENT
from classify.raster.grid import Grid
from classify.settings import ClassSettings

NOBODY = 65534
needs_root = pytest.mark.skipif(os.name == "nt" or os.getuid() != 0, reason="needs root, to become somebody else")


def litter(folder: Path) -> list[Path]:
    return [p for p in folder.rglob("*") if TEMPORARY_SUFFIX in p.name or p.name == LOCK_FILE]


@pytest.mark.usefixtures("finished_project")  # with which kernels are compiled and kept, once
def test_no_file_may_grow_any_more_in_any_stage_and_the_next_run_goes_on(tmp_path):
    """RLIMIT_FSIZE makes writing fail as on a full disk, within a file; the limit rises until the run succeeds."""
    folder = make_small_project(tmp_path / "p", project=PROJECT.replace("trees = 30", "trees = 4"))
    stopped = []
    with commands(tmp_path / "said.txt") as forked:
        for file_kb in (20, 110, 10_000):
            code, said = forked.run("run", "--quiet", "--project", folder, file_kb=file_kb)
            assert "Traceback" not in said
            assert litter(folder) == []
            if code == 0:
                break
            assert code == 1
            assert "cannot be written" in said
            assert "File too large" in said
            stopped.append(said.split(":")[1])
        assert code == 0
        assert len(set(stopped)) > 1, "stopped at several places"


@needs_root
@pytest.mark.parametrize("mode", [0o555, 0o000], ids=["read only", "no entry"])
def test_outputs_that_may_not_be_written_are_said_and_left_as_they_are(finished_project, tmp_path, mode):
    shared = Path("/tmp") / f"landassay-{os.getpid()}"
    folder = shutil.copytree(finished_project, shared / "p", dirs_exist_ok=True)
    try:
        before = {p: p.read_bytes() for p in folder.rglob("*") if p.is_file()}
        shared.chmod(0o755), folder.chmod(0o755)
        (folder / "outputs").chmod(mode)
        with commands(tmp_path / "said.txt") as forked:
            tmp_path.chmod(0o777)
            code, said = forked.run("run", "--force", "--quiet", "--project", folder, user=NOBODY)
            assert code == 1
            assert "Traceback" not in said
            assert "outputs" in said
            assert "Permission denied" in said
        (folder / "outputs").chmod(0o755)
        assert {p: p.read_bytes() for p in folder.rglob("*") if p.is_file()} == before
    finally:
        shutil.rmtree(shared)


@pytest.mark.parametrize(
    "name", ["run.json", "model/model.json", "map/cover.tif", "map/areas.csv", "report/report.pdf"]
)
def test_a_single_result_that_cannot_be_replaced_is_named(finished_project, tmp_path, monkeypatch, name):
    """Such as a file that another program holds open on Windows."""
    folder = shutil.copytree(finished_project, tmp_path / "p")
    target = folder / "outputs" / name
    before = target.read_bytes()
    replace = Path.replace

    def refuse(self, other):
        if Path(other) == target:
            raise PermissionError(13, "Permission denied")
        return replace(self, other)

    monkeypatch.setattr(Path, "replace", refuse)
    stage = {"run.json": "assess", "model": "train", "map": "classify", "report": "report"}[name.split("/")[0]]
    result = CliRunner().invoke(cli, [stage, "--force", "--quiet", "--project", str(folder)])
    assert isinstance(result.exception, OutputError)
    assert str(target) in str(result.exception)
    assert target.read_bytes() == before
    assert litter(folder) == []


@contextmanager
def no_file_beyond(size: int):
    limits = resource.getrlimit(resource.RLIMIT_FSIZE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (size, limits[1]))
    try:
        yield
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, limits)


def stored(folder: Path, side: int) -> ByteRaster:
    """A raster of bytes as the map writer has it: patches of two by two pixels in three classes."""
    grid = Grid(CRS.from_epsg(32633), Affine(10, 0, 500_000, 0, -10, 4_200_000), side, side)
    raster = ByteRaster(folder / "cover.bytes", grid)
    raster.create()
    codes = np.random.default_rng(1).integers(1, 4, (side // 2, side // 2), dtype=np.uint8)
    raster.write(grid.window, codes.repeat(2, axis=0).repeat(2, axis=1))
    return raster


CLASSES = [ClassSettings(code=c, name=f"Class {c}", colour="#123456") for c in (1, 2, 3)]
# By file name: side of the raster, and how it is written.
WRITERS = {
    "map.tif": (600, lambda stored, path: write_cog(stored, path, Layer(0, "mode", "cover"))),
    "map.gpkg": (160, lambda stored, path: write_polygons(stored, path, CLASSES, "ha", SILENT)),
}


@pytest.mark.parametrize("name", WRITERS)
@pytest.mark.parametrize("share", [0.0, 0.1, 0.5, 0.9])
def test_a_disk_that_fills_while_gdal_writes_is_our_error_and_keeps_the_old_file(tmp_path, name, share):
    """GDAL and SQLite report it in errors of their own, of several kinds, depending on how far they are."""
    side, write = WRITERS[name]
    raster = stored(tmp_path, side)
    write(raster, tmp_path / "whole" / name)
    size = (tmp_path / "whole" / name).stat().st_size
    (tmp_path / name).write_bytes(b"old")
    # The description of the source, some kilobytes, is to fit.
    with pytest.raises(OutputError, match=rf"{name}: cannot be written"), no_file_beyond(max(4096, int(share * size))):
        write(raster, tmp_path / name)
    assert (tmp_path / name).read_bytes() == b"old"
    assert litter(tmp_path) == []
