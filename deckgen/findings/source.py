"""Findings on the lines and files of a deck: what reading it has found, and what was left out of it."""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence

from deckgen.comparison import Finding
from deckgen.findings.catalogue import KINDS
from deckgen.findings.gather import short
from deckgen.findings.numbers import is_number
from deckgen.findings.table import finding, placed, summed_up
from deckgen.findings.taken import Taken, taken
from deckgen.source.deck import ANALYSES, CARRIED_OVER, OPTIONS, join_cards
from deckgen.source.model import Card, Problem, Source
from deckgen.stage.notes import table_of_notes
from deckgen.units import shown

_ONCE = frozenset({"control-block", "command-comment"})
"""Problems that are told once, however many there are of them."""

_ALTERS = re.compile(r"\s*(alter\w*|optran|option|set\s+temp)\b", re.IGNORECASE)
_PLACES_TOLD = 3


def source_findings(source: Source) -> tuple[Finding, ...]:
    """Findings on what reading a deck has met, each with file and line."""
    found = [
        *_swallowed(source),
        *(_found(problem) for problem in source.problems if problem.slug not in _ONCE),
        *_told_once(source.problems),
        *_altering_blocks(source),
        *_analyses(source.left_out),
        *_unknown_notes(source),
    ]
    return summed_up(found)


def _found(problem: Problem, **more: str) -> Finding:
    parts = {name: short(text) for name, text in problem.parts}
    return placed(finding(problem.slug, **parts, **more), problem.origin)


def _told_once(problems: Sequence[Problem]) -> Iterator[Finding]:
    for slug in sorted(_ONCE):
        alike = [problem for problem in problems if problem.slug == slug]
        if alike:
            yield _found(alike[0], more=_elsewhere([problem.origin.line for problem in alike[1:]]))


def _elsewhere(lines: Sequence[int]) -> str:
    """``, and others on lines 7, 9 and 3 more``."""
    if not lines:
        return ""
    told = ", ".join(str(line) for line in lines[:_PLACES_TOLD])
    rest = len(lines) - _PLACES_TOLD
    return f", and others on line {told}" + (f" and {rest} more" if rest > 0 else "")


def _altering_blocks(source: Source) -> Iterator[Finding]:
    """Control blocks whose commands would change the circuit."""
    for card in source.left_out:
        if card.head.startswith(".control"):
            for line in card.lines:
                match = _ALTERS.match(line.text)
                if match is not None:
                    command = short(" ".join(match[1].lower().split()))
                    yield placed(finding("control-block-alters", command=command), line.origin)
                    break


def _analyses(left_out: Sequence[Card]) -> Iterator[Finding]:
    """One note for each kind of analysis card."""
    kinds: dict[str, list[Card]] = {}
    for card in left_out:
        if card.head in ANALYSES:
            kinds.setdefault(card.head, []).append(card)
    for head, cards in kinds.items():
        more = _elsewhere([card.origin.line for card in cards[1:]])
        yield placed(finding("analysis-left-out", card=head, more=more), cards[0].origin)


def _unknown_notes(source: Source) -> Iterator[Finding]:
    for origin, keyword, close in table_of_notes(source.notes).unknown:
        hint = "" if close is None else f" (did you mean {close}?)"
        yield placed(finding("note-unknown", keyword=short(keyword), hint=hint), origin)


def _swallowed(source: Source) -> Iterator[Finding]:
    """A title line that is a card: nobody names a circuit so."""
    cards = list(join_cards([source.title]))
    if not cards or cards[0].head == ".title":  # as schematic editors write it
        return
    if _is_dot_card(cards[0]) or _is_element(taken(cards[0]), source):
        written = shown(source.title.text.strip())
        yield placed(finding("title-swallows-card", card=written), source.title.origin)


def _is_dot_card(card: Card) -> bool:
    return card.head in CARRIED_OVER | OPTIONS


def _is_element(card: Taken, source: Source) -> bool:
    """Whether a title reads as an element and is connected to a node of the circuit."""
    letter = card.head[0]
    if letter not in "rclviegfhdqjzmx" or len(card.words) < 4 or not _complete(card, source):
        return False
    nodes = {node.lower() for node in card.nodes} - {"0", "gnd"}
    elements = (taken(other) for other in source.cards if not other.head.startswith("."))
    return any(node.lower() in nodes for other in elements for node in other.nodes)


def _complete(card: Taken, source: Source) -> bool:
    letter = card.head[0]
    words = [word.lower() for word in card.words]
    if letter in "rcl":
        return (is_number(words[3]) or words[3][0] == "{") and all("=" in word for word in words[4:])
    if letter in "vi":
        return is_number(words[3]) or words[3] in ("dc", "ac", "sin", "pulse")
    if letter in "egfh":
        return is_number(words[-1]) and len(words) == (6 if letter in "eg" else 5)
    defined = {".subckt"} if letter == "x" else {".model"} if letter in KINDS else set()
    names = {
        other.words[1].lower() for other in source.cards if other.head in defined and len(other.words) > 1
    }
    return any(word in names for word in words[3:])
