"""Every kind of input source gives the same stage: hand and simulated values agree whatever drives it.

Independent: ngspice answers for the simulated side of each comparison. Seen with ngspice 39.
"""

from __future__ import annotations

import math
import re
from collections.abc import Sequence
from pathlib import Path

import pytest

from deckgen.circuit.reader import read_flat
from deckgen.comparison import Comparison, Severity, Verdict
from deckgen.intake import Taken, ports_of
from deckgen.pipeline import CheckSettings, check_stage, check_taken
from deckgen.render.engine import render
from deckgen.simulator import Simulator
from deckgen.stage.read import stage_from_text
from deckgen.stage.topology import load_topology, templates_folder
from tests.simulator.command_line import Answer, Call, inside

_CARD = "(LEVEL=1 VTO={}1 KP=100u GAMMA=0.4 PHI=0.7 LAMBDA=0.02 TOX=20n CGSO=0.2n CGDO=0.2n)"
MODEL = f".model NM NMOS {_CARD.format('')}\n.model PM PMOS {_CARD.format('-')}"
FULL = "* deckgen: assumptions full"
SETTINGS = CheckSettings(keep=False)


def checked(simulator: Simulator, folder: Path, *cards: str) -> Comparison:
    """Check a deck under the full assumption set, so that hand and simulated values are to be the same."""
    path = folder / "stage.cir"
    path.write_text("\n".join(["a stage", *cards, MODEL, FULL, ".end", ""]), encoding="utf-8")
    return check_stage(path, simulator=simulator, settings=SETTINGS)


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


# --- current sources ---

COMMON_GATE = {
    "n": (
        "VDD vdd 0 12", "IIN 0 s AC 1", "RSIG s 0 22k", "R1 vdd g 1meg", "R2 g 0 470k", "CG g 0 100n",
        "RD vdd d 15k", "CO d out 1u", "RL out 0 47k", "CL out 0 100p", "M1 d g s 0 NM W=50u L=2u",
    ),
    "p": (
        "VDD vdd 0 12", "IIN vdd s AC 1", "RSIG s vdd 22k", "R1 vdd g 470k", "R2 g 0 1meg", "CG g vdd 100n",
        "RD d 0 15k", "CO d out 1u", "RL out 0 47k", "CL out 0 100p", "M1 d g s vdd PM W=50u L=2u",
    ),
}  # fmt: skip
TRANSRESISTANCE = {
    "n": (
        "VDD vdd 0 12", "IIN 0 in AC 1", "RSIG in 0 100k", "CIN in g 1u", "RF d g 220k", "RD vdd d 4.7k",
        "CO d out 1u", "RL out 0 10k", "M1 d g 0 0 NM W=50u L=2u",
    ),
    "p": (
        "VDD vdd 0 12", "IIN 0 in AC 1", "RSIG in 0 100k", "CIN in g 1u", "RF d g 220k", "RD d 0 4.7k",
        "CO d out 1u", "RL out 0 10k", "M1 d g vdd vdd PM W=50u L=2u",
    ),
}  # fmt: skip
FOLLOWER = {
    "n": (
        "VDD vdd 0 12", "IIN 0 in AC 1", "RSIG in 0 100k", "CIN in g 1u", "R1 vdd g 1meg", "R2 g 0 1meg",
        "RS s 0 4.7k", "CO s out 1u", "RL out 0 10k", "M1 vdd g s 0 NM W=50u L=2u",
    ),
    "p": (
        "VDD vdd 0 12", "IIN 0 in AC 1", "RSIG in 0 100k", "CIN in g 1u", "R1 vdd g 1meg", "R2 g 0 1meg",
        "RS s vdd 4.7k", "CO s out 1u", "RL out 0 10k", "M1 0 g s vdd PM W=50u L=2u",
    ),
}  # fmt: skip
NOTES = ("* deckgen: source-resistance RSIG", "* deckgen: load RL")
STAGES = {
    "common gate": (COMMON_GATE, 1),
    "transresistance": (TRANSRESISTANCE, -1),
    "follower": (FOLLOWER, 1),
}
OF_THE_SIGNAL = ("Rm", "Rm.phase", "Avi", "Rin", "Rout", "fL", "fH")


def turned(cards: Sequence[str]) -> list[str]:
    """The same cards with the current source the other way round."""
    words = [card.split() for card in cards]
    return [" ".join([w[0], w[2], w[1], *w[3:]] if w[0] == "IIN" else w) for w in words]


@pytest.mark.parametrize("reverse", [False, True], ids=["into", "out of"])
@pytest.mark.parametrize("polarity", ["n", "p"])
@pytest.mark.parametrize("name", STAGES)
def test_a_stage_driven_by_a_current_is_compared_in_full(
    name: str, polarity: str, reverse: bool, simulator: Simulator, tmp_path: Path
) -> None:
    """Full hand values are the simulated ones; only the sign of Rm turns with the source."""
    by_polarity, sign = STAGES[name]
    cards = turned(by_polarity[polarity]) if reverse else by_polarity[polarity]
    result = checked(simulator, tmp_path, *cards, *NOTES)
    assert result.exit_code == 0
    assert {row.verdict for row in result.quantities} <= {Verdict.WITHIN, Verdict.ABSENT}
    values = {row.name: row.simulated for row in result.quantities}
    assert set(OF_THE_SIGNAL) < set(values)
    assert "Av" not in values
    assert math.copysign(1.0, simulated(result, "Rm")) == (-sign if reverse else sign)
    assert math.copysign(1.0, simulated(result, "Avi")) == sign
    assert not [one for one in result.findings if one.severity is not Severity.NOTE]
    r_s = 22e3 if name == "common gate" else 100e3
    into = 1.0 / (1.0 / simulated(result, "Rin") + 1.0 / r_s)
    assert abs(simulated(result, "Rm")) == pytest.approx(abs(simulated(result, "Avi")) * into, rel=2e-3)


def test_a_common_gate_takes_a_current_in_low_and_gives_it_out_to_its_load(
    simulator: Simulator, tmp_path: Path
) -> None:
    """Common practice: Rin ≈ 1/(gm + gmb), and all but what RSIG takes arrives at RD∥RL."""
    result = checked(simulator, tmp_path, *COMMON_GATE["n"], *NOTES)
    g = simulated(result, "gm(M1)") + simulated(result, "gmb(M1)")
    r_in = simulated(result, "Rin")
    assert r_in == pytest.approx(1.0 / g, rel=0.1)
    assert simulated(result, "Rm") == pytest.approx(22e3 / (22e3 + r_in) / (1 / 15e3 + 1 / 47e3), rel=0.02)


@pytest.mark.parametrize("value", ["AC 1 180", "AC 3 m=2", "AC 0 45", "", "DC 0 PULSE(0 1u 0 1n 1n 1m 2m)"])
def test_phase_size_and_multiplier_of_a_current_source_change_nothing(
    value: str, simulator: Simulator, tmp_path: Path
) -> None:
    cards = [f"IIN 0 in {value}" if card.startswith("IIN") else card for card in TRANSRESISTANCE["n"]]
    plain = checked(simulator, tmp_path, *TRANSRESISTANCE["n"], *NOTES)
    result = checked(simulator, tmp_path, *cards, *NOTES, "* deckgen: input IIN")
    for name in OF_THE_SIGNAL:
        assert simulated(result, name) == pytest.approx(simulated(plain, name), rel=1e-9)


def test_a_multiplied_direct_current_stays_what_it_is_while_the_gain_is_measured(
    simulator: Simulator, tmp_path: Path
) -> None:
    cards = [card for card in COMMON_GATE["n"] if card[:3] not in ("IIN", "RSI")]
    single = checked(simulator, tmp_path, *cards, "IIN s 0 DC 200u AC 1", "* deckgen: load RL")
    double = checked(simulator, tmp_path, *cards, "IIN s 0 DC 100u AC 1 M=2", "* deckgen: load RL")
    assert simulated(double, "ID(M1)") == pytest.approx(200e-6, rel=1e-3)
    for name in OF_THE_SIGNAL:
        assert simulated(double, name) == pytest.approx(simulated(single, name), rel=1e-6)


@pytest.mark.parametrize(("nodes", "sign"), [("s g", -1), ("g s", 1)])
def test_a_floating_current_source_between_gate_and_source_is_compared_in_full(
    nodes: str, sign: int, simulator: Simulator, tmp_path: Path
) -> None:
    """Out of one node and into the other; RSIG lies across it, so gate and source move apart."""
    result = checked(
        simulator, tmp_path, "VDD vdd 0 12", f"IIN {nodes} AC 1", "RSIG p g 10k", "CS p s 10u",
        "R1 vdd g 1meg", "R2 g 0 300k", "RS s 0 2.2k", "RD vdd out 4.7k", "M1 out g s 0 NM W=50u L=2u",
        "* deckgen: frequency 1k",
    )  # fmt: skip
    assert {row.verdict for row in result.quantities} <= {Verdict.WITHIN, Verdict.ABSENT}
    assert math.copysign(1.0, simulated(result, "Rm")) == sign
    # What flows through the gate's resistors comes back through RS, which the transistor bootstraps.
    gm, gmb, gds = (simulated(result, f"{kind}(M1)") for kind in ("gm", "gmb", "gds"))
    r_s = 1 / (1 / 2.2e3 + gmb + gds)
    around = (1 / (1 / 1e6 + 1 / 300e3) + r_s) / (1 + gm * r_s)
    assert simulated(result, "Rin") == pytest.approx(1 / (1 / 10e3 + 1 / around), rel=0.01)


@pytest.mark.parametrize("source", ["VIN bias g", "VIN g bias"])
def test_a_voltage_source_with_one_end_at_a_bias_is_compared_in_full(
    source: str, simulator: Simulator, tmp_path: Path
) -> None:
    result = checked(
        simulator, tmp_path, "VDD vdd 0 12", "VB bias 0 2", f"{source} AC 1", "RG g 0 100k", "RS s 0 1k",
        "RD vdd out 4.7k", "M1 out g s 0 NM W=50u L=2u", "* deckgen: frequency 1k",
        "* deckgen: wanted Rin Av Avi",
    )  # fmt: skip
    assert {row.verdict for row in result.quantities} <= {Verdict.WITHIN, Verdict.ABSENT}
    assert simulated(result, "Rin") == pytest.approx(100e3, rel=1e-3)
    assert math.copysign(1.0, simulated(result, "Av")) == (1.0 if source == "VIN bias g" else -1.0)
    assert simulated(result, "Avi") < 0.0


def test_a_current_source_in_a_subcircuit_is_an_input_too(simulator: Simulator, tmp_path: Path) -> None:
    path = tmp_path / "nested.cir"
    cards = (
        "nested", "VDD vdd 0 12", "X1 in sensor", "CIN in g 1u", "RF out g 220k", "RD vdd out 4.7k",
        "M1 out g 0 0 NM W=50u L=2u", ".subckt sensor a", "IIN 0 a DC 0 AC 1", "RSIG a 0 100k", ".ends",
        "* deckgen: source-resistance RSIG@X1", MODEL, FULL, ".end", "",
    )  # fmt: skip
    path.write_text("\n".join(cards), encoding="utf-8")
    result = check_stage(path, simulator=simulator, settings=SETTINGS)
    assert simulated(result, "Rm") < -100e3
    assert simulated(result, "Rin") < 50e3


def test_a_current_into_what_a_source_holds_has_no_gain_on_either_side(
    simulator: Simulator, tmp_path: Path
) -> None:
    result = checked(simulator, tmp_path, *COMMON_SOURCE, "RIN in 0 1k", "IIN 0 vdd AC 1")
    verdicts = {row.name: row.verdict for row in result.quantities}
    assert {verdicts[name] for name in ("Rm", "Rm.phase", "Avi", "fL", "fH")} == {Verdict.ABSENT}
    assert simulated(result, "Rin") == pytest.approx(0.0, abs=0.0)


TEMPLATE = """\
{% extends "frame.cir.j2" %}
{% block circuit %}
{% set m1 = transistors.M1 %}
VDD vdd 0 {{ parts.VDD }}
ISIG 0 g DC {{ parts.ISIG }} AC 1
RSIG g 0 {{ parts.RSIG }}
RF out g {{ parts.RF }}
RD vdd out {{ parts.RD }}
M1 out g 0 0 {{ m1.model }} W={{ m1.w }} L={{ m1.l }} M={{ m1.m }}
{% endblock %}
"""
TOPOLOGY = """\
format = 1
title = "Transresistance stage"
about = "A current in, a voltage out."
nodes = ["vdd", "g", "out"]
signal = { input = "ISIG", output = "out", source_resistance = "RSIG" }
parts.VDD = { unit = "V", about = "supply", required = true }
parts.ISIG = { unit = "A", about = "signal, with its direct current", required = true }
parts.RSIG = { unit = "Ω", about = "resistance of the source", required = true }
parts.RF = { unit = "Ω", about = "feedback", required = true }
parts.RD = { unit = "Ω", about = "drain resistor", required = true }
transistors.M1 = { about = "the amplifying device" }
"""
STAGE = """\
format = 1
title = "Photodiode stage"
topology = "transresistance"
parts = { VDD = "5 V", ISIG = "1 µA", RSIG = "1Meg", RF = "100k", RD = "10k" }
models.NM = { polarity = "n", VTO = "0.8", KP = "100u", LAMBDA = "0.02", GAMMA = "0.4", PHI = "0.7" }
transistors.M1 = { model = "NM", W = "100u", L = "2u" }
signal = { amplitude = "1 µA", frequency = "1 kHz" }
claims = { Rm = { within = ["-100k", "-90k"] } }
hand.assumptions = "full"
"""


def test_a_topology_may_have_a_current_source_as_its_input(simulator: Simulator, tmp_path: Path) -> None:
    """The feedback resistor takes the current: Rm ≈ -RF."""
    templates = tmp_path / "templates"
    templates.mkdir()
    frame = templates_folder() / "frame.cir.j2"
    (templates / frame.name).write_text(frame.read_text("utf-8"), encoding="utf-8")
    (templates / "transresistance.cir.j2").write_text(TEMPLATE, encoding="utf-8")
    (templates / "transresistance.toml").write_text(TOPOLOGY, encoding="utf-8")
    stage = stage_from_text(STAGE, file="photodiode.toml", templates=templates)
    netlist = render(stage, load_topology("transresistance", templates), templates=templates)
    circuit = read_flat(netlist)
    taken = Taken(stage, netlist, circuit, ports_of(stage, circuit))
    result = check_taken(tmp_path / "photodiode.toml", taken, simulator=simulator, settings=SETTINGS)
    assert result.exit_code == 0
    (row,) = [row for row in result.quantities if row.name == "Rm"]
    assert row.claim is not None
    assert row.claim.verdict is row.verdict is Verdict.WITHIN
    assert row.simulated == pytest.approx(-100e3, rel=0.1)


# --- the commands ---


@pytest.fixture
def call(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> Call:
    """The command line, in a folder that holds a transresistance stage."""
    monkeypatch.chdir(tmp_path)
    monkeypatch.delenv("DECKGEN_NGSPICE", raising=False)
    lines = ("a photodiode's first stage", *TRANSRESISTANCE["n"], *NOTES, MODEL, ".end", "")
    (tmp_path / "diode.cir").write_text("\n".join(lines), encoding="utf-8")

    def run(*arguments: str | Path) -> Answer:
        return inside(capsys, *arguments)

    return run


def test_predict_shows_the_transresistance_and_signals_per_ampere(call: Call) -> None:
    answer = call("predict", "diode.cir")
    assert answer.code == 0
    assert "signal per" in answer.out
    assert re.search(r"node +voltage +ampere +phase", answer.out)
    assert re.search(r"^ +Rm +-1\d\d\.\d +kΩ +closed form$", answer.out, re.MULTILINE)
    assert re.search(r"^ +out +0 +V +1\d\d\.\d +kΩ", answer.out, re.MULTILINE)
    assert "Av " not in answer.out


def test_check_compares_claims_on_the_transresistance_in_ohms(call: Call, tmp_path: Path) -> None:
    more = (
        'format = 1\ndeck = "diode.cir"\nsignal.amplitude = "20 µA"\n[claims]\nRm = { at_most = "-150k" }\n'
    )
    (tmp_path / "diode.toml").write_text(more, encoding="utf-8")
    answer = call("check", "diode.toml", "--no-keep")
    assert answer.code == 0
    assert re.search(r"Rm +≤ -150 kΩ +-1\d\d\.\d kΩ +met", answer.out)
    assert "input current" in answer.out
    assert "EMF" not in answer.out


def test_a_wish_for_av_is_refused_with_the_name_to_write(call: Call, tmp_path: Path) -> None:
    (tmp_path / "diode.toml").write_text(
        'format = 1\ndeck = "diode.cir"\n[wanted]\nquantities = ["ID(M1)", "Av"]\n', encoding="utf-8"
    )
    for command in ("check", "predict"):
        answer = call(command, "diode.toml")
        said = " ".join((answer.out + answer.err).split())
        assert answer.code == 2
        assert 'found "Av", expected Rm: the input IIN is a current source, so its gain is in Ω' in said


def test_a_series_resistance_declared_for_a_current_source_is_refused(call: Call, tmp_path: Path) -> None:
    text = (tmp_path / "diode.cir").read_text("utf-8")
    text = text.replace("source-resistance RSIG", "source-resistance RF")
    (tmp_path / "diode.cir").write_text(text, encoding="utf-8")
    answer = call("check", "diode.cir", "--no-keep")
    said = " ".join(answer.out.split())
    assert answer.code == 2
    assert "found rf, expected a resistor between nodes 0 and in, parallel to the input source" in said
