"""Reader of flat netlist text: no parameters, no subcircuits, no includes, one circuit.

Card by card into the frozen Circuit; analyses, saves and prints are passed over, since deckgen adds
its own. Everything that can't be read is collected, then refused together.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field

from deckgen.circuit.elements import OPTIONS_OF_GEOMETRY, Defaults, OtherModel, pair, read_element
from deckgen.circuit.model import (
    Cccs,
    Ccvs,
    Circuit,
    Element,
    ModelCard,
    Origin,
    OtherDevice,
    Vcvs,
    VoltageSource,
)
from deckgen.circuit.numbers import spice_number
from deckgen.errors import Fault, InputError
from deckgen.units import CELSIUS_ZERO

_PASSED_OVER = frozenset(
    ".op .ac .dc .tran .noise .tf .pz .disto .sens .save .print .plot .probe .width .end .title "
    ".ic .nodeset .global".split()
)
_LONGEST_SHOWN = 100
_DEFAULT_TEMPERATURE = 27.0 + CELSIUS_ZERO
_DEFAULT_GMIN = 1e-12
_SYNONYMS = {"vt0": "vto", "u0": "uo"}
_BLANKS = " \t\r\f\v"
_LINE_END = re.compile(r"(?<=[ ,\t])\$|;|//")
_ODD = re.compile(r"[^\x20-\x7e\s]", re.ASCII)
_EQUALS = re.compile(r"(?<!\s)\s*=\s*")  # from the first blank only: a long row would take for ever
_WITH_CURRENT = (VoltageSource, Vcvs, Ccvs, OtherDevice)
_WITH_MODEL = "mdqjz"
_SEPARATOR = re.compile(r"[(),]")
_TORN = re.compile(r"\S*\(|\S+[\s,(]+[^\s,()]+\(|\S+[\s,(]+[^\s,()]+[\s,]+[^\s,()]+\(")
"""A parenthesis right behind a letter of the name or of one of the first two nodes."""


@dataclass(frozen=True, slots=True)
class _Card:
    words: tuple[str, ...]
    text: str
    origin: Origin


@dataclass(slots=True)
class _Gathered:
    """What has been read so far; turned into a frozen Circuit at the end."""

    cards: list[_Card] = field(default_factory=list)
    models: dict[str, ModelCard | OtherModel] = field(default_factory=dict)
    options: list[tuple[str, str]] = field(default_factory=list)
    temperatures: dict[str, float] = field(default_factory=dict)
    geometry: dict[str, float] = field(default_factory=dict)
    scale: float | None = None
    gmin: float = _DEFAULT_GMIN
    faults: list[Fault] = field(default_factory=list)

    def refuse(self, card: _Card, origin: Origin, expected: str) -> None:
        """Note a card that can't be read."""
        found = " ".join(card.words)
        if len(found) > _LONGEST_SHOWN:
            found = f"{found[:_LONGEST_SHOWN]}…"
        self.faults.append(Fault(origin.file, f"line {origin.line}", f"`{found}`", expected))


OriginFinder = Callable[[Sequence[str]], Origin | None]
"""Tells from the words of a card where it was written, where the text is not what was written."""


def read_flat(text: str, *, file: str = "netlist", origin_of: OriginFinder | None = None) -> Circuit:
    """Read flat netlist text. Raises InputError with every card that can't be read."""
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
            gathered.refuse(card, card.origin, str(error))
    elements = _elements(gathered, file, origin_of or (lambda words: None))
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
        gmin=gathered.gmin,
    )


def _elements(gathered: _Gathered, file: str, origin_of: OriginFinder) -> tuple[Element, ...]:
    """Elements of all cards; every name once, every controlling source there."""
    scale = 1.0 if gathered.scale is None else gathered.scale
    defaults = Defaults(gathered.geometry, scale)
    found: dict[str, Element] = {}
    for card in gathered.cards:
        name = card.words[0]
        origin = origin_of(card.words) or card.origin
        try:
            _refuse_torn(card)
            element = read_element(card.words, origin, gathered.models, defaults)
            if name in found:
                raise ValueError("a name used once")
        except ValueError as error:
            gathered.refuse(card, origin, str(error))
        else:
            found[name] = element
    for card in gathered.cards:
        one = found.get(card.words[0])
        if isinstance(one, Cccs | Ccvs) and not isinstance(found.get(one.control), _WITH_CURRENT):
            gathered.refuse(card, one.origin or card.origin, f"a voltage source {one.control} in the deck")
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
    text = _plain(" ".join(bodies))
    words = _split(text)
    if words:
        yield _Card(tuple(words), text, origin)


def _plain(text: str) -> str:
    """Text as ngspice 39 has it: lower case, µ as u, and ``_`` for each byte of another kind."""
    if not (text.isascii() and text.isprintable()):
        text = _ODD.sub(lambda odd: "_" * len(odd[0].encode()), text.replace("µ", "u"))
    return text.lower()


def _split(text: str) -> list[str]:
    """Words of a card; parentheses and commas separate, ``a = b`` becomes one word ``a=b``."""
    for separator in "(),":
        if separator in text:
            text = text.replace(separator, " ")
    if "=" in text:
        text = _EQUALS.sub("=", text)
    return text.split()


def _refuse_torn(card: _Card) -> None:
    """Ngspice cuts the name of a node off at a parenthesis, and can't read the card of a transistor then."""
    if "(" not in card.text and "," not in card.text:
        return
    if card.text[0] in _WITH_MODEL:
        torn = _SEPARATOR.search(card.text.partition("=")[0])
    else:
        torn = _TORN.match(card.text)
    if torn:
        raise ValueError("nodes parted by blanks, without ( or , in their names: there ngspice cuts them off")


def _read_dot_card(card: _Card, gathered: _Gathered) -> None:
    head, *rest = card.words
    if head.startswith(".temp="):
        head, rest = ".temp", [head.removeprefix(".temp="), *rest]
    if head == ".model":
        found = _model(card)
        gathered.models.setdefault(found.name, found)  # of several the first counts, as in ngspice 39
    elif head in (".options", ".option", ".opt"):
        gathered.options += map(_option, rest)
        # On one card the first of several counts, of several cards the last (measured, ngspice 39).
        for name, value in map(_option, reversed(rest)):
            _take_option(name, value, gathered)
    elif head == ".temp":
        if len(rest) != 1:
            raise ValueError("one temperature in °C")
        gathered.temperatures[head] = _temperature(rest[0])
    elif head not in _PASSED_OVER:
        raise ValueError("a flat deck: .model, .options, .temp, analyses, .end")


def _take_option(name: str, value: str, gathered: _Gathered) -> None:
    """Note what an option says of geometry, temperatures and junctions."""
    if name in ("temp", "tnom"):
        gathered.temperatures[name] = _temperature(value)
    elif name in OPTIONS_OF_GEOMETRY:
        gathered.geometry[OPTIONS_OF_GEOMETRY[name]] = spice_number(value)
    elif name == "gmin":
        gathered.gmin = spice_number(value)
    elif name == "scale" and gathered.scale is None:
        gathered.scale = spice_number(value)  # here it is the other way round


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
