"""Files that a run leaves behind: written whole or not at all, numbers to the last digit, nothing pickled."""

from __future__ import annotations

import hashlib
import json
import math
import os
import platform
import re
import tempfile
from collections.abc import Iterable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import fields, is_dataclass
from fractions import Fraction
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import Any

import numpy as np

from gapfit.errors import FileError
from gapfit.fit import GapFit
from gapfit.hall import filling_label
from gapfit.readoff import series_to_columns
from gapfit.series import TemperatureSeries

__all__ = [
    "FORMAT_VERSION",
    "RUN_FORMAT",
    "atomic_path",
    "file_digest",
    "plain",
    "read_json",
    "run_record",
    "series_names",
    "write_bytes",
    "write_json",
    "write_series",
    "write_text",
]

FORMAT_VERSION = 1
"""Version of the layout of every file of this module; it grows when a reader of old files would go wrong."""

RUN_FORMAT = "gapfit run"
"""What marks the record of a run."""

PACKAGES = ("numpy", "scipy", "pandas", "emcee", "matplotlib", "h5netcdf")


# ------------------------------------------------------------------------------------- whole or not at all


@contextmanager
def atomic_path(path: str | Path) -> Iterator[Path]:
    """Temporary name in the folder of a file, which takes the file's place when the block ends well.

    Parameters
    ----------
    path : str or Path
        The file to be written; its folder is made if it is missing.

    Yields
    ------
    Path
        Where to write. If the block raises, the temporary file goes and the old file stays as it was.

    Raises
    ------
    FileError
        If the folder or the file cannot be written.
    """
    final = Path(path)
    try:
        final.parent.mkdir(parents=True, exist_ok=True)
        handle, name = tempfile.mkstemp(dir=final.parent, prefix=f".{final.name}.", suffix=".part")
    except OSError as error:
        raise FileError(f"cannot be written ({error.strerror}); choose another folder", file=final) from error
    os.close(handle)
    temporary = Path(name)
    try:
        yield temporary
        _settle(temporary, final)
    except OSError as error:
        raise FileError(f"cannot be written ({error.strerror})", file=final) from error
    finally:
        temporary.unlink(missing_ok=True)


def _settle(temporary: Path, final: Path) -> None:
    """Put a finished file in its place, with the permissions that a new file gets."""
    mask = os.umask(0)
    os.umask(mask)
    os.chmod(temporary, 0o666 & ~mask)
    with temporary.open("rb+") as stream:
        os.fsync(stream.fileno())
    os.replace(temporary, final)


def write_bytes(path: str | Path, content: bytes) -> Path:
    """Write a file whole or not at all.

    Parameters
    ----------
    path : str or Path
    content : bytes

    Returns
    -------
    Path
        The file.

    Raises
    ------
    FileError
        If it cannot be written.
    """
    with atomic_path(path) as temporary:
        temporary.write_bytes(content)
    return Path(path)


def write_text(path: str | Path, content: str) -> Path:
    """Write a UTF-8 text with line feeds, whole or not at all; as `write_bytes`."""
    return write_bytes(path, content.encode("utf-8"))


def write_json(path: str | Path, content: Any) -> Path:
    """Write plain data or records as JSON, whole or not at all; NaN and infinities become null.

    Parameters
    ----------
    path : str or Path
    content : object
        Anything that `plain` takes.

    Returns
    -------
    Path
    """
    return write_text(path, json.dumps(plain(content), indent=1, ensure_ascii=False, allow_nan=False) + "\n")


def read_json(path: str | Path) -> Any:
    """Content of a JSON file.

    Raises
    ------
    FileError
        If the file is missing or no JSON.
    """
    file = Path(path)
    try:
        return json.loads(file.read_text(encoding="utf-8"))
    except OSError as error:
        raise FileError(f"cannot be read ({error.strerror})", file=file) from error
    except ValueError as error:
        raise FileError(f"is no valid JSON ({error}); run 'gapfit fit' again", file=file) from error


def plain(value: Any) -> Any:
    """Plain data of anything that a record holds: dicts, lists, texts, numbers, null.

    Parameters
    ----------
    value : object
        Frozen records, mappings, sequences, arrays, fractions, paths, numbers, texts.

    Returns
    -------
    dict, list, str, int, float, bool or None
        Numbers that are not finite become None.

    Raises
    ------
    TypeError
        For anything else.
    """
    if value is None or isinstance(value, (str, bool, int)):
        return value
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, Mapping):
        return {str(key): plain(item) for key, item in value.items()}
    if is_dataclass(value) and not isinstance(value, type):
        return {item.name: plain(getattr(value, item.name)) for item in fields(value)}
    if isinstance(value, (np.ndarray, np.generic)):
        return plain(value.tolist())
    if isinstance(value, (list, tuple, set, frozenset)):
        return [plain(item) for item in value]
    if isinstance(value, Fraction):
        return filling_label(value)
    if isinstance(value, Path):
        return value.as_posix()
    raise TypeError(f"a {type(value).__name__} has no place in a record file")


# ------------------------------------------------------------------------------------- names of the series


def series_names(series: Sequence[TemperatureSeries]) -> list[str]:
    """Names of series that serve as file names: the filling, and what tells series of one filling apart.

    Parameters
    ----------
    series : sequence of TemperatureSeries

    Returns
    -------
    list of str
        In the order of the series, all different: ``"1_3"``, ``"minus4_3"``, ``"2_5_9.5T_contacts-A"``.
    """
    names = [_filling_name(item.filling) for item in series]
    for describe in (_field_name, _contacts_name, _direction_name, _current_name):
        names = _told_apart(names, [describe(item) for item in series])
    return _told_apart(names, [str(names[:index].count(name) + 1) for index, name in enumerate(names)])


def _told_apart(names: list[str], details: list[str]) -> list[str]:
    """Add a detail to names that are shared and whose details differ."""
    groups: dict[str, set[str]] = {}
    for name, detail in zip(names, details, strict=True):
        groups.setdefault(name.lower(), set()).add(detail)
    return [
        f"{name}_{detail}" if detail and len(groups[name.lower()]) > 1 else name
        for name, detail in zip(names, details, strict=True)
    ]


def _filling_name(filling: Fraction) -> str:
    sign = "minus" if filling < 0 else ""
    text = str(abs(filling.numerator))
    return sign + (text if filling.denominator == 1 else f"{text}_{filling.denominator}")


def _field_name(series: TemperatureSeries) -> str:
    return "" if math.isnan(series.field_T) else f"{series.field_T:.6g}T"


def _contacts_name(series: TemperatureSeries) -> str:
    safe = re.sub(r"[^A-Za-z0-9.]+", "-", series.contacts).strip("-.")
    return f"contacts-{safe}" if safe else ""


def _direction_name(series: TemperatureSeries) -> str:
    return re.sub(r"[^A-Za-z0-9]+", "-", series.direction).strip("-")


def _current_name(series: TemperatureSeries) -> str:
    return "" if math.isnan(series.drive_current_A) else f"{series.drive_current_A * 1e9:.6g}nA"


# -------------------------------------------------------------------------------------------- the readings


def write_series(path: str | Path, series: Iterable[TemperatureSeries]) -> Path:
    """Write the readings, those left out with their reason, to a CSV file that is a valid ``[series]`` input.

    Parameters
    ----------
    path : str or Path
    series : iterable of TemperatureSeries

    Returns
    -------
    Path
    """
    import pandas as pd

    frame = pd.DataFrame(series_to_columns(tuple(series)))
    return write_text(path, frame.to_csv(index=False, lineterminator="\n"))


# -------------------------------------------------------------------------------------- where it came from


def file_digest(path: str | Path) -> str:
    """SHA-256 of a file, as hexadecimal text.

    Raises
    ------
    FileError
        If the file cannot be read.
    """
    try:
        with Path(path).open("rb") as stream:
            return hashlib.file_digest(stream, "sha256").hexdigest()
    except OSError as error:
        raise FileError(f"cannot be read ({error.strerror})", file=path) from error


def run_record(
    fits: Sequence[GapFit],
    *,
    study: Mapping[str, Any],
    inputs: Iterable[str | Path],
    folder: str | Path,
    seed: int,
    wall_time_s: float,
) -> dict[str, Any]:
    """What a run was made of: versions, seed, study as read, digests of the inputs, rules, priors, wall time.

    Parameters
    ----------
    fits : sequence of GapFit
    study : mapping
        The study as read, as plain data.
    inputs : iterable of str or Path
        Every file that was read, the study file included.
    folder : str or Path
        Folder to which input names are relative in the record.
    seed : int
    wall_time_s : float, s

    Returns
    -------
    dict
        Ready for `write_json`.

    Raises
    ------
    FileError
        If an input cannot be read.
    """
    names = series_names([fit.series for fit in fits])
    return {
        "format": RUN_FORMAT,
        "format_version": FORMAT_VERSION,
        "versions": _versions(),
        "seed": seed,
        "wall_time_s": round(wall_time_s, 3),
        "study": plain(study),
        "inputs": [
            {"file": _relative(Path(path), Path(folder)), "sha256": file_digest(path)} for path in inputs
        ],
        "settings": plain(fits[0].settings) if fits else {},
        "priors": {name: fit.problem.prior.table() for name, fit in zip(names, fits, strict=True)},
    }


def _versions() -> dict[str, str]:
    from gapfit import __version__

    found = {"gapfit": __version__, "python": platform.python_version()}
    for package in PACKAGES:
        try:
            found[package] = version(package)
        except PackageNotFoundError:
            found[package] = "not installed"
    return found


def _relative(path: Path, folder: Path) -> str:
    return Path(os.path.relpath(path, folder)).as_posix()
