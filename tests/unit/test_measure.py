"""The bench: what a plan asks the simulator, and what is made of its answer, on answers made by hand."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from deckgen.bench.measure import Measurement, band_edges, measure
from deckgen.bench.plan import POINTS_PER_DECADE, Plan, Sweep, make_plan, sweep_around
from deckgen.circuit.model import Circuit, CurrentSource, VoltageSource
from deckgen.circuit.netlist import netlist_text
from deckgen.circuit.ports import Ports
from deckgen.circuit.reader import read_flat
from deckgen.circuit.region import Region
from deckgen.simulator.job import ExpectedPlot
from deckgen.simulator.raw import Plot, Variable
from tests.unit.circuits import Values, ports_of, stage

SWEEP = Sweep(0.1, 1e10)
FREQUENCY = 3e3


def planned(circuit: Circuit, ports: Ports, *, sweep: Sweep = SWEEP) -> Plan:
    netlist = netlist_text(circuit) + "* the end\n.END\n"
    return make_plan(circuit, netlist, ports, frequency=FREQUENCY, sweep=sweep)


STAGE, PORTS = stage(Values()), ports_of(Values())


# --- the plan ---


def commands(plan: Plan) -> list[str]:
    """Lines between .control and .endc."""
    lines = plan.job.deck.splitlines()
    return lines[lines.index(".control") + 1 : lines.index(".endc")]


def test_the_deck_carries_the_netlist_over_and_ends_once() -> None:
    lines = planned(STAGE, PORTS).job.deck.splitlines()
    for line in netlist_text(STAGE).splitlines():
        assert line in lines
    assert [line.lower() for line in lines].count(".end") == 1
    assert lines[-1] == ".end"
    assert lines.index(".control") > lines.index("* the end")


def test_the_test_source_flows_into_the_output_and_is_silent_until_the_last_analysis() -> None:
    plan = planned(STAGE, PORTS)
    body = read_flat(plan.job.deck.split(".control")[0])
    (source,) = [e for e in body.elements if isinstance(e, CurrentSource)]
    assert (source.nodes, source.dc, source.ac) == (("0", "out"), 0.0, 0j)
    told = commands(plan)
    (on,) = [number for number, line in enumerate(told) if line == f"alter {source.name} ac = 1"]
    analyses = [number for number, line in enumerate(told) if line.split()[0] in ("op", "ac")]
    assert [number > on for number in analyses] == [False, False, False, True]
    assert told.index("alter vsig ac = 0") < analyses[-1]


def test_analyses_run_in_the_order_of_the_plots_that_are_expected() -> None:
    plan = planned(STAGE, PORTS)
    told = commands(plan)
    analyses = [line.split()[0] for line in told if line.split()[0] in ("op", "ac")]
    assert analyses == ["op", "ac", "ac", "ac"]
    assert [plot.name for plot in plan.job.expected] == ["Operating Point", *["AC Analysis"] * 3]
    writes = [line for line in told if line.startswith("write ")]
    assert len(writes) == 4
    assert all(line.split()[1] == plan.job.raw_name for line in writes)
    # Each plot is written right behind its analysis, before the next one.
    kinds = [line.split()[0] for line in told if line.split()[0] in ("op", "ac", "write")]
    assert kinds == ["op", "write", "ac", "write", "ac", "write", "ac", "write"]


def test_what_must_be_answered_covers_every_node_source_and_device() -> None:
    point, curve, mid, driven = planned(STAGE, PORTS).job.expected
    nodes = {f"v({node})" for node in STAGE.nodes}
    readouts = {f"@m1[{what}]" for what in ("id", "gm", "gds", "gmbs", "von")}
    assert set(point.columns) == nodes | readouts | {"i(vdd)", "i(vsig)"}
    assert set(curve.columns) == {"frequency", "v(out)"}
    assert set(mid.columns) == nodes | {"frequency", "i(vsig)"}
    assert mid.nonzero == ("v(sig)",)
    assert set(driven.columns) == {"frequency", "v(out)"}
    assert (point.points, mid.points, driven.points) == (1, 1, 1)


@pytest.mark.parametrize(
    ("edges", "start", "stop"),
    [
        ((), 0.1, 1e10),
        ((None, None), 0.1, 1e10),
        ((10.0, 1e6), 0.1, 1e10),
        ((9.9, 1e6), 0.01, 1e10),
        ((0.5, None), 1e-3, 1e10),
        ((None, 1e8), 0.1, 1e10),
        ((None, 1.01e8), 0.1, 1e11),
        ((1e9, 1e9), 0.1, 1e11),
    ],
)
def test_the_sweep_spans_whole_decades_two_beyond_the_edges_expected(
    edges: tuple[float | None, ...], start: float, stop: float
) -> None:
    sweep = sweep_around(*edges)
    assert (sweep.start, sweep.stop) == pytest.approx((start, stop), rel=1e-12)


@pytest.mark.parametrize(("start", "stop", "points"), [(0.1, 1e10, 551), (1.0, 10.0, 51), (1e-3, 1e11, 701)])
def test_a_sweep_has_50_points_a_decade_and_one_more(start: float, stop: float, points: int) -> None:
    assert POINTS_PER_DECADE >= 50
    assert Sweep(start, stop).points == points
    plan = planned(STAGE, PORTS, sweep=Sweep(start, stop))
    assert plan.job.expected[1].points == points
    (line,) = [line for line in commands(plan) if line.startswith("ac dec ")]
    assert [float(word) for word in line.split()[2:]] == [POINTS_PER_DECADE, start, stop]


def test_mid_band_is_analysed_at_the_frequency_of_the_plan() -> None:
    plan = planned(STAGE, PORTS)
    points = [line.split() for line in commands(plan) if line.startswith("ac lin 1 ")]
    assert [[float(x) for x in words[3:]] for words in points] == [[FREQUENCY, FREQUENCY]] * 2
    assert plan.frequency == FREQUENCY


def test_every_other_source_with_a_signal_is_silenced_before_the_first_ac_analysis() -> None:
    others = (
        VoltageSource("vnoise", ("n", "0"), 0.0, 2 + 0j),
        CurrentSource("ihum", ("0", "d"), 0.0, 1e-3j),
        VoltageSource("vquiet", ("q", "0"), 1.0, 0j),
    )
    circuit = replace(STAGE, elements=(*STAGE.elements, *others))
    told = commands(planned(circuit, PORTS))
    first = next(number for number, line in enumerate(told) if line.startswith("ac "))
    silenced = {
        line.split()[1] for line in told[:first] if line.startswith("alter ") and line.endswith(" ac = 0")
    }
    assert {"vnoise", "ihum"} <= silenced
    assert "alter vsig ac = 1" in told[:first]
    assert "vsig" not in silenced
    assert not any("vnoise" in line or "ihum" in line for line in told[first:])
    assert {"alter vnoise ac = 0", "alter ihum ac = 0"}.isdisjoint(commands(planned(STAGE, PORTS)))


# --- the measurement, on plots made by hand ---


def plot(expected: ExpectedPlot, columns: Mapping[str, Any]) -> Plot:
    """A plot with the expected columns, shuffled into another order, as the simulator may write them."""
    names = sorted(expected.columns)
    data = np.column_stack([np.broadcast_to(columns[name], expected.points) for name in names])
    flags = ("real",) if expected.name == "Operating Point" else ("complex",)
    data = data.real if flags == ("real",) else data.astype(complex)
    return Plot("t", expected.name, flags, tuple(Variable(name, "notype") for name in names), data)


VOLTS = {"vdd": 12.0, "sig": 0.0, "in": 0.0, "g": 2.4, "d": 7.0, "s": 1.0, "out": 0.0}
SIGNALS = {"vdd": 0j, "sig": 1 + 0j, "in": 0.99 + 0j, "g": 0.99 + 0j, "d": -8 + 0j, "s": 0j, "out": -8 + 0.5j}
READ = {"id": 0.5e-3, "gm": 2e-3, "gds": 5e-6, "gmbs": 3e-4, "von": 0.95}


def answer(
    circuit: Circuit = STAGE, ports: Ports = PORTS, **changes: Any
) -> tuple[Circuit, Ports, Plan, list[Plot]]:
    """Plots of a stage with a gain of -8, one pole at 100 Hz below and one at 1 MHz above."""
    given_: dict[str, Any] = {"volts": VOLTS, "signals": SIGNALS, "read": READ, "driven": 8e3, "i_sig": -1e-5}
    given_ |= changes
    plan = planned(circuit, ports)
    f = np.geomspace(SWEEP.start, SWEEP.stop, plan.job.expected[1].points)
    shape = given_.get("curve", lambda x: 1 / ((1 - 100j / x) * (1 + 1j * x / 1e6)))
    gain = given_["signals"][ports.output]
    at = {f"v({node})": value for node, value in given_["volts"].items()}
    at |= {f"@m1[{what}]": value for what, value in given_["read"].items()}
    currents = {"i(vdd)": -0.6e-3, "i(vsig)": 0.0}
    signal = {f"v({node})": value for node, value in given_["signals"].items()}
    point, curve, mid, driven = plan.job.expected
    garbage = complex(FREQUENCY, -4.5e210)  # what the simulator may leave beside a frequency
    plots = [
        plot(point, at | currents),
        plot(curve, {"frequency": f + 1j, f"v({ports.output})": gain * shape(f) / shape(FREQUENCY)}),
        plot(mid, signal | {"frequency": garbage, "i(vsig)": given_["i_sig"]}),
        plot(driven, {"frequency": garbage, f"v({ports.output})": given_["driven"]}),
    ]
    return circuit, ports, plan, plots


def measured(**changes: Any) -> Measurement:
    return measure(*answer(**changes))


def value(measurement: Measurement, name: str) -> float | None:
    found = measurement.value(name)
    assert found is not None, name
    return found.value


def test_quantities_of_the_operating_point_come_from_nodes_and_read_outs() -> None:
    m = measured()
    expected = {
        "ID(M1)": 0.5e-3, "VGS(M1)": 1.4, "VDS(M1)": 6.0, "VTH(M1)": 0.95, "VOV(M1)": 0.45,
        "gm(M1)": 2e-3, "gds(M1)": 5e-6, "gmb(M1)": 3e-4, "V(d)": 7.0, "V(out)": 0.0,
        "Psupply": 12 * 0.6e-3,
    }  # fmt: skip
    for name, x in expected.items():
        assert value(m, name) == pytest.approx(x, rel=1e-12, abs=1e-15), name
    assert {v.name for v in m.values if v.name.startswith("V(")} == {f"V({n})" for n in STAGE.nodes}
    (device,) = m.transistors
    assert (device.name, device.region) == ("M1", Region.SATURATION)
    assert device.margin == pytest.approx(6.0 - 0.45)
    assert dict(m.node_voltages) == VOLTS
    assert dict(m.node_signals) == SIGNALS
    assert m.value("nothing") is None


def test_a_p_channel_device_has_its_signs_turned_where_the_trade_turns_them() -> None:
    v = Values(sign=-1)
    volts = {"vdd": 12.0, "sig": 0.0, "in": 0.0, "g": 9.6, "d": 5.0, "s": 11.0, "out": 0.0}
    m = measured(circuit=stage(v), ports=ports_of(v), volts=volts, read={**READ, "von": -0.95})
    for name, x in {
        "VGS(M1)": -1.4,
        "VDS(M1)": -6.0,
        "VTH(M1)": -0.95,
        "VOV(M1)": 0.45,
        "ID(M1)": 0.5e-3,
    }.items():
        assert value(m, name) == pytest.approx(x, rel=1e-12)
    assert m.transistors[0].region is Region.SATURATION
    assert m.transistors[0].margin == pytest.approx(5.55)


def with_parameters(circuit: Circuit, **more: float) -> Circuit:
    (card,) = circuit.models
    return replace(circuit, models=(replace(card, parameters=(*card.parameters, *more.items())),))


@pytest.mark.parametrize("sign", [1, -1], ids=["n", "p"])
@pytest.mark.parametrize("resistances", [{"rd": 100.0}, {"rs": 50.0}, {"rsh": 5.0}], ids=str)
def test_behind_resistances_of_the_card_overdrive_and_margin_come_from_the_channel(
    sign: int, resistances: dict[str, float]
) -> None:
    v = Values(sign=sign)
    circuit = with_parameters(stage(v), **resistances)
    volts = VOLTS if sign > 0 else {**VOLTS, "g": 9.6, "d": 5.0, "s": 11.0}
    # The simulator's vgs and vds count positive for either polarity, and von has its true sign.
    read = {**READ, "von": sign * 0.95, "vgs": 1.38, "vds": 5.9}
    m = measured(circuit=circuit, ports=ports_of(v), volts=volts, read=read)
    found = {name: value(m, f"{name}(M1)") for name in ("VGS", "VDS", "VTH", "VOV")}
    assert found == pytest.approx({"VGS": sign * 1.4, "VDS": sign * 6.0, "VTH": sign * 0.95, "VOV": 0.43})
    assert m.transistors[0].margin == pytest.approx(5.9 - 0.43)


def test_only_devices_with_such_resistances_are_asked_for_their_inner_voltages() -> None:
    for parameters, asked in (({"rd": 1.0}, True), ({"rsh": 2.0}, True), ({"rd": 0.0, "rsh": 0.0}, False)):
        columns = planned(with_parameters(STAGE, **parameters), PORTS).job.expected[0].columns
        assert {"@m1[vgs]", "@m1[vds]"}.issubset(columns) == asked


@pytest.mark.parametrize(
    ("volts", "region"),
    [({"d": 1.2}, Region.TRIODE), ({"g": 1.5}, Region.CUTOFF), ({"d": 0.9}, Region.REVERSED)],
)
def test_the_region_is_taken_from_the_measured_voltages(volts: dict[str, float], region: Region) -> None:
    assert measured(volts=VOLTS | volts).transistors[0].region is region


def test_the_power_of_current_sources_counts_too() -> None:
    circuit = replace(STAGE, elements=(*STAGE.elements, CurrentSource("i1", ("0", "d"), 1e-3)))
    assert value(measured(circuit=circuit), "Psupply") == pytest.approx(12 * 0.6e-3 + 7.0 * 1e-3)


def test_gain_and_resistances_follow_their_definitions() -> None:
    m = measured()
    assert value(m, "Av") == pytest.approx(-abs(-8 + 0.5j))
    assert value(m, "Av.phase") == pytest.approx(180 - math.degrees(math.atan2(0.5, 8)))
    assert value(m, "Rin") == pytest.approx(0.99 / 1e-5)  # behind RSIG
    assert value(m, "Rout") == pytest.approx(1 / (1 / 8e3 - 1 / 47e3))  # the load subtracted
    bare = measured(ports=Ports("vsig", "out"))
    assert value(bare, "Rin") == pytest.approx(1.0 / 1e-5)  # seen from the source itself
    assert value(bare, "Rout") == pytest.approx(8e3)


def test_a_source_drawn_the_other_way_round_gives_the_same_resistance() -> None:
    elements = tuple(
        replace(e, nodes=e.nodes[::-1]) if isinstance(e, VoltageSource) and e.name == "vsig" else e
        for e in STAGE.elements
    )
    turned = {node: -x for node, x in SIGNALS.items()}
    m = measured(circuit=replace(STAGE, elements=elements), signals=turned)
    assert value(m, "Rin") == pytest.approx(0.99 / 1e-5)
    assert value(m, "Av") == pytest.approx(abs(-8 + 0.5j))


def test_resistances_beyond_10_gigohms_and_no_gain_are_absent() -> None:
    m = measured(i_sig=-1e-11, signals={**SIGNALS, "out": 1e-9 + 0j})
    for name in ("Rin", "Av", "Av.phase", "fL", "fH"):
        found = m.value(name)
        assert found is not None
        assert (found.value, found.reason) == (None, None)
    assert value(measured(driven=0j), "Rout") == pytest.approx(0.0, abs=0.0)


def test_a_gain_between_the_signs_has_a_reason_and_keeps_its_phase() -> None:
    m = measured(signals={**SIGNALS, "out": -8j})
    found = m.value("Av")
    assert found is not None
    assert found.value is None
    assert "phase of the gain is -90°" in (found.reason or "")
    assert value(m, "Av.phase") == pytest.approx(-90.0)


def test_band_edges_are_counted_from_the_gain_at_mid_band() -> None:
    m = measured()
    assert value(m, "fL") == pytest.approx(100.0, rel=3e-3)
    assert value(m, "fH") == pytest.approx(1e6, rel=3e-3)
    flat = measured(curve=lambda x: np.ones_like(x) if isinstance(x, np.ndarray) else 1.0)
    assert (value(flat, "fL"), value(flat, "fH")) == (None, None)


# --- the interpolation against poles that are known ---

GRID = np.geomspace(0.1, 1e10, 551)


@settings(max_examples=80)
@given(st.floats(1.0, 8.0), st.floats(1e-3, 1e3))
def test_an_edge_between_points_is_found_within_4_hundredths_of_a_percent(decade: float, size: float) -> None:
    corner = 10.0**decade
    low = size / np.sqrt(1 + (GRID / corner) ** 2)
    high = size / np.sqrt(1 + (corner / GRID) ** 2)
    below, above = corner / 1e3, corner * 1e3
    at_below = size / math.sqrt(1 + (below / corner) ** 2)
    found = band_edges(GRID, low, middle=below, reference=at_below)
    assert found == (None, pytest.approx(corner, rel=4e-4))
    found = band_edges(GRID, high, middle=above, reference=at_below)
    assert found == (pytest.approx(corner, rel=4e-4), None)


def test_both_edges_of_a_band_are_found_and_the_first_outward_counts() -> None:
    ripple = 1 / np.sqrt(1 + (10 / GRID) ** 2) / np.sqrt(1 + (GRID / 1e5) ** 2)
    ripple = np.where(GRID > 1e8, 1.0, ripple)  # the gain comes back far beyond the band
    f_l, f_h = band_edges(GRID, ripple, middle=1e3, reference=1.0)
    assert (f_l, f_h) == (pytest.approx(10.0, rel=1e-3), pytest.approx(1e5, rel=1e-3))


def test_an_edge_between_mid_band_and_the_next_point_is_found() -> None:
    f = np.array([1.0, 10.0, 100.0])
    f_l, f_h = band_edges(f, np.array([0.1, 1.0, 0.1]), middle=10.0, reference=1.0)
    assert f_h == pytest.approx(10 ** (1 + math.log(math.sqrt(2)) / math.log(10)), rel=1e-9)
    assert f_l == pytest.approx(10 ** (1 - math.log(math.sqrt(2)) / math.log(10)), rel=1e-9)
    _, off_grid = band_edges(f, np.array([0.1, 1.0, 0.1]), middle=20.0, reference=1.0)
    assert off_grid == pytest.approx(20.0 * 5 ** (math.log(math.sqrt(2)) / math.log(10)), rel=1e-9)


@pytest.mark.parametrize("reference", [0.0, 1e-7, math.nan])
def test_without_a_gain_at_mid_band_there_are_no_edges(reference: float) -> None:
    assert band_edges(GRID, np.ones_like(GRID), middle=1e3, reference=reference) == (None, None)


def test_a_gain_that_falls_to_nothing_at_once_still_has_an_edge() -> None:
    magnitude = np.where(GRID < 1e5, 1.0, 0.0)
    _, f_h = band_edges(GRID, magnitude, middle=1e3, reference=1.0)
    assert f_h is not None
    assert 0.9e5 < f_h <= 1.05e5
