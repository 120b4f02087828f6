"""A common source with a resistor from drain to gate."""

from __future__ import annotations

import math

from deckgen.hand.formulas.gain import parallel
from deckgen.hand.formulas.ranges import (
    NOT_NEGATIVE,
    NOT_NEGATIVE_OR_INFINITE,
    POSITIVE,
    POSITIVE_OR_INFINITE,
    Domain,
    accepts,
)

FEEDBACK_BOOK = "Sedra & Smith, feedback"
"""Short name of the book in a table of working; from memory."""


@accepts(gm=NOT_NEGATIVE, r_into=POSITIVE_OR_INFINITE, r_d=POSITIVE_OR_INFINITE, r_f=POSITIVE)
def drain_feedback_gain(*, gm: float, r_into: float, r_d: float, r_f: float) -> float:
    r"""Gain from gate to drain with a resistor between them.

    .. math:: A = -(g_m - 1/R_F)\,(R_d \parallel R_D \parallel R_F)

    Parameters
    ----------
    gm : float
        Transconductance, of a degenerated stage the effective one, >= 0. [S]
    r_into : float
        Resistance into the drain, ro of a grounded source, > 0, may be infinite. [Ω]
    r_d : float
        All else that loads the drain, > 0, may be infinite. [Ω]
    r_f : float
        Resistor from drain to gate, > 0. [Ω]

    Returns
    -------
    float
        Voltage gain; positive where 1/RF outweighs gm. [V/V]

    Raises
    ------
    FormulaInputError
        A value is NaN, infinite where it may not be, or of the wrong sign.

    Notes
    -----
    Exact at small signal. The gate draws current through RF: see ``miller_resistance``.

    References
    ----------
    .. [1] A. S. Sedra, K. C. Smith, Microelectronic Circuits, drain-to-gate feedback (from memory).

    Examples
    --------
    >>> round(drain_feedback_gain(gm=1e-3, r_into=math.inf, r_d=10e3, r_f=1e6), 3)
    -9.891
    """
    return -(gm - 1.0 / r_f) * parallel(r_into, r_d, r_f)


@accepts(r_f=POSITIVE, gain=Domain(high=1.0))
def miller_resistance(*, r_f: float, gain: float) -> float:
    r"""Resistance to ground that a resistor across a gain shows at the input of that gain.

    .. math:: R = R_F / (1 - A)

    Parameters
    ----------
    r_f : float
        Resistor from output to input, > 0. [Ω]
    gain : float
        Voltage gain from input to output, with the resistor in place, < 1. [V/V]

    Returns
    -------
    float
        Resistance. [Ω]

    Raises
    ------
    FormulaInputError
        A value is not finite, ``r_f <= 0`` or ``gain >= 1``.

    Notes
    -----
    Exact with the exact gain (Miller's theorem).

    References
    ----------
    .. [1] J. M. Miller, Scientific Papers of the Bureau of Standards 15 (351), 1920, 367-385 (from memory).

    Examples
    --------
    >>> miller_resistance(r_f=1.1e6, gain=-10.0)
    100000.0
    """
    return r_f / (1.0 - gain)


@accepts(gm=NOT_NEGATIVE, r_f=POSITIVE, r_g=NOT_NEGATIVE_OR_INFINITE)
def drain_feedback_resistance(*, gm: float, r_f: float, r_g: float) -> float:
    r"""Resistance that a drain-to-gate resistor and the gate it drives add at the drain.

    .. math:: R = \frac{R_F + R_G}{1 + g_m R_G}

    Parameters
    ----------
    gm : float
        Transconductance, of a degenerated stage the effective one, >= 0. [S]
    r_f : float
        Resistor from drain to gate, > 0. [Ω]
    r_g : float
        Resistance from gate to signal ground, input silent, >= 0, may be infinite. [Ω]

    Returns
    -------
    float
        Resistance, in parallel with all else at the drain; infinite where the gate floats and gm = 0. [Ω]

    Raises
    ------
    FormulaInputError
        A value is NaN, infinite where it may not be, or of the wrong sign.

    Notes
    -----
    Exact at small signal. With the gate open it is 1/gm.

    References
    ----------
    .. [1] A. S. Sedra, K. C. Smith, Microelectronic Circuits, drain-to-gate feedback (from memory).

    Examples
    --------
    >>> drain_feedback_resistance(gm=1e-3, r_f=1e6, r_g=0.0)
    1000000.0
    """
    if math.isinf(r_g):
        return 1.0 / gm if gm > 0.0 else math.inf
    return (r_f + r_g) / (1.0 + gm * r_g)
