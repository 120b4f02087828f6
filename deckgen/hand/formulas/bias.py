"""Closed forms of the bias: dividers, resistors and currents in source and drain, the triode case."""

from __future__ import annotations

import math

from deckgen.errors import FormulaInputError
from deckgen.hand.formulas.device import STRONG_INVERSION
from deckgen.hand.formulas.ranges import ANY, NOT_NEGATIVE, NOT_POSITIVE, POSITIVE, accepts, holds


@accepts(voltages=ANY, resistances=POSITIVE)
def meeting_voltage(*, voltages: tuple[float, ...], resistances: tuple[float, ...]) -> float:
    r"""Voltage of a node that resistors pull towards known voltages (Millman's theorem).

    .. math:: V = \sum_i (V_i/R_i) \Big/ \sum_i (1/R_i)

    Parameters
    ----------
    voltages : tuple of float
        Far ends of the resistors. [V]
    resistances : tuple of float
        Their resistances, > 0, as many as voltages, and at least one. [Ω]

    Returns
    -------
    float
        Voltage of the node; with two resistors, one of them to ground, the plain divider. [V]

    Raises
    ------
    FormulaInputError
        A value is not finite, a resistance is not above zero, or the numbers of the two differ or are 0.

    Notes
    -----
    Exact for linear resistors.

    References
    ----------
    .. [1] J. Millman, A useful network theorem, Proc. IRE 28(9), 1940, 413-417 (from memory).

    Examples
    --------
    >>> round(meeting_voltage(voltages=(10.0, 0.0), resistances=(70.9e3, 29.1e3)), 2)
    2.91
    """
    if len(voltages) != len(resistances) or not voltages:
        found = f"{len(voltages)} voltages and {len(resistances)} resistances"
        raise FormulaInputError("meeting_voltage", found, "as many of each, at least one")
    total = sum(1.0 / resistance for resistance in resistances)
    return sum(v / r for v, r in zip(voltages, resistances, strict=True)) / total


@holds(STRONG_INVERSION)
@accepts(v_drive=ANY, k=POSITIVE, r_s=NOT_NEGATIVE)
def overdrive_with_source_resistor(*, v_drive: float, k: float, r_s: float) -> float:
    r"""Overdrive in saturation with a resistor in the source.

    .. math:: \tfrac12 k R_S V_{OV}^2 + V_{OV} = V_{drive}

    Parameters
    ----------
    v_drive : float
        Gate voltage over the far end of the source resistor, less the threshold. [V]
    k : float
        KP·W/(L-2LD), > 0. [A/V^2]
    r_s : float
        Source resistance, >= 0. [Ω]

    Returns
    -------
    float
        Overdrive; ``v_drive`` itself where it is not above zero (cut-off) or ``r_s`` is 0. [V]

    Raises
    ------
    FormulaInputError
        A value is not finite, ``k <= 0`` or ``r_s < 0``.

    Notes
    -----
    Holds for VOV from 0.15 V, with channel-length modulation left out.

    References
    ----------
    .. [1] A. S. Sedra, K. C. Smith, Microelectronic Circuits, section on biasing in MOS amplifiers.

    Examples
    --------
    >>> round(overdrive_with_source_resistor(v_drive=4.0, k=1e-3, r_s=6e3), 6)
    1.0
    """
    if v_drive <= 0.0:
        return v_drive
    # This form of the root does not cancel when k·RS is small.
    return 2.0 * v_drive / (1.0 + math.sqrt(1.0 + 2.0 * k * r_s * v_drive))


@holds(STRONG_INVERSION)
@accepts(v_drive=POSITIVE, v_supply=NOT_NEGATIVE, k=POSITIVE, r_s=NOT_NEGATIVE, r_d=NOT_NEGATIVE)
def triode_current_with_resistors(
    *, v_drive: float, v_supply: float, k: float, r_s: float, r_d: float
) -> float:
    r"""Drain current in triode with resistors in source and drain.

    .. math:: I = k\,[(V_{drive} - I R_S) V_{DS} - \tfrac12 V_{DS}^2], \quad
              V_{DS} = V_{supply} - I (R_S + R_D)

    Parameters
    ----------
    v_drive : float
        Gate voltage over the far end of the source resistor, less the threshold, > 0. [V]
    v_supply : float
        Voltage between the far ends of the drain and source resistors, >= 0. [V]
    k : float
        KP·W/(L-2LD), > 0. [A/V^2]
    r_s, r_d : float
        Source and drain resistance, >= 0. [Ω]

    Returns
    -------
    float
        The root of the quadratic with VDS from 0 to VOV. [A]

    Raises
    ------
    FormulaInputError
        A value is not finite or has the wrong sign, or no root lies in triode.

    Notes
    -----
    Holds for VOV from 0.15 V, with channel-length modulation left out.

    References
    ----------
    .. [1] H. Shichman, D. A. Hodges, IEEE J. Solid-State Circuits SC-3(3), 1968, 285-289 (with load line).

    Examples
    --------
    >>> round(triode_current_with_resistors(v_drive=1.7, v_supply=5.0, k=4e-4, r_s=0.0, r_d=7.5e3), 9)
    0.000514895
    """
    name = "triode_current_with_resistors"
    total = r_s + r_d
    a = k * total * (r_s - 0.5 * total)
    b = -k * (v_drive * total + v_supply * r_s - v_supply * total) - 1.0
    c = k * v_supply * (v_drive - 0.5 * v_supply)
    for root in _quadratic_roots(a, b, c):
        v_ds, v_ov = v_supply - root * total, v_drive - root * r_s
        if root >= 0.0 and -1e-9 <= v_ds <= v_ov + 1e-9:
            return root
    raise FormulaInputError(name, f"v_drive = {v_drive}, v_supply = {v_supply}", "a root in triode")


@accepts(k=POSITIVE, i_d=NOT_NEGATIVE)
def overdrive_of_current(*, k: float, i_d: float) -> float:
    r"""Overdrive that carries a given drain current in saturation.

    .. math:: V_{OV} = \sqrt{2 I_D / k}

    Parameters
    ----------
    k : float
        KP·W/(L-2LD), > 0. [A/V^2]
    i_d : float
        Drain current, >= 0. [A]

    Returns
    -------
    float
        Overdrive. [V]

    Raises
    ------
    FormulaInputError
        A value is not finite, ``k <= 0`` or ``i_d < 0``.

    Notes
    -----
    Exact for the square law without channel-length modulation.

    References
    ----------
    .. [1] H. Shichman, D. A. Hodges, IEEE J. Solid-State Circuits SC-3(3), 1968, 285-289.

    Examples
    --------
    >>> overdrive_of_current(k=2e-3, i_d=0.25e-3)
    0.5
    """
    return math.sqrt(2.0 * i_d / k)


@accepts(k=POSITIVE, i_d=NOT_NEGATIVE, v_dg=NOT_POSITIVE)
def triode_overdrive_of_current(*, k: float, i_d: float, v_dg: float) -> float:
    r"""Overdrive that carries a given drain current in triode, drain and gate voltages given.

    .. math:: I_D = k\,(V_{OV} V_{DS} - \tfrac12 V_{DS}^2), \; V_{DS} = V_{OV} + V_{DG}
              \;\Rightarrow\; V_{OV} = \sqrt{2 I_D/k + V_{DG}^2}

    Parameters
    ----------
    k : float
        KP·W/(L-2LD), > 0. [A/V^2]
    i_d : float
        Drain current, >= 0. [A]
    v_dg : float
        VDS - VOV, that is the drain over the gate plus the threshold, <= 0 in triode. [V]

    Returns
    -------
    float
        Overdrive. [V]

    Raises
    ------
    FormulaInputError
        A value is not finite, ``k <= 0``, ``i_d < 0`` or ``v_dg > 0``.

    Notes
    -----
    Exact for the square law without channel-length modulation.

    References
    ----------
    .. [1] H. Shichman, D. A. Hodges, IEEE J. Solid-State Circuits SC-3(3), 1968, 285-289.

    Examples
    --------
    >>> round(triode_overdrive_of_current(k=1e-3, i_d=0.375e-3, v_dg=-0.5), 6)
    1.0
    """
    return math.sqrt(2.0 * i_d / k + v_dg * v_dg)


def _quadratic_roots(a: float, b: float, c: float) -> tuple[float, ...]:
    """Real roots of a·x² + b·x + c, without cancellation; smallest magnitude first."""
    discriminant = b * b - 4.0 * a * c
    if discriminant < 0.0:
        return ()
    q = -0.5 * (b + math.copysign(math.sqrt(discriminant), b))
    roots = [c / q] if abs(q) > 0.0 else []
    if abs(a) > 0.0 and math.isfinite(q / a):
        roots.append(q / a)
    return tuple(sorted(roots, key=abs))
