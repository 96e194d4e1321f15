"""Every figure: of one fit here, in `arrhenius` and in `marginals`; of a whole study in `surveys`."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from gapfit.arrhenius import arrhenius_figure
from gapfit.fit import GapFit
from gapfit.marginals import corner_figure, window_map_figure
from gapfit.measured import density_figure, traces_figure, width_figure
from gapfit.panels import (
    MEDIAN,
    QUANTILES,
    Against,
    best_words,
    draw_band,
    draw_parts,
    draw_readings,
    has_gap,
    head,
    legend_entries,
    posterior_curves,
    readings_of,
    temperature_grid,
)
from gapfit.scales import (
    reading_scale,
    symbol_of,
    temperature_axis,
    temperature_ticks_above,
)
from gapfit.series import TemperatureSeries
from gapfit.style import (
    BAND_68,
    BAND_95,
    BLACK,
    BLUE,
    GREY,
    LEFT_MM,
    ONE_COLUMN_MM,
    RIGHT_MM,
    TWO_COLUMNS_MM,
    Figure,
    figure_svg,
    label_axes,
    legend_below,
    new_figure,
    place,
    save_figure,
    set_height,
    styled,
)
from gapfit.surveys import gap_across_figure, gaps_figure, overview_figure

__all__ = [
    "ONE_COLUMN_MM",
    "TWO_COLUMNS_MM",
    "Figure",
    "arrhenius_figure",
    "corner_figure",
    "density_figure",
    "figure_svg",
    "gap_across_figure",
    "gaps_figure",
    "hopping_figure",
    "local_slope_figure",
    "overview_figure",
    "save_figure",
    "traces_figure",
    "width_figure",
    "window_map_figure",
]

FloatArray = NDArray[np.float64]
SEEN = 2.0
KNOWN_SHARE = 0.9
DIFFERENCES: dict[str, Any] = {
    "marker": "o", "markersize": 3.2, "color": BLACK, "markerfacecolor": "white", "linestyle": "none",
    "elinewidth": 0.7, "zorder": 4,
}  # fmt: skip
GAP_STRIP: dict[str, Any] = {
    "facecolor": "none", "edgecolor": GREY, "hatch": "//////", "linewidth": 0.5,
}  # fmt: skip
HEAD_MM = 13.5
ROOTS = (2, 3)


# ----------------------------------------------------------------------------------------------- local slope


def finite_differences(series: TemperatureSeries) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Local gap between neighbouring temperatures, -2 d ln(reading) / d(1/T).

    Parameters
    ----------
    series : TemperatureSeries

    Returns
    -------
    temperature, gap, error : ndarray[n_pair], K
        At the mean 1/T of each pair of readings seen above two standard errors; readings of one temperature
        are averaged first. Temperature errors are not included.
    """
    temperature, value, error = _by_temperature(series)
    seen = value > SEEN * error
    inverse, height, spread = 1 / temperature[seen], np.log(value[seen]), error[seen] / value[seen]
    step = np.diff(inverse)
    gap = -2 * np.diff(height) / step
    return 2 / (inverse[1:] + inverse[:-1]), gap, np.abs(2 * np.hypot(spread[1:], spread[:-1]) / step)


def _by_temperature(series: TemperatureSeries) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Weighted means of readings at equal temperatures."""
    temperature, index = np.unique(series.temperature, return_inverse=True)
    weight = np.bincount(index, 1 / series.error**2)
    mean = np.bincount(index, series.value / series.error**2) / weight
    return temperature, mean, np.asarray(1 / np.sqrt(weight))


@styled
def local_slope_figure(fit: GapFit, width_mm: float = ONE_COLUMN_MM) -> Figure:
    """Local gap -2 d ln(reading) / d(1/T) against temperature: a plateau where the reading is activated.

    Parameters
    ----------
    fit : GapFit
    width_mm : float, mm
        `ONE_COLUMN_MM` or `TWO_COLUMNS_MM`.

    Returns
    -------
    Figure
    """
    grid, bands = _local_gap(fit)
    temperature, gap, error = finite_differences(fit.series)
    figure = new_figure(width_mm, 20.0)
    axes = figure.add_subplot()
    outer = axes.fill_between(grid, bands[0], bands[4], color=BAND_95, linewidth=0)
    inner = axes.fill_between(grid, bands[1], bands[3], color=BAND_68, linewidth=0)
    (median,) = axes.plot(grid, bands[2], color=BLUE, linewidth=1.2)
    points = axes.errorbar(temperature, gap, error, **DIFFERENCES)
    entries: dict[str, Any] = {"neighbouring readings": points} if gap.size else {}
    entries |= {MEDIAN: median, "68 and 95 % bands": (inner, outer)}
    if has_gap(fit):
        ends = fit.gap.interval(0.68)
        entries["gap, 68 % interval"] = axes.axhspan(ends.low, ends.high, **GAP_STRIP)
    axes.axhline(0.0, color=GREY, linewidth=0.5, zorder=0)
    axes.set_ylim(*_slope_limits(bands, gap, error))
    room, height = width_mm - LEFT_MM - RIGHT_MM, 52.0
    temperature_axis(axes, fit.series.temperature[0] / 1.03, fit.series.temperature[-1] * 1.03, room)
    foot = legend_below(figure, entries)
    set_height(figure, foot + 9.0 + height + HEAD_MM)
    place(axes, LEFT_MM, foot + 9.0, room, height)
    y = rf"local gap $-2\,$d$\,$ln$\,{symbol_of(fit.series)}\,/\,$d$(1/T)$ (K)"
    label_axes(axes, "temperature (K)", y)
    head(figure, fit)
    return figure


def _local_gap(fit: GapFit) -> tuple[FloatArray, FloatArray]:
    """Temperatures and quantiles of the local gap, where nearly all draws of the reading are above zero."""
    grid = temperature_grid(fit.series, 1.03)
    curve = fit.curves(grid)
    with np.errstate(divide="ignore", invalid="ignore"):
        local = np.where(curve.total > 0, 2 * grid * curve.slope / curve.total, np.nan)
    known = np.isfinite(local).mean(axis=0) > KNOWN_SHARE
    return grid[known], np.nanquantile(local[:, known], QUANTILES, axis=0)


def _slope_limits(bands: FloatArray, gap: FloatArray, error: FloatArray) -> tuple[float, float]:
    """Limits that hold the 68 % band and all differences that are known to better than themselves."""
    good = error < np.maximum(np.abs(gap), 0.2 * np.nanmax(np.abs(bands[2]), initial=1e-3))
    values = np.concatenate([bands[1], bands[3], (gap - error)[good], (gap + error)[good], [0.0]])
    low, high = float(np.nanmin(values)), float(np.nanmax(values))
    margin = 0.08 * (high - low) or 1.0
    return low - margin, high + margin


# --------------------------------------------------------------------------------------------------- hopping


@styled
def hopping_figure(fit: GapFit, width_mm: float = TWO_COLUMNS_MM) -> Figure:
    """Reading times T^m against T^-1/2 and T^-1/3, in which variable-range hopping is a straight line.

    Parameters
    ----------
    fit : GapFit
    width_mm : float, mm
        `TWO_COLUMNS_MM`, or `ONE_COLUMN_MM` for panels above each other.

    Returns
    -------
    Figure
    """
    series, power = fit.series, fit.problem.reference.hopping_power
    scale, curves, groups = reading_scale(series, power), posterior_curves(fit), readings_of(fit)
    figure = new_figure(width_mm, 20.0)
    panels = [figure.add_subplot() for _ in ROOTS]
    for axes, root in zip(panels, ROOTS, strict=True):
        against = Against(scale, 1 / root, power)
        draw_band(axes, curves, against)
        draw_parts(axes, curves, fit, against)
        draw_readings(axes, groups, against)
        x = against.x(np.concatenate([curves.temperature, *(group.temperature for group in groups)]))
        margin = 0.03 * float(np.ptp(x))
        axes.set_xlim(x.min() - margin, x.max() + margin)
        scale.apply(axes)
    symbol, unit = _times_power(power)
    beside, height = width_mm > 120, 50.0
    words = best_words(fit, 140 if beside else 66)
    foot = legend_below(figure, legend_entries(panels[0], scale, unit), words, 4 if beside else 2)
    lines, step = (1 if beside else 2), height + 18.0
    set_height(figure, foot + 9.0 + lines * step - 9.5 + HEAD_MM)
    room = width_mm / (2 if beside else 1) - LEFT_MM - RIGHT_MM
    for index, (axes, root) in enumerate(zip(panels, ROOTS, strict=True)):
        left = LEFT_MM + (index * width_mm / 2 if beside else 0.0)
        place(axes, left, foot + 9.0 + (0.0 if beside else (1 - index) * step), room, height)
        temperature_ticks_above(axes, 1 / root, room, title=True)
        y = rf"${symbol}{symbol_of(series)}$ ({unit}{scale.unit.name})"
        label_axes(axes, rf"$T^{{-1/{root}}}$ (K$^{{-1/{root}}}$)", y)
    head(figure, fit)
    return figure


def _times_power(power: float) -> tuple[str, str]:
    """Symbol and unit of T^m, to stand before those of a reading."""
    if power in (0.0, 1.0):
        return ("T\\,", "K ") if power else ("", "")
    return rf"T^{{{power:g}}}\,", f"K$^{{{power:g}}}$ "
