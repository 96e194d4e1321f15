"""Readings of minima: values, standard errors, names of fillings, and the series made of them."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
from scipy.constants import e, h
from scipy.signal import lfilter
from trace_world import DENSITY, VON_KLITZING, landscape, measured, settings, table

from gapfit.calibration import DensityEstimate
from gapfit.columns import ColumnRule
from gapfit.density import estimate_density
from gapfit.errors import InputError, NotEnoughData
from gapfit.fillings import find_fillings
from gapfit.gather import chosen_quantity
from gapfit.hall import field_at_filling
from gapfit.loading import load_sweeps
from gapfit.minima import ReadingSettings, read_minima, readings_across
from gapfit.smoothing import Noise, fit_noise, residual_covariance, variance_factor
from gapfit.symmetry import symmetrise
from gapfit.traces import Geometry

TEMPERATURES = (0.1, 0.16, 0.25, 0.4, 0.6, 0.9)
KNOWN = DensityEstimate("field", DENSITY, 0.0)
THIRD = Fraction(1, 3)


def bar(temperatures=TEMPERATURES, field=None, density=None, **changes):
    """Symmetrised family of the test world."""
    field = np.linspace(-14, 14, 4001) if field is None else field
    tables = [
        measured(field, kelvin, seed, name=f"{kelvin}.csv", **changes)
        for seed, kelvin in enumerate(temperatures)
    ]
    return symmetrise(load_sweeps(tables, settings()))


@pytest.fixture(scope="module")
def family():
    return bar(noise=1.0, leak=0.002)


def truth(filling, temperature):
    return float(landscape(np.array([field_at_filling(filling, DENSITY)]), temperature)[0][0])


# --- noise ----------------------------------------------------------------------------------------------


def ar1(size, persistence, rng):
    """Noise of unit variance behind one low-pass filter."""
    drive = np.sqrt(1 - persistence**2) * rng.standard_normal(size + 200)
    return lfilter([1.0], [1.0, -persistence], drive)[200:]


def test_variance_of_a_weighted_sum_of_correlated_noise():
    noise = Noise(0.7, 0.8)
    weights = np.random.default_rng(1).standard_normal((3, 40))
    distance = np.abs(np.subtract.outer(np.arange(40), np.arange(40)))
    full = 0.7 * 0.8**distance + 0.3 * np.eye(40)
    assert variance_factor(weights, noise) == pytest.approx(np.diag(weights @ full @ weights.T))


@pytest.mark.parametrize("persistence", [0.0, 0.5, 0.8])
def test_correlation_from_residuals_of_short_windows(persistence):
    rng = np.random.default_rng(2)
    basis, _ = np.linalg.qr(np.vander(np.linspace(-1, 1, 80), 6))
    pieces = [ar1(80, persistence, rng) for _ in range(200)]
    covariance = np.mean([residual_covariance(p - basis @ (basis.T @ p)) for p in pieces], axis=0)
    found = fit_noise(covariance, 80, 5, 200)
    assert found.independent_every == pytest.approx((1 + persistence) / (1 - persistence), rel=0.15)


def smooth_family(seed, persistence, temperatures, amplitude=2.0):
    """Field sweeps over a smooth dip at 1/3 with correlated noise, as a family without file columns."""
    rng = np.random.default_rng(seed)
    field = np.linspace(12.0, 14.5, 900)
    filling = DENSITY * h / (e * field)
    tables = []
    for number, kelvin in enumerate(temperatures):
        clean = 400 * (1 - 0.9 * np.exp(-0.5 * ((filling - 1 / 3) / 0.012) ** 2))
        along = clean + amplitude * ar1(field.size, persistence, rng)
        columns = {
            "B": field,
            "T": np.full(field.size, kelvin),
            "Rxx": along,
            "Rxy": 3 * VON_KLITZING + 0 * field,
        }
        tables.append(table(columns, f"{number}.csv"))
    return symmetrise(load_sweeps(tables, settings()))


@pytest.mark.parametrize("persistence", [0.0, 0.85])
def test_standard_errors_are_calibrated(persistence):
    """The scatter of 208 readings agrees with their stated errors; it is known to 5 %, 15 % is allowed."""
    temperatures = 0.1 * 1.2 ** np.arange(16)
    pulls, errors, values = [], [], []
    for seed in range(13):
        read = read_minima(smooth_family(seed, persistence, temperatures), KNOWN, [THIRD])
        values += [one.exact for one in read.minima]
        errors += [one.exact_error for one in read.minima]
        pulls += [(one.mean - one.exact) for one in read.minima]
    assert len(values) == 208
    stated = np.sqrt(np.mean(np.square(errors)))
    assert np.std(values) == pytest.approx(stated, rel=0.15)
    # the mean of the readings is the true value to its own error and a small share of curvature
    assert np.mean(values) == pytest.approx(40.0, abs=4 * stated / np.sqrt(208) + 0.15)


def test_error_of_the_density_moves_readings_on_a_slope():
    """rho rises as 3e4 nu through the reading: the error is that times sigma_nu."""
    field = np.linspace(12.0, 14.5, 900)
    filling = DENSITY * h / (e * field)
    tables = [
        table(
            {"B": field, "T": np.full(900, kelvin), "Rxx": 3e4 * (filling - 0.32), "Rxy": 5e3 * field},
            f"{kelvin}",
        )
        for kelvin in (0.1, 0.2, 0.3)
    ]
    vague = replace(KNOWN, covariance=((3e-3 * DENSITY) ** 2, 0.0, 0.0))
    series = read_minima(symmetrise(load_sweeps(tables, settings())), vague, [THIRD]).series[0]
    assert series.error == pytest.approx(3e4 * 1e-3, rel=0.01)
    assert series.value == pytest.approx(400.0, rel=1e-3)


def test_quantised_readings_keep_an_error():
    """A record that does not move by a digit is not known better than the digit."""
    field = np.linspace(12.0, 14.5, 900)
    tables = [
        table(
            {
                "B": field,
                "T": np.full(900, k),
                "Rxx": np.round((field - 12) ** 2 / 5) * 5,
                "Rxy": 5e3 * field,
            },
            f"{k}",
        )
        for k in (0.1, 0.2, 0.3)
    ]
    series = read_minima(symmetrise(load_sweeps(tables, settings())), KNOWN, [THIRD]).series[0]
    assert np.all(series.error >= 5 / np.sqrt(12))


# --- readings -------------------------------------------------------------------------------------------


def test_readings_agree_with_the_truth(family):
    density = estimate_density(family)
    fillings = [Fraction(text) for text in ("1/3", "2/5", "3/5", "2/3", "1")]
    found = read_minima(family, density, fillings, ReadingSettings(sample="s", cooldown="first"))
    assert [series.filling for series in found.series] == fillings
    pulls = np.concatenate(
        [
            (series.value - [truth(series.filling, t) for t in series.temperature]) / series.error
            for series in found.series
        ]
    )
    assert np.sqrt(np.mean(pulls**2)) < 1.5
    assert np.abs(pulls).max() < 4.5
    first = found.series[0]
    assert (first.sample, first.cooldown, first.quantity) == ("s", "first", "rho_xx")
    assert first.field_T == pytest.approx(field_at_filling(THIRD, DENSITY), rel=1e-3)
    assert "no_temperature_error" in first.flags
    assert not np.any(first.temperature_error)


def test_negative_readings_are_kept():
    found = read_minima(bar(noise=30.0), KNOWN, [THIRD, Fraction(2, 3)])
    low = [one.exact for one in found.minima]
    shifted = [replace(sweep, signal=sweep.signal - 30.0) for sweep in bar(noise=1.0).sweeps]
    series = read_minima(replace(bar(noise=1.0), sweeps=tuple(shifted)), KNOWN, [THIRD]).series[0]
    assert np.isfinite(low).all()
    assert series.value.min() < -15
    assert series.n_point == len(TEMPERATURES)


def test_all_three_readings_and_the_width(family):
    one = Fraction(1)
    found = read_minima(family, KNOWN, [one])
    cold = found.minima[0]
    assert cold.minimum <= cold.exact + 3 * cold.exact_error
    assert abs(cold.minimum_filling - 1) < 0.003
    assert cold.mean == pytest.approx(cold.exact, abs=5)
    # Gaussian dip of width 0.05 in filling: 0.05 sqrt(2 ln 2), less since one shoulder is lower
    assert cold.half_width == pytest.approx(0.05 * np.sqrt(2 * np.log(2)), rel=0.12)
    # the sweep ends before the upper side of the minimum at 1/3
    assert np.isnan(read_minima(family, KNOWN, [THIRD]).minima[0].half_width)
    by_minimum = read_minima(family, KNOWN, [one], ReadingSettings(reading="minimum")).series[0]
    assert by_minimum.reading == "minimum"
    assert by_minimum.value[0] == pytest.approx(cold.minimum)


def test_a_density_that_is_off_makes_the_reading_matter(family):
    off = replace(KNOWN, offset=1.02 * DENSITY)
    assert "reading_matters" in read_minima(family, off, [Fraction(2, 5)]).series[0].flags
    assert "reading_matters" not in read_minima(family, KNOWN, [Fraction(2, 5)]).series[0].flags


def test_temperature_counts_where_the_minimum_is_read():
    """The bath drifts from 0.9 to 1.1 times its mean over the sweep; 1/3 is read near the end."""
    field = np.linspace(0.5, 14.4, 3000)
    tables = []
    for seed, kelvin in enumerate((0.2, 0.3, 0.4)):
        drift = kelvin * (0.9 + 0.2 * (field - 0.5) / 13.9)
        along, across = landscape(field, drift)
        rng = np.random.default_rng(seed)
        columns = {"B": field, "T": drift, "Rxx": along + rng.standard_normal(3000), "Rxy": across}
        tables.append(table(columns, f"{kelvin}.csv"))
    rules = ReadingSettings(temperature_relative_error=0.01)
    series = read_minima(symmetrise(load_sweeps(tables, settings())), KNOWN, [THIRD], rules).series[0]
    place = (field_at_filling(THIRD, DENSITY) - 0.5) / 13.9
    assert series.temperature == pytest.approx(np.array([0.2, 0.3, 0.4]) * (0.9 + 0.2 * place), rel=1e-3)
    assert np.all(series.temperature_error >= 0.01 * series.temperature)
    assert series.temperature_error == pytest.approx(0.01 * series.temperature, rel=0.3)
    assert "no_temperature_error" not in series.flags


def test_up_and_down_sweeps_become_one_reading_with_their_scatter():
    up = np.linspace(-14, 14, 4001)
    family = bar(field=np.concatenate([up, up[::-1]]), noise=0.5)
    clean = read_minima(family, KNOWN, [THIRD]).series[0]
    assert clean.n_point == len(TEMPERATURES)
    apart = tuple(
        replace(sweep, signal=sweep.signal + (6.0 if sweep.direction == "up" else -6.0))
        for sweep in family.sweeps
    )
    spread = read_minima(replace(family, sweeps=apart), KNOWN, [THIRD]).series[0]
    assert spread.value == pytest.approx(clean.value, abs=1.0)
    assert spread.error == pytest.approx(6.0, rel=0.2)


def test_one_field_direction_is_flagged():
    family = bar(field=np.linspace(0.2, 14, 2500))
    assert "one_field_direction" in read_minima(family, KNOWN, [THIRD]).series[0].flags


def test_sweeps_that_end_before_a_filling_are_excluded_with_the_reason():
    tables = [
        measured(np.linspace(0.2, 14 if kelvin < 0.5 else 12, 2500), kelvin, name=f"{kelvin}.csv")
        for kelvin in TEMPERATURES
    ]
    family = symmetrise(load_sweeps(tables, settings()))
    series = read_minima(family, KNOWN, [THIRD]).series[0]
    assert series.n_point == 4
    assert [point.reason for point in series.excluded] == ["sweep ends before the filling"] * 2


def test_rows_lost_at_the_filling_are_excluded_with_the_reason():
    field = np.linspace(0.2, 14, 2500)
    lost = field[np.abs(field - field_at_filling(THIRD, DENSITY)) > 0.1]
    tables = [
        measured(lost if kelvin == 0.1 else field, kelvin, name=f"{kelvin}.csv") for kelvin in TEMPERATURES
    ]
    series = read_minima(symmetrise(load_sweeps(tables, settings())), KNOWN, [THIRD]).series[0]
    assert [point.reason for point in series.excluded] == ["rows are missing around the filling"]
    assert series.temperature.min() == pytest.approx(0.16)


def test_edge_of_the_sweep_is_flagged():
    top = field_at_filling(THIRD, DENSITY) + 0.004
    series = read_minima(bar(field=np.linspace(0.2, top, 2500)), KNOWN, [THIRD]).series[0]
    assert "edge_of_sweep" in series.flags


def test_relative_reading_error_is_a_floor(family):
    series = read_minima(family, KNOWN, [THIRD], ReadingSettings(relative_reading_error=0.1)).series[0]
    assert np.all(series.error >= 0.1 * np.abs(series.value))


def test_too_few_temperatures():
    with pytest.raises(NotEnoughData, match="1 different temperature"):
        read_minima(bar(temperatures=(0.1,)), KNOWN, [THIRD])


def test_unknown_settings_are_refused(family):
    with pytest.raises(InputError, match="allowed are exact, minimum, mean"):
        read_minima(family, KNOWN, [THIRD], ReadingSettings(reading="lowest"))


# --- quantity -------------------------------------------------------------------------------------------


def test_quantity_is_chosen_once():
    hall = np.full(3, 1000.0)
    assert chosen_quantity(np.array([1.0, 50.0, 199.0]), hall, "auto") == "rho_xx"
    assert chosen_quantity(np.array([1.0, 50.0, 201.0]), hall, "auto") == "sigma_xx"
    assert chosen_quantity(np.array([1.0, 50.0, 201.0]), hall, "rho_xx") == "rho_xx"


def test_sigma_uses_the_measured_hall_resistivity(family):
    rho = read_minima(family, KNOWN, [Fraction(2, 3)], ReadingSettings(quantity="rho_xx")).series[0]
    sigma = read_minima(family, KNOWN, [Fraction(2, 3)], ReadingSettings(quantity="sigma_xx")).series[0]
    hall = 1.5 * VON_KLITZING
    assert sigma.unit == "S"
    assert sigma.value == pytest.approx(rho.value / (rho.value**2 + hall**2), rel=0.01)
    assert sigma.error == pytest.approx(rho.error / hall**2, rel=0.05)


def test_corbino_series_are_conductivities():
    disc = Geometry("corbino", inner_radius_um=100, outer_radius_um=300)
    field = np.linspace(11, 14.4, 800)
    filling = DENSITY * h / (e * field)
    tables = []
    for kelvin in (0.1, 0.2, 0.3):
        sigma = 1e-6 * (1.01 + kelvin - np.exp(-0.5 * ((filling - 1 / 3) / 0.01) ** 2))
        columns = {"B": field, "T": np.full(800, kelvin), "R": np.log(3) / (2 * np.pi * sigma)}
        tables.append(table(columns, f"{kelvin}.csv"))
    rules = settings(rho_xx=ColumnRule("R", "ohm"), rho_xy=None, geometry=disc)
    series = read_minima(symmetrise(load_sweeps(tables, rules)), KNOWN, [THIRD]).series[0]
    assert series.quantity == "sigma_xx"
    assert series.value == pytest.approx(1e-6 * (0.01 + series.temperature), rel=0.02)


# --- fillings -------------------------------------------------------------------------------------------


def test_fillings_are_found_and_named(family):
    found = find_fillings(family, estimate_density(family), max_denominator=9)
    expected = {Fraction(text) for text in ("1/3", "2/5", "3/5", "2/3", "1", "4/3", "2", "3")}
    assert set(found.fillings) == expected
    few = find_fillings(family, estimate_density(family), max_denominator=3)
    assert set(few.fillings) == {fraction for fraction in expected if fraction.denominator <= 3}
    assert any(abs(place - 0.4) < 0.005 for place in few.unnamed)


def test_fillings_asked_for(family):
    found = find_fillings(family, KNOWN, look_for=["2/3", 1, Fraction(1, 3), "2/3"])
    assert found.fillings == (THIRD, Fraction(2, 3), Fraction(1))
    with pytest.raises(InputError, match=r"1/5 lies outside the sweeps, which run from nu = 0\.33"):
        find_fillings(family, KNOWN, look_for=["1/5"])
    with pytest.raises(InputError, match="no filling factor"):
        find_fillings(family, KNOWN, look_for=["a third"])
    with pytest.raises(InputError, match="empty"):
        find_fillings(family, KNOWN, look_for=[])


def test_nothing_found():
    field = np.linspace(1, 10, 500)
    tables = [
        table({"B": field, "T": np.full(500, k), "Rxx": 100 + field, "Rxy": 5000 * field}, f"{k}")
        for k in (0.1, 0.2, 0.3)
    ]
    with pytest.raises(NotEnoughData, match="look_for"):
        find_fillings(symmetrise(load_sweeps(tables, settings())), KNOWN)


# --- beside the minimum ---------------------------------------------------------------------------------


def test_readings_across_a_minimum(family):
    exact = read_minima(family, KNOWN, [THIRD]).series[0]
    beside = readings_across(family, KNOWN, exact, [-0.002, 0.0, 0.02])
    assert [offset for offset, _ in beside] == [-0.002, 0.0, 0.02]
    assert beside[1][1].value == pytest.approx(exact.value)
    for offset, series in beside:
        assert series.filling == THIRD
        assert "beside_exact_filling" in series.flags
        expected = [truth(1 / 3 + offset, kelvin) for kelvin in series.temperature]
        assert series.value == pytest.approx(expected, rel=0.03, abs=3)


def test_gate_sweeps_make_a_series_per_field_and_current():
    gate = np.linspace(-1, 1, 801)
    density = DensityEstimate("gate", 0.0, 7e15)
    tables = []
    for field in (8.0, 12.0):
        for current in (1e-8, 5e-8):
            for kelvin in (1.0, 2.0, 4.0):
                filling = 7e15 * gate * h / (e * field)
                along = 2000 - (1900 - 100 * kelvin) * np.exp(-0.5 * ((np.abs(filling) - 1) / 0.1) ** 2)
                columns = {"V": gate, "B": np.full(801, field), "T": np.full(801, kelvin)}
                columns |= {"U": along * current, "I": np.full(801, current)}
                tables.append(table(columns, f"{field}_{current}_{kelvin}.csv"))
    rules = settings(
        sweep="gate",
        gate=ColumnRule("V", "V"),
        rho_xx=ColumnRule("U", "V"),
        rho_xy=None,
        current_A=ColumnRule("I", "A"),
    )
    found = read_minima(
        symmetrise(load_sweeps(tables, rules)), density, [Fraction(-1), Fraction(1)],
        ReadingSettings(quantity="rho_xx"),
    )  # fmt: skip
    keys = {(s.filling, s.field_T, s.drive_current_A) for s in found.series}
    assert len(found.series) == len(keys) == 8
    for series in found.series:
        assert series.value == pytest.approx(100 + 100 * series.temperature, rel=0.01)
