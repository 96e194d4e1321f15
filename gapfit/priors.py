"""Priors: independent normal distributions of the coordinates, set once at the scale of the data.

In whitened coordinates z = (x - centre) / width every prior is a standard normal, so a parameter that a
combination does not have costs nothing, and prior draws are plain normal numbers. Contributions are
given priors at a reference temperature, which decorrelates prefactor and gap. All of it is frozen in a
`Prior` and printed with the results.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from gapfit.curve import Reference
from gapfit.mechanisms import PARAMETERS, SLOT, Combination
from gapfit.series import TemperatureSeries

__all__ = ["Prior", "prior_at_data_scale", "reference_of"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class Prior:
    """Normal prior of every coordinate of `PARAMETERS`.

    Attributes
    ----------
    centre : ndarray[n_parameter]
        Means of the coordinates.
    width : ndarray[n_parameter]
        Standard deviations of the coordinates.
    """

    centre: FloatArray
    width: FloatArray

    def coordinates(self, whitened: FloatArray, combination: Combination) -> FloatArray:
        """Full coordinate vectors of whitened ones.

        Parameters
        ----------
        whitened : ndarray[n_draw, n_fitted]
            Whitened coordinates of the fitted parameters of a combination.
        combination : Combination

        Returns
        -------
        ndarray[n_draw, n_parameter]
        """
        slots = combination.slots
        full = np.repeat(combination.base[None], whitened.shape[0], axis=0)
        full[:, slots] = self.centre[slots] + self.width[slots] * whitened
        return full

    def whitened(self, coordinates: FloatArray, combination: Combination) -> FloatArray:
        """Whitened coordinates of full coordinate vectors, the inverse of `coordinates`."""
        slots = combination.slots
        return np.asarray((coordinates[:, slots] - self.centre[slots]) / self.width[slots])

    def table(self, combination: Combination | None = None) -> list[dict[str, str | float]]:
        """Rows for reports: name, unit, meaning, distribution, median, and 95 % range in natural values."""
        slots = range(len(PARAMETERS)) if combination is None else combination.slots
        rows: list[dict[str, str | float]] = []
        for slot in slots:
            parameter = PARAMETERS[slot]
            if self.width[slot] == 0:
                continue
            ends = self.centre[slot] + 1.96 * self.width[slot] * np.array([-1.0, 0.0, 1.0])
            low, middle, high = (float(number) for number in parameter.natural(ends))
            kind = {
                "log": "log-normal",
                "linear": "normal",
                "unit": "logit-normal on (0, 1)",
                "quarter": "logit-normal on (0, 1/4)",
            }
            rows.append(
                {
                    "name": parameter.name,
                    "symbol": parameter.symbol,
                    "unit": parameter.unit,
                    "meaning": parameter.meaning,
                    "distribution": kind[parameter.scale],
                    "median": middle,
                    "low95": low,
                    "high95": high,
                }
            )
        return rows


def reference_of(
    series: TemperatureSeries, hopping_power: float = 1.0, saturation_exponent: float = 4.0
) -> Reference:
    """Reference temperatures of a series: its lowest, and the one three quarters up its range of ln T.

    Parameters
    ----------
    series : TemperatureSeries
    hopping_power : float
        Power m of the hopping prefactor.
    saturation_exponent : float
        Exponent n of the electron temperature.

    Returns
    -------
    Reference
    """
    low = float(series.temperature[0])
    return Reference(series.high_reference, low, hopping_power, saturation_exponent)


def prior_at_data_scale(series: TemperatureSeries, reference: Reference) -> Prior:
    """Weakly informative prior whose scales come from the range of temperature and the size of the readings.

    Parameters
    ----------
    series : TemperatureSeries
    reference : Reference

    Returns
    -------
    Prior

    Notes
    -----
    Widths are in units of the coordinate: a width of 2 on a logarithm is a factor of 7 either way at one
    standard deviation. The gap is centred at four times the geometric mean of the temperatures with a
    factor of 4.5 either way, which reaches from gaps too small for the range to gaps whose activated
    part covers the last two points only.
    """
    low, high = float(series.temperature[0]), float(series.temperature[-1])
    middle = np.sqrt(low * high)
    top, bottom = _level(series, slice(-3, None)), _level(series, slice(0, 3))
    at_high = float(
        np.interp(np.log(reference.high_K), np.log(series.temperature), np.log(_positive(series)))
    )
    noise = float(np.median(series.error[: max(3, series.n_point // 3)]))
    rows = {
        "gap_K": (np.log(4 * middle), 1.5),
        "activated": (at_high, 2.0),
        "background": _background(series, top),
        "sharpness": (0.28, 0.35),
        "saturation": (0.0, 2.5),
        "background_slope": (0.0, 0.05)
        if np.isnan(series.background_slope)
        else (series.background_slope, 0.02),
        "hopping": (np.log(bottom), 2.0),
        "hopping_T0_K": (np.log(60 * middle), 1.7),
        "hopping_exponent": (0.5, 0.0),
        "nearest": (np.log(bottom), 2.0),
        "nearest_ratio": (0.0, 1.0),
        "leak": (np.log(bottom) - 1.0, 2.0),
        "offset": (0.0, 3 * noise),
        "electron_T0_K": (np.log(low), 0.8),
        "level": (np.log(bottom), 2.0),
        "power": (0.5, 1.0),
        "spread": (np.log(0.05), 0.7),
        "inflation": (0.0, 0.5),
    }
    centre, width = np.zeros(len(PARAMETERS)), np.zeros(len(PARAMETERS))
    for name, (mean, deviation) in rows.items():
        centre[SLOT[name]], width[SLOT[name]] = mean, deviation
    return Prior(centre, width)


def _background(series: TemperatureSeries, top: float) -> tuple[float, float]:
    """Flank level where the sweeps show it, else twice the warmest readings within a factor of 4.5."""
    if np.isfinite(series.background) and series.background > 0:
        return float(np.log(series.background)), series.background_log_error
    return float(np.log(top)) + 0.7, 1.5


def _positive(series: TemperatureSeries) -> FloatArray:
    """Readings, with those below their noise replaced by it, so that a logarithm exists for a scale."""
    return np.maximum(series.value, series.error)


def _level(series: TemperatureSeries, part: slice) -> float:
    return float(np.median(_positive(series)[part]))
