"""One reading of one trace: a local polynomial at a filling factor, with an honest standard error."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from gapfit.calibration import DensityEstimate
from gapfit.smoothing import (
    Noise,
    fit_noise,
    noise_amplitude,
    polynomial_operator,
    residual_covariance,
    variance_factor,
)
from gapfit.traces import Sweep

__all__ = [
    "Stretch",
    "Value",
    "displacement_error",
    "filling_error_at",
    "fitted_value",
    "mean_value",
    "noise_of",
    "stretch",
    "temperature_at",
    "usable_width",
]

FloatArray = NDArray[np.float64]

WIDTHS = tuple(float(width) for width in np.geomspace(0.003, 0.04, 8))
"""Half-widths, relative to the filling, from which that of the local polynomial is chosen."""

DEGREE = 2
TOLERANCE, LARGEST_PULL = 5.0, 25.0
"""Parabolas of two widths agree while the mean of their squared pulls over the temperatures exceeds one by no
more than so many standard deviations, and none exceeds the second number."""

LEAST_POINTS = 7
NOISE_SIZES = (10, 16, 24, 36, 54, 80, 120, 180, 240)
NOISE_WIDTH = 0.03
SLOW_NOISE, NOISE_GROWTH = float(np.exp(-1 / 4)), 1.5
"""The noise is taken from the residuals of so many points, within the relative half-width; the largest number
is used up to which the residuals grow no faster than noise of such persistence would, by this factor: signal
that the polynomial cannot follow grows faster (own choice)."""

DENSEST = 800
"""Points of a stretch beyond which neighbours are averaged first."""


@dataclass(frozen=True, eq=False)
class Stretch:
    """The part of a sweep about a filling factor.

    Attributes
    ----------
    distance : ndarray[n_point]
        Filling factor minus the one of interest, over `unit`; in the order of the sweep.
    signal, temperature : ndarray[n_point]
        Readings there.
    hall : ndarray[n_point] or None
        Hall resistivity there.
    unit : float
        Filling factor that a distance of one means.
    step : float
        Digit of the signal.
    inside : bool
        Whether the place lies between points, not beyond an end nor in a gap.
    """

    distance: FloatArray
    signal: FloatArray
    temperature: FloatArray
    hall: FloatArray | None
    unit: float
    step: float
    inside: bool


@dataclass(frozen=True)
class Value:
    """A value with its standard error and the derivatives of the trace there.

    Attributes
    ----------
    value, error : float, ohm or S
        The reading, and its standard error from the noise of the trace.
    slope, curvature : float, per unit filling factor and its square
        Derivatives of the trace.
    one_sided : bool
        Whether the sweep ends, or has a gap, within the window.
    """

    value: float
    error: float
    slope: float
    curvature: float
    one_sided: bool


NOTHING = Value(float("nan"), float("nan"), float("nan"), float("nan"), True)


def stretch(sweep: Sweep, filling: FloatArray, place: float) -> Stretch:
    """Cut the part of a sweep about a filling factor.

    Parameters
    ----------
    sweep : Sweep
        The sweep.
    filling : ndarray[n_point]
        Filling factor along it.
    place : float
        Filling factor of interest.

    Returns
    -------
    Stretch
    """
    unit = max(abs(place), 1 / 3)
    distance = (filling - place) / unit
    nearest = int(np.argmin(np.abs(distance)))
    reach = max(WIDTHS[-1], float(np.sort(np.abs(distance))[min(NOISE_SIZES[0], distance.size - 1)]))
    rows = np.flatnonzero((np.abs(distance) <= reach) & (sweep.segment == sweep.segment[nearest]))
    near = distance[rows]
    bunch = max(1, rows.size // DENSEST)
    columns = [near, sweep.signal[rows], sweep.temperature_K[rows]]
    columns += [] if sweep.rho_xy_ohm is None else [sweep.rho_xy_ohm[rows]]
    columns = [_bunched(column, bunch) for column in columns]
    return Stretch(
        distance=columns[0],
        signal=columns[1],
        temperature=columns[2],
        hall=columns[3] if len(columns) > 3 else None,
        unit=unit,
        step=sweep.step,
        inside=bool(near.size and near.min() <= 0 <= near.max()),
    )


def _bunched(column: FloatArray, bunch: int) -> FloatArray:
    """Means of neighbours."""
    if bunch == 1:
        return column
    size = column.size // bunch * bunch
    return np.asarray(column[:size].reshape(-1, bunch).mean(axis=1))


def _noise_degree(size: int) -> int:
    """Degree of the polynomial that is taken off before the noise is judged."""
    return 5 if size >= 20 else 3


def _residual(piece: Stretch, size: int) -> FloatArray:
    """What a polynomial leaves of the points nearest to the place."""
    rows = np.sort(np.argsort(np.abs(piece.distance), kind="stable")[:size])
    degree = _noise_degree(size)
    if rows.size <= degree + 2:
        return np.zeros(rows.size)
    distance = piece.distance[rows] - piece.distance[rows].mean()
    basis, _ = np.linalg.qr(np.vander(distance / np.abs(distance).max(), degree + 1))
    return np.asarray(piece.signal[rows] - basis @ (basis.T @ piece.signal[rows]))


def _noise_residuals(stretches: Sequence[Stretch]) -> tuple[list[FloatArray], int]:
    """Residuals of the largest number of points that shows noise and no signal, and the degree taken off."""
    room = [int(np.sum(np.abs(piece.distance) <= NOISE_WIDTH)) for piece in stretches]
    most = max(NOISE_SIZES[0], int(np.median(room)))
    best = [_residual(piece, NOISE_SIZES[0]) for piece in stretches]
    degree = _noise_degree(NOISE_SIZES[0])
    power = _white_powers(best, degree)
    for size in NOISE_SIZES[1:]:
        if size > most:
            break
        wider = [_residual(piece, size) for piece in stretches]
        grown = _white_powers(wider, _noise_degree(size))
        known = power > 0
        limit = NOISE_GROWTH * _slow_power(size) / _slow_power(len(best[0]))
        if known.any() and np.median(grown[known] / power[known]) > limit:
            break
        best, power, degree = wider, grown, _noise_degree(size)
    return best, degree


def _white_powers(residuals: Sequence[FloatArray], degree: int) -> FloatArray:
    """Variance of the noise behind some residuals if it were white."""
    return np.array([float(r @ r) / max(r.size - degree - 1, 1) for r in residuals])


def _slow_power(size: int) -> float:
    """`_white_powers` expected of slow noise of unit variance."""
    degree = _noise_degree(size)
    slow = noise_amplitude(1.0, size, degree, Noise(1.0, SLOW_NOISE))
    return size / (slow**2 * max(size - degree - 1, 1))


def noise_of(stretches: Sequence[Stretch], reach: int = 4) -> list[Noise]:
    """Noise in each of some stretches, from its own residuals and its neighbours'.

    The correlation is averaged over `reach` neighbours on either side, the variance over the next ones.

    Parameters
    ----------
    stretches : sequence of Stretch
        In order of temperature.
    reach : int
        Neighbours on either side that are averaged in.

    Returns
    -------
    list of Noise
    """
    residuals, degree = _noise_residuals(stretches)
    covariances = np.array([residual_covariance(residual) for residual in residuals])
    sizes = np.array([residual.size for residual in residuals])
    power = covariances[:, :1]
    normal = np.divide(covariances, power, out=np.zeros_like(covariances), where=power > 0)
    normal *= sizes[:, None]
    padded = np.pad(power[:, 0], 1, mode="edge")
    smooth = (padded[:-2] + 2 * padded[1:-1] + padded[2:]) / 4
    found = []
    for index, piece in enumerate(stretches):
        near = slice(max(0, index - reach), index + reach + 1)
        mean = normal[near].sum(axis=0) / max(float(sizes[near].sum()), 1.0)
        noise = fit_noise(mean, int(np.median(sizes[near])), degree, sizes[near].size)
        amplitude = 0.0
        if sizes[index] > degree + 2:
            amplitude = noise_amplitude(float(smooth[index]), int(sizes[index]), degree, noise)
        found.append(replace(noise, amplitude=max(amplitude, piece.step / float(np.sqrt(12)))))
    return found


def _window(piece: Stretch, width: float, place: float = 0.0) -> NDArray[np.intp]:
    """Points within a half-width, or the nearest ones where these are too few."""
    distance = np.abs(piece.distance - place)
    rows = np.flatnonzero(distance <= width)
    if rows.size < LEAST_POINTS:
        rows = np.sort(np.argsort(distance, kind="stable")[:LEAST_POINTS])
    return rows


def _digit_error(piece: Stretch, amplitude: float) -> float:
    """Error that averaging does not remove where the noise is too small to shake the digit."""
    return piece.step / float(np.sqrt(12)) if amplitude < 0.5 * piece.step else 0.0


def fitted_value(piece: Stretch, noise: Noise, width: float, place: float = 0.0) -> Value:
    """Value at a place by a local parabola.

    Parameters
    ----------
    piece : Stretch
        The trace.
    noise : Noise
        Correlation of its noise.
    width : float
        Half-width of the window, in units of the stretch.
    place : float
        Where, in units of the stretch.

    Returns
    -------
    Value
    """
    rows = _window(piece, width, place)
    if rows.size < LEAST_POINTS:
        return NOTHING
    distance = piece.distance[rows] - place
    scale = float(np.abs(distance).max())
    operator = polynomial_operator(distance / scale, DEGREE)
    value, slope, bend = operator @ piece.signal[rows]
    amplitude = noise.amplitude
    error = amplitude * float(np.sqrt(variance_factor(operator[0], noise)))
    return Value(
        value=float(value),
        error=float(np.hypot(error, _digit_error(piece, amplitude))),
        slope=float(slope) / (scale * piece.unit),
        curvature=2 * float(bend) / (scale * piece.unit) ** 2,
        one_sided=bool(min(-distance.min(), distance.max()) < 0.5 * scale),
    )


def mean_value(piece: Stretch, noise: Noise, width: float) -> Value:
    """Mean of the trace over a window about the place.

    Parameters
    ----------
    piece : Stretch
        The trace.
    noise : Noise
        Correlation of its noise.
    width : float
        Half-width of the window, in units of the stretch.

    Returns
    -------
    Value
    """
    rows = np.flatnonzero(np.abs(piece.distance) <= width)
    if rows.size < 2:
        rows = np.sort(np.argsort(np.abs(piece.distance), kind="stable")[:3])
    weights = np.full(rows.size, 1 / rows.size)
    amplitude = noise.amplitude
    error = amplitude * float(np.sqrt(variance_factor(weights, noise)))
    error = float(np.hypot(error, _digit_error(piece, amplitude)))
    return Value(float(weights @ piece.signal[rows]), error, 0.0, 0.0, False)


def usable_width(stretches: Sequence[Stretch], noises: Sequence[Noise]) -> float:
    """Widest window in which parabolas agree with those of all narrower ones, over all temperatures together.

    Parameters
    ----------
    stretches : sequence of Stretch
        One filling at all temperatures.
    noises : sequence of Noise
        Correlation of the noise of each.

    Returns
    -------
    float
        Half-width in units of the stretches; the idea is that of Lepski (1991). The window next to the
        widest one that passes is used, to stay clear of its bias.
    """
    pulls = np.array([_pulls(piece, noise) for piece, noise in zip(stretches, noises, strict=True)])
    limit = 1 + TOLERANCE * np.sqrt(2 / len(stretches))
    best = 0
    for wide in range(1, len(WIDTHS)):
        own = pulls[:, :wide, wide]
        if np.mean(own, axis=0).max() > limit or own.max() > LARGEST_PULL:
            break
        best = wide
    return WIDTHS[max(best - 1, 0)]


def _pulls(piece: Stretch, noise: Noise) -> FloatArray:
    """Squared differences between the parabolas of all widths, over their variances."""
    weights = np.zeros((len(WIDTHS), piece.distance.size))
    for index, width in enumerate(WIDTHS):
        rows = _window(piece, width)
        if rows.size >= LEAST_POINTS:
            distance = piece.distance[rows] / float(np.abs(piece.distance[rows]).max())
            weights[index, rows] = polynomial_operator(distance, DEGREE)[0]
    difference = weights[:, None] - weights
    variance = variance_factor(difference, noise) * noise.amplitude**2
    squared = (difference @ piece.signal) ** 2
    return np.divide(squared, variance, out=np.zeros_like(squared), where=variance > 0)


def temperature_at(piece: Stretch, width: float) -> tuple[float, float]:
    """Temperature at the place, and its error from scatter and drift over the window.

    Parameters
    ----------
    piece : Stretch
        The trace.
    width : float
        Half-width of the window.

    Returns
    -------
    temperature, error : float, K
        The value of a straight line at the place; scatter about it, and its rise over the window as the
        spread of an even distribution, in quadrature.
    """
    rows = _window(piece, width)
    distance, temperature = piece.distance[rows], piece.temperature[rows]
    if np.ptp(temperature) == 0 or np.ptp(distance) == 0:
        return float(temperature[0]), 0.0
    slope, value = np.polyfit(distance, temperature, 1)
    scatter = float(np.std(temperature - np.polyval([slope, value], distance)))
    drift = abs(float(slope)) * float(np.ptp(distance)) / float(np.sqrt(12))
    return float(value), float(np.hypot(scatter, drift))


def displacement_error(value: Value, filling_error: float) -> float:
    """Error of a reading from that of the filling factor: |d rho/d nu| sigma, and its curvature.

    Parameters
    ----------
    value : Value
        The reading.
    filling_error : float
        Standard error of the filling factor there.

    Returns
    -------
    float, ohm or S
    """
    linear = value.slope * filling_error
    square = value.curvature * filling_error**2 / np.sqrt(2)
    return float(np.hypot(linear, square))


def filling_error_at(density: DensityEstimate, sweep: Sweep, place: float) -> float:
    """Standard error of the filling factor at a place of a sweep."""
    return density.filling_error(place, sweep.mean_field)
