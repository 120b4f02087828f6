"""Mid-band gain and resistances by closed form: common source, degenerated or not, and follower."""

from __future__ import annotations

import math
from dataclasses import dataclass

from deckgen.circuit.gain import INFINITE_RESISTANCE, NO_GAIN
from deckgen.circuit.model import Resistor
from deckgen.circuit.ports import Ports
from deckgen.hand.formulas import gain as formulas
from deckgen.hand.formulas.gain import TEXTBOOK, parallel
from deckgen.hand.reduce import SignalNet
from deckgen.hand.roles import Role
from deckgen.hand.working.sheet import Sheet, shunt_formula


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
class _Surroundings:
    """Resistances [Ω] at the terminals; ``series`` lies between the EMF and the gate."""

    gate: float
    series: float
    source: float
    drain: float


def write_signal(sheet: Sheet, net: SignalNet, role: Role, g: Conductances, ports: Ports) -> float:
    """Steps for Rin, Rout, the gain and its parts; returns the gain from gate to output."""
    around = _Surroundings(
        gate=parallel(*(part.value for part in net.gate)),
        series=parallel(*(part.value for part in net.series)) if net.series else 0.0,
        source=0.0 if net.source_grounded else parallel(*(part.value for part in net.source)),
        drain=0.0 if net.drain_grounded else parallel(*(part.value for part in net.drain)),
    )
    load = ports.load
    attenuation = _write_input(sheet, net, around, ports.source_resistance)
    if role is Role.FOLLOWER:
        inner = _write_follower(sheet, net, g, around, load)
    else:
        inner = _write_common_source(sheet, net, g, around, load)
    gain = inner * attenuation
    at_gate = "RG" if ports.source_resistance is None else "Rin"
    if abs(gain) < NO_GAIN:
        return inner
    sheet.add(
        "Av",
        gain,
        "V/V",
        formula=f"A·{at_gate}/({at_gate}+{shunt_formula(net.series)})" if attenuation < 1.0 else "A",
        numbers=f"{inner:.4g}·{attenuation:.4g}" if attenuation < 1.0 else f"{inner:.4g}",
        source="voltage divider",
        quantity="Av",
        note=f"{20.0 * math.log10(abs(gain)):.2f} dB",
    )
    sheet.add(
        "Av.phase",
        180.0 if gain < 0.0 else 0.0,
        "deg",
        formula="sign of the gain",
        numbers=f"{gain:.4g}",
        source="mid-band",
        quantity="Av.phase",
    )
    return inner


def _write_input(sheet: Sheet, net: SignalNet, around: _Surroundings, declared: str | None) -> float:
    """Rin and the loss across the series resistance, which is part of Rin unless declared as the source's."""
    if math.isinf(around.gate):
        return 1.0
    value, formula, numbers = around.gate, shunt_formula(net.gate), sheet.shunt(net.gate)
    if declared is None and net.series:
        value += around.series
        formula = f"{shunt_formula(net.series)} + {formula}"
        numbers = f"{sheet.shunt(net.series)} + {numbers}"
    sheet.add(
        "Rin",
        value,
        "Ω",
        formula=formula,
        numbers=numbers,
        source="parallel resistors",
        quantity="Rin" if value < INFINITE_RESISTANCE else None,
    )
    return around.gate / (around.gate + around.series)


def _write_common_source(
    sheet: Sheet, net: SignalNet, g: Conductances, around: _Surroundings, load: str | None
) -> float:
    into = formulas.drain_resistance(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_s=around.source)
    own = [part for part in net.drain if part.name != load]
    _write_output(sheet, own, into, "(ro + RS + (gm+gmb)·ro·RS)" if around.source > 0 else "ro")
    value = formulas.common_source_gain(
        gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_d=around.drain, r_s=around.source
    )
    if around.source > 0.0:
        formula = "-gm·RD/(1 + (gm+gmb)·RS + (RD+RS)/ro)"
        numbers = (
            f"gm+gmb = {sheet.number(g.gm + g.active_gmb, 'S')}, RS = {sheet.number(around.source, 'Ω')}, "
        )
    else:
        formula, numbers = "-gm·(ro∥RD)", f"gm = {sheet.number(g.gm, 'S')}, "
    numbers += f"ro = {sheet.number(g.ro, 'Ω')}, RD = {sheet.shunt(net.drain)}"
    return sheet.add("A", value, "V/V", formula=formula, numbers=numbers, source=TEXTBOOK)


def _write_follower(
    sheet: Sheet, net: SignalNet, g: Conductances, around: _Surroundings, load: str | None
) -> float:
    into = formulas.source_resistance(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_d=0.0)
    own = [part for part in net.source if part.name != load]
    _write_output(sheet, own, into, "1/(gm+gmb+1/ro)")
    value = formulas.follower_gain(gm=g.gm, gmb=g.active_gmb, ro=g.ro, r_s=around.source)
    return sheet.add(
        "A",
        value,
        "V/V",
        formula="gm·RS/(1 + (gm+gmb)·RS + RS/ro)",
        numbers=(
            f"gm = {sheet.number(g.gm, 'S')}, gmb = {sheet.number(g.active_gmb, 'S')}, "
            f"ro = {sheet.number(g.ro, 'Ω')}, RS = {sheet.shunt(net.source)}"
        ),
        source=TEXTBOOK,
    )


def _write_output(sheet: Sheet, own: list[Resistor], into: float, formula: str) -> None:
    """Rout: the stage's own resistors in parallel with the transistor, the declared load left out."""
    value = parallel(into, *(part.value for part in own))
    if math.isinf(value):
        return
    texts = [shunt_formula(own)] if own else []
    numbers = [sheet.shunt(own)] if own else []
    sheet.add(
        "Rout",
        value,
        "Ω",
        formula="∥".join([*texts, formula]),
        numbers=" ∥ ".join([*numbers, sheet.number(into, "Ω")]),
        source=TEXTBOOK,
        quantity="Rout" if value < INFINITE_RESISTANCE else None,
    )
