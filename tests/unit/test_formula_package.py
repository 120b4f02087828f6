"""Every published formula keeps what its docstring and its data say, and refuses nonsense.

Nothing here lists the formulas: the package is walked. A new formula is tested by being there.
"""

from __future__ import annotations

import ast
import doctest
import importlib
import inspect
import math
import pkgutil
import random
import re
from collections.abc import Iterator
from dataclasses import dataclass
from types import ModuleType
from typing import Any

import pytest

from deckgen.errors import FormulaInputError, InputError
from deckgen.hand import formulas
from deckgen.hand.formulas import ranges
from deckgen.hand.formulas.ranges import ANY, POSITIVE, Domain, Range, accepts, holds

SECTIONS = ("Parameters", "Returns", "Raises", "Notes", "References", "Examples")
LARGEST = math.nextafter(math.inf, 0.0)


@dataclass(frozen=True)
class Walked:
    """A public function of the package, and its docstring taken apart."""

    name: str
    function: Any
    module: ModuleType

    @property
    def doc(self) -> str:
        return inspect.getdoc(self.function) or ""

    @property
    def domains(self) -> dict[str, Domain]:
        return dict(self.function.domains)

    def section(self, title: str) -> str:
        """Text of a section of the docstring, up to the next one."""
        found = re.search(rf"^{title}\n-+\n(.*?)(?=^\w+\n-+\n|\Z)", self.doc, re.MULTILINE | re.DOTALL)
        return found[1] if found else ""

    @property
    def texts(self) -> dict[str, str]:
        """What the docstring says of each parameter, in its order."""
        parts = re.split(r"^(\w[\w, ]*) : .*\n", self.section("Parameters"), flags=re.MULTILINE)
        return {
            name: " ".join(text.split())
            for names, text in zip(parts[1::2], parts[2::2], strict=True)
            for name in names.split(", ")
        }

    @property
    def doctests(self) -> list[doctest.DocTest]:
        found = doctest.DocTestFinder(recurse=False).find(self.function, self.name, self.module)
        return [one for one in found if one.examples]

    @property
    def example(self) -> dict[str, Any]:
        """Arguments of the call in the docstring's example, ``*arguments`` under their name."""
        source = "".join(example.source for one in self.doctests for example in one.examples)
        for node in ast.walk(ast.parse(source.replace("math.inf", "1e999"))):
            if isinstance(node, ast.Call) and isinstance(node.func, ast.Name) and node.func.id == self.name:
                keywords = {k.arg: ast.literal_eval(k.value) for k in node.keywords if k.arg}
                rest = tuple(ast.literal_eval(value) for value in node.args)
                return keywords | ({self.rest: rest} if self.rest else {})
        raise AssertionError(f"{self.name}: no example calls it")

    @property
    def rest(self) -> str:
        """Name of ``*arguments``, or nothing."""
        parameters = inspect.signature(self.function).parameters.values()
        return next((p.name for p in parameters if p.kind is p.VAR_POSITIONAL), "")

    @property
    def couples(self) -> bool:
        """Whether inputs that are fine one by one may be refused together, as the docstring says."""
        return re.search(r"no root|both|differ", self.section("Raises")) is not None

    @property
    def may_give_infinity(self) -> bool:
        return "infinite" in self.section("Returns")

    def __call__(self, arguments: dict[str, Any]) -> float:
        keywords = dict(arguments)
        result: float = self.function(*keywords.pop(self.rest, ()), **keywords)
        return result

    def outcome(self, arguments: dict[str, Any]) -> float | FormulaInputError:
        try:
            return self(arguments)
        except FormulaInputError as error:
            return error


def _modules() -> Iterator[ModuleType]:
    for found in pkgutil.iter_modules(formulas.__path__):
        yield importlib.import_module(f"{formulas.__name__}.{found.name}")


def _walk() -> Iterator[Walked]:
    for module in _modules():
        if module is ranges:
            continue
        for name, value in vars(module).items():
            if inspect.isroutine(value) and value.__module__ == module.__name__ and name[0] != "_":
                yield Walked(name, value, module)


FORMULAS = tuple(_walk())
RANGES = {
    f"{module.__name__.rpartition('.')[2]}.{name}": value
    for module in _modules()
    for name, value in vars(module).items()
    if isinstance(value, Range)
}
EACH = pytest.mark.parametrize("formula", FORMULAS, ids=lambda formula: formula.name)
EACH_RANGE = pytest.mark.parametrize("limits", RANGES.values(), ids=list(RANGES))


def test_the_walk_finds_the_formulas_and_the_ranges() -> None:
    names = {formula.name for formula in FORMULAS}
    assert {"threshold_voltage", "meeting_voltage", "common_source_gain", "miller_bandwidth"} <= names
    assert len(names) == len(FORMULAS) >= 19
    assert set(RANGES) >= {"device.STRONG_INVERSION", "frequency.DOMINANT_POLE"}


# --- docstrings against signatures and data ---


@EACH
def test_a_docstring_has_a_summary_an_equation_and_all_its_sections(formula: Walked) -> None:
    summary, blank, equation = formula.doc.splitlines()[:3]
    assert summary.endswith(".")
    assert blank == ""
    assert equation.startswith(".. math:: ")
    for title in SECTIONS:
        assert formula.section(title).strip(), f"{formula.name}: no {title}"
    assert formula.section("References").startswith(".. [1] ")
    assert formula.section("Raises").startswith("FormulaInputError\n    ")


@EACH
def test_docstring_and_domains_name_the_arguments_of_the_signature_in_order(formula: Walked) -> None:
    parameters = inspect.signature(formula.function).parameters
    assert list(formula.texts) == list(parameters)
    assert list(formula.domains) == list(parameters)
    kinds = {parameter.kind for parameter in parameters.values()}
    assert kinds in ({inspect.Parameter.KEYWORD_ONLY}, {inspect.Parameter.VAR_POSITIONAL})


@EACH
def test_every_parameter_and_the_result_have_a_unit(formula: Walked) -> None:
    for name, text in formula.texts.items():
        assert re.search(r"\[[^\]]+\]$", text), f"{formula.name}: {name}"
    assert re.search(r"\[[^\]]+\]\s*$", formula.section("Returns")), formula.name


@EACH
def test_the_docstring_gives_the_bounds_of_each_domain_and_no_other(formula: Walked) -> None:
    for name, domain in formula.domains.items():
        bounds = [
            f"{sign}{'=' if closed else ''} {end:g}"
            for sign, end, closed in (
                (">", domain.low, domain.low_closed),
                ("<", domain.high, domain.high_closed),
            )
            if math.isfinite(end)
        ]
        text = formula.texts[name]
        assert re.findall(r"[<>]=? [-\d.]*\d", text) == bounds, f"{formula.name}: {name}"
        assert ("may be infinite" in text) is math.isinf(domain.last), f"{formula.name}: {name}"


@EACH
def test_a_formula_says_where_it_holds_or_that_it_is_exact(formula: Walked) -> None:
    notes = " ".join(formula.section("Notes").split())
    assert isinstance(formula.function.ranges, tuple)
    assert ("Exact " in notes) is not ("Holds " in notes)
    assert ("Holds " in notes) is bool(formula.function.ranges)
    for limits in formula.function.ranges:
        assert limits in RANGES.values()
        assert limits.symbol.partition(" [")[0] in notes
        for edge in (limits.low, limits.high):
            assert math.isinf(edge) or f" {edge:g}" in notes, f"{formula.name}: {limits.symbol}"


@EACH
def test_the_example_prints_what_it_says_and_fails_with_another_number(formula: Walked) -> None:
    (found,) = formula.doctests
    assert not any(example.options for example in found.examples)
    assert set(formula.example) == set(formula.domains)
    assert doctest.DocTestRunner(verbose=False).run(found).failed == 0
    last = found.examples[-1]
    assert math.isfinite(float(last.want))
    last.want = re.sub(r"\d", lambda digit: str((int(digit[0]) + 1) % 10), last.want)
    assert doctest.DocTestRunner(verbose=False).run(found, out=lambda _: None).failed == 1


# --- both edges of every domain ---


def _edges(domain: Domain) -> Iterator[tuple[float, bool]]:
    """Values on, just inside and just outside of both edges, with whether they are accepted."""
    yield math.nan, False
    for edge, closed, outward in (
        (domain.low, domain.low_closed, -math.inf),
        (domain.high, domain.high_closed, math.inf),
    ):
        yield edge, closed
        yield math.nextafter(edge, -outward), True
        if math.isfinite(edge):
            yield math.nextafter(edge, outward), False
            yield outward, False


def _inside(domain: Domain) -> Iterator[float]:
    """Accepted values of a size that circuits have, near both edges."""
    yield domain.low + 1e-12 if math.isfinite(domain.low) else -1e9
    yield domain.high - 1e-12 if math.isfinite(domain.high) else 1e9
    yield from [domain.low] * domain.low_closed + [domain.high] * domain.high_closed


def _replaced(arguments: dict[str, Any], name: str, value: float) -> dict[str, Any]:
    """The arguments with one value put in; where they are a tuple, as its first entry."""
    old = arguments[name]
    return arguments | {name: (value, *old[1:]) if isinstance(old, tuple) else value}


def _cases(*, accepted: bool) -> list[Any]:
    return [
        pytest.param(formula, name, value, id=f"{formula.name}-{name}-{value}")
        for formula in FORMULAS
        for name, domain in formula.domains.items()
        for value, good in _edges(domain)
        if good is accepted
    ]


def _refusal(formula: Walked, name: str, value: float) -> str:
    """The message that says that this value is not in the domain of its argument."""
    entry = "[0]" if isinstance(formula.example[name], tuple) else ""
    return f"{formula.name}: found {name}{entry} = {value}, expected {formula.domains[name].expected}"


@pytest.mark.parametrize(("formula", "name", "value"), _cases(accepted=False))
def test_a_value_outside_its_domain_is_refused_with_argument_value_and_what_is_expected(
    formula: Walked, name: str, value: float
) -> None:
    error = formula.outcome(_replaced(formula.example, name, value))
    assert isinstance(error, FormulaInputError)
    assert isinstance(error, InputError)
    assert str(error) == _refusal(formula, name, value)


@pytest.mark.parametrize(("formula", "name", "value"), _cases(accepted=True))
def test_the_last_float_inside_a_domain_is_not_refused_for_itself_and_never_gives_nan(
    formula: Walked, name: str, value: float
) -> None:
    outcome = formula.outcome(_replaced(formula.example, name, value))
    if isinstance(outcome, FormulaInputError):
        assert str(outcome) != _refusal(formula, name, value)
    else:
        assert not math.isnan(outcome)


def _assert_number(formula: Walked, arguments: dict[str, Any]) -> None:
    """A finite number, or the infinity or the refusal that the docstring speaks of."""
    outcome = formula.outcome(arguments)
    if isinstance(outcome, FormulaInputError):
        assert formula.couples, str(outcome)
        assert not any(str(outcome).endswith(domain.expected) for domain in formula.domains.values())
    else:
        assert math.isfinite(outcome) or (math.isinf(outcome) and formula.may_give_infinity), arguments


@EACH
def test_values_of_a_real_size_inside_both_edges_give_a_number(formula: Walked) -> None:
    for name, domain in formula.domains.items():
        for value in _inside(domain):
            _assert_number(formula, _replaced(formula.example, name, value))


@pytest.mark.parametrize("extreme", [0.0, math.inf])
@EACH
def test_all_that_may_be_nothing_or_infinite_at_once_still_gives_a_number(
    formula: Walked, extreme: float
) -> None:
    arguments = formula.example
    for name, domain in formula.domains.items():
        if domain.first <= extreme <= domain.last:
            arguments = _replaced(arguments, name, extreme)
    _assert_number(formula, arguments)


def _drawn(domain: Domain, dice: random.Random) -> float:
    """A number of a domain from 1e-15 to 1e12 in magnitude, nothing, or infinity."""
    while True:
        size = dice.choice((0.0, math.inf, *[10.0 ** dice.uniform(-15.0, 12.0)] * 4))
        value = dice.choice((size, -size))
        if domain.first <= value <= domain.last:
            return value


@EACH
def test_any_accepted_values_of_a_real_size_give_a_number(formula: Walked) -> None:
    dice, example = random.Random(1968), formula.example
    for _ in range(500):
        arguments = {
            name: tuple(_drawn(domain, dice) for _ in example[name])
            if isinstance(example[name], tuple)
            else _drawn(domain, dice)
            for name, domain in formula.domains.items()
        }
        _assert_number(formula, arguments)


# --- both edges of every range ---


@EACH_RANGE
def test_a_range_has_no_note_on_and_inside_its_edges_and_one_just_outside(limits: Range) -> None:
    assert limits.low < limits.high
    for edge, outward in ((limits.low, -math.inf), (limits.high, math.inf)):
        assert limits.note(edge) is None
        assert limits.note(math.nextafter(edge, -outward)) is None
        if math.isfinite(edge):
            note = limits.note(math.nextafter(edge, outward))
            assert note is not None
            assert note.startswith(f"outside the formula's range: {limits.symbol} = ")
            assert note.endswith(limits.why)
    assert limits.note(math.nan) is not None


@EACH_RANGE
def test_every_range_belongs_to_a_formula(limits: Range) -> None:
    assert any(limits in formula.function.ranges for formula in FORMULAS)


def test_out_of_range_gives_a_note_and_a_value() -> None:
    from deckgen.hand.formulas.device import saturation_current

    (limits,) = saturation_current.ranges
    assert limits.note(0.1) is not None
    assert saturation_current(k=1e-3, v_ov=0.1) == pytest.approx(5e-6)


# --- the mechanism ---


@holds(Range("b", 0.0, 0.5, "reason"))
@accepts(a=ANY, b=Domain(low=0.0, high=1.0, low_closed=True))
def _quotient(*, a: float, b: float) -> float:
    """Quotient."""
    return a**2 / b


@accepts(parts=POSITIVE)
def _sum(*parts: float) -> float:
    return sum(parts)


@pytest.mark.parametrize(
    ("domain", "words", "inside", "outside"),
    [
        (ANY, "a finite number", (-LARGEST, 0.0, LARGEST), (-math.inf, math.inf)),
        (POSITIVE, "a number >0", (5e-324, LARGEST), (0.0, -0.0, math.inf)),
        (ranges.NOT_NEGATIVE, "a number >=0", (0.0, -0.0, LARGEST), (-5e-324, math.inf)),
        (ranges.NOT_POSITIVE, "a number <=0", (0.0, -LARGEST), (5e-324, -math.inf)),
        (ranges.POSITIVE_OR_INFINITE, "a number >0 or inf", (5e-324, math.inf), (0.0, -math.inf)),
        (ranges.NOT_NEGATIVE_OR_INFINITE, "a number >=0 or inf", (0.0, math.inf), (-5e-324,)),
        (Domain(0.0, 1.0, low_closed=True), "a number >=0 and <1", (0.0, 0.9), (1.0, math.inf)),
    ],
    ids=lambda value: value if isinstance(value, str) else None,
)
def test_a_domain_ends_where_it_says_and_says_so_in_words(
    domain: Domain, words: str, inside: tuple[float, ...], outside: tuple[float, ...]
) -> None:
    assert domain.expected == words

    @accepts(x=domain)
    def same(*, x: float) -> float:
        return x

    assert tuple(same(x=value) for value in inside) == inside
    for value in (*outside, math.nan):
        with pytest.raises(FormulaInputError) as caught:
            same(x=value)
        assert str(caught.value) == f"same: found x = {value}, expected {words}"


@pytest.mark.parametrize(("a", "b"), [(1.0, 0.0), (1e300, 0.5)])
def test_inputs_that_are_fine_alone_but_divide_by_nothing_or_overflow_are_refused(a: float, b: float) -> None:
    with pytest.raises(FormulaInputError) as caught:
        _quotient(a=a, b=b)
    assert str(caught.value) == f"_quotient: found a = {a}, b = {b}, expected values that give a number"


def test_a_result_that_is_no_number_is_refused() -> None:
    @accepts(x=ranges.NOT_NEGATIVE_OR_INFINITE)
    def difference(*, x: float) -> float:
        return x - x

    assert difference(x=1.0) == pytest.approx(0.0, abs=0.0)
    with pytest.raises(FormulaInputError, match=r"^difference: found x = inf, expected values that give"):
        difference(x=math.inf)


def test_the_message_names_the_entry_that_is_refused() -> None:
    assert _sum(1.0, 2.0) == pytest.approx(3.0)
    with pytest.raises(FormulaInputError, match=r"^_sum: found parts\[1\] = -2.0, expected a number >0$"):
        _sum(1.0, -2.0)


def test_a_formula_keeps_its_name_signature_docstring_and_the_errors_of_a_call() -> None:
    assert _quotient.__name__ == "_quotient"
    assert _quotient.__doc__ == "Quotient."
    assert list(inspect.signature(_quotient).parameters) == ["a", "b"]
    for arguments, keywords in (((1.0,), {"b": 0.5}), ((), {"a": 1.0}), ((), {"a": 1.0, "b": 0.5, "c": 1.0})):
        with pytest.raises(TypeError):
            _quotient(*arguments, **keywords)


def test_the_data_of_a_formula_can_be_read_but_not_changed() -> None:
    assert dict(_quotient.domains) == {"a": ANY, "b": Domain(0.0, 1.0, low_closed=True)}
    assert _quotient.ranges == (Range("b", 0.0, 0.5, "reason"),)
    assert _sum.ranges == ()
    with pytest.raises(TypeError):
        _quotient.domains["a"] = POSITIVE  # type: ignore[index]


@pytest.mark.parametrize("domains", [{}, {"a": ANY}, {"b": ANY, "a": ANY}, {"a": ANY, "b": ANY, "c": ANY}])
def test_domains_that_are_not_those_of_the_arguments_are_a_bug_seen_on_import(
    domains: dict[str, Domain],
) -> None:
    def formula(*, a: float, b: float) -> float:
        return a + b

    with pytest.raises(TypeError, match=r"^formula: domains of \[.*\], arguments are \['a', 'b'\]$"):
        accepts(**domains)(formula)
