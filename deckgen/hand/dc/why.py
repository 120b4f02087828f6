"""Why a network has no bias point, in one line; and whether it can have several."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Sequence

from deckgen.circuit.model import (
    GROUND,
    Capacitor,
    Cccs,
    Ccvs,
    Circuit,
    CurrentSource,
    Element,
    Inductor,
    Mosfet,
    Resistor,
    Vccs,
    Vcvs,
    VoltageSource,
    display,
)

_CONDUCTS = (Resistor, Inductor, VoltageSource, Vcvs, Ccvs)
"""Elements whose first two nodes a direct current joins, whatever the rest of the network does."""


def hanging_nodes(circuit: Circuit, *, channels: bool) -> tuple[str, ...]:
    """Nodes that no part joins with ground at DC; with ``channels``, those of transistors count as parts."""
    links = [element.nodes[:2] for element in circuit.elements if isinstance(element, _CONDUCTS)]
    if channels:
        links += [(device.nodes[0], device.nodes[2]) for device in circuit.transistors]
    return _unreached(circuit, links)


def floating_nodes(circuit: Circuit, *, junctions: bool) -> tuple[str, ...]:
    """Nodes whose voltage nothing can set: not even a controlled source reaches them.

    A gate carries no current; the channel joins drain and source, ``junctions`` join them with the bulk.
    """
    last = 4 if junctions else 3
    links = [
        element.nodes if not isinstance(element, Mosfet) else (element.nodes[0], *element.nodes[2:last])
        for element in circuit.elements
        if not isinstance(element, Capacitor | CurrentSource)
    ]
    return _unreached(circuit, links)


def _unreached(circuit: Circuit, links: Sequence[Sequence[str]]) -> tuple[str, ...]:
    known = _Joined()
    for ends in links:
        known.join(ends)
    ground = known.of(GROUND)
    return tuple(node for node in circuit.nodes if known.of(node) != ground)


class _Joined:
    """Sets of nodes that are joined, each named by one of them."""

    def __init__(self) -> None:
        self._parent: dict[str, str] = {}

    def of(self, node: str) -> str:
        while (above := self._parent.get(node, node)) != node:
            node = above
        return node

    def join(self, nodes: Iterable[str]) -> None:
        first, *others = (self.of(node) for node in nodes)
        for other in others:
            if other != first:
                self._parent[other] = first


def dead_ends(circuit: Circuit) -> tuple[str, ...]:
    """Nodes at which a channel ends and no part carries its current on."""
    ends = Counter(node for device in circuit.transistors for node in (device.nodes[0], device.nodes[2]))
    carried = {GROUND}
    for element in circuit.elements:
        if not isinstance(element, Capacitor | Mosfet):
            carried |= set(element.nodes)
    return tuple(node for node in circuit.nodes if ends[node] == 1 and node not in carried)


def may_have_several(circuit: Circuit) -> bool:
    """Whether a network can have several operating points.

    One transistor among passive parts has one at most: several need a loop of two (A. N. Willson, On the
    topology of FET circuits and the uniqueness of their dc operating points, IEEE Trans. Circuits and Systems
    CAS-27(11), 1980, 1045-1051, from memory), or a source that is controlled.
    """
    transistors = len(circuit.transistors)
    return transistors > 1 or (transistors == 1 and any(_is_active(e) for e in circuit.elements))


def _is_active(element: Element) -> bool:
    if isinstance(element, Resistor):
        return element.value < 0.0
    return isinstance(element, Vcvs | Vccs | Cccs | Ccvs)


def left_open(nodes: Sequence[str], branches: Sequence[str]) -> str:
    """What to say of unknowns that linear parts leave undetermined though all nodes have a path."""
    if not nodes:
        named = ", ".join(display(name) for name in branches)
        return f"a loop of voltage sources or inductors: {named}; put a resistance into it"
    return (
        f"no DC path to ground from node {', '.join(nodes)} that determines its voltage; add a resistor, "
        "or check the controlled sources there"
    )


def no_path(nodes: Sequence[str]) -> str:
    """What to say of nodes without a DC path to ground."""
    return f"no DC path to ground from node {', '.join(nodes)}; add one (a resistor)"


def no_current(nodes: Sequence[str]) -> str:
    """What to say of nodes at which a channel ends."""
    return f"nothing but a channel at node {', '.join(nodes)}: no current can settle; add a resistor"


def not_found(circuit: Circuit, runaway: str | None) -> str:
    """What to say where all was tried; ``runaway`` is a node whose current only a leakage would take."""
    devices = ", ".join(display(device.name) for device in circuit.transistors)
    place = "" if runaway is None else f"no current can settle at node {runaway}; "
    return (
        f"no bias point found for {devices}: {place}every drain and source needs a DC path, "
        "and the supplies must let a current settle"
    )
