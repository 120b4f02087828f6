"""Bias points: Kirchhoff's law holds, a batch is its rows, and what has no solution says why."""

from __future__ import annotations

import math
from dataclasses import fields

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from deckgen.circuit.model import (
    GROUND,
    Capacitor,
    Circuit,
    CurrentSource,
    Element,
    Inductor,
    Mosfet,
    Resistor,
    VoltageSource,
)
from deckgen.circuit.reader import read_flat
from deckgen.errors import ExitCode, NoBiasError
from deckgen.hand.batch import SQUARE, Batch
from deckgen.hand.bias import BiasPoint, solve_bias
from deckgen.hand.effects import EffectSet, effects_under
from tests.unit.circuits import Values, stage

CHANNEL = effects_under(["no-bulk-junctions"])
"""Nothing but channels, whose currents are worked out here; junctions have tests of their own."""

FULL = Batch((CHANNEL,))
NO_LAMBDA = CHANNEL & effects_under(["no-channel-length-modulation"])
NO_BODY = CHANNEL & effects_under(["no-body-effect"])

MODELS = """.model nm nmos level=1 vto=0.8 kp=100u lambda=0.02 gamma=0.4 phi=0.7
.model pm pmos level=1 vto=-0.9 kp=40u lambda=0.03 gamma=0.5 phi=0.7
"""


def circuit(cards: str) -> Circuit:
    return read_flat("t\n" + MODELS + cards)


def report(c: Circuit, point: BiasPoint, row: int = 0) -> dict[str, list[float]]:
    found = SQUARE.report(point.parameters, point.terminals)
    return {name: values[row].tolist() for name, values in found.items()}


# --- against values worked out here ---


def test_a_device_with_fixed_gate_and_drain_carries_the_square_law_current() -> None:
    c = circuit("vd d 0 5\nvg g 0 1.8\nm1 d g 0 0 nm w=20u l=2u\n")
    point = solve_bias(c, FULL)
    expected = 0.5 * 1e-3 * 1.0**2 * (1 + 0.02 * 5)
    assert report(c, point)["ID"][0] == pytest.approx(expected, rel=1e-12)
    assert point.branch_current("vd") == pytest.approx(-expected, rel=1e-12)
    assert point.voltage("d") == pytest.approx(5.0)
    assert point.voltage(GROUND) == pytest.approx(0.0, abs=0.0)


def test_a_diode_connected_device_settles_where_vgs_is_vds() -> None:
    c = circuit("vdd vdd 0 5\nr1 vdd d 10k\nm1 d d 0 0 nm w=20u l=2u\n")
    v = solve_bias(c, Batch((NO_LAMBDA,))).voltage("d")
    assert (5 - v) / 10e3 == pytest.approx(0.5 * 1e-3 * (v - 0.8) ** 2, rel=1e-10)


def test_a_current_source_flows_from_its_first_node_through_it_to_its_second() -> None:
    c = circuit("i1 0 a 1m\nr1 a 0 2k\nvd d 0 5\nm1 d a 0 0 nm\n")
    assert solve_bias(c, FULL).voltage("a") == pytest.approx(2.0, rel=1e-12)


def test_capacitors_are_open_and_inductors_short() -> None:
    c = circuit("vdd vdd 0 5\nl1 vdd a 1\nr1 a d 1k\nc1 d 0 1\nl2 d g 1\nrg g 0 1k\nm1 d 0 0 0 nm\n")
    point = solve_bias(c, FULL)
    assert [point.voltage(node) for node in ("a", "d", "g")] == pytest.approx([5.0, 2.5, 2.5], rel=1e-12)
    assert point.branch_current("l1") == pytest.approx(2.5e-3, rel=1e-12)


@pytest.mark.parametrize("sign", [1, -1], ids=["n", "p"])
@pytest.mark.parametrize("follower", [False, True], ids=["common source", "follower"])
def test_both_polarities_settle_at_the_same_current(sign: int, follower: bool) -> None:
    one = stage(Values(follower=follower, rd=5e3))
    other = stage(Values(sign=sign, follower=follower, rd=5e3))
    found = report(other, solve_bias(other, FULL))
    assert found["ID"] == pytest.approx(report(one, solve_bias(one, FULL))["ID"], rel=1e-10)
    assert found["VGS"][0] * sign > 0.0


def test_a_circuit_without_transistors_is_just_its_network() -> None:
    c = read_flat("t\nv1 a 0 9\nr1 a b 2k\nr2 b 0 1k\n")
    assert solve_bias(c, FULL).voltage("b") == pytest.approx(3.0, rel=1e-12)


# --- Kirchhoff's law, computed here from the circuit itself ---


def _left_over(c: Circuit, point: BiasPoint, row: int) -> float:
    """Largest sum of currents into a node, from the parts' own laws."""
    sums = dict.fromkeys(c.nodes, 0.0) | {GROUND: 0.0}
    device = 0
    for e in c.elements:
        if isinstance(e, Mosfet):
            for node, current in zip(e.nodes, point.currents[row, device], strict=True):
                sums[node] += float(current)
            device += 1
        elif not isinstance(e, Capacitor):
            a, b = e.nodes
            if isinstance(e, Resistor):
                current = (point.voltage(a, row) - point.voltage(b, row)) / e.value
            else:
                current = e.dc if isinstance(e, CurrentSource) else point.branch_current(e.name, row)
            sums[a] += current
            sums[b] -= current
    return max((abs(value) for node, value in sums.items() if node != GROUND), default=0.0)


def _allowed(c: Circuit, point: BiasPoint, row: int) -> float:
    """The larger of 1 pA and eight roundings of the largest voltage through all conductance there is."""
    largest = max(abs(point.voltage(node, row)) for node in c.nodes)
    conductance = sum(1.0 / e.value for e in c.elements if isinstance(e, Resistor))
    jacobian = SQUARE.evaluate(point.parameters, point.terminals).jacobian[row]
    return max(1e-12, 8.0 * math.ulp(largest) * (conductance + float(np.abs(jacobian).sum())))


RESISTANCE = st.floats(1.0, 7.0).map(lambda power: 10.0**power)


@st.composite
def networks(draw: st.DrawFn) -> Circuit:
    """Up to three transistors anywhere in a network where every node has a resistor to a rail."""
    inner = [f"n{number}" for number in range(draw(st.integers(1, 4)))]
    every = [*inner, "vdd", GROUND]
    elements: list[Element] = [VoltageSource("vdd", ("vdd", GROUND), draw(st.floats(-15.0, 15.0)))]
    for node in inner:
        rail = draw(st.sampled_from(["vdd", GROUND]))
        elements.append(Resistor(f"r{node}", (node, rail), draw(RESISTANCE)))
    for number in range(draw(st.integers(0, 3))):
        ends = draw(st.sampled_from(every)), draw(st.sampled_from(every))
        elements.append(Resistor(f"r{number}", ends, draw(RESISTANCE)))
    elements.append(CurrentSource("i1", (GROUND, draw(st.sampled_from(inner))), draw(st.floats(-1e-4, 1e-4))))
    elements.append(Inductor("l1", (draw(st.sampled_from(inner)), "tail"), 1e-3))
    elements.append(Resistor("rtail", ("tail", GROUND), draw(RESISTANCE)))
    for number in range(draw(st.integers(1, 3))):
        d, g, s, b = (draw(st.sampled_from(every)) for _ in range(4))
        model = draw(st.sampled_from(["nm", "pm"]))
        elements.append(Mosfet(f"m{number}", (d, g, s, b), model, draw(st.floats(1e-6, 1e-3)), 2e-6))
    return Circuit("t", tuple(elements), circuit("").models)


@settings(max_examples=80)
@given(networks(), st.sampled_from([CHANNEL, NO_LAMBDA, NO_BODY]))
def test_at_every_solution_the_currents_into_each_node_sum_to_nothing(c: Circuit, on: EffectSet) -> None:
    point = solve_bias(c, Batch((on,)), require=False)
    assert point.converged.all()
    assert _left_over(c, point, 0) <= _allowed(c, point, 0)
    assert float(point.residual[0]) <= _allowed(c, point, 0)
    for e in c.elements:
        if isinstance(e, VoltageSource):
            across = point.voltage(e.nodes[0]) - point.voltage(e.nodes[1])
            assert across == pytest.approx(e.dc, rel=1e-12, abs=1e-12)


# --- batches ---


def _matches(batch: BiasPoint, row: int, single: BiasPoint) -> None:
    assert batch.unknowns[row] == pytest.approx(single.unknowns[0], rel=1e-9, abs=1e-12)
    assert batch.terminals[row] == pytest.approx(single.terminals[0], rel=1e-9, abs=1e-12)
    assert batch.currents[row] == pytest.approx(single.currents[0], rel=1e-8, abs=1e-15)


@pytest.mark.parametrize("name", ["stage", "mirror"])
def test_a_batch_gives_row_by_row_what_single_solves_give(name: str) -> None:
    c = stage(Values(rd=5e3)) if name == "stage" else circuit(
        "vdd vdd 0 5\nrref vdd a 20k\nm1 a a 0 0 nm w=20u l=2u\nm2 b a 0 0 nm w=40u l=2u\nrl vdd b 4k\n"
    )  # fmt: skip
    rng = np.random.default_rng(7)
    samples = ((("m1", "vto"), rng.uniform(0.5, 1.1, 4)), (("m1", "kp"), rng.uniform(5e-5, 2e-4, 4)))
    effects, temperatures = (CHANNEL, NO_LAMBDA, NO_BODY), (233.15, 300.15, 398.15)
    batch = Batch(effects, temperatures, samples)
    together = solve_bias(c, batch)
    assert together.unknowns.shape[0] == batch.rows == 36
    row = 0
    for on in effects:
        for sample in range(4):
            for temperature in temperatures:
                one = tuple((key, values[sample : sample + 1]) for key, values in samples)
                _matches(together, row, solve_bias(c, Batch((on,), (temperature,), one)))
                row += 1


def test_two_thousand_rows_each_hold_the_closed_form() -> None:
    c = circuit(
        "vdd vdd 0 12\nr1 vdd g 300k\nr2 g 0 100k\nrd vdd d 2k\nrs s 0 1k\nm1 d g s s nm w=20u l=2u\n"
    )
    rng = np.random.default_rng(11)
    vto, kp = rng.uniform(0.3, 1.5, 2000), rng.uniform(5e-5, 2e-4, 2000)
    point = solve_bias(c, Batch((NO_LAMBDA,), samples=((("m1", "vto"), vto), (("m1", "kp"), kp))))
    assert point.converged.all()
    k, drive = kp * 10.0, 3.0 - vto
    v_ov = (np.sqrt(1.0 + 2.0 * k * 1e3 * drive) - 1.0) / (k * 1e3)  # root of ½·k·RS·x² + x = drive
    found = SQUARE.report(point.parameters, point.terminals)
    assert found["VOV"][:, 0] == pytest.approx(v_ov, rel=1e-9)
    assert found["ID"][:, 0] == pytest.approx(0.5 * k * v_ov**2, rel=1e-9)
    assert float(point.residual.max()) < 1e-12


def test_chunks_change_nothing(monkeypatch: pytest.MonkeyPatch) -> None:
    c = stage(Values(rd=5e3))
    batch = Batch((CHANNEL, NO_LAMBDA), samples=((("m1", "vto"), np.linspace(0.5, 1.2, 13)),))
    whole = solve_bias(c, batch)
    monkeypatch.setattr("deckgen.hand.bias._CHUNK", 5)
    assert solve_bias(c, batch).unknowns == pytest.approx(whole.unknowns, rel=1e-12, abs=1e-15)


def test_rows_without_a_solution_are_marked_and_do_not_disturb_the_others() -> None:
    # 1 mA forced through a device that saturates at 0.5 mA: without λ there is no such point.
    c = circuit("i1 0 d 1m\nvg g 0 1.8\nm1 d g 0 0 nm w=20u l=2u\n")
    point = solve_bias(c, Batch((CHANNEL, NO_LAMBDA)), require=False)
    assert point.converged.tolist() == [True, False]
    assert point.voltage("d", 0) == pytest.approx(50.0, rel=1e-9)
    with pytest.raises(NoBiasError, match="no bias point found for M1"):
        solve_bias(c, Batch((CHANNEL, NO_LAMBDA)))


def test_the_arrays_of_a_bias_point_are_read_only() -> None:
    point = solve_bias(stage(Values()), FULL)
    arrays = [point.unknowns, point.terminals, point.currents, point.residual, point.converged]
    arrays += [getattr(point.parameters, item.name) for item in fields(point.parameters)]
    for array in arrays:
        with pytest.raises(ValueError, match="read-only"):
            array[...] = 0


def test_the_samples_handed_in_stay_writable_and_untouched() -> None:
    vto = np.array([0.7, 0.8])
    solve_bias(stage(Values()), Batch((CHANNEL,), samples=((("m1", "vto"), vto),)))
    vto[0] = 0.9
    assert vto.tolist() == [0.9, 0.8]


# --- nodes that channels alone hold ---


def test_where_all_channels_at_a_node_are_off_leakage_sets_its_voltage_as_a_simulator_has_it() -> None:
    c = circuit("vdd vdd 0 5\nrd vdd d 1k\nvb b 0 3\nvg g 0 0\nm1 x g 0 0 nm w=20u l=2u\n"
                "m2 d b x 0 nm w=20u l=2u\n")  # fmt: skip
    point = solve_bias(c, FULL)
    v_th = 0.8 + 0.4 * (math.sqrt(0.7 + point.voltage("x")) - math.sqrt(0.7))
    leaks = 2e-12 * point.voltage("x")  # drain of M1 and source of M2, to their bulks
    assert 3.0 - point.voltage("x") - v_th == pytest.approx(math.sqrt(2.0 * leaks / 1e-3), rel=0.1)
    assert float(point.residual[0]) < 1e-12


def test_a_drain_without_anything_else_is_at_its_source() -> None:
    point = solve_bias(circuit("vdd vdd 0 5\nm1 d vdd 0 0 nm w=20u l=2u\n"), FULL)
    assert point.voltage("d") == pytest.approx(0.0, abs=1e-12)


def test_nodes_that_transconductances_hold_have_a_bias() -> None:
    gyrator = "vdd vdd 0 5\nrd vdd d 1k\ni1 0 a 1u\ng1 a 0 b 0 1m\ng2 0 b a 0 1m\nm1 d a 0 0 nm\n"
    assert solve_bias(circuit(gyrator), FULL).voltage("b") == pytest.approx(1e-3, rel=1e-9)


# --- no solution, and why ---

STAGE = "vdd vdd 0 5\nrd vdd d 1k\n"
NO_SOLUTION = {
    "gate behind a capacitor": (
        STAGE + "m1 d g 0 0 nm\nc1 in g 1u\nvin in 0 0\n",
        "no DC path to ground from node g;",
    ),
    "bulk that hangs free": (STAGE + "m1 d vdd 0 b nm\n", "no DC path to ground from node b;"),
    "node behind a capacitor": (
        STAGE + "m1 d vdd 0 0 nm\nc1 d out 1u\n",
        "no DC path to ground from node out;",
    ),
    "island of resistors": (
        STAGE + "m1 d vdd 0 0 nm\nra x y 1k\nrb x y 2k\n",
        "no DC path to ground from node x, y;",
    ),
    "no ground at all": (
        "vdd vdd x 5\nrd vdd d 1k\nm1 d vdd x x nm\n",
        "no DC path to ground from node vdd, x, d;",
    ),
    "source on a capacitor": (STAGE + "rg vdd g 1k\nm1 d g s 0 nm\ncs s 0 1u\n", "a channel at node s:"),
    "two voltage sources in parallel": (
        STAGE + "v2 vdd 0 5\nm1 d vdd 0 0 nm\n",
        "a loop of voltage sources or inductors: VDD, V2;",
    ),
    "source across an inductor": (
        STAGE + "l1 vdd 0 1m\nm1 d vdd 0 0 nm\n",
        "a loop of voltage sources or inductors: VDD, L1;",
    ),
    "two sources at a gate": (
        STAGE + "v2 g 0 2\nv3 g 0 2\nm1 d g 0 0 nm\n",
        "a loop of voltage sources or inductors: V2, V3;",
    ),
    "controlled source beside a source": (
        STAGE + "e1 vdd 0 d 0 1\nm1 d vdd 0 0 nm\n",
        "a loop of voltage sources or inductors: VDD, E1;",
    ),
    "controlled source that controls itself": (
        STAGE + "e1 x 0 x 0 1\nrx x 0 1k\nm1 d vdd 0 0 nm\n",
        "no DC path to ground from node x that determines its voltage",
    ),
    "controlled source that controls itself, at a gate": (
        STAGE + "e1 x 0 x 0 1\nrx x 0 1k\nm1 d x 0 0 nm\n",
        "no DC path to ground from node x that determines its voltage",
    ),
    "current into a gate": (STAGE + "i1 0 g 1u\nm1 d g 0 0 nm\n", "no DC path to ground from node g;"),
    "source driven backwards": (
        STAGE + "rg vdd g 1k\nm1 d g s 0 nm\ni1 0 s 1m\n",
        "no bias point found for M1: no current can settle at node s;",
    ),
    "more current than a device that is off takes": (
        "i1 0 d 1m\ne1 x 0 y 0 1\nvy y 0 0.2\nm1 d x 0 0 nm w=20u l=2u\n",
        "no bias point found for M1: no current can settle at node d;",
    ),
}


@pytest.mark.parametrize("case", NO_SOLUTION)
def test_what_has_no_bias_point_names_the_place(case: str) -> None:
    cards, says = NO_SOLUTION[case]
    with pytest.raises(NoBiasError) as caught:
        solve_bias(circuit(cards), FULL)
    assert says in str(caught.value)
    assert "\n" not in str(caught.value)
    assert caught.value.exit_code is ExitCode.INPUT
