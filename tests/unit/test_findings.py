"""Guards of a stage: each finding is provoked, and each limit is held at both of its sides."""

from __future__ import annotations

import ast
import datetime
import math
import re
from collections.abc import Callable, Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest

from deckgen.bench.measure import MeasuredTransistor, Measurement
from deckgen.circuit.model import Circuit, Mosfet
from deckgen.circuit.region import Region
from deckgen.compare import Rules, known_gap_findings
from deckgen.comparison import Finding, RatingRow, Row, Severity, Verdict
from deckgen.findings.bias import (
    DC_LIMIT,
    PEAK_LIMIT,
    SMALL_SIGNAL_SHARE,
    STRONG_INVERSION,
    THIN_MARGIN,
    device_findings,
    hazards,
    point_findings,
    region_conflict,
    stage_findings,
)
from deckgen.findings.ratings import Stress, rating_findings, rating_rows, stress_of
from deckgen.findings.table import TABLE, finding
from deckgen.hand.prediction import (
    HalfPlane,
    MidBand,
    OperatingPoint,
    Prediction,
    Root,
    TransistorPrediction,
)
from deckgen.stage.model import KnownGap, Rating, Signal, Stage, ToleranceRule
from tests.unit.circuits import Values, stage

TODAY = datetime.date(2026, 3, 31)

# A healthy device: 0.5 V overdrive, 3 V of margin, 1 mA; per volt of EMF 1 V at the gate, 2 V and 2 mA.
M1 = TransistorPrediction(
    "M1", "common-source", "square", Region.SATURATION, margin=3.0, v_ov=0.5, i_d=1e-3,
    vgs_per_emf=1.0, vdg_per_emf=2.0, id_per_emf=2e-3,
)  # fmt: skip
UNCLIPPED = replace(M1, margin=1e6, i_d=1e6)
FLAT = MidBand(1e3, "stated", 0.0, None, None)
GROWING = Root(2e6, None, HalfPlane.RIGHT)


def predicted(
    device: TransistorPrediction = M1,
    *,
    mid: MidBand = FLAT,
    voltages: dict[str, float] | None = None,
    signals: dict[str, complex] | None = None,
) -> Prediction:
    return Prediction(
        (), (), (device,), (), mid, tuple((voltages or {}).items()), tuple((signals or {}).items())
    )


def measured(region: Region = Region.SATURATION, margin: float = 3.0) -> Measurement:
    return Measurement((), (MeasuredTransistor("M1", region, margin),), (), ())


def of_device(
    device: TransistorPrediction = M1,
    measurement: Measurement | None = None,
    *,
    stated: str | None = None,
    amplitude: float | None = None,
) -> list[Finding]:
    found = device_findings(predicted(device), measurement, stated={"M1": stated}, amplitude=amplitude)
    return list(found)


def slugs(found: Sequence[Finding]) -> list[str]:
    return [one.slug for one in found]


OTHER = OperatingPoint((("vdd", 12.0), ("q", 0.0)), stable=True, idle=False)


def of_points(*others: OperatingPoint) -> Prediction:
    return replace(predicted(voltages={"vdd": 12.0, "q": 9.0}), others=others)


def of_stage(prediction: Prediction, **changes: Any) -> list[Finding]:
    given: dict[str, Any] = {"amplitude": None, "source_resistance": "rsig", "load": "rl"}
    return list(stage_findings(prediction, **(given | changes)))


def of_known_gap(verdict: Verdict, *, late: int = 0) -> list[Finding]:
    known = KnownGap("Av", "r", ToleranceRule("Av", db=3.0), TODAY)
    described = Stage("s", "f", "t", "x", (), (), (), Signal("VSIG", "out"), known_gaps=(known,))
    rules = Rules(described, 12.0, TODAY + datetime.timedelta(days=late), {})
    return list(known_gap_findings([Row("Av", "V/V", -5.0, -5.0, verdict, "nodal")], rules))


def of_ratings(limit: float | None) -> list[Finding]:
    circuit = Circuit("t", (Mosfet("m1", ("d", "g", "0", "0"), "nm", 1e-6, 1e-6),))
    rows = () if limit is None else (RatingRow("M1", "VDS", "V", limit, 5.0, 6.0, Verdict.BEYOND),)
    return list(rating_findings(circuit, rows))


PROVOKED: dict[str, Callable[[], list[Finding]]] = {
    "region-not-as-stated": lambda: of_device(replace(M1, region=Region.TRIODE)),
    "region-differs": lambda: of_device(M1, measured(Region.TRIODE)),
    "drain-source-reversed": lambda: of_device(replace(M1, region=Region.REVERSED)),
    "thin-margin": lambda: of_device(replace(M1, margin=0.01)),
    "weak-inversion": lambda: of_device(replace(M1, v_ov=0.1)),
    "signal-too-large": lambda: of_device(M1, amplitude=0.2),
    "output-leaves-saturation": lambda: of_device(M1, amplitude=2.0),
    "output-cuts-off": lambda: of_device(M1, amplitude=0.6),
    "effect-kept": lambda: list(
        device_findings(replace(predicted(), kept="λ is kept"), None, stated={}, amplitude=None)
    ),
    "two-stable-points": lambda: list(point_findings(of_points(OTHER), None)),
    "unstable-point": lambda: list(point_findings(replace(of_points(OTHER), stable=False), None)),
    "mid-band-not-flat": lambda: of_stage(predicted(mid=replace(FLAT, below_maximum_db=0.2))),
    "unstable-small-signal": lambda: of_stage(replace(predicted(), poles=(GROWING,))),
    "rating-exceeded": lambda: of_ratings(5.5),
    "ratings-not-stated": lambda: of_ratings(None),
    "hazardous-voltage": lambda: of_stage(predicted(voltages={"vdd": 80.0})),
    "load-not-declared": lambda: of_stage(predicted(), load=None),
    "source-resistance-not-declared": lambda: of_stage(predicted(), source_resistance=None),
    "known-gap-expired": lambda: of_known_gap(Verdict.BEYOND, late=1),
    "known-gap-exceeded": lambda: of_known_gap(Verdict.BEYOND),
    "known-gap-idle": lambda: of_known_gap(Verdict.WITHIN),
}
NOTES = {
    "effect-kept",
    "thin-margin",
    "ratings-not-stated",
    "load-not-declared",
    "source-resistance-not-declared",
    "known-gap-idle",
}


# --- the table ---


@pytest.mark.parametrize("slug", PROVOKED)
def test_every_finding_of_a_stage_is_provoked_with_its_severity_and_a_whole_text(slug: str) -> None:
    found = [one for one in PROVOKED[slug]() if one.slug == slug]
    assert len(found) == 1
    assert found[0].severity is TABLE[slug].severity
    assert found[0].severity is (Severity.NOTE if slug in NOTES else Severity.WARNING)
    text = found[0].text
    assert "{" not in text
    assert "None" not in text
    assert "nan" not in text.lower()
    assert "\n" not in text


def test_the_guards_make_no_finding_that_is_not_provoked_here(project: Path) -> None:
    made: set[str] = set()
    for name in ("findings/bias.py", "findings/ratings.py", "compare.py"):
        tree = ast.parse((project / "deckgen" / name).read_text(encoding="utf-8"))
        texts = {n.value for n in ast.walk(tree) if isinstance(n, ast.Constant) and isinstance(n.value, str)}
        made |= {text for text in texts if re.fullmatch(r"[a-z]+(-[a-z]+)+", text)}
    assert made == set(PROVOKED)
    assert set(PROVOKED) <= set(TABLE)


# --- several operating points ---


def seen(**voltages: float) -> Measurement:
    return Measurement((), (), tuple(voltages.items()), ())


LOW = OperatingPoint((("vdd", 12.0), ("q", 0.0)), stable=True, idle=True)
BETWEEN = OperatingPoint((("vdd", 12.0), ("q", 4.0)), stable=False, idle=False)


@pytest.mark.parametrize(
    ("simulated", "says"),
    [
        (None, "with no current in any transistor. Which"),
        (8.9, "with no current in any transistor. Which"),
        (0.2, "transistor; the simulator settled in the latter. Which"),
        (4.1, "; the simulator settled in an unstable one between them: V(q) = 4.1 V. Which"),
        (20.4, "; the simulator settled in another one: V(q) = 20.4 V. Which"),
    ],
)
def test_of_several_stable_points_the_finding_names_two_and_where_the_simulator_settled(
    simulated: float | None, says: str
) -> None:
    third = replace(LOW, node_voltages=(("vdd", 12.0), ("q", 20.0)))
    measurement = None if simulated is None else seen(vdd=12.0, q=simulated)
    (found,) = point_findings(of_points(LOW, BETWEEN, third), measurement)
    assert found.slug == "two-stable-points"
    assert found.text.startswith("3 stable operating points: V(q) = 9 V (hand values) and V(q) = 0 V ")
    assert says in found.text


def test_a_lone_unstable_point_beside_a_stable_one_is_no_finding() -> None:
    assert point_findings(of_points(BETWEEN), seen(vdd=12.0, q=9.0)) == ()
    assert point_findings(of_points(), None) == ()


def test_slugs_are_lower_case_words_and_texts_one_line_without_an_end_mark() -> None:
    for slug, entry in TABLE.items():
        assert re.fullmatch(r"[a-z0-9]+(-[a-z0-9]+)*", slug)
        assert entry.text == " ".join(entry.text.split())
        assert not entry.text.endswith(".")


def test_what_is_not_in_the_table_can_not_be_found() -> None:
    with pytest.raises(KeyError):
        finding("no-such-finding")
    with pytest.raises(KeyError):
        finding("thin-margin", device="M1")  # parts of the text are missing


def test_a_healthy_stage_has_no_findings() -> None:
    assert of_device(M1, measured(), stated="saturation", amplitude=0.05) == []
    quiet = predicted(voltages={"vdd": 12.0, "d": 6.0}, signals={"d": -5.0})
    assert of_stage(quiet, amplitude=0.05) == []


# --- regions come before verdicts ---

SAT, TRIODE, OFF, BACK = Region.SATURATION, Region.TRIODE, Region.CUTOFF, Region.REVERSED


@pytest.mark.parametrize(
    ("hand", "simulated", "stated", "slug"),
    [
        (SAT, SAT, None, None),
        (SAT, None, None, None),
        (SAT, SAT, "saturation", None),
        (TRIODE, TRIODE, "triode", None),
        (OFF, OFF, "cut-off", None),
        (TRIODE, None, None, "region-not-as-stated"),
        (TRIODE, TRIODE, None, "region-not-as-stated"),
        (SAT, SAT, "triode", "region-not-as-stated"),
        (OFF, OFF, "saturation", "region-not-as-stated"),
        (SAT, TRIODE, None, "region-differs"),
        (TRIODE, SAT, None, "region-differs"),
        (SAT, TRIODE, "triode", "region-differs"),
        (BACK, None, None, "drain-source-reversed"),
        (SAT, BACK, None, "drain-source-reversed"),
        (BACK, BACK, "triode", "drain-source-reversed"),
    ],
)
def test_regions_by_hand_simulated_and_stated_must_all_agree(
    hand: Region, simulated: Region | None, stated: str | None, slug: str | None
) -> None:
    measurement = None if simulated is None else measured(simulated)
    found = region_conflict(replace(M1, region=hand), measurement, stated)
    assert (found.slug if found else None) == slug
    assert found is None or (found.subject == "M1" and "M1" in found.text)


def test_a_region_finding_says_on_which_side_it_was_seen() -> None:
    def text(hand: Region, simulated: Region | None) -> str:
        found = region_conflict(
            replace(M1, region=hand), None if simulated is None else measured(simulated), None
        )
        assert found is not None
        return found.text

    assert "M1 is in triode by hand, but saturation is wanted" in text(TRIODE, None)
    assert "M1 is in triode by hand and as simulated, but" in text(TRIODE, TRIODE)
    assert "is in saturation by hand and in triode simulated" in text(SAT, TRIODE)
    assert "exchanged as simulated" in text(SAT, BACK)


# --- margins and inversion, at their edges ---


@pytest.mark.parametrize(
    ("by_hand", "simulated", "side"),
    [
        (THIN_MARGIN * 1.001, None, None),
        (THIN_MARGIN * 0.999, None, "by hand"),
        (1.0, THIN_MARGIN * 1.001, None),
        (1.0, THIN_MARGIN * 0.999, "as simulated"),
        (0.02, 0.01, "as simulated"),
    ],
)
def test_a_thin_margin_is_told_for_the_worse_side(
    by_hand: float, simulated: float | None, side: str | None
) -> None:
    measurement = None if simulated is None else measured(margin=simulated)
    found = of_device(replace(M1, margin=by_hand), measurement)
    assert slugs(found) == ([] if side is None else ["thin-margin"])
    assert side is None or side in found[0].text


def test_a_margin_is_no_matter_where_the_region_is_wrong_or_wanted_otherwise() -> None:
    assert slugs(of_device(replace(M1, region=TRIODE, margin=-0.2), stated="triode")) == []
    assert slugs(of_device(replace(M1, region=TRIODE, margin=-0.2))) == ["region-not-as-stated"]


@pytest.mark.parametrize(
    ("v_ov", "weak"),
    [(0.9999 * STRONG_INVERSION, True), (1.0001 * STRONG_INVERSION, False), (1e-6, True), (-0.1, False)],
)
def test_an_overdrive_below_150_millivolts_is_doubtful(v_ov: float, weak: bool) -> None:
    assert ("weak-inversion" in slugs(of_device(replace(M1, v_ov=v_ov)))) is weak


# --- the small-signal condition ---


@pytest.mark.parametrize(("share", "large"), [(0.999, False), (1.001, True)])
@pytest.mark.parametrize("per_emf", [1.0, 0.25])
def test_a_signal_is_small_up_to_10_percent_of_twice_the_overdrive_at_the_gate_source(
    per_emf: float, share: float, large: bool
) -> None:
    """Common practice: HD2 = V/(4·VOV), 5 % at V = 10 % of 2·VOV. Degeneration leaves a part of the EMF."""
    assert pytest.approx(0.1) == SMALL_SIGNAL_SHARE
    limit = 0.1 * 2.0 * 0.5 / per_emf
    device = replace(M1, vgs_per_emf=per_emf, vdg_per_emf=0.1, id_per_emf=1e-6)
    found = of_device(device, amplitude=share * limit)
    assert slugs(found) == (["signal-too-large"] if large else [])
    if large:
        assert f"Stay below {limit * 1e3:.0f}" in found[0].text.replace(" mV", "")


@pytest.mark.parametrize(("share", "clips"), [(0.999, False), (1.001, True)])
def test_an_output_peak_is_held_against_saturation_margin_and_cut_off(share: float, clips: bool) -> None:
    quiet = replace(M1, vgs_per_emf=1e-6, id_per_emf=1e-9)
    assert slugs(of_device(quiet, amplitude=share * 3.0 / 2.0)) == (
        ["output-leaves-saturation"] if clips else []
    )
    quiet = replace(M1, vgs_per_emf=1e-6, vdg_per_emf=1e-6)
    assert slugs(of_device(quiet, amplitude=share * 0.5)) == (["output-cuts-off"] if clips else [])


def test_without_an_amplitude_or_outside_saturation_no_signal_is_judged() -> None:
    assert of_device(M1, amplitude=None) == []
    assert slugs(of_device(replace(M1, region=TRIODE), stated="triode", amplitude=5.0)) == []


# --- the stage as a whole ---


def test_a_pole_in_the_right_half_plane_is_told_even_if_the_gain_does_not_show_it() -> None:
    at_rest = Root(0.0, None, HalfPlane.AXIS)
    tank = Root(1e6, math.inf, HalfPlane.AXIS)
    decaying = Root(2e6, 3.0, HalfPlane.LEFT)
    zero = replace(predicted(), zeros=(GROWING,), poles=(at_rest, tank, decaying))
    assert of_stage(zero) == []
    for place in ("poles", "hidden_poles"):
        (told,) = of_stage(replace(predicted(), **{place: (decaying, GROWING)}))
        assert told.slug == "unstable-small-signal"
        assert "pole at +2 MHz in the right half plane: the circuit runs away from this Q-point" in told.text
    pair = Root(3e6, 20.0, HalfPlane.RIGHT)
    (told,) = of_stage(replace(predicted(), poles=(GROWING, pair)))
    assert "pole at +2 MHz, pole pair at 3 MHz in the right half plane: the circuit oscillates" in told.text


@pytest.mark.parametrize(("below", "told"), [(0.099, False), (0.101, True)])
def test_mid_band_may_lie_a_tenth_of_a_decibel_below_the_maximum(below: float, told: bool) -> None:
    found = of_stage(predicted(mid=replace(FLAT, below_maximum_db=below)))
    assert slugs(found) == (["mid-band-not-flat"] if told else [])


# Extra-low-voltage limits as public texts quote them from IEC 62368-1 (the standard itself was not read).
@pytest.mark.parametrize(
    ("voltages", "told"),
    [
        ({"a": 60.0}, False),
        ({"a": 60.001}, True),
        ({"a": -60.001}, True),
        ({"a": 40.0, "b": -20.0}, False),
        ({"a": 40.0, "b": -20.001}, True),
        ({"a": 100.0, "b": 90.0}, True),  # ground is a node too
    ],
)
def test_more_than_60_volts_dc_between_any_two_nodes_is_a_hazard(
    voltages: dict[str, float], told: bool
) -> None:
    assert pytest.approx(60.0) == DC_LIMIT
    found = hazards(predicted(voltages=voltages), amplitude=None)
    assert slugs(found) == (["hazardous-voltage"] if told else [])
    if told:
        assert " dc between nodes " in found[0].text
        assert "60 V" in found[0].text


@pytest.mark.parametrize(
    ("signals", "amplitude", "told"),
    [
        ({"a": 42.4 + 0j}, 1.0, False),
        ({"a": 42.41 + 0j}, 1.0, True),
        ({"a": 4.0 + 0j}, 10.7, True),
        ({"a": 21.0 + 0j, "b": -21.0 + 0j}, 1.0, False),
        ({"a": 21.3 + 0j, "b": -21.3 + 0j}, 1.0, True),
        ({"a": 30j, "b": 31.0 + 0j}, 1.0, True),
        ({"a": 1000.0 + 0j}, None, False),
    ],
)
def test_more_than_42_4_volts_peak_between_any_two_nodes_is_a_hazard(
    signals: dict[str, complex], amplitude: float | None, told: bool
) -> None:
    assert pytest.approx(42.4) == PEAK_LIMIT
    found = hazards(predicted(UNCLIPPED, signals=signals), amplitude=amplitude)
    assert slugs(found) == (["hazardous-voltage"] if told else [])
    if told:
        assert " peak between nodes " in found[0].text


def test_a_peak_that_the_stage_can_not_reach_because_it_clips_is_no_hazard() -> None:
    assert hazards(predicted(M1, signals={"out": 500.0 + 0j}), amplitude=2.0) == ()


def test_both_hazards_are_told_and_name_the_worst_pair() -> None:
    prediction = predicted(
        UNCLIPPED, voltages={"hi": 70.0, "lo": -10.0, "x": 5.0}, signals={"out": 50.0, "hi": 1.0}
    )
    texts = [one.text for one in hazards(prediction, amplitude=1.0)]
    assert len(texts) == 2
    assert "80 V dc between nodes hi and lo" in texts[0]
    assert re.search(r"50 V peak between nodes (0 and out|out and 0)", texts[1])


# --- ratings ---

SIDE = Stress({"d": 7.0, "g": 2.4, "s": 1.0, "vdd": 12.0, "out": 0.0, "in": 0.0, "sig": 0.0},
              {"d": -5.0, "g": 1.0, "s": 0.0}, {"M1": 0.5e-3}, 0.1)  # fmt: skip


@pytest.mark.parametrize(
    ("part", "quantity", "value"),
    [
        ("m1", "VDS", 6.0 + 0.5),
        ("m1", "VGS", 1.4 + 0.1),
        ("m1", "ID", 0.5e-3),
        ("m1", "PD", 0.5e-3 * 6.0),
        ("rd", "P", 5.0**2 / 10e3),
        ("cout", "V", 7.0 + 0.5),
        ("cs", "V", 1.0),
    ],
)
def test_stresses_are_the_bias_and_for_voltages_the_signal_peak_besides(
    part: str, quantity: str, value: float
) -> None:
    assert stress_of(stage(Values()).element(part), quantity, SIDE) == pytest.approx(value, rel=1e-12)


@pytest.mark.parametrize(
    ("part", "quantity"), [("m1", "P"), ("m1", "V"), ("rd", "V"), ("rd", "PD"), ("cs", "P"), ("vdd", "P")]
)
def test_a_part_has_no_stress_of_another_kind(part: str, quantity: str) -> None:
    with pytest.raises(ValueError, match=f"{part.upper()} has no {quantity}"):
        stress_of(stage(Values()).element(part), quantity, SIDE)


def rated(limit: float, *, hand: Stress = SIDE, simulated: Stress | None = SIDE) -> RatingRow:
    (row,) = rating_rows(stage(Values()), [Rating("M1", "VDS", limit)], hand=hand, simulated=simulated)
    return row


@pytest.mark.parametrize(("limit", "verdict"), [(6.5, Verdict.WITHIN), (6.4999, Verdict.BEYOND)])
def test_a_rating_is_kept_up_to_its_value(limit: float, verdict: Verdict) -> None:
    assert rated(limit).verdict is verdict
    assert rated(limit, simulated=None).verdict is verdict


def test_the_side_that_exceeds_a_rating_is_the_one_that_is_told() -> None:
    higher = replace(SIDE, voltages={**SIDE.voltages, "d": 9.0})
    for sides, told in [
        ({"hand": higher, "simulated": SIDE}, "VDS(M1) = 8.5 V by hand exceeds its rating of 7 V"),
        ({"hand": SIDE, "simulated": higher}, "VDS(M1) = 8.5 V as simulated exceeds its rating of 7 V"),
    ]:
        row = rated(7.0, **sides)
        assert row.verdict is Verdict.BEYOND
        (found, _) = rating_findings(stage(Values()), [row])
        assert told in re.sub(r"(\d\.\d)0+ ", r"\1 ", found.text).replace("7.000", "7")


def test_a_stress_that_is_no_number_exceeds_every_rating_and_is_the_side_told() -> None:
    lost = replace(SIDE, currents={"M1": float("nan")})
    (row,) = rating_rows(stage(Values()), [Rating("M1", "ID", 1.0)], hand=SIDE, simulated=lost)
    assert row.verdict is Verdict.BEYOND
    assert "as simulated" in rating_findings(stage(Values()), [row])[0].text


def test_parts_without_a_rating_are_listed_and_sources_are_not_among_them() -> None:
    (note,) = rating_findings(stage(Values()), [])
    assert note.slug == "ratings-not-stated"
    for part in ("M1", "RD", "RS", "CIN", "COUT", "CL", "RSIG", "R1", "R2", "RL", "CS"):
        assert re.search(rf"\b{part}\b", note.text)
    assert not re.search(r"VDD|VSIG", note.text)
    (left,) = rating_findings(stage(Values()), [rated(20.0)])
    assert not re.search(r"\bM1\b", left.text)
