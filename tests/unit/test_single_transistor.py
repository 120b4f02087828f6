"""Random networks around one transistor: closed forms give the nodal values, and say what they compute."""

from __future__ import annotations

import math
import re
from collections import Counter
from collections.abc import Callable, Container
from functools import cache
from random import Random

import pytest

from deckgen.assumptions import assumptions_made
from deckgen.circuit.model import Capacitor, Resistor, VoltageSource, display
from deckgen.circuit.region import Region
from deckgen.hand.analysis import analyse
from deckgen.hand.effects import effects_under
from deckgen.hand.nodal import nodal_values
from deckgen.hand.predict import predict
from deckgen.hand.prediction import HandValue, How, Prediction, Step
from deckgen.hand.working.sheet import Sheet
from tests.unit.same_networks import WAYS
from tests.unit.single_networks import KINDS, MID_BAND, Network, network
from tests.unit.step_texts import UnreadableError, definitions, evaluate

PAPER = assumptions_made("paper")
Count = Callable[[int, int], int]

# What the rounding of bias and nodal analysis leaves of each kind where the value itself is nothing.
FLOORS = {"A": 1e-13, "V": 1e-10, "W": 1e-12, "S": 1e-12, "V/V": 1e-9, "deg": 1e-6, "Ω": 1e-6, "Hz": 1e-9}


@cache
def solved(kind: str, number: int) -> tuple[Network, Prediction, dict[str, HandValue]]:
    """A network with its hand analysis, and what nodal analysis alone gives."""
    drawn = network(kind, number)
    prediction = predict(drawn.circuit, drawn.ports, assumptions=PAPER, frequency=MID_BAND)
    analysis = analyse(drawn.circuit, drawn.ports, effects_under(PAPER), MID_BAND)
    return drawn, prediction, {value.name: value for value in nodal_values(analysis)}


def told(drawn: Network, number: int) -> str:
    """The network as a failing test shows it."""
    cards = [
        f"{e.name} {' '.join(e.nodes)} {getattr(e, 'value', getattr(e, 'dc', ''))}"
        for e in drawn.circuit.elements
    ]
    return "\n".join([f"number {number}: {drawn.what}", f"{drawn.ports}", *cards, str(drawn.circuit.models)])


def same(first: HandValue, second: HandValue, relative: float = 1e-9) -> bool:
    """Whether two values agree as far as rounding lets them."""
    if first.value is None or second.value is None:
        return first.value is second.value
    difference = first.value - second.value
    if first.unit == "deg":
        difference = math.remainder(difference, 360.0)
    return abs(difference) <= relative * abs(second.value) + FLOORS[first.unit]


@pytest.mark.parametrize("kind", KINDS)
def test_every_closed_form_gives_what_nodal_analysis_gives(kind: str, count: Count) -> None:
    for number in range(count(45, 720)):
        drawn, prediction, nodal = solved(kind, number)
        wrong = [(v, nodal[v.name]) for v in prediction.values if not same(v, nodal[v.name])]
        assert not wrong, f"{wrong}\n{told(drawn, number)}"


@pytest.mark.parametrize("kind", KINDS)
def test_the_role_follows_from_graph_and_region(kind: str, count: Count) -> None:
    for number in range(count(45, 720)):
        drawn, prediction, _ = solved(kind, number)
        (device,) = prediction.transistors
        assert device.role == drawn.expected_role(device.region), told(drawn, number)


@pytest.mark.parametrize("kind", KINDS)
def test_bias_gain_and_resistances_of_every_role_are_closed_forms(kind: str, count: Count) -> None:
    """A quantity that does not exist has none; nor has a device that conducts backwards."""
    for number in range(count(45, 720)):
        drawn, prediction, _ = solved(kind, number)
        if prediction.kept or prediction.transistors[0].region is Region.REVERSED:
            continue
        known = [v for v in prediction.values if v.value is not None and v.name in drawn.closed]
        nodal = [v.name for v in known if v.how is not How.CLOSED_FORM]
        assert not nodal, f"{nodal}\n{told(drawn, number)}"


FREQUENCIES = {"common source": 0.9, "degenerated": 0.9, "follower": 0.9, "common gate": 0.9, "diode": 0.5,
               "channel": 0.9, "bootstrapped": 0.2}  # fmt: skip
"""Share of the band edges of recognised stages that are closed forms: a capacitor at the source of a diode,
at a tap of a bootstrapped gate or in the middle of a feedback path sees what has none."""


@pytest.mark.parametrize("kind", KINDS)
def test_most_band_edges_are_closed_forms(kind: str) -> None:
    found = Counter(
        value.how
        for number in range(45)
        for drawn, prediction, _ in [solved(kind, number)]
        for value in prediction.values
        if value.name in ("fL", "fH") and value.value is not None and "Av" in drawn.closed
        if prediction.transistors[0].region is not Region.REVERSED
    )
    assert found[How.CLOSED_FORM] >= FREQUENCIES[kind] * found.total()


REGIONS = {
    "common source": {"saturation", "triode", "cut-off"},
    "degenerated": {"saturation", "triode", "cut-off"},
    "follower": {"saturation", "triode", "cut-off"},
    "common gate": {"saturation", "triode"},
    "diode": {"saturation"},
    "channel": {"triode"},
    "bootstrapped": {"saturation"},
}


@pytest.mark.parametrize("kind", KINDS)
def test_the_networks_reach_every_region_of_their_kind_and_both_polarities(kind: str) -> None:
    """The properties above would say little if all networks sat in one place."""
    drawn = [solved(kind, number) for number in range(45)]
    regions = Counter(str(prediction.transistors[0].region) for _, prediction, _ in drawn)
    assert REGIONS[kind] <= set(regions)
    kinds = Counter(each.circuit.models[0].kind for each, _, _ in drawn)
    assert min(kinds["nmos"], kinds["pmos"]) >= 10


# --- what the steps say ---


@pytest.mark.parametrize("kind", KINDS)
def test_every_text_of_a_step_is_clean(kind: str, count: Count) -> None:
    for number in range(count(45, 720)):
        drawn, prediction, _ = solved(kind, number)
        for step in prediction.working:
            assert math.isfinite(step.value), f"{step}\n{told(drawn, number)}"
            for text in (step.symbol, step.formula, step.numbers, step.unit, step.source):
                assert _is_clean(text), f"{step}\n{told(drawn, number)}"


def _is_clean(text: str) -> bool:
    words = re.findall(r"[a-z]+", text.lower())
    signs = re.search(r"[-+·/∥√] ?[-+·/∥] ?|\( ?[·/∥+]|\( ?\)|[-+·/∥] ?\)|, ?,|[-+·/∥=,] ?$|  |^ | $", text)
    balanced = all(text.count(first) == text.count(second) for first, second in ("()", "[]"))
    return bool(text) and balanced and signs is None and not {"nan", "inf", "none"} & set(words)


WITHOUT_EXPRESSION = re.compile(
    r"at ground|fixed by a source|current source in the source|sign of the gain"
    r"|Σ V·I of the sources that deliver|Σ f\(C\), each with the others shorted"
)
BY_NODES = " [R nodal]"
ONLY_IN_NUMBERS = ("VOV0", "VGS0", "V0", "VS0", "VD0", "I", "r")
"""Symbols for what a net has without drain current: their values stand in the numbers."""


def surroundings(drawn: Network, prediction: Prediction) -> dict[str, float]:
    """What a reader knows before the first step: parts, card, rails, voltages at the terminals."""
    circuit = drawn.circuit
    (device,) = circuit.transistors
    card = circuit.models[0]
    voltages = {**dict(prediction.node_voltages), "0": 0.0}
    known = {
        "π": math.pi, "φ": card.get("phi", 0.6), "γ": card.get("gamma", 0.0), "λ": card.get("lambda", 0.0),
        "KP": card.get("kp", 2e-5), "VTO": card.get("vto", 0.0), "W": device.w, "L": device.l,
        "LD": card.get("ld", 0.0), "M": device.m,
    }  # fmt: skip
    for element in circuit.elements:
        if isinstance(element, Resistor | Capacitor):
            known[display(element.name)] = element.value
        elif isinstance(element, VoltageSource):
            known |= {node.upper(): voltages[node] for node in element.nodes}
    d, g, s, b = (voltages[node] for node in device.nodes)
    known |= {f"V({node})": value for node, value in voltages.items()}
    analysis = analyse(circuit, drawn.ports, effects_under(PAPER), MID_BAND)
    for name, _, value in analysis.signal.small.device_capacitors if analysis.signal is not None else ():
        known[name.capitalize().replace("(m1)", "(M1)")] = value
    return known | {"VD": d, "VG": g, "VS": s, "VSB": s - b, "VBS": b - s}


ROUNDING = {"V": 1e-12, "S": 1e-15}
"""What is left of a difference of voltages of some volts, and of a conductance that comes from one."""


def close(found: float, wanted: float, unit: str = "") -> bool:
    """Whether two values agree but for rounding."""
    if math.isinf(wanted):
        return math.isinf(found)
    return abs(found - wanted) <= 1e-7 * abs(wanted) + ROUNDING.get(unit, 1e-24)


def check(step: Step, known: dict[str, float]) -> None:
    """Formula and numbers of a step each give its value."""
    numbers, given = definitions(step.numbers)
    values = {**known, step.symbol.partition("(")[0]: step.value}  # a load line has its result on both sides
    for name, chain in given.items():
        found = [evaluate(part, known) for part in chain.split(" = ")]
        assert all(close(each, found[-1]) for each in found), (name, chain)
        values[name] = found[-1]
    if numbers and step.unit != "deg":
        assert close(evaluate(numbers, known), step.value, step.unit), "numbers"
    if WITHOUT_EXPRESSION.fullmatch(step.formula):
        return
    formula, meanings = definitions(step.formula.replace(BY_NODES, ""))
    waiting = {name: text for name, text in meanings.items() if not _unknown(text, given)}
    values = {name: value for name, value in values.items() if name not in waiting or name in given}
    while waiting:
        ready = {name: value for name, text in waiting.items() if (value := _value(text, values)) is not None}
        assert ready, f"{waiting} are not defined"
        for name, value in ready.items():
            assert name not in given or close(value, values[name]), name
            values[name] = value
            del waiting[name]
    by_nodes = BY_NODES in step.formula and "R" not in given
    if not by_nodes and not _unknown(formula, {**given, **meanings}):
        assert close(evaluate(formula, values), step.value, step.unit), "formula"


def _unknown(text: str, given: Container[str] = ()) -> bool:
    """Whether a text has a symbol whose value stands in the numbers alone, and not under that symbol."""
    names = [name for name in ONLY_IN_NUMBERS if name not in given]
    return any(re.search(rf"(?<![\w(]){name}(?![\w(])", text) for name in names)


def _value(text: str, known: dict[str, float]) -> float | None:
    try:
        return evaluate(text, known)
    except UnreadableError:
        return None


@pytest.mark.parametrize("kind", KINDS)
def test_formula_and_numbers_of_every_step_give_its_value(
    kind: str, count: Count, monkeypatch: pytest.MonkeyPatch
) -> None:
    """All digits are printed, and read back as a reader would."""
    monkeypatch.setattr(Sheet, "number", lambda _, value, unit: f"{value + 0.0:.17g} {unit}".strip())
    monkeypatch.setattr(Sheet, "plain", lambda _, value: f"{value + 0.0:.17g}")
    for number in range(count(25, 400)):
        drawn = network(kind, number)
        prediction = predict(drawn.circuit, drawn.ports, assumptions=PAPER, frequency=MID_BAND)
        known = surroundings(drawn, prediction)
        for step in prediction.working:
            try:
                check(step, known)
            except (AssertionError, UnreadableError) as error:
                raise AssertionError(f"{error}\n{step}\n{told(drawn, number)}") from error
            known[step.symbol] = step.value
            known[step.symbol.partition("(")[0] if step.symbol.endswith("(M1)") else step.symbol] = step.value
            if step.symbol == "gds(M1)":
                known["ro"] = 1.0 / step.value if step.value > 0.0 else math.inf


# --- the same network drawn otherwise ---


@pytest.mark.parametrize("way", WAYS)
@pytest.mark.parametrize("kind", KINDS)
def test_a_network_drawn_otherwise_has_the_same_role_and_values(kind: str, way: str, count: Count) -> None:
    """So have all its quantities the same origin; of node voltages only the terminals' are closed forms."""
    for number in range(count(6, 100)):
        drawn, before, _ = solved(kind, number)
        other = WAYS[way](drawn.circuit, drawn.ports, Random(f"{kind} {number}"))
        after = predict(other.circuit, other.ports, assumptions=PAPER, frequency=MID_BAND)
        where = f"{way}, {told(drawn, number)}"
        assert _facts(after) == _facts(before), where
        for value in before.values:
            name = value.name
            if name.startswith("V("):
                name = f"V({other.nodes.get(name[2:-1], name[2:-1])})"
            found = after.value(name)
            assert found is not None, name
            assert same(found, value), f"{found} {value}\n{where}"
            assert found.how is value.how or name.startswith("V("), f"{found} {value}\n{where}"


def _facts(prediction: Prediction) -> tuple[str, Region]:
    (device,) = prediction.transistors
    return device.role, device.region
