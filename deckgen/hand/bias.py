"""Bias point of a circuit, for many rows at once: Kirchhoff's current law with the device laws.

The linear part is eliminated once, down to the voltages of the nodes that transistors hang on; Newton
runs on these, over the rows that have not converged, with the laws' own step limits. Where it fails,
conductances from drain to source that shrink to nothing (gmin stepping) and supplies that rise from
zero (source stepping) stand behind it. Capacitors are open, inductors short.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, fields, replace
from typing import Any

import numpy as np

from deckgen.circuit.model import GROUND, Capacitor, Circuit, Inductor, Mosfet, Resistor, VoltageSource
from deckgen.errors import NoBiasError
from deckgen.hand.batch import SQUARE, Batch, prepare_devices
from deckgen.hand.laws.base import Array, Indices, Mask
from deckgen.hand.laws.square import SquareParameters
from deckgen.hand.network import DcSystem, Layout, dc_system

_ITERATIONS = 60
_CLOSE = 1e-10  # relative step below which one more quadratic step reaches rounding
_SINGULAR = 1e-15
_LEAST_CONDUCTANCE = 1e-16  # S; what is below, a thousandth of gmin and less, is no path
_GMIN_LADDER = tuple(10.0**-decade for decade in range(2, 13))
_SOURCE_LADDER = tuple(np.linspace(0.05, 1.0, 20))
_CHUNK = 20_000
_ROUNDING = 2.0 * np.finfo(float).eps
_FEW_ROWS = 64  # batches up to this size are polished as a whole
_UNBALANCED = 1e-13  # A; in larger ones the rows whose currents balance worse


@dataclass(frozen=True, slots=True)
class BiasPoint:
    """Solutions of all rows; arrays are read-only.

    ``unknowns`` (rows, N): node voltages [V], then branch currents [A]; ``terminals`` (rows, devices, 4)
    [V]; ``currents`` (rows, devices, 4) [A] into the terminals; ``residual`` the largest Kirchhoff
    residual of each row [A].
    """

    layout: Layout
    parameters: SquareParameters
    unknowns: Array
    terminals: Array
    currents: Array
    residual: Array
    converged: Mask

    def row(self, number: int) -> BiasPoint:
        """One row, as a solution of its own."""
        rows = np.asarray([number])
        return replace(
            self,
            parameters=_take(self.parameters, rows),
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


@dataclass(frozen=True, slots=True)
class _Reduced:
    """Y·v = s - B·i in the port voltages v alone, and the way back to all unknowns."""

    system: DcSystem
    ports: Indices
    inner: Indices
    matrix: Array
    sources: Array
    entry: Array
    pick: Array
    fold: Array
    back: Array
    triangle: Array


def solve_bias(circuit: Circuit, batch: Batch, *, require: bool = True) -> BiasPoint:
    """Bias point of every row. Raises NoBiasError when a row has none and ``require`` is set."""
    system = dc_system(circuit)
    reduced = _eliminate(system)
    parameters = prepare_devices(circuit, batch)
    pieces = []
    with np.errstate(all="ignore"):  # absurd values overflow; such rows don't converge
        for start in range(0, batch.rows, _CHUNK):
            rows = np.arange(start, min(start + _CHUNK, batch.rows))
            pieces.append(_solve_rows(reduced, _take(parameters, rows), len(rows)))
    unknowns = np.concatenate([piece[0] for piece in pieces])
    terminals = np.concatenate([piece[1] for piece in pieces])
    currents = np.concatenate([piece[2] for piece in pieces])
    converged = np.concatenate([piece[3] for piece in pieces])
    _clear_rounding(system, unknowns)
    residual = _kirchhoff_residual(system, unknowns, currents)
    if require and not converged.all():
        raise NoBiasError(_why(circuit))
    read_only = [getattr(parameters, item.name) for item in fields(parameters)]
    for array in (unknowns, terminals, currents, residual, converged, *read_only):
        array.flags.writeable = False
    return BiasPoint(system.layout, parameters, unknowns, terminals, currents, residual, converged)


def _clear_rounding(system: DcSystem, unknowns: Array) -> None:
    """Zero, in place, node voltages that are no more than the rounding of the row's largest one."""
    volts = unknowns[:, : len(system.layout.nodes)]
    largest = np.abs(volts).max(axis=1, initial=0.0)
    volts[np.abs(volts) <= _ROUNDING * largest[:, None]] = 0.0


def _eliminate(system: DcSystem) -> _Reduced:
    """Split off the unknowns that no device touches, by an orthogonal elimination of their columns."""
    touched = system.incidence.any(axis=1)
    ports, inner = np.flatnonzero(touched), np.flatnonzero(~touched)
    columns = system.matrix[:, inner]
    # Each column against its own size: one small resistance must not make other nodes look floating.
    size = np.abs(columns).max(axis=0, initial=0.0)
    full, triangle = np.linalg.qr(columns, mode="complete")
    diagonal = np.abs(np.diagonal(triangle))
    if np.any(diagonal <= np.maximum(_SINGULAR * size, _LEAST_CONDUCTANCE)):
        raise NoBiasError(_floating(system, columns, inner))
    keep, drop = full[:, len(inner) :], full[:, : len(inner)]
    entry, pick = keep.T @ system.incidence, system.incidence[ports].T
    return _Reduced(
        system=system,
        ports=ports,
        inner=inner,
        matrix=keep.T @ system.matrix[:, ports],
        sources=keep.T @ system.sources,
        entry=entry,
        pick=pick,
        fold=_fold(entry, pick),
        back=drop.T,
        triangle=triangle[: len(inner)],
    )


def _fold(entry: Array, pick: Array) -> Array:
    """The map from all devices' Jacobians to the change of the port matrix, as one matrix.

    Row (device, i, j) holds what d current(i)/d voltage(j) adds to each entry: one product for a whole
    batch instead of two small ones a row.
    """
    devices = len(pick) // 4
    by_device = entry.reshape(len(entry), devices, 4), pick.reshape(devices, 4, pick.shape[1])
    folded: Array = np.einsum("eki,kjp->kijep", *by_device)
    return folded.reshape(16 * devices, entry.shape[0] * pick.shape[1])


def _floating(system: DcSystem, columns: Array, inner: Indices) -> str:
    """Which unknowns the equations leave open: nodes without a DC path, or a loop of sources."""
    null = np.abs(np.linalg.svd(columns)[2][-1])
    names = (*system.layout.nodes, *system.layout.branches)
    involved = [names[inner[i]] for i in np.flatnonzero(null > 0.1 * null.max())]
    if all(name in system.layout.branches for name in involved):
        return f"a loop of voltage sources or inductors: {', '.join(involved)}; put a resistance into it"
    return _no_path(involved)


def _no_path(nodes: Sequence[str]) -> str:
    return f"no DC path to ground from node {', '.join(nodes)}; add one (a resistor)"


def _take(parameters: SquareParameters, rows: Indices) -> SquareParameters:
    """Parameters of some rows; arrays without a row axis are kept as they are."""
    taken: dict[str, Any] = {}
    for item in fields(parameters):
        value = getattr(parameters, item.name)
        if value.ndim == 2 and value.shape[0] > 1:
            taken[item.name] = value[rows]
    return replace(parameters, **taken)


def _solve_rows(
    reduced: _Reduced, parameters: SquareParameters, rows: int
) -> tuple[Array, Array, Array, Mask]:
    """Newton from a cold start, then the ladders for the rows that need them."""
    v = np.zeros((rows, len(reduced.ports)))
    v, done = _newton(reduced, parameters, v)
    if not done.all():
        for ladder in (_by_gmin, _by_sources):
            missing = np.flatnonzero(~done)
            if len(missing) == 0:
                break
            solved, ok = ladder(reduced, _take(parameters, missing), len(missing))
            v[missing[ok]], done[missing[ok]] = solved[ok], True
    terminals = (v @ reduced.pick.T).reshape(rows, -1, 4)
    currents = SQUARE.evaluate(parameters, terminals).currents
    unknowns = _all_unknowns(reduced, v, currents.reshape(rows, -1))
    _polish(reduced.system, parameters, unknowns, terminals, currents, done)
    return unknowns, terminals, currents, done


def _polish(
    system: DcSystem,
    parameters: SquareParameters,
    unknowns: Array,
    terminals: Array,
    currents: Array,
    done: Mask,
) -> None:
    """One Newton step on the full equations, in place: the elimination spreads the rounding of stiff nodes.

    In a large batch only for the rows that need it.
    """
    residual = _kirchhoff_residual(system, unknowns, currents)
    wanted = done if len(done) <= _FEW_ROWS else done & (residual > _UNBALANCED)
    rows = np.flatnonzero(wanted)
    if len(rows) == 0:
        return
    subset = parameters if len(rows) == len(done) else _take(parameters, rows)
    pins = system.incidence
    found = SQUARE.evaluate(subset, terminals[rows])
    constant = found.currents - (found.jacobian @ terminals[rows][..., None])[..., 0]
    devices = terminals.shape[1]
    matrix = np.broadcast_to(system.matrix, (len(rows), *system.matrix.shape)).copy()
    for k in range(devices):
        of_device = pins[:, 4 * k : 4 * k + 4]
        matrix += of_device @ found.jacobian[:, k] @ of_device.T
    better, good = _solve(matrix, system.sources - constant.reshape(len(rows), -1) @ pins.T)
    at = (better @ pins).reshape(len(rows), devices, 4)
    flows = SQUARE.evaluate(subset, at).currents
    good &= _kirchhoff_residual(system, better, flows) <= residual[rows]
    chosen = rows[good]
    unknowns[chosen], terminals[chosen], currents[chosen] = better[good], at[good], flows[good]


def _newton(
    reduced: _Reduced,
    parameters: SquareParameters,
    start: Array,
    *,
    gmin: float = 0.0,
    scale: float = 1.0,
) -> tuple[Array, Mask]:
    """Newton with limited steps; returns port voltages and which rows converged."""
    rows, devices = len(start), reduced.pick.shape[0] // 4
    v = start.copy()
    done = np.zeros(rows, dtype=bool)
    active = np.arange(rows)
    point = (v @ reduced.pick.T).reshape(rows, devices, 4)
    settled = np.zeros(rows, dtype=bool)
    for _ in range(_ITERATIONS):
        subset = parameters if len(active) == rows else _take(parameters, active)
        new, ok = _step(reduced, subset, point[active], gmin=gmin, scale=scale)
        terminals = (new @ reduced.pick.T).reshape(len(active), devices, 4)
        limited = SQUARE.limit(subset, point[active], terminals)
        held = np.abs(limited - terminals).max(axis=(1, 2), initial=0.0) > 0.0
        change = np.abs(new - v[active]).max(axis=1, initial=0.0)
        size = np.abs(new).max(axis=1, initial=1.0)
        near = ok & ~held & (change <= _CLOSE * np.maximum(size, 1.0))
        finished = near & settled[active]  # one more step after the first that was short
        settled[active] = near
        v[active], point[active] = new, limited
        done[active[finished]] = True
        active = active[~finished & ok]
        if len(active) == 0:
            break
    return v, done


def _step(
    reduced: _Reduced, parameters: SquareParameters, point: Array, *, gmin: float, scale: float
) -> tuple[Array, Mask]:
    """Solve the circuit with every device replaced by its tangent at ``point``."""
    rows = len(point)
    found = SQUARE.evaluate(parameters, point)
    constant = found.currents - (found.jacobian @ point[..., None])[..., 0]
    # The drain-source conductance is linear in the voltages: it adds nothing to the constant.
    tangent = found.jacobian + gmin * _DRAIN_SOURCE
    change = tangent.reshape(rows, -1) @ reduced.fold
    matrix = reduced.matrix + change.reshape(rows, *reduced.matrix.shape)
    side = scale * reduced.sources - constant.reshape(rows, -1) @ reduced.entry.T
    return _solve(matrix, side)


_DRAIN_SOURCE = np.zeros((4, 4))
_DRAIN_SOURCE[np.ix_([0, 2], [0, 2])] = [[1.0, -1.0], [-1.0, 1.0]]


def _solve(matrix: Array, side: Array) -> tuple[Array, Mask]:
    """Batched solve; rows that are singular come back as not finite and are marked."""
    try:
        answer = np.linalg.solve(matrix, side[..., None])[..., 0]
    except np.linalg.LinAlgError:
        answer = np.full(side.shape, np.nan)
        for row in range(len(side)):
            try:
                answer[row] = np.linalg.solve(matrix[row], side[row])
            except np.linalg.LinAlgError:
                continue  # stays not finite: marked below, and named by the caller
    good = np.isfinite(answer).all(axis=-1)
    return np.where(good[:, None], answer, 0.0), good


def _by_gmin(reduced: _Reduced, parameters: SquareParameters, rows: int) -> tuple[Array, Mask]:
    """A drain-source conductance that shrinks decade by decade, then vanishes."""
    v = np.zeros((rows, len(reduced.ports)))
    for gmin in _GMIN_LADDER:
        v, _ = _newton(reduced, parameters, v, gmin=gmin)
    return _newton(reduced, parameters, v)


def _by_sources(reduced: _Reduced, parameters: SquareParameters, rows: int) -> tuple[Array, Mask]:
    """Supplies that rise from zero in steps."""
    v = np.zeros((rows, len(reduced.ports)))
    done = np.zeros(rows, dtype=bool)
    for scale in _SOURCE_LADDER:
        v, done = _newton(reduced, parameters, v, scale=float(scale))
    return v, done


def _all_unknowns(reduced: _Reduced, v: Array, currents: Array) -> Array:
    """Voltages and branch currents that the elimination set aside."""
    system = reduced.system
    side = system.sources - v @ system.matrix[:, reduced.ports].T - currents @ system.incidence.T
    unknowns = np.zeros((len(v), system.layout.size))
    unknowns[:, reduced.ports] = v
    if len(reduced.inner):
        unknowns[:, reduced.inner] = np.linalg.solve(reduced.triangle, reduced.back @ side.T).T
    return unknowns


def _kirchhoff_residual(system: DcSystem, unknowns: Array, currents: Array) -> Array:
    """Largest sum of currents into a node [A], row by row."""
    flat = currents.reshape(len(currents), -1)
    left = unknowns @ system.matrix.T + flat @ system.incidence.T - system.sources
    largest: Array = np.abs(left[:, : len(system.layout.nodes)]).max(axis=1, initial=0.0)
    return largest


def _without_path(circuit: Circuit) -> tuple[str, ...]:
    """Nodes that neither parts nor channels connect with ground at DC."""
    links = [e.nodes for e in circuit.elements if isinstance(e, Resistor | Inductor | VoltageSource)]
    links += [(device.nodes[0], device.nodes[2]) for device in circuit.transistors]
    reached, grew = {GROUND}, True
    while grew:
        more = {node for ends in links if reached.intersection(ends) for node in ends}
        grew = not more <= reached
        reached |= more
    return tuple(node for node in circuit.nodes if node not in reached)


def _dead_ends(circuit: Circuit) -> tuple[str, ...]:
    """Nodes at which a channel ends and no part carries its current on."""
    ends = Counter(node for device in circuit.transistors for node in (device.nodes[0], device.nodes[2]))
    carried = {GROUND}
    for element in circuit.elements:
        if not isinstance(element, Capacitor | Mosfet):
            carried |= set(element.nodes)
    return tuple(node for node in circuit.nodes if ends[node] == 1 and node not in carried)


def _why(circuit: Circuit) -> str:
    """One line on why there is no bias point."""
    floating = _without_path(circuit)
    if floating:
        return _no_path(floating)
    dead_ends = _dead_ends(circuit)
    if dead_ends:
        return f"nothing but a channel at node {', '.join(dead_ends)}: no current can settle; add a resistor"
    devices = ", ".join(device.name.upper() for device in circuit.transistors)
    return (
        f"no bias point found for {devices}: every drain and source needs a DC path, "
        "and the supplies must let a current settle"
    )
