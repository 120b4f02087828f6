"""Kirchhoff's current law for the linear model of one transistor among resistors, solved by sympy.

Exact: values are sympy's symbols or rational numbers, and the solution is a rational function or number. It
shares no code with the hand analysis.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

import sympy as sp
from sympy.polys.matrices import DomainMatrix
from sympy.polys.matrices.exceptions import DMNonInvertibleMatrixError

GROUND = "0"


@dataclass(frozen=True)
class Device:
    """Nodes of a transistor, and the conductances of its linear model [S]."""

    drain: str
    gate: str
    source: str
    bulk: str
    gm: Any
    gmb: Any
    gds: Any


@dataclass(frozen=True)
class Network:
    """Resistors as (node, node, resistance [Ω]) and one transistor; no sources."""

    device: Device
    resistors: tuple[tuple[str, str, Any], ...]

    def solved(
        self, *, held: Mapping[str, Any] | None = None, currents: Mapping[str, Any] | None = None
    ) -> dict[str, Any]:
        """Voltages of all nodes for voltages held at some nodes, and for currents into others."""
        fixed = {GROUND: sp.Integer(0), **(held or {})}
        admittances = self._admittances()
        free = list(dict.fromkeys(node for pair in admittances for node in pair if node not in fixed))
        if not free:
            return dict(fixed)
        matrix = sp.zeros(len(free), len(free))
        side = sp.Matrix([(currents or {}).get(node, 0) for node in free])
        for (node, other), value in admittances.items():
            if node in fixed:
                continue
            row = free.index(node)
            if other in fixed:
                side[row] -= value * fixed[other]
            else:
                matrix[row, free.index(other)] += value
        whole = DomainMatrix.from_Matrix(matrix.row_join(side)).to_field()
        answer = whole[:, :-1].lu_solve(whole[:, -1:]).to_Matrix()
        return fixed | dict(zip(free, answer, strict=True))

    def _admittances(self) -> dict[tuple[str, str], Any]:
        """Current out of a node per volt at another [S], by (node, other)."""
        found: dict[tuple[str, str], Any] = {}

        def add(node: str, other: str, value: Any) -> None:
            found[node, other] = found.get((node, other), sp.Integer(0)) + value

        for first, second, value in self.resistors:
            for node, other in ((first, second), (second, first)):
                add(node, node, 1 / value)
                add(node, other, -1 / value)
        d = self.device
        controls = ((d.gate, d.gm), (d.bulk, d.gmb), (d.drain, d.gds), (d.source, -d.gm - d.gmb - d.gds))
        for node, sign in ((d.drain, 1), (d.source, -1)):
            for other, conductance in controls:
                add(node, other, sign * conductance)
        return found

    def without(self, *names: tuple[str, str]) -> Network:
        """The network less all resistors between these pairs of nodes."""
        gone = {frozenset(pair) for pair in names}
        left = tuple(each for each in self.resistors if frozenset(each[:2]) not in gone)
        return replace(self, resistors=left)

    def resistance(self, first: str, second: str = GROUND, *, held: Mapping[str, Any] | None = None) -> Any:
        """What a test current from the second node to the first sees; infinite where it has no way."""
        try:
            found = self.solved(held=held, currents={first: sp.Integer(1), second: sp.Integer(-1)})
        except DMNonInvertibleMatrixError:
            return sp.oo
        return sp.cancel(found[first] - found[second])
