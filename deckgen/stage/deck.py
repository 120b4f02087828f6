"""The Stage of a deck: from the notes in it, and from a stage file that names it.

What a topology says of a template, its vocabulary says of a deck: which transistors, parts, sources and
nodes there are.
"""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import PurePath
from typing import TYPE_CHECKING, Any

from deckgen.errors import InputError
from deckgen.stage.expectations import Reader
from deckgen.stage.faults import Faults
from deckgen.stage.model import Conditions, Part, Signal, Stage
from deckgen.stage.notes import NoteTable
from deckgen.stage.read import read_hand, read_signal
from deckgen.stage.topology import Topology

if TYPE_CHECKING:
    from deckgen.stage.schema import DeckFile


def deck_stage(
    notes: NoteTable,
    vocabulary: Topology,
    *,
    file: str,
    deck: str,
    title: str,
    conditions: Conditions,
    parts: tuple[Part, ...],
    table: Mapping[str, Any] | None = None,
) -> Stage:
    """The stage of a deck; ``table`` is a stage file's, which has the last word over the notes.

    Raises InputError with all faults of notes and file together.
    """
    from deckgen.stage.schema import DeckFile
    from deckgen.stage.shape import shaped

    stated = {"format": 1, "deck": deck, **notes.table} if table is None else merged(notes.table, table)
    written = {} if table is None else paths_of(table)
    places = {path: place for path, place in notes.places.items() if path not in written}
    faults = Faults(file, places)
    order = {key: dict(value) if isinstance(value, dict) else value for key, value in stated.items()}
    given = shaped(DeckFile, stated, faults)
    stage = _stage(given, vocabulary, faults, parts, conditions, deck=deck, title=title)
    try:
        faults.raise_any(order)
    except InputError as error:
        raise InputError(*notes.faults, *error.faults) from error
    if notes.faults:
        raise InputError(*notes.faults)
    return stage


def merged(under: Mapping[str, Any], over: Mapping[str, Any]) -> dict[str, Any]:
    """Two tables as one, section by section; where both say something, ``over`` counts."""
    result = {key: dict(value) if isinstance(value, dict) else value for key, value in under.items()}
    for key, value in over.items():
        below = result.get(key)
        result[key] = merged(below, value) if isinstance(below, dict) and isinstance(value, dict) else value
    return result


def paths_of(table: Mapping[str, Any]) -> set[tuple[str, ...]]:
    """All key paths of a table, those of inner tables included."""
    paths: set[tuple[str, ...]] = set()
    for key, value in table.items():
        paths.add((key,))
        if isinstance(value, dict):
            paths |= {(key, *inner) for inner in paths_of(value)}
    return paths


def _stage(
    given: DeckFile,
    vocabulary: Topology,
    faults: Faults,
    parts: tuple[Part, ...],
    conditions: Conditions,
    *,
    deck: str,
    title: str,
) -> Stage:
    signal = _signal(given, parts, vocabulary, faults)
    reader = Reader(vocabulary, faults, signal)
    stated = given.transistors or {}
    for name in stated:
        if name not in vocabulary.transistor_names:
            faults.unknown(("transistors", name), name, vocabulary.transistor_names)
    capacitors = tuple(spec.name for spec in vocabulary.parts if spec.unit == "F")
    for name in given.polarised or ():
        if name not in capacitors:
            faults.unknown(("polarised",), name, capacitors)
    return Stage(
        name=PurePath(faults.file).stem,
        file=faults.file,
        title=given.title or title,
        topology="",
        parts=(),
        models=(),
        transistors=(),
        signal=signal,
        conditions=conditions,
        hand=read_hand(given.hand, faults),
        tolerances=reader.tolerances(given.tolerance or {}),
        claims=reader.claims(given.claims or {}),
        known_gaps=reader.known_gaps(given.known_gap or {}),
        ratings=reader.ratings(given.ratings or {}, parts),
        wanted=reader.wanted((given.wanted.quantities if given.wanted else None) or ()),
        deck=deck,
        regions=tuple((name, section.region) for name, section in stated.items() if section.region),
        polarised=tuple(given.polarised or ()),
    )


def _signal(given: DeckFile, parts: tuple[Part, ...], vocabulary: Topology, faults: Faults) -> Signal:
    """Names in a deck have no case: they are matched as the simulator reads them."""
    section = given.signal
    if section is not None:
        names = {key: getattr(section, key) for key in ("input", "source_resistance", "load")}
        changed = {key: name.upper() for key, name in names.items() if name is not None}
        if section.output is not None:
            changed["output"] = section.output.lower()
        section = section.model_copy(update=changed)
    return read_signal(section, parts, vocabulary, faults)
