"""Numbers in stage files: what is read, what is refused and how, and that what is printed reads back."""

from __future__ import annotations

import contextlib
import math

import pytest
from hypothesis import assume, given
from hypothesis import strategies as st

from deckgen.units import CELSIUS_ZERO, UnitError, celsius, format_value, kelvin, parse_number, shown

READ = [
    # SI prefixes, with and without the unit
    ("4.7k", "Ω", 4700.0),
    ("4.7K", "Ω", 4700.0),
    ("10 \u00b5F", "F", 1e-5),
    ("10 \u03bcF", "F", 1e-5),
    ("10u", "F", 1e-5),
    ("1.5 Meg", "Ω", 1.5e6),
    ("1Meg", "Ω", 1e6),
    ("1meg", "Ω", 1e6),
    ("1 MEG Ω", "Ω", 1e6),
    ("3.3 k\u03a9", "Ω", 3300.0),
    ("3.3 k\u2126", "Ω", 3300.0),
    ("3.3kohm", "Ω", 3300.0),
    ("20 mV", "V", 0.02),
    ("20m", "V", 0.02),
    ("2 fF", "F", 2e-15),
    ("2 aF", "F", 2e-18),
    ("10 F", "F", 10.0),
    ("10 f", "F", 1e-14),
    ("1 TΩ", "Ω", 1e12),
    ("1G", "Ω", 1e9),
    ("2 u", "m", 2e-6),
    ("2 µm", "m", 2e-6),
    ("1 mm", "m", 1e-3),
    ("5\u202fkΩ", "Ω", 5000.0),
    # a capital M before Ω and Hz
    ("1 MHz", "Hz", 1e6),
    ("2.2MΩ", "Ω", 2.2e6),
    ("1M5Ω", "Ω", 1.5e6),
    # IEC 60062
    ("4k7", "Ω", 4700.0),
    ("2u2", "F", 2.2e-6),
    ("2µ2", "F", 2.2e-6),
    ("4n7F", "F", 4.7e-9),
    ("R47", "Ω", 0.47),
    ("4R7", "Ω", 4.7),
    ("100R", "Ω", 100.0),
    ("p33", "F", 0.33e-12),
    ("4k7 Ω", "Ω", 4700.0),
    ("3V3", "V", 3.3),
    ("-3V3", "V", -3.3),
    # exponents, signs, bare forms
    ("1e-6", "F", 1e-6),
    ("1E3 Ω", "Ω", 1000.0),
    ("-0.9", "V", -0.9),
    ("+.5", "V", 0.5),
    ("5.", "V", 5.0),
    (12, "V", 12.0),
    (0.5, "V", 0.5),
    # units without a prefix of their own
    ("3%", "%", 0.03),
    ("3 %", "%", 0.03),
    ("-20 V/V", "V/V", -20.0),
    ("0.5 dB", "dB", 0.5),
    ("5 deg", "deg", 5.0),
    ("5°", "deg", 5.0),
    ("27 °C", "°C", 27.0),
    ("-40", "°C", -40.0),
    ("20m", "1/V", 0.02),
    ("0.02 1/V", "1/V", 0.02),
    ("120 µA/V^2", "A/V²", 1.2e-4),
    ("0.4 √V", "V^0.5", 0.4),
    ("600 cm²/Vs", "cm²/Vs", 600.0),
    ("200 pF/m", "F/m", 2e-10),
    ("2", "", 2.0),
    # no unit expected
    ("5m", None, 5e-3),
    ("10 µF", None, 1e-5),
    ("4k7", None, 4700.0),
]

REFUSED = [
    # text, unit, part of what is expected, nearest
    ("1M", "Ω", '"1Meg" or "1m"', None),
    ("1.5 M", "Ω", '"1.5Meg" or "1.5m"', None),
    ("1M5", "Ω", '"1.5Meg" or "1.5m"', None),
    ("M47", "Ω", '"0.47Meg" or "0.47m"', None),
    ("1M", None, '"1Meg" or "1m"', None),
    ("10 MV", "V", '"10MegV" or "10mV"', None),
    ("1 MF", "F", '"1MegF" or "1mF"', None),
    ("5m", "m", '"5 mm" or, for metres, "5"', None),
    ("5 m", "m", "a lone m is metre or milli", None),
    ("2m2", "m", '"2.2 mm"', None),
    ("10 nF", "Ω", "a value in Ω", None),
    ("3V3", "Ω", "a value in Ω", None),
    ("4R7", "F", "a value in F", None),
    ("20 dB", "V/V", "a value in V/V", None),
    ("20 mV/V", "V/V", "a value in V/V", None),
    ("5k", "dB", "a value in dB", None),
    ("300 K", "°C", "a value in °C", None),
    ("2 V", "", "a plain number", None),
    ("3 %", "V", "a value in V", None),
    ("3 %", None, "a number", None),
    ("3", "%", "a percentage", None),
    (3, "%", "a percentage", '"3 %"'),
    ("4,7k", "Ω", "a decimal point", '"4.7k"'),
    ("1,000", "Ω", "no other separators", None),
    ("1,000,000.5", "Ω", "no other separators", None),
    ("0x10", "Ω", "a decimal number", None),
    ("0b1", "Ω", "a decimal number", None),
    ("1_000", "Ω", "digits without underscores", '"1000"'),
    ("nan", "V", "a finite number", None),
    ("NaN", "V", "a finite number", None),
    ("-inf", "V", "a finite number", None),
    ("Infinity", "V", "a finite number", None),
    (math.nan, "V", "finite", None),
    (-math.inf, "V", "finite", None),
    (10**5000, "V", "finite", None),
    (10**5000, "%", "finite", None),
    ("1e999", "V", "a number between 1e-307 and 1e308", None),
    ("1e-999", "V", "a number between 1e-307 and 1e308", None),
    ("", "V", "a value in V", None),
    ("  ", "V", "a value in V", None),
    ("9" * 65, "V", "a value in V", None),
    ("V", "V", "a value in V", None),
    ("12 V supply", "V", "a value in V", None),
    ("1.2.3", "V", "a value in V", None),
    ("1 2", "V", "a value in V", None),
    ("--1", "V", "a value in V", None),
    ("1k k", "Ω", "a value in Ω", None),
    ("4r7", "Ω", "a value in Ω", None),
    ("1 kR", "Ω", "a value in Ω", None),
    ("\uff11\uff12", "V", "a value in V", None),
    ("\u22125", "V", "an ASCII minus sign", '"-5"'),
    ("10uf", "F", "a value in F", '"10uF"'),
    ("1 khz", "Hz", "a value in Hz", '"1kHz"'),
    ("10 mv", "V", "a value in V", '"10mV"'),
    ("10 mhz", "Hz", "a value in Hz", None),  # milli or mega: no guess
    (True, "V", "a value in V", None),
]


@pytest.mark.parametrize(("text", "unit", "value"), READ, ids=lambda case: shown(case))
def test_a_number_is_read(text: str | float, unit: str | None, value: float) -> None:
    assert parse_number(text, unit=unit) == pytest.approx(value, rel=1e-15)


@pytest.mark.parametrize(("text", "unit", "expected", "nearest"), REFUSED, ids=lambda case: shown(case)[:40])
def test_anything_else_is_refused_with_what_to_write(
    text: str | float, unit: str | None, expected: str, nearest: str | None
) -> None:
    with pytest.raises(UnitError) as caught:
        parse_number(text, unit=unit)
    assert expected in caught.value.expected
    assert caught.value.nearest == nearest
    found = shown(text) if not isinstance(text, str) or text.strip() else "an empty text"
    assert caught.value.found == found
    assert caught.value.found in str(caught.value)


def test_a_prefix_is_not_a_second_rounding() -> None:
    """4.7 times 1e-6 in floats is not the float nearest to 0.0000047."""
    assert parse_number("4.7u", unit="F").hex() == float("4.7e-6").hex()
    assert parse_number("3.3 %", unit="%").hex() == float("0.033").hex()


def test_an_error_message_shows_no_control_character() -> None:
    with pytest.raises(UnitError) as caught:
        parse_number("1\x1b[31m\n", unit="V")
    assert caught.value.found == '"1\\u001b[31m\\u000a"'
    assert shown("a" * 100) == '"' + "a" * 63 + '…"'
    assert shown({}) == "a table"
    assert shown([]) == "a list"


PRINTED = [
    (4700.0, "Ω", "4.7 kΩ"),
    (1.5e6, "Ω", "1.5 MΩ"),
    (1.5e6, "V", "1.5e6 V"),
    (4.7e-6, "F", "4.7 µF"),
    (999.96, "Hz", "1 kHz"),
    (-0.0123456, "V", "-12.35 mV"),
    (0.0, "A", "0 A"),
    (-0.0, "A", "0 A"),
    (-0.0, "V/V", "0 V/V"),
    (-18.123456, "V/V", "-18.12 V/V"),
    (0.0203, "V/V", "0.0203 V/V"),
    (25.0, "dB", "25 dB"),
    (178.26, "deg", "178.3 deg"),
    (0.05, "%", "5 %"),
    (2.0, "", "2"),
    (1.2e-4, "A/V²", "120 µA/V²"),
    (2.5e-8, "V/√Hz", "25 nV/√Hz"),
    (None, "Ω", "-"),
]


@pytest.mark.parametrize(("value", "unit", "text"), PRINTED)
def test_a_value_is_printed_in_engineering_notation(value: float | None, unit: str, text: str) -> None:
    assert format_value(value, unit) == text


def test_the_number_of_digits_can_be_chosen() -> None:
    assert format_value(1234.56, "Ω", 3) == "1.23 kΩ"
    assert format_value(1234.56, "Ω", 6) == "1.23456 kΩ"
    assert format_value(1.23456, "V/V", 2) == "1.2 V/V"


def test_what_is_no_number_is_printed_as_such_and_never_reads_back() -> None:
    for value in (math.nan, math.inf, -math.inf):
        text = format_value(value, "V")
        with pytest.raises(UnitError):
            parse_number(text, unit="V")


def test_printing_leaves_the_preferences_of_others_alone() -> None:
    from quantiphy import Quantity

    format_value(4.7e-6, "F")
    assert str(Quantity(4.7e-6, "F")) == "4.7 uF"


UNITS = [
    "Ω",
    "V",
    "A",
    "F",
    "H",
    "Hz",
    "W",
    "S",
    "s",
    "V/V",
    "A/V²",
    "F/m",
    "1/V",
    "V^0.5",
    "dB",
    "deg",
    "%",
    "",
]
FINITE = st.floats(min_value=-1e300, max_value=1e300, allow_nan=False, allow_subnormal=False)


@given(value=FINITE, unit=st.sampled_from(UNITS), digits=st.integers(2, 12))
def test_every_value_printed_reads_back_within_rounding(value: float, unit: str, digits: int) -> None:
    assume(abs(value) > 1e-300 or not abs(value) > 0.0)
    back = parse_number(format_value(value, unit, digits), unit=unit)
    # Half a unit in the last of the digits, which is largest beside a leading one.
    assert abs(back - value) <= 0.5000001 * 10.0 ** (1 - digits) * abs(value)


@given(value=st.floats(min_value=1e-15, max_value=0.99), digits=st.integers(2, 12))
def test_lengths_below_a_metre_read_back(value: float, digits: int) -> None:
    text = format_value(value, "m", digits)
    assume(text != "1 m")
    assert parse_number(text, unit="m") == pytest.approx(value, rel=10.0 ** (1 - digits))


@given(value=FINITE)
def test_the_shortest_text_of_a_float_reads_back_exactly(value: float) -> None:
    assert parse_number(repr(value), unit="V").hex() == (value + 0.0).hex() or value == 0.0


PREFIXES = {"T": 12, "G": 9, "Meg": 6, "k": 3, "": 0, "m": -3, "u": -6, "µ": -6, "n": -9, "p": -12, "f": -15}


@given(
    whole=st.integers(0, 9999),
    fraction=st.integers(0, 9999),
    prefix=st.sampled_from(sorted(PREFIXES)),
    unit=st.sampled_from(["Ω", "V", "A", "F", "H", "Hz", "W", "S"]),
    written=st.booleans(),
    space=st.sampled_from(["", " ", "\u00a0"]),
)
def test_a_prefix_is_a_power_of_ten(
    whole: int, fraction: int, prefix: str, unit: str, written: bool, space: str
) -> None:
    text = f"{whole}.{fraction}{space}{prefix}{unit if written else ''}"
    assert parse_number(text, unit=unit).hex() == float(f"{whole}.{fraction}e{PREFIXES[prefix]}").hex()


@given(
    whole=st.integers(0, 999),
    fraction=st.integers(0, 99),
    letter=st.sampled_from(["R", "k", "K", "G", "m", "µ", "n"]),
)
def test_a_code_has_its_letter_at_the_decimal_point(whole: int, fraction: int, letter: str) -> None:
    power = {"R": 0, "k": 3, "K": 3, "G": 9, "m": -3, "µ": -6, "n": -9}[letter]
    value = parse_number(f"{whole}{letter}{fraction}", unit="Ω")
    assert value.hex() == float(f"{whole}.{fraction}e{power}").hex()


@given(text=st.text(max_size=20) | st.from_regex(r"[+-]?[0-9.,]{1,4} ?[A-Za-zµΩ%/^0-9]{0,4}", fullmatch=True))
def test_any_text_gives_a_finite_number_or_a_refusal(text: str) -> None:
    for unit in ("Ω", "m", "%", "", None):
        with contextlib.suppress(UnitError):
            assert math.isfinite(parse_number(text, unit=unit))


def test_a_suggestion_is_itself_accepted() -> None:
    for text, unit, _, nearest in REFUSED:
        if nearest is not None:
            assert math.isfinite(parse_number(nearest.strip('"'), unit=unit)), text


def test_temperatures_turn_from_celsius_to_kelvin_and_back() -> None:
    assert kelvin(27.0) == pytest.approx(300.15, abs=1e-12)
    assert celsius(CELSIUS_ZERO) == pytest.approx(0.0, abs=1e-12)
    assert celsius(kelvin(-40.0)) == pytest.approx(-40.0, abs=1e-12)
