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
    above: float | None = None
    choices: tuple[float, ...] = ()

    @property
    def described(self) -> str:
        """Meaning and unit, as a comment or a schema says it."""
        return f"{self.meaning} [{self.unit}]" if self.unit else self.meaning


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
    # Below the density of carriers in pure silicon nothing is doped, and ngspice 39 stops.
    Parameter("NSUB", "1/cm³", "substrate doping; gives PHI, GAMMA, VTO together with TOX", above=1.45e10),
    Parameter("NSS", "1/cm²", "surface state density, in the VTO that NSUB gives"),
    Parameter(
        "TPG",
        "",
        "gate of silicon doped against (1) or like (-1) the substrate, or of metal (0); 1 if not given",
        sign="any",
        choices=(-1.0, 0.0, 1.0),
    ),
    Parameter("CGSO", "F/m", "gate-source overlap capacitance per channel width"),
    Parameter("CGDO", "F/m", "gate-drain overlap capacitance per channel width"),
    Parameter("CGBO", "F/m", "gate-bulk overlap capacitance per channel length"),
    Parameter("RD", "Ω", "resistance in series with the drain", sign="positive"),
    Parameter("RS", "Ω", "resistance in series with the source", sign="positive"),
    Parameter("RSH", "Ω", "sheet resistance of drain and source; RD is RSH·NRD, RS is RSH·NRS if not given"),
    Parameter("IS", "A", "saturation current of a bulk junction; 10 fA if not given"),
    Parameter("JS", "A/m²", "saturation current per area; takes the place of IS where AD and AS are given"),
    Parameter("CBD", "F", "bulk-drain junction capacitance without bias"),
    Parameter("CBS", "F", "bulk-source junction capacitance without bias"),
    Parameter("CJ", "F/m²", "bulk junction capacitance per area; CBD is CJ·AD, CBS is CJ·AS if not given"),
    Parameter("MJ", "", "grading of the junctions' bottom; 0.5 if not given", below=1.0),
    Parameter("CJSW", "F/m", "bulk junction capacitance per perimeter"),
    Parameter("MJSW", "", "grading of the junctions' side walls; 0.5 if not given", below=1.0),
    Parameter("PB", "V", "built-in potential of the junctions; 0.8 V if not given", sign="positive"),
    Parameter("FC", "", "share of PB from which the capacitance rises on a straight line; 0.5", below=1.0),
)

PARAMETERS: dict[str, Parameter] = {parameter.name: parameter for parameter in _PARAMETERS}

GEOMETRY: tuple[Parameter, ...] = (
    Parameter("AD", "m²", "area of the drain's junction"),
    Parameter("AS", "m²", "area of the source's junction"),
    Parameter("PD", "m", "perimeter of the drain's junction"),
    Parameter("PS", "m", "perimeter of the source's junction"),
    Parameter("NRD", "", "squares of sheet resistance at the drain; 1 if absent", sign="positive"),
    Parameter("NRS", "", "squares of sheet resistance at the source; 1 if absent", sign="positive"),
)
"""What a transistor may state of its geometry besides W, L and M."""

# The rest of SPICE's level-1 card: noise, which is not analysed.
NOT_TAKEN = frozenset("KF AF".split())
ELSEWHERE = {
    "LEVEL": "no LEVEL: every model here is of level 1",
    "TNOM": "TNOM as tnom in [conditions]",
}
