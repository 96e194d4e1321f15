"""The table of gaps: one row per fit, its files with raw numbers, and finished runs read back."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import pandas as pd

from gapfit.digest import CONVENTIONS, GAP_COLUMNS, TableContext, WholeRange, details, gap_row
from gapfit.errors import FileError
from gapfit.fit import GapFit
from gapfit.storage import FORMAT_VERSION, plain, read_json, write_json, write_text

__all__ = ["gap_table", "gaps_csv", "gaps_record", "read_gaps", "write_gaps_csv", "write_gaps_json"]

TEXTS = frozenset(
    {"sample", "cooldown", "filling", "verdict", "verdict_cause", "mechanism", "hopping", "quantity"}
    | {"reading", "sequence", "flags"}
)
WHOLE = frozenset({"n_points", "n_negative", "level"})
TRUTHS = frozenset({"pinned", "converged", "engines_agree"})


def gap_table(fits: Sequence[GapFit], context: TableContext | None = None) -> pd.DataFrame:
    """Table of gaps, a row per fit, with exactly the columns of gaps.csv.

    Parameters
    ----------
    fits : sequence of GapFit
    context : TableContext, optional
        Permittivity and base level.

    Returns
    -------
    pandas.DataFrame
        Energies in kelvin, gap in exp(-gap / 2T), intervals equal-tailed.
    """
    context = TableContext() if context is None else context
    return _frame([gap_row(fit, context) for fit in fits])


def _frame(rows: Sequence[Mapping[str, Any]]) -> pd.DataFrame:
    """Frame of rows with the type of every column fixed."""
    columns = {}
    for name in GAP_COLUMNS:
        values = [row[name] for row in rows]
        if name in TEXTS:
            columns[name] = pd.Series(["" if value is None else value for value in values], dtype=object)
        elif name in WHOLE:
            columns[name] = pd.Series(values, dtype="int64")
        elif name in TRUTHS:
            columns[name] = pd.Series(values, dtype=object)
        else:
            columns[name] = pd.Series(values, dtype="float64")
    return pd.DataFrame(columns)


def gaps_csv(frame: pd.DataFrame) -> str:
    """Text of gaps.csv: raw numbers that read back to the last digit, missing ones empty."""
    return frame.to_csv(index=False, lineterminator="\n")


def write_gaps_csv(frame: pd.DataFrame, path: str | Path) -> Path:
    """Write gaps.csv.

    Parameters
    ----------
    frame : pandas.DataFrame
        Of `gap_table`.
    path : str or Path

    Returns
    -------
    Path
    """
    return write_text(path, gaps_csv(frame))


def gaps_record(
    frame: pd.DataFrame, fits: Sequence[GapFit], alone: Sequence[WholeRange | None] | None = None
) -> dict[str, Any]:
    """Content of gaps.json: the table and everything else about every fit, as plain data.

    Parameters
    ----------
    frame : pandas.DataFrame
        Of `gap_table`.
    fits : sequence of GapFit
        The same fits in the same order.
    alone : sequence of WholeRange or None, optional
        Gaps without averaging.

    Returns
    -------
    dict
    """
    from gapfit import __version__

    alone = [None] * len(fits) if alone is None else alone
    rows = frame.to_dict("records")
    return {
        "format": "gapfit gaps",
        "format_version": FORMAT_VERSION,
        "gapfit": __version__,
        "convention": CONVENTIONS["gap"],
        "intervals": "equal-tailed credible intervals; gap_lower95_K and gap_upper95_K are one-sided limits",
        "units": "energies in kelvin (E / k_B); prefactor_over_eq2h in (e/q)^2/h, or (h/e^2)/p^2 for rho_xx",
        "columns": list(GAP_COLUMNS),
        "gaps": [
            plain(row) | {"details": plain(details(fit, single))}
            for row, fit, single in zip(rows, fits, alone, strict=True)
        ],
    }


def write_gaps_json(
    frame: pd.DataFrame,
    fits: Sequence[GapFit],
    path: str | Path,
    alone: Sequence[WholeRange | None] | None = None,
) -> Path:
    """Write gaps.json; arguments as `gaps_record`."""
    return write_json(path, gaps_record(frame, fits, alone))


# ------------------------------------------------------------------------------------------- finished runs


def read_gaps(path: str | Path) -> pd.DataFrame:
    """Table of gaps of a finished run, without fitting anything again.

    Parameters
    ----------
    path : str or Path
        Folder of a run, or its gaps.json or gaps.csv.

    Returns
    -------
    pandas.DataFrame
        As `gap_table` made it.

    Raises
    ------
    FileError
        If there is no such file, or it is no table of gaps of this version.
    """
    place = Path(path)
    if place.is_dir():
        found = [place / name for name in ("gaps.json", "gaps.csv") if (place / name).is_file()]
        if not found:
            raise FileError(
                "holds neither gaps.json nor gaps.csv; name the --out folder of a finished 'gapfit fit'",
                file=place,
            )
        place = found[0]
    return _from_csv(place) if place.suffix.lower() == ".csv" else _from_json(place)


def _from_json(path: Path) -> pd.DataFrame:
    record = read_json(path)
    if not isinstance(record, dict) or record.get("format") != "gapfit gaps":
        raise FileError("is no table of gaps; name a gaps.json that 'gapfit fit' wrote", file=path)
    if record.get("format_version") != FORMAT_VERSION:
        raise FileError(
            f"has format version {record.get('format_version')}, this gapfit reads {FORMAT_VERSION}; "
            "run 'gapfit fit' again",
            file=path,
        )
    _check_columns(record["gaps"][0] if record["gaps"] else GAP_COLUMNS, path)
    return _frame(record["gaps"])


def _from_csv(path: Path) -> pd.DataFrame:
    try:
        raw = pd.read_csv(path, dtype=str, keep_default_na=False)
    except (OSError, ValueError) as error:
        raise FileError(f"cannot be read as a table ({error})", file=path) from error
    _check_columns(raw.columns, path)
    rows = [
        {name: _cell(name, text, path, row) for name, text in zip(raw.columns, cells, strict=True)}
        for row, cells in enumerate(raw.to_numpy().tolist(), start=2)
    ]
    return _frame(rows)


def _check_columns(found: Any, path: Path) -> None:
    missing = [name for name in GAP_COLUMNS if name not in found]
    if missing:
        raise FileError(f"has no column {missing[0]!r}; name a file that 'gapfit fit' wrote", file=path)


def _cell(name: str, text: str, path: Path, row: int) -> Any:
    """Value of a cell, typed by its column."""
    if name in TEXTS:
        return text
    if name in TRUTHS:
        return {"True": True, "False": False}.get(text)
    try:
        return int(text) if name in WHOLE else float(text or "nan")
    except ValueError:
        raise FileError(f"{text!r} is no number", file=path, row=row, column=name) from None
