"""Bad tables are refused with file, row and column, and nothing is written; the command writes what it says."""

from __future__ import annotations

import json
import subprocess
import sys

import pandas as pd
import pytest
from click.testing import CliRunner

from classify.assessment import AssessmentOptions, assess, assess_matrix
from classify.cli.main import cli
from classify.errors import LandassayError, OutputError, SampleError

POINTS = "stratum,map,reference\na,a,a\na,a,b\nb,b,b\nb,b,b\n"
STRATA = "stratum,area\na,30\nb,70\n"
MATRIX = "map,a,b\na,1,1\nb,0,2\n"


@pytest.fixture
def run(tmp_path):
    """Run the command on tables given as text; returns (result, error or None, folder of results)."""

    def call(command="assess", *more, **tables):
        arguments = [command, "--out", str(tmp_path / "out"), *more]
        for option, text in tables.items():
            path = tmp_path / f"{option}.csv"
            path.write_bytes(text if isinstance(text, bytes) else text.encode("utf-8"))
            arguments += [f"--{option}", str(path)]
        result = CliRunner().invoke(cli, arguments)
        return result, result.exception, tmp_path / "out"

    return call


BAD_TABLES = [
    (
        {"points": POINTS, "strata": "stratum,area\na,-30\nb,70\n"},
        r"strata.csv, row 2, column 'area': '-30' is not a number",
    ),
    (
        {"points": POINTS, "strata": "stratum,area\na,\nb,70\n"},
        r"strata.csv, row 2, column 'area': the area is missing",
    ),
    ({"points": POINTS, "strata": "stratum,area\na,much\nb,70\n"}, r"row 2, column 'area': 'much' is not a number"),
    ({"points": POINTS, "strata": "stratum,area\na,0\nb,0\n"}, r"strata.csv: the areas of the strata add up to 0"),
    (
        {"points": POINTS, "strata": "stratum,area\na,30\na,70\n"},
        r"strata.csv, row 3, column 'stratum': stratum 'a' is listed",
    ),
    (
        {"points": POINTS, "strata": "stratum,area\na,30\n,70\n"},
        r"strata.csv, row 3, column 'stratum': the stratum is missing",
    ),
    (
        {"points": POINTS, "strata": "stratum,area\na,30\nc,70\n"},
        r"points.csv, row 4, column 'stratum': stratum 'b' is not in",
    ),
    (
        {"points": POINTS, "strata": "stratum,pixels\na,30\nb,70\n"},
        r"strata.csv, column 'pixels': strata give pixels, but",
    ),
    ({"points": POINTS, "strata": "stratum,hectares\na,30\n"}, r"neither a column 'area' nor 'pixels'"),
    (
        {"points": POINTS, "strata": "stratum,area,mapped_as\na,30,a\nb,70,c\n"},
        r"row 4, column 'map': map class 'b', but the",
    ),
    ({"points": "stratum,map\na,a\n", "strata": STRATA}, r"points.csv: the table has no column 'reference'"),
    ({"points": "stratum,reference\na,a\n", "strata": STRATA}, r"points.csv: the table has no column 'map'"),
    (
        {"points": "stratum,map,reference\na,,a\n", "strata": STRATA},
        r"points.csv, row 2, column 'map': the map is missing",
    ),
    ({"points": "stratum,map,reference\n", "strata": STRATA}, r"points.csv: the table has a first row but no others"),
    ({"points": "", "strata": STRATA}, r"points.csv: the file is empty"),
    ({"points": b"\xff\xfe\x00", "strata": STRATA}, r"points.csv: this is not a UTF-8 table"),
    ({"points": POINTS}, r"points.csv, column 'stratum': points name strata, but there is no table of strata"),
    ({"points": "stratum,map,reference\na,a,\nb,b,\n", "strata": STRATA}, r"no point on the map has a reference label"),
    ({"matrix": "map,a,b\na,1,1\n", "strata": STRATA}, r"matrix.csv, column 'b': column 'b' has no row of that name"),
    (
        {"matrix": "map,a\na,1\nb,1\n", "strata": STRATA},
        r"matrix.csv, row 3, column 'a': row 'b' has no column of that name",
    ),
    (
        {"matrix": "map,a,b\na,1.5,1\nb,0,2\n", "strata": STRATA},
        r"matrix.csv, row 2, column 'a': '1.5' is not a whole number",
    ),
    (
        {"matrix": "map,a,b\na,1,1\nb,-1,2\n", "strata": STRATA},
        r"matrix.csv, row 3, column 'a': '-1' is not a whole number",
    ),
    (
        {"matrix": "map,a,b\na,,1\nb,0,2\n", "strata": STRATA},
        r"matrix.csv, row 2, column 'a': '' is not a whole number",
    ),
    ({"matrix": "map,a,b\na,0,0\nb,0,0\n", "strata": STRATA}, r"matrix.csv: the matrix holds no counts"),
    ({"matrix": "map,a,b\na,1,1\na,0,2\n", "strata": STRATA}, r"matrix.csv: class 'a' names more than one row"),
    ({"matrix": MATRIX, "strata": "stratum,area\na,30\nc,70\n"}, r"map class 'b' of .*matrix.csv is no stratum"),
    ({"points": "map,reference\na,a\na\n"}, r"points.csv, row 3: the number of fields is 1, but there are 2 columns"),
    ({"points": "map,reference\na,a,b\n"}, r"points.csv, row 2: the number of fields is 3, but there are 2 columns"),
    ({"points": "map,map,reference\na,b,a\n"}, r"points.csv: more than one column is called 'map'"),
    ({"points": "map,,reference\na,b,a\n"}, r"points.csv: a column has no name"),
    ({"points": 'map,reference\na,"a\n'}, r"points.csv: this is not a UTF-8 table"),
    (
        {"points": POINTS, "strata": "stratum,area\na,30\nb,0\n"},
        r"strata.csv, column 'stratum': stratum 'b' has points, but its area is 0",
    ),
    (
        {"matrix": MATRIX, "strata": "stratum,area\na,0\nb,70\n"},
        r"strata.csv, column 'stratum': stratum 'a' has points, but its area is 0",
    ),
    ({"points": POINTS, "strata": STRATA, "merge": "class,counts_as\na,\n"}, r"merge.csv, row 2, column 'counts_as'"),
]  # fmt: skip


@pytest.mark.parametrize(("tables", "message"), BAD_TABLES)
def test_bad_tables_are_refused_and_nothing_is_written(run, tables, message):
    _, error, out = run(**tables)
    assert isinstance(error, LandassayError)
    with pytest.raises(LandassayError, match=message):
        raise error
    assert not out.exists()


def test_all_findings_come_at_once_and_many_alike_are_counted():
    points = pd.DataFrame({"stratum": ["x"] * 8 + ["a"], "map": ["a"] * 8 + [""], "reference": ["a"] * 9})
    with pytest.raises(SampleError) as caught:
        assess(points, pd.DataFrame({"stratum": ["a", "b"], "area": [1, 2]}))
    texts = [problem.what for problem in caught.value.problems]
    assert sum("stratum 'x'" in text for text in texts) == 5
    assert any("3 more rows" in text for text in texts) and any("map is missing" in text for text in texts)
    assert sum(bool(problem.fix) for problem in caught.value.problems) == 2, "each remedy is said once"


def test_labels_outside_the_given_classes():
    points = pd.DataFrame({"map": ["a", "a"], "reference": ["a", "z"]})
    with pytest.raises(SampleError, match=r"row 2, column 'reference': 'z' is no class\n.*classes are 'a', 'b'"):
        assess(points, options=AssessmentOptions(classes=("a", "b")))


def test_matrix_with_a_class_outside_the_given_ones():
    matrix = pd.DataFrame({"map": ["a", "b"], "a": [5, 1], "b": [2, 7]})
    with pytest.raises(SampleError, match=r"row 2, column 'map': 'b' is no class\n.*classes are 'a'"):
        assess_matrix(matrix, options=AssessmentOptions(classes=("a",)))


def test_blank_columns_that_spreadsheets_leave_are_dropped(run):
    clean, _, out = run(points=POINTS, strata=STRATA)
    expected = json.loads((out / "assessment.json").read_text("utf-8"))
    trailing = POINTS.replace("\n", ",,\n")
    result, error, _ = run(points="\ufeff" + trailing, strata=STRATA.replace("\n", " \r\n") + "\n \n")
    assert error is None, result.output
    assert json.loads((out / "assessment.json").read_text("utf-8")) == expected and clean.exit_code == 0


def test_exit_code_and_message_without_traceback(tmp_path):

    (tmp_path / "points.csv").write_text("stratum,map,reference\nz,a,a\n")
    (tmp_path / "strata.csv").write_text(STRATA)
    arguments = ["assess", "--points", "points.csv", "--strata", "strata.csv", "--out", "out"]
    done = subprocess.run(
        [sys.executable, "-m", "classify", *arguments], cwd=tmp_path, capture_output=True, text=True, check=False
    )
    assert done.returncode == 1
    assert "points.csv, row 2, column 'stratum': stratum 'z' is not in strata.csv" in done.stderr
    assert "Traceback" not in done.stderr and done.stdout == "" and not (tmp_path / "out").exists()


@pytest.mark.parametrize(
    "arguments",
    [
        ["assess", "--points", "p.csv"],
        ["assess", "--points", "p.csv", "--matrix", "m.csv"],
        ["assess", "--strata", "s.csv"],
        ["assess", "--confidence", "0.9"],
        ["assess", "--points", "p.csv", "--out", "o", "--force"],
        ["assess", "--points", "p.csv", "--out", "o", "--project", "p"],
        ["assess", "--points", "p.csv", "--out", "o", "--pixel-area", "4"],
        ["assess", "--points", "p.csv", "--out", "o", "--seed", "4"],
        ["assess", "--points", "p.csv", "--out", "o", "--purposive", "--confidence", "0.9"],
        ["assess", "--matrix", "m.csv", "--out", "o", "--unlabelled", "cloud"],
        ["compare", "--points", "p.csv", "--out", "o", "--project", "p"],
        ["compare"],
        ["compare", "other.tif", "--purposive"],
        ["compare", "other.tif", "--points", "p.csv"],
    ],
)
def test_wrong_usage_is_exit_code_2(arguments):
    result = CliRunner().invoke(cli, arguments)
    assert result.exit_code == 2
    assert "Error: " in result.stderr and "Traceback" not in result.stderr


def test_command_from_points_matrix_and_pixels_agree(run, tmp_path):
    as_points, _, out = run(points=POINTS, strata=STRATA)
    assert as_points.exit_code == 0, as_points.output
    first = json.loads((out / "assessment.json").read_text("utf-8"))
    _, error, _ = run(matrix=MATRIX, strata=STRATA)
    assert error is None
    assert json.loads((out / "assessment.json").read_text("utf-8")) == first
    pixels = "stratum,pixels\na,3000\nb,7000\n"
    _, error, _ = run("assess", "--pixel-area", "0.01", "--unit", "ha", points=POINTS, strata=pixels)
    third = json.loads((out / "assessment.json").read_text("utf-8"))
    assert error is None and third["area_unit"] == "ha" and third["total_area"] == pytest.approx(100)
    assert third["overall_accuracy"]["estimate"] == pytest.approx(first["overall_accuracy"]["estimate"])
    # Pixel counts bring the finite population correction with them.
    assert third["overall_accuracy"]["standard_error"] < first["overall_accuracy"]["standard_error"]


def test_json_goes_to_stdout_and_everything_else_to_stderr(run):
    result, _, out = run("assess", "--json", points=POINTS + "b,b,\n", strata=STRATA)
    assert json.loads(result.stdout) == json.loads((out / "assessment.json").read_text("utf-8"))
    assert "warning: 1 of 5 points have no reference label" in result.stderr
    names = {path.name for path in out.iterdir()}
    tables = {"accuracy.csv", "areas.csv", "matrix.csv", "strata.csv"}
    assert names == {"assessment.json", "assessment.files.json", *tables}


def test_inputs_and_foreign_files_are_never_written_over(run, tmp_path):
    """The documented names of inputs are names of results, and --out may be the folder they lie in."""
    (tmp_path / "areas.csv").write_text("mine\n")
    for name, tables in {"strata": {"points": POINTS}, "matrix": {"matrix": MATRIX}}.items():
        result, error, _ = run("assess", "--out", str(tmp_path), strata=STRATA, **tables)
        assert isinstance(error, OutputError)
        assert {p.where for p in error.problems} >= {str(tmp_path / f"{name}.csv"), str(tmp_path / "areas.csv")}
        assert (tmp_path / "strata.csv").read_text() == STRATA and (tmp_path / "areas.csv").read_text() == "mine\n"
        assert not (tmp_path / "assessment.json").exists(), "all targets are checked before the first is written"
    (tmp_path / "comparison.csv").write_text("stratum,map,other_map,reference\na,a,a,a\nb,b,b,b\n")
    arguments = ["compare", "--points", str(tmp_path / "comparison.csv"), "--strata", str(tmp_path / "strata.csv")]
    result = CliRunner().invoke(cli, [*arguments, "--out", str(tmp_path)])
    assert isinstance(result.exception, OutputError) and "input would be overwritten" in str(result.exception)


def test_own_results_are_written_again_unless_they_were_changed(run):
    regions = POINTS.replace("\n", ",north\n").replace("reference,north", "reference,region")
    _, error, out = run(points=regions, strata=STRATA)
    assert error is None and (out / "regions.csv").is_file()
    _, error, _ = run(points=POINTS + "b,b,a\n", strata=STRATA)
    assert error is None and not (out / "regions.csv").exists(), "a table of the run before would be taken for new"
    (out / "accuracy.csv").write_text("corrected by hand\n")
    before = (out / "assessment.json").read_bytes()
    _, error, _ = run(points=POINTS, strata=STRATA)
    assert isinstance(error, OutputError) and "changed since it was written" in str(error)
    assert (out / "accuracy.csv").read_text() == "corrected by hand\n"
    assert (out / "assessment.json").read_bytes() == before
    (out / "assessment.files.json").write_text("not ours")
    _, error, _ = run(points=POINTS, strata=STRATA)
    assert len(error.problems) == 6, "without its record no file is known as ours"


def test_pixel_area_that_changes_nothing_is_wrong_usage(run):
    result, _, out = run("assess", "--pixel-area", "4", points=POINTS, strata=STRATA)
    assert result.exit_code == 2 and "has a column 'area'" in result.stderr and not out.exists()


def test_strata_under_other_names_and_options_of_the_command(run):
    strata = "stratum,area,mapped_as\nlow,30,a\nhigh,70,b\n"
    points = "stratum,reference\nlow,a\nlow,unclear\nlow,b\nhigh,b\nhigh,b\n"
    result, error, out = run(
        "assess",
        "--unlabelled",
        "unclear",
        "--interval",
        "student",
        "--confidence",
        "0.9",
        points=points,
        strata=strata,
    )
    assert error is None, result.output
    content = json.loads((out / "assessment.json").read_text("utf-8"))
    assert content["area"]["a"]["mapped"] == 30 and content["unlabelled"]["points"] == 1
    assert content["confidence_level"] == 0.9 and content["overall_accuracy"]["interval"].startswith("student")
    assert "overall accuracy" in result.stdout
    result, error, _ = run("assess", "--purposive", points=points, strata=strata)
    assert "agreement on the sampled places" in result.stdout and "accuracy" not in result.stdout
    assert json.loads((out / "assessment.json").read_text("utf-8"))["evidence"] == "purposive sample"


def test_compare_from_tables(run):
    points = "stratum,map,other_map,reference\n" + "a,a,a,a\na,a,b,b\nb,b,b,b\nb,b,b,b\nb,b,a,b\n" * 4
    result, error, out = run("compare", points=points, strata=STRATA)
    assert error is None
    assert "The second map is right on" in result.stdout
    assert {path.name for path in out.iterdir()} == {"comparison.json", "comparison.csv", "comparison.files.json"}


def test_matrix_columns_may_come_in_another_order():
    matrix = pd.DataFrame({"map": ["a", "b"], "b": [1, 7], "a": [5, 2]})
    found = assess_matrix(matrix, pd.DataFrame({"stratum": ["b", "a"], "area": [7.0, 3.0]}))
    assert found.classes == ("a", "b") and found.matrix_counts.tolist() == [[5, 1], [2, 7]]
    assert found.overall_accuracy.estimate == pytest.approx(0.3 * 5 / 6 + 0.7 * 7 / 9)
