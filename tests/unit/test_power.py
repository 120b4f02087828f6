"""Supply power: what the sources that deliver deliver, whatever a bias current takes up."""

from __future__ import annotations

import pytest

from deckgen.assumptions import assumptions_made
from deckgen.circuit.reader import read_flat
from deckgen.hand.predict import predict

MODEL = ".model nm nmos level=1 vto=0.8 kp=100u"


def power(cards: str) -> float:
    found = predict(read_flat(f"t\n{MODEL}\n{cards}"), None, assumptions=assumptions_made("paper"))
    value = found.value("Psupply")
    assert value is not None
    assert value.value is not None
    return value.value


@pytest.mark.parametrize("sink", ["is s 0 1m", "rs s 0 {r}"])
def test_a_current_sink_costs_what_a_resistor_of_the_same_current_costs(sink: str) -> None:
    """VGS = 0.8 + sqrt(2·1 mA/20 mA/V²) V at 1 mA, so the source sits at 2.884 V."""
    r = (4.0 - 0.8 - (2e-3 / 20e-3) ** 0.5) / 1e-3
    cards = "vdd vdd 0 10\nvg g 0 4\nrd vdd d 2k\nm1 d g s 0 nm w=200u l=1u\n" + sink.format(r=r)
    assert power(cards) == pytest.approx(10e-3, rel=1e-9)


def test_a_current_source_that_delivers_counts() -> None:
    """1 mA into a diode of 20 mA/V²: the source delivers VGS·1 mA."""
    v_gs = 0.8 + (2e-3 / 20e-3) ** 0.5
    assert power("ib 0 d 1m\nm1 d d 0 0 nm w=200u l=1u") == pytest.approx(1e-3 * v_gs, rel=1e-9)


def test_both_halves_of_a_dual_supply_count() -> None:
    cards = "vdd vdd 0 5\nvss vss 0 -5\nvg g 0 0\nrd vdd d 1k\nrs s vss 3k\nm1 d g s vss nm w=200u l=1u"
    found = predict(read_flat(f"t\n{MODEL}\n{cards}"), None, assumptions=assumptions_made("paper"))
    i_d = found.value("ID(M1)").value
    assert power(cards) == pytest.approx(10.0 * i_d, rel=1e-9)
