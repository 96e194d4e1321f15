"""From a study to what was measured: sweeps, density, minima, temperature series, and how to fit them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np

from gapfit.calibration import DensityEstimate
from gapfit.density import estimate_density
from gapfit.errors import InputError, NotEnoughData
from gapfit.fillings import find_fillings
from gapfit.fit import FitSettings
from gapfit.gather import Minimum, ReadingSettings
from gapfit.hall import filling_label
from gapfit.loading import load_sweeps
from gapfit.mechanisms import parse_combination
from gapfit.minima import read_minima
from gapfit.readoff import SERIES_TEXT_COLUMNS, SeriesSettings, series_from_table
from gapfit.series import MINIMUM_POINTS, TemperatureSeries
from gapfit.study import Study, trace_settings
from gapfit.symmetry import symmetrise
from gapfit.tabular import Table, read_table
from gapfit.traces import Sweep, TraceFamily

__all__ = ["Measurement", "fit_settings", "measure", "reading_settings"]

READING_ERROR = 0.003
"""Relative stability of gain and drift of a lock-in reading, which a trace cannot show (own choice)."""

LEAST_TEMPERATURE_RATIO = 1.05
"""Sweeps whose temperatures all agree to this factor are at one temperature (own choice)."""


@dataclass(frozen=True)
class Measurement:
    """What the files of a study say.

    Attributes
    ----------
    series : tuple of TemperatureSeries
        One per filling (and field, contacts, current).
    family : TraceFamily or None
        Symmetrised sweeps; None for minima already read off.
    density : DensityEstimate or None
    minima : tuple of Minimum
        Every reading on every sweep.
    notices : tuple of str
        What the user must know.
    """

    series: tuple[TemperatureSeries, ...]
    family: TraceFamily | None = None
    density: DensityEstimate | None = None
    minima: tuple[Minimum, ...] = ()
    notices: tuple[str, ...] = field(default=())

    @property
    def density_rows(self) -> list[dict[str, Any]]:
        """Densities side by side, as rows of a table."""
        if self.density is None:
            return []
        unit, scale = ("m^-2", 1.0) if self.density.kind == "field" else ("m^-2 per V", 1.0)
        return [
            {
                "route": route.name,
                f"value ({unit})": f"{route.value * scale:.5g}",
                "standard error": f"{route.error * scale:.2g}" if np.isfinite(route.error) else "unknown",
                "places used": route.n_used,
            }
            for route in self.density.routes
        ]


def measure(study: Study) -> Measurement:
    """Read everything that a study names and bring it to temperature series.

    Parameters
    ----------
    study : Study

    Returns
    -------
    Measurement

    Raises
    ------
    FileError, InputError, NotEnoughData
        If a file cannot be used, or nothing can be fitted.
    """
    return _from_table(study) if study.traces is None else _from_sweeps(study)


def _from_table(study: Study) -> Measurement:
    if study.series is None:
        raise InputError("the study names no data")
    table = read_table(study.series.file, missing="keep", text_columns=_text_columns(study))
    table = _renamed(table, study)
    series = series_from_table(
        table,
        SeriesSettings(
            quantity=study.fit.quantity,
            temperature_relative_error=_temperature_error(study),
            geometry_known=study.geometry.kind != "unknown",
            sample=study.sample.name,
            cooldown=study.sample.cooldown,
        ),
    )
    return Measurement(_wanted(series, study), notices=tuple(table.notices))


def _text_columns(study: Study) -> tuple[str, ...]:
    own = [str(column) for name, column in _column_names(study).items() if name in SERIES_TEXT_COLUMNS]
    return (*SERIES_TEXT_COLUMNS, *own)


def _column_names(study: Study) -> dict[str, Any]:
    """Columns of the user's file by our name, where the study renames them."""
    if study.series is None:
        return {}
    rules = {name: getattr(study.series.columns, name) for name in type(study.series.columns).model_fields}
    return {name: rule.column for name, rule in rules.items() if rule is not None}


def _renamed(table: Table, study: Study) -> Table:
    """The table with its columns under our names, and their scale and offset applied."""
    if study.series is None or not _column_names(study):
        return table
    values, texts = dict(table.values), dict(table.texts)
    for name in _column_names(study):
        rule = getattr(study.series.columns, name)
        found = table.find(rule.column)
        if found in values:
            values[name] = values.pop(found) * rule.scale + rule.offset
        if found in texts:
            texts[name] = texts.pop(found)
    new = {table.find(column): name for name, column in _column_names(study).items()}
    names = tuple(new.get(column, column) for column in table.columns)
    units = tuple(
        getattr(study.series.columns, name).unit or unit if name in new.values() else unit
        for name, unit in zip(names, table.units, strict=True)
    )
    return replace(table, columns=names, headings=names, units=units, values=values, texts=texts)


def _wanted(series: Sequence[TemperatureSeries], study: Study) -> tuple[TemperatureSeries, ...]:
    """The series of the fillings that the study looks for."""
    wanted = study.fillings.look_for
    if wanted == "auto":
        return tuple(series)
    found = tuple(one for one in series if one.filling in wanted)
    missing = [filling_label(filling) for filling in wanted if filling not in {one.filling for one in series}]
    if missing:
        there = ", ".join(dict.fromkeys(filling_label(one.filling) for one in series))
        raise InputError(f"filling {', '.join(missing)} is looked for but not in the file, which has {there}")
    return found


def _temperature_error(study: Study) -> float | None:
    return None if study.thermometry is None else study.thermometry.relative_error


def _from_sweeps(study: Study) -> Measurement:
    if study.traces is None:
        raise InputError("the study names no data")
    tables = [read_table(file, missing="keep") for file in study.traces.files]
    mode = {"auto": "auto", True: "always", False: "never"}[study.traces.symmetrise]
    family = symmetrise(load_sweeps(tables, trace_settings(study)), mode)  # type: ignore[arg-type]
    family = _one_direction(family, study.traces.direction)
    _check_temperatures(family, study)
    density = estimate_density(family, study.sample.density_per_m2)
    look_for = None if study.fillings.look_for == "auto" else study.fillings.look_for
    found = find_fillings(family, density, study.fillings.max_denominator, look_for)
    minima = read_minima(family, density, found.fillings, reading_settings(study))
    notices = [notice for table in tables for notice in table.notices]
    notices += [*family.notices, *density.notices, *found.notices, *minima.notices]
    return Measurement(minima.series, family, density, minima.minima, tuple(dict.fromkeys(notices)))


def _check_temperatures(family: TraceFamily, study: Study) -> None:
    """Refuse too few temperatures before anything is read off."""
    different = np.unique(family.temperatures)
    if different.size < MINIMUM_POINTS or different[-1] < LEAST_TEMPERATURE_RATIO * different[0]:
        found = " and ".join(f"{kelvin:.4g}" for kelvin in different[[0, -1]][: different.size])
        raise NotEnoughData(
            f"{study.path}: the sweeps of {len(study.files)} file(s) are at {found} K only; a gap needs at "
            f"least {MINIMUM_POINTS} temperatures: check files and temperature in [traces]"
        )


def _one_direction(family: TraceFamily, direction: str) -> TraceFamily:
    """The sweeps of one direction, where the study wants only one."""
    if direction == "both":
        return family
    kept: tuple[Sweep, ...] = tuple(sweep for sweep in family.sweeps if sweep.direction == direction)
    if not kept:
        raise InputError(f"direction = {direction!r} leaves no sweep; there are only sweeps the other way")
    return replace(family, sweeps=kept)


def reading_settings(study: Study) -> ReadingSettings:
    """How minima are read.

    Parameters
    ----------
    study : Study

    Returns
    -------
    ReadingSettings
    """
    return ReadingSettings(
        reading=study.fillings.reading,
        quantity=study.fit.quantity,
        window=study.fillings.reading_window / 2,
        relative_reading_error=READING_ERROR,
        temperature_relative_error=_temperature_error(study),
        sample=study.sample.name,
        cooldown=study.sample.cooldown,
    )


def fit_settings(study: Study, engine: str | None = None, seed: int | None = None) -> FitSettings:
    """How series are fitted.

    Parameters
    ----------
    study : Study
    engine : {"mcmc", "fast"}, optional
        Instead of the study's.
    seed : int, optional
        Instead of the study's.

    Returns
    -------
    FitSettings
    """
    fit, window = study.fit, study.fit.window
    chosen = None if fit.mechanisms == "default" else tuple(map(parse_combination, fit.mechanisms))
    settings = FitSettings(
        engine=engine or fit.engine,
        combinations=chosen,
        window=None if isinstance(window, str) else (window.low_K, window.high_K),
        noise=fit.noise,
        seed=fit.seed if seed is None else seed,
    )
    if study.thermometry is None:
        return settings
    return replace(
        settings,
        saturating=study.thermometry.electron_saturation,
        saturation_exponent=study.thermometry.saturation_exponent,
        thermometer_scale_error=study.thermometry.scale_error,
    )
