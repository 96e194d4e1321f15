"""Convergence diagnostics against an independent implementation (arviz-stats) and against known truths."""

from __future__ import annotations

import numpy as np
import pytest
from arviz_stats.base import array_stats
from scipy import stats

from gapfit.diagnostics import bulk_ess, effective_weights, nested_rhat, pareto_smooth, tail_ess


def autoregressive(correlation, n_ensemble=3, n_step=400, n_walker=6, seed=0, heavy=False):
    """Stationary AR(1) walkers, ndarray[n_ensemble, n_step, n_walker]; skewed where heavy."""
    rng = np.random.default_rng(seed)
    noise = rng.standard_normal((n_step, n_ensemble, n_walker))
    chain = np.empty_like(noise)
    chain[0] = noise[0]
    for step in range(1, n_step):
        chain[step] = correlation * chain[step - 1] + np.sqrt(1 - correlation**2) * noise[step]
    chain = np.moveaxis(chain, 0, 1)
    return np.exp(2 * chain) if heavy else chain


def as_chains(ensembles):
    """ndarray[n_chain, n_step], the form that arviz-stats wants."""
    return np.moveaxis(ensembles, 1, 2).reshape(-1, ensembles.shape[1])


# -------------------------------------------------------------------------- effective sample sizes


@pytest.mark.parametrize("heavy", [False, True])
@pytest.mark.parametrize("correlation", [-0.3, 0.0, 0.5, 0.9])
def test_bulk_ess_against_arviz_stats(correlation, heavy):
    ensembles = autoregressive(correlation, seed=int(10 + 10 * correlation), heavy=heavy)
    expected = array_stats.ess(as_chains(ensembles), method="bulk")
    assert bulk_ess(ensembles) == pytest.approx(expected, rel=0.05)


@pytest.mark.parametrize("correlation", [0.0, 0.5, 0.9])
def test_tail_ess_against_arviz_stats(correlation):
    ensembles = autoregressive(correlation, seed=4)
    chains = as_chains(ensembles)
    expected = min(array_stats.ess(chains, method="quantile", prob=prob) for prob in (0.025, 0.975))
    assert tail_ess(ensembles) == pytest.approx(expected, rel=0.05)


@pytest.mark.parametrize("correlation", [0.0, 0.6, 0.9])
def test_bulk_ess_of_an_autoregression(correlation):
    """n (1 - r) / (1 + r) in closed form; a fifth allowed for the estimate of the time itself."""
    ensembles = autoregressive(correlation, n_step=2000, n_walker=10, seed=5)
    expected = ensembles.size * (1 - correlation) / (1 + correlation)
    assert bulk_ess(ensembles) == pytest.approx(expected, rel=0.2)


def test_walkers_that_sit_apart_have_a_small_effective_size():
    ensembles = autoregressive(0.0, seed=6)
    ensembles[0] += 6.0
    assert bulk_ess(ensembles) < 0.02 * ensembles.size


def test_a_constant_has_no_effective_size():
    assert np.isnan(bulk_ess(np.ones((2, 10, 3))))


# ------------------------------------------------------------------------------------ nested R-hat


def test_nested_rhat_by_hand():
    """Two ensembles of two walkers with two steps, on ranks 1 ... 8."""
    ensembles = np.array([[[1.0, 2.0], [3.0, 4.0]], [[5.0, 6.0], [7.0, 8.0]]])
    z = stats.norm.ppf((np.arange(1, 9) - 0.375) / 8.25)
    walkers = {(0, 0): z[[0, 2]], (0, 1): z[[1, 3]], (1, 0): z[[4, 6]], (1, 1): z[[5, 7]]}
    between = np.var([z[:4].mean(), z[4:].mean()], ddof=1)
    inside = []
    for ensemble in (0, 1):
        first, second = walkers[ensemble, 0], walkers[ensemble, 1]
        within = (np.var(first, ddof=1) + np.var(second, ddof=1)) / 2
        inside.append(within + np.var([first.mean(), second.mean()], ddof=1))
    assert nested_rhat(ensembles) == pytest.approx(np.sqrt(1 + between / np.mean(inside)), rel=1e-12)


@pytest.mark.parametrize("shift", [0.0, 0.3, 3.0])
def test_nested_rhat_against_arviz_stats(shift):
    ensembles = autoregressive(0.7, n_step=200, seed=7)
    ensembles[1] += shift
    ranks = stats.rankdata(ensembles).reshape(ensembles.shape)
    z = stats.norm.ppf((ranks - 0.375) / (ensembles.size + 0.25))
    owner = np.repeat(np.arange(3), ensembles.shape[2])
    expected = array_stats.rhat_nested(as_chains(z), superchain_ids=owner, method="identity")
    assert nested_rhat(ensembles) == pytest.approx(float(expected), rel=1e-10)


def test_nested_rhat_tells_agreement_from_disagreement():
    agreeing = autoregressive(0.3, n_step=2000, seed=8)
    assert nested_rhat(agreeing) < 1.005
    apart = agreeing.copy()
    apart[2] += 1.0
    assert nested_rhat(apart) > 1.05


def test_nested_rhat_does_not_mistake_dependent_walkers_for_agreement():
    """Walkers of one ensemble that move together: plain R-hat over walkers is blind, nested R-hat is not."""
    rng = np.random.default_rng(9)
    centre = np.array([-1.5, 0.0, 1.5])[:, None, None]
    ensembles = centre + rng.standard_normal((3, 500, 20))
    alone = [array_stats.rhat(as_chains(ensembles[[index]])) for index in range(3)]
    assert max(alone) < 1.01
    assert nested_rhat(ensembles) > 1.3


def test_nested_rhat_needs_two_ensembles():
    assert np.isnan(nested_rhat(autoregressive(0.0, n_ensemble=1)))
    assert nested_rhat(np.ones((3, 10, 4))) == 1.0


# ------------------------------------------------------------------------------- importance weights


def pareto_weights(shape, n_draw, seed):
    """Log-weights whose tail is a Pareto distribution of a shape: w = u^-shape."""
    return -shape * np.log(np.random.default_rng(seed).uniform(size=n_draw))


@pytest.mark.parametrize("shape", [0.2, 0.5, 0.7, 1.0])
def test_shape_of_a_known_tail(shape):
    """Mean of 20 estimates from 10 000 draws.

    The tail has 300 draws, standard error (1 + k)/sqrt(300) each, and the weak prior of the estimator
    pulls towards 0.5 by at most 0.016.
    """
    found = [pareto_smooth(pareto_weights(shape, 10_000, seed))[1] for seed in range(20)]
    error = (1 + shape) / np.sqrt(300 * 20)
    assert np.mean(found) == pytest.approx(shape, abs=3 * error + 0.02)


def test_light_tails_have_a_small_shape():
    log_weight = np.log(np.random.default_rng(0).uniform(0.5, 1.5, 5000))
    assert pareto_smooth(log_weight)[1] < 0.2


@pytest.mark.parametrize("shape", [0.1, 0.4, 0.9])
@pytest.mark.parametrize("n_draw", [500, 2500, 4000])
def test_smoothing_against_arviz_stats(shape, n_draw):
    """arviz-stats takes log-likelihoods, the negative; its tail may be one draw longer or shorter."""
    log_weight = pareto_weights(shape, n_draw, seed=n_draw)
    expected, expected_shape = array_stats.psislw(-log_weight)
    smoothed, found = pareto_smooth(log_weight)
    assert found == pytest.approx(float(expected_shape), abs=0.02)
    difference = smoothed - smoothed.max() - (expected - expected.max())
    assert np.abs(difference).max() < 0.15
    assert np.median(np.abs(difference)) < 1e-9


def test_smoothing_keeps_the_body_and_never_exceeds_the_largest_weight():
    log_weight = pareto_weights(0.9, 2000, seed=1) + 700.0
    smoothed, _ = pareto_smooth(log_weight)
    assert smoothed.max() <= log_weight.max() + 1e-12
    order = np.argsort(log_weight)
    np.testing.assert_array_equal(smoothed[order[:1800]], log_weight[order[:1800]])
    assert (np.diff(smoothed[order]) >= -1e-12).all()


def test_equal_weights_are_perfect():
    smoothed, shape = pareto_smooth(np.full(100, -3.0))
    assert shape == float("-inf")
    np.testing.assert_array_equal(smoothed, -3.0)


def test_too_few_draws_are_never_trusted():
    assert pareto_smooth(np.zeros(10))[1] == float("inf")


def test_effective_size_of_weights():
    assert effective_weights(np.zeros(50)) == pytest.approx(50.0)
    assert effective_weights(np.array([500.0, -500.0])) == pytest.approx(1.0)
    assert effective_weights(np.log([1.0, 2.0, 3.0])) == pytest.approx(36 / 14)
