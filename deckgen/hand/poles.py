r"""Poles and zeros of the gain A(s) = cᵀ(G + sC)⁻¹b from the EMF to the output, to rounding.

Poles are the finite eigenvalues of the pencil (G, -C), zeros those of the pencil bordered by input and
output (H. H. Rosenbrock, *State-space and Multivariable Theory*, Nelson 1970, from memory).

.. math:: (G + sC)x = 0 \iff (G + \sigma C)^{-1}C\,x = \frac{1}{\sigma - s}\,x

Every capacitance has a branch row of its own here, so C has one row a reactive element, and what is not
zero of the spectrum on the right is that of a small matrix of the ports of these elements. An infinite
eigenvalue lies at 1/(σ - s) = 0, and rounding moves it far beyond σ. One shift σ resolves a few decades
around itself to all digits, so shifts stand four decades apart, and each eigenvalue is taken where it is
near. Its trace counts: σ·tr (G + σC)⁻¹C = Σ σ/(σ - s) is the number of finite eigenvalues far above all
of them, and that of those at the origin far below.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass, replace
from functools import partial
from itertools import pairwise, zip_longest

import numpy as np

from deckgen.circuit.gain import NO_GAIN
from deckgen.circuit.model import Capacitor
from deckgen.errors import NoSignalError
from deckgen.hand.bandwidth import HIGHEST, LOWEST
from deckgen.hand.laws.base import Array
from deckgen.hand.network import SmallSignalSystem, small_signal_system
from deckgen.hand.prediction import HalfPlane, Root
from deckgen.hand.smallsignal import ComplexArray, SmallSignal, drive, solve_at, voltage

CANCELS = 1e-8
"""Relative distance within which a pole and a zero are one: A(s) doesn't show them."""

_AGREES, _FALLEN = 1e-6, 1e-3
_REAL = 1e-6  # an imaginary part smaller than this, relative, is what rounding makes of two equal real roots
_ON_AXIS = 1e-9
_STEP = 4.0  # decades between shifts: 16 digits leave 12 at two decades from one
_BEYOND = 1e3  # how far gain and many elements may move an eigenvalue beyond all single corner frequencies
_WIDENINGS, _WIDER = 4, 1e3
_WHOLE = 1e-2  # a count further than this from a whole number has eigenvalues near its frequency
_FAINT = 1e-15, 1e-21  # conductances [S], capacitances [F] and inductances [H] that are rounding or absent
_NEAR_SHIFT = 0.15  # share of the way to the next shift that is no place for a border

_FARTHEST = 1e60  # between the lowest and the highest corner: what is wider is no network


@dataclass(frozen=True, slots=True)
class PolesAndZeros:
    """A(s) = value · Π (s - z)/(s₀ - z) · Π (s₀ - p)/(s - p), all s in rad/s, sorted by magnitude.

    ``cancelled`` are natural frequencies of the circuit that its gain doesn't show; s₀ is ``reference``,
    ``value`` the gain there, 0 where there is none at all.
    """

    poles: tuple[complex, ...]
    zeros: tuple[complex, ...]
    cancelled: tuple[complex, ...]
    reference: complex
    value: complex

    def at(self, frequencies: Iterable[float]) -> ComplexArray:
        """A(j2πf) at each frequency [Hz]."""
        s = 2j * math.pi * np.asarray(list(frequencies), float)
        gain = np.full(s.shape, self.value, complex)
        for zero, pole in zip_longest(self.zeros, self.poles):  # in turn, so that nothing overflows
            if zero is not None:
                gain *= (s - zero) / (self.reference - zero)
            if pole is not None:
                gain *= (self.reference - pole) / (s - pole)
        return gain


def poles_and_zeros(small: SmallSignal, middle: float) -> PolesAndZeros | None:
    """Poles and zeros from EMF to output; ``middle`` [Hz] is where there is gain, if there is any.

    All capacitances as they are, those of the devices too. None where double precision can't resolve
    them: counts don't agree, or the gain that follows from them is not that of the circuit within 1e-6.
    """
    system = _every_capacitance(small)
    span = _span(system)
    points = np.array([middle, *np.geomspace(LOWEST, HIGHEST, 1 + round(math.log10(HIGHEST / LOWEST)))])
    try:
        unknowns = solve_at(system, points, drive(system, small.ports.input))
    except NoSignalError:
        return None
    gain = voltage(system, unknowns, small.ports.output)
    size = np.abs(gain)
    there = bool(size.max() >= NO_GAIN)
    with np.errstate(all="ignore"):
        found = _finite(small, system, span, there=there)
    if found is None:
        return None
    poles, zeros = found
    if not there:
        return PolesAndZeros((), (), poles, 0j, 0j)
    at = 0 if size[0] >= NO_GAIN else int(np.argmax(size))
    kept, left, gone = _cancelled(poles, zeros)
    whole = PolesAndZeros(kept, left, gone, 2j * math.pi * points[at], complex(gain[at]))
    return whole if _agrees(whole, points, gain) else None


def _agrees(found: PolesAndZeros, points: Array, gain: ComplexArray) -> bool:
    """Whether the gain is that of the circuit, where there is some and something happens.

    Far from all poles and zeros it is the solution of the circuit that drowns in rounding.
    """
    corners = [abs(s) / (2.0 * math.pi) for s in (*found.poles, *found.zeros) if abs(s) > 0.0]
    size = np.abs(gain)
    seen = size >= _FALLEN * size.max()
    if corners:
        seen &= (points > 0.1 * min(corners)) & (points < 10.0 * max(corners))
    return bool((np.abs(found.at(points[seen]) - gain[seen]) <= _AGREES * size[seen]).all())


def roots(places: Iterable[complex]) -> tuple[Root, ...]:
    """Places in the s-plane [rad/s] as frequencies, a conjugate pair as one."""
    found = []
    for s in places:
        pair = abs(s.imag) > _REAL * abs(s)
        if pair and s.imag < 0.0:
            continue  # its other half stands for both
        size = abs(s)
        side = HalfPlane.RIGHT if s.real > 0.0 else HalfPlane.LEFT
        side = HalfPlane.AXIS if abs(s.real) <= _ON_AXIS * size else side
        q = None if not pair else math.inf if side is HalfPlane.AXIS else 0.5 * size / abs(s.real)
        found.append(Root(size / (2.0 * math.pi), q, side))
    return tuple(found)


def _every_capacitance(small: SmallSignal) -> SmallSignalSystem:
    """The equations with a branch of its own for each device capacitance.

    Summed at a node, 10 fF beside 10 µF would keep seven digits.
    """
    own = tuple(Capacitor(name, nodes, value) for name, nodes, value in small.device_capacitors)
    circuit = replace(small.circuit, elements=(*small.circuit.elements, *own))
    return small_signal_system(circuit, conductances=small.conductances, terminals=small.terminals)


_Places = tuple[complex, ...]


def _finite(
    small: SmallSignal, system: SmallSignalSystem, span: tuple[float, float], *, there: bool
) -> tuple[_Places, _Places] | None:
    """All finite poles, and zeros where gain is ``there``, by magnitude; None if they can't be told apart."""
    if not system.capacitance.any():
        return (), ()
    low, high = span
    for _ in range(_WIDENINGS):
        if not (low > 0.0 and high < _FARTHEST * low):
            return None
        steps = max(math.ceil(math.log10(high / low) / _STEP), 1)
        shifts = np.geomspace(low, high, steps + 1)
        try:
            of_poles, of_zeros = _ports(small, system, shifts)
            poles = _between(of_poles, shifts)
            zeros = _between(of_zeros, shifts) if there else ()
        except np.linalg.LinAlgError:  # a shift that is a pole or zero itself: others will do
            poles = zeros = None
        if poles is not None and zeros is not None:
            return poles, zeros
        low, high = low / _WIDER, high * _WIDER
    return None


def _ports(small: SmallSignal, system: SmallSignalSystem, shifts: Array) -> tuple[Array, Array]:
    """What is not zero in (G + σC)⁻¹C at each shift, and the same with the output held at zero by the input.

    The second is T - u·vᵀ/A(σ), the Schur complement of the bordered matrix, which solved for itself loses
    what is fast beside what is slow. Rows are left as they are: so the larger of conductance and
    susceptance is the pivot, and small voltages keep their digits.
    """
    matrix = system.conductance + shifts[:, None, None] * system.capacitance
    reactive = np.flatnonzero(system.capacitance.any(axis=1))
    sides = np.zeros((system.layout.size, len(reactive) + 1))
    sides[reactive, range(len(reactive))] = 1.0
    sides[:, -1] = drive(system, small.ports.input)
    found = np.linalg.solve(matrix, np.broadcast_to(sides, (len(shifts), *sides.shape)))
    seen = system.capacitance[reactive] @ found
    output = found[:, system.layout.node(small.ports.output)]
    free, driven = seen[:, :, :-1], seen[:, :, -1:]
    return free, free - driven * (output[:, None, :-1] / output[:, None, -1:])


def _between(ports: Array, shifts: Array) -> _Places | None:
    """Eigenvalues from the lowest to the highest shift and at the origin; None unless these are all."""
    counts = shifts * np.trace(ports, axis1=1, axis2=2)
    origin, every = np.round(counts[0]), np.round(counts[-1])
    if not (abs(counts[0] - origin) < _WHOLE and abs(counts[-1] - every) < _WHOLE):
        return None
    if not 0 <= origin <= every <= ports.shape[-1]:
        return None
    spectra = shifts[:, None] - 1.0 / np.linalg.eigvals(ports)
    size = np.abs(spectra)
    inner = [_border(shifts[n : n + 2], size[n : n + 2]) for n in range(len(shifts) - 1)]
    borders = [float(shifts[0]), *inner, float(shifts[-1])]
    found = [0j] * int(origin)
    for n, spectrum in enumerate(spectra):
        inside = (borders[n] <= size[n]) & (size[n] < borders[n + 1])
        found += [complex(s) for s in spectrum[inside]]
    return tuple(sorted(found, key=_order)) if len(found) == every else None


def _border(shifts: Array, sizes: Array) -> float:
    """Where one shift hands over to the next: in the widest gap between magnitudes that both see."""
    margin = (shifts[1] / shifts[0]) ** _NEAR_SHIFT
    first, last = shifts[0] * margin, shifts[1] / margin
    places = sorted([first, *sizes[(sizes > first) & (sizes < last)], last])
    below, above = max(pairwise(places), key=lambda gap: gap[1] / gap[0])
    return math.sqrt(below * above)


def _order(s: complex) -> tuple[float, float, float]:
    return abs(s), s.real, s.imag


def _cancelled(poles: _Places, zeros: _Places) -> tuple[_Places, _Places, _Places]:
    """Poles and zeros that are left, and the pairs that cancel, each once."""
    kept, left, gone = [], list(zeros), []
    for pole in poles:
        twin = min(left, key=partial(_distance, pole), default=None)
        if twin is not None and _distance(pole, twin) <= CANCELS * abs(pole):
            left.remove(twin)
            gone.append(pole)
        else:
            kept.append(pole)
    return tuple(kept), tuple(left), tuple(gone)


def _distance(one: complex, other: complex) -> float:
    return abs(one - other)


def _span(system: SmallSignalSystem) -> tuple[float, float]:
    """Magnitudes [rad/s] between which finite eigenvalues lie: all corners g/C and 1/(g·L), widened."""
    nodes = len(system.layout.nodes)
    least_g, least_c = _FAINT
    low_g, high_g = _extremes(system.conductance[:nodes, :nodes], least_g) or (1e-3, 1e-3)
    corners = []
    if (c := _extremes(system.capacitance[:, :nodes], least_c)) is not None:
        corners += [low_g / c[1], high_g / c[0]]
    if (l := _extremes(system.capacitance[nodes:, nodes:], least_c)) is not None:
        corners += [1.0 / (high_g * l[1]), 1.0 / (low_g * l[0])]
    wider = _BEYOND * max(1.0, float(np.abs(system.conductance[nodes:, :]).max(initial=0.0)))
    return min(corners, default=1.0) / wider, max(corners, default=1.0) * wider


def _extremes(values: Array, above: float) -> tuple[float, float] | None:
    sizes = np.abs(values)
    sizes = sizes[sizes > above]
    return (float(sizes.min()), float(sizes.max())) if sizes.size else None
