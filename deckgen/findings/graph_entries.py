"""Findings about how a circuit is connected, and about its voltages at the Q-point."""

from __future__ import annotations

from deckgen.comparison import Severity
from deckgen.findings.entry import Entry

_R, _W, _N = Severity.REFUSED, Severity.WARNING, Severity.NOTE

GRAPH_ENTRIES: dict[str, Entry] = {
    "no-ground": Entry(
        _R,
        "no element is connected to node 0, so no voltage is defined and no operating point can be found. "
        "Name the common node 0",
    ),
    "no-dc-path": Entry(
        _R,
        "{nodes} no DC path to ground: capacitors, gates and current sources carry no DC, the voltage there "
        "is undefined and ngspice finds no operating point. Connect it with a resistor, 1G if it should "
        "carry nothing",
    ),
    "floating-gate": Entry(
        _R,
        "{nodes} no DC path to ground: the gate of {devices} has no bias, and ngspice finds no operating "
        "point. Connect it with a resistor to the voltage it should have",
    ),
    "current-source-into-empty-node": Entry(
        _R,
        "the current of {sources} has nowhere to go from node {node}: ngspice gives as many volts there as "
        "there are amperes, or no operating point. Connect the node, or check the source's nodes",
    ),
    "node-dangling": Entry(
        _W,
        "node {node} is connected to {pin} only: no current flows there. Check the spelling of the node, or "
        "remove the part",
    ),
    "source-loop": Entry(
        _R,
        "{names} a loop of voltage sources and inductors: its current is undefined at DC and ngspice "
        "finds no operating point. Put a resistor into the loop, or remove one of them",
    ),
    "bulk-not-at-source-or-rail": Entry(
        _W,
        "the bulk of {device} is at node {bulk}, which is neither its source ({source}) nor ground or a "
        "supply: its threshold moves with that node, and its junctions may conduct. Connect it to the "
        "source or to a rail",
    ),
    "bulk-forward-biased": Entry(
        _W,
        "the {junction} junction of {device} is forward-biased by {value}: it conducts, and by hand nothing "
        "flows there under no-bulk-junctions. Connect the bulk of an {kind} to the {extreme} voltage, or "
        "exchange drain and source",
    ),
    "generator-sets-bias": Entry(
        _N,
        "{source} reaches the gate of {device} without a capacitor: its DC value, {value}, is the bias of "
        "that gate",
    ),
    "generator-current-in-bias": Entry(
        _N,
        "{source} reaches {devices} without a capacitor: its DC value, {value}, is part of the bias there",
    ),
    "generator-overrides-bias": Entry(
        _W,
        "{source} reaches the gate of {device} through resistors alone, so its DC value, {value}, and its "
        "resistance pull at the bias from {others}. Put a coupling capacitor between {source} and the gate",
    ),
    "capacitor-reversed": Entry(
        _W,
        "{capacitor} has {value} from its first node to its second: {why}, so it is the wrong way round. "
        "Exchange its nodes, or remove its polarity",
    ),
}
