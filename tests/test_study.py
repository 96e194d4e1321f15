"""The study file: what is right is taken over exactly, what is wrong is told in plain words."""

from __future__ import annotations

import json
import math
from fractions import Fraction
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from scipy.constants import elementary_charge

from gapfit.complaints import key_lines
from gapfit.errors import StudyError
from gapfit.study import Study, load_study, study_as_dict, trace_settings
from gapfit.tabular import ColumnRule
from gapfit.traces import FromName, FromTable, Geometry

TRACES = """\
[sample]
name = "harebell-9"
cooldown = "first"
host = "gaas"
density_cm2 = 1.1e11

[geometry]
kind = "hall-bar"
length_um = 400
width_um = 100

[traces]
files = ["sweeps/*.csv"]
temperature = { column = "T_mK", unit = "mK" }
field = { column = "B", unit = "T", scale = 10 }
rho_xx = { column = "Vxx_X", unit = "V" }
current_A = 1e-8

[fillings]
look_for = ["1/3", "2/5", 1]

[thermometry]
relative_error = 0.01

[fit]
seed = 7
"""
SERIES = '[sample]\nname = "teasel-9"\n[series]\nfile = "minima.csv"\n'


@pytest.fixture
def folder(tmp_path) -> Path:
    (tmp_path / "sweeps").mkdir()
    for number in (10, 2, 1):
        (tmp_path / f"sweeps/run{number}.csv").write_text("B,T_mK,Vxx_X\n1,60,1e-6\n2,60,1e-6\n")
    (tmp_path / "minima.csv").write_text("filling,temperature_K,rho_xx_ohm\n1/3,0.1,5\n")
    (tmp_path / "temperatures.csv").write_text("file,T_mK\nrun1.csv,60\nrun2.csv,70\nrun10.csv,80\n")
    return tmp_path


def load(folder: Path, text: str) -> Study:
    (folder / "study.toml").write_text(text, encoding="utf-8")
    return load_study(folder / "study.toml")


def fails(folder: Path, text: str, match: str) -> StudyError:
    with pytest.raises(StudyError, match=match) as caught:
        load(folder, text)
    return caught.value


def swapped(old: str, new: str, text: str = TRACES) -> str:
    assert old in text
    return text.replace(old, new)


# --- what is right ---------------------------------------------------------------------------------------


def test_a_traces_study(folder):
    study = load(folder, TRACES)
    assert study.sample.host == "GaAs"
    assert study.sample.density_per_m2 == pytest.approx(1.1e15, rel=1e-15)
    assert study.traces is not None
    assert [path.name for path in study.traces.files] == ["run1.csv", "run2.csv", "run10.csv"]
    assert study.traces.temperature == ColumnRule("T_mK", "mK")
    assert study.traces.field == ColumnRule("B", "T", scale=10.0)
    assert study.fillings.look_for == (Fraction(1, 3), Fraction(2, 5), Fraction(1))
    assert (study.fit.seed, study.fit.engine, study.fit.window) == (7, "mcmc", "average")
    assert study.thermometry is not None
    assert study.series is None
    assert study.files == study.traces.files
    assert study.folder == folder


def test_a_series_study_and_its_defaults(folder):
    study = load(folder, SERIES)
    assert study.series is not None
    assert study.series.file == folder / "minima.csv"
    assert study.thermometry is None
    assert study.fillings.look_for == "auto"
    assert study.geometry.kind == "unknown"
    assert math.isnan(study.sample.constants.permittivity)


def test_a_folder_stands_for_the_study_in_it(folder):
    load(folder, SERIES)
    assert load_study(folder).sample.name == "teasel-9"


def test_byte_order_mark_and_windows_line_ends(folder):
    (folder / "study.toml").write_bytes(b"\xef\xbb\xbf" + SERIES.replace("\n", "\r\n").encode())
    assert load_study(folder).sample.name == "teasel-9"


def test_constants_of_the_host_can_be_overridden(folder):
    sample = load(folder, swapped('host = "gaas"', 'host = "GaAs"\npermittivity = 13.5')).sample
    assert (sample.constants.permittivity, sample.constants.mass) == (13.5, 0.067)


def test_bare_column_name_and_column_position(folder):
    text = swapped('rho_xx = { column = "Vxx_X", unit = "V" }', 'rho_xx = "Vxx_X"\nrho_xy = { column = 3 }')
    traces = load(folder, text).traces
    assert traces is not None
    assert (traces.rho_xx, traces.rho_xy) == (ColumnRule("Vxx_X"), ColumnRule(3))


def test_studies_are_frozen(folder):
    study = load(folder, TRACES)
    with pytest.raises(Exception, match="frozen"):
        study.fit.seed = 8  # type: ignore[misc]
    with pytest.raises(Exception, match=r"frozen|cannot assign"):
        study.fit = None  # type: ignore[misc, assignment]


def test_pinned_window_and_named_mechanisms(folder):
    text = TRACES + 'window = { low_K = 0.3, high_K = 1.2 }\nmechanisms = ["ES + activation"]\n'
    fit = load(folder, text).fit
    assert fit.mechanisms == ("activation + es",)
    assert (fit.window.low_K, fit.window.high_K) == (0.3, 1.2)  # type: ignore[union-attr]


def test_series_columns_of_other_names(folder):
    text = SERIES + '[series.columns]\ntemperature_K = { column = "Temp", unit = "mK" }\nrho_xx_ohm = "R"\n'
    series = load(folder, text).series
    assert series is not None
    assert series.columns.temperature_K == ColumnRule("Temp", "mK")
    assert series.columns.rho_xx_ohm == ColumnRule("R")


def test_record_of_the_study_is_plain_and_names_no_place_on_the_machine(folder):
    record = study_as_dict(load(folder, TRACES))
    text = json.dumps(record)
    assert str(folder) not in text
    assert record["traces"]["files"] == ["sweeps/run1.csv", "sweeps/run2.csv", "sweeps/run10.csv"]
    assert record["fillings"]["look_for"] == ["1/3", "2/5", "1"]
    assert record["fit"]["noise"] == "student"
    assert "series" not in record


# --- what the sweep reader is told -----------------------------------------------------------------------


def test_settings_of_field_sweeps(folder):
    settings = trace_settings(load(folder, TRACES))
    assert settings.temperature == ColumnRule("T_mK", "mK")
    assert settings.current_A == 1e-8
    assert settings.geometry == Geometry("hall-bar", length_um=400, width_um=100)


def test_settings_of_gate_sweeps(folder):
    text = swapped("field = {", 'field_T = 14\nsweep = "gate"\ngate = {').replace(
        "current_A = 1e-8", "current_A = 1e-8\ncapacitance_F_per_m2 = 1.1e-3\nneutrality_V = 0.05"
    )
    settings = trace_settings(load(folder, text.replace('column = "B", unit = "T"', 'column = "Vg"')))
    assert settings.field == 14.0
    assert settings.gate_start.density_per_volt == pytest.approx(1.1e-3 / elementary_charge, rel=1e-15)
    assert settings.gate_start.neutrality_V == 0.05


def test_temperature_from_the_name_and_from_a_table(folder):
    old = 'temperature = { column = "T_mK", unit = "mK" }'
    named = trace_settings(load(folder, swapped(old, "temperature = { from_name = 'T(?P<value>[0-9p]+)K' }")))
    assert named.temperature == FromName("T(?P<value>[0-9p]+)K", "K")
    study = load(folder, swapped(old, 'temperature = { table = "temperatures.csv" }'))
    listed = trace_settings(study).temperature
    assert isinstance(listed, FromTable)
    np.testing.assert_array_equal(listed.table.values["T_mK"], [60, 70, 80])
    assert folder / "temperatures.csv" in study.files
    fixed = trace_settings(load(folder, swapped(old, "temperature = 0.3")))
    assert fixed.temperature == 0.3


def test_settings_need_traces(folder):
    with pytest.raises(StudyError, match=r"no \[traces\]"):
        trace_settings(load(folder, SERIES))


# --- what is wrong ---------------------------------------------------------------------------------------


def test_unknown_key_names_line_and_nearest(folder):
    error = fails(folder, swapped("current_A", "curent_A"), "unknown key; did you mean 'current_A'")
    assert (error.key, error.line) == ("traces.curent_A", 17)
    assert "line 17" in str(error)


@pytest.mark.parametrize(
    ("old", "new", "key", "near"),
    [
        ("[fillings]", "[filings]", "filings", "'fillings'"),
        ('column = "T_mK"', 'colum = "T_mK"', "traces.temperature.colum", "'column'"),
        ("relative_error", "relativ_error", "thermometry.relativ_error", "'relative_error'"),
        ("seed = 7", "window = { low_K = 1, hig_K = 2 }", "fit.window.hig_K", "'high_K'"),
        ("length_um", "lenght_um", "geometry.lenght_um", "'length_um'"),
        ('column = "T_mK", unit', 'from_name = "(?P<value>.)", unti', "traces.temperature.unti", "'unit'"),
    ],
)
def test_unknown_keys_at_every_level(folder, old, new, key, near):
    error = fails(folder, swapped(old, new), f"did you mean {near}")
    assert error.key == key
    assert error.line == next(i for i, line in enumerate(swapped(old, new).splitlines(), 1) if new in line)


def test_unknown_key_in_series_columns(folder):
    error = fails(folder, SERIES + '[series.columns]\ntemp_K = "T"\n', "'temperature_K'")
    assert error.key == "series.columns.temp_K"


@pytest.mark.parametrize(
    ("old", "new", "match"),
    [
        ('name = "harebell-9"\n', "", "this key is missing"),
        ('name = "harebell-9"', "name = 9", "found 9; a text in quotes is needed"),
        ('name = "harebell-9"', 'name = ""', "empty text"),
        ('"gaas"', '"GaAz"', "unknown host 'GaAz'; built in are GaAs"),
        ("1.1e11", '"1.1e11"', "a number is needed"),
        ("1.1e11", "1.1e15", "per cm\\^2 lies between"),
        ("1.1e11", "0", "per cm\\^2 lies between"),
        ("length_um = 400\n", "", "length_um missing"),
        ("length_um = 400", "length_um = -4", "must be above 0"),
        ("width_um = 100", "width_um = 100\nlead_ohm = 3.0", "lead_ohm cannot be used with kind 'hall-bar'"),
        ('"hall-bar"', '"hallbar"', "found 'hallbar'; allowed are 'hall-bar'"),
        ('"hall-bar"\nlength_um = 400', '"corbino"\ninner_radius_um = 4', "outer_radius_um missing"),
        ('unit = "mK"', 'unit = "mV"', "unit 'mV' cannot be used here; allowed are K, mK, uK"),
        ('unit = "V"', 'unit = "volts per amp"', "allowed are V, mV, uV, nV, ohm"),
        ("scale = 10", 'scale = "10"', "scale is '10', but must be a number"),
        ('column = "B"', 'column = ""', "give the name in quotes"),
        ("current_A = 1e-8\n", "", "rho_xx in volts needs current_A"),
        ("current_A = 1e-8", "current_A = 0", "must be above 0"),
        ("current_A = 1e-8", "current_A = 1e-8\nfield_T = 3", "for gate and density sweeps only"),
        ("current_A = 1e-8", 'current_A = 1e-8\nsweep = "gate"', "needs gate = { column"),
        ("current_A = 1e-8", "current_A = 1e-8\nneutrality_V = 1", "neutrality_V is for gate sweeps only"),
        ("current_A = 1e-8", 'current_A = 1e-8\nsymmetrise = "yes"', "found 'yes'"),
        ('field = { column = "B", unit = "T", scale = 10 }\n', "", "needs field = { column"),
        ('column = "T_mK", unit', 'from_name = "T(.*)K", unit', r"no group \(\?P<value>"),
        ('column = "T_mK", unit', 'from_name = "T(", unit', "no regular expression"),
        ('column = "T_mK", unit', 'table = "none.csv", unit', "no file 'none.csv'; .* holds minima.csv"),
        ('{ column = "T_mK", unit = "mK" }', "true", "found True; a column"),
        ('["sweeps/*.csv"]', '["sweeps/*.dat"]', r"no file matches 'sweeps/\*.dat' in .* holds run1.csv"),
        ('["sweeps/*.csv"]', "[]", "give a list of file names"),
        ('"2/5"', '"2/0"', "denominator zero"),
        ('"2/5"', '"0.4"', "no filling factor"),
        ('"2/5"', "0.4", "0.4 is not exact"),
        ('"2/5"', '"2/6"', "'2/6' stands there twice"),
        ('"2/5"', '"0/5"', "no quantum Hall state"),
        ("seed = 7", "seed = -7", "at least 0"),
        ("seed = 7", "seed = 7.5", "a whole number is needed"),
        ("seed = 7", 'window = "avg"', "found 'avg'; allowed are 'average'"),
        ("seed = 7", "window = { low_K = 2, high_K = 1 }", "low_K = 2 must be below high_K = 1"),
        ("seed = 7", 'mechanisms = ["activation + foo"]', "unknown mechanism 'foo'"),
        ("seed = 7", 'engine = "quick"', "allowed are 'mcmc' or 'fast'"),
        ("relative_error = 0.01", "relative_error = 1.5", "below 1"),
        ("relative_error = 0.01", "relative_error = nan", "finite number"),
        ("relative_error = 0.01", "saturation_exponent = 9", "at most 6"),
        ("relative_error = 0.01", "electron_saturation = 1", "true or false is needed"),
    ],
)
def test_wrong_values(folder, old, new, match):
    error = fails(folder, swapped(old, new), match)
    assert error.line is not None
    assert "pydantic" not in str(error)
    assert "Input should" not in str(error)


def test_several_problems_are_told_at_once_in_order(folder):
    text = swapped("seed = 7", "seed = -7").replace('"gaas"', '"GaAz"').replace('"1/3"', '"x"')
    error = fails(folder, text, "3 problems")
    places = [str(error).index(key) for key in ("'sample.host'", "'fillings.look_for'", "'fit.seed'")]
    assert places == sorted(places)
    assert (error.key, error.line) == ("sample.host", 4)


@pytest.mark.parametrize(
    ("text", "match"),
    [
        (TRACES + '[series]\nfile = "minima.csv"\n', "found both"),
        ('[sample]\nname = "x"\n', "found neither"),
        ("", "key 'sample': this key is missing"),
        (SERIES.replace("minima", "maxima"), "no file 'maxima.csv'"),
    ],
)
def test_source_of_data(folder, text, match):
    fails(folder, text, match)


@pytest.mark.parametrize(
    ("text", "line"),
    [("[sample]\nname = \n", 2), ('[sample]\nname = "a"\nname = "b"\n', 3), ("[sample]\nname = [1,\n", 2)],
)
def test_no_toml(folder, text, line):
    error = fails(folder, text, "no valid TOML")
    assert error.line is not None
    assert abs(error.line - line) <= 1


def test_study_that_is_not_there(folder):
    with pytest.raises(StudyError, match="no such file"):
        load_study(folder / "none.toml")
    with pytest.raises(StudyError, match=r"no study.toml in this folder"):
        load_study(folder / "sweeps")


def test_study_that_is_no_utf8(folder):
    (folder / "study.toml").write_bytes(b'[sample]\nname = "\xe9"\n')
    with pytest.raises(StudyError, match="UTF-8"):
        load_study(folder)


def test_lines_of_keys():
    text = '[a]\nb = 1 # c = 2\n"d e" = 3\n\n[a.f]\ng.h = { i = 1 }\n[[j]]\n'
    expected = {"a": 1, "a.b": 2, "a.d e": 3, "a.f": 5, "a.f.g.h": 6, "j": 7}
    assert key_lines(text) == expected


# --- nothing but a StudyError ever comes out --------------------------------------------------------------

LEAVES = st.sampled_from(
    [
        "1",
        "0",
        "-3",
        "1.5",
        "1e400",
        "nan",
        "inf",
        "true",
        '""',
        '"x"',
        '"1/3"',
        '"auto"',
        "2031-02-03",
        "[]",
        "{}",
    ]
)
KEYS = st.sampled_from(["column", "unit", "from_name", "table", "scale", "low_K", "high_K", "x", "kind"])
VALUES = st.recursive(
    LEAVES,
    lambda inner: st.one_of(
        st.lists(inner, max_size=3).map(lambda items: f"[{', '.join(items)}]"),
        st.dictionaries(KEYS, inner, max_size=3).map(
            lambda items: "{ " + ", ".join(f"{key} = {value}" for key, value in items.items()) + " }"
        ),
    ),
    max_leaves=5,
)
LINES = [number for number, line in enumerate(TRACES.splitlines()) if "=" in line]


@settings(max_examples=300, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(line=st.sampled_from(LINES), value=VALUES)
def test_any_value_of_any_key_gives_a_study_or_a_study_error(line, value, folder):
    rows = TRACES.splitlines()
    rows[line] = f"{rows[line].split('=')[0]}= {value}"
    (folder / "study.toml").write_text("\n".join(rows))
    try:
        study = load_study(folder)
    except StudyError as error:
        told = str(error)
        assert "Input should" not in told
        assert "@" not in told  # tags of unions are no words for users
        return
    assert json.dumps(study_as_dict(study))
