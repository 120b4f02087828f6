"""Resistances as an engineer writes them: parts, in series, in parallel, or what a star of them leaves."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal

from deckgen.circuit.model import Resistor, display

Number = Callable[[float, str], str]
"""Writes a value with its unit."""


@dataclass(frozen=True, slots=True)
class Resistance:
    """A resistance [Ω] and what it is made of; ``joint`` says how its parts are put together.

    Of a ``star`` the parts are the two arms between whose ends it lies, and all other arms in parallel.
    """

    value: float
    joint: Literal["part", "series", "parallel", "star"]
    parts: tuple[Resistance, ...] = ()
    name: str = ""

    @property
    def formula(self) -> str:
        """``RS1+RS2``, ``R1∥R2``: names put together; ∥ binds closer than +."""
        return self._told(lambda part: part.name, "")

    @property
    def branch(self) -> str:
        """The formula as it stands beside ∥."""
        return f"({self.formula})" if self.joint in ("series", "star") else self.formula

    @property
    def factor(self) -> str:
        """The formula as it stands in a product."""
        return self.formula if self.joint == "part" else f"({self.formula})"

    def numbers(self, number: Number) -> str:
        """``1 kΩ ∥ 10 kΩ``: the same with values, written by ``number``."""
        return self._told(lambda part: number(part.value, "Ω"), " ")

    def branch_numbers(self, number: Number) -> str:
        """The values as they stand beside ∥."""
        return f"({self.numbers(number)})" if self.joint in ("series", "star") else self.numbers(number)

    def factor_numbers(self, number: Number) -> str:
        """The values as they stand in a product."""
        return self.numbers(number) if self.joint == "part" else f"({self.numbers(number)})"

    def _told(self, tell: Callable[[Resistance], str], gap: str) -> str:
        if self.joint == "part":
            return tell(self)
        plus = f"{gap}+{gap}"
        if self.joint == "series":
            return plus.join(part._told(tell, gap) for part in self.parts)
        if self.joint == "parallel":
            return f"{gap}∥{gap}".join(part._inside(tell, gap, "series", "star") for part in self.parts)
        first, second, _ = self.parts
        factors = [part._inside(tell, gap, "series", "star", "parallel") for part in self.parts]
        product = f"{factors[0]}·{factors[1]}/{factors[2]}"
        return plus.join((first._told(tell, gap), second._told(tell, gap), product))

    def _inside(self, tell: Callable[[Resistance], str], gap: str, *bracketed: str) -> str:
        text = self._told(tell, gap)
        return f"({text})" if self.joint in bracketed else text


NO_RESISTANCE = Resistance(0.0, "part", name="0")
"""A piece of wire."""


def part(resistor: Resistor) -> Resistance:
    """A resistor of the circuit."""
    return Resistance(resistor.value, "part", name=display(resistor.name))


def in_parallel(*branches: Resistance | None) -> Resistance | None:
    """All of them in parallel; None is a branch that is not there."""
    parts = _flat("parallel", branches)
    if len(parts) < 2:
        return parts[0] if parts else None
    return Resistance(1.0 / math.fsum(1.0 / each.value for each in parts), "parallel", parts)


def in_series(*branches: Resistance | None) -> Resistance | None:
    """One after the other; None is a piece of wire."""
    parts = _flat("series", branches)
    if len(parts) < 2:
        return parts[0] if parts else None
    return Resistance(math.fsum(each.value for each in parts), "series", parts)


def of_star(first: Resistance, second: Resistance, beside: Resistance) -> Resistance:
    """The side between the ends of two arms of a star, ``beside`` all its other arms in parallel.

    R = R1 + R2 + R1·R2/R3, after A. E. Kennelly 1899 (from memory).
    """
    value = first.value + second.value + first.value * second.value / beside.value
    return Resistance(value, "star", (first, second, beside))


def _flat(joint: str, branches: tuple[Resistance | None, ...]) -> tuple[Resistance, ...]:
    flat: list[Resistance] = []
    for branch in branches:
        if branch is not None:
            flat += branch.parts if branch.joint == joint else (branch,)
    return tuple(flat)


def value_of(resistance: Resistance | None) -> float:
    """Value [Ω]; infinite where there is none."""
    return math.inf if resistance is None else resistance.value
