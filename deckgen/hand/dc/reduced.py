"""The linear part of a network eliminated once, down to the voltages of the nodes that transistors hang on.

Arrays of the solver have the row of the batch as their *last* axis: each step then runs over contiguous
numbers. Device laws have it first; ``Reduced.at_devices`` and views turn one into the other.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from deckgen.hand.laws.base import Array, Indices
from deckgen.hand.network import DcSystem

TINY = 1e-15
"""Conductance [S] at every port that holds a Newton step where nothing else does; no part of the solution."""

_SINGULAR = 1e-15
_LEAST_CONDUCTANCE = 1e-16  # S; what is below, a thousandth of gmin and less, is no path
_LARGEST_FOLD = 50_000  # numbers


@dataclass(frozen=True, slots=True)
class Reduced:
    """Y·v = s - B·i in the port voltages v alone, and the way back to all unknowns.

    ``held`` is Y with ``tiny``, the conductance TINY at every port; ``sources`` s, ``entry`` B; ``pick``
    gives terminal voltages from port voltages; ``inject`` is what a current out of each port adds.
    """

    system: DcSystem
    ports: Indices
    inner: Indices
    held: Array
    tiny: Array
    sources: Array
    entry: Array
    pick: Array
    inject: Array
    fold: Array | None
    back: Array
    triangle: Array

    @property
    def devices(self) -> int:
        """Number of transistors."""
        return len(self.pick) // 4

    def at_devices(self, v: Array) -> Array:
        """Voltages at the terminals, shape (rows, devices, 4), of port voltages (ports, rows)."""
        return (self.pick @ v).reshape(self.devices, 4, v.shape[1]).transpose(2, 0, 1)

    def jacobian(self, tangent: Array) -> Array:
        """What conductances (rows, devices, 4, 4) of devices add to the port matrix (ports, ports, rows)."""
        rows, size = len(tangent), len(self.ports)
        if self.fold is not None:
            return (self.fold @ tangent.reshape(rows, 16 * self.devices).T).reshape(size, size, rows)
        entry = self.entry.reshape(size, self.devices, 4).transpose(1, 0, 2)
        entered = (entry @ tangent).transpose(0, 2, 1, 3).reshape(rows, size, 4 * self.devices)
        return (entered @ self.pick).transpose(1, 2, 0)

    def all_unknowns(self, v: Array, currents: Array) -> Array:
        """All unknowns (rows, N), those that the elimination set aside included."""
        system = self.system
        side = system.sources[:, None] - system.matrix[:, self.ports] @ v - system.incidence @ currents
        unknowns = np.zeros((v.shape[1], system.layout.size))
        unknowns[:, self.ports] = v.T
        if len(self.inner):
            unknowns[:, self.inner] = np.linalg.solve(self.triangle, self.back @ side).T
        return unknowns


class OpenEquationsError(Exception):
    """The linear part leaves voltages of ``nodes`` and currents of ``branches`` open."""

    def __init__(self, nodes: Sequence[str], branches: Sequence[str]) -> None:
        super().__init__(", ".join([*nodes, *branches]))
        self.nodes, self.branches = tuple(nodes), tuple(branches)


def eliminate(system: DcSystem) -> Reduced:
    """Split off the unknowns that no device touches, by an orthogonal elimination of their columns.

    Raises OpenEquationsError where they are not determined.
    """
    touched = system.incidence.any(axis=1)
    ports, inner = np.flatnonzero(touched), np.flatnonzero(~touched)
    columns = system.matrix[:, inner]
    # Each column against its own size: one small resistance must not make other nodes look floating.
    size = np.abs(columns).max(axis=0, initial=0.0)
    full, triangle = np.linalg.qr(columns, mode="complete")
    diagonal = np.abs(np.diagonal(triangle))
    if np.any(diagonal <= np.maximum(_SINGULAR * size, _LEAST_CONDUCTANCE)):
        raise _left_open(system, columns, inner)
    keep, drop = full[:, len(inner) :], full[:, : len(inner)]
    entry, pick = keep.T @ system.incidence, system.incidence[ports].T
    inject = keep[ports].T
    return Reduced(
        system=system,
        ports=ports,
        inner=inner,
        held=keep.T @ system.matrix[:, ports] + TINY * inject,
        tiny=TINY * inject,
        sources=keep.T @ system.sources,
        entry=entry,
        pick=pick,
        inject=inject,
        fold=_fold(entry, pick),
        back=drop.T,
        triangle=triangle[: len(inner)],
    )


def _fold(entry: Array, pick: Array) -> Array | None:
    """The map from all devices' Jacobians to the change of the port matrix, as one matrix, if it is small.

    Column (device, i, j) holds what d current(i)/d voltage(j) adds to each entry: one product for a whole
    batch instead of two small ones a row.
    """
    devices, size = len(pick) // 4, pick.shape[1]
    if 16 * devices * size * size > _LARGEST_FOLD:
        return None
    by_device = entry.reshape(size, devices, 4), pick.reshape(devices, 4, size)
    folded: Array = np.einsum("eki,kjp->epkij", *by_device)
    return folded.reshape(size * size, 16 * devices)


def _left_open(system: DcSystem, columns: Array, inner: Indices) -> OpenEquationsError:
    """The unknowns that the equations leave open: those in the null vector of their columns."""
    null = np.abs(np.linalg.svd(columns)[2][-1])
    involved = [int(inner[i]) for i in np.flatnonzero(null > 0.1 * null.max())]
    names, count = (*system.layout.nodes, *system.layout.branches), len(system.layout.nodes)
    return OpenEquationsError(
        [names[i] for i in involved if i < count], [names[i] for i in involved if i >= count]
    )
