"""Every exception that gapfit raises on purpose.

The tree::

    GapfitError
    ├── InputError            what the user handed in is wrong (exit code 1)
    │   ├── FileError         a data file: names file, row and column
    │   ├── StudyError        the study file: names the key
    │   └── FillingError      a text that is no filling factor
    └── NotEnoughData         the input is fine, but too little for the question

A message says what was found, what is allowed and what to do.
"""

from __future__ import annotations

from pathlib import Path

__all__ = ["FileError", "FillingError", "GapfitError", "InputError", "NotEnoughData", "StudyError"]


class GapfitError(Exception):
    """Root of all exceptions raised on purpose by gapfit."""


class InputError(GapfitError):
    """Something the user handed in is wrong; the message says what to do."""


class FileError(InputError):
    """A data file cannot be used.

    Parameters
    ----------
    message : str
        What was found, what is allowed, what to do.
    file : str or Path, optional
        The file in question.
    row : int, optional
        Row in the file, counted from 1 as an editor does.
    column : str or int, optional
        Column name or number.
    """

    def __init__(
        self,
        message: str,
        *,
        file: str | Path | None = None,
        row: int | None = None,
        column: str | int | None = None,
    ) -> None:
        self.file = None if file is None else str(file)
        self.row = row
        self.column = column
        where = [str(file)] if file is not None else []
        where += [f"row {row}"] if row is not None else []
        where += [f"column {column!r}"] if column is not None else []
        super().__init__(f"{', '.join(where)}: {message}" if where else message)


class StudyError(InputError):
    """The study file is not valid.

    Parameters
    ----------
    message : str
        What was found, what is allowed, what to do.
    file : str or Path, optional
        The study file.
    key : str, optional
        Dotted name of the key, such as ``traces.temperature``.
    line : int, optional
        Line in the study file, counted from 1, where it is known.
    """

    def __init__(
        self,
        message: str,
        *,
        file: str | Path | None = None,
        key: str | None = None,
        line: int | None = None,
    ) -> None:
        self.file = None if file is None else str(file)
        self.key = key
        self.line = line
        where = [str(file)] if file is not None else []
        where += [f"line {line}"] if line is not None else []
        where += [f"key {key!r}"] if key is not None else []
        super().__init__(f"{', '.join(where)}: {message}" if where else message)


class FillingError(InputError):
    """A text does not name a filling factor."""


class NotEnoughData(GapfitError):
    """The input is valid but too small for what was asked."""
