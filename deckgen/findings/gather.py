"""Where the findings about the cards of one deck are gathered, each with its place."""

from __future__ import annotations

import re
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from itertools import islice

from deckgen.circuit.model import Origin, display
from deckgen.comparison import Finding
from deckgen.findings.scopes import Chain
from deckgen.findings.table import finding, placed
from deckgen.findings.taken import Taken
from deckgen.source.model import Card
from deckgen.stage.faults import nearest
from deckgen.units import shown

_MOST_SUGGESTIONS = 50  # comparing spellings is slow, and a deck with that many unknown names has one cause
_MOST_COMPARED = 1000
_MOST_NAMED = 5


@dataclass(slots=True)
class Gatherer:
    """The findings so far; ``chain`` is the scope that is looked at, ``told`` are nodes already named."""

    chain: Chain
    found: list[Finding] = field(default_factory=list)
    suggestions: int = 0
    told: set[str] = field(default_factory=set)

    def add(self, slug: str, card: Taken, *, word: str | None = None, **parts: str) -> None:
        """Note a finding about a card, at the line on which ``word`` of it stands."""
        origin = card.card.origin if word is None else _line_of(card.card, word)
        local = self.chain[-1].name is not None
        subject = None if local or card.head.startswith(".") else display(card.head)
        found = finding(slug, subject=subject, called=self.called(card), **parts)
        self.found.append(placed(found, origin))

    def called(self, card: Taken) -> str:
        """How a text names an element or model: with its subcircuit, where it is in one."""
        if card.head.startswith("."):
            name = " ".join([card.head, *map(short, card.words[1:2])]) if card.head == ".model" else card.head
        else:
            name = short(display(card.head))
        scope = self.chain[-1].name
        return name if scope is None else f"{name} of subcircuit {short(scope)}"

    def hint(self, word: str, known: Iterable[str]) -> str:
        """`` (did you mean …?)`` where some known name is close."""
        self.suggestions += 1
        if self.suggestions > _MOST_SUGGESTIONS:
            return ""
        close = nearest(word, islice(known, _MOST_COMPARED))
        return "" if close is None else f" (did you mean {short(close)}?)"


def short(text: str) -> str:
    """A name as a text shows it: bare where it is plain and short, else in quotes and cut."""
    plain = len(text) <= 40 and text.isascii() and text.isprintable() and " " not in text
    return text if plain and text else shown(text)


def several(names: Sequence[str]) -> str:
    """``a, b and c``, or the first few and how many more."""
    told = list(names[:_MOST_NAMED])
    if len(names) > _MOST_NAMED:
        told.append(f"{len(names) - _MOST_NAMED} more")
    return told[0] if len(told) == 1 else f"{', '.join(told[:-1])} and {told[-1]}"


def _line_of(card: Card, word: str) -> Origin:
    if len(card.lines) == 1:
        return card.origin
    whole = re.compile(rf"(?<!\w){re.escape(word)}(?!\w)", re.IGNORECASE)
    return next((line.origin for line in card.lines if whole.search(line.text)), card.origin)
