"""Random stages of every role with closed forms, as circuits; most of them in the region they are meant for.

Drawn with n-channel signs between ``low`` (where the source belongs) and ``high``. For a p-channel device
the two are exchanged: ``low`` is the supply then, ``high`` ground.
"""

from __future__ import annotations

import math
import random
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field

from deckgen.circuit.model import (
    Capacitor,
    Circuit,
    CurrentSource,
    Element,
    ModelCard,
    Mosfet,
    Resistor,
    VoltageSource,
)
from deckgen.circuit.ports import Ports

COUPLING = 1.0
"""Coupling and bypass capacitors [F]: shorts at any frequency of interest, and long before 1 kHz."""

LOADING = 1e-12
"""Load capacitances [F]."""


@dataclass(frozen=True)
class Stage:
    """A circuit, its ports, what it is, and the terminals where the signal enters and leaves."""

    kind: str
    circuit: Circuit
    ports: Ports
    entry: str
    leave: str


@dataclass
class Draft:
    """A stage while it is drawn.

    ``v_ov``, ``v_s``, ``v_g``, ``v_d`` [V] and ``i_d`` [A] are what it is designed for; voltages count from
    ``low``, n-channel sign.
    """

    draw: random.Random
    elements: list[Element] = field(default_factory=list)
    terminals: dict[str, str] = field(default_factory=dict)
    source_resistance: str | None = None
    load: str | None = None
    output: str = ""

    def __post_init__(self) -> None:
        self.n = self.draw.random() < 0.5
        self.v_dd = self.draw.uniform(5.0, 25.0)
        self.vto, self.k = self.draw.uniform(0.4, 1.2), self.spread(1e-4, 1e-2)
        self.gamma, self.phi = (
            self.draw.choice([0.0, self.draw.uniform(0.1, 0.8)]),
            self.draw.uniform(0.5, 0.8),
        )
        self.lam = self.draw.choice([0.0, self.draw.uniform(0.001, 0.05)])
        self.bulk_at_source = self.draw.random() < 0.3
        self.add(VoltageSource("vdd", ("vdd", "0"), self.v_dd))

    def spread(self, low: float, high: float) -> float:
        return math.exp(self.draw.uniform(math.log(low), math.log(high)))

    def maybe(self, share: float = 0.5) -> bool:
        return self.draw.random() < share

    def add(self, element: Element) -> None:
        self.elements.append(element)

    def node(self, name: str) -> str:
        return {"low": "0" if self.n else "vdd", "high": "vdd" if self.n else "0"}.get(name, name)

    def resistor(self, name: str, first: str, second: str, value: float) -> None:
        self.add(Resistor(name, (self.node(first), self.node(second)), value))

    def r(self, name: str, first: str, second: str, value: float) -> None:
        """A resistor, or now and then two that come to the same."""
        share, form = self.draw.uniform(0.1, 0.9), self.draw.random()
        if form < 0.1:
            self.resistor(f"{name}a", first, f"{name}m", share * value)
            self.resistor(f"{name}b", f"{name}m", second, (1.0 - share) * value)
        elif form < 0.2:
            self.resistor(f"{name}a", first, second, value / share)
            self.resistor(f"{name}b", first, second, value / (1.0 - share))
        else:
            self.resistor(name, first, second, value)

    def c(self, name: str, first: str, second: str, value: float = COUPLING) -> None:
        self.add(Capacitor(name, (self.node(first), self.node(second)), value))

    def held(self, name: str, node: str, volts: float) -> None:
        """A source that holds a node above ``low``."""
        self.add(VoltageSource(name, (node, self.node("low")), volts if self.n else -volts))

    def point(self, *, v_s: float, share: float, triode: bool = False) -> None:
        """A Q-point with the source at ``v_s`` and VDS at a share of what there is (in triode: of VOV)."""
        self.v_s, self.v_ov = v_s, self.draw.uniform(0.2, 0.6) * min(1.0, self.v_dd / 8.0)
        v_sb = 0.0 if self.bulk_at_source else v_s
        vth = self.vto + self.gamma * (math.sqrt(self.phi + v_sb) - math.sqrt(self.phi))
        self.v_g = v_s + vth + self.v_ov
        room = self.v_ov if triode else self.v_dd - v_s - self.v_ov
        v_ds = share * room + (0.0 if triode else self.v_ov)
        acting = min(v_ds, self.v_ov)
        self.v_d, self.i_d = v_s + v_ds, self.k * acting * (self.v_ov - 0.5 * acting)

    def source(self, *, bypass: bool | None = None) -> None:
        """What holds the source at ``v_s``: nothing but ``low``, or a resistor, bypassed at will."""
        if self.v_s <= 0.0:
            self.terminals["source"] = "low"
            return
        self.terminals["source"] = "s"
        whole, tap = self.v_s / self.i_d, "s"
        if bypass is None and self.maybe(0.2):
            tap = "t"
            self.r("re", "s", tap, whole * 0.2)
            whole *= 0.8
        self.r("rs", tap, "low", whole)
        if tap == "t" or (self.maybe(0.4) if bypass is None else bypass):
            self.c("cs", tap, "low" if self.maybe() else "high")

    def drain(self, extra: float = 0.0) -> None:
        """A resistor from ``high`` that leaves ``v_d`` with ``extra`` current beside ID."""
        self.terminals["drain"] = "d"
        self.r("rd", "high", "d", (self.v_dd - self.v_d) / (self.i_d + extra))

    def divider(self) -> None:
        """A gate at ``v_g``, from both rails."""
        self.terminals["gate"] = "g"
        share, total = self.v_g / self.v_dd, self.spread(1e5, 1e7)
        self.r("r1", "high", "g", total * (1.0 - share))
        self.r("r2", "g", "low", total * share)

    def quiet_gate(self) -> None:
        """A gate without signal: bypassed or not, by a divider or a source of its own."""
        if self.v_g < 0.95 * self.v_dd and self.maybe():
            self.divider()
            if self.maybe():
                self.c("cg", "g", "low")
            return
        self.terminals["gate"] = "g"
        if self.maybe():
            self.held("vg", "g", self.v_g)
        else:
            self.held("vg", "bias", self.v_g)
            self.r("rg", "bias", "g", self.spread(1e3, 1e6))

    def way_in(self, node: str) -> None:
        """EMF, perhaps a source resistance, declared or not, a shunt, a coupling capacitor, a stopper."""
        start = "in"
        if self.maybe(0.8):
            start = "sig"
            self.resistor("rsig", "sig", "in", self.spread(50.0, 1e5))
            if self.maybe(0.8):
                self.source_resistance = "rsig"
            if self.maybe(0.3):
                self.r("rsh", "in", "0", self.spread(1e3, 1e6))
        self.add(VoltageSource("vsig", (start, "0"), 0.0, 1.0))
        stopper = self.maybe(0.3)
        self.c("cin", "in", "x" if stopper else node)
        if stopper:
            self.r("rx", "x", node, self.spread(10.0, 1e5))

    def driven_gate(self) -> None:
        """A divider behind a coupling capacitor, or an EMF that gives the bias as well."""
        if self.maybe(0.8):
            self.divider()
            self.way_in("g")
            return
        self.terminals["gate"] = "g"
        start = "g"
        if self.maybe():
            start, self.source_resistance = "sig", "rsig"
            self.resistor("rsig", "sig", "g", self.spread(50.0, 1e5))
        self.add(VoltageSource("vsig", (start, "0"), self.v_g if self.n else self.v_dd - self.v_g, 1.0))

    def way_out(self, node: str) -> None:
        """The output itself, or what lies behind a coupling capacitor, with a load, declared or not."""
        self.output = self.node(node)
        if self.maybe(0.7):
            self.output = "out"
            series = self.maybe(0.3)
            self.c("cout", node, "y" if series else "out")
            if series:
                self.r("ry", "y", "out", self.spread(10.0, 1e4))
            self.resistor("rl", "out", "0", self.spread(1e2, 1e6))
            if self.maybe(0.8):
                self.load = "rl"
        self.loading()

    def loading(self) -> None:
        """Load capacitances, at the output or anywhere."""
        if self.maybe(0.4):
            self.c("cl", self.output, "0", LOADING)
        nodes = sorted({node for element in self.elements for node in element.nodes} | {"0"})
        for number in range(self.draw.choice([0, 0, 1, 2])):
            first, second = self.draw.sample(nodes, 2)
            self.c(f"cl{number}", first, second, LOADING)

    def finished(self, kind: str, entry: str, leave: str) -> Stage:
        drain, gate, source = (self.node(self.terminals[name]) for name in ("drain", "gate", "source"))
        bulk = source if self.bulk_at_source else self.node("low")
        self.add(Mosfet("m1", (drain, gate, source, bulk), "dut", 1e-5, 1e-5))
        parameters = {
            "vto": self.vto if self.n else -self.vto, "kp": self.k, "lambda": self.lam, "gamma": self.gamma,
            "phi": self.phi, "tox": 2e-8, "cgso": 2e-10, "cgdo": 2e-10, "cgbo": 1e-10,
        }  # fmt: skip
        card = ModelCard("dut", "nmos" if self.n else "pmos", tuple(parameters.items()))
        ports = Ports("vsig", self.output, self.source_resistance, self.load)
        return Stage(kind, Circuit(kind, tuple(self.elements), (card,)), ports, entry, leave)


def common_source(d: Draft) -> Stage:
    d.point(v_s=d.draw.choice([0.0, d.draw.uniform(0.05, 0.3) * d.v_dd]), share=d.draw.uniform(0.1, 0.9))
    d.source()
    d.drain()
    d.driven_gate()
    d.way_out("d")
    return d.finished("common source", "gate", "drain")


def drain_feedback(d: Draft) -> Stage:
    """The gate from the drain, with or without a resistor that pulls it down."""
    d.point(v_s=d.draw.choice([0.0, d.draw.uniform(0.05, 0.2) * d.v_dd]), share=0.5)
    d.terminals["gate"], r_f, extra = "g", d.spread(1e5, 1e7), 0.0
    d.v_d = d.v_g
    if d.maybe():
        d.v_d = min(d.v_g * d.draw.uniform(1.1, 2.0), 0.5 * (d.v_g + d.v_dd))
        extra = (d.v_d - d.v_g) / r_f
        d.r("r2", "g", "low", d.v_g / extra)
    d.r("rf", "d", "g", r_f)
    d.source()
    d.drain(extra)
    d.way_in("g")
    d.way_out("d")
    return d.finished("drain feedback", "gate", "drain")


def follower(d: Draft) -> Stage:
    d.point(v_s=d.draw.uniform(0.1, 0.6) * d.v_dd, share=d.draw.uniform(0.5, 0.95))
    d.source(bypass=False)
    if d.maybe():
        d.drain()
        if d.maybe(0.3):
            d.c("cd", "d", "low")
    else:
        d.terminals["drain"] = "high"
    d.driven_gate()
    d.way_out("s")
    return d.finished("follower", "gate", "source")


def common_gate(d: Draft) -> Stage:
    d.point(v_s=d.draw.uniform(0.05, 0.4) * d.v_dd, share=d.draw.uniform(0.1, 0.9))
    if d.maybe(0.3):
        d.terminals["source"] = "s"
        ends = ("s", "low") if d.n else ("low", "s")
        d.add(CurrentSource("ib", (d.node(ends[0]), d.node(ends[1])), d.i_d))
    else:
        d.source(bypass=False)
    d.drain()
    d.quiet_gate()
    d.way_in("s")
    d.way_out("d")
    return d.finished("common gate", "source", "drain")


def diode(d: Draft) -> Stage:
    """Gate and drain at one node, fed from ``high``, the signal there."""
    d.point(v_s=d.draw.choice([0.0, d.draw.uniform(0.05, 0.3) * d.v_dd]), share=0.5)
    d.v_d = d.v_g
    d.source()
    d.drain()
    d.terminals["gate"] = "d"
    d.way_in("d")
    d.way_out("d")
    return d.finished("diode", "drain", "drain")


def hanging_diode(d: Draft) -> Stage:
    """Gate and drain at ``high``, the signal at the source."""
    d.point(v_s=0.0, share=0.5)
    d.terminals |= {"gate": "high", "drain": "high", "source": "s"}
    d.r("rs", "s", "low", (d.v_dd - d.vto - d.v_ov) / d.i_d)
    d.way_in("s")
    d.way_out("s")
    return d.finished("hanging diode", "source", "source")


def channel(entry: str, leave: str) -> Callable[[Draft], Stage]:
    """A transistor in triode, its gate quiet, between resistors at drain and source."""

    def drawn(d: Draft) -> Stage:
        beyond = {"drain", "source"} - {entry, leave}
        v_s = 0.0 if "source" in beyond and d.maybe() else d.draw.uniform(0.05, 0.6) * d.v_dd
        d.point(v_s=v_s, share=d.draw.uniform(0.05, 0.95), triode=True)
        d.source(bypass=None if "source" in beyond else False)
        if "drain" in beyond and d.maybe():
            d.terminals["drain"] = "supply"
            d.held("vlow", "supply", d.v_d)
        else:
            d.drain()
            if "drain" in beyond and d.maybe(0.3):
                d.c("cd", "d", "low")
        d.quiet_gate()
        d.way_in(entry[0])
        d.way_out(leave[0])
        return d.finished(f"channel, {entry} to {leave}", entry, leave)

    return drawn


KINDS: tuple[Callable[[Draft], Stage], ...] = (
    common_source,
    drain_feedback,
    follower,
    common_gate,
    diode,
    hanging_diode,
    channel("drain", "drain"),
    channel("source", "source"),
    channel("drain", "source"),
    channel("source", "drain"),
)


def stages(seed: int) -> Iterator[Stage]:
    """Endless random stages, every kind in turn."""
    draw = random.Random(seed)
    while True:
        for kind in KINDS:
            yield kind(Draft(draw))
