"""What a measurement makes of the truth: leaks between contacts, drift, lag, correlated noise, digits.

The readings are lock-in voltages at a fixed current. Nothing here knows a fit.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["Instrument", "correlated_noise", "field_seen", "quantise", "temperatures", "voltages"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class Instrument:
    """A measuring line and its faults.

    Attributes
    ----------
    current_A : float, A
        Excitation current.
    aspect : float
        Length over width of the Hall bar: resistance over resistivity.
    hall_into_xx, xx_into_hall : float
        Share of the one resistance seen in the other (contacts out of line).
    offset_V : float, V
        Constant of the lock-in input.
    noise_V, hall_noise_V : float, V
        Standard deviation of the additive noise of the two channels.
    relative_noise : float
        Standard deviation of the noise in proportion to the signal.
    gain_spread : float
        Standard deviation of the gain from sweep to sweep.
    correlation : float, samples
        Lock-in time constant over the time of a sample.
    step_V, hall_step_V : float, V
        Digit of the two channels.
    phase : float, rad
        Phase error, which turns signal into quadrature.
    remanence_T, lag_T : float, T
        Field at zero reading, and lag of the field behind its reading, which turns with the sweep.
    temperature_scale : float
        Thermometer over truth, minus one, common to all sweeps.
    temperature_spread : float
        The same from sweep to sweep (standard deviation).
    temperature_drift : float
        Relative drift of the temperature over a sweep (standard deviation).
    """

    current_A: float
    aspect: float
    hall_into_xx: float
    xx_into_hall: float
    offset_V: float
    noise_V: float
    hall_noise_V: float
    relative_noise: float
    gain_spread: float
    correlation: float
    step_V: float
    hall_step_V: float
    phase: float = 0.0
    remanence_T: float = 0.0
    lag_T: float = 0.0
    temperature_scale: float = 0.0
    temperature_spread: float = 0.0
    temperature_drift: float = 0.0


def correlated_noise(n_point: int, correlation: float, rng: np.random.Generator) -> FloatArray:
    """Gaussian noise of unit variance behind a low-pass filter.

    Parameters
    ----------
    n_point : int
        Number of samples.
    correlation : float, samples
        Time constant; zero gives white noise.
    rng : Generator
        Source of randomness.

    Returns
    -------
    ndarray[n_point]
    """
    if correlation == 0:
        return rng.standard_normal(n_point)
    reach = int(np.ceil(8 * correlation))
    kernel = np.exp(-np.arange(reach) / correlation)
    kernel /= np.sqrt(np.sum(kernel**2))
    return np.convolve(rng.standard_normal(n_point + reach - 1), kernel, mode="valid")


def quantise(value: FloatArray, step: float) -> FloatArray:
    """Nearest multiple of a digit.

    Parameters
    ----------
    value : ndarray
        Analogue value.
    step : float
        The digit, in the unit of the value.

    Returns
    -------
    ndarray
    """
    return np.round(value / step) * step


def field_seen(field_T: FloatArray, line: Instrument) -> FloatArray:
    """Field at the sample while the magnet supply reads `field_T`: remanence added, behind the sweep.

    Parameters
    ----------
    field_T : ndarray[n_point], T
        Reading, in the order of the sweep.
    line : Instrument
        Remanence and lag.

    Returns
    -------
    ndarray[n_point], T
    """
    return field_T + line.remanence_T - line.lag_T * np.sign(np.gradient(field_T))


def temperatures(
    nominal_K: float, n_point: int, line: Instrument, rng: np.random.Generator
) -> tuple[FloatArray, FloatArray]:
    """True and read temperature along a sweep.

    Parameters
    ----------
    nominal_K : float, K
        Set point.
    n_point : int
        Samples of the sweep.
    line : Instrument
        Drift, and errors of the thermometer.
    rng : Generator
        Source of randomness.

    Returns
    -------
    truth, reading : ndarray[n_point], K
    """
    time = np.linspace(-0.5, 0.5, n_point)
    slope, bend, error = rng.standard_normal(3)
    drift = line.temperature_drift * (slope * time + bend * (time**2 - 1 / 12))
    truth = nominal_K * (1 + drift)
    jitter = 1 + 5e-4 * correlated_noise(n_point, 20.0, rng)
    reading = truth * (1 + line.temperature_scale) * (1 + line.temperature_spread * error) * jitter
    return truth, reading


def voltages(
    rho_xx: FloatArray, rho_xy: FloatArray, line: Instrument, rng: np.random.Generator
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Lock-in voltages of a sweep.

    Parameters
    ----------
    rho_xx, rho_xy : ndarray[n_point], ohm
        True resistivities.
    line : Instrument
        The measuring line.
    rng : Generator
        Source of randomness.

    Returns
    -------
    xx_in_phase, xx_quadrature, xy_in_phase, xy_quadrature : ndarray[n_point], V
    """
    n_point = len(rho_xx)
    gain = 1 + line.gain_spread * rng.standard_normal()
    wander = line.relative_noise * correlated_noise(n_point, 2 * line.correlation, rng)
    along = (line.aspect * rho_xx * (1 + wander) + line.hall_into_xx * rho_xy) * gain * line.current_A
    across = (rho_xy + line.xx_into_hall * line.aspect * rho_xx) * line.current_A
    noise = [correlated_noise(n_point, line.correlation, rng) for _ in range(4)]
    raw = (
        along * np.cos(line.phase) + line.offset_V + line.noise_V * noise[0],
        along * np.sin(line.phase) + line.noise_V * noise[1],
        across * np.cos(line.phase) + line.hall_noise_V * noise[2],
        across * np.sin(line.phase) + line.hall_noise_V * noise[3],
    )
    steps = (line.step_V, line.step_V, line.hall_step_V, line.hall_step_V)
    along_x, along_y, across_x, across_y = (quantise(r, s) for r, s in zip(raw, steps, strict=True))
    return along_x, along_y, across_x, across_y
