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
    v_sb = source_bulk(net, device, point)
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
