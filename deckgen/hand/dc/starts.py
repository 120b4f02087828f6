"""Where Newton starts: with all transistors off, or with each of them as a closed or an open switch."""

from __future__ import annotations

import numpy as np

from deckgen.hand.dc.newton import LEAK, Problem
from deckgen.hand.dc.small import solve_rows
from deckgen.hand.laws.base import Array, Mask

FROM_START = 20
"""Iterations from one of several starts: one that needs more hardly gets anywhere."""

_ALL_PATTERNS = 4  # transistors up to which every set of switches is a start
_PATTERNS = 12
_CLOSED, _OPEN, _HELD = 1e-2, 1e-9, 1e-12  # S: a closed switch, the gate of an open one to its source, else
_COLD = 1e-9  # S; holds at a cold start what only transistors connect

_SWITCH, _GATE = np.zeros((4, 4)), np.zeros((4, 4))
_SWITCH[np.ix_([0, 2], [0, 2])] = [[1.0, -1.0], [-1.0, 1.0]]
_GATE[np.ix_([1, 2], [1, 2])] = [[1.0, -1.0], [-1.0, 1.0]]


def cold_start(problem: Problem) -> Array:
    """Port voltages (ports, rows) with all transistors off."""
    held = problem.matrix + _COLD * problem.reduced.inject[..., None]
    found = _solved(problem, held, max(held.shape[2], problem.sources.shape[1]))
    return np.array(np.broadcast_to(found, (len(held), problem.rows)))


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
    return _solved(problem, switch_matrix(problem, closed), len(closed))


def switch_matrix(problem: Problem, closed: Mask) -> Array:
    """Port matrix (ports, ports, starts) with transistors as closed or open switches (starts, devices)."""
    tangent = np.where(closed[..., None, None], _CLOSED * _SWITCH, _OPEN * _GATE) + _HELD * LEAK
    matrix: Array = problem.reduced.jacobian(tangent) + problem.matrix
    return matrix


def _solved(problem: Problem, matrix: Array, rows: int) -> Array:
    size = len(matrix)
    side = np.broadcast_to(problem.sources, (size, rows))
    return solve_rows(np.broadcast_to(matrix, (size, size, rows)), side)[0]
