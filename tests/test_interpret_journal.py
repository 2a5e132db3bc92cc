"""The journal: nothing is lost, nothing is overwritten unseen, undo, agreement, export and import."""

from __future__ import annotations

import json
import os
import signal
import sqlite3
import subprocess
import sys
from pathlib import Path

import geopandas
import numpy as np
import pandas as pd
import pytest
from click.testing import CliRunner
from hypothesis import given, settings
from hypothesis import strategies as st
from interpret_projects import drawn_project
from statsmodels.stats.inter_rater import cohens_kappa

from classify.cli.main import cli
from classify.errors import DataError, LandassayError, OutputError, SampleError
from classify.interpret.export import labels_table
from classify.interpret.journal import NOTHING, Journal, Label, StaleEntryError
from classify.interpret.session import agreement, disagreements, shuffled

WRITER = """
import sys
from pathlib import Path
from classify.interpret.journal import Journal, Label
journal = Journal(Path(sys.argv[1]), "Ada")
for point in range(100_000):
    journal.write(point, Label("Water", None, "high", f"note {point}"), 0)
    print(point, flush=True)
"""


@pytest.fixture
def project(tmp_path: Path) -> Path:
    return drawn_project(tmp_path / "miniature")


def test_killed_while_writing_everything_acknowledged_is_there(tmp_path: Path):
    path = tmp_path / "labels.sqlite"
    process = subprocess.Popen([sys.executable, "-c", WRITER, str(path)], stdout=subprocess.PIPE, text=True)
    assert process.stdout is not None
    said = [int(process.stdout.readline()) for _ in range(20)]
    os.kill(process.pid, signal.SIGKILL)
    said += [int(line) for line in process.stdout.read().split()]
    process.wait()
    journal = Journal(path, "Ada")
    kept = journal.standing()
    journal.close()
    assert set(said) <= set(kept)
    assert all(kept[point].label == Label("Water", None, "high", f"note {point}") for point in said)


def test_a_log_cut_short_loses_only_what_was_cut(tmp_path: Path):
    """As after a power cut: the tail of the write-ahead log is half a page."""
    path, other = tmp_path / "labels.sqlite", tmp_path / "cut.sqlite"
    journal = Journal(path, "Ada")
    for point in range(6):
        journal.write(point, Label("Water"), 0)
    wal = path.with_name(path.name + "-wal").read_bytes()
    other.write_bytes(path.read_bytes())
    other.with_name(other.name + "-wal").write_bytes(wal[:-2000])
    journal.close()
    cut = Journal(other, "Ada")
    kept = cut.standing()
    cut.write(99, Label("Water"), 0)
    cut.close()
    assert set(kept) == set(range(5))


def test_a_file_that_is_no_journal_is_refused_and_left(tmp_path: Path):
    path = tmp_path / "labels.sqlite"
    path.write_bytes(b"this is not a database, and somebody may want it" * 30)
    with pytest.raises(DataError, match="labels cannot be read or written"):
        Journal(path, "Ada")
    assert path.read_bytes().startswith(b"this is not")


def test_two_pages_cannot_overwrite_each_other(tmp_path: Path):
    path = tmp_path / "labels.sqlite"
    first, second = Journal(path, "Ada"), Journal(path, "Ada")
    revision = first.write(7, Label("Water"), 0)
    with pytest.raises(StaleEntryError):
        second.write(7, Label("Pasture"), 0)
    assert second.standing()[7].label == Label("Water")
    second.write(7, Label("Pasture"), revision)
    assert first.standing()[7].label == Label("Pasture")
    with sqlite3.connect(path) as db:
        assert db.execute("PRAGMA journal_mode").fetchone() == ("wal",)
        assert db.execute("SELECT COUNT(*) FROM entry").fetchone() == (2,)


def test_synchronisation_is_full(tmp_path: Path):
    journal = Journal(tmp_path / "labels.sqlite", "Ada")
    assert journal._db.execute("PRAGMA synchronous").fetchone() == (2,)  # 2 is FULL in SQLite's documentation


@settings(max_examples=25)
@given(
    st.lists(st.one_of(st.just("undo"), st.tuples(st.integers(1, 4), st.sampled_from(["a", "b", "c"]))), max_size=14)
)
def test_undo_walks_back_through_a_plain_stack(tmp_path_factory, steps):
    journal = Journal(tmp_path_factory.mktemp("journal") / "labels.sqlite", "Ada")
    stack: list[tuple[int, str]] = []
    for step in steps:
        if step == "undo":
            expected = stack.pop()[0] if stack else None
            assert journal.undo() == expected
        else:
            journal.write(step[0], Label(step[1]), journal.standing().get(step[0], NOTHING).revision)
            stack.append(step)
    wanted = dict(stack)
    assert {i: s.label.label for i, s in journal.standing().items() if s.label} == wanted
    everyone = journal.standing()
    assert [journal.standing_at(i) for i in range(5)] == [everyone.get(i, NOTHING) for i in range(5)]
    assert journal.standing_at(1, "Bea") == NOTHING and journal.standing_at(1, "Ada") == everyone.get(1, NOTHING)
    journal.close()


def test_orders_differ_by_interpreter_and_stay():
    ids = list(range(1, 200))
    assert shuffled(ids, "Ada") == shuffled(list(reversed(ids)), "Ada")
    assert shuffled(ids, "Ada") != shuffled(ids, "Bo")
    assert sorted(shuffled(ids, "Bo")) == ids


def test_agreement_against_statsmodels(tmp_path: Path):
    path, names, random = tmp_path / "labels.sqlite", ["a", "b", "c"], np.random.default_rng(3)
    said = random.integers(0, 3, 120)
    other = np.where(random.random(120) < 0.7, said, random.integers(0, 3, 120))
    for name, values in (("Ada", said), ("Bo", other)):
        journal = Journal(path, name)
        journal.write_all((i, Label(names[v])) for i, v in enumerate(values))
    journal.write(500, Label(None), 0)
    pair = agreement(journal, [*range(120), 500], names)[0]
    counts = pd.crosstab(said, other).to_numpy()
    referee = cohens_kappa(counts)
    assert (pair["first"], pair["second"], pair["points"]) == ("Ada", "Bo", 120)
    assert pair["same"] == np.trace(counts) / 120
    assert pair["kappa"]["estimate"] == pytest.approx(referee.kappa)
    # statsmodels gives the same large-sample variance (Fleiss, Cohen & Everitt 1969).
    assert pair["kappa"]["standard_error"] == pytest.approx(referee.std_kappa, rel=1e-6)
    assert pair["kappa"]["lower"] < referee.kappa < pair["kappa"]["upper"]
    assert disagreements(journal, list(range(120))) == list(np.flatnonzero(said != other))


def test_the_label_that_holds(tmp_path: Path):
    path = tmp_path / "labels.sqlite"
    ada, bo, judge = Journal(path, "Ada"), Journal(path, "Bo B."), Journal(path, "Cy", "settling")
    ada.write_all([(1, Label("a")), (2, Label("a")), (3, Label("a")), (4, Label(None)), (5, Label("a", "b", "low"))])
    bo.write_all([(1, Label("a")), (2, Label("b")), (3, Label("b")), (4, Label(None)), (5, Label(None))])
    judge.write(3, Label("c", "b", "medium", "by the photographs"), 0)
    table = labels_table(judge, [1, 2, 3, 4, 5, 6]).set_index("id")
    assert list(table["status"]) == ["labelled", "in dispute", "settled", "cannot tell", "labelled", "open"]
    assert list(table["observed"]) == ["a", "", "c", "", "a", ""]
    assert list(table["observed_ada"]) == ["a", "a", "a", "", "a", ""]
    assert list(table["observed_bo_b"]) == ["a", "b", "b", "", "", ""]
    assert table.loc[3, "note"] == "by the photographs"
    assert table.loc[5, "alternate"] == "b"


def run(folder: Path, *args: str):
    return CliRunner().invoke(cli, ["interpret", "--project", str(folder), *args], catch_exceptions=False)


def test_labels_come_in_from_a_gis_and_go_out_to_assess(project: Path):
    sample = project / "outputs" / "sample"
    points = geopandas.read_file(sample / "points.gpkg")
    points["observed"] = ["Water" if i % 3 else "pasture" for i in points["id"]]
    points.loc[points["id"] == 4, "observed"] = "cloud"
    points.loc[points["id"] == 5, "observed"] = None
    points.to_crs(4326).to_file(project / "field.geojson")
    result = run(project, "--import", str(project / "field.geojson"), "--interpreter", "Ada", "--untold", "cloud")
    assert "39 labels taken in for Ada" in result.stdout
    assert "1 points are still without a label, first 5" in result.stderr
    assert run(project, "--export").exit_code == 0
    out = geopandas.read_file(sample / "reference.gpkg").set_index("id")
    assert out.loc[3, "observed"] == "Pasture" and out.loc[4, "status"] == "cannot tell"
    assert (out.loc[5, "observed"] or "") == "" and out.loc[5, "status"] == "open"
    again = run(project, "--import", str(project / "field.geojson"), "--interpreter", "Ada", "--untold", "cloud")
    assert "0 labels taken in" in again.stdout
    out.drop(columns="geometry").to_csv(project / "x.csv")
    (sample / "reference.gpkg").write_bytes(b"changed in a GIS")
    with pytest.raises(OutputError, match="changed since it was written"):
        run(project, "--export")


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"id": 4000}, "point 4000 was not drawn"),
        ({"id": 2}, "point 2 is listed more than once"),
        ({"observed": "Swamp"}, "'Swamp' of point 1 is no class"),
        ({"longitude": 15.2}, "point 1 does not lie where it was drawn"),
        ({"alternate": "Swamp"}, "the alternate 'Swamp' of point 1 is no class"),
        ({"observed": "cloud", "alternate": "Water"}, "point 1: an alternate label needs a first one"),
        ({"confidence": "quite"}, "point 1: confidence 'quite' is none of high, medium, low"),
        ({"note": "x" * 501}, "point 1: the note is longer than 500 characters"),
    ],
)
def test_labels_that_do_not_fit_come_in_not_at_all(project: Path, change: dict, message: str):
    table = pd.read_csv(project / "outputs" / "sample" / "points.csv", dtype=object)
    table["observed"] = "Water"
    for column, value in change.items():
        table.loc[0, column] = value
    table.to_csv(project / "labels.csv", index=False)
    with pytest.raises(SampleError, match=message):
        run(project, "--import", str(project / "labels.csv"), "--interpreter", "Ada", "--untold", "cloud")
    journal = project / "outputs" / "sample" / "labels.sqlite"
    assert not journal.exists() or not Journal(journal, "Ada").standing()


def test_a_contrary_import_does_not_overwrite(project: Path):
    sample = project / "outputs" / "sample"
    journal = Journal(sample / "labels.sqlite", "Ada")
    journal.write(3, Label("Pasture"), 0)
    table = pd.read_csv(sample / "points.csv").assign(observed="Water")
    table.to_csv(project / "labels.csv", index=False)
    with pytest.raises(SampleError, match="point 3 was labelled otherwise"):
        run(project, "--import", str(project / "labels.csv"), "--interpreter", "Ada")
    assert {i: s.label for i, s in journal.standing().items()} == {3: Label("Pasture")}


@pytest.mark.skipif(os.name == "nt", reason="Ctrl-C cannot be sent to one process there")
def test_with_json_nothing_else_is_on_standard_output(project: Path):
    Journal(project / "outputs" / "sample" / "labels.sqlite", "Ada").write(3, Label("Pasture"), 0)
    command = [sys.executable, "-m", "classify", "interpret", "--project", str(project), "--json", "--no-browser"]
    with subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True) as process:
        try:
            assert process.stderr is not None
            assert process.stderr.readline().startswith("http://127.0.0.1:")
            assert "stop with Ctrl-C" in process.stderr.readline()
            process.send_signal(signal.SIGINT)
            said, _ = process.communicate(timeout=30)
        finally:
            process.kill()
    assert json.loads(said)["points"] == {"labelled": 1, "open": 39}


@pytest.mark.parametrize(
    ("args", "message"),
    [
        (["--untold", "cloud", "--export"], "--untold: only with --import"),
        (["--export", "--port", "8000"], "--port: not with --export or --import"),
        (["--export", "--interpreter", "Ada"], "--interpreter: not with --export"),
    ],
)
def test_options_that_change_nothing_are_refused(tmp_path: Path, args: list[str], message: str):
    result = CliRunner().invoke(cli, ["interpret", "--project", str(tmp_path), *args])
    assert result.exit_code == 2 and message in result.output


def test_a_port_in_use_and_other_mistakes(project: Path):
    import socket

    with socket.socket() as taken:
        taken.bind(("127.0.0.1", 0))
        taken.listen()
        port = taken.getsockname()[1]
        with pytest.raises(LandassayError, match=f"port {port} of 127.0.0.1 cannot be used"):
            run(project, "--no-browser", "--port", str(port))
    for host, message in (("0.0.0.0", "stands for every network"), ("example.org", "is not an address")):
        with pytest.raises(LandassayError, match=message):
            run(project, "--no-browser", "--host", host)
    with pytest.raises(SampleError, match="nothing was labelled yet"):
        (project / "outputs" / "sample" / "labels.sqlite").unlink(missing_ok=True)
        run(project, "--export")
