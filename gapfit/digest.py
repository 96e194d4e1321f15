"""What a table or a report says about one fit, as plain numbers and words."""

from __future__ import annotations

from dataclasses import asdict, dataclass, replace
from fractions import Fraction
from math import floor, nan
from typing import Any

import numpy as np

from gapfit.fit import GapFit, fit_temperature_series
from gapfit.hall import effective_field, filling_label, sequence_members
from gapfit.intervals import Marginal
from gapfit.mechanisms import PARAMETERS, Combination, Parameter
from gapfit.units import coulomb_scale, kelvin_to_mev

__all__ = [
    "CONVENTIONS",
    "FLAG_WORDS",
    "GAP_COLUMNS",
    "TableContext",
    "WholeRange",
    "decades_used",
    "details",
    "fitted_parameters",
    "flag_words",
    "gap_row",
    "whole_range",
]

GAP_COLUMNS: tuple[str, ...] = (
    "sample",
    "cooldown",
    "filling",
    "field_T",
    "effective_field_T",
    "n_points",
    "temperature_low_K",
    "temperature_high_K",
    "verdict",
    "p_activated",
    "gap_K",
    "gap_low68_K",
    "gap_high68_K",
    "gap_low95_K",
    "gap_high95_K",
    "gap_lower95_K",
    "gap_upper95_K",
    "verdict_cause",
    "gap_meV",
    "gap_over_coulomb",
    "permittivity",
    "mechanism",
    "p_mechanism",
    "window_low_K",
    "window_high_K",
    "pinned",
    "prefactor_ohm",
    "prefactor_over_eq2h",
    "hopping",
    "hopping_T0_K",
    "electron_T0_K",
    "leak_ohm",
    "noise_inflation",
    "rho_min_ohm",
    "decades_used",
    "n_negative",
    "quantity",
    "reading",
    "sequence",
    "level",
    "drive_current_A",
    "total_field_T",
    "predictive_p",
    "converged",
    "rhat",
    "ess",
    "engines_agree",
    "flags",
)
"""Columns of gaps.csv, in order."""

WITHOUT_GAP = ("no activated regime", "insulating")
"""Verdicts whose gap columns stay empty."""

LIKELY = 0.5
MANY_DRAWS = 2000

CONVENTIONS = {
    "gap": "gap Δ, in ρ = ρ₀ exp(−Δ / 2k_B T)",
    "half": "half gap Δ/2 (activation energy), in ρ = ρ₀ exp[−(Δ/2) / k_B T]",
}
"""The two ways to quote an activation gap, by the key that options use."""

FLAG_WORDS = {
    "errors_assumed": "no standard errors given; 2 % of the reading and 0.2 % of the largest assumed",
    "no_temperature_error": "temperatures taken as exact, since no [thermometry] was given",
    "errors_inflated": "scatter larger than the standard errors; they were inflated",
    "errors_deflated": "scatter smaller than the standard errors; they were deflated",
    "prefactor_not_judged": "size of the prefactor not judged (geometry unknown or criterion off)",
    "pinned window": "temperature window pinned by the user",
    "pinned mechanism": "mechanism pinned by the user",
    "pinned mechanism and window": "mechanism and temperature window pinned by the user",
    "not_converged": "not converged",
    "engines_disagree": "the two engines disagree beyond Monte-Carlo error",
    "importance_weights_unsafe": "importance weights of the fast engine are heavy-tailed",
    "points_excluded": "readings excluded, see the list of them",
    "reading_matters": "readings at the exact filling, at the minimum and averaged differ beyond noise",
    "edge_of_sweep": "a sweep ends close to the filling",
    "one_field_direction": "one field direction only, not symmetrised",
    "beside_exact_filling": "read beside the exact filling",
}
"""Words for flags; a flag that is not listed is shown as it is."""


def flag_words(flag: str) -> str:
    """Words for a flag."""
    return FLAG_WORDS.get(flag, flag.replace("_", " "))


@dataclass(frozen=True)
class TableContext:
    """What a table needs beyond the fits.

    Attributes
    ----------
    permittivity : float
        Relative permittivity of the host, NaN if unknown: gaps in units of the Coulomb scale are then NaN.
    base_level : int or None
        Filling at which the level at hand begins. None counts fillings up to two from zero and larger ones
        from the integer below them.
    """

    permittivity: float = nan
    base_level: int | None = None

    def level(self, filling: Fraction) -> int:
        """Filling at which the level of a state begins."""
        if self.base_level is not None:
            return self.base_level
        return 0 if abs(filling) <= 2 else floor(abs(filling))


def gap_row(fit: GapFit, context: TableContext) -> dict[str, Any]:
    """Row of gaps.csv for one fit.

    Parameters
    ----------
    fit : GapFit
    context : TableContext

    Returns
    -------
    dict
        Exactly the keys `GAP_COLUMNS`, in that order. Energies in kelvin, gap in exp(-gap / 2T); intervals
        equal-tailed. Prefactor, leak and smallest reading of a sigma_xx series are given in ohm through
        rho_xx = sigma_xx rho_xy^2, which the column ``quantity`` tells.
    """
    row = _identity(fit, context) | _gap_part(fit, context) | _mechanism_part(fit) | _quality_part(fit)
    return {name: row[name] for name in GAP_COLUMNS}


def _identity(fit: GapFit, context: TableContext) -> dict[str, Any]:
    series = fit.series
    level = context.level(series.filling)
    members = sequence_members(series.filling, level)
    return {
        "sample": series.sample,
        "cooldown": series.cooldown,
        "filling": filling_label(series.filling),
        "field_T": series.field_T,
        "effective_field_T": effective_field(series.filling, series.field_T, level),
        "n_points": series.n_point,
        "temperature_low_K": float(series.temperature[0]),
        "temperature_high_K": float(series.temperature[-1]),
        "quantity": series.quantity,
        "reading": series.reading,
        "sequence": ";".join(member.sequence for member in members),
        "level": level,
        "drive_current_A": series.drive_current_A,
        "total_field_T": series.total_field_T,
        "rho_min_ohm": float(series.value.min()) * _ohm(fit),
        "n_negative": int((series.value < 0).sum()),
    }


def _ohm(fit: GapFit) -> float:
    """Factor from the unit of the readings to ohm."""
    return 1.0 if fit.series.quantity == "rho_xx" else fit.series.hall_resistance_ohm**2


def _shown_gap(fit: GapFit) -> Marginal:
    """Posterior of the gap where the verdict allows to print one, else empty."""
    return Marginal("gap", "K", np.empty(0)) if fit.verdict in WITHOUT_GAP else fit.gap


def _gap_part(fit: GapFit, context: TableContext) -> dict[str, Any]:
    gap, series, verdict = _shown_gap(fit), fit.series, fit.verdict_record
    inner, outer = gap.interval(0.68), gap.interval(0.95)
    prefactor = fit.prefactor.median if gap.draws.size else nan
    return {
        "verdict": verdict.name,
        "p_activated": verdict.p_activated,
        "gap_K": gap.median,
        "gap_low68_K": inner.low,
        "gap_high68_K": inner.high,
        "gap_low95_K": outer.low,
        "gap_high95_K": outer.high,
        "gap_lower95_K": verdict.gap_lower95_K,
        "gap_upper95_K": verdict.gap_upper95_K,
        "verdict_cause": verdict.cause,
        "gap_meV": kelvin_to_mev(gap.median),
        "gap_over_coulomb": gap.median / _coulomb_scale(series.field_T, context.permittivity),
        "permittivity": context.permittivity,
        "prefactor_ohm": prefactor * _ohm(fit),
        "prefactor_over_eq2h": prefactor / fit.prefactor_unit,
        "decades_used": decades_used(fit) if gap.draws.size else nan,
        "predictive_p": verdict.predictive_p,
    }


def _coulomb_scale(field_T: float, permittivity: float) -> float:
    """Coulomb scale in kelvin; NaN where the field or the permittivity is unknown or zero."""
    return float(coulomb_scale(field_T, permittivity)) if field_T and permittivity > 0 else nan


def decades_used(fit: GapFit) -> float:
    """Decades that activation spans over the readings that it carries inside the window, above their errors.

    Parameters
    ----------
    fit : GapFit

    Returns
    -------
    float
        Posterior median over the activated draws; NaN without any.
    """
    chosen = np.flatnonzero(fit.draws.activated)[:MANY_DRAWS]
    if chosen.size == 0:
        return nan
    curve = fit.problem.curve(fit.draws.coordinates[chosen])
    active = curve.parts["activation"]
    kept = fit.problem.windows.kept[fit.draws.window[chosen]] > 0
    share = fit.settings.rules.carried_share
    carried = kept & (active * (1 - share) > np.abs(curve.total - active) * share)
    carried &= active > fit.series.error
    with np.errstate(divide="ignore"):
        height = np.log10(active)
    span = np.where(carried, height, -np.inf).max(axis=1) - np.where(carried, height, np.inf).min(axis=1)
    return float(np.median(np.maximum(span, 0.0)))


def _mechanism_part(fit: GapFit) -> dict[str, Any]:
    best, share = fit.best
    low, high = fit.window
    kind = _likely_hopping(fit)
    return {
        "mechanism": best.name,
        "p_mechanism": share,
        "window_low_K": low,
        "window_high_K": high,
        "pinned": bool(fit.settings.pinned),
        "hopping": kind,
        "hopping_T0_K": _hopping_temperature(fit, kind),
        "electron_T0_K": _median_if_likely(fit, "heating", "electron_T0_K"),
        "leak_ohm": _median_if_likely(fit, "leak", "leak") * _ohm(fit),
        "noise_inflation": fit.marginal("inflation").median,
    }


def _likely_hopping(fit: GapFit) -> str:
    """``"es"`` or ``"mott"``, whichever is likelier, if hopping of either kind is likely; else empty."""
    chances = {kind: fit.probability_of(kind) for kind in ("es", "mott")}
    return max(chances, key=lambda kind: chances[kind]) if sum(chances.values()) > LIKELY else ""


def _hopping_temperature(fit: GapFit, kind: str) -> float:
    if not kind:
        return nan
    has = np.array([combination.hopping == kind for combination in fit.draws.combinations])
    values = fit.draws.natural("hopping_T0_K")[has[fit.draws.combination]]
    return float(np.median(values)) if values.size else nan


def _median_if_likely(fit: GapFit, mechanism: str, parameter: str) -> float:
    return fit.marginal(parameter).median if fit.probability_of(mechanism) > LIKELY else nan


def _quality_part(fit: GapFit) -> dict[str, Any]:
    diagnostics = fit.diagnostics
    return {
        "converged": diagnostics.converged,
        "rhat": diagnostics.rhat,
        "ess": diagnostics.ess,
        "engines_agree": diagnostics.engines_agree,
        "flags": ";".join(fit.flags),
    }


# --------------------------------------------------------------------------------------- without averaging


@dataclass(frozen=True)
class WholeRange:
    """Gap of one combination over all readings, as it would be without averaging.

    Attributes
    ----------
    combination : Combination
        The likeliest one with a gap.
    gap : Marginal, K
    converged : bool
    """

    combination: Combination
    gap: Marginal
    converged: bool


def whole_range(fit: GapFit) -> WholeRange | None:
    """Gap that the likeliest combination gives over the whole range of temperature, without averaging.

    Parameters
    ----------
    fit : GapFit

    Returns
    -------
    WholeRange or None
        From the fast engine with the seed of the fit; None if no combination has a gap.
    """
    order = np.argsort(-fit.draws.share, kind="stable")
    gapped = [fit.draws.combinations[index] for index in order if fit.draws.combinations[index].activated]
    if not gapped:
        return None
    settings = replace(fit.settings, engine="fast", combinations=(gapped[0],), window=(0.0, float("inf")))
    single = fit_temperature_series(fit.series, settings)
    gap = Marginal("gap", "K", single.draws.natural("gap_K") * single.scale)
    return WholeRange(gapped[0], gap, single.diagnostics.converged)


# ---------------------------------------------------------------------------------------------- everything


def details(fit: GapFit, alone: WholeRange | None) -> dict[str, Any]:
    """Everything about one fit that gaps.csv has no column for, as plain data for gaps.json.

    Parameters
    ----------
    fit : GapFit
    alone : WholeRange or None
        Of `whole_range`.

    Returns
    -------
    dict
    """
    series = fit.series
    return {
        "sentence": fit.verdict_record.sentence,
        "notes": [flag_words(flag) for flag in fit.flags],
        "not_converged_because": list(fit.diagnostics.reasons),
        "diagnostics": asdict(fit.diagnostics),
        "settings": {
            "engine": fit.settings.engine,
            "pinned": fit.settings.pinned,
            "window": fit.settings.window,
            "noise": fit.settings.noise,
            "hopping_power": fit.settings.hopping_power,
            "saturation_exponent": fit.settings.saturation_exponent,
            "thermometer_scale_error": fit.settings.thermometer_scale_error,
            "seed": fit.settings.seed,
            "rules": asdict(fit.settings.rules),
        },
        "reference": asdict(fit.problem.reference),
        "combinations": _combination_rows(fit),
        "members": fit.weights.to_dict("records"),
        "parameters": [_summary(fit, parameter.name) for parameter in fitted_parameters(fit)],
        "priors": fit.problem.prior.table(),
        "straight_line": None if fit.line is None else asdict(fit.line),
        "without_averaging": None if alone is None else _alone_row(alone),
        "series": {
            "contacts": series.contacts,
            "direction": series.direction,
            "error_source": series.error_source,
            "geometry_known": series.geometry_known,
            "hall_resistance_ohm": series.hall_resistance_ohm,
            "unit": series.unit,
            "temperature_K": series.temperature,
            "temperature_error_K": series.temperature_error,
            "reading": series.value,
            "reading_error": series.error,
            "inclusion": fit.inclusion,
            "excluded": [asdict(point) for point in series.excluded],
        },
    }


def _combination_rows(fit: GapFit) -> list[dict[str, Any]]:
    order = np.argsort(-fit.draws.share, kind="stable")
    return [
        {"mechanism": fit.draws.combinations[index].name, "probability": float(fit.draws.share[index])}
        for index in order
    ]


def fitted_parameters(fit: GapFit) -> list[Parameter]:
    """Rows of the parameter table that some draw has."""
    return [item for item in PARAMETERS if fit.marginal(item.name).draws.size]


def _summary(fit: GapFit, name: str) -> dict[str, Any]:
    marginal = fit.marginal(name)
    inner, outer = marginal.interval(0.68), marginal.interval(0.95)
    return {
        "name": name,
        "share_of_draws": marginal.draws.size / fit.draws.window.size,
        "median": marginal.median,
        "low68": inner.low,
        "high68": inner.high,
        "low95": outer.low,
        "high95": outer.high,
    }


def _alone_row(alone: WholeRange) -> dict[str, Any]:
    inner, outer = alone.gap.interval(0.68), alone.gap.interval(0.95)
    return {
        "mechanism": alone.combination.name,
        "gap_K": alone.gap.median,
        "gap_low68_K": inner.low,
        "gap_high68_K": inner.high,
        "gap_low95_K": outer.low,
        "gap_high95_K": outer.high,
        "converged": alone.converged,
    }
