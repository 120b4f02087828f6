"""Notes in a deck, ``* deckgen: keyword …``, as the table that a stage file would hold.

A note says in one line what a stage file says in a section; both are then read by the same rules.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, field
from typing import Any, Protocol

from deckgen.errors import Fault
from deckgen.stage.faults import nearest

Table = dict[str, Any]

_SIGNAL = {
    "input": "input",
    "output": "output",
    "frequency": "frequency",
    "amplitude": "amplitude",
    "source-resistance": "source_resistance",
    "load": "load",
}
_MOST_SUGGESTIONS = 50  # comparing spellings is slow
_CLAIM_KINDS = ("equals", "at_least", "at_most", "within")


class NoteLike(Protocol):
    """A note as the reader of decks gives it."""

    @property
    def keyword(self) -> str:
        """Its keyword, lower case."""

    @property
    def rest(self) -> str:
        """What follows it."""

    @property
    def origin(self) -> Any:
        """Its file and line."""


@dataclass(slots=True)
class NoteTable:
    """The table that the notes make, where each entry was written, and the notes that make no sense."""

    table: Table = field(default_factory=dict)
    places: dict[tuple[str, ...], tuple[str, str]] = field(default_factory=dict)
    unknown: list[tuple[Any, str, str | None]] = field(default_factory=list)
    faults: list[Fault] = field(default_factory=list)


def table_of_notes(notes: Iterable[NoteLike]) -> NoteTable:
    """Sort notes into the sections of a stage file. An unknown keyword is kept aside with the nearest one."""
    result = NoteTable()
    for note in notes:
        reader = _READERS.get(note.keyword)
        if reader is None:
            guess = len(result.unknown) < _MOST_SUGGESTIONS
            close = nearest(note.keyword, _READERS) if guess else None
            result.unknown.append((note.origin, note.keyword, close))
            continue
        place = (note.origin.file, f"line {note.origin.line}")
        path = reader(note.keyword, note.rest.split(), result.table)
        if path is None:
            expected = f"* deckgen: {USAGE[note.keyword]}"
            result.faults.append(Fault(*place, f"{note.keyword} {note.rest}".strip(), expected))
        else:
            result.places[path] = place
            result.places.setdefault(path[:2], place)  # where a rating's part is at fault, not its value
    return result


def _signal(keyword: str, words: Sequence[str], table: Table) -> tuple[str, ...] | None:
    if not words:
        return None
    key = _SIGNAL[keyword]
    table.setdefault("signal", {})[key] = " ".join(words)
    return ("signal", key)


def _tolerance(_: str, words: Sequence[str], table: Table) -> tuple[str, ...] | None:
    if len(words) < 2:
        return None
    texts = [text.strip() for text in " ".join(words[1:]).split(",")]
    table.setdefault("tolerance", {})[words[0]] = texts
    return ("tolerance", words[0])


def _claim(_: str, words: Sequence[str], table: Table) -> tuple[str, ...] | None:
    if len(words) < 2:
        return None
    name, *rest = words
    claim: Any = " ".join(rest)
    if rest[0] in _CLAIM_KINDS:
        kind, *values = rest
        if not values or (kind == "within" and len(values) != 2):
            return None
        claim = {kind: values if kind == "within" else " ".join(values)}
    table.setdefault("claims", {})[name] = claim
    return ("claims", name)


def _region(_: str, words: Sequence[str], table: Table) -> tuple[str, ...] | None:
    if len(words) != 2:
        return None
    table.setdefault("transistors", {})[words[0].upper()] = {"region": words[1].lower()}
    return ("transistors", words[0].upper())


def _assumptions(_: str, words: Sequence[str], table: Table) -> tuple[str, ...] | None:
    """``assumptions paper +slug -slug``."""
    if not words or any(word[0] not in "+-" for word in words[1:]):
        return None
    hand: Table = {"assumptions": words[0]}
    for key, sign in (("add", "+"), ("drop", "-")):
        chosen = [word[1:] for word in words[1:] if word.startswith(sign)]
        if chosen:
            hand[key] = chosen
    table["hand"] = hand
    return ("hand",)


def _rating(_: str, words: Sequence[str], table: Table) -> tuple[str, ...] | None:
    if len(words) < 3:
        return None
    part, quantity, *value = words
    table.setdefault("ratings", {}).setdefault(part.upper(), {})[quantity] = " ".join(value)
    return ("ratings", part.upper(), quantity)


def _wanted(_: str, words: Sequence[str], table: Table) -> tuple[str, ...] | None:
    if not words:
        return None
    table.setdefault("wanted", {}).setdefault("quantities", []).extend(words)
    return ("wanted", "quantities")


def _polarised(_: str, words: Sequence[str], table: Table) -> tuple[str, ...] | None:
    if not words:
        return None
    table.setdefault("polarised", []).extend(word.upper() for word in words)
    return ("polarised",)


_Reader = Callable[[str, Sequence[str], Table], "tuple[str, ...] | None"]

_READERS: dict[str, _Reader] = {
    **dict.fromkeys(_SIGNAL, _signal),
    "tolerance": _tolerance,
    "claim": _claim,
    "region": _region,
    "assumptions": _assumptions,
    "rating": _rating,
    "wanted": _wanted,
    "polarised": _polarised,
}

USAGE = {
    "input": "input VIN",
    "output": "output out",
    "frequency": "frequency 1k",
    "amplitude": "amplitude 10m",
    "source-resistance": "source-resistance RSIG",
    "load": "load RL",
    "tolerance": "tolerance gm 3%",
    "claim": "claim ID(M1) 0.5m, or claim Av at_most -20, or claim Rin within 200k 300k",
    "region": "region M2 triode",
    "assumptions": "assumptions paper +no-body-effect",
    "rating": "rating M1 VDS 20",
    "wanted": "wanted ID(M1) Av",
    "polarised": "polarised C1",
}
"""How each note is written."""
