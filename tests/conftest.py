"""Settings and small fixtures that the tests share."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from fractions import Fraction

import dynesty
import numpy as np
import pytest
from hypothesis import settings
from numpy.typing import NDArray
from scipy.special import ndtri

from gapfit.mechanisms import (
    PARAMETERS,
    SLOT,
    Combination,
    activation,
    efros_shklovskii,
    parse_combination,
    power_mean,
)
from gapfit.posterior import (
    STUDENT_SCALE,
    LogPosterior,
    Problem,
    every_window,
    make_problem,
    one_window,
)
from gapfit.series import TemperatureSeries, make_series

FloatArray = NDArray[np.float64]
Truth = Callable[[FloatArray], FloatArray]
Simulate = Callable[..., TemperatureSeries]

# The same examples in every run, and no test by the clock.
settings.register_profile("fixed", derandomize=True, deadline=None, max_examples=60)
settings.load_profile("fixed")


@pytest.fixture(scope="session")
def simulate_readings() -> Simulate:
    """Factory of series: readings of a true curve with normal noise of 1 % and 0.3 ohm."""

    def simulate(
        truth: Truth,
        seed: int,
        *,
        low: float = 0.2,
        high: float = 2.0,
        n_point: int = 14,
        relative: float = 0.01,
        floor: float = 0.3,
        filling: Fraction = Fraction(1, 3),
        **record: object,
    ) -> TemperatureSeries:
        temperature = np.geomspace(low, high, n_point)
        error = np.hypot(relative * truth(temperature), floor)
        value = truth(temperature) + error * np.random.default_rng(seed).standard_normal(n_point)
        return make_series(temperature, value, error, filling=filling, field_T=12.0, **record)

    return simulate


# ------------------------------------------------------------------------- an outside judge: nested sampling


def log_likelihood_by_hand(problem: Problem, combination: Combination) -> Callable[[FloatArray], float]:
    """Window-summed Student-t log-likelihood of one whitened vector, from the bare laws of transport.

    It shares no line with `gapfit.curve` or `gapfit.posterior`; what comes from the problem are readings,
    prior centres and widths, reference temperatures and windows.
    """
    series, windows, has = problem.series, problem.windows, combination.mechanisms
    centre, width = problem.prior.centre[combination.slots], problem.prior.width[combination.slots]
    place = {PARAMETERS[slot].name: index for index, slot in enumerate(combination.slots)}
    temperature, high, low = series.temperature, problem.reference.high_K, problem.reference.low_K

    def log_likelihood(whitened: FloatArray) -> float:
        x = np.clip(centre + width * whitened, -200, 200)
        curve = np.zeros_like(temperature)
        if "activation" in has:
            half = np.exp(x[place["gap_K"]]) / 2
            curve = np.exp(np.clip(x[place["activated"]] - half / temperature + half / high, -300, 100))
        if "power mean" in has:
            curve = power_mean(curve, np.exp(x[place["background"]]), np.exp(x[place["sharpness"]]))
        if "es" in has:
            t0 = np.exp(min(x[place["hopping_T0_K"]], 40.0))
            fall = np.sqrt(t0 / low) - np.sqrt(t0 / temperature)
            curve = curve + np.exp(np.minimum(x[place["hopping"]] + fall, 100)) * low / temperature
        if "leak" in has:
            curve = curve + np.exp(x[place["leak"]])
        inflation = x[place["inflation"]]
        misfit = (series.value - curve) / (series.error * STUDENT_SCALE * np.exp(inflation))
        summed = np.cumsum(np.append(0.0, -3.0 * np.log1p(misfit**2 / 5) - inflation))
        terms = summed[windows.high] - summed[windows.low] + windows.log_weight
        return float(terms.max() + np.log(np.exp(terms - terms.max()).sum()))

    return log_likelihood


@dataclass(frozen=True)
class Judged:
    """A fixed case: the posterior to be found and what nested sampling says about it."""

    posterior: LogPosterior
    log_evidence: float
    log_evidence_error: float
    ln_gap: FloatArray
    weight: FloatArray

    @property
    def ess(self) -> float:
        """A quarter of the effective number of weights: points of one random walk resemble each other."""
        return float(self.weight.sum() ** 2 / (self.weight**2).sum()) / 4

    def probability_below(self, ln_gap: float) -> float:
        return float(self.weight[self.ln_gap < ln_gap].sum() / self.weight.sum())


def _crossing_over(temperature: FloatArray) -> FloatArray:
    closed = power_mean(activation(temperature, 5.0, 8000.0), 1500.0, 1.3)
    return closed + efros_shklovskii(temperature, 12.0, 20.0)


def _leaky(temperature: FloatArray) -> FloatArray:
    return power_mean(activation(temperature, 3.0, 3000.0), 6000.0, 2.0) + 2.0


# truth, fitted combination, relative noise, noise in ohm, whether windows are summed, walks of the judge
CASES: dict[str, tuple[Truth, str, float, float, bool, int]] = {
    "pure activation": (lambda t: activation(t, 4.0, 5000.0), "activation", 0.01, 0.3, False, 15),
    "activation, hopping and roll-over": (
        _crossing_over, "activation + power mean + es", 0.01, 0.3, False, 25
    ),
    "hopping masks the gap": (
        lambda t: efros_shklovskii(t, 14.0, 200.0), "activation + es", 0.03, 0.5, False, 20
    ),
    "windows of a leaking curve": (_leaky, "activation + leak", 0.03, 0.3, True, 15),
}  # fmt: skip


@pytest.fixture(scope="session", params=CASES)
def judged(request: pytest.FixtureRequest, simulate_readings: Simulate) -> Judged:
    """The fixed cases one by one, each with a run of nested sampling (dynesty)."""
    truth, text, relative, floor, windowed, walks = CASES[request.param]
    series = simulate_readings(truth, seed=4, relative=relative, floor=floor)
    windows = every_window(series.n_point, 3.0) if windowed else one_window(series)
    problem, combination = make_problem(series, windows), parse_combination(text)
    sampler = dynesty.NestedSampler(
        log_likelihood_by_hand(problem, combination),
        ndtri,
        combination.slots.size,
        nlive=120,
        walks=walks,
        sample="rwalk",
        rstate=np.random.default_rng(1),
    )
    sampler.run_nested(dlogz=0.1, print_progress=False)
    found = sampler.results
    slot = SLOT["gap_K"]
    first = int(np.flatnonzero(combination.slots == slot)[0])
    ln_gap = problem.prior.centre[slot] + problem.prior.width[slot] * found.samples[:, first]
    weight = np.exp(found.logwt - found.logz[-1])
    evidence, error = float(found.logz[-1]), float(found.logzerr[-1])
    return Judged(LogPosterior(problem, combination), evidence, error, ln_gap, weight)


@pytest.fixture(scope="session")
def judge_likelihood() -> Callable[[Problem, Combination], Callable[[FloatArray], float]]:
    """The likelihood that the judge sees."""
    return log_likelihood_by_hand
