"""Findings on how a flat circuit is connected, and on its voltages at the Q-point.

Which pins of an element carry direct current follows from the letter of its name: gates, capacitors,
current sources and controlling pins carry none. A device whose pins are not known makes them all doubtful,
and nothing is said about paths then.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping, Sequence
from itertools import pairwise

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
    display,
)
from deckgen.comparison import Finding
from deckgen.findings.gather import several, short
from deckgen.findings.partition import Partition
from deckgen.findings.table import finding, placed, summed_up
from deckgen.units import format_value

LARGE_CAPACITOR = 1e-6
"""Above this [F] a capacitor is mostly an electrolytic; common practice."""

FORWARD = 0.3
"""Voltage [V] from which a junction counts as conducting: with IS = 1e-14 A it carries 1 nA there."""

_MOST_SEARCHES = 20
"""How many loops, or input sources, are followed through the circuit: each search may take all of it."""

_REVERSED = -1e-3
_PINS_NOT_KNOWN = frozenset("anpy")
_FIXES_VOLTAGE = frozenset("vleh")
_CURRENT_SOURCES = frozenset("ifg")
_NO_CURRENT = frozenset("cifgk")
_FIRST_TWO = frozenset("ehs")


def graph_findings(
    circuit: Circuit, *, input_source: str | None = None, output: str | None = None
) -> tuple[Finding, ...]:
    """Findings on the connections of a circuit; its input source and output node, where they are stated."""
    elements = circuit.elements
    if not elements:
        return ()
    if not any(GROUND in element.nodes for element in elements):
        return (placed(finding("no-ground"), elements[0].origin),)
    found: list[Finding] = []
    if not any(element.name[0] in _PINS_NOT_KNOWN for element in elements):
        pins = _pins(elements)
        floating = _floating(elements, pins)
        lost = {node for island in floating for node in island}
        found += [_no_path(island, pins) for island in floating]
        found += _dangling(pins, lost | {GROUND, (output or "").lower()})
    found += _loops(elements)
    found += _bulks(circuit, input_source)
    found += _generators(circuit, input_source)
    return summed_up(found)


def _pins(elements: Iterable[Element]) -> dict[str, list[tuple[Element, int]]]:
    """Elements on each node, each with the number of its pin."""
    pins: dict[str, list[tuple[Element, int]]] = {}
    for element in elements:
        for index, node in enumerate(element.nodes):
            pins.setdefault(node, []).append((element, index))
    return pins


def _conducting(element: Element) -> Sequence[str]:
    """Nodes of an element between which direct current can flow."""
    letter = element.name[0]
    if letter in _NO_CURRENT:
        return ()
    if isinstance(element, Mosfet):
        drain, _, source, bulk = element.nodes
        return (drain, source, bulk)
    return element.nodes[:2] if letter in _FIRST_TWO else element.nodes


def _floating(
    elements: Iterable[Element], pins: Mapping[str, Sequence[tuple[Element, int]]]
) -> list[list[str]]:
    """Groups of nodes that no direct current connects with ground."""
    islands = Partition()
    for element in elements:
        for first, second in pairwise(_conducting(element)):
            islands.join(first, second)
    ground = islands.root(GROUND)
    groups: dict[str, list[str]] = {}
    for node in pins:
        root = islands.root(node)
        if root != ground:
            groups.setdefault(root, []).append(node)
    return list(groups.values())


def _no_path(island: Sequence[str], pins: Mapping[str, Sequence[tuple[Element, int]]]) -> Finding:
    there = [pin for node in island for pin in pins[node]]
    origin = there[0][0].origin
    feeding = {e.name: e for e, i in there if e.name[0] in _CURRENT_SOURCES and i < 2}
    gates = {e.name: e for e, i in there if isinstance(e, Mosfet) and i == 1}
    if feeding and len(island) == 1:
        first = next(iter(feeding.values()))
        parts = {"sources": _listed(feeding), "node": short(island[0])}
        return placed(finding("current-source-into-empty-node", **parts), first.origin)
    if gates and len(island) == 1:
        first = next(iter(gates.values()))
        return placed(finding("floating-gate", nodes=_have(island), devices=_listed(gates)), first.origin)
    return placed(finding("no-dc-path", nodes=_have(island)), origin)


def _have(nodes: Sequence[str]) -> str:
    names = several([short(node) for node in nodes])
    return f"node {names} has" if len(nodes) == 1 else f"nodes {names} have"


def _listed(names: Iterable[str]) -> str:
    return several([short(display(name)) for name in names])


def _dangling(pins: Mapping[str, Sequence[tuple[Element, int]]], passed: set[str]) -> Iterator[Finding]:
    for node, there in pins.items():
        if len(there) == 1 and node not in passed:
            element = there[0][0]
            found = finding(
                "node-dangling",
                subject=display(element.name),
                node=short(node),
                pin=short(display(element.name)),
            )
            yield placed(found, element.origin)


def _loops(elements: Iterable[Element]) -> Iterator[Finding]:
    """Loops of elements whose voltage is fixed at DC, told by the element that closes them."""
    joined = Partition()
    told = 0
    tree: dict[str, list[tuple[str, str]]] = {}
    for element in elements:
        if element.name[0] not in _FIXES_VOLTAGE or len(element.nodes) < 2:
            continue
        first, second = element.nodes[0], element.nodes[1]
        if joined.join(first, second):
            tree.setdefault(first, []).append((second, element.name))
            tree.setdefault(second, []).append((first, element.name))
            continue
        names = [*_path(tree, first, second), element.name]
        text = _listed(names) + (" closes" if len(names) == 1 else " close")
        yield placed(finding("source-loop", subject=display(element.name), names=text), element.origin)
        told += 1
        if told == _MOST_SEARCHES:
            return


def _path(tree: Mapping[str, Sequence[tuple[str, str]]], start: str, end: str) -> list[str]:
    """Names of the elements on the way from one node to another in a tree."""
    came: dict[str, tuple[str, str]] = {start: ("", "")}
    waiting = [start]
    while waiting and end not in came:
        node = waiting.pop()
        for other, name in tree.get(node, ()):
            if other not in came:
                came[other] = (node, name)
                waiting.append(other)
    names = []
    while end != start:
        end, name = came[end]
        names.append(name)
    return names[::-1]


def _rails(circuit: Circuit, besides: str | None) -> set[str]:
    """Nodes that voltage sources hold against ground, without the input."""
    held = Partition()
    sources = [e for e in circuit.elements if isinstance(e, VoltageSource) and e.name != besides]
    for source in sources:
        held.join(*source.nodes)
    ground = held.root(GROUND)
    return {GROUND, *(node for e in sources for node in e.nodes if held.root(node) == ground)}


def _bulks(circuit: Circuit, input_source: str | None) -> Iterator[Finding]:
    rails = _rails(circuit, None if input_source is None else input_source.lower())
    for device in circuit.transistors:
        _, _, source, bulk = device.nodes
        if bulk != source and bulk not in rails:
            name = display(device.name)
            parts = {"device": short(name), "bulk": short(bulk), "source": short(source)}
            yield placed(finding("bulk-not-at-source-or-rail", subject=name, **parts), device.origin)


def _generators(circuit: Circuit, input_source: str | None) -> Iterator[Finding]:
    """Input sources that reach a gate, or whose current reaches a transistor, without a capacitor between."""
    stated = None if input_source is None else input_source.lower()
    inputs = [
        e
        for e in circuit.elements
        if isinstance(e, VoltageSource | CurrentSource) and (e.name == stated if stated else abs(e.ac) > 0.0)
    ]
    if not inputs:
        return
    links: dict[str, list[str]] = {}
    for element in circuit.elements:
        if isinstance(element, Resistor | Inductor):
            for here, other in (element.nodes, element.nodes[::-1]):
                links.setdefault(here, []).append(other)
    pins = _pins(circuit.elements)
    for source in inputs[:_MOST_SEARCHES]:
        rails = _rails(circuit, source.name)
        reached = _reached(source, links, rails)
        there = [(e, i) for node in reached - rails for e, i in pins[node] if isinstance(e, Mosfet)]
        if isinstance(source, CurrentSource):
            yield from _current_in_bias(source, {e.name for e, i in there if i < 3})
            continue
        gates = {e.name for e, i in there if i == 1}
        if not gates:
            continue
        others = {
            e.name for node in (reached & rails) - {GROUND} for e, _ in pins[node] if _supplies(e, source)
        }
        drains = {e.name for e, i in there if i in (0, 2)}
        parts = {
            "source": short(display(source.name)),
            "device": _listed(sorted(gates)),
            "value": format_value(source.dc, "V"),
        }
        if others or drains:
            parts["others"] = _listed(sorted(others | drains))
        slug = "generator-overrides-bias" if others or drains else "generator-sets-bias"
        yield placed(finding(slug, subject=display(source.name), **parts), source.origin)


def _current_in_bias(source: CurrentSource, devices: set[str]) -> Iterator[Finding]:
    """Only the direct current of a current source is part of a bias: it has no resistance of its own."""
    if devices and abs(source.dc) > 0.0:
        parts = {
            "source": short(display(source.name)),
            "devices": _listed(sorted(devices)),
            "value": format_value(source.dc, "A"),
        }
        found = finding("generator-current-in-bias", subject=display(source.name), **parts)
        yield placed(found, source.origin)


def _supplies(element: Element, besides: Element) -> bool:
    return isinstance(element, VoltageSource) and element is not besides


def _reached(source: Element, links: Mapping[str, Sequence[str]], rails: set[str]) -> set[str]:
    """Nodes that a source reaches; where another source holds the voltage the way ends."""
    waiting = [node for node in source.nodes if node not in rails]
    reached = set(waiting)
    while waiting:
        node = waiting.pop()
        for other in links.get(node, ()):
            if other not in reached:
                reached.add(other)
                if other not in rails:
                    waiting.append(other)
    return reached


def _at(voltages: Mapping[str, float], node: str) -> float:
    return 0.0 if node == GROUND else voltages[node]


def polarity_findings(
    circuit: Circuit, voltages: Mapping[str, float], polarised: frozenset[str]
) -> tuple[Finding, ...]:
    """Capacitors with the wrong polarity at the Q-point: those marked polarised (by name), and large ones."""
    marked = {name.lower() for name in polarised}
    found = []
    for part in circuit.elements:
        if not isinstance(part, Capacitor):
            continue
        voltage = _at(voltages, part.nodes[0]) - _at(voltages, part.nodes[1])
        if part.name in marked:
            why = "it is marked polarised"
        elif part.value > LARGE_CAPACITOR:
            why = f"with {format_value(part.value, 'F')} it is mostly an electrolytic"
        else:
            continue
        if voltage < _REVERSED:
            name = display(part.name)
            parts = {"capacitor": short(name), "value": format_value(voltage, "V"), "why": why}
            found.append(placed(finding("capacitor-reversed", subject=name, **parts), part.origin))
    return summed_up(found)


def bulk_findings(circuit: Circuit, voltages: Mapping[str, float]) -> tuple[Finding, ...]:
    """Transistors whose bulk junctions conduct at the Q-point."""
    found = []
    kinds = {card.name: card.kind for card in circuit.models}
    for device in circuit.transistors:
        drain, _, source, bulk = device.nodes
        n_channel = kinds[device.model] == "nmos"
        sign = 1.0 if n_channel else -1.0
        at_bulk = _at(voltages, bulk)
        junctions = {
            "bulk-source": sign * (at_bulk - _at(voltages, source)),
            "bulk-drain": sign * (at_bulk - _at(voltages, drain)),
        }
        worst = max(junctions, key=lambda name: junctions[name])
        if junctions[worst] > FORWARD:
            name = display(device.name)
            parts = {
                "device": short(name),
                "junction": worst,
                "value": format_value(junctions[worst], "V"),
                "kind": "NMOS" if n_channel else "PMOS",
                "extreme": "lowest" if n_channel else "highest",
            }
            found.append(placed(finding("bulk-forward-biased", subject=name, **parts), device.origin))
    return summed_up(found)
