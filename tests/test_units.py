"""Constants and scales. Expected numbers are printed digits; half a unit of the last digit is allowed."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import constants
from scipy.constants import physical_constants

from gapfit import units
from gapfit.hall import HOSTS


def printed(text: str):
    """Approximation to the digits of a printed number."""
    mantissa, _, exponent = text.partition("e")
    decimals = len(mantissa.partition(".")[2])
    return pytest.approx(float(text), abs=0.5000001 * 10.0 ** (int(exponent or 0) - decimals), rel=0)


def codata(name: str) -> float:
    return float(physical_constants[name][0])


# ------------------------------------------------------------------- CODATA, through scipy.constants


def test_von_klitzing_constant_is_codata():
    assert codata("von Klitzing constant") == pytest.approx(units.VON_KLITZING_OHM, rel=1e-10)
    assert printed("25812.807") == units.VON_KLITZING_OHM


def test_conductance_quantum_is_half_of_codata():
    """CODATA lists 2 e^2/h."""
    assert codata("conductance quantum") / 2 == pytest.approx(units.CONDUCTANCE_QUANTUM_S, rel=1e-9)
    assert printed("3.87405e-5") == units.CONDUCTANCE_QUANTUM_S


def test_kelvin_per_mev_is_codata():
    volt = codata("electron volt-kelvin relationship")
    assert pytest.approx(volt / 1000, rel=1e-9) == units.KELVIN_PER_MEV
    assert units.kelvin_to_mev(volt) == pytest.approx(1000, rel=1e-9)


def test_bohr_magneton_over_boltzmann_is_codata():
    assert codata("Bohr magneton in K/T") == pytest.approx(units.BOHR_MAGNETON_K_PER_T, rel=1e-8)
    assert printed("0.671714") == units.BOHR_MAGNETON_K_PER_T


def test_cyclotron_energy_of_the_free_mass_is_two_bohr_magnetons():
    """hbar e / m_e = 2 mu_B."""
    expected = 2 * codata("Bohr magneton in K/T")
    assert pytest.approx(expected, rel=1e-8) == units.CYCLOTRON_K_PER_T
    assert printed("1.34343") == units.CYCLOTRON_K_PER_T


def test_flux_quantum_sets_the_degeneracy():
    """e/h = 2.41799e10 cm^-2/T, half of the inverse CODATA flux quantum h/2e."""
    per_area = 1 / (2 * codata("mag. flux quantum"))
    assert per_area * 1e-4 == printed("2.41799e10")
    assert 1 / (2 * np.pi * units.magnetic_length(1.0) ** 2) == pytest.approx(per_area, rel=1e-8)


def test_coulomb_scale_from_hartree_and_bohr_radius():
    """e^2/(4 pi eps0 r) is a Hartree at one Bohr radius (CODATA)."""
    radius = codata("Bohr radius")
    field = constants.hbar / (constants.e * radius**2)
    assert units.coulomb_scale(field, 1.0) == pytest.approx(codata("hartree-kelvin relationship"), rel=1e-8)


# ------------------------------------------------- printed scales, computed from the CODATA constants


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (units.magnetic_length(1.0) * 1e9, "25.6556"),
        (units.magnetic_length(4.0) * 2e9, "25.6556"),
        (units.coulomb_scale(1.0, 1.0), "651.32"),
        (units.coulomb_scale(9.0, 12.9) * 12.9 / 3, "651.32"),
        (units.kelvin_to_mev(units.coulomb_scale(1.0, 1.0)), "56.127"),
        (units.cyclotron_energy(1.0, 1.0), "1.34343"),
        (units.cyclotron_energy(10.0, 0.5) / 20, "1.34343"),
        (units.zeeman_energy(1.0, 1.0), "0.671714"),
        (units.zeeman_energy(1.0, 0.44), "0.29555"),
        (units.zeeman_energy(1.0, 7 * 0.44), "2.07"),
        (units.dirac_level(1, 1.0), "421.04"),
        (units.dirac_level(4, 9.0) / 6, "421.04"),
        (units.kelvin_to_mev(units.dirac_level(1, 1.0)), "36.283"),
        (units.landau_level_mixing(1.0, 12.9, 0.067), "2.518"),
        (units.hopping_temperature(100e-9, 12.9), "80.3"),
        (units.hopping_temperature(1.0, 1.0) * 1e4, "1.0360"),
    ],
)
def test_scales(value, text):
    assert value == printed(text)


def test_dirac_level_mirrors_and_scales_with_velocity():
    assert units.dirac_level(-2, 5.0) == -units.dirac_level(2, 5.0)
    assert units.dirac_level(0, 5.0) == 0.0
    assert units.dirac_level(1, 5.0, 5e5) == pytest.approx(units.dirac_level(1, 5.0) / 2, rel=1e-14)
    assert units.dirac_level(1, -5.0) == units.dirac_level(1, 5.0)


def test_scales_take_arrays():
    field = np.array([1.0, 4.0, 9.0])
    np.testing.assert_allclose(units.coulomb_scale(field, 2.0), 651.32 / 2 * np.sqrt(field), rtol=1e-5)
    np.testing.assert_allclose(
        units.landau_level_mixing(field, 12.9, 0.067) * np.sqrt(field), 2.518, rtol=2e-4
    )


# ------------------------------------------------------------------------------ published comparisons


def test_landau_level_mixing_at_five_halves():
    """GaAs, nu = 5/2, n = 5.8e10 cm^-2: 2.57 (computed); Samkharadze 2013, arXiv 1302.1444, prints 2.6."""
    field = 5.8e14 * constants.h / (constants.e * 2.5)
    host = HOSTS["GaAs"]
    mixing = units.landau_level_mixing(field, host.permittivity, host.mass)
    assert mixing == printed("2.57")
    assert mixing == printed("2.6")


@pytest.mark.parametrize(("field", "text"), [(10.0, "151.5"), (20.0, "379.9"), (30.0, "555.2")])
def test_graphene_gap_at_filling_six(field, text):
    """Next level minus this one minus a width of 400 K (width: Giesbers 2007, arXiv 0706.2822).

    The gaps are computed with v_F = 1e6 m/s. At nu = 6 the chemical potential lies between N = 1 and 2.
    """
    gap = units.dirac_level(2, field) - units.dirac_level(1, field) - 400.0
    assert gap == printed(text)


def test_graphene_one_third_gap_against_root_field():
    """nu = 1/3, suspended graphene: 20 K at 14 T, 5.35 K/sqrt(T) (Ghahari 2011, arXiv 1010.1187)."""
    assert 20.0 / np.sqrt(14.0) == printed("5.35")
    suspended = HOSTS["graphene-suspended"].permittivity
    assert 20.0 / units.coulomb_scale(14.0, suspended) == pytest.approx(5.35 / 651.32, rel=1e-3)


# ------------------------------------------------------------------------------------------ relations


@given(st.floats(1e-9, 1e-5), st.floats(1.0, 20.0), st.floats(1.0, 10.0))
def test_localisation_length_inverts_hopping_temperature(length, permittivity, constant):
    temperature = units.hopping_temperature(length, permittivity, constant)
    assert units.localisation_length(temperature, permittivity, constant) == pytest.approx(length, rel=1e-12)


@given(st.floats(0.01, 50.0), st.floats(1.0, 20.0), st.floats(0.01, 2.0))
def test_mixing_is_the_ratio_of_the_scales(field, permittivity, mass):
    ratio = units.coulomb_scale(field, permittivity) / units.cyclotron_energy(field, mass)
    assert units.landau_level_mixing(field, permittivity, mass) == pytest.approx(ratio, rel=1e-12)
