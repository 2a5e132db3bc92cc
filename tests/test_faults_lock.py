"""One command at a time writes a project's outputs; who holds them is said; a crash frees them."""

from __future__ import annotations

import errno
import fcntl
import os
import shutil
import signal
import socket
import subprocess
import sys
import time
from pathlib import Path

import pytest

from classify.errors import OutputError
from classify.files import TEMPORARY_SUFFIX
from classify.lock import HOLDER_FILE, LOCK_FILE, writing
from classify.progress import Silent
from classify.settings import load_project
from classify.workflow import Job, run, status

HOLD = """
import sys, time
from pathlib import Path
from classify.lock import writing
with writing(Path(sys.argv[1])):
    print("held", flush=True)
    time.sleep(600)
"""


@pytest.fixture
def hold():
    """Start a process that holds a folder; all are killed at the end."""
    started = []

    def start(folder: Path) -> subprocess.Popen:
        process = subprocess.Popen([sys.executable, "-c", HOLD, str(folder)], stdout=subprocess.PIPE, text=True)
        started.append(process)
        assert process.stdout.readline() == "held\n"
        return process

    yield start
    for process in started:
        process.kill()
        process.communicate()


def test_a_second_writer_is_refused_with_the_name_of_the_first_and_changes_nothing(small_project, hold):
    first = hold(small_project / "outputs")
    project = load_project(small_project)
    for stages in (None, ["train"]):
        with pytest.raises(OutputError) as refused:
            run(Job(project), stages)
        message = str(refused.value)
        assert f"process {first.pid} on {socket.gethostname()}" in message
        assert str(small_project / "outputs") in message.split(":", maxsplit=1)[0]
        assert time.strftime("%Y-%m-%d") in message
        assert str(small_project) in message.split(", since", 1)[1], "the command line of the holder"
        assert "wait until it ends" in message
    assert {path.name for path in (small_project / "outputs").iterdir()} == {LOCK_FILE, HOLDER_FILE}
    assert {stage.state for stage in status(project)} == {"missing"}, "reading needs no lock"


def test_a_holder_that_is_killed_frees_the_folder_and_its_half_files_go(tmp_path, hold):
    (tmp_path / "deep" / "er").mkdir(parents=True)
    process = hold(tmp_path)
    halves = [tmp_path / f".a.1{TEMPORARY_SUFFIX}.csv", tmp_path / "deep" / "er" / f".b.2{TEMPORARY_SUFFIX}.tif"]
    for half in halves:
        half.write_bytes(b"half")
    os.kill(process.pid, signal.SIGKILL)
    process.wait()
    assert (tmp_path / HOLDER_FILE).exists(), "a killed process takes nothing with it but its lock"
    with writing(tmp_path, rooms=["deep"]):
        assert not any(half.exists() for half in halves)
    assert [path.name for path in tmp_path.iterdir()] == ["deep"]


def test_a_folder_is_free_again_after_an_error_and_one_in_which_nothing_was_written_is_gone(tmp_path):
    with pytest.raises(ZeroDivisionError), writing(tmp_path / "outputs"):
        raise ZeroDivisionError
    assert not (tmp_path / "outputs").exists()
    with writing(tmp_path / "outputs"):
        (tmp_path / "outputs" / "a").touch()
    assert [path.name for path in (tmp_path / "outputs").iterdir()] == ["a"]


def test_never_two_at_once_however_many_come_and_go(tmp_path):
    """Each holder adds to a number in a way that loses counts whenever two are at it together."""
    code = """
import sys, time
from pathlib import Path
from classify.errors import OutputError
from classify.lock import writing
folder = Path(sys.argv[1])
done = 0
while done < 25:
    try:
        with writing(folder):
            number = int((folder / "number").read_text())
            time.sleep(0.002)
            (folder / "number").write_text(str(number + 1))
        done += 1
    except OutputError:
        pass
"""
    (tmp_path / "number").write_text("0")
    many = [subprocess.Popen([sys.executable, "-c", code, str(tmp_path)]) for _ in range(4)]
    assert [process.wait(120) for process in many] == [0] * 4
    assert (tmp_path / "number").read_text() == "100"


@pytest.mark.parametrize("code", [errno.ENOLCK, errno.ENOSYS, errno.EOPNOTSUPP])
def test_a_disk_without_locks_is_said_and_the_work_goes_on(tmp_path, monkeypatch, code):
    said = []

    class Notes(Silent):
        def note(self, message):
            said.append(message)

    def no_locks(descriptor, operation):
        raise OSError(code, os.strerror(code))

    monkeypatch.setattr(fcntl, "flock", no_locks)
    with writing(tmp_path, Notes()):
        (tmp_path / "a").touch()
    assert len(said) == 1
    assert os.strerror(code) in said[0]
    assert "only one" in said[0]
    assert [path.name for path in tmp_path.iterdir()] == ["a"]


def test_a_library_call_of_another_room_is_refused_too(finished_project, tmp_path, hold):
    from classify.assessment.draw import DrawOptions
    from classify.assessment.project_sample import SampleRequest, draw_sample

    folder = shutil.copytree(finished_project, tmp_path / "copy")
    request = SampleRequest(DrawOptions("simple random", 1), points=5)
    process = hold(folder / "outputs")
    with pytest.raises(OutputError, match="another command is writing here"):
        draw_sample(load_project(folder), folder / "outputs", request)
    assert not (folder / "outputs" / "sample").exists()
    process.kill()
    process.wait()
    assert len(draw_sample(load_project(folder), folder / "outputs", request).points) == 5
