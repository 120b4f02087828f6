"""Parameters that a level-1 card does not state: by formulas of textbooks, written here once more.

Independent: threshold, surface potential and body-effect parameter of a doped substrate as S. M. Sze,
*Physics of Semiconductor Devices*, Wiley 1981, ch. 8, and G. Massobrio, P. Antognetti, *Semiconductor
Device Modeling with SPICE*, McGraw-Hill 1993, ch. 4, have them (from memory), in other units and from other
constants than deckgen's; how IS, PB and CJ move with temperature, likewise.
"""

from __future__ import annotations

import math

import numpy as np
import pytest

from deckgen.circuit.model import Circuit, Mosfet
from deckgen.circuit.reader import read_flat
from deckgen.hand.batch import SQUARE, Batch, prepare_devices
from deckgen.hand.effects import ALL_EFFECTS, Effect
from deckgen.hand.laws import temperature as thermal
from deckgen.hand.laws.level1 import DEFAULTS, completed
from tests.unit.circuits import card

# In centimetres, as these books count.
Q = 1.602e-19  # C
EPS_0 = 8.854e-14  # F/cm
N_I = 1.45e10  # 1/cm³
UT = 0.025865  # V at 300.15 K
GAP = 1.115  # V
ROUGH = 2e-3


def derived(sign: float = 1.0, **stated: float) -> dict[str, float]:
    return {name: float(value) for name, value in completed(stated, sign=sign, tnom=300.15).items()}


def c_ox(tox_cm: float) -> float:
    """F/cm²."""
    return 3.9 * EPS_0 / tox_cm


@pytest.mark.parametrize("doping", [1e14, 3e15, 1e17])
@pytest.mark.parametrize("tox", [8e-9, 100e-9])
def test_phi_and_gamma_are_those_of_the_doping(doping: float, tox: float) -> None:
    found = derived(nsub=doping, tox=tox)
    fermi = UT * math.log(doping / N_I)
    assert found["phi"] == pytest.approx(2.0 * fermi, rel=ROUGH)
    body = math.sqrt(2.0 * Q * 11.7 * EPS_0 * doping) / c_ox(tox * 1e2)
    assert found["gamma"] == pytest.approx(body, rel=ROUGH)


@pytest.mark.parametrize("sign", [1.0, -1.0], ids=["n", "p"])
@pytest.mark.parametrize("states", [0.0, 1e11])
def test_the_threshold_is_flat_band_and_the_charge_of_the_depleted_substrate(
    sign: float, states: float
) -> None:
    """Sze's VT = Φms - Qss/Cox ± (2φF + √(2·q·ε·N·2φF)/Cox), Φms of a gate of silicon as heavy as can be.

    Doped against the substrate (TPG = 1) its Fermi level lies half a gap from the middle on the other side,
    doped alike (TPG = -1) on this side.
    """
    doping, tox = 2e16, 20e-9
    fermi = UT * math.log(doping / N_I)
    charge = math.sqrt(2.0 * Q * 11.7 * EPS_0 * doping * 2.0 * fermi) / c_ox(tox * 1e2)
    for tpg in (1.0, -1.0):
        work = -sign * (tpg * GAP / 2.0 + fermi)
        expected = work - Q * states / c_ox(tox * 1e2) + sign * (2.0 * fermi + charge)
        found = derived(sign, nsub=doping, tox=tox, nss=states, tpg=tpg)["vto"]
        assert found == pytest.approx(expected, abs=2e-3)


@pytest.mark.parametrize("sign", [1.0, -1.0], ids=["n", "p"])
def test_a_gate_of_aluminium_has_its_own_work_function(sign: float) -> None:
    """Φm = 3.2 V into the oxide against 3.25 V + Eg/2 ± φF of the silicon: SPICE's numbers."""
    doping, tox = 2e16, 20e-9
    fermi = UT * math.log(doping / N_I)
    charge = math.sqrt(2.0 * Q * 11.7 * EPS_0 * doping * 2.0 * fermi) / c_ox(tox * 1e2)
    expected = 3.2 - (3.25 + GAP / 2.0 + sign * fermi) + sign * (2.0 * fermi + charge)
    assert derived(sign, nsub=doping, tox=tox, tpg=0.0)["vto"] == pytest.approx(expected, abs=2e-3)


def test_what_the_card_states_is_not_derived() -> None:
    stated = {"nsub": 1e16, "tox": 20e-9, "vto": 0.7, "phi": 0.66, "gamma": 0.3, "kp": 5e-5}
    found = derived(**stated)
    assert {name: found[name] for name in stated} == pytest.approx(stated)
    # PHI stands in what follows from NSUB, too.
    without_vto = {name: value for name, value in stated.items() if name != "vto"}
    first, second = derived(**without_vto)["vto"], derived(**{**without_vto, "phi": 0.86})["vto"]
    rise = (0.86 - 0.66) / 2.0 + 0.3 * (math.sqrt(0.86) - math.sqrt(0.66))
    assert second - first == pytest.approx(rise, rel=1e-9)


def test_without_an_oxide_the_doping_has_no_effect() -> None:
    bare = {"nsub": 1e16, "nss": 1e11, "tpg": -1.0}
    found = derived(**bare)
    for name in ("vto", "phi", "gamma", "kp"):
        assert found[name] == pytest.approx(DEFAULTS[name])
    assert derived(tox=20e-9, nss=1e11)["vto"] == pytest.approx(0.0)


def test_a_doping_below_that_of_pure_silicon_is_no_substrate() -> None:
    found = derived(nsub=1e10, tox=20e-9)
    assert math.isnan(found["phi"])
    assert math.isnan(found["vto"])


def test_a_light_doping_has_at_least_a_phi_of_a_tenth_of_a_volt() -> None:
    assert derived(nsub=2e10, tox=20e-9)["phi"] == pytest.approx(0.1)


def test_a_complete_card_stays_as_it_is() -> None:
    once = completed({"nsub": 1e16, "tox": 20e-9, "rsh": 10.0}, sign=-1.0, tnom=320.0)
    twice = completed(once, sign=-1.0, tnom=320.0)
    assert set(once) == set(DEFAULTS)
    for name in once:
        assert float(once[name]) == pytest.approx(float(twice[name]), nan_ok=True)


def test_each_device_of_a_circuit_has_what_its_own_card_lacks() -> None:
    cards = (card(nsub=1e16, tox=20e-9), card("pmos", "pm", nsub=3e15, tox=20e-9), card(name="bare"))
    pins = ("d", "g", "s", "0")
    devices = tuple(Mosfet(f"m{n}", pins, c.name, 1e-5, 1e-6) for n, c in enumerate(cards))
    p = prepare_devices(Circuit("t", devices, cards), Batch((ALL_EFFECTS,)))
    n, other = derived(nsub=1e16, tox=20e-9), derived(-1.0, nsub=3e15, tox=20e-9)
    assert p.gamma[0] == pytest.approx([n["gamma"], other["gamma"], 0.0])
    assert p.phi[0] == pytest.approx([n["phi"], other["phi"], 0.6])
    assert p.vto[0] == pytest.approx([n["vto"], -other["vto"], 0.0])


def test_a_sampled_parameter_counts_as_stated() -> None:
    circuit = Circuit(
        "t", (Mosfet("m1", ("d", "g", "s", "0"), "nm", 1e-5, 1e-6),), (card(nsub=1e16, tox=2e-8),)
    )
    vto = np.array([0.5, 0.6])
    p = prepare_devices(circuit, Batch((ALL_EFFECTS,), samples=((("m1", "vto"), vto),)))
    assert p.vto[:, 0] == pytest.approx(vto)
    tox = np.array([1e-8, 4e-8])
    p = prepare_devices(circuit, Batch((ALL_EFFECTS,), samples=((("m1", "tox"), tox),)))
    assert p.gamma[:, 0] == pytest.approx([derived(nsub=1e16, tox=t)["gamma"] for t in tox])


def test_the_card_may_hold_at_a_temperature_of_its_own() -> None:
    text = "t\n.model nm nmos nsub=1e16 tox=20n{}\nm1 d g s 0 nm w=1u l=1u\n.options tnom={}\n.temp 80\n"
    own, shared = (
        prepare_devices(c, Batch((ALL_EFFECTS,), (c.temperature,)))
        for c in (read_flat(text.format(" tnom=50", 27)), read_flat(text.format("", 50)))
    )
    for name in ("k", "vto", "phi", "is_drain", "pb"):
        assert getattr(own, name) == pytest.approx(getattr(shared, name), rel=1e-12)


# --- temperature of the junctions ---


@pytest.mark.parametrize("celsius", [-40.0, 85.0, 125.0])
def test_the_saturation_current_follows_the_band_gap(celsius: float) -> None:
    """IS ∝ exp(-Eg(T)/UT(T)) (Massobrio & Antognetti); twofold for every few kelvin, fewer where cold."""
    t = celsius + 273.15
    gaps = [1.16 - 7.02e-4 * at**2 / (at + 1108.0) for at in (300.15, t)]
    expected = math.exp(gaps[0] / (8.617e-5 * 300.15) - gaps[1] / (8.617e-5 * t))
    found = float(thermal.saturation_factor(temperature=np.asarray(t), tnom=np.asarray(300.15)))
    assert found == pytest.approx(expected, rel=2e-3)
    assert 3.0 < (celsius - 27.0) / math.log2(found) < 8.5


def test_the_built_in_potential_falls_and_the_capacitance_rises_with_temperature() -> None:
    """PB: of two doped regions, UT·ln(NA·ND/ni²), ni ∝ T^1.5·exp(-Eg/2UT); CJ by 4·10⁻⁴/K and with it."""
    warm, room = np.asarray(398.15), np.asarray(300.15)
    pb = float(thermal.potential_at(np.asarray(0.8), temperature=warm, tnom=room))
    k = 8.617e-5
    gaps = [1.16 - 7.02e-4 * at**2 / (at + 1108.0) for at in (300.15, 398.15)]
    carriers = 1.5 * math.log(398.15 / 300.15) - (gaps[1] / (k * 398.15) - gaps[0] / (k * 300.15)) / 2.0
    assert pb == pytest.approx(0.8 * 398.15 / 300.15 - 2.0 * k * 398.15 * carriers, abs=1e-4)
    assert pb < 0.7
    found = thermal.capacitance_factor(np.asarray(0.4), np.asarray(0.8), temperature=warm, tnom=room)
    assert float(found) == pytest.approx(1.0 + 0.4 * (4e-4 * 98.0 - (pb / 0.8 - 1.0)), rel=1e-12)


def test_at_the_temperature_of_the_card_junctions_are_as_it_says() -> None:
    t = 350.0
    p = SQUARE.prepare(
        {"is": 1e-13, "cj": 1e-4, "pb": 0.7, "cbs": 1e-12}, sign=1.0, w=1e-5, l=1e-6, ad=1e-10,
        temperature=t, tnom=t, on=dict.fromkeys(Effect, True),
    )  # fmt: skip
    found = (float(p.is_drain), float(p.cj_drain), float(p.cj_source), float(p.pb))
    assert found == pytest.approx((1e-13, 1e-14, 1e-12, 0.7), rel=1e-12)
