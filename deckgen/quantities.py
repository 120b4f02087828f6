"""Every quantity that deckgen compares: its trade name, unit and default tolerance.

A quantity is a kind (``ID``, ``Av``, ``V``) and, for some kinds, what it belongs to: ``ID(M1)``,
``V(out)``. Tolerances are those of the ``paper`` and the ``full`` assumption set on level-1 models.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import Literal

Scope = Literal["transistor", "node", "stage"]


@dataclass(frozen=True, slots=True)
class Limit:
    """A tolerance: relative as a fraction, absolute in the unit of the quantity, or dB.

    ``of_supply`` is a floor given as a fraction of the supply voltage.
    """

    relative: float | None = None
    absolute: float | None = None
    db: float | None = None
    of_supply: float | None = None


@dataclass(frozen=True, slots=True)
class Kind:
    """One kind of quantity.

    ``small_signal`` kinds lose their meaning when the region is not the one assumed.
    ``modulo`` is the period of an angle. ``ratio`` kinds have a gap in dB as well.
    """

    name: str
    unit: str
    scope: Scope
    label: str
    paper: Limit
    full: Limit
    small_signal: bool = False
    ratio: bool = False
    modulo: float | None = None


_MILLIVOLT = 1e-3

_VOLTAGE = Limit(0.05, 0.020), Limit(1e-3, _MILLIVOLT)
_RAIL = Limit(0.05, of_supply=0.02), Limit(1e-3, _MILLIVOLT)
_CURRENT = Limit(0.10, 1e-9), Limit(1e-3, 1e-9)
_RO = Limit(0.25, 1e-9), Limit(1e-3, 1e-9)
_EDGE = Limit(0.25), Limit(2e-3)

_KINDS = (
    Kind("ID", "A", "transistor", "drain current", *_CURRENT),
    Kind("VGS", "V", "transistor", "gate-source voltage", *_VOLTAGE),
    Kind("VDS", "V", "transistor", "drain-source voltage", *_RAIL),
    Kind("VTH", "V", "transistor", "threshold voltage", *_VOLTAGE),
    Kind("VOV", "V", "transistor", "overdrive voltage", *_VOLTAGE),
    Kind("gm", "S", "transistor", "transconductance", *_CURRENT, small_signal=True),
    Kind("gds", "S", "transistor", "output conductance", *_RO, small_signal=True),
    Kind("gmb", "S", "transistor", "bulk transconductance", *_CURRENT, small_signal=True),
    Kind("V", "V", "node", "node voltage", *_RAIL),
    Kind("Psupply", "W", "stage", "supply power", *_CURRENT),
    Kind("Av", "V/V", "stage", "voltage gain", Limit(db=1.0), Limit(db=0.02), small_signal=True, ratio=True),
    Kind(
        "Av.phase", "deg", "stage", "phase of the gain",
        Limit(absolute=5.0), Limit(absolute=0.2), small_signal=True, modulo=360.0,
    ),
    Kind("Rm", "Ω", "stage", "transresistance", Limit(db=1.0), Limit(db=0.02), small_signal=True, ratio=True),
    Kind(
        "Rm.phase", "deg", "stage", "phase of the transresistance",
        Limit(absolute=5.0), Limit(absolute=0.2), small_signal=True, modulo=360.0,
    ),
    Kind(
        "Avi", "V/V", "stage", "voltage gain from the input node",
        Limit(db=1.0), Limit(db=0.02), small_signal=True, ratio=True,
    ),
    Kind("Rin", "Ω", "stage", "input resistance", Limit(0.10), Limit(2e-3), small_signal=True),
    Kind("Rout", "Ω", "stage", "output resistance", Limit(0.15), Limit(2e-3), small_signal=True),
    Kind("fL", "Hz", "stage", "lower -3 dB frequency", *_EDGE, small_signal=True),
    Kind("fH", "Hz", "stage", "upper -3 dB frequency", *_EDGE, small_signal=True),
)  # fmt: skip
"""Paper and full limits of voltages of a device, voltages between rails, currents, ro, band edges: over
20,000 random level-1 stages, paper values with λ ≤ 0.03 and a source resistor lay within 1.5 % in ID, 7 %
in gm and 8 % in Av nine times of ten."""

KINDS: dict[str, Kind] = {kind.name: kind for kind in _KINDS}

_NAME = re.compile(r"(?P<kind>[A-Za-z][\w.]*)(?:\((?P<of>[^()\s]+)\))?")


@dataclass(frozen=True, slots=True)
class Quantity:
    """A kind and what it belongs to; ``str`` gives the trade name."""

    kind: str
    of: str | None = None

    def __str__(self) -> str:
        return self.kind if self.of is None else f"{self.kind}({self.of})"

    @property
    def description(self) -> Kind:
        """The kind's entry in the table."""
        return KINDS[self.kind]


def parse_quantity(text: str) -> Quantity:
    """Read ``gm(M1)`` or ``Av``. Raises ValueError saying what is wrong with it."""
    match = _NAME.fullmatch(text.strip())
    if match is None or match["kind"] not in KINDS:
        known = ", ".join(KINDS)
        raise ValueError(f"{text!r} is not a quantity; known: {known}")
    kind = KINDS[match["kind"]]
    of = match["of"]
    if kind.scope == "stage":
        if of is not None:
            raise ValueError(f"{kind.name} belongs to the stage; write {kind.name} alone")
        return Quantity(kind.name)
    if of is None:
        example = "M1" if kind.scope == "transistor" else "out"
        raise ValueError(f"{kind.name} needs to say of what; write for example {kind.name}({example})")
    return Quantity(kind.name, of.upper() if kind.scope == "transistor" else of.lower())
