"""Raw sweeps: columns and units, cutting into passes, joining field and sweep directions."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy.constants import e, h
from trace_world import landscape, measured, settings, table

from gapfit.columns import ColumnRule
from gapfit.errors import FileError, InputError, NotEnoughData
from gapfit.loading import load_sweeps
from gapfit.passes import digit, gap_segments, plateau_edges, turning_points
from gapfit.smoothing import interpolated
from gapfit.symmetry import symmetrise
from gapfit.traces import (
    FromName,
    FromTable,
    Geometry,
    conductivity,
    conductivity_error,
    corbino_conductivity,
)

UP = np.linspace(-14, 14, 4001)


# --- geometry and conductivity --------------------------------------------------------------------------


def test_geometry_factors():
    assert Geometry("hall-bar", 400, 100).factor == pytest.approx(0.25)
    # van der Pauw (1958), square sample: rho = pi R / ln 2
    assert Geometry("van-der-pauw").factor == pytest.approx(4.532360, abs=1e-6)
    assert Geometry("resistivity").factor == 1
    assert Geometry("unknown").factor == 1
    assert not Geometry("unknown").known


def test_corbino_conductivity_undoes_disc_and_leads():
    disc = Geometry("corbino", inner_radius_um=100, outer_radius_um=200, lead_ohm=150.0)
    sigma = np.array([1e-7, 1e-5, 1e-4])
    resistance = np.log(2) / (2 * np.pi * sigma) + 150
    assert corbino_conductivity(resistance, disc) == pytest.approx(sigma, rel=1e-12)


@pytest.mark.parametrize(
    ("sizes", "message"),
    [
        ({"kind": "hall-bar", "length_um": 400}, "width_um"),
        ({"kind": "corbino", "inner_radius_um": 3, "outer_radius_um": 2}, "above inner_radius_um"),
        ({"kind": "sphere"}, "allowed are hall-bar"),
    ],
)
def test_wrong_geometry_is_refused(sizes, message):
    with pytest.raises(InputError, match=message):
        Geometry(**sizes)


def test_conductivity_is_the_inverted_tensor():
    tensor = np.array([[300.0, 9000.0], [-9000.0, 300.0]])
    assert conductivity(300.0, 9000.0) == pytest.approx(np.linalg.inv(tensor)[0, 0], rel=1e-12)
    assert conductivity(-300.0, 9000.0) < 0


def test_conductivity_error_by_simulation():
    rng = np.random.default_rng(1)
    along = 2000 + 30 * rng.standard_normal(200_000)
    across = 5000 + 60 * rng.standard_normal(200_000)
    stated = conductivity_error(np.array(2000.0), np.array(5000.0), np.array(30.0), 60.0)
    assert np.std(conductivity(along, across)) == pytest.approx(float(stated), rel=0.01)


# --- columns and units ----------------------------------------------------------------------------------


def test_volts_current_unit_scale_and_hall_bar():
    field = np.linspace(0.1, 10, 200)
    volts = table({"B": 1e3 * field, "T": np.full(200, 120.0), "V": 5e-9 * field})
    family = load_sweeps(
        [volts],
        settings(
            field=ColumnRule("B", "mT"),
            temperature=ColumnRule("T", "mK"),
            rho_xx=ColumnRule("V", "V", scale=2.0, offset=1e-9),
            rho_xy=None,
            current_A=1e-8,
            geometry=Geometry("hall-bar", 400, 100),
        ),
    )
    sweep = family.sweeps[0]
    assert sweep.field_T == pytest.approx(field)
    assert sweep.temperature_K == pytest.approx(0.12)
    assert sweep.signal == pytest.approx((1e-8 * field + 1e-9) / 1e-8 / 4)
    assert sweep.current_A == 1e-8


def test_current_column_splits_the_log():
    field = np.concatenate([np.linspace(1, 5, 100), np.linspace(1, 5, 100)])
    current = np.repeat([1e-8, 4e-8], 100)
    log = table({"B": field, "T": np.full(200, 0.3), "V": 300 * current, "I": current})
    rules = settings(rho_xx=ColumnRule("V", "V"), rho_xy=None, current_A=ColumnRule("I", "A"))
    sweeps = load_sweeps([log], rules).sweeps
    assert sorted(sweep.current_A for sweep in sweeps) == pytest.approx([1e-8, 4e-8])
    assert all(sweep.signal == pytest.approx(300) for sweep in sweeps)


def test_temperature_from_file_name_with_p_as_point():
    data = measured(np.linspace(0, 5, 100), 1.0, name="run_T0p25K.dat")
    rule = FromName(r"T(?P<value>[0-9p.]+)K", "K")
    assert load_sweeps([data], settings(temperature=rule)).sweeps[0].mean_temperature == 0.25
    milli = FromName(r"T(?P<value>[0-9p.]+)K", "mK")
    assert load_sweeps([data], settings(temperature=milli)).sweeps[0].mean_temperature == 0.25e-3
    with pytest.raises(FileError, match="does not match"):
        load_sweeps([replace(data, source=data.source.with_name("x.dat"))], settings(temperature=rule))


def test_temperature_from_a_table_of_files():
    listing = table({"temperature": [0.1, 0.4]}, "temperatures.csv")
    listing = replace(
        listing, columns=("file", *listing.columns), texts={"file": np.array(["a.dat", "b.dat"])},
        units=(None, None), headings=("file", "temperature"),
    )  # fmt: skip
    files = [measured(np.linspace(0, 5, 100), 1.0, name=f"{name}.dat") for name in "ba"]
    family = load_sweeps(files, settings(temperature=FromTable(listing)))
    assert family.temperatures == pytest.approx([0.1, 0.4])
    assert [sweep.file for sweep in family.sweeps] == ["a.dat", "b.dat"]
    with pytest.raises(FileError, match=r"'c\.dat' is not listed"):
        load_sweeps([measured(UP, 1.0, name="c.dat")], settings(temperature=FromTable(listing)))


def _spoiled(column, row, value):
    data = measured(np.linspace(0, 5, 100), 0.3)
    values = {key: numbers.copy() for key, numbers in data.values.items()}
    values[column][row] = value
    return table(values)


@pytest.mark.parametrize(
    ("data", "changes", "row", "column", "message"),
    [
        (_spoiled("T", 7, -0.1), {}, 9, "T", "must be above zero"),
        (_spoiled("T", 7, 0.0), {}, 9, "T", "must be above zero"),
        (_spoiled("T", 7, 400.0), {}, 9, "T", "millikelvins"),
        (_spoiled("Rxx", 3, np.nan), {}, 5, "Rxx", "NaN"),
        (measured(np.full(100, 5.0), 0.3), {}, 2, "B", "does not change"),
        (measured(UP, 0.3), {"rho_xx": ColumnRule("Rx")}, None, "Rx", "did you mean"),
        (measured(UP, 0.3), {"rho_xx": ColumnRule("Rxx", "V")}, None, "Rxx", "excitation current"),
    ],
)
def test_bad_files_are_refused_with_row_and_column(data, changes, row, column, message):
    with pytest.raises(FileError, match=message) as caught:
        load_sweeps([data], settings(**changes))
    assert (caught.value.row, caught.value.column) == (row, column)
    assert caught.value.file == "sweep.csv"


def test_magnitude_is_refused_unless_insisted():
    field = np.linspace(0, 5, 100)
    data = table({"B": field, "T": np.full(100, 0.3), "Vxx_mag": np.abs(np.sin(field))})
    rules = settings(rho_xx=ColumnRule("Vxx_mag", "V"), rho_xy=None, current_A=1e-8)
    with pytest.raises(FileError, match="in-phase channel"):
        load_sweeps([data], rules)
    assert load_sweeps([data], replace(rules, allow_magnitude=True)).sweeps


def test_negative_readings_stay():
    data = _spoiled("Rxx", 50, -3.5)
    assert load_sweeps([data], settings()).sweeps[0].signal.min() == -3.5


def test_nothing_to_read():
    with pytest.raises(NotEnoughData):
        load_sweeps([], settings())
    with pytest.raises(NotEnoughData, match="12 rows"):
        load_sweeps([measured(np.linspace(0, 5, 8), 0.3)], settings())


# --- one record, several sweeps -------------------------------------------------------------------------


def test_turning_points_ignore_jitter():
    rng = np.random.default_rng(3)
    path = np.concatenate([np.linspace(0, 10, 400), np.linspace(10, -10, 800), np.linspace(-10, 0, 400)])
    turns = turning_points(path + 0.05 * rng.standard_normal(path.size), 0.6)
    assert turns[0] == 0
    assert turns[-1] == 1599
    assert turns[1:-1] == pytest.approx([400, 1200], abs=8)


def test_plateau_edges_of_a_stepped_temperature():
    rng = np.random.default_rng(4)
    level = np.repeat([0.1, 0.2, 0.19, 0.5], 100) * (1 + 1e-3 * rng.standard_normal(400))
    assert plateau_edges(level, 0.04) == [100, 200, 300]
    assert plateau_edges(np.linspace(1.0, 1.3, 400), 0.04) == []


def test_one_log_with_sweeps_at_two_temperatures_up_and_down():
    there_and_back = np.concatenate([UP, UP[::-1]])
    field = np.concatenate([there_and_back, there_and_back])
    temperature = np.repeat([0.1, 0.25], there_and_back.size)
    family = load_sweeps([measured(field, temperature)], settings())
    seen = {(s.mean_temperature, s.direction, s.field_sign) for s in family.sweeps}
    assert seen == {(t, d, s) for t in (0.1, 0.25) for d in ("up", "down") for s in (1, -1)}
    assert len({sweep.group for sweep in family.sweeps}) == 2
    joined = symmetrise(family)
    assert [(s.mean_temperature, s.direction, s.field_sign) for s in joined.sweeps] == [
        (t, d, 0) for t in (0.1, 0.25) for d in ("up", "down")
    ]


def test_a_jump_back_to_the_start_is_no_sweep():
    field = np.concatenate([np.linspace(1, 10, 300)] * 3)
    family = load_sweeps([measured(field, 0.3)], settings())
    assert [sweep.direction for sweep in family.sweeps] == ["up"] * 3
    # three sweeps at one temperature are three readings, not one
    assert len({sweep.group for sweep in family.sweeps}) == 3


def test_blocks_split_a_record():
    field = np.concatenate([np.linspace(1, 5, 100), np.linspace(5.01, 10, 100)])
    data = replace(measured(field, 0.3), block=np.repeat([0, 1], 100))
    assert [s.n_point for s in load_sweeps([data], settings()).sweeps] == [100, 100]


def test_repeated_points_are_averaged_and_told():
    field = np.sort(np.concatenate([np.linspace(1, 5, 100), [2.0, 2.0, 2.0]]))
    data = table({"B": field, "T": np.full(103, 0.3), "Rxx": np.where(field == 2.0, [1, 2, 3] * 34 + [1], 7)})
    family = load_sweeps([data], settings(rho_xy=None))
    sweep = family.sweeps[0]
    assert np.all(np.diff(sweep.field_T) > 0)
    inside = data.values["Rxx"][field == 2.0]
    assert sweep.signal[sweep.field_T == 2.0] == pytest.approx(inside.mean())
    assert any("averaged" in notice for notice in family.notices)


def test_gaps_are_not_bridged():
    field = np.concatenate([np.linspace(1, 5, 101), np.linspace(6, 10, 101)])
    segment = gap_segments(field)
    assert segment[100] == 0
    assert segment[101] == 1
    bridged = interpolated(np.array([4.99, 5.5, 6.01, 0.5]), field, field, segment)
    assert bridged == pytest.approx([4.99, np.nan, 6.01, np.nan], nan_ok=True)


def test_digit_of_a_quantised_record():
    rng = np.random.default_rng(5)
    assert digit(np.round(rng.standard_normal(500) / 0.02) * 0.02) == pytest.approx(0.02)
    assert digit(np.full(5, 3.0)) == 0


# --- directions -----------------------------------------------------------------------------------------


def test_leaks_and_remanence_are_recovered_and_removed():
    data = measured(UP, 0.1, seed=1, leak=0.01, back=-0.02, remanence=0.006)
    family = symmetrise(load_sweeps([data], settings()))
    found = family.alignments[0]
    assert found.hall_into_xx == pytest.approx(0.01, abs=5 * found.hall_into_xx_error + 1e-6)
    assert found.xx_into_hall == pytest.approx(-0.02, abs=5 * found.xx_into_hall_error)
    assert found.remanence == pytest.approx(0.006, abs=2e-4)
    sweep = family.sweeps[0]
    along, across = landscape(sweep.field_T)
    # the mean of two readings of noise 0.5 ohm; interpolation takes a little off
    assert np.std(sweep.signal - along) == pytest.approx(0.5 / np.sqrt(2), rel=0.2)
    assert np.std(sweep.rho_xy_ohm - across) < 0.6
    assert any("rho_xy in the measured rho_xx" in notice for notice in family.notices)


def test_errors_of_leak_and_shift_are_calibrated():
    pulls = []
    for seed in range(20):
        data = measured(UP, 0.1, seed=seed, noise=3.0, leak=0.01, remanence=0.006)
        found = symmetrise(load_sweeps([data], settings())).alignments[0]
        pulls.append((found.hall_into_xx - 0.01) / found.hall_into_xx_error)
    # 20 samples: the scatter is known to 16 %
    assert 0.6 < np.std(pulls) < 1.5
    assert abs(np.mean(pulls)) < 1.0


def test_lag_and_remanence_are_told_apart_by_up_and_down_sweeps():
    data = measured(np.concatenate([UP, UP[::-1]]), 0.1, seed=2, remanence=0.006, lag=-0.004)
    family = symmetrise(load_sweeps([data], settings()))
    found = family.alignments[0]
    assert found.remanence == pytest.approx(0.006, abs=2e-4)
    assert found.lag == pytest.approx(-0.004, abs=2e-4)
    for sweep in family.sweeps:
        along, _ = landscape(sweep.field_T)
        assert np.std(sweep.signal - along) < 0.5


def test_up_and_down_sweeps_of_one_field_direction_are_aligned():
    half = np.linspace(0.01, 14, 3000)
    data = measured(np.concatenate([half, half[::-1]]), 0.1, seed=3, lag=-0.005)
    family = symmetrise(load_sweeps([data], settings()))
    assert family.alignments[0].lag == pytest.approx(-0.005, abs=2e-4)
    assert np.isnan(family.alignments[0].hall_into_xx)
    assert any("one field direction only" in notice for notice in family.notices)


def test_field_directions_in_two_files_find_each_other():
    half = np.linspace(0.01, 14, 2000)
    files = [measured(half, 0.1, leak=0.01, name="p.csv"), measured(-half, 0.1005, leak=0.01, name="m.csv")]
    family = symmetrise(load_sweeps(files, settings()))
    assert len(family.sweeps) == 1
    assert family.sweeps[0].field_sign == 0
    assert "p.csv" in family.sweeps[0].file
    assert "m.csv" in family.sweeps[0].file


def test_unequal_ranges_keep_the_rest_less_its_leak():
    data = measured(np.linspace(-10, 14, 4000), 0.1, seed=4, leak=0.01)
    sweep = symmetrise(load_sweeps([data], settings())).sweeps[0]
    assert sweep.field_T.max() > 13.9
    assert not sweep.one_sided[sweep.field_T < 9.9].any()
    assert sweep.one_sided[sweep.field_T > 10.1].all()
    along, _ = landscape(sweep.field_T)
    # without the correction the leak would be some 300 ohm
    assert np.abs(np.mean((sweep.signal - along)[sweep.one_sided])) < 0.5


def test_never_and_always():
    data = measured(np.linspace(0.01, -14, 2000), 0.1)
    family = load_sweeps([data], settings())
    sweep = symmetrise(family, "never").sweeps[0]
    assert np.all(np.diff(sweep.field_T) > 0)
    assert np.median(sweep.rho_xy_ohm) > 0
    with pytest.raises(InputError, match="no partner"):
        symmetrise(family, "always")
    with pytest.raises(InputError, match="allowed are auto"):
        symmetrise(family, "yes")


def test_gate_sweeps_of_both_fields_lose_their_leak():
    gate = np.linspace(-1, 1, 801)

    def record(sign, name):
        along = 500 + 200 * np.cos(6 * gate)
        across = sign * 9000 * np.tanh(5 * gate)
        rng = np.random.default_rng(7)
        noise = 0.3 * rng.standard_normal(gate.size)
        return table(
            {
                "V": gate,
                "B": np.full(801, sign * 9.0),
                "T": np.full(801, 1.0),
                "Rxx": along + 0.01 * across + noise,
                "Rxy": across,
            },
            name,
        )

    rules = settings(sweep="gate", gate=ColumnRule("V", "V"))
    family = symmetrise(load_sweeps([record(1, "p.csv"), record(-1, "m.csv")], rules))
    assert len(family.sweeps) == 1
    sweep = family.sweeps[0]
    assert np.std(sweep.signal - 500 - 200 * np.cos(6 * sweep.gate_V)) < 0.5
    assert family.alignments[0].hall_into_xx == pytest.approx(0.01, rel=0.01)


def test_corbino_sweeps_are_conductivities():
    disc = Geometry("corbino", inner_radius_um=100, outer_radius_um=300, lead_ohm=20.0)
    field = np.linspace(0.5, 5, 200)
    sigma = 1e-5 * (1.2 + np.sin(field))
    data = table({"B": field, "T": np.full(200, 0.2), "R": np.log(3) / (2 * np.pi * sigma) + 20})
    sweep = load_sweeps([data], settings(rho_xx=ColumnRule("R", "ohm"), rho_xy=None, geometry=disc)).sweeps[0]
    assert sweep.quantity == "sigma_xx"
    assert sweep.signal == pytest.approx(sigma)


def test_world_is_consistent():
    """The Hall line of the test world at zero field is that of its density."""
    _, hall = landscape(np.array([0.05]))
    assert hall[0] == pytest.approx(0.05 / (1.12e15 * e), rel=1e-6)
    assert h / e**2 == pytest.approx(25812.807, abs=1e-3)
