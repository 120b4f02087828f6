"""A follower and a common gate, of either polarity, in gnucap against deckgen's full hand analysis.

Every check here is independent: gnucap (GPL-3.0, Debian package ``gnucap`` 0.36, seen with "master
2017.10.03") reads the very netlist that deckgen reads, has a level-1 law of its own making, with body effect,
overlaps and Meyer's capacitances, and knows nothing of ngspice. Nothing is pinned. A gnucap that is missing
is a failure, never a skip.

With its gmin out of the way (``gnucap.py``) the largest differences seen are 6e-9 in the drain current, 2e-9
in conductances, gain, Rin and Rout, 4e-10 in fL, and 4e-7 in fH: gnucap has 8.85421487 pF/m as the electric
constant, 3e-6 above that of CODATA, and so much more capacitance at the gate.
"""

from __future__ import annotations

import cmath
import math
from dataclasses import dataclass
from pathlib import Path

import pytest

from deckgen.circuit.ports import Ports
from deckgen.circuit.reader import read_flat
from deckgen.hand.predict import predict
from deckgen.hand.prediction import Prediction
from tests.outside.gnucap import Printed, simulate

MID_BAND = 10e3
PORTS = Ports("vsig", "out", source_resistance="rsig", load="rl")

# {low} is where the source resistor goes: ground, or the supply of a p-channel device; {high} the other.
FOLLOWER = """\
* Source follower, gate divider
VDD vdd 0 12
VSIG sig 0 DC 0 AC 1
RSIG sig in 22k
CIN in g 100n
R1 {high} g 270k
R2 g {low} 330k
M1 {high} g s {low} DUT W=100u L=2u M=1
RS s {low} 2.2k
COUT s out 1u
RL out 0 10k
CL out 0 100p
"""
COMMON_GATE = """\
* Common gate, its gate bypassed
VDD vdd 0 12
VSIG sig 0 DC 0 AC 1
RSIG sig in 50
CIN in s 10u
R1 {high} g 620k
R2 g {low} 330k
CG g {low} 1u
M1 d g s {low} DUT W=100u L=2u M=1
RS s {low} 3.3k
RD {high} d 4.7k
COUT d out 1u
RL out 0 47k
CL out 0 22p
"""
CARD = """\
.model DUT {kind} LEVEL=1 VTO={vto} KP=100u GAMMA=0.4 PHI=0.7 LAMBDA=0.02 LD=0.1u
+ TOX=20n CGSO=0.2n CGDO=0.15n CGBO=0.3n
.options tnom=27
.temp 27
.end
"""
POLARITIES = {
    "n": {"low": "0", "high": "vdd", "kind": "NMOS", "vto": "0.8"},
    "p": {"low": "vdd", "high": "0", "kind": "PMOS", "vto": "-0.8"},
}
STAGES = {"follower": FOLLOWER, "common gate": COMMON_GATE}
PARAMETERS = [(name, polarity) for name in STAGES for polarity in POLARITIES]
LOADS = {"follower": 10e3, "common gate": 47e3}
DEVICE = {
    "i(m1)": "ID(M1)",
    "gm(m1)": "gm(M1)",
    "gds(m1)": "gds(M1)",
    "gmb(m1)": "gmb(M1)",
    "vth(m1)": "VTH(M1)",
}
RELATIVE = 2e-8
# How far off a band edge may be, relative.
EDGES = {"fL": 2e-9, "fH": 2e-6}


@dataclass(frozen=True)
class Both:
    """One stage by hand and in gnucap: driven, and with a test current into the output instead."""

    name: str
    polarity: str
    hand: Prediction
    driven: Printed
    backwards: Printed

    def value(self, name: str) -> float:
        return number(self.hand, name)

    def signal(self, probe: str, frequency: float = MID_BAND) -> complex:
        return self.driven.phasors[frequency][probe]


def number(hand: Prediction, name: str) -> float:
    found = hand.value(name)
    assert found is not None
    assert found.value is not None
    return found.value


def around(hand: Prediction, edge: str) -> tuple[float, float]:
    """Frequencies right outside and right inside a band edge."""
    f, off = number(hand, edge), EDGES[edge]
    low, high = f * (1.0 - off), f * (1.0 + off)
    return (low, high) if edge == "fL" else (high, low)


@pytest.fixture(scope="module", params=PARAMETERS, ids=lambda pair: "-".join(pair))
def both(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Both:
    name, polarity = request.param
    netlist = (STAGES[name] + CARD).format(**POLARITIES[polarity])
    hand = predict(read_flat(netlist), PORTS, assumptions=(), frequency=MID_BAND)
    folder: Path = tmp_path_factory.mktemp("gnucap")
    driven = simulate(
        netlist, folder, point=["v(g)", "v(s)", *DEVICE], phasors=["v(out)", "v(in)", "i(rsig)"],
        frequencies=[MID_BAND, *around(hand, "fL"), *around(hand, "fH")],
    )  # fmt: skip
    silent = netlist.replace("DC 0 AC 1", "DC 0").replace("RL out", "ITEST 0 out DC 0 AC 1\nRL out")
    backwards = simulate(silent, folder, point=["v(g)"], phasors=["v(out)"], frequencies=[MID_BAND])
    return Both(name, polarity, hand, driven, backwards)


def test_operating_point_is_gnucaps(both: Both) -> None:
    point = both.driven.point
    assert both.value("VGS(M1)") == pytest.approx(point["v(g)"] - point["v(s)"], rel=RELATIVE)
    # gnucap counts the current into the drain, deckgen positive in normal conduction.
    signs = {"i(m1)": 1.0 if both.polarity == "n" else -1.0}
    for probe, name in DEVICE.items():
        found = point[probe] * signs.get(probe, 1.0)
        assert both.value(name) == pytest.approx(found, rel=RELATIVE), name


def test_role_is_the_one_that_is_drawn(both: Both) -> None:
    (device,) = both.hand.transistors
    assert device.role == both.name.replace(" ", "-")


def test_gain_at_mid_band_is_gnucaps(both: Both) -> None:
    gain = both.signal("v(out)")
    assert both.value("Av") == pytest.approx(math.copysign(abs(gain), gain.real), rel=RELATIVE)
    assert both.value("Av.phase") == pytest.approx(math.degrees(cmath.phase(gain)), abs=1e-6)


def test_input_resistance_is_gnucaps(both: Both) -> None:
    """1/Re Y behind the source resistance."""
    admittance = both.signal("i(rsig)") / both.signal("v(in)")
    assert both.value("Rin") == pytest.approx(1.0 / admittance.real, rel=RELATIVE)


def test_output_resistance_is_gnucaps_with_the_load_subtracted(both: Both) -> None:
    seen = both.backwards.phasors[MID_BAND]["v(out)"]
    assert both.value("Rout") == pytest.approx(
        1.0 / ((1.0 / seen).real - 1.0 / LOADS[both.name]), rel=RELATIVE
    )


@pytest.mark.parametrize("edge", EDGES)
def test_gnucaps_gain_falls_below_3_db_at_the_band_edge(both: Both, edge: str) -> None:
    """Within what ``EDGES`` says: outside it is below, inside above."""
    outside, inside = (abs(both.signal("v(out)", f)) for f in around(both.hand, edge))
    limit = abs(both.signal("v(out)")) / math.sqrt(2.0)
    assert outside < limit < inside
