"""What the hand analysis gives: frozen values, no arrays, no measurement."""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum

from deckgen.circuit.region import Region

NO_CURRENT = 1e-10
"""A; what no channel carries that is on."""

FAR_OUTSIDE_DB = 40.0
"""A gain a hundredth of its maximum is not that of the stage at work: nothing is compared there."""


class How(StrEnum):
    """Where a hand value comes from."""

    CLOSED_FORM = "closed form"
    NODAL = "nodal"


@dataclass(frozen=True, slots=True)
class Step:
    """One line of working: ``symbol = formula = numbers = value unit``, with its source.

    ``quantity`` is the name of the quantity that this step gives the hand value of, if any;
    ``note`` says what a reader should know (an iteration, a range that is left).
    """

    symbol: str
    formula: str
    numbers: str
    value: float
    unit: str
    source: str
    quantity: str | None = None
    note: str | None = None


@dataclass(frozen=True, slots=True)
class HandValue:
    """A hand value; ``value`` is None where the quantity does not exist (``reason`` says why)."""

    name: str
    unit: str
    value: float | None
    how: How
    reason: str | None = None


@dataclass(frozen=True, slots=True)
class TransistorPrediction:
    """A transistor by hand: role, region, saturation margin s·VDS - VOV [V], and its small signals.

    ``vgs_per_emf`` is the peak gate-source signal per volt of EMF at mid-band, after degeneration;
    ``vdg_per_emf`` the signal of s·VDS - VOV, ``id_per_emf`` that of the drain current [A/V]. Where the
    input is a current source, they are per ampere of it [V/A, A/A].
    """

    name: str
    role: str
    law: str
    region: Region
    margin: float
    v_ov: float
    i_d: float
    vgs_per_emf: float | None
    vdg_per_emf: float | None
    id_per_emf: float | None


@dataclass(frozen=True, slots=True)
class MidBand:
    """The frequency at which mid-band is taken [Hz], where it comes from, and how flat it is there."""

    frequency: float
    source: str
    below_maximum_db: float
    exact_f_l: float | None
    exact_f_h: float | None

    @property
    def outside(self) -> str | None:
        """Why signal quantities can't be taken here, or None: the gain is not that of the pass-band."""
        if self.below_maximum_db <= FAR_OUTSIDE_DB:
            return None
        return (
            f"the stated mid-band frequency lies outside the pass-band: the gain there is "
            f"{self.below_maximum_db:.1f} dB below its maximum"
        )


class HalfPlane(StrEnum):
    """Where in the s-plane a pole or zero lies."""

    LEFT = "left"
    RIGHT = "right"
    AXIS = "axis"


@dataclass(frozen=True, slots=True)
class Root:
    """A pole or zero, or a complex pair of them: f = |s|/2π [Hz], Q = |s|/(2·|Re s|).

    ``q`` is None for a real one, which lies at s = -2πf in the left half plane, at s = +2πf in the right;
    infinite for a pair on the axis.
    """

    frequency: float
    q: float | None
    half_plane: HalfPlane


class TimeConstantKind(StrEnum):
    """With what becomes of the other capacitors a capacitor's time constant is taken."""

    SHORT_CIRCUIT = "short-circuit"
    OPEN_CIRCUIT = "open-circuit"


@dataclass(frozen=True, slots=True)
class TimeConstantRow:
    """What a capacitor does to a band edge: ``resistance`` is what it sees [Ω], f = 1/(2πτ) [Hz].

    ``share`` is its part of Σ 1/τ (short-circuit, fL) or of Σ τ (open-circuit, fH). Resistance, τ, f and
    share are negative for a bootstrapped capacitor. None: infinite, or no share because the sum is not
    above zero.
    """

    name: str
    kind: TimeConstantKind
    capacitance: float
    resistance: float | None
    tau: float | None
    frequency: float | None
    share: float | None


@dataclass(frozen=True, slots=True)
class BandEdge:
    """fL or fH [Hz]: from the sum of time constants, of the exact curve, and by Miller where that is.

    ``notes`` say where the sum leaves its range.
    """

    quantity: str
    kind: TimeConstantKind
    estimate: float | None
    exact: float | None
    miller: float | None = None
    notes: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class OperatingPoint:
    """An operating point beside that of the hand values; ``stable``: the circuit stays there on its own."""

    node_voltages: tuple[tuple[str, float], ...]
    stable: bool
    idle: bool
    """Whether no transistor carries a current."""


@dataclass(frozen=True, slots=True)
class Prediction:
    """The hand analysis of one circuit under one set of assumptions."""

    assumptions: tuple[str, ...]
    values: tuple[HandValue, ...]
    transistors: tuple[TransistorPrediction, ...]
    working: tuple[Step, ...]
    mid_band: MidBand | None
    node_voltages: tuple[tuple[str, float], ...]
    node_signals: tuple[tuple[str, complex], ...]
    notes: tuple[str, ...] = ()
    kept: str | None = None
    """Which effects stay on although the assumptions leave them out, and why."""

    stable: bool = True
    """Whether the circuit stays at the operating point of the hand values on its own."""

    others: tuple[OperatingPoint, ...] = ()
    """Other operating points of the circuit, as far as they were found."""

    poles: tuple[Root, ...] = ()
    zeros: tuple[Root, ...] = ()
    """Of the exact gain from the EMF to the output, by frequency; cancelled pairs are left out."""

    hidden_poles: tuple[Root, ...] = ()
    """Natural frequencies of the circuit that its gain does not show."""

    time_constants: tuple[TimeConstantRow, ...] = ()
    """Of each capacitor, by kind, the largest share first."""

    band_edges: tuple[BandEdge, ...] = ()

    def value(self, name: str) -> HandValue | None:
        """The hand value of that name, or None."""
        return next((value for value in self.values if value.name == name), None)

    def constants(self, kind: TimeConstantKind) -> tuple[TimeConstantRow, ...]:
        """The time constants of one kind."""
        return tuple(row for row in self.time_constants if row.kind is kind)
