"""The sheet on which steps of working are written down."""

from __future__ import annotations

import math
from collections.abc import Iterable

from deckgen.hand.prediction import Step
from deckgen.units import format_value


def where(formula: str, definitions: Iterable[str]) -> str:
    """A formula and what its symbols stand for: ``A·Ri/(Ri+RSIG) [Ri = R1∥R2]``."""
    told = ", ".join(dict.fromkeys(definitions))
    return f"{formula} [{told}]" if told else formula


class Sheet:
    """Collects steps in order; a step may give the hand value of a quantity.

    ``told``: whether the numbers put into formulas are written out. Who wants the values alone spares
    itself the writing, which takes as long as the whole analysis.
    """

    def __init__(self, *, told: bool = True) -> None:
        self._steps: list[Step] = []
        self._told = told

    def add(
        self,
        symbol: str,
        value: float,
        unit: str,
        *,
        formula: str,
        numbers: str,
        source: str,
        quantity: str | None = None,
        note: str | None = None,
    ) -> float:
        """Write one step down and return its value."""
        self._steps.append(Step(symbol, formula, numbers, value, unit, source, quantity, note))
        return value

    @property
    def steps(self) -> tuple[Step, ...]:
        """All steps, in order."""
        return tuple(self._steps)

    def number(self, value: float, unit: str) -> str:
        """A value as it stands in the numbers of a step; zero has no sign."""
        return format_value(value + 0.0, unit, 4) if self._told else ""

    def plain(self, value: float) -> str:
        """A value without unit as it stands in the numbers of a step."""
        return f"{value + 0.0:.4g}" if self._told else ""

    def sum(self, unit: str, *values: float) -> str:
        """A sum of values: ``12 V - 2.4 V``."""
        first, *rest = values
        told = "".join(
            f" {'-' if math.copysign(1.0, v) < 0.0 else '+'} {self.number(abs(v), unit)}" for v in rest
        )
        return self.number(first, unit) + told
