"""What a transistor does, from the graph of its network; names play no part."""

from __future__ import annotations

from enum import StrEnum

from deckgen.hand.reduce import SignalNet


class Role(StrEnum):
    """Roles that have closed forms; ``unrecognised`` is solved by nodal analysis alone."""

    COMMON_SOURCE = "common-source"
    COMMON_SOURCE_DEGENERATED = "common-source-degenerated"
    FOLLOWER = "follower"
    UNRECOGNISED = "unrecognised"


def role_of(net: SignalNet | None) -> Role:
    """Role of the one transistor of a reduced network."""
    if net is None:
        return Role.UNRECOGNISED
    if net.output == "source":
        return Role.FOLLOWER if net.drain_grounded else Role.UNRECOGNISED
    if net.source_grounded:
        return Role.COMMON_SOURCE
    return Role.COMMON_SOURCE_DEGENERATED if net.source else Role.UNRECOGNISED
