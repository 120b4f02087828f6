"""The resistance that a capacitance sees between two nodes of a single-transistor stage, in closed form."""

from __future__ import annotations

import math
from dataclasses import dataclass

from deckgen.circuit.model import GROUND, Mosfet
from deckgen.hand.formulas import feedback, frequency, quiet_gate
from deckgen.hand.formulas.gain import (
    drain_resistance,
    effective_transconductance,
    parallel,
    source_resistance,
)
from deckgen.hand.reduce.mesh import Mesh
from deckgen.hand.reduce.resistance import Resistance, value_of
from deckgen.hand.reduce.signal import SignalGraph
from deckgen.hand.working.inner import Conductances
from deckgen.hand.working.sheet import Sheet


@dataclass(frozen=True, slots=True)
class Seen:
    """A resistance between two nodes, as formula, numbers and value [Ω]."""

    formula: str
    numbers: str
    value: float


@dataclass(frozen=True, slots=True)
class Terminals:
    """Joined nodes of a transistor in a silent graph, and its conductances there."""

    drain: str
    gate: str
    source: str
    g: Conductances

    @property
    def tied(self) -> bool:
        """Whether gate and drain are one node."""
        return self.gate == self.drain != GROUND


def terminals_of(graph: SignalGraph, device: Mosfet, g: Conductances) -> Terminals:
    """Where the transistor hangs; its bulk acts where it is not at the source."""
    drain, gate, source, bulk = (graph.of(node) for node in device.nodes)
    return Terminals(drain, gate, source, Conductances(g.gm, g.gds, g.gmb, bulk_acts=bulk != source))


def seen_between(sheet: Sheet, graph: SignalGraph, at: Terminals, first: str, second: str) -> Seen | None:
    """Resistance between two joined nodes, EMF silent; None where no closed form is written for it."""
    mesh = graph.reduced({at.drain, at.gate, at.source, first, second, GROUND})
    if mesh is None or first == second:
        return None
    pair = {first, second}
    if pair == {at.gate, at.source} and GROUND not in pair:
        return _gate_source(mesh, at)
    if pair == {at.gate, at.drain} and GROUND not in pair:
        return _gate_drain(mesh, at)
    ends = [node for node in (first, second) if node != GROUND]
    if sum(_terminal_at(mesh, at, node) is not None for node in ends) > 1:
        return None
    found = [_end(sheet, mesh, at, node) for node in ends]
    if mesh.between(first, second) is not None and GROUND not in pair:
        return None
    one = [each for each in found if each is not None]
    if len(one) < len(found):
        return None
    return Seen(
        " + ".join(each.formula for each in one),
        " + ".join(each.numbers for each in one),
        math.fsum(each.value for each in one),
    )


def _terminal_at(mesh: Mesh, at: Terminals, node: str) -> str | None:
    """The terminal that a node is, or is connected with by a resistance alone."""
    known = [terminal for terminal in (at.drain, at.gate, at.source) if terminal != GROUND]
    if node in known:
        return node
    return next((terminal for terminal in known if mesh.between(node, terminal) is not None), None)


def _end(sheet: Sheet, mesh: Mesh, at: Terminals, node: str) -> Seen | None:
    """Resistance from one end to signal ground, through a terminal of the transistor if it hangs on one."""
    terminal = _terminal_at(mesh, at, node)
    back = _feedback(mesh, at)
    across = {at.gate, at.drain} if back is not None else set()
    if not mesh.neighbours(node) - (across if node in across else set()) <= {GROUND, terminal}:
        return None
    outer = mesh.between(node, GROUND)
    if terminal is None:
        return None if outer is None else _resistor(sheet, outer)
    if not mesh.neighbours(terminal) - (across if terminal in across else set()) <= {GROUND, node}:
        return None
    into = _into(mesh, at, terminal) if back is None else _into_with_feedback(mesh, at, terminal, back, node)
    if into is None:
        return None
    own = mesh.between(terminal, GROUND)
    formula, value = into
    texts = [*([_shunt(own)] if own else []), *([formula] if math.isfinite(value) else [])]
    told = [*([own.numbers(sheet.number)] if own else [])]
    told += [sheet.number(value, "Ω")] if math.isfinite(value) else []
    total = parallel(value_of(own), value)
    here, there = "∥".join(texts), " ∥ ".join(told)
    series = mesh.between(node, terminal)
    if series is not None:
        total = parallel(value_of(outer), series.value + total)
        here = " + ".join(filter(None, [series.formula, here]))
        there = " + ".join(filter(None, [series.numbers(sheet.number), there]))
        if outer is not None:
            here, there = f"{_shunt(outer)}∥({here})", f"{outer.numbers(sheet.number)} ∥ ({there})"
    return Seen(here, there, total) if math.isfinite(total) else None


def _resistor(sheet: Sheet, resistance: Resistance) -> Seen:
    return Seen(resistance.formula, resistance.numbers(sheet.number), resistance.value)


def _shunt(resistance: Resistance) -> str:
    return f"({resistance.formula})" if resistance.joint == "series" else resistance.formula


def _into(mesh: Mesh, at: Terminals, terminal: str) -> tuple[str, float] | None:
    """Symbol and value [Ω] of the resistance into a terminal, the others at what hangs on them."""
    g = at.g
    if at.tied:
        r_s = _to_ground(mesh, at.source)
        if terminal == at.source or r_s is None or math.isinf(r_s):
            return None
        value = quiet_gate.diode_resistance(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_s=r_s)
        return "Rd", value
    if terminal == at.gate:
        return "", math.inf
    if _to_ground(mesh, at.gate) is None:
        return None
    if terminal == at.drain:
        r_s = _to_ground(mesh, at.source)
        if r_s is None:
            return None
        if math.isinf(r_s):
            return "Rd", math.inf
        return "Rd", drain_resistance(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_s=r_s)
    r_d = _to_ground(mesh, at.drain)
    if r_d is None:
        return None
    return "Rs", source_resistance(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_d=r_d)


def _feedback(mesh: Mesh, at: Terminals) -> Resistance | None:
    """The resistance between gate and drain, where both are signal nodes."""
    return None if GROUND in (at.gate, at.drain) else mesh.between(at.gate, at.drain)


@dataclass(frozen=True, slots=True)
class _Loop:
    """A drain-to-gate resistor with what it connects: effective gm [S] and resistances to ground [Ω]."""

    gm: float
    into: float
    r_f: float

    def at_gate(self, r_d: float) -> float:
        """What the loop shows at the gate, ``r_d`` at the drain beside the transistor."""
        gain = feedback.drain_feedback_gain(gm=self.gm, r_into=self.into, r_d=r_d, r_f=self.r_f)
        return feedback.miller_resistance(r_f=self.r_f, gain=gain) if gain < 1.0 else math.inf

    def at_drain(self, r_g: float) -> float:
        """What loop and transistor show at the drain, ``r_g`` at the gate."""
        back = feedback.drain_feedback_resistance(gm=self.gm, r_f=self.r_f, r_g=r_g)
        return parallel(self.into, back)


def _loop(mesh: Mesh, at: Terminals, back: Resistance) -> _Loop | None:
    r_s, g = _to_ground(mesh, at.source), at.g
    if r_s is None or math.isinf(r_s):
        return None
    return _Loop(
        gm=effective_transconductance(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_s=r_s),
        into=drain_resistance(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_s=r_s),
        r_f=back.value,
    )


def _into_with_feedback(
    mesh: Mesh, at: Terminals, terminal: str, back: Resistance, node: str
) -> tuple[str, float] | None:
    """Symbol and value of the resistance into gate or drain with a resistor between them."""
    loop = _loop(mesh, at, back)
    other = {at.gate: at.drain, at.drain: at.gate}.get(terminal)
    if loop is None or other is None or not mesh.neighbours(other) <= {GROUND, terminal, node}:
        return None
    if node != terminal and mesh.between(other, node) is not None:
        return None
    beyond = value_of(mesh.between(other, GROUND))
    if terminal == at.gate:
        return f"{_shunt(back)}/(1-A)", loop.at_gate(beyond)
    return f"Rd∥({_shunt(back)}+Rg)/(1+Gm·Rg)", loop.at_drain(beyond)


def _to_ground(mesh: Mesh, node: str) -> float | None:
    """Resistance from a terminal to ground [Ω], None where it is connected with something else as well."""
    if node == GROUND:
        return 0.0
    return value_of(mesh.between(node, GROUND)) if mesh.neighbours(node) <= {GROUND} else None


def _three(
    mesh: Mesh, at: Terminals, *, across: Resistance | None = None
) -> tuple[float, float, float] | None:
    """Rg, RS, RD [Ω], all finite, of terminals that are connected with ground alone.

    ``across`` is a resistance between gate and drain that is reckoned with elsewhere.
    """
    found = []
    for node in (at.gate, at.source, at.drain):
        besides = {at.gate, at.drain} if across is not None and node != at.source else set()
        if node != GROUND and not mesh.neighbours(node) - besides <= {GROUND}:
            return None
        found.append(0.0 if node == GROUND else value_of(mesh.between(node, GROUND)))
    r_g, r_s, r_d = found
    return (r_g, r_s, r_d) if all(math.isfinite(each) for each in found) else None


def _gate_source(mesh: Mesh, at: Terminals) -> Seen | None:
    """What Cgs sees: ro and gmb, put in as equivalents of RS and gm, are taken in exactly."""
    around = _three(mesh, at)
    if around is None or at.tied:
        return None
    (r_g, r_s, r_d), g = around, at.g
    beside = parallel(r_s, source_resistance(gm=0.0, gmb=g.active_gmb, ro=g.ro, r_d=r_d))
    value = frequency.gate_source_resistance(gm=g.gm / (1.0 + r_d / g.ro), r_g=r_g, r_s=beside)
    named = _named("Rg", mesh.between(at.gate, GROUND))
    if r_d > 0.0:
        return Seen(f"(Rg+R)/(1+gm·R/(1+RD/ro)), R = RS∥(RD+ro)/(1+gmb·ro), {named}", "", value)
    return Seen(f"(Rg+RS)/(1+gm·RS), RS∥1/gmb∥ro, {named}", "", value)


def _gate_drain(mesh: Mesh, at: Terminals) -> Seen | None:
    """What Cgd sees, with the effective gm and the resistance into the drain of a degenerated stage."""
    back = _feedback(mesh, at)
    around = _three(mesh, at, across=back)
    if around is None or at.tied:
        return None
    (r_g, r_s, r_d), g = around, at.g
    out = parallel(r_d, drain_resistance(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_s=r_s))
    whole = effective_transconductance(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_s=r_s)
    value = frequency.gate_drain_resistance(gm=whole, r_g=r_g, r_d=out, r_s=0.0)
    formula, where = "Rg+R+gm·Rg·R", "R = RD∥ro"
    if r_s > 0.0:
        formula, where = "Rg+R+Gm·Rg·R", "R = RD∥Rd, Gm = gm/(1+(gm+gmb+1/ro)·RS)"
    if back is not None:
        formula, value = f"{_shunt(back)}∥({formula})", parallel(back.value, value)
    return Seen(f"{formula}, {where}, {_named('Rg', mesh.between(at.gate, GROUND))}", "", value)


def _named(symbol: str, resistance: Resistance | None) -> str:
    return f"{symbol} = {'0' if resistance is None else resistance.formula}"
