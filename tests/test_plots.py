"""Figures: nothing overlaps, axes have units, the convention stands, sizes are exact, bytes repeat."""

from __future__ import annotations

import re
import struct
import xml.etree.ElementTree as ElementTree
from collections.abc import Callable
from dataclasses import replace
from fractions import Fraction
from itertools import combinations
from pathlib import Path

import matplotlib
import numpy as np
import pytest
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.text import Text
from matplotlib.transforms import Bbox

from gapfit.calibration import DensityEstimate, DensityRoute
from gapfit.errors import InputError
from gapfit.fit import FitSettings, GapFit, fit_temperature_series
from gapfit.gather import Minimum
from gapfit.marginals import corner_columns
from gapfit.mechanisms import SLOT, parse_combination
from gapfit.panels import readings_of
from gapfit.plots import (
    ONE_COLUMN_MM,
    TWO_COLUMNS_MM,
    arrhenius_figure,
    corner_figure,
    density_figure,
    figure_svg,
    finite_differences,
    gap_across_figure,
    gaps_figure,
    hopping_figure,
    local_slope_figure,
    overview_figure,
    save_figure,
    traces_figure,
    width_figure,
    window_map_figure,
)
from gapfit.scales import (
    logarithmic_ticks,
    plain_number,
    reading_scale,
    reading_unit,
    spread_labels,
)
from gapfit.series import ExcludedPoint, TemperatureSeries, make_series
from gapfit.style import size_mm, temperature_colours
from gapfit.traces import Geometry, Sweep, TraceFamily
from gapfit.units import coulomb_scale

ONE_FIT: dict[str, Callable[..., Figure]] = {
    "arrhenius": arrhenius_figure,
    "local_slope": local_slope_figure,
    "hopping": hopping_figure,
    "corner": corner_figure,
    "window_map": window_map_figure,
}
TEMPERATURE = np.array([0.08, 0.1, 0.15, 0.22, 0.31, 0.42, 0.55, 0.7, 0.86, 1.04, 1.25, 1.5])
FEW = ("activation", "activation + es + leak", "activation + roll-over", "es", "constant")


# ------------------------------------------------------------------------------------------------- the cases


def fitted(series: TemperatureSeries, names: tuple[str, ...] = FEW, **settings: object) -> GapFit:
    chosen = tuple(parse_combination(name) for name in names)
    return fit_temperature_series(series, FitSettings("fast", chosen, seed=1, **settings))  # type: ignore[arg-type]


def noisy(curve: np.ndarray, error: float, seed: int) -> tuple[np.ndarray, np.ndarray]:
    sigma = np.hypot(error, 0.01 * curve)
    return curve + sigma * np.random.default_rng(seed).standard_normal(curve.size), sigma


def negative_readings() -> GapFit:
    value, error = noisy(4000 * np.exp(-2.5 / TEMPERATURE), 0.3, 3)
    value[:3] = [-0.5, 0.0, -0.2]
    series = make_series(
        TEMPERATURE, value, error, filling=Fraction(1, 3), field_T=12.9, temperature_error=0.005 * TEMPERATURE
    )
    return fitted(series)


def hopping_only() -> GapFit:
    value, error = noisy(800 / TEMPERATURE * np.exp(-np.sqrt(25 / TEMPERATURE)), 0.5, 4)
    series = make_series(TEMPERATURE, value, error, filling=Fraction(-4, 3), field_T=3.2, sample="campion-1")
    return fitted(series, ("activation", "es", "es + leak"))


def three_readings() -> GapFit:
    hot = TEMPERATURE[[4, 7, 11]]
    series = make_series(hot, 3000 * np.exp(-1.5 / hot), filling=Fraction(1, 3))
    return fitted(series, ("activation", "constant"))


def flat() -> GapFit:
    value, error = noisy(np.full(TEMPERATURE.size, 620.0), 1.0, 5)
    return fitted(
        make_series(TEMPERATURE, value, error, filling=Fraction(4, 7), field_T=8.06),
        ("activation", "constant"),
    )


def conductivity() -> GapFit:
    value, error = noisy(3e-5 * np.exp(-1.2 / TEMPERATURE), 2e-9, 6)
    series = make_series(
        TEMPERATURE,
        value,
        error,
        filling=Fraction(5, 2),
        quantity="sigma_xx",
        field_T=4.21,
        sample="meadow-cranesbill-with-a-name-that-is-much-too-long-for-one-line",
    )
    return fitted(series, ("activation", "constant"))


def excluded_and_pinned() -> GapFit:
    twice = np.repeat(TEMPERATURE, 2)
    value, error = noisy(4000 * np.exp(-2.5 / twice) + 12, 1.0, 7)
    series = make_series(twice, value, error, filling=Fraction(2, 3), field_T=6.9)
    gone = (
        ExcludedPoint(2.0, 900.0, 12.0, "sweep heated up while it ran, temperature not known"),
        ExcludedPoint(0.05, float("nan"), float("nan"), "sweep ends before the filling"),
        ExcludedPoint(0.25, 300.0, 5.0, "excluded by the user"),
    )
    return fitted(replace(series, excluded=gone), ("activation + leak",), window=(0.3, 1.3))


def huge() -> GapFit:
    value = 3e5 * np.exp(np.sqrt(2 / TEMPERATURE))
    series = make_series(
        TEMPERATURE, value, 0.01 * value, filling=Fraction(1, 5), field_T=22.0, geometry_known=False
    )
    return fitted(series, ("activation", "power law"))


CASES = {
    make.__name__: make
    for make in (
        negative_readings,
        hopping_only,
        three_readings,
        flat,
        conductivity,
        excluded_and_pinned,
        huge,
    )
}


@pytest.fixture(scope="module")
def fits() -> dict[str, GapFit]:
    return {name: make() for name, make in CASES.items()}


def sweep(field_T: np.ndarray, gate_V: np.ndarray, temperature: float, kind: str) -> Sweep:
    nothing = np.full(field_T.size, np.nan)
    x = field_T if kind == "field" else gate_V
    signal = 500 + 400 * np.cos(3 * x) * np.exp(-temperature) + 0.1 * np.sin(40 * x)
    return Sweep(
        "sweep.csv", np.arange(x.size), kind, field_T, gate_V, nothing, np.full(x.size, temperature),  # type: ignore[arg-type]
        signal, "rho_xx", 2000 * field_T, None, "up", 0, 0, 1e-8, "", 0.01, np.zeros(x.size, dtype=int),
        np.zeros(x.size, dtype=bool),
    )  # fmt: skip


@pytest.fixture(scope="module")
def field_family() -> tuple[TraceFamily, DensityEstimate, list[TemperatureSeries]]:
    field_T = np.linspace(0.1, 14, 900)
    sweeps = tuple(sweep(field_T, np.full(900, np.nan), t, "field") for t in (0.07, 0.2, 0.5, 1.1, 1.6))
    density = DensityEstimate(
        "field", 1.12e15, 0.0, (1e24, 0.0, 0.0),
        (DensityRoute("stated", 1.1e15, float("nan"), 1), DensityRoute("Hall slope", 1.119e15, 4e12, 13)),
    )  # fmt: skip
    names = ("1/3", "2/5", "3/7", "4/9", "5/11", "6/13", "6/11", "5/9", "4/7", "3/5", "2/3", "1")
    series = []
    for name in names:
        at = 1.12e15 * 4.135667e-15 / float(Fraction(name))
        value = [float(np.interp(at, field_T, one.signal)) for one in sweeps]
        series.append(make_series([0.07, 0.2, 0.5, 1.1, 1.6], value, 1.0, filling=Fraction(name), field_T=at))
    return TraceFamily(sweeps, "field", Geometry("resistivity")), density, series


@pytest.fixture(scope="module")
def gate_family() -> tuple[TraceFamily, DensityEstimate, list[TemperatureSeries]]:
    gate_V = np.linspace(-1.0, 2.0, 700)
    sweeps = tuple(
        sweep(np.full(700, field), gate_V, t, "gate") for field in (6.0, 9.0, 14.0) for t in (0.3, 2.0, 20.0)
    )
    density = DensityEstimate(
        "gate", 0.0, 7e15, (1e24, 0.0, 1e26), (DensityRoute("minima", 7.03e15, 1e13, 44),)
    )
    series = [
        make_series([0.3, 2.0, 20.0], [100.0, 200.0, 300.0], 1.0, filling=Fraction(name), field_T=field)
        for field in (6.0, 9.0, 14.0)
        for name in ("-1/3", "1/3", "2/5", "2/3", "1")
    ]
    return TraceFamily(sweeps, "gate", Geometry()), density, series


def minimum(filling: str, temperature: float, field_T: float, gate: bool, half_width: float) -> Minimum:
    numbers = (100.0, 1.0, 100.0, 1.0, 0.33, 100.0, 1.0, half_width, 50.0, float("nan"))
    abscissa = 0.5 if gate else field_T
    return Minimum(Fraction(filling), 0, "up", temperature, 0.001, field_T, abscissa, *numbers, False, False)


def minima(gate: bool) -> list[Minimum]:
    return [
        minimum(name, t, field_T, gate, 0.01 * (index + 1) / (1 + t))
        for index, name in enumerate(("1/3", "2/5", "2/3", "1", "4/3"))
        for t in (0.1, 0.4, 1.6)
        for field_T in ((6.0, 9.0, 14.0) if gate else (12.0 - index,))
    ] + [minimum("3/7", 0.1, 9.0, gate, float("nan"))]


# -------------------------------------------------------------------------------------- what a referee sees


def shown_texts(figure: Figure) -> list[Text]:
    """Every text that is drawn: labels of ticks inside the view, titles, legends, annotations."""
    found = list(figure.texts)
    for legend in [*figure.legends, *[axes.get_legend() for axes in figure.axes if axes.get_legend()]]:
        found += [*legend.get_texts(), legend.get_title()]
    for axes in figure.axes:
        found += [axes.title, axes.xaxis.label, axes.yaxis.label, *axes.texts]
        for axis in filter(lambda axis: axis.get_visible(), (axes.xaxis, axes.yaxis)):
            drawn = axis._update_ticks()  # those inside the view, which no public name gives
            found += [label for tick in drawn for label in (tick.label1, tick.label2)]
    return [text for text in found if text.get_visible() and text.get_text().strip()]


def boxes(figure: Figure) -> list[tuple[str, Bbox]]:
    figure.canvas.draw()
    renderer = figure.canvas.get_renderer()  # type: ignore[attr-defined]
    return [(text.get_text(), Text.get_window_extent(text, renderer)) for text in shown_texts(figure)]


def overlap(one: Bbox, two: Bbox) -> float:
    """Smaller side of the common rectangle of two boxes, pixels; zero or less without one."""
    return min(min(one.x1, two.x1) - max(one.x0, two.x0), min(one.y1, two.y1) - max(one.y0, two.y0))


def assert_tidy(figure: Figure, where: str) -> None:
    found = boxes(figure)
    assert found, where
    for (name, one), (other, two) in combinations(found, 2):
        assert overlap(one, two) < 1.0, f"{where}: {name!r} meets {other!r}"
    width, height = figure.canvas.get_width_height()  # type: ignore[attr-defined]
    for name, box in found:
        inside = box.x0 > -0.5 and box.y0 > -0.5 and box.x1 < width + 0.5 and box.y1 < height + 0.5
        assert inside, f"{where}: {name!r} leaves the page"
    for legend in figure.legends:
        for axes in figure.axes:
            assert overlap(legend.get_window_extent(), axes.get_window_extent()) <= 0, (
                f"{where}: legend on data"
            )


def test_the_check_itself_sees_what_meets_and_what_leaves_the_page() -> None:
    for x in (0.52, 0.98):
        figure = Figure(figsize=(3, 2))
        FigureCanvasAgg(figure)
        figure.text(0.5, 0.5, "one label")
        figure.text(x, 0.5, "another")
        with pytest.raises(AssertionError, match=r"meets|leaves"):
            assert_tidy(figure, "made up")


def all_words(figure: Figure) -> str:
    return "\n".join(text.get_text() for text in shown_texts(figure))


def plain(words: str) -> str:
    return re.sub(r"\\mathrm|[${}\\ ]", "", words)


@pytest.mark.parametrize("width_mm", [ONE_COLUMN_MM, TWO_COLUMNS_MM])
@pytest.mark.parametrize("kind", ONE_FIT)
def test_figures_of_one_fit_are_tidy_and_of_exact_width(
    fits: dict[str, GapFit], kind: str, width_mm: float
) -> None:
    some = dict(list(fits.items())[-2:]) if width_mm == TWO_COLUMNS_MM else fits
    for name, fit in some.items():
        figure = ONE_FIT[kind](fit, width_mm)
        assert size_mm(figure)[0] == pytest.approx(width_mm, abs=1e-9)
        assert_tidy(figure, f"{kind} of {name}")
        assert "exp(-Delta/2k_BT)" in plain(all_words(figure))


@pytest.mark.parametrize("width_mm", [ONE_COLUMN_MM, TWO_COLUMNS_MM])
def test_figures_of_a_study_are_tidy(fits: dict[str, GapFit], width_mm: float) -> None:
    several = list(fits.values())
    fields = [fit for fit in several if np.isfinite(fit.series.field_T)]
    across = {
        "1/3": [(x, fits["negative_readings"]) for x in (-0.01, 0.0, 0.01)],
        "−4/3": [(0.0, fits["flat"])],
    }
    figures = {
        "overview": overview_figure(several, width_mm),
        "gaps": gaps_figure(several, None, width_mm=width_mm),
        "gaps with permittivity": gaps_figure(fields, 12.9, width_mm=width_mm),
        "gaps by field": gaps_figure(fields, 12.9, "field", width_mm),
        "gaps at one field": gaps_figure(fields[:1], 3.8, width_mm=width_mm),
        "across": gap_across_figure(across, width_mm),
    }
    if width_mm == TWO_COLUMNS_MM:
        figures["overview of many"] = overview_figure(several[:3] * 6, width_mm)
    for name, figure in figures.items():
        assert size_mm(figure)[0] == pytest.approx(width_mm, abs=1e-9)
        assert_tidy(figure, name)
        assert "exp(-Delta/2k_BT)" in plain(all_words(figure)), name


@pytest.mark.parametrize("width_mm", [ONE_COLUMN_MM, TWO_COLUMNS_MM])
@pytest.mark.parametrize("kind", ["field_family", "gate_family"])
def test_figures_of_the_data_are_tidy(request: pytest.FixtureRequest, kind: str, width_mm: float) -> None:
    family, density, series = request.getfixturevalue(kind)
    figures = {
        "traces": traces_figure(family, density, series, width_mm),
        "width": width_figure(minima(kind == "gate_family"), width_mm),
        "density": density_figure(density, width_mm),
    }
    for name, figure in figures.items():
        assert size_mm(figure)[0] == pytest.approx(width_mm, abs=1e-9)
        assert_tidy(figure, f"{name} of {kind}")


def test_every_axis_of_a_physical_quantity_names_its_unit(
    fits: dict[str, GapFit], gate_family: tuple[TraceFamily, DensityEstimate, list[TemperatureSeries]]
) -> None:
    figures = [draw(fits["negative_readings"]) for draw in ONE_FIT.values()]
    figures += [
        traces_figure(*gate_family),
        density_figure(gate_family[1]),
        gaps_figure([fits["flat"]], 12.9),
    ]
    bare = {"", "$f$", "weight of the window (log. scale)", "filling factor"}
    for figure in figures:
        labels = [label.get_text() for axes in figure.axes for label in (axes.xaxis.label, axes.yaxis.label)]
        assert any(labels)
        for label in set(labels) - bare:
            assert re.search(r"\((K|K\$|K |[mkMGµnp]?Ω|S|T|std|10)|epsilon", label), label


def test_readings_below_zero_stand_where_they_are(fits: dict[str, GapFit]) -> None:
    fit = fits["negative_readings"]
    figure = arrhenius_figure(fit)
    axes = figure.axes[0]
    assert axes.get_yscale() == "symlog"
    low, high = axes.get_ylim()
    assert low < fit.series.value.min() < fit.series.value.max() < high
    drawn = np.concatenate([line.get_ydata() for line in axes.get_lines() if line.get_marker() == "o"])
    assert set(np.round(fit.series.value, 9)) == set(np.round(drawn, 9))
    assert "linear scale below" in all_words(figure)


def test_readings_far_above_their_errors_get_a_logarithmic_axis(fits: dict[str, GapFit]) -> None:
    figure = arrhenius_figure(fits["huge"])
    assert figure.axes[0].get_yscale() == "log"
    assert "MΩ" in all_words(figure)
    assert "R_{xx}" in all_words(figure)
    assert "linear scale" not in all_words(figure)


def test_conductivity_has_its_own_symbol_and_unit(fits: dict[str, GapFit]) -> None:
    words = all_words(arrhenius_figure(fits["conductivity"]))
    assert r"\sigma_{xx}" in words
    assert "µS" in words


def test_excluded_readings_are_open_and_say_why(fits: dict[str, GapFit]) -> None:
    fit = fits["excluded_and_pinned"]
    groups = readings_of(fit)
    used, outside, *gone = groups
    assert used.filled
    assert not outside.filled
    assert not any(group.filled for group in gone)
    assert len({group.marker for group in groups}) == 1 + len(gone)
    assert used.temperature.min() > 0.3
    assert used.temperature.max() < 1.3
    words = " ".join(all_words(arrhenius_figure(fit)).split())
    for reason in ("sweep heated up while it ran, temperature not known", "sweep ends before the filling"):
        assert f"excluded: {reason}" in words
    assert "outside the pinned window" in words


def test_a_sweep_without_a_reading_is_marked_on_the_lower_edge(fits: dict[str, GapFit]) -> None:
    figure = arrhenius_figure(fits["excluded_and_pinned"])
    at_edge = [
        line
        for axes in figure.axes
        for line in axes.get_lines()
        if line.get_transform() == axes.get_xaxis_transform() and list(line.get_xdata()) == [1 / 0.05]
    ]
    assert at_edge


def test_far_residuals_are_arrows_and_near_ones_points(fits: dict[str, GapFit]) -> None:
    figure = arrhenius_figure(fits["excluded_and_pinned"])
    residuals = next(axes for axes in figure.axes if "residual" in axes.get_ylabel())
    markers = {str(line.get_marker()) for line in residuals.get_lines() if len(line.get_xdata())}
    assert {"o", "^"} <= markers


def test_the_temperature_axis_above_agrees_with_the_one_below(fits: dict[str, GapFit]) -> None:
    axes = arrhenius_figure(fits["three_readings"]).axes[0]
    labels = [text for text in axes.texts if re.fullmatch(r"[\d.]+", text.get_text())]
    assert len(labels) >= 3
    for text in labels:
        assert float(text.get_text()) == pytest.approx(1 / text.xy[0])  # type: ignore[attr-defined]


def test_head_tells_gap_verdict_and_straight_line(fits: dict[str, GapFit]) -> None:
    fit = fits["negative_readings"]
    words = all_words(arrhenius_figure(fit))
    assert fit.verdict in words
    assert f"gap {fit.gap.median:.1f}"[:-1] in words
    assert "straight line" in words
    assert "no gap to be read" in all_words(arrhenius_figure(fits["huge"]))


# ------------------------------------------------------------------------------------------- numbers behind


def test_local_slope_of_pure_activation_is_the_gap() -> None:
    # CALC: -2 d ln[rho_0 exp(-gap / 2T)] / d(1/T) = gap, whatever the temperatures
    series = make_series(TEMPERATURE, 3000 * np.exp(-2.5 / TEMPERATURE), 1e-12, filling=Fraction(1, 3))
    temperature, gap, error = finite_differences(series)
    assert gap == pytest.approx(5.0)
    assert (error > 0).all()
    assert ((temperature > TEMPERATURE[:-1]) & (temperature < TEMPERATURE[1:])).all()


def test_local_slope_averages_repeated_temperatures_and_leaves_out_what_is_not_seen() -> None:
    series = make_series([0.5, 1, 1, 2], [-0.1, 10, 12, 30], [1, 1, 1, 1], filling=Fraction(1, 3))
    temperature, gap, error = finite_differences(series)
    assert temperature == pytest.approx([4 / 3])
    assert gap == pytest.approx([2 * np.log(30 / 11) / 0.5])
    assert error == pytest.approx([4 * np.hypot(1 / 11 / np.sqrt(2), 1 / 30)])


def test_window_map_shows_weights_that_sum_to_one(fits: dict[str, GapFit]) -> None:
    fit = fits["negative_readings"]
    figure = window_map_figure(fit)
    weight = figure.axes[2].images[-1].get_array() if len(figure.axes) == 4 else None
    images = [axes.images[-1].get_array() for axes in figure.axes if axes.images]
    assert any(np.nansum(np.ma.filled(image, np.nan)) == pytest.approx(1.0) for image in images), weight


def test_corner_shows_the_gap_first_and_leaves_out_what_does_not_vary(fits: dict[str, GapFit]) -> None:
    fit = fits["excluded_and_pinned"]
    columns = corner_columns(fit)
    assert [column.symbol for column in columns[:2]] == [r"$\Delta$", r"$\rho_0$"]
    assert np.median(columns[0].draws) == pytest.approx(fit.nominal_gap.median, rel=0.02)
    frozen = fit.draws.coordinates.copy()
    frozen[:, SLOT["inflation"]] = 0.3
    still = replace(fit, draws=replace(fit.draws, coordinates=frozen))
    assert "$f$" in [column.symbol for column in columns]
    assert "$f$" not in [column.symbol for column in corner_columns(still)]


def test_wide_posteriors_are_shown_as_logarithms(fits: dict[str, GapFit]) -> None:
    fit = fits["excluded_and_pinned"]
    wide = fit.draws.coordinates.copy()
    wide[:, SLOT["leak"]] = np.linspace(-5, 5, len(wide))
    columns = corner_columns(replace(fit, draws=replace(fit.draws, coordinates=wide)))
    leak = next(column for column in columns if "leak" in column.symbol)
    assert leak.logarithmic
    assert "log" in leak.label
    assert leak.limits[1] - leak.limits[0] == pytest.approx(9.9 / np.log(10), rel=0.01)


def test_coulomb_axis_only_with_a_permittivity_that_it_prints(fits: dict[str, GapFit]) -> None:
    one = [fits["negative_readings"]]
    assert len(gaps_figure(one).axes) == 1
    left, right = gaps_figure(one, 12.9).axes
    assert "12.9" in right.get_ylabel()
    ratio = left.get_ylim()[1] / right.get_ylim()[1]
    assert ratio == pytest.approx(coulomb_scale(12.9, 12.9))
    several = gaps_figure([*one, fits["flat"]], 12.9).axes
    assert "12.9" in several[1].get_ylabel()
    assert several[1].get_position().y1 < several[0].get_position().y0


def test_gaps_against_an_unknown_quantity_are_refused(fits: dict[str, GapFit]) -> None:
    with pytest.raises(InputError, match="'density'"):
        gaps_figure([fits["flat"]], against="density")


def test_unresolved_gaps_are_open_and_absent_ones_have_no_point(fits: dict[str, GapFit]) -> None:
    fit = fits["negative_readings"]
    open_fit = replace(fit, verdict_record=replace(fit.verdict_record, name="unresolved"))
    none = replace(fit, verdict_record=replace(fit.verdict_record, name="insulating"))
    faces = []
    for one in (fit, open_fit):
        axes = gaps_figure([one]).axes[0]
        faces.append([line.get_markerfacecolor() for line in axes.get_lines() if line.get_marker() == "o"])
    assert faces[0] != ["white"]
    assert faces[1] == ["white"]
    marks = [line.get_marker() for line in gaps_figure([none]).axes[0].get_lines()]
    assert "o" not in marks
    assert "x" in marks


# ---------------------------------------------------------------------------------------- scales and colours


@pytest.mark.parametrize(
    ("largest", "quantity", "name"),
    [
        (2180.0, "rho_xx", "Ω"),
        (25_813.0, "rho_xx", "kΩ"),
        (0.3, "rho_xx", "Ω"),
        (4e-3, "rho_xx", "mΩ"),
        (3.2e6, "rho_xx", "MΩ"),
        (3.9e-5, "sigma_xx", "µS"),
        (2e-9, "sigma_xx", "nS"),
        (0.0, "sigma_xx", "S"),
    ],
)
def test_units_suit_the_readings(largest: float, quantity: str, name: str) -> None:
    unit = reading_unit([0.1 * largest, -largest], quantity)
    assert unit.name == name
    if largest and name != "Ω":
        assert 1 <= largest / unit.size < 1000


def test_linear_part_of_the_axis_covers_what_is_not_seen() -> None:
    series = make_series([0.1, 0.2, 0.4, 1.0], [-0.4, 0.3, 5.0, 900.0], 0.3, filling=Fraction(1, 3))
    scale = reading_scale(series)
    assert 0.3 < scale.linear_below <= 3.0
    assert scale.low < -0.4
    assert reading_scale(series, coldest=0.3).linear_below == 0


@pytest.mark.parametrize(("low", "high"), [(0.3, 4000.0), (90.0, 130.0), (1e-9, 1e6), (0.7, 15.0)])
def test_logarithmic_ticks_lie_inside_and_are_few(low: float, high: float) -> None:
    major, minor = logarithmic_ticks(low, high)
    assert 2 <= len(major) <= 8
    assert not set(major) & set(minor)
    assert all(low * 0.999 <= tick <= high * 1.001 for tick in major + minor)


def test_labels_of_a_row_are_spread_without_meeting() -> None:
    places = spread_labels([10.0, 10.5, 11.0, 40.0, 79.9], [2.5, 2.5, 3.0, 2.0, 2.0], 80.0)
    half = [2.5, 2.5, 3.0, 2.0, 2.0]
    gaps = [places[k + 1] - places[k] - half[k] - half[k + 1] for k in range(4)]
    assert min(gaps) > -0.01
    assert places[3] == pytest.approx(40.0)


@pytest.mark.parametrize(
    ("value", "text"),
    [(0.05, "0.05"), (-2000.0, "−2000"), (1e6, "10⁶"), (0.0, "0"), (-2e-6, "−2×10⁻⁶")],
)
def test_plain_numbers(value: float, text: str) -> None:
    assert plain_number(value) == text


def test_temperature_ramp_is_ordered_in_grey_and_seen_on_white() -> None:
    colours = temperature_colours(np.geomspace(0.05, 4, 13))
    luminance = colours[:, :3] ** 2.2 @ [0.2126, 0.7152, 0.0722]
    assert (np.diff(luminance) > 0).all()
    assert luminance.max() < 0.6


# --------------------------------------------------------------------------------------------------- way out


def test_same_input_gives_the_same_bytes(fits: dict[str, GapFit], tmp_path: Path) -> None:
    fit = fits["negative_readings"]
    for kind in ("local_slope", "corner"):
        assert figure_svg(ONE_FIT[kind](fit)) == figure_svg(ONE_FIT[kind](fit)), kind
    for folder in ("first", "second"):
        save_figure(local_slope_figure(fit), tmp_path / folder, "slope")
    for name in ("slope.png", "slope.pdf"):
        assert (tmp_path / "first" / name).read_bytes() == (tmp_path / "second" / name).read_bytes()
    assert sorted(path.name for path in (tmp_path / "first").iterdir()) == ["slope.pdf", "slope.png"]
    assert b"CreationDate" not in (tmp_path / "first" / "slope.pdf").read_bytes()


def test_png_is_fine_enough_for_print(fits: dict[str, GapFit], tmp_path: Path) -> None:
    png, pdf = save_figure(local_slope_figure(fits["flat"]), tmp_path, "slope")
    width, _ = struct.unpack(">II", png.read_bytes()[16:24])
    assert width / (ONE_COLUMN_MM / 25.4) >= 200
    assert pdf.read_bytes().startswith(b"%PDF")


def test_a_failed_save_leaves_the_old_file_and_no_draft(
    fits: dict[str, GapFit], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    figure = local_slope_figure(fits["flat"])
    png, _ = save_figure(figure, tmp_path, "slope")
    before = png.read_bytes()

    def broken(*_: object, **__: object) -> None:
        raise OSError("disk full")

    monkeypatch.setattr("gapfit.style.os.replace", broken)
    with pytest.raises(OSError, match="disk full"):
        save_figure(figure, tmp_path, "slope")
    assert png.read_bytes() == before
    assert sorted(path.name for path in tmp_path.iterdir()) == ["slope.pdf", "slope.png"]


def test_several_svgs_share_a_page_without_sharing_ids(fits: dict[str, GapFit]) -> None:
    kinds = ("local_slope", "corner", "window_map")
    texts = [figure_svg(ONE_FIT[kind](fits["negative_readings"])) for kind in kinds]
    seen: set[str] = set()
    for text in texts:
        ElementTree.fromstring(text)
        ids = re.findall(r' id="([^"]*)"', text)
        assert len(ids) == len(set(ids))
        assert not seen & set(ids)
        seen |= set(ids)
        assert set(re.findall(r'href="#([^"]*)"|url\(#([^)]*)\)', text)) <= {
            pair for name in ids for pair in ((name, ""), ("", name))
        }
        assert "<style" not in text
        assert "<metadata" not in text
        assert len(text) < 250_000


def test_settings_of_the_user_do_not_change_a_figure(fits: dict[str, GapFit]) -> None:
    before = figure_svg(local_slope_figure(fits["flat"]))
    with matplotlib.rc_context(
        {"font.size": 21, "axes.grid": True, "lines.linewidth": 7, "svg.fonttype": "none"}
    ):
        assert figure_svg(local_slope_figure(fits["flat"])) == before
        assert matplotlib.rcParams["font.size"] == 21


def test_no_figure_is_left_in_the_state_of_pyplot(fits: dict[str, GapFit]) -> None:
    import matplotlib.pyplot as plt

    for draw in ONE_FIT.values():
        draw(fits["three_readings"])
    assert plt.get_fignums() == []


def test_sweeps_are_drawn_before_anything_is_read_on_them(
    field_family: tuple[TraceFamily, DensityEstimate, list[TemperatureSeries]],
) -> None:
    family, density, series = field_family
    bare, full = (traces_figure(family, density, some) for some in ((), series))
    assert size_mm(bare)[1] < size_mm(full)[1]
    rings = [line for line in full.axes[0].get_lines() if line.get_marker() == "o"]
    assert sum(len(line.get_xdata()) for line in rings) == sum(one.n_point for one in series)
    assert not [line for line in bare.axes[0].get_lines() if line.get_marker() == "o"]


def test_hopping_panels_hold_excluded_readings(fits: dict[str, GapFit]) -> None:
    for axes, exponent in zip(hopping_figure(fits["excluded_and_pinned"]).axes, (1 / 2, 1 / 3), strict=True):
        low, high = axes.get_xlim()
        assert low < 2.0**-exponent < 0.05**-exponent < high
