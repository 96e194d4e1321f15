"""The forward model: resistivity of an invented two-dimensional electron system.

A landscape of quantum Hall states on a background that rises with field. Every state is activated with a
gap that is largest at the exact filling and closes towards the edge of its plateau, carries hopping
beneath, and rolls over into the background once it is hot. The shapes are meant to be richer than any
curve that is fitted, and nothing here knows a fit.

Filling factors are signed: negative for holes.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray
from scipy.constants import pi
from scipy.special import i0

from gapfit.errors import InputError
from gapfit.units import CYCLOTRON_K_PER_T, VON_KLITZING_OHM

__all__ = [
    "HOPPING_POWERS",
    "ROLLOVERS",
    "Background",
    "StateTruth",
    "activated",
    "background",
    "electron_temperature",
    "hopping",
    "ladder_gap",
    "shubnikov_de_haas",
    "temperature_curve",
    "trace",
]

FloatArray = NDArray[np.float64]

HOPPING_POWERS = {"none": 1.0, "efros-shklovskii": 1 / 2, "mott": 1 / 3}
"""Power of T0/T in the exponent of each kind of variable-range hopping in two dimensions."""


def _unbounded(ratio: FloatArray) -> FloatArray:
    return ratio


ROLLOVERS: dict[str, Callable[[FloatArray], FloatArray]] = {
    "exponential": lambda ratio: -np.expm1(-ratio),
    "tanh": np.tanh,
    "none": _unbounded,
}
"""Resistivity over background against its unlimited value over background; none of them a power mean."""


def electron_temperature(temperature: FloatArray, saturation_K: float, exponent: float = 4.0) -> FloatArray:
    """Electron temperature (T^n + T_0^n)^(1/n) of a sample heated by its measuring current.

    Parameters
    ----------
    temperature : ndarray, K
        Temperature of the bath.
    saturation_K : float, K
        Temperature T_0 at which the electrons stay when the bath is cold.
    exponent : float
        Power n of the cooling law, 4 for electrons cooled by phonons of two dimensions.

    Returns
    -------
    ndarray, K
    """
    hot: FloatArray = (temperature**exponent + saturation_K**exponent) ** (1 / exponent)
    return hot


def activated(temperature: FloatArray, gap_K: FloatArray | float, prefactor_ohm: float) -> FloatArray:
    """Activated resistivity rho_0 exp(-Delta / 2T).

    Parameters
    ----------
    temperature : ndarray, K
        Electron temperature.
    gap_K : ndarray or float, K
        Gap Delta, the energy of a separated pair.
    prefactor_ohm : float, ohm
        Prefactor rho_0.

    Returns
    -------
    ndarray, ohm
    """
    return prefactor_ohm * np.exp(-gap_K / (2 * temperature))


def hopping(
    temperature: FloatArray, amplitude_ohm_K: float, hopping_T0_K: FloatArray | float, power: float = 0.5
) -> FloatArray:
    """Variable-range hopping (s/T) exp[-(T0/T)^power].

    Parameters
    ----------
    temperature : ndarray, K
        Electron temperature.
    amplitude_ohm_K : float, ohm K
        Amplitude s.
    hopping_T0_K : ndarray or float, K
        Characteristic temperature.
    power : float
        1/2 in the Coulomb gap (Efros & Shklovskii, J. Phys. C 8, L49 (1975)), 1/3 for Mott hopping in two
        dimensions.

    Returns
    -------
    ndarray, ohm
    """
    return amplitude_ohm_K / temperature * np.exp(-((hopping_T0_K / temperature) ** power))


def ladder_gap(effective_field_T: float, mass: float, broadening_K: float) -> float:
    """Composite-fermion gap hbar e abs(B_eff) / (m k_B) - Gamma.

    Parameters
    ----------
    effective_field_T : float, T
        Effective field of the composite fermions; its sign is ignored.
    mass : float
        Composite-fermion mass in free electron masses.
    broadening_K : float, K
        Level width Gamma.

    Returns
    -------
    float, K
        Negative where the broadening exceeds the level spacing.
    """
    return CYCLOTRON_K_PER_T * abs(effective_field_T) / mass - broadening_K


@dataclass(frozen=True)
class StateTruth:
    """What is true of one quantum Hall state.

    Attributes
    ----------
    filling : Fraction
        Exact filling factor, signed.
    gap_K : float, K
        Gap at the exact filling; zero for a state without one.
    prefactor_ohm : float, ohm
        Prefactor of activation; zero for a state without an activated part.
    hopping : str
        ``"none"``, ``"efros-shklovskii"`` or ``"mott"``.
    hopping_amplitude_ohm_K : float, ohm K
        Amplitude s of (s/T) exp[-(T0/T)^p].
    hopping_T0_K : float, K
        Characteristic temperature of hopping.
    background_ohm : float, ohm
        Resistivity of the flanks at zero temperature, towards which the state rolls over; infinite for
        none.
    background_slope_per_K : float, 1/K
        Relative change of the background with temperature.
    rollover : str
        Key of `ROLLOVERS`.
    leak_ohm : float, ohm
        Constant added to everything else.
    electron_T0_K : float, K
        Saturation of the electron temperature.
    reach_low, reach_high : float
        Distance in filling factor, below and above, at which gap and localisation have gone.
    """

    filling: Fraction
    gap_K: float
    prefactor_ohm: float
    hopping: str = "none"
    hopping_amplitude_ohm_K: float = 0.0
    hopping_T0_K: float = 1.0
    background_ohm: float = float("inf")
    background_slope_per_K: float = 0.0
    rollover: str = "exponential"
    leak_ohm: float = 0.0
    electron_T0_K: float = 0.0
    reach_low: float = 0.02
    reach_high: float = 0.02

    def __post_init__(self) -> None:
        if self.hopping not in HOPPING_POWERS:
            raise InputError(f"hopping {self.hopping!r} is unknown; allowed are {', '.join(HOPPING_POWERS)}")
        if self.rollover not in ROLLOVERS:
            raise InputError(f"roll-over {self.rollover!r} is unknown; allowed are {', '.join(ROLLOVERS)}")
        for name in ("gap_K", "prefactor_ohm", "hopping_amplitude_ohm_K", "leak_ohm", "electron_T0_K"):
            if getattr(self, name) < 0:
                raise InputError(
                    f"{name} = {getattr(self, name)} of filling {self.filling} is negative; give >= 0"
                )
        for name in ("hopping_T0_K", "background_ohm", "reach_low", "reach_high"):
            if not getattr(self, name) > 0:
                raise InputError(
                    f"{name} = {getattr(self, name)} of filling {self.filling} must be above zero"
                )

    @property
    def regime(self) -> str:
        """Contributions in words, such as ``"activated + efros-shklovskii + leak"``."""
        parts = ["activated"] if self.prefactor_ohm > 0 and self.gap_K > 0 else []
        parts += [self.hopping] if self.hopping_amplitude_ohm_K > 0 else []
        parts += ["roll-over"] if np.isfinite(self.background_ohm) and self.rollover != "none" else []
        parts += ["leak"] if parts and self.leak_ohm > 0 else []
        return " + ".join(parts) or "flat"


def _unlimited(temperature: FloatArray, truth: StateTruth, position: FloatArray | float = 0.0) -> FloatArray:
    """Activation plus hopping of a state before it rolls over, ohm.

    Gap and hopping temperature close as (1 - x^2)^2 with the position x across the plateau, and the
    resistivity grows without limit towards its edge, where the background takes over.
    """
    edge = 1 - np.square(position)
    core = edge**2
    hot = electron_temperature(temperature, truth.electron_T0_K)
    thermal = activated(hot, truth.gap_K * core, truth.prefactor_ohm)
    power = HOPPING_POWERS[truth.hopping]
    tail = hopping(hot, truth.hopping_amplitude_ohm_K, truth.hopping_T0_K * core, power)
    unlimited: FloatArray = (thermal + tail) / edge**2
    return unlimited


def temperature_curve(temperature: FloatArray, truth: StateTruth) -> FloatArray:
    """True resistivity of one state at its exact filling.

    Parameters
    ----------
    temperature : ndarray[n_point], K
        Bath temperatures, above zero.
    truth : StateTruth
        The state.

    Returns
    -------
    ndarray[n_point], ohm
    """
    temperature = np.asarray(temperature, dtype=float)
    unlimited = _unlimited(temperature, truth)
    if not np.isfinite(truth.background_ohm):
        return unlimited + truth.leak_ohm
    flank = truth.background_ohm * (1 + truth.background_slope_per_K * temperature)
    return flank * ROLLOVERS[truth.rollover](unlimited / flank) + truth.leak_ohm


@dataclass(frozen=True)
class Background:
    """Resistivity of a sample where no state is condensed.

    Attributes
    ----------
    zero_field_ohm : float, ohm
        Resistivity at zero field.
    rise_ohm, rise_power : float, ohm at one tesla, and power of the field
        Growth with field.
    slope_per_K : float, 1/K
        Relative change with temperature.
    bumps : tuple of (float, float, float)
        Centre in absolute filling factor, relative height (negative for a dip) and width of Gaussian swells.
    insulating_ohm, insulating_K : float, ohm and K
        Height and temperature scale of the insulating ridge at charge neutrality.
    puddles : float
        Filling factor within which electrons and holes coexist around neutrality.
    mass : float
        Cyclotron mass in free electron masses, for the oscillations at low field.
    dingle_K : float, K
        Dingle temperature; infinite for no oscillations.
    """

    zero_field_ohm: float
    rise_ohm: float
    rise_power: float
    slope_per_K: float = 0.0
    bumps: tuple[tuple[float, float, float], ...] = ()
    insulating_ohm: float = 0.0
    insulating_K: float = 0.0
    puddles: float = 0.0
    mass: float = 0.067
    dingle_K: float = float("inf")


def shubnikov_de_haas(
    field_T: FloatArray, temperature: FloatArray | float, mass: float, dingle_K: float
) -> FloatArray:
    """Relative amplitude 4 (X / sinh X) exp(-pi / w_c tau_q) of the oscillations.

    X = 2 pi^2 k_B T / hbar w_c is the temperature over the cyclotron energy.

    Parameters
    ----------
    field_T : ndarray, T
        Perpendicular field; its sign is ignored.
    temperature : ndarray or float, K
        Temperature.
    mass : float
        Cyclotron mass in free electron masses.
    dingle_K : float, K
        Dingle temperature hbar / (2 pi k_B tau_q).

    Returns
    -------
    ndarray
        Zero below 20 mT, where the exponential has long killed it.
    """
    field_T = np.abs(np.asarray(field_T, dtype=float))
    amplitude = np.zeros(np.broadcast_shapes(field_T.shape, np.shape(temperature)))
    seen = np.broadcast_to(field_T > 0.02, amplitude.shape)
    spacing = CYCLOTRON_K_PER_T * np.broadcast_to(field_T, amplitude.shape)[seen] / mass
    thermal = 2 * pi**2 * np.broadcast_to(temperature, amplitude.shape)[seen] / spacing
    x_over_sinh = 2 * thermal * np.exp(-thermal) / -np.expm1(-2 * thermal)
    amplitude[seen] = 4 * x_over_sinh * np.exp(-2 * pi**2 * dingle_K / spacing)
    return amplitude


def background(
    filling: FloatArray, field_T: FloatArray, temperature: FloatArray, shape: Background
) -> FloatArray:
    """Resistivity of the flanks: rise with field, swells, neutrality ridge, low-field oscillations.

    Parameters
    ----------
    filling : ndarray[n_point]
        Filling factor, signed.
    field_T : ndarray[n_point], T
        Perpendicular field.
    temperature : ndarray[n_point], K
        Bath temperature.
    shape : Background
        The parameters.

    Returns
    -------
    ndarray[n_point], ohm
    """
    smooth = shape.zero_field_ohm + shape.rise_ohm * np.abs(field_T) ** shape.rise_power
    smooth = smooth * (1 + shape.slope_per_K * temperature)
    for centre, height, width in shape.bumps:
        smooth = smooth * (1 + height * np.exp(-(((np.abs(filling) - centre) / width) ** 2)))
    ridge = np.exp(shape.insulating_K / (temperature + 0.2 * shape.insulating_K) - (filling / 0.07) ** 2)
    if np.isinf(shape.dingle_K):
        return smooth + shape.insulating_ohm * ridge
    return smooth * _oscillation(filling, field_T, temperature, shape)


def _oscillation(
    filling: FloatArray, field_T: FloatArray, temperature: FloatArray, shape: Background
) -> FloatArray:
    """Spin-degenerate oscillation, faded out where spin-split states take over.

    1 - A cos(pi nu) for small amplitudes A; positive, with sharp peaks, for large ones.
    """
    level = np.minimum(np.abs(filling), 1e4)
    amplitude = shubnikov_de_haas(field_T, temperature, shape.mass, shape.dingle_K) / (
        1 + (3.5 / level) ** 12
    )
    return np.exp(-amplitude * np.cos(pi * level)) / i0(amplitude)


def trace(
    filling: FloatArray,
    field_T: FloatArray,
    temperature: FloatArray,
    states: tuple[StateTruth, ...],
    shape: Background,
) -> tuple[FloatArray, FloatArray]:
    """True resistivities along a sweep.

    Parameters
    ----------
    filling : ndarray[n_point]
        Filling factor along the sweep, signed by carrier.
    field_T : ndarray[n_point], T
        Perpendicular field, signed.
    temperature : ndarray[n_point], K
        Bath temperature along the sweep.
    states : tuple of StateTruth
        The landscape; reaches must not overlap a neighbour's exact filling.
    shape : Background
        The flanks.

    Returns
    -------
    rho_xx : ndarray[n_point], ohm
        Even in the field.
    rho_xy : ndarray[n_point], ohm
        Classical line pulled onto the plateaus h / (nu e^2) by the condensed share of each state; odd in
        the field.
    """
    flank = background(filling, field_T, temperature, shape)
    free = np.ones_like(flank)
    with np.errstate(divide="ignore"):
        hall = 1 / (filling + (shape.puddles**2 / filling if shape.puddles else 0.0))
    for truth in states:
        offset = filling - float(truth.filling)
        position = np.where(offset < 0, offset / truth.reach_low, offset / truth.reach_high)
        near = np.abs(position) < 1
        ratio = _unlimited(temperature[near], truth, position[near]) / flank[near]
        share = ROLLOVERS[truth.rollover](ratio)
        free[near] *= share
        hall[near] += np.clip(1 - share, 0, 1) * (1 / float(truth.filling) - hall[near])
    return flank * free, np.sign(field_T) * VON_KLITZING_OHM * hall
