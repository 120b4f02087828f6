"""The nodal solution of a circuit under given effects: bias, and the small signal where a path is known."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from deckgen.circuit.gain import SignedGain, signed_gain
from deckgen.circuit.model import Circuit, Inductor, display
from deckgen.circuit.ports import Ports
from deckgen.circuit.region import Region, region_of
from deckgen.errors import NoBiasError
from deckgen.hand import bandwidth
from deckgen.hand.batch import SQUARE, Batch
from deckgen.hand.bias import BiasPoint, solve_bias
from deckgen.hand.dependence import Dependence, dependence
from deckgen.hand.effects import Effect, EffectSet
from deckgen.hand.network import SmallSignalSystem, Treatment
from deckgen.hand.prediction import MidBand
from deckgen.hand.reduce.signal import SignalNet, signal_net
from deckgen.hand.roles import Role, role_of
from deckgen.hand.smallsignal import (
    ComplexArray,
    SmallSignal,
    drive,
    linearize,
    solve_at,
    voltage,
)

DEFAULT_FREQUENCY = 1e3
"""Mid-band [Hz] where neither the designer nor a hand curve says anything."""


@dataclass(frozen=True, slots=True, eq=False)
class SignalPath:
    """The small signal of a circuit at mid-band; ``response`` are all unknowns for 1 V or 1 A of input."""

    ports: Ports
    small: SmallSignal
    mid: MidBand
    treatments: Mapping[str, Treatment]
    system: SmallSignalSystem
    response: ComplexArray
    gain: SignedGain
    net: SignalNet | None
    role: Role

    @property
    def inductors(self) -> tuple[str, ...]:
        """Inductors of the circuit, by name."""
        return tuple(e.name for e in self.small.circuit.elements if isinstance(e, Inductor))

    def at(self, node: str) -> complex:
        """Signal of a node per volt of EMF, or per ampere of a current source."""
        return complex(voltage(self.system, self.response, node))


@dataclass(frozen=True, slots=True, eq=False)
class Analysis:
    """A circuit's nodal solution; ``circuit`` is the part of ``whole`` that can be analysed by hand."""

    whole: Circuit
    part: Dependence
    on: EffectSet
    bias: BiasPoint | None
    signal: SignalPath | None
    mid: MidBand | None
    ports: Ports | None = None
    unsolved: str | None = None
    """Why there is no bias although other devices may give it one."""

    kept: str | None = None
    """Which effect stays on although the assumptions leave it out, and why."""

    @property
    def circuit(self) -> Circuit:
        """What is analysed."""
        return self.part.circuit


def analyse(circuit: Circuit, ports: Ports | None, on: EffectSet, frequency: float | None) -> Analysis:
    """Solve a circuit. Raises NoBiasError where it has no Q-point and no other device can be why."""
    part = dependence(circuit)
    kept: str | None = None
    try:
        on, bias, kept = _bias(part.circuit, on)
    except NoBiasError as error:
        if part.reason is None:
            raise
        return Analysis(circuit, part, on, None, None, _unknown_mid(ports, frequency), ports, str(error))
    path = None
    if ports is not None and _has_path(part, ports):
        path = _signal_path(part.circuit, ports, bias, on, frequency)
    mid = path.mid if path is not None else _unknown_mid(ports, frequency)
    return Analysis(circuit, part, on, bias, path, mid, ports, kept=kept)


_CLM = Effect.CHANNEL_LENGTH_MODULATION


def _bias(circuit: Circuit, on: EffectSet) -> tuple[EffectSet, BiasPoint, str | None]:
    """Bias under the given effects; channel-length modulation stays on where it is needed, and why.

    Where only drains and current sources set a node's voltage, λ = 0 has no solution or a false one.
    """
    temperatures = (circuit.temperature,)
    if _CLM in on:
        return on, solve_bias(circuit, Batch(effects=(on,), temperatures=temperatures)), None
    both = solve_bias(circuit, Batch(effects=(on, on | _CLM_ONLY), temperatures=temperatures), require=False)
    if not both.converged.any():
        # Alone, so that the error says what is wrong.
        return on, solve_bias(circuit, Batch(effects=(on,), temperatures=temperatures)), None
    if not both.converged[1]:
        return on, both.row(0), None
    if not both.converged[0]:
        kept = "without it there is no bias point"
    else:
        changed = _changed_regions(circuit, both)
        if not changed:
            return on, both.row(0), None
        kept = f"without it {', '.join(changed)} would be in another region"
    return on | _CLM_ONLY, both.row(1), f"channel-length modulation is kept in the bias: {kept}"


_CLM_ONLY: EffectSet = frozenset({_CLM})


def _changed_regions(circuit: Circuit, both: BiasPoint) -> list[str]:
    """Transistors whose region in the two rows differs."""
    without, within = _regions(circuit, both, 0), _regions(circuit, both, 1)
    pairs = zip(circuit.transistors, without, within, strict=True)
    return [display(device.name) for device, first, second in pairs if first is not second]


def _regions(circuit: Circuit, bias: BiasPoint, row: int = 0) -> list[Region]:
    """Region of each transistor in one row."""
    report = SQUARE.report(bias.parameters, bias.terminals)
    signs = (1.0 if circuit.model(each.model).kind == "nmos" else -1.0 for each in circuit.transistors)
    return [
        region_of(v_ov=float(report["VOV"][row, k]), v_ds=sign * float(report["VDS"][row, k]))
        for k, sign in enumerate(signs)
    ]


def _has_path(part: Dependence, ports: Ports) -> bool:
    """Whether input and output are in what can be analysed, and untouched by the rest."""
    if part.reason is None:
        return True  # what does not fit is then refused, with what does
    names = {element.name for element in part.circuit.elements}
    if ports.input not in names or ports.output not in part.circuit.nodes:
        return False
    wanted = {ports.output, *part.circuit.element(ports.input).nodes}
    return part.of_signal(wanted) is None


def _unknown_mid(ports: Ports | None, frequency: float | None) -> MidBand | None:
    if ports is None:
        return None
    if frequency is not None:
        return MidBand(frequency, "stated", 0.0, None, None)
    return MidBand(DEFAULT_FREQUENCY, "1 kHz, no hand curve", 0.0, None, None)


def _signal_path(
    circuit: Circuit, ports: Ports, bias: BiasPoint, on: EffectSet, frequency: float | None
) -> SignalPath:
    small = linearize(circuit, ports, bias)
    mid = bandwidth.find_mid_band(small, frequency)
    treatments = bandwidth.classify_capacitors(small, mid.frequency)
    net = signal_net(circuit, ports, treatments)
    system = _mid_system(small, on, treatments)
    response = solve_at(system, [mid.frequency], drive(system, ports.input))[0]
    gain = signed_gain(complex(voltage(system, response, ports.output)), small.port.floor)
    role = role_of(net, _regions(circuit, bias)[0]) if len(circuit.transistors) == 1 else Role.UNRECOGNISED
    return SignalPath(ports, small, mid, treatments, system, response, gain, net, role)


def _mid_system(small: SmallSignal, on: EffectSet, treatments: Mapping[str, Treatment]) -> SmallSignalSystem:
    """The mid-band circuit: each capacitance as it is where its effect is on, else short or open."""
    left_as_is = {
        Treatment.SHORT: Effect.COUPLING_IMPEDANCE in on,
        Treatment.OPEN: Effect.LOAD_CAPACITANCES in on,
    }
    chosen = {name: Treatment.AS_IS if left_as_is[t] else t for name, t in treatments.items()}
    return small.system(
        bandwidth.without_loops(small.circuit, chosen),
        device_capacitances=Effect.DEVICE_CAPACITANCES in on,
    )
