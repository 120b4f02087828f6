"""The simplifications that a hand analysis may make, each under a fixed slug.

A set is what the designer asks for by name: ``paper``, what is done with pencil and paper, or ``full``,
all that the device law has. Single assumptions can be added to a set or dropped from it.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Assumption:
    """One simplification: its slug, its trade name, what it means, and the sets that make it."""

    slug: str
    name: str
    meaning: str
    paper: bool
    full: bool = False


_ASSUMPTIONS = (
    Assumption(
        "no-channel-length-modulation",
        "channel-length modulation neglected in the bias",
        "λ = 0 in ID and gm; ro stays in the gain",
        paper=True,
    ),
    Assumption(
        "no-output-resistance",
        "infinite output resistance",
        "ro is infinite in the gain and the resistances",
        paper=False,
    ),
    Assumption(
        "no-body-effect",
        "body effect neglected",
        "γ = 0: VTH = VTO and gmb = 0",
        paper=False,
    ),
    Assumption(
        "no-series-resistance",
        "resistances of drain and source neglected",
        "RD and RS of the card, and RSH, are 0 Ω",
        paper=True,
    ),
    Assumption(
        "no-bulk-junctions",
        "currents of the bulk junctions neglected",
        "no current flows from the bulk, and no leakage; the junctions' capacitances stay",
        paper=True,
    ),
    Assumption(
        "ideal-coupling",
        "ideal coupling and bypass capacitors",
        "coupling and bypass capacitors are shorts at mid-band",
        paper=True,
    ),
    Assumption(
        "no-device-capacitances",
        "device capacitances neglected at mid-band",
        "the transistors' own capacitances are open at mid-band",
        paper=True,
    ),
    Assumption(
        "no-load-capacitances",
        "load capacitances neglected at mid-band",
        "capacitances from a signal node to ground are open at mid-band",
        paper=True,
    ),
    Assumption(
        "time-constant-bandwidth",
        "bandwidth from time constants",
        "fL and fH come from time constants, not from the exact curve",
        paper=True,
    ),
)

ASSUMPTIONS: dict[str, Assumption] = {assumption.slug: assumption for assumption in _ASSUMPTIONS}
SETS = ("paper", "full")


def assumptions_made(name: str, *, add: Iterable[str] = (), drop: Iterable[str] = ()) -> tuple[str, ...]:
    """Slugs of a set with single ones added and dropped, in the order of the table.

    Raises ValueError for an unknown set or slug.
    """
    if name not in SETS:
        raise ValueError(f"{name!r} is not an assumption set; known: {', '.join(SETS)}")
    added, dropped = frozenset(add), frozenset(drop)
    unknown = sorted((added | dropped) - ASSUMPTIONS.keys())
    if unknown:
        raise ValueError(f"{unknown[0]!r} is not an assumption; known: {', '.join(ASSUMPTIONS)}")
    return tuple(
        slug
        for slug, assumption in ASSUMPTIONS.items()
        if slug not in dropped
        and (slug in added or (assumption.paper if name == "paper" else assumption.full))
    )
