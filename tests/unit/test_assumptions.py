"""The table of assumptions: fixed slugs, two sets, single ones added and dropped."""

from __future__ import annotations

import re

import pytest

from deckgen.assumptions import ASSUMPTIONS, assumptions_made

PAPER = (
    "no-channel-length-modulation",
    "no-series-resistance",
    "no-bulk-junctions",
    "ideal-coupling",
    "no-device-capacitances",
    "no-load-capacitances",
    "time-constant-bandwidth",
)


def test_the_slugs_are_a_contract() -> None:
    assert tuple(ASSUMPTIONS) == (
        "no-channel-length-modulation",
        "no-output-resistance",
        "no-body-effect",
        "no-series-resistance",
        "no-bulk-junctions",
        "ideal-coupling",
        "no-device-capacitances",
        "no-load-capacitances",
        "time-constant-bandwidth",
    )


def test_every_assumption_has_a_name_and_a_meaning() -> None:
    for slug, assumption in ASSUMPTIONS.items():
        assert assumption.slug == slug
        assert re.fullmatch(r"[a-z]+(-[a-z]+)+", slug)
        assert assumption.name
        assert assumption.meaning


def test_paper_neglects_what_is_neglected_on_paper_and_full_neglects_nothing() -> None:
    assert assumptions_made("paper") == PAPER
    assert assumptions_made("full") == ()


def test_single_assumptions_are_added_and_dropped() -> None:
    assert assumptions_made("full", add=["no-body-effect"]) == ("no-body-effect",)
    assert assumptions_made("paper", drop=["ideal-coupling"]) == tuple(
        s for s in PAPER if s != "ideal-coupling"
    )
    added = assumptions_made("paper", add=["no-body-effect", "no-output-resistance"])
    assert set(added) == {*PAPER, "no-body-effect", "no-output-resistance"}


def test_what_is_dropped_stays_dropped() -> None:
    assert assumptions_made("full", add=["no-body-effect"], drop=["no-body-effect"]) == ()


def test_an_unknown_set_or_slug_is_refused_with_those_known() -> None:
    with pytest.raises(ValueError, match="'exact' is not an assumption set; known: paper, full"):
        assumptions_made("exact")
    with pytest.raises(ValueError, match="'no-lambda' is not an assumption; known: no-channel-length"):
        assumptions_made("paper", add=["no-lambda"])
    with pytest.raises(ValueError, match="'no-lambda' is not an assumption"):
        assumptions_made("paper", drop=["no-lambda"])
