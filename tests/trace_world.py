"""An invented world for the tests of sweeps: dips and plateaus of known place, and tables made of them."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from scipy.constants import e, h

from gapfit.columns import ColumnRule, Table
from gapfit.traces import Geometry, TraceSettings

DENSITY = 1.12e15
STATES = {1.0: 0.05, 2.0: 0.1, 2 / 3: 0.03, 1 / 3: 0.02, 2 / 5: 0.012, 3 / 5: 0.016, 4 / 3: 0.04, 3.0: 0.12}
VON_KLITZING = h / e**2


def landscape(field_T, temperature_K=0.1, density=DENSITY, slope=30.0):
    """rho_xx and rho_xy (ohm) by signed field: Gaussian dips in filling, thermally filled in."""
    field = np.maximum(np.abs(field_T), 1e-4)
    filling = density * h / (e * field)
    flank = 20 + slope * field
    hall = field / (density * e)
    free = np.ones_like(field)
    for place, width in STATES.items():
        strength = 1 / (1 + (temperature_K / 0.6) ** 2)
        dip = strength * np.exp(-0.5 * ((filling - place) / width) ** 2)
        free = free * (1 - dip)
        hall = hall + (VON_KLITZING / place - hall) * dip
    return flank * free, np.sign(field_T) * hall


def table(columns, name="sweep.csv", units=None, block=None):
    """A table of given columns (name to numbers)."""
    columns = {key: np.asarray(values, dtype=float) for key, values in columns.items()}
    size = len(next(iter(columns.values())))
    names = tuple(columns)
    return Table(
        Path(name),
        names,
        tuple((units or {}).get(key) for key in names),
        names,
        columns,
        np.arange(size) + 2,
        np.zeros(size, dtype=int) if block is None else np.asarray(block),
    )


def measured(
    field_T, temperature_K, seed=0, noise=0.5, leak=0.0, back=0.0, remanence=0.0, lag=0.0, name="sweep.csv"
):
    """Table of one record: field as recorded, temperature, rho_xx and rho_xy in ohm with their leaks."""
    rng = np.random.default_rng(seed)
    true = field_T + remanence + lag * np.sign(np.gradient(field_T))
    along, across = landscape(true, temperature_K)
    temperature = np.broadcast_to(temperature_K, field_T.shape)
    return table(
        {
            "B": field_T,
            "T": temperature,
            "Rxx": along + leak * across + noise * rng.standard_normal(field_T.size),
            "Rxy": across + back * along + noise * rng.standard_normal(field_T.size),
        },
        name,
    )


def settings(**changes):
    """Settings for the tables of `measured`."""
    base = {
        "sweep": "field",
        "temperature": ColumnRule("T", "K"),
        "rho_xx": ColumnRule("Rxx", "ohm"),
        "rho_xy": ColumnRule("Rxy", "ohm"),
        "field": ColumnRule("B", "T"),
        "geometry": Geometry("resistivity"),
    }
    return TraceSettings(**(base | changes))
