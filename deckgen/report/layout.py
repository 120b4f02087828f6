"""Columns of text laid side by side, folded where there is no room, never cut off.

rich measures how wide characters are and knows the codes for styles; its own tables fold what must stay
whole and take longer than a simulation.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from functools import cache
from itertools import groupby
from operator import attrgetter

from deckgen.report.inert import inert

_GUTTER = 2
_NARROWEST_COLUMN = 6

# A number and its unit stay on one line: the blank between them is this private-use character until the end.
# Text from outside can't bring one along: `inert` writes them out.
_TIE = "\ue000"
_TIED = re.compile(r"(?<=\d) (?=[A-Za-zΩµ°%√])|(?<=^=) | (?=…)")


@dataclass(frozen=True, slots=True)
class Span:
    """A piece of one line in one style."""

    text: str
    style: str = ""


@dataclass(frozen=True, slots=True)
class Paragraph:
    """Text that may be folded; ``indent`` counts from its column's left edge."""

    spans: tuple[Span, ...]
    indent: int = 0

    @property
    def width(self) -> int:
        """Columns it takes on one line."""
        return self.indent + sum(text_width(span.text) for span in self.spans)


Cell = tuple[Paragraph, ...]
Line = tuple[Span, ...]


def paragraph(text: str, style: str = "", *, indent: int = 0) -> Paragraph:
    """Make a paragraph of a text from outside: active characters written out, numbers tied to units."""
    return Paragraph((span(text, style),), indent)


def span(text: str, style: str = "") -> Span:
    """Make a span of a text from outside: active characters written out, numbers tied to units."""
    return Span(_TIED.sub(_TIE, inert(text)), style)


def text_width(text: str) -> int:
    """Columns that a terminal gives to a text."""
    if text.isascii():
        return len(text)
    from rich.cells import cell_len

    return cell_len(text)


def columns(rows: Sequence[Sequence[Cell]], *, width: int, whole: frozenset[int] = frozenset()) -> list[Line]:
    """Lay rows of cells out; columns numbered in ``whole`` keep their width, the widest others give way."""
    widths = _widths(rows, width=width, whole=whole)
    lines = []
    for row in rows:
        folded = [_folded_cell(cell, room) for cell, room in zip(row, widths, strict=True)]
        for number in range(max(map(len, folded))):
            pieces = [cell[number] if number < len(cell) else () for cell in folded]
            lines.append(_trimmed(_joined(pieces, widths)))
    return lines


def painted(line: Line, *, colour: bool) -> str:
    """Write a line, with codes for its styles where ``colour`` says so."""
    runs = groupby(line, key=attrgetter("style"))
    texts = (("".join(span.text for span in run), style) for style, run in runs)
    return "".join(_paint(text, style) if colour else text for text, style in texts).replace(_TIE, " ")


def _widths(rows: Sequence[Sequence[Cell]], *, width: int, whole: frozenset[int]) -> list[int]:
    """Natural widths, the widest columns that may fold made narrower until all fit."""
    widths = [
        max((part.width for cell in column for part in cell), default=0) for column in zip(*rows, strict=True)
    ]
    foldable = [index for index in range(len(widths)) if index not in whole]
    excess = sum(widths) + _GUTTER * (len(widths) - 1) - width
    while excess > 0 and foldable:
        widest = max(foldable, key=widths.__getitem__)
        if widths[widest] <= _NARROWEST_COLUMN:
            break
        widths[widest] -= 1
        excess -= 1
    return widths


def _joined(pieces: Sequence[Line], widths: Sequence[int]) -> Line:
    line: list[Span] = []
    for piece, room in zip(pieces, widths, strict=True):
        line += piece
        line.append(Span(" " * (room - sum(text_width(span.text) for span in piece) + _GUTTER)))
    return tuple(line)


def _trimmed(line: Line) -> Line:
    """Drop blanks from the end."""
    spans = list(line)
    while spans:
        last = spans.pop()
        text = last.text.rstrip(" ")
        if text:
            return (*spans, Span(text, last.style))
    return ()


def _folded_cell(cell: Cell, width: int) -> list[Line]:
    return [line for part in cell for line in _folded(part, width)]


def _folded(part: Paragraph, width: int) -> Iterator[Line]:
    """Fold a paragraph at blanks, a word that is too long anywhere."""
    margin = Span(" " * part.indent)
    if part.width <= width:
        yield (margin, *part.spans)
        return
    room = max(width - part.indent, 1)
    line: list[Span] = []
    used = 0
    for word in _words(part.spans, room):
        size = text_width(word.text)
        if used + text_width(word.text.rstrip(" ")) > room and line:
            yield (margin, *_trimmed(tuple(line)))
            line, used = [], 0
        line.append(word)
        used += size
    yield (margin, *_trimmed(tuple(line)))


def _words(spans: Sequence[Span], room: int) -> Iterator[Span]:
    """Split into words with the blanks after them, none of them wider than the room."""
    for whole in spans:
        for word in re.findall(r" +|[^ ]+ *", whole.text):
            start = used = 0
            for index, character in enumerate(word):
                size = 0 if character == " " else text_width(character)
                if used + size > room:
                    yield Span(word[start:index], whole.style)
                    start, used = index, 0
                used += size
            yield Span(word[start:], whole.style)


def _paint(text: str, style: str) -> str:
    if not style or not text:
        return text
    before, after = _codes(style)
    return f"{before}{text}{after}"


@cache
def _codes(style: str) -> tuple[str, str]:
    """Codes that switch a style on and off, in the sixteen colours of the terminal's own palette."""
    from rich.color import ColorSystem
    from rich.style import Style

    before, _, after = Style.parse(style).render("x", color_system=ColorSystem.STANDARD).partition("x")
    return before, after
