"""One common source in gnucap, a second simulator, against deckgen's full hand analysis.

Every check here is independent: gnucap (GPL-3.0, Debian package ``gnucap`` 0.36, seen with "master
2017.10.03") reads the very netlist that deckgen renders, has a level-1 law of its own making, and knows
nothing of ngspice. Nothing is pinned. A gnucap that is missing is a failure, never a skip.

With its gmin out of the way (``gnucap.py``) the largest differences seen are 6e-9 in the drain current, 3e-9
in the gain, and 2.5e-6 degrees at 10 MHz.
"""

from __future__ import annotations

import cmath
import math

import pytest

from deckgen.hand.predict import predict
from deckgen.pipeline import Analysis, analyse
from deckgen.stage.read import stage_from_text
from tests.outside.gnucap import Printed, simulate

RELATIVE = 2e-8
STAGE = """\
format = 1
title = "Common source, degenerated at DC and bypassed"
topology = "common-source"
[parts]
VDD = "12 V"
RSIG = "1k"
CIN = "100 nF"
R1 = "{r_1}"
R2 = "{r_2}"
RD = "10k"
RS = "2k"
CS = "10 µF"
COUT = "1 µF"
RL = "47k"
CL = "100 pF"
[models.{name}]
polarity = "{polarity}"
VTO = "{vto}"
KP = "100u"
GAMMA = "0.4"
PHI = "0.7"
LAMBDA = "0.02"
TOX = "20n"
CGSO = "0.2n"
CGDO = "0.2n"
[transistors.M1]
model = "{name}"
W = "100u"
L = "2u"
[signal]
frequency = "3 kHz"
[hand]
assumptions = "full"
"""
# The divider of a p-channel stage stands on its head.
STAGES = {
    "n": STAGE.format(name="NM", polarity="n", vto="0.8", r_1="1.2Meg", r_2="300k"),
    "p": STAGE.format(name="PM", polarity="p", vto="-0.8", r_1="300k", r_2="1.2Meg"),
}

# Device probe of gnucap -> quantity; the AC sweep takes a point a decade.
DEVICE = {
    "i(m1)": "ID(M1)",
    "gm(m1)": "gm(M1)",
    "gds(m1)": "gds(M1)",
    "gmb(m1)": "gmb(M1)",
    "vth(m1)": "VTH(M1)",
}
NODES = ("d", "g", "s")
FREQUENCIES = tuple(10.0**decade for decade in range(1, 8))


@pytest.fixture(scope="module", params=["n", "p"])
def both(
    request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory
) -> tuple[Analysis, Printed]:
    analysis = analyse(stage_from_text(STAGES[request.param], file="stage.toml"))
    printed = simulate(
        analysis.netlist, tmp_path_factory.mktemp("gnucap"),
        point=[*(f"v({node})" for node in NODES), *DEVICE], phasors=["v(out)"], frequencies=FREQUENCIES,
    )  # fmt: skip
    return analysis, printed


def hand(analysis: Analysis, name: str) -> float:
    value = analysis.prediction.value(name)
    assert value is not None
    assert value.value is not None
    return value.value


def test_operating_point_is_gnucaps(both: tuple[Analysis, Printed]) -> None:
    analysis, printed = both
    assert analysis.prediction.assumptions == ()
    for node in NODES:
        assert hand(analysis, f"V({node})") == pytest.approx(printed.point[f"v({node})"], rel=RELATIVE)
    # gnucap counts the current into the drain, deckgen positive in normal conduction.
    sign = 1.0 if analysis.stage.models[0].polarity == "n" else -1.0
    for probe, name in DEVICE.items():
        found = printed.point[probe] * (sign if probe == "i(m1)" else 1.0)
        assert hand(analysis, name) == pytest.approx(found, rel=RELATIVE), name


def test_gain_at_mid_band_and_at_both_ends_is_gnucaps(both: tuple[Analysis, Printed]) -> None:
    """10 Hz lies below fL, 1 kHz and 10 kHz at mid-band, 1 MHz and 10 MHz above fH."""
    analysis, printed = both
    f_l, f_h = hand(analysis, "fL"), hand(analysis, "fH")
    assert min(FREQUENCIES) < f_l < 1e3
    assert 1e4 < f_h < max(FREQUENCIES)
    for frequency in FREQUENCIES:
        phasor = printed.phasors[frequency]["v(out)"]
        ours = predict(analysis.circuit, analysis.ports, assumptions=(), frequency=frequency)
        found = dict(ours.node_signals)["out"]
        assert abs(found) == pytest.approx(abs(phasor), rel=RELATIVE), frequency
        turned = ours.value("Av.phase")
        assert turned is not None
        assert turned.value is not None
        off = turned.value - math.degrees(cmath.phase(phasor))
        assert (off + 180.0) % 360.0 == pytest.approx(180.0, abs=1e-5), frequency
