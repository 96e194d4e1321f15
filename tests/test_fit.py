"""From readings to a gap: the Python interface, reproducibility, pinning, and a first look at coverage."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
from scipy import stats

import gapfit
from gapfit.errors import FillingError, GapfitError, InputError, NotEnoughData
from gapfit.fit import FitSettings, candidates, fit_series, fit_temperature_series
from gapfit.intervals import CredibleInterval, Marginal
from gapfit.mechanisms import COMBINATIONS, activation, parse_combination
from gapfit.straight import straight_line

FEW = ("activation", "activation + leak", "activation + es", "es")
TEMPERATURE = np.geomspace(0.2, 2.0, 14)


def truth(temperature):
    return activation(temperature, 4.0, 5000.0)


@pytest.fixture(scope="module")
def readings(simulate_readings):
    return simulate_readings(truth, seed=31)


@pytest.fixture(scope="module")
def fit(readings):
    return fit_temperature_series(readings, settings())


def settings(mechanisms=FEW, **changes):
    return replace(
        FitSettings(engine="fast", combinations=tuple(map(parse_combination, mechanisms)), seed=3), **changes
    )


# ------------------------------------------------------------------------------------------ interface


def test_one_series_as_arrays(readings):
    """The example of the documentation, on the fast engine."""
    one = gapfit.fit_series(
        readings.temperature,
        readings.value,
        readings.error,
        filling="1/3",
        field_T=13.9,
        seed=1,
        engine="fast",
        mechanisms=FEW,
    )
    assert isinstance(one, gapfit.GapFit)
    assert one.verdict == "activated"
    assert one.gap.median == pytest.approx(4.0, rel=0.03)
    assert 4.0 in one.gap.interval(0.95)
    assert one.filling == Fraction(1, 3)
    assert one.series.field_T == 13.9
    assert list(one.weights.columns) == ["mechanism", "window_low_K", "window_high_K", "weight"]


def test_weights_of_members_sum_to_one_best_first(fit):
    weights = fit.weights
    assert weights["weight"].sum() == pytest.approx(1.0)
    assert (np.diff(weights["weight"]) <= 0).all()
    assert set(weights["mechanism"]) <= set(FEW)
    by_mechanism = weights.groupby("mechanism")["weight"].sum()
    for combination, share in zip(fit.draws.combinations, fit.draws.share, strict=True):
        assert by_mechanism.get(combination.name, 0.0) == pytest.approx(share, abs=2e-3)


def test_best_member_and_window(fit, readings):
    combination, share = fit.best
    assert combination.name == "activation"
    assert share == max(fit.draws.share)
    assert fit.window == (readings.temperature[0], readings.temperature[-1])
    assert fit.probability_of("activation") == pytest.approx(1.0, abs=1e-3)
    leaky = [item.name for item in fit.draws.combinations].index("activation + leak")
    assert fit.probability_of("leak") == pytest.approx(fit.draws.share[leaky])
    assert fit.probability_of("mott") == 0.0


def test_inclusion_of_readings(fit, readings):
    assert fit.inclusion.shape == (readings.n_point,)
    assert ((fit.inclusion >= 0) & (fit.inclusion <= 1)).all()
    assert fit.inclusion.min() > 0.5


def test_prefactor_and_parameters(fit):
    assert 5000.0 in fit.prefactor.interval(0.999)
    assert fit.prefactor.unit == "ohm"
    assert fit.marginal("inflation").interval(0.999).low < 1 < fit.marginal("inflation").interval(0.999).high
    assert fit.marginal("hopping_T0_K").draws.size < fit.draws.window.size


def test_posterior_band_holds_the_true_curve(fit, readings):
    low, high = fit.band(readings.temperature, 0.999)
    assert (low < truth(readings.temperature)).all()
    assert (truth(readings.temperature) < high).all()
    best = fit.curves(readings.temperature, 50, best_only=True)
    assert best.total.shape == (50, readings.n_point)


def test_the_first_draws_are_those_of_the_series_alone(readings, fit):
    """A fit depends on its own series and seed only, not on what was fitted before."""
    fit_temperature_series(replace(readings, filling=Fraction(2, 5)), settings())
    again = fit_temperature_series(readings, settings())
    np.testing.assert_array_equal(again.gap.draws, fit.gap.draws)


def test_default_mechanisms_follow_what_is_known(readings):
    assert candidates(readings, FitSettings()) == COMBINATIONS
    with_flanks = replace(readings, background=3000.0)
    assert len(candidates(with_flanks, FitSettings())) < len(COMBINATIONS)
    chosen = (parse_combination("activation"),)
    assert candidates(with_flanks, FitSettings(combinations=chosen)) == chosen


# --------------------------------------------------------------------------------------- reproducibility


def test_same_seed_same_numbers_other_seed_same_answer(readings, fit):
    other = fit_temperature_series(readings, settings(seed=4))
    assert not np.array_equal(other.gap.draws, fit.gap.draws)
    width = fit.gap.interval(0.68).half_width
    ess = min(fit.diagnostics.ess, other.diagnostics.ess)
    assert other.gap.median == pytest.approx(fit.gap.median, abs=6 * width / np.sqrt(ess))


def test_engines_agree(readings):
    """Medians and ends of the two engines within five Monte-Carlo errors, and the record says so."""
    chosen = ("activation", "activation + leak", "es")
    fast, sampled = (
        fit_temperature_series(readings, settings(chosen, engine=engine)) for engine in ("fast", "mcmc")
    )
    assert sampled.diagnostics.converged
    assert sampled.diagnostics.rhat < 1.01
    assert sampled.diagnostics.engines_agree is True
    assert fast.diagnostics.engines_agree is None
    assert "engines_disagree" not in sampled.flags
    for probability in (0.025, 0.5, 0.975):
        below = np.mean(fast.gap.draws < sampled.gap.quantile(probability))
        error = np.sqrt(
            probability * (1 - probability) * (1 / fast.diagnostics.ess + 1 / sampled.diagnostics.ess)
        )
        assert below == pytest.approx(probability, abs=5 * error)


# ------------------------------------------------------------------------------------------------ pinning


def test_pinned_mechanism_and_window(readings):
    pinned = fit_series(
        readings.temperature,
        readings.value,
        readings.error,
        filling="1/3",
        engine="fast",
        mechanisms=["activation"],
        window=(0.4, 1.5),
    )
    inside = readings.temperature[(readings.temperature >= 0.4) & (readings.temperature <= 1.5)]
    assert "pinned mechanism and window" in pinned.flags
    assert len(pinned.weights) == 1
    assert pinned.window == (inside[0], inside[-1])
    assert pinned.weights["mechanism"][0] == "activation"
    assert 4.0 in pinned.gap.interval(0.99)


def test_pins_are_named_one_by_one(readings):
    assert FitSettings().pinned == ""
    assert FitSettings(window=(0.2, 1.0)).pinned == "window"
    assert settings(("activation",)).pinned == "mechanism"


def test_a_pinned_line_is_surer_than_it_should_be(readings, simulate_readings):
    """On a curve that rolls over, one line through all readings is sure of a wrong gap; an average is not."""
    closed = simulate_readings(lambda t: truth(t) / (1 + truth(t) / 1500.0), seed=8)
    pinned = fit_temperature_series(closed, settings(("activation",), window=(0.1, 3.0)))
    averaged = fit_temperature_series(closed, settings(("activation", "activation + power mean")))
    assert 4.0 not in pinned.gap.interval(0.95)
    assert 4.0 in averaged.gap.interval(0.95)


# ------------------------------------------------------------------------------------------------ coverage


def test_intervals_hold_as_often_as_they_say(simulate_readings):
    """24 pure activations, gaps 2 to 8 K, averaged over windows: at least 19 of the 95 % intervals hold.

    Fewer than 19 of 24 has a chance below 0.1 % (binomial); an interval that holds half of the time
    would pass with a chance below 0.4 %.
    """
    enough = int(stats.binom(24, 0.95).ppf(1e-3))
    assert enough == 19
    assert stats.binom(24, 0.5).sf(enough - 1) < 0.004
    rng = np.random.default_rng(5)
    held = 0
    for seed in range(24):
        gap = rng.uniform(2.0, 8.0)
        series = simulate_readings(lambda t, gap=gap: activation(t, gap, 8000.0), seed=100 + seed)
        one = fit_temperature_series(series, settings(("activation",), seed=seed))
        held += gap in one.gap.interval(0.95)
    assert held >= enough


# ---------------------------------------------------------------------------------------------- thermometer


def test_thermometer_scale_widens_every_gap_once(readings, fit):
    """ln gap gains the variance of the scale: 3 % on top of what the readings leave (8000 draws)."""
    scaled = fit_temperature_series(readings, settings(thermometer_scale_error=0.03))
    plain, wide = (np.var(np.log(item.gap.draws)) for item in (fit, scaled))
    assert wide - plain == pytest.approx(0.03**2, rel=5 * np.sqrt(2 / 8000) + 0.05)
    np.testing.assert_array_equal(scaled.nominal_gap.draws, fit.nominal_gap.draws)
    assert scaled.gap.median == pytest.approx(fit.gap.median, rel=0.003)


def test_thermometer_scale_is_common_to_the_cool_down(readings):
    """Fillings share the draws of the scale, so their ratio is free of it."""
    chosen = settings(("activation",), thermometer_scale_error=0.05)
    first, second = (
        fit_temperature_series(replace(readings, filling=nu), chosen)
        for nu in (Fraction(1, 3), Fraction(2, 5))
    )
    assert np.corrcoef(first.scale, second.scale)[0, 1] > 0.98
    assert np.std(np.log(first.scale / second.scale)) < 0.01


def test_model_floor_is_the_least_uncertainty(simulate_readings):
    """Readings of a millionth leave the floor of 0.3 %."""
    sharp = simulate_readings(truth, seed=1, relative=1e-6, floor=1e-6)
    one = fit_temperature_series(sharp, settings(("activation",)))
    assert np.std(np.log(one.gap.draws)) == pytest.approx(0.003, rel=0.1)


def test_temperature_errors_widen_the_gap(readings):
    vague = replace(readings, temperature_error=0.05 * readings.temperature)
    plain, wide = (
        fit_temperature_series(item, settings(("activation",))).gap.interval(0.68).half_width
        for item in (readings, vague)
    )
    assert wide > 2 * plain


# ---------------------------------------------------------------------------------------------------- flags


def test_flags_say_what_a_reader_must_know(readings):
    one = fit_temperature_series(replace(readings, geometry_known=False), settings(("activation",)))
    assert {"no_temperature_error", "prefactor_not_judged", "pinned mechanism"} <= set(one.flags)
    keep = readings.temperature > 0.3
    cut = fit_temperature_series(readings.without(keep, "too cold"), settings(("activation",)))
    assert "points_excluded" in cut.flags
    assert "points_excluded" not in one.flags


@pytest.mark.parametrize(("factor", "flag"), [(1 / 4, "errors_inflated"), (6.0, "errors_deflated")])
def test_errors_of_the_wrong_size_are_flagged(readings, factor, flag):
    wrong = replace(readings, error=factor * readings.error)
    assert flag in fit_temperature_series(wrong, settings(("activation",))).flags


def test_missing_errors_are_found_by_the_inflation(readings):
    """Without stated errors 2 % is assumed; the truth is 1 %, and the gap still holds."""
    one = fit_series(
        readings.temperature, readings.value, filling="1/3", engine="fast", mechanisms=["activation"]
    )
    assert "errors_assumed" in one.flags
    assert one.marginal("inflation").median < 1
    assert 4.0 in one.gap.interval(0.99)


def test_negative_and_zero_readings_are_fitted(simulate_readings):
    """A gap of 9 K freezes out below the noise; the cold readings scatter about zero and stay."""
    series = simulate_readings(lambda t: activation(t, 9.0, 8000.0), seed=2)
    assert (series.value < 0).sum() >= 2
    one = fit_temperature_series(series, settings(("activation", "activation + leak", "activation + offset")))
    assert one.series.n_point == 14
    assert 9.0 in one.gap.interval(0.95)


# --------------------------------------------------------------------------------------------- bad input


@pytest.mark.parametrize(
    ("changes", "error", "words"),
    [
        ({"engine": "slow"}, InputError, "unknown engine 'slow'; allowed are 'mcmc' and 'fast'"),
        ({"noise": "cauchy"}, InputError, "unknown noise 'cauchy'"),
        ({"mechanisms": ["magic"]}, InputError, "unknown mechanism 'magic'"),
        ({"mechanisms": []}, InputError, "no combination of mechanisms"),
        ({"filling": "a third"}, FillingError, "no filling factor"),
        ({"filling": "1/0"}, FillingError, "denominator zero"),
        ({"window": (1.0, 0.5)}, InputError, "low_K must be below high_K"),
        ({"window": (0.2, 0.21)}, NotEnoughData, "keeps 1 of 14 readings"),
        ({"error": np.ones(3)}, InputError, "3 entries for 14 readings"),
        ({"temperature": 1000 * TEMPERATURE}, InputError, "millikelvins"),
        ({"temperature": np.ones(14)}, NotEnoughData, "1 different"),
        ({"resistivity": np.full(14, np.nan)}, InputError, "reading 1 is nan"),
    ],
)
def test_bad_input_has_one_clear_message(changes, error, words):
    arguments = {"temperature": TEMPERATURE, "resistivity": truth(TEMPERATURE), "filling": "1/3"} | changes
    temperature, resistivity = arguments.pop("temperature"), arguments.pop("resistivity")
    with pytest.raises(error, match=words) as caught:
        fit_series(temperature, resistivity, engine=arguments.pop("engine", "fast"), **arguments)
    assert isinstance(caught.value, GapfitError)
    assert "\n" not in str(caught.value)


# ------------------------------------------------------------------------------- intervals, straight line


def test_intervals_carry_their_probability_and_kind():
    marginal = Marginal("gap", "K", np.arange(1.0, 1002.0))
    interval = marginal.interval(0.9)
    assert (interval.low, interval.high) == pytest.approx((51.0, 951.0))
    assert (interval.probability, interval.kind) == (0.9, "equal-tailed")
    assert interval.half_width == pytest.approx(450.0)
    assert 51.0 in interval
    assert 50.0 not in interval
    assert marginal.median == 501.0


@pytest.mark.parametrize("probability", [0.0, 1.0, 95.0, -0.1])
def test_probabilities_of_intervals_are_checked(probability):
    with pytest.raises(InputError, match="between 0 and 1"):
        Marginal("gap", "K", np.arange(10.0)).interval(probability)


def test_no_draws_no_numbers():
    interval = Marginal("gap", "K", np.empty(0)).interval(0.95)
    assert np.isnan(interval.low)
    assert isinstance(interval, CredibleInterval)


def test_straight_line_reads_the_gap_of_a_straight_line(simulate_readings):
    """Twice the slope; exact on an exact Arrhenius law."""
    line = straight_line(simulate_readings(truth, seed=1, relative=1e-9, floor=1e-9))
    assert line.gap_K == pytest.approx(4.0, rel=1e-6)
    assert line.prefactor == pytest.approx(5000.0, rel=1e-6)
    assert (line.low_K, line.high_K) == pytest.approx((0.2, 2.0))


def test_straight_line_bends_low_where_a_leak_is_left_in(simulate_readings):
    """Practice to compare with: a leak lowers the gap read off a straight line."""
    line = straight_line(simulate_readings(lambda t: truth(t) + 30.0, seed=1, relative=1e-4, floor=1e-3))
    assert line.gap_K < 3.9


def test_no_straight_line_through_noise(simulate_readings):
    assert straight_line(simulate_readings(lambda t: 0 * t, seed=1)) is None
