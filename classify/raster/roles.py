"""Which role a band plays, from what files call it: words, wavelengths, or its place in the usual order."""

from __future__ import annotations

import re
from collections.abc import Sequence

# Centre wavelengths in nm of the roles that formulas use; common practice, close to those of the sensor presets.
ROLE_CENTRES_NM = {
    "coastal": 443.0, "blue": 490.0, "green": 560.0, "red": 665.0, "red_edge_1": 705.0, "red_edge_2": 740.0,
    "red_edge_3": 783.0, "nir": 842.0, "nir_narrow": 865.0, "water_vapour": 945.0, "swir_1": 1610.0, "swir_2": 2200.0,
}  # fmt: skip

_BROAD = ("blue", "green", "red", "nir", "swir_1", "swir_2")

# Words for roles in file names, band descriptions and the common names of the STAC electro-optical extension.
_WORDS = {
    "coastal": "coastal", "coastalaerosol": "coastal", "blue": "blue", "green": "green", "red": "red",
    "rededge": "red_edge_1", "rededge1": "red_edge_1", "rededge2": "red_edge_2", "rededge3": "red_edge_3",
    "rededge071": "red_edge_1", "rededge075": "red_edge_2", "rededge078": "red_edge_3",
    "nir": "nir", "nearinfrared": "nir", "nir08": "nir_narrow", "nirnarrow": "nir_narrow", "narrownir": "nir_narrow",
    "nir09": "water_vapour", "watervapour": "water_vapour", "watervapor": "water_vapour",
    "swir1": "swir_1", "swir16": "swir_1", "swir2": "swir_2", "swir22": "swir_2",
}  # fmt: skip


def role_of_word(text: str) -> str | None:
    """The role that a whole word means: "Red edge 1", "rededge-1" and "nir08" are known, "T34_nir_v2" is not."""
    return _WORDS.get(re.sub(r"[^a-z0-9]", "", text.casefold()))


def role_in_name(text: str) -> str | None:
    """The role that a name ends on or holds as a part between separators: "IMG_0012_nir" and "blue.v2" are known."""
    parts = [part for part in re.split(r"[^a-z0-9]+", text.casefold()) if part]
    # Longest runs first, so that "red_edge_1" is not taken for "red", and from the end, where names are specific.
    for length in (3, 2, 1):
        for start in range(len(parts) - length, -1, -1):
            if role := _WORDS.get("".join(parts[start : start + length])):
                return role
    return None


def holds(text: str, name: str) -> bool:
    """Whether a file name holds a band's name as a part between separators, whatever the case."""
    return re.search(rf"(?<![A-Za-z0-9]){re.escape(name)}(?![A-Za-z0-9])", text, flags=re.IGNORECASE) is not None


def red_edge_role(wavelength_nm: float) -> str:
    """Which of the red-edge roles lies nearest to a wavelength."""
    edges = ("red_edge_1", "red_edge_2", "red_edge_3")
    return min(edges, key=lambda role: abs(ROLE_CENTRES_NM[role] - wavelength_nm))


def roles_of_wavelengths(wavelengths_nm: Sequence[float]) -> list[str]:
    """Roles of the bands nearest to the usual centres, one band each; the others are named by their wavelength.

    The broad roles that most formulas use choose first and accept a band up to 9 % away, the narrow ones up to 4 %.
    """
    taken: dict[int, str] = {}
    for roles, tolerance in ((_BROAD, 0.09), (tuple(ROLE_CENTRES_NM), 0.04)):
        pairs = sorted(
            (abs(wavelength / ROLE_CENTRES_NM[role] - 1), k, role)
            for role in roles
            for k, wavelength in enumerate(wavelengths_nm)
        )
        for distance, k, role in pairs:
            if distance <= tolerance and k not in taken and role not in taken.values():
                taken[k] = role
    return distinct([taken.get(k, f"nm_{round(wavelength)}") for k, wavelength in enumerate(wavelengths_nm)])


def distinct(names: Sequence[str]) -> list[str]:
    """The names, with a number added to those that occur again."""
    seen: dict[str, int] = {}
    result = []
    for name in names:
        seen[name] = seen.get(name, 0) + 1
        result.append(name if seen[name] == 1 else f"{name}_{seen[name]}")
    return result
