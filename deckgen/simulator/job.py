"""What the simulator is asked, and how it ended."""

from __future__ import annotations

import re
from dataclasses import dataclass

from deckgen.errors import Outcome
from deckgen.simulator.raw import Plot

_RAW_NAME = re.compile(r"[a-z0-9][a-z0-9_.-]*")
DECK = "deck.cir"
STDOUT = "stdout.txt"
STDERR = "stderr.txt"
STARTUP = "start-up"
HOME = "home"
OURS = (DECK, STDOUT, STDERR, STARTUP, HOME)
"""What a run lays into its folder beside the raw file."""


@dataclass(frozen=True, slots=True)
class ExpectedPlot:
    """One plot that the deck's control block writes.

    ``name`` is the simulator's ("Operating Point", "AC Analysis"); ``nonzero`` lists columns that
    may not all be zero at every point, as they are after an ``ac`` without a source.
    """

    name: str
    points: int
    columns: tuple[str, ...]
    nonzero: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        if self.points < 1:
            raise ValueError(f"plot {self.name!r}: {self.points} points expected, needs at least 1")


@dataclass(frozen=True, slots=True)
class Job:
    """A deck whose own control block writes ``expected``, in this order, into ``raw_name``."""

    deck: str
    expected: tuple[ExpectedPlot, ...]
    raw_name: str = "out.raw"

    def __post_init__(self) -> None:
        # ngspice lower-cases the names of the files it writes.
        if not _RAW_NAME.fullmatch(self.raw_name) or self.raw_name in OURS:
            raise ValueError(f"raw_name {self.raw_name!r}: a plain lower-case file name is needed")


@dataclass(frozen=True, slots=True)
class Limits:
    """What one run may use: wall-clock seconds, address space, and the size of each file."""

    seconds: float = 60.0
    memory_bytes: int = 2 * 2**30
    file_bytes: int = 256 * 2**20

    def __post_init__(self) -> None:
        if not (self.seconds > 0 and self.memory_bytes > 0 and self.file_bytes > 0):
            raise ValueError(f"every limit must be positive: {self}")


@dataclass(frozen=True, eq=False)
class Execution:
    """How one run ended. Only a measured one has ``plots``.

    ``meaning`` is one line in our words that says what to do, empty when measured; ``said`` are
    the simulator's own words that matter; ``files`` all files in the run's folder, relative to it.
    """

    outcome: Outcome
    meaning: str
    said: tuple[str, ...]
    returncode: int | None
    seconds: float
    plots: tuple[Plot, ...]
    files: tuple[str, ...]
