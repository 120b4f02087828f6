"""Markdown reports say what the terminal says, and no text from outside becomes markup."""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import replace
from typing import Any

import pytest
from hypothesis import assume, given
from markdown_it import MarkdownIt
from markdown_it.token import Token

from deckgen.comparison import Comparison, Finding, Severity
from deckgen.errors import InputError
from deckgen.report import cells
from deckgen.report.document import check_document
from deckgen.report.inert import inert
from deckgen.report.markdown import check_report, escape, predict_report
from deckgen.report.wording import CAUTION, EXIT_MEANING, PORT_CONVENTION, SQUARE_LAW_CONVENTION
from tests.unit import report_samples as samples
from tests.unit import report_strategies as strategies

_BREAK = "<!-- -->"
_PARSER = MarkdownIt("commonmark").enable(["table", "strikethrough"])

# Everything a report's own markup consists of; the empty comment is how `escape` parts texts.
_OWN = {
    *("heading_open", "heading_close", "paragraph_open", "paragraph_close", "inline", "text", "html_inline"),
    *("strong_open", "strong_close", "bullet_list_open", "bullet_list_close", "list_item_open"),
    *(
        "list_item_close",
        "table_open",
        "table_close",
        "thead_open",
        "thead_close",
        "tbody_open",
        "tbody_close",
    ),
    *("tr_open", "tr_close", "th_open", "th_close", "td_open", "td_close", "fence"),
}


def _tokens(text: str) -> Iterator[Token]:
    for token in _PARSER.parse(text):
        yield token
        yield from token.children or ()


def _structure(text: str) -> list[str]:
    """What a text is as Markdown, without the texts in it."""
    return [token.type for token in _tokens(text) if token.type not in ("text", "html_inline", "inline")]


def _read(text: str) -> str:
    """What a reader sees, pieces parted by line ends."""
    parts = []
    for token in _PARSER.parse(text):
        if token.type == "inline":
            parts.append("".join(child.content for child in token.children or () if child.type == "text"))
        elif token.type == "fence":
            parts.append(token.content)
    return "\n".join(parts)


def _tables(text: str) -> list[list[list[str]]]:
    """All tables, as rows of cells as a reader sees them."""
    tables: list[list[list[str]]] = []
    tokens = list(_PARSER.parse(text))
    for at, token in enumerate(tokens):
        if token.type == "table_open":
            tables.append([])
        elif token.type == "tr_open":
            tables[-1].append([])
        elif token.type in ("th_open", "td_open"):
            children = tokens[at + 1].children or ()
            tables[-1][-1].append("".join(child.content for child in children if child.type == "text"))
    return tables


def _assert_harmless(text: str) -> None:
    for token in _tokens(text):
        assert token.type in _OWN
        assert token.type != "html_inline" or token.content == _BREAK
    assert inert(text.replace("\n", "")) == text.replace("\n", "")


def _seen(text: str) -> str:
    """How a text from outside ought to be seen."""
    return " ".join(inert(text).split())


@pytest.mark.parametrize("comparison", samples.ALL, ids=lambda comparison: comparison.name)
def test_every_value_and_verdict_stands_beside_its_quantity(comparison: Comparison) -> None:
    document = samples.checked(comparison)
    rows = [row for table in _tables(check_report(document)) for row in table]
    for quantity in document["stages"][0]["quantities"]:
        row = next(row for row in rows if row[0] == quantity["name"])
        if comparison.outcome == "timed out":
            assert row == [quantity["name"], cells.hand_cell(quantity), quantity["how"]]
            continue
        assert row == [
            quantity["name"],
            cells.hand_cell(quantity),
            cells.simulated_cell(quantity),
            cells.gap_cell(quantity),
            cells.unit_gap_cell(quantity),
            cells.tolerance_cell(quantity),
            quantity["tolerance"]["from"],
            quantity["how"],
            cells.verdict_cell(quantity),
        ]


def test_every_table_has_as_many_cells_in_each_row() -> None:
    for report in (check_report(samples.checked()), predict_report(samples.predicted())):
        tables = _tables(report)
        assert len(tables) > 3
        for table in tables:
            assert len({len(row) for row in table}) == 1


def test_the_samples_are_nothing_but_our_own_markup() -> None:
    _assert_harmless(check_report(samples.checked()))
    _assert_harmless(predict_report(samples.predicted()))


def test_the_summary_comes_first_with_exit_code_conventions_and_caution() -> None:
    report = check_report(samples.checked())
    headings = re.findall(r"^## (.*)$", report, re.MULTILINE)
    assert headings == ["summary", *(comparison.name for comparison in samples.ALL)]
    assert _tables(report)[0][2] == [
        *("line-driver", "14", "2", "0", "0", "1", "ID(M1) +22.1 %, 1 excused, 1 claim missed"),
    ]
    seen = _read(report)
    assert f"exit code: 3: {EXIT_MEANING[3]}" in seen
    for sentence in (CAUTION, SQUARE_LAW_CONVENTION, PORT_CONVENTION):
        assert seen.count(sentence) == 1


def test_what_fails_is_bold() -> None:
    report = check_report(samples.checked(samples.BEYOND))
    assert re.search(r"^\| \*\*Av\*\* \| .* \| \*\*BEYOND\*\* \|$", report, re.MULTILINE)
    assert re.search(r"^\| Rout \| .* \| beyond, excused \|$", report, re.MULTILINE)
    assert "**FAILS** · measured" in report


def test_a_stage_without_answer_quotes_the_simulator_in_a_code_block() -> None:
    report = check_report(samples.checked(samples.TIMED_OUT))
    fences = [token for token in _PARSER.parse(report) if token.type == "fence"]
    assert [fence.content.splitlines() for fence in fences] == [list(samples.TIMED_OUT.said)]
    assert "timed out: ngspice was stopped after 30 s; give it more time" in _read(report)


def test_findings_claims_ratings_and_reasons_are_there() -> None:
    seen = _read(check_report(samples.checked()))
    for text in (
        "warning: line 14: the claim fits RD = 5.6 kΩ: check the decimal point [claim-part-value]",
        "-6.2 V/V … -5.2 V/V",
        "MISSED",
        "EXCEEDED",
        "ratings: not stated, so not checked: P(RD)",
        f"not compared: {', '.join(samples.SMALL_SIGNAL)}: {samples.REGION_REASON}",
        "excused: Rout: known gap until 2026-03-31: RD under review",
        "absent: Rin: a driven gate draws no current",
        "refused: stages/typo.toml: parts.RD: found '1M', expected 1Meg or 1m",
        "evidence: runs/20250301T071502-probe-preamp",
    ):
        assert text in seen


def test_the_working_is_a_table_of_steps() -> None:
    working = _tables(predict_report(samples.predicted()))[0]
    assert working[0] == ["step", "formula", "numbers", "result", "source"]
    assert working[2] == ["ro", "1/gds", "with ID = 994 µA, λ = 0.01/V", "100.6 kΩ", "Shichman & Hodges 1968"]
    step = samples.LONG_WORKING
    assert working[3] == [
        step.symbol,
        step.formula,
        step.numbers,
        "-5.631 V/V",
        f"{step.source}; {step.note}",
    ]


@pytest.mark.parametrize(
    ("text", "escaped"),
    [
        ("gm(M1) = 2.18 mS", "gm(M1) = 2.18 mS"),
        ("M1@X1", "M1@X1"),
        ("a|b", r"a\|b"),
        ("`x`", r"\`x\`"),
        ("<b>&lt;", "&lt;b&gt;&amp;lt;"),
        ("[x](y) ![z](w)", r"\[x\](y) \!\[z\](w)"),
        ("a\nb", r"a\\nb"),
        ("  a   b  ", "a b"),
        ("https://x.example", "https:<!-- -->//x.example"),
        ("www.x.example", "www<!-- -->.x.example"),
        ("@someone", "@<!-- -->someone"),
        ("a@b.example", "a@<!-- -->b.example"),
        ("#12", r"\#<!-- -->12"),
        (":tada:", ":<!-- -->tada:"),
        ("$x$", r"\$x\$"),
    ],
)
def test_markup_is_escaped_and_plain_text_left_alone(text: str, escaped: str) -> None:
    assert escape(text) == escaped


@given(strategies.texts)
def test_an_escaped_text_is_read_as_it_was_written(text: str) -> None:
    assume(_seen(text))
    paragraph = f"x {escape(text)} x"
    assert _structure(paragraph) == ["paragraph_open", "paragraph_close"]
    assert _read(paragraph) == f"x {_seen(text)} x"
    bold = f"**{escape(text)}**"
    assert _structure(bold) == ["paragraph_open", "strong_open", "strong_close", "paragraph_close"]
    assert _read(bold) == _seen(text)


def _check_with(text: str) -> Comparison:
    base = samples.BEYOND
    quantity = replace(base.quantities[0], excused=text, reason=text)
    return replace(
        base,
        name=text,
        title=text,
        file=text,
        meaning=inert(text),
        said=(text, f"```{text}"),
        findings=(Finding("slug", Severity.WARNING, text, file=text, subject=None),),
        transistors=(replace(base.transistors[0], name=text, role=text),),
        quantities=(quantity, *base.quantities[1:]),
        run_folder=text,
    )


@given(strategies.texts)
def test_no_text_from_outside_changes_the_structure_of_a_check(text: str) -> None:
    assume(_seen(text))
    report = check_report(samples.checked(_check_with(text)))
    _assert_harmless(report)
    assert _structure(report) == _structure(check_report(samples.checked(_check_with("plain"))))
    assert _read(report).count(_seen(text)) >= 8
    fence = next(token for token in _PARSER.parse(report) if token.type == "fence")
    assert fence.content.split("\n")[:-1] == [inert(text), f"```{inert(text)}"]


@given(strategies.texts)
def test_no_text_from_outside_changes_the_structure_of_a_prediction(text: str) -> None:
    assume(_seen(text))

    def report(word: str) -> str:
        changed: dict[str, Any] = dict.fromkeys(("symbol", "formula", "numbers", "source", "note"), word)
        step = replace(samples.LONG_WORKING, **changed)
        prediction = replace(samples.PREDICTION, working=(step,), notes=(word,), assumptions=(word,))
        return predict_report(
            samples.predicted(replace(samples.PREDICTED, title=word, prediction=prediction))
        )

    _assert_harmless(report(text))
    assert _structure(report(text)) == _structure(report("plain"))
    assert _read(report(text)).count(_seen(text)) >= 6


@given(strategies.comparisons)
def test_any_comparison_gives_harmless_markdown(comparison: Comparison) -> None:
    _assert_harmless(check_report(check_document([comparison], simulator=None)))


def test_another_document_is_refused() -> None:
    with pytest.raises(InputError, match=r"expected 'deckgen.check/1'"):
        check_report(samples.predicted())
    with pytest.raises(InputError, match=r"expected 'deckgen.predict/1'"):
        predict_report(samples.checked())
