"""Resistances that capacitors see, -3 dB estimates from time constants, and Miller's approximation."""

from __future__ import annotations

import math

from deckgen.errors import FormulaInputError
from deckgen.hand.formulas.ranges import NOT_NEGATIVE, NOT_POSITIVE, POSITIVE, Range, accepts, holds

TIME_CONSTANTS = "Gray & Searle 1969"
MILLER = "Miller 1920"

DOMINANT_POLE = Range("largest share of the sum", 0.5, 1.0, "no time constant dominates")
"""Estimates from time constants are close when one of them dominates; common practice."""


@accepts(r=POSITIVE, c=POSITIVE)
def pole_frequency(*, r: float, c: float) -> float:
    r"""Frequency of a single pole.

    .. math:: f = 1/(2\pi R C)

    Parameters
    ----------
    r : float
        Resistance that the capacitor sees, > 0. [Ω]
    c : float
        Capacitance, > 0. [F]

    Returns
    -------
    float
        Pole frequency. [Hz]

    Raises
    ------
    FormulaInputError
        A value is not finite or not above zero.

    Notes
    -----
    Exact for one resistance and one capacitance.

    References
    ----------
    .. [1] P. E. Gray, C. L. Searle, Electronic Principles, Wiley 1969.

    Examples
    --------
    >>> round(pole_frequency(r=16.7e3, c=0.48e-6), 1)
    19.9
    """
    return 1.0 / (2.0 * math.pi * r * c)


@accepts(gm=NOT_NEGATIVE, r_g=NOT_NEGATIVE, r_s=NOT_NEGATIVE)
def gate_source_resistance(*, gm: float, r_g: float, r_s: float) -> float:
    r"""Open-circuit resistance that Cgs sees in any single-transistor stage.

    .. math:: R = (R_G + R_S)/(1 + g_m R_S)

    Parameters
    ----------
    gm : float
        Transconductance, >= 0. [S]
    r_g, r_s : float
        Resistances from gate and source to signal ground, >= 0. [Ω]

    Returns
    -------
    float
        Resistance. [Ω]

    Raises
    ------
    FormulaInputError
        A value is not finite or below zero.

    Notes
    -----
    Exact without ro and gmb; a conductance from source to ground (gmb of a follower) may be put into r_s.

    References
    ----------
    .. [1] P. E. Gray, C. L. Searle, Electronic Principles, Wiley 1969.

    Examples
    --------
    >>> gate_source_resistance(gm=1e-3, r_g=10e3, r_s=0.0)
    10000.0
    """
    return (r_g + r_s) / (1.0 + gm * r_s)


@accepts(gm=NOT_NEGATIVE, r_g=NOT_NEGATIVE, r_d=NOT_NEGATIVE, r_s=NOT_NEGATIVE)
def gate_drain_resistance(*, gm: float, r_g: float, r_d: float, r_s: float) -> float:
    r"""Open-circuit resistance that Cgd sees in any single-transistor stage.

    .. math:: R = R_G + R_D + g_m R_G R_D/(1 + g_m R_S)

    Parameters
    ----------
    gm : float
        Transconductance, >= 0. [S]
    r_g, r_d, r_s : float
        Resistances from gate, drain and source to signal ground, >= 0; with the source grounded, ro
        belongs into r_d. [Ω]

    Returns
    -------
    float
        Resistance. [Ω]

    Raises
    ------
    FormulaInputError
        A value is not finite or below zero.

    Notes
    -----
    Exact with the source grounded; with degeneration ro and gmb are neglected.

    References
    ----------
    .. [1] P. E. Gray, C. L. Searle, Electronic Principles, Wiley 1969.

    Examples
    --------
    >>> round(gate_drain_resistance(gm=4e-3, r_g=80.77e3, r_d=3.33e3, r_s=0.0))
    1159956
    """
    return r_g + r_d + gm * r_g * r_d / (1.0 + gm * r_s)


@holds(DOMINANT_POLE)
@accepts(c_gs=NOT_NEGATIVE, c_gd=NOT_NEGATIVE, gain=NOT_POSITIVE, r_g=POSITIVE)
def miller_bandwidth(*, c_gs: float, c_gd: float, gain: float, r_g: float) -> float:
    r"""Upper -3 dB frequency by Miller's approximation.

    .. math:: f_H = \frac{1}{2\pi R_G [C_{gs} + C_{gd}(1 - A)]}

    Parameters
    ----------
    c_gs, c_gd : float
        Gate-source and gate-drain capacitance, >= 0. [F]
    gain : float
        Mid-band gain from gate to drain, <= 0. [V/V]
    r_g : float
        Resistance that drives the gate, > 0. [Ω]

    Returns
    -------
    float
        Estimate of the -3 dB frequency. [Hz]

    Raises
    ------
    FormulaInputError
        A value is not finite, has the wrong sign, or both capacitances are 0.

    Notes
    -----
    Holds while the input pole dominates: its time constant is the largest share of the sum, from 0.5 to 1.
    Ignores the output pole and the zero at gm/Cgd.

    References
    ----------
    .. [1] J. M. Miller, Scientific Papers of the Bureau of Standards 15 (351), 1920, 367-385 (from memory).

    Examples
    --------
    >>> round(miller_bandwidth(c_gs=1e-12, c_gd=0.4e-12, gain=-7.142857, r_g=97.9167e3) / 1e3)
    382
    """
    if not c_gs + c_gd > 0.0:
        raise FormulaInputError("miller_bandwidth", f"c_gs = {c_gs}, c_gd = {c_gd}", "one of them >0")
    return pole_frequency(r=r_g, c=c_gs + c_gd * (1.0 - gain))
