"""The one place that strings the steps together: file → netlist → circuit → hand, bench → verdict.

Every command calls it, and a notebook can. Nothing here computes: each step is a package of its own.
"""

from __future__ import annotations

import datetime
import logging
import math
import re
import threading
import time
import traceback
from collections.abc import Callable, Sequence
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass, field, replace
from functools import partial
from pathlib import Path

from deckgen import evidence
from deckgen.assumptions import assumptions_made
from deckgen.bench.measure import implausible, measure
from deckgen.bench.plan import Plan, make_plan, sweep_around
from deckgen.compare import is_repeated
from deckgen.comparison import Comparison
from deckgen.errors import DeckgenError, InputError, NoBiasError, Outcome, OutputError, SimulatorError
from deckgen.hand.predict import predict
from deckgen.intake import DeckRefusedError, Flattener, Taken, from_template, take_in
from deckgen.judge import Analysis, all_findings, describe_assumptions, judge, unmeasured
from deckgen.render.engine import render_runnable, runnable_cards
from deckgen.report.document import PredictedStage
from deckgen.simulator.flatten import Flat, flatten
from deckgen.simulator.job import Limits
from deckgen.simulator.locate import Simulator, find
from deckgen.simulator.process import stop_all
from deckgen.simulator.run import run
from deckgen.simulator.startup import digest
from deckgen.stage.model import Stage
from deckgen.stage.topology import load_topology
from deckgen.store import cache, runs

log = logging.getLogger("deckgen")

_MOST_IN_GROUP = 50


@dataclass(frozen=True, slots=True)
class CheckSettings:
    """Where runs leave their folders, whether they are kept, limits, what day it is; ``stop`` ends all."""

    run_dir: Path = Path("runs")
    keep: bool = True
    limits: Limits = field(default_factory=Limits)
    today: datetime.date = field(default_factory=datetime.date.today)
    include_roots: tuple[Path, ...] = ()
    stop: threading.Event = field(default_factory=threading.Event)


def analyse(stage: Stage) -> Analysis:
    """Render, read and analyse a stage of a topology by hand. Raises InputError or NoBiasError."""
    return analyse_taken(from_template(stage))


def analyse_taken(taken: Taken, *, told: bool = True) -> Analysis:
    """Analyse by hand what was taken in; ``told``: with the numbers of the working written out.

    Raises InputError or NoBiasError.
    """
    stage = taken.stage
    prediction = predict(
        taken.circuit,
        taken.ports,
        assumptions=assumptions_made(stage.hand.assumptions, add=stage.hand.add, drop=stage.hand.drop),
        frequency=stage.signal.frequency,
        told=told,
    )
    return Analysis(stage, taken.netlist, taken.circuit, taken.ports, prediction, taken.findings)


def flattener(simulator: Simulator | SimulatorError, limits: Limits | None = None) -> Flattener:
    """The simulator as front end; where there is none, that is what becomes of every deck that needs it."""
    if isinstance(simulator, SimulatorError):
        missing = Flat(None, simulator.outcome, simulator.meaning, simulator.said)
        return lambda decks: [missing for _ in decks]
    return partial(_flatten_with_cache, simulator=simulator, limits=limits)


def _flatten_with_cache(
    decks: Sequence[str], *, simulator: Simulator, limits: Limits | None
) -> tuple[Flat, ...]:
    """Flatten what is not in the cache; what holds random functions is never taken from it."""
    folder = cache.user_cache() / "flat"
    keys = [
        None if _RANDOM.search(deck) else cache.key_of("2", simulator.version, digest(), deck)
        for deck in decks
    ]
    kept = [None if key is None else cache.recall(folder, key) for key in keys]
    fresh = iter(
        flatten(
            [deck for deck, text in zip(decks, kept, strict=True) if text is None],
            simulator=simulator,
            limits=limits,
        )
    )
    results = []
    for key, text in zip(keys, kept, strict=True):
        flat = Flat(text) if text is not None else next(fresh)
        if text is None and key is not None and flat.text is not None:
            cache.keep(folder, key, flat.text)
        results.append(flat)
    return tuple(results)


_RANDOM = re.compile(r"gauss|unif|limit\s*\(|random|seed", re.IGNORECASE)


def predict_files(
    paths: Sequence[Path], *, include_roots: Sequence[Path] = ()
) -> tuple[PredictedStage | DeckgenError, ...]:
    """The hand analysis of files, in order; what is wrong with one is its result.

    A simulator is looked for only where a deck needs it as its front end.
    """
    taken = take_in(paths, flattener=_flatten_if_found, include_roots=include_roots)
    return tuple(_predicted_or_error(one) for one in taken)


def runnable_deck(path: Path, *, include_roots: Sequence[Path] = ()) -> str:
    """The deck of a stage file or deck, with an operating point and a gain curve to print.

    Raises the error of a file that can't be taken in.
    """
    (taken,) = take_in([path], flattener=_flatten_if_found, include_roots=include_roots)
    if isinstance(taken, DeckgenError):
        raise taken
    stage = taken.stage
    if stage.deck is None:
        return render_runnable(stage, load_topology(stage.topology))
    cards = runnable_cards(None if taken.ports is None else taken.ports.output)
    return "\n".join([taken.netlist.rstrip("\n"), *cards, ".end", ""])


def _flatten_if_found(decks: Sequence[str]) -> Sequence[Flat]:
    try:
        return flattener(find())(decks)
    except SimulatorError as error:
        return flattener(error)(decks)


def _predicted_or_error(taken: Taken | DeckgenError) -> PredictedStage | DeckgenError:
    if isinstance(taken, DeckgenError):
        return taken
    try:
        return _predicted(analyse_taken(taken))
    except (InputError, NoBiasError) as error:
        return error


def _predicted(analysis: Analysis) -> PredictedStage:
    stage, prediction = analysis.stage, analysis.prediction
    return PredictedStage(
        name=stage.name,
        title=stage.title,
        file=stage.file,
        assumptions=describe_assumptions(stage),
        prediction=replace(
            prediction, values=tuple(v for v in prediction.values if not is_repeated(v.name, stage))
        ),
        findings=all_findings(analysis, None),
        input_unit=None if analysis.ports is None else stage.signal.unit,
    )


def check_all(
    paths: Sequence[Path],
    *,
    simulator: Simulator | SimulatorError,
    settings: CheckSettings,
    jobs: int = 1,
    told: Callable[[Comparison], None] = lambda _: None,
) -> tuple[Comparison, ...]:
    """Check many files, ``jobs`` at a time; the order of the results is that of the paths.

    ``simulator`` is the error itself where none was found: files are still read and analysed. ``told`` is
    called with each result as it is ready.
    """
    works = [partial(_check_group, group, simulator, settings, told) for group in _groups(paths, jobs)]
    return tuple(comparison for results in _all(works, jobs, settings) for comparison in results)


def _groups(paths: Sequence[Path], jobs: int) -> list[Sequence[Path]]:
    """Files that are taken in together: enough for one front end to serve, few enough to share the work."""
    size = min(max(math.ceil(len(paths) / (4 * max(jobs, 1))), 1), _MOST_IN_GROUP)
    return [paths[start : start + size] for start in range(0, len(paths), size)]


def _check_group(
    paths: Sequence[Path],
    simulator: Simulator | SimulatorError,
    settings: CheckSettings,
    told: Callable[[Comparison], None],
) -> list[Comparison]:
    try:
        taken = take_in(
            paths, flattener=flattener(simulator, settings.limits), include_roots=settings.include_roots
        )
    except Exception as error:  # a bug in deckgen: found alone, it costs the others nothing
        if len(paths) > 1:
            return [one for path in paths for one in _check_group([path], simulator, settings, told)]
        log.exception("%s: a bug in deckgen", paths[0])
        comparison = _bug(paths[0], error)
        told(comparison)
        return [comparison]
    return [
        _checked_and_told(path, one, simulator, settings, told)
        for path, one in zip(paths, taken, strict=True)
        if not settings.stop.is_set()
    ]


def _checked_and_told(
    path: Path,
    taken: Taken | DeckgenError,
    simulator: Simulator | SimulatorError,
    settings: CheckSettings,
    told: Callable[[Comparison], None],
) -> Comparison:
    try:
        comparison = check_taken(path, taken, simulator=simulator, settings=settings)
    except Exception as error:  # a bug in deckgen: what is left of the check must not be lost with it
        log.exception("%s: a bug in deckgen", path)
        comparison = _bug(path, error)
    log.info("%s: %s, exit code %d", path, comparison.outcome, comparison.exit_code)
    told(comparison)
    return comparison


def _all(
    works: Sequence[Callable[[], list[Comparison]]], jobs: int, settings: CheckSettings
) -> tuple[list[Comparison], ...]:
    if jobs <= 1 or len(works) <= 1:
        return tuple(work() for work in works)
    futures: list[Future[list[Comparison]]] = []
    with ThreadPoolExecutor(max_workers=jobs) as pool:
        try:
            futures += (pool.submit(work) for work in works)
            return tuple(future.result() for future in futures)
        except KeyboardInterrupt:
            settings.stop.set()
            pool.shutdown(wait=False, cancel_futures=True)
            # Over and over: a thread may be about to start its simulator.
            while not all(future.done() for future in futures):
                stop_all()
                time.sleep(0.01)
            raise


def check_stage(path: Path, *, simulator: Simulator | SimulatorError, settings: CheckSettings) -> Comparison:
    """Check one file; whatever goes wrong with it is an outcome, never an exception."""
    return check_all([path], simulator=simulator, settings=settings)[0]


def check_taken(
    path: Path,
    taken: Taken | DeckgenError,
    *,
    simulator: Simulator | SimulatorError,
    settings: CheckSettings,
) -> Comparison:
    """Check what was taken in of a file; whatever goes wrong with it is an outcome, never an exception."""
    begun = time.perf_counter()
    if isinstance(taken, DeckgenError):
        return _refused(path, taken)
    try:
        analysis = analyse_taken(taken, told=False)
    except (InputError, NoBiasError) as error:
        return replace(_refused(path, error), findings=taken.findings)
    if isinstance(simulator, SimulatorError):
        return unmeasured(analysis, simulator.outcome, simulator.meaning, said=simulator.said)
    try:
        comparison = _run(analysis, taken, simulator, settings)
    except OutputError as error:
        comparison = unmeasured(analysis, Outcome.INCOMPLETE, str(error))
    except InputError as error:
        comparison = replace(_refused(path, error), findings=taken.findings)
    return replace(comparison, seconds=round(time.perf_counter() - begun, 4))


def _bug(path: Path, error: Exception) -> Comparison:
    place = traceback.extract_tb(error.__traceback__)[-1]
    meaning = (
        f"{type(error).__name__}: {error} (at {Path(place.filename).name}, line {place.lineno}; "
        "-v shows the whole traceback)"
    )
    return Comparison(
        name=path.stem, title="", file=str(path), outcome=Outcome.BUG, assumptions="", meaning=meaning
    )


def _refused(path: Path, error: DeckgenError) -> Comparison:
    plain = Comparison(
        name=path.stem,
        title="",
        file=str(path),
        outcome=Outcome.REFUSED,
        assumptions="",
        meaning=str(error),
    )
    if not isinstance(error, DeckRefusedError):
        return plain
    return replace(
        plain, outcome=error.outcome, meaning=error.meaning, findings=error.findings, said=error.said
    )


def _run(analysis: Analysis, taken: Taken, simulator: Simulator, settings: CheckSettings) -> Comparison:
    """Simulate in a folder of its own, compare, and leave the evidence there."""
    parent = settings.run_dir if settings.keep else None
    with runs.run_folder(parent, analysis.stage.name, now=datetime.datetime.now()) as folder:
        comparison = _run_in(folder, analysis, taken, simulator, settings)
        if settings.stop.is_set():
            raise KeyboardInterrupt
        return comparison


_NONSENSE = (
    "the simulator's operating point is no physical one ({}): look for reversed supplies, a forward-biased "
    "bulk, a current source into nothing"
)


def _plan(analysis: Analysis) -> Plan:
    mid = analysis.prediction.mid_band
    return make_plan(
        analysis.circuit,
        analysis.netlist,
        analysis.ports,
        frequency=None if mid is None else mid.frequency,
        sweep=None if mid is None else sweep_around(mid.exact_f_l, mid.exact_f_h),
    )


def _run_in(
    folder: Path, analysis: Analysis, taken: Taken, simulator: Simulator, settings: CheckSettings
) -> Comparison:
    shown = str(folder) if settings.keep else None
    plan = _plan(analysis)
    execution = run(plan.job, simulator=simulator, folder=folder, limits=settings.limits)
    if execution.outcome is Outcome.MEASURED:
        measurement = measure(analysis.circuit, analysis.ports, plan, execution.plots)
        nonsense = implausible(measurement)
        comparison = (
            judge(analysis, measurement, today=settings.today, run_folder=shown)
            if nonsense is None
            else unmeasured(analysis, Outcome.NO_CONVERGENCE, _NONSENSE.format(nonsense), run_folder=shown)
        )
    else:
        comparison = unmeasured(
            analysis, execution.outcome, execution.meaning, said=execution.said, run_folder=shown
        )
    if settings.keep:
        try:
            evidence.leave(folder, taken.inputs, analysis, comparison, execution, simulator)
        except OutputError as error:
            outcome = Outcome.INCOMPLETE if execution.outcome is Outcome.MEASURED else execution.outcome
            meaning = "; ".join([*filter(None, [execution.meaning]), str(error)])
            return unmeasured(analysis, outcome, meaning, said=execution.said, run_folder=shown)
    return comparison
