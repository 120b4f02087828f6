"""Resistances as an engineer writes them: parts, in series, in parallel, or what a star of them leaves."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal

from deckgen.circuit.model import Resistor, display


@dataclass(frozen=True, slots=True)
class Resistance:
    """A resistance [Ω] and what it is made of; ``joint`` says how its parts are put together."""

    value: float
    joint: Literal["part", "series", "parallel", "star"]
    parts: tuple[Resistance, ...] = ()
    name: str = ""

    @property
    def formula(self) -> str:
        """``R1∥R2``, ``RS1+RS2``: names put together."""
        return self._told(lambda part: part.name, close=True)

    def numbers(self, number: Callable[[float, str], str]) -> str:
        """``1 kΩ ∥ 10 kΩ``: the same with values, written by ``number``."""
        return self._told(lambda part: number(part.value, "Ω"), close=False)

    def _told(self, tell: Callable[[Resistance], str], *, close: bool) -> str:
        if self.joint == "part":
            return tell(self)
        if self.joint == "star":
            return f"Δ({', '.join(part._told(tell, close=close) for part in self.parts)})"
        texts = [
            f"({text})" if self.joint == "parallel" and part.joint == "series" else text
            for part in self.parts
            for text in (part._told(tell, close=close),)
        ]
        mark = "+" if self.joint == "series" else "∥"
        return (mark if close else f" {mark} ").join(texts)


def part(resistor: Resistor) -> Resistance:
    """A resistor of the circuit."""
    return Resistance(resistor.value, "part", name=display(resistor.name))


def in_parallel(*branches: Resistance | None) -> Resistance | None:
    """All of them in parallel; None is a branch that is not there."""
    parts = _flat("parallel", branches)
    if len(parts) < 2:
        return parts[0] if parts else None
    conductance = math.fsum(1.0 / each.value for each in parts)
    return Resistance(1.0 / conductance if abs(conductance) > 0.0 else math.inf, "parallel", parts)


def in_series(*branches: Resistance | None) -> Resistance | None:
    """One after the other; None is a piece of wire."""
    parts = _flat("series", branches)
    if len(parts) < 2:
        return parts[0] if parts else None
    return Resistance(math.fsum(each.value for each in parts), "series", parts)


def of_star(value: float, arms: tuple[Resistance, ...]) -> Resistance:
    """One side of the mesh that a star of three or more arms leaves (A. E. Kennelly 1899)."""
    return Resistance(value, "star", arms)


def _flat(joint: str, branches: tuple[Resistance | None, ...]) -> tuple[Resistance, ...]:
    flat: list[Resistance] = []
    for branch in branches:
        if branch is not None:
            flat += branch.parts if branch.joint == joint else (branch,)
    return tuple(flat)


def value_of(resistance: Resistance | None) -> float:
    """Value [Ω]; infinite where there is none."""
    return math.inf if resistance is None else resistance.value
