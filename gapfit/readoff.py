"""Minima already read off: temperature series from a table of readings, and back into columns."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction
from itertools import pairwise
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from gapfit.columns import ColumnRule, Table, take
from gapfit.errors import FileError, FillingError, NotEnoughData
from gapfit.gather import chosen_quantity
from gapfit.hall import parse_filling, plateau_resistance
from gapfit.series import (
    HIGHEST_FRACTION_START_K,
    HIGHEST_TEMPERATURE_K,
    LARGEST_TEMPERATURE_STEP,
    MINIMUM_POINTS,
    NO_TEMPERATURE_ERROR,
    ErrorSource,
    ExcludedPoint,
    Quantity,
    ReadingKind,
    TemperatureSeries,
    assumed_error,
    make_series,
)
from gapfit.traces import conductivity, conductivity_error

__all__ = ["SERIES_TEXT_COLUMNS", "SeriesSettings", "series_from_table", "series_to_columns"]

FloatArray = NDArray[np.float64]

SERIES_TEXT_COLUMNS = (
    "filling", "sample", "cooldown", "contacts", "direction", "reading", "error_source", "flags",
    "excluded", "reason",
)  # fmt: skip
"""Columns of a table of minima that are text although they may look like numbers."""

_RHO, _SIGMA = "rho_xx_ohm", "sigma_xx_S"
_SORTS = {
    "field_T": ("field", "T"),
    "temperature_K": ("temperature", "K"),
    "temperature_error_K": ("temperature", "K"),
    _RHO: ("resistance", "ohm"),
    f"{_RHO}_error": ("resistance", "ohm"),
    _SIGMA: ("conductance", "S"),
    f"{_SIGMA}_error": ("conductance", "S"),
    f"{_RHO}_background": ("resistance", "ohm"),
    f"{_RHO}_background_rise": ("resistance", "ohm"),
    f"{_SIGMA}_background": ("conductance", "S"),
    f"{_SIGMA}_background_rise": ("conductance", "S"),
    "rho_xy_ohm": ("resistance", "ohm"),
    "drive_current_A": ("current", "A"),
    "total_field_T": ("field", "T"),
}
_NO = ("", "0", "no", "false", "nan", "0.0")


@dataclass(frozen=True)
class SeriesSettings:
    """How a table of minima becomes series.

    Attributes
    ----------
    quantity : {"auto", "rho_xx", "sigma_xx"}
        ``"auto"`` takes what the table has; readings of rho_xx above 0.2 rho_xy are converted to sigma_xx.
    temperature_relative_error : float, optional
        Relative error of each temperature, in quadrature with that of the table. A table with a column
        error_source is the record of a run, whose errors hold it already.
    relative_reading_error : float
        Relative error of each reading, in quadrature with that of the table.
    geometry_known : bool
        Whether readings are truly per square.
    sample, cooldown : str
        Names where the table has none.
    """

    quantity: Literal["auto", "rho_xx", "sigma_xx"] = "auto"
    temperature_relative_error: float | None = None
    relative_reading_error: float = 0.0
    geometry_known: bool = True
    sample: str = ""
    cooldown: str = ""


def series_from_table(table: Table, settings: SeriesSettings | None = None) -> tuple[TemperatureSeries, ...]:
    """Temperature series of a table of minima.

    Parameters
    ----------
    table : Table
        Columns filling, temperature_K and rho_xx_ohm or sigma_xx_S; optional: field_T, *_error,
        temperature_error_K, *_background (flank level) and *_background_rise (its change over the reference
        temperature), rho_xy_ohm, sample, cooldown, contacts, direction, drive_current_A,
        total_field_T, reading, error_source (stated, trace or assumed), flags, excluded (yes or no), reason.
    settings : SeriesSettings, optional
        Quantity, errors and names.

    Returns
    -------
    tuple of TemperatureSeries
        One per filling, field, contacts, current, sample and cool-down, in the order of the table.

    Raises
    ------
    FileError
        If a column is missing, a filling is none, a number cannot be, or two rows are the same reading.
    NotEnoughData
        If a series has fewer than three temperatures.
    """
    settings = settings or SeriesSettings()
    rows = _Rows.of(table)
    _refuse_duplicates(rows)
    found = []
    keys = [rows.key(index) for index in range(len(table))]
    for key in dict.fromkeys(keys):
        found.append(_one_series(rows, np.array([k == key for k in keys]), settings))
    return tuple(found)


@dataclass(frozen=True, eq=False)
class _Rows:
    """The columns of a table of minima, checked."""

    table: Table
    filling: tuple[Fraction, ...]
    numbers: dict[str, FloatArray]
    texts: dict[str, NDArray[np.str_]]
    excluded: NDArray[np.bool_]

    @classmethod
    def of(cls, table: Table) -> _Rows:
        """Read and check the columns."""
        if "filling" not in table.columns:
            table.find("filling")
        if _RHO not in table.columns and _SIGMA not in table.columns:
            raise FileError(
                f"needs a column {_RHO} or {_SIGMA}; found {', '.join(table.columns)}", file=table.source
            )
        texts = {name: _texts(table, name) for name in SERIES_TEXT_COLUMNS if name in table.columns}
        excluded = np.array([False] * len(table))
        if "excluded" in texts:
            excluded = np.array([text.strip().lower() not in _NO for text in texts["excluded"]])
        if "temperature_K" not in table.columns:
            table.find("temperature_K")
        numbers = {name: _numbers(table, name, excluded) for name in _SORTS if name in table.columns}
        rows = cls(table, _fillings(table, texts["filling"]), numbers, texts, excluded)
        rows._check()
        return rows

    def key(self, index: int) -> tuple[Any, ...]:
        """What the readings of one series share."""
        names = [self.text(name, index) for name in ("sample", "cooldown", "contacts")]
        current = self.number("drive_current_A", index)
        tilt = self.number("total_field_T", index)
        return (self.filling[index], *_rounded(self.number("field_T", index), current, tilt), *names)

    def text(self, name: str, index: int | np.intp) -> str:
        return str(self.texts[name][index]) if name in self.texts else ""

    def number(self, name: str, index: int | np.intp) -> float:
        return float(self.numbers[name][index]) if name in self.numbers else float("nan")

    def error(self, message: str, index: int | np.intp, column: str) -> FileError:
        return FileError(message, file=self.table.source, row=int(self.table.row[index]), column=column)

    def _check(self) -> None:
        """Refuse temperatures, errors and readings that cannot be."""
        temperature = self.numbers["temperature_K"]
        readings = np.stack([self.numbers[name] for name in (_RHO, _SIGMA) if name in self.numbers])
        for index in np.flatnonzero((np.isfinite(readings).sum(axis=0) != 1) & ~self.excluded):
            raise self.error(
                f"needs one reading, of {_RHO} or of {_SIGMA}; remove the row, or write yes under excluded",
                index,
                _RHO if _RHO in self.numbers else _SIGMA,
            )
        for index in np.flatnonzero(~(temperature > 0)):
            raise self.error(
                f"found a temperature of {temperature[index]:g} K; temperatures must be above zero: correct "
                "or remove the row",
                index,
                "temperature_K",
            )
        fractional = np.array([filling.denominator > 1 for filling in self.filling])
        hot = temperature > HIGHEST_TEMPERATURE_K
        if fractional.any() and temperature[fractional].min() > HIGHEST_FRACTION_START_K:
            hot |= fractional
        for index in np.flatnonzero(hot):
            raise self.error(
                f"found {temperature[index]:g}, which looks like millikelvins in a column of kelvins; "
                "convert the column to kelvins",
                index,
                "temperature_K",
            )
        order = np.argsort(temperature)
        for low, high in pairwise(order):
            if temperature[high] > LARGEST_TEMPERATURE_STEP * temperature[low]:
                row = int(self.table.row[low])
                raise self.error(
                    f"found {temperature[high]:g} K, while the next lower one is {temperature[low]:g} K (row "
                    f"{row}); millikelvins and kelvins seem to be mixed: correct one of them",
                    high,
                    "temperature_K",
                )
        for name in (f"{_RHO}_error", f"{_SIGMA}_error", "temperature_error_K"):
            least = np.zeros(len(self.table)) if name not in self.numbers else self.numbers[name]
            bad = (least < 0) | ((least == 0) & (name != "temperature_error_K") & (name in self.numbers))
            for index in np.flatnonzero(bad & ~self.excluded):
                raise self.error(f"found {least[index]:g}; standard errors must be above zero", index, name)


def _rounded(*numbers: float) -> tuple[str, ...]:
    """Numbers as texts, so that equal ones are equal and NaN equals NaN."""
    return tuple(f"{number:.6g}" for number in numbers)


def _texts(table: Table, name: str) -> NDArray[np.str_]:
    if name in table.texts:
        return table.texts[name]
    return np.array(
        ["" if np.isnan(value) else f"{value:.12g}" for value in table.values[name]], dtype=np.str_
    )


def _numbers(table: Table, name: str, excluded: NDArray[np.bool_]) -> FloatArray:
    """Column of numbers; those of excluded rows may be missing, and some columns may be empty."""
    dimension, unit = _SORTS[name]
    if name in table.texts and all(text.strip() == "" for text in table.texts[name]):
        return np.full(len(table), np.nan)
    if name not in table.values:
        return take(table, ColumnRule(name), dimension, unit)
    gaps = np.isnan(table.values[name])
    other = {_RHO: _SIGMA, _SIGMA: _RHO}.get(name.removesuffix("_error"), "")
    optional = name in ("field_T", "total_field_T", "drive_current_A", "rho_xy_ohm") or "_background" in name
    optional = optional or other in table.columns
    if not gaps.any() or not (optional or bool(np.all(excluded[gaps]))):
        return take(table, ColumnRule(name), dimension, unit)
    filled = dict(table.values) | {name: np.where(gaps, 0.0, table.values[name])}
    whole = Table(
        table.source, table.columns, table.units, table.headings, filled, table.row, table.block, table.texts
    )
    return np.where(gaps, np.nan, take(whole, ColumnRule(name), dimension, unit))


def _fillings(table: Table, texts: NDArray[np.str_]) -> tuple[Fraction, ...]:
    found = []
    for text, row in zip(texts, table.row, strict=True):
        try:
            filling = parse_filling(str(text))
        except FillingError as problem:
            raise FileError(str(problem), file=table.source, row=int(row), column="filling") from problem
        if filling == 0:
            raise FileError(
                "filling 0 has no Hall plateau and cannot be fitted",
                file=table.source,
                row=int(row),
                column="filling",
            )
        found.append(filling)
    return tuple(found)


def _refuse_duplicates(rows: _Rows) -> None:
    """Refuse two rows that are the same reading."""
    seen: dict[tuple[Any, ...], int] = {}
    for index in np.flatnonzero(~rows.excluded):
        temperature = f"{rows.number('temperature_K', index):.9g}"
        key = (*rows.key(int(index)), temperature, rows.text("direction", int(index)))
        if key in seen:
            first = int(rows.table.row[seen[key]])
            raise rows.error(
                f"the same filling, field and temperature ({rows.filling[index]}, {temperature} K) stand in "
                f"row {first} already; remove one row, or tell them apart by contacts, direction or "
                "drive_current_A",
                int(index),
                "temperature_K",
            )
        seen[key] = int(index)


def _one_series(rows: _Rows, mine: NDArray[np.bool_], settings: SeriesSettings) -> TemperatureSeries:
    """Series of the rows that belong together."""
    used = np.flatnonzero(mine & ~rows.excluded)
    first = int(np.flatnonzero(mine)[0])
    filling = rows.filling[first]
    _refuse_few(rows, first, used)
    column = _RHO if _has_readings(rows, _RHO, used) else _SIGMA
    value = rows.numbers[column][used]
    stated = rows.numbers.get(f"{column}_error")
    assumed = stated is None or bool(np.isnan(stated[used]).any())
    error = assumed_error(value) if assumed or stated is None else stated[used]
    error = np.hypot(error, settings.relative_reading_error * value)
    hall = _hall(rows, used, filling)
    quantity = _table_quantity(column, value, hall, settings)
    if quantity == "sigma_xx" and column == _RHO:
        value, error = conductivity(value, hall), conductivity_error(value, hall, error)
    directions = {rows.text("direction", int(index)) for index in used}
    return make_series(
        rows.numbers["temperature_K"][used],
        value,
        error,
        filling=filling,
        temperature_error=_temperature_error(rows, used, settings),
        field_T=rows.number("field_T", first),
        quantity=quantity,
        hall_resistance_ohm=float(np.median(hall)) if hall.size else abs(plateau_resistance(filling)),
        error_source=_error_source(rows, first, assumed),
        **_background(rows, first, column, quantity, hall),
        geometry_known=settings.geometry_known,
        sample=rows.text("sample", first) or settings.sample,
        cooldown=rows.text("cooldown", first) or settings.cooldown,
        contacts=rows.text("contacts", first),
        direction=directions.pop() if len(directions) == 1 else "",
        drive_current_A=rows.number("drive_current_A", first),
        reading=_reading(rows, first),
        flags=(("errors_assumed",) if assumed else ()) + _table_flags(rows, first, settings),
        excluded=_excluded(rows, mine, column),
        **_tilt(rows, first),
    )


def _refuse_few(rows: _Rows, first: int, used: NDArray[np.intp]) -> None:
    """Refuse a series of too few temperatures, often a row that differs in what makes a series."""
    different = np.unique(rows.numbers["temperature_K"][used]).size
    if different < MINIMUM_POINTS:
        field = rows.number("field_T", first)
        place = f" at {field:g} T" if np.isfinite(field) else ""
        row = int(rows.table.row[first])
        raise NotEnoughData(
            f"{rows.table.source}, row {row}: filling {rows.filling[first]}{place} has {different} "
            f"temperature(s) to fit; at least {MINIMUM_POINTS} are needed (rows of one series "
            "share filling, field_T, sample, cooldown, contacts, drive_current_A and total_field_T)"
        )


def _background(
    rows: _Rows, first: int, column: str, quantity: Quantity, hall: FloatArray
) -> dict[str, float]:
    """Flank level of the minimum and its relative slope, as the fit wants them."""
    level = rows.number(f"{column}_background", first)
    slope = rows.number(f"{column}_background_rise", first) / level
    if quantity == "sigma_xx" and column == _RHO and np.isfinite(level):
        level = float(conductivity(level, float(np.median(hall))))
    return {"background": level, "background_slope": slope}


def _has_readings(rows: _Rows, name: str, used: NDArray[np.intp]) -> bool:
    return name in rows.numbers and bool(np.isfinite(rows.numbers[name][used]).all())


def _tilt(rows: _Rows, first: int) -> dict[str, float]:
    total = rows.number("total_field_T", first)
    return {"total_field_T": total} if np.isfinite(total) else {}


def _reading(rows: _Rows, first: int) -> ReadingKind:
    """Kind of reading that the table states."""
    text = rows.text("reading", first)
    return "minimum" if text == "minimum" else "mean" if text == "mean" else "exact"


def _error_source(rows: _Rows, first: int, assumed: bool) -> ErrorSource:
    """Where the table says that its errors come from."""
    if assumed:
        return "assumed"
    text = rows.text("error_source", first)
    known: tuple[ErrorSource, ...] = ("stated", "trace", "assumed")
    for source in known:
        if text in (source, ""):
            return source
    raise rows.error(f"found {text!r}; allowed are {', '.join(known)}", first, "error_source")


def _table_flags(rows: _Rows, first: int, settings: SeriesSettings) -> tuple[str, ...]:
    """Flags of the table; that of missing temperature errors goes where the study gives them."""
    flags = (flag for flag in rows.text("flags", first).split(";") if flag)
    given = settings.temperature_relative_error is not None
    return tuple(flag for flag in flags if not (given and flag == NO_TEMPERATURE_ERROR))


def _hall(rows: _Rows, used: NDArray[np.intp], filling: Fraction) -> FloatArray:
    """Hall resistance of each reading, measured or h / (nu e^2)."""
    plateau = np.full(used.size, abs(plateau_resistance(filling)))
    measured = rows.numbers.get("rho_xy_ohm")
    return plateau if measured is None else np.where(np.isfinite(measured[used]), measured[used], plateau)


def _table_quantity(
    column: str, value: FloatArray, hall: FloatArray, settings: SeriesSettings
) -> Literal["rho_xx", "sigma_xx"]:
    if column == _SIGMA:
        return "sigma_xx"
    return chosen_quantity(value, hall, settings.quantity)


def _temperature_error(rows: _Rows, used: NDArray[np.intp], settings: SeriesSettings) -> FloatArray | None:
    column = rows.numbers.get("temperature_error_K")
    relative = settings.temperature_relative_error
    if column is None and relative is None:
        return None
    own = np.zeros(used.size) if column is None else column[used]
    recorded = "error_source" in rows.texts and NO_TEMPERATURE_ERROR not in rows.text("flags", used[0])
    if recorded and column is not None:
        return own
    return np.hypot(own, (relative or 0.0) * rows.numbers["temperature_K"][used])


def _excluded(rows: _Rows, mine: NDArray[np.bool_], column: str) -> tuple[ExcludedPoint, ...]:
    return tuple(
        ExcludedPoint(
            rows.number("temperature_K", int(index)),
            rows.number(column, int(index)),
            rows.number(f"{column}_error", int(index)),
            rows.text("reason", int(index)) or "excluded in the file",
        )
        for index in np.flatnonzero(mine & rows.excluded)
    )


def series_to_columns(series: Sequence[TemperatureSeries]) -> dict[str, list[Any]]:
    """Columns of a table of minima, such as `series_from_table` reads.

    Parameters
    ----------
    series : sequence of TemperatureSeries
        In the order of the rows.

    Returns
    -------
    dict of str to list
        Raw numbers; a column of readings for each quantity that occurs, empty texts where a row has none;
        excluded points last in each series, with their reason.
    """
    rows = [row for one in series for row in _series_rows(one)]
    names = [name for name in _COLUMNS if any(name in row for row in rows)]
    return {name: [row.get(name, "") for row in rows] for name in names}


_COLUMNS = (
    "filling", "field_T", "temperature_K", "temperature_error_K",
    _RHO, f"{_RHO}_error", _SIGMA, f"{_SIGMA}_error",
    f"{_RHO}_background", f"{_RHO}_background_rise",
    f"{_SIGMA}_background", f"{_SIGMA}_background_rise", "rho_xy_ohm",
    "sample", "cooldown", "contacts", "direction", "drive_current_A", "total_field_T",
    "reading", "error_source", "flags", "excluded", "reason",
)  # fmt: skip


def _series_rows(one: TemperatureSeries) -> list[dict[str, Any]]:
    """Rows of one series."""
    column = _RHO if one.quantity == "rho_xx" else _SIGMA
    common: dict[str, Any] = {
        "filling": str(one.filling),
        "field_T": _blank(one.field_T),
        "rho_xy_ohm": _blank(one.hall_resistance_ohm),
        f"{column}_background": _blank(one.background),
        f"{column}_background_rise": _blank(one.background * one.background_slope),
        "sample": one.sample,
        "cooldown": one.cooldown,
        "contacts": one.contacts,
        "direction": one.direction,
        "drive_current_A": _blank(one.drive_current_A),
        "total_field_T": _blank(one.total_field_T),
        "reading": one.reading,
        "error_source": one.error_source,
        "flags": ";".join(one.flags),
    }
    used: list[dict[str, Any]] = [
        {
            "temperature_K": float(temperature),
            "temperature_error_K": float(spread),
            column: float(value),
            f"{column}_error": float(error),
            "excluded": "no",
            "reason": "",
        }
        for temperature, spread, value, error in zip(
            one.temperature, one.temperature_error, one.value, one.error, strict=True
        )
    ]
    left_out: list[dict[str, Any]] = [
        {
            "temperature_K": point.temperature,
            "temperature_error_K": 0.0,
            column: _blank(point.value),
            f"{column}_error": _blank(point.error),
            "excluded": "yes",
            "reason": point.reason,
        }
        for point in one.excluded
    ]
    return [common | row for row in (*used, *left_out)]


def _blank(number: float) -> float | str:
    """A number, or an empty text where there is none."""
    return float(number) if np.isfinite(number) else ""
