"""The temperature series: what is accepted, what is refused and with which words."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from gapfit.errors import InputError, NotEnoughData
from gapfit.hall import plateau_resistance
from gapfit.series import assumed_error, make_series

THIRD = Fraction(1, 3)
T = np.array([0.8, 0.2, 0.4, 0.4])
Y = np.array([30.0, -0.1, 0.0, 1.0])


def series(**changes):
    given_values = {"temperature": T, "value": Y, "error": 0.2, "filling": THIRD} | changes
    return make_series(given_values.pop("temperature"), given_values.pop("value"), **given_values)


def test_readings_are_sorted_and_keep_zero_negative_and_repeated_ones():
    made = series()
    np.testing.assert_array_equal(made.temperature, [0.2, 0.4, 0.4, 0.8])
    np.testing.assert_array_equal(made.value, [-0.1, 0.0, 1.0, 30.0])
    np.testing.assert_array_equal(made.error, np.full(4, 0.2))
    assert made.unit == "ohm"


@given(st.permutations(range(6)))
def test_order_of_readings_does_not_matter(order):
    temperature, value = np.linspace(0.1, 1.0, 6), np.arange(6.0) - 2
    error, drift = np.linspace(1.0, 2.0, 6), np.linspace(0, 0.01, 6)
    index = np.array(order)
    made = make_series(
        temperature[index], value[index], error[index], filling=THIRD, temperature_error=drift[index]
    )
    for found, expected in zip(
        (made.temperature, made.value, made.error, made.temperature_error),
        (temperature, value, error, drift),
        strict=True,
    ):
        np.testing.assert_array_equal(found, expected)


def test_arrays_are_read_only_copies():
    value = Y.copy()
    made = series(value=value)
    value[0] = 99
    assert 99 not in made.value
    with pytest.raises(ValueError, match="read-only"):
        made.temperature[0] = 1.0


def test_missing_errors_are_assumed_and_flagged():
    made = series(error=None)
    np.testing.assert_allclose(made.error, np.hypot(0.02 * made.value, 0.002 * 30.0))
    assert {"errors_assumed", "no_temperature_error"} <= set(made.flags)
    assert made.error_source == "assumed"


def test_stated_temperature_errors_are_not_flagged():
    made = series(temperature_error=0.01)
    assert made.flags == ()
    np.testing.assert_array_equal(made.temperature_error, np.full(4, 0.01))


def test_zero_readings_get_a_positive_assumed_error():
    assert (assumed_error(np.array([0.0, 5.0, -5.0])) > 0).all()


def test_hall_resistance_defaults_to_the_plateau():
    assert series().hall_resistance_ohm == pytest.approx(plateau_resistance(THIRD))
    assert series(filling=-THIRD).hall_resistance_ohm == pytest.approx(plateau_resistance(THIRD))
    assert series(hall_resistance_ohm=7e4).hall_resistance_ohm == 7e4
    assert np.isnan(series(filling=Fraction(0)).hall_resistance_ohm)


def test_total_field_defaults_to_the_perpendicular_one():
    assert series(field_T=12.0).total_field_T == 12.0
    assert series(field_T=12.0, total_field_T=20.0).total_field_T == 20.0


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"temperature": T[:3]}, "3 temperatures for 4 readings"),
        ({"error": np.ones(3)}, "error has 3 entries for 4 readings"),
        ({"temperature_error": np.ones(5)}, "temperature_error has 5 entries"),
        ({"value": [1.0, np.nan, 2.0, 3.0]}, "reading 2 is nan"),
        ({"temperature": [0.1, 0.2, np.inf, 0.3]}, "temperature 3 is inf"),
        ({"temperature": [0.1, 0.2, -0.3, 0.4]}, "temperature 3 is -0.3 K"),
        ({"temperature": [0.0, 0.2, 0.3, 0.4]}, "temperature 1 is 0 K"),
        ({"error": [0.1, 0.1, 0.0, 0.1]}, "error 3 is 0"),
        ({"error": [0.1, np.nan, 0.1, 0.1]}, "error 2 is nan"),
        ({"temperature_error": [0.1, -0.1, 0.0, 0.1]}, "temperature errors"),
        ({"temperature": T * 1000}, "millikelvins"),
        ({"temperature": T * 1000, "filling": Fraction(2)}, "millikelvins"),
    ],
)
def test_bad_input_says_what_and_where(changes, words):
    with pytest.raises(InputError, match=words):
        series(**changes)


def test_integers_may_be_hot():
    """Graphene shows integer states up to room temperature (from memory)."""
    made = make_series([50, 150, 300], [1.0, 2.0, 3.0], 0.1, filling=Fraction(2))
    assert made.temperature[-1] == 300


@pytest.mark.parametrize(
    ("temperature", "words"), [([0.1, 0.1, 0.1], "1 different"), ([0.1, 0.2, 0.1], "2 different")]
)
def test_too_few_temperatures(temperature, words):
    with pytest.raises(NotEnoughData, match=words):
        make_series(temperature, [1.0, 2.0, 3.0], 0.1, filling=THIRD)


def test_no_reading_at_all():
    with pytest.raises(NotEnoughData, match="0 different"):
        make_series([], [], filling=THIRD)


def test_left_out_readings_are_kept_with_their_reason():
    made = series().without(np.array([True, False, True, True]), "sweep too short")
    assert made.n_point == 3
    (gone,) = made.excluded
    assert (gone.temperature, gone.value, gone.error, gone.reason) == (0.4, 0.0, 0.2, "sweep too short")


def test_flags_are_kept_once():
    assert series(temperature_error=0.0).flagged("a", "b", "a").flagged("b", "c").flags == ("a", "b", "c")


@given(arrays(float, 5, elements=st.floats(-1e4, 1e4)))
def test_every_finite_reading_survives(value):
    made = make_series([0.1, 0.2, 0.3, 0.4, 0.5], value, 1.0, filling=THIRD)
    np.testing.assert_array_equal(made.value, value)
