"""Simulators that hang, die, flood or leave things behind, full disks, interruptions: each its outcome."""

from __future__ import annotations

import os
import resource
import signal
import threading
import time
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import pytest

from deckgen.errors import Outcome
from deckgen.simulator import ExpectedPlot, Job, Limits, Simulator, run, stop_all
from tests.simulator.fakes import (
    DIVIDER,
    GOOD,
    OP,
    deck,
    ends,
    fake,
    refused,
    wrapped,
)

SHORT = Limits(seconds=0.3)


# --- simulators that misbehave -------------------------------------------------------------------


def test_a_simulator_that_hangs_is_stopped_with_all_that_it_started(tmp_path: Path) -> None:
    hanging = fake(tmp_path, "sleep 300 & echo $! >child; sleep 300")
    started = time.perf_counter()
    execution = run(GOOD, simulator=hanging, folder=tmp_path / "run", limits=SHORT)
    assert 0.3 <= time.perf_counter() - started < 5
    assert "no end within 0.3 s" in refused(execution, Outcome.TIMED_OUT)
    assert execution.returncode == -signal.SIGKILL
    assert ends(int((tmp_path / "run" / "child").read_text("utf-8")))


def test_a_simulator_that_ignores_signals_is_stopped(tmp_path: Path) -> None:
    stubborn = fake(tmp_path, "trap '' TERM INT HUP XCPU\nwhile :; do :; done")
    refused(run(GOOD, simulator=stubborn, folder=tmp_path / "run", limits=SHORT), Outcome.TIMED_OUT)


def test_what_a_simulator_leaves_running_is_stopped_and_does_not_spoil_the_run(
    simulator: Simulator, tmp_path: Path
) -> None:
    leaving = wrapped(tmp_path, simulator, before="sleep 300 & echo $! >child")
    started = time.perf_counter()
    execution = run(GOOD, simulator=leaving, folder=tmp_path / "run")
    assert time.perf_counter() - started < 5
    assert execution.outcome is Outcome.MEASURED
    assert ends(int((tmp_path / "run" / "child").read_text("utf-8")))


@pytest.mark.parametrize("number", [signal.SIGKILL, signal.SIGSEGV, signal.SIGABRT, signal.SIGTERM])
def test_a_simulator_that_a_signal_ends_has_crashed(number: signal.Signals, tmp_path: Path) -> None:
    killed = fake(tmp_path, f"echo last words >&2; kill -{int(number)} $$")
    execution = run(GOOD, simulator=killed, folder=tmp_path / "run")
    assert f"signal {int(number)} ({number.name})" in refused(execution, Outcome.CRASHED)
    assert (execution.returncode, execution.said) == (-number, ("last words",))


def test_a_signal_that_a_shell_reports_is_a_crash_too(tmp_path: Path) -> None:
    execution = run(GOOD, simulator=fake(tmp_path, "exit 139"), folder=tmp_path / "run")
    assert "signal 11" in refused(execution, Outcome.CRASHED)


def test_an_exit_status_alone_is_a_refusal(simulator: Simulator, tmp_path: Path) -> None:
    failing = wrapped(tmp_path, simulator, after="exit 3")
    execution = run(GOOD, simulator=failing, folder=tmp_path / "run")
    assert "status 3" in refused(execution, Outcome.REFUSED_BY_SIMULATOR)


def test_a_new_message_beside_good_results_is_a_refusal_that_quotes_it(
    simulator: Simulator, tmp_path: Path
) -> None:
    warning = wrapped(tmp_path, simulator, after="echo 'Warning: the moon is full' >&2")
    execution = run(GOOD, simulator=warning, folder=tmp_path / "run")
    assert "the moon is full" in refused(execution, Outcome.REFUSED_BY_SIMULATOR)
    assert execution.said == ("Warning: the moon is full",)


def test_a_failure_that_is_told_on_standard_output_only_is_a_failure(
    simulator: Simulator, tmp_path: Path
) -> None:
    telling = wrapped(tmp_path, simulator, after="echo 'DC solution failed -'")
    refused(run(GOOD, simulator=telling, folder=tmp_path / "run"), Outcome.NO_CONVERGENCE)


@pytest.mark.parametrize(
    "after",
    [
        "size=$(wc -c <out.raw); head -c $((size / 2)) out.raw >half; mv half out.raw",
        "size=$(wc -c <out.raw); head -c $((size - 1)) out.raw >half; mv half out.raw",
        "printf x >>out.raw",
        ": >out.raw",
    ],
    ids=["half", "a byte less", "a byte more", "empty"],
)
def test_a_damaged_raw_file_is_incomplete(after: str, simulator: Simulator, tmp_path: Path) -> None:
    execution = run(GOOD, simulator=wrapped(tmp_path, simulator, after=after), folder=tmp_path / "run")
    assert "out.raw is damaged" in refused(execution, Outcome.INCOMPLETE)


@pytest.mark.parametrize(
    "after",
    ["rm out.raw", "mv out.raw x; ln -s x out.raw", "rm out.raw; mkfifo out.raw"],
    ids=["none", "link", "pipe"],
)
def test_only_a_plain_raw_file_counts(after: str, simulator: Simulator, tmp_path: Path) -> None:
    execution = run(GOOD, simulator=wrapped(tmp_path, simulator, after=after), folder=tmp_path / "run")
    assert "found none" in refused(execution, Outcome.INCOMPLETE)


# --- limits --------------------------------------------------------------------------------------

LARGE = Job(
    deck(DIVIDER, "op\nwrite out.raw v(out)\nac dec 1000 0.1 10g\nwrite out.raw frequency v(out)"),
    (OP, ExpectedPlot("AC Analysis", 11001, ("frequency", "v(out)"))),
)


def test_results_that_do_not_fit_on_the_disk_are_incomplete(simulator: Simulator, tmp_path: Path) -> None:
    # A file-size limit without its signal: every write beyond fails, as on a full disk.
    deaf = wrapped(tmp_path, simulator, before="trap '' XFSZ")
    execution = run(LARGE, simulator=deaf, folder=tmp_path / "run", limits=Limits(file_bytes=65536))
    assert "out.raw is damaged" in refused(execution, Outcome.INCOMPLETE)
    assert execution.returncode == 0
    assert run(LARGE, simulator=simulator, folder=tmp_path / "again").outcome is Outcome.MEASURED


def test_a_disk_without_room_for_the_deck_is_incomplete(simulator: Simulator, tmp_path: Path) -> None:
    # Python ignores the signal of this limit, so that writing fails as on a full disk.
    soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (4096, hard))
    try:
        execution = run(Job("* title\n" * 2000, (OP,)), simulator=simulator, folder=tmp_path)
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))
    assert "File too large" in refused(execution, Outcome.INCOMPLETE)
    assert execution.returncode is None
    assert execution.files == ("deck.cir", "start-up/spinit")


def test_a_raw_file_beyond_the_limit_is_incomplete(simulator: Simulator, tmp_path: Path) -> None:
    execution = run(LARGE, simulator=simulator, folder=tmp_path, limits=Limits(file_bytes=65536))
    assert "a file grew beyond 65536 bytes" in refused(execution, Outcome.INCOMPLETE)
    assert (tmp_path / "out.raw").stat().st_size <= 65536


@pytest.mark.parametrize("stream", ["stdout", "stderr"])
def test_a_flood_of_messages_is_stopped_by_the_size_limit(stream: str, tmp_path: Path) -> None:
    flooding = fake(tmp_path, "yes" if stream == "stdout" else "yes >&2")
    limits = Limits(seconds=20, file_bytes=2**20)
    execution = run(GOOD, simulator=flooding, folder=tmp_path / "run", limits=limits)
    assert "a file grew beyond" in refused(execution, Outcome.INCOMPLETE)
    assert (tmp_path / "run" / f"{stream}.txt").stat().st_size <= 2**20


def test_a_deck_that_floods_standard_output_is_stopped_too(simulator: Simulator, tmp_path: Path) -> None:
    job = Job(deck(DIVIDER, "while 1\necho aaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaa\nend"), (OP,))
    limits = Limits(seconds=20, file_bytes=65536)
    refused(run(job, simulator=simulator, folder=tmp_path, limits=limits), Outcome.INCOMPLETE)


def test_more_harmless_messages_than_are_read_are_not_waved_through(
    simulator: Simulator, tmp_path: Path
) -> None:
    line = "Note: v1: dc value used for op instead of transient time=0 value."
    chatty = wrapped(tmp_path, simulator, after=f"yes '{line}' | head -c 2000000 >&2; echo trouble >&2")
    execution = run(GOOD, simulator=chatty, folder=tmp_path / "run")
    refused(execution, Outcome.INCOMPLETE)


def test_memory_beyond_the_limit_is_incomplete(simulator: Simulator, tmp_path: Path) -> None:
    job = Job(deck(DIVIDER, "tran 1n 1 0 1n\nwrite out.raw v(out)"), (OP,))
    execution = run(job, simulator=simulator, folder=tmp_path, limits=Limits(memory_bytes=2**28))
    assert "out of memory" in refused(execution, Outcome.INCOMPLETE)


def test_limits_that_make_no_sense_are_refused() -> None:
    for wrong in ({"seconds": 0.0}, {"seconds": float("nan")}, {"memory_bytes": 0}, {"file_bytes": -1}):
        with pytest.raises(ValueError, match="positive"):
            Limits(**wrong)  # type: ignore[arg-type]


# --- interruption --------------------------------------------------------------------------------


def wait_for(path: Path) -> int:
    """Wait until a fake has written its number."""
    for _ in range(500):
        if path.exists() and path.read_text("utf-8").strip():
            return int(path.read_text("utf-8"))
        time.sleep(0.01)
    pytest.fail(f"{path.name} was not written")


def test_an_interruption_stops_the_simulator_and_goes_on(tmp_path: Path) -> None:
    hanging = fake(tmp_path, "echo $$ >number; sleep 300")
    number = tmp_path / "run" / "number"

    def interrupt() -> None:
        wait_for(number)
        os.kill(os.getpid(), signal.SIGINT)

    thread = threading.Thread(target=interrupt)
    thread.start()
    with pytest.raises(KeyboardInterrupt):
        run(GOOD, simulator=hanging, folder=tmp_path / "run", limits=Limits(seconds=20))
    thread.join()
    assert ends(wait_for(number))


def test_runs_in_other_threads_can_be_stopped(tmp_path: Path) -> None:
    hanging = fake(tmp_path, "echo $$ >number; sleep 300")
    with ThreadPoolExecutor(2) as threads:
        runs = [
            threads.submit(run, GOOD, simulator=hanging, folder=tmp_path / name, limits=Limits(seconds=20))
            for name in "ab"
        ]
        numbers = [wait_for(tmp_path / name / "number") for name in "ab"]
        assert stop_all() == 2
        outcomes = [each.result(timeout=10).outcome for each in runs]
    assert outcomes == [Outcome.CRASHED, Outcome.CRASHED]
    assert all(map(ends, numbers))
    assert stop_all() == 0
