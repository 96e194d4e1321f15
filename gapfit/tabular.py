"""Any data file to a `Table`: delimited text (compressed or not), HDF5, NetCDF.

The format is told from the first bytes of the file, never from its name.
"""

from __future__ import annotations

import io
import zlib
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any, Literal

import numpy as np

from gapfit.columns import (
    UNITS,
    ColumnRule,
    FloatArray,
    Table,
    Unit,
    looks_like_magnitude,
    parse_unit,
    resolved_unit,
    split_heading,
    take,
    unit_notice,
    units_of,
)
from gapfit.delimited import read_delimited
from gapfit.dialect import decode
from gapfit.errors import FileError

__all__ = [
    "UNITS",
    "ColumnRule",
    "Table",
    "Unit",
    "looks_like_magnitude",
    "parse_unit",
    "read_table",
    "resolved_unit",
    "take",
    "unit_notice",
    "units_of",
]

_GZIP, _HDF5, _ZIP = b"\x1f\x8b", b"\x89HDF\r\n\x1a\n", b"PK\x03\x04"
_NETCDF3 = (b"CDF\x01", b"CDF\x02")


def read_table(
    path: str | Path,
    missing: Literal["refuse", "keep"] = "refuse",
    text_columns: Sequence[str] = (),
) -> Table:
    """Read a data file of any format.

    Parameters
    ----------
    path : str or Path
        Delimited text, HDF5 or NetCDF, also gzip-compressed.
    missing : {"refuse", "keep"}
        Whether a missing or NaN cell in a column of numbers is an error, or kept as NaN; `take` refuses
        those of the columns that are used in any case.
    text_columns : sequence of str
        Names of columns of a delimited text that are text although they may look like numbers, such as
        fillings, where 1 stands beside 1/3.

    Returns
    -------
    Table

    Raises
    ------
    FileError
        If the file does not exist, is empty, a folder, no data file, or holds what cannot be read.
    """
    source = Path(path)
    data, notices = _load(source)
    if data.startswith(_HDF5):
        table = _read_hdf5(data, source)
    elif data.startswith(_NETCDF3):
        table = _read_netcdf3(data, source)
    else:
        table = read_delimited(decode(data, source), source, notices, text_columns)
    if missing == "refuse":
        _refuse_missing(table)
    return table


def _load(source: Path) -> tuple[bytes, list[str]]:
    """Bytes of a file, decompressed, and notices."""
    if source.is_dir():
        raise FileError("this is a folder, not a data file; name the files in it", file=source)
    try:
        data = source.read_bytes()
    except FileNotFoundError:
        raise FileError("there is no such file; check the name and the folder", file=source) from None
    except OSError as error:
        raise FileError(f"the file cannot be read ({error.strerror})", file=source) from error
    notices: list[str] = []
    if data.startswith(_GZIP):
        data, notices = _decompress(data, source)
    if data.startswith(_ZIP):
        raise FileError(
            "this is a spreadsheet or zip archive; export the data as delimited text", file=source
        )
    utf16 = data[1:2] == b"\0" or data[:1] == b"\0" or data.startswith((b"\xff\xfe", b"\xfe\xff"))
    trimmed = data if utf16 or data.startswith((_HDF5, b"CDF")) else data.rstrip(b"\0")
    if not trimmed.strip(b"\0 \t\r\n\xff\xfe\xef\xbb\xbf"):
        raise FileError("the file is empty", file=source)
    if len(trimmed) < len(data):
        notices = [*notices, "zero bytes at the end of the file are left out"]
    return trimmed, notices


def _decompress(data: bytes, source: Path) -> tuple[bytes, list[str]]:
    """Decompressed bytes of a gzip file, as far as they go."""
    pieces = []
    while data.startswith(_GZIP):
        worker = zlib.decompressobj(wbits=31)
        try:
            pieces.append(worker.decompress(data))
        except zlib.error as error:
            raise FileError(f"the compressed file is damaged ({error})", file=source) from error
        if not worker.eof:
            return b"".join(pieces), ["the compressed file is cut off; its whole rows are used"]
        data = worker.unused_data
    return b"".join(pieces), []


def _refuse_missing(table: Table) -> None:
    for name, column in table.values.items():
        bad = np.flatnonzero(np.isnan(column))
        if bad.size:
            more = f" ({bad.size} rows are like this)" if bad.size > 1 else ""
            raise FileError(
                "found NaN or an empty cell; a missing reading must be left out: remove the row or the "
                f"column{more}",
                file=table.source,
                row=int(table.row[bad[0]]),
                column=name,
            )


def _is_numeric(array: Any) -> bool:
    return bool(np.issubdtype(array.dtype, np.number)) and not np.issubdtype(array.dtype, np.complexfloating)


def _attribute(attributes: Mapping[str, Any], *names: str) -> str | None:
    """First attribute of these names as text."""
    for name in names:
        value = attributes.get(name)
        if value is not None:
            return value.decode() if isinstance(value, bytes) else str(value)
    return None


def _physical(raw: Any, attributes: Mapping[str, Any]) -> FloatArray:
    """Numbers of a variable after the fill value, scale_factor and add_offset of the NetCDF conventions."""
    values = np.array(raw, dtype=float)
    for name in ("_FillValue", "missing_value"):
        if name in attributes:
            values = np.where(values == float(np.ravel(attributes[name])[0]), np.nan, values)
    scale = float(np.ravel(attributes.get("scale_factor", 1.0))[0])
    offset = float(np.ravel(attributes.get("add_offset", 0.0))[0])
    return values if scale == 1.0 and offset == 0.0 else values * scale + offset


Columns = dict[str, tuple[FloatArray, str | None]]


def _read_hdf5(data: bytes, source: Path) -> Table:
    """Datasets of one level, or of several groups that hold the same datasets; each group is a block."""
    import h5py

    try:
        with h5py.File(io.BytesIO(data), "r") as file:
            comments = [f"{key} = {_attribute(file.attrs, key)}" for key in file.attrs]
            groups = _group_columns(file, h5py)
    except OSError as error:
        raise FileError(f"the HDF5 file is damaged ({error})", file=source) from error
    if not groups:
        raise FileError("the HDF5 file holds no datasets of numbers", file=source)
    return _from_groups(groups, source, comments)


def _group_columns(group: Any, h5py: Any) -> dict[str, Columns]:
    """Columns of every group that holds datasets, by the name of the group."""
    own: Columns = {}
    found: dict[str, Columns] = {}
    for name, item in group.items():
        if isinstance(item, h5py.Group):
            found |= _group_columns(item, h5py)
        else:
            own |= _dataset_columns(name, item)
    for key, value in group.attrs.items() if own and group.name != "/" else ():
        scalar = np.asarray(value)
        if scalar.size == 1 and _is_numeric(scalar) and key not in own:
            own[key] = np.ravel(scalar).astype(float), None
    return ({group.name: own} if own else {}) | found


def _dataset_columns(name: str, item: Any) -> Columns:
    """Columns of one dataset: itself, or the fields of a compound one; those without numbers are none."""
    label = _attribute(item.attrs, "NAME")
    if label is not None and label.startswith("This is a netCDF dimension but not a netCDF variable"):
        return {}
    if item.dtype.names is not None and item.ndim == 1:
        record = item[()]
        return {
            f: (np.array(record[f], dtype=float), None) for f in item.dtype.names if _is_numeric(record[f])
        }
    if not _is_numeric(item) or item.ndim > 1:
        return {}
    unit = _attribute(item.attrs, "units", "unit", "Units", "Unit")
    return {name: (np.atleast_1d(_physical(item[()], item.attrs)), unit)}


def _read_netcdf3(data: bytes, source: Path) -> Table:
    """One-dimensional variables of a classic NetCDF file."""
    from scipy.io import netcdf_file

    columns: Columns = {}
    try:
        with netcdf_file(io.BytesIO(data), "r", mmap=False) as file:
            for name, item in file.variables.items():
                attributes = vars(item).get("_attributes", {})
                if item.data.ndim <= 1 and _is_numeric(item.data):
                    unit = _attribute(attributes, "units", "unit")
                    columns[name] = np.atleast_1d(_physical(item.data, attributes)), unit
    except (ValueError, TypeError, IndexError, EOFError) as error:
        raise FileError(f"the NetCDF file is damaged ({error})", file=source) from error
    if not columns:
        raise FileError("the NetCDF file holds no one-dimensional variables of numbers", file=source)
    return _from_groups({"/": columns}, source, [])


def _from_groups(groups: Mapping[str, Columns], source: Path, comments: Sequence[str]) -> Table:
    """Table of named columns, the groups one below the other."""
    names = list(next(iter(groups.values())))
    for group, columns in groups.items():
        if set(columns) != set(names):
            odd = ", ".join(sorted(set(columns) ^ set(names)))
            raise FileError(
                f"the group {group!r} does not hold the same datasets as the first one (differing: {odd}); "
                "write one file per kind of table",
                file=source,
            )
    sizes = [_length(group, columns, source) for group, columns in groups.items()]
    parts = {
        name: [np.broadcast_to(c[name][0], n) for c, n in zip(groups.values(), sizes, strict=True)]
        for name in names
    }
    first = next(iter(groups.values()))
    stated = [first[name][1] for name in names]
    known = [None if unit is None else parse_unit(unit) for unit in stated]
    guessed = [split_heading(name)[1] for name in names]
    return Table(
        source=source,
        columns=tuple(names),
        units=tuple(g if k is None else k.name for k, g in zip(known, guessed, strict=True)),
        headings=tuple(names),
        values={name: np.concatenate(arrays) for name, arrays in parts.items()},
        row=np.concatenate([np.arange(1, n + 1) for n in sizes]),
        block=np.repeat(np.arange(len(sizes)), sizes),
        comments=tuple(comments),
    )


def _length(group: str, columns: Columns, source: Path) -> int:
    """Common length of the columns of a group; columns of one value count for every row."""
    sizes = {name: values.size for name, (values, _) in columns.items()}
    longest = max(sizes, key=lambda name: sizes[name])
    for name, size in sizes.items():
        if size not in (1, sizes[longest]):
            raise FileError(
                f"the group {group!r} has {size} values here but {sizes[longest]} in {longest!r}; "
                "columns must be of one length",
                file=source,
                column=name,
            )
    if sizes[longest] == 0:
        raise FileError(f"the group {group!r} is empty", file=source)
    return sizes[longest]
