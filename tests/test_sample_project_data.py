"""The sample project: its script still makes what is committed, and the data are what its README says they are."""

from __future__ import annotations

import importlib
import json
import re
import subprocess
import sys
from collections import Counter
from collections.abc import Iterator
from pathlib import Path
from types import ModuleType

import geopandas as gpd
import numpy as np
import pandas as pd
import pytest
import rasterio
from pyproj import Geod, Transformer
from rasterio.features import geometry_mask
from scipy import stats

from classify.files import sha256
from classify.settings import load_project

SAMPLE = Path(__file__).resolve().parent.parent / "sample_project"
SCENE = sorted(path.relative_to(SAMPLE).as_posix() for path in SAMPLE.glob("scene/*.tif"))
RASTERS = [*SCENE, "first_map.tif", "truth.tif"]
MASK_CLEAR = 10


def read(path: Path) -> np.ndarray:
    with rasterio.open(path) as source:
        return source.read(1)


@pytest.fixture(scope="module")
def script() -> Iterator[ModuleType]:
    """make_sample.py as a module, with its folder on the path as when it is run."""
    with pytest.MonkeyPatch.context() as patch:
        patch.syspath_prepend(str(SAMPLE))
        yield importlib.import_module("make_sample")


@pytest.fixture(scope="module")
def both(script: ModuleType, tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Path]:
    """The sample project made again: with its faults, and clean."""
    folders = tmp_path_factory.mktemp("remade"), tmp_path_factory.mktemp("clean")
    made = script.build()
    script.write(made, folders[0])
    script.write(made, folders[1], clean=True)
    return folders


@pytest.fixture(scope="module")
def remade(both: tuple[Path, Path]) -> Path:
    return both[0]


@pytest.fixture(scope="module")
def faults() -> dict[str, dict]:
    listed = json.loads((SAMPLE / "planted_faults.json").read_text(encoding="utf-8"))["faults"]
    return {fault["fault"]: fault for fault in listed}


@pytest.fixture(scope="module")
def truth() -> np.ndarray:
    return read(SAMPLE / "truth.tif")


@pytest.fixture(scope="module")
def names() -> dict[int, str]:
    return {item.code: item.name for item in load_project(SAMPLE).classes}


def clear_pixels() -> np.ndarray:
    unmasked = (read(SAMPLE / "scene" / "mask.tif") == MASK_CLEAR).repeat(2, axis=0).repeat(2, axis=1)
    return unmasked & (read(SAMPLE / "scene" / "red.tif") > 0)


def polygons_with_shares(truth: np.ndarray) -> gpd.GeoDataFrame:
    """Training polygons on the scene's grid with `codes`, the true covers of their pixels, and `clear`, a share."""
    with rasterio.open(SAMPLE / "truth.tif") as source:
        transform, crs = source.transform, source.crs
    frame, clear = gpd.read_file(SAMPLE / "training.gpkg").to_crs(crs), clear_pixels()
    inside = [geometry_mask([shape], truth.shape, transform, invert=True) for shape in frame.geometry]
    frame["codes"] = [truth[pixels] for pixels in inside]
    frame["clear"] = [clear[pixels].mean() for pixels in inside]
    return frame


# Other machines round otherwise in the last bit, which may move a pixel across a threshold now and then.
def test_script_still_makes_the_rasters(remade: Path):
    assert len(RASTERS) == 13
    for name in RASTERS:
        with rasterio.open(SAMPLE / name) as kept, rasterio.open(remade / name) as made:
            assert (kept.crs, kept.transform, kept.dtypes, kept.nodata) == (
                made.crs,
                made.transform,
                made.dtypes,
                made.nodata,
            )
            same = kept.read() == made.read()
        assert same.mean() > 0.998, name


@pytest.mark.parametrize(("layer", "column"), [("training.gpkg", "cover"), ("reference.gpkg", "observed")])
def test_script_still_makes_the_layers(remade: Path, layer: str, column: str):
    tables = [gpd.read_file(folder / layer) for folder in (SAMPLE, remade)]
    assert tables[0].crs == tables[1].crs
    kept, made = (set(zip(t[column], t.geometry.to_wkt(rounding_precision=5), strict=True)) for t in tables)
    assert len(kept & made) >= 0.97 * max(len(kept), len(made))


def test_script_still_makes_the_design(remade: Path):
    kept, made = (json.loads((f / "reference_design.json").read_text(encoding="utf-8")) for f in (SAMPLE, remade))
    assert (kept["kind"], kept["seed"]) == (made["kind"], made["seed"])
    a, b = (pd.DataFrame(design["strata"]).set_index("stratum") for design in (kept, made))
    assert list(a.mapped_as) == list(b.mapped_as)
    np.testing.assert_allclose(a[["area_m2", "pixels"]], b[["area_m2", "pixels"]], rtol=2e-3)
    assert (a.n - b.n).abs().max() <= 1


def test_clean_variant_differs_by_the_faults_alone(both: tuple[Path, Path], faults: dict[str, dict]):
    remade, clean = both
    assert json.loads((clean / "planted_faults.json").read_text(encoding="utf-8"))["faults"] == []
    with_faults, without = gpd.read_file(remade / "training.gpkg"), gpd.read_file(clean / "training.gpkg")
    assert len(with_faults) == len(without) + 2
    common = with_faults.iloc[: len(without)]
    assert common.geometry.geom_equals(without.geometry).all()
    assert list(np.flatnonzero(common.cover != without.cover) + 1) == [faults["mislabelled"]["polygon"]]
    assert (clean / "reference.gpkg").read_bytes() == (remade / "reference.gpkg").read_bytes()  # the same bytes twice
    assert (clean / "scene" / "swir_2.tif").read_bytes() == (remade / "scene" / "swir_2.tif").read_bytes()


def test_project_file_loads_and_names_files_that_exist():
    project = load_project(SAMPLE)
    written = [band.file for band in project.scene.bands.values()]
    written += [project.scene.mask.file, project.training.polygons, project.reference.points, project.reference.design]
    assert len(project.scene.bands) == 10 and all(Path(project.path(name)).is_file() for name in written)
    # The truth is for tests: the pipeline has no way to it.
    assert "truth" not in (SAMPLE / "project.toml").read_text(encoding="utf-8")
    codes = np.unique(read(SAMPLE / project.scene.mask.file))
    assert set(codes) - set(project.scene.mask.reject) == {MASK_CLEAR}


def test_size_stays_small():
    kept = [p for p in SAMPLE.rglob("*") if p.is_file() and not {"outputs", "__pycache__"} & set(p.parts)]
    assert sum(path.stat().st_size for path in kept) < 6_000_000


def test_polygons_carry_the_planted_faults_and_no_others(
    truth: np.ndarray, names: dict[int, str], faults: dict[str, dict]
):
    frame = polygons_with_shares(truth)
    assert 60 <= len(frame) <= 100 and frame.cover.isin(names.values()).all()
    majority = [names[Counter(codes.tolist()).most_common(1)[0][0]] for codes in frame.codes]
    wrong = {int(n) + 1 for n in np.flatnonzero(frame.cover != majority)}
    mislabelled, overlap, cloudy = (
        faults[k] for k in ("mislabelled", "overlap with conflicting labels", "half under cloud")
    )
    assert wrong == {mislabelled["polygon"], overlap["polygon"]}
    assert majority[mislabelled["polygon"] - 1] == mislabelled["true"]
    pairs = gpd.sjoin(frame[["cover", "geometry"]], frame[["cover", "geometry"]], predicate="overlaps")
    pairs = pairs[pairs.cover_left != pairs.cover_right]
    conflicts = set(zip(pairs.index + 1, pairs.index_right + 1, strict=True))
    expected = (overlap["polygon"], overlap["overlaps"])
    assert conflicts == {expected, expected[::-1]}
    assert list(np.flatnonzero(frame.clear < 1) + 1) == [cloudy["polygon"]]
    assert 0.4 < frame.clear.iloc[cloudy["polygon"] - 1] < 0.6


def test_reference_sample_agrees_with_its_design(truth: np.ndarray, names: dict[int, str]):
    design = json.loads((SAMPLE / "reference_design.json").read_text(encoding="utf-8"))
    points = gpd.read_file(SAMPLE / "reference.gpkg")
    mapped = read(SAMPLE / "first_map.tif")
    assert design["map"]["file"] == "first_map.tif"
    assert design["map"]["sha256"] == sha256(SAMPLE / "first_map.tif")
    assert 500 <= len(points) <= 700 and set(design["points"]) == {str(n) for n in points.id}
    with rasterio.open(SAMPLE / "first_map.tif") as source:
        rows, cols = rasterio.transform.rowcol(source.transform, points.geometry.x, points.geometry.y)
        assert design["map"]["grid"] == [*tuple(source.transform)[:6], source.height, source.width]
    there = [names[code] for code in mapped[rows, cols]]
    assert there == [design["points"][str(n)]["stratum"] for n in points.id]
    told = [(design["points"][str(n)]["row"], design["points"][str(n)]["col"]) for n in points.id]
    assert list(zip(rows, cols, strict=True)) == told
    assert len(set(told)) == len(points)
    drawn = Counter(there)
    for stratum in design["strata"]:
        code = next(k for k, name in names.items() if name == stratum["mapped_as"])
        assert (stratum["pixels"], stratum["n"]) == ((mapped == code).sum(), drawn[stratum["stratum"]])
        assert stratum["n"] >= 50
    # The population is the clear part of the scene, and all of it.
    assert np.array_equal(mapped > 0, clear_pixels())
    mistakes = int((points.observed != [names[c] for c in truth[rows, cols]]).sum())
    assert 0.02 < mistakes / len(points) < 0.04
    # Within strata every pixel is equally likely: rows of the sample spread as rows of the stratum do.
    grass = np.array([name == "Dry grass" for name in there])
    all_rows = np.nonzero(mapped == 3)[0]
    assert stats.ks_2samp(np.asarray(rows)[grass], all_rows).pvalue > 0.01


def test_strata_areas_are_ground_areas_on_the_ellipsoid():
    # Referee: pyproj's geodesic area (Karney 2013) of the grid's outer ring, against the sum of all pixels.
    design = json.loads((SAMPLE / "reference_design.json").read_text(encoding="utf-8"))
    mapped = read(SAMPLE / "first_map.tif")
    with rasterio.open(SAMPLE / "first_map.tif") as source:
        box, crs = source.bounds, source.crs
    steps = np.linspace(0, 1, 60, endpoint=False)
    x = np.concatenate(
        [box.left + steps * 7000, np.full(60, box.right), box.right - steps * 7000, np.full(60, box.left)]
    )
    y = np.concatenate(
        [np.full(60, box.bottom), box.bottom + steps * 6000, np.full(60, box.top), box.top - steps * 6000]
    )
    lon, lat = Transformer.from_crs(crs, 4326, always_xy=True).transform(x, y)
    per_pixel = abs(Geod(ellps="WGS84").polygon_area_perimeter(lon, lat)[0]) / mapped.size
    total = sum(stratum["area_m2"] for stratum in design["strata"])
    # Within the small basin the scale changes by 3e-5 from side to side, so the mean of the clear part lies that close.
    assert total / (mapped > 0).sum() == pytest.approx(per_pixel, rel=1e-5)
    assert abs(total / (mapped > 0).sum() / 100 - 1) > 1e-4  # and is not the area in the projection


def test_dry_grass_and_soils_part_in_the_short_wave_infrared_only(truth: np.ndarray):
    # Common practice, no source: dry plants and soils look alike up to the near infrared. Separation is the area under
    # the receiver operating curve of the best ratio of two bands (Mann-Whitney): 0.5 is none, 1 is full.
    pure = clear_pixels()[::2, ::2] & np.all(
        [truth[i::2, j::2] == truth[::2, ::2] for i in (0, 1) for j in (0, 1)], axis=0
    )
    pure &= np.isin(truth[::2, ::2], (3, 4, 5))
    cover = truth[::2, ::2][pure]
    bands = {}
    for role in load_project(SAMPLE).scene.bands:
        values = read(SAMPLE / "scene" / f"{role}.tif") * 0.0004 - 0.02
        bands[role] = (values if values.shape == pure.shape else values.reshape(300, 2, 350, 2).mean(axis=(1, 3)))[pure]

    def separation(roles: list[str], a: int, b: int) -> float:
        areas = []
        for first in roles:
            for second in roles[: roles.index(first)]:
                ratio = bands[first] / bands[second]
                u = stats.mannwhitneyu(ratio[cover == a], ratio[cover == b]).statistic
                areas.append(u / ((cover == a).sum() * (cover == b).sum()))
        return max(max(area, 1 - area) for area in areas)

    grass, clay, sand = 3, 4, 5
    visible = ["blue", "green", "red", "red_edge_1", "red_edge_2", "red_edge_3", "nir", "nir_narrow"]
    for a, b in ((grass, clay), (grass, sand), (clay, sand)):
        assert separation(["swir_1", "swir_2"], a, b) > 0.93
        assert separation(visible, a, b) < 0.80, (a, b)


def test_spectra_come_from_the_leaf_and_canopy_models(tmp_path: Path):
    # PROSPECT-D and 4SAIL of the package prosail, run again; four places are kept in the table.
    pytest.importorskip("prosail")
    code = "import sys; from pathlib import Path; from maker import spectra; spectra.write(Path(sys.argv[1]))"
    subprocess.run([sys.executable, "-c", code, str(tmp_path / "spectra.csv")], cwd=SAMPLE, check=True)
    kept, made = (pd.read_csv(folder / "spectra.csv") for folder in (SAMPLE, tmp_path))
    assert list(kept.cover + kept.variant) == list(made.cover + made.variant)
    np.testing.assert_allclose(kept.iloc[:, 2:], made.iloc[:, 2:], atol=2e-4)


def test_readme_states_the_counts_that_the_files_have():
    text = (SAMPLE / "README.md").read_text(encoding="utf-8")
    assert int(re.search(r"(\d+) polygons", text)[1]) == len(gpd.read_file(SAMPLE / "training.gpkg"))
    assert int(re.search(r"(\d+) points", text)[1]) == len(gpd.read_file(SAMPLE / "reference.gpkg"))
