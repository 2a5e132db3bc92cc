"""Names with markup, formulas, paths and commands, followed from the project file through a whole run into every file
that is written. They are shown as they are, and nothing comes of them."""

from __future__ import annotations

import csv
import html.parser
import io
import json
import re
import zipfile
from pathlib import Path

import geopandas as gpd
import pytest
from click.testing import CliRunner
from small_project import NAMES, PROJECT, make_small_project

from classify.cli.main import cli
from classify.errors import DataError, SettingsError
from classify.progress import LogLines
from classify.settings import load_project
from classify.tables import csv_text, read_table
from classify.text import plain, printable_json, unseen

CLASSES = (
    "<script>alert(1)</script> & </td><img src=x onerror=alert(2)>",
    '=HYPERLINK("http://x.invalid"; \'a\') #eval("1+1") $x$ *b* @cite \\ #read("/etc/passwd")',
    "../../CON/nul:\\..\\x",
)
TITLE = "</title><script>alert(3)</script> {{ 7 * 7 }} {% raw %} #panic() = Heading `raw` ${x}"
ROOMS = ("title", "client", "author")


@pytest.fixture(scope="module")
def outputs(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Outputs of a whole run of a project of which every name is hostile."""
    text = PROJECT.replace("A miniature of the Sorrel Basin", "TITLE").replace("Sorrel Basin Water Board", "TITLE")
    text = text.replace('"TITLE"', json.dumps(TITLE)).replace("seed = 11", f"author = {json.dumps(TITLE)}\nseed = 11")
    for name, hostile in zip(NAMES, CLASSES, strict=True):
        text = text.replace(f'name = "{name}"', f"name = {json.dumps(hostile)}")
    folder = make_small_project(tmp_path_factory.mktemp("names") / "miniature", project=text)
    for file, column in (("training.gpkg", "cover"), ("reference.gpkg", "observed")):
        frame = gpd.read_file(folder / file)
        frame[column] = frame[column].map(dict(zip(NAMES, CLASSES, strict=True)))
        frame.to_file(folder / file, layer=file.removesuffix(".gpkg"))
    before = set(folder.parent.rglob("*"))
    result = CliRunner().invoke(cli, ["run", "--project", str(folder), "--quiet"], catch_exceptions=False)
    assert result.exit_code == 0
    made = set(folder.parent.rglob("*")) - before
    assert made and all(path.is_relative_to(folder / "outputs") for path in made)
    return folder / "outputs"


class Tags(html.parser.HTMLParser):
    """Elements and their attributes that a browser would see, and text."""

    def __init__(self, document: str) -> None:
        super().__init__(convert_charrefs=True)
        self.scripts: list[str] = []
        self.attributes: list[tuple[str, str | None]] = []
        self.text = ""
        self._in_script = False
        self.feed(document)

    def handle_starttag(self, tag, attrs):
        self._in_script = tag == "script"
        self.attributes += attrs
        if self._in_script:
            self.scripts.append("")

    def handle_endtag(self, tag):
        self._in_script = False

    def handle_data(self, data):
        if self._in_script:
            self.scripts[-1] += data
        else:
            self.text += data


@pytest.mark.parametrize("name", ["report.html", "review.html"])
def test_pages_show_names_and_run_none(outputs: Path, finished_project: Path, name: str) -> None:
    found, plain_one = (next(folder.rglob(name), None) for folder in (outputs, finished_project / "outputs"))
    if found is None and plain_one is None:
        pytest.skip(f"this project writes no {name}")
    seen, usual = Tags(found.read_text()), Tags(plain_one.read_text())
    assert len(seen.scripts) == len(usual.scripts)
    assert not any(re.match("on", key) for key, _ in seen.attributes)
    assert {key for key, _ in seen.attributes} <= {key for key, _ in usual.attributes}
    for hostile in CLASSES:
        assert re.sub(r"\s+", " ", hostile) in re.sub(r"\s+", " ", seen.text)
    assert "49" not in re.findall(r"</title><script>alert\(3\)</script> (\S+)", seen.text)
    for script in seen.scripts:
        assert "alert(" not in script or re.search(r"\\u003c|\\/script|&lt;", script)


def test_the_document_shows_names_and_computes_none(outputs: Path) -> None:
    pypdf = pytest.importorskip("pypdf")
    pages = pypdf.PdfReader(next(outputs.rglob("report.pdf"))).pages
    text = re.sub(r"\s+", "", "".join(page.extract_text() for page in pages))
    assert "#eval" in text and "#read(" in text and "#panic()" in text and "root:x:0" not in text
    assert "<script>alert(1)</script>" in text


def test_the_workbook_holds_text(outputs: Path) -> None:
    with zipfile.ZipFile(next(outputs.rglob("*.xlsx"))) as book:
        parts = {name: book.read(name).decode() for name in book.namelist() if name.endswith(".xml")}
    assert not any("<f>" in text or "<f " in text for text in parts.values())
    assert not any("hyperlink" in name for name in parts) and any("HYPERLINK" in text for text in parts.values())
    assert not any(re.search(r"<hyperlink\b", text) for text in parts.values())


def test_no_table_holds_a_formula(outputs: Path) -> None:
    tables = list(outputs.rglob("*.csv"))
    assert tables
    cells = [cell for path in tables for row in csv.reader(io.StringIO(path.read_text())) for cell in row]
    assert any(cell == "'" + CLASSES[1] for cell in cells)
    for cell in cells:
        assert not re.match(r"[=@\t\r]", cell) and (cell[:1] not in "+-" or not cell or float(cell) == float(cell))


def test_layers_and_items_hold_the_names_themselves(outputs: Path) -> None:
    for path in outputs.rglob("*.json"):
        json.loads(path.read_text(), parse_constant=pytest.fail)
    item = json.loads(next(outputs.rglob("item.json")).read_text())
    assert CLASSES[0] in json.dumps(item, ensure_ascii=False) or "script" not in json.dumps(item)
    assert not re.search(r"[<>\s/\\]|\.\.", item["id"])


def test_the_delivered_report_is_verified(outputs: Path) -> None:
    result = CliRunner().invoke(cli, ["verify", str(next(outputs.rglob("report.html")).parent)], catch_exceptions=False)
    assert result.exit_code == 0, result.output


# --- the rules themselves -------------------------------------------------------------------------------------------

HIDDEN = [
    "\x1b[2J",
    "\x00",
    "\x07",
    "\x9b31m",
    "\u202etxt.exe",
    "a\u200bb",
    "\u2066",
    "\ufeff",
    "\U000e0041",
    "\r",
    "\u2028",
]


@pytest.mark.parametrize("text", HIDDEN)
@pytest.mark.parametrize("place", ["title", "class", "label"])
def test_what_cannot_be_seen_is_refused_in_a_project(tmp_path: Path, text: str, place: str) -> None:
    marks = {"title": "A miniature of the Sorrel Basin", "class": 'name = "Water', "label": 'label = "observed'}
    spelt = "".join(f"\\U{ord(c):08x}" for c in text)
    file = tmp_path / "project.toml"
    file.write_text(PROJECT.replace(marks[place], marks[place] + spelt))
    with pytest.raises(SettingsError, match="cannot be seen") as caught:
        load_project(file)
    assert unseen(str(caught.value)) is None


def test_ordinary_text_of_any_script_is_taken(tmp_path: Path) -> None:
    for text in ("Größe – “naïve” 100 %", "草地", "مرج", "घास का मैदान", "می‌خواهم", "😀 👩‍🌾", "a\tb"):
        assert unseen(text) is None and plain(text) == text


def test_no_name_commands_the_terminal(tmp_path: Path) -> None:
    """Names in files, of files and of columns come into messages; what reaches the terminal is their code."""
    hostile = tmp_path / "a\x1b[2Jb\x9bc"
    hostile.mkdir()
    make_small_project(hostile)
    frame = gpd.read_file(hostile / "training.gpkg")
    frame.loc[0, "cover"] = "x\x1b]0;owned\x07\u202e"
    frame.to_file(hostile / "training.gpkg", layer="training")
    for more in ([], ["--json"]):
        for command in ("check", "train", "status", "run"):
            result = CliRunner().invoke(cli, [command, "--project", str(hostile), *more])
            said = result.output + (str(result.exception) if isinstance(result.exception, SystemExit) else "")
            assert not re.search("[\x00-\x08\x0b-\x1f\x7f-\x9f\u202e]", said), (command, said)
    stream = io.StringIO()
    LogLines(stream).note("a\x1b[31mb")
    assert stream.getvalue() == "a<U+001B>[31mb\n"


def test_json_for_the_terminal_means_the_same() -> None:
    content = {"a\u202e": ["\x9b", "\U000e0041", "plain"]}
    text = printable_json(json.dumps(content, ensure_ascii=False, indent=1))
    assert unseen(text) is None and json.loads(text) == content


FORMULAS = ["=1+1", "+1+1", "-1+cmd|' /C calc'!A0", "@SUM(1)", "\t=1", " =1", "-", "+a", "=", "-1-1"]
PLAIN = ["", "a=1", "-1", "+1.5", "-1e-5", "1-1", "'", "'a", "Water", "- 3"]


def test_tables_hold_no_formula_and_give_back_what_was_written(tmp_path: Path) -> None:
    import pandas as pd

    table = pd.DataFrame({"name": [*FORMULAS, *PLAIN], "=x": range(len(FORMULAS) + len(PLAIN)), "number": -1.5})
    path = tmp_path / "x.csv"
    path.write_text(csv_text(table), newline="")
    with path.open(newline="") as stream:
        rows = list(csv.reader(stream))
    assert all(row[0].startswith("'") for row in rows[1 : 1 + len(FORMULAS)])
    assert [row[0] for row in rows[1 + len(FORMULAS) :]] == PLAIN
    assert rows[0][1] == "'=x" and rows[1][2] == "-1.5"
    back = read_table(path)
    assert list(back["name"]) == list(table["name"]) and list(back.columns) == list(table.columns)


@pytest.mark.parametrize(
    "content",
    [
        b"a" * 200_000,
        b"a,b\n" + b"x" * 10_000_000 + b",1\n",
        b"," * 2_000_000 + b"\n",
        b"a,b\n1,\x002\n",
        b"\xff\xfea\x00",
        b'a,b\n"1',
        b"a,a\n1,2\n",
        b"",
        b"\n\n\n",
        b"a,b\n1\n",
        b"PK\x03\x04",
        b"\xef\xbb\xbf\xef\xbb\xbfa\n1\n",
    ],
)
def test_tables_that_are_none(tmp_path: Path, content: bytes) -> None:
    path = tmp_path / "x.csv"
    path.write_bytes(content)
    with pytest.raises(DataError) as caught:
        read_table(path)
    assert len(str(caught.value)) < 2000
