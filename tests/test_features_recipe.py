"""Recipes: built with every problem at once, the same features however a scene is cut, the same from JSON."""

from __future__ import annotations

import json
from typing import get_args

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from classify.errors import ModelError, SettingsError
from classify.features import Recipe, SceneFacts, build_recipe, dips, recipe_findings
from classify.features.absorption import DIP_MEASURES, EDGE_MEASURES
from classify.settings import FeatureSettings
from classify.settings.features import TerrainStatistic, TextureStatistic

ROLES = ("blue", "green", "red", "nir", "swir_1", "swir_2")
CUBE = {f"c{nm}": float(nm) for nm in range(650, 2420, 20)}
FACTS = SceneFacts(
    dict(zip(ROLES, (490.0, 560.0, 665.0, 842.0, 1610.0, 2200.0), strict=True)) | CUBE,
    frozenset({"elevation", "clear_count"}), (10.0, 0.0, 0.0, -10.0), (300, 300),
)  # fmt: skip
LAYERS = (*ROLES, *CUBE, "nir@wet", "red@wet", "elevation", "clear_count")


def build(facts: SceneFacts = FACTS, roles: tuple[str, ...] = LAYERS, **features: object) -> Recipe:
    return build_recipe(FeatureSettings.model_validate(features), roles, facts)


def problems(**features: object) -> str:
    with pytest.raises(SettingsError) as raised:
        build(**features)
    return str(raised.value)


def test_features_come_in_order_and_only_what_they_need_is_read():
    recipe = build(
        bands=["red", "nir"], layers=["clear_count"], indices=["NDTI", "ndvi@wet"],
        formulas={"later": "earlier + ndvi", "earlier": "blue * 2"},
    )  # fmt: skip
    assert recipe.names == ("red", "nir", "clear_count", "ndti", "ndvi@wet", "later", "earlier")
    assert set(recipe.needs) == {"red", "nir", "clear_count", "swir_1", "swir_2", "nir@wet", "red@wet", "blue"}
    assert recipe.halo_px == 0


def test_all_bands_are_those_of_the_main_date_without_other_layers():
    assert build().names == (*ROLES, *CUBE)
    assert build(bands="all dates").names == (*ROLES, *CUBE, "nir@wet", "red@wet")


def test_bad_bands_are_left_out_unless_named():
    recipe = build(bad_bands_nm=[(700, 2000)], formulas={"x": "c890 / nir"})
    assert "c690" in recipe.names
    assert "c890" not in recipe.names
    assert "nir" not in recipe.names  # 842 nm
    assert {"c890", "nir"} <= set(recipe.needs)


def test_an_index_on_one_date_reads_that_date():
    recipe = build(bands=[], indices=["ndvi", "ndvi@wet"], formulas={"change": "ndvi@wet - ndvi"})
    values = {"nir": 0.4, "red": 0.1, "nir@wet": 0.5, "red@wet": 0.05}
    out = recipe.compute({name: np.full((1, 2), value, np.float32) for name, value in values.items()})
    np.testing.assert_allclose(out[:, 0, 1], [0.6, 0.45 / 0.55, 0.45 / 0.55 - 0.6], rtol=1e-6)


def test_a_band_may_be_called_by_its_wavelength():
    recipe = build(bands=[], formulas={"x": "nm_1697 / nm_2101"})
    assert set(recipe.needs) == {"c1690", "c2110"}
    assert "within 10 nm of 2500 nm" in problems(formulas={"x": "nm_2500 + red"})


def test_every_problem_is_reported_at_once():
    text = problems(
        bands=["red", "near", "red"], layers=["elevatoin"], indices=["ndvii", "ndre", "ndvi", "ndvi"],
        formulas={"a": "b", "b": "a", "c": "red +", "d": "reed / nir", "e": "1 + 2",
                  "nir": "red", "f": "c", "ndbi": "red"},
        texture=[{"of": "sand", "statistic": "mean"}, {"of": "elevation", "statistic": "entropy"},
                 {"of": "red", "statistic": "mean", "size": 101}],
        absorption=[{"dip": "clay", "measures": ["depth"]}, {"dip": "red_edge", "measures": ["area"]}],
        components={"count": 3, "of": ["red", "nir"]},
    )  # fmt: skip
    for part in (
        "features.bands: the scene has no band 'near'", "features.bands: 'red' is listed twice",
        "features.layers: the scene has no layer 'elevatoin'", "did you mean 'elevation'?",
        "no index 'ndvii'", "did you mean 'ndvi'?", "index 'ndre' needs band 'red_edge_1'",
        "index 'ndvi' is listed twice",
        "round in a circle: a -> b -> a", "features.formulas.c: the formula ends", "no layer and no feature 'reed'",
        "    reed / nir\n    ^", "uses no layer", "features.formulas.nir: 'nir' is already the name of a layer",
        "features.formulas.ndbi: 'ndbi' is already the name of an index",
        "features.texture[1]: there is no layer and no",
        "features.texture[2]: entropy of 'elevation' needs a range",
        "features.absorption[1].dip: there is no absorption",
        "features.absorption[2].measures: red_edge has no area", "features.components.count: 3 components need as many",
    ):  # fmt: skip
        assert part in text, part
    assert "no feature 'c'" not in text  # it is there, only broken


@pytest.mark.parametrize("size", [4, 2, 0, -3, 103])
def test_a_window_is_odd_and_within_reason(size):
    with pytest.raises(ValueError, match=r"odd|greater than or equal|less than or equal"):
        FeatureSettings.model_validate({"texture": [{"of": "nir", "statistic": "mean", "size": size}]})


def test_a_window_larger_than_the_scene_is_refused():
    small = SceneFacts(shape_yx=(40, 9), pixel_m=FACTS.pixel_m)
    for features in (
        {"texture": [{"of": "nir", "statistic": "mean", "size": 11}]},
        {"terrain": [{"statistic": "topographic position", "size": 11}]},
    ):
        with pytest.raises(SettingsError, match="11 x 11 pixels does not fit the scene, which has 9 x 40"):
            build(small, **features)


def test_terrain_without_a_pixel_size_is_refused():
    with pytest.raises(SettingsError, match="ground size of a pixel"):
        build(SceneFacts(), terrain=[{"statistic": "slope"}])


def test_no_features_at_all_is_refused():
    assert "no features" in problems(bands=[])


def test_smoothing_needs_a_spectrum():
    few = SceneFacts({role: FACTS.wavelengths_nm[role] for role in ROLES})
    with pytest.raises(SettingsError, match="over 9 bands needs as many of different wavelength, and there are 6"):
        build(few, ROLES, smoothing={"window": 9})


def test_few_broad_bands_are_told_of_the_nearest_index():
    multispectral = SceneFacts({role: FACTS.wavelengths_nm[role] for role in ROLES})
    for name, dip in dips().items():
        with pytest.raises(SettingsError, match=f"nearest to it for broad bands is '{dip.instead}'"):
            build(multispectral, ROLES, absorption=[{"dip": name, "measures": ["depth"]}])
        build(multispectral, ROLES, indices=[dip.instead])  # which must be one that such a sensor has
    with pytest.raises(SettingsError, match="is 'red_edge_linear'"):
        build(multispectral, ROLES, absorption=[{"dip": "red_edge", "measures": ["slope"]}])


EVERYTHING = {
    "bands": ["nir", "red"],
    "indices": ["ndvi", "bsi", "gemi"],
    "formulas": {"rough": "nir_range_3 / ndvi_mean_5", "odd": "where(rough > 1, log(nir), exp(red) ^ 1.3)"},
    "texture": [
        *({"of": "nir", "statistic": statistic, "size": 3} for statistic in get_args(TextureStatistic)),
        {"of": "ndvi", "statistic": "mean", "size": 5},
        {"of": "rough", "statistic": "standard deviation", "size": 7, "name": "rougher"},
        {"of": "red@wet", "statistic": "entropy", "size": 5, "levels": 8, "range": [0.1, 0.6]},
    ],
    "terrain": [{"statistic": statistic, "size": 5} for statistic in get_args(TerrainStatistic)],
    "absorption": [
        *({"dip": dip, "measures": list(DIP_MEASURES)} for dip in dips()),
        {"dip": "red_edge", "measures": list(EDGE_MEASURES)},
    ],
    "smoothing": {"window": 5, "order": 2},
}


def scene_of(seed: int, height: int, width: int) -> dict[str, np.ndarray]:
    rng = np.random.default_rng(seed)
    layers = {name: rng.uniform(0.2, 0.5, (height, width)).astype(np.float32) for name in LAYERS}
    for layer in layers.values():
        layer[rng.random((height, width)) < 0.02] = np.nan
        layer[rng.random((height, width)) < 0.01] = 0.0
    return layers


def cut(layers: dict[str, np.ndarray], recipe: Recipe, rows: int, cols: int) -> np.ndarray:
    """Features of a scene computed in blocks, read as a scene's reader does: with the halo, NaN beyond the scene."""
    height, width = layers["nir"].shape
    pad = recipe.halo_px
    padded = {name: np.pad(layers[name], pad, constant_values=np.nan) for name in recipe.needs}
    out = np.empty((len(recipe.names), height, width), np.float32)
    for row in range(0, height, rows):
        for col in range(0, width, cols):
            part = np.s_[row : row + rows + 2 * pad, col : col + cols + 2 * pad]
            block = {name: layer[part].copy() for name, layer in padded.items()}
            out[:, row : row + rows, col : col + cols] = recipe.compute(block)
    return out


@pytest.fixture(scope="module")
def everything() -> Recipe:
    return build(**EVERYTHING)


@given(st.integers(0, 2**32), st.tuples(*[st.integers(1, 40)] * 2), st.tuples(*[st.integers(4, 40)] * 2))
@settings(max_examples=10, deadline=None)
def test_features_do_not_depend_on_how_the_scene_is_cut(everything, seed, scene_yx, block_yx):
    layers = scene_of(seed, *scene_yx)
    whole = cut(layers, everything, *scene_yx)
    assert not np.isinf(whole).any()
    for name, one, other in zip(everything.names, whole, cut(layers, everything, *block_yx), strict=True):
        assert one.tobytes() == other.tobytes(), name


def test_blocks_of_64_256_and_1000_give_the_bytes_of_the_whole():
    recipe = build(**{**EVERYTHING, "absorption": EVERYTHING["absorption"][:1]})
    layers = scene_of(3, 300, 280)
    whole = cut(layers, recipe, 300, 280)
    assert np.isfinite(whole).mean() > 0.5
    for size in (64, 256, 1000):
        assert whole.tobytes() == cut(layers, recipe, size, size).tobytes(), size


def test_the_halo_is_what_the_longest_chain_of_windows_needs(everything):
    # rougher (7: 3 px) of rough, of nir_range_3 (1 px) and ndvi_mean_5 (2 px)
    assert everything.halo_px == 5
    layers = scene_of(1, 31, 31)
    for name in everything.needs:
        layers[name] = np.nan_to_num(layers[name], nan=0.3)
    near = {name: layer.copy() for name, layer in layers.items()}
    far = {name: layer.copy() for name, layer in layers.items()}
    for name in everything.needs:
        near[name][15 - 5, 15] += 1.0
        far[name][15 - 6, 15] += 1.0
    base, close, beyond = (cut(scene, everything, 31, 31)[:, 15, 15] for scene in (layers, near, far))
    place = everything.names.index("rougher")
    assert close[place] != base[place]
    np.testing.assert_array_equal(beyond, base)


def test_a_recipe_survives_json(everything):
    again = Recipe.from_json(json.loads(json.dumps(everything.to_json(), allow_nan=False)))
    assert again == everything
    layers = scene_of(5, 20, 20)
    assert cut(layers, again, 20, 20).tobytes() == cut(layers, everything, 20, 20).tobytes()


def test_a_recipe_holds_its_formulas_so_that_the_catalogue_may_change(monkeypatch):
    data = build(bands=[], indices=["ndvi"]).to_json()
    monkeypatch.setattr("classify.features.indices.index_catalogue", dict)
    recipe = Recipe.from_json(data)
    out = recipe.compute({"nir": np.full((1, 1), 0.3, np.float32), "red": np.full((1, 1), 0.1, np.float32)})
    np.testing.assert_allclose(out, 0.5, rtol=1e-6)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"schema": 99}, "schema 1"),
        ({"features": "ndvi"}, "recipe.features"),
        ({"steps": [{"kind": "formula", "name": "x", "formula": "nir +"}]}, "broken formula"),
        ({"steps": [{"kind": "pickle", "name": "x"}]}, "pickle"),
        ({"steps": [{"kind": "texture", "of": "nir"}]}, "recipe.steps.0"),
        ({"features": ["no_such_thing"], "steps": []}, None),
    ],
)
def test_a_tampered_recipe_is_refused(change, message):
    data = build(bands=[], indices=["ndvi"]).to_json() | change
    if message is None:
        assert Recipe.from_json(data).needs == ("no_such_thing",)  # a layer that a scene may have
        return
    with pytest.raises(ModelError, match=message):
        Recipe.from_json(data)


def test_picked_pixels_in_one_row_are_as_good_as_a_block():
    recipe = build(indices=["ndvi", "evi"], absorption=[{"dip": "clay_2200", "measures": ["depth", "position"]}])
    layers = scene_of(8, 30, 20)
    block = recipe.compute({name: layers[name] for name in recipe.needs})
    row = recipe.compute({name: layers[name].reshape(1, -1) for name in recipe.needs})
    np.testing.assert_array_equal(row[:, 0], block.reshape(len(recipe.names), -1))


def test_a_recipe_notes_a_scene_of_other_pixels_or_wavelengths():
    recipe = build(
        terrain=[{"statistic": "slope"}, {"statistic": "topographic position", "size": 5}],
        absorption=[{"dip": "clay_2200", "measures": ["depth"]}],
    )
    assert recipe_findings(recipe, FACTS) == ()
    assert recipe_findings(recipe, SceneFacts()) == ()
    slightly = SceneFacts({"c2190": 2193.0}, pixel_m=(10.1, 0.0, 0.0, -9.95))
    assert recipe_findings(recipe, slightly) == ()
    other = SceneFacts({"c2190": 2201.0}, pixel_m=(20.0, 0.0, 0.0, -20.0))
    pixels, band = recipe_findings(recipe, other)
    assert "'slope' reckons" in pixels.what
    assert "(10 x 10 m)" in pixels.what
    assert "(20 x 20 m)" in pixels.what
    assert "band 'c2190' is at 2201 nm, and 'clay_2200_depth' was trained with one at 2190 nm" in band.what
    assert {pixels.severity, band.severity} == {"warning"}
