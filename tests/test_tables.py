"""The table of gaps: its numbers, its files, and how it is printed."""

from __future__ import annotations

import json
import math
import shutil
import subprocess
from dataclasses import replace
from fractions import Fraction
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from record_examples import CONTEXT, activated, all_fits, conductivity, hopping_only, table
from scipy import constants

from gapfit.digest import TableContext, decades_used, flag_words, whole_range
from gapfit.errors import FileError, InputError
from gapfit.tables import gap_table, gaps_csv, gaps_record, read_gaps, write_gaps_csv, write_gaps_json
from gapfit.typeset import TableStyle, escape_latex, render_table, write_tables

COLUMNS = """
sample, cooldown, filling, field_T, effective_field_T, n_points, temperature_low_K, temperature_high_K,
verdict, p_activated, gap_K, gap_low68_K, gap_high68_K, gap_low95_K, gap_high95_K, gap_lower95_K,
gap_upper95_K, verdict_cause, gap_meV, gap_over_coulomb, permittivity, mechanism, p_mechanism,
window_low_K, window_high_K, pinned, prefactor_ohm, prefactor_over_eq2h, hopping, hopping_T0_K,
electron_T0_K, leak_ohm, noise_inflation, rho_min_ohm, decades_used, n_negative, quantity, reading,
sequence, level, drive_current_A, total_field_T, predictive_p, converged, rhat, ess, engines_agree,
flags
"""
NAN = float("nan")


def crafted(**changes: object) -> pd.DataFrame:
    """One row whose printed form can be worked out by hand."""
    frame = table().iloc[:1].copy()
    numbers = {
        "gap_K": 5.931, "gap_low68_K": 5.82, "gap_high68_K": 6.14, "gap_low95_K": 5.7061,
        "gap_high95_K": 6.392, "field_T": 12.9, "permittivity": 12.9, "flags": "",
        "verdict": "activated", "verdict_cause": "",
    }  # fmt: skip
    for name, value in {**numbers, **changes}.items():
        frame[name] = value
    return frame


# ------------------------------------------------------------------------------------------------- numbers


def test_columns_are_those_agreed_in_that_order() -> None:
    assert list(table().columns) == [name.strip() for name in COLUMNS.split(",")]


def test_gap_and_intervals_are_those_of_the_fit() -> None:
    row, fit = table().iloc[0], activated()
    assert row.verdict == "activated"
    assert row.gap_K == fit.gap.median
    assert (row.gap_low68_K, row.gap_high68_K) == (fit.gap.interval(0.68).low, fit.gap.interval(0.68).high)
    assert (row.gap_low95_K, row.gap_high95_K) == (fit.gap.interval(0.95).low, fit.gap.interval(0.95).high)
    assert row.gap_low95_K < 6.0 < row.gap_high95_K  # the truth


def test_other_units_of_the_gap() -> None:
    row = table().iloc[0]
    assert row.gap_meV == pytest.approx(row.gap_K * constants.k / constants.e * 1e3, rel=1e-12)
    length = math.sqrt(constants.hbar / (constants.e * 12.9))
    scale = constants.e**2 / (4 * math.pi * constants.epsilon_0 * 12.9 * length) / constants.k
    assert row.gap_over_coulomb == pytest.approx(row.gap_K / scale, rel=1e-12)
    assert math.isnan(gap_table([activated()]).gap_over_coulomb[0])  # no permittivity, no number


def test_effective_field_and_sequences() -> None:
    frame = table()
    # by definition: 1/3 is p = 1 of p/(2p+1) and of p/(4p-1), 2/5 is p = 2 of p/(2p+1), 2/3 p = 2 of p/(2p-1)
    assert frame.effective_field_T.tolist() == pytest.approx([4.3, 2.15, -2.15])
    assert frame.sequence[0].split(";") == ["p/(2p+1)", "p/(4p-1)"]
    assert frame.sequence[1] == "p/(2p+1)"


def test_level_of_higher_fillings() -> None:
    assert [CONTEXT.level(Fraction(text)) for text in ("1/3", "-5/3", "2", "7/3", "-18/5")] == [0, 0, 0, 2, 3]
    assert TableContext(base_level=1).level(Fraction(5, 3)) == 1


def test_no_gap_is_printed_for_hopping_alone() -> None:
    row = table().iloc[1]
    assert row.verdict == "no activated regime"
    empty = [
        "gap_K",
        "gap_low68_K",
        "gap_high95_K",
        "gap_meV",
        "gap_over_coulomb",
        "prefactor_ohm",
        "decades_used",
    ]
    assert row[empty].isna().all()
    assert row.hopping == "es"
    assert row.hopping_T0_K == pytest.approx(12, rel=0.15)  # the truth; posterior sd is about 4 %


def test_conductivity_is_given_in_ohm_by_the_hall_resistance() -> None:
    row, fit = table().iloc[2], conductivity()
    hall = constants.h / constants.e**2 / (2 / 3)
    assert row.quantity == "sigma_xx"
    assert row.prefactor_ohm == pytest.approx(fit.prefactor.median * hall**2, rel=1e-9)
    unit = (constants.e / 3) ** 2 / constants.h
    assert row.prefactor_over_eq2h == pytest.approx(fit.prefactor.median / unit, rel=1e-9)
    assert row.prefactor_over_eq2h == pytest.approx(0.5, rel=0.1)  # the truth; posterior sd is about 3 %
    assert row.rho_min_ohm == pytest.approx(fit.series.value.min() * hall**2, rel=1e-9)


def test_decades_count_what_stands_above_the_noise() -> None:
    # 1e4 exp(-3/T) exceeds its error of 0.3 ohm from 0.31 to 2 K: 3 (1/0.31 - 1/2)/ln 10 decades
    assert decades_used(activated()) == pytest.approx(3 * (1 / 0.31 - 1 / 2) / math.log(10), rel=0.02)


def test_counts_and_flags() -> None:
    row = table().iloc[0]
    assert row.n_points == 13
    assert row.n_negative == 0
    assert table().n_negative[2] == int((conductivity().series.value < 0).sum()) > 0
    assert "points_excluded" in row["flags"].split(";")
    assert row.pinned  # these fits name their combinations
    pinned = replace(activated(), settings=replace(activated().settings, window=(0.2, 2.0)))
    assert gap_table([pinned]).pinned[0]


def test_gap_without_averaging_is_of_the_likeliest_combination() -> None:
    alone = whole_range(activated())
    assert alone is not None
    assert alone.combination == activated().best[0]
    assert alone.gap.interval(0.95).low < 6.0 < alone.gap.interval(0.95).high
    gapless = hopping_only()
    combinations = tuple(item for item in gapless.draws.combinations if not item.activated)
    draws = replace(gapless.draws, combinations=combinations, share=np.ones(len(combinations)))
    assert whole_range(replace(gapless, draws=draws)) is None


# --------------------------------------------------------------------------------------------------- files


def test_csv_reads_back_to_the_last_digit(tmp_path: Path) -> None:
    frame = table()
    pd.testing.assert_frame_equal(
        read_gaps(write_gaps_csv(frame, tmp_path / "gaps.csv")), frame, check_exact=True
    )
    outside = pd.read_csv(tmp_path / "gaps.csv")
    assert outside.gap_K.tolist()[0] == frame.gap_K[0]
    assert outside.filling.tolist() == ["1/3", "2/5", "2/3"]
    assert outside.pinned.dtype == bool


def test_folder_of_a_run_is_read_without_fitting(tmp_path: Path) -> None:
    write_gaps_json(table(), all_fits(), tmp_path / "gaps.json")
    pd.testing.assert_frame_equal(read_gaps(tmp_path), table(), check_exact=True)


def test_json_holds_everything_and_no_nan() -> None:
    def refuse(text: str) -> float:
        raise AssertionError(text)

    fits = all_fits()
    record = gaps_record(table(), fits, [whole_range(fit) for fit in fits])
    record = json.loads(json.dumps(record), parse_constant=refuse)
    assert record["format_version"] == 1
    assert "exp(−Δ / 2k_B T)" in record["convention"]
    first = record["gaps"][0]
    assert first["gap_K"] == table().gap_K[0]
    details = first["details"]
    assert sum(member["weight"] for member in details["members"]) == pytest.approx(1)
    assert sum(item["probability"] for item in details["combinations"]) == pytest.approx(1)
    assert details["straight_line"]["gap_K"] == activated().line.gap_K
    assert details["without_averaging"]["mechanism"] == activated().best[0].name
    assert details["series"]["reading"] == activated().series.value.tolist()
    assert details["series"]["excluded"][0]["reason"] == "sweep ends before the filling"
    assert {row["name"] for row in details["priors"]} >= {"gap_K", "inflation"}
    assert record["gaps"][1]["gap_K"] is None


def test_bad_tables_are_refused(tmp_path: Path) -> None:
    with pytest.raises(FileError, match=r"neither gaps\.json nor gaps\.csv"):
        read_gaps(tmp_path)
    path = tmp_path / "gaps.csv"
    path.write_text("filling,gap_K\n1/3,2\n")
    with pytest.raises(FileError, match="no column 'sample'"):
        read_gaps(path)
    path.write_text(gaps_csv(table()).replace("12.9,4.3", "twelve,4.3", 1))
    with pytest.raises(FileError, match=r"row 2, column 'field_T': 'twelve' is no number"):
        read_gaps(path)
    other = tmp_path / "gaps.json"
    other.write_text('{"format": "gapfit gaps", "format_version": 99, "gaps": []}')
    with pytest.raises(FileError, match="format version 99"):
        read_gaps(other)
    other.write_text("[]")
    with pytest.raises(FileError, match="no table of gaps"):
        read_gaps(other)


# ------------------------------------------------------------------------------------------------ printing


def test_gap_is_rounded_by_the_rule_and_named() -> None:
    text = render_table(crafted())
    assert "5.93 +0.46 −0.22" in text
    assert "Δ (K)" in text
    assert "ρ₀ exp(−Δ / 2k_B T)" in text
    assert "95 % credible interval" in text
    assert "5.93 +0.21 −0.11" in render_table(crafted(), TableStyle(level=68))


def test_half_gap_is_half_and_says_so() -> None:
    text = render_table(crafted(), TableStyle(convention="half"))
    assert "2.97 +0.23 −0.11" in text  # halves of 5.931, 0.461, 0.2249
    assert "Δ/2 (K)" in text
    assert "activation energy" in text


def test_units_of_print() -> None:
    # 5.931 K in meV; 12.9 T, eps 12.9: 50.9 K/sqrt(T) sqrt(12.9) ... from CODATA constants
    mev = 5.931 * constants.k / constants.e * 1e3
    assert f"{mev:.3f}" in render_table(crafted(), TableStyle(unit="meV"))
    text = render_table(crafted(), TableStyle(unit="coulomb"))
    assert "Δ (E_C)" in text
    assert "ε = 12.9" in text
    unknown = render_table(crafted(permittivity=NAN), TableStyle(unit="coulomb", columns=("gap",)))
    assert unknown.splitlines()[2] == "–"


def test_limits_marks_and_shared_notes() -> None:
    limit = crafted(
        gap_K=NAN,
        verdict="no activated regime",
        gap_lower95_K=1.4062,
        verdict_cause="no minimum",
        flags="not_converged",
    )
    doubtful = crafted(verdict="unresolved", flags="not_converged;made_up_flag")
    text = render_table(pd.concat([limit, doubtful]))
    assert "> 1.4 (a, b, c)" in text
    assert "(a) no activated regime: no minimum" in text
    assert "(b) one-sided 95 % limit" in text
    assert text.count("not converged") == 1
    assert "(c, d, e)" in text
    assert "(e) made up flag" in text
    upper = render_table(
        crafted(gap_K=NAN, gap_lower95_K=NAN, gap_upper95_K=2.01, verdict="no activated regime")
    )
    assert "< 2.1" in upper


def test_samples_are_named_where_there_are_several() -> None:
    assert "bellflower" not in render_table(crafted())
    two = pd.concat([crafted(), crafted(sample="cowslip-2")])
    assert "cowslip-2" in render_table(two)


def test_raw_formats_name_unit_and_convention() -> None:
    rows = render_table(crafted(), TableStyle("csv", unit="meV", convention="half")).splitlines()
    values = dict(zip(rows[0].split(","), rows[1].split(","), strict=True))
    assert float(values["half_gap_meV"]) == pytest.approx(5.931 / 2 * constants.k / constants.e * 1e3)
    assert "gap_K" not in values
    record = json.loads(render_table(crafted(), TableStyle("json", columns=("filling", "gap_K"))))
    assert record["gaps"] == [{"filling": "1/3", "gap_K": 5.931}]
    assert "2k_B T" in record["convention"]


def test_unknown_choices_are_refused() -> None:
    with pytest.raises(InputError, match="format 'docx' is unknown; allowed are text, md"):
        TableStyle("docx")
    with pytest.raises(InputError, match="level 90"):
        TableStyle(level=90)
    with pytest.raises(InputError, match="column 'colour' is unknown"):
        render_table(crafted(), TableStyle(columns=("colour",)))


NASTY = r"tea_sel & 50% #2 \alpha {x} ~^$ <script>|"


def test_text_from_files_is_escaped() -> None:
    frame = crafted(sample=NASTY)
    style = TableStyle(columns=("sample", "gap"))
    assert "&lt;script&gt;" in render_table(frame, replace(style, format="html"))
    markdown = render_table(frame, replace(style, format="md")).splitlines()
    assert markdown[2].replace(r"\|", "").count("|") == 3
    latex = render_table(frame, replace(style, format="tex"))
    assert r"tea\_sel \& 50\% \#2 \textbackslash{}alpha \{x\} \textasciitilde{}\textasciicircum{}\$" in latex
    assert escape_latex("a\nb\x00日") == "a b ?"


def test_flags_have_words() -> None:
    assert flag_words("errors_inflated") != "errors inflated"
    assert flag_words("something_new") == "something new"


def test_tables_of_a_run(tmp_path: Path) -> None:
    paths = write_tables(table(), tmp_path)
    assert [path.name for path in paths] == ["gaps.md", "gaps.tex"]
    assert paths[0].read_text(encoding="utf-8").startswith("| ν |")


@pytest.mark.parametrize(
    "style", [TableStyle("tex"), TableStyle("tex", "coulomb", 68, "half", ("sample", "gap", "leak"))]
)
def test_latex_compiles_alone(tmp_path: Path, style: TableStyle) -> None:
    program = shutil.which("pdflatex")
    if program is None:
        pytest.skip("there is no pdflatex on this machine")
    frame = table()
    frame["sample"] = NASTY
    (tmp_path / "gaps.tex").write_text(render_table(frame, style), encoding="utf-8")
    command = [program, "-interaction=nonstopmode", "-halt-on-error", "gaps.tex"]
    run = subprocess.run(command, cwd=tmp_path, capture_output=True, text=True, errors="replace", check=False)
    if "siunitx.sty' not found" in run.stdout or "booktabs.sty' not found" in run.stdout:
        pytest.skip("this LaTeX has no siunitx or booktabs")
    assert run.returncode == 0, run.stdout[-2000:]
    assert "Overfull" not in run.stdout
