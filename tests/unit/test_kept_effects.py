"""Which effects stay on although they are left out: the fewest that keep bias and regions."""

from __future__ import annotations

import pytest

from deckgen.circuit.reader import read_flat
from deckgen.errors import NoBiasError
from deckgen.hand.analysis import Analysis, analyse
from deckgen.hand.effects import ALL_EFFECTS, Effect, effects_under

CLM, BODY = Effect.CHANNEL_LENGTH_MODULATION, Effect.BODY_EFFECT
NO_LAMBDA, NO_BODY, NO_RO = "no-channel-length-modulation", "no-body-effect", "no-output-resistance"

MODELS = """.model nm nmos level=1 vto=0.8 kp=100u lambda=0.02 gamma=0.6 phi=0.7
.model pm pmos level=1 vto=-0.9 kp=40u lambda=0.03 gamma=0.5 phi=0.7
"""
SUPPLY = "vdd vdd 0 5\n"
# Two currents meet at node out: at λ = 0 42 µA from above, 45 µA from below.
ACTIVE_LOAD = (
    SUPPLY + "vb b 0 3.6\nvg g 0 1.1\nm1 out g 0 0 nm w=20u l=2u\nm2 out b vdd vdd pm w=16.8u l=2u\n"
)
# VOV = 0.2 V with the source at 1 V, if the threshold did not rise by 0.28 V.
RAISED_SOURCE = "vs s 0 1\nvh h 0 2\nrd vdd d 1k\nm3 d h s 0 nm w=20u l=2u\n"
STAGE = SUPPLY + "vg g 0 1.8\nrd vdd d 5k\nm1 d g 0 0 nm w=20u l=2u\n"


def analysed(cards: str, *left_out: str) -> Analysis:
    return analyse(read_flat("t\n" + MODELS + cards), None, effects_under(left_out), None)


CASES = {
    "an active load needs λ": (
        ACTIVE_LOAD, (NO_LAMBDA,), {CLM},
        "channel-length modulation is kept in the bias: without it M1 would be in another region",
    ),
    "and λ alone, whatever else is left out": (
        ACTIVE_LOAD, (NO_LAMBDA, NO_BODY, NO_RO), {CLM},
        "channel-length modulation is kept in the bias: without it M1 would be in another region",
    ),
    "a raised source needs the body effect": (
        SUPPLY + RAISED_SOURCE, (NO_LAMBDA, NO_BODY), {BODY},
        "body effect is kept in the bias: without it M3 would be in another region",
    ),
    "both together need both": (
        ACTIVE_LOAD + RAISED_SOURCE, (NO_LAMBDA, NO_BODY), {CLM, BODY},
        "channel-length modulation and body effect are kept in the bias: "
        "without them M1, M3 would be in another region",
    ),
    "a current that only λ lets through": (
        "i1 0 d 1m\nvg g 0 1.8\nm1 d g 0 0 nm w=20u l=2u\n", (NO_LAMBDA, NO_BODY), {CLM},
        "channel-length modulation is kept in the bias: without it there is no bias point",
    ),
}  # fmt: skip


@pytest.mark.parametrize("case", CASES)
def test_the_fewest_effects_stay_on_that_keep_bias_and_regions(case: str) -> None:
    cards, left_out, kept, text = CASES[case]
    found = analysed(cards, *left_out)
    assert found.kept_effects == kept
    assert found.kept == text
    assert found.on == effects_under(left_out) | kept
    assert found.bias is not None
    whole = analysed(cards).bias
    assert whole is not None
    if left_out == (NO_LAMBDA,):
        assert found.bias.unknowns == pytest.approx(whole.unknowns, rel=1e-9)


def test_equal_currents_into_a_node_that_nothing_else_holds_are_no_bias() -> None:
    """At λ = 0 any voltage would do: leakage must not decide."""
    equal = ACTIVE_LOAD.replace("w=16.8u", "w=18u")
    found = analysed(equal, NO_LAMBDA)
    assert found.kept_effects == {CLM}
    assert found.kept is not None
    assert found.kept.endswith("without it there is no bias point")


@pytest.mark.parametrize("left_out", [(), (NO_LAMBDA,), (NO_LAMBDA, NO_BODY), (NO_RO,)])
def test_a_stage_with_a_resistor_keeps_none(left_out: tuple[str, ...]) -> None:
    found = analysed(STAGE, *left_out)
    assert found.kept is None
    assert found.kept_effects == frozenset()
    assert found.on == effects_under(left_out)


def test_of_two_stable_points_the_same_is_meant_with_an_effect_and_without() -> None:
    latch = SUPPLY + ("r1 vdd q 23k\nr2 vdd qb 18k\nm1 q qb 0 0 nm w=20u l=2u\nm2 qb q 0 0 nm w=26u l=2u\n")
    assert analysed(latch, NO_LAMBDA).kept is None


def test_without_a_bias_either_way_the_error_says_what_is_wrong() -> None:
    with pytest.raises(NoBiasError, match="a loop of voltage sources"):
        analysed(SUPPLY + "v2 vdd 0 4\nrd vdd d 1k\nrg vdd g 1k\nm1 d g 0 0 nm\n", NO_LAMBDA)


def test_all_effects_on_means_none_to_keep() -> None:
    assert effects_under(()) == ALL_EFFECTS
    assert analysed(ACTIVE_LOAD).kept_effects == frozenset()
