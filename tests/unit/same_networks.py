"""Networks drawn otherwise: other names, another order, parts in two pieces. What they do is the same."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from random import Random

from deckgen.circuit.model import (
    Capacitor,
    Circuit,
    Element,
    Mosfet,
    Resistor,
    VoltageSource,
)
from deckgen.circuit.ports import Ports


@dataclass(frozen=True)
class Redrawn:
    """A network drawn otherwise, and what its nodes are called now."""

    circuit: Circuit
    ports: Ports
    nodes: Mapping[str, str] = field(default_factory=dict)


def renamed(circuit: Circuit, ports: Ports, rng: Random) -> Redrawn:
    """Every node and part under another name of the same first letter; ground keeps its own."""
    nodes = {node: f"n{number}" for number, node in enumerate(rng.sample(circuit.nodes, len(circuit.nodes)))}
    numbers = rng.sample(range(1, 1000), len(circuit.elements))
    parts = {e.name: f"{e.name[0]}{number}" for e, number in zip(circuit.elements, numbers, strict=True)}
    parts |= {device.name: device.name for device in circuit.transistors}
    elements = tuple(
        replace(e, name=parts[e.name], nodes=tuple(nodes.get(node, node) for node in e.nodes))  # type: ignore[arg-type]
        for e in circuit.elements
    )
    declared = {None: None, **parts}
    moved = Ports(
        parts[ports.input], nodes[ports.output], declared[ports.source_resistance], declared[ports.load]
    )
    return Redrawn(replace(circuit, elements=elements), moved, nodes)


def reordered(circuit: Circuit, ports: Ports, rng: Random) -> Redrawn:
    """Cards in another order."""
    elements = rng.sample(circuit.elements, len(circuit.elements))
    return Redrawn(replace(circuit, elements=tuple(elements)), ports)


def turned_round(circuit: Circuit, ports: Ports, rng: Random) -> Redrawn:
    """Resistors and capacitors with their ends exchanged."""
    elements = tuple(
        replace(e, nodes=e.nodes[::-1]) if isinstance(e, Resistor | Capacitor) else e
        for e in circuit.elements
    )
    return Redrawn(replace(circuit, elements=elements), ports)


def in_series(circuit: Circuit, ports: Ports, rng: Random) -> Redrawn:
    """Every resistor but the declared ones as two in series."""

    def pieces(part: Element) -> tuple[Element, ...]:
        if not isinstance(part, Resistor):
            return ()
        share, middle = rng.uniform(0.01, 0.99), f"{part.name}_m"
        first, second = part.nodes
        return (
            Resistor(f"{part.name}_1", (first, middle), share * part.value),
            Resistor(f"{part.name}_2", (middle, second), (1.0 - share) * part.value),
        )

    return _with_pieces(circuit, ports, pieces)


def in_parallel(circuit: Circuit, ports: Ports, rng: Random) -> Redrawn:
    """Every resistor but the declared ones as two in parallel."""

    def pieces(part: Element) -> tuple[Element, ...]:
        if not isinstance(part, Resistor):
            return ()
        share = rng.uniform(0.01, 0.99)
        return (
            Resistor(f"{part.name}_1", part.nodes, part.value / share),
            Resistor(f"{part.name}_2", part.nodes[::-1], part.value / (1.0 - share)),
        )

    return _with_pieces(circuit, ports, pieces)


def capacitors_in_parallel(circuit: Circuit, ports: Ports, rng: Random) -> Redrawn:
    """Every capacitor as two in parallel, each still a short or open as it was."""

    def pieces(part: Element) -> tuple[Element, ...]:
        if not isinstance(part, Capacitor):
            return ()
        share = rng.uniform(0.3, 0.7)
        return (
            Capacitor(f"{part.name}_1", part.nodes, share * part.value),
            Capacitor(f"{part.name}_2", part.nodes[::-1], (1.0 - share) * part.value),
        )

    return _with_pieces(circuit, ports, pieces)


def _with_pieces(circuit: Circuit, ports: Ports, pieces: Callable[[Element], tuple[Element, ...]]) -> Redrawn:
    declared = (ports.source_resistance, ports.load)
    elements = [
        piece for e in circuit.elements for piece in ((e,) if e.name in declared else pieces(e) or (e,))
    ]
    return Redrawn(replace(circuit, elements=tuple(elements)), ports)


def with_ammeters(circuit: Circuit, ports: Ports, rng: Random) -> Redrawn:
    """Sources of 0 V in series with some parts, terminals of the transistor among them."""
    kept = (ports.input, ports.source_resistance, ports.load)
    elements: list[Element] = []
    for element in circuit.elements:
        if element.name in kept or rng.random() < 0.4:
            elements.append(element)
            continue
        places = range(3) if isinstance(element, Mosfet) else range(1)
        nodes = list(element.nodes)
        for place in places:
            inner = f"{element.name}_{place}"
            elements.append(VoltageSource(f"v_{inner}", (nodes[place], inner)))
            nodes[place] = inner
        if isinstance(element, Mosfet) and element.nodes[3] == element.nodes[2]:
            nodes[3] = rng.choice([nodes[2], nodes[3]])
        elements.append(replace(element, nodes=tuple(nodes)))  # type: ignore[arg-type]
    return Redrawn(replace(circuit, elements=tuple(elements)), ports)


WAYS: dict[str, Callable[[Circuit, Ports, Random], Redrawn]] = {
    "other names": renamed,
    "another order": reordered,
    "parts turned round": turned_round,
    "resistors in series": in_series,
    "resistors in parallel": in_parallel,
    "capacitors in parallel": capacitors_in_parallel,
    "ammeters": with_ammeters,
}
"""Ways to draw a network otherwise."""
