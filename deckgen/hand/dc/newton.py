"""Newton's iteration over a batch, with the device laws' own step limits.

Every device is replaced by its tangent and the network solved, again and again (L. W. Nagel, SPICE2, Memo
UCB/ERL M520, 1975, from memory). What is solved may be the network itself or a neighbour of it: sources
scaled, ports pulled towards given voltages, a leakage at drains and sources.
"""

from __future__ import annotations

from dataclasses import dataclass, fields, replace
from typing import Any

import numpy as np

from deckgen.hand.batch import SQUARE
from deckgen.hand.dc.reduced import Reduced
from deckgen.hand.dc.small import solve_rows
from deckgen.hand.laws.base import Array, Indices, Mask
from deckgen.hand.laws.parameters import SquareParameters

ITERATIONS = 40
_CLOSE, _CLOSER = 1e-9, 1e-14  # relative step after which an iteration is at rounding, and one to come
_LONGEST = (
    0.3  # longest step of a port as a share of the voltages at the start: feedback goes astray with more
)
_SHORT = 0.05  # V; two thermal voltages: no law takes a step of that length for too long
_WORTH_LEAVING = 0.75  # share of rows left below which the finished ones are set aside

LEAK = np.zeros((4, 4))
"""A conductance of 1 S from drain to bulk and one from source to bulk."""
LEAK[np.ix_([0, 3], [0, 3])] += [[1.0, -1.0], [-1.0, 1.0]]
LEAK[np.ix_([2, 3], [2, 3])] += [[1.0, -1.0], [-1.0, 1.0]]


@dataclass(frozen=True, slots=True)
class Problem:
    """What is solved for each row: ``matrix``·v + B·i(v) = ``sources``, by which TINY is no part of it.

    ``matrix`` (ports, ports, rows) and ``sources`` (ports, rows) may have a single row for all; ``leak`` is a
    conductance from each drain and source to the bulk [S].
    """

    reduced: Reduced
    parameters: SquareParameters
    rows: int
    matrix: Array
    sources: Array
    leak: float = 0.0

    def take(self, rows: Indices) -> Problem:
        """Some rows of it."""
        return Problem(
            self.reduced,
            take_rows(self.parameters, rows),
            len(rows),
            self.matrix if self.matrix.shape[2] == 1 else self.matrix[..., rows],
            self.sources if self.sources.shape[1] == 1 else self.sources[:, rows],
            self.leak,
        )

    def devices(self, point: Array) -> tuple[Array, Array]:
        """Terminal currents and conductances at terminal voltages (rows, devices, 4), leakage included."""
        found = SQUARE.evaluate(self.parameters, point)
        if not self.leak > 0.0:
            return found.currents, found.jacobian
        return found.currents + self.leak * (point @ LEAK), found.jacobian + self.leak * LEAK


def problem_of(reduced: Reduced, parameters: SquareParameters, rows: int) -> Problem:
    """The network itself."""
    return Problem(reduced, parameters, rows, reduced.held[..., None], reduced.sources[:, None])


def scaled(problem: Problem, share: Array) -> Problem:
    """All sources at a share (rows,) of their values."""
    return replace(problem, sources=problem.sources * share)


def pulled(problem: Problem, pull: Array, toward: Array) -> Problem:
    """Conductances ``pull`` [S] from the ports to voltages ``toward``, both (ports, rows)."""
    inject = problem.reduced.inject
    return replace(
        problem,
        matrix=problem.matrix + inject[..., None] * pull,
        sources=problem.sources + inject @ (pull * toward),
    )


def take_rows(parameters: SquareParameters, rows: Indices) -> SquareParameters:
    """Parameters of some rows; arrays without a row axis are kept as they are."""
    taken: dict[str, Any] = {}
    for item in fields(parameters):
        value = getattr(parameters, item.name)
        if value.ndim == 2 and value.shape[0] > 1:
            taken[item.name] = value[rows]
    return replace(parameters, **taken)


def newton(problem: Problem, start: Array, iterations: int = ITERATIONS) -> tuple[Array, Mask]:
    """Port voltages (ports, rows) from a start, and which rows converged."""
    v, done = start.copy(), np.zeros(problem.rows, dtype=bool)
    work, left = problem, np.arange(problem.rows)
    old, point, near = v, problem.reduced.at_devices(v), done
    free = ~done  # whether the devices stood where the nodes are: only then a short step means a solution
    before = np.zeros(problem.rows)
    span = np.max(v, axis=0, initial=0.0) - np.min(v, axis=0, initial=0.0)
    reach = _LONGEST * np.maximum(span, 1.0)
    for _ in range(iterations if problem.rows else 0):
        aim, ok = _step(work, old, point)
        new = np.clip(aim, old - reach, old + reach)
        terminals = work.reduced.at_devices(new)
        limited, freed = _limited(work, point, terminals)
        freed = freed & (np.abs(new - aim).max(axis=0, initial=0.0) <= 0.0)
        change, size = np.abs(new - old).max(axis=0, initial=0.0), np.abs(new).max(axis=0, initial=1.0)
        # In a quadratic iteration the next step would be change³/before².
        close = (change <= _CLOSE * size) | (change**3 <= _CLOSER * size * before**2)
        near = ok & free & freed & close
        old, point, free, before = new, limited, freed, change
        going = np.flatnonzero(ok & ~near)
        if len(going) < _WORTH_LEAVING * len(left) or len(going) == 0:
            v[:, left], done[left] = new, near
            work, left = work.take(going), left[going]
            old, point, near, free = old[:, going], point[going], near[going], free[going]
            reach, before = reach[going], before[going]
        if len(left) == 0:
            break
    v[:, left], done[left] = old, near
    return v, done


def _limited(problem: Problem, point: Array, terminals: Array) -> tuple[Array, Mask]:
    """Terminal voltages pulled back by the law where a step is too long, and rows in which none was."""
    if np.abs(terminals - point).max(initial=0.0) <= _SHORT:
        return terminals, np.ones(problem.rows, dtype=bool)
    limited = SQUARE.limit(problem.parameters, point, terminals)
    freed: Mask = np.abs(limited - terminals).max(axis=(1, 2), initial=0.0) <= 0.0
    return limited, freed


def _step(problem: Problem, old: Array, point: Array) -> tuple[Array, Mask]:
    """Solve the network with every device replaced by its tangent at ``point``."""
    reduced = problem.reduced
    currents, jacobian = problem.devices(point)
    constant = currents - np.einsum("rdij,rdj->rdi", jacobian, point)
    side = problem.sources + reduced.tiny @ old - reduced.entry @ constant.reshape(problem.rows, -1).T
    return solve_rows(reduced.jacobian(jacobian) + problem.matrix, side)
