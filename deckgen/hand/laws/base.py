"""What every device law offers, so that laws can be exchanged without the solver knowing.

A law gives terminal currents and their full Jacobian, never a fixed set of conductances: a gate or
base current, or voltages referred to the bulk, need nothing new here.
Arrays have the batch in their leading axes and the terminals last.

A law may have inner terminals, such as the channel's ends behind the resistances of drain and source, or the
base behind its spreading resistance. At DC it solves for their voltages itself; at small signal they are
terminals like the others, numbered behind the outer ones.
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
        """Names of the T outer terminals, in the order of the device's nodes."""

    @property
    def inner(self) -> tuple[tuple[str, int], ...]:
        """Names of the I inner terminals, each with the number of the outer one that it lies behind."""

    @property
    def capacitors(self) -> tuple[tuple[str, int, int], ...]:
        """Name of each capacitance and the numbers of its two terminals, outer and inner ones."""

    @property
    def effects(self) -> frozenset[Effect]:
        """Effects that this law can leave out."""

    def evaluate(self, parameters: P_contra, voltages: Array) -> Evaluation:
        """Currents and Jacobian at outer terminal voltages of shape (…, T) [V]."""

    def linearize(self, parameters: P_contra, voltages: Array) -> Array:
        """Small-signal conductances (…, T+I, T+I) [S]; may keep effects that the bias leaves out.

        What hangs on an inner terminal stays there, also where that is no node of its own.
        """

    def separate(self, parameters: P_contra) -> Mask:
        """Which inner terminals are nodes of their own, shape (…, I); the others are their outer one."""

    def capacitances(self, parameters: P_contra, voltages: Array) -> Array:
        """Capacitances [F], in the order of ``capacitors``."""

    def limit(self, parameters: P_contra, old: Array, new: Array) -> Array:
        """New terminal voltages, pulled back towards the old ones where a Newton step is too long."""

    def report(self, parameters: P_contra, voltages: Array) -> dict[str, Array]:
        """Named quantities at outer terminal voltages of shape (…, T), trade names and signs."""
