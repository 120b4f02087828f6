"""Sentences that every report carries in the same words."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import Any

from deckgen.errors import ExitCode, Fault, InputError

CAUTION = (
    "Static check at the stated conditions: power-up, faults, stored energy, hot surfaces and safe operating "
    "area are not assessed; local codes and licensed practice decide."
)

SQUARE_LAW_CONVENTION = (
    "Square law: ID = ½·k·VOV²·(1 + λ·VDS) with k = KP·W/(L − 2·LD); half the textbooks write K = k/2."
)

PORT_CONVENTION = (
    "Source resistance and load count as such where they are declared; otherwise they are part of the stage."
)

ROOT_CONVENTION = (
    "Poles and zeros: f = |s|/2π, Q = |s|/(2·|Re s|) of a complex pair; in the left half plane unless marked "
    "RHP; pairs of pole and zero that cancel are left out."
)

_PORT_QUANTITIES = frozenset({"Av", "Av.phase", "Avi", "Rm", "Rm.phase", "Rin", "Rout"})

EXIT_MEANING: dict[int, str] = {
    ExitCode.OK: "all compared or absent, all within tolerance or excused",
    ExitCode.GAP: (
        "a gap beyond tolerance, a claim missed, a rating exceeded, or a wanted quantity not compared"
    ),
    ExitCode.INPUT: "input or usage refused by deckgen",
    ExitCode.SIMULATOR: "the simulator could not answer",
    ExitCode.BUG: "a bug in deckgen",
}


def conventions(*, laws: Iterable[str], quantities: Iterable[str], roots: bool = False) -> list[str]:
    """Conventions that a reader needs for these device laws, quantities and roots; none that they don't."""
    lines = []
    if "square" in laws:
        lines.append(SQUARE_LAW_CONVENTION)
    if not _PORT_QUANTITIES.isdisjoint(quantities):
        lines.append(PORT_CONVENTION)
    if roots:
        lines.append(ROOT_CONVENTION)
    return lines


def require_schema(document: Mapping[str, Any], schema: str) -> None:
    """Refuse a document of another shape than the report is made for, with InputError."""
    found = document.get("schema")
    if found != schema:
        raise InputError(Fault(file="report", where="schema", found=repr(found), expected=repr(schema)))
