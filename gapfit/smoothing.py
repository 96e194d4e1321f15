"""Local polynomials with honest standard errors: noise of lock-ins is correlated from sample to sample.

The noise is taken as white noise plus noise behind one low-pass filter: its correlation k samples apart is
share * persistence^k for k > 0. Residuals of a polynomial fit are less correlated than the noise itself; the
estimates here allow for that exactly.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy.signal import lfilter

__all__ = [
    "Curve",
    "Noise",
    "fit_noise",
    "interpolated",
    "noise_amplitude",
    "polynomial_operator",
    "residual_covariance",
    "smooth_curve",
    "variance_factor",
]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
PERSISTENCE = tuple(float(np.exp(-1 / time)) for time in np.geomspace(0.7, 60, 24))
"""Grid on which the persistence is fitted."""
SLOWEST = 0.6
"""Correlation times beyond this share of the samples per fitted coefficient cannot be told from signal."""
LAGS = 12
SIGNIFICANT = 6.0
"""White noise is given up for a misfit lower by so many variances of a correlation."""


@dataclass(frozen=True)
class Noise:
    """Correlation of the noise between samples: share * persistence^k for samples k > 0 apart.

    Attributes
    ----------
    share : float
        Part of the variance that is correlated.
    persistence : float
        Correlation of that part between neighbours.
    amplitude : float
        Standard deviation.
    """

    share: float = 0.0
    persistence: float = 0.0
    amplitude: float = 1.0

    @property
    def independent_every(self) -> float:
        """Samples per independent one, 1 + 2 sum of the correlations."""
        return 1 + 2 * self.share * self.persistence / (1 - self.persistence)


def variance_factor(weights: FloatArray, noise: Noise) -> FloatArray:
    """Variance of weighted sums of unit noise.

    Parameters
    ----------
    weights : ndarray[..., n_point]
        Weights of the samples, in their order.
    noise : Noise
        Correlation.

    Returns
    -------
    ndarray[...]
    """
    white = np.sum(weights**2, axis=-1)
    if noise.share == 0:
        return np.asarray(white)
    run = lfilter([1.0], [1.0, -noise.persistence], weights, axis=-1)
    chained = 2 * np.sum(weights * run, axis=-1) - white
    return np.asarray((1 - noise.share) * white + noise.share * chained)


def polynomial_operator(position: FloatArray, degree: int) -> FloatArray:
    """Weights that give the coefficients of a least-squares polynomial about zero.

    Parameters
    ----------
    position : ndarray[n_point]
        Distance from the point of interest, best of order one.
    degree : int
        Degree of the polynomial.

    Returns
    -------
    ndarray[degree + 1, n_point]
        Times the readings: value, slope, half the curvature, ...
    """
    basis = np.vander(position, degree + 1, increasing=True)
    return np.asarray(np.linalg.solve(basis.T @ basis, basis.T), dtype=float)


def residual_covariance(residual: FloatArray) -> FloatArray:
    """Mean products of residuals up to `LAGS` samples apart, each over n_point.

    Parameters
    ----------
    residual : ndarray[n_point]

    Returns
    -------
    ndarray[LAGS]
    """
    size = residual.size
    found = np.zeros(LAGS)
    for lag in range(min(LAGS, size)):
        found[lag] = residual[: size - lag] @ residual[lag:] / size
    return found


@lru_cache(maxsize=512)
def _projection(size: int, degree: int) -> FloatArray:
    position = np.linspace(-1, 1, size)
    basis, _ = np.linalg.qr(np.vander(position, degree + 1, increasing=True))
    projection: FloatArray = np.eye(size) - basis @ basis.T
    return projection


@lru_cache(maxsize=4096)
def _expected(size: int, degree: int, persistence: float) -> FloatArray:
    """Expectation of `residual_covariance` for unit noise after a polynomial fit on even spacing."""
    residual = _projection(size, degree)
    if persistence > 0:
        distance = np.abs(np.subtract.outer(np.arange(size), np.arange(size)))
        residual = residual @ persistence**distance @ residual
    return np.array([np.trace(residual, offset=lag) / size if lag < size else 0.0 for lag in range(LAGS)])


def fit_noise(covariance: FloatArray, size: int, degree: int, n_window: int = 1) -> Noise:
    """Correlation of the noise from the residuals of polynomial fits.

    Parameters
    ----------
    covariance : ndarray[LAGS]
        `residual_covariance`, averaged over windows.
    size : int
        Points of a window.
    degree : int
        Degree of the polynomial that was fitted in each window.
    n_window : int
        Windows that were averaged.

    Returns
    -------
    Noise
        White unless correlation describes the residuals better beyond chance.
    """
    size = _rounded(size)
    lags = min(LAGS, size)
    target = covariance[:lags]
    if not target[0] > 0:
        return Noise()
    white = _expected(size, degree, 0.0)[:lags]
    best = float(np.sum((target - white * (white @ target) / (white @ white)) ** 2))
    best -= SIGNIFICANT * target[0] ** 2 / (size * n_window)
    found = Noise()
    slowest = np.exp(-(degree + 1) / (SLOWEST * size))
    for persistence in (value for value in PERSISTENCE if value <= slowest):
        chained = _expected(size, degree, persistence)[:lags]
        parts = _two_parts(white, chained, target)
        misfit = float(np.sum((target - parts[0] * white - parts[1] * chained) ** 2))
        if misfit < best:
            best = misfit
            found = Noise(parts[1] / (parts[0] + parts[1]), persistence)
    return found


def _rounded(size: int) -> int:
    """Size to which expectations are computed: they change slowly."""
    return size if size <= 64 else 4 * round(size / 4)


def _two_parts(one: FloatArray, two: FloatArray, target: FloatArray) -> tuple[float, float]:
    """Least squares of a target by two parts with coefficients not below zero."""
    a, b, c = float(one @ one), float(one @ two), float(two @ two)
    d, e = float(one @ target), float(two @ target)
    determinant = a * c - b * b
    if determinant > 1e-12 * a * c:
        first, second = (c * d - b * e) / determinant, (a * e - b * d) / determinant
        if first >= 0 and second >= 0:
            return first, second
    alone = [(max(d / a, 0.0), 0.0), (0.0, max(e / c, 0.0))]
    return min(alone, key=lambda p: float(np.sum((target - p[0] * one - p[1] * two) ** 2)))


def noise_amplitude(residual_square: float, size: int, degree: int, noise: Noise) -> float:
    """Standard deviation of the noise from the mean square residual of a polynomial fit.

    Parameters
    ----------
    residual_square : float
        Sum of squared residuals over n_point.
    size, degree : int
        Points of the window, degree of the polynomial.
    noise : Noise
        Correlation.

    Returns
    -------
    float
        In the unit of the residuals.
    """
    size = _rounded(size)
    expected = (1 - noise.share) * _expected(size, degree, 0.0)[0]
    if noise.share > 0:
        expected += noise.share * _expected(size, degree, noise.persistence)[0]
    return float(np.sqrt(residual_square / expected))


def interpolated(at: FloatArray, position: FloatArray, values: FloatArray, segment: IntArray) -> FloatArray:
    """Straight lines between points, NaN outside and in gaps.

    Parameters
    ----------
    at : ndarray[n_at]
        Where values are wanted.
    position : ndarray[n_point]
        Rising.
    values : ndarray[n_point]
    segment : ndarray[n_point] of int
        Numbers the pieces between gaps.

    Returns
    -------
    ndarray[n_at]
    """
    right = np.clip(np.searchsorted(position, at), 1, position.size - 1)
    found = np.interp(at, position, values, left=np.nan, right=np.nan)
    hit = (at == position[right]) | (at == position[right - 1])
    return np.where(hit | (segment[right] == segment[right - 1]), found, np.nan)


@dataclass(frozen=True, eq=False)
class Curve:
    """A smoothed trace.

    Attributes
    ----------
    axis : ndarray[n_axis]
        Rising, about as dense as the points or the step asked for.
    value, slope, curvature : ndarray[n_axis]
        The trace and its derivatives by the axis.
    value_error, slope_error : ndarray[n_axis]
        Standard errors of the first two, from the residuals around each place, for white noise.
    """

    axis: FloatArray
    value: FloatArray
    slope: FloatArray
    curvature: FloatArray
    value_error: FloatArray
    slope_error: FloatArray


def smooth_curve(
    position: FloatArray, values: FloatArray, segment: IntArray, step: float, reach: int = 5
) -> Curve:
    """Trace averaged into bins where points are dense, then smoothed by local cubics.

    Parameters
    ----------
    position : ndarray[n_point]
        Rising.
    values : ndarray[n_point]
    segment : ndarray[n_point] of int
        Numbers the pieces between gaps; pieces shorter than a window are left out.
    step : float
        Width of the bins.
    reach : int
        Bins on either side that a cubic is fitted to.

    Returns
    -------
    Curve
    """
    pieces = []
    for number in np.unique(segment):
        inside = segment == number
        bins = np.floor(position[inside] / step).astype(np.int64)
        _, index, count = np.unique(bins, return_inverse=True, return_counts=True)
        if count.size < 2 * reach + 1:
            continue
        place = np.bincount(index, weights=position[inside]) / count
        reading = np.bincount(index, weights=values[inside]) / count
        pieces.append(np.stack((place, *_local_cubics(place, reading, reach))))
    if not pieces:
        return Curve(*(np.array([]) for _ in range(6)))
    return Curve(*np.concatenate(pieces, axis=1))


def _local_cubics(place: FloatArray, reading: FloatArray, reach: int) -> tuple[FloatArray, ...]:
    """Value, slope, curvature, and errors of value and slope at each place."""
    size = 2 * reach + 1
    first = np.clip(np.arange(place.size) - reach, 0, place.size - size)
    window = first[:, None] + np.arange(size)
    distance = place[window] - place[:, None]
    scale = np.abs(distance).max(axis=1)
    basis = (distance / scale[:, None])[..., None] ** np.arange(4)
    inverse = np.linalg.inv(np.swapaxes(basis, 1, 2) @ basis)
    answer = (inverse @ (np.swapaxes(basis, 1, 2) @ reading[window][..., None]))[..., 0]
    residual = reading[window] - (basis @ answer[..., None])[..., 0]
    variance = np.sum(residual**2, axis=1) / (size - 4)
    broad = min(41, variance.size)
    variance = np.convolve(np.pad(variance, broad // 2, mode="edge"), np.full(broad, 1 / broad), mode="same")
    spread = np.sqrt(variance[broad // 2 : broad // 2 + place.size])
    return (
        answer[:, 0],
        answer[:, 1] / scale,
        2 * answer[:, 2] / scale**2,
        spread * np.sqrt(inverse[:, 0, 0]),
        spread * np.sqrt(inverse[:, 1, 1]) / scale,
    )
