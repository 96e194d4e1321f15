"""Panels of one fit: readings, posterior band and contributions, drawn on axes that others have placed."""

from __future__ import annotations

from dataclasses import dataclass
from textwrap import fill
from typing import Any

import numpy as np
from numpy.typing import NDArray

from gapfit.fit import GapFit
from gapfit.hall import filling_label
from gapfit.mechanisms import Combination
from gapfit.rounding import round_limit, round_value
from gapfit.scales import MINUS, ReadingScale, first_of, plain_number
from gapfit.series import TemperatureSeries
from gapfit.style import (
    BAND_68,
    BAND_95,
    BLACK,
    BLUE,
    GREY,
    LINEAR_GREY,
    PART_LOOK,
    RIGHT_MM,
    Axes,
    ErrorbarContainer,
    Figure,
    Patch,
    size_mm,
)

__all__ = [
    "CONVENTION",
    "Against",
    "PosteriorCurves",
    "Readings",
    "answer",
    "draw_band",
    "draw_line",
    "draw_parts",
    "draw_readings",
    "has_gap",
    "head",
    "headline",
    "posterior_curves",
    "readings_of",
    "temperature_grid",
]

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

CONVENTION = r"gap $\Delta$ in $\exp(-\Delta/2k_{\mathrm{B}}T)$"
"""Printed wherever a gap is shown."""

EXCLUDED_MARKERS = ("D", "s", "p", "h")
LEGEND_LETTERS = 28
MEDIAN, BAND_NAMES, LINE = "posterior median", ("68 % posterior band", "95 % posterior band"), "straight line"
QUANTILES = (0.025, 0.16, 0.5, 0.84, 0.975)


@dataclass(frozen=True)
class PosteriorCurves:
    """Posterior of the curve on a grid of temperatures.

    Attributes
    ----------
    temperature : ndarray[n_temperature], K
    quantiles : ndarray[5, n_temperature], ohm or S
        At 2.5, 16, 50, 84 and 97.5 %.
    parts : dict of str to ndarray[n_temperature], ohm or S
        Median contributions of the combination of largest weight, where there are several.
    """

    temperature: FloatArray
    quantiles: FloatArray
    parts: dict[str, FloatArray]


def temperature_grid(series: TemperatureSeries, margin: float = 1.04) -> FloatArray:
    """Temperatures dense both in T and in 1/T, a little beyond the readings, K."""
    low, high = float(series.temperature[0]) / margin, float(series.temperature[-1]) * margin
    even = 1 / np.linspace(1 / high, 1 / low, 90)
    return np.asarray(np.sort(np.append(np.geomspace(low, high, 90)[1:-1], even)))


def posterior_curves(
    fit: GapFit, temperature: FloatArray | None = None, n_draw: int = 800
) -> PosteriorCurves:
    """Quantiles of the posterior curve, and the contributions of the best combination.

    Parameters
    ----------
    fit : GapFit
    temperature : ndarray[n_temperature], K, optional
        The grid of `temperature_grid` otherwise.
    n_draw : int

    Returns
    -------
    PosteriorCurves
    """
    grid = temperature_grid(fit.series) if temperature is None else temperature
    quantiles = np.quantile(fit.curves(grid, n_draw).total, QUANTILES, axis=0)
    best = fit.curves(grid, min(n_draw, 400), best_only=True)
    size = np.broadcast_shapes(best.total.shape)
    parts = {
        name: np.median(np.broadcast_to(part, size), axis=0)
        for name, part in best.parts.items()
        if np.any(part != 0)
    }
    return PosteriorCurves(grid, quantiles, parts if len(parts) > 1 else {})


def part_label(name: str, combination: Combination) -> str:
    """Name of a contribution in a combination, for legends."""
    if name == "activation":
        return "activation, rolling over" if "roll-over" in combination.mechanisms else "activation"
    if name == "hopping":
        return {"es": "Efros-Shklovskii hopping", "mott": "Mott hopping"}.get(combination.hopping, "hopping")
    if name == "nearest":
        return "nearest-neighbour hopping"
    for mechanism in ("leak", "offset", "power law", "constant"):
        if mechanism in combination.mechanisms:
            return mechanism
    return name


# ---------------------------------------------------------------------------------------------- the readings


@dataclass(frozen=True)
class Readings:
    """A group of readings that share a marker.

    Attributes
    ----------
    label : str
        Legend entry.
    marker : str
    filled : bool
    temperature : ndarray[n_reading], K
    value, error : ndarray[n_reading], ohm or S
    """

    label: str
    marker: str
    filled: bool
    temperature: FloatArray
    value: FloatArray
    error: FloatArray

    @property
    def look(self) -> dict[str, Any]:
        """Marker style."""
        face = BLACK if self.filled else "white"
        return {
            "marker": self.marker,
            "color": BLACK,
            "markerfacecolor": face,
            "linestyle": "none",
            "elinewidth": 0.7,
            "capsize": 0,
            "markersize": 3.2 if self.marker == "o" else 3.8,
        }


def readings_of(fit: GapFit) -> list[Readings]:
    """Readings inside the weighty windows, outside of them, and excluded ones by reason.

    Parameters
    ----------
    fit : GapFit

    Returns
    -------
    list of Readings
        Groups that are not empty.
    """
    series, inside = fit.series, fit.inclusion >= 0.5
    cut = "outside the pinned window" if "window" in fit.settings.pinned else "outside the weighty windows"
    groups = [
        _chosen(series, inside, "readings, standard errors", True),
        _chosen(series, ~inside, cut, False),
    ]
    reasons = first_of(point.reason for point in series.excluded)
    for index, reason in enumerate(reasons):
        points = [point for point in series.excluded if point.reason == reason]
        columns = np.array([[p.temperature, p.value, p.error] for p in points], float).T
        marker = EXCLUDED_MARKERS[index % len(EXCLUDED_MARKERS)]
        label = reason if reason.startswith("excluded") else f"excluded: {reason}"
        groups.append(Readings(label, marker, False, *columns))
    return [group for group in groups if group.temperature.size]


def _chosen(series: TemperatureSeries, chosen: BoolArray, label: str, filled: bool) -> Readings:
    numbers = (series.temperature[chosen], series.value[chosen], series.error[chosen])
    return Readings(label, "o", filled, *numbers)


# ----------------------------------------------------------------------------------------------- on the axes


@dataclass(frozen=True)
class Against:
    """What is drawn against what: readings times T^power against T^-exponent.

    Attributes
    ----------
    scale : ReadingScale
    exponent, power : float
    """

    scale: ReadingScale
    exponent: float = 1.0
    power: float = 0.0

    def x(self, temperature: FloatArray) -> FloatArray:
        """Abscissa of temperatures, K^-exponent."""
        return np.asarray(temperature**-self.exponent)

    def weight(self, temperature: FloatArray) -> FloatArray:
        """Factor from readings to ordinates."""
        return np.asarray(temperature**self.power / self.scale.unit.size)


def draw_readings(axes: Axes, groups: list[Readings], against: Against) -> None:
    """Readings with error bars.

    Parameters
    ----------
    axes : Axes
    groups : list of Readings
    against : Against
    """
    for group in groups:
        size = against.weight(group.temperature)
        shown = np.isfinite(group.value)
        label = fill(group.label, LEGEND_LETTERS)
        _draw_missing(axes, group, against.x(group.temperature[~shown]))
        axes.errorbar(
            against.x(group.temperature[shown]),
            (group.value * size)[shown],
            np.nan_to_num(group.error * size)[shown],
            label=label,
            zorder=4,
            **group.look,
        )


def _draw_missing(axes: Axes, group: Readings, x: FloatArray) -> None:
    """Points without a reading: their marker at the lower edge, at their temperature."""
    look = group.look
    style = {name: look[name] for name in ("marker", "color", "markerfacecolor", "markersize", "linestyle")}
    axes.plot(x, 0 * x + 0.035, transform=axes.get_xaxis_transform(), zorder=6, **style)


def draw_band(axes: Axes, curves: PosteriorCurves, against: Against) -> None:
    """Posterior median with its 68 and 95 % bands.

    Parameters
    ----------
    axes : Axes
    curves : PosteriorCurves
    against : Against
    """
    x = against.x(curves.temperature)
    lowest, low, median, high, highest = curves.quantiles * against.weight(curves.temperature)
    axes.fill_between(x, lowest, highest, color=BAND_95, linewidth=0, zorder=1, label=BAND_NAMES[1])
    axes.fill_between(x, low, high, color=BAND_68, linewidth=0, zorder=1.1, label=BAND_NAMES[0])
    axes.plot(x, median, color=BLUE, linewidth=1.2, zorder=3, label=MEDIAN)


def draw_parts(axes: Axes, curves: PosteriorCurves, fit: GapFit, against: Against) -> None:
    """Contributions of the combination of largest weight, thin, each with its own line style.

    Parameters
    ----------
    axes : Axes
    curves : PosteriorCurves
    fit : GapFit
    against : Against
    """
    combination, _ = fit.best
    for name, part in curves.parts.items():
        y = part * against.weight(curves.temperature)
        label = part_label(name, combination)
        axes.plot(against.x(curves.temperature), y, linewidth=0.8, zorder=2, label=label, **PART_LOOK[name])


def draw_line(axes: Axes, fit: GapFit, scale: ReadingScale) -> None:
    """What a straight line through the logarithms would have said: faint, over the window that it took."""
    line = fit.line
    if line is None:
        return
    inverse = np.linspace(1 / line.high_K, 1 / line.low_K, 40)
    margin = 0.12 * float(np.ptp(inverse))
    inverse = np.linspace(max(inverse[0] - margin, 1e-6), inverse[-1] + margin, 60)
    y = line.prefactor * np.exp(-line.gap_K / 2 * inverse) / scale.unit.size
    window = f"{plain_number(round(line.low_K, 3))}–{plain_number(round(line.high_K, 3))} K"
    label = f"{LINE}, {window}:\n{round_value(line.gap_K, line.gap_error_K).text} K"
    axes.plot(inverse, y, color=GREY, linewidth=0.7, linestyle=(0, (3, 3)), zorder=1.5, label=label)


def legend_entries(axes: Axes, scale: ReadingScale, prefix: str = "") -> dict[str, Any]:
    """Handles by label: readings, posterior, contributions, straight line, linear part of the scale.

    Parameters
    ----------
    axes : Axes
    scale : ReadingScale
    prefix : str
        Unit of what the readings were multiplied by.

    Returns
    -------
    dict of str to artist or tuple of artists
    """
    handles, labels = axes.get_legend_handles_labels()
    found = dict(zip(labels, handles, strict=True))
    readings = {label: handle for label, handle in found.items() if isinstance(handle, ErrorbarContainer)}
    bands = tuple(found[name] for name in BAND_NAMES)
    median = {MEDIAN: found[MEDIAN], "68 and 95 % bands": bands}
    line = {label: handle for label, handle in found.items() if label.startswith(LINE)}
    known = {*readings, *line, *BAND_NAMES, MEDIAN}
    parts = {label: handle for label, handle in found.items() if label not in known}
    linear = (
        {scale.words(prefix): Patch(facecolor=LINEAR_GREY, edgecolor="#9a9a9a")} if scale.linear_below else {}
    )
    return readings | linear | median | parts | line


# ------------------------------------------------------------------------------------------------- in words


def headline(fit: GapFit, letters: int = 52) -> str:
    """Filling, field and sample, for the head of a figure."""
    series = fit.series
    field = f" at {series.field_T:.4g} T" if np.isfinite(series.field_T) else ""
    words = f"filling {filling_label(series.filling)}{field}".replace("-", MINUS)
    words += f", {series.sample}" if series.sample else ""
    return words if len(words) <= letters else words[: letters - 1] + "…"


def has_gap(fit: GapFit) -> bool:
    """Whether there is a gap to be shown, resolved or not."""
    return bool(fit.gap.draws.size) and fit.verdict not in ("no activated regime", "insulating")


def answer(fit: GapFit) -> str:
    """Gap with its 68 % interval, or its limit, or that there is none."""
    record = fit.verdict_record
    if has_gap(fit):
        interval = fit.gap.interval(0.68)
        above, below = interval.high - fit.gap.median, fit.gap.median - interval.low
        return f"gap {round_value(fit.gap.median, above, below).text} K (68 %)"
    if np.isfinite(record.gap_lower95_K):
        return f"gap, if any, {round_limit('>', record.gap_lower95_K).text} K (95 %)"
    if np.isfinite(record.gap_upper95_K):
        return f"gap, if any, {round_limit('<', record.gap_upper95_K).text} K (95 %)"
    return "no gap to be read"


def verdict_words(fit: GapFit) -> str:
    """Verdict with the probability of an activated regime."""
    return f"{fit.verdict}; P(activated) = {fit.p_activated:.2f}"


def best_words(fit: GapFit, letters: int = 66) -> str:
    """Combination of largest weight, and the weight."""
    combination, weight = fit.best
    return fill(f"best combination: {combination.label} (weight {weight:.2f})", letters)


def head(figure: Figure, fit: GapFit) -> None:
    """Three lines at the top of a figure: what, gap with convention, verdict."""
    width, height = size_mm(figure)
    letters = 52 if width < 100 else 110
    for line, words in enumerate((headline(fit, letters), answer(fit), verdict_words(fit))):
        at = (3.0 / width, 1 - (1.2 + 3.9 * line) / height)
        figure.text(*at, words, ha="left", va="top", fontsize=8.0 if line < 2 else 7.0)
    figure.text(1 - RIGHT_MM / width, 1 - 5.1 / height, CONVENTION, ha="right", va="top")
