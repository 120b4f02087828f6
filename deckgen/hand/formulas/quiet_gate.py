"""Stages whose gate carries no signal: common gate, diode-connected, the channel as a resistor."""

from __future__ import annotations

import math

from deckgen.hand.formulas.ranges import NOT_NEGATIVE, POSITIVE_OR_INFINITE, accepts

DIODE_BOOK = "Razavi, diode-connected"
"""Short name of the book in a table of working; from memory."""


@accepts(gm=NOT_NEGATIVE, gmb=NOT_NEGATIVE, ro=POSITIVE_OR_INFINITE, r_d=POSITIVE_OR_INFINITE)
def common_gate_gain(*, gm: float, gmb: float, ro: float, r_d: float) -> float:
    r"""Gain from source to drain, gate and bulk at signal ground.

    .. math:: A = \frac{(g_m + g_{mb} + 1/r_o) R_D}{1 + R_D/r_o}

    Parameters
    ----------
    gm, gmb : float
        Transconductance and bulk transconductance, >= 0; gmb = 0 with the bulk at the source. [S]
    ro : float
        Output resistance, > 0, may be infinite. [Ω]
    r_d : float
        All that loads the drain but the transistor, > 0, may be infinite. [Ω]

    Returns
    -------
    float
        Voltage gain, >= 0. [V/V]

    Raises
    ------
    FormulaInputError
        A value is NaN, infinite where it may not be, or of the wrong sign, or both resistances are infinite.

    Notes
    -----
    Exact at small signal, in any region.

    References
    ----------
    .. [1] P. R. Gray, P. J. Hurst, S. H. Lewis, R. G. Meyer, Analysis and Design of Analog Integrated
       Circuits, ch. 3 (chapter from memory).

    Examples
    --------
    >>> round(common_gate_gain(gm=2e-3, gmb=0.0, ro=math.inf, r_d=5e3), 6)
    10.0
    """
    return (gm + gmb + 1.0 / ro) / (1.0 / r_d + 1.0 / ro)


@accepts(gm=NOT_NEGATIVE, gmb=NOT_NEGATIVE, ro=POSITIVE_OR_INFINITE, r_s=NOT_NEGATIVE)
def diode_resistance(*, gm: float, gmb: float, ro: float, r_s: float) -> float:
    r"""Resistance of a transistor whose gate and drain are one node, seen from there.

    .. math:: R = \frac{1 + (g_m + g_{mb} + 1/r_o) R_S}{g_m + 1/r_o}

    Parameters
    ----------
    gm, gmb : float
        Transconductance and bulk transconductance, >= 0; gmb = 0 with the bulk at the source. [S]
    ro : float
        Output resistance, > 0, may be infinite. [Ω]
    r_s : float
        Resistance from the source to signal ground, >= 0. [Ω]

    Returns
    -------
    float
        Resistance, infinite for a device that is off. [Ω]

    Raises
    ------
    FormulaInputError
        A value is NaN, infinite where it may not be, or of the wrong sign.

    Notes
    -----
    Exact at small signal.

    References
    ----------
    .. [1] B. Razavi, Design of Analog CMOS Integrated Circuits, section on diode-connected loads
       (from memory).

    Examples
    --------
    >>> round(diode_resistance(gm=1e-3, gmb=0.0, ro=100e3, r_s=0.0), 2)
    990.1
    """
    conductance = gm + 1.0 / ro
    return (1.0 + (conductance + gmb) * r_s) / conductance if conductance > 0.0 else math.inf


@accepts(gm=NOT_NEGATIVE, gmb=NOT_NEGATIVE, ro=POSITIVE_OR_INFINITE, r_s=POSITIVE_OR_INFINITE)
def channel_pass_gain(*, gm: float, gmb: float, ro: float, r_s: float) -> float:
    r"""Gain from drain to source through a channel, gate and bulk at signal ground.

    .. math:: A = \frac{1/r_o}{1/R_S + g_m + g_{mb} + 1/r_o}

    Parameters
    ----------
    gm, gmb : float
        Transconductance and bulk transconductance, >= 0; gmb = 0 with the bulk at the source. [S]
    ro : float
        1/gds: the resistance of the channel in triode, > 0, may be infinite. [Ω]
    r_s : float
        All that loads the source but the transistor, > 0, may be infinite. [Ω]

    Returns
    -------
    float
        Voltage gain, from 0 to 1. [V/V]

    Raises
    ------
    FormulaInputError
        A value is NaN, infinite where it may not be, or of the wrong sign.

    Notes
    -----
    Exact at small signal, in any region; of use in triode, where 1/ro = k(VOV - VDS).

    References
    ----------
    .. [1] H. Shichman, D. A. Hodges, IEEE J. Solid-State Circuits SC-3(3), 1968, 285-289 (linearised).

    Examples
    --------
    >>> round(channel_pass_gain(gm=0.0, gmb=0.0, ro=1e3, r_s=9e3), 6)
    0.9
    """
    through = 1.0 / ro
    return through / (1.0 / r_s + gm + gmb + through) if through > 0.0 else 0.0
