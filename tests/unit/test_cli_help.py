"""Exit codes as they are told, and what the user sees of a bug: the same in code, help, README and log."""

from __future__ import annotations

import re
from collections.abc import Callable
from pathlib import Path

import pytest

from deckgen.cli.main import _COMMANDS, main
from deckgen.errors import (
    ExitCode,
    Fault,
    InputError,
    NoBiasError,
    Outcome,
    OutputError,
    SimulatorError,
)
from deckgen.report.wording import EXIT_MEANING
from deckgen.stage import topology

Call = Callable[..., tuple[int, str, str]]


@pytest.fixture
def call(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> Call:
    """The command line in an empty folder: exit code, standard output, standard error."""
    monkeypatch.chdir(tmp_path)

    def run(*arguments: str) -> tuple[int, str, str]:
        capsys.readouterr()
        with pytest.raises(SystemExit) as stop:
            main(list(arguments))
        out, err = capsys.readouterr()
        assert isinstance(stop.value.code, int)
        return stop.value.code, out, err

    return run


# --- the table -----------------------------------------------------------------------------------


def test_the_codes_are_these_six_and_the_readme_tells_them(project: Path) -> None:
    table = {"OK": 0, "GAP": 1, "INPUT": 2, "SIMULATOR": 3, "BUG": 4, "INTERRUPTED": 130}
    assert {code.name: int(code) for code in ExitCode} == table
    readme = (project / "README.md").read_text("utf-8")
    told = {int(code): meaning for code, meaning in re.findall(r"(?m)^\| (\d+) \| (.*) \|$", readme)}
    assert sorted(told) == sorted(table.values())
    for code, meaning in EXIT_MEANING.items():
        assert told[code].startswith(meaning)


def test_the_help_tells_every_code(call: Call) -> None:
    code, out, err = call("-h")
    assert (code, err) == (0, "")
    said = " ".join(out.split())
    for text in (
        "0 all within",
        "1 a gap",
        "2 input refused",
        "3 the simulator",
        "4 a bug",
        "130 interrupted",
    ):
        assert text in said
    for name, summary in _COMMANDS.items():
        assert re.search(rf"{name} +{re.escape(summary)}", said)


def test_the_summary_of_each_command_is_that_of_its_own_help(call: Call) -> None:
    for name in _COMMANDS:
        code, out, _ = call(name, "-h")
        assert code == 0
        assert len(out.split("\n\n")[1].strip()) > 20


@pytest.mark.parametrize("outcome", Outcome)
def test_every_outcome_has_a_code_of_the_table(outcome: Outcome) -> None:
    expected = {
        Outcome.MEASURED: ExitCode.OK,
        Outcome.REFUSED: ExitCode.INPUT,
        Outcome.BUG: ExitCode.BUG,
    }
    assert outcome.exit_code is expected.get(outcome, ExitCode.SIMULATOR)


# --- errors --------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("error", "code", "line"),
    [
        (InputError(Fault("a.toml", "parts.RD", '"x"', "a value in Ω")), 2, 'a.toml: parts.RD: found "x"'),
        (NoBiasError("no bias point found"), 2, "no bias point found"),
        (SimulatorError(Outcome.SIMULATOR_MISSING, "no ngspice on PATH"), 3, "simulator missing: no ngspice"),
        (OutputError("a.json: can't be written"), 3, "a.json: can't be written"),
        (KeyboardInterrupt(), 130, "interrupted"),
    ],
    ids=["input", "bias", "simulator", "output", "interruption"],
)
def test_what_is_raised_on_purpose_is_one_line_and_its_code(
    call: Call, monkeypatch: pytest.MonkeyPatch, error: BaseException, code: int, line: str
) -> None:
    def fail(*_: object) -> None:
        raise error

    monkeypatch.setattr(topology, "list_topologies", fail)
    found, out, err = call("topologies")
    assert (found, out) == (code, "")
    assert err.strip().startswith(f"deckgen: {line}")
    assert len(err.strip().splitlines()) == 1
    assert "Traceback" not in err


@pytest.fixture
def broken(monkeypatch: pytest.MonkeyPatch) -> None:
    """A bug, whose text has a line break in it."""

    def fail(*_: object) -> None:
        raise KeyError("lost\nkey")

    monkeypatch.setattr(topology, "list_topologies", fail)


@pytest.mark.usefixtures("broken")
def test_a_bug_is_code_4_and_one_line_that_says_where(call: Call) -> None:
    code, out, err = call("topologies")
    assert (code, out) == (4, "")
    assert err.startswith("deckgen: a bug in deckgen: KeyError: ")
    assert "lost" in err
    assert re.search(r"\(at test_cli_help\.py, line \d+; -v shows the whole traceback\)\n$", err)
    assert err.count("\n") == 1


@pytest.mark.usefixtures("broken")
def test_the_traceback_of_a_bug_is_shown_to_who_asks_for_it(call: Call) -> None:
    code, out, err = call("-v", "topologies")
    assert (code, out) == (4, "")
    assert "Traceback (most recent call last)" in err
    assert err.splitlines()[-1].startswith("deckgen: a bug in deckgen: KeyError")


@pytest.mark.usefixtures("broken")
def test_the_traceback_of_a_bug_is_in_the_log_file_and_not_on_the_screen(call: Call, tmp_path: Path) -> None:
    code, _, err = call("--log-file", "run.log", "topologies")
    assert code == 4
    assert err.count("\n") == 1
    log = (tmp_path / "run.log").read_text("utf-8")
    assert "ERROR a bug in deckgen" in log
    assert "Traceback (most recent call last)" in log
    assert "KeyError" in log


def test_a_command_that_can_not_even_be_loaded_is_a_bug_in_one_line(
    call: Call, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setitem(_COMMANDS, "missing", "A command without its module.")
    code, out, err = call("missing")
    assert (code, out) == (4, "")
    assert err.startswith("deckgen: a bug in deckgen: ModuleNotFoundError: ")
    assert err.count("\n") == 1
