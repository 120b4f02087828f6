"""From the simulator's plots to measured quantities, by the same definitions as the hand analysis."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from deckgen.bench.plan import Plan, readouts
from deckgen.circuit.gain import NO_GAIN, InputPort, input_port, load_conductance, resistance, signed_gain
from deckgen.circuit.model import GROUND, Circuit, Mosfet, display
from deckgen.circuit.ports import Ports
from deckgen.circuit.power import supply_power
from deckgen.circuit.region import Region, region_of
from deckgen.quantities import KINDS
from deckgen.simulator.raw import Plot

Array = NDArray[np.float64]


IMPLAUSIBLE = 1e6
"""Volts or amperes at an operating point beyond which it is no result of an amplifier stage."""


@dataclass(frozen=True, slots=True)
class MeasuredValue:
    """A simulated value; None without ``reason`` is absent, with one it can't be compared."""

    name: str
    unit: str
    value: float | None
    reason: str | None = None


@dataclass(frozen=True, slots=True)
class MeasuredTransistor:
    """Region and saturation margin s·VDS - VOV [V] of a transistor as simulated."""

    name: str
    region: Region
    margin: float


@dataclass(frozen=True, slots=True)
class Measurement:
    """What the simulator answered about one circuit."""

    values: tuple[MeasuredValue, ...]
    transistors: tuple[MeasuredTransistor, ...]
    node_voltages: tuple[tuple[str, float], ...]
    node_signals: tuple[tuple[str, complex], ...]

    def value(self, name: str) -> MeasuredValue | None:
        """The measured value of that name, or None."""
        return next((value for value in self.values if value.name == name), None)


def measure(circuit: Circuit, ports: Ports | None, plan: Plan, plots: Sequence[Plot]) -> Measurement:
    """Quantities from the plots of a plan, as accepted by the runner; of the signal where it is known."""
    point, *signal = plots
    volts = {node: _real(point, f"v({node})") for node in circuit.nodes} | {GROUND: 0.0}
    values: list[MeasuredValue] = []
    transistors = []
    for device in circuit.transistors:
        found, region = _transistor(circuit, device, point, volts)
        values += found
        transistors.append(region)
    values += [_value(f"V({node})", "V", volts[node]) for node in circuit.nodes]
    power = supply_power(circuit, volts=volts.__getitem__, amperes=lambda name: _real(point, f"i({name})"))
    values.append(_value("Psupply", "Psupply", power))
    signals: tuple[tuple[str, complex], ...] = ()
    if ports is not None and plan.frequency is not None:
        curve, mid, driven = signal
        values += _signal_values(circuit, ports, plan.frequency, curve, mid, driven)
        signals = tuple((node, _complex(mid, f"v({node})")) for node in circuit.nodes)
    return Measurement(
        values=tuple(values),
        transistors=tuple(transistors),
        node_voltages=tuple((node, volts[node]) for node in circuit.nodes),
        node_signals=signals,
    )


def implausible(measurement: Measurement) -> str | None:
    """What at an operating point can't be, or None; a simulator can converge on nonsense."""
    for node, volts in measurement.node_voltages:
        if not abs(volts) <= IMPLAUSIBLE:
            return f"V({node}) = {volts:.3g} V"
    for value in measurement.values:
        if value.unit == "A" and value.value is not None and not abs(value.value) <= IMPLAUSIBLE:
            return f"{value.name} = {value.value:.3g} A"
    return None


def _signal_values(
    circuit: Circuit, ports: Ports, frequency: float, curve: Plot, mid: Plot, driven: Plot
) -> list[MeasuredValue]:
    """Gain, resistances and band edges."""
    port = input_port(circuit, ports)
    gain = _complex(mid, f"v({ports.output})")
    impedance = _complex(driven, f"v({ports.output})")
    r_out = resistance(voltage=impedance, current=1.0, beside=load_conductance(circuit, ports))
    f_l, f_h = band_edges(
        curve.column("frequency").real,
        np.abs(curve.column(f"v({ports.output})")),
        middle=frequency,
        reference=abs(gain),
        floor=port.floor,
    )
    return [
        *_gains(port, gain, mid),
        _value("Rin", "Rin", _input_resistance(port, ports.input, mid)),
        _value("Rout", "Rout", r_out),
        _value("fL", "fL", f_l),
        _value("fH", "fH", f_h),
    ]


def _real(plot: Plot, column: str) -> float:
    return float(plot.column(column)[0].real)


def _complex(plot: Plot, column: str) -> complex:
    return complex(plot.column(column)[0])


def _value(name: str, kind: str, value: float | None, reason: str | None = None) -> MeasuredValue:
    return MeasuredValue(name, KINDS[kind].unit, value, reason)


def _transistor(
    circuit: Circuit, device: Mosfet, point: Plot, volts: dict[str, float]
) -> tuple[list[MeasuredValue], MeasuredTransistor]:
    """Terminal voltages come from the nodes; overdrive and margin from the voltages at the channel.

    The simulator's own vgs and vds are those behind RD and RS of the card, and count positive in normal
    conduction for either polarity (measured, ngspice 39).
    """
    sign = 1.0 if circuit.model(device.model).kind == "nmos" else -1.0
    drain, gate, source, _ = (volts[node] for node in device.nodes)
    read = {what: _real(point, f"@{device.name}[{what}]") for what in readouts(circuit, device)}
    v_ov = read.get("vgs", sign * (gate - source)) - sign * read["von"]
    v_ds = read.get("vds", sign * (drain - source))
    name = display(device.name)
    by_kind = {
        "ID": read["id"],
        "VGS": gate - source,
        "VDS": drain - source,
        "VTH": read["von"],
        "VOV": v_ov,
        "gm": read["gm"],
        "gds": read["gds"],
        "gmb": read["gmbs"],
    }
    values = [_value(f"{kind}({name})", kind, value) for kind, value in by_kind.items()]
    return values, MeasuredTransistor(name, region_of(v_ov=v_ov, v_ds=v_ds), v_ds - v_ov)


def _gains(port: InputPort, gain: complex, mid: Plot) -> list[MeasuredValue]:
    signed = signed_gain(gain, port.floor)
    behind = port.gain_behind(gain, _signal_in(mid))
    phase = f"{port.gain}.phase"
    return [
        _value(port.gain, port.gain, signed.value, signed.reason),
        _value(phase, phase, signed.phase),
        _value("Avi", "Avi", behind.value, behind.reason),
    ]


def _signal_in(mid: Plot) -> Callable[[str], complex]:
    """Signal of a node at mid-band."""
    return lambda node: 0j if node == GROUND else _complex(mid, f"v({node})")


def _input_resistance(port: InputPort, source: str, mid: Plot) -> float | None:
    current = 1.0 if port.is_current else -_complex(mid, f"i({source})")
    return port.resistance(_signal_in(mid), current)


def band_edges(
    frequency: Array, magnitude: Array, *, middle: float, reference: float, floor: float = NO_GAIN
) -> tuple[float | None, float | None]:
    """Band edges fL and fH [Hz]: first ``reference``/√2 outward from ``middle``, log-log between points.

    None where the gain at ``middle`` is below ``floor``.
    """
    target = reference / math.sqrt(2.0)
    if not reference >= floor:
        return None, None
    above = frequency >= middle
    low = _crossing(frequency[~above][::-1], magnitude[~above][::-1], target, middle, reference)
    high = _crossing(frequency[above], magnitude[above], target, middle, reference)
    return low, high


def _crossing(
    frequency: Array, magnitude: Array, target: float, middle: float, reference: float
) -> float | None:
    """First frequency outward at which the magnitude falls to the target."""
    below = np.flatnonzero(magnitude < target)
    if len(below) == 0:
        return None
    first = int(below[0])
    near_f, near_m = (frequency[first - 1], magnitude[first - 1]) if first > 0 else (middle, reference)
    far_f, far_m = frequency[first], max(float(magnitude[first]), np.finfo(float).tiny)
    share = math.log(near_m / target) / math.log(near_m / far_m)
    return float(near_f * (far_f / near_f) ** share)
