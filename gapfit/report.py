"""The report: one HTML file that opens without a network and reads well on paper."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass, field
from math import isfinite, isnan
from typing import TYPE_CHECKING, Any

from jinja2 import Environment, PackageLoader, StrictUndefined
from markupsafe import Markup

from gapfit.diagnostics import LARGEST_PARETO_K, LARGEST_RHAT, SMALLEST_ESS
from gapfit.digest import WITHOUT_GAP, WholeRange, fitted_parameters, flag_words
from gapfit.errors import InputError
from gapfit.fit import GapFit, candidates
from gapfit.hall import filling_label
from gapfit.intervals import Marginal
from gapfit.mechanisms import PARAMETERS, Parameter, parse_combination
from gapfit.posterior import STUDENT_DEGREES
from gapfit.rounding import Rounded, round_limit, round_number, round_value
from gapfit.straight import StraightLine
from gapfit.tablecells import TableStyle, unit_factor
from gapfit.typeset import render_table, subscripts
from gapfit.verdict import CERTAIN, SMALLEST_PREDICTIVE_P

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["ReportContent", "render_report"]

TABLE_COLUMNS = ("filling", "field", "gap", "interval68", "interval95", "verdict", "p_activated", "mechanism")
MEMBERS_SHOWN = 6
CAPTIONS = {
    "gaps": "Gaps of all fillings: posterior median with 68 % and 95 % intervals; limits as arrows.",
    "gaps_field": "The same gaps against field.",
    "trend": "Gaps against effective field.",
    "overview": "Arrhenius plots of all fillings.",
    "traces": "Traces at all temperatures, with the minima that were read.",
    "density": "Density by several routes.",
    "arrhenius": (
        "Readings against 1/T with the posterior median and the 68 % and 95 % band; open symbols lie outside "
        "the windows that carry weight; residuals below."
    ),
    "window_map": "Gap and weight of each temperature window, by its lower and upper cut.",
    "corner": "Posterior of the parameters of the likeliest combination.",
    "local_slope": "Local gap, −2 d ln(reading)/d(1/T); activation alone would be flat at the gap.",
    "hopping": "ln(T × reading) against powers of T in which variable-range hopping is a straight line.",
    "width": "Width of the minima against temperature.",
    "gap_across": "Gap across the minimum, against filling factor.",
}
"""Captions of figures by name; a figure of another name is captioned with its name."""


@dataclass(frozen=True)
class ReportContent:
    """Everything that a report shows.

    Attributes
    ----------
    title : str
    fits : sequence of GapFit
    table : pandas.DataFrame
        Of `gapfit.tables.gap_table`, a row per fit in the same order.
    alone : sequence of WholeRange or None
        Gaps without averaging, in the same order; empty if not made.
    figures : mapping of str to str
        SVG of the overview figures, by name, in the order to be shown.
    filling_figures : sequence of mapping of str to str
        SVG of the figures of each fit, by name, in the order of the fits; empty if there are none.
    data_figures : mapping of str to str
        SVG of the figures of the section on data (traces, minima, density).
    density : sequence of mapping
        Rows of the table of densities; every row has the same keys, which are the headings.
    notices : sequence of str
        What was noticed while reading the data.
    provenance : mapping
        Of `gapfit.storage.run_record`.
    convention : {"gap", "half"}
    unit : {"K", "meV", "coulomb"}
    """

    title: str
    fits: Sequence[GapFit]
    table: pd.DataFrame
    alone: Sequence[WholeRange | None] = ()
    figures: Mapping[str, str] = field(default_factory=dict)
    filling_figures: Sequence[Mapping[str, str]] = ()
    data_figures: Mapping[str, str] = field(default_factory=dict)
    density: Sequence[Mapping[str, Any]] = ()
    notices: Sequence[str] = ()
    provenance: Mapping[str, Any] = field(default_factory=dict)
    convention: str = "gap"
    unit: str = "K"


def render_report(content: ReportContent) -> str:
    """HTML of a report: one file, styles and figures inside, no scripts, every text from a file escaped.

    Parameters
    ----------
    content : ReportContent

    Returns
    -------
    str

    Raises
    ------
    InputError
        If the table does not have a row per fit, or a figure is no plain SVG.
    """
    if len(content.table) != len(content.fits):
        raise InputError(
            f"the table has {len(content.table)} rows for {len(content.fits)} fits; they must match"
        )
    style = TableStyle("html", content.unit, 95, content.convention, TABLE_COLUMNS)
    environment = Environment(
        loader=PackageLoader("gapfit"),
        autoescape=True,
        undefined=StrictUndefined,
        lstrip_blocks=True,
    )
    page = environment.get_template("report.html.j2").render(
        content=content,
        table=Markup(render_table(content.table, style)),
        summary=_summary(content),
        figures=_figures(content.figures),
        data_figures=_figures(content.data_figures),
        sections=_sections(content, style),
        excluded=_excluded(content.fits),
        density=[{key: _shown(value) for key, value in row.items()} for row in content.density],
        methods=_methods(content.fits),
        provenance=_provenance(content.provenance),
    )
    return page.strip() + "\n"


# -------------------------------------------------------------------------------------------------- figures


@dataclass(frozen=True)
class _Figure:
    """A figure ready for the page."""

    name: str
    svg: Markup
    caption: str


def _figures(figures: Mapping[str, str]) -> list[_Figure]:
    return [_Figure(name, _safe_svg(name, svg), CAPTIONS.get(name, name)) for name, svg in figures.items()]


def _safe_svg(name: str, svg: str) -> Markup:
    """SVG that may stand in the page as it is: one element, no script, nothing loaded from elsewhere."""
    body = svg[max(svg.find("<svg"), 0) :].strip()
    if not (body.startswith("<svg") and body.endswith("</svg>")):
        raise InputError(f"figure {name!r} is no SVG; it must be one <svg> element")
    active = re.search(r"<\s*(script|foreignObject|iframe|style)\b|\son\w+\s*=", body, re.IGNORECASE)
    outside = re.search(r"(?:href|src)\s*=\s*[\"'](?!#|data:image/png)", body, re.IGNORECASE)
    if active or outside:
        found = (active or outside)[0].strip()  # type: ignore[index]
        raise InputError(f"figure {name!r} holds {found!r}; only drawings without scripts or links are shown")
    return Markup(body)


# ----------------------------------------------------------------------------------------- the answer first


def _summary(content: ReportContent) -> list[str]:
    """Sentences that open the report."""
    verdicts = [fit.verdict for fit in content.fits]
    counts = {name: verdicts.count(name) for name in dict.fromkeys(verdicts)}
    words = ", ".join(f"{count} {name}" for name, count in counts.items())
    sentences = [f"{len(verdicts)} series: {words}."] if verdicts else ["No series could be fitted."]
    stuck = [_label(fit) for fit in content.fits if not fit.diagnostics.converged]
    if stuck:
        sentences.append(f"Not converged, to be read with care: {', '.join(stuck)}.")
    return sentences


def _label(fit: GapFit) -> str:
    """``ν = 1/3 at 12.9 T``, with contacts and direction where known."""
    series = fit.series
    where = "" if isnan(series.field_T) else f" at {series.field_T:.4g} T"
    extra = ", ".join(text for text in (series.contacts, series.direction) if text)
    return f"ν = {filling_label(series.filling)}{where}" + (f" ({extra})" if extra else "")


# ------------------------------------------------------------------------------------- a section per filling


def _sections(content: ReportContent, style: TableStyle) -> list[dict[str, Any]]:
    rows = [
        dict(zip(content.table.columns, row, strict=True))
        for row in content.table.astype(object).to_numpy().tolist()
    ]
    alone = content.alone or [None] * len(rows)
    figures = content.filling_figures or [{}] * len(rows)
    return [
        {
            "label": _label(fit),
            "answer": _answer(row, style),
            "sentence": fit.verdict_record.sentence,
            "flags": [flag_words(flag) for flag in fit.flags],
            "reasons": fit.diagnostics.reasons,
            "figures": _figures(drawn),
            "numbers": _numbers(fit, row),
            "comparison": _comparison(fit, row, single, style),
            "combinations": _combinations(fit),
            "members": _members(fit),
            "parameters": [_parameter(fit, parameter) for parameter in fitted_parameters(fit)],
        }
        for fit, row, single, drawn in zip(content.fits, rows, alone, figures, strict=True)
    ]


def _unit(style: TableStyle) -> str:
    return {"coulomb": "E_C"}.get(style.unit, style.unit)


def _symbol(style: TableStyle) -> str:
    return "Δ" if style.convention == "gap" else "Δ/2"


def _answer(row: Mapping[str, Any], style: TableStyle) -> Markup:
    """Gap with its interval, or the limit, as one line."""
    factor, unit, symbol = unit_factor(row, style), subscripts(_unit(style)), _symbol(style)
    if not isnan(row["gap_K"] * factor):
        gap = _rounded(row, "gap", 95, factor)
        return Markup("{} = {} {} (median, 95 %)").format(symbol, Markup(gap.html), Markup(unit))
    if isnan(factor):
        return Markup("no gap in units of the Coulomb scale, since permittivity or field is unknown")
    lower = round_limit(">", row["gap_lower95_K"] * factor)
    if lower.value:
        return Markup("{} {} {} (95 %), should there be a gap").format(
            symbol, Markup(lower.html), Markup(unit)
        )
    return Markup("no gap to be quoted")


def _rounded(row: Mapping[str, Any], name: str, level: int, factor: float = 1.0) -> Rounded:
    middle = row[f"{name}_K"] * factor
    low, high = (row[f"{name}_{end}{level}_K"] * factor for end in ("low", "high"))
    return round_value(middle, high - middle, middle - low)


def _numbers(fit: GapFit, row: Mapping[str, Any]) -> list[tuple[str, Markup | str]]:
    """Names and values of the numbers of a fit, missing ones left out."""
    conducts = fit.series.quantity == "sigma_xx"
    quantity, ratio = ("σxx", "(e/q)²/h") if conducts else ("ρxx", "(h/e²)/p²")
    span = f"{row['temperature_low_K']:.3g} to {row['temperature_high_K']:.3g} K"
    numbers: list[tuple[str, float | str]] = [
        ("readings", f"{row['n_points']} of {quantity}, {span}; {row['n_negative']} below zero"),
        ("gap in meV", row["gap_meV"]),
        (f"gap over Coulomb scale (ε = {row['permittivity']:g})", row["gap_over_coulomb"]),
        ("prefactor, kΩ", row["prefactor_ohm"] / 1e3),
        (f"prefactor over {ratio}", row["prefactor_over_eq2h"]),
        ("decades of activation above the noise", row["decades_used"]),
        ("hopping", {"es": "Efros-Shklovskii", "mott": "Mott"}.get(row["hopping"], "")),
        ("hopping temperature, K", row["hopping_T0_K"]),
        ("electron temperature saturates at, K", row["electron_T0_K"]),
        ("leak, Ω", row["leak_ohm"]),
        ("smallest reading, Ω", row["rho_min_ohm"]),
        ("standard errors multiplied by", row["noise_inflation"]),
        ("effective field, T", row["effective_field_T"]),
        ("sequences", row["sequence"].replace(";", ", ")),
        ("predictive p at the stated errors", row["predictive_p"]),
        ("convergence", _convergence(fit)),
    ]
    return [(name, _shown(value)) for name, value in numbers if value != "" and value == value]


def _convergence(fit: GapFit) -> str:
    found = fit.diagnostics
    words = [f"engine {fit.settings.engine}", "converged" if found.converged else "not converged"]
    words += [f"R-hat {found.rhat:.4f}"] if isfinite(found.rhat) else []
    words += [f"effective draws {found.ess:.0f}"] if isfinite(found.ess) else []
    words += [f"Pareto k {found.pareto_k:.2f}"] if isfinite(found.pareto_k) else []
    if found.engines_agree is not None:
        verdict = "agree" if found.engines_agree else "disagree"
        words.append(f"engines {verdict} ({found.disagreement:.1f} Monte-Carlo errors)")
    return "; ".join(words)


def _shown(value: Any) -> str:
    if isinstance(value, float):
        return round_number(value, 3)
    return "–" if value is None else str(value)


def _comparison(
    fit: GapFit, row: Mapping[str, Any], alone: WholeRange | None, style: TableStyle
) -> list[tuple[str, Markup, str]]:
    """Ways of reading the gap: name, gap with 95 % interval, remark."""
    factor = unit_factor(row, style)
    rows = [("averaged over mechanisms and windows", _answer_cell(row, factor), f"verdict: {fit.verdict}")]
    if alone is not None:
        remark = alone.combination.label + ("" if alone.converged else "; not converged")
        rows.append(
            (
                "without averaging: likeliest mechanism, all readings",
                _marginal_cell(alone.gap, factor),
                remark,
            )
        )
    if fit.line is not None:
        rows.append(("a straight line", _line_cell(fit.line, factor), _line_remark(fit.line)))
    return rows


def _answer_cell(row: Mapping[str, Any], factor: float) -> Markup:
    if row["verdict"] in WITHOUT_GAP or isnan(row["gap_K"]):
        return Markup(round_limit(">", row["gap_lower95_K"] * factor).html)
    return Markup(_rounded(row, "gap", 95, factor).html)


def _marginal_cell(marginal: Marginal, factor: float) -> Markup:
    interval, median = marginal.interval(0.95), marginal.median
    return Markup(
        round_value(median * factor, (interval.high - median) * factor, (median - interval.low) * factor).html
    )


def _line_cell(line: StraightLine, factor: float) -> Markup:
    return Markup(round_value(line.gap_K * factor, 1.96 * line.gap_error_K * factor).html)


def _line_remark(line: StraightLine) -> str:
    return f"through ln(reading) against 1/T, {line.low_K:.3g} to {line.high_K:.3g} K; 1.96 standard errors"


def _combinations(fit: GapFit) -> list[tuple[str, str]]:
    pairs = sorted(zip(fit.draws.share, fit.draws.combinations, strict=True), key=lambda pair: -pair[0])
    return [(item.label, f"{share:.3f}") for share, item in pairs[:MEMBERS_SHOWN]]


def _members(fit: GapFit) -> list[tuple[str, str, str]]:
    rows = fit.weights.head(MEMBERS_SHOWN).to_dict("records")
    return [
        (
            parse_combination(row["mechanism"]).label,
            f"{row['window_low_K']:.3g} to {row['window_high_K']:.3g}",
            f"{row['weight']:.3f}",
        )
        for row in rows
    ]


def _parameter(fit: GapFit, parameter: Parameter) -> dict[str, Any]:
    """Row of the table of parameters: prior, and posterior among the draws that have the parameter."""
    marginal = fit.marginal(parameter.name)
    interval = marginal.interval(0.95)
    prior = next((item for item in fit.problem.prior.table() if item["name"] == parameter.name), None)
    unit = _reading_unit(fit) if parameter.unit == "reading" else parameter.unit
    return {
        "meaning": parameter.meaning,
        "unit": unit or "–",
        "distribution": prior["distribution"] if prior else "fixed",
        "prior": f"{_shown(prior['low95'])} to {_shown(prior['high95'])}" if prior else "–",
        "median": _shown(marginal.median),
        "interval": f"{_shown(interval.low)} to {_shown(interval.high)}",
        "share": f"{marginal.draws.size / fit.draws.window.size:.2f}",
    }


def _reading_unit(fit: GapFit) -> str:
    return "Ω" if fit.series.quantity == "rho_xx" else "S"


# ----------------------------------------------------------------------------------- data, methods, sources


def _excluded(fits: Sequence[GapFit]) -> list[tuple[str, str, str, str]]:
    return [
        (_label(fit), f"{point.temperature:.4g}", _shown(point.value), point.reason)
        for fit in fits
        for point in fit.series.excluded
    ]


def _methods(fits: Sequence[GapFit]) -> dict[str, Any]:
    """Settings and constants that the text on methods quotes."""
    settings = fits[0].settings if fits else None
    return {
        "settings": settings,
        "rules": asdict(settings.rules) if settings else {},
        "combinations": [item.label for item in candidates(fits[0].series, settings)] if settings else [],
        "student_degrees": f"{STUDENT_DEGREES:g}",
        "largest_rhat": LARGEST_RHAT,
        "smallest_ess": f"{SMALLEST_ESS:g}",
        "largest_pareto_k": LARGEST_PARETO_K,
        "certain": CERTAIN,
        "predictive_p": SMALLEST_PREDICTIVE_P,
        "saturates": any(item.name == "saturation" for item in PARAMETERS),
    }


def _provenance(record: Mapping[str, Any]) -> dict[str, Any]:
    """Run record with the study flattened to dotted keys."""
    return {
        "versions": dict(record.get("versions", {})),
        "inputs": list(record.get("inputs", [])),
        "seed": record.get("seed"),
        "wall_time_s": record.get("wall_time_s"),
        "study": _flat(record.get("study", {})),
    }


def _flat(value: Any, key: str = "") -> list[tuple[str, str]]:
    if isinstance(value, Mapping):
        return [row for name, item in value.items() for row in _flat(item, f"{key}.{name}".lstrip("."))]
    if isinstance(value, (list, tuple)):
        return [(key, ", ".join(str(item) for item in value))]
    return [(key, f"{value:.12g}" if isinstance(value, float) else str(value))]
