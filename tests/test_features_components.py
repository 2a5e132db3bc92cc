"""Smoothing, principal components, minimum noise fractions against scipy and scikit-learn; fitted to a scene once."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
import rasterio
from affine import Affine
from scipy.signal import savgol_filter
from sklearn.decomposition import PCA

from classify.errors import DataError
from classify.features import Recipe, build_recipe, fit_recipe, scene_facts
from classify.features.spectra import fit_projection, smoothing_weights
from classify.raster.scene import Scene, open_scene
from classify.settings import FeatureSettings, load_project
from classify.settings.features import ComponentSettings

BANDS, HEIGHT, WIDTH = 12, 150, 170
NM = [500 + 20 * band for band in range(BANDS)]
NOISE = np.linspace(0.002, 0.02, BANDS)


def cube() -> np.ndarray:
    """Three materials mixed smoothly over space, seen by bands of different noise: reflectance (bands, h, w)."""
    rng = np.random.default_rng(11)
    spectra = rng.uniform(0.1, 0.5, (3, BANDS))
    rows, cols = np.indices((HEIGHT, WIDTH)) / HEIGHT
    shares = np.stack([1 + np.sin(5 * rows), 1 + np.cos(4 * cols), 1 + np.sin(3 * (rows + cols))])
    shares /= shares.sum(axis=0)
    clean = np.einsum("mb,mhw->bhw", spectra, shares)
    return clean + rng.normal(0, 1, clean.shape) * NOISE[:, None, None]


@pytest.fixture(scope="module")
def scene(tmp_path_factory: pytest.TempPathFactory) -> Scene:
    folder = tmp_path_factory.mktemp("cube")
    stored = np.round(cube() * 10_000).astype(np.int16)
    stored[:, 20:40, 30:60] = -9999
    with rasterio.open(
        folder / "cube.tif", "w", driver="GTiff", count=BANDS, height=HEIGHT, width=WIDTH, dtype="int16", nodata=-9999,
        crs="EPSG:32633", transform=Affine(10, 0, 500_000, 0, -10, 4_200_000),
    ) as file:  # fmt: skip
        file.write(stored)
    bands = "\n".join(
        f'b{band} = {{ file = "cube.tif", band = {band + 1}, scale = 0.0001, wavelength_nm = {nm} }}'
        for band, nm in enumerate(NM)
    )
    Path(folder / "project.toml").write_text(
        f'[project]\ntitle = "A cube"\n[scene.bands]\n{bands}\n[[class]]\ncode = 1\nname = "A"\n'
        '[[class]]\ncode = 2\nname = "B"\n[training]\npolygons = "none.gpkg"\nlabel = "cover"\n'
    )
    project = load_project(folder)
    return open_scene(project.scene, project)


def recipe_for(scene: Scene, **features: object) -> Recipe:
    return build_recipe(FeatureSettings.model_validate({"bands": []} | features), scene.roles, scene_facts(scene))


def samples() -> tuple[np.ndarray, np.ndarray]:
    values = cube()
    return values.reshape(BANDS, -1).T, (values[:, :, 1:] - values[:, :, :-1]).reshape(BANDS, -1).T


# --- smoothing -------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("window", "order"), [(3, 1), (5, 2), (7, 2), (9, 4)])
def test_smoothing_of_even_bands_is_that_of_scipy_ends_included(window, order):
    spectrum = np.random.default_rng(2).uniform(0.1, 0.6, 25)
    weights = smoothing_weights(np.arange(25) * 10.0 + 400, window, order)
    ours = [sum(weight * spectrum[place] for place, weight in row.items()) for row in weights]
    np.testing.assert_allclose(ours, savgol_filter(spectrum, window, order, mode="interp"), rtol=1e-9)


def test_smoothing_of_uneven_bands_keeps_what_the_polynomial_can_follow():
    nm = np.cumsum(np.random.default_rng(3).uniform(3, 30, 20)) + 400
    spectrum = 0.3 + 2e-4 * (nm - 500) - 1e-6 * (nm - 500) ** 2
    weights = smoothing_weights(nm, 7, 2)
    ours = [sum(weight * spectrum[place] for place, weight in row.items()) for row in weights]
    np.testing.assert_allclose(ours, spectrum, rtol=1e-9)


def test_every_feature_sees_the_smoothed_bands(scene):
    recipe = recipe_for(scene, bands=["b0", "b1", "b5"], formulas={"x": "b5 / b0"}, smoothing={"window": 5, "order": 2},
                        texture=[{"of": "b5", "statistic": "mean"}])  # fmt: skip
    values = cube().astype(np.float32)[:, :30, :30]
    smooth = savgol_filter(values.astype(np.float64), 5, 2, axis=0, mode="interp")
    out = recipe.compute({name: values[int(name[1:])] for name in recipe.needs})
    inner = smooth[:, 1:-1, 1:-1]
    mean = np.mean([smooth[5, a : a + 28, b : b + 28] for a in range(3) for b in range(3)], axis=0)
    for found, expected in zip(out, (inner[0], inner[1], inner[5], inner[5] / inner[0], mean), strict=True):
        np.testing.assert_allclose(found, expected, rtol=2e-5)


# --- components ------------------------------------------------------------------------------------------------------


def test_principal_components_are_those_of_scikit_learn():
    values, steps = samples()
    ours = fit_projection(values, steps, ComponentSettings(count=4), standardise=False)
    theirs = PCA(4).fit(values)
    for row, axis in zip(ours.weights, theirs.components_, strict=True):
        np.testing.assert_allclose(np.array(row) * np.sign(np.dot(row, axis)), axis, atol=1e-7)
        assert row[int(np.abs(row).argmax())] > 0
    np.testing.assert_allclose(ours.shares, theirs.explained_variance_ratio_, rtol=1e-8)
    scores = values @ np.array(ours.weights).T + ours.offsets
    np.testing.assert_allclose(np.abs(scores), np.abs(theirs.transform(values)), atol=1e-8)


def test_standardised_components_are_those_of_standardised_layers():
    values, steps = samples()
    values = values * np.logspace(0, 3, BANDS)
    ours = fit_projection(values, steps, ComponentSettings(count=3), standardise=True)
    scaled = (values - values.mean(axis=0)) / values.std(axis=0)
    scores = values @ np.array(ours.weights).T + ours.offsets
    np.testing.assert_allclose(np.abs(scores), np.abs(PCA(3).fit_transform(scaled)), atol=1e-6)


def test_minimum_noise_fractions_part_signal_from_noise():
    # Green et al. 1988: components without correlation, of unit noise, by falling signal-to-noise ratio.
    values, steps = samples()
    ours = fit_projection(
        values, steps, ComponentSettings(method="minimum noise fraction", count=BANDS), standardise=False
    )
    weights = np.array(ours.weights)
    noise = weights @ np.cov(steps, rowvar=False) / 2 @ weights.T
    np.testing.assert_allclose(noise, np.eye(BANDS), atol=1e-6)
    covariance = np.cov(values @ weights.T, rowvar=False)
    np.testing.assert_allclose(covariance - np.diag(np.diag(covariance)), 0, atol=1e-6 * covariance.max())
    assert list(ours.shares) == sorted(ours.shares, reverse=True)
    # Three materials whose shares sum to one vary in two ways; the rest is noise.
    assert ours.shares[1] > 5
    assert ours.shares[2] < 0.5
    # The noise that differences show is what was put in, and a little of the signal's change from pixel to pixel.
    np.testing.assert_allclose(np.sqrt(np.diag(np.cov(steps, rowvar=False)) / 2), NOISE, rtol=0.15)


def test_noise_that_depends_on_itself_is_refused():
    values, steps = samples()
    double, twice = np.hstack([values, values[:, :1]]), np.hstack([steps, steps[:, :1]])
    with pytest.raises(DataError, match="depends on each other"):
        fit_projection(double, twice, ComponentSettings(method="minimum noise fraction"), standardise=False)


@pytest.mark.parametrize("method", ["principal components", "minimum noise fraction"])
def test_components_are_fitted_once_and_travel_with_the_recipe(scene, method):
    recipe = recipe_for(scene, components={"method": method, "count": 2})
    assert recipe.needs_fit
    fitted = fit_recipe(recipe, scene, seed=4)
    assert not fitted.needs_fit
    assert fitted.names == recipe.names
    assert fit_recipe(fitted, scene, seed=5) == fitted  # nothing is left to fit
    assert fit_recipe(recipe, scene, seed=4) == fitted
    again = Recipe.from_json(json.loads(json.dumps(fitted.to_json(), allow_nan=False)))
    assert again == fitted
    with scene.open() as reader:
        layers = reader.read(scene.grid.window, again.needs)
    out = again.compute(layers)
    flat = np.stack([layers[f"b{band}"] for band in range(BANDS)]).reshape(BANDS, -1).T
    clear = np.isfinite(flat).all(axis=1)
    assert (~clear).sum() == 20 * 30
    np.testing.assert_array_equal(np.isfinite(out).all(axis=0).ravel(), clear)
    if method == "principal components":  # of all clear pixels, as the scene is smaller than the sample may be
        theirs = PCA(2).fit_transform(flat[clear].astype(np.float64))
        np.testing.assert_allclose(np.abs(out.reshape(2, -1)[:, clear]), np.abs(theirs.T), atol=2e-5)


def test_components_of_other_features_and_features_of_components(scene):
    recipe = recipe_for(
        scene, formulas={"ratio": "b3 / b8", "mix": "principal_component_1 + b0"},
        components={"count": 2, "of": ["ratio", "b3", "b8"]},
        texture=[{"of": "principal_component_2", "statistic": "standard deviation"}],
    )  # fmt: skip
    assert recipe.names == ("ratio", "mix", "principal_component_2_standard_deviation_3",
                            "principal_component_1", "principal_component_2")  # fmt: skip
    fitted = fit_recipe(recipe, scene, seed=1)
    with scene.open() as reader:
        out = fitted.compute(reader.read(scene.grid.window, fitted.needs, halo_px=fitted.halo_px))
        b0 = reader.read(scene.grid.window, ("b0",))["b0"]
    np.testing.assert_allclose(out[1], out[3] + b0, rtol=1e-5, atol=1e-6)
    assert np.nanstd(out[3]) == pytest.approx(np.sqrt(fitted_share(fitted) * 3), rel=0.02)


def fitted_share(recipe: Recipe) -> float:
    """Share of the variance of three standardised layers that the first component holds."""
    step = next(step for step in recipe.steps if step.kind == "components")
    return step.projection.shares[0]


def test_a_scene_without_clear_pixels_cannot_be_fitted(scene, tmp_path):
    masked = Path(scene.bands[0].path).parent
    with rasterio.open(masked / "cube.tif") as source:
        profile = source.profile
    with rasterio.open(tmp_path / "cube.tif", "w", **profile) as file:
        file.write(np.full((BANDS, HEIGHT, WIDTH), -9999, np.int16))
    (tmp_path / "project.toml").write_text((masked / "project.toml").read_text())
    project = load_project(tmp_path)
    empty = open_scene(project.scene, project)
    with pytest.raises(DataError, match="too few clear pixels"):
        fit_recipe(recipe_for(empty, components={"count": 2}), empty, seed=0)


def test_the_sample_of_a_large_scene_is_drawn_by_the_seed(scene, monkeypatch):
    monkeypatch.setattr("classify.features.fit.SAMPLE_PX", 4000)
    recipe = recipe_for(scene, components={"count": 2})
    first, again, other = (fit_recipe(recipe, scene, seed) for seed in (1, 1, 2))
    assert first == again
    assert first != other
