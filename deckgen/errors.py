"""The tree of errors, the exit codes and the outcomes of a run.

::

    DeckgenError
    ├── InputError (ValueError)            a stage, deck or option is refused: exit 2
    │   └── FormulaInputError              a formula was given nonsense
    ├── NoBiasError (ArithmeticError)      the bias equations have no solution: exit 2
    │   └── NoSignalError                  the small-signal equations have none
    ├── SimulatorError (RuntimeError)      the simulator could not answer: exit 3
    └── OutputError (OSError)              a result could not be written: exit 3
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import IntEnum, StrEnum


class ExitCode(IntEnum):
    """What the process returns; over many stages the highest of 0-4."""

    OK = 0
    GAP = 1
    INPUT = 2
    SIMULATOR = 3
    BUG = 4
    INTERRUPTED = 130


class Outcome(StrEnum):
    """How the attempt to simulate one stage ended."""

    MEASURED = "measured"
    REFUSED = "refused"
    SIMULATOR_MISSING = "simulator missing"
    REFUSED_BY_SIMULATOR = "refused by the simulator"
    MODEL_MISSING = "model missing"
    NO_CONVERGENCE = "no convergence"
    TIMED_OUT = "timed out"
    CRASHED = "crashed"
    INCOMPLETE = "incomplete"
    BUG = "bug in deckgen"

    @property
    def exit_code(self) -> ExitCode:
        """Exit code of a stage that ended so (a measured one may still end in a gap)."""
        if self is Outcome.MEASURED:
            return ExitCode.OK
        if self is Outcome.REFUSED:
            return ExitCode.INPUT
        if self is Outcome.BUG:
            return ExitCode.BUG
        return ExitCode.SIMULATOR


@dataclass(frozen=True, slots=True)
class Fault:
    """One thing wrong in an input, said so that it can be put right.

    ``where`` is a key path (``parts.RD``) or a line number as text.
    """

    file: str
    where: str
    found: str
    expected: str
    nearest: str | None = None

    def __str__(self) -> str:
        place = f"{self.file}: {self.where}" if self.where else self.file
        hint = f"; did you mean {self.nearest}?" if self.nearest else ""
        return f"{place}: found {self.found}, expected {self.expected}{hint}"


class DeckgenError(Exception):
    """Base of every error that deckgen raises on purpose."""

    exit_code = ExitCode.INPUT


class InputError(DeckgenError, ValueError):
    """An input is refused; ``faults`` holds all that was found wrong."""

    def __init__(self, *faults: Fault) -> None:
        self.faults = faults
        super().__init__("\n".join(str(fault) for fault in faults))


class FormulaInputError(InputError):
    """A formula was given a value that makes no sense (not finite, wrong sign)."""

    def __init__(self, formula: str, found: str, expected: str) -> None:
        super().__init__(Fault(file=formula, where="", found=found, expected=expected))


class NoBiasError(DeckgenError, ArithmeticError):
    """The bias equations have no solution, or none that the solver can reach."""


class NoSignalError(NoBiasError):
    """The small-signal equations have no solution that can be computed."""


class SimulatorError(DeckgenError, RuntimeError):
    """The simulator could not answer; ``outcome`` says how, ``said`` in its own words."""

    exit_code = ExitCode.SIMULATOR

    def __init__(self, outcome: Outcome, meaning: str, said: tuple[str, ...] = ()) -> None:
        self.outcome = outcome
        self.meaning = meaning
        self.said = said
        super().__init__(f"{outcome}: {meaning}")


class OutputError(DeckgenError, OSError):
    """A result could not be written where it was asked for."""

    exit_code = ExitCode.SIMULATOR
