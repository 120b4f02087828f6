"""`deckgen check` as its user calls it: what it takes, what it writes and where, what it leaves behind."""

from __future__ import annotations

import json
import os
import resource
import shutil
import subprocess
import tempfile
from pathlib import Path
from typing import Any

import jsonschema
import pytest

from deckgen.simulator import Simulator, read_raw
from tests.simulator.command_line import (
    PROJECT,
    Answer,
    Call,
    by_name,
    command,
    environment,
    fake_ngspice,
    inside,
    run_folders,
    write_stage,
)


@pytest.fixture
def call(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> Call:
    """The command line, in an empty folder."""
    monkeypatch.chdir(tmp_path)
    monkeypatch.delenv("DECKGEN_NGSPICE", raising=False)

    def run(*arguments: str | Path) -> Answer:
        return inside(capsys, *arguments)

    return run


def document(answer: Answer) -> dict[str, Any]:
    """The document on standard output, which holds nothing else, held against its schema."""
    found: dict[str, Any] = json.loads(answer.out)
    schema = json.loads((PROJECT / "deckgen/schemas/check-1.json").read_text("utf-8"))
    jsonschema.Draft202012Validator(schema).validate(found)
    assert answer.out.startswith("{\n")
    assert answer.out.endswith("}\n")
    assert found["exit_code"] == answer.code
    return found


# --- what it takes -------------------------------------------------------------------------------


def test_files_and_folders_are_checked_in_the_order_named_each_once(call: Call, tmp_path: Path) -> None:
    (tmp_path / "lib/deep").mkdir(parents=True)
    for name in ("lib/b.toml", "lib/deep/a.toml", "z.toml"):
        write_stage(tmp_path / name)
    (tmp_path / "lib/library.toml").write_text("format = 1\n", encoding="utf-8")
    (tmp_path / "lib/notes.txt").write_text("no stage", encoding="utf-8")
    answer = call("check", "z.toml", "lib", "lib/b.toml", "./z.toml", "--no-keep", "--json", "-")
    files = [stage["file"] for stage in document(answer)["stages"]]
    assert files == ["z.toml", "lib/b.toml", "lib/deep/a.toml"]
    assert answer.code == 0


def test_a_folder_whose_name_ends_like_a_stage_file_is_a_folder(call: Call, tmp_path: Path) -> None:
    (tmp_path / "x.toml").mkdir()
    empty = call("check", "x.toml")
    assert (empty.code, empty.out) == (2, "")
    assert "x.toml: found no stage file" in empty.err
    write_stage(tmp_path / "x.toml/amp.toml")
    (tmp_path / "x.toml/y.toml").mkdir()
    answer = call("check", "x.toml", "--no-keep", "--json", "-")
    assert [stage["file"] for stage in document(answer)["stages"]] == ["x.toml/amp.toml"]


def test_every_folder_without_a_stage_is_named(call: Call, tmp_path: Path) -> None:
    for name in ("a", "b"):
        (tmp_path / name).mkdir()
    answer = call("check", "a", "b")
    assert (answer.code, answer.out) == (2, "")
    assert [line.split(": ")[-2] for line in answer.err.splitlines()] == ["a", "b"]


# Even root can't read a process's memory at address 0: a file without permission would not stop him.
UNREADABLE = "/proc/self/mem"
BAD_FILES = {
    "binary": b"\x7fELF\x02\x01\x01\x00\xff\xfe",
    "utf-16": 'format = 1\ntitle = "x"\n'.encode("utf-16"),
    "returns": b'format = 1\rtitle = "x"\r',
    "empty": b"",
    "large": b"# filler\n" * 120_000,
    "syntax": b"[parts]\nRD = 10k\n",
}


@pytest.mark.parametrize("name", BAD_FILES)
def test_a_file_that_is_no_stage_file_is_refused_and_the_good_one_beside_it_checked(
    call: Call, tmp_path: Path, name: str
) -> None:
    (tmp_path / "bad.toml").write_bytes(BAD_FILES[name])
    write_stage(tmp_path / "good.toml")
    answer = call("check", ".", "--no-keep", "--json", "-")
    stages = by_name(document(answer))
    assert (answer.code, stages["bad"]["outcome"], stages["good"]["outcome"]) == (2, "refused", "measured")
    assert stages["bad"]["meaning"].startswith("bad.toml: ")
    assert stages["good"]["exit_code"] == 0


def test_what_is_no_file_is_refused_without_waiting_for_it(call: Call, tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "pipe.toml")
    paths = ["pipe.toml", "/dev/zero", "missing.toml", UNREADABLE, "missing/../amp.toml"]
    answer = call("check", *paths, "--no-keep", "--json", "-")
    assert answer.code == 2
    stages = document(answer)["stages"]
    assert [stage["outcome"] for stage in stages] == ["refused"] * len(paths)
    assert "a device or pipe" in stages[0]["meaning"]
    assert "no such file" in stages[2]["meaning"]
    assert "can be read" in stages[3]["meaning"]


def test_a_name_that_is_no_text_is_shown_escaped(call: Call, tmp_path: Path) -> None:
    name = os.fsdecode(b"amp\xff\x1b[31m.toml")
    write_stage(tmp_path / name)
    for option in ("--json", "--markdown"):
        answer = call("check", name, "--no-keep", option, "-")
        answer.out.encode("utf-8")
        assert "\x1b" not in answer.out
    shown = call("check", name, "--no-keep")
    assert "\x1b" not in shown.out


# --- reports -------------------------------------------------------------------------------------


def test_a_report_on_standard_output_is_alone_there(call: Call, tmp_path: Path) -> None:
    for name in ("a", "b"):
        write_stage(tmp_path / f"{name}.toml")
    answer = call("check", ".", "--no-keep", "--json", "-", "--markdown", "out.md")
    assert len(document(answer)["stages"]) == 2
    markdown = call("check", ".", "--no-keep", "--markdown", "-", "--json", "out.json")
    assert markdown.out.startswith("#")
    assert "── " not in markdown.out

    def timeless(text: str) -> list[str]:
        return [line for line in text.splitlines() if " s" not in line]

    assert timeless((tmp_path / "out.md").read_text("utf-8")) == timeless(markdown.out)
    assert [line.split()[0] for line in answer.err.splitlines()] == ["1/2", "2/2"]


def test_two_reports_on_standard_output_are_refused_before_anything_runs(call: Call, tmp_path: Path) -> None:
    write_stage(tmp_path / "amp.toml")
    answer = call("check", "amp.toml", "--json", "-", "--markdown", "-")
    assert (answer.code, answer.out) == (2, "")
    assert "--json and --markdown" in answer.err
    assert run_folders(tmp_path / "runs") == []


def test_reports_in_files_come_beside_the_one_on_the_terminal(call: Call, tmp_path: Path) -> None:
    write_stage(tmp_path / "amp.toml")
    answer = call("check", "amp.toml", "--no-keep", "--json", "a.json", "--markdown", "a.md")
    assert answer.out.startswith("── amp ")
    first = (tmp_path / "a.json").read_text("utf-8")
    found = json.loads(first)
    again = json.loads(call("check", "amp.toml", "--no-keep", "--json", "-").out)
    for each in (found, again):
        each["stages"][0]["seconds"] = 0.0
    assert found == again
    assert "amp" in (tmp_path / "a.md").read_text("utf-8")
    assert sorted(path.name for path in tmp_path.iterdir()) == ["a.json", "a.md", "amp.toml"]


@pytest.mark.parametrize(
    ("target", "hint"),
    [
        ("nowhere/a.json", "nowhere is no folder"),
        (".", "is a directory"),
        # Who takes the option for a switch names the next stage there.
        ("other.toml", "other.toml would be a stage file or deck"),
        ("other.cir", "other.cir would be a stage file or deck"),
    ],
)
@pytest.mark.parametrize("option", ["--json", "--markdown"])
def test_a_report_that_can_not_be_meant_is_refused_before_anything_runs(
    call: Call, tmp_path: Path, option: str, target: str, hint: str
) -> None:
    write_stage(tmp_path / "amp.toml")
    for name in ("other.toml", "other.cir"):
        (tmp_path / name).write_text("mine", encoding="utf-8")
    answer = call("check", option, target, "amp.toml")
    assert (answer.code, answer.out) == (2, "")
    assert hint in answer.err
    assert {path.name for path in tmp_path.iterdir()} == {"amp.toml", "other.toml", "other.cir"}
    assert (tmp_path / "other.toml").read_text("utf-8") == "mine"
    assert (tmp_path / "other.cir").read_text("utf-8") == "mine"


def test_a_report_that_finds_no_room_leaves_the_old_one_and_the_terminal_has_it(
    call: Call, tmp_path: Path
) -> None:
    write_stage(tmp_path / "amp.toml")
    (tmp_path / "a.json").write_text("old", encoding="utf-8")
    limits = resource.getrlimit(resource.RLIMIT_FSIZE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (8192, limits[1]))
    try:
        answer = call("check", "amp.toml", "--no-keep", "--json", "a.json")
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, limits)
    assert answer.code == 3
    assert answer.err == "deckgen: a.json: can't be written (File too large)\n"
    assert "exit code   0" in answer.out
    assert (tmp_path / "a.json").read_text("utf-8") == "old"
    assert sorted(path.name for path in tmp_path.iterdir()) == ["a.json", "amp.toml"]


def test_quiet_shows_only_what_fails(call: Call, tmp_path: Path) -> None:
    write_stage(tmp_path / "good.toml")
    write_stage(tmp_path / "claim.toml", '[claims]\nRin = "1Meg"')
    answer = call("-q", "check", ".", "--no-keep")
    assert (answer.code, answer.err) == (1, "")
    assert "── claim " in answer.out
    assert "── good " not in answer.out
    assert "1 of 2" in answer.out


def test_progress_is_plain_lines_off_a_terminal_and_none_for_one_stage(call: Call, tmp_path: Path) -> None:
    for name in "ab":
        write_stage(tmp_path / f"{name}.toml")
    several = call("check", ".", "--no-keep", "-j", "1")
    assert several.err == "1/2 a: measured\n2/2 b: measured\n"
    assert "\x1b" not in several.out
    assert call("check", "a.toml", "--no-keep").err == ""


# --- options -------------------------------------------------------------------------------------


def test_the_number_of_jobs_changes_neither_order_nor_results(call: Call, tmp_path: Path) -> None:
    for number in range(5):
        write_stage(tmp_path / f"s{number}.toml", RD=f"{8 + number}k")
    found = []
    for jobs in ("1", "4"):
        stages = document(call("check", ".", "--no-keep", "-j", jobs, "--json", "-"))["stages"]
        found.append([{**stage, "seconds": 0.0} for stage in stages])
    assert found[0] == found[1]
    assert [stage["name"] for stage in found[0]] == [f"s{number}" for number in range(5)]


@pytest.mark.parametrize(
    ("option", "value"),
    [
        ("--jobs", "0"),
        ("--jobs", "two"),
        ("--time-limit", "0"),
        ("--time-limit", "-1"),
        ("--time-limit", "nan"),
        ("--time-limit", "inf"),
        ("--run-dir", "amp.toml"),
    ],
)
def test_options_without_sense_are_refused(call: Call, tmp_path: Path, option: str, value: str) -> None:
    write_stage(tmp_path / "amp.toml")
    answer = call("check", "amp.toml", option, value)
    assert (answer.code, answer.out) == (2, "")
    assert option in answer.err
    assert [path.name for path in tmp_path.iterdir()] == ["amp.toml"]


def test_evidence_goes_to_the_folder_asked_for(call: Call, tmp_path: Path) -> None:
    write_stage(tmp_path / "amp.toml")
    first = document(call("check", "amp.toml", "--json", "-"))
    (folder,) = run_folders(tmp_path / "runs")
    assert first["stages"][0]["run_folder"] == f"runs/{folder.name}"
    assert folder.name.endswith("-amp")
    call("check", "amp.toml", "--run-dir", "deep/er")
    assert len(run_folders(tmp_path / "deep/er")) == 1
    assert len(run_folders(tmp_path / "runs")) == 1


def test_a_run_folder_that_can_not_be_made_is_an_outcome(call: Call, tmp_path: Path) -> None:
    write_stage(tmp_path / "amp.toml")
    answer = call("check", "amp.toml", "--run-dir", "amp.toml/runs", "--json", "-")
    (stage,) = document(answer)["stages"]
    assert (answer.code, stage["outcome"]) == (3, "incomplete")
    assert "no run folder can be made" in stage["meaning"]


@pytest.mark.parametrize("ending", ["measured", "timed out", "refused"])
def test_without_keeping_nothing_is_left_behind(
    call: Call, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, ending: str
) -> None:
    temporary, work = tmp_path / "temporary", tmp_path / "work"
    for folder in (temporary, work):
        folder.mkdir()
    monkeypatch.setattr(tempfile, "tempdir", str(temporary))
    monkeypatch.chdir(work)
    write_stage(work / "amp.toml", RD="10k" if ending != "refused" else "0")
    if ending == "timed out":
        monkeypatch.setenv("DECKGEN_NGSPICE", str(fake_ngspice(tmp_path, "sleep 60").path))
    answer = call("check", "amp.toml", "--no-keep", "--time-limit", "5" if ending != "timed out" else "0.2")
    assert f"{ending} ·" in answer.out
    assert "evidence" not in answer.out
    assert list(temporary.iterdir()) == []
    assert [path.name for path in work.iterdir()] == ["amp.toml"]


# --- evidence ------------------------------------------------------------------------------------


def test_the_stage_file_in_the_evidence_is_the_one_that_was_checked(
    call: Call, simulator: Simulator, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    stage = write_stage(tmp_path / "amp.toml")
    before = stage.read_text("utf-8")
    editing = fake_ngspice(tmp_path, f'echo changed >{stage}; exec {simulator.path} "$@"')
    monkeypatch.setenv("DECKGEN_NGSPICE", str(editing.path))
    assert call("check", "amp.toml").code == 0
    assert stage.read_text("utf-8") == "changed\n"
    (folder,) = run_folders(tmp_path / "runs")
    assert (folder / "amp.toml").read_text("utf-8") == before


@pytest.mark.parametrize("name", ["out.raw", "deck", "run.json", "comparison.json", "home"])
def test_a_stage_file_named_like_a_file_of_the_evidence_spoils_nothing(
    call: Call, tmp_path: Path, name: str
) -> None:
    write_stage(tmp_path / name)
    assert call("check", name).code == 0
    (folder,) = run_folders(tmp_path / "runs")
    record = json.loads((folder / "run.json").read_text("utf-8"))
    assert (folder / record["stage_file"]).read_text("utf-8") == (tmp_path / name).read_text("utf-8")
    assert read_raw((folder / "out.raw").read_bytes())[0].name == "Operating Point"
    assert json.loads((folder / "comparison.json").read_text("utf-8"))["stages"][0]["outcome"] == "measured"


def test_a_run_can_be_repeated_from_its_evidence_alone(call: Call, tmp_path: Path) -> None:
    write_stage(tmp_path / "amp.toml")
    call("check", "amp.toml")
    (folder,) = run_folders(tmp_path / "runs")
    again = tmp_path / "again"
    shutil.copytree(folder, again, ignore=shutil.ignore_patterns("out.raw"))
    record = json.loads((again / "run.json").read_text("utf-8"))
    subprocess.run(
        record["command"],
        cwd=again,
        env={"PATH": os.environ["PATH"], **record["environment"]},
        check=True,
        capture_output=True,
        timeout=30,
    )
    before, after = ((each / "out.raw").read_bytes() for each in (folder, again))
    for old, new in zip(read_raw(before), read_raw(after), strict=True):
        assert (old.name, old.variables) == (new.name, new.variables)
        assert old.data.tobytes() == new.data.tobytes()


def test_two_checks_at_once_never_share_a_folder(tmp_path: Path) -> None:
    for place in ("left", "right"):
        (tmp_path / place).mkdir()
        for twin in ("one", "two"):
            (tmp_path / place / twin).mkdir()
            for name in ("amp", "buffer"):
                write_stage(tmp_path / place / twin / f"{name}.toml", RD="10k" if place == "left" else "9k")
    checks = [
        subprocess.Popen(
            command("-q", "check", place, "--run-dir", "shared", "-j", "4", "--json", f"{place}.json"),
            cwd=tmp_path,
            env=environment(),
            stdout=subprocess.DEVNULL,
        )
        for place in ("left", "right")
    ]
    assert [check.wait(60) for check in checks] == [0, 0]
    folders = run_folders(tmp_path / "shared")
    assert len(folders) == 8
    claimed = []
    for place in ("left", "right"):
        for stage in json.loads((tmp_path / f"{place}.json").read_text("utf-8"))["stages"]:
            folder = tmp_path / stage["run_folder"]
            claimed.append(folder)
            (kept,) = json.loads((folder / "comparison.json").read_text("utf-8"))["stages"]
            assert {**kept, "seconds": 0.0} == {**stage, "seconds": 0.0}
            assert ("RD vdd d 9000" in (folder / "deck.cir").read_text("utf-8")) == (place == "right")
    assert sorted(claimed) == folders


def test_evidence_below_a_folder_is_not_checked_again(call: Call, tmp_path: Path) -> None:
    write_stage(tmp_path / "amp.toml")
    for _ in range(2):
        assert call("check", ".").code == 0
    assert len(run_folders(tmp_path / "runs")) == 2
