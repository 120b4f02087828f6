"""Resistances in series with drain and source: the voltages behind them, and the law as its pins see it.

With a current i through the channel, each inner node is a resistor and a junction in series, and has one
voltage. The channel's own current at these voltages falls as i grows, so that

    h(i) = I(d'(i), g, s'(i), b) - i

falls at least as fast as -i, and its root lies between 0 and h(0). Newton finds it, and halves the bracket
where a step would leave it or be hardly shorter than the one before (W. H. Press et al., *Numerical
Recipes*, Cambridge 1992, section 9.4, from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from deckgen.hand.laws.base import Array, Evaluation
from deckgen.hand.laws.channel import channel, slopes
from deckgen.hand.laws.junctions import diode
from deckgen.hand.laws.parameters import SquareParameters, take

_PASSES = 200
_JUNCTION_PASSES = 60
_CLOSE = 1e-8  # relative step whose square is below rounding
_SHORTER = 0.9  # a step of Newton that is hardly shorter than the last goes in circles
_ROUNDING = 4e-16  # of the voltages


def inner_voltages(parameters: SquareParameters, voltages: Array) -> Array:
    """Voltages of inner drain, gate, inner source, bulk, shape (…, 4)."""
    some = (parameters.r_drain > 0.0) | (parameters.r_source > 0.0)
    if not some.any():
        return voltages
    chosen = np.broadcast_to(some, voltages.shape[:-1])
    inside = np.array(voltages)
    inside[chosen] = _solved(take(parameters, chosen), voltages[chosen])
    return inside


@dataclass(frozen=True, slots=True)
class _State:
    """Inner voltages at a trial current, how much more the channel carries [A], and the slope of that."""

    inside: Array
    excess: Array
    slope: Array


def _solved(p: SquareParameters, outer: Array) -> Array:
    """Inner voltages; devices that are done are left out of further passes."""
    with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
        current = np.zeros(len(outer))
        first = _at_current(p, outer, current).excess
        low, high = np.minimum(first, 0.0), np.maximum(first, 0.0)
        last = np.full(len(outer), np.inf)
        rounding = _ROUNDING * np.abs(outer).max(axis=1) / (p.r_drain + p.r_source)
        active, here = np.arange(len(outer)), p
        for _ in range(_PASSES):
            now = current[active]
            at = _at_current(here, outer[active], now)
            low[active] = np.where(at.excess > 0.0, now, low[active])
            high[active] = np.where(at.excess < 0.0, now, high[active])
            step = -at.excess / at.slope
            left = (now + step < low[active]) | (now + step > high[active])
            halved = 0.5 * (low[active] + high[active]) - now
            step = np.where(left | (np.abs(step) > _SHORTER * last[active]), halved, step)
            current[active], last[active] = now + step, np.abs(step)
            going = np.abs(step) > np.maximum(_CLOSE * np.abs(now + step), rounding[active])
            if not going.all():
                active, here = active[going], take(here, going)
            if len(active) == 0:
                break
        return _at_current(p, outer, current).inside


def _at_current(p: SquareParameters, outer: Array, current: Array) -> _State:
    """Both inner nodes at a current through the channel, counted as for an n-channel device."""
    inside = np.array(outer)
    s, bulk = p.sign, outer[:, 3]
    forward = s * (bulk - outer[:, 0]) + p.r_drain * current
    v_drain, follow_drain = _behind_resistor(forward, p.r_drain, p.is_drain, p)
    forward = s * (bulk - outer[:, 2]) - p.r_source * current
    v_source, follow_source = _behind_resistor(forward, p.r_source, p.is_source, p)
    inside[:, 0] = np.where(p.r_drain > 0.0, bulk - s * v_drain, outer[:, 0])
    inside[:, 2] = np.where(p.r_source > 0.0, bulk - s * v_source, outer[:, 2])
    found = channel(p, inside)
    row = slopes(found)
    excess = np.where(found.swapped, -found.current, found.current) - current
    falling = row[:, 0] * p.r_drain * follow_drain - row[:, 2] * p.r_source * follow_source
    return _State(inside, excess, -1.0 - falling)


def _behind_resistor(
    open_circuit: Array, resistance: Array, saturation: Array, p: SquareParameters
) -> tuple[Array, Array]:
    """Voltage of a junction behind a resistor, and its slope by the open-circuit voltage.

    Newton from the most that the junction can have: there the exponential never lets it overshoot.
    """
    grown = p.ut * np.log1p(open_circuit / (resistance * saturation))
    most = np.where(open_circuit > 0.0, np.fmin(open_circuit, grown), 0.0)
    v = np.where(open_circuit > 0.0, most, open_circuit)
    for _ in range(_JUNCTION_PASSES):
        current, slope = diode(v, saturation, p.ut, p.gmin)
        step = (v - open_circuit + resistance * current) / (1.0 + resistance * slope)
        v = np.minimum(v - step, most)
        if not (np.abs(step) > _CLOSE * p.ut).any():
            break
    _, slope = diode(v, saturation, p.ut, p.gmin)
    return v, 1.0 / (1.0 + resistance * slope)


def outside(parameters: SquareParameters, found: Evaluation) -> Evaluation:
    """The law by its outer voltages: the same currents, and the exact Jacobian by implicit derivation.

    The inner voltages follow from d' - d + RD·I(d') = 0 and s' - s + RS·I(s') = 0.
    """
    jacobian = found.jacobian
    side = np.zeros((*jacobian.shape[:-2], 2, 4))
    side[..., 0, 0] = 1.0
    side[..., 1, 2] = 1.0
    for pin in (1, 3):
        side[..., 0, pin] = -parameters.r_drain * jacobian[..., 0, pin]
        side[..., 1, pin] = -parameters.r_source * jacobian[..., 2, pin]
    follow = _inner_slopes(parameters, jacobian, side)
    outer = jacobian[..., :, [0, 2]] @ follow
    outer[..., 1] += jacobian[..., 1]
    outer[..., 3] += jacobian[..., 3]
    return Evaluation(found.currents, outer)


def _inner_slopes(p: SquareParameters, jacobian: Array, side: Array) -> Array:
    """D (inner voltages)/d (outer voltages), shape (…, 2, 4), from the linearized equations of both nodes."""
    a = (1.0 + p.r_drain * jacobian[..., 0, 0])[..., None]
    b = (p.r_drain * jacobian[..., 0, 2])[..., None]
    c = (p.r_source * jacobian[..., 2, 0])[..., None]
    d = (1.0 + p.r_source * jacobian[..., 2, 2])[..., None]
    determinant = a * d - b * c
    drain = (d * side[..., 0, :] - b * side[..., 1, :]) / determinant
    source = (a * side[..., 1, :] - c * side[..., 0, :]) / determinant
    return np.stack([drain, source], axis=-2)
