"""Worked examples as circuits: the data file, what a printed figure is, and the simulator's answer."""

from __future__ import annotations

import json
import math
import operator
import re
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cache
from pathlib import Path
from typing import Any

from deckgen.assumptions import assumptions_made
from deckgen.bench.measure import Measurement, measure
from deckgen.bench.plan import make_plan, sweep_around
from deckgen.circuit.model import Circuit
from deckgen.circuit.ports import Ports
from deckgen.circuit.reader import read_flat
from deckgen.errors import Outcome
from deckgen.hand import bandwidth
from deckgen.hand.analysis import analyse as nodal_analysis
from deckgen.hand.effects import effects_under
from deckgen.hand.predict import predict
from deckgen.hand.prediction import Prediction
from deckgen.pipeline import analyse
from deckgen.simulator import Simulator, run
from deckgen.stage.read import stage_from_text

DATA = json.loads((Path(__file__).parent / "data" / "worked_examples.json").read_text("utf-8"))
EXAMPLES: dict[str, dict[str, Any]] = {example["id"]: example for example in DATA["examples"]}
CIRCUITS = tuple(name for name, example in EXAMPLES.items() if "stage" in example or "deck" in example)

Figures = Mapping[str, float]


@dataclass(frozen=True)
class Circuitry:
    """An example as a circuit: its netlist, where a signal enters and leaves, its hand analysis."""

    netlist: str
    circuit: Circuit
    ports: Ports | None
    paper: Prediction

    @property
    def frequency(self) -> float | None:
        """Mid-band [Hz] of the paper set, where all other sets are taken too."""
        return None if self.paper.mid_band is None else self.paper.mid_band.frequency

    def predict(self, assumptions: tuple[str, ...]) -> Prediction:
        return predict(self.circuit, self.ports, assumptions=assumptions, frequency=self.frequency)

    def pole(self, capacitor: str) -> float:
        """1/(2π·R·C) [Hz] of one capacitor, nodal, with the others short or open as by hand."""
        path = nodal_analysis(self.circuit, self.ports, effects_under(self.paper.assumptions), None).signal
        assert path is not None
        constants = (
            *bandwidth.short_circuit_constants(path.small, path.treatments),
            *bandwidth.open_circuit_constants(path.small, path.treatments),
        )
        (tau,) = (one.tau for one in constants if one.name == capacitor)
        return 1.0 / (2.0 * math.pi * tau)


def figures(example: Mapping[str, Any]) -> Figures:
    """All figures that a circuit may need: given, printed where a design prints its parts, and chosen."""
    return {**example["printed"], **example["given"], **example.get("chosen", {})}


def parts(example: Mapping[str, Any]) -> str:
    """What an example's circuit is made of, as it stands in the data, with names for its figures."""
    if "deck" in example:
        return "\n".join(example["deck"])
    stage = example["stage"]
    model = (f"{key.lower()}={value}" for key, value in stage["model"].items())
    return "\n".join([*stage["parts"].values(), *model])


def toml(example: Mapping[str, Any]) -> str:
    """The stage file of an example that has one of our topologies."""
    stage, values = example["stage"], figures(example)

    def entries(table: Mapping[str, str]) -> str:
        return "\n".join(f'{key} = "{text.format_map(values)}"' for key, text in table.items())

    return f"""
format = 1
title = "{example["id"]}"
topology = "{stage["topology"]}"
[parts]
{entries(stage["parts"])}
[models.DUT]
polarity = "{stage["polarity"]}"
{entries(stage["model"])}
[transistors.M1]
model = "DUT"
W = "10u"
L = "10u"
"""


@cache
def circuitry(name: str) -> Circuitry:
    """Read an example the way its data asks for: as a stage file, or as netlist text."""
    example = EXAMPLES[name]
    if "stage" in example:
        analysis = analyse(stage_from_text(toml(example), file=f"{name}.toml"))
        return Circuitry(analysis.netlist, analysis.circuit, analysis.ports, analysis.prediction)
    lines = [line.format_map(figures(example)) for line in example["deck"]]
    netlist = "\n".join([f"* {name}", *lines, ".options reltol=1e-6 vntol=1e-9 abstol=1e-15", ".end", ""])
    circuit = read_flat(netlist, file=name)
    ports = None
    if example.get("signal", True):
        output = example.get("output", "d")
        ports = Ports("vsig", output, example.get("source_resistance"), example.get("load"))
    return Circuitry(netlist, circuit, ports, predict(circuit, ports, assumptions=assumptions_made("paper")))


def plain(found: Circuitry, prediction: Prediction, quantity: str) -> float:
    """A hand value, a ``step`` of the working, an ``exact`` band edge, or the ``pole`` of a capacitor."""
    kind, _, rest = quantity.partition(" ")
    if kind == "step":
        (value,) = (step.value for step in prediction.working if step.symbol == rest)
        return value
    if kind == "pole":
        return found.pole(rest.lower())
    if kind == "exact":
        assert prediction.mid_band is not None
        edge = {"fL": prediction.mid_band.exact_f_l, "fH": prediction.mid_band.exact_f_h}[rest]
        assert edge is not None
        return edge
    hand = prediction.value(quantity)
    assert hand is not None, quantity
    assert hand.value is not None, hand
    return hand.value


_OPERATION = {"+": operator.add, "-": operator.sub, "*": operator.mul, "/": operator.truediv}


def read(found: Circuitry, what: str) -> float:
    """A figure: hand values, their negatives (``-x``), magnitudes (``|x``), and numbers, put together.

    `` + ``, `` - ``, `` * ``, `` / `` with blanks around them are worked off from left to right, as on a
    pocket calculator. ``with`` at the end adds an assumption to the paper set.
    """
    what, _, extra = what.partition(" with ")
    prediction = found.paper if not extra else found.predict(assumptions_made("paper", add=[extra]))

    def term(text: str) -> float:
        if text.isdigit():
            return float(text)
        if text[0] in "-|":
            value = plain(found, prediction, text[1:])
            return -value if text[0] == "-" else abs(value)
        return plain(found, prediction, text)

    first, *rest = re.split(r" ([-+*/]) ", what)
    value = term(first)
    for operation, text in zip(rest[::2], rest[1::2], strict=True):
        value = _OPERATION[operation](value, term(text))
    return value


@cache
def simulated(name: str, simulator: Simulator, folder: Path) -> Measurement:
    """Run an example through bench and simulator."""
    found = circuitry(name)
    mid = found.paper.mid_band
    plan = make_plan(
        found.circuit,
        found.netlist,
        found.ports,
        frequency=found.frequency,
        sweep=None if mid is None else sweep_around(mid.exact_f_l, mid.exact_f_h),
    )
    execution = run(plan.job, simulator=simulator, folder=folder / re.sub(r"\W", "-", name))
    assert (execution.outcome, execution.meaning) == (Outcome.MEASURED, ""), execution.said
    return measure(found.circuit, found.ports, plan, execution.plots)
