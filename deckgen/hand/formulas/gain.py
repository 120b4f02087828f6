"""Mid-band gain and resistances of single-transistor stages; ``ro`` may be infinite."""

from __future__ import annotations

import math

from deckgen.hand.formulas.ranges import NOT_NEGATIVE, NOT_NEGATIVE_OR_INFINITE, POSITIVE_OR_INFINITE, accepts

TEXTBOOK = "Gray et al., ch. 3"
"""Short name of the book in a table of working; chapter from memory."""


@accepts(resistances=NOT_NEGATIVE_OR_INFINITE)
def parallel(*resistances: float) -> float:
    r"""Resistance of resistors in parallel.

    .. math:: R = 1 \Big/ \sum_i (1/R_i)

    Parameters
    ----------
    resistances : float
        Each >= 0, may be infinite. [Ω]

    Returns
    -------
    float
        Their resistance together; infinite without any. [Ω]

    Raises
    ------
    FormulaInputError
        A value is NaN or below zero.

    Notes
    -----
    Exact for linear resistors.

    References
    ----------
    .. [1] Kirchhoff's current law and Ohm's law.

    Examples
    --------
    >>> round(parallel(15e3, 15e3), 3)
    7500.0
    """
    conductance = sum(1.0 / r if r > 0.0 else math.inf for r in resistances)
    return 1.0 / conductance if conductance > 0.0 else math.inf


@accepts(
    gm=NOT_NEGATIVE, gmb=NOT_NEGATIVE, ro=POSITIVE_OR_INFINITE, r_d=POSITIVE_OR_INFINITE, r_s=NOT_NEGATIVE
)
def common_source_gain(*, gm: float, gmb: float, ro: float, r_d: float, r_s: float) -> float:
    r"""Gain from gate to drain of a common source, with or without degeneration.

    .. math:: A = -\frac{g_m R_D}{1 + (g_m + g_{mb}) R_S + (R_D + R_S)/r_o}

    Parameters
    ----------
    gm, gmb : float
        Transconductance and bulk transconductance, >= 0; gmb = 0 with the bulk at the source. [S]
    ro : float
        Output resistance, > 0, may be infinite. [Ω]
    r_d : float
        All that loads the drain but the transistor, > 0, may be infinite. [Ω]
    r_s : float
        Unbypassed source resistance, >= 0. [Ω]

    Returns
    -------
    float
        Voltage gain, not above zero; infinite with ro and RD both infinite. [V/V]

    Raises
    ------
    FormulaInputError
        A value is NaN, infinite where it may not be, or of the wrong sign.

    Notes
    -----
    Exact for the linear model of the transistor. With r_s = 0 this is -gm·(ro ∥ RD).

    References
    ----------
    .. [1] P. R. Gray, P. J. Hurst, S. H. Lewis, R. G. Meyer, Analysis and Design of Analog Integrated
       Circuits, ch. 3 (chapter from memory).

    Examples
    --------
    >>> round(common_source_gain(gm=1e-3, gmb=0.0, ro=150e3, r_d=7.5e3, r_s=0.0), 3)
    -7.143
    """
    if math.isinf(r_d):  # the current of an open drain can only flow back through ro
        return -gm * ro if gm > 0.0 else 0.0
    return -gm * r_d / (1.0 + (gm + gmb) * r_s + (r_d + r_s) / ro)


@accepts(gm=NOT_NEGATIVE, gmb=NOT_NEGATIVE, ro=POSITIVE_OR_INFINITE, r_s=NOT_NEGATIVE)
def effective_transconductance(*, gm: float, gmb: float, ro: float, r_s: float) -> float:
    r"""Current into a grounded drain over the gate voltage, with a resistance in the source.

    .. math:: G_m = \frac{g_m}{1 + (g_m + g_{mb} + 1/r_o) R_S}

    Parameters
    ----------
    gm, gmb : float
        Transconductance and bulk transconductance, >= 0. [S]
    ro : float
        Output resistance, > 0, may be infinite. [Ω]
    r_s : float
        Unbypassed source resistance, >= 0. [Ω]

    Returns
    -------
    float
        Transconductance of the whole; its product with all that loads the drain is the gain. [S]

    Raises
    ------
    FormulaInputError
        A value is NaN, infinite where it may not be, or of the wrong sign.

    Notes
    -----
    Exact for the linear model of the transistor.

    References
    ----------
    .. [1] P. R. Gray, P. J. Hurst, S. H. Lewis, R. G. Meyer, Analysis and Design of Analog Integrated
       Circuits, ch. 3 (chapter from memory).

    Examples
    --------
    >>> round(effective_transconductance(gm=1e-3, gmb=0.0, ro=math.inf, r_s=1e3), 6)
    0.0005
    """
    return gm / (1.0 + (gm + gmb + 1.0 / ro) * r_s)


@accepts(gm=NOT_NEGATIVE, gmb=NOT_NEGATIVE, ro=POSITIVE_OR_INFINITE, r_s=NOT_NEGATIVE)
def drain_resistance(*, gm: float, gmb: float, ro: float, r_s: float) -> float:
    r"""Resistance into the drain, gate at signal ground.

    .. math:: R = r_o + R_S + (g_m + g_{mb}) r_o R_S

    Parameters
    ----------
    gm, gmb : float
        Transconductance and bulk transconductance, >= 0. [S]
    ro : float
        Output resistance, > 0, may be infinite. [Ω]
    r_s : float
        Unbypassed source resistance, >= 0. [Ω]

    Returns
    -------
    float
        Resistance into the drain; infinite with ro. [Ω]

    Raises
    ------
    FormulaInputError
        A value is NaN, infinite where it may not be, or of the wrong sign.

    Notes
    -----
    Exact for the linear model of the transistor.

    References
    ----------
    .. [1] P. R. Gray, P. J. Hurst, S. H. Lewis, R. G. Meyer, Analysis and Design of Analog Integrated
       Circuits, ch. 3 (chapter from memory).

    Examples
    --------
    >>> drain_resistance(gm=1e-3, gmb=0.0, ro=100e3, r_s=1e3)
    201000.0
    """
    return ro if math.isinf(ro) else ro + r_s + (gm + gmb) * ro * r_s


@accepts(gm=NOT_NEGATIVE, gmb=NOT_NEGATIVE, ro=POSITIVE_OR_INFINITE, r_d=NOT_NEGATIVE_OR_INFINITE)
def source_resistance(*, gm: float, gmb: float, ro: float, r_d: float) -> float:
    r"""Resistance into the source, gate at signal ground.

    .. math:: R = \frac{1 + R_D/r_o}{g_m + g_{mb} + 1/r_o}

    Parameters
    ----------
    gm, gmb : float
        Transconductance and bulk transconductance, >= 0. [S]
    ro : float
        Output resistance, > 0, may be infinite. [Ω]
    r_d : float
        Resistance from the drain to signal ground, >= 0, may be infinite. [Ω]

    Returns
    -------
    float
        Resistance into the source; infinite for a device that is off. [Ω]

    Raises
    ------
    FormulaInputError
        A value is NaN, infinite where it may not be, or of the wrong sign.

    Notes
    -----
    Exact for the linear model of the transistor.
    The same as (ro + RD)/(1 + (gm + gmb)·ro), the input resistance of a common gate.

    References
    ----------
    .. [1] P. R. Gray, P. J. Hurst, S. H. Lewis, R. G. Meyer, Analysis and Design of Analog Integrated
       Circuits, ch. 3 (chapter from memory).

    Examples
    --------
    >>> round(source_resistance(gm=1e-3, gmb=0.0, ro=100e3, r_d=0.0), 2)
    990.1
    """
    conductance = gm + gmb + 1.0 / ro
    if math.isinf(r_d) or not conductance > 0.0:
        return math.inf
    return (1.0 + r_d / ro) / conductance


@accepts(
    gm=NOT_NEGATIVE, gmb=NOT_NEGATIVE, ro=POSITIVE_OR_INFINITE, r_s=POSITIVE_OR_INFINITE, r_d=NOT_NEGATIVE
)
def follower_gain(*, gm: float, gmb: float, ro: float, r_s: float, r_d: float) -> float:
    r"""Gain from gate to source.

    .. math:: A = \frac{g_m R_S}{1 + (g_m + g_{mb}) R_S + (R_S + R_D)/r_o}

    Parameters
    ----------
    gm, gmb : float
        Transconductance and bulk transconductance, >= 0; gmb = 0 with the bulk at the source. [S]
    ro : float
        Output resistance, > 0, may be infinite. [Ω]
    r_s : float
        All that loads the source but the transistor, > 0, may be infinite. [Ω]
    r_d : float
        Resistance from the drain to signal ground, 0 of a follower proper, >= 0. [Ω]

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
    Exact at small signal, in any region.

    References
    ----------
    .. [1] P. R. Gray, P. J. Hurst, S. H. Lewis, R. G. Meyer, Analysis and Design of Analog Integrated
       Circuits, ch. 3 (chapter from memory).

    Examples
    --------
    >>> round(follower_gain(gm=2e-3, gmb=0.0, ro=75e3, r_s=4.87e3, r_d=0.0), 3)
    0.901
    """
    return gm / ((1.0 + r_d / ro) / r_s + gm + gmb + 1.0 / ro) if gm > 0.0 else 0.0
