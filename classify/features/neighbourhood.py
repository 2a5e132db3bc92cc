"""From [[features.texture]] and [[features.terrain]] to steps."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

from classify.errors import Problem
from classify.features.facts import SceneFacts
from classify.features.indices import find_index
from classify.features.terrain import TerrainStep
from classify.features.texture import CO_OCCURRENCE, TextureStep
from classify.settings.features import TerrainSettings, TextureSettings


def texture_steps(
    entries: Sequence[TextureSettings], facts: SceneFacts
) -> tuple[list[tuple[str, TextureStep]], list[Problem]]:
    """One step for the statistics of one window over one layer, with the key of the first; and all problems."""
    steps: dict[tuple[object, ...], tuple[str, TextureStep]] = {}
    problems: list[Problem] = []
    for place, entry in enumerate(entries, start=1):
        where = f"features.texture[{place}]"
        problem = _too_large(entry.size, facts, where) or _no_range(entry, facts, where)
        if problem:
            problems.append(problem)
            continue
        low, high = entry.range or _usual_range(entry.of)
        name = entry.name or _texture_name(entry)
        co_occurrence = entry.statistic in CO_OCCURRENCE
        key = (entry.of, entry.size, co_occurrence and (entry.levels, low, high))
        if key in steps:
            first, step = steps[key]
            steps[key] = (
                first,
                replace(step, outputs=(*step.outputs, name), statistics=(*step.statistics, entry.statistic)),
            )
        else:
            steps[key] = (
                where,
                TextureStep((name,), entry.of, (entry.statistic,), entry.size, entry.levels, low, high),
            )
    return list(steps.values()), problems


def terrain_step(entry: TerrainSettings, facts: SceneFacts, where: str) -> TerrainStep | Problem:
    """The step that an entry asks for, or why there is none."""
    window = entry.size if entry.statistic == "topographic position" else 3
    problem = _too_large(window, facts, where)
    if problem:
        return problem
    if facts.pixel_m is None:
        return Problem(
            f"{entry.statistic} needs to know the ground size of a pixel, and the scene does not say it", where,
            "give the scene a CRS",
        )  # fmt: skip
    of, _, date = entry.of.partition("@")
    own = entry.statistic.replace(" ", "_") + (f"_{entry.size}" if entry.statistic == "topographic position" else "")
    name = entry.name or (own if of == "elevation" else f"{of}_{own}") + (f"@{date}" if date else "")
    return TerrainStep(
        name, entry.of, entry.statistic, facts.pixel_m, window, entry.sun_azimuth, entry.sun_elevation
    )  # fmt: skip


def _texture_name(entry: TextureSettings) -> str:
    """`nir_range_3`, or `nir_range_3@wet` for a layer of one date: a name that formulas can use."""
    of, _, date = entry.of.partition("@")
    return f"{of}_{entry.statistic.replace(' ', '_')}_{entry.size}" + (f"@{date}" if date else "")


def _usual_range(of: str) -> tuple[float, float]:
    index = find_index(of.partition("@")[0])
    return index.usual if index else (0.0, 1.0)


def _too_large(size: int, facts: SceneFacts, where: str) -> Problem | None:
    if facts.shape_yx is None or size <= min(facts.shape_yx):
        return None
    height, width = facts.shape_yx
    return Problem(
        f"a window of {size} x {size} pixels does not fit the scene, which has {width} x {height}", where,
        "take a smaller size",
    )  # fmt: skip


def _no_range(entry: TextureSettings, facts: SceneFacts, where: str) -> Problem | None:
    """Reflectance and indices have a range to make grey levels of; what else a layer holds must be said."""
    if entry.statistic not in CO_OCCURRENCE or entry.range or entry.of not in facts.ancillary:
        return None
    return Problem(
        f"{entry.statistic} of {entry.of!r} needs a range of values to divide into grey levels", where,
        "write range = [lowest, highest]",
    )  # fmt: skip
