"""Batched Levenberg-Marquardt: many starts of one problem, or many problems of one size, at once."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["Minima", "least_squares_objective", "minimise"]

FloatArray = NDArray[np.float64]
Objective = Callable[[FloatArray, NDArray[np.intp]], tuple[FloatArray, FloatArray, FloatArray]]

LARGEST_DAMPING = 1e14


@dataclass(frozen=True)
class Minima:
    """Where a batch of descents ended.

    Attributes
    ----------
    position : ndarray[n_start, n_parameter]
    cost : ndarray[n_start]
    curvature : ndarray[n_start, n_parameter, n_parameter]
        Curvature that the objective returned at the end.
    converged : ndarray[n_start] of bool
        Whether the last accepted or predicted decrease fell below the tolerance.
    iterations : int
        Rounds used by the slowest start.
    """

    position: FloatArray
    cost: FloatArray
    curvature: FloatArray
    converged: NDArray[np.bool_]
    iterations: int


def minimise(
    objective: Objective,
    start: FloatArray,
    *,
    tolerance: float = 1e-9,
    max_iterations: int = 200,
) -> Minima:
    """Minimise an objective from many starts at once.

    Parameters
    ----------
    objective : callable
        Takes positions ndarray[n, n_parameter] and the indices ndarray[n] of the starts that they belong
        to; returns cost ndarray[n], gradient ndarray[n, n_parameter] and positive curvature ndarray[n,
        n_parameter, n_parameter].
    start : ndarray[n_start, n_parameter]
        Starting positions.
    tolerance : float
        A start rests when the predicted decrease of its cost falls below this share of 1 + abs(cost).
    max_iterations : int
        Limit of rounds.

    Returns
    -------
    Minima

    Notes
    -----
    Marquardt's scaling of the damping by the largest diagonal met so far (More 1978), and Nielsen's rule
    for its size (IMM-REP-1999-05): the damping follows the ratio of true to predicted decrease.
    """
    position = np.array(start, dtype=float)
    everyone = np.arange(len(position))
    cost, gradient, curvature = objective(position, everyone)
    diagonal = np.einsum("nii->ni", curvature).copy()
    damping, growth = np.full(len(position), 1e-3), np.full(len(position), 2.0)
    converged = np.zeros(len(position), bool)
    moving = np.isfinite(cost)
    rounds = 0
    while moving.any() and rounds < max_iterations:
        rounds += 1
        rows = np.flatnonzero(moving)
        diagonal[rows] = np.maximum(diagonal[rows], np.einsum("nii->ni", curvature[rows]))
        step, predicted = _step(gradient[rows], curvature[rows], damping[rows, None] * diagonal[rows])
        small = predicted <= tolerance * (1 + np.abs(cost[rows]))
        trial = position[rows] + step
        new_cost, new_gradient, new_curvature = objective(trial, rows)
        ratio = np.where(predicted > 0, (cost[rows] - new_cost) / np.maximum(predicted, 1e-300), 0.0)
        ratio = np.where(np.isfinite(new_cost), ratio, -1.0)
        good = ratio > 0
        taken = rows[good]
        position[taken], cost[taken] = trial[good], new_cost[good]
        gradient[taken], curvature[taken] = new_gradient[good], new_curvature[good]
        damping[taken] *= np.maximum(1 / 3, 1 - (2 * np.minimum(ratio[good], 1.0) - 1) ** 3)
        growth[taken] = 2.0
        refused = rows[~good]
        damping[refused] *= growth[refused]
        growth[refused] *= 2
        converged[rows[small]] = True
        stuck = damping > LARGEST_DAMPING
        moving &= ~converged & ~stuck
    return Minima(position, cost, curvature, converged, rounds)


def _step(gradient: FloatArray, curvature: FloatArray, damping: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Damped step and the decrease that the quadratic model predicts for it."""
    damped = curvature + np.eye(gradient.shape[1]) * (damping[:, None, :] + 1e-300)
    step = -np.linalg.solve(damped, gradient[:, :, None])[:, :, 0]
    bent = np.einsum("ni,nij,nj->n", step, curvature, step)
    return np.asarray(step), np.asarray(-np.einsum("ni,ni->n", gradient, step) - 0.5 * bent)


def least_squares_objective(
    residual: Callable[[FloatArray], tuple[FloatArray, FloatArray]],
) -> Objective:
    """Objective half the sum of squares, with the Gauss-Newton curvature.

    Parameters
    ----------
    residual : callable
        Takes positions ndarray[n, n_parameter]; returns residuals ndarray[n, n_point] and their
        Jacobian ndarray[n, n_point, n_parameter].

    Returns
    -------
    callable
        As `minimise` wants it.
    """

    def objective(position: FloatArray, _: NDArray[np.intp]) -> tuple[FloatArray, FloatArray, FloatArray]:
        r, jacobian = residual(position)
        with np.errstate(over="ignore", invalid="ignore"):
            cost = 0.5 * np.sum(r**2, axis=1)
            gradient = np.einsum("np,npi->ni", r, jacobian)
            curvature = np.einsum("npi,npj->nij", jacobian, jacobian)
        return cost, gradient, curvature

    return objective
