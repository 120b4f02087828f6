"""What one transistor sees of the signal at mid-band: the way in, the way out, and what is in between.

Every network of resistors is reduced to the nodes that matter: the input, the output, the terminals and
signal ground. The way in is ``EMF -- source resistance -- input -- series -- terminal`` with a shunt to
ground at input and terminal; the way out is the same turned round.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace

from deckgen.circuit.gain import input_port
from deckgen.circuit.model import (
    GROUND,
    Cccs,
    Ccvs,
    Circuit,
    CurrentSource,
    Inductor,
    Mosfet,
    Resistor,
    Vccs,
    Vcvs,
    VoltageSource,
)
from deckgen.circuit.ports import Ports
from deckgen.hand.network import Treatment
from deckgen.hand.reduce.dc import DRAIN, GATE, SOURCE
from deckgen.hand.reduce.mesh import Mesh, followed, mesh_of, reduced
from deckgen.hand.reduce.rails import Joined
from deckgen.hand.reduce.resistance import NO_RESISTANCE, Resistance, in_parallel, in_series, part

EMF = "(emf)"
"""Name of the joined node that a voltage source drives as input."""


@dataclass(frozen=True, slots=True)
class Way:
    """The way between an outer node (input or output) and a terminal.

    ``outer`` and ``inner`` go from either end to signal ground, ``series`` between them; None: not there,
    which for ``series`` means that both ends are one node (then all that goes to ground is ``inner``).
    """

    series: Resistance | None
    outer: Resistance | None
    inner: Resistance | None


@dataclass(frozen=True, slots=True)
class SignalNet:
    """Mid-band surroundings of the one transistor.

    ``entry`` and ``exit`` are the terminals at which the signal enters and leaves; ``to_ground`` the
    resistance from each other terminal, absent for one without; ``grounded`` the terminals at signal ground.
    """

    device: Mosfet
    entry: str
    exit: str
    way_in: Way
    way_out: Way
    source_resistance: Resistance | None
    load: Resistance | None
    to_ground: Mapping[str, Resistance]
    grounded: frozenset[str]
    feedback: Resistance | None
    tied: bool
    bulk_at_source: bool
    current_driven: bool
    sign: float
    """+1, or -1 where the source's own direction is against that of the input node."""

    @property
    def gate_is_quiet(self) -> bool:
        """Whether the gate, which is neither entry nor exit, is held at signal ground."""
        return GATE in self.grounded or GATE in self.to_ground

    def third(self, terminal: str) -> Resistance | None:
        """Resistance to signal ground of a terminal that is neither entry nor exit; None where none."""
        return NO_RESISTANCE if terminal in self.grounded else self.to_ground.get(terminal)

    @property
    def loaded(self) -> Resistance | None:
        """All that hangs on the exit terminal but the transistor, the declared load included."""
        way = self.way_out
        if way.series is None:
            return in_parallel(way.inner, self.load)
        beyond = in_parallel(way.outer, self.load)
        return in_parallel(way.inner, None if beyond is None else in_series(way.series, beyond))

    @property
    def driven_from(self) -> Resistance | None:
        """Resistance from the entry to ground with the input silent, the transistor left out.

        0 where the EMF itself holds the terminal; None where nothing does.
        """
        way = self.way_in
        if self.source_resistance is None and not self.current_driven:
            return NO_RESISTANCE if way.series is None else in_parallel(way.inner, way.series)
        outer = in_parallel(way.outer, self.source_resistance)
        if way.series is None:
            return in_parallel(way.inner, outer)
        return in_parallel(way.inner, None if outer is None else in_series(way.series, outer))


@dataclass(frozen=True, slots=True)
class SignalGraph:
    """Nodes joined at mid-band, and the resistors that are left between the joined nodes."""

    circuit: Circuit
    joined: Joined
    mesh: Mesh

    def of(self, node: str) -> str:
        """The joined node that a node belongs to."""
        return self.joined.of(node)

    def reduced(self, keep: Iterable[str]) -> Mesh | None:
        """The resistors reduced to some joined nodes."""
        return reduced(self.mesh, keep)


def signal_graph(
    circuit: Circuit,
    ports: Ports,
    treatments: Mapping[str, Treatment],
    *,
    silent: bool = False,
    without: frozenset[str] = frozenset(),
) -> SignalGraph | None:
    """Join nodes over shorts; None where the network is more than resistors and shorts.

    ``silent`` puts the EMF to zero; resistors named in ``without`` are left out.
    """
    joined = _joined(circuit, ports, treatments, silent=silent)
    if joined is None:
        return None
    resistors = []
    for element in circuit.elements:
        if isinstance(element, Resistor) and not element.value > 0.0:
            return None
        if isinstance(element, Resistor) and element.name not in without:
            first, second = (joined.of(node) for node in element.nodes)
            resistors.append(((first, second), part(element)))
    return SignalGraph(circuit, joined, mesh_of(resistors))


def _joined(
    circuit: Circuit, ports: Ports, treatments: Mapping[str, Treatment], *, silent: bool
) -> Joined | None:
    """Join nodes over shorted parts and all sources but the input; None for a network of another kind."""
    joined = Joined(GROUND, EMF)
    for element in circuit.elements:
        if isinstance(element, Vcvs | Vccs | Cccs | Ccvs):
            return None
        treatment = treatments.get(element.name)
        if isinstance(element, Inductor) and treatment in (None, Treatment.AS_IS):
            return None
        if isinstance(element, VoltageSource) and element.name == ports.input and not silent:
            if GROUND not in element.nodes:
                return None
            hot = element.nodes[0] if element.nodes[1] == GROUND else element.nodes[1]
            joined.join(EMF, hot)
        elif isinstance(element, VoltageSource) or treatment is Treatment.SHORT:
            joined.join(element.nodes[0], element.nodes[1])
    return None if joined.of(EMF) == GROUND else joined


class _OtherFormError(Exception):
    """A network that no closed form is written for; never leaves this module."""


def signal_net(circuit: Circuit, ports: Ports, treatments: Mapping[str, Treatment]) -> SignalNet | None:
    """Mid-band surroundings with parts shorted and opened as told; None where not of this form."""
    if len(circuit.transistors) != 1:
        return None
    if ports.load is not None and ports.output not in circuit.element(ports.load).nodes:
        ports = replace(ports, load=None)  # Rout is seen at the output: elsewhere it is part of the stage
    named = frozenset(name for name in (ports.source_resistance, ports.load) if name is not None)
    graph = signal_graph(circuit, ports, treatments, without=named)
    if graph is None:
        return None
    try:
        return _net(circuit, ports, graph)
    except _OtherFormError:
        return None


def _net(circuit: Circuit, ports: Ports, graph: SignalGraph) -> SignalNet:
    (device,) = circuit.transistors
    d, g, s, b = (graph.of(node) for node in device.nodes)
    start, source_resistance, sign = _inward(circuit, ports, graph)
    outward = graph.of(ports.output)
    load = _beside(circuit, graph, ports.load, outward)
    if b not in (GROUND, s) or (s in (g, d) and s != GROUND) or outward in (GROUND, EMF):
        raise _OtherFormError
    whole, g = followed(graph.mesh, g, ends={GROUND, EMF, start, outward, s, d})
    terminals = {GATE: g, SOURCE: s, DRAIN: d}
    if s == g != GROUND:
        raise _OtherFormError
    mesh = reduced(whole, {*terminals.values(), start, outward, GROUND})
    if mesh is None:
        raise _OtherFormError
    entry = _reached(mesh, terminals, start, order=(GATE, SOURCE, DRAIN))
    leave = _reached(mesh, terminals, outward, order=(DRAIN, SOURCE, GATE))
    tied = g == d != GROUND
    if tied and entry == GATE:
        entry = DRAIN
    if leave == GATE or (terminals[entry] == EMF and leave == entry):
        raise _OtherFormError
    rest = {name: node for name, node in terminals.items() if name not in (entry, leave) and node != GROUND}
    rest = {name: node for name, node in rest.items() if node not in (terminals[entry], terminals[leave])}
    feedback = mesh.between(g, d) if (entry, leave) == (GATE, DRAIN) else None
    inner_out = None if terminals[leave] == terminals[entry] else mesh.between(terminals[leave], GROUND)
    net = SignalNet(
        device=device,
        entry=entry,
        exit=leave,
        way_in=_way(mesh, start, terminals[entry], mesh.between(terminals[entry], GROUND)),
        way_out=_way(mesh, outward, terminals[leave], inner_out),
        source_resistance=source_resistance,
        load=load,
        to_ground={
            name: link for name, node in rest.items() if (link := mesh.between(node, GROUND)) is not None
        },
        grounded=frozenset(name for name, node in terminals.items() if node == GROUND),
        feedback=feedback,
        tied=tied,
        bulk_at_source=b == s,
        current_driven=isinstance(circuit.element(ports.input), CurrentSource),
        sign=sign,
    )
    told = [net.way_in.series, net.way_in.outer, net.way_in.inner, net.way_out.series, net.way_out.outer,
            net.way_out.inner, *net.to_ground.values(), feedback]  # fmt: skip
    if sum(one is not None for one in told) != len(mesh.links):
        raise _OtherFormError  # some resistor connects what these forms keep apart
    return net


def _way(mesh: Mesh, outer: str, terminal: str, inner: Resistance | None) -> Way:
    if outer == terminal:
        return Way(None, None, inner)
    return Way(mesh.between(outer, terminal), mesh.between(outer, GROUND), inner)


def _reached(mesh: Mesh, terminals: Mapping[str, str], outer: str, *, order: tuple[str, ...]) -> str:
    """The one terminal at an outer node, or connected with it by a resistance alone."""
    at = [name for name in order if terminals[name] == outer]
    near = [name for name in order if terminals[name] in mesh.neighbours(outer) - {GROUND}]
    found = at or near
    if not found or len({terminals[name] for name in found}) > 1:
        raise _OtherFormError
    return found[0]


def _inward(circuit: Circuit, ports: Ports, graph: SignalGraph) -> tuple[str, Resistance | None, float]:
    """Joined node behind the declared source resistance, that resistance, and the direction of the source."""
    source = circuit.element(ports.input)
    if isinstance(source, CurrentSource):
        ends = [graph.of(node) for node in source.nodes]
        if ends.count(GROUND) != 1:
            raise _OtherFormError
        start = ends[0] if ends[1] == GROUND else ends[1]
        beside = _beside(circuit, graph, ports.source_resistance, start)
        return start, beside, 1.0 if start == ends[1] else -1.0
    if GROUND not in source.nodes:
        raise _OtherFormError
    sign = 1.0 if source.nodes[1] == GROUND else -1.0
    if ports.source_resistance is None:
        return EMF, None, sign
    port = input_port(circuit, ports)
    start = graph.of(port.minus if port.plus == GROUND else port.plus)
    named = circuit.element(ports.source_resistance)
    if start in (GROUND, EMF) or graph.mesh.neighbours(EMF) or not isinstance(named, Resistor):
        raise _OtherFormError  # shorted, or more than the declared resistance hangs on the EMF
    return start, part(named), sign


def _beside(circuit: Circuit, graph: SignalGraph, name: str | None, node: str) -> Resistance | None:
    """A declared resistor from a joined node to ground."""
    if name is None:
        return None
    resistor = circuit.element(name)
    if not isinstance(resistor, Resistor) or {graph.of(end) for end in resistor.nodes} != {node, GROUND}:
        raise _OtherFormError
    return part(resistor)
