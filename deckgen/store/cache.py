"""Texts kept under a hash of all that made them, in the user's cache folder.

An entry carries the hash of its own text: one that was cut short or changed is not taken. A cache that
can't be read or written only costs time.
"""

from __future__ import annotations

import logging
from pathlib import Path

from deckgen.errors import OutputError
from deckgen.store.runs import hash_of, write_atomically

log = logging.getLogger("deckgen")


def user_cache() -> Path:
    """The folder of the user's cache."""
    from platformdirs import user_cache_path

    return user_cache_path("deckgen")


def key_of(*parts: str) -> str:
    """Key of an entry: a hash of everything that affects it."""
    return hash_of("\0".join(parts).encode("utf-8", "surrogatepass"))


def recall(folder: Path, key: str) -> str | None:
    """The text kept under a key, or None."""
    try:
        data = (folder / key).read_bytes()
    except OSError:
        return None
    head, _, body = data.partition(b"\n")
    if head.decode("ascii", "replace") != hash_of(body):
        log.info("cache entry %s is damaged and not taken", key)
        return None
    return body.decode("utf-8", "replace")


def keep(folder: Path, key: str, text: str) -> None:
    """Keep a text under a key."""
    try:
        folder.mkdir(parents=True, exist_ok=True)
        write_atomically(folder / key, f"{hash_of(text.encode('utf-8'))}\n{text}")
    except (OSError, OutputError) as error:
        log.info("cache entry %s is not kept: %s", key, error)
