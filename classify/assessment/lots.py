"""Random lots by number, and the order in which random draws come to the units of a population.

Lots come from the mixing function of Steele, Lea & Flood 2014 ("Fast splittable pseudorandom number generators",
OOPSLA), applied to a counter: a lot depends on the seed and its number alone, not on when or where it is drawn.

A unit of ground area a is drawn at a time -log(1 - u) / a, u uniform, and the units with the lowest times are the
sample. The n lowest are a successive sample without replacement with probabilities proportional to area (Efraimidis &
Spirakis 2006, Information Processing Letters 97, 181-185), a simple random sample where areas are equal, and the next
ones go on with it. Of n units of one area a, the first is drawn after an exponential time of rate n a, the next after
another one of rate (n - 1) a, and so on, and each is any of those left with one probability (Rényi 1953, Acta
Mathematica Academiae Scientiarum Hungaricae 4, 191-231): so units are looked at by the few that are drawn.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from classify.features.compiled import compiled

_STEP = np.uint64(0x9E3779B97F4A7C15)
_MIX_1 = np.uint64(0xBF58476D1CE4E5B9)
_MIX_2 = np.uint64(0x94D049BB133111EB)
_S30, _S27, _S31, _S11 = np.uint64(30), np.uint64(27), np.uint64(31), np.uint64(11)
_UNIT = 2.0**-53


def stream(seed: int, purpose: int) -> np.uint64:
    """Where the lots of one purpose start."""
    with np.errstate(over="ignore"):
        return np.uint64(_mixed(np.array([seed], np.uint64) * _STEP + np.uint64(purpose))[0])


def streams(start: np.uint64 | NDArray[np.uint64], numbers: NDArray[np.int64] | int) -> NDArray[np.uint64]:
    """Where further lots start, one stream for each number (uint64)."""
    with np.errstate(over="ignore"):
        return _mixed(start + (np.asarray(numbers, np.uint64) + np.uint64(1)) * _STEP)


def lots(start: np.uint64 | NDArray[np.uint64], numbers: NDArray[np.int64] | int) -> NDArray[np.float64]:
    """Uniform lots in [0, 1) of the given numbers (float64)."""
    return np.asarray((streams(start, numbers) >> _S11).astype(np.float64) * _UNIT)


def _mixed(z: NDArray[np.uint64]) -> NDArray[np.uint64]:
    with np.errstate(over="ignore"):
        z = (z ^ (z >> _S30)) * _MIX_1
        z = (z ^ (z >> _S27)) * _MIX_2
        return np.asarray(z ^ (z >> _S31))


@dataclass(frozen=True, slots=True, eq=False)
class Arrivals:
    """Draws in groups of units, by group and then by time. group, rank: int64 (n,), rank from 0 within the group; time:
    float64 (n,)."""

    group: NDArray[np.int64]
    rank: NDArray[np.int64]
    time: NDArray[np.float64]


def arrivals(
    starts: NDArray[np.uint64], count: NDArray[np.int64], area: NDArray[np.float64], until: NDArray[np.float64]
) -> Arrivals:
    """All draws up to a time, from groups of `count` >= 1 units that have each the `area` (> 0): all (m,), as `until`.

    starts: the stream of each group (uint64 (m,)), on which alone its draws depend: with a later `until` the same ones
    come, and more.
    """
    group, time = np.arange(len(starts)), np.zeros(len(starts))
    groups, turns, times = [], [], []
    drawn = 0
    while len(group):
        left = count[group] - drawn
        time = time - np.log1p(-lots(starts[group], 2 * drawn)) / (left * area[group])
        soon = time <= until[group]
        group, time, left = group[soon], time[soon], left[soon]
        groups.append(group)
        turns.append((lots(starts[group], 2 * drawn + 1) * left).astype(np.int64))
        times.append(time)
        drawn += 1
        group, time = group[left > 1], time[left > 1]
    if not groups:
        return Arrivals(np.zeros(0, np.int64), np.zeros(0, np.int64), np.zeros(0))
    whose = np.concatenate(groups)
    order = np.argsort(whose, kind="stable")
    whose, rank = whose[order], np.concatenate(turns)[order]
    _settle(whose, count[whose], rank)
    return Arrivals(whose, rank, np.concatenate(times)[order])


@compiled
def _settle(group: NDArray[np.int64], count: NDArray[np.int64], rank: NDArray[np.int64]) -> None:
    """Turn places among the units that earlier draws from a group have left into ranks within the group."""
    left = np.empty(count.max() if len(count) else 0, np.int64)
    first = 0
    while first < len(group):
        end = first + 1
        while end < len(group) and group[end] == group[first]:
            end += 1
        if end > first + 1:
            for i in range(count[first]):
                left[i] = i
            # What is drawn gives its place to the last that is left (Durstenfeld 1964, Comm. of the ACM 7, 420).
            for e in range(first, end):
                place = rank[e]
                rank[e] = left[place]
                left[place] = left[count[e] - 1 - (e - first)]
        first = end
