"""Mid-band, -3 dB frequencies, and the time constants of every capacitor.

Short- and open-circuit time constants after P. E. Gray, C. L. Searle, *Electronic Principles*, Wiley
1969; A. Hajimiri, IEEE Trans. Circuits and Systems I 57(6), 2010, 1105-1121.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from deckgen.circuit.model import Circuit, VoltageSource, display
from deckgen.hand.laws.base import Array
from deckgen.hand.network import SmallSignalSystem, Treatment, inject
from deckgen.hand.prediction import MidBand
from deckgen.hand.smallsignal import (
    SmallSignal,
    explicit_capacitors,
    solve_at,
    transfer,
    voltage,
)

LOWEST, HIGHEST = 1e-4, 1e13
"""Frequencies [Hz] between which a -3 dB point is looked for."""

_PER_DECADE = 10
_DEFAULT_FREQUENCY = 1e3
_FLAT_DB = 0.1
_REFINEMENTS, _POINTS = 3, 24


@dataclass(frozen=True, slots=True)
class TimeConstant:
    """A capacitor, the resistance it sees [Ω], and τ = R·C [s]."""

    name: str
    capacitance: float
    resistance: float

    @property
    def tau(self) -> float:
        """R·C [s]."""
        return self.resistance * self.capacitance

    @property
    def shown(self) -> str:
        """Name as people write it; a transistor's own capacitance is that of a pair of terminals."""
        kind, _, of = self.name.partition("(")
        return f"{kind.capitalize()}({display(of.removesuffix(')'))})" if of else display(self.name)


@dataclass(frozen=True, slots=True, eq=False)
class _Curve:
    """|A| of the exact circuit over the whole range of frequencies, to find the rough places from."""

    small: SmallSignal
    system: SmallSignalSystem
    frequency: Array
    gain: Array


def _curve_of(small: SmallSignal, system: SmallSignalSystem) -> _Curve:
    grid = np.geomspace(LOWEST, HIGHEST, 1 + _PER_DECADE * round(math.log10(HIGHEST / LOWEST)))
    return _Curve(small, system, grid, np.abs(transfer(small, system, grid)))


def find_mid_band(small: SmallSignal, stated: float | None) -> MidBand:
    """Mid-band: as stated; else √(fL·fH) of the exact curve; else from the one that exists; else 1 kHz."""
    curve = _curve_of(small, small.system())
    if stated is not None:
        frequency, source = stated, "stated"
    else:
        frequency, source = _from_curve(curve)
    mid = _gain_at(curve, frequency)
    f_l, f_h = _edges_around(curve, frequency, mid)
    floor = small.port.floor
    most = max(float(curve.gain.max()), floor)
    below = 20.0 * math.log10(most / max(mid, floor))
    return MidBand(frequency, source, max(below, 0.0), f_l, f_h)


def _gain_at(curve: _Curve, frequency: float) -> float:
    return abs(complex(transfer(curve.small, curve.system, [frequency])[0]))


def _from_curve(curve: _Curve) -> tuple[float, str]:
    """Mid-band from the -3 dB points around the maximum of the exact curve."""
    top = int(np.argmax(curve.gain))
    f_l, f_h = _edges_around(curve, float(curve.frequency[top]), float(curve.gain[top]))
    if f_l is not None and f_h is not None:
        return math.sqrt(f_l * f_h), "√(fL·fH) of the exact curve"
    if f_h is not None:
        return f_h / 100.0, "fH/100 of the exact curve"
    if f_l is not None:
        return 100.0 * f_l, "100·fL of the exact curve"
    return _DEFAULT_FREQUENCY, "1 kHz, no band edge"


def exact_edges(
    small: SmallSignal, system: SmallSignalSystem, middle: float
) -> tuple[float | None, float | None]:
    """Band edges fL and fH [Hz]: first |A(mid)|/√2 outward from ``middle``; None where there is none."""
    curve = _curve_of(small, system)
    return _edges_around(curve, middle, _gain_at(curve, middle))


def _edges_around(curve: _Curve, middle: float, mid: float) -> tuple[float | None, float | None]:
    if not mid >= curve.small.port.floor:
        return None, None
    reference = mid / math.sqrt(2.0)
    above = curve.frequency > middle
    outward = (
        (curve.frequency[~above][::-1], curve.gain[~above][::-1]),
        (curve.frequency[above], curve.gain[above]),
    )
    edges: list[float | None] = []
    for frequency, gain in outward:
        below = np.flatnonzero(gain < reference)
        if len(below) == 0:
            edges.append(None)
            continue
        first = int(below[0])
        near = float(frequency[first - 1]) if first > 0 else middle
        edges.append(_refined(curve.small, curve.system, near, float(frequency[first]), reference))
    return edges[0], edges[1]


def _refined(
    small: SmallSignal, system: SmallSignalSystem, near: float, far: float, reference: float
) -> float:
    """The frequency between two others at which the gain falls to ``reference``, to 1 in 10⁹.

    Finer and finer grids, one solve for all points of each, then a straight line in logarithms: no root
    finder's start-up, no single solves.
    """
    for _ in range(_REFINEMENTS):
        grid = np.geomspace(near, far, _POINTS)
        size = np.abs(transfer(small, system, grid))
        below = np.flatnonzero(size < reference)
        # Solved anew, the ends can come out a rounding error away from what they were before.
        place = min(max(int(below[0]) if len(below) else _POINTS - 1, 1), _POINTS - 1)
        near, far = float(grid[place - 1]), float(grid[place])
    high, low = float(size[place - 1]), float(size[place])
    if not (high > low > 0.0):
        return math.sqrt(near * far)
    share = math.log(high / reference) / math.log(high / low)
    return float(near * (far / near) ** min(max(share, 0.0), 1.0))


def classify_capacitors(small: SmallSignal, frequency: float) -> dict[str, Treatment]:
    """Which explicit capacitors couple or bypass (short at mid-band) and which load (open).

    A capacitor counts as a short when its reactance at mid-band is below the impedance that the rest
    of the circuit shows it, all else as it is.
    """
    treatments: dict[str, Treatment] = {}
    for part in explicit_capacitors(small.circuit):
        rest = small.system({part.name: Treatment.OPEN})
        unknowns = solve_at(rest, [frequency], inject(rest.layout, part.nodes, 1.0))[0]
        seen = abs(voltage(rest, unknowns, part.nodes[1]) - voltage(rest, unknowns, part.nodes[0]))
        susceptance = 2.0 * math.pi * frequency * part.value  # of a capacitor of 0 F there is no reactance
        treatments[part.name] = Treatment.SHORT if susceptance * seen > 1.0 else Treatment.OPEN
    return treatments


def without_loops(circuit: Circuit, treatments: Mapping[str, Treatment]) -> dict[str, Treatment]:
    """Open every shorted capacitor that closes a loop of shorts: its current would be undefined."""
    parent: dict[str, str] = {}

    def root(node: str) -> str:
        while parent.get(node, node) != node:
            node = parent[node]
        return node

    for source in circuit.elements:
        if isinstance(source, VoltageSource):
            parent[root(source.nodes[0])] = root(source.nodes[1])
    safe = dict(treatments)
    for part in explicit_capacitors(circuit):
        if treatments.get(part.name) is not Treatment.SHORT:
            continue
        first, second = root(part.nodes[0]), root(part.nodes[1])
        if first == second:
            safe[part.name] = Treatment.OPEN
        else:
            parent[first] = second
    return safe


def short_circuit_constants(
    small: SmallSignal, treatments: Mapping[str, Treatment]
) -> tuple[TimeConstant, ...]:
    """τ of each coupling or bypass capacitor with the others shorted, load and device ones open."""
    constants = []
    for part in explicit_capacitors(small.circuit):
        if treatments[part.name] is not Treatment.SHORT:
            continue
        others = without_loops(small.circuit, {**treatments, part.name: Treatment.OPEN})
        (resistance,) = _seen(small, others, [part.nodes])
        constants.append(TimeConstant(part.name, part.value, resistance))
    return tuple(constants)


def open_circuit_constants(
    small: SmallSignal, treatments: Mapping[str, Treatment]
) -> tuple[TimeConstant, ...]:
    """τ of each load and device capacitance with the others open, coupling and bypass ones shorted."""
    shorted = without_loops(small.circuit, treatments)
    parts = [
        (part.name, part.nodes, part.value)
        for part in explicit_capacitors(small.circuit)
        if treatments[part.name] is Treatment.OPEN
    ]
    parts += small.device_capacitors
    seen = _seen(small, shorted, [nodes for _, nodes, _ in parts])
    return tuple(
        TimeConstant(name, value, resistance)
        for (name, _, value), resistance in zip(parts, seen, strict=True)
    )


def _seen(
    small: SmallSignal, treatments: Mapping[str, Treatment], pairs: Sequence[tuple[str, str]]
) -> list[float]:
    """Resistance between each two nodes at DC of the small-signal circuit, EMF zero, no capacitances.

    Infinite where a test current has no way to go.
    """
    system = small.system(treatments, device_capacitances=False)
    if not pairs:
        return []
    currents = np.stack([inject(system.layout, nodes, 1.0) for nodes in pairs], axis=1)
    try:
        unknowns = np.linalg.solve(system.conductance, currents)
    except np.linalg.LinAlgError:
        return [math.inf] * len(pairs)
    return [float(currents[:, n] @ unknowns[:, n]) for n in range(len(pairs))]


def lower_edge(constants: tuple[TimeConstant, ...]) -> float | None:
    """Lower band edge fL ≈ Σ 1/(2π·R·C) [Hz] from short-circuit time constants; None without any.

    A negative time constant counts against the others; None too where nothing is left of the sum.
    """
    total = sum(1.0 / (2.0 * math.pi * one.tau) for one in constants if abs(one.tau) > 0.0)
    return total if total > 0.0 else None


def upper_edge(constants: tuple[TimeConstant, ...]) -> float | None:
    """Upper band edge fH ≈ 1/(2π·Σ R·C) [Hz] from open-circuit time constants; None without any."""
    total = sum(constant.tau for constant in constants)
    return 1.0 / (2.0 * math.pi * total) if 0.0 < total < math.inf else None


def is_flat(mid_band: MidBand) -> bool:
    """Whether mid-band lies within 0.1 dB of the maximum of the exact curve."""
    return mid_band.below_maximum_db <= _FLAT_DB
