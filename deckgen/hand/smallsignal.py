"""Small-signal analysis at a Q-point: transfer, resistances, signals of every node.

All by solving (G + jωC)·x = b. The definitions are those of the conventions: ``Av`` is V(out) over
the EMF of the input source, ``Rm`` V(out) over its current where it is a current source, ``Rin`` is seen
after the source resistance, ``Rout`` with the input zero and the declared load subtracted.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from deckgen.circuit.gain import InputPort, input_port, load_conductance, resistance
from deckgen.circuit.model import GROUND, Capacitor, Circuit, CurrentSource, Resistor, VoltageSource
from deckgen.circuit.ports import Ports
from deckgen.errors import Fault, InputError, NoSignalError
from deckgen.hand.batch import SQUARE
from deckgen.hand.bias import BiasPoint
from deckgen.hand.laws.base import Array
from deckgen.hand.network import SmallSignalSystem, Treatment, inject, small_signal_system

ComplexArray = NDArray[np.complex128]


@dataclass(frozen=True, slots=True)
class SmallSignal:
    """The linearized circuit of one row: conductances (devices, T, T) and device capacitors.

    ``terminals`` are the T nodes of each device, inner ones included; its outer nodes if there are none.
    """

    circuit: Circuit
    ports: Ports
    conductances: Array
    device_capacitors: tuple[tuple[str, tuple[str, str], float], ...]
    terminals: tuple[tuple[str, ...], ...] | None = None

    def nodes_of(self, device: int) -> tuple[str, ...]:
        """Nodes of all terminals of one device, by its number."""
        return self.circuit.transistors[device].nodes if self.terminals is None else self.terminals[device]

    @property
    def port(self) -> InputPort:
        """What the input source drives. Raises InputError where the source resistance does not fit."""
        return input_port(self.circuit, self.ports)

    def system(
        self,
        treatments: Mapping[str, Treatment] | None = None,
        *,
        device_capacitances: bool = True,
    ) -> SmallSignalSystem:
        """The equations, with explicit capacitors treated as asked."""
        merged: dict[tuple[str, str], float] = {}
        for _, nodes, value in self.device_capacitors if device_capacitances else ():
            merged[nodes] = merged.get(nodes, 0.0) + value
        return small_signal_system(
            self.circuit,
            conductances=self.conductances,
            device_capacitors=merged,
            treatments=treatments,
            terminals=self.terminals,
        )


def linearize(circuit: Circuit, ports: Ports, bias: BiasPoint, row: int = 0) -> SmallSignal:
    """Linearize all devices at the bias of one row."""
    _check_ports(circuit, ports)
    every = SQUARE.linearize(bias.parameters, bias.terminals)[row]
    values = SQUARE.capacitances(bias.parameters, bias.terminals)[row]
    terminals = device_nodes(circuit, bias, row)
    capacitors = []
    for device, at, of_device in zip(circuit.transistors, terminals, values, strict=True):
        for (name, first, second), value in zip(SQUARE.capacitors, of_device, strict=True):
            nodes = (at[first], at[second])
            if value > 0.0 and nodes[0] != nodes[1]:
                capacitors.append((f"{name}({device.name})", nodes, float(value)))
    return SmallSignal(circuit, ports, every, tuple(capacitors), terminals)


def device_nodes(circuit: Circuit, bias: BiasPoint, row: int = 0) -> tuple[tuple[str, ...], ...]:
    """Nodes of all terminals of every transistor, its inner ones behind its outer ones.

    An inner terminal without a resistance before it is the outer one; else it is a node of its own, with
    a name that no node of a deck can have.
    """
    shape = (*bias.terminals.shape[:-1], len(SQUARE.inner))
    apart = np.broadcast_to(SQUARE.separate(bias.parameters), shape)[row]
    return tuple(
        (
            *device.nodes,
            *(
                f"{device.name} {name}" if own else device.nodes[outer]
                for (name, outer), own in zip(SQUARE.inner, of_device, strict=True)
            ),
        )
        for device, of_device in zip(circuit.transistors, apart, strict=True)
    )


def _check_ports(circuit: Circuit, ports: Ports) -> None:
    faults = []
    names = {element.name: element for element in circuit.elements}
    source = names.get(ports.input)
    if not isinstance(source, VoltageSource | CurrentSource):
        expected = "the name of a voltage or current source"
        faults.append(Fault(circuit.title, "input", ports.input, expected))
    if ports.output not in circuit.nodes:
        faults.append(Fault(circuit.title, "output", ports.output, f"a node: {', '.join(circuit.nodes)}"))
    for key, name in (("source resistance", ports.source_resistance), ("load", ports.load)):
        if name is not None and not isinstance(names.get(name), Resistor):
            faults.append(Fault(circuit.title, key, name, "the name of a resistor"))
    if faults:
        raise InputError(*faults)


def solve_at(system: SmallSignalSystem, frequencies: Iterable[float], side: Array) -> ComplexArray:
    """Unknowns at each frequency [Hz] for one right-hand side; shape (frequencies, unknowns)."""
    omega = 2.0 * math.pi * np.asarray(list(frequencies), float)
    sides = np.broadcast_to(side, (len(omega), len(side)))
    try:
        with np.errstate(all="ignore"):
            matrix = system.conductance + 1j * omega[:, None, None] * system.capacitance
            found = np.asarray(np.linalg.solve(matrix, sides[..., None])[..., 0], complex)
    except np.linalg.LinAlgError:
        found = np.full(sides.shape, np.nan, complex)
    if not np.isfinite(found).all():
        raise NoSignalError(
            "the small-signal equations have no solution: part values too far apart, or nodes without a path"
        )
    return found


def drive(system: SmallSignalSystem, source: str) -> Array:
    """Right-hand side of 1 V in a voltage source or 1 A through a current source, all others silent."""
    nodes = dict(system.current_sources).get(source)
    if nodes is not None:
        return inject(system.layout, nodes, 1.0)
    side = np.zeros(system.layout.size)
    side[system.layout.branch(source)] = 1.0
    return side


def voltage(system: SmallSignalSystem, unknowns: ComplexArray, node: str) -> ComplexArray:
    """Voltage of a node in a solution of ``solve_at``."""
    if node == GROUND:
        return np.zeros(unknowns.shape[:-1], complex)
    return unknowns[..., system.layout.node(node)]


def transfer(small: SmallSignal, system: SmallSignalSystem, frequencies: Iterable[float]) -> ComplexArray:
    """Av or Rm: V(out) for 1 V or 1 A from the input source, at each frequency."""
    unknowns = solve_at(system, frequencies, drive(system, small.ports.input))
    return voltage(system, unknowns, small.ports.output)


def input_resistance(small: SmallSignal, system: SmallSignalSystem, frequency: float) -> float | None:
    """Rin = 1/Re Y [Ω] seen after the source resistance; None where it is infinite."""
    unknowns = solve_at(system, [frequency], drive(system, small.ports.input))[0]
    port = small.port
    current = 1.0 if port.is_current else -complex(unknowns[system.layout.branch(small.ports.input)])
    return port.resistance(lambda node: complex(voltage(system, unknowns, node)), current)


def output_resistance(small: SmallSignal, system: SmallSignalSystem, frequency: float) -> float | None:
    """Rout = 1/(Re Y(out) - 1/RL) [Ω], input zero, declared load subtracted."""
    layout = system.layout
    unknowns = solve_at(system, [frequency], inject(layout, (GROUND, small.ports.output), 1.0))[0]
    seen = complex(voltage(system, unknowns, small.ports.output))
    return resistance(voltage=seen, current=1.0, beside=load_conductance(small.circuit, small.ports))


def explicit_capacitors(circuit: Circuit) -> tuple[Capacitor, ...]:
    """All capacitors of the deck itself."""
    return tuple(e for e in circuit.elements if isinstance(e, Capacitor))
