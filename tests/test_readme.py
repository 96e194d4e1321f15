"""The README against the code: its examples run, its lists are complete, its commands exist."""

from __future__ import annotations

import inspect
import re
import shlex
import tomllib
from pathlib import Path

import pytest
import typer.main

from gapfit.blocks import (
    FillingsBlock,
    FitBlock,
    GeometryBlock,
    SampleBlock,
    SeriesBlock,
    SeriesColumns,
    ThermometryBlock,
    TracesBlock,
)
from gapfit.cli import app
from gapfit.columns import UNITS
from gapfit.digest import FLAG_WORDS, GAP_COLUMNS
from gapfit.gallery import FILLING_FIGURES
from gapfit.hall import HOSTS
from gapfit.mechanisms import COMBINATIONS, MECHANISMS
from gapfit.study import load_study

ROOT = Path(__file__).resolve().parents[1]
README = (ROOT / "README.md").read_text(encoding="utf-8")

TINY_STUDY = """
[sample]
name = "made for a test"
[geometry]
kind = "resistivity"
[series]
file = "minima.csv"
[fit]
engine = "fast"
mechanisms = ["activation", "es"]
"""
"""A study small enough to be fitted in a test; the README's Python example loads it."""

TINY_MINIMA = """filling,field_T,temperature_K,temperature_error_K,rho_xx_ohm,rho_xx_ohm_error
1/3,12,0.4,0.002,15.8,0.4
1/3,12,0.5,0.003,54.1,0.6
1/3,12,0.6,0.003,125.1,1.3
1/3,12,0.8,0.004,350,3.5
1/3,12,1.0,0.005,660,6.6
1/3,12,1.3,0.006,1160,11.6
"""


def blocks(language: str) -> list[str]:
    """Code blocks of a language, indented ones too."""
    found = re.findall(rf"^( *)```{language}\n(.*?)^\1```$", README, re.MULTILINE | re.DOTALL)
    return [re.sub(rf"^{indent}", "", body, flags=re.MULTILINE) for indent, body in found]


def section(heading: str) -> str:
    return README.split(f"\n## {heading}\n", 1)[1].split("\n## ", 1)[0]


def rows(text: str) -> list[list[str]]:
    """Cells of the lines of a Markdown table."""
    lines = [line for line in text.splitlines() if line.startswith("|")]
    return [[cell.strip() for cell in line.strip("|").split("|")] for line in lines]


def names(text: str) -> set[str]:
    """What stands in code font in the first cells of tables."""
    return {name for cells in rows(text) for name in re.findall(r"`([^`]+)`", cells[0])}


# ----------------------------------------------------------------------------------------------- examples


@pytest.mark.parametrize("index", range(len(blocks("python"))))
def test_python_examples_run(index, tmp_path, monkeypatch, capsys):
    (tmp_path / "study.toml").write_text(TINY_STUDY, encoding="utf-8")
    (tmp_path / "minima.csv").write_text(TINY_MINIMA, encoding="utf-8")
    monkeypatch.chdir(tmp_path)
    exec(compile(blocks("python")[index], f"README example {index + 1}", "exec"), {})
    printed = capsys.readouterr().out
    assert "activated" in printed
    assert "CredibleInterval" in printed


def test_number_of_examples():
    assert len(blocks("python")) == 2
    assert len(blocks("toml")) == 3


@pytest.mark.parametrize("index", range(len(blocks("toml"))))
def test_example_studies_load(index, tmp_path):
    text = blocks("toml")[index]
    content = tomllib.loads(text)
    for pattern in (*content.get("traces", {}).get("files", []), content.get("series", {}).get("file", "")):
        if pattern:
            path = tmp_path / pattern.replace("*", "one")
            path.parent.mkdir(exist_ok=True)
            path.touch()
    (tmp_path / "study.toml").write_text(text, encoding="utf-8")
    study = load_study(tmp_path)
    assert len(study.files) == 1


def shell_lines() -> list[list[str]]:
    """Calls of gapfit in the shell blocks, as words."""
    commands = [part for body in blocks("sh") for line in body.splitlines() for part in line.split("&&")]
    words = [shlex.split(command) for command in commands]
    return [one[1:] for one in words if one and Path(one[0]).name == "gapfit"]


@pytest.mark.parametrize("words", shell_lines(), ids=" ".join)
def test_commands_parse(words):
    command = typer.main.get_command(app).commands[words[0]]  # type: ignore[attr-defined]
    command.make_context(words[0], list(words[1:]))


def test_the_two_commands_of_a_fresh_machine_stand_on_lines_of_their_own():
    # the script of the checks takes them from there
    for end in ("gapfit fit datasets_synthetic/harebell-3 --out demo-results", "python -m pytest"):
        found = re.findall(
            rf"^python3 -m venv \.venv && \.venv/bin/pip install .*{end}$", README, re.MULTILINE
        )
        assert len(found) == 1


# -------------------------------------------------------------------------------------------------- lists


@pytest.mark.parametrize(
    ("heading", "block"),
    [
        ("sample", SampleBlock),
        ("geometry", GeometryBlock),
        ("traces", TracesBlock),
        ("series", SeriesBlock),
        ("fillings", FillingsBlock),
        ("thermometry", ThermometryBlock),
        ("fit", FitBlock),
    ],
)
def test_reference_lists_every_key_of_a_section_and_no_other(heading, block):
    part = section("The study file").split(f"\n**`[{heading}]`**", 1)[1].split("\n**`[", 1)[0]
    assert names(part) == set(block.model_fields)


def test_reference_states_the_defaults():
    stated = {
        cells[0].strip("`"): cells[1].strip('`"')
        for cells in rows(section("The study file"))
        if len(cells) == 3 and "`, `" not in cells[0]
    }
    for block in (FillingsBlock, FitBlock, ThermometryBlock):
        for name, field in block.model_fields.items():
            default = field.default
            if name == "relative_error":
                continue
            shown = str(default).lower() if isinstance(default, bool) else str(default)
            assert stated[name] == shown.removesuffix(".0"), name


def test_reference_lists_columns_units_hosts_and_mechanisms():
    text = section("The study file")
    units = [name for name, unit in UNITS.items() if unit.dimension != "time"]  # no key takes a time
    for name in (*SeriesColumns.model_fields, *units, *MECHANISMS):
        assert f"`{name}`" in text, name
    for name in HOSTS:
        assert name in text, name


def test_default_mechanisms_are_the_ones_described():
    used = {name for combination in COMBINATIONS for name in combination.mechanisms}
    assert set(MECHANISMS) - used == {"spread", "nearest", "fermi", "power mean"}


def test_every_column_of_the_table_is_explained_once_and_in_order():
    text = section("Files out").split("Columns of `gaps.csv`", 1)[1].split("| flag |", 1)[0]
    listed = [name for cells in rows(text) for name in re.findall(r"`([^`]+)`", cells[0])]
    assert sorted(listed) == sorted(GAP_COLUMNS)


def test_every_flag_is_explained():
    assert names(section("Files out").split("| flag |", 1)[1]) == set(FLAG_WORDS)


def test_figures_of_a_filling_are_named():
    text = section("Files out")
    assert all(f"`{name}`" in text for name in FILLING_FIGURES)


def test_commands_and_options_are_the_ones_that_exist():
    commands = typer.main.get_command(app).commands  # type: ignore[attr-defined]
    text = section("Commands")
    assert set(re.findall(r"^\| `gapfit (\w+) ", text, re.MULTILINE)) == set(commands)
    listed: dict[str, set[str]] = {name: set() for name in commands}
    for cells in rows(text.split("| option |", 1)[1]):
        for command in cells[1].split(", ") if cells[1] else []:
            if command in listed:
                listed[command] |= set(re.findall(r"(--[\w-]+)", cells[0]))
    for name, command in commands.items():
        options = {flag for item in command.params for flag in (*item.opts, *item.secondary_opts)}
        assert listed[name] == {flag for flag in options if flag.startswith("--")}, name


def test_exit_codes_are_the_ones_of_the_code():
    from gapfit import cli

    stated = {int(cells[0]) for cells in rows(section("Commands")) if cells[0].isdigit()}
    assert stated == {0, cli.WRONG_INPUT, 2, cli.NOT_CONVERGED, cli.STOPPED}


def test_names_of_the_interface_exist():
    import gapfit

    for name in re.findall(r"gapfit\.(\w+)\(", README):
        assert inspect.isroutine(getattr(gapfit, name)), name


# ---------------------------------------------------------------------------------------- for contributors


def test_picture_of_the_layout_has_every_module():
    from test_layering import MODULES

    text = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")
    picture = text.split("```text\n", 1)[1].split("```", 1)[0].split("ground", 1)[1]
    drawn = set(re.findall(r"\w+", picture)) | {"__init__", "__main__"}
    missing = set(MODULES) - drawn
    assert not missing, f"draw {', '.join(sorted(missing))} in the picture of DEVELOPERS.md"


def test_modules_named_for_contributors_exist():
    text = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")
    for name in re.findall(r"`(\w+\.py)`", text):
        assert (ROOT / "gapfit" / name).is_file(), name
    for name in re.findall(r"(?:tests|reports)/[\w./]+\w", text):
        assert (ROOT / name).exists() or name.startswith("reports/"), name
