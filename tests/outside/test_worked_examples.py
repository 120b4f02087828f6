"""Published worked examples of common source and follower, through the hand engine and the simulator.

The figures lie in ``data/worked_examples.json``, each with author, title, example, page and what was seen of
it. Most were read in an openly published Python companion to the book; two are excerpts of web pages, whose
names say so. What is recalled and was not read stands there as from memory.

What each check is:

* published: the hand values against the printed figures, within the tolerance beside them;
* independent: the hand values against arithmetic of our own from the same inputs, to its six digits; ngspice
  against the full hand analysis (an exact level-1 solution); and the gap between ngspice and the paper set,
  which has to have the size that λ·VDS predicts;
* regression: two figures of one example that ngspice 39 gave when they were noted down.
"""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

import pytest

from deckgen.assumptions import assumptions_made
from deckgen.bench.measure import Measurement
from deckgen.circuit.reader import read_flat
from deckgen.hand.formulas import device
from deckgen.hand.predict import predict
from deckgen.hand.prediction import Prediction
from deckgen.simulator import Simulator
from tests.outside.worked import CIRCUITS, DATA, EXAMPLES, circuitry, figures, plain, read, simulated

WITH_LAMBDA = tuple(name for name in CIRCUITS if figures(EXAMPLES[name]).get("lam", 0.0) > 0.0)
WITHOUT_LAMBDA = tuple(name for name in CIRCUITS if name not in WITH_LAMBDA)


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
        known = {**example["printed"], **example.get("remembered", {}), **example.get("recomputed", {})}
        assert example.get("reads", {}).keys() <= known.keys()
        assert example.get("targets", {}).keys() <= example["given"].keys()
        if source["kind"] == "web page":
            assert source["address"].startswith("https://")
            assert example["id"].startswith("web page")


def test_the_examples_cover_roles_polarities_and_regions() -> None:
    assert len(CIRCUITS) >= 20
    found = [circuitry(name) for name in CIRCUITS]
    roles = {transistor.role for one in found for transistor in one.paper.transistors}
    assert {"common-source", "common-source-degenerated", "follower"} <= roles
    assert {one.card.kind for one in found} == {"nmos", "pmos"}
    regions = {transistor.region.value for one in found for transistor in one.paper.transistors}
    assert regions == {"saturation", "triode"}
    assert len(WITH_LAMBDA) >= 6


@pytest.mark.parametrize("name", CIRCUITS)
def test_hand_values_are_the_printed_figures(name: str) -> None:
    """Published, within the tolerance that stands beside the figures; the region as well."""
    example, found = EXAMPLES[name], circuitry(name)
    (transistor,) = found.paper.transistors
    assert transistor.region.value == example.get("region", "saturation")
    right = {**example["given"], **example["printed"], **example.get("remembered", {})}
    for figure, what in {**example["reads"], **example.get("targets", {})}.items():
        if figure in right:
            assert read(found, what) == pytest.approx(right[figure], rel=example["tolerance"], abs=0.0), what


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


def test_a_raised_threshold_costs_a_source_resistor_nine_percent() -> None:
    """Published (Sedra-Smith 4.9): -9 % in ID for +0.5 V in the threshold."""
    before, after = (
        read(circuitry(name), "ID(M1)") for name in ("Sedra-Smith 4.9", "Sedra-Smith 4.9 Vt+0.5V")
    )
    assert 100.0 * (after / before - 1.0) == pytest.approx(-9.0, rel=0.012)


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
    full = circuitry(name).predict(assumptions_made("full"))
    measured = simulated(name, simulator, folder)
    names = set()
    for quantity, hand, found in pairs(full, measured):
        names.add(quantity)
        if quantity == "Av.phase":
            assert (found - hand + 180.0) % 360.0 == pytest.approx(180.0, abs=0.2)
            continue
        rel = 2e-3 if quantity in ("fL", "fH") else 1e-3
        assert found == pytest.approx(hand, rel=rel, abs=1e-9), quantity
    assert {"ID(M1)", "VGS(M1)", "VDS(M1)", "gm(M1)", "Av", "Av.phase"} <= names
    (hand_region,) = (transistor.region for transistor in full.transistors)
    (found_region,) = (transistor.region for transistor in measured.transistors)
    assert found_region is hand_region


@pytest.mark.parametrize("name", WITHOUT_LAMBDA)
def test_without_channel_length_modulation_ngspice_gives_the_hand_q_point(
    name: str, simulator: Simulator, folder: Path
) -> None:
    """Independent: with λ = 0 the paper set leaves nothing out of the bias, and there is no gap."""
    measured = simulated(name, simulator, folder)
    for quantity in ("ID(M1)", "VGS(M1)", "VDS(M1)", "VTH(M1)", "gm(M1)"):
        found = measured.value(quantity)
        assert found is not None
        assert found.value == pytest.approx(plain(circuitry(name).paper, quantity), rel=1e-5, abs=1e-9)


@pytest.mark.parametrize("name", WITH_LAMBDA)
def test_the_gap_to_the_paper_set_has_the_size_that_lambda_predicts(
    name: str, simulator: Simulator, folder: Path
) -> None:
    """Independent: 1 + λ·VDS in ID and gm with VGS fixed; with RS the first-order λ·VDS/(1 + gm·RS)."""
    found, measured = circuitry(name), simulated(name, simulator, folder)
    value = {one.name: one.value for one in measured.values}
    lam, v_ds = found.card.get("lambda", 0.0), value["VDS(M1)"]
    ratio = {
        quantity: value[quantity] / plain(found.paper, quantity) for quantity in ("ID(M1)", "gm(M1)", "Av")
    }
    source = [e for e in found.circuit.elements if e.name == "rs"]
    if not source:
        assert ratio["ID(M1)"] == pytest.approx(1.0 + lam * v_ds, rel=1e-6)
        assert ratio["gm(M1)"] == pytest.approx(1.0 + lam * v_ds, rel=1e-6)
        # gds is that of the current at λ = 0 on both sides: the gain grows as gm does.
        assert ratio["Av"] == pytest.approx(1.0 + lam * v_ds, rel=1e-3)
    else:
        feedback = 1.0 + plain(found.paper, "gm(M1)") * source[0].value
        predicted = lam * v_ds / feedback
        assert ratio["ID(M1)"] - 1.0 == pytest.approx(predicted, rel=lam * v_ds)
    assert 0.003 < ratio["ID(M1)"] - 1.0 < 0.2


def test_a_noted_run_of_ngspice_comes_back(simulator: Simulator, folder: Path) -> None:
    """Regression: ID and Av of Neamen 6.3 as ngspice 39 gave them, in the digits that were noted."""
    noted = EXAMPLES["Neamen 6.3"]["simulated"]
    measured = simulated("Neamen 6.3", simulator, folder)
    for quantity, rounding in (("ID(M1)", 5e-8), ("Av", 5e-5)):
        found = measured.value(quantity)
        assert found is not None
        assert found.value == pytest.approx(noted[quantity], rel=0.0, abs=rounding)
