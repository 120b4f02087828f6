"""Starters of every topology with every set of parts that it takes."""

from __future__ import annotations

import dataclasses
import itertools
from collections.abc import Iterator

from deckgen.render.starter import starter_stage_file
from deckgen.stage.model import Part, Stage
from deckgen.stage.read import stage_from_text
from deckgen.stage.topology import Polarity, Topology, list_topologies, load_topology

POLARITIES: tuple[Polarity, ...] = ("n", "p")

# Values of parts that the starter does without.
_ADDED = {
    "common-source-current-bias": {"R1": 1e6, "R2": 1e6},
    "common-gate": {"ISS": 0.25e-3},
    "diode-connected": {"IB": 0.5e-3},
}

# A gate divider for another voltage, where there is no source resistor or only a small one.
_INSTEAD = {
    ("common-source", "n", "RS"): {"R2": 140e3},
    ("common-source", "p", "RS"): {"R1": 139e3},
    ("common-source-degenerated", "n", "RS2"): {"R2": 180e3},
    ("common-source-degenerated", "p", "RS2"): {"R1": 180e3},
}


def part_sets(topology: Topology) -> Iterator[tuple[str, ...]]:
    """All sets of parts that a stage of the topology can have, as its description says."""
    choices = [(True,) if spec.required else (True, False) for spec in topology.parts]
    for chosen in itertools.product(*choices):
        specs = [spec for spec, taken in zip(topology.parts, chosen, strict=True) if taken]
        names = tuple(spec.name for spec in specs)
        whole = all(set(spec.needs) <= set(names) for spec in specs)
        if whole and all(set(group) & set(names) for group in topology.one_of):
            yield names


def variants() -> Iterator[tuple[str, Polarity, tuple[str, ...]]]:
    """Each topology, polarity and set of parts."""
    for name in list_topologies():
        for polarity, parts in itertools.product(POLARITIES, part_sets(load_topology(name))):
            yield name, polarity, parts


def starter(name: str, polarity: Polarity) -> Stage:
    """The starter stage of a topology."""
    return stage_from_text(starter_stage_file(load_topology(name), polarity), file="starter.toml")


def variant(name: str, polarity: Polarity, parts: tuple[str, ...], *, bulk: str = "rail") -> Stage:
    """The starter with these parts and no others, and its bulk at the rail or at the source."""
    stage = starter(name, polarity)
    values = _ADDED.get(name, {}) | {part.name: part.value for part in stage.parts}
    for (topology, kind, missing), changed in _INSTEAD.items():
        if (topology, kind) == (name, polarity) and missing not in parts:
            values |= changed
    signal = stage.signal
    (m1,) = stage.transistors
    return dataclasses.replace(
        stage,
        parts=tuple(Part(part, values[part]) for part in parts),
        transistors=(dataclasses.replace(m1, bulk="source" if bulk == "source" else "rail"),),
        signal=dataclasses.replace(
            signal,
            source_resistance=signal.source_resistance if signal.source_resistance in parts else None,
            load=signal.load if signal.load in parts else None,
        ),
    )
