"""Q-points of random one-transistor stages against ``scipy.optimize.brentq`` on an equation of our own.

Every check here is independent: the square law (H. Shichman, D. A. Hodges, IEEE J. Solid-State Circuits
SC-3(3), 1968, 285-289) is written out once more (``square_law.py``), in n-channel signs, and the Q-point is
the root of one scalar equation in the drain current. Nothing of deckgen's laws, nodal equations or
Newton iteration takes part in the reference; nothing is pinned.

The equation: for a trial current I the source is I·RS above its end, the drain I·RD below its own, and the
law at these voltages gives a current back. Law minus trial falls strictly with I, so there is one root.
"""

from __future__ import annotations

import math
import random
from collections import Counter
from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace

import pytest
from scipy.optimize import brentq

from deckgen.assumptions import assumptions_made
from deckgen.circuit.model import Capacitor, Circuit, Element, ModelCard, Mosfet, Resistor, VoltageSource
from deckgen.circuit.ports import Ports
from deckgen.hand.batch import Batch
from deckgen.hand.bias import solve_bias
from deckgen.hand.effects import effects_under
from deckgen.hand.predict import predict
from deckgen.hand.prediction import How
from tests.outside.square_law import Card

CHANNEL = effects_under(["no-bulk-junctions"])
RELATIVE = 1e-9
MEGOHM = 1e6


@dataclass(frozen=True)
class Case:
    """A gate divider, a transistor, resistors in drain and source (0: none); SI, thresholds n-channel."""

    polarity: str
    v_dd: float
    r_1: float
    r_2: float
    r_d: float
    r_s: float
    card: Card
    bulk_at_source: bool

    @property
    def gate(self) -> float:
        """Gate voltage above the end of the source resistor, n-channel signs [V]."""
        above_ground = self.v_dd * self.r_2 / (self.r_1 + self.r_2)
        return above_ground if self.polarity == "n" else self.v_dd - above_ground


@dataclass(frozen=True)
class Root:
    """The Q-point as the scalar equation gives it, n-channel signs."""

    i_d: float
    v_gs: float
    v_ds: float
    vth: float
    region: str


def root(case: Case, *, lam: float) -> Root:
    """Solve law(I) = I between no current and the current that leaves the transistor no VDS."""
    total, card = case.r_d + case.r_s, replace(case.card, lam=lam)

    def point(current: float) -> tuple[float, float, float]:
        v_s = current * case.r_s
        return case.gate - v_s, case.v_dd - current * total, 0.0 if case.bulk_at_source else v_s

    def excess(current: float) -> float:
        v_gs, v_ds, v_sb = point(current)
        return card.current(v_gs, max(v_ds, 0.0), v_sb) - current

    # A current that is too small to be a root leaves the law above it.
    current = 0.0
    if excess(0.0) > 0.0:
        current = brentq(excess, 0.0, case.v_dd / total, xtol=1e-30, rtol=8.9e-16, maxiter=500)
    v_gs, v_ds, v_sb = point(current)
    return Root(current, v_gs, v_ds, card.threshold(v_sb), card.region(v_gs, v_ds, v_sb))


def log_uniform(draw: random.Random, low: float, high: float) -> float:
    return math.exp(draw.uniform(math.log(low), math.log(high)))


def cases(seed: int) -> Iterator[Case]:
    """Endless random stages over what people build, and well beyond it."""
    draw = random.Random(seed)
    while True:
        yield Case(
            polarity=draw.choice("np"),
            v_dd=draw.uniform(1.5, 40.0),
            r_1=log_uniform(draw, 1e3, 10 * MEGOHM),
            r_2=log_uniform(draw, 1e3, 10 * MEGOHM),
            r_d=log_uniform(draw, 50.0, MEGOHM),
            r_s=draw.choice([0.0, log_uniform(draw, 10.0, MEGOHM)]),
            card=Card(
                k=log_uniform(draw, 1e-6, 0.1),
                vto=draw.uniform(-2.0, 3.0),
                lam=draw.choice([0.0, draw.uniform(0.0, 0.2)]),
                gamma=draw.choice([0.0, draw.uniform(0.0, 1.2)]),
                phi=draw.uniform(0.4, 0.9),
            ),
            bulk_at_source=draw.random() < 0.3,
        )


def circuit_of(case: Case) -> Circuit:
    """The same stage as a circuit; W/L = 1, so that KP is k."""
    n = case.polarity == "n"
    source_end, drain_end = ("0", "vdd") if n else ("vdd", "0")
    source = "s" if case.r_s > 0.0 else source_end
    bulk = source if case.bulk_at_source else source_end
    elements: list[Element] = [
        VoltageSource("vdd", ("vdd", "0"), case.v_dd),
        VoltageSource("vsig", ("in", "0"), 0.0, 1.0),
        Capacitor("cin", ("in", "g"), 1e-6),
        Resistor("r1", ("vdd", "g"), case.r_1),
        Resistor("r2", ("g", "0"), case.r_2),
        Resistor("rd", (drain_end, "d"), case.r_d),
        Mosfet("m1", ("d", "g", source, bulk), "dut", w=1e-5, l=1e-5),
    ]
    if case.r_s > 0.0:
        elements.append(Resistor("rs", ("s", source_end), case.r_s))
    card = ModelCard("dut", "nmos" if n else "pmos", case.card.parameters(case.polarity))
    return Circuit("a stage", tuple(elements), (card,))


def agree(case: Case, expected: Root, *, i_d: float, v_gs: float, v_ds: float, rel: float) -> None:
    """Hold a Q-point to the root: currents relative, voltages relative to the supply."""
    sign = 1.0 if case.polarity == "n" else -1.0
    assert i_d == pytest.approx(expected.i_d, rel=rel, abs=1e-18), (case, expected)
    assert sign * v_gs == pytest.approx(expected.v_gs, rel=rel, abs=rel * case.v_dd), (case, expected)
    assert sign * v_ds == pytest.approx(expected.v_ds, rel=rel, abs=rel * case.v_dd), (case, expected)


def test_random_q_points_are_the_roots_of_the_scalar_equation(count: Callable[[int, int], int]) -> None:
    """With λ and γ, in saturation, triode and cut-off, n and p, within 1e-9."""
    seen: Counter[tuple[str, str]] = Counter()
    draw = cases(seed=2)
    total = count(600, 20_000)
    for _ in range(total):
        case = next(draw)
        expected = root(case, lam=case.card.lam)
        bias = solve_bias(circuit_of(case), Batch(effects=(CHANNEL,)))
        drain, gate, source, _ = bias.terminals[0, 0]
        current = abs(float(bias.currents[0, 0, 0]))
        agree(case, expected, i_d=current, v_gs=gate - source, v_ds=drain - source, rel=RELATIVE)
        seen[case.polarity, expected.region] += 1
    for polarity in "np":
        for region in ("saturation", "triode", "cut-off"):
            assert seen[polarity, region] >= total // 30, seen


def test_closed_forms_of_the_bias_are_the_roots_without_channel_length_modulation(
    count: Callable[[int, int], int],
) -> None:
    """The paper set's ID, VGS, VDS and VTH, triode's quadratic and the iterated threshold included."""
    paper = assumptions_made("paper")
    draw = cases(seed=3)
    seen: Counter[str] = Counter()
    for _ in range(count(100, 3_000)):
        case = next(draw)
        expected = root(case, lam=0.0)
        prediction = predict(circuit_of(case), Ports("vsig", "d"), assumptions=paper, frequency=1e3)
        value = {hand.name: hand for hand in prediction.values}
        assert value["ID(M1)"].how is How.CLOSED_FORM
        found = {name: value[f"{name}(M1)"].value for name in ("ID", "VGS", "VDS", "VTH")}
        assert None not in found.values()
        agree(case, expected, i_d=found["ID"], v_gs=found["VGS"], v_ds=found["VDS"], rel=RELATIVE)
        sign = 1.0 if case.polarity == "n" else -1.0
        assert sign * found["VTH"] == pytest.approx(expected.vth, rel=RELATIVE, abs=1e-9)
        (device,) = prediction.transistors
        if abs(device.margin) > 1e-9:
            assert device.region.value == expected.region
        seen[expected.region] += 1
    assert min(seen[region] for region in ("saturation", "triode", "cut-off")) >= 5, seen
