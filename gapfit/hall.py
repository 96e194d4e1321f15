"""Filling factors, effective fields of composite fermions, and host materials.

Filling factors are exact (`fractions.Fraction`): nu = n h / (e B). The table of sequences says to
which composite-fermion sequence a fraction belongs; a fraction may belong to two, or to none, and an
integer never does.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from fractions import Fraction
from math import gcd

import numpy as np
from numpy.typing import NDArray
from scipy.constants import e, h

from gapfit.errors import FillingError, InputError

__all__ = [
    "HOSTS",
    "Host",
    "SequenceMember",
    "density_from_filling",
    "effective_field",
    "field_at_filling",
    "filling_factor",
    "filling_label",
    "fractions_up_to",
    "host",
    "parse_filling",
    "plateau_resistance",
    "sequence_members",
]

FloatArray = NDArray[np.float64]
_FILLING = re.compile(r"\s*(?:nu\s*=\s*)?([+-]?\d+)(?:\s*/\s*(\d+))?\s*")


def parse_filling(text: str | int | Fraction) -> Fraction:
    """Exact filling factor of a text such as ``"2/3"``, ``"-2/3"`` or ``"1"``.

    Parameters
    ----------
    text : str, int or Fraction
        The filling factor. Decimal texts are refused, since they are not exact.

    Returns
    -------
    Fraction

    Raises
    ------
    FillingError
        If the text is no integer or fraction, or its denominator is zero.
    """
    if isinstance(text, (int, Fraction)):
        return Fraction(text)
    match = _FILLING.fullmatch(str(text))
    if match is None:
        raise FillingError(
            f"{text!r} is no filling factor; write an integer or an exact fraction such as '1/3' or '-4/3'"
        )
    numerator, denominator = int(match[1]), int(match[2] or 1)
    if denominator == 0:
        raise FillingError(f"{text!r} has the denominator zero; write a fraction such as '1/3'")
    return Fraction(numerator, denominator)


def filling_label(filling: Fraction) -> str:
    """Filling factor as text, ``"1/3"`` or ``"2"``."""
    return str(filling)


def filling_factor(density_per_m2: FloatArray | float, field_T: FloatArray | float) -> FloatArray:
    """Filling factor n h / (e B).

    Parameters
    ----------
    density_per_m2 : float or ndarray, m^-2
        Carrier density, negative for holes.
    field_T : float or ndarray, T
        Perpendicular field; zero field gives an infinite filling factor.

    Returns
    -------
    ndarray
    """
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(density_per_m2) * h / (e * np.asarray(field_T))


def field_at_filling(filling: Fraction | float, density_per_m2: float) -> float:
    """Field n h / (e nu) at which a density has a filling factor, T."""
    return density_per_m2 * h / (e * float(filling))


def density_from_filling(filling: Fraction | float, field_T: float) -> float:
    """Density nu e B / h, m^-2."""
    return float(filling) * e * field_T / h


def plateau_resistance(filling: Fraction | float) -> float:
    """Hall resistance h / (nu e^2) of a plateau, ohm."""
    return h / (e**2 * float(filling))


def fractions_up_to(max_denominator: int, low: float, high: float) -> list[Fraction]:
    """All fractions of odd denominator, and halves, between two filling factors.

    Parameters
    ----------
    max_denominator : int
        Largest denominator; even ones other than two are left out.
    low, high : float
        Range of filling factor, ends included.

    Returns
    -------
    list of Fraction
        In rising order.
    """
    found = set()
    for q in range(1, max_denominator + 1):
        if q % 2 == 0 and q != 2:
            continue
        for p in range(int(np.ceil(low * q - 1e-9)), int(np.floor(high * q + 1e-9)) + 1):
            if p != 0 and gcd(p, q) == 1:
                found.add(Fraction(p, q))
    return sorted(found)


@dataclass(frozen=True)
class SequenceMember:
    """A fraction as a member of a composite-fermion sequence.

    Attributes
    ----------
    filling : Fraction
        The filling factor, counted from the base level.
    sequence : str
        ``"p/(2p+1)"``, ``"p/(2p-1)"``, ``"p/(4p+1)"``, ``"p/(4p-1)"``; a leading ``"1-"`` or ``"2-"`` marks
        holes.
    p : int
        Number of filled composite-fermion levels.
    sign : int
        +1 where the effective field points along the applied one, -1 where it is reversed.
    flux : int
        Attached flux quanta, 2 or 4.
    """

    filling: Fraction
    sequence: str
    p: int
    sign: int
    flux: int

    @property
    def field_ratio(self) -> Fraction:
        """Exact ratio B_eff / B, signed."""
        return Fraction(self.sign, self.filling.denominator)


def _plain_member(reduced: Fraction, flux: int) -> tuple[int, int] | None:
    """(p, sign) with reduced = p / (flux p + sign), or None.

    The effective field B (1 - flux nu) is B / (flux p + 1) for sign +1 and -B / (flux p - 1) for sign -1.
    """
    p, q = reduced.numerator, reduced.denominator
    for sign in (1, -1):
        if q == flux * p + sign and q > 1:
            return p, sign
    return None


def sequence_members(filling: Fraction, base_level: int = 0) -> tuple[SequenceMember, ...]:
    """Composite-fermion sequences that a filling factor belongs to.

    Parameters
    ----------
    filling : Fraction
        Filling factor; negative ones are mirrored.
    base_level : int
        Filling nu_0 at which the level at hand begins.

    Returns
    -------
    tuple of SequenceMember
        Empty for integers and for fractions of no sequence, such as 4/11.

    Notes
    -----
    Two-flux: nu* = p/(2p+-1) has abs(B_eff) = B/(2p+-1). Four-flux: nu* = p/(4p+-1). Holes of the second
    spin branch, 1 < nu* < 2: 2 - nu* in the two-flux form, abs(B_eff) = B abs(2 nu* - 3). Four-flux holes:
    1 - nu* for nu* > 1/2.
    """
    reduced = abs(filling) - base_level
    members = []
    if reduced.denominator == 1 or reduced <= 0:
        return ()
    candidates = [(reduced, "", 2), (reduced, "", 4)]
    if 1 < reduced < 2:
        candidates = [(2 - reduced, "2-", 2)]
    elif Fraction(1, 2) < reduced < 1:
        candidates.append((1 - reduced, "1-", 4))
    for part, prefix, flux in candidates:
        found = _plain_member(part, flux)
        if found is not None:
            p, sign = found
            name = f"{prefix}p/({flux}p{'+' if sign > 0 else '-'}1)"
            members.append(SequenceMember(reduced, name, p, sign, flux))
    return tuple(members)


def effective_field(filling: Fraction, field_T: float, base_level: int = 0) -> float:
    """Signed effective field of composite fermions, T, of the first sequence a filling belongs to.

    Returns
    -------
    float, T
        NaN for integers and for fractions of no sequence.
    """
    members = sequence_members(filling, base_level)
    return float(members[0].field_ratio) * field_T if members else float("nan")


@dataclass(frozen=True)
class Host:
    """Constants of a host material; every one of them can be overridden in the study file.

    Attributes
    ----------
    name : str
        Key of the table.
    permittivity : float
        Relative permittivity.
    mass : float
        Effective mass in units of the free electron mass; NaN for Dirac electrons.
    g : float
        g factor.
    source : str
        Where the numbers come from.
    """

    name: str
    permittivity: float
    mass: float
    g: float
    source: str = "handbook values from memory; override them in the study file"


HOSTS: dict[str, Host] = {
    item.name: item
    for item in (
        Host("GaAs", 12.9, 0.067, -0.44),
        Host("ZnO", 8.5, 0.29, 1.94),
        Host("AlAs", 10.0, 0.46, 1.9),
        Host("CdTe", 10.2, 0.10, -1.6),
        Host("Si", 11.7, 0.19, 2.0),
        Host("Ge", 16.0, 0.08, 10.0),
        Host("graphene-hBN", 3.8, float("nan"), 2.0),
        Host("graphene-suspended", 1.0, float("nan"), 2.0),
        Host("bilayer-graphene", 3.8, 0.033, 2.0),
        Host("WSe2", 6.0, 0.45, 10.0),
        Host("MoSe2", 6.0, 0.6, 10.0),
    )
}
"""Built-in host materials by name."""


def host(name: str) -> Host:
    """Host material by name, case ignored.

    Raises
    ------
    InputError
        If the table has no such host.
    """
    for key, value in HOSTS.items():
        if key.lower() == name.lower():
            return value
    raise InputError(
        f"unknown host {name!r}; built in are {', '.join(HOSTS)} (or give permittivity yourself)"
    )
