r"""The square law of H. Shichman and D. A. Hodges (1968), as SPICE's level 1 has it.

.. math::
    I_D = \tfrac12 k V_{OV}^2 (1+\lambda V_{DS}), \quad
    I_D = k (V_{OV} V_{DS} - \tfrac12 V_{DS}^2)(1+\lambda V_{DS}) \text{ in triode}

with k = KP·W/(L - 2LD), VOV = VGS - VTH, VTH = VTO + γ(√(φ+VSB) - √φ). Reference: IEEE Journal of
Solid-State Circuits SC-3(3), 285-289, doi 10.1109/JSSC.1968.1049902; capacitances after J. E. Meyer,
RCA Review 32 (1971), 42-63 (from memory). The factor (1+λVDS) in triode is SPICE's choice.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from deckgen.constants import OXIDE_PERMITTIVITY
from deckgen.hand.effects import Effect
from deckgen.hand.laws import temperature as thermal
from deckgen.hand.laws.base import Array, Evaluation, Mask

DEFAULTS: dict[str, float] = {
    "vto": 0.0, "kp": 2e-5, "gamma": 0.0, "phi": 0.6, "lambda": 0.0, "ld": 0.0,
    "uo": 600.0, "tox": 0.0, "cgso": 0.0, "cgdo": 0.0, "cgbo": 0.0,
}  # fmt: skip
"""Level-1 defaults as ngspice 39 takes them; TOX of 0 is "not given": no gate capacitance."""

CAPACITORS = (("cgs", 1, 2), ("cgd", 1, 0), ("cgb", 1, 3))
"""Name and terminal numbers (drain 0, gate 1, source 2, bulk 3) of each capacitance."""

_SQUARE_CENTIMETRE = 1e-4
_LEAST_SATURATION_VOLTAGE = 0.025  # V: ngspice 39 shares Cgs and Cgd out by VDS against at least this


@dataclass(frozen=True, slots=True)
class SquareParameters:
    """Prepared parameters, arrays that broadcast against the batch. SI; thresholds signed for n-channel.

    ``lambda_bias`` acts in the current and gm, ``lambda_ro`` in the small-signal output conductance.
    """

    sign: Array
    k: Array
    ld: Array
    vto: Array
    gamma: Array
    phi: Array
    lambda_bias: Array
    lambda_ro: Array
    oxide: Array
    cgs_overlap: Array
    cgd_overlap: Array
    cgb_overlap: Array


@dataclass(frozen=True, slots=True)
class _Channel:
    """Channel quantities with drain and source exchanged where VDS < 0; all in n-channel signs."""

    swapped: Mask
    v_ds: Array
    v_ov: Array
    vth: Array
    current: Array
    core: Array
    gm: Array
    gds: Array
    gmb: Array


class SquareLaw:
    """Square law behind the interface of ``DeviceLaw``."""

    name = "square"
    terminals = ("d", "g", "s", "b")
    effects = frozenset({Effect.CHANNEL_LENGTH_MODULATION, Effect.OUTPUT_RESISTANCE, Effect.BODY_EFFECT})

    def prepare(
        self,
        card: Mapping[str, Array | float],
        *,
        sign: Array | float,
        w: Array | float,
        l: Array | float,
        m: Array | float,
        temperature: Array | float,
        tnom: Array | float,
        on: Mapping[Effect, Array | bool],
    ) -> SquareParameters:
        """Parameters at a temperature [K] for a geometry [m]; ``on`` says per row which effects act."""
        value = {name: np.asarray(card.get(name, default), float) for name, default in DEFAULTS.items()}
        s, t, t0 = np.asarray(sign, float), np.asarray(temperature, float), np.asarray(tnom, float)
        width, length = np.asarray(w, float), np.asarray(l, float) - 2.0 * value["ld"]
        thin = value["tox"] > 0.0
        c_ox = np.where(thin, OXIDE_PERMITTIVITY / np.where(thin, value["tox"], 1.0), 0.0)
        kp = value["kp"] if "kp" in card else self.transconductance(card)
        gamma = np.where(on[Effect.BODY_EFFECT], value["gamma"], 0.0)
        vto = thermal.vto_at(
            value["vto"], phi=value["phi"], gamma=value["gamma"], sign=s, temperature=t, tnom=t0
        )
        with_clm = np.asarray(on[Effect.CHANNEL_LENGTH_MODULATION], bool)
        with_ro = with_clm | np.asarray(on[Effect.OUTPUT_RESISTANCE], bool)
        return SquareParameters(
            sign=s,
            ld=value["ld"],
            k=kp * thermal.mobility_factor(temperature=t, tnom=t0) * width / length * m,
            vto=s * vto,
            gamma=gamma,
            phi=thermal.phi_at(value["phi"], temperature=t, tnom=t0),
            lambda_bias=np.where(with_clm, value["lambda"], 0.0),
            lambda_ro=np.where(with_ro, value["lambda"], 0.0),
            oxide=c_ox * width * length * m,
            cgs_overlap=value["cgso"] * width * m,
            cgd_overlap=value["cgdo"] * width * m,
            cgb_overlap=value["cgbo"] * length * m,
        )

    def transconductance(self, card: Mapping[str, Array | float]) -> Array:
        """KP [A/V²] of a card that does not state it: UO·Cox where TOX is given, else the default."""
        tox = np.asarray(card.get("tox", DEFAULTS["tox"]), float)
        mobility = np.asarray(card.get("uo", DEFAULTS["uo"]), float) * _SQUARE_CENTIMETRE
        thin = tox > 0.0
        return np.where(thin, mobility * OXIDE_PERMITTIVITY / np.where(thin, tox, 1.0), DEFAULTS["kp"])

    def evaluate(self, parameters: SquareParameters, voltages: Array) -> Evaluation:
        """Currents into drain, gate, source, bulk and their derivatives, in any region."""
        channel = _channel(parameters, voltages, parameters.lambda_bias)
        current = parameters.sign * np.where(channel.swapped, -channel.current, channel.current)
        zero = np.zeros_like(current)
        currents = np.stack([current, zero, -current, zero], axis=-1)
        return Evaluation(currents, _jacobian(channel))

    def linearize(self, parameters: SquareParameters, voltages: Array) -> Array:
        """Conductances at the Q-point; ro = 1/(λ·ID at λ = 0) is kept where only the bias drops λ."""
        channel = _channel(parameters, voltages, parameters.lambda_bias)
        extra = (parameters.lambda_ro - parameters.lambda_bias) * channel.core
        return _jacobian(channel, extra_gds=extra)

    def capacitances(self, parameters: SquareParameters, voltages: Array) -> Array:
        """Cgs, Cgd, Cgb [F], shape (…, 3): Meyer's intrinsic parts plus overlaps."""
        channel = _channel(parameters, voltages, parameters.lambda_bias)
        near, far, bulk = _meyer(channel.v_ov, channel.v_ds, parameters.phi)
        source = np.where(channel.swapped, far, near)
        drain = np.where(channel.swapped, near, far)
        return np.stack(
            [
                parameters.oxide * source + parameters.cgs_overlap,
                parameters.oxide * drain + parameters.cgd_overlap,
                parameters.oxide * bulk + parameters.cgb_overlap,
            ],
            axis=-1,
        )

    def limit(self, parameters: SquareParameters, old: Array, new: Array) -> Array:
        """Pull VGS and VDS back so that one Newton step neither overshoots nor reverses the device.

        A square law is followed well from above; what must be stopped is a step from cut-off deep
        into conduction, and a drain that jumps below the source.
        """
        v_gs, v_ds = new[..., 1] - new[..., 2], new[..., 0] - new[..., 2]
        old_gs, old_ds = old[..., 1] - old[..., 2], old[..., 0] - old[..., 2]
        s = parameters.sign
        reach = np.maximum(1.0, 2.0 * np.abs(s * old_gs - parameters.vto))
        gs = old_gs + np.clip(v_gs - old_gs, -reach, reach)
        span = np.maximum(1.0, 2.0 * np.abs(old_ds))
        ds = old_ds + np.clip(v_ds - old_ds, -span, span)
        ds = np.where((s * old_ds > 0.0) & (s * ds < -0.5), -0.5 * s, ds)
        limited = np.array(new)
        # Only where a limit acted: elsewhere the addition would leave rounding errors behind.
        limited[..., 1] = np.where(np.abs(v_gs - old_gs) > reach, new[..., 2] + gs, new[..., 1])
        held = (np.abs(v_ds - old_ds) > span) | ((s * old_ds > 0.0) & (s * v_ds < -0.5))
        limited[..., 0] = np.where(held, new[..., 2] + ds, new[..., 0])
        return limited

    def report(self, parameters: SquareParameters, voltages: Array) -> dict[str, Array]:
        """ID, VGS, VDS, VTH, VOV, gm, gds, gmb at terminal voltages, with the trade's signs."""
        channel = _channel(parameters, voltages, parameters.lambda_bias)
        conductances = self.linearize(parameters, voltages)
        d, g, s = voltages[..., 0], voltages[..., 1], voltages[..., 2]
        forward = np.where(channel.swapped, -channel.current, channel.current)
        vth = _threshold(parameters, parameters.sign * (s - voltages[..., 3]))
        return {
            "ID": forward,
            "VGS": g - s,
            "VDS": d - s,
            "VTH": parameters.sign * vth,
            "VOV": parameters.sign * (g - s) - vth,
            "gm": conductances[..., 0, 1],
            "gds": conductances[..., 0, 0],
            "gmb": conductances[..., 0, 3],
        }


def _threshold(parameters: SquareParameters, v_sb: Array) -> Array:
    """VTH [V], n-channel signs, at VSB [V]; below VSB = 0 the root is continued as ngspice does it."""
    root_phi = np.sqrt(parameters.phi)
    return parameters.vto + parameters.gamma * (_body_root(parameters.phi, v_sb) - root_phi)


def _body_root(phi: Array, v_sb: Array) -> Array:
    """√(φ+VSB); for VSB < 0 its tangent at 0, not below 0 (ngspice 39, level 1)."""
    tangent = np.maximum(np.sqrt(phi) + v_sb / (2.0 * np.sqrt(phi)), 0.0)
    return np.where(v_sb >= 0.0, np.sqrt(np.maximum(phi + v_sb, 0.0)), tangent)


def _body_slope(phi: Array, v_sb: Array) -> Array:
    """-dVTH/dVBS over γ: 1/(2√(φ+VSB)); 1/(2√φ) on the tangent, 0 where it has ended."""
    root = _body_root(phi, v_sb)
    rising = 0.5 / np.sqrt(np.maximum(phi + np.maximum(v_sb, 0.0), np.finfo(float).tiny))
    return np.where(root > 0.0, rising, 0.0)


def _channel(parameters: SquareParameters, voltages: Array, lam: Array) -> _Channel:
    """Channel current and its derivatives; drain and source exchanged where VDS < 0."""
    normal = parameters.sign[..., None] * voltages
    d, g, s, b = normal[..., 0], normal[..., 1], normal[..., 2], normal[..., 3]
    swapped = d < s
    low = np.where(swapped, d, s)
    v_ds, v_sb = np.abs(d - s), low - b
    vth = _threshold(parameters, v_sb)
    v_ov = g - low - vth
    on = np.maximum(v_ov, 0.0)
    saturated = v_ds >= on
    reach = np.where(saturated, on, v_ds)  # VDS as far as the channel feels it
    core = parameters.k * reach * (on - 0.5 * reach)
    factor = 1.0 + lam * v_ds
    gm = parameters.k * reach * factor
    gds = lam * core + np.where(saturated, 0.0, parameters.k * (on - v_ds) * factor)
    gmb = gm * parameters.gamma * _body_slope(parameters.phi, v_sb)
    return _Channel(swapped, v_ds, v_ov, vth, core * factor, core, gm, gds, gmb)


def _jacobian(channel: _Channel, extra_gds: Array | float = 0.0) -> Array:
    """D currents / d voltages (…, 4, 4). Signs of polarity cancel: d(s·I)/d(s·V)."""
    gm, gmb, gds = channel.gm, channel.gmb, channel.gds + extra_gds
    total = gm + gmb + gds
    # Row of the drain current; where exchanged, the source plays the drain and the sign turns.
    drain = np.where(channel.swapped, total, gds)
    gate = np.where(channel.swapped, -gm, gm)
    source = np.where(channel.swapped, -gds, -total)
    bulk = np.where(channel.swapped, -gmb, gmb)
    row = np.stack([drain, gate, source, bulk], axis=-1)
    zero = np.zeros_like(row)
    return np.stack([row, zero, -row, zero], axis=-2)


def _meyer(v_ov: Array, v_ds: Array, phi: Array) -> tuple[Array, Array, Array]:
    """Meyer's gate capacitances to source, drain and bulk, as fractions of Cox·W·L.

    Saturation ⅔, 0, 0; triode by VDSsat and VDS; below threshold the gate sees the bulk, with the
    linear hand-over between VOV = -φ and 0 that SPICE takes.
    """
    channel = (2.0 / 3.0) * np.clip(1.0 + 2.0 * v_ov / phi, 0.0, 1.0)
    sat = np.maximum(v_ov, _LEAST_SATURATION_VOLTAGE)
    ds = np.minimum(v_ds, sat)
    to_source = channel * (1.0 - ((sat - ds) / (2.0 * sat - ds)) ** 2)
    to_drain = channel * (1.0 - (sat / (2.0 * sat - ds)) ** 2)
    return to_source, to_drain, np.clip(-v_ov / phi, 0.0, 1.0)
