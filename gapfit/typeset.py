"""The table of gaps as text, Markdown, HTML or LaTeX; and its raw numbers in other units, as CSV or JSON."""

from __future__ import annotations

import html
import json
import re
from collections.abc import Sequence
from dataclasses import dataclass, replace
from math import isnan
from pathlib import Path
from typing import TYPE_CHECKING

from gapfit.digest import CONVENTIONS
from gapfit.rounding import round_number
from gapfit.storage import plain, write_text
from gapfit.tablecells import (
    COLUMNS,
    UNITS,
    Column,
    Item,
    Row,
    TableStyle,
    caption,
    marked,
    unit_factor,
    usual_columns,
)

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["TableStyle", "escape_latex", "render_table", "subscripts", "write_tables"]

ENERGY_COLUMNS = (
    "gap_K", "gap_low68_K", "gap_high68_K", "gap_low95_K", "gap_high95_K", "gap_lower95_K", "gap_upper95_K"
)  # fmt: skip


@dataclass(frozen=True)
class _Sheet:
    """A table ready to be written: cells as items, marks of the rows and their notes."""

    columns: tuple[Column, ...]
    cells: tuple[tuple[Item, ...], ...]
    marks: tuple[str, ...]
    marked_column: int
    notes: tuple[tuple[str, str], ...]
    caption: str
    style: TableStyle


def render_table(frame: pd.DataFrame, style: TableStyle | None = None) -> str:
    """Table of gaps as text.

    Parameters
    ----------
    frame : pandas.DataFrame
        Of `gapfit.tables.gap_table` or `gapfit.tables.read_gaps`.
    style : TableStyle, optional
        Plain text by default.

    Returns
    -------
    str
        Ends with a line feed. Text, Markdown, HTML and LaTeX are rounded and say convention, interval and
        notes; CSV and JSON hold raw numbers, with convention and unit in the names of the columns.

    Raises
    ------
    InputError
        If a column is unknown.
    """
    style = TableStyle() if style is None else style
    if style.format in ("csv", "json"):
        return _raw(frame, style)
    writers = {"text": _text, "md": _markdown, "html": _html, "tex": _latex}
    return writers[style.format](_sheet(_rows(frame), style))


def write_tables(frame: pd.DataFrame, folder: str | Path, style: TableStyle | None = None) -> list[Path]:
    """Write gaps.md and gaps.tex, the latter as a document that compiles alone.

    Parameters
    ----------
    frame : pandas.DataFrame
        Of `gapfit.tables.gap_table`.
    folder : str or Path
    style : TableStyle, optional
        Unit, level, convention and columns; the format is set here.

    Returns
    -------
    list of Path
    """
    style = TableStyle() if style is None else style
    return [
        write_text(Path(folder) / f"gaps.{ending}", render_table(frame, replace(style, format=ending)))
        for ending in ("md", "tex")
    ]


def _rows(frame: pd.DataFrame) -> list[Row]:
    values = frame.astype(object).to_numpy().tolist()
    return [dict(zip(map(str, frame.columns), row, strict=True)) for row in values]


def _sheet(rows: Sequence[Row], style: TableStyle) -> _Sheet:
    chosen = style.chosen(usual_columns(rows), tuple(COLUMNS))
    columns = tuple(COLUMNS[key] for key in chosen)
    marks, notes = marked(rows)
    return _Sheet(
        columns,
        tuple(tuple(column.cell(row, style) for column in columns) for row in rows),
        tuple(marks),
        chosen.index("gap") if "gap" in chosen else len(chosen) - 1,
        tuple(notes),
        caption(rows, style),
        style,
    )


def _filled(heading: str, unit: str, gap: str) -> str:
    return heading.replace("{unit}", unit).replace("{gap}", gap)


def _plain_headings(sheet: _Sheet) -> list[str]:
    unit = {"coulomb": "E_C"}.get(sheet.style.unit, sheet.style.unit)
    gap = "Δ" if sheet.style.convention == "gap" else "Δ/2"
    return [_filled(column.heading, unit, gap) for column in sheet.columns]


def _short(number: float, digits: int) -> str:
    """Number to some significant digits, without zeros that say nothing."""
    text = round_number(number, digits)
    return re.sub(r"(\.\d*?)0+(?=\s|$)", r"\1", text).replace(". ", " ").removesuffix(".")


def _plain_cells(sheet: _Sheet) -> list[list[str]]:
    table = []
    for items, mark in zip(sheet.cells, sheet.marks, strict=True):
        cells = [
            item
            if isinstance(item, str)
            else _short(item, column.digits)
            if isinstance(item, float)
            else item.text
            for item, column in zip(items, sheet.columns, strict=True)
        ]
        cells[sheet.marked_column] += f" ({mark})" if mark else ""
        table.append(cells)
    return table


# ------------------------------------------------------------------------------------------ text, Markdown


def _text(sheet: _Sheet) -> str:
    table = [_plain_headings(sheet), *_plain_cells(sheet)]
    widths = [max(map(len, cells)) for cells in zip(*table, strict=True)]
    table.insert(1, ["-" * width for width in widths])
    lines = ["  ".join(map(str.ljust, cells, widths)).rstrip() for cells in table]
    return "\n".join([*lines, "", sheet.caption, *(f"({mark}) {note}" for mark, note in sheet.notes)]) + "\n"


def _markdown(sheet: _Sheet) -> str:
    table = [_plain_headings(sheet), *_plain_cells(sheet)]
    lines = ["| " + " | ".join(map(_escape_markdown, cells)) + " |" for cells in table]
    lines.insert(1, "|" + " --- |" * len(sheet.columns))
    notes = [f"\n({mark}) {_escape_markdown(note)}" for mark, note in sheet.notes]
    return "\n".join([*lines, "", _escape_markdown(sheet.caption), *notes]) + "\n"


def _escape_markdown(text: str) -> str:
    return re.sub(r"([\\`*_\[\]<>#|~])", r"\\\1", " ".join(text.split()))


# ---------------------------------------------------------------------------------------------------- HTML


def _html(sheet: _Sheet) -> str:
    head = "".join(f"<th>{subscripts(heading)}</th>" for heading in _plain_headings(sheet))
    rows = "\n".join(f"<tr>{_html_row(sheet, index)}</tr>" for index in range(len(sheet.cells)))
    notes = "\n".join(f"<p>({mark}) {html.escape(note)}</p>" for mark, note in sheet.notes)
    return (
        f'<table class="gaps">\n<caption>{subscripts(sheet.caption)}</caption>\n'
        f"<thead><tr>{head}</tr></thead>\n<tbody>\n{rows}\n</tbody>\n</table>\n"
        f'<div class="notes">\n{notes}\n</div>\n'
    )


def _html_row(sheet: _Sheet, index: int) -> str:
    cells = []
    for item, column in zip(sheet.cells[index], sheet.columns, strict=True):
        if isinstance(item, (str, float)):
            text = item if isinstance(item, str) else _short(item, column.digits)
            cells.append(html.escape(text))
        else:
            cells.append(item.html)
    mark = sheet.marks[index]
    cells[sheet.marked_column] += f'<sup class="mark">{mark}</sup>' if mark else ""
    return "".join(f"<td>{cell}</td>" for cell in cells)


def subscripts(text: str) -> str:
    """Text as HTML, escaped, with ``k_B`` set as a subscript."""
    return re.sub(r"_(\w+)", r"<sub>\1</sub>", html.escape(text))


# --------------------------------------------------------------------------------------------------- LaTeX

_LATEX = {
    "\\": r"\textbackslash{}", "&": r"\&", "%": r"\%", "$": r"\$", "#": r"\#", "_": r"\_", "{": r"\{",
    "}": r"\}",
    "~": r"\textasciitilde{}", "^": r"\textasciicircum{}", "<": r"\textless{}", ">": r"\textgreater{}",
    "|": r"\textbar{}", '"': r"\textquotedbl{}", "–": "--", "−": "$-$", "×": r"$\times$", "±": r"$\pm$",
    "Δ": r"$\Delta$", "ρ": r"$\rho$", "₀": "$_0$", "π": r"$\pi$", "ε": r"$\varepsilon$", "ℓ": r"$\ell$",
    "ν": r"$\nu$", "µ": r"$\mu$", "μ": r"$\mu$", "Ω": r"$\Omega$", "²": "$^2$", "°": r"$^\circ$",
}  # fmt: skip

_LATEX_FORMULAS = (
    ("ρ = ρ₀ exp(−Δ / 2k_B T)", r"$\rho = \rho_0 \exp(-\Delta / 2 k_\mathrm{B} T)$"),
    ("ρ = ρ₀ exp[−(Δ/2) / k_B T]", r"$\rho = \rho_0 \exp[-(\Delta/2) / k_\mathrm{B} T]$"),
    (UNITS["coulomb"], r"$E_\mathrm{C} = e^2/(4\pi\varepsilon_0\varepsilon\ell_B)$"),
    ("Δ/2", r"$\Delta/2$"),
)

_LATEX_UNITS = {"K": r"\si{\kelvin}", "meV": r"\si{\milli\electronvolt}", "coulomb": r"$E_\mathrm{C}$"}

_PREAMBLE = (
    "% A complete document; for a paper take the table, and the packages booktabs and siunitx.",
    r"\documentclass{article}",
    r"\usepackage[T1]{fontenc}",
    r"\usepackage[utf8]{inputenc}",
    r"\IfFileExists{lmodern.sty}{\usepackage{lmodern}}{}",
    r"\usepackage{textcomp}",
    r"\usepackage[a4paper, landscape, margin=15mm]{geometry}",
    r"\usepackage{booktabs}",
    r"\usepackage{siunitx}",
    r"\begin{document}",
    r"\thispagestyle{empty}",
)


def escape_latex(text: str) -> str:
    """Text with every character that LaTeX treats as special escaped.

    Parameters
    ----------
    text : str

    Returns
    -------
    str
        Control characters become spaces; characters that LaTeX's usual fonts lack become ``?``.
    """
    return "".join(_latex_character(character) for character in text)


def _latex_character(character: str) -> str:
    if character in _LATEX:
        return _LATEX[character]
    if not character.isprintable():
        return " "
    return character if ord(character) < 0x180 else "?"


def _latex(sheet: _Sheet) -> str:
    unit, gap = (
        _LATEX_UNITS[sheet.style.unit],
        r"$\Delta$" if sheet.style.convention == "gap" else r"$\Delta/2$",
    )
    heads = [_filled(column.latex, unit, gap) for column in sheet.columns]
    heads = [
        f"{{{head}}}" if column.digits else head for head, column in zip(heads, sheet.columns, strict=True)
    ]
    lines = [
        r"\begin{table}[!ht]",
        r"  \centering",
        r"  \renewcommand{\arraystretch}{1.25}",
        rf"  \caption{{{_latex_caption(sheet.caption)}}}",
        rf"  \begin{{tabular}}{{@{{}}{_latex_alignment(sheet)}@{{}}}}",
        r"    \toprule",
        f"    {' & '.join(heads)} " + r"\\",
        r"    \midrule",
        *(f"    {_latex_row(sheet, index)} " + r"\\" for index in range(len(sheet.cells))),
        r"    \bottomrule",
        r"  \end{tabular}",
        *_latex_notes(sheet),
        r"\end{table}",
    ]
    return "\n".join([*_PREAMBLE, *lines, r"\end{document}"] if sheet.style.standalone else lines) + "\n"


def _latex_alignment(sheet: _Sheet) -> str:
    """Words on the left, plain numbers on their decimal point."""
    return "".join("S[table-format=3.3]" if column.digits else "l" for column in sheet.columns)


def _latex_row(sheet: _Sheet, index: int) -> str:
    cells = []
    for item, column in zip(sheet.cells[index], sheet.columns, strict=True):
        if isinstance(item, float):
            cells.append("{--}" if isnan(item) else f"{item:.{column.digits}g}")
        else:
            cells.append(escape_latex(item) if isinstance(item, str) else item.latex)
    mark = sheet.marks[index]
    cells[sheet.marked_column] += rf"\textsuperscript{{\,{mark}}}" if mark else ""
    return " & ".join(cells)


def _latex_caption(text: str) -> str:
    """Caption, escaped, with its formulas as math."""
    parts = [text]
    for formula, latex in _LATEX_FORMULAS:
        parts = [piece for part in parts for piece in _split(part, formula, latex)]
    return "".join(part if part.startswith("$") else _latex_words(part) for part in parts)


def _latex_words(text: str) -> str:
    return escape_latex(text).replace(r" \%", r"\,\%")


def _split(part: str, formula: str, latex: str) -> list[str]:
    """A part cut at a formula, which is replaced; parts that are math already stay whole."""
    if part.startswith("$") or formula not in part:
        return [part]
    before, after = part.split(formula, 1)
    return [piece for piece in (before, latex, after) if piece]


def _latex_notes(sheet: _Sheet) -> list[str]:
    if not sheet.notes:
        return []
    lines = [rf"  \textsuperscript{{{mark}}}\,{_latex_words(note)}.\\" for mark, note in sheet.notes]
    return [
        "",
        r"  \smallskip",
        r"  \begin{minipage}{0.9\linewidth}\footnotesize",
        *lines,
        r"  \end{minipage}",
    ]


# --------------------------------------------------------------------------------------------- raw numbers


def _raw(frame: pd.DataFrame, style: TableStyle) -> str:
    """Raw numbers as CSV or JSON, with convention and unit in the names of the columns."""
    converted = frame.copy()
    factor = [unit_factor(row, style) for row in _rows(frame)]
    for name in ENERGY_COLUMNS:
        converted[name] = frame[name] * factor
    if style.columns:
        converted = converted[list(style.chosen((), list(frame.columns)))]
    elif (style.unit, style.convention) != ("K", "gap"):
        converted = converted.drop(columns=["gap_meV", "gap_over_coulomb"])
    stem = "gap" if style.convention == "gap" else "half_gap"
    unit = {"coulomb": "over_coulomb"}.get(style.unit, style.unit)
    names = {name: name.replace("gap", stem, 1).removesuffix("K") + unit for name in ENERGY_COLUMNS}
    converted = converted.rename(columns=names)
    if style.format == "csv":
        return converted.to_csv(index=False, lineterminator="\n")
    record = {
        "convention": CONVENTIONS[style.convention],
        "unit": UNITS[style.unit],
        "gaps": [plain(row) for row in _rows(converted)],
    }
    return json.dumps(record, indent=1, ensure_ascii=False) + "\n"
