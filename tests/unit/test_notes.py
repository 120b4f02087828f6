"""Notes in decks: each kind becomes what a stage file says; what makes no sense is told with its line."""

from __future__ import annotations

from typing import Any, NamedTuple

import pytest

from deckgen.circuit.model import Origin
from deckgen.errors import InputError
from deckgen.source.model import Note
from deckgen.stage.deck import deck_stage, merged, paths_of
from deckgen.stage.model import Conditions, Part, Stage
from deckgen.stage.notes import _READERS, USAGE, NoteTable, table_of_notes
from deckgen.stage.topology import PartSpec, SignalDefaults, Topology, TransistorSpec


def noted(*texts: str) -> NoteTable:
    """Notes, the first of them on line 2."""
    notes = []
    for line, text in enumerate(texts, start=2):
        keyword, _, rest = text.partition(" ")
        notes.append(Note(keyword, rest.strip(), Origin("x.cir", line)))
    return table_of_notes(notes)


KINDS = [
    ("input VIN", {"signal": {"input": "VIN"}}),
    ("output out", {"signal": {"output": "out"}}),
    ("frequency 1k", {"signal": {"frequency": "1k"}}),
    ("frequency 1 kHz", {"signal": {"frequency": "1 kHz"}}),
    ("amplitude 10m", {"signal": {"amplitude": "10m"}}),
    ("source-resistance RSIG", {"signal": {"source_resistance": "RSIG"}}),
    ("load RL", {"signal": {"load": "RL"}}),
    ("tolerance gm 3%", {"tolerance": {"gm": ["3%"]}}),
    ("tolerance ID(M1) 3 %, 10 uA", {"tolerance": {"ID(M1)": ["3 %", "10 uA"]}}),
    ("claim ID(M1) 0.5m", {"claims": {"ID(M1)": "0.5m"}}),
    ("claim Rin 250 kohm", {"claims": {"Rin": "250 kohm"}}),
    ("claim Av at_most -20", {"claims": {"Av": {"at_most": "-20"}}}),
    ("claim Av at_least 5 dB", {"claims": {"Av": {"at_least": "5 dB"}}}),
    ("claim Av equals -20", {"claims": {"Av": {"equals": "-20"}}}),
    ("claim Rin within 200k 300k", {"claims": {"Rin": {"within": ["200k", "300k"]}}}),
    ("region M2 triode", {"transistors": {"M2": {"region": "triode"}}}),
    ("region m2 TRIODE", {"transistors": {"M2": {"region": "triode"}}}),
    ("region m1@x2 cut-off", {"transistors": {"M1@X2": {"region": "cut-off"}}}),
    ("assumptions full", {"hand": {"assumptions": "full"}}),
    (
        "assumptions paper +a +b -c",
        {"hand": {"assumptions": "paper", "add": ["a", "b"], "drop": ["c"]}},
    ),
    ("rating M1 VDS 20", {"ratings": {"M1": {"VDS": "20"}}}),
    ("rating m1 VDS 20 V", {"ratings": {"M1": {"VDS": "20 V"}}}),
    ("wanted ID(M1) Av", {"wanted": {"quantities": ["ID(M1)", "Av"]}}),
    ("polarised c1 C2", {"polarised": ["C1", "C2"]}),
]


@pytest.mark.parametrize(("text", "table"), KINDS)
def test_a_note_says_what_a_stage_file_says(text: str, table: dict[str, Any]) -> None:
    found = noted(text)
    assert (found.table, found.unknown, found.faults) == (table, [], [])
    assert set(found.places.values()) == {("x.cir", "line 2")}


def test_there_is_a_test_and_a_usage_for_every_kind_of_note() -> None:
    assert {text.split()[0] for text, _ in KINDS} == set(_READERS) == set(USAGE)
    for keyword, usage in USAGE.items():
        assert usage.startswith(keyword)
        assert noted(*usage.split(", or ")).faults == []


@pytest.mark.parametrize(
    "text",
    ["input", "output", "frequency", "load", "tolerance", "tolerance gm", "claim", "claim Av",
     "claim Av at_most", "claim Rin within 1", "claim Rin within 1 2 3", "region", "region M1",
     "region M1 triode really",
     "assumptions", "assumptions paper body-effect", "rating M1", "rating M1 VDS", "wanted", "polarised"],
)  # fmt: skip
def test_half_a_note_is_a_fault_with_its_line_and_its_usage(text: str) -> None:
    found = noted("input VIN", text)
    (fault,) = found.faults
    assert (fault.file, fault.where, fault.found) == ("x.cir", "line 3", text)
    assert fault.expected == f"* deckgen: {USAGE[text.split()[0]]}"


def test_an_unknown_note_is_kept_aside_with_the_nearest_name() -> None:
    found = noted("imput VIN", "regoin M1 triode", "nonsense", "")
    assert [(origin.line, keyword, close) for origin, keyword, close in found.unknown] == [
        (2, "imput", "input"),
        (3, "regoin", "region"),
        (4, "nonsense", None),
        (5, "", None),
    ]
    assert (found.table, found.faults) == ({}, [])


def test_of_ten_thousand_unknown_notes_the_first_get_a_suggestion() -> None:
    found = noted(*["imput VIN"] * 10_000)
    closes = [close for _, _, close in found.unknown]
    assert (len(closes), closes[0], closes[-1]) == (10_000, "input", None)


def test_several_notes_of_a_kind_add_up_and_of_one_thing_the_last_counts() -> None:
    found = noted(
        "input V1", "output a", "output b", "claim Av 1", "claim Rin 2", "rating M1 VDS 20",
        "rating M1 ID 1m", "wanted Av", "wanted Rin", "polarised C1", "polarised C2",
    )  # fmt: skip
    assert found.table == {
        "signal": {"input": "V1", "output": "b"},
        "claims": {"Av": "1", "Rin": "2"},
        "ratings": {"M1": {"VDS": "20", "ID": "1m"}},
        "wanted": {"quantities": ["Av", "Rin"]},
        "polarised": ["C1", "C2"],
    }
    assert found.places["signal", "output"] == ("x.cir", "line 4")


# --- the stage of a deck ---

VOCABULARY = Topology(
    name="",
    title="",
    about="",
    nodes=("in", "g", "d", "out"),
    signal=SignalDefaults("VIN", "out"),
    parts=(
        PartSpec("VIN", "V", ""),
        PartSpec("RSIG", "Ω", ""),
        PartSpec("RL", "Ω", ""),
        PartSpec("C1", "F", ""),
    ),
    transistors=(TransistorSpec("M1", ""), TransistorSpec("M1@X1", "")),
)
PARTS = (Part("RSIG", 1e3), Part("RL", 47e3), Part("C1", 1e-6))


def stage_of(*notes: str, table: dict[str, Any] | None = None) -> Stage:
    return deck_stage(
        noted(*notes),
        VOCABULARY,
        file="x.cir" if table is None else "x.toml",
        deck="x.cir",
        title="a title",
        conditions=Conditions(300.15, 300.15),
        parts=PARTS,
        table=table,
    )


def faults(*notes: str, table: dict[str, Any] | None = None) -> list[str]:
    with pytest.raises(InputError) as caught:
        stage_of(*notes, table=table)
    return [str(fault) for fault in caught.value.faults]


def test_without_notes_the_signal_is_what_was_guessed() -> None:
    stage = stage_of()
    assert (stage.name, stage.title, stage.deck, stage.topology) == ("x", "a title", "x.cir", "")
    assert (stage.signal.input, stage.signal.output) == ("VIN", "out")
    assert (stage.signal.source_resistance, stage.signal.load) == (None, None)
    assert (stage.hand.assumptions, stage.claims, stage.wanted) == ("paper", (), ())


def test_names_in_notes_have_no_case() -> None:
    stage = stage_of("input vin", "output OUT", "source-resistance rsig", "load Rl", "polarised c1")
    assert (stage.signal.input, stage.signal.output) == ("VIN", "out")
    assert (stage.signal.source_resistance, stage.signal.load) == ("RSIG", "RL")
    assert stage.polarised == ("C1",)


def test_numbers_in_notes_are_those_of_a_stage_file() -> None:
    stage = stage_of(
        "frequency 2 kHz", "amplitude 10m", "claim ID(M1) 0.5m", "rating M1 VDS 20 V", "region M1@X1 triode"
    )
    assert (stage.signal.frequency, stage.signal.amplitude) == pytest.approx((2e3, 10e-3))
    assert [(claim.quantity, claim.value) for claim in stage.claims] == [("ID(M1)", pytest.approx(0.5e-3))]
    assert [(rating.part, rating.quantity, rating.limit) for rating in stage.ratings] == [("M1", "VDS", 20.0)]
    assert stage.regions == (("M1@X1", "triode"),)


class Wrong(NamedTuple):
    """A note, and what is said of it."""

    note: str
    said: str


@pytest.mark.parametrize(
    "wrong",
    [
        Wrong("input VIM", 'found "VIM"'),
        Wrong("output nowhere", 'found "nowhere"'),
        Wrong("load RX", 'found "RX"'),
        Wrong("frequency 1M", "1Meg"),
        Wrong("frequency soon", "soon"),
        Wrong("frequency -1k", "-1k"),
        Wrong("claim ID(M7) 1m", "ID(M7)"),
        Wrong("claim beta(M1) 1m", "beta(M1)"),
        Wrong("claim beta 1m", "ID(M1)"),
        Wrong("tolerance gm much", "much"),
        Wrong("region M7 triode", "M7"),
        Wrong("region M1 sleeping", "sleeping"),
        Wrong("assumptions best", "best"),
        Wrong("assumptions paper +nonsense", "nonsense"),
        Wrong("rating M1 VXX 20", "VXX"),
        Wrong("rating M7 VDS 20", "M7"),
        Wrong("wanted ID(M7)", "ID(M7)"),
        Wrong("polarised C7", "C7"),
    ],
)
def test_a_note_that_does_not_fit_the_deck_is_refused_with_its_line(wrong: Wrong) -> None:
    (fault,) = faults("output out", wrong.note)
    assert fault.startswith("x.cir: line 3: ")
    assert wrong.said in fault


def test_all_that_is_wrong_with_notes_is_told_together() -> None:
    found = faults("input", "output nowhere", "claim ID(M7) 1m", "region M1")
    assert sorted(fault.split(": ")[1] for fault in found) == ["line 2", "line 3", "line 4", "line 5"]


def test_without_any_transistor_a_wrong_claim_is_a_fault_all_the_same() -> None:
    bare = Topology(
        name="", title="", about="", nodes=("a",), signal=SignalDefaults("", ""), parts=(), transistors=()
    )
    with pytest.raises(InputError, match=r"ID\(M1\)"):
        deck_stage(
            noted("claim ID 1m"),
            bare,
            file="x.cir",
            deck="x.cir",
            title="t",
            conditions=Conditions(300.0, 300.0),
            parts=(),
        )


# --- a stage file over the notes ---


def test_a_stage_file_has_the_last_word_and_leaves_the_rest_of_the_notes() -> None:
    table = {
        "format": 1,
        "deck": "x.cir",
        "signal": {"frequency": "5k"},
        "claims": {"Av": "-3"},
        "title": "its own",
    }
    stage = stage_of("frequency 1k", "load RL", "claim Av -2", "claim ID(M1) 1m", table=table)
    assert stage.signal.frequency == pytest.approx(5e3)
    assert stage.signal.load == "RL"
    assert {claim.quantity: claim.value for claim in stage.claims} == pytest.approx(
        {"Av": -3.0, "ID(M1)": 1e-3}
    )
    assert (stage.title, stage.name) == ("its own", "x")


def test_faults_are_placed_where_the_value_that_counts_was_written() -> None:
    table = {"format": 1, "deck": "x.cir", "signal": {"output": "nowhere"}}
    found = faults("output out", "load RX", table=table)
    assert sorted(fault.partition(": found")[0] for fault in found) == [
        "x.cir: line 3",
        "x.toml: signal.output",
    ]


def test_tables_are_merged_section_by_section() -> None:
    under = {"a": 1, "b": {"x": 1, "y": {"p": 1}}, "c": [1]}
    over = {"a": {"z": 1}, "b": {"y": {"q": 2}}, "c": [2], "d": 3}
    assert merged(under, over) == {"a": {"z": 1}, "b": {"x": 1, "y": {"p": 1, "q": 2}}, "c": [2], "d": 3}
    assert under == {"a": 1, "b": {"x": 1, "y": {"p": 1}}, "c": [1]}
    assert paths_of({"a": 1, "b": {"c": {"d": 1}}}) == {("a",), ("b",), ("b", "c"), ("b", "c", "d")}
