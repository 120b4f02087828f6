"""Text from outside made harmless: no character is left that a terminal acts on or no encoding can hold."""

from __future__ import annotations

import re
import unicodedata

# Controls, format characters (bidirectional overrides, zero-width ones), surrogates, private-use characters
# (of no agreed meaning), line separators.
_ACTIVE = frozenset({"Cc", "Cf", "Cs", "Co", "Zl", "Zp"})

_SUSPECT = re.compile("[\x00-\x1f\x7f-\U0010ffff]")

_SHORT = {"\n": r"\n", "\r": r"\r", "\t": r"\t", "\x1b": r"\e"}


def is_active(character: str) -> bool:
    """Whether a terminal could act on it, or no encoding can hold it."""
    return unicodedata.category(character) in _ACTIVE


def inert(text: str) -> str:
    r"""Put the text on one line with active characters (``\n``, ``\e``, ``\u202e``) written out.

    >>> inert("a\x1b[31mb")
    'a\\e[31mb'
    """
    return _SUSPECT.sub(lambda match: _written(match[0]) if is_active(match[0]) else match[0], text)


def json_safe(text: str) -> str:
    r"""Escape the active characters inside the strings of a JSON text as ``\uXXXX``; its line ends stay."""
    return _BEYOND_ASCII.sub(lambda match: _escaped(match[0]) if is_active(match[0]) else match[0], text)


_BEYOND_ASCII = re.compile("[\x7f-\U0010ffff]")


def _written(character: str) -> str:
    return _SHORT.get(character) or _escaped(character)


def _escaped(character: str) -> str:
    """Write the character as UTF-16 code units, as JSON does."""
    units = character.encode("utf-16-be", "surrogatepass")
    return "".join(rf"\u{units[i]:02x}{units[i + 1]:02x}" for i in range(0, len(units), 2))
