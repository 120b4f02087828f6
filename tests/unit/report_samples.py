"""Comparisons and predictions as the other steps would hand them over, and strategies that vary them."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Any

from hypothesis import strategies as st

from deckgen.circuit.region import Region
from deckgen.comparison import (
    AppliedTolerance,
    Cause,
    ClaimResult,
    Comparison,
    Finding,
    Gap,
    MidBandRow,
    RatingRow,
    Row,
    Severity,
    TransistorRow,
    Verdict,
)
from deckgen.errors import Outcome
from deckgen.hand.prediction import HandValue, How, MidBand, Prediction, Step, TransistorPrediction
from deckgen.quantities import KINDS, parse_quantity
from deckgen.report.document import Document, PredictedStage, check_document, predict_document


@dataclass(frozen=True)
class Ngspice:
    """A simulator as the reports see it."""

    name: str = "ngspice"
    version: str = "39.3"
    path: str = "/usr/bin/ngspice"


def row(name: str, hand: float | None, simulated: float | None, **changes: Any) -> Row:
    """A row judged by the default tolerance of its kind, as the comparison judges it."""
    kind = parse_quantity(name).description
    limit = kind.paper
    floor = limit.absolute if limit.of_supply is None else 12.0 * limit.of_supply
    gap, verdict = None, Verdict.ABSENT
    if hand is not None and simulated is not None:
        size = simulated - hand
        db = 20.0 * math.log10(abs(simulated / hand)) if kind.ratio else None
        gap = Gap(size, size / abs(hand) if hand else None, db)
        if limit.db is not None and db is not None:
            inside = abs(db) <= limit.db
        else:
            inside = abs(size) <= max((limit.relative or 0.0) * abs(hand), floor or 0.0)
        verdict = Verdict.WITHIN if inside else Verdict.BEYOND
    tolerance = AppliedTolerance(limit.relative, floor, limit.db, "default")
    judged = Row(name, kind.unit, hand, simulated, verdict, How.CLOSED_FORM.value, gap, tolerance)
    return replace(judged, **changes)


VALUES: dict[str, tuple[float | None, float | None]] = {
    "ID(M1)": (0.994e-3, 1.0086e-3),
    "VGS(M1)": (2.412, 2.4131),
    "VDS(M1)": (5.0348, 4.9612),
    "VTH(M1)": (1.5, 1.5),
    "VOV(M1)": (0.912, 0.9131),
    "gm(M1)": (2.18e-3, 2.281e-3),
    "gds(M1)": (9.94e-6, 1.0214e-5),
    "gmb(M1)": (0.3122e-3, 0.32e-3),
    "V(out)": (0.0, 0.0),
    "V(d)": (7.03, 6.96),
    "Psupply": (12.53e-3, 12.7e-3),
    "Av": (-5.6312, -5.9017),
    "Av.phase": (180.0, 179.93),
    "Rin": (68.75e3, 68.75e3),
    "Rout": (4.802e3, 4.795e3),
    "fL": (38.4, 36.1),
    "fH": (4.72e6, 4.41e6),
}

SMALL_SIGNAL = tuple(name for name in VALUES if parse_quantity(name).description.small_signal)


def rows(**values: tuple[float | None, float | None]) -> tuple[Row, ...]:
    """Rows of a common source; ``values`` replace single ones, brackets and dots left out of the names."""
    plain = {name.translate({ord(c): None for c in "()."}): name for name in VALUES}
    changed = {plain[name]: value for name, value in values.items()}
    return tuple(row(name, *(VALUES | changed)[name]) for name in VALUES)


def _with(judged: tuple[Row, ...], name: str, **changes: Any) -> tuple[Row, ...]:
    return tuple(replace(one, **changes) if one.name == name else one for one in judged)


_M1 = TransistorRow("M1", "common-source", "square", "saturation", "saturation", "saturation", 4.12, 4.05)

CLEAN = Comparison(
    name="probe-preamp",
    title="Electrode probe preamplifier, n-channel, source resistor bypassed",
    file="stages/probe-preamp.toml",
    outcome=Outcome.MEASURED,
    assumptions="paper",
    findings=(Finding("bare-source", Severity.NOTE, "no source resistance: the generator drives the input"),),
    transistors=(_M1,),
    quantities=rows(),
    ratings=(
        RatingRow("M1", "VDS", "V", 20.0, 5.03, 4.96, Verdict.WITHIN),
        RatingRow("RD", "P", "W", None, 5e-3, 5e-3, Verdict.NOT_COMPARED),
    ),
    mid_band=MidBandRow(13.46e3, "√(fL·fH) of the exact hand curve"),
    run_folder="runs/20250301T071502-probe-preamp",
    seconds=0.084,
)

_BEYOND_ROWS = rows(IDM1=(0.994e-3, 1.214e-3), Av=(-5.6312, -7.12), Rout=(4.802e3, 5.6e3))
_BEYOND_ROWS = _with(_BEYOND_ROWS, "Rout", excused="known gap until 2026-03-31: RD under review")
_BEYOND_ROWS = _with(
    _BEYOND_ROWS, "Av", claim=ClaimResult("within", -6.2, -5.2, Verdict.BEYOND, Verdict.WITHIN)
)
_BEYOND_ROWS = _with(
    _BEYOND_ROWS, "Rin", claim=ClaimResult("at_least", 50e3, None, Verdict.WITHIN, Verdict.WITHIN)
)
_BEYOND_ROWS = _with(
    _BEYOND_ROWS, "fH", tolerance=AppliedTolerance(0.5, None, None, "stage file"),
    causes=(Cause("channel-length modulation", -2.5e5), Cause("closed form", -5e4)),
    residual=-1e4, explained_by=("bare-source",),
)  # fmt: skip
BEYOND = replace(
    CLEAN,
    name="line-driver",
    title="Line driver",
    file="stages/line-driver.toml",
    quantities=_BEYOND_ROWS,
    ratings=(),
    findings=(
        Finding(
            "claim-part-value", Severity.WARNING, "the claim fits RD = 5.6 kΩ: check the decimal point",
            "stages/line-driver.toml", 14, "RD",
        ),
    ),
)  # fmt: skip

REGION_REASON = "M1 is in triode in the simulator and in saturation by hand: lower the drain resistor"
TRIODE = replace(
    CLEAN,
    name="offset-stage",
    title="Offset stage",
    file="stages/offset-stage.toml",
    transistors=(replace(_M1, region_simulated="triode", margin=0.041, margin_simulated=-0.592),),
    quantities=tuple(
        replace(one, verdict=Verdict.NOT_COMPARED, reason=REGION_REASON) if one.name in SMALL_SIGNAL else one
        for one in rows(VDSM1=(0.41, 0.32), Vd=(2.3, 1.9))
    ),
)

TIMED_OUT = replace(
    CLEAN,
    name="slow-buffer",
    title="Output buffer",
    file="stages/slow-buffer.toml",
    outcome=Outcome.TIMED_OUT,
    assumptions="full",
    meaning="ngspice was stopped after 30 s; give it more time",
    said=("doAnalyses: TRAN:  Timestep too small", 'trouble with node "d"'),
    transistors=(replace(_M1, region_simulated=None, margin_simulated=None),),
    quantities=tuple(
        replace(one, simulated=None, gap=None, verdict=Verdict.NOT_COMPARED, reason="no simulated values")
        for one in rows()
    ),
    ratings=(),
)

REFUSED = Comparison(
    name="typo",
    title="",
    file="stages/typo.toml",
    outcome=Outcome.REFUSED,
    assumptions="paper",
    meaning="stages/typo.toml: parts.RD: found '1M', expected 1Meg or 1m\n"
    "stages/typo.toml: parts.RSS: found a part that common-source lacks; did you mean RS?",
)

RATED = replace(
    CLEAN,
    name="high-voltage",
    title="High-voltage stage",
    ratings=(RatingRow("M1", "VDS", "V", 20.0, 48.03, 47.2, Verdict.BEYOND),),
)

_ABSENT_ROWS = _with(rows(Rin=(None, None), fL=(None, None)), "Rin", reason="a driven gate draws no current")
ABSENT = replace(
    CLEAN,
    name="dc-follower",
    title="DC-coupled follower",
    transistors=(replace(_M1, role="follower", region_stated=None),),
    quantities=_with(_ABSENT_ROWS, "fL", reason="DC-coupled"),
    mid_band=None,
    run_folder=None,
)

ALL = (CLEAN, BEYOND, TRIODE, TIMED_OUT, REFUSED, RATED, ABSENT)

LONG_WORKING = Step(
    symbol="Av",
    formula="-gm·ro·RL'/(RL' + RS + ro + (gm + gmb)·ro·RS)·Rin/(Rin + RSIG)",
    numbers="-2.18 mS·100.6 kΩ·4.58 kΩ/(4.58 kΩ + 220 Ω + 100.6 kΩ + (2.18 mS + 312 µS)·100.6 kΩ·220 Ω)",
    value=-5.6312,
    unit="V/V",
    source="P. R. Gray, P. J. Hurst, S. H. Lewis, R. G. Meyer, Analysis and Design of Analog Circuits",
    quantity="Av",
    note="ro = 100.6 kΩ stays in the gain",
)

PREDICTION = Prediction(
    assumptions=("no-channel-length-modulation", "ideal-coupling"),
    values=(
        *(
            HandValue(name, parse_quantity(name).description.unit, hand, How.CLOSED_FORM)
            for name, (hand, _) in VALUES.items()
        ),
        HandValue("Rin2", "Ω", None, How.NODAL, "a driven gate draws no current"),
    ),
    transistors=(
        TransistorPrediction(
            "M1", "common-source", "square", Region.SATURATION, 4.12, 0.912, 0.994e-3, 0.97, -5.5, 2.1e-3
        ),
    ),
    working=(
        Step("V(g)", "VDD·R2/(R1 + R2)", "12 V·100 kΩ/(220 kΩ + 100 kΩ)", 3.75, "V", "divider", "V(g)"),
        Step("ro", "1/gds", "ID = 994 µA, λ = 0.01/V", 100.6e3, "Ω", "Shichman & Hodges 1968"),
        LONG_WORKING,
    ),
    mid_band=MidBand(13.46e3, "√(fL·fH) of the exact hand curve", 0.12, 35.9, None),
    node_voltages=(("vdd", 12.0), ("g", 3.75), ("d", 7.03)),
    node_signals=(("vdd", 0j), ("g", 0.99 + 0j), ("d", -5.63 + 0.02j)),
    notes=("hand values of fL and fH are time-constant estimates",),
)

PREDICTED = PredictedStage(
    name="probe-preamp",
    title="Electrode probe preamplifier",
    file="stages/probe-preamp.toml",
    assumptions="paper",
    prediction=PREDICTION,
    findings=CLEAN.findings,
)


def checked(*comparisons: Comparison) -> Document:
    """The document of these comparisons, or of all samples."""
    return check_document(comparisons or ALL, simulator=Ngspice())


def predicted(*stages: PredictedStage) -> Document:
    """The document of these predictions, or of the sample."""
    return predict_document(stages or (PREDICTED,))


# Strategies. Numbers are those of circuits; texts are anything, and pieces that mean something somewhere.

_PIECES = (
    *(
        "[red]x[/red]",
        "[link=https://x.example]x[/link]",
        "\x1b[31m",
        "\x1b]0;x\x07",
        "\x9b31m",
        "\r",
        "\n",
        "\t",
    ),
    *(
        "\u202e",
        "\u200b",
        "\u2028",
        "\ue000",
        "\ud800",
        "|",
        "||",
        "`",
        "```",
        "\n```\n",
        "*a*",
        "**b**",
        "_c_",
    ),
    *("~~d~~", "<b>", "<script>alert(1)</script>", "<!-- -->", "&lt;", "[x](https://x.example)", "![x](y)"),
    *(
        "https://x.example",
        "www.x.example",
        "@someone",
        "a@b.example",
        "#12",
        "# x",
        "- x",
        "1. x",
        "---",
        "===",
    ),
    *("$x$", ":tada:", "\\", "\\|", "100 kΩ", "ÄÖ", "中文", "é", " ", "  ", "x" * 90),
)

texts = st.one_of(
    st.text(max_size=40),
    st.lists(st.sampled_from(_PIECES), min_size=1, max_size=6).map("".join),
    st.lists(st.sampled_from(_PIECES), min_size=1, max_size=6).map(" ".join),
)
lines = texts.filter(bool)
slugs = st.from_regex(r"[a-z][a-z0-9]{0,8}(-[a-z0-9]{1,8}){0,3}", fullmatch=True)
sizes = st.just(0.0) | st.floats(1e-12, 1e9)
numbers = sizes | sizes.map(lambda size: -size)
verdicts = st.sampled_from(list(Verdict))
regions = st.sampled_from([region.value for region in Region])

findings = st.builds(
    Finding,
    slug=slugs,
    severity=st.sampled_from(list(Severity)),
    text=lines,
    file=st.none() | texts,
    line=st.none() | st.integers(1, 10**6),
    subject=st.none() | texts,
)
_tolerances = st.builds(
    AppliedTolerance,
    relative=st.none() | sizes,
    absolute=st.none() | sizes,
    db=st.none() | sizes,
    origin=lines,
)
_gaps = st.builds(Gap, absolute=numbers, relative=st.none() | numbers, db=st.none() | numbers)


@st.composite
def claims(draw: st.DrawFn) -> ClaimResult:
    """A claim; only a range has an upper end."""
    kind = draw(st.sampled_from(["equals", "at_least", "at_most", "within"]))
    upper = draw(numbers) if kind == "within" else None
    return ClaimResult(kind, draw(numbers), upper, draw(verdicts), draw(verdicts))


@st.composite
def quantity_rows(draw: st.DrawFn) -> Row:
    """A row that keeps what a comparison promises of its verdict."""
    kind = KINDS[draw(st.sampled_from(sorted(KINDS)))]
    of = draw(st.sampled_from(["M1", "M2@X1", "OUT"]))
    verdict = draw(verdicts)
    within, skipped = verdict is Verdict.WITHIN, verdict is Verdict.NOT_COMPARED
    return Row(
        name=kind.name if kind.scope == "stage" else f"{kind.name}({of})",
        unit=kind.unit,
        hand=draw(numbers if within else st.none() | numbers),
        simulated=draw(numbers if within else st.none() | numbers),
        verdict=verdict,
        how=draw(st.sampled_from([how.value for how in How])),
        gap=draw(_gaps if within else st.none() | _gaps),
        tolerance=draw(_tolerances if within else st.none() | _tolerances),
        claim=draw(st.none() | claims()),
        excused=draw(st.none() | lines),
        reason=draw(lines if skipped else st.none() | lines),
        wanted=draw(st.booleans()),
        causes=tuple(draw(st.lists(st.builds(Cause, name=lines, share=numbers), max_size=2))),
        residual=draw(st.none() | numbers),
        explained_by=tuple(draw(st.lists(slugs, max_size=2))),
    )


@st.composite
def rating_rows(draw: st.DrawFn) -> RatingRow:
    """A rating; one that is not stated is not compared."""
    limit = draw(st.none() | sizes)
    verdict = Verdict.NOT_COMPARED if limit is None else draw(verdicts)
    part, quantity = draw(lines), draw(st.sampled_from(["VDS", "ID", "PD"]))
    return RatingRow(
        part, quantity, "V", limit, draw(st.none() | numbers), draw(st.none() | numbers), verdict
    )


comparisons = st.builds(
    Comparison,
    name=lines,
    title=texts,
    file=lines,
    outcome=st.sampled_from(list(Outcome)),
    assumptions=texts,
    meaning=texts,
    said=st.lists(texts, max_size=3).map(tuple),
    findings=st.lists(findings, max_size=3).map(tuple),
    transistors=st.lists(
        st.builds(
            TransistorRow,
            name=lines,
            role=lines,
            law=st.sampled_from(["square", "other"]),
            region=regions,
            region_simulated=st.none() | regions,
            region_stated=st.none() | regions,
            margin=numbers,
            margin_simulated=st.none() | numbers,
        ),
        max_size=2,
    ).map(tuple),
    quantities=st.lists(quantity_rows(), max_size=4).map(tuple),
    ratings=st.lists(rating_rows(), max_size=3).map(tuple),
    mid_band=st.none() | st.builds(MidBandRow, frequency=st.floats(1e-3, 1e12), source=texts),
    run_folder=st.none() | texts,
    seconds=st.floats(0.0, 1e4),
)
