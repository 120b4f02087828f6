r"""The level-1 model card: defaults, and parameters that others give where the card does not state them.

.. math::
    KP = \mu C_{ox}, \quad \phi = 2 U_T \ln(N/n_i), \quad \gamma = \sqrt{2 q \epsilon_{Si} N}/C_{ox}, \quad
    V_{TO} = \Phi_{MS} - q N_{SS}/C_{ox} \pm (\gamma\sqrt\phi + \phi)

with N from NSUB, Cox from TOX, μ from UO. G. Massobrio, P. Antognetti, *Semiconductor Device Modeling with
SPICE*, McGraw-Hill 1993, ch. 4 (from memory); ngspice 39 was measured to do the same, and to leave NSUB, NSS
and TPG without effect where there is no TOX.
"""

from __future__ import annotations

import math
from collections.abc import Mapping

import numpy as np

from deckgen.constants import ELEMENTARY_CHARGE, OXIDE_PERMITTIVITY, SILICON_PERMITTIVITY
from deckgen.hand.laws.base import Array
from deckgen.hand.laws.temperature import band_gap, thermal_voltage_of

Card = Mapping[str, Array | float]

NOT_GIVEN = math.nan
"""In the place of a parameter whose absence means another thing than any value of it."""

DEFAULTS: dict[str, float] = {
    "vto": 0.0, "kp": 2e-5, "gamma": 0.0, "phi": 0.6, "lambda": 0.0, "ld": 0.0,
    "uo": 600.0, "tox": 0.0, "nsub": NOT_GIVEN, "nss": 0.0, "tpg": 1.0,
    "cgso": 0.0, "cgdo": 0.0, "cgbo": 0.0,
    "rd": NOT_GIVEN, "rs": NOT_GIVEN, "rsh": 0.0,
    "is": 1e-14, "js": 0.0, "cbd": NOT_GIVEN, "cbs": NOT_GIVEN, "cj": 0.0, "cjsw": 0.0,
    "pb": 0.8, "mj": 0.5, "mjsw": 0.5, "fc": 0.5,
}  # fmt: skip
"""Level-1 defaults as ngspice 39 takes them; TOX of 0 is "not given": no gate capacitance."""

INTRINSIC_DENSITY = 1.45e10
"""Carriers per cm³ in intrinsic silicon at room temperature, as SPICE has it at any temperature."""

_SQUARE_CENTIMETRE = 1e-4
_PER_CUBIC_CENTIMETRE = 1e6
_PER_SQUARE_CENTIMETRE = 1e4
_LEAST_PHI = 0.1  # V
_AFFINITY = 3.25  # V, electron affinity of silicon as SPICE has it
_ALUMINIUM = 3.2  # V, work function of a metal gate, TPG = 0


def oxide_capacitance(tox: Array) -> Array:
    """Cox = ε/TOX [F/m²]; 0 without an oxide thickness."""
    thin = tox > 0.0
    return np.where(thin, OXIDE_PERMITTIVITY / np.where(thin, tox, 1.0), 0.0)


def transconductance(card: Card) -> Array:
    """KP [A/V²] of a card that does not state it: UO·Cox where TOX is given, else the default."""
    c_ox = oxide_capacitance(np.asarray(card.get("tox", DEFAULTS["tox"]), float))
    mobility = np.asarray(card.get("uo", DEFAULTS["uo"]), float) * _SQUARE_CENTIMETRE
    return np.where(c_ox > 0.0, mobility * c_ox, DEFAULTS["kp"])


def completed(card: Card, *, sign: Array | float, tnom: Array | float) -> dict[str, Array]:
    """All parameters of a card: as stated, derived from others, or by default.

    ``sign`` is +1 for an n-channel card; ``tnom`` [K] the temperature at which the card holds. Where NSUB
    is not above the intrinsic density, what follows from it is no number: there is no such substrate.
    """
    value = {name: np.asarray(card.get(name, default), float) for name, default in DEFAULTS.items()}
    derived = {"kp": transconductance(card), **_from_doping(card, value, sign, np.asarray(tnom, float))}
    return {name: value[name] if name in card else derived.get(name, value[name]) for name in DEFAULTS}


def _from_doping(
    card: Card, value: Mapping[str, Array], sign: Array | float, tnom: Array
) -> dict[str, Array]:
    """PHI, GAMMA and VTO of a doped substrate under an oxide; nothing where NSUB is not stated."""
    if "nsub" not in card:
        return {}
    with np.errstate(all="ignore"):
        c_ox = oxide_capacitance(value["tox"])
        acts = (c_ox > 0.0) & ~np.isnan(value["nsub"])
        doping = np.where(value["nsub"] > INTRINSIC_DENSITY, value["nsub"], np.nan)
        natural = 2.0 * thermal_voltage_of(tnom) * np.log(doping / INTRINSIC_DENSITY)
        phi = value["phi"] if "phi" in card else np.maximum(natural, _LEAST_PHI)
        depth = 2.0 * SILICON_PERMITTIVITY * ELEMENTARY_CHARGE * doping * _PER_CUBIC_CENTIMETRE
        gamma = value["gamma"] if "gamma" in card else np.sqrt(depth) / c_ox
        states = value["nss"] * _PER_SQUARE_CENTIMETRE * ELEMENTARY_CHARGE / c_ox
        flat_band = _work_function_difference(value["tpg"], phi, sign=sign, tnom=tnom) - states
        vto = flat_band + sign * (gamma * np.sqrt(phi) + phi)
    found = {"phi": phi, "gamma": gamma, "vto": vto}
    return {name: np.where(acts, one, value[name]) for name, one in found.items()}


def _work_function_difference(tpg: Array, phi: Array, *, sign: Array | float, tnom: Array) -> Array:
    """Φms [V]: a gate of metal (TPG = 0), or of silicon doped against the substrate (+1) or like it (-1)."""
    kind = np.rint(tpg)  # ngspice 39 makes a whole number of it
    middle = _AFFINITY + 0.5 * band_gap(tnom)
    silicon_gate = middle - sign * kind * 0.5 * band_gap(tnom)
    gate = np.where(np.abs(kind) > 0.0, silicon_gate, _ALUMINIUM)
    return gate - (middle + sign * 0.5 * phi)
