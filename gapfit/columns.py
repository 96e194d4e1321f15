"""Columns of measured numbers, their units, and the rules by which a study takes them.

A `Table` is what any data file becomes, whatever its format. A `ColumnRule` says which column holds a
quantity and how its numbers are to be read; `take` applies it and returns house units (K, T, V, ohm, A,
S, m^-2, s).
"""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from difflib import get_close_matches
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from gapfit.errors import FileError

__all__ = [
    "UNITS",
    "ColumnRule",
    "Table",
    "Unit",
    "kind_of_name",
    "looks_like_magnitude",
    "parse_unit",
    "resolved_unit",
    "split_heading",
    "take",
    "unit_notice",
    "units_of",
]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
TextArray = NDArray[np.str_]

OVERLOAD = 1e30
"""Readings at or above this are overload markers of instruments (9.9e37 is a common one), never data."""


@dataclass(frozen=True)
class Unit:
    """A unit that a column may have.

    Attributes
    ----------
    name : str
        Spelling used in messages.
    dimension : str
        ``"temperature"``, ``"field"``, ``"voltage"``, ``"resistance"``, ``"current"``, ``"conductance"``,
        ``"density"`` or ``"time"``.
    factor : float
        House units (K, T, V, ohm, A, S, m^-2, s) per one of this unit.
    """

    name: str
    dimension: str
    factor: float


_FACTORS: dict[str, dict[str, float]] = {
    "temperature": {"K": 1.0, "mK": 1e-3, "uK": 1e-6},
    "field": {"T": 1.0, "mT": 1e-3, "G": 1e-4, "kG": 0.1, "Oe": 1e-4, "kOe": 0.1},
    "voltage": {"V": 1.0, "mV": 1e-3, "uV": 1e-6, "nV": 1e-9},
    "resistance": {"ohm": 1.0, "mohm": 1e-3, "kohm": 1e3, "Mohm": 1e6},
    "current": {"A": 1.0, "mA": 1e-3, "uA": 1e-6, "nA": 1e-9, "pA": 1e-12},
    "conductance": {"S": 1.0, "mS": 1e-3, "uS": 1e-6, "nS": 1e-9},
    "density": {"m^-2": 1.0, "cm^-2": 1e4},
    "time": {"s": 1.0, "ms": 1e-3, "min": 60.0, "h": 3600.0},
}

UNITS: dict[str, Unit] = {
    name: Unit(name, dimension, factor)
    for dimension, factors in _FACTORS.items()
    for name, factor in factors.items()
}
"""Every unit by its spelling in messages; `parse_unit` knows more spellings."""

_LONG_NAMES = {
    "kelvin": "K",
    "tesla": "T",
    "gauss": "G",
    "volt": "V",
    "volts": "V",
    "amp": "A",
    "ampere": "A",
    "siemens": "S",
    "sec": "s",
    "seconds": "s",
}
_SPELLINGS = (
    (re.compile(r"[µμ]"), "u"),
    (re.compile(r"[ΩΩ]"), "ohm"),
    (re.compile(r"ohms?", re.IGNORECASE), "ohm"),
    (re.compile(r"/(?:sq\.?|square|□)$"), ""),
    (re.compile(r"⁻²|\*\*-2|\^\{-2\}|\^\(-2\)"), "^-2"),
    (re.compile(r"^1?/(c?m)(?:\^|\*\*)?(?:2|²)$"), r"\1^-2"),
    (re.compile(r"^(c?m)-2$"), r"\1^-2"),
)


def parse_unit(text: str) -> Unit | None:
    """Unit of a text such as ``"mK"``, ``"[kΩ]"`` or ``"1/cm^2"``; None where it names none.

    Parameters
    ----------
    text : str
        Spelling found in a file or a study. Upper and lower case differ (``mohm``, ``Mohm``).

    Returns
    -------
    Unit or None
    """
    plain = re.sub(r"\s+", "", text).strip("()[]{}")
    for pattern, spelling in _SPELLINGS:
        plain = pattern.sub(spelling, plain)
    return UNITS.get(_LONG_NAMES.get(plain.lower(), plain))


def units_of(dimension: str | Sequence[str]) -> tuple[str, ...]:
    """Spellings of the units of one dimension, or of several."""
    wanted = (dimension,) if isinstance(dimension, str) else tuple(dimension)
    return tuple(name for name, unit in UNITS.items() if unit.dimension in wanted)


_KINDS = tuple(
    (kind, re.compile("|".join(patterns)))
    for kind, patterns in (
        (
            "temperature",
            (r"t\d*", r"t_?(?:mc|bath|sample|plate|mix|probe)", r".*temp.*", r"thermo.*", r"bath.*"),
        ),
        (
            "field",
            (
                r"b\d*",
                r"h",
                r"b_?(?:z|perp|tot|field|mag)",
                r"(?:.*[_ ])?(?:mag_?)?field(?:[_ ].*)?",
                r"magnet.*",
            ),
        ),
        ("time", (r"time.*", r"t_s", r"sec(?:onds)?", r"elapsed.*")),
        ("current", (r"i\d*", r"i_?(?:sd|ds|xx|exc|bias|drive|ac)", r".*current.*", r"excitation")),
        ("gate", (r"v_?(?:g|bg|tg|gate|back|top).*", r".*gate.*")),
        ("density", (r"n", r"n_?2d", r"n_?s", r"density.*", r"carrier.*")),
        ("resistance", (r"r\d*", r"r_?(?:xx|xy|yx|yy|h|hall)", r"rho.*", r".*resist.*")),
        ("conductance", (r"sigma.*", r"g_?(?:xx|xy)?", r".*conduct.*")),
        (
            "voltage",
            (
                r"v.*",
                r"u_?(?:xx|xy|yx|yy|h)?(?:_.*)?",
                r".*volt.*",
                r"(?:.*_)?[xy]\d*",
                r"lock-?in.*",
                r"lia.*",
                r".*hall.*",
            ),
        ),
    )
)


def kind_of_name(name: str) -> str | None:
    """What a column name seems to mean, by the habits of the trade.

    Returns
    -------
    str or None
        A dimension of `Unit`, ``"gate"`` for a gate voltage, or None.
    """
    bare = name.strip()
    head, _, suffix = bare.rpartition("_")
    spellings = (bare, head) if head and parse_unit(suffix) is not None else (bare,)
    for spelling in spellings:
        for kind, pattern in _KINDS:
            if pattern.fullmatch(spelling.lower()):
                return kind
    return None


def _fits(kind: str | None, unit: Unit) -> bool:
    """Whether a unit is one that a column of this kind would have."""
    return kind is None or unit.dimension == ("voltage" if kind == "gate" else kind)


def split_heading(heading: str) -> tuple[str, str | None]:
    """Name and unit of a heading such as ``"B (T)"``, ``"B [T]"``, ``"B / T"`` or ``"T_mK"``.

    A suffix after an underscore stays part of the name, and counts as a unit only where the name before
    it is of that kind: ``T_mK`` has a unit, ``V_G`` and ``Vxx_A`` have none.

    Returns
    -------
    name : str
    unit : str or None
    """
    bracket = re.fullmatch(r"(.*\S)\s*(?:\(([^()]*)\)|\[([^\[\]]*)\])", heading)
    if bracket is not None:
        unit = parse_unit(bracket[2] if bracket[2] is not None else bracket[3])
        return (bracket[1], unit.name) if unit is not None else (heading, None)
    slash = re.fullmatch(r"(.*\S)\s*/\s*(\S+)", heading)
    if slash is not None:
        unit = parse_unit(slash[2])
        kind = kind_of_name(slash[1])
        return (slash[1], unit.name) if unit is not None and kind and _fits(kind, unit) else (heading, None)
    stem, _, suffix = heading.rpartition("_")
    unit, kind = parse_unit(suffix), kind_of_name(stem)
    known = unit is not None and bool(stem) and kind is not None and _fits(kind, unit)
    return heading, unit.name if known and unit is not None else None


@dataclass(frozen=True)
class Table:
    """The content of one data file.

    Attributes
    ----------
    source : Path
        The file.
    columns : tuple of str
        Column names in the order of the file, without units in brackets; ``"1"``, ``"2"``, ... where the
        file names none.
    units : tuple of (str or None)
        Unit of each column as far as the file tells.
    headings : tuple of str
        The names as they stand in the file.
    values : mapping of str to ndarray[n_row]
        Columns of numbers.
    texts : mapping of str to ndarray[n_row] of str
        Columns of text.
    row : ndarray[n_row] of int
        Row in the file of each record, counted from 1 as an editor does.
    block : ndarray[n_row] of int
        Number of the block, from 0; blocks are parted by blank lines or repeated headings.
    comments : tuple of str
        Comment lines and free text, without their markers.
    notices : tuple of str
        What was left out or decided while reading.
    """

    source: Path
    columns: tuple[str, ...]
    units: tuple[str | None, ...]
    headings: tuple[str, ...]
    values: Mapping[str, FloatArray]
    row: IntArray
    block: IntArray
    texts: Mapping[str, TextArray] = field(default_factory=dict)
    comments: tuple[str, ...] = ()
    notices: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        for array in (*self.values.values(), *self.texts.values(), self.row, self.block):
            array.setflags(write=False)

    def __len__(self) -> int:
        """Number of records."""
        return int(self.row.size)

    def find(self, column: str | int) -> str:
        """Name of a column given by its name, its full heading, or its position counted from 1.

        Raises
        ------
        FileError
            If there is none; names the nearest and all that exist.
        """
        if isinstance(column, int):
            if 1 <= column <= len(self.columns):
                return self.columns[column - 1]
            raise self._no_column(column, f"there are {len(self.columns)} columns")
        if column in self.columns:
            return column
        for name, heading in zip(self.columns, self.headings, strict=True):
            if re.sub(r"\s+", "", column) == re.sub(r"\s+", "", heading):
                return name
        lowered = {name.lower(): name for name in self.columns}
        near = [lowered[key] for key in get_close_matches(column.lower(), list(lowered), n=3, cutoff=0.5)]
        hint = f"did you mean {' or '.join(map(repr, near))}? " if near else ""
        raise self._no_column(column, f"{hint}the columns are {', '.join(self.columns)}")

    def unit(self, column: str | int) -> str | None:
        """Unit that the file states for a column, or None."""
        return self.units[self.columns.index(self.find(column))]

    def _no_column(self, column: str | int, advice: str) -> FileError:
        return FileError(f"there is no such column; {advice}", file=self.source, column=column)


@dataclass(frozen=True)
class ColumnRule:
    """Which column holds a quantity: value = scale * column + offset, in `unit`.

    Attributes
    ----------
    column : str or int
        Name, or position counted from 1.
    unit : str, optional
        Unit of scale * column + offset. None takes the unit that the file states, else the usual one.
    scale, offset : float
        Applied before units are converted.
    """

    column: str | int
    unit: str | None = None
    scale: float = 1.0
    offset: float = 0.0


def _dimensions(dimension: str | Sequence[str]) -> tuple[str, ...]:
    return (dimension,) if isinstance(dimension, str) else tuple(dimension)


def _declared(table: Table, rule: ColumnRule, dimension: str | Sequence[str]) -> Unit | None:
    """Unit that the study declares, checked against what is allowed."""
    if rule.unit is None:
        return None
    unit = parse_unit(rule.unit)
    if unit is None or unit.dimension not in _dimensions(dimension):
        raise FileError(
            f"unit {rule.unit!r} cannot be used for a {' or '.join(_dimensions(dimension))}; "
            f"allowed are {', '.join(units_of(dimension))}",
            file=table.source,
            column=rule.column,
        )
    return unit


def resolved_unit(table: Table, rule: ColumnRule, dimension: str | Sequence[str], default_unit: str) -> Unit:
    """Unit in which a column counts: the study's, else the file's, else the usual one.

    Parameters
    ----------
    table : Table
    rule : ColumnRule
    dimension : str or sequence of str
        What the quantity may be, such as ``("voltage", "resistance")``.
    default_unit : str
        Unit where neither the study nor the file names one.

    Returns
    -------
    Unit

    Raises
    ------
    FileError
        If the study's unit is unknown or of another dimension, or the file's is of another dimension and
        no scale or offset explains that.
    """
    stated = table.unit(rule.column)
    found = None if stated is None else parse_unit(stated)
    declared = _declared(table, rule, dimension)
    wanted = _dimensions(dimension) if declared is None else (declared.dimension,)
    rescaled = declared is not None and (rule.scale != 1.0 or rule.offset != 0.0)
    if found is not None and found.dimension not in wanted and not rescaled:
        raise FileError(
            f"the file gives this column in {found.name} (a {found.dimension}), but the study takes it as a "
            f"{' or '.join(wanted)}; name another column or correct the unit",
            file=table.source,
            column=rule.column,
        )
    return declared or found or UNITS[default_unit]


def unit_notice(table: Table, rule: ColumnRule) -> str | None:
    """Warning where the file and the study state different units; the study's unit is the one used.

    Returns
    -------
    str or None
    """
    stated = table.unit(rule.column)
    declared = None if rule.unit is None else parse_unit(rule.unit)
    if stated is None or declared is None or stated == declared.name:
        return None
    if rule.scale != 1.0 or rule.offset != 0.0:
        return None
    return (
        f"{table.source}, column {rule.column!r}: the file says {stated}, the study says {declared.name}; "
        f"{declared.name} is used"
    )


def take(table: Table, rule: ColumnRule, dimension: str | Sequence[str], default_unit: str) -> FloatArray:
    """Numbers of a quantity in house units, (scale * column + offset) * factor of the unit.

    Parameters
    ----------
    table : Table
    rule : ColumnRule
    dimension : str or sequence of str
        What the quantity may be; `resolved_unit` tells which one it is.
    default_unit : str
        Unit where neither the study nor the file names one.

    Returns
    -------
    ndarray[n_row], K, T, V, ohm, A, S, m^-2 or s

    Raises
    ------
    FileError
        If there is no such column, it holds text, missing readings or overload markers, or the unit is wrong.
    """
    name = table.find(rule.column)
    unit = resolved_unit(table, rule, dimension, default_unit)
    if name not in table.values:
        raise FileError(
            f"found {str(table.texts[name][0])!r}, but this column must hold numbers",
            file=table.source,
            row=int(table.row[0]),
            column=name,
        )
    raw = table.values[name]
    _refuse_unusable(table, name, raw)
    return (rule.scale * raw + rule.offset) * unit.factor


def _refuse_unusable(table: Table, name: str, raw: FloatArray) -> None:
    bad = np.flatnonzero(~(np.abs(raw) < OVERLOAD))
    if bad.size == 0:
        return
    first = float(raw[bad[0]])
    reason = (
        "found NaN; a missing reading must be left out: remove the row, or name another column"
        if np.isnan(first)
        else f"found {first:g}, which is an overload marker and no reading; remove the row"
    )
    more = f" ({bad.size} rows are like this)" if bad.size > 1 else ""
    raise FileError(reason + more, file=table.source, row=int(table.row[bad[0]]), column=name)


_MAGNITUDE_WORDS = frozenset({"mag", "magn", "magnitude", "amplitude", "ampl", "modulus", "abs"})


def looks_like_magnitude(
    name: str, values: FloatArray, columns: Sequence[str] = (), unit: str | None = None
) -> bool:
    """Whether a column seems to be the magnitude sqrt(X^2 + Y^2) of a lock-in rather than its signed channel.

    A magnitude is never negative, so that noise about zero becomes a false background.

    Parameters
    ----------
    name : str
        Column name.
    values : ndarray[n_row]
        Its numbers; one negative number rules a magnitude out.
    columns : sequence of str
        All column names of the file: a column beside its own X and Y channels that is never negative is
        taken for a magnitude whatever its name.
    unit : str, optional
        Unit of the column; a bare ``R`` in ohm is a resistance.

    Returns
    -------
    bool
    """
    if values.size == 0 or bool(np.any(values < 0)):
        return False
    if re.search(r"\|.+\|", name):
        return True
    tokens = [token for token in re.split(r"[^a-z0-9]+", name.lower()) if token]
    if not _MAGNITUDE_WORDS.isdisjoint(tokens):
        return kind_of_name(name) not in ("field", "temperature")
    ohms = unit is not None and (known := parse_unit(unit)) is not None and known.dimension == "resistance"
    if tokens and re.fullmatch(r"r\d?", tokens[-1]) and not ohms:
        return True
    return _beside_its_channels(name, columns)


def _beside_its_channels(name: str, columns: Sequence[str]) -> bool:
    """Whether the columns hold both an X and a Y channel of the same stem as `name`, which is neither."""
    lowered = {column.lower() for column in columns}
    own = name.lower()
    stem = re.sub(r"[ _.\-](?:r|v|total)$", "", own)
    if re.fullmatch(r"(?:.*[ _.\-])?[xy]", own) or stem in ("x", "y"):
        return False
    return any({f"{stem}{mark}x", f"{stem}{mark}y"} <= lowered for mark in ("_", " ", "-", ".", ""))
