"""Commands: what stands on which stream, exit codes, and the small commands new, minima, simulate, table."""

from __future__ import annotations

import json
import shutil
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import pytest
from command_line import contents, run, series_study, traces_study

from gapfit import __version__, workflow
from gapfit.fit import fit_temperature_series
from gapfit.simulate import DEMOS
from gapfit.study import load_study

ROOT = Path(__file__).parent.parent
HAREBELL = ROOT / "datasets_synthetic/harebell-3"
QUICK = ("--no-figures", "--jobs", "1")
FILLINGS = ("1/3", "2/5")


@pytest.fixture(scope="module")
def study_folder(tmp_path_factory) -> Path:
    return series_study(tmp_path_factory.mktemp("study"), FILLINGS)


@pytest.fixture(scope="module")
def fitted(study_folder):
    """A run into the usual place, and what it printed."""
    ran = run("fit", study_folder, *QUICK)
    return study_folder / "results", ran


# --- fit -------------------------------------------------------------------------------------------------


def test_results_on_stdout_and_steps_on_stderr(fitted, study_folder):
    out, ran = fitted
    assert ran.code == 0
    for filling in FILLINGS:
        assert any(line.startswith(f"{filling} ") for line in ran.out.splitlines())
        assert f"filling {filling}: " in ran.err
    assert ran.out.splitlines()[-1] == f"results: {out}  (open {out / 'report.html'})"
    assert ran.err.splitlines()[0].startswith("[1/2] ")
    assert "[" not in ran.out.splitlines()[0]


def test_steps_come_as_they_are_done(study_folder, tmp_path, monkeypatch):
    seen: list[str] = []

    def fit(series, settings):
        seen.append("fit")
        return fit_temperature_series(series, settings)

    monkeypatch.setattr(workflow, "fit_temperature_series", fit)
    workflow.fit_study(load_study(study_folder), progress=lambda *step: seen.append("told"))
    assert seen == ["fit", "told"] * 2


def test_json_on_stdout_is_the_file(study_folder, tmp_path):
    ran = run("fit", study_folder, "--out", tmp_path / "out", "--json", "--quiet", *QUICK)
    assert (ran.code, ran.err) == (0, "")
    assert ran.out == (tmp_path / "out/gaps.json").read_text()
    assert [row["filling"] for row in json.loads(ran.out)["gaps"]] == list(FILLINGS)


def test_without_convergence_the_code_is_three(study_folder, tmp_path, monkeypatch):
    def unconverged(series, settings):
        fit = fit_temperature_series(series, settings)
        if str(series.filling) != "2/5":
            return fit
        return replace(fit, diagnostics=replace(fit.diagnostics, converged=False, reasons=("not enough",)))

    monkeypatch.setattr(workflow, "fit_temperature_series", unconverged)
    ran = run("fit", study_folder, "--out", tmp_path / "out", "--quiet", *QUICK)
    assert ran.code == 3
    assert ran.err == "not converged: filling 2/5; the reasons are in gaps.json\n"
    rows = json.loads((tmp_path / "out/gaps.json").read_text())["gaps"]
    assert [row["converged"] for row in rows] == [True, False]
    assert "2/5" in ran.out


# --- new -------------------------------------------------------------------------------------------------


def test_new_study_of_the_demo_sweeps_needs_no_edit(tmp_path):
    folder = tmp_path / "harebell"
    shutil.copytree(HAREBELL / "sweeps", folder / "sweeps")
    ran = run("new", folder)
    assert (ran.code, ran.out) == (0, f"{folder / 'study.toml'}\n")
    assert "please fill in" not in ran.err
    study = load_study(folder)
    assert len(study.traces.files) == 13

    found = run("minima", folder, "--json", "--quiet")
    assert found.code == 0
    fillings = {row["filling"] for row in json.loads(found.out)["minima"]}
    states = json.loads((HAREBELL / "truth.json").read_text())["states"]
    wanted = {state["filling"] for state in states if state["looked_for"]}
    assert len(wanted) == 9
    assert wanted <= fillings


def test_new_never_overwrites(study_folder):
    before = contents(study_folder)
    ran = run("new", study_folder)
    assert ran.code == 1
    assert "there is a study file already" in ran.err
    assert contents(study_folder) == before


def test_new_with_nothing_to_look_at(tmp_path):
    assert run("new", tmp_path).code == 1
    ran = run("new", tmp_path / "none")
    assert ran.code == 1
    assert "no such folder" in ran.err
    assert list(tmp_path.iterdir()) == []


# --- minima ----------------------------------------------------------------------------------------------


def test_minima_of_sweeps(tmp_path):
    folder = traces_study(tmp_path / "study")
    ran = run("minima", folder)
    assert ran.code == 0
    assert "density  route minima" in ran.out
    heads, *rows = [line.split() for line in ran.out.splitlines() if not line.startswith("density")]
    assert heads[:2] == ["filling", "field_T"]
    assert [row[0] for row in rows] == ["2/3", "1"]
    assert "note: " in ran.err
    record = json.loads(run("minima", folder, "--json", "--quiet").out)
    assert [row["n_points"] for row in record["minima"]] == [4, 4]
    assert {row["route"] for row in record["density"]} >= {"minima"}
    assert set(contents(folder)) == {"study.toml", "sweeps", *(f"sweeps/run{n}.csv" for n in (1, 2, 3, 4))}


def test_minima_of_a_table(study_folder):
    ran = run("minima", study_folder, "--quiet")
    assert (ran.code, ran.err) == (0, "")
    assert [line.split()[0] for line in ran.out.splitlines()] == ["filling", *FILLINGS]


# --- simulate --------------------------------------------------------------------------------------------


def test_list_of_demos():
    ran = run("simulate", "list")
    assert [line.split(":")[0] for line in ran.out.splitlines()] == list(DEMOS)


def test_simulated_study_is_the_shipped_one(tmp_path):
    ran = run("simulate", "teasel-2", "--out", tmp_path)
    assert (ran.code, ran.out) == (0, f"{tmp_path / 'teasel-2'}\n")
    assert "all synthetic" in ran.err
    assert contents(tmp_path / "teasel-2") == contents(ROOT / "datasets_synthetic/teasel-2")


def test_simulate_never_overwrites(tmp_path):
    assert run("simulate", "teasel-2", "--out", tmp_path, "--quiet").err == ""
    before = contents(tmp_path)
    ran = run("simulate", "teasel-2", "--out", tmp_path, "--seed", "5")
    assert ran.code == 1
    assert "exists already; name another folder with --out" in ran.err
    assert contents(tmp_path) == before


def test_unknown_demo(tmp_path):
    ran = run("simulate", "foxglove-1", "--out", tmp_path)
    assert ran.code == 1
    assert "choose from harebell-3" in ran.err


# --- table -----------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("form", "needle"),
    [
        ("text", "ν "),
        ("md", "| 1/3 |"),
        ("html", "<table"),
        ("tex", r"\begin{tabular}"),
        ("csv", "filling,"),
        ("json", '"filling": "1/3"'),
    ],
)
def test_every_format_of_a_table(form, needle, fitted, tmp_path):
    out, _ = fitted
    ran = run("table", out, "--format", form)
    assert (ran.code, ran.err) == (0, "")
    assert needle in ran.out
    file = tmp_path / f"table.{form}"
    assert run("table", out, "--format", form, "--out", file).out == f"{file}\n"
    assert file.read_text().rstrip("\n") == ran.out.rstrip("\n")


def first_gap(out: Path, *options: str) -> float:
    """The gap of 1/3 as the text table prints it."""
    line = next(line for line in run("table", out, *options).out.splitlines() if line.startswith("1/3 "))
    return float(line.split()[2])


def test_units_and_half_gaps(fitted):
    out, _ = fitted
    kelvin = first_gap(out)
    assert kelvin == pytest.approx(6.0, rel=0.03)
    assert first_gap(out, "--half") == pytest.approx(kelvin / 2, rel=0.01)
    assert first_gap(out, "--unit", "meV") == pytest.approx(kelvin * 0.08617333, rel=0.01)
    assert first_gap(out, "--unit", "coulomb") < 0.1
    assert "activation energy" in run("table", out, "--half").out


def test_level_and_columns_of_a_table(fitted):
    out, _ = fitted
    wide, narrow = (run("table", out, "--level", level).out for level in ("95", "68"))
    assert "95 %" in wide
    assert "68 %" in narrow
    chosen = run("table", out, "--format", "csv", "--columns", "filling, gap_K").out
    assert chosen.splitlines()[0] == "filling,gap_K"


@pytest.mark.parametrize(
    "options",
    [("--format", "docx"), ("--unit", "eV"), ("--level", "90"), ("--columns", "filling,gapp")],
)
def test_wrong_choices_of_a_table(options, fitted):
    ran = run("table", fitted[0], *options)
    assert (ran.code, ran.out) == (2, "")
    assert "allowed are" in ran.err.replace("\n", " ")


def test_table_of_no_run(tmp_path):
    ran = run("table", tmp_path)
    assert ran.code == 1
    assert "name the --out folder of a finished 'gapfit fit'" in ran.err


# --- the program -----------------------------------------------------------------------------------------


def test_module_and_version():
    ran = subprocess.run(
        [sys.executable, "-m", "gapfit", "--version"], capture_output=True, text=True, check=True, cwd=ROOT
    )
    assert ran.stdout == f"{__version__}\n"


@pytest.mark.parametrize("command", ["new", "fit", "minima", "simulate", "table"])
def test_help_of_every_command(command):
    ran = run(command, "--help")
    assert ran.code == 0
    assert "Usage: gapfit " in ran.out


def test_help_and_package_load_nothing_heavy():
    script = (
        "import sys, gapfit\n"
        "from gapfit.cli import app\n"
        "app(['--help'], standalone_mode=False)\n"
        "heavy = {'matplotlib', 'emcee', 'pandas', 'scipy', 'numpy', 'pydantic'} & set(sys.modules)\n"
        "assert not heavy, heavy\n"
    )
    subprocess.run([sys.executable, "-c", script], check=True, capture_output=True, cwd=ROOT)
