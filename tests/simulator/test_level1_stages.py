"""Stages with all that level 1 has: by hand with nothing left out they are what ngspice simulates.

Independent: the hand values are compared with those of ngspice (39.3 when this was written) by the product
itself, with the tolerances of the full set, 0.1 % in currents and voltages and 0.2 % at the band edges.
"""

from __future__ import annotations

from pathlib import Path

import pytest

from deckgen.comparison import Comparison, Verdict
from deckgen.errors import Outcome
from deckgen.pipeline import CheckSettings, check_stage
from deckgen.simulator import Simulator

DECKS = Path(__file__).resolve().parents[1] / "data" / "decks"

STAGE = """format = 1
title = "Everything that a card can state"
topology = "common-source"

[parts]
VDD = "12 V"
RSIG = "2k"
CIN = "100 nF"
R1 = "1.5Meg"
R2 = "430k"
RD = "8.2k"
RS = "2.2k"
COUT = "1 µF"
RL = "120k"
CL = "10 pF"

[models.NX]
polarity = "n"
NSUB = "2e16"
NSS = "2e10"
TOX = "30n"
UO = "550"
LAMBDA = "0.02"
LD = "0.2u"
CGSO = "0.3n"
CGDO = "0.3n"
CGBO = "0.2n"
RD = "120"
RSH = "60"
JS = "1u"
CJ = "0.4m"
MJ = "0.45"
CJSW = "0.5n"
MJSW = "0.3"
PB = "0.75"
FC = "0.4"

[transistors.M1]
model = "NX"
W = "100u"
L = "3u"
M = 2
AD = "600p"
AS = "600p"
PD = "120u"
PS = "120u"
NRD = "0.2"
NRS = "2"

[signal]
frequency = "3 kHz"

[conditions]
temperature = "85 °C"
tnom = "20 °C"

[hand]
assumptions = "full"
"""

P_CHANNEL = (
    STAGE.replace('polarity = "n"', 'polarity = "p"')
    .replace('R1 = "1.5Meg"', 'R1 = "430k"')
    .replace('R2 = "430k"\nRD', 'R2 = "1.5Meg"\nRD')
    .replace('UO = "550"', 'UO = "220"')
)


def checked(path: Path, simulator: Simulator) -> Comparison:
    found = check_stage(path, simulator=simulator, settings=CheckSettings(keep=False))
    assert found.outcome is Outcome.MEASURED, found
    return found


def assert_all_within(comparison: Comparison, count: int) -> None:
    verdicts = {row.name: row.verdict for row in comparison.quantities}
    assert len(verdicts) >= count
    assert set(verdicts.values()) <= {Verdict.WITHIN, Verdict.ABSENT}, verdicts
    assert comparison.exit_code == 0


@pytest.mark.parametrize("text", [STAGE, P_CHANNEL], ids=["n", "p"])
def test_a_stage_with_everything_is_by_hand_what_it_is_simulated(
    simulator: Simulator, tmp_path: Path, text: str
) -> None:
    file = tmp_path / "everything.toml"
    file.write_text(text, encoding="utf-8")
    comparison = checked(file, simulator)
    assert_all_within(comparison, 15)
    rows = {row.name: row for row in comparison.quantities}
    assert {"ID(M1)", "VOV(M1)", "gmb(M1)", "Av", "Rout", "fL", "fH"} <= rows.keys()
    (m1,) = comparison.transistors
    assert m1.margin == pytest.approx(m1.margin_simulated, rel=1e-5)
    # The margin is that behind the resistances: less than what the terminals say, by all that drops there.
    outer = abs(rows["VDS(M1)"].simulated or 0.0) - (rows["VOV(M1)"].simulated or 0.0)
    drop = (rows["ID(M1)"].simulated or 0.0) * (120.0 + 2 * 60.0) / 2
    assert m1.margin_simulated == pytest.approx(outer - drop, rel=1e-4)


@pytest.mark.parametrize(
    "name",
    ["level-1-more.cir", "options-of-geometry.cir", "model-tnom.cir", "geometry.cir", "own-tolerances.cir"],
)
def test_a_deck_with_cards_and_options_of_all_kinds_is_by_hand_what_it_is_simulated(
    simulator: Simulator, tmp_path: Path, name: str
) -> None:
    text = (DECKS / name).read_text(encoding="utf-8")
    file = tmp_path / name
    file.write_text(text.replace(".end", "* deckgen: assumptions full\n.end"), encoding="utf-8")
    assert_all_within(checked(file, simulator), 9)


def test_on_paper_leakage_does_not_show_and_a_resistance_of_the_card_does(
    simulator: Simulator, tmp_path: Path
) -> None:
    """The junctions that paper leaves out carry a ten-millionth of ID; RD and RS cost what they drop."""
    plain = STAGE.replace('"full"', '"paper"\ndrop = ["no-channel-length-modulation"]')
    gaps = {}
    for name, text in (("without", plain.replace('RD = "120"\nRSH = "60"\n', "")), ("with", plain)):
        file = tmp_path / f"{name}.toml"
        file.write_text(text, encoding="utf-8")
        (row,) = (row for row in checked(file, simulator).quantities if row.name == "ID(M1)")
        assert row.hand is not None
        assert row.simulated is not None
        gaps[name] = abs(row.simulated / row.hand - 1.0)
    assert gaps["without"] < 1e-5
    assert gaps["with"] > 1e-3
