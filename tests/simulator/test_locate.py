"""Finding the simulator: named, on PATH, missing, or something else altogether."""

from __future__ import annotations

import time
from pathlib import Path

import pytest

from deckgen.errors import ExitCode, Outcome, SimulatorError
from deckgen.simulator import Simulator, find, locate
from tests.simulator.fakes import fake


def missing(environment: dict[str, str]) -> str:
    """See that the simulator is missing, and give the one line about it."""
    with pytest.raises(SimulatorError) as caught:
        find(environment)
    assert caught.value.outcome is Outcome.SIMULATOR_MISSING
    assert caught.value.exit_code is ExitCode.SIMULATOR
    assert (
        "install the Debian package ngspice" in caught.value.meaning
        or "name the program" in caught.value.meaning
    )
    return caught.value.meaning


def test_the_one_on_path_is_found_with_its_version(simulator: Simulator) -> None:
    assert simulator.name == "ngspice"
    assert int(simulator.version.partition(".")[0].rstrip("+")) >= 30
    assert Path(simulator.path).is_absolute()


def test_the_variable_comes_before_path(tmp_path: Path, simulator: Simulator) -> None:
    other = fake(tmp_path, "echo '** ngspice-44.2+ : Circuit level simulation program'")
    environment = {"DECKGEN_NGSPICE": other.path, "PATH": str(Path(simulator.path).parent)}
    assert find(environment) == Simulator("ngspice", "44.2+", other.path)


def test_the_variable_may_be_a_name_on_path(tmp_path: Path) -> None:
    other = fake(tmp_path, "echo 'ngspice-42'")
    environment = {"DECKGEN_NGSPICE": "fake-simulator", "PATH": f"{tmp_path}:/usr/bin:/bin"}
    assert find(environment).path == other.path


def test_a_relative_name_becomes_absolute(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    other = fake(tmp_path, "echo 'ngspice-42'")
    monkeypatch.chdir(tmp_path)
    assert find({"DECKGEN_NGSPICE": "./fake-simulator", "PATH": "/usr/bin:/bin"}).path == other.path


def test_an_empty_variable_is_no_variable(simulator: Simulator) -> None:
    environment = {"DECKGEN_NGSPICE": "", "PATH": str(Path(simulator.path).parent)}
    assert find(environment) == simulator


def test_no_simulator_on_path_is_missing(tmp_path: Path) -> None:
    assert "no ngspice on PATH" in missing({"PATH": str(tmp_path)})


def test_a_name_of_nothing_is_missing(tmp_path: Path) -> None:
    meaning = missing({"DECKGEN_NGSPICE": str(tmp_path / "gone"), "PATH": str(tmp_path)})
    assert "does not exist" in meaning
    assert "DECKGEN_NGSPICE" in meaning


def test_a_folder_is_no_simulator(tmp_path: Path) -> None:
    assert "a folder" in missing({"DECKGEN_NGSPICE": str(tmp_path), "PATH": ""})


def test_a_file_that_is_not_executable_is_no_simulator(tmp_path: Path) -> None:
    path = tmp_path / "closed"
    path.write_text("#!/bin/sh\n", encoding="utf-8")
    assert "not executable" in missing({"DECKGEN_NGSPICE": str(path), "PATH": ""})


@pytest.mark.parametrize("script", ["echo something else", "exit 1", "exit 0", "kill -9 $$", "yes"])
def test_another_program_is_no_simulator(script: str, tmp_path: Path) -> None:
    meaning = missing({"DECKGEN_NGSPICE": fake(tmp_path, script).path, "PATH": "/usr/bin:/bin"})
    assert "is not an ngspice" in meaning


def test_a_script_whose_interpreter_is_missing_is_no_simulator(tmp_path: Path) -> None:
    path = tmp_path / "script"
    path.write_text("#!/nowhere/sh\n", encoding="utf-8")
    path.chmod(0o755)
    missing({"DECKGEN_NGSPICE": str(path), "PATH": "/usr/bin:/bin"})


def test_a_program_that_does_not_answer_is_no_simulator(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(locate, "_SECONDS", 0.3)
    started = time.perf_counter()
    meaning = missing({"DECKGEN_NGSPICE": fake(tmp_path, "sleep 300").path, "PATH": "/usr/bin:/bin"})
    assert "did not tell its version within 0.3 s" in meaning
    assert time.perf_counter() - started < 5


def test_the_version_is_asked_once_and_again_after_a_change(tmp_path: Path) -> None:
    other = fake(tmp_path, f"echo x >>{tmp_path}/asked; echo ngspice-42")
    environment = {"DECKGEN_NGSPICE": other.path, "PATH": "/usr/bin:/bin"}
    for _ in range(3):
        assert find(environment).version == "42"
    assert (tmp_path / "asked").read_text("utf-8") == "x\n"
    fake(tmp_path, "echo ngspice-43 # longer, so that it is another file at the same time")
    assert find(environment).version == "43"


def test_the_environment_of_the_process_is_the_default(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    other = fake(tmp_path, "echo ngspice-42")
    monkeypatch.setenv("DECKGEN_NGSPICE", other.path)
    assert find().path == other.path
