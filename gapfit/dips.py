"""Minima of a trace as a function of filling factor: where they are, how deep and how wide."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.signal import find_peaks

from gapfit.smoothing import Curve, smooth_curve
from gapfit.traces import Sweep

__all__ = ["Dip", "find_dips", "trace_curve"]

FloatArray = NDArray[np.float64]
LOG_STEP = 6e-4
LINEAR_STEP = 6e-4
FLAT_SHARE = 0.95
FLAT_ERROR = 0.3
SHOULDER_DROP = 0.3
"""A minimum deeper than the first share is flat; its middle is good to the second share of its half-width;
its shoulder ends where the trace has come down by the third share of its rise (own choices)."""

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
        return self.share > FLAT_SHARE

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
    walled = np.pad(curve.value, 1, constant_values=float(np.max(curve.value)))
    peaks, record = find_peaks(-walled, prominence=0.0)
    clear = (
        record["prominences"] > significance * curve.value_error[np.clip(peaks - 1, 0, curve.axis.size - 1)]
    )
    usual = float(np.median(np.abs(curve.value)))
    found: list[Dip] = []
    for peak in peaks[clear] - 1:
        valley = _valley(curve, int(peak), significance)
        if valley is None or valley.depth < share * max(valley.shoulder, 0.2 * usual):
            continue
        dip = _dip(curve, valley, logarithmic)
        if dip.at_edge and not dip.flat and not valley.turns:
            continue
        twin = next((other for other in found if other.low <= dip.filling <= other.high), None)
        if twin is None:
            found.append(dip)
        elif dip.value < twin.value:
            found[found.index(twin)] = dip
    return found


@dataclass(frozen=True)
class _Valley:
    """A minimum of a curve, by index: the lowest point, the two shoulders, and the half-way places.

    At the edge of the curve `turns` tells whether it rises again beyond noise.
    """

    peak: int
    left: int
    right: int
    depth: float
    shoulder: float
    low: float
    high: float
    at_edge: bool
    turns: bool


def _shoulder(curve: Curve, peak: int, pace: int, significance: float) -> tuple[int, bool]:
    """Index of the shoulder on one side of a minimum, and whether the curve ends before it falls again.

    The shoulder is the highest place before the curve has come down by a share of its rise, and beyond noise.
    """
    along = curve.value[peak::pace] if pace > 0 or peak > 0 else curve.value[:1]
    top = np.maximum.accumulate(along)
    drop = top - along
    over = (drop > SHOULDER_DROP * (top - along[0])) & (drop > significance * curve.value_error[peak])
    stop = int(np.argmax(over)) if over.any() else along.size - 1
    return peak + pace * int(np.argmax(along[: stop + 1])), not over.any()


def _valley(curve: Curve, peak: int, significance: float) -> _Valley | None:
    """Shoulders and half-way places of a minimum, or None where it is not deep beyond noise."""
    left, left_ends = _shoulder(curve, peak, -1, significance)
    right, right_ends = _shoulder(curve, peak, 1, significance)
    rises = np.array([curve.value[left], curve.value[right]]) - curve.value[peak]
    ends = np.array([left_ends, right_ends])
    cut = ends & (rises < 0.5 * rises[::-1])
    depth = float(rises[~cut].min(initial=np.inf))
    if cut.all() or not depth > significance * curve.value_error[peak]:
        return None
    level = curve.value[peak] + depth / 2
    low = curve.axis[0] if cut[0] else _crossing(curve, peak, -1, level)
    high = curve.axis[-1] if cut[1] else _crossing(curve, peak, 1, level)
    shoulder = float(curve.value[peak]) + depth
    turns = bool(np.all(rises > significance * curve.value_error[peak]))
    return _Valley(peak, left, right, depth, abs(shoulder), float(low), float(high), bool(cut.any()), turns)


def _crossing(curve: Curve, peak: int, pace: int, level: float) -> float:
    """Place next to a minimum where the curve first reaches a level that it does reach."""
    along = curve.value[peak::pace]
    stop = int(np.argmax(along >= level))
    inner, outer = peak + pace * (stop - 1), peak + pace * stop
    step = (level - curve.value[inner]) / (curve.value[outer] - curve.value[inner])
    return float(curve.axis[inner] + step * (curve.axis[outer] - curve.axis[inner]))


def _dip(curve: Curve, valley: _Valley, logarithmic: bool) -> Dip:
    """Record of one minimum, refined between the points by slope and curvature."""
    peak, half = valley.peak, (valley.high - valley.low) / 2
    spacing = float(curve.axis[min(peak + 1, curve.axis.size - 1)] - curve.axis[max(peak - 1, 0)])
    bend = float(curve.curvature[peak])
    place, spread = float(curve.axis[peak]), half / 2
    if bend > 0:
        place -= float(np.clip(curve.slope[peak] / bend, -spacing, spacing))
        spread = min(float(curve.slope_error[peak]) / bend, spread)
    correction = _slope_displacement(curve, valley, bend, half)
    centre, centre_error = place + correction, float(np.hypot(spread, correction / 2))
    low, high = valley.low, valley.high
    filling = float(np.exp(place)) if logarithmic else place
    scale = filling if logarithmic else 1.0
    return Dip(
        filling=filling,
        filling_error=spread * scale,
        centre=float(np.exp(centre)) if logarithmic else centre,
        centre_error=centre_error * scale,
        value=float(curve.value[peak]),
        depth=valley.depth,
        low=float(np.exp(low)) if logarithmic else low,
        high=float(np.exp(high)) if logarithmic else high,
        noise=float(curve.value_error[peak]),
        at_edge=valley.at_edge,
    )


def _slope_displacement(curve: Curve, valley: _Valley, bend: float, half: float) -> float:
    """Centre minus lowest point of a dip in a sloping background, from its shoulders and its curvature.

    For rho = background * dip the lowest point has (ln dip)' = -(ln background)', which lies
    (ln background)' / (ln dip)'' below the centre. It is no more than half of the half-width.
    """
    low, high = float(curve.value[valley.left]), float(curve.value[valley.right])
    if low <= 0 or high <= 0 or valley.at_edge or not bend > 0:
        return 0.0
    slope = float(np.log(high / low) / (curve.axis[valley.right] - curve.axis[valley.left]))
    sharpness = bend / max(float(curve.value[valley.peak]), float(curve.value_error[valley.peak]))
    return float(np.clip(slope / sharpness, -half / 2, half / 2))
