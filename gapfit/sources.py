"""Where a study takes a number from: a column, a file name, a table of files, or the study itself.

Also the lookup of the files that it names. These are validators and small records for the sections of the
study file in `blocks`.
"""

from __future__ import annotations

import glob
import os
import re
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Annotated, Any

from pydantic import (
    AfterValidator,
    BaseModel,
    BeforeValidator,
    ConfigDict,
    Discriminator,
    Field,
    Strict,
    Tag,
    ValidationInfo,
    model_validator,
)

from gapfit.columns import ColumnRule, parse_unit, units_of

__all__ = [
    "AnyColumn",
    "Block",
    "CurrentSource",
    "DensityColumn",
    "FieldColumn",
    "FieldSource",
    "Flag",
    "GateColumn",
    "NameSource",
    "NotNegative",
    "Number",
    "Positive",
    "SignalColumn",
    "TableSource",
    "TemperatureSource",
    "Text",
    "Whole",
    "existing_file",
    "matching_files",
    "of_dimension",
]

Number = Annotated[float, Strict()]
Positive = Annotated[float, Strict(), Field(gt=0)]
NotNegative = Annotated[float, Strict(), Field(ge=0)]
Whole = Annotated[int, Strict()]
Text = Annotated[str, Strict(), Field(min_length=1)]
Flag = Annotated[bool, Strict()]


class Block(BaseModel):
    """A section of the study file: frozen, no unknown keys, no NaN."""

    model_config = ConfigDict(extra="forbid", frozen=True, allow_inf_nan=False, validate_default=False)


# --- columns and other sources of a number ---------------------------------------------------------------


def _spelled_out(value: Any) -> Any:
    """A bare column name as a rule, and numbers that are no numbers refused."""
    if isinstance(value, str):
        return {"column": value}
    if isinstance(value, Mapping):
        for key in ("scale", "offset"):
            number = value.get(key, 0.0)
            if isinstance(number, bool) or not isinstance(number, (int, float)):
                raise ValueError(f"{key} is {number!r}, but must be a number")
        column = value.get("column")
        if isinstance(column, (bool, float)) or (isinstance(column, (str, int)) and column in ("", 0)):
            raise ValueError(f"column is {column!r}; give the name in quotes, or the position counted from 1")
    return value


def _check_unit(unit: str | None, dimensions: tuple[str, ...]) -> None:
    known = None if unit is None else parse_unit(unit)
    if unit is not None and (known is None or known.dimension not in dimensions):
        raise ValueError(f"unit {unit!r} cannot be used here; allowed are {', '.join(units_of(dimensions))}")


def of_dimension(*dimensions: str) -> Callable[[Any], Any]:
    """Validator of the unit of a column or another source."""

    def checked(source: Any) -> Any:
        _check_unit(getattr(source, "unit", None), dimensions)
        return source

    return checked


FieldColumn = Annotated[ColumnRule, BeforeValidator(_spelled_out), AfterValidator(of_dimension("field"))]
GateColumn = Annotated[ColumnRule, BeforeValidator(_spelled_out), AfterValidator(of_dimension("voltage"))]
DensityColumn = Annotated[ColumnRule, BeforeValidator(_spelled_out), AfterValidator(of_dimension("density"))]
SignalColumn = Annotated[
    ColumnRule,
    BeforeValidator(_spelled_out),
    AfterValidator(of_dimension("voltage", "resistance", "conductance")),
]
CurrentColumn = Annotated[ColumnRule, BeforeValidator(_spelled_out), AfterValidator(of_dimension("current"))]
AnyColumn = Annotated[ColumnRule, BeforeValidator(_spelled_out)]


class NameSource(Block):
    """A number that stands in the file name.

    Attributes
    ----------
    from_name : str
        Regular expression with a group ``(?P<value>...)``; a ``p`` in the value is a decimal point.
    unit : str, optional
        Unit of the number; K for temperatures and T for fields where not given.
    """

    from_name: Text
    unit: Text | None = None

    @model_validator(mode="after")
    def _check_pattern(self) -> NameSource:
        try:
            groups = re.compile(self.from_name).groupindex
        except re.error as error:
            raise ValueError(f"{self.from_name!r} is no regular expression ({error})") from None
        if "value" not in groups:
            raise ValueError(
                f"{self.from_name!r} has no group (?P<value>...); write for example 'T(?P<value>[0-9p.]+)K'"
            )
        return self


class TableSource(Block):
    """A number of each file, listed in another file.

    Attributes
    ----------
    table : Path
        File with one column of file names and one of numbers.
    column : str or int, optional
        Column of the numbers; found by its name where not given.
    unit : str, optional
        Unit of the numbers; the file's where not given, else K or T.
    """

    table: Annotated[Path, BeforeValidator(lambda value, info: existing_file(value, info))]
    column: str | int | None = None
    unit: Text | None = None


def _kind_of_source(value: Any) -> str | None:
    if isinstance(value, Mapping):
        for key, tag in (("from_name", "@name"), ("table", "@table")):
            if key in value:
                return tag
        return "@column"
    if isinstance(value, (NameSource, TableSource)):
        return "@name" if isinstance(value, NameSource) else "@table"
    if isinstance(value, (str, ColumnRule)):
        return "@column"
    return "@number" if isinstance(value, (int, float)) and not isinstance(value, bool) else None


_Column = Annotated[AnyColumn, Tag("@column")]
_Name = Annotated[NameSource, Tag("@name")]
_Table = Annotated[TableSource, Tag("@table")]
TemperatureSource = Annotated[
    Annotated[_Column | _Name | _Table | Annotated[Positive, Tag("@number")], Discriminator(_kind_of_source)],
    AfterValidator(of_dimension("temperature")),
]
FieldSource = Annotated[
    Annotated[_Column | _Name | _Table | Annotated[Number, Tag("@number")], Discriminator(_kind_of_source)],
    AfterValidator(of_dimension("field")),
]
CurrentSource = Annotated[
    Annotated[_Column | Annotated[Positive, Tag("@number")], Discriminator(_kind_of_source)],
    AfterValidator(of_dimension("current")),
]


# --- files ---------------------------------------------------------------------------------------------


def _folder(info: ValidationInfo) -> Path:
    return Path(info.context["folder"]) if info.context else Path()


def _content(folder: Path) -> str:
    """What is in a folder, for messages."""
    names = sorted(entry.name + ("/" if entry.is_dir() else "") for entry in folder.iterdir())
    shown = ", ".join(names[:8]) or "nothing"
    return f"{shown}, and {len(names) - 8} more" if len(names) > 8 else shown


def existing_file(value: Any, info: ValidationInfo) -> Path:
    """Path of a file in the folder of the study.

    Raises
    ------
    ValueError
        If it does not exist; lists what does.
    """
    if not isinstance(value, str) or not value:
        raise ValueError(f"found {value!r}; give the name of a file in quotes")
    path = _folder(info) / value
    if not path.is_file():
        near = path.parent if path.parent.is_dir() else _folder(info)
        raise ValueError(f"there is no file {value!r}; {near} holds {_content(near)}")
    return path


def _natural(path: Path) -> list[tuple[int, str]]:
    """Sorting key in which run2 comes before run10."""
    return [(int(p), "") if p.isdigit() else (-1, p) for p in re.split(r"(\d+)", str(path)) if p]


def matching_files(value: Any, info: ValidationInfo) -> tuple[Path, ...]:
    """Files in the folder of the study that match a pattern or a list of them, run2 before run10.

    Raises
    ------
    ValueError
        If a pattern matches none; lists what is there.
    """
    patterns = [value] if isinstance(value, str) else value
    if not isinstance(patterns, list) or not patterns or not all(isinstance(p, str) and p for p in patterns):
        raise ValueError(f"found {value!r}; give a list of file names or patterns such as ['sweeps/*.csv']")
    folder = _folder(info)
    found: set[Path] = set()
    for pattern in patterns:
        hits = glob.glob(os.path.join(glob.escape(str(folder)), pattern), recursive=True)
        files = {Path(hit) for hit in hits if os.path.isfile(hit)}
        if not files:
            below = folder / Path(pattern).parent
            near = below if below.is_dir() else folder
            raise ValueError(f"no file matches {pattern!r} in {folder}; {near} holds {_content(near)}")
        found |= files
    return tuple(sorted(found, key=_natural))
