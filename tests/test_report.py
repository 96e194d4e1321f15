"""The report: one safe page with the answer first."""

from __future__ import annotations

import re
from dataclasses import replace
from html.parser import HTMLParser
from importlib.resources import files

import pytest
from record_examples import activated, all_fits, table

from gapfit.digest import whole_range
from gapfit.errors import InputError
from gapfit.report import ReportContent, render_report
from gapfit.series import ExcludedPoint

SVG = '<?xml version="1.0"?>\n<svg xmlns="http://www.w3.org/2000/svg"><path d="M0 0"/></svg>\n'
EVIL = "<script>alert(1)</script>"
VOID = {"meta", "path", "br", "link", "img"}


def content(**changes: object) -> ReportContent:
    fits = all_fits()
    record = {
        "versions": {"gapfit": "0.1.0", "python": "3.12"},
        "inputs": [{"file": "minima.csv", "sha256": "ab" * 32}],
        "seed": 7,
        "wall_time_s": 2.5,
        "study": {"sample": {"name": "bellflower-9"}, "fit": {"window": "average"}},
    }
    base = ReportContent(
        "bellflower-9, first cool-down", fits, table(), [whole_range(fit) for fit in fits], provenance=record
    )
    return replace(base, **changes)


@pytest.fixture(scope="module")
def page() -> str:
    figures = [{"arrhenius": SVG, "own name": SVG}] * 3
    return render_report(
        content(figures={"gaps": SVG}, filling_figures=figures, data_figures={"traces": SVG})
    )


class Balance(HTMLParser):
    """Collects tags that are closed in the wrong order."""

    def __init__(self) -> None:
        super().__init__()
        self.open: list[str] = []
        self.wrong: list[str] = []

    def handle_starttag(self, tag: str, attrs: object) -> None:
        if tag not in VOID:
            self.open.append(tag)

    def handle_endtag(self, tag: str) -> None:
        if tag not in VOID and (not self.open or self.open.pop() != tag):
            self.wrong.append(tag)


def test_tags_are_balanced(page: str) -> None:
    parser = Balance()
    parser.feed(page)
    assert not parser.wrong
    assert not parser.open


def test_answer_comes_first(page: str) -> None:
    marks = ['<table class="gaps">', 'id="fillings"', 'id="data"', 'id="methods"', 'id="provenance"']
    places = [page.index(mark) for mark in marks]
    assert places == sorted(places)


def test_nothing_is_loaded_and_nothing_runs(page: str) -> None:
    assert "<script" not in page
    assert "@import" not in page
    assert not re.search(r"\b(src|href|action)\s*=\s*([\"'](?!#)|[^\"'\s])", page)
    addresses = set(re.findall(r"https?://[^\s\"'<]+", page))
    assert addresses <= {"http://www.w3.org/2000/svg"}
    assert "default-src 'none'" in page


def test_every_text_from_a_file_is_escaped() -> None:
    fit = activated()
    series = replace(
        fit.series, sample=EVIL, contacts=EVIL, excluded=(ExcludedPoint(1.0, 2.0, 0.1, EVIL),), flags=(EVIL,)
    )
    frame = table().iloc[:1].copy()
    for name in ("sample", "cooldown", "filling", "verdict_cause", "flags"):
        frame[name] = EVIL
    verdict = replace(fit.verdict_record, sentence=EVIL, cause=EVIL)
    diagnostics = replace(fit.diagnostics, converged=False, reasons=(EVIL,))
    evil = content(
        title=EVIL,
        fits=[replace(fit, series=series, verdict_record=verdict, diagnostics=diagnostics, flags=(EVIL,))],
        table=frame,
        alone=(),
        figures={EVIL: SVG},
        density=[{EVIL: EVIL}],
        notices=[EVIL],
        provenance={
            "versions": {EVIL: EVIL},
            "inputs": [{"file": EVIL, "sha256": EVIL}],
            "study": {EVIL: [EVIL]},
            "seed": EVIL,
        },
    )
    page = render_report(evil)
    assert "<script" not in page.lower()
    assert page.count("&lt;script&gt;") > 15


def test_each_filling_has_its_sentence_and_its_comparison(page: str) -> None:
    for fit in all_fits():
        assert f"ν = {fit.filling} at" in page
    assert page.count("a straight line</td>") == sum(fit.line is not None for fit in all_fits())
    assert page.count("without averaging: likeliest mechanism, all readings") == 3
    assert "sweep ends before the filling" in page
    assert page.count("<svg") == 2 + 2 * 3


def test_convention_intervals_and_rules_are_printed(page: str) -> None:
    assert "exp(−Δ / 2k<sub>B</sub> T)" in page
    assert "68 %" in page
    assert "95 %" in page
    assert "costs 3 in ln evidence" in page
    assert "log-normal" in page
    assert "Efros" in page
    half = render_report(content(convention="half"))
    assert "half gap Δ/2".lower() in half.lower()
    assert "Δ/2 =" in half


def test_sentences_keep_their_spaces(page: str) -> None:
    text = re.sub(r"\s+", " ", re.sub(r"<[^>]+>", "", page[page.index('id="methods"') :]))
    assert not re.search(r"[a-z\]]\.[A-Z]", text.replace("arXiv:", "").split("References")[0])
    assert "degrees of freedom at the standard errors" in text


def test_not_converged_is_said_at_the_top() -> None:
    fit = activated()
    stuck = replace(
        fit, diagnostics=replace(fit.diagnostics, converged=False, reasons=("R-hat 1.2 is large",))
    )
    page = render_report(content(fits=[stuck], table=table().iloc[:1], alone=()))
    assert page.index("Not converged") < page.index('id="fillings"')
    assert "R-hat 1.2 is large" in page


def test_unit_that_cannot_be_had_is_said() -> None:
    frame = table()
    frame["permittivity"] = float("nan")
    page = render_report(content(unit="coulomb", table=frame))
    assert page.count("permittivity or field is unknown") == 3
    assert "in units of the Coulomb scale" in render_report(content(unit="coulomb"))


def test_empty_report_says_so() -> None:
    page = render_report(content(fits=[], table=table().iloc[:0], alone=(), provenance={}))
    assert "No series could be fitted" in page


@pytest.mark.parametrize(
    "svg",
    [
        "<svg><script>x</script></svg>",
        '<svg onload="x()"></svg>',
        '<svg><image href="http://example.org/a.png"/></svg>',
        "<svg><foreignObject/></svg>",
        "<p>no drawing</p>",
        "<svg></svg><script>x</script>",
    ],
)
def test_drawings_that_do_more_than_draw_are_refused(svg: str) -> None:
    with pytest.raises(InputError, match="figure 'gaps'"):
        render_report(content(figures={"gaps": svg}))


def test_table_and_fits_must_match() -> None:
    with pytest.raises(InputError, match="1 rows for 3 fits"):
        render_report(content(table=table().iloc[:1]))


def test_templates_are_part_of_the_package() -> None:
    names = {item.name for item in files("gapfit").joinpath("templates").iterdir()}
    assert {"report.html.j2", "methods.html.j2", "report.css"} <= names
