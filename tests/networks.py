"""Random networks of 1 to 10 level-1 transistors with all kinds of linear parts, as netlist and circuit.

``network(seed)`` gives always the same network. Its transistors number 1 + (seed - 1) % 10, of both
polarities, with body effect and channel-length modulation. ``blocks`` are stages, mirrors, active loads and
pairs in a chain from a coupled source to a load, some with feedback from the end to the start; ``mesh``
networks have resistors and transistors between nodes at random. Values are drawn so that stages carry
current; that every transistor saturates is not seen to, and some networks have several operating points.
"""

from __future__ import annotations

import math
import random
from collections.abc import Callable
from dataclasses import dataclass, field

from deckgen.circuit.model import Circuit
from deckgen.circuit.ports import Ports
from deckgen.circuit.reader import read_flat

MOST_TRANSISTORS = 10


@dataclass(frozen=True)
class Network:
    """A network: netlist text without analyses, the circuit that is read from it, its signal path."""

    seed: int
    kind: str
    text: str
    circuit: Circuit
    ports: Ports


def network(seed: int) -> Network:
    """The network of a seed; every fourth is a mesh."""
    draw = random.Random(seed)
    kind = "mesh" if seed % 4 == 0 else "blocks"
    sheet = _Sheet(draw)
    count = 1 + (seed - 1) % MOST_TRANSISTORS
    output = _mesh(sheet, count) if kind == "mesh" else _blocks(sheet, count)
    sheet.c(output, "out", sheet.log(1e-7, 1e-5))
    sheet.r("out", "0", sheet.log(5e3, 1e5), name="rload")
    if draw.random() < 0.5:
        sheet.c("out", "0", sheet.log(1e-12, 1e-10))
    text = "\n".join([f"* network {seed}: {kind} of {count}", *sheet.lines, *sheet.cards, ""])
    ports = Ports("vsig", "out", "rsig", "rload")
    return Network(seed, kind, text, read_flat(text, file=f"network {seed}"), ports)


@dataclass
class _Sheet:
    """The cards drawn so far: supplies, models, and the source that drives node ``in``."""

    draw: random.Random
    lines: list[str] = field(default_factory=list)
    cards: list[str] = field(default_factory=list)
    numbers: dict[str, int] = field(default_factory=dict)
    supply: float = 0.0
    negative: str = "0"
    current: float = 0.0
    kp: dict[str, list[tuple[str, float, float]]] = field(default_factory=dict)

    def __post_init__(self) -> None:
        self.supply = self.draw.choice([1.8, 2.5, 3.3, 5.0, 9.0, 12.0, 15.0])
        self.current = self.log(1e-5, 2e-3)
        self.lines.append(f"vdd vdd 0 {self.supply}")
        if self.draw.random() < 0.2:
            self.negative = "vss"
            self.lines.append(f"vss vss 0 {-self.supply * self.draw.choice([0.5, 1.0]):.6g}")
        self.lines += ["vsig sig 0 dc 0 ac 1", f"rsig sig in {self.log(50.0, 1e4):.6g}"]
        scale = min(1.0, self.supply / 5.0)
        for kind, sign, low, high in (("nmos", 1, 5e-5, 3e-4), ("pmos", -1, 2e-5, 1e-4)):
            self.kp[kind] = []
            for name in (f"{kind[0]}a", f"{kind[0]}b"):
                vto, kp = scale * self.draw.uniform(0.45, 1.0), self.log(low, high)
                self.kp[kind].append((name, kp, vto))
                values = {
                    "vto": sign * vto, "kp": kp, "lambda": self.log(3e-3, 0.1),
                    "gamma": self.draw.choice([0.0, self.draw.uniform(0.1, 0.7)]),
                    "phi": self.draw.uniform(0.55, 0.85), "tox": self.log(8e-9, 5e-8), "cgso": 2e-10,
                    "cgdo": 2e-10,
                }  # fmt: skip
                told = " ".join(f"{key}={value:.6g}" for key, value in values.items())
                self.cards.append(f".model {name} {kind} level=1 {told}")

    def log(self, low: float, high: float) -> float:
        return math.exp(self.draw.uniform(math.log(low), math.log(high)))

    @property
    def span(self) -> float:
        """Voltage between the rails [V]."""
        return self.supply if self.negative == "0" else 1.75 * self.supply

    def name(self, letter: str) -> str:
        self.numbers[letter] = self.numbers.get(letter, 0) + 1
        return f"{letter}{self.numbers[letter]}"

    def node(self) -> str:
        return self.name("n")

    def put(self, letter: str, *words: str, name: str | None = None) -> str:
        name = name or self.name(letter)
        self.lines.append(" ".join([name, *words]))
        return name

    def r(self, a: str, b: str, value: float, name: str | None = None) -> None:
        self.put("r", a, b, f"{value:.6g}", name=name)

    def c(self, a: str, b: str, value: float) -> None:
        self.put("c", a, b, f"{value:.6g}")

    def choke(self, a: str, b: str) -> None:
        self.put("l", a, b, f"{self.log(1e-6, 1e-2):.6g}")

    def load(self, share: float = 0.4) -> float:
        """A resistor that drops a share of the supply at the current of the network."""
        return share * self.span / self.current * self.log(0.6, 1.5)

    def m(
        self,
        kind: str,
        d: str,
        g: str,
        s: str,
        *,
        ratio: float = 1.0,
        model: int | None = None,
        rail_bulk: bool = False,
    ) -> None:
        """A transistor sized for the current of the network; its bulk at the rail, or at its source."""
        name, kp, _ = self.kp[kind][self.draw.randint(0, 1) if model is None else model]
        length = self.draw.choice([1e-6, 2e-6, 5e-6])
        v_ov = self.draw.uniform(0.12, 0.5) if model is None else 0.25
        width = 2.0 * self.current * ratio / (kp * v_ov**2) * length
        rail = self.negative if kind == "nmos" else "vdd"
        bulk = rail if rail_bulk or self.draw.random() < 0.8 else s
        many = self.draw.choice(["", "", " m=2"]) if model is None else ""
        self.put("m", d, g, s, bulk, name, f"w={width:.6g} l={length:.6g}{many}")

    def gate_voltage(self, kind: str, above: float = 0.0) -> str:
        """A node from a divider, at which a transistor of this kind conducts with its source at the rail."""
        threshold = max(vto for _, _, vto in self.kp[kind]) + self.draw.uniform(0.15, 0.5) + above
        share = min(max(threshold / self.span, 0.1), 0.9)
        total, node = self.log(2e4, 2e6), self.node()
        near, far = (self.negative, "vdd") if kind == "nmos" else ("vdd", self.negative)
        self.r(far, node, total * (1.0 - share))
        self.r(node, near, total * share)
        return node

    def kind(self) -> str:
        return self.draw.choice(["nmos", "pmos"])

    def rails(self, kind: str) -> tuple[str, str]:
        """Where the source of a transistor of this kind goes, and where its load."""
        return (self.negative, "vdd") if kind == "nmos" else ("vdd", self.negative)


def _coupled(sheet: _Sheet, kind: str, node: str) -> str:
    """A biased gate that the signal of a node reaches through a capacitor."""
    gate = sheet.gate_voltage(kind)
    sheet.c(node, gate, sheet.log(1e-8, 1e-5))
    return gate


def _common_source(sheet: _Sheet, node: str) -> str:
    kind, out = sheet.kind(), sheet.node()
    near, far = sheet.rails(kind)
    gate, source = _coupled(sheet, kind, node), near
    if sheet.draw.random() < 0.6:
        source = sheet.node()
        sheet.r(source, near, sheet.load(0.08))
        if sheet.draw.random() < 0.6:
            sheet.c(source, near, sheet.log(1e-6, 1e-4))
    top = far
    if sheet.draw.random() < 0.2:
        top = sheet.node()
        sheet.choke(far, top)
    sheet.r(top, out, sheet.load())
    sheet.m(kind, out, gate, source)
    return out


def _follower(sheet: _Sheet, node: str) -> str:
    kind, out = sheet.kind(), sheet.node()
    near, far = sheet.rails(kind)
    sheet.m(kind, far, node if node != "in" else _coupled(sheet, kind, node), out)
    sheet.r(out, near, sheet.load(0.3))
    return out


def _common_gate(sheet: _Sheet, node: str) -> str:
    kind, out, source = sheet.kind(), sheet.node(), sheet.node()
    near, far = sheet.rails(kind)
    sheet.c(node, source, sheet.log(1e-7, 1e-5))
    sheet.r(source, near, sheet.load(0.1))
    gate = sheet.gate_voltage(kind, above=0.1 * sheet.span)
    sheet.c(gate, near, 1e-6)
    sheet.m(kind, out, gate, source)
    sheet.r(far, out, sheet.load(0.3))
    return out


def _feedback_biased(sheet: _Sheet, node: str) -> str:
    """A common source whose gate hangs on its drain through a resistor."""
    kind, out, gate = sheet.kind(), sheet.node(), sheet.node()
    near, far = sheet.rails(kind)
    sheet.c(node, gate, sheet.log(1e-8, 1e-5))
    sheet.r(gate, out, sheet.log(1e5, 1e6))
    sheet.r(far, out, sheet.load())
    sheet.m(kind, out, gate, near)
    return out


def _cascode(sheet: _Sheet, node: str) -> str:
    kind, out, middle = sheet.kind(), sheet.node(), sheet.node()
    near, far = sheet.rails(kind)
    sheet.m(kind, middle, _coupled(sheet, kind, node), near)
    sheet.m(kind, out, sheet.gate_voltage(kind, above=0.15 * sheet.span), middle)
    sheet.r(far, out, sheet.load(0.3))
    return out


def _diode_loaded(sheet: _Sheet, node: str) -> str:
    kind, out = sheet.kind(), sheet.node()
    other = "pmos" if kind == "nmos" else "nmos"
    near, far = sheet.rails(kind)
    sheet.m(kind, out, _coupled(sheet, kind, node), near)
    sheet.m(other, out, out, far)
    return out


def _inverter(sheet: _Sheet, node: str) -> str:
    """Complementary pair, biased by a resistor from output to input."""
    out, gate = sheet.node(), sheet.node()
    sheet.c(node, gate, sheet.log(1e-8, 1e-5))
    sheet.m("nmos", out, gate, sheet.negative)
    sheet.m("pmos", out, gate, "vdd")
    sheet.r(out, gate, sheet.log(1e5, 1e6))
    return out


def _sourced(sheet: _Sheet, node: str) -> str:
    """A follower or common source on a current source: a second transistor at a fixed gate voltage."""
    kind, out = sheet.kind(), sheet.node()
    near, far = sheet.rails(kind)
    sheet.m(kind, far, _coupled(sheet, kind, node), out)
    sheet.m(kind, out, sheet.gate_voltage(kind), near)
    return out


def _mirror_loaded(sheet: _Sheet, node: str) -> str:
    """Common source with the output of a mirror as its load."""
    kind, out, gate = sheet.kind(), sheet.node(), sheet.node()
    other = "pmos" if kind == "nmos" else "nmos"
    near, far = sheet.rails(kind)
    sheet.m(other, gate, gate, far, model=0)
    sheet.m(other, out, gate, far, ratio=sheet.draw.choice([1.0, 2.0]), model=0)
    sheet.r(gate, near, sheet.load(0.7))
    sheet.m(kind, out, _coupled(sheet, kind, node), near)
    return out


def _wilson(sheet: _Sheet, node: str) -> str:
    """A mirror of three transistors, its input current from a resistor that the signal reaches."""
    kind, a, b, out = sheet.kind(), sheet.node(), sheet.node(), sheet.node()
    near, far = sheet.rails(kind)
    sheet.m(kind, a, b, near, model=0)
    sheet.m(kind, b, b, near, model=0)
    sheet.m(kind, out, a, b, model=0)
    sheet.r(far, a, sheet.load(0.5))
    sheet.r(far, out, sheet.load(0.3))
    sheet.c(node, a, sheet.log(1e-9, 1e-6))
    return out


def _pair(sheet: _Sheet, node: str) -> str:
    """A differential pair: tail resistor or current source, resistors or a mirror as its load."""
    kind, tail, left, right = sheet.kind(), sheet.node(), sheet.node(), sheet.node()
    near, far = sheet.rails(kind)
    first = sheet.gate_voltage(kind, above=0.2 * sheet.span)
    sheet.c(node, first, 1e-6)
    second = sheet.gate_voltage(kind, above=0.2 * sheet.span)
    sheet.c(second, near, 1e-6)
    sheet.m(kind, left, first, tail, model=0)
    sheet.m(kind, right, second, tail, model=0)
    sheet.r(tail, near, sheet.load(0.15))
    sheet.r(far, left, sheet.load(0.3))
    sheet.r(far, right, sheet.load(0.3))
    return right


def _ota(sheet: _Sheet, node: str) -> str:
    """Pair with a mirror as load and a transistor as tail; the output fed back to the second gate."""
    kind, tail, left, out = sheet.kind(), sheet.node(), sheet.node(), sheet.node()
    other = "pmos" if kind == "nmos" else "nmos"
    near, far = sheet.rails(kind)
    first, second = sheet.gate_voltage(kind, above=0.25 * sheet.span), sheet.node()
    sheet.c(node, first, 1e-6)
    sheet.m(kind, left, first, tail, model=0)
    sheet.m(kind, out, second, tail, model=0)
    sheet.m(other, left, left, far, model=0)
    sheet.m(other, out, left, far, model=0)
    sheet.m(kind, tail, sheet.gate_voltage(kind), near, ratio=2.0)
    sheet.r(out, second, sheet.log(1e4, 1e6))
    sheet.c(second, near, 1e-6)
    return out


_Block = Callable[[_Sheet, str], str]
_BLOCKS: tuple[tuple[int, _Block], ...] = (
    (1, _common_source), (1, _follower), (1, _common_gate), (1, _feedback_biased), (2, _cascode),
    (2, _diode_loaded), (2, _inverter), (2, _sourced), (2, _pair), (3, _mirror_loaded), (3, _wilson),
    (5, _ota),
)  # fmt: skip


def _blocks(sheet: _Sheet, count: int) -> str:
    """A chain of blocks with that many transistors, controlled sources between some of them."""
    node, left, first = "in", count, None
    while left:
        size, block = sheet.draw.choice([entry for entry in _BLOCKS if entry[0] <= left])
        node, left = block(sheet, node), left - size
        first = first or node
        if sheet.draw.random() < 0.25:
            node = sheet.draw.choice([_voltage_buffer, _transconductor, _current_copy])(sheet, node)
    if sheet.draw.random() < 0.3 and first != node:
        sheet.r(node, first or node, sheet.load(2.0))
    if sheet.draw.random() < 0.3:
        sheet.put("i", *sheet.draw.choice([("0", node), (node, "0")]), f"{0.03 * sheet.current:.6g}")
    return node


def _voltage_buffer(sheet: _Sheet, node: str) -> str:
    inner, out = sheet.node(), sheet.node()
    sheet.put("e", inner, "0", node, "0", f"{sheet.draw.uniform(0.2, 1.0):.4g}")
    sheet.r(inner, out, sheet.log(10.0, 1e4))
    return out


def _transconductor(sheet: _Sheet, node: str) -> str:
    """A current that follows a node, through a resistor."""
    out, load = sheet.node(), sheet.log(1e3, 1e5)
    sheet.put("g", "0", out, node, "0", f"{sheet.draw.uniform(0.2, 1.0) / load:.6g}")
    sheet.r(out, "0", load)
    return out


def _current_copy(sheet: _Sheet, node: str) -> str:
    """The current of a resistor at the node, measured by a source of 0 V, gives a current and a voltage."""
    probe, out = sheet.node(), sheet.node()
    sheet.r(node, probe, sheet.load(4.0))
    meter = sheet.put("v", probe, "0", "0")
    if sheet.draw.random() < 0.5:
        sheet.put("f", "0", out, meter, f"{sheet.draw.uniform(0.3, 2.0):.4g}")
        sheet.r(out, "0", sheet.load(1.5))
    else:
        inner = sheet.node()
        sheet.put("h", inner, "0", meter, f"{sheet.load(1.5):.6g}")
        sheet.r(inner, out, sheet.log(10.0, 1e3))
    return out


def _mesh(sheet: _Sheet, count: int) -> str:
    """Nodes with resistors between them and to the rails, transistors and a controlled source on any."""
    draw, rails = sheet.draw, ["vdd", sheet.negative]
    nodes = [sheet.node() for _ in range(max(2, count + draw.randint(-1, 2)))]
    for node in nodes:
        sheet.r(node, draw.choice(rails), sheet.load(draw.uniform(0.1, 2.0)))
        if draw.random() < 0.6:
            sheet.r(node, draw.choice([*rails, *nodes]), sheet.load(draw.uniform(0.1, 5.0)))
    for _ in range(count):
        kind = sheet.kind()
        near, _ = sheet.rails(kind)
        drain = draw.choice(nodes)
        source = draw.choice([near, near, *[node for node in nodes if node != drain]])
        gate = draw.choice([node for node in nodes if node != drain])
        # A channel that conducts backwards must not open the junction of a bulk at its source.
        sheet.m(kind, drain, gate, source, rail_bulk=True)
    node = draw.choice(nodes)
    sheet.c("in", nodes[0], 1e-6)
    if draw.random() < 0.4:
        node = draw.choice([_voltage_buffer, _transconductor, _current_copy])(sheet, node)
    if draw.random() < 0.3:
        inner = sheet.node()
        sheet.choke(node, inner)
        sheet.r(inner, sheet.negative, sheet.load(3.0))
    return node
