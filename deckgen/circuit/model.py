"""The frozen circuit that every later step reads.

Names are lower-case, as SPICE reads them; ``display`` gives the name as people write it.
All values are SI; temperatures are in kelvin.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import Literal

GROUND = "0"


@dataclass(frozen=True, slots=True)
class Origin:
    """Where a card was written: file and line number, counted from 1."""

    file: str
    line: int


@dataclass(frozen=True, slots=True)
class Resistor:
    """A linear resistor; ``value`` in ohm."""

    name: str
    nodes: tuple[str, str]
    value: float
    origin: Origin | None = field(default=None, compare=False)


@dataclass(frozen=True, slots=True)
class Capacitor:
    """A linear capacitor; ``value`` in farad."""

    name: str
    nodes: tuple[str, str]
    value: float
    origin: Origin | None = field(default=None, compare=False)


@dataclass(frozen=True, slots=True)
class Inductor:
    """A linear inductor; ``value`` in henry."""

    name: str
    nodes: tuple[str, str]
    value: float
    origin: Origin | None = field(default=None, compare=False)


@dataclass(frozen=True, slots=True)
class VoltageSource:
    """An independent voltage source from nodes[0] (+) to nodes[1] (-); volt."""

    name: str
    nodes: tuple[str, str]
    dc: float = 0.0
    ac: complex = 0j
    origin: Origin | None = field(default=None, compare=False)


@dataclass(frozen=True, slots=True)
class CurrentSource:
    """An independent current source; the current flows from nodes[0] through it to nodes[1]; ampere."""

    name: str
    nodes: tuple[str, str]
    dc: float = 0.0
    ac: complex = 0j
    origin: Origin | None = field(default=None, compare=False)


@dataclass(frozen=True, slots=True)
class Mosfet:
    """A MOSFET: nodes drain, gate, source, bulk; W and L in metre, M devices in parallel.

    Areas ``ad``, ``as_`` [m²] and perimeters ``pd``, ``ps`` [m] of its drain and source junctions; ``nrd``,
    ``nrs`` squares of their resistances. Defaults are those of ngspice 39.
    """

    name: str
    nodes: tuple[str, str, str, str]
    model: str
    w: float
    l: float
    m: float = 1.0
    origin: Origin | None = field(default=None, compare=False)
    ad: float = 0.0
    as_: float = 0.0
    pd: float = 0.0
    ps: float = 0.0
    nrd: float = 1.0
    nrs: float = 1.0


@dataclass(frozen=True, slots=True)
class Vcvs:
    """E: v(nodes[0]) - v(nodes[1]) = gain · (v(nodes[2]) - v(nodes[3]))."""

    name: str
    nodes: tuple[str, str, str, str]
    gain: float
    origin: Origin | None = field(default=None, compare=False)


@dataclass(frozen=True, slots=True)
class Vccs:
    """G: the current gain · (v(nodes[2]) - v(nodes[3])) [S] flows from nodes[0] through it to nodes[1]."""

    name: str
    nodes: tuple[str, str, str, str]
    gain: float
    origin: Origin | None = field(default=None, compare=False)


@dataclass(frozen=True, slots=True)
class Cccs:
    """F: gain times the current through the voltage source ``control``, from nodes[0] to nodes[1]."""

    name: str
    nodes: tuple[str, str]
    control: str
    gain: float
    origin: Origin | None = field(default=None, compare=False)


@dataclass(frozen=True, slots=True)
class Ccvs:
    """H: v(nodes[0]) - v(nodes[1]) = gain [Ω] times the current through ``control``."""

    name: str
    nodes: tuple[str, str]
    control: str
    gain: float
    origin: Origin | None = field(default=None, compare=False)


@dataclass(frozen=True, slots=True)
class OtherDevice:
    """A device that is simulated but that the hand analysis can't take; ``why`` says what it is."""

    name: str
    nodes: tuple[str, ...]
    why: str
    origin: Origin | None = field(default=None, compare=False)


Controlled = Vcvs | Vccs | Cccs | Ccvs
Element = Resistor | Capacitor | Inductor | VoltageSource | CurrentSource | Controlled | Mosfet | OtherDevice


@dataclass(frozen=True, slots=True)
class ModelCard:
    """A ``.model`` card: kind ``nmos`` or ``pmos``, parameters lower-case, SI except TNOM (°C)."""

    name: str
    kind: Literal["nmos", "pmos"]
    parameters: tuple[tuple[str, float], ...]
    origin: Origin | None = field(default=None, compare=False)

    def get(self, name: str, default: float) -> float:
        """Value of a parameter, or ``default`` where the card does not give it."""
        return dict(self.parameters).get(name, default)


@dataclass(frozen=True, slots=True)
class Circuit:
    """One flat circuit: its elements in deck order, its models, its temperatures in kelvin."""

    title: str
    elements: tuple[Element, ...]
    models: tuple[ModelCard, ...] = ()
    options: tuple[tuple[str, str], ...] = ()
    temperature: float = 300.15
    tnom: float = 300.15
    gmin: float = 1e-12
    """Conductance that the simulator puts across every junction [S]."""

    def element(self, name: str) -> Element:
        """The element of that name (any case), its own or the one it is displayed by. Raises KeyError."""
        wanted = name.lower()
        for element in self.elements:
            if element.name == wanted:
                return element
        if "@" in wanted:
            for element in self.elements:
                if display(element.name).lower() == wanted:
                    return element
        raise KeyError(name)

    def model(self, name: str) -> ModelCard:
        """The model card of that name (any case). Raises KeyError."""
        for card in self.models:
            if card.name == name.lower():
                return card
        raise KeyError(name)

    def has_series_resistance(self, device: Mosfet) -> bool:
        """Whether the inner drain or source of a transistor lies behind a resistance of its card."""
        card = self.model(device.model)
        sheet = card.get("rsh", 0.0)
        return card.get("rd", sheet * device.nrd) > 0.0 or card.get("rs", sheet * device.nrs) > 0.0

    @property
    def transistors(self) -> tuple[Mosfet, ...]:
        """All transistors, in deck order."""
        return tuple(e for e in self.elements if isinstance(e, Mosfet))

    @property
    def others(self) -> tuple[OtherDevice, ...]:
        """Devices without hand analysis, in deck order."""
        return tuple(e for e in self.elements if isinstance(e, OtherDevice))

    @property
    def nodes(self) -> tuple[str, ...]:
        """All nodes but ground, in order of first appearance."""
        return tuple(dict.fromkeys(node for node in self._pins() if node != GROUND))

    def _pins(self) -> Iterator[str]:
        for element in self.elements:
            yield from element.nodes


def display(name: str) -> str:
    """Name of an element as people write it: upper case, ``m.x1.m1`` as ``M1@X1``.

    Of subcircuits defined inside each other ngspice writes the letter again: ``m.x1.m.x2.m1``.
    """
    kind, *scopes = name.split(".")
    if len(kind) != 1 or len(scopes) < 2:
        return name.upper()
    return "@".join(part.upper() for part in reversed(scopes) if part != kind)
