"""fL and fH by time constants in closed form, Miller's approximation and the exact value beside them."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace

from deckgen.circuit.model import GROUND, Capacitor, display
from deckgen.hand.bandwidth import without_loops
from deckgen.hand.formulas import frequency as formulas
from deckgen.hand.formulas.frequency import DOMINANT_POLE, MILLER, TIME_CONSTANTS
from deckgen.hand.formulas.gain import (
    drain_resistance,
    effective_transconductance,
    parallel,
    source_resistance,
)
from deckgen.hand.network import Treatment
from deckgen.hand.prediction import MidBand
from deckgen.hand.reduce import EMF, SignalGraph, SignalNet, signal_graph
from deckgen.hand.roles import Role
from deckgen.hand.smallsignal import SmallSignal, explicit_capacitors
from deckgen.hand.working.sheet import Sheet, shunt_formula
from deckgen.hand.working.signal import Conductances

_MILLER_FAR = 0.1  # a Miller estimate further than this from the exact value gets a note


@dataclass(frozen=True, slots=True)
class _Seen:
    """Resistance at one end of a capacitor, as formula, numbers and value [Ω]."""

    formula: str
    numbers: str
    value: float


def write_lower_edge(
    sheet: Sheet, small: SmallSignal, g: Conductances, treatments: Mapping[str, Treatment], mid: MidBand
) -> None:
    """Write fL from short-circuit time constants, one step a capacitor; no step where a form is missing."""
    parts = [p for p in explicit_capacitors(small.circuit) if treatments[p.name] is Treatment.SHORT]
    seen = _all_found(_seen_by(sheet, part, small, g, treatments) for part in parts)
    if not parts or seen is None:
        return
    poles = []
    for part, one in zip(parts, seen, strict=True):
        name = display(part.name)
        pole = formulas.pole_frequency(r=one.value, c=part.value)
        poles.append(pole)
        sheet.add(
            f"f({name})",
            pole,
            "Hz",
            formula=f"1/(2π·{name}·R), R = {one.formula}",
            numbers=(
                f"R = {one.numbers} = {sheet.number(one.value, 'Ω')}, "
                f"{name} = {sheet.number(part.value, 'F')}"
            ),
            source=TIME_CONSTANTS,
        )
    note = DOMINANT_POLE.note(max(poles) / sum(poles))
    sheet.add(
        "fL",
        sum(poles),
        "Hz",
        formula="Σ f(C), each with the others shorted",
        numbers=" + ".join(sheet.number(pole, "Hz") for pole in poles),
        source=TIME_CONSTANTS,
        quantity="fL",
        note=_beside(sheet, mid.exact_f_l, note),
    )


def _all_found(seen: Iterable[_Seen | None]) -> list[_Seen] | None:
    """All of them, or None where one is missing."""
    found = list(seen)
    return None if None in found else [one for one in found if one is not None]


def _beside(sheet: Sheet, exact: float | None, note: str | None) -> str:
    text = f"exact curve: {sheet.number(exact, 'Hz')}" if exact is not None else "exact curve: none"
    return f"{text}; {note}" if note else text


def _seen_by(
    sheet: Sheet, part: Capacitor, small: SmallSignal, g: Conductances, treatments: Mapping[str, Treatment]
) -> _Seen | None:
    """Resistance that a coupling or bypass capacitor sees, from what hangs on its two ends."""
    others = without_loops(small.circuit, {**treatments, part.name: Treatment.OPEN})
    graph = signal_graph(small.circuit, small.ports, others)
    if graph is None:
        return None
    ends = [graph.of(node) for node in part.nodes]
    (device,) = small.circuit.transistors
    drain, _, source, bulk = (graph.of(node) for node in device.nodes)
    if set(ends) == {drain, source} or len(set(ends)) < 2:
        return None
    # A source that is at signal ground only through this capacitor moves against the bulk now.
    g = replace(g, bulk_acts=bulk != source)
    found = _all_found(
        _end(sheet, graph, node, drain, source, g) for node in ends if node not in (GROUND, EMF)
    )
    if found is None:
        return None
    return _Seen(
        " + ".join(one.formula for one in found),
        " + ".join(one.numbers for one in found),
        sum(one.value for one in found),
    )


def _end(
    sheet: Sheet, graph: SignalGraph, node: str, drain: str, source: str, g: Conductances
) -> _Seen | None:
    """Resistance from one end to signal ground; the EMF is at ground, the gate takes no current."""
    if not graph.neighbours(node) <= {GROUND, EMF}:
        return None
    parts = (*graph.between(node, GROUND), *graph.between(node, EMF))
    formulas_, numbers, values = [], [], [part.value for part in parts]
    if parts:
        formulas_.append(shunt_formula(parts))
        numbers.append(sheet.shunt(parts))
    if node == drain:
        values.append(
            drain_resistance(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_s=_shunt_to_ground(graph, source))
        )
        formulas_.append("Rd")
    elif node == source:
        values.append(
            source_resistance(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_d=_shunt_to_ground(graph, drain))
        )
        formulas_.append("Rs")
    if node in (drain, source) and math.isfinite(values[-1]):
        numbers.append(sheet.number(values[-1], "Ω"))
    return _Seen("∥".join(formulas_), " ∥ ".join(numbers), parallel(*values))


def _shunt_to_ground(graph: SignalGraph, node: str) -> float:
    if node == GROUND:
        return 0.0
    return parallel(*(part.value for part in graph.between(node, GROUND)))


def write_upper_edge(
    sheet: Sheet,
    small: SmallSignal,
    net: SignalNet,
    role: Role,
    g: Conductances,
    treatments: Mapping[str, Treatment],
    mid: MidBand,
    inner_gain: float,
) -> None:
    """Write fH from open-circuit time constants, one step a capacitance, and Miller for a common source."""
    graph = signal_graph(small.circuit, small.ports, without_loops(small.circuit, treatments))
    if graph is None:
        return
    table = _pair_resistances(graph, net, role, g)
    loads = [
        (display(p.name), p.nodes, p.value)
        for p in explicit_capacitors(small.circuit)
        if treatments[p.name] is Treatment.OPEN
    ]
    device = [(name, nodes, value) for name, nodes, value in small.device_capacitors]
    constants = []
    for name, nodes, value in (*loads, *device):
        pair = frozenset(graph.of(node) for node in nodes)
        if len(pair) == 1:
            continue
        if pair not in table:
            return
        constants.append((name, value, table[pair]))
    taus = []
    for name, value, one in constants:
        shown = _capacitance_name(name)
        taus.append(one.value * value)
        sheet.add(
            f"τ({shown})",
            taus[-1],
            "s",
            formula=f"{shown}·R, R = {one.formula}",
            numbers=f"{sheet.number(value, 'F')}·{sheet.number(one.value, 'Ω')}",
            source=TIME_CONSTANTS,
        )
    total = sum(taus)
    if not total > 0.0:
        return
    note = DOMINANT_POLE.note(max(taus) / total)
    sheet.add(
        "fH",
        1.0 / (2.0 * math.pi * total),
        "Hz",
        formula="1/(2π·Στ)",
        numbers=f"Στ = {sheet.number(total, 's')}",
        source=TIME_CONSTANTS,
        quantity="fH",
        note=_beside(sheet, mid.exact_f_h, note),
    )
    if role is Role.COMMON_SOURCE:
        _write_miller(sheet, small, net, mid, inner_gain)


def _capacitance_name(name: str) -> str:
    kind, _, of = name.partition("(")
    return f"{kind.capitalize()}({of.upper()}" if of else name


def _pair_resistances(
    graph: SignalGraph, net: SignalNet, role: Role, g: Conductances
) -> dict[frozenset[str], _Seen]:
    """Open-circuit resistances between joined nodes, by node pair."""
    drain, gate, source, _ = (graph.of(node) for node in net.device.nodes)
    r_g = 0.0 if gate == EMF else parallel(*(p.value for p in (*net.gate, *net.series)))
    r_s = 0.0 if net.source_grounded else parallel(*(p.value for p in net.source))
    rg_text = "0" if gate == EMF else shunt_formula((*net.gate, *net.series))
    gate_ground = {frozenset({gate, GROUND}): _Seen(f"RG = {rg_text}", "", r_g)}
    if role is Role.FOLLOWER:
        # With the drain at ground, gmb and ro lie from source to ground: they join RS exactly.
        around = parallel(r_s, source_resistance(gm=0.0, gmb=g.active_gmb, ro=g.ro, r_d=0.0))
        out = parallel(r_s, source_resistance(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_d=0.0))
        see_gs = formulas.gate_source_resistance(gm=g.gm, r_g=r_g, r_s=around)
        return gate_ground | {
            frozenset({gate, source}): _Seen(f"(RG+RS)/(1+gm·RS), RG = {rg_text}, RS∥1/gmb∥ro", "", see_gs),
            frozenset({source, GROUND}): _Seen("RS∥1/(gm+gmb+1/ro)", "", out),
        }
    r_d = parallel(*(p.value for p in net.drain))
    out = parallel(r_d, drain_resistance(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_s=r_s))
    # The two formulas neglect ro and gmb; put in as equivalents of RS, gm and RD they are taken in exactly.
    around = parallel(r_s, source_resistance(gm=0.0, gmb=g.active_gmb, ro=g.ro, r_d=r_d))
    see_gs = formulas.gate_source_resistance(gm=g.gm / (1.0 + r_d / g.ro), r_g=r_g, r_s=around)
    whole = effective_transconductance(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_s=r_s)
    see_gd = formulas.gate_drain_resistance(gm=whole, r_g=r_g, r_d=out, r_s=0.0)
    gs_text, gd_text = "RG", "RG+R+gm·RG·R, R = RD∥ro"
    if r_s > 0.0:
        gs_text = "(RG+R)/(1+gm·R/(1+RD/ro)), R = RS∥(RD+ro)/(1+gmb·ro)"
        gd_text = "RG+R+Gm·RG·R, R = RD∥Rd, Gm = gm/(1+(gm+gmb+1/ro)·RS)"
    return gate_ground | {
        frozenset({gate, source}): _Seen(f"{gs_text}, RG = {rg_text}", "", see_gs),
        frozenset({gate, drain}): _Seen(gd_text, "", see_gd),
        frozenset({drain, GROUND}): _Seen("RD∥Rd", "", out),
    }


def _write_miller(sheet: Sheet, small: SmallSignal, net: SignalNet, mid: MidBand, inner_gain: float) -> None:
    """Miller's estimate where the gate is driven through a resistance."""
    values = {name.partition("(")[0]: value for name, _, value in small.device_capacitors}
    r_g = parallel(*(part.value for part in (*net.gate, *net.series)))
    c_gs, c_gd = values.get("cgs", 0.0), values.get("cgd", 0.0)
    if not net.series or not (c_gs + c_gd) > 0.0:
        return
    estimate = formulas.miller_bandwidth(c_gs=c_gs, c_gd=c_gd, gain=inner_gain, r_g=r_g)
    note = None
    if mid.exact_f_h is not None and abs(estimate / mid.exact_f_h - 1.0) > _MILLER_FAR:
        note = f"exact curve: {sheet.number(mid.exact_f_h, 'Hz')}; out of its range, no dominant input pole"
    sheet.add(
        "fH (Miller)",
        estimate,
        "Hz",
        formula="1/(2π·RG·[Cgs + Cgd(1-A)])",
        numbers=(
            f"RG = {sheet.number(r_g, 'Ω')}, Cgs = {sheet.number(c_gs, 'F')}, "
            f"Cgd = {sheet.number(c_gd, 'F')}, A = {inner_gain:.4g}"
        ),
        source=MILLER,
        note=note,
    )
