"""Cells of a report's tables: numbers with units, gaps in the measure that decided, words for verdicts.

All read one quantity of a check document.
"""

from __future__ import annotations

from typing import Any, Literal

from deckgen.units import format_value

Quantity = dict[str, Any]
Measure = Literal["dB", "%", "unit"]

NONE = "-"

_DIGITS = 4
_ANGLE = "deg"
_MOST_DECIMALS = 7
_GAP_DIGITS = 3
_MOST_DIGITS = 8
_ANGLE_SHOWN = 1.0
_LARGEST_ANGLE = 1e5  # what is larger is no angle, and must not widen the table

_CLAIM_WORDS = {"equals": "=", "at_least": "≥", "at_most": "≤"}
_CLAIM_VERDICTS = {"within": "met", "beyond": "MISSED"}


def value_cell(value: float | None, unit: str) -> str:
    """Write a value with all of its four digits, an angle to a hundredth of a degree."""
    if value is not None and unit == _ANGLE and abs(value) < _LARGEST_ANGLE:
        return f"{value + 0.0:.2f} {unit}"
    number, blank, suffix = format_value(value, unit, _DIGITS).partition(" ")
    digits = len(number.lstrip("-0.").replace(".", ""))
    if number.lstrip("-").replace(".", "").isdecimal() and 0 < digits < _DIGITS:
        number += ("" if "." in number else ".") + "0" * (_DIGITS - digits)
    return number + blank + suffix


def signed(text: str) -> str:
    """Put a plus before a number that has no minus."""
    return text if text.startswith("-") else f"+{text}"


def hand_cell(quantity: Quantity) -> str:
    """Write the hand value."""
    return value_cell(quantity["hand"], quantity["unit"])


def simulated_cell(quantity: Quantity) -> str:
    """Write the simulated value."""
    return value_cell(quantity["simulated"], quantity["unit"])


def deciding_measure(quantity: Quantity) -> Measure | None:
    """Measure of the tolerance that decides: dB, percent, or the floor in the quantity's own unit."""
    tolerance, hand = quantity["tolerance"], quantity["hand"]
    if tolerance["db"] is not None:
        return "dB"
    if tolerance["relative"] is None:
        return None if tolerance["absolute"] is None else "unit"
    if tolerance["absolute"] is None or hand is None:
        return "%"
    return "unit" if tolerance["absolute"] > tolerance["relative"] * abs(hand) else "%"


def gap_cell(quantity: Quantity) -> str:
    """Write the gap in the measure of its tolerance, or in the nearest one that exists."""
    gap, tolerance = quantity["gap"], quantity["tolerance"]
    measure = deciding_measure(quantity)
    if measure == "dB" and gap["db"] is not None:
        return f"{_to_tolerance(gap['db'], tolerance['db'])} dB"
    if measure != "unit" and gap["relative"] is not None:
        allowed = 100.0 * (tolerance["relative"] or 0.01)
        return f"{_to_tolerance(100.0 * gap['relative'], allowed)} %"
    return _unit_gap(gap["absolute"], quantity["unit"], tolerance["absolute"])


def unit_gap_cell(quantity: Quantity) -> str:
    """Write the gap in the quantity's own unit."""
    return _unit_gap(quantity["gap"]["absolute"], quantity["unit"], None)


def _unit_gap(gap: float | None, unit: str, tolerance: float | None) -> str:
    """Write a gap with a sign and three digits, or as many as show on which side of a tolerance it is."""
    if gap is None or abs(gap) <= 0.0:
        return format_value(gap, unit)
    if unit == _ANGLE:
        return f"{_to_tolerance(gap, _ANGLE_SHOWN if tolerance is None else tolerance)} {unit}"
    digits, edge = _GAP_DIGITS, format_value(tolerance, unit, _DIGITS)
    while digits < _MOST_DIGITS and format_value(abs(gap), unit, digits) == edge:
        digits += 1
    return signed(format_value(gap, unit, digits))


def tolerance_cell(quantity: Quantity) -> str:
    """Write the tolerance that decides."""
    tolerance = quantity["tolerance"]
    measure = deciding_measure(quantity)
    if measure is None:
        return NONE
    if measure == "dB":
        return f"±{tolerance['db']:.4g} dB"
    if measure == "%":
        return f"±{100.0 * tolerance['relative']:.4g} %"
    return f"±{format_value(tolerance['absolute'], quantity['unit'], _DIGITS)}"


def tolerance_used(quantity: Quantity) -> float:
    """Gap over tolerance: 1 is the edge, 0 where there is no gap, infinity where nothing is tolerated."""
    gap, tolerance = quantity["gap"], quantity["tolerance"]
    measure = deciding_measure(quantity)
    if gap["absolute"] is None or quantity["hand"] is None or measure is None:
        return 0.0
    if measure == "dB" and gap["db"] is not None:
        size, limit = abs(gap["db"]), tolerance["db"]
    elif measure == "dB":
        return float("inf")
    else:
        limit = tolerance["absolute"] if measure == "unit" else tolerance["relative"] * abs(quantity["hand"])
        size = abs(gap["absolute"])
    if size <= 0.0:
        return 0.0
    return float(size / limit) if limit > 0.0 else float("inf")


def verdict_cell(quantity: Quantity) -> str:
    """Write the verdict; capitals where the gap makes the check fail."""
    if quantity["verdict"] != "beyond":
        return str(quantity["verdict"])
    return "BEYOND" if quantity["excused"] is None else "beyond, excused"


def claim_cell(quantity: Quantity) -> str:
    """Write what the designer states."""
    value = format_value(quantity["claim"], quantity["unit"])
    if quantity["claim_kind"] == "within":
        return f"{value} … {format_value(quantity['claim_upper'], quantity['unit'])}"
    return f"{_CLAIM_WORDS[quantity['claim_kind']]} {value}"


def claim_verdict_cell(verdict: str) -> str:
    """Write how a claim came out."""
    return _CLAIM_VERDICTS.get(verdict, verdict)


def _to_tolerance(gap: float, tolerance: float) -> str:
    """Write a gap with a sign, to about a hundredth of its tolerance, never rounded across it."""
    size = abs(gap)
    if size <= 0.0:
        return "0"
    if size >= 1e5:
        return f"{gap:+.2e}"
    decimals = next((places for places, edge in enumerate((5.0, 0.5, 0.05), 1) if tolerance >= edge), 4)
    while decimals < _MOST_DECIMALS and (round(size, decimals) > tolerance) != (size > tolerance):
        decimals += 1
    return f"{gap:+.{decimals}f}"
