"""What a folder of files is taken for, and that the study drafted from it loads and runs."""

from __future__ import annotations

import re
import shutil
from pathlib import Path

import h5py
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from gapfit.errors import FileError, StudyError
from gapfit.guessing import guess_columns, guess_current, guess_number_in_names
from gapfit.loading import load_sweeps
from gapfit.recognise import draft_study, recognise_folder, write_study
from gapfit.study import Study, load_study, trace_settings
from gapfit.tabular import ColumnRule, read_table
from gapfit.traces import FromName, FromTable

DEMO = Path(__file__).parents[1] / "datasets_synthetic"
TEMPERATURES = (0.1, 0.25, 0.5)
FIELD = np.linspace(-8.0, 8.0, 161)


def sweep(temperature: float) -> dict[str, np.ndarray]:
    """Columns of an invented sweep: an even resistance with a minimum at 5 T, an odd Hall slope."""
    rng = np.random.default_rng(round(1e3 * temperature))
    rho_xx = 300 * (1 - np.exp(-(((np.abs(FIELD) - 5) / 0.4) ** 2))) * np.abs(FIELD) / 8
    return {
        "B": FIELD,
        "T": temperature * (1 + 1e-3 * rng.standard_normal(FIELD.size)),
        "Vxx_X": 1e-8 * (rho_xx + rng.standard_normal(FIELD.size)),
        "Vxx_Y": 1e-10 * rng.standard_normal(FIELD.size),
        "Vxy_X": 1e-8 * 3000 * FIELD,
    }


def write_sweeps(folder: Path, names: dict[str, str], head: str = "", stem: str = "run{}.txt") -> None:
    """One file per temperature with the wanted columns under the names given for them."""
    folder.mkdir(exist_ok=True)
    for number, temperature in enumerate(TEMPERATURES):
        columns = sweep(temperature)
        body = np.column_stack([columns[key] for key in names])
        heading = "\t".join(names.values())
        lines = ["\t".join(map(repr, row)) for row in body.tolist()]
        text = f"{head}{heading}\n" + "\n".join(lines) + "\n"
        (folder / stem.format(number, f"{temperature:g}".replace(".", "p"))).write_text(text)


def drafted(folder: Path) -> Study:
    return load_study(write_study(recognise_folder(folder)))


PLAIN = {"B": "B (T)", "T": "T (K)", "Vxx_X": "Vxx_X (V)", "Vxx_Y": "Vxx_Y (V)", "Vxy_X": "Vxy_X (V)"}


# --- the demo --------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", ["harebell-3", "harebell-4", "campion-1"])
def test_demo_sweeps_need_no_edit(tmp_path, name):
    folder = tmp_path / name
    shutil.copytree(DEMO / name, folder, ignore=shutil.ignore_patterns("*.toml", "*.json"))
    recognition = recognise_folder(folder)
    assert recognition.open == ()
    assert recognition.sample == name
    got = trace_settings(load_study(write_study(recognition)))
    wanted = trace_settings(load_study(DEMO / name))
    tables = [read_table(path) for path in load_study(folder).files[:2]]
    for key in ("sweep", "current_A", "quadrature"):
        assert getattr(got, key) == getattr(wanted, key)
    for key in ("field", "rho_xx", "rho_xy"):
        found, meant = getattr(got, key), getattr(wanted, key)
        assert tables[0].find(found.column) == tables[0].find(meant.column)
        assert found.unit == meant.unit
    np.testing.assert_array_equal(
        load_sweeps(tables, got).temperatures, load_sweeps(tables, wanted).temperatures
    )


def test_demo_minima_need_no_edit(tmp_path):
    shutil.copy(DEMO / "teasel-2" / "minima.csv", tmp_path / "minima.csv")
    study = drafted(tmp_path)
    assert study.series is not None
    assert study.series.file.name == "minima.csv"
    assert study.geometry.kind == "resistivity"
    assert study.series.columns.model_dump(exclude_none=True) == {}


# --- what columns are ------------------------------------------------------------------------------------


def test_plain_names_and_units(tmp_path):
    write_sweeps(tmp_path, PLAIN, head="# device: harebell-9\n# second cooldown, I = 20 nA rms\n")
    study = drafted(tmp_path)
    traces = study.traces
    assert traces is not None
    assert (study.sample.name, study.sample.cooldown) == ("harebell-9", "second")
    assert (traces.sweep, traces.current_A) == ("field", 2e-8)
    assert traces.temperature == ColumnRule("T", "K")
    assert (traces.rho_xx, traces.rho_xy) == (ColumnRule("Vxx_X", "V"), ColumnRule("Vxy_X", "V"))
    assert traces.quadrature == ColumnRule("Vxx_Y", "V")
    assert len(load_sweeps([read_table(path) for path in study.files], trace_settings(study)).sweeps) > 0


def test_nameless_signals_are_told_by_their_symmetry(tmp_path):
    names = {"B": "B (T)", "T": "T (K)", "Vxy_X": "first", "Vxx_X": "second"}
    write_sweeps(tmp_path, names, head="# current 10 nA\n")
    traces = drafted(tmp_path).traces
    assert traces is not None
    assert traces.rho_xx.column == "second"
    assert traces.rho_xy is not None
    assert traces.rho_xy.column == "first"


def test_files_without_any_heading(tmp_path):
    for number, temperature in enumerate(TEMPERATURES):
        columns = sweep(temperature)
        body = np.column_stack([columns[key] for key in ("B", "T", "Vxx_X", "Vxy_X")])
        np.savetxt(tmp_path / f"{number}.dat", body, fmt="%.9g")
    recognition = recognise_folder(tmp_path)
    assert recognition.open == ("current_A",)
    traces = load_study(write_study(recognition)).traces
    assert traces is not None
    assert (traces.field, traces.temperature) == (ColumnRule("1", "T"), ColumnRule("2", "K"))
    assert (traces.rho_xx, traces.rho_xy) == (ColumnRule("3", "V"), ColumnRule("4", "V"))


def test_temperature_from_the_file_names(tmp_path):
    names = {key: value for key, value in PLAIN.items() if key != "T"}
    write_sweeps(tmp_path, names, head="# current 10 nA\n", stem="b{}_T{}K.txt")
    settings = trace_settings(drafted(tmp_path))
    assert settings.temperature == FromName("_T(?P<value>[0-9p.,]+)K", "K")
    tables = [read_table(path) for path in load_study(tmp_path).files]
    family = load_sweeps(tables, settings)
    np.testing.assert_allclose(np.unique(family.temperatures), TEMPERATURES, rtol=1e-12)


def test_temperature_from_a_table(tmp_path):
    names = {key: value for key, value in PLAIN.items() if key != "T"}
    write_sweeps(tmp_path, names, head="# current 10 nA\n")
    (tmp_path / "cold.csv").write_text("file,T_mK\nrun0.txt,100\nrun1.txt,250\nrun2.txt,500\n")
    settings = trace_settings(drafted(tmp_path))
    assert isinstance(settings.temperature, FromTable)
    assert settings.temperature.table.source.name == "cold.csv"


def test_what_is_not_found_is_marked_and_loads(tmp_path):
    write_sweeps(tmp_path, {"B": "B (T)", "Vxx_X": "Vxx_X (V)"})
    recognition = recognise_folder(tmp_path)
    assert recognition.open == ("temperature", "current_A")
    text = draft_study(recognition)
    assert text.count("# EDIT:") == 2
    assert "2 marked EDIT" in text
    study = load_study(write_study(recognition))
    with pytest.raises(FileError, match=r"'FILL IN'.*no such column"):
        load_sweeps([read_table(path) for path in study.files], trace_settings(study))


def test_ohms_need_no_current(tmp_path):
    write_sweeps(tmp_path, {"B": "B (T)", "T": "T (mK)", "Vxx_X": "Rxx (kohm)", "Vxy_X": "Rxy (kohm)"})
    traces = drafted(tmp_path).traces
    assert traces is not None
    assert traces.current_A is None
    assert traces.rho_xx == ColumnRule("Rxx", "kohm")


def test_a_magnitude_is_passed_over_or_said_to_be_one(tmp_path):
    both = tmp_path / "both"
    write_sweeps(both, {"B": "B (T)", "T": "T (K)", "Vxy_X": "Vxy_X (V)", "Vxx_X": "Vxx_X (V)"})
    for path in both.iterdir():
        lines = path.read_text().splitlines()
        rows = [f"{abs(float(line.split(chr(9))[3]))!r}\t{line}" for line in lines[1:]]
        path.write_text("\n".join([f"Vxx_R (V)\t{lines[0]}", *rows]) + "\n")
    assert trace_settings(drafted(both)).rho_xx.column == "Vxx_X"
    alone = tmp_path / "alone"
    alone.mkdir()
    for path in both.glob("*.txt"):
        cells = [line.split("\t")[:3] for line in path.read_text().splitlines()]
        (alone / path.name).write_text("\n".join("\t".join(row) for row in cells) + "\n")
    recognition = recognise_folder(alone)
    assert any("MAGNITUDE" in notice for notice in recognition.notices)


def test_gate_sweeps_with_the_field_in_the_name(tmp_path):
    gate = np.linspace(-3, 3, 101)
    for field in (6, 9):
        for temperature in (1, 2):
            body = np.column_stack([gate, 1e-6 * np.cos(gate), 1e-6 * gate])
            path = tmp_path / f"gate_B{field}T_T{temperature}p5K.dat"
            np.savetxt(path, body, header="Vg (V)  Vxx (V)  Vxy (V)\n excitation 5 nA", comments="# ")
    traces = drafted(tmp_path).traces
    assert traces is not None
    assert traces.sweep == "gate"
    assert traces.gate == ColumnRule("Vg", "V")
    assert traces.current_A == 5e-9
    settings = trace_settings(load_study(tmp_path))
    assert settings.field == FromName("_B(?P<value>[0-9p.,]+)T", "T")
    assert settings.temperature == FromName("_T(?P<value>[0-9p.,]+)K", "K")


def test_one_hdf5_file_of_many_sweeps(tmp_path):
    with h5py.File(tmp_path / "all.h5", "w") as file:
        for temperature in TEMPERATURES:
            for key, values in sweep(temperature).items():
                file[f"at {temperature}/{key}"] = values
    recognition = recognise_folder(tmp_path)
    traces = load_study(write_study(recognition)).traces
    assert traces is not None
    assert [path.name for path in traces.files] == ["all.h5"]
    assert traces.temperature == ColumnRule("T", "K")
    assert recognition.open == ("current_A",)


def test_series_with_other_names(tmp_path):
    (tmp_path / "read_off.csv").write_text(
        "nu;B (T);Temp (mK);Temp error (mK);Rmin (kohm);Rmin error (kohm)\n"
        "1/3;12;100;1;0.5;0.1\n1/3;12;200;1;0.9;0.1\n1;4;100;1;0.5;0.1\n"
    )
    series = drafted(tmp_path).series
    assert series is not None
    columns = {key: rule for key, rule in series.columns if rule is not None}
    assert {key: (rule.column, rule.unit) for key, rule in columns.items()} == {
        "filling": ("nu", None),
        "field_T": ("B", "T"),
        "temperature_K": ("Temp", "mK"),
        "temperature_error_K": ("Temp error", "mK"),
        "rho_xx_ohm": ("Rmin", "kohm"),
        "rho_xx_ohm_error": ("Rmin error", "kohm"),
    }


# --- folders ---------------------------------------------------------------------------------------------


def test_other_files_are_left_out_and_named(tmp_path):
    write_sweeps(tmp_path, PLAIN, head="# current 10 nA\n")
    (tmp_path / "calibration.txt").write_text("x,y\n1,2\n3,4\n")
    (tmp_path / "README.txt").write_text("These are the sweeps.\n")
    (tmp_path / ".hidden.txt").write_text("x,y\n1,2\n")
    (tmp_path / "photo.png").write_bytes(b"\x89PNG")
    recognition = recognise_folder(tmp_path)
    study = load_study(write_study(recognition))
    assert [path.name for path in study.files] == ["run0.txt", "run1.txt", "run2.txt"]
    said = "\n".join(recognition.notices)
    assert "calibration.txt: other columns" in said
    assert "README.txt" in said
    assert "photo" not in said


def test_an_existing_study_is_never_overwritten(tmp_path):
    write_sweeps(tmp_path, PLAIN, head="# current 10 nA\n")
    (tmp_path / "study.toml").write_text("precious = true\n")
    with pytest.raises(StudyError, match="study file already"):
        write_study(recognise_folder(tmp_path))
    assert (tmp_path / "study.toml").read_text() == "precious = true\n"


def test_folders_with_nothing_to_use(tmp_path):
    with pytest.raises(FileError, match="no such folder"):
        recognise_folder(tmp_path / "none")
    with pytest.raises(FileError, match="no data files were found"):
        recognise_folder(tmp_path)
    (tmp_path / "a.txt").write_text("words only\n")
    with pytest.raises(FileError, match=r"a\.txt: no rows of numbers"):
        recognise_folder(tmp_path)
    (tmp_path / "b.txt").write_text("x,y\n1,2\n3,4\n")
    with pytest.raises(FileError, match="no sweeps"):
        recognise_folder(tmp_path)


# --- names and comments ----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("comment", "current"),
    [
        ("current 10 nA", 1e-8),
        ("excitation: 0.5 µA, 17 Hz", 5e-7),
        ("I = 2,5 nA", 2.5e-9),
        ("I_ac=1e-9 A", 1e-9),
        ("drive current (rms) 100 pA", 1e-10),
    ],
)
def test_currents_in_comments(tmp_path, comment, current):
    path = tmp_path / "a.dat"
    path.write_text(f"# {comment}\nB\tV\n1\t2\n3\t4\n", encoding="utf-8")
    assert guess_current([read_table(path)]) == (pytest.approx(current, rel=1e-12),)


@pytest.mark.parametrize("comment", ["magnet current of 90 A was not reached", "Hall 10 nA", "I saw 10 nAs"])
def test_no_currents_in_comments(tmp_path, comment):
    path = tmp_path / "a.dat"
    path.write_text(f"# {comment}\nB\tV\n1\t2\n3\t4\n")
    assert guess_current([read_table(path)]) == ()


@given(
    values=st.lists(st.integers(10, 99_999), min_size=2, max_size=6, unique=True),
    before=st.sampled_from(["T", "run_T", "x-", "sweep_", ""]),
    mark=st.sampled_from([".", "p"]),
    unit=st.sampled_from(["mK", "K"]),
)
def test_numbers_in_names_are_found_again(values, before, mark, unit):
    texts = [f"{value / 10:g}".replace(".", mark) for value in values]
    names = [f"{before}{text}{unit}.dat" for text in texts]
    found = guess_number_in_names(names, ("mK", "K"))
    assert found is not None
    assert found[1] == unit
    matches = [re.search(found[0], name) for name in names]
    assert [match["value"] for match in matches if match is not None] == texts


def test_names_without_a_common_unit_tell_nothing():
    assert guess_number_in_names(["a_100mK.dat", "a_2K.dat"], ("mK", "K")) is None
    assert guess_number_in_names(["a_1Keithley.dat"], ("mK", "K")) is None


def test_every_role_is_given_once(tmp_path):
    write_sweeps(tmp_path, PLAIN)
    guesses = guess_columns([read_table(path) for path in sorted(tmp_path.iterdir())])
    roles = [guess.role for guess in guesses if guess.role != "other"]
    assert sorted(roles) == ["field", "quadrature", "rho_xx", "rho_xy", "temperature"]
    assert [guess.swept for guess in guesses if guess.role == "field"] == [True]
