"""The temperature series: readings of one filling at many temperatures, ready to be fitted."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from fractions import Fraction
from typing import Any, Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from gapfit.errors import InputError, NotEnoughData
from gapfit.hall import plateau_resistance

__all__ = [
    "NO_TEMPERATURE_ERROR",
    "ErrorSource",
    "ExcludedPoint",
    "Quantity",
    "ReadingKind",
    "TemperatureSeries",
    "high_reference",
    "make_series",
]

FloatArray = NDArray[np.float64]
Quantity = Literal["rho_xx", "sigma_xx"]
ReadingKind = Literal["exact", "minimum", "mean"]
ErrorSource = Literal["stated", "trace", "assumed"]
NO_TEMPERATURE_ERROR = "no_temperature_error"
MINIMUM_POINTS = 3
BACKGROUND_LOG_ERROR = 0.25
"""The lower shoulder is known to per cent, but what closes the activation is only near it (own choice)."""

HIGHEST_TEMPERATURE_K = 350.0
HIGHEST_FRACTION_START_K = 15.0
LARGEST_TEMPERATURE_STEP = 100.0
"""From one temperature to the next; beyond it millikelvins and kelvins are mixed (own choice)."""


@dataclass(frozen=True)
class ExcludedPoint:
    """A reading that is not fitted, and why.

    Attributes
    ----------
    temperature : float, K
    value : float, ohm or S
    error : float, ohm or S
    reason : str
        Plain words, such as ``"sweep ends before the filling"``.
    """

    temperature: float
    value: float
    error: float
    reason: str


@dataclass(frozen=True)
class TemperatureSeries:
    """Readings of one filling of one sample in one cool-down, in order of rising temperature.

    Attributes
    ----------
    filling : Fraction
        Exact filling factor.
    temperature : ndarray[n_point], K
        Rising; repeated temperatures are allowed and stay separate readings.
    value : ndarray[n_point], ohm or S
        The readings, zero and negative ones included.
    error : ndarray[n_point], ohm or S
        Standard errors.
    temperature_error : ndarray[n_point], K
        Standard errors of the temperatures, zero where unknown.
    field_T : float
        Perpendicular field, T; NaN if unknown.
    quantity : {"rho_xx", "sigma_xx"}
        What the readings are; chosen once for the whole series.
    hall_resistance_ohm : float
        Hall resistance, measured or h/(nu e^2).
    reading : {"exact", "minimum", "mean"}
        Where on the trace the readings were taken.
    error_source : {"stated", "trace", "assumed"}
        Where the standard errors come from.
    background : float, ohm or S
        Level of the flanks of the minimum at high temperature, towards which it fills in; NaN if unknown.
    background_slope : float
        Relative change of that level with temperature, over the temperature three quarters up the range
        of ln T (where the activated contribution is quoted); NaN if unknown.
    background_log_error : float
        Standard error of its logarithm as the level that closes the activation.
    geometry_known : bool
        Whether readings are truly per square, so that the prefactor has its meaning.
    sample, cooldown, contacts, direction : str
        Names, empty where not given.
    drive_current_A : float
        Excitation current, A; NaN if unknown.
    total_field_T : float
        Total field for tilted samples, T; the perpendicular field otherwise.
    flags : tuple of str
        What a reader of the table must know, in short words.
    excluded : tuple of ExcludedPoint
        Readings left out, with reasons.
    """

    filling: Fraction
    temperature: FloatArray
    value: FloatArray
    error: FloatArray
    temperature_error: FloatArray
    field_T: float = float("nan")
    quantity: Quantity = "rho_xx"
    hall_resistance_ohm: float = float("nan")
    reading: ReadingKind = "exact"
    error_source: ErrorSource = "stated"
    background: float = float("nan")
    background_slope: float = float("nan")
    background_log_error: float = BACKGROUND_LOG_ERROR
    geometry_known: bool = True
    sample: str = ""
    cooldown: str = ""
    contacts: str = ""
    direction: str = ""
    drive_current_A: float = float("nan")
    total_field_T: float = float("nan")
    flags: tuple[str, ...] = ()
    excluded: tuple[ExcludedPoint, ...] = field(default=())

    @property
    def unit(self) -> str:
        """Unit of the readings, ``"ohm"`` or ``"S"``."""
        return "ohm" if self.quantity == "rho_xx" else "S"

    @property
    def high_reference(self) -> float:
        """Temperature three quarters up the range of ln T, K, where the activated part is quoted."""
        return high_reference(float(self.temperature[0]), float(self.temperature[-1]))

    @property
    def n_point(self) -> int:
        """Number of readings."""
        return int(self.temperature.size)

    def flagged(self, *flags: str) -> TemperatureSeries:
        """The same series with flags added (each at most once)."""
        return replace(self, flags=tuple(dict.fromkeys(self.flags + flags)))

    def without(self, keep: NDArray[np.bool_], reason: str) -> TemperatureSeries:
        """The series without some readings, which are kept as excluded ones.

        Parameters
        ----------
        keep : ndarray[n_point] of bool
            True for the readings that stay.
        reason : str
            Why the others go.
        """
        gone = tuple(
            ExcludedPoint(float(t), float(y), float(s), reason)
            for t, y, s in zip(self.temperature[~keep], self.value[~keep], self.error[~keep], strict=True)
        )
        return replace(
            self,
            excluded=self.excluded + gone,
            temperature=_frozen(self.temperature[keep]),
            value=_frozen(self.value[keep]),
            error=_frozen(self.error[keep]),
            temperature_error=_frozen(self.temperature_error[keep]),
        )


def high_reference(low_K: float, high_K: float) -> float:
    """Temperature three quarters up a range of ln T, K."""
    return float(low_K ** (1 / 4) * high_K ** (3 / 4))


def make_series(
    temperature: ArrayLike,
    value: ArrayLike,
    error: ArrayLike | None = None,
    *,
    filling: Fraction,
    temperature_error: ArrayLike | None = None,
    **record: Any,
) -> TemperatureSeries:
    """Checked and sorted temperature series of plain arrays.

    Parameters
    ----------
    temperature : array_like[n_point], K
        Temperatures, in any order.
    value : array_like[n_point], ohm or S
        Readings; zero and negative ones are data.
    error : array_like[n_point] or float, ohm or S, optional
        Standard errors. Without them 2 % of the reading plus 0.2 % of the largest reading is assumed and
        the fitted inflation takes over; the series is flagged ``errors_assumed``.
    filling : Fraction
        Exact filling factor.
    temperature_error : array_like[n_point] or float, K, optional
        Standard errors of the temperatures; without them zero, flagged ``no_temperature_error``.
    **record
        Any other field of `TemperatureSeries`.

    Returns
    -------
    TemperatureSeries

    Raises
    ------
    InputError
        If lengths differ, a number is not finite, a temperature or an error is not positive, or the
        temperatures look like millikelvins given as kelvins.
    NotEnoughData
        If there are fewer than three readings or only one temperature.
    """
    temperature = np.asarray(temperature, dtype=float).ravel()
    value = np.asarray(value, dtype=float).ravel()
    flags: tuple[str, ...] = tuple(record.pop("flags", ()))
    if error is None:
        error = assumed_error(value)
        record["error_source"] = "assumed"
        flags += ("errors_assumed",)
    if temperature_error is None:
        temperature_error = 0.0
        flags += (NO_TEMPERATURE_ERROR,)
    error = _spread(error, value.size, "error")
    temperature_error = _spread(temperature_error, value.size, "temperature_error")
    _check_readings(temperature, value, error, temperature_error, filling)
    order = np.argsort(temperature, kind="stable")
    record.setdefault("hall_resistance_ohm", abs(plateau_resistance(filling)) if filling else float("nan"))
    record.setdefault("total_field_T", record.get("field_T", float("nan")))
    return TemperatureSeries(
        filling=filling,
        temperature=_frozen(temperature[order]),
        value=_frozen(value[order]),
        error=_frozen(error[order]),
        temperature_error=_frozen(temperature_error[order]),
        flags=tuple(dict.fromkeys(flags)),
        **record,
    )


def assumed_error(value: FloatArray) -> FloatArray:
    """Standard errors assumed where none are stated: 2 % of the reading and 0.2 % of the largest one.

    Common practice, no source; the fitted inflation corrects their size.
    """
    largest = float(np.abs(value).max(initial=0.0))
    error: FloatArray = np.hypot(0.02 * value, 0.002 * largest)
    return error


def _spread(numbers: ArrayLike, size: int, name: str) -> FloatArray:
    numbers = np.asarray(numbers, dtype=float)
    if numbers.ndim == 0:
        return np.full(size, float(numbers))
    if numbers.size != size:
        raise InputError(
            f"{name} has {numbers.size} entries for {size} readings; give one each, or a single number"
        )
    return numbers.ravel()


def _check_readings(
    temperature: FloatArray,
    value: FloatArray,
    error: FloatArray,
    temperature_error: FloatArray,
    filling: Fraction,
) -> None:
    where = f"filling {filling}"
    if temperature.size != value.size:
        raise InputError(f"{where}: {temperature.size} temperatures for {value.size} readings; give one each")
    for name, numbers in (("temperature", temperature), ("reading", value), ("error", error)):
        if not np.isfinite(numbers).all():
            index = int(np.flatnonzero(~np.isfinite(numbers))[0])
            raise InputError(f"{where}: {name} {index + 1} is {numbers[index]}; leave out missing readings")
    if (temperature <= 0).any():
        index = int(np.argmax(temperature <= 0))
        raise InputError(
            f"{where}: temperature {index + 1} is {temperature[index]:g} K; temperatures must be above zero"
        )
    if (error <= 0).any():
        index = int(np.argmax(error <= 0))
        raise InputError(
            f"{where}: error {index + 1} is {error[index]:g}; standard errors must be above zero"
        )
    if (temperature_error < 0).any() or not np.isfinite(temperature_error).all():
        raise InputError(f"{where}: temperature errors must be finite and not negative")
    _check_temperature_unit(temperature, filling)
    different = np.unique(temperature).size
    if different < MINIMUM_POINTS:
        raise NotEnoughData(
            f"{where}: {different} different temperature(s) in {temperature.size} reading(s); "
            f"a fit needs at least {MINIMUM_POINTS}"
        )


def _check_temperature_unit(temperature: FloatArray, filling: Fraction) -> None:
    """Refuse temperatures that must be millikelvins: above 350 K, or a fraction studied above 15 K only."""
    if temperature.size == 0:
        return
    low, high = float(temperature.min()), float(temperature.max())
    if high > HIGHEST_TEMPERATURE_K or (filling.denominator > 1 and high >= low > HIGHEST_FRACTION_START_K):
        raise InputError(
            f"filling {filling}: temperatures run from {low:g} to {high:g} K, which look like millikelvins; "
            'state the unit (unit = "mK") or correct the column'
        )


def _frozen(numbers: FloatArray) -> FloatArray:
    numbers = np.array(numbers, dtype=float)
    numbers.setflags(write=False)
    return numbers
