"""Getting at the TOML table of a file, with everything that can be wrong before its keys are looked at."""

from __future__ import annotations

import contextlib
import re
import stat
import tomllib
from pathlib import Path
from typing import Any

from deckgen.errors import Fault, InputError
from deckgen.stage.faults import nearest
from deckgen.units import UnitError, parse_number, shown

MOST_BYTES = 1 << 20
# The TOML parser takes a time that grows with the square of the keys dotted together on a line.
LONGEST_LINE = 500

_TOML_ERROR = re.compile(r"(?P<what>.*) \(at (?:line (?P<line>\d+), column \d+|end of document)\)", re.DOTALL)
_UNQUOTED = re.compile(r"(?P<key>[\w.\"()-]+)\s*=\s*(?P<value>[^\s\"'\[{#][^#]*?)\s*(?:#.*)?")
_TOO_DEEP = "tables or lists nested too deeply"


def read_text(path: Path) -> str:
    """Text of a small UTF-8 file. Raises InputError for anything that is none."""
    file = str(path)
    try:
        mode = path.stat().st_mode
        # A pipe is not opened: that could wait for ever.
        data = _head(path) if stat.S_ISREG(mode) else b""
    except FileNotFoundError as error:
        raise InputError(Fault(file, "", "no such file", "a file", _sibling(path))) from error
    except (OSError, ValueError) as error:
        found = error.strerror if isinstance(error, OSError) and error.strerror else str(error)
        raise InputError(Fault(file, "", found, "a file that can be read")) from error
    if not stat.S_ISREG(mode):
        found = "a folder" if stat.S_ISDIR(mode) else "a device or pipe"
        raise InputError(Fault(file, "", found, "a file"))
    if len(data) > MOST_BYTES:
        raise InputError(Fault(file, "", "more than 1 MiB", "a file of at most 1 MiB"))
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = data.count(b"\n", 0, error.start) + 1
        fault = Fault(
            file, f"line {line}", f"byte 0x{data[error.start]:02x}", "UTF-8 text (or u for µ, ohm for Ω)"
        )
        raise InputError(fault) from error


def _head(path: Path) -> bytes:
    with path.open("rb") as stream:
        return stream.read(MOST_BYTES + 1)


def _sibling(path: Path) -> str | None:
    with contextlib.suppress(OSError):  # an unreadable folder only costs the suggestion
        return nearest(path.name, [other.name for other in path.parent.iterdir()])
    return None


def parse_toml(text: str, file: str) -> dict[str, Any]:
    """Parse a TOML text. Raises InputError with the line that is at fault."""
    for number, line in enumerate(text.split("\n"), start=1):
        if len(line) > LONGEST_LINE:
            found = f"{len(line)} characters"
            raise InputError(
                Fault(file, f"line {number}", found, f"lines of at most {LONGEST_LINE} characters")
            )
    try:
        return tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise InputError(_syntax_fault(str(error), text, file)) from error
    except RecursionError as error:
        raise InputError(Fault(file, "", _TOO_DEEP, "tables two or three levels deep")) from error
    except ValueError as error:  # an integer of thousands of digits, a date that does not exist
        raise InputError(Fault(file, "", str(error), "valid TOML")) from error


def _syntax_fault(message: str, text: str, file: str) -> Fault:
    match = _TOML_ERROR.fullmatch(message)
    if match is None or match["line"] is None:
        what = message if match is None else match["what"]
        return Fault(file, "end of the file", shown(what), "valid TOML")
    number = int(match["line"])
    line = text.split("\n")[number - 1].strip()
    expected = "each key and table once" if "overwrite" in message or "twice" in message else None
    return Fault(
        file, f"line {number}", shown(line), expected or f"valid TOML ({match['what']})", _quoted(line)
    )


def _quoted(line: str) -> str | None:
    """Quote the value of a line, where that is all it lacks: ``RD = 4.7k``."""
    match = _UNQUOTED.fullmatch(line)
    if match is None:
        return None
    for unit in (None, "%"):
        with contextlib.suppress(UnitError):
            parse_number(match["value"], unit=unit)
            return f'{match["key"]} = "{match["value"]}"'
    return None
