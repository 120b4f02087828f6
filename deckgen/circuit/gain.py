"""Definitions that hand and simulated small-signal values share: sign of a gain, Rin and Rout."""

from __future__ import annotations

import math
from dataclasses import dataclass

from deckgen.circuit.model import GROUND, Circuit, Resistor
from deckgen.circuit.ports import Ports
from deckgen.errors import Fault, InputError

INFINITE_RESISTANCE = 1e10
"""A resistance above this [Ω] counts as absent: it is beyond what simulator and bench resolve."""

NO_GAIN = 1e-6
"""A gain below this (-120 dB) counts as absent: what is left of it is leakage and rounding."""

UNCLEAR_PHASE = 45.0
"""A gain whose phase is further than this [deg] from 0° and 180° has no sign."""


@dataclass(frozen=True, slots=True)
class SignedGain:
    """|A| with the sign of its real part, and its phase [deg]; both None where there is no gain.

    ``reason`` says why a gain that is there has no sign.
    """

    value: float | None
    phase: float | None
    reason: str | None = None


def signed_gain(gain: complex) -> SignedGain:
    """The gain as it is compared: hand and simulated values go through this one definition."""
    if not abs(gain) >= NO_GAIN:
        return SignedGain(None, None)
    phase = math.degrees(math.atan2(gain.imag, gain.real))
    reason = unclear_phase(phase)
    return SignedGain(None if reason else math.copysign(abs(gain), gain.real), phase, reason)


def unclear_phase(phase: float) -> str | None:
    """Why a gain of this phase [deg] has no sign, or None where it has one."""
    off = abs((phase + 90.0) % 180.0 - 90.0)
    if off <= UNCLEAR_PHASE:
        return None
    return f"the phase of the gain is {phase:.0f}°, more than {UNCLEAR_PHASE:.0f}° from 0° or 180°"


def input_node(circuit: Circuit, ports: Ports) -> tuple[str, str]:
    """Node behind the source resistance, and the node that the EMF itself drives.

    Raises InputError where the declared source resistance does not hang on the source.
    """
    source = circuit.element(ports.input)
    driven = source.nodes[0] if source.nodes[0] != GROUND else source.nodes[1]
    if ports.source_resistance is None:
        return driven, driven
    ends = circuit.element(ports.source_resistance).nodes
    if driven not in ends:
        expected = f"a resistor at node {driven}"
        raise InputError(Fault(circuit.title, "source resistance", ports.source_resistance, expected))
    return (ends[1] if ends[0] == driven else ends[0]), driven


def resistance(*, voltage: complex, current: complex, beside: float = 0.0) -> float | None:
    """1/Re Y [Ω] where ``current`` flows in at ``voltage``, without the conductance ``beside`` it [S].

    0 where no voltage arises; None above ``INFINITE_RESISTANCE``.
    """
    if not abs(voltage) > 0.0:
        return 0.0
    conductance = (current / voltage).real - beside
    if abs(conductance) * INFINITE_RESISTANCE <= 1.0:
        return None
    return 1.0 / conductance


def load_conductance(circuit: Circuit, ports: Ports) -> float:
    """1/RL of the declared load [S], 0 where none is declared or it hangs elsewhere than at the output."""
    if ports.load is None:
        return 0.0
    part = circuit.element(ports.load)
    if not isinstance(part, Resistor):
        raise InputError(Fault(circuit.title, "load", ports.load, "the name of a resistor"))
    return 1.0 / part.value if ports.output in part.nodes else 0.0
