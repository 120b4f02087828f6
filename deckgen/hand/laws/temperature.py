"""How the parameters of a level-1 model move with temperature.

G. Massobrio, P. Antognetti, *Semiconductor Device Modeling with SPICE*, McGraw-Hill 1993, ch. 4
(title and chapter from memory); the values agree with ngspice 39 from -40 to 125 °C.
"""

from __future__ import annotations

import numpy as np

from deckgen.constants import BOLTZMANN, ELEMENTARY_CHARGE, ROOM_TEMPERATURE, thermal_voltage
from deckgen.hand.laws.base import Array

_GAP_AT_ZERO = 1.16  # eV, silicon at 0 K
_GAP_SLOPE = 7.02e-4  # eV/K
_GAP_OFFSET = 1108.0  # K
_MOBILITY_EXPONENT = 1.5
_CAPACITANCE_SLOPE = 4e-4  # 1/K, of a junction's capacitance


def band_gap(temperature: Array) -> Array:
    r"""Band gap of silicon [eV] at a temperature [K].

    .. math:: E_g(T) = 1.16 - 7.02\cdot10^{-4}\,T^2/(T + 1108)

    Y. P. Varshni, Physica 34 (1967), 149-154 (from memory); these coefficients are SPICE's.

    >>> round(float(band_gap(np.float64(300.15))), 4)
    1.1151
    """
    return _GAP_AT_ZERO - _GAP_SLOPE * temperature**2 / (temperature + _GAP_OFFSET)


def _intrinsic_shift(temperature: Array) -> Array:
    """Part of PHI that follows the intrinsic carrier density, relative to 27 °C [V]."""
    reference_gap = band_gap(np.asarray(ROOM_TEMPERATURE))
    gap_term = (reference_gap / ROOM_TEMPERATURE - band_gap(temperature) / temperature) / 2.0
    ratio = temperature / ROOM_TEMPERATURE
    electron_volt_over_k = ELEMENTARY_CHARGE / BOLTZMANN
    return -2.0 * thermal_voltage_of(temperature) * (1.5 * np.log(ratio) + gap_term * electron_volt_over_k)


def thermal_voltage_of(temperature: Array) -> Array:
    """UT = kT/q [V], element by element."""
    return thermal_voltage(1.0) * temperature


def potential_at(potential: Array, *, temperature: Array, tnom: Array) -> Array:
    """A built-in potential [V] at a temperature [K], given its value at ``tnom`` [K]."""
    at_room = (potential - _intrinsic_shift(tnom)) * (ROOM_TEMPERATURE / tnom)
    return at_room * (temperature / ROOM_TEMPERATURE) + _intrinsic_shift(temperature)


def phi_at(phi: Array, *, temperature: Array, tnom: Array) -> Array:
    """Surface potential PHI [V] at a temperature [K], given its value at ``tnom`` [K]."""
    return _positive(potential_at(phi, temperature=temperature, tnom=tnom))


def _positive(phi: Array) -> Array:
    """PHI, or no number where an absurd card or temperature puts it below zero: nothing converges then."""
    return np.where(phi > 0.0, phi, np.nan)


def vto_at(vto: Array, *, phi: Array, gamma: Array, sign: Array, temperature: Array, tnom: Array) -> Array:
    """Threshold at zero bulk bias [V] (signed as on the card) at a temperature [K].

    The flat-band part moves with half the band gap and half of PHI, the bulk charge with √PHI.
    """
    phi_t = phi_at(phi, temperature=temperature, tnom=tnom)
    built_in = vto - sign * gamma * np.sqrt(_positive(phi))
    built_in = built_in + 0.5 * (band_gap(tnom) - band_gap(temperature)) + 0.5 * sign * (phi_t - phi)
    return built_in + sign * gamma * np.sqrt(phi_t)


def saturation_factor(*, temperature: Array, tnom: Array) -> Array:
    r"""IS(T)/IS(TNOM) of a bulk junction.

    .. math:: \exp(E_g(T_{nom})/U_T(T_{nom}) - E_g(T)/U_T(T))
    """
    cold = band_gap(tnom) / thermal_voltage_of(tnom)
    return np.exp(cold - band_gap(temperature) / thermal_voltage_of(temperature))


def capacitance_factor(grading: Array, potential: Array, *, temperature: Array, tnom: Array) -> Array:
    """C(T)/C(TNOM) of an unbiased junction whose potential is PB [V] at ``tnom``, with grading M.

    1 + M·[4·10⁻⁴·(T - 27 °C) - ΔPB/PB], each relative to what the junction would have at 27 °C.
    """
    room = np.asarray(ROOM_TEMPERATURE)
    at_room = potential_at(potential, temperature=room, tnom=tnom)

    def relative(at: Array) -> Array:
        moved = potential_at(potential, temperature=at, tnom=tnom) / at_room - 1.0
        return 1.0 + grading * (_CAPACITANCE_SLOPE * (at - ROOM_TEMPERATURE) - moved)

    return relative(temperature) / relative(tnom)


def mobility_factor(*, temperature: Array, tnom: Array) -> Array:
    """KP(T) / KP(TNOM) = (T/TNOM)^-1.5."""
    return (temperature / tnom) ** -_MOBILITY_EXPONENT
