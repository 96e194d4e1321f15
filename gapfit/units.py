"""Physical constants and scales of two-dimensional electrons in a magnetic field.

Energies inside gapfit are temperatures (E / k_B, in kelvin). The conversions to meV and to units of
the Coulomb scale are made at the edge, with the functions of this module. Constants come from
`scipy.constants` (CODATA).
"""

from __future__ import annotations

from typing import TypeVar

import numpy as np
from numpy.typing import NDArray
from scipy.constants import Boltzmann, e, electron_mass, epsilon_0, h, hbar, physical_constants, pi

__all__ = [
    "BOHR_MAGNETON_K_PER_T",
    "CONDUCTANCE_QUANTUM_S",
    "CYCLOTRON_K_PER_T",
    "KELVIN_PER_MEV",
    "VON_KLITZING_OHM",
    "coulomb_scale",
    "cyclotron_energy",
    "dirac_level",
    "hopping_temperature",
    "kelvin_to_mev",
    "landau_level_mixing",
    "localisation_length",
    "magnetic_length",
    "zeeman_energy",
]

FloatArray = NDArray[np.float64]
Value = TypeVar("Value", float, FloatArray)

VON_KLITZING_OHM = h / e**2
"""Von Klitzing constant h/e^2, ohm."""

CONDUCTANCE_QUANTUM_S = e**2 / h
"""Conductance e^2/h (without the spin factor two), siemens."""

KELVIN_PER_MEV = 1e-3 * e / Boltzmann
"""One meV as a temperature, K."""

CYCLOTRON_K_PER_T = hbar * e / (electron_mass * Boltzmann)
"""Cyclotron energy of the free electron mass over k_B, K/T."""

BOHR_MAGNETON_K_PER_T = physical_constants["Bohr magneton"][0] / Boltzmann
"""Bohr magneton over k_B, K/T."""


def kelvin_to_mev(energy_K: Value) -> Value:
    """Energy in meV of an energy in kelvin.

    Parameters
    ----------
    energy_K : float or ndarray, K
        Energy over the Boltzmann constant.

    Returns
    -------
    float or ndarray, meV
    """
    return energy_K / KELVIN_PER_MEV


def magnetic_length(field_T: Value) -> Value:
    """Magnetic length sqrt(hbar / (e B)).

    Parameters
    ----------
    field_T : float or ndarray, T
        Perpendicular field; its sign is ignored.

    Returns
    -------
    float or ndarray, m
    """
    length: Value = np.sqrt(hbar / (e * np.abs(field_T)))
    return length


def coulomb_scale(field_T: Value, permittivity: float) -> Value:
    """Coulomb energy e^2 / (4 pi eps0 eps l_B) over k_B.

    Parameters
    ----------
    field_T : float or ndarray, T
        Perpendicular field.
    permittivity : float
        Relative permittivity of the surroundings.

    Returns
    -------
    float or ndarray, K
    """
    return e**2 / (4 * pi * epsilon_0 * permittivity * Boltzmann) / magnetic_length(field_T)


def cyclotron_energy(field_T: Value, mass: float) -> Value:
    """Cyclotron energy hbar e B / m over k_B.

    Parameters
    ----------
    field_T : float or ndarray, T
        Perpendicular field.
    mass : float
        Effective mass in units of the free electron mass.

    Returns
    -------
    float or ndarray, K
    """
    return CYCLOTRON_K_PER_T * field_T / mass


def zeeman_energy(field_T: Value, g: float) -> Value:
    """Zeeman energy g mu_B B over k_B.

    Parameters
    ----------
    field_T : float or ndarray, T
        Total field.
    g : float
        g factor.

    Returns
    -------
    float or ndarray, K
    """
    return g * BOHR_MAGNETON_K_PER_T * field_T


def dirac_level(index: int, field_T: Value, velocity: float = 1e6) -> Value:
    """Landau level of massless Dirac electrons, sign(N) v_F sqrt(2 e hbar abs(N) B), over k_B.

    Parameters
    ----------
    index : int
        Level index N.
    field_T : float or ndarray, T
        Perpendicular field.
    velocity : float, m/s
        Fermi velocity.

    Returns
    -------
    float or ndarray, K
    """
    scale = np.sign(index) * velocity * np.sqrt(2 * e * hbar * abs(index)) / Boltzmann
    level: Value = scale * np.sqrt(np.abs(field_T))
    return level


def landau_level_mixing(field_T: Value, permittivity: float, mass: float) -> Value:
    """Landau-level mixing parameter: Coulomb scale over cyclotron energy, dimensionless.

    Parameters
    ----------
    field_T : float or ndarray, T
        Perpendicular field.
    permittivity : float
        Relative permittivity.
    mass : float
        Effective mass in units of the free electron mass.

    Returns
    -------
    float or ndarray
    """
    return coulomb_scale(field_T, permittivity) / cyclotron_energy(field_T, mass)


def hopping_temperature(length_m: Value, permittivity: float, constant: float = 6.2) -> Value:
    """Efros-Shklovskii temperature C e^2 / (4 pi eps0 eps k_B xi).

    Parameters
    ----------
    length_m : float or ndarray, m
        Localisation length xi.
    permittivity : float
        Relative permittivity.
    constant : float
        Numerical constant C, 6.2 in two dimensions (from memory, hence an input). It assumes charge e.

    Returns
    -------
    float or ndarray, K
    """
    return constant * e**2 / (4 * pi * epsilon_0 * permittivity * Boltzmann) / length_m


def localisation_length(hopping_temperature_K: Value, permittivity: float, constant: float = 6.2) -> Value:
    """Localisation length of an Efros-Shklovskii temperature, the inverse of `hopping_temperature`.

    Parameters
    ----------
    hopping_temperature_K : float or ndarray, K
        Efros-Shklovskii temperature T0.
    permittivity : float
        Relative permittivity.
    constant : float
        Numerical constant C; it assumes charge e.

    Returns
    -------
    float or ndarray, m
    """
    return constant * e**2 / (4 * pi * epsilon_0 * permittivity * Boltzmann) / hopping_temperature_K
