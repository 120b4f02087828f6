"""Netlists that deckgen composes itself, built and printed with PySpice; and the pin graph.

The only module that imports PySpice. Its objects are mutable and never leave this module.
"""

from __future__ import annotations

import cmath
import logging
import math
import re
from collections.abc import Iterable
from typing import Any

from PySpice.Spice.Netlist import Circuit as SpiceCircuit

from deckgen.circuit.model import (
    Capacitor,
    Circuit,
    CurrentSource,
    Element,
    Inductor,
    Mosfet,
    Resistor,
    VoltageSource,
)
from deckgen.circuit.numbers import spice_text

# It warns of nodes named like Python keywords ("in"): no concern of anybody who reads netlists.
logging.getLogger("PySpice").setLevel(logging.ERROR)

_SAFE_NAME = re.compile(r"[a-z0-9_.+\-/~@#]+")
_LETTERS = {
    Resistor: "r",
    Capacitor: "c",
    Inductor: "l",
    VoltageSource: "v",
    CurrentSource: "i",
    Mosfet: "m",
}


def netlist_text(circuit: Circuit) -> str:
    """A netlist of the circuit: title, models, elements; no analyses, no ``.end``."""
    spice = SpiceCircuit(_one_line(circuit.title or "circuit"))
    for card in circuit.models:
        level = dict(card.parameters)
        level.setdefault("level", 1.0)
        values = {_safe(name): spice_text(value) for name, value in level.items()}
        spice.model(_safe(card.name), card.kind, **values)
    for element in circuit.elements:
        _add(spice, element)
    lines = [line for line in str(spice).splitlines() if line.strip()]
    lines[0] = f"* {_one_line(circuit.title or 'circuit')}"
    return "\n".join(lines) + "\n"


def element_lines(elements: Iterable[Element]) -> tuple[str, ...]:
    """Cards of single elements, as a bench adds them to a circuit."""
    spice = SpiceCircuit("bench")
    for element in elements:
        _add(spice, element)
    return tuple(line for line in str(spice).splitlines()[1:] if line.strip())


def pins_of_nodes(circuit: Circuit) -> dict[str, tuple[str, ...]]:
    """Which elements hang on each node; an element with two pins there is named twice."""
    spice = SpiceCircuit("graph")
    for element in circuit.elements:
        _add(spice, element)
    pins: dict[str, list[str]] = {}
    for part in spice.elements:
        for pin in part.pins:
            pins.setdefault(str(pin.node), []).append(str(part.name).lower())
    return {node: tuple(names) for node, names in pins.items()}


def _add(spice: Any, element: Element) -> None:
    # PySpice writes the letter of the kind itself: R('1') becomes R1. A name with another letter would
    # come out as that of a different part.
    letter, suffix = _LETTERS[type(element)], _safe(element.name)[1:]
    if not suffix or element.name[0] != letter:
        raise ValueError(f"{element.name!r} can't be the name of this part: {letter} and a name are needed")
    nodes = [_node(node) for node in element.nodes]
    if isinstance(element, Resistor):
        spice.R(suffix, *nodes, spice_text(element.value))
    elif isinstance(element, Capacitor):
        spice.C(suffix, *nodes, spice_text(element.value))
    elif isinstance(element, Inductor):
        spice.L(suffix, *nodes, spice_text(element.value))
    elif isinstance(element, VoltageSource):
        spice.V(suffix, *nodes, _source_value(element))
    elif isinstance(element, CurrentSource):
        spice.I(suffix, *nodes, _source_value(element))
    elif isinstance(element, Mosfet):
        geometry = {"w": element.w, "l": element.l, "m": element.m}
        spice.M(suffix, *nodes, model=_safe(element.model), **{k: spice_text(v) for k, v in geometry.items()})


def _source_value(source: VoltageSource | CurrentSource) -> str:
    text = f"dc {spice_text(source.dc)}"
    if source.ac:
        magnitude, phase = cmath.polar(source.ac)
        text += f" ac {spice_text(magnitude)} {spice_text(math.degrees(phase))}"
    return text


def _node(name: str) -> str:
    """A node's name; ``gnd``, which the simulator takes for ground, is not one of ours."""
    if name == "gnd":
        raise ValueError("'gnd' can't stand in a netlist: ground is 0")
    return _safe(name)


def _safe(name: str) -> str:
    """A name that can only be a name: no blanks, no line breaks, nothing that starts a comment."""
    if not _SAFE_NAME.fullmatch(name):
        raise ValueError(f"{name!r} can't stand in a netlist")
    return name


def _one_line(text: str) -> str:
    return " ".join(text.split())[:200]
