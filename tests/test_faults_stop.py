"""Stopped from outside: a line that says how to go on, the exit code of shells, no traceback, nothing half."""

from __future__ import annotations

import os
import random
import signal
import subprocess
import sys
import time
from contextlib import suppress
from pathlib import Path

import pytest
from forked_commands import commands
from small_project import PROJECT, make_small_project, read_json

from classify.files import TEMPORARY_SUFFIX
from classify.settings import load_project
from classify.workflow import STAGES, status

GO_ON = "run the same command again to go on"


@pytest.fixture(scope="module")
def project(tmp_path_factory):
    """A miniature that is quick to run, and a process that runs commands."""
    folder = make_small_project(
        tmp_path_factory.mktemp("stop") / "p", project=PROJECT.replace("trees = 30", "trees = 4")
    )
    with commands(folder.parent / "said.txt") as forked:
        yield folder, forked


def begun(folder: Path) -> str | None:
    return next((s.name for s in status(load_project(folder)) if s.state != "done"), None)


def test_ctrl_c_and_termination_in_every_stage_leave_whole_files_and_say_how_to_go_on(project):
    folder, forked = project
    assert forked.run("run", "--quiet", "--project", folder)[0] == 0
    seconds = {name: s["seconds"] for name, s in read_json(folder / "outputs" / "run.json")["stages"].items()}
    choose, numbers = random.Random(7), [signal.SIGINT, signal.SIGTERM]
    for stage, number in zip(STAGES, numbers * 3, strict=False):
        for _ in range(4):  # a stage that was quicker than expected is tried again
            name = "check" if stage.name == "review" else stage.name
            extra = ["--review"] if name == "check" else ["--force"]
            (folder / "outputs" / stage.outputs[0]).unlink(missing_ok=True)
            process = forked.start(name, *extra, "--quiet", "--project", folder)
            time.sleep(choose.uniform(0.1, 0.7) * seconds[stage.name])
            os.kill(process, number)
            code, said = forked.end()
            if code != 0:
                break
        assert code == 128 + number, (stage.name, said)
        assert GO_ON in said
        assert "Traceback" not in said
        assert not [p for p in folder.rglob("*") if TEMPORARY_SUFFIX in p.name or "landassay-lock" in p.name]
        assert forked.run("run", "--quiet", "--project", folder) == (0, "")


def test_ctrl_c_twice_ends_at_once_and_the_next_run_clears_up(project):
    folder, forked = project
    for pause_s in (0.0, 0.02, 0.2):
        process = forked.start("train", "--force", "--quiet", "--project", folder)
        time.sleep(0.5)
        os.kill(process, signal.SIGINT)
        time.sleep(pause_s)
        with suppress(ProcessLookupError):  # it may have ended by then
            os.kill(process, signal.SIGINT)
        code, said = forked.end()
        assert code in (130, -signal.SIGINT)
        assert GO_ON in said.lower()
        assert "Traceback" not in said
    assert forked.run("run", "--quiet", "--project", folder) == (0, "")
    assert not [p for p in folder.rglob("*") if TEMPORARY_SUFFIX in p.name or "landassay-lock" in p.name]


def shell(line: str, **environment: str) -> subprocess.CompletedProcess:
    """A line of Bash in which `landassay` is this one."""
    start = f'landassay() {{ "{sys.executable}" -m classify "$@"; }}; '
    return subprocess.run(
        ["bash", "-c", start + line], capture_output=True, text=True, check=False, env={**os.environ, **environment}
    )


def test_whoever_reads_may_go_away(finished_project):
    done = shell(f'(sleep 0.5; landassay status --project "{finished_project}"; echo "code $?" >&2) | true')
    assert done.stderr == "code 1\n"


def test_without_standard_streams_nothing_is_said_into_a_result(finished_project):
    """Their numbers would be taken by the next files that are opened, and what libraries say would end up in these."""
    done = shell(f'landassay status --project "{finished_project}" --json <&- >&- 2>&-; echo "code $?"')
    assert done.stdout == "code 0\n"
    code = (
        "import os, sys\n"
        "from classify.cli.surroundings import prepare_streams\n"
        "prepare_streams()\n"
        "file = os.open(sys.argv[1], os.O_WRONLY | os.O_CREAT)\n"
        "os.write(2, b'said by a library')\n"
        "sys.exit(file < 3)"
    )
    target = finished_project.parent / "result"
    done = shell(f'exec <&- >&- 2>&-; "{sys.executable}" -c "$CODE" \'{target}\'', CODE=code)
    assert done.returncode == 0
    assert target.read_bytes() == b""


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="needs a device that is always full")
def test_standard_output_on_a_full_disk_is_one_line(finished_project):
    done = shell(f'landassay status --project "{finished_project}" > /dev/full')
    assert (done.returncode, done.stderr) == (1, "landassay: No space left on device\n")
