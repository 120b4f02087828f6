"""Numbers of element and model cards: suffixes that mislead, decimal commas, blanks before a unit."""

from __future__ import annotations

import re
from collections.abc import Iterator

from deckgen.findings.catalogue import SOURCE_FUNCTIONS, SOURCE_NUMBERS
from deckgen.findings.gather import Gatherer
from deckgen.findings.numbers import Place, is_fine, is_number, is_unit, trap_in
from deckgen.findings.scopes import find_model
from deckgen.findings.taken import Taken
from deckgen.source.deck import without_comment
from deckgen.units import shown

_FIRST_VALUE = {"r": 3, "c": 3, "l": 3, "v": 3, "i": 3, "e": 5, "g": 5, "f": 4, "h": 4, "m": 6}
"""Index of the first word of a card that can be a value."""

_PLACES = {"r": Place.RESISTANCE, "c": Place.CAPACITANCE, "v": Place.CURRENT, "i": Place.CURRENT}
_WITH_VALUES = frozenset({".model", ".options", ".option", ".opt"})
_PARAMETERS = frozenset({".param", ".params", ".subckt"})
_COMMA = re.compile(r"(?:([^\s=()]+)=)?([+-]?\d+),(\d+[a-zA-Zµμ]*)")
_UNIT_STARTS = frozenset("oOvVaAhHsSfFwWmMkKuUnNpPtTgGrRµμΩ\u2126")
_VECTORS = frozenset({"ic", "tc"})


def number_findings(card: Taken, gathered: Gatherer) -> bool:
    """Note numbers that mislead. True where the card's words can't be judged further."""
    if any("," in line.text for line in card.card.lines) and _decimal_comma(card, gathered):
        return True
    for word, place in _values(card):
        if is_fine(word):
            continue
        trap = trap_in(word, place)
        if trap is not None:
            gathered.add(trap.slug, card, word=word, **dict(trap.parts))
    return card.head[0] in _FIRST_VALUE and _unit_apart(card, gathered)


def _values(card: Taken) -> Iterator[tuple[str, Place]]:
    """Words of a card that are values, each with what it is a value of."""
    head = card.head
    letter = head[0]
    if head in _PARAMETERS or letter == "x":
        mixed = any(character.islower() for word in card.words for character in word)
        place = Place.EXPRESSION if mixed else Place.EXPRESSION_IN_CAPITALS
        yield from ((value, place) for _, value in card.pairs)
        return
    place = _PLACES.get(letter, Place.OTHER)
    if letter != ".":
        words = card.plain
        start = _FIRST_VALUE.get(letter, len(words))
        for index in range(start, len(words)):
            yield words[index], Place.FREQUENCY if _is_frequency(words, index) else place
    elif head not in _WITH_VALUES:
        return
    elif head == ".model":
        yield from ((word, Place.OTHER) for word in card.words[3:] if "=" not in word)
    for name, value in card.pairs:
        yield value, _place_of(name, letter, place)


def _place_of(name: str, letter: str, place: Place) -> Place:
    if letter == ".":
        return Place.RESISTANCE if name in ("r", "res") else Place.OTHER
    return place if name in (letter, "resistance", "cap", "capacitance", "dc", "acmag") else Place.OTHER


def _is_frequency(words: tuple[str, ...], index: int) -> bool:
    """Whether a word is the third number of a sine."""
    return index > 5 and words[index - 3].lower() in ("sin", "sine")


def _decimal_comma(card: Taken, gathered: Gatherer) -> bool:
    letter = card.head[0]
    if letter in "vi" and any(word.lower() in SOURCE_FUNCTIONS for word in card.words):
        return False
    start = _FIRST_VALUE.get(letter, 1)
    found = False
    for number, line in enumerate(card.card.lines):
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


def _effect(card: Taken, before: str, after: str, *, after_ac: bool) -> str:
    if card.head[0] in "rcl":
        return f"reads {after}"
    if card.head == ".model":
        return f"reads {before}"
    return f"reads the magnitude {before} and the phase {after}" if after_ac else "stops there"


def _unit_apart(card: Taken, gathered: Gatherer) -> bool:
    """A suffix or unit that a blank parts from its number: ngspice stops there."""
    letter = card.head[0]
    words = card.words
    first = _FIRST_VALUE[letter]
    for index in range(first, len(words)):
        word, before = words[index], words[index - 1]
        if (index == first and "=" not in before) or word[0] not in _UNIT_STARTS or not is_unit(word):
            continue
        number = before.rpartition("=")[2]
        keyword = letter in "vi" and word.lower() in SOURCE_NUMBERS
        if keyword or not is_number(number) or find_model(gathered.chain, word.lower())[0]:
            continue
        parts = {"written": shown(f"{number} {word}"), "write": number + word}
        gathered.add("unit-apart", card, word=word, **parts)
        return True
    return False
