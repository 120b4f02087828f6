"""The square law: values of its regions, derivatives, effects switched per row, and the axes of a batch."""

from __future__ import annotations

import itertools
import math
from typing import Any

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from deckgen.circuit.model import Circuit, Mosfet
from deckgen.constants import OXIDE_PERMITTIVITY
from deckgen.hand.batch import SQUARE, Batch, prepare_devices
from deckgen.hand.effects import ALL_EFFECTS, LEFT_OUT_BY, Effect, effects_under
from deckgen.hand.laws.base import Array
from deckgen.hand.laws.parameters import SquareParameters
from deckgen.hand.laws.square import CAPACITORS, DEFAULTS
from tests.unit.circuits import card

ROOM = 300.15
CHANNEL = ALL_EFFECTS - {Effect.BULK_JUNCTIONS}
ON = {effect: effect in CHANNEL for effect in Effect}
"""Most tests here are about the channel; its junctions have tests of their own."""

PLAIN = {"vto": 0.7, "kp": 1e-4, "lambda": 0.02, "gamma": 0.4, "phi": 0.65}
W, L = 50e-6, 2e-6
K = 1e-4 * W / L


def prepared(
    parameters: dict[str, float] | None = None, *, sign: float = 1.0, on: Any = ON, **geometry: float
) -> SquareParameters:
    """Parameters of one device, or of one per row where ``on`` has arrays; thresholds as on the card."""
    values = dict(PLAIN if parameters is None else parameters)
    if sign < 0 and "vto" in values:
        values["vto"] = -values["vto"]
    temperature = geometry.pop("temperature", ROOM)
    tnom = geometry.pop("tnom", ROOM)
    size = {"w": W, "l": L, "m": 1.0, **geometry}
    return SQUARE.prepare(values, sign=sign, temperature=temperature, tnom=tnom, on=on, **size)


def at(d: float, g: float, s: float = 0.0, b: float = 0.0) -> Array:
    return np.array([d, g, s, b], float)


def small(p: SquareParameters, v: Array) -> Array:
    """Conductances between the four outer terminals of a device without series resistances."""
    whole = SQUARE.linearize(p, v)
    assert not SQUARE.separate(p).any()
    pick = np.eye(4)[[0, 1, 2, 3, 0, 2]]
    return pick.T @ whole @ pick


def gate(p: SquareParameters, v: Array) -> Array:
    """Cgs, Cgd, Cgb."""
    return SQUARE.capacitances(p, v)[..., :3]


def drain_current(p: SquareParameters, v: Array) -> float:
    return float(SQUARE.evaluate(p, v).currents[..., 0])


# --- values, by formulas written here once more ---

VTH_AT_1V = 0.7 + 0.4 * (math.sqrt(1.65) - math.sqrt(0.65))
REGIONS = [
    # name, voltages, ID, gm, gds
    ("cut-off", at(5, 0.5), 0.0, 0.0, 0.0),
    ("saturation", at(5, 1.7), 0.5 * K * 1.1, K * 1.1, 0.02 * 0.5 * K),
    (
        "triode",
        at(0.4, 1.7),
        K * (0.4 - 0.08) * 1.008,
        K * 0.4 * 1.008,
        K * 0.6 * 1.008 + 0.02 * K * 0.32,
    ),
    ("edge of saturation", at(1.0, 1.7), 0.5 * K * 1.02, K * 1.02, 0.02 * 0.5 * K),
]


@pytest.mark.parametrize(("v", "current", "gm", "gds"), [r[1:] for r in REGIONS], ids=[r[0] for r in REGIONS])
@pytest.mark.parametrize("sign", [1.0, -1.0], ids=["n", "p"])
def test_current_and_conductances_are_those_of_the_region(
    sign: float, v: Array, current: float, gm: float, gds: float
) -> None:
    report = SQUARE.report(prepared(sign=sign), sign * v)
    assert float(report["ID"]) == pytest.approx(current, rel=1e-12, abs=1e-30)
    assert float(report["gm"]) == pytest.approx(gm, rel=1e-12, abs=1e-30)
    assert float(report["gds"]) == pytest.approx(gds, rel=1e-12, abs=1e-30)
    assert float(report["gmb"]) == pytest.approx(gm * 0.4 / (2 * math.sqrt(0.65)), rel=1e-12, abs=1e-30)


@pytest.mark.parametrize("sign", [1.0, -1.0], ids=["n", "p"])
def test_voltages_are_reported_with_their_true_signs_and_the_overdrive_without(sign: float) -> None:
    report = SQUARE.report(prepared(sign=sign), sign * at(5.0, 3.0, 1.0, 0.0))
    found = {name: float(report[name]) for name in ("VGS", "VDS", "VTH", "VOV")}
    assert found["VGS"] == pytest.approx(sign * 2.0)
    assert found["VDS"] == pytest.approx(sign * 4.0)
    assert found["VTH"] == pytest.approx(sign * VTH_AT_1V, rel=1e-12)
    assert found["VOV"] == pytest.approx(2.0 - VTH_AT_1V, rel=1e-12)
    assert float(report["ID"]) > 0.0
    assert float(SQUARE.report(prepared(sign=sign), sign * at(5.0, 1.2, 1.0, 0.0))["VOV"]) < 0.0


def test_a_bulk_above_the_source_follows_the_tangent_until_that_ends() -> None:
    p = prepared()
    root = math.sqrt(0.65)
    for v_bs, expected in [(0.2, 0.7 - 0.4 * 0.2 / (2 * root)), (3.0, 0.7 - 0.4 * root)]:
        assert float(SQUARE.report(p, at(5, 2, 0, v_bs))["VTH"]) == pytest.approx(expected, rel=1e-12)
    assert float(SQUARE.report(p, at(5, 2, 0, 3.0))["gmb"]) == pytest.approx(0.0, abs=1e-30)


# --- derivatives and symmetries, anywhere ---

VOLT = st.floats(-6.0, 6.0)
PARAMETERS = st.fixed_dictionaries(
    {
        "vto": st.floats(-2.0, 2.0),
        "kp": st.floats(1e-6, 1e-3),
        "lambda": st.floats(0.0, 0.3),
        "gamma": st.floats(0.0, 1.2),
        "phi": st.floats(0.3, 1.0),
    }
)
SIGN = st.sampled_from([1.0, -1.0])


@settings(max_examples=150)
@given(PARAMETERS, SIGN, VOLT, VOLT, VOLT, VOLT)
def test_the_jacobian_is_the_derivative_of_the_currents(
    parameters: dict[str, float], sign: float, d: float, g: float, s: float, b: float
) -> None:
    p, v, h = prepared(parameters, sign=sign), at(d, g, s, b), 1e-6
    low = sign * min(sign * d, sign * s)
    # At the end of the tangent the threshold has a kink: no derivative to compare with.
    assume(abs(sign * (low - b) + 2.0 * parameters["phi"]) > 1e-3)
    jacobian = SQUARE.evaluate(p, v).jacobian
    scale = float(p.k) * 20.0 * (1.0 + parameters["lambda"] * 12.0) * (1.0 + parameters["gamma"])
    for terminal in range(4):
        step = h * np.eye(4)[terminal]
        rise = SQUARE.evaluate(p, v + step).currents - SQUARE.evaluate(p, v - step).currents
        assert jacobian[:, terminal] == pytest.approx(rise / (2 * h), abs=1e-5 * scale)


@given(PARAMETERS, SIGN, VOLT, VOLT, VOLT, VOLT)
def test_currents_sum_to_nothing_and_only_differences_of_voltages_count(
    parameters: dict[str, float], sign: float, d: float, g: float, s: float, b: float
) -> None:
    found = SQUARE.evaluate(prepared(parameters, sign=sign), at(d, g, s, b))
    scale = float(np.abs(found.jacobian).max()) * 1e-12 + 1e-30
    assert float(found.currents.sum()) == pytest.approx(0.0, abs=1e-30)
    assert found.currents[1] == pytest.approx(0.0, abs=1e-30)
    assert found.currents[3] == pytest.approx(0.0, abs=1e-30)
    assert found.jacobian.sum(axis=1) == pytest.approx(np.zeros(4), abs=scale)
    assert found.jacobian.sum(axis=0) == pytest.approx(np.zeros(4), abs=scale)


@given(PARAMETERS, VOLT, VOLT, VOLT, VOLT)
def test_a_p_channel_device_is_the_mirror_of_an_n_channel_one(
    parameters: dict[str, float], d: float, g: float, s: float, b: float
) -> None:
    n = SQUARE.evaluate(prepared(parameters), at(d, g, s, b))
    p = SQUARE.evaluate(prepared(parameters, sign=-1.0), at(-d, -g, -s, -b))
    assert p.currents == pytest.approx(-n.currents, rel=1e-12, abs=1e-30)
    assert p.jacobian == pytest.approx(n.jacobian, rel=1e-12, abs=1e-30)


@given(PARAMETERS, SIGN, VOLT, VOLT, VOLT, VOLT)
def test_drain_and_source_can_be_exchanged(
    parameters: dict[str, float], sign: float, d: float, g: float, s: float, b: float
) -> None:
    p = prepared(parameters, sign=sign)
    assert drain_current(p, at(d, g, s, b)) == pytest.approx(-drain_current(p, at(s, g, d, b)), abs=1e-30)


def test_with_drain_below_source_the_current_turns_and_the_names_stay() -> None:
    report = SQUARE.report(prepared(), at(0.0, 3.0, 0.5, 0.0))
    assert float(report["ID"]) == pytest.approx(-drain_current(prepared(), at(0.5, 3.0, 0.0, 0.0)))
    assert float(report["ID"]) < 0.0
    assert float(report["VDS"]) == pytest.approx(-0.5)
    # VTH and VOV stay those of the terminal that is called source.
    assert float(report["VTH"]) == pytest.approx(0.7 + 0.4 * (math.sqrt(1.15) - math.sqrt(0.65)))


@pytest.mark.parametrize("edge", ["cut-off", "saturation", "exchange", "bulk"])
@pytest.mark.parametrize("sign", [1.0, -1.0], ids=["n", "p"])
def test_current_and_conductances_are_continuous_at_the_edges_of_regions(edge: str, sign: float) -> None:
    p, e = prepared(sign=sign), 1e-9
    sides = {
        "cut-off": (at(2, 0.7 - e), at(2, 0.7 + e)),
        "saturation": (at(1.0 - e, 1.7), at(1.0 + e, 1.7)),
        "exchange": (at(-e, 1.7), at(e, 1.7)),
        "bulk": (at(2, 2, 0, -e), at(2, 2, 0, e)),
    }[edge]
    low, high = (SQUARE.evaluate(p, sign * side) for side in sides)
    assert low.currents == pytest.approx(high.currents, abs=10 * K * e)
    assert low.jacobian == pytest.approx(high.jacobian, abs=10 * K * e)
    c_low, c_high = (gate(_thick(sign), sign * side) for side in sides)
    assert c_low == pytest.approx(c_high, abs=1e-6 * float(c_low.max()))


# --- effects, switched per row ---


def rows(*switched: frozenset[Effect]) -> dict[Effect, Any]:
    return {effect: np.array([[effect in on] for on in switched]) for effect in Effect}


WITHOUT_LAMBDA = CHANNEL & effects_under(["no-channel-length-modulation"])
WITHOUT_RO = CHANNEL & effects_under(["no-channel-length-modulation", "no-output-resistance"])
WITHOUT_BODY = CHANNEL & effects_under(["no-body-effect"])
Q = np.broadcast_to(at(5.0, 3.0, 1.0, 0.0), (4, 1, 4))


def test_each_row_has_the_effects_switched_on_in_it() -> None:
    p = prepared(on=rows(CHANNEL, WITHOUT_LAMBDA, WITHOUT_RO, WITHOUT_BODY))
    current = SQUARE.evaluate(p, Q).currents[:, 0, 0]
    v_ov = 2.0 - VTH_AT_1V
    assert current == pytest.approx(
        0.5 * K * np.array([v_ov**2 * 1.08, v_ov**2, v_ov**2, 1.3**2 * 1.08]), rel=1e-12
    )
    report = {name: value[:, 0] for name, value in SQUARE.report(p, Q).items()}
    assert report["VTH"] == pytest.approx([VTH_AT_1V] * 3 + [0.7], rel=1e-12)
    assert report["gds"] == pytest.approx(
        0.02 * 0.5 * K * np.array([v_ov**2, v_ov**2, 0.0, 1.3**2]), rel=1e-12, abs=1e-30
    )
    assert report["gm"] == pytest.approx(K * np.array([1.08 * v_ov, v_ov, v_ov, 1.3 * 1.08]), rel=1e-12)
    chi = 0.4 / (2 * math.sqrt(1.65))
    assert report["gmb"] == pytest.approx(report["gm"] * np.array([chi, chi, chi, 0.0]), rel=1e-12)


@given(VOLT, VOLT, VOLT, VOLT)
def test_rows_switched_together_are_what_each_is_alone(d: float, g: float, s: float, b: float) -> None:
    sets = (CHANNEL, WITHOUT_LAMBDA, WITHOUT_RO, WITHOUT_BODY)
    v = np.broadcast_to(at(d, g, s, b), (4, 1, 4))
    together = prepared(on=rows(*sets))
    for row, on in enumerate(sets):
        alone = prepared(on={effect: effect in on for effect in Effect})
        for solve in (lambda p, x: SQUARE.evaluate(p, x).currents, small, gate):
            assert solve(together, v)[row, 0] == pytest.approx(solve(alone, v[row, 0]), rel=1e-13, abs=1e-30)


@given(PARAMETERS, SIGN, VOLT, VOLT, VOLT, VOLT)
def test_with_lambda_in_the_bias_the_small_signal_conductances_are_the_jacobian(
    parameters: dict[str, float], sign: float, d: float, g: float, s: float, b: float
) -> None:
    p, v = prepared(parameters, sign=sign), below(sign, d, g, s, b)
    assert small(p, v) == pytest.approx(SQUARE.evaluate(p, v).jacobian, rel=1e-12, abs=1e-30)


def below(sign: float, d: float, g: float, s: float, b: float) -> Array:
    """Voltages with a bulk that is not forward-biased: above that SPICE's gmb is no slope."""
    return at(d, g, s, sign * min(sign * d, sign * s, sign * b))


@pytest.mark.parametrize("sign", [1.0, -1.0], ids=["n", "p"])
def test_with_the_bulk_forward_biased_gmb_is_spices_formula_and_the_jacobian_the_slope(sign: float) -> None:
    p, v = prepared(sign=sign), sign * at(5.0, 2.0, 0.0, 0.2)
    gm = float(SQUARE.report(p, v)["gm"])
    root = math.sqrt(0.65) - 0.2 / (2 * math.sqrt(0.65))
    assert float(SQUARE.report(p, v)["gmb"]) == pytest.approx(gm * 0.4 / (2 * root), rel=1e-12)
    assert small(p, v)[0, 3] == pytest.approx(gm * 0.4 / (2 * root), rel=1e-12)
    slope = gm * 0.4 / (2 * math.sqrt(0.65))
    assert SQUARE.evaluate(p, v).jacobian[0, 3] == pytest.approx(slope, rel=1e-12)


@given(PARAMETERS, SIGN, VOLT, VOLT, VOLT, VOLT)
def test_without_lambda_in_the_bias_ro_is_kept_between_drain_and_source_alone(
    parameters: dict[str, float], sign: float, d: float, g: float, s: float, b: float
) -> None:
    p = prepared(parameters, sign=sign, on={e: e in WITHOUT_LAMBDA for e in Effect})
    v = below(sign, d, g, s, b)
    found = SQUARE.evaluate(p, v)
    extra = parameters["lambda"] * abs(float(found.currents[0]))
    between = extra * np.array([[1, 0, -1, 0], [0] * 4, [-1, 0, 1, 0], [0] * 4])
    assert small(p, v) - found.jacobian == pytest.approx(between, abs=1e-12 * float(p.k) + 1e-30)


def test_where_lambda_acts_in_the_bias_the_output_resistance_can_not_be_left_out_alone() -> None:
    only = CHANNEL & effects_under(["no-output-resistance"])
    p = prepared(on={effect: effect in only for effect in Effect})
    assert small(p, Q[0, 0]) == pytest.approx(SQUARE.evaluate(p, Q[0, 0]).jacobian, rel=1e-12)
    assert float(SQUARE.report(p, Q[0, 0])["gds"]) > 1e-6


def test_every_effect_of_the_law_is_switched_by_an_assumption() -> None:
    assert SQUARE.effects <= set(LEFT_OUT_BY.values()) == ALL_EFFECTS
    assert effects_under([]) == ALL_EFFECTS
    with pytest.raises(KeyError):
        effects_under(["no-such-assumption"])


# --- geometry, capacitances, temperature ---


def test_k_takes_the_width_the_length_less_twice_ld_and_the_number_in_parallel() -> None:
    p = prepared({**PLAIN, "ld": 0.25e-6}, m=3.0)
    assert float(p.k) == pytest.approx(1e-4 * 50 / 1.5 * 3, rel=1e-12)


@pytest.mark.parametrize(
    ("given_", "kp"),
    [
        ({}, 2e-5),
        ({"uo": 500.0}, 2e-5),
        ({"tox": 20e-9}, 600e-4 * OXIDE_PERMITTIVITY / 20e-9),
        ({"tox": 20e-9, "uo": 500.0}, 500e-4 * OXIDE_PERMITTIVITY / 20e-9),
        ({"tox": 20e-9, "uo": 500.0, "kp": 7e-5}, 7e-5),
    ],
)
def test_kp_comes_from_mobility_and_oxide_where_the_card_has_none(
    given_: dict[str, float], kp: float
) -> None:
    assert float(prepared(given_).k) == pytest.approx(kp * W / L, rel=1e-12)
    circuit = Circuit("t", (Mosfet("m1", ("d", "g", "s", "0"), "nm", W, L),), (card(**given_),))
    assert prepare_devices(circuit, Batch((ALL_EFFECTS,))).k[0, 0] == pytest.approx(kp * W / L, rel=1e-12)


C_OX = OXIDE_PERMITTIVITY / 20e-9 * W * L
OVERLAPS = {"cgso": 0.2e-9, "cgdo": 0.3e-9, "cgbo": 0.1e-9}


def _thick(sign: float = 1.0, **more: float) -> SquareParameters:
    return prepared({**PLAIN, "tox": 20e-9, **more}, sign=sign)


@pytest.mark.parametrize(
    ("v", "source", "drain", "bulk"),
    [
        (at(5, 2), 2 / 3, 0.0, 0.0),
        (at(0, 2), 1 / 2, 1 / 2, 0.0),
        (at(1.3, 2), 2 / 3, 0.0, 0.0),
        (at(0.65, 2), 2 / 3 * (1 - 1 / 9), 2 / 3 * (1 - 4 / 9), 0.0),
        (at(5, 0.7), 2 / 3, 0.0, 0.0),
        (at(5, 0.7 - 0.325), 0.0, 0.0, 0.5),
        (at(5, -3.0), 0.0, 0.0, 1.0),
    ],
)
@pytest.mark.parametrize("sign", [1.0, -1.0], ids=["n", "p"])
def test_gate_capacitances_are_meyers_parts_of_the_oxide(
    sign: float, v: Array, source: float, drain: float, bulk: float
) -> None:
    parts = np.array([source, drain, bulk])
    assert gate(_thick(sign), sign * v) == pytest.approx(parts * C_OX, rel=1e-9, abs=1e-30)
    whole = gate(_thick(sign, **OVERLAPS), sign * v)
    expected = parts * C_OX + np.array([0.2e-9 * W, 0.3e-9 * W, 0.1e-9 * L])
    assert whole == pytest.approx(expected, rel=1e-9)
    assert [name for name, _, _ in CAPACITORS] == ["cgs", "cgd", "cgb", "cbd", "cbs"]


def test_exchanged_drain_and_source_exchange_their_capacitances() -> None:
    p = prepared({**PLAIN, "tox": 20e-9, "gamma": 0.0})
    forward, back = gate(p, at(0.5, 2, 0, 0)), gate(p, at(0, 2, 0.5, 0))
    assert back == pytest.approx(forward[[1, 0, 2]], rel=1e-12, abs=1e-30)
    assert forward[0] > 1.2 * forward[1]


def test_without_an_oxide_thickness_only_overlaps_are_left() -> None:
    found = gate(prepared({**PLAIN, **OVERLAPS}), at(5, 2))
    assert found == pytest.approx([0.2e-9 * W, 0.3e-9 * W, 0.1e-9 * L], rel=1e-12)


# `von` at VSB = 0 of cards with vto = ±0.7, phi = 0.65, gamma = 0.4, as ngspice 39.3 printed it. The two
# polarities drift apart: the band gap moves both thresholds the same way.
DRIFT = [
    (-40, 0.7915453, -0.808004),
    (27, 0.7, -0.7),
    (85, 0.6148471, -0.598342),
    (125, 0.5523996, -0.523426),
]


@pytest.mark.parametrize(("celsius", "n", "p"), DRIFT)
def test_the_threshold_drifts_with_temperature_as_in_the_simulator(celsius: int, n: float, p: float) -> None:
    for sign, expected in ((1.0, n), (-1.0, p)):
        device = prepared(sign=sign, temperature=celsius + 273.15)
        found = float(SQUARE.report(device, sign * at(5, 2))["VTH"])
        assert found == pytest.approx(expected, abs=1e-6)


@pytest.mark.parametrize("celsius", [-40.0, 27.0, 125.0])
def test_the_mobility_falls_with_the_power_three_halves(celsius: float) -> None:
    t = celsius + 273.15
    assert float(prepared(temperature=t).k) == pytest.approx(K * (t / ROOM) ** -1.5, rel=1e-12)


@pytest.mark.parametrize("celsius", [-40.0, 0.0, 85.0])
def test_at_the_temperature_of_the_parameters_nothing_moves(celsius: float) -> None:
    t = celsius + 273.15
    p = prepared(temperature=t, tnom=t)
    assert (float(p.k), float(p.vto), float(p.phi)) == pytest.approx((K, 0.7, 0.65), rel=1e-12)


# --- Newton's step limit ---


def test_a_short_step_is_left_alone() -> None:
    p, old = prepared(), at(5, 2, 1, 0)
    for new in (at(5.4, 2.3, 1.2, 0.1), at(4.1, 1.1, 0.9, -0.2)):
        assert SQUARE.limit(p, old, new).tolist() == new.tolist()


def test_a_long_step_of_the_gate_is_pulled_back() -> None:
    limited = SQUARE.limit(prepared(), at(5, 0, 0, 0), at(5, 40, 0, 0))
    assert limited == pytest.approx(at(5, 1.4, 0, 0))


@pytest.mark.parametrize("sign", [1.0, -1.0], ids=["n", "p"])
def test_a_drain_does_not_jump_below_its_source_in_one_step(sign: float) -> None:
    limited = SQUARE.limit(prepared(sign=sign), sign * at(5, 2, 0, 0), sign * at(-4, 2, 0, 0))
    assert limited == pytest.approx(sign * at(-0.5, 2, 0, 0))


# --- the axes of a batch ---


def test_the_rows_of_a_batch_run_over_effects_then_samples_then_temperatures() -> None:
    samples = (
        (("m1", "vto"), np.array([0.6, 0.7, 0.8])),
        (("m1", "w"), np.array([10e-6, 20e-6, 30e-6])),
    )
    batch = Batch((ALL_EFFECTS, WITHOUT_LAMBDA), (300.15, 350.0), samples)
    assert batch.rows == 12
    expected = list(itertools.product([True, False], [0.6, 0.7, 0.8], [300.15, 350.0]))
    switched = batch.switches()[Effect.CHANNEL_LENGTH_MODULATION][:, 0]
    found = zip(switched, batch.overrides("m1")["vto"], batch.row_temperatures(), strict=True)
    assert [(bool(on), float(vto), float(t)) for on, vto, t in found] == expected
    assert batch.overrides("m1")["w"].tolist() == [1e-5, 1e-5, 2e-5, 2e-5, 3e-5, 3e-5] * 2
    assert batch.overrides("m2") == {}
    assert all(column.shape == (12, 1) for column in batch.switches().values())


def test_a_batch_of_one_has_one_row() -> None:
    assert Batch((ALL_EFFECTS,)).rows == 1
    assert Batch((ALL_EFFECTS,)).row_temperatures() == pytest.approx([ROOM])


def test_samples_of_different_lengths_are_refused() -> None:
    with pytest.raises(ValueError, match=r"different lengths: \[2, 3\]"):
        Batch((ALL_EFFECTS,), samples=((("m1", "vto"), np.zeros(2)), (("m1", "kp"), np.zeros(3))))


PAIR = Circuit(
    "t",
    (Mosfet("m1", ("d", "g", "s", "0"), "nm", W, L), Mosfet("m2", ("d", "g", "s", "0"), "pm", 2 * W, L, 2.0)),
    (card(**{**PLAIN, "lam": 0.02}), card("pmos", "pm", vto=-0.9, kp=4e-5, level=1.0)),
)


def test_parameters_have_a_row_axis_and_a_device_axis() -> None:
    batch = Batch((ALL_EFFECTS,), (300.15, 350.0), ((("m2", "vto"), np.array([-0.8, -1.0, -1.2])),))
    p = prepare_devices(PAIR, batch)
    assert p.k.shape == (6, 2)
    assert p.sign[0].tolist() == [1.0, -1.0]
    at_room = p.vto[0::2]
    assert at_room == pytest.approx(np.array([[0.7, 0.8], [0.7, 1.0], [0.7, 1.2]]), rel=1e-12)
    assert p.k[0] == pytest.approx([K, 4e-5 * 2 * W / L * 2.0], rel=1e-12)
    assert p.gamma[0] == pytest.approx([0.4, DEFAULTS["gamma"]])


@pytest.mark.parametrize(
    "key", [("m9", "vto"), ("rd", "value"), ("m1", "vt0"), ("m1", "level"), ("M1", "vto")]
)
def test_samples_of_what_is_not_there_are_refused(key: tuple[str, str]) -> None:
    with pytest.raises(ValueError, match="no such transistor or parameter"):
        prepare_devices(PAIR, Batch((ALL_EFFECTS,), samples=((key, np.zeros(2)),)))
