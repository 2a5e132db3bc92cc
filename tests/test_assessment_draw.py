"""Drawing: inclusion probabilities, ground area, the same points however the map is read, additions, files."""

from __future__ import annotations

import json
from pathlib import Path

import geopandas
import numpy as np
import pyproj
import pytest
import rasterio
from affine import Affine
from click.testing import CliRunner
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats
from shapely.geometry import box
from small_project import make_small_project

from classify.assessment.cells import cell_shape_yx
from classify.assessment.draw import DrawOptions, draw_lattice, draw_units, pixels_of, population_of
from classify.assessment.drawn_sample import read_drawn, taken_cells
from classify.assessment.population import scan
from classify.cli.main import cli
from classify.errors import LandassayError, OutputError, SampleError
from classify.raster.area import ground_areas_m2
from classify.raster.grid import Grid, Window

UTM, UTM_TRANSFORM = "EPSG:32733", Affine(10, 0, 500_000, 0, -10, 6_500_000)
CLASSES = {1: "Pasture", 2: "Soil", 5: "Water"}


def write_map(path: Path, codes: np.ndarray, crs: str = UTM, transform: Affine = UTM_TRANSFORM) -> Path:
    with rasterio.open(
        path, "w", driver="GTiff", count=1, dtype="uint8", height=codes.shape[0], width=codes.shape[1], crs=crs,
        transform=transform, nodata=0,
    ) as target:  # fmt: skip
        target.write(codes.astype(np.uint8), 1)
    return path


@pytest.fixture(scope="module")
def varied(tmp_path_factory) -> Path:
    """A map of 300 x 260 pixels with three classes and no data in a corner."""
    codes = np.random.default_rng(8).choice([1, 1, 1, 2, 2, 5], (300, 260))
    codes[:60, :50] = 0
    return write_map(tmp_path_factory.mktemp("map") / "cover.tif", codes)


def test_inclusion_probabilities_are_equal_within_strata(tmp_path: Path):
    codes = np.where(np.arange(15 * 16).reshape(15, 16) % 3 == 0, 2, 1)
    codes[0, :4] = 0
    # Pixels of 200 m: the map has four cells, in which draws are made apart.
    path = write_map(tmp_path / "cover.tif", codes, transform=Affine(200, 0, 500_000, 0, -200, 6_500_000))
    hits, in_cell = np.zeros(codes.size, int), np.zeros(13, int)
    population = population_of(path, {1: "a", 2: "b"}, DrawOptions())
    assert cell_shape_yx(population.grid) == (8, 8)
    for seed in range(2000):
        for drawn, n in zip(scan(population, seed, 12).lowest, (12, 6), strict=True):
            hits[drawn.units[:n]] += 1
            if n == 12:
                in_cell[((drawn.units // 16 < 8) & (drawn.units % 16 < 8)).sum()] += 1
    hits = hits.reshape(codes.shape)
    assert not hits[codes == 0].any()
    for code, n in ((1, 12), (2, 6)):
        drawn = hits[codes == code]
        expected = 2000 * n / drawn.size
        # Draws without replacement: counts have variance expected * (1 - n / N), which the statistic is scaled by.
        statistic = ((drawn - expected) ** 2).sum() / (expected * (1 - n / drawn.size)) * (drawn.size - 1) / drawn.size
        assert 0.001 < stats.chi2.sf(statistic, drawn.size - 1) < 0.999
    # How many of the 12 fall in one cell: the hypergeometric distribution, by scipy; tails together.
    law = stats.hypergeom((codes == 1).sum(), (codes[:8, :8] == 1).sum(), 12).pmf(np.arange(13)) * 2000
    few = law < 5
    assert stats.chisquare([*in_cell[~few], in_cell[few].sum()], [*law[~few], law[few].sum()]).pvalue > 0.001


def test_points_follow_ground_area_on_a_grid_in_degrees(tmp_path: Path):
    """Rows from the equator to 80 degrees north: pixels shrink sixfold, and are drawn so much more rarely."""
    transform = Affine(0.5, 0, 10, 0, -2.0, 80)
    path = write_map(tmp_path / "cover.tif", np.ones((40, 120)), "EPSG:4326", transform)
    population = population_of(path, {1: "a"}, DrawOptions())
    assert cell_shape_yx(population.grid) == (1, 64)
    rows = np.concatenate([scan(population, seed, 30).lowest[0].units // 120 for seed in range(2000)])
    drawn = np.bincount(rows // 4, minlength=10)
    geod = pyproj.Geod(ellps="WGS84")
    areas = np.array(
        [
            abs(geod.polygon_area_perimeter([10, 10.5, 10.5, 10], [80 - 2 * r, 80 - 2 * r, 78 - 2 * r, 78 - 2 * r])[0])
            for r in range(40)
        ]
    )
    expected = areas.reshape(10, 4).sum(axis=1)
    assert stats.chisquare(drawn, expected / expected.sum() * drawn.sum()).pvalue > 0.001
    assert stats.chisquare(drawn, np.full(10, drawn.sum() / 10)).pvalue < 1e-9


def test_same_points_whatever_the_blocks_and_jobs(varied: Path):
    population = population_of(varied, CLASSES, DrawOptions())
    first = scan(population, 7, 50)
    for rows_px, jobs in ((64, 1), (130, 3), (512, 2)):
        other = scan(population, 7, 50, jobs=jobs, rows_px=rows_px)
        assert all(np.array_equal(a.units, b.units) for a, b in zip(first.lowest, other.lowest, strict=True))
        assert first.pixels == other.pixels
        assert first.area_m2 == pytest.approx(other.area_m2, rel=1e-12)
    assert not np.array_equal(scan(population, 8, 50).lowest[0].units, first.lowest[0].units)


def test_what_is_kept_is_the_start_of_one_order(varied: Path):
    """However few are kept, they are the first of the order in which all pixels of a stratum are drawn."""
    population = population_of(varied, CLASSES, DrawOptions())
    with rasterio.open(varied) as source:
        codes = source.read(1)
    whole = scan(population, 3, codes.size).lowest
    for place, code in enumerate(CLASSES):
        assert np.array_equal(np.sort(whole[place].units), np.flatnonzero(codes == code))
        assert (np.diff(whole[place].keys) > 0).all()
    for keep, rows_px in ((1, 64), (40, 128), (7000, 64), (20_000, 512)):
        for few, all_of_them in zip(scan(population, 3, keep, rows_px=rows_px).lowest, whole, strict=True):
            assert np.array_equal(few.units, all_of_them.units[:keep])


def test_the_start_of_the_order_is_whole_where_pixels_differ_in_size(tmp_path: Path):
    """From 86 degrees north to the equator: large pixels come so early that a guess by their mean brings too few."""
    path = write_map(tmp_path / "cover.tif", np.ones((43, 120)), "EPSG:4326", Affine(0.5, 0, 10, 0, -2.0, 86))
    population = population_of(path, {1: "a"}, DrawOptions())
    whole = scan(population, 1, 43 * 120).lowest[0].units
    assert len(set(whole)) == 43 * 120
    for keep in (3000, 4500, 5000):
        assert np.array_equal(scan(population, 1, keep).lowest[0].units, whole[:keep])


def test_pixels_and_areas_are_those_of_plain_sums(varied: Path):
    population = population_of(varied, CLASSES, DrawOptions())
    with rasterio.open(varied) as source:
        codes = source.read(1)
    found = scan(population, 3, 0)
    for place, code in enumerate(CLASSES):
        whole = ground_areas_m2(population.grid, population.grid.window)[codes == code].sum()
        assert found.area_m2[place] == pytest.approx(whole, rel=1e-6)
        assert found.pixels[place] == (codes == code).sum()


@settings(max_examples=15)
@given(seed=st.integers(0, 2**32 - 1), first=st.integers(2, 40), more=st.integers(1, 40))
def test_adding_later_gives_the_sample_drawn_at_once(varied: Path, seed: int, first: int, more: int):
    options = DrawOptions(seed=seed)
    population = population_of(varied, CLASSES, options)
    before = draw_units(population, lambda _: {"Soil": first}, first, options)
    taken = {"Soil": list(before.strata[0].units)}
    after = draw_units(population, lambda _: {"Soil": more}, more, options, taken=taken)
    at_once = draw_units(population, lambda _: {"Soil": first + more}, first + more, options)
    assert before.strata[0].units + after.strata[0].units == at_once.strata[0].units


def test_distance_is_kept_and_a_shortage_says_how_many_fit(varied: Path):
    options = DrawOptions(seed=2, apart_m=150)
    population = population_of(varied, CLASSES, options)
    drawn = draw_units(population, lambda _: {"Pasture": 30, "Soil": 30, "Water": 20}, 30, options)
    units = np.array([unit for stratum in drawn.strata for unit in stratum.units])
    x, y = population.grid.xy(units[:, 0], units[:, 1])
    lon, lat = pyproj.Transformer.from_crs(UTM, 4326, always_xy=True).transform(x, y)
    i, j = np.triu_indices(len(units), 1)
    _, _, apart = pyproj.Geod(ellps="WGS84").inv(lon[i], lat[i], lon[j], lat[j])
    assert apart.min() >= 150 * (1 - 1e-6)
    far = DrawOptions(seed=2, apart_m=900)
    with pytest.raises(SampleError, match=r"only \d+ of 40 points of stratum 'Water' fit with 900 m"):
        draw_units(population, lambda _: {"Water": 40}, 40, far)


def test_lattice_has_equal_spacing_on_the_ground_and_a_random_start(tmp_path: Path):
    transform = Affine(0.002, 0, 20, 0, -0.002, 61)
    path = write_map(tmp_path / "cover.tif", np.ones((400, 400)), "EPSG:4326", transform)
    counts, firsts = [], set()
    for seed in range(12):
        options = DrawOptions("systematic", seed)
        drawn = draw_lattice(population_of(path, {1: "a"}, options), 200, options)
        counts.append(len(drawn.strata[0].units))
        firsts.add(drawn.strata[0].units[0])
    assert np.mean(counts) == pytest.approx(200, abs=6)
    assert len(firsts) > 8
    units = np.array(drawn.strata[0].units)
    x, y = Grid(None, transform, 400, 400).xy(units[:, 0], units[:, 1])  # type: ignore[arg-type]
    geod = pyproj.Geod(ellps="WGS84")
    spacing = np.sqrt(drawn.scan.area_m2[0] / 200)
    nearest = [min(geod.inv(a, b, c, d)[2] for c, d in zip(x, y, strict=True) if (a, b) != (c, d))
               for a, b in list(zip(x, y, strict=True))[::20]]  # fmt: skip
    # To the nearest pixel centre: pixels are about 110 by 220 m.
    assert nearest == pytest.approx([spacing] * len(nearest), abs=250)


def test_segments_are_units_of_all_their_pixels(varied: Path):
    options = DrawOptions("simple random", seed=5, segment_px=4)
    population = population_of(varied, CLASSES, options)
    drawn = draw_units(population, lambda _: {"whole map": 30}, 30, options)
    with rasterio.open(varied) as source:
        codes = source.read(1)
    held = np.pad(codes, ((0, 0), (0, 0))).reshape(75, 4, 65, 4).max(axis=(1, 3)) > 0
    assert drawn.scan.units == (int(held.sum()),)
    for unit, pixels in zip(drawn.strata[0].units, pixels_of(population, drawn.strata[0].units), strict=True):
        assert {(r // 4, c // 4) for r, c in pixels} == {unit}
        assert len(pixels) == (codes[unit[0] * 4 :, unit[1] * 4 :][:4, :4] > 0).sum()


def test_segments_follow_ground_area_on_a_grid_in_degrees(tmp_path: Path):
    """From 70 to 10 degrees north pixels grow threefold; each is labelled with probability in proportion to it."""
    transform = Affine(0.05, 0, 10, 0, -0.1, 70)
    codes = np.ones((600, 120))
    codes[300:, :60] = 0
    path = write_map(tmp_path / "cover.tif", codes, "EPSG:4326", transform)
    options = DrawOptions("simple random", seed=3, segment_px=5)
    population = population_of(path, {1: "a"}, options)
    drawn = draw_units(population, lambda _: {"whole map": 300}, 300, options)
    rows = np.array([r for pixels in pixels_of(population, drawn.strata[0].units) for r, _ in pixels])
    area = ground_areas_m2(population.grid, population.grid.window) * (codes > 0)
    ground = float((area.sum(axis=1) * np.arange(600)).sum() / area.sum())
    alike = float(np.nonzero(codes)[0].mean())
    error = rows.std() / np.sqrt(300)
    assert abs(rows.mean() - ground) < 2 * error
    assert abs(alike - ground) > 3 * error  # equal probabilities would be told apart


def test_excluded_polygons_leave_the_population(varied: Path):
    grid_box = box(500_500, 6_498_000, 501_500, 6_499_000)
    options = DrawOptions(seed=1)
    whole = population_of(varied, CLASSES, options)
    part = population_of(varied, CLASSES, options, [grid_box])
    lost = draw_units(part, lambda _: {"Pasture": 200}, 200, options)
    units = np.array(lost.strata[0].units)
    x, y = part.grid.xy(units[:, 0], units[:, 1])
    assert not ((x > 500_500) & (x < 501_500) & (y > 6_498_000) & (y < 6_499_000)).any()
    assert lost.scan.excluded_pixels == 100 * 100
    assert sum(lost.scan.pixels) + 100 * 100 == sum(scan(whole, 1, 0).pixels)


@pytest.fixture
def mapped_project(tmp_path: Path) -> Path:
    """A miniature project with a map, but without a model."""
    folder = make_small_project(tmp_path / "miniature")
    codes = np.ones((96, 120))
    codes[:, 50:] = 2
    codes[30:60, 60:90] = 5
    codes[:3, :5] = 0
    transform = Affine(10, 0, 500_000, 0, -10, 4_200_000)
    (folder / "outputs" / "map").mkdir(parents=True)
    write_map(folder / "outputs" / "map" / "cover.tif", codes, "EPSG:32633", transform)
    return folder


def draw(folder: Path, *args: str) -> dict:
    result = CliRunner().invoke(
        cli, ["draw", "--project", str(folder), "--json", "--quiet", *args], catch_exceptions=False
    )
    assert result.exit_code == 0, result.output
    return json.loads(result.stdout)


def test_points_give_nothing_away(mapped_project: Path):
    draw(mapped_project, "--points", "90", "--floor", "20", "--reserve", "4")
    folder = mapped_project / "outputs" / "sample"
    design = json.loads((folder / "design.json").read_text())
    points = geopandas.read_file(folder / "points.gpkg")
    assert list(points["id"]) == list(range(1, 91))
    assert set(points.columns) == {
        "id",
        "longitude",
        "latitude",
        "observed",
        "alternate",
        "confidence",
        "note",
        "geometry",
    }
    assert set(points["observed"].fillna("")) == {""}
    texts = [(folder / f"points.{end}").read_bytes() for end in ("gpkg", "gpx", "geojson", "csv")]
    for secret in (b"Pasture", b"Bare soil", b"Water", b"stratum", b"reserve"):
        assert not any(secret in text for text in texts)
    # Ids of one stratum are spread over all ids, not in one run (Mann & Whitney 1947, by scipy).
    water = [int(i) for i, entry in design["points"].items() if entry["stratum"] == "Water"]
    rest = [i for i in range(1, 91) if i not in water]
    assert stats.mannwhitneyu(water, rest).pvalue > 0.001
    assert [s["n"] for s in design["strata"]] == [sum(e["stratum"] == s["stratum"] for e in design["points"].values())
                                                  for s in design["strata"]]  # fmt: skip
    geojson = geopandas.read_file(folder / "points.geojson")
    away = geojson.to_crs(points.crs).distance(points.geometry)
    assert away.max() < 0.01
    read_drawn(folder)


def test_a_drawn_sample_is_never_drawn_over(mapped_project: Path):
    draw(mapped_project, "--points", "60", "--floor", "10")
    folder = mapped_project / "outputs" / "sample"
    before = {path.name: path.read_bytes() for path in folder.iterdir()}
    with pytest.raises(OutputError, match="was drawn already"):
        draw(mapped_project, "--points", "60")
    assert {path.name: path.read_bytes() for path in folder.iterdir()} == before


def test_adding_keeps_labels_and_replacing_takes_reserves_in_order(mapped_project: Path):
    draw(mapped_project, "--points", "60", "--floor", "10", "--reserve", "2")
    folder = mapped_project / "outputs" / "sample"
    points = geopandas.read_file(folder / "points.gpkg")
    points["observed"] = ["Water" if i == 3 else "" for i in points["id"]]
    points.to_file(folder / "points.gpkg", layer="points")
    draw(mapped_project, "--add-to", "Water=7")
    after = read_drawn(folder)
    assert len(after.points) == 67
    assert after.points.set_index("id").loc[3, "observed"] == "Water"
    assert len(set(taken_cells(after.design)["Water"])) == len(taken_cells(after.design)["Water"])
    stratum = after.design["points"]["5"]["stratum"]
    waiting = after.design["reserves"][stratum]
    draw(mapped_project, "--replace", "5", "--reason", "behind a locked gate")
    last = read_drawn(folder)
    assert last.design["points"]["5"]["reason"] == "behind a locked gate"
    new = last.design["points"]["68"]
    assert (new["row"], new["col"]) == (waiting[0]["row"], waiting[0]["col"])
    assert last.design["reserves"][stratum] == waiting[1:]
    assert 5 not in last.active_ids and 68 in last.active_ids
    with pytest.raises(SampleError, match="was replaced by point 68"):
        draw(mapped_project, "--replace", "5", "--reason", "again")


@pytest.mark.parametrize(
    ("args", "message"),
    [
        (["--in", "Water=5000"], "5,000 points are asked of stratum 'Water', which has 900 pixels"),
        (
            ["--in", "Water=898", "--reserve", "5"],
            "898 points and 5 in reserve.*\n.*at most 895 points, or for fewer in",
        ),
        (["--in", "Swamp=5"], "there is no stratum 'Swamp'"),
        (["--points", "5"], "5 points are too few for 3 strata"),
        ([], "the number of points is not known"),
        (["--points", "50", "--apart", "600"], r"only \d+ of \d+ points"),
        (["--points", "50", "--map", "mask.tif"], "cannot be read"),
        (["--points", "50", "--segment", "3"], "segments are drawn by simple random sampling only"),
    ],
)
def test_bad_wishes_are_explained(mapped_project: Path, args: list[str], message: str):
    with pytest.raises(LandassayError, match=message):
        draw(mapped_project, *args)
    assert not (mapped_project / "outputs" / "sample").exists()


def test_a_class_without_pixels_is_said(mapped_project: Path):
    cover = mapped_project / "outputs" / "map" / "cover.tif"
    with rasterio.open(cover, "r+") as target:
        codes = target.read(1)
        codes[codes == 5] = 2
        target.write(codes, 1)
    with pytest.raises(SampleError, match="stratum 'Water' has no pixels on the map"):
        draw(mapped_project, "--in", "Water=5")
    assert [s["stratum"] for s in draw(mapped_project, "--points", "40")["strata"]] == ["Pasture", "Bare soil"]


def test_a_class_smaller_than_the_floor_and_its_reserve(mapped_project: Path):
    cover = mapped_project / "outputs" / "map" / "cover.tif"
    with rasterio.open(cover, "r+") as target:
        codes = target.read(1)
        codes[codes == 5] = 2
        codes[50, 60:90] = 5
        target.write(codes, 1)
    drawn = draw(mapped_project, "--points", "200", "--reserve", "4")
    assert {s["stratum"]: s["n"] for s in drawn["strata"]}["Water"] == 30 - 4
    assert sum(s["n"] for s in drawn["strata"]) == 200


def test_design_and_points_must_belong_together(mapped_project: Path):
    draw(mapped_project, "--points", "60", "--floor", "10")
    folder = mapped_project / "outputs" / "sample"
    design = json.loads((folder / "design.json").read_text())
    del design["points"]["9"]
    (folder / "design.json").write_text(json.dumps(design))
    with pytest.raises(SampleError, match="point 9 is not in the design"):
        draw(mapped_project, "--add", "20")


def test_another_map_is_another_sample(mapped_project: Path):
    draw(mapped_project, "--points", "60", "--floor", "10")
    cover = mapped_project / "outputs" / "map" / "cover.tif"
    with rasterio.open(cover, "r+") as target:
        target.write(np.full((1, 5), 2, np.uint8), 1, window=Window(0, 0, 1, 5).to_rasterio())
    with pytest.raises(SampleError, match="not the map that the sample was drawn from"):
        draw(mapped_project, "--add", "20")


def test_plan_then_draw(mapped_project: Path):
    (mapped_project / "outputs" / "map" / "areas.csv").write_text(
        "code,name,pixels,area_m2\n1,Pasture,4785,478500\n2,Bare soil,5820,582000\n5,Water,900,90000\n"
    )
    runner = CliRunner()
    args = ["plan", "--project", str(mapped_project), "--points", "120", "--allocation", "neyman", "--quiet"]
    assert runner.invoke(cli, [*args, "--accuracy", "Water=0.7"], catch_exceptions=False).exit_code == 0
    plan = json.loads((mapped_project / "outputs" / "sample" / "plan.json").read_text())
    drawn = draw(mapped_project)
    assert {s["stratum"]: s["n"] for s in drawn["strata"]} == plan["allocations"]["neyman"]
