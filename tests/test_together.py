"""Files that are replaced together: killed at every step, all are old or all new afterwards, and nothing is lost."""

from __future__ import annotations

import json
import os
import sys
from pathlib import Path

import geopandas
import pytest
from click.testing import CliRunner
from interpret_projects import drawn_project

from classify.assessment.drawn_sample import read_drawn
from classify.cli.main import cli
from classify.errors import LandassayError, OutputError
from classify.together import finish_replacing, is_unfinished, replacing_together

KILLED = 77
forks = pytest.mark.skipif(not hasattr(os, "fork"), reason="kills a forked process")


def killed_at(step: int, folder: Path, work) -> bool:
    """Run `work` in a process that dies before its `step`-th change of a name in `folder`; whether it did."""
    child = os.fork()
    if child == 0:
        changes = iter(range(1, 10_000))

        def watch(event: str, args: tuple) -> None:
            path = str(args[0]) if event in ("os.rename", "os.remove", "os.rmdir", "os.mkdir") else ""
            if str(folder) in path and "-lock" not in path and next(changes) == step:
                os._exit(KILLED)

        sys.addaudithook(watch)
        try:
            work()
        finally:
            os._exit(0)
    return os.waitstatus_to_exitcode(os.waitpid(child, 0)[1]) == KILLED


def write_pair(folder: Path, content: str) -> None:
    with replacing_together(folder) as staged:
        for name in ("a.txt", "b.txt"):
            (staged / name).write_text(content)


def pair(folder: Path) -> set[str]:
    finish_replacing(folder)
    assert {path.name for path in folder.iterdir()} <= {"a.txt", "b.txt", "other.txt"}
    return {(folder / name).read_text() if (folder / name).exists() else "" for name in ("a.txt", "b.txt")}


@forks
def test_a_pair_of_files_is_old_or_new_wherever_it_is_killed(tmp_path: Path):
    found = set()
    for step in range(1, 100):
        folder = tmp_path / str(step)
        write_pair(folder, "old")
        (folder / "other.txt").write_text("mine")
        died = killed_at(step, folder, lambda folder=folder: write_pair(folder, "new"))
        here = pair(folder)
        assert len(here) == 1
        found |= here
        write_pair(folder, "newest")
        assert pair(folder) == {"newest"} and (folder / "other.txt").read_text() == "mine"
        if not died:
            break
    assert found == {"old", "new"} and step > 8


@forks
def test_what_was_changed_after_the_kill_is_not_written_over(tmp_path: Path):
    write_pair(tmp_path, "old")
    step = 1
    while not is_unfinished(tmp_path) or not (tmp_path / ".landassay-ready" / "b.txt").exists():
        write_pair(tmp_path, "old")
        assert killed_at(step, tmp_path, lambda: write_pair(tmp_path, "new"))
        step += 1
    (tmp_path / "b.txt").write_text("labels")
    with pytest.raises(OutputError, match=r"b\.txt: this file was changed after a command"):
        finish_replacing(tmp_path)
    (tmp_path / "b.txt").rename(tmp_path / "other.txt")
    assert pair(tmp_path) == {"new"} and (tmp_path / "other.txt").read_text() == "labels"


def test_an_error_leaves_all_as_it_was(tmp_path: Path):
    write_pair(tmp_path, "old")
    with pytest.raises(ZeroDivisionError), replacing_together(tmp_path) as staged:
        (staged / "a.txt").write_text("new")
        raise ZeroDivisionError
    assert pair(tmp_path) == {"old"}


def draw(folder: Path, *args: str) -> dict:
    result = CliRunner().invoke(
        cli, ["draw", "--project", str(folder), "--json", "--quiet", "--jobs", "1", *args], catch_exceptions=False
    )
    assert result.exit_code == 0, result.output
    return json.loads(result.stdout)


@forks
def test_adding_points_is_killed_at_every_step(tmp_path: Path):
    """Before the next command, the sample has all of the added points or none, and every label."""
    project = drawn_project(tmp_path / "miniature")
    folder = project / "outputs" / "sample"
    path = folder / "points.gpkg"
    points = geopandas.read_file(path)
    points.assign(observed=[f"label {i}" for i in points["id"]]).to_file(path, layer="points")
    sizes = [40]
    for step in range(1, 200):
        died = killed_at(step, folder, lambda: draw(project, "--add", "12"))
        sample = read_drawn(folder)  # which checks that design and points belong together
        assert len(sample.points) - sizes[-1] in (0, 12)
        assert list(sample.points.set_index("id").loc[points["id"], "observed"]) == [f"label {i}" for i in points["id"]]
        assert json.loads((folder / "design.json").read_text())["files"]
        sizes.append(len(sample.points))
        if not died:
            break
    assert not died and sizes[1] == 40 and 52 in sizes
    assert sum(s["n"] for s in draw(project, "--add", "12")["strata"]) == sizes[-1] + 12


@forks
def test_a_first_draw_is_killed_at_every_step(tmp_path: Path):
    project = drawn_project(tmp_path / "miniature")
    folder = project / "outputs" / "sample"
    complete = 0
    for step in range(1, 200):
        folder.rename(tmp_path / f"drawn-{step}")
        died = killed_at(step, folder, lambda: draw(project, "--points", "40", "--floor", "10"))
        try:
            draw(project, "--points", "40", "--floor", "10")
        except LandassayError as error:
            assert "was drawn already" in str(error)  # and so it is
            complete += 1
        assert len(read_drawn(folder).points) == 40
        if not died:
            break
    assert not died and 1 < complete < step
