"""The resistance that a capacitance sees between two nodes of a single-transistor stage, in closed form."""

from __future__ import annotations

import math
from dataclasses import dataclass

from deckgen.circuit.model import GROUND, Mosfet
from deckgen.hand.formulas import frequency, quiet_gate
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
    if not mesh.neighbours(node) <= {GROUND, terminal}:
        return None
    outer = mesh.between(node, GROUND)
    if terminal is None:
        return None if outer is None else _resistor(sheet, outer)
    if not mesh.neighbours(terminal) <= {GROUND, node}:
        return None
    into = _into(mesh, at, terminal)
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


def _to_ground(mesh: Mesh, node: str) -> float | None:
    """Resistance from a terminal to ground [Ω], None where it is connected with something else as well."""
    if node == GROUND:
        return 0.0
    return value_of(mesh.between(node, GROUND)) if mesh.neighbours(node) <= {GROUND} else None


def _three(mesh: Mesh, at: Terminals) -> tuple[float, float, float] | None:
    """RG, RS, RD where the terminals are connected with ground alone, RG and RD finite."""
    found = [_to_ground(mesh, node) for node in (at.gate, at.source, at.drain)]
    known = [each for each in found if each is not None and math.isfinite(each)]
    if len(known) < 3:
        return None
    r_g, r_s, r_d = known
    return r_g, r_s, r_d


def _gate_source(mesh: Mesh, at: Terminals) -> Seen | None:
    """What Cgs sees: ro and gmb, put in as equivalents of RS and gm, are taken in exactly."""
    around = _three(mesh, at)
    if around is None or at.tied:
        return None
    (r_g, r_s, r_d), g = around, at.g
    beside = parallel(r_s, source_resistance(gm=0.0, gmb=g.active_gmb, ro=g.ro, r_d=r_d))
    value = frequency.gate_source_resistance(gm=g.gm / (1.0 + r_d / g.ro), r_g=r_g, r_s=beside)
    named = _named("RG", mesh.between(at.gate, GROUND))
    if r_d > 0.0:
        return Seen(f"(RG+R)/(1+gm·R/(1+RD/ro)), R = RS∥(RD+ro)/(1+gmb·ro), {named}", "", value)
    return Seen(f"(RG+RS)/(1+gm·RS), RS∥1/gmb∥ro, {named}", "", value)


def _gate_drain(mesh: Mesh, at: Terminals) -> Seen | None:
    """What Cgd sees, with the effective gm and the resistance into the drain of a degenerated stage."""
    around = _three(mesh, at)
    if around is None or at.tied:
        return None
    (r_g, r_s, r_d), g = around, at.g
    out = parallel(r_d, drain_resistance(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_s=r_s))
    whole = effective_transconductance(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_s=r_s)
    value = frequency.gate_drain_resistance(gm=whole, r_g=r_g, r_d=out, r_s=0.0)
    if r_s > 0.0:
        return Seen("RG+R+Gm·RG·R, R = RD∥Rd, Gm = gm/(1+(gm+gmb+1/ro)·RS)", "", value)
    return Seen(f"RG+R+gm·RG·R, R = RD∥ro, {_named('RG', mesh.between(at.gate, GROUND))}", "", value)


def _named(symbol: str, resistance: Resistance | None) -> str:
    return f"{symbol} = {'0' if resistance is None else resistance.formula}"
