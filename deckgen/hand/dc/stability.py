"""The network linearized at a point: which nodes it holds, whether it stays there, how points add up.

With equal capacitances from all ports to ground the network leaves a point on its own where its impedance
matrix has a real negative eigenvalue. It has one at least where the determinant of the linearized equations
has another sign than with every port held, and then no capacitances make the point stable (M. M. Green, A. N.
Willson, How to identify unstable dc operating points, IEEE Trans. CAS-I 39(10), 1992, 820-832, from memory).
Whether complex eigenvalues grow depends on the capacitances; they are left out.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from deckgen.hand.dc.newton import Problem
from deckgen.hand.dc.reduced import TINY
from deckgen.hand.dc.small import solve_rows
from deckgen.hand.laws.base import Array, Indices, Mask

LEAKS = 1e-10
"""Current [A] that a channel does not exceed by leakage."""

_LOOSE = 1e-9  # S; a node held by less hangs on channels that are off, or at the edge of it
_STIFF = 1e6
_ROUNDING = 1e-10  # of an eigenvalue, as a share of the largest
_INVOLVED = 0.1  # share of the largest voltage in what the equations leave open


def linearized(problem: Problem, v: Array) -> Array:
    """Port matrix (ports, ports, rows) with devices as their conductances at port voltages (ports, rows)."""
    _, jacobian = problem.devices(problem.reduced.at_devices(v))
    matrix: Array = problem.reduced.jacobian(jacobian) + problem.matrix
    return matrix


def loose_ports(problem: Problem, matrix: Array) -> Mask:
    """Ports (ports, rows) that hardly anything holds: only channels connect them, and they are off."""
    moved, good = _moved(problem, matrix)
    loose: Mask = (moved > TINY / _LOOSE) | ~good
    return loose


def undetermined_ports(problem: Problem, matrix: Array) -> Indices:
    """Ports that the equations of a single row leave open."""
    answer, good = _moved(problem, matrix)
    moved = answer[:, 0] if good[0] else np.abs(np.linalg.svd(matrix[..., 0])[2][-1])
    return np.flatnonzero(moved > max(TINY / _LOOSE, _INVOLVED * moved.max(initial=0.0)))


def _moved(problem: Problem, matrix: Array) -> tuple[Array, Mask]:
    """How far TINY, at 1 V from every port, moves each [V], and the rows that have such an answer."""
    side = np.broadcast_to(problem.reduced.tiny.sum(axis=1)[:, None], (len(matrix), matrix.shape[2]))
    moved, good = solve_rows(matrix, side)
    return np.abs(moved), good


def flooded_rows(problem: Problem, v: Array) -> Mask:
    """Rows in which channels carry a current to a node that nothing holds: no point, whatever leaks."""
    terminals = problem.reduced.at_devices(v)
    currents, _ = problem.devices(terminals)
    through = problem.reduced.pick.T @ np.abs(currents).reshape(problem.rows, -1).T
    loose = loose_ports(problem, linearized(problem, v))
    answer: Mask = np.any(loose & ~(through <= LEAKS), axis=0)
    return answer


def degree(problem: Problem, points: Sequence[Array]) -> int:
    """Sum of the signs of the points' determinants: 1 if none is missing, as far as the network is passive.

    L. O. Chua, N. N. Wang, On the application of degree theory to the analysis of resistive nonlinear
    networks, Int. J. Circuit Theory and Applications 5, 1977, 35-68 (from memory).
    """
    at_points = replace(problem, rows=len(points))
    matrix = linearized(at_points, np.stack(points, axis=1))
    # A point with open nodes counts for nothing: it and its edge, where the first channel opens, cancel out.
    return int(_signs(problem, matrix)[~loose_ports(problem, matrix).any(axis=0)].sum())


def is_stable(problem: Problem, v: Array) -> bool:
    """Whether a network of one row stays at port voltages (ports,) on its own."""
    matrix = linearized(problem, v[:, None])[..., 0]
    found, good = impedance(problem, matrix)
    if not good:
        return True  # nothing drives a node that nothing holds
    values = np.linalg.eigvals(found)
    largest = np.abs(values).max(initial=0.0)
    real = np.abs(values.imag) <= _ROUNDING * largest
    leaves = bool((real & (values.real < -_ROUNDING * largest)).any())
    return not leaves and bool(_signs(problem, matrix[..., None])[0] > 0.0)


def impedance(problem: Problem, matrix: Array) -> tuple[Array, bool]:
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
