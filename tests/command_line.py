"""The command line run inside the tests, and small studies for it."""

from __future__ import annotations

import contextlib
import io
import sys
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass
from pathlib import Path
from unittest.mock import patch

import numpy as np
from trace_world import DENSITY, landscape

from gapfit.cli import main
from gapfit.hall import field_at_filling

# gap (K), prefactor (ohm), leak (ohm)
TRUTH = {"1/3": (6.0, 9000.0, 0.0), "2/5": (2.5, 4000.0, 0.0), "1": (8.0, 6000.0, 12.0)}
TEMPERATURES = (0.2, 0.26, 0.33, 0.42, 0.54, 0.7, 0.9, 1.15, 1.45)


@dataclass(frozen=True)
class Ran:
    """How a command ended."""

    code: int
    out: str
    err: str


def run(*arguments: object) -> Ran:
    """Run gapfit as the shell does, with its exit code and streams."""
    out, err = io.StringIO(), io.StringIO()
    words = ["gapfit", *map(str, arguments)]
    with patch.object(sys, "argv", words), contextlib.redirect_stdout(out), contextlib.redirect_stderr(err):
        try:
            main()
            code: object = 0
        except SystemExit as leave:
            code = leave.code or 0
    assert isinstance(code, int)
    return Ran(code, out.getvalue(), err.getvalue())


def minima_rows(fillings: Iterable[str] = tuple(TRUTH), seed: int = 3) -> Iterator[dict[str, object]]:
    """Readings of activated minima with one percent and 0.2 ohm of noise."""
    rng = np.random.default_rng(seed)
    for filling in fillings:
        gap, prefactor, leak = TRUTH[filling]
        for kelvin in TEMPERATURES:
            true = prefactor * np.exp(-gap / (2 * kelvin)) + leak
            error = float(np.hypot(0.01 * true, 0.2))
            yield {
                "filling": filling,
                "field_T": round(float(field_at_filling(as_number(filling), 1.05e15)), 3),
                "temperature_K": kelvin,
                "temperature_error_K": round(0.002 * kelvin, 6),
                "rho_xx_ohm": round(true + error * rng.standard_normal(), 4),
                "rho_xx_ohm_error": round(error, 4),
            }


def as_number(filling: str) -> float:
    above, _, below = filling.partition("/")
    return float(above) / float(below or 1)


def csv_text(rows: Iterable[dict[str, object]]) -> str:
    lines = list(rows)
    body = [",".join(str(cell) for cell in row.values()) for row in lines]
    return "\n".join([",".join(lines[0]), *body]) + "\n"


SERIES_STUDY = """\
[sample]
name = "clover-1"
cooldown = "first"
host = "GaAs"

[geometry]
kind = "resistivity"

[series]
file = "minima.csv"

[thermometry]
scale_error = 0.01

[fit]
engine = "fast"
mechanisms = ["activation", "activation + leak"]
seed = 11
"""


def series_study(folder: Path, fillings: Iterable[str] = tuple(TRUTH), text: str = SERIES_STUDY) -> Path:
    """A study of minima already read off, quick to fit; its folder."""
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "study.toml").write_text(text)
    (folder / "minima.csv").write_text(csv_text(minima_rows(fillings)))
    return folder


TRACES_STUDY = """\
[sample]
name = "clover-2"
host = "GaAs"

[geometry]
kind = "resistivity"

[traces]
files = ["sweeps/*.csv"]
sweep = "field"
temperature = { column = "T", unit = "K" }
field = { column = "B", unit = "T" }
rho_xx = { column = "Rxx", unit = "ohm" }
rho_xy = { column = "Rxy", unit = "ohm" }

[fillings]
look_for = ["2/3", "1"]

[fit]
engine = "fast"
mechanisms = ["activation + power mean"]
"""


def sweep_columns(kelvin: float, seed: int = 0) -> dict[str, np.ndarray]:
    """Columns of one rising field sweep of the test world."""
    rng = np.random.default_rng(seed)
    field = np.linspace(0.2, 9.0, 500)
    along, across = landscape(field, kelvin, DENSITY)
    noise = 0.3 * rng.standard_normal((2, field.size))
    return {"B": field, "T": np.full(field.size, kelvin), "Rxx": along + noise[0], "Rxy": across + noise[1]}


def sweep_text(columns: dict[str, np.ndarray]) -> str:
    rows = zip(*columns.values(), strict=True)
    return "\n".join([",".join(columns), *(",".join(f"{cell:.6g}" for cell in row) for row in rows)]) + "\n"


def traces_study(folder: Path, text: str = TRACES_STUDY) -> Path:
    """A study of a few raw field sweeps; its folder."""
    (folder / "sweeps").mkdir(parents=True, exist_ok=True)
    (folder / "study.toml").write_text(text)
    for number, kelvin in enumerate((0.15, 0.25, 0.4, 0.6), start=1):
        (folder / f"sweeps/run{number}.csv").write_text(sweep_text(sweep_columns(kelvin, number)))
    return folder


# --- spoiling a study ------------------------------------------------------------------------------------

Change = Callable[[Path], object]
"""Something done to the folder of a study."""


def swap(file: str, old: str, new: str) -> Change:
    """Replace the first occurrence of a text."""

    def change(folder: Path) -> None:
        text = (folder / file).read_text()
        assert old in text
        (folder / file).write_text(text.replace(old, new, 1))

    return change


def cell(file: str, row: int, column: str, text: str) -> Change:
    """Write another text into one cell; rows are counted from 1, the heading included."""

    def change(folder: Path) -> None:
        rows = [line.split(",") for line in (folder / file).read_text().splitlines()]
        rows[row - 1][rows[0].index(column)] = text
        (folder / file).write_text("\n".join(map(",".join, rows)) + "\n")

    return change


def column(file: str, name: str, new: Callable[[float], float]) -> Change:
    """Change every number of a column."""

    def change(folder: Path) -> None:
        head, *rows = [line.split(",") for line in (folder / file).read_text().splitlines()]
        place = head.index(name)
        for row in rows:
            row[place] = f"{new(float(row[place])):.9g}"
        (folder / file).write_text("\n".join(map(",".join, [head, *rows])) + "\n")

    return change


def lines(file: str, keep: Callable[[list[str]], list[str]]) -> Change:
    """Change the order or the number of the lines below the heading."""

    def change(folder: Path) -> None:
        head, *rows = (folder / file).read_text().splitlines()
        (folder / file).write_text("\n".join([head, *keep(rows)]) + "\n")

    return change


def every(*changes: Change) -> Change:
    """Several changes after each other."""

    def change(folder: Path) -> None:
        for one in changes:
            one(folder)

    return change


SWEEPS = tuple(f"sweeps/run{number}.csv" for number in (1, 2, 3, 4))


def contents(folder: Path) -> dict[str, bytes]:
    """Every file below a folder, hidden ones included, and every folder."""
    return {
        entry.relative_to(folder).as_posix(): entry.read_bytes() if entry.is_file() else b"folder"
        for entry in sorted(folder.rglob("*"))
    }
