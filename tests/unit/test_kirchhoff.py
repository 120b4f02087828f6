"""Kirchhoff's current law holds at every bias point: a property, over random networks.

Independent: the currents into each node are summed here from the node voltages alone, by Ohm's law and by
a square law and a diode law written out once more; the solver's own residual is not asked. A node may be
out of balance by 1 pA, or by 8 times the rounding of the largest voltage through all conductances at the
node; nodes that a voltage source joins count as one there, since its current carries the rounding from one
to the other.

Networks with a node beyond 100 V or a channel beyond 10 A are passed over. There, where a channel of some
100 S hangs beside a node of 1e-7 S, a search for the worst finds imbalances of a few pA.
"""

from __future__ import annotations

import math
import random
from collections import defaultdict
from collections.abc import Callable
from dataclasses import dataclass, field, replace

from hypothesis import assume, given, target
from hypothesis import strategies as st

from deckgen.circuit.model import (
    GROUND,
    Circuit,
    CurrentSource,
    Element,
    ModelCard,
    Mosfet,
    Resistor,
    VoltageSource,
)
from deckgen.hand.batch import Batch
from deckgen.hand.bias import BiasPoint, solve_bias
from deckgen.hand.effects import ALL_EFFECTS, Effect

WITHOUT_JUNCTIONS = ALL_EFFECTS - {Effect.BULK_JUNCTIONS}
SATURATION, GMIN, UT = 1e-14, 1e-12, 1.380649e-23 * 300.15 / 1.602176634e-19  # A, S, V

LEAST = 1e-12  # A
HIGHEST_VOLTAGE, HIGHEST_CURRENT = 100.0, 10.0  # V, A


@dataclass
class Balance:
    """Sum of the currents out of each node [A], and of the conductances at it [S]."""

    current: dict[str, float] = field(default_factory=lambda: defaultdict(float))
    conductance: dict[str, float] = field(default_factory=lambda: defaultdict(float))

    def add(self, node: str, current: float, conductance: float = 0.0) -> None:
        self.current[node] += current
        self.conductance[node] += conductance


def threshold(card: ModelCard, sign: float, v_sb: float) -> tuple[float, float]:
    """VTH and how it rises with VSB, n-channel signs; below VSB = 0 the root goes on as its tangent."""
    gamma, phi = card.get("gamma", 0.0), card.get("phi", 0.6)
    middle = math.sqrt(phi)
    if v_sb >= 0.0:
        root, slope = math.sqrt(phi + v_sb), 0.5 / math.sqrt(phi + v_sb)
    else:
        root = max(middle + v_sb / (2.0 * middle), 0.0)
        slope = 0.5 / middle if root > 0.0 else 0.0
    return sign * card.get("vto", 0.0) + gamma * (root - middle), gamma * slope


def channel(device: Mosfet, card: ModelCard, volts: dict[str, float]) -> tuple[float, float]:
    """Current into the drain [A] and all of the channel's conductances together [S]."""
    sign = 1.0 if card.kind == "nmos" else -1.0
    d, g, s, b = (sign * volts[node] for node in device.nodes)
    direction = 1.0 if d >= s else -1.0
    low, v_ds = min(d, s), abs(d - s)
    vth, slope = threshold(card, sign, low - b)
    k = card.get("kp", 0.0) * device.w / device.l * device.m
    lam = card.get("lambda", 0.0)
    v_ov = g - low - vth
    if v_ov <= 0.0:
        return 0.0, 0.0
    reach = min(v_ov, v_ds)
    core, factor = k * reach * (v_ov - 0.5 * reach), 1.0 + lam * v_ds
    g_m = k * reach * factor
    g_ds = lam * core + k * (v_ov - reach) * factor
    return sign * direction * core * factor, g_m * (1.0 + slope) + g_ds


def junction(device: Mosfet, sign: float, v: float) -> tuple[float, float]:
    """Current from the bulk [A], n-channel signs, and conductance [S]; below -3·UT ngspice's -IS."""
    saturation = SATURATION * device.m
    if v <= -3.0 * UT:
        return sign * (GMIN * v - saturation), GMIN
    if v > 500.0 * UT:
        return math.inf, math.inf
    grown = saturation * math.exp(v / UT)
    return sign * (grown - saturation + GMIN * v), grown / UT + GMIN


def balance(circuit: Circuit, bias: BiasPoint, *, junctions: bool = True) -> tuple[Balance, dict[str, float]]:
    """All currents out of all nodes, and the node voltages."""
    volts = {node: bias.voltage(node) for node in circuit.nodes} | {GROUND: 0.0}
    sums = Balance()
    for element in circuit.elements:
        if isinstance(element, Mosfet):
            current, conductance = channel(element, circuit.model(element.model), volts)
            ends, through = (element.nodes[0], element.nodes[2]), current
            sign = 1.0 if circuit.model(element.model).kind == "nmos" else -1.0
            for end in ends if junctions else ():
                v = sign * (volts[element.nodes[3]] - volts[end])
                from_bulk, slope = junction(element, sign, v)
                sums.add(element.nodes[3], from_bulk, slope)
                sums.add(end, -from_bulk, slope)
        elif isinstance(element, Resistor):
            ends, conductance = element.nodes, 1.0 / element.value
            through = (volts[ends[0]] - volts[ends[1]]) / element.value
        elif isinstance(element, CurrentSource):
            ends, conductance, through = element.nodes, 0.0, element.dc
        else:
            assert isinstance(element, VoltageSource)
            ends, conductance, through = element.nodes, 0.0, bias.branch_current(element.name)
        sums.add(ends[0], through, conductance)
        sums.add(ends[1], -through, conductance)
    return sums, volts


def is_plausible(circuit: Circuit, bias: BiasPoint) -> bool:
    """Converged, at voltages and currents that stages have."""
    voltage = max(abs(bias.voltage(node)) for node in circuit.nodes)
    current = float(abs(bias.currents[0]).max())
    return bool(bias.converged[0]) and voltage <= HIGHEST_VOLTAGE and current <= HIGHEST_CURRENT


def joined(circuit: Circuit) -> dict[str, str]:
    """For each node, the name of the set of nodes that voltage sources join it to."""
    name = {node: node for node in (*circuit.nodes, GROUND)}
    for source in (e for e in circuit.elements if isinstance(e, VoltageSource)):
        kept, given_up = (name[node] for node in source.nodes)
        name = {node: kept if of == given_up else of for node, of in name.items()}
    return name


def worst_share(circuit: Circuit, bias: BiasPoint, *, junctions: bool = True) -> float:
    """Largest imbalance of a node, as a share of what is allowed there."""
    sums, volts = balance(circuit, bias, junctions=junctions)
    rounding = 8.0 * math.ulp(max(abs(v) for v in volts.values()))
    name = joined(circuit)
    together: dict[str, float] = defaultdict(float)
    for node, conductance in sums.conductance.items():
        together[name[node]] += conductance
    return max(
        abs(sums.current[node]) / max(LEAST, rounding * together[name[node]]) for node in circuit.nodes
    )


def pick(draw: random.Random, nodes: list[str], *besides: str) -> str:
    return draw.choice([node for node in nodes if node not in besides])


def spread(draw: random.Random, low: float, high: float) -> float:
    return math.exp(draw.uniform(math.log(low), math.log(high)))


def card(draw: random.Random, name: str) -> ModelCard:
    sign, kind = draw.choice([(1.0, "nmos"), (-1.0, "pmos")])
    values = {
        "vto": sign * draw.uniform(-1.5, 2.5), "kp": spread(draw, 1e-6, 1e-3),
        "lambda": draw.choice([0.0, draw.uniform(0.0, 0.2)]),
        "gamma": draw.choice([0.0, draw.uniform(0.0, 1.0)]), "phi": draw.uniform(0.4, 0.9),
    }  # fmt: skip
    return ModelCard(name, "nmos" if kind == "nmos" else "pmos", tuple(values.items()))


def network(draw: random.Random) -> Circuit:
    """Every node has resistors or sources to ground; one to three transistors hang on any of them."""
    nodes, elements = [GROUND, "n1"], list[Element]()
    elements.append(VoltageSource("v1", ("n1", GROUND), draw.uniform(-30.0, 30.0)))
    for number in range(2, draw.randint(3, 7)):
        node, other = f"n{number}", draw.choice(nodes)
        if draw.random() < 0.15:
            elements.append(VoltageSource(f"v{number}", (node, other), draw.uniform(-10.0, 10.0)))
        else:
            elements.append(Resistor(f"r{number}", (node, other), spread(draw, 1.0, 1e7)))
        nodes.append(node)
    for number in range(draw.randint(0, 4)):
        first = draw.choice(nodes)
        ends = (first, pick(draw, nodes, first))
        elements.append(Resistor(f"rx{number}", ends, spread(draw, 1.0, 1e7)))
    for number in range(draw.randint(0, 2)):
        first = draw.choice(nodes)
        elements.append(
            CurrentSource(f"i{number}", (first, pick(draw, nodes, first)), draw.uniform(-2e-3, 2e-3))
        )
    models = []
    for number in range(draw.randint(1, 3)):
        drain, model = draw.choice(nodes), card(draw, f"dut{number}")
        source = pick(draw, nodes, drain)
        pins = (drain, draw.choice(nodes), source, draw.choice([source, GROUND, "n1"]))
        models.append(model)
        elements.append(
            Mosfet(f"m{number}", pins, model.name, w=spread(draw, 1e-6, 1e-3), l=spread(draw, 1e-6, 1e-5),
                   m=float(draw.randint(1, 3)))
        )  # fmt: skip
    return Circuit("a random network", tuple(elements), tuple(models))


def solve(circuit: Circuit, *, junctions: bool = True) -> BiasPoint:
    effects = ALL_EFFECTS if junctions else WITHOUT_JUNCTIONS
    return solve_bias(circuit, Batch(effects=(effects,)), require=False)


@given(st.randoms(use_true_random=False), st.booleans())
def test_currents_into_every_node_add_up_to_nothing(draw: random.Random, junctions: bool) -> None:
    circuit = network(draw)
    bias = solve(circuit, junctions=junctions)
    assume(is_plausible(circuit, bias))
    share = worst_share(circuit, bias, junctions=junctions)
    target(share)
    assert share < 1.0, circuit


def test_nearly_every_network_has_a_bias_point_at_which_sources_hold_their_voltage(
    count: Callable[[int, int], int],
) -> None:
    total = count(400, 20_000)
    missing = conducting = leaking = 0
    for seed in range(total):
        circuit = network(random.Random(seed))
        bias = solve(circuit, junctions=False)
        missing += not bias.converged[0]
        if is_plausible(circuit, bias):
            assert worst_share(circuit, bias, junctions=False) < 1.0, circuit
            conducting += float(abs(bias.currents).max()) > 1e-6
            _assert_sources_hold(circuit, bias)
        if seed % 20:
            continue
        # With junctions a supply may be shorted: then there is none, or one of absurd currents, and it takes
        # long to find out.
        bias = solve(circuit)
        if is_plausible(circuit, bias):
            assert worst_share(circuit, bias) < 1.0, circuit
            leaking += float(abs(bias.currents[..., 3]).max()) > 1e-6
            _assert_sources_hold(circuit, bias)
    assert missing <= total // 100
    assert conducting >= total // 2
    assert leaking >= total // 400


def _assert_sources_hold(circuit: Circuit, bias: BiasPoint) -> None:
    for source in (e for e in circuit.elements if isinstance(e, VoltageSource)):
        first, second = (bias.voltage(node) for node in source.nodes)
        assert abs(first - second - source.dc) < 1e-14 * HIGHEST_VOLTAGE, circuit


def test_a_microvolt_beside_the_bias_point_would_be_noticed() -> None:
    """The balance has teeth: a solution moved by 1 µV is far out of it."""
    circuit = Circuit(
        "a stage",
        (
            VoltageSource("vdd", ("vdd", GROUND), 10.0),
            VoltageSource("vg", ("g", GROUND), 2.0),
            Resistor("rd", ("vdd", "d"), 5e3),
            Mosfet("m1", ("d", "g", GROUND, GROUND), "dut", w=1e-5, l=1e-5),
        ),
        (ModelCard("dut", "nmos", (("vto", 1.0), ("kp", 1e-3), ("lambda", 0.02))),),
    )
    bias = solve(circuit)
    assert worst_share(circuit, bias) < 0.1
    moved = bias.unknowns.copy()
    moved[0, bias.layout.node("d")] += 1e-6
    assert worst_share(circuit, replace(bias, unknowns=moved)) > 100.0
