"""Gain and resistances of whole stages, as the working puts them together, against sympy's nodal algebra.

Every check here is independent: each role is drawn once with symbols between an EMF behind a resistance and
a load, Kirchhoff's current law is written down for it (``kirchhoff.py``), and sympy (BSD licence) solves it.
The functions of ``deckgen.hand.formulas``, called with symbols and put together as in the working, are shown
to be the same rational functions. Nothing is pinned.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

import pytest

from deckgen.hand.formulas import feedback, frequency, gain, quiet_gate
from tests.outside.kirchhoff import Network
from tests.outside.symbolic import (
    BULKS,
    GM,
    GMB,
    R_D,
    R_F,
    R_G,
    R_L,
    R_S,
    R_SIG,
    RO,
    by_formula,
    into,
    network,
    ratio,
    same,
    shunt,
)


@dataclass(frozen=True)
class Stage:
    """A stage between an EMF behind r_sig and a load r_l; Av, Rin, Rout by our formulas.

    Rout has the source resistance in place and the load left out.
    """

    drawn: Network
    entry: str
    leave: str
    av: Any
    r_in: Any
    r_out: Any


def stage(
    resistors: Mapping[tuple[str, str], Any], *, bulk: str, entry: str, leave: str, **nodes: str
) -> Network:
    """The resistors, the EMF's at the entry, and the load at the exit, with the terminals at ``nodes``."""
    outer = (("emf", entry, R_SIG), (leave, "0", R_L))
    own = tuple((first, second, value) for (first, second), value in resistors.items())
    return network(*outer, *own, bulk=bulk, **nodes)


def _gains(bulk: str) -> dict[str, Any]:
    return {"gm": GM, "gmb": GMB if bulk == "rail" else 0, "ro": RO}


def common_source(bulk: str) -> Stage:
    g, load = _gains(bulk), shunt(R_D, R_L)
    inner = by_formula(gain.common_source_gain, **g, r_d=load)
    return Stage(
        stage({("g", "0"): R_G, ("d", "0"): R_D, ("s", "0"): R_S}, bulk=bulk, entry="g", leave="d"),
        "g", "d", inner * R_G / (R_G + R_SIG), R_G, shunt(R_D, by_formula(gain.drain_resistance, **g)),
    )  # fmt: skip


def plain_common_source(bulk: str) -> Stage:
    load = shunt(R_D, R_L)
    return Stage(
        stage({("g", "0"): R_G, ("d", "0"): R_D}, bulk=bulk, entry="g", leave="d", source="0"),
        "g", "d", -GM * shunt(RO, load) * R_G / (R_G + R_SIG), R_G, shunt(R_D, RO),
    )  # fmt: skip


def drain_feedback(bulk: str) -> Stage:
    g, load = _gains(bulk), shunt(R_D, R_L)
    whole = by_formula(gain.effective_transconductance, **g)
    into_drain = by_formula(gain.drain_resistance, **g)
    inner = by_formula(feedback.drain_feedback_gain, gm=whole, r_into=into_drain, r_d=load)
    r_in = shunt(R_G, by_formula(feedback.miller_resistance, r_f=R_F, gain=inner))
    back = by_formula(feedback.drain_feedback_resistance, gm=whole, r_g=shunt(R_G, R_SIG))
    resistors = {("g", "0"): R_G, ("g", "d"): R_F, ("d", "0"): R_D, ("s", "0"): R_S}
    return Stage(
        stage(resistors, bulk=bulk, entry="g", leave="d"),
        "g", "d", inner * r_in / (r_in + R_SIG), r_in, shunt(R_D, into_drain, back),
    )  # fmt: skip


def follower(bulk: str) -> Stage:
    """With a resistor in the drain."""
    g, load = _gains(bulk), shunt(R_S, R_L)
    inner = by_formula(gain.follower_gain, **g, r_s=load)
    return Stage(
        stage({("g", "0"): R_G, ("d", "0"): R_D, ("s", "0"): R_S}, bulk=bulk, entry="g", leave="s"),
        "g", "s", inner * R_G / (R_G + R_SIG), R_G, shunt(R_S, by_formula(gain.source_resistance, **g)),
    )  # fmt: skip


def plain_follower(bulk: str) -> Stage:
    g, load = _gains(bulk), shunt(R_S, R_L)
    inner = by_formula(gain.follower_gain, **g, r_s=load, r_d=0)
    return Stage(
        stage({("g", "0"): R_G, ("s", "0"): R_S}, bulk=bulk, entry="g", leave="s", drain="0"),
        "g", "s", inner * R_G / (R_G + R_SIG), R_G, shunt(R_S, 1 / (g["gm"] + g["gmb"] + 1 / RO)),
    )  # fmt: skip


def common_gate(bulk: str) -> Stage:
    """Gate behind its bias resistor without a capacitor: no current flows there."""
    g, load = _gains(bulk), shunt(R_D, R_L)
    r_in = shunt(R_S, by_formula(gain.source_resistance, **g, r_d=load))
    inner = by_formula(quiet_gate.common_gate_gain, **g, r_d=load)
    r_out = shunt(R_D, by_formula(gain.drain_resistance, **g, r_s=shunt(R_S, R_SIG)))
    return Stage(
        stage({("g", "0"): R_G, ("d", "0"): R_D, ("s", "0"): R_S}, bulk=bulk, entry="s", leave="d"),
        "s", "d", inner * r_in / (r_in + R_SIG), r_in, r_out,
    )  # fmt: skip


def channel(bulk: str) -> Stage:
    """From drain to source, in triode."""
    g, load = _gains(bulk), shunt(R_S, R_L)
    r_in = shunt(R_D, by_formula(gain.drain_resistance, **g, r_s=load))
    inner = by_formula(quiet_gate.channel_pass_gain, **g, r_s=load)
    r_out = shunt(R_S, by_formula(gain.source_resistance, **g, r_d=shunt(R_D, R_SIG)))
    return Stage(
        stage({("g", "0"): R_G, ("d", "0"): R_D, ("s", "0"): R_S}, bulk=bulk, entry="d", leave="s"),
        "d", "s", inner * r_in / (r_in + R_SIG), r_in, r_out,
    )  # fmt: skip


def at_one_node(drawn: Network, node: str, own: Any, seen: Any) -> Stage:
    """A resistance ``seen`` beside the resistor ``own``, input and output at one node."""
    r_in = shunt(own, seen, R_L)
    return Stage(drawn, node, node, r_in / (r_in + R_SIG), r_in, shunt(own, seen, R_SIG))


def diode(bulk: str) -> Stage:
    seen = by_formula(quiet_gate.diode_resistance, **_gains(bulk))
    drawn = stage({("d", "0"): R_D, ("s", "0"): R_S}, bulk=bulk, entry="d", leave="d", gate="d")
    return at_one_node(drawn, "d", R_D, seen)


def grounded_diode(bulk: str) -> Stage:
    """Source at the rail."""
    seen = by_formula(quiet_gate.diode_resistance, **_gains(bulk), r_s=0)
    drawn = stage({("d", "0"): R_D}, bulk=bulk, entry="d", leave="d", gate="d", source="0")
    return at_one_node(drawn, "d", R_D, seen)


def hanging_diode(bulk: str) -> Stage:
    """Gate and drain at the rail, the signal at the source."""
    seen = by_formula(gain.source_resistance, **_gains(bulk), r_d=0)
    drawn = stage({("s", "0"): R_S}, bulk=bulk, entry="s", leave="s", gate="0", drain="0")
    return at_one_node(drawn, "s", R_S, seen)


def shunt_at_the_drain(bulk: str) -> Stage:
    seen = by_formula(gain.drain_resistance, **_gains(bulk))
    drawn = stage({("d", "0"): R_D, ("s", "0"): R_S, ("g", "0"): R_G}, bulk=bulk, entry="d", leave="d")
    return at_one_node(drawn, "d", R_D, seen)


def shunt_at_the_source(bulk: str) -> Stage:
    seen = by_formula(gain.source_resistance, **_gains(bulk))
    drawn = stage({("d", "0"): R_D, ("s", "0"): R_S, ("g", "0"): R_G}, bulk=bulk, entry="s", leave="s")
    return at_one_node(drawn, "s", R_S, seen)


STAGES = (
    common_source, plain_common_source, drain_feedback, follower, plain_follower, common_gate, channel,
    diode, grounded_diode, hanging_diode, shunt_at_the_drain, shunt_at_the_source,
)  # fmt: skip
every_stage = pytest.mark.parametrize("made", STAGES, ids=lambda made: made.__name__)
both_bulks = pytest.mark.parametrize("bulk", BULKS)


@both_bulks
@every_stage
def test_gain_of_a_whole_stage_is_the_nodal_solution(made: Callable[[str], Stage], bulk: str) -> None:
    one = made(bulk)
    assert same(one.av, ratio(one.drawn, "emf", one.leave))


@both_bulks
@every_stage
def test_input_resistance_of_a_whole_stage_is_the_nodal_solution(
    made: Callable[[str], Stage], bulk: str
) -> None:
    one = made(bulk)
    assert same(one.r_in, into(one.drawn.without(("emf", one.entry)), one.entry))


@both_bulks
@every_stage
def test_output_resistance_of_a_whole_stage_is_the_nodal_solution_with_the_load_subtracted(
    made: Callable[[str], Stage], bulk: str
) -> None:
    one = made(bulk)
    assert same(1 / one.r_out, 1 / into(one.drawn, one.leave, "emf") - 1 / R_L)


# What capacitances see: any stage whose terminals go to ground by RG, RS and RD.


def around(bulk: str) -> Network:
    return network(("g", "0", R_G), ("s", "0", R_S), ("d", "0", R_D), bulk=bulk)


@both_bulks
def test_resistance_that_the_gate_source_capacitance_sees_is_the_nodal_solution(bulk: str) -> None:
    """Ro and gmb are put in as equivalents of RS and gm."""
    g = _gains(bulk)
    beside = shunt(R_S, by_formula(gain.source_resistance, **g | {"gm": 0}))
    own = by_formula(frequency.gate_source_resistance, gm=GM / (1 + R_D / RO), r_s=beside)
    assert same(own, around(bulk).resistance("g", "s"))


@both_bulks
def test_resistance_that_the_gate_drain_capacitance_sees_is_the_nodal_solution(bulk: str) -> None:
    """With the effective gm, and RD beside the resistance into the drain."""
    g = _gains(bulk)
    out = shunt(R_D, by_formula(gain.drain_resistance, **g))
    whole = by_formula(gain.effective_transconductance, **g)
    own = by_formula(frequency.gate_drain_resistance, gm=whole, r_d=out, r_s=0)
    assert same(own, around(bulk).resistance("g", "d"))
