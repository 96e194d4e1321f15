"""The sampling engine: agreement with nested sampling, reproducibility, and honest failure."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from gapfit import sampling as module
from gapfit.diagnostics import nested_rhat
from gapfit.explore import Mixture, explore
from gapfit.mechanisms import SLOT, activation, parse_combination
from gapfit.posterior import LogPosterior, every_window, make_problem, one_window
from gapfit.sampling import Chains, SamplingRules, bridge_evidence, sample

QUICK = SamplingRules(n_walker=64, smallest_ess=800.0)


def explored_alone(posterior, seed=5):
    (found,) = explore(posterior.problem, [posterior.combination], np.zeros(1), np.random.default_rng(seed))
    return found


@pytest.fixture(scope="module")
def simple(simulate_readings):
    series = simulate_readings(lambda t: activation(t, 4.0, 5000.0), seed=21, relative=0.03)
    return LogPosterior(make_problem(series, one_window(series)), parse_combination("activation"))


@pytest.fixture(scope="module")
def simple_explored(simple):
    return explored_alone(simple)


@pytest.fixture(scope="session")
def sampled(judged):
    found = explored_alone(judged.posterior)
    return found, sample(judged.posterior, found, QUICK, np.random.SeedSequence(7))


# ------------------------------------------------------------------------- against nested sampling


def test_sampler_converges_on_the_fixed_cases(sampled):
    _, chains = sampled
    assert chains.reasons == ()
    assert chains.rhat < 1.01
    assert chains.ess >= 800


def test_bridge_evidence_against_nested_sampling(judged, sampled):
    """Three standard errors of nested sampling; 0.1 for the bridge."""
    found, chains = sampled
    draws, log_posterior = chains.flat(4000)
    evidence = bridge_evidence(found, draws, log_posterior, chains.ess)
    assert evidence == pytest.approx(judged.log_evidence, abs=3 * np.hypot(judged.log_evidence_error, 0.1))


def test_engines_agree_on_the_evidence(sampled):
    """The bridge uses posterior draws of the sampler, so it sees what importance sampling has missed."""
    found, chains = sampled
    draws, log_posterior = chains.flat(4000)
    evidence = bridge_evidence(found, draws, log_posterior, chains.ess)
    assert found.log_evidence == pytest.approx(evidence, abs=4 * found.log_evidence_error + 0.1)


@pytest.mark.parametrize("probability", [0.025, 0.5, 0.975])
def test_gap_quantiles_against_nested_sampling(judged, sampled, probability):
    """Probability that the judge gives below the sampler's quantile, within four binomial errors."""
    _, chains = sampled
    draws, _ = chains.flat(20_000)
    slot = SLOT["gap_K"]
    ln_gap = judged.posterior.problem.prior.coordinates(draws, judged.posterior.combination)[:, slot]
    below = judged.probability_below(float(np.quantile(ln_gap, probability)))
    error = np.sqrt(probability * (1 - probability) * (1 / judged.ess + 1 / chains.ess))
    assert below == pytest.approx(probability, abs=4 * error)


# ---------------------------------------------------------------------------------- reproducibility


def test_same_seed_same_bits_other_seed_other_draws(simple, simple_explored):
    rules = SamplingRules(n_walker=24, warm_up=20, max_steps=60, smallest_ess=1.0)
    first, again, other = (
        sample(simple, simple_explored, rules, np.random.SeedSequence(seed)) for seed in (3, 3, 4)
    )
    np.testing.assert_array_equal(first.whitened, again.whitened)
    np.testing.assert_array_equal(first.log_posterior, again.log_posterior)
    assert (first.rhat, first.ess) == (again.rhat, again.ess)
    assert not np.array_equal(first.whitened[:, :5], other.whitened[:, :5])


def test_ensembles_are_independent_of_each_other(simple, simple_explored):
    chains = sample(simple, simple_explored, replace(QUICK, smallest_ess=100.0), np.random.SeedSequence(3))
    for first in range(len(chains.whitened)):
        for second in range(first):
            assert not np.isin(chains.whitened[first, ..., 0], chains.whitened[second, ..., 0]).any()


# -------------------------------------------------------------------------------- honest behaviour


def test_too_few_steps_are_reported(simple, simple_explored):
    hurried = SamplingRules(n_walker=32, warm_up=4, max_steps=12, smallest_ess=2000.0)
    chains = sample(simple, simple_explored, hurried, np.random.SeedSequence(1))
    assert chains.n_step <= 12
    assert any("effective sample size" in reason and "below 2000" in reason for reason in chains.reasons)


def test_a_false_mode_is_reported(simple, simple_explored):
    """An ensemble that sits elsewhere is seen by nested R-hat, however many walkers it has."""
    chains = sample(simple, simple_explored, replace(QUICK, smallest_ess=100.0), np.random.SeedSequence(1))
    moved = chains.whitened.copy()
    moved[0, ..., 0] += 5 * moved[0, ..., 0].std()
    assert nested_rhat(chains.whitened[..., 0]) < 1.01
    assert nested_rhat(moved[..., 0]) > 1.1


def test_the_blind_ensemble_never_sees_the_fast_engine(simple, simple_explored):
    """With a proposal and modes far from the truth, the blind ensemble has the same draws in round one."""
    far = replace(
        simple_explored,
        proposal=Mixture(np.ones(1), np.full((1, 3), 7.0), 0.1 * np.eye(3)[None]),
        modes=np.full((1, 3), 7.0),
    )
    rules = SamplingRules(n_walker=32, warm_up=10, max_steps=0)
    rounds = []
    original = module._advance

    def spying(posterior, proposal, position, state, n_step):
        sampler = original(posterior, proposal, position, state, n_step)
        rounds.append(sampler.get_chain())
        return sampler

    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(module, "_advance", spying)
        for explored in (simple_explored, far):
            sample(simple, explored, rules, np.random.SeedSequence(2))
    n_ensemble = 2 + rules.n_from_modes
    second_run = len(rounds) // 2
    blind = module.BLIND
    np.testing.assert_array_equal(rounds[blind], rounds[second_run + blind])
    others = [index for index in range(n_ensemble) if index != blind]
    assert not any(np.array_equal(rounds[index], rounds[second_run + index]) for index in others)


def test_draws_do_not_depend_on_where_the_fast_engine_looked(simple, simple_explored):
    """A proposal in the wrong place costs steps, not correctness."""
    shifted = replace(
        simple_explored,
        proposal=Mixture(np.ones(1), simple_explored.modes[:1] + 0.5, np.eye(3)[None]),
    )
    good, bad = (
        sample(simple, explored, QUICK, np.random.SeedSequence(5)) for explored in (simple_explored, shifted)
    )
    for probability in (0.025, 0.5, 0.975):
        quantile = np.quantile(good.whitened[..., 0], probability)
        error = np.sqrt(probability * (1 - probability) * (1 / good.ess + 1 / bad.ess))
        assert np.mean(bad.whitened[..., 0] < quantile) == pytest.approx(probability, abs=4 * error)


def test_posterior_of_a_pure_prior_is_the_prior(simulate_readings):
    """Readings with boundless errors say nothing of the gap: its whitened draws are standard normal."""
    series = simulate_readings(lambda t: activation(t, 4.0, 5000.0), seed=1)
    problem = make_problem(series, every_window(14, 3.0))
    vague = replace(problem, series=replace(series, error=np.full(14, 1e60)))
    posterior = LogPosterior(vague, parse_combination("activation + leak"))
    found = explored_alone(posterior)
    chains = sample(posterior, found, QUICK, np.random.SeedSequence(0))
    gap = chains.whitened[..., 0]
    assert np.mean(gap) == pytest.approx(0.0, abs=4 / np.sqrt(chains.ess))
    assert np.std(gap) == pytest.approx(1.0, abs=4 / np.sqrt(2 * chains.ess))


# ------------------------------------------------------------------------------------------- tools


def test_flat_draws_are_thinned_evenly():
    whitened = np.arange(2 * 3 * 4 * 2, dtype=float).reshape(2, 3, 4, 2)
    chains = Chains(whitened, whitened[..., 0], 1.0, 24.0, 3, ())
    draws, log_posterior = chains.flat(6)
    assert draws.shape == (6, 2)
    np.testing.assert_array_equal(draws[:, 0], log_posterior)
    assert draws[0, 0] == 0
    assert draws[-1, 0] == 46
    assert chains.flat(1000)[0].shape == (24, 2)


def test_bridge_evidence_of_a_known_integral(simple, simple_explored):
    """The posterior shifted by ln 7 has an evidence seven times as large, whatever the draws."""
    chains = sample(simple, simple_explored, QUICK, np.random.SeedSequence(9))
    draws, log_posterior = chains.flat(3000)
    plain = bridge_evidence(simple_explored, draws, log_posterior, chains.ess)
    louder = replace(simple_explored, log_evidence=simple_explored.log_evidence + np.log(7.0))
    shifted = bridge_evidence(louder, draws, log_posterior + np.log(7.0), chains.ess)
    assert shifted - plain == pytest.approx(np.log(7.0), abs=1e-5)
    assert plain == pytest.approx(simple_explored.log_evidence, abs=5 * simple_explored.log_evidence_error)
