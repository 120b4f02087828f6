"""Q-points of the other ways to bias one transistor against ``scipy.optimize.brentq``.

Every check here is independent: for each net the terminal voltages at a trial current are written down below
by Kirchhoff's and Ohm's laws, and the Q-point is the root of one scalar equation, the square law
(``square_law.py``) at these voltages less the trial. Where a source forces the current, the trial is the
source's voltage. Nothing of deckgen's laws, reduction, nodal equations or Newton iteration takes part in the
reference; nothing is pinned.

Nets are drawn with n-channel signs between ``low`` (where the source belongs) and ``high``; for a p-channel
device the two are exchanged. All voltages count from ``low``.
"""

from __future__ import annotations

import math
import random
from collections import Counter
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field

import pytest
from scipy.optimize import brentq

from deckgen.assumptions import assumptions_made
from deckgen.circuit.model import (
    Capacitor,
    Circuit,
    CurrentSource,
    Element,
    ModelCard,
    Mosfet,
    Resistor,
    VoltageSource,
)
from deckgen.hand.batch import Batch, prepare_devices
from deckgen.hand.effects import effects_under
from deckgen.hand.predict import predict
from deckgen.hand.prediction import How
from deckgen.hand.reduce.dc import dc_net
from deckgen.hand.working import qpoint
from tests.outside.square_law import Card

RELATIVE = 1e-9
PAPER = assumptions_made("paper")

Point = tuple[float, float, float]
"""VG, VS, VD over ``low``, n-channel signs [V]."""


@dataclass
class Net:
    """A net while it is drawn, and the voltages that it has at a drain current."""

    draw: random.Random
    split: bool = False
    elements: list[Element] = field(default_factory=list)
    gate: str = "g"
    drain: str = "d"
    forced: float | None = None
    at: Callable[[float], Point] = lambda _: (0.0, 0.0, 0.0)

    def __post_init__(self) -> None:
        d = self.draw
        self.polarity, self.bulk_at_source = d.choice("np"), d.random() < 0.3
        self.supply, self.ground = d.uniform(3.0, 30.0), 0.0
        self.card = Card(
            k=self.spread(1e-5, 1e-2), vto=d.uniform(0.3, 2.0), lam=0.0,
            gamma=d.choice([0.0, d.uniform(0.1, 1.0)]), phi=d.uniform(0.4, 0.9),
        )  # fmt: skip
        positive = self.supply
        if self.split:
            positive = self.supply * d.uniform(0.2, 0.8)
            self.ground = self.supply - positive if self.polarity == "n" else positive
            self.elements.append(VoltageSource("vss", ("vss", "0"), positive - self.supply))
        self.elements.append(VoltageSource("vdd", ("vdd", "0"), positive))

    def spread(self, low: float, high: float) -> float:
        return math.exp(self.draw.uniform(math.log(low), math.log(high)))

    def depletion(self) -> None:
        self.card = Card(self.card.k, -self.draw.uniform(0.5, 4.0), 0.0, self.card.gamma, self.card.phi)

    def node(self, name: str) -> str:
        ends = ("vss" if self.split else "0", "vdd")
        low, high = ends if self.polarity == "n" else ends[::-1]
        return {"low": low, "high": high}.get(name, name)

    def r(self, name: str, first: str, second: str, low: float, high: float) -> float:
        value = self.spread(low, high)
        self.elements.append(Resistor(name, (self.node(first), self.node(second)), value))
        return value

    def source_resistor(self) -> float:
        """RS, or a source at ``low``."""
        self.source = "s" if self.draw.random() < 0.6 else "low"
        return self.r("rs", "s", "low", 10.0, 1e5) if self.source == "s" else 0.0

    def circuit(self) -> Circuit:
        drain, gate, source = (self.node(one) for one in (self.drain, self.gate, self.source))
        bulk = source if self.bulk_at_source else self.node("low")
        mosfet = Mosfet("m1", (drain, gate, source, bulk), "dut", w=1e-5, l=1e-5)
        kind = "nmos" if self.polarity == "n" else "pmos"
        card = ModelCard("dut", kind, self.card.parameters(self.polarity))
        return Circuit("a net", (*self.elements, mosfet), (card,))


def drain_feedback(net: Net) -> None:
    """RF from drain to gate, which draws no current."""
    r_s, r_d = net.source_resistor(), net.r("rd", "high", "d", 100.0, 1e6)
    net.r("rf", "d", "g", 1e3, 1e7)
    net.at = lambda i: (net.supply - i * r_d, i * r_s, net.supply - i * r_d)


def drain_feedback_with_pull_down(net: Net) -> None:
    r_s, r_d = net.source_resistor(), net.r("rd", "high", "d", 100.0, 1e6)
    r_f, r_2 = net.r("rf", "d", "g", 1e3, 1e7), net.r("r2", "g", "low", 1e3, 1e7)

    def at(i: float) -> Point:
        v_d = (net.supply / r_d - i) / (1.0 / r_d + 1.0 / (r_f + r_2))
        return v_d * r_2 / (r_f + r_2), i * r_s, v_d

    net.at = at


def diode(net: Net) -> None:
    """Gate and drain at one node, enhancement or depletion."""
    if net.draw.random() < 0.3:
        net.depletion()
    net.gate = net.drain
    r_s, r_d = net.source_resistor(), net.r("rd", "high", "d", 100.0, 1e6)
    net.at = lambda i: (net.supply - i * r_d, i * r_s, net.supply - i * r_d)


def dual_supply(net: Net) -> None:
    """Gate at ground through RG, RS to the supply behind the source."""
    net.source = "s"
    net.r("rg", "g", "0", 1e3, 1e7)
    r_s, r_d = net.r("rs", "s", "low", 100.0, 1e6), net.r("rd", "high", "d", 100.0, 1e6)
    net.at = lambda i: (net.ground, i * r_s, net.supply - i * r_d)


def self_bias(net: Net) -> None:
    """A depletion device whose source resistor biases it, gate at ``low`` through RG."""
    net.depletion()
    net.source = "s"
    net.r("rg", "g", "low", 1e3, 1e7)
    r_s, r_d = net.r("rs", "s", "low", 10.0, 1e5), net.r("rd", "high", "d", 10.0, 1e6)
    net.at = lambda i: (0.0, i * r_s, net.supply - i * r_d)


def bootstrapped(net: Net) -> None:
    """A divider behind R3, its middle tied to the source by a capacitor; the drain at ``high``."""
    net.source, net.drain = "s", "high"
    r_1, r_2 = net.r("r1", "high", "m", 1e3, 1e7), net.r("r2", "m", "low", 1e3, 1e7)
    net.r("r3", "m", "g", 1e3, 1e7)
    net.elements.append(Capacitor("cb", ("s", "m"), 1e-6))
    r_s = net.r("rs", "s", "low", 10.0, 1e5)
    net.at = lambda i: (net.supply * r_2 / (r_1 + r_2), i * r_s, net.supply)


def bootstrapped_by_a_tap(net: Net) -> None:
    """A depletion follower whose RG goes to a tap of its source resistor."""
    net.depletion()
    net.source, net.drain = "s", "high"
    r_1, r_2 = net.r("rs1", "s", "t", 10.0, 1e5), net.r("rs2", "t", "low", 10.0, 1e5)
    net.r("rg", "t", "g", 1e3, 1e7)
    net.at = lambda i: (i * r_2, i * (r_1 + r_2), net.supply)


def pulled_up_tap(net: Net) -> None:
    """The same with a resistor from ``high`` to the gate, whose current runs through RG and RS2."""
    net.source = "s"
    r_1, r_2 = net.r("rs1", "s", "t", 10.0, 1e5), net.r("rs2", "t", "low", 10.0, 1e5)
    r_g, r_u = net.r("rg", "t", "g", 1e3, 1e7), net.r("ru", "high", "g", 1e3, 1e7)
    r_d = net.r("rd", "high", "d", 10.0, 1e5)

    def at(i: float) -> Point:
        v_t = r_2 * (i + net.supply / (r_u + r_g)) / (1.0 + r_2 / (r_u + r_g))
        return v_t + (net.supply - v_t) * r_g / (r_u + r_g), v_t + i * r_1, net.supply - i * r_d

    net.at = at


def forced_current(net: Net) -> None:
    """A current source in the source, the drain at ``high`` or behind RD."""
    net.source = "s"
    net.forced = 0.5 * net.card.k * net.draw.uniform(0.05, 1.5) ** 2
    ends = ("s", "low") if net.polarity == "n" else ("low", "s")
    net.elements.append(CurrentSource("ib", (net.node(ends[0]), net.node(ends[1])), net.forced))
    r_1, r_2 = net.r("r1", "high", "g", 1e3, 1e7), net.r("r2", "g", "low", 1e3, 1e7)
    v_g, r_d = net.supply * r_2 / (r_1 + r_2), 0.0
    if net.draw.random() < 0.8:
        r_d = net.draw.uniform(0.05, 0.95) * net.supply / net.forced
        net.elements.append(Resistor("rd", (net.node("high"), "d"), r_d))
    else:
        net.drain = "high"
    forced = net.forced
    net.at = lambda v_s: (v_g, v_s, net.supply - forced * r_d)


@dataclass(frozen=True)
class Root:
    """The Q-point of a net, voltages in n-channel signs."""

    i_d: float
    v_gs: float
    v_ds: float
    vth: float
    region: str


def root(net: Net) -> Root | None:
    """Root of the scalar equation; None where the source would lie below the bulk."""

    def inside(trial: float) -> Point:
        v_g, v_s, v_d = net.at(trial)
        return v_g - v_s, v_d - v_s, 0.0 if net.bulk_at_source else v_s

    def excess(trial: float) -> float:
        v_gs, v_ds, v_sb = inside(trial)
        law = net.card.current(v_gs, max(v_ds, 0.0), v_sb)
        return law - (trial if net.forced is None else net.forced)

    if net.forced is None:
        low, high = 0.0, 1e-9
        while excess(high) > 0.0:
            high *= 2.0
    else:
        low, high = (-100.0 if net.bulk_at_source else 0.0), net.at(0.0)[0] - net.card.vto
        if not low < high or not excess(low) > 0.0:
            return None
    trial = brentq(excess, low, high, xtol=1e-30, rtol=8.9e-16, maxiter=1000) if excess(low) > 0.0 else low
    v_gs, v_ds, v_sb = inside(trial)
    current = trial if net.forced is None else net.forced
    return Root(current, v_gs, v_ds, net.card.threshold(v_sb), net.card.region(v_gs, v_ds, v_sb))


# Each net with the regions that it must have been seen in.
KINDS = {
    drain_feedback: {"saturation"},
    drain_feedback_with_pull_down: {"saturation", "cut-off"},
    diode: {"saturation", "triode"},
    dual_supply: {"saturation", "triode", "cut-off"},
    self_bias: {"saturation", "triode"},
    bootstrapped: {"saturation", "cut-off"},
    bootstrapped_by_a_tap: {"saturation", "triode"},
    pulled_up_tap: {"saturation", "triode", "cut-off"},
    forced_current: {"saturation", "triode"},
}


def drawn(kind: Callable[[Net], None], seed: int, wanted: int) -> Iterator[tuple[Net, Root]]:
    """Random nets with their roots; drain and source keep their parts."""
    draw, found = random.Random(seed), 0
    while found < wanted:
        net = Net(draw, split=kind is dual_supply)
        kind(net)
        expected = root(net)
        if expected is not None and expected.v_ds >= 0.0:
            found += 1
            yield net, expected


every_kind = pytest.mark.parametrize("kind", KINDS, ids=lambda kind: kind.__name__)


@every_kind
def test_closed_form_of_the_bias_is_the_root(
    kind: Callable[[Net], None], count: Callable[[int, int], int]
) -> None:
    """Channel-length modulation left out; body effect, triode and cut-off included, n and p."""
    seen: Counter[str] = Counter()
    for net, expected in drawn(kind, 11, count(200, 5000)):
        circuit = net.circuit()
        surroundings = dc_net(circuit)
        assert surroundings is not None, circuit
        parameters = prepare_devices(circuit, Batch(effects=(effects_under(PAPER),)))
        found = qpoint.solve(surroundings, qpoint.device_of("m1", parameters))
        assert found is not None, (circuit, expected)
        sign, close = 1.0 if net.polarity == "n" else -1.0, RELATIVE * net.supply
        assert found.i_d == pytest.approx(expected.i_d, rel=RELATIVE, abs=1e-18), circuit
        assert sign * (found.v_g - found.v_s) == pytest.approx(expected.v_gs, rel=RELATIVE, abs=close), (
            circuit
        )
        assert sign * (found.v_d - found.v_s) == pytest.approx(expected.v_ds, rel=RELATIVE, abs=close), (
            circuit
        )
        assert found.vth == pytest.approx(expected.vth, rel=RELATIVE, abs=1e-9), circuit
        margin = expected.v_ds - (expected.v_gs - expected.vth)
        if abs(margin) > 1e-9:
            assert found.region.value == expected.region, circuit
        seen[expected.region] += 1
    for region in KINDS[kind]:
        assert seen[region] >= 5, seen


@every_kind
def test_predicted_bias_is_the_root(kind: Callable[[Net], None], count: Callable[[int, int], int]) -> None:
    """The hand values under the paper set are these closed forms."""
    for net, expected in drawn(kind, 13, count(20, 500)):
        prediction = predict(net.circuit(), None, assumptions=PAPER)
        sign = 1.0 if net.polarity == "n" else -1.0
        right = {
            "ID": expected.i_d,
            "VGS": sign * expected.v_gs,
            "VDS": sign * expected.v_ds,
            "VTH": sign * expected.vth,
        }
        for name, wanted in right.items():
            found = prediction.value(f"{name}(M1)")
            assert found is not None
            assert found.how is How.CLOSED_FORM, (name, net.circuit())
            assert found.value == pytest.approx(
                wanted, rel=RELATIVE, abs=RELATIVE * net.supply * (name != "ID")
            ), (name, net.circuit())
