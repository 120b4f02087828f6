"""Parts, models and transistors of a stage file: numbers in their units, names against the topology."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping, Set
from typing import TYPE_CHECKING

from deckgen.stage.faults import Faults, listed
from deckgen.stage.level1 import ELSEWHERE, GEOMETRY, NOT_TAKEN, PARAMETERS, Parameter
from deckgen.stage.model import Model, Part, Transistor
from deckgen.stage.topology import SOURCE_UNITS, PartSpec, Topology
from deckgen.units import shown

if TYPE_CHECKING:
    from deckgen.stage.schema import ModelBase, TransistorBase

# Lengths are in metre: 10 m and more is a width in µm without its prefix.
_LONGEST = 10.0


def read_parts(
    values: Mapping[str, str | float], topology: Topology | None, faults: Faults
) -> tuple[Part, ...]:
    """Values of the parts, in the order of the topology."""
    if topology is None:
        for name, value in values.items():
            faults.number(("parts", name), value, None)
        return ()
    _compare_names("parts", values, topology.part_names, faults)
    blamed = faults.blamed("parts")
    parts = []
    for spec in topology.parts:
        path = ("parts", spec.name)
        if spec.name in values:
            value = _part_value(path, values[spec.name], spec, topology, faults)
            parts.append(Part(spec.name, value))
            _check_needs(spec, values, blamed, faults)
        elif spec.required and spec.name not in blamed:
            faults.add(path, found="nothing", expected=f"a value in {spec.unit} ({spec.about})")
    for group in topology.one_of:
        if not any(name in values or name in blamed for name in group):
            faults.add(("parts",), found=f"none of {', '.join(group)}", expected="at least one of them")
    return tuple(parts)


def _part_value(
    path: tuple[str, ...], value: str | float, spec: PartSpec, topology: Topology, faults: Faults
) -> float:
    """Value of one part; NaN, after noting the fault, where it has none."""
    if spec.unit not in SOURCE_UNITS:
        number = faults.positive(path, value, spec.unit)
    else:
        number = faults.number(path, value, spec.unit)
        if number is not None and not abs(number) > 0.0 and spec.name != topology.signal.input:
            faults.add(path, found=shown(value), expected="a supply other than zero")
    return float("nan") if number is None else number


def _check_needs(spec: PartSpec, values: Mapping[str, str | float], blamed: Set[str], faults: Faults) -> None:
    for other in spec.needs:
        if other not in values and other not in blamed:
            faults.add(
                ("parts", spec.name),
                found=f"{spec.name} without {other}",
                expected=f"both of {spec.name} and {other}, or neither ({spec.about})",
            )


def _compare_names(section: str, given: Mapping[str, object], known: tuple[str, ...], faults: Faults) -> None:
    """Note names that the topology lacks, and those written twice in different case."""
    by_fold = {name.casefold(): name for name in known}
    for name in given:
        if name in known:
            continue
        twin = by_fold.get(name.casefold())
        if twin is not None and twin in given:
            found = f"both {shown(twin)} and {shown(name)}"
            faults.add((section, name), found=found, expected=f"{twin} once")
        else:
            faults.unknown((section, name), name, known)


def read_models(sections: Mapping[str, ModelBase], faults: Faults) -> tuple[Model, ...]:
    """Models with their parameters, in the order of the file. A model that nobody uses is no fault."""
    models: list[Model] = []
    earlier: dict[str, str] = {}
    for name, section in sections.items():
        twin = earlier.setdefault(name.casefold(), name)
        if twin != name:
            found = f"both {twin} and {name}"
            faults.add(("models", name), found=found, expected="names that differ in more than case")
        parameters = []
        for parameter in PARAMETERS.values():
            text = getattr(section, parameter.name)
            path = ("models", name, parameter.name)
            value = None if text is None else _parameter(path, parameter, text, faults)
            if value is not None:
                parameters.append((parameter.name, value))
        models.append(Model(name, section.polarity or "n", tuple(parameters)))
    return tuple(models)


def _parameter(
    path: tuple[str, ...], parameter: Parameter, text: str | float, faults: Faults
) -> float | None:
    value = faults.number(path, text, parameter.unit)
    if value is None:
        return None
    if parameter.sign == "positive" and not value > 0.0:
        faults.add(path, found=shown(text), expected="a value above zero")
    elif parameter.sign == "not negative" and value < 0.0:
        faults.add(path, found=shown(text), expected="zero or above")
    elif parameter.below is not None and not value < parameter.below:
        faults.add(path, found=shown(text), expected=f"{_a_value(parameter)} below {parameter.below:g}")
    elif parameter.above is not None and not value > parameter.above:
        faults.add(path, found=shown(text), expected=f"{_a_value(parameter)} above {parameter.above:g}")
    elif parameter.choices and all(abs(value - choice) > 0.0 for choice in parameter.choices):
        expected = listed(f"{choice:g}" for choice in parameter.choices)
        faults.add(path, found=shown(text), expected=expected)
    return value


def _a_value(parameter: Parameter) -> str:
    return f"a value in {parameter.unit}" if parameter.unit else "a value"


def explain_parameters(models: object, faults: Faults) -> None:
    """Note parameters that SPICE knows and the hand analysis does not take, and take them out.

    Works on the raw table, so that they don't count as unknown keys afterwards.
    """
    if not isinstance(models, dict):
        return
    for name, table in models.items():
        for key in tuple(table) if isinstance(table, dict) else ():
            spelled = key.upper()
            if spelled in NOT_TAKEN:
                expected = f"a model without it: the hand analysis does not take {spelled} yet"
                faults.add(("models", name, key), found=shown(key), expected=expected)
            elif spelled in ELSEWHERE:
                faults.add(("models", name, key), found=shown(key), expected=ELSEWHERE[spelled])
            else:
                continue
            del table[key]


def read_transistors(
    sections: Mapping[str, TransistorBase],
    models: tuple[Model, ...],
    topology: Topology | None,
    faults: Faults,
) -> tuple[Transistor, ...]:
    """Transistors, in the order of the topology."""
    if topology is not None:
        _compare_names("transistors", sections, topology.transistor_names, faults)
        blamed = faults.blamed("transistors")
        for spec in topology.transistors:
            path = ("transistors", spec.name)
            if spec.name not in sections and spec.name not in blamed:
                faults.add(path, found="nothing", expected=f"a table with model, W and L ({spec.about})")
    order = sections if topology is None else topology.transistor_names
    by_name = {model.name: model for model in models}
    return tuple(_transistor(name, sections[name], by_name, faults) for name in order if name in sections)


def _transistor(
    name: str, section: TransistorBase, models: Mapping[str, Model], faults: Faults
) -> Transistor:
    path = ("transistors", name)
    width = _length((*path, "W"), section.W, faults)
    length = _length((*path, "L"), section.L, faults)
    model = models.get(section.model or "")
    if section.model is not None and model is None and not faults.blamed("models"):
        faults.unknown((*path, "model"), section.model, models)
    if length is not None and model is not None:
        diffusion = dict(model.parameters).get("LD", 0.0)
        if not length > 2.0 * diffusion:
            expected = f"more than 2·LD of model {model.name}, {2.0 * diffusion:g} m"
            faults.add((*path, "L"), found=shown(section.L), expected=expected)
    return Transistor(
        name=name,
        model=section.model or "",
        w=width or float("nan"),
        l=length or float("nan"),
        m=_multiplier((*path, "M"), section.M, faults),
        region=section.region,
        bulk=section.bulk or "rail",
        geometry=tuple(_stated_geometry(path, section, faults)),
    )


def _stated_geometry(
    path: tuple[str, ...], section: TransistorBase, faults: Faults
) -> Iterator[tuple[str, float]]:
    """Areas, perimeters and squares that a transistor states."""
    for parameter in GEOMETRY:
        text = getattr(section, parameter.name)
        if text is not None:
            value = _parameter((*path, parameter.name), parameter, text, faults)
            if value is not None:
                yield parameter.name, value


def _length(path: tuple[str, ...], text: str | float | None, faults: Faults) -> float | None:
    value = None if text is None else faults.positive(path, text, "m")
    if value is None or value < _LONGEST:
        return value
    hint = f'"{text}u"' if isinstance(text, int | float) or str(text).isdigit() else None
    faults.add(path, found=shown(text), expected=f"a length in metre below {_LONGEST:g}", nearest=hint)
    return None


def _multiplier(path: tuple[str, ...], text: str | float | None, faults: Faults) -> float:
    """Devices in parallel: there are no halves of one."""
    value = 1.0 if text is None else faults.number(path, text, "")
    if value is not None and (value < 1.0 or not value.is_integer()):
        faults.add(path, found=shown(text), expected="a whole number of devices, 1 or more")
    return value or 1.0


def check_present(
    path: tuple[str, ...],
    name: str,
    parts: Iterable[Part],
    topology: Topology,
    *,
    unit: str,
    what: str,
    faults: Faults,
) -> None:
    """Note a part that is no part of that unit in this stage."""
    present = [part.name for part in parts if (spec := topology.part(part.name)) and spec.unit == unit]
    if name not in present and name not in faults.blamed("parts"):
        expected = (
            f"{what} of this stage: {listed(present)}" if present else f"{what}, and this stage has none"
        )
        faults.unknown(path, name, present, expected=expected)
