"""Which files a deck may read, and their text.

A deck may include files of its own folder tree and of declared roots, nothing else: a link or ``..`` that
leads out is refused before the file is opened, and no line of such a file is ever shown.
"""

from __future__ import annotations

import stat
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

LARGEST = 32 * 2**20
"""Bytes that a deck or included file may have."""


class FileError(ValueError):
    """A file may not be or can't be read; ``slug`` names the finding, ``parts`` fill its text."""

    def __init__(self, slug: str, **parts: str) -> None:
        self.slug = slug
        self.parts = parts
        super().__init__(slug)


@dataclass(frozen=True, slots=True)
class Roots:
    """Folders that a deck may read from: its own, then the declared ones; all resolved."""

    own: Path
    declared: tuple[Path, ...] = ()

    @classmethod
    def of(cls, deck: Path, declared: Sequence[Path] = ()) -> Roots:
        """Roots of a deck file, links resolved once."""
        own = resolved(deck)
        if own is None:
            raise FileError("file-unreadable", name=deck.name, why="links that lead round in a circle")
        return cls(own.parent, tuple(filter(None, map(resolved, declared))))

    def find(self, name: str, including: Path) -> Path:
        """The file that an include names, seen from the file that includes it.

        Raises FileError where it lies outside all roots or is not there.
        """
        # Joined to an absolute path, a folder has no say: then all candidates are that path.
        candidates = [folder / name for folder in (including.parent, self.own, *self.declared)]
        found = [path for path in map(resolved, candidates) if path is not None]
        inside = [path for path in found if self._allowed(path)]
        if found and not inside:
            raise FileError("include-outside", name=name)
        for path in inside:
            if is_there(path):
                return path
        raise FileError("include-missing", name=name)

    def shown(self, path: Path) -> str:
        """How a file that was found is called: as seen from the deck, where it lies in the deck's folder."""
        return str(path.relative_to(self.own) if path.is_relative_to(self.own) else path)

    def _allowed(self, path: Path) -> bool:
        return any(path.is_relative_to(root) for root in (self.own, *self.declared))


def resolved(path: Path) -> Path | None:
    """A path with its links followed; None where they lead round in a circle, or it can be no path."""
    try:
        return path.resolve()
    except (OSError, RuntimeError, ValueError):
        return None


def is_there(path: Path) -> bool:
    """Whether there is a file of that name, or a folder."""
    try:
        return path.exists()
    except OSError:  # a name longer than any file can have
        return False


def read_lines(path: Path, *, name: str) -> list[str]:
    """Text lines of a deck file, without line ends; UTF-8, else latin-1.

    Raises FileError for what is no text file of a sane size. ``name`` is how the deck calls it.
    """
    try:
        status = path.stat()
        if not stat.S_ISREG(status.st_mode):
            raise FileError("not-a-file", name=name)
        if status.st_size > LARGEST:
            raise FileError("file-too-large", name=name, limit=f"{LARGEST // 2**20} MiB")
        data = path.read_bytes()
    except OSError as error:
        raise FileError("file-unreadable", name=name, why=error.strerror or "unknown") from error
    return split_lines(data, name=name)


def split_lines(data: bytes, *, name: str) -> list[str]:
    """Lines as ngspice counts them: ended by LF alone, a CR before it dropped."""
    if data.startswith((b"\xff\xfe", b"\xfe\xff")) or (len(data) > 3 and data[1::2].count(0) * 4 > len(data)):
        raise FileError("utf-16", name=name)
    if b"\0" in data:
        raise FileError("nul-bytes", name=name)
    body = data.removeprefix(b"\xef\xbb\xbf")
    if b"\r" in body.replace(b"\r\n", b"\n"):
        raise FileError("cr-line-ends", name=name)
    try:
        text = body.decode("utf-8")
    except UnicodeDecodeError:
        text = body.decode("latin-1")
    lines = text.replace("\r\n", "\n").split("\n")
    return lines[:-1] if lines[-1] == "" else lines
