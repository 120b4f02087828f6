"""Random networks of 1 to 10 transistors with all linear parts: each has a bias, from a cold start.

Independent: at each bias the currents into every node are summed here, by the law of each part and the square
law of ``test_kirchhoff``, from node voltages and branch currents alone.
"""

from __future__ import annotations

import math
from collections import Counter, defaultdict
from collections.abc import Callable

import pytest

from deckgen.circuit.model import (
    GROUND,
    Capacitor,
    Cccs,
    Ccvs,
    Circuit,
    CurrentSource,
    Inductor,
    Mosfet,
    Resistor,
    Vccs,
    Vcvs,
    VoltageSource,
)
from deckgen.circuit.reader import read_flat
from deckgen.errors import NoBiasError
from deckgen.hand.batch import Batch
from deckgen.hand.bias import BiasPoint, solve_bias
from deckgen.hand.dc.why import hanging_nodes
from deckgen.hand.effects import ALL_EFFECTS
from tests.networks import MOST_TRANSISTORS, network
from tests.unit.test_kirchhoff import LEAST, channel, junction

FULL = Batch((ALL_EFFECTS,))
LEAKAGE = 2e-12  # S a transistor, where only that holds a node


def worst_share(circuit: Circuit, bias: BiasPoint) -> float:
    """Largest imbalance of a node, as a share of what is allowed there."""
    volts = {node: bias.voltage(node) for node in circuit.nodes} | {GROUND: 0.0}
    out, conductance = defaultdict(float), defaultdict(float)
    largest = max(abs(v) for v in volts.values())
    for e in circuit.elements:
        g = 0.0
        if isinstance(e, Capacitor):
            continue
        if isinstance(e, Mosfet):
            ends = (e.nodes[0], e.nodes[2])
            current, g = channel(e, circuit.model(e.model), volts)
            sign = 1.0 if circuit.model(e.model).kind == "nmos" else -1.0
            for end in ends:
                from_bulk, slope = junction(e, sign, sign * (volts[e.nodes[3]] - volts[end]))
                for node, out_of in ((e.nodes[3], from_bulk), (end, -from_bulk)):
                    out[node] += out_of
                    conductance[node] += slope
        else:
            ends = e.nodes[:2]
            if isinstance(e, Resistor):
                g = 1.0 / e.value
                current = g * (volts[ends[0]] - volts[ends[1]])
            elif isinstance(e, CurrentSource):
                current = e.dc
            elif isinstance(e, Vccs):
                g = abs(e.gain)
                current = e.gain * (volts[e.nodes[2]] - volts[e.nodes[3]])
            elif isinstance(e, Cccs):
                current = e.gain * bias.branch_current(e.control)
            else:
                current = bias.branch_current(e.name)
        for node, sign in zip(ends, (1.0, -1.0), strict=True):
            out[node] += sign * current
            conductance[node] += g
    stiffest = max(conductance.values())  # a source carries the rounding of one node to another
    leaks = LEAKAGE * largest * len(circuit.transistors) if hanging_nodes(circuit, channels=False) else 0.0
    allowed = max(LEAST, 8.0 * math.ulp(largest) * stiffest, leaks)
    return max(abs(out[node]) for node in circuit.nodes) / allowed


def voltage_errors(circuit: Circuit, bias: BiasPoint) -> float:
    """Largest deviation from what a source, an inductor or a controlled source sets [V]."""
    worst = 0.0
    for e in circuit.elements:
        if isinstance(e, VoltageSource | Inductor | Vcvs | Ccvs):
            across = bias.voltage(e.nodes[0]) - bias.voltage(e.nodes[1])
            if isinstance(e, VoltageSource):
                wanted = e.dc
            elif isinstance(e, Inductor):
                wanted = 0.0
            elif isinstance(e, Vcvs):
                wanted = e.gain * (bias.voltage(e.nodes[2]) - bias.voltage(e.nodes[3]))
            else:
                wanted = e.gain * bias.branch_current(e.control)
            worst = max(worst, abs(across - wanted))
    return worst


def test_nearly_every_random_network_has_a_bias_and_every_bias_is_one(
    count: Callable[[int, int], int],
) -> None:
    total = count(500, 5_000)
    refused: dict[int, str] = {}
    several = 0
    for seed in range(1, total + 1):
        circuit = network(seed).circuit
        try:
            bias = solve_bias(circuit, FULL)
        except NoBiasError as error:
            refused[seed] = str(error)
            continue
        for point in (bias, *bias.others):
            assert worst_share(circuit, point) < 1.0, seed
            assert voltage_errors(circuit, point) < 1e-12 * MOST_TRANSISTORS, seed
        several += any(point.stable for point in bias.others)
    assert len(refused) <= total // 100, refused
    assert total // 500 <= several <= total // 20


def test_the_networks_hold_every_kind_of_part_both_polarities_and_one_to_ten_transistors() -> None:
    kinds: Counter[str] = Counter()
    numbers: Counter[int] = Counter()
    for seed in range(1, 101):
        found = network(seed)
        numbers[len(found.circuit.transistors)] += 1
        kinds.update({e.name[0] for e in found.circuit.elements})
        kinds.update({card.kind for card in found.circuit.models})
        assert {m.get("gamma", 0.0) > 0.0 for m in found.circuit.models} <= {True, False}
        assert not found.circuit.others
        assert found.ports.output in found.circuit.nodes
    assert numbers == dict.fromkeys(range(1, 11), 10)
    assert all(kinds[kind] >= 3 for kind in [*"rclviefghm", "nmos", "pmos"]), kinds


@pytest.mark.parametrize("seed", [1, 8, 77])
def test_the_network_of_a_seed_is_always_the_same_and_its_text_is_its_circuit(seed: int) -> None:
    one, other = network(seed), network(seed)
    assert one.text == other.text
    assert read_flat(one.text).elements == one.circuit.elements == other.circuit.elements
