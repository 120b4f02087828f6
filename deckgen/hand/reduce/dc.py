"""What one transistor sees at DC: each terminal fixed, pulled by resistors, or fed by a current."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np

from deckgen.circuit.model import (
    GROUND,
    Capacitor,
    Circuit,
    CurrentSource,
    Element,
    Inductor,
    Mosfet,
    Resistor,
    VoltageSource,
)
from deckgen.hand.laws.base import Array
from deckgen.hand.reduce.mesh import Mesh, followed, mesh_of, reduced
from deckgen.hand.reduce.rails import Joined, rail_voltages
from deckgen.hand.reduce.resistance import Resistance, part

GATE, SOURCE, DRAIN = "gate", "source", "drain"


@dataclass(frozen=True, slots=True)
class Pull:
    """A resistance from a terminal to a node of known voltage [V]."""

    resistance: Resistance
    node: str
    voltage: float


@dataclass(frozen=True, slots=True)
class DcTerminal:
    """DC surroundings of a terminal.

    ``fixed`` is its voltage where sources fix it. ``open_voltage`` [V] is what it has without drain current,
    ``rise`` [Ω] how far it is lifted by each ampere that flows through the channel, n-channel sense.
    """

    node: str
    fixed: float | None
    pulls: tuple[Pull, ...]
    current: float
    open_voltage: float
    rise: float


@dataclass(frozen=True, slots=True)
class DcNet:
    """DC surroundings of the one transistor."""

    device: Mosfet
    terminals: Mapping[str, DcTerminal]
    bulk: float | None
    """Voltage of the bulk [V]; None: it is tied to the source."""

    forced: float | None
    """Current that a source takes from the source terminal [A], where nothing else carries it."""

    feedback: Resistance | None
    """Resistance between gate and drain."""

    coupled: bool
    """Whether other resistances connect the terminals: between gate and source, or drain and source."""

    @property
    def gate(self) -> DcTerminal:
        """The gate's surroundings."""
        return self.terminals[GATE]

    @property
    def source(self) -> DcTerminal:
        """The source's surroundings."""
        return self.terminals[SOURCE]

    @property
    def drain(self) -> DcTerminal:
        """The drain's surroundings."""
        return self.terminals[DRAIN]

    @property
    def tied(self) -> bool:
        """Whether gate and drain are one node."""
        return self.gate.fixed is None and self.gate.node == self.drain.node


def dc_net(circuit: Circuit) -> DcNet | None:
    """DC surroundings, or None where they are more than resistors, currents and fixed voltages."""
    if len(circuit.transistors) != 1 or not _linear(circuit):
        return None
    (device,) = circuit.transistors
    rails = rail_voltages(circuit)
    joined = _joined_at_dc(circuit, rails)
    d, g, s, b = (joined.of(node) for node in device.nodes)
    if (b != s and b not in rails) or (s in (g, d) and s not in rails):
        return None
    whole = _dc_mesh(circuit, joined, rails)
    if whole is None:
        return None
    whole, at_gate = followed(whole, g, ends={s, d, *rails}, before={s, d, *rails})
    nodes = {GATE: at_gate, SOURCE: s, DRAIN: d}
    free = tuple(dict.fromkeys(node for node in nodes.values() if node not in rails))
    mesh = reduced(whole, (*free, *rails))
    if mesh is None:
        return None
    forced, ports = _forced(mesh, s, free)
    solved = _port_solution(mesh, ports, rails)
    if solved is None or (forced is not None and s in (g, d)):
        return None
    terminals = {
        name: _terminal(mesh, node, rails, ports, solved, source=s, drain=d) for name, node in nodes.items()
    }
    terminals[GATE] = replace(terminals[GATE], node=g)
    return DcNet(
        device=device,
        terminals=terminals,
        bulk=None if b == s else rails[b],
        forced=forced,
        feedback=mesh.between(at_gate, d) if at_gate not in rails and d not in rails else None,
        coupled=any(node in free and mesh.between(node, s) is not None for node in {at_gate, d} if s in free),
    )


def _linear(circuit: Circuit) -> bool:
    """Whether resistors above zero, currents and sources of voltage are all that counts at DC."""
    kinds = (Resistor, Capacitor, Inductor, VoltageSource, CurrentSource, Mosfet)
    return all(
        isinstance(element, kinds) and not (isinstance(element, Resistor) and not element.value > 0.0)
        for element in circuit.elements
    )


def _joined_at_dc(circuit: Circuit, rails: Mapping[str, float]) -> Joined:
    """Nodes joined by inductors and by sources of 0 V; rails keep their names, then the terminals do."""
    joined = Joined(GROUND, *rails, *circuit.transistors[0].nodes)
    for element in circuit.elements:
        if _is_wire(element) and not (element.nodes[0] in rails and element.nodes[1] in rails):
            joined.join(*element.nodes[:2])
    return joined


def _is_wire(element: Element) -> bool:
    """Whether an element is a short at DC: an inductor, or a source of 0 V that measures a current."""
    return isinstance(element, Inductor) or (isinstance(element, VoltageSource) and not abs(element.dc) > 0.0)


def _dc_mesh(circuit: Circuit, joined: Joined, rails: Mapping[str, float]) -> Mesh | None:
    """Resistors and currents between joined nodes; None with a source between nodes that nothing fixes."""
    resistors, currents = [], dict[str, float]()
    for element in circuit.elements:
        ends = tuple(joined.of(node) for node in element.nodes[:2])
        if isinstance(element, Resistor):
            if not all(node in rails for node in ends):
                resistors.append(((ends[0], ends[1]), part(element)))
        elif isinstance(element, CurrentSource):
            for node, current in zip(ends, (-element.dc, element.dc), strict=True):
                if node not in rails and abs(element.dc) > 0.0:
                    currents[node] = currents.get(node, 0.0) + current
        elif isinstance(element, VoltageSource) and not (_is_wire(element) or all(n in rails for n in ends)):
            return None
    return mesh_of(resistors, currents)


def _forced(mesh: Mesh, source: str, free: tuple[str, ...]) -> tuple[float | None, tuple[str, ...]]:
    """Current forced through the source terminal, and the terminals that resistors hold."""
    if source not in free or mesh.neighbours(source):
        return None, free
    return -mesh.current(source), tuple(node for node in free if node != source)


def _port_solution(
    mesh: Mesh, ports: tuple[str, ...], rails: Mapping[str, float]
) -> tuple[Array, Array] | None:
    """Voltages of the terminals without the transistor [V], and their resistance matrix [Ω]."""
    size = len(ports)
    conductance, current = np.zeros((size, size)), np.zeros(size)
    for row, node in enumerate(ports):
        current[row] += mesh.current(node)
        for other in mesh.neighbours(node):
            link = mesh.between(node, other)
            if link is None:
                continue
            conductance[row, row] += 1.0 / link.value
            if other in ports:
                conductance[row, ports.index(other)] -= 1.0 / link.value
            else:
                current[row] += rails[other] / link.value
    try:
        resistance = np.asarray(np.linalg.inv(conductance), float)
    except np.linalg.LinAlgError:
        return None
    if not np.isfinite(resistance).all():
        return None
    return resistance @ current, resistance


def _terminal(
    mesh: Mesh,
    node: str,
    rails: Mapping[str, float],
    ports: tuple[str, ...],
    solved: tuple[Array, Array],
    *,
    source: str,
    drain: str,
) -> DcTerminal:
    if node in rails:
        return DcTerminal(node, rails[node], (), 0.0, rails[node], 0.0)
    links = [(other, mesh.between(node, other)) for other in rails]
    pulls = tuple(Pull(link, other, rails[other]) for other, link in links if link is not None)
    if node not in ports:  # held by a current alone
        return DcTerminal(node, None, pulls, mesh.current(node), 0.0, 0.0)
    voltages, resistance = solved
    row = ports.index(node)
    rise = 0.0
    if source in ports:
        rise += float(resistance[row, ports.index(source)])
    if drain in ports:
        rise -= float(resistance[row, ports.index(drain)])
    return DcTerminal(node, None, pulls, mesh.current(node), float(voltages[row]), rise)
