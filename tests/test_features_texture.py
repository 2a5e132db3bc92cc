"""Window statistics against scipy and scikit-image, with invalid pixels and at edges against their definition."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import ndimage
from skimage.feature import graycomatrix, graycoprops

from classify.features.co_occurrence import grey_levels
from classify.features.texture import CO_OCCURRENCE, MOMENTS, TextureStep

ANGLES = [0, np.pi / 4, np.pi / 2, 3 * np.pi / 4]


def compute(layer: np.ndarray, size: int, statistics=MOMENTS, **options) -> dict[str, np.ndarray]:
    step = TextureStep(tuple(statistics), "x", tuple(statistics), size, **options)
    return dict(zip(statistics, step.apply(layer[None]), strict=True))


def as_scikit_image_describes(window: np.ndarray, levels: int) -> list[float]:
    """Contrast, homogeneity, entropy and correlation of one window of grey levels, -1 where invalid.

    Counts of the four directions are put together before they are made frequencies. Invalid pixels get a grey level of
    their own, whose row and column are struck out.
    """
    marked = np.where(window < 0, levels, window).astype(np.uint8)
    counts = graycomatrix(marked, [1], ANGLES, levels=levels + 1, symmetric=True).sum(axis=3, keepdims=True)
    counts = counts[:levels, :levels]
    frequencies = counts / counts.sum()
    known = [float(graycoprops(counts, prop)[0, 0]) for prop in ("contrast", "homogeneity", "correlation")]
    positive = frequencies[frequencies > 0]
    return [known[0], known[1], float(-(positive * np.log(positive)).sum()), known[2]]


@given(st.integers(0, 2**32), st.sampled_from([3, 5, 7]))
@settings(max_examples=25, deadline=None)
def test_moments_are_those_of_scipy_inside(seed, size):
    layer = np.random.default_rng(seed).uniform(0, 1, (12, 15)).astype(np.float32)
    found, inner = compute(layer, size), np.s_[size // 2 : -(size // 2), size // 2 : -(size // 2)]
    wide = layer.astype(np.float64)
    mean = ndimage.uniform_filter(wide, size)
    deviation = ndimage.generic_filter(wide, np.std, size)
    extent = ndimage.maximum_filter(layer, size) - ndimage.minimum_filter(layer, size)
    np.testing.assert_allclose(found["mean"][inner], mean[inner], rtol=1e-6)
    np.testing.assert_allclose(found["standard deviation"][inner], deviation[inner], rtol=1e-5)
    np.testing.assert_array_equal(found["range"][inner], extent[inner])


@given(st.integers(0, 2**32), st.sampled_from([3, 5, 7]), st.floats(0, 0.9))
@settings(max_examples=25, deadline=None)
def test_moments_leave_out_what_is_invalid_or_beyond_the_edge(seed, size, holes):
    rng = np.random.default_rng(seed)
    layer = rng.uniform(0, 1, (9, 11)).astype(np.float32)
    layer[rng.random(layer.shape) < holes] = np.nan
    found = compute(layer, size)
    padded = np.pad(layer.astype(np.float64), size // 2, constant_values=np.nan)
    for row, col in np.ndindex(layer.shape):
        window = padded[row : row + size, col : col + size]
        valid = window[np.isfinite(window)]
        if np.isnan(layer[row, col]) or 4 * len(valid) < size * size:
            assert all(np.isnan(values[row, col]) for values in found.values())
        else:
            expected = [valid.mean(), valid.std(), valid.max() - valid.min()]
            np.testing.assert_allclose([found[name][row, col] for name in MOMENTS], expected, rtol=1e-5, atol=1e-7)


def test_equal_values_have_no_deviation_at_all():
    for value in (0.1, 3127.3, -1e-5):
        found = compute(np.full((20, 20), value, np.float32), 11)
        assert (found["standard deviation"] == 0).all()
        assert (found["range"] == 0).all()
        np.testing.assert_allclose(found["mean"], np.float32(value), rtol=1e-7)


@given(st.integers(0, 2**32), st.sampled_from([3, 5, 7]), st.sampled_from([2, 5, 16, 32]), st.sampled_from([0.0, 0.3]))
@settings(max_examples=25, deadline=None)
def test_co_occurrence_is_that_of_scikit_image(seed, size, levels, holes):
    rng = np.random.default_rng(seed)
    layer = rng.uniform(-0.1, 1.1, (7, 8)).astype(np.float32)
    layer[rng.random(layer.shape) < holes] = np.nan
    found = compute(layer, size, CO_OCCURRENCE, levels=levels, low=0.0, high=1.0)
    grey = np.where(np.isnan(layer), -1, np.clip(np.floor(layer.astype(np.float64) * levels), 0, levels - 1))
    padded = np.pad(grey, size // 2, constant_values=-1)
    for row, col in np.ndindex(layer.shape):
        window = padded[row : row + size, col : col + size]
        values = [found[name][row, col] for name in CO_OCCURRENCE]
        if grey[row, col] < 0 or 4 * (window >= 0).sum() < size * size:
            assert np.isnan(values).all()
        elif np.isfinite(values).all():
            np.testing.assert_allclose(values, as_scikit_image_describes(window, levels), rtol=1e-5, atol=1e-6)
        else:
            assert has_no_pairs(window)


def has_no_pairs(window: np.ndarray) -> bool:
    """Whether no two valid pixels touch."""
    _, islands = ndimage.label(window >= 0, structure=np.ones((3, 3)))
    return bool(islands == (window >= 0).sum())


def test_the_published_four_grey_levels():
    # Haralick, Shanmugam & Dinstein 1973, figure 3: a 4 x 4 image of four grey levels (from memory) and its matrices,
    # put together over the four directions.
    image = np.array([[0, 0, 1, 1], [0, 0, 1, 1], [0, 2, 2, 2], [2, 2, 3, 3]])
    horizontal = np.array([[4, 2, 1, 0], [2, 4, 0, 0], [1, 0, 6, 1], [0, 0, 1, 2]])
    vertical = np.array([[6, 0, 2, 0], [0, 4, 2, 0], [2, 2, 2, 2], [0, 0, 2, 0]])
    falling = np.array([[2, 1, 3, 0], [1, 2, 1, 0], [3, 1, 0, 2], [0, 0, 2, 0]])
    rising = np.array([[4, 1, 0, 0], [1, 2, 2, 0], [0, 2, 4, 1], [0, 0, 1, 0]])
    together = horizontal + vertical + falling + rising
    frequencies = together / together.sum()
    apart = np.subtract.outer(np.arange(4), np.arange(4)) ** 2
    # As the middle of a larger window of invalid pixels, the image is all that the window of its third row and column
    # sees; 16 of 49 pixels are more than a quarter.
    layer = np.full((9, 9), np.nan, np.float32)
    layer[2:6, 2:6] = (image + 0.5) / 4
    found = compute(layer, 7, CO_OCCURRENCE, levels=4)
    contrast, homogeneity, entropy, _ = (found[name][4, 4] for name in CO_OCCURRENCE)
    np.testing.assert_allclose(contrast, (apart * frequencies).sum(), rtol=1e-6)
    np.testing.assert_allclose(homogeneity, (frequencies / (1 + apart)).sum(), rtol=1e-6)
    positive = frequencies[frequencies > 0]
    np.testing.assert_allclose(entropy, -(positive * np.log(positive)).sum(), rtol=1e-6)


def test_one_grey_level_is_all_alike():
    found = compute(np.full((6, 6), 0.4, np.float32), 3, CO_OCCURRENCE)
    expected = {"contrast": 0, "homogeneity": 1, "entropy": 0, "correlation": 1}
    for name, value in expected.items():
        np.testing.assert_allclose(found[name], value, atol=1e-7)


@pytest.mark.parametrize(("value", "level"), [(-5, 0), (0.1, 0), (0.299, 0), (0.3, 1), (0.89, 3), (0.9, 3), (7, 3)])
def test_grey_levels_divide_the_range_and_hold_what_lies_beyond(value, level):
    assert grey_levels(np.array([[value]], np.float32), 0.1, 0.9, 4)[0, 0] == level
