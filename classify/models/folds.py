"""Splits that keep polygons (or spatial blocks) whole: never a pixel of one group on both sides."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from classify.raster.area import pixel_size_m
from classify.training.dataset import TrainingSet


@dataclass(frozen=True, eq=False)
class Folds:
    """fold: int16 (n,), the fold in which a pixel is held out; -1: always on the training side.

    count: number of folds. alone: codes of classes with a single group; they can be learnt from, not held out.
    """

    fold: NDArray[np.int16]
    count: int
    alone: tuple[int, ...]

    def held_out(self, number: int) -> NDArray[np.bool_]:
        """Mask (n,) of the pixels held out in one fold."""
        held: NDArray[np.bool_] = self.fold == number
        return held


def group_folds(codes: NDArray[np.uint8], groups: NDArray[np.int32], most: int, seed: int) -> Folds:
    """Deal groups into at most `most` folds so that every class is spread over as many folds as it has groups.

    Classes are dealt from the one with fewest groups; a group goes to the fold that has fewest groups of the class,
    then fewest pixels, in an order shuffled by the seed. A class with two polygons or more therefore always keeps one
    on the training side. The only group of a class stays on the training side. `codes`, `groups`: (n,).
    """
    numbers, member = np.unique(groups, return_inverse=True)
    present, code_index = np.unique(codes, return_inverse=True)
    pixels = np.zeros((len(numbers), len(present)), dtype=np.int64)
    np.add.at(pixels, (member, code_index), 1)
    per_class = (pixels > 0).sum(axis=0)
    alone = per_class < 2
    count = int(min(most, max(per_class.max(), 1)))
    fold_of = np.full(len(numbers), -2, dtype=np.int16)
    fold_of[(pixels[:, alone] > 0).any(axis=1)] = -1
    shuffled = np.random.default_rng(seed).permutation(len(numbers))
    groups_in = np.zeros((count, len(present)), dtype=np.int64)
    pixels_in = np.zeros(count, dtype=np.int64)
    for index in np.argsort(per_class, kind="stable"):
        for group in shuffled[(pixels[shuffled, index] > 0) & (fold_of[shuffled] == -2)]:
            chosen = int(np.lexsort((pixels_in, groups_in[:, index]))[0])
            fold_of[group] = chosen
            groups_in[chosen] += pixels[group] > 0
            pixels_in[chosen] += pixels[group].sum()
    return Folds(fold_of[member], count, tuple(int(code) for code in present[alone]))


def kept_whole(training: TrainingSet, block_m: float | None) -> tuple[NDArray[np.int32], str]:
    """What a split keeps on one side, as group numbers (n,), and words for it: polygons, or blocks of `block_m`."""
    if block_m is None:
        return training.polygon, "polygons"
    size_px = max(1, round(block_m / float(np.sqrt(np.prod(pixel_size_m(training.grid))))))
    blocks = spatial_blocks(training.rows, training.cols, training.polygon, size_px)
    return blocks, f"blocks of {block_m:g} m"


def spatial_blocks(
    rows: NDArray[np.int32], cols: NDArray[np.int32], polygon: NDArray[np.int32], size_px: int
) -> NDArray[np.int32]:
    """Group numbers (n,) by square blocks of `size_px`; a polygon belongs wholly to the block of its middle pixel."""
    _, member = np.unique(polygon, return_inverse=True)
    size = np.bincount(member)
    middle_row = np.bincount(member, rows) / size
    middle_col = np.bincount(member, cols) / size
    block = np.stack([middle_row // size_px, middle_col // size_px], axis=1).astype(np.int64)
    _, block_number = np.unique(block, axis=0, return_inverse=True)
    return block_number.reshape(-1)[member].astype(np.int32)
