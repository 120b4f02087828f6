"""Reports for a terminal, made from a document alone.

Texts from outside are put in as they are, never read as markup, and active characters are written out.
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import IO, Any

from deckgen.report import check_sheet, predict_sheet
from deckgen.report.blocks import Block, Heading, Note, Notes, Quote, Table, Tone, Working, WorkingStep
from deckgen.report.document import CHECK_SCHEMA, PREDICT_SCHEMA
from deckgen.report.layout import Cell, Line, Paragraph, Span, columns, painted, paragraph, span, text_width
from deckgen.report.wording import require_schema

NARROWEST = 80
"""Columns that a report needs; a narrower terminal breaks the lines itself."""

ROOMY = 120
"""Columns from which tables show everything and a step of working takes one line."""

_STYLES = {Tone.PLAIN: "", Tone.GOOD: "green", Tone.DOUBT: "yellow", Tone.FAIL: "bold red", Tone.FAINT: "dim"}
_MARKS = {Tone.FAIL: "!", Tone.DOUBT: "~"}
_NUMBER = re.compile(r"(?P<whole>[-+±≤≥= ]*\d+)(?P<part>\.\d+)?(?P<unit>(?:e[-+]?\d+)?(?: .*)?)")

_FACT_INDENT = 3
_SOURCE_INDENT = 4
_RULE_ENDS = len("── ") + len("  ") + len(" ──")


@dataclass(frozen=True, slots=True)
class Look:
    """Columns of the terminal, and whether it takes colour."""

    width: int = NARROWEST
    colour: bool = False


def look_of(stream: IO[str], environ: Mapping[str, str]) -> Look:
    """Find out how wide a stream is and whether it takes colour: a terminal does, unless NO_COLOR is set."""
    import shutil

    on_terminal = stream.isatty()
    stated = environ.get("COLUMNS", "")
    if stated.isdecimal() and int(stated) > 0:
        width = int(stated)
    else:
        width = shutil.get_terminal_size((NARROWEST, 24)).columns if on_terminal else NARROWEST
    colour = on_terminal and not environ.get("NO_COLOR") and environ.get("TERM") != "dumb"
    return Look(width=width, colour=colour)


def check_report(document: Mapping[str, Any], look: Look = Look(), *, quiet: bool = False) -> str:
    """Lay out a check; ``quiet`` leaves out the stages that pass. Raises InputError on another document."""
    require_schema(document, CHECK_SCHEMA)
    stages = [stage for stage in document["stages"] if stage["exit_code"] != 0 or not quiet]
    blocks = [check_sheet.stage_blocks(stage) for stage in stages]
    return _laid_out([*blocks, check_sheet.summary_blocks(document)], look)


def predict_report(document: Mapping[str, Any], look: Look = Look()) -> str:
    """Lay out a hand analysis with its working. Raises InputError on another document."""
    require_schema(document, PREDICT_SCHEMA)
    blocks = [predict_sheet.stage_blocks(stage) for stage in document["stages"]]
    return _laid_out([*blocks, predict_sheet.closing_blocks(document)], look)


def _laid_out(sheets: Iterable[Sequence[Block]], look: Look) -> str:
    """Write the blocks a blank line apart."""
    width = max(look.width, NARROWEST)
    blocks = [lines for sheet in sheets for block in sheet if (lines := _lines(block, width))]
    written = ("\n".join(painted(line, colour=look.colour) for line in lines) for lines in blocks)
    return "\n\n".join(written) + "\n"


def _lines(block: Block, width: int) -> list[Line]:
    roomy = width >= ROOMY
    match block:
        case Heading():
            return list(_heading(block, width))
        case Table():
            return _table(block, width, roomy=roomy)
        case Notes():
            return _notes([note for note in block.items if not (roomy and note.narrow)], width)
        case Quote():
            return _quote(block, width)
        case Working():
            return _working(block, width, roomy=roomy)


def _heading(heading: Heading, width: int) -> Iterator[Line]:
    """Draw a rule with the name on its left and the result on its right, title and facts beneath.

    A name that is too long for the rule stands beneath it.
    """
    name, state = span(heading.name, "bold"), span(heading.state, _STYLES[heading.tone])
    beneath = [paragraph(text, "bold", indent=_FACT_INDENT) for text in [heading.title] if text]
    beneath += [paragraph(" · ".join(facts), indent=_FACT_INDENT) for facts in heading.facts]
    fill = width - text_width(name.text) - text_width(state.text) - _RULE_ENDS
    if fill < 1:
        beneath.insert(0, Paragraph((name,), _FACT_INDENT))
        name, fill = Span("─"), width - text_width(state.text) - _RULE_ENDS - 1
    yield (Span("── ", "dim"), name, Span(f" {'─' * fill} ", "dim"), state, Span(" ──", "dim"))
    if beneath:
        yield from columns([[tuple(beneath)]], width=width)


def _table(table: Table, width: int, *, roomy: bool) -> list[Line]:
    """Lay a table out, numbers aligned; where that alone makes it too wide, not aligned."""
    lines = _laid_table(table, width, roomy=roomy, align=True)
    if max(sum(text_width(span.text) for span in line) for line in lines) <= width:
        return lines
    return _laid_table(table, width, roomy=roomy, align=False)


def _laid_table(table: Table, width: int, *, roomy: bool, align: bool) -> list[Line]:
    shown = [index for index, column in enumerate(table.columns) if roomy or not column.roomy]
    numbers = frozenset(place for place, index in enumerate(shown, 1) if table.columns[index].number)
    laid = []
    for place, index in enumerate(shown, 1):
        cells = [row.cells[index] for row in table.rows]
        laid.append(_aligned(cells) if align and place in numbers else cells)
    rows = [
        [_mark(row.tone), *_styled(cells, row.tone)]
        for row, cells in zip(table.rows, zip(*laid, strict=True), strict=True)
    ]
    headings = _headings("", *(table.columns[index].heading for index in shown))
    return columns([headings, *rows], width=width, whole=numbers | {0})


def _styled(cells: Sequence[str], tone: Tone) -> Iterator[Cell]:
    """Give a faint row its style all along, any other at its ends only: its name and its verdict."""
    last = len(cells) - 1
    for place, cell in enumerate(cells):
        yield (paragraph(cell, _STYLES[tone] if place in (0, last) or tone is Tone.FAINT else ""),)


def _headings(*headings: str) -> list[Cell]:
    """Write headings of one or more lines so that all end on the same one."""
    height = max(heading.count("\n") for heading in headings)
    padded = ("\n" * (height - heading.count("\n")) + heading for heading in headings)
    return [tuple(Paragraph((Span(line, "dim"),)) for line in heading.split("\n")) for heading in padded]


def _mark(tone: Tone) -> Cell:
    return (Paragraph((Span(_MARKS.get(tone, " "), _STYLES[tone]),)),)


def _aligned(cells: Sequence[str]) -> list[str]:
    """Pad numbers so that their points stand under one another, and their units too."""
    split = [_NUMBER.fullmatch(cell) for cell in cells]
    wholes = max((len(match["whole"]) for match in split if match), default=1)
    parts = max((len(match["part"] or "") for match in split if match), default=0)
    return [
        f"{match['whole']:>{wholes}}{match['part'] or '':<{parts}}{match['unit']}"
        if match
        else f"{cell:>{wholes}}"
        for cell, match in zip(cells, split, strict=True)
    ]


def _notes(notes: Sequence[Note], width: int) -> list[Line]:
    rows = []
    for note in notes:
        style = _STYLES[note.tone]
        text = paragraph(note.text, style if note.tone is Tone.FAINT else "")
        rows.append([_mark(note.tone), (paragraph(note.label, style),), (text,)])
    return columns(rows, width=width, whole=frozenset({0}))


def _quote(quote: Quote, width: int) -> list[Line]:
    rows = [[_mark(Tone.PLAIN), (paragraph("│", "dim"),), (paragraph(line),)] for line in quote.lines]
    label = (Span(" " * _FACT_INDENT), span(quote.label, "dim"))
    return [label, *columns(rows, width=width, whole=frozenset({0, 1}))]


def _working(working: Working, width: int, *, roomy: bool) -> list[Line]:
    """Write one line a step where there is room; else the source beneath formula and numbers."""
    results = [f"= {result}" for result in _aligned([step.result for step in working.steps])]
    if roomy:
        rows = [_roomy_step(step, result) for step, result in zip(working.steps, results, strict=True)]
        headings = _headings("", "step", "formula", "numbers", "result", "source")
        return columns([headings, *rows], width=width, whole=frozenset({0, 4}))
    symbols = max(text_width(step.symbol) for step in working.steps)
    room = width - symbols - max(map(text_width, results)) - 7
    rows = [_narrow_step(step, result, room) for step, result in zip(working.steps, results, strict=True)]
    headings = _headings("", "step", "formula, numbers, source", "result")
    return columns([headings, *rows], width=width, whole=frozenset({0, 3}))


def _roomy_step(step: WorkingStep, result: str) -> list[Cell]:
    style = _step_style(step)
    return [
        _mark(Tone.PLAIN),
        (paragraph(step.symbol, style),),
        (paragraph(f"= {step.formula}"),),
        (paragraph(f"{step.joint} {step.numbers}"),),
        (paragraph(result, style),),
        (Paragraph(_source(step)),),
    ]


def _narrow_step(step: WorkingStep, result: str, room: int) -> list[Cell]:
    style = _step_style(step)
    return [
        _mark(Tone.PLAIN),
        (paragraph(step.symbol, style),),
        _narrow_body(step, room),
        (paragraph(result, style),),
    ]


def _step_style(step: WorkingStep) -> str:
    return "bold" if step.strong else ""


def _source(step: WorkingStep) -> Line:
    note = (Span("; ", "dim"), span(step.note)) if step.note else ()
    return (span(step.source, "dim"), *note)


def _narrow_body(step: WorkingStep, room: int) -> Cell:
    """Put formula, numbers and source on as few lines as they fit on whole."""
    both = paragraph(f"= {step.formula} {step.joint} {step.numbers}")
    source = Paragraph(_source(step), _SOURCE_INDENT)
    if both.width + source.width <= room:
        return (Paragraph((*both.spans, Span("  "), *source.spans)),)
    if both.width <= room:
        return (both, source)
    return (paragraph(f"= {step.formula}"), paragraph(f"{step.joint} {step.numbers}"), source)
