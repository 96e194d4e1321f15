"""The study file: a TOML text that says what was measured and what is wanted.

Every key is checked, an unknown one is refused, and all problems are told at once in plain words. What
comes out is a frozen `Study` whose files exist and whose fillings are exact.
"""

from __future__ import annotations

import os
import re
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass
from fractions import Fraction
from pathlib import Path
from typing import Any

from pydantic import ValidationError, model_validator
from scipy.constants import elementary_charge

from gapfit.blocks import (
    FillingsBlock,
    FitBlock,
    GeometryBlock,
    SampleBlock,
    SeriesBlock,
    SeriesColumns,
    ThermometryBlock,
    TracesBlock,
    WindowRange,
)
from gapfit.complaints import Problem, explain, key_lines
from gapfit.errors import StudyError
from gapfit.hall import filling_label
from gapfit.sources import Block, NameSource, TableSource
from gapfit.tabular import ColumnRule, read_table
from gapfit.traces import FromName, FromTable, GateStart, Geometry, TraceSettings

__all__ = [
    "FillingsBlock",
    "FitBlock",
    "GeometryBlock",
    "NameSource",
    "SampleBlock",
    "SeriesBlock",
    "SeriesColumns",
    "Study",
    "TableSource",
    "ThermometryBlock",
    "TracesBlock",
    "WindowRange",
    "load_study",
    "study_as_dict",
    "trace_settings",
]


class _StudyFile(Block):
    """The whole file."""

    sample: SampleBlock
    geometry: GeometryBlock = GeometryBlock()
    traces: TracesBlock | None = None
    series: SeriesBlock | None = None
    fillings: FillingsBlock = FillingsBlock()
    thermometry: ThermometryBlock | None = None
    fit: FitBlock = FitBlock()

    @model_validator(mode="after")
    def _one_source(self) -> _StudyFile:
        if (self.traces is None) == (self.series is None):
            found = "neither" if self.traces is None else "both"
            raise ValueError(
                f"found {found} of [traces] and [series]; a study needs one: [traces] for raw sweeps, "
                "or [series] for minima already read off"
            )
        return self


@dataclass(frozen=True)
class Study:
    """A checked study.

    Attributes
    ----------
    sample : SampleBlock
    geometry : GeometryBlock
    traces : TracesBlock or None
        Raw sweeps; exactly one of this and `series` is given.
    series : SeriesBlock or None
        Minima already read off.
    fillings : FillingsBlock
    thermometry : ThermometryBlock or None
        None: temperatures are taken as exact, which is flagged.
    fit : FitBlock
    path : Path
        The study file.
    folder : Path
        Its folder, to which file names are relative.
    """

    sample: SampleBlock
    geometry: GeometryBlock
    traces: TracesBlock | None
    series: SeriesBlock | None
    fillings: FillingsBlock
    thermometry: ThermometryBlock | None
    fit: FitBlock
    path: Path
    folder: Path

    @property
    def files(self) -> tuple[Path, ...]:
        """Every data file that the study names."""
        if self.series is not None:
            return (self.series.file,)
        if self.traces is None:
            return ()
        sources = (self.traces.temperature, self.traces.field)
        tables = {source.table: None for source in sources if isinstance(source, TableSource)}
        return (*self.traces.files, *tables)


def load_study(path: str | Path) -> Study:
    """Read and check a study file.

    Parameters
    ----------
    path : str or Path
        The file, or a folder with a ``study.toml`` in it.

    Returns
    -------
    Study

    Raises
    ------
    StudyError
        If the file is missing, no TOML, or has wrong or unknown keys; every problem is named.
    """
    file = _study_path(Path(path))
    text = _study_text(file)
    raw = _parsed(text, file)
    try:
        content = _StudyFile.model_validate(raw, context={"folder": file.parent})
    except ValidationError as error:
        raise _study_error(explain(error.errors(), _allowed_keys), text, file) from None
    blocks = {name: getattr(content, name) for name in _SECTIONS}
    return Study(**blocks, path=file, folder=file.parent)


def _study_path(path: Path) -> Path:
    file = path / "study.toml" if path.is_dir() else path
    if file.is_file():
        return file
    if path.is_dir():
        raise StudyError("there is no study.toml in this folder; 'gapfit new FOLDER' writes one", file=path)
    raise StudyError("there is no such file; check the name and the folder", file=path)


def _study_text(file: Path) -> str:
    try:
        return file.read_text(encoding="utf-8-sig")
    except UnicodeDecodeError as error:
        raise StudyError(
            f"a study must be UTF-8 text; byte {error.start} is not: save the file as UTF-8", file=file
        ) from None
    except OSError as error:
        raise StudyError(f"the file cannot be read ({error.strerror})", file=file) from None


def _parsed(text: str, file: Path) -> dict[str, Any]:
    try:
        return tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        place = re.search(r"line (\d+)", str(error))
        line = int(place[1]) if place else text.count("\n") + 1
        shown = text.splitlines()[line - 1].strip() if line <= len(text.splitlines()) else ""
        raise StudyError(f"this is no valid TOML ({error}); found {shown!r}", file=file, line=line) from None


_SECTIONS: dict[str, type[Block]] = {
    "sample": SampleBlock,
    "geometry": GeometryBlock,
    "traces": TracesBlock,
    "series": SeriesBlock,
    "fillings": FillingsBlock,
    "thermometry": ThermometryBlock,
    "fit": FitBlock,
}
_BY_TAG: dict[str, type[Block]] = {"@name": NameSource, "@table": TableSource, "@range": WindowRange}


def _allowed_keys(place: tuple[str, ...]) -> tuple[str, ...]:
    """Keys that are allowed inside a table of the study, given by its place with the tags of unions."""
    if not place:
        return tuple(_SECTIONS)
    tagged = [_BY_TAG[tag] for tag in place if tag in _BY_TAG]
    if tagged:
        return tuple(tagged[0].model_fields)
    if len(place) == 1:
        return tuple(_SECTIONS[place[0]].model_fields)
    if place == ("series", "columns"):
        return tuple(SeriesColumns.model_fields)
    return ("column", "unit", "scale", "offset")


def _study_error(problems: list[Problem], text: str, file: Path) -> StudyError:
    """One error that names every problem with its line."""
    lines = key_lines(text)
    placed = [(problem, _line_of(problem.key, lines)) for problem in problems]
    placed.sort(key=lambda pair: pair[1] or 0)
    first, line = placed[0]
    if len(placed) == 1:
        return StudyError(first.message, file=file, key=first.key or None, line=line)
    rows = []
    for problem, at in placed:
        where = [f"line {at}"] if at else []
        where += [f"key {problem.key!r}"] if problem.key else []
        rows.append(f"\n  - {', '.join(where)}{': ' if where else ''}{problem.message}")
    error = StudyError(f"{len(placed)} problems:{''.join(rows)}", file=file)
    error.key, error.line = first.key or None, line
    return error


def _line_of(key: str, lines: Mapping[str, int]) -> int | None:
    """Line of a key, else of the nearest table that holds it."""
    parts = key.split(".")
    for stop in range(len(parts), 0, -1):
        found = lines.get(".".join(parts[:stop]))
        if found is not None:
            return found
    return None


def trace_settings(study: Study) -> TraceSettings:
    """What `gapfit.loading` must know to read the sweeps of a study.

    Parameters
    ----------
    study : Study
        With a [traces] section.

    Returns
    -------
    TraceSettings

    Raises
    ------
    StudyError
        If the study has no [traces].
    FileError
        If a table of temperatures or fields cannot be read.
    """
    traces = study.traces
    if traces is None:
        raise StudyError("this study has no [traces] section", file=study.path)
    temperature = _source(traces.temperature, "K")
    if temperature is None:
        raise StudyError("no source of temperatures", file=study.path, key="traces.temperature")
    per_volt = traces.density_per_V_m2
    if traces.capacitance_F_per_m2 is not None:
        per_volt = traces.capacitance_F_per_m2 / elementary_charge
    return TraceSettings(
        sweep=traces.sweep,
        temperature=temperature,
        rho_xx=traces.rho_xx,
        field=_source(traces.field if traces.field_T is None else traces.field_T, "T"),
        gate=traces.gate,
        density=traces.density,
        rho_xy=traces.rho_xy,
        quadrature=traces.quadrature,
        current_A=traces.current_A,
        contacts=traces.contacts,
        geometry=Geometry(**study.geometry.model_dump()),
        gate_start=GateStart(per_volt, traces.neutrality_V),
        allow_magnitude=traces.allow_magnitude,
    )


def _source(
    source: ColumnRule | NameSource | TableSource | float | None, unit: str
) -> ColumnRule | FromName | FromTable | float | None:
    """A source of numbers as the readers of sweeps know it."""
    if isinstance(source, NameSource):
        return FromName(source.from_name, source.unit or unit)
    if isinstance(source, TableSource):
        return FromTable(read_table(source.table), source.column, source.unit)
    return source


def study_as_dict(study: Study) -> dict[str, Any]:
    """The study as plain data for a record file: all defaults filled in, file names relative to the study.

    Returns
    -------
    dict
        Of texts, numbers, booleans, lists and dicts; absent sections are left out.
    """
    record = {}
    for name in _SECTIONS:
        block = getattr(study, name)
        if block is not None:
            record[name] = _plain(block.model_dump(), study.folder)
    return record


def _plain(value: Any, folder: Path) -> Any:
    if isinstance(value, Mapping):
        return {key: _plain(item, folder) for key, item in value.items() if item is not None}
    if isinstance(value, (list, tuple)):
        return [_plain(item, folder) for item in value]
    if isinstance(value, Fraction):
        return filling_label(value)
    if isinstance(value, Path):
        return Path(os.path.relpath(value, folder)).as_posix()
    return value
