"""deckgen's own start-up file for ngspice: strict model cards, no fallback, one thread."""

from __future__ import annotations

import hashlib
from functools import cache
from importlib.resources import files

NAME = "spinit"
"""The name ngspice looks for in the folder that ``SPICE_SCRIPTS`` names."""


@cache
def text() -> str:
    """Return the start-up file as it is laid into each run's folder."""
    return files(__package__).joinpath("data", NAME).read_text(encoding="utf-8")


@cache
def digest() -> str:
    """Return the SHA-256 of :func:`text`, hexadecimal: part of the evidence of a run."""
    return hashlib.sha256(text().encode("utf-8")).hexdigest()
