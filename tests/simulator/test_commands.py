"""Every command but `check` as its user calls it: what it writes, refuses, suggests and returns."""

from __future__ import annotations

import json
import re
import subprocess
from pathlib import Path

import jsonschema
import pytest

import deckgen
from deckgen.cli.main import _COMMANDS
from deckgen.simulator import Simulator
from deckgen.stage.topology import Polarity
from tests.simulator.command_line import (
    PROJECT,
    TOPOLOGIES,
    Answer,
    Call,
    by_name,
    environment,
    inside,
    process,
    stage_text,
    write_stage,
)
from tests.unit.variants import POLARITIES, starter

VARIANTS = [(topology, polarity) for topology in TOPOLOGIES for polarity in POLARITIES]


@pytest.fixture
def call(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> Call:
    """The command line, in an empty folder."""
    monkeypatch.chdir(tmp_path)
    monkeypatch.delenv("DECKGEN_NGSPICE", raising=False)

    def run(*arguments: str | Path) -> Answer:
        return inside(capsys, *arguments)

    return run


# --- start ---------------------------------------------------------------------------------------


@pytest.mark.parametrize(("topology", "polarity"), VARIANTS)
def test_a_started_stage_passes_predict_and_check_as_it_is(
    call: Call, tmp_path: Path, topology: str, polarity: str
) -> None:
    started = call("start", topology, "--polarity", polarity)
    assert (started.code, started.out) == (0, "")
    assert f"deckgen check {topology}.toml" in started.err
    assert {path.name for path in tmp_path.iterdir()} == {f"{topology}.toml", f"{topology}.cir"}
    assert call("predict", f"{topology}.toml").code == 0
    checked = call("check", f"{topology}.toml", "--json", "check.json")
    assert checked.code == 0, checked.out
    assert checked.err == ""
    (stage,) = json.loads((tmp_path / "check.json").read_text("utf-8"))["stages"]
    assert [finding["slug"] for finding in stage["findings"]] == ["ratings-not-stated"]
    assert {row["verdict"] for row in stage["quantities"]} <= {"within", "absent"}


def test_start_gives_the_stage_the_title_and_the_file_it_was_asked_for(call: Call, tmp_path: Path) -> None:
    assert call("start", "common-source", "-p", "p", "-o", "input.toml", "--title", "Input 50 Ω").code == 0
    assert 'title = "Input 50 Ω"' in (tmp_path / "input.toml").read_text("utf-8")
    assert (tmp_path / "input.cir").read_text("utf-8").startswith("* Input 50 Ω\n* from input.toml,")


@pytest.mark.parametrize("there", ["common-source.toml", "common-source.cir"])
def test_start_overwrites_neither_file_unless_forced(call: Call, tmp_path: Path, there: str) -> None:
    (tmp_path / there).write_text("mine", encoding="utf-8")
    refused = call("start", "common-source")
    assert (refused.code, refused.out) == (2, "")
    assert f"{there} there already" in refused.err
    assert "--force" in refused.err
    assert [path.name for path in tmp_path.iterdir()] == [there]
    assert (tmp_path / there).read_text("utf-8") == "mine"
    assert call("start", "common-source", "--force").code == 0
    assert "mine" not in (tmp_path / there).read_text("utf-8")


@pytest.mark.parametrize(
    ("arguments", "hint"),
    [
        (["common-sorce"], "did you mean common-source?"),
        (["../common-source"], "one of common-gate, common-source,"),
        (["common-source", "-o", "amp.cir"], "write amp.cir.toml"),
        (["common-source", "-o", "nowhere/amp.toml"], "nowhere is no folder"),
        (["common-source", "--title", "two\nlines"], "without line breaks"),
        (["common-source", "-p", "x"], "'n', 'p'"),
    ],
    ids=["misspelt topology", "a way out", "not .toml", "no such folder", "title", "polarity"],
)
def test_what_start_refuses_leaves_nothing_behind(
    call: Call, tmp_path: Path, arguments: list[str], hint: str
) -> None:
    refused = call("start", *arguments)
    assert (refused.code, refused.out) == (2, "")
    assert hint in refused.err
    assert list(tmp_path.iterdir()) == []


# --- predict -------------------------------------------------------------------------------------


def test_predict_shows_the_working_and_needs_no_simulator(
    call: Call, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    write_stage(tmp_path / "amp.toml")
    monkeypatch.setenv("DECKGEN_NGSPICE", "/nowhere/ngspice")
    answer = call("predict", "amp.toml")
    assert (answer.code, answer.err) == (0, "")
    for text in ("gm(M1)", "Av", "fH", "M1", "saturation", "µA"):
        assert text in answer.out
    assert [path.name for path in tmp_path.iterdir()] == ["amp.toml"]


def test_the_json_of_predict_is_valid_and_alone_on_standard_output(call: Call, tmp_path: Path) -> None:
    write_stage(tmp_path / "amp.toml")
    write_stage(tmp_path / "low.toml", R2="200k")
    answer = call("predict", "low.toml", "amp.toml", "--json", "-", "--markdown", "both.md")
    assert (answer.code, answer.err) == (0, "")
    document = json.loads(answer.out)
    schema = json.loads((PROJECT / "deckgen/schemas/predict-1.json").read_text("utf-8"))
    jsonschema.Draft202012Validator(schema).validate(document)
    assert [stage["name"] for stage in document["stages"]] == ["low", "amp"]
    assert "low" in (tmp_path / "both.md").read_text("utf-8")


def test_predict_tells_of_every_stage_that_it_refuses(call: Call, tmp_path: Path) -> None:
    write_stage(tmp_path / "amp.toml")
    write_stage(tmp_path / "typo.toml", RD="10M")
    write_stage(tmp_path / "open.toml", RL="1e30")
    answer = call("predict", "typo.toml", "amp.toml", "open.toml", "none.toml")
    assert (answer.code, answer.out) == (2, "")
    lines = answer.err.splitlines()
    assert [line.split(": ")[:2] for line in lines] == [
        ["deckgen", name] for name in ("typo.toml", "open.toml", "none.toml")
    ]
    assert "10Meg" in lines[0]


# --- write ---------------------------------------------------------------------------------------


def printed(listing: str, name: str) -> float:
    """A value of the operating point as ngspice prints it: the last word of the line of that name."""
    (value,) = re.findall(rf"(?m)^\s*{re.escape(name)}\s+(\S+)\s*$", listing)
    return float(value)


@pytest.mark.parametrize(("topology", "polarity"), VARIANTS)
def test_a_written_deck_runs_in_plain_ngspice_and_prints_the_operating_point(
    call: Call, simulator: Simulator, tmp_path: Path, topology: str, polarity: Polarity
) -> None:
    call("start", topology, "-p", polarity, "-o", "amp.toml")
    assert call("write", "amp.toml", "-o", "plain.cir").code == 0
    document = json.loads(call("check", "amp.toml", "--no-keep", "--json", "-").out)
    simulated = {row["name"]: row["simulated"] for row in document["stages"][0]["quantities"]}
    elsewhere = tmp_path / "elsewhere"
    elsewhere.mkdir()
    (tmp_path / "plain.cir").rename(elsewhere / "plain.cir")
    run = subprocess.run(
        [simulator.path, "-b", "plain.cir"],
        cwd=elsewhere,
        env=environment(HOME=str(elsewhere)),
        capture_output=True,
        text=True,
        timeout=30,
    )
    assert (run.returncode, run.stderr) == (0, "")
    assert printed(run.stdout, "id") == pytest.approx(simulated["ID(M1)"], rel=1e-4)
    assert printed(run.stdout, "gm") == pytest.approx(simulated["gm(M1)"], rel=1e-4)
    supply = next(part.value for part in starter(topology, polarity).parts if part.name == "VDD")
    assert printed(run.stdout, "vdd") == pytest.approx(supply)
    assert re.search(r"Index\s+frequency\s+vdb\(out\)\s+vp\(out\)", run.stdout)


def test_a_written_deck_is_the_same_every_time_and_tells_neither_date_nor_place(
    call: Call, tmp_path: Path
) -> None:
    texts = []
    for name in ("one", "other"):
        folder = tmp_path / name
        folder.mkdir()
        stage = write_stage(folder / "amp.toml")
        answer = call("write", stage)
        assert (answer.code, answer.err) == (0, "")
        texts.append(answer.out)
    assert texts[0] == texts[1]
    assert "/" not in texts[0]
    assert not re.search(r"20\d\d[-/.]\d|\d:\d\d", texts[0])


def test_write_gives_a_file_and_standard_output_the_same_deck(call: Call, tmp_path: Path) -> None:
    write_stage(tmp_path / "amp.toml")
    out = call("write", "amp.toml", "-o", "-").out
    told = call("write", "amp.toml", "-o", "amp.cir")
    assert (told.code, told.out) == (0, "")
    assert "ngspice -b amp.cir" in told.err
    assert call("-q", "write", "amp.toml", "-o", "quiet.cir") == (0, "", "")
    assert (tmp_path / "amp.cir").read_text("utf-8") == out == (tmp_path / "quiet.cir").read_text("utf-8")


def test_write_overwrites_only_when_forced(call: Call, tmp_path: Path) -> None:
    write_stage(tmp_path / "amp.toml")
    (tmp_path / "amp.cir").write_text("mine", encoding="utf-8")
    refused = call("write", "amp.toml", "-o", "amp.cir")
    assert (refused.code, refused.out) == (2, "")
    assert "amp.cir is there already" in refused.err
    assert (tmp_path / "amp.cir").read_text("utf-8") == "mine"
    assert call("write", "amp.toml", "-o", "amp.cir", "--force").code == 0
    assert call("write", "amp.toml", "-o", "nowhere/amp.cir").code == 2
    assert call("write", "typo.toml").code == 2


# --- topologies, simulator -----------------------------------------------------------------------


def test_topologies_are_listed_and_described(call: Call) -> None:
    listed = call("topologies")
    assert (listed.code, listed.err) == (0, "")
    assert [line.split()[0] for line in listed.out.splitlines()] == list(TOPOLOGIES)
    described = call("topologies", "common-source")
    assert "RD     Ω" in described.out
    assert "optional, with RS" in described.out
    assert "optional, needed without ISS" in call("topologies", "common-gate").out
    refused = call("topologies", "source-folower")
    assert (refused.code, refused.out) == (2, "")
    assert "did you mean source-follower?" in refused.err


def test_the_simulator_that_runs_is_shown_with_what_it_can_do(call: Call, simulator: Simulator) -> None:
    answer = call("simulator")
    assert (answer.code, answer.err) == (0, "")
    assert answer.out.startswith(f"ngspice {simulator.version}\n{simulator.path}\n")
    assert answer.out.count("  yes  ") == 5


def test_a_simulator_that_is_not_there_is_code_3(call: Call, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("DECKGEN_NGSPICE", "/nowhere/ngspice")
    answer = call("simulator")
    assert (answer.code, answer.out) == (3, "")
    assert len(answer.err.splitlines()) == 1
    assert "/nowhere/ngspice" in answer.err
    assert "Debian package ngspice" in answer.err


# --- the program as a whole ----------------------------------------------------------------------


@pytest.mark.parametrize("option", ["-h", "--help"])
@pytest.mark.parametrize("name", ["", *_COMMANDS])
def test_everything_has_help(call: Call, name: str, option: str) -> None:
    answer = call(*([name] if name else []), option)
    assert (answer.code, answer.err) == (0, "")
    assert answer.out.startswith(f"Usage: deckgen {name}".rstrip())
    assert max(map(len, answer.out.splitlines())) <= 100


def test_the_version_is_that_of_the_package(call: Call) -> None:
    assert call("--version") == (0, f"deckgen, version {deckgen.__version__}\n", "")


def test_no_command_and_no_stage_are_refused_with_help(call: Call) -> None:
    assert call().code == 2
    missing = call("check")
    assert missing.code == 2
    assert "STAGE" in missing.err


@pytest.mark.parametrize(
    ("arguments", "hint"),
    [
        (["chek", "amp.toml"], "Did you mean check?"),
        (["check", "amp.toml", "--jsn", "x"], "--json"),
        (["start", "source-folower"], "did you mean source-follower?"),
        (["check", "amp.tml"], "did you mean amp.toml?"),
        (["predict", "anp.toml"], "did you mean amp.toml?"),
    ],
)
def test_a_slip_of_the_pen_is_met_with_the_right_word(
    call: Call, tmp_path: Path, arguments: list[str], hint: str
) -> None:
    write_stage(tmp_path / "amp.toml")
    answer = call(*arguments)
    assert answer.code == 2
    assert hint in answer.out + answer.err


def test_the_log_file_grows_by_one_line_a_stage(call: Call, tmp_path: Path) -> None:
    write_stage(tmp_path / "amp.toml")
    write_stage(tmp_path / "typo.toml", RD="-10k")
    for _ in range(2):
        call("--log-file", "check.log", "check", "amp.toml", "typo.toml", "--no-keep", "-j", "1")
    lines = (tmp_path / "check.log").read_text("utf-8").splitlines()
    assert len(lines) == 4
    assert "amp.toml: measured, exit code 0" in lines[0]
    assert "typo.toml: refused, exit code 2" in lines[3]


def test_verbose_says_on_standard_error_what_the_log_file_says(call: Call, tmp_path: Path) -> None:
    write_stage(tmp_path / "amp.toml")
    answer = call("-v", "check", "amp.toml", "--no-keep")
    assert "amp.toml: measured, exit code 0" in answer.err
    assert "exit code 0\n" not in answer.out


def test_a_log_file_that_can_not_be_written_is_refused(call: Call, tmp_path: Path) -> None:
    answer = call("--log-file", "nowhere/check.log", "check", write_stage(tmp_path / "amp.toml"))
    assert (answer.code, answer.out) == (2, "")
    assert "nowhere/check.log: No such file or directory" in answer.err
    assert [path.name for path in tmp_path.iterdir()] == ["amp.toml"]


def test_the_shell_completes_commands_and_options(tmp_path: Path) -> None:
    script = process(tmp_path, variables={"_DECKGEN_COMPLETE": "bash_source"})
    assert (script.code, script.err) == (0, "")
    (tmp_path / "completion.sh").write_text(script.out, encoding="utf-8")
    subprocess.run(["bash", "-n", "completion.sh"], cwd=tmp_path, check=True, timeout=30)

    def completed(words: str, position: int) -> list[str]:
        asked = {"COMP_WORDS": words, "COMP_CWORD": str(position), "_DECKGEN_COMPLETE": "bash_complete"}
        answer = process(tmp_path, variables=asked)
        return [line.partition(",")[2] for line in answer.out.splitlines()]

    assert completed("deckgen pre", 1) == ["predict"]
    assert completed("deckgen check --jo", 2) == ["--jobs"]


def test_the_stages_of_the_tests_are_the_starter_with_other_values(call: Call, tmp_path: Path) -> None:
    """The helper that the other tests build on changes what it says and nothing else."""
    call("start", "common-source")
    plain = (tmp_path / "common-source.toml").read_text("utf-8")
    assert stage_text() == plain
    changed = stage_text(RD="11k").splitlines()
    assert [line for line in changed if line not in plain.splitlines()] == ['RD = "11k"']
    document = json.loads(call("check", "common-source.toml", "--json", "-", "--no-keep").out)
    assert by_name(document)["common-source"]["outcome"] == "measured"


# --- decks ---------------------------------------------------------------------------------------


def test_write_gives_a_deck_without_its_commands_that_prints_its_operating_point(
    call: Call, tmp_path: Path
) -> None:
    (tmp_path / "part.inc").write_text("rd vdd d 4.7k\n", encoding="utf-8")
    (tmp_path / "amp.cir").write_text(
        "amp\n.include part.inc\n.model nm nmos level=1 vto=0.7 kp=1m\nvdd vdd 0 5\nvin g 0 1 ac 1\n"
        "m1 d g 0 0 nm w=1u l=1u\n.control\nshell touch made\n.endc\n.end\n",
        encoding="utf-8",
    )
    assert call("write", "amp.cir", "-o", "bare.cir")[0] == 0
    text = (tmp_path / "bare.cir").read_text(encoding="utf-8")
    assert "rd vdd d 4.7k" in text
    assert ".control" not in text
    answer = subprocess.run(
        ["ngspice", "-n", "-b", "bare.cir"],
        cwd=tmp_path,
        capture_output=True,
        text=True,
        timeout=30,
        check=True,
    )
    assert "Node                                  Voltage" in answer.stdout
    assert not (tmp_path / "made").exists()
