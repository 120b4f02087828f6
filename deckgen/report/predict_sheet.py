"""A predict document as blocks: the hand analysis with its working."""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping
from typing import Any

from deckgen.assumptions import ASSUMPTIONS
from deckgen.report import cells
from deckgen.report.blocks import (
    Block,
    Column,
    Heading,
    Note,
    Notes,
    Table,
    TableRow,
    Tone,
    Working,
    WorkingStep,
)
from deckgen.report.notes import finding_note
from deckgen.report.response_sheet import edge_tables, response_notes
from deckgen.units import format_value

Stage = dict[str, Any]

# ``R = 470 Ω + 271 kΩ, C = 100 nF``: values of a formula's symbols, not the formula with numbers in it.
_VALUES = re.compile(r"[^\s=]+ = ")

_TRANSISTOR_COLUMNS = (
    Column("device"),
    Column("role"),
    Column("law"),
    Column("region"),
    Column("margin", number=True),
    Column("VOV", number=True),
    Column("ID", number=True),
)
_QUANTITY_COLUMNS = (Column("quantity"), Column("hand", number=True), Column("by"), Column("remark"))
_SIGNAL_PER = {"V": ("volt of EMF", "V/V"), "A": ("ampere", "Ω")}
"""By what the input source gives: what a signal is per, and its unit."""


def stage_blocks(stage: Stage) -> tuple[Block, ...]:
    """Blocks of one stage: head, working, hand values, transistors, nodes, notes."""
    facts = (stage["file"], f"assumptions: {stage['assumptions']}")
    per, unit = _SIGNAL_PER[stage["input_unit"] or "V"]
    blocks: tuple[Block, ...] = (
        Heading(stage["name"], "by hand", Tone.PLAIN, stage["title"], (facts,)),
        Working(tuple(_step(step) for step in stage["working"])),
        *edge_tables(stage),
        Notes(tuple(response_notes(stage))),
        Table(_QUANTITY_COLUMNS, tuple(_quantity(quantity) for quantity in stage["quantities"])),
        Table(_TRANSISTOR_COLUMNS, tuple(_transistor(transistor) for transistor in stage["transistors"])),
        Table(_node_columns(per), tuple(_node(node, unit) for node in stage["nodes"])),
        Notes(tuple(_notes(stage))),
    )
    return tuple(block for block in blocks if not block.empty)


def closing_blocks(document: Mapping[str, Any]) -> tuple[Block, ...]:
    """Blocks after the last stage: conventions and the caution."""
    notes = [Note("convention", line, Tone.FAINT) for line in document["conventions"]]
    return (
        Heading("notes", f"deckgen {document['deckgen']}", Tone.FAINT, "", ()),
        Notes((*notes, Note("caution", document["caution"]))),
    )


def _mid_band(mid_band: dict[str, Any]) -> str:
    text = f"{format_value(mid_band['frequency'], 'Hz')}: {mid_band['source']}"
    below = mid_band["below_maximum_db"]
    return f"{text}, {below:.2f} dB below the maximum" if below > 0.005 else text


def _step(step: dict[str, Any]) -> WorkingStep:
    return WorkingStep(
        symbol=step["symbol"],
        formula=step["formula"],
        joint="with" if _VALUES.match(step["numbers"]) else "=",
        numbers=step["numbers"],
        result=cells.value_cell(step["value"], step["unit"]),
        source=step["source"],
        note=step["note"] or "",
        strong=step["quantity"] is not None,
    )


def _quantity(quantity: dict[str, Any]) -> TableRow:
    value = cells.hand_cell(quantity)
    tone = Tone.FAINT if quantity["hand"] is None else Tone.PLAIN
    return TableRow((quantity["name"], value, quantity["how"], quantity["reason"] or ""), tone)


def _transistor(transistor: dict[str, Any]) -> TableRow:
    return TableRow(
        (
            transistor["name"],
            transistor["role"].replace("-", " "),
            transistor["law"],
            transistor["region"],
            *(
                format_value(transistor[key], unit)
                for key, unit in (("margin", "V"), ("VOV", "V"), ("ID", "A"))
            ),
        ),
        Tone.PLAIN if transistor["region"] == "saturation" else Tone.DOUBT,
    )


def _node_columns(per: str) -> tuple[Column, ...]:
    signal = Column(f"signal per\n{per}", number=True)
    return Column("node"), Column("voltage", number=True), signal, Column("phase", number=True)


def _node(node: dict[str, Any], unit: str) -> TableRow:
    return TableRow(
        (
            node["name"],
            format_value(node["voltage"], "V"),
            format_value(node["signal"], unit),
            cells.value_cell(node["phase"], "deg"),
        )
    )


def _notes(stage: Stage) -> Iterator[Note]:
    for slug in stage["assumptions_in_force"]:
        known = ASSUMPTIONS.get(slug)
        yield Note("assumed", slug if known is None else f"{known.meaning} [{slug}]")
    exact = stage["mid_band"]
    if exact is not None:
        yield Note("mid-band", _mid_band(exact))
        bounds = [f"{name} {format_value(exact['exact_' + name], 'Hz')}" for name in ("fL", "fH")]
        if exact["exact_fL"] is not None or exact["exact_fH"] is not None:
            yield Note("exact curve", ", ".join(bounds))
    for text in stage["notes"]:
        yield Note("note", text)
    for finding in stage["findings"]:
        yield finding_note(finding, stage["file"])
