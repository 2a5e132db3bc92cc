"""Recognising scenes: product folders, stacks, cubes; and the presets of sensors.

Layouts of product folders follow the public naming of the agencies' products; all files are tiny and made here.
"""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np
import pytest
import rasterio
from click.testing import CliRunner
from hypothesis import given
from hypothesis import strategies as st
from test_raster_scene import read_all, write

from classify.cli.new import command
from classify.errors import DataError
from classify.raster.discover import discover, relative_to
from classify.raster.roles import ROLE_CENTRES_NM, role_in_name, role_of_word, roles_of_wavelengths
from classify.raster.scene import open_scene
from classify.raster.sensors import load_sensor
from classify.settings import load_project, preset_names
from classify.settings.starter import start_project


def band(path: Path, pixel: float = 10.0, value: int = 3000, side: int = 120, **profile) -> Path:
    path.parent.mkdir(parents=True, exist_ok=True)
    shape = (int(side / pixel),) * 2
    return write(path, np.full(shape, value, np.uint16), pixel, **profile)


def sentinel_2(folder: Path, product: str = "S2B_MSIL2A_20240611T081609_N0510_R121_T34HBH_20240611T112233") -> Path:
    inner = folder / f"{product}.SAFE" / "GRANULE" / "L2A_T34HBH_A037000_20240611T083000" / "IMG_DATA"
    stem = "T34HBH_20240611T081609"
    for pixel, names in {
        10: ("B02", "B03", "B04", "B08", "TCI"),
        20: ("B02", "B05", "B8A", "B11", "B12", "SCL"),
        60: ("B01", "B09"),
    }.items():
        for name in names:
            band(inner / f"R{pixel}m" / f"{stem}_{name}_{pixel}m.tif", pixel, 4 if name == "SCL" else 3000)
    return folder / f"{product}.SAFE"


def landsat(folder: Path, product: str = "LC09_L2SP_174083_20240611_20240612_02_T1") -> Path:
    for name in (*(f"SR_B{k}" for k in range(1, 8)), "ST_B10"):
        band(folder / product / f"{product}_{name}.TIF", 30, 20_000)
    band(folder / product / f"{product}_QA_PIXEL.TIF", 30, 21_824)
    return folder / product


def opened(folder: Path):
    project = load_project(folder)
    return open_scene(project.scene, project)


# --- product folders ------------------------------------------------------------------------------------------------


def test_a_sentinel_2_product_becomes_a_project_that_opens(tmp_path):
    safe = sentinel_2(tmp_path)
    result = CliRunner().invoke(command, [str(tmp_path), "--scene", str(safe)])
    assert result.exit_code == 0, result.output
    assert "Sentinel-2" in result.output
    assert "water_vapour" in result.output
    text = (tmp_path / "project.toml").read_text(encoding="utf-8")
    assert '"S2B_MSIL2A' in text, "paths below the project are relative"
    scene = opened(tmp_path)
    assert set(scene.roles) == {
        "coastal",
        "blue",
        "green",
        "red",
        "red_edge_1",
        "nir",
        "nir_narrow",
        "swir_1",
        "swir_2",
    }
    assert scene.grid.transform.a == 10
    assert scene.band("blue").native.transform.a == 10, "the finer of two files of one band"
    # 3000 * 0.0001 - 0.1: by hand from the product's specification.
    assert read_all(scene)["swir_1"][3, 3] == pytest.approx(0.2, abs=1e-6)


@pytest.mark.parametrize(("baseline", "expected"), [("N0300", 0.3), ("N0510", 0.2)])
def test_the_processing_baseline_decides_on_the_offset(tmp_path, baseline, expected):
    safe = sentinel_2(tmp_path, f"S2A_MSIL2A_20200611T081611_{baseline}_R121_T34HBH_20200611T112233")
    start_project(tmp_path, discover(str(safe)))
    assert read_all(opened(tmp_path))["red"][0, 0] == pytest.approx(expected, abs=1e-6)


def test_an_offset_in_the_products_metadata_is_believed(tmp_path):
    safe = sentinel_2(tmp_path)
    offsets = "".join(f'<BOA_ADD_OFFSET band_id="{k}">-500</BOA_ADD_OFFSET>' for k in range(13))
    (safe / "MTD_MSIL2A.xml").write_text(
        f'<a><BOA_QUANTIFICATION_VALUE unit="none">10000</BOA_QUANTIFICATION_VALUE>{offsets}</a>', encoding="utf-8"
    )
    draft = discover(str(safe))
    assert draft.offset == -0.05
    assert any("-0.05" in text for text in draft.assumptions)


@pytest.mark.parametrize(
    ("product", "sensor", "count"),
    [("LC09_L2SP_174083_20240611_20240612_02_T1", "landsat-8-9-c2-l2", 7),
     ("LE07_L2SP_174083_20010611_20200612_02_T1", "landsat-4-7-c2-l2", 6)],
)  # fmt: skip
def test_landsat_products_by_their_names(tmp_path, product, sensor, count):
    draft = discover(str(landsat(tmp_path, product)))
    assert (draft.sensor, len(draft.bands)) == (sensor, count)
    assert draft.mask.file.endswith("QA_PIXEL.TIF")
    start_project(tmp_path / "p", draft)
    scene = opened(tmp_path / "p")
    # 20000 * 0.0000275 - 0.2 and 21824 = clear, from the product guide's tables (from memory).
    assert read_all(scene)["red"][0, 0] == pytest.approx(0.35, abs=1e-6)


def test_products_of_several_dates_become_dates_of_one_scene(tmp_path):
    landsat(tmp_path / "scenes", "LC08_L2SP_174083_20240603_20240612_02_T1")
    landsat(tmp_path / "scenes", "LC09_L2SP_174083_20240119_20240201_02_T1")
    landsat(tmp_path / "scenes", "LE07_L2SP_174083_20010611_20200612_02_T1")
    draft = discover(str(tmp_path / "scenes"))
    assert any("fewer bands: LE07" in text for text in draft.assumptions)
    start_project(tmp_path, relative_to(draft, tmp_path))
    project = load_project(tmp_path)
    # A TM or ETM+ product has a band less than an OLI one, so that it is no date of the same kind.
    assert project.scene.date == "2024_01_19"
    assert [date.name for date in project.scene.dates] == ["2024_06_03"]
    assert "20240119" in project.scene.bands["red"].file
    scene = opened(tmp_path)
    assert "red@2024_06_03" in scene.roles
    assert set(scene.masks) == {"2024_01_19", "2024_06_03"}
    text = (tmp_path / "project.toml").read_text(encoding="utf-8")
    for line in ("[scene.composite]", 'method = "median"'):
        text = text.replace(f"# {line}", line)
    (tmp_path / "project.toml").write_text(text, encoding="utf-8")
    assert "clear_count" in opened(tmp_path).roles


def test_tiles_of_one_date_are_no_dates(tmp_path):
    landsat(tmp_path, "LC08_L2SP_174083_20240603_20240612_02_T1")
    landsat(tmp_path, "LC08_L2SP_174084_20240603_20240612_02_T1")
    with pytest.raises(DataError, match=r"2 products that are not dates.*174083"):
        discover(str(tmp_path))


def test_bare_band_names_are_a_guess_and_said_to_be_one(tmp_path):
    for name in ("B02", "B03", "B04", "B08"):
        band(tmp_path / "scene" / f"{name}.tif")
    draft = discover(str(tmp_path / "scene"))
    assert draft.sensor == "sentinel-2-l2a"
    assert any("guess" in text for text in draft.assumptions)


def test_files_named_by_role_and_files_that_say_nothing(tmp_path):
    for name in ("flight7_blue", "flight7_green", "flight7_red", "flight7_red_edge", "flight7_NIR"):
        band(tmp_path / "a" / f"{name}.tif")
    draft = discover(str(tmp_path / "a"))
    assert {b.role for b in draft.bands} == {"blue", "green", "red", "red_edge_1", "nir"}
    assert draft.scale == 1e-4
    assert any("3000" in text for text in draft.assumptions)
    for name in ("one", "two"):
        band(tmp_path / "b" / f"{name}.tif")
    with pytest.raises(DataError, match=r"cannot be told.*one\.tif"):
        discover(str(tmp_path / "b"))
    (tmp_path / "c").mkdir()
    with pytest.raises(DataError, match="no such file or folder"):
        discover(str(tmp_path / "d"))
    with pytest.raises(DataError, match="no raster"):
        discover(str(tmp_path / "c"))


# --- stacks and cubes -----------------------------------------------------------------------------------------------


def test_an_orthophoto_of_three_colours_and_near_infrared(tmp_path):
    pixels = np.random.default_rng(0).integers(1, 255, (4, 30, 30), dtype=np.uint8)
    write(tmp_path / "ortho.tif", pixels, 0.25, photometric="RGB", alpha="NO")
    draft = discover(str(tmp_path / "ortho.tif"))
    assert [b.role for b in draft.bands] == ["red", "green", "blue", "nir"]
    assert draft.sensor == "airborne-4-band"
    assert draft.scale == pytest.approx(1 / 255)
    start_project(tmp_path, draft)
    assert np.allclose(read_all(opened(tmp_path))["nir"], pixels[3] / 255, rtol=1e-5)


def test_a_drone_stack_with_described_bands_and_one_without(tmp_path):
    pixels = np.full((5, 20, 20), 0.2, np.float32)
    path = write(tmp_path / "drone.tif", pixels, 0.1)
    with rasterio.open(path, "r+") as target:
        target.descriptions = ("Blue", "Green", "Red", "NIR", "Red edge")
    draft = discover(str(path))
    assert [b.role for b in draft.bands] == ["blue", "green", "red", "nir", "red_edge_1"]
    assert draft.sensor == "drone-5-band"
    assert draft.scale is None, "values of reflectance need no scale"
    bare = write(tmp_path / "bare.tif", pixels, 0.1)
    assert any("guess" in text for text in discover(str(bare)).assumptions)
    six = write(tmp_path / "six.tif", np.full((6, 20, 20), 0.2, np.float32), 30.0)
    assert [b.role for b in discover(str(six)).bands][3:] == ["nir", "swir_1", "swir_2"]
    seven = write(tmp_path / "seven.tif", np.full((7, 20, 20), 0.2, np.float32), 0.1)
    assert [b.role for b in discover(str(seven)).bands] == [f"band_{k}" for k in range(1, 8)]


def test_a_cube_with_wavelengths_and_bad_bands(tmp_path):
    wavelengths = np.arange(400, 2500, 30.0)
    cube = np.random.default_rng(1).integers(100, 5000, (len(wavelengths), 6, 7)).astype(np.int16)
    path = write(tmp_path / "cube.dat", cube, driver="ENVI")
    header = tmp_path / "cube.hdr"
    good = [0 if 1340 < w < 1420 or 1800 < w < 1950 else 1 for w in wavelengths]
    text = re.sub(r"(?s)\nband names = \{.*?\}", "", header.read_text())
    header.write_text(
        text + "wavelength units = Nanometers\nwavelength = {" + ", ".join(f"{w}" for w in wavelengths) + "}\n"
        + "bbl = {" + ", ".join(map(str, good)) + "}\nreflectance scale factor = 10000\n"
    )  # fmt: skip
    for source in (path, header):
        draft = discover(str(source))
        assert draft.sensor == "imaging-spectrometer"
        assert len(draft.bands) == sum(good)
        by_role = {b.role: b for b in draft.bands}
        for role in ("blue", "green", "red", "nir", "swir_1", "swir_2"):
            assert abs(by_role[role].wavelength_nm - ROLE_CENTRES_NM[role]) <= 15
        assert by_role["nm_1000"].band == 21
    assert any("bad" in text for text in draft.assumptions)
    assert draft.scale is None, "the header states it"
    start_project(tmp_path, draft)
    scene = opened(tmp_path)
    assert scene.band("nm_1000").wavelength_nm == 1000
    assert np.allclose(read_all(scene, roles=["nm_1000"])["nm_1000"], cube[20] * 1e-4, rtol=1e-5)


def test_wavelengths_in_micrometres_are_understood(tmp_path):
    path = write(tmp_path / "c.tif", np.full((3, 5, 5), 0.2, np.float32))
    with rasterio.open(path, "r+") as target:
        for k, micrometres in enumerate(("0.49", "0.66", "1.61"), 1):
            target.update_tags(k, wavelength=micrometres, wavelength_units="Micrometers")
    draft = discover(str(path))
    assert [b.role for b in draft.bands] == ["blue", "red", "swir_1"]
    assert [b.wavelength_nm for b in draft.bands] == [490, 660, 1610]


@given(st.lists(st.floats(350, 2500), min_size=1, max_size=60))
def test_every_band_gets_a_role_of_its_own(wavelengths):
    roles = roles_of_wavelengths(wavelengths)
    assert len(set(roles)) == len(wavelengths) == len(roles)
    for role, wavelength in zip(roles, wavelengths, strict=True):
        if role in ROLE_CENTRES_NM:
            assert abs(wavelength / ROLE_CENTRES_NM[role] - 1) <= 0.09


def test_words_for_roles():
    assert role_of_word("Red Edge 2") == "red_edge_2"
    assert role_of_word("nir08") == "nir_narrow"
    assert role_of_word("redundant") is None
    assert role_in_name("IMG_0012_red_edge") == "red_edge_1"
    assert role_in_name("blue.v2") == "blue"
    assert role_in_name("bluebird_7") is None


# --- presets --------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", preset_names("sensors"))
def test_every_preset_is_complete_and_consistent(name):
    sensor = load_sensor(name)
    assert sensor.title
    assert len(sensor.source) > 60, "figures need their source"
    for role, found in sensor.bands.items():
        assert role in ROLE_CENTRES_NM, role
        assert abs(found.wavelength_nm / ROLE_CENTRES_NM[role] - 1) < 0.06
        assert 5 < found.width_nm < 0.2 * found.wavelength_nm
    if sensor.mask:
        assert sensor.mask.codes or sensor.mask.bits
        for meaning in sensor.mask.reject:
            assert sensor.mask.field(meaning) is not None, meaning
        for meaning in ("cloud", "cloud shadow", "snow", "no data"):
            assert sensor.mask.field(meaning) is not None, meaning


def test_landsat_quality_bits_reject_the_published_values():
    # QA_PIXEL values and their meaning: Landsat 8-9 Collection 2 Level 2 Science Product Guide, table of pixel values
    # (from memory): 21824 clear land, 21952 clear water, 22280 cloud of high confidence, 23888 cloud shadow,
    # 30048 snow, 1 fill, 54596 cirrus of high confidence.
    mask = load_sensor("landsat-8-9-c2-l2").mask
    values = np.array([21824, 21952, 22280, 23888, 30048, 1, 54596], np.uint16)

    def rejects(*meanings: str) -> list[int]:
        return values[np.any([mask.field(m).rejects(values) for m in meanings], axis=0)].tolist()

    assert rejects(*mask.reject) == [22280, 23888, 1, 54596]
    assert rejects("snow") == [30048]
    assert rejects("cloud confidence high") == [22280]
    assert rejects("cloud shadow confidence high") == [23888]
