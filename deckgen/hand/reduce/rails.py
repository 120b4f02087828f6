"""Nodes whose voltage the sources fix, and nodes that shorts make one."""

from __future__ import annotations

from collections.abc import Iterable

from deckgen.circuit.model import GROUND, Circuit, Inductor, VoltageSource


class Joined:
    """Nodes joined by shorts; each set is named by the first of ``first`` in it, else by any of its nodes."""

    def __init__(self, *first: str) -> None:
        self._parent: dict[str, str] = {}
        self._rank = {name: number for number, name in enumerate(first)}

    def of(self, node: str) -> str:
        """Name of the set that a node belongs to."""
        while self._parent.get(node, node) != node:
            node = self._parent[node]
        return node

    def join(self, first: str, second: str) -> None:
        """Make two nodes one."""
        first, second = self.of(first), self.of(second)
        if first == second:
            return
        last = len(self._rank)
        keep, give = sorted((first, second), key=lambda node: self._rank.get(node, last))
        self._parent[give] = keep


def rail_voltages(circuit: Circuit, *, besides: Iterable[str] = ()) -> dict[str, float]:
    """Nodes whose voltage the sources fix against ground, with that voltage [V]; inductors are shorts."""
    left_out = set(besides)
    known = {GROUND: 0.0}
    fixing = [
        (e.nodes, e.dc if isinstance(e, VoltageSource) else 0.0)
        for e in circuit.elements
        if isinstance(e, VoltageSource | Inductor) and e.name not in left_out
    ]
    changed = True
    while changed:
        changed = False
        for (plus, minus), volts in fixing:
            if minus in known and plus not in known:
                known[plus] = known[minus] + volts
                changed = True
            elif plus in known and minus not in known:
                known[minus] = known[plus] - volts
                changed = True
    return known
