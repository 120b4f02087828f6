"""Cells of the reports: gaps in the measure that decides, never rounded into another verdict."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from deckgen.comparison import AppliedTolerance, Gap, Row, Verdict
from deckgen.report import cells
from tests.unit import report_samples as samples


def _tolerance(relative: float | None, absolute: float | None, db: float | None) -> AppliedTolerance:
    return AppliedTolerance(relative, absolute, db, "default")


def _quantity(**changes: Any) -> dict[str, Any]:
    judged = Row("Rin", "Ω", 1000.0, 1100.0, Verdict.WITHIN, "nodal", Gap(100.0, 0.1, 0.828))
    comparison = replace(samples.CLEAN, quantities=(replace(judged, **changes),))
    quantity = samples.checked(comparison)["stages"][0]["quantities"][0]
    assert isinstance(quantity, dict)
    return quantity


@given(st.floats(1e-4, 1.0), st.sampled_from([0.9, 0.99, 0.999, 0.9997, 1.0003, 1.001, 1.01, 1.1]))
def test_a_gap_is_not_rounded_across_its_tolerance(tolerance: float, used: float) -> None:
    quantity = _quantity(tolerance=_tolerance(tolerance, None, None), gap=Gap(1.0, tolerance * used))
    shown = float(cells.gap_cell(quantity).split()[0])
    assert (shown > 100.0 * tolerance) == (used > 1.0)


@given(st.integers(1, 9999), st.sampled_from([1.0003, 1.001, 1.01, 1.1]))
def test_a_gap_beyond_a_floor_never_looks_like_the_floor(count: int, used: float) -> None:
    for unit, floor in (("V", 1e-4 * count), ("deg", 1e-2 * count)):
        quantity = _quantity(unit=unit, tolerance=_tolerance(None, floor, None), gap=Gap(floor * used))
        assert cells.gap_cell(quantity).removeprefix("+") != cells.tolerance_cell(quantity).removeprefix("±")


def test_the_tolerance_that_decides_is_shown() -> None:
    assert cells.tolerance_cell(_quantity(tolerance=_tolerance(0.1, 50.0, None))) == "±10 %"
    assert cells.tolerance_cell(_quantity(tolerance=_tolerance(0.1, 200.0, None))) == "±200 Ω"
    assert cells.gap_cell(_quantity(tolerance=_tolerance(0.1, 200.0, None))) == "+100 Ω"
    assert cells.tolerance_cell(_quantity(tolerance=_tolerance(0.1, 200.0, 1.0))) == "±1 dB"
    assert cells.gap_cell(_quantity(tolerance=_tolerance(None, None, 1.0))) == "+0.83 dB"
    assert cells.tolerance_cell(_quantity(tolerance=None)) == "-"
    assert cells.gap_cell(_quantity(tolerance=None)) == "+10.00 %"


def test_a_gain_of_the_wrong_sign_has_no_decibels_and_shows_its_gap_in_percent() -> None:
    quantity = _quantity(
        hand=-5.0,
        simulated=5.0,
        gap=Gap(10.0, 2.0),
        tolerance=_tolerance(None, None, 1.0),
        verdict=Verdict.BEYOND,
    )
    assert cells.gap_cell(quantity) == "+200.00 %"
    assert cells.tolerance_used(quantity) == float("inf")


def test_how_much_of_its_tolerance_a_gap_uses_up() -> None:
    assert cells.tolerance_used(_quantity(tolerance=_tolerance(0.2, 50.0, None))) == pytest.approx(0.5)
    assert cells.tolerance_used(_quantity(tolerance=_tolerance(0.2, 400.0, None))) == pytest.approx(0.25)
    assert cells.tolerance_used(_quantity(tolerance=_tolerance(0.2, 400.0, 1.0))) == pytest.approx(0.828)
    assert cells.tolerance_used(_quantity(tolerance=_tolerance(0.0, None, None))) == float("inf")
    assert cells.tolerance_used(_quantity(tolerance=None)) == 0.0
    assert cells.tolerance_used(_quantity(hand=None, gap=None)) == 0.0
    nothing = _quantity(hand=None, tolerance=_tolerance(0.2, None, None), verdict=Verdict.BEYOND)
    assert cells.tolerance_used(nothing) == 0.0


def test_a_value_shows_its_four_digits() -> None:
    assert cells.value_cell(1.5, "V") == "1.500 V"
    assert cells.value_cell(-994e-6, "A") == "-994.0 µA"
    assert cells.value_cell(0.9312, "V/V") == "0.9312 V/V"
    assert cells.value_cell(12346.0, "Ω") == "12.35 kΩ"
    assert cells.value_cell(0.0, "V") == "0 V"
    assert cells.value_cell(None, "V") == "-"
    assert cells.value_cell(-0.0959, "deg") == "-0.10 deg"
