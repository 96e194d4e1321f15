"""From sweeps to temperature series: the reading of every filling on every sweep."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

from gapfit.calibration import DensityEstimate
from gapfit.dips import Dip, find_dips, trace_curve
from gapfit.errors import InputError, NotEnoughData
from gapfit.gather import Minimum, ReadingSettings, gathered_series
from gapfit.hall import density_from_filling, field_at_filling
from gapfit.readings import (
    NOTHING,
    Stretch,
    Value,
    displacement_error,
    filling_error_at,
    fitted_value,
    mean_value,
    noise_of,
    stretch,
    temperature_at,
    usable_width,
)
from gapfit.series import ExcludedPoint, TemperatureSeries
from gapfit.smoothing import Noise
from gapfit.traces import SAME_FIELD, Sweep, TraceFamily, by_fixed_field

__all__ = ["MinimaSet", "Minimum", "ReadingSettings", "read_minima", "readings_across"]

FloatArray = NDArray[np.float64]
LARGEST_STEPS = 8


@dataclass(frozen=True)
class MinimaSet:
    """All series of a family, and the records behind them.

    Attributes
    ----------
    series : tuple of TemperatureSeries
        One per filling, contacts, current and (for gate sweeps) field.
    minima : tuple of Minimum
        Every reading on every sweep, for the figures.
    notices : tuple of str
        What the user must know.
    """

    series: tuple[TemperatureSeries, ...]
    minima: tuple[Minimum, ...] = ()
    notices: tuple[str, ...] = field(default=())


def read_minima(
    family: TraceFamily,
    density: DensityEstimate,
    fillings: Sequence[Fraction],
    settings: ReadingSettings | None = None,
) -> MinimaSet:
    """Temperature series of all fillings.

    Parameters
    ----------
    family : TraceFamily
        Symmetrised sweeps.
    density : DensityEstimate
        Density along them.
    fillings : sequence of Fraction
        Exact fillings to read.
    settings : ReadingSettings, optional
        How to read.

    Returns
    -------
    MinimaSet

    Raises
    ------
    InputError
        If a setting is unknown.
    NotEnoughData
        If no filling has readings at three temperatures.
    """
    settings = settings or ReadingSettings()
    _check_settings(settings)
    series: list[TemperatureSeries] = []
    minima: list[Minimum] = []
    notices: list[str] = []
    problem: NotEnoughData | None = None
    for sweeps in _bundles(family):
        curves = [_all_dips(sweep, density) for sweep in sweeps]
        for filling in fillings:
            pieces, missed = _reach(sweeps, density, float(filling))
            read = _read_filling(sweeps, density, filling, float(filling), pieces, curves, settings)
            minima += read
            try:
                series.append(gathered_series(read, missed, sweeps[0], family, settings))
            except NotEnoughData as error:
                problem = error
                notices.append(f"filling {filling}{_field_text(sweeps[0])} is left out: {error}")
    if not series:
        raise problem or NotEnoughData("there is nothing to read")
    return MinimaSet(tuple(series), tuple(minima), tuple(dict.fromkeys(notices)))


def _check_settings(settings: ReadingSettings) -> None:
    allowed = {"reading": ("exact", "minimum", "mean"), "quantity": ("auto", "rho_xx", "sigma_xx")}
    for name, values in allowed.items():
        if getattr(settings, name) not in values:
            raise InputError(
                f"{name} = {getattr(settings, name)!r} is unknown; allowed are {', '.join(values)}"
            )
    if not settings.window > 0:
        raise InputError(f"window = {settings.window} must be above zero")


def _field_text(sweep: Sweep) -> str:
    return "" if sweep.kind == "field" else f" at {sweep.mean_field:.4g} T"


def _bundles(family: TraceFamily) -> list[list[Sweep]]:
    """Sweeps that make one series: of the same contacts, current and fixed field, by temperature."""
    bundles: dict[tuple[float, str, str], list[Sweep]] = {}
    for field_T, sweeps in by_fixed_field(family.sweeps).items():
        fixed = field_T if np.isfinite(field_T) else 0.0
        for sweep in sweeps:
            bundles.setdefault((fixed, sweep.contacts, f"{abs(sweep.current_A):.2g}"), []).append(sweep)
    return [sorted(own, key=lambda sweep: sweep.mean_temperature) for own in bundles.values()]


def _all_dips(sweep: Sweep, density: DensityEstimate) -> list[Dip]:
    return find_dips(trace_curve(sweep, density.filling(sweep)), sweep.kind == "field")


def _reach(
    sweeps: Sequence[Sweep], density: DensityEstimate, place: float
) -> tuple[list[Stretch | None], list[ExcludedPoint]]:
    """Stretch of each sweep about a filling, None where it does not get there, and those points excluded."""
    pieces: list[Stretch | None] = []
    missed = []
    for sweep in sweeps:
        along = density.filling(sweep)
        ends = along.min() <= place <= along.max()
        piece = stretch(sweep, along, place) if ends else None
        if piece is not None and piece.inside:
            pieces.append(piece)
            continue
        pieces.append(None)
        reason = "rows are missing around the filling" if ends else "sweep ends before the filling"
        missed.append(ExcludedPoint(sweep.mean_temperature, float("nan"), float("nan"), reason))
    return pieces, missed


def _read_filling(
    sweeps: Sequence[Sweep],
    density: DensityEstimate,
    filling: Fraction,
    place: float,
    pieces: Sequence[Stretch | None],
    dips: Sequence[Sequence[Dip]],
    settings: ReadingSettings,
) -> list[Minimum]:
    """Readings of one filling on all sweeps of a bundle."""
    present = [index for index, piece in enumerate(pieces) if piece is not None]
    stretches = [piece for piece in pieces if piece is not None]
    if not stretches:
        return []
    noises = noise_of(stretches)
    width = usable_width(stretches, noises)
    found = []
    for index, piece, noise in zip(present, stretches, noises, strict=True):
        sigma = filling_error_at(density, sweeps[index], place)
        dip = _own_dip(dips[index], place, sigma)
        local = _Local(sweeps[index], place, sigma, piece, noise, width, dip)
        found.append(_minimum(local, filling, _abscissa(sweeps[index], density, place), settings))
    return found


@dataclass(frozen=True, eq=False)
class _Local:
    """All that is needed to read one sweep at one filling factor."""

    sweep: Sweep
    place: float
    sigma: float
    piece: Stretch
    noise: Noise
    width: float
    dip: Dip | None


def _minimum(local: _Local, filling: Fraction, abscissa: float, settings: ReadingSettings) -> Minimum:
    """The three readings of one filling on one sweep."""
    sweep, dip = local.sweep, local.dip
    exact = fitted_value(local.piece, local.noise, local.width)
    mean = mean_value(local.piece, local.noise, settings.window)
    lowest, lowest_place = _lowest(local)
    temperature, temperature_error = temperature_at(local.piece, local.width)
    floor = settings.relative_reading_error
    nearest = int(np.argmin(np.abs(sweep.abscissa - abscissa)))
    shift = displacement_error(exact, local.sigma)
    return Minimum(
        filling=filling,
        group=sweep.group,
        direction=sweep.direction,
        temperature_K=temperature,
        temperature_error_K=temperature_error,
        field_T=abscissa if sweep.kind == "field" else sweep.mean_field,
        abscissa=abscissa,
        exact=exact.value,
        exact_error=float(np.sqrt(exact.error**2 + shift**2 + (floor * exact.value) ** 2)),
        minimum=lowest.value,
        minimum_error=float(np.hypot(lowest.error, floor * lowest.value)),
        minimum_filling=lowest_place,
        mean=mean.value,
        mean_error=float(np.sqrt(mean.error**2 + shift**2 + (floor * mean.value) ** 2)),
        half_width=float("nan") if dip is None or dip.at_edge else dip.half_width,
        depth=float("nan") if dip is None else dip.depth,
        rho_xy_ohm=_hall_at(local.piece, local.width),
        at_edge=exact.one_sided,
        one_direction=bool(sweep.one_sided[nearest]) or sweep.field_sign != 0,
    )


def _lowest(local: _Local) -> tuple[Value, float]:
    """Local minimum next to the exact filling, and its filling factor; NaN where there is none.

    Steps to the vertex of the local parabola until it stays, no further than the sides of the minimum.
    """
    if local.dip is None:
        return NOTHING, float("nan")
    unit, width = local.piece.unit, local.width
    sides = (local.dip.low - local.place) / unit, (local.dip.high - local.place) / unit
    where, found = 0.0, NOTHING
    for _ in range(LARGEST_STEPS):
        found = fitted_value(local.piece, local.noise, width, where)
        step = found.slope / (found.curvature * unit) if found.curvature > 0 else np.inf
        if abs(step) < 0.05 * width:
            break
        where -= float(np.clip(step, -width, width)) if np.isfinite(step) else np.sign(found.slope) * width
        if not sides[0] <= where <= sides[1]:
            return NOTHING, float("nan")
    return found, local.place + where * unit


def _own_dip(dips: Sequence[Dip], place: float, sigma: float) -> Dip | None:
    """The minimum that belongs to a filling: the filling lies between its sides, or nearly."""
    found = [dip for dip in dips if abs(dip.place - place) < dip.half_width + 3 * sigma]
    return min(found, key=lambda dip: abs(dip.place - place), default=None)


def _abscissa(sweep: Sweep, density: DensityEstimate, place: float) -> float:
    """Where on a sweep a filling factor lies."""
    if sweep.kind == "field":
        return field_at_filling(place, density.offset)
    return (density_from_filling(place, sweep.mean_field) - density.offset) / density.slope


def _hall_at(piece: Stretch, width: float) -> float:
    if piece.hall is None:
        return float("nan")
    hall = replace(piece, signal=piece.hall)
    return abs(fitted_value(hall, Noise(), width).value)


def readings_across(
    family: TraceFamily,
    density: DensityEstimate,
    series: TemperatureSeries,
    offsets: Sequence[float],
    settings: ReadingSettings | None = None,
) -> tuple[tuple[float, TemperatureSeries], ...]:
    """Series beside an exact filling, for the gap across a minimum.

    Parameters
    ----------
    family : TraceFamily
        Symmetrised sweeps.
    density : DensityEstimate
        Density along them.
    series : TemperatureSeries
        The series at the exact filling, as `read_minima` gave it.
    offsets : sequence of float
        Distances from the exact filling, in filling factor.
    settings : ReadingSettings, optional
        How to read; the exact reading is used.

    Returns
    -------
    tuple of (float, TemperatureSeries)
        Offset and series, flagged ``beside_exact_filling``, in the quantity of the given series; offsets
        that have no readings at three temperatures are left out.
    """
    wanted = replace(settings or ReadingSettings(), reading="exact", quantity=series.quantity)
    if series.quantity == "sigma_xx" and family.geometry.kind == "corbino":
        wanted = replace(wanted, quantity="auto")
    found = []
    for sweeps in _bundles(family):
        if not _same_bundle(sweeps[0], series):
            continue
        for offset in offsets:
            place = float(series.filling) + float(offset)
            pieces, missed = _reach(sweeps, density, place)
            read = _read_filling(sweeps, density, series.filling, place, pieces, [()] * len(sweeps), wanted)
            try:
                beside = gathered_series(read, missed, sweeps[0], family, wanted, place)
            except NotEnoughData:
                continue
            found.append((float(offset), beside.flagged("beside_exact_filling")))
    return tuple(found)


def _same_bundle(sweep: Sweep, series: TemperatureSeries) -> bool:
    """Whether a series was read on sweeps like this one."""
    fixed = sweep.kind == "field" or abs(sweep.mean_field / series.field_T - 1) < SAME_FIELD
    current = f"{abs(sweep.current_A):.2g}" == f"{abs(series.drive_current_A):.2g}"
    return fixed and current and sweep.contacts == series.contacts
