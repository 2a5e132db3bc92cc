"""Material expectations against physics: leaf, canopy and soil spectra of an open implementation of published models.

Referee: the package prosail (PROSPECT-D, Feret et al. 2017; 4SAIL, Verhoef et al. 2007; leaves, Jacquemoud & Baret
1990). That green leaves have a red edge and dry plants none is common practice; the parameters are common ones.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import prosail
import pytest

from classify.errors import SettingsError
from classify.settings import load_preset, preset_names
from classify.training.materials import Spectra, check_material, load_materials

NM = np.arange(400, 2501)


def leaf(chlorophyll: float, water: float, brown: float = 0.0) -> np.ndarray:
    return prosail.run_prospect(
        1.5, chlorophyll, 8.0 if chlorophyll > 10 else 1.0, brown, water, 0.009, ant=0.0, prospect_version="D"
    )[1]


def canopy(chlorophyll: float, water: float, brown: float, leaf_area: float) -> np.ndarray:
    return prosail.run_prosail(
        1.5, chlorophyll, 8.0, brown, water, 0.009, leaf_area, -0.35, 0.01, 30.0, 0.0, 0.0, ant=0.0,
        prospect_version="D", rsoil=1.0, psoil=1.0,
    )  # fmt: skip


def full(spectrum: np.ndarray) -> Spectra:
    return Spectra(spectrum[None, :].astype(np.float32), tuple(f"b{nm}" for nm in NM), tuple(NM.astype(float)))


def as_sensor(spectrum: np.ndarray, sensor: str) -> Spectra:
    bands = load_preset("sensors", sensor)["bands"]
    means = [spectrum[np.abs(NM - b["wavelength_nm"]) <= b["width_nm"] / 2].mean() for b in bands.values()]
    return Spectra(np.array([means], dtype=np.float32), tuple(bands), tuple(b["wavelength_nm"] for b in bands.values()))


def met(material: str, spectra: Spectra) -> bool:
    checks = check_material(load_materials([material])[material], spectra)
    assert any(check.met is not None for check in checks)
    return not any(check.met is False for check in checks)


GREEN = {
    "leaf": leaf(40, 0.012),
    "dense canopy": canopy(40, 0.012, 0, 4),
    "open canopy": canopy(40, 0.012, 0, 0.7),
}
DRY = {"leaf": leaf(2, 0.0005, 1), "dense canopy": canopy(2, 0.0005, 1, 3), "open canopy": canopy(2, 0.0005, 1, 1)}
SENSORS = ["full", "sentinel-2-l2a", "landsat-8-9-c2-l2"]


def seen(spectrum: np.ndarray, sensor: str) -> Spectra:
    return full(spectrum) if sensor == "full" else as_sensor(spectrum, sensor)


@pytest.mark.parametrize("sensor", SENSORS)
@pytest.mark.parametrize("name", GREEN)
def test_green_spectra_are_green_and_not_dry(name: str, sensor: str) -> None:
    spectra = seen(GREEN[name], sensor)
    assert met("green vegetation", spectra)
    for other in ("dry plants", "clay soil", "sandy soil", "iron-rich soil", "water", "snow", "built surface"):
        assert not met(other, spectra), other


@pytest.mark.parametrize("sensor", SENSORS)
@pytest.mark.parametrize("name", DRY)
def test_dry_spectra_are_dry_and_not_green(name: str, sensor: str) -> None:
    spectra = seen(DRY[name], sensor)
    assert met("dry plants", spectra)
    for other in ("green vegetation", "sandy soil", "water", "snow"):
        assert not met(other, spectra), other


@pytest.mark.parametrize("sensor", SENSORS)
def test_dry_soil_of_the_model_is_sandy_and_no_plant(sensor: str) -> None:
    spectra = seen(prosail.spectral_lib.soil.rsoil1, sensor)
    assert met("sandy soil", spectra)
    for other in ("green vegetation", "dry plants", "clay soil", "water", "snow"):
        assert not met(other, spectra), other


def test_a_clay_dip_turns_sandy_into_clayey() -> None:
    """Common practice: a hydroxyl dip near 2200 nm that grows with clay content."""
    soil = prosail.spectral_lib.soil.rsoil1
    dipped = soil * (1 - 0.12 * np.exp(-0.5 * ((NM - 2205) / 12) ** 2)) * np.where(NM > 1800, 0.88, 1.0)
    assert met("clay soil", full(dipped))
    assert not met("sandy soil", full(dipped))


def test_cellulose_parts_dry_plants_from_clayey_soil_in_narrow_bands() -> None:
    checks = {c.name: c for c in check_material(load_materials(["clay soil"])["clay soil"], full(DRY["open canopy"]))}
    assert checks["no cellulose"].met is False
    assert "cellulose dip near 2100" in checks["no cellulose"].sentence


def test_what_the_bands_cannot_show_is_said_and_not_judged() -> None:
    four = Spectra(
        np.array([[0.03, 0.05, 0.04, 0.4]], np.float32), ("blue", "green", "red", "nir"), (490, 560, 665, 842)
    )
    checks = {c.name: c for c in check_material(load_materials(["green vegetation"])["green vegetation"], four)}
    assert checks["red edge"].met is True
    assert checks["red edge"].value == pytest.approx(10, rel=1e-5)
    assert checks["chlorophyll edge"].met is None
    assert "no band for red_edge_1 (695-715 nm)" in checks["chlorophyll edge"].sentence
    by_role = Spectra(four.reflectance, four.roles, (np.nan,) * 4)
    assert [c.met for c in check_material(load_materials(["green vegetation"])["green vegetation"], by_role)] == [
        c.met for c in checks.values()
    ]


def test_materials_of_the_users_own_and_wrong_ones(tmp_path: Path) -> None:
    one = (
        'title = "Reeds"\n[[expect]]\nname = "x"\nof = { nir = [800, 900] }\nformula = "nir"\nabove = 0.3\nsays = "s"\n'
    )
    (tmp_path / "Reed beds.toml").write_text(one)
    assert load_materials(["reed beds", "water"], tmp_path)["reed beds"].title == "Reeds"
    (tmp_path / "bad.toml").write_text(one.replace('"nir"', '"nir / red"'))
    (tmp_path / "worse.toml").write_text(one.replace("above = 0.3\n", ""))
    with pytest.raises(SettingsError) as caught:
        load_materials(["bad", "worse", "treacle"], tmp_path)
    text = str(caught.value)
    assert "uses red, which 'of' does not give" in text
    assert "needs 'above' or 'below'" in text
    assert "treacle" in text and "green vegetation" in text


def test_every_shipped_material_loads() -> None:
    names = preset_names("materials")
    assert len(names) == 8
    assert set(load_materials(names)) == set(names)
