"""Reads what a step of working says: evaluates its formula and its numbers as a reader would.

∥ binds closer than + and less close than · and /; a letter behind a number multiplies it.
"""

from __future__ import annotations

import math
import re
from collections.abc import Mapping

_PREFIXES = {"T": 12, "G": 9, "M": 6, "k": 3, "": 0, "m": -3, "µ": -6, "n": -9, "p": -12, "f": -15, "a": -18,
             "z": -21, "y": -24}  # fmt: skip
_VALUE = re.compile(
    r"(\d+(?:\.\d+)?(?:e[+-]?\d+)?)(?: ?([TGMkmµnpfazy]?)(A/V²|V/V|Ω|Hz|1/V|/V|V|A|S|F|W|m|s)(?![\w'(]|²\w))?"
)
_NAME = re.compile(r"[A-Zφγλτπkgr][A-Za-z0-9_.]*'?(?:\([A-Za-z0-9_.@]+\))?|Στ")
_MARKS = "+-∥·/()√²½∞|"
_TOKEN = re.compile(rf"\s*(?:({_VALUE.pattern})|({_NAME.pattern})|([{re.escape(_MARKS)}]))")


class UnreadableError(Exception):
    """A text that is no expression."""


def definitions(text: str) -> tuple[str, dict[str, str]]:
    """The expression of a text, empty if there is none, and its definitions.

    They stand in brackets behind it, ``A·Ri [Ri = R1∥R2]``, or alone: ``k = 5 mA/V², R = 1 kΩ``.
    """
    expression, bracket, behind = text.partition(" [")
    if bracket:
        inside, closing, rest = behind.rpartition("]")
        if not closing or rest:
            raise UnreadableError(text)
        return expression, _defined(inside)
    return ("", _defined(text)) if " = " in text else (text, {})


def _defined(text: str) -> dict[str, str]:
    found = {}
    for piece in _pieces(text):
        name, equals, value = piece.partition(" = ")
        if not equals:
            raise UnreadableError(text)
        found[name.strip()] = value
    return found


def _pieces(text: str) -> list[str]:
    """Parts of a text between commas outside of brackets."""
    pieces, depth = [""], 0
    for character in text:
        depth += (character == "(") - (character == ")")
        if character == "," and depth == 0:
            pieces.append("")
        else:
            pieces[-1] += character
    return [piece.strip() for piece in pieces]


def evaluate(text: str, known: Mapping[str, float]) -> float:
    """Value of an expression. Raises UnreadableError."""
    reader = _Reader(text, known)
    value = reader.sum()
    if reader.rest:
        raise UnreadableError(f"{text}: stops before {reader.rest[0]}")
    return value


class _Reader:
    """Recursive descent: sum, parallel, product, factor."""

    def __init__(self, text: str, known: Mapping[str, float]) -> None:
        self.text, self.known = text, known
        self.rest = _tokens(text)

    def take(self, *marks: str) -> str | None:
        if self.rest and self.rest[0] in marks:
            return str(self.rest.pop(0))
        return None

    def sum(self) -> float:
        value = -self.parallel() if self.take("-") else self.parallel()
        while mark := self.take("+", "-"):
            value += self.parallel() * (1.0 if mark == "+" else -1.0)
        return value

    def parallel(self) -> float:
        branches = [self.product()]
        while self.take("∥"):
            branches.append(self.product())
        if len(branches) == 1:
            return branches[0]
        conductance = sum(1.0 / branch if branch > 0.0 else math.inf for branch in branches)
        return 1.0 / conductance if conductance > 0.0 else math.inf

    def product(self) -> float:
        value = self.factor()
        while self.rest:
            if self.take("·"):
                value *= self.factor()
            elif self.take("/"):
                below = self.factor()
                value = value / below if below > 0.0 or below < 0.0 else math.copysign(math.inf, value)
            elif self.rest[0] in ("(", "√", "½") or isinstance(self.rest[0], float | tuple):
                value *= self.factor()  # 2√φ, k(VOV - VDS), ½VDS²
            else:
                break
        return value

    def factor(self) -> float:
        value = self.operand()
        while self.take("²"):
            value *= value
        return value

    def operand(self) -> float:
        if not self.rest:
            raise UnreadableError(f"{self.text}: ends too early")
        first = self.rest.pop(0)
        if isinstance(first, float):
            return first
        if isinstance(first, tuple):
            if first[0] not in self.known:
                raise UnreadableError(f"{self.text}: unknown symbol {first[0]}")
            return self.known[first[0]]
        if first in ("(", "|"):
            value = self.sum()
            if not self.take(")" if first == "(" else "|"):
                raise UnreadableError(f"{self.text}: bracket left open")
            return value if first == "(" else abs(value)
        if first == "√":
            return math.sqrt(self.operand())
        if first in ("½", "∞"):
            return 0.5 if first == "½" else math.inf
        raise UnreadableError(f"{self.text}: {first} where a value should be")


def _tokens(text: str) -> list[float | tuple[str] | str]:
    """Values as floats, names as 1-tuples, marks as they are."""
    found: list[float | tuple[str] | str] = []
    place = 0
    while text[place:].strip():
        match = _TOKEN.match(text, place)
        if match is None:
            raise UnreadableError(f"{text}: nothing known at {text[place:]!r}")
        whole, digits, prefix, _, name, mark = match.groups()
        if whole is not None:
            found.append(float(f"{digits}") * 10.0 ** _PREFIXES[prefix or ""])
        elif name is not None:
            found.append((name,))
        else:
            found.append(str(mark))
        place = match.end()
    return found
