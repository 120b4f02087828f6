"""Findings on the cards of a deck, before it is flattened or run.

They tell what ngspice would read otherwise than it looks, ignore in silence, or stop at. Only what surely
counts is judged: cards of the deck and of subcircuits that are used, outside ``.if``, and of values only
plain numbers.
"""

from __future__ import annotations

from collections.abc import Sequence

from deckgen.comparison import Finding
from deckgen.findings.card_models import (
    OPTION_CARDS,
    default_geometry,
    model_findings,
    option_findings,
    scope_findings,
    used_models,
)
from deckgen.findings.card_numbers import number_findings
from deckgen.findings.card_parts import Geometry, element_findings
from deckgen.findings.gather import Gatherer, several, short
from deckgen.findings.numbers import value_of
from deckgen.findings.scopes import Chain, Scope, all_scopes, live_scopes, read_scopes
from deckgen.findings.table import summed_up
from deckgen.findings.taken import Taken
from deckgen.source.model import Source

_ALL_READ = frozenset(
    {"text-after-end", "control-block", "command-comment", "unknown-card", "include-on-title-line"}
)
"""Problems of reading after which every card that the deck names was still read."""


_LINES_LOST = frozenset(
    {"line-ends-in-backslash", "control-block-open", "too-many-lines", "utf-16", "nul-bytes", "cr-line-ends"}
)
"""Problems of reading after which it is not certain what the cards are."""


def card_findings(source: Source, *, input_stated: bool = False) -> tuple[Finding, ...]:
    """Findings on all cards of a deck. ``input_stated``: a stage file names the input source."""
    if any(problem.slug in _LINES_LOST for problem in source.problems):
        return ()
    top = read_scopes(source.cards)
    if not all(scope.closed and not scope.stray_ends for scope in all_scopes(top)):
        return _unclosed(top)
    judge_names = all(problem.slug in _ALL_READ for problem in source.problems)
    defaults = default_geometry(top.cards)
    gathered = Gatherer((top,))
    models: dict[int, tuple[Taken, Chain]] = {}
    sources: list[tuple[Taken, Chain]] = []
    uncertain = False
    for chain in live_scopes(top):
        gathered.chain = chain
        _scope(chain, gathered, defaults, judge_names=judge_names)
        sources += [(card, chain) for card in chain[-1].cards if _amplitude(card) is not None]
        uncertain = uncertain or any(card.head[0] in "vix" for card in chain[-1].uncertain)
        models.update((id(model), (model, place)) for model, place in used_models(chain))
    for model, chain in models.values():
        gathered.chain = chain
        if not number_findings(model, gathered):
            model_findings(model, gathered)
    stated = input_stated or any(note.keyword == "input" for note in source.notes)
    if judge_names and not uncertain:
        _inputs(sources, gathered, stated=stated)
    return summed_up(gathered.found)


def _unclosed(top: Scope) -> tuple[Finding, ...]:
    """Subcircuits without an end and ends without a subcircuit: nothing else is certain then."""
    gathered = Gatherer((top,))
    for scope in all_scopes(top):
        if not scope.closed and scope.header is not None:
            gathered.add("subcircuit-open", scope.header, what=".subckt has no .ends")
        for card in scope.stray_ends:
            gathered.add("subcircuit-open", card, what=".ends has no .subckt")
    return summed_up(gathered.found)


def _scope(chain: Chain, gathered: Gatherer, defaults: Geometry, *, judge_names: bool) -> None:
    """Findings on the definitions and cards of one scope; model cards come later, if they are used."""
    scope = chain[-1]
    scope_findings(scope, gathered)
    if scope.header is not None:
        number_findings(scope.header, gathered)
    spellings = {port.lower(): port for port in scope.ports}
    elements: set[str] = set()
    for card in scope.cards:
        head = card.head
        if head == ".model":
            continue
        clear = not number_findings(card, gathered)
        if head in OPTION_CARDS:
            option_findings(card, gathered)
        if head.startswith("."):
            continue
        if head in elements:
            gathered.add("element-duplicate", card)
        elements.add(head)
        if clear:
            element_findings(card, gathered, defaults, judge_names=judge_names)
        _spellings(card, spellings, gathered)


def _spellings(card: Taken, known: dict[str, str], gathered: Gatherer) -> None:
    """Note a node that was written in another case before; each once."""
    for node in card.nodes:
        before = known.setdefault(node.lower(), node)
        if before != node and before:
            gathered.add("names-differ-in-case", card, word=node, first=short(before), second=short(node))
            known[node.lower()] = ""


def _amplitude(card: Taken) -> str | None:
    """AC magnitude of an independent source as written, 1 where only AC is; None without."""
    if card.head[0] not in "vi":
        return None
    words = [word.lower() for word in card.words]
    for index, word in enumerate(words[3:], start=3):
        if word == "ac":
            following = words[index + 1 : index + 2]
            return following[0] if following and following[0][0] in "0123456789.+-{'" else "1"
        if word.startswith(("ac=", "acmag=")):
            return word.partition("=")[2]
    return None


def _inputs(sources: Sequence[tuple[Taken, Chain]], gathered: Gatherer, *, stated: bool) -> None:
    """Which source is the input: the only one with an AC value, unless a note or stage file says so."""
    sizes = [(card, chain, value_of(_amplitude(card))) for card, chain in sources]
    active = [item for item in sizes if item[2] is None or abs(item[2]) > 0.0]
    gathered.chain = gathered.chain[:1]
    first = next((card for card in gathered.chain[0].cards if not card.head.startswith(".")), None)
    if not active and not stated and first is not None:
        gathered.add("ac-source-missing", first)
    elif len(active) > 1 and not stated:
        names = []
        for card, chain, _ in active:
            gathered.chain = chain
            names.append(gathered.called(card))
        gathered.add("ac-sources-several", active[1][0], names=several(names))
    for card, chain, size in active:
        gathered.chain = chain
        if size is not None and abs(abs(size) - 1.0) > 1e-9:
            gathered.add("ac-amplitude", card, size=f"{size:g}")
