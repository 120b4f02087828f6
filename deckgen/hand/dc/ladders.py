"""All ways to a solution in turn: Newton from a cold start, then continuation for the rows that need it."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np

from deckgen.hand.dc.arclength import follow
from deckgen.hand.dc.continuation import climb, conductances_vanish
from deckgen.hand.dc.newton import Problem, newton, scaled
from deckgen.hand.dc.starts import along_channel, cold_start
from deckgen.hand.laws.base import Array, Mask

LEAKAGE = 1e-12
"""From drains and sources to the bulk [S], where nothing else sets a node's voltage: a simulator's GMIN."""

_ROUNDING_CORNERS = 1e-9  # S; with less, a path turns sharply where a lone channel begins to conduct
_FEW_ON_LINE = 8  # rows; with more, Newton costs less than trying currents
_RUNAWAY = 1e5  # V

Way = Callable[[Problem], tuple[Array, Mask]]


def by_conductances(problem: Problem) -> tuple[Array, Mask]:
    """Conductances to ground that vanish (gmin stepping)."""
    return climb(problem, conductances_vanish)[:2]


def by_sources(problem: Problem) -> tuple[Array, Mask]:
    """Sources that rise from zero, where leakage keeps cut-off transistors from opening nodes."""
    v, good, _ = climb(replace(problem, leak=max(problem.leak, LEAKAGE)), scaled)
    return v, good


def by_arc_length(problem: Problem) -> tuple[Array, Mask]:
    """Conductances that vanish, on a path that may turn back."""
    return follow(replace(problem, leak=_ROUNDING_CORNERS), conductances_vanish)


def by_arc_length_of_sources(problem: Problem) -> tuple[Array, Mask]:
    """Sources that rise, on a path that may turn back."""
    return follow(replace(problem, leak=_ROUNDING_CORNERS), scaled)


LADDERS: tuple[Way, ...] = (by_conductances, by_sources, by_arc_length, by_arc_length_of_sources)
_FOR_FEW = (by_arc_length, by_arc_length_of_sources)
_FEW = 256  # rows; where more of a batch are left, most of them have no solution


def solve(problem: Problem, start: Array | None = None) -> tuple[Array, Mask]:
    """Port voltages (ports, rows) and which rows converged; from a cold start unless another is given."""
    if start is None:
        alone = problem.reduced.devices == 1 and problem.rows <= _FEW_ON_LINE
        start = along_channel(problem) if alone else cold_start(problem)
    v, done = newton(problem, start)
    for way in LADDERS:
        missing = np.flatnonzero(~done)
        if len(missing) == 0:
            break
        if way in _FOR_FEW and len(missing) > _FEW:
            continue
        rows = problem.take(missing)
        near, ok = way(rows)
        # Without what the way added: leakage, above all.
        found, good = newton(rows, near)
        good &= ok
        v[:, missing[good]], done[missing[good]] = found[:, good], True
    return v, done


def runaway(problem: Problem) -> int | None:
    """The port whose current only a leakage takes, at an absurd voltage; ``problem`` has one row."""
    v, done = solve(replace(problem, leak=LEAKAGE))
    port = int(np.abs(v[:, 0]).argmax())
    return port if done[0] and abs(v[port, 0]) > _RUNAWAY else None
