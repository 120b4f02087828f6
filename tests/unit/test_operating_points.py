"""Networks with several operating points: all found, told apart, and called stable where they stay.

Independent: what stays is decided here by letting the network go. With the same capacitance at every node
that no source holds, its voltages follow the currents that are left over, by the laws of ``test_kirchhoff``.
"""

from __future__ import annotations

import math

import numpy as np
import pytest

from deckgen.circuit.model import GROUND, Circuit, Mosfet, Resistor, VoltageSource
from deckgen.circuit.reader import read_flat
from deckgen.hand.analysis import analyse
from deckgen.hand.batch import Batch
from deckgen.hand.bias import BiasPoint, solve_bias, with_other_points
from deckgen.hand.effects import ALL_EFFECTS, effects_under
from tests.unit.test_kirchhoff import channel, worst_share

FULL = Batch((ALL_EFFECTS,))
NO_LAMBDA = effects_under(["no-channel-length-modulation"])
MODELS = """.model nm nmos level=1 vto=0.8 kp=100u lambda=0.02 gamma=0.4 phi=0.7
.model pm pmos level=1 vto=-0.9 kp=40u lambda=0.03 gamma=0.5 phi=0.7
"""
LATCH = """vdd vdd 0 5
r1 vdd q 20k
r2 vdd qb 20k
m1 q qb 0 0 nm w=20u l=2u
m2 qb q 0 0 nm w=20u l=2u
"""
SKEWED = LATCH.replace("r1 vdd q 20k", "r1 vdd q 23k").replace("m2 qb q 0 0 nm w=20u", "m2 qb q 0 0 nm w=26u")
COMPLEMENTARY = """vdd vdd 0 5
m1 q qb 0 0 nm w=20u l=2u
m2 qb q 0 0 nm w=20u l=2u
m3 q qb vdd vdd pm w=40u l=2u
m4 qb q vdd vdd pm w=40u l=2u
"""
SCHMITT = """vdd vdd 0 10
vg g 0 3.3
r1 vdd a 10k
r2 vdd out 5k
ra a b 100k
rb b 0 100k
rs s 0 2k
m1 a g s 0 nm w=100u l=2u
m2 out b s 0 nm w=100u l=2u
"""
SCHMITT_OF_SIX = """vdd vdd 0 5
vin in 0 2.4
m1 x in 0 0 nm w=20u l=2u
m2 out in x 0 nm w=20u l=2u
m3 vdd out x 0 nm w=20u l=2u
m4 y in vdd vdd pm w=50u l=2u
m5 out in y vdd pm w=50u l=2u
m6 0 out y vdd pm w=50u l=2u
"""
SELF_BIASED = """vdd vdd 0 3.3
m1 a a 0 0 nm w=20u l=2u
m2 b a s 0 nm w=80u l=2u
rs s 0 5k
m3 a b vdd vdd pm w=40u l=2u
m4 b b vdd vdd pm w=40u l=2u
"""
TWO_LATCHES = (
    LATCH
    + """r3 vdd x 20k
r4 vdd xb 21k
m3 x xb 0 0 nm w=20u l=2u
m4 xb x 0 0 nm w=20u l=2u
"""
)
AMPLIFIER = """vdd vdd 0 5
vr r 0 1
e1 g 0 {} 5
rl vdd d 1k
m1 d g s 0 nm w=20u l=2u
rs s 0 10k
"""


def circuit(cards: str) -> Circuit:
    return read_flat("t\n" + MODELS + cards)


def points(cards: str, batch: Batch = FULL) -> list[BiasPoint]:
    point = solve_bias(circuit(cards), batch)
    return [point, *point.others]


def released(c: Circuit, point: BiasPoint, push: float) -> float:
    """How far the voltages are from a point in the end [V], when they were pushed aside and let go."""
    held = {e.nodes[0] for e in c.elements if isinstance(e, VoltageSource)} | {GROUND}
    volts = {node: point.voltage(node) for node in c.nodes} | {GROUND: 0.0}
    free = [node for node in c.nodes if node not in held]
    start = dict(volts)
    for number, node in enumerate(free):
        volts[node] += push if number % 2 else -push
    for _ in range(4000):
        out, conductance = dict.fromkeys(volts, 0.0), dict.fromkeys(volts, 1e-12)
        for e in c.elements:
            if isinstance(e, Resistor):
                ends, g = e.nodes, 1.0 / e.value
                current = g * (volts[ends[0]] - volts[ends[1]])
            elif isinstance(e, Mosfet):
                ends = (e.nodes[0], e.nodes[2])
                current, g = channel(e, c.model(e.model), volts)
            else:
                continue
            for node, sign in zip(ends, (1.0, -1.0), strict=True):
                out[node] += sign * current
                conductance[node] += g
            if isinstance(e, Mosfet):
                conductance[e.nodes[1]] += g
        step = 0.2 / max(conductance[node] for node in free)
        for node in free:
            volts[node] -= step * out[node]
    return max(abs(volts[node] - start[node]) for node in free)


BISTABLE = {
    "two inverters": LATCH,
    "two unequal inverters": SKEWED,
    "two complementary inverters": COMPLEMENTARY,
    "two stages with a common source resistor": SCHMITT,
    "six transistors with feedback to the middle of each stack": SCHMITT_OF_SIX,
}


@pytest.mark.parametrize("name", BISTABLE)
def test_a_bistable_network_has_two_stable_points_and_an_unstable_one_between(name: str) -> None:
    c, found = circuit(BISTABLE[name]), points(BISTABLE[name])
    assert sorted(point.stable for point in found) == [False, True, True]
    assert found[0].stable
    for point in found:
        assert worst_share(c, point) < 1.0
        aside = released(c, point, 1e-3)
        assert aside < 1e-4 if point.stable else aside > 0.3
    low, high = (p for p in found if p.stable)
    (between,) = (p for p in found if not p.stable)
    for node in c.nodes:
        ends = sorted([low.voltage(node), high.voltage(node)])
        if ends[1] - ends[0] > 0.5:
            assert ends[0] < between.voltage(node) < ends[1]


def test_two_latches_side_by_side_have_four_stable_points_of_nine() -> None:
    found = points(TWO_LATCHES)
    assert len(found) == 9
    assert sum(point.stable for point in found) == 4
    states = {tuple(point.voltage(node) > 2.5 for node in ("q", "x")) for point in found if point.stable}
    assert len(states) == 4


def test_a_self_biased_reference_has_a_zero_state_without_any_current() -> None:
    """Of channels alone: what leaks through the bulk junctions starts it."""
    on, *others = points(SELF_BIASED, Batch((effects_under(["no-bulk-junctions"]),)))
    assert on.stable
    assert 10e-6 < on.currents[0, 0, 0] < 50e-6
    (zero,) = (point for point in others if point.stable)
    assert float(np.abs(zero.currents).max()) < 1e-12
    assert zero.voltage("a") < 0.7
    assert zero.voltage("b") > 2.5


@pytest.mark.parametrize(("volts", "count"), [(2.0, 1), (2.9, 3), (3.3, 3), (5.0, 1)])
def test_a_trigger_has_several_points_only_within_its_hysteresis(volts: float, count: int) -> None:
    assert len(points(SCHMITT.replace("vg g 0 3.3", f"vg g 0 {volts}"))) == count


def test_a_controlled_source_gives_one_transistor_several_points_if_it_feeds_back_in_phase() -> None:
    assert sorted(p.stable for p in points(AMPLIFIER.format("s r"))) == [False, True, True]
    assert len(points(AMPLIFIER.format("r s"))) == 1


UNIQUE = {
    "one stage": "vdd vdd 0 5\nrd vdd d 5k\nr1 vdd g 3meg\nr2 g 0 1meg\nrs s 0 1k\n"
    "m1 d g s 0 nm w=20u l=2u\n",
    "a pair": "vdd vdd 0 5\nvg g 0 2.5\nr1 vdd a 20k\nr2 vdd b 20k\nm1 a g t 0 nm w=20u l=2u\n"
    "m2 b g t 0 nm w=20u l=2u\nrt t 0 10k\n",
    "a mirror": "vdd vdd 0 5\nrr vdd a 20k\nm1 a a 0 0 nm w=20u l=2u\nm2 b a 0 0 nm w=40u l=2u\nrl vdd b 4k",
    "a cascode": "vdd vdd 0 5\nvg g 0 1.2\nvb b 0 3\nrd vdd d 5k\nm1 x g 0 0 nm w=20u l=2u\n"
    "m2 d b x 0 nm w=20u l=2u\n",
    "three inverters in a ring": "vdd vdd 0 5\n" + "".join(
        f"r{i} vdd n{i} 20k\nm{i} n{i} n{(i + 1) % 3} 0 0 nm w=20u l=2u\n" for i in range(3)
    ),
}  # fmt: skip


@pytest.mark.parametrize("name", UNIQUE)
def test_a_network_without_a_gaining_loop_has_one_point_and_that_is_stable(name: str) -> None:
    (only,) = points(UNIQUE[name])
    assert only.stable


def test_the_point_taken_is_that_of_the_cold_start_or_the_stable_one_nearest_to_it() -> None:
    c = circuit(SKEWED)
    cold = solve_bias(c, Batch((ALL_EFFECTS, ALL_EFFECTS))).row(0)  # several rows: no search
    assert cold.others == ()
    looked = with_other_points(c, cold)
    (left,) = (p for p in looked.others if not p.stable)
    assert left.unknowns == pytest.approx(cold.unknowns, abs=1e-9)  # the cold start leads to what can't last
    away = [float(np.abs(p.unknowns - cold.unknowns).max()) for p in (looked, *looked.others) if p.stable]
    assert away[0] == min(away)


def test_a_solve_near_a_point_stays_with_it() -> None:
    c = circuit(LATCH)
    one, *others = points(LATCH)
    (other,) = (point for point in others if point.stable)
    for point in (one, other):
        near = solve_bias(c, Batch((NO_LAMBDA, ALL_EFFECTS)), near=point)
        assert near.voltage("q", 0) == pytest.approx(point.voltage("q"), abs=0.05)
        assert near.unknowns[1] == pytest.approx(point.unknowns[0], abs=1e-9)


def test_a_network_that_can_stay_nowhere_has_an_unstable_point() -> None:
    alone = "vdd vdd 0 5\nrd vdd d 1k\ne1 x 0 y 0 3\nrx x y 1k\nry y 0 1k\nm1 d y 0 0 nm w=20u l=2u\n"
    (only,) = points(alone)
    assert not only.stable


@pytest.mark.parametrize("on", [ALL_EFFECTS, NO_LAMBDA], ids=["all effects", "no λ"])
def test_an_analysis_knows_the_other_points_whatever_is_left_out(on: frozenset) -> None:
    bias = analyse(circuit(LATCH), None, on, None).bias
    assert bias is not None
    assert sorted(point.stable for point in (bias, *bias.others)) == [False, True, True]


def test_letting_go_tells_a_stable_point_from_an_unstable_one() -> None:
    """The check has teeth: a latch pushed over its ridge ends up on the other side."""
    c, found = circuit(LATCH), points(LATCH)
    stable = next(point for point in found if point.stable)
    assert released(c, stable, 1e-3) < 1e-4
    assert math.isclose(released(c, stable, 3.0), 4.94, abs_tol=0.1)
