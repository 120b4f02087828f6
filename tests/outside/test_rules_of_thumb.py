"""Two rules of the trade against the law itself: gm = k·VOV = 2·ID/VOV, and a signal well below 2·VOV.

Both are common practice: every designer of MOSFET stages uses them, and no one source stands for them. The
second-order term behind the second rule is published (W. Sansen, Analog Design Essentials, Springer 2006,
ch. 18: HD2 = v/(4·VOV) for a square-law stage, v the peak gate-source signal).
The checks are independent: harmonics come from a discrete Fourier transform of the currents that deckgen's
law gives over one period, slopes from differences of these currents; nothing is pinned.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray

from deckgen.constants import ROOM_TEMPERATURE
from deckgen.findings.bias import SMALL_SIGNAL_SHARE, device_findings
from deckgen.hand.batch import SQUARE
from deckgen.hand.effects import Effect
from deckgen.hand.formulas.device import transconductance
from deckgen.hand.laws.parameters import SquareParameters
from deckgen.pipeline import analyse
from deckgen.stage.read import stage_from_text

Array = NDArray[np.float64]

K, VTO, LAMBDA = 2e-3, 0.7, 0.04
OVERDRIVES = (0.2, 0.5, 1.2)
V_DS = 5.0


def device(*, lam: float = 0.0) -> SquareParameters:
    return SQUARE.prepare(
        {"vto": VTO, "kp": K, "lambda": lam},
        sign=1.0, w=1e-5, l=1e-5, m=1.0, temperature=ROOM_TEMPERATURE, tnom=ROOM_TEMPERATURE,
        on={effect: effect is not Effect.BULK_JUNCTIONS for effect in Effect},
    )  # fmt: skip


def currents(parameters: SquareParameters, v_gs: Array, v_ds: float = V_DS) -> Array:
    terminals = np.stack([np.full_like(v_gs, v_ds), v_gs, np.zeros_like(v_gs), np.zeros_like(v_gs)], axis=-1)
    return SQUARE.evaluate(parameters, terminals).currents[..., 0]


def harmonics(parameters: SquareParameters, *, v_ov: float, peak: float) -> Array:
    """Magnitudes of the harmonics of the drain current for a sine at the gate, from the mean on."""
    points = 256
    phase = 2.0 * np.pi * np.arange(points) / points
    waveform = currents(parameters, VTO + v_ov + peak * np.cos(phase))
    return 2.0 * np.abs(np.fft.rfft(waveform)) / points


@pytest.mark.parametrize("v_ov", OVERDRIVES)
def test_gm_is_k_times_overdrive_and_twice_the_current_over_it(v_ov: float) -> None:
    """Common practice; exact in saturation without channel-length modulation."""
    parameters, step = device(), 1e-5
    around = currents(parameters, VTO + v_ov + step * np.array([-1.0, 0.0, 1.0]))
    slope = (around[2] - around[0]) / (2.0 * step)
    assert slope == pytest.approx(K * v_ov, rel=1e-9)
    assert slope == pytest.approx(2.0 * around[1] / v_ov, rel=1e-9)
    assert transconductance(k=K, v_ov=v_ov, v_ds=V_DS) == pytest.approx(slope, rel=1e-9)


@pytest.mark.parametrize("v_ov", OVERDRIVES)
def test_channel_length_modulation_leaves_one_form_of_gm_and_not_the_other(v_ov: float) -> None:
    """Common practice: 2·ID/VOV stays true with λ, k·VOV is short by 1 + λ·VDS."""
    report = SQUARE.report(device(lam=LAMBDA), np.array([V_DS, VTO + v_ov, 0.0, 0.0]))
    assert report["gm"] == pytest.approx(2.0 * report["ID"] / v_ov, rel=1e-12)
    assert report["gm"] / (K * v_ov) == pytest.approx(1.0 + LAMBDA * V_DS, rel=1e-12)


@pytest.mark.parametrize("share", [0.01, 0.05, SMALL_SIGNAL_SHARE])
@pytest.mark.parametrize("v_ov", OVERDRIVES)
def test_second_harmonic_is_the_signal_over_four_overdrives(v_ov: float, share: float) -> None:
    """Published (Sansen ch. 18); exact for the square law, which has no third harmonic."""
    peak = share * 2.0 * v_ov
    mean, first, second, third = harmonics(device(), v_ov=v_ov, peak=peak)[:4]
    assert second / first == pytest.approx(peak / (4.0 * v_ov), rel=1e-9)
    assert third < 1e-12 * mean


@pytest.mark.parametrize("v_ov", OVERDRIVES)
def test_a_tenth_of_two_overdrives_is_five_percent_of_second_harmonic(v_ov: float) -> None:
    """Common practice: "well below 2·VOV" taken as a tenth; the peak is then 10 % off the straight line."""
    peak = SMALL_SIGNAL_SHARE * 2.0 * v_ov
    spectrum = harmonics(device(), v_ov=v_ov, peak=peak)
    assert spectrum[2] / spectrum[1] == pytest.approx(0.05, rel=1e-9)
    rest, top = currents(device(), VTO + v_ov + np.array([0.0, peak]))
    straight = K * v_ov * peak
    assert (top - rest) / straight - 1.0 == pytest.approx(0.10, rel=1e-9)
    # At 2·VOV itself the second-order term is as large as the first.
    rest, top = currents(device(), VTO + v_ov + np.array([0.0, 2.0 * v_ov]), v_ds=10.0)
    assert (top - rest) / (2.0 * K * v_ov**2) == pytest.approx(2.0, rel=1e-9)


STAGE = """\
format = 1
title = "Common source at the limit of small signal"
topology = "common-source"
[parts]
VDD = "12 V"
CIN = "1 µF"
R1 = "1Meg"
R2 = "150k"
RD = "4.7k"
RS = "{r_s}"
{bypass}
[models.N1]
polarity = "n"
VTO = "0.7"
KP = "2m"
[transistors.M1]
model = "N1"
W = "10u"
L = "10u"
[signal]
frequency = "10 kHz"
"""


@pytest.mark.parametrize(
    ("r_s", "bypass"), [("330", 'CS = "100 µF"'), ("330", "")], ids=["bypassed", "degenerated"]
)
def test_the_guard_speaks_where_the_second_harmonic_at_the_gate_reaches_five_percent(
    r_s: str, bypass: str
) -> None:
    """Common practice: counted between gate and source, behind the degeneration, not at the generator."""
    analysis = analyse(stage_from_text(STAGE.format(r_s=r_s, bypass=bypass), file="stage.toml"))
    (transistor,) = analysis.prediction.transistors
    g_m, load = analysis.prediction.value("gm(M1)"), float(r_s)
    assert g_m is not None
    assert g_m.value is not None
    feedback = 1.0 if bypass else 1.0 + g_m.value * load
    assert transistor.vgs_per_emf == pytest.approx(1.0 / feedback, rel=1e-3)
    limit = 0.2 * transistor.v_ov * feedback  # HD2 = (limit/feedback)/(4·VOV) = 5 %
    spoken = {}
    for factor in (0.99, 1.01):
        found = device_findings(analysis.prediction, None, stated={"M1": None}, amplitude=factor * limit)
        spoken[factor] = "signal-too-large" in {finding.slug for finding in found}
    assert spoken == {0.99: False, 1.01: True}


def test_the_guard_counts_the_signal_against_the_overdrive() -> None:
    """Twice the overdrive bears twice the signal."""
    analysis = analyse(stage_from_text(STAGE.format(r_s="330", bypass='CS = "100 µF"'), file="stage.toml"))
    (transistor,) = analysis.prediction.transistors
    wider = replace(transistor, v_ov=2.0 * transistor.v_ov)
    amplitude = 0.3 * transistor.v_ov / transistor.vgs_per_emf

    def speaks(one: object) -> bool:
        prediction = replace(analysis.prediction, transistors=(one,))
        found = device_findings(prediction, None, stated={"M1": None}, amplitude=amplitude)
        return "signal-too-large" in {finding.slug for finding in found}

    assert speaks(transistor)
    assert not speaks(wider)
