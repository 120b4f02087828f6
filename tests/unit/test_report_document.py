"""The JSON documents hold everything, keep their contract, and let nothing in that JSON can't hold."""

from __future__ import annotations

import copy
import json
import math
import unicodedata
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st
from jsonschema import Draft202012Validator

from deckgen import __version__
from deckgen.comparison import Comparison, Gap, MidBandRow
from deckgen.report.document import check_document, dump, predict_document
from deckgen.report.wording import CAUTION, PORT_CONVENTION, ROOT_CONVENTION, SQUARE_LAW_CONVENTION
from tests.unit import report_samples as samples
from tests.unit import report_strategies as strategies

Path_ = tuple[str | int, ...]

_SCHEMAS = Path(__file__).resolve().parents[2] / "deckgen" / "schemas"

# What a measure may be is closed; everything else may get more keys.
_CLOSED = {"gap", "tolerance", "causes"}


def _schema(name: str) -> dict[str, Any]:
    schema = json.loads((_SCHEMAS / name).read_text(encoding="utf-8"))
    assert isinstance(schema, dict)
    return schema


def _closed(schema: Any) -> Any:
    """The schema with no room for keys that it doesn't name."""
    if isinstance(schema, list):
        return [_closed(member) for member in schema]
    if not isinstance(schema, dict):
        return schema
    closed = {key: _closed(member) for key, member in schema.items()}
    return closed | {"additionalProperties": False} if schema.get("type") == "object" else closed


CHECK = Draft202012Validator(_schema("check-1.json"))
PREDICT = Draft202012Validator(_schema("predict-1.json"))
CLOSED_CHECK = Draft202012Validator(_closed(_schema("check-1.json")))
CLOSED_PREDICT = Draft202012Validator(_closed(_schema("predict-1.json")))


def _paths(value: Any, path: Path_ = ()) -> Iterator[Path_]:
    """Every place in a document below its root, one member of each list."""
    members: Any = ()
    if isinstance(value, dict):
        members = value.items()
    elif isinstance(value, list):
        members = enumerate(value[:1])
    for key, member in members:
        yield (*path, key)
        yield from _paths(member, (*path, key))


def _at(document: Any, path: Path_) -> Any:
    for key in path:
        document = document[key]
    return document


def _changed(document: Any, path: Path_, value: Any) -> Any:
    copied = copy.deepcopy(document)
    _at(copied, path[:-1])[path[-1]] = value
    return copied


# A stage in which nothing is missing, so that every place of the schema is there.
FULL_CHECK = samples.checked(
    replace(
        samples.BEYOND,
        said=("words",),
        quantities=tuple(reversed(samples.BEYOND.quantities)),  # fH, with causes, comes first
        ratings=samples.CLEAN.ratings,
    )
)
FULL_PREDICT = samples.predicted()


def test_both_schemas_are_valid_draft_2020_12() -> None:
    for name in ("check-1.json", "predict-1.json"):
        Draft202012Validator.check_schema(_schema(name))


def test_the_samples_fit_the_schemas_and_the_schemas_name_every_key() -> None:
    CLOSED_CHECK.validate(samples.checked())
    CLOSED_PREDICT.validate(samples.predicted())
    CLOSED_CHECK.validate(check_document([], simulator=None))
    CLOSED_PREDICT.validate(predict_document([]))


@given(st.lists(strategies.comparisons, max_size=2))
def test_every_comparison_gives_a_document_that_fits_the_schema_and_survives_json(
    comparisons: list[Comparison],
) -> None:
    document = check_document(comparisons, simulator=samples.Ngspice())
    CLOSED_CHECK.validate(document)
    text = dump(document)
    assert json.loads(text) == document
    text.encode("utf-8")


@given(st.text(max_size=20), st.floats(allow_nan=False, allow_infinity=False))
def test_every_prediction_gives_a_document_that_fits_the_schema(text: str, value: float) -> None:
    step = replace(samples.LONG_WORKING, note=text, value=value)
    prediction = replace(samples.PREDICTION, working=(step,), notes=(text,))
    document = samples.predicted(replace(samples.PREDICTED, title=text, prediction=prediction))
    CLOSED_PREDICT.validate(document)
    assert json.loads(dump(document)) == document


@pytest.mark.parametrize("path", [p for p in _paths(FULL_CHECK) if not isinstance(p[-1], int)], ids=repr)
def test_a_check_document_without_one_of_its_keys_is_refused(path: Path_) -> None:
    document = copy.deepcopy(FULL_CHECK)
    del _at(document, path[:-1])[path[-1]]
    assert not CHECK.is_valid(document)


@pytest.mark.parametrize("path", [p for p in _paths(FULL_PREDICT) if not isinstance(p[-1], int)], ids=repr)
def test_a_predict_document_without_one_of_its_keys_is_refused(path: Path_) -> None:
    document = copy.deepcopy(FULL_PREDICT)
    del _at(document, path[:-1])[path[-1]]
    assert not PREDICT.is_valid(document)


@pytest.mark.parametrize("path", list(_paths(FULL_CHECK)), ids=repr)
def test_a_check_document_with_a_value_of_another_type_is_refused(path: Path_) -> None:
    assert CHECK.is_valid(FULL_CHECK)
    wrong: Any = "text" if isinstance(_at(FULL_CHECK, path), (dict, list)) else {"re": 1.0, "im": 0.0}
    assert not CHECK.is_valid(_changed(FULL_CHECK, path, wrong))


@pytest.mark.parametrize("path", list(_paths(FULL_PREDICT)), ids=repr)
def test_a_predict_document_with_a_value_of_another_type_is_refused(path: Path_) -> None:
    assert PREDICT.is_valid(FULL_PREDICT)
    wrong: Any = "text" if isinstance(_at(FULL_PREDICT, path), (dict, list)) else {"re": 1.0, "im": 0.0}
    assert not PREDICT.is_valid(_changed(FULL_PREDICT, path, wrong))


@pytest.mark.parametrize(
    "path", [(), *(p for p in _paths(FULL_CHECK) if isinstance(_at(FULL_CHECK, p), dict))], ids=repr
)
def test_a_later_version_may_add_keys_except_to_what_decides_a_verdict(path: Path_) -> None:
    document = copy.deepcopy(FULL_CHECK)
    _at(document, path)["added later"] = 1
    closed = not _CLOSED.isdisjoint(str(key) for key in path)
    assert CHECK.is_valid(document) is not closed


_QUANTITY = ("stages", 0, "quantities", 0)


@pytest.mark.parametrize(
    ("path", "value"),
    [
        (("schema",), "deckgen.check/2"),
        (("exit_code",), 130),
        (("stages", 0, "exit_code"), 3),
        (("stages", 0, "outcome"), "fine"),
        (("stages", 0, "seconds"), -1.0),
        (("stages", 0, "findings", 0, "severity"), "error"),
        (("stages", 0, "findings", 0, "slug"), "No Slug"),
        (("stages", 0, "findings", 0, "line"), 0),
        (("stages", 0, "transistors", 0, "region"), "active"),
        (("stages", 0, "mid_band", "frequency"), 0.0),
        ((*_QUANTITY, "verdict"), "pass"),
        ((*_QUANTITY, "verdict"), None),
        ((*_QUANTITY, "how"), "guess"),
        ((*_QUANTITY, "hand"), "4.7k"),
        ((*_QUANTITY, "hand"), None),
        ((*_QUANTITY, "simulated"), None),
        ((*_QUANTITY, "gap", "absolute"), None),
        ((*_QUANTITY, "tolerance", "relative"), -0.1),
        ((*_QUANTITY, "claim"), 1.0),
        ((*_QUANTITY, "claim_upper"), 1.0),
        ((*_QUANTITY, "claim_kind"), "about"),
        ((*_QUANTITY, "claim_kind"), "equals"),
        (("stages", 0, "ratings", 1, "verdict"), "within"),
    ],
    ids=repr,
)
def test_a_check_document_that_contradicts_itself_or_the_words_of_the_contract_is_refused(
    path: Path_, value: Any
) -> None:
    assert not CHECK.is_valid(_changed(FULL_CHECK, path, value))


def test_a_quantity_that_is_not_compared_needs_a_reason() -> None:
    document = samples.checked(samples.TRIODE)
    quantities = document["stages"][0]["quantities"]
    index = next(i for i, quantity in enumerate(quantities) if quantity["verdict"] == "not compared")
    assert not CHECK.is_valid(_changed(document, ("stages", 0, "quantities", index, "reason"), None))


def test_a_measured_stage_says_what_was_compared_and_how() -> None:
    document = samples.checked(samples.BEYOND)
    assert document["schema"] == "deckgen.check/1"
    assert document["deckgen"] == __version__
    assert document["simulator"] == {"name": "ngspice", "version": "39.3", "path": "/usr/bin/ngspice"}
    assert document["caution"] == CAUTION
    stage = document["stages"][0]
    assert (stage["name"], stage["outcome"], stage["exit_code"]) == ("line-driver", "measured", 1)
    assert (stage["mid_band"]["frequency"], stage["run_folder"]) == (13.46e3, samples.BEYOND.run_folder)
    gain = next(quantity for quantity in stage["quantities"] if quantity["name"] == "Av")
    assert (gain["hand"], gain["simulated"], gain["unit"]) == (-5.6312, -7.12, "V/V")
    assert gain["gap"]["db"] == pytest.approx(20.0 * math.log10(7.12 / 5.6312))
    assert gain["tolerance"] == {"relative": None, "absolute": None, "db": 1.0, "from": "default"}
    assert (gain["claim"], gain["claim_upper"], gain["claim_kind"]) == (-6.2, -5.2, "within")
    assert (gain["claim_verdict"], gain["claim_hand_verdict"]) == ("beyond", "within")
    assert (gain["verdict"], gain["fails"], gain["wanted"], gain["how"]) == (
        "beyond",
        True,
        True,
        "closed form",
    )
    excused = next(quantity for quantity in stage["quantities"] if quantity["name"] == "Rout")
    assert (excused["verdict"], excused["fails"]) == ("beyond", False)
    assert excused["excused"] == "known gap until 2026-03-31: RD under review"
    edge = next(quantity for quantity in stage["quantities"] if quantity["name"] == "fH")
    assert edge["causes"][0] == {"name": "channel-length modulation", "share": -2.5e5}
    assert (edge["residual"], edge["explained_by"]) == (-1e4, ["bare-source"])
    assert stage["transistors"][0]["margin_simulated"] == 4.05
    assert stage["findings"][0]["line"] == 14


def test_what_does_not_exist_is_null_and_the_shape_stays() -> None:
    stage = samples.checked(samples.ABSENT)["stages"][0]
    absent = next(quantity for quantity in stage["quantities"] if quantity["name"] == "Rin")
    assert (absent["hand"], absent["simulated"], absent["verdict"]) == (None, None, "absent")
    assert absent["gap"] == {"absolute": None, "relative": None, "db": None}
    assert (stage["mid_band"], stage["run_folder"]) == (None, None)
    assert check_document([samples.REFUSED], simulator=None)["simulator"] is None


def test_stages_keep_their_order_and_the_highest_exit_code_wins() -> None:
    document = samples.checked()
    assert [stage["name"] for stage in document["stages"]] == [comparison.name for comparison in samples.ALL]
    assert [stage["exit_code"] for stage in document["stages"]] == [0, 1, 1, 3, 2, 1, 0]
    assert document["exit_code"] == 3
    assert samples.checked(samples.CLEAN, samples.ABSENT)["exit_code"] == 0
    assert samples.checked(samples.REFUSED, samples.BEYOND)["exit_code"] == 2


def test_conventions_stand_there_where_they_matter() -> None:
    assert samples.checked()["conventions"] == [SQUARE_LAW_CONVENTION, PORT_CONVENTION]
    assert samples.checked(samples.REFUSED)["conventions"] == []
    assert samples.predicted()["conventions"] == [SQUARE_LAW_CONVENTION, PORT_CONVENTION, ROOT_CONVENTION]
    rootless = replace(samples.PREDICTION, poles=(), zeros=())
    told = samples.predicted(replace(samples.PREDICTED, prediction=rootless))["conventions"]
    assert told == [SQUARE_LAW_CONVENTION, PORT_CONVENTION]


def test_a_prediction_keeps_its_working_and_turns_signals_into_size_and_phase() -> None:
    document = samples.predicted()
    assert document["schema"] == "deckgen.predict/1"
    stage = document["stages"][0]
    assert [step["symbol"] for step in stage["working"]] == ["V(g)", "ro", "Av"]
    assert stage["working"][2]["numbers"] == samples.LONG_WORKING.numbers
    assert stage["working"][2]["quantity"] == "Av"
    assert stage["transistors"][0]["VOV"] == 0.912
    assert stage["mid_band"]["exact_fL"] == 35.9
    assert stage["mid_band"]["exact_fH"] is None
    supply, _, drain = stage["nodes"]
    assert drain["voltage"] == 7.03
    assert drain["signal"] == pytest.approx(5.63, abs=1e-3)
    assert drain["phase"] == pytest.approx(179.8, abs=0.01)
    assert (supply["signal"], supply["phase"]) == (0.0, None)


@pytest.mark.parametrize("bad", [float("nan"), float("inf"), float("-inf")])
@pytest.mark.parametrize("field", ["hand", "simulated", "residual"])
def test_a_number_that_is_not_finite_is_refused_with_its_place(field: str, bad: float) -> None:
    row = replace(samples.CLEAN.quantities[3], **{field: bad})
    comparison = replace(samples.CLEAN, quantities=(*samples.CLEAN.quantities[:3], row))
    with pytest.raises(ValueError, match=rf"stages\[0\]\.quantities\[3\]\.{field} is (nan|inf|-inf)"):
        samples.checked(comparison)


def test_a_prediction_says_what_sets_each_band_edge_and_where_poles_and_zeros_lie() -> None:
    stage = samples.predicted()["stages"][0]
    low, high = stage["band_edges"]
    assert (low["quantity"], low["kind"], low["estimate"], low["miller"]) == (
        "fL",
        "short-circuit",
        21.01,
        None,
    )
    assert [row["capacitor"] for row in low["time_constants"]] == ["CS", "CIN"]
    assert [row["capacitor"] for row in high["time_constants"]] == ["CL", "CX", "CB"]
    assert high["time_constants"][1]["resistance"] is None
    assert high["time_constants"][2]["share"] == -0.2
    real, pair, growing = stage["poles"]
    assert real == {"frequency": 5.87, "pair": False, "q": None, "half_plane": "left"}
    assert pair == {"frequency": 41.2e3, "pair": True, "q": 2.134, "half_plane": "left"}
    assert growing["half_plane"] == "right"
    notch = stage["zeros"][2]
    assert notch == {"frequency": 50.0, "pair": True, "q": None, "half_plane": "axis"}
    assert len(stage["hidden_poles"]) == 1
    setters = samples.checked(samples.CLEAN)["stages"][0]["band_edges"]
    assert setters[0] == {"quantity": "fL", "set_by": "CS", "share": 0.8432}


def test_a_gap_margin_or_frequency_that_is_not_finite_is_refused() -> None:
    nan = float("nan")
    row = replace(samples.CLEAN.quantities[0], gap=Gap(nan))
    transistor = replace(samples.CLEAN.transistors[0], margin=nan)
    for comparison in (
        replace(samples.CLEAN, quantities=(row,)),
        replace(samples.CLEAN, transistors=(transistor,)),
        replace(samples.CLEAN, mid_band=MidBandRow(nan, "stated")),
        replace(samples.CLEAN, seconds=nan),
    ):
        with pytest.raises(ValueError, match="finite"):
            samples.checked(comparison)
    signals = (("d", complex(nan, 0.0)),)
    prediction = replace(samples.PREDICTION, node_signals=signals)
    with pytest.raises(ValueError, match=r"nodes\[2\]\.signal is nan"):
        samples.predicted(replace(samples.PREDICTED, prediction=prediction))


def test_a_complex_value_is_refused_with_its_place() -> None:
    row = replace(samples.CLEAN.quantities[0], hand=1 + 2j)
    with pytest.raises(TypeError, match=r"quantities\[0\]\.hand is a complex"):
        samples.checked(replace(samples.CLEAN, quantities=(row,)))


def test_a_document_that_was_spoiled_later_is_not_written() -> None:
    document = samples.checked(samples.CLEAN)
    document["stages"][0]["seconds"] = float("nan")
    with pytest.raises(ValueError, match="not JSON compliant"):
        dump(document)


def test_json_is_stable_pretty_and_readable() -> None:
    text = dump(samples.checked())
    assert text == dump(json.loads(text))
    assert text.startswith('{\n  "schema": "deckgen.check/1",\n')
    assert text.endswith("}\n")
    assert '"unit": "Ω"' in text


@given(strategies.texts)
def test_json_text_holds_no_character_that_a_terminal_acts_on(text: str) -> None:
    document = samples.checked(replace(samples.REFUSED, title=text, said=(text,)))
    written = dump(document)
    active = {c for c in written if unicodedata.category(c) in ("Cc", "Cf", "Cs", "Zl", "Zp")}
    assert active <= {"\n"}
    assert json.loads(written)["stages"][0]["title"] == text
