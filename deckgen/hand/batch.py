"""What the rows of a batch are: effects × samples × temperatures, flattened into one axis."""

from __future__ import annotations

from dataclasses import dataclass, field, fields, replace
from functools import lru_cache

import numpy as np

from deckgen.circuit.model import Circuit, Mosfet
from deckgen.constants import ROOM_TEMPERATURE
from deckgen.hand.effects import Effect, EffectSet
from deckgen.hand.laws.base import Array
from deckgen.hand.laws.parameters import GEOMETRY as MORE_GEOMETRY
from deckgen.hand.laws.parameters import SquareParameters
from deckgen.hand.laws.square import DEFAULTS, SquareLaw
from deckgen.units import CELSIUS_ZERO

SQUARE = SquareLaw()

GEOMETRY = frozenset({"w", "l", *MORE_GEOMETRY})


@dataclass(frozen=True, slots=True)
class Batch:
    """Rows of one solve. The effect set varies slowest, the temperature fastest.

    ``samples`` gives, for (element, parameter) in lower case, one value a sample: a model parameter
    (``("m1", "vto")``) or a geometry (``("m1", "w")``). Temperatures are in kelvin.
    """

    effects: tuple[EffectSet, ...]
    temperatures: tuple[float, ...] = (ROOM_TEMPERATURE,)
    samples: tuple[tuple[tuple[str, str], Array], ...] = ()
    sample_count: int = field(init=False)

    def __post_init__(self) -> None:
        lengths = {len(values) for _, values in self.samples} or {1}
        if len(lengths) != 1:
            raise ValueError(f"samples of different lengths: {sorted(lengths)}")
        object.__setattr__(self, "sample_count", lengths.pop())

    @property
    def rows(self) -> int:
        """Number of rows."""
        return len(self.effects) * self.sample_count * len(self.temperatures)

    def spread(self, axis: int, values: Array) -> Array:
        """Values along one axis (0 effects, 1 samples, 2 temperatures) repeated to one per row."""
        shape = [1, 1, 1]
        shape[axis] = len(values)
        full = (len(self.effects), self.sample_count, len(self.temperatures))
        return np.broadcast_to(np.asarray(values).reshape(shape), full).reshape(-1)

    def row_temperatures(self) -> Array:
        """Temperature of each row [K]."""
        return self.spread(2, np.asarray(self.temperatures, float))

    def switches(self) -> dict[Effect, Array]:
        """For each effect, whether it is on in each row; shape (rows, 1) to broadcast over devices."""
        if self.rows == len(self.effects):
            return {effect: np.array([[effect in on] for on in self.effects]) for effect in Effect}
        return {
            effect: self.spread(0, np.asarray([effect in on for on in self.effects]))[:, None]
            for effect in Effect
        }

    def overrides(self, element: str) -> dict[str, Array]:
        """Sampled parameters of one element, one value per row."""
        return {
            parameter: self.spread(1, np.asarray(values, float))
            for (name, parameter), values in self.samples
            if name == element
        }


_BESIDE_CARD = (*sorted(GEOMETRY), "sign", "tnom")


def prepare_devices(circuit: Circuit, batch: Batch) -> SquareParameters:
    """Parameters of all transistors over the batch, arrays that broadcast to (rows, devices).

    Raises ValueError for a sample of something that the circuit or the law does not have.
    """
    return _prepared(circuit, batch) if batch.samples else prepared_once(circuit, batch)


@lru_cache(maxsize=64)
def prepared_once(circuit: Circuit, batch: Batch) -> SquareParameters:
    """Kept: one analysis asks for the same parameters several times."""
    prepared = _prepared(circuit, batch)
    for item in fields(prepared):
        getattr(prepared, item.name).flags.writeable = False
    return prepared


def _prepared(circuit: Circuit, batch: Batch) -> SquareParameters:
    _check_samples(circuit, batch)
    columns = [_device_values(circuit, device, batch) for device in circuit.transistors]
    none = np.ones((batch.rows, 0))  # what a circuit without transistors has of each
    stacked = {
        name: _stacked([column[name] for column in columns]) if columns else none
        for name in (*DEFAULTS, *_BESIDE_CARD)
    }
    beside = {name: stacked.pop(name) for name in _BESIDE_CARD}
    temperatures, switches = batch.row_temperatures()[:, None], batch.switches()
    if len(batch.temperatures) == 1:
        temperatures = temperatures[:1]
    if len(batch.effects) == 1:
        switches = {effect: on[:1] for effect, on in switches.items()}
    prepared = SQUARE.prepare(stacked, **beside, temperature=temperatures, on=switches, gmin=circuit.gmin)
    return replace(prepared, k=np.broadcast_to(prepared.k, (batch.rows, len(columns))))


def _stacked(columns: list[Array]) -> Array:
    """Values of one parameter, one column a device; one row for all where nothing is sampled."""
    if all(column.ndim == 0 for column in columns):
        return np.array([columns])
    return np.stack(np.broadcast_arrays(*(np.atleast_1d(column) for column in columns)), axis=-1)


def _check_samples(circuit: Circuit, batch: Batch) -> None:
    devices = {device.name for device in circuit.transistors}
    for (element, parameter), _ in batch.samples:
        if element not in devices or not (parameter in DEFAULTS or parameter in GEOMETRY):
            raise ValueError(f"samples of {parameter} of {element}: no such transistor or parameter")


def _device_values(circuit: Circuit, device: Mosfet, batch: Batch) -> dict[str, Array]:
    """Card, geometry and sampled values of one transistor; what the card does not state, derived."""
    card = circuit.model(device.model)
    tnom = CELSIUS_ZERO + card.get("tnom", circuit.tnom - CELSIUS_ZERO)
    beside = {
        "w": device.w, "l": device.l, "m": device.m, "nrd": device.nrd, "nrs": device.nrs,
        "ad": device.ad, "as": device.as_, "pd": device.pd, "ps": device.ps,
        "sign": 1.0 if card.kind == "nmos" else -1.0, "tnom": tnom,
    }  # fmt: skip
    values = {name: np.asarray(value) for name, value in {**dict(card.parameters), **beside}.items()}
    values |= batch.overrides(device.name)
    complete = SQUARE.completed(values, sign=values["sign"], tnom=values["tnom"])
    return {name: values[name] for name in beside} | complete
