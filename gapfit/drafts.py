"""The text of a first study file, with comments for whoever edits it."""

from __future__ import annotations

import json
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Literal

from gapfit.hall import HOSTS

__all__ = ["FILL_IN", "Entry", "Recognition", "draft_study", "toml_value"]

FILL_IN = '"FILL IN"'
"""What stands where nothing could be recognised: a column that no file has."""


@dataclass(frozen=True)
class Entry:
    """One line of a drafted section.

    Attributes
    ----------
    key : str
    value : str
        As TOML.
    remark : str
        Comment beside it.
    """

    key: str
    value: str
    remark: str = ""

    @property
    def open(self) -> bool:
        """Whether somebody has to fill in the value."""
        return FILL_IN in self.value


@dataclass(frozen=True)
class Recognition:
    """What a folder seems to hold.

    Attributes
    ----------
    folder : Path
    kind : {"traces", "series"}
        Raw sweeps, or minima already read off.
    sample, cooldown : str
        Names, from the comments of the files, else from the folder.
    entries : tuple of Entry
        Lines of the [traces] or [series] section.
    notices : tuple of str
        What was recognised, and what not, in plain sentences.
    """

    folder: Path
    kind: Literal["traces", "series"]
    sample: str
    cooldown: str
    entries: tuple[Entry, ...]
    notices: tuple[str, ...]

    @property
    def open(self) -> tuple[str, ...]:
        """Keys that somebody has to fill in before the study can run."""
        return tuple(entry.key for entry in self.entries if entry.open)


def toml_value(value: str | float | Sequence[str]) -> str:
    """TOML spelling; texts with a backslash in single quotes."""
    if isinstance(value, str):
        return f"'{value}'" if "\\" in value and "'" not in value else json.dumps(value, ensure_ascii=False)
    return repr(value) if isinstance(value, float) else f"[{', '.join(map(toml_value, value))}]"


def _lines(entries: Sequence[Entry]) -> str:
    """Entries as aligned lines with their remarks."""
    texts = [f"{entry.key} = {entry.value}" for entry in entries]
    rows = []
    for entry, text in zip(entries, texts, strict=True):
        remark = f"EDIT: {entry.remark}" if entry.open else entry.remark
        rows.append(f"{text:<60}  # {remark}" if remark else text)
    return "\n".join(rows) + "\n"


def draft_study(recognition: Recognition) -> str:
    """Text of a study file for what was recognised, with comments for whoever edits it.

    Parameters
    ----------
    recognition : Recognition

    Returns
    -------
    str
        TOML that `gapfit.study.load_study` reads. Where something could not be recognised the line is
        marked EDIT.
    """
    n_open = len(recognition.open)
    edits = f"{n_open} marked EDIT must be filled in" if n_open else "none must be edited"
    head = f"# First study of this folder, from what its files look like. Check the lines; {edits}.\n\n"
    names = f"name = {toml_value(recognition.sample)}\ncooldown = {toml_value(recognition.cooldown)}\n"
    body = _lines(recognition.entries)
    if recognition.kind == "series":
        return f"{head}[sample]\n{names}{_HOST}{_PER_SQUARE}[series]\n{body}\n{_TAIL}"
    gate = _GATE if any(entry.key == "gate" for entry in recognition.entries) else ""
    return f"{head}[sample]\n{names}{_HOST}{_DENSITY}{_GEOMETRY}[traces]\n{body}{gate}\n{_FILLINGS}{_TAIL}"


_HOST = f"""\
# host = "GaAs"         # gives permittivity, mass and g; others built in:
#                       # {", ".join(name for name in HOSTS if name != "GaAs")}
"""

_DENSITY = """\
# density_cm2 = 1e11    # not needed: determined from the data
"""

_GEOMETRY = """\

[geometry]              # turns ohm into ohm per square: moves prefactors, never a gap
kind = "unknown"        # hall-bar | van-der-pauw | corbino | resistivity | unknown
# kind = "hall-bar"
# length_um = 400       # distance of the voltage contacts
# width_um = 100
# relative_error = 0.05

"""

_PER_SQUARE = """\

[geometry]
kind = "resistivity"    # readings are per square already

"""

_GATE = """\
# capacitance_F_per_m2 = 1e-3   # optional start, otherwise from the plateaus
# neutrality_V = 0.0            # optional start
"""

_FILLINGS = """\
[fillings]
look_for = "auto"       # or a list such as ["1/3", "2/5", "2/3"]
max_denominator = 11

"""

_TAIL = """\
# [thermometry]         # without it temperatures count as exact, which the results say
# relative_error = 0.01 # of each reading
# scale_error = 0.02    # common to all readings
# electron_saturation = true

[fit]
quantity = "auto"       # rho_xx | sigma_xx | auto
mechanisms = "default"
window = "average"
noise = "student"
seed = 20260101
"""
