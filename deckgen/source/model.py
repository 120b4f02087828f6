"""What reading a deck gives: its lines, cards, notes, what was left out, and what is wrong with it."""

from __future__ import annotations

from dataclasses import dataclass, field

from deckgen.circuit.model import Origin


@dataclass(frozen=True, slots=True)
class Problem:
    """Something found while reading: a slug of the table of findings, its place, parts of its text."""

    slug: str
    origin: Origin
    parts: tuple[tuple[str, str], ...] = ()


@dataclass(frozen=True, slots=True)
class Line:
    """One physical line as it was written, without its line end."""

    text: str
    origin: Origin


@dataclass(frozen=True, slots=True)
class Card:
    """One logical card: a line with its continuation lines, comments taken off.

    ``words`` keep the case as written; ``head`` is the first of them in lower case.
    """

    words: tuple[str, ...]
    lines: tuple[Line, ...]

    @property
    def head(self) -> str:
        """First word, lower case."""
        return self.words[0].lower()

    @property
    def origin(self) -> Origin:
        """Where the card begins."""
        return self.lines[0].origin


@dataclass(frozen=True, slots=True)
class Note:
    """``* deckgen: keyword rest``."""

    keyword: str
    rest: str
    origin: Origin


@dataclass(frozen=True, slots=True)
class Source:
    """A deck as far as it counts: vetted lines in order, includes put in place.

    ``left_out`` are analyses, control blocks and other cards that are not carried over.
    """

    file: str
    title: Line
    lines: tuple[Line, ...]
    cards: tuple[Card, ...]
    notes: tuple[Note, ...]
    left_out: tuple[Card, ...]
    problems: tuple[Problem, ...]
    files: tuple[str, ...]
    own_lines: tuple[Line, ...] = ()
    """The deck file's own lines behind the title, all of them, as they were written."""

    def text(self, title: str) -> str:
        """The deck to run: a title line of ours, the user's lines verbatim, no ``.end``."""
        return "\n".join([title, *(line.text for line in self.lines)]) + "\n"


@dataclass(slots=True)
class Gathering:
    """What has been read so far; becomes a frozen Source."""

    lines: list[Line] = field(default_factory=list)
    notes: list[Note] = field(default_factory=list)
    left_out: list[Card] = field(default_factory=list)
    problems: list[Problem] = field(default_factory=list)
    files: list[str] = field(default_factory=list)
    own_lines: list[Line] = field(default_factory=list)

    def problem(self, slug: str, origin: Origin, **parts: str) -> None:
        """Note something that is wrong."""
        self.problems.append(Problem(slug, origin, tuple(parts.items())))
