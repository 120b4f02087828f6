"""Which stage files and decks are meant by the files and folders that a command was given."""

from __future__ import annotations

import re
from collections.abc import Sequence
from pathlib import Path

from deckgen.errors import Fault, InputError
from deckgen.source.files import resolved

LIBRARY_FILE = "library.toml"
"""Settings of a whole folder; not a stage."""

DECK_SUFFIXES = frozenset({".cir", ".sp", ".spice", ".net", ".ckt", ".deck"})

RUN_RECORD = "run.json"
"""What a folder of evidence holds: stages in it have been checked, and are no stages of their own."""

_NOTE = re.compile(rb"^[ \t]*\*[ \t]*deckgen[ \t]*:", re.IGNORECASE | re.MULTILINE)
_HEAD = 1 << 20


def stage_files(paths: Sequence[Path]) -> tuple[Path, ...]:
    """Files as named, and of folders their stage files and noted decks, in a stable order, none twice.

    A deck in a folder counts when it holds a note (``* deckgen: …``), unless a stage file beside it has its
    name and speaks for it. Raises InputError for a folder without any, since checking nothing is no pass.
    """
    found: dict[Path, None] = {}
    empty = []
    for path in paths:
        files = _below(path) if _is_folder(path) else [path]
        if not files:
            expected = "a folder with .toml stage files or noted decks in it"
            empty.append(Fault(str(path), "", "no stage file", expected))
        found.update(dict.fromkeys(files))
    if empty:
        raise InputError(*empty)
    return tuple(found)


def is_deck(path: Path) -> bool:
    """Whether a file is a deck by its name."""
    return path.suffix.lower() in DECK_SUFFIXES


def _is_folder(path: Path) -> bool:
    try:
        return path.is_dir()
    except OSError:  # a name longer than any file can have: whoever reads it tells
        return False


def _below(folder: Path) -> list[Path]:
    """Stage files and noted decks of a folder. A link that leads out of it is none of its files."""
    root = resolved(folder)
    files = [path for path in folder.rglob("*") if _is_within(path, root) and path.is_file()]
    evidence = {path.parent for path in files if path.name == RUN_RECORD}
    files = [path for path in files if not evidence.intersection(path.parents)]
    stages = {path for path in files if path.suffix == ".toml" and path.name != LIBRARY_FILE}
    spoken_for = {path.with_suffix("") for path in stages}
    decks = {p for p in files if is_deck(p) and p.with_suffix("") not in spoken_for and _is_noted(p)}
    return sorted(stages | decks)


def _is_within(path: Path, root: Path | None) -> bool:
    place = resolved(path)
    return root is not None and place is not None and place.is_relative_to(root)


def _is_noted(path: Path) -> bool:
    """Whether a deck holds a note; one that can't be read is taken, so that its fault is told."""
    try:
        with path.open("rb") as file:
            return _NOTE.search(file.read(_HEAD)) is not None
    except OSError:
        return True
