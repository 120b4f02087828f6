"""Random networks around one transistor: every role, every bias net, both polarities, all regions.

Voltages are drawn as for an n-channel device above its lower rail; a p-channel device hangs the other way
round from the upper one. At ``MID_BAND`` every coupling capacitor is a short and every load capacitor open.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field, replace
from random import Random
from typing import Literal

from deckgen.circuit.model import (
    GROUND,
    Capacitor,
    Cccs,
    Ccvs,
    Circuit,
    CurrentSource,
    Element,
    Inductor,
    Mosfet,
    Resistor,
    Vccs,
    Vcvs,
    VoltageSource,
)
from deckgen.circuit.ports import Ports
from deckgen.circuit.region import Region
from deckgen.hand.roles import Role
from tests.unit.circuits import card

MID_BAND = 1e3
"""Frequency [Hz] at which these networks are in mid-band."""

Wanted = Literal["saturation", "triode", "cut-off"]

DEVICE = frozenset(f"{kind}(M1)" for kind in ("ID", "VGS", "VDS", "VTH", "VOV", "gm", "gds", "gmb"))
GAIN = frozenset({"Av", "Av.phase", "Rm", "Rm.phase", "Rin", "Rout"})


@dataclass(frozen=True)
class Network:
    """A circuit, and what is to be expected of it.

    ``role`` holds where the device is not cut off, ``quiet`` says that in triode it is a resistor instead;
    ``closed`` are the quantities whose hand values are closed forms wherever they exist.
    """

    what: str
    circuit: Circuit
    ports: Ports
    role: Role
    quiet: bool = False
    closed: frozenset[str] = DEVICE | GAIN

    def expected_role(self, region: Region) -> Role:
        """Its role in a region."""
        if region is Region.CUTOFF:
            return Role.CUT_OFF
        if region is Region.REVERSED:
            return Role.UNRECOGNISED
        return Role.RESISTIVE if self.quiet and region is Region.TRIODE else self.role


@dataclass
class Draft:
    """A network while it is drawn; voltages count from the rail at the source's side, n-channel sense."""

    rng: Random
    sign: int
    dual: bool
    span: float
    parts: list[Element] = field(default_factory=list)
    made: list[str] = field(default_factory=list)
    closed: frozenset[str] = DEVICE | GAIN
    input: str = "vsig"

    @property
    def near(self) -> str:
        """Rail at the source's side."""
        return "vdd" if self.sign < 0 else "vss" if self.dual else GROUND

    @property
    def far(self) -> str:
        """Rail at the drain's side."""
        return "vdd" if self.sign > 0 else "vss" if self.dual else GROUND

    @property
    def middle(self) -> float:
        """Ground over the near rail [V], n-channel sense."""
        return 0.5 * self.span if self.dual else 0.0 if self.sign > 0 else self.span

    def level(self, volts: float) -> float:
        """True voltage of a node that lies so many volts over the near rail."""
        return self.sign * (volts - self.middle)

    def flip(self, chance: float = 0.5) -> bool:
        """Yes or no."""
        return self.rng.random() < chance

    def decade(self, low: float, high: float) -> float:
        """A number between two others, even over its logarithm."""
        return float(low * (high / low) ** self.rng.random())

    def between(self, low: float, high: float) -> float:
        """A number between two others."""
        return self.rng.uniform(low, high)

    def r(self, name: str, first: str, second: str, value: float) -> None:
        """A resistor, now and then made of two in series or in parallel."""
        how = self.rng.randrange(8)
        if how == 0:
            share = self.between(0.1, 0.9)
            self.parts += [
                Resistor(f"{name}a", (first, f"{name}_n"), share * value),
                Resistor(f"{name}b", (f"{name}_n", second), (1 - share) * value),
            ]
        elif how == 1:
            more = self.between(1.1, 10.0)
            self.parts += [
                Resistor(f"{name}a", (first, second), more * value),
                Resistor(f"{name}b", (second, first), value * more / (more - 1.0)),
            ]
        else:
            self.one(name, first, second, value)

    def one(self, name: str, first: str, second: str, value: float) -> None:
        """A resistor as one part."""
        self.parts.append(Resistor(name, (first, second) if self.flip() else (second, first), value))

    def c(self, name: str, first: str, second: str, value: float | None = None) -> None:
        """A capacitor, by default one that is a short."""
        self.parts.append(Capacitor(name, (first, second), value or self.decade(1e-2, 1.0)))

    def v(self, name: str, node: str, volts: float) -> None:
        """A bias voltage."""
        self.parts.append(VoltageSource(name, (node, GROUND), self.level(volts)))

    def rail(self) -> str:
        """Any node at signal ground."""
        return self.rng.choice(["vdd", GROUND, *(["vss"] if self.dual else [])])


@dataclass(frozen=True)
class Aim:
    """Design values [V], [A]: where the device is meant to sit, at λ = 0 and γ = 0."""

    v_ov: float
    i_d: float
    v_s: float
    v_d: float
    vto: float

    @property
    def v_g(self) -> float:
        """Voltage of the gate over the near rail."""
        return self.v_s + self.vto + self.v_ov


def _aim(draft: Draft, *, v_s: float | None = None, vto: float | None = None) -> Aim:
    v_ov = draft.between(0.2, 0.8)
    low = draft.between(0.3, 0.25 * draft.span) if v_s is None else v_s
    v_d = low + v_ov + draft.between(0.1, 0.7) * (draft.span - low - v_ov)
    threshold = draft.between(0.3, 1.0) if vto is None else vto
    return Aim(v_ov, draft.decade(1e-4, 5e-3), low, v_d, threshold)


# --- the gate ---


def _divided_gate(draft: Draft, node: str, volts: float) -> None:
    r_g = draft.decade(1e4, 1e6)
    draft.r("r1", draft.far, node, r_g * draft.span / volts)
    draft.r("r2", node, draft.near, r_g * draft.span / (draft.span - volts))


def _fixed_gate(draft: Draft, node: str, volts: float) -> None:
    draft.v("vb", "b", volts)
    draft.r("rgb", "b", node, draft.decade(1e4, 1e6))


def _grounded_gate(draft: Draft, node: str, volts: float) -> None:
    draft.r("rgg", node, GROUND, draft.decade(1e4, 1e6))


GATES: dict[str, Callable[[Draft, str, float], None]] = {
    "divider": _divided_gate,
    "fixed": _fixed_gate,
    "dual": _grounded_gate,
}


def _feedback(draft: Draft, node: str, aim: Aim) -> None:
    """Drain to gate: plain, with a pull-down, or in two halves with a capacitor between them."""
    how = draft.rng.choice(["plain", "pulled down", "split"])
    draft.made.append(f"{how} feedback")
    r_f = draft.decade(1e5, 1e7)
    if how == "split":
        draft.one("rf1", "d", "f", r_f)
        draft.one("rf2", "f", node, draft.decade(1e5, 1e7))
        draft.c("cf", "f", draft.rail())
    else:
        draft.r("rf", "d", node, r_f)
    if how == "pulled down":
        draft.r("rgn", node, draft.near, r_f * draft.between(1.0, 5.0))


# --- the source ---

Source = Literal["grounded", "bypassed", "open", "partly"]


def _source_side(draft: Draft, aim: Aim, how: Source, *, forced: bool) -> str:
    """What hangs on the source; returns its node."""
    if how == "grounded":
        return draft.near
    if forced:
        towards = (draft.near, "i") if draft.sign < 0 else ("i", draft.near)
        node = "s" if how in ("open", "bypassed") else "t"
        draft.parts.append(CurrentSource("iss", tuple(node if n == "i" else n for n in towards), aim.i_d))  # type: ignore[arg-type]
        if how == "partly":
            draft.one("re", "s", "t", draft.between(0.1, 0.5) / aim.i_d)
            draft.c("cs", "t", draft.rail())
        elif how == "bypassed":
            draft.c("cs", "s", draft.rail())
        return "s"
    whole = aim.v_s / aim.i_d
    if how == "partly":
        share = draft.between(0.1, 0.9)
        draft.one("rs1", "s", "t", share * whole)
        draft.one("rs2", "t", draft.near, (1 - share) * whole)
        draft.c("cs", "t", draft.rail())
        return "s"
    draft.r("rs", "s", draft.near, whole)
    if how == "bypassed":
        draft.c("cs", "s", draft.rail())
    return "s"


# --- the signal ---


def _input(draft: Draft, node: str, *, bare: bool = True) -> str | None:
    """EMF or current, its resistance, perhaps another to ground, a capacitor; returns who is declared."""
    if draft.flip(0.15):
        draft.input = "isig"
        ends = ("in", GROUND) if draft.flip(0.3) else (GROUND, "in")
        draft.parts.append(CurrentSource("isig", ends, 0.0, 1 + 0j))
        draft.one("rsig", "in", GROUND, draft.decade(50.0, 1e5))
    else:
        ends = (GROUND, "sig") if draft.flip(0.1) else ("sig", GROUND)
        draft.parts.append(VoltageSource("vsig", ends, 0.0, 1 + 0j))
        if bare and draft.flip(0.2):
            draft.c("cin", "sig", node)
            return None
        draft.one("rsig", "sig", "in", draft.decade(50.0, 1e5))
    if draft.flip(0.2):
        draft.r("rt", "in", draft.rail(), draft.decade(1e3, 1e6))
    draft.c("cin", "in", node)
    return "rsig" if draft.flip(0.7) else None


def _series(draft: Draft, name: str, outer: str, inner: str, chance: float = 0.3) -> str:
    """Now and then a resistor between two nodes; returns the one to go on from."""
    if not draft.flip(chance):
        return inner
    draft.one(name, outer, inner, draft.decade(50.0, 5e3))
    return outer


def _output(draft: Draft, node: str) -> tuple[str, str | None]:
    """A series resistor, a coupling capacitor and a load, or less; returns the output and the load."""
    tap = _series(draft, "ro", "o", node)
    load = None
    if draft.flip(0.7):
        draft.c("cout", tap, "out")
        tap = "out"
        if draft.flip(0.8):
            draft.one("rl", "out", draft.rail(), draft.decade(1e3, 1e6))
            load = "rl" if draft.flip(0.6) else None
        else:
            draft.r("rpd", "out", GROUND, draft.decade(1e5, 1e7))
    if draft.flip():
        draft.c("cl", tap, GROUND, draft.decade(1e-12, 2e-11))
    return tap, load


def _finished(
    draft: Draft,
    aim: Aim,
    role: Role,
    nodes: tuple[str, str, str],
    ends: tuple[str | None, str, str | None],
    *,
    quiet: bool = False,
    vto: float | None = None,
) -> Network:
    """Transistor, supplies and model card added."""
    d, g, s = nodes
    declared, output, load = ends
    kp, length = draft.decade(2e-5, 2e-4), draft.decade(1e-6, 1e-5)
    k = 2.0 * aim.i_d / aim.v_ov**2
    bulk = s if draft.flip() else draft.near
    if draft.dual:
        half = 0.5 * draft.span
        supplies = [
            VoltageSource("vdd", ("vdd", GROUND), half),
            VoltageSource("vss", (GROUND, "vss"), half),
        ]
    else:
        supplies = [VoltageSource("vdd", ("vdd", GROUND), draft.span)]
    m = draft.rng.choice([1.0, 1.0, 4.0])
    device = Mosfet("m1", (d, g, s, bulk), "nm", k * length / kp / m, length, m)
    threshold = aim.vto if vto is None else vto
    model = card(
        "nmos" if draft.sign > 0 else "pmos",
        vto=draft.sign * threshold, kp=kp, lam=draft.rng.choice([0.0, 0.01, draft.between(0.001, 0.1)]),
        gamma=draft.rng.choice([0.0, draft.between(0.1, 0.8)]), phi=draft.between(0.5, 0.9),
        tox=draft.decade(5e-9, 5e-8), cgso=1e-10, cgdo=draft.rng.choice([0.0, 2e-10]), level=1.0,
    )  # fmt: skip
    elements = [*draft.parts, device, *supplies]
    draft.rng.shuffle(elements)
    return Network(
        ", ".join([*draft.made, "p" if draft.sign < 0 else "n"]),
        Circuit("single", tuple(elements), (model,)),
        Ports(draft.input, output, declared, load),
        role, quiet, draft.closed,
    )  # fmt: skip


def _draft(rng: Random, *, dual: bool = False, span: tuple[float, float] = (5.0, 20.0)) -> Draft:
    return Draft(rng, rng.choice([1, -1]), dual, rng.uniform(*span))


# --- stages whose gate is driven ---


def gate_driven(rng: Random, kind: Literal["common source", "degenerated", "follower"]) -> Network:
    """Common source, degenerated or not, and follower, on any bias net."""
    follower = kind == "follower"
    nets = ["divider", "fixed", "dual", "current", "depletion", "direct"]
    bias = rng.choice(nets if follower else [*nets, "feedback"])
    draft = _draft(rng, dual=bias == "dual" or (bias in ("current", "depletion") and rng.random() < 0.3))
    wanted: Wanted = rng.choice(["saturation", "saturation", "triode", "cut-off"])
    ways: dict[str, list[Source]] = {
        "common source": ["grounded", "bypassed"],
        "degenerated": ["open", "partly"],
        "follower": ["open"],
    }
    how = rng.choice(ways[kind])
    if how == "grounded" and bias in ("current", "dual", "depletion"):
        how = "bypassed"
    draft.made += [kind, bias, how]
    aim = _gate_aim(draft, bias, grounded=how == "grounded")
    if kind == "degenerated" and bias == "current":
        how = "partly"
    source = _source_side(draft, aim, how, forced=bias == "current")
    drain = draft.far
    if not follower or draft.flip(0.4):
        drain = "d"
        larger = draft.between(2.0, 10.0) if wanted == "triode" else 1.0
        draft.r("rd", draft.far, "d", larger * (draft.span - aim.v_d) / aim.i_d)
        if follower and draft.flip(0.3):
            draft.c("cd", "d", draft.rail())
    declared = _gate_side(draft, bias, aim)
    output, load = _output(draft, source if follower else drain)
    role = {
        "common source": Role.COMMON_SOURCE,
        "degenerated": Role.COMMON_SOURCE_DEGENERATED,
        "follower": Role.FOLLOWER,
    }
    can_be_off = bias not in ("current", "feedback")
    off = aim.v_g + draft.between(0.1, 0.5) if wanted == "cut-off" and can_be_off else None
    return _finished(draft, aim, role[kind], (drain, "g", source), (declared, output, load), vto=off)


def _gate_aim(draft: Draft, bias: str, *, grounded: bool) -> Aim:
    """Design values that a bias net can give."""
    if grounded:
        return _aim(draft, v_s=0.0)
    if bias == "dual" or (bias == "current" and draft.dual):
        vto = draft.between(0.3, 1.0)
        aim = _aim(draft, v_s=0.4 * draft.span, vto=vto)
        return Aim(aim.v_ov, aim.i_d, draft.middle - vto - aim.v_ov, aim.v_d, vto)
    if bias == "depletion":
        aim = _aim(draft)
        return Aim(aim.v_ov, aim.i_d, aim.v_s, aim.v_d, -aim.v_s - aim.v_ov)
    return _aim(draft)


def _gate_side(draft: Draft, bias: str, aim: Aim) -> str | None:
    """Bias and input at the gate, perhaps with a stopper in front of it."""
    if bias == "direct":
        draft.parts.append(VoltageSource("vsig", ("sig", GROUND), draft.level(aim.v_g), 1 + 0j))
        if draft.flip():
            draft.one("rsig", "sig", "g", draft.decade(50.0, 1e6))
            return "rsig" if draft.flip() else None
        draft.one("rbig", "sig", "g", draft.decade(1e5, 1e6))
        return None
    inner = _series(draft, "rstop", "gb", "g")
    at = draft.rng.choice([inner, "g"])
    if bias == "feedback":
        _feedback(draft, "g", aim)
    elif bias in GATES:
        GATES[bias](draft, at, aim.v_g)
    elif bias == "depletion":
        draft.r("rgn", at, draft.near, draft.decade(1e4, 1e6))
    elif draft.dual:
        _grounded_gate(draft, at, aim.v_g)
    else:
        GATES[draft.rng.choice(["divider", "fixed"])](draft, at, aim.v_g)
    return _input(draft, inner)


# --- stages whose gate is quiet ---


def common_gate(rng: Random) -> Network:
    """Signal into the source, out of the drain; the gate at a rail, bypassed, or behind a resistance."""
    bias = rng.choice(["divider", "fixed", "dual", "current", "depletion", "feedback", "direct"])
    draft = _draft(rng, dual=bias == "dual" or (bias == "depletion" and rng.random() < 0.3))
    draft.made += ["common gate", bias]
    aim = _gate_aim(draft, bias, grounded=False)
    gate = "g"
    if bias == "feedback":
        _feedback(draft, "g", aim)
    elif bias == "depletion":
        gate = draft.near
    elif bias == "dual":
        gate = GROUND if draft.flip() else "g"
        if gate == "g":
            _grounded_gate(draft, "g", aim.v_g)
    else:
        GATES[draft.rng.choice(["divider", "fixed"])](draft, "g", aim.v_g)
    if gate == "g" and (bias == "feedback" or draft.flip(0.7)):
        draft.c("cg", "g", draft.rail())
    triode = draft.between(2.0, 10.0) if draft.flip(0.3) else 1.0
    draft.r("rd", draft.far, "d", triode * (draft.span - aim.v_d) / aim.i_d)
    if bias == "direct":
        draft.parts.append(VoltageSource("vsig", ("sig", GROUND), draft.level(aim.v_s), 1 + 0j))
        draft.one("rsig", "sig", "s", draft.decade(10.0, 100.0))
        declared = "rsig" if draft.flip() else None
    else:
        _source_side(draft, aim, "open", forced=bias == "current")
        inner = _series(draft, "rin", "si", "s")
        declared = _input(draft, inner)
    output, load = _output(draft, "d")
    return _finished(draft, aim, Role.COMMON_GATE, ("d", gate, "s"), (declared, output, load), quiet=True)


def diode(rng: Random) -> Network:
    """Gate and drain one node, at the signal or at a rail."""
    draft = _draft(rng)
    at_rail = draft.flip(0.4)
    draft.made += ["diode", "at the rail" if at_rail else "at the signal"]
    how: Source = "open" if at_rail else rng.choice(["grounded", "bypassed", "open", "partly"])
    aim = _aim(draft, v_s=0.0 if how == "grounded" else None)
    forced = how != "grounded" and draft.flip(0.3)
    source = _source_side(draft, aim, how, forced=forced)
    node = draft.far
    if not at_rail:
        node = "d"
        draft.r("rd", draft.far, "d", max(draft.span - aim.v_g, 0.5) / aim.i_d)
    signal = source if at_rail else node
    declared = _input(draft, _series(draft, "rin", "si", signal), bare=False)
    output, load = _output(draft, signal)
    if forced and not at_rail and how == "open":
        draft.closed -= GAIN  # its source hangs in the air
    return _finished(draft, aim, Role.DIODE_CONNECTED, (node, node, source), (declared, output, load))


def channel(rng: Random) -> Network:
    """The channel in triode, its gate at a fixed voltage: across the signal's way, or in it either way."""
    kind = rng.choice(["shunt", "shunt with source resistor", "drain to source", "source to drain"])
    draft = _draft(rng)
    draft.made.append(f"channel, {kind}")
    aim = Aim(draft.between(1.0, 3.0), draft.decade(1e-4, 1e-2), 0.0, 0.0, draft.between(0.3, 1.0))
    gate = "g"
    _fixed_gate(draft, "g", aim.v_g + draft.between(0.5, 1.0))
    if draft.flip():
        draft.c("cg", "g", draft.rail())
    level = draft.level(draft.between(0.0, 0.1)) if draft.flip() else draft.level(0.0)
    draft.parts.append(VoltageSource("vsig", ("sig", GROUND), level, 1 + 0j))
    draft.one("rsig", "sig", "a", draft.decade(50.0, 1e4))
    declared = "rsig" if draft.flip() else None
    if kind.startswith("shunt"):
        source = draft.near
        if "resistor" in kind:
            source = "s"
            draft.r("rs", "s", draft.near, draft.decade(10.0, 1e4))
        output, load = _output(draft, "a")
        return _finished(
            draft, aim, Role.RESISTIVE, ("a", gate, source), (declared, output, load), quiet=True
        )
    draft.r("rn", "z", draft.near, draft.decade(1e2, 1e6))
    output, load = _output(draft, "z")
    drain, source = ("a", "z") if kind == "drain to source" else ("z", "a")
    if kind == "source to drain" and level != draft.level(0.0):
        draft.closed = frozenset()  # current flows from source to drain
    return _finished(draft, aim, Role.RESISTIVE, (drain, gate, source), (declared, output, load), quiet=True)


def bootstrapped(rng: Random) -> Network:
    """Gate resistor to a tap of the source resistor; bypassed the tap is at signal ground."""
    draft = _draft(rng)
    aim = _aim(draft)
    share = draft.between(0.2, 0.8)
    vto = -share * aim.v_s - aim.v_ov
    aim = Aim(aim.v_ov, aim.i_d, aim.v_s, aim.v_d, vto)
    draft.one("rs1", "s", "t", share * aim.v_s / aim.i_d)
    draft.one("rs2", "t", draft.near, (1 - share) * aim.v_s / aim.i_d)
    draft.r("rg", "g", "t", draft.decade(1e4, 1e6))
    bypassed, follower = draft.flip(), draft.flip()
    draft.made += ["bootstrapped", "tap bypassed" if bypassed else "tap free"]
    if bypassed:
        draft.c("ct", "t", draft.rail())
    drain = draft.far if follower else "d"
    if not follower:
        draft.r("rd", draft.far, "d", (draft.span - aim.v_d) / aim.i_d)
    declared = _input(draft, "g")
    output, load = _output(draft, "s" if follower else "d")
    role = Role.FOLLOWER if follower else Role.COMMON_SOURCE_DEGENERATED
    if not bypassed:
        draft.closed -= GAIN
        role = Role.UNRECOGNISED
    return _finished(draft, aim, role, (drain, "g", "s"), (declared, output, load))


KINDS: dict[str, Callable[[Random], Network]] = {
    "common source": lambda rng: gate_driven(rng, "common source"),
    "degenerated": lambda rng: gate_driven(rng, "degenerated"),
    "follower": lambda rng: gate_driven(rng, "follower"),
    "common gate": common_gate,
    "diode": diode,
    "channel": channel,
    "bootstrapped": bootstrapped,
}
"""Makers of random networks."""


def network(kind: str, number: int) -> Network:
    """The network of a kind with that number: the same at every call."""
    return KINDS[kind](Random(f"{kind} {number}"))


# --- with something more in it ---


def spoiled(number: int) -> Network:
    """A network with one or two parts more, between any of its nodes: what is expected of it may not hold."""
    rng = Random(f"spoiled {number}")
    whole = network(rng.choice(list(KINDS)), number)
    nodes = (*whole.circuit.nodes, GROUND)
    more: list[Element] = []
    for place in range(rng.choice([1, 1, 2])):
        first, second, third, fourth = (rng.choice(nodes) for _ in range(4))
        size, gain = 10.0 ** rng.uniform(2.0, 6.0), rng.uniform(-2.0, 2.0)
        more.append(
            rng.choice(
                [
                    Resistor(f"rx{place}", (first, second), size),
                    Resistor(f"rx{place}", (first, second), size),
                    Resistor(f"rx{place}", (first, second), -size),
                    Capacitor(f"cx{place}", (first, second), rng.choice([1e-12, 1.0])),
                    Inductor(f"lx{place}", (first, second), rng.choice([1e-6, 1e3])),
                    CurrentSource(f"ix{place}", (first, second), 1e-5 * gain),
                    VoltageSource(f"vx{place}", (first, second), rng.choice([0.0, 0.1])),
                    Vcvs(f"ex{place}", (first, second, third, fourth), gain),
                    Vccs(f"gx{place}", (first, second, third, fourth), gain / size),
                    Cccs(f"fx{place}", (first, second), "vdd", gain),
                    Ccvs(f"hx{place}", (first, second), "vdd", gain * size),
                ]
            )
        )
    what = ", ".join([whole.what, *(f"{e.name} {' '.join(e.nodes)}" for e in more)])
    circuit = replace(whole.circuit, elements=(*whole.circuit.elements, *more))
    return replace(whole, what=what, circuit=circuit, closed=frozenset())
