"""Prepared parameters of the square law: a card at a temperature, for a geometry, with effects switched."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, fields

import numpy as np

from deckgen.hand.effects import Effect
from deckgen.hand.laws import temperature as thermal
from deckgen.hand.laws.base import Array, Mask
from deckgen.hand.laws.level1 import Card, completed, oxide_capacitance

GEOMETRY: dict[str, float] = {
    "m": 1.0, "ad": 0.0, "as": 0.0, "pd": 0.0, "ps": 0.0, "nrd": 1.0, "nrs": 1.0,
}  # fmt: skip
"""Geometry besides W and L, and what ngspice 39 takes where it is not given."""

GMIN = 1e-12
"""Conductance [S] that the simulator puts across every junction, unless an option says otherwise."""

Switches = Mapping[Effect, Array | bool]


@dataclass(frozen=True, slots=True)
class SquareParameters:
    """Prepared parameters, arrays that broadcast against the batch. SI; thresholds signed for n-channel.

    ``lambda_bias`` acts in the current and gm, ``lambda_ro`` in the small-signal output conductance.
    ``r_drain`` and ``r_source`` are 0 where the inner terminal is the outer one. Saturation currents ``is_…``
    and ``gmin`` are 0 where the junctions are left out. ``cj_…`` are capacitances of unbiased junctions, of
    their bottom and of their side walls.
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
    r_drain: Array
    r_source: Array
    ut: Array
    gmin: Array
    is_drain: Array
    is_source: Array
    cj_drain: Array
    cj_source: Array
    cjsw_drain: Array
    cjsw_source: Array
    pb: Array
    mj: Array
    mjsw: Array
    fc: Array


def take(parameters: SquareParameters, chosen: Mask) -> SquareParameters:
    """The devices marked in a mask of the batch's shape, in one axis."""
    values = (getattr(parameters, item.name) for item in fields(parameters))
    return SquareParameters(*(np.broadcast_to(value, chosen.shape)[chosen] for value in values))


def prepare(
    card: Card,
    *,
    sign: Array | float,
    w: Array | float,
    l: Array | float,
    temperature: Array | float,
    tnom: Array | float,
    on: Switches,
    gmin: Array | float = GMIN,
    **geometry: Array | float,
) -> SquareParameters:
    """Parameters at a temperature [K] for a geometry; ``on`` says per row which effects act.

    ``geometry`` are M, and AD, AS [m²], PD, PS [m], NRD, NRS by their names in lower case.
    """
    s, t, t0 = np.asarray(sign, float), np.asarray(temperature, float), np.asarray(tnom, float)
    size = {name: np.asarray(geometry.get(name, default), float) for name, default in GEOMETRY.items()}
    value = completed(card, sign=s, tnom=t0)
    m, width, length = size["m"], np.asarray(w, float), np.asarray(l, float) - 2.0 * value["ld"]
    gamma = np.where(on[Effect.BODY_EFFECT], value["gamma"], 0.0)
    vto = thermal.vto_at(value["vto"], phi=value["phi"], gamma=value["gamma"], sign=s, temperature=t, tnom=t0)
    with_clm = np.asarray(on[Effect.CHANNEL_LENGTH_MODULATION], bool)
    with_ro = with_clm | np.asarray(on[Effect.OUTPUT_RESISTANCE], bool)
    return SquareParameters(
        sign=s,
        ld=value["ld"],
        k=value["kp"] * thermal.mobility_factor(temperature=t, tnom=t0) * width / length * m,
        vto=s * vto,
        gamma=gamma,
        phi=thermal.phi_at(value["phi"], temperature=t, tnom=t0),
        lambda_bias=np.where(with_clm, value["lambda"], 0.0),
        lambda_ro=np.where(with_ro, value["lambda"], 0.0),
        oxide=oxide_capacitance(value["tox"]) * width * length * m,
        cgs_overlap=value["cgso"] * width * m,
        cgd_overlap=value["cgdo"] * width * m,
        cgb_overlap=value["cgbo"] * length * m,
        **_series(value, size, on),
        **_junction_currents(value, size, on, gmin, t, t0),
        **_junction_capacitances(value, size, t, t0),
    )


def _series(value: Mapping[str, Array], size: Mapping[str, Array], on: Switches) -> dict[str, Array]:
    """RD and RS [Ω] of all devices in parallel; by RSH and squares where the card does not state them."""

    def resistance(stated: Array, squares: Array) -> Array:
        one = np.where(np.isnan(stated), value["rsh"] * squares, stated)
        return np.where(on[Effect.SERIES_RESISTANCE], one / size["m"], 0.0)

    return {
        "r_drain": resistance(value["rd"], size["nrd"]),
        "r_source": resistance(value["rs"], size["nrs"]),
    }


def _junction_currents(
    value: Mapping[str, Array],
    size: Mapping[str, Array],
    on: Switches,
    gmin: Array | float,
    t: Array,
    t0: Array,
) -> dict[str, Array]:
    """Saturation currents: JS by area where JS and both areas are given, else IS (ngspice 39)."""
    acts = on[Effect.BULK_JUNCTIONS]
    scale = thermal.saturation_factor(temperature=t, tnom=t0) * size["m"]
    by_area = (value["js"] > 0.0) & (size["ad"] > 0.0) & (size["as"] > 0.0)
    return {
        "ut": thermal.thermal_voltage_of(t),
        # One for each junction, not one for each of M devices (measured, ngspice 39).
        "gmin": np.where(acts, gmin, 0.0),
        "is_drain": np.where(acts, np.where(by_area, value["js"] * size["ad"], value["is"]) * scale, 0.0),
        "is_source": np.where(acts, np.where(by_area, value["js"] * size["as"], value["is"]) * scale, 0.0),
    }


def _junction_capacitances(
    value: Mapping[str, Array], size: Mapping[str, Array], t: Array, t0: Array
) -> dict[str, Array]:
    """Capacitances without bias: CBD and CBS where stated, else CJ by area; CJSW by perimeter besides."""
    bottoms = [
        np.where(np.isnan(value[stated]), value["cj"] * size[area], value[stated]) * size["m"]
        for stated, area in (("cbd", "ad"), ("cbs", "as"))
    ]
    sides = [value["cjsw"] * size[perimeter] * size["m"] for perimeter in ("pd", "ps")]
    # Most cards have no junction capacitance: nothing of it then has to follow the temperature.
    if any(np.any(np.abs(each) > 0.0) for each in bottoms):
        factor = thermal.capacitance_factor(value["mj"], value["pb"], temperature=t, tnom=t0)
        bottoms = [each * factor for each in bottoms]
    if any(np.any(np.abs(each) > 0.0) for each in sides):
        factor = thermal.capacitance_factor(value["mjsw"], value["pb"], temperature=t, tnom=t0)
        sides = [each * factor for each in sides]
    return {
        "cj_drain": bottoms[0],
        "cj_source": bottoms[1],
        "cjsw_drain": sides[0],
        "cjsw_source": sides[1],
        "pb": thermal.potential_at(value["pb"], temperature=t, tnom=t0),
        "mj": value["mj"],
        "mjsw": value["mjsw"],
        "fc": value["fc"],
    }
