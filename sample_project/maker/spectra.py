"""Band reflectances of the covers, from leaf and canopy physics; writes spectra.csv. Needs the package prosail.

Run once (`python -m maker.spectra` in sample_project/) and keep the CSV, so that make_sample.py needs no physics.
Canopies: PROSPECT-D leaves (Féret et al. 2017) in a 4SAIL canopy (Verhoef et al. 2007) over a soil. Soils: the dry and
wet soil spectra of the same package, tilted and given the absorption features of their material: a lopsided hydroxyl
dip near 2200 nm that grows with clay, an iron-oxide dip near 870 nm. Roofs, paving and water are drawn by hand
from common knowledge of their shapes and stand for no measured object.
"""

from __future__ import annotations

import csv
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

Spectrum = NDArray[np.float64]  # reflectance at 400, 401 ... 2500 nm

WAVELENGTHS_NM = np.arange(400.0, 2501.0)

# Role: centre and full width in nm of the invented sensor's bands, taken as boxes.
BANDS_NM: dict[str, tuple[float, float]] = {
    "blue": (490, 64), "green": (560, 36), "red": (665, 32), "nir": (840, 104),
    "red_edge_1": (705, 16), "red_edge_2": (740, 16), "red_edge_3": (783, 20), "nir_narrow": (865, 22),
    "swir_1": (1610, 92), "swir_2": (2190, 180),
}  # fmt: skip

SUN_ZENITH_DEG, VIEW_ZENITH_DEG, AZIMUTH_DEG = 48.0, 4.0, 110.0


def dip(centre_nm: float, depth: float, left_nm: float, right_nm: float) -> Spectrum:
    """Multiplier with one absorption dip of its own width (standard deviation, nm) on either side."""
    width = np.where(centre_nm > WAVELENGTHS_NM, left_nm, right_nm)
    return 1 - depth * np.exp(-0.5 * ((WAVELENGTHS_NM - centre_nm) / width) ** 2)


def soil(brightness: float, moisture: float, *, clay: float, iron: float, tilt: float) -> Spectrum:
    """Soil reflectance. moisture, clay, iron in 0..1; tilt steepens (> 0) or flattens the visible slope."""
    from prosail import spectral_lib  # type: ignore[import-untyped]

    dry, wet = spectral_lib.soil.rsoil1, spectral_lib.soil.rsoil2
    base: Spectrum = brightness * ((1 - moisture) * dry + moisture * wet)
    slope = (np.minimum(WAVELENGTHS_NM, 900.0) / 900.0) ** tilt
    hydroxyl = dip(2208, 0.42 * clay, 75, 45) * dip(1410, 0.25 * clay, 30, 30) * dip(1910, 0.4 * clay, 35, 50)
    result: Spectrum = base * slope * hydroxyl * dip(870, 0.18 * iron, 70, 70)
    return result


def canopy(background: Spectrum, *, cab: float, brown: float, water: float, dry: float, lai: float, n: float = 1.6,
           angle: float = 57.0) -> Spectrum:  # fmt: skip
    """Canopy reflectance. cab and carotenoids in ug/cm2, water and dry matter of the leaf in cm and g/cm2."""
    import prosail

    result: Spectrum = prosail.run_prosail(
        n, cab, 0.5 + 0.2 * cab, brown, water, dry, lai, angle, 0.1, SUN_ZENITH_DEG, VIEW_ZENITH_DEG, AZIMUTH_DEG,
        prospect_version="D", rsoil0=background,
    )  # fmt: skip
    return result


def drawn(points: dict[float, float]) -> Spectrum:
    """A spectrum drawn through a few (nm, reflectance) points."""
    result: Spectrum = np.interp(WAVELENGTHS_NM, list(points), list(points.values()))
    return result


def spectra() -> dict[tuple[str, str], Spectrum]:
    """Every cover's variants, between which the landscape mixes."""
    # Litter brightens the dry sward until, from blue to near infrared, nothing parts it from soil.
    sand = soil(0.78, 0.1, clay=0.04, iron=0.25, tilt=1.20)
    red_sand = soil(0.78, 0.2, clay=0.10, iron=0.5, tilt=1.30)
    clay = soil(0.88, 0.2, clay=0.55, iron=0.30, tilt=1.20)
    moist_clay = soil(0.80, 0.4, clay=0.75, iron=0.40, tilt=1.15)
    straw = canopy(clay, cab=0, brown=0.6, water=0.0005, dry=0.005, lai=1.4, n=2.6)
    return {
        ("Irrigated pasture", "lush"): canopy(clay, cab=46, brown=0, water=0.016, dry=0.005, lai=4.2),
        ("Irrigated pasture", "grazed"): canopy(clay, cab=31, brown=0.05, water=0.011, dry=0.005, lai=1.5),
        ("Woodland", "dense"): 0.74 * canopy(straw, cab=40, brown=0.1, water=0.013, dry=0.015, lai=3.4, n=1.9),
        ("Woodland", "open"): 0.72 * canopy(straw, cab=28, brown=0.3, water=0.010, dry=0.015, lai=1.1, n=1.9),
        ("Dry grass", "standing"): straw,
        ("Dry grass", "grazed"): canopy(clay, cab=0, brown=0.5, water=0.0004, dry=0.005, lai=0.85, n=2.6),
        ("Clay loam", "dry"): clay,
        ("Clay loam", "moist"): moist_clay,
        ("Sandy soil", "pale"): sand,
        ("Sandy soil", "red"): red_sand,
        ("Roofs and paving", "metal"): drawn({400: 0.30, 700: 0.36, 1000: 0.35, 1650: 0.40, 2500: 0.38}),
        ("Roofs and paving", "tile"): drawn({400: 0.06, 540: 0.09, 640: 0.21, 870: 0.26, 1650: 0.40, 2500: 0.41}),
        ("Roofs and paving", "asphalt"): drawn({400: 0.08, 700: 0.11, 1000: 0.13, 1650: 0.16, 2500: 0.15}),
        ("Water", "clear"): drawn({400: 0.055, 500: 0.05, 570: 0.04, 680: 0.018, 750: 0.008, 900: 0.004, 2500: 0.001}),
        ("Water", "turbid"): drawn({400: 0.05, 500: 0.07, 570: 0.10, 690: 0.085, 760: 0.035, 900: 0.018, 2500: 0.003}),
    }  # fmt: skip


def band_means(spectrum: Spectrum) -> list[float]:
    """Reflectance of each band, in the order of BANDS_NM, rounded to four places."""
    inside = [np.abs(WAVELENGTHS_NM - centre) <= width / 2 for centre, width in BANDS_NM.values()]
    return [round(float(spectrum[chosen].mean()), 4) for chosen in inside]


def write(path: Path) -> None:
    """Write the table that make_sample.py reads."""
    with path.open("w", newline="", encoding="utf-8") as stream:
        table = csv.writer(stream, lineterminator="\n")
        table.writerow(["cover", "variant", *BANDS_NM])
        table.writerows([*name, *band_means(spectrum)] for name, spectrum in spectra().items())


if __name__ == "__main__":
    write(Path(__file__).resolve().parent.parent / "spectra.csv")
