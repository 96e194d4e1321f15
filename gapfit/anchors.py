"""Places on sweeps whose filling factor is known: plateau centres and minima of strong states."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction
from functools import cache
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.constants import e, h

from gapfit.calibration import Anchor, DensityEstimate
from gapfit.dips import Dip, find_dips, trace_curve
from gapfit.hall import density_from_filling, fractions_up_to
from gapfit.traces import Sweep, TraceFamily, by_fixed_field
from gapfit.units import VON_KLITZING_OHM

__all__ = ["coldest_sweeps", "minimum_anchors", "plateau_anchors", "strong_fillings", "sweep_dips"]

FloatArray = NDArray[np.float64]

LOWEST_SWEEPS = 4
"""Temperatures whose plateaus are used and whose minima identify the fillings."""

CENTRE_SHARE = 0.04
PLATEAU_SHARE = 0.3
"""A deep minimum or a plateau may be off its exact filling by this share of its half-width (own choice);
plateaus more so, since a neighbouring state cuts them off on one side."""

HIGHEST_TARGET = 6.0
PLATEAU_TOLERANCE = 0.015
"""A plateau may be off its value by this share (current or gain)."""


def coldest_sweeps(family: TraceFamily) -> list[Sweep]:
    """Sweeps of the lowest temperatures, for every fixed field of a gate study.

    Parameters
    ----------
    family : TraceFamily

    Returns
    -------
    list of Sweep
    """
    found = []
    for own in by_fixed_field(family.sweeps).values():
        limit = np.unique([round(s.mean_temperature, 6) for s in own])[:LOWEST_SWEEPS][-1]
        found += [sweep for sweep in own if sweep.mean_temperature <= limit * (1 + 1e-6)]
    return found


@cache
def _all_strong() -> FloatArray:
    """Filling factors that strong states have: sevenths below one, thirds and fifths below two, integers."""
    fractions = fractions_up_to(7, -HIGHEST_TARGET, HIGHEST_TARGET)
    largest = {0: 7, 1: 5}
    return np.array(
        [float(f) for f in fractions if f.denominator != 2 and f.denominator <= largest.get(int(abs(f)), 1)]
    )


def strong_fillings(low: float, high: float) -> FloatArray:
    """Filling factors in a range that strong states have.

    Parameters
    ----------
    low, high : float
        Range, ends included.

    Returns
    -------
    ndarray
        Sevenths below one, thirds and fifths below two, integers up to six; of either sign.
    """
    targets = _all_strong()
    return targets[(targets >= low) & (targets <= high)]


def sweep_dips(sweep: Sweep, estimate: DensityEstimate) -> list[Dip]:
    """Clear minima of a sweep, by a nominal density.

    Parameters
    ----------
    sweep : Sweep
        The sweep.
    estimate : DensityEstimate
        Nominal density along it.

    Returns
    -------
    list of Dip
    """
    return find_dips(trace_curve(sweep, estimate.filling(sweep)), sweep.kind == "field", 8.0, 0.05)


def _anchor(
    kind: str, filling: Fraction, sweep: Sweep, estimate: DensityEstimate, place: float, error: float
) -> Anchor:
    """Anchor at a nominal filling factor, with the error of the place given in filling factor."""
    nominal = estimate.filling(sweep)
    order = np.argsort(nominal)
    abscissa = float(np.interp(place, nominal[order], sweep.abscissa[order]))
    temperature = float(np.interp(place, nominal[order], sweep.temperature_K[order]))
    field = abs(abscissa) if sweep.kind == "field" else sweep.mean_field
    density = density_from_filling(filling, field)
    spread = abs(density) * error / abs(place) if sweep.kind == "field" else error * e * field / h
    return Anchor(filling, kind, temperature, field, abscissa, density, spread)


def minimum_anchors(sweep: Sweep, estimate: DensityEstimate) -> list[Anchor]:
    """Minima of a sweep that lie on simple fillings.

    Parameters
    ----------
    sweep : Sweep
        The sweep.
    estimate : DensityEstimate
        Nominal density along it, good to about half a percent.

    Returns
    -------
    list of Anchor
    """
    found = []
    for dip in sweep_dips(sweep, estimate):
        field = sweep.mean_field if sweep.kind != "field" else 0.0
        room = (0.4 if dip.flat else 0.25) * dip.half_width
        filling = None if dip.at_edge else _nearest(dip.place, room, estimate, field)
        if filling is not None:
            error = float(np.hypot(dip.place_error, CENTRE_SHARE * dip.half_width / dip.share))
            found.append(_anchor("minimum", filling, sweep, estimate, dip.place, error))
    return found


def _nearest(place: float, room: float, estimate: DensityEstimate, field_T: float) -> Fraction | None:
    """Simple filling next to a nominal one, or None where none or two are near."""
    targets = strong_fillings(place - 0.5, place + 0.5)
    distance = np.abs(targets - place)
    if targets.size == 0:
        return None
    best = int(np.argmin(distance))
    others = np.abs(np.delete(targets, best) - targets[best])
    sigma = estimate.filling_error(float(targets[best]), field_T or 1.0)
    limit = min(room + 3 * sigma + 0.002 * abs(place), 0.4 * float(others.min(initial=np.inf)))
    return Fraction(targets[best]).limit_denominator(9) if distance[best] < limit else None


def plateau_anchors(sweep: Sweep, estimate: DensityEstimate) -> list[Anchor]:
    """Plateaus of a sweep: where the Hall filling h / (e^2 R_xy) stays behind the nominal filling factor.

    Parameters
    ----------
    sweep : Sweep
        The sweep.
    estimate : DensityEstimate
        Nominal density along it; plateaus are named by their resistance, not by it.

    Returns
    -------
    list of Anchor
        At the middle of each plateau, where the Hall filling changes at half of the nominal pace or less.
    """
    if sweep.rho_xy_ohm is None:
        return []
    nominal = estimate.filling(sweep)
    inside = (np.abs(nominal) > 0.25) & (np.abs(nominal) < HIGHEST_TARGET)
    hall = np.where(inside, np.asarray(sweep.rho_xy_ohm), np.nan)
    with np.errstate(divide="ignore"):
        level = VON_KLITZING_OHM / hall
    upright = np.sign(np.nanmedian(level * nominal))
    anchors = []
    for part in (inside & (nominal > 0), inside & (nominal < 0)):
        if part.sum() >= 20:
            anchors += _plateaus_of_part(sweep, estimate, part, np.asarray(upright * level))
    return anchors


def _plateaus_of_part(
    sweep: Sweep, estimate: DensityEstimate, part: NDArray[np.bool_], level: FloatArray
) -> list[Anchor]:
    """Plateaus on one side of neutrality."""
    nominal = estimate.filling(sweep)[part]
    piece = _masked(sweep, part)
    curve = trace_curve(piece, nominal, level[part])
    if curve.axis.size < 5:
        return []
    place = np.exp(curve.axis) if sweep.kind == "field" else curve.axis
    pace = curve.slope / place if sweep.kind == "field" else curve.slope
    flat = (pace < 0.5) & np.isfinite(pace)
    found = []
    change = np.diff(np.concatenate(([False], flat, [False])).astype(np.int8))
    for start, stop in zip(np.flatnonzero(change == 1), np.flatnonzero(change == -1), strict=True):
        anchor = _plateau(sweep, estimate, place, curve.value, pace, int(start), int(stop) - 1)
        found += [anchor] if anchor is not None else []
    return found


def _masked(sweep: Sweep, keep: NDArray[np.bool_]) -> Sweep:
    """The sweep with some points only."""
    cut: dict[str, Any] = {n: v[keep] for n, v in vars(sweep).items() if isinstance(v, np.ndarray)}
    return replace(sweep, **cut)


def _plateau(
    sweep: Sweep, estimate: DensityEstimate, place: FloatArray, level: FloatArray, pace: FloatArray,
    start: int, stop: int,
) -> Anchor | None:  # fmt: skip
    """Plateau between two places, if it is wide, flat and at a known value."""
    if start == 0 or stop == place.size - 1 or stop - start < 4 or pace[start : stop + 1].min() > 0.25:
        return None
    height = float(np.median(level[start : stop + 1]))
    targets = strong_fillings(height - 0.5, height + 0.5)
    best = targets[int(np.argmin(np.abs(targets - height)))] if targets.size else np.inf
    half = (place[stop] - place[start]) / 2
    if not abs(best / height - 1) < PLATEAU_TOLERANCE or not half > 2 * PLATEAU_TOLERANCE * abs(best):
        return None
    centre = float(place[stop] + place[start]) / 2
    filling = Fraction(best).limit_denominator(9)
    spacing = float(np.abs(np.diff(place[start : stop + 1])).max())
    return _anchor(
        "plateau", filling, sweep, estimate, centre, float(np.hypot(PLATEAU_SHARE * half, spacing))
    )
