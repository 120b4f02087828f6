"""Every deck that rendering can give runs in plain ngspice, says nothing on stderr, and is biased well."""

from __future__ import annotations

import dataclasses
import re
import subprocess
from collections.abc import Callable
from pathlib import Path

import pytest

from deckgen.render.engine import render_runnable
from deckgen.simulator import Simulator
from deckgen.stage.model import Stage
from deckgen.stage.topology import Polarity, list_topologies, load_topology
from tests.unit.variants import starter, variant, variants


@dataclasses.dataclass(frozen=True)
class Printed:
    """What plain ngspice printed: voltages of nodes, values of the device, rows of the AC table."""

    nodes: dict[str, float]
    device: dict[str, float]
    gain: tuple[tuple[float, float], ...]


Run = Callable[[Stage], Printed]


@pytest.fixture
def run(simulator: Simulator, tmp_path: Path) -> Run:
    """Write a stage's deck and run it in plain ngspice; only a clean run comes back."""

    def run(stage: Stage) -> Printed:
        deck = tmp_path / "deck.cir"
        deck.write_text(render_runnable(stage, load_topology(stage.topology)), encoding="utf-8")
        answer = subprocess.run(
            [simulator.path, "-n", "-b", "deck.cir"],
            cwd=tmp_path,
            stdin=subprocess.DEVNULL,
            capture_output=True,
            text=True,
            timeout=30,
        )
        assert answer.returncode == 0
        assert answer.stderr == ""
        return _printed(answer.stdout)

    return run


def _printed(text: str) -> Printed:
    nodes, rest = re.split(r"Source\s+Current", text.split("Voltage", 1)[1], maxsplit=1)
    device = rest.split(" Mos1: ", 1)[1].split("\n\n", 1)[0]
    rows = re.findall(r"^\d+\t(\S+)\t(\S+)\t\S+\t$", text, re.MULTILINE)
    return Printed(
        nodes={
            name: float(value) for name, value in re.findall(r"^\t(\w+)\s+(\S+e\S+)$", nodes, re.MULTILINE)
        },
        device={
            name: float(value) for name, value in re.findall(r"^ +(\w+) +(-?\d\S*)$", device, re.MULTILINE)
        },
        gain=tuple((float(frequency), float(db)) for frequency, db in rows),
    )


@pytest.mark.parametrize("bulk", ["rail", "source"])
@pytest.mark.parametrize(("name", "polarity", "parts"), list(variants()))
def test_every_variant_prints_its_operating_point_and_is_saturated(
    run: Run, name: str, polarity: Polarity, parts: tuple[str, ...], bulk: str
) -> None:
    stage = variant(name, polarity, parts, bulk=bulk)
    printed = run(stage)
    device, nodes = printed.device, printed.nodes
    values = {part.name: part.value for part in stage.parts}
    assert nodes["vdd"] == pytest.approx(values["VDD"])
    assert nodes.get("vss") == pytest.approx(values["VSS"]) if "VSS" in values else "vss" not in nodes
    assert {"in", "out"} <= set(nodes)
    assert ("sig" in nodes) == ("RSIG" in parts)
    assert 0.2e-3 < device["id"] < 3e-3
    assert device["vds"] > abs(device["vdsat"]) + 0.3
    assert device["vgs"] - abs(device["von"]) > 0.15
    if bulk == "source":
        assert device["vbs"] == pytest.approx(0.0, abs=1e-12)


@pytest.mark.parametrize("polarity", ["n", "p"])
@pytest.mark.parametrize(
    ("name", "lowest", "highest"),
    [
        ("common-gate", 12, 18),
        ("common-source", 12, 25),
        ("common-source-current-bias", 12, 18),
        ("common-source-degenerated", 6, 10),
        ("common-source-drain-feedback", 25, 40),
        ("diode-connected", 0.05, 0.15),
        ("source-follower", 0.8, 1),
    ],
)
def test_a_starter_has_the_gain_of_its_kind_at_its_mid_band_frequency(
    run: Run, name: str, polarity: Polarity, lowest: float, highest: float
) -> None:
    stage = starter(name, polarity)
    gain = dict(run(stage).gain)
    assert len(gain) == 41
    frequency = stage.signal.frequency
    assert frequency is not None
    nearest = min(gain, key=lambda point: abs(point - frequency))
    assert lowest < 10 ** (gain[nearest] / 20) < highest
    assert gain[nearest] > max(gain.values()) - 0.1


@pytest.mark.parametrize("polarity", ["n", "p"])
@pytest.mark.parametrize("name", list_topologies())
def test_a_starter_is_driven_well_below_twice_its_overdrive(run: Run, name: str, polarity: Polarity) -> None:
    stage = starter(name, polarity)
    device = run(stage).device
    overdrive = device["vgs"] - abs(device["von"])
    assert stage.signal.amplitude is not None
    # The gate-source voltage is at most the source's; that of a follower is a fifth of it (gain above
    # 0.8), degenerated it is half, and a diode-connected device has the gain itself.
    share = {"source-follower": 0.2, "common-source-degenerated": 0.5, "diode-connected": 0.15}.get(name, 1.0)
    assert share * stage.signal.amplitude < 0.1 * 2 * overdrive


HOSTILE = (
    ".include evil.cir",
    "* .include evil.cir",
    "+ R9 vdd 0 1",
    "R9 vdd 0 1",
    ".control",
    "*# shell touch evil.txt",
    "`touch evil.txt`",
    "$(touch evil.txt)",
    "ends in a backslash \\\\",
    "; .include evil.cir",
    "\N{GRINNING FACE}" * 400,
    "Ω µ − 漢字",
    "x" * 5000,
)


@pytest.mark.parametrize("title", HOSTILE, ids=range(len(HOSTILE)))
def test_no_title_or_file_name_changes_what_is_simulated(run: Run, tmp_path: Path, title: str) -> None:
    (tmp_path / "evil.cir").write_text("R9 vdd 0 1\n")
    stage = starter("common-source", "n")
    plain = run(stage)
    file = title.replace("/", "") or "x"
    assert run(dataclasses.replace(stage, title=title, file=file)) == plain
    assert {path.name for path in tmp_path.iterdir()} == {"deck.cir", "evil.cir"}


@pytest.mark.parametrize("title", ["x" * 5000, "\N{GRINNING FACE}" * 400], ids=["ASCII", "four bytes each"])
def test_a_long_title_does_not_abort_a_run_into_a_raw_file(
    simulator: Simulator, tmp_path: Path, title: str
) -> None:
    stage = dataclasses.replace(starter("common-source", "n"), title=title)
    deck = render_runnable(stage, load_topology(stage.topology))
    (tmp_path / "deck.cir").write_text(deck, encoding="utf-8")
    answer = subprocess.run(
        [simulator.path, "-n", "-b", "-r", "out.raw", "deck.cir"],
        cwd=tmp_path,
        stdin=subprocess.DEVNULL,
        capture_output=True,
        timeout=30,
    )
    assert answer.returncode == 0
    assert answer.stderr == b""
    assert b"Plotname: AC Analysis" in (tmp_path / "out.raw").read_bytes()
