"""Which part of a circuit depends on devices that the hand analysis can't take.

Such a device is left out of the hand analysis together with everything its currents can reach; nodes that
sources hold at a known voltage stop it. What is left is analysed as usual.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace

from deckgen.circuit.model import (
    GROUND,
    Capacitor,
    Cccs,
    Ccvs,
    Circuit,
    Element,
    OtherDevice,
    display,
)
from deckgen.hand.reduce.rails import rail_voltages


@dataclass(frozen=True, slots=True)
class Dependence:
    """The circuit that can be analysed, and the nodes whose voltage (DC) or signal depends on others."""

    circuit: Circuit
    at_dc: frozenset[str]
    at_signal: frozenset[str]
    reason: str | None

    def of_nodes(self, nodes: Iterable[str]) -> str | None:
        """Why quantities at these nodes have no hand value, or None."""
        return self.reason if self.at_dc.intersection(nodes) else None

    def of_signal(self, nodes: Iterable[str]) -> str | None:
        """Why small-signal quantities at these nodes have no hand value, or None."""
        return self.reason if (self.at_signal | self.at_dc).intersection(nodes) else None


def dependence(circuit: Circuit) -> Dependence:
    """Split a circuit into what can be analysed by hand and what depends on other devices."""
    others = circuit.others
    if not others:
        return Dependence(circuit, frozenset(), frozenset(), None)
    named = ", ".join(f"{display(other.name)} ({other.why})" for other in others)
    reason = f"depends on {named}: no hand analysis for this device yet"
    fixed = frozenset(rail_voltages(circuit))
    if any(not other.nodes for other in others):
        everything = frozenset(circuit.nodes)
        return Dependence(replace(circuit, elements=()), everything, everything, reason)
    at_dc = _reached(circuit, fixed, through_capacitors=False)
    at_signal = _reached(circuit, fixed, through_capacitors=True)
    kept = tuple(
        e
        for e in circuit.elements
        if not isinstance(e, OtherDevice) and not at_dc.intersection(_pins(circuit, e))
    )
    return Dependence(replace(circuit, elements=kept), at_dc, at_signal, reason)


def _pins(circuit: Circuit, element: Element) -> tuple[str, ...]:
    """Nodes of an element, those of its controlling source included."""
    if isinstance(element, Cccs | Ccvs):
        return (*element.nodes, *circuit.element(element.control).nodes)
    return element.nodes


def _reached(circuit: Circuit, fixed: frozenset[str], *, through_capacitors: bool) -> frozenset[str]:
    """Nodes that currents of other devices reach, held nodes left out."""
    reached = {node for other in circuit.others for node in other.nodes}
    # The current of a source may be theirs, so whatever it controls depends on them too.
    reached |= {node for e in circuit.elements if isinstance(e, Cccs | Ccvs) for node in e.nodes}
    reached -= fixed | {GROUND}
    links = [
        frozenset(_pins(circuit, element)) - fixed - {GROUND}
        for element in circuit.elements
        if through_capacitors or not isinstance(element, Capacitor)
        if not isinstance(element, OtherDevice)
    ]
    grew = True
    while grew:
        more = {node for link in links if link & reached for node in link}
        grew = not more <= reached
        reached |= more
    return frozenset(reached)
