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
    Cccs,
    Ccvs,
    Circuit,
    CurrentSource,
    Element,
    Inductor,
    Mosfet,
    OtherDevice,
    Resistor,
    Vccs,
    Vcvs,
    VoltageSource,
)
from deckgen.circuit.numbers import spice_text

# It warns of nodes named like Python keywords ("in"): no concern of anybody who reads netlists.
logging.getLogger("PySpice").setLevel(logging.ERROR)

_SAFE_NAME = re.compile(r"[a-z0-9_.:+\-/~@#]+")
_KINDS = {
    Resistor: ("r", "R"),
    Capacitor: ("c", "C"),
    Inductor: ("l", "L"),
    VoltageSource: ("v", "V"),
    CurrentSource: ("i", "I"),
    Vcvs: ("e", "VCVS"),
    Vccs: ("g", "VCCS"),
    Cccs: ("f", "CCCS"),
    Ccvs: ("h", "CCVS"),
    Mosfet: ("m", "M"),
}
"""Letter of each kind of element, and what PySpice calls it."""


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
    if isinstance(element, OtherDevice):
        raise ValueError(f"{element.name!r} is {element.why}: it can't be written, only carried over")
    # PySpice writes the letter of the kind itself: R('1') becomes R1. A name with another letter would
    # come out as that of a different part.
    (letter, kind), suffix = _KINDS[type(element)], _safe(element.name)[1:]
    if not suffix or element.name[0] != letter:
        raise ValueError(f"{element.name!r} can't be the name of this part: {letter} and a name are needed")
    nodes = [_node(node) for node in element.nodes]
    getattr(spice, kind)(suffix, *nodes, *_value(element), **_parameters(element))


def _value(element: Element) -> tuple[str, ...]:
    """What stands behind the nodes of a part with a plain value."""
    if isinstance(element, Resistor | Capacitor | Inductor):
        return (spice_text(element.value),)
    if isinstance(element, VoltageSource | CurrentSource):
        return (_source_value(element),)
    return ()


def _parameters(element: Element) -> dict[str, str]:
    """What PySpice takes by name."""
    if isinstance(element, Vcvs):
        return {"voltage_gain": spice_text(element.gain)}
    if isinstance(element, Vccs):
        return {"transconductance": spice_text(element.gain)}
    if isinstance(element, Cccs):
        return {"source": _safe(element.control), "current_gain": spice_text(element.gain)}
    if isinstance(element, Ccvs):
        return {"source": _safe(element.control), "transresistance": spice_text(element.gain)}
    if isinstance(element, Mosfet):
        geometry = {"w": element.w, "l": element.l, "m": element.m}
        areas = {"ad": element.ad, "as": element.as_, "pd": element.pd, "ps": element.ps}
        squares = {"nrd": element.nrd, "nrs": element.nrs}
        geometry |= {key: value for key, value in areas.items() if abs(value) > 0.0}
        geometry |= {key: value for key, value in squares.items() if abs(value - 1.0) > 0.0}
        texts = {key: spice_text(value) for key, value in geometry.items()}
        return {"model": _safe(element.model), **texts}
    return {}


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
