"""Extraction against a dense reference: the whole scene in memory, one GDAL mask per polygon."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import pytest
import rasterio.features
from small_project import CRS, HEIGHT, WIDTH, pixel_box

from classify.errors import DataError, TrainingError
from classify.features import build_recipe
from classify.raster.scene import Scene, open_scene
from classify.settings import Project, load_project
from classify.training import PixelCaps, TrainingSet, extract_pixels, read_pixels, read_polygons, write_pixels


def opened(folder: Path) -> tuple[Project, Scene]:
    project = load_project(folder)
    return project, open_scene(project.scene, project)


NO_CAPS = PixelCaps()


def extract(folder: Path, jobs: int = 1, caps: PixelCaps = NO_CAPS) -> TrainingSet:
    project, scene = opened(folder)
    recipe = build_recipe(project.features, scene.roles)
    return extract_pixels(read_polygons(project, scene.grid), scene, recipe, jobs, caps=caps)


def draw(folder: Path, shapes: list[tuple[str, object]]) -> None:
    frame = gpd.GeoDataFrame(
        {"cover": [label for label, _ in shapes]}, geometry=[shape for _, shape in shapes], crs=CRS
    )
    (folder / "training.gpkg").unlink()
    frame.to_file(folder / "training.gpkg", layer="training")


def whole_scene(scene: Scene) -> dict[str, np.ndarray]:
    with scene.open() as reader:
        return reader.read(scene.grid.window)


def test_same_pixels_and_values_as_one_mask_per_polygon(small_project: Path) -> None:
    project, scene = opened(small_project)
    training = extract(small_project)
    layers = whole_scene(scene)
    frame = gpd.read_file(small_project / "training.gpkg")
    ndvi = (layers["nir"] - layers["red"]) / (layers["nir"] + layers["red"])
    stack = np.stack([*(layers[role] for role in ("blue", "green", "red", "nir")), ndvi], axis=-1)
    assert training.feature_names == ("blue", "green", "red", "nir", "ndvi")
    seen = 0
    for number, (label, shape) in enumerate(zip(frame["cover"], frame.geometry, strict=True), start=1):
        inside = rasterio.features.rasterize([shape], (HEIGHT, WIDTH), transform=scene.grid.transform).astype(bool)
        valid = inside & np.isfinite(stack).all(axis=-1)
        mine = training.polygon == number
        assert np.array_equal(np.stack([training.rows[mine], training.cols[mine]]), np.nonzero(valid))
        np.testing.assert_allclose(training.features[mine], stack[valid], rtol=1e-6)
        np.testing.assert_array_equal(training.reflectance[mine], stack[valid][:, :4])
        code = {c.name: c.code for c in project.classes}[label]
        assert (training.codes[mine] == code).all()
        row = training.table.set_index("polygon").loc[number]
        assert (row["pixels"], row["used"], row["invalid"]) == (inside.sum(), valid.sum(), inside.sum() - valid.sum())
        seen += int(valid.sum())
    assert seen == len(training.codes) > 1000
    assert (training.table["invalid"] > 0).any()


def test_more_workers_give_the_same_set(small_project: Path) -> None:
    assert extract(small_project, jobs=1).digest() == extract(small_project, jobs=4).digest()


def test_overlaps_of_two_classes_are_listed_and_left_out_and_of_one_class_counted_once(small_project: Path) -> None:
    draw(small_project, [
        ("Pasture", pixel_box(10, 80, 6, 6)), ("Bare soil", pixel_box(10, 84, 6, 6)),
        ("Bare soil", pixel_box(10, 88, 6, 6)), ("Water", pixel_box(40, 60, 6, 6)),
        ("Pasture", pixel_box(60, 100, 0.4, 0.4)),
    ])  # fmt: skip
    training = extract(small_project)
    table = training.table.set_index("polygon")
    assert training.conflicts.values.tolist() == [[1, 2, 12]]
    assert table["conflicting"].tolist() == [12, 12, 0, 0, 0]
    assert table["repeated"].tolist() == [0, 0, 12, 0, 0]
    assert table["used"].tolist() == [24, 24, 24, 36, 0]
    taken = pd.DataFrame({"row": training.rows, "col": training.cols})
    assert not taken.duplicated().any()
    assert not taken[(taken["row"] == 10) & taken["col"].isin([84, 85])].any(axis=None)
    text = "\n".join(map(str, training.problems))
    assert "polygons 1 and 2 of different classes claim the same pixels (12)" in text
    assert "polygon 5 holding no pixel centre" in text


class Smooth:
    """A feature that looks at neighbours: the 3 x 3 mean of one band."""

    names = ("smooth",)
    needs = ("nir",)
    halo_px = 1

    def compute(self, layers: Mapping[str, np.ndarray]) -> np.ndarray:
        nir = layers["nir"]
        height, width = nir.shape[0] - 2, nir.shape[1] - 2
        parts = [nir[i : i + height, j : j + width] for i in range(3) for j in range(3)]
        return np.mean(parts, axis=0, dtype=np.float64).astype(np.float32)[None]


def test_features_that_look_at_neighbours_do_not_depend_on_how_the_scene_is_cut(small_project: Path) -> None:
    project, scene = opened(small_project)
    training = extract_pixels(read_polygons(project, scene.grid), scene, Smooth())  # type: ignore[arg-type]
    with scene.open() as reader:
        dense = Smooth().compute(reader.read(scene.grid.window, halo_px=1))[0]
    np.testing.assert_array_equal(training.features[:, 0], dense[training.rows, training.cols])
    assert len(training.codes) > 1000


def test_caps_are_seeded_and_even(small_project: Path) -> None:
    few = extract(small_project, caps=PixelCaps(per_polygon=5, per_class=40, seed=3))
    assert np.bincount(few.polygon).max() <= 5
    for code in few.class_codes:
        polygons = len(np.unique(few.polygon[few.codes == code]))
        assert (few.codes == code).sum() == min(40, 5 * polygons)
    assert few.digest() == extract(small_project, caps=PixelCaps(per_polygon=5, per_class=40, seed=3)).digest()
    assert few.digest() != extract(small_project, caps=PixelCaps(per_polygon=5, per_class=40, seed=4)).digest()
    assert few.table["used"].sum() == len(few.codes)


def test_nothing_usable_is_one_clear_message(small_project: Path) -> None:
    draw(small_project, [("Pasture", pixel_box(70, 90, 6, 6)), ("Water", pixel_box(72, 98, 6, 6))])
    with pytest.raises(TrainingError, match="every training pixel is masked"):
        extract(small_project)
    draw(small_project, [("Pasture", pixel_box(20, 90, 0.3, 0.3))])
    with pytest.raises(TrainingError, match="no polygon holds the centre of a pixel"):
        extract(small_project)


def test_a_feature_without_any_value_is_named(small_project: Path) -> None:
    text = (small_project / "project.toml").read_text()
    text = text.replace('indices = ["ndvi"]', 'indices = ["ndvi"]\nformulas = { broken = "sqrt(0 - 1 - nir)" }')
    (small_project / "project.toml").write_text(text)
    with pytest.raises(TrainingError, match="no training pixel has a value for: broken"):
        extract(small_project)


def test_pixels_file_gives_the_set_back(small_project: Path) -> None:
    training = extract(small_project)
    path = small_project / "outputs" / "training" / "pixels.parquet"
    write_pixels(training, path, {"any": "recipe"})
    back = read_pixels(path)
    assert back.digest() == training.digest()
    assert back.grid == training.grid
    assert back.problems == training.problems
    assert back.feature_names == training.feature_names and back.roles == training.roles
    assert back.wavelengths_nm == training.wavelengths_nm
    np.testing.assert_array_equal(back.reflectance, training.reflectance)
    pd.testing.assert_frame_equal(back.table, training.table, check_dtype=False)
    (small_project / "no.parquet").write_bytes(b"PAR1 but not really")
    with pytest.raises(DataError, match="not a file of training pixels"):
        read_pixels(small_project / "no.parquet")
    with pytest.raises(DataError, match="no such file"):
        read_pixels(small_project / "nowhere.parquet")
