"""Figures of a whole study: all Arrhenius plots at a glance, gaps against filling, gaps across minima."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from gapfit.arrhenius import inverse_temperature_spans
from gapfit.errors import InputError
from gapfit.fit import GapFit
from gapfit.hall import filling_label
from gapfit.panels import (
    CONVENTION,
    Against,
    answer,
    draw_band,
    draw_readings,
    has_gap,
    legend_entries,
    posterior_curves,
    readings_of,
    temperature_grid,
)
from gapfit.scales import (
    MARKS_MM,
    MINUS,
    filling_marks,
    logarithmic_ticks,
    plain_number,
    reading_scale,
    reading_unit,
    set_ticks,
    symbol_of,
    temperature_ticks_above,
)
from gapfit.style import (
    BLACK,
    GREY,
    LEFT_MM,
    LOWER_LIMIT,
    ONE_COLUMN_MM,
    RIGHT_MM,
    SERIES_LOOK,
    TWO_COLUMNS_MM,
    UPPER_LIMIT,
    Axes,
    Figure,
    Line2D,
    MaxNLocator,
    label_axes,
    legend_below,
    new_figure,
    place,
    set_height,
    size_mm,
    styled,
)
from gapfit.units import coulomb_scale

__all__ = ["gap_across_figure", "gaps_figure", "overview_figure"]

FloatArray = NDArray[np.float64]
LINEAR = "linear scale near zero"
READINGS = ("readings, standard errors",)
LOG_FROM = 12.0
"""Gaps that differ by more than this factor get a logarithmic axis."""
SAME_FIELD = 0.01


# -------------------------------------------------------------------------------------------------- overview


@styled
def overview_figure(fits: Sequence[GapFit], width_mm: float = TWO_COLUMNS_MM) -> Figure:
    """Arrhenius plots of all fits side by side, over their warmer readings.

    Parameters
    ----------
    fits : sequence of GapFit
        At least one.
    width_mm : float, mm
        `TWO_COLUMNS_MM` or `ONE_COLUMN_MM`.

    Returns
    -------
    Figure
        Where most readings would huddle on the left, the coldest lie outside of a panel, which says how many.
    """
    units = [reading_unit(fit.series.value, fit.series.quantity) for fit in fits]
    names = [rf"${symbol_of(fit.series)}$ ({unit.name})" for fit, unit in zip(fits, units, strict=True)]
    figure = new_figure(width_mm, 20.0)
    panels = [figure.add_subplot() for _ in fits]
    entries: dict[str, Any] = {}
    for axes, fit in zip(panels, fits, strict=True):
        entries = _small_panel(axes, fit) | entries
    order = sorted(entries, key=lambda label: (label not in READINGS, label in LINEAR))
    foot = legend_below(
        figure, {label: entries[label] for label in order}, columns=2 if width_mm < 120 else 4
    )
    columns = _columns(len(fits), width_mm)
    gap, above, base = 11.5, 14.0, foot + 9.0
    tall = 30.0 if len(fits) <= 16 else 23.0
    room, block = (width_mm - RIGHT_MM - columns * gap) / columns, tall + above + 4.5
    set_height(figure, base + -(-len(fits) // columns) * block + 1.0)
    width, height = size_mm(figure)
    for index, (axes, fit) in enumerate(zip(panels, fits, strict=True)):
        left = gap + (index % columns) * (room + gap)
        bottom = base + ((len(fits) - 1) // columns - index // columns) * block
        place(axes, left, bottom, room, tall)
        temperature_ticks_above(axes, 1.0, room)
        axes.xaxis.set_major_locator(MaxNLocator(4, steps=[1, 2, 2.5, 5, 10]))
        at = ((left - 6.0) / width, (bottom + tall + 4.2) / height)
        figure.text(*at, _small_title(fit), ha="left", va="bottom", fontsize=6.0, linespacing=1.15)
        if index % columns == 0 or len(set(names)) > 1:
            label_axes(axes, None, names[index], y_mm=9.0)
    words = "inverse temperature 1/T (K⁻¹); above: temperature (K)"
    figure.text(0.5, (foot + 0.9) / height, words, fontsize=8.0, ha="center", va="bottom")
    figure.text(1 - RIGHT_MM / width, 1 - 1.0 / height, CONVENTION, ha="right", va="top")
    return figure


def _columns(count: int, width_mm: float) -> int:
    if width_mm < 120:
        return min(count, 2)
    return min(count, 3 if count <= 6 else 4 if count <= 16 else 5)


def _small_panel(axes: Axes, fit: GapFit) -> dict[str, Any]:
    """Readings and band of one fit; the handles by label."""
    span = inverse_temperature_spans(fit.series, ONE_COLUMN_MM)[0]
    scale = reading_scale(fit.series, coldest=1 / span.high)
    grid = temperature_grid(fit.series)
    shown = grid[(1 / grid > span.low) & (1 / grid < span.high)][::2]
    draw_band(axes, posterior_curves(fit, shown, 300), Against(scale))
    draw_readings(axes, readings_of(fit), Against(scale))
    axes.set_xlim(span.low, span.high)
    scale.apply(axes)
    hidden = int((1 / fit.series.temperature > span.high).sum())
    if hidden:
        words = f"{hidden} colder ▸"
        axes.text(0.97, 0.95, words, transform=axes.transAxes, ha="right", va="top", fontsize=6.0)
    entries = legend_entries(axes, scale)
    return {LINEAR if label == scale.words() else label: handle for label, handle in entries.items()}


def _small_title(fit: GapFit) -> str:
    series = fit.series
    field = f", {series.field_T:.4g} T" if np.isfinite(series.field_T) else ""
    name = f"{filling_label(series.filling)}{field}".replace("-", MINUS)
    return f"{name}\n{fit.verdict}\n{answer(fit).removesuffix(' (68 %)')}"


# ------------------------------------------------------------------------------------------------------ gaps


@styled
def gaps_figure(
    fits: Sequence[GapFit],
    permittivity: float | None = None,
    against: str = "filling",
    width_mm: float = ONE_COLUMN_MM,
) -> Figure:
    """Gaps against filling factor or field, with 68 and 95 % intervals, limits as arrows.

    Parameters
    ----------
    fits : sequence of GapFit
        At least one.
    permittivity : float, optional
        Relative permittivity, for gaps in units of the Coulomb scale: a second axis on the right where all
        fits share a field, else a second panel. Neither without it.
    against : {"filling", "field"}
        What is on the x axis.
    width_mm : float, mm
        `ONE_COLUMN_MM` or `TWO_COLUMNS_MM`.

    Returns
    -------
    Figure

    Raises
    ------
    InputError
        If `against` is neither of the two.
    """
    if against not in ("filling", "field"):
        raise InputError(f"gaps are drawn against 'filling' or 'field', not {against!r}")
    fields = np.array([abs(fit.series.field_T) for fit in fits])
    one_field = bool(np.ptp(fields) <= SAME_FIELD * fields.min())
    second = permittivity is not None and not one_field and bool(np.isfinite(fields).all())
    figure = new_figure(width_mm, 20.0)
    panels = [figure.add_subplot() for _ in range(2 if second else 1)]
    groups = _groups(fits, against)
    _draw_gaps(panels[0], groups, against, {})
    if second and permittivity is not None:
        _draw_gaps(panels[1], groups, against, {id(fit): _coulomb(fit, permittivity) for fit in fits})
    foot = legend_below(figure, _gap_legend(fits, groups), columns=2 if width_mm < 120 else 4)
    right = 13.0 if permittivity is not None and one_field else RIGHT_MM
    room, tall, base = width_mm - LEFT_MM - right, 46.0 if not second else 38.0, foot + 9.0
    set_height(figure, base + len(panels) * tall + (len(panels) - 1) * 1.5 + MARKS_MM + 5.0)
    for index, axes in enumerate(panels):
        place(axes, LEFT_MM, base + (len(panels) - 1 - index) * (tall + 1.5), room, tall)
        axes.tick_params(labelbottom=index == len(panels) - 1)
        axes.set_xlim(panels[0].get_xlim())
    name = "filling factor" if against == "filling" else "magnetic field (T)"
    label_axes(panels[0], None, "gap (K)")
    label_axes(panels[-1], name, _coulomb_label(permittivity) if second else None)
    if right > RIGHT_MM and permittivity is not None:
        _right_axis(panels[0], coulomb_scale(float(fields.mean()), permittivity), permittivity, room)
    at = _positions(fits, against)
    filling_marks(panels[0], list(at), list(at.values()), room)
    width, height = size_mm(figure)
    figure.text(1 - RIGHT_MM / width, 1 - 1.0 / height, CONVENTION, ha="right", va="top")
    return figure


def _groups(fits: Sequence[GapFit], against: str) -> dict[str, list[GapFit]]:
    """Fits that share a marker: those of one fixed field where fillings repeat, else all."""
    fillings = [fit.filling for fit in fits]
    if len(set(fillings)) == len(fillings):
        return {"": list(fits)}
    groups: dict[str, list[GapFit]] = {}
    for fit in sorted(fits, key=lambda one: (one.filling, one.series.field_T)):
        name = f"{fit.series.field_T:.3g} T" if against == "filling" else filling_label(fit.filling)
        groups.setdefault(name.replace("-", MINUS), []).append(fit)
    return groups


def _positions(fits: Sequence[GapFit], against: str) -> dict[float, str]:
    """Fillings by their place on the x axis, rising; none where a field has several fillings."""
    if against == "field" and len({round(abs(fit.series.field_T), 2) for fit in fits}) < len(fits):
        return {}
    found = {_x(fit, against): filling_label(fit.filling) for fit in fits}
    return {place_x: found[place_x] for place_x in sorted(found)}


def _x(fit: GapFit, against: str) -> float:
    return float(fit.filling) if against == "filling" else abs(fit.series.field_T)


def _coulomb(fit: GapFit, permittivity: float) -> float:
    return float(coulomb_scale(abs(fit.series.field_T), permittivity))


def _coulomb_label(permittivity: float | None) -> str:
    return rf"$\Delta\,/\,(e^2/4\pi\epsilon_0\epsilon\ell_B)$, $\epsilon$ = {permittivity:g}"


def _draw_gaps(
    axes: Axes, groups: Mapping[str, Sequence[GapFit]], against: str, scales: Mapping[int, float]
) -> None:
    """Medians with intervals, limits and absent gaps."""
    lowest, highest = np.inf, 0.0
    everything = [fit for fits in groups.values() for fit in fits]
    xs = [_x(fit, against) for fit in everything]
    margin = 0.06 * (max(xs) - min(xs)) or 0.1 * max(abs(max(xs)), 1.0)
    axes.set_xlim(min(xs) - margin, max(xs) + margin)
    for index, fits in enumerate(groups.values()):
        shift = (index - (len(groups) - 1) / 2) * 0.1 * margin if against == "filling" else 0.0
        for fit in fits:
            scale = scales.get(id(fit), 1.0)
            seen = _draw_gap(axes, fit, _x(fit, against) + shift, scale, SERIES_LOOK[index % 16])
            lowest, highest = min(lowest, seen[0]), max(highest, seen[1])
    if 0 < lowest < highest / LOG_FROM:
        axes.set_yscale("log")
        low, high = lowest / 1.6, highest * 1.6
        major, minor = logarithmic_ticks(low, high)
        axes.set_ylim(low, high)
        set_ticks(axes, "y", major, [plain_number(tick) for tick in major], minor)
    else:
        axes.set_ylim(0.0, 1.12 * highest or 1.0)


def _draw_gap(
    axes: Axes, fit: GapFit, x: float, scale: float, look: Mapping[str, Any]
) -> tuple[float, float]:
    """One gap; the range of ordinates that must be seen."""
    colour = look["color"]
    style: dict[str, Any] = {
        "marker": look["marker"],
        "color": colour,
        "markersize": 3.6,
        "linestyle": "none",
    }
    if has_gap(fit):
        wide, narrow = fit.gap.interval(0.95), fit.gap.interval(0.68)
        axes.plot([x, x], [wide.low / scale, wide.high / scale], color=colour, linewidth=0.6)
        axes.plot([x, x], [narrow.low / scale, narrow.high / scale], color=colour, linewidth=1.6)
        face = colour if fit.verdict == "activated" else "white"
        axes.plot(x, fit.gap.median / scale, markerfacecolor=face, zorder=4, **style)
        return wide.low / scale, wide.high / scale
    for limit, arrow in _limits(fit).items():
        axes.plot(x, limit / scale, **(style | arrow))
        return limit / scale, 1.3 * limit / scale
    style |= {"marker": "x", "transform": axes.get_xaxis_transform()}
    axes.plot(x, 0.03, **style)
    return np.inf, 0.0


def _limits(fit: GapFit) -> dict[float, dict[str, Any]]:
    """Limits of a gap and how they are drawn."""
    record = fit.verdict_record
    found = {record.gap_lower95_K: LOWER_LIMIT, record.gap_upper95_K: UPPER_LIMIT}
    return {limit: arrow for limit, arrow in found.items() if np.isfinite(limit)}


def _gap_legend(fits: Sequence[GapFit], groups: Mapping[str, Sequence[GapFit]]) -> dict[str, Any]:
    """Meaning of markers: groups, open symbols, limits, absent gaps."""
    marks: dict[str, Any] = {"color": BLACK, "linestyle": "none", "markersize": 3.6}
    entries: dict[str, Any] = {}
    for name, look in zip(groups, SERIES_LOOK * 4, strict=False):
        own = marks | {"marker": look["marker"], "color": look["color"]}
        entries[name or "activated"] = Line2D([], [], **own)
    bars = (Line2D([], [], color=BLACK, linewidth=width) for width in (1.6, 0.6))
    entries["68 % (thick) and 95 %"] = tuple(bars)
    others = sorted({fit.verdict for fit in fits if has_gap(fit)} - {"activated"})
    if others:
        entries[f"open: {', '.join(others)}"] = Line2D([], [], marker="o", markerfacecolor="white", **marks)
    absent = [list(_limits(fit).values()) for fit in fits if not has_gap(fit)]
    if any(LOWER_LIMIT in arrows for arrows in absent):
        entries["gap, if any, above (95 %)"] = Line2D([], [], **(marks | LOWER_LIMIT))
    if any(arrows[:1] == [UPPER_LIMIT] for arrows in absent):
        entries["gap, if any, below (95 %)"] = Line2D([], [], **(marks | UPPER_LIMIT))
    if any(not arrows for arrows in absent):
        entries["no gap to be read"] = Line2D([], [], marker="x", **marks)
    return entries


def _right_axis(axes: Axes, scale: float, permittivity: float, width_mm: float) -> None:
    """Second axis on the right in units of the Coulomb scale."""
    twin = axes.twinx()
    low, high = axes.get_ylim()
    twin.set_yscale(axes.get_yscale())
    twin.set_ylim(low / scale, high / scale)
    if axes.get_yscale() == "log":
        ticks = logarithmic_ticks(low / scale, high / scale)[0]
    else:
        ticks = [tick for tick in MaxNLocator(5).tick_values(0.0, high / scale) if tick <= high / scale]
    set_ticks(twin, "y", ticks, [plain_number(tick) for tick in ticks])
    twin.set_ylabel(_coulomb_label(permittivity))
    twin.yaxis.set_label_coords(1 + 8.5 / width_mm, 0.5)


# --------------------------------------------------------------------------------------------- across minima


@styled
def gap_across_figure(
    across: Mapping[str, Sequence[tuple[float, GapFit]]], width_mm: float = ONE_COLUMN_MM
) -> Figure:
    """Gaps beside the exact filling, median with 68 % interval.

    Parameters
    ----------
    across : mapping of str to sequence of (float, GapFit)
        For each filling: distance from it in filling factor, and the fit there.
    width_mm : float, mm
        `ONE_COLUMN_MM` or `TWO_COLUMNS_MM`.

    Returns
    -------
    Figure
        Fits without a gap are left out, unresolved ones open.
    """
    figure = new_figure(width_mm, 20.0)
    axes = figure.add_subplot()
    entries: dict[str, Any] = {}
    highest = 0.0
    for index, (name, fits) in enumerate(across.items()):
        look = SERIES_LOOK[index % 16]
        rows = [(x, fit) for x, fit in sorted(fits, key=lambda pair: pair[0]) if has_gap(fit)]
        if not rows:
            continue
        x = np.array([offset for offset, _ in rows])
        ends = np.array(
            [[f.gap.median, f.gap.interval(0.68).low, f.gap.interval(0.68).high] for _, f in rows]
        ).T
        sure = np.array([fit.verdict == "activated" for _, fit in rows])
        axes.fill_between(x, ends[1], ends[2], color=look["color"], alpha=0.18, linewidth=0)
        entries[name.replace("-", MINUS)] = axes.plot(
            x, ends[0], **(look | {"markerfacecolor": look["color"]})
        )[0]
        axes.plot(x[~sure], ends[0][~sure], **(look | {"linestyle": "none"}))
        highest = max(highest, float(ends[2].max()))
    axes.axvline(0.0, color=GREY, linewidth=0.5, linestyle=(0, (2, 2)), zorder=0)
    axes.set_ylim(0.0, 1.1 * highest or 1.0)
    foot = legend_below(
        figure, entries, "filling; bands 68 %, open symbols unresolved", 5 if width_mm < 120 else 9
    )
    set_height(figure, foot + 9.0 + 44.0 + 5.0)
    place(axes, LEFT_MM, foot + 9.0, width_mm - LEFT_MM - RIGHT_MM, 44.0)
    axes.xaxis.set_major_locator(MaxNLocator(6 if width_mm < 120 else 9))
    label_axes(axes, "distance from the exact filling factor", "gap (K)")
    width, height = size_mm(figure)
    figure.text(1 - RIGHT_MM / width, 1 - 1.0 / height, CONVENTION, ha="right", va="top")
    return figure
