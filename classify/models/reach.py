"""Reach: is a pixel inside what the training data cover?

A dissimilarity index adapted from Meyer & Pebesma 2021, "Predicting into unknown space? Estimating the area of
applicability of spatial prediction models", Methods in Ecology and Evolution 12: distance to the nearest training pixel
over the mean distance among training pixels. Its threshold is the largest index, outliers aside, of training pixels
towards the polygons (or blocks) of other folds.

Distances are taken differently from the paper: it weighs each standardised feature by its importance, which the many
features of one scene that repeat each other share out among themselves. Here features are decorrelated and scaled by
their covariance within classes, so that a direction counts by how much it says beyond the spread of a class.
"""

from __future__ import annotations

import io
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.spatial.distance import pdist
from sklearn.covariance import ledoit_wolf

from classify.errors import ModelError
from classify.models.folds import group_folds
from classify.models.forest_kernels import jit
from classify.training.dataset import TrainingSet
from classify.training.draws import even_draw

# Pixels that stand for the training set, drawn evenly over the polygons of each class.
_POINTS = 2000
# Points taken at a time: a few vectors of what processors hold.
_LANES = 128


@dataclass(frozen=True, eq=False)
class Reach:
    """centre: float64 (f,). rotation: float64 (f, d), takes a pixel less the centre to the d directions in which
    distances are measured. points: float32 (m, d), training pixels there. mean_distance: among them. threshold: index
    beyond which a pixel is out of reach.
    """

    centre: NDArray[np.float64]
    rotation: NDArray[np.float64]
    points: NDArray[np.float32]
    mean_distance: float
    threshold: float

    def index(self, features: NDArray[np.float32]) -> NDArray[np.float32]:
        """Dissimilarity index of pixels with features (n, f), float32 (n,); NaN where a feature is not finite."""
        turned = _turn(np.ascontiguousarray(features, dtype=np.float32), self.centre, self.rotation)
        nearest = _nearest_squared(turned, self.points)
        return (np.sqrt(nearest) / np.float32(self.mean_distance)).astype(np.float32)

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
            buffer, centre=self.centre, rotation=self.rotation, points=self.points,
            numbers=np.array([self.mean_distance, self.threshold]),
        )  # fmt: skip
        return buffer.getvalue()

    @classmethod
    def from_bytes(cls, content: bytes, features: int) -> Reach:
        """What `to_bytes` wrote, for a model of so many features. Raises ModelError; never unpickles."""
        try:
            with np.load(io.BytesIO(content), allow_pickle=False) as held:
                centre, rotation, points, numbers = (held[n] for n in ("centre", "rotation", "points", "numbers"))
            shapes = centre.shape == (features,) and rotation.shape == (features, points.shape[1])
            if not (shapes and numbers.shape == (2,) and (numbers > 0).all() and np.isfinite(points).all()):
                raise ValueError("arrays do not fit each other or the model")
        except Exception as error:  # NumPy and zipfile raise many kinds for a damaged file
            raise ModelError(
                f"the file of the model's reach is damaged: {error}", fix="train the model again"
            ) from error
        return cls(centre, rotation, points.astype(np.float32), float(numbers[0]), float(numbers[1]))

    def to_json(self) -> dict[str, Any]:
        """Plain data for model.json."""
        return {
            "method": "dissimilarity index adapted from Meyer & Pebesma 2021",
            "differs": "features are whitened by their covariance within classes, not weighted by importance",
            "threshold": self.threshold,
            "mean_distance": self.mean_distance,
            "points": len(self.points),
        }


def fit_reach(
    training: TrainingSet, folds: int = 5, seed: int = 0, *, groups: NDArray[np.int32] | None = None
) -> Reach | None:
    """Reach of a training set; None if it has no spread to measure by, or no second polygon to measure towards.

    The threshold is the largest index that is no outlier (upper quartile plus 1.5 interquartile ranges), where the
    index of a training pixel is taken towards the polygons, or the blocks that `groups` (n,) names, of other folds.
    """
    chosen = _spread_over_classes(training, seed)
    features, codes = training.features[chosen].astype(np.float64), training.codes[chosen]
    centre = features.mean(axis=0)
    rotation = _within_classes(features, codes)
    if rotation is None:
        return None
    points = _turn(training.features[chosen], centre, rotation)
    mean_distance = float(pdist(points[:: max(1, len(points) // 1000)]).mean())
    groups = training.polygon if groups is None else groups
    fold = group_folds(training.codes, groups, folds, seed).fold[chosen]
    index = [
        np.sqrt(_nearest_squared(points[fold == number], points[fold != number]))
        for number in np.unique(fold[fold >= 0])
        if (fold != number).any()
    ]
    if not index or mean_distance <= 0:
        return None
    values = np.concatenate(index) / mean_distance
    low, high = np.quantile(values, [0.25, 0.75])
    threshold = float(values[values <= high + 1.5 * (high - low)].max())
    return Reach(centre, rotation, points, mean_distance, threshold) if threshold > 0 else None


def _within_classes(features: NDArray[np.float64], codes: NDArray[np.uint8]) -> NDArray[np.float64] | None:
    """Directions (f, d) in which classes have unit covariance on average; shrunk, so that few pixels will do
    (Ledoit & Wolf 2004). None if no feature moves."""
    spread = features.std(axis=0)
    moving = spread > 1e-9 * np.maximum(1.0, np.abs(features).max(axis=0))
    if not moving.any():
        return None
    scaled = features[:, moving] / spread[moving]
    for code in np.unique(codes):
        scaled[codes == code] -= scaled[codes == code].mean(axis=0)
    variances, directions = np.linalg.eigh(ledoit_wolf(scaled, assume_centered=True)[0])
    # A direction in which no class spreads at all would make every other pixel infinitely far.
    kept = np.maximum(variances, 1e-4 * variances.max())
    if kept.max() <= 0:
        return None
    rotation = np.zeros((features.shape[1], len(kept)))
    rotation[moving] = directions / np.sqrt(kept) / spread[moving][:, None]
    return rotation


def _spread_over_classes(training: TrainingSet, seed: int) -> NDArray[np.int64]:
    parts = []
    codes = training.class_codes
    for code in codes:
        mine = np.flatnonzero(training.codes == code)
        parts.append(mine[even_draw(training.polygon[mine], max(1, _POINTS // len(codes)), seed)])
    return np.sort(np.concatenate(parts))


def _nearest_squared(pixels: NDArray[np.float32], points: NDArray[np.float32]) -> NDArray[np.float32]:
    """Squared distance float32 (n,) from pixels (n, d) to the nearest of points (m, d); NaN where not finite."""
    padded = np.full((-(-len(points) // _LANES) * _LANES, points.shape[1]), np.inf, dtype=np.float32)
    padded[: len(points)] = points
    lanes = np.ascontiguousarray(padded.reshape(-1, _LANES, points.shape[1]).transpose(0, 2, 1))
    nearest = np.empty(len(pixels), dtype=np.float32)
    _find_nearest(np.ascontiguousarray(pixels), lanes, nearest)
    nearest[~np.isfinite(pixels).all(axis=1)] = np.nan
    return nearest


@jit
def _find_nearest(pixels, lanes, nearest):  # type: ignore[no-untyped-def]  # noqa: ANN001, ANN202
    """The same for points in groups (g, d, lanes), so that each step of the inner loops is one for a whole group."""
    square = np.empty(_LANES, dtype=np.float32)
    least = np.empty(_LANES, dtype=np.float32)
    for pixel in range(len(pixels)):
        least[:] = np.inf
        for group in range(len(lanes)):
            square[:] = 0
            for direction in range(lanes.shape[1]):
                here = pixels[pixel, direction]
                for lane in range(_LANES):
                    gap = lanes[group, direction, lane] - here
                    square[lane] += gap * gap
            for lane in range(_LANES):
                least[lane] = square[lane] if square[lane] < least[lane] else least[lane]
        nearest[pixel] = least.min()


@jit
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
