"""Weights of members, draws from their average, and the criteria of an activated regime one by one."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
from scipy import constants
from scipy.special import softmax

from gapfit.averaging import (
    AveragingRules,
    CombinationDraws,
    MemberDraws,
    combination_log_prior,
    draw_members,
    marginal_gap,
    prefactor_criterion_used,
    prefactor_unit,
)
from gapfit.intervals import Marginal
from gapfit.mechanisms import COMBINATIONS, PARAMETERS, SLOT, activation, parse_combination
from gapfit.posterior import every_window, make_problem, one_window

RULES = AveragingRules()
PURE = parse_combination("activation")
LEAKY = parse_combination("activation + leak")
KLITZING = constants.h / constants.e**2


# ------------------------------------------------------------------------------------ prior weights


@pytest.mark.parametrize("penalty", [0.0, 1.0, 2.5])
def test_families_with_and_without_a_gap_have_equal_prior_mass(penalty):
    weight = np.exp(combination_log_prior(COMBINATIONS, penalty))
    gapped = np.array([combination.activated for combination in COMBINATIONS])
    assert weight.sum() == pytest.approx(1.0)
    assert weight[gapped].sum() == pytest.approx(0.5)


def test_each_nuisance_costs_the_penalty():
    prior = dict(zip(COMBINATIONS, combination_log_prior(COMBINATIONS, 1.5), strict=True))
    plain = prior[PURE]
    for text, count in (("activation + leak", 1), ("activation + roll-over + es + leak + heating", 4)):
        assert plain - prior[parse_combination(text)] == pytest.approx(1.5 * count)


def test_one_family_alone_has_all_the_mass():
    for chosen in ([PURE, LEAKY], [parse_combination("es"), parse_combination("constant")]):
        assert np.exp(combination_log_prior(chosen, 1.0)).sum() == pytest.approx(1.0)


# ------------------------------------------------------------------------------------------- members


@pytest.fixture(scope="module")
def series(simulate_readings):
    return simulate_readings(lambda t: activation(t, 4.0, 5000.0), seed=2)


@pytest.fixture(scope="module")
def problem(series):
    return make_problem(series, every_window(series.n_point, RULES.cut_cost))


def vector(problem, combination, gap=4.0, prefactor=5000.0, **coordinates):
    """One coordinate vector of a gap and a prefactor at 1/T = 0."""
    full = combination.base.copy()
    full[SLOT["gap_K"]] = np.log(gap)
    full[SLOT["activated"]] = np.log(prefactor) - gap / (2 * problem.reference.high_K)
    for name, number in coordinates.items():
        full[SLOT[name]] = number
    return full


def drawn(problem, *parts, rules=RULES, n_draw=2000, seed=0):
    """Draws from combinations given as (combination, coordinate vectors, log weight)."""
    posteriors = []
    for combination, rows, log_weight in parts:
        rows = np.atleast_2d(rows)
        posteriors.append(CombinationDraws(combination, rows, np.full(len(rows), 1 / len(rows)), log_weight))
    return draw_members(problem, posteriors, rules, np.random.default_rng(seed), n_draw)


def test_weights_of_combinations_are_their_share_of_the_evidence(problem):
    draws = drawn(
        problem,
        (PURE, vector(problem, PURE), -10.0),
        (LEAKY, vector(problem, LEAKY, leak=0.0), -10.0 + np.log(3.0)),
        (parse_combination("constant"), parse_combination("constant").base, -50.0),
    )
    assert draws.share.sum() == pytest.approx(1.0)
    np.testing.assert_allclose(draws.share[:2], [0.25, 0.75], rtol=1e-12)
    counts = np.bincount(draws.combination, minlength=3)
    np.testing.assert_allclose(counts, [500, 1500, 0], atol=1)


def test_draws_follow_the_probabilities_within_a_combination(problem):
    rows = np.stack([vector(problem, PURE, gap=gap) for gap in (3.9, 4.0, 4.1)])
    part = CombinationDraws(PURE, rows, np.array([0.2, 0.5, 0.3]), 0.0)
    draws = draw_members(problem, [part], RULES, np.random.default_rng(0), 1000)
    found = [np.mean(np.isclose(draws.natural("gap_K"), gap)) for gap in (3.9, 4.0, 4.1)]
    np.testing.assert_allclose(found, [0.2, 0.5, 0.3], atol=2e-3)


def test_windows_follow_their_own_posterior(problem):
    """Shares of windows among equal draws against the softmax of the window terms, five binomial errors."""
    row = vector(problem, PURE, gap=4.05)
    draws = drawn(problem, (PURE, row, 0.0), n_draw=20_000)
    expected = softmax(problem.window_terms(row[None])[0])
    found = np.bincount(draws.window, minlength=expected.size) / 20_000
    error = np.sqrt(expected * (1 - expected) / 20_000)
    assert (np.abs(found - expected) < 5 * error + 1e-3).all()
    assert draws.log_likelihood[0] == pytest.approx(problem.log_likelihood(row[None])[0], rel=1e-12)


def test_order_of_draws_says_nothing(problem):
    draws = drawn(problem, (PURE, vector(problem, PURE), 0.0), (LEAKY, vector(problem, LEAKY, leak=0.0), 0.0))
    first = draws.combination[:1000]
    assert np.mean(first) == pytest.approx(0.5, abs=5 * np.sqrt(0.25 / 1000))


def test_same_generator_same_draws(problem):
    parts = (PURE, vector(problem, PURE), 0.0), (LEAKY, vector(problem, LEAKY, leak=0.0), 0.0)
    first, again, other = (drawn(problem, *parts, seed=seed) for seed in (1, 1, 2))
    np.testing.assert_array_equal(first.window, again.window)
    np.testing.assert_array_equal(first.combination, again.combination)
    assert not np.array_equal(first.combination, other.combination)


def test_natural_values_are_missing_where_a_combination_has_no_such_parameter(problem):
    draws = drawn(
        problem, (PURE, vector(problem, PURE), 0.0), (LEAKY, vector(problem, LEAKY, leak=np.log(2.0)), 0.0)
    )
    leak = draws.natural("leak")
    assert np.isnan(leak[draws.combination == 0]).all()
    np.testing.assert_allclose(leak[draws.combination == 1], 2.0)


# --------------------------------------------------------- the criteria, each by a constructed example


def whole(problem):
    return replace(problem, windows=one_window(problem.series))


def shortfalls(problem, combination, row, rules=RULES):
    draws = drawn(problem, (combination, row, 0.0), rules=rules, n_draw=50)
    return set(draws.shortfall.tolist())


def test_a_true_decade_of_activation_passes(problem):
    assert shortfalls(whole(problem), PURE, vector(problem, PURE)) == {0}


@pytest.mark.parametrize(("carried", "shortfall"), [(3, 2), (4, 0), (5, 0)])
def test_activation_must_carry_more_than_half_of_four_readings(problem, carried, shortfall):
    """The leak lies between the activated contributions to the readings next to the border."""
    height = np.sort(activation(problem.series.temperature, 12.0, 20_000.0))[::-1]
    leak = np.log(np.sqrt(height[carried - 1] * height[carried]))
    row = vector(problem, LEAKY, gap=12.0, prefactor=20_000.0, leak=leak)
    assert shortfalls(whole(problem), LEAKY, row) == {shortfall}


@pytest.mark.parametrize(("decades", "shortfall"), [(0.45, 3), (0.55, 0)])
def test_activation_must_span_half_a_decade(problem, decades, shortfall):
    temperature = problem.series.temperature
    gap = 2 * decades * np.log(10) / (1 / temperature[0] - 1 / temperature[-1])
    row = vector(problem, PURE, gap=gap, prefactor=5000.0)
    assert shortfalls(whole(problem), PURE, row) == {shortfall}


@pytest.mark.parametrize(("share", "shortfall"), [(0.025, 4), (0.035, 0)])
def test_prefactor_must_be_three_per_cent_of_its_natural_unit(problem, share, shortfall):
    """(h/e^2)/p^2 for rho_xx, here at nu = 1/3."""
    row = vector(problem, PURE, prefactor=share * KLITZING)
    assert shortfalls(whole(problem), PURE, row) == {shortfall}


def test_no_activation_at_all(problem):
    constant = parse_combination("constant")
    row = constant.base.copy()
    row[SLOT["level"]] = np.log(30.0)
    assert shortfalls(whole(problem), constant, row) == {1}


def test_only_readings_inside_the_window_count(problem):
    """Activation carries the five coldest readings only; a window of the other nine sees none of it."""
    row = vector(problem, PURE)
    narrow = replace(problem, windows=one_window(problem.series, 0.0, problem.series.temperature[2]))
    assert shortfalls(narrow, PURE, row) == {2}
    assert shortfalls(replace(problem, windows=one_window(problem.series, 0.5, 2.0)), PURE, row) == {0}


def test_a_closed_activation_counts_with_its_closure(problem):
    """Where the minimum has filled in, the contribution no longer spans a decade."""
    closed = parse_combination("activation + power mean")
    flat = vector(problem, closed, gap=0.3, prefactor=50_000.0, background=np.log(100.0), sharpness=0.0)
    assert shortfalls(whole(problem), closed, flat) == {3}


def test_every_criterion_can_be_set(problem):
    row = vector(problem, PURE, prefactor=0.01 * KLITZING)
    assert shortfalls(whole(problem), PURE, row) == {4}
    assert shortfalls(whole(problem), PURE, row, replace(RULES, smallest_prefactor=0.0)) == {0}
    steep = vector(problem, PURE)
    assert shortfalls(whole(problem), PURE, steep, replace(RULES, carried_decades=10.0)) == {3}
    assert shortfalls(whole(problem), PURE, steep, replace(RULES, carried_points=14)) == {0}


def test_prefactor_is_not_judged_without_geometry(problem):
    row = vector(problem, PURE, prefactor=0.01 * KLITZING)
    unknown = replace(problem, series=replace(problem.series, geometry_known=False))
    assert shortfalls(whole(unknown), PURE, row) == {0}
    assert not prefactor_criterion_used(unknown.series, RULES)
    assert prefactor_criterion_used(problem.series, RULES)
    assert not prefactor_criterion_used(problem.series, replace(RULES, smallest_prefactor=0.0))
    assert not prefactor_criterion_used(replace(problem.series, filling=Fraction(0)), RULES)


@pytest.mark.parametrize(
    ("text", "quantity", "expected"),
    [
        ("1/3", "rho_xx", KLITZING),
        ("2/3", "rho_xx", KLITZING / 4),
        ("-4/3", "rho_xx", KLITZING / 16),
        ("1/3", "sigma_xx", 1 / KLITZING / 9),
        ("2/5", "sigma_xx", 1 / KLITZING / 25),
        ("2", "sigma_xx", 1 / KLITZING),
    ],
)
def test_natural_unit_of_the_prefactor(series, text, quantity, expected):
    """(e/q)^2/h and (h/e^2)/p^2 (Polyakov & Shklovskii, Phys. Rev. Lett. 73, 1150 (1994))."""
    changed = replace(series, filling=Fraction(text), quantity=quantity)
    assert prefactor_unit(changed) == pytest.approx(expected, rel=1e-9)


def test_units_of_both_quantities_agree_on_the_plateau(series):
    """rho_xx = sigma_xx rho_xy^2 with rho_xy = h/(nu e^2)."""
    for text in ("1/3", "2/3", "3/7", "2"):
        nu = Fraction(text)
        sigma = prefactor_unit(replace(series, filling=nu, quantity="sigma_xx"))
        rho = prefactor_unit(replace(series, filling=nu, quantity="rho_xx"))
        assert sigma * (KLITZING / float(nu)) ** 2 == pytest.approx(rho, rel=1e-9)


def test_gap_is_taken_from_activated_draws_and_scaled(problem):
    good, small = vector(problem, PURE, gap=4.0), vector(problem, PURE, gap=4.0, prefactor=100.0)
    draws = drawn(whole(problem), (PURE, np.stack([good, small]), 0.0), n_draw=100)
    scale = np.linspace(0.9, 1.1, 100)
    gap = marginal_gap(draws, scale)
    assert isinstance(gap, Marginal)
    np.testing.assert_allclose(np.sort(gap.draws), np.sort(4.0 * scale[draws.activated]))
    assert draws.activated.sum() == 50


def test_records_have_one_coordinate_a_parameter(problem):
    draws = drawn(problem, (PURE, vector(problem, PURE), 0.0), n_draw=10)
    assert isinstance(draws, MemberDraws)
    assert draws.coordinates.shape == (10, len(PARAMETERS))
