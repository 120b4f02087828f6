"""What a simulator can do of the things deckgen stands on, found by trying them."""

from __future__ import annotations

import math
import tempfile
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

from deckgen.errors import Outcome
from deckgen.simulator.job import Execution, ExpectedPlot, Job, Limits
from deckgen.simulator.locate import Simulator
from deckgen.simulator.run import run

_SECONDS = 10.0
_CLOSE = 1e-9
_OP = "Operating Point"
_AC = "AC Analysis"


@dataclass(frozen=True, slots=True)
class Capability:
    """One thing that deckgen needs: does it work, and what was seen."""

    name: str
    works: bool
    detail: str


@dataclass(frozen=True, slots=True)
class _Trial:
    name: str
    job: Job
    look: Callable[[Execution], tuple[bool, str]]


def capabilities(simulator: Simulator) -> tuple[Capability, ...]:
    """Try each thing with a small deck, in a temporary folder that is removed afterwards."""
    found: list[Capability] = []
    with tempfile.TemporaryDirectory(prefix="deckgen-") as folder:
        for number, trial in enumerate(_trials()):
            execution = run(
                trial.job,
                simulator=simulator,
                folder=Path(folder) / str(number),
                limits=Limits(seconds=_SECONDS),
            )
            works, detail = trial.look(execution)
            found.append(Capability(trial.name, works, detail))
    return tuple(found)


def _deck(title: str, circuit: str, commands: str) -> str:
    control = f"set filetype=binary\nset appendwrite\n{commands}\nquit"
    return f"* {title}\n{circuit}\n.control\n{control}\n.endc\n.end\n"


def _trials() -> tuple[_Trial, ...]:
    op = (ExpectedPlot(_OP, 1, ("v(out)",)),)
    write_op = "op\nwrite out.raw v(out)"
    transistor = "vdd d 0 5\nvg g 0 2\nm1 d g 0 0 nm w=10u l=1u\n.model nm nmos (level=1 vto=1 kp=20u"
    corner = repr(500 / math.pi)
    return (
        _Trial(
            "batch run with deckgen's own commands",
            Job(_deck("divider", "v1 in 0 9\nr1 in out 2k\nr2 out 0 1k", write_op), op),
            # 1e-12 S from every node to ground takes 2e-9 of the exact 3 V at the most.
            lambda execution: _value(execution, 0, "v(out)", 3.0),
        ),
        _Trial(
            "ac analysis, complex results",
            Job(
                _deck(
                    "low pass",
                    "v1 in 0 dc 0 ac 1\nr1 in out 1k\nc1 out 0 1u",
                    f"{write_op}\nac lin 1 {corner} {corner}\nwrite out.raw frequency v(out)",
                ),
                (*op, ExpectedPlot(_AC, 1, ("frequency", "v(out)"), ("v(out)",))),
            ),
            lambda execution: _value(execution, 1, "v(out)", 0.5 - 0.5j),
        ),
        _Trial(
            "level-1 MOSFET, device parameters",
            Job(
                _deck("transistor", f"{transistor})", "op\nwrite out.raw @m1[gm]"),
                (ExpectedPlot(_OP, 1, ("@m1[gm]",)),),
            ),
            lambda execution: _value(execution, 0, "@m1[gm]", 200e-6),
        ),
        _Trial(
            "unknown model parameters are refused",
            Job(_deck("misspelt", f"{transistor} lamda=0.1)\nr1 d out 1\nr2 out 0 1", write_op), op),
            lambda execution: _ends(execution, Outcome.REFUSED_BY_SIMULATOR),
        ),
        _Trial(
            "a circuit without an operating point has none",
            Job(_deck("floating", "v1 in 0 1\nc1 in out 1n\nc2 out 0 1n", write_op), op),
            lambda execution: _ends(execution, Outcome.NO_CONVERGENCE),
        ),
    )


def _value(execution: Execution, plot: int, name: str, right: complex) -> tuple[bool, str]:
    if execution.outcome is not Outcome.MEASURED:
        return False, f"{execution.outcome}: {execution.meaning}"
    value = complex(execution.plots[plot].column(name)[0])
    shown = f"{value:.9g}" if value.imag else f"{value.real:.9g}"
    works = abs(value - right) <= _CLOSE * abs(right)
    return works, f"{name} = {shown}" + ("" if works else f", should be {right:.9g}")


def _ends(execution: Execution, outcome: Outcome) -> tuple[bool, str]:
    """Tell whether the run ended so, and without the transient run that must not happen."""
    if execution.outcome is not outcome:
        return False, f"{execution.outcome} instead of {outcome}"
    if any("Transient op" in line for line in execution.said):
        return False, "fell back to a transient run"
    return True, str(outcome)
