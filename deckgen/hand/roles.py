"""What a transistor does, from the graph of its network and its Q-point; names play no part."""

from __future__ import annotations

from enum import StrEnum

from deckgen.circuit.region import Region
from deckgen.hand.reduce.dc import DRAIN, GATE, SOURCE
from deckgen.hand.reduce.signal import SignalNet


class Role(StrEnum):
    """Roles that have closed forms; ``unrecognised`` is solved by nodal analysis alone."""

    COMMON_SOURCE = "common-source"
    COMMON_SOURCE_DEGENERATED = "common-source-degenerated"
    FOLLOWER = "follower"
    COMMON_GATE = "common-gate"
    DIODE_CONNECTED = "diode-connected"
    RESISTIVE = "resistive"
    CUT_OFF = "cut-off"
    UNRECOGNISED = "unrecognised"


def role_of(net: SignalNet | None, region: Region) -> Role:
    """Role of the one transistor of a reduced network at its Q-point.

    A channel in triode whose gate is quiet is a resistor; one that is cut off is an open switch. Gate and
    drain at signal ground make a diode of the source, as gate and drain at one node make one of that.
    """
    if region is Region.CUTOFF:
        return Role.CUT_OFF
    if net is None or region is Region.REVERSED:
        return Role.UNRECOGNISED
    if net.tied:
        return Role.DIODE_CONNECTED
    if net.entry == GATE:
        if net.exit == SOURCE:
            return Role.FOLLOWER
        if SOURCE in net.grounded:
            return Role.COMMON_SOURCE
        return Role.COMMON_SOURCE_DEGENERATED
    if region is Region.TRIODE:
        return Role.RESISTIVE
    if {GATE, DRAIN} <= net.grounded:
        return Role.DIODE_CONNECTED
    return Role.COMMON_GATE if (net.entry, net.exit) == (SOURCE, DRAIN) else Role.UNRECOGNISED
