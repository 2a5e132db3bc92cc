"""All forms of the report agree with assessment.json at printed precision, read back with other software."""

from __future__ import annotations

import html
import json
import re
import shutil
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path

import openpyxl
import pypdf
import pytest
from report_projects import HOSTILE, change_project, many_classes_project, screening_project

from classify.report import gather_facts, write_report
from classify.settings import load_project

MAKERS = {"change": change_project, "many": many_classes_project, "screening": screening_project}
UNIT_SPACES = str.maketrans({"\u202f": "", "\u00a0": " "})


@dataclass(frozen=True)
class Made:
    """A written report and what it should say."""

    folder: Path
    assessment: dict | None
    card: dict

    @property
    def page(self) -> str:
        return (self.folder / "report.html").read_text(encoding="utf-8")

    @cached_property
    def pdf_text(self) -> str:
        return " ".join(page.extract_text() for page in pypdf.PdfReader(self.folder / "report.pdf").pages)


@pytest.fixture(scope="module")
def all_made(tmp_path_factory) -> dict[str, Made]:
    """Each of the three projects, reported once."""
    result = {}
    for name, make in MAKERS.items():
        folder = tmp_path_factory.mktemp(name)
        outputs = folder / "outputs"
        write_report(gather_facts(make(folder), outputs), outputs / "report")
        path = outputs / "assessment" / "assessment.json"
        assessment = json.loads(path.read_text("utf-8")) if path.is_file() else None
        card = json.loads((outputs / "model" / "model.json").read_text("utf-8"))
        result[name] = Made(outputs / "report", assessment, card)
    return result


@pytest.fixture(params=list(MAKERS))
def made(request, all_made) -> Made:
    """One of them."""
    return all_made[request.param]


def expected(made: Made) -> dict[str, list[list[float | None]]]:
    """Numbers of each table (without its first column), from the JSON files alone; shares in per cent."""
    screening = made.card["screening"]
    shares = zip(screening["share_found"], screening["share_right"], strict=True)
    tables = {
        "screening_classes": [[percent(found), percent(right)] for found, right in shares],
        "screening_matrix": with_totals(screening["counts"]),
    }
    a = made.assessment
    if a is None:
        return tables
    names = a["classes"]
    areas, users, producers = a["area"], a["users_accuracy"], a["producers_accuracy"]
    tables["areas"] = [[areas[n][k] for k in ("mapped", "estimate", "standard_error", "lower", "upper")] for n in names]
    tables["accuracy"] = [
        [*(percent(users[n][k]) for k in ("estimate", "lower", "upper")),
         *(percent(producers[n][k]) for k in ("estimate", "lower", "upper")), percent(a["f1"][n]["estimate"])]
        for n in names
    ]  # fmt: skip
    tables["matrix_counts"] = with_totals(a["matrix_counts"])
    tables["matrix_shares"] = [[percent(v) for v in row] for row in with_totals(a["matrix_area_proportions"])]
    tables["agreement"] = [
        *([a[m][k] for k in ("estimate", "standard_error", "lower", "upper")] for m in ("overall_accuracy", "kappa")),
        *([a[key], None, None, None] for key in ("quantity_disagreement", "allocation_disagreement")),
    ]
    tables["strata"] = [[s["area"], s["n"]] for s in a["design"]["strata"]]
    return tables


def percent(share: float | None) -> float | None:
    return None if share is None else 100 * share


def with_totals(matrix):
    rows = [[*row, sum(row)] for row in matrix]
    return [*rows, [sum(column) for column in zip(*rows, strict=True)]]


def html_rows(page: str, name: str) -> list[list[str]]:
    """Body cells of a table, tags taken off."""
    table = re.search(rf'<table id="table-{name}".*?<tbody>(.*?)</tbody>', page, re.S).group(1)
    rows = re.findall(r"<tr.*?</tr>", table, re.S)
    cells = [re.findall(r"<t[dh][^>]*>(.*?)</t[dh]>", row, re.S) for row in rows]
    return [[html.unescape(re.sub(r"<[^>]*>", "", cell)).strip(" \n") for cell in row] for row in cells]


def close(shown: str, value: float | None, unit: float) -> bool:
    if value is None:
        return shown == "–"
    return abs(float(shown.translate(UNIT_SPACES).replace("−", "-")) - value) <= 0.50001 * unit


def unit_of(cells: list[str]) -> float:
    """Last place that a column prints: decimals, or the power of ten that all its numbers are multiples of."""
    known = [cell.translate(UNIT_SPACES).replace("−", "-") for cell in cells if cell != "–"]
    decimals = max((len(c.partition(".")[2]) for c in known), default=0)
    if decimals:
        return 10.0**-decimals
    unit = 1
    while unit < 1e6 and any(float(c) for c in known) and all(int(c) % (unit * 10) == 0 for c in known):
        unit *= 10
    return float(unit)


def test_html_prints_what_the_json_says(made):
    for name, wanted in expected(made).items():
        shown = [row[1 : 1 + len(wanted[0])] for row in html_rows(made.page, name)]
        assert len(shown) == len(wanted), name
        for c in range(len(wanted[0])):
            unit = unit_of([row[c] for row in shown])
            for row, want in zip(shown, wanted, strict=True):
                assert close(row[c], want[c], unit), (name, c, row[c], want[c])


def test_workbook_holds_the_json_to_full_precision_as_numbers(made):
    book = openpyxl.load_workbook(made.folder / "tables.xlsx")
    for name, wanted in expected(made).items():
        share = name in ("accuracy", "matrix_shares", "screening_classes")
        for row, want in zip(book[name].iter_rows(min_row=5), wanted, strict=True):
            for cell, value in zip(row[1:], want, strict=False):
                if value is None:
                    assert cell.value is None
                else:
                    assert isinstance(cell.value, int | float)
                    assert cell.value == pytest.approx(value / (100 if share else 1), rel=1e-9, abs=1e-12)


def test_pdf_text_holds_the_rows_that_the_page_prints(made):
    flat = re.sub(r"\s+", "", made.pdf_text)
    for name, wanted in expected(made).items():
        for row in html_rows(made.page, name):
            numbers = "".join(row[1 : 1 + len(wanted[0])])
            assert re.sub(r"\s+", "", numbers) in flat, (name, row)


def test_pdf_is_tagged_and_has_outline_title_and_language(made):
    reader = pypdf.PdfReader(made.folder / "report.pdf")
    root = reader.trailer["/Root"]
    assert root["/MarkInfo"]["/Marked"]
    assert "/StructTreeRoot" in root
    assert root["/Lang"] == "en"
    assert reader.metadata.title and reader.metadata.author == "Land survey desk (invented)"
    outline = [entry.title for part in reader.outline if isinstance(part, list) for entry in part
               if not isinstance(entry, list)]  # fmt: skip
    assert {"How sure are you?", "Limits and cautions"} <= set(outline)


def test_pdf_claims_the_accessibility_standard_where_fonts_allow(all_made):
    # ISO 14289-1 files say so in their XMP metadata; the typesetter checks what it can before it writes that.
    metadata = pypdf.PdfReader(all_made["change"].folder / "report.pdf").trailer["/Root"]["/Metadata"].get_data()
    assert re.search(rb"pdfuaid:part[^0-9]*1", metadata)


def test_page_is_one_file_that_asks_for_nothing(made):
    assert not re.search(r'(?:src|href)="(?!data:|#)', made.page)
    assert "@import" not in made.page
    assert not re.search(r"url\((?!data:)", made.page)
    assert (made.folder / "report.html").stat().st_size < 15e6


def test_same_facts_give_the_same_bytes(all_made, tmp_path):
    made = all_made["change"]
    project = made.folder.parents[1]
    copy = tmp_path / "again"
    shutil.copytree(project, copy)
    write_report(gather_facts(load_project(copy), copy / "outputs"), copy / "outputs" / "report")
    for name in ("report.html", "report.pdf", "tables.xlsx", "manifest.json"):
        assert (copy / "outputs" / "report" / name).read_bytes() == (made.folder / name).read_bytes(), name


def test_published_worked_example_reads_as_printed(all_made):
    # Olofsson et al. 2014, Remote Sensing of Environment 148, section 5 (from memory): overall 0.95 +- 0.02; areas
    # 21 158 +- 6 158, 11 686 +- 3 756, 285 770 +- 15 510, 581 386 +- 16 282 ha.
    page = all_made["change"].page
    answer = re.search(r'<p class="lead">(.*?)</p>', page, re.S).group(1).replace("\u202f", " ").replace("\u00a0", " ")
    assert "<strong>95 %</strong>" in answer and "93 %" in answer and "96 %" in answer
    assert "581 000 ± 16 000 ha" in answer
    assert "11 700 ± 3 800 ha" in answer
    rows = [[cell.replace("\u202f", " ") for cell in row] for row in html_rows(page, "glance")]
    assert [row[1:3] for row in rows] == [
        ["21 200", "6 200"], ["11 700", "3 800"], ["285 800", "15 500"], ["581 400", "16 300"]
    ]  # fmt: skip


def test_hostile_class_names_are_text_in_every_form(all_made):
    folder, page = all_made["many"].folder, all_made["many"].page
    assert "<script>alert" not in page
    assert [row[0] for row in html_rows(page, "areas")][: len(HOSTILE)] == list(HOSTILE)
    book = openpyxl.load_workbook(folder / "tables.xlsx")
    cells = [row[0] for row in book["areas"].iter_rows(min_row=5)][: len(HOSTILE)]
    assert [(cell.value, cell.data_type) for cell in cells] == [(name, "s") for name in HOSTILE]
    text = all_made["many"].pdf_text
    for name in ("<script>alert(1)</script>", "=1+1", "Wald & Wiese", "*stars*", "#set $x$"):
        assert name in text
