"""Hand values as the nodal solution gives them, one for every quantity of the circuit."""

from __future__ import annotations

from deckgen.circuit.gain import gain_name
from deckgen.circuit.model import display
from deckgen.circuit.power import supply_power
from deckgen.circuit.region import Region, region_of
from deckgen.hand import bandwidth
from deckgen.hand.analysis import Analysis, SignalPath
from deckgen.hand.batch import SQUARE
from deckgen.hand.bias import BiasPoint
from deckgen.hand.effects import Effect
from deckgen.hand.prediction import NO_CURRENT, HandValue, How, OperatingPoint, TransistorPrediction
from deckgen.hand.roles import Role
from deckgen.hand.smallsignal import input_resistance, output_resistance
from deckgen.quantities import KINDS

_BESIDE_THE_GAIN = ("Avi", "Rin", "Rout", "fL", "fH")


def nodal_values(a: Analysis) -> list[HandValue]:
    """Every quantity; without a value but with a reason where it depends on other devices."""
    values = _device_values(a)
    for node in a.whole.nodes:
        reason = _reason(a, (node,))
        voltage = None if reason or a.bias is None else a.bias.voltage(node)
        values.append(_value(f"V({node})", "V", voltage, reason))
    power = (
        None
        if a.part.reason or a.bias is None
        else supply_power(a.circuit, volts=a.bias.voltage, amperes=a.bias.branch_current)
    )
    values.append(_value("Psupply", "Psupply", power, a.part.reason))
    if a.signal is not None:
        values += _signal_values(a.signal, exact=Effect.EXACT_BANDWIDTH in a.on)
    elif a.ports is not None:  # a path is known, but not by hand
        values += _unknown_signal(gain_name(a.whole, a.ports), a.part.reason)
    return values


def _reason(a: Analysis, nodes: tuple[str, ...]) -> str | None:
    if a.bias is None:
        return a.part.reason
    return a.part.of_nodes(nodes)


def _value(name: str, kind: str, value: float | None, reason: str | None = None) -> HandValue:
    return HandValue(name, KINDS[kind].unit, value, How.NODAL, reason)


def _reports(a: Analysis) -> dict[str, dict[str, float]]:
    """Quantities of each transistor that can be analysed, by its name."""
    if a.bias is None:
        return {}
    columns = SQUARE.report(a.bias.parameters, a.bias.terminals)
    return {
        device.name: {kind: float(column[0, index]) for kind, column in columns.items()}
        for index, device in enumerate(a.circuit.transistors)
    }


def _device_values(a: Analysis) -> list[HandValue]:
    reports = _reports(a)
    values = []
    for device in a.whole.transistors:
        report = reports.get(device.name)
        for kind in ("ID", "VGS", "VDS", "VTH", "VOV", "gm", "gds", "gmb"):
            name = f"{kind}({display(device.name)})"
            values.append(
                _value(name, kind, None, a.part.reason)
                if report is None
                else _value(name, kind, report[kind])
            )
    return values


def _signal_values(path: SignalPath, *, exact: bool) -> list[HandValue]:
    port = path.small.port
    # A switch that is off has no pass-band: what gets past it at high frequencies is none.
    if path.mid.outside is not None and path.role is not Role.CUT_OFF:
        return _unknown_signal(port.gain, path.mid.outside)
    f = path.mid.frequency
    f_l, f_h = _edges(path, exact=exact)
    phase = f"{port.gain}.phase"
    behind = port.gain_behind(path.at(path.ports.output), path.at)
    return [
        _value(port.gain, port.gain, path.gain.value, path.gain.reason),
        _value(phase, phase, path.gain.phase),
        _value("Avi", "Avi", behind.value, behind.reason),
        _value("Rin", "Rin", input_resistance(path.small, path.system, f)),
        _value("Rout", "Rout", output_resistance(path.small, path.system, f)),
        _value("fL", "fL", f_l),
        _value("fH", "fH", f_h),
    ]


def _unknown_signal(gain: str, reason: str | None) -> list[HandValue]:
    kinds = (gain, f"{gain}.phase", *_BESIDE_THE_GAIN)
    return [_value(kind, kind, None, reason) for kind in kinds]


def _edges(path: SignalPath, *, exact: bool) -> tuple[float | None, float | None]:
    """Band edges from the exact curve, or from time constants under that assumption; none without gain.

    A sum of R·C says nothing about inductors: with them the exact curve counts.
    """
    if path.gain.phase is None:
        return None, None
    if exact or path.inductors:
        return path.mid.exact_f_l, path.mid.exact_f_h
    lower = bandwidth.lower_edge(bandwidth.short_circuit_constants(path.small, path.treatments))
    upper = bandwidth.upper_edge(bandwidth.open_circuit_constants(path.small, path.treatments))
    return lower, upper


def operating_point(a: Analysis, bias: BiasPoint) -> OperatingPoint:
    """Another operating point of the circuit, as node voltages."""
    return OperatingPoint(
        node_voltages=tuple((node, bias.voltage(node)) for node in a.circuit.nodes),
        stable=bias.stable,
        idle=bool((abs(bias.currents) <= NO_CURRENT).all()),
    )


def transistors(a: Analysis) -> tuple[TransistorPrediction, ...]:
    """Role, region, margin and signals of every transistor that can be analysed."""
    reports = _reports(a)
    role = Role.UNRECOGNISED if a.signal is None else a.signal.role
    found = []
    for index, device in enumerate(a.circuit.transistors):
        report = reports.get(device.name)
        if report is None:
            continue
        region = region_of(v_ov=report["VOV"], v_ds=report["VDS'"])
        v_gs, v_dg, i_d = _signals(a.signal, index, report)
        found.append(
            TransistorPrediction(
                name=display(device.name),
                role=str(Role.CUT_OFF if region is Region.CUTOFF else role),
                law=SQUARE.name,
                region=region,
                margin=report["VDS'"] - report["VOV"],
                v_ov=report["VOV"],
                i_d=report["ID"],
                vgs_per_emf=v_gs,
                vdg_per_emf=v_dg,
                id_per_emf=i_d,
            )
        )
    return tuple(found)


def _signals(
    path: SignalPath | None, index: int, report: dict[str, float]
) -> tuple[float | None, float | None, float | None]:
    """Signals of VGS, of the saturation margin and of ID per volt or ampere of input, where there is one."""
    if path is None:
        return None, None, None
    nodes = path.small.nodes_of(index)
    d, g, s, b = (path.at(nodes[pin]) for pin in SQUARE.channel_pins)
    gm, gds, gmb = report["gm"], report["gds"], report["gmb"]
    chi = gmb / gm if gm > 0.0 else 0.0
    current = gm * (g - s) + gds * (d - s) + gmb * (b - s)
    return abs(g - s), abs((d - s) - (g - s) - chi * (b - s)), abs(current)
