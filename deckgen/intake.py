"""From a file on disk to a circuit ready for analysis: stage files and decks, together.

A stage file of a topology is rendered; a deck is read line by line, flattened by the simulator where it
needs that, and looked over. From then on nobody can tell which it was.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from functools import partial
from pathlib import Path
from typing import Any

from deckgen.circuit.model import (
    GROUND,
    Capacitor,
    Circuit,
    CurrentSource,
    Inductor,
    Resistor,
    VoltageSource,
    display,
)
from deckgen.circuit.ports import Ports
from deckgen.circuit.reader import read_flat
from deckgen.comparison import Finding, Severity
from deckgen.errors import DeckgenError, Fault, InputError, Outcome
from deckgen.findings.cards import card_findings
from deckgen.findings.graph import graph_findings
from deckgen.findings.source import source_findings
from deckgen.findings.table import finding
from deckgen.render.engine import OPTIONS, render
from deckgen.simulator.flatten import Flat
from deckgen.source.deck import first_word, forbidden_lines, read_source
from deckgen.source.files import is_there, resolved
from deckgen.source.model import Card, Source
from deckgen.source.origins import origin_finder, places_of
from deckgen.stage.collect import is_deck
from deckgen.stage.deck import deck_stage
from deckgen.stage.files import parse_toml, read_text
from deckgen.stage.model import Conditions, Part, Stage
from deckgen.stage.notes import NoteTable, table_of_notes
from deckgen.stage.read import stage_from_table
from deckgen.stage.topology import PartSpec, PartUnit, SignalDefaults, Topology, TransistorSpec, load_topology
from deckgen.units import shown

Flattener = Callable[[Sequence[str]], Sequence[Flat]]


class DeckRefusedError(DeckgenError):
    """A deck has certain faults; ``findings`` hold all that was found in it."""

    def __init__(self, findings: tuple[Finding, ...], flat: Flat | None = None) -> None:
        """``flat`` is what the front end made of the deck, where that is why it is refused."""
        self.findings = findings
        self.outcome = Outcome.REFUSED if flat is None else flat.outcome
        self.said = () if flat is None else flat.said
        self.exit_code = self.outcome.exit_code
        meaning = "" if flat is None else flat.meaning
        refused = [one for one in findings if one.severity is Severity.REFUSED]
        self.meaning = meaning or "; ".join(one.text for one in refused)
        super().__init__(self.meaning)


@dataclass(frozen=True, slots=True)
class Taken:
    """A stage with its netlist text and its circuit; ``ports`` is None where no signal path is known."""

    stage: Stage
    netlist: str
    circuit: Circuit
    ports: Ports | None
    findings: tuple[Finding, ...] = ()
    inputs: tuple[tuple[str, str], ...] = ()
    """Name and text of each file that was taken in, as evidence."""


@dataclass(frozen=True, slots=True)
class _Deck:
    """A deck as far as it was read, waiting to be flattened."""

    source: Source
    notes: NoteTable
    table: Mapping[str, Any] | None
    file: str
    text: str
    flat: bool
    findings: tuple[Finding, ...]
    inputs: tuple[tuple[str, str], ...]


def take_in(
    paths: Sequence[Path], *, flattener: Flattener, include_roots: Sequence[Path] = ()
) -> list[Taken | DeckgenError]:
    """Take in files, in order; what is wrong with one is its result and stops no other.

    All decks that need it are flattened together.
    """
    first = [_attempt(partial(_read, path, include_roots)) for path in paths]
    waiting = [one for one in first if isinstance(one, _Deck) and not one.flat]
    flats = iter(flattener([one.text for one in waiting]) if waiting else ())
    results: list[Taken | DeckgenError] = []
    for one in first:
        if isinstance(one, _Deck):
            flat = Flat(one.text) if one.flat else next(flats)
            results.append(_attempt(partial(_finish, one, flat)))
        else:
            results.append(one)
    return results


def _attempt(work: Callable[[], Any]) -> Any:
    try:
        return work()
    except DeckgenError as error:
        return error


def _read(path: Path, include_roots: Sequence[Path]) -> Taken | _Deck:
    if is_deck(path):
        return _read_deck(path, include_roots, file=str(path), table=None)
    text = read_text(path)
    table = parse_toml(text, str(path))
    if "deck" not in table:
        return from_template(stage_from_table(table, file=str(path)), text=text)
    read = _read_deck(_deck_named(path, table["deck"]), include_roots, file=str(path), table=table)
    return replace(read, inputs=((f"{path.stem[-_LONGEST_NAME:]}.toml", text), *read.inputs))


def _deck_named(path: Path, named: object) -> Path:
    """The deck that a stage file names, where that is beside it or below, links followed."""
    deck = path.parent / named if isinstance(named, str) else None
    place, folder = (None if one is None else resolved(one) for one in (deck, path.parent))
    if deck is None or place is None or folder is None or not place.is_relative_to(folder):
        raise InputError(
            Fault(str(path), "deck", shown(named), "a deck beside this file or below its folder")
        )
    return deck


def from_template(stage: Stage, *, text: str | None = None) -> Taken:
    """Render and read a stage of a topology; ``text`` is its file's."""
    netlist = render(stage, load_topology(stage.topology))
    inputs = () if text is None else ((f"{stage.name}.toml", text),)
    circuit = read_flat(netlist, file=stage.file)
    return Taken(stage, netlist, circuit, ports_of(stage, circuit), inputs=inputs)


def ports_of(stage: Stage, circuit: Circuit) -> Ports | None:
    """Input, output, source resistance and load in the names of the circuit; None where left open."""
    signal = stage.signal
    if not (signal.input and signal.output):
        return None
    return Ports(
        input=_own_name(signal.input, circuit) or "",
        output=signal.output.lower(),
        source_resistance=_own_name(signal.source_resistance, circuit),
        load=_own_name(signal.load, circuit),
    )


def _own_name(shown_name: str | None, circuit: Circuit) -> str | None:
    """What the circuit calls an element that people call M1@X1."""
    if shown_name is None or "@" not in shown_name:
        return None if shown_name is None else shown_name.lower()
    wanted = shown_name.upper()
    return next((e.name for e in circuit.elements if display(e.name) == wanted), wanted.lower())


def _read_deck(
    path: Path, include_roots: Sequence[Path], *, file: str, table: Mapping[str, Any] | None
) -> _Deck:
    if not is_there(path):
        raise InputError(Fault(str(path), "", "no such file", "a deck"))
    source = read_source(path, include_roots=include_roots)
    notes = table_of_notes(source.notes)
    named = _stated_signal(notes, table)
    findings = (*source_findings(source), *card_findings(source, input_stated="input" in named))
    if any(one.severity is Severity.REFUSED for one in findings):
        raise DeckRefusedError(findings)
    text = source.text(f"* deckgen: {_title(source)}") + _missing_options(source)
    _refuse_forbidden(text, source)
    own = "\n".join([source.title.text, *(line.text for line in source.own_lines)]) + "\n"
    inputs = ((_evidence_name(path), own),)
    return _Deck(source, notes, table, file, text, is_flat(source), findings, inputs)


def _refuse_forbidden(text: str, source: Source) -> None:
    """The last look at what goes to the simulator, whatever has been done to it before."""
    places = [source.title.origin, *(line.origin for line in source.lines)]
    faults = []
    for number, word in forbidden_lines(text):
        origin = places[min(number, len(places)) - 1]
        found = f"a line that starts with {shown(word)}"
        faults.append(Fault(origin.file, f"line {origin.line}", found, "a card of a circuit"))
    if faults:
        raise InputError(*faults)


def _evidence_name(path: Path) -> str:
    """A name that none of a run's own files has, whatever the deck is called."""
    plain = re.sub(r"[^A-Za-z0-9_.-]", "-", path.name)
    return f"source-{plain[-_LONGEST_NAME:]}"


def _title(source: Source) -> str:
    """The deck's own title, or the name of its file, made harmless for the first line of ours."""
    for text in (source.title.text, Path(source.file).stem):
        printable = "".join(char if char.isprintable() else " " for char in text)
        words = printable.lstrip("* ").split()
        if words and words[0].lower() == ".title":
            words = words[1:]
        if words:
            return " ".join(words)[:_LONGEST_TITLE]
    return "deck"


def _missing_options(source: Source) -> str:
    """Our tighter tolerances, as far as the deck does not set its own; random numbers that stay the same."""
    own = {word.partition("=")[0].lower() for card in _option_cards(source) for word in card.words[1:]}
    wanted = [f"{name}={value!r}" for name, value in OPTIONS if name not in own]
    if "seed" not in own and any(_RANDOM.search(line.text) for line in source.lines):
        wanted.append("seed=1")  # else the front end and the run would each have a circuit of its own
    return f".options {' '.join(wanted)}\n" if wanted else ""


def _option_cards(source: Source) -> list[Card]:
    return [card for card in source.cards if card.head in (".option", ".options", ".opt")]


_RANDOM = re.compile(r"\b(a?gauss|a?unif|limit)\s*\(", re.IGNORECASE)
_MOST_NODES = 2_000
_MOST_COUPLINGS = 4_000_000
_LONGEST_TITLE = 200
_LONGEST_NAME = 150
_NEEDS_FRONT_END = frozenset(".param .params .subckt .ends .if .elseif .else .endif .func .global".split())


def is_flat(source: Source) -> bool:
    """Whether a deck can be read without the simulator: no parameters, subcircuits, expressions."""
    for card in source.cards:
        if card.head in _NEEDS_FRONT_END or card.head[0] == "x":
            return False
        if any(char in word for word in card.words for char in "{}'\""):
            return False
    return True


def _finish(deck: _Deck, flat: Flat) -> Taken:
    if flat.text is None:
        raise DeckRefusedError(deck.findings, flat)
    circuit = read_flat(
        _with_temperature(flat.text, deck),
        file=deck.source.file if deck.flat else f"{deck.source.file} (flattened)",
        origin_of=origin_finder(places_of(deck.source.cards)),
    )
    if not circuit.elements:
        raise InputError(
            Fault(deck.source.file, "", "no element", "a circuit: element cards behind the title")
        )
    _refuse_too_large(circuit, deck.source.file)
    guessed = _guess_signal(circuit, deck)
    named = _stated_signal(deck.notes, deck.table)
    found = graph_findings(
        circuit,
        input_source=_own_name(named.get("input", guessed.input), circuit) or None,
        output=named.get("output", guessed.output).lower() or None,
    )
    findings = (*deck.findings, *found)
    if any(one.severity is Severity.REFUSED for one in findings):
        raise DeckRefusedError(findings)
    stage = deck_stage(
        deck.notes,
        vocabulary(circuit, guessed),
        file=deck.file,
        deck=deck.source.file,
        title=_title(deck.source),
        conditions=Conditions(circuit.temperature, circuit.tnom),
        parts=tuple(
            Part(display(e.name), e.value)
            for e in circuit.elements
            if isinstance(e, Resistor | Capacitor | Inductor)
        ),
        table=deck.table,
    )
    ports = ports_of(stage, circuit)
    if ports is None and not any(one.slug in _NO_INPUT for one in findings):
        findings = (*findings, finding("no-signal-path", file=deck.source.file))
    return Taken(stage, deck.text, circuit, ports, findings, deck.inputs)


_NO_INPUT = frozenset({"ac-source-missing", "ac-sources-several"})


def _stated_signal(notes: NoteTable, table: Mapping[str, Any] | None) -> dict[str, str]:
    """What notes and stage file say of the signal, as far as it is text."""
    sections = [notes.table.get("signal"), (table or {}).get("signal")]
    given = [section for section in sections if isinstance(section, dict)]
    return {key: value for section in given for key, value in section.items() if isinstance(value, str)}


def _refuse_too_large(circuit: Circuit, file: str) -> None:
    """The equations of the hand analysis are full matrices: some circuits need more memory than there is."""
    nodes, transistors = len(circuit.nodes), len(circuit.transistors)
    if nodes > _MOST_NODES:
        raise InputError(Fault(file, "", f"{nodes} nodes", f"at most {_MOST_NODES}: analyse it in parts"))
    if transistors * min(nodes, 4 * transistors) ** 2 > _MOST_COUPLINGS:
        found = f"{transistors} transistors at {nodes} nodes"
        raise InputError(Fault(file, "", found, "about 150 transistors at most: analyse it in parts"))


def _with_temperature(text: str, deck: _Deck) -> str:
    """Flattening loses ``.temp``: the last one of the deck is put back."""
    cards = [card for card in deck.source.cards if card.head == ".temp"]
    if deck.flat or not cards:
        return "* flat\n" + text if not deck.flat else text
    return "\n".join(["* flat", " ".join(cards[-1].words), text])


def _guess_signal(circuit: Circuit, deck: _Deck) -> SignalDefaults:
    """Without notes: the source with a non-zero AC value; the node named out or vout, or the one printed.

    Schematic editors put a slash before the name of a net.
    """
    driven = [e for e in circuit.elements if isinstance(e, VoltageSource | CurrentSource) and abs(e.ac) > 0.0]
    source = display(driven[0].name) if len(driven) == 1 else ""
    named = [node for node in circuit.nodes if node.removeprefix("/") in ("out", "vout")]
    printed = [node for node in _printed_nodes(deck.source) if node in circuit.nodes]
    outputs = named if len(named) == 1 else list(dict.fromkeys(printed))
    output = outputs[0] if len(outputs) == 1 else ""
    return SignalDefaults(source, output)


def _printed_nodes(source: Source) -> list[str]:
    """Nodes that the deck's own print, plot, save and measure cards name."""
    text = " ".join(line.text for card in source.left_out for line in card.lines if _prints(card)).lower()
    return [name for name in re.findall(r"\bv(?:db|m|p|r|i)?\(\s*([^\s(),]+)\s*\)", text) if name != GROUND]


def _prints(card: Card) -> bool:
    return first_word(card.lines[0].text) in (".print", ".plot", ".save", ".probe", ".meas", ".measure")


_UNITS: tuple[tuple[type, PartUnit], ...] = (
    (Resistor, "Ω"), (Capacitor, "F"), (Inductor, "H"), (VoltageSource, "V"), (CurrentSource, "A"),
)  # fmt: skip


def vocabulary(circuit: Circuit, signal: SignalDefaults) -> Topology:
    """What a stage can say of a circuit: its transistors, parts, sources and nodes."""
    parts = [
        PartSpec(display(element.name), unit, "")
        for element in circuit.elements
        for kind, unit in _UNITS
        if isinstance(element, kind)
    ]
    return Topology(
        name="",
        title=circuit.title,
        about="",
        nodes=circuit.nodes,
        signal=signal,
        parts=tuple(parts),
        transistors=tuple(TransistorSpec(display(device.name), "") for device in circuit.transistors),
    )
