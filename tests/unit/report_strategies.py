"""Strategies for comparisons: numbers as in circuits; texts of anything that means something somewhere."""

from __future__ import annotations

from hypothesis import strategies as st

from deckgen.circuit.region import Region
from deckgen.comparison import (
    AppliedTolerance,
    BandEdgeRow,
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
from deckgen.hand.prediction import How
from deckgen.quantities import KINDS

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
    band_edges=st.lists(
        st.builds(BandEdgeRow, quantity=st.sampled_from(["fL", "fH"]), set_by=lines, share=numbers),
        max_size=2,
    ).map(tuple),
    run_folder=st.none() | texts,
    seconds=st.floats(0.0, 1e4),
)
