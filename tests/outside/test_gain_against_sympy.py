"""Gain and resistances of both roles against nodal equations that sympy solves symbolically.

Every check here is independent: Kirchhoff's current law is written below for the small-signal circuit of
one transistor (gm, gmb, ro) between RSIG, R1, R2, RD, RS and RL, and sympy (BSD licence) solves it. The
published closed forms (P. R. Gray, P. J. Hurst, S. H. Lewis, R. G. Meyer, Analysis and Design of Analog
Integrated Circuits, ch. 3, chapter from memory; time constants after P. E. Gray, C. L. Searle, Electronic
Principles, Wiley 1969) are shown to be the same rational functions, then the functions of
``deckgen.hand.formulas`` and the hand values of ``predict`` are held to sympy's solution in numbers.
Nothing is pinned.
"""

from __future__ import annotations

import math
import random
from collections import Counter
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from functools import cache
from typing import Any

import pytest
import sympy as sp

from deckgen.assumptions import assumptions_made
from deckgen.circuit.model import Capacitor, Circuit, Element, ModelCard, Mosfet, Resistor, VoltageSource
from deckgen.circuit.ports import Ports
from deckgen.circuit.region import Region
from deckgen.hand.formulas import frequency, gain
from deckgen.hand.predict import predict
from deckgen.hand.prediction import How, Prediction

CLOSE = 1e-11
ROLES = ("common-source", "follower")
BULKS = ("rail", "source")

# The load counts as a conductance, so that it may be absent; the others may be shorts.
GM, GMB, RO, RSIG, R1, R2, RD, RS = sp.symbols("gm gmb ro RSIG R1 R2 RD RS", positive=True)
GL = sp.Symbol("GL", nonnegative=True)
SYMBOLS = (GM, GMB, RO, RSIG, R1, R2, RD, RS, GL)
NAMES = tuple(str(symbol) for symbol in SYMBOLS)

V_G, V_D, V_S = sp.symbols("vg vd vs")
EMF, TEST = sp.symbols("emf test")


@dataclass(frozen=True)
class Solved:
    """Av, Rin and Rout of one role, as sympy's rational functions of ``SYMBOLS``."""

    av: sp.Expr
    r_in: sp.Expr
    r_out: sp.Expr


def channel_current(bulk: str) -> sp.Expr:
    v_b = V_S if bulk == "source" else 0
    return GM * (V_G - V_S) + GMB * (v_b - V_S) + (V_D - V_S) / RO


@cache
def solved(role: str, bulk: str) -> Solved:
    """Solve the stage twice: driven by the EMF, and by a test current into the output without load."""
    i_d = channel_current(bulk)
    gate = (V_G - EMF) / RSIG + V_G / R1 + V_G / R2
    if role == "common-source":
        out, fixed = V_D, {}
        nodes = [gate, i_d + V_D / RD + GL * V_D - TEST, V_S / RS - i_d]
    else:
        out, fixed = V_S, {V_D: 0}
        nodes = [gate, V_S / RS + GL * V_S - i_d - TEST]
    unknowns = [v for v in (V_G, V_D, V_S) if v not in fixed]
    found = sp.solve([node.subs(fixed) for node in nodes], unknowns, dict=True)[0]
    v_g, v_out = found[V_G].subs(TEST, 0), found[out]
    return Solved(
        av=sp.cancel(v_out.subs(TEST, 0) / EMF),
        r_in=sp.cancel(v_g / ((EMF - v_g) / RSIG)),
        r_out=sp.cancel(v_out.subs({EMF: 0, GL: 0}) / TEST),
    )


@cache
def numbers(role: str, bulk: str) -> tuple[Callable[..., float], ...]:
    """The same as functions of plain numbers, in the order Av, Rin, Rout."""
    answer = solved(role, bulk)
    return tuple(sp.lambdify(SYMBOLS, e, "math") for e in (answer.av, answer.r_in, answer.r_out))


def same(one: sp.Expr, other: sp.Expr) -> bool:
    return bool(sp.simplify(one - other) == 0)


def shunt(*resistances: Any) -> Any:
    return 1 / sum(1 / resistance for resistance in resistances)


@pytest.mark.parametrize("bulk", BULKS)
def test_common_source_closed_forms_are_the_nodal_solution(bulk: str) -> None:
    answer = solved("common-source", bulk)
    g_mb = GMB if bulk == "rail" else sp.Integer(0)
    r_drain = 1 / (1 / RD + GL)
    into_drain = RO + RS + (GM + g_mb) * RO * RS
    r_in = shunt(R1, R2)
    av = -GM * r_drain / (1 + (GM + g_mb) * RS + (r_drain + RS) / RO) * r_in / (r_in + RSIG)
    assert same(answer.av, av)
    assert same(answer.r_in, r_in)
    assert same(answer.r_out, shunt(RD, into_drain))
    bypassed = sp.limit(answer.av, RS, 0)
    assert same(bypassed, -GM * shunt(RO, r_drain) * r_in / (r_in + RSIG))


@pytest.mark.parametrize("bulk", BULKS)
def test_follower_closed_forms_are_the_nodal_solution(bulk: str) -> None:
    answer = solved("follower", bulk)
    g_mb = GMB if bulk == "rail" else sp.Integer(0)
    r_source = 1 / (1 / RS + GL)
    r_in = shunt(R1, R2)
    av = GM * r_source / (1 + (GM + g_mb) * r_source + r_source / RO) * r_in / (r_in + RSIG)
    assert same(answer.av, av)
    assert same(answer.r_in, r_in)
    assert same(answer.r_out, shunt(RS, 1 / (GM + g_mb + 1 / RO)))


@cache
def into_source() -> sp.Expr:
    """Resistance into the source, gate at ground, RD from the drain to ground."""
    i_d = channel_current("rail").subs(V_G, 0)
    found = sp.solve([i_d + V_D / RD, -i_d - TEST], [V_D, V_S], dict=True)[0]
    return sp.cancel(found[V_S] / TEST)


@cache
def seen_by(second: str) -> sp.Expr:
    """Resistance between gate and another terminal without ro and gmb; RSIG stands for RG."""
    i_d = GM * (V_G - V_S)
    currents = {"gate": V_G / RSIG - TEST, "drain": i_d + V_D / RD, "source": V_S / RS - i_d}
    currents[second] += TEST
    found = sp.solve(list(currents.values()), [V_G, V_D, V_S], dict=True)[0]
    return sp.cancel((found[V_G] - found[{"drain": V_D, "source": V_S}[second]]) / TEST)


def test_resistances_into_a_terminal_are_the_nodal_solution() -> None:
    assert same(into_source(), (1 + RD / RO) / (GM + GMB + 1 / RO))
    assert same(into_source(), (RO + RD) / (1 + (GM + GMB) * RO))
    assert same(seen_by("source"), (RSIG + RS) / (1 + GM * RS))
    assert same(seen_by("drain"), RSIG + RD + GM * RSIG * RD / (1 + GM * RS))


def random_values(draw: random.Random) -> dict[str, float]:
    low, high = math.log(10.0), math.log(1e7)
    values = {name: math.exp(draw.uniform(low, high)) for name in ("RSIG", "R1", "R2", "RD", "RS", "ro")}
    values["gm"] = math.exp(draw.uniform(math.log(1e-6), math.log(0.1)))
    values["gmb"] = values["gm"] * draw.uniform(0.0, 0.5)
    values["GL"] = draw.choice([0.0, 1.0 / math.exp(draw.uniform(low, high))])
    return values


def test_gain_functions_give_the_numbers_of_the_nodal_solution(count: Callable[[int, int], int]) -> None:
    draw = random.Random(4)
    source_number = sp.lambdify(SYMBOLS, into_source(), "math")
    for _ in range(count(200, 5000)):
        v = random_values(draw)
        arguments = [v[name] for name in NAMES]
        device = {"gm": v["gm"], "gmb": v["gmb"], "ro": v["ro"]}
        r_in = gain.parallel(v["R1"], v["R2"])
        divider = r_in / (r_in + v["RSIG"])
        load = 1.0 / v["GL"] if v["GL"] > 0.0 else math.inf
        av, r_in_found, r_out = (f(*arguments) for f in numbers("common-source", "rail"))
        drain = gain.parallel(v["RD"], load)
        own = gain.common_source_gain(**device, r_d=drain, r_s=v["RS"])
        assert own * divider == pytest.approx(av, rel=CLOSE, abs=0.0)
        assert r_in == pytest.approx(r_in_found, rel=CLOSE, abs=0.0)
        own = gain.parallel(v["RD"], gain.drain_resistance(**device, r_s=v["RS"]))
        assert own == pytest.approx(r_out, rel=CLOSE, abs=0.0)
        av, _, r_out = (f(*arguments) for f in numbers("follower", "rail"))
        own = gain.follower_gain(**device, r_s=gain.parallel(v["RS"], load), r_d=0.0)
        assert own * divider == pytest.approx(av, rel=CLOSE, abs=0.0)
        own = gain.parallel(v["RS"], gain.source_resistance(**device, r_d=0.0))
        assert own == pytest.approx(r_out, rel=CLOSE, abs=0.0)
        own = gain.source_resistance(**device, r_d=v["RD"])
        assert own == pytest.approx(source_number(*arguments), rel=CLOSE, abs=0.0)


def test_infinite_ro_gives_the_limit_of_the_nodal_solution() -> None:
    draw = random.Random(5)
    limits = {role: sp.limit(solved(role, "rail").av, RO, sp.oo) for role in ROLES}
    for _ in range(20):
        v = random_values(draw) | {"GL": 0.0, "RSIG": 0.0}
        substitutions = {symbol: v[str(symbol)] for symbol in SYMBOLS}
        device = {"gm": v["gm"], "gmb": v["gmb"], "ro": math.inf}
        own = gain.common_source_gain(**device, r_d=v["RD"], r_s=v["RS"])
        assert own == pytest.approx(float(limits["common-source"].subs(substitutions)), rel=CLOSE)
        own = gain.follower_gain(**device, r_s=v["RS"], r_d=0.0)
        assert own == pytest.approx(float(limits["follower"].subs(substitutions)), rel=CLOSE)


def test_time_constant_resistances_give_the_numbers_of_the_nodal_solution() -> None:
    draw = random.Random(6)
    gate_source = sp.lambdify(SYMBOLS, seen_by("source"), "math")
    gate_drain = sp.lambdify(SYMBOLS, seen_by("drain"), "math")
    for _ in range(200):
        v = random_values(draw)
        arguments = [v[name] for name in NAMES]
        own = frequency.gate_source_resistance(gm=v["gm"], r_g=v["RSIG"], r_s=v["RS"])
        assert own == pytest.approx(gate_source(*arguments), rel=CLOSE, abs=0.0)
        own = frequency.gate_drain_resistance(gm=v["gm"], r_g=v["RSIG"], r_d=v["RD"], r_s=v["RS"])
        assert own == pytest.approx(gate_drain(*arguments), rel=CLOSE, abs=0.0)


@dataclass(frozen=True)
class Stage:
    """A random stage: its role, where the bulk is, whether RS is bypassed, its parts (absent: 0)."""

    role: str
    polarity: str
    bulk: str
    bypassed: bool
    parts: Mapping[str, float]
    card: Mapping[str, float]
    v_dd: float


def stages(seed: int) -> Iterator[Stage]:
    draw = random.Random(seed)

    def spread(low: float, high: float) -> float:
        return math.exp(draw.uniform(math.log(low), math.log(high)))

    while True:
        role, polarity = draw.choice(ROLES), draw.choice("np")
        parts = {
            "RSIG": draw.choice([0.0, spread(50.0, 1e6)]), "R1": spread(1e4, 1e7), "R2": spread(1e4, 1e7),
            "RD": spread(1e2, 1e5), "RS": spread(1e2, 1e5), "RL": draw.choice([0.0, spread(1e2, 1e6)]),
        }  # fmt: skip
        if role == "common-source" and draw.random() < 0.2:
            parts["RS"] = 0.0
        card = {
            "vto": draw.uniform(0.3, 1.5) * (1 if polarity == "n" else -1), "kp": spread(1e-5, 1e-2),
            "lambda": draw.choice([0.0, draw.uniform(0.001, 0.1)]), "gamma": draw.uniform(0.0, 0.9),
            "phi": draw.uniform(0.5, 0.8),
        }  # fmt: skip
        bypassed = parts["RS"] > 0.0 and role == "common-source" and draw.random() < 0.4
        yield Stage(role, polarity, draw.choice(BULKS), bypassed, parts, card, draw.uniform(3.0, 30.0))


def circuit_of(stage: Stage) -> tuple[Circuit, Ports]:
    p, n, follower = stage.parts, stage.polarity == "n", stage.role == "follower"
    rail, far = ("0", "vdd") if n else ("vdd", "0")
    drain = far if follower else "d"
    source = "s" if p["RS"] > 0.0 else rail
    signal, load = source if follower else drain, p["RL"] > 0.0
    output = "out" if load else signal
    elements: list[Element] = [
        VoltageSource("vdd", ("vdd", "0"), stage.v_dd),
        VoltageSource("vsig", ("sig" if p["RSIG"] > 0.0 else "in", "0"), 0.0, 1.0),
        Capacitor("cin", ("in", "g"), 1e-3),
        Resistor("r1", ("vdd", "g"), p["R1"]),
        Resistor("r2", ("g", "0"), p["R2"]),
        Mosfet("m1", (drain, "g", source, source if stage.bulk == "source" else rail), "dut", 1e-5, 1e-5),
    ]
    if p["RSIG"] > 0.0:
        elements.append(Resistor("rsig", ("sig", "in"), p["RSIG"]))
    if not follower:
        elements.append(Resistor("rd", (far, drain), p["RD"]))
    if p["RS"] > 0.0:
        elements.append(Resistor("rs", (source, rail), p["RS"]))
    if stage.bypassed:
        elements.append(Capacitor("cs", (source, rail), 1e-1))
    if load:
        elements += [Capacitor("cout", (signal, "out"), 1e-1), Resistor("rl", ("out", "0"), p["RL"])]
    card = ModelCard("dut", "nmos" if n else "pmos", tuple(stage.card.items()))
    ports = Ports("vsig", output, "rsig" if p["RSIG"] > 0.0 else None, "rl" if load else None)
    return Circuit("a stage", tuple(elements), (card,)), ports


def expected(stage: Stage, prediction: Prediction) -> dict[str, float]:
    """Sympy's solution with the gm, gds and gmb that the hand analysis itself arrived at."""
    value = {hand.name: hand.value for hand in prediction.values}
    p = stage.parts
    g_ds = value["gds(M1)"]
    given = {
        "gm": value["gm(M1)"], "gmb": value["gmb(M1)"], "ro": 1.0 / g_ds if g_ds else 1e30, "RSIG": p["RSIG"],
        "R1": p["R1"], "R2": p["R2"], "RD": p["RD"], "RS": 0.0 if stage.bypassed else p["RS"],
        "GL": 1.0 / p["RL"] if p["RL"] > 0.0 else 0.0,
    }  # fmt: skip
    found = (function(*(given[name] for name in NAMES)) for function in numbers(stage.role, stage.bulk))
    return dict(zip(("Av", "Rin", "Rout"), found, strict=True))


@pytest.mark.parametrize("how", [How.CLOSED_FORM, How.NODAL])
def test_hand_values_of_random_stages_are_sympys(how: How, count: Callable[[int, int], int]) -> None:
    """Closed forms are made with λ out of the bias; with λ in it there are none, and nodal values stand."""
    paper = assumptions_made("paper")
    assumptions = paper if how is How.CLOSED_FORM else paper[1:]
    assert paper[0] == "no-channel-length-modulation"
    seen: Counter[str] = Counter()
    draw = stages(seed=7)
    wanted = count(80, 2000)
    while seen.total() < wanted:
        stage = next(draw)
        circuit, ports = circuit_of(stage)
        prediction = predict(circuit, ports, assumptions=assumptions, frequency=1e3)
        (device,) = prediction.transistors
        if device.region is not Region.SATURATION or device.v_ov < 0.02:
            continue
        for name, right in expected(stage, prediction).items():
            hand = prediction.value(name)
            assert hand is not None
            # An EMF that drives the gate itself has the bias network beside it: no closed form for that.
            if name != "Rin" or stage.parts["RSIG"] > 0.0:
                assert hand.how is how, (name, stage)
            assert hand.value == pytest.approx(right, rel=1e-9, abs=0.0), (name, stage)
        seen[device.role] += 1
    assert set(seen) == {"common-source", "common-source-degenerated", "follower"}
    assert min(seen.values()) >= wanted // 10
