"""The transistor between its entry and its exit: gain and resistances of each role, with their formulas."""

from __future__ import annotations

import math
from dataclasses import dataclass

from deckgen.hand.formulas import gain as formulas
from deckgen.hand.formulas import quiet_gate
from deckgen.hand.formulas.feedback import FEEDBACK_BOOK
from deckgen.hand.formulas.gain import TEXTBOOK
from deckgen.hand.formulas.quiet_gate import DIODE_BOOK
from deckgen.hand.reduce.dc import DRAIN, GATE, SOURCE
from deckgen.hand.reduce.resistance import Number, Resistance, value_of
from deckgen.hand.reduce.signal import SignalNet
from deckgen.hand.working.into import Conductances, Into, Named, into_diode, into_drain, into_source
from deckgen.hand.working.loop import Loop
from deckgen.hand.working.sheet import where

Told = tuple[str, float, str] | Named

_OPEN = Into(math.inf, "")


@dataclass(frozen=True, slots=True)
class Inner:
    """Gain from entry to exit, and the resistances into the transistor at both.

    ``told`` are the numbers that go into the gain: symbol, value and unit, or a named resistance.
    ``beside_exit`` belongs to the stage but not to the way out: what drives a node that is entry and exit.
    """

    gain: float
    formula: str
    told: tuple[Told, ...]
    entry: Into
    exit: Into
    source: str = TEXTBOOK
    beside_exit: Resistance | None = None
    remark: str | None = None

    def numbers(self, number: Number) -> str:
        """The numbers put into the formula of the gain."""
        texts = []
        for one in self.told:
            if isinstance(one, Named):
                texts.append(one.told(number))
            else:
                symbol, value, unit = one
                texts.append(f"{symbol} = {number(value, unit) if math.isfinite(value) else '∞'}")
        return ", ".join(texts) or number(self.gain, "")


def inner_of(net: SignalNet, g: Conductances) -> Inner | None:
    """What the transistor does between entry and exit; None without closed form."""
    if net.tied:
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


def _common_source(net: SignalNet, g: Conductances) -> Inner | None:
    r_s, r_d = Named("RS", net.third(SOURCE)), Named("RD", net.loaded)
    into = into_drain(g, r_s)
    if net.feedback is not None:
        return _with_feedback(net, g, net.feedback, r_s)
    if math.isinf(r_d.value) and math.isinf(g.ro):
        return None
    if math.isinf(r_s.value):
        return Inner(0.0, "0", (r_s,), _OPEN, into, remark="no signal current can leave the source")
    value = formulas.common_source_gain(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_d=r_d.value, r_s=r_s.value)
    if math.isinf(r_d.value):
        return Inner(value, "-gm·ro", g.told("gm", "ro"), _OPEN, into)
    if not r_s.value > 0.0:
        return Inner(value, f"-gm·(ro∥{r_d.symbol})", (*g.told("gm", "ro"), r_d), _OPEN, into)
    formula = f"-gm·{r_d.symbol}/(1 + {g.sum}·{r_s.symbol} + ({r_d.symbol}+{r_s.symbol})/ro)"
    return Inner(value, formula, (*g.told("gm", "gmb", "ro"), r_s, r_d), _OPEN, into)


def _with_feedback(net: SignalNet, g: Conductances, feedback: Resistance, r_s: Named) -> Inner | None:
    if math.isinf(r_s.value):
        return None
    loop = Loop(g, Named("RF", feedback), r_s, Named("RD", net.loaded), Named("RG", net.driven_from))
    into_gate = loop.into_gate
    if into_gate is None:
        return None
    told = g.told("gm", "gmb", "ro") if r_s.value > 0.0 else g.told("gm", "ro")
    return Inner(
        loop.gain,
        where(loop.formula, loop.defined),
        (*told, *loop.named),
        into_gate,
        loop.into_drain,
        source=FEEDBACK_BOOK,
    )


def _follower(net: SignalNet, g: Conductances) -> Inner | None:
    r_d, r_s = Named("RD", net.third(DRAIN)), Named("RS", net.loaded)
    if math.isinf(r_d.value):
        return None
    value = formulas.follower_gain(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_s=r_s.value, r_d=r_d.value)
    told: tuple[Told, ...] = g.told("gm", "gmb", "ro")
    beyond = f"({r_s.symbol}+{r_d.symbol})" if r_d.value > 0.0 else r_s.symbol
    formula = f"gm·{r_s.symbol}/(1 + {g.sum}·{r_s.symbol} + {beyond}/ro)"
    if math.isinf(r_s.value):
        formula = f"gm/({g.total})"
    else:
        told = (*told, r_s, r_d) if r_d.value > 0.0 else (*told, r_s)
    return Inner(value, formula, told, _OPEN, into_source(g, r_d))


def _common_gate(net: SignalNet, g: Conductances) -> Inner | None:
    r_d = Named("RD", net.loaded)
    if not net.gate_is_quiet or (math.isinf(r_d.value) and math.isinf(g.ro)):
        return None
    told: tuple[Told, ...] = g.told("gm", "gmb", "ro")
    return Inner(
        quiet_gate.common_gate_gain(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_d=r_d.value),
        f"({g.total})·ro" if math.isinf(r_d.value) else f"({g.total})·(ro∥{r_d.symbol})",
        told if math.isinf(r_d.value) else (*told, r_d),
        into_source(g, r_d),
        into_drain(g, Named("RS", net.driven_from)),
    )


def _channel_pass(net: SignalNet, g: Conductances) -> Inner | None:
    r_s = Named("RS", net.loaded)
    if not net.gate_is_quiet or math.isinf(r_s.value):
        return None
    return Inner(
        quiet_gate.channel_pass_gain(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_s=r_s.value),
        f"1/(1 + ro·({g.sum} + 1/{r_s.symbol}))",
        (*g.told("gm", "gmb", "ro"), r_s),
        into_drain(g, r_s),
        into_source(g, Named("RD", net.driven_from)),
    )


def _channel_shunt(net: SignalNet, g: Conductances) -> Inner | None:
    """The channel between a node that is entry and exit, and ground."""
    if not net.gate_is_quiet:
        return None
    if net.entry == DRAIN:
        return _one_node(net, into_drain(g, Named("RS", net.third(SOURCE))), TEXTBOOK)
    return _one_node(net, into_source(g, Named("RD", net.third(DRAIN))), TEXTBOOK)


def _diode(net: SignalNet, g: Conductances) -> Inner | None:
    """Gate and drain at one node, which is the signal's."""
    r_s = Named("RS", net.third(SOURCE))
    if net.entry == SOURCE or math.isinf(r_s.value):
        return None
    return _one_node(net, into_diode(g, r_s), DIODE_BOOK)


def _one_node(net: SignalNet, into: Into, source: str) -> Inner | None:
    """Entry and exit at one node: the transistor is a resistance there, and the way out loads the way in."""
    if math.isinf(into.value):
        return None
    outward = net.loaded
    beside = "" if outward is None else f"∥{outward.branch}"
    at_entry = Into(formulas.parallel(into.value, value_of(outward)), into.formula + beside, into.named)
    return Inner(
        1.0,
        "1",
        (),
        at_entry,
        into,
        source=source,
        beside_exit=net.driven_from,
        remark="input and output are one node",
    )
