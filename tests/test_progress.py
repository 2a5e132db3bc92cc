"""Progress says how far and how long; it never goes to standard output."""

from __future__ import annotations

import io
import re

from classify.progress import LogLines, duration


def test_log_lines_give_share_and_time_left():
    stream = io.StringIO()
    with LogLines(stream, every_s=0).task("Classifying", 4) as task:
        task.advance()
        task.advance(2)
    lines = stream.getvalue().splitlines()
    assert re.fullmatch(r"Classifying: 25%, about .+ left", lines[0])
    assert re.fullmatch(r"Classifying: 75%, about .+ left", lines[1])
    assert re.fullmatch(r"Classifying: done in 0 s", lines[-1])


def test_an_empty_task_and_too_many_units_do_no_harm():
    stream = io.StringIO()
    with LogLines(stream, every_s=0).task("Nothing", 0) as task:
        task.advance()
    with LogLines(stream, every_s=0).task("Few", 1) as task:
        task.advance(3)
    assert "100%" in stream.getvalue()
    assert "300%" not in stream.getvalue()


def test_durations_as_people_say_them():
    assert duration(8.4) == "8 s"
    assert duration(59.6) == "1 min 00 s"
    assert duration(200) == "3 min 20 s"
    assert duration(7500) == "2 h 05 min"
    assert duration(float("nan")) == "unknown time"
