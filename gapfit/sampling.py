"""The sampling engine: emcee on one combination, several independent ensembles, run until they agree.

The first ensemble starts from the prior; the second is tempered from the prior to the posterior, makes a
proposal of its own of what it finds there, and knows nothing of the fast engine; the others start from the
modes found. All mix an independence proposal, a Student-t mixture fitted again between rounds, with local
ensemble moves. What the ensembles disagree about is therefore visible.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import emcee
import numpy as np
from numpy.typing import NDArray

from gapfit.diagnostics import (
    LARGEST_RHAT,
    SMALLEST_ESS,
    bulk_ess,
    nested_rhat,
    tail_ess,
)
from gapfit.explore import Explored, Mixture, fit_mixture
from gapfit.posterior import LogPosterior, log_mean_exp
from gapfit.tempering import tempered_particles

__all__ = ["Chains", "SamplingRules", "bridge_evidence", "sample"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class SamplingRules:
    """How long the sampler runs.

    Attributes
    ----------
    n_walker : int
        Walkers of an ensemble.
    n_from_modes : int
        Ensembles that start from the modes.
    warm_up : int
        Steps of the first round. Every round is twice as long as the one before and keeps its own draws
        only; between rounds the proposal is fitted again.
    max_steps : int
        Steps after which the sampler gives up.
    smallest_ess : float
        Effective sample size, of bulk and tails, that it must reach.
    """

    n_walker: int = 200
    n_from_modes: int = 1
    warm_up: int = 50
    max_steps: int = 3200
    smallest_ess: float = SMALLEST_ESS


@dataclass(frozen=True)
class Chains:
    """Draws of the ensembles in the last round; all rounds before are warm-up.

    Attributes
    ----------
    whitened : ndarray[n_ensemble, n_step, n_walker, n_fitted]
    log_posterior : ndarray[n_ensemble, n_step, n_walker]
    rhat : float
        Larger nested R-hat of the first parameter (ln gap, or what carries the curve) and the log
        posterior.
    ess : float
        Smallest bulk or tail effective sample size of the two.
    n_step : int
        Steps of an ensemble, warm-up included.
    reasons : tuple of str
        Why it has not converged; empty when it has.
    """

    whitened: FloatArray
    log_posterior: FloatArray
    rhat: float
    ess: float
    n_step: int
    reasons: tuple[str, ...]

    def flat(self, n_draw: int) -> tuple[FloatArray, FloatArray]:
        """At most so many draws and their log posteriors, evenly thinned."""
        draws = self.whitened.reshape(-1, self.whitened.shape[-1])
        chosen = np.unique(np.linspace(0, len(draws) - 1, min(n_draw, len(draws))).astype(int))
        return draws[chosen], self.log_posterior.reshape(-1)[chosen]


def sample(
    posterior: LogPosterior, explored: Explored, rules: SamplingRules, seed: np.random.SeedSequence
) -> Chains:
    """Sample one combination until the ensembles agree or the limit is reached.

    Parameters
    ----------
    posterior : LogPosterior
    explored : Explored
        What the fast engine found for the same combination.
    rules : SamplingRules
    seed : numpy.random.SeedSequence

    Returns
    -------
    Chains
    """
    seeds = seed.spawn(2 + rules.n_from_modes)
    states: list[Any] = [np.random.RandomState(np.random.MT19937(child)).get_state() for child in seeds]
    rngs = [np.random.default_rng(child.spawn(1)[0]) for child in seeds]
    particles = tempered_particles(posterior, N_PARTICLE, MOVES_A_STAGE, rngs[BLIND])
    positions = [
        rngs[0].standard_normal((rules.n_walker, posterior.n_fitted)),
        particles[rngs[BLIND].choice(N_PARTICLE, rules.n_walker, replace=False)],
        *[_around_modes(explored, rules.n_walker, rng) for rng in rngs[2:]],
    ]
    own = _fitted(particles, rngs[BLIND])
    proposals = [own if index == BLIND else explored.proposal for index in range(len(seeds))]
    n_step, total = rules.warm_up, 0
    while True:
        ensembles = [
            _advance(posterior, proposal, position, state, n_step)
            for proposal, position, state in zip(proposals, positions, states, strict=True)
        ]
        total += n_step
        chains = _summarise(ensembles, total, rules.smallest_ess)
        if total > rules.warm_up and (not chains.reasons or total + 2 * n_step > rules.max_steps):
            return chains
        own, shared = _adapted(chains, rngs)
        proposals = [own if index == BLIND else shared for index in range(len(seeds))]
        positions = [ensemble.get_chain()[-1] for ensemble in ensembles]
        states = [ensemble.random_state for ensemble in ensembles]
        n_step *= 2


def _advance(
    posterior: LogPosterior, proposal: Mixture, position: FloatArray, state: Any, n_step: int
) -> emcee.EnsembleSampler:
    """One ensemble, moved on by some steps from a position and a state of its random numbers."""
    sampler = emcee.EnsembleSampler(*position.shape, posterior, moves=_moves(proposal), vectorize=True)
    sampler.random_state = state
    sampler.run_mcmc(position, n_step, skip_initial_state_check=True)
    return sampler


def _adapted(chains: Chains, rngs: list[np.random.Generator]) -> tuple[Mixture, Mixture]:
    """Proposals fitted to the draws of a round: of the blind ensemble, and of the others."""
    later = chains.whitened[:, chains.whitened.shape[1] // 2 :]
    informed = np.delete(later, BLIND, axis=0).reshape(-1, later.shape[-1])
    return _fitted(later[BLIND].reshape(-1, later.shape[-1]), rngs[BLIND]), _fitted(informed, rngs[0])


def _fitted(draws: FloatArray, rng: np.random.Generator) -> Mixture:
    draws = draws[rng.integers(len(draws), size=ADAPTING_DRAWS)]
    return fit_mixture(draws, np.full(len(draws), 1 / len(draws)), N_COMPONENT, 15, rng).widened()


BLIND = 1
N_PARTICLE = 1000
MOVES_A_STAGE = 4.0
ADAPTING_DRAWS = 4000
N_COMPONENT = 6


def _summarise(samplers: list[emcee.EnsembleSampler], n_step: int, smallest_ess: float) -> Chains:
    whitened = np.stack([sampler.get_chain() for sampler in samplers])
    log_posterior = np.stack([sampler.get_log_prob() for sampler in samplers])
    watched = (whitened[..., 0], log_posterior)
    rhat = max(nested_rhat(quantity) for quantity in watched)
    ess = min(min(bulk_ess(quantity), tail_ess(quantity)) for quantity in watched)
    reasons = []
    if not rhat < LARGEST_RHAT:
        reasons.append(f"nested R-hat {rhat:.3f} is not below {LARGEST_RHAT} after {n_step} steps")
    if not ess >= smallest_ess:
        reasons.append(f"effective sample size {ess:.0f} is below {smallest_ess:.0f} after {n_step} steps")
    return Chains(whitened, log_posterior, rhat, ess, n_step, tuple(reasons))


def _moves(proposal: Mixture) -> list[tuple[emcee.moves.Move, float]]:
    """Independence proposals, mixed with local ensemble moves."""

    def jump(position: FloatArray, random: np.random.RandomState) -> tuple[FloatArray, FloatArray]:
        rng = np.random.default_rng(random.randint(2**31 - 1, size=4))
        offered = rng.permutation(proposal.sample(len(position), rng))
        return offered, proposal.log_density(position) - proposal.log_density(offered)

    local = [(emcee.moves.StretchMove(), 0.1), (emcee.moves.DEMove(), 0.4)]
    return [(emcee.moves.MHMove(jump), 0.5), *local]


def _around_modes(explored: Explored, n_walker: int, rng: np.random.Generator) -> FloatArray:
    """Walkers shared out among the modes, scattered by half of the prior's width."""
    which = np.arange(n_walker) % len(explored.modes)
    scatter = 0.5 * rng.standard_normal((n_walker, explored.modes.shape[1]))
    return np.asarray(explored.modes[which] + scatter)


def bridge_evidence(
    explored: Explored, draws: FloatArray, log_posterior: FloatArray, effective: float
) -> float:
    """Log evidence from sampler draws and proposal draws together.

    Parameters
    ----------
    explored : Explored
        Gives the proposal and its draws.
    draws : ndarray[n_draw, n_fitted]
        Posterior draws of the sampler.
    log_posterior : ndarray[n_draw]
        Their log posterior densities, not normalised.
    effective : float
        Effective size of these draws.

    Returns
    -------
    float

    Notes
    -----
    Meng & Wong, Stat. Sinica 6, 831 (1996), the optimal bridge iterated to its fixed point.
    """
    by_proposal = explored.log_weight + explored.log_evidence + np.log(explored.log_weight.size)
    by_posterior = log_posterior - explored.proposal.log_density(draws)
    n_posterior, n_proposal = min(effective, float(len(draws))), float(by_proposal.size)
    share = n_posterior / (n_posterior + n_proposal)
    estimate = explored.log_evidence
    for _ in range(100):
        upper = -np.logaddexp(np.log(share), np.log(1 - share) + estimate - by_proposal)
        lower = -np.logaddexp(np.log(share) + by_posterior, np.log(1 - share) + estimate)
        previous, estimate = estimate, log_mean_exp(upper) - log_mean_exp(lower)
        if abs(estimate - previous) < 1e-6:
            break
    return estimate
