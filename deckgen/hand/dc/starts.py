"""Where Newton starts.

With all transistors off; with each as a closed or an open switch; with each port at an end of the supplies.
"""

from __future__ import annotations

import numpy as np

from deckgen.hand.dc.newton import LEAK, Problem
from deckgen.hand.dc.small import solve_rows
from deckgen.hand.laws.base import Array, Mask

FROM_START = 13
"""Iterations from one of several starts: one that needs more hardly gets anywhere."""

_ALL_PATTERNS = 4  # transistors up to which every set of switches is a start
_PATTERNS, _AT_ENDS = 6, 12  # beyond: sets of switches, and of ports at the ends of the supplies
_CLOSED, _OPEN, _HELD = 1e-2, 1e-9, 1e-12  # S: a closed switch, the gate of an open one to its source, else
_ON_LINE = 48  # currents that are tried on the line of a single channel
_COLD = 1e-9  # S; holds at a cold start what only transistors connect,
_LOOSE = 0.1  # as this share of 1 V at its other end tells

_SWITCH, _GATE = np.zeros((4, 4)), np.zeros((4, 4))
_SWITCH[np.ix_([0, 2], [0, 2])] = [[1.0, -1.0], [-1.0, 1.0]]
_GATE[np.ix_([1, 2], [1, 2])] = [[1.0, -1.0], [-1.0, 1.0]]


def all_starts(problem: Problem) -> Array:
    """Port voltages (ports, starts) for a network of one row: the cold start, then all others."""
    cold = cold_start(problem)
    devices = problem.reduced.devices
    starts = [cold, switched(problem, switch_patterns(devices))]
    if devices > _ALL_PATTERNS:
        low, high = min(cold.min(), 0.0), max(cold.max(), 0.0)
        at_high = np.random.default_rng(devices).random((len(cold), _AT_ENDS)) < 0.5
        starts.append(np.where(at_high, high, low))
    return np.concatenate(starts, axis=1)


def cold_start(problem: Problem) -> Array:
    """Port voltages (ports, rows) with all transistors off; what only transistors hold is at 0 V."""
    held = problem.matrix + _COLD * problem.reduced.inject[..., None]
    rows = max(held.shape[2], problem.sources.shape[1])
    unit = _COLD * problem.reduced.inject.sum(axis=1)[:, None]
    found, held_by = _solved(held, rows, problem.sources, unit)
    found = np.where(np.abs(held_by) > _LOOSE, 0.0, found)
    return np.array(np.broadcast_to(found, (len(held), problem.rows)))


def along_channel(problem: Problem) -> Array:
    """Port voltages (ports, rows) of a network with one transistor, near those with its current.

    All ports move with the current of the channel on a line, from a transistor that is off to one that is a
    short; the law meets it where it gives the current back. Gate and bulk are taken to carry none.
    """
    reduced, off = problem.reduced, cold_start(problem)
    across = reduced.pick[0] - reduced.pick[2]
    (slope,) = _solved(problem.matrix, 1, reduced.entry[:, 2:3] - reduced.entry[:, 0:1])
    fall = float(across @ slope[:, 0])
    if not fall < 0.0:
        return off  # nothing limits the current
    short = (across @ off) / -fall
    shares = np.linspace(0.0, 1.0, _ON_LINE) ** 2
    trial = short[:, None] * shares
    v = off[:, :, None] + slope[:, :, None] * trial
    every = problem.take(np.repeat(np.arange(problem.rows), _ON_LINE))
    currents, _ = every.devices(reduced.at_devices(v.reshape(len(off), -1)))
    excess = np.sign(short)[:, None] * (currents[:, 0, 0].reshape(trial.shape) - trial)
    last = np.clip((excess >= 0.0).sum(axis=1) - 1, 0, _ON_LINE - 2)
    rows = np.arange(problem.rows)
    above, below = excess[rows, last], excess[rows, last + 1]
    weight = np.where(above > below, above / np.where(above > below, above - below, 1.0), 0.0)
    met = trial[rows, last] + weight * (trial[rows, last + 1] - trial[rows, last])
    start: Array = off + slope * met
    return start


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
    """Port voltages (ports, starts) with transistors as switches (starts, devices).

    An open one has its gate at its source. ``problem`` has one row, or one for each start.
    """
    return _solved(switch_matrix(problem, closed), len(closed), problem.sources)[0]


def switch_matrix(problem: Problem, closed: Mask) -> Array:
    """Port matrix (ports, ports, starts) with transistors as closed or open switches (starts, devices)."""
    tangent = np.where(closed[..., None, None], _CLOSED * _SWITCH, _OPEN * _GATE) + _HELD * LEAK
    matrix: Array = problem.reduced.jacobian(tangent) + problem.matrix
    return matrix


def _solved(matrix: Array, rows: int, *sides: Array) -> list[Array]:
    """Solutions (ports, rows) for several right-hand sides of the same matrices."""
    size, count = len(matrix), len(sides)
    matrices = np.tile(np.broadcast_to(matrix, (size, size, rows)), count)
    every = np.concatenate([np.broadcast_to(side, (size, rows)) for side in sides], axis=1)
    return np.split(solve_rows(matrices, every)[0], count, axis=1)
