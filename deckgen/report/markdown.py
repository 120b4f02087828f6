"""Reports as GitHub-flavoured Markdown, made from a document alone.

Every text from outside is escaped: no link, mention, image, HTML, formula or table cell can be brought in.
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping, Sequence
from typing import Any

from deckgen.report import check_sheet, predict_sheet
from deckgen.report.blocks import Block, Heading, Notes, Quote, Table, TableRow, Tone, Working
from deckgen.report.document import CHECK_SCHEMA, PREDICT_SCHEMA
from deckgen.report.inert import inert
from deckgen.report.wording import require_schema

_BREAK = "<!-- -->"
"""An empty comment: parts a text so that GitHub links, mentions and emoji are not found in it."""

_ENTITIES = {"&": "&amp;", "<": "&lt;", ">": "&gt;"}

_MARKUP = re.compile(
    r"(?P<entity>[&<>])"
    r"|(?P<parted>:(?=//)|www(?=\.)|(?<![A-Za-z0-9])@(?=\w)|@(?=[\w-]+\.)|:(?=[\w+-]+:))"
    r"|(?P<number>\#(?=\d))"
    r"|(?P<special>[\\`*_{}\[\]#|~$!])",
    re.IGNORECASE,
)


def check_report(document: Mapping[str, Any]) -> str:
    """Lay out a check, its summary first. Raises InputError on another document."""
    require_schema(document, CHECK_SCHEMA)
    stages = [check_sheet.stage_blocks(stage) for stage in document["stages"]]
    return _laid_out("Check", [check_sheet.summary_blocks(document), *stages])


def predict_report(document: Mapping[str, Any]) -> str:
    """Lay out a hand analysis with its working. Raises InputError on another document."""
    require_schema(document, PREDICT_SCHEMA)
    stages = [predict_sheet.stage_blocks(stage) for stage in document["stages"]]
    return _laid_out("Hand analysis", [*stages, predict_sheet.closing_blocks(document)])


def escape(text: str) -> str:
    r"""Make a text plain in Markdown, on one line.

    >>> escape("a|b <i> [x](y)")
    'a\\|b &lt;i&gt; \\[x\\](y)'
    """
    return _MARKUP.sub(_escaped, " ".join(inert(text).split()))


def _escaped(match: re.Match[str]) -> str:
    found = match[0]
    match match.lastgroup:
        case "entity":
            return _ENTITIES[found]
        case "parted":
            return found + _BREAK
        case "number":
            return "\\" + found + _BREAK
        case _:
            return "\\" + found


def _laid_out(title: str, sheets: Iterable[Sequence[Block]]) -> str:
    parts = [f"# {title}", *(_rendered(block) for sheet in sheets for block in sheet)]
    return "\n\n".join(part for part in parts if part) + "\n"


def _rendered(block: Block) -> str:
    match block:
        case Heading():
            return _heading(block)
        case Table():
            return _table(block)
        case Notes():
            return "\n".join(
                f"- {_strong(note.label)}: {escape(note.text)}" for note in block.items if not note.narrow
            )
        case Quote():
            return _quote(block)
        case Working():
            return _working(block)


def _heading(heading: Heading) -> str:
    facts = " · ".join([_strong(heading.state), *(escape(fact) for line in heading.facts for fact in line)])
    lines = [f"## {escape(heading.name)}", _strong(heading.title), facts]
    return "\n\n".join(line for line in lines if line)


def _strong(text: str) -> str:
    plain = escape(text)
    return f"**{plain}**" if plain else ""


def _table(table: Table) -> str:
    headings = [column.heading.replace("\n", " ").strip() for column in table.columns]
    rules = ["---:" if column.number else "---" for column in table.columns]
    return "\n".join(map(_line, [headings, rules, *map(_cells, table.rows)]))


def _cells(row: TableRow) -> list[str]:
    """Write a row; one that fails is bold at both ends."""
    cells = [escape(cell) for cell in row.cells]
    if row.tone is Tone.FAIL:
        cells[0], cells[-1] = _strong(row.cells[0]), _strong(row.cells[-1])
    return cells


def _line(cells: Iterable[str]) -> str:
    return f"| {' | '.join(cells)} |"


def _quote(quote: Quote) -> str:
    """Put words in a code block whose fence is longer than any in them."""
    lines = [inert(line) for line in quote.lines]
    longest = max((len(run) for line in lines for run in re.findall("`+", line)), default=0)
    fence = "`" * max(3, longest + 1)
    return "\n".join([f"{escape(quote.label)}:", "", f"{fence}text", *lines, fence])


def _working(working: Working) -> str:
    rows = [
        [
            _strong(step.symbol) if step.strong else escape(step.symbol),
            escape(step.formula),
            escape(step.numbers if step.joint == "=" else f"{step.joint} {step.numbers}"),
            escape(step.result),
            escape("; ".join(text for text in (step.source, step.note) if text)),
        ]
        for step in working.steps
    ]
    return "\n".join(
        map(
            _line,
            [["step", "formula", "numbers", "result", "source"], ["---", "---", "---", "---:", "---"], *rows],
        )
    )
