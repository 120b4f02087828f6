"""Verdicts: which tolerance decides, where it comes from, and that nothing passes that should not."""

from __future__ import annotations

import datetime
import math
from dataclasses import replace
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from deckgen.bench.measure import MeasuredValue, Measurement
from deckgen.circuit.region import Region
from deckgen.compare import (
    Rules,
    compare,
    gap_between,
    is_wanted,
    is_within,
    known_gap_findings,
    tolerance_for,
)
from deckgen.comparison import AppliedTolerance, Gap, Row, Verdict
from deckgen.hand.prediction import HandValue, How, MidBand, Prediction, TransistorPrediction
from deckgen.judge import all_cut_off
from deckgen.quantities import KINDS, parse_quantity
from deckgen.stage.model import Claim, HandSettings, KnownGap, Signal, Stage, ToleranceRule

TODAY = datetime.date(2026, 3, 31)
STAGE = Stage("s", "s.toml", "t", "common-source", (), (), (), Signal("VSIG", "out"))
WITHIN, BEYOND, ABSENT, NOT_COMPARED = Verdict


def rules(
    stage: Stage = STAGE, *, supply: float = 12.0, today: datetime.date = TODAY, **conflicts: str
) -> Rules:
    return Rules(stage, supply, today, conflicts)


def stage(**changes: Any) -> Stage:
    return replace(STAGE, **changes)


def both(
    name: str,
    hand: float | None,
    simulated: float | None,
    *,
    reasons: tuple[str | None, str | None] = (None, None),
) -> tuple[Prediction, Measurement]:
    """One quantity, by hand and simulated."""
    unit = KINDS[parse_quantity(name).kind].unit
    value = HandValue(name, unit, hand, How.CLOSED_FORM, reasons[0])
    measured = MeasuredValue(name, unit, simulated, reasons[1])
    return predicted(value), Measurement((measured,), (), (), ())


def predicted(*values: HandValue) -> Prediction:
    return Prediction((), values, (), (), MidBand(1e3, "stated", 0.0, None, None), (), ())


def row(name: str, hand: float | None, simulated: float | None, r: Rules | None = None, **more: Any) -> Row:
    (found,) = compare(*both(name, hand, simulated, **more), r or rules())
    return found


def limits(
    relative: float | None = None, absolute: float | None = None, db: float | None = None
) -> AppliedTolerance:
    return AppliedTolerance(relative, absolute, db, "test")


# --- each rule at both sides of its edge ---

EDGES = [
    # name, hand, gap that is just allowed (paper set, 12 V)
    ("ID(M1)", 1e-3, 1e-4),
    ("ID(M1)", 1e-9, 1e-9),  # the floor of 1 nA
    ("ID(M1)", 0.0, 1e-9),
    ("VGS(M1)", 2.0, 0.1),
    ("VGS(M1)", 0.1, 0.02),  # the floor of 20 mV
    ("VTH(M1)", -1.0, 0.05),
    ("VOV(M1)", 0.0, 0.02),
    ("VDS(M1)", 10.0, 0.5),
    ("VDS(M1)", 1.0, 0.24),  # 2 % of the supply
    ("V(out)", 0.0, 0.24),
    ("gm(M1)", 1e-3, 1e-4),
    ("gds(M1)", 1e-5, 2.5e-6),
    ("gmb(M1)", 0.0, 1e-9),
    ("Psupply", 1e-2, 1e-3),
    ("Rin", 1e5, 1e4),
    ("Rout", 1e4, 1.5e3),
    ("fL", 100.0, 25.0),
    ("fH", 1e6, 2.5e5),
    ("Av.phase", 180.0, 5.0),
]


@pytest.mark.parametrize(("name", "hand", "allowed"), EDGES)
@pytest.mark.parametrize("sign", [1, -1])
def test_a_gap_is_within_up_to_its_tolerance_and_beyond_past_it(
    sign: int, name: str, hand: float, allowed: float
) -> None:
    assert row(name, hand, hand + sign * allowed).verdict is WITHIN
    assert row(name, hand, hand + sign * allowed * 1.001).verdict is BEYOND


@pytest.mark.parametrize(
    ("db", "verdict"), [(0.99, WITHIN), (-0.99, WITHIN), (1.01, BEYOND), (-1.01, BEYOND)]
)
@pytest.mark.parametrize("hand", [-5.0, 0.9])
def test_a_gain_is_held_against_decibels(hand: float, db: float, verdict: Verdict) -> None:
    found = row("Av", hand, hand * 10 ** (db / 20))
    assert found.verdict is verdict
    assert found.gap is not None
    assert found.gap.db == pytest.approx(db)


def test_the_full_set_has_the_tighter_tolerances() -> None:
    full = rules(stage(hand=HandSettings("full")))
    for name, hand, factor in [
        ("ID(M1)", 1e-3, 1.0011),
        ("Av", -5.0, 10 ** (0.021 / 20)),
        ("Rin", 1e5, 1.0021),
    ]:
        assert row(name, hand, hand * factor).verdict is WITHIN
        beyond = row(name, hand, hand * factor, full)
        assert beyond.verdict is BEYOND
        assert beyond.tolerance is not None
        assert beyond.tolerance.origin == "default, full set"


def test_a_db_tolerance_replaces_the_relative_one_and_the_larger_of_relative_and_absolute_counts() -> None:
    gap = Gap(absolute=-0.5, relative=-0.1, db=0.83)
    assert is_within(gap, -5.0, limits(db=0.84))
    assert not is_within(gap, -5.0, limits(db=0.82))
    assert not is_within(gap, -5.0, limits(db=0.82, absolute=0.49))
    assert is_within(gap, -5.0, limits(db=0.82, absolute=0.5))
    assert is_within(gap, -5.0, limits(relative=0.1))
    assert not is_within(gap, -5.0, limits(relative=0.099))
    assert is_within(gap, -5.0, limits(relative=0.01, absolute=0.5))
    assert is_within(gap, -5.0, limits(relative=0.1, absolute=1e-9))
    assert not is_within(gap, -5.0, limits())


def test_a_limit_is_not_missed_through_rounding_alone() -> None:
    assert row("VGS(M1)", 2.0, 2.1).verdict is WITHIN
    assert 2.1 - 2.0 > 0.1  # as floats
    assert row("VGS(M1)", 2.0, 2.1 * (1 + 1e-9)).verdict is BEYOND


# --- nothing passes that should not ---

BAD = [math.nan, math.inf, -math.inf]


@pytest.mark.parametrize("bad", BAD)
@pytest.mark.parametrize("name", ["ID(M1)", "Av", "Av.phase", "V(out)", "fH"])
def test_what_is_not_finite_never_passes_on_either_side(name: str, bad: float) -> None:
    for hand, simulated in ((bad, 1.0), (1.0, bad), (bad, bad)):
        found = row(name, hand, simulated, rules(stage(tolerances=(ToleranceRule(name, absolute=1e300),))))
        assert found.verdict is BEYOND
        assert found.reason == "not a finite number"
        assert found.gap is None
        assert found.fails


@given(st.floats(), st.floats(), st.sampled_from(sorted(KINDS)))
def test_a_row_is_within_only_if_both_sides_are_finite(hand: float, simulated: float, kind: str) -> None:
    name = kind if KINDS[kind].scope == "stage" else f"{kind}(M1)"
    found = row(name, hand, simulated, rules(stage(wanted=(kind,))))
    if not (math.isfinite(hand) and math.isfinite(simulated)):
        assert found.verdict is BEYOND
    assert found.fails is (found.verdict is not WITHIN)


@pytest.mark.parametrize(("hand", "simulated"), [(-5.0, 5.0), (1e-6, -1e-6)])
def test_a_gain_of_the_other_sign_is_beyond_however_wide_the_tolerance(hand: float, simulated: float) -> None:
    wide = rules(stage(tolerances=(ToleranceRule("Av", absolute=100.0),)))
    found = row("Av", hand, simulated, wide)
    assert (found.verdict, found.reason) == (BEYOND, "opposite signs")
    assert found.gap is not None
    assert found.gap.db is None


def test_a_quantity_absent_on_both_sides_passes_and_on_one_side_does_not() -> None:
    assert row("fL", None, None).verdict is ABSENT
    assert not row("fL", None, None).fails
    one = row("fL", 10.0, None)
    assert (one.verdict, one.reason, one.fails) == (BEYOND, "exists only by hand", True)
    other = row("Rin", None, 1e9)
    assert (other.verdict, other.reason, other.fails) == (BEYOND, "exists only simulated", True)


def test_what_has_a_reason_on_either_side_is_not_compared_and_fails() -> None:
    for reasons in (("no sign", None), (None, "no sign")):
        found = row("Av", None, None, reasons=reasons)
        assert (found.verdict, found.reason, found.fails) == (NOT_COMPARED, "no sign", True)
    assert row("Av", 1.0, 1.0, reasons=(None, "no sign")).verdict is NOT_COMPARED


def test_what_the_simulation_does_not_give_is_not_compared_and_fails() -> None:
    prediction, _ = both("ID(M1)", 1e-3, 1e-3)
    (found,) = compare(prediction, Measurement((), (), (), ()), rules())
    assert (found.verdict, found.reason) == (NOT_COMPARED, "the simulation does not give it")
    assert found.fails


# --- gaps ---


@pytest.mark.parametrize(
    ("hand", "simulated", "gap"),
    [
        (180.0, -179.0, 1.0),
        (-179.0, 180.0, -1.0),
        (0.0, 359.0, -1.0),
        (10.0, 5.0, -5.0),
        (180.0, -180.0, 0.0),
    ],
)
def test_angles_differ_by_the_shorter_way_round(hand: float, simulated: float, gap: float) -> None:
    found = gap_between(hand, simulated, KINDS["Av.phase"])
    assert found is not None
    assert found.absolute == pytest.approx(gap, abs=1e-9)
    assert found.relative is None
    assert found.db is None
    assert row("Av.phase", hand, simulated).verdict is WITHIN


@given(st.floats(-720, 720), st.floats(-720, 720))
def test_a_phase_gap_never_exceeds_half_a_turn(hand: float, simulated: float) -> None:
    found = gap_between(hand, simulated, KINDS["Av.phase"])
    assert found is not None
    assert -180.0 <= found.absolute <= 180.0
    turns = (simulated - hand - found.absolute) / 360.0
    assert turns == pytest.approx(round(turns), abs=1e-9)


def test_a_gap_is_simulated_minus_hand_and_its_relative_size_has_the_same_sign() -> None:
    gap = gap_between(-2.0, -2.5, KINDS["V"])
    assert gap == Gap(pytest.approx(-0.5), pytest.approx(-0.25), None)
    gap = gap_between(-2.0, -2.5, KINDS["Av"])
    assert gap is not None
    assert gap.db == pytest.approx(20 * math.log10(1.25))
    assert gap_between(0.0, 1.0, KINDS["V"]) == Gap(1.0, None, None)
    assert gap_between(None, 1.0, KINDS["V"]) is None
    assert gap_between(1.0, None, KINDS["V"]) is None


# --- precedence: single quantity, then kind, then default ---


def applied(name: str, *written: ToleranceRule, assumptions: Any = "paper") -> AppliedTolerance:
    where = stage(tolerances=written, hand=HandSettings(assumptions))
    return tolerance_for(parse_quantity(name), where, supply=12.0)


def test_the_rule_for_the_quantity_beats_that_for_its_kind_in_either_order() -> None:
    kind, single = ToleranceRule("gm", relative=0.2), ToleranceRule("gm(M1)", relative=0.3)
    for written in ((kind, single), (single, kind)):
        assert applied("gm(M1)", *written) == AppliedTolerance(0.3, 1e-9, None, "stage file, gm(M1)")
        assert applied("gm(M2)", *written) == AppliedTolerance(0.2, 1e-9, None, "stage file, gm")
        assert applied("gmb(M1)", *written) == AppliedTolerance(0.1, 1e-9, None, "default, paper set")


def test_a_quantity_is_the_same_however_its_name_is_written() -> None:
    assert applied("gm(M1)", ToleranceRule("gm(m1)", relative=0.3)).relative == pytest.approx(0.3)
    assert applied("V(out)", ToleranceRule("V(OUT)", absolute=0.1)).absolute == pytest.approx(0.1)


def test_a_stated_measure_replaces_relative_and_db_and_keeps_the_floor_unless_one_is_stated() -> None:
    assert applied("VDS(M1)", ToleranceRule("VDS", relative=0.01)) == AppliedTolerance(
        0.01, pytest.approx(0.24), None, "stage file, VDS"
    )
    assert applied("VDS(M1)", ToleranceRule("VDS", relative=0.01, absolute=0.05)).absolute == 0.05
    assert applied("VDS(M1)", ToleranceRule("VDS", absolute=0.05)) == limits_from(None, 0.05, None, "VDS")
    assert applied("Av", ToleranceRule("Av", relative=0.05)) == limits_from(0.05, None, None, "Av")
    assert applied("Av", ToleranceRule("Av", db=0.5)) == limits_from(None, None, 0.5, "Av")
    assert applied("Av", ToleranceRule("Av", absolute=0.1)) == limits_from(None, 0.1, None, "Av")


def limits_from(
    relative: float | None, absolute: float | None, db: float | None, target: str
) -> AppliedTolerance:
    return AppliedTolerance(relative, absolute, db, f"stage file, {target}")


@pytest.mark.parametrize(("supply", "floor"), [(12.0, 0.24), (1.8, 0.036), (0.0, 0.0)])
def test_the_floor_of_voltages_between_rails_is_a_share_of_the_supply(supply: float, floor: float) -> None:
    for name in ("VDS(M1)", "V(out)"):
        found = tolerance_for(parse_quantity(name), STAGE, supply=supply)
        assert found.absolute == pytest.approx(floor)
    full = stage(hand=HandSettings("full"))
    assert tolerance_for(parse_quantity("V(out)"), full, supply=supply).absolute == pytest.approx(1e-3)


def test_the_row_shows_the_tolerance_that_decided() -> None:
    found = row("gm(M1)", 1e-3, 1.05e-3, rules(stage(tolerances=(ToleranceRule("gm", relative=0.01),))))
    assert (found.verdict, found.tolerance) == (BEYOND, limits_from(0.01, 1e-9, None, "gm"))


# --- claims ---


def claimed(
    kind: Any, value: float, simulated: float | None, *, hand: float | None = -5.0, **more: Any
) -> Row:
    claim = Claim("Av", kind, value, **more)
    return row("Av", hand, simulated, rules(stage(claims=(claim,))))


@pytest.mark.parametrize(
    ("kind", "value", "upper", "kept", "missed"),
    [
        ("equals", -5.0, None, [-5.0, -5.5, -4.5], [-5.7, -4.4, 5.0, 0.0]),
        ("at_least", -5.0, None, [-5.0, -4.9, 3.0], [-5.000001, -9.0]),
        ("at_most", -5.0, None, [-5.0, -5.1], [-4.999999, 5.0]),
        ("within", -6.0, -4.0, [-6.0, -5.0, -4.0], [-6.000001, -3.999999, 5.0]),
    ],
)
def test_each_kind_of_claim_is_kept_up_to_its_edge(
    kind: str, value: float, upper: float | None, kept: list[float], missed: list[float]
) -> None:
    for simulated, verdict in [*((x, WITHIN) for x in kept), *((x, BEYOND) for x in missed)]:
        found = claimed(kind, value, simulated, upper=upper)
        assert found.claim is not None
        assert found.claim.verdict is verdict, simulated
        assert (found.claim.kind, found.claim.value, found.claim.upper) == (kind, value, upper)
        assert found.fails or (verdict is WITHIN and found.verdict is WITHIN)


def test_a_claim_against_the_simulation_decides_and_against_hand_it_informs() -> None:
    kept = claimed("at_most", -4.9, -5.1, hand=-4.8)
    assert kept.claim is not None
    assert (kept.claim.verdict, kept.claim.hand_verdict, kept.verdict) == (WITHIN, BEYOND, WITHIN)
    assert not kept.fails
    missed = claimed("at_most", -4.9, -4.8, hand=-5.1)
    assert missed.claim is not None
    assert (missed.claim.verdict, missed.claim.hand_verdict, missed.verdict) == (BEYOND, WITHIN, WITHIN)
    assert missed.fails


def test_a_claimed_gain_of_the_other_sign_is_missed_however_wide_its_tolerance() -> None:
    wide = ToleranceRule("Av", absolute=100.0)
    for simulated, verdict in ((5.0, BEYOND), (-50.0, WITHIN)):
        found = claimed("equals", -5.0, simulated, tolerance=wide)
        assert found.claim is not None
        assert found.claim.verdict is verdict


@pytest.mark.parametrize("simulated", [None, *BAD])
def test_a_claim_on_what_has_no_number_is_not_kept(simulated: float | None) -> None:
    for kind in ("equals", "at_least", "at_most", "within"):
        found = claimed(kind, -5.0, simulated, upper=5.0, hand=None)
        assert found.claim is not None
        assert found.claim.verdict is NOT_COMPARED
        assert found.fails


def test_a_claim_of_equality_takes_its_own_tolerance_before_the_stages() -> None:
    written = (ToleranceRule("ID", relative=0.5),)
    claim = Claim("ID(M1)", "equals", 1e-3, tolerance=ToleranceRule("ID(M1)", relative=0.01))
    own = row("ID(M1)", 1e-3, 1.02e-3, rules(stage(claims=(claim,), tolerances=written)))
    assert own.claim is not None
    assert (own.claim.verdict, own.verdict) == (BEYOND, WITHIN)
    plain = replace(claim, tolerance=None)
    found = row("ID(M1)", 1e-3, 1.02e-3, rules(stage(claims=(plain,), tolerances=written)))
    assert found.claim is not None
    assert found.claim.verdict is WITHIN


def test_a_quantity_without_a_claim_has_none() -> None:
    assert row("Av", -5.0, -5.0).claim is None


# --- known gaps ---


def excused(
    simulated: float | None, *, until: datetime.date = TODAY, today: datetime.date = TODAY, **limit: float
) -> tuple[Row, list[str]]:
    known = KnownGap("ID(M1)", "λ", ToleranceRule("ID(M1)", **(limit or {"relative": 0.3})), until)
    r = rules(stage(known_gaps=(known,)), today=today)
    found = row("ID(M1)", 1e-3, simulated, r)
    return found, [one.slug for one in known_gap_findings([found], r)]


def test_a_known_gap_keeps_its_verdict_and_is_excused_up_to_its_limit() -> None:
    for share in (0.2, 0.3, -0.3):
        found, slugs = excused(1e-3 * (1 + share))
        assert (found.verdict, found.excused, found.fails) == (BEYOND, "λ (until 2026-03-31)", False)
        assert slugs == []
    found, slugs = excused(1.301e-3)
    assert (found.verdict, found.excused, found.fails) == (BEYOND, None, True)
    assert slugs == ["known-gap-exceeded"]


def test_a_limit_of_a_known_gap_may_be_absolute() -> None:
    assert excused(1.19e-3, absolute=0.2e-3)[0].excused is not None
    assert excused(1.21e-3, absolute=0.2e-3)[0].excused is None


@pytest.mark.parametrize(("days", "still"), [(-1, True), (0, True), (1, False)])
def test_a_known_gap_is_excused_until_the_end_of_its_day(days: int, still: bool) -> None:
    found, slugs = excused(1.2e-3, today=TODAY + datetime.timedelta(days=days))
    assert (found.excused is not None) is still
    assert found.fails is not still
    assert slugs == ([] if still else ["known-gap-expired"])


def test_a_known_gap_that_is_none_any_more_is_said_to_be_idle() -> None:
    found, slugs = excused(1.01e-3)
    assert (found.verdict, found.excused) == (WITHIN, None)
    assert slugs == ["known-gap-idle"]


@pytest.mark.parametrize("simulated", [None, *BAD])
def test_a_known_gap_excuses_no_missing_number(simulated: float | None) -> None:
    found, slugs = excused(simulated)
    assert (found.verdict, found.excused, found.fails) == (BEYOND, None, True)
    assert slugs == ["known-gap-exceeded"]


# --- what is wanted ---


def test_without_a_wish_every_quantity_is_compared_and_of_the_nodes_the_output() -> None:
    for name in ("ID(M1)", "gm(M1)", "Av", "fH", "V(out)"):
        assert is_wanted(name, STAGE)
    assert not is_wanted("V(d)", STAGE)
    for named in (
        {"tolerances": (ToleranceRule("V(D)", absolute=0.1),)},
        {"claims": (Claim("V(d)", "at_least", 1.0),)},
        {"known_gaps": (KnownGap("V(d)", "r", ToleranceRule("V(d)", relative=1.0), TODAY),)},
    ):
        assert is_wanted("V(d)", stage(**named))
        assert not is_wanted("V(g)", stage(**named))


def test_a_wish_takes_kinds_and_single_quantities_and_adds_what_is_claimed() -> None:
    wish = stage(wanted=("gm", "V(d)", "Av"), claims=(Claim("ID(M1)", "at_least", 1e-3),))
    wanted = {"gm(M1)", "gm(M2)", "V(d)", "Av", "ID(M1)"}
    for name in (*wanted, "ID(M2)", "V(out)", "Av.phase", "gmb(M1)", "fH"):
        assert is_wanted(name, wish) is (name in wanted), name


def test_rows_come_in_the_order_of_the_table_of_kinds_and_only_those_wanted() -> None:
    names = ("fH", "V(d)", "Av", "ID(M1)", "V(out)", "VGS(M1)")
    values = tuple(HandValue(name, "", 1.0, How.NODAL) for name in names)
    measured = Measurement(tuple(MeasuredValue(name, "", 1.0) for name in names), (), (), ())
    rows = compare(predicted(*values), measured, rules())
    assert [r.name for r in rows] == ["ID(M1)", "VGS(M1)", "V(out)", "Av", "fH"]
    assert {r.how for r in rows} == {"nodal"}


@pytest.mark.parametrize(
    "named",
    [
        {"wanted": ("ID(M7)",)},
        {"wanted": ("ID",), "claims": (Claim("V(nowhere)", "at_least", 1.0),)},
        {"known_gaps": (KnownGap("gm(M7)", "r", ToleranceRule("gm(M7)", relative=1.0), TODAY),)},
    ],
)
def test_what_is_named_but_not_there_is_not_compared_and_fails(named: dict[str, Any]) -> None:
    rows = compare(*both("ID(M1)", 1e-3, 1e-3), rules(stage(**named)))
    (missing,) = [r for r in rows if r.name != "ID(M1)"]
    assert missing.verdict is NOT_COMPARED
    assert "the circuit has no" in (missing.reason or "")
    assert missing.fails


# --- regions ---


def test_a_transistor_in_the_wrong_region_takes_its_small_signal_values_out_of_the_comparison() -> None:
    for name in ("gm(M1)", "gds(M1)", "gmb(M1)", "Av", "Av.phase", "Rin", "Rout", "fL", "fH"):
        found = row(name, 1.0, 1.0, rules(M1="M1 is in triode"))
        assert (found.verdict, found.reason, found.fails) == (NOT_COMPARED, "M1 is in triode", True)
    for name in ("ID(M1)", "VGS(M1)", "VDS(M1)", "VTH(M1)", "VOV(M1)", "V(out)", "Psupply"):
        assert row(name, 1.0, 1.0, rules(M1="M1 is in triode")).verdict is WITHIN


def test_the_region_of_one_transistor_spares_the_small_signal_values_of_another() -> None:
    assert row("gm(M2)", 1.0, 1.0, rules(M1="M1 is in triode")).verdict is WITHIN
    assert row("gm(M1)", 1.0, 5.0, rules(M1="M1 is in triode")).verdict is NOT_COMPARED


def test_what_is_absent_on_both_sides_stays_absent_whatever_the_region() -> None:
    assert row("fL", None, None, rules(M1="M1 is in triode")).verdict is ABSENT


def test_a_gap_that_is_not_compared_is_not_excused() -> None:
    known = KnownGap("Av", "r", ToleranceRule("Av", db=20.0), TODAY)
    found = row("Av", -5.0, -9.0, rules(stage(known_gaps=(known,)), M1="M1 is in triode"))
    assert (found.verdict, found.excused, found.fails) == (NOT_COMPARED, None, True)


# --- transistors that are cut off as they should be ---


def test_a_gain_is_absent_only_where_every_transistor_is_cut_off() -> None:
    """Independent: a circuit with one conducting transistor can have a gain, and a gap in it."""
    on = TransistorPrediction(
        "M1", "unrecognised", "square", Region.SATURATION, margin=1.0, v_ov=0.3, i_d=1e-3,
        vgs_per_emf=1.0, vdg_per_emf=1.0, id_per_emf=1e-3,
    )  # fmt: skip
    off = replace(on, name="M2", region=Region.CUTOFF, i_d=0.0)

    def prediction(*devices: TransistorPrediction) -> Prediction:
        return Prediction((), (), devices, (), None, (), ())

    assert all_cut_off(prediction(off)) == ("M2",)
    assert all_cut_off(prediction(off, on)) == ()
