"""The transistor between its entry and its exit: gain and resistances of each role, with their formulas."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

from deckgen.hand.formulas import feedback, quiet_gate
from deckgen.hand.formulas import gain as formulas
from deckgen.hand.formulas.feedback import FEEDBACK_BOOK
from deckgen.hand.formulas.gain import TEXTBOOK
from deckgen.hand.formulas.quiet_gate import DIODE_BOOK
from deckgen.hand.reduce.dc import DRAIN, GATE, SOURCE
from deckgen.hand.reduce.resistance import Resistance, value_of
from deckgen.hand.reduce.signal import SignalNet

Number = Callable[[float, str], str]


@dataclass(frozen=True, slots=True)
class Conductances:
    """Hand values of gm, gds, gmb [S]; ``bulk_acts`` says whether gmb plays a part in the gain."""

    gm: float
    gds: float
    gmb: float
    bulk_acts: bool

    @property
    def ro(self) -> float:
        """1/gds [Ω], infinite for gds = 0."""
        return 1.0 / self.gds if self.gds > 0.0 else math.inf

    @property
    def active_gmb(self) -> float:
        """The part of gmb that acts, as far as the bulk does not move with the source."""
        return self.gmb if self.bulk_acts else 0.0


@dataclass(frozen=True, slots=True)
class Inner:
    """Gain from entry to exit, and the resistances [Ω] into the transistor at both.

    ``beside_exit`` belongs to the stage but not to the way out: what drives a node that is entry and exit.
    """

    gain: float
    formula: str
    told: tuple[tuple[str, float | Resistance | None, str], ...]
    into_entry: float
    entry_formula: str
    into_exit: float
    exit_formula: str
    source: str = TEXTBOOK
    beside_exit: Resistance | None = None

    def numbers(self, number: Number) -> str:
        """The numbers put into the formula of the gain."""
        texts = []
        for symbol, value, unit in self.told:
            if isinstance(value, Resistance):
                text = value.numbers(number)
                texts.append(f"{symbol} = {text}")
            elif value is not None and math.isfinite(value):
                texts.append(f"{symbol} = {number(value, unit)}")
            else:
                texts.append(f"{symbol} infinite")
        return ", ".join(texts)


def inner_of(net: SignalNet, g: Conductances) -> Inner | None:
    """What the transistor does between entry and exit; None without closed form."""
    if net.tied or {GATE, DRAIN} <= net.grounded:
        return _diode(net, g)
    by_path = {
        (GATE, DRAIN): _common_source,
        (GATE, SOURCE): _follower,
        (SOURCE, DRAIN): _common_gate,
        (DRAIN, SOURCE): _channel_pass,
        (DRAIN, DRAIN): _channel_shunt,
        (SOURCE, SOURCE): _channel_shunt,
    }
    return by_path[net.entry, net.exit](net, g)


def _third(net: SignalNet, terminal: str) -> float:
    """Resistance from a terminal that is neither entry nor exit to signal ground [Ω]; 0 where it is there."""
    return 0.0 if terminal in net.grounded else value_of(net.to_ground.get(terminal))


def _gate_is_quiet(net: SignalNet) -> bool:
    return GATE in net.grounded or GATE in net.to_ground


def _common_source(net: SignalNet, g: Conductances) -> Inner | None:
    r_s, load = _third(net, SOURCE), net.loaded
    if math.isinf(r_s):
        return None
    into = formulas.drain_resistance(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_s=r_s)
    into_formula = "(ro + RS + (gm+gmb)·ro·RS)" if r_s > 0.0 else "ro"
    if net.feedback is not None:
        return _with_feedback(net, g, r_s, into)
    value = formulas.common_source_gain(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_d=value_of(load), r_s=r_s)
    if r_s > 0.0:
        formula = "-gm·RD/(1 + (gm+gmb)·RS + (RD+RS)/ro)"
        first: tuple[tuple[str, float | Resistance | None, str], ...] = (
            ("gm+gmb", g.gm + g.active_gmb, "S"),
            ("RS", net.to_ground.get(SOURCE), "Ω"),
        )
    else:
        formula, first = "-gm·(ro∥RD)", (("gm", g.gm, "S"),)
    told = (*first, ("ro", g.ro, "Ω"), ("RD", load, "Ω"))
    return Inner(value, formula, told, math.inf, "", into, into_formula)


def _with_feedback(net: SignalNet, g: Conductances, r_s: float, into: float) -> Inner | None:
    load, r_f = net.loaded, net.feedback
    if r_f is None:
        return None
    whole = formulas.effective_transconductance(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_s=r_s)
    value = feedback.drain_feedback_gain(gm=whole, r_into=into, r_d=value_of(load), r_f=r_f.value)
    if not value < 1.0:
        return None
    back = feedback.drain_feedback_resistance(gm=whole, r_f=r_f.value, r_g=value_of(net.driven_from))
    letter, symbol = ("Gm", "Gm = gm/(1+(gm+gmb+1/ro)·RS)") if r_s > 0.0 else ("gm", "gm")
    drain = "Rd" if r_s > 0.0 else "ro"
    named = r_f.formula if r_f.joint == "part" else f"({r_f.formula})"
    return Inner(
        value,
        f"-({letter} - 1/{named})·({drain}∥RD∥{named})",
        ((symbol, whole, "S"), (drain, into, "Ω"), ("RD", load, "Ω"), (r_f.formula, r_f, "Ω")),
        feedback.miller_resistance(r_f=r_f.value, gain=value),
        f"{named}/(1-A)",
        formulas.parallel(into, back),
        f"{drain}∥({named}+Rg)/(1+{letter}·Rg), Rg from gate to ground",
        source=FEEDBACK_BOOK,
    )


def _follower(net: SignalNet, g: Conductances) -> Inner | None:
    r_d, load = _third(net, DRAIN), net.loaded
    if math.isinf(r_d):
        return None
    into = formulas.source_resistance(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_d=r_d)
    value = formulas.follower_gain(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_s=value_of(load), r_d=r_d)
    with_drain = r_d > 0.0
    told: tuple[tuple[str, float | Resistance | None, str], ...] = (
        ("gm", g.gm, "S"), ("gmb", g.active_gmb, "S"), ("ro", g.ro, "Ω"), ("RS", load, "Ω"),
    )  # fmt: skip
    if with_drain:
        told = (*told, ("RD", net.to_ground.get(DRAIN), "Ω"))
    return Inner(
        value,
        "gm·RS/(1 + (gm+gmb)·RS + (RS+RD)/ro)" if with_drain else "gm·RS/(1 + (gm+gmb)·RS + RS/ro)",
        told,
        math.inf,
        "",
        into,
        "(1+RD/ro)/(gm+gmb+1/ro)" if with_drain else "1/(gm+gmb+1/ro)",
    )


def _common_gate(net: SignalNet, g: Conductances) -> Inner | None:
    load = net.loaded
    if not _gate_is_quiet(net) or (load is None and math.isinf(g.ro)):
        return None
    r_g = value_of(net.driven_from)
    return Inner(
        quiet_gate.common_gate_gain(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_d=value_of(load)),
        "(gm+gmb+1/ro)·(ro∥RD)",
        (("gm+gmb", g.gm + g.active_gmb, "S"), ("ro", g.ro, "Ω"), ("RD", load, "Ω")),
        formulas.source_resistance(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_d=value_of(load)),
        "(1+RD/ro)/(gm+gmb+1/ro)",
        math.inf
        if math.isinf(r_g)
        else formulas.drain_resistance(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_s=r_g),
        "(ro + R + (gm+gmb)·ro·R), R at the source",
    )


def _channel_pass(net: SignalNet, g: Conductances) -> Inner | None:
    load = net.loaded
    if not _gate_is_quiet(net) or load is None:
        return None
    return Inner(
        quiet_gate.channel_pass_gain(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_s=load.value),
        "gds/(gds + gm + gmb + 1/RS)",
        (("gds", g.gds, "S"), ("gm+gmb", g.gm + g.active_gmb, "S"), ("RS", load, "Ω")),
        formulas.drain_resistance(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_s=load.value),
        "(1/gds + RS + (gm+gmb)·RS/gds)",
        formulas.source_resistance(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_d=value_of(net.driven_from)),
        "(1+R·gds)/(gm+gmb+gds), R at the drain",
    )


def _channel_shunt(net: SignalNet, g: Conductances) -> Inner | None:
    """The channel between a node that is entry and exit, and ground."""
    other = SOURCE if net.entry == DRAIN else DRAIN
    beyond = _third(net, other)
    if not _gate_is_quiet(net) or math.isinf(beyond):
        return None
    if other == SOURCE:
        into = formulas.drain_resistance(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_s=beyond)
        formula = "(1/gds + RS + (gm+gmb)·RS/gds)" if beyond > 0.0 else "1/gds"
    else:
        into = formulas.source_resistance(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_d=beyond)
        formula = "(1+RD·gds)/(gm+gmb+gds)" if beyond > 0.0 else "1/(gm+gmb+gds)"
    return _one_node(net, into, formula, TEXTBOOK)


def _diode(net: SignalNet, g: Conductances) -> Inner | None:
    """Gate and drain at one node: at the signal's, the source beyond; or both at ground, the source's own."""
    if net.tied:
        r_s = _third(net, SOURCE)
        if net.entry == SOURCE or math.isinf(r_s):
            return None
        into = quiet_gate.diode_resistance(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_s=r_s)
        formula = "(1 + (gm+gmb+1/ro)·RS)/(gm+1/ro)" if r_s > 0.0 else "1/(gm+1/ro)"
    elif (net.entry, net.exit) == (SOURCE, SOURCE):
        into = formulas.source_resistance(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_d=0.0)
        formula = "1/(gm+gmb+1/ro)"
    else:
        return None
    return _one_node(net, into, formula, DIODE_BOOK)


def _one_node(net: SignalNet, into: float, formula: str, source: str) -> Inner:
    """Entry and exit at one node: the transistor is a resistance there, and the way out loads the way in."""
    outward = net.loaded
    at_entry = formulas.parallel(into, value_of(outward))
    named = formula if outward is None else f"{formula}∥{outward.formula}"
    return Inner(
        1.0,
        "1, input and output at one node",
        (("R", into, "Ω"),),
        at_entry,
        named,
        into,
        formula,
        source=source,
        beside_exit=net.driven_from,
    )
