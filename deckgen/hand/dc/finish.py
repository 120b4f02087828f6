"""From port voltages to the whole solution: all unknowns, polished, and what the nodes leave over."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from deckgen.hand.dc.newton import Problem
from deckgen.hand.dc.small import solve_rows
from deckgen.hand.laws.base import Array, Indices, Mask
from deckgen.hand.network import DcSystem

_ROUNDING = 2.0 * np.finfo(float).eps
_FEW_ROWS = 64  # batches up to this size are polished as a whole
_LEAST = 1e-14  # A, V; what never matters
_UNBALANCED = 2e-14  # share of what meets at a node; in larger ones the rows in which more is left over


@dataclass(slots=True)
class Solved:
    """Unknowns (rows, N), terminal voltages and currents (rows, devices, 4), largest residuals [A]."""

    unknowns: Array
    terminals: Array
    currents: Array
    residual: Array
    converged: Mask

    def put(self, rows: Indices, other: Solved) -> None:
        """Take over another solution of some rows."""
        for name in ("unknowns", "terminals", "currents", "residual", "converged"):
            getattr(self, name)[rows] = getattr(other, name)


def finish(problem: Problem, v: Array, converged: Mask) -> Solved:
    """The solution at port voltages (ports, rows), polished where currents don't balance well."""
    reduced = problem.reduced
    terminals = np.ascontiguousarray(reduced.at_devices(v))
    currents, jacobian = problem.devices(terminals)
    unknowns = reduced.all_unknowns(v, currents.reshape(problem.rows, -1).T)
    residual, share = _left_over(reduced.system, unknowns, currents)
    solved = Solved(unknowns, terminals, currents, residual, converged.copy())
    _polish(problem, solved, jacobian, share)
    _clear_rounding(reduced.system, solved.unknowns)
    return solved


def _left_over(system: DcSystem, unknowns: Array, currents: Array) -> tuple[Array, Array]:
    """Largest sum of currents into a node [A] of each row, and the largest share of what meets anywhere."""
    flat, x = currents.reshape(len(currents), -1).T, unknowns.T
    left = np.abs(system.matrix @ x + system.incidence @ flat - system.sources[:, None])
    meets = np.abs(system.matrix) @ np.abs(x) + system.incidence @ np.abs(flat)
    meets += np.abs(system.sources)[:, None] + np.finfo(float).tiny
    return (
        left[: len(system.layout.nodes)].max(axis=0, initial=0.0),
        (np.maximum(left - _LEAST, 0.0) / meets).max(axis=0, initial=0.0),
    )


def _polish(problem: Problem, solved: Solved, jacobian: Array, share: Array) -> None:
    """One Newton step on all equations, in place: the elimination spreads the rounding of stiff nodes."""
    unbalanced = share > _UNBALANCED if len(share) > _FEW_ROWS else True
    rows = np.flatnonzero(solved.converged & unbalanced)
    if len(rows) == 0:
        return
    system, some = problem.reduced.system, problem.take(rows)
    pins, terminals, jacobian = system.incidence, solved.terminals[rows], jacobian[rows]
    constant = solved.currents[rows] - np.einsum("rdij,rdj->rdi", jacobian, terminals)
    matrix = np.repeat(system.matrix[..., None], len(rows), axis=2)
    for k in range(terminals.shape[1]):
        of_device = pins[:, 4 * k : 4 * k + 4]
        matrix += (of_device @ jacobian[:, k] @ of_device.T).transpose(1, 2, 0)
    side = system.sources[:, None] - pins @ constant.reshape(len(rows), -1).T
    better, good = solve_rows(matrix, side)
    at = (better.T @ pins).reshape(terminals.shape)
    flows, _ = some.devices(at)
    residual, now = _left_over(system, better.T, flows)
    good &= now <= share[rows]
    solved.put(rows[good], Solved(better.T[good], at[good], flows[good], residual[good], good[good]))


def _clear_rounding(system: DcSystem, unknowns: Array) -> None:
    """Zero, in place, node voltages that are no more than the rounding of the row's largest one."""
    volts = unknowns[:, : len(system.layout.nodes)]
    largest = np.abs(volts).max(axis=1, initial=0.0)
    volts[np.abs(volts) <= _ROUNDING * largest[:, None]] = 0.0
