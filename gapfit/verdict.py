"""The verdict on a series: whether there is a gap, and what bounds it where there is none to be read."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.special import gammaincc

from gapfit.averaging import AveragingRules, MemberDraws
from gapfit.posterior import Problem
from gapfit.series import TemperatureSeries

__all__ = ["SHORTFALLS", "Verdict", "judge", "predictive_p", "rises_on_cooling"]


@dataclass(frozen=True)
class Verdict:
    """What can be said about the gap.

    Attributes
    ----------
    name : {"activated", "unresolved", "no activated regime", "insulating", "inconsistent"}
    p_activated : float
        Weight of the members with an activated regime.
    cause : str
        Short words for the table.
    sentence : str
        One sentence for the report.
    gap_lower95_K : float, K
        Lower 95 % limit where the gap is bounded from below only, else NaN.
    gap_upper95_K : float, K
        Upper 95 % limit where activation would have to carry the top reading and does not, else NaN.
    predictive_p : float
        Best posterior predictive p of a wide member at the stated errors.
    """

    name: str
    p_activated: float
    cause: str
    sentence: str
    gap_lower95_K: float
    gap_upper95_K: float
    predictive_p: float


SHORTFALLS = {
    0: "",
    1: "no activation needed",
    2: "activation carries too few points",
    3: "activation spans too little",
    4: "prefactor too small",
}

CERTAIN = 0.9
SMALLEST_PREDICTIVE_P = 0.01


def judge(problem: Problem, draws: MemberDraws, rules: AveragingRules) -> Verdict:
    """Verdict on a series.

    Parameters
    ----------
    problem : Problem
    draws : MemberDraws
    rules : AveragingRules

    Returns
    -------
    Verdict
    """
    p_activated = float(draws.activated.mean())
    predictive = predictive_p(problem, draws)
    name = "unresolved"
    if p_activated >= CERTAIN:
        name = "activated"
    elif rises_on_cooling(problem.series):
        name = "insulating"
    elif p_activated <= 1 - CERTAIN:
        name = "no activated regime"
    if predictive < SMALLEST_PREDICTIVE_P and problem.series.error_source == "stated":
        name = "inconsistent"
    cause = _cause(name, problem, draws)
    lower = _lower_limit(draws) if name in ("unresolved", "no activated regime") else float("nan")
    return Verdict(
        name,
        p_activated,
        cause,
        _sentence(name, p_activated, cause, lower, predictive),
        lower,
        float("nan"),
        predictive,
    )


def rises_on_cooling(series: TemperatureSeries) -> bool:
    """Whether the reading grows on cooling: slope against ln T below -4 standard errors, and by a fifth."""
    x, weight = np.log(series.temperature), 1 / series.error**2
    centre = np.average(x, weights=weight)
    level = np.average(series.value, weights=weight)
    norm = np.sum(weight * (x - centre) ** 2)
    slope = np.sum(weight * (x - centre) * (series.value - level)) / norm
    third = max(1, series.n_point // 3)
    cold, warm = np.median(series.value[:third]), np.median(series.value[-third:])
    return bool(slope * np.sqrt(norm) < -4 and cold > 1.2 * warm)


def predictive_p(problem: Problem, draws: MemberDraws) -> float:
    """Best posterior predictive p among combinations, from draws that keep half of the data.

    Parameters
    ----------
    problem : Problem
    draws : MemberDraws

    Returns
    -------
    float
        NaN where no draw keeps half of the readings and half of the 1/T range. The discrepancy is
        chi-squared at the stated errors (Gelman, Meng & Stern, Stat. Sinica 6, 733 (1996)).
    """
    series, windows = problem.series, problem.windows
    inverse = 1 / series.temperature
    range_kept = inverse[windows.low] - inverse[windows.high - 1]
    wide = (windows.kept.sum(axis=1) >= series.n_point / 2) & (range_kept >= np.ptp(inverse) / 2)
    chosen = np.flatnonzero(wide[draws.window])
    if chosen.size == 0:
        return float("nan")
    curve = problem.curve(draws.coordinates[chosen])
    sigma = np.hypot(series.error, curve.slope * series.temperature_error / series.temperature)
    kept = windows.kept[draws.window[chosen]]
    squares = np.sum(kept * ((series.value - curve.total) / sigma) ** 2, axis=1)
    p = gammaincc(kept.sum(axis=1) / 2, squares / 2)
    owner = draws.combination[chosen]
    means = [p[owner == index].mean() for index in np.unique(owner) if (owner == index).sum() >= 20]
    return float(max(means)) if means else float(p.mean())


def _cause(name: str, problem: Problem, draws: MemberDraws) -> str:
    if name == "activated":
        return ""
    if name == "inconsistent":
        return "no mechanism fits at the stated errors"
    if name == "insulating":
        return "reading rises on cooling"
    if problem.series.n_point < 5:
        return "too few points"
    failing = draws.shortfall[~draws.activated]
    most = int(np.bincount(failing, minlength=5).argmax())
    names = {
        name for index in np.flatnonzero(draws.share > 0.1) for name in draws.combinations[index].mechanisms
    }
    if names & {"constant", "power law"}:
        return "no minimum"
    if names & {"es", "mott", "leak", "nearest"}:
        return f"masked by hopping or leak ({SHORTFALLS[most]})"
    return SHORTFALLS[most]


def _lower_limit(draws: MemberDraws) -> float:
    """Lower 95 % limit of the gap, from draws with a gap that fail for other reasons than the prefactor."""
    possible = (draws.shortfall != 1) & (draws.shortfall != 4)
    gap = draws.natural("gap_K")[possible]
    return float(np.quantile(gap, 0.05)) if possible.sum() >= 200 else float("nan")


def _sentence(name: str, p_activated: float, cause: str, lower: float, predictive: float) -> str:
    chance = f"probability of an activated regime {p_activated:.2f}"
    limit = f"; the gap, if there is one, is above {lower:.3g} K (95 %)" if np.isfinite(lower) else ""
    return {
        "activated": f"The reading is activated over a sufficient range ({chance}).",
        "unresolved": (
            f"The data do not decide whether there is an activated regime ({chance}; {cause}{limit})."
        ),
        "no activated regime": f"No activated regime is seen ({chance}; {cause}{limit}).",
        "insulating": f"The reading rises on cooling, so there is no activated minimum ({chance}).",
        "inconsistent": (
            "No member that keeps half of the data describes it at the stated errors "
            f"(best predictive p {predictive:.2g}); the gap is printed but not to be trusted."
        ),
    }[name]
