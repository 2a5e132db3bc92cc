"""Properties for arbitrary input: only errors of ours ever come out, and what is accepted gives consistent results.

Each is a strategy of hypothesis and a check. `test_fuzz.py` runs few examples of each; `python tests/fuzz.py` as many
as there is time for.
"""

from __future__ import annotations

import json
import math
import shutil
import sqlite3
from collections.abc import Callable
from dataclasses import dataclass, field
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np
from fuzz_values import BYTES, CHANGES, EDITS, FORMULAS, JOURNALS, changed, edited, layers, sample_tables
from hypothesis import strategies as st
from interpret_projects import drawn_project
from small_project import NAMES, PROJECT, make_small_project

from classify.assessment import AssessmentOptions, assess, assess_project, write_assessment
from classify.assessment.drawn_sample import read_drawn
from classify.checking import check_project
from classify.errors import LandassayError
from classify.features.formula import parse_formula
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

# --- the world in which it is read ----------------------------------------------------------------------------------


@dataclass
class World:
    """A folder with a miniature project, one after a whole run, and one whose sample is drawn. Made when asked for."""

    folder: Path
    seen: dict[str, int] = field(default_factory=dict)
    sample: dict[Path, bytes] = field(default_factory=dict)

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
        export_labels(folder / "outputs", list(NAMES))
        sample = folder / "outputs" / "sample"
        self.sample = {path: path.read_bytes() for path in sample.iterdir() if path.is_file()}
        return folder

    def put_back(self) -> None:
        """The drawn sample as it was, and nothing beside it."""
        for path in (self.drawn / "outputs" / "sample").iterdir():
            if path.is_file() and path not in self.sample:
                path.unlink()
        for path, content in self.sample.items():
            path.write_bytes(content)

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
    if found.names and "where" not in text:  # which need not take the value of a layer
        assert np.isnan(value[np.isnan(np.stack([layers[n] for n in found.names])).all(axis=0)]).all()
    dated = ours(lambda: found.on_date("2025"))
    assert dated is None or all("@" in name for name in dated.names)


# --- vector layers --------------------------------------------------------------------------------------------------


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


# --- records --------------------------------------------------------------------------------------------------------


def journal_file(world: World, given: tuple[list[tuple[str, Any, int]], tuple[float, bytes] | None]) -> None:
    """Entries that no page could have written: what is exported are the project's classes and nothing else."""
    rows, noise = given
    sample = world.drawn / "outputs" / "sample"
    path = sample / "labels.sqlite"
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

    try:
        export = ours(work)
    finally:
        world.put_back()
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
    "project files": Property(EDITS, project_file, 25),
    "tables": Property(sample_tables(), tables, 40),
    "formulas": Property(FORMULAS, formula, 150),
    "vector layers": Property(layers(), vector, 20),
    "damaged files": Property(BYTES, binary_file, 8),
    "journals": Property(JOURNALS, journal_file, 8),
    "designs": Property(CHANGES, design_file, 15),
    "model cards": Property(CHANGES, model_card, 20),
    "results": Property(st.tuples(st.sampled_from(RESULTS), CHANGES), result_files, 15),
}
