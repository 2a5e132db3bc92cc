"""The oldest versions that are tested are the lower bounds that are promised."""

from __future__ import annotations

import re
import tomllib
from pathlib import Path

ROOT = Path(__file__).parent.parent


def test_the_oldest_versions_tested_are_the_lower_bounds():
    project = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    bounds = {
        tuple(re.fullmatch(r"([a-z0-9-]+)>=([\d.]+)", entry).groups())
        for entry in (*project["dependencies"], *project["optional-dependencies"]["cluster"])
    }
    lines = (ROOT / "tests" / "constraints-oldest.txt").read_text(encoding="utf-8").splitlines()
    assert {tuple(line.split("==")) for line in lines if not line.startswith("#")} == bounds
