"""Delimited text as instruments write it: any common delimiter, decimal comma, headings or none.

The bulk is read by numpy's C parser in chunks; a chunk that it refuses is read again line by line, which
finds blocks, repeated headings and errors, and can say where they stand.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from itertools import pairwise
from pathlib import Path

import numpy as np

from gapfit.columns import FloatArray, IntArray, Table
from gapfit.dialect import COMMENT, MISSING, Layout, find_heading, find_layout, name_columns
from gapfit.errors import FileError

__all__ = ["read_delimited"]

_CHUNK = 20_000
_PREAMBLE_REACH = 80


@dataclass(frozen=True)
class _Part:
    """Records of a run of lines: numbers and texts, line numbers, and where blocks are parted."""

    numbers: FloatArray
    texts: list[list[str]]
    index: IntArray
    breaks: list[int]
    comments: list[str]
    notices: list[str]


def _read_chunk(lines: Sequence[str], first: int, end: int, layout: Layout, source: Path, cut: bool) -> _Part:
    """Records of the lines from `first` up to `end`; fast where they are plain, else with care."""
    chunk = lines[first:end]
    dialect = layout.dialect
    plain = all(layout.numeric) and end < len(lines)  # the last line may be cut off
    if plain and dialect.comma:
        plain = dialect.delimiter != "," and not any("." in line for line in chunk)
        chunk = [line.replace(",", ".") for line in chunk]
    if plain:
        try:
            numbers = np.loadtxt(chunk, delimiter=dialect.delimiter, comments=None, ndmin=2)
        except ValueError:
            numbers = np.empty((0, 0))
        if numbers.shape == (len(chunk), layout.width) and bool(np.isfinite(numbers).all()):
            return _Part(numbers, [], np.arange(first, end), [], [], [])
    return _read_carefully(lines, first, end, layout, source, cut)


def _record(cells: Sequence[str], line: str, layout: Layout) -> list[float] | None:
    """Numbers of a data line, or None if a cell that should hold one does not."""
    picked = [cell for cell, yes in zip(cells, layout.numeric, strict=True) if yes]
    if not layout.dialect.comma and "_" not in line:
        try:
            return [float(cell) for cell in picked]
        except ValueError:
            pass
    numbers = [layout.dialect.number(cell) for cell in picked]
    return None if None in numbers else [number for number in numbers if number is not None]


def _read_carefully(
    lines: Sequence[str], first: int, end: int, layout: Layout, source: Path, cut: bool
) -> _Part:
    """Records line by line."""
    numbers: list[list[float]] = []
    texts: list[list[str]] = []
    index: list[int] = []
    breaks: list[int] = []
    comments: list[str] = []
    notices: list[str] = []
    last = _last_filled(lines) if end == len(lines) else -1
    for i in range(first, end):
        line = lines[i]
        cells = layout.cells(line)
        if all(cell.lower() in MISSING for cell in cells) or _is_heading(line, layout):
            breaks.append(i)
            continue
        if layout.dialect.is_comment(line):
            comments.append(COMMENT.sub("", line, count=1).strip())
            continue
        record = _record(cells, line, layout) if len(cells) == layout.width else None
        if i == last and _is_cut_off(record, cells, layout, cut):
            notices.append(f"row {i + 1} was cut off while the file was written, and is left out")
        elif record is not None:
            numbers.append(record)
            texts.append([cell for cell, yes in zip(cells, layout.numeric, strict=True) if not yes])
            index.append(i)
        elif _leads_to_heading(lines, i, layout):
            comments.append(line.strip())
            breaks.append(i)
        else:
            raise _bad_line(cells, i, layout, source)
    array = np.array(numbers, dtype=float).reshape(len(numbers), sum(layout.numeric))
    return _Part(array, texts, np.array(index, dtype=np.int64), breaks, comments, notices)


def _last_filled(lines: Sequence[str]) -> int:
    return next((i for i in range(len(lines) - 1, -1, -1) if lines[i].strip()), -1)


def _is_heading(line: str, layout: Layout) -> bool:
    return line.strip() in layout.heading_lines


def _is_cut_off(record: list[float] | None, cells: Sequence[str], layout: Layout, cut: bool) -> bool:
    """Whether the last line lacks cells, or (without a line end) has an unfinished last cell."""
    if len(cells) < layout.width:
        return True
    return cut and len(cells) == layout.width and (record is None or cells[-1] == "")


def _leads_to_heading(lines: Sequence[str], i: int, layout: Layout) -> bool:
    """Whether free text at line i belongs to the preamble of another block, whose heading follows."""
    for line in lines[i : i + _PREAMBLE_REACH]:
        if _is_heading(line, layout):
            return True
        if line.strip() and layout.dialect.number(layout.cells(line)[0]) is not None:
            return False
    return False


def _bad_line(cells: Sequence[str], i: int, layout: Layout, source: Path) -> FileError:
    if len(cells) != layout.width:
        return FileError(
            f"found {len(cells)} values where the other rows have {layout.width}; complete it or remove it",
            file=source,
            row=i + 1,
        )
    columns = zip(cells, layout.numeric, layout.names, strict=True)
    cell, name = next((c, n) for c, yes, n in columns if yes and layout.dialect.number(c) is None)
    hint = ""
    if "," in cell or "." in cell:
        hint = f" (decimals have a {'comma' if layout.dialect.comma else 'point'} in this file)"
    return FileError(
        f"found the text {cell!r} where a number is expected{hint}; correct or remove this row",
        file=source,
        row=i + 1,
        column=name,
    )


def _blocks(index: IntArray, breaks: Sequence[int]) -> IntArray:
    """Block number of each record from the lines that part blocks."""
    edges = np.searchsorted(np.array(sorted(breaks), dtype=np.int64), index)
    numbers = np.unique(edges, return_inverse=True)[1].astype(np.int64)
    every_line = numbers.size > 3 and numbers[-1] + 1 > 0.5 * numbers.size
    return np.zeros_like(numbers) if every_line else numbers


def read_delimited(
    text: str, source: Path, notices: Sequence[str] = (), text_columns: Sequence[str] = ()
) -> Table:
    """Table of a delimited text.

    Parameters
    ----------
    text : str
        With plain line ends (line feeds).
    source : Path
        Named in errors and in the table.
    notices : sequence of str
        What was noticed before, such as a compressed file that was cut off.
    text_columns : sequence of str
        Names of columns to keep as text although they may look like numbers.

    Returns
    -------
    Table

    Raises
    ------
    FileError
        If it holds no rows of numbers, a row has another number of values, or a text stands where a number
        belongs.
    """
    lines = text.split("\n")
    found = find_layout(lines, source)
    found = replace(found, start=_first_data(lines, found, source))
    cells, unit_cells, heading_lines = find_heading(lines, found, source)
    names, units, headings, said = name_columns(cells, unit_cells, found.width)
    layout = replace(found, names=tuple(names), heading_lines=heading_lines)
    layout = _with_text_columns(lines, layout, text_columns, source)
    _refuse_early_texts(lines, layout, source)
    tail = max(layout.start, _last_filled(lines))
    edges = [*range(layout.start, tail, _CHUNK), tail, len(lines)]
    cut = lines[-1].strip() != "" or bool(notices)
    parts = [_read_chunk(lines, a, b, layout, source, cut) for a, b in pairwise(edges)]
    head = [line.strip() for line in lines[: layout.start] if line.strip() and not _is_heading(line, layout)]
    comments = [COMMENT.sub("", line, count=1).strip() for line in head]
    return _assemble(parts, layout, units, headings, source, (comments, [*notices, *said]))


def _first_data(lines: Sequence[str], layout: Layout, source: Path) -> int:
    """Index of the first line of data."""
    start = next((i for i, line in enumerate(lines) if layout.is_data(line)), None)
    if start is None:
        raise FileError("no rows of numbers were found; is this a data file?", file=source)
    return start


def _with_text_columns(
    lines: Sequence[str], layout: Layout, text_columns: Sequence[str], source: Path
) -> Layout:
    """Layout in which the named columns are text, whatever they look like."""
    numeric = tuple(
        yes and name not in text_columns for yes, name in zip(layout.numeric, layout.names, strict=True)
    )
    if numeric == layout.numeric:
        return layout
    freed = replace(layout, numeric=numeric)
    return replace(freed, start=_first_data(lines, freed, source))


def _refuse_early_texts(lines: Sequence[str], layout: Layout, source: Path) -> None:
    """Error if a row just above the first good one is a row of data with a text in it, or of other length.

    Without this it would pass for free text above the table and be lost.
    """
    for i in range(layout.start - 1, -1, -1):
        line = lines[i]
        cells = layout.cells(line)
        if not line.strip() or _is_heading(line, layout) or layout.dialect.is_comment(line):
            return
        if all(cell.lower() in MISSING for cell in cells):
            continue
        n_number = sum(layout.dialect.number(cell) is not None for cell in cells)
        of_other_length = bool(layout.heading_lines) and n_number >= max(2, layout.width / 2)
        if (len(cells) == layout.width and n_number) or of_other_length:
            raise _bad_line(cells, i, layout, source)


def _assemble(
    parts: Sequence[_Part],
    layout: Layout,
    units: Sequence[str | None],
    headings: Sequence[str],
    source: Path,
    remarks: tuple[list[str], list[str]],
) -> Table:
    """Table of the parts; wholly empty columns are left out, with a notice."""
    numbers = np.concatenate([part.numbers for part in parts])
    texts = [row for part in parts for row in part.texts]
    index = np.concatenate([part.index for part in parts])
    if index.size == 0:
        raise FileError("no whole rows of numbers were found", file=source)
    comments, notices = remarks
    number_names = [name for name, yes in zip(layout.names, layout.numeric, strict=True) if yes]
    text_names = [name for name, yes in zip(layout.names, layout.numeric, strict=True) if not yes]
    empty = {name for name, column in zip(number_names, numbers.T, strict=True) if np.isnan(column).all()}
    named = sorted(name for name in empty if name in headings and not name.isdigit())
    notices = [*notices, *(f"column {name!r} is empty and is left out" for name in named)]
    kept = [i for i, name in enumerate(layout.names) if name not in empty]
    return Table(
        source=source,
        columns=tuple(layout.names[i] for i in kept),
        units=tuple(units[i] for i in kept),
        headings=tuple(headings[i] for i in kept),
        values={n: np.array(c) for n, c in zip(number_names, numbers.T, strict=True) if n not in empty},
        row=index + 1,
        block=_blocks(index, [line for part in parts for line in part.breaks]),
        texts={
            n: np.array(c, dtype=np.str_) for n, c in zip(text_names, zip(*texts, strict=True), strict=True)
        },
        comments=tuple(comments + [comment for part in parts for comment in part.comments]),
        notices=tuple(notices + [notice for part in parts for notice in part.notices]),
    )
