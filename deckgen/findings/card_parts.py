"""Element cards: nodes, model, value, geometry, parameters."""

from __future__ import annotations

from dataclasses import dataclass

from deckgen.circuit.elements import DEFAULT_LENGTH
from deckgen.findings.catalogue import (
    FLAGS,
    INSTANCE_PARAMETERS,
    KINDS,
    RESERVED_NODES,
    SOURCE_FUNCTIONS,
    SOURCE_NUMBERS,
)
from deckgen.findings.gather import Gatherer, short
from deckgen.findings.numbers import is_number, value_of
from deckgen.findings.scopes import called_subcircuit, find_model, find_subcircuit
from deckgen.findings.taken import NODES, Taken
from deckgen.units import format_value

_FEWEST_WORDS = {"m": 6, "d": 4, "q": 5, "j": 5, "z": 5}
_EXPRESSION = ("{", "'", '"')
_ALL_KINDS = frozenset(kind for kinds in KINDS.values() for kind in kinds)
_OLD_LEVELS = frozenset({1.0, 2.0, 3.0, 6.0, 9.0})
"""Levels whose W and L default to those of the options, and these to 100 µm."""


@dataclass(frozen=True, slots=True)
class Geometry:
    """W and L that transistors get by ``.options defw`` and ``defl``; None where they are expressions."""

    w: float | None = DEFAULT_LENGTH
    l: float | None = DEFAULT_LENGTH
    set_in_deck: frozenset[str] = frozenset()


def element_findings(card: Taken, gathered: Gatherer, defaults: Geometry, *, judge_names: bool) -> None:
    """Note what is wrong with one element card. ``judge_names``: all that could define a name was read."""
    letter = card.head[0]
    for node in card.nodes:
        why = RESERVED_NODES.get(node.lower())
        if why is not None and node.lower() not in gathered.told:
            gathered.told.add(node.lower())
            gathered.add("node-name-reserved", card, word=node, node=short(node), why=why)
    if letter == "x":
        _subcircuit_call(card, gathered, judge_names=judge_names)
        return
    if not _enough_nodes(card, gathered):
        return
    if letter in "rcl":
        _passive(card, gathered, judge_names=judge_names)
    elif letter in "vi":
        _source(card, gathered)
    elif letter in _FEWEST_WORDS:
        _with_model(card, gathered, defaults, judge_names=judge_names)


def _enough_nodes(card: Taken, gathered: Gatherer) -> bool:
    letter = card.head[0]
    words = card.plain
    needed = _FEWEST_WORDS.get(letter, NODES.get(letter, 0) + 1 if letter in "rclvi" else 0)
    # A transistor with three nodes may be of a kind that has no bulk.
    few = len(words) < (5 if letter == "m" else needed)
    if few:
        what = "nodes and a model" if letter in _FEWEST_WORDS else "nodes"
        found = f"{_count(len(words) - 1, 'word')} behind its name"
        gathered.add("node-count", card, found=found, needed=f"{needed - 1} ({what})")
    return not few


def _count(number: int, what: str) -> str:
    return f"{number} {what}" if number == 1 else f"{number} {what}s"


def _subcircuit_call(card: Taken, gathered: Gatherer, *, judge_names: bool) -> None:
    name = called_subcircuit(card)
    there, chain = find_subcircuit(gathered.chain, name)
    if not there:
        if judge_names:
            known = (other for scope in gathered.chain for other in scope.inner)
            gathered.add("subcircuit-undefined", card, name=short(name), hint=gathered.hint(name, known))
        return
    if chain is None:
        return
    target = chain[-1]
    given = card.plain[1:-1]
    if len(given) != len(target.ports):
        gathered.add(
            "subcircuit-ports",
            card,
            name=short(name),
            found=_count(len(given), "node"),
            needed=str(len(target.ports)),
        )
    for parameter, _ in card.pairs:
        if parameter != "m" and parameter not in target.parameters:
            gathered.add(
                "subcircuit-parameter-unknown",
                card,
                word=parameter,
                parameter=short(parameter),
                name=short(name),
                hint=gathered.hint(parameter, target.parameters),
            )
    _doubled_parameters(card, gathered)


def _doubled_parameters(card: Taken, gathered: Gatherer) -> None:
    seen: dict[str, str] = {}
    for name, value in card.pairs:
        if name in seen:
            gathered.add("parameter-duplicate", card, word=name, parameter=short(name), last=short(value))
        seen[name] = value


def _unknown_parameters(card: Taken, gathered: Gatherer) -> None:
    known = INSTANCE_PARAMETERS[card.head[0]]
    for name, _ in card.pairs:
        if name not in known:
            _unknown(card, gathered, name, known)


def _unknown(card: Taken, gathered: Gatherer, word: str, known: frozenset[str]) -> None:
    hint = gathered.hint(word, known)
    gathered.add("instance-parameter-unknown", card, word=word, parameter=short(word), hint=hint)


def _passive(card: Taken, gathered: Gatherer, *, judge_names: bool) -> None:
    """R, C and L: ``NAME n1 n2 [value] [model] [parameter=value …]``."""
    letter = card.head[0]
    values: list[str] = []
    model = False
    for word in card.plain[3:]:
        if word.startswith(_EXPRESSION) or is_number(word):
            values.append(word)
        elif word.lower() in FLAGS:
            continue
        elif find_model(gathered.chain, word.lower())[0]:
            model = True
            _kind_fits(card, gathered, word)
        elif judge_names:
            if values:
                _unknown(card, gathered, word, INSTANCE_PARAMETERS[letter])
            else:
                _undefined(card, gathered, word)
            return
        else:
            model = True
    own = {letter, "resistance", "capacitance", "cap", "inductance", "q"}
    values += [value for name, value in card.pairs if name in own]
    if len(values) > 1:
        gathered.add("value-extra", card, last=short(values[-1]), first=short(values[0]))
    if not values and not model:
        effect = {"r": "takes 1 mΩ", "c": "takes 0 F", "l": "takes 0 H, a short circuit"}[letter]
        gathered.add("value-missing", card, effect=effect)
    if letter == "r" and values:
        value = value_of(values[-1])
        if value is not None and not abs(value) > 0.0:
            gathered.add("resistor-zero", card, word=values[-1])
    _unknown_parameters(card, gathered)
    _doubled_parameters(card, gathered)


def _source(card: Taken, gathered: Gatherer) -> None:
    """V and I: words with a number of numbers each; a function takes all that follow."""
    letter = card.head[0]
    left: float = 1
    for word in card.words[3:]:
        name = word.lower()
        if "=" in word:
            name, left = name.partition("=")[0], float("inf")
        if name in SOURCE_FUNCTIONS or word in ("(", ")"):
            left = float("inf")
        elif name in SOURCE_NUMBERS and (name != "m" or letter == "i"):
            left = max(left, SOURCE_NUMBERS[name]) if "=" in word else SOURCE_NUMBERS[name]
        elif word.startswith(_EXPRESSION) or is_number(word):
            left -= 1
            if left < 0:
                _unknown(card, gathered, word, frozenset())
                return
        else:
            _unknown(card, gathered, name, frozenset(SOURCE_NUMBERS) | SOURCE_FUNCTIONS)
            return


def _undefined(card: Taken, gathered: Gatherer, name: str) -> None:
    known = (other for scope in gathered.chain for other in scope.models)
    hint = gathered.hint(name.lower(), known)
    gathered.add("model-undefined", card, word=name, name=short(name), hint=hint)


def _kind_fits(card: Taken, gathered: Gatherer, name: str) -> bool:
    """Whether a model is of a kind that the element can have; where it isn't, that is noted."""
    _, model = find_model(gathered.chain, name.lower())
    if model is None:
        return True
    kind = model.words[2].lower() if len(model.words) > 2 else "none"
    wanted = KINDS[card.head[0]]
    if kind in wanted:
        return True
    hint = "" if kind in _ALL_KINDS else gathered.hint(kind, wanted)
    gathered.add(
        "model-type",
        card,
        word=name,
        name=short(name),
        kind=short(kind.upper()),
        wanted=" or ".join(kind.upper() for kind in wanted[:2]),
        hint=hint,
    )
    return False


def _with_model(card: Taken, gathered: Gatherer, defaults: Geometry, *, judge_names: bool) -> None:
    """M, D, Q, J, Z: nodes, then a model; which word that is shows by the models there are."""
    letter = card.head[0]
    words = card.plain  # flags stand behind the model; before it they are nodes of that name
    fewest = 4 if letter == "m" else _FEWEST_WORDS[letter] - 1
    # The usual place first: a node may be called like a model.
    order = sorted(range(fewest, len(words)), key=lambda i: i != _FEWEST_WORDS[letter] - 1)
    place = next((i for i in order if find_model(gathered.chain, words[i].lower())[0]), None)
    if place is None:
        if judge_names:
            _undefined(card, gathered, words[min(_FEWEST_WORDS[letter], len(words)) - 1])
        return
    _, model = find_model(gathered.chain, words[place].lower())
    if not _kind_fits(card, gathered, words[place]) or model is None:
        return
    level = _level(model)
    if letter == "m" and model.words[2].lower() in ("nmos", "pmos") and level in _OLD_LEVELS:
        if place != 5:
            gathered.add("node-count", card, found=_count(place - 1, "node"), needed="4")
            return
        _geometry(card, model, gathered, defaults)
    if (letter == "m" and level == 1.0 and model.words[2].lower() in ("nmos", "pmos")) or letter == "d":
        _unknown_parameters(card, gathered)
    _doubled_parameters(card, gathered)


def _level(model: Taken) -> float | None:
    """LEVEL of a model card, 1 where it gives none; None for an expression."""
    given = dict(model.pairs).get("level")
    return 1.0 if given is None else value_of(given)


def _geometry(card: Taken, model: Taken, gathered: Gatherer, defaults: Geometry) -> None:
    """W and L: given by the card, its model, the options or not at all; and whether they make sense."""
    on_model: dict[str, str] = dict(model.pairs)
    given: dict[str, str] = {key: on_model[key] for key in ("w", "l") if key in on_model}
    given.update(card.pairs)
    missing = [key for key in ("w", "l") if key not in given and f"def{key}" not in defaults.set_in_deck]
    if missing:
        gathered.add("w-or-l-missing", card, missing=" and ".join(key.upper() for key in missing))
    for key in ("w", "l"):
        value = value_of(given.get(key))
        if value is not None and not value > 0.0:
            gathered.add(
                "width-or-length-not-positive",
                card,
                word=given[key],
                name=key.upper(),
                value=format_value(value, "m"),
            )
            return
    length = value_of(given["l"]) if "l" in given else defaults.l
    lateral = value_of(on_model.get("ld"))
    if length is not None and lateral is not None and not length - 2.0 * lateral > 0.0:
        gathered.add(
            "ld-too-large",
            card,
            model=short(model.words[1]),
            ld=format_value(lateral, "m"),
            half=format_value(length / 2.0, "m"),
        )
