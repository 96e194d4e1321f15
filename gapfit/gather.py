"""From single readings to temperature series: directions joined, quantity chosen, flags set."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from gapfit.errors import NotEnoughData
from gapfit.hall import plateau_resistance
from gapfit.series import ExcludedPoint, Quantity, ReadingKind, TemperatureSeries, high_reference, make_series
from gapfit.traces import Sweep, TraceFamily, conductivity, conductivity_error

__all__ = ["Minimum", "ReadingSettings", "chosen_quantity", "flank_level", "gathered_series"]

FloatArray = NDArray[np.float64]

SIGMA_RATIO = 0.2
"""sigma_xx is fitted once rho_xx exceeds this share of rho_xy: there the Arrhenius plots part (common
practice, no source)."""

SAME_TEMPERATURE = 0.02
"""Readings of one group are joined where their temperatures agree to this share."""

MATTERS_SIGMA, MATTERS_RELATIVE, MATTERS_SHARE = 3.0, 0.05, 0.25
"""Another kind of reading matters where it differs by so many standard errors, and by this part of the
reading, at this share of the points."""


@dataclass(frozen=True)
class ReadingSettings:
    """How minima are read.

    Attributes
    ----------
    reading : {"exact", "minimum", "mean"}
        At the exact filling, at the local minimum, or averaged over a small window.
    quantity : {"auto", "rho_xx", "sigma_xx"}
        ``"auto"``: sigma_xx once rho_xx exceeds 0.2 rho_xy at any reading of a series.
    window : float
        Half-width of the average, relative to the filling.
    relative_reading_error : float
        Relative error of a reading from gain and drift, which the trace itself cannot show.
    temperature_relative_error : float, optional
        Relative error of each temperature; None means unknown, taken as zero and flagged.
    sample, cooldown : str
        Names.
    """

    reading: ReadingKind = "exact"
    quantity: Literal["auto", "rho_xx", "sigma_xx"] = "auto"
    window: float = 0.002
    relative_reading_error: float = 0.0
    temperature_relative_error: float | None = None
    sample: str = ""
    cooldown: str = ""


@dataclass(frozen=True)
class Minimum:
    """The readings of one filling on one sweep.

    Attributes
    ----------
    filling : Fraction
    group : int
        Sweeps taken together have one number.
    direction : str
        Sweep direction.
    temperature_K, temperature_error_K : float, K
        Where the reading was taken, with scatter and drift over its window.
    field_T : float, T
        Field there.
    abscissa : float, T, V or m^-2
        Place on the sweep.
    exact, exact_error : float, ohm or S
        At the exact filling.
    minimum, minimum_error, minimum_filling : float
        At the local minimum and where that is; NaN where there is none.
    mean, mean_error : float, ohm or S
        Averaged over the small window.
    half_width : float
        Half of the full width in filling factor at half depth, the depth counted from the lower shoulder;
        NaN where there is no minimum, or the sweep ends before one of its sides.
    depth : float, ohm or S
        Depth below the lower shoulder; NaN where there is no minimum.
    rho_xy_ohm : float, ohm
        Measured Hall resistivity there, NaN if none.
    at_edge : bool
        Whether the sweep ends within the window.
    one_direction : bool
        Whether only one field direction exists there.
    """

    filling: Fraction
    group: int
    direction: str
    temperature_K: float
    temperature_error_K: float
    field_T: float
    abscissa: float
    exact: float
    exact_error: float
    minimum: float
    minimum_error: float
    minimum_filling: float
    mean: float
    mean_error: float
    half_width: float
    depth: float
    rho_xy_ohm: float
    at_edge: bool
    one_direction: bool


def gathered_series(
    minima: Sequence[Minimum],
    missed: Sequence[ExcludedPoint],
    sweep: Sweep,
    family: TraceFamily,
    settings: ReadingSettings,
    place: float | None = None,
) -> TemperatureSeries:
    """Temperature series of the readings of one filling.

    Parameters
    ----------
    minima : sequence of Minimum
        Readings of one filling on the sweeps of the same contacts, current and fixed field.
    missed : sequence of ExcludedPoint
        Sweeps without a reading.
    sweep : Sweep
        One of the sweeps, for contacts and current.
    family : TraceFamily
        Geometry, and how the sweeps were joined.
    settings : ReadingSettings
        How to read.
    place : float, optional
        Filling factor where the readings were taken, where that is not the exact one.

    Returns
    -------
    TemperatureSeries

    Raises
    ------
    NotEnoughData
        If there are readings at fewer than three temperatures.
    """
    usable = [one for one in minima if np.isfinite(_chosen(one, settings.reading)[0])]
    unread = tuple(
        ExcludedPoint(one.temperature_K, float("nan"), float("nan"), "no local minimum")
        for one in minima
        if one not in usable
    )
    if not usable:
        reasons = ", ".join(dict.fromkeys(point.reason for point in missed)) or "no reading"
        raise NotEnoughData(f"no reading on any sweep ({reasons})")
    filling = usable[0].filling
    points = _joined_directions(usable, settings.reading)
    hall = abs(plateau_resistance(place or filling))
    rho_xy = np.where(np.isfinite(points.rho_xy), points.rho_xy, hall)
    quantity = "sigma_xx" if sweep.quantity == "sigma_xx" else None
    quantity = quantity or chosen_quantity(points.value, rho_xy, settings.quantity)
    value, error = points.value, points.error
    if quantity == "sigma_xx" and sweep.quantity == "rho_xx":
        value, error = conductivity(value, rho_xy), conductivity_error(value, rho_xy, error)
    temperature_error = None
    if settings.temperature_relative_error is not None:
        temperature_error = np.hypot(
            points.temperature_error, settings.temperature_relative_error * points.temperature
        )
    background, background_slope = flank_level(usable)
    if quantity == "sigma_xx" and sweep.quantity == "rho_xx" and np.isfinite(background):
        background = float(conductivity(background, float(np.median(rho_xy))))
    directions = {one.direction for one in usable}
    return make_series(
        points.temperature,
        value,
        error,
        filling=filling,
        temperature_error=temperature_error,
        field_T=float(np.mean([one.field_T for one in usable])),
        quantity=quantity,
        hall_resistance_ohm=float(np.median(rho_xy)),
        reading=settings.reading,
        error_source="trace",
        background=background,
        background_slope=background_slope,
        geometry_known=family.geometry.known,
        sample=settings.sample,
        cooldown=settings.cooldown,
        contacts=sweep.contacts,
        direction=directions.pop() if len(directions) == 1 else "",
        drive_current_A=abs(sweep.current_A),
        flags=_flags(usable, settings.reading),
        excluded=(*missed, *unread),
    )


def flank_level(minima: Sequence[Minimum]) -> tuple[float, float]:
    """Level of the flanks of a minimum at high temperature, and its relative slope with temperature.

    Parameters
    ----------
    minima : sequence of Minimum
        Readings of one filling at many temperatures.

    Returns
    -------
    level : float, ohm or S
        Lower shoulder at the temperature three quarters up the range of ln T; NaN if fewer than two of the
        warmer sweeps show it.
    slope : float
        Relative change of it, over that temperature; NaN if fewer than three show it.
    """
    temperature = np.array([one.temperature_K for one in minima])
    shoulder = np.array([one.minimum + one.depth for one in minima])
    seen = np.isfinite(shoulder) & (shoulder > 0) & (temperature >= np.median(temperature))
    if seen.sum() < 2:
        return float("nan"), float("nan")
    middle = high_reference(float(temperature.min()), float(temperature.max()))
    level, x = np.log(shoulder[seen]), temperature[seen] / middle - 1
    if seen.sum() < 3 or np.ptp(x) < 0.05:
        return float(np.exp(np.median(level))), float("nan")
    slope, intercept = np.polyfit(x, level, 1)
    return float(np.exp(intercept)), float(slope)


@dataclass(frozen=True, eq=False)
class _Points:
    """Readings as arrays, sweep directions joined."""

    temperature: FloatArray
    temperature_error: FloatArray
    value: FloatArray
    error: FloatArray
    rho_xy: FloatArray


def _chosen(one: Minimum, reading: ReadingKind) -> tuple[float, float]:
    """The reading in use and its standard error."""
    return float(getattr(one, reading)), float(getattr(one, f"{reading}_error"))


def _joined_directions(minima: Sequence[Minimum], reading: ReadingKind) -> _Points:
    """Means over the sweep directions of each group, their scatter in the error.

    What the directions differ by because their temperatures differ is no scatter: it is taken off with the
    slope of the series.
    """
    rows = []
    slope = _temperature_slope(minima, reading)
    for own in _clusters(minima):
        value, error = np.array([_chosen(one, reading) for one in own]).T
        temperature = np.array([one.temperature_K for one in own])
        mean = float(value.mean())
        variance = float(np.sum(error**2)) / len(own) ** 2
        steepness = float(np.interp(temperature.mean(), *slope))
        rest = value - mean - steepness * (temperature - temperature.mean())
        scatter = float(np.sum(rest**2)) / max(len(own) * (len(own) - 1), 1)
        scatter_K = float(np.sum([one.temperature_error_K**2 for one in own])) / len(own) ** 2
        hall = [one.rho_xy_ohm for one in own]
        rows.append(
            (temperature.mean(), np.sqrt(scatter_K), mean, np.sqrt(max(variance, scatter)), np.mean(hall))
        )
    return _Points(*np.array(rows).T)


def _clusters(minima: Sequence[Minimum]) -> list[list[Minimum]]:
    """Readings of one group at one temperature."""
    found: list[list[Minimum]] = []
    for one in minima:
        for own in found:
            close = abs(own[0].temperature_K / one.temperature_K - 1) < SAME_TEMPERATURE
            if own[0].group == one.group and close and all(o.direction != one.direction for o in own):
                own.append(one)
                break
        else:
            found.append([one])
    return found


def _temperature_slope(minima: Sequence[Minimum], reading: ReadingKind) -> tuple[FloatArray, FloatArray]:
    """Slope of the readings by temperature, at the mean temperatures of the groups."""
    groups: dict[int, list[tuple[float, float]]] = {}
    for one in minima:
        groups.setdefault(one.group, []).append((one.temperature_K, _chosen(one, reading)[0]))
    means = np.array(sorted(tuple(np.mean(own, axis=0)) for own in groups.values()))
    temperature, first = np.unique(means[:, 0], return_index=True)
    if temperature.size < 2:
        return temperature, np.zeros(temperature.size)
    return temperature, np.gradient(means[first, 1], temperature)


def chosen_quantity(
    rho_xx: FloatArray, rho_xy: FloatArray, wanted: Literal["auto", "rho_xx", "sigma_xx"]
) -> Quantity:
    """Quantity in which a whole series of resistivities is fitted.

    Parameters
    ----------
    rho_xx, rho_xy : ndarray[n_point], ohm
        Readings of the series.
    wanted : {"auto", "rho_xx", "sigma_xx"}
        ``"auto"``: sigma_xx once rho_xx exceeds 0.2 rho_xy at any reading.

    Returns
    -------
    {"rho_xx", "sigma_xx"}
    """
    if wanted == "auto":
        return "sigma_xx" if bool(np.any(np.abs(rho_xx) > SIGMA_RATIO * rho_xy)) else "rho_xx"
    return wanted


def _flags(minima: Sequence[Minimum], reading: ReadingKind) -> tuple[str, ...]:
    flags = []
    if _matters(minima, reading):
        flags.append("reading_matters")
    if any(one.at_edge for one in minima):
        flags.append("edge_of_sweep")
    if any(one.one_direction for one in minima):
        flags.append("one_field_direction")
    return tuple(flags)


def _matters(minima: Sequence[Minimum], reading: ReadingKind) -> bool:
    """Whether another kind of reading would differ beyond noise."""
    own = np.array([_chosen(one, reading) for one in minima])
    for kind in ("exact", "minimum", "mean"):
        other = np.array([_chosen(one, kind) for one in minima])
        limit = np.fmax(MATTERS_SIGMA * np.fmax(own[:, 1], other[:, 1]), MATTERS_RELATIVE * np.abs(own[:, 0]))
        beyond = np.abs(own[:, 0] - other[:, 0]) > limit
        if np.sum(beyond) >= max(2, MATTERS_SHARE * len(minima)):
            return True
    return False
