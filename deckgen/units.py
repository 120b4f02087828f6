"""Numbers as engineers write them: read from stage files and options, printed in reports.

A number is digits with a decimal point, an optional exponent, then an optional SI prefix and unit
(``4.7k``, ``10 µF``, ``1.5 Meg``, ``20 mV``), or an IEC 60062 code (``4k7``, ``2u2``, ``R47``, ``3V3``),
or a percentage where one is expected. Either micro sign will do, and either ohm sign.

A capital ``M`` means mega to people and milli to SPICE, whatever the unit. It is taken as mega before Ω
and Hz, where nobody writes milli in capitals, and refused everywhere else, also inside a code (``1M5``).
A lone ``m`` is milli; where metres are expected it could be either, and is refused.
"""

from __future__ import annotations

import math
import re
from collections.abc import Iterator
from dataclasses import dataclass
from functools import cache
from typing import Any, Literal

CELSIUS_ZERO = 273.15
"""0 °C in kelvin; exact by the definition of the degree Celsius."""


class UnitError(ValueError):
    """A text is no number of the unit asked for; says what was found and what to write instead."""

    def __init__(self, *, found: str, expected: str, nearest: str | None = None) -> None:
        self.found = found
        self.expected = expected
        self.nearest = nearest
        hint = f"; did you mean {nearest}?" if nearest else ""
        super().__init__(f"found {found}, expected {expected}{hint}")


@dataclass(frozen=True, slots=True)
class _Unit:
    """``prefix``: with and without the unit, only without it (``LAMBDA = 20m``), or never.

    ``mega`` units may carry a capital M.
    """

    name: str
    spellings: tuple[str, ...]
    prefix: Literal["any", "bare", "never"] = "any"
    mega: bool = False


_UNITS = (
    _Unit("Ω", ("Ω", "\u2126", "ohm", "Ohm", "OHM", "ohms", "Ohms"), mega=True),
    _Unit("Hz", ("Hz",), mega=True),
    _Unit("V", ("V",)),
    _Unit("A", ("A",)),
    _Unit("F", ("F",)),
    _Unit("H", ("H",)),
    _Unit("W", ("W",)),
    _Unit("S", ("S",)),
    _Unit("s", ("s",)),
    _Unit("m", ("m",)),
    _Unit("F/m", ("F/m",)),
    _Unit("F/m²", ("F/m²", "F/m^2", "F/m2")),
    _Unit("A/m²", ("A/m²", "A/m^2", "A/m2")),
    # A prefix before m² would be squared or not, as one reads it.
    _Unit("m²", ("m²", "m^2", "m2"), prefix="bare"),
    _Unit("1/cm³", ("1/cm³", "1/cm^3", "cm^-3"), prefix="bare"),
    _Unit("1/cm²", ("1/cm²", "1/cm^2", "cm^-2"), prefix="bare"),
    _Unit("A/V²", ("A/V²", "A/V^2", "A/V2")),
    _Unit("V/V", ("V/V",), prefix="bare"),
    _Unit("1/V", ("1/V", "V^-1"), prefix="bare"),
    _Unit("V^0.5", ("V^0.5", "√V", "V^(1/2)"), prefix="bare"),
    _Unit("cm²/Vs", ("cm²/Vs", "cm^2/Vs", "cm2/Vs", "cm²/(V·s)", "cm^2/(V*s)"), prefix="bare"),
    _Unit("", (), prefix="bare"),
    _Unit("dB", ("dB",), prefix="never"),
    _Unit("deg", ("deg", "°"), prefix="never"),
    _Unit("°C", ("°C", "degC", "℃", "C"), prefix="never"),
    _Unit("%", ("%",), prefix="never"),
)
_BY_NAME = {unit.name: unit for unit in _UNITS}
_BY_SPELLING = {spelling: unit for unit in _UNITS for spelling in unit.spellings}

_PREFIXES = {
    "T": 12, "G": 9, "M": 6, "k": 3, "K": 3, "m": -3, "u": -6, "\u00b5": -6, "\u03bc": -6,
    "n": -9, "p": -12, "f": -15, "a": -18,
}  # fmt: skip
_MEG = re.compile("meg", re.IGNORECASE)

# Typographic spaces between number and unit (no-break, thin, narrow no-break) come with copied text.
_SPACES = " \t\u00a0\u2009\u202f"
_NUMBER = re.compile(
    rf"([+-]?)([0-9]+(?:\.[0-9]*)?|\.[0-9]+)(?:[eE]([+-]?[0-9]{{1,4}}))?[{_SPACES}]*(.*)", re.DOTALL
)
_CODE = re.compile(rf"([+-]?)([0-9]*)([RVTGMkKmuµμnp])([0-9]+)[{_SPACES}]*(.*)", re.DOTALL)
_CODE_UNITS = {"R": "Ω", "V": "V"}
_COMMA = re.compile(r"[+-]?[0-9]+,[0-9]+")

_LONGEST = 64


def kelvin(celsius: float) -> float:
    """Absolute temperature [K] of a temperature in °C."""
    return celsius + CELSIUS_ZERO


def celsius(kelvin: float) -> float:
    """Temperature in °C of an absolute temperature [K]."""
    return kelvin - CELSIUS_ZERO


def shown(value: object) -> str:
    """Write a value as an error message shows it: as TOML does, short, with nothing unprintable."""
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, dict | list):
        return "a table" if isinstance(value, dict) else "a list"
    if isinstance(value, int) and value.bit_length() > _LONGEST:
        return "a huge whole number"
    if not isinstance(value, str):
        return str(value)
    text = value if len(value) <= _LONGEST else value[: _LONGEST - 1] + "…"
    return '"' + "".join(c if c.isprintable() else f"\\u{ord(c):04x}" for c in text) + '"'


def parse_number(text: str | int | float, *, unit: str | None = None) -> float:
    """Read one number and return it in the base unit (a percentage as a fraction).

    ``unit`` is the unit expected, as this module spells it: ``"Ω"``, ``"V/V"``, ``""`` for a plain
    number; None takes any of them but a percentage. The unit itself may always be left out, except
    that a percentage needs its sign. Raises UnitError.
    """
    expected = _expected(unit)
    if isinstance(text, bool):
        raise UnitError(found=shown(text), expected=expected)
    if isinstance(text, str):
        return _parse_text(text, unit)
    value = math.inf if isinstance(text, int) and text.bit_length() > 1023 else float(text)
    if not math.isfinite(value):
        raise UnitError(found=shown(text), expected=f"{expected}, finite")
    if unit == "%":
        raise UnitError(found=shown(text), expected=expected, nearest=f'"{text} %"')
    return value


def _parse_text(text: str, unit: str | None) -> float:
    stripped = text.strip(_SPACES)
    if not stripped or len(text) > _LONGEST:
        raise UnitError(found=shown(text) if stripped else "an empty text", expected=_expected(unit))
    written = _read_code(stripped) or _read_plain(stripped)
    if written is None or not written.readings:
        _explain(stripped, shown(text))
        nearest = None if written is None else _near_suffix(written, unit)
        raise UnitError(found=shown(text), expected=_expected(unit), nearest=nearest)
    power = _choose(written, unit, text)
    return _finite(f"{written.mantissa}e{written.exponent + power}", text)


@dataclass(frozen=True, slots=True)
class _Written:
    """A number taken apart.

    ``readings``: each power of ten, with its unit or None for "not written", that ``suffix`` may mean.
    """

    mantissa: str
    exponent: int
    suffix: str
    readings: tuple[tuple[int, str | None], ...]

    @property
    def number(self) -> str:
        return f"{self.mantissa}e{self.exponent}" if self.exponent else self.mantissa


def _read_plain(text: str) -> _Written | None:
    match = _NUMBER.fullmatch(text)
    if match is None:
        return None
    sign, digits, power, suffix = match.groups()
    return _Written(sign + digits, int(power or 0), suffix, tuple(_readings(suffix)))


def _read_code(text: str) -> _Written | None:
    """Read an IEC 60062 code, where a letter stands at the place of the decimal point."""
    match = _CODE.fullmatch(text)
    if match is None:
        return None
    sign, whole, letter, fraction, suffix = match.groups()
    mantissa = f"{sign}{whole or '0'}.{fraction}"
    if letter not in _CODE_UNITS:
        prefixed = tuple(reading for reading in _readings(letter + suffix) if reading[0] != 0)
        return _Written(mantissa, 0, letter + suffix, prefixed)
    unit = _CODE_UNITS[letter]
    repeated = not suffix or suffix in _BY_NAME[unit].spellings
    return _Written(mantissa, 0, letter + suffix, ((0, unit),) if repeated else ())


def _explain(text: str, found: str) -> None:
    """Raise for what other grammars take for a number, each with its own hint."""
    if _COMMA.match(text):
        thousands = re.match(r"[+-]?[0-9]{1,3}(?:,[0-9]{3})+(?![0-9])", text)
        nearest = None if thousands or text.count(",") > 1 else f'"{text.replace(",", ".")}"'
        raise UnitError(found=found, expected="a decimal point and no other separators", nearest=nearest)
    if re.match(r"[+-]?[0-9]+_", text):
        nearest = f'"{text.replace("_", "")}"'
        raise UnitError(found=found, expected="digits without underscores", nearest=nearest)
    if re.match(r"[+-]?0[xXbBoO]", text):
        raise UnitError(found=found, expected="a decimal number")
    if re.match(r"[+-]?(?:nan|inf)", text, re.IGNORECASE):
        raise UnitError(found=found, expected="a finite number")
    if text.startswith("\u2212"):
        raise UnitError(found=found, expected="an ASCII minus sign", nearest=f'"-{text[1:]}"')


def _readings(suffix: str) -> Iterator[tuple[int, str | None]]:
    """All that a suffix may mean; a prefix comes after the unit of the same spelling."""
    if not suffix:
        yield 0, None
        return
    if suffix in _BY_SPELLING:
        unit = _BY_SPELLING[suffix].name
        yield (-2 if unit == "%" else 0), unit
    if suffix == "R":
        yield 0, "Ω"
    meg = _MEG.match(suffix)
    power = 6 if meg else _PREFIXES.get(suffix[0])
    if power is None:
        return
    name = suffix[3:].lstrip(_SPACES) if meg else suffix[1:]
    if not name:
        yield power, None
    elif name in _BY_SPELLING and _BY_SPELLING[name].prefix == "any":
        yield power, _BY_SPELLING[name].name


def _choose(written: _Written, unit: str | None, text: str) -> int:
    """Power of ten of the one reading that gives the unit expected."""
    suffix = written.suffix
    if unit == "m" and suffix == "m":
        ways = f'"{written.number} mm" or, for metres, "{written.number}"'
        raise UnitError(found=shown(text), expected=f"{ways} (a lone m is metre or milli)")
    fitting = [reading for reading in written.readings if _fits(reading, unit)]
    if not fitting:
        raise UnitError(found=shown(text), expected=_expected(unit))
    power, name = fitting[-1]
    if suffix.startswith("M") and not _MEG.match(suffix) and not (name and _BY_NAME[name].mega):
        ways = " or ".join(f'"{written.number}{prefix}{suffix[1:]}"' for prefix in ("Meg", "m"))
        raise UnitError(found=shown(text), expected=f"{ways} (a capital M is mega to people, milli to SPICE)")
    return power


def _fits(reading: tuple[int, str | None], unit: str | None) -> bool:
    power, name = reading
    if unit is None:
        return name != "%"
    if name is None:
        return unit != "%" and (power == 0 or _known(unit).prefix != "never")
    return name == unit


def _known(unit: str) -> _Unit:
    return _BY_NAME.get(unit) or _Unit(unit, (unit,))


def _expected(unit: str | None) -> str:
    if unit is None:
        return 'a number such as "4.7k"'
    if unit == "":
        return "a plain number"
    return 'a percentage such as "3 %"' if unit == "%" else f"a value in {unit}"


def _near_suffix(written: _Written, unit: str | None) -> str | None:
    """Spell prefix and unit right, where only upper and lower case are wrong and leave no doubt.

    A spelling that is merely close could be another power of ten.
    """
    units = _UNITS if unit is None else (_known(unit),)
    folded = written.suffix.casefold()
    same = [suffix for u in units for suffix in _suffixes(u) if suffix.casefold() == folded]
    powers = {reading for suffix in same for reading in _readings(suffix)}
    return f'"{written.number}{same[0]}"' if len(powers) == 1 else None


def _suffixes(unit: _Unit) -> Iterator[str]:
    yield from unit.spellings
    if unit.prefix == "any":
        prefixes = [p for p in _PREFIXES if p != "M" or unit.mega]
        yield from (prefix + spelling for spelling in unit.spellings for prefix in prefixes)


def _finite(digits: str, text: str) -> float:
    """Round to the nearest float, once: prefixes are exponents by now."""
    value = float(digits)
    vanished = value == 0.0 and re.search(r"[1-9]", digits.partition("e")[0]) is not None
    if vanished or not math.isfinite(value):
        raise UnitError(found=shown(text), expected="a number between 1e-307 and 1e308")
    return value


def format_value(value: float | None, unit: str, digits: int = 4) -> str:
    """Write a value in engineering notation with its unit: ``4.7 kΩ``, ``-`` for None.

    Units that take no prefix (dB, deg, V/V …) get a plain number. A fraction is written in percent.
    Everything that is written here reads back within rounding, but for whole metres.
    """
    if value is None:
        return "-"
    known = _known(unit)
    if known.prefix != "any":
        number = 100.0 * value if unit == "%" else value
        return f"{_plain(number, digits)} {unit}".rstrip()
    return str(_printer(known.mega)(value, unit).render(prec=digits - 1))


def _plain(number: float, digits: int) -> str:
    # Adding zero turns -0.0 into 0.0.
    return f"{number + 0.0:.{digits}g}"


@cache
def _printer(mega: bool) -> Any:
    """Make a quantity class of our own, so that nobody else's preferences are set."""
    from quantiphy import Quantity

    class Printed(Quantity):
        """Engineering notation with the prefixes that parse_number reads."""

    prefixes = "TGMkmunpfa" if mega else "TGkmunpfa"
    Printed.set_prefs(output_sf=prefixes, map_sf=Quantity.map_sf_to_greek, spacer=" ")
    return Printed
