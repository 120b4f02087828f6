"""Calling deckgen as its user does: in a process of its own, or its ``main`` where that is faster."""

from __future__ import annotations

import os
import re
import subprocess
import sys
import time
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any, NamedTuple

import pytest

from deckgen.cli.main import main
from deckgen.render.starter import starter_stage_file
from deckgen.stage.topology import load_topology
from tests.simulator.fakes import fake

PROJECT = Path(__file__).resolve().parents[2]
TOPOLOGIES = (
    "common-gate",
    "common-source",
    "common-source-current-bias",
    "common-source-degenerated",
    "common-source-drain-feedback",
    "diode-connected",
    "source-follower",
)

# A process that was started with SIGINT ignored (by a shell's `&`) would never be interrupted.
LISTENING = (
    "import signal; signal.signal(signal.SIGINT, signal.default_int_handler);"
    "from deckgen.cli.main import main; main()"
)


class Answer(NamedTuple):
    """Exit code, standard output, standard error."""

    code: int
    out: str
    err: str


def inside(capsys: pytest.CaptureFixture[str], *arguments: str | Path) -> Answer:
    """Call the program's ``main`` in this process."""
    capsys.readouterr()
    with pytest.raises(SystemExit) as stop:
        main([str(each) for each in arguments])
    out, err = capsys.readouterr()
    assert isinstance(stop.value.code, int)
    return Answer(stop.value.code, out, err)


def environment(**changes: str) -> dict[str, str]:
    """The variables of a process: none of deckgen's own, none that set colours or widths."""
    kept = {
        name: value
        for name, value in os.environ.items()
        if not name.startswith(("DECKGEN_", "PYTHON")) and name not in ("NO_COLOR", "COLUMNS", "TERM")
    }
    return {**kept, "PYTHONPATH": str(PROJECT), **changes}


def command(*arguments: str | Path) -> list[str]:
    """The command line of a process of its own."""
    return [sys.executable, "-m", "deckgen", *(str(each) for each in arguments)]


def process(folder: Path, *arguments: str | Path, variables: Mapping[str, str] | None = None) -> Answer:
    """Run the program in ``folder``, its output in pipes."""
    done = subprocess.run(
        command(*arguments),
        cwd=folder,
        env=environment(**(variables or {})),
        capture_output=True,
        encoding="utf-8",
        timeout=60,
    )
    return Answer(done.returncode, done.stdout, done.stderr)


def stage_text(topology: str = "common-source", polarity: str = "n", **values: str) -> str:
    """The starter's stage file with other values; an empty one takes the line out."""
    text = starter_stage_file(load_topology(topology), "n" if polarity == "n" else "p")
    for key, value in values.items():
        line = f'{key} = "{value}"' if value else ""
        text, found = re.subn(rf'(?m)^{key} += ".*$', lambda _, line=line: line, text)
        assert found == 1, f"{key} stands {found} times in the starter"
    return text


def write_stage(path: Path, more: str = "", **values: str) -> Path:
    """Write a stage file: the common source of the starter, with ``values`` of its own."""
    path.write_text(f"{stage_text(**values)}\n{more}", encoding="utf-8")
    return path


class Fake(NamedTuple):
    """A program that stands for ngspice, and the folder where it writes the numbers of its processes."""

    path: Path
    pids: Path

    def numbers(self, count: int, *, within: float = 30.0) -> list[int]:
        """Wait until ``count`` of them run."""
        limit = time.monotonic() + within
        while time.monotonic() < limit:
            found = [path for path in self.pids.iterdir() if path.read_text(encoding="utf-8").strip()]
            if len(found) >= count:
                return [int(path.name) for path in found]
            time.sleep(0.01)
        pytest.fail(f"{count} simulators should run")


def fake_ngspice(folder: Path, script: str) -> Fake:
    """A shell script that answers for its version, tells its number, and then does what it is told to."""
    pids = folder / "pids"
    pids.mkdir()
    version = 'case "$1" in --version) echo "ngspice-39 : a stand-in"; exit 0;; esac'
    simulator = fake(folder, f'{version}\necho "$PWD" >{pids}/$$\n{script}')
    return Fake(Path(simulator.path), pids)


def by_name(document: Mapping[str, Any]) -> dict[str, dict[str, Any]]:
    """The stages of a document by their names."""
    return {stage["name"]: stage for stage in document["stages"]}


def run_folders(parent: Path) -> list[Path]:
    """The folders of evidence below ``parent``, in order of their names."""
    return sorted(parent.iterdir()) if parent.is_dir() else []


Call = Callable[..., Answer]
