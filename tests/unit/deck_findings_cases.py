"""What each deck in ``tests/data/findings`` provokes, and where; shared by unit and simulator tests.

A deck is called after the slug that it provokes. Some need a file that can't be kept in the project.
"""

from __future__ import annotations

import os
import shutil
from collections.abc import Callable
from pathlib import Path

import pytest

from deckgen.findings.card_entries import CARD_ENTRIES
from deckgen.findings.graph_entries import GRAPH_ENTRIES
from deckgen.findings.source_entries import SOURCE_ENTRIES
from deckgen.source import deck as source_deck
from deckgen.source import files as source_files

DATA = Path(__file__).resolve().parent.parent / "data" / "findings"

DECK_SLUGS = (*SOURCE_ENTRIES, *CARD_ENTRIES, *GRAPH_ENTRIES)

LINES = {
    "title-swallows-card": 1, "include-on-title-line": 1, "text-after-end": 6, "control-block": 5,
    "control-block-alters": 7, "control-block-open": 5, "command-comment": 5, "analysis-left-out": 5,
    "node-renamed": 4,
    "unknown-card": 5, "line-ends-in-backslash": 5, "too-many-lines": 5, "include-missing": 5,
    "include-outside": 5, "include-itself": 2, "library-section-missing": 5, "library-section-stray": 5,
    "not-a-file": 5, "file-too-large": 5, "file-unreadable": 5, "utf-16": 1, "nul-bytes": 1,
    "cr-line-ends": 1, "note-unknown": 5,
    "bare-m": 4, "digits-after-suffix": 3, "greek-mu": 4, "farad-is-femto": 4, "suffix-unknown": 4,
    "number-in-expression": 2, "decimal-comma": 3, "unit-apart": 3,
    "value-extra": 3, "value-missing": 3, "resistor-zero": 3, "w-or-l-missing": 5,
    "width-or-length-not-positive": 5, "kp-not-positive": 6, "ld-too-large": 5, "node-name-reserved": 3,
    "node-count": 5, "instance-parameter-unknown": 5,
    "model-undefined": 5, "model-type": 5, "model-duplicate": 7, "model-parameter-unknown": 7,
    "subcircuit-undefined": 3, "subcircuit-ports": 3, "subcircuit-duplicate": 9, "subcircuit-open": 5,
    "subcircuit-parameter-unknown": 3, "parameter-duplicate": 5, "option-unknown": 5, "element-duplicate": 5,
    "names-differ-in-case": 4, "ac-source-missing": 2, "ac-sources-several": 6, "ac-amplitude": 2,
    "no-ground": 2, "no-dc-path": 5, "floating-gate": 6, "current-source-into-empty-node": 5,
    "node-dangling": 5, "source-loop": 5, "bulk-not-at-source-or-rail": 6, "bulk-forward-biased": 5,
    "generator-sets-bias": 3, "generator-overrides-bias": 3, "generator-current-in-bias": 3,
    "capacitor-reversed": 5,
}  # fmt: skip

FILES = {"include-itself": "include-itself/loop.inc"}
"""Where the finding is not in the deck itself."""

NO_LINE = frozenset({"no-signal-path"})
"""Findings about the deck as a whole, made where stage and circuit meet."""

VOLTAGES = {
    # From the operating points that ngspice 39.3 gives, rounded; a simulator test takes its own.
    "bulk-forward-biased": {"vdd": 12.0, "in": 2.0, "d": 11.2},
    "capacitor-reversed": {"vdd": 12.0, "in": 0.0, "g": 2.164, "d": 10.41},
}


def _huge(folder: Path, _: pytest.MonkeyPatch) -> None:
    with (folder / "file-too-large" / "huge.inc").open("wb") as file:
        os.truncate(file.fileno(), source_files.LARGEST + 1)


def _few_lines(_: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(source_deck, "_MOST_LINES", 3)


def _unreadable(_: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    # The super-user may read any file, whatever its permissions.
    read = Path.read_bytes

    def refuse(path: Path) -> bytes:
        if path.parent.name == "file-unreadable":
            raise PermissionError(13, "Permission denied")
        return read(path)

    monkeypatch.setattr(Path, "read_bytes", refuse)


_PREPARED: dict[str, Callable[[Path, pytest.MonkeyPatch], None]] = {
    "file-too-large": _huge,
    "too-many-lines": _few_lines,
    "file-unreadable": _unreadable,
}


def deck_of(slug: str, folder: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """The deck of a slug, ready to be read; in ``folder`` where it needs a file that can't be kept."""
    if slug not in _PREPARED:
        return DATA / f"{slug}.cir"
    shutil.copytree(DATA, folder, dirs_exist_ok=True)
    _PREPARED[slug](folder, monkeypatch)
    return folder / f"{slug}.cir"
