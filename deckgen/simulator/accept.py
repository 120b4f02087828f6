"""The one rule by which a run's results are accepted; anything else has another outcome.

Accepted only if: exit status 0; nothing on standard error that isn't known to be harmless; exactly
the expected plots, in order, each with the expected points; the raw file exact to the byte; every
column present, every value finite, and not zero everywhere where a signal must be.
ngspice's exit status alone tells little: most failures of an analysis inside a control block end
with status 0, and some leave the previous analysis's plot to be written a second time.
"""

from __future__ import annotations

import signal
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

from deckgen.errors import Outcome
from deckgen.simulator import messages, remarks
from deckgen.simulator.job import STDERR, STDOUT, ExpectedPlot, Job, Limits
from deckgen.simulator.process import Ended
from deckgen.simulator.raw import Plot, RawFileError, read_raw

_MOST_MESSAGES = 2**20


@dataclass(frozen=True, slots=True)
class Verdict:
    """Outcome, our line about it, the simulator's words, and the plots of an accepted run."""

    outcome: Outcome
    meaning: str = ""
    said: tuple[str, ...] = ()
    plots: tuple[Plot, ...] = ()


def judge(job: Job, ended: Ended, *, folder: Path, limits: Limits) -> Verdict:
    """Accept the run in ``folder`` or say what is wrong with it."""
    stderr, too_much = _text(folder / STDERR)
    lines = remarks.clean(stderr)
    failed = failure(ended, lines, folder=folder, limits=limits)
    if failed is not None:
        return failed
    if too_much:
        return Verdict(
            Outcome.INCOMPLETE, f"more than {_MOST_MESSAGES} bytes of messages; see {STDERR} beside the deck"
        )
    try:
        plots = _plots(folder / job.raw_name)
    except RawFileError as error:
        return Verdict(
            Outcome.INCOMPLETE,
            f"{job.raw_name} is damaged, {error}; see that the disk isn't full, and run again",
        )
    faults = tuple(_faults(job.expected, plots))
    if faults:
        return Verdict(Outcome.INCOMPLETE, "; ".join(faults))
    return Verdict(Outcome.MEASURED, said=remarks.search_notes(lines), plots=plots)


def failure(ended: Ended, lines: tuple[str, ...], *, folder: Path, limits: Limits) -> Verdict | None:
    """Judge how the process ended and what it said on standard error; None if nothing is wrong."""
    stopped = _stopped(ended, lines, limits)
    if stopped is not None:
        return stopped
    objections = remarks.objections(lines)
    if not objections and ended.returncode == 0:
        objections = remarks.failures_on_stdout(_text(folder / STDOUT)[0])
    if objections or ended.returncode != 0:
        return _refused(ended.returncode, lines, objections)
    return None


def messages_in(folder: Path) -> tuple[str, ...]:
    """What the simulator said on standard error, line by line."""
    return remarks.clean(_text(folder / STDERR)[0])


def _text(path: Path) -> tuple[str, bool]:
    """Read a file of messages; of a long one the first whole lines, and that it was long."""
    with path.open("rb") as file:
        data = file.read(_MOST_MESSAGES + 1)
    if len(data) <= _MOST_MESSAGES:
        return data.decode("utf-8", "replace"), False
    return data[: data.rfind(b"\n") + 1].decode("utf-8", "replace"), True


def _stopped(ended: Ended, lines: tuple[str, ...], limits: Limits) -> Verdict | None:
    """Judge a process that did not end by itself; None if it did."""
    said = remarks.spoken(remarks.objections(lines))
    number = _signal(ended.returncode)
    if ended.timed_out or number == signal.SIGXCPU:
        return Verdict(
            Outcome.TIMED_OUT,
            f"no end within {limits.seconds:g} s; see that every analysis can end, or raise the time limit",
            said,
        )
    if number is None:
        return None
    if number == signal.SIGXFSZ:
        return Verdict(
            Outcome.INCOMPLETE,
            f"a file grew beyond {limits.file_bytes} bytes; ask for fewer points or raise that limit",
            said,
        )
    name = number.name if isinstance(number, signal.Signals) else "unknown"
    return Verdict(
        Outcome.CRASHED,
        f"the simulator was stopped by signal {int(number)} ({name}); "
        + (
            "see whether the machine ran out of memory"
            if number == signal.SIGKILL
            else "look for the line that it can't bear, or use another version"
        ),
        said,
    )


def _signal(returncode: int) -> signal.Signals | int | None:
    """Find the signal that ended a process, also one that a shell reports as 128 + its number."""
    number = -returncode if returncode < 0 else returncode - 128
    if number < 1 or number > 64:
        return None
    try:
        return signal.Signals(number)
    except ValueError:
        return number


def _refused(returncode: int, lines: tuple[str, ...], objections: tuple[str, ...]) -> Verdict:
    translation = messages.translate(lines) or messages.translate(objections)
    if translation is not None:
        return Verdict(translation.outcome, translation.meaning, translation.said)
    said = remarks.spoken(objections)
    first = said[0] if said else "it said nothing"
    if returncode == 0:
        meaning = f"the simulator has a reservation, so its numbers are not used: {first}"
    else:
        meaning = f"the simulator gave up with status {returncode}: {first}; see {STDERR} beside the deck"
    return Verdict(Outcome.REFUSED_BY_SIMULATOR, meaning, said)


def _plots(path: Path) -> tuple[Plot, ...]:
    # A link or a device in its place is not a result.
    if not path.is_file() or path.is_symlink():
        return ()
    return read_raw(path.read_bytes())


def _faults(expected: tuple[ExpectedPlot, ...], plots: tuple[Plot, ...]) -> Iterator[str]:
    found = [plot.name for plot in plots]
    wanted = [each.name for each in expected]
    if found != wanted:
        yield (
            f"expected the plots {', '.join(wanted) or 'none'}, found {', '.join(found) or 'none'};"
            f" see the deck's analyses and {STDERR} beside it"
        )
        return
    for each, plot in zip(expected, plots, strict=True):
        yield from _plot_faults(each, plot)


def _plot_faults(expected: ExpectedPlot, plot: Plot) -> Iterator[str]:
    import numpy as np

    if plot.points != expected.points:
        yield f"{plot.name}: expected {expected.points} points, found {plot.points}; see its range"
        return
    for variable, values in zip(plot.variables, plot.data.T, strict=True):
        if not np.isfinite(values).all():
            yield f"{plot.name}: {variable.name} is not finite at every point; see values and units"
    columns = {}
    for name in dict.fromkeys((*expected.columns, *expected.nonzero)):
        try:
            columns[name] = plot.column(name)
        except KeyError as error:
            yield f"{error.args[0]}; see that it is in the circuit"
    driven = [name for name in expected.nonzero if name in columns]
    if driven and not any(columns[name].any() for name in driven):
        yield f"{plot.name}: {', '.join(driven)} is 0 at every point; see that a source has an ac value"
