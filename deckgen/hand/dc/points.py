"""Several operating points of one network: looked for from several starts, told apart, stable or not.

A start sets every transistor as a closed or an open switch. Where all channels at a node are off its voltage
is open, and another voltage there is no other point. Where there are several points, more of them are found
on the characteristic of one node that is forced over all voltages.

Stability: with equal capacitances from all ports to ground the network leaves a point on its own where its
impedance matrix has a real negative eigenvalue. It has one at least where the determinant of the linearized
equations has another sign than with every port held, and then no capacitances make the point stable (M. M.
Green, A. N. Willson, How to identify unstable dc operating points, IEEE Trans. CAS-I 39(10), 1992, 820-832,
from memory). Whether complex eigenvalues grow depends on the capacitances; they are left out.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from deckgen.hand.dc.newton import LEAK, Problem, cold_start, newton
from deckgen.hand.dc.reduced import TINY
from deckgen.hand.dc.small import solve_rows
from deckgen.hand.laws.base import Array, Mask

_FROM_START, _ITERATIONS = 20, 40  # of Newton from a start, and with a node forced
_ALL_PATTERNS = 4  # transistors up to which every set of switches is tried
_PATTERNS = 12
_CLOSED, _OPEN, _HELD = 1e-2, 1e-9, 1e-12  # S: a closed switch, the gate of an open one to its source, else
_SAME, _SAME_CURRENT = 1e-6, 1e-10  # share of the largest current; A, beyond what leaks
_SAME_VOLTAGE, _CLOSE = 1e-4, 1e-8  # V
_FORCED = 1e2  # S; stiffer than any part at a node
_FORCED_STEPS = 49
_MOST_NODES = 3
_STIFF = 1e6
_ROUNDING = 1e-10  # of an eigenvalue, as a share of the largest
_OPEN_NODE = 0.1  # V by which the current of TINY at 1 V moves a node that nothing else holds

_SWITCH, _GATE = np.zeros((4, 4)), np.zeros((4, 4))
_SWITCH[np.ix_([0, 2], [0, 2])] = [[1.0, -1.0], [-1.0, 1.0]]
_GATE[np.ix_([1, 2], [1, 2])] = [[1.0, -1.0], [-1.0, 1.0]]


def switch_patterns(devices: int) -> Mask:
    """Which transistors are closed at each start, (starts, devices): all open, all closed, then mixtures."""
    if devices <= _ALL_PATTERNS:
        numbers = np.arange(2**devices)
        order = np.argsort(-np.abs(2 * numbers - (len(numbers) - 1)), kind="stable")
        patterns: Mask = (numbers[order, None] >> np.arange(devices) & 1).astype(bool)
        return patterns
    mixtures = np.random.default_rng(devices).random((_PATTERNS - 2, devices)) < 0.5
    return np.vstack([np.zeros(devices, bool), np.ones(devices, bool), mixtures])


def switched(problem: Problem, closed: Mask) -> Array:
    """Port voltages (ports, starts) with transistors as switches; an open one has its gate at its source."""
    tangent = np.where(closed[..., None, None], _CLOSED * _SWITCH, _OPEN * _GATE) + _HELD * LEAK
    matrix = problem.reduced.jacobian(tangent) + _held(problem)
    rows = len(closed)
    side = np.broadcast_to(problem.sources(), (len(matrix), rows))
    return solve_rows(np.broadcast_to(matrix, (*matrix.shape[:2], rows)), side)[0]


def from_starts(problem: Problem) -> tuple[Array, Mask, list[Array]]:
    """A single row from a cold start and from sets of switches at once.

    Port voltages (ports, 1), whether they were found, and all points (ports,): the first is that of the cold
    start. Where that start alone fails, its point is the only one there is, if there is but one.
    """
    patterns = switch_patterns(problem.reduced.devices)
    starts = replace(problem, rows=len(patterns) + 1)
    found, good = newton(
        starts, np.concatenate([cold_start(problem), switched(problem, patterns)], axis=1), _FROM_START
    )
    points: list[Array] = []
    _add_distinct(problem, points, found, good)
    if not good[0] and not (len(points) == 1 and _degree(problem, points) == 1):
        return found[:, :1], good[:1], points
    return points[0][:, None], np.ones(1, dtype=bool), points


def other_points(problem: Problem, known: Array, found: Sequence[Array] | None = None) -> list[Array]:
    """Port voltages (ports,) of the operating points beside a known one; ``problem`` has one row.

    ``found`` are points that are known besides; without them they are looked for from all starts.
    """
    points = [known]
    others = from_starts(problem)[2] if found is None else found
    if others:
        _add_distinct(problem, points, np.stack(others, axis=1), np.ones(len(others), dtype=bool))
    if len(points) > 1 or _degree(problem, points) != 1:
        for node in _telling_nodes(problem, points):
            _add_distinct(problem, points, *_along(problem, points, node))
            if _degree(problem, points) == 1:
                break
    return points[1:]


def _degree(problem: Problem, points: Sequence[Array]) -> int:
    """Sum of the signs of the points' determinants: 1 if none is missing, as far as the network is passive.

    L. O. Chua, N. N. Wang, On the application of degree theory to the analysis of resistive nonlinear
    networks, Int. J. Circuit Theory and Applications 5, 1977, 35-68 (from memory).
    """
    at_points = replace(problem, rows=len(points))
    return int(_signs(problem, linearized(at_points, np.stack(points, axis=1))).sum())


def _telling_nodes(problem: Problem, points: Sequence[Array]) -> list[int]:
    """Ports in which the points differ most; of a single one, those that move most when it is left."""
    if len(points) > 1:
        apart = np.ptp(np.stack(points, axis=1), axis=1)
    else:
        impedance, _ = _impedance(problem, linearized(problem, points[0][:, None])[..., 0])
        values, vectors = np.linalg.eig(impedance)
        apart = np.abs(vectors[:, values.real.argmin()])
    return [int(node) for node in np.argsort(-apart)[:_MOST_NODES]]


def _add_distinct(problem: Problem, points: list[Array], found: Array, good: Mask) -> None:
    """Append the columns that are none of the points so far."""
    for column in np.flatnonzero(good):
        tried = np.stack([found[:, column], *points], axis=1)
        apart = np.abs(tried[:, 1:] - tried[:, :1]).max(axis=0)
        # Most starts lead to the same point, which is seen without asking the devices.
        if not points or ((apart > _CLOSE).all() and _differ(problem, tried).all()):
            points.append(found[:, column])


def _differ(problem: Problem, tried: Array) -> Mask:
    """Whether the first column is another point than each other: in a current, or at a node held in both."""
    problem = replace(problem, rows=tried.shape[1])
    currents, jacobian = problem.devices(problem.reduced.at_devices(tried))
    matrix = problem.reduced.jacobian(jacobian) + _held(problem)
    flat = currents.reshape(problem.rows, -1)
    largest = np.abs(flat).max(axis=1, initial=0.0)
    apart = np.abs(flat[1:] - flat[0]).max(axis=1, initial=0.0)
    loose = _loose(problem, matrix)
    distance = np.where(loose[:, :1] | loose[:, 1:], 0.0, np.abs(tried[:, 1:] - tried[:, :1]))
    other: Mask = apart > _SAME * np.maximum(largest[1:], largest[0]) + _SAME_CURRENT
    other |= distance.max(axis=0, initial=0.0) > _SAME_VOLTAGE
    return other


def _along(problem: Problem, points: Sequence[Array], node: int) -> tuple[Array, Mask]:
    """Points on the characteristic of a node that is forced over all voltages: where its current is zero."""
    known = np.stack(points, axis=1)
    known = known[:, np.argsort(known[node])]
    forced_to = np.linspace(min(known.min(), 0.0), max(known.max(), 0.0), _FORCED_STEPS)
    guess = np.stack([np.interp(forced_to, known[node], port) for port in known])
    guess[node] = forced_to
    pull = np.zeros_like(guess)
    pull[node] = _FORCED
    forced = replace(problem, rows=_FORCED_STEPS, pull=pull, toward=guess)
    v, good = newton(forced, guess, _ITERATIONS)
    v, force = v[:, good], (guess - v)[node, good]
    turns = np.flatnonzero(force[1:] * force[:-1] < 0.0)
    weight = np.abs(force[turns]) / (np.abs(force[turns]) + np.abs(force[turns + 1]))
    start = v[:, turns] + weight * (v[:, turns + 1] - v[:, turns])
    return newton(replace(problem, rows=len(turns)), start, _ITERATIONS)


def linearized(problem: Problem, v: Array) -> Array:
    """Port matrix (ports, ports, rows) with devices as their conductances at port voltages (ports, rows)."""
    _, jacobian = problem.devices(problem.reduced.at_devices(v))
    matrix: Array = problem.reduced.jacobian(jacobian) + _held(problem)
    return matrix


def _held(problem: Problem) -> Array:
    held: Array = problem.linear() + TINY * problem.reduced.inject[..., None]
    return held


def _loose(problem: Problem, matrix: Array) -> Mask:
    """Ports (ports, rows) that nothing but TINY holds: only channels connect them, and they are off."""
    inject = problem.reduced.inject
    side = np.broadcast_to(TINY * inject.sum(axis=1)[:, None], (len(inject), matrix.shape[2]))
    moved, good = solve_rows(matrix, side)
    loose: Mask = (np.abs(moved) > _OPEN_NODE) | ~good
    return loose


def open_rows(problem: Problem, matrix: Array) -> Mask:
    """Rows in which a node is held by nothing but TINY."""
    answer: Mask = np.any(_loose(problem, matrix), axis=0)
    return answer


def is_stable(problem: Problem, matrix: Array) -> bool:
    """Whether the network stays at a point on its own, by the port matrix (ports, ports) there."""
    impedance, good = _impedance(problem, matrix)
    if not good:
        return True  # nothing drives a node that nothing holds
    values = np.linalg.eigvals(impedance)
    largest = np.abs(values).max(initial=0.0)
    real = np.abs(values.imag) <= _ROUNDING * largest
    leaves = bool((real & (values.real < -_ROUNDING * largest)).any())
    return not leaves and bool(_signs(problem, matrix[..., None])[0] > 0.0)


def _impedance(problem: Problem, matrix: Array) -> tuple[Array, bool]:
    """Voltages of all ports for 1 A into each: (ports, ports), and whether there are such."""
    inject = problem.reduced.inject
    answer, good = solve_rows(np.broadcast_to(matrix[..., None], (*matrix.shape, len(inject))), inject)
    return answer, bool(good.all())


def _signs(problem: Problem, matrix: Array) -> Array:
    """Sign of the determinant of each row's matrix, against that with every port held."""
    held = matrix + (_STIFF * np.abs(matrix).max(initial=1.0)) * problem.reduced.inject[..., None]
    of_both, _ = np.linalg.slogdet(np.stack([matrix, held]).transpose(0, 3, 1, 2))
    signs: Array = of_both[0] * of_both[1]
    return signs
