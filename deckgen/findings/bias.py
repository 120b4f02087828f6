"""Guards that come before any verdict: regions, margins, the small-signal condition, cautions.

Each function looks at frozen values and returns findings; none of them changes a verdict by itself.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import replace
from itertools import combinations

from deckgen.bench.measure import Measurement
from deckgen.circuit.region import Region
from deckgen.comparison import Finding
from deckgen.findings.table import finding
from deckgen.hand.prediction import (
    NO_CURRENT,
    HalfPlane,
    OperatingPoint,
    Prediction,
    Root,
    TransistorPrediction,
)
from deckgen.stage.model import SourceUnit
from deckgen.units import format_value

SMALL_SIGNAL_SHARE = 0.1
"""Peak gate-source signal over 2·VOV up to which a signal counts as small; HD2 = 5 % there."""

STRONG_INVERSION = 0.15
"""VOV [V] above which the square law is trusted (B. Murmann, Analysis and Design of Elementary MOS
Amplifier Stages, ch. 2)."""

THIN_MARGIN = 0.05
"""Saturation margin [V] below which a note is given; common practice."""

DC_LIMIT, PEAK_LIMIT = 60.0, 42.4
"""Extra-low-voltage limits [V], dc and peak, as public texts quote them from IEC 62368-1; the standard
itself was not read."""

_FLAT_DB = 0.1
_TELLING = 0.1  # share of the largest difference of two points, below which a node tells nothing of them
_NO_VOLTAGE = 1e-9  # V; rounding, where a point is described
_BY_HAND, _SIMULATED = "by hand", "as simulated"


def wanted_region(stated: str | None) -> str:
    """The region a transistor in the signal path should be in: as stated, else saturation."""
    return stated or Region.SATURATION.value


def region_conflict(
    device: TransistorPrediction, measurement: Measurement | None, stated: str | None
) -> Finding | None:
    """Why small-signal values of this transistor can't be compared, or None."""
    wanted = wanted_region(stated)
    simulated = _simulated_region(device.name, measurement)
    sides = {_BY_HAND: device.region, _SIMULATED: simulated}
    for side, region in sides.items():
        if region is Region.REVERSED:
            return finding("drain-source-reversed", subject=device.name, device=device.name, side=side)
    wrong = [side for side, region in sides.items() if region is not None and region.value != wanted]
    if simulated is not None and device.region is not simulated:
        return finding(
            "region-differs", subject=device.name, device=device.name, hand=device.region, simulated=simulated
        )
    if wrong:
        side = "by hand and as simulated" if len(wrong) == 2 else wrong[0]
        region = sides[wrong[0]]
        return finding(
            "region-not-as-stated",
            subject=device.name,
            device=device.name,
            region=region,
            side=side,
            wanted=wanted,
        )
    return None


def _simulated_region(name: str, measurement: Measurement | None) -> Region | None:
    if measurement is None:
        return None
    return next((t.region for t in measurement.transistors if t.name == name), None)


def device_findings(
    prediction: Prediction,
    measurement: Measurement | None,
    *,
    stated: Mapping[str, str | None],
    amplitude: float | None,
    unit: SourceUnit = "V",
) -> tuple[Finding, ...]:
    """Region, margin, inversion and signal-size findings of every transistor.

    ``unit`` is that of the input source and its ``amplitude``.
    """
    found: list[Finding] = []
    for device in prediction.transistors:
        conflict = region_conflict(device, measurement, stated.get(device.name))
        if conflict is not None:
            found.append(conflict)
        else:
            found.extend(_margin(device, measurement))
        if 0.0 < device.v_ov < STRONG_INVERSION:
            found.append(
                finding(
                    "weak-inversion",
                    subject=device.name,
                    device=device.name,
                    v_ov=format_value(device.v_ov, "V"),
                )
            )
        if amplitude is not None and device.region is Region.SATURATION:
            found.extend(_signal_size(device, amplitude, unit))
    if prediction.kept is not None:
        found.append(finding("effect-kept", why=prediction.kept))
    return tuple(found)


def point_findings(prediction: Prediction, measurement: Measurement | None) -> tuple[Finding, ...]:
    """Several stable operating points, or none; and whether the simulator settled in another one."""
    idle = all(abs(device.i_d) <= NO_CURRENT for device in prediction.transistors)
    here = OperatingPoint(prediction.node_voltages, prediction.stable, idle)
    stable = [point for point in prediction.others if point.stable]
    if not prediction.stable:
        return (finding("unstable-point", here=_described(here, _telling_nodes([here]))),)
    if not stable:
        return ()
    other = stable[0]
    nodes = _telling_nodes([here, other])
    told = [
        f"{_described(point, nodes)}{' with no current in any transistor' if point.idle else ''}"
        if here.idle is not other.idle
        else _described(point, nodes)
        for point in (here, other)
    ]
    return (
        finding(
            "two-stable-points",
            count="two" if len(stable) == 1 else len(stable) + 1,
            here=told[0],
            there=told[1],
            simulated=_settled([here, other, *prediction.others], measurement, nodes),
        ),
    )


def _settled(points: Sequence[OperatingPoint], measurement: Measurement | None, nodes: list[str]) -> str:
    """Where the simulator settled, if not in the first of the points, that of the hand values."""
    if measurement is None:
        return ""
    simulated = dict(measurement.node_voltages)

    def distance(point: OperatingPoint) -> float:
        return max((abs(simulated[n] - v) for n, v in point.node_voltages if n in simulated), default=0.0)

    nearest = min(points, key=distance)
    if nearest is points[0]:
        return ""
    if nearest is points[1]:
        return "; the simulator settled in the latter"
    which = "another one" if nearest.stable else "an unstable one between them"
    seen = _described(replace(nearest, node_voltages=measurement.node_voltages), nodes)
    return f"; the simulator settled in {which}: {seen}"


def _telling_nodes(points: Sequence[OperatingPoint]) -> list[str]:
    """The two nodes in which points differ most, of a single point its first two; in the circuit's order."""
    every = [dict(point.node_voltages) for point in points]
    apart = {node: max(p[node] for p in every) - min(p[node] for p in every) for node in every[0]}
    most = sorted(apart, key=lambda node: -apart[node])[:2]
    least = _TELLING * max(apart.values(), default=0.0)
    return [node for node in apart if node in most and apart[node] >= least]


def _described(point: OperatingPoint, nodes: Iterable[str]) -> str:
    volts = {node: 0.0 if abs(value) < _NO_VOLTAGE else value for node, value in point.node_voltages}
    return ", ".join(f"V({node}) = {format_value(volts[node], 'V')}" for node in nodes)


def _margin(device: TransistorPrediction, measurement: Measurement | None) -> Iterable[Finding]:
    margins = {_BY_HAND: device.margin}
    if measurement is not None:
        margins[_SIMULATED] = next(t.margin for t in measurement.transistors if t.name == device.name)
    worst = min(margins, key=lambda side: margins[side])
    if device.region is Region.SATURATION and margins[worst] < THIN_MARGIN:
        yield finding(
            "thin-margin",
            subject=device.name,
            device=device.name,
            margin=format_value(margins[worst], "V"),
            side=worst,
        )


def _drive(amplitude: float, unit: SourceUnit) -> str:
    """An amplitude of the input source, and what it is one of."""
    return f"{format_value(amplitude, unit)} {'EMF' if unit == 'V' else 'input current'}"


def _signal_size(device: TransistorPrediction, amplitude: float, unit: SourceUnit) -> Iterable[Finding]:
    """The small-signal condition, and the output peak against saturation margin and cut-off."""
    if device.vgs_per_emf is None or device.vdg_per_emf is None or device.id_per_emf is None:
        return
    peak, limit = amplitude * device.vgs_per_emf, SMALL_SIGNAL_SHARE * 2.0 * device.v_ov
    drive = _drive(amplitude, unit)
    if peak > limit:
        yield finding(
            "signal-too-large",
            subject=device.name,
            device=device.name,
            signal=format_value(peak, "V"),
            limit=format_value(limit, "V"),
            drive=_drive(limit / device.vgs_per_emf, unit),
        )
    if amplitude * device.vdg_per_emf > device.margin:
        yield finding(
            "output-leaves-saturation",
            subject=device.name,
            device=device.name,
            drive=drive,
            signal=format_value(amplitude * device.vdg_per_emf, "V"),
            margin=format_value(device.margin, "V"),
        )
    if amplitude * device.id_per_emf > device.i_d:
        yield finding(
            "output-cuts-off",
            subject=device.name,
            device=device.name,
            drive=drive,
            signal=format_value(amplitude * device.id_per_emf, "A"),
            current=format_value(device.i_d, "A"),
        )


def stage_findings(
    prediction: Prediction, *, amplitude: float | None, source_resistance: str | None, load: str | None
) -> tuple[Finding, ...]:
    """Findings on the stage as a whole: mid-band, undeclared resistors, hazardous voltages."""
    found: list[Finding] = []
    mid = prediction.mid_band
    if mid is None:
        return hazards(prediction, amplitude=amplitude)
    if mid.below_maximum_db > _FLAT_DB:
        found.append(
            finding(
                "mid-band-not-flat",
                frequency=format_value(mid.frequency, "Hz"),
                below=mid.below_maximum_db,
            )
        )
    found.extend(_instability(prediction))
    if source_resistance is None:
        found.append(finding("source-resistance-not-declared"))
    if load is None:
        found.append(finding("load-not-declared"))
    return (*found, *hazards(prediction, amplitude=amplitude))


def _instability(prediction: Prediction) -> Iterable[Finding]:
    """Natural frequencies that grow; one that the gain doesn't show is no better."""
    natural = (*prediction.poles, *prediction.hidden_poles)
    growing = [root for root in natural if root.half_plane is HalfPlane.RIGHT]
    if growing:
        places = ", ".join(_growing(root) for root in growing)
        swings = any(root.q is not None for root in growing)
        behaviour = "oscillates" if swings else "runs away from this Q-point"
        yield finding("unstable-small-signal", poles=places, behaviour=behaviour)


def _growing(root: Root) -> str:
    frequency = format_value(root.frequency, "Hz")
    return f"pole at +{frequency}" if root.q is None else f"pole pair at {frequency}"


def _clips(prediction: Prediction, amplitude: float) -> bool:
    """Whether the signal drives a transistor out of its region: then linear peaks are no real voltages."""
    return any(
        amplitude * (device.vdg_per_emf or 0.0) > device.margin
        or amplitude * (device.id_per_emf or 0.0) > device.i_d
        for device in prediction.transistors
    )


def hazards(prediction: Prediction, *, amplitude: float | None) -> tuple[Finding, ...]:
    """Voltages between any two nodes, ground included, above the extra-low-voltage limits."""
    found: list[Finding] = []
    direct = {"0": 0.0, **dict(prediction.node_voltages)}
    high, low = max(direct, key=lambda n: direct[n]), min(direct, key=lambda n: direct[n])
    if direct[high] - direct[low] > DC_LIMIT:
        found.append(
            finding(
                "hazardous-voltage",
                value=format_value(direct[high] - direct[low], "V"),
                kind="dc",
                nodes=f"{high} and {low}",
                limit=format_value(DC_LIMIT, "V"),
            )
        )
    signals = {"0": 0j, **dict(prediction.node_signals)}
    pairs = combinations(signals, 2)
    worst = max(pairs, key=lambda pair: abs(signals[pair[0]] - signals[pair[1]]), default=None)
    if worst is not None and amplitude is not None and not _clips(prediction, amplitude):
        peak = amplitude * abs(signals[worst[0]] - signals[worst[1]])
        if peak > PEAK_LIMIT:
            found.append(
                finding(
                    "hazardous-voltage",
                    value=format_value(peak, "V"),
                    kind="peak",
                    nodes=f"{worst[0]} and {worst[1]}",
                    limit=format_value(PEAK_LIMIT, "V"),
                )
            )
    return tuple(found)
