"""Mid-band gain and resistances by closed form, for every role of a single transistor.

Between EMF and output lie three factors: what the source resistance and the resistors behind it leave of
the signal, the transistor's own gain from its entry to its exit, and what the way out leaves.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from deckgen.circuit.gain import INFINITE_RESISTANCE, NO_GAIN, NO_TRANSRESISTANCE
from deckgen.hand.formulas.gain import parallel
from deckgen.hand.reduce.resistance import Resistance, in_parallel, value_of
from deckgen.hand.reduce.signal import SignalNet, Way
from deckgen.hand.working.inner import Inner, inner_of
from deckgen.hand.working.into import Conductances, Into
from deckgen.hand.working.sheet import Sheet, where

DIVIDER = "voltage divider"


@dataclass(frozen=True, slots=True)
class Share:
    """A factor that a way leaves of the signal, as formula and number: V/V, of a current Ω."""

    value: float
    formula: str
    meanings: tuple[str, ...] = ()


def write_signal(sheet: Sheet, net: SignalNet, g: Conductances) -> float | None:
    """Steps for the gain and its parts, Rin and Rout; returns the gain from gate to drain or source.

    None, and no step, where the transistor's terminals are connected in a way without closed form.
    """
    inner = inner_of(net, g)
    if inner is None:
        return None
    sheet.add(
        "A",
        inner.gain,
        "V/V",
        formula=inner.formula,
        numbers=inner.numbers(sheet.number),
        source=inner.source,
        note=inner.remark or f"from {net.entry} to {net.exit}",
    )
    before, *behind = (*_write_input(sheet, net, inner), _way_out_share(net))
    _write_output(sheet, net, inner)
    _write_gain(sheet, net, inner, before, behind)
    return inner.gain


def _write_gain(sheet: Sheet, net: SignalNet, inner: Inner, before: Share, behind: Sequence[Share]) -> None:
    """Avi from the input node, then Av or Rm from the source, where there is a gain."""
    at_input = inner.gain * math.prod(share.value for share in behind)
    if not abs(at_input) >= NO_GAIN:
        return
    told = [share for share in behind if share.formula]
    first, value = "A", inner.gain
    if before.formula:
        formula, numbers = _product(sheet, first, value, told)
        source = DIVIDER if told else inner.source
        sheet.add("Avi", at_input, "V/V", formula=formula, numbers=numbers, source=source, quantity="Avi")
        first, value, told = "Avi", at_input, [before]
    gain = net.sign * at_input * before.value
    name, floor = ("Rm", NO_TRANSRESISTANCE) if net.current_driven else ("Av", NO_GAIN)
    if not abs(gain) >= floor:
        return
    formula, numbers = _product(sheet, first, value, told)
    notes = [] if net.current_driven else [f"{20.0 * math.log10(abs(gain)):.2f} dB"]
    if net.sign < 0.0:
        formula, numbers = f"-{formula}", f"-({numbers})"
        notes.append("the source is turned round")
    sheet.add(
        name,
        gain,
        "Ω" if net.current_driven else "V/V",
        formula=formula,
        numbers=numbers,
        source=("Ohm" if net.current_driven else DIVIDER) if told else inner.source,
        quantity=name,
        note=" ".join(notes) or None,
    )
    sheet.add(
        f"{name}.phase",
        180.0 if gain < 0.0 else 0.0,
        "deg",
        formula="sign of the gain",
        numbers=sheet.plain(gain),
        source="mid-band",
        quantity=f"{name}.phase",
    )


def _product(sheet: Sheet, first: str, value: float, shares: Sequence[Share]) -> tuple[str, str]:
    """Formula and numbers of a gain times what is left of it."""
    formula = "·".join([first, *(share.formula for share in shares)])
    formula = where(formula, (meaning for share in shares for meaning in share.meanings))
    return formula, "·".join(sheet.plain(each) for each in (value, *(share.value for share in shares)))


def _write_input(sheet: Sheet, net: SignalNet, inner: Inner) -> tuple[Share, Share]:
    """Rin, and what is lost before it and between it and the terminal."""
    way = net.way_in
    at_terminal = parallel(value_of(way.inner), inner.entry.value)
    behind = _past(way, at_terminal)
    r_in = parallel(value_of(way.outer), behind)
    if math.isfinite(r_in):
        formula, numbers = seen(sheet, way.outer, way.series, way.inner, inner.entry)
        sheet.add(
            "Rin",
            r_in,
            "Ω",
            formula=where(formula, inner.entry.meanings),
            numbers=numbers,
            source=inner.source if math.isfinite(inner.entry.value) else "resistors",
            quantity="Rin" if r_in < INFINITE_RESISTANCE else None,
        )
    first, second = _before(net, r_in), Share(1.0, "")
    if way.series is not None and math.isfinite(at_terminal):
        own, _ = seen(sheet, None, None, way.inner, inner.entry)
        formula = f"Ri/(Ri+{way.series.formula})"
        second = Share(at_terminal / behind, formula, (f"Ri = {own}", *inner.entry.meanings))
    return first, second


def _before(net: SignalNet, r_in: float) -> Share:
    """What the source leaves at the input node: a share of its EMF, or volts for each ampere."""
    declared = net.source_resistance
    if net.current_driven:
        together = parallel(r_in, value_of(declared))
        return Share(together, "Rin" if declared is None else f"(Rin∥{declared.formula})")
    if declared is None or math.isinf(r_in):
        return Share(1.0, "")
    return Share(r_in / (r_in + declared.value), f"Rin/(Rin+{declared.formula})")


def _past(way: Way, at_terminal: float) -> float:
    """Resistance from the outer end into the way, its own shunt left out [Ω]."""
    return at_terminal if way.series is None else way.series.value + at_terminal


def _way_out_share(net: SignalNet) -> Share:
    way = net.way_out
    beyond = in_parallel(way.outer, net.load)
    if way.series is None or beyond is None:
        return Share(1.0, "")
    formula = f"{beyond.factor}/({beyond.formula}+{way.series.formula})"
    return Share(beyond.value / (beyond.value + way.series.value), formula)


def _write_output(sheet: Sheet, net: SignalNet, inner: Inner) -> None:
    """Rout: the stage's own resistors in parallel with the transistor, the declared load left out."""
    way = net.way_out
    own = in_parallel(way.inner, inner.beside_exit)
    value = parallel(value_of(way.outer), _past(way, parallel(value_of(own), inner.exit.value)))
    if math.isinf(value):
        return
    formula, numbers = seen(sheet, way.outer, way.series, own, inner.exit)
    sheet.add(
        "Rout",
        value,
        "Ω",
        formula=where(formula, inner.exit.meanings),
        numbers=numbers,
        source=inner.source,
        quantity="Rout" if value < INFINITE_RESISTANCE else None,
    )


def seen(
    sheet: Sheet,
    outer: Resistance | None,
    series: Resistance | None,
    at_terminal: Resistance | None,
    into: Into,
) -> tuple[str, str]:
    """Formula and numbers of a resistance: outer ∥ (series + at the terminal ∥ into the transistor)."""
    formula, numbers = _at_terminal(sheet, at_terminal, into)
    if outer is not None and not formula:  # nothing behind the series resistance
        return outer.formula, outer.numbers(sheet.number)
    if series is not None:
        formula = f"{series.formula} + {formula}"
        numbers = f"{series.numbers(sheet.number)} + {numbers}"
    if outer is None:
        return formula, numbers
    if series is not None:
        formula, numbers = f"({formula})", f"({numbers})"
    return f"{outer.branch}∥{formula}", f"{outer.branch_numbers(sheet.number)} ∥ {numbers}"


def _at_terminal(sheet: Sheet, own: Resistance | None, into: Into) -> tuple[str, str]:
    if math.isinf(into.value):
        return ("", "") if own is None else (own.formula, own.numbers(sheet.number))
    number = sheet.number(into.value, "Ω")
    if own is None:
        return into.formula, number
    return f"{own.branch}∥{into.formula}", f"{own.branch_numbers(sheet.number)} ∥ {number}"
