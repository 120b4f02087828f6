"""Dot cards that define something: models, parameters, options, subcircuits."""

from __future__ import annotations

from collections.abc import Iterable, Iterator

from deckgen.findings.card_parts import Geometry
from deckgen.findings.catalogue import KINDS, MODEL_PARAMETERS, OPTIONS
from deckgen.findings.gather import Gatherer, short
from deckgen.findings.numbers import is_number, value_of
from deckgen.findings.scopes import Chain, Scope, find_model
from deckgen.findings.taken import Taken
from deckgen.units import format_value

_LEVELS = {"nmos": frozenset({1.0}), "pmos": frozenset({1.0}), "d": frozenset({1.0, 3.0})}
"""Levels whose parameters are known here; kinds that are not named have but one."""

OPTION_CARDS = frozenset({".option", ".options", ".opt"})
_PARAM_CARDS = frozenset({".param", ".params"})


def scope_findings(scope: Scope, gathered: Gatherer) -> None:
    """Note what is wrong with the definitions of a scope itself."""
    for card in scope.doubles:
        name = card.words[1] if len(card.words) > 1 else ""
        gathered.add("subcircuit-duplicate", card, name=short(name))
    _doubled_models(scope, gathered)
    _doubled_settings(scope, gathered)


def _doubled_models(scope: Scope, gathered: Gatherer) -> None:
    for card in scope.cards:
        if card.head == ".model" and len(card.words) > 1:
            first = scope.models[card.words[1].lower()]
            if first is not card:
                gathered.add("model-duplicate", card, name=short(card.words[1]), line=_place(first))


def _doubled_settings(scope: Scope, gathered: Gatherer) -> None:
    """A parameter that is set twice in one scope: the last counts."""
    seen: set[str] = set()
    for card in scope.cards:
        if card.head in _PARAM_CARDS:
            for name, value in _settings(card):
                if name in seen:
                    gathered.add(
                        "parameter-duplicate", card, word=name, parameter=short(name), last=short(value)
                    )
                seen.add(name)


def _settings(card: Taken) -> Iterator[tuple[str, str]]:
    """``name=value`` of a card; a function's definition, ``f(x)=…``, is none."""
    before = ""
    for word in card.words[1:]:
        name, equals, value = word.partition("=")
        if equals and name and before != ")":
            yield name.lower(), value
        before = word


def _place(card: Taken) -> str:
    return f"line {card.card.origin.line} of {short(card.card.origin.file)}"


def used_models(chain: Chain) -> Iterator[tuple[Taken, Chain]]:
    """Model cards that the elements of a scope name, as far as it is certain which; and their scopes."""
    seen: set[str] = set()
    for card in chain[-1].cards:
        if card.head[0] not in KINDS:
            continue
        for word in card.plain[2:]:
            name = word.lower()
            if name in seen:
                continue
            seen.add(name)
            _, model = find_model(chain, name)
            if model is not None:
                depth = next(d for d in range(len(chain), 0, -1) if chain[d - 1].models.get(name) is model)
                yield model, chain[:depth]


def model_findings(card: Taken, gathered: Gatherer) -> None:
    """Note what is wrong with one ``.model`` card that an element uses."""
    if len(card.words) < 3:
        return
    kind = card.words[2].lower()
    given = list(_model_parameters(card.words[3:]))
    seen: set[str] = set()
    known = MODEL_PARAMETERS.get(kind)
    level = dict(given).get("level")
    judged = known is not None and (level is None or value_of(level) in _LEVELS.get(kind, frozenset({1.0})))
    for name, value in given:
        if name in seen:
            gathered.add("parameter-duplicate", card, word=name, parameter=short(name), last=short(value))
        seen.add(name)
        if judged and known is not None and name != "level" and name not in known:
            gathered.add(
                "model-parameter-unknown",
                card,
                word=name,
                parameter=short(name),
                kind=kind.upper(),
                hint=gathered.hint(name, known),
            )
    if judged and kind in ("nmos", "pmos"):
        factor = value_of(dict(given).get("kp"))
        if factor is not None and not factor > 0.0:
            gathered.add("kp-not-positive", card, word="kp", value=format_value(factor, "A/V²"))


def _model_parameters(words: Iterable[str]) -> Iterator[tuple[str, str]]:
    """``name=value``, or ``name value``, which ngspice takes too."""
    name = ""
    for word in words:
        if word in ("(", ")"):
            continue
        before, equals, value = word.partition("=")
        if equals:
            if name:
                yield name, ""
            name = ""
            yield before.lower(), value
        elif is_number(word) or word[0] in "{'\"":
            if name:
                yield name, word
            name = ""
        else:
            if name:
                yield name, ""
            name = word.lower()
    if name:
        yield name, ""


def option_findings(card: Taken, gathered: Gatherer) -> None:
    """Note options that ngspice does not know: it ignores them."""
    for word in card.words[1:]:
        name = word.partition("=")[0].lower()
        if name not in OPTIONS and not is_number(word) and word not in ("(", ")"):
            gathered.add(
                "option-unknown", card, word=word, option=short(name), hint=gathered.hint(name, OPTIONS)
            )


def default_geometry(cards: Iterable[Taken]) -> Geometry:
    """W and L that the deck's options give to transistors without."""
    values = {"defw": Geometry().w, "defl": Geometry().l}
    given: set[str] = set()
    for card in cards:
        if card.head in OPTION_CARDS:
            for name, value in _settings(card):
                if name in values:
                    values[name] = value_of(value)
                    given.add(name)
    return Geometry(values["defw"], values["defl"], frozenset(given))
