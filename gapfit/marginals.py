"""The posterior of one fit in figures: corner plot of the best combination, map over temperature windows."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from gapfit.curve import log_prefactor
from gapfit.fit import GapFit
from gapfit.mechanisms import PARAMETERS, SLOT
from gapfit.panels import best_words, head
from gapfit.rounding import round_value
from gapfit.scales import logarithmic_ticks, plain_number, reading_unit, set_ticks, symbol_of
from gapfit.style import (
    BLACK,
    BLUE,
    ONE_COLUMN_MM,
    RIGHT_MM,
    TWO_COLUMNS_MM,
    Axes,
    Figure,
    FixedLocator,
    LogNorm,
    MaxNLocator,
    Normalize,
    label_axes,
    new_figure,
    place,
    plane_map,
    size_mm,
    styled,
)

__all__ = ["CornerColumn", "corner_columns", "corner_figure", "window_map_figure"]

FloatArray = NDArray[np.float64]
MOST_COLUMNS = 5
WIDE = 30.0
FEWEST_DRAWS = 20
IMPORTANCE = (
    "gap_K", "hopping_T0_K", "electron_T0_K", "leak", "offset", "background", "hopping", "level", "power",
    "nearest", "spread", "sharpness", "inflation",
)  # fmt: skip
"""Order in which parameters are shown while there is room."""


# --------------------------------------------------------------------------------------------------- corner


@dataclass(frozen=True)
class CornerColumn:
    """Draws of one quantity, ready for the corner plot.

    Attributes
    ----------
    symbol : str
        Mathtext without unit.
    unit : str
        May be empty.
    logarithmic : bool
        Whether the draws are log10 of the quantity.
    draws : ndarray[n_draw]
    """

    symbol: str
    unit: str
    logarithmic: bool
    draws: FloatArray

    @property
    def label(self) -> str:
        """Axis label with unit."""
        unit = f" ({self.unit})" if self.unit else ""
        return rf"log$_{{10}}$ {self.symbol}{unit}" if self.logarithmic else f"{self.symbol}{unit}"

    @property
    def limits(self) -> tuple[float, float]:
        """Central 99 % of the draws."""
        low, high = np.quantile(self.draws, (0.005, 0.995))
        return float(low), float(high)

    @property
    def summary(self) -> str:
        """Median with distances to the ends of the 68 % interval."""
        low, middle, high = np.quantile(self.draws, (0.16, 0.5, 0.84))
        return round_value(middle, high - middle, middle - low).text


def corner_columns(fit: GapFit, most: int = MOST_COLUMNS) -> list[CornerColumn]:
    """Gap, prefactor and the most telling other parameters of the combination of largest weight.

    Parameters
    ----------
    fit : GapFit
    most : int
        Largest number of columns.

    Returns
    -------
    list of CornerColumn
        From the draws of that combination. Quantities of wide posterior as logarithms to base ten; quantities
        that do not vary are left out.
    """
    combination, _ = fit.best
    chosen = fit.draws.combination == fit.draws.combinations.index(combination)
    coordinates = fit.draws.coordinates[chosen]
    columns = []
    names = [PARAMETERS[slot].name for slot in combination.slots if PARAMETERS[slot].name in IMPORTANCE]
    for name in sorted(names, key=IMPORTANCE.index):
        parameter = PARAMETERS[SLOT[name]]
        values = parameter.natural(coordinates[:, SLOT[name]])
        columns.append(_column(parameter.symbol, parameter.unit, values, fit))
        if name == "gap_K":
            prefactor = np.exp(log_prefactor(coordinates, fit.problem.reference))
            columns.append(_column(rf"${symbol_of(fit.series)[:-5]}_0$", "reading", prefactor, fit))
    return [column for column in columns if _varies(column.draws)][:most]


def _varies(draws: FloatArray) -> bool:
    low, high = np.quantile(draws, (0.005, 0.995))
    return bool(np.isfinite(high - low) and high - low > 1e-9 * max(abs(low), abs(high)))


def _column(symbol: str, unit: str, values: FloatArray, fit: GapFit) -> CornerColumn:
    if unit == "reading":
        scale = reading_unit(np.median(values), fit.series.quantity)
        values, unit = values / scale.size, scale.name
    low, high = np.quantile(values, (0.025, 0.975))
    if low > 0 and high > WIDE * low:
        return CornerColumn(symbol, unit, True, np.log10(values))
    return CornerColumn(symbol, unit, False, values)


@styled
def corner_figure(fit: GapFit, width_mm: float = ONE_COLUMN_MM) -> Figure:
    """Corner plot of the combination of largest weight.

    Parameters
    ----------
    fit : GapFit
    width_mm : float, mm
        `ONE_COLUMN_MM` (at most four quantities) or `TWO_COLUMNS_MM` (five).

    Returns
    -------
    Figure
        Contours hold 39 % and 86 % of the draws (one and two standard deviations of a normal distribution).
    """
    columns = corner_columns(fit, 4 if width_mm < 120 else MOST_COLUMNS)
    count, left, foot, top, gap, rows = max(len(columns), 1), 14.0, 10.5, 23.0, 1.8, 3.4
    cell = (width_mm - left - RIGHT_MM - gap * (count - 1)) / count
    tall = min(cell, 34.0)
    figure = new_figure(width_mm, foot + top + count * tall + (count - 1) * rows)
    for row, low in enumerate(columns):
        for column in range(row + 1):
            axes = figure.add_subplot()
            bottom = foot + (count - 1 - row) * (tall + rows)
            place(axes, left + column * (cell + gap), bottom, cell, tall)
            if row == column:
                _histogram(axes, low, row == count - 1)
            else:
                _contours(axes, columns[column], low)
            _corner_ticks(axes, columns[column], low, (row == count - 1, column == 0 and row > 0))
    _corner_head(figure, fit)
    return figure


def _corner_head(figure: Figure, fit: GapFit) -> None:
    width, height = size_mm(figure)
    head(figure, fit)
    words = best_words(fit, 62 if width < 120 else 130)
    figure.text(3.0 / width, 1 - 12.9 / height, words, ha="left", va="top", linespacing=1.15)


def _histogram(axes: Axes, column: CornerColumn, last: bool) -> None:
    count, edges = np.histogram(column.draws, bins=36, range=column.limits)
    axes.stairs(count, edges, fill=True, color="#d3e3f1")
    axes.stairs(count, edges, color=BLUE, linewidth=0.8)
    for level in np.quantile(column.draws, (0.16, 0.5, 0.84)):
        axes.axvline(level, color=BLACK, linewidth=0.5, linestyle=(0, (3, 2)))
    axes.set_ylim(0, 1.08 * count.max())
    side, at = ("right", 1.0) if last else ("left", 0.0)
    axes.annotate(
        column.summary, (at, 1.0), (0, 1.5), xycoords="axes fraction", textcoords="offset points",
        ha=side, va="bottom", fontsize=6.0,
    )  # fmt: skip


def _contours(axes: Axes, across: CornerColumn, up: CornerColumn) -> None:
    from corner import hist2d

    hist2d(
        across.draws, up.draws, ax=axes, bins=26, range=[across.limits, up.limits], smooth=1.2, color=BLUE,
        levels=(1 - np.exp(-0.5), 1 - np.exp(-2.0)), plot_datapoints=False, plot_density=False,
        fill_contours=True, contour_kwargs={"linewidths": 0.7},
        contourf_kwargs={"colors": ["white", "#d3e3f1", "#9dc1e0"]},
    )  # fmt: skip


def _corner_ticks(axes: Axes, across: CornerColumn, up: CornerColumn, outer: tuple[bool, bool]) -> None:
    axes.set_xlim(across.limits)
    axes.xaxis.set_major_locator(FixedLocator(_inner_ticks(across)))
    axes.tick_params(labelbottom=outer[0], labelleft=outer[1], labelsize=6.0)
    if across is up:
        axes.yaxis.set_major_locator(FixedLocator([]))
    else:
        axes.set_ylim(up.limits)
        axes.yaxis.set_major_locator(FixedLocator(_inner_ticks(up)))
    label_axes(axes, across.label if outer[0] else None, up.label if outer[1] else None, 5.0, 10.5)


def _inner_ticks(column: CornerColumn) -> list[float]:
    """Two or three ticks away from the ends, where labels of neighbours would meet."""
    low, high = column.limits
    margin = 0.14 * (high - low)
    ticks = MaxNLocator(3).tick_values(low, high)
    return [float(tick) for tick in ticks if low + margin <= tick <= high - margin]


# ------------------------------------------------------------------------------------------------ window map


@styled
def window_map_figure(fit: GapFit, width_mm: float = TWO_COLUMNS_MM) -> Figure:
    """Median gap, and posterior weight, over the lower and upper end of the temperature window.

    Parameters
    ----------
    fit : GapFit
    width_mm : float, mm
        `TWO_COLUMNS_MM`, or `ONE_COLUMN_MM` for panels above each other.

    Returns
    -------
    Figure
        Windows with fewer than twenty activated draws are pale on the left, those without draws on the right;
        windows that are too short to be fitted are hatched; a ring marks the window of largest weight. The
        colours of the gap span its 95 % interval, so that even colours mean that the window does not matter.
    """
    lower, upper, gap, weight = _window_table(fit)
    beside = width_mm > 120
    left, foot, bar, height = 14.0, 11.0, 14.0, 48.0
    room = (width_mm / (2 if beside else 1)) - left - bar - 3.0
    figure = new_figure(width_mm, (1 if beside else 2) * (height + foot) + 16.0)
    names = ("median gap (K)", "weight of the window (log. scale)")
    panels = (("gap", gap), ("weight", weight))
    for index, ((name, values), words) in enumerate(zip(panels, names, strict=True)):
        corner = (index * width_mm / 2 if beside else 0.0, 0.0 if beside else (1 - index) * (height + foot))
        axes = place(figure.add_subplot(), corner[0] + left, corner[1] + foot, room, height)
        _plane(axes, name, _colour_scale(fit, name, values), values, np.isfinite(weight))
        best = np.unravel_index(np.nanargmax(weight), weight.shape)
        axes.plot(
            best[1], best[0], "o", markersize=5, markerfacecolor="none", color="#d62300", markeredgewidth=1.1
        )
        _window_axes(axes, lower, upper, (room, height))
        if len(axes.images) > 1:
            _colour_bar(figure, axes, words, (corner[0] + left + room + 1.8, corner[1] + foot, 3.0, height))
    head(figure, fit)
    return figure


def _window_table(fit: GapFit) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Lower and upper ends of the windows, and median gap and weight by [upper, lower] end; NaN without."""
    windows, temperature = fit.problem.windows, fit.series.temperature
    lows, column = np.unique(windows.low, return_inverse=True)
    highs, row = np.unique(windows.high, return_inverse=True)
    gap = np.full((highs.size, lows.size), np.nan)
    weight = gap.copy()
    weight[row, column] = np.bincount(fit.draws.window, minlength=windows.n_window) / fit.draws.window.size
    activated, values = fit.draws.activated, fit.draws.natural("gap_K") * fit.scale
    for window in np.unique(fit.draws.window):
        here = activated & (fit.draws.window == window)
        if here.sum() >= FEWEST_DRAWS:
            gap[row[window], column[window]] = np.median(values[here])
    return temperature[lows], temperature[highs - 1], gap, weight


def _colour_scale(fit: GapFit, name: str, values: FloatArray) -> Normalize | None:
    """Range of colours of a quantity, None where no window has a value."""
    known = values[values > 0]
    if not known.size:
        return None
    low, high = float(known.min()), float(known.max())
    if name == "weight":
        return LogNorm(min(low, 0.5 * high), high)
    interval = fit.gap.interval(0.95)
    if np.isfinite(interval.low):
        low, high = min(low, interval.low), max(high, interval.high)
    return Normalize(low, max(high, low * 1.001))


def _plane(
    axes: Axes, name: str, norm: Normalize | None, values: FloatArray, possible: NDArray[np.bool_]
) -> None:
    """Colours over a plane; pale where there is no value, hatched where there is no window."""
    axes.patch.set(facecolor="white", hatch="////", edgecolor="#bdbdbd", linewidth=0)
    pale = np.where(possible[:, :, None], np.array([0.94, 0.94, 0.94, 1.0]), 0.0)
    look: dict[str, Any] = {"origin": "lower", "aspect": "auto", "interpolation": "nearest"}
    axes.imshow(pale, **look)
    if norm is None:
        at: dict[str, Any] = {"transform": axes.transAxes, "ha": "center", "va": "center"}
        axes.text(0.5, 0.5, "no window has\nactivated draws", **at, backgroundcolor="white")
    else:
        shown = np.where(values > 0, values, np.nan)
        axes.imshow(shown, cmap=plane_map(name), norm=norm, **look)


def _window_axes(axes: Axes, lower: FloatArray, upper: FloatArray, size: tuple[float, float]) -> None:
    """Ticks at ends of windows, as many as there is room for."""
    for which, ends, room, least in (("x", lower, size[0], 7.5), ("y", upper, size[1], 3.6)):
        every = max(1, int(np.ceil(ends.size * least / room)))
        places = range(0, ends.size, every) if which == "x" else range(ends.size - 1, -1, -every)
        set_ticks(axes, which, list(places), [plain_number(float(f"{ends[k]:.3g}")) for k in places])
    label_axes(axes, "lower end of the window (K)", "upper end of the window (K)", y_mm=10.5)


def _colour_bar(figure: Figure, axes: Axes, words: str, box: tuple[float, float, float, float]) -> None:
    bar_axes: Any = place(figure.add_subplot(), *box)
    image = axes.images[-1]
    bar = figure.colorbar(image, cax=bar_axes)
    low, high = (float(end or 0.0) for end in image.get_clim())
    if isinstance(image.norm, LogNorm):
        ticks = logarithmic_ticks(low, high)[0]
    else:
        ticks = [tick for tick in MaxNLocator(5).tick_values(low, high) if low <= tick <= high]
    bar.set_ticks(ticks, labels=[plain_number(tick) for tick in ticks])
    bar.minorticks_off()
    bar_axes.spines[:].set_linewidth(0.6)
    bar.set_label(words)
