"""A project's reference sample read against a map: classes at points, strata by recorded design or by map class."""

from __future__ import annotations

import json
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import pytest
import rasterio
from click.testing import CliRunner
from small_project import CRS, HEIGHT, NAMES, PROJECT, TRANSFORM, WIDTH, make_small_project, truth_indices

from classify.assessment import AssessmentOptions, assess, assess_project, compare_project, read_reference
from classify.assessment.reference import codes_at
from classify.cli.main import cli
from classify.errors import DataError, SampleError
from classify.settings import load_project

CODES = np.array([1, 2, 5], dtype=np.uint8)


def write_map(path: Path, codes: np.ndarray, *, crs=CRS, transform=TRANSFORM) -> None:
    path.parent.mkdir(parents=True, exist_ok=True)
    with rasterio.open(
        path, "w", driver="GTiff", count=1, height=codes.shape[0], width=codes.shape[1], dtype="uint8", crs=crs,
        transform=transform, nodata=0, tiled=True, blockxsize=16, blockysize=16,
    ) as target:  # fmt: skip
        target.write(codes, 1)


def mapped_codes(seed: int, errors: float) -> np.ndarray:
    """The truth with some of its pixels wrong."""
    random = np.random.default_rng(seed)
    truth = truth_indices()
    wrong = random.random(truth.shape) < errors
    return CODES[np.where(wrong, (truth + 1) % 3, truth)]


@pytest.fixture
def project_folder(tmp_path):
    """A miniature project with a map in place, as if it had been classified."""
    folder = make_small_project(tmp_path / "p")
    codes = mapped_codes(5, 0.1)
    codes[70:80, 90:105] = 0
    write_map(folder / "outputs/map/cover.tif", codes)
    pixels = [int((codes == code).sum()) for code in CODES]
    pd.DataFrame({
        "code": CODES, "name": NAMES, "pixels": pixels, "area_m2": [100.0 * n for n in pixels],
        "area": [0.01 * n for n in pixels], "unit": "ha",
    }).to_csv(folder / "outputs/map/areas.csv", index=False)  # fmt: skip
    return folder


def points_of(folder: Path) -> gpd.GeoDataFrame:
    return gpd.read_file(folder / "reference.gpkg")


def with_classes(folder: Path) -> pd.DataFrame:
    """Points with the class of the map at them, by plain indexing."""
    frame = points_of(folder)
    with rasterio.open(folder / "outputs/map/cover.tif") as source:
        codes = source.read(1)
    cols = ((frame.geometry.x - TRANSFORM.c) // TRANSFORM.a).astype(int)
    rows = ((TRANSFORM.f - frame.geometry.y) // -TRANSFORM.e).astype(int)
    names = {0: "", 1: NAMES[0], 2: NAMES[1], 5: NAMES[2]}
    return frame.assign(map=[names[int(codes[r, c])] for r, c in zip(rows, cols, strict=True)])


def rewrite(folder: Path, frame: gpd.GeoDataFrame, more: str = "") -> None:
    (folder / "reference.gpkg").unlink()
    frame.to_file(folder / "reference.gpkg", layer="reference")
    (folder / "project.toml").write_text(PROJECT + more, encoding="utf-8")


def test_without_a_design_the_map_classes_are_post_strata(project_folder):
    found = assess_project(load_project(project_folder), project_folder / "outputs")
    table = with_classes(project_folder)
    on_map = table[table["map"] != ""]
    areas = pd.read_csv(project_folder / "outputs/map/areas.csv").rename(columns={"name": "stratum"})
    by_hand = assess(
        pd.DataFrame({"stratum": on_map["map"], "map": on_map["map"], "reference": on_map["observed"]}),
        areas[["stratum", "area", "pixels"]],
        AssessmentOptions(area_unit="ha", kind="post-stratified"),
    )
    pd.testing.assert_frame_equal(found.accuracy_frame, by_hand.accuracy_frame)
    pd.testing.assert_frame_equal(found.area_frame, by_hand.area_frame)
    assert found.design_kind == "simple random" and found.post_stratified
    assert any("no design was recorded" in w.casefold() for w in found.warnings)
    assert any(f"{len(table) - len(on_map)} points lie outside the map" in w for w in found.warnings)
    assert found.total_area == pytest.approx(areas["area"].sum())


def test_results_are_written_as_json_and_tables(project_folder):
    found = assess_project(load_project(project_folder), project_folder / "outputs")
    folder = project_folder / "outputs/assessment"
    assert json.loads((folder / "assessment.json").read_text("utf-8")) == json.loads(json.dumps(found.to_json()))
    tables = {"accuracy": found.accuracy_frame, "areas": found.area_frame, "matrix": found.matrix_frame}
    for name, frame in tables.items():
        written = pd.read_csv(folder / f"{name}.csv")
        expected = frame.astype(object).replace("", np.nan)
        pd.testing.assert_frame_equal(written.astype(object), expected, check_exact=False)


def design_of(folder: Path, old_codes: np.ndarray) -> dict:
    """A recorded design whose strata come from an older map."""
    frame = points_of(folder)
    cols = ((frame.geometry.x - TRANSFORM.c) // TRANSFORM.a).astype(int)
    rows = ((TRANSFORM.f - frame.geometry.y) // -TRANSFORM.e).astype(int)
    names = {1: "was pasture", 2: "was soil", 5: "was water"}
    strata = [names[int(old_codes[r, c])] for r, c in zip(rows, cols, strict=True)]
    return {
        "schema": 1, "kind": "stratified random", "seed": 1, "map": {"file": "old.tif", "sha256": "0"},
        "strata": [
            {"stratum": name, "mapped_as": None, "area_m2": 100.0 * int((old_codes == code).sum()),
             "pixels": int((old_codes == code).sum()), "n": strata.count(name)} for code, name in names.items()
        ],
        "points": {str(i): {"stratum": s} for i, s in zip(frame["id"], strata, strict=True)},
    }  # fmt: skip


def test_sample_of_an_older_map_serves_a_newer_one(project_folder):
    design = design_of(project_folder, mapped_codes(77, 0.3))
    (project_folder / "design.json").write_text(json.dumps(design), "utf-8")
    rewrite(project_folder, points_of(project_folder), 'design = "design.json"\n')
    sample = read_reference(
        load_project(project_folder), project_folder / "outputs/map/cover.tif", project_folder / "outputs"
    )
    assert [s.name for s in sample.strata] == ["was pasture", "was soil", "was water"]
    assert sum(s.area for s in sample.strata) == pytest.approx(HEIGHT * WIDTH * 100 / 10_000)
    found = assess_project(load_project(project_folder), project_folder / "outputs")
    assert found.design_kind == "stratified"
    table = with_classes(project_folder)
    weight = {s["stratum"]: s["pixels"] / s["n"] for s in design["strata"]}
    w = pd.Series([weight[design["points"][str(i)]["stratum"]] for i in table["id"]])
    on = (table["map"] != "").to_numpy()
    right = (table["map"] == table["observed"]).to_numpy() & on
    assert found.overall_accuracy.estimate == pytest.approx((w * right).sum() / (w * on).sum())
    assert found.total_area == pytest.approx((w * on).sum() * 0.01)


def test_design_drawn_here_is_found_by_the_ids(project_folder):
    design = design_of(project_folder, mapped_codes(77, 0.3))
    (project_folder / "outputs/sample").mkdir()
    (project_folder / "outputs/sample/design.json").write_text(json.dumps(design), "utf-8")
    assert assess_project(load_project(project_folder), project_folder / "outputs").design_kind == "stratified"
    design["points"].pop("1")
    (project_folder / "outputs/sample/design.json").write_text(json.dumps(design), "utf-8")
    # Another sample than the one drawn here.
    assert assess_project(load_project(project_folder), project_folder / "outputs").post_stratified
    rewrite(project_folder, points_of(project_folder), 'design = "outputs/sample/design.json"\n')
    with pytest.raises(SampleError, match="point '1' is not in the design"):
        assess_project(load_project(project_folder), project_folder / "outputs")


def simple_design(folder: Path, *, segments: bool) -> dict:
    """A recorded simple random sample of the whole map, of pixels or of segments of five points."""
    ids = [str(i) for i in points_of(folder)["id"]]
    points = {i: {"stratum": "whole map"} | ({"segment": int(i) // 5} if segments else {}) for i in ids}
    whole = {
        "stratum": "whole map",
        "mapped_as": None,
        "area_m2": 100.0 * (HEIGHT * WIDTH - 150),
        "pixels": HEIGHT * WIDTH - 150,
        "n": 150,
    }
    if segments:
        whole["clusters"] = 460
    return {"schema": 1, "kind": "simple random", "seed": 1, "strata": [whole], "points": points}


def test_recorded_simple_random_sample_is_sharpened_by_map_classes(project_folder):
    (project_folder / "design.json").write_text(json.dumps(simple_design(project_folder, segments=False)), "utf-8")
    undesigned = assess_project(load_project(project_folder), project_folder / "outputs")
    rewrite(project_folder, points_of(project_folder), 'design = "design.json"\n')
    found = assess_project(load_project(project_folder), project_folder / "outputs")
    assert found.post_stratified and not any("no design" in w.casefold() for w in found.warnings)
    pd.testing.assert_frame_equal(found.accuracy_frame, undesigned.accuracy_frame)


def test_class_with_too_few_points_leaves_a_simple_random_sample_as_it_is(project_folder):
    table = with_classes(project_folder)
    frame = points_of(project_folder)[(table["map"] != "Water").to_numpy()]
    (project_folder / "design.json").write_text(json.dumps(simple_design(project_folder, segments=False)), "utf-8")
    rewrite(project_folder, frame, 'design = "design.json"\n')
    found = assess_project(load_project(project_folder), project_folder / "outputs")
    assert not found.post_stratified and found.overall_accuracy.standard_error is not None
    missing = 150 - len(frame)
    assert any(f"{missing} of 150 drawn points are not in reference.gpkg" in w for w in found.warnings)


def test_segments_of_the_design_are_clusters_without_being_asked(project_folder):
    (project_folder / "design.json").write_text(json.dumps(simple_design(project_folder, segments=True)), "utf-8")
    frame = points_of(project_folder).assign(segment=lambda f: f["id"] // 5)
    rewrite(project_folder, frame, 'design = "design.json"\n')
    by_design = assess_project(load_project(project_folder), project_folder / "outputs")
    rewrite(project_folder, frame, 'design = "design.json"\ncluster = "segment"\n')
    by_column = assess_project(load_project(project_folder), project_folder / "outputs")
    assert by_design.clustered
    pd.testing.assert_frame_equal(by_design.accuracy_frame, by_column.accuracy_frame)


def test_replaced_points_are_left_out(project_folder):
    design = design_of(project_folder, mapped_codes(77, 0.3))
    table = with_classes(project_folder)
    gone = str(table.loc[table["map"] != "", "id"].iloc[0])
    design["points"][gone]["replaced_by"] = 151
    (project_folder / "design.json").write_text(json.dumps(design), "utf-8")
    rewrite(project_folder, points_of(project_folder), 'design = "design.json"\n')
    found = assess_project(load_project(project_folder), project_folder / "outputs")
    assert found.matrix_counts.sum() == (table["map"] != "").sum() - 1
    assert not any("drawn points" in w for w in found.warnings)


def test_labels_by_code_alternates_clusters_regions_and_unlabelled(project_folder):
    frame = points_of(project_folder)
    codes = {name: str(code) for name, code in zip(NAMES, CODES, strict=True)}
    frame["observed"] = [codes[n] if i % 2 else n.upper() for i, n in enumerate(frame["observed"])]
    on_map = np.flatnonzero(with_classes(project_folder)["map"] != "")
    frame.loc[on_map[3], "observed"] = "cloud"
    frame["second"] = None
    frame.loc[on_map[4], "second"] = "Water"
    frame["district"] = np.where(frame.geometry.x < frame.geometry.x.median(), "west", "east")
    frame["block"] = [f"b{i // 5}" for i in range(len(frame))]
    more = 'unlabelled = ["cloud"]\nalternate = "second"\nregion = "district"\ncluster = "block"\n'
    rewrite(project_folder, frame, more)
    found = assess_project(load_project(project_folder), project_folder / "outputs")
    assert found.clustered and [r.region for r in found.regions] == ["east", "west"]
    assert found.either_label.points == 1 and found.unlabelled.points == 1
    assert found.matrix_counts.sum() == len(on_map) - 1
    assert (project_folder / "outputs/assessment/regions.csv").is_file()


def test_merged_classes_and_purposive_evidence_come_from_the_project_file(project_folder):
    more = 'evidence = "purposive sample"\n[reference.merge]\n"Bare soil" = "Land"\nPasture = "Land"\n'
    rewrite(project_folder, points_of(project_folder), more)
    found = assess_project(load_project(project_folder), project_folder / "outputs")
    assert found.classes == ("Land", "Water")
    assert found.evidence_name == "purposive sample" and found.overall_accuracy.standard_error is None


def test_points_in_another_crs_are_read_at_the_same_places(project_folder):
    frame = points_of(project_folder)
    here = codes_at(project_folder / "outputs/map/cover.tif", frame.geometry)
    away = codes_at(project_folder / "outputs/map/cover.tif", frame.to_crs("EPSG:4326").geometry)
    np.testing.assert_array_equal(here, away)
    table = with_classes(project_folder)
    assert [{0: "", 1: NAMES[0], 2: NAMES[1], 5: NAMES[2]}[int(c)] for c in here] == list(table["map"])


def test_repeated_places_count_once(project_folder):
    frame = points_of(project_folder)
    alone = assess_project(load_project(project_folder), project_folder / "outputs")
    rewrite(project_folder, pd.concat([frame, frame.iloc[[7]].assign(id=999)], ignore_index=True))
    found = assess_project(load_project(project_folder), project_folder / "outputs")
    assert found.matrix_counts.sum() == alone.matrix_counts.sum()
    assert any("listed more than once" in w for w in found.warnings)


@pytest.mark.parametrize(
    ("spoil", "message"),
    [
        (lambda f: f.assign(observed=["Moor", *f["observed"][1:]]), r"row 1, column 'observed': 'Moor' is no"),
        (lambda f: f.rename(columns={"observed": "seen"}), r"there is no column 'observed'"),
        (lambda f: f.set_geometry(f.geometry.buffer(5)), r"150 records are not single points, first record 1"),
        (lambda f: f.set_geometry(f.geometry.translate(1e6)), r"no point of the reference sample lies on the map"),
        (lambda f: f.assign(observed=None), r"no point on the map has a reference label"),
    ],
)  # fmt: skip
def test_bad_samples_are_refused_with_what_and_where(project_folder, spoil, message):
    rewrite(project_folder, spoil(points_of(project_folder)))
    with pytest.raises((SampleError, DataError), match=message):
        assess_project(load_project(project_folder), project_folder / "outputs")
    assert not (project_folder / "outputs/assessment").exists()


def test_sample_without_crs_or_design_that_is_none(project_folder):
    rewrite(project_folder, points_of(project_folder), 'design = "design.json"\n')
    (project_folder / "design.json").write_text('{"kind": "stratified", "strata": [{"stratum": "a"}]}', "utf-8")
    with pytest.raises(DataError, match=r"design.json: this is not a recorded design"):
        assess_project(load_project(project_folder), project_folder / "outputs")
    bare = points_of(project_folder)
    (project_folder / "reference.gpkg").unlink()
    lost = gpd.GeoDataFrame(bare.drop(columns="geometry"), geometry=list(bare.geometry))
    with pytest.warns(UserWarning, match="crs"):
        lost.to_file(project_folder / "reference.gpkg", layer="reference")
    with pytest.raises(DataError, match="no coordinate reference system"):
        assess_project(load_project(project_folder), project_folder / "outputs")


def test_two_maps_of_a_project(project_folder):
    better = CODES[truth_indices()]
    write_map(project_folder / "newer.tif", better)
    found = compare_project(load_project(project_folder), project_folder / "outputs", project_folder / "newer.tif")
    assert found.overall_accuracy.difference.lower > 0
    assert "The map newer.tif is right on" in found.in_words and "the map newer.tif is better" in found.in_words
    done = CliRunner().invoke(
        cli, ["compare", str(project_folder / "newer.tif"), "--project", str(project_folder), "--json"],
        catch_exceptions=False,
    )  # fmt: skip
    assert done.exit_code == 0
    written = json.loads((project_folder / "outputs/comparison/comparison.json").read_text("utf-8"))
    assert json.loads(done.stdout) == written
    write_map(project_folder / "other.tif", np.full((HEIGHT, WIDTH), 9, dtype=np.uint8))
    with pytest.raises(DataError, match=r"other.tif: the map holds code 9"):
        compare_project(load_project(project_folder), project_folder / "outputs", project_folder / "other.tif")
