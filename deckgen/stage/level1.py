"""Parameters of a level-1 model card in a stage file: those the hand analysis takes, and the rest of them."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal


@dataclass(frozen=True, slots=True)
class Parameter:
    """One parameter under its SPICE name, with its unit, meaning and the values that make sense."""

    name: str
    unit: str
    meaning: str
    sign: Literal["any", "not negative", "positive"] = "not negative"
    below: float | None = None


_PARAMETERS = (
    Parameter("VTO", "V", "threshold voltage at zero bulk bias", sign="any"),
    Parameter("KP", "A/V²", "transconductance parameter µCox, for ID = ½·KP·W/L·VOV²", sign="positive"),
    Parameter("UO", "cm²/Vs", "surface mobility; gives KP together with TOX", sign="positive"),
    # An oxide above 10 µm is a thickness in nm or Å without its prefix.
    Parameter("TOX", "m", "oxide thickness; without it there is no gate capacitance", "positive", below=1e-5),
    Parameter("GAMMA", "V^0.5", "body-effect parameter"),
    Parameter("PHI", "V", "surface potential 2φF", sign="positive"),
    Parameter("LAMBDA", "1/V", "channel-length modulation"),
    Parameter("LD", "m", "lateral diffusion; the effective length is L − 2·LD"),
    Parameter("CGSO", "F/m", "gate-source overlap capacitance per channel width"),
    Parameter("CGDO", "F/m", "gate-drain overlap capacitance per channel width"),
    Parameter("CGBO", "F/m", "gate-bulk overlap capacitance per channel length"),
)

PARAMETERS: dict[str, Parameter] = {parameter.name: parameter for parameter in _PARAMETERS}

# The rest of SPICE's level-1 card (from memory, and accepted by ngspice 39 in a level-1 card).
NOT_TAKEN = frozenset("RD RS RSH CBD CBS IS JS PB CJ MJ CJSW MJSW FC NSUB NSS TPG KF AF".split())
ELSEWHERE = {
    "LEVEL": "no LEVEL: every model here is of level 1",
    "TNOM": "TNOM as tnom in [conditions]",
}
