"""Properties for arbitrary input: only errors of ours ever come out, and what is accepted gives consistent results.

Each is a strategy of hypothesis and a check. `test_fuzz.py` runs few examples of each; `python tests/fuzz.py` as many as
there is time for.
"""

from __future__ import annotations

import copy
import json
import math
import shutil
import sqlite3
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np
from hypothesis import strategies as st
from interpret_projects import drawn_project
from small_project import CRS, NAMES, PROJECT, make_small_project

from classify.assessment import AssessmentOptions, assess, assess_project, write_assessment
from classify.assessment.drawn_sample import read_drawn
from classify.checking import check_project
from classify.errors import LandassayError
from classify.features.formula import FUNCTIONS, parse_formula
from classify.interpret.export import export_labels
from classify.interpret.journal import Journal, Label
from classify.interpret.session import Session
from classify.models import load_model
from classify.raster.grid import Grid
from classify.raster.scene import open_scene
from classify.report import gather_facts
from classify.settings import load_project
from classify.tables import read_table
from classify.training.polygons import read_polygons
from classify.workflow import Job, run, status

# --- what strangers write -------------------------------------------------------------------------------------------

TEXTS = [
    "",
    " ",
    "Water",
    "water ",
    "=1+1",
    "+1",
    "-1",
    "@x",
    "<script>alert(1)</script>",
    "</script>",
    "#eval(1)",
    "a&b",
    "../x",
    "..\\x",
    "/etc/passwd",
    "CON",
    "a/b",
    "\x00",
    "\x1b[2J",
    "\u202eretaW",
    "x" * 3000,
    "١٢",
    "1e400",
    "nan",
    "inf",
    "1e-400",
    "999999999999999999999",
    "-0",
    "0x10",
    "1_000",
    "True",
    "None",
    "{}",
    "[]",
    '"',
    "'",
    ",",
    ";",
    "\n",
    "\r\n",
    "\ufeff",
    "Ü",
    "ü",
    "🛰",
    "é",
    "http://169.254.169.254/",
    "/vsicurl/http://x/",
    "NaN",
    "1,5",
    "𝟙",
    "ﬁ",
    "İ",
    "ß",
]
NUMBERS = [0, 1, -1, 2, 5, 255, 256, 2**31, 2**63, -(2**63) - 1, 10**30, 0.5, -0.5, 1e-300, 1e300, 1e308, 5e-324]
JSONS = st.one_of(
    st.none(),
    st.booleans(),
    st.sampled_from(NUMBERS),
    st.sampled_from(TEXTS),
    st.just([]),
    st.just({}),
    st.lists(st.sampled_from([*NUMBERS, *TEXTS]), max_size=3),
    st.integers(),
    st.text(max_size=8),
    st.floats(allow_nan=False, allow_infinity=False),
    st.dictionaries(st.sampled_from(TEXTS), st.integers(), max_size=2),
)
CHANGES = st.lists(
    st.tuples(st.floats(0, 1, exclude_max=True), st.sampled_from(["replace", "replace", "remove", "repeat"]), JSONS),
    min_size=1,
    max_size=3,
)


def places(part: Any) -> Iterator[tuple[Any, Any]]:
    """Every (container, key) of plain data."""
    for key in part if isinstance(part, dict) else range(len(part)) if isinstance(part, list) else ():
        yield part, key
        yield from places(part[key])


def changed(base: Any, changes: list[tuple[float, str, Any]]) -> Any:
    """A copy of plain data with values replaced, removed or repeated at places given as shares of all places."""
    held = copy.deepcopy(base)
    for share, kind, value in changes:
        found = list(places(held))
        if not found:
            break
        inside, key = found[int(share * len(found))]
        if kind == "replace":
            inside[key] = value
        elif kind == "remove":
            del inside[key]
        elif isinstance(inside, list):
            inside.insert(key, copy.deepcopy(inside[key]))
        else:
            inside[str(value)[:40]] = copy.deepcopy(inside[key])
    return held


# --- the world in which it is read ----------------------------------------------------------------------------------


@dataclass
class World:
    """A folder with a miniature project, one after a whole run, and one whose sample is drawn. Made when asked for."""

    folder: Path
    seen: dict[str, int] = field(default_factory=dict)

    def count(self, what: str) -> None:
        self.seen[what] = self.seen.get(what, 0) + 1

    @cached_property
    def small(self) -> Path:
        return make_small_project(self.folder / "small")

    @cached_property
    def grid(self) -> Grid:
        project = load_project(self.small)
        return open_scene(project.scene, project).grid

    @cached_property
    def finished(self) -> Path:
        folder = make_small_project(self.folder / "finished")
        run(Job(load_project(folder), jobs=1))
        return folder

    @cached_property
    def drawn(self) -> Path:
        folder = drawn_project(self.folder / "drawn")
        journal = Journal(folder / "outputs" / "sample" / "labels.sqlite", "Ada")
        journal.write_all([(i, Label(NAMES[i % 3])) for i in range(1, 41)])
        journal.close()
        return folder

    @cached_property
    def texts(self) -> dict[Path, str]:
        """Documents as they were, read once."""
        return {}

    def document(self, path: Path) -> Any:
        return json.loads(self.texts.setdefault(path, path.read_text()))


def ours(work: Callable[[], Any]) -> Any:
    """What the work gives, or None where it ends in an error of ours, which must be fit to be shown."""
    try:
        return work()
    except LandassayError as error:
        assert all(problem.what for problem in error.problems)
        assert len(str(error)) < 100_000
        return None


# --- project files --------------------------------------------------------------------------------------------------

VALUES = [
    '""',
    '"x"',
    "0",
    "-1",
    "1e400",
    "nan",
    "inf",
    "9" * 30,
    "9" * 5000,
    "[]",
    "{}",
    "[1, 'a']",
    "true",
    "2026-01-01",
    "'''a\nb'''",
    '"\\u0000"',
    '"\\u001b[2J"',
    '"../../../etc/passwd"',
    '"/etc/passwd"',
    '"http://169.254.169.254/a.tif"',
    '"a/b"',
    '"\\u202e"',
    '"' + "x" * 5000 + '"',
    "[" * 3000,
    '"=1+1"',
    '"<script>"',
    "{ file = 3 }",
    "0x7fffffffffffffffffff",
    "1_0",
    "12:00:00",
    '"bands.tif"',
    '"mask.tif"',
    '"training.gpkg"',
    '"reference.gpkg"',
    '"project.toml"',
    '"."',
    '"nir"',
    '["ndvi", "ndvi"]',
    "0.5",
    "3",
]
KEYS = [
    "grid",
    "sensor",
    "scale",
    "offset",
    "nodata",
    "dates",
    "ancillary",
    "composite",
    "resampling",
    "layer",
    "unit",
    "mmu",
    "inset_m",
    "formulas",
    "trees",
    "kind",
    "folds",
    "block_m",
    "tune",
    "interval",
    "confidence",
    "design",
    "evidence",
    "merge",
    "logo",
    "strata",
    "x y",
    "file",
    "band",
    "title",
    "name",
    "code",
    "material",
    "materials",
]
EDITS = st.lists(
    st.tuples(
        st.floats(0, 1, exclude_max=True),
        st.sampled_from(["value", "value", "value", "insert", "remove", "repeat", "cut"]),
        st.sampled_from(KEYS),
        st.sampled_from(VALUES),
    ),
    min_size=1,
    max_size=4,
)


def edited(text: str, edits: list[tuple[float, str, str, str]]) -> str:
    lines = text.splitlines()
    for share, kind, key, value in edits:
        at = int(share * len(lines))
        if kind == "value" and "=" in lines[at]:
            lines[at] = f"{lines[at].partition('=')[0]}= {value}"
        elif kind == "insert":
            lines.insert(at, f'"{key}" = {value}' if " " in key else f"{key} = {value}")
        elif kind == "remove":
            del lines[at]
        elif kind == "repeat":
            lines.insert(int(float(len(key)) / 12 * len(lines)), lines[at])
        elif kind == "cut":
            lines[at] = lines[at][: len(key)]
        if not lines:
            break
    return "\n".join(lines)


def project_file(world: World, edits: list[tuple[float, str, str, str]]) -> None:
    """Loaded, it says the same when it is loaded again; and its project is checked without anything but our errors."""
    file = world.small / "project.toml"
    file.write_text(edited(PROJECT, edits), encoding="utf-8")
    project = ours(lambda: load_project(file))
    if project is None:
        return
    world.count("project files accepted")
    assert load_project(file) == project
    result = ours(lambda: check_project(project))
    if result is not None and not any(p.severity == "error" for p in result.problems):
        world.count("projects without an error")
    ours(lambda: status(project))


# --- tables ---------------------------------------------------------------------------------------------------------

STRATA = ["1", "2", "3", "Water", "", "1 "]
FIELDS = st.one_of(st.sampled_from([*NAMES, *STRATA]), st.sampled_from(TEXTS), st.sampled_from(list(map(str, NUMBERS))))
PLAIN = st.sampled_from(NAMES)


@st.composite
def sample_tables(draw: st.DrawFn) -> dict[str, Any]:
    """Points and strata: mostly sound, with a few fields, columns and bytes that are not."""
    count = draw(st.integers(1, 4))
    ids = [str(i + 1) for i in range(count)]
    strata = [["stratum", "area"], *([i, str(draw(st.sampled_from([0, 1, 7.5, 120, 1e-9, 1e12])))] for i in ids)]
    rows = draw(st.lists(st.tuples(st.sampled_from(ids), PLAIN, PLAIN), min_size=1, max_size=25))
    points = [["stratum", "map", "reference"], *map(list, rows)]
    for table in (points, strata):
        for _ in range(draw(st.integers(0, 2))):
            row = draw(st.integers(0, len(table) - 1))
            table[row][draw(st.integers(0, len(table[0]) - 1))] = draw(FIELDS)
    if extra := draw(st.sampled_from(["", "", "cluster", "region", "alternate", "id", "other_map", "map"])):
        points[0].append(extra)
        for row in points[1:]:
            row.append(draw(FIELDS))
    if draw(st.booleans()):
        strata[0].append(draw(st.sampled_from(["mapped_as", "clusters", "pixels"])))
        for row in strata[1:]:
            row.append(draw(FIELDS))
    noise = draw(st.one_of(st.just(None), st.tuples(st.floats(0, 1), st.binary(max_size=4))))
    options = {
        "evidence": draw(st.sampled_from(["probability sample", "probability sample", "purposive sample"])),
        "interval": draw(st.sampled_from(["automatic", "normal", "wilson", "student"])),
        "kind": draw(st.sampled_from([None, None, "simple random", "stratified", "systematic", "post-stratified"])),
    }
    return {
        "points": points,
        "strata": draw(st.sampled_from([strata, strata, None])),
        "noise": noise,
        "options": options,
    }


def tables(world: World, given: dict[str, Any]) -> None:
    """Accepted, areas sum to the total, shares lie within 0 and 1, and the written files hold finite numbers."""
    import csv

    paths = {}
    for name in ("points", "strata"):
        if given[name] is None:
            continue
        paths[name] = world.folder / f"{name}.csv"
        with paths[name].open("w", newline="", encoding="utf-8") as stream:
            csv.writer(stream).writerows(given[name])
    if given["noise"]:
        share, noise = given["noise"]
        raw = paths["points"].read_bytes()
        at = int(share * len(raw))
        paths["points"].write_bytes(raw[:at] + noise + raw[at + len(noise) :])

    def work() -> Any:
        strata = read_table(paths["strata"]) if "strata" in paths else None
        return assess(read_table(paths["points"]), strata, AssessmentOptions(**given["options"]))

    assessment = ours(work)
    if assessment is None:
        return
    world.count("tables accepted")
    content = assessment.to_json()
    json.dumps(content, allow_nan=False)
    accuracy = content["overall_accuracy"]["estimate"]
    assert accuracy is None or -1e-9 <= accuracy <= 1 + 1e-9
    areas = [area["estimate"]["estimate"] for area in content.get("areas") or []]
    if areas and all(area is not None for area in areas) and given["strata"] is not None:
        world.count("tables with areas")
        total = math.fsum(areas)
        assert math.isclose(total, math.fsum(s["area"] for s in content["strata"]), rel_tol=1e-6, abs_tol=1e-12), (
            content
        )
    write_assessment(assessment, world.folder / "assessed", inputs=[])
    shutil.rmtree(world.folder / "assessed")


# --- formulas -------------------------------------------------------------------------------------------------------

_LEAVES = st.sampled_from(
    ["nir", "red", "nir@2024", "0", "1", "2.5", "1e38", "1e-45", ".5", "pi", "__import__", "x.y", "0x1", "１"]
)
_FORMULAS = st.recursive(
    _LEAVES,
    lambda inner: st.one_of(
        st.tuples(
            inner, st.sampled_from(["+", "-", "*", "/", "^", "<", "==", " and ", " or ", "**", "//", "%"]), inner
        ).map("".join),
        st.tuples(st.sampled_from([*FUNCTIONS, "eval", "open"]), st.lists(inner, min_size=1, max_size=3)).map(
            lambda f: f"{f[0]}({', '.join(f[1])})"
        ),
        inner.map("({})".format),
        inner.map("-{}".format),
        inner.map("not {}".format),
    ),
    max_leaves=25,
)
FORMULAS = st.one_of(
    _FORMULAS,
    st.text(max_size=60),
    st.text("nir+-*/^()<>=!,.@ 019e", max_size=80),
    st.tuples(
        st.sampled_from(["(", "-", "not ", "abs(", "1+", "1^", "1<", "nir,", "9", " "]), st.integers(1, 6000)
    ).map(lambda f: f[0] * f[1] + "nir"),
)


def formula(world: World, text: str) -> None:
    """Read, it gives one finite or missing number a pixel, the same every time, and missing where a layer is."""
    found = ours(lambda: parse_formula(text))
    if found is None:
        return
    world.count("formulas accepted")
    numbers = np.array([0, 1, -1, 0.3, 1e-38, 3e38, -3e38, np.nan], dtype=np.float32)
    layers = {name: np.roll(numbers, i).reshape(2, 4) for i, name in enumerate(found.names)} or {
        "nir": numbers.reshape(2, 4)
    }
    with np.errstate(all="ignore"):
        value = found.evaluate(layers)
        again = parse_formula(text).evaluate(layers)
    assert value.dtype == np.float32 and value.shape == (2, 4) and not np.isinf(value).any()
    assert np.array_equal(value, again, equal_nan=True)
    if found.names:
        assert np.isnan(value[np.isnan(np.stack([layers[n] for n in found.names])).all(axis=0)]).all()
    dated = ours(lambda: found.on_date("2025"))
    assert dated is None or all("@" in name for name in dated.names)


# --- vector layers --------------------------------------------------------------------------------------------------

X, Y = 500_100.0, 4_199_900.0
_NUMBER = st.one_of(
    st.sampled_from([X, Y, X + 200, Y - 200, 0, 1e300, -1e300, 1e-300]), st.floats(X, X + 900), st.floats(Y - 700, Y)
)
_POINT = st.lists(_NUMBER, min_size=1, max_size=4)


@st.composite
def layers(draw: st.DrawFn) -> str:
    """GeoJSON of polygons of the project's CRS: sound squares, some spoiled."""

    def square(at: int) -> dict[str, Any]:
        x, y = X + at * 150, Y - at * 90
        ring = [[x, y], [x + 100, y], [x + 100, y - 80], [x, y - 80], [x, y]]
        return {"type": "Polygon", "coordinates": [ring]}

    features = [
        {"type": "Feature", "properties": {"cover": draw(PLAIN)}, "geometry": square(i)}
        for i in range(draw(st.integers(1, 4)))
    ]
    document = {
        "type": "FeatureCollection",
        "crs": {"type": "name", "properties": {"name": f"urn:ogc:def:crs:{CRS.replace(':', '::')}"}},
        "features": features,
    }
    kinds = ["Polygon", "MultiPolygon", "Point", "LineString", "GeometryCollection", "Curve", "MultiPoint"]
    if draw(st.booleans()):
        features[0]["geometry"]["type"] = draw(st.sampled_from(kinds))
    if draw(st.booleans()):
        features[0]["geometry"]["coordinates"] = draw(
            st.one_of(_POINT, st.lists(_POINT, max_size=5), st.lists(st.lists(_POINT, max_size=6), max_size=2))
        )
    document = changed(document, draw(st.one_of(st.just([]), CHANGES)))
    text = json.dumps(document)
    return draw(
        st.sampled_from([text, text, text.replace("100", "1e400"), text[: len(text) // 2], text.replace(":", "::", 1)])
    )


def vector(world: World, text: str) -> None:
    """Read as training polygons, each has a class of the project and a shape on the scene's grid."""
    project = load_project(world.finished)
    path = world.folder / "layer.geojson"
    path.write_text(text, encoding="utf-8", errors="surrogatepass")
    training = project.training.model_copy(update={"polygons": str(path)})
    polygons = ours(lambda: read_polygons(project.model_copy(update={"training": training}), world.grid))
    if polygons is None:
        return
    world.count("layers accepted")
    frame = polygons.frame
    assert len(frame) and frame.geometry.is_valid.all() and not frame.geometry.is_empty.any()
    assert np.isfinite(frame.total_bounds).all() and set(frame["code"]) <= {1, 2, 5}


FILES = ("training.gpkg", "reference.gpkg", "bands.tif", "mask.tif")


def binary_file(world: World, given: tuple[str, list[tuple[float, bytes]]]) -> None:
    """A file with some bytes overwritten is read, or refused; whatever it is."""
    name, noise = given
    path = world.small / name
    whole = world.texts.setdefault(path, path.read_bytes().hex())
    raw = bytearray(bytes.fromhex(whole))
    for share, new in noise:
        at = int(share**2 * len(raw))
        raw[at : at + len(new)] = new
    (world.small / "project.toml").write_text(PROJECT)
    path.write_bytes(raw)
    try:
        if ours(lambda: check_project(load_project(world.small))) is not None:
            world.count("damaged files read")
    finally:
        path.write_bytes(bytes.fromhex(whole))


BYTES = st.tuples(
    st.sampled_from(FILES),
    st.lists(st.tuples(st.floats(0, 1, exclude_max=True), st.binary(min_size=1, max_size=8)), min_size=1, max_size=4),
)

# --- records --------------------------------------------------------------------------------------------------------

CELLS = st.one_of(
    st.none(),
    st.sampled_from([*TEXTS, *NAMES, "high", "interpreter", "settling", "Ada"]),
    st.integers(-2, 60),
    st.sampled_from([2**63 - 1, -(2**63)]),
    st.floats(allow_nan=False),
    st.binary(max_size=5),
)
ROWS = st.lists(
    st.tuples(
        st.sampled_from(
            ["point", "role", "interpreter", "undoes", "label", "alternate", "confidence", "note", "written_at"]
        ),
        CELLS,
        st.integers(1, 40),
    ),
    min_size=1,
    max_size=6,
)
JOURNALS = st.tuples(ROWS, st.one_of(st.just(None), st.tuples(st.floats(0, 1), st.binary(min_size=1, max_size=16))))


def journal_file(world: World, given: tuple[list[tuple[str, Any, int]], tuple[float, bytes] | None]) -> None:
    """Entries that no page could have written: what is exported are the project's classes and nothing else."""
    rows, noise = given
    sample = world.drawn / "outputs" / "sample"
    path = sample / "labels.sqlite"
    whole = bytes.fromhex(world.texts.setdefault(path, path.read_bytes().hex()))
    for leftover in sample.glob("labels.sqlite-*"):
        leftover.unlink()
    path.write_bytes(whole)
    with sqlite3.connect(path) as db:
        db.execute("PRAGMA journal_mode = DELETE")
        for column, value, number in rows:
            try:
                db.execute(f"UPDATE entry SET {column} = ? WHERE number = ?", (value, number))
            except (sqlite3.Error, UnicodeEncodeError):
                continue
    db.close()
    if noise:
        raw = bytearray(path.read_bytes())
        at = int(noise[0] * len(raw))
        raw[at : at + len(noise[1])] = noise[1]
        path.write_bytes(raw)
    project = load_project(world.drawn)

    def work() -> Any:
        drawn, journal = read_drawn(sample), Journal(path, "Ada")
        try:
            session = Session(drawn, world.grid, project.classes, journal)
            overview = [session.overview(), *(session.said(i) for i in list(session.places)[:3])]
        finally:
            journal.close()
        json.dumps(overview, allow_nan=False)
        return export_labels(world.drawn / "outputs", list(NAMES))

    (sample / "reference.gpkg").unlink(missing_ok=True)
    export = ours(work)
    if export is not None:
        world.count("journals accepted")
        assert sum(export.counts.values()) == 40


def _spoil(world: World, path: Path, changes: list[tuple[float, str, Any]]) -> None:
    path.write_text(json.dumps(changed(world.document(path), changes)), encoding="utf-8", errors="surrogatepass")


def design_file(world: World, changes: list[tuple[float, str, Any]]) -> None:
    """A design that `draw` did not write: refused, or an assessment of finite numbers comes out."""
    sample = world.drawn / "outputs" / "sample"
    path = sample / "design.json"
    _spoil(world, path, changes)
    try:
        project = load_project(world.drawn)
        reference = project.reference.model_copy(
            update={"points": "reference.gpkg", "design": "outputs/sample/design.json"}
        )
        drawn = ours(lambda: read_drawn(sample))
        if drawn is not None:
            journal = Journal(sample / "labels.sqlite", "Ada")
            try:
                ours(lambda: Session(drawn, world.grid, project.classes, journal).overview())
            finally:
                journal.close()
        found = ours(
            lambda: assess_project(project.model_copy(update={"reference": reference}), world.drawn / "outputs")
        )
        if found is not None:
            world.count("designs accepted")
            json.dumps(found.to_json(), allow_nan=False)
    finally:
        path.write_text(world.texts[path])


def model_card(world: World, changes: list[tuple[float, str, Any]]) -> None:
    """A card that was changed: refused, or the model gives codes of its classes and probabilities."""
    path = world.finished / "outputs" / "model" / "model.json"
    _spoil(world, path, changes)
    try:
        model = ours(lambda: load_model(path.parent))
        if model is not None:
            world.count("cards accepted")
            features = np.random.default_rng(1).uniform(0, 0.5, (20, len(model.card["features"]))).astype(np.float32)
            codes, shares = model.predict_both(features)
            assert set(codes) <= set(model.class_codes) and np.isfinite(shares).all()
            assert len(model.class_names) == len(model.class_codes)
        ours(lambda: status(load_project(world.finished)))
    finally:
        path.write_text(world.texts[path])


RESULTS = ("run.json", "assessment/assessment.json", "model/model.json")


def result_files(world: World, given: tuple[str, list[tuple[float, str, Any]]]) -> None:
    """Records of earlier stages that were changed: the stages and the report's facts are told, or it is refused."""
    name, changes = given
    path = world.finished / "outputs" / name
    _spoil(world, path, changes)
    try:
        project = load_project(world.finished)
        ours(lambda: status(project))
        if ours(lambda: gather_facts(project, world.finished / "outputs")) is not None:
            world.count("results gathered")
    finally:
        path.write_text(world.texts[path])


@dataclass(frozen=True)
class Property:
    """strategy: of inputs. check: takes the world and an input. quick: examples in the suite."""

    strategy: st.SearchStrategy[Any]
    check: Callable[[World, Any], None]
    quick: int


PROPERTIES = {
    "project files": Property(EDITS, project_file, 40),
    "tables": Property(sample_tables(), tables, 60),
    "formulas": Property(FORMULAS, formula, 150),
    "vector layers": Property(layers(), vector, 40),
    "damaged files": Property(BYTES, binary_file, 15),
    "journals": Property(JOURNALS, journal_file, 20),
    "designs": Property(CHANGES, design_file, 30),
    "model cards": Property(CHANGES, model_card, 40),
    "results": Property(st.tuples(st.sampled_from(RESULTS), CHANGES), result_files, 40),
}
