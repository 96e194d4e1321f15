"""Cells, headings and notes of a printed table of gaps, whatever the format."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from math import isnan, nan
from typing import Any

from gapfit.digest import CONVENTIONS, WITHOUT_GAP, flag_words
from gapfit.errors import InputError
from gapfit.mechanisms import parse_combination
from gapfit.rounding import Rounded, RoundedInterval, RoundedLimit, round_interval, round_limit, round_value
from gapfit.units import KELVIN_PER_MEV, coulomb_scale

__all__ = [
    "COLUMNS",
    "FORMATS",
    "Column",
    "Row",
    "TableStyle",
    "caption",
    "marked",
    "unit_factor",
    "usual_columns",
]

FORMATS = ("text", "md", "html", "tex", "csv", "json")
UNITS = {"K": "K", "meV": "meV", "coulomb": "e²/(4πε₀εℓ_B)"}
LEVELS = (68, 95)
MARKS = "abcdefghijklmnopqrstuvwxyz"

Row = Mapping[str, Any]
Item = Rounded | RoundedInterval | RoundedLimit | str | float
"""What a cell holds: something rounded, words, or a number with as many digits as it is worth."""


@dataclass(frozen=True)
class TableStyle:
    """How a table of gaps is printed.

    Attributes
    ----------
    format : {"text", "md", "html", "tex", "csv", "json"}
    unit : {"K", "meV", "coulomb"}
        Unit of the gaps; ``"coulomb"`` needs permittivity and field.
    level : {68, 95}
        Probability of the equal-tailed intervals, per cent.
    convention : {"gap", "half"}
        The gap, or half of it (the activation energy).
    columns : tuple of str
        Keys of `COLUMNS`, or, for csv and json, columns of gaps.csv; empty for the usual ones.
    standalone : bool
        Whether LaTeX comes as a document that compiles alone.

    Raises
    ------
    InputError
        If a choice is not among those allowed.
    """

    format: str = "text"
    unit: str = "K"
    level: int = 95
    convention: str = "gap"
    columns: tuple[str, ...] = ()
    standalone: bool = True

    def __post_init__(self) -> None:
        choices: tuple[tuple[str, Any, Sequence[Any]], ...] = (
            ("format", self.format, FORMATS),
            ("unit", self.unit, tuple(UNITS)),
            ("level", self.level, LEVELS),
            ("convention", self.convention, tuple(CONVENTIONS)),
        )
        for name, given, allowed in choices:
            if given not in allowed:
                raise InputError(f"{name} {given!r} is unknown; allowed are {', '.join(map(str, allowed))}")

    @property
    def factor(self) -> float:
        """Factor of the convention."""
        return 1.0 if self.convention == "gap" else 0.5

    def chosen(self, usual: Sequence[str], allowed: Sequence[str]) -> tuple[str, ...]:
        """The columns asked for, or the usual ones.

        Raises
        ------
        InputError
            If one is not among those allowed.
        """
        for name in self.columns:
            if name not in allowed:
                raise InputError(f"column {name!r} is unknown; allowed are {', '.join(allowed)}")
        return self.columns or tuple(usual)


@dataclass(frozen=True)
class Column:
    """A column of a printed table.

    Attributes
    ----------
    heading : str
        Heading with unit; ``{unit}`` and ``{gap}`` are filled in.
    latex : str
        The same for LaTeX.
    cell : callable
        Makes an item of a row and a style.
    digits : int
        Significant digits of plain numbers.
    """

    heading: str
    latex: str
    cell: Callable[[Row, TableStyle], Item]
    digits: int = 0


def unit_factor(row: Row, style: TableStyle) -> float:
    """Factor from kelvin to unit and convention of a style; NaN where permittivity or field is unknown."""
    if style.unit == "meV":
        return style.factor / KELVIN_PER_MEV
    if style.unit == "coulomb":
        known = row["field_T"] and row["permittivity"] > 0
        return style.factor / float(coulomb_scale(row["field_T"], row["permittivity"])) if known else nan
    return style.factor


def _gap_cell(row: Row, style: TableStyle) -> Item:
    """Gap with errors, else a limit, else missing."""
    factor = unit_factor(row, style)
    gap = row["gap_K"] * factor
    if not isnan(gap):
        low, high = (row[f"gap_{end}{style.level}_K"] * factor for end in ("low", "high"))
        return round_value(gap, high - gap, gap - low)
    lower, upper = row["gap_lower95_K"] * factor, row["gap_upper95_K"] * factor
    return round_limit("<", upper) if isnan(lower) else round_limit(">", lower)


def _interval_cell(level: int) -> Callable[[Row, TableStyle], Item]:
    def cell(row: Row, style: TableStyle) -> Item:
        factor = unit_factor(row, style)
        return round_interval(row[f"gap_low{level}_K"] * factor, row[f"gap_high{level}_K"] * factor)

    return cell


def _number(name: str, factor: float = 1.0) -> Callable[[Row, TableStyle], Item]:
    return lambda row, style: float(row[name]) * factor


def _words(name: str) -> Callable[[Row, TableStyle], Item]:
    return lambda row, style: str(row[name]) or "–"


def _probability(name: str) -> Callable[[Row, TableStyle], Item]:
    return lambda row, style: f"{row[name]:.2f}"


def _mechanism_cell(row: Row, style: TableStyle) -> Item:
    return parse_combination(row["mechanism"]).label


def _hopping_cell(row: Row, style: TableStyle) -> Item:
    kind = {"es": "ES", "mott": "Mott"}.get(row["hopping"], "")
    return f"{kind} {row['hopping_T0_K']:.2g}" if kind else "–"


def _window_cell(row: Row, style: TableStyle) -> Item:
    return f"{row['window_low_K']:.3g} to {row['window_high_K']:.3g}"


COLUMNS: dict[str, Column] = {
    "sample": Column("sample", "Sample", _words("sample")),
    "cooldown": Column("cool-down", "Cool-down", _words("cooldown")),
    "filling": Column("ν", r"$\nu$", _words("filling")),
    "field": Column("B (T)", r"$B$ (\si{\tesla})", _number("field_T"), 4),
    "effective_field": Column(
        "B_eff (T)", r"$B_\mathrm{eff}$ (\si{\tesla})", _number("effective_field_T"), 3
    ),
    "verdict": Column("verdict", "Verdict", _words("verdict")),
    "p_activated": Column("P(activated)", r"$P_\mathrm{act}$", _probability("p_activated")),
    "gap": Column("{gap} ({unit})", "{gap} ({unit})", _gap_cell),
    "interval68": Column("{gap}, 68 % ({unit})", r"\SI{68}{\percent} ({unit})", _interval_cell(68)),
    "interval95": Column("{gap}, 95 % ({unit})", r"\SI{95}{\percent} ({unit})", _interval_cell(95)),
    "prefactor": Column("prefactor (kΩ)", r"Prefactor (\si{\kilo\ohm})", _number("prefactor_ohm", 1e-3), 2),
    "prefactor_over_eq2h": Column("prefactor ratio", "Prefactor ratio", _number("prefactor_over_eq2h"), 2),
    "mechanism": Column("likeliest mechanism", "Likeliest mechanism", _mechanism_cell),
    "p_mechanism": Column("P(mechanism)", r"$P_\mathrm{mech}$", _probability("p_mechanism")),
    "hopping": Column("hopping T₀ (K)", r"Hopping $T_0$ (\si{\kelvin})", _hopping_cell),
    "electron_T0": Column("electron T₀ (K)", r"Electron $T_0$ (\si{\kelvin})", _number("electron_T0_K"), 2),
    "leak": Column("leak (Ω)", r"Leak (\si{\ohm})", _number("leak_ohm"), 2),
    "window": Column("window (K)", r"Window (\si{\kelvin})", _window_cell),
    "n_points": Column("points", "Points", lambda row, style: str(row["n_points"])),
    "decades": Column("decades", "Decades", _number("decades_used"), 2),
}
"""Columns that a printed table can have, by the key that options use."""


def usual_columns(rows: Sequence[Row]) -> tuple[str, ...]:
    """Columns printed where none are asked for; sample and cool-down only where there are several."""
    several = [name for name in ("sample", "cooldown") if len({row[name] for row in rows}) > 1]
    return (*several, "filling", "field", "gap", "verdict", "p_activated", "mechanism", "window")


# --------------------------------------------------------------------------------------- notes and caption


def _row_notes(row: Row) -> list[str]:
    """What a reader must know about a row beyond its numbers."""
    notes, cause = [], f": {row['verdict_cause']}" if row["verdict_cause"] else ""
    if row["verdict"] == "unresolved":
        notes.append(f"the data do not decide whether there is an activated regime{cause}")
    if row["verdict"] == "inconsistent":
        notes.append(f"not to be trusted{cause}")
    if row["verdict"] in WITHOUT_GAP:
        notes.append(f"{row['verdict']}{cause}")
        if not (isnan(row["gap_lower95_K"]) and isnan(row["gap_upper95_K"])):
            notes.append("one-sided 95 % limit, should there be a gap")
    return notes + [flag_words(flag) for flag in row["flags"].split(";") if flag]


def marked(rows: Sequence[Row]) -> tuple[list[str], list[tuple[str, str]]]:
    """Marks of every row, and the notes they stand for; a note that several rows share has one mark.

    Parameters
    ----------
    rows : sequence of mapping

    Returns
    -------
    marks : list of str
        Such as ``"a, c"``, a text per row.
    notes : list of (str, str)
        Mark and note.
    """
    notes = list(dict.fromkeys(note for row in rows for note in _row_notes(row)))
    mark_of = {note: _mark(index) for index, note in enumerate(notes)}
    marks = [", ".join(sorted(mark_of[note] for note in _row_notes(row))) for row in rows]
    return marks, [(mark, note) for note, mark in mark_of.items()]


def _mark(index: int) -> str:
    cycle, letter = divmod(index, len(MARKS))
    return MARKS[letter] * (cycle + 1)


def caption(rows: Sequence[Row], style: TableStyle) -> str:
    """What the table shows: convention, unit, interval, averaging, rounding."""
    scale = ""
    if style.unit == "coulomb":
        known = sorted({row["permittivity"] for row in rows if not isnan(row["permittivity"])})
        values = " and ".join(f"{value:g}" for value in known) or "unknown"
        scale = f", in units of the Coulomb scale {UNITS['coulomb']} with ε = {values}"
    shown = CONVENTIONS[style.convention]
    return (
        f"{shown[0].upper()}{shown[1:]}{scale}: posterior median and equal-tailed {style.level} % credible "
        "interval, averaged over mechanisms and temperature windows. Numbers are rounded by the rule of the "
        "Particle Data Group."
    )
