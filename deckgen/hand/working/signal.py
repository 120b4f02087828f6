"""Mid-band gain and resistances by closed form, for every role of a single transistor.

Between EMF and output lie three factors: what the source resistance and the resistors behind it leave of
the signal, the transistor's own gain from its entry to its exit, and what the way out leaves.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from deckgen.circuit.gain import INFINITE_RESISTANCE, NO_GAIN
from deckgen.hand.formulas.gain import parallel
from deckgen.hand.reduce.dc import GATE
from deckgen.hand.reduce.resistance import Resistance, in_parallel, value_of
from deckgen.hand.reduce.signal import SignalNet, Way
from deckgen.hand.working.inner import Conductances, Inner, inner_of
from deckgen.hand.working.sheet import Sheet

DIVIDER = "voltage divider"


@dataclass(frozen=True, slots=True)
class Share:
    """A factor between 0 and 1 that a way takes from the signal, as formula and number."""

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
    gain = inner.gain * math.prod(share.value for share in shares)
    if not abs(gain) >= NO_GAIN or net.current_driven:
        return inner.gain
    told = [share for share in shares if share.value < 1.0]
    sheet.add(
        "Av",
        gain,
        "V/V",
        formula="·".join(["A", *(share.formula for share in told)]),
        numbers="·".join(f"{each:.4g}" for each in (inner.gain, *(share.value for share in told))),
        source=DIVIDER if told else inner.source,
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
    return inner.gain


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
    first = Share(1.0, "")
    if net.source_resistance is not None and math.isfinite(r_in):
        named = net.source_resistance.formula
        first = Share(r_in / (r_in + net.source_resistance.value), f"Rin/(Rin+{named})")
    second = Share(1.0, "")
    if way.series is not None and math.isfinite(at_terminal):
        letter = net.entry[0].upper()
        named = way.series.formula
        second = Share(at_terminal / behind, f"R{letter}/(R{letter}+{named})")
    return first, second


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
