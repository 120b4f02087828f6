"""Stages driven by a current in gnucap, a second simulator, against deckgen's full hand analysis.

Every check here is independent: gnucap (GPL-3.0, Debian package ``gnucap`` 0.36) solves the very cards of
the deck, with a level-1 law of its own making, and knows nothing of ngspice. Nothing is pinned. With 1 A from
the source, the voltages that gnucap prints are resistances: V(out) is Rm, and the input node gives Rin. For
Rout the source is left out and 1 A put into the output. A gnucap that is missing is a failure, never a skip.

gnucap runs without its gmin and its resistance in sources.
"""

from __future__ import annotations

import cmath
import math
from collections.abc import Sequence
from pathlib import Path

import pytest

from deckgen.circuit.ports import Ports
from deckgen.circuit.reader import read_flat
from deckgen.hand.predict import predict
from tests.outside.gnucap import simulate

R_S, R_L = 33e3, 47e3
CARD = "(LEVEL=1 VTO={}0.9 KP=90u GAMMA=0.4 PHI=0.7 LAMBDA=0.03 TOX=20n CGSO=0.2n CGDO=0.2n)"
LOAD = [f"rs in 0 {R_S}", f"rl out 0 {R_L}", "vdd vdd 0 9"]
DECKS = {
    "common gate": [
        "cin in s 10u", "rss s 0 2.7k", "r1 vdd g 680k", "r2 g 0 330k", "cg g 0 1u", "rd vdd d 8.2k",
        "cout d out 1u", "m1 d g s 0 nm w=80u l=2u", f".model nm nmos {CARD.format('')}",
    ],
    "drain-to-gate resistor": [
        "cin in g 1u", "rf d g 330k", "rd d 0 6.8k", "cout d out 1u", "cl out 0 47p",
        "m1 d g vdd vdd pm w=40u l=2u",
        f".model pm pmos {CARD.format('-')}",
    ],
}  # fmt: skip
SOURCES = {"into": ("iin 0 in ac 1", 1.0), "out of": ("iin in 0 ac 1", -1.0)}
FREQUENCIES = (100.0, 1e4, 1e6)
RELATIVE = 5e-8  # measured: at most 2e-8


def signals(cards: Sequence[str], node: str, folder: Path) -> dict[float, complex]:
    """The signal of a node at each frequency, as gnucap has it."""
    probe = f"v({node})"
    netlist = "\n".join(["t", *cards])
    printed = simulate(netlist, folder, point=[probe], phasors=[probe], frequencies=FREQUENCIES)
    return {frequency: found[probe] for frequency, found in printed.phasors.items()}


@pytest.mark.parametrize("way", SOURCES)
@pytest.mark.parametrize("name", DECKS)
def test_a_stage_driven_by_a_current_is_gnucaps(name: str, way: str, tmp_path: Path) -> None:
    source, sign = SOURCES[way]
    cards = [*LOAD, *DECKS[name]]
    out = signals([source, *cards], "out", tmp_path)
    at_input = signals([source, *cards], "in", tmp_path)
    driven = signals(["itest 0 out ac 1", *cards], "out", tmp_path)
    assert sorted(out) == pytest.approx(list(FREQUENCIES))
    circuit = read_flat("\n".join(["t", source, *cards, ""]))
    for frequency in out:
        found = predict(circuit, Ports("iin", "out", "rs", "rl"), assumptions=(), frequency=frequency)
        value = {v.name: v.value for v in found.values}
        signal = dict(found.node_signals)["out"]
        assert signal == pytest.approx(out[frequency], rel=RELATIVE), frequency
        assert value["Rm.phase"] == pytest.approx(math.degrees(cmath.phase(signal)), abs=1e-6)
        r_in = 1.0 / ((sign / at_input[frequency]).real - 1.0 / R_S)
        assert value["Rin"] == pytest.approx(r_in, rel=RELATIVE), frequency
        r_out = 1.0 / ((1.0 / driven[frequency]).real - 1.0 / R_L)
        assert value["Rout"] == pytest.approx(r_out, rel=RELATIVE), frequency
        if value["Avi"] is not None:
            assert abs(value["Avi"]) == pytest.approx(abs(out[frequency] / at_input[frequency]), rel=RELATIVE)
    middle = predict(circuit, Ports("iin", "out", "rs", "rl"), assumptions=(), frequency=1e4)
    rm = middle.value("Rm")
    assert rm is not None
    assert rm.value == pytest.approx(math.copysign(abs(out[1e4]), out[1e4].real), rel=RELATIVE)
    assert math.copysign(1.0, rm.value) == sign * (1.0 if name == "common gate" else -1.0)
