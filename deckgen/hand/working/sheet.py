"""The sheet on which steps of working are written down."""

from __future__ import annotations

from deckgen.hand.prediction import Step
from deckgen.units import format_value


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
        """A value as it stands in the numbers of a step."""
        return format_value(value, unit, 4) if self._told else ""
