"""Stage files: what a good one gives, and that everything wrong with a bad one is said at once."""

from __future__ import annotations

import ast
import datetime
import json
import os
import time
import tomllib
from pathlib import Path
from typing import Any

import jsonschema
import pytest
from hypothesis import given
from hypothesis import strategies as st

from deckgen import assumptions, units
from deckgen.errors import ExitCode, Fault, InputError
from deckgen.stage import devices, expectations, faults, files, level1, read, topology
from deckgen.stage.faults import key_path, listed, nearest
from deckgen.stage.json_schema import schema_file, schema_text
from deckgen.stage.model import Claim, Conditions, HandSettings, KnownGap, Part, Rating, ToleranceRule
from deckgen.stage.read import read_stage, stage_from_text

DATA = Path(__file__).parent / "data"
TEMPLATES = DATA / "templates"
AMP = DATA / "stages" / "amp.toml"
BARE = DATA / "stages" / "bare.toml"
STAGE = AMP.read_text(encoding="utf-8")
PAIR = """\
format = 1
title = "Pair"
topology = "pair"
parts.VDD = "5 V"
models.N1.polarity = "n"
transistors.M2 = { model = "N1", W = "10u", L = "1u" }
transistors.M1 = { model = "N1", W = "10u", L = "1u" }
signal.amplitude = "1 µA"
"""


def edited(*edits: tuple[str, str]) -> str:
    """The stage with some of its text replaced, each piece where it stands once."""
    text = STAGE
    for old, new in edits:
        assert text.count(old) == 1, old
        text = text.replace(old, new)
    return text


def faults_of(text: str) -> tuple[Fault, ...]:
    with pytest.raises(InputError) as caught:
        stage_from_text(text, file="amp.toml", templates=TEMPLATES)
    return caught.value.faults


# --- what a good file gives ---


def test_a_stage_file_becomes_a_frozen_stage_in_si_units() -> None:
    stage = stage_from_text(STAGE, file="stages/amp.toml", templates=TEMPLATES)
    assert (stage.name, stage.file) == ("amp", "stages/amp.toml")
    assert (stage.title, stage.topology) == ("Sensor preamplifier", "one-device")
    assert [part.name for part in stage.parts] == ["VDD", "RSIG", "RD", "RS", "CS", "RL"]
    assert [part.value for part in stage.parts] == pytest.approx([12.0, 1e3, 4.7e3, 2e3, 1e-5, 47e3])
    (model,) = stage.models
    assert (model.name, model.polarity) == ("NA", "n")
    assert dict(model.parameters) == pytest.approx(
        {"VTO": 0.8, "KP": 1.2e-4, "TOX": 2e-8, "LAMBDA": 0.02, "LD": 1e-7}
    )
    (transistor,) = stage.transistors
    assert (transistor.name, transistor.model) == ("M1", "NA")
    assert (transistor.w, transistor.l, transistor.m) == pytest.approx((1e-4, 2e-6, 2.0))
    assert (transistor.region, transistor.bulk) == ("saturation", "source")
    assert (stage.signal.input, stage.signal.output) == ("VSIG", "out")
    assert (stage.signal.source_resistance, stage.signal.load) == ("RSIG", "RL")
    assert (stage.signal.frequency, stage.signal.amplitude) == pytest.approx((1e4, 1e-2))
    assert stage.conditions == Conditions(temperature=358.15, tnom=298.15)
    assert stage.hand == HandSettings("full", ("no-body-effect",), ())
    assert hash(stage)


def test_a_card_may_state_doping_resistances_and_junctions_and_a_transistor_its_areas() -> None:
    card = """NSUB = "1e15 1/cm³"
NSS = 1e10
TPG = -1
RD = "20 Ω"
RS = 15
RSH = "30"
IS = "1f"
JS = "10 µA/m²"
CBD = "0.2 pF"
CBS = "0.2p"
CJ = "0.1 mF/m²"
MJ = 0.4
CJSW = "0.3 nF/m"
MJSW = 0.33
PB = "0.7 V"
FC = 0.4
"""
    size = 'AD = "40p"\nAS = "4e-11 m²"\nPD = "44 µm"\nPS = "44u"\nNRD = 0.5\nNRS = 2\n'
    stage = stage_from_text(
        edited(('LAMBDA = "20m"\n', card), ("M = 2\n", f"M = 2\n{size}")), file="a.toml", templates=TEMPLATES
    )
    stated = dict(stage.models[0].parameters)
    assert {name: stated[name] for name in card.split() if name in stated} == pytest.approx(
        {
            "NSUB": 1e15, "NSS": 1e10, "TPG": -1.0, "RD": 20.0, "RS": 15.0, "RSH": 30.0, "IS": 1e-15,
            "JS": 1e-5, "CBD": 2e-13, "CBS": 2e-13, "CJ": 1e-4, "MJ": 0.4, "CJSW": 3e-10, "MJSW": 0.33,
            "PB": 0.7, "FC": 0.4,
        }
    )  # fmt: skip
    assert dict(stage.transistors[0].geometry) == pytest.approx(
        {"AD": 4e-11, "AS": 4e-11, "PD": 4.4e-5, "PS": 4.4e-5, "NRD": 0.5, "NRS": 2.0}
    )
    assert stage_from_text(STAGE, file="a.toml", templates=TEMPLATES).transistors[0].geometry == ()


def test_expectations_are_read_in_the_unit_of_their_quantity() -> None:
    stage = stage_from_text(STAGE, file="amp.toml", templates=TEMPLATES)
    assert stage.tolerances == (
        ToleranceRule("gm", relative=0.03),
        ToleranceRule("Av", absolute=0.1, db=0.5),
        ToleranceRule("VGS(M1)", absolute=0.01),
        ToleranceRule("Av.phase", absolute=2.0),
    )
    assert stage.claims == (
        Claim("ID(M1)", "equals", 5e-4),
        Claim("Av", "within", -20.0, -10.0, ToleranceRule("Av", db=1.0)),
        Claim("Rin", "at_least", 1e5),
        Claim("V(out)", "at_most", 6.0),
    )
    assert stage.known_gaps == (
        KnownGap("Av", "the card's RS is left out", ToleranceRule("Av", db=3.0), datetime.date(2027, 6, 30)),
    )
    assert stage.ratings == (
        Rating("M1", "VDS", 60.0),
        Rating("M1", "ID", 0.2),
        Rating("RD", "P", 0.25),
        Rating("CS", "V", 16.0),
    )
    assert stage.wanted == ("ID", "gm(M1)", "Av")


def test_what_is_absent_takes_its_default() -> None:
    stage = read_stage(BARE, templates=TEMPLATES)
    assert stage.parts == (Part("VDD", 5.0), Part("RD", 1000.0))
    assert stage.conditions == Conditions(temperature=300.15, tnom=300.15)
    assert stage.hand == HandSettings("paper", (), ())
    assert (stage.transistors[0].m, stage.transistors[0].region, stage.transistors[0].bulk) == (
        1.0,
        None,
        "rail",
    )
    assert (stage.tolerances, stage.claims, stage.known_gaps, stage.ratings, stage.wanted) == (
        (),
        (),
        (),
        (),
        (),
    )


def test_a_declared_resistor_that_the_stage_lacks_is_not_declared() -> None:
    signal = read_stage(BARE, templates=TEMPLATES).signal
    assert (signal.input, signal.output) == ("VSIG", "out")
    assert (signal.source_resistance, signal.load) == (None, None)


def test_a_model_that_nobody_uses_is_no_fault() -> None:
    stage = read_stage(BARE, templates=TEMPLATES)
    assert [model.name for model in stage.models] == ["NA", "spare"]


def test_the_amplitude_of_a_current_source_is_a_current() -> None:
    stage = stage_from_text(PAIR, file="pair.toml", templates=TEMPLATES)
    assert stage.signal.amplitude == pytest.approx(1e-6)
    assert [transistor.name for transistor in stage.transistors] == ["M1", "M2"]


def test_a_supply_may_be_negative_and_the_input_may_have_no_offset() -> None:
    text = edited(('VDD = "12 V"', 'VDD = "-12 V"'))
    assert stage_from_text(text, file="amp.toml", templates=TEMPLATES).parts[0] == Part("VDD", -12.0)
    stage = stage_from_text(PAIR + "parts.ISIG = 0\n", file="pair.toml", templates=TEMPLATES)
    assert stage.parts[0].name == "ISIG"
    assert abs(stage.parts[0].value) < 1e-30


# --- several at once ---


def test_all_faults_of_a_file_come_together_in_the_order_of_the_file() -> None:
    text = edited(
        ('title = "Sensor preamplifier"', 'titel = "Sensor preamplifier"'),
        ('RD = "4k7"', 'RD = "1M"'),
        ("RS = 2000", "RS = -5"),
        ('polarity = "n"', 'polarity = "N"'),
        ('KP = "120u"', 'KP = "120 uF"'),
        ('model = "NA"\n', ""),
        ('L = "2 µm"', "L = true"),
        ('"25 °C"', '"-300"'),
        ('"no-body-effect"', '"no-body"'),
        ('gm = "3%"', "gm = 3"),
        ("at_least = ", "at_lest = "),
        ("until = 2027-06-30", "until = 2027"),
        ("[ratings.CS]", "[ratings.CX]"),
        ('"gm(m1)"', '"gm(m7)"'),
    )
    assert [fault.where for fault in faults_of(text)] == [
        "titel",
        "parts.RD",
        "parts.RS",
        "models.NA.polarity",
        "models.NA.KP",
        "transistors.M1.L",
        "transistors.M1.model",
        "conditions.tnom",
        "hand.add",
        "tolerance.gm",
        "claims.Rin.at_lest",
        "known_gap.Av.until",
        "ratings.CX",
        "wanted.quantities",
        "title",
    ]


def test_what_does_not_depend_on_the_topology_is_checked_without_one() -> None:
    text = edited(
        ('"one-device"', '"none"'),
        ('RD = "4k7"', 'RD = "1M"'),
        ('W = "100u"', "W = 0"),
        ("Rin = {", "Zin = {"),
    )
    assert [fault.where for fault in faults_of(text)] == [
        "topology",
        "parts.RD",
        "transistors.M1.W",
        "claims.Zin",
    ]


def test_every_number_of_a_claim_is_read_even_where_the_claim_is_not_one() -> None:
    text = edited(('{ at_least = "100k" }', '{ at_least = "1M", at_most = "5 V", tolerance = "3" }'))
    assert [fault.where for fault in faults_of(text)] == [
        "claims.Rin.tolerance",
        "claims.Rin.at_least",
        "claims.Rin.at_most",
        "claims.Rin",
    ]


def test_a_missing_transistor_is_missed_beside_the_unknown_one() -> None:
    found = faults_of(edited(("[transistors.M1]", "[transistors.T7]")))
    assert [(fault.where, fault.found) for fault in found] == [
        ("transistors.T7", '"T7"'),
        ("transistors.M1", "nothing"),
    ]


def test_a_part_without_a_usable_name_costs_one_fault_and_no_more() -> None:
    """Its rating, and what needs it, are not at fault as well."""
    (fault,) = faults_of(edited(("RS = 2000", "Rs = 2000")))
    assert (fault.where, fault.nearest) == ("parts.Rs", "RS")
    (fault,) = faults_of(edited(('CS = "10 µF"', 'cs = "10 µF"')))
    assert (fault.where, fault.nearest) == ("parts.cs", "CS")


def test_an_empty_file_misses_everything_that_is_needed() -> None:
    assert [fault.where for fault in faults_of("")] == [
        "format",
        "title",
        "topology",
        "parts",
        "models",
        "transistors",
    ]


def test_sections_of_the_wrong_shape_are_all_named() -> None:
    text = "format = []\ntitle = {}\ntopology = 3\nparts = 1\nmodels = [1]\n[[transistors]]\n[[signal]]\n"
    found = faults_of(text)
    assert [fault.where for fault in found] == [
        "format", "title", "topology", "parts", "models", "transistors", "signal",
    ]  # fmt: skip
    assert {fault.expected for fault in found[3:]} == {"a table"}


def test_faults_in_one_list_are_told_apart_by_what_was_found() -> None:
    found = faults_of(edited(("drop = []", 'drop = [5, "no-lambda", true]')))
    assert [(fault.where, fault.found) for fault in found] == [
        ("hand.drop", "5"),
        ("hand.drop", "true"),
        ("hand.drop", '"no-lambda"'),
    ]


def test_a_refused_file_ends_in_exit_code_two_with_a_line_a_fault() -> None:
    with pytest.raises(InputError) as caught:
        stage_from_text(
            edited(('RD = "4k7"', 'RD = "1M"'), ('"12 V"', '"0"')), file="amp.toml", templates=TEMPLATES
        )
    assert caught.value.exit_code is ExitCode.INPUT
    assert str(caught.value).splitlines() == [
        'amp.toml: parts.VDD: found "0", expected a supply other than zero',
        'amp.toml: parts.RD: found "1M", expected "1Meg" or "1m"'
        " (a capital M is mega to people, milli to SPICE)",
    ]


# --- before the keys: TOML and files ---

SYNTAX = [
    # text, where, part of found, part of expected, nearest
    ("format = 1\n[parts]\nRD = 4.7k\n", "line 3", '"RD = 4.7k"', "valid TOML", 'RD = "4.7k"'),
    ("[parts]\nCS = 10 µF # bypass\n", "line 2", "CS = 10 µF", "valid TOML", 'CS = "10 µF"'),
    ("[parts]\nR1 = 4k7\n", "line 2", "R1 = 4k7", "valid TOML", 'R1 = "4k7"'),
    ("[tolerance]\ngm = 3%\n", "line 2", "gm = 3%", "valid TOML", 'gm = "3%"'),
    ("title = Sensor\n", "line 1", "title = Sensor", "valid TOML", None),
    ('title = "Sensor\n', "line 1", "Sensor", "valid TOML", None),
    ('a = 1\nb = 2\na = "x"\n', "line 3", "a = ", "each key and table once", None),
    ("[parts]\n[models]\n[parts]\n", "line 3", "[parts]", "each key and table once", None),
    ("a = [1,\n", "end of the file", "Invalid value", "valid TOML", None),
    ("a = [\n" + ("[" * 400 + "\n") * 9, "", "nested too deeply", "two or three levels", None),
    ("a = 1\nb" + ".b" * 300 + " = 1\n", "line 2", "605 characters", "at most 500 characters", None),
    ("a = 2026-13-45\n", "line 1", "a = 2026-13-45", "valid TOML", None),
    ("a\x00 = 1\n", "line 1", "a\\u0000 = 1", "valid TOML", None),
]


@pytest.mark.parametrize(("text", "where", "found", "expected", "close"), SYNTAX, ids=lambda v: repr(v)[:20])
def test_a_text_that_is_no_toml_names_the_line(
    text: str, where: str, found: str, expected: str, close: str | None
) -> None:
    (fault,) = faults_of(text)
    assert fault.where == where
    assert found in fault.found
    assert expected in fault.expected
    assert fault.nearest == close


def test_a_number_of_thousands_of_digits_is_refused() -> None:
    text = "a = [\n" + "1_" + "\n".join(["1"]) + "]\n"
    assert faults_of(text)
    lines = edited(("RS = 2000", "RS = " + "9" * 400))
    (fault,) = faults_of(lines)
    assert (fault.where, fault.found) == ("parts.RS", "a huge whole number")


def refusal_of(path: Path) -> Fault:
    with pytest.raises(InputError) as caught:
        read_stage(path, templates=TEMPLATES)
    (fault,) = caught.value.faults
    assert fault.file == str(path)
    return fault


def test_a_missing_file_is_named_with_its_nearest_neighbour(tmp_path: Path) -> None:
    (tmp_path / "amp.toml").write_text(STAGE, encoding="utf-8")
    fault = refusal_of(tmp_path / "amq.toml")
    assert (fault.found, fault.expected, fault.nearest) == ("no such file", "a file", "amp.toml")
    assert refusal_of(tmp_path / "nowhere" / "amp.toml").nearest is None


def test_a_folder_a_pipe_and_a_device_are_no_files(tmp_path: Path) -> None:
    assert refusal_of(tmp_path).found == "a folder"
    os.mkfifo(tmp_path / "pipe")
    assert refusal_of(tmp_path / "pipe").found == "a device or pipe"
    assert refusal_of(Path("/dev/zero")).found == "a device or pipe"


def test_a_name_that_no_file_can_have_is_refused(tmp_path: Path) -> None:
    assert "null" in refusal_of(tmp_path / "a\0b").found
    assert refusal_of(tmp_path / ("x" * 300)).expected == "a file that can be read"


def test_a_file_beyond_one_mebibyte_is_refused(tmp_path: Path) -> None:
    path = tmp_path / "huge.toml"
    path.write_bytes(b"#\n" * (1 << 19))
    assert "title" in {fault.where for fault in faults_of_file(path)}
    path.write_bytes(b"#\n" * (1 << 19) + b"#")
    assert refusal_of(path).found == "more than 1 MiB"


def faults_of_file(path: Path) -> tuple[Fault, ...]:
    with pytest.raises(InputError) as caught:
        read_stage(path, templates=TEMPLATES)
    return caught.value.faults


def test_a_file_that_is_not_utf_8_names_the_line_and_the_way_out(tmp_path: Path) -> None:
    path = tmp_path / "latin.toml"
    path.write_bytes(STAGE.replace("Ω", "").encode("latin-1"))
    fault = refusal_of(path)
    assert fault.where == "line 10"
    assert fault.found == "byte 0xb5"
    assert fault.expected == "UTF-8 text (or u for µ, ohm for Ω)"


def test_a_byte_order_mark_and_windows_line_ends_do_not_matter(tmp_path: Path) -> None:
    path = tmp_path / "amp.toml"
    path.write_bytes(b"\xef\xbb\xbf" + STAGE.replace("\n", "\r\n").encode())
    assert read_stage(path, templates=TEMPLATES).title == "Sensor preamplifier"


def test_a_file_full_of_faults_is_refused_in_seconds(tmp_path: Path) -> None:
    path = tmp_path / "many.toml"
    path.write_text("".join(f"k{number} = 1\n" for number in range(20_000)), encoding="utf-8")
    begin = time.perf_counter()
    assert len(faults_of_file(path)) == 20_006
    assert time.perf_counter() - begin < 10.0


# --- any text at all ---

WORDS = st.sampled_from(
    [*STAGE.split(), "=", "[", "]", "{", "}", ",", "\n", "nan", "true", "-1", '"1M"', "'", "[["]
)


@given(
    st.lists(st.tuples(st.integers(0, len(STAGE.split("\n")) - 1), st.lists(WORDS, max_size=4)), max_size=4)
)
def test_a_stage_file_with_lines_changed_gives_a_stage_or_a_refusal(
    changes: list[tuple[int, list[str]]],
) -> None:
    lines = STAGE.split("\n")
    for number, words in changes:
        lines[number] = " ".join(words)
    try:
        stage = stage_from_text("\n".join(lines), file="amp.toml", templates=TEMPLATES)
    except InputError as refusal:
        found = [str(fault) for fault in refusal.faults]
        assert found
        assert all(line and "\n" not in line for line in found)
    else:
        assert hash(stage)


JSON_LIKE = st.recursive(
    st.booleans() | st.integers(-9, 9) | st.floats() | st.text(max_size=5) | st.just("M1"),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=5), inner, max_size=3),
    max_leaves=6,
)
PLACES = [(key,) for key in tomllib.loads(STAGE)] + [
    (key, inner) for key, table in tomllib.loads(STAGE).items() if isinstance(table, dict) for inner in table
]


@given(place=st.sampled_from(PLACES), value=JSON_LIKE)
def test_any_value_in_any_place_gives_a_stage_or_a_refusal(place: tuple[str, ...], value: Any) -> None:
    from deckgen.stage.schema import StageFile
    from deckgen.stage.shape import shaped

    table = tomllib.loads(STAGE)
    inner = table
    for key in place[:-1]:
        inner = inner[key]
    inner[place[-1]] = value
    noted = faults.Faults("amp.toml")
    devices.explain_parameters(table.get("models"), noted)
    given_file = shaped(StageFile, table, noted)
    read._stage(given_file, read._topology(given_file.topology, TEMPLATES, noted), noted)


# --- the published schema ---


def test_the_published_schema_is_the_one_the_models_give() -> None:
    assert schema_file().read_text(encoding="utf-8") == schema_text()


def as_json(table: dict[str, Any]) -> Any:
    return json.loads(json.dumps(table, default=datetime.date.isoformat))


def validator() -> jsonschema.Draft202012Validator:
    schema = json.loads(schema_file().read_text(encoding="utf-8"))
    jsonschema.Draft202012Validator.check_schema(schema)
    return jsonschema.Draft202012Validator(schema, format_checker=jsonschema.FormatChecker())


def test_every_stage_file_that_comes_along_validates_against_the_schema(project: Path) -> None:
    paths = sorted({AMP, BARE, *(project / "stages").glob("**/*.toml")})
    assert len(paths) >= 2
    for path in paths:
        validator().validate(as_json(tomllib.loads(path.read_text(encoding="utf-8"))))


@pytest.mark.parametrize(
    "edit",
    [
        ("format = 1", "format = 2"),
        ('title = "Sensor preamplifier"\n', ""),
        ('polarity = "n"\n', ""),
        ("[conditions]", "[condition]"),
        ("RS = 2000", "RS = true"),
        ('"saturation"', '"saturated"'),
        ("[models.NA]", '[models."N A"]'),
        ('LAMBDA = "20m"', 'KF = "20m"'),
        ('gm = "3%"', "gm = 3"),
        ("at_least = ", "at_lest = "),
        ('[-20, "-10"]', "[-20]"),
        ('["ID", "gm(m1)", "Av"]', "[]"),
        ("2027-06-30", '"soon"'),
    ],
    ids=lambda edit: edit[1] or f"without {edit[0]}",
)
def test_what_has_the_wrong_shape_fails_against_the_schema_too(edit: tuple[str, str]) -> None:
    assert faults_of(edited(edit))
    assert not validator().is_valid(as_json(tomllib.loads(edited(edit))))


def test_the_schema_says_what_every_key_means() -> None:
    schema = json.loads(schema_text())
    for name, section in schema["$defs"].items():
        for key, value in section["properties"].items():
            assert value.get("description"), f"{name}.{key}"


# --- small things ---


def test_the_nearest_spelling_is_the_same_in_another_case_first() -> None:
    assert nearest("rd", ["RDD", "RD"]) == "RD"
    assert nearest("Lambada", ["VTO", "LAMBDA"]) == "LAMBDA"
    assert nearest("xyz", ["VTO", "LAMBDA"]) is None
    assert nearest("a" * 1000, ["a" * 1000]) is None


def test_key_paths_are_written_as_toml_writes_them() -> None:
    assert key_path(("claims", "ID(M1)", "within")) == 'claims."ID(M1)".within'
    assert key_path(("parts", "a-b_C9")) == "parts.a-b_C9"


def test_choices_are_listed() -> None:
    assert listed(["a", "b"]) == "one of a, b"
    assert listed(["a"]) == "a"
    assert listed([]) == "nothing here"


def test_the_reading_path_loads_nothing_heavy_until_a_file_is_read() -> None:
    for module in (read, topology, faults, files, devices, expectations, level1, units, assumptions):
        tree = ast.parse(Path(module.__file__).read_text(encoding="utf-8"))
        names = {alias.name for node in tree.body if isinstance(node, ast.Import) for alias in node.names}
        names |= {node.module or "" for node in tree.body if isinstance(node, ast.ImportFrom)}
        heavy = ("pydantic", "quantiphy", "numpy", "scipy", "deckgen.stage.s", "deckgen.stage.fields")
        assert not [name for name in names if name.startswith(heavy)], module.__name__


def test_a_stage_file_is_read_in_two_milliseconds() -> None:
    read_stage(AMP, templates=TEMPLATES)
    best = 1.0
    for _ in range(100):
        begin = time.perf_counter()
        read_stage(AMP, templates=TEMPLATES)
        best = min(best, time.perf_counter() - begin)
    assert best < 2e-3
