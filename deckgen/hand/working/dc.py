"""Bias by closed form: gate divider, source resistor, drain resistor, one transistor."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from deckgen.circuit.model import GROUND, display
from deckgen.circuit.region import Region, region_of
from deckgen.hand.formulas import bias as bias_formulas
from deckgen.hand.formulas import device as device_formulas
from deckgen.hand.formulas.device import SHICHMAN_HODGES, STRONG_INVERSION
from deckgen.hand.laws.base import Array
from deckgen.hand.laws.square import SquareParameters
from deckgen.hand.reduce import DcNet, DcTerminal
from deckgen.hand.working.sheet import Sheet, shunt_formula

_CLOSE = 1e-12
_ITERATIONS = 300


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
class _Drive:
    """Thevenin equivalents that gate, source and drain see: voltage [V] and resistance [Ω]."""

    gate: float
    source: float
    drain: float
    r_s: float
    r_d: float
    bulk: float | None


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


def _equivalent(terminal: DcTerminal) -> tuple[float, float]:
    """Open-circuit voltage and resistance of a terminal."""
    if terminal.fixed is not None:
        return terminal.fixed, 0.0
    resistances = tuple(pull.part.value for pull in terminal.pulls)
    voltage = bias_formulas.meeting_voltage(
        voltages=tuple(pull.voltage for pull in terminal.pulls), resistances=resistances
    )
    return voltage, 1.0 / sum(1.0 / r for r in resistances)


def solve(net: DcNet, device: Device) -> QPoint | None:
    """Q-point by closed form, the threshold iterated with the body effect.

    None if it does not settle, and where the supplies exchange drain and source: no form is written there.
    """
    v_g, _ = _equivalent(net.gate)
    v_s, r_s = _equivalent(net.source)
    v_d, r_d = _equivalent(net.drain)
    drive = _Drive(v_g, v_s, v_d, r_s, r_d, net.bulk)
    if device.sign * (v_d - v_s) < 0.0:
        return None
    vth, damping, last = device.vto, 1.0, float("inf")
    for rounds in range(1, _ITERATIONS + 1):
        point = _at_threshold(drive, device, vth, rounds)
        v_sb = 0.0 if drive.bulk is None else device.sign * (point.v_s - drive.bulk)
        wanted = device_formulas.threshold_voltage(
            vto=device.vto, gamma=device.gamma, phi=device.phi, v_sb=v_sb
        )
        change = abs(wanted - vth)
        if change <= _CLOSE * max(1.0, abs(wanted)):
            return point
        damping = damping if change < last else 0.5 * damping
        vth, last = vth + damping * (wanted - vth), change
    return None


def _at_threshold(drive: _Drive, device: Device, vth: float, rounds: int) -> QPoint:
    """Q-point for a given threshold: saturation assumed, checked, and redone in triode if it fails."""
    s = device.sign
    v_drive = s * (drive.gate - drive.source) - vth
    supply = s * (drive.drain - drive.source)
    v_ov = bias_formulas.overdrive_with_source_resistor(v_drive=v_drive, k=device.k, r_s=drive.r_s)
    current = device_formulas.saturation_current(k=device.k, v_ov=v_ov)
    v_ds = supply - current * (drive.r_s + drive.r_d)
    region = region_of(v_ov=v_ov, v_ds=v_ds)
    if region in (Region.TRIODE, Region.REVERSED):
        current = bias_formulas.triode_current_with_resistors(
            v_drive=v_drive, v_supply=supply, k=device.k, r_s=drive.r_s, r_d=drive.r_d
        )
        v_ov, region = v_drive - current * drive.r_s, Region.TRIODE
    return QPoint(
        v_g=drive.gate,
        v_s=drive.source + s * current * drive.r_s,
        v_d=drive.drain - s * current * drive.r_d,
        vth=vth,
        v_ov=v_ov,
        i_d=current,
        region=region,
        rounds=rounds,
    )


def write_bias(sheet: Sheet, net: DcNet, device: Device, point: QPoint) -> None:
    """The steps from the gate voltage to the region check, and the small-signal conductances."""
    _write_gate(sheet, net, point)
    _write_threshold(sheet, net, device, point)
    _write_current(sheet, net, device, point)
    _write_voltages(sheet, net, device, point)
    _write_conductances(sheet, device, point, net)


def _write_gate(sheet: Sheet, net: DcNet, point: QPoint) -> None:
    # The highest voltage first, so that a plain divider is recognised in either order.
    pulls = sorted(net.gate.pulls, key=lambda pull: -abs(pull.voltage))
    source = "voltage divider"
    if net.gate.fixed is not None:
        formula, numbers, source = "fixed by a source", sheet.number(point.v_g, "V"), "Kirchhoff"
    elif len(pulls) == 2 and pulls[1].node == GROUND:
        upper, lower = (pull.part.name.upper() for pull in pulls)
        formula = f"{pulls[0].node.upper()}·{lower}/({upper}+{lower})"
        r_upper, r_lower = (sheet.number(pull.part.value, "Ω") for pull in pulls)
        numbers = f"{sheet.number(pulls[0].voltage, 'V')}·{r_lower}/({r_upper} + {r_lower})"
    else:
        formula = "Σ(V/R)/Σ(1/R) over " + ", ".join(pull.part.name.upper() for pull in pulls)
        numbers = ", ".join(
            f"{sheet.number(p.voltage, 'V')} by {sheet.number(p.part.value, 'Ω')}" for p in pulls
        )
        source = "Millman 1940"
    name = f"V({net.gate.node})"
    sheet.add(name, point.v_g, "V", formula=formula, numbers=numbers, source=source, quantity=name)


def _write_threshold(sheet: Sheet, net: DcNet, device: Device, point: QPoint) -> None:
    name = f"VTH({device.name})"
    vto, vth = device.sign * device.vto, device.sign * point.vth
    if device.gamma <= 0.0 or net.bulk is None:
        why = "bulk at the source" if net.bulk is None else "γ = 0"
        sheet.add(
            name,
            vth,
            "V",
            formula="VTO",
            numbers=f"{sheet.number(vto, 'V')}, {why}",
            source=SHICHMAN_HODGES,
            quantity=name,
        )
        return
    v_sb = _source_bulk(net, device, point)
    plus = "+" if device.sign > 0 else "-"
    bias = "VSB" if device.sign > 0 else "VBS"
    note = f"iterated with VS, {point.rounds} rounds" if point.rounds > 2 else None
    sheet.add(
        name,
        vth,
        "V",
        formula=f"VTO {plus} γ(√(φ+{bias}) - √φ)",
        numbers=(
            f"{sheet.number(vto, 'V')} {plus} {device.gamma:.4g}(√({device.phi:.4g} + {v_sb:.4g})"
            f" - √{device.phi:.4g})"
        ),
        source=SHICHMAN_HODGES,
        quantity=name,
        note=note,
    )


def _write_current(sheet: Sheet, net: DcNet, device: Device, point: QPoint) -> None:
    mosfet = net.device
    times = f"·{mosfet.m:g}" if mosfet.m > 1.0 else ""
    length = mosfet.l - 2.0 * device.ld
    kp = device.k * length / (mosfet.w * mosfet.m)
    sheet.add(
        "k",
        device.k,
        "A/V²",
        formula="KP·W/(L-2LD)" + ("·M" if times else ""),
        numbers=(
            f"{sheet.number(kp, 'A/V²')}·{sheet.number(mosfet.w, 'm')}/{sheet.number(length, 'm')}{times}"
        ),
        source=SHICHMAN_HODGES,
        note="ID = ½·k·VOV²; half the textbooks write K = k/2",
    )
    if point.region is Region.TRIODE:
        _write_triode(sheet, device, point)
        return
    name = f"VOV({device.name})"
    v_s, r_s = _equivalent(net.source)
    vth = device.sign * point.vth
    normal = device.sign > 0
    words = "VG - VSS - VTH" if normal else "VSS - VG + VTH"
    high, low = (point.v_g, v_s) if normal else (v_s, point.v_g)
    mark = "-" if (vth > 0) == normal else "+"
    drive = f"{sheet.number(high, 'V')} - {sheet.number(low, 'V')} {mark} {sheet.number(abs(vth), 'V')}"
    if r_s > 0.0:
        parts = [pull.part for pull in net.source.pulls]
        names = shunt_formula(parts)
        formula = f"2·Vd/(1 + √(1 + 2·k·RS·Vd)), Vd = {words}"
        numbers = f"Vd = {drive}, RS = {'' if names == 'RS' else names + ' = '}{sheet.shunt(parts)}"
    else:
        formula, numbers = words, drive
    sheet.add(
        name,
        point.v_ov,
        "V",
        formula=formula,
        numbers=numbers,
        source="Sedra & Smith, MOS biasing",
        quantity=name,
        note=STRONG_INVERSION.note(point.v_ov),
    )
    current = f"ID({device.name})"
    sheet.add(
        current,
        point.i_d,
        "A",
        formula="½·k·VOV²",
        numbers=f"½·{sheet.number(device.k, 'A/V²')}·({sheet.number(point.v_ov, 'V')})²",
        source=SHICHMAN_HODGES,
        quantity=current,
        note="cut off: VOV is not above zero" if point.region is Region.CUTOFF else None,
    )


def _write_triode(sheet: Sheet, device: Device, point: QPoint) -> None:
    current = f"ID({device.name})"
    sheet.add(
        current,
        point.i_d,
        "A",
        formula="k(VOV·VDS - ½VDS²) with the load line",
        numbers=f"quadratic, k = {sheet.number(device.k, 'A/V²')}",
        source=SHICHMAN_HODGES,
        quantity=current,
        note="saturation does not hold (VDS would be below VOV): redone in triode",
    )
    name = f"VOV({device.name})"
    sheet.add(
        name,
        point.v_ov,
        "V",
        formula="|VGS - VTH|",
        numbers=(
            f"|{sheet.number(point.v_g - point.v_s, 'V')} - {sheet.number(device.sign * point.vth, 'V')}|"
        ),
        source=SHICHMAN_HODGES,
        quantity=name,
    )


def _write_voltages(sheet: Sheet, net: DcNet, device: Device, point: QPoint) -> None:
    for terminal, value, sign in ((net.source, point.v_s, device.sign), (net.drain, point.v_d, -device.sign)):
        if terminal.fixed is not None:
            continue
        name = f"V({terminal.node})"
        formula, numbers = _drop(sheet, terminal, "+" if sign > 0 else "-", point.i_d)
        sheet.add(name, value, "V", formula=formula, numbers=numbers, source="Ohm", quantity=name)
    for name, high, low in (("VGS", point.v_g, point.v_s), ("VDS", point.v_d, point.v_s)):
        label = f"{name}({device.name})"
        sheet.add(
            label,
            high - low,
            "V",
            formula=f"V{name[1]} - VS",
            numbers=f"{sheet.number(high, 'V')} - {sheet.number(low, 'V')}",
            source="Kirchhoff",
            quantity=label,
        )
    v_ds = device.sign * (point.v_d - point.v_s)
    sheet.add(
        "margin",
        v_ds - point.v_ov,
        "V",
        formula="|VDS| - VOV",
        numbers=f"{sheet.number(v_ds, 'V')} - {sheet.number(point.v_ov, 'V')}",
        source=SHICHMAN_HODGES,
        note=f"{point.region}",
    )


def _drop(sheet: Sheet, terminal: DcTerminal, mark: str, current: float) -> tuple[str, str]:
    """Formula and numbers of a terminal's voltage: where its resistors end, and the drop across them."""
    parts = [pull.part for pull in terminal.pulls]
    voltage, _ = _equivalent(terminal)
    ends = {pull.node for pull in terminal.pulls}
    formula = f"ID·{shunt_formula(parts)}"
    numbers = f"{sheet.number(current, 'A')}·{sheet.shunt(parts)}"
    if ends == {GROUND}:
        return (formula, numbers) if mark == "+" else (f"-{formula}", f"-{numbers}")
    far = ends.pop().upper() if len(ends) == 1 else "V0"
    note = "" if far != "V0" else ", V0 without ID"
    return f"{far} {mark} {formula}{note}", f"{sheet.number(voltage, 'V')} {mark} {numbers}"


def _write_conductances(sheet: Sheet, device: Device, point: QPoint, net: DcNet) -> None:
    v_ds = max(device.sign * (point.v_d - point.v_s), 0.0)
    triode = point.region is Region.TRIODE
    acting = v_ds if triode else max(point.v_ov, 0.0)
    gm = device_formulas.transconductance(k=device.k, v_ov=point.v_ov, v_ds=v_ds)
    name = f"gm({device.name})"
    sheet.add(
        name,
        gm,
        "S",
        formula="k·VDS" if triode else "k·VOV",
        numbers=f"{sheet.number(device.k, 'A/V²')}·{sheet.number(acting, 'V')}",
        source=SHICHMAN_HODGES,
        quantity=name,
    )
    name = f"gds({device.name})"
    gds = device_formulas.output_conductance(k=device.k, lam=device.lam, v_ov=point.v_ov, v_ds=v_ds)
    sheet.add(
        name,
        gds,
        "S",
        formula="λ·ID + k(VOV - VDS)" if triode else "λ·½·k·VOV²",
        numbers=f"{device.lam:.4g}/V·{sheet.number(point.i_d, 'A')}"
        + (f" + {sheet.number(device.k, 'A/V²')}·{sheet.number(point.v_ov - v_ds, 'V')}" if triode else ""),
        source=SHICHMAN_HODGES,
        quantity=name,
        note=f"ro = {sheet.number(1.0 / gds, 'Ω')}, kept in the gain" if gds > 0.0 else None,
    )
    v_sb = _source_bulk(net, device, point)
    gmb = device_formulas.bulk_transconductance(gm=gm, gamma=device.gamma, phi=device.phi, v_sb=v_sb)
    name = f"gmb({device.name})"
    sheet.add(
        name,
        gmb,
        "S",
        formula="gm·γ/(2√(φ+VSB))",
        numbers=f"{sheet.number(gm, 'S')}·{device.gamma:.4g}/(2√({device.phi:.4g} + {v_sb:.4g}))",
        source=SHICHMAN_HODGES,
        quantity=name,
    )


def _source_bulk(net: DcNet, device: Device, point: QPoint) -> float:
    """VSB [V], n-channel sign; 0 with the bulk at the source."""
    return 0.0 if net.bulk is None else device.sign * (point.v_s - net.bulk)
