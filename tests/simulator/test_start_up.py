"""What the program loads before it has to: asking for help must not cost the start of numpy."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

from deckgen.cli.main import _COMMANDS
from tests.simulator.command_line import environment

HEAVY = ["numpy", "scipy", "PySpice", "pydantic", "rich", "jinja2", "quantiphy", "platformdirs"]

SCRIPT = f"""
import contextlib, io, json, sys
from deckgen.cli.main import main
loaded = {{}}
for line in json.loads(sys.argv[1]):
    with contextlib.redirect_stdout(io.StringIO()), contextlib.redirect_stderr(io.StringIO()):
        with contextlib.suppress(SystemExit):
            main(line.split())
    loaded[line] = [name for name in {HEAVY!r} if name in sys.modules]
print(json.dumps(loaded))
"""


def test_help_version_and_refusals_load_nothing_heavy(tmp_path: Path) -> None:
    lines = ["-h", "--version", "chek", "check", "check --jsn x", *(f"{name} -h" for name in _COMMANDS)]
    done = subprocess.run(
        [sys.executable, "-c", SCRIPT, json.dumps(lines)],
        cwd=tmp_path,
        env=environment(),
        capture_output=True,
        text=True,
        check=True,
        timeout=60,
    )
    assert json.loads(done.stdout) == {line: [] for line in lines}


def test_a_list_of_topologies_loads_neither_hand_analysis_nor_reports(tmp_path: Path) -> None:
    """The descriptions are read by pydantic; nothing else of weight is there."""
    script = SCRIPT.replace("print(", "loaded['topologies'].remove('pydantic'); print(")
    done = subprocess.run(
        [sys.executable, "-c", script, json.dumps(["topologies"])],
        cwd=tmp_path,
        env=environment(),
        capture_output=True,
        text=True,
        check=True,
        timeout=60,
    )
    assert json.loads(done.stdout) == {"topologies": []}
