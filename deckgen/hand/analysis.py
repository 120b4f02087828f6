"""The nodal solution of a circuit under given effects: bias, and the small signal where a path is known."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from itertools import combinations

from deckgen.circuit.gain import SignedGain, signed_gain
from deckgen.circuit.model import Circuit, Inductor, display
from deckgen.circuit.ports import Ports
from deckgen.circuit.region import Region, region_of
from deckgen.errors import NoBiasError
from deckgen.hand import bandwidth
from deckgen.hand.batch import SQUARE, Batch
from deckgen.hand.bias import BiasPoint, solve_bias, with_other_points
from deckgen.hand.dependence import Dependence, dependence
from deckgen.hand.effects import Effect, EffectSet
from deckgen.hand.network import SmallSignalSystem, Treatment
from deckgen.hand.parallel import with_parallel_capacitors_as_one
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
    """Which effects stay on although the assumptions leave them out, and why."""

    kept_effects: EffectSet = frozenset()
    """These effects."""

    @property
    def circuit(self) -> Circuit:
        """What is analysed."""
        return self.part.circuit


def analyse(circuit: Circuit, ports: Ports | None, on: EffectSet, frequency: float | None) -> Analysis:
    """Solve a circuit. Raises NoBiasError where it has no Q-point and no other device can be why."""
    part = dependence(circuit)
    kept: Kept | None = None
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
    if kept is None:
        return Analysis(circuit, part, on, bias, path, mid, ports)
    return Analysis(circuit, part, on, bias, path, mid, ports, kept=kept.why, kept_effects=kept.effects)


@dataclass(frozen=True, slots=True)
class Kept:
    """Effects that stay on although the assumptions leave them out, and one line on why."""

    effects: EffectSet
    why: str


def _bias(circuit: Circuit, on: EffectSet) -> tuple[EffectSet, BiasPoint, Kept | None]:
    """Bias under the given effects, and the fewest others that have to stay on.

    An effect stays on without which there is no bias, or which moves a transistor into another region: where
    only drains and current sources set a node's voltage, λ = 0 has no solution or a false one.
    """
    left_out = [effect for effect in Effect if effect in SQUARE.effects - on]
    if not left_out:
        return on, solve_bias(circuit, _batch(circuit, on)), None
    every = on.union(left_out)
    both = solve_bias(circuit, _batch(circuit, on, every), require=False)
    if not both.converged[1]:
        if not both.converged[0]:
            solve_bias(circuit, _batch(circuit, on))  # alone, so that the error says what is wrong
        return on, with_other_points(circuit, both.row(0)), None
    whole = both.row(1)
    if both.converged[0] and not _changed(circuit, both.row(0), whole):
        return on, with_other_points(circuit, both.row(0)), None
    for size in range(len(left_out) + 1):
        sets = [on.union(some) for some in combinations(left_out, size)]
        # From the whole solution: of several operating points the same is meant.
        rows = solve_bias(circuit, _batch(circuit, *sets), require=False, near=whole)
        if size == 0:
            changed = _changed(circuit, rows, whole) if rows.converged[0] else None
        for number, chosen in enumerate(sets):
            point = rows.row(number)
            if rows.converged[number] and not _changed(circuit, point, whole):
                return chosen, with_other_points(circuit, point), _kept(chosen - on, changed)
    return every, with_other_points(circuit, whole), _kept(every - on, changed)


def _batch(circuit: Circuit, *effects: EffectSet) -> Batch:
    return Batch(effects=effects, temperatures=(circuit.temperature,))


def _kept(effects: EffectSet, changed: list[str] | None) -> Kept | None:
    """Which effects stay on; ``changed`` are transistors that change their region, None: there is no bias."""
    if not effects:
        return None
    names = [effect.value for effect in Effect if effect in effects]
    listed = names[0] if len(names) == 1 else f"{', '.join(names[:-1])} and {names[-1]}"
    verb, them = ("is", "it") if len(names) == 1 else ("are", "them")
    why = "there is no bias point" if changed is None else f"{', '.join(changed)} would be in another region"
    return Kept(effects, f"{listed} {verb} kept in the bias: without {them} {why}")


def _changed(circuit: Circuit, point: BiasPoint, other: BiasPoint) -> list[str]:
    """Transistors whose region differs between the first rows of two solutions."""
    regions = [_regions(circuit, one) for one in (point, other)]
    return [name for name in regions[0] if regions[0][name] is not regions[1][name]]


def _regions(circuit: Circuit, point: BiasPoint) -> dict[str, Region]:
    """Region of each transistor in the first row."""
    report = SQUARE.report(point.parameters, point.terminals)
    found = {}
    for index, device in enumerate(circuit.transistors):
        v_ov, v_ds = float(report["VOV"][0, index]), float(report["VDS'"][0, index])
        found[display(device.name)] = region_of(v_ov=v_ov, v_ds=v_ds)
    return found


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
    circuit = with_parallel_capacitors_as_one(circuit, ports.input)
    small = linearize(circuit, ports, bias)
    mid = bandwidth.find_mid_band(small, frequency)
    treatments = bandwidth.classify_capacitors(small, mid.frequency)
    net = signal_net(circuit, ports, treatments)
    system = _mid_system(small, on, treatments)
    response = solve_at(system, [mid.frequency], drive(system, ports.input))[0]
    gain = signed_gain(complex(voltage(system, response, ports.output)), small.port.floor)
    regions = _regions(circuit, bias)
    role = role_of(net, *regions.values()) if len(regions) == 1 else Role.UNRECOGNISED
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
