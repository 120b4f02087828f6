"""From a circuit and what is to be measured to the deck that measures it, in one process.

The circuit's own lines are carried over; a silent test source at the output and a control block are
added. The block writes one plot an analysis into one raw file, in a fixed order: operating point,
gain over frequency, all nodes at mid-band, output driven by the test source with the input silent.

An input that is a current source is driven by a test source of 1 A in parallel: its own M would multiply
what it is told.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass

from deckgen.circuit.model import GROUND, Circuit, CurrentSource, Element, Mosfet, VoltageSource
from deckgen.circuit.netlist import element_lines
from deckgen.circuit.numbers import spice_text
from deckgen.circuit.ports import Ports
from deckgen.errors import Fault, InputError
from deckgen.simulator.job import ExpectedPlot, Job
from deckgen.units import shown

POINTS_PER_DECADE = 50
TEST_SOURCE = "ibench"
INPUT_SOURCE = "ibenchin"
RAW_FILE = "out.raw"

MOSFET_READOUTS = ("id", "gm", "gds", "gmbs", "von")
INNER_READOUTS = ("vgs", "vds")
"""Voltages of the channel, read where they are not those of the nodes: behind RD and RS of the card."""

_WORD = re.compile(r"[a-z0-9_][a-z0-9_.]*")
_START = ("set filetype=binary", "set appendwrite")
_LOWEST, _HIGHEST = 0.1, 1e10
_MARGIN = 100.0  # the sweep reaches this far beyond the band edges expected by hand


@dataclass(frozen=True, slots=True)
class Sweep:
    """Frequencies of the gain curve [Hz]: whole decades."""

    start: float
    stop: float

    @property
    def points(self) -> int:
        """Number of points that the simulator computes."""
        return POINTS_PER_DECADE * round(math.log10(self.stop / self.start)) + 1


@dataclass(frozen=True, slots=True)
class Plan:
    """The deck with its analyses and what it must answer; no frequencies where no signal is known."""

    job: Job
    frequency: float | None
    sweep: Sweep | None


def sweep_around(*edges: float | None) -> Sweep:
    """A sweep from 0.1 Hz to 10 GHz, wider where a band edge is expected near or beyond its ends."""
    known = [edge for edge in edges if edge is not None]
    low = min([_LOWEST, *(edge / _MARGIN for edge in known)])
    high = max([_HIGHEST, *(edge * _MARGIN for edge in known)])
    return Sweep(10.0 ** math.floor(math.log10(low)), 10.0 ** math.ceil(math.log10(high)))


def make_plan(
    circuit: Circuit, netlist: str, ports: Ports | None, *, frequency: float | None, sweep: Sweep | None
) -> Plan:
    """The bench deck for a circuit whose netlist text holds no analyses.

    ``frequency`` is where mid-band quantities are taken [Hz]; without ports the operating point alone is
    measured. Raises InputError for names that the simulator's commands can't take.
    """
    _check_names(circuit, ports)
    lines = [line for line in netlist.splitlines() if line.strip().lower() != ".end"]
    signal = ports is not None and frequency is not None and sweep is not None
    block = [*_START, "op", _write(["all", *device_vectors(circuit)])]
    expected = [_operating_point(circuit)]
    if ports is not None and frequency is not None and sweep is not None:
        lines += _test_sources(circuit, ports)
        block += _signal_commands(circuit, ports, frequency, sweep)
        expected += _signal_plots(circuit, ports, sweep)
    deck = "\n".join([*lines, ".control", *block, "quit", ".endc", ".end", ""])
    job = Job(deck, tuple(expected), RAW_FILE)
    return Plan(job, frequency if signal else None, sweep if signal else None)


def _test_sources(circuit: Circuit, ports: Ports) -> list[str]:
    lines = ["* test source at the output, silent until the last analysis"]
    lines += _test_source(circuit, TEST_SOURCE, (GROUND, ports.output), "output")
    source = circuit.element(ports.input)
    if isinstance(source, CurrentSource):
        lines.append("* test source parallel to the input, silent but for gain and input")
        lines += _test_source(circuit, INPUT_SOURCE, source.nodes, "input")
    return lines


def _test_source(circuit: Circuit, name: str, nodes: tuple[str, str], what: str) -> tuple[str, ...]:
    if any(element.name == name for element in circuit.elements):
        raise InputError(Fault(circuit.title, "", f"a source {name}", "that name left to the bench"))
    try:
        return element_lines([CurrentSource(name, nodes, 0.0, 0j)])
    except ValueError as error:
        found = f"the {what} {' '.join(shown(node) for node in nodes if node != GROUND)}"
        expected = "a node with a name of letters, digits, and . : _ + - / ~ @ #"
        raise InputError(Fault(circuit.title, "", found, expected)) from error


def _check_names(circuit: Circuit, ports: Ports | None) -> None:
    """Names that stand in commands must be words: anything else could be read as a command."""
    named: list[Element] = list(circuit.transistors)
    if ports is not None:
        named += [circuit.element(ports.input), *_to_silence(circuit, ports)]
    faults = [
        Fault(
            circuit.title if element.origin is None else element.origin.file,
            "" if element.origin is None else f"line {element.origin.line}",
            f"the name {shown(element.name)}",
            "a name of letters, digits, _ and .",
        )
        for element in named
        if not _WORD.fullmatch(element.name)
    ]
    if faults:
        raise InputError(*faults)


def device_vectors(circuit: Circuit) -> tuple[str, ...]:
    """Names of the operating-point read-outs of all transistors."""
    return tuple(f"@{m.name}[{what}]" for m in circuit.transistors for what in readouts(circuit, m))


def readouts(circuit: Circuit, device: Mosfet) -> tuple[str, ...]:
    """What is read out of one transistor at the operating point."""
    return (*MOSFET_READOUTS, *(INNER_READOUTS if circuit.has_series_resistance(device) else ()))


def node_vectors(circuit: Circuit) -> tuple[str, ...]:
    """Names of all node voltages."""
    return tuple(f"v({node})" for node in circuit.nodes)


def source_vectors(circuit: Circuit) -> tuple[str, ...]:
    """Names of the currents of all voltage sources."""
    return tuple(f"i({e.name})" for e in circuit.elements if isinstance(e, VoltageSource))


def _signal_commands(circuit: Circuit, ports: Ports, frequency: float, sweep: Sweep) -> list[str]:
    point = f"ac lin 1 {spice_text(frequency)} {spice_text(frequency)}"
    output = _write(["frequency", f"v({ports.output})"] if _WORD.fullmatch(ports.output) else ["all"])
    driven = ports.input
    start = [*_silence(circuit, ports)]
    if isinstance(circuit.element(ports.input), CurrentSource):
        driven = INPUT_SOURCE
    else:
        start.append(f"alter {driven} acphase = 0")  # a phase that the deck states would stay
    return [
        *start,
        f"alter {driven} ac = 1",
        f"ac dec {POINTS_PER_DECADE} {spice_text(sweep.start)} {spice_text(sweep.stop)}",
        output,
        point,
        _write(["all"]),
        f"alter {driven} ac = 0",
        f"alter {TEST_SOURCE} ac = 1",
        point,
        output,
    ]


def _write(vectors: list[str]) -> str:
    return f"write {RAW_FILE} {' '.join(vectors)}"


def _silence(circuit: Circuit, ports: Ports) -> list[str]:
    """Every source with an AC value that is not to be driven is set to zero: one source at a time."""
    return [f"alter {source.name} ac = 0" for source in _to_silence(circuit, ports)]


def _to_silence(circuit: Circuit, ports: Ports) -> list[Element]:
    kinds = (VoltageSource, CurrentSource)
    sources = [e for e in circuit.elements if isinstance(e, kinds) and abs(e.ac) > 0.0]
    return [e for e in sources if e.name != ports.input or isinstance(e, CurrentSource)]


def _operating_point(circuit: Circuit) -> ExpectedPlot:
    columns = (*node_vectors(circuit), *source_vectors(circuit), *device_vectors(circuit))
    return ExpectedPlot("Operating Point", 1, columns)


def _signal_plots(circuit: Circuit, ports: Ports, sweep: Sweep) -> list[ExpectedPlot]:
    output, columns = f"v({ports.output})", ["frequency", *node_vectors(circuit)]
    source = circuit.element(ports.input)
    driven: tuple[str, ...] = ()
    if isinstance(source, VoltageSource):  # a current can flow where no voltage arises
        columns.append(f"i({ports.input})")
        driven = tuple(f"v({node})" for node in source.nodes if node != GROUND)
    return [
        ExpectedPlot("AC Analysis", sweep.points, ("frequency", output)),
        ExpectedPlot("AC Analysis", 1, tuple(columns), driven),
        ExpectedPlot("AC Analysis", 1, ("frequency", output)),
    ]
