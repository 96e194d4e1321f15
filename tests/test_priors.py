"""Priors at the scale of the data."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from gapfit.mechanisms import COMBINATIONS, PARAMETERS, SLOT, activation, parse_combination
from gapfit.priors import prior_at_data_scale, reference_of
from gapfit.series import make_series

EVERYTHING = parse_combination("activation + roll-over + spread + es + nearest + leak + heating")


@pytest.fixture(scope="module")
def series(simulate_readings):
    return simulate_readings(lambda t: activation(t, 4.0, 5000.0), seed=1)


@pytest.fixture(scope="module")
def prior(series):
    return prior_at_data_scale(series, reference_of(series))


def test_reference_temperatures(series):
    reference = reference_of(series, 0.0, 2.5)
    assert reference.low_K == pytest.approx(0.2)
    assert np.log(reference.high_K / 0.2) == pytest.approx(0.75 * np.log(10.0))
    assert (reference.hopping_power, reference.saturation_exponent) == (0.0, 2.5)


@given(st.sampled_from(COMBINATIONS), st.integers(0, 2**32 - 1))
def test_whitening_is_undone(prior, combination, seed):
    whitened = 3 * np.random.default_rng(seed).standard_normal((7, combination.slots.size))
    full = prior.coordinates(whitened, combination)
    np.testing.assert_allclose(prior.whitened(full, combination), whitened, rtol=1e-10, atol=1e-12)
    rest = np.setdiff1d(np.arange(len(PARAMETERS)), combination.slots)
    np.testing.assert_array_equal(full[:, rest], np.tile(combination.base[rest], (7, 1)))


def test_every_parameter_that_can_be_fitted_has_a_proper_prior(prior):
    assert np.isfinite(prior.centre).all()
    fixed = SLOT["hopping_exponent"]
    assert (np.delete(prior.width, fixed) > 0).all()
    assert prior.width[fixed] == 0


@pytest.mark.parametrize("row", range(len(PARAMETERS) - 1))
def test_table_against_quantiles_of_the_named_distribution(prior, row):
    """2.5, 50 and 97.5 % of log-normal, normal and logit-normal priors, from scipy.stats."""
    entry = prior.table()[row]
    slot = SLOT[entry["name"]]
    centre, width = prior.centre[slot], prior.width[slot]
    probability = np.array([0.025, 0.5, 0.975])
    expected = {
        "log-normal": stats.lognorm(s=width, scale=np.exp(centre)).ppf(probability),
        "normal": stats.norm(centre, width).ppf(probability),
        "logit-normal on (0, 1)": 1 / (1 + np.exp(-stats.norm(centre, width).ppf(probability))),
        "logit-normal on (0, 1/4)": 0.25 / (1 + np.exp(-stats.norm(centre, width).ppf(probability))),
    }[entry["distribution"]]
    np.testing.assert_allclose([entry["low95"], entry["median"], entry["high95"]], expected, rtol=2e-4)


def test_table_of_a_combination_lists_its_parameters_only(prior):
    names = [row["name"] for row in prior.table(parse_combination("activation + es + leak"))]
    assert names == ["gap_K", "activated", "hopping", "hopping_T0_K", "leak", "inflation"]
    assert len(prior.table()) == len(PARAMETERS) - 1


def test_prior_draws_have_the_stated_quantiles(prior):
    """Draws of the whitened prior, as natural values, against the log-normal they claim to follow."""
    combination = parse_combination("activation")
    whitened = np.random.default_rng(0).standard_normal((4000, 3))
    gap = np.exp(prior.coordinates(whitened, combination)[:, SLOT["gap_K"]])
    centre, width = prior.centre[SLOT["gap_K"]], prior.width[SLOT["gap_K"]]
    assert stats.kstest(gap, stats.lognorm(s=width, scale=np.exp(centre)).cdf).pvalue > 0.01


def test_scales_follow_the_units_of_readings_and_temperatures(series):
    """A series in mS instead of ohm, or in mK, has the same prior in those units."""
    other = make_series(series.temperature, 1e-3 * series.value, 1e-3 * series.error, filling=series.filling)
    first = prior_at_data_scale(series, reference_of(series))
    second = prior_at_data_scale(other, reference_of(other))
    sizes = [SLOT[name] for name in ("activated", "background", "hopping", "nearest", "leak", "level")]
    shift = second.centre - first.centre
    np.testing.assert_allclose(shift[sizes], np.log(1e-3), rtol=1e-10)
    others = np.setdiff1d(np.arange(len(PARAMETERS)), sizes)
    np.testing.assert_allclose(shift[others], 0.0, atol=1e-12)
    assert second.width[SLOT["offset"]] == pytest.approx(1e-3 * first.width[SLOT["offset"]])
    colder = replace(series, temperature=series.temperature / 10)
    third = prior_at_data_scale(colder, reference_of(colder))
    energies = [SLOT[name] for name in ("gap_K", "hopping_T0_K", "electron_T0_K")]
    np.testing.assert_allclose((third.centre - first.centre)[energies], -np.log(10), rtol=1e-10)


def test_wide_enough_for_the_gaps_that_a_range_can_show(prior):
    """From the lowest temperature itself to twenty times the highest one: within two deviations."""
    centre, width = prior.centre[SLOT["gap_K"]], prior.width[SLOT["gap_K"]]
    assert abs(np.log(0.2) - centre) < 2 * width
    assert abs(np.log(20 * 2.0) - centre) < 2 * width


def test_negative_readings_leave_a_finite_prior(series):
    value = series.value.copy()
    value[:4] = [-0.5, 0.0, -0.1, 0.2]
    made = prior_at_data_scale(replace(series, value=value), reference_of(series))
    assert np.isfinite(made.centre).all()
    assert EVERYTHING.slots.size == made.whitened(made.centre[None], EVERYTHING).size


def test_known_flanks_set_the_background(series):
    """Unknown, the level lies somewhere above the warmest readings; known, where the sweeps show it."""
    known = replace(series, background=2500.0, background_log_error=0.1, background_slope=0.02)
    reference = reference_of(series)
    wide, narrow = (prior_at_data_scale(item, reference) for item in (series, known))
    slot, slope = SLOT["background"], SLOT["background_slope"]
    assert wide.width[slot] > 1
    assert np.exp(wide.centre[slot]) > series.value[-3:].mean()
    assert narrow.centre[slot] == pytest.approx(np.log(2500.0))
    assert narrow.width[slot] == pytest.approx(0.1)
    assert narrow.centre[slope] == pytest.approx(0.02)
    assert 0 < narrow.width[slope] < wide.width[slope]
    others = np.setdiff1d(np.arange(len(PARAMETERS)), [slot, slope])
    np.testing.assert_array_equal(narrow.centre[others], wide.centre[others])
