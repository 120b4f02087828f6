"""Decks for the simulator, and simulators that misbehave."""

from __future__ import annotations

import shlex
import time
from pathlib import Path

from deckgen.errors import Outcome
from deckgen.simulator import Execution, ExpectedPlot, Job, Simulator

DIVIDER = "v1 in 0 dc 1 ac 1\nr1 in out 1k\nr2 out 0 1k\nc1 out 0 1n"
TRANSISTOR = "vdd vdd 0 10\nvin g 0 dc 2 ac 1\nrd vdd out 10k\nm1 out g 0 0 nm w=10u l=1u"
CARD = ".model nm nmos (level=1 vto=1 kp=1e-4)"
STAGE = f"{TRANSISTOR}\n{CARD}"

OP = ExpectedPlot("Operating Point", 1, ("v(out)",))
AC = ExpectedPlot("AC Analysis", 61, ("frequency", "v(out)"), ("v(out)",))
OP_AND_AC = "op\nwrite out.raw v(out)\nac dec 10 1 1meg\nwrite out.raw frequency v(out)"


def deck(circuit: str, commands: str = OP_AND_AC, *, filetype: str = "binary") -> str:
    """Put a circuit and the commands of a control block together."""
    control = f".control\nset filetype={filetype}\nset appendwrite\n{commands}\nquit\n.endc"
    return f"* under test\n{circuit}\n{control}\n.end\n"


GOOD = Job(deck(DIVIDER), (OP, AC))


def refused(execution: Execution, outcome: Outcome) -> str:
    """See that a run ended so, and without results; give the meaning."""
    assert (execution.outcome, execution.plots) == (outcome, ())
    assert execution.meaning.isprintable()
    assert execution.meaning
    return execution.meaning


def fake(folder: Path, script: str) -> Simulator:
    """Write a shell script that stands for a simulator; ``$@`` are the arguments of the real one."""
    path = folder / "fake-simulator"
    path.write_text(f"#!/bin/sh\n{script}\n", encoding="utf-8")
    path.chmod(0o755)
    return Simulator(name="ngspice", version="0", path=str(path))


def wrapped(folder: Path, simulator: Simulator, *, before: str = "", after: str = "") -> Simulator:
    """Run the real simulator between two pieces of shell script."""
    return fake(folder, f'{before}\n{shlex.quote(simulator.path)} "$@"\n{after}')


def ends(pid: int, *, within: float = 5.0) -> bool:
    """Tell whether a process ends in time; a dead entry in the table counts as ended."""
    limit = time.monotonic() + within
    while _is_running(pid):
        if time.monotonic() > limit:
            return False
        time.sleep(0.005)
    return True


def _is_running(pid: int) -> bool:
    try:
        return Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()[0] not in ("Z", "X")
    except OSError:
        return False
