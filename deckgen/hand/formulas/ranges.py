"""Ranges in which formulas hold, as data beside them, and the checks of their inputs."""

from __future__ import annotations

import math
from dataclasses import dataclass

from deckgen.errors import FormulaInputError


@dataclass(frozen=True, slots=True)
class Range:
    """A formula holds while ``symbol`` lies from ``low`` to ``high`` (both included)."""

    symbol: str
    low: float
    high: float
    why: str

    def note(self, value: float) -> str | None:
        """What to tell the reader when ``value`` is outside, else None."""
        if self.low <= value <= self.high:
            return None
        return f"outside the formula's range: {self.symbol} = {value:.3g}, {self.why}"


def require(formula: str, **conditions: tuple[float, str]) -> None:
    """Refuse nonsense: each keyword names an input, with its value and ``any``, ``>0`` or ``>=0``.

    ``>0 or inf`` lets infinity through, for a resistance that may be absent; NaN never is.
    """
    for name, (value, rule) in conditions.items():
        bound, _, infinite = rule.partition(" or ")
        good = math.isfinite(value) or (infinite == "inf" and value > 0.0)
        good &= bound == "any" or value > 0.0 or (bound == ">=0" and value >= 0.0)
        if not good:
            expected = "a finite number" if rule == "any" else f"a number {rule}"
            raise FormulaInputError(formula, f"{name} = {value}", expected)
