"""The whole road: files of a run, same numbers again, going on after a stop, truth of the demo minima."""

from __future__ import annotations

import csv
import hashlib
import json
import os
import re
from fractions import Fraction
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from command_line import (
    SERIES_STUDY,
    TRACES_STUDY,
    TRUTH,
    contents,
    run,
    series_study,
    traces_study,
)

from gapfit import workflow
from gapfit.errors import GapfitError, InputError
from gapfit.fit import fit_temperature_series
from gapfit.study import load_study
from gapfit.workflow import fit_study

DEMOS = Path(__file__).parent.parent / "datasets_synthetic"

COLUMNS = (
    "sample", "cooldown", "filling", "field_T", "effective_field_T", "n_points", "temperature_low_K",
    "temperature_high_K", "verdict", "p_activated", "gap_K", "gap_low68_K", "gap_high68_K", "gap_low95_K",
    "gap_high95_K", "gap_lower95_K", "gap_upper95_K", "verdict_cause", "gap_meV", "gap_over_coulomb",
    "permittivity", "mechanism", "p_mechanism", "window_low_K", "window_high_K", "pinned", "prefactor_ohm",
    "prefactor_over_eq2h", "hopping", "hopping_T0_K", "electron_T0_K", "leak_ohm", "noise_inflation",
    "rho_min_ohm", "decades_used", "n_negative", "quantity", "reading", "sequence", "level",
    "drive_current_A", "total_field_T", "predictive_p", "converged", "rhat", "ess", "engines_agree",
    "flags",
)  # fmt: skip

WALL_TIME = ("run.json", "report.html")
"""Files in which the wall time stands."""


def results(folder: Path) -> dict[str, bytes]:
    """Files of a run that must not depend on when and how fast it ran."""
    return {name: data for name, data in contents(folder).items() if name not in WALL_TIME}


@pytest.fixture(scope="module")
def study_folder(tmp_path_factory) -> Path:
    return series_study(tmp_path_factory.mktemp("study"))


@pytest.fixture(scope="module")
def study(study_folder):
    return load_study(study_folder)


@pytest.fixture(scope="module")
def first(study_folder):
    """A run without figures by the command line, one process."""
    out = study_folder / "first"
    assert run("fit", study_folder, "--out", out, "--no-figures", "--jobs", "1").code == 0
    return out


# --- the files -------------------------------------------------------------------------------------------


def test_files_of_a_run(first):
    assert set(contents(first)) == {
        "gaps.csv", "gaps.json", "gaps.md", "gaps.tex", "series.csv", "run.json", "report.html",
        "posterior", "posterior/1_3.nc", "posterior/2_5.nc", "posterior/1.nc",
    }  # fmt: skip
    assert not list(first.parent.glob(".first*"))


def test_gaps_csv_has_its_columns_and_the_truth(first):
    rows = list(csv.DictReader((first / "gaps.csv").open()))
    assert tuple(rows[0]) == COLUMNS
    assert [row["filling"] for row in rows] == list(TRUTH)
    for row in rows:
        assert float(row["gap_low95_K"]) < TRUTH[row["filling"]][0] < float(row["gap_high95_K"])
        assert float(row["gap_low95_K"]) < float(row["gap_low68_K"]) < float(row["gap_K"])
    assert float(rows[2]["leak_ohm"]) == pytest.approx(12, rel=0.1)
    assert rows[0]["verdict"] == "activated"


def test_json_table_holds_the_same_numbers(first):
    rows = list(csv.DictReader((first / "gaps.csv").open()))
    record = json.loads((first / "gaps.json").read_text())
    assert record["format_version"] == 1
    assert [row["gap_K"] for row in record["gaps"]] == [float(row["gap_K"]) for row in rows]


def test_run_record(first, study_folder):
    record = json.loads((first / "run.json").read_text())
    assert record["seed"] == 11
    assert {"gapfit", "python", "numpy", "scipy"} <= set(record["versions"])
    assert {item["file"] for item in record["inputs"]} == {"study.toml", "minima.csv"}
    for item in record["inputs"]:
        digest = hashlib.sha256((study_folder / item["file"]).read_bytes()).hexdigest()
        assert item["sha256"] == digest
    assert set(record["priors"]) == {"1_3", "2_5", "1"}
    assert record["study"]["sample"]["name"] == "clover-1"
    assert record["wall_time_s"] > 0
    found = {name for name, data in contents(first).items() if data != b"folder"}
    assert set(record["files"]) == found


def test_posterior_file_opens_elsewhere(first):
    xarray = pytest.importorskip("xarray")
    with xarray.open_dataset(first / "posterior/1_3.nc", group="posterior", engine="h5netcdf") as draws:
        gap = draws["gap_K"].values.ravel()
    row = next(csv.DictReader((first / "gaps.csv").open()))
    assert np.nanmedian(gap) == pytest.approx(float(row["gap_K"]), rel=0.01)


def refit(folder: Path, series: Path, text: str) -> Path:
    """Fit the readings of a run as a study of their own."""
    series_study(folder, text=text)
    (folder / "minima.csv").write_bytes(series.read_bytes())
    assert run("fit", folder, "--out", folder / "out", "--no-figures", "--jobs", "1").code == 0
    return folder / "out"


def test_readings_of_a_run_fitted_again_give_the_same_table(first, tmp_path):
    again = refit(tmp_path / "again", first / "series.csv", SERIES_STUDY)
    for name in ("gaps.csv", "series.csv"):
        assert (again / name).read_bytes() == (first / name).read_bytes()


# --- the same numbers ------------------------------------------------------------------------------------


def test_same_seed_gives_the_same_bytes_with_any_number_of_processes(first, study, tmp_path):
    result = fit_study(study, tmp_path / "again", jobs=2, figures=False)
    assert result.folder == tmp_path / "again"
    assert results(tmp_path / "again") == results(first)


def test_another_seed_gives_other_draws_of_the_same_answer(first, study):
    table = pd.read_csv(first / "gaps.csv", dtype={"filling": str})
    other = fit_study(study, seed=12).gaps
    assert (other["gap_K"] != table["gap_K"]).all()
    assert other["gap_K"].to_numpy() == pytest.approx(table["gap_K"].to_numpy(), rel=0.02)


def test_engine_and_seed_of_the_call_win(study):
    result = fit_study(study, seed=12)
    assert {one.settings.seed for one in result.fits} == {12}
    assert {one.settings.engine for one in result.fits} == {"fast"}
    assert result.folder is None


# --- sweeps ----------------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def swept(tmp_path_factory):
    """A run of one filling of raw sweeps, with all figures; its folder and its steps."""
    text = TRACES_STUDY.replace('"2/3", "1"', '"2/3"') + "\n[thermometry]\nrelative_error = 0.005\n"
    folder = traces_study(tmp_path_factory.mktemp("swept"), text)
    steps: list[tuple[int, int, str]] = []
    result = fit_study(load_study(folder), folder / "out", progress=lambda *step: steps.append(step))
    return folder / "out", steps, result


def test_steps_are_told(swept):
    _, steps, result = swept
    assert steps == [(1, 1, f"filling 2/3: {result.fits[0].verdict}")]


def test_figures_as_picture_and_for_print(swept):
    figures = {Path(name) for name in contents(swept[0]) if name.startswith("figures/")}
    for kind in (
        "arrhenius_2_3",
        "corner_2_3",
        "local_slope_2_3",
        "hopping_2_3",
        "traces",
        "density",
        "gaps",
    ):
        assert {Path(f"figures/{kind}.png"), Path(f"figures/{kind}.pdf")} <= figures


def test_report_stands_alone(swept):
    text = (swept[0] / "report.html").read_text()
    assert "<script" not in text.lower()
    assert not re.findall(r"(?:src|srcset|poster|data)\s*=\s*[\"']?\s*(?:https?:)?//", text, re.IGNORECASE)
    assert not re.findall(r"<link\b[^>]*>|@import|url\(\s*[\"']?(?:https?:)?//", text, re.IGNORECASE)
    references = re.findall(r"xlink:href\s*=\s*\"([^\"]*)\"", text)
    assert all(reference.startswith(("#", "data:")) for reference in references)
    assert "2/3" in text
    assert "<svg" in text


def test_readings_of_sweeps_fitted_again_give_the_same_gap(swept, tmp_path):
    text = SERIES_STUDY.replace("scale_error = 0.01", "relative_error = 0.005").replace("seed = 11", "")
    text = text.replace('["activation", "activation + leak"]', '["activation + power mean"]')
    again = refit(tmp_path / "again", swept[0] / "series.csv", text)
    (old,), (new,) = (csv.DictReader((folder / "gaps.csv").open()) for folder in (swept[0], again))
    for name in ("verdict", "n_points", "flags", "quantity", "reading"):
        assert new[name] == old[name]
    for name in ("gap_low95_K", "gap_K", "gap_high95_K", "p_activated", "rho_min_ohm", "predictive_p"):
        assert new[name] == old[name] or float(new[name]) == pytest.approx(float(old[name]), rel=1e-6)


# --- stops -----------------------------------------------------------------------------------------------


class Counted:
    """The fit of one series, counted, and stopped after some."""

    def __init__(self, stop_after: int | None = None) -> None:
        self.done: list[Fraction] = []
        self.stop_after = stop_after

    def __call__(self, series, settings):
        if len(self.done) == self.stop_after:
            raise KeyboardInterrupt
        self.done.append(series.filling)
        return fit_temperature_series(series, settings)


def test_a_stopped_run_keeps_the_old_results_and_goes_on(first, study_folder, tmp_path, monkeypatch):
    out = tmp_path / "out"
    command = ("fit", study_folder, "--out", out, "--no-figures", "--jobs", "1", "--seed")
    assert run(*command, 12).code == 0
    (out / "notes.txt").write_text("mine")
    before = contents(out)

    stopping = Counted(stop_after=1)
    monkeypatch.setattr(workflow, "fit_temperature_series", stopping)
    ran = run(*command, 11)
    assert ran.code == 130
    assert "the same command goes on from the fillings that are done" in ran.err
    assert contents(out) == before

    going_on = Counted()
    monkeypatch.setattr(workflow, "fit_temperature_series", going_on)
    assert run(*command, 11).code == 0
    assert stopping.done == [Fraction(1, 3)]
    assert going_on.done == [Fraction(2, 5), Fraction(1)]
    found = results(out)
    assert found.pop("notes.txt") == b"mine"
    assert found == results(first)
    assert [entry.name for entry in tmp_path.iterdir()] == ["out"]


def test_damaged_stored_fits_are_made_again(first, study_folder, tmp_path, monkeypatch):
    out = tmp_path / "out"
    command = ("fit", study_folder, "--out", out, "--no-figures", "--jobs", "1")
    stopping = Counted(stop_after=2)
    monkeypatch.setattr(workflow, "fit_temperature_series", stopping)
    assert run(*command).code == 130
    stored = sorted(tmp_path.glob(".out.building/fits/*.npz"))
    assert len(stored) == 2
    stored[0].write_bytes(stored[0].read_bytes()[:1000])
    monkeypatch.setattr(workflow, "fit_temperature_series", fit_temperature_series)
    assert run(*command).code == 0
    assert results(out) == results(first)


def test_an_error_after_the_first_fit_is_one_message(study_folder, tmp_path, monkeypatch):
    def failing(series, settings):
        raise GapfitError("something about this filling")

    before = contents(tmp_path)
    monkeypatch.setattr(workflow, "fit_temperature_series", failing)
    ran = run("fit", study_folder, "--out", tmp_path / "out", "--no-figures", "--jobs", "1")
    assert (ran.code, ran.out, ran.err) == (1, "", "gapfit: something about this filling\n")
    assert contents(tmp_path) == before


def test_folders_of_others_are_refused_untouched(study_folder, tmp_path):
    (tmp_path / "thesis.tex").write_text("x")
    before = contents(tmp_path)
    ran = run("fit", study_folder, "--out", tmp_path, "--no-figures", "--jobs", "1")
    assert ran.code == 1
    assert "no results of gapfit; name a new or empty folder with --out" in ran.err
    assert contents(tmp_path) == before
    assert not list(tmp_path.parent.glob(f".{tmp_path.name}*"))


def test_inputs_are_never_overwritten(first, tmp_path):
    folder = series_study(tmp_path / "study", text=SERIES_STUDY.replace("minima.csv", "out/series.csv"))
    (folder / "out").mkdir()
    for name in ("series.csv", "run.json"):
        (folder / "out" / name).write_bytes((first / name).read_bytes())
    before = contents(tmp_path)
    for command in ("fit", "minima"):
        ran = run(command, folder, "--out", folder / "out")
        assert ran.code == 1
        assert "series.csv is read by this study and would be overwritten" in ran.err
    assert contents(tmp_path) == before


def test_no_process_is_no_way(study):
    with pytest.raises(InputError, match="at least one process"):
        fit_study(study, jobs=0)


# --- the truth of the demo minima ------------------------------------------------------------------------


@pytest.fixture(scope="module")
def teasel():
    """Fits of the demo minima by the fast engine, and their truth by filling."""
    folder = DEMOS / "teasel-2"
    result = fit_study(load_study(folder), engine="fast", jobs=min(2, os.cpu_count() or 1))
    truth = json.loads((folder / "truth.json").read_text())
    return result, {Fraction(state["filling"]): state for state in truth["states"]}


@pytest.mark.slow
def test_demo_minima_without_a_gap_are_not_given_one(teasel):
    result, truth = teasel
    gapless = [filling for filling, state in truth.items() if state["gap_K"] == 0]
    assert len(gapless) == 2
    for filling in gapless:
        assert result.fit(filling).verdict != "activated"


@pytest.mark.slow
def test_demo_leak_stands_in_the_table(teasel):
    result, truth = teasel
    table = result.gaps.set_index("filling")
    leaking = [filling for filling, state in truth.items() if state["gap_K"] and state["leak_ohm"]]
    assert leaking
    for filling in leaking:
        assert table.loc[str(filling), "leak_ohm"] == pytest.approx(truth[filling]["leak_ohm"], rel=0.1)
        assert "leak" in table.loc[str(filling), "mechanism"]


@pytest.mark.slow
def test_demo_gaps_lie_in_their_intervals(teasel):
    result, truth = teasel
    gaps = {filling: state["gap_K"] for filling, state in truth.items() if state["gap_K"]}
    missed = [filling for filling, gap in gaps.items() if gap not in result.gap(filling).interval(0.95)]
    assert len(gaps) >= 5
    assert len(missed) <= 1, missed
