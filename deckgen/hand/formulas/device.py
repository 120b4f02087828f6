"""Formulas of the square-law transistor: threshold, current, conductances."""

from __future__ import annotations

import math

from deckgen.hand.formulas.ranges import ANY, NOT_NEGATIVE, POSITIVE, Range, accepts, holds

SHICHMAN_HODGES = "Shichman & Hodges 1968"

STRONG_INVERSION = Range(
    "VOV [V]", 0.15, math.inf, "the square law needs strong inversion (VOV above about 0.15 V)"
)
"""B. Murmann, *Analysis and Design of Elementary MOS Amplifier Stages*, ch. 2, gives 150 mV."""

TRIODE = Range("VDS/VOV", 0.0, 1.0, "the law of the triode region ends where VDS reaches VOV")
"""Shichman & Hodges 1968: triode for VDS from 0 to VOV."""

SOURCE_ABOVE_BULK = Range(
    "VSB [V]", 0.0, math.inf, "the law of the body effect needs a source at or above the bulk"
)
"""Below, the source-bulk junction is forward biased; range from memory."""


@holds(SOURCE_ABOVE_BULK)
@accepts(vto=ANY, gamma=NOT_NEGATIVE, phi=POSITIVE, v_sb=ANY)
def threshold_voltage(*, vto: float, gamma: float, phi: float, v_sb: float) -> float:
    r"""Threshold voltage with body effect, n-channel signs.

    .. math:: V_{TH} = V_{TO} + \gamma(\sqrt{\phi + V_{SB}} - \sqrt{\phi})

    Parameters
    ----------
    vto : float
        Threshold at VSB = 0. [V]
    gamma : float
        Body-effect coefficient, >= 0. [V^0.5]
    phi : float
        Surface potential in strong inversion, > 0. [V]
    v_sb : float
        Source-bulk voltage; below 0 the root is continued by its tangent, as SPICE does. [V]

    Returns
    -------
    float
        Threshold voltage. [V]

    Raises
    ------
    FormulaInputError
        A value is not finite, ``gamma < 0`` or ``phi <= 0``.

    Notes
    -----
    Holds for VSB from 0 V; the tangent below is what SPICE computes, not the law.

    References
    ----------
    .. [1] H. Shichman, D. A. Hodges, IEEE J. Solid-State Circuits SC-3(3), 1968, 285-289.

    Examples
    --------
    >>> round(threshold_voltage(vto=0.75, gamma=0.54, phi=0.6, v_sb=5.0), 4)
    1.6096
    """
    tangent = max(math.sqrt(phi) + v_sb / (2.0 * math.sqrt(phi)), 0.0)
    root = math.sqrt(phi + v_sb) if v_sb >= 0.0 else tangent
    return vto + gamma * (root - math.sqrt(phi))


@holds(STRONG_INVERSION)
@accepts(k=POSITIVE, v_ov=ANY)
def saturation_current(*, k: float, v_ov: float) -> float:
    r"""Drain current in saturation, channel-length modulation left out.

    .. math:: I_D = \tfrac12 k V_{OV}^2

    Parameters
    ----------
    k : float
        KP·W/(L-2LD), > 0. [A/V^2]
    v_ov : float
        Overdrive VGS - VTH; at or below 0 the device is cut off. [V]

    Returns
    -------
    float
        Drain current. [A]

    Raises
    ------
    FormulaInputError
        A value is not finite or ``k <= 0``.

    Notes
    -----
    Holds for VOV from 0.15 V, with channel-length modulation left out.

    References
    ----------
    .. [1] H. Shichman, D. A. Hodges, IEEE J. Solid-State Circuits SC-3(3), 1968, 285-289.

    Examples
    --------
    >>> round(saturation_current(k=1e-3, v_ov=1.0), 6)
    0.0005
    """
    return 0.5 * k * v_ov**2 if v_ov > 0.0 else 0.0


@holds(STRONG_INVERSION, TRIODE)
@accepts(k=POSITIVE, v_ov=ANY, v_ds=NOT_NEGATIVE)
def triode_current(*, k: float, v_ov: float, v_ds: float) -> float:
    r"""Drain current in triode, channel-length modulation left out.

    .. math:: I_D = k (V_{OV} V_{DS} - \tfrac12 V_{DS}^2)

    Parameters
    ----------
    k : float
        KP·W/(L-2LD), > 0. [A/V^2]
    v_ov : float
        Overdrive VGS - VTH. [V]
    v_ds : float
        Drain-source voltage, >= 0; the law holds up to ``v_ov``. [V]

    Returns
    -------
    float
        Drain current. [A]

    Raises
    ------
    FormulaInputError
        A value is not finite, ``k <= 0`` or ``v_ds < 0``.

    Notes
    -----
    Holds for VOV from 0.15 V and VDS/VOV from 0 to 1, with channel-length modulation left out.

    References
    ----------
    .. [1] H. Shichman, D. A. Hodges, IEEE J. Solid-State Circuits SC-3(3), 1968, 285-289.

    Examples
    --------
    >>> round(triode_current(k=1e-3, v_ov=4.0, v_ds=0.1), 7)
    0.000395
    """
    return k * (v_ov * v_ds - 0.5 * v_ds**2) if v_ov > 0.0 else 0.0


@holds(STRONG_INVERSION)
@accepts(k=POSITIVE, v_ov=ANY, v_ds=NOT_NEGATIVE)
def transconductance(*, k: float, v_ov: float, v_ds: float) -> float:
    r"""Transconductance, channel-length modulation left out.

    .. math:: g_m = k \min(V_{OV}, V_{DS})

    Parameters
    ----------
    k : float
        KP·W/(L-2LD), > 0. [A/V^2]
    v_ov : float
        Overdrive VGS - VTH. [V]
    v_ds : float
        Drain-source voltage, >= 0. [V]

    Returns
    -------
    float
        Transconductance: k·VOV in saturation, k·VDS in triode, 0 in cut-off. [S]

    Raises
    ------
    FormulaInputError
        A value is not finite, ``k <= 0`` or ``v_ds < 0``.

    Notes
    -----
    In saturation gm = k·VOV = 2·ID/VOV = √(2·k·ID): common practice.
    Holds for VOV from 0.15 V, with channel-length modulation left out.

    References
    ----------
    .. [1] H. Shichman, D. A. Hodges, IEEE J. Solid-State Circuits SC-3(3), 1968, 285-289 (derivative).

    Examples
    --------
    >>> round(transconductance(k=1e-3, v_ov=1.41, v_ds=5.0), 6)
    0.00141
    """
    return k * min(max(v_ov, 0.0), v_ds)


@holds(STRONG_INVERSION)
@accepts(k=POSITIVE, lam=NOT_NEGATIVE, v_ov=ANY, v_ds=NOT_NEGATIVE)
def output_conductance(*, k: float, lam: float, v_ov: float, v_ds: float) -> float:
    r"""Output conductance gds = 1/ro, with the current taken at λ = 0.

    .. math:: g_{ds} = \lambda\,\tfrac12 k V_{OV}^2 \text{ in saturation}

    Parameters
    ----------
    k : float
        KP·W/(L-2LD), > 0. [A/V^2]
    lam : float
        Channel-length modulation λ, >= 0. [1/V]
    v_ov : float
        Overdrive VGS - VTH. [V]
    v_ds : float
        Drain-source voltage, >= 0. [V]

    Returns
    -------
    float
        λ·ID, and in triode k·(VOV - VDS) besides. [S]

    Raises
    ------
    FormulaInputError
        A value is not finite, ``k <= 0``, ``lam < 0`` or ``v_ds < 0``.

    Notes
    -----
    Holds for VOV from 0.15 V.

    References
    ----------
    .. [1] H. Shichman, D. A. Hodges, IEEE J. Solid-State Circuits SC-3(3), 1968, 285-289 (derivative).

    Examples
    --------
    >>> round(1.0 / output_conductance(k=1e-3, lam=0.01, v_ov=1.41, v_ds=5.0))
    100599
    """
    if v_ov <= 0.0:
        return 0.0
    if v_ds >= v_ov:
        return lam * saturation_current(k=k, v_ov=v_ov)
    return lam * triode_current(k=k, v_ov=v_ov, v_ds=v_ds) + k * (v_ov - v_ds)


@holds(SOURCE_ABOVE_BULK)
@accepts(gm=NOT_NEGATIVE, gamma=NOT_NEGATIVE, phi=POSITIVE, v_sb=ANY)
def bulk_transconductance(*, gm: float, gamma: float, phi: float, v_sb: float) -> float:
    r"""Bulk transconductance.

    .. math:: g_{mb} = g_m \gamma / (2\sqrt{\phi + V_{SB}})

    Parameters
    ----------
    gm : float
        Transconductance, >= 0. [S]
    gamma : float
        Body-effect coefficient, >= 0. [V^0.5]
    phi : float
        Surface potential, > 0. [V]
    v_sb : float
        Source-bulk voltage; below 0 the slope at 0 is taken, down to -2φ, where SPICE's tangent ends. [V]

    Returns
    -------
    float
        Bulk transconductance. [S]

    Raises
    ------
    FormulaInputError
        A value is not finite, ``gm < 0``, ``gamma < 0`` or ``phi <= 0``.

    Notes
    -----
    Holds for VSB from 0 V; the slope below is that of SPICE's tangent.

    References
    ----------
    .. [1] H. Shichman, D. A. Hodges, IEEE J. Solid-State Circuits SC-3(3), 1968, 285-289 (derivative).

    Examples
    --------
    >>> round(bulk_transconductance(gm=1e-3, gamma=0.4, phi=0.64, v_sb=0.0), 6)
    0.00025
    """
    return gm * gamma / (2.0 * math.sqrt(phi + max(v_sb, 0.0))) if v_sb > -2.0 * phi else 0.0
