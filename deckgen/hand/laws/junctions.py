r"""The junctions between bulk and drain, bulk and source: currents, capacitances, and limits for Newton.

.. math::
    I = I_S (e^{V/U_T} - 1) + g_{min} V, \qquad C = C_{J0} (1 - V/P_B)^{-M}

W. Shockley's diode, Bell System Technical Journal 28 (1949), 435-489; the capacitance of a depleted junction,
S. M. Sze, *Physics of Semiconductor Devices*, Wiley 1981, ch. 2 (both from memory), continued above FC·PB by
its tangent. Voltages count positive where the junction is forward-biased.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from deckgen.hand.laws.base import Array, Mask
from deckgen.hand.laws.parameters import SquareParameters

_REVERSE = -3.0  # in UT: below this ngspice 39 takes -IS for the current, without a slope
_LARGEST_EXPONENT = 200.0  # at 10⁷⁰ A and more the exponential goes on as a straight line


@dataclass(frozen=True, slots=True)
class Junctions:
    """Currents [A] from the bulk into drain and source, n-channel signs, and their slopes [S]."""

    to_drain: Array
    to_source: Array
    g_drain: Array
    g_source: Array


def junctions(parameters: SquareParameters, voltages: Array) -> Junctions:
    """Junction currents at the voltages of drain, gate, source, bulk next to the channel."""
    p, s, bulk = parameters, parameters.sign, voltages[..., 3]
    to_drain, g_drain = diode(s * (bulk - voltages[..., 0]), p.is_drain, p.ut, p.gmin)
    to_source, g_source = diode(s * (bulk - voltages[..., 2]), p.is_source, p.ut, p.gmin)
    return Junctions(to_drain, to_source, g_drain, g_source)


def diode(v: Array, saturation: Array, ut: Array, gmin: Array) -> tuple[Array, Array]:
    """Current [A] and slope [S] of one junction."""
    conducting = v > _REVERSE * ut
    if not conducting.any():
        return gmin * v - saturation, np.broadcast_to(gmin, v.shape)
    exponent = np.minimum(v / ut, _LARGEST_EXPONENT)
    grown = saturation * np.exp(exponent)
    forward = saturation * np.expm1(exponent) + grown * (v / ut - exponent)
    current = np.where(conducting, forward, -saturation) + gmin * v
    return current, np.where(conducting, grown / ut, 0.0) + gmin


def junction_capacitances(parameters: SquareParameters, voltages: Array) -> tuple[Array, Array]:
    """Cbd and Cbs [F]: bottom and side walls."""
    p, s, bulk = parameters, parameters.sign, voltages[..., 3]

    def both(v: Array, bottom: Array, side: Array) -> Array:
        return _depletion(v, bottom, p.mj, p) + _depletion(v, side, p.mjsw, p)

    drain = both(s * (bulk - voltages[..., 0]), p.cj_drain, p.cjsw_drain)
    source = both(s * (bulk - voltages[..., 2]), p.cj_source, p.cjsw_source)
    return drain, source


def _depletion(v: Array, unbiased: Array, grading: Array, p: SquareParameters) -> Array:
    """Capacitance of a depleted junction; from FC·PB on its tangent there. 0 for one that is not there."""
    knee = np.minimum(v, p.fc * p.pb)
    left = 1.0 - knee / p.pb
    grown = left**-grading * (1.0 + grading * (v - knee) / (p.pb * left))
    return np.where(np.abs(unbiased) > 0.0, unbiased * grown, 0.0)


def limited(parameters: SquareParameters, old: Array, new: Array) -> Array:
    """New terminal voltages with the bulk pulled back where a junction would go too far into conduction.

    L. W. Nagel, *SPICE2*, Memorandum UCB/ERL M520, 1975 (from memory): above the voltage of the sharpest
    bend a step grows with the logarithm of what Newton asks for. Behind a series resistance the current
    grows no faster than the voltage, and nothing has to be held.
    """
    p, s, bulk = parameters, parameters.sign, new[..., 3]
    now = s * (bulk - new[..., 0]), s * (bulk - new[..., 2])
    bend = _first_bend(p)
    if not (now[0].max(initial=0.0) > bend or now[1].max(initial=0.0) > bend):
        return new
    before = s * (old[..., 3] - old[..., 0]), s * (old[..., 3] - old[..., 2])
    drain, held_drain = _step(p, before[0], now[0], p.is_drain)
    source, held_source = _step(p, before[1], now[1], p.is_source)
    held_drain = held_drain & ~(p.r_drain > 0.0)
    held_source = held_source & ~(p.r_source > 0.0)
    if not (held_drain.any() or held_source.any()):
        return new
    by_drain = np.where(held_drain, s * new[..., 0] + drain, s * bulk)
    by_source = np.where(held_source, s * new[..., 2] + source, s * bulk)
    lowest = np.minimum(by_drain, by_source)
    pulled = np.array(new)
    pulled[..., 3] = np.where(lowest < s * bulk, s * lowest, bulk)
    return pulled


def _first_bend(p: SquareParameters) -> float:
    """The lowest voltage at which any junction bends [V]; infinite where none conducts."""
    saturation = max(float(p.is_drain.max(initial=0.0)), float(p.is_source.max(initial=0.0)))
    ut = float(p.ut.min(initial=math.inf))
    return ut * math.log(ut / (math.sqrt(2.0) * saturation)) if saturation > 0.0 else math.inf


def _step(p: SquareParameters, old: Array, new: Array, saturation: Array) -> tuple[Array, Mask]:
    """Limited voltage of one junction, and where a limit acts."""
    rising = (new > 0.0) & (np.abs(new - old) > 2.0 * p.ut)
    if not rising.any():
        return new, rising
    with np.errstate(divide="ignore", invalid="ignore"):
        bend = p.ut * np.log(p.ut / (math.sqrt(2.0) * saturation))
        change = 1.0 + (new - old) / p.ut
        further = np.where(change > 0.0, old + p.ut * np.log(change), bend)
        found = np.where(old > 0.0, further, p.ut * np.log(new / p.ut))
    return found, rising & (new > bend)
