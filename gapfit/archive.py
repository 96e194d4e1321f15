"""Draws in files: posteriors for other programs, and whole fits that an interrupted run takes up again."""

from __future__ import annotations

import hashlib
import io
import json
import zipfile
from collections.abc import Mapping
from dataclasses import asdict, fields
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammaln

from gapfit.averaging import AveragingRules, MemberDraws
from gapfit.curve import Reference, log_prefactor
from gapfit.diagnostics import Diagnostics
from gapfit.errors import FileError
from gapfit.fit import FitSettings, GapFit
from gapfit.mechanisms import PARAMETERS, SLOT, Combination
from gapfit.posterior import STUDENT_DEGREES, STUDENT_SCALE, Problem, Windows
from gapfit.priors import Prior
from gapfit.series import ExcludedPoint, TemperatureSeries
from gapfit.storage import FORMAT_VERSION, atomic_path, write_bytes
from gapfit.straight import StraightLine
from gapfit.verdict import Verdict

__all__ = ["fit_fingerprint", "load_fit", "save_fit", "write_posterior"]

FloatArray = NDArray[np.float64]
Content = tuple[tuple[str, ...], NDArray[Any], str, str]
"""Dimensions, values, unit and meaning of a variable."""


# --------------------------------------------------------------------------- posteriors for other programs


def write_posterior(fit: GapFit, path: str | Path) -> Path:
    """Write the posterior draws of a fit as NetCDF-4 in the layout that ArviZ reads.

    Groups ``posterior``, ``sample_stats``, ``log_likelihood``, ``observed_data`` and ``constant_data``, with
    the dimensions ``chain``, ``draw`` and ``point``. The draws are an equally weighted mixture over
    combinations of mechanisms and windows in random order, so there is one chain; R-hat and effective sample
    size of the ensembles behind it are attributes of the file.

    Parameters
    ----------
    fit : GapFit
    path : str or Path

    Returns
    -------
    Path
    """
    import h5netcdf

    with atomic_path(path) as temporary, h5netcdf.File(temporary, "w") as file:
        for name, value in _attributes(fit).items():
            file.attrs[name] = value
        for group, variables in _groups(fit).items():
            _write_group(file.create_group(group), variables)
    return Path(path)


def _write_group(group: Any, variables: Mapping[str, Content]) -> None:
    """One group; `group` is a new h5netcdf group."""
    for dimensions, values, _, _ in variables.values():
        for dimension, size in zip(dimensions, values.shape, strict=True):
            if dimension not in group.dimensions:
                group.dimensions[dimension] = size
                coordinate = group.create_variable(dimension, (dimension,), "i8")
                coordinate[...] = np.arange(size)
    for name, (dimensions, values, unit, meaning) in variables.items():
        if values.dtype.kind == "U":
            variable = group.create_variable(name, dimensions, _text_type())
            variable[...] = values.astype(object)
        else:
            options = {"compression": "gzip", "compression_opts": 4, "shuffle": True} if values.ndim else {}
            variable = group.create_variable(name, dimensions, values.dtype, **options)
            variable[...] = values
        variable.attrs["long_name"] = meaning
        if unit:
            variable.attrs["units"] = unit


def _text_type() -> Any:
    import h5py

    return h5py.string_dtype()


def _attributes(fit: GapFit) -> dict[str, Any]:
    from gapfit import __version__

    series, diagnostics = fit.series, fit.diagnostics
    return {
        "inference_library": "gapfit",
        "inference_library_version": __version__,
        "gapfit_format_version": FORMAT_VERSION,
        "convention": "gap_K is Delta in rho_0 exp(-Delta / 2 k_B T)",
        "sample": series.sample,
        "cooldown": series.cooldown,
        "filling": str(series.filling),
        "field_T": series.field_T,
        "quantity": series.quantity,
        "verdict": fit.verdict,
        "p_activated": fit.p_activated,
        "engine": fit.settings.engine,
        "seed": fit.settings.seed,
        "converged": int(diagnostics.converged),
        "rhat": diagnostics.rhat,
        "ess": diagnostics.ess,
        "flags": ";".join(fit.flags),
    }


def _groups(fit: GapFit) -> dict[str, dict[str, Content]]:
    series, draws = fit.series, fit.draws
    return {
        "posterior": _posterior_group(fit),
        "sample_stats": {
            "lp": _chain(draws.log_likelihood, "", "log-likelihood, summed over windows"),
            "member_weight": _chain(_member_weights(fit), "", "share of the draws in the same member"),
        },
        "log_likelihood": {
            "reading": (
                ("chain", "draw", "point"),
                _point_log_likelihood(fit)[None],
                "",
                "log density of each reading, whether or not the window keeps it",
            )
        },
        "observed_data": {"reading": (("point",), series.value, series.unit, series.quantity)},
        "constant_data": {
            "temperature_K": (("point",), series.temperature, "K", "temperature"),
            "temperature_error_K": (("point",), series.temperature_error, "K", "its standard error"),
            "reading_error": (("point",), series.error, series.unit, "standard error of the reading"),
            "combination_name": (
                ("combination_index",),
                np.array([item.name for item in draws.combinations]),
                "",
                "combination of mechanisms",
            ),
            "combination_share": (("combination_index",), draws.share, "", "posterior probability"),
        },
    }


def _chain(values: NDArray[Any], unit: str, meaning: str) -> Content:
    return ("chain", "draw"), values[None], unit, meaning


def _posterior_group(fit: GapFit) -> dict[str, Content]:
    draws, series = fit.draws, fit.series
    windows, temperature = fit.problem.windows, fit.series.temperature
    group = {
        "combination": _chain(
            draws.combination.astype("i4"), "", "index into constant_data/combination_name"
        ),
        "in_regime": _chain(draws.activated.astype("i4"), "", "1 where the draw has an activated regime"),
        "window_low_K": _chain(temperature[windows.low[draws.window]], "K", "lowest temperature kept"),
        "window_high_K": _chain(temperature[windows.high[draws.window] - 1], "K", "highest temperature kept"),
        "scale": _chain(fit.scale, "", "thermometer scale and model floor, a factor of the gap"),
    }
    for parameter in PARAMETERS:
        values = draws.natural(parameter.name)
        if np.isfinite(values).any():
            unit = series.unit if parameter.unit == "reading" else parameter.unit
            group[parameter.name] = _chain(values, unit, parameter.meaning)
    if "gap_K" in group:
        scaled = draws.natural("gap_K") * fit.scale
        group["gap_K"] = _chain(scaled, "K", "gap, scale included; NaN where the draw has none")
        with np.errstate(over="ignore"):
            prefactor = np.exp(log_prefactor(draws.coordinates, fit.problem.reference))
        prefactor = np.where(np.isfinite(scaled), prefactor, np.nan)
        group["prefactor"] = _chain(prefactor, series.unit, "activated prefactor at 1/T = 0")
    return group


def _member_weights(fit: GapFit) -> FloatArray:
    draws = fit.draws
    key = draws.combination * fit.problem.windows.n_window + draws.window
    _, member, count = np.unique(key, return_inverse=True, return_counts=True)
    return np.asarray(count[member.reshape(-1)] / key.size)


def _point_log_likelihood(fit: GapFit) -> FloatArray:
    """Log density of every reading with all constants, ndarray[n_draw, n_point]."""
    series, coordinates = fit.series, fit.draws.coordinates
    curve = fit.problem.curve(coordinates)
    stated = np.exp(coordinates[:, SLOT["inflation"], None]) * series.error
    sigma = np.hypot(stated, curve.slope * series.temperature_error / series.temperature)
    residual = (series.value - curve.total) / sigma
    if not fit.problem.student:
        return np.asarray(-(residual**2) / 2 - 0.5 * np.log(2 * np.pi) - np.log(sigma))
    degrees = STUDENT_DEGREES
    constant = gammaln((degrees + 1) / 2) - gammaln(degrees / 2) - 0.5 * np.log(degrees * np.pi)
    fall = (degrees + 1) / 2 * np.log1p((residual / STUDENT_SCALE) ** 2 / degrees)
    return np.asarray(constant - fall - np.log(STUDENT_SCALE * sigma))


# ------------------------------------------------------------------------------------- fits to be taken up


def fit_fingerprint(series: TemperatureSeries, settings: FitSettings) -> str:
    """Text that is the same only for the same readings, settings and version of the package.

    Parameters
    ----------
    series : TemperatureSeries
    settings : FitSettings

    Returns
    -------
    str
        32 hexadecimal digits.
    """
    from gapfit import __version__

    record = {
        "version": __version__,
        "format": FORMAT_VERSION,
        "parameters": _parameter_names(),
        "series": {name: _exact(value) for name, value in asdict(series).items()},
        "settings": asdict(settings),
    }
    return hashlib.sha256(json.dumps(record, sort_keys=True).encode()).hexdigest()[:32]


def _parameter_names() -> list[str]:
    """What the coordinates of a draw are, in order."""
    return [parameter.name for parameter in PARAMETERS]


def _exact(value: Any) -> Any:
    if isinstance(value, np.ndarray):
        return value.tolist()
    return str(value) if isinstance(value, Fraction) else value


def save_fit(fit: GapFit, path: str | Path) -> Path:
    """Store a fit so that `load_fit` gives the same numbers to the last digit.

    The file is an npz archive of plain arrays and one JSON text; the fast engine's own records are not kept.

    Parameters
    ----------
    fit : GapFit
    path : str or Path

    Returns
    -------
    Path
    """
    arrays = _arrays("series", fit.series) | _arrays("prior", fit.problem.prior)
    arrays |= _arrays("windows", fit.problem.windows) | _arrays("draws", fit.draws)
    text = json.dumps(_record(fit), default=lambda number: number.item())
    buffer = io.BytesIO()
    np.savez(buffer, allow_pickle=False, scale=fit.scale, record=np.array(text), **arrays)
    return write_bytes(path, buffer.getvalue())


def _arrays(owner: str, record: Any) -> dict[str, NDArray[Any]]:
    """Fields of a frozen record that are arrays, by names that tell the owner."""
    found = {f"{owner}.{item.name}": getattr(record, item.name) for item in fields(record)}
    return {name: value for name, value in found.items() if isinstance(value, np.ndarray)}


def _record(fit: GapFit) -> dict[str, Any]:
    """Everything about a fit that is no array."""
    apart = _arrays("series", fit.series)
    series = {
        name: _exact(value) for name, value in asdict(fit.series).items() if f"series.{name}" not in apart
    }
    return {
        "format_version": FORMAT_VERSION,
        "parameters": _parameter_names(),
        "series": series,
        "settings": asdict(fit.settings),
        "reference": asdict(fit.problem.reference),
        "student": fit.problem.student,
        "combinations": [item.mechanisms for item in fit.draws.combinations],
        "verdict": asdict(fit.verdict_record),
        "diagnostics": asdict(fit.diagnostics),
        "line": None if fit.line is None else asdict(fit.line),
        "flags": fit.flags,
    }


def load_fit(path: str | Path) -> GapFit:
    """Fit of a file that `save_fit` wrote.

    Parameters
    ----------
    path : str or Path

    Returns
    -------
    GapFit
        As it was, except that `explored` is empty.

    Raises
    ------
    FileError
        If the file cannot be read, is damaged, or was written by another version of the layout.
    """
    try:
        with np.load(path, allow_pickle=False) as archive:
            arrays = {name: archive[name] for name in archive.files}
        record = json.loads(str(arrays.pop("record")))
        if (record["format_version"], record["parameters"]) != (FORMAT_VERSION, _parameter_names()):
            raise FileError("was stored by another version of gapfit; fit again", file=path)
        return _rebuilt(record, arrays)
    except (OSError, ValueError, KeyError, TypeError, EOFError, zipfile.BadZipFile) as error:
        raise FileError(
            f"is no stored fit, or damaged ({error}); remove it and fit again", file=path
        ) from error


def _rebuilt(record: dict[str, Any], arrays: dict[str, NDArray[Any]]) -> GapFit:
    parts: dict[str, dict[str, NDArray[Any]]] = {"series": {}, "prior": {}, "windows": {}, "draws": {}}
    for name, values in arrays.items():
        values.setflags(write=False)
        owner, _, field = name.partition(".")
        if field:
            parts[owner][field] = values
    series = _rebuilt_series(record["series"], parts["series"])
    problem = Problem(
        series,
        Reference(**record["reference"]),
        Prior(**parts["prior"]),
        Windows(**parts["windows"]),
        record["student"],
    )
    combinations = tuple(Combination(tuple(names)) for names in record["combinations"])
    diagnostics = record["diagnostics"] | {"reasons": tuple(record["diagnostics"]["reasons"])}
    return GapFit(
        series,
        _rebuilt_settings(record["settings"]),
        problem,
        MemberDraws(combinations, **parts["draws"]),
        arrays["scale"],
        Verdict(**record["verdict"]),
        Diagnostics(**diagnostics),
        (),
        None if record["line"] is None else StraightLine(**record["line"]),
        tuple(record["flags"]),
    )


def _rebuilt_series(record: dict[str, Any], arrays: dict[str, NDArray[Any]]) -> TemperatureSeries:
    changed = {
        "filling": Fraction(record["filling"]),
        "flags": tuple(record["flags"]),
        "excluded": tuple(ExcludedPoint(**gone) for gone in record["excluded"]),
    }
    return TemperatureSeries(**{**record, **changed, **arrays})


def _rebuilt_settings(record: dict[str, Any]) -> FitSettings:
    changed = {
        "combinations": tuple(Combination(tuple(item["mechanisms"])) for item in record["combinations"]),
        "window": None if record["window"] is None else tuple(record["window"]),
        "rules": AveragingRules(**record["rules"]),
    }
    return FitSettings(**{**record, **changed})
