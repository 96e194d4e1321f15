"""Verdicts: curves with a gap are called activated, curves without one are not, and the cause is named."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

from gapfit.averaging import AveragingRules, CombinationDraws, draw_members
from gapfit.fit import FitSettings, fit_temperature_series
from gapfit.mechanisms import (
    SLOT,
    activation,
    efros_shklovskii,
    mott,
    parse_combination,
    power_mean,
)
from gapfit.posterior import make_problem, one_window
from gapfit.units import VON_KLITZING_OHM
from gapfit.verdict import judge, predictive_p, rises_on_cooling

FEW = tuple(
    map(
        parse_combination,
        ("activation", "activation + leak", "activation + es", "es", "mott", "constant", "power law"),
    )
)

SOME = tuple(map(parse_combination, ("activation", "activation + leak", "es", "constant")))


def fast(series, combinations=FEW, **changes):
    settings = FitSettings(engine="fast", combinations=combinations, seed=1)
    return fit_temperature_series(series, replace(settings, **changes))


# ----------------------------------------------------------------------------------- curves with a gap


@pytest.fixture(scope="module")
def truly_activated(simulate_readings):
    """Eight series with gap, prefactor and leak drawn at random."""
    rng = np.random.default_rng(7)
    fits = []
    for seed in range(8):
        gap, prefactor = (
            rng.uniform(2.0, 8.0),
            VON_KLITZING_OHM * np.exp(rng.uniform(np.log(0.1), np.log(1.5))),
        )
        leak = rng.uniform(0.0, 3.0)
        series = simulate_readings(lambda t, g=gap, a=prefactor, c=leak: activation(t, g, a) + c, seed=seed)
        fits.append((gap, fast(series, SOME)))
    return fits


def test_true_gaps_are_called_activated(truly_activated):
    """At most one of eight may be left unresolved, none may be denied."""
    names = [fit.verdict for _, fit in truly_activated]
    assert names.count("activated") >= 7
    assert set(names) <= {"activated", "unresolved"}


def test_true_gaps_lie_in_their_intervals(truly_activated):
    """At least six of eight 95 % intervals hold: fewer has a chance of 0.6 % (binomial)."""
    assert stats.binom(8, 0.95).cdf(5) < 0.006
    assert sum(gap in fit.gap.interval(0.95) for gap, fit in truly_activated) >= 6


def test_right_fits_are_not_surprising(truly_activated):
    """Predictive p of eight right fits: their median lies where that of uniform numbers would (0.1 %)."""
    p = [fit.verdict_record.predictive_p for _, fit in truly_activated]
    assert np.median(p) > stats.beta(4.5, 4.5).ppf(1e-3)
    assert min(p) > 0.01 / 8


# -------------------------------------------------------------------------------- curves without a gap


@pytest.mark.parametrize(
    ("truth", "cause"),
    [
        (lambda t: efros_shklovskii(t, 14.0, 200.0), "masked by hopping or leak"),
        (lambda t: mott(t, 60.0, 400.0), None),
        (lambda t: efros_shklovskii(t, 6.0, 100.0) + 4.0, None),
        (lambda t: 300.0 + 0 * t, "no minimum"),
        (lambda t: 40 * t**0.7, "no minimum"),
        (lambda t: 30.0 + 3 * t, None),
    ],
    ids=["hopping", "Mott hopping", "leaking hopping", "flat", "power law", "leak and drift"],
)
def test_curves_without_a_gap_are_not_called_activated(simulate_readings, truth, cause):
    record = fast(simulate_readings(truth, seed=2)).verdict_record
    assert record.name in ("no activated regime", "unresolved")
    assert record.p_activated < 0.5
    assert record.cause.startswith(cause or "")
    assert record.cause
    assert record.cause in record.sentence


def test_a_leak_that_masks_the_gap_bounds_it_from_below(simulate_readings):
    """True gap 8 K under a leak that all but the warmest readings sit on."""
    fit = fast(simulate_readings(lambda t: activation(t, 8.0, 20_000.0) + 400.0, seed=5))
    record = fit.verdict_record
    assert record.name in ("no activated regime", "unresolved")
    assert "masked by hopping or leak" in record.cause
    assert 1.0 < record.gap_lower95_K < 8.0
    assert f"above {record.gap_lower95_K:.3g} K" in record.sentence


def judged_rows(series, text, gaps, prefactor, **coordinates):
    """Verdict on draws of given gaps and one prefactor."""
    problem = make_problem(series, one_window(series))
    combination = parse_combination(text)
    rows = np.repeat(combination.base[None], len(gaps), axis=0)
    rows[:, SLOT["gap_K"]] = np.log(gaps)
    rows[:, SLOT["activated"]] = np.log(prefactor) - gaps / (2 * problem.reference.high_K)
    for name, number in coordinates.items():
        rows[:, SLOT[name]] = number
    part = CombinationDraws(combination, rows, np.full(len(gaps), 1 / len(gaps)), 0.0)
    draws = draw_members(problem, [part], AveragingRules(), np.random.default_rng(0), len(gaps))
    return judge(problem, draws, AveragingRules())


def test_limit_comes_from_draws_whose_activation_is_too_small_to_see(simulate_readings):
    """Every draw is masked, so none is activated; the limit is the 5 % point of their gaps."""
    series = simulate_readings(lambda t: 400 + 0 * t, seed=1, error_source="trace")
    gaps = np.linspace(6.0, 9.0, 1000)
    record = judged_rows(series, "activation + leak", gaps, 5000.0, leak=np.log(400.0))
    assert record.p_activated == 0.0
    assert record.gap_lower95_K == pytest.approx(np.quantile(gaps, 0.05), rel=1e-3)


def test_a_prefactor_too_small_bounds_nothing(simulate_readings):
    series = simulate_readings(lambda t: activation(t, 3.0, 100.0), seed=1)
    record = judged_rows(series, "activation", np.linspace(2.9, 3.1, 1000), 100.0)
    assert record.name == "no activated regime"
    assert np.isnan(record.gap_lower95_K)


def test_an_activated_curve_has_no_limit(truly_activated):
    record = truly_activated[0][1].verdict_record
    assert np.isnan(record.gap_lower95_K)
    assert np.isnan(record.gap_upper95_K)
    assert record.cause == ""


def test_an_insulating_curve(simulate_readings):
    fit = fast(simulate_readings(lambda t: 100 / t, seed=1))
    assert fit.verdict == "insulating"
    assert fit.verdict_record.cause == "reading rises on cooling"
    assert fit.gap.draws.size == 0
    assert np.isnan(fit.gap.median)


@pytest.mark.parametrize(
    ("truth", "rises"),
    [
        (lambda t: 100 / t, True),
        (lambda t: 100 + 0 * t, False),
        (lambda t: 100 - 4 * np.log(t), False),
        (lambda t: activation(t, 4.0, 5000.0), False),
    ],
    ids=["insulator", "constant", "less than a fifth", "activated"],
)
def test_rise_on_cooling(simulate_readings, truth, rises):
    assert rises_on_cooling(simulate_readings(truth, seed=1)) is rises


def test_a_rise_within_the_noise_is_none(simulate_readings):
    series = simulate_readings(lambda t: 2 - 0.3 * np.log(t), seed=1, floor=5.0)
    assert not rises_on_cooling(series)


# --------------------------------------------------------------------------------------- inconsistency


def wavy(temperature):
    return activation(temperature, 4.0, 5000.0) * (1 + 0.3 * np.sin(9 * np.log(temperature)))


def test_a_curve_that_nothing_describes_is_inconsistent(simulate_readings):
    """Waves of 30 % at stated errors of 1 %, all readings kept."""
    fit = fast(simulate_readings(wavy, seed=1), window=(0.1, 3.0))
    assert fit.verdict == "inconsistent"
    assert fit.verdict_record.predictive_p < 0.01
    assert "not to be trusted" in fit.verdict_record.sentence


def test_errors_taken_from_the_trace_are_inflated_instead(simulate_readings):
    fit = fast(simulate_readings(wavy, seed=1, error_source="trace"), window=(0.1, 3.0))
    assert fit.verdict != "inconsistent"
    assert "errors_inflated" in fit.flags


def test_predictive_p_of_draws_at_the_truth(simulate_readings):
    """With all draws at the true curve it is the chi-squared probability of the noise itself."""
    series = simulate_readings(lambda t: activation(t, 4.0, 5000.0), seed=9)
    problem = make_problem(series, one_window(series))
    combination = parse_combination("activation")
    row = combination.base.copy()
    row[SLOT["gap_K"]] = np.log(4.0)
    row[SLOT["activated"]] = np.log(activation(problem.reference.high_K, 4.0, 5000.0))
    part = CombinationDraws(combination, row[None], np.ones(1), 0.0)
    draws = draw_members(problem, [part], AveragingRules(), np.random.default_rng(0), 100)
    squares = np.sum(((series.value - activation(series.temperature, 4.0, 5000.0)) / series.error) ** 2)
    assert predictive_p(problem, draws) == pytest.approx(stats.chi2(14).sf(squares), rel=1e-6)


def test_predictive_p_takes_the_stated_errors_whatever_the_inflation(simulate_readings):
    """Errors stated three times too small: nothing fits at f = 1, though f = 3 would."""
    series = simulate_readings(lambda t: activation(t, 4.0, 5000.0), seed=3, relative=0.03, floor=0.9)
    hopeful = replace(series, error=series.error / 3)
    fit = fast(hopeful, window=(0.1, 3.0))
    assert fit.verdict_record.predictive_p < 0.01
    assert 2.0 < fit.marginal("inflation").median < 5.0


# ------------------------------------------------------------------------------- prefactor and geometry


def test_prefactor_criterion_tells_hopping_from_activation_where_it_may(simulate_readings):
    """A line of 2 % of the natural prefactor: judged with known geometry, flagged as not judged without."""
    truth = lambda t: activation(t, 3.0, 0.01 * VON_KLITZING_OHM)  # noqa: E731
    known = fast(simulate_readings(truth, seed=4, floor=0.03), FEW[:1])
    unknown = fast(simulate_readings(truth, seed=4, floor=0.03, geometry_known=False), FEW[:1])
    assert known.verdict == "no activated regime"
    assert "prefactor" in known.verdict_record.cause
    assert "prefactor_not_judged" not in known.flags
    assert unknown.verdict == "activated"
    assert "prefactor_not_judged" in unknown.flags


def test_few_readings_are_the_cause_where_there_are_few(simulate_readings):
    series = simulate_readings(lambda t: power_mean(activation(t, 4.0, 200.0), 150.0, 1.0), seed=1, n_point=4)
    record = fast(series, FEW[:4]).verdict_record
    assert record.name != "activated"
    assert record.cause == "too few points"
