"""The splitter: never a group on both sides, whatever the polygons look like."""

from __future__ import annotations

from typing import ClassVar

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from sklearn.ensemble import RandomForestClassifier
from training_sets import training_set

from classify.models.folds import group_folds, kept_whole, spatial_blocks
from classify.models.importance import measure_importance
from classify.models.learning import learning_curve
from classify.models.validate import ScreenOptions, screen


@st.composite
def labelled_groups(draw: st.DrawFn) -> tuple[np.ndarray, np.ndarray]:
    """Codes and groups of pixels; in blocks a group may hold several classes."""
    mixed = draw(st.booleans(), label="groups hold several classes")
    groups = draw(st.integers(1, 25))
    sizes = draw(st.lists(st.integers(1, 12), min_size=groups, max_size=groups))
    group = np.repeat(np.arange(10, 10 + groups), sizes).astype(np.int32)
    random = np.random.default_rng(draw(st.integers(0, 1000)))
    codes = random.integers(1, 5, len(group) if mixed else groups).astype(np.uint8)
    shuffled = random.permutation(len(group))
    return (codes if mixed else np.repeat(codes, sizes))[shuffled], group[shuffled]


@given(data=labelled_groups(), most=st.integers(2, 8), seed=st.integers(0, 2**32 - 1))
@settings(max_examples=200)
def test_no_group_is_ever_on_both_sides(data: tuple[np.ndarray, np.ndarray], most: int, seed: int) -> None:
    codes, groups = data
    folds = group_folds(codes, groups, most, seed)
    assert 1 <= folds.count <= most
    for number in range(folds.count):
        held = folds.held_out(number)
        assert not set(groups[held]) & set(groups[~held])
    assert np.array_equal(folds.fold, group_folds(codes, groups, most, seed).fold)
    single = {int(c) for c in np.unique(codes) if len(np.unique(groups[codes == c])) == 1}
    assert set(folds.alone) == single
    assert (folds.fold[np.isin(codes, list(single))] == -1).all()
    held_once = folds.fold >= 0
    for code in set(np.unique(codes)) - single:
        only_with_others = np.isin(groups[codes == code], groups[np.isin(codes, list(single))])
        assert held_once[codes == code][~only_with_others].all()


@given(counts=st.lists(st.integers(2, 12), min_size=2, max_size=5), most=st.integers(2, 6), seed=st.integers(0, 999))
def test_every_class_stays_on_the_training_side_and_is_spread_evenly(counts: list[int], most: int, seed: int) -> None:
    codes = np.repeat(np.arange(1, len(counts) + 1), counts).astype(np.uint8)
    groups = np.arange(len(codes), dtype=np.int32)
    folds = group_folds(codes, groups, most, seed)
    for code in np.unique(codes):
        per_fold = np.bincount(folds.fold[codes == code], minlength=folds.count)
        assert per_fold.max() - per_fold.min() <= 1
        for number in range(folds.count):
            assert (codes[~folds.held_out(number)] == code).any()


@given(seed=st.integers(0, 999), size=st.integers(1, 60))
def test_blocks_keep_polygons_whole_and_near_ones_together(seed: int, size: int) -> None:
    random = np.random.default_rng(seed)
    polygon = np.repeat(np.arange(1, 31), 9).astype(np.int32)
    corner = random.integers(0, 200, (31, 2))
    rows = corner[polygon, 0] + np.tile(np.arange(9) // 3, 30)
    cols = corner[polygon, 1] + np.tile(np.arange(9) % 3, 30)
    blocks = spatial_blocks(rows.astype(np.int32), cols.astype(np.int32), polygon, size)
    by_polygon = {int(p): set(blocks[polygon == p].tolist()) for p in np.unique(polygon)}
    assert all(len(found) == 1 for found in by_polygon.values())
    middle = (corner[1:] + 1) // size
    for a in range(30):
        for b in range(30):
            same = by_polygon[a + 1] == by_polygon[b + 1]
            assert same == bool((middle[a] == middle[b]).all())


class _Watched(RandomForestClassifier):
    """A forest that remembers which pixels it was fitted on and asked for, by the number in their first feature."""

    seen: ClassVar[list[_Watched]] = []

    def fit(self, features: np.ndarray, codes: np.ndarray) -> _Watched:  # type: ignore[override]
        self.learnt_, self.asked_ = set(features[:, 0].astype(int)), set[int]()
        _Watched.seen.append(self)
        return super().fit(features, codes)  # type: ignore[no-any-return]

    def predict_proba(self, features: np.ndarray) -> np.ndarray:
        self.asked_ |= set(features[:, 0].astype(int))
        return super().predict_proba(features)


@pytest.mark.parametrize("block_m", [None, 800.0])
def test_whatever_is_held_out_no_model_is_asked_for_pixels_of_what_it_learnt_from(block_m: float | None) -> None:
    """Screening, the learning curve and importance: every fit of every one of them, by polygons and by blocks."""
    training = training_set(polygons=(9, 9, 9), pixels=6)
    training.features[:, 0] = np.arange(len(training.codes))
    groups, _ = kept_whole(training, block_m)
    assert len(np.unique(groups)) < 27 or block_m is None
    options = ScreenOptions(folds=4, repeats=2, leaky=False)
    rest = {"all but the number": training.feature_names[1:]}

    def forest(seed: int) -> _Watched:
        return _Watched(5, random_state=seed)

    _Watched.seen.clear()
    screen(training, forest, options, groups=groups)
    screened = len(_Watched.seen)
    learning_curve(training, forest, options, groups=groups)
    curved = len(_Watched.seen)
    measure_importance(training, forest, rest, options, kept_whole=groups)
    assert len(_Watched.seen) > curved > screened == 8
    for model in _Watched.seen:
        assert model.asked_
        assert not set(groups[list(model.learnt_)]) & set(groups[list(model.asked_)])
