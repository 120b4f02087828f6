"""Definitions that hand and simulated small-signal values share: sign of a gain, the input, Rin and Rout."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

from deckgen.circuit.model import GROUND, Circuit, CurrentSource, Element, Resistor, VoltageSource
from deckgen.circuit.ports import Ports
from deckgen.errors import Fault, InputError

INFINITE_RESISTANCE = 1e10
"""A resistance above this [Ω] counts as absent: it is beyond what simulator and bench resolve."""

NO_GAIN = 1e-6
"""A gain below this (-120 dB) counts as absent: what is left of it is leakage and rounding."""

NO_TRANSRESISTANCE = 1e-3
"""A transresistance below this [Ω] counts as absent. It is what ``NO_GAIN`` is behind 1 kΩ of source
resistance (Rm = Av·RS), and what ngspice 39 has for a resistor of 0 Ω. Rounding stays far below: of balanced
bridges with up to 10 GΩ at the input it left 1e-11 Ω (measured, ngspice 39 and the nodal solution)."""

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


def signed_gain(gain: complex, floor: float = NO_GAIN) -> SignedGain:
    """The gain as it is compared: hand and simulated values go through this one definition.

    ``floor`` is the size below which there is none, in the unit of the gain.
    """
    if not abs(gain) >= floor:
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


@dataclass(frozen=True, slots=True)
class InputPort:
    """Where the stage begins, as its source counts it: from ``plus`` to ``minus``.

    A voltage source's EMF is positive at its first node; the port lies behind the declared resistance in
    series with it. The current of a current source comes out of its second node; the declared resistance
    lies across the port, with the conductance ``beside`` [S]. Where ``plus`` is ground or a supply, the port
    is ``turned``: its ``minus`` is the input node.
    """

    plus: str
    minus: str
    is_current: bool = False
    beside: float = 0.0
    turned: bool = False

    @property
    def gain(self) -> str:
        """Name of the gain: ``Av`` = V(out)/EMF, or ``Rm`` = V(out)/I."""
        return "Rm" if self.is_current else "Av"

    @property
    def floor(self) -> float:
        """Size below which a signal at unit drive counts as none: V/V, or Ω."""
        return NO_TRANSRESISTANCE if self.is_current else NO_GAIN

    def voltage(self, at: Callable[[str], complex]) -> complex:
        """Voltage across the port, from ``plus`` to ``minus``; ``at`` gives the signal of a node."""
        return at(self.plus) - at(self.minus)

    def resistance(self, at: Callable[[str], complex], current: complex) -> float | None:
        """Rin = 1/Re Y [Ω], where ``current`` enters at ``plus``; None where it is infinite."""
        return resistance(voltage=self.voltage(at), current=current, beside=self.beside)

    def gain_behind(self, output: complex, at: Callable[[str], complex]) -> SignedGain:
        """Avi = ``output`` over V(input node), that node's voltage against the other end of the source.

        Absent where either signal is, at unit drive.
        """
        across = -self.voltage(at) if self.turned else self.voltage(at)
        if not (abs(output) >= self.floor and abs(across) >= self.floor):
            return SignedGain(None, None)
        return signed_gain(output / across)


def gain_name(circuit: Circuit, ports: Ports) -> str:
    """``Rm`` where the input is a current source, else ``Av``."""
    return "Rm" if isinstance(circuit.element(ports.input), CurrentSource) else "Av"


def input_port(circuit: Circuit, ports: Ports) -> InputPort:
    """The port that the input source drives.

    Raises InputError where the declared source resistance is not in series with a voltage source, or not
    parallel to a current source.
    """
    source = circuit.element(ports.input)
    if isinstance(source, CurrentSource):
        minus, plus = source.nodes
        beside = _parallel(circuit, ports, source)
        return InputPort(plus, minus, is_current=True, beside=beside, turned=_is_held(circuit, source, plus))
    if not isinstance(source, VoltageSource):
        raise InputError(Fault(circuit.title, "input", ports.input, "the name of a source"))
    plus, minus = _behind(circuit, ports, source)
    return InputPort(plus, minus, turned=_is_held(circuit, source, plus))


def _behind(circuit: Circuit, ports: Ports, source: VoltageSource) -> tuple[str, str]:
    """The nodes of a voltage source, the one with the declared resistance replaced by that beyond it."""
    if ports.source_resistance is None:
        return source.nodes
    ends = circuit.element(ports.source_resistance).nodes
    # From whichever end of the source it hangs on it leads on to the stage.
    for here, other in (source.nodes, source.nodes[::-1]):
        if here != GROUND and here in ends and other not in ends:
            behind = ends[1] if ends[0] == here else ends[0]
            return (behind, other) if here == source.nodes[0] else (other, behind)
    hot = " or ".join(node for node in source.nodes if node != GROUND)
    raise _misplaced(circuit, ports, f"a resistor at node {hot}, in series with the source")


def _is_held(circuit: Circuit, source: Element, node: str) -> bool:
    """Whether a node is ground, or voltage sources other than the input hold it against ground."""
    links = [e.nodes for e in circuit.elements if isinstance(e, VoltageSource) and e.name != source.name]
    held = {GROUND}
    while grown := {end for nodes in links if held & {*nodes} for end in nodes} - held:
        held |= grown
    return node in held


def _parallel(circuit: Circuit, ports: Ports, source: CurrentSource) -> float:
    """Conductance [S] of the resistance declared parallel to a current source, 0 where none is."""
    if ports.source_resistance is None:
        return 0.0
    part = circuit.element(ports.source_resistance)
    if not isinstance(part, Resistor) or {*part.nodes} != {*source.nodes}:
        between = " and ".join(source.nodes)
        raise _misplaced(circuit, ports, f"a resistor between nodes {between}, parallel to the input source")
    return 1.0 / part.value


def _misplaced(circuit: Circuit, ports: Ports, expected: str) -> InputError:
    return InputError(Fault(circuit.title, "source resistance", ports.source_resistance or "", expected))


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
