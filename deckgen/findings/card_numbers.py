"""Numbers of element and model cards: suffixes that mislead, decimal commas, blanks before a unit."""

from __future__ import annotations

import re
from collections.abc import Iterator

from deckgen.findings.catalogue import SOURCE_FUNCTIONS, SOURCE_NUMBERS
from deckgen.findings.gather import Gatherer
from deckgen.findings.numbers import Place, is_number, is_unit, trap_in
from deckgen.findings.scopes import find_model
from deckgen.source.deck import without_comment
from deckgen.source.model import Card
from deckgen.units import shown

_FIRST_VALUE = {"r": 3, "c": 3, "l": 3, "v": 3, "i": 3, "e": 5, "g": 5, "f": 4, "h": 4}
"""Index of the first word of a card that can be a value."""

_PLACES = {"r": Place.RESISTANCE, "c": Place.CAPACITANCE, "v": Place.CURRENT, "i": Place.CURRENT}
_PARAMETERS = frozenset({".param", ".params", ".subckt"})
_COMMA = re.compile(r"(?:([^\s=()]+)=)?([+-]?\d+),(\d+[a-zA-Zµμ]*)")
_VECTORS = frozenset({"ic", "tc"})


def number_findings(card: Card, gathered: Gatherer) -> bool:
    """Note numbers that mislead. True where the card's words can't be judged further."""
    if any("," in line.text for line in card.lines) and _decimal_comma(card, gathered):
        return True
    for word, place in _values(card):
        if word[:1].isdigit() or word[:1] in "+-.":
            trap = trap_in(word, place)
            if trap is not None:
                gathered.add(trap.slug, card, word=word, **dict(trap.parts))
    return _unit_apart(card, gathered)


def _values(card: Card) -> Iterator[tuple[str, Place]]:
    """Words of a card that are values, each with what it is a value of."""
    head = card.head
    words = card.words
    if head in (".model", ".options", ".option", ".opt"):
        start, place = (3 if head == ".model" else 1), Place.OTHER
    elif head in _PARAMETERS or head[0] == "x":
        mixed = any(letter.islower() for word in words for letter in word)
        place = Place.EXPRESSION if mixed else Place.EXPRESSION_IN_CAPITALS
        yield from ((word.partition("=")[2], place) for word in words if "=" in word)
        return
    elif head.startswith("."):
        return
    else:
        start, place = _FIRST_VALUE.get(head[0], len(words)), _PLACES.get(head[0], Place.OTHER)
    functions = head[0] in "vi"
    for index, word in enumerate(words):
        name, equals, value = word.partition("=")
        if equals:
            yield value, _place_of(name.lower(), head[0], place)
        elif index >= start:
            sine = functions and index >= 7 and word[0].isdigit() and _is_frequency(words, index)
            yield word, Place.FREQUENCY if sine else place


def _place_of(name: str, letter: str, place: Place) -> Place:
    if letter == ".":
        return Place.RESISTANCE if name in ("r", "res") else Place.OTHER
    return place if name in (letter, "resistance", "cap", "capacitance", "dc", "acmag") else Place.OTHER


def _is_frequency(words: tuple[str, ...], index: int) -> bool:
    """Whether a word is the third number of a sine."""
    before = [word.lower() for word in words[:index] if word not in ("(", ")")]
    return len(before) > 2 and before[-3] in ("sin", "sine")


def _decimal_comma(card: Card, gathered: Gatherer) -> bool:
    letter = card.head[0]
    if letter in "vi" and any(word.lower() in SOURCE_FUNCTIONS for word in card.words):
        return False
    start = _FIRST_VALUE.get(letter, 1)
    found = False
    for number, line in enumerate(card.lines):
        words = without_comment(line.text).split()
        for index, word in enumerate(words):
            match = _COMMA.fullmatch(word.strip("(),"))
            if match is None or (match[1] or "").lower() in _VECTORS:
                continue
            if match[1] is None and (letter == "." or (number == 0 and index < start)):
                continue  # two nodes, not two halves of a number
            before, after = match[2], match[3]
            after_ac = index > 0 and words[index - 1].lower() == "ac"
            gathered.add(
                "decimal-comma",
                card,
                word=word,
                written=shown(f"{before},{after}"),
                effect=_effect(card, before, after, after_ac=after_ac),
                write=f"{before}.{after}",
            )
            found = True
    return found


def _effect(card: Card, before: str, after: str, *, after_ac: bool) -> str:
    if card.head[0] in "rcl":
        return f"reads {after}"
    if card.head == ".model":
        return f"reads {before}"
    return f"reads the magnitude {before} and the phase {after}" if after_ac else "stops there"


def _unit_apart(card: Card, gathered: Gatherer) -> bool:
    """A suffix or unit that a blank parts from its number: ngspice stops there."""
    letter = card.head[0]
    if letter not in "rclvim":
        return False
    words = card.words
    for index in range(_FIRST_VALUE.get(letter, 5), len(words)):
        word, before = words[index], words[index - 1]
        follows = "=" in before or index > _FIRST_VALUE.get(letter, 5)
        if not follows or not is_unit(word) or not is_number(before.rpartition("=")[2]):
            continue
        if letter in "vi" and word.lower() in SOURCE_NUMBERS:
            continue
        if not find_model(gathered.chain, word.lower())[0]:
            number = before.rpartition("=")[2]
            gathered.add(
                "unit-apart", card, word=word, written=shown(f"{number} {word}"), write=number + word
            )
            return True
    return False
