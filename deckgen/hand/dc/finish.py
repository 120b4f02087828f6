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
_UNBALANCED = 1e-14  # A; in larger ones the rows whose currents balance worse


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
    solved = Solved(unknowns, terminals, currents, np.zeros(problem.rows), converged.copy())
    solved.residual = _left_over(reduced.system, unknowns, currents)
    _polish(problem, solved, jacobian)
    _clear_rounding(reduced.system, solved.unknowns)
    return solved


def _left_over(system: DcSystem, unknowns: Array, currents: Array) -> Array:
    """Largest sum of currents into a node [A], row by row."""
    flat = currents.reshape(len(currents), -1)
    left = system.matrix @ unknowns.T + system.incidence @ flat.T - system.sources[:, None]
    largest: Array = np.abs(left[: len(system.layout.nodes)]).max(axis=0, initial=0.0)
    return largest


def _polish(problem: Problem, solved: Solved, jacobian: Array) -> None:
    """One Newton step on all equations, in place: the elimination spreads the rounding of stiff nodes."""
    unbalanced = solved.residual > _UNBALANCED if len(solved.residual) > _FEW_ROWS else True
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
    residual = _left_over(system, better.T, flows)
    good &= residual <= solved.residual[rows]
    solved.put(rows[good], Solved(better.T[good], at[good], flows[good], residual[good], good[good]))


def _clear_rounding(system: DcSystem, unknowns: Array) -> None:
    """Zero, in place, node voltages that are no more than the rounding of the row's largest one."""
    volts = unknowns[:, : len(system.layout.nodes)]
    largest = np.abs(volts).max(axis=1, initial=0.0)
    volts[np.abs(volts) <= _ROUNDING * largest[:, None]] = 0.0
