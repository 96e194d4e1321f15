"""The Arrhenius plot of one fit: readings against 1/T with posterior, contributions and residuals."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from gapfit.fit import GapFit
from gapfit.panels import (
    Against,
    Readings,
    best_words,
    draw_band,
    draw_line,
    draw_parts,
    draw_readings,
    head,
    legend_entries,
    posterior_curves,
    readings_of,
)
from gapfit.scales import reading_scale, symbol_of, temperature_ticks_above
from gapfit.series import TemperatureSeries
from gapfit.style import (
    BAND_68,
    BAND_95,
    BLACK,
    BLUE,
    LEFT_MM,
    ONE_COLUMN_MM,
    RIGHT_MM,
    Axes,
    Figure,
    FixedLocator,
    MaxNLocator,
    label_axes,
    legend_below,
    new_figure,
    place,
    set_height,
    size_mm,
    styled,
)

__all__ = ["Span", "arrhenius_figure", "inverse_temperature_spans"]

FloatArray = NDArray[np.float64]
LARGEST_RESIDUAL = 5.0
BREAK_FEWEST = 8
BREAK_GAP_MM = 1.6


# -------------------------------------------------------------------------------------------- Arrhenius plot


@dataclass(frozen=True)
class Span:
    """Part of the 1/T axis and its place on the page.

    Attributes
    ----------
    low, high : float, 1/K
    left_mm, width_mm : float, mm
    """

    low: float
    high: float
    left_mm: float
    width_mm: float


def inverse_temperature_spans(series: TemperatureSeries, width_mm: float) -> list[Span]:
    """One stretch of 1/T, or two where most readings would huddle in the first quarter of one.

    Parameters
    ----------
    series : TemperatureSeries
    width_mm : float, mm
        Width of the figure.

    Returns
    -------
    list of Span
    """
    temperatures = np.append(series.temperature, [point.temperature for point in series.excluded])
    inverse = np.sort(1 / np.unique(temperatures))
    room = width_mm - LEFT_MM - RIGHT_MM
    low, high = float(inverse[0]), float(inverse[-1])
    pad = 0.04 * (high - low)
    huddled = np.median(1 / series.temperature) - low < 0.25 * (high - low)
    if inverse.size < BREAK_FEWEST or not huddled:
        return [Span(max(low - pad, 0.0), high + pad, LEFT_MM, room)]
    index = int(np.ceil(0.68 * inverse.size))
    cut, start = inverse[index - 1], inverse[index]
    first, second = 0.66 * room, 0.34 * room - BREAK_GAP_MM
    near, far = 0.06 * (cut - low), 0.1 * (high - start)
    stop, restart = cut + min(near, 0.4 * (start - cut)), start - min(far, 0.4 * (start - cut))
    return [
        Span(max(low - near, 0.0), float(stop), LEFT_MM, first),
        Span(float(restart), high + far, LEFT_MM + first + BREAK_GAP_MM, second),
    ]


def _join(axes: list[Axes], height: float) -> None:
    """Marks of a broken axis between two axes side by side."""
    for one, side, at in zip(axes, ("right", "left"), (1.0, 0.0), strict=True):
        one.spines[side].set_visible(False)
        one.plot(
            [at], [height], transform=one.transAxes, clip_on=False, linestyle="none", color=BLACK,
            marker=[(-0.5, -1.0), (0.5, 1.0)], markersize=5, markeredgewidth=0.6, zorder=6,
        )  # fmt: skip
    axes[1].tick_params(left=False, labelleft=False)


@styled
def arrhenius_figure(fit: GapFit, width_mm: float = ONE_COLUMN_MM) -> Figure:
    """Readings against 1/T with posterior band, contributions of the best combination, and residuals below.

    Parameters
    ----------
    fit : GapFit
    width_mm : float, mm
        `ONE_COLUMN_MM` or `TWO_COLUMNS_MM`.

    Returns
    -------
    Figure

    Notes
    -----
    The axis of readings is linear near zero where readings are not seen above their errors, so that zero and
    negative readings stand where they are. The axis of 1/T is broken where most readings would huddle.
    """
    series, groups = fit.series, readings_of(fit)
    scale, curves, spans = (
        reading_scale(series),
        posterior_curves(fit),
        inverse_temperature_spans(series, width_mm),
    )
    against, figure = Against(scale), new_figure(width_mm, 20.0)
    upper = [figure.add_subplot() for _ in spans]
    lower = [figure.add_subplot() for _ in spans]
    for axes, below, span in zip(upper, lower, spans, strict=True):
        draw_line(axes, fit, scale)
        draw_band(axes, curves, against)
        draw_parts(axes, curves, fit, against)
        draw_readings(axes, groups, against)
        axes.set_xlim(span.low, span.high)
        scale.apply(axes, bare=span is not spans[0])
        _residuals(below, fit, groups)
        below.set_xlim(span.low, span.high)
        axes.tick_params(labelbottom=False)
    foot = legend_below(figure, legend_entries(upper[0], scale), best_words(fit))
    _arrange(figure, upper, lower, spans, foot)
    label_axes(upper[0], None, rf"${symbol_of(series)}$ ({scale.unit.name})")
    label_axes(lower[0], None, "residual\n(std. errors)")
    head(figure, fit)
    return figure


def _arrange(figure: Figure, upper: list[Axes], lower: list[Axes], spans: list[Span], foot: float) -> None:
    main, residual, base = 56.0, 17.0, foot + 9.0
    top = base + residual + 1.2 + main
    set_height(figure, top + 20.5)
    for axes, below, span in zip(upper, lower, spans, strict=True):
        place(below, span.left_mm, base, span.width_mm, residual)
        place(axes, span.left_mm, top - main, span.width_mm, main)
        temperature_ticks_above(axes, 1.0, span.width_mm)
        below.xaxis.set_major_locator(MaxNLocator(max(3, int(span.width_mm / 10)), steps=[1, 2, 2.5, 5, 10]))
    width, height = size_mm(figure)
    middle = (LEFT_MM + width - RIGHT_MM) / 2 / width
    look: dict[str, Any] = {"ha": "center", "va": "bottom", "fontsize": 8.0}
    figure.text(middle, (foot + 1.0) / height, "inverse temperature 1/T (K⁻¹)", **look)
    figure.text(middle, (top + 3.9) / height, "temperature (K)", **look)
    if len(spans) > 1:
        _join(upper, 1.0)
        _join(lower, 0.0)


def _residuals(axes: Axes, fit: GapFit, groups: list[Readings]) -> None:
    """Residuals from the posterior median in standard errors, far ones as triangles at the edge."""
    series = fit.series
    every = np.unique(np.concatenate([group.temperature for group in groups]))
    curve = fit.curves(every)
    median = np.median(curve.total, axis=0)
    slope = np.median(np.broadcast_to(curve.slope, curve.total.shape), axis=0)
    spread = np.interp(every, series.temperature, series.temperature_error)
    limit = 2.9
    axes.axhspan(-2, 2, color=BAND_95, linewidth=0)
    axes.axhspan(-1, 1, color=BAND_68, linewidth=0)
    axes.axhline(0.0, color=BLUE, linewidth=0.8)
    for group in groups:
        at = np.searchsorted(every, group.temperature)
        sigma = np.hypot(group.error, slope[at] * spread[at] / group.temperature)
        pull = (group.value - median[at]) / sigma
        known = np.isfinite(pull)
        limit = max(limit, float(np.abs(pull[known]).max(initial=0.0)) + 1.2)
        near = known & (np.abs(pull) <= LARGEST_RESIDUAL)
        look = group.look | {"markersize": 0.85 * group.look["markersize"]}
        axes.errorbar(1 / group.temperature[near], pull[near], np.ones(near.sum()), **look)
        for sign, marker in ((1, "^"), (-1, "v")):
            far = known & (sign * pull > LARGEST_RESIDUAL)
            edge = np.full(far.sum(), sign * LARGEST_RESIDUAL)
            arrow = _bare(look) | {"marker": marker, "markersize": 3.6}
            axes.plot(1 / group.temperature[far], edge, **arrow)
    limit = min(limit, LARGEST_RESIDUAL + 1)
    axes.set_ylim(-limit, limit)
    axes.yaxis.set_major_locator(FixedLocator([-4, -2, 0, 2, 4]))


def _bare(look: dict[str, Any]) -> dict[str, Any]:
    return {key: value for key, value in look.items() if key not in ("elinewidth", "capsize")}
