"""Running decks in the real simulator: what it is given, what is accepted, what is not."""

from __future__ import annotations

import signal
import subprocess
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import numpy as np
import pytest

from deckgen.errors import Outcome, OutputError
from deckgen.simulator import ExpectedPlot, Job, Limits, Simulator, run, startup
from tests.simulator.fakes import (
    AC,
    CARD,
    DIVIDER,
    GOOD,
    OP,
    OP_AND_AC,
    STAGE,
    TRANSISTOR,
    deck,
    fake,
    refused,
    wrapped,
)


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
    # Misspelt LAMBDA: without strict_errorhandling a warning and exit status 0, seen with 39.
    job = Job(deck(f"{TRANSISTOR}\n.model nm nmos (level=1 vto=1 lamda=0.1)"), (OP, AC))
    execution = run(job, simulator=simulator, folder=tmp_path / "ours")
    assert "lamda" in refused(execution, Outcome.REFUSED_BY_SIMULATOR)
    assert execution.returncode == 1
    plain = wrapped(tmp_path, simulator, before="unset SPICE_SCRIPTS")
    execution = run(job, simulator=plain, folder=tmp_path / "plain")
    assert "lamda" in refused(execution, Outcome.REFUSED_BY_SIMULATOR)
    assert execution.returncode == 0


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
