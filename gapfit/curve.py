"""The full curve of a combination of mechanisms, and its derivatives, vectorised over draws and temperatures.

    y(T) = activation (closed at high T by the background) + hopping + nearest-neighbour hopping
           + leak + offset + gapless level,           all at the electron temperature T_e(T).

Every contribution is described by its size at a reference temperature, so that amplitude and energy
decorrelate. The state of a model is a vector of *coordinates*, one per row of
`gapfit.mechanisms.PARAMETERS`: the logarithm of positive quantities, the quantity itself otherwise. A
mechanism that is off has its coordinate where its contribution vanishes, so one function, `evaluate`,
serves every combination.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from gapfit.mechanisms import FAR, LARGEST_EXPONENT, PARAMETERS

__all__ = ["Curve", "Reference", "evaluate", "log_prefactor"]

FloatArray = NDArray[np.float64]

NEGLIGIBLE_RISE = -15.0
"""Below this logarithm of (activated / background)^k the closure changes nothing."""

_G, _A, _B, _K, _Q, _BS, _H, _HT, _HX, _N, _NR, _L, _O, _E, _F, _P, _S, _I = range(len(PARAMETERS))


@dataclass(frozen=True)
class Reference:
    """Reference temperatures and fixed exponents of a model.

    Attributes
    ----------
    high_K : float, K
        Where the activated contribution is quoted.
    low_K : float, K
        Where hopping and the gapless level are quoted.
    hopping_power : float
        Power m of the hopping prefactor 1/T^m.
    saturation_exponent : float
        n of the electron temperature.
    """

    high_K: float
    low_K: float
    hopping_power: float = 1.0
    saturation_exponent: float = 4.0


@dataclass(frozen=True)
class Curve:
    """Curves of a batch of models and their derivatives.

    Attributes
    ----------
    total : ndarray[n_draw, n_temperature], ohm or S
    slope : ndarray[n_draw, n_temperature], ohm or S
        d total / d ln T.
    parts : dict of str to ndarray[n_draw, n_temperature], ohm or S
        ``activation`` (closed), ``hopping``, ``nearest``, ``constant`` (leak, offset and level).
    jacobian : ndarray[n_draw, n_temperature, n_parameter] or None
        d total / d coordinate.
    """

    total: FloatArray
    slope: FloatArray
    parts: dict[str, FloatArray]
    jacobian: FloatArray | None = None


def log_prefactor(coordinates: FloatArray, reference: Reference) -> FloatArray:
    """Logarithm of the activated prefactor at 1/T = 0.

    Parameters
    ----------
    coordinates : ndarray[n_draw, n_parameter]
    reference : Reference

    Returns
    -------
    ndarray[n_draw]
        ln of ohm or S.
    """
    gap = _exp(coordinates[:, _G])
    spread = gap * _exp(coordinates[:, _S])
    return np.asarray(
        coordinates[:, _A] + gap / (2 * reference.high_K) - spread**2 / (8 * reference.high_K**2)
    )


def evaluate(
    coordinates: FloatArray, temperature: FloatArray, reference: Reference, jacobian: bool = False
) -> Curve:
    """Curves of a batch of models.

    Parameters
    ----------
    coordinates : ndarray[n_draw, n_parameter]
        Coordinate vectors; a background of NaN is tied to the prefactor (Fermi form).
    temperature : ndarray[n_temperature], K
        Bath temperatures.
    reference : Reference
        Reference temperatures and exponents.
    jacobian : bool
        Whether to return derivatives by the coordinates too.

    Returns
    -------
    Curve

    Notes
    -----
    Exponents are capped at 600 so that absurd draws give absurdly large finite readings, not overflow.
    """
    x = coordinates[:, :, None]
    tied = np.isnan(coordinates[:, _B])
    if tied.any():
        x = x.copy()
        x[tied, _B, 0] = log_prefactor(coordinates[tied], reference)
    hot, q = _electrons(x[:, _E], temperature, reference)
    columns: dict[int, FloatArray] | None = {} if jacobian else None
    active, d_active, d_bath = _activated(x, hot, temperature / reference.high_K, reference, columns)
    hop, d_hop = _variable_range(x, hot, reference, columns)
    near, d_near = _nearest(x, hot, reference, columns)
    level, d_level = _level(x, hot, reference, columns)
    leak = _exp(x[:, _L])
    constant = leak + x[:, _O] + level
    by_electrons = d_active + d_hop + d_near + d_level
    total = active + hop + near + constant
    parts = {"activation": active, "hopping": hop, "nearest": near, "constant": constant + 0 * total}
    slope = by_electrons * (1 - q) + d_bath
    if columns is None:
        return Curve(total, slope, parts)
    columns |= {_L: leak, _O: np.ones_like(leak), _E: by_electrons * q}
    matrix = np.zeros((*total.shape, len(PARAMETERS)))
    for slot, column in columns.items():
        matrix[:, :, slot] = column
    if tied.any():
        _tie_background(matrix, x, tied, reference)
    return Curve(total, slope, parts, matrix)


def _exp(exponent: FloatArray) -> FloatArray:
    return np.exp(np.minimum(exponent, LARGEST_EXPONENT))


def _electrons(
    log_t0: FloatArray, temperature: FloatArray, reference: Reference
) -> tuple[FloatArray, FloatArray]:
    """Electron temperature and d ln T_e / d ln T_0."""
    if (log_t0 <= -FAR).all():
        return temperature[None, :], np.zeros((1, 1))
    n = reference.saturation_exponent
    excess = _exp(n * (log_t0 - np.log(temperature)))
    return temperature * (1 + excess) ** (1 / n), excess / (1 + excess)


def _activated(
    x: FloatArray,
    hot: FloatArray,
    bath: FloatArray,
    reference: Reference,
    columns: dict[int, FloatArray] | None,
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Activated contribution with closure, and its derivatives by ln T_e and by ln T at fixed T_e.

    The bath temperature comes in units of the high reference.
    """
    half = _exp(x[:, _G]) / 2
    inverse = 1 / hot
    by_gap = -half * (inverse - 1 / reference.high_K)
    by_spread, by_electrons = np.zeros((1, 1)), half * inverse
    if (x[:, _S] > -FAR).any():
        variance = (half * _exp(x[:, _S])) ** 2
        by_spread = variance * (inverse**2 - 1 / reference.high_K**2)
        by_gap, by_electrons = by_gap + by_spread, by_electrons - variance * inverse**2
    log_active = np.minimum(x[:, _A] + by_gap - by_spread / 2, LARGEST_EXPONENT)
    if (x[:, _B] >= FAR).all():
        value, share, by_bath = np.exp(log_active), np.ones((1, 1)), np.zeros((1, 1))
    else:
        value, share = _closed(x, log_active, bath, columns)
        by_bath = value * (1 - share) * x[:, _BS] * bath
    carried = value * share
    if columns is not None:
        columns |= {_G: carried * by_gap, _A: carried, _S: carried * by_spread}
    return value, carried * by_electrons, by_bath


def _closed(
    x: FloatArray, log_active: FloatArray, bath: FloatArray, columns: dict[int, FloatArray] | None
) -> tuple[FloatArray, FloatArray]:
    """Activated contribution closed by the background, and its logarithmic derivative by the open one."""
    background, k = x[:, _B] + x[:, _BS] * (bath - 1), _exp(x[:, _K])
    q = 1 / (1 + _exp(-x[:, _Q]))
    rise = np.minimum(k * (log_active - background), LARGEST_EXPONENT / 2)
    ratio = np.exp(np.maximum(rise, NEGLIGIBLE_RISE))
    open_share = 1 + q * ratio
    depth = np.log1p(q * ratio) / q
    level = -np.expm1(-depth)
    negligible = rise < NEGLIGIBLE_RISE
    filled = np.where(negligible, rise, np.log(level))
    value = np.exp(background + filled / k)
    steep, local = (1 - level) / level, ratio / open_share
    share = np.where(negligible, 1.0, steep * local)
    if columns is not None:
        columns[_B] = value * (1 - share)
        columns[_BS] = columns[_B] * (bath - 1)
        columns[_K] = value * (share * rise - filled) / k
        by_shape = depth / q - local / q
        columns[_Q] = np.where(negligible, 0.0, -value * steep * by_shape / k * q * (1 - q))
    return value, share


def _variable_range(
    x: FloatArray, hot: FloatArray, reference: Reference, columns: dict[int, FloatArray] | None
) -> tuple[FloatArray, FloatArray]:
    """Variable-range hopping and its derivative by ln T_e."""
    if (x[:, _H] <= -FAR).all():
        return np.zeros((1, 1)), np.zeros((1, 1))
    m, alpha = reference.hopping_power, x[:, _HX]
    cooler = np.log(hot / reference.low_K)
    at_low = _exp(alpha * (x[:, _HT] - np.log(reference.low_K)))
    at_hot = at_low * np.exp(-alpha * cooler)
    value = _exp(x[:, _H] - (at_hot - at_low) - m * cooler)
    if columns is not None:
        columns |= {_H: value, _HT: -value * alpha * (at_hot - at_low)}
    return value, value * (alpha * at_hot - m)


def _nearest(
    x: FloatArray, hot: FloatArray, reference: Reference, columns: dict[int, FloatArray] | None
) -> tuple[FloatArray, FloatArray]:
    """Nearest-neighbour hopping and its derivative by ln T_e."""
    if (x[:, _N] <= -FAR).all():
        return np.zeros((1, 1)), np.zeros((1, 1))
    logistic = 1 / (1 + np.exp(-np.clip(x[:, _NR], -LARGEST_EXPONENT, LARGEST_EXPONENT)))
    energy = _exp(x[:, _G]) * logistic / 4
    by_energy = -energy * (1 / hot - 1 / reference.low_K)
    value = _exp(x[:, _N] + by_energy)
    if columns is not None:
        columns |= {_N: value, _NR: value * by_energy * (1 - logistic)}
        columns[_G] = columns[_G] + value * by_energy
    return value, value * energy / hot


def _level(
    x: FloatArray, hot: FloatArray, reference: Reference, columns: dict[int, FloatArray] | None
) -> tuple[FloatArray, FloatArray]:
    """Gapless level with a power of temperature, and its derivative by ln T_e."""
    if (x[:, _F] <= -FAR).all():
        return np.zeros((1, 1)), np.zeros((1, 1))
    ratio = np.log(hot / reference.low_K)
    value = _exp(x[:, _F] + x[:, _P] * ratio)
    if columns is not None:
        columns |= {_F: value, _P: value * ratio}
    return value, value * x[:, _P]


def _tie_background(matrix: FloatArray, x: FloatArray, tied: NDArray[np.bool_], reference: Reference) -> None:
    """Carry the derivative by the tied background over to gap and amplitude, in place."""
    through = matrix[tied, :, _B]
    gap = _exp(x[tied, _G])
    variance = (gap * _exp(x[tied, _S])) ** 2 / 4 / reference.high_K**2
    matrix[tied, :, _A] += through
    matrix[tied, :, _G] += through * (gap / (2 * reference.high_K) - variance)
    matrix[tied, :, _S] -= through * variance
    matrix[tied, :, _B] = 0.0
