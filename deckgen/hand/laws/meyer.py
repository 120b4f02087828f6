"""Gate capacitances after J. E. Meyer, RCA Review 32 (1971), 42-63 (from memory), as SPICE has them."""

from __future__ import annotations

import numpy as np

from deckgen.hand.laws.base import Array
from deckgen.hand.laws.channel import Channel
from deckgen.hand.laws.parameters import SquareParameters

_LEAST_SATURATION_VOLTAGE = 0.025  # V: ngspice 39 shares Cgs and Cgd out by VDS against at least this


def gate_capacitances(parameters: SquareParameters, found: Channel) -> tuple[Array, Array, Array]:
    """Cgs, Cgd, Cgb [F]: Meyer's intrinsic parts plus overlaps."""
    near, far, bulk = _meyer(found.v_ov, found.v_ds, parameters.phi)
    source = np.where(found.swapped, far, near)
    drain = np.where(found.swapped, near, far)
    return (
        parameters.oxide * source + parameters.cgs_overlap,
        parameters.oxide * drain + parameters.cgd_overlap,
        parameters.oxide * bulk + parameters.cgb_overlap,
    )


def _meyer(v_ov: Array, v_ds: Array, phi: Array) -> tuple[Array, Array, Array]:
    """Meyer's gate capacitances to source, drain and bulk, as fractions of Cox·W·L.

    Saturation ⅔, 0, 0; triode by VDSsat and VDS; below threshold the gate sees the bulk, with the
    linear hand-over between VOV = -φ and 0 that SPICE takes.
    """
    channel = (2.0 / 3.0) * np.clip(1.0 + 2.0 * v_ov / phi, 0.0, 1.0)
    sat = np.maximum(v_ov, _LEAST_SATURATION_VOLTAGE)
    ds = np.minimum(v_ds, sat)
    to_source = channel * (1.0 - ((sat - ds) / (2.0 * sat - ds)) ** 2)
    to_drain = channel * (1.0 - (sat / (2.0 * sat - ds)) ** 2)
    return to_source, to_drain, np.clip(-v_ov / phi, 0.0, 1.0)
