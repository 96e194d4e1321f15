"""Figures of what was measured: sweeps with readings on them, widths of minima, routes to the density."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from gapfit.calibration import DensityEstimate
from gapfit.gather import Minimum
from gapfit.hall import filling_label
from gapfit.scales import (
    MARKS_MM,
    MINUS,
    AxisUnit,
    filling_marks,
    logarithmic_ticks,
    nice_temperatures,
    plain_number,
    reading_unit,
    set_ticks,
    temperature_axis,
)
from gapfit.series import TemperatureSeries
from gapfit.style import (
    BLACK,
    BLUE,
    LEFT_MM,
    ONE_COLUMN_MM,
    RIGHT_MM,
    SERIES_LOOK,
    TWO_COLUMNS_MM,
    Axes,
    Figure,
    FixedLocator,
    LogNorm,
    MaxNLocator,
    ScalarMappable,
    label_axes,
    legend_below,
    new_figure,
    place,
    set_height,
    size_mm,
    styled,
    temperature_colours,
    temperature_map,
)
from gapfit.traces import SAME_FIELD, Sweep, TraceFamily, by_fixed_field

__all__ = ["density_figure", "traces_figure", "width_figure"]

FloatArray = NDArray[np.float64]
MOST_POINTS = 1500
BAR_MM = 17.0
NEAR = 0.12
READING: dict[str, Any] = {
    "marker": "o", "markersize": 1.9, "color": BLACK, "markerfacecolor": "white", "markeredgewidth": 0.4,
    "linestyle": "none",
}  # fmt: skip


# ---------------------------------------------------------------------------------------------------- sweeps


@dataclass(frozen=True)
class _Panel:
    """Sweeps that are drawn together, and the series read on them."""

    sweeps: Sequence[Sweep]
    series: Sequence[TemperatureSeries]
    title: str


def _panels(family: TraceFamily, series: Sequence[TemperatureSeries]) -> list[_Panel]:
    """All field sweeps in one panel; gate and density sweeps in one for each field."""
    panels = []
    for field_T, taken in by_fixed_field(family.sweeps).items():
        sweeps = sorted(taken, key=lambda sweep: sweep.mean_temperature)
        if np.isnan(field_T):
            panels.append(_Panel(sweeps, series, ""))
        else:
            own = [one for one in series if abs(one.field_T / field_T - 1) < 2 * SAME_FIELD]
            panels.append(_Panel(sweeps, own, f"{field_T:.4g} T"))
    return panels


@styled
def traces_figure(
    family: TraceFamily,
    density: DensityEstimate,
    series: Sequence[TemperatureSeries] = (),
    width_mm: float = TWO_COLUMNS_MM,
) -> Figure:
    """Sweeps of all temperatures with the fillings along the top and the readings on them.

    Parameters
    ----------
    family : TraceFamily
    density : DensityEstimate
        Density along the sweeps.
    series : sequence of TemperatureSeries
        What was read on them.
    width_mm : float, mm
        `ONE_COLUMN_MM` or `TWO_COLUMNS_MM`.

    Returns
    -------
    Figure
        Field sweeps against field in one panel; gate and density sweeps against filling factor, one panel for
        each field. The Hall resistivity stands above the longitudinal one where it was measured.
    """
    panels = _panels(family, series)
    columns = 2 if width_mm > 120 and len(panels) > 1 else 1
    lines = -(-len(panels) // columns)
    main, hall = (42.0, 24.0) if len(panels) == 1 else (28.0, 16.0)
    hall = hall if family.has_hall else 0.0
    room = (width_mm - BAR_MM) / columns - LEFT_MM - 1.0
    marks = MARKS_MM if series else 0.0
    block = main + hall + 9.0 + marks + (4.0 if len(panels) > 1 else 0.0)
    figure = new_figure(width_mm, lines * block + 3.0)
    unit = reading_unit([np.nanmax(np.abs(one.signal)) for one in family.sweeps], family.sweeps[0].quantity)
    for index, panel in enumerate(panels):
        left = LEFT_MM + (index % columns) * (room + LEFT_MM + 1.0)
        bottom = (lines - 1 - index // columns) * block + 9.0
        axes = place(figure.add_subplot(), left, bottom, room, main)
        _draw_panel(axes, panel, density, unit, family)
        top = axes
        if hall:
            top = place(figure.add_subplot(), left, bottom + main, room, hall)
            _draw_hall(top, panel, density)
            top.set_xlim(axes.get_xlim())
        filling_marks(top, *_marks(panel), room)
        if panel.title:
            at = ((left + 0.5) / width_mm, (bottom + main + hall + marks + 1.6) / size_mm(figure)[1])
            figure.text(*at, panel.title, ha="left", va="bottom", fontsize=8.0)
    box = (width_mm - BAR_MM + 3.0, 9.0, 3.0, min(lines * block - 12.0 - marks, 70.0))
    _temperature_bar(figure, family, box)
    return figure


def _x_of(sweep: Sweep, density: DensityEstimate) -> FloatArray:
    return np.abs(sweep.field_T) if sweep.kind == "field" else density.filling(sweep)


def _colours(family: TraceFamily) -> Mapping[float, Any]:
    temperatures = np.unique(family.temperatures)
    return dict(zip(temperatures.tolist(), temperature_colours(temperatures), strict=True))


def _thinned(x: FloatArray, y: FloatArray) -> tuple[FloatArray, FloatArray]:
    every = max(1, -(-x.size // MOST_POINTS))
    return x[::every], y[::every]


def _draw_panel(
    axes: Axes, panel: _Panel, density: DensityEstimate, unit: AxisUnit, family: TraceFamily
) -> None:
    colours = _colours(family)
    for sweep in panel.sweeps:
        x, y = _thinned(_x_of(sweep, density), sweep.signal / unit.size)
        axes.plot(x, y, color=colours[sweep.mean_temperature], linewidth=0.6)
    x = np.concatenate([_x_of(sweep, density) for sweep in panel.sweeps])
    axes.set_xlim(_inside(panel, x))
    axes.set_ylim(_signal_limits(panel, density, unit))
    _draw_readings(axes, panel, unit)
    sigma = panel.sweeps[0].quantity == "sigma_xx"
    symbol = (r"\sigma_{xx}" if sigma else r"\rho_{xx}") if family.geometry.known else r"R_{xx}"
    kind = panel.sweeps[0].kind
    label_axes(
        axes,
        "magnetic field (T)" if kind == "field" else "filling factor",
        rf"${symbol}$ ({unit.name})",
    )


def _inside(panel: _Panel, x: FloatArray) -> tuple[float, float]:
    """Range of the abscissa; gate sweeps little beyond the fillings that were read."""
    low, high = float(x.min()), float(x.max())
    if panel.sweeps[0].kind != "field" and panel.series:
        fillings = [float(one.filling) for one in panel.series]
        low, high = max(low, min(fillings) - 0.5), min(high, max(fillings) + 0.5)
    return low, high


def _signal_limits(panel: _Panel, density: DensityEstimate, unit: AxisUnit) -> tuple[float, float]:
    """Limits that hold everything, on gate sweeps everything near the fillings that were read."""
    shown = []
    for sweep in panel.sweeps:
        x = _x_of(sweep, density)
        near = np.ones(x.size, dtype=bool)
        if sweep.kind != "field" and panel.series:
            fillings = np.array([float(one.filling) for one in panel.series])
            near = np.abs(x[:, None] - fillings).min(axis=1) < NEAR
        shown.append(sweep.signal[near] / unit.size)
    values = np.concatenate(shown)
    high, low = float(values.max()), float(np.quantile(values, 0.001))
    return min(low, 0.0) - 0.04 * high, 1.08 * high


def _draw_readings(axes: Axes, panel: _Panel, unit: AxisUnit) -> None:
    """Rings on the sweeps where readings of the same quantity were taken."""
    for one in panel.series:
        if one.quantity == panel.sweeps[0].quantity:
            x = np.full(one.n_point, one.field_T if panel.sweeps[0].kind == "field" else float(one.filling))
            axes.plot(x, one.value / unit.size, **READING)


def _draw_hall(axes: Axes, panel: _Panel, density: DensityEstimate) -> None:
    measured = [sweep for sweep in panel.sweeps if sweep.rho_xy_ohm is not None]
    temperatures = np.array([sweep.mean_temperature for sweep in measured])
    for sweep, colour in zip(measured, temperature_colours(temperatures), strict=True):
        x, y = _thinned(_x_of(sweep, density), np.asarray(sweep.rho_xy_ohm) / 1e3)
        axes.plot(x, y, color=colour, linewidth=0.6)
    every = np.concatenate([np.asarray(sweep.rho_xy_ohm) for sweep in measured]) / 1e3
    low, high = np.quantile(every, (0.005, 0.995))
    margin = 0.08 * (high - low) or 1.0
    axes.set_ylim(low - margin, high + margin)
    axes.yaxis.set_major_locator(MaxNLocator(4, prune="lower"))
    axes.tick_params(labelbottom=False)
    label_axes(axes, None, r"$\rho_{xy}$ (kΩ)")


def _marks(panel: _Panel) -> tuple[list[float], list[str]]:
    """Places and labels of the fillings of a panel."""
    field = panel.sweeps[0].kind == "field"
    found = {
        (one.field_T if field else float(one.filling)): filling_label(one.filling) for one in panel.series
    }
    places = sorted(found)
    return places, [found[place] for place in places]


def _temperature_bar(figure: Figure, family: TraceFamily, box: tuple[float, float, float, float]) -> None:
    low, high = float(family.temperatures.min()), float(family.temperatures.max())
    if not high > low * 1.001:
        low, high = low / 1.1, high * 1.1
    bar_axes: Any = place(figure.add_subplot(), *box)
    bar = figure.colorbar(ScalarMappable(LogNorm(low, high), temperature_map()), cax=bar_axes)
    ticks: list[float] = []
    for value in nice_temperatures(low, high):
        if all(abs(np.log(value / other)) * box[3] > 4.2 * np.log(high / low) for other in ticks):
            ticks.append(value)
    bar.set_ticks(ticks, labels=[plain_number(tick) for tick in ticks])
    bar.minorticks_off()
    bar_axes.spines[:].set_linewidth(0.6)
    bar.set_label("temperature (K)")


# ---------------------------------------------------------------------------------------------------- widths


@styled
def width_figure(minima: Sequence[Minimum], width_mm: float = ONE_COLUMN_MM) -> Figure:
    """Full width of the minima at half depth against temperature.

    Parameters
    ----------
    minima : sequence of Minimum
        Those without a width are left out.
    width_mm : float, mm
        `ONE_COLUMN_MM` or `TWO_COLUMNS_MM`.

    Returns
    -------
    Figure
        One panel for field sweeps, one for each field otherwise.
    """
    seen = [one for one in minima if np.isfinite(one.half_width)]
    groups: dict[str, list[Minimum]] = {}
    for one in seen:
        title = "" if one.abscissa == one.field_T else f"{one.field_T:.3g} T"
        groups.setdefault(title, []).append(one)
    fillings = sorted({one.filling for one in seen})
    look = {filling: SERIES_LOOK[index % len(SERIES_LOOK)] for index, filling in enumerate(fillings)}
    figure = new_figure(width_mm, 20.0)
    panels = [figure.add_subplot() for _ in groups]
    entries: dict[str, Any] = {}
    for filling in fillings:
        for axes, own in zip(panels, groups.values(), strict=True):
            rows = sorted((one.temperature_K, 2 * one.half_width) for one in own if one.filling == filling)
            if rows:
                label = filling_label(filling).replace("-", MINUS)
                entries[label] = axes.plot(*np.array(rows).T, **look[filling])[0]
    for axes, title in zip(panels, groups, strict=True):
        axes.text(0.03, 0.96, title, transform=axes.transAxes, ha="left", va="top", fontsize=8.0)
    columns = 5 if width_mm < 120 else 9
    foot = legend_below(figure, entries, "filling", columns)
    _arrange_widths(figure, panels, seen, foot)
    return figure


def _arrange_widths(figure: Figure, panels: Sequence[Axes], seen: Sequence[Minimum], foot: float) -> None:
    width, _ = size_mm(figure)
    columns = max(1, min(len(panels), 2 if width > 120 else 1))
    lines = max(1, -(-len(panels) // columns))
    tall = 46.0 if len(panels) < 2 else 32.0
    set_height(figure, foot + lines * (tall + 9.0) + 3.0)
    room = width / columns - LEFT_MM - RIGHT_MM
    temperatures = [one.temperature_K for one in seen]
    widths = [2 * one.half_width for one in seen]
    low, high = min(widths) / 1.3, max(widths) * (1.3 if len(panels) < 2 else 2.2)
    major, minor = logarithmic_ticks(low, high)
    for index, axes in enumerate(panels):
        bottom = foot + 9.0 + (lines - 1 - index // columns) * (tall + 9.0)
        place(axes, LEFT_MM + (index % columns) * width / columns, bottom, room, tall)
        temperature_axis(axes, min(temperatures) / 1.05, max(temperatures) * 1.05, room)
        axes.set_yscale("log")
        axes.set_ylim(low, high)
        set_ticks(axes, "y", major, [plain_number(tick) for tick in major], minor)
        label_axes(axes, "temperature (K)", "full width δν of minimum")


# --------------------------------------------------------------------------------------------------- density


@styled
def density_figure(density: DensityEstimate, width_mm: float = ONE_COLUMN_MM) -> Figure:
    """All routes to the density side by side, and the value that is used.

    Parameters
    ----------
    density : DensityEstimate
    width_mm : float, mm
        `ONE_COLUMN_MM` or `TWO_COLUMNS_MM`.

    Returns
    -------
    Figure
    """
    field = density.kind == "field"
    used = density.offset if field else density.slope
    error = float(np.sqrt(density.covariance[0 if field else 2]))
    size = 1e15
    rows = [(f"{route.name}, n = {route.n_used}", route.value, route.error) for route in density.routes]
    rows = [*rows, ("used", used, error)]
    left, tall = 30.0, 5.0 * len(rows) + 2.0
    figure = new_figure(width_mm, tall + 12.5)
    axes = place(figure.add_subplot(), left, 10.0, width_mm - left - RIGHT_MM - 2.0, tall)
    axes.axvspan((used - error) / size, (used + error) / size, color="#d3e3f1", linewidth=0)
    for height, (name, value, sigma) in enumerate(reversed(rows)):
        bar = sigma / size if np.isfinite(sigma) else 0.0
        colour = BLUE if name == "used" else BLACK
        face = colour if np.isfinite(sigma) else "white"
        axes.errorbar(
            value / size, height, xerr=bar, fmt="o", color=colour, markerfacecolor=face, elinewidth=0.8
        )
    axes.set_ylim(-0.6, len(rows) - 0.4)
    axes.yaxis.set_major_locator(FixedLocator(list(range(len(rows)))))
    axes.set_yticklabels([name for name, _, _ in reversed(rows)])
    axes.tick_params(axis="y", length=0)
    axes.xaxis.set_major_locator(MaxNLocator(4))
    unit = {"field": "m⁻²", "gate": "m⁻²/V"}.get(density.kind, "per unit")
    name = (
        "density"
        if field
        else "density by gate voltage"
        if density.kind == "gate"
        else "scale of the density"
    )
    axes.ticklabel_format(axis="x", useOffset=False)
    label_axes(axes, f"{name} (10¹⁵ {unit})", None, 4.5)
    return figure
