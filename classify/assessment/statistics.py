"""The statistics of a reference sample, each as its y and x for the one estimator. To add one, write its y and x."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from classify.assessment.estimate import Floats, Ints, Ratio, Tally
from classify.assessment.sample import NO_LABEL


def overall_accuracy(t: Tally) -> Ratio:
    """Proportion of the mapped area that the map has right."""
    return Ratio(_right(t), t.mapped)


def users_accuracy(t: Tally, c: int) -> Ratio:
    """Of the area mapped as class c, the proportion that is c."""
    return Ratio(_both(t.map, t.reference, c), _is(t.map, c), map_class=c)


def producers_accuracy(t: Tally, c: int) -> Ratio:
    """Of the area that is class c, the proportion mapped as c."""
    return Ratio(_both(t.map, t.reference, c), _is(t.reference, c))


def f1(t: Tally, c: int) -> Ratio:
    """Harmonic mean of user's and producer's accuracy: twice the agreement over the two class areas added."""
    return Ratio(2 * _both(t.map, t.reference, c), _is(t.map, c) + _is(t.reference, c))


def area_proportion(t: Tally, c: int) -> Ratio:
    """Proportion of the sampled area that is mapped and is class c."""
    return Ratio(_is(t.reference, c), np.ones_like(t.share))


def either_overall(t: Tally) -> Ratio:
    """Proportion of the mapped area where the map agrees with the first or the alternate label."""
    return Ratio(_right_either(t), t.mapped)


def either_users(t: Tally, c: int) -> Ratio:
    """Of the area mapped as class c, the proportion where the first or the alternate label is c."""
    return Ratio(_right_either(t) * _is(t.map, c), _is(t.map, c), map_class=c)


def within(ratio: Ratio, t: Tally, region: int) -> Ratio:
    """The same statistic of one region (domain): y and x are 0 elsewhere (Cochran 1977, section 2.13)."""
    inside = _is(t.region, region)
    return Ratio(ratio.y * inside, ratio.x * inside, ratio.map_class)


def region_share(t: Tally, region: int) -> Ratio:
    """Proportion of the sampled area that is mapped and lies in a region."""
    return Ratio(t.mapped * _is(t.region, region), np.ones_like(t.share))


def area_in_region(t: Tally, c: int, region: int) -> Ratio:
    """Proportion of the sampled area that is mapped, is class c and lies in a region."""
    return Ratio(_is(t.reference, c) * _is(t.region, region), np.ones_like(t.share))


def on_other_map(t: Tally) -> Tally:
    """The same tally with the second map in place of the first. Its strata are no classes of that map."""
    return replace(t, map=t.other_map, pure=np.full_like(t.pure, NO_LABEL))


def _is(classes: Ints, c: int) -> Floats:
    return np.asarray(classes == c, dtype=np.float64)


def _both(first: Ints, second: Ints, c: int) -> Floats:
    return np.asarray((first == c) & (second == c), dtype=np.float64)


def _right(t: Tally) -> Floats:
    return np.asarray((t.map == t.reference) * t.mapped)


def _right_either(t: Tally) -> Floats:
    return np.asarray(((t.map == t.reference) | (t.map == t.alternate)) * t.mapped)
