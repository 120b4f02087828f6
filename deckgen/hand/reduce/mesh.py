"""A network of resistors and currents, reduced to the nodes that matter by the star-mesh transformation.

A. Rosen, "A new network theorem", J. IEE 62, 1924, 916-918 (from memory): a star with conductances gi from a
node to its neighbours is the same as a mesh with gi·gj/Σg between them. With two arms it is a series
connection.
"""

from __future__ import annotations

import math
from collections.abc import Collection, Iterable, Mapping
from dataclasses import dataclass, field
from itertools import combinations
from types import MappingProxyType

from deckgen.hand.reduce.resistance import Resistance, in_parallel, in_series, of_star

Ends = frozenset[str]


@dataclass(frozen=True, slots=True)
class Mesh:
    """Resistances between pairs of nodes, and currents that flow into nodes [A]."""

    links: Mapping[Ends, Resistance]
    currents: Mapping[str, float] = field(default_factory=lambda: MappingProxyType({}))

    def between(self, first: str, second: str) -> Resistance | None:
        """The resistance between two nodes, None where there is none."""
        return self.links.get(frozenset({first, second})) if first != second else None

    def neighbours(self, node: str) -> frozenset[str]:
        """Nodes that a resistance connects with this one."""
        return frozenset(other for ends in self.links if node in ends for other in ends if other != node)

    def current(self, node: str) -> float:
        """Current of sources into a node [A]."""
        return self.currents.get(node, 0.0)


def mesh_of(
    resistors: Iterable[tuple[tuple[str, str], Resistance]], currents: Mapping[str, float] | None = None
) -> Mesh:
    """Resistors between (joined) nodes; those with both ends at one node fall away."""
    links: dict[Ends, Resistance] = {}
    for (first, second), resistance in resistors:
        if first != second:
            _add(links, frozenset({first, second}), resistance)
    return Mesh(MappingProxyType(links), MappingProxyType(dict(currents or {})))


def _add(links: dict[Ends, Resistance], ends: Ends, resistance: Resistance | None) -> None:
    together = in_parallel(links.get(ends), resistance)
    if together is not None:
        links[ends] = together


def followed(
    mesh: Mesh, node: str, *, ends: Collection[str], before: Collection[str] = ()
) -> tuple[Mesh, str]:
    """Where a node that draws no current has its voltage from, and the mesh without the way there.

    Lone resistors carry nothing: they are followed up to a node of ``ends``, to one with branches, or to
    the last one in front of ``before``.
    """
    links = dict(mesh.links)
    while node not in ends and not abs(mesh.current(node)) > 0.0:
        arms = [pair for pair in links if node in pair]
        if len(arms) != 1:
            break
        (beyond,) = arms[0] - {node}
        if beyond in before:
            break
        del links[arms[0]]
        node = beyond
    return Mesh(MappingProxyType(links), mesh.currents), node


def reduced(mesh: Mesh, keep: Iterable[str]) -> Mesh | None:
    """The mesh with all nodes but ``keep`` eliminated; None where a current has nowhere to go."""
    kept = frozenset(keep)
    links, currents = dict(mesh.links), dict(mesh.currents)
    inner = {node for ends in links for node in ends} | set(currents)
    waiting = sorted(inner - kept)
    while waiting:
        # The node with the fewest arms first: series connections before stars.
        node = min(waiting, key=lambda one: (sum(one in ends for ends in links), one))
        waiting.remove(node)
        if not _eliminate(links, currents, node):
            return None
    return Mesh(MappingProxyType(links), MappingProxyType(currents))


def _eliminate(links: dict[Ends, Resistance], currents: dict[str, float], node: str) -> bool:
    arms = {next(iter(ends - {node})): links[ends] for ends in list(links) if node in ends}
    current = currents.pop(node, 0.0)
    if not arms:
        return not abs(current) > 0.0
    for other in arms:
        del links[frozenset({node, other})]
    if abs(current) > 0.0:
        total = math.fsum(1.0 / arm.value for arm in arms.values())
        for other, arm in arms.items():
            currents[other] = currents.get(other, 0.0) + current / arm.value / total
    for (first, one), (second, two) in combinations(arms.items(), 2):
        beside = in_parallel(*(arm for other, arm in arms.items() if other not in (first, second)))
        through = in_series(one, two) if beside is None else of_star(one, two, beside)
        _add(links, frozenset({first, second}), through)
    return True
