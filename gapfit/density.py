"""Carrier density by several routes side by side, and refined on plateau centres and minima.

The density along a sweep is offset + slope * abscissa: a constant for a field sweep, the gate's calibration
for a gate sweep. A place on a sweep whose filling factor nu is known, at field B, has the density nu e B / h;
such anchors refine the starting value.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray
from scipy.constants import e, h

from gapfit.dips import Dip, find_dips, trace_curve
from gapfit.errors import InputError
from gapfit.hall import density_from_filling, filling_factor, fractions_up_to
from gapfit.traces import Sweep, TraceFamily, by_fixed_field
from gapfit.units import VON_KLITZING_OHM

__all__ = ["Anchor", "DensityEstimate", "DensityRoute", "coldest_sweeps", "estimate_density"]

FloatArray = NDArray[np.float64]

LOWEST_SWEEPS = 4
"""Temperatures whose plateaus are used and whose minima identify the fillings."""

CENTRE_SHARE = 0.04
PLATEAU_SHARE = 0.3
"""A deep minimum or a plateau may be off its exact filling by this share of its half-width (own choice);
plateaus more so, since a neighbouring state cuts them off on one side."""

OUTLIER = 4.0
SCAN = 0.06
SCAN_WIDTH = 0.003
HALL_FILLING = 12.0
"""The Hall slope is taken at fields below that of this filling factor."""

LEAST_HALL_POINTS = 8
HIGHEST_TARGET = 6.0
PLATEAU_TOLERANCE = 0.015
"""A plateau may be off its value by this share (current or gain)."""


@dataclass(frozen=True)
class Anchor:
    """A place on a sweep whose filling factor is known.

    Attributes
    ----------
    filling : Fraction
    kind : {"plateau", "minimum"}
        What was recognised.
    temperature_K, field_T : float
        Temperature and absolute field there.
    abscissa : float, T, V or m^-2
        Where it lies on the sweep.
    density, error : float, m^-2
        nu e B / h and its standard error; for gate sweeps the error of the place, as density.
    """

    filling: Fraction
    kind: str
    temperature_K: float
    field_T: float
    abscissa: float
    density: float
    error: float


@dataclass(frozen=True)
class DensityRoute:
    """One way to the density (or, for gate sweeps, to the density per volt).

    Attributes
    ----------
    name : str
        ``"Hall slope"``, ``"plateau centres"``, ``"minima"``, ``"stated"``.
    value, error : float, m^-2 or m^-2 per volt
    n_used : int
        Sweeps or anchors that it rests on.
    """

    name: str
    value: float
    error: float
    n_used: int


@dataclass(frozen=True)
class DensityEstimate:
    """Density along the sweeps of a family: offset + slope * abscissa.

    Attributes
    ----------
    kind : {"field", "density", "gate"}
        What is swept.
    offset, slope : float, m^-2 and m^-2 per unit of the abscissa
        A field sweep has slope zero.
    covariance : tuple of float
        Variance of the offset, covariance, variance of the slope.
    routes : tuple of DensityRoute
        All ways side by side.
    anchors : tuple of Anchor
        What the refined value rests on.
    stated : float, m^-2 (or per volt)
        The value given by the user, NaN if none.
    notices : tuple of str
        What the user must know.
    """

    kind: str
    offset: float
    slope: float
    covariance: tuple[float, float, float] = (0.0, 0.0, 0.0)
    routes: tuple[DensityRoute, ...] = ()
    anchors: tuple[Anchor, ...] = ()
    stated: float = float("nan")
    notices: tuple[str, ...] = ()

    @property
    def density_per_m2(self) -> float:
        """Density of a field sweep; NaN for other sweeps."""
        return self.offset if self.kind == "field" else float("nan")

    @property
    def error_per_m2(self) -> float:
        """Standard error of the density of a field sweep; NaN for other sweeps."""
        return float(np.sqrt(self.covariance[0])) if self.kind == "field" else float("nan")

    @property
    def neutrality(self) -> float:
        """Abscissa of zero density; NaN for field sweeps."""
        return -self.offset / self.slope if self.slope else float("nan")

    @property
    def spread(self) -> float:
        """Largest relative difference between two measured routes; NaN for fewer than two."""
        values = [route.value for route in self.routes if route.name != "stated"]
        return (max(values) - min(values)) / abs(np.mean(values)) if len(values) > 1 else float("nan")

    def density(self, sweep: Sweep) -> FloatArray:
        """Density along a sweep, m^-2."""
        if self.kind == "field":
            return np.full(sweep.n_point, self.offset)
        return self.offset + self.slope * sweep.abscissa

    def filling(self, sweep: Sweep) -> FloatArray:
        """Filling factor along a sweep."""
        return filling_factor(self.density(sweep), np.abs(sweep.field_T))

    def filling_error(self, filling: float, field_T: float) -> float:
        """Standard error of the filling factor from the density's, at a place of a given filling."""
        density = density_from_filling(filling, field_T)
        if self.kind == "field":
            return abs(filling) * self.error_per_m2 / abs(self.offset)
        place = (density - self.offset) / self.slope
        variance = self.covariance[0] + 2 * place * self.covariance[1] + place**2 * self.covariance[2]
        return float(np.sqrt(max(variance, 0.0))) * h / (e * field_T)


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
    NotEnoughData
        If no plateau or minimum fits any filling and there is no other route.
    """
    routes = [] if stated is None else [DensityRoute("stated", stated, float("nan"), 1)]
    start, found = _start(family, stated)
    routes += found
    if family.kind == "field":
        start = _scanned(family, start)
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
    return replace(done, notices=_notices(done, family))


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
    """Abscissa between the extremes of the Hall resistance, where it changes sign; NaN-free by construction."""
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
            "the gate's calibration is unknown: give capacitance_F_per_m2 or density_per_volt in [traces], or name "
            "the Hall column rho_xy"
        )
    return float(np.median(found))


# --- anchors --------------------------------------------------------------------------------------------


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


def _targets(low: float, high: float) -> FloatArray:
    """Filling factors that strong states have: sevenths below one, thirds and fifths below two, integers."""
    reach = min(max(abs(low), abs(high)), HIGHEST_TARGET)
    fractions = fractions_up_to(7, max(low, -reach), min(high, reach))
    largest = {0: 7, 1: 5}
    return np.array(
        [float(f) for f in fractions if f.denominator != 2 and f.denominator <= largest.get(int(abs(f)), 1)]
    )


def _scanned(family: TraceFamily, start: DensityEstimate) -> DensityEstimate:
    """Starting density of field sweeps, scaled so that the minima fall on simple fillings."""
    dips = [dip for sweep in coldest_sweeps(family) for dip in _sweep_dips(sweep, start)]
    if len(dips) < 2:
        return start
    places = np.array([dip.place for dip in dips])
    weight = np.array([dip.share for dip in dips])
    targets = _targets(0.1, HIGHEST_TARGET)
    simple = np.array([1 / Fraction(t).limit_denominator(9).denominator for t in targets])
    scales = np.exp(np.linspace(-SCAN, SCAN, 601))
    distance = np.log(places[None, :, None] * scales[:, None, None] / targets)
    score = np.sum(weight[:, None] * simple * np.exp(-0.5 * (distance / SCAN_WIDTH) ** 2), axis=(1, 2))
    score *= np.exp(-0.5 * (np.log(scales) / SCAN) ** 2)
    best = float(scales[int(np.argmax(score))])
    value = start.offset * best
    return replace(start, offset=value, covariance=((0.004 * value) ** 2, 0.0, 0.0))


def _sweep_dips(sweep: Sweep, estimate: DensityEstimate) -> list[Dip]:
    return find_dips(trace_curve(sweep, estimate.filling(sweep)), sweep.kind == "field", 8.0, 0.05)


def _anchors(family: TraceFamily, estimate: DensityEstimate) -> list[Anchor]:
    plateaus = [anchor for sweep in coldest_sweeps(family) for anchor in _plateaus(sweep, estimate)]
    if family.kind != "field" and len({anchor.filling for anchor in plateaus}) > 2:
        estimate = _refined(estimate, plateaus)
    minima = [anchor for sweep in family.sweeps for anchor in _minima(sweep, estimate)]
    return plateaus + minima


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


def _minima(sweep: Sweep, estimate: DensityEstimate) -> list[Anchor]:
    """Minima of a sweep that lie on simple fillings."""
    found = []
    for dip in _sweep_dips(sweep, estimate):
        field = sweep.mean_field if sweep.kind != "field" else 0.0
        room = (0.4 if dip.flat else 0.25) * dip.half_width
        filling = None if dip.at_edge else _nearest(dip.place, room, estimate, field)
        if filling is not None:
            error = float(np.hypot(dip.place_error, CENTRE_SHARE * dip.half_width / dip.share))
            found.append(_anchor("minimum", filling, sweep, estimate, dip.place, error))
    return found


def _nearest(place: float, room: float, estimate: DensityEstimate, field_T: float) -> Fraction | None:
    """Simple filling next to a nominal one, or None where none or two are near."""
    targets = _targets(place - 0.5, place + 0.5)
    distance = np.abs(targets - place)
    if targets.size == 0:
        return None
    best = int(np.argmin(distance))
    others = np.abs(np.delete(targets, best) - targets[best])
    sigma = estimate.filling_error(float(targets[best]), field_T or 1.0)
    limit = min(room + 3 * sigma + 0.002 * abs(place), 0.4 * float(others.min(initial=np.inf)))
    return Fraction(targets[best]).limit_denominator(9) if distance[best] < limit else None


def _plateaus(sweep: Sweep, estimate: DensityEstimate) -> list[Anchor]:
    """Plateaus of a sweep: where the Hall filling h / (e^2 R_xy) stays behind the nominal filling factor."""
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
    cut = {n: v[keep] for n, v in vars(sweep).items() if isinstance(v, np.ndarray)}
    return replace(sweep, **cut)


def _plateau(
    sweep: Sweep, estimate: DensityEstimate, place: FloatArray, level: FloatArray, pace: FloatArray,
    start: int, stop: int,
) -> Anchor | None:  # fmt: skip
    """Plateau between two places, if it is wide, flat and at a known value."""
    if start == 0 or stop == place.size - 1 or stop - start < 4 or pace[start : stop + 1].min() > 0.25:
        return None
    height = float(np.median(level[start : stop + 1]))
    targets = _targets(height - 0.5, height + 0.5)
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


def _notices(estimate: DensityEstimate, family: TraceFamily) -> tuple[str, ...]:
    notices = []
    if estimate.kind == "field":
        text = f"density {estimate.offset:.5g} +- {estimate.error_per_m2:.2g} m^-2"
        if np.isfinite(estimate.stated):
            text += f", {100 * (estimate.offset / estimate.stated - 1):+.2f} % from the stated one"
        notices.append(text)
    else:
        text = f"density zero at {estimate.neutrality:.5g}, slope {estimate.slope:.5g} m^-2 per unit of the sweep"
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
    if len(family.sweeps) < 2:
        notices.append("one sweep only")
    return tuple(notices)
