"""Reach: is a pixel inside what the training data cover?

The dissimilarity index of Meyer & Pebesma 2021, "Predicting into unknown space? Estimating the area of applicability of
spatial prediction models", Methods in Ecology and Evolution 12: distance to the nearest training pixel in standardised
features weighted by their importance, over the mean distance among training pixels. Its threshold is the largest index,
outliers aside, of training pixels towards the polygons of other folds.
"""

from __future__ import annotations

import io
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.spatial.distance import pdist

from classify.errors import ModelError
from classify.models.folds import group_folds
from classify.training.dataset import TrainingSet
from classify.training.draws import even_draw

# Pixels that stand for the training set, drawn evenly over the polygons of each class.
_POINTS = 2000
# A feature of no measured importance keeps this share of the mean weight: what is idle among the trained classes may
# be all that tells a foreign surface.
_LEAST_SHARE = 0.25
# Pixels whose distances to all points are held at once: 128 x 2000 float32 stay in the cache of a core.
_ROWS = 128


@dataclass(frozen=True, eq=False)
class Reach:
    """centre, scale: float64 (f,), standardise and weigh a feature: (x - centre) * scale. points: float32 (m, f), so
    treated. mean_distance: among training pixels. threshold: index beyond which a pixel is out of reach.
    """

    centre: NDArray[np.float64]
    scale: NDArray[np.float64]
    points: NDArray[np.float32]
    mean_distance: float
    threshold: float

    def index(self, features: NDArray[np.float32]) -> NDArray[np.float32]:
        """Dissimilarity index of pixels with features (n, f), float32 (n,); NaN where a feature is not finite."""
        scaled = ((features - self.centre) * self.scale).astype(np.float32)
        nearest = np.sqrt(_nearest_squared(scaled, self.points))
        return (nearest / np.float32(self.mean_distance)).astype(np.float32)

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
            buffer, centre=self.centre, scale=self.scale, points=self.points,
            numbers=np.array([self.mean_distance, self.threshold]),
        )  # fmt: skip
        return buffer.getvalue()

    @classmethod
    def from_bytes(cls, content: bytes, features: int) -> Reach:
        """What `to_bytes` wrote, for a model of so many features. Raises ModelError; never unpickles."""
        try:
            with np.load(io.BytesIO(content), allow_pickle=False) as held:
                centre, scale, points, numbers = (held[name] for name in ("centre", "scale", "points", "numbers"))
            shapes = centre.shape == scale.shape == (features,) and points.ndim == 2 and points.shape[1] == features
            if not (shapes and numbers.shape == (2,) and (numbers > 0).all() and np.isfinite(points).all()):
                raise ValueError("arrays do not fit each other or the model")
        except Exception as error:  # NumPy and zipfile raise many kinds for a damaged file
            raise ModelError(
                f"the file of the model's reach is damaged: {error}", fix="train the model again"
            ) from error
        return cls(centre, scale, points.astype(np.float32), float(numbers[0]), float(numbers[1]))

    def to_json(self) -> dict[str, Any]:
        """Plain data for model.json."""
        return {
            "method": "dissimilarity index (Meyer & Pebesma 2021)",
            "threshold": self.threshold,
            "mean_distance": self.mean_distance,
            "points": len(self.points),
        }


def fit_reach(training: TrainingSet, weights: NDArray[np.float64], folds: int = 5, seed: int = 0) -> Reach | None:
    """Reach of a training set with importances `weights` float64 (f,); None if it has no spread to measure by.

    The threshold is the largest index that is no outlier (upper quartile plus 1.5 interquartile ranges), where the
    index of a training pixel is taken towards the polygons of other folds.
    """
    chosen = _spread_over_classes(training, seed)
    features = training.features[chosen].astype(np.float64)
    centre, spread = features.mean(axis=0), features.std(axis=0)
    moving = spread > 1e-9 * np.maximum(1.0, np.abs(centre))
    if not moving.any():
        return None
    mean_weight = weights[moving].mean()
    relative = np.maximum(weights / mean_weight, _LEAST_SHARE) if mean_weight > 0 else np.ones_like(weights)
    scale = np.where(moving, relative / np.where(moving, spread, 1.0), 0.0)
    points = ((features - centre) * scale).astype(np.float32)
    mean_distance = float(pdist(points[:: max(1, len(points) // 1000)]).mean())
    if mean_distance <= 0:
        return None
    fold = group_folds(training.codes, training.polygon, folds, seed).fold[chosen]
    index = [
        np.sqrt(_nearest_squared(points[fold == number], points[fold != number])) / mean_distance
        for number in np.unique(fold[fold >= 0])
        if (fold != number).any()
    ]
    if not index:
        return None
    values = np.concatenate(index)
    low, high = np.quantile(values, [0.25, 0.75])
    inner = values[values <= high + 1.5 * (high - low)]
    threshold = float(inner.max())
    return Reach(centre, scale, points, mean_distance, threshold) if threshold > 0 else None


def _spread_over_classes(training: TrainingSet, seed: int) -> NDArray[np.int64]:
    parts = []
    codes = training.class_codes
    for code in codes:
        mine = np.flatnonzero(training.codes == code)
        parts.append(mine[even_draw(training.polygon[mine], max(1, _POINTS // len(codes)), seed)])
    return np.sort(np.concatenate(parts))


def _nearest_squared(pixels: NDArray[np.float32], points: NDArray[np.float32]) -> NDArray[np.float32]:
    """Squared distance to the nearest point, float32 (n,), by |p|^2 - 2 p.q + |q|^2 in one matrix product per block."""
    norms = np.einsum("ij,ij->i", points, points)
    # One more column carries the norms, so that the product alone gives |q|^2 - 2 p.q.
    right = np.ascontiguousarray(np.column_stack([-2 * points, norms]).T)
    nearest = np.empty(len(pixels), dtype=np.float32)
    left = np.ones((_ROWS, points.shape[1] + 1), dtype=np.float32)
    product = np.empty((_ROWS, len(points)), dtype=np.float32)
    for start in range(0, len(pixels), _ROWS):
        part = pixels[start : start + _ROWS]
        left[: len(part), :-1] = part
        # Always the whole block, so that a pixel's value does not depend on how many are asked for at once.
        np.matmul(left, right, out=product)
        nearest[start : start + len(part)] = product[: len(part)].min(axis=1) + np.einsum("ij,ij->i", part, part)
    return np.maximum(nearest, 0)
