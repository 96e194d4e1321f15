"""Posterior of one combination of mechanisms, with the temperature window summed inside the likelihood.

A *member* is a combination together with a window (the readings between a lower and an upper cut). For
one combination the sum over windows is one smooth likelihood, and which window a draw belongs to is a
latent variable with its own posterior:

    ln L(theta) = ln sum_w exp[ sum_{i in w} l_i(theta) - cost * (number of readings cut by w) ].

The terms l_i are normalised so that a zero residual at the stated errors (of reading and temperature,
the latter through the slope of the data) counts zero; a reading that is
kept therefore pays for its misfit, one that is cut pays the cost (the reasoning of Jay & Neil, Phys.
Rev. D 103, 114502 (2021), with a higher cost).
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray
from scipy.special import logsumexp

from gapfit.curve import Curve, Reference, evaluate
from gapfit.errors import InputError, NotEnoughData
from gapfit.mechanisms import PARAMETERS, SLOT, Combination
from gapfit.priors import Prior, prior_at_data_scale, reference_of
from gapfit.series import TemperatureSeries

__all__ = [
    "LogPosterior",
    "Problem",
    "Windows",
    "every_window",
    "make_problem",
    "one_window",
    "pooled_objective",
]

FloatArray = NDArray[np.float64]

STUDENT_DEGREES = 5.0
"""Degrees of freedom of the Student-t noise: heavy enough for single outliers, nearly normal otherwise."""

STUDENT_SCALE = 0.85662
"""Scale of the Student-t distribution that fits normal noise of unit variance best.

It solves E[(n + 1) x^2 / (n t^2 + x^2)] = 1 for standard normal x, so that a noise inflation of one
means what it says.
"""

_STUDENT_WIDTH = STUDENT_DEGREES * STUDENT_SCALE**2

LARGEST_CUT_COUNT = 16
_INFLATION = SLOT["inflation"]


@dataclass(frozen=True)
class Windows:
    """Windows of temperature over which a likelihood is summed.

    Attributes
    ----------
    low, high : ndarray[n_window] of int
        A window keeps the readings low, ..., high - 1.
    kept : ndarray[n_window, n_point]
        1 where a window keeps a reading.
    log_weight : ndarray[n_window]
        Minus the cost of the readings cut.
    """

    low: NDArray[np.intp]
    high: NDArray[np.intp]
    kept: FloatArray
    log_weight: FloatArray

    @property
    def n_window(self) -> int:
        """Number of windows."""
        return int(self.low.size)


def _windows(low: Sequence[int], high: Sequence[int], n_point: int, cost: float) -> Windows:
    starts, stops = np.asarray(low, dtype=np.intp), np.asarray(high, dtype=np.intp)
    index = np.arange(n_point)
    kept = ((index >= starts[:, None]) & (index < stops[:, None])).astype(float)
    return Windows(starts, stops, kept, -cost * (n_point - kept.sum(axis=1)))


def every_window(n_point: int, cost: float, min_points: int = 4) -> Windows:
    """All windows of at least some readings, each cut reading at a cost.

    Parameters
    ----------
    n_point : int
        Number of readings.
    cost : float
        Cost per cut reading, in units of ln evidence.
    min_points : int
        Fewest readings that a window keeps.

    Returns
    -------
    Windows
        With more than sixteen readings the cuts lie on a coarser, even grid.
    """
    edges = np.arange(n_point + 1)
    if n_point > LARGEST_CUT_COUNT:
        edges = np.unique(np.linspace(0, n_point, LARGEST_CUT_COUNT + 1).round().astype(int))
    pairs = [(int(a), int(b)) for a in edges for b in edges if b - a >= min(min_points, n_point)]
    return _windows([a for a, _ in pairs], [b for _, b in pairs], n_point, cost)


def one_window(series: TemperatureSeries, low_K: float = 0.0, high_K: float = np.inf) -> Windows:
    """The one window that keeps the readings between two temperatures.

    Parameters
    ----------
    series : TemperatureSeries
    low_K, high_K : float, K
        Ends, included.

    Returns
    -------
    Windows

    Raises
    ------
    InputError
        If the window is empty or upside down.
    NotEnoughData
        If it keeps fewer than three readings.
    """
    if low_K >= high_K:
        raise InputError(f"window from {low_K:g} K to {high_K:g} K is empty; low_K must be below high_K")
    inside = np.flatnonzero((series.temperature >= low_K) & (series.temperature <= high_K))
    if inside.size < 3:
        raise NotEnoughData(
            f"filling {series.filling}: the window {low_K:g} to {high_K:g} K keeps {inside.size} of "
            f"{series.n_point} readings ({series.temperature[0]:g} to {series.temperature[-1]:g} K); "
            "it must keep at least three"
        )
    return _windows([int(inside[0])], [int(inside[-1]) + 1], series.n_point, 0.0)


@dataclass(frozen=True)
class Problem:
    """A series with everything that all combinations share.

    Attributes
    ----------
    series : TemperatureSeries
    reference : Reference
    prior : Prior
    windows : Windows
    student : bool
        Student-t noise with 5 degrees of freedom, or normal noise.
    """

    series: TemperatureSeries
    reference: Reference
    prior: Prior
    windows: Windows
    student: bool = True

    def curve(self, coordinates: FloatArray, jacobian: bool = False) -> Curve:
        """Curves at the temperatures of the series."""
        return evaluate(coordinates, self.series.temperature, self.reference, jacobian)

    def _variance(self, coordinates: FloatArray, curve: Curve) -> FloatArray:
        """Effective variance relative to the stated one (Orear, Am. J. Phys. 50, 912 (1982))."""
        series = self.series
        inflation = np.exp(2 * np.clip(coordinates[:, _INFLATION, None], -50, 50))
        if not series.temperature_error.any():
            return np.broadcast_to(inflation, curve.total.shape)
        by_temperature = curve.slope * series.temperature_error / (series.temperature * series.error)
        return np.asarray(inflation + np.minimum(np.abs(by_temperature), 1e100) ** 2)

    def point_terms(self, coordinates: FloatArray) -> FloatArray:
        """Log-likelihood of every reading, zero for a zero residual at the stated errors.

        Parameters
        ----------
        coordinates : ndarray[n_draw, n_parameter]

        Returns
        -------
        ndarray[n_draw, n_point]
        """
        curve = self.curve(coordinates)
        variance = self._variance(coordinates, curve)
        return self._terms(self._residual(curve) ** 2 / variance, variance)

    def _residual(self, curve: Curve) -> FloatArray:
        residual = (self.series.value - curve.total) / self.series.error
        return np.clip(residual, -1e100, 1e100)

    def _terms(self, squared: FloatArray, variance: FloatArray) -> FloatArray:
        if self.student:
            fit = -(STUDENT_DEGREES + 1) / 2 * np.log1p(squared / _STUDENT_WIDTH)
        else:
            fit = -squared / 2
        return np.asarray(fit - np.log(variance) / 2 + self._log_scatter / 2)

    @cached_property
    def _log_scatter(self) -> FloatArray:
        """Log of the effective variance, relative to the stated one, that the data themselves show."""
        series = self.series
        by_temperature = _log_slope(series) * series.temperature_error / (series.temperature * series.error)
        return np.asarray(np.log1p(by_temperature**2))

    def window_terms(self, coordinates: FloatArray) -> FloatArray:
        """Log-likelihood of every window, its cost included, ndarray[n_draw, n_window]."""
        return np.asarray(self.point_terms(coordinates) @ self.windows.kept.T + self.windows.log_weight)

    def log_likelihood(self, coordinates: FloatArray) -> FloatArray:
        """Log-likelihood summed over windows, ndarray[n_draw]."""
        return np.asarray(_log_sum(self.window_terms(coordinates)))

    def log_likelihood_with_slopes(
        self, coordinates: FloatArray
    ) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Log-likelihood, its gradient and a positive curvature by the coordinates.

        Parameters
        ----------
        coordinates : ndarray[n_draw, n_parameter]

        Returns
        -------
        value : ndarray[n_draw]
        gradient : ndarray[n_draw, n_parameter]
        curvature : ndarray[n_draw, n_parameter, n_parameter]
            Gauss-Newton curvature with the readings weighted by their noise weight and by the share of
            the windows that keep them; the dependence of the effective variance on the curve is left out
            of both.
        """
        curve = self.curve(coordinates, jacobian=True)
        variance = self._variance(coordinates, curve)
        residual = self._residual(curve)
        squared = residual**2 / variance
        terms = self._terms(squared, variance) @ self.windows.kept.T + self.windows.log_weight
        value = _log_sum(terms)
        share = np.exp(terms - value[:, None]) @ self.windows.kept
        weight = share
        if self.student:
            weight = share * (STUDENT_DEGREES + 1) / (_STUDENT_WIDTH + squared)
        slopes = curve.jacobian / self.series.error[:, None]  # type: ignore[operator]
        gradient = np.einsum("np,npi->ni", weight * residual / variance, slopes)
        scaled = slopes * np.sqrt(weight / variance)[:, :, None]
        curvature = np.swapaxes(scaled, 1, 2) @ scaled
        inflated = np.exp(2 * np.clip(coordinates[:, _INFLATION, None], -50, 50)) / variance
        gradient[:, _INFLATION] = np.sum((weight * squared - share) * inflated, axis=1)
        information = 2 * STUDENT_DEGREES / (STUDENT_DEGREES + 3) if self.student else 2.0
        curvature[:, _INFLATION, _INFLATION] = information * np.sum(share * inflated**2, axis=1)
        return value, gradient, curvature


def _log_slope(series: TemperatureSeries) -> FloatArray:
    """Slope d reading / d ln T of the data at every reading, by least squares over the neighbours."""
    x, y = np.log(series.temperature), series.value
    slope = np.zeros_like(x)
    for index in range(x.size):
        near = slice(max(0, index - 1), index + 2)
        centred = x[near] - x[near].mean()
        norm = float(centred @ centred)
        slope[index] = float(centred @ y[near]) / norm if norm > 1e-12 else 0.0
    return slope


def _log_sum(terms: FloatArray) -> FloatArray:
    """Logsumexp over the last axis, without the overhead of the general one."""
    if terms.shape[1] == 1:
        return terms[:, 0]
    largest = terms.max(axis=1)
    return np.asarray(largest + np.log(np.exp(terms - largest[:, None]).sum(axis=1)))


def make_problem(
    series: TemperatureSeries,
    windows: Windows,
    *,
    noise: str = "student",
    hopping_power: float = 1.0,
    saturation_exponent: float = 4.0,
) -> Problem:
    """Problem of a series with priors at the scale of its data.

    Parameters
    ----------
    series : TemperatureSeries
    windows : Windows
    noise : {"student", "gaussian"}
    hopping_power : float
        Power m of the hopping prefactor.
    saturation_exponent : float
        n of the electron temperature.

    Returns
    -------
    Problem

    Raises
    ------
    InputError
        If the noise is not one of the two.
    """
    if noise not in ("student", "gaussian"):
        raise InputError(f"unknown noise {noise!r}; allowed are 'student' and 'gaussian'")
    reference = reference_of(series, hopping_power, saturation_exponent)
    return Problem(series, reference, prior_at_data_scale(series, reference), windows, noise == "student")


@dataclass(frozen=True)
class LogPosterior:
    """Log posterior density of one combination in whitened coordinates, not normalised.

    Attributes
    ----------
    problem : Problem
    combination : Combination
    """

    problem: Problem
    combination: Combination

    @property
    def n_fitted(self) -> int:
        """Number of fitted parameters."""
        return int(self.combination.slots.size)

    @property
    def names(self) -> tuple[str, ...]:
        """Names of the fitted parameters."""
        return tuple(PARAMETERS[slot].name for slot in self.combination.slots)

    def __call__(self, whitened: FloatArray) -> FloatArray:
        """Log posterior density of a batch.

        Parameters
        ----------
        whitened : ndarray[n_draw, n_fitted]

        Returns
        -------
        ndarray[n_draw]
            Normalised prior times normalised-to-zero-residual likelihood, so its integral is the evidence.
        """
        coordinates = self.problem.prior.coordinates(whitened, self.combination)
        return self.problem.log_likelihood(coordinates) + log_standard_normal(whitened)


def log_standard_normal(whitened: FloatArray) -> FloatArray:
    """Log density of independent standard normals, ndarray[n_draw]."""
    return np.asarray(
        -0.5 * np.einsum("ni,ni->n", whitened, whitened) - 0.5 * whitened.shape[1] * np.log(2 * np.pi)
    )


def pooled_objective(
    problem: Problem, combinations: Sequence[Combination]
) -> Callable[[FloatArray, NDArray[np.intp]], tuple[FloatArray, FloatArray, FloatArray]]:
    """Minus the log posterior of many combinations at once, for `optimise.minimise`.

    Parameters
    ----------
    problem : Problem
    combinations : sequence of Combination
        The combination of each row of the batch.

    Returns
    -------
    callable
        Takes whitened vectors over *all* parameters, ndarray[n, n_parameter], and row numbers; entries
        that a combination does not fit are held by their prior alone and rest at zero.
    """
    fitted = np.zeros((len(combinations), len(PARAMETERS)), dtype=bool)
    base = np.empty((len(combinations), len(PARAMETERS)))
    for row, combination in enumerate(combinations):
        fitted[row, combination.slots] = True
        base[row] = combination.base
    centre, width = problem.prior.centre, problem.prior.width

    def objective(whitened: FloatArray, rows: NDArray[np.intp]) -> tuple[FloatArray, FloatArray, FloatArray]:
        scale = np.where(fitted[rows], width, 0.0)
        coordinates = np.where(fitted[rows], centre + width * whitened, base[rows])
        value, gradient, curvature = problem.log_likelihood_with_slopes(coordinates)
        curvature *= scale[:, :, None]
        curvature *= scale[:, None, :]
        np.einsum("nii->ni", curvature)[...] += 1.0
        cost = 0.5 * np.einsum("ni,ni->n", whitened, whitened) - value
        return cost, whitened - gradient * scale, curvature

    return objective


def log_mean_exp(terms: FloatArray) -> float:
    """Logarithm of the mean of exponentials."""
    return float(logsumexp(terms) - np.log(terms.size))


def systematic_resample(weight: FloatArray, n_draw: int, rng: np.random.Generator) -> NDArray[np.intp]:
    """Indices of draws of equal weight by systematic resampling.

    Parameters
    ----------
    weight : ndarray[n]
        Weights, not negative; they need not sum to one.
    n_draw : int
    rng : numpy.random.Generator

    Returns
    -------
    ndarray[n_draw] of int
        In rising order.
    """
    edges = np.cumsum(weight)
    positions = (np.arange(n_draw) + rng.uniform()) / n_draw * edges[-1]
    return np.asarray(np.minimum(np.searchsorted(edges, positions), weight.size - 1))
