"""From posteriors of single combinations to one average: weights of members and their draws.

A member is a combination of mechanisms together with a temperature window. The rules and their numbers
are in `AveragingRules`; they are printed with every result.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from gapfit.curve import log_prefactor
from gapfit.intervals import Marginal
from gapfit.mechanisms import PARAMETERS, SLOT, Combination
from gapfit.posterior import Problem, systematic_resample
from gapfit.series import TemperatureSeries
from gapfit.units import CONDUCTANCE_QUANTUM_S, VON_KLITZING_OHM

__all__ = [
    "AveragingRules",
    "CombinationDraws",
    "MemberDraws",
    "combination_log_prior",
    "draw_members",
    "marginal_gap",
    "prefactor_criterion_used",
    "prefactor_unit",
]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class AveragingRules:
    """Numbers of the average over members; all of them can be set, none of them is tuned to one series.

    Attributes
    ----------
    cut_cost : float
        Cost of a cut reading, in ln evidence.
    nuisance_penalty : float
        Cost of each mechanism beyond the one that carries the curve.
    model_floor : float
        Relative uncertainty of a gap for shapes that no mechanism has, added in quadrature.
    carried_share : float
        Activation must carry more than this share of a reading for the reading to count as activated.
    carried_points : int
        Fewest activated readings.
    carried_decades : float
        Smallest span of the activated contribution over them, in decades.
    smallest_prefactor : float
        Smallest prefactor of activation in units of (e/q)^2/h for sigma_xx, (h/e^2)/p^2 for rho_xx; zero
        switches the criterion off.
    """

    cut_cost: float = 3.0
    nuisance_penalty: float = 1.0
    model_floor: float = 0.003
    carried_share: float = 0.5
    carried_points: int = 4
    carried_decades: float = 0.5
    smallest_prefactor: float = 0.03


def combination_log_prior(combinations: Sequence[Combination], penalty: float) -> FloatArray:
    """Log prior weights: equal mass with and without a gap, within a family a penalty for each nuisance.

    Parameters
    ----------
    combinations : sequence of Combination
    penalty : float
        Cost of a nuisance mechanism in ln evidence.

    Returns
    -------
    ndarray[n_combination]
    """
    log_prior = -penalty * np.array([float(combination.n_nuisance) for combination in combinations])
    gapped = np.array([combination.activated for combination in combinations])
    families = [family for family in (gapped, ~gapped) if family.any()]
    for family in families:
        log_prior[family] -= np.logaddexp.reduce(log_prior[family]) + np.log(len(families))
    return log_prior


@dataclass(frozen=True)
class CombinationDraws:
    """Posterior draws of one combination, with its share of the average.

    Attributes
    ----------
    combination : Combination
    coordinates : ndarray[n_draw, n_parameter]
    probability : ndarray[n_draw]
        Weights of the draws, summing to one.
    log_weight : float
        Evidence and prior of the combination, in ln.
    """

    combination: Combination
    coordinates: FloatArray
    probability: FloatArray
    log_weight: float


@dataclass(frozen=True)
class MemberDraws:
    """Draws of equal weight from the average over members.

    Attributes
    ----------
    combinations : tuple of Combination
    share : ndarray[n_combination]
        Posterior weights of the combinations.
    coordinates : ndarray[n_draw, n_parameter]
    combination : ndarray[n_draw] of int
        Index into `combinations`.
    window : ndarray[n_draw] of int
        Index into the windows of the problem.
    log_likelihood : ndarray[n_draw]
        Window-summed log-likelihood.
    shortfall : ndarray[n_draw] of int
        0 where the draw is activated; else the first criterion that fails: 1 no activation at all, 2 too
        few readings carried, 3 span too short, 4 prefactor too small.
    """

    combinations: tuple[Combination, ...]
    share: FloatArray
    coordinates: FloatArray
    combination: NDArray[np.intp]
    window: NDArray[np.intp]
    log_likelihood: FloatArray
    shortfall: NDArray[np.intp]

    @property
    def activated(self) -> NDArray[np.bool_]:
        """Whether each draw has an activated regime."""
        return np.asarray(self.shortfall == 0)

    def natural(self, name: str) -> FloatArray:
        """Natural values of a parameter, NaN where the combination does not have it.

        Parameters
        ----------
        name : str
            Name of a row of `PARAMETERS`.

        Returns
        -------
        ndarray[n_draw]
        """
        slot = SLOT[name]
        values = PARAMETERS[slot].natural(self.coordinates[:, slot])
        has = np.array([slot in combination.slots for combination in self.combinations])
        return np.where(has[self.combination], values, np.nan)


def prefactor_unit(series: TemperatureSeries) -> float:
    """Natural unit of the prefactor: (e/q)^2/h for sigma_xx, (h/e^2)/p^2 for rho_xx, at nu = p/q.

    Parameters
    ----------
    series : TemperatureSeries

    Returns
    -------
    float, S or ohm
        NaN at zero filling.

    Notes
    -----
    Polyakov & Shklovskii, Phys. Rev. Lett. 73, 1150 (1994); 74, 150 (1995). The form for rho_xx follows
    with rho_xx = sigma_xx rho_xy^2 at the plateau.
    """
    p, q = series.filling.numerator, series.filling.denominator
    if p == 0:
        return float("nan")
    return VON_KLITZING_OHM / p**2 if series.quantity == "rho_xx" else CONDUCTANCE_QUANTUM_S / q**2


def draw_members(
    problem: Problem,
    posteriors: Sequence[CombinationDraws],
    rules: AveragingRules,
    rng: np.random.Generator,
    n_draw: int = 8000,
) -> MemberDraws:
    """Draws of equal weight from the average over combinations and windows, in random order.

    Parameters
    ----------
    problem : Problem
    posteriors : sequence of CombinationDraws
    rules : AveragingRules
    rng : numpy.random.Generator
    n_draw : int
        Number of draws.

    Returns
    -------
    MemberDraws
    """
    log_weight = np.array([posterior.log_weight for posterior in posteriors])
    share = np.exp(log_weight - np.logaddexp.reduce(log_weight))
    weight = np.concatenate(
        [part * posterior.probability for part, posterior in zip(share, posteriors, strict=True)]
    )
    owner = np.repeat(np.arange(len(posteriors)), [posterior.probability.size for posterior in posteriors])
    pool = np.concatenate([posterior.coordinates for posterior in posteriors])
    chosen = rng.permutation(systematic_resample(weight, n_draw, rng))
    coordinates = pool[chosen]
    terms = problem.window_terms(coordinates)
    window = _sample_rows(terms, rng)
    combinations = tuple(posterior.combination for posterior in posteriors)
    gapped = np.array([combination.activated for combination in combinations])[owner[chosen]]
    return MemberDraws(
        combinations,
        share,
        coordinates,
        owner[chosen],
        window,
        np.logaddexp.reduce(terms, axis=1),
        _shortfall(problem, coordinates, window, gapped, rules),
    )


def _sample_rows(terms: FloatArray, rng: np.random.Generator) -> NDArray[np.intp]:
    """One column of every row, with probability proportional to its exponential."""
    edges = np.cumsum(np.exp(terms - terms.max(axis=1, keepdims=True)), axis=1)
    level = rng.uniform(size=len(terms)) * edges[:, -1]
    return np.asarray((edges < level[:, None]).sum(axis=1))


def _shortfall(
    problem: Problem,
    coordinates: FloatArray,
    window: NDArray[np.intp],
    gapped: NDArray[np.bool_],
    rules: AveragingRules,
) -> NDArray[np.intp]:
    """First criterion of an activated regime that a draw fails, zero for none."""
    curve = problem.curve(coordinates)
    active = curve.parts["activation"]
    rest = np.abs(curve.total - active)
    kept = problem.windows.kept[window] > 0
    carried = kept & (active * (1 - rules.carried_share) > rest * rules.carried_share)
    with np.errstate(divide="ignore"):
        height = np.log10(active)
    span = np.where(carried, height, -np.inf).max(axis=1) - np.where(carried, height, np.inf).min(axis=1)
    shortfall = np.zeros(len(coordinates), dtype=np.intp)
    shortfall[~_prefactor_seen(problem, coordinates, rules)] = 4
    shortfall[~(span >= rules.carried_decades)] = 3
    shortfall[carried.sum(axis=1) < min(rules.carried_points, problem.series.n_point)] = 2
    shortfall[~gapped] = 1
    return shortfall


def prefactor_criterion_used(series: TemperatureSeries, rules: AveragingRules) -> bool:
    """Whether the prefactor can be judged: geometry known, filling not zero, criterion not off."""
    return series.geometry_known and rules.smallest_prefactor > 0 and np.isfinite(prefactor_unit(series))


def _prefactor_seen(problem: Problem, coordinates: FloatArray, rules: AveragingRules) -> NDArray[np.bool_]:
    if not prefactor_criterion_used(problem.series, rules):
        return np.ones(len(coordinates), dtype=bool)
    smallest = np.log(rules.smallest_prefactor * prefactor_unit(problem.series))
    return np.asarray(log_prefactor(coordinates, problem.reference) >= smallest)


def marginal_gap(draws: MemberDraws, scale: FloatArray) -> Marginal:
    """Gap of the activated draws, times a common scale (thermometer, model floor).

    Parameters
    ----------
    draws : MemberDraws
    scale : ndarray[n_draw]
        Factors.

    Returns
    -------
    Marginal, K
    """
    chosen = draws.activated
    return Marginal("gap", "K", draws.natural("gap_K")[chosen] * scale[chosen])
