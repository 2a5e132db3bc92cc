"""Absorption dips against analytic ones on a sloping continuum, and against the physics of leaves."""

from __future__ import annotations

import numpy as np
import prosail
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from classify.features import Recipe, SceneFacts, build_recipe, dips
from classify.features.absorption import DIP_MEASURES, measure_dip, measure_red_edge
from classify.settings import FeatureSettings


def measures(reflectance: np.ndarray, nm: np.ndarray, centre: float = 2206.0) -> dict[str, float]:
    layers = reflectance.astype(np.float32)[:, None, None]
    return dict(zip(DIP_MEASURES, measure_dip(layers, nm.astype(np.float64), centre)[:, 0, 0].tolist(), strict=True))


@given(
    st.floats(0.1, 0.6), st.floats(0.4, 2.5), st.floats(0.02, 0.6), st.floats(2190, 2222), st.floats(8, 14),
)  # fmt: skip
@settings(max_examples=80, deadline=None)
def test_a_gaussian_dip_on_a_sloping_continuum(level, ratio, depth, centre, width):
    nm = np.arange(2120.0, 2300.0, 2.0)
    dip = depth * np.exp(-((nm - centre) ** 2) / (2 * width**2))
    found = measures(level * np.interp(nm, nm[[0, -1]], [1, ratio]) * (1 - dip), nm)
    assert found["depth"] == pytest.approx(depth, rel=0.02, abs=1e-5)
    assert found["area"] == pytest.approx(depth * width * np.sqrt(2 * np.pi), rel=0.01)
    assert found["position"] == pytest.approx(centre, abs=0.2)
    assert found["asymmetry"] == pytest.approx(0, abs=0.03)


@given(st.floats(0.1, 0.6), st.floats(0.05, 0.5), st.integers(1, 9))
@settings(max_examples=50, deadline=None)
def test_a_lopsided_triangle_is_exact(level, depth, apex):
    # Straight lines between bands are what the trapezia take them for.
    nm = np.linspace(2100, 2300, 11)
    below = np.interp(nm, [nm[0], nm[apex], nm[-1]], [0, depth, 0])
    found = measures(level * (1 - below), nm)
    assert found["depth"] == pytest.approx(depth, rel=1e-5)
    assert found["area"] == pytest.approx(depth * 200 / 2, rel=1e-5)
    left, right = nm[apex] - nm[0], nm[-1] - nm[apex]
    # The parabola moves the position towards the flatter side, by less than half a band.
    assert abs(found["position"] - nm[apex]) <= 10
    if left == right:
        assert found["position"] == pytest.approx(nm[apex], abs=1e-3)
        assert found["asymmetry"] == pytest.approx(0, abs=1e-4)
    else:
        assert np.sign(found["asymmetry"]) == np.sign(right - left)


def test_asymmetry_is_the_share_by_which_one_side_is_larger():
    # Bands so dense that the position is that of the apex: left 50 of 200 nm, so (150 - 50) / 200.
    nm = np.linspace(2100, 2300, 401)
    below = np.interp(nm, [2100, 2150, 2300], [0, 0.3, 0])
    assert measures(0.4 * (1 - below), nm)["asymmetry"] == pytest.approx(0.5, abs=0.01)


def test_uneven_bands_do_not_move_a_parabolic_dip():
    nm = np.array([2100.0, 2150, 2170, 2198, 2211, 2240, 2300])
    bottom = 2203.0
    below = 0.2 - 0.2 * ((nm - bottom) / 110) ** 2
    below[[0, -1]] = 0
    assert measures(0.5 * (1 - below), nm)["position"] == pytest.approx(bottom, abs=1e-3)


NOISE = np.array([0.004, -0.003, 0.006, 0.001, -0.008, 0.002, 0.005, -0.001, 0.003])


@pytest.mark.parametrize("spectrum", [NOISE, NOISE + 0.005, -NOISE, np.linspace(0.009, 0.5, 9) + 40 * NOISE])
def test_in_the_dark_noise_is_no_dip_and_the_pixel_is_not_lost(spectrum):
    spectrum = np.concatenate([[min(spectrum[0], 0.009)], spectrum[1:]])
    found = measures(spectrum, np.linspace(2100, 2300, 9), centre=2199.0)
    assert found == {"depth": 0.0, "area": 0.0, "position": 2199.0, "asymmetry": 0.0}


def test_a_straight_line_has_no_dip():
    found = measures(np.linspace(0.3, 0.4, 9), np.linspace(2100, 2300, 9))
    assert found["depth"] == pytest.approx(0, abs=1e-6)
    assert found["area"] == pytest.approx(0, abs=1e-4)
    assert 2100 <= found["position"] <= 2300
    assert -1 <= found["asymmetry"] <= 1


def test_a_bump_has_negative_depth_and_the_usual_position():
    nm = np.linspace(2100, 2300, 9)
    found = measures(0.3 + 0.1 * np.sin(np.pi * (nm - 2100) / 200), nm, centre=2199.0)
    assert found["depth"] < 0
    assert found["area"] < 0
    assert (found["position"], found["asymmetry"]) == (2199.0, 0.0)


def test_a_missing_band_makes_the_pixel_invalid():
    for band in range(5):
        spectrum = np.full(5, 0.3)
        spectrum[band] = np.nan
        assert np.isnan(list(measures(spectrum, np.linspace(2100, 2300, 5)).values())).all()


@given(st.floats(690, 750), st.floats(8, 20), st.floats(0.2, 0.5))
@settings(max_examples=50, deadline=None)
def test_the_red_edge_of_a_sigmoid(position, width, height):
    nm = np.arange(670.0, 781.0, 5.0)
    layers = (0.04 + height / (1 + np.exp(-(nm - position) / width))).astype(np.float32)[:, None, None]
    slope, found = measure_red_edge(layers, nm)[:, 0, 0]
    assert found == pytest.approx(position, abs=1.0)
    assert slope == pytest.approx(1000 * height / (4 * width), rel=0.05)


# --- the physics of leaves: PROSPECT-D (Jacquemoud & Baret 1990; Feret et al. 2017) as prosail computes it ---

NM = np.arange(400.0, 2501.0)


def leaf(**parts: float) -> np.ndarray:
    """Leaf reflectance at every nm from 400 to 2500. cab: chlorophyll ug/cm2, cw: water cm, cm: dry matter g/cm2."""
    settings = {"n": 1.5, "cab": 40.0, "car": 8.0, "cbrown": 0.0, "cw": 0.012, "cm": 0.009} | parts
    return np.asarray(prosail.run_prospect(**settings)[1])


@pytest.fixture(scope="module")
def recipe() -> tuple[Recipe, dict[str, float]]:
    """All dips from bands 10 nm apart, as an imaging spectrometer has them."""
    bands = {f"c{nm:.0f}": float(nm) for nm in NM[::10]}
    wanted = [{"dip": name, "measures": ["depth", "area", "position", "asymmetry"]} for name in dips()]
    wanted.append({"dip": "red_edge", "measures": ["slope", "position"]})
    settings = FeatureSettings.model_validate({"bands": [], "absorption": wanted, "indices": ["cai"]})
    return build_recipe(settings, tuple(bands), SceneFacts(bands)), bands


def features(recipe: tuple[Recipe, dict[str, float]], spectrum: np.ndarray) -> dict[str, float]:
    made, bands = recipe
    layers = {name: np.full((1, 1), spectrum[int(nm) - 400], np.float32) for name, nm in bands.items()}
    return dict(zip(made.names, made.compute({n: layers[n] for n in made.needs})[:, 0, 0].tolist(), strict=True))


def test_water_dips_grow_with_water(recipe):
    depths = [features(recipe, leaf(cw=cw)) for cw in (0.0005, 0.004, 0.008, 0.016)]
    for dip in ("water_1400", "water_1900"):
        found = [values[f"{dip}_depth"] for values in depths]
        assert found == sorted(found)
        assert found[-1] > 2 * found[0]
    assert 1400 < depths[-1]["water_1400_position"] < 1480
    assert 1900 < depths[-1]["water_1900_position"] < 1980


def test_dry_plants_show_the_cellulose_dip_that_water_hides(recipe):
    green = features(recipe, leaf())
    dry = features(recipe, leaf(cab=2, car=1, cbrown=1, cw=0.0005))
    assert dry["cellulose_2100_depth"] > 0.02
    assert dry["cellulose_2100_depth"] > 2 * green["cellulose_2100_depth"]
    assert 2070 < dry["cellulose_2100_position"] < 2140
    # Daughtry 2001: above zero for dry plants, below for soils.
    assert dry["cai"] > 1
    assert features(recipe, smooth_soil(clay=0.1))["cai"] < 0
    # Neither has the clay dip of soils.
    assert dry["clay_2200_depth"] < 0.03


def smooth_soil(clay: float = 0.0) -> np.ndarray:
    """A soil that rises smoothly, with a clay dip at 2206 nm of the given depth."""
    rise = 0.08 + 0.25 * (1 - np.exp(-(NM - 400) / 700))
    return rise * (1 - clay * np.exp(-((NM - 2206) ** 2) / (2 * 14.0**2)))


def test_clay_shows_in_the_clay_dip_alone(recipe):
    plain, clay = features(recipe, smooth_soil()), features(recipe, smooth_soil(0.15))
    assert abs(plain["clay_2200_depth"]) < 0.01
    assert clay["clay_2200_depth"] == pytest.approx(0.15, abs=0.02)
    assert clay["clay_2200_position"] == pytest.approx(2206, abs=3)
    for dip in ("water_1400", "water_1900", "iron_900"):
        assert clay[f"{dip}_depth"] == pytest.approx(plain[f"{dip}_depth"], abs=1e-6)


def test_the_red_edge_moves_to_longer_waves_with_chlorophyll(recipe):
    found = [features(recipe, leaf(cab=cab)) for cab in (10, 20, 40, 80)]
    positions = [values["red_edge_position"] for values in found]
    assert positions == sorted(positions)
    assert 690 < positions[0] < positions[-1] < 740
    assert found[2]["red_edge_slope"] > 5 * features(recipe, smooth_soil())["red_edge_slope"]
