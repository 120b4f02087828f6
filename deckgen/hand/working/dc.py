"""The bias written down: gate voltage, threshold, overdrive, current, terminal voltages."""

from __future__ import annotations

from collections.abc import Sequence

from deckgen.circuit.model import GROUND
from deckgen.circuit.region import Region
from deckgen.hand.formulas.device import SHICHMAN_HODGES, STRONG_INVERSION
from deckgen.hand.reduce.dc import DcNet, DcTerminal, Pull
from deckgen.hand.reduce.resistance import Resistance, in_parallel, in_series
from deckgen.hand.working.qpoint import Device, QPoint, lines_of, source_bulk
from deckgen.hand.working.sheet import Sheet

BIASING = "Sedra & Smith, MOS biasing"


def write_bias(sheet: Sheet, net: DcNet, device: Device, point: QPoint) -> None:
    """The steps from the gate voltage to the region check."""
    if _gate_is_free(net):
        _write_gate(sheet, net.gate, point.v_g)
    _write_threshold(sheet, net, device, point)
    _write_k(sheet, net, device)
    if net.forced is not None:
        _write_forced(sheet, net, device, point)
    elif point.region is Region.TRIODE:
        _write_triode(sheet, device, point)
    else:
        _write_overdrive(sheet, net, device, point)
    _write_voltages(sheet, net, device, point)


def _gate_is_free(net: DcNet) -> bool:
    """Whether the gate's voltage does not depend on the drain current."""
    return net.gate.fixed is not None or not (net.tied or net.coupled or net.feedback is not None)


def _follows_drain(net: DcNet) -> bool:
    """Whether the gate has the drain's voltage: tied to it, or by a resistor without current."""
    alone = net.feedback is not None and not net.gate.pulls and not abs(net.gate.current) > 0.0
    return not net.coupled and (net.tied or alone)


def _write_gate(sheet: Sheet, gate: DcTerminal, v_g: float) -> None:
    # The highest voltage first, so that a plain divider is recognised in either order.
    pulls = sorted(gate.pulls, key=lambda pull: -abs(pull.voltage))
    source = "voltage divider"
    if gate.fixed is not None:
        formula, numbers, source = "fixed by a source", sheet.number(v_g, "V"), "Kirchhoff"
    elif abs(gate.current) > 0.0 or len(pulls) > 2:
        formula, numbers, source = *_meeting(sheet, gate), "Millman 1940"
    elif len(pulls) == 1:
        formula, source = f"{_rail(pulls[0])}, no gate current in {pulls[0].resistance.formula}", "Kirchhoff"
        numbers = sheet.number(pulls[0].voltage, "V")
    else:
        formula, numbers = _divider(sheet, pulls)
    grounded = gate.node == GROUND
    name = "VG" if grounded else f"V({gate.node})"
    quantity = None if grounded else name
    sheet.add(name, v_g, "V", formula=formula, numbers=numbers, source=source, quantity=quantity)


def _rail(pull: Pull) -> str:
    return "0 V" if pull.node == GROUND else pull.node.upper()


def _divider(sheet: Sheet, pulls: Sequence[Pull]) -> tuple[str, str]:
    """Formula and numbers of a node between two resistors."""
    (upper, lower) = (f"({r.formula})" if r.joint == "series" else r.formula
                      for r in (pull.resistance for pull in pulls))  # fmt: skip
    share, shares = (
        f"{lower}/({upper}+{lower})",
        [
            f"({text})" if pull.resistance.joint in ("series", "parallel") else text
            for pull in pulls
            for text in (pull.resistance.numbers(sheet.number),)
        ],
    )
    numbers = f"{shares[1]}/({shares[0]} + {shares[1]})"
    high, low = (sheet.number(pull.voltage, "V") for pull in pulls)
    if pulls[1].node == GROUND:
        return f"{_rail(pulls[0])}·{share}", f"{high}·{numbers}"
    first, second = _rail(pulls[0]), _rail(pulls[1])
    return f"{second} + ({first} - {second})·{share}", f"{low} + ({high} - {low})·{numbers}"


def _meeting(sheet: Sheet, terminal: DcTerminal) -> tuple[str, str]:
    """Formula and numbers of a node where resistors and currents meet."""
    formula = "Σ(V/R)/Σ(1/R) over " + ", ".join(pull.resistance.formula for pull in terminal.pulls)
    told = [
        f"{sheet.number(pull.voltage, 'V')} by {pull.resistance.numbers(sheet.number)}"
        for pull in terminal.pulls
    ]
    if abs(terminal.current) > 0.0:
        formula = formula.replace("Σ(V/R)/", "(Σ(V/R) + I)/", 1)
        told.append(f"I = {sheet.number(terminal.current, 'A')}")
    return formula, ", ".join(told)


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
    v_sb = source_bulk(net, device, point)
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


def _write_k(sheet: Sheet, net: DcNet, device: Device) -> None:
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


def _write_overdrive(sheet: Sheet, net: DcNet, device: Device, point: QPoint) -> None:
    """VOV from the load line of the gate, and the current that it gives."""
    name, (formula, numbers) = f"VOV({device.name})", _overdrive(sheet, net, device, point)
    sheet.add(
        name,
        point.v_ov,
        "V",
        formula=formula,
        numbers=numbers,
        source=BIASING,
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


_QUADRATIC = "2·Vd/(1 + √(1 + 2·k·{r}·Vd)), Vd = {words}"


def _overdrive(sheet: Sheet, net: DcNet, device: Device, point: QPoint) -> tuple[str, str]:
    lines, normal = lines_of(net, device.sign), device.sign > 0
    vth = device.sign * point.vth
    mark = "-" if (vth > 0) == normal else "+"
    less = f"{mark} {sheet.number(abs(vth), 'V')}"
    if not (_gate_is_free(net) or _follows_drain(net)):
        words = "VGS0 - VTH" if normal else "VTH - VGS0"
        drive = f"{sheet.number(device.sign * lines.v_gs, 'V')}, VTH = {sheet.number(vth, 'V')}"
        numbers = f"VGS0 = {drive}, R = {sheet.number(lines.r_gs, 'Ω')} (VGS without ID; its loss per ampere)"
        return _QUADRATIC.format(r="R", words=words), numbers
    own = _pulled(net.source)
    top, source = net.drain if _follows_drain(net) else net.gate, net.source
    gate = "VDD" if _follows_drain(net) else "VG"
    words = f"{gate} - VSS - VTH" if normal else f"VSS - {gate} + VTH"
    high, low = (top, source) if normal else (source, top)
    drive = f"{sheet.number(high.open_voltage, 'V')} - {sheet.number(low.open_voltage, 'V')} {less}"
    whole = in_series(_pulled(net.drain), own) if _follows_drain(net) else own
    if whole is None or not lines.r_gs > 0.0:
        return words, drive
    letter = "R" if _follows_drain(net) else "RS"
    named = "" if whole.formula == letter else f"{whole.formula} = "
    return _QUADRATIC.format(r=letter, words=words), (
        f"Vd = {drive}, {letter} = {named}{whole.numbers(sheet.number)}"
    )


def _pulled(terminal: DcTerminal) -> Resistance | None:
    """All resistances of a terminal in parallel."""
    return in_parallel(*(pull.resistance for pull in terminal.pulls))


def _write_forced(sheet: Sheet, net: DcNet, device: Device, point: QPoint) -> None:
    """The current that a source takes from the source terminal, and the overdrive it needs."""
    name = f"ID({device.name})"
    sheet.add(
        name,
        point.i_d,
        "A",
        formula="current source in the source",
        numbers=sheet.number(point.i_d, "A"),
        source="Kirchhoff",
        quantity=name,
    )
    triode = point.region is Region.TRIODE
    v_dg = device.sign * (point.v_d - point.v_g) + point.vth
    name = f"VOV({device.name})"
    sheet.add(
        name,
        point.v_ov,
        "V",
        formula="√(2·ID/k + VDG²), VDG = |VD - VG| + VTH" if triode else "√(2·ID/k)",
        numbers=f"√(2·{sheet.number(point.i_d, 'A')}/{sheet.number(device.k, 'A/V²')}"
        + (f" + ({sheet.number(v_dg, 'V')})²)" if triode else ")"),
        source=SHICHMAN_HODGES,
        quantity=name,
        note="saturation does not hold (VDS would be below VOV): redone in triode"
        if triode
        else STRONG_INVERSION.note(point.v_ov),
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
    """Voltages of source, drain, and of a gate that follows the drain; then VGS, VDS and the margin."""
    rising, falling = ("+", "-") if device.sign > 0 else ("-", "+")
    if net.forced is not None:
        _write_lifted_source(sheet, net, device, point)
    elif net.source.fixed is None:
        _write_terminal(sheet, net.source, point.v_s, rising, point.i_d, plain=not net.coupled)
    if net.drain.fixed is None:
        plain = not net.coupled and (net.feedback is None or _follows_drain(net))
        _write_terminal(sheet, net.drain, point.v_d, falling, point.i_d, plain=plain)
    if not _gate_is_free(net) and not net.tied:
        _write_dependent_gate(sheet, net, point)
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


def _write_lifted_source(sheet: Sheet, net: DcNet, device: Device, point: QPoint) -> None:
    name = f"V({net.source.node})"
    sheet.add(
        name,
        point.v_s,
        "V",
        formula="VG - VTH - VOV" if device.sign > 0 else "VG - VTH + VOV",
        numbers=f"{sheet.number(point.v_g, 'V')} {'-' if device.sign * point.vth > 0 else '+'} "
        f"{sheet.number(abs(point.vth), 'V')} {'-' if device.sign > 0 else '+'} "
        f"{sheet.number(point.v_ov, 'V')}",
        source="Kirchhoff",
        quantity=name,
    )


def _write_dependent_gate(sheet: Sheet, net: DcNet, point: QPoint) -> None:
    name = f"V({net.gate.node})"
    if _follows_drain(net) and net.feedback is not None:
        formula, numbers = f"VD, no gate current in {net.feedback.formula}", sheet.number(point.v_d, "V")
    else:
        formula = "VG0 + r·ID, VG0 without ID"
        numbers = f"VG0 = {sheet.number(net.gate.open_voltage, 'V')}, r = {sheet.number(net.gate.rise, 'Ω')}"
    sheet.add(name, point.v_g, "V", formula=formula, numbers=numbers, source="Kirchhoff", quantity=name)


def _write_terminal(
    sheet: Sheet, terminal: DcTerminal, value: float, mark: str, current: float, *, plain: bool
) -> None:
    """V = V0 ± ID·R: where its resistances end, and the drop across them."""
    name, whole = f"V({terminal.node})", _pulled(terminal)
    drop, shown = sheet.number(current, "A"), sheet.number(abs(terminal.rise), "Ω")
    if not plain or whole is None or abs(terminal.current) > 0.0:
        start = sheet.number(terminal.open_voltage, "V")
        formula, numbers = f"V0 {mark} ID·r, V0 without ID", f"{start} {mark} {drop}·{shown}"
    else:
        named = f"({whole.formula})" if whole.joint == "series" else whole.formula
        told = whole.numbers(sheet.number)
        told = f"({told})" if whole.joint in ("series", "parallel") else told
        ends = {_rail(pull) for pull in terminal.pulls}
        first = ends.pop() if len(ends) == 1 else "V0"
        later = ", V0 without ID" if first == "V0" else ""
        if first == "0 V":
            sign = "" if mark == "+" else "-"
            formula, numbers = f"{sign}ID·{named}", f"{sign}{drop}·{told}"
        else:
            start = sheet.number(terminal.open_voltage, "V")
            formula, numbers = f"{first} {mark} ID·{named}{later}", f"{start} {mark} {drop}·{told}"
    sheet.add(name, value, "V", formula=formula, numbers=numbers, source="Ohm", quantity=name)
