"""The shipped demo sweeps: density, fillings and readings against the truth they were made from."""

from __future__ import annotations

import json
from dataclasses import fields
from fractions import Fraction
from pathlib import Path

import numpy as np
import pytest
from scipy.constants import e

from gapfit.columns import ColumnRule
from gapfit.density import estimate_density
from gapfit.fillings import find_fillings
from gapfit.landscape import StateTruth, temperature_curve
from gapfit.loading import load_sweeps
from gapfit.minima import read_minima
from gapfit.symmetry import symmetrise
from gapfit.tabular import read_table
from gapfit.traces import FromName, GateStart, Geometry, TraceSettings

DEMOS = Path(__file__).parents[1] / "datasets_synthetic"

RULES = {
    "harebell-3": TraceSettings(
        "field", ColumnRule("T_mK", "mK"), ColumnRule("Vxx_X"), ColumnRule("B"), rho_xy=ColumnRule("Vxy_X"),
        current_A=1e-8, geometry=Geometry("hall-bar", 400, 100),
    ),
    "harebell-4": TraceSettings(
        "field", ColumnRule("Bath"), ColumnRule("Uxx_X"), ColumnRule("Magnet"), rho_xy=ColumnRule("Uxy_X"),
        current_A=1e-8, geometry=Geometry("hall-bar", 400, 100),
    ),
    "campion-1": TraceSettings(
        "gate", FromName("T(?P<value>[0-9p.]+)K", "K"), ColumnRule("U_xx"), ColumnRule("Field"),
        gate=ColumnRule("U_gate"), rho_xy=ColumnRule("U_xy"), current_A=2e-8,
        geometry=Geometry("hall-bar", 200, 100), gate_start=GateStart(1.121e-3 / e),
    ),
}  # fmt: skip


@pytest.fixture(scope="module", params=list(RULES))
def demo(request):
    folder = DEMOS / request.param
    tables = [read_table(path) for path in sorted((folder / "sweeps").iterdir())]
    family = symmetrise(load_sweeps(tables, RULES[request.param]))
    truth = json.loads((folder / "truth.json").read_text(encoding="utf-8"))
    return family, estimate_density(family), truth


def test_density_to_a_thousandth(demo):
    _, density, truth = demo
    if density.kind == "field":
        assert density.density_per_m2 == pytest.approx(truth["density_per_m2"], rel=1e-3)
    else:
        assert density.slope == pytest.approx(truth["capacitance_F_per_m2"] / e, rel=1e-3)
        assert density.neutrality == pytest.approx(truth["neutrality_V"], abs=1e-3)


def test_fillings_of_the_study_are_found_without_being_asked_for(demo):
    family, density, truth = demo
    wanted = {Fraction(state["filling"]) for state in truth["states"] if state["looked_for"]}
    assert wanted <= set(find_fillings(family, density, max_denominator=11).fillings)


def curve(record, temperature):
    values = {field.name: record[field.name] for field in fields(StateTruth) if field.name in record}
    values["filling"] = Fraction(record["filling"])
    if values["background_ohm"] is None:
        values["background_ohm"] = float("inf")
    return temperature_curve(temperature, StateTruth(**values))


def test_readings_are_the_true_curve_within_errors(demo):
    """Errors of trace, gain and thermometer together; the constant offsets of the line are taken off."""
    family, density, truth = demo
    states = [state for state in truth["states"] if state["looked_for"]]
    line = truth["instrument"]
    found = read_minima(family, density, sorted({Fraction(state["filling"]) for state in states}))
    pulls = []
    for series in found.series:
        record = next(
            state
            for state in states
            if Fraction(state["filling"]) == series.filling
            and abs(state["field_T"] / series.field_T - 1) < 0.02
        )
        true = curve(record, series.temperature)
        thermometer = np.hypot(line["temperature_scale"], line["temperature_spread"])
        shift = curve(record, series.temperature * (1 + thermometer)) - true
        offset = line["offset_V"] / line["current_A"]
        if "one_field_direction" in series.flags:
            offset += line["hall_into_xx"] * series.hall_resistance_ohm * np.sign(float(series.filling))
        true = true + offset / line["aspect"]
        error = np.sqrt(series.error**2 + shift**2 + (line["gain_spread"] * true) ** 2)
        assert series.quantity == "rho_xx"
        pulls.append((series.value - true) / error)
    assert np.sqrt(np.mean(np.concatenate(pulls) ** 2)) < 1.6
    assert len(pulls) == len(states)
