"""Rendering: what a deck holds, and that no text of a stage can add a card to it."""

from __future__ import annotations

import dataclasses
import itertools
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from deckgen.circuit.model import Circuit, Mosfet
from deckgen.circuit.netlist import pins_of_nodes
from deckgen.circuit.reader import read_flat
from deckgen.errors import InputError
from deckgen.render.engine import render, render_runnable
from deckgen.render.starter import starter_stage_file
from deckgen.stage.model import Conditions, Stage
from deckgen.stage.read import stage_from_text
from deckgen.stage.topology import Polarity, Topology, list_topologies, load_topology
from deckgen.units import kelvin
from tests.unit import variants

COMMON_SOURCE = load_topology("common-source")
FOLLOWER = load_topology("source-follower")

every_starter = pytest.mark.parametrize(
    ("name", "polarity"), list(itertools.product(list_topologies(), ["n", "p"]))
)


def starter(topology: Topology = COMMON_SOURCE, polarity: Polarity = "n") -> Stage:
    return variants.starter(topology.name, polarity)


def without(stage: Stage, *names: str) -> Stage:
    return dataclasses.replace(stage, parts=tuple(p for p in stage.parts if p.name not in names))


def with_bulk_at_source(stage: Stage) -> Stage:
    (m1,) = stage.transistors
    return dataclasses.replace(stage, transistors=(dataclasses.replace(m1, bulk="source"),))


def circuit_of(stage: Stage, topology: Topology = COMMON_SOURCE) -> Circuit:
    return read_flat(render(stage, topology))


def pins(circuit: Circuit, name: str) -> tuple[str, ...]:
    return circuit.element(name).nodes


def cards(deck: str) -> list[str]:
    """The lines of a deck that are no comments."""
    return [line for line in deck.split("\n") if line and not line.startswith("*")]


@every_starter
def test_every_value_of_the_stage_arrives_in_the_circuit_unchanged(name: str, polarity: Polarity) -> None:
    topology = load_topology(name)
    stage = starter(topology, polarity)
    circuit = circuit_of(stage, topology)
    for part in stage.parts:
        element = circuit.element(part.name)
        assert getattr(element, "value", getattr(element, "dc", None)) == part.value
    (m1,), (card,) = stage.transistors, circuit.models
    drawn = circuit.element("m1")
    assert isinstance(drawn, Mosfet)
    assert (drawn.w, drawn.l, drawn.m) == (m1.w, m1.l, m1.m)
    assert card.kind == f"{polarity}mos"
    expected = {key.lower(): value for key, value in stage.models[0].parameters}
    assert dict(card.parameters) == {"level": 1.0, **expected}


@every_starter
def test_areas_perimeters_and_squares_arrive_where_they_are_stated_and_nowhere_else(
    name: str, polarity: Polarity
) -> None:
    topology = load_topology(name)
    stage = starter(topology, polarity)
    (m1,) = stage.transistors
    geometry = (("AD", 4e-11), ("AS", 5e-11), ("PD", 4.4e-5), ("PS", 5.5e-5), ("NRD", 0.5), ("NRS", 2.0))
    more = dataclasses.replace(stage, transistors=(dataclasses.replace(m1, geometry=geometry),))
    drawn = circuit_of(more, topology).element("m1")
    assert isinstance(drawn, Mosfet)
    assert (drawn.ad, drawn.as_, drawn.pd, drawn.ps) == (4e-11, 5e-11, 4.4e-5, 5.5e-5)
    assert (drawn.nrd, drawn.nrs) == (0.5, 2.0)
    assert " AD=" not in render(stage, topology)


def test_an_n_channel_common_source_stands_on_ground() -> None:
    circuit = circuit_of(starter())
    assert pins(circuit, "M1") == ("d", "g", "s", "0")
    assert pins(circuit, "RD") == ("vdd", "d")
    assert pins(circuit, "RS") == pins(circuit, "CS") == ("s", "0")


def test_a_p_channel_common_source_hangs_from_the_supply() -> None:
    circuit = circuit_of(starter(polarity="p"))
    assert pins(circuit, "M1") == ("d", "g", "s", "vdd")
    assert pins(circuit, "RD") == ("0", "d")
    assert pins(circuit, "RS") == pins(circuit, "CS") == ("s", "vdd")
    assert circuit.element("VDD").nodes == ("vdd", "0")


@pytest.mark.parametrize(("polarity", "drain", "rail"), [("n", "vdd", "0"), ("p", "0", "vdd")])
def test_a_follower_has_its_drain_at_one_rail_and_its_resistor_at_the_other(
    polarity: Polarity, drain: str, rail: str
) -> None:
    circuit = circuit_of(starter(FOLLOWER, polarity), FOLLOWER)
    assert pins(circuit, "M1") == (drain, "g", "s", rail)
    assert pins(circuit, "RS") == ("s", rail)


@pytest.mark.parametrize(("polarity", "rail"), [("n", "0"), ("p", "vdd")])
def test_without_a_source_resistor_the_source_is_at_the_rail(polarity: Polarity, rail: str) -> None:
    circuit = circuit_of(without(starter(polarity=polarity), "RS", "CS"))
    assert pins(circuit, "M1") == ("d", "g", rail, rail)


@every_starter
def test_a_bulk_tied_to_the_source_is_at_the_node_of_the_source(name: str, polarity: Polarity) -> None:
    topology = load_topology(name)
    *_, source, bulk = pins(circuit_of(with_bulk_at_source(starter(topology, polarity)), topology), "M1")
    assert bulk == source


@every_starter
def test_without_a_coupling_capacitor_the_transistor_is_at_the_output(name: str, polarity: Polarity) -> None:
    topology = load_topology(name)
    stage = without(starter(topology, polarity), "COUT", "RL")
    circuit = circuit_of(stage, topology)
    assert "out" in pins(circuit, "M1")
    assert pins(circuit, "CL") == ("out", "0")


@pytest.mark.parametrize(("name", "polarity", "parts"), list(variants.variants()))
def test_a_deck_has_the_parts_of_its_stage_and_no_others(
    name: str, polarity: Polarity, parts: tuple[str, ...]
) -> None:
    topology = load_topology(name)
    circuit = circuit_of(variants.variant(name, polarity, parts), topology)
    assert {element.name for element in circuit.elements} == {*map(str.lower, parts), "vsig", "m1"}
    assert pins(circuit, "VSIG") == ("sig" if "RSIG" in parts else "in", "0")
    assert set(circuit.nodes) <= set(topology.nodes)
    assert all(len(found) > 1 for found in pins_of_nodes(circuit).values())


DEGENERATED = "common-source-degenerated"
FEEDBACK = "common-source-drain-feedback"
CURRENT = "common-source-current-bias"
GATE = "common-gate"
DIODE = "diode-connected"
DIVIDED = "VDD RSIG CIN RG R1 R2 RD ISS CS COUT RL"
FED_BY_CURRENT = "VDD RSIG CIN R1 R2 CG RD ISS"

# Topology, parts (empty: those of the starter), then pins of some parts for n and for p channel.
CONNECTED: list[tuple[str, str, dict[str, tuple[str, str]]]] = [
    (DEGENERATED, "", {"M1": ("d g s 0", "d g s vdd"), "RD": ("vdd d", "0 d"), "RS1": ("s tap", "s tap")}),
    (DEGENERATED, "", {"RS2": ("tap 0", "tap vdd"), "CS": ("tap 0", "tap vdd")}),
    (DEGENERATED, "VDD CIN R1 R2 RD RS1", {"RS1": ("s 0", "s vdd"), "RD": ("vdd out", "0 out")}),
    (FEEDBACK, "", {"M1": ("d g s 0", "d g s vdd"), "RS": ("s 0", "s vdd"), "RD": ("vdd d", "0 d")}),
    (FEEDBACK, "", {"RG": ("mid g", "mid g"), "RG2": ("d mid", "d mid"), "CF": ("mid 0", "mid 0")}),
    (FEEDBACK, "VDD CIN RG RD", {"RG": ("out g", "out g"), "M1": ("out g 0 0", "out g vdd vdd")}),
    (CURRENT, "", {"M1": ("d g s vss", "d g s vdd"), "RG": ("0 g", "0 g"), "VSS": ("vss 0", "vss 0")}),
    (CURRENT, "", {"ISS": ("s vss", "vdd s"), "CS": ("s vss", "s vdd"), "RD": ("vdd d", "vss d")}),
    (CURRENT, DIVIDED, {"RG": ("b g", "b g"), "R1": ("vdd b", "vdd b"), "R2": ("b 0", "b 0")}),
    (CURRENT, DIVIDED, {"M1": ("d g s 0", "d g s vdd"), "ISS": ("s 0", "vdd s"), "RD": ("vdd d", "0 d")}),
    (GATE, "", {"M1": ("d g s 0", "d g s vdd"), "CIN": ("in s", "in s"), "CG": ("g 0", "g 0")}),
    (GATE, "", {"RS": ("s 0", "s vdd"), "RD": ("vdd d", "0 d")}),
    (GATE, FED_BY_CURRENT, {"ISS": ("s 0", "vdd s"), "RD": ("vdd out", "0 out")}),
    (DIODE, "", {"M1": ("d d 0 0", "d d vdd vdd"), "RB": ("vdd d", "0 d"), "CIN": ("in d", "in d")}),
    (DIODE, "VDD RSIG CIN IB", {"M1": ("out out 0 0", "out out vdd vdd"), "IB": ("vdd out", "out 0")}),
]


@pytest.mark.parametrize("polarity", ["n", "p"])
@pytest.mark.parametrize(("name", "parts", "wanted"), CONNECTED)
def test_parts_are_connected_as_the_description_says(
    name: str, parts: str, wanted: dict[str, tuple[str, str]], polarity: Polarity
) -> None:
    topology = load_topology(name)
    names = tuple(parts.split()) or tuple(part.name for part in starter(topology, polarity).parts)
    circuit = circuit_of(variants.variant(name, polarity, names), topology)
    index = 0 if polarity == "n" else 1
    assert {part: " ".join(pins(circuit, part)) for part in wanted} == {
        part: nodes[index] for part, nodes in wanted.items()
    }


def test_notes_say_what_the_stage_declares() -> None:
    stage = starter()
    notes = [line for line in render(stage, COMMON_SOURCE).split("\n") if line.startswith("* deckgen:")]
    assert notes == [
        "* deckgen: input VSIG",
        "* deckgen: output out",
        "* deckgen: source-resistance RSIG",
        "* deckgen: load RL",
        "* deckgen: frequency 3000",
        "* deckgen: amplitude 0.01",
        "* deckgen: region M1 saturation",
    ]


def test_resistors_that_are_not_there_are_not_declared() -> None:
    deck = render(without(starter(), "RSIG", "COUT", "RL"), COMMON_SOURCE)
    assert "source-resistance" not in deck
    assert "deckgen: load" not in deck


def test_a_deck_names_its_origin_without_folder_or_date() -> None:
    stage = dataclasses.replace(starter(), file="/some/where/amplifier.toml")
    deck = render(stage, COMMON_SOURCE)
    title, origin, *_ = deck.split("\n")
    assert title == f"* {stage.title}"
    assert origin.startswith("* from amplifier.toml, topology common-source, by deckgen ")
    assert "/some/where" not in deck


def test_rendering_twice_gives_the_same_deck() -> None:
    assert render(starter(), COMMON_SOURCE) == render(starter(), COMMON_SOURCE)


def test_temperatures_are_printed_in_degrees_without_the_noise_of_the_conversion() -> None:
    stage = dataclasses.replace(starter(), conditions=Conditions(kelvin(27.1), kelvin(40.1)))
    lines = render(stage, COMMON_SOURCE).split("\n")
    assert ".temp 27.1" in lines
    assert ".options reltol=1e-06 vntol=1e-09 abstol=1e-15 tnom=40.1" in lines


def test_a_deck_without_analyses_holds_no_dot_card_but_model_options_temp_end() -> None:
    dots = {card.split()[0] for card in cards(render(starter(), COMMON_SOURCE)) if card.startswith(".")}
    assert dots == {".model", ".options", ".temp", ".end"}


def test_a_runnable_deck_asks_for_the_operating_point_and_the_gain() -> None:
    runnable = cards(render_runnable(starter(), COMMON_SOURCE))
    added = [card for card in runnable if card not in cards(render(starter(), COMMON_SOURCE))]
    assert added == [".op", ".ac dec 5 1 100meg", ".print ac vdb(out) vp(out)"]


# --- no text adds a card -------------------------------------------------------

BREAKS = ["\n", "\r", "\v", "\f", "\x1c", "\x85", "\u2028", "\u2029", "\0", "\x7f", "\u202e"]
texts = st.text(st.one_of(st.characters(), st.sampled_from([*BREAKS, "*", ".", "+", "\\", "{", "}", "%"])))


@given(texts, texts)
def test_no_title_or_file_name_adds_or_changes_a_card(title: str, file: str) -> None:
    plain = render(starter(), COMMON_SOURCE)
    try:
        deck = render(dataclasses.replace(starter(), title=title, file=file), COMMON_SOURCE)
    except InputError:
        return
    assert cards(deck) == cards(plain)
    assert len(deck.splitlines()) == len(plain.splitlines())


@given(texts)
def test_no_name_of_a_part_a_model_or_a_node_adds_a_card(name: str) -> None:
    stage, count = starter(), len(cards(render(starter(), COMMON_SOURCE)))
    (m1,), (model,) = stage.transistors, stage.models
    signal = dataclasses.replace(stage.signal, output=name)
    for changed in (
        dataclasses.replace(stage, parts=(*stage.parts, dataclasses.replace(stage.parts[0], name=name))),
        dataclasses.replace(
            stage,
            models=(dataclasses.replace(model, name=name),),
            transistors=(dataclasses.replace(m1, model=name),),
        ),
        dataclasses.replace(
            stage, models=(dataclasses.replace(model, parameters=((name, 1.0), *model.parameters[1:])),)
        ),
        dataclasses.replace(stage, signal=signal),
    ):
        try:
            deck = render_runnable(changed, COMMON_SOURCE)
        except InputError:
            continue
        assert len(cards(deck)) == count + 3
        assert len(deck.splitlines()) == len(deck.split("\n")) - 1


@pytest.mark.parametrize("char", BREAKS)
def test_a_line_break_or_control_character_is_refused_by_key(char: str) -> None:
    stage = dataclasses.replace(starter(), title=f"Amplifier{char}.include secrets")
    with pytest.raises(
        InputError, match=r"^starter\.toml: title: found .*, expected text without line breaks"
    ):
        render(stage, COMMON_SOURCE)


def test_a_card_in_a_title_stays_a_comment() -> None:
    for title in (".include secrets.cir", "+ R9 vdd 0 1", "*# shell true", ".control", "VDD vdd 0 99"):
        first = render(dataclasses.replace(starter(), title=title), COMMON_SOURCE).split("\n")[0]
        assert first == f"* {title}"


@pytest.mark.parametrize("char", ["x", "Ω", "漢", "\N{GRINNING FACE}"])
def test_a_long_title_is_cut_below_the_length_at_which_ngspice_aborts(char: str) -> None:
    deck = render(dataclasses.replace(starter(), title=char * 1000), COMMON_SOURCE)
    first = deck.split("\n")[0]
    assert first.endswith(f"{char}…")
    assert 470 < len(first.encode()) < 505


def test_a_template_expression_in_a_title_is_printed_as_it_stands() -> None:
    deck = render(dataclasses.replace(starter(), title="{{ 7 * 7 }} {% set x = 1 %}"), COMMON_SOURCE)
    assert deck.startswith("* {{ 7 * 7 }} {% set x = 1 %}\n")


def test_all_faults_of_a_stage_are_named_together() -> None:
    stage = starter()
    broken = dataclasses.replace(
        stage,
        title="a\nb",
        parts=(*stage.parts[1:], dataclasses.replace(stage.parts[0], value=float("nan"))),
        transistors=(dataclasses.replace(stage.transistors[0], model="NOPE"),),
    )
    with pytest.raises(InputError) as caught:
        render(broken, COMMON_SOURCE)
    assert [fault.where for fault in caught.value.faults] == ["title", "parts.VDD", "transistors.M1.model"]


# --- a user's own templates ----------------------------------------------------


def own_template(folder: Path, body: str) -> None:
    frame = '{% extends "frame.cir.j2" %}{% block circuit %}' + body + "{% endblock %}"
    (folder / "common-source.cir.j2").write_text(frame)


@pytest.fixture
def folder(tmp_path: Path, project: Path) -> Path:
    (tmp_path / "frame.cir.j2").write_text((project / "templates/frame.cir.j2").read_text())
    return tmp_path


def test_a_template_may_come_from_another_folder(folder: Path) -> None:
    own_template(folder, "RX in 0 {{ parts.RD }}\n")
    assert "RX in 0 10000" in cards(render(starter(), COMMON_SOURCE, templates=folder))


@pytest.mark.parametrize(
    ("body", "message"),
    [
        ("{{ parts.NOPE }}", "UndefinedError"),
        ("{{ nope }}", "UndefinedError"),
        ("{{ 1 / 0 }}", "ZeroDivisionError"),
        ("{{ parts.RD + 1 }}", "TypeError"),
        ("{{ parts.__class__.__mro__ }}", "SecurityError"),
        ("{% include '../secret.txt' %}", "TemplateNotFound"),
        ("{% for i in range(10000000) %}x{% endfor %}", "OverflowError"),
    ],
)
def test_a_template_that_fails_or_reaches_out_is_refused(folder: Path, body: str, message: str) -> None:
    (folder.parent / "secret.txt").write_text("secret")
    own_template(folder, body)
    with pytest.raises(InputError, match=rf"^common-source\.cir\.j2: found {message}"):
        render(starter(), COMMON_SOURCE, templates=folder)


def test_a_template_with_a_fault_in_its_syntax_names_the_line(folder: Path) -> None:
    own_template(folder, "\n\n{% if %}")
    with pytest.raises(InputError, match=r"^common-source\.cir\.j2: line 3: found TemplateSyntaxError"):
        render(starter(), COMMON_SOURCE, templates=folder)


# --- starters --------------------------------------------------------------------


@every_starter
def test_a_starter_reads_back_with_the_values_of_its_topology(name: str, polarity: Polarity) -> None:
    topology = load_topology(name)
    stage = starter(topology, polarity)
    values = topology.starter(polarity)
    assert values is not None
    assert stage.title == values.title
    assert {part.name for part in stage.parts} == {part for part, _ in values.parts}
    assert [model.polarity for model in stage.models] == [polarity]
    assert stage.signal.amplitude is not None
    assert stage.signal.frequency is not None


@every_starter
def test_the_lines_offered_by_a_starter_read_back_once_uncommented(name: str, polarity: Polarity) -> None:
    topology = load_topology(name)
    text = starter_stage_file(topology, polarity)
    fixed, offered = text.split("# What else", maxsplit=1)
    lines = [line.removeprefix("#").removeprefix(" ") for line in offered.split("\n")[1:]]
    stage = stage_from_text(fixed + "\n".join(lines), file="starter.toml")
    assert stage.claims
    assert stage.known_gaps
    assert stage.ratings
    assert stage.tolerances
    assert stage.wanted == ("ID(M1)", "gm(M1)", "Av")


def test_a_starter_takes_a_title_of_ones_own() -> None:
    text = starter_stage_file(COMMON_SOURCE, "n", title='The "second" \\ stage, 10 kΩ')
    assert stage_from_text(text, file="x.toml").title == 'The "second" \\ stage, 10 kΩ'


def test_a_starter_refuses_a_title_of_two_lines() -> None:
    with pytest.raises(InputError, match="title: found"):
        starter_stage_file(COMMON_SOURCE, "n", title="one\ntwo")


def test_a_topology_without_a_starter_of_that_polarity_says_which_it_has() -> None:
    only_n = dataclasses.replace(COMMON_SOURCE, starters=COMMON_SOURCE.starters[:1])
    with pytest.raises(InputError, match=r"common-source\.toml: starter\.p: found nothing, expected n"):
        starter_stage_file(only_n, "p")
