"""ngspice as the front end: parameters, subcircuits and conditions resolved, one card a line.

Many decks go through one process. A deck that the front end can't take mostly ends that process: it is found
as the first one without a result, tried alone to hear what is wrong with it, and the others go on in a new
process.
The decks must hold no control block and no include: whoever reads them has taken these out.
"""

from __future__ import annotations

import contextlib
import itertools
import shutil
import tempfile
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

from deckgen.errors import Outcome
from deckgen.simulator.accept import Verdict, failure, messages_in
from deckgen.simulator.job import Limits
from deckgen.simulator.locate import Simulator
from deckgen.simulator.process import Ended
from deckgen.simulator.run import prepare, start

_MOST_AT_ONCE = 200


@dataclass(frozen=True, slots=True)
class Flat:
    """One deck, flattened: its ``text``, or the outcome and the words of why not."""

    text: str | None
    outcome: Outcome = Outcome.MEASURED
    meaning: str = ""
    said: tuple[str, ...] = ()


def flatten(decks: Sequence[str], *, simulator: Simulator, limits: Limits | None = None) -> tuple[Flat, ...]:
    """Flatten decks, in order. Never raises for what a deck holds."""
    limits = Limits() if limits is None else limits
    results: list[Flat] = []
    while len(results) < len(decks):
        batch = decks[len(results) : len(results) + _MOST_AT_ONCE]
        whole = _in_one_process(batch, simulator, limits) if len(batch) > 1 else []
        results += whole
        if len(whole) < len(batch):
            # What is said of it alone is about it and no other.
            results.append(_alone(batch[len(whole)], simulator, limits))
    return tuple(results)


def _in_one_process(decks: Sequence[str], simulator: Simulator, limits: Limits) -> list[Flat]:
    """Results up to the first deck that failed: it ended the process, or its listing holds no card."""
    with contextlib.suppress(OSError), _folder() as folder:
        _run(decks, folder, simulator, limits)
        found = (_read(folder / f"out{number}.txt") for number in range(len(decks)))
        return [Flat(text) for text in itertools.takewhile(lambda text: text is not None, found)]
    return []  # no room, which the one that is tried alone will tell


def _alone(deck: str, simulator: Simulator, limits: Limits) -> Flat:
    try:
        with _folder() as folder:
            ended = _run([deck], folder, simulator, limits)
            text = _read(folder / "out0.txt")
            if text is not None:
                return Flat(text)
            return _failed(failure(ended, messages_in(folder), folder=folder, limits=limits))
    except OSError as error:
        meaning = f"the front end's files could not be written ({error.strerror}); make room and run again"
        return Flat(None, Outcome.INCOMPLETE, meaning)


@contextlib.contextmanager
def _folder() -> Iterator[Path]:
    folder = Path(tempfile.mkdtemp(prefix="deckgen-flat-"))
    try:
        yield folder
    finally:
        shutil.rmtree(folder, ignore_errors=True)


def _run(decks: Sequence[str], folder: Path, simulator: Simulator, limits: Limits) -> Ended:
    for number, deck in enumerate(decks):
        (folder / f"in{number}.cir").write_text(_closed(deck), encoding="utf-8", errors="replace")
    prepare(folder, _commands(len(decks)))
    return start(simulator, folder, limits)


def _closed(deck: str) -> str:
    return deck if deck.rstrip().lower().endswith("\n.end") else deck.rstrip("\n") + "\n.end\n"


def _commands(count: int) -> str:
    """Source each deck, list it, and forget it again.

    A circuit that stayed would lend its options to the next deck, and would be listed in its place where
    that one could not be read.
    """
    lines = ["* flattening", ".control"]
    for number in range(count):
        lines += ["remcirc"] if number else []
        lines += [f"source in{number}.cir", f"listing runnable > out{number}.txt"]
    return "\n".join([*lines, "quit", ".endc", ".end", ""])


def _read(path: Path) -> str | None:
    try:
        text = path.read_text(encoding="utf-8", errors="replace")
    except FileNotFoundError:
        return None
    return text if text.rstrip().lower().endswith("\n.end") else None


def _failed(verdict: Verdict | None) -> Flat:
    if verdict is None:
        meaning = "the front end gave no listing and no reason; look for cards that ngspice does not know"
        return Flat(None, Outcome.REFUSED_BY_SIMULATOR, meaning)
    return Flat(None, verdict.outcome, verdict.meaning, verdict.said)
