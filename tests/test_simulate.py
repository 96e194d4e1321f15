"""The forward model against its limits, and the demo data against their truth."""

from __future__ import annotations

import gzip
import json
import tomllib
from dataclasses import replace
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from scipy.constants import e, h
from scipy.optimize import curve_fit

from gapfit.demo_samples import (
    CAMPION_BACKGROUND,
    CAMPION_FIELDS_T,
    HAREBELL_3,
    HAREBELL_4,
    campion_states,
    harebell_states,
)
from gapfit.errors import InputError
from gapfit.hall import effective_field, field_at_filling, filling_factor
from gapfit.instrument import correlated_noise, field_seen, quantise, temperatures, voltages
from gapfit.landscape import (
    HOPPING_POWERS,
    ROLLOVERS,
    Background,
    StateTruth,
    background,
    electron_temperature,
    hopping,
    ladder_gap,
    shubnikov_de_haas,
    temperature_curve,
    trace,
)
from gapfit.simulate import DEMOS, simulate_demo, simulate_series

SHIPPED = Path(__file__).parents[1] / "datasets_synthetic"
THIRD = StateTruth(Fraction(1, 3), 6.0, 9000.0, background_ohm=1500.0)
QUIET = replace(
    HAREBELL_3.line,
    noise_V=0.0,
    hall_noise_V=0.0,
    relative_noise=0.0,
    gain_spread=0.0,
    offset_V=0.0,
    phase=0.0,
    step_V=1e-15,
    hall_step_V=1e-15,
)


def truth_of(folder: Path) -> dict[str, Any]:
    content: dict[str, Any] = json.loads((folder / "truth.json").read_text())
    return content


def numbers(path: Path) -> np.ndarray:
    """Table of a raw file of any of the dialects, read without gapfit."""
    data = path.read_bytes()
    data = gzip.decompress(data) if path.suffix == ".gz" else data
    text = data.decode("utf-16" if data[:2] == b"\xff\xfe" else "utf-8")
    rows = [line for line in text.splitlines() if line[0] in "-0123456789"]
    if path.suffix == ".txt":
        rows = [row.replace(",", ".").replace(";", ",") for row in rows]
    cells = [row.replace("\t", ",").split(",") for row in rows]
    return np.array([[float(Fraction(c)) if "/" in c else float(c) for c in row] for row in cells])


# --- single states --------------------------------------------------------------------------------------


# Composite-fermion ladder for 1.12e11 cm^-2, m = 0.5 m_e, Gamma = 1.5 K; computed from CODATA, to 1e-5 K.
@pytest.mark.parametrize(
    ("text", "gap_K"),
    [
        ("1/3", 10.94537),
        ("2/5", 4.72269),
        ("3/7", 2.64846),
        ("4/9", 1.61134),
        ("5/11", 0.98907),
        ("2/3", 4.72269),
        ("3/5", 2.64846),
        ("4/7", 1.61134),
        ("5/9", 0.98907),
    ],
)
def test_ladder_of_gaps(text: str, gap_K: float) -> None:
    filling = Fraction(text)
    field_T = field_at_filling(filling, 1.12e15)
    assert ladder_gap(effective_field(filling, field_T), 0.5, 1.5) == pytest.approx(gap_K, abs=2e-5)
    states = {truth.filling: truth for truth in harebell_states(replace(HAREBELL_3, density_per_m2=1.12e15))}
    assert states[filling].gap_K == pytest.approx(gap_K, abs=2e-5)


@pytest.mark.parametrize("rollover", ROLLOVERS)
def test_cold_slope_is_half_the_gap(rollover: str) -> None:
    cold = np.array([0.2, 0.2001])
    slope = np.diff(np.log(temperature_curve(cold, replace(THIRD, rollover=rollover)))) / np.diff(1 / cold)
    assert slope[0] == pytest.approx(-THIRD.gap_K / 2, rel=1e-5)


@pytest.mark.parametrize("rollover", ["exponential", "tanh"])
def test_hot_state_reaches_the_background_from_below(rollover: str) -> None:
    hot = temperature_curve(np.geomspace(0.1, 1e4, 200), replace(THIRD, rollover=rollover))
    assert np.all(np.diff(hot) >= 0)
    assert np.all(hot <= THIRD.background_ohm)
    assert hot[-1] == pytest.approx(THIRD.background_ohm, rel=0.01)


def test_rollover_is_no_power_mean() -> None:
    """No exponent k of 1/rho^k = 1/a^k + 1/b^k serves both a small and a large ratio a/b."""
    ratio = np.array([0.2, 3.0])
    exponents = np.linspace(0.5, 6, 600)[:, None]
    mean = (ratio**-exponents + 1) ** (-1 / exponents)
    for shape in (ROLLOVERS["exponential"], ROLLOVERS["tanh"]):
        worst = np.max(np.abs(mean / shape(ratio) - 1), axis=1)
        assert np.min(worst) > 1e-3


@pytest.mark.parametrize("kind", ["efros-shklovskii", "mott"])
def test_hopping_is_straight_in_its_own_power(kind: str) -> None:
    power = HOPPING_POWERS[kind]
    temperature = np.geomspace(0.05, 2, 7)
    log = np.log(temperature * hopping(temperature, 80.0, 12.0, power))
    slope = np.diff(log) / np.diff(temperature**-power)
    np.testing.assert_allclose(slope, -(12.0**power), rtol=1e-9)


def test_electron_temperature_limits() -> None:
    temperature = np.array([1e-3, 0.03, 3.0])
    hot = electron_temperature(temperature, 0.03)
    assert hot[0] == pytest.approx(0.03, rel=1e-5)
    assert hot[1] == pytest.approx(0.03 * 2**0.25)
    assert hot[2] == pytest.approx(3.0, rel=1e-8)


def test_leak_adds_and_flat_state_is_flat() -> None:
    temperature = np.geomspace(0.1, 2, 5)
    leaking = temperature_curve(temperature, replace(THIRD, leak_ohm=7.0))
    np.testing.assert_allclose(leaking - temperature_curve(temperature, THIRD), 7.0)
    flat = StateTruth(Fraction(4, 7), 0.0, 0.0, leak_ohm=620.0)
    np.testing.assert_array_equal(temperature_curve(temperature, flat), 620.0)
    assert flat.regime == "flat"
    assert replace(THIRD, leak_ohm=7.0).regime == "activated + roll-over + leak"


@pytest.mark.parametrize(
    "wrong", [{"gap_K": -1.0}, {"hopping": "sideways"}, {"rollover": "abrupt"}, {"reach_low": 0.0}]
)
def test_impossible_states_are_refused(wrong: dict[str, Any]) -> None:
    with pytest.raises(InputError, match=next(iter(wrong)).split("_")[0].replace("rollover", "roll-over")):
        replace(THIRD, **wrong)


def test_series_scatters_as_its_errors_say() -> None:
    temperature = np.geomspace(0.1, 2, 12)
    rng = np.random.default_rng(5)
    draws = [simulate_series(temperature, THIRD, 0.01, 0.3, rng) for _ in range(400)]
    pulls = np.array([(value - temperature_curve(temperature, THIRD)) / error for value, error in draws])
    n = pulls.size
    assert abs(pulls.mean()) < 4 / np.sqrt(n)
    assert abs(pulls.var() - 1) < 4 * np.sqrt(2 / n)
    assert 0.4 < np.mean([value[0] < 0 for value, _ in draws]) < 0.6  # truth far below the noise
    np.testing.assert_allclose(
        draws[0][1][[0, -1]], [0.3, 0.01 * temperature_curve(temperature, THIRD)[-1]], rtol=1e-3
    )


# --- traces ---------------------------------------------------------------------------------------------


def harebell_trace(field_T: np.ndarray, temperature_K: float) -> tuple[np.ndarray, np.ndarray]:
    filling = filling_factor(HAREBELL_3.density_per_m2, np.abs(field_T))
    temperature = np.full_like(field_T, temperature_K)
    return trace(filling, field_T, temperature, harebell_states(HAREBELL_3), HAREBELL_3.flanks)


@pytest.mark.parametrize("sample", [HAREBELL_3, HAREBELL_4])
def test_trace_at_exact_filling_is_the_temperature_curve(sample: Any) -> None:
    """Neighbours and remnants of oscillations disturb no state at its own filling, at any temperature."""
    temperature = np.array(sample.temperatures_K)
    for truth in harebell_states(sample):
        if truth.filling > 1:  # there the background oscillates with temperature
            continue
        field = np.full_like(temperature, field_at_filling(truth.filling, sample.density_per_m2))
        filling = filling_factor(sample.density_per_m2, field)
        rho_xx, _ = trace(filling, field, temperature, harebell_states(sample), sample.flanks)
        np.testing.assert_allclose(rho_xx, temperature_curve(temperature, truth), rtol=1e-4)


def test_gate_trace_at_exact_filling_is_the_temperature_curve() -> None:
    temperature = np.array([0.3, 2.0, 20.0])
    for field_T in CAMPION_FIELDS_T:
        for truth in campion_states(field_T):
            filling, field = np.full(3, float(truth.filling)), np.full(3, field_T)
            rho_xx, rho_xy = trace(filling, field, temperature, campion_states(field_T), CAMPION_BACKGROUND)
            np.testing.assert_allclose(rho_xx, temperature_curve(temperature, truth), rtol=1e-5)
            assert rho_xy[0] == pytest.approx(h / (e**2 * float(truth.filling)), rel=1e-3)


def test_hall_plateaus_and_classical_slope() -> None:
    for truth in harebell_states(HAREBELL_3):
        if truth.filling.denominator > 5 or truth.filling > 2:
            continue
        centre = field_at_filling(truth.filling, HAREBELL_3.density_per_m2)
        _, plateau = harebell_trace(centre * np.array([0.99, 1.0, 1.01]), 0.06)
        np.testing.assert_allclose(plateau, h / (e**2 * float(truth.filling)), rtol=2e-4)
    low = np.array([0.1, 0.2])
    _, rho_xy = harebell_trace(low, 0.06)
    slope = np.diff(rho_xy) / np.diff(low)
    assert 1 / (e * slope[0]) == pytest.approx(HAREBELL_3.density_per_m2, rel=1e-4)


def test_plateau_narrows_and_minimum_fills_on_heating() -> None:
    centre = field_at_filling(Fraction(2, 5), HAREBELL_3.density_per_m2)
    field = np.linspace(0.93, 1.07, 401) * centre
    widths = []
    for temperature_K in (0.06, 0.3, 0.8, 1.6):
        rho_xx, rho_xy = harebell_trace(field, temperature_K)
        on_plateau = np.abs(rho_xy * e**2 / h * 0.4 - 1) < 2e-3
        widths.append(np.mean(on_plateau))
        assert abs(field[np.argmin(rho_xx)] / centre - 1) < 0.02
    assert np.all(np.diff(widths) < 0)


def test_trace_is_even_and_hall_trace_odd() -> None:
    field = np.concatenate([-np.linspace(0.05, 14, 300)[::-1], np.linspace(0.05, 14, 300)])
    rho_xx, rho_xy = harebell_trace(field, 0.5)
    np.testing.assert_allclose(rho_xx, rho_xx[::-1])
    np.testing.assert_allclose(rho_xy, -rho_xy[::-1])
    assert np.all(rho_xx > 0)


def test_weak_states_are_shallow_when_hot_and_the_strong_are_not() -> None:
    depth = {}
    for text in ("1/3", "4/9", "5/9"):
        centre = field_at_filling(Fraction(text), HAREBELL_3.density_per_m2)
        rho_xx, _ = harebell_trace(np.array([centre]), 1.6)
        filling = np.array([float(Fraction(text))])
        flank = background(filling, np.array([centre]), np.array([1.6]), HAREBELL_3.flanks)
        depth[text] = 1 - rho_xx[0] / flank[0]
    assert depth["1/3"] > 0.6
    assert 0.1 < depth["4/9"] < 0.45
    assert 0.1 < depth["5/9"] < 0.45


def test_oscillations_have_their_temperature_and_dingle_factors() -> None:
    """Lifshitz-Kosevich form: X / sinh X = 0.8505 at X = 1, and 4 exp(-pi / w_c tau_q) when cold."""
    field = np.array([0.5])
    spacing = 1.34343 * 0.5 / 0.067
    cold = shubnikov_de_haas(field, 1e-5, 0.067, 0.3)
    assert cold[0] == pytest.approx(4 * np.exp(-2 * np.pi**2 * 0.3 / spacing), rel=1e-4)
    warm = shubnikov_de_haas(field, spacing / (2 * np.pi**2), 0.067, 0.3)
    assert warm[0] / cold[0] == pytest.approx(1 / np.sinh(1), rel=1e-4)
    assert shubnikov_de_haas(np.array([0.0, 0.01]), 0.1, 0.067, 0.3).tolist() == [0.0, 0.0]


def test_oscillations_are_periodic_in_inverse_field_with_the_spin_degenerate_frequency() -> None:
    shape = Background(10.0, 0.0, 1.0, dingle_K=0.45)
    inverse = np.linspace(1.8, 6, 4001)
    filling = filling_factor(1.12e15, 1 / inverse)
    rho = background(filling, 1 / inverse, np.full_like(inverse, 0.06), shape)
    dips = np.flatnonzero((rho[1:-1] < rho[:-2]) & (rho[1:-1] < rho[2:])) + 1
    assert len(dips) >= 8
    np.testing.assert_allclose(np.diff(inverse[dips]), 2 * e / (h * 1.12e15), rtol=0.02)


# --- instrument -----------------------------------------------------------------------------------------


def test_hall_leak_is_odd_in_field_and_goes_away_by_symmetrising() -> None:
    field = np.linspace(5, 14, 50)
    rho_xx, rho_xy = harebell_trace(field, 0.5)
    rng = np.random.default_rng(1)
    plus, _, hall_plus, _ = voltages(rho_xx, rho_xy, QUIET, rng)
    minus, _, hall_minus, _ = voltages(rho_xx, -rho_xy, QUIET, rng)
    current = QUIET.current_A
    np.testing.assert_allclose((plus + minus) / 2 / current, QUIET.aspect * rho_xx, rtol=1e-6, atol=1e-6)
    np.testing.assert_allclose(
        (plus - minus) / 2 / current, QUIET.hall_into_xx * rho_xy, rtol=1e-6, atol=1e-6
    )
    np.testing.assert_allclose((hall_plus - hall_minus) / 2 / current, rho_xy, rtol=1e-6)
    even = (hall_plus + hall_minus) / 2 / current
    np.testing.assert_allclose(even, QUIET.xx_into_hall * QUIET.aspect * rho_xx, rtol=1e-4, atol=1e-6)


def test_quadrature_is_the_phase_error() -> None:
    field = np.linspace(5, 14, 50)
    line = replace(QUIET, phase=0.02)
    in_phase, quadrature, _, _ = voltages(*harebell_trace(field, 0.8), line, np.random.default_rng(1))
    np.testing.assert_allclose(quadrature, np.tan(0.02) * in_phase, atol=1e-14)


@pytest.mark.parametrize("correlation", [0.0, 1.5, 6.0])
def test_noise_has_unit_variance_and_its_time_constant(correlation: float) -> None:
    n = 200_000
    noise = correlated_noise(n, correlation, np.random.default_rng(3))
    neighbour = np.exp(-1 / correlation) if correlation else 0.0
    effective = n * (1 - neighbour) / (1 + neighbour)
    assert noise.var() == pytest.approx(1, abs=4 * np.sqrt(2 / effective))
    assert np.mean(noise[1:] * noise[:-1]) == pytest.approx(neighbour, abs=4 * np.sqrt(2 / effective))


def test_field_lags_behind_both_directions() -> None:
    up = np.linspace(-1, 1, 9)
    line = replace(QUIET, remanence_T=1e-3, lag_T=2e-3)
    np.testing.assert_allclose(field_seen(up, line) - up, -1e-3)
    np.testing.assert_allclose(field_seen(up[::-1], line) - up[::-1], 3e-3)


def test_thermometer_scale_is_common_and_digits_are_whole() -> None:
    line = replace(QUIET, temperature_scale=0.02, temperature_spread=0.0, temperature_drift=0.01)
    truth, reading = temperatures(0.5, 4000, line, np.random.default_rng(2))
    assert np.mean(reading / truth) == pytest.approx(1.02, abs=2e-4)
    assert truth.max() - truth.min() > 1e-4
    np.testing.assert_allclose(quantise(np.array([0.0, 3.1e-9, -4.9e-9]), 2e-9), [0, 4e-9, -4e-9])


# --- demo data ------------------------------------------------------------------------------------------


def test_unknown_demo_and_negative_seed_are_refused(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"no demo 'bluebell'.*harebell-3"):
        simulate_demo("bluebell", tmp_path)
    with pytest.raises(InputError, match="seed -1"):
        simulate_demo("teasel-2", tmp_path, seed=-1)
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("name", ["harebell-4", "teasel-2"])
def test_same_seed_same_bytes(name: str, tmp_path: Path) -> None:
    first = simulate_demo(name, tmp_path / "one", seed=7)
    second = simulate_demo(name, tmp_path / "two", seed=7)
    assert [path.read_bytes() for path in first] == [path.read_bytes() for path in second]


def test_another_seed_gives_other_readings_of_the_same_sample(tmp_path: Path) -> None:
    simulate_demo("teasel-2", tmp_path / "one", seed=7)
    simulate_demo("teasel-2", tmp_path / "two", seed=8)
    one, two = tmp_path / "one" / "teasel-2", tmp_path / "two" / "teasel-2"
    assert (one / "minima.csv").read_bytes() != (two / "minima.csv").read_bytes()
    assert truth_of(one)["states"] == truth_of(two)["states"]


@pytest.mark.parametrize("name", ["campion-1", "teasel-2", "harebell-3"])
def test_shipped_data_are_what_the_code_makes(name: str, tmp_path: Path) -> None:
    """Numbers may differ by a last digit where another machine rounds differently."""
    made = {path.relative_to(tmp_path): path for path in simulate_demo(name, tmp_path)}
    shipped = {path.relative_to(SHIPPED) for path in (SHIPPED / name).rglob("*") if path.is_file()}
    assert set(made) == shipped
    assert (SHIPPED / name / "study.toml").read_bytes() == (tmp_path / name / "study.toml").read_bytes()
    for relative in sorted(shipped)[::7]:
        if relative.suffix in {".json", ".toml"}:
            continue
        ours, theirs = numbers(made[relative]), numbers(SHIPPED / relative)
        assert ours.shape == theirs.shape
        digit = 0.002 if name == "teasel-2" else 1.1e-7  # ohm; V
        np.testing.assert_allclose(ours[:, -2:], theirs[:, -2:], rtol=2e-5, atol=digit)


@pytest.mark.parametrize("name", DEMOS)
def test_shipped_data_are_marked_synthetic(name: str) -> None:
    assert truth_of(SHIPPED / name)["synthetic"] is True
    for path in (SHIPPED / name).rglob("*"):
        if path.is_file() and path.suffix != ".json":
            data = path.read_bytes()
            data = gzip.decompress(data) if path.suffix == ".gz" else data
            text = data[:400].decode("utf-16" if data[:2] == b"\xff\xfe" else "utf-8", errors="ignore")
            assert "SYNTHETIC DATA" in text, path


def test_shipped_data_are_small() -> None:
    assert sum(path.stat().st_size for path in SHIPPED.rglob("*") if path.is_file()) < 15e6


@pytest.mark.parametrize("name", DEMOS)
def test_truth_names_every_filling_of_the_study(name: str) -> None:
    study = tomllib.loads((SHIPPED / name / "study.toml").read_text())
    states = truth_of(SHIPPED / name)["states"]
    assert all(
        {"gap_K", "prefactor_ohm", "hopping_T0_K", "regime", "field_T"} <= set(state) for state in states
    )
    wanted = set(study.get("fillings", {}).get("look_for", [state["filling"] for state in states]))
    assert wanted == {state["filling"] for state in states if state["looked_for"]}


def test_harebell_truth_stands_on_the_ladder() -> None:
    for name, broadening in (("harebell-3", 1.5), ("harebell-4", 1.9)):
        truth = truth_of(SHIPPED / name)
        for state in truth["states"]:
            filling = Fraction(state["filling"])
            if not state["looked_for"] or filling == 1:
                continue
            expected = ladder_gap(effective_field(filling, state["field_T"]), 0.5, broadening)
            assert state["gap_K"] == pytest.approx(expected)


def test_teasel_holds_every_difficulty() -> None:
    regimes = {state["filling"]: state["regime"] for state in truth_of(SHIPPED / "teasel-2")["states"]}
    assert regimes == {
        "1/3": "activated",
        "2/3": "activated + efros-shklovskii",
        "2/5": "efros-shklovskii",
        "3/5": "activated + leak",
        "3/7": "activated + roll-over",
        "4/7": "flat",
        "1": "activated + mott",
        "4/3": "activated",
    }


def minimum_readings(state: dict[str, Any], reach_T: float) -> tuple[np.ndarray, np.ndarray]:
    """Temperature and symmetrised rho_xx of harebell-3 within a reach of an exact filling."""
    rows = []
    for path in sorted((SHIPPED / "harebell-3" / "sweeps").iterdir()):
        table = numbers(path)
        both = [np.abs(table[:, 0] - sign * state["field_T"]) < reach_T for sign in (-1, 1)]
        mean = np.mean([table[part].mean(axis=0) for part in both], axis=0)
        rows.append((mean[1] / 1e3, mean[2] / (HAREBELL_3.line.current_A * HAREBELL_3.line.aspect)))
    temperature, rho = np.array(rows).T
    return temperature, rho


@pytest.mark.parametrize("text", ["1/3", "2/5", "3/7", "4/9", "3/5", "2/3"])
def test_gaps_above_one_and_a_half_kelvin_can_be_recovered(text: str) -> None:
    """A least-squares fit that knows the true form finds the gap, with a standard error of 3 % at most."""
    state = next(s for s in truth_of(SHIPPED / "harebell-3")["states"] if s["filling"] == text)
    temperature, rho = minimum_readings(state, 0.008)
    start = StateTruth(
        **{key: value for key, value in state.items() if key in StateTruth.__dataclass_fields__}
        | {"filling": Fraction(text)}
    )

    def curve(temperature: np.ndarray, gap: float, *logs: float) -> np.ndarray:
        prefactor, amplitude, hopping_T0, flank = np.exp(logs)
        return temperature_curve(
            temperature,
            replace(
                start,
                gap_K=gap,
                prefactor_ohm=prefactor,
                hopping_amplitude_ohm_K=amplitude,
                hopping_T0_K=hopping_T0,
                background_ohm=flank,
            ),
        )

    names = ("prefactor_ohm", "hopping_amplitude_ohm_K", "hopping_T0_K", "background_ohm")
    first = [start.gap_K, *np.log([getattr(start, name) for name in names])]
    true = curve(temperature, *first)
    slope = np.gradient(np.log(true), np.log(temperature))
    error = np.sqrt((4e-3 * true) ** 2 + 0.1**2 + (3e-3 * slope * true) ** 2)
    best, covariance = curve_fit(curve, temperature, rho, first, error, absolute_sigma=True)
    width = np.sqrt(covariance[0, 0])
    assert width < 0.03 * start.gap_K
    assert abs(best[0] - start.gap_K) < 3 * np.hypot(width, 0.005 * start.gap_K)


def test_cold_minima_read_negative_now_and_then() -> None:
    table = numbers(sorted((SHIPPED / "harebell-3" / "sweeps").iterdir())[0])
    near = np.abs(np.abs(table[:, 0]) - 13.84) < 0.15
    plus, minus = table[near & (table[:, 0] > 0), 2], table[near & (table[:, 0] < 0), 2]
    n = min(len(plus), len(minus))
    even = (plus[:n] + minus[:n]) / 2
    assert np.min(even) < 0 < np.max(even)
