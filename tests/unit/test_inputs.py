"""The input of a stage: voltage or current source, its port, the gains and resistances counted from it."""

from __future__ import annotations

import cmath
import math
from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from deckgen.assumptions import assumptions_made
from deckgen.bench.measure import Measurement, measure
from deckgen.bench.plan import Plan, Sweep, make_plan
from deckgen.circuit.gain import (
    NO_GAIN,
    NO_TRANSRESISTANCE,
    InputPort,
    gain_name,
    input_port,
    signed_gain,
)
from deckgen.circuit.model import GROUND, Circuit, CurrentSource, OtherDevice, Resistor
from deckgen.circuit.ports import Ports
from deckgen.circuit.reader import read_flat
from deckgen.errors import InputError
from deckgen.hand import bandwidth
from deckgen.hand.network import Treatment
from deckgen.hand.predict import predict
from deckgen.hand.prediction import Prediction
from deckgen.hand.smallsignal import (
    SmallSignal,
    drive,
    input_resistance,
    output_resistance,
    solve_at,
    transfer,
    voltage,
)
from deckgen.simulator.raw import Plot, Variable
from tests.unit.circuits import Values, ports_of, stage

PAPER, FULL = assumptions_made("paper"), assumptions_made("full")


def linear(cards: str, ports: Ports) -> SmallSignal:
    """A network of linear parts: a transistor is drawn as a controlled source."""
    return SmallSignal(read_flat("t\n" + cards), ports, np.zeros((0, 4, 4)), ())


# --- definitions, against nodal equations solved in this test ---

# A transresistance stage: the current enters the gate, RF leads from drain to gate.
GM, RO, RF, RG, RD, RL, RS = 3e-3, 50e3, 220e3, 470e3, 4.7e3, 10e3, 100e3
FEEDBACK = (
    f"g1 out 0 g 0 {GM}\nro out 0 {RO}\nrf out g {RF}\nrg g 0 {RG}\nrd out 0 {RD}\nrl out 0 {RL}\n"
    f"rs {{}} {RS}\n"
)


def _stage_alone(source: float, load: float) -> tuple[Any, Any]:
    """Node voltages of the stage, gate and drain, for 1 A into either."""
    matrix = np.array([[1 / RF + 1 / RG + source, -1 / RF], [GM - 1 / RF, 1 / RO + 1 / RF + 1 / RD + load]])
    return np.linalg.solve(matrix, [1.0, 0.0]), np.linalg.solve(matrix, [0.0, 1.0])


@pytest.mark.parametrize(("nodes", "sign"), [("0 g", 1.0), ("g 0", -1.0)], ids=["into", "out of"])
def test_a_transresistance_stage_is_as_its_nodal_equations_say(nodes: str, sign: float) -> None:
    small = linear(f"iin {nodes} dc 0 ac 1\n" + FEEDBACK.format("g 0"), Ports("iin", "out", "rs", "rl"))
    system = small.system()
    (at_gate, at_drain), _ = _stage_alone(1 / RS, 1 / RL)
    rm = complex(transfer(small, system, [1e3])[0])
    assert rm == pytest.approx(sign * at_drain, rel=1e-12)
    assert at_drain < 0.0
    (alone, _), _ = _stage_alone(0.0, 1 / RL)  # RS subtracted: what the source sees beyond it
    assert input_resistance(small, system, 1e3) == pytest.approx(alone, rel=1e-9)
    _, (_, driven) = _stage_alone(1 / RS, 0.0)  # the current zero, RS kept, the load subtracted
    assert output_resistance(small, system, 1e3) == pytest.approx(driven, rel=1e-9)
    signals = solve_at(system, [1e3], drive(system, "iin"))[0]
    behind = small.port.gain_behind(rm, lambda node: complex(voltage(system, signals, node)))
    assert behind.value == pytest.approx(at_drain / at_gate, rel=1e-12)


def test_without_a_declared_resistance_every_one_is_part_of_the_stage() -> None:
    small = linear("iin 0 g ac 1\n" + FEEDBACK.format("g 0"), Ports("iin", "out"))
    (at_gate, _), _ = _stage_alone(1 / RS, 1 / RL)
    _, (_, at_drain) = _stage_alone(1 / RS, 1 / RL)
    assert input_resistance(small, small.system(), 1e3) == pytest.approx(at_gate, rel=1e-9)
    assert output_resistance(small, small.system(), 1e3) == pytest.approx(at_drain, rel=1e-9)


def test_source_and_resistance_change_into_an_emf_with_it_in_series() -> None:
    """Norton and Thévenin: Rm = Av·RS, and Rin, Rout, Avi are the same."""
    norton = linear("iin 0 g ac 1\n" + FEEDBACK.format("g 0"), Ports("iin", "out", "rs", "rl"))
    series = linear("vin e 0 ac 1\n" + FEEDBACK.format("e g"), Ports("vin", "out", "rs", "rl"))
    found = []
    for small in (norton, series):
        system = small.system()
        gain = complex(transfer(small, system, [1e3])[0])
        signals = solve_at(system, [1e3], drive(system, small.ports.input))[0]
        behind = small.port.gain_behind(gain, lambda n, s=system, x=signals: complex(voltage(s, x, n)))
        rest = (input_resistance(small, system, 1e3), output_resistance(small, system, 1e3), behind.value)
        found.append((gain.real, *rest))
    (rm, *of_norton), (av, *of_series) = found
    assert rm == pytest.approx(av * RS, rel=1e-12)
    assert of_norton == pytest.approx(of_series, rel=1e-9)


@pytest.mark.parametrize(("nodes", "sign"), [("a b", 1.0), ("b a", -1.0)])
def test_a_floating_current_source_sees_what_lies_between_its_nodes(nodes: str, sign: float) -> None:
    """1 A out of a and into b: RA carries it from ground, RB back, and RX beside them takes its share."""
    r_a, r_b, r_x, r_s = 1e3, 3e3, 12e3, 6e3
    cards = f"iin {nodes} ac 1\nra a 0 {r_a}\nrb b 0 {r_b}\nrx a b {r_x}\nrs b a {r_s}\n"
    small = linear(cards, Ports("iin", "b", "rs"))
    beside = 1 / (1 / r_x + 1 / r_s)
    through = beside / (beside + r_a + r_b)
    assert transfer(small, small.system(), [1.0])[0] == pytest.approx(sign * through * r_b, rel=1e-12)
    r_in = 1 / (1 / r_x + 1 / (r_a + r_b))
    assert input_resistance(small, small.system(), 1.0) == pytest.approx(r_in, rel=1e-9)


@pytest.mark.parametrize(
    ("resistor", "r_in"), [("rs a x 2k", 7e3), ("rs b x 2k", 7e3), ("", 9e3)], ids=["at +", "at -", "none"]
)
def test_a_floating_voltage_source_has_its_resistance_at_either_end(resistor: str, r_in: float) -> None:
    """A loop of the source, RS and two resistors to ground: 9 kΩ around, 7 kΩ beyond RS."""
    behind = {"rs a x 2k": ("x", "b"), "rs b x 2k": ("a", "x"), "": ("x", "b")}[resistor]
    cards = f"vin a b ac 1\n{resistor or 'rother a x 2k'}\nr1 {behind[0]} 0 3k\nr2 {behind[1]} 0 4k\n"
    small = linear(cards, Ports("vin", behind[0], "rs" if resistor else None))
    assert input_resistance(small, small.system(), 1.0) == pytest.approx(r_in, rel=1e-9)
    assert transfer(small, small.system(), [1.0])[0] == pytest.approx(3 / 9, rel=1e-12)


def test_the_right_hand_side_pushes_1_ampere_from_the_first_node_to_the_second() -> None:
    small = linear("iin a b ac 5\nr1 a 0 1k\nr2 b 0 1k\n", Ports("iin", "b"))
    system = small.system()
    side = drive(system, "iin")
    assert side[system.layout.node("a")] == pytest.approx(-1.0)
    assert side[system.layout.node("b")] == pytest.approx(1.0)
    assert np.abs(side).sum() == pytest.approx(2.0)


# --- the port ---


def _circuit(cards: str) -> Circuit:
    return read_flat("t\n" + cards + "r9 in 0 9k\nr8 out in 1k\n")


@pytest.mark.parametrize(
    ("cards", "source", "port"),
    [
        ("v1 in 0 1", None, InputPort("in", GROUND)),
        ("v1 0 in 1", None, InputPort(GROUND, "in", turned=True)),
        ("v1 a 0 1\nrs a in 50", "rs", InputPort("in", GROUND)),
        ("v1 0 a 1\nrs in a 50", "rs", InputPort(GROUND, "in", turned=True)),
        ("v1 a in 1\nrs a out 50", "rs", InputPort("out", "in")),
        ("v1 in a 1\nrs a 0 50", "rs", InputPort("in", GROUND)),
        ("i1 0 in 1", None, InputPort("in", GROUND, is_current=True)),
        ("i1 in 0 1", None, InputPort(GROUND, "in", is_current=True, turned=True)),
        ("v2 b 0 1\nv3 b vdd 1\ni1 in vdd 1", None, InputPort("vdd", "in", is_current=True, turned=True)),
        ("v2 b 0 1\nv1 b in 1", None, InputPort("b", "in", turned=True)),
        ("i1 0 in 1\nrs 0 in 50", "rs", InputPort("in", GROUND, is_current=True, beside=0.02)),
        ("i1 out in 1\nrs out in 50", "rs", InputPort("in", "out", is_current=True, beside=0.02)),
    ],
)
def test_the_port_lies_behind_a_series_resistance_and_beside_a_parallel_one(
    cards: str, source: str | None, port: InputPort
) -> None:
    circuit = _circuit(cards + "\n")
    name = "i1" if port.is_current else "v1"
    assert input_port(circuit, Ports(name, "out", source)) == port
    assert gain_name(circuit, Ports(name, "out")) == port.gain == ("Rm" if port.is_current else "Av")


@pytest.mark.parametrize(
    ("cards", "name", "expected"),
    [
        ("i1 0 a 1\nrs a in 50\n", "i1", "a resistor between nodes 0 and a, parallel to the input source"),
        ("i1 0 in 1\nrs in out 50\n", "i1", "a resistor between nodes 0 and in, parallel"),
        ("v1 in 0 1\nrs in 0 50\n", "v1", "a resistor at node in, in series with the source"),
        ("v1 in a 1\nrs out 0 50\nrx a 0 1\n", "v1", "a resistor at node in or a, in series"),
        ("r1 in 0 1\nrs out 0 50\n", "r1", "the name of a source"),
    ],
)
def test_a_source_resistance_in_the_wrong_place_is_refused(cards: str, name: str, expected: str) -> None:
    with pytest.raises(InputError, match=expected):
        input_port(_circuit(cards), Ports(name, "out", "rs"))


def test_the_input_must_be_a_source() -> None:
    circuit = stage(Values())
    with pytest.raises(InputError, match="found r1, expected the name of a voltage or current source"):
        predict(circuit, Ports("r1", "out"), assumptions=PAPER)


# --- no gain, and gains without a sign ---


def test_a_transresistance_below_1_milliohm_is_absent() -> None:
    assert signed_gain(0.99 * NO_TRANSRESISTANCE, NO_TRANSRESISTANCE).phase is None
    found = signed_gain(-1.01 * NO_TRANSRESISTANCE, NO_TRANSRESISTANCE)
    assert (found.value, found.phase) == (pytest.approx(-1.01 * NO_TRANSRESISTANCE), pytest.approx(180.0))
    assert InputPort("in", GROUND, is_current=True).floor == NO_TRANSRESISTANCE
    assert InputPort("in", GROUND).floor == NO_GAIN


@pytest.mark.parametrize(
    ("output", "at_input", "value", "reason"),
    [
        (-8 + 0.5j, 0.5, -abs(-16 + 1j), False),
        (1 - 1.01j, 1.0, None, True),
        (0.9e-6, 0.5, None, False),
        (1.0, 0.9e-6, None, False),
        (1.0, 0.0, None, False),
        (2e-6, 10.0, None, False),
        (complex("nan"), 1.0, None, False),
    ],
)
def test_the_gain_from_the_input_node_is_signed_as_a_gain_and_absent_with_its_signals(
    output: complex, at_input: complex, value: float | None, reason: bool
) -> None:
    found = InputPort("in", GROUND).gain_behind(output, {"in": at_input, GROUND: 0j}.__getitem__)
    assert found.value == (None if value is None else pytest.approx(value, rel=1e-12))
    assert (found.reason is not None) is reason


@pytest.mark.parametrize("port", [InputPort("in", GROUND), InputPort(GROUND, "in", turned=True)])
def test_the_input_node_counts_against_ground_whichever_way_the_source_is_drawn(port: InputPort) -> None:
    signals = {"in": 0.5 + 0j, GROUND: 0j}
    assert port.gain_behind(4.0, signals.__getitem__).value == pytest.approx(8.0)


# --- band, mid-band, capacitors ---

LOW_PASS = "iin 0 in ac 1\nr1 in 0 1k\nr2 in out 1k\nc1 out 0 1u\nrl out 0 2k\n"
CORNER = 1 / (2 * math.pi * 1e3 * 1e-6)


def test_a_current_into_a_pole_has_its_edge_there_and_its_mid_band_100_times_below() -> None:
    small = linear(LOW_PASS, Ports("iin", "out"))
    mid = bandwidth.find_mid_band(small, None)
    assert (mid.exact_f_l, mid.exact_f_h) == (None, pytest.approx(CORNER, rel=1e-3))
    assert mid.frequency == pytest.approx(CORNER / 100, rel=1e-9)
    found = complex(transfer(small, small.system(), [CORNER])[0])
    assert cmath.isclose(found, 500 / (1 + 1j), rel_tol=1e-12)


@pytest.mark.parametrize(("ohms", "there"), [(1e-4, False), (1e-2, True)])
def test_below_the_floor_there_are_no_edges(ohms: float, there: bool) -> None:
    small = linear(f"iin 0 in ac 1\nr1 in 0 {ohms}\nc1 in 0 1\n", Ports("iin", "in"))
    f_l, f_h = bandwidth.exact_edges(small, small.system(), 1e-3)
    assert (f_l, f_h is not None) == (None, there)


def test_far_outside_the_pass_band_is_counted_in_the_unit_of_the_gain() -> None:
    small = linear(LOW_PASS, Ports("iin", "out"))
    mid = bandwidth.find_mid_band(small, 1e3 * CORNER)
    assert mid.below_maximum_db == pytest.approx(60.0, abs=1e-3)


def test_a_coupling_capacitor_sees_the_source_resistance_as_the_current_source_leaves_it() -> None:
    small = linear("iin 0 a ac 1\nrs a 0 4k\nc1 a g 1u\nrg g 0 6k\n", Ports("iin", "g", "rs"))
    treatments = bandwidth.classify_capacitors(small, 1e3)
    assert treatments == {"c1": Treatment.SHORT}
    (tau,) = bandwidth.short_circuit_constants(small, treatments)
    assert tau.resistance == pytest.approx(10e3, rel=1e-9)
    assert bandwidth.exact_edges(small, small.system(), 1e5)[0] == pytest.approx(
        1 / (2 * math.pi * 10e3 * 1e-6), rel=1e-6
    )


# --- the hand analysis of whole stages ---


def by_current(circuit: Circuit) -> Circuit:
    """A stage with its EMF and series resistance exchanged for a current with 10 kΩ in parallel."""
    kept = tuple(e for e in circuit.elements if e.name not in ("vsig", "rsig"))
    added = CurrentSource("iin", (GROUND, "in")), Resistor("rs1", (GROUND, "in"), 10e3)
    return replace(circuit, elements=(*kept, *added))


def rows(prediction: Prediction) -> dict[str, float | None]:
    return {value.name: value.value for value in prediction.values}


@pytest.mark.parametrize("assumptions", [PAPER, FULL])
@pytest.mark.parametrize("sign", [1, -1])
def test_a_stage_driven_by_a_current_has_rm_and_no_av(sign: int, assumptions: tuple[str, ...]) -> None:
    v = Values(sign=sign)
    circuit, ports = by_current(stage(v)), Ports("iin", "out", "rs1", "rl")
    found = predict(circuit, ports, assumptions=assumptions, frequency=3e3)
    values = rows(found)
    assert {"Av", "Av.phase"}.isdisjoint(values)
    names = [name for name in values if "(" not in name]
    assert names == ["Psupply", "Rm", "Rm.phase", "Avi", "Rin", "Rout", "fL", "fH"]
    assert values["Rm"] is not None
    assert values["Rm"] < 0.0
    assert values["Rin"] == pytest.approx(1 / (1 / v.r1 + 1 / v.r2), rel=1e-2)
    at_gate = abs(dict(found.node_signals)["g"])
    assert values["Rm"] / values["Avi"] == pytest.approx(at_gate, rel=1e-3)
    assert found.transistors[0].vgs_per_emf == pytest.approx(at_gate, rel=0.02)


def test_the_gain_from_the_input_node_is_av_without_the_loss_in_the_source_resistance() -> None:
    v = replace(Values(), rsig=10e3)
    found = predict(stage(v), ports_of(v), assumptions=FULL, frequency=3e3)
    values, signals = rows(found), dict(found.node_signals)
    assert values["Avi"] == pytest.approx(-abs(signals["out"] / signals["in"]), rel=1e-12)
    assert values["Av"] / values["Avi"] == pytest.approx(abs(signals["in"]), rel=1e-12)
    assert abs(signals["in"]) < 0.97


def test_outside_the_pass_band_and_beside_other_devices_the_rows_are_those_of_the_input() -> None:
    circuit, ports = by_current(stage(Values())), Ports("iin", "out", "rs1", "rl")
    outside = predict(circuit, ports, assumptions=PAPER, frequency=1e12)
    other = OtherDevice("q1", ("d", "g", "s"), "a bipolar transistor")
    beside = predict(
        replace(circuit, elements=(*circuit.elements, other)), ports, assumptions=PAPER, frequency=3e3
    )
    for found in (outside, beside):
        by_name = {value.name: value for value in found.values}
        assert "Av" not in by_name
        for name in ("Rm", "Rm.phase", "Avi", "Rin", "Rout", "fL", "fH"):
            assert by_name[name].value is None
            assert by_name[name].reason


# --- the bench ---

DECK = "t\nvdd vdd 0 5\niin {} dc 1u {}\nr1 in 0 10k\nr2 in out 1k\nr3 out 0 1k\n"
SWEEP = Sweep(1.0, 10.0)


def planned(nodes: str = "0 in", ac: str = "", more: str = "") -> tuple[Circuit, Plan]:
    text = DECK.format(nodes, ac) + more
    circuit = read_flat(text)
    return circuit, make_plan(circuit, text, Ports("iin", "out", "r1"), frequency=2.0, sweep=SWEEP)


@pytest.mark.parametrize("nodes", ["0 in", "in 0"])
def test_a_current_input_is_driven_by_a_source_in_parallel_and_silenced_for_the_output(nodes: str) -> None:
    _, plan = planned(nodes)
    body, _, block = plan.job.deck.partition(".control")
    added = {e.name: e for e in read_flat(body).elements if isinstance(e, CurrentSource)}
    assert added["ibenchin"].nodes == tuple(nodes.split())
    assert (added["ibenchin"].dc, added["ibenchin"].ac) == (0.0, 0j)
    told = block.split("\n")
    on, off = told.index("alter ibenchin ac = 1"), told.index("alter ibenchin ac = 0")
    analyses = [number for number, line in enumerate(told) if line.startswith("ac ")]
    assert [on < number < off for number in analyses] == [True, True, False]
    assert off < told.index("alter ibench ac = 1") < analyses[-1]
    assert not any("alter iin" in line for line in told)
    assert plan.job.expected[2].nonzero == ()
    assert not any(column.startswith("i(iin") for column in plan.job.expected[2].columns)


def test_an_ac_value_of_a_current_input_is_silenced() -> None:
    told = planned(ac="ac 2 90 m=3")[1].job.deck.splitlines()
    assert told.index("alter iin ac = 0") < told.index("alter ibenchin ac = 1")


def test_the_names_of_test_sources_are_left_to_the_bench() -> None:
    for name in ("ibench", "ibenchin"):
        with pytest.raises(InputError, match=f"a source {name}, expected that name left to the bench"):
            planned(more=f"{name} 0 out 0\n")


def test_an_input_node_that_can_not_be_written_is_named() -> None:
    circuit = read_flat("t\niin 0 b$c dc 0\nr1 b$c 0 1k\nr2 b$c out 1k\nr3 out 0 1k\n")
    with pytest.raises(InputError, match=r'found the input "b\$c", expected a node with a name of letters'):
        make_plan(circuit, "t\n", Ports("iin", "out"), frequency=2.0, sweep=SWEEP)


def test_a_voltage_input_drives_one_of_its_two_nodes_at_least() -> None:
    circuit = read_flat("t\nvin a b 0\nr1 a 0 1k\nr2 b out 1k\nr3 out 0 1k\n")
    plan = make_plan(circuit, "t\n", Ports("vin", "out"), frequency=2.0, sweep=SWEEP)
    assert plan.job.expected[2].nonzero == ("v(a)", "v(b)")


def measured(nodes: str, signals: dict[str, complex], driven: complex = 500.0) -> Measurement:
    """A measurement from plots made by hand."""
    circuit, plan = planned(nodes)
    point, curve, mid, out = plan.job.expected
    values: dict[str, Any] = {f"v({node})": value for node, value in signals.items()} | {"frequency": 2.0}
    f = np.geomspace(1.0, 10.0, curve.points)
    falling = values["v(out)"] / np.sqrt((1 + (f / 5.0) ** 2) / (1 + (2.0 / 5.0) ** 2))
    plots = []
    for expected, columns in (
        (point, dict.fromkeys(point.columns, 0.0)),
        (curve, {"frequency": f, "v(out)": falling}),
        (mid, values),
        (out, {"frequency": 2.0, "v(out)": driven}),
    ):
        data = np.column_stack([np.broadcast_to(columns[n], expected.points) for n in expected.columns])
        flags, data = (("real",), data.real) if expected is point else (("complex",), data.astype(complex))
        names = tuple(Variable(name, "notype") for name in expected.columns)
        plots.append(Plot("t", expected.name, flags, names, data))
    return measure(circuit, Ports("iin", "out", "r1"), plan, plots)


@pytest.mark.parametrize(("nodes", "sign"), [("0 in", 1.0), ("in 0", -1.0)])
def test_the_measurement_follows_the_same_definitions(nodes: str, sign: float) -> None:
    found = measured(nodes, {"vdd": 0j, "in": sign * 2e3, "out": sign * -30e3})
    value = {v.name: v.value for v in found.values}
    assert value["Rm"] == pytest.approx(sign * -30e3)
    assert abs(value["Rm.phase"] or 0.0) == pytest.approx(180.0 if sign > 0 else 0.0)
    assert value["Avi"] == pytest.approx(-15.0)
    assert value["Rin"] == pytest.approx(1 / (1 / 2e3 - 1 / 10e3))  # R1 is declared
    assert value["Rout"] == pytest.approx(500.0)
    # One pole at 5 Hz, counted from 2 Hz: 1 + (f/5)² = 2·(1 + 0.4²).
    assert value["fH"] == pytest.approx(5.0 * math.sqrt(1.32), rel=1e-3)
    assert "Av" not in value
    units = {v.name: v.unit for v in found.values}
    assert (units["Rm"], units["Rm.phase"], units["Avi"]) == ("Ω", "deg", "V/V")


def test_where_nothing_comes_out_everything_of_the_gain_is_absent() -> None:
    found = measured("0 in", {"vdd": 0j, "in": 2e3, "out": 0.9e-3})
    value = {v.name: (v.value, v.reason) for v in found.values}
    assert {value[name] for name in ("Rm", "Rm.phase", "Avi", "fL", "fH")} == {(None, None)}
    held = {v.name: v.value for v in measured("0 in", {"vdd": 0j, "in": 0j, "out": 0j}).values}
    assert (held["Avi"], held["Rin"]) == (None, 0.0)
