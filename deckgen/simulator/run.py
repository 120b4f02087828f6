"""Run one deck in ngspice, in a folder of its own, and accept the results only if all is right."""

from __future__ import annotations

import os
from pathlib import Path

from deckgen.errors import Outcome, OutputError
from deckgen.simulator import startup
from deckgen.simulator.accept import Verdict, judge
from deckgen.simulator.job import (
    DECK,
    HOME,
    OURS,
    STARTUP,
    STDERR,
    STDOUT,
    Execution,
    ExpectedPlot,
    Job,
    Limits,
)
from deckgen.simulator.locate import Simulator
from deckgen.simulator.process import Ended, limited, run_to_end, stop_all

__all__ = ["Execution", "ExpectedPlot", "Job", "Limits", "run", "stop_all"]


def run(job: Job, *, simulator: Simulator, folder: Path, limits: Limits | None = None) -> Execution:
    """Run ``job`` in ``folder`` (made if need be) and say how it ended.

    Never raises for what the simulator does, nor for a full disk. ``OutputError`` if the folder
    already holds a file of a run: results of two runs must not mix.
    """
    limits = Limits() if limits is None else limits
    folder = folder.absolute()
    _refuse_used(folder, job)
    ended: Ended | None = None
    try:
        prepare(folder, job.deck)
        ended = start(simulator, folder, limits)
        verdict = judge(job, ended, folder=folder, limits=limits)
    except OSError as error:
        verdict = _not_run(error, folder)
    return Execution(
        outcome=verdict.outcome,
        meaning=verdict.meaning,
        said=verdict.said,
        returncode=None if ended is None else ended.returncode,
        seconds=0.0 if ended is None else ended.seconds,
        plots=verdict.plots,
        files=_files(folder),
    )


def _refuse_used(folder: Path, job: Job) -> None:
    used = [name for name in (*OURS, job.raw_name) if os.path.lexists(folder / name)]
    if used:
        raise OutputError(f"{folder}: already holds {', '.join(used)}; give each run an empty folder")


def prepare(folder: Path, deck: str) -> None:
    """Lay out what a run needs: start-up file, empty home, deck."""
    (folder / STARTUP).mkdir(parents=True)
    (folder / HOME).mkdir()
    (folder / STARTUP / startup.NAME).write_text(startup.text(), encoding="utf-8")
    (folder / DECK).write_text(deck, encoding="utf-8")


def start(simulator: Simulator, folder: Path, limits: Limits) -> Ended:
    """Run the deck that lies in a prepared folder, in surroundings of its own, under the limits."""
    command = limited(
        (simulator.path, "-n", "-b", DECK),
        memory_bytes=limits.memory_bytes,
        file_bytes=limits.file_bytes,
        # Only for a simulator that outlives deckgen; the wall clock stops it before.
        processor_seconds=2 * limits.seconds + 1,
    )
    environment = {
        "PATH": os.environ.get("PATH", os.defpath),
        "HOME": str(folder / HOME),
        # Relative, because ngspice expands what looks like a variable in it.
        "SPICE_SCRIPTS": STARTUP,
        "LC_ALL": "C",
    }
    with (folder / STDOUT).open("wb") as stdout, (folder / STDERR).open("wb") as stderr:
        return run_to_end(
            command,
            folder=folder,
            environment=environment,
            stdout=stdout,
            stderr=stderr,
            seconds=limits.seconds,
        )


def _not_run(error: OSError, folder: Path) -> Verdict:
    reason = error.strerror or str(error)
    return Verdict(
        Outcome.INCOMPLETE,
        f"{folder}: the run's files could not be written or read ({reason});"
        " make room there or choose another folder",
    )


def _files(folder: Path) -> tuple[str, ...]:
    """Everything in the run's folder, by path relative to it."""
    found: list[str] = []
    for parent, _, names in os.walk(folder):
        inside = os.path.relpath(parent, folder)
        found.extend(name if inside == "." else f"{inside}/{name}" for name in names)
    return tuple(sorted(found))
