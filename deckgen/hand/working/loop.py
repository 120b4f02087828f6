"""A common source with a resistor from drain to gate: its gain, and what it shows at gate and drain."""

from __future__ import annotations

import math
from dataclasses import dataclass

from deckgen.hand.formulas import feedback
from deckgen.hand.formulas.gain import effective_transconductance, parallel
from deckgen.hand.working.into import Conductances, Into, Named, into_drain


@dataclass(frozen=True, slots=True)
class Loop:
    """Feedback by RF: conductances, and what source, drain and gate have to ground, RF left out."""

    g: Conductances
    r_f: Named
    r_s: Named
    r_d: Named
    r_g: Named

    @property
    def _degenerated(self) -> bool:
        return self.r_s.value > 0.0

    @property
    def _gm(self) -> float:
        return effective_transconductance(
            gm=self.g.gm, gmb=self.g.active_gmb, ro=self.g.ro, r_s=self.r_s.value
        )

    @property
    def _letters(self) -> str:
        return "Gm" if self._degenerated else "gm"

    @property
    def defined(self) -> tuple[str, ...]:
        """What Gm stands for, where there is one."""
        return (f"Gm = gm/(1+({self.g.total})·{self.r_s.symbol})",) if self._degenerated else ()

    @property
    def gain(self) -> float:
        """Gain from gate to drain [V/V]."""
        into = into_drain(self.g, self.r_s).value
        return feedback.drain_feedback_gain(gm=self._gm, r_into=into, r_d=self.r_d.value, r_f=self.r_f.value)

    @property
    def formula(self) -> str:
        """The gain as a formula."""
        beside = "" if self.r_d.resistance is None else f"{self.r_d.symbol}∥"
        around = f"{into_drain(self.g, self.r_s).formula}∥{beside}{self.r_f.symbol}"
        return f"-({self._letters} - 1/{self.r_f.symbol})·({around})"

    @property
    def named(self) -> tuple[Named, ...]:
        """Resistances in the formula of the gain."""
        around = (self.r_s, self.r_d, self.r_f)
        return tuple(each for each in around if each.value > 0.0 and each.resistance is not None)

    @property
    def into_gate(self) -> Into | None:
        """What RF shows at the gate; None for a gain of 1, through RF alone."""
        gain = self.gain
        if not gain < 1.0:
            return None
        value = feedback.miller_resistance(r_f=self.r_f.value, gain=gain)
        return Into(value, f"{self.r_f.symbol}/(1-A)", (self.r_f,))

    @property
    def into_drain(self) -> Into:
        """What transistor and RF show at the drain."""
        own = into_drain(self.g, self.r_s)
        value = feedback.drain_feedback_resistance(gm=self._gm, r_f=self.r_f.value, r_g=self.r_g.value)
        f, g = self.r_f.symbol, self.r_g.symbol
        formula, named = f"({f}+{g})/(1+{self._letters}·{g})", [self.r_f, self.r_g]
        if math.isinf(self.r_g.value):
            formula, named = f"1/{self._letters}", []
        elif not self.r_g.value > 0.0:
            formula, named = f, [self.r_f]
        return Into(
            parallel(own.value, value), f"{own.formula}∥{formula}", (*own.named, *named), self.defined
        )
