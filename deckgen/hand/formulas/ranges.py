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

    Infinity is let through where a resistance may be absent (``>0``, ``>=0``); NaN never is.
    """
    for name, (value, rule) in conditions.items():
        bad = math.isnan(value)
        bad |= rule == "any" and not math.isfinite(value)
        bad |= rule == ">0" and not value > 0.0
        bad |= rule == ">=0" and not value >= 0.0
        if bad:
            expected = "a finite number" if rule == "any" else f"a number {rule}"
            raise FormulaInputError(formula, f"{name} = {value}", expected)
