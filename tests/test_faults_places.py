"""Other people's machines: names in any script, no home, no locale, no terminal, an installation that is read-only."""

from __future__ import annotations

import json
import shutil
import signal
import subprocess
import sys
import urllib.request
from contextlib import contextmanager
from pathlib import Path

import geopandas as gpd
import pytest
from small_project import PROJECT, make_small_project

ROOT = Path(__file__).parent.parent
GRASS, TITLE = "Βοσκή 牧草", "Λεκάνη Σόρελ"
# No home, no terminal, no locale, no folder for temporary files.
BARE = {"LC_ALL": "C", "PYTHONUTF8": "0", "PYTHONCOERCECLOCALE": "0", "TMPDIR": "/not/there"}
SETTINGS = PROJECT.replace("trees = 30", "trees = 4").replace("Pasture", GRASS)
SETTINGS = SETTINGS.replace("A miniature of the Sorrel Basin", TITLE)


def landassay(*arguments, **environment):
    """The command, with nothing in its environment but what is given."""
    return subprocess.run(
        [sys.executable, "-m", "classify", *map(str, arguments)], capture_output=True, check=False, env=environment,
        cwd="/", stdin=subprocess.DEVNULL, timeout=200,
    )  # fmt: skip


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    """A project in a folder with blanks, accents, three scripts and a sign beyond the basic plane."""
    place = tmp_path_factory.mktemp("places") / TITLE / "流域 — été 🌾 #1%20'x'"
    make_small_project(place, project=SETTINGS)
    for file, column in ((place / "training.gpkg", "cover"), (place / "reference.gpkg", "observed")):
        frame = gpd.read_file(file)
        frame[column] = frame[column].replace("Pasture", GRASS)
        file.unlink()
        frame.to_file(file, layer="a")
    return place


def test_the_whole_job_under_any_name_with_hardly_any_environment(folder):
    done = landassay("run", "--project", folder, "--json", **BARE)
    assert done.returncode == 0, done.stderr.decode()
    assert GRASS in json.loads(done.stdout.decode("utf-8"))["assess"]["classes"]
    assert GRASS in (folder / "outputs" / "report" / "report.html").read_text(encoding="utf-8")
    verified = landassay("verify", folder / "outputs" / "report", **BARE)
    assert verified.returncode == 0, verified.stderr.decode()
    drawn = landassay("draw", "--points", 30, "--floor", 5, "--project", folder, **BARE)
    assert drawn.returncode == 0, drawn.stderr.decode()
    with serving(folder) as address:
        assert fetch(address).startswith("<!doctype html>")


@contextmanager
def serving(folder: Path):
    """The address that `interpret` prints, while it serves."""
    command = ["interpret", "--no-browser", "--interpreter", "Ève 評価者", "--project", str(folder)]
    with subprocess.Popen(
        [sys.executable, "-m", "classify", *command], stdout=subprocess.PIPE, stderr=subprocess.PIPE, env=BARE, cwd="/"
    ) as process:
        try:
            yield process.stdout.readline().decode().strip()
            process.send_signal(signal.SIGINT)
            _, said = process.communicate(timeout=60)
        finally:
            process.kill()
    assert process.returncode == 0, said.decode()


def fetch(address: str) -> str:
    opener = urllib.request.build_opener(urllib.request.HTTPCookieProcessor())
    with opener.open(address, timeout=60) as answer:
        return answer.read().decode("utf-8")


def test_what_can_only_be_written_in_ascii_is_spelt_out(folder):
    ascii_only = {"PYTHONIOENCODING": "ascii", "PYTHONUTF8": "1"}
    done = landassay("status", "--project", folder, "--json", **ascii_only)
    assert done.returncode == 0, done.stderr.decode()
    assert done.stdout.isascii()
    assert json.loads(done.stdout)["project"] == TITLE


def test_an_installation_in_which_nothing_can_be_written_and_no_home(tmp_path):
    """Site-packages belong to an administrator: machine code can be kept neither beside the source nor in a home."""
    place = tmp_path / "installed"
    shutil.copytree(ROOT / "classify", place / "classify", ignore=shutil.ignore_patterns("__pycache__"))
    shutil.copytree(ROOT / "configs", place / "configs")
    for room in [path.parent for path in place.rglob("*.py")]:
        (room / "__pycache__").touch()  # a file, where even an administrator could make no folder
    project = make_small_project(tmp_path / "p", project=PROJECT.replace("trees = 30", "trees = 4"))
    before = set(place.rglob("*"))
    done = landassay("run", "--quiet", "--project", project, PYTHONPATH=str(place), HOME="/dev/null")
    assert done.returncode == 0, done.stderr.decode()
    assert set(place.rglob("*")) == before
