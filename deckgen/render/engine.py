"""From a stage to netlist text, through the template of its topology.

Templates run in Jinja2's sandbox with undefined names refused. Whatever a stage file brings in as
text is checked here, so that no title and no name can add a line to the deck.
"""

from __future__ import annotations

import functools
import re
from collections.abc import Mapping, Sequence
from pathlib import Path, PurePath
from typing import TYPE_CHECKING, Any

from deckgen import __version__
from deckgen.circuit.numbers import spice_text
from deckgen.errors import Fault, InputError
from deckgen.render.texts import Texts
from deckgen.source.deck import forbidden_lines
from deckgen.stage.model import Model, Stage, Transistor
from deckgen.stage.topology import Topology, templates_folder
from deckgen.units import celsius

if TYPE_CHECKING:
    from jinja2.sandbox import SandboxedEnvironment

OPTIONS: tuple[tuple[str, float], ...] = (("reltol", 1e-6), ("vntol", 1e-9), ("abstol", 1e-15))
"""Tighter than ngspice's own, at which the same stage alone and in company differs by 1e-4."""

RUNNABLE: tuple[str, ...] = (
    ".op",
    "* The source's AC magnitude is 1: vdb is the gain in dB, vp its phase in radians.",
    ".ac dec 5 1 100meg",
    ".print ac vdb({output}) vp({output})",
)
"""Analyses of a deck that is to run in plain ngspice: the operating point, and the gain over frequency."""


def render(
    stage: Stage, topology: Topology, *, analyses: Sequence[str] = (), templates: Path | None = None
) -> str:
    """Netlist text of a stage: models, circuit, options, and the analysis cards given.

    ``templates`` is the folder of the templates, if it is not our own. Raises InputError for a text
    that can't stand in a deck, and for a template that fails.
    """
    from jinja2 import TemplateError

    name = f"{topology.name}.cir.j2"
    values = _values(stage, topology, analyses)
    try:
        text: str = _environment(templates or templates_folder()).get_template(name).render(values)
    except (TemplateError, ArithmeticError, LookupError, TypeError, ValueError) as error:
        line = getattr(error, "lineno", None)
        where = f"line {line}" if line else ""
        found = f"{type(error).__name__}: {error}"
        raise InputError(Fault(name, where, found, "a template that renders this stage")) from error
    faults = [
        Fault(name, f"line {line} of the deck", found, "a circuit: no control block, no *# line, no include")
        for line, found in forbidden_lines(text)
    ]
    if faults:
        raise InputError(*faults)
    return text


def runnable_cards(output: str | None) -> list[str]:
    """Cards that let a deck print its operating point, and its gain where the output is known."""
    named = output is not None and re.fullmatch(r"[A-Za-z0-9_.]+", output)
    return [card.format(output=output) for card in (RUNNABLE if named else RUNNABLE[:1])]


def render_runnable(stage: Stage, topology: Topology, *, templates: Path | None = None) -> str:
    """A deck that runs by itself: ``ngspice -b`` prints the operating point and the gain."""
    texts = Texts(stage.file)
    output = texts.word("signal.output", stage.signal.output)
    texts.raise_any()
    cards = [card.format(output=output) for card in RUNNABLE]
    return render(stage, topology, analyses=cards, templates=templates)


@functools.cache
def _environment(folder: Path) -> SandboxedEnvironment:
    from jinja2 import FileSystemLoader, StrictUndefined
    from jinja2.sandbox import SandboxedEnvironment

    return SandboxedEnvironment(
        loader=FileSystemLoader(folder),
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        keep_trailing_newline=True,
    )


def _values(stage: Stage, topology: Topology, analyses: Sequence[str]) -> Mapping[str, Any]:
    """Everything a template may use, checked and printed. Raises InputError with all faults."""
    texts = Texts(stage.file)
    models = {model.name: model for model in stage.models}
    values = {
        "stage_title": texts.line("title", stage.title),
        "stage_file": texts.line("file", PurePath(stage.file).name),
        "topology": texts.line("topology", topology.name),
        "version": __version__,
        "notes": _notes(stage, texts),
        "models": [_model(model, texts) for model in stage.models],
        "parts": {
            texts.word("parts", part.name): texts.figure(f"parts.{part.name}", part.value)
            for part in stage.parts
        },
        "transistors": {
            texts.word("transistors", transistor.name): _transistor(transistor, models, texts)
            for transistor in stage.transistors
        },
        "options": [(name, spice_text(value)) for name, value in OPTIONS],
        "temperature": texts.figure("conditions.temperature", _degrees(stage.conditions.temperature)),
        "tnom": texts.figure("conditions.tnom", _degrees(stage.conditions.tnom)),
        "analyses": [texts.line("analyses", card) for card in analyses],
    }
    texts.raise_any()
    return values


def _degrees(kelvin: float) -> float:
    # 27.1 °C, made kelvin and back, would be printed as 27.100000000000023.
    return round(celsius(kelvin), 9)


def _notes(stage: Stage, texts: Texts) -> list[str]:
    """The notes of a deck: what is input, output, source resistance and load, and what is stated."""
    signal = stage.signal
    present = {part.name for part in stage.parts}
    notes = [
        f"input {texts.word('signal.input', signal.input)}",
        f"output {texts.word('signal.output', signal.output)}",
    ]
    for word, name in (("source-resistance", signal.source_resistance), ("load", signal.load)):
        if name in present:
            notes.append(f"{word} {name}")
    for word, value in (("frequency", signal.frequency), ("amplitude", signal.amplitude)):
        if value is not None:
            notes.append(f"{word} {texts.figure(f'signal.{word}', value)}")
    notes.extend(f"region {t.name} {t.region}" for t in stage.transistors if t.region is not None)
    return notes


def _model(model: Model, texts: Texts) -> Mapping[str, Any]:
    where = f"models.{model.name}"
    return {
        "name": texts.word("models", model.name),
        "kind": "NMOS" if model.polarity == "n" else "PMOS",
        "parameters": [
            (texts.word(where, name), texts.figure(f"{where}.{name}", value))
            for name, value in model.parameters
        ],
    }


def _transistor(transistor: Transistor, models: Mapping[str, Model], texts: Texts) -> Mapping[str, str]:
    where = f"transistors.{transistor.name}"
    model = models.get(transistor.model)
    if model is None:
        texts.refuse(f"{where}.model", transistor.model, f"one of {', '.join(models) or 'the models given'}")
    return {
        "model": texts.word(f"{where}.model", transistor.model),
        "polarity": "" if model is None else model.polarity,
        "bulk": transistor.bulk,
        "w": texts.figure(f"{where}.W", transistor.w),
        "l": texts.figure(f"{where}.L", transistor.l),
        "m": texts.figure(f"{where}.M", transistor.m),
        "more": "".join(
            f" {name}={texts.figure(f'{where}.{name}', value)}" for name, value in transistor.geometry
        ),
    }
