"""The rule of acceptance, on files laid out by hand: what passes, and each thing that doesn't."""

from __future__ import annotations

import signal
import struct
from pathlib import Path

import pytest

from deckgen.errors import Outcome
from deckgen.simulator import ExpectedPlot, Job, Limits, startup
from deckgen.simulator.accept import Verdict, judge
from deckgen.simulator.process import Ended

GOOD = Ended(returncode=0, timed_out=False, seconds=0.1)
NAN = float("nan")
INFINITE = float("inf")


def plot(name: str, columns: tuple[str, ...], *rows: tuple[float, ...]) -> bytes:
    variables = "".join(f"\t{index}\t{column}\tvoltage\n" for index, column in enumerate(columns))
    head = (
        f"Title: t\nPlotname: {name}\nFlags: real\nNo. Variables: {len(columns)}\n"
        f"No. Points: {len(rows)}\nVariables:\n{variables}Binary:\n"
    )
    return head.encode() + b"".join(struct.pack(f"<{len(row)}d", *row) for row in rows)


OP = plot("Operating Point", ("v(out)",), (1.0,))
SWEEP = plot("DC transfer characteristic", ("v(out)", "v(in)"), (0.0, 1.0), (0.0, 2.0))
JOB = Job(
    "",
    (
        ExpectedPlot("Operating Point", 1, ("V(OUT)",)),
        ExpectedPlot("DC transfer characteristic", 2, ("v(out)",), ("v(in)",)),
    ),
)


def judged(
    folder: Path,
    raw: bytes | None = OP + SWEEP,
    *,
    job: Job = JOB,
    ended: Ended = GOOD,
    stderr: str = "",
    stdout: str = "",
) -> Verdict:
    (folder / "stderr.txt").write_text(stderr, encoding="utf-8")
    (folder / "stdout.txt").write_text(stdout, encoding="utf-8")
    if raw is not None:
        (folder / "out.raw").write_bytes(raw)
    return judge(job, ended, folder=folder, limits=Limits())


def test_of_the_columns_that_may_not_all_be_zero_one_is_enough(tmp_path: Path) -> None:
    name, columns = "AC Analysis", ("v(a)", "v(b)")
    job = Job("", (ExpectedPlot(name, 1, columns, columns),))
    assert judged(tmp_path, plot(name, columns, (0.0, 1.0)), job=job).outcome is Outcome.MEASURED
    silent = judged(tmp_path, plot(name, columns, (0.0, 0.0)), job=job)
    assert silent.outcome is Outcome.INCOMPLETE
    assert "v(a), v(b) is 0 at every point; see that a source has an ac value" in silent.meaning


def test_what_is_exactly_as_expected_is_accepted(tmp_path: Path) -> None:
    verdict = judged(tmp_path)
    assert (verdict.outcome, verdict.meaning, verdict.said) == (Outcome.MEASURED, "", ())
    assert [each.name for each in verdict.plots] == ["Operating Point", "DC transfer characteristic"]


@pytest.mark.parametrize(
    ("raw", "words"),
    [
        (None, "found none"),
        (OP, "expected the plots Operating Point, DC transfer characteristic, found Operating Point;"),
        (SWEEP + OP, "found DC transfer characteristic, Operating Point"),
        (OP + OP + SWEEP, "found Operating Point, Operating Point, DC"),
        (OP + SWEEP + SWEEP, "found Operating Point, DC transfer characteristic, DC"),
        (plot("Operating Point", ("v(out)",)) + SWEEP, "expected 1 points, found 0"),
        (plot("Operating Point", ("v(out)",), (1.0,), (1.0,)) + SWEEP, "expected 1 points, found 2"),
        (plot("Operating Point", ("v(x)",), (1.0,)) + SWEEP, "no column V(OUT) in plot 'Operating Point'"),
        (plot("Operating Point", ("v(out)",), (NAN,)) + SWEEP, "v(out) is not finite"),
        (plot("Operating Point", ("v(out)",), (INFINITE,)) + SWEEP, "v(out) is not finite"),
        (plot("Operating Point", ("v(out)", "v(x)"), (1.0, NAN)) + SWEEP, "v(x) is not finite"),
        (OP + plot("DC transfer characteristic", ("v(out)", "v(in)"), (1.0, 0.0), (1.0, -0.0)), "v(in) is 0"),
        (OP + plot("DC transfer characteristic", ("v(out)",), (1.0,), (1.0,)), "no column v(in)"),
        (OP + SWEEP[:-1], "out.raw is damaged"),
        (OP + SWEEP + b"\0", "out.raw is damaged"),
        (b"", "out.raw is damaged"),
    ],
)
def test_results_that_are_not_exactly_as_expected_are_incomplete(
    raw: bytes | None, words: str, tmp_path: Path
) -> None:
    verdict = judged(tmp_path, raw)
    assert (verdict.outcome, verdict.plots) == (Outcome.INCOMPLETE, ())
    assert words in verdict.meaning


def test_all_faults_of_all_plots_are_said(tmp_path: Path) -> None:
    raw = plot("Operating Point", ("v(x)",), (NAN,)) + plot("DC transfer characteristic", ("v(y)",), (1.0,))
    meaning = judged(tmp_path, raw).meaning
    for words in ("v(x) is not finite", "no column V(OUT)", "expected 2 points, found 1"):
        assert words in meaning


def test_where_no_plot_is_expected_there_may_be_none(tmp_path: Path) -> None:
    empty = Job("", ())
    assert judged(tmp_path, None, job=empty).outcome is Outcome.MEASURED
    assert judged(tmp_path, OP, job=empty).outcome is Outcome.INCOMPLETE


def test_good_results_do_not_excuse_an_exit_status_or_a_message(tmp_path: Path) -> None:
    refused = Outcome.REFUSED_BY_SIMULATOR
    assert judged(tmp_path, ended=Ended(1, timed_out=False, seconds=0.1)).outcome is refused
    assert judged(tmp_path, stderr="something new\n").outcome is refused
    assert (
        judged(tmp_path, stderr="Warning: singular matrix:  check node x\n").outcome is Outcome.NO_CONVERGENCE
    )
    assert judged(tmp_path, stdout="DC solution failed -\n").outcome is Outcome.NO_CONVERGENCE
    assert judged(tmp_path).outcome is Outcome.MEASURED


def test_a_run_beyond_the_time_limit_is_timed_out_whatever_it_left(tmp_path: Path) -> None:
    ended = Ended(-signal.SIGKILL, timed_out=True, seconds=60.0)
    assert judged(tmp_path, ended=ended).outcome is Outcome.TIMED_OUT
    ended = Ended(-signal.SIGXCPU, timed_out=False, seconds=60.0)
    assert judged(tmp_path, ended=ended).outcome is Outcome.TIMED_OUT


@pytest.mark.parametrize(
    ("returncode", "outcome"),
    [
        (-signal.SIGSEGV, Outcome.CRASHED),
        (-signal.SIGKILL, Outcome.CRASHED),
        (128 + signal.SIGABRT, Outcome.CRASHED),
        (-signal.SIGXFSZ, Outcome.INCOMPLETE),
        (128 + signal.SIGXFSZ, Outcome.INCOMPLETE),
        (-40, Outcome.CRASHED),
        (255, Outcome.REFUSED_BY_SIMULATOR),
        (128, Outcome.REFUSED_BY_SIMULATOR),
        (2, Outcome.REFUSED_BY_SIMULATOR),
    ],
)
def test_a_returncode_has_its_outcome(returncode: int, outcome: Outcome, tmp_path: Path) -> None:
    verdict = judged(tmp_path, ended=Ended(returncode, timed_out=False, seconds=0.1))
    assert (verdict.outcome, verdict.plots) == (outcome, ())
    assert verdict.meaning.isprintable()


def test_the_start_up_file_is_strict_has_no_fallback_and_one_thread() -> None:
    lines = [line for line in startup.text().splitlines() if line and not line.startswith("*")]
    assert lines == ["set strict_errorhandling", "optran 1 1 1 0 0 0", "set num_threads=1"]
    assert startup.digest() == startup.digest()
    assert len(startup.digest()) == 64
