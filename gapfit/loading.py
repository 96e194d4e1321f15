"""From the tables of raw files to sweeps: columns, units, currents, and where one sweep ends."""

from __future__ import annotations

import re
from collections.abc import Sequence
from itertools import pairwise
from pathlib import PurePath
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from gapfit.columns import (
    ColumnRule,
    Table,
    kind_of_name,
    looks_like_magnitude,
    parse_unit,
    resolved_unit,
    take,
    unit_notice,
    units_of,
)
from gapfit.cutting import LEAST_ROWS, Record, cut_record, grouped
from gapfit.errors import FileError, InputError, NotEnoughData
from gapfit.series import HIGHEST_TEMPERATURE_K, LARGEST_TEMPERATURE_STEP
from gapfit.traces import (
    FromName,
    FromTable,
    Sweep,
    TraceFamily,
    TraceSettings,
    corbino_conductivity,
)

__all__ = ["file_temperatures", "load_sweeps"]

FloatArray = NDArray[np.float64]


def load_sweeps(tables: Sequence[Table], settings: TraceSettings) -> TraceFamily:
    """All sweeps of some raw files, each cut into monotone passes of one field direction.

    Parameters
    ----------
    tables : sequence of Table
        The raw files, one or many.
    settings : TraceSettings
        Which columns mean what.

    Returns
    -------
    TraceFamily
        In order of rising temperature.

    Raises
    ------
    FileError
        If a column is missing, of the wrong unit, or holds what cannot be (a temperature not above zero, a
        field that does not change, a lock-in magnitude).
    NotEnoughData
        If nothing is left.
    """
    if not tables:
        raise NotEnoughData("no raw files; name them in the study, such as files = ['sweeps/*.csv']")
    notices: list[str] = []
    sweeps: list[Sweep] = []
    for table in tables:
        record = _read(table, settings, notices)
        found = cut_record(record, settings.sweep, notices)
        if not found and len(table) >= LEAST_ROWS:
            raise FileError(
                f"the {settings.sweep} goes to and fro, and never rises or falls over {LEAST_ROWS} rows, so "
                "this is no sweep; put the rows in the order in which they were measured, or name the column "
                "that is swept",
                file=table.source,
                column=_swept_column(settings),
            )
        sweeps += found
    if not sweeps:
        raise NotEnoughData(
            f"no sweep of at least {LEAST_ROWS} rows in {len(tables)} file(s); check the columns"
        )
    sweeps = grouped(sweeps)
    sweeps.sort(key=lambda sweep: (sweep.mean_temperature, sweep.group))
    _refuse_mixed_units(sweeps)
    return TraceFamily(
        tuple(sweeps), settings.sweep, settings.geometry, settings.gate_start, tuple(dict.fromkeys(notices))
    )


def _refuse_mixed_units(sweeps: Sequence[Sweep]) -> None:
    """Refuse sweeps in order of temperature that jump from kelvins to what must be millikelvins."""
    for low, high in pairwise(sweeps):
        if high.mean_temperature > LARGEST_TEMPERATURE_STEP * low.mean_temperature:
            raise FileError(
                f"found a temperature of {high.mean_temperature:.4g} K, while the next lower one is "
                f"{low.mean_temperature:.4g} K ({low.file}); millikelvins and kelvins seem to be mixed: "
                "correct the unit of one",
                file=high.file,
            )


def _swept_column(settings: TraceSettings) -> str | int | None:
    rule = getattr(settings, settings.sweep)
    return rule.column if isinstance(rule, ColumnRule) else None


def _read(table: Table, settings: TraceSettings, notices: list[str]) -> Record:
    """Columns of a file in house units, checked."""
    if len(table) == 0:
        raise FileError("the file holds no rows of numbers", file=table.source)
    notices += [f"{table.source}: {notice}" for notice in table.notices]
    nothing = np.full(len(table), np.nan)
    gate = nothing if settings.gate is None else take(table, settings.gate, "voltage", "V")
    density = nothing if settings.density is None else take(table, settings.density, "density", "m^-2")
    field = nothing if settings.field is None else _from(table, settings.field, "field", "T")
    swept = {"field": (settings.field, field), "gate": (settings.gate, gate)}
    rule, abscissa = swept.get(settings.sweep, (settings.density, density))
    if not isinstance(rule, ColumnRule):
        raise InputError(
            f"a {settings.sweep} sweep needs {settings.sweep} = {{ column = ... }} in [traces]; "
            f"found {rule!r}"
        )
    if settings.sweep != "field" and settings.field is None:
        raise InputError(
            f"a {settings.sweep} sweep needs the field: field_T = ... or field = {{ column = ... }}"
        )
    for used in (settings.field, settings.gate, settings.density, settings.rho_xx, settings.rho_xy):
        notice = unit_notice(table, used) if isinstance(used, ColumnRule) else None
        notices += [notice] if notice else []
    _refuse_constant(table, abscissa, rule, settings.sweep)
    temperature = _temperature(table, settings)
    current = _current(table, settings)
    signal, quantity = _longitudinal(table, settings, current)
    hall = quadrature = None
    if settings.rho_xy is not None:
        hall = _resistance(table, settings.rho_xy, settings, current)
    if settings.quadrature is not None:
        quadrature = _resistance(table, settings.quadrature, settings, current) * settings.geometry.factor
    return Record(
        table, abscissa, field, gate, density, temperature, signal, quantity, hall, quadrature, current,
        _contacts(table, settings),
    )  # fmt: skip


def _from(
    table: Table, rule: ColumnRule | FromName | FromTable | float, dimension: str, unit: str
) -> FloatArray:
    """Numbers of a column, or one number of the file's name, of another table, or of the study."""
    if isinstance(rule, ColumnRule):
        return take(table, rule, dimension, unit)
    if isinstance(rule, FromName):
        number = _number_in_name(table, rule, dimension)
    elif isinstance(rule, FromTable):
        number = _number_in_table(table, rule, dimension)
    else:
        number = float(rule)
    return np.full(len(table), number)


def _unit_factor(text: str, dimension: str, table: Table) -> float:
    unit = parse_unit(text)
    if unit is None or unit.dimension != dimension:
        raise FileError(
            f"unit {text!r} cannot be used for a {dimension}; allowed are {', '.join(units_of(dimension))}",
            file=table.source,
        )
    return unit.factor


def _number_in_name(table: Table, rule: FromName, dimension: str) -> float:
    try:
        match = re.search(rule.pattern, table.source.name)
        text = None if match is None else match["value"]
    except (re.error, IndexError) as problem:
        raise InputError(
            f"from_name = {rule.pattern!r} cannot be used ({problem}); write a regular expression with "
            "a group (?P<value>...)"
        ) from problem
    if text is None:
        raise FileError(
            f"the file name does not match from_name = {rule.pattern!r}, so its {dimension} is unknown",
            file=table.source,
        )
    try:
        number = float(text.replace("p", ".").replace(",", ".").rstrip("."))
    except ValueError as problem:
        raise FileError(
            f"{text!r} in the file name is no number; the group 'value' of from_name may hold digits and a "
            "'p' or point",
            file=table.source,
        ) from problem
    return number * _unit_factor(rule.unit, dimension, table)


def file_temperatures(rule: FromTable) -> dict[str, float]:
    """Temperatures by file name, of a table of files and temperatures.

    Parameters
    ----------
    rule : FromTable
        The table, and its column of temperatures if that is not plain from its name.

    Returns
    -------
    dict of str to float, K

    Raises
    ------
    FileError
        If the columns are not found or a file is listed twice.
    """
    return _listed(rule, "temperature")


def _listed(rule: FromTable, dimension: str) -> dict[str, float]:
    table = rule.table
    column = rule.column
    if column is None:
        column = next((name for name in table.values if kind_of_name(name) == dimension), None)
    names = next((n for n in table.columns if n.lower() in ("file", "name", "filename", "sweep")), None)
    if names is None:
        names = next(iter(table.texts), None)
    if column is None or names is None:
        raise FileError(
            f"needs a column 'file' and a column of the {dimension}; found {', '.join(table.columns)}",
            file=table.source,
        )
    numbers = take(table, ColumnRule(column, rule.unit), dimension, {"temperature": "K"}.get(dimension, "T"))
    texts = table.texts[names] if names in table.texts else [f"{v:g}" for v in table.values[names]]
    listed: dict[str, float] = {}
    for text, number, row in zip(texts, numbers, table.row, strict=True):
        if str(text) in listed:
            raise FileError(f"{str(text)!r} is listed twice", file=table.source, row=int(row), column=names)
        listed[str(text)] = float(number)
    return listed


def _number_in_table(table: Table, rule: FromTable, dimension: str) -> float:
    listed = _listed(rule, dimension)
    name = table.source.name
    stem = name.split(".", 1)[0]
    for text, number in listed.items():
        if PurePath(text).name in (name, table.source.stem, stem):
            return number
    raise FileError(
        f"{name!r} is not listed there, so its {dimension} is unknown; listed are "
        + ", ".join(list(listed)[:6])
        + (" ..." if len(listed) > 6 else ""),
        file=rule.table.source,
    )


def _refuse_constant(table: Table, abscissa: FloatArray, rule: ColumnRule, kind: str) -> None:
    if np.ptp(abscissa) <= 1e-9 * float(np.abs(abscissa).max()):
        raise FileError(
            f"found {abscissa[0]:g} in every row: the {kind} does not change, so this is no {kind} sweep; "
            "name the column that is swept",
            file=table.source,
            row=int(table.row[0]),
            column=rule.column,
        )


def _temperature(table: Table, settings: TraceSettings) -> FloatArray:
    rule = settings.temperature
    temperature = _from(table, rule, "temperature", "K")
    column = rule.column if isinstance(rule, ColumnRule) else None
    wrong = np.flatnonzero(~(temperature > 0))
    if wrong.size:
        raise FileError(
            f"found a temperature of {temperature[wrong[0]]:g} K; temperatures must be above zero: correct "
            "or remove the row",
            file=table.source,
            row=int(table.row[wrong[0]]) if column is not None else None,
            column=column,
        )
    hot = np.flatnonzero(temperature > HIGHEST_TEMPERATURE_K)
    if hot.size:
        raise FileError(
            f"found a temperature of {temperature[hot[0]]:g} K, which looks like millikelvins declared as "
            'kelvins; state the unit, such as unit = "mK"',
            file=table.source,
            row=int(table.row[hot[0]]) if column is not None else None,
            column=column,
        )
    return temperature


def _current(table: Table, settings: TraceSettings) -> FloatArray:
    rule = settings.current_A
    if rule is None:
        return np.full(len(table), np.nan)
    current = take(table, rule, "current", "A") if isinstance(rule, ColumnRule) else np.full(len(table), rule)
    zero = np.flatnonzero(current == 0)
    if zero.size:
        raise FileError(
            "the excitation current is zero; a resistance needs a current",
            file=table.source,
            row=int(table.row[zero[0]]) if isinstance(rule, ColumnRule) else None,
            column=rule.column if isinstance(rule, ColumnRule) else None,
        )
    return current


def _longitudinal(
    table: Table, settings: TraceSettings, current: FloatArray
) -> tuple[FloatArray, Literal["rho_xx", "sigma_xx"]]:
    """rho_xx, or sigma_xx of a Corbino disc."""
    rule, shape = settings.rho_xx, settings.geometry
    if shape.kind != "corbino":
        return _resistance(table, rule, settings, current) * shape.factor, "rho_xx"
    unit = resolved_unit(table, rule, ("voltage", "resistance", "conductance"), "ohm")
    if unit.dimension == "conductance":
        conductance = take(table, rule, "conductance", "S")
        _refuse_magnitude(table, rule, settings)
        return conductance * shape.factor / (1 - conductance * shape.lead_ohm), "sigma_xx"
    sigma = corbino_conductivity(_resistance(table, rule, settings, current), shape)
    bad = np.flatnonzero(~np.isfinite(sigma))
    if bad.size:
        raise FileError(
            f"the resistance equals lead_ohm = {shape.lead_ohm:g} ohm, which leaves an infinite "
            "conductivity; correct lead_ohm",
            file=table.source,
            row=int(table.row[bad[0]]),
            column=rule.column,
        )
    return sigma, "sigma_xx"


def _resistance(table: Table, rule: ColumnRule, settings: TraceSettings, current: FloatArray) -> FloatArray:
    """Resistance of a column in V or ohm."""
    _refuse_magnitude(table, rule, settings)
    default = "ohm" if settings.current_A is None else "V"
    unit = resolved_unit(table, rule, ("voltage", "resistance"), default)
    numbers = take(table, rule, ("voltage", "resistance"), default)
    if unit.dimension == "resistance":
        return numbers
    if settings.current_A is None:
        raise FileError(
            f"this column is a voltage ({unit.name}); give the excitation current, such as "
            'current_A = 1e-8, or unit = "ohm"',
            file=table.source,
            column=rule.column,
        )
    return numbers / current


def _refuse_magnitude(table: Table, rule: ColumnRule, settings: TraceSettings) -> None:
    name = table.find(rule.column)
    if settings.allow_magnitude or name not in table.values:
        return
    if looks_like_magnitude(name, table.values[name], table.columns, rule.unit or table.unit(name)):
        raise FileError(
            "this looks like the magnitude of a lock-in, which is never negative: noise about zero becomes a "
            "false resistance of 1.25 standard deviations at the minima, and gaps come out too small. "
            "Name the in-phase channel (X), or set allow_magnitude = true in [traces] if it is none",
            file=table.source,
            column=name,
        )


def _contacts(table: Table, settings: TraceSettings) -> NDArray[np.str_]:
    rule = settings.contacts
    if not isinstance(rule, ColumnRule):
        return np.full(len(table), rule)
    name = table.find(rule.column)
    if name in table.texts:
        return table.texts[name]
    return np.array([f"{value:g}" for value in table.values[name]])
