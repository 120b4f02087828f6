"""ngspice as the front end: parameters, subcircuits and conditions resolved, one card a line.

Many decks go through one process. A deck that the front end can't take ends that process: it is found as
the first one without a result, judged by what was said of it, and the others go on in a new process.
The decks must hold no control block and no include: whoever reads them has taken these out.
"""

from __future__ import annotations

import shutil
import tempfile
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

from deckgen.errors import Outcome
from deckgen.simulator.accept import Verdict, failure, messages_in
from deckgen.simulator.job import Limits
from deckgen.simulator.locate import Simulator
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
        results += _in_one_process(batch, simulator, limits)
    return tuple(results)


def _in_one_process(decks: Sequence[str], simulator: Simulator, limits: Limits) -> list[Flat]:
    """Results up to the first deck that failed; of that one the failure, if it was the first of all.

    A deck fails by ending the process, or by a listing without any card.
    """
    folder = Path(tempfile.mkdtemp(prefix="deckgen-flat-"))
    try:
        for number, deck in enumerate(decks):
            (folder / f"in{number}.cir").write_text(_closed(deck), encoding="utf-8", errors="replace")
        prepare(folder, _commands(len(decks)))
        ended = start(simulator, folder, limits)
        found = [_read(folder / f"out{number}.txt") for number in range(len(decks))]
        whole = _whole(found)
        results = [Flat(text) for text in found[:whole] if text is not None]
        # What was said belongs to the deck that failed only if it was the first of the process.
        if whole == 0:
            verdict = failure(ended, messages_in(folder), folder=folder, limits=limits)
            results.append(_failed(verdict))
        return results
    except OSError as error:
        meaning = f"the front end's files could not be written ({error.strerror}); make room and run again"
        return [Flat(None, Outcome.INCOMPLETE, meaning)]
    finally:
        shutil.rmtree(folder, ignore_errors=True)


def _closed(deck: str) -> str:
    return deck if deck.rstrip().lower().endswith("\n.end") else deck.rstrip("\n") + "\n.end\n"


def _commands(count: int) -> str:
    """Source each deck, list it, and forget it again.

    A circuit that stayed would lend its options to the next deck, and would be listed in its place where
    that one could not be read.
    """
    lines = ["* flattening", ".control"]
    for number in range(count):
        lines += [f"source in{number}.cir", f"listing runnable > out{number}.txt", "remcirc"]
    return "\n".join([*lines, "quit", ".endc", ".end", ""])


def _read(path: Path) -> str | None:
    try:
        text = path.read_text(encoding="utf-8", errors="replace")
    except FileNotFoundError:
        return None
    return text if text.rstrip().lower().endswith("\n.end") else None


def _whole(found: Sequence[str | None]) -> int:
    """How many decks came through before the first that did not."""
    return next((number for number, text in enumerate(found) if text is None), len(found))


def _failed(verdict: Verdict | None) -> Flat:
    if verdict is None:
        meaning = "the front end gave no listing and no reason; look for cards that ngspice does not know"
        return Flat(None, Outcome.REFUSED_BY_SIMULATOR, meaning)
    return Flat(None, verdict.outcome, verdict.meaning, verdict.said)
