"""Every kind of input source gives the same stage: hand and simulated values agree whatever drives it.

Independent: ngspice answers for the simulated side of each comparison. Seen with ngspice 39.
"""

from __future__ import annotations

from pathlib import Path

import pytest

from deckgen.comparison import Comparison, Verdict
from deckgen.pipeline import CheckSettings, check_stage
from deckgen.simulator import Simulator

MODEL = ".model NM NMOS (LEVEL=1 VTO=1 KP=100u GAMMA=0.4 PHI=0.7 LAMBDA=0.02 TOX=20n CGSO=0.2n CGDO=0.2n)"
FULL = "* deckgen: assumptions full"


def checked(simulator: Simulator, folder: Path, *cards: str) -> Comparison:
    """Check a deck under the full assumption set, so that hand and simulated values are to be the same."""
    path = folder / "stage.cir"
    path.write_text("\n".join(["a stage", *cards, MODEL, FULL, ".end", ""]), encoding="utf-8")
    return check_stage(path, simulator=simulator, settings=CheckSettings(keep=False))


def simulated(comparison: Comparison, name: str) -> float:
    """A simulated value that is within its tolerance of the hand value."""
    (row,) = [row for row in comparison.quantities if row.name == name]
    assert row.verdict is Verdict.WITHIN, row
    assert row.simulated is not None
    return row.simulated


COMMON_SOURCE = (
    "VDD vdd 0 12", "CIN in g 1u", "R1 vdd g 1meg", "R2 g 0 300k", "RD vdd out 4.7k", "RS s 0 1k",
    "M1 out g s 0 NM W=50u L=2u",
)  # fmt: skip


@pytest.mark.parametrize("value", ["AC 1", "AC 1 180", "AC 2 -90", "AC 0 45", "AC -1", "SIN(0 1 1k) AC 1 30"])
def test_a_phase_and_a_size_that_the_deck_gives_its_source_change_nothing(
    value: str, simulator: Simulator, tmp_path: Path
) -> None:
    result = checked(simulator, tmp_path, f"VIN in 0 DC 0 {value}", "* deckgen: input VIN", *COMMON_SOURCE)
    assert simulated(result, "Av") == pytest.approx(-2.98, abs=0.4)
    assert abs(simulated(result, "Av.phase")) == pytest.approx(180.0, abs=5.0)
