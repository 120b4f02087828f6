"""The bias written down: gate voltage, threshold, overdrive, current, terminal voltages."""

from __future__ import annotations

from deckgen.circuit.model import GROUND
from deckgen.circuit.region import Region
from deckgen.hand.formulas.device import SHICHMAN_HODGES, STRONG_INVERSION
from deckgen.hand.reduce.dc import DcNet, DcTerminal, Pull
from deckgen.hand.reduce.resistance import NO_RESISTANCE, Resistance, in_parallel, in_series
from deckgen.hand.working.into import Named
from deckgen.hand.working.qpoint import Device, Lines, QPoint, lines_of, source_bulk
from deckgen.hand.working.sheet import Sheet, where

BIASING = "Sedra & Smith, MOS biasing"
_REDONE = "saturation does not hold (VDS would be below VOV): redone in triode"


def write_bias(sheet: Sheet, net: DcNet, device: Device, point: QPoint) -> None:
    """The steps from the gate voltage to the region check."""
    if _gate_is_free(net):
        _write_gate(sheet, net.gate, point.v_g)
    _write_threshold(sheet, net, device, point)
    _write_k(sheet, net, device)
    if net.forced is not None:
        _write_forced_current(sheet, device, point)
        _write_drain_and_gate(sheet, net, device, point)
        _write_forced_source(sheet, net, device, point)
    else:
        if point.region is Region.TRIODE:
            _write_triode(sheet, net, device, point)
        else:
            _write_overdrive(sheet, net, device, point)
        if net.source.fixed is None:
            _write_terminal(sheet, net.source, point.v_s, device, point.i_d, plain=not net.coupled)
        _write_drain_and_gate(sheet, net, device, point)
    _write_check(sheet, device, point)


def _gate_is_free(net: DcNet) -> bool:
    """Whether the gate's voltage does not depend on the drain current."""
    return net.gate.fixed is not None or not (net.tied or net.coupled or net.feedback is not None)


def _follows_drain(net: DcNet) -> bool:
    """Whether the gate has the drain's voltage: tied to it, or by a resistor without current."""
    alone = net.feedback is not None and not net.gate.pulls and not abs(net.gate.current) > 0.0
    return not net.coupled and (net.tied or alone)


# --- the gate ---


def _write_gate(sheet: Sheet, gate: DcTerminal, v_g: float) -> None:
    # The highest voltage first, so that a plain divider is recognised in either order.
    pulls = tuple(sorted(gate.pulls, key=lambda pull: -abs(pull.voltage)))
    source, note = "voltage divider", None
    if gate.fixed is not None:
        formula = "at ground" if gate.node == GROUND else "fixed by a source"
        numbers, source = sheet.number(v_g, "V"), "Kirchhoff"
    elif abs(gate.current) > 0.0 or len(pulls) > 2:
        formula, numbers, source = *_meeting(sheet, gate, pulls), "Millman 1940"
    elif len(pulls) == 1:
        formula, numbers, source = _rail(pulls[0]), sheet.number(pulls[0].voltage, "V"), "Kirchhoff"
        note = _no_current(pulls[0].resistance)
    else:
        formula, numbers = _divider(sheet, *pulls)
    grounded = gate.node == GROUND
    name = "VG" if grounded else f"V({gate.node})"
    sheet.add(
        name,
        v_g,
        "V",
        formula=formula,
        numbers=numbers,
        source=source,
        quantity=None if grounded else name,
        note=note,
    )


def _no_current(resistance: Resistance) -> str:
    return f"no gate current in {resistance.formula}"


def _rail(pull: Pull) -> str:
    """A rail by its voltage: ``VDD`` for a node of that name, ``V(bias)`` for another."""
    if pull.node == GROUND:
        return "0 V"
    return pull.node.upper() if pull.node.startswith("v") else f"V({pull.node})"


def _divider(sheet: Sheet, upper: Pull, lower: Pull) -> tuple[str, str]:
    """Formula and numbers of a node between two resistors."""
    low, high = lower.resistance, upper.resistance
    share = f"{low.factor}/({high.formula}+{low.formula})"
    numbers = f"{low.factor_numbers(sheet.number)}/"
    numbers += f"({high.numbers(sheet.number)} + {low.numbers(sheet.number)})"
    if lower.node == GROUND:
        return f"{_rail(upper)}·{share}", f"{sheet.number(upper.voltage, 'V')}·{numbers}"
    first, second = _rail(upper), _rail(lower)
    over = sheet.sum("V", upper.voltage, -lower.voltage)
    return (
        f"{second} + ({first} - {second})·{share}",
        f"{sheet.number(lower.voltage, 'V')} + ({over})·{numbers}",
    )


def _meeting(sheet: Sheet, terminal: DcTerminal, pulls: tuple[Pull, ...]) -> tuple[str, str]:
    """Formula and numbers of a node where resistors and currents meet."""
    formulas, numbers = [], []
    for pull in pulls:
        if pull.node != GROUND:
            formulas.append(f"{_rail(pull)}/{pull.resistance.factor}")
            over = pull.resistance.factor_numbers(sheet.number)
            numbers.append(f"{sheet.number(pull.voltage, 'V')}/{over}")
    if abs(terminal.current) > 0.0:
        formulas.append("I")
        numbers.append(sheet.number(terminal.current, "A"))
    below = " + ".join(f"1/{pull.resistance.factor}" for pull in pulls)
    told = " + ".join(f"1/{pull.resistance.factor_numbers(sheet.number)}" for pull in pulls)
    return f"({' + '.join(formulas)})/({below})", f"({' + '.join(numbers)})/({told})"


# --- the device ---


def _write_threshold(sheet: Sheet, net: DcNet, device: Device, point: QPoint) -> None:
    name = f"VTH({device.name})"
    vto, vth = sheet.number(device.sign * device.vto, "V"), device.sign * point.vth
    bias, mark = ("VSB", "+") if device.sign > 0 else ("VBS", "-")
    v_sb = source_bulk(net, device, point)
    note = None
    if device.gamma <= 0.0 or net.bulk is None:
        formula, numbers = "VTO", vto
        note = "bulk at the source" if net.bulk is None else "γ = 0"
    else:
        gamma, phi, v_bias = sheet.plain(device.gamma), sheet.plain(device.phi), sheet.plain(v_sb)
        formula = f"VTO {mark} γ(√(φ+{bias}) - √φ)"
        numbers = f"{vto} {mark} {gamma}(√({phi} + {v_bias}) - √{phi})"
        if v_sb <= -2.0 * device.phi:
            formula, numbers = f"VTO {mark} γ(0 - √φ)", f"{vto} {mark} {gamma}(0 - √{phi})"
        elif v_sb < 0.0:
            formula, numbers = f"VTO {mark} γ·{bias}/(2√φ)", f"{vto} {mark} {gamma}·({v_bias})/(2√{phi})"
        note = f"iterated with VS, {point.rounds} rounds" if point.rounds > 2 else None
    sheet.add(
        name, vth, "V", formula=formula, numbers=numbers, source=SHICHMAN_HODGES, quantity=name, note=note
    )


def _write_k(sheet: Sheet, net: DcNet, device: Device) -> None:
    mosfet = net.device
    several = abs(mosfet.m - 1.0) > 0.0
    length = mosfet.l - 2.0 * device.ld
    kp = device.k * length / (mosfet.w * mosfet.m)
    numbers = f"{sheet.number(kp, 'A/V²')}·{sheet.number(mosfet.w, 'm')}/{sheet.number(length, 'm')}"
    sheet.add(
        "k",
        device.k,
        "A/V²",
        formula=("KP·W/(L-2LD)" if device.ld > 0.0 else "KP·W/L") + ("·M" if several else ""),
        numbers=numbers + (f"·{sheet.plain(mosfet.m)}" if several else ""),
        source=SHICHMAN_HODGES,
        note="ID = ½·k·VOV²; half the textbooks write K = k/2",
    )


# --- current and overdrive ---


def _write_overdrive(sheet: Sheet, net: DcNet, device: Device, point: QPoint) -> None:
    """VOV from the load line of the gate, and the current that it gives."""
    lines = lines_of(net, device.sign)
    cut_off = point.region is Region.CUTOFF
    name, note = f"VOV({device.name})", None if cut_off else STRONG_INVERSION.note(point.v_ov)
    formula, numbers, around = _without_current(sheet, net, device, point, lines)
    if lines.r_gs > 0.0 and not cut_off:
        letter = around.symbol if around is not None else "Rgs"
        told = around.told(sheet.number) if around is not None else f"Rgs = {sheet.number(lines.r_gs, 'Ω')}"
        formula = f"2·VOV0/(1 + √(1 + 2·k·{letter}·VOV0)) [VOV0 = {formula}]"
        numbers = f"VOV0 = {numbers}, {told}"
        if around is None:
            note = "; ".join(filter(None, ["VGS = VGS0 - Rgs·ID", note]))
    sheet.add(
        name, point.v_ov, "V", formula=formula, numbers=numbers, source=BIASING, quantity=name, note=note
    )
    current = f"ID({device.name})"
    v_ov = sheet.number(point.v_ov, "V")
    sheet.add(
        current,
        point.i_d,
        "A",
        formula="0" if cut_off else "½·k·VOV²",
        numbers=f"VOV = {v_ov}" if cut_off else f"½·{sheet.number(device.k, 'A/V²')}·({v_ov})²",
        source=SHICHMAN_HODGES,
        quantity=current,
        note="cut off: VOV is not above zero" if cut_off else None,
    )


def _without_current(
    sheet: Sheet, net: DcNet, device: Device, point: QPoint, lines: Lines
) -> tuple[str, str, Named | None]:
    """VOV without drain current as formula and numbers, and the resistance that takes from it.

    The resistance is None where it is not plainly one of the net.
    """
    normal, vth = device.sign > 0, device.sign * point.vth
    follows = _follows_drain(net)
    if net.coupled or not (_gate_is_free(net) or follows):
        v_gs = device.sign * lines.v_gs
        numbers = sheet.sum("V", v_gs, -vth) if normal else sheet.sum("V", vth, -v_gs)
        return "VGS0 - VTH" if normal else "VTH - VGS0", numbers, None
    top = net.drain if follows else net.gate
    high, low = (_start(top, "VD0") if follows else ("VG", top.open_voltage)), _start(net.source, "VS0")
    if not normal:
        high, low = low, high
    # A threshold counts with its own sign: that of a p-channel device is below zero.
    terms = [(high, 1.0), (low, -1.0), (("VTH", vth), -device.sign)]
    shown = [(symbol, mark, value) for (symbol, value), mark in terms if symbol]
    formula = " ".join(f"{'-' if mark < 0.0 else '+'} {symbol}" for symbol, mark, _ in shown)
    formula = formula.replace("- ", "-", 1) if formula.startswith("-") else formula.removeprefix("+ ")
    numbers = sheet.sum("V", *(mark * value for _, mark, value in shown))
    own = in_parallel(*(pull.resistance for pull in net.source.pulls))
    if not follows:
        return formula, numbers, Named("RS", own)
    drain = in_parallel(*(pull.resistance for pull in net.drain.pulls))
    return formula, numbers, Named("R", in_series(drain, own))


def _start(terminal: DcTerminal, otherwise: str) -> tuple[str, float]:
    """Symbol and voltage of a terminal without drain current; no symbol for plain ground."""
    value = terminal.open_voltage
    if terminal.node == GROUND:
        return "", value
    if terminal.fixed is not None:
        return _rail(Pull(NO_RESISTANCE, terminal.node, value)), value
    if len(terminal.pulls) != 1 or abs(terminal.current) > 0.0:
        return otherwise, value
    (pull,) = terminal.pulls
    return ("", value) if pull.node == GROUND else (_rail(pull), value)


def _write_triode(sheet: Sheet, net: DcNet, device: Device, point: QPoint) -> None:
    lines = lines_of(net, device.sign)
    names = {"VOV": (lines.v_gs - point.vth, lines.r_gs, "Rgs"), "VDS": (lines.v_ds, lines.r_ds, "Rds")}
    numbers, around = f"k = {sheet.number(device.k, 'A/V²')}", []
    for name, (without, resistance, letters) in names.items():
        drop = f" - ID·{letters}" if resistance > 0.0 else ""
        around.append(f"{name} = {name}0{drop}")
        numbers += f", {name}0 = {sheet.number(without, 'V')}"
        numbers += f", {letters} = {sheet.number(resistance, 'Ω')}" if drop else ""
    current = f"ID({device.name})"
    sheet.add(
        current,
        point.i_d,
        "A",
        formula=where("k·(VOV·VDS - ½VDS²)", around),
        numbers=numbers,
        source=SHICHMAN_HODGES,
        quantity=current,
        note=f"{_REDONE}, a quadratic",
    )
    v_ov, r_gs = lines.v_gs - point.vth, lines.r_gs
    drop = f" - {sheet.number(point.i_d, 'A')}·{sheet.number(r_gs, 'Ω')}" if r_gs > 0.0 else ""
    sheet.add(
        f"VOV({device.name})",
        point.v_ov,
        "V",
        formula="VOV0 - ID·Rgs" if drop else "VOV0",
        numbers=sheet.number(v_ov, "V") + drop,
        source=SHICHMAN_HODGES,
        quantity=f"VOV({device.name})",
    )


def _write_forced_current(sheet: Sheet, device: Device, point: QPoint) -> None:
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


def _write_forced_source(sheet: Sheet, net: DcNet, device: Device, point: QPoint) -> None:
    """The overdrive that a given current needs, and the source that it lifts to."""
    triode, normal, vth = point.region is Region.TRIODE, device.sign > 0, device.sign * point.vth
    name = f"VOV({device.name})"
    formula = "√(2·ID/k)"
    numbers = f"2·{sheet.number(point.i_d, 'A')}/{sheet.number(device.k, 'A/V²')}"
    if triode:
        meaning = "VD - VG + VTH" if normal else "VG - VD - VTH"
        formula = f"√(2·ID/k + VX²) [VX = {meaning}]"
        values = (point.v_d, -point.v_g, vth) if normal else (point.v_g, -point.v_d, -vth)
        numbers += f" + ({sheet.sum('V', *values)})²"
    note = _REDONE if triode else STRONG_INVERSION.note(point.v_ov)
    sheet.add(
        name,
        point.v_ov,
        "V",
        formula=formula,
        numbers=f"√({numbers})",
        source=SHICHMAN_HODGES,
        quantity=name,
        note=note,
    )
    name = f"V({net.source.node})"
    sheet.add(
        name,
        point.v_s,
        "V",
        formula="VG - VTH - VOV" if normal else "VG - VTH + VOV",
        numbers=sheet.sum("V", point.v_g, -vth, -device.sign * point.v_ov),
        source="Kirchhoff",
        quantity=name,
    )


# --- voltages ---


def _write_drain_and_gate(sheet: Sheet, net: DcNet, device: Device, point: QPoint) -> None:
    """The drain, and a gate that depends on the current."""
    if net.drain.fixed is None:
        plain = not net.coupled and (net.feedback is None or _follows_drain(net))
        _write_terminal(sheet, net.drain, point.v_d, device, point.i_d, plain=plain)
    if _gate_is_free(net) or net.tied:
        return
    if not _follows_drain(net) or net.feedback is None:
        _write_terminal(sheet, net.gate, point.v_g, device, point.i_d, plain=False)
        return
    name = f"V({net.gate.node})"
    sheet.add(
        name,
        point.v_g,
        "V",
        formula="VD",
        numbers=sheet.number(point.v_d, "V"),
        source="Kirchhoff",
        quantity=name,
        note=_no_current(net.feedback),
    )


def _write_terminal(
    sheet: Sheet, terminal: DcTerminal, value: float, device: Device, current: float, *, plain: bool
) -> None:
    """V = V0 ± ID·R: where its resistances end, and the drop across them."""
    name = f"V({terminal.node})"
    start, open_voltage = _start(terminal, "V0")
    whole = in_parallel(*(pull.resistance for pull in terminal.pulls))
    mark = "-" if device.sign * terminal.rise < 0.0 else "+"
    drop = sheet.number(current, "A")
    if plain and whole is not None:
        formula, numbers = f"ID·{whole.factor}", f"{drop}·{whole.factor_numbers(sheet.number)}"
    else:
        start, formula = "V0", "ID·r"
        numbers = f"{drop}·{sheet.number(abs(terminal.rise), 'Ω')}"
    if not start:
        sign = "" if mark == "+" else "-"
        formula, numbers = f"{sign}{formula}", f"{sign}{numbers}"
    else:
        formula = f"{start} {mark} {formula}"
        numbers = f"{sheet.number(open_voltage, 'V')} {mark} {numbers}"
    note = "V0: without ID" if start == "V0" else None
    sheet.add(name, value, "V", formula=formula, numbers=numbers, source="Ohm", quantity=name, note=note)


def _write_check(sheet: Sheet, device: Device, point: QPoint) -> None:
    """VGS, VDS and the margin to the edge of saturation."""
    for name, high in (("VGS", point.v_g), ("VDS", point.v_d)):
        label = f"{name}({device.name})"
        sheet.add(
            label,
            high - point.v_s,
            "V",
            formula=f"V{name[1]} - VS",
            numbers=sheet.sum("V", high, -point.v_s),
            source="Kirchhoff",
            quantity=label,
        )
    v_ds = device.sign * (point.v_d - point.v_s)
    sheet.add(
        "margin",
        v_ds - point.v_ov,
        "V",
        formula="|VDS| - VOV",
        numbers=sheet.sum("V", v_ds, -point.v_ov),
        source=SHICHMAN_HODGES,
        note=f"{point.region}",
    )
