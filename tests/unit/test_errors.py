"""Exit codes and outcomes, as the one table that scripts rely on; and how errors are worded."""

from __future__ import annotations

import pytest

from deckgen import errors
from deckgen.comparison import Comparison, RatingRow, Row, Verdict
from deckgen.errors import (
    DeckgenError,
    ExitCode,
    Fault,
    FormulaInputError,
    InputError,
    NoBiasError,
    NoSignalError,
    Outcome,
    OutputError,
    SimulatorError,
)

EXIT_CODES = {"OK": 0, "GAP": 1, "INPUT": 2, "SIMULATOR": 3, "BUG": 4, "INTERRUPTED": 130}

OUTCOMES = {
    "measured": 0,
    "refused": 2,
    "simulator missing": 3,
    "refused by the simulator": 3,
    "model missing": 3,
    "no convergence": 3,
    "timed out": 3,
    "crashed": 3,
    "incomplete": 3,
    "bug in deckgen": 4,
}

ERRORS: list[tuple[DeckgenError, type[Exception], int]] = [
    (InputError(), ValueError, 2),
    (FormulaInputError("gain", "ro = -1", "a number >0"), ValueError, 2),
    (NoBiasError("no bias"), ArithmeticError, 2),
    (NoSignalError("no signal"), ArithmeticError, 2),
    (SimulatorError(Outcome.CRASHED, "it crashed"), RuntimeError, 3),
    (OutputError("can't be written"), OSError, 3),
]


def test_exit_codes_have_the_published_numbers() -> None:
    assert {code.name: int(code) for code in ExitCode} == EXIT_CODES


def test_every_outcome_has_its_exit_code() -> None:
    assert {outcome.value: int(outcome.exit_code) for outcome in Outcome} == OUTCOMES


def test_over_many_stages_the_worst_exit_code_is_the_highest_number() -> None:
    codes = [ExitCode.OK, ExitCode.GAP, ExitCode.INPUT, ExitCode.SIMULATOR, ExitCode.BUG]
    assert sorted(codes) == codes
    assert max(ExitCode.GAP, ExitCode.SIMULATOR, ExitCode.OK) is ExitCode.SIMULATOR


@pytest.mark.parametrize(("error", "also", "code"), ERRORS, ids=lambda value: type(value).__name__)
def test_every_error_has_its_exit_code_and_is_caught_as_what_it_is(
    error: DeckgenError, also: type[Exception], code: int
) -> None:
    assert isinstance(error, DeckgenError)
    assert isinstance(error, also)
    assert error.exit_code == code


def test_the_table_holds_every_error_there_is() -> None:
    there = {v for v in vars(errors).values() if isinstance(v, type) and issubclass(v, DeckgenError)}
    assert there - {DeckgenError} == {type(error) for error, _, _ in ERRORS}


def test_a_fault_says_where_what_was_found_what_is_expected_and_what_is_near() -> None:
    fault = Fault("stage.toml", "parts.RD", '"1M"', '"1Meg" or "1m"', "1Meg")
    assert str(fault) == ('stage.toml: parts.RD: found "1M", expected "1Meg" or "1m"; did you mean 1Meg?')
    assert str(Fault("stage.toml", "", "nothing", "a stage")) == "stage.toml: found nothing, expected a stage"


def test_an_input_error_keeps_its_faults_and_says_them_line_by_line() -> None:
    faults = (Fault("a", "x", "1", "2"), Fault("a", "y", "3", "4"))
    error = InputError(*faults)
    assert error.faults == faults
    assert str(error).splitlines() == ["a: x: found 1, expected 2", "a: y: found 3, expected 4"]


def test_a_formula_that_refuses_names_itself() -> None:
    error = FormulaInputError("gain", "ro = -1", "a number >0")
    assert str(error) == "gain: found ro = -1, expected a number >0"
    assert len(error.faults) == 1


def test_a_simulator_error_has_its_outcome_our_words_and_the_simulators() -> None:
    error = SimulatorError(Outcome.TIMED_OUT, "no answer within 60 s", ("doing analysis",))
    assert (error.outcome, error.meaning, error.said) == (
        Outcome.TIMED_OUT,
        "no answer within 60 s",
        ("doing analysis",),
    )
    assert str(error) == "timed out: no answer within 60 s"


# --- the exit code of one stage ---


def stage_of(*rows: Row, outcome: Outcome = Outcome.MEASURED, rating: Verdict | None = None) -> Comparison:
    ratings = () if rating is None else (RatingRow("M1", "VDS", "V", 20.0, 5.0, 5.0, rating),)
    return Comparison("s", "t", "f", outcome, "paper", quantities=rows, ratings=ratings)


def row(verdict: Verdict, **changes: object) -> Row:
    return Row("Av", "V/V", -5.0, -5.0, verdict, "nodal", **changes)  # type: ignore[arg-type]


STAGES = [
    (stage_of(), 0),
    (stage_of(row(Verdict.WITHIN), row(Verdict.ABSENT)), 0),
    (stage_of(row(Verdict.WITHIN), row(Verdict.BEYOND)), 1),
    (stage_of(row(Verdict.BEYOND, excused="known gap")), 0),
    (stage_of(row(Verdict.NOT_COMPARED)), 1),
    (stage_of(row(Verdict.NOT_COMPARED, wanted=False)), 0),
    (stage_of(row(Verdict.NOT_COMPARED, excused="known gap")), 1),
    (stage_of(row(Verdict.WITHIN), rating=Verdict.WITHIN), 0),
    (stage_of(row(Verdict.WITHIN), rating=Verdict.BEYOND), 1),
    (stage_of(row(Verdict.WITHIN), rating=Verdict.NOT_COMPARED), 0),
    (stage_of(row(Verdict.BEYOND), outcome=Outcome.TIMED_OUT), 3),
    (stage_of(outcome=Outcome.REFUSED), 2),
]


@pytest.mark.parametrize(("stage", "code"), STAGES)
def test_a_stage_ends_with_the_code_of_its_outcome_or_its_worst_row(stage: Comparison, code: int) -> None:
    assert stage.exit_code == code
