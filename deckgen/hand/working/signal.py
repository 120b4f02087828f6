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
from deckgen.hand.reduce.dc import GATE
from deckgen.hand.reduce.resistance import Resistance, in_parallel, value_of
from deckgen.hand.reduce.signal import SignalNet, Way
from deckgen.hand.working.inner import Conductances, Inner, inner_of
from deckgen.hand.working.sheet import Sheet

DIVIDER = "voltage divider"


@dataclass(frozen=True, slots=True)
class Share:
    """A factor that a way leaves of the signal, as formula and number: V/V, of a current Ω."""

    value: float
    formula: str


def write_signal(sheet: Sheet, net: SignalNet, g: Conductances) -> float | None:
    """Steps for Rin, Rout, the gain and its parts; returns the gain from gate to drain or source.

    None, and no step, where the transistor's terminals are connected in a way without closed form.
    """
    inner = inner_of(net, g)
    if inner is None:
        return None
    shares = [*_write_input(sheet, net, inner), _way_out_share(net)]
    _write_output(sheet, net, inner)
    sheet.add(
        "A",
        inner.gain,
        "V/V",
        formula=inner.formula,
        numbers=inner.numbers(sheet.number),
        source=inner.source,
        note=f"from {net.entry} to {net.exit}" if net.entry != GATE else None,
    )
    _write_gain(sheet, net, inner, shares)
    return inner.gain


def _write_gain(sheet: Sheet, net: SignalNet, inner: Inner, shares: Sequence[Share]) -> None:
    """Avi from the input node, then Av or Rm from the source, where there is a gain."""
    before, *behind = shares
    at_input = inner.gain * math.prod(share.value for share in behind)
    if not abs(at_input) >= NO_GAIN:
        return
    told = [share for share in behind if share.value < 1.0]
    if before.formula:
        formula, numbers = _product("A", inner.gain, told)
        source = DIVIDER if told else inner.source
        sheet.add("Avi", at_input, "V/V", formula=formula, numbers=numbers, source=source, quantity="Avi")
        first, value, told = "Avi", at_input, [before]
    else:
        first, value = "A", inner.gain
    gain = net.sign * at_input * before.value
    name, floor = ("Rm", NO_TRANSRESISTANCE) if net.current_driven else ("Av", NO_GAIN)
    if not abs(gain) >= floor:
        return
    formula, numbers = _product(first, value, told)
    sheet.add(
        name,
        gain,
        "Ω" if net.current_driven else "V/V",
        formula=formula if net.sign > 0.0 else f"-{formula}",
        numbers=numbers if net.sign > 0.0 else f"-({numbers})",
        source=("Ohm" if net.current_driven else DIVIDER) if told else inner.source,
        quantity=name,
        note=" ".join(
            filter(
                None,
                [
                    "" if net.current_driven else f"{20.0 * math.log10(abs(gain)):.2f} dB",
                    "" if net.sign > 0.0 else "the source is turned round",
                ],
            )
        )
        or None,
    )
    sheet.add(
        f"{name}.phase",
        180.0 if gain < 0.0 else 0.0,
        "deg",
        formula="sign of the gain",
        numbers=f"{gain:.4g}",
        source="mid-band",
        quantity=f"{name}.phase",
    )


def _product(first: str, value: float, shares: Sequence[Share]) -> tuple[str, str]:
    """Formula and numbers of a gain times what is left of it."""
    formula = "·".join([first, *(share.formula for share in shares)])
    return formula, "·".join(f"{each:.4g}" for each in (value, *(share.value for share in shares)))


def _write_input(sheet: Sheet, net: SignalNet, inner: Inner) -> tuple[Share, Share]:
    """Rin, and what is lost before it and between it and the terminal."""
    way = net.way_in
    at_terminal = parallel(value_of(way.inner), inner.into_entry)
    behind = _past(way, at_terminal)
    r_in = parallel(value_of(way.outer), behind)
    if math.isfinite(r_in):
        formula, numbers = _seen(
            sheet, way.outer, way.series, way.inner, inner.entry_formula, inner.into_entry
        )
        sheet.add(
            "Rin",
            r_in,
            "Ω",
            formula=formula,
            numbers=numbers,
            source=inner.source if math.isfinite(inner.into_entry) else "resistors",
            quantity="Rin" if r_in < INFINITE_RESISTANCE else None,
        )
    first = _before(net, r_in)
    second = Share(1.0, "")
    if way.series is not None and math.isfinite(at_terminal):
        letter = net.entry[0].upper()
        named = way.series.formula
        second = Share(at_terminal / behind, f"R{letter}/(R{letter}+{named})")
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
    if way.series is None:
        return Share(1.0, "")
    beyond = in_parallel(way.outer, net.load)
    if beyond is None:
        return Share(1.0, "")
    text = f"({beyond.formula})" if beyond.joint in ("series", "parallel") else beyond.formula
    return Share(beyond.value / (beyond.value + way.series.value), f"{text}/({text}+{way.series.formula})")


def _write_output(sheet: Sheet, net: SignalNet, inner: Inner) -> None:
    """Rout: the stage's own resistors in parallel with the transistor, the declared load left out."""
    way = net.way_out
    own = in_parallel(way.inner, inner.beside_exit)
    value = parallel(value_of(way.outer), _past(way, parallel(value_of(own), inner.into_exit)))
    if math.isinf(value):
        return
    formula, numbers = _seen(sheet, way.outer, way.series, own, inner.exit_formula, inner.into_exit)
    sheet.add(
        "Rout",
        value,
        "Ω",
        formula=formula,
        numbers=numbers,
        source=inner.source,
        quantity="Rout" if value < INFINITE_RESISTANCE else None,
    )


def _seen(
    sheet: Sheet,
    outer: Resistance | None,
    series: Resistance | None,
    at_terminal: Resistance | None,
    into_formula: str,
    into: float,
) -> tuple[str, str]:
    """Formula and numbers of a resistance: outer ∥ (series + at the terminal ∥ into the transistor)."""
    texts = [] if at_terminal is None else [_in_shunt(at_terminal)]
    values = [] if at_terminal is None else [at_terminal.numbers(sheet.number)]
    if math.isfinite(into):
        texts.append(into_formula)
        values.append(sheet.number(into, "Ω"))
    formula, numbers = "∥".join(texts), " ∥ ".join(values)
    if series is not None:
        formula = " + ".join(filter(None, [series.formula, formula]))
        numbers = " + ".join(filter(None, [series.numbers(sheet.number), numbers]))
    if outer is None:
        return formula, numbers
    if not formula:
        return outer.formula, outer.numbers(sheet.number)
    if series is not None:
        formula, numbers = f"({formula})", f"({numbers})"
    return f"{_in_shunt(outer)}∥{formula}", f"{outer.numbers(sheet.number)} ∥ {numbers}"


def _in_shunt(resistance: Resistance) -> str:
    """A formula as it stands beside ∥."""
    return f"({resistance.formula})" if resistance.joint == "series" else resistance.formula
