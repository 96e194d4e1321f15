"""What the columns of raw files seem to hold, told from names, units and values.

Every guess says why it was made, for the person who has to check it.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from gapfit.columns import UNITS, Table, kind_of_name, looks_like_magnitude

__all__ = ["ColumnGuess", "guess_columns", "guess_current", "guess_number_in_names", "guess_sample"]

FloatArray = NDArray[np.float64]
LOWEST_K, HIGHEST_K = 1e-3, 400.0
STRONGEST_FIELD_T = 60.0
LARGEST_CURRENT_A = 1e-3
"""A larger current in a comment is one of the magnet."""

SWEEP_TRAVEL = 4.5
"""Path length over range below which a column is a sweep: 1 one way, 2 there and back, 4 a loop."""


@dataclass(frozen=True)
class ColumnGuess:
    """What one column seems to hold.

    Attributes
    ----------
    role : str
        ``"field"``, ``"temperature"``, ``"gate"``, ``"density"``, ``"rho_xx"``, ``"rho_xy"``,
        ``"quadrature"``, ``"current"`` or ``"other"``.
    column : str
        Name in the files.
    unit : str or None
        Unit, stated or guessed.
    reason : str
        Why, in plain words.
    swept : bool
        Whether it runs through a range within each file.
    """

    role: str
    column: str
    unit: str | None
    reason: str
    swept: bool = False


@dataclass(frozen=True)
class _Facts:
    """Name, unit and values of one column over all files."""

    name: str
    unit: str | None
    low: float
    high: float
    medians: FloatArray
    relative_spread: float
    travel: float
    magnitude: bool

    @property
    def kind(self) -> str | None:
        """Dimension of the unit, else what the name means; a gate stays a gate."""
        named = kind_of_name(self.name)
        if self.unit is None or named == "gate":
            return named
        return UNITS[self.unit].dimension

    @property
    def swept(self) -> bool:
        """Whether the column runs smoothly through a range within each file."""
        return self.relative_spread > 0.05 and self.travel < SWEEP_TRAVEL

    @property
    def size(self) -> float:
        return max(abs(self.low), abs(self.high))


def _facts(tables: Sequence[Table], name: str) -> _Facts:
    columns = [table.values[name][np.isfinite(table.values[name])] for table in tables]
    columns = [column for column in columns if column.size]
    scale = max((float(np.max(np.abs(column))) for column in columns), default=0.0) or 1.0
    spans = [float(np.ptp(column)) for column in columns]
    paths = [float(np.sum(np.abs(np.diff(column)))) for column in columns]
    everything = np.concatenate(columns) if columns else np.zeros(1)
    return _Facts(
        name=name,
        unit=tables[0].unit(name),
        low=float(everything.min()),
        high=float(everything.max()),
        medians=np.array([np.median(column) for column in columns]),
        relative_spread=float(np.median(spans)) / scale if spans else 0.0,
        travel=float(np.median([p / s if s > 0 else np.inf for p, s in zip(paths, spans, strict=True)])),
        magnitude=looks_like_magnitude(name, everything, tables[0].columns, tables[0].unit(name)),
    )


def guess_columns(tables: Sequence[Table]) -> tuple[ColumnGuess, ...]:
    """Role of every column of numbers of files with the same columns.

    Parameters
    ----------
    tables : sequence of Table
        At least one.

    Returns
    -------
    tuple of ColumnGuess
        Each role other than ``"other"`` at most once.
    """
    facts = [_facts(tables, name) for name in tables[0].columns if name in tables[0].values]
    found: list[ColumnGuess] = []
    for pick in (_field, _temperature, _gate, _density, _current):
        rest = [fact for fact in facts if fact.name not in {guess.column for guess in found}]
        found += pick(rest)
    rest = [fact for fact in facts if fact.name not in {guess.column for guess in found}]
    field = next((guess.column for guess in found if guess.role == "field" and guess.swept), None)
    found += _signals(rest, tables, field)
    taken = {guess.column for guess in found}
    found += [ColumnGuess("other", f.name, f.unit, "not used") for f in facts if f.name not in taken]
    return tuple(found)


def _best(facts: Sequence[_Facts], score: Callable[[_Facts], float]) -> _Facts | None:
    return max(facts, key=score, default=None)


def _field(facts: Sequence[_Facts]) -> list[ColumnGuess]:
    named = [fact for fact in facts if fact.kind == "field"]
    best = _best(named, lambda fact: fact.relative_spread)
    if best is not None:
        unit = best.unit or ("T" if best.size <= STRONGEST_FIELD_T else "G")
        return [ColumnGuess("field", best.name, unit, "by its name or unit", best.swept)]
    unnamed = [f for f in facts if f.kind is None and f.swept and 0.3 < f.size <= STRONGEST_FIELD_T]
    best = _best(unnamed, lambda fact: -fact.travel)
    if best is None:
        return []
    reason = "it runs smoothly through a range of a few tesla in each file"
    return [ColumnGuess("field", best.name, "T", reason, swept=True)]


def _temperature(facts: Sequence[_Facts]) -> list[ColumnGuess]:
    named = [f for f in facts if f.kind == "temperature" and f.medians.size and f.medians.min() > 0]
    best = _best(named, lambda fact: -fact.relative_spread)
    if best is not None:
        unit = best.unit or ("mK" if float(best.medians.max()) > HIGHEST_K else "K")
        inside = UNITS[unit].factor * float(best.medians.min()) >= LOWEST_K
        said = "by its name or unit" + ("" if inside else "; CHECK THE UNIT, it is very low")
        return [ColumnGuess("temperature", best.name, unit, said)]
    steady = [
        fact
        for fact in facts
        if fact.kind is None
        and fact.relative_spread < 0.05
        and np.unique(np.round(fact.medians, 4)).size > 1
        and fact.low >= LOWEST_K
        and fact.high <= HIGHEST_K
    ]
    if not steady:
        return []
    reason = "it is nearly constant in each file and differs between files"
    return [ColumnGuess("temperature", steady[0].name, "K", reason)]


def _gate(facts: Sequence[_Facts]) -> list[ColumnGuess]:
    best = _best([f for f in facts if f.kind == "gate"], lambda fact: fact.relative_spread)
    if best is None:
        return []
    return [ColumnGuess("gate", best.name, best.unit or "V", "by its name", best.swept)]


def _density(facts: Sequence[_Facts]) -> list[ColumnGuess]:
    best = _best([f for f in facts if f.kind == "density"], lambda fact: fact.relative_spread)
    if best is None:
        return []
    unit = best.unit or ("m^-2" if best.size > 1e14 else "cm^-2")
    return [ColumnGuess("density", best.name, unit, "by its name or unit", best.swept)]


def _current(facts: Sequence[_Facts]) -> list[ColumnGuess]:
    best = _best([f for f in facts if f.kind == "current" and f.size > 0], lambda fact: fact.size)
    return (
        [] if best is None else [ColumnGuess("current", best.name, best.unit or "A", "by its name or unit")]
    )


# --- longitudinal and Hall signals ---------------------------------------------------------------------


_BEFORE_CHANNEL = r"(?:[_ .\-]|xx|xy|yx|yy|^)"
_OUT_OF_PHASE = re.compile(_BEFORE_CHANNEL + r"(?:y\d*|quad\w*|imag\w*|im|out[\w \-]*)$")
_IN_PHASE = re.compile(_BEFORE_CHANNEL + r"(?:x\d*|in[_ \-]?ph\w*|real|re)$")


def _channel(name: str) -> str:
    """``"x"``, ``"y"``, ``"phase"`` or empty: the lock-in channel that a name tells."""
    bare = name.lower()
    if _OUT_OF_PHASE.search(bare):
        return "y"
    if _IN_PHASE.search(bare):
        return "x"
    return "phase" if re.search(r"phase|theta|phi|deg", bare) else ""


def _axis(name: str) -> str:
    """``"xx"``, ``"xy"`` or empty: the resistivity component that a name tells."""
    bare = name.lower()
    if re.search(r"xy|yx|hall|trans", bare):
        return "xy"
    return "xx" if re.search(r"xx|yy|long", bare) else ""


def _parity(tables: Sequence[Table], name: str, field: str) -> float:
    """-1 for a signal odd in the field (or, with one field sign, linear in it), +1 for an even one."""
    table = max(tables, key=len)
    known = np.isfinite(table.values[field]) & np.isfinite(table.values[name])
    abscissa, signal = table.values[field][known], table.values[name][known]
    if abscissa.size < 3 or np.ptp(abscissa) == 0 or np.ptp(signal) == 0:
        return 0.0
    order = np.argsort(abscissa)
    abscissa, signal = abscissa[order], signal[order]
    reach = min(abscissa[-1], -abscissa[0])
    if reach > 0.2 * float(np.max(np.abs(abscissa))):
        grid = np.linspace(0.05 * reach, reach, 400)
        up, down = np.interp(grid, abscissa, signal), np.interp(-grid, abscissa, signal)
        return float(2 * np.sum(up * down) / (np.sum(up**2) + np.sum(down**2) or 1.0))
    return -1.0 if abs(float(np.corrcoef(abscissa, signal)[0, 1])) > 0.97 else 1.0


def _signal_unit(fact: _Facts) -> str:
    if fact.unit is not None:
        return fact.unit
    if fact.kind in ("resistance", "conductance"):
        return {"resistance": "ohm", "conductance": "S"}[fact.kind]
    return "V" if fact.kind == "voltage" or fact.size < 0.1 else "ohm"


def _signals(facts: Sequence[_Facts], tables: Sequence[Table], field: str | None) -> list[ColumnGuess]:
    """In-phase longitudinal and Hall signals, and the longitudinal quadrature."""
    measured = ("voltage", "resistance", "conductance", None)
    usable = [f for f in facts if f.kind in measured and f.size > 0 and _channel(f.name) != "phase"]
    usable.sort(key=lambda fact: fact.magnitude)
    in_phase = [fact for fact in usable if _channel(fact.name) != "y"]
    across = _pick(in_phase, "xy", tables, field)
    rest = [fact for fact in in_phase if across is None or fact.name != across[0].name]
    along = _pick(rest, "xx", tables, field)
    if along is None:
        nameless = [fact for fact in rest if not _axis(fact.name)]
        along = (nameless[0], "no other column is left") if nameless else None
    found = [
        ColumnGuess(role, pick[0].name, _signal_unit(pick[0]), pick[1] + _warning(pick[0]))
        for role, pick in (("rho_xx", along), ("rho_xy", across))
        if pick is not None
    ]
    return found + ([] if along is None else _quadrature(usable, along[0].name))


def _pick(
    facts: Sequence[_Facts], axis: str, tables: Sequence[Table], field: str | None
) -> tuple[_Facts, str] | None:
    """Signal along (xx) or across (xy) the current, by its name or by its symmetry in the field."""
    if axis == "xy":
        facts = [fact for fact in facts if not fact.magnitude]
    named = [fact for fact in facts if _axis(fact.name) == axis]
    if named:
        return named[0], "by its name"
    for fact in facts if field is not None else ():
        odd = not _axis(fact.name) and _parity(tables, fact.name, field or "") < -0.5
        if not _axis(fact.name) and odd == (axis == "xy"):
            return fact, "odd in the field" if odd else "even in the field"
    return None


def _warning(fact: _Facts) -> str:
    if not fact.magnitude:
        return ""
    return "; it looks like a lock-in MAGNITUDE, which is refused unless allow_magnitude = true"


def _quadrature(usable: Sequence[_Facts], along: str) -> list[ColumnGuess]:
    """Out-of-phase channel that belongs to the longitudinal signal."""
    stem = re.sub(r"[_ .\-]?(?:x|in[_ \-]?ph\w*|real|re)$", "", along.lower())
    for fact in usable:
        if _channel(fact.name) == "y" and fact.name.lower().startswith(stem):
            return [ColumnGuess("quadrature", fact.name, _signal_unit(fact), "by its name")]
    return []


# --- names and comments --------------------------------------------------------------------------------

_AMPERES = re.compile(
    r"(?:current|excitation|drive|bias|\bI(?:_?(?:ac|exc|sd|xx))?\b)[^\d+\-]{0,20}"
    r"(\d+(?:[.,]\d+)?(?:[eE][+\-]?\d+)?)\s*(pA|nA|[uµμ]A|mA|A)\b",
    re.IGNORECASE,
)


def guess_current(tables: Sequence[Table]) -> tuple[float, ...]:
    """Excitation currents that the comments of the files state, each once, A."""
    found = set()
    for table in tables:
        for comment in table.comments:
            match = _AMPERES.search(comment)
            if match is not None:
                prefix = match[2][:-1].replace("µ", "u").replace("μ", "u")
                power = {"p": 1e-12, "n": 1e-9, "u": 1e-6, "m": 1e-3, "": 1.0}[prefix.lower()]
                current = float(f"{float(match[1].replace(',', '.')) * power:.12g}")
                if current < LARGEST_CURRENT_A:
                    found.add(current)
    return tuple(sorted(found))


def guess_sample(tables: Sequence[Table]) -> str | None:
    """Name of the sample that the comments state, or None."""
    for comment in (comment for table in tables for comment in table.comments):
        match = re.search(
            r"^\W*(?:sample|device|wafer)\b(?:\s+name)?\s*[:=]?\s*([\w.\-]*\w)", comment, re.IGNORECASE
        )
        if match is not None:
            return match[1]
    return None


def guess_number_in_names(names: Sequence[str], units: Sequence[str]) -> tuple[str, str] | None:
    """Regular expression and unit of a number that stands in every file name, with its unit after it.

    Parameters
    ----------
    names : sequence of str
        File names.
    units : sequence of str
        Units to look for, such as ``("mK", "K")``.

    Returns
    -------
    pattern : str
        With a group ``(?P<value>...)``.
    unit : str
    """
    for unit in units:
        number = re.compile(rf"([A-Za-z_\-=]*)(\d+(?:[p.,]\d+)?)[ _]?{unit}(?![A-Za-z])")
        matches = [number.search(name) for name in names]
        found = [match for match in matches if match is not None]
        if names and len(found) == len(names):
            heads = [match[1] for match in found]
            head = heads[0][-2:] if len(set(heads)) == 1 else ""
            gap = "[ _]?" if any(re.search(r"[ _]", match[0][len(match[1]) :]) for match in found) else ""
            return f"{head}(?P<value>[0-9p.,]+){gap}{unit}", unit
    return None
