"""Wrong input at the command line: one clear message, exit code 1, nothing left behind."""

from __future__ import annotations

import random
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from command_line import (
    SWEEPS,
    Change,
    cell,
    column,
    contents,
    every,
    lines,
    run,
    series_study,
    swap,
    traces_study,
)

MINIMA, STUDY, SECOND = "minima.csv", "study.toml", SWEEPS[1]


def refused(folder: Path, *needles: str, command: str = "fit") -> str:
    """The message of a refused study, after checking everything that any refusal must do."""
    before = contents(folder.parent)
    ran = run(command, folder, *(["--jobs", "1"] if command == "fit" else []))
    assert ran.code == 1, ran
    assert ran.out == ""
    assert ran.err.startswith("gapfit: ")
    assert ran.err.count("\n") == 1, "one message of one line"
    assert "Traceback" not in ran.err
    for needle in needles:
        assert needle in ran.err
    assert contents(folder.parent) == before, "something was left behind"
    return ran.err


def _guessed_errors(folder: Path) -> None:
    head, *rows = (folder / MINIMA).read_text().splitlines()
    text = "\n".join([f"{head},error_source", *(f"{row},guess" for row in rows)])
    (folder / MINIMA).write_text(text + "\n")


def mixed(rows: list[str]) -> list[str]:
    return random.Random(1).sample(rows, len(rows))


# --- minima already read off -----------------------------------------------------------------------------

IN_SERIES: dict[str, tuple[Change, tuple[str, ...]]] = {
    "no column of readings": (
        swap(MINIMA, "rho_xx_ohm,", "R,"),
        ("minima.csv", "needs a column rho_xx_ohm or sigma_xx_S", "found filling, field_T, temperature_K"),
    ),
    "no column of temperatures": (
        swap(MINIMA, "temperature_K", "temp"),
        ("column 'temperature_K'", "there is no such column", "the columns are filling, field_T, temp"),
    ),
    "no column of fillings": (
        swap(MINIMA, "filling", "state"),
        ("column 'filling'", "there is no such column"),
    ),
    "text among the readings": (
        cell(MINIMA, 5, "rho_xx_ohm", "overload"),
        ("row 5, column 'rho_xx_ohm'", "'overload'", "correct or remove this row"),
    ),
    "text in the first row": (
        cell(MINIMA, 2, "rho_xx_ohm", "overload"),
        ("row 2, column 'rho_xx_ohm'", "'overload'"),
    ),
    "text among the temperatures": (
        cell(MINIMA, 5, "temperature_K", "cold"),
        ("row 5, column 'temperature_K'", "'cold'"),
    ),
    "NaN reading": (
        cell(MINIMA, 5, "rho_xx_ohm", "NaN"),
        ("row 5, column 'rho_xx_ohm'", "found NaN", "remove the row"),
    ),
    "empty reading": (cell(MINIMA, 5, "rho_xx_ohm", ""), ("row 5, column 'rho_xx_ohm'", "remove the row")),
    "NaN temperature": (cell(MINIMA, 5, "temperature_K", "nan"), ("row 5, column 'temperature_K'", "NaN")),
    "infinite reading": (cell(MINIMA, 5, "rho_xx_ohm", "inf"), ("row 5, column 'rho_xx_ohm'", "inf")),
    "error of zero": (
        cell(MINIMA, 5, "rho_xx_ohm_error", "0"),
        ("row 5, column 'rho_xx_ohm_error'", "found 0", "must be above zero"),
    ),
    "temperature of zero": (
        cell(MINIMA, 5, "temperature_K", "0"),
        ("row 5, column 'temperature_K'", "0 K", "must be above zero"),
    ),
    "negative temperature": (
        cell(MINIMA, 5, "temperature_K", "-0.3"),
        ("row 5, column 'temperature_K'", "-0.3 K", "must be above zero"),
    ),
    "temperature twice": (
        cell(MINIMA, 5, "temperature_K", "0.33"),
        ("row 5, column 'temperature_K'", "1/3, 0.33 K", "row 4 already", "remove one row"),
    ),
    "millikelvins called kelvins": (
        column(MINIMA, "temperature_K", lambda kelvin: 1000 * kelvin),
        ("row 2, column 'temperature_K'", "found 200", "millikelvins", "convert"),
    ),
    "one temperature in millikelvins": (
        cell(MINIMA, 12, "temperature_K", "330"),
        ("row 12, column 'temperature_K'", "found 330 K", "1.45 K", "mixed"),
    ),
    "one temperature only": (
        lines(MINIMA, lambda rows: rows[:1]),
        ("minima.csv, row 2", "filling 1/3 at 13.", "1 temperature", "at least 3"),
    ),
    "two temperatures": (
        lines(MINIMA, lambda rows: rows[:2]),
        ("minima.csv, row 2", "2 temperature", "at least 3"),
    ),
    "a field of its own": (
        cell(MINIMA, 5, "field_T", "12"),
        ("minima.csv, row 5", "filling 1/3 at 12 T has 1 temperature", "rows of one series share filling"),
    ),
    "unknown fraction": (
        cell(MINIMA, 5, "filling", "one third"),
        ("row 5, column 'filling'", "'one third' is no filling factor", "such as '1/3'"),
    ),
    "decimal filling": (cell(MINIMA, 5, "filling", "0.333"), ("row 5, column 'filling'", "'0.333'")),
    "denominator zero": (cell(MINIMA, 5, "filling", "1/0"), ("row 5, column 'filling'", "denominator zero")),
    "filling that the file lacks": (
        swap(STUDY, "[fit]", '[fillings]\nlook_for = ["3/7"]\n[fit]'),
        ("filling 3/7 is looked for", "which has 1/3, 2/5, 1"),
    ),
    "unknown source of errors": (
        _guessed_errors,
        ("row 2, column 'error_source'", "found 'guess'", "allowed are stated, trace, assumed"),
    ),
    "too long a row below the heading": (
        swap(MINIMA, "\n1/3,", "\n1/3,9,9,"),
        ("row 2", "found 8 values", "have 6"),
    ),
    "too short a row": (
        lines(MINIMA, lambda rows: [*rows[:3], "1/3,9", *rows[3:]]),
        ("row 5", "found 2 values"),
    ),
    "heading only": (lines(MINIMA, lambda rows: []), ("minima.csv", "no rows of numbers")),
    "empty file": (lambda folder: (folder / MINIMA).write_text(""), ("minima.csv", "the file is empty")),
    "no file": (
        lambda folder: (folder / MINIMA).unlink(),
        ("study.toml, line 10, key 'series.file'", "no file 'minima.csv'", "holds study.toml"),
    ),
    "no data file": (
        lambda folder: (folder / MINIMA).write_bytes(bytes(range(256)) * 40),
        ("minima.csv", "neither text nor HDF5 nor NetCDF"),
    ),
    "spreadsheet": (
        lambda folder: (folder / MINIMA).write_bytes(b"PK\x03\x04" + bytes(100)),
        ("minima.csv", "export the data as delimited text"),
    ),
    "renamed column that is not there": (
        swap(STUDY, "[thermometry]", '[series.columns]\ntemperature_K = "T_bath"\n[thermometry]'),
        ("minima.csv, column 'T_bath'", "there is no such column"),
    ),
    "pinned window without readings": (
        swap(STUDY, "seed = 11", "window = { low_K = 5.0, high_K = 9.0 }"),
        ("filling 1/3", "window 5 to 9 K", "0 of 9 readings", "at least three"),
    ),
}


@pytest.mark.parametrize("name", IN_SERIES)
def test_wrong_minima(name, tmp_path):
    change, needles = IN_SERIES[name]
    folder = series_study(tmp_path / "study")
    change(folder)
    refused(folder, *needles)


# --- raw sweeps ------------------------------------------------------------------------------------------


def _magnitude(folder: Path) -> None:
    for file in SWEEPS:
        every(column(file, "Rxx", abs), swap(file, "Rxx", "R_mag"))(folder)
    swap(STUDY, '"Rxx"', '"R_mag"')(folder)


IN_SWEEPS: dict[str, tuple[Change, tuple[str, ...]]] = {
    "missing column": (
        swap(SECOND, "Rxx", "Rx"),
        ("run2.csv, column 'Rxx'", "did you mean 'Rx'", "the columns are B, T, Rx, Rxy"),
    ),
    "text among numbers": (
        cell(SECOND, 5, "Rxx", "OVLD"),
        ("run2.csv, row 5, column 'Rxx'", "'OVLD'", "a number is expected"),
    ),
    "NaN reading": (cell(SECOND, 5, "Rxx", "nan"), ("run2.csv, row 5, column 'Rxx'", "found NaN")),
    "NaN field": (cell(SECOND, 5, "B", "nan"), ("run2.csv, row 5, column 'B'", "found NaN")),
    "temperature of zero": (
        cell(SECOND, 5, "T", "0"),
        ("run2.csv, row 5, column 'T'", "0 K", "must be above zero"),
    ),
    "negative temperature": (cell(SECOND, 5, "T", "-0.1"), ("run2.csv, row 5, column 'T'", "-0.1 K")),
    "millikelvins called kelvins": (
        every(*(column(file, "T", lambda kelvin: 1000 * kelvin) for file in SWEEPS)),
        ("run3.csv, row 2, column 'T'", "400 K", "millikelvins", 'unit = "mK"'),
    ),
    "one file in millikelvins": (
        column(SECOND, "T", lambda kelvin: 1000 * kelvin),
        ("run2.csv", "250 K", "0.6 K", "mixed"),
    ),
    "constant field": (
        column(SECOND, "B", lambda field: 5.0),
        ("run2.csv, row 2, column 'B'", "found 5 in every row", "name the column that is swept"),
    ),
    "field to and fro": (lines(SECOND, mixed), ("run2.csv, column 'B'", "to and fro", "in the order")),
    "one temperature only": (
        every(*(column(file, "T", lambda kelvin: 0.3) for file in SWEEPS)),
        ("study.toml", "4 file(s) are at 0.3 K only", "at least 3 temperatures"),
    ),
    "one file only": (
        every(*((lambda folder, file=file: (folder / file).unlink()) for file in SWEEPS[1:])),
        ("study.toml", "1 file(s) are at 0.15 K only", "at least 3 temperatures"),
    ),
    "nearly one temperature": (
        every(*(column(f, "T", lambda kelvin, i=i: 0.3 + 0.001 * i) for i, f in enumerate(SWEEPS))),
        ("at 0.3 and 0.303 K only",),
    ),
    "filling outside the sweeps": (
        swap(STUDY, '["2/3", "1"]', '["1/5", "1"]'),
        ("filling 1/5 lies outside the sweeps", "nu = 0.51", "remove it from look_for"),
    ),
    "empty file": (lambda folder: (folder / SECOND).write_text(""), ("run2.csv", "the file is empty")),
    "no file": (
        swap(STUDY, "sweeps/*.csv", "sweeps/*.dat"),
        ("line 9, key 'traces.files'", "no file matches 'sweeps/*.dat'", "holds run1.csv, run2.csv"),
    ),
    "volts without a current": (
        swap(STUDY, 'unit = "ohm"', 'unit = "V"'),
        ("study.toml, line 8", "rho_xx in volts needs current_A"),
    ),
    "volts in the heading without a current": (
        every(swap(STUDY, ', unit = "ohm"', ""), *(swap(file, "Rxx", "Rxx (V)") for file in SWEEPS)),
        ("run1.csv, column 'Rxx'", "voltage", "current_A"),
    ),
    "lock-in magnitude": (_magnitude, ("run1.csv, column 'R_mag'", "magnitude of a lock-in", "in-phase")),
    "temperature in tesla": (
        swap(STUDY, 'unit = "K"', 'unit = "mT"'),
        ("line 11, key 'traces.temperature'", "unit 'mT' cannot be used", "K, mK, uK"),
    ),
    "density that the Hall signal contradicts": (
        swap(STUDY, 'host = "GaAs"', "density_cm2 = 5e11"),
        ("density_cm2 = 5e+11", "the Hall resistance says 1.12e+11", "correct or remove"),
    ),
    "sweeps of the other direction": (
        swap(STUDY, 'sweep = "field"', 'direction = "down"'),
        ("direction = 'down' leaves no sweep",),
    ),
}


@pytest.mark.parametrize("name", IN_SWEEPS)
def test_wrong_sweeps(name, tmp_path):
    change, needles = IN_SWEEPS[name]
    folder = traces_study(tmp_path / "study")
    change(folder)
    refused(folder, *needles, command="minima" if name == "missing column" else "fit")


def falling(rows: list[str]) -> list[str]:
    return rows[::-1]


def test_falling_sweeps_are_as_good_as_rising_ones(tmp_path):
    rising, fallen = traces_study(tmp_path / "up"), traces_study(tmp_path / "down")
    every(*(lines(file, falling) for file in SWEEPS))(fallen)
    for folder in (rising, fallen):
        assert run("minima", folder, "--out", folder / "read", "--quiet").code == 0
    up, down = ((folder / "read/series.csv").read_text() for folder in (rising, fallen))
    assert _readings(down) == pytest.approx(_readings(up), rel=1e-6)
    assert "up" in up
    assert "down" in down


def _readings(text: str) -> np.ndarray:
    head, *rows = [line.split(",") for line in text.splitlines()]
    places = [head.index(name) for name in ("field_T", "temperature_K", "rho_xx_ohm", "rho_xx_ohm_error")]
    return np.array([[float(row[place]) for place in places] for row in rows])


# --- the study file --------------------------------------------------------------------------------------

IN_STUDY: dict[str, tuple[Change, tuple[str, ...]]] = {
    "unknown key": (
        swap(STUDY, "seed", "sead"),
        ("study.toml, line 18, key 'fit.sead'", "did you mean 'seed'", "allowed here are quantity"),
    ),
    "unknown fraction": (
        swap(STUDY, "[fit]", '[fillings]\nlook_for = ["a third"]\n[fit]'),
        ("line 16, key 'fillings.look_for'", "'a third' is no filling factor", "such as '1/3'"),
    ),
    "unknown engine": (swap(STUDY, '"fast"', '"quick"'), ("line 16, key 'fit.engine'", "'mcmc' or 'fast'")),
    "unknown mechanism": (
        swap(STUDY, '"activation",', '"activation + magic",'),
        ("key 'fit.mechanisms'", "unknown mechanism 'magic'"),
    ),
    "no TOML": (swap(STUDY, '"fast"', "fast"), ("study.toml, line 16", "no valid TOML", "'engine = fast'")),
    "data instead of a study": (
        lambda folder: (folder / STUDY).write_bytes((folder / MINIMA).read_bytes()),
        ("study.toml, line 1", "no valid TOML"),
    ),
    "both sources": (
        swap(
            STUDY,
            "[thermometry]",
            '[traces]\nfiles = ["minima.csv"]\ntemperature = 1.0\nfield = "field_T"\nrho_xx = "rho_xx_ohm"\n'
            "[thermometry]",
        ),
        ("study.toml", "both of [traces] and [series]", "a study needs one"),
    ),
    "no source": (
        lambda folder: (folder / STUDY).write_text('[sample]\nname = "clover-1"\n'),
        ("study.toml", "neither of [traces] and [series]"),
    ),
    "empty study": (lambda folder: (folder / STUDY).write_text(""), ("key 'sample'", "is missing")),
    "no study": (lambda folder: (folder / STUDY).unlink(), ("no study.toml in this folder", "gapfit new")),
}


@pytest.mark.parametrize("command", ["fit", "minima"])
@pytest.mark.parametrize("name", IN_STUDY)
def test_wrong_study(name, command, tmp_path):
    change, needles = IN_STUDY[name]
    folder = series_study(tmp_path / "study")
    change(folder)
    refused(folder, *needles, command=command)


def test_study_that_is_not_there(tmp_path):
    refused(tmp_path / "none.toml", "none.toml", "there is no such file", "check the name")


# --- the command line ------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("arguments", "needle"),
    [
        (["--engine", "quick"], "'quick' is no engine; choose mcmc or fast"),
        (["--enigne", "fast"], "No such option"),
        (["--jobs", "-1"], "--jobs"),
        (["--seed", "-1"], "--seed"),
        (["--seed", "one"], "--seed"),
    ],
)
def test_wrong_usage_ends_with_two(arguments, needle, tmp_path):
    folder = series_study(tmp_path / "study")
    before = contents(tmp_path)
    ran = run("fit", folder, *arguments)
    assert (ran.code, ran.out) == (2, "")
    assert needle in ran.err
    assert contents(tmp_path) == before


@pytest.mark.parametrize("arguments", [["fit"], ["fti", "study"], ["table"], ["new"], ["simulate"]])
def test_missing_arguments_end_with_two(arguments):
    assert run(*arguments).code == 2


def test_shell_sees_one_line_and_code_one(tmp_path):
    folder = series_study(tmp_path / "study")
    cell(MINIMA, 5, "rho_xx_ohm", "overload")(folder)
    command = [sys.executable, "-m", "gapfit", "fit", str(folder), "--jobs", "2"]
    root = Path(__file__).parent.parent
    ran = subprocess.run(command, capture_output=True, text=True, check=False, cwd=root)
    assert (ran.returncode, ran.stdout) == (1, "")
    assert ran.stderr == (
        f"gapfit: {folder / MINIMA}, row 5, column 'rho_xx_ohm': found the text 'overload' where a number is "
        "expected; correct or remove this row\n"
    )
