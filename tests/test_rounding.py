"""Rounding by the rule of the Particle Data Group."""

from __future__ import annotations

from decimal import Decimal

import pytest
from hypothesis import given
from hypothesis import strategies as st

from gapfit.errors import InputError
from gapfit.rounding import error_place, round_interval, round_limit, round_number, round_value

NAN = float("nan")


@pytest.mark.parametrize(
    ("value", "error", "text"),
    [
        # Review of Particle Physics, introduction, section 5.3: the two examples printed there
        (0.827, 0.119, "0.83 ± 0.12"),
        (0.827, 0.367, "0.8 ± 0.4"),
        # the edges of the rule of the same section: 100-354, 355-949, 950-999
        (5.0, 0.100, "5.00 ± 0.10"),
        (5.0, 0.354, "5.00 ± 0.35"),
        (5.0, 0.3549, "5.00 ± 0.35"),
        (5.0, 0.355, "5.0 ± 0.4"),
        (5.0, 0.949, "5.0 ± 0.9"),
        (5.0, 0.950, "5.0 ± 1.0"),
        (5.0, 0.999, "5.0 ± 1.0"),
        (5.0, 9.6, "5 ± 10"),
        # the same in other decades (worked by hand)
        (0.054321, 0.00321, "0.0543 ± 0.0032"),
        (25812.0, 300.0, "25810 ± 300"),
        (380.2, 41.0, "380 ± 40"),
        (-0.004, 0.02, "−0.004 ± 0.020"),
        (-0.0001, 0.02, "0.000 ± 0.020"),
        (1.234e-5, 2.2e-7, "(1.234 ± 0.022) × 10⁻⁵"),
        (123456789.0, 1.5e6, "(1.235 ± 0.015) × 10⁸"),
    ],
)
def test_value_with_error(value: float, error: float, text: str) -> None:
    assert round_value(value, error).text == text


def test_smaller_of_two_errors_sets_the_place() -> None:
    rounded = round_value(5.931, 0.461, 0.2249)
    assert rounded.text == "5.93 +0.46 −0.22"
    assert rounded.latex == "$5.93^{+0.46}_{-0.22}$"
    assert "<sup>+0.46</sup>" in rounded.html
    assert "<sub>−0.22</sub>" in rounded.html


def test_errors_that_round_alike_are_printed_once() -> None:
    assert round_value(5.931, 0.2249, 0.2241).text == "5.93 ± 0.22"


def test_one_sided_error_of_zero_sets_no_place() -> None:
    assert round_value(5.931, 0.2, 0.0).text == "5.93 +0.20 −0.00"
    assert round_value(5.931, 0.0).text == "5.931 ± 0"


def test_power_of_ten_in_all_forms() -> None:
    rounded = round_value(1.234e-5, 2.2e-7)
    assert rounded.latex == r"$(1.234 \pm 0.022) \times 10^{-5}$"
    assert rounded.html == "(1.234 ± 0.022) × 10<sup>−5</sup>"


def test_interval_takes_the_place_of_its_half_width() -> None:
    interval = round_interval(5.7123, 6.1534)
    assert interval.text == "5.71 to 6.15"
    assert interval.latex == "$[5.71, 6.15]$"
    assert round_interval(-0.12, 1.3).html == "−0.1 to 1.3"


def test_limits_never_claim_more_than_the_number() -> None:
    assert round_limit(">", 2.199).text == "> 2.1"
    assert round_limit("<", 2.101).text == "< 2.2"
    assert round_limit(">", 2.199).html == "&gt; 2.1"
    assert round_limit("<", 2.101).latex == "$< 2.2$"


def test_missing_numbers_are_shown_as_missing() -> None:
    forms = (round_value(NAN, NAN), round_interval(NAN, 1.0), round_limit(">", NAN))
    assert {form.text for form in forms} == {"–"}
    assert {form.latex for form in forms} == {"--"}
    assert round_number(NAN) == "–"


def test_plain_numbers() -> None:
    assert round_number(999.6) == "1000"
    assert round_number(0.00012345) == "1.23 × 10⁻⁴"
    assert round_number(-12.9) == "−12.9"
    assert round_number(0.0) == "0"


@pytest.mark.parametrize("error", [0.0, -1.0, NAN, float("inf")])
def test_place_needs_a_positive_error(error: float) -> None:
    with pytest.raises(InputError, match="above zero"):
        error_place(error)


def test_wrong_input_is_refused() -> None:
    with pytest.raises(InputError, match="not negative"):
        round_value(1.0, -0.1)
    with pytest.raises(InputError, match="'>' or '<'"):
        round_limit("=", 1.0)
    with pytest.raises(InputError, match="above zero"):
        round_interval(2.0, 1.0)


@given(st.floats(-1e9, 1e9), st.floats(1e-9, 1e9))
def test_rounding_moves_a_value_by_a_seventh_of_its_error_at_most(value: float, error: float) -> None:
    rounded = round_value(value, error)
    printed = Decimal(rounded.value).scaleb(rounded.power)
    # one digit kept: at worst half a unit of an error of 3.55 units; two digits: half a unit of at least 9.5
    assert abs(printed - Decimal(repr(value))) <= Decimal("0.1409") * Decimal(repr(error))
    kept = Decimal(rounded.above).scaleb(rounded.power)
    assert abs(kept - Decimal(repr(error))) <= Decimal("0.1409") * Decimal(repr(error))


@given(st.floats(1e-9, 1e9), st.integers(-3, 3))
def test_rounding_does_not_depend_on_the_decade(error: float, decades: int) -> None:
    shifted = float(Decimal(repr(error)).scaleb(decades))
    assert error_place(shifted) == error_place(error) + decades
