"""The command line as a person meets it: help at once, exit codes, no traceback for a user's mistake."""

from __future__ import annotations

import json
import subprocess
import sys
from importlib import import_module

import pytest
from click.testing import CliRunner

from classify.cli.main import COMMANDS, cli


def landassay(*arguments, folder=None):
    command = [sys.executable, "-m", "classify", *map(str, arguments)]
    return subprocess.run(command, capture_output=True, text=True, cwd=folder, check=False, timeout=300)


def test_help_imports_nothing_heavy():
    code = (
        "import sys, classify.cli.main as m\n"
        "try: m.cli.main(['--help'])\n"
        "except SystemExit: pass\n"
        "heavy = {'numpy', 'pandas', 'sklearn', 'rasterio', 'geopandas', 'pydantic'} & set(sys.modules)\n"
        "assert not heavy, heavy"
    )
    result = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False)
    assert result.returncode == 0, result.stderr
    assert all(name in result.stdout for name in COMMANDS)


@pytest.mark.parametrize("name", COMMANDS)
def test_every_command_is_found_and_has_help_and_the_shared_options(name):
    result = CliRunner().invoke(cli, [name, "--help"])
    assert result.exit_code == 0
    assert all(option in result.output for option in ("--quiet", "--json"))
    assert import_module(COMMANDS[name][0]).command.name == name


def test_no_project_is_one_message_and_exit_code_1(tmp_path):
    result = landassay("run", folder=tmp_path)
    assert result.returncode == 1
    assert "no project file" in result.stderr
    assert "landassay new" in result.stderr
    assert "Traceback" not in result.stderr
    assert result.stdout == ""
    assert list(tmp_path.iterdir()) == []


def test_wrong_usage_is_exit_code_2(tmp_path):
    assert landassay("run", "--jobs", "0", folder=tmp_path).returncode == 2
    assert landassay("no-such-command", folder=tmp_path).returncode == 2


def test_json_alone_on_standard_output(small_project):
    result = landassay("status", "--project", small_project, "--json")
    assert result.returncode == 0, result.stderr
    stages = json.loads(result.stdout)["stages"]
    assert {stage["state"] for stage in stages} == {"missing"}


@pytest.mark.parametrize(("options", "shown"), [([], False), (["-W", "default"], True)])
def test_warnings_of_libraries_are_not_for_users(options, shown):
    """Whatever the filters are at that moment: libraries that work in threads set them aside."""
    code = (
        "import warnings; from classify.cli.surroundings import hush_libraries; hush_libraries(); "
        "warnings.resetwarnings(); warnings.warn('for programmers')"
    )
    done = subprocess.run([sys.executable, *options, "-c", code], capture_output=True, text=True, check=True)
    assert ("for programmers" in done.stderr) == shown
