"""Filling factors and the table of composite-fermion sequences."""

from __future__ import annotations

from fractions import Fraction
from math import gcd

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import constants

from gapfit.errors import FillingError, InputError
from gapfit.hall import (
    HOSTS,
    density_from_filling,
    effective_field,
    field_at_filling,
    filling_factor,
    filling_label,
    fractions_up_to,
    host,
    parse_filling,
    plateau_resistance,
    sequence_members,
)
from gapfit.units import cyclotron_energy

LARGEST_DENOMINATOR = 21


def fractions_between(low: int, high: int) -> list[Fraction]:
    return [
        Fraction(p, q)
        for q in range(2, LARGEST_DENOMINATOR + 1)
        for p in range(low * q + 1, high * q)
        if gcd(p, q) == 1
    ]


def ratios(filling: Fraction, base_level: int = 0) -> set[tuple[int, Fraction]]:
    """Flux and effective-field ratio of every sequence that the table names."""
    return {(item.flux, item.field_ratio) for item in sequence_members(filling, base_level)}


# --------------------------------------- effective fields, by formulas that know nothing of the table


def test_electron_sequences_follow_the_mean_field_identity():
    """B_eff = B (1 - 2 nu) at nu = p/(2p+-1), B (1 - 4 nu) at nu = p/(4p+-1); no other member below 1."""
    steps = range(1, LARGEST_DENOMINATOR)
    members = {
        flux: {Fraction(p, flux * p + sign) for p in steps for sign in (1, -1)} - {Fraction(1)}
        for flux in (2, 4)
    }
    for nu in fractions_between(0, 1):
        expected = {(flux, 1 - flux * nu) for flux in (2, 4) if nu in members[flux]}
        if nu > Fraction(1, 2) and 1 - nu in members[4]:
            expected.add((4, 1 - 4 * (1 - nu)))
        assert ratios(nu) == expected, nu


def test_holes_of_the_second_spin_branch():
    """abs(B_eff) = B abs(2 nu - 3) for 1 < nu < 2 with 2 - nu = p/(2p+-1)."""
    members = {Fraction(p, 2 * p + sign) for p in range(1, LARGEST_DENOMINATOR) for sign in (1, -1)}
    for nu in fractions_between(1, 2):
        found = sequence_members(nu)
        assert bool(found) == (2 - nu in members), nu
        for item in found:
            assert abs(item.field_ratio) == abs(2 * nu - 3) == Fraction(1, nu.denominator)


@pytest.mark.parametrize(
    ("text", "ratio"),
    [
        ("5/3", "1/3"),
        ("4/3", "1/3"),
        ("8/5", "1/5"),
        ("7/5", "1/5"),
        ("10/7", "1/7"),
    ],
)
def test_listed_holes(text, ratio):
    assert abs(Fraction(effective_field(Fraction(text), 1.0)).limit_denominator(100)) == Fraction(ratio)


@pytest.mark.parametrize(
    ("text", "ratio"), [("4/5", "1/5"), ("5/7", "-1/7"), ("7/9", "1/9"), ("8/11", "-1/11")]
)
def test_listed_four_flux_holes(text, ratio):
    (member,) = sequence_members(Fraction(text))
    assert (member.sequence[:2], member.flux, member.field_ratio) == ("1-", 4, Fraction(ratio))


def test_one_third_belongs_to_two_sequences():
    assert {(item.sequence, item.p) for item in sequence_members(Fraction(1, 3))} == {
        ("p/(2p+1)", 1),
        ("p/(4p-1)", 1),
    }
    assert effective_field(Fraction(1, 3), 14.0) == pytest.approx(14.0 / 3, rel=1e-15)


@pytest.mark.parametrize("text", ["4/11", "5/13", "1/2", "1/4", "5/2", "7/2"])
def test_fractions_of_no_sequence(text):
    assert sequence_members(Fraction(text)) == ()
    assert np.isnan(effective_field(Fraction(text), 5.0))


@pytest.mark.parametrize("number", [-2, -1, 0, 1, 2, 3, 6])
def test_integers_never_belong_to_a_sequence(number):
    assert sequence_members(Fraction(number)) == ()
    assert sequence_members(Fraction(number), base_level=2) == ()


@pytest.mark.parametrize("base_level", [1, 2, 3, 4])
def test_higher_levels_repeat_the_lowest_one(base_level):
    for nu in fractions_between(0, 1):
        assert sequence_members(base_level + nu, base_level) == sequence_members(nu)


def test_hole_fillings_mirror_electron_fillings():
    for nu in fractions_between(0, 2):
        assert sequence_members(-nu) == sequence_members(nu)


@pytest.mark.parametrize(
    ("text", "gap"),
    [
        ("1/3", 10.94537),
        ("2/5", 4.72269),
        ("3/7", 2.64846),
        ("4/9", 1.61134),
        ("5/11", 0.98907),
        ("2/3", 4.72269),
        ("3/5", 2.64846),
        ("4/7", 1.61134),
        ("5/9", 0.98907),
    ],
)
def test_composite_fermion_ladder(text, gap):
    """n = 1.12e11 cm^-2, composite-fermion mass 0.5 m_e, Gamma = 1.5 K (computed from CODATA constants)."""
    nu = Fraction(text)
    field = effective_field(nu, field_at_filling(nu, 1.12e15))
    assert cyclotron_energy(abs(field), 0.5) - 1.5 == pytest.approx(gap, abs=5.0e-6)


# ------------------------------------------------------------------------------- density and filling


def test_density_chain_of_a_student_laboratory():
    """nu = 2 plateau at n = 1.563e15 m^-2 (read in the notes of a student laboratory).

    3.2320 T and R_K/2 = 12906.40 ohm are computed from CODATA constants.
    """
    assert field_at_filling(2, 1.563e15) == pytest.approx(3.2320, abs=5e-5)
    assert plateau_resistance(2) == pytest.approx(12906.40, abs=5e-3)
    assert density_from_filling(2, 3.2320) == pytest.approx(1.563e15, rel=2e-5)


def test_filling_factor_of_field_and_density():
    nu = filling_factor(np.array([1e15, -1e15]), np.array([2.0, 2.0]))
    expected = 1e15 * constants.h / (constants.e * 2.0)
    np.testing.assert_allclose(nu, [expected, -expected], rtol=1e-14)
    assert np.isinf(filling_factor(1e15, 0.0))


@given(st.fractions(Fraction(1, 9), 8, max_denominator=15), st.floats(1e14, 1e16))
def test_field_density_and_filling_agree(nu, density):
    field = field_at_filling(nu, density)
    assert filling_factor(density, field) == pytest.approx(float(nu), rel=1e-12)
    assert density_from_filling(nu, field) == pytest.approx(density, rel=1e-12)
    assert plateau_resistance(nu) == pytest.approx(field / (density * constants.e), rel=1e-12)


def test_fractions_up_to_lists_odd_denominators_and_halves():
    found = fractions_up_to(5, 0.0, 1.0)
    assert found == [Fraction(text) for text in ("1/5", "1/3", "2/5", "1/2", "3/5", "2/3", "4/5", "1")]
    assert fractions_up_to(3, -0.7, -0.3) == [Fraction(-2, 3), Fraction(-1, 2), Fraction(-1, 3)]
    assert Fraction(0) not in fractions_up_to(11, -1.0, 1.0)


# ----------------------------------------------------------------------------------- texts and hosts


@pytest.mark.parametrize(
    ("text", "nu"),
    [
        ("1/3", Fraction(1, 3)),
        (" 2 / 3 ", Fraction(2, 3)),
        ("-4/3", Fraction(-4, 3)),
        ("nu = 5/2", Fraction(5, 2)),
        ("6/9", Fraction(2, 3)),
        ("1", Fraction(1)),
        (3, Fraction(3)),
        (Fraction(2, 7), Fraction(2, 7)),
    ],
)
def test_filling_texts(text, nu):
    assert parse_filling(text) == nu


@pytest.mark.parametrize("text", ["0.333", "1/0", "one third", "", "1/3/5", "1/-3", 0.5])
def test_texts_that_are_no_filling_say_what_to_write(text):
    with pytest.raises(FillingError, match="1/3") as caught:
        parse_filling(text)
    assert str(text) in str(caught.value)


def test_labels_are_read_back():
    for nu in fractions_between(-2, 3):
        assert parse_filling(filling_label(nu)) == nu


def test_hosts_by_name():
    assert host("gaas") is HOSTS["GaAs"]
    assert all(item.permittivity >= 1 for item in HOSTS.values())
    with pytest.raises(InputError, match=r"GaAs.*permittivity"):
        host("unobtainium")
