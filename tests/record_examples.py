"""Small fits that the tests of tables, files and report share. All data are synthetic."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction
from functools import cache

import numpy as np
import pandas as pd

from gapfit.digest import TableContext
from gapfit.fit import FitSettings, GapFit, fit_temperature_series
from gapfit.mechanisms import parse_combination
from gapfit.series import ExcludedPoint, TemperatureSeries, make_series
from gapfit.tables import gap_table

TEMPERATURE = np.array([0.1, 0.15, 0.22, 0.31, 0.42, 0.55, 0.7, 0.86, 1.04, 1.25, 1.5, 1.75, 2.0])
COMBINATIONS = ("activation", "activation + es", "activation + leak", "es", "constant")
SETTINGS = FitSettings(
    engine="fast",
    combinations=tuple(map(parse_combination, COMBINATIONS)),
    thermometer_scale_error=0.01,
    seed=7,
)
CONTEXT = TableContext(permittivity=12.9)


def _series(curve: np.ndarray, filling: str, seed: int, **record: object) -> TemperatureSeries:
    error = 0.3 * record.pop("error_scale", 1.0) + 0.01 * curve
    noise = np.random.default_rng(seed).standard_normal(curve.size)
    return make_series(
        TEMPERATURE, curve + error * noise, error, filling=Fraction(filling), temperature_error=0.0, **record
    )


@cache
def activated() -> GapFit:
    """Activation alone, gap 6 K, 1/3 at 12.9 T."""
    series = _series(
        1e4 * np.exp(-3 / TEMPERATURE), "1/3", 1, field_T=12.9, sample="bellflower-9", cooldown="first"
    )
    gone = ExcludedPoint(2.5, 1234.5, 2.0, "sweep ends before the filling")
    return fit_temperature_series(replace(series, excluded=(gone,)), SETTINGS)


@cache
def hopping_only() -> GapFit:
    """Efros-Shklovskii hopping alone, 2/5 at 10.75 T."""
    curve = 1e4 / TEMPERATURE * np.exp(-np.sqrt(12 / TEMPERATURE))
    series = _series(curve, "2/5", 2, field_T=10.75, sample="bellflower-9", cooldown="first")
    return fit_temperature_series(series, SETTINGS)


@cache
def conductivity() -> GapFit:
    """Activation in sigma_xx, gap 4 K, 2/3 at 6.45 T, prefactor 0.5 (e/q)^2/h."""
    curve = 0.5 * 3.874045865e-5 / 9 * np.exp(-2 / TEMPERATURE)
    series = _series(
        curve,
        "2/3",
        3,
        field_T=6.45,
        sample="bellflower-9",
        cooldown="first",
        quantity="sigma_xx",
        error_scale=1e-10,
    )
    return fit_temperature_series(series, SETTINGS)


def all_fits() -> tuple[GapFit, ...]:
    """The three fits above."""
    return activated(), hopping_only(), conductivity()


@cache
def _table() -> pd.DataFrame:
    return gap_table(all_fits(), CONTEXT)


def table() -> pd.DataFrame:
    """A fresh copy of the table of the three fits."""
    return _table().copy()
