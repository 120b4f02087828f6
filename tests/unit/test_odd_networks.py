"""Networks around one transistor with something odd in them: nodal or closed, but never wrong."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable
from dataclasses import replace

import pytest

from deckgen.assumptions import assumptions_made
from deckgen.circuit.model import (
    GROUND,
    Capacitor,
    Cccs,
    Ccvs,
    Circuit,
    CurrentSource,
    Element,
    Inductor,
    Mosfet,
    Resistor,
    Vccs,
    Vcvs,
    VoltageSource,
)
from deckgen.circuit.ports import Ports
from deckgen.errors import NoBiasError, NoSignalError
from deckgen.hand.analysis import analyse
from deckgen.hand.effects import effects_under
from deckgen.hand.nodal import nodal_values
from deckgen.hand.predict import predict
from deckgen.hand.prediction import How, Prediction
from tests.unit.circuits import Values, stage
from tests.unit.single_networks import MID_BAND, spoiled
from tests.unit.test_single_transistor import same, told

PAPER = assumptions_made("paper")
PORTS = Ports("vsig", "out", "rsig", "rl")


def drawn(*more: Element, without: str = "", values: Values | None = None) -> Circuit:
    """A degenerated stage with parts added and left out."""
    circuit = stage(values or Values(cs=None))
    kept = tuple(e for e in circuit.elements if e.name not in without.split())
    return replace(circuit, elements=(*kept, *more))


def moved(name: str, *nodes: str) -> Circuit:
    """The stage with one part between other nodes."""
    circuit = stage(Values(cs=None))
    elements = (replace(e, nodes=nodes) if e.name == name else e for e in circuit.elements)  # type: ignore[arg-type]
    return replace(circuit, elements=tuple(elements))


ODD: dict[str, tuple[Circuit, str]] = {
    "a resistor with both ends at one node": (drawn(Resistor("rx", ("d", "d"), 1e3)), "bias gain edges"),
    "a resistor between two rails": (drawn(Resistor("rx", ("vdd", GROUND), 1e3)), "bias gain edges"),
    "a resistor shorted by a source of 0 V": (
        drawn(Resistor("rx", ("m", "d"), 1e3), VoltageSource("vx", ("m", "d"))),
        "bias gain edges",
    ),
    "a resistor shorted by a capacitor": (
        drawn(Resistor("rx", ("m", "s"), 1e3), Capacitor("cx", ("m", "s"), 1.0)),
        "bias gain",
    ),
    "a resistor to a node where nothing else is": (drawn(Resistor("rx", ("m", "d"), 1e3)), "bias gain edges"),
    "a capacitor of a resistor's dead end": (
        drawn(Resistor("rx", ("m", "d"), 1e3), Capacitor("cx", ("m", GROUND), 1e-12)),
        "bias gain edges",
    ),
    "a resistor from drain to source": (drawn(Resistor("rx", ("d", "s"), 1e5)), "bias"),
    "a resistor from gate to source": (drawn(Resistor("rx", ("g", "s"), 1e6)), "bias"),
    "a resistor from output to input": (drawn(Resistor("rx", ("out", "in"), 1e6)), "bias gain"),
    "a star between the terminals": (
        drawn(*(Resistor(f"rx{n}", ("m", n), 1e6) for n in ("d", "g", "s"))),
        "bias",
    ),
    "a load to the supply": (moved("rl", "out", "vdd"), "bias gain edges"),
    "a load from drain to source": (moved("rl", "out", "s"), "bias"),
    "a load in front of the coupling capacitor": (
        drawn(Resistor("rl", ("d", GROUND), 47e3), Resistor("rx", ("out", GROUND), 1e6), without="rl"),
        "bias gain edges",
    ),
    "a load in front of a resistor to the output": (
        drawn(
            Resistor("rl", ("d", GROUND), 47e3),
            Resistor("rx", ("out", GROUND), 1e6),
            Resistor("ry", ("o", "out"), 1e3),
            Capacitor("cout", ("d", "o"), 1e-6),
            without="rl cout",
        ),
        "bias gain edges",
    ),
    "an input between two nodes": (moved("vsig", "sig", "s"), "bias"),
    "a negative resistor in the source": (drawn(Resistor("rs", ("s", GROUND), -100.0), without="rs"), ""),
    "a current source in place of the drain resistor": (
        drawn(CurrentSource("ix", ("vdd", "d"), 5e-4), Resistor("rx", ("d", GROUND), 1e5), without="rd"),
        "bias gain edges",
    ),
    "a current source into the source": (drawn(CurrentSource("ix", ("vdd", "s"), 1e-4)), "bias gain edges"),
    "E from drain to gate": (
        drawn(Vcvs("e1", ("m", GROUND, "d", GROUND), 0.5), Resistor("rx", ("m", "g"), 1e6)),
        "",
    ),
    "G in the drain": (drawn(Vccs("g1", ("d", GROUND, "s", GROUND), 1e-6)), ""),
    "F of the supply": (drawn(Cccs("f1", ("d", GROUND), "vdd", 1e-3)), ""),
    "H of the supply": (drawn(Ccvs("h1", ("m", GROUND), "vdd", 10.0), Resistor("rx", ("m", "s"), 1e6)), ""),
    "a choke as drain load": (drawn(Inductor("lx", ("vdd", "d"), 1e3), without="rd"), "bias"),
    "a choke in the source": (drawn(Inductor("lx", ("s", GROUND), 1e3), without="rs"), "bias"),
    "a coil from gate to ground": (drawn(Inductor("lx", ("g", GROUND), 1e3)), "bias"),
    "bulk at a divider": (
        drawn(
            Mosfet("m1", ("d", "g", "s", "b"), "nm", 1e-4, 2e-6),
            Resistor("rx", ("b", GROUND), 1e3),
            Resistor("ry", ("b", "vdd"), 1e6),
            without="m1",
        ),
        "",
    ),
    "bulk at the drain": (drawn(Mosfet("m1", ("d", "g", "s", "d"), "nm", 1e-4, 2e-6), without="m1"), ""),
    "drain and source at one node": (
        drawn(Mosfet("m1", ("s", "g", "s", GROUND), "nm", 1e-4, 2e-6), without="m1"),
        "",
    ),
    "gate and source at one node": (
        drawn(Mosfet("m1", ("d", "s", "s", GROUND), "nm", 1e-4, 2e-6), without="m1"),
        "",
    ),
}
"""Circuits, and what of their values are closed forms: bias, gain, band edges."""

_GROUPS = {"bias": {"ID(M1)", "VOV(M1)", "gm(M1)"}, "gain": {"Av", "Rin", "Rout"}, "edges": {"fL", "fH"}}


def closed_groups(prediction: Prediction) -> str:
    """Groups of which all values that exist are closed forms."""
    values = {value.name: value for value in prediction.values if value.value is not None}
    found = []
    for group, names in _GROUPS.items():
        hows = {values[name].how for name in names if name in values}
        assert len(hows) < 2 or group == "edges", group
        if hows == {How.CLOSED_FORM}:
            found.append(group)
    return " ".join(found)


def wrong(
    circuit: Circuit, ports: Ports, prediction: Prediction, frequency: float | None = None
) -> list[str]:
    """Values that nodal analysis gives otherwise."""
    solved = nodal_values(analyse(circuit, ports, effects_under(PAPER), frequency))
    nodal = {value.name: value for value in solved}
    return [f"{v} {nodal[v.name]}" for v in prediction.values if not same(v, nodal[v.name], 1e-8)]


@pytest.mark.parametrize("case", ODD)
def test_an_odd_network_has_closed_forms_only_where_they_are_right(case: str) -> None:
    circuit, closed = ODD[case]
    prediction = predict(circuit, PORTS, assumptions=PAPER)
    assert not wrong(circuit, PORTS, prediction)
    assert closed_groups(prediction) == closed


def test_a_part_more_between_any_nodes_makes_no_closed_form_wrong(count: Callable[[int, int], int]) -> None:
    found: Counter[str] = Counter()
    for number in range(count(120, 2000)):
        network = spoiled(number)
        try:
            prediction = predict(network.circuit, network.ports, assumptions=PAPER, frequency=MID_BAND)
        except (NoBiasError, NoSignalError):
            found["no solution"] += 1
            continue
        off = wrong(network.circuit, network.ports, prediction, MID_BAND)
        assert not off, f"{off}\n{told(network, number)}"
        found[closed_groups(prediction)] += 1
    total = found.total()
    assert found["no solution"] <= 0.25 * total
    assert found[""] + found["bias"] >= 0.2 * total
    assert found["bias gain"] + found["bias gain edges"] >= 0.1 * total


@pytest.mark.parametrize("rail", [GROUND, "vdd"])
def test_two_equal_bypass_capacitors_are_one_of_twice_the_size(rail: str) -> None:
    """Each alone would be no short beside the other, and the stage would seem degenerated."""
    one = stage(Values(cs=10e-6))
    halves = (Capacitor("cs1", ("s", GROUND), 5e-6), Capacitor("cs2", (rail, "s"), 5e-6))
    two = replace(one, elements=(*(e for e in one.elements if e.name != "cs"), *halves))
    before, after = (predict(circuit, PORTS, assumptions=PAPER) for circuit in (one, two))
    for value in before.values:
        found = after.value(value.name)
        assert found is not None
        assert found.how is value.how
        assert same(found, value), (found, value)
    assert "taken as coupling or bypass: CIN, COUT, CS1+CS2" in after.notes
    assert "1/(2π·(CS1+CS2)·R)" in " ".join(step.formula for step in after.working)
