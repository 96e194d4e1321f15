"""Tables of minima already read off, and back into such tables."""

from __future__ import annotations

import csv
from fractions import Fraction

import numpy as np
import pytest

from gapfit.errors import FileError, NotEnoughData
from gapfit.readoff import SERIES_TEXT_COLUMNS, SeriesSettings, series_from_table, series_to_columns
from gapfit.series import ExcludedPoint, make_series
from gapfit.tabular import read_table

HEAD = "filling,field_T,temperature_K,rho_xx_ohm,rho_xx_ohm_error"
ROWS = [
    "1/3,12.9,0.1,-0.4,0.3",
    "1/3,12.9,0.2,5,0.3",
    "1/3,12.9,0.4,90,1",
    "1,4.3,0.1,1,0.3",
    "1,4.3,0.2,8,0.3",
]


def read(path):
    return read_table(path, missing="keep", text_columns=SERIES_TEXT_COLUMNS)


def written(folder, head=HEAD, rows=(), name="minima.csv"):
    path = folder / name
    path.write_text("\n".join([head, *rows]) + "\n")
    return read(path)


def test_series_by_filling(tmp_path):
    table = written(tmp_path, rows=[*ROWS, "1,4.3,0.4,120,1"])
    third, one = series_from_table(table, SeriesSettings(sample="s", cooldown="c"))
    assert (third.filling, one.filling) == (Fraction(1, 3), Fraction(1))
    assert third.value == pytest.approx([-0.4, 5, 90])
    assert third.error == pytest.approx([0.3, 0.3, 1])
    assert (third.field_T, third.sample, third.cooldown) == (12.9, "s", "c")
    assert third.error_source == "stated"
    assert third.flags == ("no_temperature_error",)


def test_columns_tell_series_apart(tmp_path):
    head = "filling,field_T,temperature_K,rho_xx_ohm,contacts,drive_current_A"
    rows = [
        f"1/3,12.9,{kelvin},{100 * kelvin},{contacts},{current}"
        for contacts in "ab"
        for current in (1e-9, 1e-8)
        for kelvin in (0.1, 0.2, 0.4)
    ]
    series = series_from_table(written(tmp_path, head, rows))
    keys = [(one.contacts, one.drive_current_A) for one in series]
    assert keys == [("a", 1e-9), ("a", 1e-8), ("b", 1e-9), ("b", 1e-8)]


def test_missing_errors_are_assumed_and_flagged(tmp_path):
    head = "filling,temperature_K,rho_xx_ohm"
    series = series_from_table(written(tmp_path, head, ["1/3,0.1,1", "1/3,0.2,10", "1/3,0.4,100"]))[0]
    assert series.error_source == "assumed"
    assert "errors_assumed" in series.flags
    assert np.isnan(series.field_T)


def test_temperature_errors_add_in_quadrature(tmp_path):
    head = "filling,temperature_K,temperature_error_K,rho_xx_ohm,rho_xx_ohm_error"
    rows = [f"1/3,{kelvin},0.003,{kelvin},0.1" for kelvin in (0.1, 0.2, 0.4)]
    table = written(tmp_path, head, rows)
    series = series_from_table(
        table, SeriesSettings(temperature_relative_error=0.01, relative_reading_error=0.5)
    )
    assert series[0].temperature_error == pytest.approx(np.hypot(0.003, [0.001, 0.002, 0.004]))
    assert series[0].error == pytest.approx(np.hypot(0.1, [0.05, 0.1, 0.2]))


def test_large_resistivities_become_conductivities(tmp_path):
    rows = ["2,4,0.1,10,1", "2,4,0.2,100,1", "2,4,0.4,3000,1"]
    series = series_from_table(written(tmp_path, rows=rows))[0]
    hall = 25812.807 / 2
    assert series.quantity == "sigma_xx"
    assert series.value == pytest.approx([r / (r**2 + hall**2) for r in (10, 100, 3000)], rel=1e-7)
    kept = series_from_table(written(tmp_path, rows=rows), SeriesSettings(quantity="rho_xx"))[0]
    assert kept.quantity == "rho_xx"


def test_conductivities_are_taken_as_they_are(tmp_path):
    head = "filling,field_T,temperature_K,sigma_xx_S,sigma_xx_S_error"
    series = series_from_table(written(tmp_path, head, [f"2,4,{k},{1e-6 * k},1e-8" for k in (1, 2, 3)]))[0]
    assert (series.quantity, series.unit) == ("sigma_xx", "S")
    assert series.value == pytest.approx([1e-6, 2e-6, 3e-6])


@pytest.mark.parametrize(
    ("row", "column", "message"),
    [
        ("third,12.9,0.8,3,1", "filling", "no filling factor"),
        ("0.333,12.9,0.8,3,1", "filling", "no filling factor"),
        ("0,12.9,0.8,3,1", "filling", "no Hall plateau"),
        ("1/3,12.9,-0.8,3,1", "temperature_K", "above zero"),
        ("1/3,12.9,0,3,1", "temperature_K", "above zero"),
        ("1/3,12.9,800,3,1", "temperature_K", "millikelvins"),
        ("1/3,12.9,0.2,3,1", "temperature_K", "row 3"),
        ("1/3,12.9,0.8,3,0", "rho_xx_ohm_error", "above zero"),
        ("1/3,12.9,0.8,nan,1", "rho_xx_ohm", "NaN"),
    ],
)
def test_bad_rows_are_refused_with_row_and_column(tmp_path, row, column, message):
    with pytest.raises(FileError, match=message) as caught:
        series_from_table(written(tmp_path, rows=[*ROWS[:3], row]))
    assert (caught.value.row, caught.value.column) == (5, column)


def test_millikelvins_below_350_are_seen_at_fractions(tmp_path):
    rows = [f"1/3,12.9,{kelvin},3,1" for kelvin in (60, 120, 300)]
    with pytest.raises(FileError, match="millikelvins"):
        series_from_table(written(tmp_path, rows=rows))
    warm = [f"2,12.9,{kelvin},3,1" for kelvin in (60, 120, 300)]
    assert series_from_table(written(tmp_path, rows=warm))[0].n_point == 3


def test_text_in_a_number_column(tmp_path):
    with pytest.raises(FileError) as caught:
        series_from_table(written(tmp_path, rows=[*ROWS[:3], "1/3,12.9,0.8,high,1"]))
    assert caught.value.column == "rho_xx_ohm"


def test_missing_columns(tmp_path):
    with pytest.raises(FileError, match="rho_xx_ohm or sigma_xx_S"):
        series_from_table(written(tmp_path, "filling,temperature_K", ["1/3,0.1"]))
    with pytest.raises(FileError, match="temperature_K"):
        series_from_table(written(tmp_path, "filling,rho_xx_ohm", ["1/3,0.1"]))
    with pytest.raises(FileError, match="filling"):
        series_from_table(written(tmp_path, "temperature_K,rho_xx_ohm", ["0.1,1"]))


def test_one_temperature_only(tmp_path):
    rows = [f"1/3,12.9,0.2,{value},1,{name}" for value, name in ((1, "up"), (2, "down"))]
    with pytest.raises(NotEnoughData, match="at least 3"):
        series_from_table(written(tmp_path, HEAD + ",direction", rows))


def test_written_series_are_read_back(tmp_path):
    """Used readings to the last digit, excluded ones with their reason, both quantities in one table."""
    temperature = np.array([0.1, 0.2, 0.3, 0.55])
    first = make_series(
        temperature, [-0.5, 1 / 3, 7.0, 80.0], [0.3, 0.3, 0.4, 1.0],
        filling=Fraction(1, 3), temperature_error=0.01 * temperature, field_T=12.9, sample="s, one",
        cooldown="first", contacts="3-5", drive_current_A=1e-8, direction="up", reading="mean",
        flags=("reading_matters",),
        excluded=(ExcludedPoint(0.05, 3.0, 0.2, "heating"), ExcludedPoint(0.9, np.nan, np.nan, "sweep ends")),
    )  # fmt: skip
    second = make_series(
        temperature, [1e-7, 2e-7, 3e-6, 1e-5], 1e-8, filling=Fraction(2), quantity="sigma_xx", field_T=4.0,
        temperature_error=0.0, sample="s, one", hall_resistance_ohm=12800.0,
    )  # fmt: skip
    columns = series_to_columns([first, second])
    path = tmp_path / "series.csv"
    with path.open("w", newline="") as file:
        writer = csv.writer(file)
        writer.writerow(columns)
        writer.writerows(zip(*columns.values(), strict=True))
    for before, after in zip((first, second), series_from_table(read(path)), strict=True):
        for name in ("temperature", "value", "error", "temperature_error"):
            assert np.array_equal(getattr(before, name), getattr(after, name))
        for name in ("filling", "field_T", "quantity", "hall_resistance_ohm", "reading", "sample", "cooldown",
                     "contacts", "direction", "flags", "total_field_T"):  # fmt: skip
            assert getattr(before, name) == getattr(after, name), name
        assert str(before.excluded) == str(after.excluded)
        assert str(before.drive_current_A) == str(after.drive_current_A)
