"""Small signal: capacitors shorted, opened or as they are, resistances at the ports, band edges, mid-band."""

from __future__ import annotations

import cmath
import itertools
import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from deckgen.assumptions import assumptions_made
from deckgen.circuit.gain import (
    INFINITE_RESISTANCE,
    NO_GAIN,
    InputPort,
    input_port,
    load_conductance,
    resistance,
    signed_gain,
    unclear_phase,
)
from deckgen.circuit.model import GROUND, Capacitor, Circuit, Element, Inductor, Resistor, VoltageSource
from deckgen.circuit.ports import Ports
from deckgen.circuit.reader import read_flat
from deckgen.errors import InputError
from deckgen.hand import bandwidth
from deckgen.hand.batch import SQUARE, Batch
from deckgen.hand.bias import solve_bias
from deckgen.hand.effects import ALL_EFFECTS, effects_under
from deckgen.hand.network import Treatment
from deckgen.hand.predict import predict
from deckgen.hand.smallsignal import (
    SmallSignal,
    explicit_capacitors,
    input_resistance,
    linearize,
    output_resistance,
    transfer,
)
from tests.unit.circuits import Values, ports_of, stage

FULL = Batch((ALL_EFFECTS,))
SHORT, OPEN, AS_IS = Treatment.SHORT, Treatment.OPEN, Treatment.AS_IS
RC = Ports("vin", "out")


def network(cards: str, ports: Ports = RC) -> SmallSignal:
    """A linear network without transistors, or with them at their bias."""
    circuit = read_flat("t\n.model nm nmos level=1 vto=0.8 kp=100u lambda=0.02 gamma=0.4 phi=0.7\n" + cards)
    return linearize(circuit, ports, solve_bias(circuit, FULL))


def small_of(v: Values, ports: Ports | None = None) -> SmallSignal:
    circuit = stage(v)
    return linearize(circuit, ports or ports_of(v), solve_bias(circuit, FULL))


def gain(small: SmallSignal, frequency: float, treatments: dict[str, Treatment] | None = None) -> complex:
    return complex(transfer(small, small.system(treatments), [frequency])[0])


# --- what becomes of a capacitor ---

LOW_PASS = "vin in 0 0 ac 1\nr1 in out 1k\nc1 out 0 1u\nrl out 0 3k\n"
CORNER = 1 / (2 * math.pi * 750 * 1e-6)


@pytest.mark.parametrize("frequency", [1.0, CORNER, 1e5])
def test_a_capacitor_as_it_is_shorted_or_opened(frequency: float) -> None:
    small = network(LOW_PASS)
    expected = {
        AS_IS: 0.75 / (1 + 1j * frequency / CORNER),
        SHORT: 0.0,
        OPEN: 0.75,
    }
    for treatment, value in expected.items():
        found = gain(small, frequency, {"c1": treatment})
        assert cmath.isclose(found, value, rel_tol=1e-12, abs_tol=1e-15)
    assert gain(small, frequency) == pytest.approx(expected[AS_IS], rel=1e-12)


@pytest.mark.parametrize("frequency", [1.0, 200.0, 1e5])
def test_a_capacitor_between_two_nodes_leads_by_its_phase(frequency: float) -> None:
    small = network("vin in 0 0 ac 1\nc1 in out 1u\nr1 out 0 1k\n")
    turns = 2j * math.pi * frequency * 1e-3
    assert cmath.isclose(gain(small, frequency), turns / (1 + turns), rel_tol=1e-12)


def test_shorting_and_opening_never_changes_the_size_of_the_equations() -> None:
    small = network(LOW_PASS)
    shapes = {small.system({"c1": t}).conductance.shape for t in Treatment}
    assert len(shapes) == 1
    assert {small.system({"c1": t}).layout for t in Treatment} == {small.system().layout}


VALUE = st.floats(2.0, 6.0).map(lambda power: 10.0**power)


@st.composite
def ladders(draw: st.DrawFn) -> tuple[Circuit, dict[str, Treatment]]:
    """A resistor ladder with capacitors across and along, each with a treatment."""
    elements: list[Element] = [VoltageSource("vin", ("in", GROUND), 0.0, 1 + 0j)]
    nodes = ["in", *(f"n{number}" for number in range(draw(st.integers(1, 3)))), "out"]
    for number, (a, b) in enumerate(itertools.pairwise(nodes)):
        elements.append(Resistor(f"ra{number}", (a, b), draw(VALUE)))
        elements.append(Resistor(f"rb{number}", (b, GROUND), draw(VALUE)))
    treatments = {}
    for number in range(draw(st.integers(1, 3))):
        ends = draw(st.sampled_from([(a, b) for a in nodes[1:] for b in [*nodes, GROUND] if a != b]))
        elements.append(Capacitor(f"c{number}", ends, draw(VALUE) * 1e-12))
        treatments[f"c{number}"] = draw(st.sampled_from(list(Treatment)))
    return Circuit("t", tuple(elements)), treatments


def _redrawn(circuit: Circuit, treatments: dict[str, Treatment]) -> tuple[Circuit, str]:
    """The circuit with opened capacitors left out and shorted ones drawn as one node."""
    names = {node: node for node in (*circuit.nodes, GROUND)}
    for part in explicit_capacitors(circuit):
        if treatments[part.name] is SHORT:
            first, second = (names[node] for node in part.nodes)
            keep, give = sorted((first, second), key=lambda node: (node != GROUND, node != "in"))
            names = {node: keep if name == give else name for node, name in names.items()}
    elements = []
    for element in circuit.elements:
        if isinstance(element, Capacitor) and treatments[element.name] is not AS_IS:
            continue
        moved = replace(element, nodes=tuple(names[node] for node in element.nodes))
        if len(set(moved.nodes)) == 2:
            elements.append(moved)
    return Circuit("t", tuple(elements)), names["out"]


@settings(max_examples=60)
@given(ladders(), st.floats(0.0, 6.0))
def test_a_treated_network_is_the_network_redrawn(
    drawn: tuple[Circuit, dict[str, Treatment]], decade: float
) -> None:
    circuit, treatments = drawn
    safe = bandwidth.without_loops(circuit, treatments)
    redrawn, output = _redrawn(circuit, safe)
    small = SmallSignal(circuit, RC, np.zeros((0, 4, 4)), ())
    found = gain(small, 10.0**decade, safe)
    if output == GROUND:
        assert abs(found) < 1e-9
        return
    if output == "in":
        assert found == pytest.approx(1.0, rel=1e-9)
        return
    other = SmallSignal(redrawn, Ports("vin", output), np.zeros((0, 4, 4)), ())
    assert found == pytest.approx(gain(other, 10.0**decade), rel=1e-8, abs=1e-12)


LOOPS = {
    "two in parallel": ("c1 a 0 1u\nc2 a 0 2u\n", {"c2"}),
    "across the source": ("c1 in 0 1u\n", {"c1"}),
    "across the supply": ("c1 vdd 0 1u\n", {"c1"}),
    "a triangle": ("c1 a b 1u\nc2 b c 1u\nc3 c a 1u\n", {"c3"}),
    "between supply and ground by a node": ("c1 vdd a 1u\nc2 a 0 1u\n", {"c2"}),
    "none": ("c1 a b 1u\nc2 b c 1u\nc3 c 0 1u\n", set()),
}


@pytest.mark.parametrize("case", LOOPS)
def test_the_capacitor_that_closes_a_loop_of_shorts_is_opened_and_no_other(case: str) -> None:
    cards, opened = LOOPS[case]
    rest = "vin in 0 0\nvdd vdd 0 5\nr1 in a 1k\nr2 a b 1k\nr3 b c 1k\nr4 c 0 1k\nr5 vdd a 1k\n"
    small = network(rest + cards, Ports("vin", "a"))
    everything = {part.name: SHORT for part in explicit_capacitors(small.circuit)}
    safe = bandwidth.without_loops(small.circuit, everything)
    assert {name for name, treatment in safe.items() if treatment is OPEN} == opened
    system = small.system(safe)
    assert np.linalg.cond(system.conductance) < 1e9
    assert set(everything.values()) == {SHORT}  # what was handed in is untouched


def test_capacitors_that_are_left_as_they_are_close_no_loop_of_shorts() -> None:
    small = network("vin in 0 0\nr1 in a 1k\nr2 a 0 1k\nc1 a 0 1u\nc2 a 0 1u\n", Ports("vin", "a"))
    assert bandwidth.without_loops(small.circuit, {"c1": AS_IS, "c2": SHORT}) == {"c1": AS_IS, "c2": SHORT}


# --- which capacitors couple, and which load ---


def test_coupling_and_bypass_capacitors_are_told_from_load_by_reactance_against_what_they_see() -> None:
    small = small_of(Values())
    assert bandwidth.classify_capacitors(small, 3e3) == {"cin": SHORT, "cs": SHORT, "cout": SHORT, "cl": OPEN}


@pytest.mark.parametrize(("factor", "expected"), [(0.99, OPEN), (1.01, SHORT)])
def test_a_capacitor_counts_as_short_from_the_frequency_at_which_it_matches_what_it_sees(
    factor: float, expected: Treatment
) -> None:
    assert bandwidth.classify_capacitors(network(LOW_PASS), factor * CORNER) == {"c1": expected}


def test_the_names_of_capacitors_play_no_part() -> None:
    swapped = stage(Values())
    names = {"cin": "cl", "cl": "cin"}
    elements = tuple(replace(e, name=names.get(e.name, e.name)) for e in swapped.elements)
    circuit = replace(swapped, elements=elements)
    small = linearize(circuit, ports_of(Values()), solve_bias(circuit, FULL))
    found = bandwidth.classify_capacitors(small, 3e3)
    assert found == {"cl": SHORT, "cs": SHORT, "cout": SHORT, "cin": OPEN}


# --- resistances at the ports ---

DIVIDER = "vin sig 0 0 ac 1\nrsig sig a 1k\nra a b 2k\nrb b 0 4k\nrl b 0 12k\n"


@pytest.mark.parametrize(
    ("source", "load", "r_in", "r_out"),
    [
        # Rin with the load included, after the declared source resistance; Rout with it kept, the load gone.
        ("rsig", "rl", 2e3 + 3e3, 1 / (1 / 4e3 + 1 / 3e3)),
        (None, "rl", 1e3 + 2e3 + 3e3, 1 / (1 / 4e3 + 1 / 3e3)),
        ("rsig", None, 2e3 + 3e3, 1 / (1 / 4e3 + 1 / 3e3 + 1 / 12e3)),
        (None, None, 1e3 + 2e3 + 3e3, 1 / (1 / 4e3 + 1 / 3e3 + 1 / 12e3)),
    ],
)
@pytest.mark.parametrize("turned", [False, True], ids=["source", "source turned round"])
def test_port_resistances_follow_their_definitions(
    turned: bool, source: str | None, load: str | None, r_in: float, r_out: float
) -> None:
    cards = DIVIDER.replace("vin sig 0", "vin 0 sig") if turned else DIVIDER
    small = network(cards, Ports("vin", "b", source, load))
    system = small.system()
    assert input_resistance(small, system, 1e3) == pytest.approx(r_in, rel=1e-9)
    assert output_resistance(small, system, 1e3) == pytest.approx(r_out, rel=1e-9)
    assert gain(small, 1e3).real == pytest.approx((-1 if turned else 1) * 0.5, rel=1e-9)


def test_only_the_real_part_of_the_admittance_counts() -> None:
    small = network("vin in 0 0\nr1 in 0 5k\nr2 in out 1k\nr3 out 0 1k\nc1 in 0 1u\n")
    assert input_resistance(small, small.system(), 1e4) == pytest.approx(1 / (1 / 5e3 + 1 / 2e3), rel=1e-9)


def test_a_driven_gate_has_no_input_resistance_and_a_large_one_has() -> None:
    cards = "vdd vdd 0 5\nvin g 0 2 ac 1\nrd vdd out 1k\nm1 out g 0 0 nm w=10u l=2u\n"
    small = network(cards)
    assert input_resistance(small, small.system(), 1e3) is None
    large = network(cards + "rg g 0 1g\n")
    assert input_resistance(large, large.system(), 1e3) == pytest.approx(1e9, rel=1e-3)
    larger = network(cards + "rg g 0 20g\n")
    assert input_resistance(larger, larger.system(), 1e3) is None


def test_where_the_output_is_held_its_resistance_is_nothing() -> None:
    for node in ("vdd", "sig"):
        v = Values()
        small = small_of(v, replace(ports_of(v), output=node))
        assert output_resistance(small, small.system(), 1e3) == pytest.approx(0.0, abs=0.0)


@pytest.mark.parametrize(
    ("voltage", "current", "beside", "expected"),
    [
        (2.0, 1e-3, 0.0, 2e3),
        (2.0, 1e-3, 0.25e-3, 4e3),
        (1 + 1j, 1e-3, 0.0, 1 / (1e-3 * 0.5)),
        (-2.0, 1e-3, 0.0, -2e3),
        (0.0, 1e-3, 0.0, 0.0),
        (1.0, 1e-3, 1e-3, None),
        (1.0, 0.99 / INFINITE_RESISTANCE, 0.0, None),
        (1.0, 1.01 / INFINITE_RESISTANCE, 0.0, INFINITE_RESISTANCE / 1.01),
    ],
)
def test_a_resistance_is_one_over_the_real_part_of_an_admittance(
    voltage: complex, current: complex, beside: float, expected: float | None
) -> None:
    assert resistance(voltage=voltage, current=current, beside=beside) == (
        None if expected is None else pytest.approx(expected, rel=1e-9, abs=0.0)
    )


# --- the sign of a gain ---


@pytest.mark.parametrize(
    ("phase", "clear"),
    [
        *((0, True), (44.9, True), (-44.9, True), (135.1, True), (-135.1, True), (180, True)),
        *((45.1, False), (-90, False), (134.9, False), (-134.9, False)),
    ],
)
def test_a_gain_has_a_sign_within_45_degrees_of_0_and_180(phase: float, clear: bool) -> None:
    assert (unclear_phase(phase) is None) is clear
    found = signed_gain(cmath.rect(3.0, math.radians(phase)))
    assert found.phase == pytest.approx(phase)
    if clear:
        assert found.value == pytest.approx(3.0 if abs(phase) <= 45 else -3.0)
    else:
        assert found.value is None
        assert "more than 45° from 0° or 180°" in (found.reason or "")


def test_a_gain_of_almost_nothing_is_absent() -> None:
    assert signed_gain(0.99j * NO_GAIN).phase is None
    assert signed_gain(1.01j * NO_GAIN).phase == pytest.approx(90.0)
    assert signed_gain(complex("nan")).value is None


# --- ports that do not fit ---


def test_every_port_that_does_not_fit_is_named_at_once() -> None:
    with pytest.raises(InputError) as caught:
        small_of(Values(), Ports("r1", "nowhere", "cin", "rlx"))
    said = str(caught.value).splitlines()
    assert len(said) == 4
    for line, name in zip(said, ("r1", "nowhere", "cin", "rlx"), strict=True):
        assert f"found {name}, expected" in line


def test_a_source_resistance_that_does_not_hang_on_the_source_is_refused() -> None:
    circuit = stage(Values())
    assert input_port(circuit, Ports("vsig", "out", "rsig")) == InputPort("in", GROUND)
    assert input_port(circuit, Ports("vsig", "out")) == InputPort("sig", GROUND)
    with pytest.raises(InputError, match="found rd, expected a resistor at node sig, in series"):
        input_port(circuit, Ports("vsig", "out", "rd"))


def test_a_load_that_is_no_resistor_is_refused() -> None:
    circuit = stage(Values())
    assert load_conductance(circuit, Ports("vsig", "out", load="rl")) == pytest.approx(1 / 47e3)
    assert load_conductance(circuit, Ports("vsig", "out")) == pytest.approx(0.0, abs=0.0)
    with pytest.raises(InputError, match="expected the name of a resistor"):
        load_conductance(circuit, Ports("vsig", "out", load="cl"))


# --- band edges of networks whose edges are known ---

BUFFERED = "vin in 0 0 ac 1\nc1 in a 1u\nr1 a 0 10k\nr2 a out 100k\nc2 out 0 100p\n"


def _quadratic(a: float, b: float, c: float) -> float:
    return (-b + math.sqrt(b * b - 4 * a * c)) / (2 * a)


def test_a_single_pole_low_pass_has_its_edge_at_the_corner() -> None:
    small = network(LOW_PASS)
    assert bandwidth.exact_edges(small, small.system(), 1e-5 * CORNER) == (
        None,
        pytest.approx(CORNER, rel=1e-9),
    )


def test_a_single_pole_high_pass_has_its_edge_at_the_corner() -> None:
    small = network("vin in 0 0 ac 1\nc1 in out 1u\nr1 out 0 1k\n")
    corner = 1 / (2 * math.pi * 1e3 * 1e-6)
    assert bandwidth.exact_edges(small, small.system(), 1e5 * corner) == (
        pytest.approx(corner, rel=1e-9),
        None,
    )


def test_a_two_pole_ladder_has_its_edge_where_the_polynomial_says() -> None:
    small = network("vin in 0 0 ac 1\nr1 in a 1k\nc1 a 0 1u\nr2 a out 3k\nc2 out 0 0.2u\n")
    # H = 1/(1 + b1·s + b2·s²) with b1 = R1·C1 + (R1+R2)·C2, b2 = R1·C1·R2·C2; |H|² = ½ is quadratic in ω².
    b1, b2 = 1e3 * 1e-6 + 4e3 * 0.2e-6, 1e3 * 1e-6 * 3e3 * 0.2e-6
    omega = math.sqrt(_quadratic(b2**2, b1**2 - 2 * b2, -1.0))
    _, f_h = bandwidth.exact_edges(small, small.system(), 1e-3)
    assert f_h == pytest.approx(omega / (2 * math.pi), rel=1e-9)
    constants = bandwidth.open_circuit_constants(small, {"c1": OPEN, "c2": OPEN})
    assert sum(constant.tau for constant in constants) == pytest.approx(b1, rel=1e-9)
    assert bandwidth.upper_edge(constants) == pytest.approx(1 / (2 * math.pi * b1), rel=1e-9)


@pytest.mark.parametrize("middle", [100.0, 1e3, 5e3])
def test_edges_are_counted_from_the_gain_at_the_given_middle(middle: float) -> None:
    small = network(BUFFERED)

    def magnitude(f: float) -> float:
        return abs(gain(small, f))

    f_l, f_h = bandwidth.exact_edges(small, small.system(), middle)
    assert f_l is not None
    assert f_h is not None
    assert f_l < middle < f_h
    for edge in (f_l, f_h):
        assert magnitude(edge) == pytest.approx(magnitude(middle) / math.sqrt(2), rel=1e-9)


def test_the_first_crossing_outward_is_the_edge_even_where_the_gain_comes_back() -> None:
    # A notch between two pass bands: the edge is the near side of the notch.
    small = network("vin in 0 0 ac 1\nr1 in out 1k\nl1 out a 1m\nc1 a 0 1u\n")
    _, f_h = bandwidth.exact_edges(small, small.system(), 1e-3)
    notch = 1 / (2 * math.pi * math.sqrt(1e-3 * 1e-6))
    assert f_h is not None
    assert f_h < notch
    assert abs(gain(small, f_h)) == pytest.approx(1 / math.sqrt(2), rel=1e-9)
    assert abs(gain(small, 1e9)) == pytest.approx(1.0, rel=1e-6)


def test_a_flat_network_and_one_without_gain_have_no_edges() -> None:
    flat = network("vin in 0 0 ac 1\nr1 in out 1k\nr2 out 0 1k\n")
    assert bandwidth.exact_edges(flat, flat.system(), 1e3) == (None, None)
    silent = network("vin in 0 0 ac 1\nr1 in 0 1k\nr2 out 0 1k\n")
    assert bandwidth.exact_edges(silent, silent.system(), 1e3) == (None, None)


# --- mid-band ---


@pytest.mark.parametrize(
    ("cards", "source", "frequency"),
    [
        ("vin in 0 0 ac 1\nr1 in out 1k\nr2 out 0 1k\n", "1 kHz, no band edge", 1e3),
        (LOW_PASS, "fH/100 of the exact curve", CORNER / 100),
        (
            "vin in 0 0 ac 1\nc1 in out 1u\nr1 out 0 1k\n",
            "100·fL of the exact curve",
            100 / (2 * math.pi * 1e-3),
        ),
    ],
)
def test_mid_band_lies_where_the_edges_put_it(cards: str, source: str, frequency: float) -> None:
    small = network(cards)
    mid = bandwidth.find_mid_band(small, None)
    assert mid.source == source
    assert mid.frequency == pytest.approx(frequency, rel=1e-6)
    assert mid.below_maximum_db == pytest.approx(0.0, abs=1e-3)


def test_between_two_edges_mid_band_is_their_geometric_mean() -> None:
    small = small_of(Values())
    mid = bandwidth.find_mid_band(small, None)
    assert mid.source == "√(fL·fH) of the exact curve"
    assert mid.exact_f_l is not None
    assert mid.exact_f_h is not None
    assert mid.frequency == pytest.approx(math.sqrt(mid.exact_f_l * mid.exact_f_h), rel=1e-4)
    assert bandwidth.is_flat(mid)


def test_a_stated_mid_band_is_taken_and_its_loss_is_told() -> None:
    small = network(LOW_PASS)
    mid = bandwidth.find_mid_band(small, CORNER)
    assert (mid.source, mid.frequency) == ("stated", CORNER)
    assert mid.below_maximum_db == pytest.approx(10 * math.log10(2.0), rel=1e-6)
    assert not bandwidth.is_flat(mid)
    assert mid.exact_f_h is not None
    assert abs(gain(small, mid.exact_f_h)) == pytest.approx(abs(gain(small, CORNER)) / math.sqrt(2), rel=1e-9)


# --- time constants ---


def test_short_circuit_time_constants_short_the_other_coupling_capacitors() -> None:
    small = network(
        "vin in 0 0 ac 1\nr0 in s 1k\nc1 s a 1u\nr1 a b 2k\nc2 b 0 10u\nr2 b 0 4k\nrl a 0 8k\n",
        Ports("vin", "a"),
    )
    seen = {c.name: c for c in bandwidth.short_circuit_constants(small, {"c1": SHORT, "c2": SHORT})}
    assert seen["c1"].resistance == pytest.approx(1e3 + 1 / (1 / 2e3 + 1 / 8e3), rel=1e-9)
    at_b = 2e3 + 1 / (1 / 1e3 + 1 / 8e3)
    assert seen["c2"].resistance == pytest.approx(1 / (1 / 4e3 + 1 / at_b), rel=1e-9)
    total = sum(1 / (2 * math.pi * c.tau) for c in seen.values())
    assert bandwidth.lower_edge(tuple(seen.values())) == pytest.approx(total, rel=1e-12)


def test_without_capacitors_there_are_no_edges_from_time_constants() -> None:
    assert bandwidth.lower_edge(()) is None
    assert bandwidth.upper_edge(()) is None


BOOTSTRAPPED = "vin in 0 0 ac 1\nr0 in out 1k\nc1 out 0 1u\ne1 b 0 out 0 3\nc2 out b 100n\n"
"""C2 has three times the voltage of its near end at its far end, so it sees -2·1 kΩ."""


def test_a_bootstrapped_capacitor_sees_a_negative_resistance_that_counts_against_the_others() -> None:
    small = network(BOOTSTRAPPED)
    near, across = bandwidth.open_circuit_constants(small, {"c1": OPEN, "c2": OPEN})
    assert near.tau == pytest.approx(1e-3, rel=1e-12)
    assert across.resistance == pytest.approx(-2e3, rel=1e-12)
    assert bandwidth.upper_edge((near, across)) == pytest.approx(1.0 / (2.0 * math.pi * 0.8e-3), rel=1e-12)
    assert bandwidth.upper_edge((across,)) is None
    rates = 1.0 / (2.0 * math.pi * 1e-3) - 1.0 / (2.0 * math.pi * 2e-3)
    slower = bandwidth.TimeConstant("c3", 1e-6, -2e3)
    assert bandwidth.lower_edge((near, slower)) == pytest.approx(rates, rel=1e-12)
    assert bandwidth.lower_edge((slower,)) is None


def test_a_capacitor_without_a_way_for_its_current_sees_infinity_and_sets_no_edge() -> None:
    small = network("vin in 0 0 ac 1\nr0 in out 1k\nc1 out 0 1u\nc2 out x 1u\nr1 x 0 1k\n")
    cut = replace(small, circuit=replace(small.circuit, elements=small.circuit.elements[:-1]))
    (lonely,) = bandwidth.short_circuit_constants(cut, {"c1": OPEN, "c2": SHORT})
    assert lonely.tau == math.inf
    assert bandwidth.lower_edge((lonely,)) is None
    assert bandwidth.upper_edge((lonely,)) is None


# --- the linearized transistor ---


def test_device_capacitances_are_switched_apart_from_those_of_the_deck() -> None:
    small = small_of(Values(cl=None))
    assert {name for name, _, value in small.device_capacitors} == {"cgs(m1)", "cgd(m1)"}
    with_them, without = small.system(), small.system(device_capacitances=False)
    assert abs(complex(transfer(small, with_them, [1e9])[0])) < 0.3 * abs(
        complex(transfer(small, without, [1e9])[0])
    )


def test_two_devices_on_the_same_nodes_load_them_twice() -> None:
    one = stage(Values(m=2.0))
    (device,) = one.transistors
    half = replace(device, m=1.0)
    elements = [e for e in one.elements if e is not device]
    two = replace(one, elements=(*elements, half, replace(half, name="m2")))
    ports, frequencies = ports_of(Values()), [1.0, 1e3, 1e6, 1e8]
    curves = []
    # gmin lies across each junction once, be it of one device or of two.
    without_junctions = Batch((effects_under(["no-bulk-junctions"]),))
    for circuit in (one, two):
        small = linearize(circuit, ports, solve_bias(circuit, without_junctions))
        curves.append(transfer(small, small.system(), frequencies))
    assert curves[0] == pytest.approx(curves[1], rel=1e-9)


@pytest.mark.parametrize("sign", [1, -1], ids=["n", "p"])
def test_the_gain_is_the_derivative_of_the_bias_by_the_input(sign: int) -> None:
    v = Values(sign=sign, cs=None, cin=1.0, cout=None, rl=None, rd=5e3)
    circuit = stage(v)
    at_rest = 2.4 if sign > 0 else 9.6

    def driven(emf: float) -> Circuit:
        """The stage with its coupling capacitor drawn as a wire and its source at the gate's voltage."""
        elements: list[Element] = []
        for e in circuit.elements:
            if isinstance(e, VoltageSource) and e.name == "vsig":
                elements.append(replace(e, dc=emf))
            else:
                elements.append(Resistor("rcin", ("in", "g"), 1e-6) if e.name == "cin" else e)
        return replace(circuit, elements=tuple(elements))

    ends = [solve_bias(driven(at_rest + step), FULL).voltage("out") for step in (-1e-5, 1e-5)]
    still = driven(at_rest)
    small = linearize(still, ports_of(v), solve_bias(still, FULL))
    found = gain(small, 1e-3).real
    assert found < -1.0
    assert found == pytest.approx((ends[1] - ends[0]) / 2e-5, rel=1e-6)


def test_a_row_of_a_batch_is_linearized_at_its_own_bias() -> None:
    circuit, ports = stage(Values()), ports_of(Values())
    vto = np.array([0.6, 0.9])
    batch = solve_bias(circuit, Batch((ALL_EFFECTS,), samples=((("m1", "vto"), vto),)))
    for row in range(2):
        alone = solve_bias(circuit, Batch((ALL_EFFECTS,), samples=((("m1", "vto"), vto[row : row + 1]),)))
        found = linearize(circuit, ports, batch, row).conductances
        assert found == pytest.approx(linearize(circuit, ports, alone).conductances, rel=1e-9, abs=1e-15)
        assert found == pytest.approx(SQUARE.linearize(batch.parameters, batch.terminals)[row])


def test_with_an_inductor_the_band_edges_are_those_of_the_exact_curve_and_a_note_says_so() -> None:
    drain = Resistor("rd", ("vdd", "d"), 10e3), Inductor("lq", ("vdd", "d"), 1.0)
    choke = replace(
        stage(Values()),
        elements=tuple(drain[1] if e == drain[0] else e for e in stage(Values()).elements),
    )
    found = predict(choke, ports_of(Values()), assumptions=assumptions_made("paper"))
    exact = found.mid_band.exact_f_l, found.mid_band.exact_f_h
    assert [found.value(name).value for name in ("fL", "fH")] == pytest.approx(exact, rel=1e-12)
    assert any("exact curve" in note and "LQ" in note for note in found.notes)
