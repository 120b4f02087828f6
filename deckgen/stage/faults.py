"""Collecting all that is wrong with one file, so that it can be put right in one go."""

from __future__ import annotations

import difflib
import re
from collections.abc import Iterable, Mapping, Set
from typing import Any

from deckgen.errors import Fault, InputError
from deckgen.units import UnitError, parse_number, shown

_BARE_KEY = re.compile(r"[A-Za-z0-9_-]+")
_LONGEST_WORD = 64
_MOST_SUGGESTIONS = 200  # comparing spellings is slow, and a file with that many faults is no stage file


def nearest(word: str, known: Iterable[str]) -> str | None:
    """Find the known spelling closest to a word: the same in another case first."""
    if len(word) > _LONGEST_WORD:
        return None
    by_fold = {name.casefold(): name for name in known}
    folded = word.casefold()
    if folded in by_fold:
        return by_fold[folded]
    close = difflib.get_close_matches(folded, by_fold, n=1)
    return by_fold[close[0]] if close else None


def listed(known: Iterable[str]) -> str:
    """Write the choices: ``one of a, b, c``."""
    names = tuple(known)
    if not names:
        return "nothing here"
    return names[0] if len(names) == 1 else f"one of {', '.join(names)}"


def key_path(path: tuple[str, ...]) -> str:
    """Write a key path as TOML does: ``claims."ID(M1)".tolerance``."""
    return ".".join(key if _BARE_KEY.fullmatch(key) else shown(key) for key in path)


class Faults:
    """The faults of one file, in the order they were found."""

    def __init__(self, file: str, places: Mapping[tuple[str, ...], tuple[str, str]] | None = None) -> None:
        """``places`` says of key paths that were written elsewhere in which file and where."""
        self.file = file
        self._places = dict(places or {})
        self._faults: list[tuple[tuple[str, ...], Fault]] = []
        self._at: set[tuple[str, ...]] = set()
        self._above: set[tuple[str, ...]] = set()
        self._blamed: dict[str, set[str]] = {}

    def at(self, path: tuple[str, ...]) -> bool:
        """Whether a fault was noted at this very path."""
        return path in self._at

    def below(self, path: tuple[str, ...]) -> bool:
        """Whether a fault was noted at a key of the table at this path."""
        return path in self._above

    def blamed(self, section: str) -> Set[str]:
        """Names that a section lacks, or may lack, for a fault already noted: say no more about them."""
        return self._blamed.get(section, frozenset())

    def add(self, path: tuple[str, ...], *, found: str, expected: str, nearest: str | None = None) -> None:
        """Note one fault at a key path."""
        file, where = self._place(path)
        self._faults.append((path, Fault(file, where, found, expected, nearest)))
        self._at.add(path)
        self._above.update(path[:length] for length in range(1, len(path)))
        if len(path) == 2:
            self._blamed.setdefault(path[0], set()).update({path[1], nearest or path[1]})

    def _place(self, path: tuple[str, ...]) -> tuple[str, str]:
        for length in range(len(path), 0, -1):
            if path[:length] in self._places:
                return self._places[path[:length]]
        return self.file, key_path(path)

    def unknown(self, path: tuple[str, ...], word: str, known: Iterable[str], *, expected: str = "") -> None:
        """Note a name that is none of those known, with the closest of them."""
        names = tuple(known)
        close = self.nearest(word, names)
        self.add(path, found=shown(word), expected=expected or listed(names), nearest=close)

    def nearest(self, word: str, known: Iterable[str]) -> str | None:
        """Find the known spelling closest to a word, unless there are too many faults to go on guessing."""
        return nearest(word, known) if len(self._faults) < _MOST_SUGGESTIONS else None

    def number(self, path: tuple[str, ...], value: str | float, unit: str | None) -> float | None:
        """Read a number, or note why it can't be read and return None."""
        try:
            return parse_number(value, unit=unit)
        except UnitError as error:
            self.add(path, found=error.found, expected=error.expected, nearest=error.nearest)
            return None

    def positive(self, path: tuple[str, ...], value: str | float, unit: str | None) -> float | None:
        """Read a number above zero, or note why it isn't one and return None."""
        number = self.number(path, value, unit)
        if number is not None and not number > 0.0:
            self.add(path, found=shown(value), expected="a value above zero")
            return None
        return number

    def raise_any(self, table: Mapping[str, Any]) -> None:
        """Raise InputError with all faults, in the order of the file's own sections and keys."""
        if not self._faults:
            return
        ranks = _ranks(table)
        last = len(ranks)
        ordered = sorted(
            self._faults, key=lambda item: (ranks.get(item[0][:1], last), ranks.get(item[0][:2], last))
        )
        raise InputError(*(fault for _, fault in ordered))


def _ranks(table: Mapping[str, Any]) -> dict[tuple[str, ...], int]:
    paths: list[tuple[str, ...]] = []
    for key, value in table.items():
        paths.append((key,))
        if isinstance(value, dict):
            paths.extend((key, inner) for inner in value)
    return {path: rank for rank, path in enumerate(paths)}
