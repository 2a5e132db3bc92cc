"""From [[features.absorption]] to steps: which bands of a scene see which dip."""

from __future__ import annotations

import difflib
from collections.abc import Mapping

from classify.errors import Problem
from classify.features.absorption import (
    DIP_MEASURES,
    EDGE_MEASURES,
    RED_EDGE,
    RED_EDGE_NM,
    AbsorptionStep,
    Dip,
    RedEdgeStep,
    dips,
)
from classify.settings.features import AbsorptionSettings

# A shoulder may lie this share of the dip's width beside where it should, and a dip needs so many bands within.
_SHOULDER_SHARE = 0.2
_INNER_BANDS = 3
_EDGE_BANDS = 4
# Broad-band stand-in for the red edge: Guyot & Baret 1988 in the form for a few narrow bands.
_INSTEAD_OF_EDGE = "red_edge_linear"


def absorption_step(
    entry: AbsorptionSettings, wavelengths_nm: Mapping[str, float], where: str
) -> AbsorptionStep | RedEdgeStep | Problem:
    """The step that an entry asks for of bands with these wavelengths, or why there is none and what is nearest."""
    name, _, date = entry.dip.partition("@")
    measures = tuple(dict.fromkeys(entry.measures))
    known = EDGE_MEASURES if name == RED_EDGE else DIP_MEASURES
    if name != RED_EDGE and name not in dips():
        close = difflib.get_close_matches(name, [*dips(), RED_EDGE], n=1, cutoff=0.6)
        hint = f"did you mean {close[0]!r}?" if close else f"there are {', '.join([*dips(), RED_EDGE])}"
        return Problem(f"there is no absorption dip {name!r}", f"{where}.dip", hint)
    if wrong := [measure for measure in measures if measure not in known]:
        return Problem(f"{name} has no {wrong[0]}", f"{where}.measures", f"choose from {', '.join(known)}")
    outputs = tuple(f"{name}_{measure}" + (f"@{date}" if date else "") for measure in measures)
    spectrum = one_each(wavelengths_nm)
    if name == RED_EDGE:
        inside = {role: nm for nm, role in spectrum.items() if RED_EDGE_NM[0] <= nm <= RED_EDGE_NM[1]}
        if len(inside) < _EDGE_BANDS:
            return Problem(_too_few(name, len(inside), _EDGE_BANDS, RED_EDGE_NM), where, _instead(_INSTEAD_OF_EDGE))
        return RedEdgeStep(outputs, measures, tuple(inside), tuple(inside.values()))
    dip = dips()[name]
    seen = bands_of_dip(dip, spectrum)
    if len(seen) < _INNER_BANDS + 2:
        too_few = _too_few(name, max(0, len(seen) - 2), _INNER_BANDS, (dip.left_nm, dip.right_nm))
        return Problem(too_few, where, _instead(dip.instead))
    return AbsorptionStep(outputs, measures, tuple(seen), tuple(seen.values()), dip.centre_nm)


def rising(wavelengths_nm: Mapping[str, float]) -> dict[str, float]:
    """Bands and their wavelengths, by rising wavelength."""
    return dict(sorted(wavelengths_nm.items(), key=lambda item: item[1]))


def one_each(wavelengths_nm: Mapping[str, float]) -> dict[float, str]:
    """The band at each wavelength, by rising wavelength; the first, where several share one."""
    spectrum: dict[float, str] = {}
    for role, nm in rising(wavelengths_nm).items():
        spectrum.setdefault(nm, role)
    return spectrum


def bands_of_dip(dip: Dip, spectrum: Mapping[float, str]) -> dict[str, float]:
    """The band nearest to each shoulder and those between, by rising wavelength; none if a shoulder has no band."""
    tolerance = _SHOULDER_SHARE * (dip.right_nm - dip.left_nm)
    left, right = (min(spectrum, key=lambda nm: abs(nm - at), default=0.0) for at in (dip.left_nm, dip.right_nm))
    if abs(left - dip.left_nm) > tolerance or abs(right - dip.right_nm) > tolerance:
        return {}
    return {role: nm for nm, role in spectrum.items() if left <= nm <= right}


def _too_few(name: str, have: int, need: int, span_nm: tuple[float, float]) -> str:
    return (
        f"{name} needs at least {need} bands of known wavelength between {span_nm[0]:g} and {span_nm[1]:g} nm, with "
        f"one at each end, and the scene has {have}"
    )


def _instead(index: str) -> str:
    return f"the published index nearest to it for broad bands is {index!r}"
