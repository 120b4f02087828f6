"""The hand analysis of one circuit: bias, small signal, roles, working, hand values.

Hand values are the closed forms where the role has them and the assumptions are those they are made
under; elsewhere the nodal solution under the same assumptions. No measurement is ever seen here.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from deckgen.circuit.gain import SignedGain, signed_gain
from deckgen.circuit.model import Circuit, CurrentSource, VoltageSource, display
from deckgen.circuit.ports import Ports
from deckgen.circuit.region import region_of
from deckgen.hand import bandwidth
from deckgen.hand.batch import SQUARE, Batch
from deckgen.hand.bias import BiasPoint, solve_bias
from deckgen.hand.effects import Effect, EffectSet, effects_under
from deckgen.hand.network import SmallSignalSystem, Treatment
from deckgen.hand.prediction import (
    HandValue,
    How,
    MidBand,
    Prediction,
    Step,
    TransistorPrediction,
)
from deckgen.hand.reduce import SignalNet, dc_net, signal_net
from deckgen.hand.roles import Role, role_of
from deckgen.hand.smallsignal import (
    SmallSignal,
    drive,
    explicit_capacitors,
    input_resistance,
    linearize,
    output_resistance,
    solve_at,
    transfer,
    voltage,
)
from deckgen.hand.working import dc as dc_working
from deckgen.hand.working import edges as edge_working
from deckgen.hand.working import signal as signal_working
from deckgen.hand.working.sheet import Sheet, number
from deckgen.quantities import KINDS


@dataclass(frozen=True, slots=True)
class _Analysis:
    """Everything the nodal solution knows; the closed forms are written beside it."""

    circuit: Circuit
    ports: Ports
    on: EffectSet
    bias: BiasPoint
    small: SmallSignal
    mid: MidBand
    treatments: Mapping[str, Treatment]
    system: SmallSignalSystem
    gain: SignedGain
    net: SignalNet | None
    role: Role


def predict(
    circuit: Circuit, ports: Ports, *, assumptions: tuple[str, ...], frequency: float | None = None
) -> Prediction:
    """Hand analysis under the given assumption slugs; ``frequency`` is the stated mid-band [Hz].

    Raises NoBiasError where there is no Q-point, InputError where the ports don't fit the circuit.
    """
    analysis = _analyse(circuit, ports, effects_under(assumptions), frequency)
    nodal = {value.name: value for value in _nodal_values(analysis)}
    steps = _working(analysis)
    closed = {step.quantity: step for step in steps if step.quantity is not None}
    values = tuple(_chosen(value, closed) for value in nodal.values())
    return Prediction(
        assumptions=assumptions,
        values=values,
        transistors=_transistors(analysis),
        working=steps,
        mid_band=analysis.mid,
        node_voltages=tuple((node, analysis.bias.voltage(node)) for node in circuit.nodes),
        node_signals=_node_signals(analysis),
        notes=_notes(analysis, steps),
    )


def _analyse(circuit: Circuit, ports: Ports, on: EffectSet, frequency: float | None) -> _Analysis:
    bias = solve_bias(circuit, Batch(effects=(on,), temperatures=(circuit.temperature,)))
    small = linearize(circuit, ports, bias)
    mid = bandwidth.find_mid_band(small, frequency)
    treatments = bandwidth.classify_capacitors(small, mid.frequency)
    net = signal_net(circuit, ports, treatments)
    system = _mid_system(small, on, treatments)
    gain = signed_gain(complex(transfer(small, system, [mid.frequency])[0]))
    return _Analysis(circuit, ports, on, bias, small, mid, treatments, system, gain, net, role_of(net))


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


def _nodal_values(a: _Analysis) -> list[HandValue]:
    values = []
    reports = SQUARE.report(a.bias.parameters, a.bias.terminals)
    for index, device in enumerate(a.circuit.transistors):
        for kind, column in reports.items():
            values.append(_value(f"{kind}({display(device.name)})", kind, float(column[0, index])))
    values += [_value(f"V({node})", "V", a.bias.voltage(node)) for node in a.circuit.nodes]
    values.append(_value("Psupply", "Psupply", supply_power(a.circuit, a.bias)))
    values += _gain_values(a.gain)
    f = a.mid.frequency
    values.append(_value("Rin", "Rin", input_resistance(a.small, a.system, f)))
    values.append(_value("Rout", "Rout", output_resistance(a.small, a.system, f)))
    f_l, f_h = _edges(a)
    values += [_value("fL", "fL", f_l), _value("fH", "fH", f_h)]
    return values


def _value(name: str, kind: str, value: float | None, reason: str | None = None) -> HandValue:
    return HandValue(name, KINDS[kind].unit, value, How.NODAL, reason)


def _gain_values(gain: SignedGain) -> list[HandValue]:
    return [
        _value("Av", "Av", gain.value, gain.reason),
        _value("Av.phase", "Av.phase", gain.phase),
    ]


def _edges(a: _Analysis) -> tuple[float | None, float | None]:
    """Band edges from the exact curve, or from time constants under that assumption; none without gain."""
    if a.gain.phase is None:
        return None, None
    if Effect.EXACT_BANDWIDTH in a.on:
        return a.mid.exact_f_l, a.mid.exact_f_h
    lower = bandwidth.lower_edge(bandwidth.short_circuit_constants(a.small, a.treatments))
    upper = bandwidth.upper_edge(bandwidth.open_circuit_constants(a.small, a.treatments))
    return lower, upper


def supply_power(circuit: Circuit, bias: BiasPoint, row: int = 0) -> float:
    """Power that all independent sources deliver at the Q-point [W]."""
    total = 0.0
    for element in circuit.elements:
        if isinstance(element, VoltageSource):
            total -= element.dc * bias.branch_current(element.name, row)
        elif isinstance(element, CurrentSource):
            rise = bias.voltage(element.nodes[1], row) - bias.voltage(element.nodes[0], row)
            total += element.dc * rise
    return total


def _chosen(nodal: HandValue, closed: Mapping[str, Step]) -> HandValue:
    """The closed form where there is one and the quantity exists."""
    step = closed.get(nodal.name)
    if step is None or nodal.value is None:
        return nodal
    return HandValue(nodal.name, nodal.unit, step.value, How.CLOSED_FORM)


def _working(a: _Analysis) -> tuple[Step, ...]:
    """Closed forms, as far as the assumptions are the ones they are made under."""
    net = dc_net(a.circuit)
    if net is None or Effect.CHANNEL_LENGTH_MODULATION in a.on:
        return ()
    device = dc_working.device_of(net.device.name, a.bias.parameters)
    point = dc_working.solve(net, device)
    if point is None:
        return ()
    sheet = Sheet()
    dc_working.write_bias(sheet, net, device, point)
    _write_supply(sheet, a)
    if a.net is not None and a.role is not Role.UNRECOGNISED and Effect.COUPLING_IMPEDANCE not in a.on:
        _write_small_signal(sheet, a, a.net)
    return sheet.steps


def _write_supply(sheet: Sheet, a: _Analysis) -> None:
    sources = [e for e in a.circuit.elements if isinstance(e, VoltageSource) and abs(e.dc) > 0.0]
    numbers = " + ".join(
        f"{number(s.dc, 'V')}·{number(-a.bias.branch_current(s.name), 'A')}" for s in sources
    )
    sheet.add(
        "Psupply", supply_power(a.circuit, a.bias), "W", formula="Σ V·I of the supplies", numbers=numbers,
        source="Kirchhoff", quantity="Psupply",
    )  # fmt: skip


def _write_small_signal(sheet: Sheet, a: _Analysis, net: SignalNet) -> None:
    hand = {step.quantity: step.value for step in sheet.steps}
    name = display(net.device.name)
    g = signal_working.Conductances(
        gm=hand[f"gm({name})"],
        gds=hand[f"gds({name})"],
        gmb=hand[f"gmb({name})"],
        bulk_acts=not net.bulk_at_source,
    )
    inner = signal_working.write_signal(sheet, net, a.role, g, a.ports)
    if Effect.EXACT_BANDWIDTH in a.on or a.gain.phase is None:
        return
    edge_working.write_lower_edge(sheet, a.small, g, a.treatments, a.mid)
    edge_working.write_upper_edge(sheet, a.small, net, a.role, g, a.treatments, a.mid, inner)


def _transistors(a: _Analysis) -> tuple[TransistorPrediction, ...]:
    reports = SQUARE.report(a.bias.parameters, a.bias.terminals)
    x = solve_at(a.system, [a.mid.frequency], drive(a.system, a.ports.input))[0]
    found = []
    for index, device in enumerate(a.circuit.transistors):
        sign = 1.0 if a.circuit.model(device.model).kind == "nmos" else -1.0
        report = {kind: float(column[0, index]) for kind, column in reports.items()}
        d, g, s, b = (complex(voltage(a.system, x, node)) for node in device.nodes)
        gm, gds, gmb = report["gm"], report["gds"], report["gmb"]
        chi = gmb / gm if gm > 0.0 else 0.0
        found.append(
            TransistorPrediction(
                name=display(device.name),
                role=str(a.role),
                law=SQUARE.name,
                region=region_of(v_ov=report["VOV"], v_ds=sign * report["VDS"]),
                margin=sign * report["VDS"] - report["VOV"],
                v_ov=report["VOV"],
                i_d=report["ID"],
                vgs_per_emf=abs(g - s),
                vdg_per_emf=abs((d - s) - (g - s) - chi * (b - s)),
                id_per_emf=abs(gm * (g - s) + gds * (d - s) + gmb * (b - s)),
            )
        )
    return tuple(found)


def _node_signals(a: _Analysis) -> tuple[tuple[str, complex], ...]:
    x = solve_at(a.system, [a.mid.frequency], drive(a.system, a.ports.input))[0]
    return tuple((node, complex(voltage(a.system, x, node))) for node in a.circuit.nodes)


def _notes(a: _Analysis, steps: tuple[Step, ...]) -> tuple[str, ...]:
    notes = []
    if not steps:
        notes.append("no closed form under these assumptions: all values are nodal solutions")
    elif a.role is Role.UNRECOGNISED:
        notes.append(
            "no closed form for the gain of this network: gain, resistances and band edges are nodal"
        )
    for key, name in (("source resistance", a.ports.source_resistance), ("load", a.ports.load)):
        if name is None:
            notes.append(f"no {key} declared: every resistor counts as part of the stage")
    shorted = [
        display(p.name) for p in explicit_capacitors(a.circuit) if a.treatments[p.name] is Treatment.SHORT
    ]
    opened = [
        display(p.name) for p in explicit_capacitors(a.circuit) if a.treatments[p.name] is Treatment.OPEN
    ]
    if shorted:
        notes.append(f"taken as coupling or bypass: {', '.join(shorted)}")
    if opened:
        notes.append(f"taken as load capacitance: {', '.join(opened)}")
    return tuple(notes)
