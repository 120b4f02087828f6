"""ngspice as anybody runs it: no start-up file of ours, whatever is installed; operating points of decks."""

from __future__ import annotations

import os
import subprocess
from collections.abc import Iterable, Sequence
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

from deckgen.simulator import RawFileError, Simulator, read_raw

TIGHT = "option reltol=1e-10 vntol=1e-13 abstol=1e-19 itl1=500"
"""So that what two runs differ by is what the circuits differ by."""


def run_plainly(
    simulator: Simulator, folder: Path, deck: str = "deck.cir"
) -> subprocess.CompletedProcess[str]:
    """Run a deck that lies in a folder; nothing is kept from it."""
    return subprocess.run(
        [simulator.path, "-n", "-b", deck],
        cwd=folder,
        env={"PATH": os.environ["PATH"], "HOME": str(folder)},
        stdin=subprocess.DEVNULL,
        capture_output=True,
        text=True,
        errors="replace",
        timeout=20,
    )


def operating_point(simulator: Simulator, folder: Path, deck: Path) -> dict[str, float]:
    """Node voltages and source currents of a deck file, which may hold no ``quit``."""
    folder.mkdir(parents=True)
    commands = [".control", f"source {deck}", TIGHT, "op", "write point.raw all", "quit", ".endc"]
    (folder / "deck.cir").write_text("\n".join(["* point", *commands, ".end", ""]), encoding="utf-8")
    done = run_plainly(simulator, folder)
    raw = folder / "point.raw"
    assert raw.is_file(), f"{deck}: {done.stderr[-2000:]}"
    plot = read_raw(raw.read_bytes())[0]
    assert plot.name == "Operating Point", deck
    return {v.name: float(plot.column(v.name)[0].real) for v in plot.variables}


def attempted_point(simulator: Simulator, folder: Path, deck: Path) -> dict[str, float] | None:
    """The operating point of a deck file, where ngspice finds one."""
    try:
        return operating_point(simulator, folder, deck)
    except (AssertionError, RawFileError, subprocess.TimeoutExpired):
        return None


def operating_points(
    simulator: Simulator, folder: Path, decks: Iterable[Path]
) -> dict[str, dict[str, float]]:
    """Operating points of deck files, each in a process of its own, by the names of the files."""
    files: Sequence[Path] = list(decks)
    with ThreadPoolExecutor(2) as pool:
        points = pool.map(lambda file: operating_point(simulator, folder / file.name, file), files)
        return {file.name: point for file, point in zip(files, points, strict=True)}
