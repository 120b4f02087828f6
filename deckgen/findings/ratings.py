"""Stresses of parts held against the ratings that the designer states.

Voltages are the magnitude at the Q-point plus the peak of the signal where an amplitude is stated;
currents and powers are those of the Q-point.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from deckgen.circuit.model import GROUND, Capacitor, Circuit, Element, Mosfet, Resistor, display
from deckgen.comparison import Finding, RatingRow, Verdict
from deckgen.findings.table import finding
from deckgen.stage.model import Rating
from deckgen.units import format_value

_UNITS = {"VDS": "V", "VGS": "V", "ID": "A", "PD": "W", "P": "W", "V": "V"}


@dataclass(frozen=True, slots=True)
class Stress:
    """One side's view of the circuit: node voltages [V], signals per unit of input, drain currents [A]."""

    voltages: Mapping[str, float]
    signals: Mapping[str, complex]
    currents: Mapping[str, float]
    amplitude: float

    def knows(self, element: Element) -> bool:
        """Whether all that a stress of this part needs is known on this side."""
        nodes = all(node == GROUND or node in self.voltages for node in element.nodes)
        return nodes and (not isinstance(element, Mosfet) or display(element.name) in self.currents)

    def between(self, first: str, second: str) -> float:
        """Largest magnitude of the voltage between two nodes [V]."""
        direct = abs(self._at(self.voltages, first) - self._at(self.voltages, second))
        signal = abs(self.signals.get(first, 0j) - self.signals.get(second, 0j))
        return float(direct + self.amplitude * signal)

    def direct(self, first: str, second: str) -> float:
        """Magnitude of the voltage between two nodes at the Q-point [V]."""
        return float(abs(self._at(self.voltages, first) - self._at(self.voltages, second)))

    @staticmethod
    def _at(values: Mapping[str, complex] | Mapping[str, float], node: str) -> complex:
        return 0.0 if node == GROUND else values[node]


def stress_of(element: Element, quantity: str, stress: Stress) -> float:
    """Value of a rated quantity of one part. Raises ValueError where the part has none such."""
    if isinstance(element, Mosfet):
        drain, gate, source, _ = element.nodes
        current = abs(stress.currents[display(element.name)])
        if quantity == "ID":
            return current
        if quantity == "PD":
            return current * stress.direct(drain, source)
        if quantity in ("VDS", "VGS"):
            return stress.between(drain if quantity == "VDS" else gate, source)
    if isinstance(element, Resistor) and quantity == "P":
        return stress.direct(*element.nodes) ** 2 / element.value
    if isinstance(element, Capacitor) and quantity == "V":
        return stress.between(*element.nodes)
    raise ValueError(f"{display(element.name)} has no {quantity}")


def rating_rows(
    circuit: Circuit, ratings: Sequence[Rating], *, hand: Stress, simulated: Stress | None
) -> tuple[RatingRow, ...]:
    """Each stated rating against both sides; a side that exceeds it is beyond."""
    rows = []
    for rating in ratings:
        element = circuit.element(rating.part)
        by_hand, as_simulated = (
            stress_of(element, rating.quantity, side) if side is not None and side.knows(element) else None
            for side in (hand, simulated)
        )
        sides = [side for side in (by_hand, as_simulated) if side is not None]
        # Written so that a value that is no number counts as beyond.
        fine = bool(sides) and all(side <= rating.limit for side in sides)
        rows.append(
            RatingRow(
                part=rating.part,
                quantity=rating.quantity,
                unit=_UNITS[rating.quantity],
                limit=rating.limit,
                hand=by_hand,
                simulated=as_simulated,
                verdict=Verdict.WITHIN if fine else Verdict.BEYOND,
            )
        )
    return tuple(rows)


def rating_findings(circuit: Circuit, rows: Sequence[RatingRow]) -> tuple[Finding, ...]:
    """Ratings that are exceeded, and the parts for which none was stated."""
    found = [
        finding(
            "rating-exceeded",
            subject=row.part,
            part=row.part,
            quantity=row.quantity,
            value=format_value(worst, row.unit),
            side=side,
            limit=format_value(row.limit, row.unit),
        )
        for row in rows
        if row.verdict is Verdict.BEYOND
        for side, worst in [_worst(row)]
    ]
    rated = {row.part.upper() for row in rows}
    names = [display(e.name) for e in circuit.elements if isinstance(e, Mosfet | Resistor | Capacitor)]
    missing = [name for name in names if name not in rated]
    if missing:
        found.append(finding("ratings-not-stated", parts=", ".join(missing)))
    return tuple(found)


def _worst(row: RatingRow) -> tuple[str, float | None]:
    sides = {"by hand": row.hand, "as simulated": row.simulated}
    known = {side: value for side, value in sides.items() if value is not None}
    # A side that is no number does not compare: it is the worst, as the verdict has it.
    side = max(known, key=lambda name: math.inf if math.isnan(known[name]) else known[name])
    return side, known[side]
