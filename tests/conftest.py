"""Settings and small fixtures that the tests share."""

from __future__ import annotations

import math
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
    place = [PARAMETERS[slot].name for slot in combination.slots]
    temperature, high, low = series.temperature, problem.reference.high_K, problem.reference.low_K

    inverse = 1 / temperature - 1 / high
    fall, cooler = 1 - np.sqrt(low / temperature), low / temperature
    start, stop, log_weight = windows.low, windows.high, windows.log_weight
    stated = STUDENT_SCALE * np.sqrt(5) * series.error

    def log_likelihood(whitened: FloatArray) -> float:
        x = dict(zip(place, (centre + width * whitened).tolist(), strict=True))
        curve = np.zeros_like(temperature)
        if "activation" in has:
            curve = np.exp(np.minimum(x["activated"] - math.exp(x["gap_K"]) / 2 * inverse, 100.0))
        if "power mean" in has:
            k = math.exp(x["sharpness"])
            curve = (np.maximum(curve, 1e-30) ** -k + math.exp(-k * x["background"])) ** (-1 / k)
        if "es" in has:
            root = math.exp(x["hopping_T0_K"] / 2) / math.sqrt(low)
            curve = curve + np.exp(np.minimum(x["hopping"] + root * fall, 100.0)) * cooler
        if "leak" in has:
            curve = curve + math.exp(x["leak"])
        misfit = (series.value - curve) / (stated * math.exp(x["inflation"]))
        terms = -3.0 * np.log1p(misfit * misfit) - x["inflation"]
        if start.size == 1:
            return float(terms[start[0] : stop[0]].sum())
        summed = np.append(0.0, np.cumsum(terms))
        totals = summed[stop] - summed[start] + log_weight
        largest = totals.max()
        return float(largest + math.log(np.exp(totals - largest).sum()))

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
        """A quarter of the effective number of weights: points next to each other are alike."""
        return float(self.weight.sum() ** 2 / (self.weight**2).sum()) / 4

    def probability_below(self, ln_gap: float) -> float:
        return float(self.weight[self.ln_gap < ln_gap].sum() / self.weight.sum())


def _crossing_over(temperature: FloatArray) -> FloatArray:
    closed = power_mean(activation(temperature, 5.0, 8000.0), 1500.0, 1.3)
    return closed + efros_shklovskii(temperature, 12.0, 20.0)


def _leaky(temperature: FloatArray) -> FloatArray:
    return power_mean(activation(temperature, 3.0, 3000.0), 6000.0, 2.0) + 2.0


# truth, fitted combination, relative noise, noise in ohm, whether windows are summed
CASES: dict[str, tuple[Truth, str, float, float, bool]] = {
    "pure activation": (lambda t: activation(t, 4.0, 5000.0), "activation", 0.01, 0.3, False),
    "activation, hopping and roll-over": (
        _crossing_over, "activation + power mean + es", 0.01, 0.3, False
    ),
    "hopping masks the gap": (
        lambda t: efros_shklovskii(t, 14.0, 200.0), "activation + es", 0.03, 0.5, False
    ),
    "windows of a leaking curve": (_leaky, "activation + leak", 0.03, 0.3, True),
}  # fmt: skip


@pytest.fixture(scope="session", params=CASES)
def judged(request: pytest.FixtureRequest, simulate_readings: Simulate) -> Judged:
    """The fixed cases one by one, each with a run of nested sampling (dynesty)."""
    truth, text, relative, floor, windowed = CASES[request.param]
    series = simulate_readings(truth, seed=4, relative=relative, floor=floor)
    windows = every_window(series.n_point, 3.0) if windowed else one_window(series)
    problem, combination = make_problem(series, windows), parse_combination(text)
    sampler = dynesty.NestedSampler(
        log_likelihood_by_hand(problem, combination),
        ndtri,
        combination.slots.size,
        nlive=100,
        slices=4,
        sample="rslice",
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
