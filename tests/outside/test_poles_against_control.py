"""Poles, zeros, band edges and time constants against python-control, sympy and published figures.

What each check is:

* independent: stages of one and two transistors and random networks of R, L, C and transistors, whose nodal
  equations sympy (BSD licence) expands in exact rational numbers into a rational function of s, of which
  python-control (BSD licence) finds poles, zeros and -3 dB frequencies;
* published: b1 and b2 of the denominator, Miller's estimate and the exact fH of A. S. Sedra, K. C. Smith,
  *Microelectronic Circuits*, example 6.9 (part values and figures from memory; they agree with each other in
  all digits); the corner frequencies of three examples in ``data/worked_examples.json``.

Nothing here shares code with deckgen's pencils: only gm, gds and gmb come from its Q-point.
"""

from __future__ import annotations

import math
import random
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import control
import numpy as np
import pytest
import sympy as sp
from scipy.optimize import brentq
from sympy.polys.matrices import DomainMatrix

from deckgen.assumptions import assumptions_made
from deckgen.circuit.model import (
    GROUND,
    Capacitor,
    Circuit,
    Inductor,
    Mosfet,
    Resistor,
    VoltageSource,
)
from deckgen.circuit.ports import Ports
from deckgen.circuit.reader import read_flat
from deckgen.hand.batch import Batch
from deckgen.hand.bias import solve_bias
from deckgen.hand.effects import ALL_EFFECTS
from deckgen.hand.poles import PolesAndZeros, poles_and_zeros
from deckgen.hand.predict import predict
from deckgen.hand.prediction import BandEdge, HalfPlane, Prediction
from deckgen.hand.smallsignal import linearize
from tests.outside.worked import EXAMPLES, circuitry

CLOSE = 1e-6
FULL = assumptions_made("full")


@dataclass(frozen=True)
class Conductor:
    """A current g·(v(plus) - v(minus)) through the part; a resistor if that is its own voltage."""

    out: str
    into: str
    plus: str
    minus: str
    g: float


@dataclass(frozen=True)
class Linear:
    """A circuit as Kirchhoff sees it: supplies are ground, transistors are conductors and capacitors."""

    conductors: tuple[Conductor, ...]
    capacitors: tuple[tuple[str, str, float], ...]
    inductors: tuple[tuple[str, str, float], ...]

    @property
    def nodes(self) -> tuple[str, ...]:
        """All nodes but ground and the driven one."""
        ends = [node for c in self.conductors for node in (c.out, c.into, c.plus, c.minus)]
        ends += [node for part in (*self.capacitors, *self.inductors) for node in part[:2]]
        return tuple(dict.fromkeys(node for node in ends if node not in (GROUND, "in")))


def linear_of(circuit: Circuit, prediction: Prediction) -> Linear:
    """The small-signal circuit, with gm, gds and gmb of the hand analysis and overlap capacitances alone."""
    held = {e.nodes[0] for e in circuit.elements if isinstance(e, VoltageSource) and e.name != "vin"}

    def at(node: str) -> str:
        return GROUND if node in held else node

    conductors, capacitors, inductors = [], [], []
    for part in circuit.elements:
        if isinstance(part, Mosfet):
            d, g, s, b = (at(node) for node in part.nodes)
            value = {kind: prediction.value(f"{kind}({part.name.upper()})") for kind in ("gm", "gds", "gmb")}
            gm, gds, gmb = (one.value for one in value.values())
            conductors += [
                Conductor(d, s, g, s, gm),
                Conductor(d, s, d, s, gds),
                Conductor(d, s, b, s, gmb),
            ]
            card = circuit.model(part.model)
            capacitors.append((g, s, part.w * card.get("cgso", 0.0)))
            capacitors.append((g, d, part.w * card.get("cgdo", 0.0)))
        elif isinstance(part, Resistor | Capacitor | Inductor):
            one, other = (at(node) for node in part.nodes)
            if isinstance(part, Resistor):
                conductors.append(Conductor(one, other, one, other, 1.0 / part.value))
            else:
                kept = capacitors if isinstance(part, Capacitor) else inductors
                kept.append((one, other, part.value))
    return Linear(tuple(conductors), tuple(capacitors), tuple(inductors))


# --- the rational function, by sympy ---

S = sp.Symbol("s")
POLYNOMIALS = sp.QQ[S]


def exact(value: float) -> sp.Poly:
    return POLYNOMIALS.from_sympy(sp.Rational(value))


def expanded(net: Linear) -> control.TransferFunction:
    """V(out)/V(in) by Cramer's rule, in exact rational numbers, with what cancels but for rounding left in.

    Currents of inductors are unknowns too.
    """
    nodes, size = net.nodes, len(net.nodes) + len(net.inductors)
    whole = [[POLYNOMIALS.zero] * size for _ in range(size)]
    right = [POLYNOMIALS.zero] * size

    def add(row: int, node: str, value: sp.Poly) -> None:
        if node == "in":
            right[row] -= value
        elif node != GROUND:
            whole[row][nodes.index(node)] += value

    def stamp(c: Conductor, admittance: sp.Poly) -> None:
        for node, sign in ((c.out, admittance), (c.into, -admittance)):
            if node in nodes:
                add(nodes.index(node), c.plus, sign)
                add(nodes.index(node), c.minus, -sign)

    for c in net.conductors:
        stamp(c, exact(c.g))
    for one, other, value in net.capacitors:
        stamp(Conductor(one, other, one, other, 0.0), exact(value) * POLYNOMIALS.from_sympy(S))
    for row, (one, other, value) in enumerate(net.inductors, len(nodes)):
        for node, sign in ((one, exact(1.0)), (other, exact(-1.0))):
            add(row, node, sign)
            if node in nodes:
                whole[nodes.index(node)][row] += sign
        whole[row][row] -= exact(value) * POLYNOMIALS.from_sympy(S)
    out = nodes.index("out")
    driven = [[*row[:out], side, *row[out + 1 :]] for row, side in zip(whole, right, strict=True)]
    above, below = (
        sp.Poly(POLYNOMIALS.to_sympy(DomainMatrix(rows, (size, size), POLYNOMIALS).det()), S, domain="QQ")
        for rows in (driven, whole)
    )
    scale = below.LC()
    return control.tf(*([float(c / scale) for c in one.all_coeffs()] for one in (above, below)))


CARD = ".model nm nmos level=1 vto=0.8 kp=100u gamma=0.4 phi=0.7 lambda=0.02 cgso=0.3n cgdo=0.2n\n"
SUPPLY = "vdd vdd 0 12\nvin in 0 dc 0 ac 1\n"
DIVIDER = SUPPLY + "rsig in a 1k\ncin a g 100n\nr1 vdd g 1.2meg\nr2 g 0 300k\n"
FIRST = DIVIDER + "m1 d g s 0 nm w=100u l=2u\nrd vdd d 10k\nrs s 0 2k\n"
LOADED = "cout d out 1u\nrl out 0 47k\ncl out 0 100p\n"
STAGES = {
    "common source, bypassed": FIRST + LOADED + "cs s 0 10u\n",
    "common source, degenerated": FIRST + LOADED,
    "follower": DIVIDER
    + "m1 vdd g s 0 nm w=100u l=2u\nrs s 0 2k\ncout s out 1u\nrl out 0 47k\ncl out 0 1n\n",
    "common gate": SUPPLY
    + "vg g 0 3\nrsig in a 100\ncin a s 1u\nrs s 0 2k\n"
    + "m1 out g s 0 nm w=100u l=2u\nrd vdd out 10k\ncl out 0 20p\n",
    "cascode": DIVIDER
    + "vb b 0 5\nm1 x g s 0 nm w=100u l=2u\nm2 out b x 0 nm w=100u l=2u\nrd vdd out 8k\n"
    + "rs s 0 2k\ncs s 0 10u\ncl out 0 50p\ncx x 0 2p\n",
    "common source and follower": FIRST
    + "cs s 0 10u\nm2 vdd d t 0 nm w=200u l=2u\nr3 t 0 3k\ncout t out 2u\nrl out 0 10k\ncl out 0 1n\n",
    "two common sources": FIRST
    + "cs s 0 10u\ncc d h 220n\nr3 vdd h 1meg\nr4 h 0 270k\nm2 out h s2 0 nm w=50u l=2u\n"
    + "rd2 vdd out 15k\nrs2 s2 0 3k\ncs2 s2 0 4.7u\ncl out 0 30p\n",
}


@dataclass(frozen=True)
class Case:
    """A circuit by deckgen and by python-control."""

    found: PolesAndZeros
    prediction: Prediction
    theirs: control.TransferFunction


def case(cards: str) -> Case:
    circuit, ports = read_flat(f"t\n{cards}{CARD}"), Ports("vin", "out")
    prediction = predict(circuit, ports, assumptions=FULL)
    assert prediction.mid_band is not None
    small = linearize(circuit, ports, solve_bias(circuit, Batch((ALL_EFFECTS,))))
    found = poles_and_zeros(small, prediction.mid_band.frequency)
    assert found is not None
    return Case(found, prediction, expanded(linear_of(circuit, prediction)))


def assert_same(own: Sequence[complex], theirs: Sequence[complex]) -> None:
    """Each within 1e-6, and within what eigenvalues of a companion matrix lose beside the largest of them."""
    left = [complex(s) for s in theirs]
    assert len(own) == len(left), (own, left)
    rounding = 1e-15 * max((abs(s) for s in own), default=0.0)
    for s in own:
        twin = min(left, key=lambda place: abs(place - s))
        assert abs(twin - s) <= CLOSE * abs(s) + rounding, (s, left)
        left.remove(twin)


def assert_same_edges(one: Case) -> None:
    """The first point at -3 dB outward from mid-band, by scipy's root finder on python-control's response."""
    mid = one.prediction.mid_band
    assert mid is not None

    def below(exponent: float) -> float:
        level = abs(one.theirs(2j * math.pi * mid.frequency)) / math.sqrt(2.0)
        return float(abs(one.theirs(2j * math.pi * 10.0**exponent)) / level - 1.0)

    for edge, way in ((mid.exact_f_l, -1.0), (mid.exact_f_h, 1.0)):
        steps = math.log10(mid.frequency) + way * np.arange(0.0, 17.0, 0.05)
        steps = steps[(steps >= -4.0) & (steps <= 13.0)]
        outside = next((n for n, step in enumerate(steps) if below(step) < 0.0), None)
        assert (edge is None) == (outside is None)
        if edge is not None and outside is not None:
            exponent = brentq(below, steps[outside - 1], steps[outside], xtol=1e-14, rtol=1e-14)
            assert edge == pytest.approx(10.0**exponent, rel=CLOSE)


@pytest.mark.parametrize("name", STAGES)
def test_stages_have_the_poles_zeros_and_edges_of_their_rational_function(name: str) -> None:
    """Independent: sympy's determinants, python-control's roots."""
    one = case(STAGES[name])
    assert_same((*one.found.poles, *one.found.cancelled), one.theirs.poles())
    assert_same((*one.found.zeros, *one.found.cancelled), one.theirs.zeros())
    assert_same_edges(one)


# --- random networks ---


def log_uniform(draw: random.Random, low: float, high: float) -> float:
    return math.exp(draw.uniform(math.log(low), math.log(high)))


def random_cards(draw: random.Random) -> str:
    """Up to three transistors with their resistors, and capacitors and inductors between any nodes."""
    cards, nodes = [SUPPLY.rstrip("\n")], ["out", *(f"n{n}" for n in range(draw.randint(3, 6)))]
    for n, node in enumerate(nodes):
        along, down = draw.choice(["in", GROUND, "vdd", *nodes[:n]]), draw.choice([GROUND, "vdd"])
        cards.append(f"ra{n} {node} {along} {log_uniform(draw, 1e2, 1e6)}")
        cards.append(f"rb{n} {node} {down} {log_uniform(draw, 1e3, 1e6)}")
    for n in range(draw.randint(1, 3)):
        cards.append(f"m{n} {' '.join(draw.sample(nodes, 3))} 0 nm w={draw.randint(5, 200)}u l=2u")
    for n in range(draw.randint(2, 5)):
        ends = draw.sample([*nodes, "in", GROUND], 2)
        cards.append(f"c{n} {' '.join(ends)} {log_uniform(draw, 1e-12, 1e-7)}")
    for n in range(draw.randint(0, 2)):
        one, other = draw.sample([*nodes, GROUND], 2)
        cards.append(f"l{n} {one} x{n} {log_uniform(draw, 1e-6, 1e-2)}")
        cards.append(f"rl{n} x{n} {other} {log_uniform(draw, 10.0, 1e4)}")
    return "\n".join(cards) + "\n"


def test_random_networks_have_the_poles_zeros_and_edges_of_their_rational_function(
    count: Callable[[int, int], int],
) -> None:
    """Independent: sympy's determinants, python-control's roots; loops of capacitors and all."""
    draw, done, kinds = random.Random(7), 0, dict.fromkeys(("pairs", "right", "hidden", "conducting"), 0)
    while done < count(40, 400):
        one = case(random_cards(draw))
        if abs(one.found.value) <= 0.0 or any(t.region == "reversed" for t in one.prediction.transistors):
            continue
        done += 1
        kinds["pairs"] += any(abs(s.imag) > 0.0 for s in one.found.poles)
        kinds["right"] += any(s.real > 0.0 for s in one.found.zeros)
        kinds["hidden"] += bool(one.found.cancelled)
        kinds["conducting"] += any(t.region != "cut-off" for t in one.prediction.transistors)
        assert_same((*one.found.poles, *one.found.cancelled), one.theirs.poles())
        assert_same((*one.found.zeros, *one.found.cancelled), one.theirs.zeros())
        assert_same_edges(one)
    assert min(kinds.values()) > 0, kinds


# --- published ---

ACTIVE_LOAD = """\
* Sedra & Smith, example 6.9: gm = 1.244 mS at 0.1 mA, ro = 18 kΩ and 21.6 kΩ, Rsig 10 kΩ
vdd vdd 0 3.3
vin in 0 dc 0.66075 ac 1
rsig in g 10k
m1 out g 0 0 n1 w=10u l=10u
rload vdd out 21.6k
cl out 0 25f
.model n1 nmos level=1 vto=0.5 kp=7.74m lambda=0.5556 cgso=2n cgdo=0.5n
"""


def edge(prediction: Prediction, quantity: str) -> BandEdge:
    (found,) = (one for one in prediction.band_edges if one.quantity == quantity)
    return found


def test_the_published_polynomial_of_an_active_load_stage() -> None:
    """Published (Sedra & Smith 6.9, from memory): b1 = 1.155 ns, b2 = 0.0712 ns²; 184.9 and 145.5 MHz."""
    ports = Ports("vin", "out", "rsig")
    found = predict(read_flat(ACTIVE_LOAD), ports, assumptions=assumptions_made("paper"))
    one, other = (1.0 / (2.0 * math.pi * root.frequency) for root in found.poles)
    assert one + other == pytest.approx(1.155e-9, rel=5e-4)
    assert one * other == pytest.approx(0.0712e-18, rel=1e-3)
    constants = [row.tau for row in found.time_constants]
    assert None not in constants
    assert sum(tau for tau in constants if tau is not None) == pytest.approx(one + other, rel=1e-9)
    assert edge(found, "fH").miller == pytest.approx(184.9e6, rel=5e-4)
    assert edge(found, "fH").exact == pytest.approx(145.5e6, rel=1e-3)
    (zero,) = found.zeros
    assert zero.half_plane is HalfPlane.RIGHT
    assert 2.0 * math.pi * zero.frequency == pytest.approx(1.244e-3 / 5e-15, rel=1e-3)


def test_corner_frequencies_of_single_capacitors_are_the_printed_ones() -> None:
    """Published (Boylestad & Nashelsky 9.12, Neamen 7.6, Sedra & Smith 6.6), each within its tolerance."""
    example, found = EXAMPLES["Boylestad-Nashelsky 9.12"], circuitry("Boylestad-Nashelsky 9.12")
    rows = {row.name: row for row in found.paper.time_constants}
    for figure, name in (("fLG", "CG"), ("fLC", "CC"), ("fLS", "CS")):
        right = pytest.approx(example["printed"][figure], rel=example["tolerance"])
        assert rows[name].frequency == right
    assert [row.name for row in found.paper.time_constants] == ["CS", "CC", "CG"]
    example, found = EXAMPLES["Neamen 7.6"], circuitry("Neamen 7.6")
    (load,) = (row for row in found.paper.time_constants if row.name == "CL")
    assert load.tau == pytest.approx(example["printed"]["tau_p"], rel=example["tolerance"])
    example, found = EXAMPLES["Sedra-Smith 6.6"], circuitry("Sedra-Smith 6.6")
    assert edge(found.paper, "fH").estimate == pytest.approx(
        example["printed"]["fH"], rel=example["tolerance"]
    )
