"""From a problem that is easy to the one that is asked, in steps that adapt.

Sources rise, or conductances vanish.

Each row goes at its own pace: a step that Newton can't follow is tried again shorter, from the last point
that was solved (L. W. Nagel, SPICE2, Memo UCB/ERL M520, 1975; adaptive steps are common practice).
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from deckgen.hand.dc.newton import Problem, newton, pulled
from deckgen.hand.dc.starts import cold_start
from deckgen.hand.laws.base import Array, Mask

Family = Callable[[Problem, Array], Problem]
"""The problem at a share (rows,) of the way: at 0 an easy one, at 1 the one that is asked."""

_FIRST, _LEAST, _LONGEST = 0.1, 1e-6, 0.25
_FASTER, _SLOWER = 2.0, 0.25
_PATIENCE = 25  # iterations for one step
_LONG_WAY = 200  # steps
_DECADES = 12.0
_STRONGEST = 1e-1  # S


def conductances_vanish(problem: Problem, share: Array) -> Problem:
    """A conductance from every port to ground: large, falling by decades, none at the end."""
    conductance = np.where(share < 1.0, _STRONGEST * 10.0 ** (-_DECADES * share), 0.0)
    pull = np.broadcast_to(conductance, (len(problem.reduced.ports), problem.rows))
    return pulled(problem, pull, np.zeros_like(pull))


def climb(problem: Problem, family: Family) -> tuple[Array, Mask, Array]:
    """Port voltages at the end of the way, which rows got there, and how far the others came."""
    reached, step = np.zeros(problem.rows), np.full(problem.rows, _FIRST)
    easy = family(problem, reached)
    v, going = newton(easy, cold_start(easy))
    for _ in range(_LONG_WAY):
        rows = np.flatnonzero(going)
        if len(rows) == 0:
            break
        goal = np.minimum(reached[rows] + step[rows], 1.0)
        found, good = newton(family(problem.take(rows), goal), v[:, rows], _PATIENCE)
        v[:, rows[good]], reached[rows[good]] = found[:, good], goal[good]
        step[rows] = np.minimum(step[rows] * np.where(good, _FASTER, _SLOWER), _LONGEST)
        going = going & (reached < 1.0) & (step >= _LEAST)
    return v, reached >= 1.0, reached
