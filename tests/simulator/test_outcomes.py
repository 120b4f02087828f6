"""Every outcome and its exit code, provoked through `deckgen check`; what each leaves as evidence.

A stage file alone makes ngspice answer, find no operating point, and search beyond its time. deckgen writes
the deck itself, so no stage file can lack a model, misspell a parameter or crash ngspice: there a script
stands between, which hands ngspice 39 another deck or spoils what it wrote. Only where a process hangs or is
killed does the script not call ngspice at all.
"""

from __future__ import annotations

import contextlib
import hashlib
import json
import re
import resource
import subprocess
from collections.abc import Iterator, Mapping
from pathlib import Path
from types import MappingProxyType
from typing import Any, NamedTuple

import jsonschema
import pytest

from deckgen import __version__, pipeline
from deckgen.errors import ExitCode, Outcome
from deckgen.simulator import Simulator
from deckgen.simulator.startup import digest
from tests.simulator.command_line import (
    PROJECT,
    Answer,
    Call,
    by_name,
    fake_ngspice,
    inside,
    run_folders,
    stage_text,
)

ALL_THERE = {"deck.cir", "stdout.txt", "stderr.txt", "start-up/spinit", "comparison.json"}


class Case(NamedTuple):
    """How an outcome is provoked: values of the stage, lines added to it, a script for the simulator.

    In the script ``ngspice`` is the real one. ``words`` are in the meaning or among the simulator's own.
    """

    outcome: str
    code: int
    words: str = ""
    values: Mapping[str, str] = MappingProxyType({})
    more: str = ""
    script: str = ""
    limit: str = "20"
    has_raw: bool = True


def other_deck(edit: str) -> str:
    """The real simulator, with the deck edited by sed on its way."""
    return f"sed {edit} deck.cir >other.cir; exec ngspice -n -b other.cir"


CASES = {
    "measured": Case("measured", 0),
    "gap": Case("measured", 1, more='[tolerance]\ngm = "1 %"'),
    "claim": Case("measured", 1, more='[claims]\nRin = "1Meg"'),
    "rating": Case("measured", 1, more='[ratings.M1]\nVDS = "5 V"'),
    "not-compared": Case("measured", 1, values={"RD": "68k"}),
    "refused": Case("refused", 2, "RD: found", {"RD": "0"}, has_raw=False),
    "no-bias": Case("refused", 2, "no DC path to ground from node out", {"RL": "1e30"}, has_raw=False),
    "misspelt": Case(
        "refused by the simulator",
        3,
        "lamda is no parameter",
        script=other_deck("'s/LEVEL=1/& LAMDA=1/'"),
        has_raw=False,
    ),
    "unknown-line": Case(
        "refused by the simulator", 3, ".frob", script=other_deck("'s/^.temp/.frob\\n&/'"), has_raw=False
    ),
    "doubtful": Case(
        "refused by the simulator",
        3,
        "the moon is full",
        script='ngspice "$@" && echo "Warning: the moon is full" >&2',
    ),
    "gone-model": Case(
        "model missing", 3, "no .model ndev", script=other_deck("'/^.model/,/^$/d'"), has_raw=False
    ),
    "no-point": Case("no convergence", 3, "node d", {"GAMMA": "1e50"}),
    "searching": Case(
        "timed out",
        3,
        "no end within 0.5 s",
        {"topology": "source-follower", "VDD": "-12k"},
        limit="0.5",
        has_raw=False,
    ),
    "hanging": Case("timed out", 3, "no end within 0.5 s", script="sleep 60", limit="0.5", has_raw=False),
    "killed": Case("crashed", 3, "signal 9 (SIGKILL)", script="kill -9 $$", has_raw=False),
    "looping": Case(
        "crashed",
        3,
        "signal 11 (SIGSEGV)",
        script="printf 'title\\n.include loop.cir\\n' >loop.cir; exec ngspice -n -b loop.cir",
        has_raw=False,
    ),
    "half": Case(
        "incomplete",
        3,
        "out.raw is damaged",
        script='ngspice "$@"; head -c $(($(wc -c <out.raw) / 2)) out.raw >half; mv half out.raw',
    ),
    "empty": Case("incomplete", 3, "out.raw is damaged", script='ngspice "$@"; : >out.raw'),
    "no-raw": Case("incomplete", 3, "found none", script='ngspice "$@"; rm out.raw', has_raw=False),
    "a-plot-short": Case(
        "incomplete", 3, "expected the plots", script=other_deck("'/^write out.raw frequency v(out)$/d'")
    ),
    "a-plot-twice": Case("incomplete", 3, "expected 1 points", script=other_deck("'/^ac lin/d'")),
    "infinite": Case(
        "incomplete", 3, "not finite at every point", script=other_deck("'s/^COUT d .*/COUT d out 1e300/'")
    ),
}
NO_RUN = {"refused", "no-bias"}


def write(folder: Path, name: str, case: Case) -> Path:
    """The stage file of a case; its title is its name, by which the script knows it."""
    values = {"topology": "common-source", **case.values}
    text = stage_text(values.pop("topology"), title=f"case {name}.", **values)
    path = folder / f"{name}.toml"
    path.write_text(f"{text}\n{case.more}", encoding="utf-8")
    return path


@pytest.fixture
def call(
    simulator: Simulator, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> Call:
    """The command line in an empty folder; the scripts of the cases stand before the simulator."""
    work = tmp_path / "work"
    work.mkdir()
    monkeypatch.chdir(work)
    scripts = [f'*"case {name}."*) {case.script} ;;' for name, case in CASES.items() if case.script]
    lines = [f'ngspice() {{ {simulator.path} "$@"; }}', 'case "$(head -1 deck.cir)" in', *scripts]
    script = "\n".join([*lines, f'*) exec {simulator.path} "$@" ;;', "esac"])
    # `exec` takes programs, no functions.
    script = script.replace("exec ngspice", f"exec {simulator.path}")
    monkeypatch.setenv("DECKGEN_NGSPICE", str(fake_ngspice(tmp_path, script).path))

    def run(*arguments: str | Path) -> Answer:
        return inside(capsys, *arguments)

    return run


def checked(answer: Answer) -> dict[str, dict[str, Any]]:
    """The stages of the document on standard output, which is valid and tells the exit code itself."""
    document = json.loads(answer.out)
    schema = json.loads((PROJECT / "deckgen/schemas/check-1.json").read_text("utf-8"))
    jsonschema.Draft202012Validator(schema).validate(document)
    assert document["exit_code"] == answer.code
    return by_name(document)


def see_evidence(stage: dict[str, Any], case: Case, text: str) -> None:
    """See that a run folder holds all that is needed to repeat the run and to see what came of it."""
    folder = Path(stage["run_folder"])
    record = json.loads((folder / "run.json").read_text("utf-8"))
    there = {
        path.relative_to(folder).as_posix(): hashlib.sha256(path.read_bytes()).hexdigest()
        for path in folder.rglob("*")
        if path.is_file() and path.name != "run.json"
    }
    assert record["files"] == there
    assert ALL_THERE | {record["stage_file"]} | ({"out.raw"} if case.has_raw else set()) <= set(there)
    assert (folder / record["stage_file"]).read_text("utf-8") == text
    assert record["deckgen"] == __version__
    assert record["simulator"]["name"] == "ngspice"
    assert record["simulator"]["version"] == "39"
    assert record["python"].startswith("3.")
    assert record["start_up_file_sha256"] == there["start-up/spinit"] == digest()
    assert (record["temperature_kelvin"], record["tnom_kelvin"]) == (300.15, 300.15)
    assert record["command"][1:] == ["-n", "-b", "deck.cir"]
    assert record["environment"]["SPICE_SCRIPTS"] == "start-up"
    assert record["outcome"] == case.outcome
    assert record["returncode"] is not None
    assert record["seconds"] > 0
    (kept,) = json.loads((folder / "comparison.json").read_text("utf-8"))["stages"]
    assert {**kept, "seconds": 0} == {**stage, "seconds": 0}
    assert (folder / "deck.cir").read_text("utf-8").startswith("* case ")


@pytest.mark.parametrize("name", CASES)
def test_each_outcome_has_its_exit_code_its_words_and_its_evidence(call: Call, name: str) -> None:
    case = CASES[name]
    path = write(Path(), name, case)
    answer = call("check", path, "--json", "-", "--time-limit", case.limit)
    stage = checked(answer)[name]
    assert (stage["outcome"], answer.code, stage["exit_code"]) == (case.outcome, case.code, case.code)
    assert case.words in " ".join([stage["meaning"], *stage["said"]])
    assert bool(stage["meaning"]) == (case.outcome != "measured")
    assert bool(stage["quantities"]) == (case.outcome == "measured")
    if name in NO_RUN:
        assert stage["run_folder"] is None
        assert run_folders(Path("runs")) == []
    else:
        see_evidence(stage, case, path.read_text("utf-8"))


@pytest.mark.parametrize("wanted", ["/nowhere/ngspice", "/", "/etc/passwd", "/bin/true"])
def test_without_a_simulator_the_stage_is_still_read_and_analysed(
    call: Call, monkeypatch: pytest.MonkeyPatch, wanted: str
) -> None:
    monkeypatch.setenv("DECKGEN_NGSPICE", wanted)
    write(Path(), "good", CASES["measured"])
    write(Path(), "hard", Case("measured", 0, values={"amplitude": "1 V"}))
    write(Path(), "bad", CASES["refused"])
    answer = call("check", ".", "--json", "-")
    stages = checked(answer)
    assert answer.code == 3
    outcomes = {name: stage["outcome"] for name, stage in stages.items()}
    assert outcomes == {"good": "simulator missing", "hard": "simulator missing", "bad": "refused"}
    assert wanted in stages["good"]["meaning"]
    assert "signal-too-large" in {finding["slug"] for finding in stages["hard"]["findings"]}
    assert run_folders(Path("runs")) == []


def test_without_a_simulator_on_the_path_the_report_says_what_to_install(
    call: Call, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.delenv("DECKGEN_NGSPICE")
    monkeypatch.setenv("PATH", "/nowhere")
    write(Path(), "good", CASES["measured"])
    answer = call("check", "good.toml")
    assert answer.code == 3
    assert "no ngspice on PATH" in answer.out
    assert "DECKGEN_NGSPICE" in answer.out


def test_every_outcome_is_in_the_table() -> None:
    # Without a simulator, and with a bug of our own, whole tests below.
    here = {case.outcome for case in CASES.values()} | {Outcome.SIMULATOR_MISSING, Outcome.BUG}
    assert here == set(Outcome)


# --- many stages ---------------------------------------------------------------------------------


def test_among_all_of_them_none_stops_the_others_and_the_highest_code_wins(call: Call) -> None:
    texts = {name: write(Path(), name, case).read_text("utf-8") for name, case in CASES.items()}
    # What is not meant to run out of time has to share the processor here.
    slow = {name for name, case in CASES.items() if case.outcome == "timed out"}
    for name in slow:
        Path(f"{name}.toml").unlink()
    answer = call("check", ".", "--jobs", "2", "--json", "-")
    stages = checked(answer)
    assert answer.code == 3
    found = {name: (stage["outcome"], stage["exit_code"]) for name, stage in stages.items()}
    assert found == {name: (case.outcome, case.code) for name, case in CASES.items() if name not in slow}
    for name, stage in stages.items():
        if name not in NO_RUN:
            see_evidence(stage, CASES[name], texts[name])
    assert len(answer.err.splitlines()) == len(stages)


@pytest.mark.parametrize(
    "names",
    [
        ["measured", "gap"],
        ["gap", "refused"],
        ["refused", "measured", "half"],
        ["killed", "refused", "measured"],
    ],
)
@pytest.mark.parametrize("jobs", ["1", "2"])
def test_the_highest_code_wins_whatever_the_order(call: Call, names: list[str], jobs: str) -> None:
    paths = [write(Path(), name, CASES[name]) for name in names]
    answer = call("check", *paths, "--json", "-", "--no-keep", "--jobs", jobs)
    assert [stage["outcome"] for stage in checked(answer).values()] == [CASES[n].outcome for n in names]
    assert answer.code == max(CASES[name].code for name in names)


@pytest.mark.parametrize("jobs", ["1", "2"])
def test_a_bug_that_shows_in_one_stage_costs_the_others_nothing(
    call: Call, monkeypatch: pytest.MonkeyPatch, jobs: str
) -> None:
    whole = pipeline.judge

    def judge(analysis: pipeline.Analysis, *arguments: Any, **options: Any) -> Any:
        if analysis.stage.name == "a":
            raise ZeroDivisionError
        return whole(analysis, *arguments, **options)

    monkeypatch.setattr(pipeline, "judge", judge)
    for name in "ab":
        write(Path(), name, CASES["measured"])
    answer = call("check", ".", "--jobs", jobs, "--json", "all.json")
    assert answer.code == ExitCode.BUG
    assert by_name(json.loads(Path("all.json").read_text("utf-8")))["b"]["outcome"] == "measured"


# --- a disk without room -------------------------------------------------------------------------


@contextlib.contextmanager
def small_disk(folder: Path, kibibytes: int) -> Iterator[None]:
    """A folder with little room: a file system of its own, or, without the right to mount, small files."""
    mounted = subprocess.run(
        ["mount", "-t", "tmpfs", "-o", f"size={kibibytes}k", "deckgen-tests", str(folder)],
        capture_output=True,
        check=False,
    )
    limits = resource.getrlimit(resource.RLIMIT_FSIZE)
    if mounted.returncode != 0:
        resource.setrlimit(resource.RLIMIT_FSIZE, (8192, limits[1]))
    try:
        yield
    finally:
        if mounted.returncode == 0:
            subprocess.run(["umount", str(folder)], check=True)
        else:
            resource.setrlimit(resource.RLIMIT_FSIZE, limits)


# The deck takes 4 KiB, the raw file 20, the comparison 16.
@pytest.mark.parametrize("kibibytes", [16, 40], ids=["no room for the raw file", "nor for the comparison"])
def test_a_full_disk_is_incomplete_and_with_room_again_all_is_well(call: Call, kibibytes: int) -> None:
    write(Path(), "good", CASES["measured"])
    disk = Path("disk")
    disk.mkdir()
    with small_disk(disk, kibibytes):
        answer = call("check", "good.toml", "--run-dir", "disk", "--json", "all.json")
        assert all(folder.is_dir() for folder in run_folders(disk))
    stage = by_name(json.loads(Path("all.json").read_text("utf-8")))["good"]
    assert (stage["outcome"], answer.code) == ("incomplete", 3)
    assert re.search("No space left on device|File too large", stage["meaning"])
    assert stage["run_folder"] in stage["meaning"]
    assert stage["quantities"] == []
    assert "incomplete" in answer.out
    assert call("check", "good.toml", "--run-dir", "disk").code == 0
