"""Element cards of a flat deck, one function a letter.

Each returns an element of the circuit, or an ``OtherDevice`` for what is simulated but not analysed by
hand. What can't be a card at all raises ValueError, its message saying what is expected.
"""

from __future__ import annotations

import cmath
import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from itertools import pairwise

from deckgen.circuit.model import (
    GROUND,
    Capacitor,
    Cccs,
    Ccvs,
    CurrentSource,
    Element,
    Inductor,
    ModelCard,
    Mosfet,
    Origin,
    OtherDevice,
    Resistor,
    Vccs,
    Vcvs,
    VoltageSource,
)
from deckgen.circuit.numbers import spice_number

DEFAULT_LENGTH = 100e-6
"""W and L [m] of a level-1 transistor whose card gives neither (ngspice 39)."""

LEAST_RESISTANCE = 1e-3
"""What ngspice 39 makes of a resistor of 0 or without a value [Ω]."""

LEVEL1_PARAMETERS = frozenset(
    "level vto vt0 kp uo u0 tox gamma phi lambda ld nsub nss tpg cgso cgdo cgbo rd rs rsh "
    "is js cbd cbs cj cjsw pb mj mjsw fc tnom".split()
)
"""Level-1 parameters that the hand analysis takes."""

_SILENT_PARAMETERS = frozenset("kf af n m".split())
"""Parameters without influence on what is compared: noise, and M on a model card (measured, ngspice 39)."""

_GEOMETRY = ("w", "l", "m", "ad", "as", "pd", "ps", "nrd", "nrs")
_ON_MODEL = frozenset(_GEOMETRY) - {"m"}
"""Geometry that a model card may hold for the transistors that do not state their own."""

_DIMENSIONS = {"w": 1, "l": 1, "pd": 1, "ps": 1, "ad": 2, "as": 2}
"""Powers of a length, by which the option SCALE acts."""

_SILENT_GEOMETRY = frozenset("off ic icvds icvgs icvbs".split())
_INTRINSIC_DENSITY = 1.45e10  # per cm³; NSUB of no more is refused by ngspice 39
_PINS = {"d": 2, "q": 3, "j": 3, "z": 3, "s": 4, "w": 2, "t": 4, "o": 4, "u": 3, "b": 2, "y": 4, "p": 4}
_WHAT = {
    "b": "a behavioural source", "d": "a diode", "q": "a bipolar transistor", "j": "a JFET", "z": "a MESFET",
    "s": "a switch", "w": "a switch", "t": "a transmission line", "o": "a transmission line",
    "u": "a distributed RC line", "y": "a transmission line", "p": "coupled lines", "a": "a code model",
    "k": "coupled inductors", "n": "a compiled device",
}  # fmt: skip
_STARTS_NUMBER = frozenset("0123456789.+-")
_FUNCTIONS = frozenset("sin pulse pwl exp sffm am trnoise trrandom external".split())
_SILENT_SOURCE_WORDS = frozenset("distof1 distof2 r td".split())
"""Words of a source without influence on its DC and AC values: distortion, repetition of a PWL."""


@dataclass(frozen=True, slots=True)
class OtherModel:
    """A model card of a kind without hand analysis."""

    name: str
    kind: str
    level: int


Models = Mapping[str, ModelCard | OtherModel]


@dataclass(frozen=True, slots=True)
class Defaults:
    """What the options of a deck say of transistors that do not state it themselves.

    Measured with ngspice 39: DEFAD and DEFAS both set AD, and nothing sets AS. SCALE multiplies the lengths,
    and its square the areas, of what element and model cards state, but not these defaults.
    """

    geometry: Mapping[str, float] = field(default_factory=dict)
    scale: float = 1.0


OPTIONS_OF_GEOMETRY = {"defw": "w", "defl": "l", "defm": "m", "defad": "ad", "defas": "ad"}
"""Options that set a geometry, and which (measured, ngspice 39)."""

_NO_GEOMETRY = {
    "w": DEFAULT_LENGTH, "l": DEFAULT_LENGTH, "m": 1.0, "ad": 0.0, "as": 0.0, "pd": 0.0, "ps": 0.0,
    "nrd": 1.0, "nrs": 1.0,
}  # fmt: skip


def read_element(words: Sequence[str], origin: Origin, models: Models, defaults: Defaults) -> Element:
    """The element of one card, its words in lower case."""
    letter = words[0][0]
    if letter in "rcl":
        return _two_terminal(words, origin)
    if letter in "vi":
        return _source(words, origin)
    if letter in "eg":
        return _voltage_controlled(words, origin)
    if letter in "fh":
        return _current_controlled(words, origin)
    if letter == "m":
        return _mosfet(words, origin, models, defaults)
    if letter in _WHAT:
        return _other(words, origin, models)
    raise ValueError("an element: a letter from A to Z that SPICE knows, then its nodes")


def node(name: str) -> str:
    """A node as SPICE takes it: ``gnd`` is ground."""
    return GROUND if name == "gnd" else name


def pair(word: str) -> tuple[str, str]:
    """``name=value``: a word on its own would have to be guessed at."""
    name, _, value = word.partition("=")
    if not (name and value):
        raise ValueError(f"NAME=VALUE (found {word})")
    return name, value


def _nodes(words: Sequence[str], count: int) -> tuple[str, ...]:
    if len(words) < count + 1 or any("=" in word for word in words[1 : count + 1]):
        raise ValueError(f"name and {count} nodes")
    return tuple(node(word) for word in words[1 : count + 1])


def _two_terminal(words: Sequence[str], origin: Origin) -> Element:
    """R, C, L: the value as a word, or by its letter; of several values the last counts."""
    letter = words[0][0]
    ends = _nodes(words, 2)
    first, second = ends
    value: float | None = None
    share = 1.0
    for word in words[3:]:
        name, _, text = word.partition("=")
        if not text:
            if word[0] in _STARTS_NUMBER:
                value = spice_number(word)
            else:
                return OtherDevice(words[0], ends, "a part with a model", origin)
        elif name == letter:
            value = spice_number(text)
        elif name == "m":
            share = spice_number(text)
            if not share > 0.0:
                raise ValueError("M above zero")
        elif name not in ("ic", "noisy"):
            return OtherDevice(words[0], ends, f"a part with {name.upper()}", origin)
    if letter == "r":
        resistance = value / share if value is not None and abs(value) > 0.0 else LEAST_RESISTANCE
        return Resistor(words[0], (first, second), resistance, origin)
    if value is None:
        raise ValueError("a value")
    if letter == "c" and value >= 0.0:
        return Capacitor(words[0], (first, second), value * share, origin)
    if letter == "l" and value > 0.0:
        return Inductor(words[0], (first, second), value / share, origin)
    return OtherDevice(words[0], ends, "a part with a value below zero", origin)


def _source(words: Sequence[str], origin: Origin) -> Element:
    """``Vname a b [[DC] value] [AC magnitude [phase]] [function …]``; the last of several values counts."""
    first, second = _nodes(words, 2)
    # The next word stands last, where it is taken off in no time.
    rest = [part for word in words[3:] for part in word.split("=") if part][::-1]
    direct: float | None = None
    alternating = 0j
    start: float | None = None
    times = 1.0
    while rest:
        word = rest.pop()
        if word == "ac":
            magnitude = _optional(rest, 1.0)
            alternating = cmath.rect(magnitude, math.radians(_optional(rest, 0.0)))
        elif word in _FUNCTIONS:
            start = _at_start(word, _numbers(rest))
            if start is None:
                return OtherDevice(words[0], (first, second), f"a source with {word.upper()}", origin)
        elif word in _SILENT_SOURCE_WORDS:
            _numbers(rest)
        elif word == "dc":
            direct = _optional(rest, 0.0)
        elif word == "m" and words[0][0] == "i":
            times = _optional(rest, 1.0)
        elif word == "portnum":
            return OtherDevice(words[0], (first, second), "a source that is a port", origin)
        else:
            direct = spice_number(word)
    value = direct if direct is not None else (start or 0.0)
    kind = VoltageSource if words[0][0] == "v" else CurrentSource
    return kind(words[0], (first, second), value * times, alternating * times, origin)


def _optional(rest: list[str], default: float) -> float:
    """The next word, if it is a number."""
    if rest and rest[-1][0] in _STARTS_NUMBER:
        return spice_number(rest.pop())
    return default


def _numbers(rest: list[str]) -> list[float]:
    """Numbers up to the next word."""
    found = []
    while rest and rest[-1][0] in _STARTS_NUMBER:
        found.append(spice_number(rest.pop()))
    return found


def _at_start(function: str, values: Sequence[float]) -> float | None:
    """Value of a transient function at time zero, which is the DC value where none is given.

    None for a function, or a form of one, whose value there is not known.
    """
    if function in ("pulse", "exp") and len(values) > 1:
        return values[0]
    if function == "sin" and len(values) > 1:
        phase = math.radians(values[5]) if len(values) > 5 else 0.0
        return values[0] + values[1] * math.sin(phase)
    if function == "pwl" and len(values) > 1:
        return _interpolated(values[0::2], values[1::2], 0.0)
    return None


def _interpolated(times: Sequence[float], values: Sequence[float], when: float) -> float:
    """Value of a piecewise linear function; its first or last value outside."""
    if when <= times[0]:
        return values[0]
    for (t1, v1), (t2, v2) in pairwise(zip(times, values, strict=False)):
        if t1 <= when < t2:
            return v1 + (v2 - v1) * (when - t1) / (t2 - t1)
    return values[-1]


def _voltage_controlled(words: Sequence[str], origin: Origin) -> Element:
    """E and G with one pair of controlling nodes and a gain; all else is a source with an expression."""
    kind = Vcvs if words[0][0] == "e" else Vccs
    plain = len(words) == 6 and not any("=" in word for word in words)
    if plain and words[3] not in ("poly", "value", "table", "vol", "cur"):
        try:
            gain = spice_number(words[5])
        except ValueError:
            plain = False
        else:
            a, b, c, d = _nodes(words, 4)
            return kind(words[0], (a, b, c, d), gain, origin)
    return OtherDevice(words[0], _nodes(words, 2), "a source with an expression", origin)


def _current_controlled(words: Sequence[str], origin: Origin) -> Element:
    kind = Cccs if words[0][0] == "f" else Ccvs
    first, second = _nodes(words, 2)
    if len(words) == 5 and "=" not in words[4]:
        return kind(words[0], (first, second), words[3], spice_number(words[4]), origin)
    return OtherDevice(words[0], (first, second), "a source with an expression", origin)


def _mosfet(words: Sequence[str], origin: Origin, models: Models, defaults: Defaults) -> Element:
    # OFF stands behind the model; before it, it is a node of that name.
    plain = [word for word in words[1:] if "=" not in word]
    place = next((i for i, word in enumerate(plain) if i >= 3 and word in models), None)
    if place is None:
        expected = ", ".join(sorted(models)) or "(none in the deck)"
        raise ValueError(f"drain, gate, source, bulk, and one of the models {expected}")
    nodes = tuple(node(word) for word in plain[:place])
    card = models[plain[place]]
    stated: dict[str, float] = {}
    why: str | None = None
    for word in words[place + 2 :]:
        if "=" not in word:
            continue  # OFF, or a second value of IC: neither moves the operating point
        key, text = pair(word)
        if key in _GEOMETRY:
            stated[key] = spice_number(text)
        elif key not in _SILENT_GEOMETRY:
            why = why or f"a transistor with {key.upper()}"
    why = _not_analysed(card) or why
    if why is not None or len(nodes) != 4 or isinstance(card, OtherModel):
        return OtherDevice(words[0], nodes, why or "a transistor without four terminals", origin)
    size = _geometry(stated, card, defaults)
    for key in ("w", "l", "m"):
        if not size[key] > 0.0:
            raise ValueError(f"{key.upper()} above zero")
    why = _odd(card, size)
    if why is not None:
        return OtherDevice(words[0], nodes, why, origin)
    d, g, s, b = nodes
    return Mosfet(
        words[0], (d, g, s, b), card.name, size["w"], size["l"], size["m"], origin,
        ad=size["ad"], as_=size["as"], pd=size["pd"], ps=size["ps"], nrd=size["nrd"], nrs=size["nrs"],
    )  # fmt: skip


def _geometry(stated: Mapping[str, float], card: ModelCard, defaults: Defaults) -> dict[str, float]:
    """Geometry by the element card, the model card, the options, or ngspice's own defaults, in this order."""
    on_cards = {name: value for name, value in card.parameters if name in _ON_MODEL}
    on_cards.update(stated)
    scaled = {name: value * defaults.scale ** _DIMENSIONS.get(name, 0) for name, value in on_cards.items()}
    return {**_NO_GEOMETRY, **defaults.geometry, **scaled}


def _not_analysed(card: ModelCard | OtherModel) -> str | None:
    """Why the hand analysis can't take a transistor of this model."""
    if isinstance(card, OtherModel):
        if card.kind in ("nmos", "pmos"):
            return f"a MOSFET of level {card.level}"
        return f"a transistor of kind {card.kind.upper()}"
    known = LEVEL1_PARAMETERS | _SILENT_PARAMETERS | _ON_MODEL
    beyond = [name for name, value in card.parameters if name not in known and abs(value) > 0.0]
    return f"a level-1 model with {', '.join(beyond).upper()}" if beyond else None


def _odd(card: ModelCard, size: Mapping[str, float]) -> str | None:
    """What ngspice takes, or stops at, and no transistor has; None where all is well.

    Measured with ngspice 39: where RSH is stated, RD = 0 or NRD = 0 leave the drain unconnected, and RS = 0
    or NRS = 0 the source.
    """
    value = dict(card.parameters)
    for name in ("rd", "rs", "rsh", "is", "js"):
        if value.get(name, 0.0) < 0.0:
            return f"a level-1 model with {name.upper()} below zero"
    for name in ("ad", "as", "pd", "ps", "nrd", "nrs"):
        if size[name] < 0.0:
            return f"a transistor with {name.upper()} below zero"
    for resistance, squares in (("rd", "nrd"), ("rs", "nrs")) if value.get("rsh", 0.0) > 0.0 else ():
        name, stated = (resistance, value[resistance]) if resistance in value else (squares, size[squares])
        if not stated > 0.0:
            return f"a level-1 model with RSH and {name.upper()} of zero"
    if "nsub" in value and value.get("tox", 0.0) > 0.0 and not value["nsub"] > _INTRINSIC_DENSITY:
        return "a level-1 model with NSUB below the density of carriers in pure silicon"
    return None


def _other(words: Sequence[str], origin: Origin, models: Models) -> OtherDevice:
    letter = words[0][0]
    plain = [word for word in words[1:] if "=" not in word]
    count = _PINS.get(letter, 0)
    if letter in "qmjz":
        count = next((i for i, word in enumerate(plain) if i >= 2 and word in models), count)
    if letter == "a":
        plain, count = [], 0
    return OtherDevice(words[0], tuple(node(word) for word in plain[:count]), _WHAT[letter], origin)
