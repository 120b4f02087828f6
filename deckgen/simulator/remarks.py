"""ngspice's messages as lines, and which of them are harmless. Wordings of ngspice 39."""

from __future__ import annotations

import re
from collections.abc import Iterable

_LINES_SAID = 8
_LONGEST_LINE = 200

# Lines that say nothing about the result.
_HARMLESS = re.compile(
    r"Note: \S+: dc value used for op instead of transient time=0 value\."
    r"|Note: \S+: has no value, DC 0 assumed"
    r"|Reference value : +\S+"
    r"|Checking parameters for BSIM ?\S+ model \S+"
    r"|Warning: P[ds] = 0 is less than W\."
)
# Lines about the search for an operating point: harmless if the search ends in "completed".
_SEARCH_START = re.compile(r"Note: Starting (?:dynamic gmin|true gmin|spice3 gmin|source) stepping")
_SEARCH_END = re.compile(r"Note: (?:(?:Dynamic|True|spice3) gmin|Source) stepping completed")
_SEARCH = re.compile(
    r"Trying gmin = +\S+"
    r"|Supplies reduced to +\S+%"
    r"|Note: One successful (?:gmin|source) step"
    r"|Warning: Further gmin increment"
    r"|Warning: (?:Last )?gmin step failed"
    r"|Warning: (?:(?:Dynamic|True|spice3) gmin|source) stepping failed"
)
# Lines that only say that others went before.
_EMPTY_WORDS = re.compile(
    r"Note: No \"\.plot\".*|Simulation interrupted due to error!|ERROR: fatal error in ngspice.*"
    r"|No circuit loaded!"
)
_PROGRESS = re.compile(r"(Trying gmin = +\S+|Supplies reduced to +\S+%) ")
_STDOUT = re.compile(
    r"(?:DC solution|AC operating point|Transient solution) failed|\w+ simulation\(s\) aborted"
)


def clean(text: str) -> tuple[str, ...]:
    """Split ``text`` into printable lines, each message on its own."""
    lines = re.split(r"[\r\n]+", _PROGRESS.sub("\\1\n", text))
    printable = ("".join(filter(str.isprintable, line.replace("\t", " "))).strip() for line in lines)
    return tuple(line for line in printable if line)


def failures_on_stdout(text: str) -> tuple[str, ...]:
    """Pick the lines of standard output that tell of a failed analysis."""
    return tuple(line for line in clean(text) if _STDOUT.match(line))


def objections(lines: Iterable[str]) -> tuple[str, ...]:
    """Pick the lines that forbid to use a run: all that are not known to be harmless.

    The search for an operating point by gmin or source stepping is harmless when it is completed
    without a singular matrix; a start without a completion stands for one that isn't.
    """
    left: list[str] = []
    unfinished: str | None = None
    for line in lines:
        if _SEARCH_START.fullmatch(line):
            unfinished = line
        elif _SEARCH_END.fullmatch(line):
            unfinished = None
        elif not _SEARCH.fullmatch(line) and not _HARMLESS.fullmatch(line):
            left.append(line)
    if unfinished is not None:
        left.append(unfinished)
    return tuple(left)


def search_notes(lines: Iterable[str]) -> tuple[str, ...]:
    """Tell how the operating point was found where plain Newton iteration did not do, each way once."""
    return tuple(dict.fromkeys(line for line in lines if _SEARCH_END.fullmatch(line)))


def spoken(lines: Iterable[str]) -> tuple[str, ...]:
    """Pick the first few different lines that say something, none too long."""
    told = dict.fromkeys(line[:_LONGEST_LINE] for line in lines if not _EMPTY_WORDS.fullmatch(line))
    return tuple(told)[:_LINES_SAID]
