"""Topologies: a template ``NAME.cir.j2`` and beside it ``NAME.toml``, which says what a stage can give it."""

from __future__ import annotations

import re
from dataclasses import dataclass
from functools import cache, lru_cache
from pathlib import Path
from typing import TYPE_CHECKING, Literal

from deckgen.errors import Fault, InputError
from deckgen.stage.faults import Faults, listed, nearest
from deckgen.stage.files import parse_toml, read_text
from deckgen.units import shown

if TYPE_CHECKING:
    from deckgen.stage.topology_file import SignalFile, StarterFile, TopologyFile

PartUnit = Literal["V", "A", "Ω", "F", "H"]
Polarity = Literal["n", "p"]
SOURCE_UNITS = ("V", "A")
_POLARITIES: tuple[Polarity, ...] = ("n", "p")

_NAME = re.compile(r"[a-z0-9][a-z0-9-]{0,63}")
_TEMPLATE = ".cir.j2"
_NODE = re.compile(r"[a-z][a-z0-9_]*")
_PART = re.compile(r"[A-Za-z][A-Za-z0-9_]*")
_TRANSISTOR = re.compile(r"M[A-Z0-9_]*")


@dataclass(frozen=True, slots=True)
class PartSpec:
    """A part that the template knows: ``unit`` says what it is, ``needs`` what it makes no sense without."""

    name: str
    unit: PartUnit
    about: str
    required: bool = False
    needs: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class TransistorSpec:
    """A transistor that the template knows."""

    name: str
    about: str


@dataclass(frozen=True, slots=True)
class SignalDefaults:
    """Input source, output node and the resistors declared as source resistance and load."""

    input: str
    output: str
    source_resistance: str | None = None
    load: str | None = None


@dataclass(frozen=True, slots=True)
class Starter:
    """Values of a starter stage of one polarity, as texts in the grammar of stage files."""

    polarity: Polarity
    title: str
    parts: tuple[tuple[str, str], ...]
    transistors: tuple[tuple[str, tuple[tuple[str, str], ...]], ...]
    model: tuple[tuple[str, str], ...]
    signal: tuple[tuple[str, str], ...] = ()


@dataclass(frozen=True, slots=True)
class Topology:
    """What can be built from one template, and what a stage has to say about it."""

    name: str
    title: str
    about: str
    nodes: tuple[str, ...]
    signal: SignalDefaults
    parts: tuple[PartSpec, ...]
    transistors: tuple[TransistorSpec, ...]
    starters: tuple[Starter, ...] = ()
    one_of: tuple[tuple[str, ...], ...] = ()
    """Groups of parts; a stage has at least one of each group."""

    @property
    def part_names(self) -> tuple[str, ...]:
        """Names of all parts, in the order of the description."""
        return tuple(part.name for part in self.parts)

    @property
    def transistor_names(self) -> tuple[str, ...]:
        """Names of all transistors, in the order of the description."""
        return tuple(transistor.name for transistor in self.transistors)

    @property
    def sources(self) -> tuple[str, ...]:
        """Names of all sources: the signal's input first, then the supplies."""
        supplies = (part.name for part in self.parts if part.unit in SOURCE_UNITS)
        return tuple(dict.fromkeys((self.signal.input, *supplies)))

    def part(self, name: str) -> PartSpec | None:
        """The part of that name, or None."""
        return next((part for part in self.parts if part.name == name), None)

    def starter(self, polarity: Polarity) -> Starter | None:
        """The starter of that polarity, or None."""
        return next((starter for starter in self.starters if starter.polarity == polarity), None)


@cache
def templates_folder() -> Path:
    """Folder of the templates: inside the package in a wheel, beside it in a checkout.

    Raises InputError when it is in neither place.
    """
    package = Path(__file__).resolve().parent.parent
    checkout = package.parent
    # What lies beside an installed package belongs to others: only a checkout has our project file there.
    places = [package / "templates"]
    if (checkout / "pyproject.toml").is_file():
        places.append(checkout / "templates")
    for place in places:
        if place.is_dir():
            return place
    raise InputError(Fault(str(package), "", "no folder of templates", "one in the package or beside it"))


def list_topologies(folder: Path | None = None) -> tuple[str, ...]:
    """Names of all topologies in a folder of templates, sorted."""
    folder = folder or templates_folder()
    names = (path.name.removesuffix(_TEMPLATE) for path in folder.glob(f"*{_TEMPLATE}"))
    return tuple(sorted(name for name in names if is_topology(name, folder)))


def is_topology(name: str, folder: Path | None = None) -> bool:
    """Whether a name is that of a topology, with both its files; it can't lead out of the folder."""
    folder = folder or templates_folder()
    if not _NAME.fullmatch(name) or name.startswith("frame"):
        return False
    return (folder / f"{name}{_TEMPLATE}").is_file() and (folder / f"{name}.toml").is_file()


def load_topology(name: str, folder: Path | None = None) -> Topology:
    """Read the description of a topology, and keep it until its file changes.

    Raises InputError for an unknown name, and for a faulty description with all its faults.
    """
    folder = folder or templates_folder()
    if not is_topology(name, folder):
        known = list_topologies(folder)
        raise InputError(Fault("topology", "", shown(name), listed(known), nearest(name, known)))
    path = folder / f"{name}.toml"
    status = path.stat()
    return _load(path, status.st_mtime_ns, status.st_size)


@lru_cache(maxsize=256)
def _load(path: Path, _changed: int, _size: int) -> Topology:
    from deckgen.stage.shape import shaped
    from deckgen.stage.topology_file import TopologyFile

    faults = Faults(str(path))
    table = parse_toml(read_text(path), str(path))
    described = shaped(TopologyFile, table, faults)
    _check_names(described, faults)
    faults.raise_any(table)
    return _topology(path.stem, described)


def _check_names(described: TopologyFile, faults: Faults) -> None:
    """Check how names are written, and that every name used is one that was given."""
    parts, transistors = described.parts or {}, described.transistors or {}
    for node in described.nodes or ():
        if not _NODE.fullmatch(node):
            faults.add(("nodes",), found=shown(node), expected="names in lower case, a letter first")
    for name in parts:
        if not _PART.fullmatch(name):
            faults.add(("parts", name), found=shown(name), expected="a name of letters and digits")
    for name in transistors:
        if not _TRANSISTOR.fullmatch(name):
            faults.add(
                ("transistors", name), found=shown(name), expected="a name in upper case that starts with M"
            )
    for name, part in parts.items():
        for other in part.needs or ():
            if other not in parts:
                faults.unknown(("parts", name, "needs"), other, parts)
    for name in (name for group in described.one_of or () for name in group):
        if name not in parts:
            faults.unknown(("one_of",), name, parts)
    if described.signal is not None:
        _check_signal(described.signal, described, faults)
    for polarity in _POLARITIES:
        starter = getattr(described.starter, polarity, None)
        if starter is not None:
            _check_starter(("starter", polarity), starter, described, faults)


def _check_signal(signal: SignalFile, described: TopologyFile, faults: Faults) -> None:
    parts, nodes = described.parts or {}, described.nodes or ()
    if signal.output is not None and signal.output not in nodes:
        faults.unknown(("signal", "output"), signal.output, nodes)
    resistors = [name for name, part in parts.items() if part.unit == "Ω"]
    for key in ("source_resistance", "load"):
        name = getattr(signal, key)
        if name is not None and name not in resistors:
            faults.unknown(("signal", key), name, resistors)


def _check_starter(
    path: tuple[str, ...], starter: StarterFile, described: TopologyFile, faults: Faults
) -> None:
    for key in ("parts", "transistors"):
        known = getattr(described, key) or {}
        for name in getattr(starter, key) or {}:
            if name not in known:
                faults.unknown((*path, key, name), name, known)


def _topology(name: str, described: TopologyFile) -> Topology:
    """The frozen topology of a description that has no faults."""
    signal = described.signal
    if signal is None or signal.input is None or signal.output is None:
        raise AssertionError("a description without faults has a signal")
    starters = ((polarity, getattr(described.starter, polarity, None)) for polarity in _POLARITIES)
    return Topology(
        name=name,
        title=described.title or "",
        about=described.about or "",
        nodes=tuple(described.nodes or ()),
        signal=SignalDefaults(signal.input, signal.output, signal.source_resistance, signal.load),
        parts=tuple(
            PartSpec(key, part.unit, part.about or "", bool(part.required), tuple(part.needs or ()))
            for key, part in (described.parts or {}).items()
            if part.unit is not None
        ),
        transistors=tuple(
            TransistorSpec(key, transistor.about or "")
            for key, transistor in (described.transistors or {}).items()
        ),
        starters=tuple(_starter(polarity, starter) for polarity, starter in starters if starter is not None),
        one_of=tuple(tuple(group) for group in described.one_of or ()),
    )


def _starter(polarity: Polarity, starter: StarterFile) -> Starter:
    return Starter(
        polarity=polarity,
        title=starter.title or "",
        parts=_pairs(starter.parts),
        transistors=tuple((name, _pairs(values)) for name, values in (starter.transistors or {}).items()),
        model=_pairs(starter.model),
        signal=_pairs(starter.signal),
    )


def _pairs(values: dict[str, str | float] | None) -> tuple[tuple[str, str], ...]:
    return tuple((name, str(value)) for name, value in (values or {}).items())
