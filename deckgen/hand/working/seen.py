"""The resistance that a capacitance sees between two nodes of a single-transistor stage, in closed form."""

from __future__ import annotations

import math
from collections.abc import Set as AbstractSet
from dataclasses import dataclass

from deckgen.circuit.model import GROUND, Mosfet
from deckgen.hand.formulas import frequency
from deckgen.hand.formulas.gain import effective_transconductance, parallel, source_resistance
from deckgen.hand.reduce.mesh import Mesh
from deckgen.hand.reduce.resistance import NO_RESISTANCE, Resistance, value_of
from deckgen.hand.reduce.signal import SignalGraph
from deckgen.hand.working.into import (
    Conductances,
    Into,
    Named,
    into_diode,
    into_drain,
    into_source,
    meanings,
)
from deckgen.hand.working.loop import Loop
from deckgen.hand.working.sheet import Sheet
from deckgen.hand.working.signal import seen


@dataclass(frozen=True, slots=True)
class Seen:
    """A resistance between two nodes, as formula, numbers and value [Ω], and what its symbols stand for."""

    formula: str
    numbers: str
    value: float
    meanings: tuple[str, ...] = ()


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
        tuple(meaning for each in one for meaning in each.meanings),
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
    across = {at.gate, at.drain} if back is not None else set[str]()
    if not _others(mesh, node, across) <= {GROUND, terminal}:
        return None
    outer = mesh.between(node, GROUND)
    if terminal is None:
        return None if outer is None else Seen(outer.formula, outer.numbers(sheet.number), outer.value)
    if not _others(mesh, terminal, across) <= {GROUND, node}:
        return None
    into = _into(mesh, at, terminal) if back is None else _into_loop(mesh, at, terminal, back, node)
    if into is None:
        return None
    own, series = mesh.between(terminal, GROUND), mesh.between(node, terminal)
    total = parallel(value_of(own), into.value)
    if series is None:
        outer = None  # node and terminal are one
    else:
        total = parallel(value_of(outer), series.value + total)
    if math.isinf(total):
        return None
    formula, numbers = seen(sheet, outer, series, own, into)
    return Seen(formula, numbers, total, into.meanings)


def _others(mesh: Mesh, node: str, across: AbstractSet[str]) -> frozenset[str]:
    """Neighbours of a node; a resistance across gate and drain is reckoned with elsewhere."""
    return mesh.neighbours(node) - across if node in across else mesh.neighbours(node)


def _feedback(mesh: Mesh, at: Terminals) -> Resistance | None:
    """The resistance between gate and drain, where both are signal nodes."""
    return None if GROUND in (at.gate, at.drain) else mesh.between(at.gate, at.drain)


def _into(mesh: Mesh, at: Terminals, terminal: str) -> Into | None:
    """Resistance into a terminal, the others at what hangs on them; None without closed form."""
    r_s, r_g, r_d = (
        _to_ground(mesh, letters, node)
        for letters, node in (("RS", at.source), ("RG", at.gate), ("RD", at.drain))
    )
    if at.tied:
        if terminal == at.source or r_s is None or math.isinf(r_s.value):
            return None
        return into_diode(at.g, r_s)
    if terminal == at.gate:
        return Into(math.inf, "")
    if r_g is None:
        return None
    if terminal == at.drain:
        return None if r_s is None else into_drain(at.g, r_s)
    return None if r_d is None else into_source(at.g, r_d)


def _into_loop(mesh: Mesh, at: Terminals, terminal: str, back: Resistance, node: str) -> Into | None:
    """Resistance into gate or drain with a resistor between them."""
    r_s = _to_ground(mesh, "RS", at.source)
    other = {at.gate: at.drain, at.drain: at.gate}.get(terminal)
    if r_s is None or math.isinf(r_s.value) or other is None:
        return None
    if not mesh.neighbours(other) <= {GROUND, terminal}:
        return None
    r_d, r_g = (Named(letters, mesh.between(n, GROUND)) for letters, n in (("RD", at.drain), ("RG", at.gate)))
    loop = Loop(at.g, Named("RF", back), r_s, r_d, r_g)
    if terminal == at.drain:
        return loop.into_drain
    into = loop.into_gate
    if into is None:
        return None
    formula = f"{loop.r_f.symbol}/(1-AF)"
    return Into(into.value, formula, loop.named, (f"AF = {loop.formula}", *loop.defined))


def _to_ground(mesh: Mesh, letters: str, node: str, across: AbstractSet[str] = frozenset()) -> Named | None:
    """Resistance from a terminal to ground; None where it is connected with something else as well."""
    if node == GROUND:
        return Named(letters, NO_RESISTANCE)
    if not mesh.neighbours(node) - across <= {GROUND}:
        return None
    return Named(letters, mesh.between(node, GROUND))


def _three(
    mesh: Mesh, at: Terminals, *, across: Resistance | None = None
) -> tuple[Named, Named, Named] | None:
    """RG, RS, RD where the terminals are connected with ground alone, RG and RD finite.

    ``across`` is a resistance between gate and drain that is reckoned with elsewhere.
    """
    besides = {at.gate, at.drain} if across is not None else set[str]()
    r_g, r_d = _to_ground(mesh, "RG", at.gate, besides), _to_ground(mesh, "RD", at.drain, besides)
    r_s = _to_ground(mesh, "RS", at.source)
    if at.tied or r_g is None or r_s is None or r_d is None:
        return None
    return None if math.isinf(r_g.value) or math.isinf(r_d.value) else (r_g, r_s, r_d)


def _gate_source(mesh: Mesh, at: Terminals) -> Seen | None:
    """What Cgs sees: ro and gmb, put in as equivalents of RS and gm, are taken in exactly."""
    around = _three(mesh, at)
    if around is None:
        return None
    (r_g, r_s, r_d), g = around, at.g
    beside = parallel(r_s.value, source_resistance(gm=0.0, gmb=g.active_gmb, ro=g.ro, r_d=r_d.value))
    if math.isinf(beside):
        return None
    value = frequency.gate_source_resistance(gm=g.gm / (1.0 + r_d.value / g.ro), r_g=r_g.value, r_s=beside)
    if not r_s.value > 0.0:
        return Seen(_symbol(r_g), "", value, meanings(r_g))
    drain = f"/(1+{r_d.symbol}/ro)" if r_d.value > 0.0 else ""
    if g.active_gmb > 0.0:
        back = f"(1+{r_d.symbol}/ro)/(gmb+1/ro)" if r_d.value > 0.0 else "1/(gmb+1/ro)"
    else:
        back = f"({r_d.symbol}+ro)" if r_d.value > 0.0 else "ro"
    own = "" if r_s.resistance is None else f"{r_s.symbol}∥"
    top = f"({r_g.symbol}+RX)" if r_g.value > 0.0 else "RX"
    defined = (f"RX = {own}{back}", *meanings(*(one for one in around if one.value > 0.0)))
    return Seen(f"{top}/(1+gm·RX{drain})", "", value, defined)


def _gate_drain(mesh: Mesh, at: Terminals) -> Seen | None:
    """What Cgd sees, with the effective gm and the resistance into the drain of a degenerated stage."""
    feedback = _feedback(mesh, at)
    around = _three(mesh, at, across=feedback)
    if around is None or math.isinf(around[1].value):
        return None
    (r_g, r_s, r_d), g = around, at.g
    into = into_drain(g, r_s)
    whole = effective_transconductance(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_s=r_s.value)
    out = parallel(r_d.value, into.value)
    value = frequency.gate_drain_resistance(gm=whole, r_g=r_g.value, r_d=out, r_s=0.0)
    formula, defined = _symbol(r_g), list[str]()
    if r_d.value > 0.0:
        letter, defined = "gm", [f"RX = {r_d.symbol}∥{into.formula}"]
        if r_s.value > 0.0:
            letter = "Gm"
            defined.append(f"Gm = gm/(1+({g.total})·{r_s.symbol})")
        formula = f"{r_g.symbol}+RX+{letter}·{r_g.symbol}·RX" if r_g.value > 0.0 else "RX"
    if feedback is not None:
        formula, value = f"{feedback.branch}∥({formula})", parallel(feedback.value, value)
    named = meanings(*(one for one in around if one.value > 0.0))
    return Seen(formula, "", value, (*defined, *named))


def _symbol(resistance: Named) -> str:
    return resistance.symbol if resistance.value > 0.0 else "0"
