"""Verdicts: hand against simulated, quantity by quantity, within tolerances that say where they come from."""

from __future__ import annotations

import datetime
import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from deckgen.bench.measure import MeasuredValue, Measurement
from deckgen.comparison import AppliedTolerance, ClaimResult, Finding, Gap, Row, Verdict
from deckgen.findings.table import finding
from deckgen.hand.prediction import HandValue, How, Prediction
from deckgen.quantities import KINDS, Kind, Limit, Quantity, parse_quantity
from deckgen.stage.model import AssumptionSet, Claim, KnownGap, Stage, ToleranceRule

_OF_A_GAIN = frozenset({"Av", "Av.phase", "Avi", "Rm", "Rm.phase", "fL", "fH"})

_ROUNDING = 1e-12
"""Share of a limit that a gap may exceed it by through rounding alone."""


@dataclass(frozen=True, slots=True)
class Rules:
    """What a stage says about its verdicts, and the circumstances: its supply [V], the date."""

    stage: Stage
    supply: float
    today: datetime.date
    not_compared: Mapping[str, str]
    """Transistor -> why its small-signal values can't be compared."""

    cut_off: tuple[str, ...] = ()
    """All transistors, where all are cut off, by hand and simulated, as they should be; else none."""


def compare(prediction: Prediction, measurement: Measurement, rules: Rules) -> tuple[Row, ...]:
    """One row for every wanted quantity, in the order of the table of kinds.

    A quantity that is named but that the circuit does not have gets a row too: not compared.
    """
    rows = [
        _row(hand, measurement.value(hand.name), rules)
        for hand in prediction.values
        if is_wanted(hand.name, rules.stage)
    ]
    there = {parse_quantity(value.name) for value in prediction.values}
    rows += [_missing(quantity) for quantity in named_quantities(rules.stage) if quantity not in there]
    order = {name: number for number, name in enumerate(KINDS)}
    return tuple(sorted(rows, key=lambda row: order[parse_quantity(row.name).kind]))


def named_quantities(stage: Stage) -> tuple[Quantity, ...]:
    """Single quantities that claims, known gaps or ``[wanted]`` name, each once."""
    names = [claim.quantity for claim in stage.claims] + [gap.quantity for gap in stage.known_gaps]
    names += [name for name in stage.wanted if name not in KINDS or KINDS[name].scope == "stage"]
    return tuple(dict.fromkeys(parse_quantity(name) for name in names))


def _missing(quantity: Quantity) -> Row:
    kind = quantity.description
    return Row(
        name=str(quantity),
        unit=kind.unit,
        hand=None,
        simulated=None,
        verdict=Verdict.NOT_COMPARED,
        how=str(How.NODAL),
        reason=f"the circuit has no {kind.scope} {quantity.of}" if quantity.of else "it is not analysed",
    )


def is_wanted(name: str, stage: Stage) -> bool:
    """Whether a quantity is compared: as ``[wanted]`` says, and everything claimed or excused.

    Without ``[wanted]`` every quantity, of the node voltages only the output's and those named anywhere;
    Avi not where it would only repeat Av.
    """
    quantity = parse_quantity(name)
    named = {*(claim.quantity for claim in stage.claims), *(gap.quantity for gap in stage.known_gaps)}
    if _is_among(quantity, named):
        return True
    if stage.wanted:
        return _is_among(quantity, stage.wanted)
    if quantity.kind != "V":
        return not is_repeated(name, stage)
    mentioned = {rule.target for rule in stage.tolerances if "(" in rule.target}
    return quantity.of == stage.signal.output.lower() or _is_among(quantity, mentioned)


def is_repeated(name: str, stage: Stage) -> bool:
    """Whether a row would only repeat another: Avi is Av where no source resistance is declared.

    Whoever names it anywhere is shown it.
    """
    if name != "Avi" or stage.signal.source_resistance is not None or stage.signal.unit == "A":
        return False
    named = {*(str(quantity) for quantity in named_quantities(stage)), *(r.target for r in stage.tolerances)}
    return name not in named


def _is_among(quantity: Quantity, names: Sequence[str] | set[str]) -> bool:
    return any(name == quantity.kind or ("(" in name and parse_quantity(name) == quantity) for name in names)


def _row(hand: HandValue, measured: MeasuredValue | None, rules: Rules) -> Row:
    quantity = parse_quantity(hand.name)
    kind = quantity.description
    tolerance = tolerance_for(quantity, rules.stage, supply=rules.supply)
    simulated = None if measured is None else measured.value
    gap = gap_between(hand.value, simulated, kind)
    verdict, reason = _verdict(hand, measured, gap, tolerance, kind)
    if rules.cut_off and kind.name in _OF_A_GAIN and verdict is not Verdict.ABSENT:
        verdict, reason = (
            Verdict.ABSENT,
            f"{', '.join(rules.cut_off)} is cut off, as stated: there is no gain",
        )
    conflict = _conflict(quantity, rules.not_compared)
    if conflict is not None and verdict is not Verdict.ABSENT:
        verdict, reason = Verdict.NOT_COMPARED, conflict
    return Row(
        name=hand.name,
        unit=hand.unit,
        hand=hand.value,
        simulated=simulated,
        verdict=verdict,
        how=str(hand.how),
        gap=gap,
        tolerance=tolerance,
        claim=_claim(quantity, hand.value, simulated, rules),
        excused=_excuse(quantity, hand.value, gap, verdict, rules),
        reason=reason,
    )


def _conflict(quantity: Quantity, not_compared: Mapping[str, str]) -> str | None:
    """Small-signal values depend on their transistor, those of the stage on all of them."""
    if not quantity.description.small_signal or not not_compared:
        return None
    if quantity.of is not None:
        return not_compared.get(quantity.of)
    return next(iter(not_compared.values()))


def gap_between(hand: float | None, simulated: float | None, kind: Kind) -> Gap | None:
    """Simulated minus hand; angles modulo their period; dB where the kind is a ratio."""
    if hand is None or simulated is None or not (math.isfinite(hand) and math.isfinite(simulated)):
        return None
    difference = simulated - hand
    if abs(difference) <= 4.0 * math.ulp(max(abs(hand), abs(simulated))):
        difference = 0.0
    if kind.modulo is not None:
        difference = (difference + 0.5 * kind.modulo) % kind.modulo - 0.5 * kind.modulo
    relative = difference / abs(hand) if abs(hand) > 0.0 and kind.modulo is None else None
    db = None
    if kind.ratio and hand * simulated > 0.0:
        db = 20.0 * math.log10(simulated / hand)
    return Gap(difference, relative, db)


def _verdict(
    hand: HandValue,
    measured: MeasuredValue | None,
    gap: Gap | None,
    tolerance: AppliedTolerance,
    kind: Kind,
) -> tuple[Verdict, str | None]:
    if measured is None:
        return Verdict.NOT_COMPARED, "the simulation does not give it"
    reason = hand.reason or measured.reason
    if reason is not None:
        return Verdict.NOT_COMPARED, reason
    if hand.value is None and measured.value is None:
        return Verdict.ABSENT, None
    if hand.value is None or measured.value is None:
        return Verdict.BEYOND, f"exists only {'simulated' if hand.value is None else 'by hand'}"
    if gap is None:
        return Verdict.BEYOND, "not a finite number"
    if kind.ratio and hand.value * measured.value < 0.0:
        return Verdict.BEYOND, "opposite signs"
    return (Verdict.WITHIN if is_within(gap, hand.value, tolerance) else Verdict.BEYOND), None


def is_within(gap: Gap, hand: float, tolerance: AppliedTolerance) -> bool:
    """|gap| ≤ max(relative·|hand|, absolute); a dB tolerance replaces the relative one. NaN never passes."""
    slack = 1.0 + _ROUNDING
    if tolerance.db is not None and gap.db is not None and abs(gap.db) <= tolerance.db * slack:
        return True
    allowed = max(
        tolerance.relative * abs(hand) if tolerance.relative is not None else 0.0,
        tolerance.absolute if tolerance.absolute is not None else 0.0,
    )
    return abs(gap.absolute) <= allowed * slack


def tolerance_for(quantity: Quantity, stage: Stage, *, supply: float) -> AppliedTolerance:
    """The tolerance of a quantity: its own rule, else its kind's, else the default of the set.

    A stated relative or dB tolerance replaces both of the default's; the default's absolute floor
    stays unless an absolute one is stated, and a lone absolute one replaces everything.
    """
    default = _default(quantity.description, stage.hand.assumptions, supply)
    for target in (str(quantity), quantity.kind):
        rule = next((rule for rule in stage.tolerances if _same(rule.target, target)), None)
        if rule is not None:
            return _merged(rule, default, f"stage file, {rule.target}")
    origin = f"default, {stage.hand.assumptions} set"
    return AppliedTolerance(default.relative, default.absolute, default.db, origin)


def _same(written: str, target: str) -> bool:
    return written == target or ("(" in written and str(parse_quantity(written)) == target)


def _default(kind: Kind, assumptions: AssumptionSet, supply: float) -> Limit:
    limit = kind.paper if assumptions == "paper" else kind.full
    absolute = limit.of_supply * supply if limit.of_supply is not None else limit.absolute
    return Limit(limit.relative, absolute, limit.db)


def _merged(rule: ToleranceRule, default: Limit, origin: str) -> AppliedTolerance:
    absolute = rule.absolute
    if absolute is None and (rule.relative is not None or rule.db is not None):
        absolute = default.absolute
    return AppliedTolerance(rule.relative, absolute, rule.db, origin)


def _claim(
    quantity: Quantity, hand: float | None, simulated: float | None, rules: Rules
) -> ClaimResult | None:
    claim = next((c for c in rules.stage.claims if parse_quantity(c.quantity) == quantity), None)
    if claim is None:
        return None
    tolerance = tolerance_for(quantity, rules.stage, supply=rules.supply)
    if claim.tolerance is not None:
        default = _default(quantity.description, rules.stage.hand.assumptions, rules.supply)
        tolerance = _merged(claim.tolerance, default, "claim")
    kind = quantity.description
    return ClaimResult(
        kind=claim.kind,
        value=claim.value,
        upper=claim.upper,
        verdict=_keeps(claim, simulated, tolerance, kind),
        hand_verdict=_keeps(claim, hand, tolerance, kind),
    )


def _keeps(claim: Claim, value: float | None, tolerance: AppliedTolerance, kind: Kind) -> Verdict:
    """Whether a value keeps a claim; limits are limits, only ``equals`` has a tolerance."""
    if value is None or not math.isfinite(value):
        return Verdict.NOT_COMPARED
    if claim.kind == "equals":
        gap = gap_between(claim.value, value, kind)
        same_side = not kind.ratio or claim.value * value >= 0.0
        kept = gap is not None and same_side and is_within(gap, claim.value, tolerance)
    elif claim.kind == "at_least":
        kept = value >= claim.value
    elif claim.kind == "at_most":
        kept = value <= claim.value
    else:
        kept = claim.upper is not None and claim.value <= value <= claim.upper
    return Verdict.WITHIN if kept else Verdict.BEYOND


def _known_gap(quantity: Quantity, stage: Stage) -> KnownGap | None:
    return next((gap for gap in stage.known_gaps if parse_quantity(gap.quantity) == quantity), None)


def _excuse(
    quantity: Quantity, hand: float | None, gap: Gap | None, verdict: Verdict, rules: Rules
) -> str | None:
    """Why a gap beyond tolerance is excused: known, below its limit, and its date not yet past."""
    known = _known_gap(quantity, rules.stage)
    if known is None or verdict is not Verdict.BEYOND or gap is None or hand is None:
        return None
    limit = AppliedTolerance(known.limit.relative, known.limit.absolute, known.limit.db, "known gap")
    if rules.today > known.until or not is_within(gap, hand, limit):
        return None
    return f"{known.reason} (until {known.until.isoformat()})"


def known_gap_findings(rows: Sequence[Row], rules: Rules) -> tuple[Finding, ...]:
    """Known gaps that have expired, are exceeded, or are no longer needed."""
    found = []
    for row in rows:
        known = _known_gap(parse_quantity(row.name), rules.stage)
        if known is None:
            continue
        if row.verdict is Verdict.WITHIN:
            found.append(finding("known-gap-idle", subject=row.name, quantity=row.name))
        elif row.verdict is Verdict.BEYOND and row.excused is None:
            slug = "known-gap-expired" if rules.today > known.until else "known-gap-exceeded"
            found.append(finding(slug, subject=row.name, quantity=row.name, until=known.until))
    return tuple(found)
