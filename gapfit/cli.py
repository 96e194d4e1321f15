"""Command line: a thin skin. Results go to stdout, notices to stderr.

Exit codes: 0 done, 1 wrong input, 2 wrong usage, 3 done but something did not converge.
"""

from __future__ import annotations

import os
import sys
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import Annotated, Any

import typer

from gapfit.errors import GapfitError, InputError

__all__ = ["app", "main"]

WRONG_INPUT, NOT_CONVERGED, STOPPED = 1, 3, 130

app = typer.Typer(
    help="Activation gaps of quantum Hall states: raw sweeps in, gaps with credible intervals out.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
)

StudyArgument = Annotated[
    Path, typer.Argument(help="Study file (TOML), or the folder that holds study.toml.")
]
SeedOption = Annotated[int | None, typer.Option(help="Seed, instead of the study's.", min=0)]
QuietOption = Annotated[bool, typer.Option("--quiet", help="No notices and no progress.")]
JsonOption = Annotated[bool, typer.Option("--json", help="Print JSON instead of text.")]


def main() -> None:
    """Run the command line; a wrong input ends in one message and exit code 1, without a traceback."""
    for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
        os.environ.setdefault(name, "1")
    try:
        app(prog_name="gapfit")
    except GapfitError as error:
        typer.echo(f"gapfit: {error}", err=True)
        sys.exit(WRONG_INPUT)


def _print_version(wanted: bool) -> None:
    if wanted:
        from gapfit import __version__

        typer.echo(__version__)
        raise typer.Exit


@app.callback()
def _root(
    version: Annotated[
        bool,
        typer.Option(
            "--version", help="Print the version and leave.", is_eager=True, callback=_print_version
        ),
    ] = False,
) -> None:
    """Take the options that belong to no command."""


@app.command()
def new(
    folder: Annotated[Path, typer.Argument(help="Folder with data files, without a study file yet.")],
    quiet: QuietOption = False,
) -> None:
    """Look at the files of a folder and write a commented study file to edit."""
    from gapfit.recognise import recognise_folder, write_study

    recognition = recognise_folder(folder)
    path = write_study(recognition)
    _notices(recognition.notices, quiet)
    for key in recognition.open:
        typer.echo(f"please fill in: {key}", err=True)
    typer.echo(str(path))


@app.command()
def fit(
    study: StudyArgument,
    out: Annotated[
        Path | None, typer.Option(help="Folder for the results; 'results' beside the study otherwise.")
    ] = None,
    seed: SeedOption = None,
    engine: Annotated[
        str | None, typer.Option(help="mcmc or fast, instead of the study's.", metavar="ENGINE")
    ] = None,
    jobs: Annotated[int, typer.Option(help="Processes; 0 takes one per processor.", min=0)] = 0,
    figures: Annotated[bool, typer.Option("--figures/--no-figures", help="Draw figures.")] = True,
    quiet: QuietOption = False,
    as_json: JsonOption = False,
) -> None:
    """Fit every filling of a study: gaps with credible intervals, tables, figures and a report."""
    _check_engine(engine)
    from gapfit.study import load_study
    from gapfit.workflow import fit_study

    loaded = load_study(study)
    folder = out or loaded.folder / "results"
    with _stoppable(), _progress(quiet) as told:
        result = fit_study(
            loaded,
            folder,
            engine=engine,
            seed=seed,
            jobs=jobs or os.cpu_count() or 1,
            figures=figures,
            progress=told,
        )
    _notices(result.measurement.notices, quiet)
    if as_json:
        typer.echo((folder / "gaps.json").read_text(encoding="utf-8"), nl=False)
    else:
        _print_table(result.gaps)
        typer.echo(f"results: {folder}  (open {folder / 'report.html'})")
    if not result.converged:
        late = [str(one.filling) for one in result.fits if not one.diagnostics.converged]
        typer.echo(f"not converged: filling {', '.join(late)}; the reasons are in gaps.json", err=True)
        raise typer.Exit(NOT_CONVERGED)


@app.command()
def minima(
    study: StudyArgument,
    out: Annotated[
        Path | None, typer.Option(help="Folder for series.csv and the figures of the data.")
    ] = None,
    quiet: QuietOption = False,
    as_json: JsonOption = False,
) -> None:
    """Find and read the minima of a study, without fitting them."""
    from gapfit.study import load_study
    from gapfit.workflow import find_minima

    measurement = find_minima(load_study(study), out)
    _notices(measurement.notices, quiet)
    rows = [
        {
            "filling": str(one.filling),
            "field_T": round(one.field_T, 5),
            "n_points": one.n_point,
            "temperature_low_K": round(float(one.temperature[0]), 5),
            "temperature_high_K": round(float(one.temperature[-1]), 5),
            "quantity": one.quantity,
            "lowest_reading": float(f"{one.value.min():.5g}"),
            "highest_reading": float(f"{one.value.max():.5g}"),
            "flags": ";".join(one.flags),
        }
        for one in measurement.series
    ]
    if as_json:
        import json

        typer.echo(json.dumps({"density": measurement.density_rows, "minima": rows}, indent=1))
        return
    for density in measurement.density_rows:
        typer.echo("density  " + "  ".join(f"{key} {value}" for key, value in density.items()))
    _print_columns(rows)


@app.command()
def simulate(
    name: Annotated[str, typer.Argument(help="Demo study, or 'list' for their names.")],
    out: Annotated[Path, typer.Option(help="Folder in which the folder of the study is made.")] = Path("."),
    seed: SeedOption = None,
    quiet: QuietOption = False,
) -> None:
    """Write a synthetic study with a known truth."""
    from gapfit.simulate import DEMOS
    from gapfit.workflow import simulate_study

    if name == "list":
        for key, words in DEMOS.items():
            typer.echo(f"{key}: {words}")
        return
    if name in DEMOS and (out / name).exists() and any((out / name).iterdir()):
        raise InputError(f"{out / name} exists already; name another folder with --out")
    paths = simulate_study(name, out, seed)
    _notices([f"{len(paths)} files, all synthetic"], quiet)
    typer.echo(str(out / name))


@app.command()
def table(
    run: Annotated[Path, typer.Argument(help="Folder of a finished run.")],
    form: Annotated[
        str, typer.Option("--format", help="text, md, html, tex, csv or json.", metavar="FORMAT")
    ] = "text",
    unit: Annotated[str, typer.Option(help="K, meV or coulomb.", metavar="UNIT")] = "K",
    level: Annotated[int, typer.Option(help="Probability of the intervals, 68 or 95 %.")] = 68,
    half: Annotated[bool, typer.Option("--half", help="Print half the gap, the activation energy.")] = False,
    columns: Annotated[str, typer.Option(help="Columns, separated by commas.")] = "",
    out: Annotated[Path | None, typer.Option(help="File to write instead of stdout.")] = None,
) -> None:
    """Print the table of a finished run for a paper."""
    from gapfit.storage import write_text
    from gapfit.tablecells import TableStyle
    from gapfit.tables import read_gaps
    from gapfit.typeset import render_table

    frame = read_gaps(run)
    try:
        style = TableStyle(
            format=form,
            unit=unit,
            level=level,
            convention="half" if half else "gap",
            columns=tuple(part.strip() for part in columns.split(",") if part.strip()),
            standalone=True,
        )
        text = render_table(frame, style)
    except InputError as error:
        raise typer.BadParameter(str(error)) from error
    if out is None:
        typer.echo(text, nl=not text.endswith("\n"))
    else:
        typer.echo(str(write_text(out, text)))


# ---------------------------------------------------------------------------------------------------- helpers


def _check_engine(engine: str | None) -> None:
    if engine not in (None, "mcmc", "fast"):
        raise typer.BadParameter(f"{engine!r} is no engine; choose mcmc or fast", param_hint="--engine")


def _notices(notices: Sequence[str], quiet: bool) -> None:
    if not quiet:
        for notice in notices:
            typer.echo(f"note: {notice}", err=True)


def _print_table(frame: Any) -> None:
    from gapfit.tablecells import TableStyle
    from gapfit.typeset import render_table

    typer.echo(render_table(frame, TableStyle(format="text")))


def _print_columns(rows: Sequence[dict[str, Any]]) -> None:
    heads = list(rows[0])
    cells = [heads, *[[str(row[head]) for head in heads] for row in rows]]
    widths = [max(len(line[index]) for line in cells) for index in range(len(heads))]
    for line in cells:
        typer.echo("  ".join(cell.ljust(width) for cell, width in zip(line, widths, strict=True)).rstrip())


@contextmanager
def _stoppable() -> Iterator[None]:
    """Say what is left of a run that the user stops."""
    try:
        yield
    except KeyboardInterrupt:
        typer.echo("gapfit: stopped; the same command goes on from the fillings that are done", err=True)
        raise typer.Exit(STOPPED) from None


@contextmanager
def _progress(quiet: bool) -> Iterator[Callable[[int, int, str], None] | None]:
    """Progress bar on a terminal, plain lines elsewhere."""
    if quiet:
        yield None
        return
    if not sys.stderr.isatty():
        yield lambda done, total, words: typer.echo(f"[{done}/{total}] {words}", err=True)
        return
    from rich.console import Console
    from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeElapsedColumn

    parts = (TextColumn("{task.description}"), BarColumn(), MofNCompleteColumn(), TimeElapsedColumn())
    with Progress(*parts, console=Console(stderr=True), transient=True) as bar:
        task = bar.add_task("reading the sweeps", total=None)
        yield lambda done, total, words: bar.update(task, completed=done, total=total, description=words)


if __name__ == "__main__":
    main()
