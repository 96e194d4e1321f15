"""Axes that suit the data: units with a prefix, linear-logarithmic readings, ticks, numbers in print."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from gapfit.series import TemperatureSeries
from gapfit.style import (
    GREY,
    LINEAR_GREY,
    TICKDOWN,
    TICKRIGHT,
    TICKUP,
    Axes,
    FixedFormatter,
    FixedLocator,
    NullLocator,
)

__all__ = [
    "MARKS_MM",
    "MINUS",
    "AxisUnit",
    "ReadingScale",
    "filling_marks",
    "logarithmic_ticks",
    "nice_temperatures",
    "plain_number",
    "reading_scale",
    "reading_unit",
    "set_ticks",
    "symbol_of",
    "temperature_axis",
    "temperature_ticks_above",
]

FloatArray = NDArray[np.float64]
_PREFIXES = {-15: "f", -12: "p", -9: "n", -6: "µ", -3: "m", 0: "", 3: "k", 6: "M", 9: "G"}
_STEPS = (1.0, 2.0, 5.0)
POINTS_PER_MM = 72 / 25.4
MARKS_MM = 6.2
"""Room that `filling_marks` takes above axes, mm."""

_RAISED = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")
MINUS = "\N{MINUS SIGN}"
NOT_SEEN = 2.0
"""A reading below this many standard errors calls for an axis that is linear near zero."""


# ------------------------------------------------------------------------------------------------- units


@dataclass(frozen=True)
class AxisUnit:
    """A unit with its prefix.

    Attributes
    ----------
    name : str
        Such as ``"kΩ"``.
    size : float
        In ohm or siemens.
    """

    name: str
    size: float


def reading_unit(values: ArrayLike, quantity: str) -> AxisUnit:
    """Unit in which the largest reading is a number that a reader likes.

    Parameters
    ----------
    values : array_like, ohm or S
    quantity : {"rho_xx", "sigma_xx"}

    Returns
    -------
    AxisUnit
    """
    largest = float(np.abs(np.asarray(values, float)).max(initial=0.0))
    exponent = 3 * int(np.floor(np.log10(largest) / 3 + 1e-9)) if largest > 0 else 0
    if quantity == "rho_xx" and 0.1 <= largest < 1e4:
        exponent = 0
    exponent = min(max(exponent, min(_PREFIXES)), max(_PREFIXES))
    return AxisUnit(_PREFIXES[exponent] + ("Ω" if quantity == "rho_xx" else "S"), 10.0**exponent)


def symbol_of(series: TemperatureSeries) -> str:
    """Symbol of the readings as mathtext; a resistance where the geometry is unknown."""
    if series.quantity == "sigma_xx":
        return r"\sigma_{xx}" if series.geometry_known else r"G_{xx}"
    return r"\rho_{xx}" if series.geometry_known else r"R_{xx}"


# ------------------------------------------------------------------------------- linear-logarithmic readings


@dataclass(frozen=True)
class ReadingScale:
    """Axis of readings, logarithmic, and linear near zero where readings are not seen above their errors.

    Attributes
    ----------
    unit : AxisUnit
    linear_below : float
        Absolute readings below this are drawn on a linear scale; zero for a logarithmic axis. In `unit`.
    low, high : float
        Ends of the axis, in `unit`.
    """

    unit: AxisUnit
    linear_below: float
    low: float
    high: float

    def apply(self, axes: Axes, bare: bool = False) -> None:
        """Give axes this scale on the y axis, with ticks and plain numbers unless they are to be bare."""
        if self.linear_below:
            axes.set_yscale("symlog", linthresh=self.linear_below, linscale=0.8)
            axes.axhspan(-self.linear_below, self.linear_below, color=LINEAR_GREY, linewidth=0, zorder=0)
            axes.axhline(0.0, color="#9a9a9a", linewidth=0.5, zorder=0.5)
        else:
            axes.set_yscale("log")
        axes.set_ylim(self.low, self.high)
        major, minor = ([], []) if bare else self._ticks()
        set_ticks(axes, "y", major, [plain_number(tick) for tick in major], minor)

    def _ticks(self) -> tuple[list[float], list[float]]:
        if not self.linear_below:
            return logarithmic_ticks(self.low, self.high)
        up, up_minor = logarithmic_ticks(self.linear_below, max(self.high, self.linear_below * 1.01), False)
        down: list[float] = []
        if self.low < -self.linear_below:
            down = [-tick for tick in logarithmic_ticks(self.linear_below, -self.low, False)[0]]
        spare = [tick for tick in up if tick > 2.9 * self.linear_below]
        major = sorted({0.0, self.linear_below, *spare, *down})
        if self.low <= -self.linear_below:
            major = sorted({-self.linear_below, *major})
        return major, up_minor

    def words(self, prefix: str = "") -> str:
        """What a legend says about the linear part; the prefix stands before the unit."""
        return f"linear scale below {plain_number(self.linear_below)} {prefix}{self.unit.name}"


def reading_scale(series: TemperatureSeries, power: float = 0.0, coldest: float = 0.0) -> ReadingScale:
    """Axis for the readings of a series times T^power, excluded ones included.

    Parameters
    ----------
    series : TemperatureSeries
    power : float
    coldest : float, K
        Colder readings do not count.

    Returns
    -------
    ReadingScale
    """
    left_out = np.array([[p.temperature, p.value, p.error] for p in series.excluded], float).reshape(-1, 3)
    used = np.column_stack([series.temperature, series.value, series.error])
    temperature, value, error = np.concatenate([used, left_out]).T
    known = np.isfinite(value) & (temperature >= coldest)
    weight = temperature[known] ** power
    value, error = value[known] * weight, np.nan_to_num(error[known]) * weight
    unit = reading_unit(value, series.quantity)
    value, error = value / unit.size, error / unit.size
    faint = value <= NOT_SEEN * error
    highest = float((value + error).max())
    if not faint.any():
        return ReadingScale(unit, 0.0, float(value.min()) / 2.2, highest * 2.2)
    below = _round_up(float(NOT_SEEN * np.median(error[faint])))
    lowest = min(float((value - 1.3 * error).min()), -0.3 * below)
    return ReadingScale(unit, below, lowest, max(highest * 2.2, 2 * below))


def _round_up(value: float) -> float:
    decade = 10 ** np.floor(np.log10(value))
    return float(next(step * decade for step in (*_STEPS, 10.0) if step * decade >= value * (1 - 1e-9)))


# --------------------------------------------------------------------------------------------------- ticks


def logarithmic_ticks(low: float, high: float, fill: bool = True) -> tuple[list[float], list[float]]:
    """Major and minor ticks of a logarithmic axis.

    Parameters
    ----------
    low, high : float
        Ends, above zero.
    fill : bool
        Whether 2 and 5 become major ticks where there are fewer than two decades.

    Returns
    -------
    major, minor : list of float
        With more than seven decades every second or third decade is major.
    """
    decades = range(int(np.floor(np.log10(low) - 1e-9)), int(np.ceil(np.log10(high) + 1e-9)) + 1)
    inside = [10.0**k for k in decades if low <= 10.0**k * (1 + 1e-9) and 10.0**k <= high * (1 + 1e-9)]
    steps = [step * 10.0**k for k in decades for step in range(1, 10) if low <= step * 10.0**k <= high]
    if fill and len(inside) < 3:
        full = [step * 10.0**k for k in decades for step in _STEPS if low <= step * 10.0**k <= high]
        major = full if len(full) > 1 else _thinned(steps, 5)
        return major, [step for step in steps if step not in major]
    every = max(1, -(-len(inside) // 7))
    major = inside[::-1][::every][::-1]
    return major, [tick for tick in (inside if every > 1 else steps) if tick not in major]


def _thinned(values: Sequence[float], most: int) -> list[float]:
    return list(values[:: max(1, -(-len(values) // most))])


def nice_temperatures(low: float, high: float) -> list[float]:
    """Round temperatures between two ends, the roundest first."""
    decades = range(int(np.floor(np.log10(low))), int(np.ceil(np.log10(high))) + 1)
    found = []
    for steps in ((1.0,), (2.0, 5.0), (3.0,), (1.5, 7.0), (1.2, 2.5, 4.0, 6.0, 8.0)):
        found += [step * 10.0**k for k in decades for step in steps]
    return [value for value in found if low * (1 - 1e-9) <= value <= high * (1 + 1e-9)]


_TICK: dict[str, Any] = {
    "linestyle": "none", "color": "black", "markeredgewidth": 0.6, "clip_on": False, "zorder": 5,
}  # fmt: skip


def set_ticks(
    axes: Axes, which: str, places: Sequence[float], labels: Sequence[str], minor: Sequence[float] = ()
) -> None:
    """Fixed ticks; the minor ones as a single artist, which draws much faster.

    Parameters
    ----------
    axes : Axes
    which : {"x", "y"}
    places : sequence of float
    labels : sequence of str
    minor : sequence of float
    """
    axis = axes.xaxis if which == "x" else axes.yaxis
    axis.set_major_locator(FixedLocator(places))
    axis.set_major_formatter(FixedFormatter(labels))
    axis.set_minor_locator(NullLocator())
    edge = np.zeros(len(minor))
    look = _TICK | {"markersize": 1.5, "markeredgewidth": 0.4}
    if which == "x":
        axes.plot(minor, edge, transform=axes.get_xaxis_transform(), marker=TICKUP, **look)
    else:
        axes.plot(edge, minor, transform=axes.get_yaxis_transform(), marker=TICKRIGHT, **look)


def temperature_ticks_above(axes: Axes, exponent: float, width_mm: float, title: bool = False) -> None:
    """Ticks of temperature along the top, for axes whose x is a negative power of temperature.

    Parameters
    ----------
    axes : Axes
        With x limits set.
    exponent : float
        x = T^-exponent.
    width_mm : float, mm
        Width of the axes, so that labels keep apart.
    title : bool
        Whether to write what the ticks are.
    """
    low, high = axes.get_xlim()
    cold, warm = high ** (-1 / exponent), max(low, 1e-3 * high) ** (-1 / exponent)
    taken: list[tuple[float, float, float]] = []
    for temperature in nice_temperatures(cold, warm):
        at = (temperature**-exponent - low) / (high - low) * width_mm
        half = 0.72 * len(plain_number(temperature)) + 0.7
        free = all(abs(at - other) > half + room for _, other, room in taken)
        if free and half - 2.0 <= at <= width_mm - half + 2.0:
            taken.append((temperature, at, half))
    ticks = sorted(temperature for temperature, _, _ in taken)
    at_top = axes.get_xaxis_transform()
    places = [tick**-exponent for tick in ticks]
    axes.plot(places, np.ones(len(ticks)), transform=at_top, marker=TICKDOWN, markersize=2.6, **_TICK)
    for tick, place in zip(ticks, places, strict=True):
        axes.annotate(
            plain_number(tick), (place, 1.0), (0, 2.2), xycoords=at_top, textcoords="offset points",
            ha="center", va="bottom", annotation_clip=False,
        )  # fmt: skip
    if title:
        axes.annotate(
            "temperature (K)", (0.5, 1.0), (0, 3.9 * POINTS_PER_MM), xycoords="axes fraction",
            textcoords="offset points", ha="center", va="bottom", fontsize=8.0, annotation_clip=False,
        )  # fmt: skip


def temperature_axis(axes: Axes, low: float, high: float, width_mm: float) -> None:
    """Logarithmic x axis of temperature with plain numbers.

    Parameters
    ----------
    axes : Axes
    low, high : float, K
        Ends.
    width_mm : float, mm
        Width of the axes, so that labels keep apart.
    """
    axes.set_xscale("log")
    axes.set_xlim(low, high)
    places: list[float] = []
    closest = 6.0 / width_mm * np.log(high / low)
    for value in nice_temperatures(low, high):
        if all(abs(np.log(value / other)) > closest for other in places):
            places.append(value)
    major, minor = logarithmic_ticks(low, high)
    rest = [tick for tick in (*major, *minor) if tick not in places]
    set_ticks(axes, "x", sorted(places), [plain_number(value) for value in sorted(places)], rest)


def spread_labels(wanted: Sequence[float], half_widths: Sequence[float], room: float) -> list[float]:
    """Places of labels in one row, as near as can be to where they are wanted without touching.

    Parameters
    ----------
    wanted : sequence of float, mm
        Rising.
    half_widths : sequence of float, mm
        Half of the room that each label needs.
    room : float, mm
        Length of the row; where labels need more they stand evenly and overlap.

    Returns
    -------
    list of float, mm
    """
    need = 2 * sum(half_widths)
    shrink = min(1.0, room / need) if need else 1.0
    half = [shrink * width for width in half_widths]
    places = list(wanted)
    for _ in range(200):
        moved = 0.0
        for k in range(len(places) - 1):
            lack = half[k] + half[k + 1] - (places[k + 1] - places[k])
            if lack > 1e-6:
                places[k] -= lack / 2
                places[k + 1] += lack / 2
                moved = max(moved, lack)
        inside = [min(max(at, 0.3 * h), room - 0.3 * h) for at, h in zip(places, half, strict=True)]
        moved = max([moved, *(abs(a - b) for a, b in zip(inside, places, strict=True))])
        places = inside
        if moved < 1e-3:
            break
    return places


def filling_marks(axes: Axes, places: Sequence[float], labels: Sequence[str], width_mm: float) -> None:
    """Filling factors in a row above axes, with a line from each to its place on the axis.

    Parameters
    ----------
    axes : Axes
        With x limits set.
    places : sequence of float
        Rising.
    labels : sequence of str
    width_mm : float, mm
        Width of the axes.
    """
    low, high = axes.get_xlim()
    wanted = [(at - low) / (high - low) * width_mm for at in places]
    spread = spread_labels(wanted, [0.72 * len(label) + 0.7 for label in labels], width_mm)
    for at, shown, label in zip(wanted, spread, labels, strict=True):
        line = {"arrowstyle": "-", "linewidth": 0.4, "color": GREY, "shrinkA": 0, "shrinkB": 0}
        away = (shown - at) * POINTS_PER_MM, 2.6 * POINTS_PER_MM
        axes.annotate(
            label.replace("-", MINUS), (at / width_mm, 1.0), away,
            xycoords="axes fraction", textcoords="offset points", ha="center", va="bottom", arrowprops=line,
            annotation_clip=False,
        )  # fmt: skip


# ----------------------------------------------------------------------------------------- numbers in print


def plain_number(value: float) -> str:
    """A round number for a tick: ``0.05``, ``2000``, ``10⁶``, ``2×10⁻⁴``."""
    size = abs(value)
    if value and (size >= 1e5 or size < 0.999e-3):
        exponent = int(np.floor(np.log10(size) + 1e-9))
        lead = f"{value / 10.0**exponent:.6g}"
        head = {"1": "", "-1": "-"}.get(lead, f"{lead}×")
        return f"{head}10".replace("-", MINUS) + str(exponent).translate(_RAISED)
    return f"{value:.6g}".replace("-", MINUS)


def first_of(values: Iterable[Any]) -> list[Any]:
    """Values in order of first appearance, each once."""
    return list(dict.fromkeys(values))
