"""Reach: is a pixel inside what the training data cover?

The idea is that of Meyer & Pebesma 2021, "Predicting into unknown space? Estimating the area of applicability of
spatial prediction models", Methods in Ecology and Evolution 12: an index of how unlike the training data a pixel is,
and a threshold from training data held out as in cross-validation. The index is another one. Theirs is the distance to
the nearest training pixel in standardised features, weighted by their importance, over the mean distance among training
pixels: one yardstick for all, which the class that varies most sets, so that a new class between the others stays
within reach. Here:

- features are scaled and decorrelated by their covariance within polygons, so that a direction counts by how much it
  says beyond the noise of one place;
- the yardstick is local: the distance to the tenth nearest training pixel, over the mean of that same distance at those
  ten. This is the local outlier factor (Breunig, Kriegel, Ng & Sander 2000, SIGMOD Record 29) in the simplified form of
  Schubert, Zimek & Kriegel 2014, Data Mining and Knowledge Discovery 28;
- the threshold is the value that one in twenty training pixels exceeds when their polygon is held out.
"""

from __future__ import annotations

import io
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray
from sklearn.covariance import ledoit_wolf

from classify.errors import ModelError
from classify.features.compiled import compiled
from classify.models.folds import group_folds
from classify.models.nearest import Points, group_points
from classify.training.dataset import TrainingSet
from classify.training.draws import even_draw

# Pixels that stand for the training set, drawn evenly over the polygons of each class.
_POINTS = 5000
_NEIGHBOURS = 10
# Of many features, so many directions, those in which polygons differ most: the search takes time by their number.
_DIRECTIONS = 32
# Spread within polygons that counts at least, in units of the spread of all pixels.
_LEAST_SPREAD = 0.01
# Share of training pixels, their polygon held out, that lie beyond reach.
_BEYOND = 0.05


@dataclass(frozen=True, eq=False)
class Reach:
    """centre: float64 (f,). rotation: float64 (f, d), takes a pixel less the centre to the d directions in which
    distances are measured. points: float32 (m, d), training pixels there. spacing: float32 (m,), from each to its
    `neighbours`-th nearest. threshold: index beyond which a pixel is out of reach.
    """

    centre: NDArray[np.float64]
    rotation: NDArray[np.float64]
    points: NDArray[np.float32]
    spacing: NDArray[np.float32]
    neighbours: int
    threshold: float

    @cached_property
    def _arranged(self) -> Points:
        return group_points(self.points, self.spacing)

    def index(self, features: NDArray[np.float32]) -> NDArray[np.float32]:
        """Local dissimilarity of pixels with features (n, f), float32 (n,): about 1 amid training pixels, more away
        from them; NaN where a feature is not finite."""
        turned = _turn(np.ascontiguousarray(features, dtype=np.float32), self.centre, self.rotation)
        distance, spacing = self._arranged.nearest(turned, self.neighbours)
        return distance / spacing

    def of(self, features: NDArray[np.float32]) -> NDArray[np.float32]:
        """Index over threshold, float32 (n,): up to 1 is within reach, more is beyond; NaN where not finite."""
        return self.index(features) / np.float32(self.threshold)

    def percent(self, features: NDArray[np.float32]) -> NDArray[np.uint8]:
        """`of` in per cent, uint8 (n,): 1..100 within reach, 101..254 beyond (254: or more), 255 where not finite."""
        share = self.of(features)
        with np.errstate(invalid="ignore"):
            whole = np.clip(np.ceil(share * 100), 1, 254)
        return np.where(np.isnan(share), 255, whole).astype(np.uint8)

    def to_bytes(self) -> bytes:
        """An .npz archive of plain arrays."""
        buffer = io.BytesIO()
        np.savez(
            buffer, centre=self.centre, rotation=self.rotation, points=self.points, spacing=self.spacing,
            numbers=np.array([self.neighbours, self.threshold]),
        )  # fmt: skip
        return buffer.getvalue()

    @classmethod
    def from_bytes(cls, content: bytes, features: int) -> Reach:
        """What `to_bytes` wrote, for a model of so many features. Raises ModelError; never unpickles."""
        try:
            with np.load(io.BytesIO(content), allow_pickle=False) as held:
                names = ("centre", "rotation", "points", "spacing", "numbers")
                centre, rotation, points, spacing, numbers = (held[name] for name in names)
            count, width = points.shape
            fit = (centre.shape, rotation.shape, spacing.shape) == ((features,), (features, width), (count,))
            sound = all(np.isfinite(part).all() for part in (centre, rotation, points, spacing, numbers))
            if not (fit and sound and (spacing > 0).all() and 1 <= numbers[0] <= count and numbers[1] > 0):
                raise ValueError("arrays do not fit each other or the model")
        except Exception as error:  # NumPy and zipfile raise many kinds for a damaged file
            raise ModelError(
                f"the file of the model's reach is damaged: {error}", fix="train the model again"
            ) from error
        neighbours, threshold = int(numbers[0]), float(numbers[1])
        return cls(centre, rotation, points.astype(np.float32), spacing.astype(np.float32), neighbours, threshold)

    def to_json(self) -> dict[str, Any]:
        """Plain data for model.json."""
        return {
            "method": "local outlier factor, simplified (Schubert, Zimek & Kriegel 2014), of features whitened within "
            "polygons; threshold from held-out polygons after Meyer & Pebesma 2021",
            "neighbours": self.neighbours,
            "threshold": self.threshold,
            "held_out_beyond": _BEYOND,
            "points": len(self.points),
        }


def fit_reach(
    training: TrainingSet, folds: int = 10, seed: int = 0, *, groups: NDArray[np.int32] | None = None
) -> Reach | None:
    """Reach of a training set; None if it has no spread to measure by, or no second polygon to measure towards.

    The threshold is exceeded by 5 % of the training pixels when each is compared with the polygons, or the blocks that
    `groups` (n,) names, of other folds.
    """
    centre = training.features.mean(axis=0, dtype=np.float64)
    rotation = _directions(training.features - centre, training)
    if rotation is None:
        return None
    chosen = _spread_over_classes(training, seed)
    points = _turn(training.features[chosen], centre, rotation)
    codes, groups = training.codes, training.polygon if groups is None else groups
    fold = group_folds(codes, groups, folds, seed).fold[chosen]
    smallest = int(np.unique(codes[chosen], return_counts=True)[1].min())
    neighbours = max(1, min(_NEIGHBOURS, smallest // 2))
    index = []
    for number in np.unique(fold[fold >= 0]):
        known = points[fold != number]
        if len(known) > neighbours:
            distance, spacing = group_points(known, _spacing(known, neighbours)).nearest(
                points[fold == number], neighbours
            )
            index.append(distance / spacing)
    if not index:
        return None
    threshold = float(np.quantile(np.concatenate(index), 1 - _BEYOND))
    return Reach(centre, rotation, points, _spacing(points, neighbours), neighbours, threshold)


def _spacing(points: NDArray[np.float32], neighbours: int) -> NDArray[np.float32]:
    """From each point (m, d) to its `neighbours`-th nearest other one, float32 (m,). Pixels that repeat each other have
    none, and would put everything else infinitely far: at least a hundredth of the usual one."""
    distance, _ = group_points(points, np.zeros(len(points), np.float32)).nearest(points, neighbours + 1)
    usual = np.median(distance[distance > 0]) if (distance > 0).any() else 1.0
    return np.maximum(distance, np.float32(usual / 100))


def _directions(features: NDArray[np.float64], training: TrainingSet) -> NDArray[np.float64] | None:
    """Directions (f, d) in which polygons have unit covariance on average; shrunk, so that few pixels will do (Ledoit &
    Wolf 2004). Those in which polygons differ most come first, which is where the search parts points. None if no
    feature moves. Where polygons are so small that they show no covariance, that within classes is taken."""
    spread = features.std(axis=0)
    moving = spread > 1e-9 * np.maximum(1.0, np.abs(training.features).max(axis=0))
    if not moving.any():
        return None
    features, spread = features[:, moving], spread[moving]
    spare = len(features) - len(np.unique(training.polygon))
    within = _less_means(features, training.polygon if spare > 5 * moving.sum() else training.codes)
    # A feature that does not vary within polygons would make every other value infinitely far.
    scale = np.maximum(within.std(axis=0), _LEAST_SPREAD * spread)
    variances, axes = np.linalg.eigh(ledoit_wolf(within / scale, assume_centered=True)[0])
    if variances.max() <= 0:
        return None
    white = axes / np.sqrt(np.maximum(variances, _LEAST_SPREAD**2 * variances.max())) / scale[:, None]
    _, turned = np.linalg.eigh(np.cov(features @ white, rowvar=False).reshape(len(scale), len(scale)))
    kept = (white @ turned[:, ::-1])[:, :_DIRECTIONS]
    rotation = np.zeros((len(moving), kept.shape[1]))
    rotation[moving] = kept
    return rotation


def _less_means(values: NDArray[np.float64], groups: NDArray[Any]) -> NDArray[np.float64]:
    """Values (n, f) less the mean of their group (n,)."""
    _, member, size = np.unique(groups, return_inverse=True, return_counts=True)
    sums = np.zeros((len(size), values.shape[1]))
    np.add.at(sums, member, values)
    centred: NDArray[np.float64] = values - (sums / size[:, None])[member]
    return centred


def _spread_over_classes(training: TrainingSet, seed: int) -> NDArray[np.int64]:
    parts = []
    codes = training.class_codes
    for code in codes:
        mine = np.flatnonzero(training.codes == code)
        parts.append(mine[even_draw(training.polygon[mine], max(1, _POINTS // len(codes)), seed)])
    return np.sort(np.concatenate(parts))


@compiled
def _turn(features, centre, rotation):  # type: ignore[no-untyped-def]  # noqa: ANN001, ANN202
    """(features - centre) @ rotation, float32; a library product may depend on the number of rows in its last bits."""
    turned = np.empty((len(features), rotation.shape[1]), dtype=np.float32)
    row = np.empty(rotation.shape[1], dtype=np.float64)
    for pixel in range(len(features)):
        row[:] = 0
        for feature in range(len(centre)):
            shifted = features[pixel, feature] - centre[feature]
            for direction in range(len(row)):
                row[direction] += shifted * rotation[feature, direction]
        turned[pixel] = row
    return turned
