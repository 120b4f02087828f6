"""Several operating points of one network: looked for from several starts, and told apart.

Where all channels at a node are off its voltage is open, and another voltage there is no other point. Where
there are several points, more of them are found on the characteristic of one node that is forced over all
voltages.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from deckgen.hand.dc.newton import Problem, newton, pulled
from deckgen.hand.dc.stability import LEAKS, degree, impedance, is_stable, linearized, loose_ports
from deckgen.hand.dc.starts import FROM_START, all_starts
from deckgen.hand.laws.base import Array, Mask

_ITERATIONS = 40  # with a node forced
_SAME = 1e-6  # share of the largest current, for currents that do more than leak
_SAME_VOLTAGE, _CLOSE = 1e-4, 1e-8  # V
_FORCED = 1e2  # S; stiffer than any part at a node
_FORCED_STEPS = 49
_MOST_NODES = 3


def from_starts(problem: Problem) -> tuple[Array, Mask, list[Array]]:
    """A single row from a cold start and from all others at once.

    Port voltages (ports, 1), whether they were found, and all points (ports,). Where the cold start fails,
    the first stable point of the others counts as its own, in their fixed order.
    """
    starts = all_starts(problem)
    found, good = newton(replace(problem, rows=starts.shape[1]), starts, FROM_START)
    points: list[Array] = []
    _add_distinct(problem, points, found, good)
    first = points[:1] if good[0] else [v for v in points if is_stable(problem, v)]
    if not first:
        return found[:, :1], good[:1], points
    return first[0][:, None], np.ones(1, dtype=bool), points


def other_points(problem: Problem, known: Array, found: Sequence[Array] | None = None) -> list[Array]:
    """Port voltages (ports,) of the operating points beside a known one; ``problem`` has one row.

    ``found`` are points that are known besides; without them they are looked for from all starts.
    """
    points = [known]
    others = from_starts(problem)[2] if found is None else found
    if others:
        _add_distinct(problem, points, np.stack(others, axis=1), np.ones(len(others), dtype=bool))
    if len(points) > 1 or degree(problem, points) != 1:
        for node in _telling_nodes(problem, points):
            _add_distinct(problem, points, *_along(problem, points, node))
            if degree(problem, points) == 1:
                break
    return points[1:]


def _telling_nodes(problem: Problem, points: Sequence[Array]) -> list[int]:
    """Ports in which the points differ most; of a single one, those that move most when it is left."""
    if len(points) > 1:
        apart = np.ptp(np.stack(points, axis=1), axis=1)
    else:
        found, _ = impedance(problem, linearized(problem, points[0][:, None])[..., 0])
        values, vectors = np.linalg.eig(found)
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
    matrix = problem.reduced.jacobian(jacobian) + problem.matrix
    flat = currents.reshape(problem.rows, -1)
    largest = np.abs(flat).max(axis=1, initial=0.0)
    apart = np.abs(flat[1:] - flat[0]).max(axis=1, initial=0.0)
    loose = loose_ports(problem, matrix)
    distance = np.where(loose[:, :1] | loose[:, 1:], 0.0, np.abs(tried[:, 1:] - tried[:, :1]))
    other: Mask = apart > _SAME * np.maximum(largest[1:], largest[0]) + LEAKS
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
    forced = pulled(replace(problem, rows=_FORCED_STEPS), pull, guess)
    v, good = newton(forced, guess, _ITERATIONS)
    v, force = v[:, good], (guess - v)[node, good]
    turns = np.flatnonzero(force[1:] * force[:-1] < 0.0)
    weight = np.abs(force[turns]) / (np.abs(force[turns]) + np.abs(force[turns + 1]))
    start = v[:, turns] + weight * (v[:, turns + 1] - v[:, turns])
    return newton(replace(problem, rows=len(turns)), start, _ITERATIONS)
