"""gnucap, a second simulator, run on a netlist: its operating point and its AC analyses as numbers."""

from __future__ import annotations

import re
import shutil
import subprocess
from cmath import rect
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from math import pi
from pathlib import Path

import pytest

# Without its gmin of 1e-12 S at every node and its 1e-7 Ω in every source, and with digits enough.
OPTIONS = (".options numdgt=12 gmin=1e-20 short=1e-12", ".width out=250")
SUFFIXES = {"": 1.0, "Meg": 1e6, "K": 1e3, "m": 1e-3, "u": 1e-6, "n": 1e-9, "p": 1e-12, "f": 1e-15}


@dataclass(frozen=True)
class Printed:
    """What gnucap printed: the operating point by probe, and phasors by frequency [Hz] and probe."""

    point: Mapping[str, float]
    phasors: Mapping[float, Mapping[str, complex]]


def figure(word: str) -> float:
    """A number as gnucap prints it: ``316.214u``, ``10.Meg``, ``-91.098``."""
    match = re.fullmatch(r"(-?[\d.]+(?:e[+-]?\d+)?)([A-Za-z]*)", word)
    assert match is not None, word
    return float(match[1]) * SUFFIXES[match[2]]


def simulate(
    netlist: str,
    folder: Path,
    *,
    point: Sequence[str] = (),
    phasors: Sequence[str] = (),
    frequencies: Sequence[float] = (),
) -> Printed:
    """Run the netlist; probes as ``v(out)``. A gnucap that is missing is a failure, never a skip."""
    program = shutil.which("gnucap")
    if program is None:
        pytest.fail("gnucap is not on PATH; install the Debian package gnucap")
    lines = [line for line in netlist.splitlines() if line.strip().lower() != ".end"]
    lines += [*OPTIONS, f".print op {' '.join(point)}", ".op"]
    lines.append(".print ac " + " ".join(f"{one[0]}m{one[1:]} {one[0]}p{one[1:]}" for one in phasors))
    lines += [*(f".ac {frequency!r}" for frequency in frequencies), ".end", ""]
    (folder / "deck.ckt").write_text("\n".join(lines), encoding="utf-8")
    answer = subprocess.run(
        [program, "-b", "deck.ckt"],
        cwd=folder, stdin=subprocess.DEVNULL, capture_output=True, text=True, timeout=30,
    )  # fmt: skip
    assert (answer.returncode, answer.stderr) == (0, "")
    at_dc, *curves = answer.stdout.split("\n#")[1:]
    rows = [[figure(word) for word in curve.splitlines()[1].split()] for curve in curves]
    assert [row[0] for row in rows] == pytest.approx(list(frequencies), rel=1e-11)
    return Printed(
        point=dict(zip(point, map(figure, at_dc.splitlines()[1].split()[1:]), strict=True)),
        phasors={
            frequency: {
                probe: rect(row[1 + 2 * i], row[2 + 2 * i] * pi / 180.0) for i, probe in enumerate(phasors)
            }
            for frequency, row in zip(frequencies, rows, strict=True)
        },
    )
