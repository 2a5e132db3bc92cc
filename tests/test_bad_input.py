"""What users get wrong: one clear message that names file or key, exit code 1, no traceback, nothing written."""

from __future__ import annotations

import re
from pathlib import Path

import geopandas as gpd
import pytest
import rasterio
from click.testing import CliRunner
from shapely.geometry import Polygon
from small_project import HEIGHT, WIDTH, pixel_box

from classify.cli.main import cli
from classify.errors import LandassayError


def run(folder: Path, command: str = "run"):
    """(exit code, message) of a command; any exception that is not ours fails the test."""
    result = CliRunner().invoke(cli, [command, "--project", str(folder), "--quiet"])
    if result.exception is not None and not isinstance(result.exception, SystemExit | LandassayError):
        raise result.exception
    return (
        (1, str(result.exception))
        if isinstance(result.exception, LandassayError)
        else (result.exit_code, result.stderr)
    )


def edit(folder: Path, old: str, new: str) -> None:
    file = folder / "project.toml"
    text = file.read_text(encoding="utf-8")
    assert old in text
    file.write_text(text.replace(old, new), encoding="utf-8")


def change_polygons(folder: Path, change) -> None:
    file = folder / "training.gpkg"
    frame = change(gpd.read_file(file))
    file.unlink()
    frame.to_file(file, layer="training")


def missing_raster(folder):
    (folder / "bands.tif").unlink()


def truncated_raster(folder):
    content = (folder / "bands.tif").read_bytes()
    (folder / "bands.tif").write_bytes(content[: len(content) // 3])


def not_a_raster(folder):
    (folder / "bands.tif").write_text("red green blue")


def raster_without_crs(folder):
    with rasterio.open(folder / "bands.tif") as source:
        profile, values = source.profile, source.read()
    profile.pop("crs")
    with rasterio.open(folder / "bands.tif", "w", **profile) as target:
        target.write(values)


def polygons_without_crs(folder):
    change_polygons(folder, lambda frame: frame.set_crs(None, allow_override=True))


def polygons_elsewhere(folder):
    change_polygons(folder, lambda frame: frame.set_geometry(frame.translate(1_000_000, 0)))


def polygons_all_masked(folder):
    def under_cloud(frame):
        return frame.iloc[:2].set_geometry([pixel_box(71, 91, 4, 4), pixel_box(75, 96, 4, 6)], crs=frame.crs)

    change_polygons(folder, under_cloud)


def unknown_label(folder):
    change_polygons(folder, lambda frame: frame.assign(cover=frame["cover"].replace("Water", "Watr")))


def missing_label_column(folder):
    change_polygons(folder, lambda frame: frame.rename(columns={"cover": "kind"}))


def empty_layer(folder):
    change_polygons(folder, lambda frame: frame.iloc[:0])


def one_class_only(folder):
    change_polygons(folder, lambda frame: frame[frame["cover"] == "Pasture"])


def too_few_pixels(folder):
    def one_tiny(frame):
        tiny = gpd.GeoDataFrame({"cover": ["Water"]}, geometry=[pixel_box(48, 60, 1, 1)], crs=frame.crs)
        return gpd.GeoDataFrame(
            {"cover": [*frame[frame["cover"] != "Water"]["cover"], *tiny["cover"]]},
            geometry=[*frame[frame["cover"] != "Water"].geometry, *tiny.geometry], crs=frame.crs,
        )  # fmt: skip

    change_polygons(folder, one_tiny)


def index_without_its_band(folder):
    edit(folder, 'indices = ["ndvi"]', 'indices = ["ndti"]')


def unknown_index(folder):
    edit(folder, 'indices = ["ndvi"]', 'indices = ["ndvj"]')


def broken_formula(folder):
    edit(folder, 'indices = ["ndvi"]', 'formulas = { mine = "nir / (red +" }')


def wrong_type(folder):
    edit(folder, "trees = 30", 'trees = "many"')


def no_such_polygon_file(folder):
    (folder / "training.gpkg").unlink()


def reference_without_label_column(folder):
    edit(folder, 'label = "observed"', 'label = "seen"')


CASES = {
    missing_raster: (r"bands\.tif", "no such file|does not exist|missing"),
    truncated_raster: (r"bands\.tif", "read"),
    not_a_raster: (r"bands\.tif", "raster|read|format"),
    raster_without_crs: (r"bands\.tif", "CRS|coordinate reference system"),
    no_such_polygon_file: (r"training\.gpkg", "no such file|does not exist|missing"),
    polygons_without_crs: (r"training\.gpkg", "CRS|coordinate reference system"),
    polygons_elsewhere: (r"training\.gpkg", "outside"),
    polygons_all_masked: ("", "masked|invalid|clear|usable|missing"),
    unknown_label: (r"training\.gpkg", "'Watr'(?s:.*)Water"),
    missing_label_column: (r"training\.gpkg", "'cover'(?s:.*)kind"),
    empty_layer: (r"training\.gpkg", "no polygon|empty|no feature"),
    one_class_only: ("", "one class only"),
    too_few_pixels: ("", "'Water'(?s:.*)pixel"),
    index_without_its_band: ("features.indices", "swir"),
    unknown_index: ("features.indices", "'ndvj'(?s:.*)ndvi"),
    broken_formula: (r"features.formulas.mine", r"\^"),
    wrong_type: ("model.trees", "'many'"),
    reference_without_label_column: (r"reference\.gpkg", "'seen'(?s:.*)observed"),
}


@pytest.mark.parametrize("spoil", CASES, ids=lambda spoil: spoil.__name__)
def test_check_and_train_say_what_is_wrong_and_write_nothing(small_project, spoil):
    spoil(small_project)
    where, what = CASES[spoil]
    before = {path: path.read_bytes() for path in small_project.rglob("*") if path.is_file()}
    for command in ("check",) if spoil is reference_without_label_column else ("check", "train"):
        code, message = run(small_project, command)
        assert code == 1, command
        assert re.search(where, message), message
        assert re.search(what, message), message
        assert "Traceback" not in message
    after = {path: path.read_bytes() for path in small_project.rglob("*") if path.is_file()}
    assert after == before


def test_a_class_with_one_polygon_is_mapped_and_said_not_to_be_screened(small_project):
    def one_lake(frame):
        water = frame[frame["cover"] == "Water"].index[1:]
        return frame.drop(index=water)

    change_polygons(small_project, one_lake)
    result = CliRunner().invoke(cli, ["train", "--project", str(small_project)], catch_exceptions=False)
    assert result.exit_code == 0
    assert re.search(r"'Water' has one usable polygon", result.stderr)


def test_a_broken_geometry_is_repaired_and_said_so(small_project):
    def bow_tie(frame):
        x0, y0, x1, y1 = pixel_box(80, 100, 8, 8).bounds
        crossed = Polygon([(x0, y0), (x1, y1), (x1, y0), (x0, y1)])
        shapes = [*frame.geometry, crossed]
        return gpd.GeoDataFrame({"cover": [*frame["cover"], "Pasture"]}, geometry=shapes, crs=frame.crs)

    change_polygons(small_project, bow_tie)
    result = CliRunner().invoke(cli, ["check", "--project", str(small_project)], catch_exceptions=False)
    assert result.exit_code == 0
    assert "repaired" in result.stderr


def test_all_problems_of_a_project_are_listed_together(small_project):
    unknown_label(small_project)
    unknown_index(small_project)
    reference_without_label_column(small_project)
    code, message = run(small_project, "check")
    assert code == 1
    for part in ("'Watr'", "'ndvj'", "'seen'"):
        assert part in message


def test_the_miniature_itself_has_no_problem(small_project):
    assert (HEIGHT, WIDTH) == (96, 120)
    code, _ = run(small_project, "check")
    assert code == 0
