"""What a run leaves behind beside the simulator's own files: inputs, comparison, versions, hashes."""

from __future__ import annotations

import platform
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from deckgen import __version__
from deckgen.comparison import Comparison
from deckgen.judge import Analysis
from deckgen.report.document import check_document, dump
from deckgen.simulator.job import DECK, HOME, STARTUP, Execution
from deckgen.simulator.locate import Simulator
from deckgen.simulator.startup import digest
from deckgen.store import runs


def leave(
    folder: Path,
    inputs: Sequence[tuple[str, str]],
    analysis: Analysis,
    comparison: Comparison,
    execution: Execution,
    simulator: Simulator,
) -> None:
    """Write the inputs as (name, text), the comparison and the record. Raises OutputError."""
    for name, text in inputs:
        runs.write_atomically(folder / name, text)
    document = check_document([comparison], simulator=simulator)
    runs.write_atomically(folder / runs.COMPARISON, dump(document, compact=True))
    names = [name for name, _ in inputs]
    runs.write_record(folder, _record(names, analysis, execution, simulator))


def _record(
    inputs: Sequence[str], analysis: Analysis, execution: Execution, simulator: Simulator
) -> dict[str, Any]:
    return {
        "schema": "deckgen.run/1",
        "deckgen": __version__,
        "python": platform.python_version(),
        "system": platform.platform(),
        "simulator": {"name": simulator.name, "version": simulator.version, "path": simulator.path},
        "command": [simulator.path, "-n", "-b", DECK],
        "environment": {"SPICE_SCRIPTS": STARTUP, "HOME": HOME, "LC_ALL": "C"},
        "start_up_file_sha256": digest(),
        "stage_file": inputs[0] if inputs else None,
        "inputs": list(inputs),
        "temperature_kelvin": analysis.stage.conditions.temperature,
        "tnom_kelvin": analysis.stage.conditions.tnom,
        "outcome": execution.outcome.value,
        "returncode": execution.returncode,
        "seconds": execution.seconds,
    }
