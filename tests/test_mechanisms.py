"""The laws of transport, each against its limits, and the rules for combining them."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.optimize import minimize

from gapfit.errors import InputError
from gapfit.mechanisms import (
    COMBINATIONS,
    MECHANISMS,
    OFF,
    PARAMETERS,
    SLOT,
    Combination,
    activation,
    combinations_for,
    efros_shklovskii,
    electron_temperature,
    fermi,
    mott,
    nearest_neighbour,
    parse_combination,
    power_mean,
    roll_over,
)

temperatures = st.floats(0.05, 10.0)
energies = st.floats(0.05, 30.0)
amplitudes = st.floats(1e-6, 1e5)
sharpnesses = st.floats(0.3, 8.0)
powers = st.sampled_from([0.0, 1.0, 2.0])

# law, whether an amplitude carries K^power, exponent of (energy/T)
LAWS = {
    "activation": (activation, 1.0),
    "fermi": (fermi, 1.0),
    "nearest": (nearest_neighbour, 1.0),
    "es": (efros_shklovskii, 1 / 2),
    "mott": (mott, 1 / 3),
}


every_law = pytest.mark.parametrize("law", LAWS)


# --------------------------------------------------------------------- one suite of laws for all of them


@every_law
@given(temperatures, energies, amplitudes)
def test_positive_and_proportional_to_the_amplitude(law, temperature, energy, amplitude):
    function, _ = LAWS[law]
    value = function(temperature, energy, amplitude)
    assert value >= 0
    assert function(temperature, energy, 3 * amplitude) == pytest.approx(3 * value, rel=1e-12)


@every_law
@given(temperatures, energies, amplitudes)
def test_kelvin_or_millikelvin_gives_the_same_reading(law, temperature, energy, amplitude):
    """The amplitude of hopping carries one power of temperature."""
    function, exponent = LAWS[law]
    scaled = amplitude * (1000 if exponent < 1 else 1)
    in_millikelvin = function(1000 * temperature, 1000 * energy, scaled)
    assert in_millikelvin == pytest.approx(function(temperature, energy, amplitude), rel=1e-10)


@every_law
@given(temperatures, st.floats(1.01, 3.0), energies)
def test_readings_fall_on_cooling(law, temperature, step, energy):
    """With a prefactor 1/T^m a hopping law turns at T0 (alpha / m)^(1 / alpha): it rises only below."""
    function, exponent = LAWS[law]
    cold, warm = function(temperature, energy, 1.0), function(step * temperature, energy, 1.0)
    if exponent == 1:
        assert cold <= warm
        return
    turn = energy * exponent ** (1 / exponent)
    if step * temperature < turn:
        assert cold <= warm
    elif temperature > turn:
        assert cold >= warm
    assert function(temperature, energy, 1.0, power=0.0) <= function(
        step * temperature, energy, 1.0, power=0.0
    )


@every_law
@given(temperatures, energies, st.floats(1.01, 3.0))
def test_readings_fall_with_the_energy(law, temperature, energy, step):
    function, _ = LAWS[law]
    assert function(temperature, step * energy, 1.0) <= function(temperature, energy, 1.0)


@every_law
@given(temperatures, energies)
def test_logarithmic_slope_is_the_energy(law, temperature, energy):
    """d ln y / d (1/T) of every law, in closed form."""
    function, exponent = LAWS[law]
    step = 1e-5
    rise = np.log(function(temperature * np.exp([step, -step]), energy, 1.0))
    slope = (rise[0] - rise[1]) / (2 * step)
    expected = {
        "activation": energy / (2 * temperature),
        "fermi": energy / (2 * temperature) / (1 + np.exp(-energy / (2 * temperature))),
        "nearest": energy / temperature,
    }
    hopping = exponent * (energy / temperature) ** exponent - 1
    assert slope == pytest.approx(expected.get(law, hopping), rel=1e-5, abs=1e-7)


# ----------------------------------------------------------------------------------- limits, one by one


def test_activation_has_the_factor_two():
    """exp(-Delta / 2 k_B T): at T = Delta/2 the reading is the prefactor over e."""
    assert activation(2.5, 5.0, 100.0) == pytest.approx(100 / np.e, rel=1e-14)
    assert activation(1e9, 5.0, 100.0) == pytest.approx(100.0, rel=1e-8)


def test_nearest_neighbour_has_no_factor_two():
    assert nearest_neighbour(5.0, 5.0, 100.0) == pytest.approx(100 / np.e, rel=1e-14)


def test_hopping_laws_at_their_own_temperature():
    assert efros_shklovskii(4.0, 16.0, 8.0) == pytest.approx(2 * np.exp(-2), rel=1e-14)
    assert mott(2.0, 54.0, 8.0) == pytest.approx(4 * np.exp(-3), rel=1e-14)
    assert efros_shklovskii(4.0, 16.0, 8.0, power=0.0) == pytest.approx(8 * np.exp(-2), rel=1e-14)
    assert mott(2.0, 54.0, 8.0, power=2.0) == pytest.approx(2 * np.exp(-3), rel=1e-14)


@given(temperatures, energies, amplitudes)
def test_fermi_form_limits(temperature, gap, amplitude):
    """Level A when hot, 2 A exp(-Delta/2T) when cold."""
    assert fermi(1e9, gap, amplitude) == pytest.approx(amplitude, rel=1e-7)
    cold = gap / 60
    assert fermi(cold, gap, amplitude) == pytest.approx(activation(cold, gap, 2 * amplitude), rel=1e-12)


@given(temperatures, energies, amplitudes)
def test_fermi_form_is_a_power_mean_of_sharpness_one(temperature, gap, amplitude):
    series = power_mean(activation(temperature, gap, 2 * amplitude), 2 * amplitude, 1.0)
    assert fermi(temperature, gap, amplitude) == pytest.approx(float(series), rel=1e-11)


@given(amplitudes, amplitudes, sharpnesses)
def test_power_mean_lies_below_both_and_solves_its_equation(first, second, k):
    value = float(power_mean(first, second, k))
    assert 0 < value <= min(first, second) * (1 + 1e-12)
    assert value >= min(first, second) * 2 ** (-1 / k) * (1 - 1e-12)
    assert (value / first) ** k + (value / second) ** k == pytest.approx(1.0, rel=1e-9)


@given(amplitudes, amplitudes, sharpnesses, st.floats(1e-3, 1e3))
def test_power_mean_is_symmetric_and_homogeneous(first, second, k, unit):
    value = float(power_mean(first, second, k))
    assert power_mean(second, first, k) == pytest.approx(value, rel=1e-12)
    assert power_mean(unit * first, unit * second, k) == pytest.approx(unit * value, rel=1e-9)


def test_power_mean_limits():
    assert power_mean(3.0, 6.0, 1.0) == pytest.approx(2.0, rel=1e-14)
    assert power_mean(3.0, 6.0, 200.0) == pytest.approx(3.0, rel=1e-12)
    assert power_mean(3.0, 1e12, 1.0) == pytest.approx(3.0, rel=1e-11)


saturations = st.floats(1e-3, 1.0)


@given(amplitudes, amplitudes, sharpnesses)
def test_roll_over_of_full_saturation_is_the_power_mean(activated, background, k):
    expected = float(power_mean(activated, background, k))
    assert roll_over(activated, background, k, 1.0) == pytest.approx(expected, rel=1e-9)


@given(st.floats(1e-4, 1e4))
def test_roll_over_without_saturation_is_the_exponential(ratio):
    """q to 0 at k = 1: background [1 - exp(-x)]."""
    assert roll_over(3.0 * ratio, 3.0, 1.0, 1e-12) == pytest.approx(-3.0 * np.expm1(-ratio), rel=1e-9)


@given(amplitudes, amplitudes, sharpnesses, saturations, st.floats(1.001, 10.0))
def test_roll_over_lies_below_both_and_rises_with_both(activated, background, k, q, step):
    value = float(roll_over(activated, background, k, q))
    assert 0 < value <= min(activated, background) * (1 + 1e-12)
    assert roll_over(step * activated, background, k, q) >= value * (1 - 1e-12)
    assert roll_over(activated, step * background, k, q) >= value * (1 - 1e-12)
    assert roll_over(step * activated, step * background, k, q) == pytest.approx(step * value, rel=1e-9)


@pytest.mark.parametrize(
    ("shape", "most"),
    [
        (np.tanh, 0.01),
        (lambda x: 2 / np.pi * np.arctan(np.pi / 2 * x), 0.035),
        (lambda x: -np.expm1(-x), 1e-3),
    ],
    ids=["tanh", "arctan", "exponential"],
)
def test_roll_over_follows_shapes_that_it_was_not_made_of(shape, most):
    """Largest relative distance from the nearest member, over two decades either side of the bend."""
    x = np.geomspace(0.01, 100.0, 60)

    def distance(parameters):
        k, q = np.exp(parameters[0]), 1 / (1 + np.exp(-np.clip(parameters[1], -12, 12)))
        return np.abs(roll_over(x, 1.0, k, q) / shape(x) - 1).max()

    starts = [(k, q) for k in (0.0, 0.5, 1.0) for q in (-6.0, -1.0, 2.0)]
    options = {"xatol": 1e-6, "fatol": 1e-8, "maxiter": 600}
    best = min(minimize(distance, start, method="Nelder-Mead", options=options).fun for start in starts)
    assert best < most


@given(temperatures, st.floats(0.01, 2.0), st.floats(2.0, 6.0))
def test_electron_temperature_lies_above_both(temperature, saturation, exponent):
    hot = float(electron_temperature(temperature, saturation, exponent))
    assert hot >= max(temperature, saturation) * (1 - 1e-12)
    assert hot <= max(temperature, saturation) * 2 ** (1 / exponent) * (1 + 1e-12)
    scaled = electron_temperature(1000 * temperature, 1000 * saturation, exponent)
    assert scaled == pytest.approx(1000 * hot, rel=1e-12)


def test_electron_temperature_limits():
    assert electron_temperature(0.3, 0.0) == pytest.approx(0.3)
    assert electron_temperature(1e-6, 0.1) == pytest.approx(0.1)
    assert electron_temperature(0.1, 0.1) == pytest.approx(0.1 * 2**0.25)
    assert electron_temperature(0.1, 0.1, 2.0) == pytest.approx(0.1 * 2**0.5)


def test_laws_broadcast_over_draws_and_temperatures():
    temperature, gap = np.array([0.5, 1.0, 2.0]), np.array([[2.0], [4.0]])
    table = activation(temperature, gap, 10.0)
    assert table.shape == (2, 3)
    assert table[1, 0] == activation(0.5, 4.0, 10.0)


# ---------------------------------------------------------------------------- table and combinations


def test_table_is_complete_and_without_doubles():
    names = [parameter.name for parameter in PARAMETERS]
    assert len(set(names)) == len(names) == OFF.size
    assert all(SLOT[name] == index for index, name in enumerate(names))
    assert all(name in SLOT for needed in MECHANISMS.values() for name in needed)
    assert all(parameter.meaning and parameter.symbol for parameter in PARAMETERS)


def test_natural_values_of_coordinates():
    def natural(name, coordinate):
        return float(PARAMETERS[SLOT[name]].natural(np.array(coordinate)))

    assert natural("gap_K", np.log(3.0)) == pytest.approx(3.0)
    assert natural("offset", -2.0) == -2.0
    assert natural("nearest_ratio", 0.0) == pytest.approx(1 / 8)
    assert 0 < natural("nearest_ratio", -30.0) < natural("nearest_ratio", 30.0) <= 0.25


def test_nearest_neighbour_energy_stays_below_half_of_the_activation_energy():
    """E_3 <= Delta/4, so that it never trades places with the activation energy Delta/2."""
    coordinate = np.linspace(-700, 700, 101)
    assert (PARAMETERS[SLOT["nearest_ratio"]].natural(coordinate) <= 0.25).all()


@pytest.mark.parametrize("combination", COMBINATIONS, ids=lambda item: item.name)
def test_names_are_read_back(combination):
    assert parse_combination(combination.name) == combination
    assert parse_combination(" + ".join(reversed(combination.mechanisms)).upper()) == combination


def test_default_combinations():
    """Activation with or without closure x tail x constant x heating, and the gapless families."""
    names = {combination.name for combination in COMBINATIONS}
    assert len(names) == len(COMBINATIONS)
    assert sum(combination.activated for combination in COMBINATIONS) == 2 * 3 * 3 * 2
    assert {"es", "mott", "constant", "power law", "es + leak", "mott + heating"} <= names
    assert {"activation", "activation + roll-over + mott + offset + heating"} <= names
    assert not any("nearest" in name or "spread" in name for name in names)


def test_a_minimum_with_known_flanks_must_fill_in_towards_them():
    assert combinations_for(background_known=False) == COMBINATIONS
    known = combinations_for(background_known=True)
    assert all("roll-over" in item.mechanisms for item in known if item.activated)
    assert {item for item in COMBINATIONS if not item.activated} <= set(known)


@pytest.mark.parametrize(
    ("text", "slots"),
    [
        ("activation", ("gap_K", "activated", "inflation")),
        ("activation + fermi", ("gap_K", "activated", "inflation")),
        (
            "activation + roll-over + es + leak + heating",
            (
                "gap_K",
                "activated",
                "background",
                "sharpness",
                "saturation",
                "background_slope",
                "hopping",
                "hopping_T0_K",
                "leak",
                "electron_T0_K",
                "inflation",
            ),
        ),
        ("power law + offset", ("offset", "level", "power", "inflation")),
    ],
)
def test_fitted_parameters_of_a_combination(text, slots):
    combination = parse_combination(text)
    assert {PARAMETERS[slot].name for slot in combination.slots} == set(slots)
    assert PARAMETERS[combination.slots[-1]].name == "inflation"
    assert len(combination.slots) == len(slots)


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("activation + magic", "unknown mechanism 'magic'"),
        ("", "unknown mechanism ''"),
        ("es + mott", "es and mott exclude"),
        ("activation + leak + offset", "leak and offset exclude"),
        ("activation + roll-over + fermi", "fermi and roll-over exclude"),
        ("activation + roll-over + power mean", "power mean and roll-over exclude"),
        ("activation + power mean + fermi", "fermi and power mean exclude"),
        ("activation + constant", "activation and constant exclude"),
        ("leak", "needs one of"),
        ("heating + offset", "needs one of"),
        ("es + roll-over", "roll-over makes sense with activation only"),
        ("constant + nearest", "nearest makes sense with activation only"),
    ],
)
def test_impossible_combinations_are_refused(text, words):
    with pytest.raises(InputError, match=words):
        parse_combination(text)


def test_order_of_mechanisms_does_not_matter():
    assert Combination(("es", "activation")) == Combination(("activation", "es"))
    assert Combination(("es", "activation")).label == "activation + ES hopping"
