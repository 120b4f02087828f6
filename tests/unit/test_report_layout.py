"""Texts from outside are folded, never cut off, and act on no terminal."""

from __future__ import annotations

import re
from dataclasses import replace

from hypothesis import given
from hypothesis import strategies as st
from rich.cells import cell_len

from deckgen.comparison import Comparison, Finding, Severity
from deckgen.report.document import check_document
from deckgen.report.inert import inert
from deckgen.report.terminal import Look, check_report, predict_report
from tests.unit import report_samples as samples
from tests.unit import report_strategies as strategies

_ANSI = re.compile(r"\x1b\[[0-9;]*m")


def squeezed(text: str) -> str:
    """The text with all blanks and line ends taken out, so that folding doesn't show."""
    return re.sub(r"\s+", "", text)


@given(st.lists(st.sampled_from(["100 kΩ", "3.2 mA", "-12 %", "word"]), min_size=5, max_size=40))
def test_a_number_is_never_parted_from_its_unit(words: list[str]) -> None:
    text = " ".join(words)
    comparison = replace(samples.REFUSED, meaning=text)
    report = check_report(samples.checked(comparison))
    assert not re.search(r"\d\n", report[: report.index("── summary")])
    assert text in " ".join(report.split())


def test_markup_in_a_title_is_printed_as_it_stands() -> None:
    title = "[red]x[/red] [link=https://x.example]y[/link] :tada: [b"
    for colour in (False, True):
        report = check_report(samples.checked(replace(samples.CLEAN, title=title)), Look(colour=colour))
        assert title in report


def test_control_characters_are_written_out() -> None:
    title = "a\x1b[31mb\rc\nd\x07e\u202ef"
    report = check_report(samples.checked(replace(samples.CLEAN, title=title)), Look(colour=True))
    assert r"a\e[31mb\rc\nd\u0007e\u202ef" in report


@given(strategies.comparisons, st.sampled_from([80, 160]), st.booleans())
def test_no_text_from_outside_acts_on_the_terminal_or_breaks_the_width(
    comparison: Comparison, width: int, colour: bool
) -> None:
    report = check_report(check_document([comparison], simulator=None), Look(width, colour))
    plain = _ANSI.sub("", report)
    assert inert(plain.replace("\n", "")) == plain.replace("\n", "")
    assert colour or plain == report
    assert max(map(cell_len, plain.split("\n"))) <= width


@given(strategies.texts)
def test_a_long_title_or_finding_is_folded_and_never_cut_off(text: str) -> None:
    finding = Finding("slug", Severity.NOTE, text)
    comparison = replace(samples.REFUSED, title=text, findings=(finding,))
    report = squeezed(check_report(samples.checked(comparison)))
    assert report.count(squeezed(inert(text))) >= 2


@given(strategies.lines, st.sampled_from([80, 160]))
def test_texts_in_a_working_are_inert_and_fit(text: str, width: int) -> None:
    step = replace(samples.LONG_WORKING, symbol=text, formula=text, numbers=text, source=text, note=text)
    prediction = replace(samples.PREDICTION, working=(step,), notes=(text,))
    report = predict_report(samples.predicted(replace(samples.PREDICTED, prediction=prediction)), Look(width))
    assert inert(report.replace("\n", "")) == report.replace("\n", "")
    assert max(map(cell_len, report.split("\n"))) <= width


def test_a_stage_name_that_is_longer_than_the_terminal_is_folded() -> None:
    name = "x" * 200
    report = check_report(samples.checked(replace(samples.CLEAN, name=name)))
    assert max(map(len, report.splitlines())) <= 80
    assert name in squeezed(report)
