"""How the lines of a delimited text are written: encoding, delimiter, decimal comma, headings.

Nothing is asked of the user: every plausible dialect is tried on a sample of the lines, and the one under
which most cells are numbers wins.
"""

from __future__ import annotations

import csv
import re
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from itertools import islice
from pathlib import Path

import numpy as np

from gapfit.columns import kind_of_name, parse_unit, split_heading
from gapfit.errors import FileError

__all__ = ["COMMENT", "MISSING", "Dialect", "Layout", "decode", "find_heading", "find_layout", "name_columns"]

_SAMPLE = 80
_HEADING_REACH = 12
_POINT = re.compile(r"[+\-−]?(?:\d+\.?\d*|\.\d+)(?:[eEdD][+\-−]?\d+)?")
_COMMA = re.compile(r"[+\-−]?\d+(?:,\d+)?(?:[eEdD][+\-−]?\d+)?")
_INFINITE = {"inf": np.inf, "+inf": np.inf, "-inf": -np.inf, "infinity": np.inf, "-infinity": -np.inf}

MISSING = frozenset({"", "nan", "na", "n/a", "null", "none", "-", "--", "---", "#n/a", "1.#qnan", "-1.#ind"})
"""Cells, in lower case, that stand for a missing reading."""

COMMENT = re.compile(r"\s*(?:#+|%+|//+|;)\s?")
"""What a comment line opens with."""


def decode(data: bytes, source: Path) -> str:
    """Text of the bytes of a file: UTF-8, UTF-16 with or without a byte-order mark, else Latin-1.

    Parameters
    ----------
    data : bytes
    source : Path
        Named in the error.

    Returns
    -------
    str
        With plain line ends (line feeds).

    Raises
    ------
    FileError
        If the bytes are no text.
    """
    text = _decode_bytes(data)
    sample = text[:65536]
    control = sum(1 for character in sample if character < " " and character not in "\t\r\n\f\x1a\x1b")
    if control > 0.01 * len(sample):
        raise FileError(
            "this is neither text nor HDF5 nor NetCDF; export the data as delimited text", file=source
        )
    if "\r" in text:
        text = text.replace("\r\r\n", "\n").replace("\r\n", "\n").replace("\r", "\n")
    return text.rstrip("\x1a")


def _decode_bytes(data: bytes) -> str:
    if data.startswith((b"\xff\xfe", b"\xfe\xff")):
        return data[: len(data) // 2 * 2].decode("utf-16", errors="replace")
    even, odd = data[0:4096:2].count(0), data[1:4096:2].count(0)
    half = min(len(data), 4096) / 2
    if odd > 0.7 * half > 8 * even:
        return data[: len(data) // 2 * 2].decode("utf-16-le", errors="replace")
    if even > 0.7 * half > 8 * odd:
        return data[: len(data) // 2 * 2].decode("utf-16-be", errors="replace")
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError:
        return data.decode("latin-1")


@dataclass(frozen=True)
class Dialect:
    """How the lines of a file are written.

    Attributes
    ----------
    delimiter : str or None
        None for runs of white space.
    comma : bool
        Whether decimals are written with a comma.
    """

    delimiter: str | None
    comma: bool

    def split(self, line: str) -> list[str]:
        """Cells of a line, stripped and without quotes."""
        if '"' in line and len(line) < csv.field_size_limit():
            plain = line.strip() if self.delimiter is None else line
            reader = csv.reader([plain], delimiter=self.delimiter or " ", skipinitialspace=True)
            return [cell.strip() for cell in next(reader)]
        if self.delimiter is None:
            return line.split()
        return [cell.strip() for cell in line.split(self.delimiter)]

    def number(self, cell: str) -> float | None:
        """Number of a cell, NaN for a missing one, None for text."""
        if (_COMMA if self.comma else _POINT).fullmatch(cell):
            plain = cell.replace(",", ".").replace("−", "-")
            return float(plain.replace("D", "e").replace("d", "e"))
        lowered = cell.lower()
        return float("nan") if lowered in MISSING else _INFINITE.get(lowered)

    def is_comment(self, line: str) -> bool:
        """Whether a line opens with a comment marker."""
        marker = COMMENT.match(line)
        return marker is not None and not (self.delimiter == ";" and line.lstrip().startswith(";"))


_DIALECTS = tuple(
    Dialect(delimiter, comma)
    for delimiter, comma in (
        ("\t", False),
        ("\t", True),
        (";", False),
        (";", True),
        ("|", False),
        ("|", True),
        (",", False),
        (None, False),
        (None, True),
        (",", True),
    )
)


@dataclass(frozen=True)
class Layout:
    """Where the table stands in the lines, and how its rows are written.

    Attributes
    ----------
    dialect : Dialect
    width : int
        Number of cells in a row.
    numeric : tuple of bool
        Which columns hold numbers.
    spare : bool
        Whether the last cell is always empty, as a delimiter at the end of every row leaves it.
    start : int
        Index of the first line of data.
    names : tuple of str
        Column names.
    heading_lines : frozenset of str
        Lines of names and units, which may come again.
    """

    dialect: Dialect
    width: int
    numeric: tuple[bool, ...]
    spare: bool = False
    start: int = 0
    names: tuple[str, ...] = ()
    heading_lines: frozenset[str] = frozenset()

    def cells(self, line: str) -> list[str]:
        """Cells of a data line; empty ones after the last column are dropped."""
        cells = self.dialect.split(line)
        while len(cells) > self.width and cells[-1] == "":
            cells.pop()
        return cells

    def is_data(self, line: str) -> bool:
        """Whether a line has the right number of cells, with numbers in all columns of numbers."""
        cells = self.cells(line)
        if len(cells) != self.width:
            return False
        numbers = [self.dialect.number(c) for c, yes in zip(cells, self.numeric, strict=True) if yes]
        return None not in numbers and any(number == number for number in numbers)


def _evidence(rows: Sequence[Sequence[str]], dialect: Dialect) -> tuple[float, int]:
    """How well rows of cells look like a table: (score, width), numbers counting for and text against."""
    scores: dict[int, float] = {}
    for cells in rows:
        filled = [cell for cell in cells if cell.lower() not in MISSING]
        numbers = sum(dialect.number(cell) is not None for cell in filled)
        if numbers:
            gain = 2 * numbers - (len(filled) - numbers)
            scores[len(cells)] = scores.get(len(cells), 0.0) + gain
    width = max(scores, key=lambda key: (scores[key], key), default=0)
    return scores.get(width, 0.0), width


def _trimmed(cells: list[str]) -> list[str]:
    """Cells without one empty cell at the end, which a delimiter at the end of the line leaves."""
    return cells[:-1] if len(cells) > 1 and cells[-1] == "" else cells


def find_layout(lines: Sequence[str], source: Path) -> Layout:
    """Dialect and columns of the lines that look most like rows of numbers."""
    spread = np.unique(np.linspace(0, len(lines) - 1, _SAMPLE).astype(int)).tolist()
    head = list(islice((i for i, line in enumerate(lines) if line.strip()), _SAMPLE))
    sample = [lines[i] for i in sorted({*head, *spread}) if lines[i].strip()]
    best: tuple[float, int, Dialect] | None = None
    for dialect in _DIALECTS:
        rows = [dialect.split(line) for line in sample if not dialect.is_comment(line)]
        score, width = _evidence(rows, dialect)
        if width and (best is None or score > best[0]):
            best = score, width, dialect
    if best is None:
        raise FileError("no rows of numbers were found; is this a data file?", file=source)
    _, width, dialect = best
    rows = [dialect.split(line) for line in sample if not dialect.is_comment(line)]
    telling = [
        row
        for row in rows
        if len(row) == width and any(dialect.number(cell) is not None for cell in row if cell)
    ]
    spare = all(row[-1] == "" for row in telling)
    return Layout(dialect, width, _numeric_columns(telling, dialect), spare)


def _numeric_columns(rows: Sequence[Sequence[str]], dialect: Dialect) -> tuple[bool, ...]:
    """Which columns hold numbers: those with at least as many numbers as texts."""
    kinds = []
    for column in zip(*rows, strict=True):
        filled = [cell for cell in column if cell.lower() not in MISSING]
        kinds.append(2 * sum(dialect.number(cell) is not None for cell in filled) >= len(filled))
    return tuple(kinds)


def _merge_units(cells: Sequence[str]) -> list[str]:
    """Join a unit in brackets to the name before it, where white space parted them."""
    merged: list[str] = []
    for cell in cells:
        if merged and re.fullmatch(r"[(\[].*[)\]]", cell):
            merged[-1] = f"{merged[-1]} {cell}"
        else:
            merged.append(cell)
    return merged


def _comma_cells(text: str) -> list[str]:
    return [cell.strip() for cell in text.split(",")]


def _heading_cells(line: str, layout: Layout) -> list[str] | None:
    """Cells of a line if it has one per column under the file's delimiter or another plausible one."""
    text = COMMENT.sub("", line, count=1) if layout.dialect.is_comment(line) else line
    dialect, width = layout.dialect, layout.width
    splitters: list[Callable[[str], list[str]]] = [
        dialect.split,
        lambda t: _trimmed(dialect.split(t)),
    ]
    if layout.spare:
        splitters.append(lambda t: [*dialect.split(t), ""])
    if dialect.delimiter is None:
        white: list[Callable[[str], list[str]]] = [
            dialect.split,
            lambda t: _merge_units(dialect.split(t)),
            lambda t: re.split(r"\s{2,}|\t", t.strip()),
            lambda t: [cell.strip() for cell in t.split(";")],
        ]
        splitters = [_comma_cells, *white] if "," in text else white
    for splitter in splitters:
        cells = splitter(text)
        if len(cells) == width:
            return cells
    return None


def _is_unit_row(cells: Sequence[str]) -> bool:
    blank = {"", "-", "()", "[]", "a.u.", "(a.u.)", "1", "none"}
    known = [parse_unit(cell) is not None for cell in cells]
    return any(known) and all(
        k or cell.strip().lower() in blank for k, cell in zip(known, cells, strict=True)
    )


def _is_name_row(cells: Sequence[str]) -> bool:
    named = [cell for cell in cells if cell]
    return bool(named) and not any(_POINT.fullmatch(cell) or _COMMA.fullmatch(cell) for cell in named)


def _recognised(cells: Sequence[str]) -> int:
    """How many cells read like names of measured columns."""
    return sum(
        kind_of_name(split_heading(cell)[0]) is not None or split_heading(cell)[1] is not None
        for cell in cells
    )


def find_heading(
    lines: Sequence[str], layout: Layout, source: Path
) -> tuple[list[str] | None, list[str] | None, frozenset[str]]:
    """Names and units above the first data line, and the lines that they stand on."""
    near = [i for i in range(layout.start) if lines[i].strip()][-_HEADING_REACH:][::-1]
    units, units_line = None, None
    best: tuple[tuple[bool, bool, int], list[str], int] | None = None
    for i in near:
        cells = _heading_cells(lines[i], layout)
        if cells is None or not _is_name_row(cells):
            continue
        known, plain = _recognised(cells), not layout.dialect.is_comment(lines[i])
        if known == 0 and not plain and layout.dialect.delimiter is None:
            continue  # a remark that happens to have as many words as there are columns
        score = 2 * known >= layout.width, plain, known
        if units is None and best is None and _is_unit_row(cells):
            units, units_line = cells, i
        elif best is None or score > best[0]:
            best = score, cells, i
    if best is None and units is not None and units_line is not None:
        best, units, units_line = ((True, True, 0), units, units_line), None, None
    if best is None:
        _refuse_wrong_width(lines, near, layout, source)
        return None, None, frozenset()
    used = [best[2]] if units_line is None else [best[2], units_line]
    return best[1], units, frozenset(lines[i].strip() for i in used)


def _refuse_wrong_width(lines: Sequence[str], near: Sequence[int], layout: Layout, source: Path) -> None:
    """Error if the line above the data is a heading with another number of columns."""
    if not near or layout.dialect.delimiter is None or near[0] != layout.start - 1:
        return
    line = lines[near[0]]
    cells = _trimmed(layout.dialect.split(line))
    if not layout.dialect.is_comment(line) and len(cells) > 1 and _is_name_row(cells):
        raise FileError(
            f"the heading has {len(cells)} names, but the rows below have {layout.width} values; "
            "write one name per column",
            file=source,
            row=near[0] + 1,
        )


def name_columns(
    cells: Sequence[str] | None, unit_cells: Sequence[str] | None, width: int
) -> tuple[list[str], list[str | None], list[str], list[str]]:
    """Names, units, headings and notices of the columns."""
    if cells is None:
        numbers = [str(i + 1) for i in range(width)]
        return numbers, [None] * width, numbers, ["no heading was found; the columns are called 1, 2, 3, ..."]
    headings = [cell or str(i + 1) for i, cell in enumerate(cells)]
    parts = [split_heading(heading) for heading in headings]
    shorts = [name for name, _ in parts]
    names = [s if shorts.count(s) == 1 else h for s, h in zip(shorts, headings, strict=True)]
    units = [unit for _, unit in parts]
    for i, cell in enumerate(unit_cells or ()):
        unit = parse_unit(cell)
        units[i] = unit.name if unit is not None else units[i]
    unique, notices = _numbered_twins(names)
    return unique, units, headings, notices


def _numbered_twins(names: Sequence[str]) -> tuple[list[str], list[str]]:
    """Names made unique, and a notice for each that was changed."""
    unique: list[str] = []
    notices = []
    for name in names:
        count, fresh = 1, name
        while fresh in unique:
            count += 1
            fresh = f"{name} ({count})"
        if count > 1:
            notices.append(
                f"the column name {name!r} stands there more than once; number {count} is called {fresh!r}"
            )
        unique.append(fresh)
    return unique, notices
