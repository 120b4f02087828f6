"""Failures after which ngspice exits with status 0, each provoked by a stage file as far as one can.

Seen with ngspice 39. What catches each, when a stage file provokes it:

refused by the reading of the stage file
    UTF-16 and carriage-return-only files, 0 as a frequency (no points), a node or device that isn't there
    (read as zeros or left out of the raw file), unknown model parameters and options (ignored by ngspice),
    R of 0 or without a value (read as 1 mΩ), two values (the last wins), names given twice (first or last
    wins), W or KP below zero, LD beyond L/2, text after `.end`, a node called `time`
refused by the hand analysis, which reads the netlist before ngspice does
    a node without a dc path, an output that this stage doesn't have (the bench would drive an empty node)
caught by the rule of acceptance, after the run
    Newton's failure, with the start-up file that forbids the fallback; a full disk (in test_outcomes.py,
    with half a raw file and the other things that a disk or a script does to it)
does not arise
    `.ac` without a source: the bench gives the input its AC value itself; `.ac dec N f f`: its sweeps
    span whole decades, and a single frequency is asked for as one linear point

A stage file has no way to ask for these, since deckgen writes every analysis, save and read-out itself: a
deck without an analysis; `.dc` with a step of 0 or the wrong sign; `.noise`, `.tf` or `.sens` at all; `.save`
of a device parameter that isn't there; parameters of subcircuits; `.param`; `.meas` and `.four` beside `-r`.
"""

from __future__ import annotations

import json
import os
import subprocess
from pathlib import Path
from typing import Any

import pytest

from deckgen.simulator import Simulator, read_raw
from tests.simulator.command_line import Answer, Call, inside, run_folders, stage_text


@pytest.fixture
def call(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> Call:
    """The command line, in an empty folder."""
    monkeypatch.chdir(tmp_path)
    monkeypatch.delenv("DECKGEN_NGSPICE", raising=False)

    def run(*arguments: str | Path) -> Answer:
        return inside(capsys, *arguments)

    return run


def checked(call: Call, text: str | bytes) -> dict[str, Any]:
    """The one stage of a check of this stage file."""
    Path("amp.toml").write_bytes(text if isinstance(text, bytes) else text.encode("utf-8"))
    answer = call("check", "amp.toml", "--json", "-", "--time-limit", "20")
    (stage,) = json.loads(answer.out)["stages"]
    assert answer.code == stage["exit_code"]
    found: dict[str, Any] = stage
    return found


def refused_unrun(call: Call, text: str | bytes, *words: str) -> None:
    """See that a stage file is refused in words that name the fault, and that nothing was run."""
    stage = checked(call, text)
    assert (stage["outcome"], stage["exit_code"], stage["run_folder"]) == ("refused", 2, None)
    assert run_folders(Path("runs")) == []
    for word in words:
        assert word in stage["meaning"]


def evidence(stage: dict[str, Any], name: str) -> str:
    return (Path(stage["run_folder"]) / name).read_text("utf-8")


def run_plainly(simulator: Simulator, stage: dict[str, Any]) -> subprocess.CompletedProcess[str]:
    """Run the deck of the evidence as ngspice does by itself, with the start-up file that it came with."""
    folder = Path("plain")
    folder.mkdir()
    (folder / "deck.cir").write_text(evidence(stage, "deck.cir"), encoding="utf-8")
    return subprocess.run(
        [simulator.path, "-n", "-b", "deck.cir"],
        cwd=folder,
        env={"PATH": os.environ["PATH"], "HOME": "/nowhere"},
        capture_output=True,
        text=True,
        timeout=30,
    )


# --- caught by the rule of acceptance ------------------------------------------------------------


def test_newton_fails_and_there_is_no_fallback(call: Call, simulator: Simulator) -> None:
    stage = checked(call, stage_text("source-follower", VDD="-12Meg"))
    assert (stage["outcome"], stage["exit_code"]) == ("no convergence", 3)
    assert "Transient op" not in evidence(stage, "stderr.txt")
    assert stage["quantities"] == []
    by_itself = run_plainly(simulator, stage)
    assert by_itself.returncode == 0
    assert "Note: Transient op started" in by_itself.stderr


def test_a_point_that_only_the_fallback_finds_is_none(call: Call, simulator: Simulator) -> None:
    stage = checked(call, stage_text(GAMMA="1e50"))
    assert (stage["outcome"], stage["exit_code"]) == ("no convergence", 3)
    assert any("singular matrix" in line for line in stage["said"])
    by_itself = run_plainly(simulator, stage)
    assert by_itself.returncode == 0
    point = read_raw(Path("plain/out.raw").read_bytes())[0]
    assert point.name == "Operating Point"
    assert point.points == 1


# --- refused by the hand analysis ----------------------------------------------------------------


def test_a_floating_node(call: Call) -> None:
    refused_unrun(call, stage_text(RL="1e30"), "no DC path to ground from node out")


def test_a_coupling_capacitor_into_nothing(call: Call) -> None:
    refused_unrun(call, stage_text(RL=""), "parts.COUT", "both of COUT and RL, or neither")


@pytest.mark.parametrize(("without", "output"), [("RS CS", "s"), ("COUT RL", "d"), ("RSIG", "sig")])
def test_a_test_source_into_an_otherwise_empty_node(call: Call, without: str, output: str) -> None:
    text = stage_text(**dict.fromkeys(without.split(), ""))
    refused_unrun(call, text.replace("[signal]", f'[signal]\noutput = "{output}"'), output)


# --- refused by the reading of the stage file ----------------------------------------------------


@pytest.mark.parametrize("encoding", ["utf-16", "utf-16-le", "utf-32"])
def test_a_file_in_utf_16(call: Call, encoding: str) -> None:
    refused_unrun(call, stage_text().encode(encoding))


def test_a_file_of_carriage_returns_only(call: Call) -> None:
    refused_unrun(call, stage_text().replace("\n", "\r"), "amp.toml")


@pytest.mark.parametrize("frequency", ["0", "-3 kHz", "nan", "inf"])
def test_a_frequency_without_points(call: Call, frequency: str) -> None:
    refused_unrun(call, stage_text(frequency=frequency), "signal.frequency")


@pytest.mark.parametrize(
    ("section", "name"),
    [
        ("claims", '"V(nope)" = "1 V"'),
        ("claims", '"gm(M77)" = "1 mS"'),
        ("claims", '"gmz(M1)" = "1 mS"'),
        ("wanted", 'quantities = ["V(nope)"]'),
        ("tolerance", '"ID(M77)" = "1 %"'),
    ],
)
def test_a_node_a_device_or_a_read_out_that_is_not_there(call: Call, section: str, name: str) -> None:
    refused_unrun(call, f"{stage_text()}\n[{section}]\n{name}\n", section)


@pytest.mark.parametrize("node", ["nope", "time", "0", "gnd"])
def test_an_output_that_no_stage_of_the_topology_has(call: Call, node: str) -> None:
    refused_unrun(call, stage_text().replace("[signal]", f'[signal]\noutput = "{node}"'), "signal.output")


def test_an_input_that_is_not_there(call: Call) -> None:
    refused_unrun(call, stage_text().replace("[signal]", '[signal]\ninput = "VIN"'), "signal.input")


@pytest.mark.parametrize(
    ("line", "hint"),
    [
        ('LAMDA = "0.01"', "did you mean LAMBDA?"),
        ('KAPPA = "0.2"', "KAPPA"),
        ('KF = "1e-25"', "does not take KF yet"),
        ("LEVEL = 3", "every model here is of level 1"),
    ],
)
def test_an_unknown_model_parameter(call: Call, line: str, hint: str) -> None:
    refused_unrun(call, stage_text().replace("[models.NDEV]", f"[models.NDEV]\n{line}"), hint)


@pytest.mark.parametrize("line", ["[options]\nreltol = 1", '[conditions]\ntemp = "50"', '[parts.X]\nR = "1"'])
def test_an_unknown_option(call: Call, line: str) -> None:
    refused_unrun(call, f"{stage_text()}\n{line}\n", "amp.toml: ")


@pytest.mark.parametrize(
    "value", ["0", "0 Ω", "-10k", " ", "10k 12k", "10k,12k", "10,5k", "10M", "ten", "1e-999"]
)
def test_a_resistance_of_zero_of_no_value_or_of_two(call: Call, value: str) -> None:
    refused_unrun(call, stage_text(RD=value), "parts.RD")


def test_a_list_of_values(call: Call) -> None:
    refused_unrun(call, stage_text().replace('RD = "10k"', 'RD = ["1k", "2k"]'), "parts.RD")


@pytest.mark.parametrize(
    ("old", "new"),
    [
        ("[models.NDEV]", '[models.ndev]\npolarity = "n"\n[models.NDEV]'),
        ("[models.NDEV]", '[models.NDEV]\npolarity = "n"\n[models.NDEV]'),
        ('W = "100u"', 'W = "100u"\nW = "10u"'),
        ('RD = "10k"', 'RD = "10k"\nRD = "11k"'),
        ('RD = "10k"', 'RD = "10k"\nrd = "11k"'),
    ],
    ids=["model in other case", "model", "width", "part", "part in other case"],
)
def test_a_name_given_twice(call: Call, old: str, new: str) -> None:
    text = "\n".join(line.split("  #")[0].rstrip() for line in stage_text().splitlines())
    assert text.count(old) == 1
    refused_unrun(call, text.replace(old, new), "amp.toml: ")


@pytest.mark.parametrize(
    ("values", "where"),
    [
        ({"W": "-100u"}, "transistors.M1.W"),
        ({"W": "0"}, "transistors.M1.W"),
        ({"L": "-2u"}, "transistors.M1.L"),
        ({"KP": "-100u"}, "models.NDEV.KP"),
        ({"TOX": "0"}, "models.NDEV.TOX"),
        ({"PHI": "-0.7"}, "models.NDEV.PHI"),
    ],
)
def test_a_size_or_parameter_below_zero(call: Call, values: dict[str, str], where: str) -> None:
    refused_unrun(call, stage_text(**values), where)


def test_diffusion_beyond_half_the_length(call: Call) -> None:
    text = stage_text().replace("[models.NDEV]", '[models.NDEV]\nLD = "1u"')
    refused_unrun(call, text, "transistors.M1.L", "more than 2·LD")


@pytest.mark.parametrize(
    "title",
    [r"amp\n.end\nRX d 0 1", r"amp\r.end", r"amp\u2028.end", "amp\\n.control\\nshell touch pwned\\n.endc"],
)
def test_text_after_the_end_by_way_of_the_title(call: Call, title: str) -> None:
    refused_unrun(call, stage_text(title=title), "title")
    assert not Path("pwned").exists()


# --- does not arise ------------------------------------------------------------------------------


def test_an_analysis_without_a_source(call: Call) -> None:
    stage = checked(call, stage_text(amplitude=""))
    gains = {row["name"]: row["simulated"] for row in stage["quantities"]}
    assert (stage["outcome"], stage["exit_code"]) == ("measured", 0)
    assert abs(gains["Av"]) > 10


@pytest.mark.parametrize(
    "values", [{"frequency": "1 uHz"}, {"frequency": "1e15"}, {"CL": "1e-30"}, {"CL": "1"}]
)
def test_a_sweep_without_points(call: Call, values: dict[str, str]) -> None:
    stage = checked(call, stage_text(**values))
    assert stage["outcome"] == "measured"
    plots = read_raw((Path(stage["run_folder"]) / "out.raw").read_bytes())
    assert [plot.points for plot in plots[2:]] == [1, 1]
    assert plots[1].points > 500


@pytest.mark.parametrize(
    ("written", "meant"), [("4k7", 4700.0), ("4.7 kΩ", 4700.0), ("4.7k\u2126", 4700.0), ("1u", 1e-6)]
)
def test_a_value_that_ngspice_would_misread(call: Call, written: str, meant: float) -> None:
    """`4k7` is 4000 to ngspice, and what follows a Greek letter is lost; the deck has plain figures."""
    stage = checked(call, stage_text(RS=written))
    (line,) = (line for line in evidence(stage, "deck.cir").splitlines() if line.startswith("RS s 0 "))
    assert float(line.removeprefix("RS s 0 ")) == pytest.approx(meant, rel=1e-15)
    currents = {row["name"]: row for row in stage["quantities"]}
    assert currents["ID(M1)"]["verdict"] == "within"


# --- values beyond sense -------------------------------------------------------------------------


@pytest.mark.parametrize(
    "values",
    [
        {"KP": "1e30"},
        {"KP": "1e-30", "COUT": "1p"},
        {"VDD": "1e9"},
        {"VDD": "1e-200"},
        {"R1": "1e300", "R2": "1e300"},
        {"R2": "1e-300"},
        {"CL": "1e18"},
        {"frequency": "1e100"},
        {"LAMBDA": "1e18"},
        {"PHI": "1e300", "GAMMA": "1e9"},
        {"L": "1e-30"},
        {"CGDO": "2e10"},
        {"COUT": "1e300"},
    ],
    ids=str,
)
def test_absurd_values_end_in_an_outcome_and_never_in_a_bug(call: Call, values: dict[str, str]) -> None:
    stage = checked(call, stage_text(**values))
    assert stage["exit_code"] in (0, 1, 2, 3)


def test_a_tiny_resistance_does_not_make_other_nodes_float(call: Call) -> None:
    stage = checked(call, stage_text(RD="1e-9"))
    assert "no DC path" not in stage["meaning"]
