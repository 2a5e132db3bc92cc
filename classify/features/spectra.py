"""Linear combinations of bands: smoothing along wavelength, principal components, minimum noise fractions."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import eigh
from threadpoolctl import threadpool_limits

from classify.errors import DataError
from classify.settings.features import ComponentSettings

# Weights of bands are kept to so many significant digits: far finer than reflectance is known.
_DIGITS = 12
# Least eigenvalue of the noise's correlations below which some layer repeats others.
_DEPENDENT = 1e-9


@dataclass(frozen=True, slots=True)
class Projection:
    """component = offset + the sum of weight * layer. weights: one row for each component. shares: each component's
    share of the variance (principal components) or its signal-to-noise ratio (minimum noise fraction)."""

    weights: tuple[tuple[float, ...], ...]
    offsets: tuple[float, ...]
    shares: tuple[float, ...]


def smoothing_weights(wavelengths_nm: Sequence[float], window: int, order: int) -> list[dict[int, float]]:
    """For each band, the weight of every band in its window: Savitzky & Golay 1964, Anal. Chem. 36.

    A polynomial of degree `order` in wavelength is fitted to the `window` bands around a band, or nearest to an end of
    the spectrum, and taken at the band; bands need not be evenly spaced. Wavelengths rise; there are at least `window`.
    """
    nm = np.asarray(wavelengths_nm, dtype=np.float64)
    assert len(nm) >= window > order, (len(nm), window, order)
    weights = []
    for band in range(len(nm)):
        first = min(max(0, band - window // 2), len(nm) - window)
        apart = nm[first : first + window] - nm[band]
        powers = np.vander(apart / np.abs(apart).max(), order + 1, increasing=True)
        # The value of the fitted polynomial at the band is its constant term.
        constant = np.linalg.pinv(powers)[0]
        weights.append({first + place: _rounded(weight) for place, weight in enumerate(constant)})
    return weights


def fit_projection(
    samples: NDArray[np.float64], steps: NDArray[np.float64], settings: ComponentSettings, *, standardise: bool
) -> Projection:
    """Components of `samples`, float64 (n, layers); `steps`, float64 (m, layers), are differences of neighbouring
    pixels.

    Principal components: Pearson 1901, Phil. Mag. 2; of the correlations instead of the covariances if `standardise`.
    Minimum noise fraction: Green, Berman, Switzer & Craig 1988, IEEE Trans. Geosci. Remote Sens. 26, the noise taken
    from differences of neighbours, of which it is half the variance. Each component has its greatest weight positive.
    Raises DataError where the layers depend on each other so strictly that there are no noise fractions.
    """
    mean, deviation = samples.mean(axis=0), samples.std(axis=0)
    scale = np.where(deviation > 0, deviation, 1.0) if standardise else np.ones_like(deviation)
    # One thread: the same sample must give the same weights on any number of cores.
    with threadpool_limits(limits=1):
        covariance = np.atleast_2d(np.cov((samples - mean) / scale, rowvar=False))
        if settings.method == "principal components":
            values, vectors = eigh(covariance)
            shares = values / values.sum()
        else:
            noise = np.atleast_2d(np.cov(steps / scale, rowvar=False)) / 2
            level = np.sqrt(np.diag(noise))
            if level.min() <= 0 or eigh(noise / np.outer(level, level), eigvals_only=True)[0] < _DEPENDENT:
                raise DataError(
                    "the noise of the layers depends on each other strictly, so there are no minimum noise fractions",
                    where="features.components", fix="leave out layers made from others, or use principal components",
                )  # fmt: skip
            values, vectors = eigh(covariance, noise)
            shares = np.maximum(values - 1, 0)  # variance of signal and noise over that of noise, less one
    chosen = np.argsort(-values, kind="stable")[: settings.count]
    weights = vectors[:, chosen].T / scale
    weights *= np.sign(weights[np.arange(len(weights)), np.abs(weights).argmax(axis=1)])[:, None]
    rounded = tuple(tuple(_rounded(value) for value in row) for row in weights)
    offsets = tuple(_rounded(-float(np.dot(row, mean))) for row in np.array(rounded))
    return Projection(rounded, offsets, tuple(_rounded(value) for value in shares[chosen]))


def _rounded(value: float) -> float:
    return float(f"{value:.{_DIGITS}g}")
