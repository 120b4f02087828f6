"""The cards of a deck, sorted by the subcircuit they stand in; what a name means there.

Names are local to their subcircuit and seen by those defined inside it, as in ngspice. Cards between
``.if`` and ``.endif`` may count or not: they are kept apart, and what they define is only perhaps there.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field

from deckgen.findings.taken import Taken, taken
from deckgen.source.model import Card

_DEEPEST = 40
"""Subcircuits defined inside each other, further down than any deck has them, are not judged."""

_IFS = frozenset({".if", ".elseif", ".else", ".endif"})


@dataclass(frozen=True, slots=True)
class Scope:
    """One level of a deck: the deck itself, without a header, or one subcircuit.

    ``models`` holds the first card of each name, as ngspice takes it; ``perhaps`` are names of models and
    subcircuits whose definition depends on a condition, ``binned`` models that are a row of cards NAME.1,
    NAME.2 …; ``doubles`` are headers of subcircuits that are there already.
    """

    header: Taken | None
    cards: tuple[Taken, ...]
    uncertain: tuple[Taken, ...]
    models: dict[str, Taken]
    inner: dict[str, Scope]
    perhaps: frozenset[str]
    binned: frozenset[str]
    doubles: tuple[Taken, ...]
    ports: tuple[str, ...] = ()
    parameters: frozenset[str] = frozenset()
    closed: bool = True
    stray_ends: tuple[Taken, ...] = ()

    @property
    def name(self) -> str | None:
        """Name of the subcircuit, as written; None for the deck itself."""
        return None if self.header is None or len(self.header.words) < 2 else self.header.words[1]


Chain = tuple[Scope, ...]
"""A scope with all those around it: the deck first, the scope itself last."""


@dataclass(slots=True)
class _Open:
    """A scope whose cards are still being read."""

    header: Taken | None = None
    certain: bool = True
    cards: list[Taken] = field(default_factory=list)
    uncertain: list[Taken] = field(default_factory=list)
    models: dict[str, Taken] = field(default_factory=dict)
    inner: dict[str, Scope] = field(default_factory=dict)
    perhaps: set[str] = field(default_factory=set)
    binned: set[str] = field(default_factory=set)
    doubles: list[Taken] = field(default_factory=list)
    stray_ends: list[Taken] = field(default_factory=list)
    conditions: int = 0

    def take(self, card: Taken) -> None:
        """Sort one card into the scope."""
        head = card.head
        if head in _IFS:
            self.conditions += {".if": 1, ".endif": -1}.get(head, 0)
        elif self.conditions > 0:
            self.uncertain.append(card)
            if head == ".model" and len(card.words) > 1:
                self.perhaps.add(card.words[1].lower())
        else:
            self.cards.append(card)
            if head == ".model" and len(card.words) > 1:
                self.models.setdefault(card.words[1].lower(), card)
                stem, _, number = card.words[1].lower().rpartition(".")
                if number.isdigit():
                    self.binned.add(stem)

    def closed(self, *, by_ends: bool) -> Scope:
        """The frozen scope."""
        ports, parameters = ((), frozenset()) if self.header is None else _header(self.header)
        own = frozenset(name for card in self.cards + self.uncertain for name in _set_in(card))
        return Scope(
            header=self.header,
            cards=tuple(self.cards),
            uncertain=tuple(self.uncertain),
            models=self.models,
            inner=self.inner,
            perhaps=frozenset(self.perhaps),
            binned=frozenset(self.binned),
            doubles=tuple(self.doubles),
            ports=ports,
            parameters=parameters | own,
            closed=by_ends,
            stray_ends=tuple(self.stray_ends),
        )


def read_scopes(cards: Sequence[Card]) -> Scope:
    """Sort all cards of a deck into its scopes."""
    stack = [_Open()]
    for card in map(taken, cards):
        head = card.head
        if head == ".subckt":
            stack.append(_Open(card, certain=stack[-1].conditions == 0))
        elif head == ".ends":
            if len(stack) > 1:
                _put_into(stack[-2], stack.pop(), by_ends=True)
            else:
                stack[0].stray_ends.append(card)
        else:
            stack[-1].take(card)
    while len(stack) > 1:
        _put_into(stack[-2], stack.pop(), by_ends=False)
    return stack[0].closed(by_ends=True)


def _put_into(outer: _Open, inner: _Open, *, by_ends: bool) -> None:
    scope = inner.closed(by_ends=by_ends)
    name = (scope.name or "").lower()
    if not inner.certain:
        outer.perhaps.add(name)
    elif name in outer.inner and inner.header is not None:
        outer.doubles.append(inner.header)
    else:
        outer.inner[name] = scope


def _header(card: Taken) -> tuple[tuple[str, ...], frozenset[str]]:
    """Ports of a ``.subckt`` card, and the parameters that it declares."""
    return card.plain[2:], frozenset(name for name, _ in card.pairs)


def _set_in(card: Taken) -> Iterator[str]:
    """Names that a ``.param`` card sets."""
    if card.head in (".param", ".params"):
        yield from (name for name, _ in card.pairs)


def all_scopes(top: Scope) -> Iterator[Scope]:
    """The deck and every subcircuit that is defined in it."""
    waiting = [top]
    while waiting:
        scope = waiting.pop()
        yield scope
        waiting += scope.inner.values()


def live_scopes(top: Scope) -> Iterator[Chain]:
    """The deck and every subcircuit that is surely used in it: faults of others change nothing."""
    waiting: list[Chain] = [(top,)]
    seen = {id(top)}
    while waiting:
        chain = waiting.pop()
        yield chain
        for card in chain[-1].cards:
            if card.head[0] == "x":
                _, found = find_subcircuit(chain, called_subcircuit(card))
                if found is not None and id(found[-1]) not in seen and len(found) <= _DEEPEST:
                    seen.add(id(found[-1]))
                    waiting.append(found)


def called_subcircuit(card: Taken) -> str:
    """Name of the subcircuit that an X card calls, lower case; empty where it names none."""
    return card.plain[-1].lower() if len(card.plain) > 1 else ""


def find_subcircuit(chain: Chain, name: str) -> tuple[bool, Chain | None]:
    """Whether a subcircuit is there, as seen from a scope; and its own chain where that is certain."""
    for depth in range(len(chain), 0, -1):
        scope = chain[depth - 1]
        if name in scope.perhaps:
            return True, None
        if name in scope.inner:
            return True, (*chain[:depth], scope.inner[name])
    return False, None


def find_model(chain: Chain, name: str) -> tuple[bool, Taken | None]:
    """Whether a model is there, as seen from a scope; and its card where it is certain which."""
    for scope in reversed(chain):
        if name in scope.perhaps:
            return True, None
        if name in scope.models:
            return True, scope.models[name]
    return any(name in scope.binned for scope in chain), None
