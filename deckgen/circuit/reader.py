"""Reader of flat netlist text: no parameters, no subcircuits, no includes, one circuit.

Card by card into the frozen Circuit; analyses, saves and prints are passed over, since deckgen adds
its own. Everything that can't be read is collected, then refused together.
"""

from __future__ import annotations

import cmath
import math
import re
from collections.abc import Iterator
from dataclasses import dataclass, field

from deckgen.circuit.model import (
    GROUND,
    Capacitor,
    Circuit,
    CurrentSource,
    Element,
    Inductor,
    ModelCard,
    Mosfet,
    Origin,
    Resistor,
    VoltageSource,
)
from deckgen.circuit.numbers import spice_number
from deckgen.errors import Fault, InputError
from deckgen.units import CELSIUS_ZERO

_PASSED_OVER = frozenset(
    [
        ".op",
        ".ac",
        ".dc",
        ".tran",
        ".noise",
        ".tf",
        ".pz",
        ".disto",
        ".sens",
        ".save",
        ".print",
        ".plot",
        ".probe",
        ".width",
        ".end",
        ".title",
    ]
)
_BLANKS = " \t\r\f\v"
_DEFAULT_LENGTH = 100e-6  # ngspice 39, level 1: W and L when the card gives neither
_DEFAULT_TEMPERATURE = 27.0 + CELSIUS_ZERO


@dataclass(frozen=True, slots=True)
class _Card:
    words: tuple[str, ...]
    origin: Origin


@dataclass(slots=True)
class _Gathered:
    """What has been read so far; turned into a frozen Circuit at the end."""

    elements: list[Element] = field(default_factory=list)
    models: list[ModelCard] = field(default_factory=list)
    options: list[tuple[str, str]] = field(default_factory=list)
    temperatures: dict[str, float] = field(default_factory=dict)
    faults: list[Fault] = field(default_factory=list)


def read_flat(text: str, *, file: str = "netlist") -> Circuit:
    """Read flat netlist text. Raises InputError with every card that can't be read."""
    # Lines as the simulator has them: other characters that Unicode calls line breaks are none.
    lines = text.replace("\r\n", "\n").split("\n")
    title = lines[0].removeprefix("*").strip()
    gathered = _Gathered()
    for card in _cards(lines[1:], file):
        try:
            _read_card(card, gathered)
        except ValueError as error:
            where = f"line {card.origin.line}"
            gathered.faults.append(Fault(file, where, f"`{' '.join(card.words)}`", str(error)))
    _check_names(gathered, file)
    temperature = gathered.temperatures.get(".temp", gathered.temperatures.get("temp"))
    tnom = gathered.temperatures.get("tnom")
    if gathered.faults:
        raise InputError(*gathered.faults)
    return Circuit(
        title=title,
        elements=tuple(gathered.elements),
        models=tuple(gathered.models),
        options=tuple(gathered.options),
        temperature=_DEFAULT_TEMPERATURE if temperature is None else temperature,
        tnom=_DEFAULT_TEMPERATURE if tnom is None else tnom,
    )


def _cards(lines: list[str], file: str) -> Iterator[_Card]:
    """Logical cards: comments dropped, continuation lines joined, lower case."""
    words: list[str] = []
    start = 0
    for number, line in enumerate(lines, start=2):
        body = re.split(r"\s[$;]|;", line, maxsplit=1)[0].strip(_BLANKS).lower()
        if not body or body.startswith("*"):
            continue
        # A "+" with nothing to continue stays a word of its own, and is refused as a card.
        if body.startswith("+") and words:
            words.extend(_split(body[1:]))
            continue
        parts = _split(body)
        if words:
            yield _Card(tuple(words), Origin(file, start))
        words, start = parts, number
    if words:
        yield _Card(tuple(words), Origin(file, start))


def _split(body: str) -> list[str]:
    """Words of a card; parentheses and commas separate, ``a = b`` becomes one word ``a=b``."""
    joined = re.sub(r"\s*=\s*", "=", re.sub(r"[(),]", " ", body), flags=re.ASCII)
    return re.findall(r"\S+", joined, flags=re.ASCII)


def _read_card(card: _Card, gathered: _Gathered) -> None:
    head = card.words[0]
    if head.startswith("."):
        _read_dot_card(card, gathered)
        return
    readers = {
        "r": _two_terminal,
        "c": _two_terminal,
        "l": _two_terminal,
        "v": _source,
        "i": _source,
        "m": _mosfet,
    }
    if head[0] not in readers:
        raise ValueError("an element that the hand analysis knows: R, C, L, V, I or M")
    gathered.elements.append(readers[head[0]](card))


def _read_dot_card(card: _Card, gathered: _Gathered) -> None:
    head, *rest = card.words
    if head == ".model":
        gathered.models.append(_model(card))
    elif head in (".options", ".option"):
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


def _pair(word: str) -> tuple[str, str]:
    """``name=value`` of a transistor or model: a word on its own would have to be guessed at."""
    name, _, value = word.partition("=")
    if not (name and value):
        raise ValueError(f"NAME=VALUE (found {word})")
    return name, value


def _temperature(text: str) -> float:
    """A temperature written in °C, in kelvin."""
    kelvin = spice_number(text) + CELSIUS_ZERO
    if not kelvin > 0.0:
        raise ValueError("a temperature above absolute zero, in °C")
    return kelvin


def _node(name: str) -> str:
    return GROUND if name == "gnd" else name


def _two_terminal(card: _Card) -> Element:
    if len(card.words) != 4:
        raise ValueError("name, two nodes, one value")
    name, first, second, text = card.words
    value = spice_number(text)
    kinds: dict[str, type[Resistor] | type[Capacitor] | type[Inductor]] = {
        "r": Resistor,
        "c": Capacitor,
        "l": Inductor,
    }
    if not value > 0.0:
        raise ValueError("a value above zero")
    return kinds[name[0]](name, (_node(first), _node(second)), value, card.origin)


def _source(card: _Card) -> Element:
    """``Vname a b [[DC] value] [AC magnitude [phase]]``."""
    if len(card.words) < 3:
        raise ValueError("name, two nodes, DC and AC values")
    name, first, second, *rest = card.words
    direct, alternating = 0.0, 0j
    given: set[str] = set()
    while rest:
        key = rest.pop(0) if rest[0] in ("dc", "ac") else "dc"
        if key in given:
            raise ValueError(f"one {key.upper()} value")
        given.add(key)
        if key == "dc":
            direct = spice_number(rest.pop(0)) if rest else 0.0
        else:
            magnitude = spice_number(rest.pop(0)) if rest else 1.0
            phase = spice_number(rest.pop(0)) if rest and rest[0] != "dc" else 0.0
            alternating = _polar(magnitude, phase)
    kind = VoltageSource if name[0] == "v" else CurrentSource
    return kind(name, (_node(first), _node(second)), direct, alternating, card.origin)


def _polar(magnitude: float, degrees: float) -> complex:
    return cmath.rect(magnitude, math.radians(degrees))


def _mosfet(card: _Card) -> Mosfet:
    if len(card.words) < 6 or any("=" in word for word in card.words[:6]):
        raise ValueError("name, drain, gate, source, bulk, model, then W= L= M=")
    name, drain, gate, source, bulk, model, *rest = card.words
    values = {"w": _DEFAULT_LENGTH, "l": _DEFAULT_LENGTH, "m": 1.0}
    for word in rest:
        key, text = _pair(word)
        if key not in values:
            raise ValueError(f"W=, L= or M= (found {key})")
        values[key] = spice_number(text)
        if not values[key] > 0.0:
            raise ValueError(f"{key.upper()} above zero")
    nodes = (_node(drain), _node(gate), _node(source), _node(bulk))
    return Mosfet(name, nodes, model, values["w"], values["l"], values["m"], card.origin)


def _model(card: _Card) -> ModelCard:
    if len(card.words) < 3 or card.words[2] not in ("nmos", "pmos"):
        raise ValueError("`.model NAME NMOS(...)` or PMOS")
    _, name, kind, *rest = card.words
    parameters = [(key, spice_number(text)) for key, text in map(_pair, rest)]
    level = dict(parameters).get("level", 1.0)
    if round(level) != 1:
        raise ValueError("LEVEL=1")
    return ModelCard(name, "nmos" if kind == "nmos" else "pmos", tuple(parameters), card.origin)


def _check_names(gathered: _Gathered, file: str) -> None:
    """Names used twice, and transistors whose model isn't there."""
    seen: set[str] = set()
    models = {card.name for card in gathered.models}
    for element in gathered.elements:
        where = f"line {element.origin.line}" if element.origin else ""
        if element.name in seen:
            gathered.faults.append(Fault(file, where, f"a second {element.name}", "a name used once"))
        seen.add(element.name)
        if isinstance(element, Mosfet) and element.model not in models:
            expected = f"one of the models {', '.join(sorted(models)) or '(none in the deck)'}"
            gathered.faults.append(Fault(file, where, f"model {element.model}", expected))
