"""Running decks in the real simulator and in ones that misbehave: each ends in its outcome."""

from __future__ import annotations

import os
import shutil
import signal
import subprocess
import threading
import time
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import numpy as np
import pytest

from deckgen.errors import Outcome, OutputError
from deckgen.simulator import Execution, ExpectedPlot, Job, Limits, Simulator, run, startup, stop_all
from tests.simulator.fakes import (
    AC,
    CARD,
    DIVIDER,
    OP,
    OP_AND_AC,
    STAGE,
    TRANSISTOR,
    deck,
    ends,
    fake,
    wrapped,
)

GOOD = Job(deck(DIVIDER), (OP, AC))
SHORT = Limits(seconds=0.3)


def refused(execution: Execution, outcome: Outcome) -> str:
    """See that a run ended so, and without results; give the meaning."""
    assert (execution.outcome, execution.plots) == (outcome, ())
    assert execution.meaning.isprintable()
    assert execution.meaning
    return execution.meaning


def test_an_accepted_run_has_its_plots_and_nothing_to_say(simulator: Simulator, tmp_path: Path) -> None:
    execution = run(GOOD, simulator=simulator, folder=tmp_path)
    assert (execution.outcome, execution.meaning, execution.said) == (Outcome.MEASURED, "", ())
    assert execution.returncode == 0
    assert 0 < execution.seconds < 10
    op, ac = execution.plots
    assert op.column("v(out)")[0] == pytest.approx(0.5, rel=1e-9)
    # The divider's 500 ohm with 1 nF, independent of the simulator.
    frequency = ac.column("frequency").real
    right = 0.5 / (1 + 2j * np.pi * frequency * 500 * 1e-9)
    np.testing.assert_allclose(ac.column("v(out)"), right, rtol=1e-9)


def test_the_folder_holds_all_that_is_needed_to_repeat_the_run(simulator: Simulator, tmp_path: Path) -> None:
    folder = tmp_path / "a b" / "Ü'$(x) `y` \"z; {1}"
    execution = run(GOOD, simulator=simulator, folder=folder)
    assert execution.outcome is Outcome.MEASURED
    assert execution.files == ("deck.cir", "out.raw", "start-up/spinit", "stderr.txt", "stdout.txt")
    assert (folder / "deck.cir").read_text("utf-8") == GOOD.deck
    assert (folder / "start-up" / "spinit").read_text("utf-8") == startup.text()
    assert list((folder / "home").iterdir()) == []


def test_an_ascii_raw_file_gives_the_same_plots(simulator: Simulator, tmp_path: Path) -> None:
    binary = run(GOOD, simulator=simulator, folder=tmp_path / "binary")
    job = Job(deck(DIVIDER, filetype="ascii"), (OP, AC))
    ascii_ = run(job, simulator=simulator, folder=tmp_path / "ascii")
    for one, other in zip(binary.plots, ascii_.plots, strict=True):
        np.testing.assert_allclose(one.data, other.data, rtol=1e-14)


def test_a_relative_folder_is_taken_from_where_deckgen_runs(
    simulator: Simulator, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    assert run(GOOD, simulator=simulator, folder=Path("here")).outcome is Outcome.MEASURED
    assert (tmp_path / "here" / "out.raw").exists()


def test_a_search_for_the_operating_point_that_succeeds_is_accepted_and_noted(
    simulator: Simulator, tmp_path: Path
) -> None:
    ways = {
        "noopiter gminsteps=1": "Note: Dynamic gmin stepping completed",
        "noopiter gminsteps=10": "Note: spice3 gmin stepping completed",
        "noopiter gminsteps=0 srcsteps=1": "Note: Source stepping completed",
    }
    for number, (options, note) in enumerate(ways.items()):
        job = Job(deck(f"{STAGE}\n.options {options}"), (OP, AC))
        execution = run(job, simulator=simulator, folder=tmp_path / str(number))
        assert (execution.outcome, execution.said) == (Outcome.MEASURED, (note,))


@pytest.mark.parametrize(
    "circuit",
    [
        # A source with a dc value and a time function: a note on standard error.
        DIVIDER.replace("dc 1 ac 1", "dc 2 sin(1 1 1k) ac 1"),
        # BSIM3 tells that it checks its parameters, and that drain and source have no perimeter.
        f"{TRANSISTOR}\n.model nm nmos (level=8 version=3.3.0)",
        f"{TRANSISTOR}\n.model nm nmos (level=14 version=4.8)",
    ],
    ids=["dc value", "bsim3", "bsim4"],
)
def test_what_is_known_to_be_harmless_does_not_spoil_a_run(
    circuit: str, simulator: Simulator, tmp_path: Path
) -> None:
    assert run(Job(deck(circuit), (OP, AC)), simulator=simulator, folder=tmp_path).outcome is Outcome.MEASURED


def test_several_runs_at_once_do_not_touch_each_other(simulator: Simulator, tmp_path: Path) -> None:
    def one(number: int) -> float:
        job = Job(deck(DIVIDER.replace("dc 1", f"dc {number}"), "op\nwrite out.raw v(out)"), (OP,))
        execution = run(job, simulator=simulator, folder=tmp_path / str(number))
        return float(execution.plots[0].column("v(out)")[0])

    with ThreadPoolExecutor(4) as threads:
        found = list(threads.map(one, range(1, 25)))
    assert found == pytest.approx([number / 2 for number in range(1, 25)], rel=1e-9)


# --- what the simulator is given -----------------------------------------------------------------


def test_the_simulator_gets_a_bare_environment_no_input_and_no_start_up_but_ours(
    tmp_path: Path, simulator: Simulator, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("SPICE_LIB_DIR", "/nowhere")
    monkeypatch.setenv("TOKEN", "secret")
    script = 'env >environment; cat >input; pwd >where; printf "%s " "$@" >arguments'
    folder = tmp_path / "run"
    run(GOOD, simulator=wrapped(tmp_path, simulator, before=script), folder=folder)
    environment = dict(
        line.split("=", 1) for line in (folder / "environment").read_text("utf-8").splitlines()
    )
    assert set(environment) - {"PWD", "OLDPWD", "SHLVL", "_"} == {"PATH", "HOME", "SPICE_SCRIPTS", "LC_ALL"}
    assert environment["HOME"] == str(folder / "home")
    assert environment["SPICE_SCRIPTS"] == "start-up"
    assert (folder / "input").read_bytes() == b""
    assert (folder / "where").read_text("utf-8").strip() == str(folder)
    assert (folder / "arguments").read_text("utf-8").strip() == "-n -b deck.cir"


def test_the_start_up_file_is_read(simulator: Simulator, tmp_path: Path) -> None:
    # Misspelt LAMBDA: without strict_errorhandling ngspice simulates another transistor.
    job = Job(deck(f"{TRANSISTOR}\n.model nm nmos (level=1 vto=1 lamda=0.1)"), (OP, AC))
    assert "lamda" in refused(run(job, simulator=simulator, folder=tmp_path), Outcome.REFUSED_BY_SIMULATOR)


def test_there_is_no_transient_run_in_place_of_an_operating_point(
    simulator: Simulator, tmp_path: Path
) -> None:
    circuit = "v1 in 0 1\nb1 out 0 v=v(x)+1\nc1 x 0 1n\nc2 out x 1n"
    job = Job(deck(circuit, "op\nwrite out.raw v(out)"), (OP,))
    refused(run(job, simulator=simulator, folder=tmp_path / "ours"), Outcome.NO_CONVERGENCE)
    assert "Transient op" not in (tmp_path / "ours" / "stderr.txt").read_text("utf-8")
    # With ngspice's own start-up it "finishes successfully" and leaves a result: seen with 39.
    (tmp_path / "deck.cir").write_text(job.deck, encoding="utf-8")
    command = [simulator.path, "-n", "-b", "deck.cir"]
    plain = subprocess.run(command, cwd=tmp_path, capture_output=True, text=True, timeout=20, check=False)
    assert "Transient op finished successfully" in plain.stderr
    assert (tmp_path / "out.raw").exists()


# --- failures that exit 0 ------------------------------------------------------------------------


def test_an_ac_analysis_without_a_source_is_incomplete(simulator: Simulator, tmp_path: Path) -> None:
    execution = run(Job(deck(DIVIDER.replace("ac 1", "")), (OP, AC)), simulator=simulator, folder=tmp_path)
    assert "v(out) is 0 at every point" in refused(execution, Outcome.INCOMPLETE)


def test_a_transfer_function_of_a_node_that_is_not_there_is_incomplete(
    simulator: Simulator, tmp_path: Path
) -> None:
    expected = ExpectedPlot("Transfer Function", 1, (), ("v(transfer_function)",))
    job = Job(deck(DIVIDER, "tf v(nope) v1\nwrite out.raw all"), (expected,))
    execution = run(job, simulator=simulator, folder=tmp_path / "nope")
    assert "v(transfer_function) is 0" in refused(execution, Outcome.INCOMPLETE)
    job = Job(deck(DIVIDER, "tf v(out) v1\nwrite out.raw all"), (expected,))
    execution = run(job, simulator=simulator, folder=tmp_path / "out")
    assert execution.plots[0].column("v(transfer_function)")[0] == pytest.approx(0.5, rel=1e-9)


@pytest.mark.parametrize(
    ("text", "outcome"),
    [
        (f"* no analysis\n{DIVIDER}\n.control\nquit\n.endc\n.end\n", Outcome.INCOMPLETE),
        (f"* no commands\n{DIVIDER}\n.end\n", Outcome.REFUSED_BY_SIMULATOR),
        (GOOD.deck.replace("\n", "\r"), Outcome.REFUSED_BY_SIMULATOR),
        ("", Outcome.REFUSED_BY_SIMULATOR),
        ("\0" * 100, Outcome.REFUSED_BY_SIMULATOR),
    ],
    ids=["no analysis", "no commands", "carriage returns only", "empty", "zeros"],
)
def test_a_deck_that_asks_nothing_has_no_results(
    text: str, outcome: Outcome, simulator: Simulator, tmp_path: Path
) -> None:
    refused(run(Job(text, (OP, AC)), simulator=simulator, folder=tmp_path), outcome)


def test_the_plot_of_an_earlier_analysis_is_not_taken_for_the_one_that_failed(
    simulator: Simulator, tmp_path: Path
) -> None:
    again = (
        "ac dec 10 1 1meg\nwrite out.raw frequency v(out)\nac dec 10 0 1meg\nwrite out.raw frequency v(out)"
    )
    execution = run(Job(deck(DIVIDER, again), (AC, AC)), simulator=simulator, folder=tmp_path)
    refused(execution, Outcome.REFUSED_BY_SIMULATOR)
    # ngspice 39 has written the first plot twice, with exit status 0.
    assert execution.returncode == 0
    assert (tmp_path / "out.raw").read_bytes().count(b"Plotname: AC Analysis") == 2


def test_a_sweep_that_never_ends_runs_into_the_time_limit(simulator: Simulator, tmp_path: Path) -> None:
    job = Job(deck(DIVIDER, "dc v1 0 1 0\nwrite out.raw v(out)"), (OP,))
    execution = run(job, simulator=simulator, folder=tmp_path, limits=Limits(seconds=0.5))
    assert "0.5 s" in refused(execution, Outcome.TIMED_OUT)


def test_a_device_value_that_has_one_point_in_an_ac_plot_is_not_taken_for_zeros(
    simulator: Simulator, tmp_path: Path
) -> None:
    expected = ExpectedPlot("AC Analysis", 61, ("@m1[gm]",))
    commands = "ac dec 10 1 1meg\nwrite out.raw frequency @m1[gm]"
    execution = run(Job(deck(STAGE, commands), (expected,)), simulator=simulator, folder=tmp_path)
    assert "@m1[gm] is not finite at every point" in refused(execution, Outcome.INCOMPLETE)


def test_what_only_a_look_at_the_circuit_can_find_passes_here(simulator: Simulator, tmp_path: Path) -> None:
    # Seen with ngspice 39: each of these runs without a word, so the circuit is checked elsewhere.
    silent = {
        "current into an empty node": f"{DIVIDER}\ni1 0 x 1m",
        "R of 0": f"{DIVIDER}\nr9 out x 0\nr10 x 0 1k",
        "negative W": f"{TRANSISTOR.replace('w=10u', 'w=-10u')}\n{CARD}",
        "two models of one name": f"{STAGE}\n.model nm nmos (level=1 vto=2)",
        "unknown option": f"{DIVIDER}\n.options frobnicate=3",
        "unknown parameter of a subcircuit": (
            f"{DIVIDER}\nx1 in 0 s q=3\n.subckt s a b r=1k\nr1 a b {{r}}\n.ends"
        ),
    }
    for number, circuit in enumerate(silent.values()):
        execution = run(Job(deck(circuit), (OP, AC)), simulator=simulator, folder=tmp_path / str(number))
        assert execution.outcome is Outcome.MEASURED


@pytest.mark.parametrize(
    ("circuit", "commands"),
    [
        (
            "vcc c 0 5\nib 0 b 10u\nq1 c b out qn\nre out 0 1k\n.model qn npn (bf=100)",
            "sens v(out)\nwrite out.raw all",
        ),
        (DIVIDER + "\n.include deck.cir", OP_AND_AC),
    ],
    ids=["sensitivity of a bipolar transistor", "a deck that includes itself"],
)
def test_a_deck_that_crashes_the_simulator_is_a_crash(
    circuit: str, commands: str, simulator: Simulator, tmp_path: Path
) -> None:
    execution = run(Job(deck(circuit, commands), (OP,)), simulator=simulator, folder=tmp_path)
    assert "signal 11 (SIGSEGV)" in refused(execution, Outcome.CRASHED)
    assert execution.returncode == -signal.SIGSEGV


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


@pytest.fixture
def small_disk(tmp_path: Path) -> Iterator[Path]:
    """A folder on a disk of 64 KiB; mounting one takes the rights of root."""
    disk = tmp_path / "disk"
    disk.mkdir()
    subprocess.run(["mount", "-t", "tmpfs", "-o", "size=64k", "deckgen-test", disk], check=True, timeout=20)
    yield disk
    subprocess.run(["umount", disk], check=True, timeout=20)


def test_results_that_do_not_fit_on_the_disk_are_incomplete(simulator: Simulator, tmp_path: Path) -> None:
    # A file-size limit without its signal: every write beyond fails, as on a full disk.
    deaf = wrapped(tmp_path, simulator, before="trap '' XFSZ")
    execution = run(LARGE, simulator=deaf, folder=tmp_path / "run", limits=Limits(file_bytes=65536))
    assert "out.raw is damaged" in refused(execution, Outcome.INCOMPLETE)
    assert execution.returncode == 0
    assert run(LARGE, simulator=simulator, folder=tmp_path / "again").outcome is Outcome.MEASURED


if os.geteuid() == 0 and shutil.which("mount"):

    def test_a_full_disk_is_incomplete(simulator: Simulator, small_disk: Path) -> None:
        execution = run(LARGE, simulator=simulator, folder=small_disk / "run")
        refused(execution, Outcome.INCOMPLETE)
        assert execution.returncode == 0

    def test_a_disk_without_room_for_the_deck_is_incomplete(simulator: Simulator, small_disk: Path) -> None:
        (small_disk / "ballast").write_bytes(bytes(60_000))
        execution = run(Job("* title\n" * 2000, (OP,)), simulator=simulator, folder=small_disk / "run")
        assert "No space left on device" in refused(execution, Outcome.INCOMPLETE)
        assert execution.returncode is None


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


# --- the program and the folder ------------------------------------------------------------------


def test_a_simulator_that_is_no_longer_there_is_missing(tmp_path: Path) -> None:
    gone = Simulator("ngspice", "39", str(tmp_path / "gone"))
    refused(run(GOOD, simulator=gone, folder=tmp_path / "run"), Outcome.SIMULATOR_MISSING)


def test_a_simulator_that_is_not_executable_is_missing(tmp_path: Path) -> None:
    closed = fake(tmp_path, "exit 0")
    Path(closed.path).chmod(0o644)
    refused(run(GOOD, simulator=closed, folder=tmp_path / "run"), Outcome.SIMULATOR_MISSING)


def test_a_folder_that_already_holds_a_run_is_refused_and_left_alone(
    simulator: Simulator, tmp_path: Path
) -> None:
    run(GOOD, simulator=simulator, folder=tmp_path)
    before = (tmp_path / "out.raw").read_bytes()
    with pytest.raises(
        OutputError, match=r"already holds deck\.cir, .*out\.raw; give each run an empty folder"
    ):
        run(GOOD, simulator=simulator, folder=tmp_path)
    assert (tmp_path / "out.raw").read_bytes() == before


def test_other_files_in_the_folder_are_kept_and_listed(simulator: Simulator, tmp_path: Path) -> None:
    (tmp_path / "stage.toml").write_text("x", encoding="utf-8")
    execution = run(GOOD, simulator=simulator, folder=tmp_path)
    assert execution.outcome is Outcome.MEASURED
    assert "stage.toml" in execution.files


def test_a_folder_that_can_not_be_made_is_incomplete(simulator: Simulator, tmp_path: Path) -> None:
    (tmp_path / "file").write_text("x", encoding="utf-8")
    execution = run(GOOD, simulator=simulator, folder=tmp_path / "file" / "run")
    assert "Not a directory" in refused(execution, Outcome.INCOMPLETE)
    assert (execution.returncode, execution.files) == (None, ())


@pytest.mark.parametrize("name", ["../out.raw", "Out.raw", "", "a b", "stdout.txt", "/tmp/x", ".raw", "home"])
def test_only_a_plain_lower_case_name_of_a_raw_file_is_taken(name: str) -> None:
    with pytest.raises(ValueError, match="plain lower-case file name"):
        Job(GOOD.deck, (OP,), raw_name=name)


def test_a_raw_file_may_have_another_name(simulator: Simulator, tmp_path: Path) -> None:
    job = Job(GOOD.deck.replace("out.raw", "b-1.raw"), (OP, AC), raw_name="b-1.raw")
    assert run(job, simulator=simulator, folder=tmp_path).outcome is Outcome.MEASURED


def test_a_plot_without_points_can_not_be_expected() -> None:
    with pytest.raises(ValueError, match="at least 1"):
        ExpectedPlot("AC Analysis", 0, ())


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
