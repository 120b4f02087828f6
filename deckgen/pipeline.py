"""The one place that strings the steps together: stage file → netlist → circuit → hand, bench → verdict.

Every command calls it, and a notebook can. Nothing here computes: each step is a package of its own.
"""

from __future__ import annotations

import datetime
import logging
import platform
import threading
import time
from collections.abc import Callable, Sequence
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

from deckgen import __version__
from deckgen.assumptions import assumptions_made
from deckgen.bench.measure import Measurement, measure
from deckgen.bench.plan import make_plan, sweep_around
from deckgen.circuit.model import Circuit, VoltageSource
from deckgen.circuit.ports import Ports
from deckgen.circuit.reader import read_flat
from deckgen.compare import Rules, compare, known_gap_findings
from deckgen.comparison import Comparison, Finding, MidBandRow, TransistorRow
from deckgen.errors import DeckgenError, InputError, NoBiasError, Outcome, OutputError, SimulatorError
from deckgen.findings.bias import device_findings, region_conflict, stage_findings
from deckgen.findings.ratings import Stress, rating_findings, rating_rows
from deckgen.hand.predict import predict
from deckgen.hand.prediction import Prediction
from deckgen.render.engine import render
from deckgen.report.document import PredictedStage, check_document, dump
from deckgen.simulator.job import DECK, HOME, STARTUP, Execution, Limits
from deckgen.simulator.locate import Simulator
from deckgen.simulator.process import stop_all
from deckgen.simulator.run import run
from deckgen.simulator.startup import digest
from deckgen.stage.files import read_text
from deckgen.stage.model import Stage
from deckgen.stage.read import read_stage, stage_from_text
from deckgen.stage.topology import load_topology
from deckgen.store import runs

log = logging.getLogger("deckgen")


@dataclass(frozen=True, slots=True)
class Analysis:
    """A stage with its netlist, its circuit and its hand analysis: all that needs no simulator."""

    stage: Stage
    netlist: str
    circuit: Circuit
    ports: Ports
    prediction: Prediction


@dataclass(frozen=True, slots=True)
class CheckSettings:
    """Where runs leave their folders, whether they are kept, limits, what day it is; ``stop`` ends all."""

    run_dir: Path = Path("runs")
    keep: bool = True
    limits: Limits = field(default_factory=Limits)
    today: datetime.date = field(default_factory=datetime.date.today)
    stop: threading.Event = field(default_factory=threading.Event)


def analyse(stage: Stage) -> Analysis:
    """Render, read and analyse a stage by hand. Raises InputError or NoBiasError."""
    netlist = render(stage, load_topology(stage.topology))
    circuit = read_flat(netlist, file=stage.file)
    ports = _ports(stage)
    prediction = predict(
        circuit,
        ports,
        assumptions=assumptions_made(stage.hand.assumptions, add=stage.hand.add, drop=stage.hand.drop),
        frequency=stage.signal.frequency,
    )
    return Analysis(stage, netlist, circuit, ports, prediction)


def _ports(stage: Stage) -> Ports:
    def lower(name: str | None) -> str | None:
        return None if name is None else name.lower()

    signal = stage.signal
    return Ports(
        input=signal.input.lower(),
        output=signal.output.lower(),
        source_resistance=lower(signal.source_resistance),
        load=lower(signal.load),
    )


def predict_stage(path: Path) -> PredictedStage:
    """The hand analysis of one stage file, with the findings that need no simulator."""
    analysis = analyse(read_stage(path))
    stage = analysis.stage
    return PredictedStage(
        name=stage.name,
        title=stage.title,
        file=stage.file,
        assumptions=describe_assumptions(stage),
        prediction=analysis.prediction,
        findings=_findings(analysis, None),
    )


def describe_assumptions(stage: Stage) -> str:
    """Name of the assumption set, with what was added to or dropped from it."""
    changes = [f"+ {slug}" for slug in stage.hand.add] + [f"- {slug}" for slug in stage.hand.drop]
    return " ".join([stage.hand.assumptions, *changes])


def check_stage(path: Path, *, simulator: Simulator | SimulatorError, settings: CheckSettings) -> Comparison:
    """Check one stage file; whatever goes wrong with it is an outcome, never an exception.

    ``simulator`` is the error itself where none was found: the stage is still read and analysed.
    """
    begun = time.perf_counter()
    try:
        text = read_text(path)
        analysis = analyse(stage_from_text(text, file=str(path)))
    except (InputError, NoBiasError) as error:
        return _refused(path, error)
    if isinstance(simulator, SimulatorError):
        return _unmeasured(analysis, simulator.outcome, simulator.meaning, said=simulator.said)
    try:
        comparison = _run(analysis, text, simulator, settings)
    except OutputError as error:
        comparison = _unmeasured(analysis, Outcome.INCOMPLETE, str(error))
    return replace(comparison, seconds=round(time.perf_counter() - begun, 4))


def check_all(
    paths: Sequence[Path],
    *,
    simulator: Simulator | SimulatorError,
    settings: CheckSettings,
    jobs: int = 1,
    told: Callable[[Comparison], None] = lambda _: None,
) -> tuple[Comparison, ...]:
    """Check many stage files, ``jobs`` at a time; the order of the results is that of the paths.

    ``told`` is called with each result as it is ready.
    """

    def one(path: Path) -> Comparison:
        comparison = check_stage(path, simulator=simulator, settings=settings)
        log.info("%s: %s, exit code %d", path, comparison.outcome, comparison.exit_code)
        told(comparison)
        return comparison

    if jobs <= 1 or len(paths) <= 1:
        return tuple(one(path) for path in paths)
    futures: list[Future[Comparison]] = []
    with ThreadPoolExecutor(max_workers=jobs) as pool:
        try:
            futures += (pool.submit(one, path) for path in paths)
            return tuple(future.result() for future in futures)
        except KeyboardInterrupt:
            settings.stop.set()
            pool.shutdown(wait=False, cancel_futures=True)
            # Over and over: a thread may be about to start its simulator.
            while not all(future.done() for future in futures):
                stop_all()
                time.sleep(0.01)
            raise


def stage_name(path: Path) -> str:
    """Name of a stage: that of its file."""
    return path.stem


def _refused(path: Path, error: DeckgenError) -> Comparison:
    return Comparison(
        name=stage_name(path),
        title="",
        file=str(path),
        outcome=Outcome.REFUSED,
        assumptions="",
        meaning=str(error),
    )


def _unmeasured(
    analysis: Analysis,
    outcome: Outcome,
    meaning: str,
    *,
    said: tuple[str, ...] = (),
    run_folder: str | None = None,
) -> Comparison:
    stage = analysis.stage
    return Comparison(
        name=stage.name,
        title=stage.title,
        file=stage.file,
        outcome=outcome,
        assumptions=describe_assumptions(stage),
        meaning=meaning,
        said=said,
        findings=_findings(analysis, None),
        run_folder=run_folder,
    )


def _run(analysis: Analysis, text: str, simulator: Simulator, settings: CheckSettings) -> Comparison:
    """Simulate in a folder of its own, compare, and leave the evidence there."""
    parent = settings.run_dir if settings.keep else None
    with runs.run_folder(parent, analysis.stage.name, now=datetime.datetime.now()) as folder:
        comparison = _run_in(folder, analysis, text, simulator, settings)
        if settings.stop.is_set():
            raise KeyboardInterrupt
        return comparison


def _run_in(
    folder: Path, analysis: Analysis, text: str, simulator: Simulator, settings: CheckSettings
) -> Comparison:
    shown = str(folder) if settings.keep else None
    mid = analysis.prediction.mid_band
    plan = make_plan(
        analysis.circuit,
        analysis.netlist,
        analysis.ports,
        frequency=mid.frequency,
        sweep=sweep_around(mid.exact_f_l, mid.exact_f_h),
    )
    execution = run(plan.job, simulator=simulator, folder=folder, limits=settings.limits)
    if execution.outcome is Outcome.MEASURED:
        measurement = measure(analysis.circuit, analysis.ports, plan, execution.plots)
        comparison = judge(analysis, measurement, today=settings.today, run_folder=shown)
    else:
        comparison = _unmeasured(
            analysis, execution.outcome, execution.meaning, said=execution.said, run_folder=shown
        )
    if settings.keep:
        _leave_evidence(folder, text, analysis, comparison, execution, simulator)
    return comparison


def judge(
    analysis: Analysis, measurement: Measurement, *, today: datetime.date, run_folder: str | None = None
) -> Comparison:
    """Guards, then verdicts, for one measured stage."""
    stage, prediction = analysis.stage, analysis.prediction
    stated = _stated_regions(stage)
    conflicts = {
        device.name: region_conflict(device, measurement, stated.get(device.name))
        for device in prediction.transistors
    }
    rules = Rules(
        stage=stage,
        supply=_supply(analysis),
        today=today,
        not_compared={name: found.text for name, found in conflicts.items() if found is not None},
    )
    rows = compare(prediction, measurement, rules)
    ratings = rating_rows(
        analysis.circuit,
        stage.ratings,
        hand=_hand_stress(analysis),
        simulated=_measured_stress(analysis, measurement),
    )
    return Comparison(
        name=stage.name,
        title=stage.title,
        file=stage.file,
        outcome=Outcome.MEASURED,
        assumptions=describe_assumptions(stage),
        findings=(
            *_findings(analysis, measurement),
            *known_gap_findings(rows, rules),
            *rating_findings(analysis.circuit, ratings),
        ),
        transistors=_transistor_rows(prediction, measurement, stated),
        quantities=rows,
        ratings=ratings,
        mid_band=MidBandRow(prediction.mid_band.frequency, prediction.mid_band.source),
        run_folder=run_folder,
    )


def _stated_regions(stage: Stage) -> dict[str, str | None]:
    return {transistor.name.upper(): transistor.region for transistor in stage.transistors}


def _supply(analysis: Analysis) -> float:
    """The largest DC voltage of a source other than the input [V]."""
    sources = [e for e in analysis.circuit.elements if isinstance(e, VoltageSource)]
    return max((abs(e.dc) for e in sources if e.name != analysis.ports.input), default=0.0)


def _findings(analysis: Analysis, measurement: Measurement | None) -> tuple[Finding, ...]:
    stage = analysis.stage
    found = (
        *device_findings(
            analysis.prediction,
            measurement,
            stated=_stated_regions(stage),
            amplitude=stage.signal.amplitude,
        ),
        *stage_findings(
            analysis.prediction,
            amplitude=stage.signal.amplitude,
            source_resistance=analysis.ports.source_resistance,
            load=analysis.ports.load,
        ),
    )
    return tuple(replace(one, file=stage.file) for one in found)


def _hand_stress(analysis: Analysis) -> Stress:
    prediction = analysis.prediction
    return Stress(
        voltages=dict(prediction.node_voltages),
        signals=dict(prediction.node_signals),
        currents={device.name: device.i_d for device in prediction.transistors},
        amplitude=analysis.stage.signal.amplitude or 0.0,
    )


def _measured_stress(analysis: Analysis, measurement: Measurement) -> Stress:
    currents = {}
    for device in measurement.transistors:
        found = measurement.value(f"ID({device.name})")
        currents[device.name] = float("nan") if found is None or found.value is None else found.value
    return Stress(
        voltages=dict(measurement.node_voltages),
        signals=dict(measurement.node_signals),
        currents=currents,
        amplitude=analysis.stage.signal.amplitude or 0.0,
    )


def _transistor_rows(
    prediction: Prediction, measurement: Measurement, stated: dict[str, str | None]
) -> tuple[TransistorRow, ...]:
    simulated = {device.name: device for device in measurement.transistors}
    return tuple(
        TransistorRow(
            name=device.name,
            role=device.role,
            law=device.law,
            region=device.region.value,
            region_simulated=simulated[device.name].region.value,
            region_stated=stated.get(device.name),
            margin=device.margin,
            margin_simulated=simulated[device.name].margin,
        )
        for device in prediction.transistors
    )


def _leave_evidence(
    folder: Path,
    text: str,
    analysis: Analysis,
    comparison: Comparison,
    execution: Execution,
    simulator: Simulator,
) -> None:
    # The text that was checked, under a name that no other file of a run has.
    stage_file = f"{analysis.stage.name}.toml"
    runs.write_atomically(folder / stage_file, text)
    runs.write_atomically(folder / runs.COMPARISON, dump(check_document([comparison], simulator=simulator)))
    runs.write_record(folder, _record(stage_file, analysis, execution, simulator))


def _record(
    stage_file: str, analysis: Analysis, execution: Execution, simulator: Simulator
) -> dict[str, Any]:
    return {
        "schema": "deckgen.run/1",
        "deckgen": __version__,
        "python": platform.python_version(),
        "system": platform.platform(),
        "simulator": {"name": simulator.name, "version": simulator.version, "path": simulator.path},
        "command": [simulator.path, "-n", "-b", DECK],
        "environment": {"SPICE_SCRIPTS": STARTUP, "HOME": HOME, "LC_ALL": "C"},
        "start_up_file_sha256": digest(),
        "stage_file": stage_file,
        "temperature_kelvin": analysis.stage.conditions.temperature,
        "tnom_kelvin": analysis.stage.conditions.tnom,
        "outcome": execution.outcome.value,
        "returncode": execution.returncode,
        "seconds": execution.seconds,
    }
