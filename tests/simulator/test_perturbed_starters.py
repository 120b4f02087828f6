"""Stages near every topology's starter: nothing left out by hand, hand and ngspice agree.

Each stage has a random set of optional parts, and every value of parts, transistor and model up to 20 %
away from the starter's. Under the full assumption set the tolerances are 0.1 % to 0.2 %, wherever the
transistor ends up.
"""

from __future__ import annotations

import random
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import pytest

from deckgen.comparison import Comparison, Row, Verdict
from deckgen.errors import Outcome
from deckgen.intake import from_template
from deckgen.pipeline import CheckSettings, analyse, check_taken
from deckgen.simulator import Simulator
from deckgen.stage.model import HandSettings, Stage
from deckgen.stage.topology import list_topologies, load_topology
from tests.unit.variants import POLARITIES, part_sets, variant

SPREAD = 0.2


def near_starter(name: str, number: int) -> Stage:
    """The stage of that number: the same each time, its polarities in turn."""
    chosen = random.Random(f"{name} {number}")
    polarity = POLARITIES[number % 2]
    sets = list(part_sets(load_topology(name)))
    stage = variant(name, polarity, chosen.choice(sets), bulk=chosen.choice(["rail", "source"]))

    def spread(value: float) -> float:
        return value * chosen.uniform(1.0 - SPREAD, 1.0 + SPREAD)

    (m1,), (model,) = stage.transistors, stage.models
    return replace(
        stage,
        parts=tuple(replace(part, value=spread(part.value)) for part in stage.parts),
        transistors=(replace(m1, w=spread(m1.w), l=spread(m1.l)),),
        models=(replace(model, parameters=tuple((key, spread(value)) for key, value in model.parameters)),),
        hand=HandSettings("full"),
    )


def stating_its_region(stage: Stage) -> Stage:
    """The stage with the region stated that the transistor is in by hand, so that all is compared."""
    (m1,) = analyse(stage).prediction.transistors
    return replace(stage, regions=((m1.name, m1.region.value),))


def disagrees(row: Row, comparison: Comparison) -> bool:
    """Whether a row is a gap, or not compared without need.

    Cut off, a stage has no pass-band, so nothing is taken from the hand curve at a stated mid-band.
    """
    if row.verdict is Verdict.NOT_COMPARED and comparison.transistors[0].region == "cut-off":
        return "outside the pass-band" not in (row.reason or "")
    return row.verdict not in (Verdict.WITHIN, Verdict.ABSENT)


@pytest.mark.parametrize("name", list_topologies())
def test_hand_and_simulator_agree_near_every_starter(
    name: str, simulator: Simulator, count: Callable[[int, int], int]
) -> None:
    for number in range(count(4, 100)):
        stage = stating_its_region(near_starter(name, number))
        taken = from_template(stage)
        comparison = check_taken(
            Path("near.toml"), taken, simulator=simulator, settings=CheckSettings(keep=False)
        )
        assert comparison.outcome is Outcome.MEASURED, f"{comparison.meaning}\n{taken.netlist}"
        wrong = [row for row in comparison.quantities if disagrees(row, comparison)]
        assert not wrong, f"{name}, number {number}: {wrong}\n{taken.netlist}"
