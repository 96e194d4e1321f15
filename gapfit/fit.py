"""Fit one temperature series: the one straight road from readings to a gap with its interval."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from fractions import Fraction
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from gapfit.averaging import (
    AveragingRules,
    MemberDraws,
    combination_log_prior,
    draw_members,
    marginal_gap,
    prefactor_criterion_used,
    prefactor_unit,
)
from gapfit.curve import Curve, evaluate, log_prefactor
from gapfit.diagnostics import LARGEST_PARETO_K, Diagnostics
from gapfit.engines import fast_diagnostics, fast_draws, sampled_draws
from gapfit.errors import InputError
from gapfit.explore import Explored, explore
from gapfit.hall import parse_filling
from gapfit.intervals import Marginal
from gapfit.mechanisms import Combination, combinations_for, parse_combination
from gapfit.posterior import Problem, every_window, make_problem, one_window
from gapfit.series import TemperatureSeries, make_series
from gapfit.straight import StraightLine, straight_line
from gapfit.verdict import Verdict, judge

if TYPE_CHECKING:
    import pandas as pd

__all__ = [
    "FitSettings",
    "GapFit",
    "candidates",
    "fit_series",
    "fit_temperature_series",
]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class FitSettings:
    """How a series is fitted.

    Attributes
    ----------
    engine : {"mcmc", "fast"}
    combinations : tuple of Combination or None
        None takes the default ones for the series, see `gapfit.mechanisms.combinations_for`.
    window : tuple of (float, float) or None
        Pinned window in kelvin; None averages over windows.
    noise : {"student", "gaussian"}
    hopping_power : float
        Power m of the hopping prefactor 1/T^m.
    saturation_exponent : float
        n of the electron temperature.
    saturating : bool
        Whether the electrons are known to stop cooling: every activated combination then includes heating.
    thermometer_scale_error : float
        Relative error of the thermometer common to the cool-down.
    thorough : bool
        False makes the fast engine quicker, with good medians and rough tails, for surveys of many series.
    rules : AveragingRules
    seed : int
    """

    engine: str = "mcmc"
    combinations: tuple[Combination, ...] | None = None
    window: tuple[float, float] | None = None
    noise: str = "student"
    hopping_power: float = 1.0
    saturation_exponent: float = 4.0
    saturating: bool = False
    thermometer_scale_error: float = 0.0
    thorough: bool = True
    rules: AveragingRules = field(default_factory=AveragingRules)
    seed: int = 0

    @property
    def pinned(self) -> str:
        """What the user pinned: ``""``, ``"window"``, ``"mechanism"`` or ``"mechanism and window"``."""
        parts = ["mechanism"] if self.combinations is not None else []
        parts += ["window"] if self.window is not None else []
        return " and ".join(parts)


@dataclass(frozen=True)
class GapFit:
    """Answer for one filling.

    Attributes
    ----------
    series : TemperatureSeries
        The readings as used.
    settings : FitSettings
    problem : Problem
        Reference temperatures, priors and windows.
    draws : MemberDraws
        Equally weighted draws from the average over members.
    scale : ndarray[n_draw]
        Common factor of the gap: thermometer scale (the same draws for all fillings of a cool-down) and
        model floor.
    verdict_record : Verdict
    diagnostics : Diagnostics
    explored : tuple of Explored
        The fast engine's posterior of every combination that matters.
    line : StraightLine or None
        What a straight line would have said.
    flags : tuple of str
    """

    series: TemperatureSeries
    settings: FitSettings
    problem: Problem
    draws: MemberDraws
    scale: FloatArray
    verdict_record: Verdict
    diagnostics: Diagnostics
    explored: tuple[Explored, ...]
    line: StraightLine | None
    flags: tuple[str, ...]

    @property
    def filling(self) -> Fraction:
        """Exact filling factor."""
        return self.series.filling

    @property
    def verdict(self) -> str:
        """``activated``, ``unresolved``, ``no activated regime``, ``insulating`` or ``inconsistent``."""
        return self.verdict_record.name

    @property
    def p_activated(self) -> float:
        """Weight of the members with an activated regime."""
        return self.verdict_record.p_activated

    @property
    def gap(self) -> Marginal:
        """Posterior of the gap in kelvin, thermometer scale and model floor included.

        It is taken from the draws with an activated regime, and empty where there is hardly one.
        """
        if self.draws.activated.sum() < 50:
            return Marginal("gap", "K", np.empty(0))
        return marginal_gap(self.draws, self.scale)

    @property
    def nominal_gap(self) -> Marginal:
        """Posterior of the gap at the nominal thermometer scale and without the model floor."""
        return marginal_gap(self.draws, np.ones_like(self.scale))

    @property
    def prefactor(self) -> Marginal:
        """Posterior of the prefactor at 1/T = 0, ohm or S, of the activated draws."""
        chosen = self.draws.activated
        values = np.exp(log_prefactor(self.draws.coordinates[chosen], self.problem.reference))
        return Marginal("prefactor", self.series.unit, values)

    @property
    def prefactor_unit(self) -> float:
        """(e/q)^2/h for sigma_xx, (h/e^2)/p^2 for rho_xx."""
        return prefactor_unit(self.series)

    def marginal(self, name: str) -> Marginal:
        """Posterior of a parameter among the draws that have it.

        Parameters
        ----------
        name : str
            Name of a row of `gapfit.mechanisms.PARAMETERS`.

        Returns
        -------
        Marginal
        """
        values = self.draws.natural(name)
        return Marginal(name, "", values[np.isfinite(values)])

    def probability_of(self, mechanism: str) -> float:
        """Posterior probability of the combinations that contain a mechanism."""
        has = np.array([mechanism in combination.mechanisms for combination in self.draws.combinations])
        return float(self.draws.share[has].sum()) if has.any() else 0.0

    @cached_property
    def inclusion(self) -> FloatArray:
        """Posterior probability that each reading lies inside the window, ndarray[n_point]."""
        return np.asarray(self.problem.windows.kept[self.draws.window].mean(axis=0))

    @property
    def best(self) -> tuple[Combination, float]:
        """Combination of largest weight, and its weight."""
        index = int(np.argmax(self.draws.share))
        return self.draws.combinations[index], float(self.draws.share[index])

    @property
    def window(self) -> tuple[float, float]:
        """Ends of the window of largest weight, K."""
        index = int(np.bincount(self.draws.window).argmax())
        temperature, windows = self.series.temperature, self.problem.windows
        return float(temperature[windows.low[index]]), float(temperature[windows.high[index] - 1])

    @cached_property
    def weights(self) -> pd.DataFrame:
        """Members with their weights: columns mechanism, window_low_K, window_high_K, weight, best first."""
        import pandas as pd

        n_window = self.problem.windows.n_window
        key = self.draws.combination * n_window + self.draws.window
        member, count = np.unique(key, return_counts=True)
        order = np.argsort(-count, kind="stable")
        combination, window = np.divmod(member[order], n_window)
        temperature, windows = self.series.temperature, self.problem.windows
        return pd.DataFrame(
            {
                "mechanism": [self.draws.combinations[index].name for index in combination],
                "window_low_K": temperature[windows.low[window]],
                "window_high_K": temperature[windows.high[window] - 1],
                "weight": count[order] / self.draws.window.size,
            }
        )

    def curves(self, temperature: ArrayLike, n_draw: int = 800, best_only: bool = False) -> Curve:
        """Curves of some posterior draws; where the verdict is activated, of those with an activated regime.

        Parameters
        ----------
        temperature : array_like[n_temperature], K
        n_draw : int
            Largest number of draws.
        best_only : bool
            Whether to take draws of the combination of largest weight only.

        Returns
        -------
        Curve
            Arrays of shape [n_draw, n_temperature].
        """
        shown = self.draws.activated if self.verdict == "activated" else np.ones(self.scale.size, dtype=bool)
        if best_only:
            best = shown & (self.draws.combination == int(np.argmax(self.draws.share)))
            shown = best if best.any() else shown
        coordinates = self.draws.coordinates[shown]
        chosen = np.unique(np.linspace(0, len(coordinates) - 1, min(n_draw, len(coordinates))).astype(int))
        return evaluate(coordinates[chosen], np.asarray(temperature, float), self.problem.reference)

    def band(self, temperature: ArrayLike, probability: float = 0.95) -> tuple[FloatArray, FloatArray]:
        """Posterior band of the curve, equal-tailed at each temperature.

        Parameters
        ----------
        temperature : array_like[n_temperature], K
        probability : float

        Returns
        -------
        low, high : ndarray[n_temperature], ohm or S
        """
        ends = [(1 - probability) / 2, (1 + probability) / 2]
        low, high = np.quantile(self.curves(temperature).total, ends, axis=0)
        return low, high


def fit_series(
    temperature: ArrayLike,
    resistivity: ArrayLike,
    error: ArrayLike | None = None,
    *,
    filling: str | Fraction,
    field_T: float = float("nan"),
    temperature_error: ArrayLike | None = None,
    engine: str = "mcmc",
    mechanisms: Sequence[str] | None = None,
    window: tuple[float, float] | None = None,
    noise: str = "student",
    seed: int = 0,
    **record: Any,
) -> GapFit:
    """Gap of one series of readings.

    Parameters
    ----------
    temperature : array_like[n_point], K
    resistivity : array_like[n_point], ohm (or S with ``quantity="sigma_xx"``)
        Readings; zero and negative ones are data.
    error : array_like[n_point] or float, optional
        Standard errors of the readings.
    filling : str or Fraction
        Exact filling factor such as ``"1/3"``.
    field_T : float, T
        Perpendicular field.
    temperature_error : array_like[n_point] or float, K, optional
    engine : {"mcmc", "fast"}
    mechanisms : sequence of str, optional
        Combinations such as ``"activation + es"``; the default list otherwise.
    window : (float, float), K, optional
        Pinned window; averaged over windows otherwise.
    noise : {"student", "gaussian"}
    seed : int
    **record
        Other fields of `TemperatureSeries`, such as ``quantity`` or ``sample``.

    Returns
    -------
    GapFit

    Raises
    ------
    InputError, NotEnoughData
        As `make_series`, and for unknown mechanisms, noise or engine.
    """
    series = make_series(
        temperature,
        resistivity,
        error,
        filling=parse_filling(filling),
        temperature_error=temperature_error,
        field_T=field_T,
        **record,
    )
    combinations = None if mechanisms is None else tuple(map(parse_combination, mechanisms))
    settings = FitSettings(engine=engine, combinations=combinations, window=window, noise=noise, seed=seed)
    return fit_temperature_series(series, settings)


def fit_temperature_series(series: TemperatureSeries, settings: FitSettings) -> GapFit:
    """Gap of a checked series.

    Parameters
    ----------
    series : TemperatureSeries
    settings : FitSettings

    Returns
    -------
    GapFit

    Raises
    ------
    InputError
        If the engine is unknown or no combination is given.
    """
    if settings.engine not in ("mcmc", "fast"):
        raise InputError(f"unknown engine {settings.engine!r}; allowed are 'mcmc' and 'fast'")
    combinations = candidates(series, settings)
    if not combinations:
        raise InputError("no combination of mechanisms is given; name at least one, such as 'activation'")
    problem = _problem(series, settings)
    explore_seed, mcmc_seed, draw_seed = _seeds(series, settings)
    log_prior = combination_log_prior(combinations, settings.rules.nuisance_penalty)
    explored = explore(
        problem, combinations, log_prior, np.random.default_rng(explore_seed), settings.thorough
    )
    prior_of = dict(zip(combinations, log_prior, strict=True))
    fast = [fast_draws(problem, item, prior_of[item.combination]) for item in explored]
    posteriors, diagnostics = fast, fast_diagnostics(fast, explored)
    if settings.engine == "mcmc":
        posteriors, diagnostics = sampled_draws(problem, explored, fast, mcmc_seed)
    rng = np.random.default_rng(draw_seed)
    draws = draw_members(problem, posteriors, settings.rules, rng)
    verdict = judge(problem, draws, settings.rules)
    fit = GapFit(
        series,
        settings,
        problem,
        draws,
        _scale(draws, settings, rng),
        verdict,
        diagnostics,
        explored,
        straight_line(series),
        (),
    )
    return replace(fit, flags=_flags(fit))


def candidates(series: TemperatureSeries, settings: FitSettings) -> tuple[Combination, ...]:
    """Combinations that are averaged for a series: the user's, or the default ones.

    Parameters
    ----------
    series : TemperatureSeries
    settings : FitSettings

    Returns
    -------
    tuple of Combination
    """
    if settings.combinations is not None:
        return settings.combinations
    return combinations_for(bool(np.isfinite(series.background)), settings.saturating)


def _problem(series: TemperatureSeries, settings: FitSettings) -> Problem:
    if settings.window is None:
        windows = every_window(series.n_point, settings.rules.cut_cost)
    else:
        windows = one_window(series, *settings.window)
    return make_problem(
        series,
        windows,
        noise=settings.noise,
        hopping_power=settings.hopping_power,
        saturation_exponent=settings.saturation_exponent,
    )


def _seeds(series: TemperatureSeries, settings: FitSettings) -> list[np.random.SeedSequence]:
    """Seeds that depend on the filling and field, not on the order in which series are fitted."""
    field = 0 if np.isnan(series.field_T) else round(abs(series.field_T) * 1e6)
    names = f"{series.contacts}|{series.direction}|{series.drive_current_A}".encode()
    entropy = [
        settings.seed,
        abs(series.filling.numerator),
        series.filling.denominator,
        int(series.filling < 0),
        field,
        int.from_bytes(names[:16].ljust(16, b"\0"), "little"),
    ]
    return np.random.SeedSequence(entropy).spawn(3)


def _scale(draws: MemberDraws, settings: FitSettings, rng: np.random.Generator) -> FloatArray:
    """Thermometer scale, the same draws for every filling of a cool-down, times the model floor."""
    n_draw = draws.window.size
    common = np.random.default_rng(np.random.SeedSequence([settings.seed, 0x7E])).standard_normal(n_draw)
    floor = rng.standard_normal(n_draw)
    return np.asarray(np.exp(settings.thermometer_scale_error * common + settings.rules.model_floor * floor))


def _flags(fit: GapFit) -> tuple[str, ...]:
    """What a reader of the table must know."""
    series, flags = fit.series, list(fit.series.flags)
    inflation = fit.marginal("inflation").interval(0.95)
    if inflation.low > 1:
        flags.append("errors_inflated")
    if inflation.high < 1:
        flags.append("errors_deflated")
    if not prefactor_criterion_used(series, fit.settings.rules):
        flags.append("prefactor_not_judged")
    if fit.settings.pinned:
        flags.append(f"pinned {fit.settings.pinned}")
    if not fit.diagnostics.converged:
        flags.append("not_converged")
    if fit.diagnostics.engines_agree is False:
        flags.append("engines_disagree")
    if fit.diagnostics.pareto_k > LARGEST_PARETO_K:
        flags.append("importance_weights_unsafe")
    if series.excluded:
        flags.append("points_excluded")
    return tuple(dict.fromkeys(flags))
