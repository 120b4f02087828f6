"""What sets the band edges: rows of time constants, their sums, and where these leave their range."""

from __future__ import annotations

import math

import pytest

from deckgen.assumptions import assumptions_made
from deckgen.circuit.model import Circuit
from deckgen.circuit.ports import Ports
from deckgen.circuit.reader import read_flat
from deckgen.hand import response
from deckgen.hand.predict import predict
from deckgen.hand.prediction import BandEdge, HalfPlane, Prediction, TimeConstantKind, TimeConstantRow
from tests.unit.circuits import Values, ports_of, stage

SHORT, OPEN = TimeConstantKind.SHORT_CIRCUIT, TimeConstantKind.OPEN_CIRCUIT
PAPER = assumptions_made("paper")


def of(circuit: Circuit, ports: Ports, *, frequency: float | None = None) -> Prediction:
    return predict(circuit, ports, assumptions=PAPER, frequency=frequency)


def network(cards: str, *, frequency: float | None = None) -> Prediction:
    return of(read_flat(f"t\nvin in 0 0 ac 1\n{cards}"), Ports("vin", "out"), frequency=frequency)


def of_stage(v: Values) -> Prediction:
    return of(stage(v), ports_of(v))


def edge(prediction: Prediction, quantity: str) -> BandEdge:
    (found,) = (one for one in prediction.band_edges if one.quantity == quantity)
    return found


def row(prediction: Prediction, name: str) -> TimeConstantRow:
    (found,) = (one for one in prediction.time_constants if one.name == name)
    return found


# --- rows ---


def test_each_capacitor_has_a_row_of_its_kind_with_the_largest_share_first() -> None:
    found = of_stage(Values())
    assert [one.name for one in found.constants(SHORT)] == ["CS", "COUT", "CIN"]
    assert [one.name for one in found.constants(OPEN)] == ["CL", "Cgd(M1)", "Cgs(M1)"]
    for kind in TimeConstantKind:
        shares = [one.share for one in found.constants(kind)]
        assert None not in shares
        assert sum(share for share in shares if share is not None) == pytest.approx(1.0, rel=1e-12)
        assert shares == sorted(shares, key=lambda share: -(share or 0.0))


def test_a_row_is_resistance_times_capacitance_and_its_frequency() -> None:
    v = Values()
    found = row(of_stage(v), "CIN")
    assert v.rsig is not None
    seen = v.rsig + 1.0 / (1.0 / v.r1 + 1.0 / v.r2)
    assert found.capacitance == v.cin
    assert found.resistance == pytest.approx(seen, rel=1e-12)
    assert found.tau == pytest.approx(seen * v.cin, rel=1e-12)
    assert found.frequency == pytest.approx(1.0 / (2.0 * math.pi * seen * v.cin), rel=1e-12)


def test_the_sums_are_the_hand_values_and_the_exact_ones_stand_beside_them() -> None:
    found = of_stage(Values())
    assert found.mid_band is not None
    exact = {"fL": found.mid_band.exact_f_l, "fH": found.mid_band.exact_f_h}
    for quantity in ("fL", "fH"):
        hand = found.value(quantity)
        assert hand is not None
        assert edge(found, quantity).estimate == pytest.approx(hand.value, rel=1e-9)
        assert edge(found, quantity).exact == exact[quantity]


def test_miller_stands_beside_where_the_working_has_it() -> None:
    found = of_stage(Values())
    (step,) = (one for one in found.working if one.symbol == response.MILLER)
    assert edge(found, "fH").miller == step.value
    assert edge(found, "fL").miller is None
    assert edge(of_stage(Values(follower=True)), "fH").miller is None


def test_capacitors_in_subcircuits_carry_their_names_from_the_inside_out() -> None:
    found = of(
        read_flat(
            "t\nvdd vdd 0 5\nvin in 0 1.5 ac 1\nrg in x1.g 10k\nrd vdd out 1k\n"
            "m.x1.m1 out x1.g 0 0 nm w=100u l=2u\nc.x1.c1 out 0 1p\n"
            ".model nm nmos level=1 vto=0.8 kp=100u lambda=0.02 cgso=0.3n cgdo=0.3n\n"
        ),
        Ports("vin", "out"),
    )
    assert {one.name for one in found.time_constants} == {"C1@X1", "Cgs(M1@X1)", "Cgd(M1@X1)"}


def test_a_bootstrapped_capacitor_is_shown_last_with_its_negative_share() -> None:
    found = network("r0 in out 1k\nc1 out 0 1u\ne1 b 0 out 0 3\nc2 out b 100n\n")
    assert [one.name for one in found.time_constants] == ["C1", "C2"]
    across = row(found, "C2")
    assert across.resistance == pytest.approx(-2e3, rel=1e-12)
    assert across.tau == pytest.approx(-2e-4, rel=1e-12)
    assert across.frequency == pytest.approx(-1.0 / (2.0 * math.pi * 2e-4), rel=1e-12)
    assert across.share == pytest.approx(-0.25, rel=1e-12)
    assert row(found, "C1").share == pytest.approx(1.25, rel=1e-12)
    assert "bootstrapped, sees a negative resistance: C2" in edge(found, "fH").notes


def test_where_bootstrapping_outweighs_all_there_is_no_sum_and_no_share() -> None:
    found = network("r0 in out 1k\nc1 out 0 1u\ne1 b 0 out 0 3\nc2 out b 1u\n")
    assert edge(found, "fH").estimate is None
    assert {one.share for one in found.time_constants} == {None}
    (pole,) = found.poles
    assert pole.half_plane is HalfPlane.RIGHT


def test_a_capacitor_across_a_source_sees_nothing_and_sets_nothing() -> None:
    found = network("r0 in out 1k\nc1 out 0 1u\nc2 in 0 1u\n")
    held = row(found, "C2")
    assert held.resistance == pytest.approx(0.0, abs=1e-12)
    assert held.frequency is None
    assert held.share == pytest.approx(0.0, abs=1e-12)


# --- where there is nothing ---


def test_an_edge_that_an_inductor_sets_says_so() -> None:
    found = network("r0 in out 1k\nl1 out 0 1m\n")
    assert edge(found, "fL").notes == ("no capacitor sets it: an inductor does",)
    assert edge(found, "fL").estimate is None
    assert edge(found, "fL").exact == pytest.approx(1e6 / (2.0 * math.pi), rel=1e-3)
    assert found.time_constants == ()


def test_without_capacitors_there_is_nothing_to_say() -> None:
    found = network("r0 in out 1k\nr1 out 0 1k\n")
    assert (found.poles, found.zeros, found.time_constants, found.band_edges) == ((), (), (), ())


def test_without_gain_nothing_sets_an_edge_but_natural_frequencies_are_told() -> None:
    found = network("r0 in 0 1k\nr1 out 0 1k\nc1 out 0 1u\n")
    assert found.band_edges == ()
    assert found.poles == ()
    assert [round(root.frequency, 3) for root in found.hidden_poles] == [159.155]


def test_far_outside_the_pass_band_nothing_is_said_to_set_an_edge() -> None:
    found = network("r0 in out 1k\nc1 out 0 1u\n", frequency=1e6)
    assert found.band_edges == ()
    assert len(found.poles) == 1


def test_poles_that_can_not_be_resolved_are_a_note(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(response, "poles_and_zeros", lambda *_: None)
    found = of_stage(Values())
    assert response.UNRESOLVED in found.notes
    assert found.poles == ()
    assert found.band_edges


def test_a_bias_alone_has_no_response() -> None:
    found = predict(stage(Values()), None, assumptions=PAPER)
    assert (found.poles, found.time_constants, found.band_edges) == ((), (), ())


# --- ranges ---


def sections(*capacitances: str) -> str:
    """Low-pass sections of 1 kΩ, each behind a buffer."""
    cards, node = [], "in"
    for number, value in enumerate(capacitances):
        held = "out" if number == len(capacitances) - 1 else f"b{number}"
        cards += [
            f"r{number} {node} a{number} 1k",
            f"c{number} a{number} 0 {value}",
            f"e{number} {held} 0 a{number} 0 1",
        ]
        node = held
    return "\n".join(cards) + "\n"


@pytest.mark.parametrize(
    ("second", "third", "dominant"), [("1u", "0.99u", True), ("1u", "1.01u", False)], ids=["50.3 %", "49.8 %"]
)
def test_below_half_of_the_sum_no_time_constant_dominates(second: str, third: str, dominant: bool) -> None:
    found = network(sections("2u", second, third))
    share = found.time_constants[0].share
    assert share is not None
    assert (share >= 0.5) is dominant
    told = [note for note in edge(found, "fH").notes if note.startswith("no time constant dominates")]
    expected = f"no time constant dominates: the largest is {100.0 * share:.3g} % of the sum"
    assert told == ([] if dominant else [expected])


@pytest.mark.parametrize(("second", "close"), [("0.2n", True), ("1n", False)])
def test_a_sum_more_than_a_tenth_off_the_exact_value_is_told(second: str, close: bool) -> None:
    found = edge(network(sections("2n", second)), "fH")
    assert found.estimate is not None
    assert found.exact is not None
    off = found.estimate / found.exact - 1.0
    assert (abs(off) <= response.CLOSE) is close
    told = [note for note in found.notes if "exact" in note]
    expected = f"the sum of time constants is {-100.0 * off:.0f} % below the exact value"
    assert told == ([] if close else [expected])
