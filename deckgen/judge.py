"""From the hand analysis and a measurement to what is said of a stage: guards first, then verdicts."""

from __future__ import annotations

import datetime
from dataclasses import dataclass, replace

from deckgen.bench.measure import Measurement
from deckgen.circuit.model import GROUND, Circuit, VoltageSource
from deckgen.circuit.ports import Ports
from deckgen.circuit.region import Region
from deckgen.compare import Rules, compare, known_gap_findings
from deckgen.comparison import BandEdgeRow, Comparison, Finding, MidBandRow, TransistorRow
from deckgen.errors import Outcome
from deckgen.findings.bias import device_findings, point_findings, region_conflict, stage_findings
from deckgen.findings.graph import bulk_findings, polarity_findings
from deckgen.findings.ratings import Stress, rating_findings, rating_rows
from deckgen.hand.prediction import Prediction
from deckgen.stage.model import Stage


@dataclass(frozen=True, slots=True)
class Analysis:
    """A stage with its netlist, its circuit and its hand analysis: all that needs no simulation.

    ``ports`` is None where no signal path is known; ``noticed`` are findings made while reading.
    """

    stage: Stage
    netlist: str
    circuit: Circuit
    ports: Ports | None
    prediction: Prediction
    noticed: tuple[Finding, ...] = ()


def describe_assumptions(stage: Stage) -> str:
    """Name of the assumption set, with what was added to or dropped from it."""
    changes = [f"+ {slug}" for slug in stage.hand.add] + [f"- {slug}" for slug in stage.hand.drop]
    return " ".join([stage.hand.assumptions, *changes])


def unmeasured(
    analysis: Analysis,
    outcome: Outcome,
    meaning: str,
    *,
    said: tuple[str, ...] = (),
    run_folder: str | None = None,
) -> Comparison:
    """A stage that was analysed by hand and has no measurement, with the outcome that says why."""
    stage = analysis.stage
    return Comparison(
        name=stage.name,
        title=stage.title,
        file=stage.file,
        outcome=outcome,
        assumptions=describe_assumptions(stage),
        meaning=meaning,
        said=said,
        findings=all_findings(analysis, None),
        run_folder=run_folder,
    )


def judge(
    analysis: Analysis, measurement: Measurement, *, today: datetime.date, run_folder: str | None = None
) -> Comparison:
    """Guards, then verdicts, for one measured stage."""
    stage, prediction = analysis.stage, analysis.prediction
    conflicts = {
        device.name: region_conflict(device, measurement, _stated(stage).get(device.name))
        for device in prediction.transistors
    }
    rules = Rules(
        stage=stage,
        supply=_supply(analysis),
        today=today,
        not_compared={name: found.text for name, found in conflicts.items() if found is not None},
        cut_off=all_cut_off(prediction) if not any(conflicts.values()) else (),
    )
    rows = compare(prediction, measurement, rules)
    ratings = rating_rows(
        analysis.circuit,
        stage.ratings,
        hand=_hand_stress(analysis),
        simulated=_measured_stress(analysis, measurement),
    )
    mid = prediction.mid_band
    return Comparison(
        name=stage.name,
        title=stage.title,
        file=stage.file,
        outcome=Outcome.MEASURED,
        assumptions=describe_assumptions(stage),
        findings=(
            *all_findings(analysis, measurement),
            *known_gap_findings(rows, rules),
            *rating_findings(analysis.circuit, ratings),
        ),
        transistors=_transistor_rows(prediction, measurement, stage),
        quantities=rows,
        ratings=ratings,
        mid_band=None if mid is None else MidBandRow(mid.frequency, mid.source),
        band_edges=_band_edge_rows(prediction),
        run_folder=run_folder,
    )


def _band_edge_rows(prediction: Prediction) -> tuple[BandEdgeRow, ...]:
    """What sets each band edge; no row where the sum of time constants says nothing."""
    rows = []
    for edge in prediction.band_edges:
        largest = next(iter(prediction.constants(edge.kind)), None)
        if largest is not None and largest.share is not None:
            rows.append(BandEdgeRow(edge.quantity, largest.name, largest.share))
    return tuple(rows)


def all_cut_off(prediction: Prediction) -> tuple[str, ...]:
    """All transistors, where every one is cut off; with one that conducts, a gain is compared."""
    devices = prediction.transistors
    return tuple(d.name for d in devices) if all(d.region is Region.CUTOFF for d in devices) else ()


def _stated(stage: Stage) -> dict[str, str | None]:
    return {name.upper(): region for name, region in stage.regions}


def _supply(analysis: Analysis) -> float:
    """The largest DC voltage of a source other than the input [V]."""
    sources = [e for e in analysis.circuit.elements if isinstance(e, VoltageSource)]
    driven = None if analysis.ports is None else analysis.ports.input
    return max((abs(e.dc) for e in sources if e.name != driven), default=0.0)


def all_findings(analysis: Analysis, measurement: Measurement | None) -> tuple[Finding, ...]:
    """Findings made while reading, then those of the Q-point and the signal."""
    stage, ports = analysis.stage, analysis.ports
    found: list[Finding] = list(
        device_findings(
            analysis.prediction,
            measurement,
            stated=_stated(stage),
            amplitude=stage.signal.amplitude,
            unit=stage.signal.unit,
        )
    )
    found += point_findings(analysis.prediction, measurement)
    if ports is not None:
        found += stage_findings(
            analysis.prediction,
            amplitude=stage.signal.amplitude,
            source_resistance=ports.source_resistance,
            load=ports.load,
        )
    if stage.deck is not None:
        voltages = dict(
            analysis.prediction.node_voltages if measurement is None else measurement.node_voltages
        )
        # By hand the voltages of what depends on other devices are not known.
        known = tuple(e for e in analysis.circuit.elements if {*e.nodes} - {GROUND} <= voltages.keys())
        circuit = replace(analysis.circuit, elements=known)
        found += bulk_findings(circuit, voltages)
        found += polarity_findings(circuit, voltages, frozenset(n.lower() for n in stage.polarised))
    placed = (replace(one, file=one.file or stage.file) for one in found)
    return (*analysis.noticed, *placed)


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
    prediction: Prediction, measurement: Measurement, stage: Stage
) -> tuple[TransistorRow, ...]:
    """One row for every transistor that was simulated."""
    by_hand = {device.name: device for device in prediction.transistors}
    rows = []
    for simulated in measurement.transistors:
        hand = by_hand.get(simulated.name)
        rows.append(
            TransistorRow(
                name=simulated.name,
                role="not analysed" if hand is None else hand.role,
                law="none" if hand is None else hand.law,
                region=None if hand is None else hand.region.value,
                region_simulated=simulated.region.value,
                region_stated=_stated(stage).get(simulated.name),
                margin=None if hand is None else hand.margin,
                margin_simulated=simulated.margin,
            )
        )
    return tuple(rows)
