"""The main job on the demo sweeps against their truth, which no fit reads."""

import json
from fractions import Fraction
from pathlib import Path

import numpy as np
import pytest

from gapfit.study import load_study
from gapfit.workflow import StudyResult, fit_study

DEMO = Path(__file__).parents[1] / "datasets_synthetic" / "harebell-3"


@pytest.fixture(scope="module")
def result() -> StudyResult:
    return fit_study(load_study(DEMO), engine="fast")


@pytest.fixture(scope="module")
def truth() -> dict[Fraction, float]:
    states = json.loads((DEMO / "truth.json").read_text())["states"]
    return {Fraction(state["filling"]): state["gap_K"] for state in states if state["looked_for"]}


@pytest.mark.slow
def test_true_gaps_lie_inside_the_intervals(result, truth):
    assert {fit.filling for fit in result.fits} == set(truth)
    inside = [truth[fit.filling] in fit.gap.interval(0.95) for fit in result.fits]
    assert sum(inside) >= 8, dict(zip(map(str, truth), inside, strict=True))


@pytest.mark.slow
def test_large_gaps_are_read_to_five_per_cent(result, truth):
    large = [fit for fit in result.fits if truth[fit.filling] > 1.5]
    assert len(large) == 8
    for fit in large:
        gap = truth[fit.filling]
        assert fit.gap.median == pytest.approx(gap, rel=0.05), str(fit.filling)
        assert fit.gap.interval(0.68).half_width <= 0.05 * gap, str(fit.filling)


@pytest.mark.slow
def test_straight_lines_miss_most_of_the_true_gaps(result, truth):
    """Common practice, no source: the line through the straightest part, with its regression error."""
    inside = [
        abs(fit.line.gap_K - truth[fit.filling]) < 1.96 * fit.line.gap_error_K
        for fit in result.fits
        if fit.line is not None
    ]
    assert len(inside) == 9
    assert np.mean(inside) < 0.5
