"""Which figures belong to a run, and where they are kept: each drawn once, saved, and returned as SVG."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from matplotlib.figure import Figure

from gapfit.arrhenius import arrhenius_figure
from gapfit.calibration import DensityEstimate
from gapfit.fit import GapFit
from gapfit.gather import Minimum
from gapfit.marginals import corner_figure, window_map_figure
from gapfit.measured import density_figure, traces_figure, width_figure
from gapfit.plots import hopping_figure, local_slope_figure
from gapfit.series import TemperatureSeries
from gapfit.style import figure_svg, save_figure
from gapfit.surveys import gap_across_figure, gaps_figure, overview_figure
from gapfit.traces import TraceFamily

if TYPE_CHECKING:
    from collections.abc import Iterator

__all__ = ["FILLING_FIGURES", "draw_data", "draw_filling", "draw_survey"]

FILLING_FIGURES: dict[str, Callable[[GapFit], Figure]] = {
    "arrhenius": arrhenius_figure,
    "window_map": window_map_figure,
    "corner": corner_figure,
    "local_slope": local_slope_figure,
    "hopping": hopping_figure,
}
"""Figures of one filling, in the order of the report."""


def draw_filling(fit: GapFit, folder: Path, name: str) -> dict[str, str]:
    """Draw the figures of one filling.

    Parameters
    ----------
    fit : GapFit
    folder : Path
        Where PNG and PDF go.
    name : str
        File name of the filling, such as ``"1_3"``.

    Returns
    -------
    dict of str to str
        SVG by name of the figure.
    """
    drawn = {}
    for kind, draw in FILLING_FIGURES.items():
        if kind == "window_map" and fit.problem.windows.n_window == 1:
            continue
        drawn[kind] = _keep(draw(fit), folder, f"{kind}_{name}")
    return drawn


def draw_data(
    family: TraceFamily,
    density: DensityEstimate,
    series: Sequence[TemperatureSeries],
    minima: Sequence[Minimum],
    folder: Path,
) -> dict[str, str]:
    """Draw sweeps, minimum widths and densities.

    Parameters
    ----------
    family : TraceFamily
    density : DensityEstimate
    series : sequence of TemperatureSeries
    minima : sequence of Minimum
    folder : Path
        Where PNG and PDF go.

    Returns
    -------
    dict of str to str
        SVG by name of the figure.
    """
    drawn = {"traces": _keep(traces_figure(family, density, series), folder, "traces")}
    if any(one.half_width == one.half_width for one in minima):
        drawn["width"] = _keep(width_figure(minima), folder, "width")
    drawn["density"] = _keep(density_figure(density), folder, "density")
    return drawn


def draw_survey(
    fits: Sequence[GapFit],
    across: Mapping[str, Sequence[tuple[float, GapFit]]],
    permittivity: float | None,
    folder: Path,
) -> dict[str, str]:
    """Draw the figures that show all fillings together.

    Parameters
    ----------
    fits : sequence of GapFit
    across : mapping of str to sequence of (float, GapFit)
        Fits beside the exact fillings; may be empty.
    permittivity : float or None
    folder : Path
        Where PNG and PDF go.

    Returns
    -------
    dict of str to str
        SVG by name of the figure.
    """
    return {name: _keep(figure, folder, name) for name, figure in _surveys(fits, across, permittivity)}


def _surveys(
    fits: Sequence[GapFit],
    across: Mapping[str, Sequence[tuple[float, GapFit]]],
    permittivity: float | None,
) -> Iterator[tuple[str, Figure]]:
    fields = {round(abs(fit.series.field_T), 3) for fit in fits}
    fillings = {fit.filling for fit in fits}
    yield "gaps", gaps_figure(fits, permittivity, "filling" if len(fillings) > 1 else "field")
    if len(fields) > 1 and len(fillings) > 1:
        yield "gaps_field", gaps_figure(fits, permittivity, "field")
    yield "overview", overview_figure(fits)
    if across:
        yield "gap_across", gap_across_figure(across)


def _keep(figure: Figure, folder: Path, name: str) -> str:
    save_figure(figure, folder, name)
    return figure_svg(figure)
