"""Published formulas against one another: forms of the same fact agree, and regions meet at their edge."""

from __future__ import annotations

import math

import pytest

from deckgen.errors import FormulaInputError
from deckgen.hand.formulas.bias import overdrive_with_source_resistor, triode_current_with_resistors
from deckgen.hand.formulas.device import saturation_current, transconductance, triode_current
from deckgen.hand.formulas.gain import (
    common_source_gain,
    drain_resistance,
    effective_transconductance,
    parallel,
    source_resistance,
)


def test_the_forms_of_a_transconductance_agree() -> None:
    """In saturation gm = k·VOV = 2·ID/VOV = √(2·k·ID); common practice."""
    for k, v_ov in ((1e-3, 0.3), (2e-5, 2.0)):
        i_d, gm = saturation_current(k=k, v_ov=v_ov), transconductance(k=k, v_ov=v_ov, v_ds=5.0)
        assert gm == pytest.approx(2 * i_d / v_ov, rel=1e-12)
        assert gm == pytest.approx(math.sqrt(2 * k * i_d), rel=1e-12)


def test_triode_meets_saturation_at_its_edge_and_the_overdrive_formula_solves_its_quadratic() -> None:
    assert triode_current(k=1e-3, v_ov=0.7, v_ds=0.7) == pytest.approx(saturation_current(k=1e-3, v_ov=0.7))
    for drive in (-1.0, 1e-9, 0.5, 40.0):
        v_ov = overdrive_with_source_resistor(v_drive=drive, k=2e-3, r_s=5e3)
        left = v_ov + 0.5 * 2e-3 * 5e3 * max(v_ov, 0.0) ** 2
        assert left == pytest.approx(drive, rel=1e-12)
    for r_s, r_d in ((0.0, 1e5), (1e4, 1e5), (1e4, 1e4), (5e4, 5e4)):
        i_d = triode_current_with_resistors(v_drive=3.0, v_supply=5.0, k=1e-3, r_s=r_s, r_d=r_d)
        v_ov, v_ds = 3.0 - i_d * r_s, 5.0 - i_d * (r_s + r_d)
        assert 0.0 <= v_ds <= v_ov
        assert triode_current(k=1e-3, v_ov=v_ov, v_ds=v_ds) == pytest.approx(i_d, rel=1e-9)
    with pytest.raises(FormulaInputError, match="a root in triode"):
        triode_current_with_resistors(v_drive=1.0, v_supply=50.0, k=1e-3, r_s=0.0, r_d=1e3)


def test_gain_is_effective_transconductance_times_what_the_drain_sees() -> None:
    device = {"gm": 3e-3, "gmb": 5e-4, "ro": 40e3}
    for r_s in (0.0, 100.0, 5e3):
        out = parallel(8e3, drain_resistance(**device, r_s=r_s))
        whole = effective_transconductance(**device, r_s=r_s)
        gain = common_source_gain(**device, r_d=8e3, r_s=r_s)
        assert gain == pytest.approx(-whole * out, rel=1e-12)
    assert source_resistance(**device, r_d=0.0) == pytest.approx(1 / (3e-3 + 5e-4 + 1 / 40e3), rel=1e-12)


def test_resistors_in_parallel_take_nothing_and_infinity() -> None:
    assert parallel() == math.inf
    assert parallel(math.inf, 5.0) == pytest.approx(5.0)
    assert parallel(0.0, 5.0) == pytest.approx(0.0, abs=0.0)
    assert parallel(math.inf) == math.inf
