"""One table of all findings: slug -> severity, and the text with what to do.

Slugs are fixed once published. A text is a format string; whoever makes a finding supplies its parts.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import replace

from deckgen.circuit.model import Origin
from deckgen.comparison import Finding, Severity
from deckgen.findings.card_entries import CARD_ENTRIES
from deckgen.findings.entry import Entry
from deckgen.findings.graph_entries import GRAPH_ENTRIES
from deckgen.findings.source_entries import SOURCE_ENTRIES

_W, _N = Severity.WARNING, Severity.NOTE

_STAGE_ENTRIES: dict[str, Entry] = {
    "region-not-as-stated": Entry(
        _W,
        "{device} is in {region} {side}, but {wanted} is wanted; small-signal values that depend on it are "
        "not compared. Move the bias, or state the region in [transistors.{device}]",
    ),
    "region-differs": Entry(
        _W,
        "{device} is in {hand} by hand and in {simulated} simulated; small-signal values that depend on it "
        "are not compared. Give it more margin",
    ),
    "drain-source-reversed": Entry(
        _W, "{device} conducts with drain and source exchanged {side}; check its connections"
    ),
    "thin-margin": Entry(
        _N,
        "{device} has only {margin} of saturation margin {side}; a spread of a few percent may end it",
    ),
    "weak-inversion": Entry(
        _W,
        "VOV({device}) = {v_ov} is below 150 mV: the square law leaves its range, ID and gm by hand are "
        "doubtful",
    ),
    "signal-too-large": Entry(
        _W,
        "the gate-source signal of {device} is {signal} peak, above {limit} (10 % of 2·VOV, where HD2 "
        "reaches about 5 %): small-signal values hold for smaller signals only. Stay below {drive}",
    ),
    "output-leaves-saturation": Entry(
        _W,
        "at {drive} {device} leaves saturation on the peaks (signal {signal}, margin {margin}): "
        "the output clips",
    ),
    "output-cuts-off": Entry(
        _W,
        "at {drive} the drain current of {device} reaches zero on the peaks (signal {signal}, "
        "ID {current}): the output clips",
    ),
    "effect-kept": Entry(
        _N,
        "{why}; an effect is left out only where the circuit keeps its bias and its regions without it",
    ),
    "two-stable-points": Entry(
        _W,
        "{count} stable operating points: {here} (hand values) and {there}{simulated}. Which of them a "
        "circuit takes depends on how it starts: see to that",
    ),
    "unstable-point": Entry(
        _W,
        "the operating point, {here}, is unstable: feedback drives the circuit away from it. Check the signs "
        "around the loop",
    ),
    "mid-band-not-flat": Entry(
        _W,
        "the gain at the mid-band frequency {frequency} is {below:.2f} dB below its maximum; state another "
        "frequency in [signal]",
    ),
    "unstable-small-signal": Entry(
        _W,
        "unstable: {poles} in the right half plane: the circuit {behaviour}, and its small-signal values say "
        "nothing. Look for feedback of the wrong sign, or too much of it",
    ),
    "rating-exceeded": Entry(_W, "{quantity}({part}) = {value} {side} exceeds its rating of {limit}"),
    "ratings-not-stated": Entry(_N, "no rating stated, not checked: {parts}. State them in [ratings.NAME]"),
    "hazardous-voltage": Entry(
        _W,
        "{value} {kind} between nodes {nodes}: above the extra-low-voltage limit of {limit} (as public texts "
        "quote it from IEC 62368-1). Such voltages can injure; local codes and licensed practice decide",
    ),
    "load-not-declared": Entry(
        _N, "no load declared: every resistor at the output counts as part of the stage"
    ),
    "source-resistance-not-declared": Entry(
        _N, "no source resistance declared: Rin is seen from the source itself"
    ),
    "known-gap-expired": Entry(
        _W, "the known gap of {quantity} was excused until {until}; renew or close it in [known_gap]"
    ),
    "known-gap-exceeded": Entry(
        _W, "the gap of {quantity} is larger than the limit that [known_gap] excuses"
    ),
    "known-gap-idle": Entry(
        _N, "{quantity} is within tolerance: its entry in [known_gap] is no longer needed"
    ),
}


TABLE: dict[str, Entry] = {**SOURCE_ENTRIES, **CARD_ENTRIES, **GRAPH_ENTRIES, **_STAGE_ENTRIES}

_MOST_OF_A_KIND = 20
"""A deck with more findings of one kind than this has one cause for all of them."""


def finding(slug: str, *, subject: str | None = None, file: str | None = None, **parts: object) -> Finding:
    """A finding of the table with its text filled in. Raises KeyError for an unknown slug or part."""
    entry = TABLE[slug]
    return Finding(slug, entry.severity, entry.text.format(**parts), file=file, subject=subject)


def placed(found: Finding, origin: Origin | None) -> Finding:
    """A finding with the place it is about."""
    return found if origin is None else replace(found, file=origin.file, line=origin.line)


def summed_up(findings: Iterable[Finding]) -> tuple[Finding, ...]:
    """The first few findings of each kind; the last of them says how many there are besides."""
    kept: dict[str, list[int]] = {}
    result: list[Finding] = []
    left: dict[str, int] = {}
    for found in findings:
        places = kept.setdefault(found.slug, [])
        if len(places) < _MOST_OF_A_KIND:
            places.append(len(result))
            result.append(found)
        else:
            left[found.slug] = left.get(found.slug, 0) + 1
    for slug, count in left.items():
        last = kept[slug][-1]
        result[last] = replace(result[last], text=f"{result[last].text} (and {count} more of this kind)")
    return tuple(result)
