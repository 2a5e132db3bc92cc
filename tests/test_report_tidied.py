"""A tidied map is called one, in the report as in its own file."""

from __future__ import annotations

import pytest
from small_project import PROJECT, make_small_project

from classify.settings import load_project
from classify.workflow import Job, run

SAID = "This is the tidied map"


@pytest.mark.parametrize(("settings", "tidied"), [("", False), ("\n[map]\nmajority = 3\n", True)])
def test_the_report_says_which_map_was_assessed(tmp_path, settings, tidied):
    folder = make_small_project(tmp_path / "miniature", project=PROJECT + settings)
    run(Job(load_project(folder)))
    page = (folder / "outputs" / "report" / "report.html").read_text(encoding="utf-8")
    assert (SAID in page) is tidied
    assert (folder / "outputs" / "map" / "raw.tif").is_file() is tidied
