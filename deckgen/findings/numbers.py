"""Numbers in a deck that ngspice reads otherwise than they look.

ngspice takes a number, a scale suffix, and whatever follows as a unit that it ignores.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from enum import Enum, auto

from deckgen.circuit.numbers import spice_number
from deckgen.units import shown

_FINE = re.compile(
    r"[+-]?(?:\d+(?:\.\d*)?|\.\d+)(?:e[+-]?\d+)?(?:meg|mil|[tgkunpµ])?(?:ohms?|[vhΩ]|hz|s)?",
    re.IGNORECASE | re.ASCII,  # without ASCII the Greek letter would pass for the micro sign
)
"""Most numbers in most decks: nothing to find."""

_NUMBER = re.compile(
    r"(?P<digits>[+-]?(?:\d+(?:\.\d*)?|\.\d+)(?:[ed][+-]?\d+)?)(?P<letters>[a-zµ]*)(?P<rest>\S*)",
    re.IGNORECASE | re.ASCII,
)
_PLAIN_WORD = re.compile(r"[+-]?\.?\d[\w.%Ωμµ\u2126]*")
_CODES = {"t", "g", "meg", "k", "r", "v", "m", "u", "µ", "n", "p", "f"}
_OHMS = ("Ω", "\u2126")
_STARTS = frozenset("0123456789.+-")
_MU = "\u03bc"
_UNITS = frozenset("ohm ohms v volt volts a amp amps h hz s sec f farad w m meg k u n p t g r".split())
_SYMBOLS = frozenset({*_OHMS, _MU, "µ"})


class Place(Enum):
    """Where a number stands: what its suffix may mean there."""

    RESISTANCE = auto()
    CAPACITANCE = auto()
    CURRENT = auto()
    FREQUENCY = auto()
    EXPRESSION = auto()
    EXPRESSION_IN_CAPITALS = auto()
    OTHER = auto()


# Where nothing is written in lower case, a capital M says nothing about what was meant.
_EXPRESSIONS = frozenset({Place.EXPRESSION, Place.EXPRESSION_IN_CAPITALS})
_MEGA_MAKES_SENSE = frozenset({Place.RESISTANCE, Place.FREQUENCY, Place.EXPRESSION})


@dataclass(frozen=True, slots=True)
class Trap:
    """A number that looks like another: the slug, and the parts of its text."""

    slug: str
    parts: tuple[tuple[str, str], ...]


def is_fine(text: str) -> bool:
    """Whether a word can't be a misleading number: a plain one, or none at all."""
    return not text or text[0] not in _STARTS or _FINE.fullmatch(text) is not None


def trap_in(text: str, place: Place) -> Trap | None:
    """What is misleading about a number, or None. What is no number, or an expression, is not judged."""
    match = _NUMBER.fullmatch(text)
    if match is None:
        return None
    digits, letters, rest = match["digits"], match["letters"], match["rest"]
    if place in _EXPRESSIONS and not _PLAIN_WORD.fullmatch(text):
        return None
    value = value_of(digits + letters)
    if value is None:
        return None
    reading = f"{value:g}"
    if rest.startswith(_MU) and not letters:
        return _trap("greek-mu", text, reading, write=f"{digits}u")
    if rest in _OHMS:
        rest = ""
    if rest:
        return _ignored(text, place, digits, letters, rest, reading)
    return _suffix(text, place, digits, letters, reading)


def _ignored(text: str, place: Place, digits: str, letters: str, rest: str, reading: str) -> Trap | None:
    """Something stands behind number and suffix that is no unit."""
    letters = letters or ("Ω" if rest[0] in _OHMS else "")
    tail = rest.lstrip("".join(_OHMS))
    code = tail.isdecimal() and (letters in _OHMS or letters.lower() in _CODES)
    if place in _EXPRESSIONS:
        # Here ngspice has another reader, which knows hexadecimal numbers and stops at the rest.
        hexadecimal = text.lower().startswith("0x")
        return None if hexadecimal else _trap("number-in-expression", text, reading)
    if not code:
        return _trap("suffix-unknown", text, reading, rest=shown(letters + rest))
    if not tail.strip("0"):
        return None  # 1k0 is 1k
    suffix = "" if letters in _OHMS or letters in "rRvV" else letters
    whole = f"{digits}.{tail}" if digits.lstrip("+-").isdecimal() else digits
    write = f"{whole}Meg or {whole}m" if suffix == "M" else f"{whole}{suffix}"
    return _trap("digits-after-suffix", text, reading, write=write)


def _suffix(text: str, place: Place, digits: str, letters: str, reading: str) -> Trap | None:
    """A suffix that is known, or letters that ngspice takes for a unit."""
    folded = letters.lower()
    if folded.startswith(("meg", "mil")) or not folded:
        return None
    if letters[0] == "M" and place in _MEGA_MAKES_SENSE:
        return _trap("bare-m", text, reading, mega=f"{digits}Meg", milli=f"{digits}m")
    if place is Place.CAPACITANCE and (letters == "F" or folded.startswith("farad")):
        return _trap("farad-is-femto", text, reading, farad=digits, femto=f"{digits}f")
    ampere = place is Place.CURRENT or folded.startswith("amp")
    if folded[0] == "x" or (folded[0] == "a" and not ampere):
        return _trap("suffix-unknown", text, reading, rest=shown(letters))
    return None


def _trap(slug: str, text: str, reading: str, **parts: str) -> Trap:
    return Trap(slug, (("written", shown(text)), ("reading", reading), *parts.items()))


def is_number(text: str) -> bool:
    """Whether ngspice takes a word for a number."""
    return _NUMBER.fullmatch(text) is not None


def value_of(text: str | None) -> float | None:
    """Value of a plain number; None for an expression, or where there is none."""
    if text is None:
        return None
    try:
        return spice_number(text)
    except ValueError:
        return None


def is_unit(text: str) -> bool:
    """Whether a word looks like the suffix or unit of the number before it."""
    folded = text.lower()
    known = _UNITS | _SYMBOLS
    return folded in known or any(
        folded.startswith(prefix) and folded[len(prefix) :] in known
        for prefix in ("meg", "m", "k", "u", "µ", _MU, "n", "p", "f", "t", "g")
    )
