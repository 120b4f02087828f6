"""Resistances into the terminals of a transistor, as formula and value."""

from __future__ import annotations

import math
from dataclasses import dataclass

from deckgen.hand.formulas import gain as formulas
from deckgen.hand.formulas import quiet_gate
from deckgen.hand.reduce.resistance import Number, Resistance, value_of


@dataclass(frozen=True, slots=True)
class Conductances:
    """Hand values of gm, gds, gmb [S]; ``bulk_acts`` says whether gmb plays a part in the gain."""

    gm: float
    gds: float
    gmb: float
    bulk_acts: bool

    @property
    def ro(self) -> float:
        """1/gds [Ω], infinite for gds = 0."""
        return 1.0 / self.gds if self.gds > 0.0 else math.inf

    @property
    def active_gmb(self) -> float:
        """The part of gmb that acts, as far as the bulk does not move with the source."""
        return self.gmb if self.bulk_acts else 0.0

    @property
    def sum(self) -> str:
        """Gm and gmb together as they stand in a product."""
        return "(gm+gmb)" if self.active_gmb > 0.0 else "gm"

    @property
    def total(self) -> str:
        """All conductances of the source as they stand in a sum."""
        return "gm+gmb+1/ro" if self.active_gmb > 0.0 else "gm+1/ro"

    def told(self, *names: str) -> tuple[tuple[str, float, str], ...]:
        """Symbol, value and unit of those of gm, gmb and ro that are named; gmb only where it acts."""
        known = {"gm": (self.gm, "S"), "gmb": (self.gmb, "S"), "ro": (self.ro, "Ω")}
        return tuple((name, *known[name]) for name in names if name != "gmb" or self.active_gmb > 0.0)


@dataclass(frozen=True, slots=True)
class Named:
    """A resistance under the symbol that it has in a formula; None is an infinite one."""

    letters: str
    resistance: Resistance | None

    @property
    def value(self) -> float:
        """Value [Ω]."""
        return value_of(self.resistance)

    @property
    def symbol(self) -> str:
        """``RD`` for a part of just that name, else ``RD'``: no part can be called so."""
        own = self.resistance is not None and self.resistance.formula == self.letters
        return self.letters if own else f"{self.letters}'"

    @property
    def meaning(self) -> str:
        """``RD' = RD∥RL``; empty where the symbol is the part's own name."""
        if self.resistance is None:
            return f"{self.symbol} = ∞"
        return "" if self.symbol == self.letters else f"{self.symbol} = {self.resistance.formula}"

    def told(self, number: Number) -> str:
        """``RD' = RD∥RL = 10 kΩ ∥ 47 kΩ``."""
        if self.resistance is None:
            return self.meaning
        return f"{self.meaning or self.symbol} = {self.resistance.numbers(number)}"


@dataclass(frozen=True, slots=True)
class Into:
    """A resistance into a terminal [Ω], its formula as it stands beside ∥, and the symbols in that."""

    value: float
    formula: str
    named: tuple[Named, ...] = ()
    defined: tuple[str, ...] = ()
    """Definitions of other symbols."""

    @property
    def meanings(self) -> tuple[str, ...]:
        """What its symbols stand for."""
        return (*self.defined, *meanings(*self.named))


def meanings(*named: Named) -> tuple[str, ...]:
    """What symbols stand for, as far as they are not the parts' own names."""
    return tuple(each.meaning for each in named if each.meaning)


def into_drain(g: Conductances, r_s: Named) -> Into:
    """Resistance into the drain over what the source has to ground, gate at signal ground."""
    if math.isinf(r_s.value):
        return Into(math.inf, "")
    value = formulas.drain_resistance(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_s=r_s.value)
    if not r_s.value > 0.0:
        return Into(value, "ro")
    return Into(value, f"(ro + {r_s.symbol} + {g.sum}·ro·{r_s.symbol})", (r_s,))


def into_source(g: Conductances, r_d: Named) -> Into:
    """Resistance into the source over what the drain has to ground, gate at signal ground."""
    value = formulas.source_resistance(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_d=r_d.value)
    if not r_d.value > 0.0:
        return Into(value, f"1/({g.total})")
    return Into(value, f"(1+{r_d.symbol}/ro)/({g.total})", (r_d,))


def into_diode(g: Conductances, r_s: Named) -> Into:
    """Resistance into the one node of gate and drain, over what the source has to ground."""
    value = quiet_gate.diode_resistance(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_s=r_s.value)
    if not r_s.value > 0.0:
        return Into(value, "1/(gm+1/ro)")
    return Into(value, f"(1 + ({g.total})·{r_s.symbol})/(gm+1/ro)", (r_s,))
