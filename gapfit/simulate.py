"""Synthetic data: one temperature series for studies of coverage, and the demo data sets.

Every number that is written comes from the forward model of `gapfit.landscape` seen through
`gapfit.instrument`; nothing here knows a fit. The same seed writes the same bytes.
"""

from __future__ import annotations

import gzip
import json
from collections.abc import Callable
from dataclasses import asdict
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.constants import e

from gapfit.demo_samples import (
    CAMPION_BACKGROUND,
    CAMPION_FIELDS_T,
    CAMPION_LINE,
    CAMPION_TEMPERATURES_K,
    HAREBELL_3,
    HAREBELL_4,
    TEASEL_TEMPERATURES_K,
    HallBar,
    campion_states,
    harebell_states,
    teasel_states,
)
from gapfit.demo_studies import (
    CAMPION_LOOK_FOR,
    CAMPION_STUDY,
    HAREBELL_LOOK_FOR,
    MARK,
    TEASEL_STUDY,
    harebell_study,
)
from gapfit.errors import InputError
from gapfit.hall import density_from_filling, field_at_filling, filling_factor
from gapfit.instrument import Instrument, correlated_noise, field_seen, quantise, temperatures, voltages
from gapfit.landscape import StateTruth, temperature_curve, trace

__all__ = ["DEMOS", "SEEDS", "StateTruth", "simulate_demo", "simulate_series", "temperature_curve"]

FloatArray = NDArray[np.float64]

DEMOS: dict[str, str] = {
    "harebell-3": "field sweeps of a clean GaAs-like Hall bar, 13 temperatures, nine fillings",
    "campion-1": "gate sweeps of a graphene-like sample at four fields, eleven temperatures",
    "teasel-2": "minima already read off: eight series, some of them without a gap to find",
    "harebell-4": "a second, dirtier Hall bar of the design of harebell-3, nine temperatures",
}
"""Name of every demo data set and what it is."""

SEEDS = {"harebell-3": 30_311, "campion-1": 10_143, "teasel-2": 20_257, "harebell-4": 40_409}
"""Seed of every demo data set as shipped."""


def simulate_series(
    temperature: FloatArray,
    truth: StateTruth,
    relative_noise: float,
    floor_ohm: float,
    rng: np.random.Generator,
) -> tuple[FloatArray, FloatArray]:
    """Readings of one state at several temperatures, with their standard errors.

    Parameters
    ----------
    temperature : ndarray[n_point], K
        Bath temperatures.
    truth : StateTruth
        The state.
    relative_noise : float
        Standard deviation in proportion to the true value.
    floor_ohm : float, ohm
        Standard deviation that does not vanish with the signal.
    rng : Generator
        Source of randomness.

    Returns
    -------
    value, error : ndarray[n_point], ohm
        Values may be negative where the truth is below the noise.
    """
    true = temperature_curve(temperature, truth)
    error = np.hypot(relative_noise * true, floor_ohm)
    return true + error * rng.standard_normal(true.shape), error


def simulate_demo(name: str, folder: Path, seed: int | None = None) -> list[Path]:
    """Write a demo data set: raw files, a study file, and the truth.

    Parameters
    ----------
    name : str
        Key of `DEMOS`.
    folder : Path
        The data set is written into ``folder/name``.
    seed : int, optional
        Seed of the randomness; by default the one of the shipped data.

    Returns
    -------
    list of Path
        Files written.

    Raises
    ------
    InputError
        If there is no demo of that name, or the seed is negative.
    """
    if name not in DEMOS:
        raise InputError(f"there is no demo {name!r}; choose from {', '.join(DEMOS)}")
    seed = SEEDS[name] if seed is None else seed
    if seed < 0:
        raise InputError(f"seed {seed} is negative; give a whole number of zero or more")
    files = _MAKERS[name](seed)
    written = []
    for relative, content in files.items():
        path = Path(folder) / name / relative
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_bytes(content)
        written.append(path)
    return written


# --- text -----------------------------------------------------------------------------------------------


def _columns(columns: list[FloatArray], formats: list[str], delimiter: str) -> str:
    """Rows of numbers, a format per column."""
    pattern = delimiter.join(formats)
    rows = zip(*(column.tolist() for column in columns), strict=True)
    return "\n".join(pattern.format(*row) for row in rows) + "\n"


def _zipped(text: bytes) -> bytes:
    """Compressed text without a time stamp, so that equal text gives equal bytes."""
    return gzip.compress(text, compresslevel=9, mtime=0)


def _json(content: dict[str, Any]) -> bytes:
    return (json.dumps(content, indent=1, ensure_ascii=False) + "\n").encode()


def _state_record(truth: StateTruth, field_T: float, looked_for: set[Fraction]) -> dict[str, Any]:
    """A state as it stands in the truth file; an infinite background is null."""
    record = asdict(truth) | {"filling": str(truth.filling), "field_T": field_T, "regime": truth.regime}
    record["looked_for"] = truth.filling in looked_for
    return {key: None if value == float("inf") else value for key, value in record.items()}


def _truth_head(name: str, seed: int, line: Instrument | None = None) -> dict[str, Any]:
    head: dict[str, Any] = {"synthetic": True, "note": MARK, "name": name, "seed": seed}
    return head if line is None else head | {"instrument": asdict(line)}


# --- harebells: field sweeps ----------------------------------------------------------------------------


def _field_axis(limit_T: float, coarse: int) -> FloatArray:
    """Rising fields from -limit to +limit, denser at low and at high field, `coarse` times wider steps."""
    low = np.arange(0.0, 1.2, 0.004 * coarse)
    middle = np.arange(1.2, 5.0, 0.010 * coarse)
    high = np.linspace(5.0, limit_T, round((limit_T - 5.0) / (0.005 * coarse)) + 1)
    half = np.concatenate([low, middle, high])
    return np.concatenate([-half[:0:-1], half])


def _kept_rows(signal: FloatArray, rng: np.random.Generator) -> NDArray[np.intp]:
    """Rows that reach the file: a few are lost on steep flanks, where the lock-in changes its range."""
    kept = np.ones(len(signal), dtype=bool)
    steepness = np.abs(np.gradient(signal))
    steep = np.flatnonzero(steepness > np.quantile(steepness, 0.9))
    for start in rng.choice(steep, size=4, replace=False):
        kept[start : start + rng.integers(2, 5)] = False
    return np.flatnonzero(kept)


def _field_sweep(
    reading_T: FloatArray, nominal_K: float, sample: HallBar, rng: np.random.Generator
) -> list[FloatArray]:
    """Columns of a sweep: field, temperature, and four voltages."""
    line = sample.line
    reading_T = reading_T + 2e-4 * rng.standard_normal(len(reading_T))
    field_T = field_seen(reading_T, line)
    temperature, read_K = temperatures(nominal_K, len(field_T), line, rng)
    filling = filling_factor(sample.density_per_m2, np.abs(field_T))
    rho_xx, rho_xy = trace(filling, field_T, temperature, harebell_states(sample), sample.flanks)
    columns = [reading_T, read_K, *voltages(rho_xx, rho_xy, line, rng)]
    kept = _kept_rows(columns[2], rng)
    return [column[kept] for column in columns]


def _harebell_truth(name: str, seed: int, sample: HallBar) -> bytes:
    looked_for = {Fraction(text) for text in HAREBELL_LOOK_FOR}
    states = [
        _state_record(truth, field_at_filling(truth.filling, sample.density_per_m2), looked_for)
        for truth in harebell_states(sample)
    ]
    facts = {
        "density_per_m2": sample.density_per_m2,
        "composite_fermion_mass": sample.mass,
        "broadening_K": sample.broadening_K,
        "temperatures_K": sample.temperatures_K,
        "flanks": asdict(sample.flanks),
    }
    return _json(_truth_head(name, seed, sample.line) | facts | {"states": states})


def _harebell_3(seed: int) -> dict[str, bytes]:
    """One tab-separated file per temperature, sweeps alternating in direction, with a unit row."""
    axis = _field_axis(HAREBELL_3.field_limit_T, 1)
    files = {}
    streams = np.random.SeedSequence(seed).spawn(len(HAREBELL_3.temperatures_K))
    for index, (nominal_K, stream) in enumerate(zip(HAREBELL_3.temperatures_K, streams, strict=True)):
        ordered, direction = (axis, "up") if index % 2 == 0 else (axis[::-1], "down")
        columns = _field_sweep(ordered, nominal_K, HAREBELL_3, np.random.default_rng(stream))
        columns[1] = 1e3 * columns[1]
        head = f"# {MARK}\n# sample harebell-3, first cool-down, field sweep {direction}\n"
        head += "# excitation 10 nA, 7.3 Hz; X in phase, Y quadrature\n"
        head += "B\tT_mK\tVxx_X\tVxx_Y\tVxy_X\tVxy_Y\nT\tmK\tV\tV\tV\tV\n"
        body = _columns(columns, ["{:.4f}", "{:.2f}", *["{:.6g}"] * 4], "\t")
        files[f"sweeps/hb3_{index + 1:02d}_{direction}.dat.gz"] = _zipped((head + body).encode())
    study = harebell_study(
        name="harebell-3", density_cm2="1.12e11", mobility="5e6", suffix="dat.gz", temperature="T_mK",
        unit="mK", field="B", along="Vxx", across="Vxy",
    )  # fmt: skip
    truth = _harebell_truth("harebell-3", seed, HAREBELL_3)
    return {**files, "study.toml": study.encode(), "truth.json": truth}


def _harebell_4(seed: int) -> dict[str, bytes]:
    """One comma-separated UTF-16 file per temperature, up and down sweep one after the other."""
    axis = _field_axis(HAREBELL_4.field_limit_T, 2)
    files = {}
    streams = np.random.SeedSequence(seed).spawn(len(HAREBELL_4.temperatures_K))
    for index, (nominal_K, stream) in enumerate(zip(HAREBELL_4.temperatures_K, streams, strict=True)):
        rng = np.random.default_rng(stream)
        sweeps = [_field_sweep(part, nominal_K, HAREBELL_4, rng) for part in (axis, axis[::-1])]
        columns = [np.concatenate(pair) for pair in zip(*sweeps, strict=True)]
        head = f"% {MARK}\n% sample: harebell-4\n% excitation: 10 nA\n"
        head += "Magnet (T),Bath (K),Uxx_X (V),Uxx_Y (V),Uxy_X (V),Uxy_Y (V)\n"
        body = _columns(columns, ["{:.4f}", "{:.5f}", *["{:.6g}"] * 4], ",")
        files[f"sweeps/run{index + 1:02d}.csv.gz"] = _zipped(f"\ufeff{head}{body}".encode("utf-16-le"))
    study = harebell_study(
        name="harebell-4", density_cm2="1.08e11", mobility="1.5e6", suffix="csv.gz", temperature="Bath",
        unit="K", field="Magnet", along="Uxx", across="Uxy",
    )  # fmt: skip
    truth = _harebell_truth("harebell-4", seed, HAREBELL_4)
    return {**files, "study.toml": study.encode(), "truth.json": truth}


# --- campion: gate sweeps -------------------------------------------------------------------------------

_CAMPION_CAPACITANCE, _CAMPION_NEUTRALITY_V = 1.121e-3 * 1.005, 0.0527


def _gate_sweep(field_T: float, nominal_K: float, rng: np.random.Generator) -> list[FloatArray]:
    """Columns of a gate sweep: gate, field, and two voltages."""
    reach_V = density_from_filling(2.55, field_T) * e / _CAMPION_CAPACITANCE
    gate_V = quantise(_CAMPION_NEUTRALITY_V + np.linspace(-reach_V, reach_V, 1201), 1e-4)
    density = _CAMPION_CAPACITANCE / e * (gate_V - _CAMPION_NEUTRALITY_V)
    temperature, _ = temperatures(nominal_K, len(gate_V), CAMPION_LINE, rng)
    temperature /= (1 + CAMPION_LINE.temperature_scale) * (
        1 + CAMPION_LINE.temperature_spread * rng.standard_normal()
    )
    field = np.full_like(gate_V, field_T)
    filling = filling_factor(density, field)
    states = campion_states(field_T)
    rho_xx, rho_xy = trace(filling, field, temperature, states, CAMPION_BACKGROUND)
    along, _, across, _ = voltages(rho_xx, rho_xy, CAMPION_LINE, rng)
    return [gate_V, field + 1e-4 * np.round(3 * correlated_noise(len(field), 30.0, rng)), along, across]


def _campion_1(seed: int) -> dict[str, bytes]:
    """A semicolon-separated file with decimal commas per field and temperature, which the name tells."""
    files = {}
    looked_for = {Fraction(text) for text in CAMPION_LOOK_FOR}
    pairs = [(field_T, nominal_K) for field_T in CAMPION_FIELDS_T for nominal_K in CAMPION_TEMPERATURES_K]
    streams = np.random.SeedSequence(seed).spawn(len(pairs))
    for (field_T, nominal_K), stream in zip(pairs, streams, strict=True):
        columns = _gate_sweep(field_T, nominal_K, np.random.default_rng(stream))
        head = f"# {MARK}\n# campion-1; magnet persistent; excitation 20 nA\n"
        head += "U_gate;Field;U_xx;U_xy\nV;T;V;V\n"
        body = _columns(columns, ["{:.4f}", "{:.4f}", "{:.6g}", "{:.6g}"], ";").replace(".", ",")
        label = f"{nominal_K:g}".replace(".", "p")
        files[f"sweeps/campion_B{field_T:.1f}T_T{label}K.txt"] = (head + body).encode()
    states = [
        _state_record(truth, field_T, looked_for)
        for field_T in CAMPION_FIELDS_T
        for truth in campion_states(field_T)
    ]
    facts = {
        "capacitance_F_per_m2": _CAMPION_CAPACITANCE,
        "neutrality_V": _CAMPION_NEUTRALITY_V,
        "temperatures_K": CAMPION_TEMPERATURES_K,
        "flanks": asdict(CAMPION_BACKGROUND),
    }
    truth = _json(_truth_head("campion-1", seed, CAMPION_LINE) | facts | {"states": states})
    return {**files, "study.toml": CAMPION_STUDY.encode(), "truth.json": truth}


# --- teasel: minima already read off --------------------------------------------------------------------


def _teasel_rows(field_T: float, truth: StateTruth, rng: np.random.Generator) -> str:
    """Rows of one series; the temperature read differs from the true one by its error."""
    read_K = np.array(TEASEL_TEMPERATURES_K)
    error_K = 0.005 * read_K
    value, error = simulate_series(read_K + error_K * rng.standard_normal(len(read_K)), truth, 0.01, 0.3, rng)
    body = _columns([read_K, error_K, value, error], ["{:.4f}", "{:.5f}", "{:.3f}", "{:.3f}"], ",")
    return "".join(f"{truth.filling},{field_T:g},{row}\n" for row in body.splitlines())


def _teasel_2(seed: int) -> dict[str, bytes]:
    """A table of minima."""
    states = teasel_states()
    streams = np.random.SeedSequence(seed).spawn(len(states))
    table = f"# {MARK}\nfilling,field_T,temperature_K,temperature_error_K,rho_xx_ohm,rho_xx_ohm_error\n"
    for (field_T, truth), stream in zip(states, streams, strict=True):
        table += _teasel_rows(field_T, truth, np.random.default_rng(stream))
    looked_for = {truth.filling for _, truth in states}
    records = [_state_record(truth, field_T, looked_for) for field_T, truth in states]
    truth_file = _json(_truth_head("teasel-2", seed) | {"states": records})
    return {"minima.csv": table.encode(), "study.toml": TEASEL_STUDY.encode(), "truth.json": truth_file}


_MAKERS: dict[str, Callable[[int], dict[str, bytes]]] = {
    "harebell-3": _harebell_3,
    "campion-1": _campion_1,
    "teasel-2": _teasel_2,
    "harebell-4": _harebell_4,
}
