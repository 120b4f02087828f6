"""What a report consists of before it is laid out for a terminal or as Markdown."""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum


class Tone(StrEnum):
    """How much a row or note wants to be seen."""

    PLAIN = "plain"
    GOOD = "good"
    DOUBT = "doubt"
    FAIL = "fail"
    FAINT = "faint"


@dataclass(frozen=True, slots=True)
class Column:
    """A column; ``number`` ones are aligned on point and unit, ``roomy`` ones left out where it is narrow."""

    heading: str
    number: bool = False
    roomy: bool = False


@dataclass(frozen=True, slots=True)
class TableRow:
    """Cells, one a column."""

    cells: tuple[str, ...]
    tone: Tone = Tone.PLAIN


@dataclass(frozen=True, slots=True)
class Table:
    """A table; rows that fail or are doubtful get a mark."""

    columns: tuple[Column, ...]
    rows: tuple[TableRow, ...]

    @property
    def empty(self) -> bool:
        """Whether there is nothing to show."""
        return not self.rows


@dataclass(frozen=True, slots=True)
class Note:
    """A labelled sentence; ``narrow`` ones say what a roomy column says and give way to it."""

    label: str
    text: str
    tone: Tone = Tone.PLAIN
    narrow: bool = False


@dataclass(frozen=True, slots=True)
class Notes:
    """Notes under one another, texts aligned."""

    items: tuple[Note, ...]

    @property
    def empty(self) -> bool:
        """Whether there is nothing to show."""
        return not self.items


@dataclass(frozen=True, slots=True)
class Heading:
    """A stage's head: name, how it ended, and lines of facts beneath."""

    name: str
    state: str
    tone: Tone
    title: str
    facts: tuple[tuple[str, ...], ...]

    @property
    def empty(self) -> bool:
        """Whether there is nothing to show."""
        return not self.name


@dataclass(frozen=True, slots=True)
class Quote:
    """Somebody else's words, line by line."""

    label: str
    lines: tuple[str, ...]

    @property
    def empty(self) -> bool:
        """Whether there is nothing to show."""
        return not self.lines


@dataclass(frozen=True, slots=True)
class WorkingStep:
    """One line of working, its result written out; ``strong`` where it gives a hand value.

    ``joint`` joins formula and numbers: ``=``, or ``with`` where the numbers are a list of values.
    """

    symbol: str
    formula: str
    joint: str
    numbers: str
    result: str
    source: str
    note: str
    strong: bool


@dataclass(frozen=True, slots=True)
class Working:
    """The steps of a hand analysis."""

    steps: tuple[WorkingStep, ...]

    @property
    def empty(self) -> bool:
        """Whether there is nothing to show."""
        return not self.steps


Block = Heading | Table | Notes | Quote | Working
