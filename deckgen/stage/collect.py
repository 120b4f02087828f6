"""Which stage files are meant by the files and folders that a command was given."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

from deckgen.errors import Fault, InputError

LIBRARY_FILE = "library.toml"
"""Settings of a whole folder; not a stage."""


def stage_files(paths: Sequence[Path]) -> tuple[Path, ...]:
    """Files as named and those below the folders named, in a stable order, none twice.

    Raises InputError for a folder without any, since checking nothing is no pass.
    """
    found: dict[Path, None] = {}
    empty = []
    for path in paths:
        files = _below(path) if path.is_dir() else [path]
        if not files:
            empty.append(Fault(str(path), "", "no stage file", "a folder with .toml stage files in it"))
        found.update(dict.fromkeys(files))
    if empty:
        raise InputError(*empty)
    return tuple(found)


def _below(folder: Path) -> list[Path]:
    return sorted(path for path in folder.rglob("*.toml") if path.name != LIBRARY_FILE and path.is_file())
