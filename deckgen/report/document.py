"""The JSON documents: the whole of a check or a prediction as plain values.

Values are SI floats and None where there is none; nothing that is not finite and nothing complex gets in.
Keys may be added later, none changes its meaning; the shapes stand in ``deckgen/schemas``.
"""

from __future__ import annotations

import cmath
import json
import math
from collections.abc import Sequence
from dataclasses import dataclass
from os import PathLike, fspath
from typing import Any, Protocol

from deckgen import __version__
from deckgen.comparison import (
    AppliedTolerance,
    BandEdgeRow,
    Comparison,
    Finding,
    Gap,
    MidBandRow,
    RatingRow,
    Row,
    TransistorRow,
)
from deckgen.hand.prediction import (
    BandEdge,
    MidBand,
    Prediction,
    Root,
    Step,
    TimeConstantRow,
    TransistorPrediction,
)
from deckgen.report.inert import json_safe
from deckgen.report.wording import CAUTION, conventions

CHECK_SCHEMA = "deckgen.check/1"
PREDICT_SCHEMA = "deckgen.predict/1"

Document = dict[str, Any]


class SimulatorLike(Protocol):
    """What a report says of the simulator."""

    @property
    def name(self) -> str:
        """Its name, as it calls itself."""

    @property
    def version(self) -> str:
        """Its version."""

    @property
    def path(self) -> str | PathLike[str]:
        """The program that ran."""


@dataclass(frozen=True, slots=True)
class PredictedStage:
    """One stage with its hand analysis; ``assumptions`` is the set's name with what was added or dropped."""

    name: str
    title: str
    file: str
    assumptions: str
    prediction: Prediction
    findings: tuple[Finding, ...] = ()
    input_unit: str | None = None
    """What the input source gives, V or A; None where no input is known."""


def check_document(comparisons: Sequence[Comparison], *, simulator: SimulatorLike | None) -> Document:
    """Make the document of a check, stages in the order given; ``simulator`` is None where there was none.

    Raises ValueError on a number that is not finite and TypeError on what is no plain value; both name the
    place.
    """
    document = {
        "schema": CHECK_SCHEMA,
        "deckgen": __version__,
        "simulator": None if simulator is None else _simulator(simulator),
        "exit_code": max((int(comparison.exit_code) for comparison in comparisons), default=0),
        "caution": CAUTION,
        "conventions": conventions(
            laws=[transistor.law for comparison in comparisons for transistor in comparison.transistors],
            quantities=[row.name for comparison in comparisons for row in comparison.quantities],
        ),
        "stages": [_checked_stage(comparison) for comparison in comparisons],
    }
    _refuse_unfit(document, "document")
    return document


def predict_document(predictions: Sequence[PredictedStage]) -> Document:
    """Make the document of a hand analysis, stages in the order given.

    Raises ValueError on a number that is not finite and TypeError on what is no plain value; both name the
    place.
    """
    document = {
        "schema": PREDICT_SCHEMA,
        "deckgen": __version__,
        "caution": CAUTION,
        "conventions": conventions(
            laws=[transistor.law for stage in predictions for transistor in stage.prediction.transistors],
            quantities=[value.name for stage in predictions for value in stage.prediction.values],
            roots=any(stage.prediction.poles or stage.prediction.zeros for stage in predictions),
        ),
        "stages": [_predicted_stage(stage) for stage in predictions],
    }
    _refuse_unfit(document, "document")
    return document


def dump(document: Document, *, compact: bool = False) -> str:
    """Write the document as JSON: two spaces a level, keys in the order of the contract, newline at the end.

    ``compact`` puts all on one line, which takes a tenth of the time.

    Characters that a terminal would act on or that no encoding can hold are escaped.
    """
    return (
        json_safe(json.dumps(document, indent=None if compact else 2, ensure_ascii=False, allow_nan=False))
        + "\n"
    )


def _simulator(simulator: SimulatorLike) -> Document:
    return {"name": simulator.name, "version": simulator.version, "path": fspath(simulator.path)}


def _checked_stage(comparison: Comparison) -> Document:
    return {
        "name": comparison.name,
        "title": comparison.title,
        "file": comparison.file,
        "outcome": comparison.outcome.value,
        "meaning": comparison.meaning,
        "said": list(comparison.said),
        "exit_code": int(comparison.exit_code),
        "assumptions": comparison.assumptions,
        "mid_band": _mid_band(comparison.mid_band),
        "band_edges": [_edge_setter(row) for row in comparison.band_edges],
        "findings": [_finding(finding) for finding in comparison.findings],
        "transistors": [_transistor(transistor) for transistor in comparison.transistors],
        "quantities": [_quantity(row) for row in comparison.quantities],
        "ratings": [_rating(rating) for rating in comparison.ratings],
        "run_folder": comparison.run_folder,
        "seconds": comparison.seconds,
    }


def _mid_band(mid_band: MidBandRow | None) -> Document | None:
    return None if mid_band is None else {"frequency": mid_band.frequency, "source": mid_band.source}


def _edge_setter(row: BandEdgeRow) -> Document:
    return {"quantity": row.quantity, "set_by": row.set_by, "share": row.share}


def _finding(finding: Finding) -> Document:
    return {
        "slug": finding.slug,
        "severity": finding.severity.value,
        "file": finding.file,
        "line": finding.line,
        "subject": finding.subject,
        "text": finding.text,
    }


def _transistor(transistor: TransistorRow) -> Document:
    return {
        "name": transistor.name,
        "role": transistor.role,
        "law": transistor.law,
        "region": transistor.region,
        "region_simulated": transistor.region_simulated,
        "region_stated": transistor.region_stated,
        "margin": transistor.margin,
        "margin_simulated": transistor.margin_simulated,
    }


def _quantity(row: Row) -> Document:
    claim = row.claim
    return {
        "name": row.name,
        "unit": row.unit,
        "hand": row.hand,
        "simulated": row.simulated,
        "claim": None if claim is None else claim.value,
        "claim_upper": None if claim is None else claim.upper,
        "claim_kind": None if claim is None else claim.kind,
        "claim_verdict": None if claim is None else claim.verdict.value,
        "claim_hand_verdict": None if claim is None else claim.hand_verdict.value,
        "gap": _gap(row.gap),
        "tolerance": _tolerance(row.tolerance),
        "verdict": row.verdict.value,
        "wanted": row.wanted,
        "fails": row.fails,
        "excused": row.excused,
        "reason": row.reason,
        "how": row.how,
        "causes": [{"name": cause.name, "share": cause.share} for cause in row.causes],
        "residual": row.residual,
        "explained_by": list(row.explained_by),
    }


def _gap(gap: Gap | None) -> Document:
    if gap is None:
        return {"absolute": None, "relative": None, "db": None}
    return {"absolute": gap.absolute, "relative": gap.relative, "db": gap.db}


def _tolerance(tolerance: AppliedTolerance | None) -> Document:
    if tolerance is None:
        return {"relative": None, "absolute": None, "db": None, "from": None}
    return {
        "relative": tolerance.relative,
        "absolute": tolerance.absolute,
        "db": tolerance.db,
        "from": tolerance.origin,
    }


def _rating(rating: RatingRow) -> Document:
    return {
        "part": rating.part,
        "quantity": rating.quantity,
        "unit": rating.unit,
        "limit": rating.limit,
        "hand": rating.hand,
        "simulated": rating.simulated,
        "verdict": rating.verdict.value,
    }


def _predicted_stage(stage: PredictedStage) -> Document:
    prediction = stage.prediction
    return {
        "name": stage.name,
        "title": stage.title,
        "file": stage.file,
        "assumptions": stage.assumptions,
        "assumptions_in_force": list(prediction.assumptions),
        "mid_band": _hand_mid_band(prediction.mid_band),
        "input_unit": stage.input_unit,
        "findings": [_finding(finding) for finding in stage.findings],
        "transistors": [_predicted_transistor(transistor) for transistor in prediction.transistors],
        "quantities": [
            {
                "name": value.name,
                "unit": value.unit,
                "hand": value.value,
                "how": value.how.value,
                "reason": value.reason,
            }
            for value in prediction.values
        ],
        "working": [_step(step) for step in prediction.working],
        "band_edges": [_band_edge(edge, prediction) for edge in prediction.band_edges],
        "poles": [_root(root) for root in prediction.poles],
        "zeros": [_root(root) for root in prediction.zeros],
        "hidden_poles": [_root(root) for root in prediction.hidden_poles],
        "nodes": _nodes(prediction),
        "notes": list(prediction.notes),
    }


def _hand_mid_band(mid_band: MidBand | None) -> Document | None:
    if mid_band is None:
        return None
    return {
        "frequency": mid_band.frequency,
        "source": mid_band.source,
        "below_maximum_db": mid_band.below_maximum_db,
        "exact_fL": mid_band.exact_f_l,
        "exact_fH": mid_band.exact_f_h,
    }


def _predicted_transistor(transistor: TransistorPrediction) -> Document:
    return {
        "name": transistor.name,
        "role": transistor.role,
        "law": transistor.law,
        "region": transistor.region.value,
        "margin": transistor.margin,
        "VOV": transistor.v_ov,
        "ID": transistor.i_d,
        "vgs_per_emf": transistor.vgs_per_emf,
        "vdg_per_emf": transistor.vdg_per_emf,
        "id_per_emf": transistor.id_per_emf,
    }


def _step(step: Step) -> Document:
    return {
        "symbol": step.symbol,
        "formula": step.formula,
        "numbers": step.numbers,
        "value": step.value,
        "unit": step.unit,
        "source": step.source,
        "quantity": step.quantity,
        "note": step.note,
    }


def _band_edge(edge: BandEdge, prediction: Prediction) -> Document:
    return {
        "quantity": edge.quantity,
        "kind": edge.kind.value,
        "time_constants": [_time_constant(row) for row in prediction.constants(edge.kind)],
        "estimate": edge.estimate,
        "exact": edge.exact,
        "miller": edge.miller,
        "notes": list(edge.notes),
    }


def _time_constant(row: TimeConstantRow) -> Document:
    return {
        "capacitor": row.name,
        "capacitance": row.capacitance,
        "resistance": row.resistance,
        "tau": row.tau,
        "frequency": row.frequency,
        "share": row.share,
    }


def _root(root: Root) -> Document:
    """A pair on the axis has no finite Q, so that it is a pair is said apart."""
    return {
        "frequency": root.frequency,
        "pair": root.q is not None,
        "q": None if root.q is None or math.isinf(root.q) else root.q,
        "half_plane": root.half_plane.value,
    }


def _nodes(prediction: Prediction) -> list[Document]:
    """Voltages at the Q-point, and the mid-band signal per volt or ampere of input where there is one."""
    signals = dict(prediction.node_signals)
    return [_node(name, voltage, signals.get(name)) for name, voltage in prediction.node_voltages]


def _node(name: str, voltage: float, signal: complex | None) -> Document:
    """Signal as size and phase; where there is none or it is zero, it has no phase."""
    size = None if signal is None else abs(signal)
    phase = None if signal is None or abs(signal) <= 0.0 else math.degrees(cmath.phase(signal))
    return {"name": name, "voltage": voltage, "signal": size, "phase": phase}


def _refuse_unfit(value: object, place: str) -> None:
    """Raise on what JSON cannot hold, rather than turn it into text that looks like a result."""
    if isinstance(value, dict):
        for key, member in value.items():
            _refuse_unfit(member, f"{place}.{key}")
    elif isinstance(value, list):
        for index, member in enumerate(value):
            _refuse_unfit(member, f"{place}[{index}]")
    elif isinstance(value, float):
        if not math.isfinite(value):
            raise ValueError(
                f"{place} is {value}: a report holds finite numbers, or null where there is none"
            )
    elif value is not None and not isinstance(value, (str, bool, int)):
        raise TypeError(f"{place} is a {type(value).__name__}: a report holds plain numbers and texts")
