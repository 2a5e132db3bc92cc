"""The index catalogue: every formula on a spectrum worked by hand from the published one; what scenes can do."""

from __future__ import annotations

import math

import numpy as np
import pytest

from classify.errors import SettingsError
from classify.features import SceneFacts, build_recipe, index_availability, index_catalogue
from classify.features.indices import bands_of, read_catalogue
from classify.settings import FeatureSettings, load_preset

# A leafy spectrum in round numbers. b, g, r: visible; e1, e2, e3: red edge; n: near, s, t: short-wave infrared.
b, g, r, e1, e2, e3, n, n8, s, t = 0.04, 0.08, 0.05, 0.10, 0.25, 0.35, 0.40, 0.42, 0.20, 0.10
SPECTRUM = {
    "blue": b, "green": g, "red": r, "red_edge_1": e1, "red_edge_2": e2, "red_edge_3": e3, "nir": n, "nir_narrow": n8,
    "swir_1": s, "swir_2": t,
}  # fmt: skip
CUBE_NM = {
    531: 0.050, 550: 0.080, 570: 0.060, 700: 0.100, 860: 0.400, 900: 0.410, 970: 0.380, 1240: 0.360, 1680: 0.250,
    1754: 0.240, 2030: 0.200, 2100: 0.190, 2210: 0.220,
}  # fmt: skip

# Worked from the papers named in the catalogue (formulas from memory), in plain numbers where they come out plain.
BY_HAND = {
    "ndvi": 0.35 / 0.45, "sr": 8.0, "dvi": 0.35, "evi": 2.5 * 0.35 / (0.4 + 0.3 - 0.3 + 1), "evi2": 0.875 / 1.52,
    "savi": 1.5 * 0.35 / 0.95, "osavi": 0.35 / 0.61, "msavi": (1.8 - math.sqrt(3.24 - 2.8)) / 2,
    "arvi": (0.4 - 0.06) / (0.4 + 0.06),
    "gemi": (0.94 / 0.95) * (1 - 0.25 * 0.94 / 0.95) - (0.05 - 0.125) / 0.95,  # eta = (2 * 0.1575 + 0.6 + 0.025) / 0.95
    "wdrvi": -0.01 / 0.09, "gndvi": 0.32 / 0.48, "nirv": (0.35 / 0.45 - 0.08) * 0.4,
    "kndvi": math.tanh((0.35 / 0.45) ** 2), "ngrdi": 0.03 / 0.13, "vari": 0.03 / 0.09, "exg": 0.07 / 0.17,
    "gli": 0.07 / 0.25, "pri": -0.01 / 0.11, "ari": 12.5 - 10.0,
    "ndre": 0.3 / 0.5, "ndvi_red_edge": 0.15 / 0.35, "ci_red_edge": 2.5, "ci_green": 4.0, "mtci": 3.0,
    "red_edge_linear": 705 + 35 * (0.2 - 0.1) / 0.15, "ireci": 0.3 * 2.5, "mcari": (0.05 - 0.2 * 0.02) * 2,
    "tcari": 3 * (0.05 - 0.2 * 0.02 * 2),
    "ndmi": 0.2 / 0.6, "msi": 0.5, "gvmi": (0.5 - 0.22) / 0.72, "nmdi": 0.3 / 0.5, "ndwi_1240": 0.04 / 0.76,
    "wbi": 0.41 / 0.38,
    "ndti": 0.1 / 0.3, "sti": 2.0, "ndri": -0.05 / 0.15, "ndsvi": 0.15 / 0.25, "satvi": 1.5 * 0.15 / 0.75 - 0.05,
    "dfi": 100 * 0.5 * 0.125, "psri": 0.01 / 0.25, "cai": 100 * (0.21 - 0.19),
    "ndli": (math.log(1 / 0.24) - math.log(1 / 0.25)) / (math.log(1 / 0.24) + math.log(1 / 0.25)),
    "bsi": (0.25 - 0.44) / 0.69, "clay_ratio": 2.0, "soil_brightness": math.sqrt((0.0025 + 0.0064) / 2),
    "soil_colour": -0.03 / 0.13, "grain_size": 0.01 / 0.17, "salinity": math.sqrt(0.002),
    "iron_oxide_ratio": 1.25, "ferric_iron": 0.625, "ferrous_iron": 0.5, "redness": 0.0025 / (0.04 * 0.000512),
    "ndbi": -0.2 / 0.6, "built_up": -0.2 / 0.6 - 0.35 / 0.45, "urban": -0.3 / 0.5,
    "ibi": (0.4 / 0.6 - (0.4 / 0.45 + 0.08 / 0.28)) / (0.4 / 0.6 + (0.4 / 0.45 + 0.08 / 0.28)),
    "ndwi": -0.32 / 0.48, "mndwi": -0.12 / 0.28, "awei": -0.48 - (0.1 + 0.275),
    "awei_shadow": 0.04 + 0.2 - 0.9 - 0.025, "wi2015": 1.7204 + 13.68 + 0.15 - 28 - 9 - 7.1, "turbidity": -0.03 / 0.13,
    "ndci": 0.05 / 0.15,
    "ndsi": -0.12 / 0.28, "ndsii": -0.15 / 0.25, "s3": 0.4 * -0.15 / (0.45 * 0.6),
    "nbr": 0.3 / 0.5, "bai": 1 / (0.05**2 + 0.34**2), "mirbi": 1 - 1.96 + 2, "csi": 4.0,
    "bais2": (1 - math.sqrt(0.25 * 0.35 * 0.42 / 0.05)) * (-0.32 / math.sqrt(0.52) + 1),
}  # fmt: skip

FACTS = SceneFacts({f"c{nm}": float(nm) for nm in CUBE_NM})
LAYERS = {name: np.full((2, 3), value, np.float32) for name, value in SPECTRUM.items()}
LAYERS |= {f"c{nm}": np.full((2, 3), value, np.float32) for nm, value in CUBE_NM.items()}


def test_every_index_is_worked_by_hand():
    assert set(BY_HAND) == set(index_catalogue())
    assert len(BY_HAND) >= 45


@pytest.mark.parametrize("name", index_catalogue())
def test_an_index_has_the_value_worked_by_hand(name):
    recipe = build_recipe(FeatureSettings(bands=[], indices=[name]), tuple(LAYERS), FACTS)
    value = recipe.compute(LAYERS)
    assert recipe.names == (name,)
    np.testing.assert_allclose(value, BY_HAND[name], rtol=2e-5, atol=1e-6)


def test_usual_ranges_hold_the_leafy_spectrum():
    outside = [
        name for name, index in index_catalogue().items() if not index.usual[0] <= BY_HAND[name] <= index.usual[1]
    ]
    assert outside == []


def test_every_index_says_where_it_comes_from_and_what_it_shows():
    groups = {
        "green vegetation", "red edge", "canopy water", "dry matter and residue", "soil and clay", "iron oxide",
        "built-up", "water", "snow", "burn",
    }  # fmt: skip
    catalogue = index_catalogue()
    assert {index.shows for index in catalogue.values()} == groups
    for index in catalogue.values():
        assert any(str(year) in index.source for year in range(1965, 2026)), index.name
        assert index.title[0].islower() or index.title.startswith("S"), index.name


def test_indices_rest_on_roles_that_sensors_have():
    known = set(load_preset("sensors", "sentinel-2-l2a")["bands"])
    strange = {band for index in index_catalogue().values() for band in bands_of(index)} - known
    assert {band for band in strange if not band.startswith("nm_")} == set()


def test_availability_names_the_missing_bands():
    found = {entry.index.name: entry for entry in index_availability(("green", "red", "nir"))}
    assert found["ndvi"].available
    assert found["ndvi"].reason == ""
    assert not found["ndti"].available
    assert found["ndti"].missing == ("swir_1", "swir_2")
    assert found["evi"].reason == "the scene lacks band 'blue'"
    assert found["built_up"].missing == ("swir_1",)  # through the indices that it uses
    assert "within 10 nm of 531 nm" in found["pri"].reason


@pytest.mark.parametrize("preset", ["sentinel-2-l2a", "landsat-8-9-c2-l2", "airborne-4-band"])
def test_what_is_said_to_be_available_can_be_built_and_nothing_else(preset):
    bands = load_preset("sensors", preset)["bands"]
    facts = SceneFacts({role: float(band["wavelength_nm"]) for role, band in bands.items()})
    for entry in index_availability(tuple(bands), facts):
        wanted = FeatureSettings(bands=[], indices=[entry.index.name])
        if entry.available:
            assert build_recipe(wanted, tuple(bands), facts).names == (entry.index.name,)
        else:
            with pytest.raises(SettingsError, match=r"needs (a )?band"):
                build_recipe(wanted, tuple(bands), facts)


def test_a_broken_catalogue_lists_every_problem(tmp_path):
    file = tmp_path / "indices.toml"
    file.write_text(
        'a = 1\n[b]\ntitle = "t"\nshows = "s"\nformula = "nir +"\nsource = "x"\nusual = [0, 1]\n'
        '[c]\ntitle = "t"\nshows = "s"\nformula = "nir"\nusual = [1, 0]\ncolour = "red"\n'
    )
    with pytest.raises(SettingsError) as raised:
        read_catalogue(file)
    text = str(raised.value)
    for part in (
        "a: this must be a table",
        "b.formula: the formula ends",
        "'source' is missing",
        "lower first",
        "'colour'",
    ):
        assert part in text
