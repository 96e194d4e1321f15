"""Where one sweep of a record ends and the next begins, and which sweeps were taken together."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from gapfit.columns import Table
from gapfit.passes import digit, gap_segments, merged, passes, plateau_edges
from gapfit.traces import SAME_FIELD, Sweep

__all__ = ["LEAST_ROWS", "Record", "cut_record", "grouped"]

FloatArray = NDArray[np.float64]

LEAST_ROWS = 12
"""Shorter passes are dropped."""

TEMPERATURE_STEP, FIXED_STEP, CURRENT_STEP = 0.04, 0.01, 0.05
"""Relative steps of temperature, fixed field and current that begin a new sweep (own choice)."""

SAME_TEMPERATURE, SAME_TEMPERATURE_ACROSS_FILES = 0.03, 0.01
"""Sweeps are taken together where their temperatures agree to these shares (own choice)."""


@dataclass(frozen=True, eq=False)
class Record:
    """The columns of one file in house units, before it is cut into sweeps.

    Attributes
    ----------
    table : Table
        The file.
    abscissa : ndarray[n_row], T, V or m^-2
        What is swept.
    field_T, gate_V, density : ndarray[n_row], T, V, m^-2
        NaN where not recorded.
    temperature : ndarray[n_row], K
    signal : ndarray[n_row], ohm or S
        rho_xx, or sigma_xx of a Corbino disc, as `quantity` says.
    quantity : {"rho_xx", "sigma_xx"}
    hall, quadrature : ndarray[n_row], ohm, or None
    current : ndarray[n_row], A
        NaN where unknown.
    contacts : ndarray[n_row] of str
    """

    table: Table
    abscissa: FloatArray
    field_T: FloatArray
    gate_V: FloatArray
    density: FloatArray
    temperature: FloatArray
    signal: FloatArray
    quantity: Literal["rho_xx", "sigma_xx"]
    hall: FloatArray | None
    quadrature: FloatArray | None
    current: FloatArray
    contacts: NDArray[np.str_]


def cut_record(record: Record, kind: Literal["field", "density", "gate"], notices: list[str]) -> list[Sweep]:
    """Monotone passes of one field direction of a record."""
    cuts = (np.flatnonzero(np.diff(record.table.block)) + 1).tolist()
    cuts += (np.flatnonzero(record.contacts[1:] != record.contacts[:-1]) + 1).tolist()
    cuts += plateau_edges(record.temperature, TEMPERATURE_STEP)
    if kind != "field":
        cuts += plateau_edges(record.field_T, FIXED_STEP)
    if np.isfinite(record.current).all():
        cuts += plateau_edges(record.current, CURRENT_STEP)
    sweeps, dropped = [], 0
    for start, stop in passes(record.abscissa, cuts):
        for part in _by_field_sign(record, kind, np.arange(start, stop)):
            sweep = _sweep(record, kind, part, record.abscissa[stop - 1] >= record.abscissa[start], notices)
            sweeps += [sweep] if sweep is not None else []
            dropped += part.size if sweep is None else 0
    if dropped:
        notices.append(f"{record.table.source}: {dropped} rows between sweeps are not used")
    return sweeps


def _by_field_sign(record: Record, kind: str, rows: NDArray[np.int64]) -> list[NDArray[np.int64]]:
    """Rows of positive and of negative field, zero left out."""
    field = record.field_T[rows]
    if kind != "field":
        return [rows]
    return [rows[mask] for mask in (field > 0, field < 0) if mask.any()]


def _sweep(
    record: Record, kind: Literal["field", "density", "gate"], rows: NDArray[np.int64], up: bool,
    notices: list[str],
) -> Sweep | None:  # fmt: skip
    """One sweep in order of rising abscissa, or None where there is too little of it."""
    if rows.size < LEAST_ROWS or np.ptp(record.abscissa[rows]) < 0.01 * np.ptp(record.abscissa):
        return None
    optional = [column for column in (record.hall, record.quadrature) if column is not None]
    names = (record.field_T, record.gate_V, record.density, record.temperature, record.signal)
    columns = np.stack([column[rows] for column in (*names, *optional)])
    abscissa, columns, first = merged(record.abscissa[rows], columns)
    if abscissa.size < LEAST_ROWS:
        return None
    if abscissa.size < rows.size:
        notices.append(
            f"{record.table.source}: {rows.size - abscissa.size} points repeat another one's {kind} and were "
            "averaged with it"
        )
    field, gate, density, temperature, signal = columns[:5]
    rest = list(columns[5:])
    hall = rest.pop(0) if record.hall is not None else None
    current = record.current[rows]
    return Sweep(
        file=str(record.table.source),
        row=record.table.row[rows][first],
        kind=kind,
        field_T=field,
        gate_V=gate,
        density_per_m2=density,
        temperature_K=temperature,
        signal=signal,
        quantity=record.quantity,
        rho_xy_ohm=hall,
        quadrature=rest.pop(0) if rest else None,
        direction="up" if up else "down",
        field_sign=1 if np.median(field) > 0 else -1,
        group=-1,
        current_A=float(np.median(current)),
        contacts=str(record.contacts[rows[0]]),
        step=digit(record.signal[rows]),
        segment=gap_segments(abscissa),
        one_sided=np.zeros(abscissa.size, dtype=bool),
    )


@dataclass(frozen=True, eq=False)
class _Unit:
    """Sweeps that were taken together."""

    key: tuple[str, str, float]
    temperature: float
    file: str
    members: tuple[int, ...]
    roles: frozenset[tuple[int, str]]


def _key(sweep: Sweep) -> tuple[str, str, float]:
    """What sweeps that are joined must share: contacts, current, fixed field."""
    current = f"{abs(sweep.current_A):.2g}"
    return sweep.contacts, current, 0.0 if sweep.kind == "field" else sweep.mean_field


def grouped(sweeps: list[Sweep]) -> list[Sweep]:
    """Sweeps with their group numbers: one temperature, every field direction and sweep direction once."""
    units: list[_Unit] = []
    for index, sweep in enumerate(sweeps):
        role = (sweep.field_sign, sweep.direction)
        unit = _Unit(_key(sweep), sweep.mean_temperature, sweep.file, (index,), frozenset({role}))
        last = units[-1] if units else None
        if last is not None and last.file == unit.file and _may_join(last, unit, SAME_TEMPERATURE):
            units[-1] = _joined(last, unit)
        else:
            units.append(unit)
    units = _join_files(units)
    number = {member: group for group, unit in enumerate(units) for member in unit.members}
    return [replace(sweep, group=number[index]) for index, sweep in enumerate(sweeps)]


def _may_join(one: _Unit, two: _Unit, tolerance: float) -> bool:
    close = abs(one.temperature - two.temperature) <= tolerance * one.temperature
    alike = one.key[:2] == two.key[:2] and abs(one.key[2] - two.key[2]) <= SAME_FIELD * one.key[2]
    return alike and close and one.roles.isdisjoint(two.roles)


def _joined(one: _Unit, two: _Unit) -> _Unit:
    members = one.members + two.members
    return replace(one, members=members, roles=one.roles | two.roles)


def _join_files(units: list[_Unit]) -> list[_Unit]:
    """Join units of different files that complete each other, the nearest temperatures first."""
    pairs = [
        (abs(one.temperature - two.temperature), i, i + 1 + j)
        for i, one in enumerate(units)
        for j, two in enumerate(units[i + 1 :])
        if one.file != two.file and _may_join(one, two, SAME_TEMPERATURE_ACROSS_FILES)
    ]
    current: dict[int, _Unit] = dict(enumerate(units))
    owner = list(range(len(units)))
    for _, i, j in sorted(pairs):
        left, right = owner[i], owner[j]
        if left != right and _may_join(current[left], current[right], SAME_TEMPERATURE_ACROSS_FILES):
            current[left] = _joined(current[left], current.pop(right))
            owner = [left if number == right else number for number in owner]
    return list(current.values())
