"""What stands behind Newton: each way alone leads to the solution, and paths pass their turning points."""

from __future__ import annotations

from dataclasses import replace
from functools import cache

import numpy as np
import pytest

from deckgen.circuit.reader import read_flat
from deckgen.hand.batch import Batch, prepare_devices
from deckgen.hand.bias import solve_bias
from deckgen.hand.dc import continuation, ladders
from deckgen.hand.dc.arclength import follow
from deckgen.hand.dc.continuation import climb, conductances_vanish
from deckgen.hand.dc.ladders import LADDERS, Way
from deckgen.hand.dc.newton import Problem, newton, problem_of, scaled
from deckgen.hand.dc.reduced import eliminate
from deckgen.hand.dc.starts import cold_start
from deckgen.hand.effects import ALL_EFFECTS, effects_under
from deckgen.hand.laws.base import Array, Mask
from deckgen.hand.network import dc_system
from tests.networks import network
from tests.unit.test_operating_points import SCHMITT, circuit

FULL = Batch((ALL_EFFECTS,))
CASCODE = """A cascode with its gate high
vdd vdd 0 12
vin g 0 dc 1.2 ac 1
vb b 0 4
rd vdd out 10k
m1 x g 0 0 nch w=20u l=2u
m2 out b x 0 nch w=20u l=2u
.model nch nmos level=1 vto=0.7 kp=100u lambda=0.02 gamma=0.4
"""


def problem(text_or_seed: str | int) -> Problem:
    c = network(text_or_seed).circuit if isinstance(text_or_seed, int) else circuit(text_or_seed)
    return problem_of(eliminate(dc_system(c)), prepare_devices(c, FULL), 1)


@cache
def hard_seeds() -> tuple[int, ...]:
    """Networks in which Newton alone finds nothing from a cold start."""
    with np.errstate(all="ignore"):
        seeds = (s for s in range(1, 400) if not newton(problem(s), cold_start(problem(s)))[1][0])
        return tuple(seed for seed, _ in zip(seeds, range(6), strict=False))


def balanced(of: Problem, v: Array) -> float:
    """Largest current that is left over at port voltages (ports, 1), as a share of the largest there is."""
    reduced = of.reduced
    currents, _ = of.devices(reduced.at_devices(v))
    left = (reduced.held - reduced.tiny) @ v + reduced.entry @ currents.reshape(1, -1).T - of.sources
    return float(np.abs(left).max() / np.abs(currents).max())


@pytest.mark.parametrize("way", LADDERS, ids=lambda way: way.__name__)
def test_where_newton_fails_each_way_alone_leads_to_the_solution(
    monkeypatch: pytest.MonkeyPatch, way: Way
) -> None:
    assert len(hard_seeds()) == 6
    found = 0
    for seed in hard_seeds():
        of = problem(seed)
        monkeypatch.setattr(ladders, "LADDERS", ())
        with np.errstate(all="ignore"):
            assert not ladders.solve(of)[1][0]
            monkeypatch.setattr(ladders, "LADDERS", (way,))
            v, done = ladders.solve(of)
        found += bool(done[0])
        assert not done[0] or balanced(of, v) < 1e-9
    assert found >= 5  # a path may end in a corner of the laws; that is why there are several


def test_a_step_that_newton_cannot_follow_is_tried_again_shorter(monkeypatch: pytest.MonkeyPatch) -> None:
    """Newton that follows steps of a thirtieth and no more, and stops at 0.7 in the second row."""
    of, tried, solved = problem(SCHMITT), [], np.zeros(2)

    def family(problem: Problem, share: Array) -> Problem:
        tried.append(share.copy())
        return scaled(problem, share)

    def follows(problem: Problem, start: Array, *_: int) -> tuple[Array, Mask]:
        shares = tried[-1]
        rows = np.arange(2) if len(shares) == 2 else np.array([0 if solved[0] < 1.0 else 1])
        good = (shares - solved[rows] <= 1 / 30) & ((rows == 0) | (shares < 0.7))
        solved[rows[good]] = shares[good]
        return start + 1.0, good

    monkeypatch.setattr(continuation, "newton", follows)
    _, done, reached = climb(replace(of, rows=2), family)
    assert done.tolist() == [True, False]
    assert reached[0] == pytest.approx(1.0, abs=0.0)
    assert reached[1] == pytest.approx(0.7, abs=1e-4)


def test_every_row_of_a_batch_climbs_at_its_own_pace() -> None:
    of = problem(hard_seeds()[0])
    many = replace(of, rows=3, sources=of.sources * np.array([1.0, 0.5, 0.9]))
    with np.errstate(all="ignore"):
        together, done, _ = climb(many, conductances_vanish)
        for row in range(3):
            alone, good, _ = climb(many.take(np.array([row])), conductances_vanish)
            assert good[0]
            assert done[row]
            # At the edge of cut-off a node is held by nothing but a slope that ends there.
            assert together[:, row] == pytest.approx(alone[:, 0], abs=1e-4)


def test_how_far_sources_can_rise_is_told_where_they_can_not_rise_to_the_end() -> None:
    """A device that saturates at ½·k·VOV² = 0.5 mA, λ = 0, takes half of the 1 mA that is forced on it."""
    c = circuit("i1 0 d 1m\nvg g 0 1.8\nm1 d g 0 0 nm w=20u l=2u\n")
    batch = Batch((effects_under(["no-channel-length-modulation"]),))
    of = problem_of(eliminate(dc_system(c)), prepare_devices(c, batch), 1)
    still = eliminate(dc_system(circuit("i1 0 d 0\nvg g 0 1.8\nm1 d g 0 0 nm w=20u l=2u\n"))).sources[:, None]

    def current_rises(problem: Problem, share: Array) -> Problem:
        return replace(problem, sources=still + share * (problem.sources - still))

    with np.errstate(all="ignore"):
        _, done, reached = climb(of, current_rises)
    assert not done[0]
    assert reached[0] == pytest.approx(0.5, abs=1e-3)


def swept(problem: Problem, share: Array) -> Problem:
    """The trigger's input from 0 to twice its value; the supply stands."""
    input_alone = np.zeros(problem.reduced.system.layout.size)
    input_alone[problem.reduced.system.layout.branch("vg")] = 3.3
    rises = eliminate(replace(problem.reduced.system, sources=input_alone)).sources
    return replace(problem, sources=problem.sources + (2.0 * share - 1.0) * rises[:, None])


def test_a_path_by_arc_length_passes_its_turning_points() -> None:
    """A trigger's characteristic runs back through its unstable points: the share falls for a while."""
    of, shares = problem(SCHMITT), []

    def family(problem: Problem, share: Array) -> Problem:
        shares.append(float(share[0]))
        return swept(problem, share)

    v, arrived = follow(of, family)
    assert arrived[0]
    assert balanced(swept(of, np.ones(1)), v) < 1e-9
    highest = np.maximum.accumulate(shares)
    assert float((highest - shares).max()) > 0.05  # back by a twentieth of the way and more
    out = of.reduced.system.layout.node("out")
    assert v[list(of.reduced.ports).index(out), 0] == pytest.approx(10.0, abs=0.5)


def test_both_paths_by_arc_length_reach_the_point_of_a_network_that_newton_solves_too() -> None:
    for seed in (3, 9, 15, 27):
        of = problem(seed)
        expected, done = newton(of, cold_start(of))
        assert done[0]
        for way in (ladders.by_arc_length, ladders.by_arc_length_of_sources):
            with np.errstate(all="ignore"):
                near, arrived = way(of)
            assert arrived[0], (seed, way)
            v, done = newton(of, near)
            assert done[0]
            assert v == pytest.approx(expected, abs=1e-7)


def test_a_cascode_is_found_whatever_its_upper_gate_is_tied_to() -> None:
    for volts in (0.0, 0.5, 1.0, 2.0, 3.0, 4.0, 6.0, 9.0, 12.0):
        c = read_flat(CASCODE.replace("vb b 0 4", f"vb b 0 {volts}"))
        point = solve_bias(c, FULL)
        assert point.converged[0]
        assert 0.0 <= point.voltage("x") <= max(volts - 0.7, 0.0) + 1e-6
    assert point.voltage("out") == pytest.approx(12.0 - 1e4 * 1e-3 * 0.125 * (1 + 0.02 * 7.5), abs=0.2)
