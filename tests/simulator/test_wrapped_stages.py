"""A stage inside a subcircuit is the same stage: roles, regions and values through ngspice as front end."""

from __future__ import annotations

import pytest

from deckgen.assumptions import assumptions_made
from deckgen.circuit.model import (
    GROUND,
    Capacitor,
    Circuit,
    CurrentSource,
    Element,
    Mosfet,
    Resistor,
    VoltageSource,
)
from deckgen.circuit.reader import read_flat
from deckgen.hand.predict import predict
from deckgen.simulator import Simulator
from deckgen.simulator.flatten import flatten
from tests.unit.single_networks import KINDS, MID_BAND, Network, network
from tests.unit.test_single_transistor import same, told

PAPER = assumptions_made("paper")
NUMBERS = range(3)


def _card(element: Element) -> str:
    nodes = " ".join(element.nodes)
    if isinstance(element, Resistor | Capacitor):
        return f"{element.name} {nodes} {element.value!r}"
    if isinstance(element, VoltageSource | CurrentSource):
        return f"{element.name} {nodes} dc {element.dc!r} ac {abs(element.ac):g}"
    assert isinstance(element, Mosfet)
    return f"{element.name} {nodes} {element.model} w={element.w!r} l={element.l!r} m={element.m!r}"


def _deck(drawn: Network, *, wrapped: bool) -> str:
    """The network as a deck; all but its independent sources and declared resistors in a subcircuit."""
    circuit, ports = drawn.circuit, drawn.ports
    model = circuit.models[0]
    card = " ".join(f"{name}={value!r}" for name, value in model.parameters)
    around = [
        e
        for e in circuit.elements
        if isinstance(e, VoltageSource | CurrentSource) or e.name in (ports.source_resistance, ports.load)
    ]
    inside = [e for e in circuit.elements if e not in around]
    lines = [_card(e) for e in (around if wrapped else circuit.elements)]
    if wrapped:
        outer = {node for e in around for node in e.nodes} | {ports.output}
        pins = sorted(outer & {node for e in inside for node in e.nodes} - {GROUND})
        lines += [
            f"x1 {' '.join(pins)} stage",
            f".subckt stage {' '.join(pins)}",
            *map(_card, inside),
            ".ends",
        ]
    return "\n".join(["* stage", *lines, f".model {model.name} {model.kind} {card}", ".end\n"])


def _read(text: str | None) -> Circuit:
    assert text is not None
    return read_flat(f"* stage\n{text}")


@pytest.mark.parametrize("kind", KINDS)
def test_a_stage_in_a_subcircuit_has_the_same_role_and_values(simulator: Simulator, kind: str) -> None:
    drawn = [network(kind, number) for number in NUMBERS]
    decks = [_deck(one, wrapped=wrapped) for one in drawn for wrapped in (False, True)]
    flats = flatten(decks, simulator=simulator)
    for number, (one, plain, wrapped) in enumerate(zip(drawn, flats[::2], flats[1::2], strict=True)):
        circuit = _read(wrapped.text)
        assert {node for node in circuit.nodes if node.startswith("x1.")}
        before = predict(_read(plain.text), one.ports, assumptions=PAPER, frequency=MID_BAND)
        after = predict(circuit, one.ports, assumptions=PAPER, frequency=MID_BAND)
        where = told(one, number)
        (device,), (other,) = before.transistors, after.transistors
        assert (other.role, other.region) == (device.role, device.region), where
        assert other.name == "M1@X1"
        assert not [step for step in after.working if "m.x1" in f"{step}".lower()]
        for value in before.values:
            name = value.name.replace("M1", "M1@X1")
            inner = f"V(x1.{name[2:-1]})"
            found = after.value(name) or after.value(inner)
            assert found is not None, name
            assert same(found, value), f"{found} {value}\n{where}"
            assert found.how is value.how, f"{found} {value}\n{where}"
