"""What ngspice's messages mean.

One table, tried from the top: a row that names a cause stands above the rows for what follows
from it. Wordings are those of ngspice 39, each provoked unless marked; the tests provoke them again.
"""

from __future__ import annotations

import re
from collections.abc import Iterable
from dataclasses import dataclass

from deckgen.errors import Outcome
from deckgen.simulator.remarks import objections, spoken

_REFUSED = Outcome.REFUSED_BY_SIMULATOR
_NO_MODEL = Outcome.MODEL_MISSING
_NO_SOLUTION = Outcome.NO_CONVERGENCE
_INCOMPLETE = Outcome.INCOMPLETE

_MEANINGS = 3
_LONGEST_GROUP = 80
_LONGEST_LINE = 1000


@dataclass(frozen=True, slots=True)
class Row:
    """A pattern over the cleaned messages, and what it means; its groups go into ``meaning``."""

    pattern: re.Pattern[str]
    outcome: Outcome
    meaning: str


@dataclass(frozen=True, slots=True)
class Translation:
    """The outcome that messages tell of, our one line about it, and the lines themselves."""

    outcome: Outcome
    meaning: str
    said: tuple[str, ...]


def _row(pattern: str, outcome: Outcome, meaning: str) -> Row:
    return Row(re.compile(pattern, re.MULTILINE), outcome, meaning)


_ON_LINE = r"^Error on line:?(?: (?P<line>\d+) or its substitute:)?\n(?P<card>.*)\n"

TABLE: tuple[Row, ...] = (
    # the machine
    _row(
        r"^sh: .*\bexec: ",
        Outcome.SIMULATOR_MISSING,
        "the simulator can't be started; see that it is still there and executable",
    ),
    _row(
        r"can't allocate (?P<count>\d+) bytes",
        _INCOMPLETE,
        "out of memory, {count} bytes more were needed; ask for fewer points or raise the memory limit",
    ),
    _row(
        r"rawfile write error|No space left on device",
        _INCOMPLETE,
        "the results could not be written; make room on the disk",
    ),
    # files and parameters of the deck
    _row(
        r"Could not find (?P<kind>include|library) file (?P<name>.*)",
        _REFUSED,
        "the {kind} file {name} is not there; correct its name or put its lines into the deck",
    ),
    _row(
        r"library file (?P<name>.*), section definition (?P<section>.*) not found",
        _REFUSED,
        "library {name} has no section {section}; correct the .lib line",
    ),
    _row(
        r"level depth greater \d+ for dependent parameters.*\n.*\n(?P<card>.*)",
        _REFUSED,
        "{card}: parameters that depend on each other in a circle; give one of them a number",
    ),
    _row(
        r"^Expression err: (?P<what>.*)",
        _REFUSED,
        "the expression '{what}' can't be read; correct it",
    ),
    _row(
        r"^Undefined parameter \[(?P<name>.*)\]",
        _REFUSED,
        "parameter {name} is used but never set; add it with .param",
    ),
    _row(
        r"^Netlist line no\. (?P<line>\d+):\n(?P<what>.*)",
        _REFUSED,
        "line {line} can't be read ({what}); correct it",
    ),
    _row(
        r"Mismatch of \.subckt \.\.\. \.ends",
        _REFUSED,
        "a .subckt has no .ends, or an .ends no .subckt; add the missing line",
    ),
    # lines of the deck
    _row(
        _ON_LINE + r"unknown parameter \((?P<what>.*?)\)",
        _REFUSED,
        "'{card}': '{what}' is neither a parameter nor a number; correct it",
    ),
    _row(
        r"^Warning: Model issue on line (?P<line>\d+) ?:\n(?P<card>.*)\n"
        r"unrecognized parameter \((?P<what>.*?)\)",
        _REFUSED,
        "'{card}': {what} is no parameter of such a model; correct its name, or the model's LEVEL",
    ),
    _row(
        r"^Error: '(?P<what>.)' is not allowed as first character in line (?P<card>.*)",
        _REFUSED,
        "'{card}': no device begins with {what}; correct the line",
    ),
    _row(
        _ON_LINE + r"unknown device type",
        _REFUSED,
        "'{card}': no such kind of device; correct its first letter",
    ),
    _row(
        _ON_LINE + r"unimplemented control card",
        _REFUSED,
        "'{card}': this ngspice has no such dot line; correct or remove it",
    ),
    _row(
        _ON_LINE + r"device already exists",
        _REFUSED,
        "'{card}': a second device of this name; rename one",
    ),
    _row(
        r"not enough parameters in line\n(?P<card>.*)",
        _REFUSED,
        "'{card}': nodes or a value are missing; complete the line",
    ),
    _row(
        r"unknown subckt: (?P<card>.*)",
        _REFUSED,
        "'{card}': no such subcircuit; add its .subckt",
    ),
    _row(
        r"Too (?P<what>many|few) parameters for subcircuit type \"(?P<kind>.*?)\""
        r" \(instance: x(?P<name>.*?)\)",
        _REFUSED,
        "{name}: too {what} nodes for subcircuit {kind}; count those of its .subckt line",
    ),
    _row(
        r"instance (?P<name>\S+) is a shorted (?:VSRC|VCVS|CCVS|ASRC)",
        _REFUSED,
        "{name}: both ends of the source are on one node; connect it or remove it",
    ),
    _row(
        r"(?P<name>\S+): unknown controlling source (?P<what>\S+)",
        _REFUSED,
        "{name}: its controlling source {what} is not there; add it or correct the name",
    ),
    _row(
        r"(?P<name>\S+): coupling to non-existant inductor (?P<what>\S+?)\.?$",
        _REFUSED,
        "{name}: its inductor {what} is not there; add it or correct the name",
    ),
    _row(
        r"no such function '(?P<what>.*)'",
        _REFUSED,
        "an expression calls {what}, which ngspice does not know; correct it",
    ),
    _row(
        r"^Error: (?P<what>\S+) out of range for (?P<name>\w+)",
        _REFUSED,
        "an expression takes {name} of {what}; limit its argument",
    ),
    _row(
        r"^Warning ?: (?P<kind>IC|Nodeset) on non-existent node - (?P<name>\S+), ignored",
        _REFUSED,
        "node {name} of an .ic or .nodeset line is not in the circuit; correct or remove it",
    ),
    _row(
        r"Could not set temperature to (?P<what>.*)",
        _REFUSED,
        "'{what}' is not one temperature; write .temp with a single number",
    ),
    # models
    _row(
        r"model type mismatch in line\n(?P<card>.*)",
        _REFUSED,
        "'{card}': its .model card is of another type; correct the card's type (nmos, pmos ...)",
    ),
    _row(
        r"can't find model '(?P<name>.*?)' from line\n(?P<card>.*)",
        _NO_MODEL,
        "'{card}': there is no .model {name}; add the card or correct the name",
    ),
    _row(
        r"unable to find definition of model (?P<name>\S+)",
        _NO_MODEL,
        "{name}: needs a code model, and deckgen loads none; describe it with R, C, E, G or B devices",
    ),
    _row(
        _ON_LINE + r"could not find a valid modelname",
        _NO_MODEL,
        "'{card}': no model that ngspice can use; see its name, its LEVEL, and the number of nodes",
    ),
    _row(  # whatever else is wrong with a line
        _ON_LINE + r"(?P<what>.+)",
        _REFUSED,
        "'{card}': {what}; correct the line",
    ),
    _row(
        r"^Fatal(?: error)?: (?P<what>(?!detected during|.* is not in the circuit).*)",
        _REFUSED,
        "the simulator can't use a value: {what}; correct the model card",
    ),
    _row(
        r"^Warning: (?P<name>\S+): effective channel length less than zero",
        _REFUSED,
        "model {name}: LD takes away more than the channel's length; correct L or LD",
    ),
    _row(
        r"^Warning: (?P<name>\S+): resistance to low",
        _REFUSED,
        "{name}: no resistance given; give it one",
    ),
    # analyses
    _row(
        r"Voltage source, current source, or resistor named \"(?P<name>.*?)\" is not in the circuit",
        _REFUSED,
        "{name}: the source to sweep is not in the circuit; correct the name",
    ),
    _row(
        r"Noise input source (?P<name>\S+) not in circuit",
        _REFUSED,
        "{name}: the source of the noise analysis is not in the circuit; correct the name",
    ),
    _row(
        r"AC startfreq <= 0|Frequency of < 0 is invalid for AC start",
        _REFUSED,
        "an ac analysis must start above 0 Hz; correct its start frequency",
    ),
    _row(
        r"no data saved for (?P<what>.*?); analysis not run",
        _REFUSED,
        "{what}: the .save lines name nothing that is there; add .save all",
    ),
    _row(
        r"(?P<name>\S+): no such command available",
        _REFUSED,
        "this ngspice has no command {name}; use another version",
    ),
    # no solution
    _row(
        r"singular matrix: +check nodes? (?P<name>\S+)#branch",
        _NO_SOLUTION,
        "the current through {name} is not determined (a loop of voltage sources and inductors,"
        " or a source that controls itself); put a resistor into the loop",
    ),
    _row(
        r"singular matrix: +check nodes? (?P<name>.*)",
        _NO_SOLUTION,
        "the voltage of node {name} is not determined (no dc path to ground); give it one",
    ),
    _row(
        r"Timestep too small.*trouble with node \"(?P<name>.*?)\"",
        _NO_SOLUTION,
        "the transient analysis stuck at node {name}; slow the edges there or add a capacitance",
    ),
    _row(  # the text is in the program; no circuit was found that provokes it
        r"Timestep too small.*trouble with (?P<model>\S+)-instance (?P<name>\S+)",
        _NO_SOLUTION,
        "the transient analysis stuck at {name}; see its model {model} and the nodes around it",
    ),
    _row(
        r"^Note: Transient op started|Transient op failed",
        _NO_SOLUTION,
        "no operating point, only a transient run instead of one, which is not used;"
        " remove optran from the deck and see its bias",
    ),
    _row(
        r"matrix is singular",
        _NO_SOLUTION,
        "the equations have no single solution; see that every node has a dc path to ground",
    ),
    _row(
        r"iteration limit reached|Too many iterations without convergence",
        _NO_SOLUTION,
        "no operating point was found; see values and units of sources and models, or add a .nodeset",
    ),
    # what follows from the above, or from a wrong name in our own control block
    _row(
        r"no such device or model name (?P<name>\S+)",
        _INCOMPLETE,
        "{name} is not in the circuit; correct the name",
    ),
    _row(
        r"no such parameter (?P<name>\S+?)\.?$",
        _INCOMPLETE,
        "the device has no parameter {name}; leave it out, or see the model's LEVEL",
    ),
    _row(
        r"vector (?P<name>.*) is not available or has zero length",
        _INCOMPLETE,
        "no values of {name}; see that it is in the circuit and that the analysis has points",
    ),
    _row(
        r"^(?P<name>\w+) simulation\(s\) aborted",
        _INCOMPLETE,
        "the {name} analysis was aborted; see the simulator's messages",
    ),
    _row(
        r"^(?P<name>DC solution|AC operating point|Transient solution) failed",
        _NO_SOLUTION,
        "no operating point was found; see values and units of sources and models, or add a .nodeset",
    ),
)


def translate(lines: Iterable[str]) -> Translation | None:
    """Say what the messages mean, by the highest row of the table that fits; None if no row does."""
    # A card that a message repeats may have a million letters, and the patterns try each as a beginning.
    lines = tuple(line[:_LONGEST_LINE] for line in lines)
    text = "\n".join(lines)
    for row in TABLE:
        matches = list(row.pattern.finditer(text))
        if matches:
            meanings = tuple(dict.fromkeys(_fill(row.meaning, match) for match in matches))
            more = f"; and {len(meanings) - _MEANINGS} more" if len(meanings) > _MEANINGS else ""
            meaning = "; ".join(meanings[:_MEANINGS]) + more
            matched = [line for match in matches for line in _whole_lines(text, match)]
            return Translation(row.outcome, meaning, spoken([*matched, *objections(lines)]))
    return None


def _whole_lines(text: str, match: re.Match[str]) -> list[str]:
    start = text.rfind("\n", 0, match.start()) + 1
    end = text.find("\n", match.end())
    return text[start : len(text) if end < 0 else end].split("\n")


def _fill(meaning: str, match: re.Match[str]) -> str:
    groups = {
        key: (value or "").strip().rstrip(" .")[:_LONGEST_GROUP] for key, value in match.groupdict().items()
    }
    return meaning.format_map(groups)
