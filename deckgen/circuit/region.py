"""Regions of a square-law transistor, by the one definition that hand and simulated values share."""

from __future__ import annotations

from enum import StrEnum


class Region(StrEnum):
    """Where a transistor works; ``reversed`` is drain and source with exchanged roles."""

    CUTOFF = "cut-off"
    TRIODE = "triode"
    SATURATION = "saturation"
    REVERSED = "reversed"


REVERSED_BELOW = -1e-9
"""A drain-source voltage this little below zero [V] is zero: it is the simulator's own tolerance (vntol)."""


def region_of(*, v_ov: float, v_ds: float) -> Region:
    """Region of a square-law device from its overdrive and drain-source voltage [V].

    Both are counted positive in normal conduction (multiplied by -1 for a p-channel device).
    Saturation begins at VDS = VOV, both edges included (H. Shichman, D. A. Hodges 1968). With VDS below
    zero the drain plays the source: its overdrive VOV - VDS decides (body effect at the drain aside).
    """
    if v_ov - min(v_ds, 0.0) <= 0.0:
        return Region.CUTOFF
    if v_ds < REVERSED_BELOW:
        return Region.REVERSED
    return Region.SATURATION if v_ds >= v_ov else Region.TRIODE
