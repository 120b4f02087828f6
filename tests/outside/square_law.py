"""The square law written out once more, for one device in n-channel signs, without deckgen's laws.

H. Shichman, D. A. Hodges, IEEE J. Solid-State Circuits SC-3(3), 1968, 285-289.
"""

from __future__ import annotations

import math
from dataclasses import dataclass


@dataclass(frozen=True)
class Card:
    """Parameters of a device: k [A/V²], VTO [V], λ [1/V], γ [√V], φ [V]."""

    k: float
    vto: float
    lam: float
    gamma: float
    phi: float

    def threshold(self, v_sb: float) -> float:
        """VTH [V] for VSB >= 0."""
        return self.vto + self.gamma * (math.sqrt(self.phi + v_sb) - math.sqrt(self.phi))

    def current(self, v_gs: float, v_ds: float, v_sb: float) -> float:
        """Drain current [A] for VDS >= 0."""
        v_ov = v_gs - self.threshold(v_sb)
        if v_ov <= 0.0:
            return 0.0
        if v_ds >= v_ov:
            return 0.5 * self.k * v_ov * v_ov * (1.0 + self.lam * v_ds)
        return self.k * v_ds * (v_ov - 0.5 * v_ds) * (1.0 + self.lam * v_ds)

    def region(self, v_gs: float, v_ds: float, v_sb: float) -> str:
        """Its region, both edges of saturation included."""
        v_ov = v_gs - self.threshold(v_sb)
        return "cut-off" if v_ov <= 0.0 else "saturation" if v_ds >= v_ov else "triode"

    def parameters(self, polarity: str) -> tuple[tuple[str, float], ...]:
        """A level-1 card for W/L = 1, so that KP is k."""
        named = {
            "vto": self.vto if polarity == "n" else -self.vto, "kp": self.k, "lambda": self.lam,
            "gamma": self.gamma, "phi": self.phi,
        }  # fmt: skip
        return tuple(named.items())
