"""Which fillings a family of sweeps shows: the ones asked for, or minima found and named."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction

import numpy as np

from gapfit.anchors import coldest_sweeps
from gapfit.calibration import DensityEstimate
from gapfit.dips import Dip, find_dips, trace_curve
from gapfit.errors import InputError, NotEnoughData
from gapfit.hall import filling_label, fractions_up_to, parse_filling
from gapfit.traces import Sweep, TraceFamily

__all__ = ["FoundFillings", "find_fillings", "name_dip"]

LEAST_SEEN = 2
"""Temperatures at which a minimum must be seen."""

SIGNIFICANCE = 8.0
LEAST_DEPTH = 0.02
FLAT_REACH = 0.45
"""A minimum with a flat bottom is named by a fraction within this share of its half-width from its middle."""

WIDTH_SHARE = 0.15
"""A minimum is named by a fraction within this share of its half-width, besides its errors (own choice)."""


@dataclass(frozen=True)
class FoundFillings:
    """Fillings to be read, and what else was seen.

    Attributes
    ----------
    fillings : tuple of Fraction
        In rising order.
    unnamed : tuple of float
        Filling factors of minima that no allowed fraction fits.
    notices : tuple of str
        What the user must know.
    """

    fillings: tuple[Fraction, ...]
    unnamed: tuple[float, ...] = ()
    notices: tuple[str, ...] = ()


def find_fillings(
    family: TraceFamily,
    density: DensityEstimate,
    max_denominator: int = 11,
    look_for: Sequence[str | int | Fraction] | None = None,
    max_filling: float = 6.0,
) -> FoundFillings:
    """Fillings asked for, checked against the range of the sweeps, or minima found and named.

    Parameters
    ----------
    family : TraceFamily
        Symmetrised sweeps.
    density : DensityEstimate
        Density along the sweeps.
    max_denominator : int
        Largest denominator of a name.
    look_for : sequence of fillings, optional
        Exactly these; otherwise minima are looked for at the lowest temperatures.
    max_filling : float
        Largest absolute filling factor that is looked for.

    Returns
    -------
    FoundFillings

    Raises
    ------
    InputError
        If a filling asked for lies outside every sweep.
    NotEnoughData
        If nothing is found.
    """
    if look_for is not None:
        return _asked_for(family, density, [parse_filling(text) for text in look_for])
    named: dict[Fraction, set[float]] = {}
    nameless: list[tuple[float, float]] = []
    for sweep in coldest_sweeps(family):
        for dip in _dips(sweep, density, max_filling):
            name = name_dip(dip, density, sweep.mean_field, max_denominator)
            if name is None:
                nameless.append((dip.place, sweep.mean_temperature))
            else:
                named.setdefault(name, set()).add(round(sweep.mean_temperature, 6))
    seen = sorted(name for name, temperatures in named.items() if len(temperatures) >= LEAST_SEEN)
    fillings = tuple(name for name in seen if not _compressible(name))
    unnamed = _repeated(nameless)
    if not fillings:
        raise NotEnoughData(
            f"no minimum of a filling with denominator up to {max_denominator} was found at two low "
            'temperatures; name the fillings in the study, such as look_for = ["1/3", "2/3"]'
        )
    return FoundFillings(fillings, unnamed, _found_notices(fillings, seen, unnamed))


def name_dip(dip: Dip, density: DensityEstimate, field_T: float, max_denominator: int) -> Fraction | None:
    """Simplest fraction that a minimum may be, or None.

    Parameters
    ----------
    dip : Dip
        The minimum.
    density : DensityEstimate
        Tells how well filling factors are known.
    field_T : float, T
        Field of a gate sweep; of no consequence for field sweeps.
    max_denominator : int
        Largest denominator.

    Returns
    -------
    Fraction or None
        The smallest denominator within reach; of equal ones the nearest.
    """
    if dip.flat:
        reach = (1.0 if dip.at_edge else FLAT_REACH) * dip.half_width
    else:
        reach = 2 * dip.centre_error + WIDTH_SHARE * dip.half_width
    reach += 3 * density.filling_error(dip.place, field_T) + 0.001 * abs(dip.place)
    near = fractions_up_to(max_denominator, dip.place - reach, dip.place + reach)
    if not near:
        return None
    return min(near, key=lambda fraction: (fraction.denominator, abs(float(fraction) - dip.place)))


def _dips(sweep: Sweep, density: DensityEstimate, max_filling: float) -> list[Dip]:
    curve = trace_curve(sweep, density.filling(sweep))
    found = find_dips(curve, sweep.kind == "field", SIGNIFICANCE, LEAST_DEPTH)
    return [dip for dip in found if abs(dip.place) < max_filling + 0.2]


def _compressible(filling: Fraction) -> bool:
    """Half fillings of the lowest level, whose broad minimum has no gap."""
    return filling.denominator == 2 and abs(filling) < 2


def _repeated(nameless: Sequence[tuple[float, float]]) -> tuple[float, ...]:
    """Places of nameless minima that are seen at two temperatures within one percent."""
    found: list[float] = []
    for place, temperature in sorted(nameless):
        twins = [p for p, t in nameless if abs(p - place) < 0.01 * abs(place) and t != temperature]
        if twins and not any(abs(place - other) < 0.02 * abs(place) for other in found):
            found.append(float(np.mean([place, *twins])))
    return tuple(found)


def _found_notices(
    fillings: Sequence[Fraction], seen: Sequence[Fraction], unnamed: Sequence[float]
) -> tuple[str, ...]:
    notices = [f"fillings found: {', '.join(map(filling_label, fillings))}"]
    left_out = [filling_label(name) for name in seen if name not in fillings]
    if left_out:
        notices.append(
            f"a broad minimum at {', '.join(left_out)} is left out as one without a gap; name it in look_for "
            "to fit it"
        )
    if unnamed:
        notices.append("minima without a name: nu = " + ", ".join(f"{place:.4g}" for place in unnamed))
    return tuple(notices)


def _asked_for(family: TraceFamily, density: DensityEstimate, asked: Sequence[Fraction]) -> FoundFillings:
    """The fillings asked for, each once."""
    if not asked:
        raise InputError('look_for is empty; name fillings, such as ["1/3", "2/3"], or write "auto"')
    ranges = np.array([_range(density, sweep) for sweep in family.sweeps])
    notices = []
    for filling in asked:
        inside = (ranges[:, 0] <= float(filling)) & (float(filling) <= ranges[:, 1])
        if not inside.any():
            raise InputError(
                f"filling {filling} lies outside the sweeps, which run from nu = {ranges[:, 0].min():.4g} to "
                f"{min(ranges[:, 1].max(), 99):.4g}; remove it from look_for"
            )
        if not inside.all():
            notices.append(f"filling {filling} lies outside {int((~inside).sum())} of {inside.size} sweeps")
    return FoundFillings(tuple(sorted(set(asked))), (), tuple(notices))


def _range(density: DensityEstimate, sweep: Sweep) -> tuple[float, float]:
    filling = density.filling(sweep)
    return float(filling.min()), float(filling.max())
