"""The shape of a TOML file: pydantic's errors in our words, and the rest of the file checked all the same."""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping
from typing import Any, TypeVar, get_args, get_origin

from pydantic import ValidationError
from pydantic_core import ErrorDetails

from deckgen.stage.faults import Faults
from deckgen.stage.fields import Section
from deckgen.units import shown

Shape = TypeVar("Shape", bound=Section)

_EXPECTED = {
    "string_type": "a text",
    "model_type": "a table",
    "dict_type": "a table",
    "list_type": "a list",
    "bool_type": "true or false",
    "date_type": "a date such as 2027-06-30",
    "too_short": "at least one entry",
}
_CHOICE = re.compile(r"'([^']*)'")


def shaped(model: type[Shape], table: dict[str, Any], faults: Faults) -> Shape:
    """Validate a table, note each fault, and return what remains once the faulty keys are taken out.

    Changes ``table``. Keys that are needed and missing are noted, and None in what is returned.
    """
    noted = False
    while True:
        try:
            section = model.model_validate(table)
            break
        except ValidationError as error:
            details = error.errors(include_url=False)
        # What fails after the first round is only what taking out keys left behind: a list too short.
        for detail in () if noted else details:
            _note(detail, model, faults)
        for detail in reversed(details):  # from the end, so that places in lists stay true
            _prune(table, detail["loc"])
        noted = True
    for path, expected in _missing(section, ()):
        if not faults.at(path):
            faults.add(path, found="nothing", expected=expected)
    return section


def _note(detail: ErrorDetails, model: type[Section], faults: Faults) -> None:
    """Note one of pydantic's errors under its key path."""
    path = tuple(step for step in detail["loc"] if isinstance(step, str) and step != "[key]")
    kind, context = detail["type"], detail.get("ctx", {})
    if kind == "extra_forbidden":
        faults.unknown(path, path[-1], _keys(model, path[:-1]))
    elif kind == "literal_error":
        choices = _CHOICE.findall(context["expected"])
        close = faults.nearest(detail["input"], choices) if isinstance(detail["input"], str) else None
        expected = " or ".join(shown(choice) for choice in choices)
        faults.add(path, found=shown(detail["input"]), expected=expected, nearest=close)
    else:
        expected = context["expected"] if kind == "refused" else _EXPECTED.get(kind, detail["msg"])
        found = shown(path[-1]) if detail["loc"][-1] == "[key]" else shown(detail["input"])
        faults.add(path, found=found, expected=expected)


def _keys(model: type[Section], path: tuple[str, ...]) -> tuple[str, ...]:
    """Keys of the table at a path below a model."""
    current = model
    steps = iter(path)
    for step in steps:
        annotation = current.model_fields[step].annotation
        current, named = _section_in(annotation)
        if named:
            next(steps)
    return tuple(current.model_fields)


def _section_in(annotation: Any) -> tuple[type[Section], bool]:
    """Find the section that a field's type leads to, and whether it is a table of such sections by name."""
    named = False
    while not (isinstance(annotation, type) and issubclass(annotation, Section)):
        named = named or get_origin(annotation) is dict
        # dict[name, Section] keeps it last; Section | None and Annotated[Section, ...] first.
        annotation = get_args(annotation)[-1 if get_origin(annotation) is dict else 0]
    return annotation, named


def _prune(table: Any, loc: tuple[int | str, ...]) -> None:
    """Take the faulty key or list item out of the table."""
    *steps, last = loc[:-1] if loc[-1] == "[key]" else loc
    for step in steps:
        table = table[step]
    if isinstance(table, dict):
        table.pop(last, None)
    else:
        del table[last]


def _missing(section: Section, path: tuple[str, ...]) -> Iterator[tuple[tuple[str, ...], str]]:
    """Key path and meaning of everything needed that the table, or one below it, does not give."""
    for name in section.needed:
        if getattr(section, name) is None:
            yield (*path, name), type(section).model_fields[name].description or "a value"
    for name, value in section:
        if isinstance(value, Section):
            yield from _missing(value, (*path, name))
        elif isinstance(value, Mapping):
            for key, inner in value.items():
                if isinstance(inner, Section):
                    yield from _missing(inner, (*path, name, key))
