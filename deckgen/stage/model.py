"""The frozen Stage: one circuit under check, with all that its designer says about it.

Values are SI floats (temperatures in kelvin); names keep the case the designer wrote.
"""

from __future__ import annotations

import datetime
from dataclasses import dataclass
from typing import Literal

RegionName = Literal["cut-off", "triode", "saturation"]
AssumptionSet = Literal["paper", "full"]
SourceUnit = Literal["V", "A"]


@dataclass(frozen=True, slots=True)
class Part:
    """A two-terminal part or source of the topology, with its value in SI units."""

    name: str
    value: float


@dataclass(frozen=True, slots=True)
class Model:
    """A level-1 model: polarity ``n`` or ``p``; parameters by their SPICE names in upper case."""

    name: str
    polarity: Literal["n", "p"]
    parameters: tuple[tuple[str, float], ...]


@dataclass(frozen=True, slots=True)
class Transistor:
    """A transistor; W and L in metre; ``region`` is what the designer states, or None.

    ``geometry`` is what it states of AD, AS [m²], PD, PS [m], NRD, NRS, by these names.
    """

    name: str
    model: str
    w: float
    l: float
    m: float = 1.0
    region: RegionName | None = None
    bulk: Literal["rail", "source"] = "rail"
    geometry: tuple[tuple[str, float], ...] = ()


@dataclass(frozen=True, slots=True)
class Signal:
    """Where the signal enters and leaves. ``input`` names the source, ``output`` the node.

    Both are empty for a deck that leaves them open: then transistors alone are looked at.
    ``frequency`` is the stated mid-band frequency [Hz], ``amplitude`` the peak EMF [V], or the peak current
    [A] of a current source, whose ``unit`` is A; ``source_resistance`` and ``load`` name the resistors
    declared as such.
    """

    input: str
    output: str
    frequency: float | None = None
    amplitude: float | None = None
    source_resistance: str | None = None
    load: str | None = None
    unit: SourceUnit = "V"


@dataclass(frozen=True, slots=True)
class Conditions:
    """Temperature of the stage and of the model parameters, in kelvin."""

    temperature: float = 300.15
    tnom: float = 300.15


@dataclass(frozen=True, slots=True)
class HandSettings:
    """Assumption set, with single assumptions (by slug) added or dropped."""

    assumptions: AssumptionSet = "paper"
    add: tuple[str, ...] = ()
    drop: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class ToleranceRule:
    """Tolerance for a kind (``gm``) or one quantity (``gm(M1)``).

    ``relative`` as a fraction, ``absolute`` in the quantity's unit, ``db`` in dB; None is "not stated".
    """

    target: str
    relative: float | None = None
    absolute: float | None = None
    db: float | None = None


@dataclass(frozen=True, slots=True)
class Claim:
    """A number the designer states. ``value`` is the limit, ``upper`` the upper end of ``within``."""

    quantity: str
    kind: Literal["equals", "at_least", "at_most", "within"]
    value: float
    upper: float | None = None
    tolerance: ToleranceRule | None = None


@dataclass(frozen=True, slots=True)
class KnownGap:
    """A gap that is excused until a date, as long as it stays below ``limit``."""

    quantity: str
    reason: str
    limit: ToleranceRule
    until: datetime.date


@dataclass(frozen=True, slots=True)
class Rating:
    """A limit of a part: transistors VDS, VGS, ID, PD; resistors P; capacitors V (magnitudes)."""

    part: str
    quantity: Literal["VDS", "VGS", "ID", "PD", "P", "V"]
    limit: float


@dataclass(frozen=True, slots=True)
class Stage:
    """One stage: what is built, how it is driven, and what its designer expects of it."""

    name: str
    file: str
    title: str
    topology: str
    parts: tuple[Part, ...]
    models: tuple[Model, ...]
    transistors: tuple[Transistor, ...]
    signal: Signal
    conditions: Conditions = Conditions()
    hand: HandSettings = HandSettings()
    tolerances: tuple[ToleranceRule, ...] = ()
    claims: tuple[Claim, ...] = ()
    known_gaps: tuple[KnownGap, ...] = ()
    ratings: tuple[Rating, ...] = ()
    wanted: tuple[str, ...] = ()
    deck: str | None = None
    """The deck that is checked, where there is one; then topology, parts and models are empty."""

    regions: tuple[tuple[str, RegionName], ...] = ()
    """Regions that the designer states, by transistor."""

    polarised: tuple[str, ...] = ()
    """Capacitors marked as polarised."""
