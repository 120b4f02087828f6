"""The linear part of a circuit as nodal equations with branch currents, at DC and small-signal.

Unknowns: node voltages (ground left out), then the currents of voltage sources, inductors and, in the
small-signal system, of explicit capacitors. Device currents enter through their terminals.
Modified nodal analysis after C.-W. Ho, A. E. Ruehli, P. A. Brennan, IEEE Trans. Circuits and Systems
CAS-22(6), 1975, 504-509 (from memory).
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from enum import Enum

import numpy as np

from deckgen.circuit.model import (
    GROUND,
    Capacitor,
    Cccs,
    Ccvs,
    Circuit,
    Controlled,
    CurrentSource,
    Inductor,
    Resistor,
    Vccs,
    Vcvs,
    VoltageSource,
)
from deckgen.hand.laws.base import Array

_BRANCHES = (VoltageSource, Inductor, Vcvs, Ccvs)
"""Elements whose current is an unknown of its own, at DC already."""


class Treatment(Enum):
    """What becomes of an explicit capacitor in a small-signal system."""

    AS_IS = "as it is"
    SHORT = "short"
    OPEN = "open"


@dataclass(frozen=True, slots=True)
class Layout:
    """Which unknown has which number; ground has none (-1)."""

    nodes: tuple[str, ...]
    branches: tuple[str, ...]

    @property
    def size(self) -> int:
        """Number of unknowns."""
        return len(self.nodes) + len(self.branches)

    def node(self, name: str) -> int:
        """Number of a node's voltage, -1 for ground. Raises ValueError for an unknown node."""
        return -1 if name == GROUND else self.nodes.index(name)

    def branch(self, name: str) -> int:
        """Number of a branch current."""
        return len(self.nodes) + self.branches.index(name)


@dataclass(frozen=True, slots=True)
class DcSystem:
    """M·x = s - B·i: linear part M, sources s, and where the T terminal currents i enter (B)."""

    layout: Layout
    matrix: Array
    sources: Array
    incidence: Array


@dataclass(frozen=True, slots=True)
class SmallSignalSystem:
    """(G + jωC)·x = b for one excitation b at a time; devices and all capacitors included."""

    layout: Layout
    conductance: Array
    capacitance: Array
    current_sources: tuple[tuple[str, tuple[str, str]], ...] = ()
    """Names of the independent current sources, which have no unknown, with their nodes."""


def dc_layout(circuit: Circuit) -> Layout:
    """Numbers of the unknowns at DC: capacitors are open and have no branch."""
    return Layout(circuit.nodes, tuple(e.name for e in circuit.elements if isinstance(e, _BRANCHES)))


def small_signal_layout(circuit: Circuit, inner: Iterable[str] = ()) -> Layout:
    """Numbers of the unknowns at small signal; explicit capacitors have branches of their own.

    ``inner`` are nodes inside of devices, which no element of the circuit hangs on.
    """
    kinds = (*_BRANCHES, Capacitor)
    names = tuple(e.name for e in circuit.elements if isinstance(e, kinds))
    return Layout((*circuit.nodes, *inner), names)


def terminal_incidence(
    circuit: Circuit, layout: Layout, terminals: Sequence[Sequence[str]] | None = None
) -> Array:
    """B, shape (unknowns, terminals): 1 where a device terminal hangs on a node.

    ``terminals`` are the nodes of every device, its inner ones included; its outer ones if absent.
    """
    of_devices = [device.nodes for device in circuit.transistors] if terminals is None else terminals
    named = [node for nodes in of_devices for node in nodes]
    incidence = np.zeros((layout.size, len(named)))
    for column, node in enumerate(named):
        if node != GROUND:
            incidence[layout.node(node), column] = 1.0
    return incidence


def dc_system(circuit: Circuit) -> DcSystem:
    """The linear part at DC: capacitors open, inductors short."""
    layout = dc_layout(circuit)
    matrix = np.zeros((layout.size, layout.size))
    sources = np.zeros(layout.size)
    for element in circuit.elements:
        if isinstance(element, Resistor):
            stamp_conductance(matrix, layout, element.nodes, 1.0 / element.value)
        elif isinstance(element, VoltageSource | Inductor):
            row = layout.branch(element.name)
            stamp_branch(matrix, layout, element.nodes, row)
            sources[row] = element.dc if isinstance(element, VoltageSource) else 0.0
        elif isinstance(element, CurrentSource):
            sources += inject(layout, element.nodes, element.dc)
        elif isinstance(element, Vcvs | Vccs | Cccs | Ccvs):
            stamp_controlled(matrix, layout, element)
    return DcSystem(layout, matrix, sources, terminal_incidence(circuit, layout))


def small_signal_system(
    circuit: Circuit,
    *,
    conductances: Array,
    device_capacitors: Mapping[tuple[str, str], float] | None = None,
    treatments: Mapping[str, Treatment] | None = None,
    terminals: Sequence[Sequence[str]] | None = None,
) -> SmallSignalSystem:
    """The small-signal equations at a Q-point.

    ``conductances`` is (devices, T, T) [S]; ``device_capacitors`` node pairs with their capacitance
    [F]; ``treatments`` says which explicit capacitors are shorted or opened; ``terminals`` are the T nodes
    of each device, inner ones included, its outer nodes if absent.
    """
    known = {*circuit.nodes, GROUND}
    inner = dict.fromkeys(node for nodes in terminals or () for node in nodes if node not in known)
    layout = small_signal_layout(circuit, inner)
    g, c = np.zeros((layout.size, layout.size)), np.zeros((layout.size, layout.size))
    chosen = treatments or {}
    for element in circuit.elements:
        if isinstance(element, Resistor):
            stamp_conductance(g, layout, element.nodes, 1.0 / element.value)
        elif isinstance(element, VoltageSource | Inductor):
            row = layout.branch(element.name)
            stamp_branch(g, layout, element.nodes, row)
            if isinstance(element, Inductor):
                c[row, row] = -element.value
        elif isinstance(element, Capacitor):
            _stamp_capacitor(g, c, layout, element, chosen.get(element.name, Treatment.AS_IS))
        elif isinstance(element, Vcvs | Vccs | Cccs | Ccvs):
            stamp_controlled(g, layout, element)
    for nodes, value in (device_capacitors or {}).items():
        stamp_conductance(c, layout, nodes, value)
    incidence = terminal_incidence(circuit, layout, terminals)
    count = conductances.shape[-1]
    for number in range(len(circuit.transistors)):
        pins = incidence[:, count * number : count * (number + 1)]
        g += pins @ conductances[number] @ pins.T
    currents = tuple((e.name, e.nodes) for e in circuit.elements if isinstance(e, CurrentSource))
    return SmallSignalSystem(layout, g, c, currents)


def _stamp_capacitor(g: Array, c: Array, layout: Layout, part: Capacitor, treatment: Treatment) -> None:
    """A branch row: i = sC·v as it is, v = 0 shorted, i = 0 opened. The size never changes."""
    row = layout.branch(part.name)
    ends = [layout.node(node) for node in part.nodes]
    signs = (1.0, -1.0)
    for end, sign in zip(ends, signs, strict=True):
        if end < 0:
            continue
        g[end, row] += sign
        if treatment is Treatment.SHORT:
            g[row, end] += sign
        elif treatment is Treatment.AS_IS:
            c[row, end] -= sign * part.value
    if treatment is not Treatment.SHORT:
        g[row, row] = 1.0


def stamp_conductance(matrix: Array, layout: Layout, nodes: tuple[str, str], value: float) -> None:
    """Add a conductance (or capacitance) between two nodes."""
    first, second = layout.node(nodes[0]), layout.node(nodes[1])
    for end, other in ((first, second), (second, first)):
        if end >= 0:
            matrix[end, end] += value
            if other >= 0:
                matrix[end, other] -= value


def stamp_branch(matrix: Array, layout: Layout, nodes: tuple[str, str], row: int) -> None:
    """Add a branch whose current leaves nodes[0]; its row says v(nodes[0]) - v(nodes[1]) = …."""
    for node, sign in zip(nodes, (1.0, -1.0), strict=True):
        end = layout.node(node)
        if end >= 0:
            matrix[end, row] += sign
            matrix[row, end] += sign


def stamp_controlled(matrix: Array, layout: Layout, element: Controlled) -> None:
    """Add a controlled source: E and H have a branch row of their own, G and F enter the node rows."""
    if isinstance(element, Vcvs | Ccvs):
        row = layout.branch(element.name)
        stamp_branch(matrix, layout, (element.nodes[0], element.nodes[1]), row)
        for column, weight in _control(layout, element):
            matrix[row, column] -= element.gain * weight
        return
    for node, sign in zip(element.nodes[:2], (1.0, -1.0), strict=True):
        end = layout.node(node)
        for column, weight in _control(layout, element) if end >= 0 else ():
            matrix[end, column] += sign * element.gain * weight


def _control(layout: Layout, element: Controlled) -> list[tuple[int, float]]:
    """Columns and weights of the controlling voltage or current."""
    if isinstance(element, Cccs | Ccvs):
        return [(layout.branch(element.control), 1.0)]
    ends = ((layout.node(element.nodes[2]), 1.0), (layout.node(element.nodes[3]), -1.0))
    return [(column, weight) for column, weight in ends if column >= 0]


def inject(layout: Layout, nodes: tuple[str, str], current: complex) -> Array:
    """Right-hand side of a current that leaves nodes[0] and enters nodes[1]."""
    side = np.zeros(layout.size, dtype=type(current))
    for node, sign in zip(nodes, (-1.0, 1.0), strict=True):
        end = layout.node(node)
        if end >= 0:
            side[end] += sign * current
    return side
