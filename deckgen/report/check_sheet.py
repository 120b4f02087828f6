"""A check document as blocks: what a report of one says, whatever it is laid out as."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping
from typing import Any, TypeVar

from deckgen.report import cells
from deckgen.report.blocks import Block, Column, Heading, Note, Notes, Quote, Table, TableRow, Tone
from deckgen.report.notes import finding_note
from deckgen.report.response_sheet import setter_note
from deckgen.report.wording import EXIT_MEANING
from deckgen.units import format_value

Stage = dict[str, Any]
_Key = TypeVar("_Key")

_QUANTITY_COLUMNS = (
    Column("quantity"),
    Column("hand", number=True),
    Column("simulated", number=True),
    Column("gap", number=True),
    Column("gap in unit", number=True, roomy=True),
    Column("tolerance", number=True),
    Column("from", roomy=True),
    Column("hand by", roomy=True),
    Column("verdict"),
)
_HAND_COLUMNS = (Column("quantity"), Column("hand", number=True), Column("hand by"))
_TRANSISTOR_COLUMNS = (
    Column("device"),
    Column("role"),
    Column("region\nby hand"),
    Column("\nsimulated"),
    Column("\nstated"),
    Column("margin\nby hand", number=True),
    Column("\nsimulated", number=True),
)
_CLAIM_COLUMNS = (
    Column("claim"),
    Column("stated"),
    Column("simulated", number=True),
    Column("verdict"),
    Column("hand", number=True),
    Column("by hand"),
)
_RATING_COLUMNS = (
    Column("rating"),
    Column("limit", number=True),
    Column("hand", number=True),
    Column("simulated", number=True),
    Column("verdict"),
)


def stage_blocks(stage: Stage) -> tuple[Block, ...]:
    """Blocks of one stage, from its head to its findings."""
    return tuple(
        block
        for block in (
            _heading(stage),
            *_answer(stage),
            _transistors(stage),
            _quantities(stage),
            Notes(tuple(_quantity_notes(stage))),
            _claims(stage),
            _ratings(stage),
            Notes(tuple(_closing_notes(stage))),
        )
        if not block.empty
    )


def summary_blocks(document: Mapping[str, Any]) -> tuple[Block, ...]:
    """Blocks after the last stage: a line for each, the exit code, conventions and the caution."""
    stages = document["stages"]
    exit_code = document["exit_code"]
    tone = Tone.GOOD if exit_code == 0 else Tone.FAIL
    failing = sum(stage["exit_code"] != 0 for stage in stages)
    heading = Heading(
        name="summary",
        state=f"{failing} of {len(stages)} fail" if failing else f"{len(stages)} of {len(stages)} pass",
        tone=tone,
        title="",
        facts=(_origin(document),),
    )
    notes = [Note("exit code", f"{exit_code}: {EXIT_MEANING[exit_code]}", tone)]
    notes += [Note("convention", line, Tone.FAINT) for line in document["conventions"]]
    notes.append(Note("caution", document["caution"]))
    return tuple(block for block in (heading, _summary_table(stages), Notes(tuple(notes))) if not block.empty)


def _origin(document: Mapping[str, Any]) -> tuple[str, ...]:
    simulator = document["simulator"]
    ran = "no simulator" if simulator is None else f"{simulator['name']} {simulator['version']}"
    path = () if simulator is None else (simulator["path"],)
    return (f"deckgen {document['deckgen']}", ran, *path)


def _heading(stage: Stage) -> Heading:
    states = {0: ("passes", Tone.GOOD), 1: ("FAILS", Tone.FAIL)}
    state, tone = states.get(stage["exit_code"], (stage["outcome"].upper(), Tone.FAIL))
    result = (stage["outcome"], *_counts(stage), f"{stage['seconds']:.2f} s")
    facts = (stage["file"], *([f"assumptions: {stage['assumptions']}"] if stage["assumptions"] else []))
    return Heading(stage["name"], state, tone, stage["title"], (result, facts))


def _counts(stage: Stage) -> Iterator[str]:
    for label, number in _tally(stage).items():
        if number:
            yield _count(number, label)


def _count(number: int, label: str) -> str:
    return f"{number} {label.replace('s ', ' ', 1) if number == 1 else label}"


def _tally(stage: Stage) -> dict[str, int]:
    """How many quantities came out how, how many claims and ratings failed."""
    quantities = stage["quantities"]
    verdicts = [quantity["verdict"] for quantity in quantities]
    excused = sum(
        quantity["verdict"] == "beyond" and quantity["excused"] is not None for quantity in quantities
    )
    return {
        "within": verdicts.count("within"),
        "beyond": verdicts.count("beyond") - excused,
        "excused": excused,
        "not compared": verdicts.count("not compared"),
        "absent": verdicts.count("absent"),
        "claims missed": sum(quantity["claim_verdict"] not in (None, "within") for quantity in quantities),
        "ratings exceeded": sum(rating["verdict"] == "beyond" for rating in stage["ratings"]),
    }


def _answer(stage: Stage) -> Iterator[Block]:
    """Say what it means that the simulator gave no measurement, and quote it."""
    if stage["meaning"]:
        tone = Tone.PLAIN if stage["outcome"] == "measured" else Tone.FAIL
        yield Notes(tuple(Note(stage["outcome"], line, tone) for line in stage["meaning"].splitlines()))
    yield Quote("the simulator's own words", tuple(stage["said"]))


def _transistors(stage: Stage) -> Table:
    rows = []
    for transistor in stage["transistors"]:
        regions = (transistor["region"], transistor["region_simulated"], transistor["region_stated"])
        agree = len({region for region in regions if region is not None}) == 1
        rows.append(
            TableRow(
                (
                    transistor["name"],
                    transistor["role"].replace("-", " "),
                    *(region or cells.NONE for region in regions),
                    format_value(transistor["margin"], "V", 3),
                    format_value(transistor["margin_simulated"], "V", 3),
                ),
                Tone.PLAIN if agree else Tone.FAIL,
            )
        )
    return Table(_TRANSISTOR_COLUMNS, tuple(rows))


def _quantities(stage: Stage) -> Table:
    """Hand against simulated; where the simulator gave nothing at all, the hand values alone."""
    quantities = stage["quantities"]
    if _by_hand_only(stage):
        rows = ((quantity["name"], cells.hand_cell(quantity), quantity["how"]) for quantity in quantities)
        return Table(_HAND_COLUMNS, tuple(TableRow(row) for row in rows))
    return Table(_QUANTITY_COLUMNS, tuple(_quantity_row(quantity) for quantity in quantities))


def _by_hand_only(stage: Stage) -> bool:
    return stage["outcome"] != "measured" and all(q["simulated"] is None for q in stage["quantities"])


def _quantity_row(quantity: cells.Quantity) -> TableRow:
    return TableRow(
        (
            quantity["name"],
            cells.hand_cell(quantity),
            cells.simulated_cell(quantity),
            cells.gap_cell(quantity),
            cells.unit_gap_cell(quantity),
            cells.tolerance_cell(quantity),
            quantity["tolerance"]["from"] or cells.NONE,
            quantity["how"],
            cells.verdict_cell(quantity),
        ),
        _quantity_tone(quantity),
    )


def _quantity_tone(quantity: cells.Quantity) -> Tone:
    if quantity["verdict"] == "beyond":
        return Tone.FAIL if quantity["excused"] is None else Tone.DOUBT
    if quantity["verdict"] == "not compared":
        return Tone.FAIL if quantity["wanted"] else Tone.FAINT
    return Tone.FAINT if quantity["verdict"] == "absent" else Tone.PLAIN


def _quantity_notes(stage: Stage) -> Iterator[Note]:
    """Say what the table of quantities has no room for, the same thing once."""
    quantities = stage["quantities"]
    slugs = {finding["text"]: f" [{finding['slug']}]" for finding in stage["findings"]}
    reasons = ((q["name"], (q["verdict"], q["reason"])) for q in quantities if q["reason"])
    for (verdict, reason), names in _grouped(reasons).items():
        tone = Tone.FAIL if verdict == "beyond" else Tone.PLAIN
        whose = f"all {len(names)}" if 1 < len(names) == len(quantities) else ", ".join(names)
        yield Note(verdict, f"{whose}: {reason}{slugs.get(reason, '')}", tone)
    excuses = ((q["name"], q["excused"]) for q in quantities if q["excused"])
    for excuse, names in _grouped(excuses).items():
        yield Note("excused", f"{', '.join(names)}: {excuse}", Tone.DOUBT)
    for quantity in quantities:
        yield from _cause_notes(quantity)
    if stage["mid_band"] is not None:
        frequency, source = stage["mid_band"]["frequency"], stage["mid_band"]["source"]
        yield Note("mid-band", f"{format_value(frequency, 'Hz')}: {source}", Tone.FAINT)
    if stage["band_edges"]:
        yield setter_note(stage["band_edges"])
    if _by_hand_only(stage):
        return
    yield from _shared("hand by", ((q["name"], q["how"]) for q in quantities))
    origins = ((q["name"], q["tolerance"]["from"]) for q in quantities if q["tolerance"]["from"])
    yield from _shared("tolerance", origins)


def _cause_notes(quantity: cells.Quantity) -> Iterator[Note]:
    shares = [(cause["name"], cause["share"]) for cause in quantity["causes"]]
    if shares and quantity["residual"] is not None:
        shares.append(("residual", quantity["residual"]))
    parts = [f"{name} {cells.signed(format_value(share, quantity['unit'], 3))}" for name, share in shares]
    if parts:
        yield Note("causes", f"{quantity['name']}: {', '.join(parts)}")
    if quantity["explained_by"]:
        yield Note("explained", f"{quantity['name']}: {', '.join(quantity['explained_by'])}")


def _grouped(pairs: Iterable[tuple[str, _Key]]) -> dict[_Key, list[str]]:
    groups: dict[_Key, list[str]] = {}
    for name, key in pairs:
        groups.setdefault(key, []).append(name)
    return groups


def _shared(label: str, pairs: Iterable[tuple[str, str]]) -> Iterator[Note]:
    """One narrow note: the commonest key for "the rest", the others with the names they hold for."""
    groups = sorted(_grouped(pairs).items(), key=lambda group: len(group[1]))
    if not groups:
        return
    rare = [f"{key}: {', '.join(names)}" for key, names in groups[:-1]]
    common = groups[-1][0]
    yield Note(
        label, "; ".join([*rare, f"{common}: the rest"] if rare else [common]), Tone.FAINT, narrow=True
    )


def _claims(stage: Stage) -> Table:
    rows = []
    for quantity in stage["quantities"]:
        if quantity["claim_kind"] is None:
            continue
        rows.append(
            TableRow(
                (
                    quantity["name"],
                    cells.claim_cell(quantity),
                    cells.simulated_cell(quantity),
                    cells.claim_verdict_cell(quantity["claim_verdict"]),
                    cells.hand_cell(quantity),
                    cells.claim_verdict_cell(quantity["claim_hand_verdict"]).lower(),
                ),
                Tone.PLAIN if quantity["claim_verdict"] == "within" else Tone.FAIL,
            )
        )
    return Table(_CLAIM_COLUMNS, tuple(rows))


def _ratings(stage: Stage) -> Table:
    rows = []
    for rating in stage["ratings"]:
        if rating["limit"] is None:
            continue
        exceeded = rating["verdict"] == "beyond"
        rows.append(
            TableRow(
                (
                    f"{rating['quantity']}({rating['part']})",
                    format_value(rating["limit"], rating["unit"]),
                    cells.hand_cell(rating),
                    cells.simulated_cell(rating),
                    "EXCEEDED" if exceeded else rating["verdict"],
                ),
                Tone.FAIL if exceeded else Tone.PLAIN,
            )
        )
    return Table(_RATING_COLUMNS, tuple(rows))


def _closing_notes(stage: Stage) -> Iterator[Note]:
    unchecked = [f"{r['quantity']}({r['part']})" for r in stage["ratings"] if r["limit"] is None]
    if unchecked:
        yield Note("ratings", f"not stated, so not checked: {', '.join(unchecked)}")
    elif not stage["ratings"] and stage["outcome"] == "measured" and not _says_unrated(stage):
        yield Note("ratings", "none stated, so not checked")
    reasons = {quantity["reason"] for quantity in stage["quantities"]}
    for finding in stage["findings"]:
        if finding["text"] not in reasons:  # said there already, with its slug
            yield finding_note(finding, stage["file"])
    if stage["run_folder"] is not None:
        yield Note("evidence", stage["run_folder"], Tone.FAINT)


def _says_unrated(stage: Stage) -> bool:
    return any(finding["slug"] == "ratings-not-stated" for finding in stage["findings"])


def _summary_table(stages: list[Stage]) -> Table:
    counted = ("within", "beyond", "not compared", "absent")
    columns = (
        Column("stage"),
        *(Column(label.replace(" ", "\n"), number=True) for label in counted),
        Column("exit", number=True),
        Column("worst gap"),
    )
    rows = []
    for stage in stages:
        tally = _tally(stage)
        counts = [str(tally.pop(label)) for label in counted]
        rest = [_count(number, label) for label, number in tally.items() if number]
        remark = ", ".join([_worst_gap(stage), *rest]) if stage["outcome"] == "measured" else stage["outcome"]
        tone = Tone.PLAIN if stage["exit_code"] == 0 else Tone.FAIL
        rows.append(TableRow((stage["name"], *counts, str(stage["exit_code"]), remark), tone))
    return Table(columns, tuple(rows))


def _worst_gap(stage: Stage) -> str:
    """Name the quantity whose gap uses up most of its tolerance."""
    compared = [quantity for quantity in stage["quantities"] if quantity["verdict"] in ("within", "beyond")]
    if not compared:
        return "nothing compared"
    worst = max(compared, key=cells.tolerance_used)
    return f"{worst['name']} {cells.gap_cell(worst)}"
