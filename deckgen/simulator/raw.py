"""Reader of ngspice's raw files: binary and ASCII, real and complex, several plots in one file.

ngspice writes them in two ways that look alike and are not:

* *streamed* (``-r``): rows are written while the analysis runs, the number of points is filled
  into blanks left for it. In a complex plot the imaginary part of ``frequency`` is whatever the
  memory held, and a device parameter (``@m1[gm]``) takes one real of 8 bytes, so that the row
  ends in zeros that belong to nothing.
* *written* (``write``): every column is complex. A vector shorter than the plot is marked
  ``dims=`` and filled up with zeros.

Nothing is guessed: a byte too few or too many is an error. Seen with ngspice 39.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

_KNOWN_FLAGS = frozenset({"real", "complex", "padded", "unpadded"})
_COUNT = re.compile(r"[0-9]{1,18}")
_PARAMETER = re.compile(r"[iv]\((@[^()]*)\)")
_TITLE = b"Title:"


class RawFileError(ValueError):
    """A raw file is not what its header says; the message tells what and where."""


@dataclass(frozen=True, slots=True)
class Variable:
    """A column's name and kind (``voltage``, ``current``, ``frequency``, ``notype`` ...)."""

    name: str
    kind: str


@dataclass(frozen=True, eq=False)
class Plot:
    """One analysis: ``data`` is read-only, a row a point, a column a variable, float or complex.

    A value that the simulator did not give (of a vector shorter than the plot) is NaN.
    """

    title: str
    name: str
    flags: tuple[str, ...]
    variables: tuple[Variable, ...]
    data: NDArray[np.float64] | NDArray[np.complex128]

    @cached_property
    def _places(self) -> dict[str, int]:
        """Number of each column by its name; of equal names the first counts."""
        places: dict[str, int] = {}
        for number, variable in enumerate(self.variables):
            places.setdefault(variable.name.lower(), number)
        for number, variable in enumerate(self.variables):
            bare = _PARAMETER.sub(r"\1", variable.name.lower())
            if bare.startswith("@"):
                places.setdefault(bare, number)
        return places

    @property
    def points(self) -> int:
        """Number of rows."""
        return int(self.data.shape[0])

    @property
    def is_complex(self) -> bool:
        """True for a plot of phasors."""
        return "complex" in self.flags

    def column(self, name: str) -> NDArray[Any]:
        """Find the column ``name``, in any case; ``@m1[id]`` also finds ``i(@m1[id])``."""
        place = self._places.get(name.lower())
        if place is not None:
            return self.data[:, place]
        there = ", ".join(variable.name for variable in self.variables) or "nothing"
        raise KeyError(f"no column {name} in plot {self.name!r}; it has {there}")


def read_raw(data: bytes) -> tuple[Plot, ...]:
    """Read all plots of a raw file, in the order in which they were written.

    ``RawFileError`` if the file is empty, ends early, has bytes that belong to no plot, or says
    something that this reader doesn't know.
    """
    if not data:
        raise RawFileError("the raw file is empty")
    plots: list[Plot] = []
    position = 0
    while position < len(data):
        plot, position = _Reader(data, position, number=len(plots) + 1).plot()
        plots.append(plot)
    return tuple(plots)


@dataclass(frozen=True, slots=True)
class _Header:
    title: str
    name: str
    flags: tuple[str, ...]
    points: int
    streamed: bool
    binary: bool
    variables: tuple[Variable, ...]
    lengths: tuple[int, ...]
    """How many values each variable has; fewer than points for a short one."""

    @property
    def is_complex(self) -> bool:
        return "complex" in self.flags

    @property
    def short_rows(self) -> bool:
        """Streamed device parameters: one real each among complex numbers."""
        return self.streamed and self.is_complex and any(map(self.is_parameter, self.variables))

    @staticmethod
    def is_parameter(variable: Variable) -> bool:
        return "@" in variable.name


class _Reader:
    """Reads one plot of ``data``, from ``position`` on."""

    def __init__(self, data: bytes, position: int, *, number: int) -> None:
        self.data = data
        self.position = position
        self.where = f"plot {number}"

    def plot(self) -> tuple[Plot, int]:
        header = self._header()
        values = self._binary(header) if header.binary else self._ascii(header)
        values = _blank(values, header)
        values.setflags(write=False)
        plot = Plot(header.title, header.name, header.flags, header.variables, values)
        return plot, self.position

    def _error(self, text: str) -> RawFileError:
        return RawFileError(f"{self.where}: {text} (byte {self.position})")

    def _line(self) -> bytes:
        end = self.data.find(b"\n", self.position)
        if end < 0:
            raise self._error("the file ends in the middle of a line or before one that must follow")
        line = self.data[self.position : end]
        self.position = end + 1
        return line

    def _header(self) -> _Header:
        if not self.data.startswith(_TITLE, self.position):
            rest = len(self.data) - self.position
            raise self._error(f"a plot begins with 'Title:', but {rest} other bytes follow")
        fields: dict[str, str] = {}
        while True:
            start = self.position
            key, colon, value = self._line().decode("utf-8", "replace").partition(":")
            if colon and key == "Variables":
                break
            if not colon or key in ("Binary", "Values"):
                self.position = start
                raise self._error(f"header line {key[:40]!r} is not of the form 'Key: value'")
            fields[key] = value[1:] if value.startswith(" ") else value
        for key in ("Plotname", "Flags", "No. Variables", "No. Points"):
            if key not in fields:
                raise self._error(f"the header has no line {key!r}")
        name = fields["Plotname"].strip()
        self.where += f" ({name})"
        points = self._count(fields, "No. Points")
        variables, lengths = self._variables(self._count(fields, "No. Variables"), points)
        return _Header(
            title=fields["Title"],
            name=name,
            flags=self._flags(fields["Flags"]),
            points=points,
            streamed=fields["No. Points"].endswith(" "),
            binary=self._is_binary(),
            variables=variables,
            lengths=lengths,
        )

    def _count(self, fields: dict[str, str], key: str) -> int:
        text = fields[key].strip()
        if not _COUNT.fullmatch(text):
            raise self._error(f"'{key}: {text[:40]}' is not a count")
        return int(text)

    def _flags(self, text: str) -> tuple[str, ...]:
        flags = tuple(text.split())
        if not set(flags) <= _KNOWN_FLAGS or ("real" in flags) == ("complex" in flags):
            raise self._error(f"'Flags: {text[:40]}' is not real or complex, perhaps unpadded")
        return flags

    def _is_binary(self) -> bool:
        line = self._line()
        if line not in (b"Binary:", b"Values:"):
            raise self._error(f"'Binary:' or 'Values:' should follow the variables, not {line[:40]!r}")
        return line == b"Binary:"

    def _variables(self, count: int, points: int) -> tuple[tuple[Variable, ...], tuple[int, ...]]:
        variables: list[Variable] = []
        lengths: list[int] = []
        for index in range(count):
            line = self._line().decode("utf-8", "replace")
            number, _, rest = line.strip().partition("\t")
            name, _, rest = rest.partition("\t")
            kind, *attributes = rest.split() or [""]
            if number != str(index) or not name or not kind:
                raise self._error(f"expected variable {index}, found {line[:60]!r}")
            variables.append(Variable(name, kind))
            lengths.append(min(points, self._length(attributes, points)))
        return tuple(variables), tuple(lengths)

    def _length(self, attributes: list[str], points: int) -> int:
        for attribute in attributes:
            key, _, value = attribute.partition("=")
            if key == "dims":
                if not re.fullmatch(r"[0-9]{1,9}(,[0-9]{1,9})*", value):
                    raise self._error(f"{attribute[:40]!r} is not a size")
                return math.prod(int(each) for each in value.split(","))
        return points

    def _binary(self, header: _Header) -> NDArray[Any]:
        import numpy as np

        columns = len(header.variables)
        if "unpadded" in header.flags and any(length < header.points for length in header.lengths):
            raise self._error("a short column in an unpadded plot can't be told from the next point")
        item = np.dtype("<c16" if header.is_complex else "<f8")
        count = header.points * columns
        needed, there = count * item.itemsize, len(self.data) - self.position
        if there < needed:
            raise self._error(f"{header.points} points take {needed} bytes, only {there} are there")
        start, self.position = self.position, self.position + needed
        if not count:
            return np.zeros((header.points, columns), item)
        if header.short_rows:
            reals = np.frombuffer(self.data, np.dtype("<f8"), 2 * count, start)
            return self._short_rows(reals.reshape(header.points, 2 * columns), header)
        values = np.frombuffer(self.data, item, count, start)
        # A copy: aligned, in the machine's byte order, and the file's bytes can go.
        return values.astype(item.newbyteorder("=")).reshape(header.points, columns)

    def _short_rows(self, reals: NDArray[np.float64], header: _Header) -> NDArray[np.complex128]:
        import numpy as np

        values = np.zeros((header.points, len(header.variables)), np.complex128)
        at = 0
        for index, variable in enumerate(header.variables):
            values[:, index].real = reals[:, at]
            if header.is_parameter(variable):
                at += 1
            else:
                values[:, index].imag = reals[:, at + 1]
                at += 2
        if reals[:, at:].any():
            raise self._error("a row with device parameters does not end in zeros: unknown layout")
        return values

    def _ascii(self, header: _Header) -> NDArray[Any]:
        import numpy as np

        item = np.dtype(np.complex128 if header.is_complex else np.float64)
        shortest = 2 * header.points * len(header.variables)
        if len(self.data) - self.position < shortest:
            raise self._error(f"{header.points} points can't be in the bytes that are left")
        values = np.zeros((header.points, len(header.variables)), item)
        for point in range(header.points):
            for index, variable in enumerate(header.variables):
                text = self._line()
                if index == 0:
                    text = self._after_number(text, point)
                values[point, index] = self._value(text, variable, header)
            if not header.streamed and header.variables and self._line():
                raise self._error(f"no empty line after point {point}")
        return values

    def _after_number(self, text: bytes, point: int) -> bytes:
        number, tab, value = text.partition(b"\t")
        if not tab or number.strip() != str(point).encode():
            raise self._error(f"expected point {point}, found {text[:60]!r}")
        return value

    def _value(self, text: bytes, variable: Variable, header: _Header) -> complex:
        real, comma, imaginary = text.partition(b",")
        is_pair = header.is_complex and not (header.short_rows and header.is_parameter(variable))
        try:
            if bool(comma) != is_pair:
                raise ValueError
            return complex(float(real), float(imaginary)) if is_pair else float(real)
        except ValueError:
            what = "a pair of numbers" if is_pair else "a number"
            raise self._error(f"{variable.name} should be {what}, found {text[:60]!r}") from None


def _blank(values: NDArray[Any], header: _Header) -> NDArray[Any]:
    """Put in place what the file states only beside its numbers: no phase in a frequency, no value."""
    for index, variable in enumerate(header.variables):
        if header.is_complex and variable.kind == "frequency":
            values[:, index].imag = 0.0
        if header.lengths[index] < header.points:
            values[header.lengths[index] :, index] = math.nan
    return values
