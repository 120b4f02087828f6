"""A card taken apart once, for all the rules that look at it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import takewhile

from deckgen.source.model import Card

NODES = {"r": 2, "c": 2, "l": 2, "v": 2, "i": 2, "d": 2, "b": 2, "f": 2, "h": 2, "e": 4, "g": 4, "q": 3,
         "j": 3, "z": 3, "s": 4, "w": 2, "t": 4, "o": 4, "u": 3, "m": 4}  # fmt: skip
"""How many nodes an element has, by its letter; a subcircuit has as many as it has."""

_EXPRESSIONS = frozenset("poly value table laplace freq vol cur".split())


@dataclass(frozen=True, slots=True)
class Taken:
    """A card: ``head`` in lower case, ``words`` as written, and what they are.

    ``plain`` are the words before the first ``name=value``, without parentheses; ``pairs`` all
    ``name=value``, names in lower case; ``nodes`` those of an element.
    """

    card: Card
    head: str
    words: tuple[str, ...]
    plain: tuple[str, ...]
    pairs: tuple[tuple[str, str], ...]
    nodes: tuple[str, ...]


def taken(card: Card) -> Taken:
    """Take a card apart."""
    words = _with_node_names(card.words) if "(" in card.words else card.words
    plain: list[str] = []
    pairs: list[tuple[str, str]] = []
    for word in words:
        if "=" in word:
            name, _, value = word.partition("=")
            pairs.append((name.removeprefix("params:").lower(), value))
        elif not pairs and word != "(" and word != ")":
            plain.append(word)
    if len(plain) > 1 and plain[-1].lower() == "params:":
        plain.pop()
    head = words[0].lower()
    return Taken(card, head, words, tuple(plain), tuple(pairs), _nodes(head[0], plain))


def _with_node_names(words: tuple[str, ...]) -> tuple[str, ...]:
    """Words in which a node like ``Net-(M1-D)``, as schematic editors name them, is one."""
    result: list[str] = []
    rest = iter(words)
    for word in rest:
        if word == "(" and result and result[-1].endswith("-") and "=" not in result[-1]:
            inside = [*takewhile(lambda part: part != ")", rest)]
            result[-1] += f"({' '.join(inside)})"
        else:
            result.append(word)
    return tuple(result)


def _nodes(letter: str, plain: Sequence[str]) -> tuple[str, ...]:
    if letter == "x":
        return tuple(plain[1:-1])
    count = NODES.get(letter, 0)
    if letter in "eg" and len(plain) > 3 and plain[3].lower() in _EXPRESSIONS:
        count = 2
    return tuple(plain[1 : count + 1])
