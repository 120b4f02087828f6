"""gm, gds and gmb at the Q-point, written down."""

from __future__ import annotations

from deckgen.circuit.region import Region
from deckgen.hand.formulas import device as device_formulas
from deckgen.hand.formulas.device import SHICHMAN_HODGES
from deckgen.hand.reduce.dc import DcNet
from deckgen.hand.working.qpoint import Device, QPoint, source_bulk
from deckgen.hand.working.sheet import Sheet


def write_conductances(sheet: Sheet, device: Device, point: QPoint, net: DcNet) -> None:
    """Write the conductances that the gain is made of."""
    v_ds = max(device.sign * (point.v_d - point.v_s), 0.0)
    off, triode = point.region is Region.CUTOFF, point.region is Region.TRIODE
    told_off = f"VOV = {sheet.number(point.v_ov, 'V')}"
    gm = device_formulas.transconductance(k=device.k, v_ov=point.v_ov, v_ds=v_ds)
    k, acting = sheet.number(device.k, "A/V²"), sheet.number(v_ds if triode else point.v_ov, "V")
    _write(
        sheet,
        f"gm({device.name})",
        gm,
        formula="0" if off else "k·|VDS|" if triode else "k·VOV",
        numbers=told_off if off else f"{k}·{acting}",
    )
    gds = device_formulas.output_conductance(k=device.k, lam=device.lam, v_ov=point.v_ov, v_ds=v_ds)
    formula, numbers = "λ·ID", f"{sheet.plain(device.lam)}/V·{sheet.number(point.i_d, 'A')}"
    if triode:
        formula += " + k·(VOV - |VDS|)"
        numbers += f" + {k}·({sheet.sum('V', point.v_ov, -v_ds)})"
    note = "the resistance of the channel" if triode else "kept in the gain"
    _write(
        sheet,
        f"gds({device.name})",
        gds,
        formula="0" if off else formula,
        numbers=told_off if off else numbers,
        note=f"ro = 1/gds = {sheet.number(1.0 / gds, 'Ω')}, {note}" if gds > 0.0 else None,
    )
    v_sb = source_bulk(net, device, point)
    gmb = device_formulas.bulk_transconductance(gm=gm, gamma=device.gamma, phi=device.phi, v_sb=v_sb)
    bias = "VSB" if device.sign > 0 else "VBS"
    gamma, phi = sheet.plain(device.gamma), sheet.plain(device.phi)
    formula, root = f"gm·γ/(2√(φ+{bias}))", f"√({phi} + {sheet.plain(v_sb)})"
    if v_sb < 0.0:
        formula, root = "gm·γ/(2√φ)", f"√{phi}"
    numbers = f"{sheet.number(gm, 'S')}·{gamma}/(2{root})"
    if v_sb <= -2.0 * device.phi:
        formula, numbers = "0", f"{bias} = {sheet.number(v_sb, 'V')}"
    _write(sheet, f"gmb({device.name})", gmb, formula=formula, numbers=numbers)


def _write(
    sheet: Sheet, name: str, value: float, *, formula: str, numbers: str, note: str | None = None
) -> None:
    sheet.add(
        name, value, "S", formula=formula, numbers=numbers, source=SHICHMAN_HODGES, quantity=name, note=note
    )
