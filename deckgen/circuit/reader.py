"""Reader of flat netlist text: no parameters, no subcircuits, no includes, one circuit.

Card by card into the frozen Circuit; analyses, saves and prints are passed over, since deckgen adds
its own. Everything that can't be read is collected, then refused together.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field

from deckgen.circuit.elements import DEFAULT_LENGTH, OtherModel, pair, read_element
from deckgen.circuit.model import Circuit, Element, ModelCard, Origin
from deckgen.circuit.numbers import spice_number
from deckgen.errors import Fault, InputError
from deckgen.units import CELSIUS_ZERO

_PASSED_OVER = frozenset(
    ".op .ac .dc .tran .noise .tf .pz .disto .sens .save .print .plot .probe .width .end .title "
    ".ic .nodeset .global".split()
)
_SYNONYMS = {"vt0": "vto", "u0": "uo"}
_BLANKS = " \t\r\f\v"
_DEFAULT_TEMPERATURE = 27.0 + CELSIUS_ZERO


@dataclass(frozen=True, slots=True)
class _Card:
    words: tuple[str, ...]
    origin: Origin


@dataclass(slots=True)
class _Gathered:
    """What has been read so far; turned into a frozen Circuit at the end."""

    cards: list[_Card] = field(default_factory=list)
    models: dict[str, ModelCard | OtherModel] = field(default_factory=dict)
    options: list[tuple[str, str]] = field(default_factory=list)
    temperatures: dict[str, float] = field(default_factory=dict)
    faults: list[Fault] = field(default_factory=list)

    def refuse(self, card: _Card, file: str, expected: str) -> None:
        """Note a card that can't be read."""
        self.faults.append(Fault(file, f"line {card.origin.line}", f"`{' '.join(card.words)}`", expected))


def read_flat(text: str, *, file: str = "netlist", origins: Mapping[str, Origin] | None = None) -> Circuit:
    """Read flat netlist text. Raises InputError with every card that can't be read.

    ``origins`` says where elements were written, by name, where the text is not what was written.
    """
    # Lines as the simulator has them: other characters that Unicode calls line breaks are none.
    lines = text.replace("\r\n", "\n").split("\n")
    title = lines[0].removeprefix("*").strip()
    gathered = _Gathered()
    for card in _cards(lines[1:], file):
        if not card.words[0].startswith("."):
            gathered.cards.append(card)
            continue
        try:
            _read_dot_card(card, gathered)
        except ValueError as error:
            gathered.refuse(card, file, str(error))
    elements = _elements(gathered, file, origins or {})
    if gathered.faults:
        raise InputError(*gathered.faults)
    temperature = gathered.temperatures.get(".temp", gathered.temperatures.get("temp"))
    tnom = gathered.temperatures.get("tnom")
    return Circuit(
        title=title,
        elements=elements,
        models=tuple(card for card in gathered.models.values() if isinstance(card, ModelCard)),
        options=tuple(gathered.options),
        temperature=_DEFAULT_TEMPERATURE if temperature is None else temperature,
        tnom=_DEFAULT_TEMPERATURE if tnom is None else tnom,
    )


def _elements(gathered: _Gathered, file: str, origins: Mapping[str, Origin]) -> tuple[Element, ...]:
    """Elements of all cards; every name once, every controlling source there."""
    lengths = dict(gathered.options)
    found: dict[str, Element] = {}
    for card in gathered.cards:
        name = card.words[0]
        try:
            element = read_element(
                card.words,
                origins.get(name, card.origin),
                gathered.models,
                default_w=spice_number(lengths.get("defw", str(DEFAULT_LENGTH))),
                default_l=spice_number(lengths.get("defl", str(DEFAULT_LENGTH))),
            )
            if name in found:
                raise ValueError("a name used once")
        except ValueError as error:
            gathered.refuse(card, file, str(error))
        else:
            found[name] = element
    for card in gathered.cards:
        if card.words[0][0] in "fh" and len(card.words) == 5 and card.words[3] not in found:
            gathered.refuse(card, file, f"a voltage source {card.words[3]} in the deck")
    return tuple(found.values())


def _cards(lines: list[str], file: str) -> Iterator[_Card]:
    """Logical cards: comments dropped, continuation lines joined, lower case."""
    bodies: list[str] = []
    start = 0
    for number, line in enumerate(lines, start=2):
        body = without_comment(line).strip(_BLANKS)
        # ngspice passes over lines with # and $ between a card and its continuation, and stops at others.
        if not body or body[0] in "*#$":
            continue
        # A "+" with nothing to continue stays a word of its own, and is refused as a card.
        if body[0] == "+" and bodies:
            bodies.append(body[1:])
            continue
        if bodies:
            yield from _card(bodies, Origin(file, start))
        bodies, start = [body], number
    if bodies:
        yield from _card(bodies, Origin(file, start))


def without_comment(line: str) -> str:
    """A line without its end: what is behind ``;`` or ``//``, or behind ``$`` after a blank or comma."""
    if "$" in line or ";" in line or "//" in line:
        return _LINE_END.split(line.lstrip(_BLANKS), maxsplit=1)[0]
    return line


def _card(bodies: list[str], origin: Origin) -> Iterator[_Card]:
    words = _split(_plain(" ".join(bodies)))
    if words:
        yield _Card(tuple(words), origin)


def _plain(text: str) -> str:
    """Text as ngspice 39 has it: lower case, µ as u, and ``_`` for each byte of another kind."""
    if not (text.isascii() and text.isprintable()):
        text = _ODD.sub(lambda odd: "_" * len(odd[0].encode()), text.replace("µ", "u"))
    return text.lower()


def _split(body: str) -> list[str]:
    """Words of a card; parentheses and commas separate, ``a = b`` becomes one word ``a=b``.

    In the names of nodes ngspice 39 takes ``(`` as a letter, and ends them at ``)``: a part of two nodes
    may hang on ``net-(r1-pad1)``, but the cards of all others are torn there.
    """
    nodes: list[str] = []
    if "(" in body:
        match = _NODES.match(body)
        if match and "(" in f"{match[2]}{match[3]}":
            if body[0] not in _TWO_NODES:
                raise_ = f"{match[1]} has"
            nodes, body = list(match.groups()), body[match.end() :]
        body = body.replace("(", " ").replace(")", " ")
    elif ")" in body:
        body = body.replace(")", " ")
    body = body.replace(",", " ")
    if "=" in body:
        body = _EQUALS.sub("=", body)
    return nodes + body.split()


def _read_dot_card(card: _Card, gathered: _Gathered) -> None:
    head, *rest = card.words
    if head == ".model":
        found = _model(card)
        gathered.models.setdefault(found.name, found)  # of several the first counts, as in ngspice 39
    elif head in (".options", ".option", ".opt"):
        for name, value in map(_option, rest):
            gathered.options.append((name, value))
            if name in ("temp", "tnom"):
                gathered.temperatures[name] = _temperature(value)
    elif head == ".temp":
        if len(rest) != 1:
            raise ValueError("one temperature in °C")
        gathered.temperatures[head] = _temperature(rest[0])
    elif head not in _PASSED_OVER:
        raise ValueError("a flat deck: .model, .options, .temp, analyses, .end")


def _option(word: str) -> tuple[str, str]:
    """An option; one without a value is a switch that is on."""
    name, _, value = word.partition("=")
    return name, value or "1"


def _temperature(text: str) -> float:
    """A temperature written in °C, in kelvin."""
    kelvin = spice_number(text) + CELSIUS_ZERO
    if not kelvin > 0.0:
        raise ValueError("a temperature above absolute zero, in °C")
    return kelvin


def _model(card: _Card) -> ModelCard | OtherModel:
    """A level-1 MOSFET card with its parameters; of any other card just its kind."""
    if len(card.words) < 3:
        raise ValueError("`.model NAME KIND PARAMETER=VALUE …`")
    _, name, kind, *rest = card.words
    words = dict(word.partition("=")[::2] for word in rest)
    level = round(spice_number(words.get("level") or "1"))
    if kind not in ("nmos", "pmos") or level != 1:
        return OtherModel(name, kind, level)
    parameters = [(_SYNONYMS.get(key, key), spice_number(text)) for key, text in map(pair, rest)]
    return ModelCard(name, "nmos" if kind == "nmos" else "pmos", tuple(parameters), card.origin)
