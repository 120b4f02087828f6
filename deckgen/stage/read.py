"""From a stage file to a frozen Stage, or to all that is wrong with the file at once."""

from __future__ import annotations

from collections.abc import Iterable
from pathlib import Path, PurePath
from typing import TYPE_CHECKING, Any

from deckgen.assumptions import ASSUMPTIONS
from deckgen.stage.devices import check_present, explain_parameters, read_models, read_parts, read_transistors
from deckgen.stage.expectations import Reader
from deckgen.stage.faults import Faults
from deckgen.stage.files import parse_toml, read_text
from deckgen.stage.model import Conditions, HandSettings, Part, Signal, SourceUnit, Stage
from deckgen.stage.topology import Topology, is_topology, list_topologies, load_topology
from deckgen.units import kelvin, shown

if TYPE_CHECKING:
    from deckgen.stage.schema import ConditionsSection, HandSection, SignalSection, StageFile

# °C: as far as silicon transistors are used, and below 298.15 and 300, which are kelvin by mistake.
_COLDEST, _HOTTEST = -200.0, 250.0


def read_stage(path: Path, *, templates: Path | None = None) -> Stage:
    """Read a stage file. Raises InputError with all faults of the file.

    ``templates`` is the folder of the topologies, if it is not our own.
    """
    return stage_from_text(read_text(path), file=str(path), templates=templates)


def stage_from_text(text: str, *, file: str, templates: Path | None = None) -> Stage:
    """Read the text of a stage file; ``file`` names it in messages, its stem names the stage.

    Raises InputError with all faults of the text.
    """
    table = parse_toml(text, file)
    return stage_from_table(table, file=file, templates=templates)


def stage_from_table(table: dict[str, Any], *, file: str, templates: Path | None = None) -> Stage:
    """Read a parsed stage file of a topology. Raises InputError with all faults."""
    from deckgen.stage.schema import StageFile
    from deckgen.stage.shape import shaped

    faults = Faults(file)
    conditions = table.get("conditions")
    if isinstance(conditions, dict) and "TNOM" in conditions and "tnom" not in conditions:
        conditions["tnom"] = conditions.pop("TNOM")  # SPICE's own spelling
    order = {key: dict(value) if isinstance(value, dict) else value for key, value in table.items()}
    explain_parameters(table.get("models"), faults)
    given = shaped(StageFile, table, faults)
    stage = _stage(given, _topology(given.topology, templates, faults), faults)
    faults.raise_any(order)
    return stage


def _topology(name: str | None, templates: Path | None, faults: Faults) -> Topology | None:
    if name is None:
        return None
    if is_topology(name, templates):
        return load_topology(name, templates)
    faults.unknown(("topology",), name, list_topologies(templates))
    return None


def _stage(given: StageFile, topology: Topology | None, faults: Faults) -> Stage:
    """Read every section, whatever is wrong with the others; the result counts only without faults."""
    parts = read_parts(given.parts or {}, topology, faults)
    signal = read_signal(given.signal, parts, topology, faults)
    reader = Reader(topology, faults, signal)
    models = read_models(given.models or {}, faults)
    transistors = read_transistors(given.transistors or {}, models, topology, faults)
    return Stage(
        name=PurePath(faults.file).stem,
        file=faults.file,
        title=given.title or "",
        topology=given.topology or "",
        parts=parts,
        models=models,
        transistors=transistors,
        regions=tuple((t.name, t.region) for t in transistors if t.region is not None),
        signal=signal,
        conditions=_conditions(given.conditions, faults),
        hand=read_hand(given.hand, faults),
        tolerances=reader.tolerances(given.tolerance or {}),
        claims=reader.claims(given.claims or {}),
        known_gaps=reader.known_gaps(given.known_gap or {}),
        ratings=reader.ratings(given.ratings or {}, parts),
        wanted=reader.wanted((given.wanted.quantities if given.wanted else None) or ()),
    )


def read_signal(
    section: SignalSection | None, parts: tuple[Part, ...], topology: Topology | None, faults: Faults
) -> Signal:
    """Read ``[signal]``; what it leaves out comes from the topology."""
    if topology is None:
        return Signal(input="", output="")
    defaults = topology.signal
    present = {part.name for part in parts}
    source_resistance = defaults.source_resistance if defaults.source_resistance in present else None
    load = defaults.load if defaults.load in present else None
    if section is None:
        unit = _source_unit(defaults.input, topology)
        return Signal(defaults.input, defaults.output, None, None, source_resistance, load, unit)
    if section.input is not None and section.input not in topology.sources:
        faults.unknown(("signal", "input"), section.input, topology.sources)
    if section.output is not None and section.output not in topology.nodes:
        faults.unknown(("signal", "output"), section.output, topology.nodes)
    _check_resistors(section, parts, topology, faults)
    source = section.input or defaults.input
    unit = _source_unit(source, topology)
    signal = Signal(
        input=source,
        output=section.output or defaults.output,
        frequency=_positive(("signal", "frequency"), section.frequency, "Hz", faults),
        amplitude=_positive(("signal", "amplitude"), section.amplitude, unit, faults),
        source_resistance=section.source_resistance or source_resistance,
        load=section.load or load,
        unit=unit,
    )
    if signal.load is not None and signal.load == signal.source_resistance:
        faults.add(
            ("signal", "load"), found=shown(signal.load), expected="another resistor than source_resistance"
        )
    return signal


def _source_unit(source: str, topology: Topology) -> SourceUnit:
    """What the input source gives: V, or A where it is a current source."""
    spec = topology.part(source)
    current = spec.unit == "A" if spec is not None else source.upper().startswith("I")
    return "A" if current else "V"


def _check_resistors(
    section: SignalSection, parts: tuple[Part, ...], topology: Topology, faults: Faults
) -> None:
    for key in ("source_resistance", "load"):
        name = getattr(section, key)
        if name is not None:
            check_present(("signal", key), name, parts, topology, unit="Ω", what="a resistor", faults=faults)


def _positive(path: tuple[str, ...], text: str | float | None, unit: str, faults: Faults) -> float | None:
    return None if text is None else faults.positive(path, text, unit)


def _conditions(section: ConditionsSection | None, faults: Faults) -> Conditions:
    if section is None:
        return Conditions()
    default = Conditions()
    return Conditions(
        temperature=_temperature("temperature", section.temperature, default.temperature, faults),
        tnom=_temperature("tnom", section.tnom, default.tnom, faults),
    )


def _temperature(key: str, text: str | float | None, default: float, faults: Faults) -> float:
    """Temperature in kelvin."""
    path = ("conditions", key)
    value = None if text is None else faults.number(path, text, "°C")
    if value is None:
        return default
    if not _COLDEST <= value <= _HOTTEST:
        faults.add(path, found=shown(text), expected=f"a temperature from {_COLDEST:g} to {_HOTTEST:g} °C")
    return kelvin(value)


def read_hand(section: HandSection | None, faults: Faults) -> HandSettings:
    """Read ``[hand]``."""
    if section is None:
        return HandSettings()
    add, drop = tuple(section.add or ()), tuple(section.drop or ())
    _check_slugs("add", add, faults)
    _check_slugs("drop", drop, faults)
    for slug in add:
        if slug in drop:
            faults.add(("hand", "drop"), found=f"{shown(slug)} in add as well", expected="it in one of them")
    return HandSettings(section.assumptions or "paper", add, drop)


def _check_slugs(key: str, slugs: Iterable[str], faults: Faults) -> None:
    for slug in slugs:
        if slug not in ASSUMPTIONS:
            faults.unknown(("hand", key), slug, ASSUMPTIONS)
