"""Killed at any moment, a project loses nothing: the next run gives what an undisturbed one gives, and no litter."""

from __future__ import annotations

import json
import os
import random
import shutil
import signal
import time
import zipfile
from contextlib import suppress
from io import BytesIO
from pathlib import Path

import pytest
from forked_commands import commands
from small_project import PROJECT, make_small_project, read_json

from classify.files import TEMPORARY_SUFFIX, write_json
from classify.lock import HOLDER_FILE, LOCK_FILE
from classify.settings import load_project
from classify.workflow import STAGES, Job, run, status

SAMPLE = Path(__file__).parent.parent / "sample_project"


@pytest.fixture
def runner(tmp_path):
    """Run a project in a process of its own, which is killed after some seconds if it has not ended by then."""
    with commands(tmp_path / "said.txt") as forked:

        def killed_after(folder: Path, seconds: float) -> bool:
            process = forked.start("run", "--quiet", "--jobs", 2, "--project", folder)
            time.sleep(seconds)
            with suppress(ProcessLookupError):
                os.kill(process, signal.SIGKILL)
            ended, said = forked.end()
            assert ended in (0, -signal.SIGKILL), said
            return ended != 0

        yield killed_after


def contents(folder: Path) -> dict[str, bytes]:
    outputs = folder / "outputs"
    return {p.relative_to(outputs).as_posix(): p.read_bytes() for p in sorted(outputs.rglob("*")) if p.is_file()}


def is_whole(name: str, content: bytes) -> bool:
    """Whether a file that holds times of the run is in one piece."""
    if name.endswith(".json"):
        return isinstance(json.loads(content), dict)
    if name.endswith(".xlsx"):
        return zipfile.ZipFile(BytesIO(content)).testzip() is None
    ends = {".html": b"</html>", ".pdf": b"%%EOF", ".csv": b""}
    return content.rstrip().endswith(ends[Path(name).suffix])


def check_what_lies_there(folder: Path, straight: dict[str, bytes]) -> None:
    """After a kill: under every final name lies the whole file; all else has a name of which the next run knows."""
    for name, content in contents(folder).items():
        base = Path(name).name
        if TEMPORARY_SUFFIX in base or base in (LOCK_FILE, HOLDER_FILE) or "/.unfinished/" in f"/{name}":
            continue
        assert name in straight, name
        if name == "run.json" or name.startswith("report/"):
            assert is_whole(name, content), name
        else:
            assert content == straight[name], name


def kill_and_compare(folder: Path, tmp_path: Path, runner, kills: int) -> set[str]:
    """Kill runs of a copy of a project so many times, each at a random moment of the work that is left; returns the
    stages that were hit."""
    killed = shutil.copytree(folder, tmp_path / "killed")
    project = load_project(killed)
    run(Job(load_project(folder), jobs=2))
    straight, record = contents(folder), read_json(folder / "outputs" / "run.json")
    choose, hit = random.Random(20260611), []
    while len(hit) < kills:
        left = [stage.name for stage in status(project) if stage.state != "done"]
        seconds = sum(record["stages"][name]["seconds"] for name in left)
        if not left:
            shutil.rmtree(killed / "outputs")
        elif runner(killed, choose.uniform(0, 1.1 * seconds)):
            check_what_lies_there(killed, straight)
            hit.append(next((s.name for s in status(project) if s.state != "done"), None))
    run(Job(project, jobs=2))
    assert not list(killed.rglob(".*"))
    set_times(killed, record)
    assert contents(killed) == straight
    assert {stage.state for stage in status(project)} == {"done"}
    return set(hit)


def set_times(folder: Path, record: dict) -> None:
    """Give a project the record of another, and make the report anew: it tells the times at which stages ended.

    The stages count as done after that only if they were made from the same things and gave the same things.
    """
    run_json = folder / "outputs" / "run.json"
    run_json.write_text(json.dumps(record), encoding="utf-8")
    run(Job(load_project(folder)), ["report"], force=True)
    write_json(run_json, record)


def test_killed_at_random_moments_the_next_run_gives_the_same_files(tmp_path, runner):
    project = PROJECT.replace("trees = 30", "trees = 5")
    kill_and_compare(make_small_project(tmp_path / "miniature", project=project), tmp_path, runner, kills=5)


@pytest.mark.study
def test_the_sample_project_killed_at_thirty_random_moments(tmp_path, runner):
    folder = shutil.copytree(SAMPLE, tmp_path / "sample", ignore=shutil.ignore_patterns("outputs", "truth.tif"))
    assert kill_and_compare(folder, tmp_path, runner, kills=30) == {stage.name for stage in STAGES}
