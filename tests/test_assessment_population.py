"""What the estimates stand for: the population that was drawn from, and nothing that is larger or elsewhere."""

from __future__ import annotations

import itertools
import json

import geopandas as gpd
import numpy as np
import pandas as pd
import pytest
import rasterio
import shapely
from small_project import CRS, HEIGHT, NAMES, PROJECT, TRANSFORM, WIDTH, make_small_project, truth_indices

from classify.assessment import assess_project
from classify.assessment.draw import DrawOptions
from classify.assessment.evidence import RESERVATIONS, claim_of
from classify.assessment.project_sample import SampleRequest, add_to_sample, draw_sample, replace_point
from classify.cli.render import assessment_text
from classify.errors import SampleError
from classify.report import gather_facts
from classify.report.answer_text import sample_claim
from classify.report.content import write_document
from classify.report.messages import load_messages
from classify.settings import load_project

CODES = np.array([1, 2, 5], dtype=np.uint8)


def write_map(folder, codes):
    (folder / "outputs/map").mkdir(parents=True, exist_ok=True)
    with rasterio.open(folder / "outputs/map/cover.tif", "w", driver="GTiff", count=1, height=HEIGHT, width=WIDTH,
                       dtype="uint8", crs=CRS, transform=TRANSFORM, nodata=0) as target:  # fmt: skip
        target.write(codes, 1)
    pixels = [int((codes == code).sum()) for code in CODES]
    pd.DataFrame({
        "code": CODES, "name": NAMES, "pixels": pixels, "area_m2": [100.0 * n for n in pixels],
        "area": [0.01 * n for n in pixels], "unit": "ha",
    }).to_csv(folder / "outputs/map/areas.csv", index=False)  # fmt: skip


@pytest.fixture
def folder(tmp_path):
    """The miniature project with a map that is right everywhere."""
    made = make_small_project(tmp_path / "p")
    write_map(made, CODES[truth_indices()])
    return made


def draw(folder, kind="stratified random", points=120, **more):
    options = {key: more.pop(key) for key in ("apart_m", "reserve", "segment_px") if key in more}
    request = SampleRequest(DrawOptions(kind, seed=4, jobs=1, **options), points=points, **more)
    drawn = draw_sample(load_project(folder), folder / "outputs", request)
    label(folder, drawn)
    return drawn


def label(folder, drawn, truth=None):
    """Every drawn point labelled as it is on the ground."""
    truth = truth_indices() if truth is None else truth
    points = drawn.points
    cols, rows = ~TRANSFORM @ (points.geometry.x.to_numpy(), points.geometry.y.to_numpy())
    observed = [NAMES[truth[int(r), int(c)]] for r, c in zip(rows, cols, strict=True)]
    save(folder, points[["id", "geometry"]].assign(observed=observed))


def save(folder, frame):
    (folder / "reference.gpkg").unlink(missing_ok=True)
    gpd.GeoDataFrame(frame).to_file(folder / "reference.gpkg", layer="reference")


def found_in(folder):
    return assess_project(load_project(folder), folder / "outputs")


def kept_pixels(folder, margin_m):
    """Pixels (h, w) whose centres lie farther than a margin from training polygons, by plain geometry."""
    polygons = gpd.read_file(folder / "training.gpkg").union_all()
    rows, cols = np.mgrid[:HEIGHT, :WIDTH]
    x, y = TRANSFORM @ (cols + 0.5, rows + 0.5)
    return shapely.distance(shapely.points(x, y), polygons) > margin_m


@pytest.mark.parametrize("kind", ["simple random", "systematic", "stratified random"])
def test_estimates_and_mapped_areas_stand_for_the_drawn_population_only(folder, kind):
    draw(folder, kind, away_from_training_m=20.0)
    kept = kept_pixels(folder, 20.0)
    assert 0.2 < kept.mean() < 0.9
    found = found_in(folder)
    assert found.total_area == pytest.approx(0.01 * kept.sum(), rel=0.01)
    for place, name in enumerate(NAMES):
        inside = 0.01 * (kept & (truth_indices() == place)).sum()
        assert found.area[name].mapped == pytest.approx(inside, rel=0.02), name
        # A map that is right everywhere: what is mapped there and what is there agree.
        assert found.area[name].estimated.estimate == pytest.approx(inside, rel=0.02), name
    assert found.reservations == ("part left out",) and "known chance" in found.claim and "left out" in found.claim
    assert any("not in the population" in text and " ha (" in text for text in found.warnings)


def test_population_that_is_unknown_for_another_map_has_no_mapped_areas(folder):
    draw(folder, "simple random", away_from_training_m=20.0)
    better = CODES[truth_indices()]
    better[:2] = 2  # a newer map of the same pixels
    write_map(folder, better)
    found = found_in(folder)
    assert not found.post_stratified, "the areas of the whole map are no post-strata of a part of it"
    assert found.total_area == pytest.approx(0.01 * kept_pixels(folder, 20.0).sum(), rel=0.01)
    assert all(found.area[name].mapped is None for name in NAMES)
    assert any("mapped areas are left out" in text for text in found.warnings)


def test_newer_map_of_the_same_pixels_keeps_its_mapped_areas(folder):
    draw(folder, "simple random")
    newer = CODES[truth_indices()]
    newer[:2] = 2
    write_map(folder, newer)
    found = found_in(folder)
    assert found.post_stratified and found.reservations == ()
    assert found.area["Bare soil"].mapped == pytest.approx(0.01 * (newer == 2).sum())


def test_stratum_without_points_takes_no_part_in_mapped_areas(folder):
    draw(folder, points=None, sizes={"Pasture": 40, "Bare soil": 40})
    found = found_in(folder)
    water = 0.01 * (truth_indices() == 2).sum()
    assert found.total_area == pytest.approx(0.01 * HEIGHT * WIDTH - water, rel=0.01)
    assert found.area["Water"].mapped is None
    assert found.area["Pasture"].mapped == pytest.approx(0.01 * (truth_indices() == 0).sum(), rel=0.01)
    assert found.reservations == ("part left out",)
    # Once it has points, the remark of the first draw no longer holds.
    label(folder, add_to_sample(load_project(folder), folder / "outputs", {"Water": 20}, 1))
    found = found_in(folder)
    assert found.area["Water"].mapped == pytest.approx(water, rel=0.01) and found.reservations == ()
    assert not any("No points were drawn" in text for text in found.warnings)


def test_distance_and_replaced_points_are_told_with_their_reasons(folder):
    draw(folder, apart_m=20.0, reserve=3)
    project, outputs = load_project(folder), folder / "outputs"
    replace_point(project, outputs, "3", "locked gate")
    drawn, _ = replace_point(project, outputs, "5", "locked gate")
    label(folder, drawn)
    found = found_in(folder)
    assert found.reservations == ("distance kept", "reserves used")
    assert found.claim.startswith("Every part of the mapped area") and "nearly, not exactly" in found.claim
    assert any("nearer than 20 m" in text for text in found.warnings)
    assert any(
        text.startswith("2 places could not be reached") and "locked gate (2)" in text for text in found.warnings
    )
    assert found.to_json()["design"]["reservations"] == ["distance kept", "reserves used"]
    assert found.to_json()["claim"] == found.claim


def test_sample_without_a_design_says_so_on_page_one(folder):
    found = found_in(folder)
    assert found.reservations == ("design assumed",) and "assumed, not known" in found.claim
    assert found.claim in assessment_text(found.to_json())
    (folder / "outputs/model").mkdir()
    facts = gather_facts(load_project(folder), folder / "outputs")
    answer = write_document(facts).sections[0]
    assert found.claim in ["".join(span.text for span in b.text) for b in answer.blocks if hasattr(b, "text")]


def test_other_sample_with_the_same_ids_is_not_taken_for_the_drawn_one(folder):
    legacy = gpd.read_file(folder / "reference.gpkg")
    draw(folder, points=160)
    save(folder, legacy)
    found = found_in(folder)
    assert found.design_kind == "simple random" and found.reservations == ("design assumed",)
    assert any("lie elsewhere" in text for text in found.warnings)
    (folder / "project.toml").write_text(PROJECT + 'design = "outputs/sample/design.json"\n', "utf-8")
    with pytest.raises(SampleError, match=r"150 of 150 points do not lie|1[0-9]{2} of 150 points do not lie"):
        found_in(folder)


def test_moved_points_are_refused_and_points_in_degrees_are_not(folder):
    drawn = draw(folder)
    frame = gpd.read_file(folder / "reference.gpkg")
    save(folder, frame.to_crs(4326))
    assert found_in(folder).design_kind == "stratified"
    frame.loc[frame["id"] == 7, "geometry"] = shapely.transform(frame.geometry[frame["id"] == 7], lambda xy: xy + 15)
    save(folder, frame)
    with pytest.raises(
        SampleError, match="1 of 120 points do not lie in the pixel they were drawn in, first point '7'"
    ):
        found_in(folder)
    assert len(drawn.points) == 120


def test_places_that_cannot_be_checked_are_told(folder):
    draw(folder)
    path = folder / "outputs/sample/design.json"
    design = json.loads(path.read_text("utf-8"))
    del design["map"]["crs"]
    design["map"]["grid"][0] = 20.0
    path.write_text(json.dumps(design), "utf-8")
    assert any("could not be checked" in text for text in found_in(folder).warnings)


def test_segments_are_counted(folder):
    drawn = draw(folder, "simple random", points=12, segment_px=3)
    found = found_in(folder)
    assert found.clusters == drawn.points["segment"].nunique() == 12
    assert found.to_json()["design"]["cluster_count"] == 12 and found.to_json()["design"]["clusters"] is True


def test_report_says_in_each_case_what_the_assessment_says(folder):
    found = found_in(folder)
    (folder / "outputs/model").mkdir()
    accuracy = gather_facts(load_project(folder), folder / "outputs").accuracy
    assert accuracy is not None and accuracy.reservations == found.reservations
    words = load_messages("en")
    for n in range(len(RESERVATIONS) + 1):
        for chosen in itertools.combinations(RESERVATIONS, n):
            said = sample_claim(type(accuracy)(**{**vars_of(accuracy), "reservations": chosen}), words)
            assert "".join(span.text for span in said) == claim_of("probability sample", chosen), chosen


def vars_of(value):
    return {name: getattr(value, name) for name in value.__dataclass_fields__}
