"""The batched optimiser on problems whose answer is known in closed form (certified ones: published/)."""

from __future__ import annotations

import numpy as np
import pytest

from gapfit.optimise import least_squares_objective, minimise


def bowl(centre, curvature):
    """Quadratic with the same centre and curvature for every start."""

    def objective(position, rows):
        offset = position - centre
        return (
            0.5 * np.einsum("ni,ij,nj->n", offset, curvature, offset) - 3.0,
            offset @ curvature,
            np.repeat(curvature[None], len(position), axis=0),
        )

    return objective


def rosenbrock(position):
    """Residuals 10 (y - x^2) and 1 - x (Rosenbrock, Comput. J. 3, 175 (1960)); minimum at (1, 1)."""
    x, y = position.T
    residual = np.stack([10 * (y - x**2), 1 - x], axis=1)
    zero, one = np.zeros_like(x), np.ones_like(x)
    jacobian = np.stack([np.stack([-20 * x, 10 * one], -1), np.stack([-one, zero], -1)], axis=1)
    return residual, jacobian


def test_quadratic_bowl():
    centre, curvature = np.array([1.0, -2.0]), np.array([[3.0, 1.0], [1.0, 2.0]])
    ended = minimise(bowl(centre, curvature), np.array([[10.0, 10.0], [-50.0, 3.0]]), tolerance=1e-15)
    assert ended.converged.all()
    np.testing.assert_allclose(ended.position, np.tile(centre, (2, 1)), atol=1e-6)
    np.testing.assert_allclose(ended.cost, -3.0, atol=1e-12)
    np.testing.assert_array_equal(ended.curvature[0], curvature)


def test_curved_valley():
    start = np.array([[-1.2, 1.0], [3.0, -4.0], [-30.0, 20.0]])
    ended = minimise(least_squares_objective(rosenbrock), start, tolerance=1e-20, max_iterations=500)
    assert ended.converged.all()
    np.testing.assert_allclose(ended.position, 1.0, rtol=1e-7)


def test_least_squares_objective_is_half_the_sum_of_squares():
    position = np.array([[0.3, -0.7]])
    cost, gradient, curvature = least_squares_objective(rosenbrock)(position, np.array([0]))
    residual, jacobian = rosenbrock(position)
    assert cost[0] == pytest.approx(0.5 * np.sum(residual**2))
    np.testing.assert_allclose(gradient[0], jacobian[0].T @ residual[0])
    np.testing.assert_allclose(curvature[0], jacobian[0].T @ jacobian[0])


def test_rows_tell_the_objective_which_problem_a_start_belongs_to():
    """Problems of one size but with different answers descend together, some resting earlier."""
    centres = np.array([[1.0, 1.0], [-4.0, 2.0], [1e3, -1e3]])

    def objective(position, rows):
        offset = position - centres[rows]
        size = 1 + offset**2
        return (
            np.sum(np.sqrt(size) - 1, axis=1),
            offset / np.sqrt(size),
            np.einsum("ni,ij->nij", size**-1.5, np.eye(2)),
        )

    ended = minimise(objective, np.array([[1.0, 1.0], [0.0, 0.0], [0.0, 0.0]]), tolerance=1e-14)
    assert ended.converged.all()
    np.testing.assert_allclose(ended.position, centres, atol=1e-5)


def test_cost_never_grows():
    costs = []
    base = least_squares_objective(rosenbrock)

    def spying(position, rows):
        cost, gradient, curvature = base(position, rows)
        costs.append(float(cost[0]))
        return cost, gradient, curvature

    ended = minimise(spying, np.array([[-1.2, 1.0]]), tolerance=1e-18)
    assert ended.cost[0] == min(costs)
    assert ended.cost[0] < costs[0]


def test_a_start_of_infinite_cost_stays_and_does_not_converge():
    def objective(position, rows):
        cost = np.where(position[:, 0] > 100, np.inf, 0.5 * position[:, 0] ** 2)
        return cost, position, np.ones((len(position), 1, 1))

    ended = minimise(objective, np.array([[1000.0], [5.0]]), tolerance=1e-12)
    assert not ended.converged[0]
    assert ended.position[0, 0] == 1000.0
    assert ended.position[1, 0] == pytest.approx(0.0, abs=1e-5)


def test_steps_into_infinite_cost_are_refused():
    """A wall at x = 0 beyond which the logarithm is missing."""

    def objective(position, rows):
        x = position[:, 0]
        with np.errstate(invalid="ignore", divide="ignore"):
            cost = np.where(x > 0, x - np.log(np.maximum(x, 1e-300)), np.nan)
        return cost, (1 - 1 / x)[:, None], np.abs(1 / x**2)[:, None, None]

    ended = minimise(objective, np.array([[30.0], [0.01]]), tolerance=1e-14)
    np.testing.assert_allclose(ended.position[:, 0], 1.0, rtol=1e-5)


def test_limit_of_rounds_is_kept_and_reported():
    ended = minimise(least_squares_objective(rosenbrock), np.array([[-1.2, 1.0]]), max_iterations=3)
    assert ended.iterations == 3
    assert not ended.converged[0]


def test_the_start_is_left_alone():
    start = np.array([[-1.2, 1.0]])
    minimise(least_squares_objective(rosenbrock), start)
    np.testing.assert_array_equal(start, [[-1.2, 1.0]])
