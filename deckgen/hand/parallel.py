"""Capacitors in parallel are one capacitor: what couples, bypasses or loads is their sum."""

from __future__ import annotations

from dataclasses import replace

from deckgen.circuit.model import GROUND, Capacitor, Circuit, VoltageSource, display
from deckgen.hand.reduce.rails import Joined


def with_parallel_capacitors_as_one(circuit: Circuit, input_source: str) -> Circuit:
    """The circuit with a capacitor ``cs1+cs2`` for those between the same nodes at small signal.

    All voltage sources but the input are silent there. Taken alone, each of two equal capacitors would look
    like a load beside the short that is the other.
    """
    joined = Joined(GROUND)
    for element in circuit.elements:
        if isinstance(element, VoltageSource) and element.name != input_source:
            joined.join(*element.nodes)
    groups: dict[frozenset[str], list[Capacitor]] = {}
    for element in circuit.elements:
        if isinstance(element, Capacitor):
            groups.setdefault(frozenset(map(joined.of, element.nodes)), []).append(element)
    together = {
        group[0].name: replace(
            group[0],
            name="+".join(display(each.name) for each in group).lower(),
            value=sum(each.value for each in group),
        )
        for ends, group in groups.items()
        if len(group) > 1 and len(ends) > 1
    }
    if not together:
        return circuit
    gone = {each.name for group in groups.values() if group[0].name in together for each in group[1:]}
    return replace(
        circuit, elements=tuple(together.get(e.name, e) for e in circuit.elements if e.name not in gone)
    )
