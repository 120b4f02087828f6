"""Bulk junctions and series resistances of the square law: values, derivatives, symmetries, limits."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from deckgen.circuit.model import GROUND
from deckgen.circuit.ports import Ports
from deckgen.circuit.reader import read_flat
from deckgen.hand.batch import SQUARE, Batch
from deckgen.hand.bias import solve_bias
from deckgen.hand.effects import ALL_EFFECTS, Effect, effects_under
from deckgen.hand.laws.base import Array
from deckgen.hand.laws.parameters import SquareParameters
from deckgen.hand.smallsignal import linearize, transfer

ROOM = 300.15
UT = 1.380649e-23 * ROOM / 1.602176634e-19
ALL = dict.fromkeys(Effect, True)
CARD = {"vto": 0.7, "kp": 1e-4, "lambda": 0.02, "gamma": 0.4, "phi": 0.65}
JUNCTIONS = {"is": 1e-13, "cj": 2e-4, "cjsw": 3e-10, "mj": 0.4, "mjsw": 0.3, "pb": 0.75, "fc": 0.6}
AREAS = {"ad": 1e-10, "as": 2e-10, "pd": 3e-5, "ps": 5e-5}


def prepared(card: dict[str, float], *, sign: float = 1.0, on: Any = ALL, **size: float) -> SquareParameters:
    """Parameters of one device; the threshold of its card in n-channel signs."""
    geometry = {"w": 20e-6, "l": 2e-6, **size}
    whole = {**CARD, **card}
    whole["vto"] *= sign
    return SQUARE.prepare(whole, sign=sign, temperature=ROOM, tnom=ROOM, on=on, **geometry)


def at(d: float, g: float, s: float = 0.0, b: float = 0.0) -> Array:
    return np.array([d, g, s, b], float)


# --- junctions ---


@pytest.mark.parametrize("sign", [1.0, -1.0], ids=["n", "p"])
@pytest.mark.parametrize("v", [0.6, 0.3, 0.01, 0.0, -0.05, -0.07])
def test_a_junction_carries_the_diode_current_and_gmin(sign: float, v: float) -> None:
    p = prepared({"is": 2e-13}, sign=sign)
    found = SQUARE.evaluate(p, sign * at(5.0, 0.0, 0.0, v)).currents
    diode = 2e-13 * math.expm1(v / UT) + 1e-12 * v
    assert -sign * found[2] == pytest.approx(diode, rel=1e-9, abs=1e-27)
    drain = -2e-13 + 1e-12 * (v - 5.0)
    assert -sign * found[0] == pytest.approx(drain, rel=1e-9)
    assert sign * found[3] == pytest.approx(diode + drain, rel=1e-9)


def test_deep_in_reverse_only_gmin_has_a_slope() -> None:
    found = SQUARE.evaluate(prepared({"is": 2e-13}), at(0.0, 0.0, 0.0, -4.0))
    assert found.currents[3] == pytest.approx(2.0 * (-2e-13 - 4e-12), rel=1e-12)
    assert found.jacobian[3] == pytest.approx([-1e-12, 0.0, -1e-12, 2e-12], rel=1e-12, abs=1e-30)


@pytest.mark.parametrize(
    ("card", "size", "drain", "source"),
    [
        ({}, {}, 1e-14, 1e-14),
        ({"is": 3e-15}, {"m": 4.0}, 12e-15, 12e-15),
        ({"is": 3e-15, "js": 1e-4}, {"ad": 1e-10, "as": 2e-10, "m": 2.0}, 2e-14, 4e-14),
        ({"is": 3e-15, "js": 1e-4}, {"ad": 1e-10}, 3e-15, 3e-15),
        ({"is": 3e-15}, {"ad": 1e-10, "as": 2e-10}, 3e-15, 3e-15),
    ],
)
def test_saturation_currents_are_js_by_area_only_where_all_of_it_is_stated(
    card: dict[str, float], size: dict[str, float], drain: float, source: float
) -> None:
    p = prepared(card, **size)
    assert (float(p.is_drain), float(p.is_source)) == pytest.approx((drain, source), rel=1e-12)
    assert float(p.gmin) == pytest.approx(1e-12)


@pytest.mark.parametrize("sign", [1.0, -1.0], ids=["n", "p"])
def test_the_capacitance_of_a_junction_is_that_of_its_depleted_bottom_and_side(sign: float) -> None:
    p = prepared(JUNCTIONS, sign=sign, m=2.0, **AREAS)
    for v in (-3.0, 0.0, 0.44):
        c_bd, c_bs = SQUARE.capacitances(p, sign * at(0.0, 0.0, 0.0, v))[3:]
        for found, area, perimeter in ((c_bd, 1e-10, 3e-5), (c_bs, 2e-10, 5e-5)):
            bottom, side = 2e-4 * area * (1 - v / 0.75) ** -0.4, 3e-10 * perimeter * (1 - v / 0.75) ** -0.3
            assert found == pytest.approx(2.0 * (bottom + side), rel=1e-12)


def test_above_fc_times_pb_the_capacitance_goes_on_as_a_straight_line() -> None:
    p, step = prepared(JUNCTIONS, **AREAS), 1e-7

    def c(v: float) -> float:
        return float(SQUARE.capacitances(p, at(0.0, 0.0, 0.0, v))[4])

    knee = 0.6 * 0.75
    assert c(knee - step) == pytest.approx(c(knee + step), rel=1e-6)
    below, above = (c(knee) - c(knee - step)) / step, (c(knee + step) - c(knee)) / step
    assert below == pytest.approx(above, rel=1e-4)
    assert c(3.0) - c(2.0) == pytest.approx(above, rel=1e-4)


def test_stated_capacitances_take_the_place_of_bottom_and_not_of_side() -> None:
    p = prepared({**JUNCTIONS, "cbd": 1e-12, "cbs": 0.0}, **AREAS)
    c_bd, c_bs = SQUARE.capacitances(p, at(0.0, 0.0))[3:]
    assert c_bd == pytest.approx(1e-12 + 3e-10 * 3e-5, rel=1e-12)
    assert c_bs == pytest.approx(3e-10 * 5e-5, rel=1e-12)


def test_without_areas_there_is_no_junction_capacitance() -> None:
    assert SQUARE.capacitances(prepared(JUNCTIONS), at(5.0, 2.0))[3:].tolist() == [0.0, 0.0]


def test_junctions_left_out_carry_nothing_and_keep_their_capacitance() -> None:
    without = {effect: effect is not Effect.BULK_JUNCTIONS for effect in Effect}
    p = prepared(JUNCTIONS, on=without, **AREAS)
    found = SQUARE.evaluate(p, at(5.0, 2.0, 0.0, 0.5))
    assert found.currents[3] == pytest.approx(0.0, abs=1e-30)
    assert found.currents[0] == pytest.approx(-found.currents[2], rel=1e-15)
    assert (SQUARE.capacitances(p, at(5.0, 2.0))[3:] > 0.0).all()


# --- series resistances ---


@pytest.mark.parametrize("sign", [1.0, -1.0], ids=["n", "p"])
@pytest.mark.parametrize("v", [at(5, 3), at(0.4, 3), at(5, 0.2), at(-3, 3, 0, -4), at(5, 3, 0, 0.9)])
def test_each_inner_terminal_lies_behind_its_resistance(sign: float, v: Array) -> None:
    p = prepared({"rd": 200.0, "rs": 50.0, "is": 1e-13}, sign=sign, m=2.0)
    i_d, _, i_s, _ = SQUARE.evaluate(p, sign * v).currents
    report = {name: float(value) for name, value in SQUARE.report(p, sign * v).items()}
    assert report["VDS'"] == pytest.approx(
        sign * (report["VDS"] - 100.0 * i_d + 25.0 * i_s), rel=1e-12, abs=1e-12
    )
    assert report["ID"] == pytest.approx(sign * i_d, rel=1e-12)
    # The channel and its junctions are those of a device without resistances at the inner voltages.
    inner = sign * v + at(-100.0 * i_d, 0.0, -25.0 * i_s)
    bare = prepared({"rd": 0.0, "rs": 0.0, "is": 1e-13}, sign=sign, m=2.0)
    again = SQUARE.report(bare, inner)
    for name in ("ID", "VTH", "VOV", "gm", "gds", "gmb"):
        assert report[name] == pytest.approx(float(again[name]), rel=1e-9, abs=1e-18), name
    assert report["VGS"] == pytest.approx(sign * (v[1] - v[2]))


@pytest.mark.parametrize(
    ("card", "size", "expected"),
    [
        ({}, {}, (0.0, 0.0)),
        ({"rd": 10.0, "rs": 20.0}, {"m": 4.0}, (2.5, 5.0)),
        ({"rsh": 7.0}, {}, (7.0, 7.0)),
        ({"rsh": 7.0}, {"nrd": 2.0, "nrs": 0.5, "m": 2.0}, (7.0, 1.75)),
        ({"rsh": 7.0, "rd": 10.0}, {"nrd": 2.0, "nrs": 3.0}, (10.0, 21.0)),
    ],
)
def test_a_stated_resistance_goes_before_that_of_the_squares(
    card: dict[str, float], size: dict[str, float], expected: tuple[float, float]
) -> None:
    p = prepared(card, **size)
    assert (float(p.r_drain), float(p.r_source)) == pytest.approx(expected, rel=1e-12)
    assert SQUARE.separate(p).tolist() == [value > 0.0 for value in expected]


def test_resistances_left_out_are_not_there() -> None:
    without = {effect: effect is not Effect.SERIES_RESISTANCE for effect in Effect}
    p, bare = prepared({"rd": 200.0, "rs": 50.0}, on=without), prepared({})
    assert not SQUARE.separate(p).any()
    assert SQUARE.evaluate(p, at(5, 3)).currents == pytest.approx(SQUARE.evaluate(bare, at(5, 3)).currents)


def test_a_small_resistance_changes_little() -> None:
    bare, small = prepared({}), prepared({"rd": 1e-3, "rs": 1e-3})
    for v in (at(5, 3), at(0.2, 3), at(-2, 3, 0, -3), at(5, 0.3)):
        for name, value in SQUARE.report(bare, v).items():
            assert float(SQUARE.report(small, v)[name]) == pytest.approx(float(value), rel=1e-5, abs=1e-11)


# --- derivatives and symmetries, anywhere ---

VOLT = st.floats(-4.0, 6.0)
SIGN = st.sampled_from([1.0, -1.0])
RESISTANCE = st.one_of(st.just(0.0), st.floats(0.0, 5.0).map(lambda power: 10.0**power))
DEVICES = st.fixed_dictionaries(
    {
        "vto": st.floats(-1.0, 1.5),
        "kp": st.floats(1e-6, 1e-3),
        "lambda": st.floats(0.0, 0.2),
        "gamma": st.floats(0.0, 1.0),
        "phi": st.floats(0.4, 1.0),
        "rd": RESISTANCE,
        "rs": RESISTANCE,
        "is": st.sampled_from([0.0, 1e-16, 1e-13]),
    }
)
FORWARD = st.floats(-5.0, 0.6)


def volts(sign: float, d: float, g: float, s: float, forward: float) -> Array:
    """Terminal voltages; the bulk at ``forward`` above the lower of drain and source."""
    return sign * at(d, g, s, min(d, s) + forward)


@settings(max_examples=200)
@given(DEVICES, SIGN, VOLT, VOLT, VOLT, FORWARD)
def test_the_jacobian_is_the_derivative_of_the_currents(
    device: dict[str, float], sign: float, d: float, g: float, s: float, forward: float
) -> None:
    p, v, h = prepared(device, sign=sign), volts(sign, d, g, s, forward), 1e-6
    # At -3 UT ngspice's diode has a step.
    assume(all(abs(v[3] - end + sign * 3 * UT) > 0.02 for end in (v[0], v[2])))
    assume(max(device["rd"], device["rs"]) < 1e3 or device["is"] < 1e-15)
    jacobian = SQUARE.evaluate(p, v).jacobian
    rises = []
    for terminal in range(4):
        step = h * np.eye(4)[terminal]
        rise = SQUARE.evaluate(p, v + step).currents - SQUARE.evaluate(p, v - step).currents
        rises.append(rise / (2.0 * h))
    scale = float(np.abs(jacobian).max()) + float(p.k)
    # 1e-4 of UT is how far an exponential is from its tangent; a kink of the channel costs k·h.
    assert jacobian == pytest.approx(np.array(rises).T, abs=3e-5 * scale)


@given(DEVICES, SIGN, VOLT, VOLT, VOLT, FORWARD)
def test_currents_sum_to_nothing_and_only_differences_of_voltages_count(
    device: dict[str, float], sign: float, d: float, g: float, s: float, forward: float
) -> None:
    found = SQUARE.evaluate(prepared(device, sign=sign), volts(sign, d, g, s, forward))
    largest = float(np.abs(found.currents).max())
    assert float(found.currents.sum()) == pytest.approx(0.0, abs=1e-15 * largest + 1e-30)
    assert found.currents[1] == pytest.approx(0.0, abs=1e-30)
    scale = float(np.abs(found.jacobian).max()) * 1e-9 + 1e-30
    assert found.jacobian.sum(axis=1) == pytest.approx(np.zeros(4), abs=scale)
    assert found.jacobian.sum(axis=0) == pytest.approx(np.zeros(4), abs=scale)


@given(DEVICES, SIGN, VOLT, VOLT, VOLT, FORWARD)
def test_a_device_turned_round_is_the_device_with_its_ends_exchanged(
    device: dict[str, float], sign: float, d: float, g: float, s: float, forward: float
) -> None:
    v, turn = volts(sign, d, g, s, forward), [2, 1, 0, 3]
    areas = {"js": 1e-6, "cj": 2e-4}
    turned = {**device, **areas, "rd": device["rs"], "rs": device["rd"]}
    one = prepared({**device, **areas}, sign=sign, ad=1e-10, **{"as": 3e-10})
    other = prepared(turned, sign=sign, ad=3e-10, **{"as": 1e-10})
    here, there = SQUARE.evaluate(one, v), SQUARE.evaluate(other, v[turn])
    scale = float(np.abs(here.currents).max())
    assert there.currents[turn] == pytest.approx(here.currents, rel=1e-9, abs=1e-9 * scale + 1e-30)
    steepest = float(np.abs(here.jacobian).max())
    assert there.jacobian[np.ix_(turn, turn)] == pytest.approx(here.jacobian, rel=1e-6, abs=1e-6 * steepest)
    first, second = SQUARE.capacitances(one, v), SQUARE.capacitances(other, v[turn])
    assert second[[1, 0, 2, 4, 3]] == pytest.approx(first, rel=1e-6, abs=1e-21)


@given(DEVICES, VOLT, VOLT, VOLT, FORWARD)
def test_a_p_channel_device_is_the_mirror_of_an_n_channel_one(
    device: dict[str, float], d: float, g: float, s: float, forward: float
) -> None:
    v = volts(1.0, d, g, s, forward)
    n, p = SQUARE.evaluate(prepared(device), v), SQUARE.evaluate(prepared(device, sign=-1.0), -v)
    assert p.currents == pytest.approx(-n.currents, rel=1e-9, abs=1e-24)
    assert p.jacobian == pytest.approx(n.jacobian, rel=1e-6, abs=1e-24)


@given(DEVICES, SIGN, VOLT, VOLT, VOLT, st.floats(-5.0, 0.0))
def test_small_signal_with_the_inner_nodes_eliminated_is_the_outer_jacobian(
    device: dict[str, float], sign: float, d: float, g: float, s: float, forward: float
) -> None:
    p = prepared(device, sign=sign)
    v = volts(sign, d, g, s, forward)
    # Behind the resistances, too, the bulk must not be forward-biased: there SPICE's gmb is no slope.
    inside = SQUARE.report(p, v)
    assume(float(inside["VDS'"]) * sign * (v[0] - v[2]) >= 0.0)
    whole, apart = SQUARE.linearize(p, v), SQUARE.separate(p)
    pick = np.zeros((6, 4 + int(apart.sum())))
    pick[:4, :4] = np.eye(4)
    free = 4
    for inner, outer, own in ((4, 0, apart[0]), (5, 2, apart[1])):
        pick[inner, free if own else outer] = 1.0
        free += int(own)
    matrix = pick.T @ whole @ pick
    near, far = matrix[4:, 4:], matrix[:4, 4:]
    reduced = matrix[:4, :4] - far @ np.linalg.solve(near, matrix[4:, :4])
    jacobian = SQUARE.evaluate(p, v).jacobian
    scale = float(np.abs(matrix).max())
    assert reduced == pytest.approx(jacobian, rel=1e-6, abs=1e-9 * scale)


def test_rows_with_and_without_resistances_and_junctions_are_what_each_is_alone() -> None:
    sets = (
        ALL_EFFECTS,
        effects_under(["no-series-resistance"]),
        effects_under(["no-bulk-junctions"]),
        effects_under(["no-series-resistance", "no-bulk-junctions"]),
    )
    card = {"rd": 300.0, "rs": 100.0, **JUNCTIONS}
    together = prepared(card, on={e: np.array([[e in on] for on in sets]) for e in Effect}, **AREAS)
    v = np.broadcast_to(at(4.0, 3.0, 0.0, 0.7), (4, 1, 4))
    for row, on in enumerate(sets):
        alone = prepared(card, on={e: e in on for e in Effect}, **AREAS)
        assert SQUARE.evaluate(together, v).currents[row, 0] == pytest.approx(
            SQUARE.evaluate(alone, v[row, 0]).currents, rel=1e-12, abs=1e-27
        )
        assert SQUARE.linearize(together, v)[row, 0] == pytest.approx(
            SQUARE.linearize(alone, v[row, 0]), rel=1e-9, abs=1e-27
        )
        assert SQUARE.capacitances(together, v)[row, 0] == pytest.approx(
            SQUARE.capacitances(alone, v[row, 0]), rel=1e-9, abs=1e-30
        )
        assert SQUARE.separate(together)[row, 0].tolist() == SQUARE.separate(alone).tolist()


# --- Newton's limits, and the solver that knows nothing of all this ---


def test_a_step_into_deep_conduction_is_pulled_back_by_the_logarithm() -> None:
    p = prepared({})
    pulled = SQUARE.limit(p, at(5, 0, 0, 0.6), at(5, 0, 0, 3.0))
    assert pulled[3] == pytest.approx(0.6 + UT * math.log(1.0 + 2.4 / UT), rel=1e-9)
    first = SQUARE.limit(p, at(5, 0, 0, 0.0), at(5, 0, 0, 3.0))
    assert first[3] == pytest.approx(UT * math.log(3.0 / UT), rel=1e-9)
    assert pulled[:3].tolist() == [5.0, 0.0, 0.0]


def test_a_junction_in_reverse_or_behind_a_resistance_is_left_alone() -> None:
    for new in (at(5, 0, 0, -20.0), at(5, 0, 0, 0.3)):
        assert SQUARE.limit(prepared({}), at(5, 0), new).tolist() == new.tolist()
    behind = prepared({"rd": 10.0, "rs": 10.0})
    assert SQUARE.limit(behind, at(5, 0), at(5, 0, 0, 3.0)).tolist() == [5.0, 0.0, 0.0, 3.0]
    left_out = prepared({}, on={e: e is not Effect.BULK_JUNCTIONS for e in Effect})
    assert SQUARE.limit(left_out, at(5, 0), at(5, 0, 0, 3.0)).tolist() == [5.0, 0.0, 0.0, 3.0]


NETWORKS = {
    "bulk driven into conduction": "vdd d 0 5\nvg g 0 1.5\nvb x 0 3\nrb x b 10k\nm1 d g 0 b nm w=20u l=2u\n",
    "drain pulled below ground": "vdd x 0 -5\nrd x d 1k\nvg g 0 2\nm1 d g 0 0 nm w=20u l=2u\n",
    "source pulled below the bulk": "vdd d 0 5\nvss x 0 -8\nrs x s 1k\nvg g 0 0\nm1 d g s 0 nm w=20u l=2u\n",
    "p-channel with its bulk at ground": "vdd s 0 5\nvg g 0 2\nrd d 0 1k\nrb b 0 47k\n"
    "m1 d g s b pm w=20u l=2u\n",
    "resistances and a driven bulk": "vdd d 0 5\nvg g 0 1.5\nvb b 0 2\nm1 d g 0 b nr w=20u l=2u\n",
    "a free bulk": "vdd d 0 5\nvg g 0 1.5\nm1 d g 0 b nm w=20u l=2u\n",
}
MODELS = """.model nm nmos level=1 vto=0.7 kp=100u gamma=0.4 phi=0.65 lambda=0.02
.model pm pmos level=1 vto=-0.7 kp=40u gamma=0.4 phi=0.65 lambda=0.02
.model nr nmos level=1 vto=0.7 kp=100u gamma=0.4 phi=0.65 rd=200 rs=100
"""


@pytest.mark.parametrize("name", NETWORKS)
def test_newton_finds_the_bias_of_forward_junctions_from_a_cold_start(name: str) -> None:
    point = solve_bias(read_flat("t\n" + MODELS + NETWORKS[name]), Batch((ALL_EFFECTS,)))
    assert point.converged.all()
    assert float(point.residual[0]) < 1e-12
    assert np.abs(point.unknowns).max() < 20.0


def test_inner_nodes_are_unknowns_at_small_signal_and_no_nodes_of_the_circuit() -> None:
    """A source resistance in the card is a resistor at the source: the same gain, at any frequency."""
    stage = "vdd vdd 0 9\nvin g 0 1.2 ac 1\nrd vdd d {rd}\n{rs}m1 d g {s} {s} nx w=50u l=2u ad=1n as=1n\n"
    model = ".model nx nmos level=1 vto=0.7 kp=100u gamma=0.4 lambda=0.02 tox=20n cgso=1n cgdo=1n cj=1m {r}\n"
    inside = read_flat("t\n" + (stage + model).format(rd="10k", rs="", s="0", r="rd=500 rs=300"))
    frequencies = [10.0, 1e6, 1e8, 1e10]
    small = linearize(inside, Ports("vin", "d"), solve_bias(inside, Batch((ALL_EFFECTS,))))
    assert small.system().layout.nodes == (*inside.nodes, "m1 d'", "m1 s'")
    assert {node for _, nodes, _ in small.device_capacitors for node in nodes} == {
        "g",
        "m1 d'",
        "m1 s'",
        GROUND,
    }
    gain = transfer(small, small.system(), frequencies)
    drawn = read_flat(
        "t\nvdd vdd 0 9\nvin g 0 1.2 ac 1\nrd vdd d 10k\nrdx d di 500\nrsx si 0 300\n"
        "m1 di g si 0 nx w=50u l=2u ad=1n as=1n\n" + model.format(r="")
    )
    other = linearize(drawn, Ports("vin", "d"), solve_bias(drawn, Batch((ALL_EFFECTS,))))
    assert gain == pytest.approx(transfer(other, other.system(), frequencies), rel=1e-9)
    without = Batch((effects_under(["no-series-resistance"]),))
    plain = linearize(inside, Ports("vin", "d"), solve_bias(inside, without))
    assert plain.system().layout.nodes == inside.nodes
    assert abs(transfer(plain, plain.system(), [10.0])[0]) > 1.1 * abs(gain[0])
