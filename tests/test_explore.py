"""The fast engine: mixtures, importance sampling, and its answers against nested sampling and quadrature."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import integrate, stats

from gapfit.averaging import combination_log_prior
from gapfit.explore import Mixture, explore, fit_mixture
from gapfit.mechanisms import SLOT, activation, parse_combination
from gapfit.posterior import LogPosterior, every_window, make_problem, one_window

SEED = 20260101


def explored_alone(posterior, seed=SEED):
    (found,) = explore(posterior.problem, [posterior.combination], np.zeros(1), np.random.default_rng(seed))
    return found


def ln_gap(posterior, whitened):
    return posterior.problem.prior.coordinates(whitened, posterior.combination)[:, SLOT["gap_K"]]


# ------------------------------------------------------------------------- against nested sampling


def test_log_likelihood_is_the_one_that_the_judge_has(judged, judge_likelihood):
    """The hand-written likelihood of the judge agrees with the engine's on prior-like draws."""
    by_hand = judge_likelihood(judged.posterior.problem, judged.posterior.combination)
    whitened = 0.7 * np.random.default_rng(0).standard_normal((20, judged.posterior.n_fitted))
    expected = [by_hand(row) + stats.norm.logpdf(row).sum() for row in whitened]
    np.testing.assert_allclose(judged.posterior(whitened), expected, rtol=1e-8)


def test_evidence_against_nested_sampling(judged):
    """Within three combined standard errors of the two runs."""
    found = explored_alone(judged.posterior)
    error = np.hypot(judged.log_evidence_error, found.log_evidence_error)
    assert found.log_evidence == pytest.approx(judged.log_evidence, abs=3 * error)


@pytest.mark.parametrize("probability", [0.025, 0.5, 0.975])
def test_gap_quantiles_against_nested_sampling(judged, probability):
    """Probability below the judge's quantile, within four binomial errors of both effective sizes."""
    found = explored_alone(judged.posterior)
    order = np.argsort(judged.ln_gap)
    summed = np.cumsum(judged.weight[order]) / judged.weight.sum()
    quantile = judged.ln_gap[order][np.searchsorted(summed, probability)]
    below = np.exp(found.log_weight[ln_gap(judged.posterior, found.whitened) < quantile]).sum()
    error = np.sqrt(probability * (1 - probability) * (1 / judged.ess + 1 / found.ess))
    assert below == pytest.approx(probability, abs=4 * error)


# ----------------------------------------------------------------------------- against quadrature


@pytest.fixture(scope="module")
def series(simulate_readings):
    return simulate_readings(lambda t: activation(t, 4.0, 5000.0), seed=11)


def grid_evidence(posterior, found, n_grid):
    """Trapezium rule over eight standard deviations of the posterior about its mean, either way."""
    weight = np.exp(found.log_weight)
    mean = weight @ found.whitened
    root = np.linalg.cholesky(np.cov(found.whitened.T, aweights=weight))
    axis = np.linspace(-8, 8, n_grid)
    mesh = np.stack(np.meshgrid(*[axis] * mean.size, indexing="ij"), axis=-1).reshape(-1, mean.size)
    values = np.concatenate([posterior(mean + part @ root.T) for part in np.array_split(mesh, 40)])
    cell = (axis[1] - axis[0]) ** mean.size * np.prod(np.diag(root))
    largest = values.max()
    return float(largest + np.log(np.exp(values - largest).sum() * cell))


@pytest.mark.parametrize("windowed", [False, True])
@pytest.mark.parametrize("text", ["constant", "activation"])
def test_evidence_against_quadrature(series, text, windowed):
    """Two and three parameters on a grid, exact to a percent; the engine within four of its errors."""
    windows = every_window(series.n_point, 3.0) if windowed else one_window(series)
    combination = parse_combination(text)
    posterior = LogPosterior(make_problem(series, windows), combination)
    found = explored_alone(posterior)
    expected = grid_evidence(posterior, found, 61 if text == "activation" else 201)
    error = np.hypot(4 * found.log_evidence_error, 0.01)
    assert found.log_evidence == pytest.approx(expected, abs=error)


def test_evidence_error_is_honest(series):
    """Scatter of the log evidence over seeds against its stated error (chi-squared, 8 runs)."""
    posterior = LogPosterior(
        make_problem(series, every_window(14, 3.0)), parse_combination("activation + leak")
    )
    runs = [explored_alone(posterior, seed) for seed in range(8)]
    evidence = np.array([run.log_evidence for run in runs])
    error = np.sqrt(np.mean([run.log_evidence_error**2 for run in runs]))
    chi_squared = np.sum((evidence - evidence.mean()) ** 2) / error**2
    assert chi_squared < stats.chi2(7).isf(1e-4)


# ----------------------------------------------------------------------------- draws and weights


def test_weights_sum_to_one_and_draws_are_reproducible(series):
    posterior = LogPosterior(
        make_problem(series, every_window(14, 3.0)), parse_combination("activation + es")
    )
    first, again, other = (explored_alone(posterior, seed) for seed in (1, 1, 2))
    assert np.exp(first.log_weight).sum() == pytest.approx(1.0, rel=1e-9)
    np.testing.assert_array_equal(first.whitened, again.whitened)
    np.testing.assert_array_equal(first.log_weight, again.log_weight)
    assert first.log_evidence == again.log_evidence
    assert not np.array_equal(first.whitened, other.whitened)


def test_the_combinations_that_matter_are_kept_in_both_families(series):
    """Flat and hopping curves are hopeless here; the best of them is kept as the other side of the scale."""
    problem = make_problem(series, one_window(series))
    texts = ("activation", "activation + leak", "activation + heating", "es", "mott", "constant", "power law")
    combinations = tuple(map(parse_combination, texts))
    log_prior = combination_log_prior(combinations, 1.0)
    found = explore(problem, combinations, log_prior, np.random.default_rng(0))
    names = [item.combination.name for item in found]
    assert names == [text for text in texts if text in names]
    assert "activation" in names
    assert any(not item.combination.activated for item in found)
    assert "constant" not in names


def test_modes_are_stationary_points_of_the_posterior(series):
    posterior = LogPosterior(make_problem(series, one_window(series)), parse_combination("activation"))
    (mode,) = explored_alone(posterior).modes
    around = mode + 1e-3 * np.random.default_rng(0).standard_normal((200, mode.size))
    assert posterior(mode[None])[0] >= posterior(around).max() - 1e-4


# -------------------------------------------------------------------------------------- mixtures


@pytest.fixture(scope="module")
def mixture():
    return Mixture(
        np.array([0.5, 0.3, 0.2]),
        np.array([[0.0, 0.0], [4.0, -1.0], [0.0, 0.0]]),
        np.array([[[1.0, 0.0], [0.5, 0.7]], [[0.4, 0.0], [0.0, 0.4]], [[1.0, 0.0], [0.0, 1.0]]]),
    )


def test_mixture_density_against_scipy(mixture):
    points = np.random.default_rng(0).normal(1.0, 3.0, (50, 2))
    parts = [
        weight * stats.multivariate_t(mean, root @ root.T, df=6).pdf(points)
        for weight, mean, root in zip(mixture.weight, mixture.mean, mixture.root, strict=True)
    ]
    np.testing.assert_allclose(mixture.log_density(points), np.log(np.sum(parts, axis=0)), rtol=1e-10)


def test_mixture_density_integrates_to_one(mixture):
    def density(y, x):
        return float(np.exp(mixture.log_density(np.array([[x, y]]))[0]))

    total, _ = integrate.dblquad(density, -15, 20, -17, 17, epsabs=1e-4, epsrel=1e-4)
    assert total == pytest.approx(1.0, abs=2e-3)


def test_mixture_draws_follow_its_density(mixture):
    """Marginal of the second coordinate against the mixture of Student-t distributions."""
    draws = mixture.sample(4000, np.random.default_rng(1))

    def cumulative(y):
        scales = np.sqrt([np.sum(root[1] ** 2) for root in mixture.root])
        return sum(
            weight * stats.t(6, mean[1], scale).cdf(y)
            for weight, mean, scale in zip(mixture.weight, mixture.mean, scales, strict=True)
        )

    assert stats.kstest(draws[:, 1], cumulative).pvalue > 0.01


def test_fitted_mixture_finds_two_clusters():
    rng = np.random.default_rng(2)
    points = np.concatenate([rng.normal(-3, 0.3, (600, 2)), rng.normal(2, 0.5, (400, 2))])
    fitted = fit_mixture(points, np.full(1000, 1e-3), 4, 30, rng)
    assert fitted.weight.sum() == pytest.approx(1.0)
    near = np.abs(fitted.mean[:-1, 0] + 3) < 1
    assert fitted.weight[:-1][near].sum() == pytest.approx(0.57, abs=0.05)
    np.testing.assert_array_equal(fitted.root[-1], np.eye(2))


def test_widened_mixture_keeps_its_mass_and_its_broad_component(mixture):
    wide = mixture.widened()
    assert wide.weight.sum() == pytest.approx(1.0)
    np.testing.assert_array_equal(wide.root[-1], mixture.root[-1])
    np.testing.assert_allclose(np.linalg.det(wide.root[2]), 4 * np.linalg.det(mixture.root[0]))
