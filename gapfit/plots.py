"""Every figure: of one fit here, in `arrhenius` and in `marginals`; of a whole study in `surveys`."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from gapfit.arrhenius import arrhenius_figure
from gapfit.fit import GapFit
from gapfit.marginals import corner_figure, window_map_figure
from gapfit.measured import density_figure, traces_figure, width_figure
from gapfit.panels import (
    BAND_NAMES,
    MEDIAN,
    QUANTILES,
    Against,
    best_words,
    draw_band,
    draw_parts,
    draw_readings,
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
    size_mm,
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
LARGEST_LOG_ERROR = 0.5
HEAD_MM = 13.5


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
    inverse, height, spread = 1 / temperature[seen], np.log(value[seen]), (error / value)[seen]
    step = np.diff(inverse)
    gap = -2 * np.diff(height) / step
    return 2 / (inverse[1:] + inverse[:-1]), gap, np.abs(2 * np.hypot(spread[1:], spread[:-1]) / step)


def _by_temperature(series: TemperatureSeries) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Weighted means of readings at equal temperatures."""
    temperature, index = np.unique(series.temperature, return_inverse=True)
    weight = np.bincount(index, 1 / series.error**2)
    return temperature, np.bincount(index, series.value / series.error**2) / weight, weight**-0.5


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
    grid = temperature_grid(fit.series, 1.02)
    curve = fit.curves(grid)
    with np.errstate(divide="ignore", invalid="ignore"):
        local = np.where(curve.total > 0, 2 * grid * curve.slope / curve.total, np.nan)
    known = np.isfinite(local).mean(axis=0) > 0.9
    bands = np.nanquantile(local[:, known], QUANTILES, axis=0)
    figure = new_figure(width_mm, 20.0)
    axes = figure.add_subplot()
    axes.fill_between(grid[known], bands[0], bands[4], color=BAND_95, linewidth=0, label=BAND_NAMES[1])
    axes.fill_between(grid[known], bands[1], bands[3], color=BAND_68, linewidth=0, label=BAND_NAMES[0])
    axes.plot(grid[known], bands[2], color=BLUE, linewidth=1.2, label=MEDIAN)
    temperature, gap, error = finite_differences(fit.series)
    look = {"marker": "o", "markersize": 3.2, "color": BLACK, "markerfacecolor": "white", "linestyle": "none"}
    axes.errorbar(temperature, gap, error, label="neighbouring readings", elinewidth=0.7, zorder=4, **look)
    entries = {"neighbouring readings": axes.containers[0], MEDIAN: axes.lines[0]}
    entries["68 and 95 % bands"] = tuple(axes.collections[1::-1])
    if fit.gap.draws.size:
        low, high = fit.gap.interval(0.68).low, fit.gap.interval(0.68).high
        entries["gap, 68 % interval"] = axes.axhspan(
            low, high, facecolor="none", edgecolor=GREY, hatch="//////", linewidth=0.5
        )
    axes.axhline(0.0, color=GREY, linewidth=0.5, zorder=0)
    axes.set_ylim(*_slope_limits(bands, gap, error))
    temperature_axis(axes, float(grid[0]), float(grid[-1]), width_mm - LEFT_MM - RIGHT_MM)
    foot = legend_below(figure, entries)
    set_height(figure, foot + 9.0 + 52.0 + HEAD_MM)
    place(axes, LEFT_MM, foot + 9.0, width_mm - LEFT_MM - RIGHT_MM, 52.0)
    y = rf"local gap $-2\,$d$\,$ln$\,{symbol_of(fit.series)}\,/\,$d$(1/T)$ (K)"
    label_axes(axes, r"temperature $T$ (K)", y)
    head(figure, fit)
    return figure


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
    scale, curves = reading_scale(series, power), posterior_curves(fit)
    groups = readings_of(fit)
    figure = new_figure(width_mm, 20.0)
    beside = width_mm > 120
    panels = [figure.add_subplot() for _ in range(2)]
    room = (width_mm - LEFT_MM - RIGHT_MM - (LEFT_MM if beside else 0)) / (2 if beside else 1)
    for axes, exponent in zip(panels, (1 / 2, 1 / 3), strict=True):
        against = Against(scale, exponent, power)
        draw_band(axes, curves, against)
        draw_parts(axes, curves, fit, against)
        draw_readings(axes, groups, against)
        x = against.x(curves.temperature)
        margin = 0.03 * float(np.ptp(x))
        axes.set_xlim(x.min() - margin, x.max() + margin)
        scale.apply(axes)
    foot = legend_below(
        figure, legend_entries(panels[0], scale), best_words(fit, 140 if beside else 66), 4 if beside else 2
    )
    height, base = 50.0, foot + 9.0
    set_height(figure, base + (1 if beside else 2) * (height + 9.5) + (0 if beside else 9.5) + HEAD_MM - 1)
    for index, (axes, root) in enumerate(zip(panels, ("2", "3"), strict=True)):
        left = LEFT_MM + (index * (room + LEFT_MM) if beside else 0)
        bottom = base if beside else base + (1 - index) * (height + 18.0)
        place(axes, left, bottom, room, height)
        temperature_ticks_above(axes, 1 / int(root), room)
        name = rf"T^{{{power:g}}}\," if power not in (0, 1) else "T\\," if power else ""
        unit = f"K$^{{{power:g}}}$ " if power not in (0, 1) else "K " if power else ""
        label_axes(
            axes,
            rf"$T^{{-1/{root}}}$ (K$^{{-1/{root}}}$)",
            rf"${name}{symbol_of(series)}$ ({unit}{scale.unit.name})",
        )
        width, up = size_mm(figure)
        figure.text(
            (left + room / 2) / width,
            (bottom + height + 3.9) / up,
            r"temperature $T$ (K)",
            ha="center",
            va="bottom",
            fontsize=8.0,
        )
    head(figure, fit)
    return figure
