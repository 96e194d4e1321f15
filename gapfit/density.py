"""Carrier density by several routes side by side, and refined on plateau centres and minima.

A place on a sweep whose filling factor nu is known, at field B, has the density nu e B / h; such anchors
refine the starting value.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray
from scipy.constants import e, h

from gapfit.anchors import coldest_sweeps, minimum_anchors, plateau_anchors, strong_fillings, sweep_dips
from gapfit.calibration import Anchor, DensityEstimate, DensityRoute
from gapfit.dips import trace_curve
from gapfit.errors import InputError
from gapfit.traces import Sweep, TraceFamily

__all__ = ["DensityEstimate", "estimate_density"]

FloatArray = NDArray[np.float64]

OUTLIER = 4.0
HIGHEST_TARGET = 6.0
SCAN = 0.06
SCAN_WIDTH = 0.003
"""Starting densities of field sweeps are scaled within the first so that minima fall on fillings within the
second, both relative."""

SCAN_SHIFT, SCAN_REACH = 0.15, 0.012
"""For gate sweeps besides the scale the neutrality is moved within the first; both in filling factor."""

HALL_FILLING = 12.0
"""The Hall slope is taken at fields below that of this filling factor."""

LEAST_HALL_POINTS = 8

CONTRADICTION = 1.3
"""Stated and Hall density that differ by more than this factor contradict each other (own choice)."""


def estimate_density(family: TraceFamily, stated: float | None = None) -> DensityEstimate:
    """Density by all routes, and refined on plateau centres and minima.

    Parameters
    ----------
    family : TraceFamily
        Symmetrised sweeps.
    stated : float, m^-2, optional
        Density that the user believes in, for field sweeps.

    Returns
    -------
    DensityEstimate

    Raises
    ------
    InputError
        If there is nothing to start from.
    """
    if stated is not None and family.kind == "field":
        _refuse_contradiction(family, stated)
    routes = [] if stated is None else [DensityRoute("stated", stated, float("nan"), 1)]
    start, found = _start(family, stated)
    routes += found
    start = _scanned(family, start) if family.kind == "field" else _scanned_gate(family, start)
    for _ in range(2):
        anchors = _anchors(family, start)
        start = _refined(start, anchors)
    routes += _anchor_routes(start, anchors)
    given = family.gate_start.density_per_volt if family.kind == "gate" else stated
    done = replace(
        start,
        routes=tuple(routes),
        anchors=tuple(anchors),
        stated=float("nan") if given is None else given,
    )
    return replace(done, notices=_notices(done))


# --- starting values ------------------------------------------------------------------------------------


def _start(family: TraceFamily, stated: float | None) -> tuple[DensityEstimate, list[DensityRoute]]:
    """Starting value, and the Hall slope if there is one."""
    if family.kind != "field":
        return _gate_start(family), []
    slopes = [_hall_density(sweep) for sweep in family.sweeps if sweep.rho_xy_ohm is not None]
    low = np.array([found[:2] for found in slopes if found[2]])
    if low.size:
        route = _mean_route("Hall slope", low[:, 0], low[:, 1])
        return DensityEstimate("field", route.value, 0.0, (route.error**2, 0.0, 0.0)), [route]
    value = stated if stated is not None else float(np.median([found[0] for found in slopes] or [np.nan]))
    if not np.isfinite(value):
        raise InputError(
            "the density is unknown: give density_cm2 in [sample], or name the Hall column rho_xy in [traces]"
        )
    return DensityEstimate("field", value, 0.0, ((0.02 * value) ** 2, 0.0, 0.0)), []


def _refuse_contradiction(family: TraceFamily, stated: float) -> None:
    """Refuse a stated density that the Hall resistance contradicts: every filling would get a wrong name."""
    found = []
    for sweep in family.sweeps:
        if sweep.rho_xy_ohm is not None:
            hall = np.abs(sweep.rho_xy_ohm)
            some = hall > 0
            found.append(float(np.median(np.abs(sweep.field_T[some]) / (e * hall[some]))))
    classical = float(np.median(found or [np.nan]))
    if abs(np.log(abs(classical / stated))) > np.log(CONTRADICTION):
        raise InputError(
            f"density_cm2 = {stated / 1e4:.4g} is stated, the Hall resistance says {classical / 1e4:.4g}: "
            "correct or remove density_cm2 in [sample], or correct rho_xy, its unit or current_A in [traces]"
        )


def _hall_density(sweep: Sweep) -> tuple[float, float, bool]:
    """Density 1 / (e dR_xy/dB), its error, and whether the field was low enough to be free of plateaus."""
    field, hall = np.abs(sweep.field_T), np.asarray(sweep.rho_xy_ohm)
    whole = abs(1 / (e * float(np.polyfit(field, hall, 1)[0])))
    low = field < whole * h / (e * HALL_FILLING)
    if low.sum() < LEAST_HALL_POINTS or np.ptp(field[low]) * HALL_FILLING < 0.5 * whole * h / e:
        return whole, 0.05 * whole, False
    (slope, _), covariance = np.polyfit(field[low], hall[low], 1, cov=True)
    value = abs(1 / (e * float(slope)))
    return value, value * float(np.sqrt(covariance[0, 0]) / abs(slope)), True


def _mean_route(name: str, values: FloatArray, errors: FloatArray) -> DensityRoute:
    """Weighted mean, its error widened to the scatter where that is larger."""
    weight = 1 / np.maximum(errors, 1e-9 * np.abs(values)) ** 2
    mean = float(np.sum(weight * values) / np.sum(weight))
    excess = float(np.sum(weight * (values - mean) ** 2)) / max(values.size - 1, 1)
    return DensityRoute(name, mean, float(np.sqrt(max(1.0, excess) / np.sum(weight))), int(values.size))


def _gate_start(family: TraceFamily) -> DensityEstimate:
    """Calibration of the gate as given, the missing part from the Hall signal or the highest resistance."""
    given = family.gate_start
    slope = 1.0 if family.kind == "density" else given.density_per_volt
    neutral = 0.0 if family.kind == "density" else given.neutrality_V
    if slope is None:
        slope = _hall_slope_per_volt(family)
    if neutral is None:
        neutral = float(np.median([sweep.abscissa[np.argmax(sweep.signal)] for sweep in family.sweeps]))
        crossings = [_hall_neutrality(sweep) for sweep in family.sweeps if sweep.rho_xy_ohm is not None]
        neutral = float(np.median(crossings)) if crossings else neutral
    return DensityEstimate(family.kind, -slope * neutral, slope, (0.0, 0.0, (0.03 * slope) ** 2))


def _hall_neutrality(sweep: Sweep) -> float:
    """Abscissa between the extremes of the Hall resistance, where it changes sign."""
    hall = np.asarray(sweep.rho_xy_ohm)
    curve = trace_curve(sweep, sweep.abscissa / np.ptp(sweep.abscissa), hall)
    ends = sorted((int(np.argmax(curve.value)), int(np.argmin(curve.value))))
    inner = curve.value[ends[0] : ends[1] + 1]
    cross = ends[0] + int(np.argmin(np.abs(inner)))
    return float(curve.axis[cross]) * float(np.ptp(sweep.abscissa))


def _hall_slope_per_volt(family: TraceFamily) -> float:
    """Density per volt from the Hall density B / (e R_xy) on the outer parts of the sweeps."""
    found = []
    for sweep in family.sweeps:
        if sweep.rho_xy_ohm is None:
            continue
        hall = np.asarray(sweep.rho_xy_ohm)
        outer = np.abs(hall) < np.quantile(np.abs(hall), 0.4)
        outer &= np.sign(hall) == np.sign(np.median(hall[outer]))
        found.append(
            abs(float(np.polyfit(sweep.abscissa[outer], sweep.mean_field / (e * hall[outer]), 1)[0]))
        )
    if not found:
        raise InputError(
            "the gate's calibration is unknown: give capacitance_F_per_m2 or density_per_volt in [traces], "
            "or name the Hall column rho_xy"
        )
    return float(np.median(found))


def _scanned(family: TraceFamily, start: DensityEstimate) -> DensityEstimate:
    """Starting density of field sweeps, scaled so that the minima fall on simple fillings."""
    dips = [dip for sweep in coldest_sweeps(family) for dip in sweep_dips(sweep, start)]
    if len(dips) < 2:
        return start
    places = np.array([dip.place for dip in dips])
    weight = np.array([dip.share for dip in dips])
    targets = strong_fillings(0.1, HIGHEST_TARGET)
    simple = np.array([1 / Fraction(t).limit_denominator(9).denominator for t in targets])
    scales = np.exp(np.linspace(-SCAN, SCAN, 601))
    distance = np.log(places[None, :, None] * scales[:, None, None] / targets)
    score = np.sum(weight[:, None] * simple * np.exp(-0.5 * (distance / SCAN_WIDTH) ** 2), axis=(1, 2))
    score *= np.exp(-0.5 * (np.log(scales) / SCAN) ** 2)
    best = float(scales[int(np.argmax(score))])
    value = start.offset * best
    return replace(start, offset=value, covariance=((0.004 * value) ** 2, 0.0, 0.0))


def _scanned_gate(family: TraceFamily, start: DensityEstimate) -> DensityEstimate:
    """Starting calibration of a gate without plateaus, moved so that the minima fall on simple fillings."""
    plateaus = {a.filling for sweep in coldest_sweeps(family) for a in plateau_anchors(sweep, start)}
    dips = [(dip, sweep.mean_field) for sweep in coldest_sweeps(family) for dip in sweep_dips(sweep, start)]
    if len(plateaus) > 2 or len(dips) < 4:
        return start
    unit = np.array([h / (e * field) for _, field in dips])
    weight = np.array([dip.share for dip, _ in dips])
    nominal = np.array([dip.place for dip, _ in dips])
    targets = strong_fillings(-HIGHEST_TARGET, HIGHEST_TARGET)
    simple = np.array([1 / Fraction(t).limit_denominator(9).denominator for t in targets])
    scales = np.exp(np.linspace(-SCAN, SCAN, 61))
    shifts = np.linspace(-SCAN_SHIFT, SCAN_SHIFT, 61)
    score = np.zeros((scales.size, shifts.size))
    for i, scale in enumerate(scales):
        moved = nominal * scale + shifts[:, None] * unit / unit.max()
        near = np.exp(-0.5 * ((moved[..., None] - targets) / SCAN_REACH) ** 2)
        score[i] = np.sum(weight[:, None] * simple * near, axis=(1, 2))
    score *= np.exp(-0.5 * (np.log(scales)[:, None] / SCAN) ** 2 - 0.5 * (shifts / SCAN_SHIFT) ** 2)
    row, column = np.unravel_index(int(np.argmax(score)), score.shape)
    scale, shift = float(scales[row]), float(shifts[column]) / float(unit.max())
    return replace(start, slope=start.slope * scale, offset=start.offset * scale + shift)


def _anchors(family: TraceFamily, estimate: DensityEstimate) -> list[Anchor]:
    plateaus = [anchor for sweep in coldest_sweeps(family) for anchor in plateau_anchors(sweep, estimate)]
    if family.kind != "field" and len({anchor.filling for anchor in plateaus}) > 2:
        estimate = _refined(estimate, plateaus)
    minima = [anchor for sweep in family.sweeps for anchor in minimum_anchors(sweep, estimate)]
    return plateaus + minima


# --- refined value --------------------------------------------------------------------------------------


def _combined(anchors: Sequence[Anchor]) -> list[Anchor]:
    """One anchor per filling, kind and fixed field.

    Errors of one filling at several temperatures are largely common: the mean is no better than the best of
    them.
    """
    found: dict[tuple[Fraction, str, float], list[Anchor]] = {}
    for anchor in anchors:
        gate = anchor.field_T if abs(anchor.abscissa) != anchor.field_T else 0.0
        found.setdefault((anchor.filling, anchor.kind, round(gate, 2)), []).append(anchor)
    combined = []
    for own in found.values():
        weight = np.array([1 / anchor.error**2 for anchor in own])
        place = float(weight @ [anchor.abscissa for anchor in own] / weight.sum())
        density = float(weight @ [anchor.density for anchor in own] / weight.sum())
        error = min(anchor.error for anchor in own)
        combined.append(replace(own[0], abscissa=place, density=density, error=error))
    return combined


def _refined(start: DensityEstimate, anchors: Sequence[Anchor]) -> DensityEstimate:
    """Estimate from the anchors by least squares in which outliers count less."""
    combined = _combined(anchors)
    free = 1 if start.kind == "field" else 2
    if len(combined) < free + (1 if free == 2 else 0):
        return start
    density = np.array([anchor.density for anchor in combined])
    error = np.array([anchor.error for anchor in combined])
    place = np.array([anchor.abscissa for anchor in combined])
    scale = 1.0 if free == 1 else float(np.abs(place).max()) or 1.0
    design = np.vander(place / scale, free, increasing=True)
    weight = 1 / error**2
    for _ in range(20):
        normal = design.T @ (weight[:, None] * design)
        answer = np.linalg.solve(normal, design.T @ (weight * density))
        pull = np.abs(density - design @ answer) / error
        width = max(1.0, 1.4826 * float(np.median(pull)))
        weight = np.minimum(1.0, 2 * width / np.maximum(pull, 1e-300)) / error**2
    kept = pull < OUTLIER * width
    excess = float(np.sum(pull[kept] ** 2)) / max(int(kept.sum()) - free, 1)
    covariance = np.linalg.inv(normal) * max(1.0, excess)
    if free == 1:
        return replace(start, offset=float(answer[0]), covariance=(float(covariance[0, 0]), 0.0, 0.0))
    return replace(
        start,
        offset=float(answer[0]),
        slope=float(answer[1]) / scale,
        covariance=(
            float(covariance[0, 0]),
            float(covariance[0, 1]) / scale,
            float(covariance[1, 1]) / scale**2,
        ),
    )


def _anchor_routes(estimate: DensityEstimate, anchors: Sequence[Anchor]) -> list[DensityRoute]:
    """Density from plateau centres alone, and from minima alone."""
    routes = []
    for name, kind in (("plateau centres", "plateau"), ("minima", "minimum")):
        own = [anchor for anchor in anchors if anchor.kind == kind]
        alone = _refined(replace(estimate, covariance=(np.nan, np.nan, np.nan)), own)
        if np.isfinite(alone.covariance[0]):
            field = estimate.kind == "field"
            value = alone.offset if field else alone.slope
            variance = alone.covariance[0] if field else alone.covariance[2]
            routes.append(DensityRoute(name, value, float(np.sqrt(variance)), len(own)))
    return routes


def _notices(estimate: DensityEstimate) -> tuple[str, ...]:
    notices = []
    if estimate.kind == "field":
        text = f"density {estimate.offset:.5g} +- {estimate.error_per_m2:.2g} m^-2"
        if np.isfinite(estimate.stated):
            text += f", {100 * (estimate.offset / estimate.stated - 1):+.2f} % from the stated one"
        notices.append(text)
    else:
        text = f"density zero at {estimate.neutrality:.5g}, slope {estimate.slope:.5g} m^-2 per unit"
        if np.isfinite(estimate.stated):
            text += f", {100 * (estimate.slope / estimate.stated - 1):+.2f} % from the stated one"
        notices.append(text)
    if not estimate.anchors:
        notices.append("no plateau or minimum confirms the density; fillings rest on its starting value")
    if estimate.spread > 0.02:
        notices.append(
            f"the routes to the density differ by {100 * estimate.spread:.1f} %: "
            + ", ".join(f"{route.name} {route.value:.5g}" for route in estimate.routes)
        )
    return tuple(notices)
