"""Where the signal of a circuit enters and leaves, and which resistors are source and load."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Ports:
    """Names (lower case) of the input source, the output node, and the declared resistors.

    Undeclared, a source or load resistor counts as part of the stage.
    """

    input: str
    output: str
    source_resistance: str | None = None
    load: str | None = None
