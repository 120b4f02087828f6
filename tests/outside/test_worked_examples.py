"""Published worked examples as circuits, through the hand engine and the simulator.

The figures lie in ``data/worked_examples.json``, each with author, title, example, page and what was seen of
it. Most were read in an openly published Python companion to the book; two are excerpts of web pages, whose
names say so. What is recalled and was not read stands there as from memory. JFETs stand as depletion
devices where the source's law is the square law, and the data say so.

What each check is:

* published: the hand values against the printed figures, within the tolerance beside them. Where a figure is
  printed with fewer digits, half a unit of its last digit is its tolerance. A printed figure that no right
  analysis meets is named with its reason, and has to be missed;
* independent: the hand values against arithmetic of our own from the same inputs, to its six digits; ngspice
  against the full hand analysis (an exact level-1 solution); without λ, ngspice's Q-point against the paper
  set; with λ, the gap between the two, which has to have the size that λ·VDS predicts: the whole of it where
  gate and source are held, elsewhere what a nodal matrix of our own leaves of it, to first order;
* regression: two figures of one example that ngspice 39 gave when they were noted down.
"""

from __future__ import annotations

import re
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from deckgen.assumptions import assumptions_made
from deckgen.bench.measure import Measurement
from deckgen.circuit.model import display
from deckgen.circuit.reader import read_flat
from deckgen.hand.formulas import device
from deckgen.hand.predict import predict
from deckgen.hand.prediction import Prediction
from deckgen.simulator import Simulator
from tests.outside.first_order import current_shifts
from tests.outside.worked import CIRCUITS, DATA, EXAMPLES, circuitry, parts, read, simulated

WITH_LAMBDA = tuple(name for name in CIRCUITS if "lambda=" in parts(EXAMPLES[name]))
WITHOUT_LAMBDA = tuple(name for name in CIRCUITS if name not in WITH_LAMBDA)
HELD = tuple(name for name in WITH_LAMBDA if EXAMPLES[name]["bias"] in ("fixed gate", "divider"))


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tmp_path_factory.mktemp("examples")


def test_every_example_names_its_source_and_says_what_was_seen() -> None:
    for example in EXAMPLES.values():
        source = DATA["sources"][example["source"]]
        assert {"author", "title", "kind", "seen"} <= source.keys()
        assert example["example"]
        assert example["page"]
        assert 0.0 < example["tolerance"] <= 0.03
        assert not example.get("chosen") or example["why"]
        assert not example.get("remembered") or example["from_memory"]
        if "JFET" in example["what"]:
            assert "a JFET in the source; the same square law" in example["why"]
        if source["kind"] == "web page":
            assert source["address"].startswith("https://")
            assert example["id"].startswith("web page")


def test_what_an_example_reads_is_a_figure_of_its_source() -> None:
    for example in EXAMPLES.values():
        reads = example.get("reads", {}).keys()
        known = {**example["printed"], **example.get("remembered", {}), **example.get("recomputed", {})}
        assert reads <= known.keys()
        assert example.get("targets", {}).keys() <= example["given"].keys()
        for exception in ("half_unit", "misses"):
            assert example.get(exception, {}).keys() <= reads & example["printed"].keys()


def test_the_examples_cover_roles_polarities_regions_and_bias_nets() -> None:
    assert len(CIRCUITS) >= 50
    found = [circuitry(name) for name in CIRCUITS]
    transistors = [transistor for one in found for transistor in one.paper.transistors]
    assert {"common-source", "common-source-degenerated", "follower"} <= {one.role for one in transistors}
    assert {one.region.value for one in transistors} == {"saturation", "triode"}
    assert {card.kind for one in found for card in one.circuit.models} == {"nmos", "pmos"}
    assert sum(len(one.circuit.transistors) > 1 for one in found) >= 12
    assert sum(one.ports is None for one in found) >= 6
    assert {EXAMPLES[name]["bias"] for name in CIRCUITS} == {
        *("fixed gate", "divider", "divider and source resistor", "self-bias", "dual supply"),
        *("current source", "drain feedback", "active load", "mirror", "diode-connected", "gate at source"),
    }
    assert len(WITH_LAMBDA) >= 16
    assert len(HELD) >= 5


def printed(example: dict[str, Any], figure: str) -> object:
    """A figure of the source with its tolerance: relative, or half a unit of its last digit."""
    value = {**example["given"], **example["printed"], **example.get("remembered", {})}[figure]
    half = example.get("half_unit", {}).get(figure)
    if half is None:
        return pytest.approx(value, rel=example["tolerance"], abs=0.0)
    return pytest.approx(value, rel=0.0, abs=half * (1.0 + 1e-9))  # a value half-way is rounded up


@pytest.mark.parametrize("name", CIRCUITS)
def test_hand_values_are_the_printed_figures(name: str) -> None:
    """Published, within the tolerance that stands beside the figures; the regions as well."""
    example, found = EXAMPLES[name], circuitry(name)
    regions = {one.name: one.region.value for one in found.paper.transistors}
    assert regions == dict.fromkeys(regions, "saturation") | example.get("regions", {})
    of_source = {*example["given"], *example["printed"], *example.get("remembered", {})}
    for figure, what in {**example.get("reads", {}), **example.get("targets", {})}.items():
        if figure in of_source:
            met = read(found, what) == printed(example, figure)
            assert met is (figure not in example.get("misses", {})), (figure, what, read(found, what))


@pytest.mark.parametrize("name", [name for name in CIRCUITS if "recomputed" in EXAMPLES[name]])
def test_hand_values_are_our_own_arithmetic_to_six_digits(name: str) -> None:
    """Independent: the source's formulas worked out once, without deckgen, from the source's inputs."""
    example, found = EXAMPLES[name], circuitry(name)
    for figure, value in example["recomputed"].items():
        assert read(found, example["reads"][figure]) == pytest.approx(value, rel=1e-5, abs=0.0), figure


def test_the_printed_saturation_answer_is_void_where_vds_is_below_vov() -> None:
    """Published (Neamen 5.4, with its answer in triode from memory): saturation is assumed, and fails."""
    for name, v_ov, sign in (("Neamen 5.4", 1.7, -1.0), ("Boylestad-Nashelsky 7.1", 6.0, 1.0)):
        example, found = EXAMPLES[name], circuitry(name)
        assumed = device.saturation_current(k=example["chosen"]["k"], v_ov=v_ov)
        v_ds = example["given"]["VDD"] - assumed * example["given"]["RD"]
        void = [key for key in example["printed"] if key.endswith("_if_saturated")]
        for key, value in zip(void, (assumed, v_ds), strict=True):
            assert value == pytest.approx(example["printed"][key], rel=example["tolerance"])
        assert v_ds < v_ov
        assert read(found, "ID(M1)") < 0.98 * assumed
        assert v_ds < sign * read(found, "VDS(M1)") < v_ov


def test_the_largest_drain_resistor_is_the_edge_of_saturation() -> None:
    """Published (Sedra-Smith 4.6): RDmax is the printed one, on both of its sides."""
    example, found = EXAMPLES["Sedra-Smith 4.6"], circuitry("Sedra-Smith 4.6")
    lines = found.netlist.replace(f"rd d 0 {example['chosen']['RD']}", "rd d 0 {}")
    assert "{}" in lines
    edge = example["printed"]["RDmax"]
    for factor, region in (
        (1.0 - example["tolerance"], "saturation"),
        (1.0 + example["tolerance"], "triode"),
    ):
        circuit = read_flat(lines.format(factor * edge))
        prediction = predict(circuit, found.ports, assumptions=assumptions_made("paper"))
        assert prediction.transistors[0].region.value == region


def test_the_driver_of_an_enhancement_load_leaves_saturation_at_the_printed_gate_voltage() -> None:
    """Published (Neamen 6.11): saturation below the printed VGS, triode above."""
    example, found = EXAMPLES["Neamen 6.11"], circuitry("Neamen 6.11")
    lines = found.netlist.replace(f"vsig g 0 dc {example['chosen']['VG']}", "vsig g 0 dc {}")
    assert "{}" in lines
    edge, step = example["printed"]["VGS_driver_at_edge"], 0.005  # half a unit of the last digit
    for gate, region in ((edge - step, "saturation"), (edge + step, "triode")):
        prediction = predict(
            read_flat(lines.format(gate)), found.ports, assumptions=assumptions_made("paper")
        )
        regions = {one.name: one.region.value for one in prediction.transistors}
        assert regions == {"M1": region, "M2": "saturation"}


def test_a_raised_threshold_costs_a_source_resistor_nine_percent() -> None:
    """Published (Sedra-Smith 4.9): -9 % in ID for +0.5 V in the threshold."""
    before, after = (
        read(circuitry(name), "ID(M1)") for name in ("Sedra-Smith 4.9", "Sedra-Smith 4.9 Vt+0.5V")
    )
    assert 100.0 * (after / before - 1.0) == pytest.approx(-9.0, rel=0.012)


def test_the_figures_of_a_graph_that_are_missed_contradict_each_other() -> None:
    """Published (Boylestad-Nashelsky 7.9): ID·RS is not VGS, and the printed VDS is the drain's voltage."""
    example, found = EXAMPLES["Boylestad-Nashelsky 7.9"], circuitry("Boylestad-Nashelsky 7.9")
    given, figures = example["given"], example["printed"]
    assert given["RS"] * figures["ID"] == pytest.approx(4.08)
    assert -figures["VGS"] > 1.05 * 4.08
    assert given["VDD"] - figures["ID"] * given["RD"] == pytest.approx(figures["VDS"])
    assert given["RS"] * read(found, "ID(M1)") == pytest.approx(-read(found, "VGS(M1)"), rel=1e-9)
    assert read(found, "V(d)") == pytest.approx(figures["VDS"], rel=0.05)


def pairs(prediction: Prediction, measurement: Measurement) -> Iterator[tuple[str, float, float]]:
    """Quantities that both sides have; a quantity that only one of them has is a failure."""
    for value in measurement.values:
        hand = prediction.value(value.name)
        assert hand is not None, value
        assert (hand.value is None) == (value.value is None), (hand, value)
        if hand.value is not None and value.value is not None:
            yield value.name, hand.value, value.value


@pytest.mark.parametrize("name", CIRCUITS)
def test_ngspice_gives_the_exact_level_1_solution(name: str, simulator: Simulator, folder: Path) -> None:
    """Independent: the full set leaves nothing out; 0.1 %, band edges 0.2 %, phase 0.2°."""
    found = circuitry(name)
    full = found.predict(assumptions_made("full"))
    measured = simulated(name, simulator, folder)
    names = set()
    for quantity, hand, value in pairs(full, measured):
        names.add(quantity)
        if quantity == "Av.phase":
            assert (value - hand + 180.0) % 360.0 == pytest.approx(180.0, abs=0.2)
            continue
        rel = 2e-3 if quantity in ("fL", "fH") else 1e-3
        assert value == pytest.approx(hand, rel=rel, abs=1e-9), quantity
    devices = [display(device.name) for device in found.circuit.transistors]
    assert {f"{kind}({one})" for kind in ("ID", "VGS", "VDS", "gm") for one in devices} <= names
    assert ({"Av", "Av.phase"} <= names) is (found.ports is not None)
    hand_regions = {transistor.name: transistor.region for transistor in full.transistors}
    assert {transistor.name: transistor.region for transistor in measured.transistors} == hand_regions


@pytest.mark.parametrize("name", WITHOUT_LAMBDA)
def test_without_channel_length_modulation_ngspice_gives_the_hand_q_point(
    name: str, simulator: Simulator, folder: Path
) -> None:
    """Independent: with λ = 0 the paper set leaves nothing out of the bias, and there is no gap."""
    found, measured = circuitry(name), simulated(name, simulator, folder)
    for quantity, hand, value in pairs(found.paper, measured):
        if re.match(r"(ID|VGS|VDS|VTH|gm|V)\(", quantity):
            assert value == pytest.approx(hand, rel=1e-5, abs=1e-9), quantity


def gaps(name: str, simulator: Simulator, folder: Path) -> tuple[dict[str, float], dict[str, float]]:
    """λ·VDS of each transistor, and the relative gaps of ngspice to the paper set."""
    found, measured = circuitry(name), simulated(name, simulator, folder)
    extra = {}
    for one in found.circuit.transistors:
        v_ds = measured.value(f"VDS({display(one.name)})")
        assert v_ds is not None
        assert v_ds.value is not None
        extra[display(one.name)] = found.circuit.model(one.model).get("lambda", 0.0) * abs(v_ds.value)
    apart = {quantity: value / hand - 1.0 for quantity, hand, value in pairs(found.paper, measured) if hand}
    return extra, apart


@pytest.mark.parametrize("name", HELD)
def test_with_gate_and_source_held_the_gap_is_the_whole_of_lambda_times_vds(
    name: str, simulator: Simulator, folder: Path
) -> None:
    """Independent: ID and gm grow by λ·VDS; gds is that of the current at λ = 0, so the gain does too."""
    extra, apart = gaps(name, simulator, folder)
    (share,) = extra.values()
    assert apart["ID(M1)"] == pytest.approx(share, rel=1e-4)
    assert apart["gm(M1)"] == pytest.approx(share, rel=1e-4)
    assert apart["Av"] == pytest.approx(share, rel=0.0, abs=1e-3)


@pytest.mark.parametrize("name", WITH_LAMBDA)
def test_the_gap_to_the_paper_set_is_what_feedback_and_mirrors_leave_of_lambda(
    name: str, simulator: Simulator, folder: Path
) -> None:
    """Independent: λ·VDS·ID pushed through every channel of the λ-free circuit, to first order.

    What is left out is below a quarter of the square of the largest λ·VDS: a mirror whose output stands above
    its diode, the worst of them, gives (1 + a)/(1 + b) - 1, which is a - b less at most a²/4.
    """
    found = circuitry(name)
    extra, apart = gaps(name, simulator, folder)
    paper = {value.name: value.value for value in found.paper.values if value.value is not None}
    predicted = current_shifts(found.circuit, paper, extra)
    second_order = 0.25 * max(extra.values()) ** 2
    for one, shift in predicted.items():
        assert apart[f"ID({one})"] == pytest.approx(shift, rel=0.0, abs=second_order + 1e-6), one
    assert 0.003 < max(predicted.values()) < 0.2


def test_a_noted_run_of_ngspice_comes_back(simulator: Simulator, folder: Path) -> None:
    """Regression: ID and Av of Neamen 6.3 as ngspice 39 gave them, in the digits that were noted."""
    noted = EXAMPLES["Neamen 6.3"]["simulated"]
    measured = simulated("Neamen 6.3", simulator, folder)
    for quantity, rounding in (("ID(M1)", 5e-8), ("Av", 5e-5)):
        found = measured.value(quantity)
        assert found is not None
        assert found.value == pytest.approx(noted[quantity], rel=0.0, abs=rounding)
