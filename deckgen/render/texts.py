"""Checks on what may stand in a deck: words, lines and figures, so that no text can add a card."""

from __future__ import annotations

import math
import re
import unicodedata

from deckgen.circuit.numbers import spice_text
from deckgen.errors import Fault, InputError

_LONGEST_LINE = 480  # bytes; ngspice 39.3 with -r aborts on a title of 505 bytes or more
_WORD = re.compile(r"[A-Za-z0-9_][A-Za-z0-9_.]*")
# What moves the cursor, turns the direction of writing, or can't be written as UTF-8.
_REFUSED = frozenset({"Cc", "Cf", "Cs", "Co", "Cn", "Zl", "Zp"})


class Texts:
    """Checks the texts of one stage; every one that can't stand in a deck becomes a fault."""

    def __init__(self, file: str) -> None:
        self.file = file
        self.faults: list[Fault] = []

    def word(self, where: str, text: str) -> str:
        """A name as SPICE takes it."""
        if not _WORD.fullmatch(text):
            self.refuse(where, text, "a name of letters, digits and _")
        return text

    def line(self, where: str, text: str) -> str:
        """Text that stays on the comment line it is put on, cut where the simulator could not take it."""
        if any(unicodedata.category(char) in _REFUSED for char in text):
            self.refuse(where, text, "text without line breaks or control characters")
            return ""
        written = text.encode()
        if len(written) > _LONGEST_LINE:
            return written[: _LONGEST_LINE - 3].decode(errors="ignore") + "…"
        return text

    def figure(self, where: str, value: float) -> str:
        """A number, printed so that it reads back the same: ``4700``, ``1e-06``."""
        if not math.isfinite(value):
            self.refuse(where, str(value), "a finite number")
            return ""
        return spice_text(value).removesuffix(".0")

    def refuse(self, where: str, text: str, expected: str) -> None:
        """Note that the text found can't stand in a deck."""
        self.faults.append(Fault(self.file, where, ascii(text), expected))

    def raise_any(self) -> None:
        """Raise InputError with all faults, if there are any."""
        if self.faults:
            raise InputError(*self.faults)
