"""The page in a real Chromium: quiet, self-contained, accessible, and a viewer that does what it says."""

from __future__ import annotations

import shutil
import statistics
from pathlib import Path

import pytest
from report_projects import change_project, many_classes_project, screening_project

from classify.report import gather_facts, write_report

playwright = pytest.importorskip("playwright.sync_api")
NAMES = ("chromium", "chromium-browser", "google-chrome")
CHROMIUM = next((path for name in NAMES if (path := shutil.which(name))), None)
pytestmark = [pytest.mark.browser, pytest.mark.skipif(CHROMIUM is None, reason="no Chromium on this machine")]
AXE = Path(__file__).parent / "data" / "axe.min.js"
MAKERS = {"change": change_project, "many": many_classes_project, "screening": screening_project}


@pytest.fixture(scope="module")
def chromium():
    with playwright.sync_playwright() as p:
        browser = p.chromium.launch(executable_path=CHROMIUM, args=["--no-sandbox", "--disable-gpu"])
        yield browser
        browser.close()


@pytest.fixture(scope="module")
def pages(tmp_path_factory) -> dict[str, Path]:
    result = {}
    for name, make in MAKERS.items():
        folder = tmp_path_factory.mktemp(name)
        result[name] = write_report(gather_facts(make(folder), folder / "outputs"), folder / "outputs" / "report")[0]
    return result


@pytest.fixture
def opened(chromium, pages):
    """Opens a page; afterwards nothing may have been logged and nothing asked for outside the file."""
    context = chromium.new_context(viewport={"width": 1200, "height": 900})
    heard: list[str] = []

    def open_page(name: str, *, script: bool = True):
        nonlocal context
        if not script:
            context = chromium.new_context(java_script_enabled=False)
        page = context.new_page()
        page.on("console", lambda message: heard.append(message.text))
        page.on("pageerror", lambda error: heard.append(str(error)))
        own = pages[name].as_uri()
        page.on("request", lambda r: None if r.url == own or r.url.startswith("data:") else heard.append(r.url))
        page.goto(own)
        return page

    yield open_page
    context.close()
    assert heard == []


@pytest.mark.parametrize("name", list(MAKERS))
def test_page_is_quiet_and_accessible(opened, name):
    page = opened(name)
    assert page.locator("h1").count() == 1
    assert page.locator("figure svg").count() >= 3
    page.evaluate(AXE.read_text("utf-8"))
    # Contrast is the slow rule; the 25-class page has the same styles on far more cells.
    options = {"resultTypes": ["violations"], "rules": {"color-contrast": {"enabled": name != "many"}}}
    found = page.evaluate("options => axe.run(document, options)", options)["violations"]
    serious = [v for v in found if v["impact"] in ("serious", "critical")]
    assert [(v["id"], [node["target"] for node in v["nodes"]][:3]) for v in serious] == []


def test_without_script_the_static_picture_and_tables_stand(opened):
    page = opened("change", script=False)
    assert page.locator("#figure-map svg image").is_visible()
    assert page.locator("#table-matrix_counts").is_visible()
    assert not page.locator("#explorer").is_visible()


def test_layers_toggle_and_fade(opened):
    page = opened("change")
    cover, confidence = (page.locator(f"[data-control={k}] input[type=checkbox]") for k in ("cover", "confidence"))
    opacity = "k => document.querySelector(`img[data-layer=${k}]`).style.opacity"
    assert page.evaluate(opacity, "cover") == "1" and page.evaluate(opacity, "confidence") == "0"
    cover.uncheck()
    confidence.check()
    page.locator("[data-control=confidence] input[type=range]").fill("40")
    assert page.evaluate(opacity, "cover") == "0" and page.evaluate(opacity, "confidence") == "0.4"
    sizes = page.evaluate("[...document.querySelectorAll('.sheet img')].map(i => i.naturalWidth)")
    assert sizes == [420, 420]


def test_matrix_cell_selects_its_points(opened):
    page = opened("change")
    cell = page.locator("#table-matrix_counts tbody tr").nth(1).locator("button.cell").nth(2)
    # Row "Forest gain": 0 55 8 12 (Olofsson et al. 2014, from memory); the zero has no button.
    assert cell.inner_text() == "12"
    cell.click()
    assert cell.get_attribute("aria-pressed") == "true"
    assert page.locator(".chosen").inner_text() == "12 points mapped as Forest gain, in fact Stable non-forest:"
    assert len(page.locator(".selection .points").inner_text().split(", ")) == 12
    page.locator("[data-clear]").click()
    assert cell.get_attribute("aria-pressed") == "false"


def test_buttons_keys_and_drag_move_the_map(opened):
    page = opened("change")
    stage = page.locator(".stage")
    stage.scroll_into_view_if_needed()
    shape = """() => new Promise(done => requestAnimationFrame(() => requestAnimationFrame(() => {
      const m = new DOMMatrix(document.querySelector(".sheet").style.transform);
      done([m.a, m.e, m.f]);
    })))"""
    page.locator("[data-zoom=in]").click()
    assert page.evaluate(shape)[0] == pytest.approx(1.5)
    stage.focus()
    page.keyboard.press("+")
    zoom, x, y = page.evaluate(shape)
    assert zoom == pytest.approx(2.25)
    box = stage.bounding_box()
    page.mouse.move(box["x"] + 300, box["y"] + 200)
    page.mouse.down()
    page.mouse.move(box["x"] + 260, box["y"] + 170)
    page.mouse.up()
    _, x2, y2 = page.evaluate(shape)
    assert (x2 - x, y2 - y) == pytest.approx((-40, -30))
    page.keyboard.press("0")
    assert page.evaluate(shape) == pytest.approx([1, 0, 0])


def test_a_pan_is_answered_at_once(opened):
    page = opened("change")
    page.locator("[data-zoom=in]").click()
    times = page.evaluate("""async () => {
      const stage = document.querySelector(".stage"), times = [];
      for (let i = 0; i < 12; i++) {
        const start = performance.now();
        stage.dispatchEvent(new KeyboardEvent("keydown", { key: i % 2 ? "ArrowLeft" : "ArrowRight" }));
        await new Promise(done => requestAnimationFrame(() => setTimeout(done)));
        times.push(performance.now() - start);
      }
      return times;
    }""")
    # 50 ms is the promise on an idle machine; a busy one may take longer for a single frame.
    assert statistics.median(times) < 100, times


def test_hostile_names_run_nothing(opened):
    page = opened("many")
    assert page.evaluate("document.querySelectorAll('script').length") == 2
    assert page.locator("#table-areas tbody th bdi").first.inner_text() == "<script>alert(1)</script>"
