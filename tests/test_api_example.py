"""The Python interface as the README shows it."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np
import pytest
from command_line import TRUTH, series_study

import gapfit
from gapfit.errors import FillingError, InputError


@pytest.fixture(scope="module")
def result(tmp_path_factory):
    study = gapfit.load_study(series_study(tmp_path_factory.mktemp("study")) / "study.toml")
    return gapfit.fit_study(study)


def test_table_of_gaps(result):
    import pandas as pd

    assert isinstance(result.gaps, pd.DataFrame)
    assert list(result.gaps["filling"]) == list(TRUTH)
    assert result.gaps is result.gaps


def test_gap_of_a_filling_with_its_interval(result):
    gap = result.gap("1/3")
    interval = gap.interval(0.95)
    assert interval.low < gap.median < interval.high
    assert TRUTH["1/3"][0] in interval
    assert interval.probability == 0.95
    assert gap.interval(0.68).half_width < interval.half_width
    row = result.gaps.iloc[0]
    assert (row["gap_low95_K"], row["gap_K"], row["gap_high95_K"]) == (
        interval.low,
        gap.median,
        interval.high,
    )


def test_fillings_by_any_exact_name(result):
    from fractions import Fraction

    assert result.fit(Fraction(1, 3)) is result.fit("1/3") is result.fit("1/3", field_T=13.0)
    assert result.fit("1").series.n_point == 9
    assert result.converged


def test_a_filling_that_was_not_fitted(result):
    with pytest.raises(InputError, match="no fit of filling 3/7; there are 1/3, 2/5, 1"):
        result.gap("3/7")
    with pytest.raises(FillingError):
        result.gap("a third")


def test_one_series_of_arrays():
    rng = np.random.default_rng(5)
    temperature = np.geomspace(0.2, 1.5, 10)
    true = 8000 * np.exp(-5.0 / (2 * temperature))
    error = np.hypot(0.01 * true, 0.2)
    one = gapfit.fit_series(
        temperature,
        true + error * rng.standard_normal(10),
        error,
        filling="1/3",
        field_T=13.9,
        seed=1,
        engine="fast",
    )
    assert one.verdict == "activated"
    assert 5.0 in one.gap.interval(0.95)
    assert one.gap.median == pytest.approx(5.0, rel=0.05)
    assert {"mechanism", "weight"} <= set(one.weights.columns)
    assert one.weights["weight"].sum() == pytest.approx(1.0, abs=1e-6)


def test_minima_without_a_fit(tmp_path):
    measurement = gapfit.find_minima(gapfit.load_study(series_study(tmp_path / "s")), tmp_path / "out")
    assert [str(one.filling) for one in measurement.series] == list(TRUTH)
    assert [entry.name for entry in (tmp_path / "out").iterdir()] == ["series.csv"]
    assert measurement.density_rows == []


def test_every_public_name_is_there():
    for name in gapfit.__all__:
        assert getattr(gapfit, name) is not None
        assert name in dir(gapfit)
    with pytest.raises(AttributeError, match="no attribute 'gapfitt'"):
        _ = gapfit.gapfitt


def test_python_of_the_readme_runs(tmp_path, monkeypatch, capsys):
    readme = Path(__file__).parent.parent / "README.md"
    examples = re.findall(r"```python\n(.*?)```", readme.read_text(encoding="utf-8"), re.DOTALL)
    assert len(examples) >= 2
    monkeypatch.chdir(series_study(tmp_path / "study", ["1/3"]))
    for example in examples:
        exec(compile(example, "README.md", "exec"), {"__name__": "__main__"})
    assert "activated" in capsys.readouterr().out
