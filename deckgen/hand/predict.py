"""The hand analysis of one circuit: bias, small signal, roles, working, hand values.

Hand values are the closed forms where the role has them and the assumptions are those they are made
under; elsewhere the nodal solution under the same assumptions. No measurement is ever seen here.
"""

from __future__ import annotations

from collections.abc import Mapping

from deckgen.circuit.model import Circuit, VoltageSource, display
from deckgen.circuit.ports import Ports
from deckgen.circuit.power import delivered, supply_power
from deckgen.hand.analysis import Analysis, SignalPath, analyse
from deckgen.hand.effects import Effect, effects_under
from deckgen.hand.network import Treatment
from deckgen.hand.nodal import nodal_values, operating_point, transistors
from deckgen.hand.prediction import HandValue, How, Prediction, Step
from deckgen.hand.reduce.dc import dc_net
from deckgen.hand.reduce.signal import SignalNet
from deckgen.hand.response import response_of
from deckgen.hand.roles import Role
from deckgen.hand.smallsignal import explicit_capacitors
from deckgen.hand.working import dc as dc_working
from deckgen.hand.working import edges as edge_working
from deckgen.hand.working import qpoint
from deckgen.hand.working import signal as signal_working
from deckgen.hand.working.conductances import write_conductances
from deckgen.hand.working.into import Conductances
from deckgen.hand.working.sheet import Sheet

_ROUNDING = 1e-12
"""A source that delivers a smaller share of the whole is not told of: its current is rounding."""


def predict(
    circuit: Circuit,
    ports: Ports | None,
    *,
    assumptions: tuple[str, ...],
    frequency: float | None = None,
    told: bool = True,
) -> Prediction:
    """Hand analysis under the given assumption slugs; ``frequency`` is the stated mid-band [Hz].

    Without ``ports`` the bias alone is analysed. ``told`` False leaves the numbers of the working unwritten,
    for who wants the values alone. Raises NoBiasError where there is no Q-point, InputError
    where the ports don't fit the circuit.
    """
    analysis = analyse(circuit, ports, effects_under(assumptions), frequency)
    nodal = nodal_values(analysis)
    steps = _working(analysis, told=told)
    closed = {step.quantity: step for step in steps if step.quantity is not None}
    bias, path = analysis.bias, analysis.signal
    response = response_of(path, steps)
    nodes = () if bias is None else tuple(n for n in circuit.nodes if analysis.part.of_nodes((n,)) is None)
    return Prediction(
        assumptions=assumptions,
        values=tuple(_chosen(value, closed) for value in nodal),
        transistors=transistors(analysis),
        working=steps,
        mid_band=analysis.mid,
        node_voltages=() if bias is None else tuple((node, bias.voltage(node)) for node in nodes),
        node_signals=()
        if path is None
        else tuple((node, path.at(node)) for node in path.small.circuit.nodes),
        notes=(*_notes(analysis, steps), *response.notes),
        kept=analysis.kept,
        poles=response.poles,
        zeros=response.zeros,
        hidden_poles=response.hidden_poles,
        time_constants=response.time_constants,
        band_edges=response.band_edges,
        stable=bias is None or bias.stable,
        others=() if bias is None else tuple(operating_point(analysis, other) for other in bias.others),
    )


def _chosen(nodal: HandValue, closed: Mapping[str, Step]) -> HandValue:
    """The closed form where there is one and the quantity exists."""
    step = closed.get(nodal.name)
    if step is None or nodal.value is None:
        return nodal
    return HandValue(nodal.name, nodal.unit, step.value, How.CLOSED_FORM)


def _working(a: Analysis, *, told: bool) -> tuple[Step, ...]:
    """Closed forms, as far as the assumptions are the ones they are made under."""
    net = dc_net(a.circuit)
    if net is None or a.bias is None or not _is_channel_alone(a):
        return ()
    device = qpoint.device_of(net.device.name, a.bias.parameters)
    point = qpoint.solve(net, device)
    if point is None:
        return ()
    sheet = Sheet(told=told)
    dc_working.write_bias(sheet, net, device, point)
    write_conductances(sheet, device, point, net)
    if a.part.reason is None:
        _write_supply(sheet, a)
    path = a.signal
    if path is not None and path.net is not None and path.role is not Role.UNRECOGNISED and _is_ideal(a):
        _write_small_signal(sheet, path, path.net, exact=Effect.EXACT_BANDWIDTH in a.on)
    return sheet.steps


def _is_ideal(a: Analysis) -> bool:
    """Whether coupling capacitors are shorts, as the closed forms of the gain take them."""
    return Effect.COUPLING_IMPEDANCE not in a.on


def _is_channel_alone(a: Analysis) -> bool:
    """Whether nothing acts at DC but a channel without λ: closed forms know of no more."""
    beyond = {Effect.CHANNEL_LENGTH_MODULATION, Effect.BULK_JUNCTIONS}
    if any(a.circuit.has_series_resistance(device) for device in a.circuit.transistors):
        beyond.add(Effect.SERIES_RESISTANCE)
    return not beyond & a.on


def _write_supply(sheet: Sheet, a: Analysis) -> None:
    if a.bias is None:
        return
    bias, told = a.bias, []
    whole = supply_power(a.circuit, volts=bias.voltage, amperes=bias.branch_current)
    for element, power in delivered(a.circuit, volts=bias.voltage, amperes=bias.branch_current):
        if not power > _ROUNDING * whole:
            continue
        if isinstance(element, VoltageSource):
            volts, current = element.dc, -bias.branch_current(element.name)
        else:
            volts = bias.voltage(element.nodes[1]) - bias.voltage(element.nodes[0])
            current = element.dc
        told.append(f"{sheet.number(abs(volts), 'V')}·{sheet.number(abs(current), 'A')}")
    sheet.add(
        "Psupply",
        whole,
        "W",
        formula="Σ V·I of the sources that deliver",
        numbers=" + ".join(told) or sheet.number(0.0, "W"),
        source="Kirchhoff",
        quantity="Psupply",
    )


def _write_small_signal(sheet: Sheet, path: SignalPath, net: SignalNet, *, exact: bool) -> None:
    hand = {step.quantity: step.value for step in sheet.steps}
    name = display(net.device.name)
    g = Conductances(
        gm=hand[f"gm({name})"],
        gds=hand[f"gds({name})"],
        gmb=hand[f"gmb({name})"],
        bulk_acts=not net.bulk_at_source,
    )
    inner = signal_working.write_signal(sheet, net, g)
    if inner is None or exact or path.gain.phase is None:
        return
    edge_working.write_lower_edge(sheet, path.small, g, path.treatments, path.mid)
    edge_working.write_upper_edge(sheet, path.small, net, path.role, g, path.treatments, path.mid, inner)


def _notes(a: Analysis, steps: tuple[Step, ...]) -> tuple[str, ...]:
    notes = []
    if not steps:
        notes.append("no closed form under these assumptions: all values are nodal solutions")
    elif a.signal is not None and _is_ideal(a) and "A" not in {step.symbol for step in steps}:
        notes.append(
            "no closed form for the gain of this network: gain, resistances and band edges are nodal"
        )
    if a.unsolved is not None:
        notes.append(f"no bias by hand: {a.unsolved}")
    if a.signal is not None:
        notes += _signal_notes(a.signal)
    return tuple(notes)


def _signal_notes(path: SignalPath) -> list[str]:
    notes = []
    for key, name in (("source resistance", path.ports.source_resistance), ("load", path.ports.load)):
        if name is None:
            notes.append(f"no {key} declared: every resistor counts as part of the stage")
    if path.inductors:
        named = ", ".join(display(name) for name in path.inductors)
        notes.append(f"fL and fH are those of the exact curve: time constants R·C leave out {named}")
    meanings = {Treatment.SHORT: "coupling or bypass", Treatment.OPEN: "load capacitance"}
    for treatment, meaning in meanings.items():
        parts = explicit_capacitors(path.small.circuit)
        names = [display(part.name) for part in parts if path.treatments[part.name] is treatment]
        if names:
            notes.append(f"taken as {meaning}: {', '.join(names)}")
    return notes
