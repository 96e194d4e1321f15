"""What common practice would have said: a straight line through ln(reading) against 1/T."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from gapfit.series import TemperatureSeries

__all__ = ["StraightLine", "straight_line"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class StraightLine:
    """What a straight line through ln(reading) against 1/T would have said.

    Attributes
    ----------
    gap_K : float, K
    gap_error_K : float, K
        Standard error of the regression.
    low_K, high_K : float, K
        Window chosen.
    prefactor : float, ohm or S
    """

    gap_K: float
    gap_error_K: float
    low_K: float
    high_K: float
    prefactor: float


def straight_line(series: TemperatureSeries) -> StraightLine | None:
    """Straight line through the longest part that looks straight (common practice, no source).

    Parameters
    ----------
    series : TemperatureSeries

    Returns
    -------
    StraightLine or None
        The window of at least five readings above three standard errors that has a coefficient of
        determination above 0.995 and the most readings, else the straightest one; None where there is no
        such window.
    """
    seen = series.value > 3 * series.error
    x, y = 1 / series.temperature[seen], np.log(series.value[seen])
    best: tuple[tuple[bool, float], StraightLine] | None = None
    for low in range(x.size):
        for high in range(low + 5, x.size + 1):
            line, r_squared = _regress(x[low:high], y[low:high])
            straight = r_squared > 0.995
            rank = (straight, float(high - low) if straight else r_squared)
            if line is not None and (best is None or rank > best[0]):
                best = rank, line
    return best[1] if best else None


def _regress(x: FloatArray, y: FloatArray) -> tuple[StraightLine | None, float]:
    centred = x - x.mean()
    norm = float(centred @ centred)
    if norm == 0:
        return None, 0.0
    slope = float(centred @ y) / norm
    residual = y - y.mean() - slope * centred
    total = float(np.sum((y - y.mean()) ** 2))
    error = float(np.sqrt(residual @ residual / (x.size - 2) / norm))
    intercept = float(y.mean() - slope * x.mean())
    line = StraightLine(-2 * slope, 2 * error, 1 / float(x[0]), 1 / float(x[-1]), float(np.exp(intercept)))
    return line, 1 - float(residual @ residual) / total if total > 0 else 0.0
