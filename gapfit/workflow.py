"""The one straight story: a study in, everything out.

`fit_study` measures (sweeps to series), fits every series, and, where a folder is given, records tables,
figures, posterior files and the report. Series are independent, so they go through a pool of processes; the
numbers do not depend on it.
"""

from __future__ import annotations

import multiprocessing
import os
import signal
import time
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import ProcessPoolExecutor
from contextlib import contextmanager, nullcontext
from dataclasses import dataclass, field, replace
from fractions import Fraction
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any, Protocol

import numpy as np

from gapfit.archive import fit_fingerprint, load_fit, save_fit, write_posterior
from gapfit.errors import FileError, InputError
from gapfit.fit import FitSettings, GapFit, fit_temperature_series
from gapfit.folders import ResultFolder
from gapfit.hall import filling_label, parse_filling
from gapfit.intervals import Marginal
from gapfit.measurement import Measurement, fit_settings, measure, reading_settings
from gapfit.minima import readings_across
from gapfit.series import TemperatureSeries
from gapfit.simulate import simulate_demo
from gapfit.storage import run_record, series_names, write_json, write_series, write_text
from gapfit.study import Study, study_as_dict

if TYPE_CHECKING:
    import pandas as pd

    from gapfit.digest import WholeRange

__all__ = ["Progress", "StudyResult", "find_minima", "fit_study", "simulate_study"]

Progress = Callable[[int, int, str], None]
"""Called with steps done, steps in all, and what was done last."""

ACROSS_OFFSETS = (-0.5, 0.5)
"""Where the gap across a minimum is read, in half-widths of the minimum (own choice)."""

THREADS = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "VECLIB_MAXIMUM_THREADS")


@dataclass(frozen=True)
class StudyResult:
    """Fits of a study.

    Attributes
    ----------
    study : Study
    measurement : Measurement
    fits : tuple of GapFit
        In the order of the series.
    across : dict of str to tuple of (float, GapFit)
        Fits beside the exact fillings, by distance in filling factor.
    folder : Path or None
        Where the results were written.
    """

    study: Study
    measurement: Measurement
    fits: tuple[GapFit, ...]
    across: dict[str, tuple[tuple[float, GapFit], ...]] = field(default_factory=dict)
    folder: Path | None = None

    @cached_property
    def gaps(self) -> pd.DataFrame:
        """Table of gaps, a row per filling, columns as in gaps.csv."""
        from gapfit.digest import TableContext
        from gapfit.tables import gap_table

        return gap_table(self.fits, TableContext(permittivity=self.study.sample.constants.permittivity))

    def fit(self, filling: str | Fraction, field_T: float | None = None) -> GapFit:
        """Fit of a filling, nearest to a field where there are several.

        Parameters
        ----------
        filling : str or Fraction
        field_T : float, optional, T

        Returns
        -------
        GapFit

        Raises
        ------
        InputError
            If there is no such filling, or there are several and no field is given.
        """
        wanted = parse_filling(filling)
        found = [fit for fit in self.fits if fit.filling == wanted]
        if not found:
            there = ", ".join(dict.fromkeys(filling_label(fit.filling) for fit in self.fits))
            raise InputError(f"there is no fit of filling {wanted}; there are {there}")
        if field_T is None:
            if len(found) > 1:
                fields = ", ".join(f"{fit.series.field_T:.4g}" for fit in found)
                raise InputError(f"filling {wanted} was fitted at {fields} T; give field_T")
            return found[0]
        return min(found, key=lambda fit: abs(fit.series.field_T - field_T))

    def gap(self, filling: str | Fraction, field_T: float | None = None) -> Marginal:
        """Posterior of the gap of a filling, K; as `fit`."""
        return self.fit(filling, field_T).gap

    @property
    def converged(self) -> bool:
        """Whether every fit converged."""
        return all(fit.diagnostics.converged for fit in self.fits)


def find_minima(study: Study, out: str | Path | None = None) -> Measurement:
    """Find and read the minima of a study without fitting them.

    Parameters
    ----------
    study : Study
    out : str or Path, optional
        Folder for series.csv and the figures of the data.

    Returns
    -------
    Measurement

    Raises
    ------
    GapfitError
        As `gapfit.measurement.measure`.
    """
    if out is not None:
        _refuse_inputs(study, Path(out) / "series.csv")
    measurement = measure(study)
    if out is not None:
        folder = Path(out)
        write_series(folder / "series.csv", measurement.series)
        if measurement.family is not None and measurement.density is not None:
            from gapfit.gallery import draw_data

            draw_data(
                measurement.family,
                measurement.density,
                measurement.series,
                measurement.minima,
                folder / "figures",
            )
    return measurement


def simulate_study(name: str, folder: str | Path, seed: int | None = None) -> list[Path]:
    """Write a demo study with its truth; as `gapfit.simulate.simulate_demo`."""
    return simulate_demo(name, Path(folder), seed)


def fit_study(
    study: Study,
    out: str | Path | None = None,
    *,
    engine: str | None = None,
    seed: int | None = None,
    jobs: int = 1,
    figures: bool = True,
    progress: Progress | None = None,
) -> StudyResult:
    """Fit every filling of a study.

    Parameters
    ----------
    study : Study
    out : str or Path, optional
        Folder for all results; nothing is written without it.
    engine : {"mcmc", "fast"}, optional
        Instead of the study's.
    seed : int, optional
        Instead of the study's.
    jobs : int
        Processes; the numbers do not depend on it. With more than one, a script must guard its entry with
        ``if __name__ == "__main__"``.
    figures : bool
        Whether to draw figures.
    progress : callable, optional
        Told of every step.

    Returns
    -------
    StudyResult

    Raises
    ------
    GapfitError
        As `gapfit.measurement.measure`; and if `out` holds other things.
    """
    started = time.monotonic()
    folder = None if out is None else ResultFolder(out)
    if folder is not None:
        _refuse_inputs(study, folder.path)
    measurement = measure(study)
    settings = fit_settings(study, engine, seed)
    names = series_names(measurement.series)
    with nullcontext() if folder is None else folder.open(), _pool(jobs, len(names)) as submit:
        tasks = _submit_all(submit, study, measurement, settings, names, folder, figures)
        done = [_told(task, index, len(tasks), progress) for index, task in enumerate(tasks)]
        result = StudyResult(
            study,
            measurement,
            tuple(one.fit for one in done),
            {one.title: one.across for one in done if one.across},
        )
        if folder is not None:
            _record(result, settings, names, folder, done, started, figures)
            folder.finish()
            result = replace(result, folder=folder.path)
    return result


def _refuse_inputs(study: Study, place: Path) -> None:
    """Refuse to write where an input lies, which would be lost."""
    for file in study.files:
        if file.resolve().is_relative_to(place.resolve()):
            raise InputError(
                f"{file} is read by this study and would be overwritten; name another folder with --out"
            )


# ------------------------------------------------------------------------------------------- one series


@dataclass(frozen=True)
class _Task:
    """Everything a process needs for one series."""

    series: TemperatureSeries
    beside: tuple[tuple[float, TemperatureSeries], ...]
    settings: FitSettings
    name: str
    title: str
    stored: Path | None
    folder: Path | None
    figures: bool


@dataclass(frozen=True)
class _Done:
    """What comes back."""

    title: str
    fit: GapFit
    across: tuple[tuple[float, GapFit], ...]
    drawn: dict[str, str]
    alone: WholeRange | None


class _Pending(Protocol):
    """A task whose result can be waited for."""

    def result(self) -> _Done: ...


def _submit_all(
    submit: Callable[..., _Pending],
    study: Study,
    measurement: Measurement,
    settings: FitSettings,
    names: Sequence[str],
    folder: ResultFolder | None,
    figures: bool,
) -> list[_Pending]:
    tasks = []
    for series, name in zip(measurement.series, names, strict=True):
        stored = None if folder is None else folder.fits / f"{fit_fingerprint(series, settings)}.npz"
        beside = _beside(measurement, series, study) if folder is not None and figures else ()
        title = _title(series, measurement.series)
        place = None if folder is None else folder.building
        task = _Task(series, beside, settings, name, title, stored, place, figures)
        tasks.append(submit(_fit_one, task))
    return tasks


def _title(series: TemperatureSeries, all_series: Sequence[TemperatureSeries]) -> str:
    several = sum(one.filling == series.filling for one in all_series) > 1
    field = f" at {series.field_T:.3g} T" if several and np.isfinite(series.field_T) else ""
    return f"{filling_label(series.filling)}{field}"


def _beside(
    measurement: Measurement, series: TemperatureSeries, study: Study
) -> tuple[tuple[float, TemperatureSeries], ...]:
    """Series beside the exact filling, at parts of the half-width that the coldest sweeps show."""
    if measurement.family is None or measurement.density is None:
        return ()
    widths = [
        one.half_width
        for one in measurement.minima
        if one.filling == series.filling and abs(one.field_T / series.field_T - 1) < 0.02
    ]
    seen = [width for width in widths if np.isfinite(width)]
    if not seen:
        return ()
    offsets = [float(np.median(seen)) * part for part in ACROSS_OFFSETS]
    return readings_across(measurement.family, measurement.density, series, offsets, reading_settings(study))


def _fit_one(task: _Task) -> _Done:
    """Fit one series, or take the fit that is stored, and draw it."""
    fit = _stored_fit(task.stored)
    if fit is None:
        fit = fit_temperature_series(task.series, task.settings)
        if task.stored is not None:
            save_fit(fit, task.stored)
    across = _fit_across(fit, task)
    drawn: dict[str, str] = {}
    alone = None
    if task.folder is not None:
        from gapfit.digest import whole_range

        alone = whole_range(fit)
        write_posterior(fit, task.folder / "posterior" / f"{task.name}.nc")
        if task.figures:
            from gapfit.gallery import draw_filling

            drawn = draw_filling(fit, task.folder / "figures", task.name)
    return _Done(task.title, fit, across, drawn, alone)


def _stored_fit(path: Path | None) -> GapFit | None:
    """The fit of an earlier run that stopped; a damaged one is made again."""
    if path is None or not path.is_file():
        return None
    try:
        return load_fit(path)
    except FileError:
        path.unlink()
        return None


def _fit_across(fit: GapFit, task: _Task) -> tuple[tuple[float, GapFit], ...]:
    """Gaps beside the exact filling, by the fast engine with the likeliest combination."""
    if fit.verdict != "activated" or not task.beside:
        return ()
    settings = replace(task.settings, engine="fast", combinations=(fit.best[0],), thorough=False)
    sides = [(offset, fit_temperature_series(series, settings)) for offset, series in task.beside]
    return tuple(sorted([*sides, (0.0, fit)], key=lambda pair: pair[0]))


def _told(task: _Pending, index: int, total: int, progress: Progress | None) -> _Done:
    done = task.result()
    if progress is not None:
        progress(index + 1, total, f"filling {done.title}: {done.fit.verdict}")
    return done


@contextmanager
def _pool(jobs: int, n_task: int) -> Iterator[Callable[..., _Pending]]:
    """A way to submit tasks: to processes, or to be done one by one in this one."""
    if jobs < 1:
        raise InputError(f"jobs = {jobs}; at least one process is needed")
    if min(jobs, n_task) == 1:
        yield _Later
        return
    for name in THREADS:
        os.environ.setdefault(name, "1")
    context = multiprocessing.get_context("spawn")
    with ProcessPoolExecutor(min(jobs, n_task), mp_context=context, initializer=_stop_quietly) as pool:
        try:
            yield pool.submit
        except BaseException:
            pool.shutdown(wait=False, cancel_futures=True)
            raise


def _stop_quietly() -> None:
    """Let an interrupt of the keyboard end a process of the pool without a traceback of its own."""
    signal.signal(signal.SIGINT, signal.SIG_DFL)


@dataclass(frozen=True)
class _Later:
    """A task that is done in this process when its result is asked for."""

    work: Callable[[_Task], _Done]
    task: _Task

    def result(self) -> _Done:
        return self.work(self.task)


# ----------------------------------------------------------------------------------------------- record


def _record(
    result: StudyResult,
    settings: FitSettings,
    names: Sequence[str],
    folder: ResultFolder,
    done: Sequence[_Done],
    started: float,
    figures: bool,
) -> None:
    """Write everything but the figures and posteriors of single fillings, which are there already."""
    from gapfit.report import ReportContent, render_report
    from gapfit.tables import write_gaps_csv, write_gaps_json
    from gapfit.typeset import write_tables

    place, study, frame = folder.building, result.study, result.gaps
    alone = [one.alone for one in done]
    write_gaps_csv(frame, place / "gaps.csv")
    write_gaps_json(frame, result.fits, place / "gaps.json", alone)
    write_tables(frame, place)
    write_series(place / "series.csv", result.measurement.series)
    surveys, data = _draw_rest(result, place) if figures else ({}, {})
    record = run_record(
        result.fits,
        study=study_as_dict(study),
        inputs=[study.path, *study.files],
        folder=study.folder,
        seed=settings.seed,
        wall_time_s=time.monotonic() - started,
    )
    title = " ".join(filter(None, (study.sample.name, study.sample.cooldown)))
    report = render_report(
        ReportContent(
            title,
            result.fits,
            frame,
            alone,
            figures=surveys,
            filling_figures=[one.drawn for one in done] if figures else (),
            data_figures=data,
            density=result.measurement.density_rows,
            notices=result.measurement.notices,
            provenance=record,
        )
    )
    write_text(place / "report.html", report)
    write_json(place / "run.json", record | {"files": [*folder.written(), "run.json"]})


def _draw_rest(result: StudyResult, place: Path) -> tuple[dict[str, str], dict[str, str]]:
    from gapfit.gallery import draw_data, draw_survey

    permittivity: Any = result.study.sample.constants.permittivity
    surveys = draw_survey(
        result.fits,
        result.across,
        permittivity if np.isfinite(permittivity) else None,
        place / "figures",
    )
    measured = result.measurement
    if measured.family is None or measured.density is None:
        return surveys, {}
    data = draw_data(measured.family, measured.density, measured.series, measured.minima, place / "figures")
    return surveys, data
