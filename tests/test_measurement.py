"""From a study to density, minima and series: the demo sweeps against their truth, and tables of minima."""

from __future__ import annotations

import json
from fractions import Fraction
from pathlib import Path

import numpy as np
import pytest
from command_line import SERIES_STUDY, series_study, swap, traces_study

from gapfit.errors import InputError
from gapfit.hall import field_at_filling
from gapfit.measurement import fit_settings, measure
from gapfit.study import load_study
from gapfit.workflow import find_minima

DEMOS = Path(__file__).parent.parent / "datasets_synthetic"


@pytest.fixture(scope="module")
def harebell():
    """What the clean demo sweeps say, and their truth."""
    folder = DEMOS / "harebell-3"
    return measure(load_study(folder)), json.loads((folder / "truth.json").read_text())


def test_demo_density_to_a_thousandth(harebell):
    measurement, truth = harebell
    true = truth["density_per_m2"]
    assert measurement.density.offset == pytest.approx(true, rel=1e-3)
    routes = {row["route"]: row for row in measurement.density_rows}
    assert set(routes) == {"stated", "Hall slope", "plateau centres", "minima"}
    assert float(routes["minima"]["value (m^-2)"]) == pytest.approx(true, rel=1e-3)
    assert any("from the stated one" in notice for notice in measurement.notices)


def test_demo_fillings_are_read_at_their_exact_fields(harebell):
    measurement, truth = harebell
    wanted = {Fraction(state["filling"]) for state in truth["states"] if state["looked_for"]}
    assert {one.filling for one in measurement.series} == wanted
    for one in measurement.series:
        assert one.reading == "exact"
        assert one.n_point == 13
        field = field_at_filling(one.filling, truth["density_per_m2"])
        assert one.field_T == pytest.approx(field, rel=1e-3)


def test_demo_readings_carry_the_thermometry_of_the_study(harebell):
    measurement, _ = harebell
    for one in measurement.series:
        assert (one.temperature_error >= 0.003 * one.temperature * (1 - 1e-9)).all()
        assert one.error_source == "trace"
        assert (one.sample, one.cooldown) == ("harebell-3", "first")


def test_leak_of_one_resistivity_into_the_other_is_told(harebell):
    measurement, _ = harebell
    assert any("rho_xy in the measured rho_xx" in notice for notice in measurement.notices)


def test_series_study_renames_scales_and_selects(tmp_path):
    plain = measure(load_study(series_study(tmp_path / "plain")))
    text = SERIES_STUDY.replace(
        "[thermometry]",
        '[series.columns]\nfilling = "nu"\ntemperature_K = { column = "bath", unit = "mK" }\n'
        'rho_xx_ohm = { column = "R", scale = 0.5 }\n\n[fillings]\nlook_for = ["2/5", "1"]\n\n[thermometry]',
    )
    folder = series_study(tmp_path / "renamed", text=text)
    for old, new in (("filling", "nu"), ("temperature_K", "bath"), ("rho_xx_ohm", "R")):
        swap("minima.csv", old, new)(folder)
    head, *rows = (folder / "minima.csv").read_text().splitlines()
    cells = [row.split(",") for row in rows]
    body = [",".join([*c[:2], f"{1000 * float(c[2]):.6g}", c[3], str(2 * float(c[4])), c[5]]) for c in cells]
    (folder / "minima.csv").write_text("\n".join([head, *body]) + "\n")
    found = measure(load_study(folder))
    assert [str(one.filling) for one in found.series] == ["2/5", "1"]
    for one, same in zip(found.series, plain.series[1:], strict=True):
        assert one.temperature == pytest.approx(same.temperature)
        assert one.value == pytest.approx(same.value)


def test_errors_of_the_thermometer_reach_the_series(tmp_path):
    text = SERIES_STUDY.replace("scale_error = 0.01", "relative_error = 0.01")
    series = measure(load_study(series_study(tmp_path / "s", text=text))).series[0]
    assert series.temperature_error == pytest.approx(np.hypot(0.01, 0.002) * series.temperature, rel=1e-3)


def test_temperature_errors_of_a_recorded_series_are_not_widened_again(tmp_path):
    text = SERIES_STUDY.replace("scale_error = 0.01", "relative_error = 0.01")
    study = load_study(series_study(tmp_path / "s", text=text))
    recorded = find_minima(study, tmp_path / "out").series
    (tmp_path / "s/minima.csv").write_bytes((tmp_path / "out/series.csv").read_bytes())
    again = measure(study).series
    for one, same in zip(again, recorded, strict=True):
        assert (one.temperature_error == same.temperature_error).all()
        assert one.error_source == "stated"
        assert one.flags == same.flags


def test_settings_of_the_study_and_what_overrides_them(tmp_path):
    study = load_study(series_study(tmp_path / "s"))
    settings = fit_settings(study)
    assert (settings.engine, settings.seed, settings.window) == ("fast", 11, None)
    assert [one.name for one in settings.combinations] == ["activation", "activation + leak"]
    assert settings.thermometer_scale_error == 0.01
    assert settings.pinned == "mechanism"
    changed = fit_settings(study, "mcmc", 0)
    assert (changed.engine, changed.seed) == ("mcmc", 0)


def test_one_direction_can_be_chosen(tmp_path):
    folder = traces_study(tmp_path / "s")
    swap("study.toml", 'sweep = "field"', 'sweep = "field"\ndirection = "up"')(folder)
    assert len(measure(load_study(folder)).family.sweeps) == 4
    swap("study.toml", '"up"', '"down"')(folder)
    with pytest.raises(InputError, match="leaves no sweep"):
        measure(load_study(folder))
