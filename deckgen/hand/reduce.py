"""A single transistor in its network, reduced to what hangs on each of its terminals.

Read from the graph alone: names, order and positions of parts play no part in it.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass

from deckgen.circuit.model import (
    GROUND,
    Capacitor,
    Cccs,
    Ccvs,
    Circuit,
    Element,
    Inductor,
    Mosfet,
    Resistor,
    Vccs,
    Vcvs,
    VoltageSource,
)
from deckgen.circuit.ports import Ports
from deckgen.hand.network import Treatment

EMF = "(emf)"
"""Name of the merged node that the input source drives."""


@dataclass(frozen=True, slots=True)
class Pull:
    """A resistor from a terminal to a node of known voltage [V]."""

    part: Resistor
    node: str
    voltage: float


@dataclass(frozen=True, slots=True)
class DcTerminal:
    """DC surroundings of a terminal: a fixed voltage, or resistors to fixed voltages."""

    node: str
    fixed: float | None
    pulls: tuple[Pull, ...] = ()


@dataclass(frozen=True, slots=True)
class DcNet:
    """DC surroundings of the one transistor."""

    device: Mosfet
    gate: DcTerminal
    source: DcTerminal
    drain: DcTerminal
    bulk: float | None
    """Voltage of the bulk [V]; None: it is tied to the source."""


@dataclass(frozen=True, slots=True)
class SignalNet:
    """Mid-band surroundings: resistors from each terminal to signal ground, and from EMF to gate."""

    device: Mosfet
    gate: tuple[Resistor, ...]
    source: tuple[Resistor, ...]
    drain: tuple[Resistor, ...]
    series: tuple[Resistor, ...]
    source_grounded: bool
    drain_grounded: bool
    bulk_at_source: bool
    output: str
    """Terminal at the output: ``drain`` or ``source``."""


class _Merged:
    """Nodes joined by shorts; each set is named by its representative."""

    def __init__(self) -> None:
        self._parent: dict[str, str] = {}

    def of(self, node: str) -> str:
        while self._parent.get(node, node) != node:
            node = self._parent[node]
        return node

    def join(self, first: str, second: str) -> None:
        first, second = self.of(first), self.of(second)
        if first == second:
            return
        # Ground stays the name of its set, then the EMF, so that both are recognised.
        keep, give = (first, second) if first in (GROUND, EMF) else (second, first)
        self._parent[give] = keep


def rail_voltages(circuit: Circuit, *, besides: Iterable[str] = ()) -> dict[str, float]:
    """Nodes whose voltage the sources fix against ground, with that voltage [V]."""
    left_out = set(besides)
    known = {GROUND: 0.0}
    sources = [e for e in circuit.elements if isinstance(e, VoltageSource) and e.name not in left_out]
    changed = True
    while changed:
        changed = False
        for source in sources:
            plus, minus = source.nodes
            if minus in known and plus not in known:
                known[plus] = known[minus] + source.dc
                changed = True
            elif plus in known and minus not in known:
                known[minus] = known[plus] - source.dc
                changed = True
    return known


def dc_net(circuit: Circuit) -> DcNet | None:
    """DC surroundings, or None where they are not just resistors to fixed voltages."""
    if len(circuit.transistors) != 1:
        return None
    (device,) = circuit.transistors
    rails = rail_voltages(circuit)
    drain, gate, source, bulk = device.nodes
    free = [node for node in (gate, source, drain) if node not in rails]
    if len(set(free)) < len(free):
        return None  # two terminals share a free node: diode-connected, not one of these forms
    if bulk != source and bulk not in rails:
        return None
    at_gate = _dc_terminal(circuit, gate, rails)
    at_source = _dc_terminal(circuit, source, rails)
    at_drain = _dc_terminal(circuit, drain, rails)
    if at_gate is None or at_source is None or at_drain is None:
        return None
    return DcNet(device, at_gate, at_source, at_drain, None if bulk == source else rails[bulk])


def _dc_terminal(circuit: Circuit, node: str, rails: Mapping[str, float]) -> DcTerminal | None:
    if node in rails:
        return DcTerminal(node, rails[node])
    pulls = []
    for element in _at(circuit, node):
        if isinstance(element, Mosfet | Capacitor):
            continue
        other = element.nodes[1] if element.nodes[0] == node else element.nodes[0]
        if not isinstance(element, Resistor) or other not in rails:
            return None
        pulls.append(Pull(element, other, rails[other]))
    return DcTerminal(node, None, tuple(pulls)) if pulls else None


def _at(circuit: Circuit, node: str) -> tuple[Element, ...]:
    return tuple(element for element in circuit.elements if node in element.nodes)


@dataclass(frozen=True, slots=True)
class SignalGraph:
    """Nodes joined at mid-band, and the resistors that are left between the joined nodes."""

    circuit: Circuit
    merged: _Merged
    groups: Mapping[frozenset[str], tuple[Resistor, ...]]

    def of(self, node: str) -> str:
        """The joined node that a node belongs to."""
        return self.merged.of(node)

    def between(self, first: str, second: str) -> tuple[Resistor, ...]:
        """Resistors between two joined nodes."""
        return self.groups.get(frozenset({first, second}), ()) if first != second else ()

    def neighbours(self, node: str) -> set[str]:
        """Joined nodes that resistors connect with this one."""
        return {other for ends in self.groups if node in ends for other in ends if other != node}


def signal_graph(circuit: Circuit, ports: Ports, treatments: Mapping[str, Treatment]) -> SignalGraph | None:
    """Join nodes over shorts; None where an inductor or a floating input leaves this form."""
    merged = _merge(circuit, ports, treatments)
    if merged is None:
        return None
    groups: dict[frozenset[str], tuple[Resistor, ...]] = {}
    for element in circuit.elements:
        if isinstance(element, Resistor):
            ends = frozenset(merged.of(node) for node in element.nodes)
            if len(ends) == 2:
                groups[ends] = (*groups.get(ends, ()), element)
    return SignalGraph(circuit, merged, groups)


def signal_net(circuit: Circuit, ports: Ports, treatments: Mapping[str, Treatment]) -> SignalNet | None:
    """Mid-band surroundings with capacitors shorted and opened as told; None where not of this form."""
    graph = signal_graph(circuit, ports, treatments)
    if len(circuit.transistors) != 1 or graph is None:
        return None
    (device,) = circuit.transistors
    drain, gate, source, bulk = (graph.of(node) for node in device.nodes)
    output = graph.of(ports.output)
    free = [node for node in (drain, gate, source) if node != GROUND]
    if len(set(free)) != len(free) or gate == GROUND or bulk not in (GROUND, source):
        return None
    if output not in (drain, source) or output == GROUND:
        return None
    for node, partners in ((drain, {GROUND}), (source, {GROUND}), (gate, {GROUND, EMF})):
        if node not in (GROUND, EMF) and not graph.neighbours(node) <= partners:
            return None
    return SignalNet(
        device=device,
        gate=graph.between(gate, GROUND) if gate != EMF else (),
        source=graph.between(source, GROUND),
        drain=graph.between(drain, GROUND),
        series=graph.between(gate, EMF),
        source_grounded=source == GROUND,
        drain_grounded=drain == GROUND,
        bulk_at_source=bulk == source,
        output="drain" if output == drain else "source",
    )


def _merge(circuit: Circuit, ports: Ports, treatments: Mapping[str, Treatment]) -> _Merged | None:
    """Join nodes over shorted capacitors and all sources but the input; no inductors, no controlled ones."""
    merged = _Merged()
    for element in circuit.elements:
        if isinstance(element, Inductor | Vcvs | Vccs | Cccs | Ccvs):
            return None
        if isinstance(element, VoltageSource):
            if element.name == ports.input:
                if GROUND not in element.nodes:
                    return None
                hot = element.nodes[0] if element.nodes[1] == GROUND else element.nodes[1]
                merged.join(EMF, hot)
            else:
                merged.join(*element.nodes)
        elif isinstance(element, Capacitor) and treatments.get(element.name) is Treatment.SHORT:
            merged.join(*element.nodes)
    return None if merged.of(EMF) == GROUND else merged
