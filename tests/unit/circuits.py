"""Circuits for the tests of the hand analysis: stages drawn in code, and the values they are built from."""

from __future__ import annotations

from dataclasses import dataclass, replace

from deckgen.circuit.model import (
    GROUND,
    Capacitor,
    Circuit,
    Element,
    ModelCard,
    Mosfet,
    Resistor,
    VoltageSource,
)
from deckgen.circuit.ports import Ports


def card(kind: str = "nmos", name: str = "nm", **parameters: float) -> ModelCard:
    """A level-1 card; ``lam`` stands for LAMBDA."""
    named = {{"lam": "lambda"}.get(key, key): value for key, value in parameters.items()}
    return ModelCard(name, "nmos" if kind == "nmos" else "pmos", tuple(named.items()))


@dataclass(frozen=True)
class Values:
    """A single-transistor stage; ``sign`` -1 draws it with a p-channel device that hangs from the supply.

    None leaves a part out. ``follower`` takes the output from the source, the drain at the far rail.
    Voltages of the model are in n-channel signs.
    """

    sign: int = 1
    follower: bool = False
    vdd: float = 12.0
    r1: float = 1.2e6
    r2: float = 300e3
    rd: float = 10e3
    rs: float | None = 2e3
    cs: float | None = 10e-6
    rsig: float | None = 1e3
    cin: float = 1e-6
    cout: float | None = 1e-6
    rl: float | None = 47e3
    cl: float | None = 100e-12
    bulk_at_source: bool = False
    vto: float = 0.8
    kp: float = 100e-6
    lam: float = 0.01
    gamma: float = 0.4
    phi: float = 0.7
    tox: float = 20e-9
    overlap: float = 0.2e-9
    w: float = 100e-6
    l: float = 2e-6
    m: float = 1.0


def ports_of(v: Values) -> Ports:
    """Ports with all resistors declared that the stage has."""
    loaded = v.rl is not None and v.cout is not None
    return Ports("vsig", "out", None if v.rsig is None else "rsig", "rl" if loaded else None)


def stage(v: Values) -> Circuit:
    """The circuit of the values: gate divider, source and drain resistor, coupled source and load."""
    coupled = v.cout is not None
    tap = "out" if not coupled else ("s" if v.follower else "d")
    near, far = (GROUND, "vdd") if v.sign > 0 else ("vdd", GROUND)
    source = near if v.rs is None else (tap if v.follower else "s")
    drain = far if v.follower else tap
    bulk = source if v.bulk_at_source else near
    parts: list[Element | None] = [
        VoltageSource("vdd", ("vdd", GROUND), v.vdd),
        VoltageSource("vsig", ("sig", GROUND), 0.0, 1 + 0j),
        None if v.rsig is None else Resistor("rsig", ("sig", "in"), v.rsig),
        Capacitor("cin", ("sig" if v.rsig is None else "in", "g"), v.cin),
        Resistor("r1", (far, "g"), v.r1),
        Resistor("r2", ("g", near), v.r2),
        Mosfet("m1", (drain, "g", source, bulk), "nm", v.w, v.l, v.m),
        None if v.follower else Resistor("rd", (far, drain), v.rd),
        None if v.rs is None else Resistor("rs", (source, near), v.rs),
        None if v.cs is None or v.rs is None or v.follower else Capacitor("cs", ("s", near), v.cs),
        None if v.cout is None else Capacitor("cout", (tap, "out"), v.cout),
        None if v.rl is None or not coupled else Resistor("rl", ("out", GROUND), v.rl),
        None if v.cl is None else Capacitor("cl", ("out", GROUND), v.cl),
    ]
    model = card(
        "nmos" if v.sign > 0 else "pmos",
        vto=v.sign * v.vto, kp=v.kp, lam=v.lam, gamma=v.gamma, phi=v.phi,
        tox=v.tox, cgso=v.overlap, cgdo=v.overlap, level=1.0,
    )  # fmt: skip
    return Circuit("stage", tuple(part for part in parts if part is not None), (model,))


def with_split_resistor(circuit: Circuit, name: str) -> Circuit:
    """The same circuit with one resistor drawn as two halves in series: nothing that counts has changed."""
    elements: list[Element] = []
    for element in circuit.elements:
        if element.name == name and isinstance(element, Resistor):
            first, second = element.nodes
            elements.append(Resistor(f"{name}_a", (first, "half"), element.value / 2))
            elements.append(Resistor(f"{name}_b", ("half", second), element.value / 2))
        else:
            elements.append(element)
    return replace(circuit, elements=tuple(elements))
