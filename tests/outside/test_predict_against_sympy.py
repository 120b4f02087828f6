"""Hand values of whole netlists, of every role, against nodal equations that sympy solves exactly.

Every check here is independent: random stages (``random_stages.py``) go through ``predict``; the same stage
at mid-band, with the gm, gmb and gds that the hand analysis arrived at, is drawn from its elements once more
below, Kirchhoff's current law is written down for it (``kirchhoff.py``), and sympy (BSD licence) solves it
in rational numbers, without rounding. The same goes for the resistance that each capacitance sees. Nothing
is pinned, and nothing of deckgen's reduction, working or nodal matrix takes part in the reference.
"""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass
from typing import Any

import pytest
import sympy as sp

from deckgen.assumptions import assumptions_made
from deckgen.circuit.gain import INFINITE_RESISTANCE
from deckgen.circuit.model import Capacitor, Circuit, Resistor, VoltageSource
from deckgen.hand import analysis
from deckgen.hand.effects import effects_under
from deckgen.hand.predict import predict
from deckgen.hand.prediction import How, Prediction
from tests.outside.kirchhoff import Device, Network
from tests.outside.random_stages import COUPLING, KINDS, Stage, stages

CLOSE = 1e-9
PAPER = assumptions_made("paper")
FREQUENCY = 1e3


def exact(value: float) -> sp.Rational:
    return sp.Rational(value)


@dataclass(frozen=True)
class MidBand:
    """A stage's network at mid-band, nodes joined where sources and capacitors are shorts."""

    network: Network
    names: dict[str, str]

    def of(self, node: str) -> str:
        return self.names.get(node, node)


def joined(circuit: Circuit, shorts: Iterable[tuple[str, str]]) -> dict[str, str]:
    names = {node: node for node in (*circuit.nodes, "0")}
    for first, second in shorts:
        keep, give = sorted((names[first], names[second]), key=lambda node: node != "0")
        names = {node: keep if name == give else name for node, name in names.items()}
    return names


def mid_band(
    stage: Stage, hand: Prediction, *, open_too: tuple[str, ...] = (), silent: bool = False
) -> MidBand:
    """Coupling capacitors and sources shorted, but for the EMF unless it is ``silent``; the rest open."""
    circuit = stage.circuit
    shorts = [
        element.nodes
        for element in circuit.elements
        if (isinstance(element, VoltageSource) and (silent or element.name != stage.ports.input))
        or (isinstance(element, Capacitor) and element.value >= COUPLING and element.name not in open_too)
    ]
    names = joined(circuit, shorts)
    (mosfet,) = circuit.transistors
    at = dict(zip(("drain", "gate", "source", "bulk"), (names[node] for node in mosfet.nodes), strict=True))
    conductances = {name: exact(number(hand, f"{name}(M1)")) for name in ("gm", "gmb", "gds")}
    resistors = tuple(
        (names[each.nodes[0]], names[each.nodes[1]], exact(each.value))
        for each in circuit.elements
        if isinstance(each, Resistor)
    )
    return MidBand(Network(Device(**at, **conductances), resistors), names)


def number(hand: Prediction, name: str) -> float:
    value = hand.value(name)
    assert value is not None, name
    assert value.value is not None, value
    return value.value


def emf_node(stage: Stage) -> str:
    source = stage.circuit.element(stage.ports.input)
    return next(node for node in source.nodes if node != "0")


def ends(stage: Stage, name: str) -> tuple[str, str]:
    first, second = stage.circuit.element(name).nodes
    return first, second


def expected(stage: Stage, hand: Prediction) -> dict[str, Any]:
    """Av, the transistor's own gain A, Rin and Rout; a resistance may be infinite (``zoo``)."""
    net, emf = mid_band(stage, hand), emf_node(stage)
    volts = net.network.solved(held={net.of(emf): sp.Integer(1)})
    (mosfet,) = stage.circuit.transistors
    at = {
        name: volts[net.of(node)]
        for name, node in zip(("drain", "gate", "source"), mosfet.nodes, strict=False)
    }
    av = volts[net.of(stage.ports.output)]
    input_side, seen_at = net.network, net.of(emf)
    if stage.ports.source_resistance is not None:
        pair = tuple(net.of(node) for node in ends(stage, stage.ports.source_resistance))
        input_side = input_side.without((pair[0], pair[1]))
        seen_at = next(node for node in pair if node != net.of(emf))
    out = net.network.resistance(net.of(stage.ports.output), held={net.of(emf): sp.Integer(0)})
    load = stage.ports.load
    beside = 0 if load is None else 1 / exact(stage.circuit.element(load).value)
    return {
        "Av": av,
        "A": at[stage.leave] / at[stage.entry],
        "Rin": input_side.resistance(seen_at),
        "Rout": 1 / (1 / out - beside),
    }


def seen(stage: Stage, hand: Prediction, nodes: tuple[str, str], *names: str) -> Any:
    """The resistance beside a capacitance, the EMF silent."""
    net = mid_band(stage, hand, open_too=names, silent=True)
    first, second = (net.of(node) for node in nodes)
    return net.network.resistance(*((second, first) if first == "0" else (first, second)))


ROLES = {
    "common source": {"common-source", "common-source-degenerated"},
    "drain feedback": {"common-source", "common-source-degenerated"},
    "follower": {"follower"},
    "common gate": {"common-gate"},
    "diode": {"diode-connected"},
    "hanging diode": {"diode-connected"},
    "channel, drain to drain": {"resistive"},
    "channel, source to source": {"resistive"},
    "channel, drain to source": {"resistive"},
    "channel, source to drain": {"resistive"},
}
# No closed form is written for what capacitances see there; their band edges are nodal.
NODAL_EDGES = {"drain feedback", "diode"}


def held_output(stage: Stage) -> bool:
    """Whether the EMF itself holds the node where the signal enters and leaves: a stage without a role."""
    between = any(element.name.startswith(("rsig", "rx")) for element in stage.circuit.elements)
    return stage.entry == stage.leave and not between


def usable(stage: Stage, hand: Prediction) -> bool:
    """Whether the stage came out in its region, with λ as the assumptions say, and 1 kHz in the pass-band."""
    (device,) = hand.transistors
    region = "triode" if stage.kind.startswith("channel") else "saturation"
    assert hand.mid_band is not None
    return device.region.value == region and hand.kept is None and hand.mid_band.outside is None


def drawn(seed: int, each: int, assumptions: tuple[str, ...]) -> Iterator[tuple[Stage, Prediction]]:
    """So many usable stages of every kind, with their predictions."""
    found: Counter[str] = Counter()
    for tried, stage in enumerate(stages(seed)):
        if len(found) == len(KINDS) and min(found.values()) >= each:
            return
        assert tried < 20 * each * len(KINDS), found
        if found[stage.kind] >= each:
            continue
        hand = predict(stage.circuit, stage.ports, assumptions=assumptions, frequency=FREQUENCY)
        if usable(stage, hand):
            found[stage.kind] += 1
            yield stage, hand


@pytest.mark.parametrize("how", [How.CLOSED_FORM, How.NODAL])
def test_gain_and_resistances_of_random_stages_are_sympys(how: How, count: Callable[[int, int], int]) -> None:
    """Closed forms are made with λ out of the bias; with λ in it there are none, and nodal values stand."""
    assert PAPER[0] == "no-channel-length-modulation"
    assumptions = PAPER if how is How.CLOSED_FORM else PAPER[1:]
    for stage, hand in drawn(7, count(8, 300), assumptions):
        (device,) = hand.transistors
        assert device.role in ({"unrecognised"} if held_output(stage) else ROLES[stage.kind]), stage
        for name, right in expected(stage, hand).items():
            if name == "A":
                continue
            found = hand.value(name)
            assert found is not None
            if not right.is_finite or abs(right) >= INFINITE_RESISTANCE:
                assert found.value is None, (name, stage)
                continue
            assert found.value == pytest.approx(float(right), rel=CLOSE, abs=0.0), (name, stage)
            if not held_output(stage):
                assert found.how is how, (name, stage)


def test_gain_of_the_transistor_itself_is_sympys(count: Callable[[int, int], int]) -> None:
    """The step A of the working: from the terminal where the signal enters to that where it leaves."""
    for stage, hand in drawn(8, count(8, 300), PAPER):
        steps = [step.value for step in hand.working if step.symbol == "A"]
        right = [] if held_output(stage) else [float(expected(stage, hand)["A"])]
        assert steps == pytest.approx(right, rel=CLOSE, abs=0.0), stage


def capacitances(stage: Stage, hand: Prediction) -> dict[str, tuple[tuple[str, str], float]]:
    """Nodes and value of each capacitance, by the name that the working gives it."""
    path = analysis.analyse(stage.circuit, stage.ports, effects_under(PAPER), FREQUENCY).signal
    assert path is not None
    found = {
        f"{name[0].upper()}{name[1:].replace('m1', 'M1')}": (nodes, value)
        for name, nodes, value in path.small.device_capacitors
    }
    # Explicit ones that mid-band makes parallel are one, as the working names it: CL+CL1.
    for names in (constant.name.split("+") for constant in hand.time_constants):
        parts = [stage.circuit.element(name) for name in names if "(" not in name]
        if parts:
            found["+".join(names)] = (parts[0].nodes, math.fsum(part.value for part in parts))
    explicit = {each.name.upper() for each in stage.circuit.elements if isinstance(each, Capacitor)}
    assert explicit == {name for names in found for name in names.split("+") if "(" not in name}
    return found


def test_time_constants_and_band_edges_of_random_stages_are_sympys(count: Callable[[int, int], int]) -> None:
    """What each capacitance sees; their sums are the hand values of fL and fH."""
    for stage, hand in drawn(9, count(8, 300), PAPER):
        steps = {step.symbol: step.value for step in hand.working}
        if held_output(stage):
            assert "fH" not in steps
            continue
        poles, taus = [], []
        for name, (nodes, farad) in capacitances(stage, hand).items():
            right = float(seen(stage, hand, nodes, *name.lower().split("+")))
            if farad >= COUPLING:
                poles.append(1.0 / (2.0 * math.pi * right * farad))
                assert steps[f"f({name})"] == pytest.approx(poles[-1], rel=CLOSE, abs=0.0), (name, stage)
            elif right > 0.0:
                taus.append(right * farad)
                assert steps[f"τ({name})"] == pytest.approx(taus[-1], rel=CLOSE, abs=0.0), (name, stage)
        edges = {"fL": math.fsum(poles), "fH": 1.0 / (2.0 * math.pi * math.fsum(taus))}
        for name, right in edges.items():
            if not right > 0.0:
                continue  # no capacitor couples
            assert steps[name] == pytest.approx(right, rel=CLOSE, abs=0.0), (name, stage)
            # A capacitor between any two nodes may see what no closed form is written for.
            plain = not {"cl0", "cl1"} & {element.name for element in stage.circuit.elements}
            if stage.kind not in NODAL_EDGES and (plain or name == "fL"):
                found = hand.value(name)
                assert found is not None
                assert found.how is How.CLOSED_FORM, (name, stage)
