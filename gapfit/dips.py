"""Minima of a trace as a function of filling factor: where they are, how deep and how wide."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.signal import find_peaks, peak_widths

from gapfit.smoothing import Curve, smooth_curve
from gapfit.traces import Sweep

__all__ = ["Dip", "find_dips", "trace_curve"]

FloatArray = NDArray[np.float64]
LOG_STEP = 6e-4
LINEAR_STEP = 6e-4
FLAT_SHARE = 0.95
FLAT_ERROR = 0.3
HIGHEST_FILLING = 12.0
"""Field sweeps are searched for minima up to this filling factor."""


@dataclass(frozen=True)
class Dip:
    """A local minimum of a trace.

    Attributes
    ----------
    filling : float
        Filling factor of the lowest point.
    filling_error : float
        Its standard error from the noise of the trace.
    centre, centre_error : float
        The same after correction for the slope of the background that the minimum sits on: the lowest
        point lies where d ln(dip) = -d ln(background); half of the correction counts as its error.
    value : float, ohm or S
        Smoothed reading there.
    depth : float, ohm or S
        How far below the lower of its two shoulders it lies.
    low, high : float
        Filling factors on either side where the trace has risen by half of the depth.
    noise : float, ohm or S
        Standard error of the smoothed trace.
    at_edge : bool
        Whether the sweep ends before the trace has risen by half of the depth; that side is then the end.
    """

    filling: float
    filling_error: float
    centre: float
    centre_error: float
    value: float
    depth: float
    low: float
    high: float
    noise: float
    at_edge: bool = False

    @property
    def half_width(self) -> float:
        """Half of the full width at half depth, in filling factor."""
        return (self.high - self.low) / 2

    @property
    def middle(self) -> float:
        """Filling factor half way between the two sides."""
        return (self.high + self.low) / 2

    @property
    def share(self) -> float:
        """Depth relative to the lower shoulder, at most one."""
        return self.depth / (self.depth + max(self.value, 0.0))

    @property
    def flat(self) -> bool:
        """Whether it goes down to nearly nothing, so that its lowest point says little about its centre."""
        return self.share > FLAT_SHARE or self.at_edge

    @property
    def place(self) -> float:
        """Best filling factor of the centre: half way between the sides of a flat minimum."""
        return self.middle if self.flat else self.centre

    @property
    def place_error(self) -> float:
        """Standard error of `place`; neighbours make the sides of a flat minimum uneven."""
        return FLAT_ERROR * self.half_width if self.flat else self.centre_error


def trace_curve(sweep: Sweep, filling: FloatArray, values: FloatArray | None = None) -> Curve:
    """Smoothed trace, by ln(filling) for a field sweep and by filling otherwise.

    Parameters
    ----------
    sweep : Sweep
        Its points.
    filling : ndarray[n_point]
        Filling factor along the sweep.
    values : ndarray[n_point], optional
        What to smooth; by default the longitudinal signal.

    Returns
    -------
    Curve
    """
    values = sweep.signal if values is None else values
    if sweep.kind != "field":
        order = np.argsort(filling, kind="stable")
        return smooth_curve(filling[order], values[order], _unturned(sweep.segment[order]), LINEAR_STEP)
    inside = np.flatnonzero((filling > 0) & (filling < HIGHEST_FILLING))[::-1]
    return smooth_curve(np.log(filling[inside]), values[inside], _unturned(sweep.segment[inside]), LOG_STEP)


def _unturned(segment: NDArray[np.int64]) -> NDArray[np.int64]:
    return np.abs(segment - segment[0]) if segment.size else segment


def find_dips(curve: Curve, logarithmic: bool, significance: float = 5.0, share: float = 0.01) -> list[Dip]:
    """Local minima that stand out of the noise.

    Parameters
    ----------
    curve : Curve
        Smoothed trace by ln(filling) or filling.
    logarithmic : bool
        Whether the axis is ln(filling).
    significance : float
        Least depth in standard errors of the smoothed trace.
    share : float
        Least depth relative to the shoulders, or to a fifth of the usual level where that is more.

    Returns
    -------
    list of Dip
        In order of rising filling factor.
    """
    if curve.axis.size < 5:
        return []
    walled = np.concatenate(([np.inf], curve.value, [np.inf]))
    walled[[0, -1]] = np.max(curve.value) + np.ptp(curve.value)
    peaks, record = find_peaks(-walled, prominence=0.0)
    depth = record["prominences"]
    inner = np.clip(peaks - 1, 0, curve.axis.size - 1)
    shoulder = np.minimum(np.abs(curve.value[inner] + depth), np.abs(curve.value).max())
    level = np.maximum(shoulder, 0.2 * np.median(np.abs(curve.value)))
    seen = (depth > significance * curve.value_error[inner]) & (depth > share * level) & (depth > 0)
    seen &= (inner > 1) & (inner < curve.axis.size - 2)
    if not seen.any():
        return []
    bases = tuple(part[seen] for part in (depth, record["left_bases"], record["right_bases"]))
    _, _, left, right = peak_widths(-walled, peaks[seen], 0.5, prominence_data=bases)
    index = np.arange(curve.axis.size) + 1
    sides = np.interp(left, index, curve.axis), np.interp(right, index, curve.axis)
    at_edge = (left < 1) | (right > curve.axis.size)
    found = [
        _dip(curve, int(peak), float(deep), float(low), float(high), logarithmic)
        for peak, deep, low, high in zip(inner[seen], bases[0], *sides, strict=True)
    ]
    found = [replace(dip, at_edge=bool(edge)) for dip, edge in zip(found, at_edge, strict=True)]
    return [dip for dip in found if not dip.at_edge or dip.share > FLAT_SHARE]


def _dip(curve: Curve, peak: int, depth: float, low: float, high: float, logarithmic: bool) -> Dip:
    """Record of one minimum, refined between the points by slope and curvature."""
    spacing = float(curve.axis[min(peak + 1, curve.axis.size - 1)] - curve.axis[max(peak - 1, 0)])
    bend = float(curve.curvature[peak])
    half = (high - low) / 2
    place, spread = float(curve.axis[peak]), half / 2
    if bend > 0:
        place -= float(np.clip(curve.slope[peak] / bend, -spacing, spacing))
        spread = min(float(curve.slope_error[peak]) / bend, spread)
    correction = _slope_displacement(curve, peak, bend, half)
    centre, centre_error = place + correction, float(np.hypot(spread, correction / 2))
    scale = float(np.exp(place)) if logarithmic else 1.0
    return Dip(
        filling=scale if logarithmic else place,
        filling_error=spread * scale,
        centre=float(np.exp(centre)) if logarithmic else centre,
        centre_error=centre_error * scale,
        value=float(curve.value[peak]),
        depth=depth,
        low=float(np.exp(low)) if logarithmic else low,
        high=float(np.exp(high)) if logarithmic else high,
        noise=float(curve.value_error[peak]),
    )


def _slope_displacement(curve: Curve, peak: int, bend: float, half: float) -> float:
    """Centre minus lowest point of a dip in a sloping background, from its shoulders and its curvature.

    For rho = background * dip the lowest point has (ln dip)' = -(ln background)', which lies
    (ln background)' / (ln dip)'' below the centre.
    """
    rising = np.sign(np.diff(curve.value))
    left = np.flatnonzero(rising[:peak] > 0)
    right = np.flatnonzero(rising[peak:] < 0)
    if not left.size or not right.size or not bend > 0:
        return 0.0
    low, high = int(left[-1]) + 1, peak + int(right[0])
    value = curve.value
    if value[low] <= 0 or value[high] <= 0 or high <= low:
        return 0.0
    slope = float(np.log(value[high] / value[low]) / (curve.axis[high] - curve.axis[low]))
    sharpness = bend / max(float(value[peak]), float(curve.value_error[peak]))
    return float(np.clip(slope / sharpness, -half / 2, half / 2))
