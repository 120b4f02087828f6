"""Blocks that say what sets the band edges, and where poles and zeros lie."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

from deckgen.report import cells
from deckgen.report.blocks import Column, Note, Table, TableRow, Tone

Stage = dict[str, Any]

MOST = 12
"""Capacitors, poles or zeros that are written out; the rest is counted."""

_EDGE_COLUMNS = (
    Column("sees R", number=True),
    Column("C", number=True),
    Column("τ", number=True),
    Column("f", number=True),
    Column("share", number=True),
)
_HALF_PLANES = {"left": "", "right": " RHP", "axis": ""}


def edge_tables(stage: Stage) -> Iterator[Table]:
    """One table for each band edge that capacitors set: each of them, their sum, and what the edge is."""
    for edge in stage["band_edges"]:
        if edge["time_constants"]:
            rows = (*_constants(edge["time_constants"]), *_results(edge))
            yield Table((Column(f"sets {edge['quantity']}"), *_EDGE_COLUMNS), rows)


def response_notes(stage: Stage) -> Iterator[Note]:
    """Where sums of time constants leave their range, and the lists of poles and zeros."""
    for edge in stage["band_edges"]:
        for text in edge["notes"]:
            yield Note(edge["quantity"], text, Tone.DOUBT)
    for label in ("poles", "zeros"):
        if stage[label]:
            yield Note(label, _list_of(stage[label]))


def setter_note(setters: list[dict[str, Any]]) -> Note:
    """One line: the capacitor with the largest share of each band edge."""
    parts = [f"{one['quantity']}: {one['set_by']}, {100.0 * one['share']:.0f} %" for one in setters]
    return Note("set by", f"{'; '.join(parts)} of the sum of time constants", Tone.FAINT)


def _constants(rows: list[dict[str, Any]]) -> Iterator[TableRow]:
    """Write the largest shares, and all of the bootstrapped, which stand last; the rest together."""
    middle = [row for row in rows[MOST:] if not _bootstrapped(row)]
    yield from map(_constant, rows[:MOST])
    if middle:
        share = sum(row["share"] or 0.0 for row in middle)
        yield TableRow((f"{len(middle)} more", "", "", "", "", _percent(share)))
    yield from (_constant(row) for row in rows[MOST:] if _bootstrapped(row))


def _bootstrapped(row: dict[str, Any]) -> bool:
    return row["tau"] is not None and row["tau"] < 0.0


def _constant(row: dict[str, Any]) -> TableRow:
    return TableRow(
        (
            row["capacitor"],
            _or_infinite(row["resistance"], "Ω"),
            cells.value_cell(row["capacitance"], "F"),
            _or_infinite(row["tau"], "s"),
            _or_infinite(row["frequency"], "Hz"),
            cells.NONE if row["share"] is None else _percent(row["share"]),
        ),
        Tone.DOUBT if _bootstrapped(row) else Tone.PLAIN,
    )


def _results(edge: dict[str, Any]) -> Iterator[TableRow]:
    """The sum, Miller's estimate and the exact value, the estimates with how far they are off."""
    exact = edge["exact"]
    taus = [row["tau"] for row in edge["time_constants"]]
    whole = edge["kind"] == "open-circuit" and None not in taus
    total = cells.value_cell(sum(taus), "s") if whole else ""
    estimates = {"sum": edge["estimate"], "Miller": edge["miller"]}
    for name, value in estimates.items():
        if value is not None or name == "sum":
            shown = cells.value_cell(value, "Hz")
            yield TableRow((name, "", "", total if name == "sum" else "", shown, _off(value, exact)))
    yield TableRow(("exact", "", "", "", cells.value_cell(exact, "Hz"), ""))


def _off(estimate: float | None, exact: float | None) -> str:
    if estimate is None or exact is None:
        return ""
    ratio = estimate / exact
    return f"{100.0 * (ratio - 1.0):+.1f} % off" if ratio < 10.0 else f"×{ratio:.0f}"


def _or_infinite(value: float | None, unit: str) -> str:
    return "∞" if value is None else cells.value_cell(value, unit)


def _percent(share: float) -> str:
    return f"{100.0 * share:.1f} %"


def _list_of(roots: list[dict[str, Any]]) -> str:
    at_zero = sum(root["frequency"] <= 0.0 for root in roots)
    shown = [_root(root) for root in roots[at_zero:MOST]]
    if at_zero:
        shown.insert(0, "0 Hz" if at_zero == 1 else f"0 Hz ({at_zero} times)")
    rest = len(roots) - max(MOST, at_zero)
    return ", ".join(shown) + (f" and {rest} more" if rest > 0 else "")


def _root(root: dict[str, Any]) -> str:
    text = cells.value_cell(root["frequency"], "Hz") + _HALF_PLANES[root["half_plane"]]
    if not root["pair"]:
        return text
    return f"{text} (Q ∞)" if root["q"] is None else f"{text} (Q {root['q']:.3g})"
