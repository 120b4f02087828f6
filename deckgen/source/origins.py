"""Where the elements of a flattened deck were written: ``m.xa.m1`` is M1 of the subcircuit that XA calls.

Of a subcircuit that is defined inside another one, ngspice 39 writes the letter once more: ``m.xa.m.xb.m1``.
Sources and parts with expressions become several elements, called by a letter before the name: ``be1``.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, field

from deckgen.circuit.model import Origin
from deckgen.source.model import Card

_DEEPEST = 20
_MOST_PLACES = 1_000_000

Places = Mapping[str, tuple[Card, ...]]
"""Cards by the name of their element behind those of its subcircuits, ``xa.m1``; several where conditions
choose between them."""


@dataclass(slots=True)
class _Scope:
    """The elements and subcircuits that one subcircuit, or the deck itself, defines."""

    outer: _Scope | None = None
    elements: dict[str, list[Card]] = field(default_factory=dict)
    inner: dict[str, _Scope] = field(default_factory=dict)

    def find(self, name: str) -> _Scope | None:
        """The subcircuit of that name, as seen from here."""
        scope: _Scope | None = self
        while scope is not None:
            if name in scope.inner:
                return scope.inner[name]
            scope = scope.outer
        return None


def places_of(cards: Iterable[Card]) -> Places:
    """The cards of all elements of a deck, in all subcircuits that are called."""
    found: dict[str, tuple[Card, ...]] = {}
    _place(_scopes(cards), (), found)
    return found


def _scopes(cards: Iterable[Card]) -> _Scope:
    deck = scope = _Scope()
    for card in cards:
        head = card.head
        if head == ".subckt":
            name = card.words[1].lower() if len(card.words) > 1 else ""
            inner = _Scope(outer=scope)
            scope.inner.setdefault(name, inner)  # of two with one name ngspice takes the first
            scope = inner
        elif head == ".ends":
            scope = scope.outer or deck
        elif head[0] != ".":
            scope.elements.setdefault(head, []).append(card)
    return deck


def _place(scope: _Scope, path: tuple[str, ...], found: dict[str, tuple[Card, ...]]) -> None:
    if len(path) > _DEEPEST or len(found) > _MOST_PLACES:
        return
    for name, cards in scope.elements.items():
        found[".".join((*path, name))] = tuple(cards)
        if name[0] == "x":
            called = (scope.find(_called(card)) for card in cards)
            for inner in {id(inner): inner for inner in called if inner is not None}.values():
                _place(inner, (*path, name), found)


def _called(card: Card) -> str:
    """Name of the subcircuit that an X card calls: the last word before its parameters."""
    plain: list[str] = []
    for word in card.words[1:]:
        if "=" in word or word.lower() == "params:":
            break
        if word not in ("(", ")"):
            plain.append(word.lower())
    return plain[-1] if plain else ""


def origin_finder(places: Places) -> Callable[[Sequence[str]], Origin | None]:
    """What tells from the words of a flat card where it was written.

    Of several cards it is the one that has most words in common with the flat one.
    """

    def find(words: Sequence[str]) -> Origin | None:
        *scopes, name = _plain_path(words[0])
        cards = places.get(".".join((*scopes, name))) or places.get(".".join((*scopes, name[1:])))
        if not cards:
            return None
        if len(cards) == 1:
            return cards[0].origin
        return max(cards, key=lambda card: _alike(card, words)).origin

    return find


def _plain_path(flat: str) -> list[str]:
    """The parts of a flat name without the letters of the element's kind in front of them."""
    kind, *parts = flat.split(".")
    if len(kind) == 1 and len(parts) > 1:
        return [part for part in parts if part != kind]
    return [flat]


def _alike(card: Card, words: Sequence[str]) -> int:
    written = {word.lower() for word in card.words}
    return sum(word in written for word in words)
