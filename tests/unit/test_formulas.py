"""Every published formula keeps what its docstring says, and refuses nonsense.

Nothing here lists the formulas: the package is walked, and each docstring gives the names, the bounds and
an example to start from. A new formula is tested by being there.
"""

from __future__ import annotations

import ast
import contextlib
import importlib
import inspect
import math
import pkgutil
import re
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import Any

import pytest

from deckgen.errors import FormulaInputError, InputError
from deckgen.hand import formulas
from deckgen.hand.formulas import ranges
from deckgen.hand.formulas.ranges import Range, require

SECTIONS = ("Parameters", "Returns", "Raises", "References", "Examples")


@dataclass(frozen=True)
class Parameter:
    """A parameter as its docstring describes it."""

    name: str
    text: str

    @property
    def bound(self) -> str | None:
        """``> 0``, ``>= 0``, ``<= 0`` or None."""
        found = re.search(r"(>=|<=|>|<) 0\b", self.text)
        return found[0] if found else None

    @property
    def may_be_infinite(self) -> bool:
        return "may be infinite" in self.text


@dataclass(frozen=True)
class Formula:
    """A public function of the package, taken apart."""

    name: str
    function: Callable[..., float]

    @property
    def doc(self) -> str:
        return inspect.getdoc(self.function) or ""

    def section(self, title: str) -> str:
        """Text of a section of the docstring, up to the next one."""
        found = re.search(rf"^{title}\n-+\n(.*?)(?=^\w+\n-+\n|\Z)", self.doc, re.MULTILINE | re.DOTALL)
        return found[1] if found else ""

    @property
    def parameters(self) -> tuple[Parameter, ...]:
        parts = re.split(r"^(\w[\w, ]*) : .*\n", self.section("Parameters"), flags=re.MULTILINE)
        return tuple(
            Parameter(name, " ".join(text.split()))
            for names, text in zip(parts[1::2], parts[2::2], strict=True)
            for name in names.split(", ")
        )

    @property
    def example(self) -> dict[str, Any]:
        """Keyword arguments of the call in the docstring's example; positional ones under ``*``."""
        source = "\n".join(line[4:] for line in self.doc.splitlines() if line.startswith(">>> "))
        values = {"inf": math.inf}
        for node in ast.walk(ast.parse(source.replace("math.inf", "inf"))):
            if isinstance(node, ast.Call) and isinstance(node.func, ast.Name) and node.func.id == self.name:
                keywords = {k.arg: _evaluated(k.value, values) for k in node.keywords if k.arg}
                rest = tuple(_evaluated(value, values) for value in node.args)
                return keywords | ({"*": rest} if rest else {})
        return {}

    def __call__(self, **arguments: Any) -> float:
        rest = arguments.pop("*", ())
        return self.function(*rest, **arguments)


def _evaluated(node: ast.expr, names: dict[str, float]) -> Any:
    if isinstance(node, ast.Name):
        return names[node.id]
    return ast.literal_eval(node)


def _modules() -> Iterator[Any]:
    for found in pkgutil.iter_modules(formulas.__path__):
        yield importlib.import_module(f"{formulas.__name__}.{found.name}")


def _formulas() -> Iterator[Formula]:
    for module in _modules():
        if module is ranges:
            continue
        for name, value in vars(module).items():
            if inspect.isfunction(value) and value.__module__ == module.__name__ and name[0] != "_":
                yield Formula(name, value)


FORMULAS = tuple(_formulas())
RANGES = tuple(
    (f"{module.__name__.rpartition('.')[2]}.{name}", value)
    for module in _modules()
    for name, value in vars(module).items()
    if isinstance(value, Range)
)
EACH = pytest.mark.parametrize("formula", FORMULAS, ids=lambda formula: formula.name)


def test_the_walk_finds_the_formulas_and_the_ranges() -> None:
    names = {formula.name for formula in FORMULAS}
    assert {"threshold_voltage", "saturation_current", "common_source_gain", "miller_bandwidth"} <= names
    assert len(names) == len(FORMULAS) >= 16
    assert {name for name, _ in RANGES} >= {"device.STRONG_INVERSION", "frequency.DOMINANT_POLE"}


# --- what a docstring must hold ---


@EACH
def test_a_docstring_has_all_its_sections_an_equation_and_a_source(formula: Formula) -> None:
    for title in SECTIONS:
        assert formula.section(title).strip(), f"{formula.name}: no {title}"
    assert ".. math::" in formula.doc
    assert ".. [1] " in formula.section("References")
    assert "FormulaInputError" in formula.section("Raises")


@EACH
def test_the_parameters_described_are_those_of_the_signature(formula: Formula) -> None:
    signature = inspect.signature(formula.function).parameters
    assert [parameter.name for parameter in formula.parameters] == list(signature)
    kinds = {parameter.kind for parameter in signature.values()}
    assert kinds <= {inspect.Parameter.KEYWORD_ONLY, inspect.Parameter.VAR_POSITIONAL}


@EACH
def test_every_parameter_and_the_result_have_a_unit(formula: Formula) -> None:
    for parameter in formula.parameters:
        assert re.search(r"\[[^\]]+\]$", parameter.text), f"{formula.name}: {parameter.name}"
    assert re.search(r"\[[^\]]+\]\s*$", formula.section("Returns")), formula.name


@EACH
def test_the_example_is_a_call_of_the_formula_that_gives_a_number(formula: Formula) -> None:
    assert set(formula.example) - {"*"} == {
        p.name for p in inspect.signature(formula.function).parameters.values() if p.kind is p.KEYWORD_ONLY
    }
    assert math.isfinite(formula(**formula.example))


# --- nonsense is refused, and what is said to be allowed is not ---


def _replaced(arguments: dict[str, Any], name: str, value: float) -> dict[str, Any]:
    """The arguments with one value put in; where they are a tuple, as its first entry."""
    key = name if name in arguments else "*"
    old = arguments[key]
    return arguments | {key: (value, *old[1:]) if isinstance(old, tuple) else value}


def _cases(*, refused: bool) -> Iterator[Any]:
    for formula in FORMULAS:
        for parameter in formula.parameters:
            for value in (math.nan, math.inf, -math.inf, -1e-3, 0.0, -0.0, 1e-3):
                if _is_refused(parameter, value) is refused:
                    yield pytest.param(
                        formula, parameter.name, value, id=f"{formula.name}-{parameter.name}-{value}"
                    )


def _is_refused(parameter: Parameter, value: float) -> bool:
    if math.isnan(value):
        return True
    if math.isinf(value):
        return not (parameter.may_be_infinite and value > 0.0)
    allowed = {None: True, "> 0": value > 0.0, ">= 0": value >= 0.0, "<= 0": value <= 0.0}
    return not allowed[parameter.bound]


@pytest.mark.parametrize(("formula", "name", "value"), list(_cases(refused=True)))
def test_a_value_that_makes_no_sense_is_refused_in_one_line_with_the_formulas_name(
    formula: Formula, name: str, value: float
) -> None:
    with pytest.raises(FormulaInputError) as caught:
        formula(**_replaced(formula.example, name, value))
    assert isinstance(caught.value, InputError)
    assert str(caught.value).startswith(f"{formula.name}: found ")
    assert "\n" not in str(caught.value)


def _result(formula: Formula, arguments: dict[str, Any]) -> float:
    """The result; 0 where the docstring says that inputs which are fine alone may not fit together."""
    if re.search(r"no root|both|differ", formula.section("Raises")):
        with contextlib.suppress(FormulaInputError):
            return formula(**arguments)
        return 0.0
    return formula(**arguments)


@pytest.mark.parametrize(("formula", "name", "value"), list(_cases(refused=False)))
def test_a_value_within_the_bounds_of_the_docstring_gives_a_number(
    formula: Formula, name: str, value: float
) -> None:
    assert not math.isnan(_result(formula, _replaced(formula.example, name, value)))


@pytest.mark.parametrize("extreme", [0.0, math.inf])
@EACH
def test_all_that_may_be_infinite_or_nothing_at_once_still_gives_a_number(
    formula: Formula, extreme: float
) -> None:
    arguments = formula.example
    for parameter in formula.parameters:
        if not _is_refused(parameter, extreme):
            arguments = _replaced(arguments, parameter.name, extreme)
    assert not math.isnan(_result(formula, arguments))


# --- ranges ---


@pytest.mark.parametrize(("name", "limits"), RANGES, ids=[name for name, _ in RANGES])
def test_a_range_holds_up_to_its_edges_and_not_beyond(name: str, limits: Range) -> None:
    assert limits.low < limits.high
    for edge, outward in ((limits.low, -math.inf), (limits.high, math.inf)):
        assert limits.note(edge) is None
        if math.isfinite(edge):
            note = limits.note(math.nextafter(edge, outward))
            assert note is not None
            assert note.startswith(f"outside the formula's range: {limits.symbol} = ")
            assert note.endswith(limits.why)
    assert limits.note(math.nan) is not None


def test_the_rules_of_inputs_part_at_zero_and_infinity() -> None:
    allowed = {
        "any": (-1.0, 0.0, 1e-300, 1.0),
        ">0": (1e-300, 1.0),
        ">=0": (0.0, 1e-300, 1.0),
        ">0 or inf": (1e-300, 1.0, math.inf),
        ">=0 or inf": (0.0, 1e-300, 1.0, math.inf),
    }
    for rule, good in allowed.items():
        for value in (-math.inf, -1.0, 0.0, 1e-300, 1.0, math.inf, math.nan):
            if value in good:
                require("formula", x=(value, rule))
            else:
                with pytest.raises(FormulaInputError, match=r"^formula: found x = .*, expected a "):
                    require("formula", x=(value, rule))


# --- formulas against one another ---


def test_the_forms_of_a_transconductance_agree() -> None:
    """In saturation gm = k·VOV = 2·ID/VOV = √(2·k·ID); common practice."""
    from deckgen.hand.formulas.device import saturation_current, transconductance

    for k, v_ov in ((1e-3, 0.3), (2e-5, 2.0)):
        i_d, gm = saturation_current(k=k, v_ov=v_ov), transconductance(k=k, v_ov=v_ov, v_ds=5.0)
        assert gm == pytest.approx(2 * i_d / v_ov, rel=1e-12)
        assert gm == pytest.approx(math.sqrt(2 * k * i_d), rel=1e-12)


def test_triode_meets_saturation_at_its_edge_and_the_overdrive_formula_solves_its_quadratic() -> None:
    from deckgen.hand.formulas.bias import overdrive_with_source_resistor, triode_current_with_resistors
    from deckgen.hand.formulas.device import saturation_current, triode_current

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
    from deckgen.hand.formulas.gain import (
        common_source_gain,
        drain_resistance,
        effective_transconductance,
        parallel,
        source_resistance,
    )

    device = {"gm": 3e-3, "gmb": 5e-4, "ro": 40e3}
    for r_s in (0.0, 100.0, 5e3):
        out = parallel(8e3, drain_resistance(**device, r_s=r_s))
        whole = effective_transconductance(**device, r_s=r_s)
        gain = common_source_gain(**device, r_d=8e3, r_s=r_s)
        assert gain == pytest.approx(-whole * out, rel=1e-12)
    assert source_resistance(**device, r_d=0.0) == pytest.approx(1 / (3e-3 + 5e-4 + 1 / 40e3), rel=1e-12)


def test_resistors_in_parallel_take_nothing_and_infinity() -> None:
    from deckgen.hand.formulas.gain import parallel

    assert parallel() == math.inf
    assert parallel(math.inf, 5.0) == pytest.approx(5.0)
    assert parallel(0.0, 5.0) == pytest.approx(0.0, abs=0.0)
    assert parallel(math.inf) == math.inf
