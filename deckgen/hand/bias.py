"""Bias point of a circuit, for many rows at once: Kirchhoff's current law with the device laws.

The linear part is eliminated once; Newton runs on the voltages of the nodes that transistors hang on. Where
it fails, conductances that vanish (gmin stepping), sources that rise (source stepping) and paths that may
turn back (continuation by arc length) stand behind it. A single row is looked at from several starts where a
network can have several operating points. Capacitors are open, inductors short.
"""

from __future__ import annotations

from dataclasses import dataclass, fields, replace
from functools import lru_cache

import numpy as np

from deckgen.circuit.model import GROUND, Circuit
from deckgen.errors import NoBiasError
from deckgen.hand.batch import Batch, prepare_devices
from deckgen.hand.dc import ladders, points, stability, why
from deckgen.hand.dc.finish import Solved, finish
from deckgen.hand.dc.loops import has_gaining_loop
from deckgen.hand.dc.newton import Problem, problem_of, take_rows
from deckgen.hand.dc.reduced import OpenEquationsError, Reduced, eliminate
from deckgen.hand.dc.starts import switch_matrix
from deckgen.hand.effects import Effect
from deckgen.hand.laws.base import Array, Indices, Mask
from deckgen.hand.laws.parameters import SquareParameters
from deckgen.hand.network import Layout, dc_system

_CHUNK = 8_192  # rows whose arrays stay in the cache


@dataclass(frozen=True, slots=True)
class BiasPoint:
    """Solutions of all rows; arrays are read-only.

    ``unknowns`` (rows, N): node voltages [V], then branch currents [A]; ``terminals`` (rows, devices, 4)
    [V]; ``currents`` (rows, devices, 4) [A] into the terminals; ``residual`` the largest Kirchhoff
    residual of each row [A]. Of a single row ``stable`` says whether the network stays there on its own, and
    ``others`` are its other operating points, as far as they were found.
    """

    layout: Layout
    parameters: SquareParameters
    unknowns: Array
    terminals: Array
    currents: Array
    residual: Array
    converged: Mask
    stable: bool = True
    others: tuple[BiasPoint, ...] = ()

    def row(self, number: int) -> BiasPoint:
        """One row, as a solution of its own."""
        rows = np.asarray([number])
        return replace(
            self,
            parameters=take_rows(self.parameters, rows),
            unknowns=self.unknowns[rows],
            terminals=self.terminals[rows],
            currents=self.currents[rows],
            residual=self.residual[rows],
            converged=self.converged[rows],
        )

    def voltage(self, node: str, row: int = 0) -> float:
        """Voltage of a node to ground [V]."""
        return 0.0 if node == GROUND else float(self.unknowns[row, self.layout.node(node)])

    def branch_current(self, name: str, row: int = 0) -> float:
        """Current through a voltage source or inductor from its first node to its second [A]."""
        return float(self.unknowns[row, self.layout.branch(name)])


def solve_bias(
    circuit: Circuit, batch: Batch, *, require: bool = True, near: BiasPoint | None = None
) -> BiasPoint:
    """Bias point of every row, from a cold start: all transistors off, or from the first row of ``near``.

    Of a single row from a cold start all operating points are looked for where there may be several; the
    first is the one that the cold start leads to, unless that is unstable: then the stable one nearest to it.
    Raises NoBiasError where no row can have one, and when a row has none and ``require`` is set.
    """
    conducting = np.asarray(batch.switches()[Effect.BULK_JUNCTIONS][:, 0], bool)
    network = _network(circuit, junctions=bool(conducting.any()))
    reduced, parameters = network.reduced, prepare_devices(circuit, batch)
    if batch.rows == 1 and near is None and network.may_have_several:
        point = _from_starts(network, parameters)
    else:
        start = None if near is None else near.unknowns[0, reduced.ports]
        pieces = []
        with np.errstate(all="ignore"):  # absurd values overflow; such rows don't converge
            for first in range(0, batch.rows, _CHUNK):
                rows = np.arange(first, min(first + _CHUNK, batch.rows))
                pieces.append(_solve_rows(network, take_rows(parameters, rows), len(rows), start))
        point = _as_point(reduced, parameters, pieces)
    if not conducting.all() and why.floating_nodes(circuit, junctions=False):
        # A bulk that hangs on its junctions alone has no voltage in the rows that leave them out.
        point = replace(point, converged=point.converged & conducting)
    if require and not point.converged.all():
        raise NoBiasError(_reason(circuit, reduced, point.row(int(point.converged.argmin()))))
    return point


def with_other_points(circuit: Circuit, point: BiasPoint) -> BiasPoint:
    """A single row with its other operating points; the stable one nearest to it comes first."""
    network = _network(circuit, junctions=True)
    if not network.may_have_several:
        return point
    with np.errstate(all="ignore"):
        return _with_others(network, point, None)


@dataclass(frozen=True, slots=True)
class _Network:
    """The linear part, eliminated, and what the graph says.

    ``hanging``: some nodes hang on channels alone; ``dead_ends``: ports at which a single channel ends.
    """

    reduced: Reduced
    hanging: bool
    dead_ends: Indices
    may_have_several: bool


@lru_cache(maxsize=16)
def _network(circuit: Circuit, *, junctions: bool) -> _Network:
    """Raises NoBiasError where the network can have no bias; ``junctions``: some row has bulk junctions.

    Kept: one analysis solves the same network several times.
    """
    floating = why.floating_nodes(circuit, junctions=junctions)
    if floating:
        raise NoBiasError(why.no_path(floating))
    try:
        reduced = eliminate(dc_system(circuit))
    except OpenEquationsError as error:
        raise NoBiasError(why.left_open(error.nodes, error.branches)) from error
    dead_ends = [reduced.system.layout.node(node) for node in why.dead_ends(circuit)]
    return _Network(
        reduced,
        hanging=bool(why.hanging_nodes(circuit, channels=False)),
        dead_ends=np.flatnonzero(np.isin(reduced.ports, dead_ends)),
        may_have_several=why.may_have_several(circuit) and has_gaining_loop(reduced),
    )


def _from_starts(network: _Network, parameters: SquareParameters) -> BiasPoint:
    """A single row of a network that may have several operating points."""
    problem = problem_of(network.reduced, parameters, 1)
    with np.errstate(all="ignore"):
        v, done, found = points.from_starts(problem)
        if not done[0]:
            v, done = ladders.solve(problem)
        point = _as_point(network.reduced, parameters, [_settle(network, problem, v, done)])
        return _with_others(network, point, found) if point.converged[0] else point


def _with_others(network: _Network, point: BiasPoint, found: list[Array] | None) -> BiasPoint:
    reduced = network.reduced
    problem, known = problem_of(reduced, point.parameters, 1), point.unknowns[0, reduced.ports]
    all_points = [known, *points.other_points(problem, known, found)]
    every = [point] + [
        _as_point(reduced, point.parameters, [finish(problem, v[:, None], np.ones(1, dtype=bool))])
        for v in all_points[1:]
    ]
    stable = [stability.is_stable(problem, v) for v in all_points]
    every = [replace(one, stable=flag) for one, flag in zip(every, stable, strict=True)]
    away = [np.abs(v - known).max() if flag else np.inf for v, flag in zip(all_points, stable, strict=True)]
    chosen = every.pop(int(np.argmin(away)) if any(stable) else 0)
    return replace(chosen, others=tuple(every))


def _solve_rows(network: _Network, parameters: SquareParameters, rows: int, start: Array | None) -> Solved:
    """All rows of a chunk, from a cold start or from the same port voltages."""
    problem = problem_of(network.reduced, parameters, rows)
    first = None if start is None else np.repeat(start[:, None], rows, axis=1)
    return _settle(network, problem, *ladders.solve(problem, first))


def _settle(network: _Network, problem: Problem, v: Array, done: Mask) -> Solved:
    """The whole solution; where cut-off channels leave a node open, leakage sets its voltage."""
    solved = finish(problem, v, done)
    if not network.hanging:
        return solved
    loose = stability.loose_ports(problem, stability.linearized(problem, v))
    solved.converged &= ~loose[network.dead_ends].any(axis=0)
    rows = np.flatnonzero(loose.any(axis=0) & solved.converged)
    if len(rows):
        leaking = replace(problem.take(rows), leak=ladders.LEAKAGE)
        v, done = ladders.solve(leaking, v[:, rows])
        done &= ~stability.flooded_rows(problem.take(rows), v)
        solved.put(rows, finish(leaking, v, done))
    return solved


def _as_point(reduced: Reduced, parameters: SquareParameters, pieces: list[Solved]) -> BiasPoint:
    """One read-only value from the solutions of all chunks."""
    unknowns, terminals, currents, residual, converged = (
        np.concatenate([getattr(piece, name) for piece in pieces])
        for name in ("unknowns", "terminals", "currents", "residual", "converged")
    )
    read_only = [getattr(parameters, item.name) for item in fields(parameters)]
    for array in (unknowns, terminals, currents, residual, converged, *read_only):
        array.flags.writeable = False
    return BiasPoint(reduced.system.layout, parameters, unknowns, terminals, currents, residual, converged)


def _reason(circuit: Circuit, reduced: Reduced, failed: BiasPoint) -> str:
    """One line on why a row has no bias point."""
    hanging = why.hanging_nodes(circuit, channels=True)
    if hanging:
        return why.no_path(hanging)
    dead_ends = why.dead_ends(circuit)
    if dead_ends:
        return why.no_current(dead_ends)
    problem, nodes = problem_of(reduced, failed.parameters, 1), reduced.system.layout.nodes
    closed = switch_matrix(problem, np.ones((1, reduced.devices), dtype=bool))
    undetermined = reduced.ports[stability.undetermined_ports(problem, closed)]
    if len(undetermined):
        return why.left_open([nodes[port] for port in undetermined], ())
    with np.errstate(all="ignore"):
        port = ladders.runaway(problem)
    return why.not_found(circuit, None if port is None else nodes[reduced.ports[port]])
