"""What every device law offers, so that laws can be exchanged without the solver knowing.

A law gives terminal currents and their full Jacobian, never a fixed set of conductances: a gate or
base current, or voltages referred to the bulk, need nothing new here.
Arrays have the batch in their leading axes and the terminals last.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol, TypeVar

import numpy as np
from numpy.typing import NDArray

from deckgen.hand.effects import Effect

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]
Indices = NDArray[np.intp]

P_contra = TypeVar("P_contra", contravariant=True)


@dataclass(frozen=True, slots=True)
class Evaluation:
    """Terminal currents [A], shape (…, T), and their derivatives [S], shape (…, T, T).

    Currents flow into the device. ``jacobian[…, i, j]`` is d current(i) / d voltage(j).
    """

    currents: Array
    jacobian: Array


class DeviceLaw(Protocol[P_contra]):
    """One device law; ``P_contra`` is its frozen set of prepared parameters, arrays over the batch."""

    @property
    def name(self) -> str:
        """Name of the law as the trade knows it."""

    @property
    def terminals(self) -> tuple[str, ...]:
        """Terminal names in the order of the device's nodes."""

    @property
    def effects(self) -> frozenset[Effect]:
        """Effects that this law can leave out."""

    def evaluate(self, parameters: P_contra, voltages: Array) -> Evaluation:
        """Currents and Jacobian at terminal voltages of shape (…, T) [V]."""

    def linearize(self, parameters: P_contra, voltages: Array) -> Array:
        """Small-signal conductances (…, T, T) [S]; may keep effects that the bias leaves out."""

    def capacitances(self, parameters: P_contra, voltages: Array) -> Array:
        """Capacitances [F] between pairs of terminals, in the order of ``capacitor_terminals``."""

    def limit(self, parameters: P_contra, old: Array, new: Array) -> Array:
        """New terminal voltages, pulled back towards the old ones where a Newton step is too long."""

    def report(self, parameters: P_contra, voltages: Array) -> dict[str, Array]:
        """Named quantities at terminal voltages of shape (…, T), trade names and signs."""
