"""Formulas of gain and resistances against nodal equations that sympy solves symbolically.

Every check here is independent: Kirchhoff's current law is written down for the small-signal circuit of one
transistor (gm, gmb, ro) among resistors (``kirchhoff.py``), and sympy (BSD licence) solves it. The functions
of ``deckgen.hand.formulas`` are called with symbols, and what they return is shown to be the same rational
function; then they are held to sympy's limits at each infinite or zero argument that they accept, and to
sympy's numbers. Nothing is pinned. The published forms: P. R. Gray, P. J. Hurst, S. H. Lewis, R. G. Meyer,
Analysis and Design of Analog Integrated Circuits, ch. 3, and B. Razavi, Design of Analog CMOS Integrated
Circuits (chapters from memory); time constants after P. E. Gray, C. L. Searle, Electronic Principles, 1969.
"""

from __future__ import annotations

import math
import random
from collections.abc import Callable, Mapping
from functools import cache
from typing import Any

import pytest
import sympy as sp

from deckgen.hand.formulas import feedback, frequency, gain, quiet_gate
from tests.outside.kirchhoff import Device, Network
from tests.outside.symbolic import (
    BULKS,
    GM,
    GMB,
    QUIET,
    R_D,
    R_F,
    R_G,
    R_INTO,
    R_S,
    Positive,
    by_formula,
    into,
    network,
    ratio,
    same,
)

CLOSE = 1e-11


def drawn_common_source_gain(bulk: str) -> Any:
    return ratio(network(("d", "0", R_D), ("s", "0", R_S), bulk=bulk), "g", "d")


def drawn_effective_transconductance(bulk: str) -> Any:
    """The drain's current into a short: it comes back through RS."""
    return ratio(network(("s", "0", R_S), bulk=bulk), "g", "s", "d") / R_S


def drawn_drain_resistance(bulk: str) -> Any:
    return into(network(("s", "0", R_S), bulk=bulk), "d", "g")


def drawn_source_resistance(bulk: str) -> Any:
    return into(network(("d", "0", R_D), bulk=bulk), "s", "g")


def drawn_follower_gain(bulk: str) -> Any:
    return ratio(network(("d", "0", R_D), ("s", "0", R_S), bulk=bulk), "g", "s")


def drawn_common_gate_gain(bulk: str) -> Any:
    return ratio(network(("d", "0", R_D), bulk=bulk), "s", "d", "g")


def drawn_diode_resistance(bulk: str) -> Any:
    return into(network(("s", "0", R_S), bulk=bulk, gate="d"), "d")


def drawn_channel_pass_gain(bulk: str) -> Any:
    return ratio(network(("s", "0", R_S), bulk=bulk), "d", "s", "g")


def fed_back(*resistors: tuple[str, str, Any]) -> Network:
    """RF over a transconductance whose drain shows ``r_into``."""
    return Network(Device("d", "g", "0", "0", GM, QUIET, 1 / R_INTO), (("d", "g", R_F), *resistors))


def drawn_drain_feedback_gain(_: str) -> Any:
    return ratio(fed_back(("d", "0", R_D)), "g", "d")


def drawn_drain_feedback_resistance(_: str) -> Any:
    """Without what the drain itself shows."""
    return sp.cancel(1 / (1 / into(fed_back(("g", "0", R_G)), "d") - 1 / R_INTO))


def bare(*resistors: tuple[str, str, Any]) -> Network:
    """Neither ro nor gmb."""
    return Network(Device("d", "g", "s", "0", GM, QUIET, QUIET), resistors)


def drawn_gate_source_resistance(_: str) -> Any:
    return bare(("g", "0", R_G), ("s", "0", R_S), ("d", "0", R_D)).resistance("g", "s")


def drawn_gate_drain_resistance(_: str) -> Any:
    return bare(("g", "0", R_G), ("s", "0", R_S), ("d", "0", R_D)).resistance("g", "d")


# Each formula beside the circuit that it stands for, drawn with symbols named like its arguments.
DRAWN: Mapping[Any, Callable[[str], Any]] = {
    gain.common_source_gain: drawn_common_source_gain,
    gain.effective_transconductance: drawn_effective_transconductance,
    gain.drain_resistance: drawn_drain_resistance,
    gain.source_resistance: drawn_source_resistance,
    gain.follower_gain: drawn_follower_gain,
    quiet_gate.common_gate_gain: drawn_common_gate_gain,
    quiet_gate.diode_resistance: drawn_diode_resistance,
    quiet_gate.channel_pass_gain: drawn_channel_pass_gain,
    feedback.drain_feedback_gain: drawn_drain_feedback_gain,
    feedback.drain_feedback_resistance: drawn_drain_feedback_resistance,
    frequency.gate_source_resistance: drawn_gate_source_resistance,
    frequency.gate_drain_resistance: drawn_gate_drain_resistance,
}
# No circuit of their own: they take part in whole stages (test_stages_against_sympy.py).
OTHERS = {"parallel", "miller_resistance"}


@cache
def nodal(formula: Any, bulk: str) -> Any:
    return DRAWN[formula](bulk)


def named(formula: Any) -> str:
    return formula.__name__


every_formula = pytest.mark.parametrize("formula", DRAWN, ids=named)


def test_no_formula_of_gain_or_resistance_is_left_out() -> None:
    found = {
        name
        for module in (gain, quiet_gate, feedback)
        for name, one in vars(module).items()
        if hasattr(one, "domains") and one.__module__ == module.__name__
    }
    assert found <= {*map(named, DRAWN), *OTHERS}


@pytest.mark.parametrize("bulk", BULKS)
@every_formula
def test_formula_with_symbols_is_the_nodal_solution(formula: Any, bulk: str) -> None:
    """The bulk at the source is gmb = 0."""
    own = by_formula(formula)
    assert same(own.subs(GMB, 0) if bulk == "source" else own, nodal(formula, bulk))


def spread(draw: random.Random, low: float, high: float) -> float:
    return math.exp(draw.uniform(math.log(low), math.log(high)))


def random_values(formula: Any, draw: random.Random) -> dict[str, float]:
    values = {name: spread(draw, 10.0, 1e7) for name in formula.domains}
    if "gm" in values:
        values["gm"] = spread(draw, 1e-6, 0.1)
    if "gmb" in values:
        values["gmb"] = values["gm"] * draw.uniform(0.0, 0.5)
    return values


@every_formula
def test_formula_with_numbers_is_the_nodal_solution(formula: Any, count: Callable[[int, int], int]) -> None:
    draw = random.Random(4)
    names = [*formula.domains]
    number = sp.lambdify([Positive(name) for name in names], nodal(formula, "rail"), "math")
    for _ in range(count(200, 5000)):
        values = random_values(formula, draw)
        right = number(*(values[name] for name in names))
        assert formula(**values) == pytest.approx(right, rel=CLOSE, abs=0.0), values


def ends(formula: Any) -> list[tuple[str, float]]:
    """Arguments that may be zero or infinite, with that end."""
    domains = formula.domains
    last = [(name, math.inf) for name, domain in domains.items() if math.isinf(domain.last)]
    return last + [(name, 0.0) for name, domain in domains.items() if domain.low_closed]


@pytest.mark.parametrize(
    ("formula", "name", "end"), [(formula, *end) for formula in DRAWN for end in ends(formula)],
    ids=lambda value: named(value) if callable(value) else str(value),
)  # fmt: skip
def test_formula_at_a_zero_or_infinite_argument_is_the_limit_of_the_nodal_solution(
    formula: Any, name: str, end: float
) -> None:
    draw = random.Random(5)
    limit = sp.limit(nodal(formula, "rail"), Positive(name), sp.oo if end else 0, "-" if end else "+")
    for _ in range(20):
        values = random_values(formula, draw)
        right = limit.subs({Positive(key): value for key, value in values.items() if key != name})
        assert formula(**values | {name: end}) == pytest.approx(float(right), rel=CLOSE, abs=0.0), values
