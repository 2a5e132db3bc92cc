"""Lots, and the order in which draws come to units: against scipy's distributions and plain NumPy."""

from __future__ import annotations

import numpy as np
import pytest
from affine import Affine
from hypothesis import given, settings
from hypothesis import strategies as st
from rasterio.crs import CRS
from scipy import stats

from classify.assessment.cells import cell_areas, cell_shape_yx, count_by_cell, locate
from classify.assessment.lots import arrivals, lots, stream, streams
from classify.raster.area import ground_areas_m2
from classify.raster.grid import Grid, Window

INF = np.inf


def groups(seed: int, count: list[int], area: list[float], until: float | list[float] = INF):
    n = np.array(count, np.int64)
    starts = streams(stream(seed, 1), np.arange(len(n)))
    return arrivals(starts, n, np.array(area), np.broadcast_to(np.array(until, float), n.shape))


def test_lots_are_uniform_and_differ_by_seed_purpose_and_number():
    u = lots(stream(5, 1), np.arange(200_000))
    assert stats.kstest(u, "uniform").pvalue > 0.001
    assert stats.kstest((u[1:] - u[:-1]) % 1, "uniform").pvalue > 0.001
    for other in (stream(6, 1), stream(5, 2)):
        assert abs(np.corrcoef(u, lots(other, np.arange(200_000)))[0, 1]) < 0.01
    # The same number has the same lot for ever: drawn again by SplitMix64 as published, in whole numbers.
    z = (int(stream(5, 1)) + 8 * 0x9E3779B97F4A7C15) % 2**64
    z = (z ^ (z >> 30)) * 0xBF58476D1CE4E5B9 % 2**64
    z = (z ^ (z >> 27)) * 0x94D049BB133111EB % 2**64
    assert u[7] == ((z ^ (z >> 31)) >> 11) / 2**53


def test_times_of_a_group_are_those_of_single_units():
    """All units drawn: their times are so many independent exponential ones, here of rate 2 (Kolmogorov, by scipy)."""
    found = groups(1, [300] * 50, [2.0] * 50)
    assert stats.kstest(found.time, stats.expon(scale=0.5).cdf).pvalue > 0.001
    first = np.array([found.time[found.group == g].min() for g in range(50)])
    assert stats.kstest(first, stats.expon(scale=1 / 600).cdf).pvalue > 0.001


def test_every_order_of_a_group_is_as_likely():
    """Three units drawn 6000 times: each of the six orders comes about a thousand times, whenever its first comes."""
    found = groups(2, [3] * 6000, [1.0] * 6000)
    order = np.lexsort((found.time, found.group))
    ranks = found.rank[order].reshape(6000, 3)
    assert (np.sort(ranks, axis=1) == [0, 1, 2]).all()
    assert stats.chisquare(np.unique(ranks @ [9, 3, 1], return_counts=True)[1]).pvalue > 0.001
    first = found.time[order].reshape(6000, 3)[:, 0]
    assert stats.kruskal(*(first[ranks[:, 0] == rank] for rank in range(3))).pvalue > 0.001


@settings(max_examples=40)
@given(
    seed=st.integers(0, 2**32 - 1), count=st.lists(st.integers(1, 60), min_size=1, max_size=8),
    area=st.floats(1e-3, 1e4), until=st.floats(1e-3, 10),
)  # fmt: skip
def test_a_later_end_brings_the_same_draws_and_more(seed: int, count: list[int], area: float, until: float):
    whole, part = groups(seed, count, [area] * len(count)), groups(seed, count, [area] * len(count), until / area)
    for g, n in enumerate(count):
        drawn = whole.group == g
        assert sorted(whole.rank[drawn]) == list(range(n))
        assert (np.diff(whole.time[drawn]) > 0).all()
        soon = drawn & (whole.time <= until / area)
        assert whole.rank[soon].tolist() == part.rank[part.group == g].tolist()
        assert whole.time[soon].tolist() == part.time[part.group == g].tolist()


def test_no_groups():
    assert len(groups(1, [], []).time) == 0


@settings(max_examples=40)
@given(data=st.data(), height=st.integers(1, 40), width=st.integers(1, 40), rows=st.integers(1, 16),
       cols=st.integers(1, 16))  # fmt: skip
def test_counting_and_finding_pixels_by_cell(data, height: int, width: int, rows: int, cols: int):
    codes = np.random.default_rng(data.draw(st.integers(0, 999))).integers(0, 6, (height, width)).astype(np.uint8)
    stratum_of = np.full(256, -1, np.int16)
    stratum_of[[1, 2, 4]] = [0, 1, 0]  # two codes in one stratum
    counts = count_by_cell(codes, (rows, cols), stratum_of, 2)
    assert counts.shape == (-(-height // rows), -(-width // cols), 2)
    for down, across, s in np.ndindex(counts.shape):
        cell = codes[down * rows : (down + 1) * rows, across * cols : (across + 1) * cols]
        inside = np.argwhere(stratum_of[cell] == s)
        assert counts[down, across, s] == len(inside)
        n = len(inside)
        found = locate(
            codes, (rows, cols), stratum_of, np.array([[down, across]] * n, np.int64).reshape(n, 2), np.full(n, s),
            np.arange(n),
        )  # fmt: skip
        assert np.array_equal(found, inside + np.array([down * rows, across * cols]))


@pytest.mark.parametrize(
    ("crs", "transform", "shape_yx"),
    [
        ("EPSG:32733", Affine(10, 0, 300_000, 0, -10, 6_500_000), (64, 64)),
        ("EPSG:32733", Affine(30, 0, 300_000, 0, -30, 6_500_000), (32, 32)),
        ("EPSG:3857", Affine(20, 0, 0, 0, -20, 8_000_000), (64, 64)),
        ("EPSG:4326", Affine(0.001, 0, 10, 0, -0.001, 79), (8, 64)),
        ("EPSG:4326", Affine(0.02, 0, 10, 0, -0.02, 79), (1, 64)),
        ("EPSG:3035", Affine(1000, 0, 2_000_000, 0, -1000, 5_000_000), (8, 8)),
    ],
)
def test_a_pixel_is_about_as_large_as_the_mean_of_its_cell(crs: str, transform: Affine, shape_yx: tuple[int, int]):
    grid = Grid(CRS.from_user_input(crs), transform, 200, 200)
    assert cell_shape_yx(grid) == shape_yx
    window = Window(0, 0, 200, 200)
    cells = cell_areas(grid, window, shape_yx)
    spread = np.repeat(np.repeat(cells, shape_yx[0], axis=0), shape_yx[1], axis=1)[:200, :200]
    assert spread == pytest.approx(ground_areas_m2(grid, window), rel=1e-3)
