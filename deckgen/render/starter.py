"""The text of a stage file to start from: a design that works, with each line saying what it is."""

from __future__ import annotations

import json
from collections.abc import Iterable, Iterator

from deckgen.errors import Fault, InputError
from deckgen.render.texts import Texts
from deckgen.stage.level1 import PARAMETERS
from deckgen.stage.topology import Polarity, Starter, Topology

_MODELS = {"n": "NDEV", "p": "PDEV"}

_SIGNAL = {
    "frequency": "where mid-band quantities are taken",
    "amplitude": "peak of the source's voltage, for the small-signal check",
}

_MORE = """\
# What else a stage file may say; take the # away from the lines you want.

# [conditions]
# temperature = 27            # °C
#
# [hand]
# assumptions = "paper"       # "full": nothing of the device law left out
#
# [tolerance]
# gm = "5 %"                  # one kind of quantity
# "ID(M1)" = ["2 %", "1 µA"]  # one quantity: whichever of the two is wider
#
# [claims]
# "ID(M1)" = "0.5 mA"
# "gm(M1)" = { at_least = "1 mS" }
# Rin = { within = ["200k", "300k"] }
#
# [known_gap.fL]
# reason = "the corners of several capacitors overlap"
# limit = "40 %"
# until = 2031-06-30
#
# [ratings.M1]
# VDS = "20 V"
# PD = "50 mW"
#
# [wanted]
# quantities = ["ID(M1)", "gm(M1)", "Av"]
"""


def starter_stage_file(topology: Topology, polarity: Polarity, *, title: str | None = None) -> str:
    """Text of a commented stage file with the topology's starter values of one polarity.

    Raises InputError where the topology has no starter of that polarity.
    """
    starter = topology.starter(polarity)
    if starter is None:
        known = (
            ", ".join(other.polarity for other in topology.starters) or "a topology that has starter values"
        )
        raise InputError(Fault(f"{topology.name}.toml", f"starter.{polarity}", "nothing", known))
    texts = Texts(f"{topology.name}.toml")
    heading = texts.line("title", title or starter.title)
    texts.raise_any()
    model = _MODELS[polarity]
    parameters = [(name, value, _meaning(name)) for name, value in starter.model]
    lines = [
        f"# {topology.about}",
        "format = 1",
        f"title = {_quoted(heading)}",
        f"topology = {_quoted(topology.name)}",
        "",
        *_parts(topology, starter),
        f"[models.{model}]",
        *_table([("polarity", polarity, "n- or p-channel"), *parameters]),
        *_transistors(topology, starter, model),
        "[signal]",
        *_table((name, value, _SIGNAL.get(name, "")) for name, value in starter.signal),
    ]
    return "\n".join(lines) + "\n" + _MORE


def _parts(topology: Topology, starter: Starter) -> Iterator[str]:
    """The parts that the starter has; those it does without are named, commented out."""
    given = dict(starter.parts)
    yield "[parts]"
    yield from _table(
        (part.name, given[part.name], part.about) for part in topology.parts if part.name in given
    )
    for part in topology.parts:
        if part.name not in given:
            yield f"# {part.name}: {part.about} [{part.unit}]"


def _transistors(topology: Topology, starter: Starter, model: str) -> Iterator[str]:
    for name, values in starter.transistors:
        about = next(spec.about for spec in topology.transistors if spec.name == name)
        yield f"[transistors.{name}]  # {about}"
        yield from _table(
            [
                ("model", model, ""),
                *((key, value, "") for key, value in values),
                ("region", "saturation", "what it is meant to work in"),
                ("bulk", "rail", 'or "source", where the bulk is tied to the source'),
            ]
        )


def _meaning(parameter: str) -> str:
    known = PARAMETERS.get(parameter)
    return known.described if known else ""


def _table(rows: Iterable[tuple[str, str, str]]) -> list[str]:
    """Lines of a TOML table with the comments one below the other, and an empty line behind."""
    written = [(f"{name} = {_quoted(value)}", about) for name, value, about in rows]
    width = max((len(text) for text, _ in written), default=0)
    return [f"{text:{width}}  # {about}" if about else text for text, about in written] + [""]


def _quoted(text: str) -> str:
    """A TOML basic string; on one line of printable text it is written as JSON's is."""
    return json.dumps(text, ensure_ascii=False)
