"""The two engines side by side: draws of every combination, and whether the engines agree."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from gapfit.averaging import CombinationDraws
from gapfit.diagnostics import LARGEST_PARETO_K, SMALLEST_ESS, Diagnostics
from gapfit.explore import Explored
from gapfit.posterior import LogPosterior, Problem

__all__ = ["fast_diagnostics", "fast_draws", "sampled_draws"]

FloatArray = NDArray[np.float64]

CARRIES_WEIGHT = 0.15
"""Share of the average from which a combination is sampled; the others keep the draws of the fast engine."""

SMALLEST_FAST_ESS = 400.0
LARGEST_DISAGREEMENT = 4.0
NOTICEABLE_SHIFT = 0.1
"""The engines disagree where a quantile of ln gap differs by more than four Monte-Carlo standard errors, and
by more than this part of the 68 % half-width."""

KEPT_DRAWS = 4000
UNSAFE_SHARE = 0.1
"""Heavy-tailed weights are an alarm where combinations that are not sampled have this share together."""


def fast_draws(problem: Problem, explored: Explored, log_prior: float) -> CombinationDraws:
    """Weighted draws of one combination from the fast engine.

    Parameters
    ----------
    problem : Problem
    explored : Explored
    log_prior : float
        Log prior weight of the combination.

    Returns
    -------
    CombinationDraws
    """
    return CombinationDraws(
        explored.combination,
        problem.prior.coordinates(explored.whitened, explored.combination),
        np.exp(explored.log_weight),
        explored.log_evidence + log_prior,
    )


def _shares(posteriors: Sequence[CombinationDraws]) -> FloatArray:
    log_weight = np.array([posterior.log_weight for posterior in posteriors])
    return np.asarray(np.exp(log_weight - np.logaddexp.reduce(log_weight)))


def _average_ess(share: FloatArray, ess: FloatArray) -> float:
    """Effective sample size of an average whose parts have shares and effective sizes of their own."""
    return float(1 / np.sum(share**2 / ess))


def fast_diagnostics(posteriors: Sequence[CombinationDraws], explored: Sequence[Explored]) -> Diagnostics:
    """Alarms of the fast engine.

    Parameters
    ----------
    posteriors : sequence of CombinationDraws
    explored : sequence of Explored
        The same combinations in the same order.

    Returns
    -------
    Diagnostics
    """
    share = _shares(posteriors)
    worst = max(item.pareto_k for part, item in zip(share, explored, strict=True) if part > CARRIES_WEIGHT)
    ess = _average_ess(share, np.array([item.ess for item in explored]))
    reasons = []
    if worst > LARGEST_PARETO_K:
        reasons.append(f"Pareto k-hat {worst:.2f} of the importance weights is above {LARGEST_PARETO_K}")
    if ess < SMALLEST_FAST_ESS:
        reasons.append(f"effective size {ess:.0f} of the importance sample is below {SMALLEST_FAST_ESS:.0f}")
    return Diagnostics(not reasons, tuple(reasons), float("nan"), ess, worst)


def sampled_draws(
    problem: Problem,
    explored: Sequence[Explored],
    fast: Sequence[CombinationDraws],
    seed: np.random.SeedSequence,
) -> tuple[list[CombinationDraws], Diagnostics]:
    """Sampler draws for every combination that carries weight, those of the fast engine for the others.

    Parameters
    ----------
    problem : Problem
    explored : sequence of Explored
    fast : sequence of CombinationDraws
        The fast engine's draws of the same combinations, in the same order.
    seed : numpy.random.SeedSequence

    Returns
    -------
    posteriors : list of CombinationDraws
    diagnostics : Diagnostics
        R-hat is the worst of all combinations sampled. Each of them must reach the share of the required
        effective size that it has of the average (a tenth at least), so that the average reaches all of it.
    """
    from gapfit.sampling import SamplingRules, bridge_evidence, sample

    share = _shares(fast)
    posteriors, reasons, rhat = list(fast), [], 1.0
    ess = np.array([item.ess for item in explored])
    seeds = seed.spawn(len(explored))
    sampled = share > min(CARRIES_WEIGHT, float(share.max()) / 2)
    for index in map(int, np.flatnonzero(sampled)):
        item = explored[index]
        posterior = LogPosterior(problem, item.combination)
        rules = replace(SamplingRules(), smallest_ess=SMALLEST_ESS * max(0.1, float(share[index])))
        chains = sample(posterior, item, rules, seeds[index])
        points, log_posterior = chains.flat(KEPT_DRAWS)
        evidence = bridge_evidence(item, points, log_posterior, chains.ess)
        posteriors[index] = CombinationDraws(
            item.combination,
            problem.prior.coordinates(points, item.combination),
            np.full(len(points), 1 / len(points)),
            fast[index].log_weight - item.log_evidence + evidence,
        )
        rhat, ess[index] = max(rhat, chains.rhat), chains.ess
        reasons += [f"{item.combination.name}: {reason}" for reason in chains.reasons]
    disagreement, shift = _disagreement(fast, posteriors, explored, ess)
    agree = disagreement < LARGEST_DISAGREEMENT or shift < NOTICEABLE_SHIFT
    unsafe = [
        (part, item.pareto_k)
        for item, taken, part in zip(explored, sampled, share, strict=True)
        if not taken and item.pareto_k > LARGEST_PARETO_K
    ]
    together = sum(part for part, _ in unsafe)
    return posteriors, Diagnostics(
        not reasons,
        tuple(reasons),
        rhat,
        _average_ess(_shares(posteriors), ess),
        max(shape for _, shape in unsafe) if together > UNSAFE_SHARE else float("-inf"),
        agree,
        disagreement,
    )


def _disagreement(
    fast: Sequence[CombinationDraws],
    sampled: Sequence[CombinationDraws],
    explored: Sequence[Explored],
    sampled_ess: FloatArray,
) -> tuple[float, float]:
    """Largest difference of two distributions of ln gap at five quantiles.

    In Monte-Carlo standard errors, and as part of the 68 % half-width.
    """
    gapped = [index for index, item in enumerate(explored) if item.combination.activated]
    if not gapped:
        return 0.0, 0.0
    share = _shares([fast[index] for index in gapped])
    evidence_error = np.array([explored[index].log_evidence_error for index in gapped])
    first = [fast[index] for index in gapped]
    second = [sampled[index] for index in gapped]
    worst, shift = 0.0, 0.0
    width = (_mixture_quantile(second, 0.84) - _mixture_quantile(second, 0.16)) / 2
    for probability in (0.025, 0.16, 0.5, 0.84, 0.975):
        where = _mixture_quantile(second, probability)
        beneath = [posterior.coordinates[:, 0] < where for posterior in first]
        below = np.array([part.probability @ low for part, low in zip(first, beneath, strict=True)])
        total = share @ below
        spread = share * np.hypot(evidence_error, 0.02) * (below - total)
        own = [
            np.sum(part.probability**2 * (low - level) ** 2)
            for part, low, level in zip(first, beneath, below, strict=True)
        ]
        chance = share**2 * (np.array(own) + probability * (1 - probability) / sampled_ess[gapped])
        worst = max(worst, abs(total - probability) / np.sqrt(np.sum(spread**2 + chance)))
        shift = max(shift, abs(_mixture_quantile(first, probability) - where) / max(width, 1e-12))
    return float(worst), float(shift)


def _mixture_quantile(posteriors: Sequence[CombinationDraws], probability: float) -> float:
    share = _shares(posteriors)
    values = np.concatenate([posterior.coordinates[:, 0] for posterior in posteriors])
    weight = np.concatenate(
        [part * posterior.probability for part, posterior in zip(share, posteriors, strict=True)]
    )
    order = np.argsort(values)
    edges = np.cumsum(weight[order])
    return float(values[order][min(int(np.searchsorted(edges, probability * edges[-1])), values.size - 1)])
