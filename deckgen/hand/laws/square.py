"""The square law as SPICE's level 1 has it: channel, bulk junctions, series resistances, capacitances.

What each part does, and where it comes from, stands in the module of that part.
"""

from __future__ import annotations

import numpy as np

from deckgen.hand.effects import Effect
from deckgen.hand.laws import junctions as bulk
from deckgen.hand.laws import level1, series
from deckgen.hand.laws.base import Array, Evaluation, Mask
from deckgen.hand.laws.channel import channel, slopes, small_signal, threshold
from deckgen.hand.laws.meyer import gate_capacitances
from deckgen.hand.laws.parameters import SquareParameters, prepare

DEFAULTS = level1.DEFAULTS

CAPACITORS = (("cgs", 1, 5), ("cgd", 1, 4), ("cgb", 1, 3), ("cbd", 3, 4), ("cbs", 3, 5))
"""Name of each capacitance and its terminals: d 0, g 1, s 2, b 3, and behind the resistances d' 4, s' 5."""


class SquareLaw:
    """Square law behind the interface of ``DeviceLaw``."""

    name = "square"
    terminals = ("d", "g", "s", "b")
    inner = (("d'", 0), ("s'", 2))
    capacitors = CAPACITORS
    channel_pins = (4, 1, 5, 3)
    """Terminals next to the channel: inner drain, gate, inner source, bulk."""

    effects = frozenset(
        {
            Effect.CHANNEL_LENGTH_MODULATION,
            Effect.OUTPUT_RESISTANCE,
            Effect.BODY_EFFECT,
            Effect.SERIES_RESISTANCE,
            Effect.BULK_JUNCTIONS,
        }
    )

    completed = staticmethod(level1.completed)
    transconductance = staticmethod(level1.transconductance)
    prepare = staticmethod(prepare)

    def evaluate(self, parameters: SquareParameters, voltages: Array) -> Evaluation:
        """Currents into drain, gate, source, bulk and their derivatives, in any region."""
        inside = series.inner_voltages(parameters, voltages)
        found = _evaluate(parameters, inside)
        return found if inside is voltages else series.outside(parameters, found)

    def linearize(self, parameters: SquareParameters, voltages: Array) -> Array:
        """Conductances at the Q-point between all six terminals, the inner ones included."""
        inside = series.inner_voltages(parameters, voltages)
        found = channel(parameters, inside)
        near = _with_junctions(small_signal(parameters, found), bulk.junctions(parameters, inside))
        whole = np.zeros((*near.shape[:-2], 6, 6))
        whole[..., np.array(self.channel_pins)[:, None], self.channel_pins] = near
        for resistance, outer, inner in ((parameters.r_drain, 0, 4), (parameters.r_source, 2, 5)):
            there = resistance > 0.0
            conductance = np.where(there, 1.0 / np.where(there, resistance, 1.0), 0.0)
            whole[..., outer, outer] += conductance
            whole[..., inner, inner] += conductance
            whole[..., outer, inner] -= conductance
            whole[..., inner, outer] -= conductance
        return whole

    def separate(self, parameters: SquareParameters) -> Mask:
        """Which inner terminals are nodes of their own, shape (…, 2)."""
        return np.stack(np.broadcast_arrays(parameters.r_drain > 0.0, parameters.r_source > 0.0), axis=-1)

    def capacitances(self, parameters: SquareParameters, voltages: Array) -> Array:
        """Cgs, Cgd, Cgb, Cbd, Cbs [F], shape (…, 5)."""
        inside = series.inner_voltages(parameters, voltages)
        gate = gate_capacitances(parameters, channel(parameters, inside))
        junction = bulk.junction_capacitances(parameters, inside)
        return np.stack(np.broadcast_arrays(*gate, *junction), axis=-1)

    def limit(self, parameters: SquareParameters, old: Array, new: Array) -> Array:
        """Pull VGS, VDS and the bulk back so that one Newton step neither overshoots nor reverses the device.

        A square law is followed well from above; what must be stopped is a step from cut-off deep
        into conduction, a drain that jumps below the source, and a junction deep in conduction.
        """
        v_gs, v_ds = new[..., 1] - new[..., 2], new[..., 0] - new[..., 2]
        old_gs, old_ds = old[..., 1] - old[..., 2], old[..., 0] - old[..., 2]
        s = parameters.sign
        reach = np.maximum(1.0, 2.0 * np.abs(s * old_gs - parameters.vto))
        gs = old_gs + np.clip(v_gs - old_gs, -reach, reach)
        span = np.maximum(1.0, 2.0 * np.abs(old_ds))
        ds = old_ds + np.clip(v_ds - old_ds, -span, span)
        ds = np.where((s * old_ds > 0.0) & (s * ds < -0.5), -0.5 * s, ds)
        limited = np.array(new)
        # Only where a limit acted: elsewhere the addition would leave rounding errors behind.
        limited[..., 1] = np.where(np.abs(v_gs - old_gs) > reach, new[..., 2] + gs, new[..., 1])
        held = (np.abs(v_ds - old_ds) > span) | ((s * old_ds > 0.0) & (s * v_ds < -0.5))
        limited[..., 0] = np.where(held, new[..., 2] + ds, new[..., 0])
        return bulk.limited(parameters, old, limited)

    def report(self, parameters: SquareParameters, voltages: Array) -> dict[str, Array]:
        """Quantities at terminal voltages of shape (…, 4), with the trade's signs.

        ID is the current into the drain, junction and all; VGS, VDS are those of the outer terminals.
        VTH, VOV, gm, gds, gmb are those of the channel, and so is ``VDS'``, s·VDS behind the series
        resistances, which says with VOV in what region it works.
        """
        inside = series.inner_voltages(parameters, voltages)
        found = channel(parameters, inside)
        row = small_signal(parameters, found)
        s = parameters.sign
        vth = threshold(parameters, s * (inside[..., 2] - inside[..., 3]))
        forward = np.where(found.swapped, -found.current, found.current)
        return {
            "ID": forward - bulk.junctions(parameters, inside).to_drain,
            "VGS": voltages[..., 1] - voltages[..., 2],
            "VDS": voltages[..., 0] - voltages[..., 2],
            "VTH": s * vth,
            "VOV": s * (inside[..., 1] - inside[..., 2]) - vth,
            "VDS'": s * (inside[..., 0] - inside[..., 2]),
            "gm": row[..., 1],
            "gds": row[..., 0],
            "gmb": row[..., 3],
        }


def _evaluate(parameters: SquareParameters, voltages: Array) -> Evaluation:
    """Currents and their derivatives by the voltages next to the channel."""
    found = channel(parameters, voltages)
    diodes = bulk.junctions(parameters, voltages)
    forward = np.where(found.swapped, -found.current, found.current)
    s = parameters.sign
    currents = np.empty((*found.v_ds.shape, 4))
    currents[..., 0] = s * (forward - diodes.to_drain)
    currents[..., 1] = 0.0
    currents[..., 2] = -s * (forward + diodes.to_source)
    currents[..., 3] = s * (diodes.to_drain + diodes.to_source)
    return Evaluation(currents, _with_junctions(slopes(found), diodes))


def _with_junctions(row: Array, diodes: bulk.Junctions) -> Array:
    """D currents / d voltages (…, 4, 4) of channel and junctions."""
    matrix = np.zeros((*row.shape, 4))
    matrix[..., 0, :] = row
    matrix[..., 2, :] = -row
    for pin, slope in ((0, diodes.g_drain), (2, diodes.g_source)):
        matrix[..., pin, pin] += slope
        matrix[..., pin, 3] -= slope
        matrix[..., 3, pin] = -slope
        matrix[..., 3, 3] += slope
    return matrix
