"""What the table of findings holds under each slug."""

from __future__ import annotations

from dataclasses import dataclass

from deckgen.comparison import Severity


@dataclass(frozen=True, slots=True)
class Entry:
    """Severity and text of one kind of finding; the text is a format string with named parts."""

    severity: Severity
    text: str
