"""fL and fH by time constants, one step a capacitance; Miller's estimate and the exact value beside them."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

from deckgen.hand import bandwidth
from deckgen.hand.bandwidth import TimeConstant, without_loops
from deckgen.hand.formulas import frequency as formulas
from deckgen.hand.formulas.frequency import DOMINANT_POLE, MILLER, TIME_CONSTANTS
from deckgen.hand.network import Treatment
from deckgen.hand.prediction import MidBand
from deckgen.hand.reduce.signal import SignalNet, signal_graph
from deckgen.hand.roles import Role
from deckgen.hand.smallsignal import SmallSignal, explicit_capacitors
from deckgen.hand.working.into import Conductances, Named
from deckgen.hand.working.seen import Seen, seen_between, terminals_of
from deckgen.hand.working.sheet import Sheet, where

_MILLER_FAR = 0.1  # a Miller estimate further than this from the exact value gets a note
_BY_NODES = "nodal"


@dataclass(frozen=True, slots=True)
class _Found:
    """A capacitance with what it sees; ``closed`` is None where that is a nodal solution."""

    constant: TimeConstant
    closed: Seen | None

    @property
    def resistance(self) -> float:
        """What it sees [Ω]."""
        return self.constant.resistance if self.closed is None else self.closed.value


def write_lower_edge(
    sheet: Sheet, small: SmallSignal, g: Conductances, treatments: Mapping[str, Treatment], mid: MidBand
) -> None:
    """Write fL from short-circuit time constants, one step a capacitor."""
    found = []
    nodes = {part.name: part.nodes for part in explicit_capacitors(small.circuit)}
    for constant in bandwidth.short_circuit_constants(small, treatments):
        others = without_loops(small.circuit, {**treatments, constant.name: Treatment.OPEN})
        found.append(_Found(constant, _seen(sheet, small, g, others, nodes[constant.name])))
    if not found or not all(0.0 < one.resistance < math.inf for one in found):
        return
    poles = [formulas.pole_frequency(r=one.resistance, c=one.constant.capacitance) for one in found]
    for one, pole in zip(found, poles, strict=True):
        name, value = one.constant.shown, sheet.number(one.resistance, "Ω")
        parts = "" if one.closed is None else one.closed.numbers
        told = f"R = {parts} = {value}" if parts and parts != value else f"R = {value}"
        sheet.add(
            f"f({name})",
            pole,
            "Hz",
            formula=_with(f"1/(2π·{_factor(name)}·R)", one),
            numbers=f"{told}, {name} = {sheet.number(one.constant.capacitance, 'F')}",
            source=_source(one),
        )
    sheet.add(
        "fL",
        math.fsum(poles),
        "Hz",
        formula="Σ f(C), each with the others shorted",
        numbers=" + ".join(sheet.number(pole, "Hz") for pole in poles),
        source=TIME_CONSTANTS,
        quantity="fL" if all(one.closed for one in found) else None,
        note=_beside(sheet, mid.exact_f_l, DOMINANT_POLE.note(max(poles) / math.fsum(poles))),
    )


def _seen(
    sheet: Sheet,
    small: SmallSignal,
    g: Conductances,
    treatments: Mapping[str, Treatment],
    nodes: tuple[str, str],
) -> Seen | None:
    """What a capacitance between two nodes sees in closed form."""
    graph = signal_graph(small.circuit, small.ports, treatments, silent=True)
    if graph is None:
        return None
    (device,) = small.circuit.transistors
    first, second = (graph.of(node) for node in nodes)
    return seen_between(sheet, graph, terminals_of(graph, device, g), first, second)


def _factor(name: str) -> str:
    """Name of a capacitor, or of several in parallel, as it stands in a product."""
    return f"({name})" if "+" in name else name


def _with(formula: str, one: _Found) -> str:
    """A formula in R, and what the capacitance sees as R."""
    if one.closed is None:
        return where(formula, [f"R {_BY_NODES}"])
    return where(formula, [f"R = {one.closed.formula}", *one.closed.meanings])


def _source(one: _Found) -> str:
    return f"{TIME_CONSTANTS}; R {_BY_NODES}" if one.closed is None else TIME_CONSTANTS


def _beside(sheet: Sheet, exact: float | None, note: str | None) -> str:
    text = f"exact curve: {sheet.number(exact, 'Hz')}" if exact is not None else "exact curve: none"
    return f"{text}; {note}" if note else text


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
    shorted = without_loops(small.circuit, treatments)
    nodes = {part.name: part.nodes for part in explicit_capacitors(small.circuit)}
    nodes |= {name: pair for name, pair, _ in small.device_capacitors}
    found = [
        _Found(constant, _seen(sheet, small, g, shorted, nodes[constant.name]))
        for constant in bandwidth.open_circuit_constants(small, treatments)
        if abs(constant.resistance) > 0.0
    ]
    taus = [one.resistance * one.constant.capacitance for one in found]
    total = math.fsum(taus)
    if not 0.0 < total < math.inf:
        return
    for one, tau in zip(found, taus, strict=True):
        shown = one.constant.shown
        sheet.add(
            f"τ({shown})",
            tau,
            "s",
            formula=_with(f"{_factor(shown)}·R", one),
            numbers=f"{sheet.number(one.constant.capacitance, 'F')}·{sheet.number(one.resistance, 'Ω')}",
            source=_source(one),
        )
    sheet.add(
        "fH",
        1.0 / (2.0 * math.pi * total),
        "Hz",
        formula="1/(2π·Στ)",
        numbers=f"Στ = {sheet.number(total, 's')}",
        source=TIME_CONSTANTS,
        quantity="fH" if all(one.closed for one in found) else None,
        note=_beside(sheet, mid.exact_f_h, DOMINANT_POLE.note(max(taus) / total)),
    )
    if role is Role.COMMON_SOURCE and net.feedback is None:
        _write_miller(sheet, small, net, mid, inner_gain)


def _write_miller(sheet: Sheet, small: SmallSignal, net: SignalNet, mid: MidBand, inner_gain: float) -> None:
    """Miller's estimate where the gate is driven through a resistance."""
    values = {name.partition("(")[0]: value for name, _, value in small.device_capacitors}
    c_gs, c_gd = values.get("cgs", 0.0), values.get("cgd", 0.0)
    at_gate = Named("RG", net.driven_from)
    if not 0.0 < at_gate.value < math.inf or not (c_gs + c_gd) > 0.0:
        return
    estimate = formulas.miller_bandwidth(c_gs=c_gs, c_gd=c_gd, gain=inner_gain, r_g=at_gate.value)
    note = None
    if mid.exact_f_h is not None and abs(estimate / mid.exact_f_h - 1.0) > _MILLER_FAR:
        note = f"exact curve: {sheet.number(mid.exact_f_h, 'Hz')}; out of its range, no dominant input pole"
    sheet.add(
        "fH (Miller)",
        estimate,
        "Hz",
        formula=f"1/(2π·{at_gate.symbol}·(Cgs + Cgd·(1-A)))",
        numbers=(
            f"{at_gate.told(sheet.number)}, Cgs = {sheet.number(c_gs, 'F')}, "
            f"Cgd = {sheet.number(c_gd, 'F')}, A = {sheet.plain(inner_gain)}"
        ),
        source=MILLER,
        note=note,
    )
