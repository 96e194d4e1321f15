"""The curve of a combination against the bare laws, its derivatives against finite differences."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from gapfit.curve import Reference, evaluate, log_prefactor
from gapfit.mechanisms import (
    COMBINATIONS,
    PARAMETERS,
    SLOT,
    activation,
    efros_shklovskii,
    electron_temperature,
    fermi,
    mott,
    nearest_neighbour,
    parse_combination,
    power_mean,
    roll_over,
)

T = np.geomspace(0.1, 3.0, 12)
REFERENCE = Reference(high_K=1.4, low_K=0.1)
EVERY = (
    *COMBINATIONS,
    *map(
        parse_combination,
        (
            "activation + fermi",
            "activation + fermi + es + leak + heating",
            "activation + fermi + spread",
            "activation + power mean",
            "activation + power mean + es + heating",
            "activation + spread",
            "activation + roll-over + spread + heating",
            "activation + nearest",
            "activation + fermi + nearest + offset + heating",
            "activation + roll-over + spread + mott + nearest + leak + heating",
            "power law + heating",
            "constant + heating",
            "constant + es",
            "power law + mott + offset + heating",
        ),
    ),
)
CENTRES = {
    "gap_K": np.log(3.0),
    "activated": np.log(200.0),
    "background": np.log(900.0),
    "sharpness": 0.35,
    "saturation": 0.3,
    "background_slope": 0.05,
    "hopping": np.log(2.0),
    "hopping_T0_K": np.log(15.0),
    "nearest": np.log(1.5),
    "nearest_ratio": 0.0,
    "leak": np.log(0.7),
    "offset": -0.4,
    "electron_T0_K": np.log(0.12),
    "level": np.log(5.0),
    "power": 0.5,
    "spread": np.log(0.07),
    "inflation": 0.0,
}
NARROWED = {"background_slope": 0.1}

every_combination = pytest.mark.parametrize("combination", EVERY, ids=lambda item: item.name)


def draws(combination, n_draw=5, seed=0, width=0.6):
    """Coordinate vectors scattered about a typical curve."""
    rng = np.random.default_rng(seed)
    full = np.repeat(combination.base[None], n_draw, axis=0)
    for slot in combination.slots:
        name = PARAMETERS[slot].name
        full[:, slot] = CENTRES[name] + NARROWED.get(name, 1.0) * width * rng.standard_normal(n_draw)
    return full


def by_laws(coordinates, combination, temperature, reference=REFERENCE):
    """The parts of one curve, put together from the bare laws of `gapfit.mechanisms`."""
    value = {
        PARAMETERS[slot].name: float(PARAMETERS[slot].natural(coordinates[slot]))
        for slot in combination.slots
    }
    has = set(combination.mechanisms)
    low, high, m = reference.low_K, reference.high_K, reference.hopping_power
    hot = temperature
    if "heating" in has:
        hot = electron_temperature(temperature, value["electron_T0_K"], reference.saturation_exponent)
    parts = dict.fromkeys(("activation", "hopping", "nearest", "constant"), 0.0 * temperature)
    if "activation" in has:
        gap, s = value["gap_K"], value["gap_K"] * value.get("spread", 0.0)
        prefactor = value["activated"] * np.exp(gap / (2 * high) - s**2 / (8 * high**2))
        parts["activation"] = activation(hot, gap, prefactor) * np.exp(s**2 / (8 * hot**2))
        if "power mean" in has:
            parts["activation"] = power_mean(parts["activation"], value["background"], value["sharpness"])
        if "roll-over" in has:
            flank = value["background"] * np.exp(value["background_slope"] * (temperature / high - 1))
            parts["activation"] = roll_over(
                parts["activation"], flank, value["sharpness"], value["saturation"]
            )
        if "fermi" in has:
            parts["activation"] = power_mean(parts["activation"], prefactor, 1.0)
    for name, law, exponent in (("es", efros_shklovskii, 1 / 2), ("mott", mott, 1 / 3)):
        if name in has:
            scale = value["hopping_T0_K"]
            amplitude = value["hopping"] * low**m * np.exp((scale / low) ** exponent)
            parts["hopping"] = law(hot, scale, amplitude, m)
    if "nearest" in has:
        energy = value["gap_K"] * value["nearest_ratio"]
        parts["nearest"] = nearest_neighbour(hot, energy, value["nearest"] * np.exp(energy / low))
    parts["constant"] = parts["constant"] + value.get("leak", 0.0) + value.get("offset", 0.0)
    if has & {"constant", "power law"}:
        parts["constant"] = parts["constant"] + value["level"] * (hot / low) ** value.get("power", 0.0)
    return parts


@every_combination
@pytest.mark.parametrize("reference", [REFERENCE, Reference(2.0, 0.07, 0.0, 2.5)])
def test_curve_is_the_sum_of_its_laws(combination, reference):
    """To ten digits; closed curves to six, since the closure is left out where it is below 3e-7."""
    coordinates = draws(combination)
    curve = evaluate(coordinates, T, reference)
    closed = {"roll-over", "power mean", "fermi"} & set(combination.mechanisms)
    tolerance = 1e-6 if closed else 1e-10
    for row, vector in enumerate(coordinates):
        expected = by_laws(vector, combination, T, reference)
        for name, part in expected.items():
            found = np.broadcast_to(curve.parts[name], curve.total.shape)[row]
            np.testing.assert_allclose(found, part, rtol=tolerance, atol=1e-13, err_msg=name)
        size = sum(np.abs(part) for part in expected.values())
        np.testing.assert_allclose(curve.total[row] / size, sum(expected.values()) / size, atol=tolerance)


@every_combination
def test_jacobian_against_finite_differences(combination):
    coordinates = draws(combination)
    matrix = evaluate(coordinates, T, REFERENCE, jacobian=True).jacobian
    step = 1e-5
    for slot in combination.slots:
        shift = step * (np.arange(len(PARAMETERS)) == slot)
        above, below = (evaluate(coordinates + sign * shift, T, REFERENCE).total for sign in (1, -1))
        expected = (above - below) / (2 * step)
        scale = sum(np.abs(part) for part in evaluate(coordinates, T, REFERENCE).parts.values())
        np.testing.assert_allclose(
            matrix[:, :, slot] / scale, expected / scale, rtol=2e-6, atol=1e-8, err_msg=PARAMETERS[slot].name
        )


@every_combination
def test_slope_against_finite_differences(combination):
    coordinates, step = draws(combination), 1e-5
    curve = evaluate(coordinates, T, REFERENCE)
    above, below = (evaluate(coordinates, T * np.exp(sign * step), REFERENCE).total for sign in (1, -1))
    expected = (above - below) / (2 * step)
    np.testing.assert_allclose(
        np.broadcast_to(curve.slope, expected.shape),
        expected,
        rtol=1e-6,
        atol=1e-7 * np.abs(curve.total).max(),
    )


def test_a_mixed_batch_equals_single_models():
    coordinates = np.concatenate([draws(combination, 2, seed=3) for combination in EVERY])
    together = evaluate(coordinates, T, REFERENCE, jacobian=True)
    for row, vector in enumerate(coordinates):
        alone = evaluate(vector[None], T, REFERENCE, jacobian=True)
        np.testing.assert_allclose(together.total[row], alone.total[0], rtol=1e-12)
        slope = np.broadcast_to(alone.slope, alone.total.shape)
        np.testing.assert_allclose(together.slope[row], slope[0], rtol=1e-12, atol=1e-300)
        np.testing.assert_allclose(together.jacobian[row], alone.jacobian[0], rtol=1e-12, atol=1e-300)


def test_parts_add_up():
    coordinates = np.concatenate([draws(combination, 2, seed=4) for combination in EVERY])
    curve = evaluate(coordinates, T, REFERENCE)
    np.testing.assert_allclose(sum(curve.parts.values()), curve.total, rtol=1e-12)


@every_combination
def test_kelvin_or_millikelvin_gives_the_same_curve(combination):
    coordinates = draws(combination)
    scaled = coordinates.copy()
    for name in ("gap_K", "hopping_T0_K", "electron_T0_K"):
        scaled[:, SLOT[name]] += np.log(1000)
    in_millikelvin = replace(REFERENCE, high_K=1000 * REFERENCE.high_K, low_K=1000 * REFERENCE.low_K)
    np.testing.assert_allclose(
        evaluate(scaled, 1000 * T, in_millikelvin).total, evaluate(coordinates, T, REFERENCE).total, rtol=1e-9
    )


@every_combination
@given(st.integers(0, 2**32 - 1))
def test_nothing_negative_without_offset_and_activation_rises_on_heating(combination, seed):
    """Activation, closed at a steady level or not, never falls on heating unless gaps are spread."""
    if "offset" in combination.mechanisms or "spread" in combination.mechanisms:
        return
    coordinates = draws(combination, seed=seed, width=1.5)
    coordinates[:, SLOT["background_slope"]] = 0.0
    curve = evaluate(coordinates, T, REFERENCE)
    assert (curve.total >= 0).all()
    assert (np.diff(curve.parts["activation"]) >= 0).all()


# --------------------------------------------------------------------------------------------- limits


def one(text, **changes):
    combination = parse_combination(text)
    vector = draws(combination, 1, width=0.0)
    for name, number in changes.items():
        vector[0, SLOT[name]] = number
    return vector


def test_fermi_form_is_the_closure_with_its_own_prefactor_as_background():
    """2 A / (1 + exp(Delta/2T)) with 2 A the prefactor at 1/T = 0."""
    tied = one("activation + fermi", gap_K=np.log(4.0))
    prefactor = np.exp(log_prefactor(tied, REFERENCE))[0]
    free = one("activation + power mean", gap_K=np.log(4.0), background=np.log(prefactor), sharpness=0.0)
    expected = fermi(T, 4.0, prefactor / 2)
    np.testing.assert_allclose(evaluate(tied, T, REFERENCE).total[0], expected, rtol=1e-6)
    np.testing.assert_allclose(evaluate(free, T, REFERENCE).total[0], expected, rtol=1e-6)


def test_amplitudes_are_the_readings_at_the_reference_temperatures():
    low, high = np.array([REFERENCE.low_K]), np.array([REFERENCE.high_K])
    assert evaluate(one("activation"), high, REFERENCE).total[0, 0] == pytest.approx(200.0, rel=1e-12)
    assert evaluate(one("activation + spread"), high, REFERENCE).total[0, 0] == pytest.approx(
        200.0, rel=1e-12
    )
    for text, size in (("es", 2.0), ("mott", 2.0), ("constant", 5.0), ("power law", 5.0)):
        assert evaluate(one(text), low, REFERENCE).total[0, 0] == pytest.approx(size, rel=1e-12)


def test_prefactor_is_the_limit_of_infinite_temperature():
    for text in ("activation", "activation + spread"):
        vector = one(text)
        hot = evaluate(vector, np.array([1e9]), REFERENCE).total[0, 0]
        assert np.log(hot) == pytest.approx(log_prefactor(vector, REFERENCE)[0], abs=1e-7)


@pytest.mark.parametrize(
    ("text", "plain", "change"),
    [
        ("activation + roll-over", "activation", {"background": 50.0}),
        ("activation + spread", "activation", {"spread": -30.0}),
        ("activation + heating", "activation", {"electron_T0_K": -12.0}),
        ("activation + leak", "activation", {"leak": -60.0}),
        ("activation + offset", "activation", {"offset": 0.0}),
        ("activation + es", "activation", {"hopping": -60.0}),
        ("activation + nearest", "activation", {"nearest": -60.0}),
        ("power law", "constant", {"power": 0.0}),
    ],
)
def test_a_mechanism_switched_off_leaves_the_rest(text, plain, change):
    np.testing.assert_allclose(
        evaluate(one(text, **change), T, REFERENCE).total,
        np.broadcast_to(evaluate(one(plain), T, REFERENCE).total, (1, T.size)),
        rtol=1e-9,
    )


def test_power_mean_is_the_roll_over_of_full_saturation():
    mean = one("activation + power mean")
    shaped = one("activation + roll-over", saturation=40.0, background_slope=0.0)
    np.testing.assert_allclose(
        evaluate(mean, T, REFERENCE).total, evaluate(shaped, T, REFERENCE).total, rtol=1e-10
    )


def test_background_follows_the_bath_not_the_electrons():
    """Far above the flank level the curve is that level, whose slope is stated against T / T_h."""
    vector = one("activation + roll-over + heating", activated=np.log(1e12), electron_T0_K=np.log(5.0))
    expected = 900 * np.exp(0.05 * (T / REFERENCE.high_K - 1))
    np.testing.assert_allclose(evaluate(vector, T, REFERENCE).total[0], expected, rtol=1e-6)


def test_closure_limits():
    """Far below the background the curve is activated, far above it the curve is the background."""
    hot, cold = np.array([1e6]), np.array([0.12])
    vector = one("activation + power mean", activated=np.log(1e6))
    assert evaluate(vector, hot, REFERENCE).total[0, 0] == pytest.approx(900.0, rel=1e-4)
    vector = one("activation + roll-over", gap_K=np.log(6.0))
    np.testing.assert_allclose(
        evaluate(vector, cold, REFERENCE).total,
        evaluate(one("activation", gap_K=np.log(6.0)), cold, REFERENCE).total,
        rtol=1e-6,
    )


def test_cold_electrons_stop_at_their_own_temperature():
    vector = one("activation + heating")
    frozen = evaluate(vector, np.array([1e-4, 1e-3]), REFERENCE).total[0]
    expected = by_laws(vector[0], parse_combination("activation"), np.array([0.12]))["activation"]
    np.testing.assert_allclose(frozen, expected[0], rtol=1e-6)


@pytest.mark.parametrize("size", [10.0, 30.0])
def test_absurd_draws_stay_finite(size):
    """Coordinates are logarithms: thirty is thirteen decades."""
    for combination in EVERY:
        curve = evaluate(draws(combination, 20, seed=5, width=size), T, REFERENCE, jacobian=True)
        assert np.isfinite(curve.total).all(), combination.name
        assert np.isfinite(curve.slope).all(), combination.name
