"""Poles and zeros, and what the finding about unstable circuits says, as ngspice has them.

Independent: ngspice's ``.pz`` looks for the roots of its own matrices with its own search, at its own
operating point, and its transient run shows what a circuit does. The search stops some 1e-6 from a root.
"""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest

from deckgen.assumptions import assumptions_made
from deckgen.circuit.ports import Ports
from deckgen.circuit.reader import read_flat
from deckgen.hand.batch import Batch
from deckgen.hand.bias import solve_bias
from deckgen.hand.effects import ALL_EFFECTS
from deckgen.hand.poles import PolesAndZeros, poles_and_zeros
from deckgen.hand.predict import predict
from deckgen.hand.prediction import HalfPlane
from deckgen.hand.smallsignal import linearize
from deckgen.pipeline import CheckSettings, check_stage
from deckgen.simulator import Simulator, read_raw
from deckgen.units import format_value
from tests.simulator.plain import run_plainly

CLOSE = 1e-5
MODELS = """\
.model nm nmos level=1 vto=0.8 kp=100u gamma=0.4 phi=0.7 lambda=0.01 tox=20n cgso=0.2n cgdo=0.2n
.model pm pmos level=1 vto=-0.9 kp=40u gamma=0.5 phi=0.7 lambda=0.02 tox=20n cgso=0.2n cgdo=0.2n
.options reltol=1e-9 vntol=1e-12 abstol=1e-18 gmin=1e-15
"""
SUPPLY = "vdd vdd 0 12\nvin in 0 dc 0 ac 1\n"
DIVIDER = SUPPLY + "rsig in a 1k\ncin a g 100n\nr1 vdd g 1.2meg\nr2 g 0 300k\n"
LOADED = "rd vdd d 10k\nrs s 0 2k\ncout d out 1u\nrl out 0 47k\ncl out 0 100p\n"
BYPASS = "cs s 0 10u\n"
AMPLIFYING = DIVIDER + "m1 d g s 0 nm w=100u l=2u\n"
DECKS = {
    "common source, bypassed": AMPLIFYING + LOADED + BYPASS,
    "common source, degenerated": AMPLIFYING + LOADED,
    "follower": DIVIDER
    + "m1 vdd g s 0 nm w=100u l=2u\nrs s 0 2k\ncout s out 1u\nrl out 0 47k\ncl out 0 1n\n",
    "common gate": SUPPLY
    + "vg g 0 3\nrsig in a 100\ncin a s 1u\nrs s 0 2k\n"
    + "m1 out g s 0 nm w=100u l=2u\nrd vdd out 10k\ncl out 0 20p\n",
    "p-channel": SUPPLY
    + "rsig in a 10k\ncin a g 47n\nr1 vdd g 300k\nr2 g 0 700k\n"
    + "m1 out g s vdd pm w=200u l=2u\nrs vdd s 1k\ncs s vdd 4.7u\nrd out 0 5k\ncl out 0 50p\n",
    "two stages": AMPLIFYING
    + BYPASS
    + "rd vdd d 10k\nrs s 0 2k\nm2 vdd d out 0 nm w=200u l=2u\nr3 out 0 3k\ncl out 0 1n\n",
    "inductor at the drain": DIVIDER
    + BYPASS
    + "m1 out g s 0 nm w=100u l=2u\nld vdd p 1m\nrp p out 200\nrs s 0 2k\ncl out 0 100p\n",
}
COLPITTS = """\
vdd vdd 0 9
vb g 0 2
vin in 0 dc 0 ac 1
rin in s 47k
l1 vdd t 10u
rt t out 20
c1 out s 100p
c2 s 0 400p
m1 out g s 0 nm w=200u l=2u
rs s 0 1k
"""


def ours(cards: str) -> PolesAndZeros:
    circuit = read_flat(f"t\n{cards}{MODELS}")
    # Two rows: no other operating points are looked for.
    bias = solve_bias(circuit, Batch((ALL_EFFECTS, ALL_EFFECTS))).row(0)
    found = poles_and_zeros(linearize(circuit, Ports("vin", "out"), bias), 10e3)
    assert found is not None
    return found


def of_ngspice(simulator: Simulator, folder: Path, cards: str) -> dict[str, list[complex]]:
    """Poles and zeros from the source to the output [rad/s]."""
    commands = [".control", "pz in 0 out 0 vol pz", "write found.raw all", "quit", ".endc"]
    (folder / "deck.cir").write_text("\n".join(["* pz", cards + MODELS, *commands, ".end", ""]), "utf-8")
    done = run_plainly(simulator, folder)
    assert (folder / "found.raw").is_file(), done.stderr[-2000:]
    (plot,) = read_raw((folder / "found.raw").read_bytes())
    assert plot.name == "Pole-Zero Analysis"
    found: dict[str, list[complex]] = {"pole": [], "zero": []}
    for variable in plot.variables:
        found[variable.name.removeprefix("v(")[:4]].append(complex(plot.column(variable.name)[0]))
    return found


@pytest.mark.parametrize("name", DECKS)
def test_poles_and_zeros_are_those_that_ngspice_finds(
    name: str, simulator: Simulator, tmp_path: Path
) -> None:
    found, theirs = ours(DECKS[name]), of_ngspice(simulator, tmp_path, DECKS[name])
    for own, other in ((found.poles, theirs["pole"]), (found.zeros, theirs["zero"])):
        left = list(other)
        assert len(own) == len(left)
        for s in own:
            twin = min(left, key=lambda place: abs(place - s))
            assert abs(twin - s) <= CLOSE * abs(s)
            left.remove(twin)


def test_a_pair_in_the_right_half_plane_is_an_oscillation_that_grows(
    simulator: Simulator, tmp_path: Path
) -> None:
    """After a kick of 1 µV v[n+1] = 2·Re(q)·v[n] - |q|²·v[n-1] with q = exp(s·h) while it is small."""
    found = ours(COLPITTS)
    pair = max(found.poles, key=lambda s: (s.real, s.imag))
    assert pair.real > 0.0
    kicked = COLPITTS.replace("dc 0 ac 1", "dc 0 ac 1 pulse(0 1u 0 1n 1n 1)")
    commands = [".control", "tran 0.2n 3u 0 0.2n", "write found.raw v(out)", "quit", ".endc"]
    (tmp_path / "deck.cir").write_text("\n".join(["* kick", kicked + MODELS, *commands, ".end", ""]), "utf-8")
    done = run_plainly(simulator, tmp_path)
    assert (tmp_path / "found.raw").is_file(), done.stderr[-2000:]
    (plot,) = read_raw((tmp_path / "found.raw").read_bytes())
    step = 0.1 * 2.0 * math.pi / abs(pair.imag)
    grid = np.arange(1e-6, 3e-6, step)
    v = np.interp(grid, plot.column("time").real, plot.column("v(out)").real)
    v -= plot.column("v(out)").real[0]
    assert np.abs(v).max() < 5e-3
    (twice, minus_square), *_ = np.linalg.lstsq(np.stack([v[1:-1], v[:-2]], axis=1), v[2:], rcond=None)
    grown = np.roots([1.0, -twice, -minus_square])
    assert max(np.log(grown) / step, key=lambda s: s.imag) == pytest.approx(pair, rel=2e-3)


def test_a_check_of_an_oscillator_says_that_its_values_say_nothing(
    simulator: Simulator, tmp_path: Path
) -> None:
    notes = "".join(f"* deckgen: {note}\n" for note in ("input vin", "output out", "assumptions full"))
    deck = tmp_path / "oscillator.cir"
    deck.write_text(f"oscillator\n{COLPITTS}{MODELS}{notes}.end\n", encoding="utf-8")
    settings = CheckSettings(keep=False, run_dir=tmp_path / "runs")
    comparison = check_stage(deck, simulator=simulator, settings=settings)
    (told,) = (one for one in comparison.findings if one.slug == "unstable-small-signal")
    frequency = abs(max(ours(COLPITTS).poles, key=lambda s: s.real)) / (2.0 * math.pi)
    assert f"pole pair at {format_value(frequency, 'Hz')} in the right half plane" in told.text
    assert "the circuit oscillates" in told.text


def test_two_inverters_on_their_tipping_point_run_away_by_a_real_pole(
    simulator: Simulator, tmp_path: Path
) -> None:
    """(gm·R)² > 1: the pole is at (gm - 1/R - gds)/C to the right, and ngspice finds it there too."""
    latch = (
        "vdd vdd 0 5\nvin in 0 dc 1.614 ac 1\nrin in a 1meg\nra vdd a 10k\nrb vdd out 10k\nca a 0 1p\n"
        "cb out 0 1p\nm1 a out 0 0 flat w=20u l=2u\nm2 out a 0 0 flat w=20u l=2u\n"
        ".model flat nmos level=1 vto=0.8 kp=100u lambda=0.01\n"
    )
    found = ours(latch)
    (growing,) = (pole for pole in found.poles if pole.real > 0.0)
    theirs = of_ngspice(simulator, tmp_path, latch)
    assert min(abs(pole - growing) for pole in theirs["pole"]) <= CLOSE * abs(growing)
    prediction = predict(
        read_flat(f"t\n{latch}"), Ports("vin", "out"), assumptions=assumptions_made("full"), frequency=1e6
    )
    assert all(root.half_plane is not HalfPlane.RIGHT for root in prediction.poles)
    assert [point.stable for point in prediction.others].count(False) == 1
