"""A folder of data files without a study file: what is in it, and a first study file to edit."""

from __future__ import annotations

import glob
import os
import re
from collections import defaultdict
from collections.abc import Mapping, Sequence
from pathlib import Path

import numpy as np

from gapfit.blocks import SeriesColumns
from gapfit.columns import Table, kind_of_name, parse_unit
from gapfit.drafts import FILL_IN, Entry, Recognition, draft_study, toml_value
from gapfit.errors import FileError, InputError, StudyError
from gapfit.guessing import ColumnGuess, guess_columns, guess_current, guess_number_in_names, guess_sample
from gapfit.tabular import read_table

__all__ = ["Entry", "Recognition", "draft_study", "recognise_folder", "write_study"]

_NO_DATA = (
    *(".toml", ".json", ".md", ".rst", ".tex", ".html", ".py", ".ipynb"),
    *(".png", ".jpg", ".jpeg", ".svg", ".pdf", ".doc", ".docx", ".xls", ".xlsx", ".zip"),
)
_FILLING_NAMES = ("filling", "nu", "filling_factor", "filling factor", "fraction", "state")


def recognise_folder(folder: str | Path) -> Recognition:
    """Look at the data files of a folder and its subfolders.

    Parameters
    ----------
    folder : str or Path

    Returns
    -------
    Recognition

    Raises
    ------
    FileError
        If there is no such folder, or nothing in it can be used.
    """
    place = Path(folder)
    if not place.is_dir():
        raise FileError("there is no such folder; name the folder that holds the data files", file=place)
    tables, unread = _read_all(place)
    if not tables:
        reasons = ":" + "".join(f"\n  - {text}" for text in unread[:5]) if unread else ""
        raise FileError(f"no data files were found in this folder{reasons}", file=place)
    groups: dict[tuple[str, ...], list[Table]] = defaultdict(list)
    for table in tables:
        groups[table.columns].append(table)
    sweeps = [group for group in groups.values() if _filling_column(group[0]) is None]
    series = [group[0] for group in groups.values() if _filling_column(group[0]) is not None]
    usable = [group for group in sweeps if len(group[0].values) > 1 and max(map(len, group)) > 10]
    if usable:
        group = max(usable, key=lambda g: (len(g), sum(map(len, g))))
        others = [table for table in tables if table not in group]
        return _recognise_traces(place, group, others, unread)
    if series:
        return _recognise_series(place, series[0], unread)
    raise FileError(
        "no sweeps (two columns or more, over ten rows) and no table of minima were found in this folder",
        file=place,
    )


def _read_all(folder: Path) -> tuple[list[Table], list[str]]:
    """Tables of all data files below a folder, and why others could not be read."""
    tables, unread = [], []
    for path in sorted(folder.rglob("*")):
        hidden = any(part.startswith((".", "~")) for part in path.relative_to(folder).parts)
        if hidden or not path.is_file() or path.suffix.lower() in _NO_DATA:
            continue
        try:
            tables.append(read_table(path, missing="keep"))
        except FileError as error:
            unread.append(str(error))
    return tables, unread


def _filling_column(table: Table) -> str | None:
    return next((name for name in table.columns if name.lower() in _FILLING_NAMES), None)


def _column(guess: ColumnGuess) -> str:
    unit = "" if guess.unit is None else f", unit = {toml_value(guess.unit)}"
    return f"{{ column = {toml_value(guess.column)}{unit} }}"


def _ending(name: str) -> str:
    """Suffix of a file name, that of the content included where the file is compressed."""
    plain = name.removesuffix(".gz")
    return Path(plain).suffix + name[len(plain) :]


def _beginning(names: Sequence[str]) -> str:
    """Characters that all names begin with."""
    first, last = min(names), max(names)
    return next((first[:i] for i in range(len(first)) if first[i] != last[i]), first)


def _patterns(folder: Path, group: Sequence[Path]) -> list[str]:
    """A pattern that matches these files and no others in the folder, else all their names."""
    names = [path.relative_to(folder).as_posix() for path in group]
    parents, endings = {os.path.dirname(name) for name in names}, {_ending(name) for name in names}
    if len(names) == 1 or len(parents) > 1:
        return names
    parent, ending = parents.pop(), endings.pop() if len(endings) == 1 else ""
    for beginning in ("", _beginning([path.name for path in group])):
        pattern = os.path.join(parent, f"{beginning}*{ending}")
        hits = glob.glob(os.path.join(glob.escape(str(folder)), pattern))
        if {Path(hit) for hit in hits} == set(group):
            return [Path(pattern).as_posix()]
    return names


# --- raw sweeps ----------------------------------------------------------------------------------------


def _recognise_traces(
    folder: Path, group: Sequence[Table], others: Sequence[Table], unread: Sequence[str]
) -> Recognition:
    paths = [table.source for table in group]
    guesses = {guess.role: guess for guess in guess_columns(group) if guess.role != "other"}
    patterns = _patterns(folder, paths)
    n_row = sum(map(len, group))
    entries = [
        Entry("files", toml_value(patterns), f"{len(group)} file{'s' * (len(group) > 1)}, {n_row} rows"),
        *_sweep_entries(guesses, [path.name for path in paths]),
        _temperature_entry(guesses, folder, paths, others),
        *_signal_entries(guesses),
        *_current_entries(guesses, group),
        Entry("symmetrise", '"auto"', "joins both field directions where present"),
    ]
    unused = [g.column for g in guess_columns(group) if g.role == "other"]
    notices = [f"{len(group)} files with the columns {', '.join(group[0].columns)}"]
    notices += [f"{entry.key}: {entry.value} ({entry.remark})" for entry in entries[1:] if entry.remark]
    notices += [f"columns not used: {', '.join(unused)}"] if unused else []
    notices += [f"{table.source}: other columns, left out" for table in others]
    notices += [f"not read: {text}" for text in unread]
    return Recognition(folder, "traces", *_names(folder, group), tuple(entries), tuple(notices))


def _names(folder: Path, tables: Sequence[Table]) -> tuple[str, str]:
    """Names of sample and cool-down."""
    sample = guess_sample(tables) or folder.resolve().name or "sample"
    for comment in (comment for table in tables for comment in table.comments):
        match = re.search(r"\b(\w+) cool-?down|cool-?down\W+(\w+)", comment, re.IGNORECASE)
        if match is not None:
            return sample, match[1] or match[2]
    return sample, "first"


def _sweep_entries(guesses: Mapping[str, ColumnGuess], names: Sequence[str]) -> list[Entry]:
    """What is swept, and where the field comes from."""
    kind = next((k for k in ("gate", "density") if k in guesses and guesses[k].swept), "field")
    field = guesses.get("field")
    if kind == "field" or field is not None:
        value = f"{{ column = {FILL_IN} }}" if field is None else _column(field)
        entry = Entry("field", value, "name the column of the field" if field is None else field.reason)
        fields = [entry]
    else:
        found = guess_number_in_names(names, ("mT", "T"))
        value = f"{{ column = {FILL_IN} }}" if found is None else _from_name(*found)
        fields = [Entry("field", value, "or field_T = ..." if found is None else "from the file names")]
    if kind != "field":
        fields.append(Entry(kind, _column(guesses[kind]), guesses[kind].reason))
    return [Entry("sweep", toml_value(kind), "what runs through a range in each file"), *fields]


def _from_name(pattern: str, unit: str) -> str:
    return f"{{ from_name = {toml_value(pattern)}, unit = {toml_value(unit)} }}"


def _temperature_entry(
    guesses: Mapping[str, ColumnGuess], folder: Path, paths: Sequence[Path], others: Sequence[Table]
) -> Entry:
    """Where the temperature comes from: a column, the file names, or a table of files."""
    guess = guesses.get("temperature")
    if guess is not None:
        return Entry("temperature", _column(guess), guess.reason)
    names = [path.name for path in paths]
    found = guess_number_in_names(names, ("mK", "K"))
    if found is not None:
        return Entry("temperature", _from_name(*found), "from the file names")
    for table in others:
        listed = {str(cell) for cells in table.texts.values() for cell in cells}
        number = any(kind_of_name(name) == "temperature" for name in table.values)
        known = all({path.name, path.stem, path.name.split(".")[0]} & listed for path in paths)
        if number and known:
            name = table.source.relative_to(folder).as_posix()
            return Entry("temperature", f"{{ table = {toml_value(name)} }}", "a table that lists these files")
    return Entry(
        "temperature",
        f'{{ column = {FILL_IN}, unit = "K" }}',
        "or { from_name = 'T(?P<value>[0-9p.]+)K' }, or { table = \"temperatures.csv\" }",
    )


def _signal_entries(guesses: Mapping[str, ColumnGuess]) -> list[Entry]:
    along = guesses.get("rho_xx")
    if along is None:
        open_value = f"{{ column = {FILL_IN} }}"
        entries = [Entry("rho_xx", open_value, "name the column of the longitudinal signal")]
    else:
        entries = [Entry("rho_xx", _column(along), along.reason)]
    optional = [guesses[role] for role in ("rho_xy", "quadrature") if role in guesses]
    return entries + [Entry(guess.role, _column(guess), guess.reason) for guess in optional]


def _current_entries(guesses: Mapping[str, ColumnGuess], group: Sequence[Table]) -> list[Entry]:
    """The excitation current, where signals are in volts."""
    units = [guesses[role].unit for role in ("rho_xx", "rho_xy") if role in guesses]
    known = [parse_unit(unit) for unit in units if unit is not None]
    if not any(unit is not None and unit.dimension == "voltage" for unit in known):
        return []
    if "current" in guesses:
        return [Entry("current_A", _column(guesses["current"]), guesses["current"].reason)]
    stated = guess_current(group)
    if len(stated) == 1:
        return [Entry("current_A", toml_value(stated[0]), "from the comments of the files")]
    said = f"the comments state {', '.join(f'{value:g}' for value in stated)} A; " if stated else ""
    return [Entry("current_A", f"{{ column = {FILL_IN} }}", f"{said}excitation current in A, such as 1e-8")]


# --- minima already read off ---------------------------------------------------------------------------

_SERIES_KINDS = {
    "temperature": "temperature_K",
    "field": "field_T",
    "resistance": "rho_xx_ohm",
    "conductance": "sigma_xx_S",
}


def _recognise_series(folder: Path, table: Table, unread: Sequence[str]) -> Recognition:
    path = table.source
    entries = [
        Entry("file", toml_value(path.relative_to(folder).as_posix()), f"{len(table)} rows"),
        *_renamed_columns(table),
    ]
    filling = _filling_column(table) or ""
    cells = table.texts.get(filling)
    texts = np.unique(cells) if cells is not None else np.unique(table.values[filling])
    notices = [f"minima already read off, with the columns {', '.join(table.columns)}"]
    notices += [f"{len(texts)} fillings, {len(table)} rows", *(f"not read: {text}" for text in unread)]
    return Recognition(folder, "series", *_names(folder, [table]), tuple(entries), tuple(notices))


def _renamed_columns(table: Table) -> list[Entry]:
    """Entries of [series.columns] for columns that have other than the usual names."""
    usual = set(SeriesColumns.model_fields)
    used = usual & set(table.columns)
    entries = []
    for name, unit in zip(table.columns, table.units, strict=True):
        kind = "filling" if name == _filling_column(table) else _series_key(name, unit)
        if name in usual or kind is None or kind in used:
            continue
        used.add(kind)
        rule = f"{{ column = {toml_value(name)}{'' if unit is None else f', unit = {toml_value(unit)}'} }}"
        entries.append(Entry(f"columns.{kind}", rule, "by its name or unit"))
    if not {"rho_xx_ohm", "sigma_xx_S"} & used:
        entries.append(Entry("columns.rho_xx_ohm", f"{{ column = {FILL_IN} }}", "the reading, ohm"))
    if "temperature_K" not in used:
        entries.append(Entry("columns.temperature_K", f"{{ column = {FILL_IN} }}", "the temperature, K"))
    return entries


def _series_key(name: str, unit: str | None) -> str | None:
    """Usual name of a column of a file of minima, or None."""
    known = None if unit is None else parse_unit(unit)
    kind = kind_of_name(name) if known is None else known.dimension
    key = _SERIES_KINDS.get(kind or "")
    if key is None or not re.search(r"err|sigma_?t|std|unc|\bd[a-z]\b", name.lower()):
        return key
    errors = {"temperature_K": "temperature_error_K", "field_T": None}
    return errors.get(key, f"{key}_error")


def write_study(recognition: Recognition) -> Path:
    """Write the drafted study into the folder as ``study.toml``.

    Returns
    -------
    Path
        The file.

    Raises
    ------
    StudyError
        If there is one already; it is never overwritten.
    InputError
        If the folder cannot be written to.
    """
    path = recognition.folder / "study.toml"
    try:
        with path.open("x", encoding="utf-8") as file:
            file.write(draft_study(recognition))
    except FileExistsError:
        raise StudyError(
            "there is a study file already, which is left as it is; remove or rename it first", file=path
        ) from None
    except OSError as error:
        raise InputError(f"{path}: the file cannot be written ({error.strerror})") from None
    return path
