"""One common source in gnucap, a second simulator, against deckgen's full hand analysis.

Every check here is independent: gnucap (GPL-3.0, Debian package ``gnucap`` 0.36, seen with "master
2017.10.03") reads the very netlist that deckgen renders, has a level-1 law of its own making, and knows
nothing of ngspice. Nothing is pinned. A gnucap that is missing is a failure, never a skip.

gnucap adds its gmin (1e-12 S) to the nodes, which the hand analysis has no reason to do: with a gate
divider of some 300 kΩ the largest difference seen is 1.8e-6, and the tolerance below is 5e-6.
"""

from __future__ import annotations

import re
import shutil
import subprocess
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

import pytest

from deckgen.hand.predict import predict
from deckgen.pipeline import Analysis, analyse
from deckgen.stage.read import stage_from_text

RELATIVE = 5e-6

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
ANALYSES = f"""\
.options numdgt=9
.width out=250
.print op {" ".join(f"v({node})" for node in NODES)} {" ".join(DEVICE)}
.op
.print ac vm(out) vp(out)
.ac 10 10meg dec 1
.end
"""
SUFFIXES = {"": 1.0, "Meg": 1e6, "K": 1e3, "m": 1e-3, "u": 1e-6, "n": 1e-9, "p": 1e-12}


@dataclass(frozen=True)
class Printed:
    """What gnucap printed: the operating point, and gain with phase [deg] by frequency [Hz]."""

    point: Mapping[str, float]
    gain: Mapping[float, tuple[float, float]]


def figure(word: str) -> float:
    """A number as gnucap prints it: ``316.214u``, ``10.Meg``, ``-91.098``."""
    match = re.fullmatch(r"(-?[\d.]+(?:e[+-]?\d+)?)([A-Za-z]*)", word)
    assert match is not None, word
    return float(match[1]) * SUFFIXES[match[2]]


def simulate(analysis: Analysis, folder: Path) -> Printed:
    program = shutil.which("gnucap")
    if program is None:
        pytest.fail("gnucap is not on PATH; install the Debian package gnucap")
    lines = [line for line in analysis.netlist.splitlines() if line.strip().lower() != ".end"]
    (folder / "deck.ckt").write_text("\n".join(lines) + "\n" + ANALYSES, encoding="utf-8")
    answer = subprocess.run(
        [program, "-b", "deck.ckt"],
        cwd=folder, stdin=subprocess.DEVNULL, capture_output=True, text=True, timeout=30,
    )  # fmt: skip
    assert (answer.returncode, answer.stderr) == (0, "")
    point, _, curve = answer.stdout.partition("#Freq")
    heads, values = (line.split() for line in point.split("\n#", 1)[1].splitlines()[:2])
    rows = [[figure(word) for word in line.split()] for line in curve.splitlines()[1:]]
    return Printed(
        point=dict(zip((head.lower() for head in heads), map(figure, values[1:]), strict=True)),
        gain={f: (magnitude, phase) for f, magnitude, phase in rows},
    )


@pytest.fixture(scope="module", params=["n", "p"])
def both(
    request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory
) -> tuple[Analysis, Printed]:
    analysis = analyse(stage_from_text(STAGES[request.param], file="stage.toml"))
    return analysis, simulate(analysis, tmp_path_factory.mktemp("gnucap"))


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
    assert min(printed.gain) < f_l < 1e3
    assert 1e4 < f_h < max(printed.gain)
    assert sorted(printed.gain) == pytest.approx([10.0**decade for decade in range(1, 8)])
    for frequency, (magnitude, phase) in printed.gain.items():
        ours = predict(analysis.circuit, analysis.ports, assumptions=(), frequency=frequency)
        found = dict(ours.node_signals)["out"]
        assert abs(found) == pytest.approx(magnitude, rel=RELATIVE), frequency
        turned = ours.value("Av.phase")
        assert turned is not None
        assert turned.value is not None
        assert (turned.value - phase + 180.0) % 360.0 == pytest.approx(180.0, abs=1e-4), frequency
