"""Fixtures that several rooms share, and the settings of property tests."""

from __future__ import annotations

import os
from pathlib import Path

import pytest
from click.testing import CliRunner
from hypothesis import HealthCheck, settings
from small_project import make_small_project

# A fixed seed in CI, so that a red run can be repeated; no deadline, as shared machines stall.
settings.register_profile("ci", derandomize=True, deadline=None, suppress_health_check=[HealthCheck.too_slow])
settings.register_profile("local", deadline=None)
settings.load_profile("ci" if os.environ.get("CI") else "local")


@pytest.fixture
def small_project(tmp_path: Path) -> Path:
    """A fresh miniature project folder."""
    return make_small_project(tmp_path / "miniature")


@pytest.fixture(scope="session")
def finished_project(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A miniature project after a whole run. Read only: tests must not change it."""
    from classify.cli.main import cli

    folder = make_small_project(tmp_path_factory.mktemp("finished") / "miniature")
    result = CliRunner().invoke(cli, ["run", "--project", str(folder), "--quiet"], catch_exceptions=False)
    assert result.exit_code == 0
    return folder
