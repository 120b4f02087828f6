"""The bias by closed form: a quadratic; the threshold is iterated where the source moves against the bulk."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from deckgen.circuit.model import display
from deckgen.circuit.region import Region, region_of
from deckgen.hand.formulas import bias as bias_formulas
from deckgen.hand.formulas import device as device_formulas
from deckgen.hand.laws.base import Array
from deckgen.hand.laws.parameters import SquareParameters
from deckgen.hand.reduce.dc import DcNet

_CLOSE = 1e-12
_ITERATIONS = 100
_ROUNDING = 1e-12


@dataclass(frozen=True, slots=True)
class Device:
    """Parameters of one transistor at its temperature, n-channel signs; ``sign`` is its polarity."""

    name: str
    sign: float
    k: float
    vto: float
    gamma: float
    phi: float
    lam: float
    ld: float


@dataclass(frozen=True, slots=True)
class QPoint:
    """A bias point: true voltages [V], overdrive, current; ``rounds`` of the threshold's iteration."""

    v_g: float
    v_s: float
    v_d: float
    vth: float
    v_ov: float
    i_d: float
    region: Region
    rounds: int


@dataclass(frozen=True, slots=True)
class Lines:
    """How the bias net ties VGS and VDS to the current, n-channel signs.

    VGS = ``v_gs`` - ID·``r_gs`` and VDS = ``v_ds`` - ID·``r_ds``; voltages [V], resistances [Ω].
    """

    v_gs: float
    v_ds: float
    r_gs: float
    r_ds: float


def device_of(name: str, parameters: SquareParameters, *, row: int = 0, number_of: int = 0) -> Device:
    """Prepared parameters of one transistor of one row, as plain floats."""

    def pick(array: Array) -> float:
        values = np.broadcast_to(array, np.broadcast_shapes(array.shape, parameters.k.shape))
        return float(values[row, number_of])

    return Device(
        name=display(name),
        sign=pick(parameters.sign),
        k=pick(parameters.k),
        vto=pick(parameters.vto),
        gamma=pick(parameters.gamma),
        phi=pick(parameters.phi),
        lam=pick(parameters.lambda_ro),
        ld=pick(parameters.ld),
    )


def lines_of(net: DcNet, sign: float) -> Lines:
    """Load lines of a bias net whose source terminal is held by resistors or fixed."""
    gate, source, drain = net.gate, net.source, net.drain
    return Lines(
        v_gs=sign * (gate.open_voltage - source.open_voltage),
        v_ds=sign
        * _not_rounding(drain.open_voltage - source.open_voltage, drain.open_voltage, source.open_voltage),
        r_gs=_not_rounding(source.rise - gate.rise, source.rise, gate.rise),
        r_ds=_not_rounding(source.rise - drain.rise, source.rise, drain.rise),
    )


def _not_rounding(difference: float, *terms: float) -> float:
    """A difference, or zero where it is no more than the rounding of its terms."""
    return difference if abs(difference) > _ROUNDING * max(map(abs, terms)) else 0.0


def solve(net: DcNet, device: Device) -> QPoint | None:
    """Q-point by closed form.

    None if it does not settle, where the supplies exchange drain and source, and where the net feeds the
    current back positively: no form is written there.
    """
    if net.forced is not None:
        current = device.sign * net.forced
        if not current > 0.0:
            return None
        return _iterated(net, device, lambda vth, rounds: _at_current(net, device, current, vth, rounds))
    lines = lines_of(net, device.sign)
    if lines.v_ds < 0.0 or not 0.0 <= lines.r_gs <= lines.r_ds * (1.0 + _ROUNDING):
        return None
    return _iterated(net, device, lambda vth, rounds: _on_lines(net, device, lines, vth, rounds))


def _iterated(net: DcNet, device: Device, at: Callable[[float, int], QPoint | None]) -> QPoint | None:
    """The point whose threshold is that of its own source-bulk voltage.

    The source sinks as the threshold rises, so there is one such point. A first round with VTO and a second
    with the threshold that follows lie on either side of it, or at it; from there by regula falsi with
    halved weights (M. Dowell, P. Jarratt, BIT 11, 1971, 168-174, from memory).
    """
    vth, ends, last = device.vto, dict[bool, tuple[float, float]](), False
    for rounds in range(1, _ITERATIONS + 1):
        point = at(vth, rounds)
        if point is None:
            return None
        gap = (
            device_formulas.threshold_voltage(
                vto=device.vto, gamma=device.gamma, phi=device.phi, v_sb=source_bulk(net, device, point)
            )
            - vth
        )
        if abs(gap) <= _CLOSE * max(1.0, abs(vth)):
            return point
        low = gap > 0.0
        if low is last and len(ends) == 2:  # the far end stays once more: it counts half from now on
            far, weight = ends[not low]
            ends[not low] = (far, 0.5 * weight)
        ends[low], last = (vth, gap), low
        if len(ends) < 2:
            vth += gap
        else:
            (below, up), (above, down) = ends[True], ends[False]
            vth = below + (above - below) * up / (up - down)
    return None


def _on_lines(net: DcNet, device: Device, lines: Lines, vth: float, rounds: int) -> QPoint:
    """Q-point for a given threshold: saturation assumed, checked, and redone in triode if it fails."""
    v_drive = lines.v_gs - vth
    v_ov = bias_formulas.overdrive_with_source_resistor(v_drive=v_drive, k=device.k, r_s=lines.r_gs)
    current = device_formulas.saturation_current(k=device.k, v_ov=v_ov)
    region = region_of(v_ov=v_ov, v_ds=lines.v_ds - current * lines.r_ds)
    if region in (Region.TRIODE, Region.REVERSED):
        current = bias_formulas.triode_current_with_resistors(
            v_drive=v_drive,
            v_supply=lines.v_ds,
            k=device.k,
            r_s=lines.r_gs,
            r_d=max(lines.r_ds - lines.r_gs, 0.0),
        )
        v_ov, region = v_drive - current * lines.r_gs, Region.TRIODE
    lift = device.sign * current
    v_g, v_s, v_d = (each.open_voltage + lift * each.rise for each in (net.gate, net.source, net.drain))
    return QPoint(v_g, v_s, v_d, vth, v_ov, current, region, rounds)


def _at_current(net: DcNet, device: Device, current: float, vth: float, rounds: int) -> QPoint | None:
    """Q-point for a given threshold with the current forced by a source in the source terminal."""
    s = device.sign
    v_g, v_d = (each.open_voltage + s * current * each.rise for each in (net.gate, net.drain))
    v_dg = s * (v_d - v_g) + vth
    v_ov = bias_formulas.overdrive_of_current(k=device.k, i_d=current)
    region = Region.SATURATION
    if v_ov + v_dg < v_ov:
        region = region_of(v_ov=v_ov, v_ds=v_ov + v_dg)
    if region is not Region.SATURATION:
        v_ov = bias_formulas.triode_overdrive_of_current(k=device.k, i_d=current, v_dg=v_dg)
        region = Region.TRIODE
    return QPoint(v_g, v_g - s * (vth + v_ov), v_d, vth, v_ov, current, region, rounds)


def source_bulk(net: DcNet, device: Device, point: QPoint) -> float:
    """VSB [V], n-channel sign; 0 with the bulk at the source."""
    return 0.0 if net.bulk is None else device.sign * (point.v_s - net.bulk)
