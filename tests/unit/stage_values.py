"""Random stages of one role, polarity and region."""

from __future__ import annotations

import math
from typing import Literal

from hypothesis import strategies as st

from tests.unit.circuits import Values

MID_BAND = 1e3
"""Frequency [Hz] at which these stages are in mid-band."""

Kind = Literal["common source", "degenerated", "follower"]
RegionName = Literal["saturation", "triode", "cut-off"]


def _decade(low: float, high: float) -> st.SearchStrategy[float]:
    return st.floats(math.log10(low), math.log10(high)).map(lambda power: 10.0**power)


@st.composite
def stages(draw: st.DrawFn, kind: Kind, region: RegionName, sign: int, bulk_at_source: bool) -> Values:
    """A stage that is in the region by design at λ = 0 and γ = 0; the body effect can move it a little.

    At ``MID_BAND`` all its coupling capacitors are shorts and all its load capacitors open.
    """
    vdd = draw(st.floats(5.0, 20.0))
    v_ov, i_d = draw(st.floats(0.2, 0.8)), draw(_decade(1e-4, 5e-3))
    v_rs = 0.0 if kind == "common source" and draw(st.booleans()) else draw(st.floats(0.3, 0.2 * vdd))
    if kind == "follower":
        v_rs = draw(st.floats(0.3, 0.4 * vdd))
    v_d = vdd - draw(st.floats(0.1, 0.9)) * (vdd - v_rs - 1.2 * v_ov - 0.3)
    depletion = kind == "follower" and region == "triode"
    vto = draw(st.floats(0.3, 1.0))
    if depletion:  # a follower leaves saturation only with a gate near its drain and a threshold below zero
        v_rs, vto = 0.8 * vdd, -(0.4 * vdd + draw(st.floats(0.0, 1.0)))
        v_ov = vdd - 0.1 - v_rs - vto
    v_g = v_rs + vto + v_ov
    if region == "cut-off":
        v_g = max(vto - draw(st.floats(0.05, 0.25)), 0.02)
    r_g = draw(_decade(1e4, 1e6))
    k = 2.0 * i_d / v_ov**2
    length, kp = draw(_decade(1e-6, 1e-5)), draw(_decade(2e-5, 2e-4))
    r_d = (vdd - v_d) / i_d
    return Values(
        sign=sign, follower=kind == "follower", bulk_at_source=bulk_at_source, vdd=vdd,
        r1=r_g * vdd / v_g, r2=r_g * vdd / (vdd - v_g),
        rd=r_d if region != "triode" else draw(st.floats(1.5, 20.0)) * (vdd - v_rs) / i_d,
        rs=v_rs / i_d if v_rs > 0.0 else None,
        cs=None if kind != "common source" or v_rs <= 0.0 else draw(_decade(1e-4, 1e-3)),
        rsig=draw(st.none() | _decade(10.0, 1e5)), cin=draw(_decade(1e-6, 1e-5)),
        cout=draw(st.none() | st.just(1e-5)), rl=draw(_decade(1e3, 1e6)),
        cl=draw(st.none() | _decade(1e-12, 2e-11)),
        vto=vto, kp=kp, lam=draw(st.just(0.0) | st.floats(0.001, 0.1)),
        gamma=draw(st.just(0.0) | st.floats(0.1, 0.8)), phi=draw(st.floats(0.5, 0.9)),
        tox=draw(_decade(5e-9, 5e-8)), overlap=draw(st.just(0.0) | _decade(1e-11, 5e-10)),
        w=k * length / kp, l=length, m=1.0,
    )  # fmt: skip
