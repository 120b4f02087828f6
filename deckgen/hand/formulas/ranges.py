"""What formulas accept and where they hold, as data beside them, and the one check of their inputs.

A value outside its ``Domain`` is nonsense and raises. A value outside a ``Range`` gets a note and stays.
"""

from __future__ import annotations

import functools
import inspect
import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Any, ParamSpec, Protocol, TypeVar, cast

from deckgen.errors import FormulaInputError

P = ParamSpec("P")
R = TypeVar("R")
R_co = TypeVar("R_co", covariant=True)


@dataclass(frozen=True, slots=True)
class Range:
    """A formula holds while ``symbol`` lies from ``low`` to ``high`` (both included)."""

    symbol: str
    low: float
    high: float
    why: str

    def note(self, value: float) -> str | None:
        """What to tell the reader when ``value`` is outside, else None."""
        if self.low <= value <= self.high:
            return None
        return f"outside the formula's range: {self.symbol} = {value:.3g}, {self.why}"


@dataclass(frozen=True, slots=True)
class Domain:
    """Numbers from ``low`` to ``high``; each end belongs to them only if it is said to be ``closed``.

    Infinity is accepted where it is a closed end. NaN lies in no domain.
    """

    low: float = -math.inf
    high: float = math.inf
    low_closed: bool = False
    high_closed: bool = False

    @property
    def first(self) -> float:
        """Smallest number that is accepted."""
        return self.low if self.low_closed else math.nextafter(self.low, math.inf)

    @property
    def last(self) -> float:
        """Largest number that is accepted."""
        return self.high if self.high_closed else math.nextafter(self.high, -math.inf)

    @property
    def expected(self) -> str:
        """What is accepted, in words for a message."""
        bounds = []
        if math.isfinite(self.low):
            bounds.append(f"{'>=' if self.low_closed else '>'}{self.low:g}")
        if math.isfinite(self.high):
            bounds.append(f"{'<=' if self.high_closed else '<'}{self.high:g}")
        words = f"a number {' and '.join(bounds)}" if bounds else "a finite number"
        infinite = [f"{end:g}" for end in (self.first, self.last) if math.isinf(end)]
        return " or ".join((words, *infinite))


ANY = Domain()
POSITIVE = Domain(low=0.0)
NOT_NEGATIVE = Domain(low=0.0, low_closed=True)
NOT_POSITIVE = Domain(high=0.0, high_closed=True)
POSITIVE_OR_INFINITE = Domain(low=0.0, high_closed=True)
NOT_NEGATIVE_OR_INFINITE = Domain(low=0.0, low_closed=True, high_closed=True)


class Formula(Protocol[P, R_co]):
    """A formula: a function that carries what it accepts and where it holds."""

    __name__: str
    domains: Mapping[str, Domain]
    ranges: tuple[Range, ...]

    def __call__(self, *args: P.args, **kwargs: P.kwargs) -> R_co:
        """Value of the formula."""


def accepts(**domains: Domain) -> Callable[[Callable[P, R]], Formula[P, R]]:
    """Make a function a formula that refuses inputs outside of ``domains``, one for each argument.

    The domain of a tuple, or of ``*arguments``, is that of each entry. Inputs that are fine one by one but
    give no number (a division by an underflow, an overflow) are refused too. Rules between arguments
    stay in the function.
    """

    def decorate(function: Callable[P, R]) -> Formula[P, R]:
        parameters = inspect.signature(function).parameters
        if list(domains) != list(parameters):
            raise TypeError(f"{function.__name__}: domains of {[*domains]}, arguments are {[*parameters]}")
        limits = {name: (domain.first, domain.last) for name, domain in domains.items()}
        rest = next((p.name for p in parameters.values() if p.kind is p.VAR_POSITIONAL), "")

        @functools.wraps(function)
        def checked(*args: P.args, **kwargs: P.kwargs) -> R:
            inputs: dict[str, Any] = {rest: args, **kwargs} if rest else kwargs
            for name, value in inputs.items():
                if name not in limits:
                    break  # the function itself refuses an argument that it does not have
                first, last = limits[name]
                if isinstance(value, tuple):
                    for i, entry in enumerate(value):
                        if not first <= entry <= last:
                            raise _refused(function.__name__, f"{name}[{i}]", entry, domains[name])
                elif not first <= value <= last:
                    raise _refused(function.__name__, name, value, domains[name])
            try:
                result = function(*args, **kwargs)
            except (ZeroDivisionError, OverflowError) as error:
                raise _no_number(function.__name__, inputs) from error
            if isinstance(result, float) and math.isnan(result):
                raise _no_number(function.__name__, inputs)
            return result

        formula = cast("Formula[P, R]", checked)
        formula.domains = MappingProxyType(domains)
        formula.ranges = ()
        return formula

    return decorate


def holds(*ranges: Range) -> Callable[[Formula[P, R]], Formula[P, R]]:
    """Say where a formula holds; stands above ``accepts``. Without it a formula is exact."""

    def decorate(formula: Formula[P, R]) -> Formula[P, R]:
        formula.ranges = ranges
        return formula

    return decorate


def _refused(formula: str, name: str, value: object, domain: Domain) -> FormulaInputError:
    return FormulaInputError(formula, f"{name} = {value}", domain.expected)


def _no_number(formula: str, inputs: Mapping[str, object]) -> FormulaInputError:
    found = ", ".join(f"{name} = {value}" for name, value in inputs.items())
    return FormulaInputError(formula, found, "values that give a number")
