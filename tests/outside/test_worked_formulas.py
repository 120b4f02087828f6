"""Published worked examples that are one formula, or a chain of them, through ``deckgen.hand.formulas``.

Every check here is published: the figures and their sources stand in ``data/worked_examples.json`` (author,
title, example, page, what was seen, what is from memory), and the tolerance beside them is applied. Each
function below takes an example's given figures, calls deckgen's formulas in the order of the example, and
returns the figures that the source prints.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping

import pytest

from deckgen.constants import BOLTZMANN, ELEMENTARY_CHARGE, OXIDE_PERMITTIVITY, VACUUM_PERMITTIVITY
from deckgen.hand.batch import SQUARE
from deckgen.hand.formulas import bias, device, frequency, gain
from tests.outside.worked import CIRCUITS, EXAMPLES, parts

Figures = Mapping[str, float]

SATURATED = 1e3  # V: a drain-source voltage beyond any edge, where an example states none


def transconductance(k: float, current: float) -> float:
    return device.transconductance(k=k, v_ov=overdrive(k, current), v_ds=SATURATED)


def output_resistance(k: float, current: float, lam: float) -> float:
    v_ov = overdrive(k, current)
    return 1.0 / device.output_conductance(k=k, lam=lam, v_ov=v_ov, v_ds=SATURATED)


def overdrive(k: float, current: float) -> float:
    """The square law backwards; its current is asserted to come back."""
    v_ov = math.sqrt(2.0 * current / k)
    assert device.saturation_current(k=k, v_ov=v_ov) == pytest.approx(current, rel=1e-12)
    return v_ov


def common_source(g_m: float, r_o: float, *loads: float) -> float:
    return gain.common_source_gain(gm=g_m, gmb=0.0, ro=r_o, r_d=gain.parallel(*loads), r_s=0.0)


def capacitor(r: float, f: float) -> float:
    """Which capacitor has its pole at f with r, from the pole that 1 F would have."""
    return frequency.pole_frequency(r=r, c=1.0) / f


def jfet(g: Figures) -> float:
    """K of the square-law device that a JFET is: ID = IDSS·(1 - VGS/VP)²."""
    return 2.0 * g["IDSS"] / g["VP"] ** 2


def divider_trap(g: Figures) -> Figures:
    v_g = bias.meeting_voltage(voltages=(g["VDD"], 0.0), resistances=(g["R1"], g["R2"]))
    v_sg = g["VDD"] - v_g
    current = device.saturation_current(k=2.0 * g["Kp"], v_ov=v_sg + g["VTP"])
    return {"VSG": v_sg, "ID_if_saturated": current, "VSD_if_saturated": g["VDD"] - current * g["RD"]}


def source_resistor_design(g: Figures) -> Figures:
    v_gs = g["VTN"] + overdrive(g["kprime"] * g["W_over_L"], g["ID"])
    return {"VGS": v_gs}


def depletion(g: Figures) -> Figures:
    current = device.saturation_current(k=2.0 * g["K"], v_ov=-g["VTN"])
    return {"ID": current, "VDS": g["VDD"] - current * g["R"]}


def depletion_load(g: Figures) -> Figures:
    k = 2.0 * g["KnD"]
    g_m, r_o = transconductance(k, g["IDQ"]), output_resistance(k, g["IDQ"], g["lam"])
    return {"gm": g_m, "ro": r_o, "Av": common_source(g_m, r_o, r_o)}


def current_source_load(g: Figures) -> Figures:
    k = g["kn"] * g["WLn"]
    g_m, r_o = transconductance(k, g["Ibias"]), output_resistance(k, g["Ibias"], g["lam"])
    return {"gm": g_m, "ro": r_o, "Av": common_source(g_m, r_o, r_o)}


def jfet_common_source(g: Figures) -> Figures:
    """VGS is printed and taken from there: the bias network is not among the figures."""
    v_ov = EXAMPLES["Neamen 6.18"]["printed"]["VGSQ"] - g["VP"]
    current = device.saturation_current(k=jfet(g), v_ov=v_ov)
    g_m = device.transconductance(k=jfet(g), v_ov=v_ov, v_ds=SATURATED)
    r_o = output_resistance(jfet(g), current, g["lam"])
    return {"ID": current, "gm": g_m, "ro": r_o, "Av": common_source(g_m, r_o, g["RD"], g["RL"])}


def jfet_follower(g: Figures) -> Figures:
    v_ov = g["gm"] / jfet(g)
    current = device.saturation_current(k=jfet(g), v_ov=v_ov)
    r_o = output_resistance(jfet(g), current, g["lam"])
    v_gs = v_ov + g["VP"]
    r_s = (-v_gs - g["Vminus"]) / current
    av = gain.follower_gain(gm=g["gm"], gmb=0.0, ro=r_o, r_s=gain.parallel(r_s, g["RL"]), r_d=0.0)
    return {"VGS": v_gs, "ID": current, "RS": r_s, "ro": r_o, "Av": av}


def output_coupling(g: Figures) -> Figures:
    seen = g["RD"] + g["RL"]
    needed = capacitor(seen, g["fL"])
    return {"CC": needed, "tau": seen * needed}


def load_capacitor(g: Figures) -> Figures:
    seen = gain.parallel(g["RD"], g["RL"])
    g_m = device.transconductance(k=2.0 * g["Kp"], v_ov=g["VSG"] + g["VTP"], v_ds=SATURATED)
    av = gain.common_source_gain(gm=g_m, gmb=0.0, ro=math.inf, r_d=seen, r_s=g["RS"])
    return {"gm": g_m, "fH": frequency.pole_frequency(r=seen, c=g["CL"]), "Av_mag": -av}


def unity_gain(g: Figures) -> Figures:
    return {"gm": device.transconductance(k=2.0 * g["K"], v_ov=g["VGS"] - g["VTN"], v_ds=SATURATED)}


def miller_capacitance(g: Figures) -> Figures:
    """The printed frequency is gm/(2π·Cin): Miller's pole with 1/gm for a source."""
    f = frequency.miller_bandwidth(c_gs=g["Cgs"], c_gd=g["Cgd"], gain=-g["gm"] * g["RL"], r_g=1.0 / g["gm"])
    return {"f": f, "CM": capacitor(1.0 / g["gm"], f) - g["Cgs"]}


def active_load(g: Figures) -> Figures:
    k = 2.0 * g["Kn"]
    g_m, r_o = transconductance(k, g["IREF"]), output_resistance(k, g["IREF"], g["lam_n"])
    r_p = output_resistance(k, g["IREF"], g["lam_p"])
    loaded = common_source(g_m, r_o, r_p, g["RL"])
    return {"gm": g_m, "Av_open": common_source(g_m, r_o, r_p), "Av_RL": loaded}


def device_figures(g: Figures) -> Figures:
    kn_prime = float(SQUARE.transconductance({"tox": g["tox"], "uo": 1e4 * g["mu_n"]}))
    k = kn_prime * g["W"] / g["L"]
    v_ov = overdrive(k, g["ID"])
    # In deep triode rDS is 1/(k·VOV): the overdrive for it, then the conductance back.
    deep = 1.0 / (k * g["rDS"])
    conductance = device.output_conductance(k=k, lam=0.0, v_ov=deep, v_ds=0.0)
    assert 1.0 / conductance == pytest.approx(g["rDS"], rel=1e-12)
    return {
        "Cox": kn_prime / g["mu_n"],
        "kn_prime": kn_prime,
        "VGS": g["Vt"] + v_ov,
        "VDSmin": v_ov,
        "VGS_triode": g["Vt"] + deep,
    }


def triode_design(g: Figures) -> Figures:
    current = device.triode_current(k=g["kn"], v_ov=g["VGS"] - g["Vt"], v_ds=g["VD"])
    return {"ID": current, "RD": (g["VDD"] - g["VD"]) / current, "rDS": g["VD"] / current}


def source_resistor(g: Figures) -> Figures:
    v_g = bias.meeting_voltage(voltages=(g["VDD"], 0.0), resistances=(g["RG1"], g["RG2"]))
    v_ov = bias.overdrive_with_source_resistor(v_drive=v_g - g["Vt"], k=g["kn"], r_s=g["RS"])
    current = device.saturation_current(k=g["kn"], v_ov=v_ov)
    v_s, v_d = current * g["RS"], g["VDD"] - current * g["RD"]
    return {"ID": current, "VS": v_s, "VGS": v_g - v_s, "VD": v_d}


def miller_bandwidth(g: Figures) -> Figures:
    inner = common_source(g["gm"], g["ro"], g["RD"], g["RL"])
    r_g = gain.parallel(g["RG"], g["Rsig"])
    f_h = frequency.miller_bandwidth(c_gs=g["Cgs"], c_gd=g["Cgd"], gain=inner, r_g=r_g)
    return {"AM_mag": -inner * g["RG"] / (g["RG"] + g["Rsig"]), "fH": f_h}


def three_capacitors(g: Figures) -> Figures:
    into_source = gain.source_resistance(gm=g["gm"], gmb=0.0, ro=math.inf, r_d=0.0)
    return {
        "CS": capacitor(into_source, g["fL"]),
        "CC1": capacitor(g["RG"] + g["Rsig"], g["fP1"]),
        "CC2": capacitor(g["RD"] + g["RL"], g["fP3"]),
    }


def open_circuit_constants(g: Figures) -> Figures:
    r_g = gain.parallel(g["Rin"], g["Rsig"])
    tau = g["Cgs"] * frequency.gate_source_resistance(gm=g["gm"], r_g=r_g, r_s=0.0)
    tau += g["Cgd"] * frequency.gate_drain_resistance(gm=g["gm"], r_g=r_g, r_d=g["RLp"], r_s=0.0)
    inner = common_source(g["gm"], math.inf, g["RLp"])
    return {
        "AM": inner * g["Rin"] / (g["Rin"] + g["Rsig"]),
        "fH": frequency.pole_frequency(r=tau, c=1.0),
    }


def mirror_load(g: Figures) -> Figures:
    k = g["kn_prime"] * g["WL"]
    g_m = transconductance(k, g["IREF"])
    r_1, r_2 = (output_resistance(k, g["IREF"], 1.0 / va) for va in (g["VAn"], g["VAp"]))
    return {"gm": g_m, "ro1": r_1, "ro2": r_2, "Av": common_source(g_m, r_1, r_2)}


def jfet_output_resistance(g: Figures) -> Figures:
    g_m = device.transconductance(k=jfet(g), v_ov=g["VGS"] - g["VP"], v_ds=SATURATED)
    r_o = 1.0 / g["yos"]
    into_source = gain.source_resistance(gm=g_m, gmb=0.0, ro=r_o, r_d=0.0)
    av = gain.follower_gain(gm=g_m, gmb=0.0, ro=r_o, r_s=g["RS"], r_d=0.0)
    return {"gm": g_m, "Zo": gain.parallel(g["RS"], into_source), "Av": av}


def jfet_fixed_bias(g: Figures) -> Figures:
    current = device.saturation_current(k=jfet(g), v_ov=g["VGG"] - g["VP"])
    return {"ID_if_saturated": current, "VDS_if_saturated": g["VDD"] - current * g["RD"]}


def doping_and_oxide(g: Figures) -> Figures:
    """Phi and gamma from doping and oxide; the source counts in centimetres."""
    c_ox = OXIDE_PERMITTIVITY / (1e-2 * g["tox_cm"])
    phi = 2.0 * BOLTZMANN * g["T"] / ELEMENTARY_CHARGE * math.log(g["Na_cm3"] / g["ni_cm3"])
    charge = 2.0 * ELEMENTARY_CHARGE * g["eps_si"] * VACUUM_PERMITTIVITY * 1e6 * g["Na_cm3"]
    shift = device.threshold_voltage(vto=0.0, gamma=math.sqrt(charge) / c_ox, phi=phi, v_sb=g["VSB"])
    return {"phi_fp": 0.5 * phi, "Cox_F_cm2": 1e-4 * c_ox, "dVT": shift}


def body_effect(g: Figures) -> Figures:
    return {"VT": device.threshold_voltage(vto=g["VT0"], gamma=g["gamma"], phi=g["phi"], v_sb=g["VSB"])}


FORMULAS: dict[str, Callable[[Figures], Figures]] = {
    "Neamen 5.4": divider_trap,
    "Neamen 5.6": source_resistor_design,
    "Neamen 5.10": depletion,
    "Neamen 6.12": depletion_load,
    "Neamen 6.13": current_source_load,
    "Neamen 6.18": jfet_common_source,
    "Neamen 6.19": jfet_follower,
    "Neamen 7.4": output_coupling,
    "Neamen 7.6": load_capacitor,
    "Neamen 7.12": unity_gain,
    "Neamen 7.13": miller_capacitance,
    "Neamen 10.12": active_load,
    "Sedra-Smith 4.1": device_figures,
    "Sedra-Smith 4.4": triode_design,
    "Sedra-Smith 4.5": source_resistor,
    "Sedra-Smith 4.12": miller_bandwidth,
    "Sedra-Smith 4.13": three_capacitors,
    "Sedra-Smith 6.6": open_circuit_constants,
    "Sedra-Smith 6.8": mirror_load,
    "Boylestad-Nashelsky 7.1": jfet_fixed_bias,
    "Boylestad-Nashelsky 8.10": jfet_output_resistance,
    "Neamen devices 11.10": doping_and_oxide,
    "Hodges-Jackson-Saleh 2.8": body_effect,
}


@pytest.mark.parametrize("name", FORMULAS)
def test_formulas_return_the_printed_figures(name: str) -> None:
    example = EXAMPLES[name]
    found = FORMULAS[name](example["given"])
    assert found
    for figure, value in found.items():
        right = pytest.approx(example["printed"][figure], rel=example["tolerance"], abs=0.0)
        assert value == right, figure


def test_every_example_is_checked_as_a_circuit_or_as_a_formula() -> None:
    assert set(CIRCUITS) | set(FORMULAS) == set(EXAMPLES)


def test_every_printed_figure_is_read_used_as_a_part_or_checked() -> None:
    for name, example in EXAMPLES.items():
        used = set(example.get("reads", {}))
        if name in CIRCUITS:
            used |= {figure for figure in example["printed"] if f"{{{figure}}}" in parts(example)}
        if name in FORMULAS:
            used |= FORMULAS[name](example["given"]).keys()
        assert example["printed"].keys() <= used, name
