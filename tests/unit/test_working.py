"""The working: closed forms give what nodal analysis gives, every step is accounted for, names play no part.

The nodal values are those of the same analysis before the closed forms are put in their place.
"""

from __future__ import annotations

import math
from dataclasses import replace

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from deckgen.assumptions import assumptions_made
from deckgen.circuit.model import GROUND, Capacitor, Circuit, Inductor, Mosfet, Resistor
from deckgen.circuit.ports import Ports
from deckgen.circuit.region import Region, region_of
from deckgen.hand.analysis import analyse
from deckgen.hand.effects import effects_under
from deckgen.hand.formulas.device import STRONG_INVERSION
from deckgen.hand.nodal import nodal_values
from deckgen.hand.predict import predict
from deckgen.hand.prediction import HandValue, How, Prediction
from deckgen.hand.roles import Role
from deckgen.quantities import KINDS, parse_quantity
from tests.unit.circuits import Values, ports_of, stage
from tests.unit.stage_values import MID_BAND, Kind, RegionName, stages

PAPER = assumptions_made("paper")
FULL = assumptions_made("full")

# What rounding leaves of each kind where the value itself is nothing.
FLOORS = {"A": 1e-13, "V": 1e-12, "W": 1e-12, "S": 1e-12, "V/V": 1e-9, "deg": 1e-6, "Ω": 1e-6, "Hz": 1e-9}


def by_hand(v: Values, assumptions: tuple[str, ...] = PAPER, *, frequency: float | None = None) -> Prediction:
    return predict(stage(v), ports_of(v), assumptions=assumptions, frequency=frequency)


Nodal = dict[str, HandValue]


def nodal_of(
    circuit: Circuit, ports: Ports, assumptions: tuple[str, ...] = PAPER, frequency: float | None = None
) -> Nodal:
    analysis = analyse(circuit, ports, effects_under(assumptions), frequency)
    found = {value.name: value for value in nodal_values(analysis)}
    assert {value.how for value in found.values()} == {How.NODAL}
    return found


def nodal(v: Values, assumptions: tuple[str, ...] = PAPER, *, frequency: float | None = None) -> Nodal:
    return nodal_of(stage(v), ports_of(v), assumptions, frequency)


def value_of(prediction: Prediction, name: str) -> HandValue:
    found = prediction.value(name)
    assert found is not None, name
    return found


def assert_same(first: HandValue, second: HandValue, relative: float = 1e-9) -> None:
    assert (first.value is None) == (second.value is None), (first, second)
    if first.value is None or second.value is None:
        return
    difference = first.value - second.value
    if first.unit == "deg":
        difference = math.remainder(difference, 360.0)
    assert abs(difference) <= relative * abs(second.value) + FLOORS[first.unit], (first, second)


CASES = [
    (kind, region, sign, bulk)
    for kind in ("common source", "degenerated", "follower")
    for region in ("saturation", "triode", "cut-off")
    for sign in (1, -1)
    for bulk in (False, True)
]
ROLES = {
    "common source": Role.COMMON_SOURCE,
    "degenerated": Role.COMMON_SOURCE_DEGENERATED,
    "follower": Role.FOLLOWER,
}


@settings(max_examples=6)
@pytest.mark.parametrize(("kind", "region", "sign", "bulk"), CASES)
@given(data=st.data())
def test_every_closed_form_gives_what_nodal_analysis_gives(
    kind: Kind, region: RegionName, sign: int, bulk: bool, data: st.DataObject
) -> None:
    v = data.draw(stages(kind, region, sign, bulk))
    written, solved = by_hand(v, frequency=MID_BAND), nodal(v, frequency=MID_BAND)
    cut_off = written.transistors[0].region is Region.CUTOFF
    assert written.transistors[0].role == (Role.CUT_OFF if cut_off else ROLES[kind])
    closed = {value.name for value in written.values if value.how is How.CLOSED_FORM}
    assert {f"{k}(M1)" for k in ("ID", "VGS", "VDS", "VTH", "VOV", "gm", "gds", "gmb")} <= closed
    for value in written.values:
        assert_same(value, solved[value.name])
    if written.transistors[0].region is not Region.CUTOFF and abs(solved["Av"].value or 0.0) > 1e-6:
        assert {"Av", "Av.phase", "Rin", "Rout", "fL"} <= closed
        assert "fH" in closed or solved["fH"].value is None


@pytest.mark.parametrize("region", ["saturation", "triode", "cut-off"])
@pytest.mark.parametrize("kind", ["common source", "degenerated", "follower"])
def test_the_regions_asked_for_are_those_that_come_out(kind: Kind, region: RegionName) -> None:
    """The property above would say little if its stages all sat in one region."""
    found: list[Region] = []

    @settings(max_examples=10, database=None)
    @given(stages(kind, region, 1, True))
    def collect(v: Values) -> None:
        found.append(by_hand(v, frequency=MID_BAND).transistors[0].region)

    collect()
    assert found.count(Region(region)) >= 0.8 * len(found)


VARIANTS = {
    "no source resistor": {"rs": None, "cs": None},
    "bypassed": {},
    "degenerated": {"cs": None},
    "drain is the output": {"cout": None},
    "no load capacitance": {"cl": None},
    "driven without resistance": {"rsig": None},
    "several in parallel": {"m": 4.0},
    "without oxide": {"tox": 0.0, "overlap": 0.0},
    "depletion": {"vto": -0.5, "rs": 5e3},
    "follower": {"follower": True},
    "follower is the output": {"follower": True, "cout": None},
}


@pytest.mark.parametrize("sign", [1, -1], ids=["n", "p"])
@pytest.mark.parametrize("bulk", [False, True], ids=["bulk at the rail", "bulk at the source"])
@pytest.mark.parametrize("name", VARIANTS)
def test_every_variant_of_the_stages_agrees_with_nodal_analysis(name: str, bulk: bool, sign: int) -> None:
    v = replace(Values(sign=sign, bulk_at_source=bulk), **VARIANTS[name])
    solved = nodal(v)
    for value in by_hand(v).values:
        assert_same(value, solved[value.name])


@pytest.mark.parametrize("declared", [(True, True), (True, False), (False, True), (False, False)])
@pytest.mark.parametrize("follower", [False, True])
def test_undeclared_resistors_count_as_part_of_the_stage_in_both_ways_of_reckoning(
    follower: bool, declared: tuple[bool, bool]
) -> None:
    v = Values(follower=follower)
    ports = Ports("vsig", "out", "rsig" if declared[0] else None, "rl" if declared[1] else None)
    written = predict(stage(v), ports, assumptions=PAPER)
    solved = nodal_of(stage(v), ports)
    for value in written.values:
        assert_same(value, solved[value.name])
    assert value_of(written, "Rin").how is How.CLOSED_FORM
    said = " ".join(written.notes)
    assert ("no source resistance declared" in said) is not declared[0]
    assert ("no load declared" in said) is not declared[1]


@pytest.mark.parametrize(
    "added", [(), ("no-body-effect",), ("no-output-resistance",), ("no-body-effect", "no-output-resistance")]
)
def test_the_same_holds_with_assumptions_added(added: tuple[str, ...]) -> None:
    assumptions = assumptions_made("paper", add=added)
    for v in (Values(), Values(cs=None), Values(follower=True)):
        solved = nodal(v, assumptions)
        for value in by_hand(v, assumptions).values:
            assert_same(value, solved[value.name])
    v = Values()
    if "no-output-resistance" in added:
        assert value_of(by_hand(v, assumptions), "gds(M1)").value == pytest.approx(0.0, abs=1e-30)
    if "no-body-effect" in added:
        assert value_of(by_hand(v, assumptions), "VTH(M1)").value == pytest.approx(0.8, rel=1e-12)


# --- the steps ---


@pytest.mark.parametrize("sign", [1, -1], ids=["n", "p"])
@pytest.mark.parametrize("name", VARIANTS)
def test_every_step_has_a_formula_numbers_a_unit_and_a_source(name: str, sign: int) -> None:
    prediction = by_hand(replace(Values(sign=sign), **VARIANTS[name]))
    assert len(prediction.working) >= 12
    for step in prediction.working:
        for text in (step.symbol, step.formula, step.numbers, step.unit, step.source):
            assert text.strip(), step
            assert "nan" not in text.lower()
            assert "\n" not in text
        assert math.isfinite(step.value)


@pytest.mark.parametrize("name", VARIANTS)
def test_a_quantity_is_given_by_one_step_and_the_hand_value_is_its_result(name: str) -> None:
    prediction = by_hand(replace(Values(), **VARIANTS[name]))
    given_ = [step for step in prediction.working if step.quantity is not None]
    assert len({step.quantity for step in given_}) == len(given_)
    for step in given_:
        found = value_of(prediction, step.quantity or "")
        assert found.how is How.CLOSED_FORM
        assert found.value == pytest.approx(step.value, rel=1e-15)
        assert found.unit == step.unit == KINDS[parse_quantity(found.name).kind].unit
    others = {value.name for value in prediction.values} - {step.quantity for step in given_}
    assert {value_of(prediction, other).how for other in others} <= {How.NODAL}


def test_later_steps_take_earlier_hand_values() -> None:
    order = [step.quantity for step in by_hand(Values()).working if step.quantity]
    for before, after in [
        ("V(g)", "VOV(M1)"), ("VTH(M1)", "VOV(M1)"), ("VOV(M1)", "ID(M1)"), ("ID(M1)", "V(s)"),
        ("ID(M1)", "gm(M1)"), ("gm(M1)", "Av"), ("Rin", "Av"), ("Av", "fL"), ("fL", "fH"),
    ]:  # fmt: skip
        assert order.index(before) < order.index(after)


def test_values_of_a_stage_worked_out_by_hand() -> None:
    """A stage whose numbers come out round: VG = 4 V, k·RS = 1 per volt, so VOV = 2·2/(1+√5) V."""
    v = Values(vdd=12.0, r1=200e3, r2=100e3, vto=2.0, gamma=0.0, lam=0.01, kp=1e-4, w=20e-6, l=2e-6,
               rs=1e3, cs=None, rd=5e3, rsig=None, cout=None, cl=None, tox=0.0, overlap=0.0)  # fmt: skip
    prediction = by_hand(v)
    v_ov = math.sqrt(5.0) - 1.0
    i_d, gm = 0.5e-3 * v_ov**2, 1e-3 * v_ov
    ro = 1 / (0.01 * i_d)
    expected = {
        "V(g)": 4.0, "VTH(M1)": 2.0, "VOV(M1)": v_ov, "ID(M1)": i_d, "V(s)": i_d * 1e3,
        "V(out)": 12 - i_d * 5e3, "VDS(M1)": 12 - i_d * 6e3, "gm(M1)": gm, "gds(M1)": 1 / ro,
        "gmb(M1)": 0.0, "Psupply": 12 * (i_d + 12 / 300e3), "Av.phase": 180.0,
        "Av": -gm * 5e3 / (1 + gm * 1e3 + 6e3 / ro),
        "Rout": 1 / (1 / 5e3 + 1 / (ro + 1e3 + gm * ro * 1e3)),
    }  # fmt: skip
    for name, value in expected.items():
        assert value_of(prediction, name).value == pytest.approx(value, rel=1e-10, abs=1e-15), name
    assert value_of(prediction, "fH").value is None
    assert prediction.transistors[0].margin == pytest.approx(12 - i_d * 6e3 - v_ov, rel=1e-9)


def test_a_bypass_capacitor_sees_the_bulk_even_where_its_own_short_hides_it_from_the_gain() -> None:
    with_bulk, without = (value_of(by_hand(Values(bulk_at_source=at)), "fL").value for at in (False, True))
    assert with_bulk is not None
    assert without is not None
    g = {k: value_of(by_hand(Values()), f"{k}(M1)").value or 0.0 for k in ("gm", "gmb", "gds")}
    r_d = 1 / (1 / 10e3 + 1 / 47e3)
    into = (1 + r_d * g["gds"]) / (g["gm"] + g["gmb"] + g["gds"])
    step = next(s for s in by_hand(Values()).working if s.symbol == "f(CS)")
    assert step.value == pytest.approx((1 / 2e3 + 1 / into) / (2 * math.pi * 10e-6), rel=1e-9)


def test_an_iterated_threshold_says_so_and_a_plain_one_does_not() -> None:
    def note(v: Values) -> str | None:
        return next(s.note for s in by_hand(v).working if s.quantity == "VTH(M1)")

    assert "iterated with VS" in (note(Values(cs=None)) or "")
    assert note(Values(gamma=0.0)) == "γ = 0"
    assert note(Values(bulk_at_source=True)) == "bulk at the source"


@pytest.mark.parametrize(("v_ov", "noted"), [(0.149, True), (0.151, False)])
def test_an_overdrive_below_strong_inversion_is_noted_beside_its_step(v_ov: float, noted: bool) -> None:
    v = Values(rs=None, cs=None, gamma=0.0, r1=12e6 / (0.8 + v_ov) - 1e6, r2=1e6, rd=1e3)
    step = next(s for s in by_hand(v).working if s.quantity == "VOV(M1)")
    assert step.value == pytest.approx(v_ov, rel=1e-9)
    assert step.note == STRONG_INVERSION.note(v_ov)
    assert (step.note is not None) is noted


def test_a_stage_in_triode_or_cut_off_says_that_saturation_did_not_hold() -> None:
    def notes(v: Values) -> str:
        return " ".join(s.note or "" for s in by_hand(v).working)

    assert "redone in triode" in notes(Values(rd=100e3))
    assert "cut off" in notes(Values(r2=50e3))
    assert "redone" not in notes(Values())


def test_the_exact_band_edges_stand_beside_the_estimates() -> None:
    prediction = by_hand(Values())
    notes = {s.quantity: s.note or "" for s in prediction.working if s.quantity in ("fL", "fH")}
    assert all(note.startswith("exact curve: ") for note in notes.values())
    symbols = [s.symbol for s in prediction.working]
    assert "fH (Miller)" in symbols
    assert "fH (Miller)" not in [s.symbol for s in by_hand(Values(cs=None)).working]


def test_the_estimates_lie_on_the_safe_side_of_the_exact_edges() -> None:
    """With real poles the sum of time constants is pessimistic: fH is low, fL high (Gray & Searle 1969)."""
    for v in (Values(), Values(cs=None), Values(cl=1e-9), Values(rsig=50e3)):
        prediction = by_hand(v)
        exact_l, exact_h = prediction.mid_band.exact_f_l, prediction.mid_band.exact_f_h
        f_l, f_h = value_of(prediction, "fL").value, value_of(prediction, "fH").value
        assert exact_l is not None
        assert exact_h is not None
        assert f_l is not None
        assert f_h is not None
        assert exact_l <= f_l * 1.001
        assert exact_h >= f_h * 0.999


# --- nothing hangs on names and order ---


def _renamed(circuit: Circuit, nodes: dict[str, str], parts: dict[str, str]) -> Circuit:
    moved = [
        replace(e, name=parts.get(e.name, e.name), nodes=tuple(nodes.get(node, node) for node in e.nodes))
        for e in circuit.elements
    ]
    return replace(circuit, elements=tuple(moved))


@settings(max_examples=15)
@given(order=st.randoms(use_true_random=False), follower=st.booleans(), sign=st.sampled_from([1, -1]))
def test_renaming_and_reordering_parts_changes_no_value(order: object, follower: bool, sign: int) -> None:
    v = Values(follower=follower, sign=sign)
    circuit, ports = stage(v), ports_of(v)
    names = [e.name for e in circuit.elements if e.name[0] in "rc"]
    shuffled = {kind: [n for n in names if n[0] == kind] for kind in "rc"}
    parts = {"m1": "m7"}
    for kind, listed in shuffled.items():
        others = listed.copy()
        order.shuffle(others)  # type: ignore[attr-defined]
        parts |= dict(zip(listed, (f"{name}{kind}" for name in others), strict=True))
    nodes = {node: f"n{number}" for number, node in enumerate(circuit.nodes)}
    moved = _renamed(circuit, nodes, parts)
    elements = list(moved.elements)
    order.shuffle(elements)  # type: ignore[attr-defined]
    moved = replace(moved, elements=tuple(elements))
    other = predict(moved, Ports("vsig", nodes["out"], parts["rsig"], parts["rl"]), assumptions=PAPER)
    for value in predict(circuit, ports, assumptions=PAPER).values:
        name = value.name.replace("M1", "M7")
        if name.startswith("V("):
            name = f"V({nodes[name[2:-1]]})"
        found = value_of(other, name)
        assert found.how is value.how
        assert_same(found, value, relative=1e-10)


def test_a_resistor_or_capacitor_turned_round_is_the_same_part() -> None:
    circuit = stage(Values())
    turned = tuple(
        replace(e, nodes=e.nodes[::-1]) if isinstance(e, Resistor | Capacitor) else e
        for e in circuit.elements
    )
    other = predict(replace(circuit, elements=turned), ports_of(Values()), assumptions=PAPER)
    for value in predict(circuit, ports_of(Values()), assumptions=PAPER).values:
        assert_same(value_of(other, value.name), value, relative=1e-12)


# --- roles, and what has none ---


def _with(*more: object, drop: str = "", **changes: object) -> Circuit:
    circuit = stage(replace(Values(), **changes))  # type: ignore[arg-type]
    kept = tuple(e for e in circuit.elements if e.name not in drop.split())
    return replace(circuit, elements=(*kept, *more))  # type: ignore[arg-type]


def role(circuit: Circuit, output: str = "out") -> str:
    return predict(circuit, Ports("vsig", output), assumptions=PAPER).transistors[0].role


def test_roles_come_from_the_graph() -> None:
    assert role(_with()) == "common-source"
    assert role(_with(rs=None, cs=None)) == "common-source"
    assert role(_with(cs=None)) == "common-source-degenerated"
    assert role(_with(follower=True)) == "follower"
    assert role(_with(), "d") == "common-source"
    assert role(_with(cs=None), "d") == "common-source-degenerated"
    assert role(_with(cs=None), "s") == "follower"


UNRECOGNISED = {
    "output at the gate": (_with(), "g"),
    "output at the supply": (_with(), "vdd"),
    "resistor from drain to source": (_with(Resistor("rx", ("d", "s"), 1e6), cs=None), "out"),
    "an inductor in the drain": (_with(Inductor("ld", ("vdd", "d"), 1e-3), drop="rd"), "out"),
    "a second transistor": (_with(Mosfet("m2", ("d", "g", "s", GROUND), "nm", 1e-6, 2e-6)), "out"),
}


@pytest.mark.parametrize("case", UNRECOGNISED)
def test_an_unrecognised_network_is_solved_by_nodes_alone_and_says_so(case: str) -> None:
    circuit, output = UNRECOGNISED[case]
    prediction = predict(circuit, Ports("vsig", output), assumptions=PAPER)
    gain = {"Av", "Av.phase", "Rin", "Rout", "fL", "fH"}
    assert {value.how for value in prediction.values if value.name in gain} == {How.NODAL}
    assert any(note.startswith("no closed form") and "nodal" in note for note in prediction.notes)
    assert all(math.isfinite(v.value) for v in prediction.values if v.value is not None)


def test_the_full_set_takes_every_value_from_the_nodal_solution_and_the_exact_curve() -> None:
    prediction = by_hand(Values(), FULL)
    assert prediction.working == ()
    assert {value.how for value in prediction.values} == {How.NODAL}
    assert value_of(prediction, "fL").value == pytest.approx(prediction.mid_band.exact_f_l)
    assert value_of(prediction, "fH").value == pytest.approx(prediction.mid_band.exact_f_h)
    assert any("no closed form" in note for note in prediction.notes)


def test_with_the_impedance_of_coupling_capacitors_the_gain_is_nodal_and_the_bias_still_written() -> None:
    prediction = by_hand(Values(), assumptions_made("paper", drop=["ideal-coupling"]))
    assert value_of(prediction, "ID(M1)").how is How.CLOSED_FORM
    assert value_of(prediction, "Av").how is How.NODAL


def test_supplies_that_exchange_drain_and_source_have_no_closed_form() -> None:
    """The drain-bulk junction conducts before the channel does: it stays in the bias and holds the drain."""
    prediction = by_hand(Values(vdd=-12.0, bulk_at_source=True))
    assert prediction.working == ()
    assert "bulk junctions" in (prediction.kept or "")
    assert (value_of(prediction, "ID(M1)").value or 0.0) < 0.0
    assert -0.8 < (value_of(prediction, "VDS(M1)").value or 0.0) < -0.5


@pytest.mark.parametrize(
    ("v_ov", "v_ds", "region"),
    [
        (0.5, 0.6, Region.SATURATION),
        (0.5, 0.5, Region.SATURATION),
        (0.5, 0.499, Region.TRIODE),
        (0.5, 0.0, Region.TRIODE),
        (0.0, 5.0, Region.CUTOFF),
        (-0.1, 5.0, Region.CUTOFF),
        (0.5, -0.001, Region.REVERSED),
        (0.5, -2e-9, Region.REVERSED),
        (0.5, -5e-10, Region.TRIODE),
        (-0.5, -0.6, Region.REVERSED),
        (-0.5, -0.4, Region.CUTOFF),
    ],
)
def test_regions_part_at_their_edges(v_ov: float, v_ds: float, region: Region) -> None:
    assert region_of(v_ov=v_ov, v_ds=v_ds) is region


# --- what is told beside the values ---


def test_signals_of_a_transistor_are_those_of_the_gain() -> None:
    """Bypassed: the gate-source signal is what the divider leaves; degenerated: 1/(1+gm·RS) and less."""
    bypassed, degenerated = by_hand(Values()).transistors[0], by_hand(Values(cs=None)).transistors[0]
    at_gate = 240e3 / 241e3
    assert bypassed.vgs_per_emf == pytest.approx(at_gate, rel=1e-6)
    a = abs(value_of(by_hand(Values(cs=None)), "Av").value or 0.0)
    current = a / (1 / (1 / 10e3 + 1 / 47e3))
    assert degenerated.id_per_emf == pytest.approx(current, rel=1e-6)
    assert degenerated.vgs_per_emf == pytest.approx(at_gate - current * 2e3, rel=1e-6)
    assert degenerated.vgs_per_emf < 0.3 * bypassed.vgs_per_emf


def test_capacitors_are_named_as_what_they_were_taken_for() -> None:
    notes = by_hand(Values()).notes
    assert "taken as coupling or bypass: CIN, CS, COUT" in notes
    assert "taken as load capacitance: CL" in notes


def test_node_voltages_and_signals_cover_every_node() -> None:
    prediction = by_hand(Values())
    nodes = stage(Values()).nodes
    assert tuple(node for node, _ in prediction.node_voltages) == nodes
    assert tuple(node for node, _ in prediction.node_signals) == nodes
    signals = dict(prediction.node_signals)
    assert signals["sig"] == pytest.approx(1.0)
    assert signals["out"].real == pytest.approx(value_of(prediction, "Av").value, rel=1e-9)
