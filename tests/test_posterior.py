"""Likelihood, windows and their sum, against formulas written out reading by reading."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy import integrate, optimize, stats
from scipy.special import logsumexp

from gapfit import posterior as module
from gapfit.errors import InputError, NotEnoughData
from gapfit.mechanisms import COMBINATIONS, PARAMETERS, SLOT, activation, parse_combination
from gapfit.posterior import (
    LogPosterior,
    every_window,
    log_mean_exp,
    make_problem,
    one_window,
    pooled_objective,
    systematic_resample,
)

MIXED = tuple(
    map(
        parse_combination,
        (
            "activation",
            "activation + roll-over + es + leak + heating",
            "activation + fermi + mott + offset",
            "es + leak",
            "power law + offset",
            "constant",
        ),
    )
)
INFLATION = SLOT["inflation"]


@pytest.fixture(scope="module")
def series(simulate_readings):
    return simulate_readings(lambda t: activation(t, 4.0, 5000.0) + 1.0, seed=3, n_point=9)


@pytest.fixture(scope="module")
def drifting(series):
    return replace(series, temperature_error=0.02 * series.temperature)


def coordinates_near(problem, combination, n_draw=4, seed=0, width=0.4):
    rng = np.random.default_rng(seed)
    return problem.prior.coordinates(
        width * rng.standard_normal((n_draw, combination.slots.size)), combination
    )


# ------------------------------------------------------------------------------------------- windows


@pytest.mark.parametrize(
    ("n_point", "min_points", "count"),
    [(14, 1, 105), (14, 4, 66), (9, 4, 21), (4, 4, 1), (3, 4, 1), (16, 3, 105)],
)
def test_number_of_windows(n_point, min_points, count):
    """(n - m + 1)(n - m + 2) / 2 stretches of at least m among n readings; 105 for single readings of 14."""
    assert every_window(n_point, 1.0, min_points).n_window == count


def test_windows_are_all_stretches_of_neighbours_each_once():
    windows = every_window(9, 2.0)
    expected = {(a, b) for a in range(9) for b in range(a + 4, 10)}
    assert {(int(a), int(b)) for a, b in zip(windows.low, windows.high, strict=True)} == expected
    assert windows.n_window == len(expected)
    for kept, low, high in zip(windows.kept, windows.low, windows.high, strict=True):
        np.testing.assert_array_equal(np.flatnonzero(kept), np.arange(low, high))


def test_each_cut_reading_costs():
    windows = every_window(9, 2.5)
    cut = 9 - windows.kept.sum(axis=1)
    np.testing.assert_allclose(windows.log_weight, -2.5 * cut)
    assert windows.log_weight.max() == 0.0


@pytest.mark.parametrize("n_point", [17, 40, 200])
def test_long_series_have_a_coarser_grid_of_cuts(n_point):
    windows = every_window(n_point, 3.0)
    assert windows.n_window <= 17 * 16 / 2
    assert windows.kept.sum(axis=1).max() == n_point
    assert windows.kept.sum(axis=1).min() >= 4
    assert np.unique(windows.low).size >= 12


def test_one_window_keeps_the_readings_between_its_ends(series):
    windows = one_window(series, 0.3, 1.2)
    inside = (series.temperature >= 0.3) & (series.temperature <= 1.2)
    np.testing.assert_array_equal(windows.kept[0] > 0, inside)
    assert windows.log_weight[0] == 0.0
    assert one_window(series).kept.all()


def test_bad_windows_are_refused(series):
    with pytest.raises(InputError, match="below high_K"):
        one_window(series, 1.0, 1.0)
    with pytest.raises(NotEnoughData, match="keeps 2 of 9 readings"):
        one_window(series, series.temperature[3], series.temperature[4])


def test_unknown_noise_is_refused(series):
    with pytest.raises(InputError, match="'student' and 'gaussian'"):
        make_problem(series, one_window(series), noise="cauchy")


# ---------------------------------------------------------------------------------------- likelihood


def reading_by_reading(problem, vector):
    """Log-likelihood of every reading through scipy.stats, zero for no misfit at the stated errors.

    The stated error of a temperature counts through the slope of a line through the neighbouring readings.
    """
    series = problem.series
    log_t = np.log(series.temperature)
    curve = problem.curve(vector[None])
    slope = np.broadcast_to(curve.slope, (1, series.n_point))[0]
    terms = []
    for index in range(series.n_point):
        stated = series.error[index]
        relative = series.temperature_error[index] / series.temperature[index]
        sigma = np.hypot(np.exp(vector[INFLATION]) * stated, slope[index] * relative)
        near = slice(max(0, index - 1), index + 2)
        data_slope = np.polyfit(log_t[near], series.value[near], 1)[0]
        expected = np.hypot(stated, data_slope * relative)
        misfit = series.value[index] - curve.total[0, index]
        if problem.student:
            law = stats.t(5, scale=module.STUDENT_SCALE * sigma)
            perfect = stats.t(5, scale=module.STUDENT_SCALE * expected)
        else:
            law, perfect = stats.norm(scale=sigma), stats.norm(scale=expected)
        terms.append(law.logpdf(misfit) - perfect.logpdf(0.0))
    return np.array(terms)


@pytest.mark.parametrize("noise", ["gaussian", "student"])
@pytest.mark.parametrize("name", ["series", "drifting"])
@pytest.mark.parametrize("combination", MIXED, ids=lambda item: item.name)
def test_point_terms(request, name, noise, combination):
    chosen = request.getfixturevalue(name)
    problem = make_problem(chosen, one_window(chosen), noise=noise)
    coordinates = coordinates_near(problem, combination)
    terms = problem.point_terms(coordinates)
    for row, vector in enumerate(coordinates):
        np.testing.assert_allclose(terms[row], reading_by_reading(problem, vector), rtol=1e-9, atol=1e-10)


@pytest.mark.parametrize("noise", ["gaussian", "student"])
def test_window_sum_against_brute_force(drifting, noise):
    """ln sum over windows of exp(sum over kept readings - cost x cut readings), window by window."""
    cost = 3.0
    problem = make_problem(drifting, every_window(9, cost), noise=noise)
    for combination in MIXED:
        for vector in coordinates_near(problem, combination, n_draw=2, seed=1):
            single = reading_by_reading(problem, vector)
            stretches = [
                single[low:high].sum() - cost * (9 - high + low)
                for low in range(9)
                for high in range(low + 4, 10)
            ]
            assert problem.log_likelihood(vector[None])[0] == pytest.approx(logsumexp(stretches), rel=1e-10)


def test_perfect_readings_cost_nothing(series):
    """At the true curve and the stated errors every term is zero, and the sum over windows is known."""
    combination = parse_combination("activation")
    problem = make_problem(series, every_window(9, 2.0))
    vector = coordinates_near(problem, combination, 1)
    vector[0, INFLATION] = 0.0
    perfect = replace(series, value=problem.curve(vector).total[0])
    exact = replace(problem, series=perfect)
    np.testing.assert_allclose(exact.point_terms(vector), 0.0, atol=1e-12)
    cuts = [9 - length for length in range(4, 10) for _ in range(9 - length + 1)]
    assert exact.log_likelihood(vector)[0] == pytest.approx(logsumexp(-2.0 * np.array(cuts)))


def test_scale_of_the_student_noise():
    """It solves E[(n + 1) x^2 / (n t^2 + x^2)] = 1 for standard normal x: normal noise has inflation one."""
    n = module.STUDENT_DEGREES

    def excess(scale):
        def integrand(x):
            return (n + 1) * x**2 / (n * scale**2 + x**2) * stats.norm.pdf(x)

        return integrate.quad(integrand, -12, 12, points=[0.0], epsabs=1e-12)[0] - 1

    assert optimize.brentq(excess, 0.5, 1.5, xtol=1e-12) == pytest.approx(module.STUDENT_SCALE, abs=5e-6)


def test_heavy_tails_forgive_an_outlier(series):
    value = series.value.copy()
    value[4] += 30 * series.error[4]
    spoilt = replace(series, value=value)
    loss = {}
    for noise in ("gaussian", "student"):
        clean, dirty = (make_problem(item, one_window(item), noise=noise) for item in (series, spoilt))
        vector = coordinates_near(clean, parse_combination("activation + leak"), 1, width=0.0)
        vector[0, SLOT["gap_K"]] = np.log(4.0)
        vector[0, SLOT["activated"]] = np.log(activation(clean.reference.high_K, 4.0, 5000.0))
        vector[0, SLOT["leak"]] = 0.0
        loss[noise] = float((clean.log_likelihood(vector) - dirty.log_likelihood(vector))[0])
    assert loss["gaussian"] > 300
    assert loss["student"] < 30


# ------------------------------------------------------------------------------------------- slopes


@pytest.mark.parametrize("noise", ["gaussian", "student"])
@pytest.mark.parametrize("windowed", [False, True])
@pytest.mark.parametrize("combination", MIXED, ids=lambda item: item.name)
def test_gradient_against_finite_differences(series, noise, windowed, combination):
    windows = every_window(9, 3.0) if windowed else one_window(series)
    problem = make_problem(series, windows, noise=noise)
    coordinates = coordinates_near(problem, combination, seed=2, width=0.2)
    value, gradient, _ = problem.log_likelihood_with_slopes(coordinates)
    np.testing.assert_allclose(value, problem.log_likelihood(coordinates), rtol=1e-12)
    for slot in combination.slots:
        shift = 1e-5 * (np.arange(len(PARAMETERS)) == slot)
        above, below = (problem.log_likelihood(coordinates + sign * shift) for sign in (1, -1))
        expected = (above - below) / 2e-5
        np.testing.assert_allclose(
            gradient[:, slot],
            expected,
            rtol=3e-4,
            atol=1e-4 * np.abs(value).max(),
            err_msg=PARAMETERS[slot].name,
        )


def test_gradient_by_the_inflation_is_exact_with_temperature_errors(drifting):
    problem = make_problem(drifting, every_window(9, 3.0))
    coordinates = coordinates_near(problem, MIXED[1], seed=4, width=0.2)
    shift = 1e-5 * (np.arange(len(PARAMETERS)) == INFLATION)
    above, below = (problem.log_likelihood(coordinates + sign * shift) for sign in (1, -1))
    _, gradient, _ = problem.log_likelihood_with_slopes(coordinates)
    np.testing.assert_allclose(gradient[:, INFLATION], (above - below) / 2e-5, rtol=1e-5)


def test_curvature_is_positive_and_the_information_of_normal_noise(series):
    problem = make_problem(series, one_window(series), noise="gaussian")
    combination = MIXED[1]
    coordinates = coordinates_near(problem, combination, seed=5)
    coordinates[:, INFLATION] = np.log(1.3)
    _, _, curvature = problem.log_likelihood_with_slopes(coordinates)
    jacobian = problem.curve(coordinates, jacobian=True).jacobian / (1.3 * series.error[:, None])
    expected = np.einsum("npi,npj->nij", jacobian, jacobian)
    expected[:, INFLATION, INFLATION] = 2 * series.n_point
    np.testing.assert_allclose(curvature, expected, rtol=1e-9, atol=1e-9)
    assert (np.linalg.eigvalsh(curvature) > -1e-8 * curvature.max()).all()


# ----------------------------------------------------------------------------- posterior and objective


@pytest.mark.parametrize("combination", MIXED, ids=lambda item: item.name)
def test_log_posterior_is_likelihood_times_standard_normal(series, combination):
    problem = make_problem(series, every_window(9, 3.0))
    target = LogPosterior(problem, combination)
    whitened = 0.5 * np.random.default_rng(0).standard_normal((5, target.n_fitted))
    expected = problem.log_likelihood(problem.prior.coordinates(whitened, combination))
    expected = expected + stats.norm.logpdf(whitened).sum(axis=1)
    np.testing.assert_allclose(target(whitened), expected, rtol=1e-12)
    assert target.names == tuple(PARAMETERS[slot].name for slot in combination.slots)


def test_pooled_objective_is_minus_the_log_posterior_of_each_row(series):
    problem = make_problem(series, every_window(9, 3.0))
    rng = np.random.default_rng(1)
    whitened = np.zeros((len(MIXED), len(PARAMETERS)))
    for row, combination in enumerate(MIXED):
        whitened[row, combination.slots] = 0.5 * rng.standard_normal(combination.slots.size)
    cost, gradient, curvature = pooled_objective(problem, MIXED)(whitened, np.arange(len(MIXED)))
    for row, combination in enumerate(MIXED):
        slots = combination.slots
        target = LogPosterior(problem, combination)
        constant = 0.5 * slots.size * np.log(2 * np.pi)
        assert -cost[row] - constant == pytest.approx(target(whitened[row : row + 1, slots])[0], rel=1e-10)
        rest = np.setdiff1d(np.arange(len(PARAMETERS)), slots)
        np.testing.assert_array_equal(gradient[row, rest], 0.0)
        np.testing.assert_allclose(curvature[row][np.ix_(rest, rest)], np.eye(rest.size))
        np.testing.assert_allclose(curvature[row][np.ix_(rest, slots)], 0.0)


@pytest.mark.parametrize("size", [5.0, 20.0])
def test_absurd_draws_have_a_finite_likelihood(drifting, size):
    problem = make_problem(drifting, every_window(9, 3.0))
    for combination in COMBINATIONS:
        coordinates = coordinates_near(problem, combination, 30, seed=6, width=size)
        assert np.isfinite(problem.log_likelihood(coordinates)).all(), combination.name


# --------------------------------------------------------------------------------------------- tools


def test_systematic_resampling_copies_in_proportion():
    weight = np.array([0.1, 0.0, 2.4, 1.5])
    chosen = systematic_resample(weight, 4000, np.random.default_rng(0))
    count = np.bincount(chosen, minlength=4)
    np.testing.assert_allclose(count, 1000 * weight, atol=1)
    assert count[1] == 0
    assert (np.diff(chosen) >= 0).all()


def test_log_mean_exp_does_not_overflow():
    assert log_mean_exp(np.array([1000.0, 1000.0 + np.log(3.0)])) == pytest.approx(1000 + np.log(2.0))
