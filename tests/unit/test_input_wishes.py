"""What is shown and taken of an input: the rows of its gains, units of signals, wishes, findings."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import pytest

from deckgen.assumptions import assumptions_made
from deckgen.circuit.model import VoltageSource
from deckgen.circuit.ports import Ports
from deckgen.circuit.reader import read_flat
from deckgen.compare import is_repeated, is_wanted
from deckgen.errors import Fault, InputError
from deckgen.findings.bias import device_findings
from deckgen.findings.graph import graph_findings
from deckgen.hand.predict import predict
from deckgen.hand.prediction import How, MidBand, Prediction
from deckgen.intake import Taken, take_in
from deckgen.pipeline import analyse_taken
from deckgen.report.document import predict_document
from deckgen.report.predict_sheet import stage_blocks
from deckgen.stage.read import stage_from_text
from tests.unit.circuits import Values, ports_of, stage
from tests.unit.report_samples import PREDICTED

TEMPLATES = Path(__file__).parent / "data" / "templates"
PAPER = assumptions_made("paper")

# --- what is shown ---

AMP = """\
format = 1
deck = "x.cir"
{}
"""


def taken(deck: str, folder: Path, more: str = "") -> Taken:
    (folder / "x.cir").write_text(deck, encoding="utf-8")
    (folder / "x.toml").write_text(AMP.format(more), encoding="utf-8")
    (one,) = take_in([folder / "x.toml"], flattener=lambda _: ())
    if not isinstance(one, Taken):
        raise one
    return one


COMMON_SOURCE = """a stage
VDD vdd 0 12
{}
CIN in g 1u
R1 vdd g 1meg
R2 g 0 300k
RD vdd out 4.7k
RS s 0 1k
M1 out g s 0 NM W=50u L=2u
.model NM NMOS (LEVEL=1 VTO=1 KP=100u)
.end
"""
VOLTAGE = COMMON_SOURCE.format("VIN e 0 AC 1\nRSIG e in 1k")
CURRENT = COMMON_SOURCE.format("IIN 0 in AC 1\nRSIG in 0 50k")


@pytest.mark.parametrize(
    ("deck", "more", "repeated"),
    [
        (VOLTAGE, "", True),
        (VOLTAGE, '[signal]\nsource_resistance = "RSIG"', False),
        (VOLTAGE, '[wanted]\nquantities = ["Avi"]', False),
        (VOLTAGE, "[claims]\nAvi = -3", False),
        (VOLTAGE, '[tolerance]\nAvi = "0.5 dB"', False),
        (VOLTAGE, '[known_gap.Avi]\nreason = "x"\nlimit = "1 dB"\nuntil = 2030-01-01', False),
        (CURRENT, "", False),
        (CURRENT, '[signal]\nsource_resistance = "RSIG"', False),
    ],
)
def test_the_gain_from_the_input_node_is_left_out_where_it_only_repeats_the_gain(
    deck: str, more: str, repeated: bool, tmp_path: Path
) -> None:
    stage = taken(deck, tmp_path, more).stage
    assert is_repeated("Avi", stage) is repeated
    assert is_wanted("Avi", stage) is not repeated
    assert not is_repeated("Av", stage)


def test_a_list_of_what_is_wanted_has_the_last_word(tmp_path: Path) -> None:
    more = '[signal]\nsource_resistance = "RSIG"\n[wanted]\nquantities = ["Av"]'
    stage = taken(VOLTAGE, tmp_path, more).stage
    assert (is_wanted("Avi", stage), is_wanted("Av", stage)) == (False, True)


def test_signals_are_shown_per_volt_of_emf_or_per_ampere() -> None:
    for unit, heading, size in (("V", "signal per\nvolt of EMF", "V/V"), ("A", "signal per\nampere", "Ω")):
        document = predict_document([replace(PREDICTED, input_unit=unit)])
        (described,) = document["stages"]
        assert described["input_unit"] == unit
        (nodes,) = [
            block for block in stage_blocks(described)
            if getattr(block, "columns", ())[:1] and block.columns[0].heading == "node"
        ]  # fmt: skip
        assert nodes.columns[2].heading == heading
        assert nodes.rows[1].cells[2].endswith(size)


def test_a_stage_knows_the_unit_of_its_input(tmp_path: Path) -> None:
    assert taken(VOLTAGE, tmp_path).stage.signal.unit == "V"
    assert taken(CURRENT, tmp_path).stage.signal.unit == "A"
    both = VOLTAGE.replace("RSIG e in 1k", "RSIG e in 1k\nIX 0 in 0")
    assert taken(both, tmp_path, '[signal]\ninput = "ix"').stage.signal.unit == "A"


def test_a_deck_with_a_current_as_its_input_has_a_signal_path(tmp_path: Path) -> None:
    found = taken(CURRENT, tmp_path, '[signal]\nsource_resistance = "RSIG"')
    assert found.ports == Ports("iin", "out", "rsig")
    assert [one.slug for one in found.findings] == []
    gain = analyse_taken(found).prediction.value("Rm")
    assert gain is not None
    assert gain.how is How.CLOSED_FORM


# --- wishes that do not fit the input ---

WISHES = {
    "wanted.quantities": '[wanted]\nquantities = ["{}", "Rin"]',
    "claims": "[claims]\n{} = {{ at_most = -20 }}",
    "tolerance": '[tolerance]\n{} = "0.5 dB"',
    "known_gap": '[known_gap.{}]\nreason = "x"\nlimit = "1 dB"\nuntil = 2030-01-01',
}


def faults(deck: str, more: str, folder: Path) -> list[Fault]:
    with pytest.raises(InputError) as caught:
        taken(deck, folder, more)
    return list(caught.value.faults)


@pytest.mark.parametrize("place", WISHES)
def test_a_wish_for_the_gain_of_the_other_kind_of_source_names_the_right_one(
    place: str, tmp_path: Path
) -> None:
    (fault,) = faults(CURRENT, WISHES[place].format("Av"), tmp_path)
    assert fault.where.startswith(place)
    assert fault.found == '"Av"'
    assert fault.expected == "Rm: the input IIN is a current source, so its gain is in Ω"
    (fault,) = faults(VOLTAGE, WISHES[place].format("Rm"), tmp_path)
    assert fault.expected == "Av: the input VIN is a voltage source, so its gain is in V/V"


@pytest.mark.parametrize(
    ("deck", "name", "right"), [(CURRENT, "Av.phase", "Rm"), (VOLTAGE, "Rm.phase", "Av")]
)
def test_the_same_goes_for_its_phase(deck: str, name: str, right: str, tmp_path: Path) -> None:
    (fault,) = faults(deck, WISHES["wanted.quantities"].format(name), tmp_path)
    assert fault.expected.startswith(f"{right}.phase: ")


def test_a_wish_for_the_gain_of_its_own_kind_is_taken(tmp_path: Path) -> None:
    for place, text in WISHES.items():
        assert taken(CURRENT, tmp_path, text.format("Rm")).stage.signal.unit == "A", place
        assert taken(VOLTAGE, tmp_path, text.format("Av")).stage.signal.unit == "V", place


def test_where_the_input_is_not_known_nothing_is_said_about_its_kind(tmp_path: Path) -> None:
    silent = VOLTAGE.replace("AC 1", "")
    assert taken(silent, tmp_path, '[wanted]\nquantities = ["Rm", "Av"]').ports is None


def test_a_topology_with_a_current_as_its_input_takes_the_same_wishes() -> None:
    text = (
        'format = 1\ntitle = "Pair"\ntopology = "pair"\nparts.VDD = "5 V"\nmodels.N1.polarity = "n"\n'
        'transistors.M1 = { model = "N1", W = "10u", L = "1u" }\n'
        'transistors.M2 = { model = "N1", W = "10u", L = "1u" }\n'
    )
    fine = stage_from_text(text + '[claims]\nRm = "-100k"\n', file="p.toml", templates=TEMPLATES)
    assert (fine.signal.unit, fine.claims[0].value) == ("A", pytest.approx(-1e5))
    with pytest.raises(InputError, match="expected Rm: the input ISIG is a current source"):
        stage_from_text(text + "[claims]\nAv = -100\n", file="p.toml", templates=TEMPLATES)


# --- findings ---


def test_guards_of_the_signal_speak_of_the_input_in_its_unit() -> None:
    device = replace(
        predict(stage(Values()), ports_of(Values()), assumptions=PAPER).transistors[0],
        v_ov=0.5, margin=1.0, i_d=1e-3, vgs_per_emf=10e3, vdg_per_emf=100e3, id_per_emf=150.0,
    )  # fmt: skip
    flat = MidBand(1e3, "stated", 0.0, None, None)
    prediction = Prediction((), (), (device,), (), flat, (), ())
    for unit, drive_, limit in (
        ("A", "20 µA input current", "10 µA input current"),
        ("V", "20 µV EMF", "10 µV"),
    ):
        found = {
            one.slug: one.text
            for one in device_findings(prediction, None, stated={}, amplitude=20e-6, unit=unit)
        }
        assert f"Stay below {limit}" in found["signal-too-large"]
        assert found["output-leaves-saturation"].startswith(f"at {drive_} M1 leaves")
        assert found["output-cuts-off"].startswith(f"at {drive_} the drain current")


BIASED = """t
VDD vdd 0 12
{}
R1 vdd g 1meg
R2 g 0 300k
RD vdd out 4.7k
RS s 0 1k
M1 out g s 0 NM W=50u L=2u
.model NM NMOS (LEVEL=1 VTO=1 KP=100u)
"""


@pytest.mark.parametrize(
    ("source", "told"),
    [
        ("IIN 0 g DC 1u AC 1", True),
        ("IIN 0 s DC 1u AC 1", True),
        ("IIN out s DC 1u AC 1", True),
        ("IIN 0 x DC 1u AC 1\nRX x 0 1k\nRY x g 1meg", True),
        ("IIN 0 g DC 0 AC 1", False),
        ("IIN 0 x DC 1u AC 1\nRX x 0 1k\nCX x g 1u", False),
        ("IIN 0 vdd DC 1u AC 1", False),
    ],
)
def test_a_direct_current_of_the_input_that_reaches_a_transistor_is_part_of_the_bias(
    source: str, told: bool
) -> None:
    found = graph_findings(read_flat(BIASED.format(source)))
    texts = [one.text for one in found if one.slug == "generator-current-in-bias"]
    assert [one.slug for one in found if one.slug.startswith("generator")] == [
        "generator-current-in-bias"
    ] * told
    if told:
        assert texts == ["IIN reaches M1 without a capacitor: its DC value, 1 µA, is part of the bias there"]


def test_only_the_stated_input_is_looked_at() -> None:
    circuit = read_flat(BIASED.format("IIN 0 g DC 1u AC 1\nIB 0 s DC 1u"))
    found = graph_findings(circuit, input_source="ib")
    assert [one.subject for one in found if one.slug.startswith("generator")] == ["IB"]
    assert isinstance(circuit.element("vdd"), VoltageSource)
