"""Numbers as SPICE reads them in a deck: a float, a scale suffix, and a rest that is ignored.

``M`` is milli and ``MEG`` mega, whatever the case; what follows the suffix counts as a unit, whatever it
is: ``10kohm`` is 10e3, but so is ``4k7`` 4e3, and a Greek ``μ`` no suffix at all. What looks otherwise than
it reads becomes a finding. Stage files have rules of their own, in ``deckgen.units``.
"""

from __future__ import annotations

import math
import re

# A sign behind anything but E, and an operator, start another word: that is no number.
_NUMBER = re.compile(
    r"([+-]?(?:\d+\.?\d*|\.\d+))(?:(?:e([+-]?\d*)|d(\d*)))?([a-zµ]*)[^\s+*/^-]*", re.IGNORECASE | re.ASCII
)

# "meg" and "mil" come before "m": the longest suffix counts.
_SUFFIXES = (
    ("meg", 1e6), ("mil", 25.4e-6), ("t", 1e12), ("g", 1e9), ("k", 1e3), ("m", 1e-3),
    ("u", 1e-6), ("µ", 1e-6), ("n", 1e-9), ("p", 1e-12), ("f", 1e-15),
)  # fmt: skip


def spice_number(text: str) -> float:
    """Value of a number written in a deck. Raises ValueError for anything else."""
    match = _NUMBER.fullmatch(text.strip())
    if match is None:
        raise ValueError(f"{text!r} is not a number")
    mantissa, power, other_power, letters = match.groups()
    exponent = (power or other_power or "").rstrip("+-")
    value = float(f"{mantissa}e{exponent}" if exponent else mantissa)
    if letters:
        folded = letters.lower()
        value *= next((scale for suffix, scale in _SUFFIXES if folded.startswith(suffix)), 1.0)
    if not math.isfinite(value):
        raise ValueError(f"{text!r} is too large for a number")
    return value


def spice_text(value: float) -> str:
    """Shortest text that SPICE reads back as the same float; no suffix, no rounding.

    Raises ValueError for what is not finite.
    """
    if not math.isfinite(value):
        raise ValueError(f"{value} can't stand in a netlist")
    return repr(float(value))
