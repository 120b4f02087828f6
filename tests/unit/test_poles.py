"""Poles and zeros: known networks to rounding, spreads of eighteen decades, and the gain that follows."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from deckgen.circuit.gain import NO_GAIN
from deckgen.circuit.model import GROUND, Capacitor, Circuit, Element, Resistor, Vcvs, VoltageSource
from deckgen.circuit.ports import Ports
from deckgen.circuit.reader import read_flat
from deckgen.hand import bandwidth
from deckgen.hand.batch import Batch
from deckgen.hand.bias import solve_bias
from deckgen.hand.effects import ALL_EFFECTS
from deckgen.hand.network import Treatment
from deckgen.hand.poles import PolesAndZeros, poles_and_zeros, roots
from deckgen.hand.prediction import HalfPlane, Root
from deckgen.hand.smallsignal import SmallSignal, explicit_capacitors, linearize, transfer
from tests.unit.circuits import Values, ports_of, stage

FULL = Batch((ALL_EFFECTS,))
RC = Ports("vin", "out")


def network(cards: str, ports: Ports = RC) -> SmallSignal:
    model = ".model nm nmos level=1 vto=0.8 kp=100u lambda=0.02 gamma=0.4 phi=0.7 cgso=0.3n cgdo=0.3n\n"
    circuit = read_flat("t\n" + model + cards)
    return linearize(circuit, ports, solve_bias(circuit, FULL))


def small_of(v: Values) -> SmallSignal:
    circuit = stage(v)
    return linearize(circuit, ports_of(v), solve_bias(circuit, FULL))


def found_in(small: SmallSignal, middle: float = 1e3) -> PolesAndZeros:
    found = poles_and_zeros(small, middle)
    assert found is not None
    return found


def naturals(small: SmallSignal) -> tuple[complex, ...]:
    """All natural frequencies, whether the gain shows them or not [rad/s]."""
    found = found_in(small)
    return (*found.poles, *found.cancelled)


def of(cards: str) -> PolesAndZeros:
    return found_in(network(cards))


def same(found: Sequence[complex], expected: Sequence[complex], rel: float = 1e-12) -> None:
    assert len(found) == len(expected), found
    for one, other in zip(found, expected, strict=True):
        assert abs(one - other) <= rel * abs(other), (found, expected)


# --- networks whose poles and zeros are known ---

ONE_POLE = 1.0 / (750.0 * 1e-6)


@pytest.mark.parametrize(
    ("cards", "poles", "zeros"),
    [
        ("vin in 0 0 ac 1\nr1 in out 1k\nr2 out 0 3k\nc1 out 0 1u\n", [-ONE_POLE], []),
        ("vin in 0 0 ac 1\nc1 in out 1u\nr1 out 0 1k\n", [-1e3], [0.0]),
        ("vin in 0 0 ac 1\nr1 in out 1k\nc1 in out 1u\nr2 out 0 1k\n", [-2e3], [-1e3]),
        ("vin in 0 0 ac 1\nr1 in out 1k\nl1 out 0 1m\n", [-1e6], [0.0]),
        ("vin in 0 0 ac 1\nl1 in out 1m\nr1 out 0 1k\n", [-1e6], []),
        ("vin in 0 0 ac 1\nr1 in out 1k\nr2 out 0 1k\n", [], []),
        ("vin in 0 0 ac 1\nr1 in out 1k\nc1 in 0 1u\n", [], []),  # held by the source itself
        ("vin in 0 0 ac 1\nr1 in out 1k\nc1 out 0 1u\nc2 in out 1u\n", [-500.0], [-1e3]),  # a loop of them
    ],
    ids=["low-pass", "high-pass", "lead", "L to ground", "L in series", "resistors", "at the source", "loop"],
)
def test_networks_of_one_element_have_the_poles_and_zeros_of_the_textbook(
    cards: str, poles: list[float], zeros: list[float]
) -> None:
    found = of(cards)
    same(found.poles, poles)
    same(found.zeros, zeros)
    assert found.cancelled == ()


def test_a_resonance_has_its_frequency_and_quality() -> None:
    """Series RLC, output across C: s² + sR/L + 1/LC."""
    found = of("vin in 0 0 ac 1\nr1 in a 10\nl1 a out 1m\nc1 out 0 1n\n")
    w0, q = 1e6, 1e6 * 1e-3 / 10.0
    (root,) = roots(found.poles)
    assert root.frequency == pytest.approx(w0 / (2.0 * math.pi), rel=1e-12)
    assert root.q == pytest.approx(q, rel=1e-9)
    assert root.half_plane is HalfPlane.LEFT
    assert found.zeros == ()


def test_a_balanced_twin_t_has_its_zeros_on_the_axis() -> None:
    """Zeros at ±j/RC and one more that cancels a pole; loaded by nothing but its own resistors."""
    low, high = "r1 in a 1k\nr2 a out 1k\nc3 a 0 2u\n", "c1 in b 1u\nc2 b out 1u\nr3 b 0 500\n"
    found = of(f"vin in 0 0 ac 1\n{low}{high}rl out 0 1g\n")
    (notch,) = [root for root in roots(found.zeros) if root.q is not None]
    assert notch.frequency == pytest.approx(1e3 / (2.0 * math.pi), rel=1e-6)
    assert notch.half_plane is HalfPlane.AXIS
    assert notch.q == math.inf


def test_a_capacitor_from_gate_to_drain_makes_a_zero_at_gm_over_c_in_the_right_half_plane() -> None:
    small = network(
        "vdd vdd 0 5\nvin in 0 1.5 ac 1\nrg in g 10k\nrd vdd out 1k\nm1 out g 0 0 nm w=100u l=2u\n"
    )
    gm = small.conductances[0, 4, 1]  # into the drain behind the series resistance
    cgd = next(value for name, _, value in small.device_capacitors if name == "cgd(m1)")
    found = found_in(small)
    same(found.zeros, [gm / cgd])
    assert roots(found.zeros)[0].half_plane is HalfPlane.RIGHT
    assert len(found.poles) == 2
    assert all(pole.real < 0.0 for pole in found.poles)


def test_a_bypass_capacitor_makes_a_zero_with_its_resistor_and_each_coupling_one_at_the_origin() -> None:
    v = Values()
    found = found_in(small_of(v))
    assert v.rs is not None
    assert v.cs is not None
    assert found.zeros[:2] == (0j, 0j)
    same(found.zeros[2:3], [-1.0 / (v.rs * v.cs)], rel=1e-6)
    assert len(found.poles) == 5  # CIN, COUT, CS, and of CL, Cgs, Cgd, a loop, two


def test_what_the_gain_does_not_show_is_named_apart() -> None:
    hidden = "rh in h 1k\nch h 0 1u\n"  # loads the source, which doesn't mind
    decoupling = "vdd vdd 0 5\nrz vdd z 10k\ncz z 0 1u\n"
    found = of("vin in 0 0 ac 1\nr1 in out 1k\nc1 out 0 1n\n" + hidden + decoupling)
    same(found.poles, [-1e6])
    same(found.cancelled, [-1e2, -1e3])
    assert found.zeros == ()


def test_a_pole_and_a_zero_that_are_only_close_stay() -> None:
    found = of("vin in 0 0 ac 1\nr1 in out 1k\nc1 in out 1u\nc2 out 0 1p\n")
    same(found.zeros, [-1e3])
    same(found.poles, [-1e3 / (1.0 + 1e-6)])


def test_without_gain_there_are_no_zeros_but_natural_frequencies() -> None:
    found = of("vin in 0 0 ac 1\nr1 in 0 1k\nr2 out 0 1k\nc2 out 0 1u\n")
    assert found.poles == ()
    assert found.zeros == ()
    same(found.cancelled, [-1e3])
    assert np.abs(found.at([1.0, 1e3])).max() <= 0.0


def test_positive_feedback_puts_a_pole_into_the_right_half_plane() -> None:
    found = of("vin in 0 0 ac 1\nr1 in a 1k\nc1 a 0 1u\nr2 b a 1k\ne1 b 0 a 0 3\nr3 b out 1k\nr4 out 0 1k\n")
    same(found.poles, [1e3])  # (1 - 3)/1k + 1/1k = -1 mS over 1 µF
    assert [root.half_plane for root in roots(found.poles)] == [HalfPlane.RIGHT]


# --- places as frequencies ---


def test_a_pair_is_one_root_and_equal_real_ones_are_two() -> None:
    assert roots([-3.0 + 4.0j, -3.0 - 4.0j]) == (Root(5.0 / (2.0 * math.pi), 5.0 / 6.0, HalfPlane.LEFT),)
    twice = roots([-1.0 + 1e-8j, -1.0 - 1e-8j])
    assert [root.q for root in twice] == [None, None]
    assert roots([0j]) == (Root(0.0, None, HalfPlane.AXIS),)
    assert roots([2j, -2j]) == (Root(1.0 / math.pi, math.inf, HalfPlane.AXIS),)
    assert roots([1.0 + 1.0j, 1.0 - 1.0j])[0].half_plane is HalfPlane.RIGHT
    assert roots([]) == ()


# --- spreads ---

CAPACITANCE = st.floats(-15.0, -3.0).map(lambda power: 10.0**power)
RESISTANCE = st.floats(0.0, 9.0).map(lambda power: 10.0**power)


@settings(max_examples=60)
@given(st.lists(st.tuples(RESISTANCE, CAPACITANCE), min_size=1, max_size=8))
def test_a_chain_of_buffered_sections_has_the_pole_of_each(sections: list[tuple[float, float]]) -> None:
    """From 1 Ω to 1 GΩ and 1 fF to 1 mF: nothing is lost beside something 18 decades away.

    Poles that nearly coincide are nearly defective, and known to half of the digits at best.
    """
    expected = sorted((-1.0 / (r * c) for r, c in sections), key=abs)
    assume(all(after / before > 1.3 for before, after in pairwise(expected)))
    elements: list[Element] = [VoltageSource("vin", ("in", GROUND), 0.0, 1 + 0j)]
    node = "in"
    for number, (r, c) in enumerate(sections):
        after, held = f"a{number}", "out" if number == len(sections) - 1 else f"b{number}"
        elements.append(Resistor(f"r{number}", (node, after), r))
        elements.append(Capacitor(f"c{number}", (after, GROUND), c))
        elements.append(Vcvs(f"e{number}", (held, GROUND, after, GROUND), 1.0))
        node = held
    circuit = Circuit("t", tuple(elements))
    small = linearize(circuit, RC, solve_bias(circuit, FULL))
    found = found_in(small, 1e-6)
    same(found.poles, expected, rel=1e-9)
    assert found.zeros == ()


def test_a_femtofarad_beside_a_millifarad_keeps_its_digits() -> None:
    """A coupling capacitor of 1 mF into 1 fF and 1 MΩ: the fast pole is that of 1 kΩ∥1 MΩ and 1 fF."""
    found = of("vin in 0 0 ac 1\nr1 in a 1k\nc1 a out 1m\nc2 out 0 1f\nr2 out 0 1meg\n")
    # Exact: c1·c2·r1·r2·s² + (c1·(r1 + r2) + c2·r2)s + 1.
    a, b = 1e-3 * 1e-15 * 1e3 * 1e6, 1e-3 * 1.001e6 + 1e-15 * 1e6
    fast = -(b + math.sqrt(b * b - 4.0 * a)) / (2.0 * a)
    same(found.poles, [1.0 / (a * fast), fast], rel=1e-11)
    same(found.zeros, [0.0])


# --- the gain that follows ---

STAGES = {
    "common source": Values(),
    "degenerated": Values(cs=None),
    "follower": Values(follower=True),
    "p-channel": Values(sign=-1),
    "driven gate": Values(rsig=None),
    "far apart": Values(rsig=1.0, r1=1e9, r2=3e8, cl=1e-9, cin=1e-4, cout=1e-3),
}


@pytest.mark.parametrize("name", STAGES)
def test_the_rational_function_is_the_solution_of_the_circuit_over_twelve_decades(name: str) -> None:
    small = small_of(STAGES[name])
    frequencies = np.geomspace(1e-2, 1e10, 121)
    found = found_in(small).at(frequencies)
    exact = transfer(small, small.system(), frequencies)
    assert np.abs(found / exact - 1.0).max() < 1e-6


@pytest.mark.parametrize("name", STAGES)
def test_the_edges_of_the_exact_curve_are_those_of_the_rational_function(name: str) -> None:
    small = small_of(STAGES[name])
    found = found_in(small)
    middle = bandwidth.find_mid_band(small, None)
    level = abs(found.at([middle.frequency])[0]) / math.sqrt(2.0)
    edges = [edge for edge in (middle.exact_f_l, middle.exact_f_h) if edge is not None]
    assert edges
    for edge in edges:
        assert abs(found.at([edge])[0]) == pytest.approx(level, rel=1e-6)


@settings(max_examples=40)
@given(
    st.lists(st.tuples(RESISTANCE, CAPACITANCE, st.booleans()), min_size=2, max_size=6),
    st.lists(st.floats(-3.0, 9.0).map(lambda power: 10.0**power), min_size=3, max_size=3),
)
def test_a_random_ladder_gives_its_gain_back(
    sections: list[tuple[float, float, bool]], frequencies: list[float]
) -> None:
    lines, node = ["vin in 0 0 ac 1"], "in"
    for number, (r, c, along) in enumerate(sections):
        after = "out" if number == len(sections) - 1 else f"a{number}"
        lines.append(f"r{number} {node} {after} {r}")
        lines.append(f"c{number} {node if along else after} {after if along else 0} {c}")
        lines.append(f"rg{number} {after} 0 {10.0 * r}")
        node = after
    small = network("\n".join(lines) + "\n")
    found, exact = found_in(small), transfer(small, small.system(), frequencies)
    if abs(found.value) > 0.0:
        assert np.abs(found.at(frequencies) - exact).max() <= 1e-6 * np.abs(exact).max()
    else:
        assert np.abs(exact).max() < NO_GAIN


@pytest.mark.parametrize("name", STAGES)
def test_sums_of_time_constants_are_sums_of_poles(name: str) -> None:
    """Exact (Hajimiri 2010): Σ τ with all others open is Σ -1/p, Σ 1/τ with all others short is Σ -p."""
    small = small_of(STAGES[name])
    natural = naturals(small)
    parts = explicit_capacitors(small.circuit)
    all_open = bandwidth.open_circuit_constants(small, {part.name: Treatment.OPEN for part in parts})
    inverse = -sum(1.0 / pole for pole in natural).real
    assert sum(one.tau for one in all_open) == pytest.approx(inverse, rel=1e-9)
    # Without the capacitances of the device no loop of capacitors is left.
    bare = replace(small, device_capacitors=())
    shorted = bandwidth.short_circuit_constants(bare, {part.name: Treatment.SHORT for part in parts})
    rates = sum(1.0 / one.tau for one in shorted)
    assert rates == pytest.approx(-sum(naturals(bare)).real, rel=1e-9)
