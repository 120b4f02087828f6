"""Terminals, pipes, closed streams and signals: what a shell does to a program."""

from __future__ import annotations

import contextlib
import fcntl
import json
import os
import pty
import re
import shlex
import signal
import struct
import subprocess
import sys
import termios
import time
from collections.abc import Iterator, Sequence
from pathlib import Path

import pytest

from deckgen.simulator import Simulator
from tests.simulator.command_line import (
    LISTENING,
    Fake,
    command,
    environment,
    fake_ngspice,
    run_folders,
    write_stage,
)
from tests.simulator.fakes import ends

COLOUR = re.compile(r"\x1b\[[0-9;]*m")
ESCAPE = "\x1b"


def on_terminal(folder: Path, arguments: Sequence[str], **variables: str) -> tuple[int, str]:
    """Run the program on a pseudo-terminal of 100 columns; exit code and all that it shows."""
    ours, theirs = pty.openpty()
    fcntl.ioctl(theirs, termios.TIOCSWINSZ, struct.pack("HHHH", 40, 100, 0, 0))
    process = subprocess.Popen(
        command(*arguments),
        cwd=folder,
        env=environment(TERM="xterm-256color", **variables),
        stdin=theirs,
        stdout=theirs,
        stderr=theirs,
    )
    os.close(theirs)
    shown = bytearray()
    with contextlib.suppress(OSError):  # the other end is closed: Linux says so with an error
        while chunk := os.read(ours, 65536):
            shown += chunk
    os.close(ours)
    return process.wait(30), shown.decode("utf-8")


def shell(folder: Path, script: str, **variables: str) -> subprocess.CompletedProcess[str]:
    """Run a line of bash in which `deckgen` is the program; a pipe's code is its first failure's."""
    start = f'deckgen() {{ {shlex.join(command())} "$@"; }}\nset -o pipefail\n'
    return subprocess.run(
        ["bash", "-c", start + script],
        cwd=folder,
        env=environment(**variables),
        capture_output=True,
        encoding="utf-8",
        timeout=60,
    )


@pytest.fixture
def pair(tmp_path: Path) -> Path:
    """A folder with a stage that passes and one with a claim that is missed."""
    write_stage(tmp_path / "good.toml")
    write_stage(tmp_path / "missed.toml", '[claims]\nRin = "1Meg"')
    return tmp_path


# --- terminals -----------------------------------------------------------------------------------


def test_a_terminal_gets_colour_its_own_width_and_a_line_that_counts(pair: Path) -> None:
    code, shown = on_terminal(pair, ["check", "good.toml", "missed.toml", "--no-keep"])
    assert code == 1
    assert COLOUR.search(shown)
    assert re.search(r"\r\x1b\[K0/2 checked\r\x1b\[K1/2 checked", shown)
    before, _, report = COLOUR.sub("", shown).partition("──")
    assert before.endswith("\r\x1b[K"), "the line that counts is taken away before the report"
    assert max(map(len, report.splitlines())) > 80


def test_a_terminal_that_wants_no_colour_gets_none(pair: Path) -> None:
    code, shown = on_terminal(pair, ["check", "missed.toml", "--no-keep"], NO_COLOR="1")
    assert code == 1
    assert "missed" in shown
    assert ESCAPE not in shown


# --- pipes and streams that end early ------------------------------------------------------------


def test_a_reader_that_has_had_enough_is_no_error_and_hides_no_verdict(pair: Path) -> None:
    # A pipe holds 64 KiB: only a reader that is gone before the report comes breaks it for sure.
    script = "for stage in good missed; do deckgen check $stage.toml --no-keep | head -0; echo $?; done"
    done = shell(pair, script, TERM="xterm-256color")
    assert (done.stdout, done.stderr) == ("0\n1\n", "")


def test_results_reach_their_file_though_nobody_listens_to_the_progress(pair: Path) -> None:
    done = shell(pair, "deckgen check good.toml missed.toml --no-keep --json all.json 2>&1 | true")
    assert done.returncode == 1
    assert len(json.loads((pair / "all.json").read_text("utf-8"))["stages"]) == 2


def test_streams_closed_from_the_start_lose_no_result(pair: Path) -> None:
    done = shell(pair, "deckgen check good.toml missed.toml --no-keep --json all.json <&- >&- 2>&-")
    assert done.returncode == 1
    assert len(json.loads((pair / "all.json").read_text("utf-8"))["stages"]) == 2


def test_standard_output_without_room_is_told_in_one_line(pair: Path) -> None:
    for arguments in ("topologies", "write good.toml"):
        done = shell(pair, f"deckgen {arguments} >/dev/full")
        assert done.returncode == 3
        assert done.stderr == "deckgen: standard output can't be written (No space left on device)\n"


def test_a_terminal_that_knows_only_ascii_gets_escapes_and_a_result_is_always_utf8(pair: Path) -> None:
    done = shell(pair, "deckgen topologies common-source", PYTHONIOENCODING="ascii")
    assert (done.returncode, done.stderr) == (0, "")
    assert "RD     \\u03a9   drain resistor" in done.stdout
    write_stage(pair / "half.toml", title="½ supply")
    result = shell(pair, "deckgen write half.toml", PYTHONIOENCODING="latin-1")
    assert result.stdout.startswith("* ½ supply\n")


# --- interruption --------------------------------------------------------------------------------

SLOW = "sleep 300 & echo $! >child; wait"


@contextlib.contextmanager
def started(
    folder: Path, fake: Fake, *arguments: str, before: Sequence[str] = ()
) -> Iterator[subprocess.Popen[str]]:
    """A check whose simulator is ``fake``; killed in the end if it still runs, with what it said shown."""
    check = subprocess.Popen(
        [*before, sys.executable, "-c", LISTENING, "check", *arguments],
        cwd=folder,
        env=environment(DECKGEN_NGSPICE=str(fake.path), TMPDIR=str(folder)),
        stdin=subprocess.DEVNULL,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )
    try:
        yield check
    finally:
        if check.poll() is None:
            check.kill()
            print(*check.communicate(), sep="\n")


def children_of(fake: Fake) -> list[int]:
    """What the fakes have started themselves, as soon as each has said so."""
    found = []
    for path in fake.pids.iterdir():
        child = Path(path.read_text("utf-8").strip()) / "child"
        while not (child.exists() and child.read_text("utf-8").strip()):
            time.sleep(0.01)
        found.append(int(child.read_text("utf-8")))
    return found


def interrupted(check: subprocess.Popen[str], number: signal.Signals) -> str:
    """Send the signal; what the check says on standard error."""
    began = time.monotonic()
    check.send_signal(number)
    out, err = check.communicate(timeout=30)
    assert time.monotonic() - began < 5
    assert (check.returncode, out) == (130, "")
    return err


@pytest.mark.parametrize(
    ("number", "keep"), [(signal.SIGINT, "--keep"), (signal.SIGTERM, "--no-keep")], ids=["ctrl-C", "kill"]
)
def test_an_interrupted_check_leaves_no_process_and_nothing_half_written(
    tmp_path: Path, number: signal.Signals, keep: str
) -> None:
    for name in "abcd":
        write_stage(tmp_path / f"{name}.toml")
    (tmp_path / "old.json").write_text("old", encoding="utf-8")
    fake = fake_ngspice(tmp_path, SLOW)
    with started(tmp_path, fake, ".", "--jobs", "2", keep, "--json", "old.json") as check:
        processes = fake.numbers(2) + children_of(fake)
        assert interrupted(check, number).strip() == "deckgen: interrupted"
    assert all(map(ends, processes))
    assert len(list(fake.pids.iterdir())) == 2, "no other simulator was started meanwhile"
    assert run_folders(tmp_path / "runs") == []
    assert (tmp_path / "old.json").read_text("utf-8") == "old"
    left = {path.name for path in tmp_path.iterdir() if path.suffix != ".toml"}
    assert left - {"runs"} == {"old.json", "pids", "fake-simulator"}


def test_stages_that_were_ready_before_the_interruption_keep_their_evidence(
    simulator: Simulator, tmp_path: Path
) -> None:
    write_stage(tmp_path / "a.toml", title="quick")
    write_stage(tmp_path / "b.toml", title="slow")
    script = f'case "$(head -1 deck.cir)" in *slow*) {SLOW};; *) exec {simulator.path} "$@";; esac'
    fake = fake_ngspice(tmp_path, script)
    with started(tmp_path, fake, ".", "--jobs", "1") as check:
        processes = fake.numbers(2)
        err = interrupted(check, signal.SIGINT)
    assert err.split("\n") == ["1/2 a: measured", "", "deckgen: interrupted", ""]
    assert all(map(ends, processes))
    (folder,) = run_folders(tmp_path / "runs")
    assert folder.name.endswith("-a")
    assert json.loads((folder / "run.json").read_text("utf-8"))["outcome"] == "measured"


def test_under_nohup_a_terminal_that_goes_away_stops_nothing(tmp_path: Path) -> None:
    write_stage(tmp_path / "a.toml")
    fake = fake_ngspice(tmp_path, "sleep 0.5; exit 1")
    with started(tmp_path, fake, "a.toml", "--no-keep", before=["nohup"]) as check:
        fake.numbers(1)
        check.send_signal(signal.SIGHUP)
        out, _ = check.communicate(timeout=30)
    assert check.returncode == 3
    assert "refused by the simulator" in out
