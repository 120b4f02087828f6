"""What the gain does over frequency: poles, zeros, and which capacitor sets which band edge.

Sums of time constants after P. E. Gray, C. L. Searle, *Electronic Principles*, Wiley 1969; that Σ τ of open
circuit is the sum of all -1/pole, and the same of short circuit and low frequencies, is exact (A. Hajimiri,
IEEE Trans. Circuits and Systems I 57(6), 2010, 1105-1121).
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass

from deckgen.hand import bandwidth
from deckgen.hand.analysis import SignalPath
from deckgen.hand.bandwidth import TimeConstant
from deckgen.hand.formulas.frequency import DOMINANT_POLE
from deckgen.hand.poles import poles_and_zeros, roots
from deckgen.hand.prediction import BandEdge, Root, Step, TimeConstantKind, TimeConstantRow

CLOSE = 0.1
"""How far a good sum of time constants may lie from the exact value, as a share of it; common practice."""

MILLER = "fH (Miller)"
"""Symbol of the step of working that gives Miller's estimate."""

UNRESOLVED = "poles and zeros: values too far apart to be resolved in double precision"


@dataclass(frozen=True, slots=True)
class Response:
    """Poles, zeros and time constants of one signal path, as ``Prediction`` holds them."""

    poles: tuple[Root, ...] = ()
    zeros: tuple[Root, ...] = ()
    hidden_poles: tuple[Root, ...] = ()
    time_constants: tuple[TimeConstantRow, ...] = ()
    band_edges: tuple[BandEdge, ...] = ()
    notes: tuple[str, ...] = ()


def response_of(path: SignalPath | None, steps: Iterable[Step]) -> Response:
    """Poles and zeros of a path; where there is gain at mid-band, time constants and band edges too."""
    if path is None:
        return Response()
    found = poles_and_zeros(path.small, path.mid.frequency)
    rows, edges = (
        _edges(path, steps) if path.gain.phase is not None and path.mid.outside is None else ((), ())
    )
    if found is None:
        return Response(time_constants=rows, band_edges=edges, notes=(UNRESOLVED,))
    return Response(roots(found.poles), roots(found.zeros), roots(found.cancelled), rows, edges)


def _edges(
    path: SignalPath, steps: Iterable[Step]
) -> tuple[tuple[TimeConstantRow, ...], tuple[BandEdge, ...]]:
    short = bandwidth.short_circuit_constants(path.small, path.treatments)
    open_ = bandwidth.open_circuit_constants(path.small, path.treatments)
    miller = next((step.value for step in steps if step.symbol == MILLER), None)
    lower, upper = bandwidth.lower_edge(short), bandwidth.upper_edge(open_)
    low = _rows(short, TimeConstantKind.SHORT_CIRCUIT)
    high = _rows(open_, TimeConstantKind.OPEN_CIRCUIT)
    edges = (
        _edge("fL", TimeConstantKind.SHORT_CIRCUIT, low, lower, path.mid.exact_f_l),
        _edge("fH", TimeConstantKind.OPEN_CIRCUIT, high, upper, path.mid.exact_f_h, miller),
    )
    return (*low, *high), tuple(edge for edge in edges if edge is not None)


def _rows(constants: tuple[TimeConstant, ...], kind: TimeConstantKind) -> tuple[TimeConstantRow, ...]:
    """Rows of one kind, the largest share first, and what is bootstrapped last."""
    weights = [_weight(one.tau, kind) for one in constants]
    total = sum(weights)
    shared = 0.0 < total < math.inf
    rows = [
        TimeConstantRow(
            name=one.shown,
            kind=kind,
            capacitance=one.capacitance,
            resistance=_finite(one.resistance),
            tau=_finite(one.tau),
            frequency=_finite(1.0 / (2.0 * math.pi * one.tau) if abs(one.tau) > 0.0 else math.inf),
            share=weight / total if shared else None,
        )
        for one, weight in zip(constants, weights, strict=True)
    ]
    order = sorted(range(len(rows)), key=lambda index: -weights[index])
    return tuple(rows[index] for index in order)


def _weight(tau: float, kind: TimeConstantKind) -> float:
    if kind is TimeConstantKind.OPEN_CIRCUIT:
        return tau
    return 1.0 / tau if abs(tau) > 0.0 else math.inf


def _finite(value: float) -> float | None:
    return value if math.isfinite(value) else None


def _edge(
    quantity: str,
    kind: TimeConstantKind,
    rows: tuple[TimeConstantRow, ...],
    estimate: float | None,
    exact: float | None,
    miller: float | None = None,
) -> BandEdge | None:
    """The edge with notes on its sum; None where there is neither a capacitor nor an edge."""
    if not rows and exact is None:
        return None
    return BandEdge(quantity, kind, estimate, exact, miller, tuple(_out_of_range(rows, estimate, exact)))


def _out_of_range(
    rows: tuple[TimeConstantRow, ...], estimate: float | None, exact: float | None
) -> Iterable[str]:
    if not rows:
        yield "no capacitor sets it: an inductor does"
        return
    bootstrapped = [row.name for row in rows if row.tau is not None and row.tau < 0.0]
    if bootstrapped:
        yield f"bootstrapped, sees a negative resistance: {', '.join(bootstrapped)}"
    largest = rows[0].share
    if largest is not None and DOMINANT_POLE.note(largest) is not None:
        yield f"no time constant dominates: the largest is {100.0 * largest:.3g} % of the sum"
    if estimate is None or exact is None:
        return
    off = estimate / exact - 1.0
    if not abs(off) <= CLOSE:
        size, side = 100.0 * abs(off), "above" if off > 0.0 else "below"
        yield f"the sum of time constants is {size:.0f} % {side} the exact value"
