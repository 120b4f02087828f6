r"""The channel of H. Shichman and D. A. Hodges (1968), in any region.

.. math::
    I_D = \tfrac12 k V_{OV}^2 (1+\lambda V_{DS}), \quad
    I_D = k (V_{OV} V_{DS} - \tfrac12 V_{DS}^2)(1+\lambda V_{DS}) \text{ in triode}

with k = KP·W/(L - 2LD), VOV = VGS - VTH, VTH = VTO + γ(√(φ+VSB) - √φ). Reference: IEEE Journal of
Solid-State Circuits SC-3(3), 285-289, doi 10.1109/JSSC.1968.1049902. The factor (1+λVDS) in triode is
SPICE's choice.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from deckgen.hand.laws.base import Array, Mask
from deckgen.hand.laws.parameters import SquareParameters


@dataclass(frozen=True, slots=True)
class Channel:
    """Channel quantities with drain and source exchanged where VDS < 0; all in n-channel signs.

    ``core`` is the current without its factor 1 + λVDS, ``root`` is √(φ+VSB) as it is continued.
    """

    swapped: Mask
    v_ds: Array
    v_ov: Array
    current: Array
    core: Array
    gm: Array
    gds: Array
    gmb: Array
    root: Array


def channel(parameters: SquareParameters, voltages: Array) -> Channel:
    """Channel current and its derivatives at the voltages of drain, gate, source, bulk next to it."""
    normal = parameters.sign[..., None] * voltages
    d, g, s, b = normal[..., 0], normal[..., 1], normal[..., 2], normal[..., 3]
    swapped = d < s
    low = np.where(swapped, d, s)
    v_ds, v_sb = np.abs(d - s), low - b
    root = _body_root(parameters.phi, v_sb)
    v_ov = g - low - _threshold(parameters, root)
    on = np.maximum(v_ov, 0.0)
    saturated = v_ds >= on
    reach = np.where(saturated, on, v_ds)  # VDS as far as the channel feels it
    slope = parameters.k * reach
    core = slope * (on - 0.5 * reach)
    factor = 1.0 + parameters.lambda_bias * v_ds
    gm = slope * factor
    gds = parameters.lambda_bias * core + np.where(saturated, 0.0, parameters.k * (on - v_ds) * factor)
    gmb = gm * parameters.gamma * _body_slope(parameters.phi, v_sb, root)
    return Channel(swapped, v_ds, v_ov, core * factor, core, gm, gds, gmb, root)


def threshold(parameters: SquareParameters, v_sb: Array) -> Array:
    """VTH [V], n-channel signs, at VSB [V]; below VSB = 0 the root is continued as ngspice does it."""
    return _threshold(parameters, _body_root(parameters.phi, v_sb))


def _threshold(parameters: SquareParameters, root: Array) -> Array:
    return parameters.vto + parameters.gamma * (root - np.sqrt(parameters.phi))


def _body_root(phi: Array, v_sb: Array) -> Array:
    """√(φ+VSB); for VSB < 0 its tangent at 0, not below 0 (ngspice 39, level 1)."""
    tangent = np.maximum(np.sqrt(phi) + v_sb / (2.0 * np.sqrt(phi)), 0.0)
    return np.where(v_sb >= 0.0, np.sqrt(np.maximum(phi + v_sb, 0.0)), tangent)


def _body_slope(phi: Array, v_sb: Array, root: Array) -> Array:
    """-dVTH/dVBS over γ: 1/(2√(φ+VSB)); 1/(2√φ) on the tangent, 0 where it has ended."""
    rising = 0.5 / np.sqrt(np.maximum(phi + np.maximum(v_sb, 0.0), np.finfo(float).tiny))
    return np.where(root > 0.0, rising, 0.0)


def slopes(found: Channel) -> Array:
    """Slopes of the current into the drain by the voltages of drain, gate, source, bulk, shape (…, 4).

    Signs of polarity cancel: d(s·I)/d(s·V).
    """
    return _row(found, found.gds, found.gmb)


def small_signal(parameters: SquareParameters, found: Channel) -> Array:
    """The slopes as SPICE takes them at small signal, shape (…, 4).

    ro = 1/(λ·ID at λ = 0) is kept where only the bias drops λ. With the bulk forward-biased gmb is that of
    the formula gm·γ/(2·root), and not the slope, which is smaller (ngspice 39: its read-out, and its AC
    analysis).
    """
    extra = (parameters.lambda_ro - parameters.lambda_bias) * found.core
    there = found.root > 0.0
    gmb = np.where(there, 0.5 * found.gm * parameters.gamma / np.where(there, found.root, 1.0), 0.0)
    return _row(found, found.gds + extra, gmb)


def _row(found: Channel, gds: Array, gmb: Array) -> Array:
    gm, total = found.gm, found.gm + gmb + gds
    turned = found.swapped  # there the source plays the drain and the sign turns
    row = np.empty((*total.shape, 4))
    row[..., 0] = np.where(turned, total, gds)
    row[..., 1] = np.where(turned, -gm, gm)
    row[..., 2] = np.where(turned, -gds, -total)
    row[..., 3] = np.where(turned, -gmb, gmb)
    return row
