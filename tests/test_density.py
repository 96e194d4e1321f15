"""Carrier density by several routes, and minima on a sloping background."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest
from scipy.constants import e, h
from trace_world import DENSITY, VON_KLITZING, measured, settings, table

from gapfit.calibration import DensityEstimate
from gapfit.columns import ColumnRule
from gapfit.density import estimate_density
from gapfit.dips import find_dips
from gapfit.errors import InputError
from gapfit.hall import density_from_filling, plateau_resistance
from gapfit.loading import load_sweeps
from gapfit.smoothing import smooth_curve
from gapfit.symmetry import symmetrise
from gapfit.traces import GateStart

TEMPERATURES = (0.1, 0.2, 0.35, 0.6)


def test_published_plateau():
    """nu = 2 at 3.2320 T for 1.563e15 m^-2, and R_K / 2 = 12906.40 ohm (CODATA; density of a student lab)."""
    assert density_from_filling(2, 3.2320) == pytest.approx(1.563e15, rel=1e-4)
    assert plateau_resistance(2) == pytest.approx(12906.40, abs=0.01)


def family_of(sweep, temperatures=TEMPERATURES, **changes):
    tables = [sweep(temperature, seed) for seed, temperature in enumerate(temperatures)]
    return symmetrise(load_sweeps(tables, settings(**changes)))


@pytest.fixture(scope="module")
def hall_bar():
    field = np.linspace(-14, 14, 4001)
    return family_of(
        lambda kelvin, seed: measured(field, kelvin, seed, noise=1.0, leak=0.002, name=f"{kelvin}.csv")
    )


def test_density_by_all_routes(hall_bar):
    found = estimate_density(hall_bar, stated=1.15e15)
    routes = {route.name: route for route in found.routes}
    assert set(routes) == {"stated", "Hall slope", "plateau centres", "minima"}
    assert found.density_per_m2 == pytest.approx(DENSITY, rel=1e-3)
    assert abs(found.density_per_m2 - DENSITY) < 3 * found.error_per_m2
    assert routes["Hall slope"].value == pytest.approx(DENSITY, rel=3e-3)
    assert routes["plateau centres"].value == pytest.approx(DENSITY, rel=1e-2)
    assert found.spread < 0.01
    assert "-2.6" in found.notices[0]


def test_density_without_hall_signal_starts_from_the_stated_one():
    field = np.linspace(0.2, 14, 3001)
    family = family_of(lambda kelvin, seed: measured(field, kelvin, seed, name=f"{kelvin}.csv"), rho_xy=None)
    found = estimate_density(family, stated=1.03 * DENSITY)
    assert found.density_per_m2 == pytest.approx(DENSITY, rel=1e-3)
    with pytest.raises(InputError, match="density_cm2"):
        estimate_density(family)


def test_density_of_a_current_that_is_off():
    """A gain of 3 % in both channels moves the Hall slope, not the minima."""
    field = np.linspace(-14, 14, 4001)
    family = family_of(
        lambda kelvin, seed: measured(field, kelvin, seed, name=f"{kelvin}.csv"),
        rho_xy=ColumnRule("Rxy", "ohm", scale=1.03),
        rho_xx=ColumnRule("Rxx", "ohm", scale=1.03),
    )
    found = estimate_density(family)
    assert found.density_per_m2 == pytest.approx(DENSITY, rel=1e-3)
    assert any("differ by" in notice for notice in found.notices)


def test_a_minimum_on_a_slope_is_put_back():
    """rho = exp(slope nu) (1 - a exp(-nu^2 / 2 w^2)): the lowest point is off, the centre is not."""
    place = np.linspace(0.3, 0.5, 2001)
    width, centre = 0.01, 0.4
    trace = 500 * np.exp(20 * (place - centre)) * (1 - 0.6 * np.exp(-0.5 * ((place - centre) / width) ** 2))
    curve = smooth_curve(place, trace, np.zeros(place.size, dtype=int), 1e-4)
    dip = min(find_dips(curve, False), key=lambda one: abs(one.filling - centre))
    # exact displacement of the lowest point for small slopes: -slope w^2 (1 - a) / a = -0.00133
    assert dip.filling - centre == pytest.approx(-20 * width**2 * 0.4 / 0.6, rel=0.15)
    assert abs(dip.centre - centre) < 0.35 * abs(dip.filling - centre)
    assert abs(dip.centre - centre) < 2 * dip.centre_error


def test_noise_makes_no_dips():
    rng = np.random.default_rng(5)
    place = np.linspace(0.3, 0.5, 3000)
    curve = smooth_curve(place, 300 + rng.standard_normal(3000), np.zeros(3000, dtype=int), 1e-5)
    assert find_dips(curve, False, significance=8.0, share=0.0) == []


def gate_table(temperature, field_T, seed, per_volt, neutral, name):
    """A graphene-like gate sweep: dips and plateaus at known fillings of either sign."""
    rng = np.random.default_rng(seed)
    gate = np.linspace(-1.0, 1.0, 1601)
    filling = per_volt * (gate - neutral) * h / (e * field_T)
    free, hall = np.ones_like(gate), 1 / (filling + 0.01 / np.where(filling == 0, 1e-9, filling))
    for place, width in {1: 0.08, 2: 0.15, 2 / 3: 0.03, 1 / 3: 0.025}.items():
        for sign in (-1, 1):
            strength = 1 / (1 + temperature / 8)
            dip = strength * np.exp(-0.5 * ((filling - sign * place) / width) ** 2)
            free *= 1 - dip
            hall += (sign / place - hall) * dip
    noise = 2 * rng.standard_normal((2, gate.size))
    return table(
        {
            "V": gate,
            "B": np.full(gate.size, field_T),
            "T": np.full(gate.size, temperature),
            "Rxx": 2000 * free + noise[0],
            "Rxy": VON_KLITZING * hall + noise[1],
        },
        name,
    )


@pytest.mark.parametrize(
    ("start", "hall"),
    [
        (GateStart(), True),
        (GateStart(7.1e15, None), True),
        (GateStart(7.05e15, 0.05), False),
    ],
)
def test_gate_calibration(start, hall):
    per_volt, neutral = 7.0e15, 0.04
    tables = [
        gate_table(temperature, field, seed, per_volt, neutral, f"{field}_{temperature}.csv")
        for field in (8.0, 12.0)
        for seed, temperature in enumerate((1.0, 2.0, 4.0))
    ]
    rules = settings(
        sweep="gate",
        gate=ColumnRule("V", "V"),
        gate_start=start,
        rho_xy=ColumnRule("Rxy", "ohm") if hall else None,
    )
    found = estimate_density(symmetrise(load_sweeps(tables, rules)))
    assert found.slope == pytest.approx(per_volt, rel=2e-3)
    assert found.neutrality == pytest.approx(neutral, abs=1e-3)
    assert Fraction(-1, 3) in {anchor.filling for anchor in found.anchors}


def test_gate_without_any_start_is_refused():
    tables = [gate_table(1.0, 8.0, 0, 7e15, 0.04, "a.csv")]
    rules = settings(sweep="gate", gate=ColumnRule("V", "V"), rho_xy=None)
    with pytest.raises(InputError, match="capacitance_F_per_m2"):
        estimate_density(symmetrise(load_sweeps(tables, rules)))


def test_recorded_density_is_rescaled():
    def record(temperature, seed):
        data = gate_table(temperature, 10.0, seed, 7e15, 0.0, f"{temperature}.csv")
        columns = dict(data.values)
        columns["n"] = 1.01 * 7e15 * columns.pop("V")
        return table(columns, f"{temperature}.csv")

    rules = settings(sweep="density", density=ColumnRule("n", "m^-2"))
    family = symmetrise(load_sweeps([record(t, s) for s, t in enumerate((1.0, 2.0, 4.0))], rules))
    assert estimate_density(family).slope == pytest.approx(1 / 1.01, rel=2e-3)


def test_filling_error_of_a_field_sweep_is_relative():
    estimate = DensityEstimate("field", 1e15, 0.0, ((2e12) ** 2, 0.0, 0.0))
    assert estimate.filling_error(1 / 3, 12.4) == pytest.approx(2e-3 / 3)


def test_filling_error_of_a_gate_sweep_by_simulation():
    rng = np.random.default_rng(6)
    covariance = np.array([[4e24, 1e24], [1e24, 9e24]])
    draws = rng.multivariate_normal([-1e14, 7e15], covariance, size=200_000)
    estimate = DensityEstimate("gate", -1e14, 7e15, (4e24, 1e24, 9e24))
    volts = (density_from_filling(2, 9.0) + 1e14) / 7e15
    spread = np.std(draws[:, 0] + draws[:, 1] * volts) * h / (e * 9.0)
    assert estimate.filling_error(2, 9.0) == pytest.approx(spread, rel=0.01)
