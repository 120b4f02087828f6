"""Continuation by arc length: a path of solutions followed through its turning points.

The share of the way is an unknown like the voltages, so that the path may run backwards for a while, as it
does where feedback makes a node snap: H. B. Keller, Numerical solution of bifurcation and nonlinear
eigenvalue problems, in: Applications of Bifurcation Theory, 1977, 359-384; for networks R. C. Melville, Lj.
Trajkovic, S.-C. Fang, L. T. Watson, Artificial parameter homotopy methods for the DC operating point problem,
IEEE Trans. CAD 12(6), 1993, 861-877 (both from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from deckgen.hand.dc.continuation import Family
from deckgen.hand.dc.newton import Problem, newton
from deckgen.hand.dc.small import solve_rows
from deckgen.hand.dc.starts import cold_start
from deckgen.hand.laws.base import Array, Mask

_MOST_STEPS = 300
_CORRECTIONS = 6
_CLOSE = 1e-7  # relative length of a correction after which the point is on the path
_FIRST, _LEAST, _LONGEST = 1e-2, 1e-7, 0.3  # lengths of a step, the longest as a share of what is largest
_NOISE = 1e-6  # how far a correction may reach beyond the step
_FASTER, _SLOWER = 1.6, 0.3
_DIFFERENCE = 1e-6  # step in the share for its derivative
_BEFORE_START = -0.05  # a path that runs back behind its start leads nowhere


@dataclass(frozen=True, slots=True)
class _Place:
    """A place on the path for each row: the voltages over ``unit``, the share below them."""

    x: Array
    tangent: Array


def follow(problem: Problem, family: Family) -> tuple[Array, Mask]:
    """Port voltages at the end of the way (share 1), and which rows got there.

    Every row starts from the solution at share 0.
    """
    size, rows = len(problem.reduced.ports), problem.rows
    easy = family(problem, np.zeros(rows))
    start, ok = newton(easy, cold_start(easy))
    unit = np.maximum(1.0, np.abs(problem.reduced.sources).max(initial=0.0))
    ends, arrived = start.copy(), np.zeros(rows, dtype=bool)
    ahead = np.vstack([np.zeros((size, rows)), np.ones(rows)])
    place = _Place(np.vstack([start / unit, np.zeros(rows)]), ahead)
    step, left, work = np.full(rows, _FIRST), np.flatnonzero(ok), problem
    if len(left) < rows:
        work = problem.take(left)
        place, step = _Place(place.x[:, left], place.tangent[:, left]), step[left]
    for _ in range(_MOST_STEPS):
        if len(left) == 0:
            break
        before, (place, step) = place, _advance(work, family, place, step, unit)
        there = np.flatnonzero(place.x[-1] >= 1.0)
        if len(there):
            found, good = _at_end(work.take(there), family, before.x[:, there], place.x[:, there], unit)
            ends[:, left[there[good]]], arrived[left[there[good]]] = found[:, good], True
            # Where Newton did not follow: once more from the place before, with a shorter step.
            back = np.isin(np.arange(len(left)), there[~good])
            place = _Place(np.where(back, before.x, place.x), np.where(back, before.tangent, place.tangent))
            step = np.where(back, step * _SLOWER, step)
        lost = (step < _LEAST) | (place.x[-1] < _BEFORE_START) | (place.x[-1] >= 1.0)
        if lost.any():
            kept = np.flatnonzero(~lost)
            left, work, step = left[kept], work.take(kept), step[kept]
            place = _Place(place.x[:, kept], place.tangent[:, kept])
    return ends, arrived


def _at_end(problem: Problem, family: Family, before: Array, after: Array, unit: float) -> tuple[Array, Mask]:
    """Solutions at share 1, between a place before and one behind it."""
    part = (1.0 - before[-1]) / (after[-1] - before[-1])
    start = before[:-1] + part * (after[:-1] - before[:-1])
    return newton(family(problem, np.ones(problem.rows)), start * unit)


def _advance(
    problem: Problem, family: Family, place: _Place, step: Array, unit: float
) -> tuple[_Place, Array]:
    """One step along the tangent and back onto the path; rows that fail stay, with a shorter step."""
    matrix, _ = _extended(problem, family, place.x, unit)
    tangent = _direction(matrix, place.tangent)
    guess = place.x + step * tangent
    x, landed, quick = guess, np.zeros(problem.rows, dtype=bool), np.zeros(problem.rows, dtype=bool)
    for count in range(_CORRECTIONS):
        matrix, excess = _extended(problem, family, x, unit)
        beside = (tangent * (x - guess)).sum(axis=0)
        full = np.concatenate([matrix, tangent[None]])
        correction, ok = solve_rows(full, -np.vstack([excess, beside]))
        x = np.where(landed, x, x + correction)
        length = np.sqrt((correction**2).sum(axis=0))
        # A correction longer than the step lands on another branch, if at all.
        now = ok & (length <= _CLOSE * np.maximum(1.0, np.abs(x).max(axis=0))) & ~landed
        landed |= now
        quick |= now & (count < _CORRECTIONS // 2)
        if landed.all():
            break
    landed &= np.sqrt(((x - guess) ** 2).sum(axis=0)) <= step + _NOISE
    new_step = np.where(landed, np.where(quick, step * _FASTER, step), step * _SLOWER)
    return (
        _Place(np.where(landed, x, place.x), np.where(landed, tangent, place.tangent)),
        np.minimum(new_step, _LONGEST * np.maximum(1.0, np.abs(x).max(axis=0))),
    )


def _extended(problem: Problem, family: Family, x: Array, unit: float) -> tuple[Array, Array]:
    """Derivatives by voltages and share, (ports, ports + 1, rows), and what the equations leave over."""
    v, share = x[:-1] * unit, x[-1]
    here = family(problem, share)
    reduced = problem.reduced
    currents, jacobian = here.devices(reduced.at_devices(v))
    by_voltage = (reduced.jacobian(jacobian) + here.matrix) * unit
    excess = _linear_part(here, v) + reduced.entry @ currents.reshape(problem.rows, -1).T
    later, earlier = (family(problem, share + sign * _DIFFERENCE) for sign in (1.0, -1.0))
    by_share = (_linear_part(later, v) - _linear_part(earlier, v)) / (2.0 * _DIFFERENCE)
    return np.concatenate([by_voltage, by_share[:, None]], axis=1), excess


def _linear_part(problem: Problem, v: Array) -> Array:
    left: Array = (problem.matrix * v[None]).sum(axis=1) - problem.sources
    return left


def _direction(matrix: Array, before: Array) -> Array:
    """Unit tangent of the path, on the side of the one before."""
    size, rows = before.shape
    side = np.zeros((size, rows))
    side[-1] = 1.0
    tangent, ok = solve_rows(np.concatenate([matrix, before[None]]), side)
    length = np.sqrt((tangent**2).sum(axis=0))
    fine = ok & (length > 0.0) & np.isfinite(length)
    return np.where(fine, tangent / np.where(fine, length, 1.0), before)
