"""The page in a real browser: labelled by keyboard alone, killed midway, two tabs, disputes, contrast, speed."""

from __future__ import annotations

import os
import shutil
import signal
import sqlite3
from collections.abc import Iterator
from pathlib import Path

import geopandas
import pytest
from click.testing import CliRunner
from interpret_projects import drawn_project, served
from small_project import read_json

from classify.cli.main import cli
from classify.interpret.journal import Journal, Label

sync_api = pytest.importorskip("playwright.sync_api")
CHROMIUM = os.environ.get("CHROMIUM") or shutil.which("chromium") or shutil.which("chromium-browser")
ARGS = ["--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run", "--disable-background-networking",
        "--disable-component-update", "--disable-sync"]  # fmt: skip

pytestmark = [pytest.mark.browser, pytest.mark.skipif(CHROMIUM is None, reason="no Chromium on this machine")]


@pytest.fixture(scope="module")
def browser() -> Iterator[sync_api.Browser]:
    with sync_api.sync_playwright() as playwright:
        chromium = playwright.chromium.launch(executable_path=CHROMIUM, args=ARGS)
        yield chromium
        chromium.close()


@pytest.fixture
def page(browser: sync_api.Browser) -> Iterator[sync_api.Page]:
    with browser.new_context(viewport={"width": 1366, "height": 680}) as context:
        page = context.new_page()
        problems: list[str] = []
        page.on("pageerror", lambda error: problems.append(str(error)))
        page.on("console", lambda m: problems.append(m.text) if "Content Security Policy" in m.text else None)
        yield page
        assert not problems


@pytest.fixture
def project(tmp_path: Path) -> Path:
    return drawn_project(tmp_path / "miniature")


def ready(page: sync_api.Page) -> int:
    page.wait_for_selector("body[data-ready]")
    return int(page.get_attribute("body", "data-ready"))


def label(page: sync_api.Page, *keys: str) -> int:
    """Press keys and save; returns the point once the page has said that it is saved."""
    point = ready(page)
    for key in keys:
        page.keyboard.press(key)
    page.keyboard.press(" ")
    page.wait_for_selector(f"body[data-saved='{point}']:not([data-ready='{point}'])")
    return point


def kept(project: Path, name: str = "Ada") -> dict[int, Label]:
    journal = Journal(project / "outputs" / "sample" / "labels.sqlite", name)
    try:
        return {i: s.label for i, s in journal.standing().items() if s.label}
    finally:
        journal.close()


def test_twenty_points_by_keyboard_with_the_server_killed_midway(project: Path, page: sync_api.Page):
    said: dict[int, Label] = {}
    with served(project, "--interpreter", "Ada") as (process, address):
        page.goto(address)
        for n in range(10):
            code = "123"[n % 3]
            said[label(page, code)] = Label(["Pasture", "Bare soil", "Water"][n % 3])
        waiting = ready(page)
        process.send_signal(signal.SIGKILL)
        process.wait()
        page.keyboard.press("2")
        page.keyboard.press(" ")
        page.wait_for_selector("#status.bad")
        assert "Not saved" in page.inner_text("#status")
    assert kept(project) == said
    with served(project, "--interpreter", "Ada") as (_, address):
        page.goto(address)
        assert ready(page) == waiting
        assert page.inner_text("#count") == "10 of 40"
        for n in range(8):
            said[label(page, "321"[n % 3])] = Label(["Water", "Bare soil", "Pasture"][n % 3])
        said[label(page, "0")] = Label(None)
        page.keyboard.press("n")
        said[label(page, *"half", "Escape", "1", "Shift+3", "e")] = Label("Pasture", "Water", "low", "half")
        assert page.inner_text("#count") == "20 of 40"
    assert len(said) == 20
    assert kept(project) == said
    with sqlite3.connect(project / "outputs" / "sample" / "labels.sqlite") as db:
        assert db.execute("PRAGMA integrity_check").fetchone() == ("ok",)
        assert db.execute("SELECT COUNT(*) FROM entry").fetchone() == (20,)


def test_undo_and_coming_back(project: Path, page: sync_api.Page):
    with served(project, "--interpreter", "Ada") as (_, address):
        page.goto(address)
        first, second = label(page, "1"), label(page, "2")
        page.keyboard.press("z")
        page.wait_for_selector(f"body[data-ready='{second}']")
        assert set(kept(project)) == {first}
        assert page.get_attribute("#classes button[data-name='Bare soil']", "aria-checked") == "false"
        page.keyboard.press(",")
        page.wait_for_selector(f"body[data-ready='{first}']")
        assert page.get_attribute("#classes button[data-name='Pasture']", "aria-checked") == "true"


def test_two_tabs_do_not_overwrite_each_other(project: Path, page: sync_api.Page):
    with served(project, "--interpreter", "Ada") as (_, address):
        page.goto(address)
        point = ready(page)
        other = page.context.new_page()
        other.goto(address.split("?")[0])
        assert ready(other) == point
        label(other, "3")
        page.keyboard.press("1")
        page.keyboard.press(" ")
        page.wait_for_selector("#status.bad")
        assert "labelled Water elsewhere" in page.inner_text("#status")
        assert kept(project)[point] == Label("Water")
        page.keyboard.press(" ")
        page.wait_for_selector(f"body[data-saved='{point}']")
        assert kept(project)[point] == Label("Pasture")


def test_disputes_are_settled_and_exported_with_both_originals(project: Path, page: sync_api.Page):
    path = project / "outputs" / "sample" / "labels.sqlite"
    for name, other in (("Ada", "Pasture"), ("Bo", "Water")):
        journal = Journal(path, name)
        journal.write_all((i, Label(other if i in (4, 9) else "Bare soil")) for i in range(1, 41))
        journal.close()
    with served(project, "--interpreter", "Cy", "--settle") as (process, address):
        page.goto(address)
        ready(page)
        assert page.inner_text("#count") == "0 of 2"
        assert page.inner_text("#originals").split("\n")[0].startswith("Ada: Pasture (high)")
        point = label(page, "3")
        page.keyboard.press("2")
        page.keyboard.press(" ")
        page.wait_for_selector("#status:has-text('All points are labelled')")
        process.send_signal(signal.SIGINT)
        process.wait(10)
    out = geopandas.read_file(project / "outputs" / "sample" / "reference.gpkg").set_index("id")
    assert out.loc[point, "observed"] == "Water" and out.loc[point, "status"] == "settled"
    assert (out.loc[point, "observed_ada"], out.loc[point, "observed_bo"]) == ("Pasture", "Water")
    assert list(out["status"]).count("labelled") == 38
    text = (project / "project.toml").read_text().replace("reference.gpkg", "outputs/sample/reference.gpkg")
    (project / "project.toml").write_text(text)
    (project / "outputs" / "map" / "areas.csv").write_text(
        "code,name,pixels,area_m2\n1,Pasture,5000,500000\n2,Bare soil,5000,500000\n5,Water,1000,100000\n"
    )
    done = CliRunner().invoke(cli, ["assess", "--project", str(project), "--quiet", "--force"], catch_exceptions=False)
    assert done.exit_code == 0
    found = read_json(project / "outputs" / "assessment" / "assessment.json")
    assert sum(map(sum, found["matrix_counts"])) == 40
    assert found["design"]["kind"] == "stratified"


def test_everything_can_be_reached_with_tab_and_read(project: Path, page: sync_api.Page):
    with served(project, "--interpreter", "Ada") as (_, address):
        page.goto(address)
        ready(page)
        page.wait_for_timeout(200)
        reached = []
        for _ in range(40):
            page.keyboard.press("Tab")
            focused = page.evaluate("() => [document.activeElement.id, document.activeElement.innerText || '']")
            reached.append(focused[0] or focused[1])
        wanted = {"help-open", "in", "centre", "low", "high", "local", "note", "back", "forward", "undo"}
        assert wanted <= set(reached)
        assert any("Water" in text for text in reached)
        page.keyboard.press("1")
        assert page.evaluate(_CONTRAST) == []
        bottom = page.evaluate("() => document.getElementById('status').getBoundingClientRect().bottom")
        assert bottom <= 680


# Contrast of every text with what is behind it, by WCAG 2.2 relative luminance: at least 4.5, or 3 for large text.
# Disabled controls are exempt.
_CONTRAST = """() => {
  const parse = (c) => { const m = c.match(/[\\d.]+/g).map(Number); return m.length < 4 ? [...m, 1] : m; };
  const linear = (v) => v <= 0.04045 ? v / 12.92 : ((v + 0.055) / 1.055) ** 2.4;
  const lum = (c) => c.slice(0, 3).map((v) => linear(v / 255))
    .reduce((s, v, i) => s + v * [0.2126, 0.7152, 0.0722][i], 0);
  const mix = (a, b) => a.slice(0, 3).map((v, i) => v * a[3] + b[i] * (1 - a[3]));
  const behind = (e) => { for (; e; e = e.parentElement) { const c = parse(getComputedStyle(e).backgroundColor);
    if (c[3] === 1) return c; } return [255, 255, 255, 1]; };
  const poor = [];
  for (const e of document.querySelectorAll('body *')) {
    const text = [...e.childNodes].some((n) => n.nodeType === 3 && n.textContent.trim());
    if (!text || !e.getClientRects().length || e.closest(':disabled, dialog, svg')) continue;
    const style = getComputedStyle(e), ground = behind(e), ink = parse(style.color);
    ink[3] *= Number(style.opacity);
    const [a, b] = [lum(mix(ink, ground)), lum(ground)];
    const ratio = (Math.max(a, b) + 0.05) / (Math.min(a, b) + 0.05);
    if (ratio < (parseFloat(style.fontSize) >= 24 ? 3 : 4.5)) poor.push(`${e.textContent} ${ratio.toFixed(2)}`);
  }
  return poor;
}"""
