"""What the findings about decks say of ngspice is what ngspice does: measured each time, with 39.3 first.

Independent: the program itself is the reference. Decks run as they are written, with deckgen's start-up file,
and with commands of the test behind them.
"""

from __future__ import annotations

import re
import shutil
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import pytest

from deckgen.circuit.reader import read_flat
from deckgen.comparison import Severity
from deckgen.findings import catalogue
from deckgen.findings.graph import bulk_findings, graph_findings, polarity_findings
from deckgen.findings.numbers import Place, trap_in
from deckgen.simulator import Simulator
from deckgen.simulator.flatten import flatten
from deckgen.simulator.job import Limits
from deckgen.simulator.run import prepare, start
from deckgen.source.deck import read_source
from tests.unit.deck_findings_cases import DATA, VOLTAGES

_VALUE = re.compile(r"^(\S+) = ([-+]?(?:[0-9.]+(?:e[-+]?\d+)?|inf|nan))", re.MULTILINE | re.IGNORECASE)


@dataclass(frozen=True)
class _Said:
    values: dict[str, float]
    out: str
    errors: str
    returncode: int | None


Ask = Callable[..., _Said]


@pytest.fixture
def ask(simulator: Simulator, tmp_path: Path) -> Ask:
    """``ask(deck, *commands)``: run commands behind a deck, and read what they print."""
    count = 0

    def run(deck: str | bytes, *commands: str, block: str = ".control") -> _Said:
        nonlocal count
        count += 1
        folder = tmp_path / f"run{count}"
        prepare(folder, "")
        for item in DATA.iterdir():
            if item.is_dir():
                shutil.copytree(item, folder / item.name)
        body = deck.encode() if isinstance(deck, str) else deck
        behind = "\n".join(["", block, *commands, "quit", ".endc", ".end", ""])
        (folder / "deck.cir").write_bytes(body.removesuffix(b".end\n") + behind.encode())
        ended = start(simulator, folder, Limits(seconds=20.0))
        out = (folder / "stdout.txt").read_text(errors="replace")
        errors = (folder / "stderr.txt").read_text(errors="replace")
        values = {name: float(value) for name, value in _VALUE.findall(out)}
        return _Said(values, out, errors, ended.returncode)

    return run


def _deck(slug: str) -> str:
    return (DATA / f"{slug}.cir").read_text(encoding="utf-8")


def _cards(cards: str) -> str:
    return f"test\nV1 in 0 1 AC 1\n{cards}\n"


_ODD = ["1M", "1MOhm", "10MΩ", "4k7", "2u2", "1M5", "4R7", "3V3", "4Ω7", "10\u03bc", "10\u03bcF", "1F",
        "1farad",        "1a", "10aF", "1x", "5%", "1_000", "1.2.3"]  # fmt: skip


def test_odd_numbers_read_as_the_findings_say(ask: Ask) -> None:
    cards = "\n".join(f"R{n} in 0 {text}\nC{n} in 0 {text}" for n, text in enumerate(_ODD))
    said = ask(
        _cards(cards), "op", *(f"print @{letter}{n}[{p}]" for n in range(len(_ODD)) for letter, p in _PARTS)
    )
    for n, text in enumerate(_ODD):
        resistor, capacitor = trap_in(text, Place.RESISTANCE), trap_in(text, Place.CAPACITANCE)
        assert resistor is not None or capacitor is not None, text
        for trap, name in ((resistor, f"@r{n}[resistance]"), (capacitor, f"@c{n}[capacitance]")):
            if trap is not None:
                assert float(dict(trap.parts)["reading"]) == pytest.approx(said.values[name], rel=1e-5), text


_PARTS = (("r", "resistance"), ("c", "capacitance"))


def test_a_decimal_comma_leaves_the_second_half_of_a_part_and_the_first_of_a_model(ask: Ask) -> None:
    cards = "R1 in 0 1,5k\nC1 in 0 c=1,5u\nM1 in in 0 0 N\n.model N NMOS(VTO=0,7)\nI1 in 0 AC 1,5m"
    said = ask(_cards(cards), "op", "print @r1[resistance] @c1[capacitance] @n[vto] @i1[acmag] @i1[acphase]")
    assert said.values["@r1[resistance]"] == pytest.approx(5e3)
    assert said.values["@c1[capacitance]"] == pytest.approx(5e-6)
    assert abs(said.values["@n[vto]"]) < 1e-12
    assert said.values["@i1[acmag]"] == pytest.approx(1.0)
    assert said.values["@i1[acphase]"] == pytest.approx(5e-3)


@pytest.mark.parametrize("card", ["V2 x 0 1,5", "I2 in 0 1,5m", "M1 in in 0 0 N W=1,5u\n.model N NMOS"])
def test_a_decimal_comma_elsewhere_stops_ngspice(card: str, ask: Ask) -> None:
    assert "unknown parameter" in ask(_cards("R1 in 0 1k\n" + card), "op", "print v(in)").errors


_STOPS = {
    "number-in-expression": "Misplaced operator",
    "unit-apart": "unknown parameter",
    "node-count": "not enough nodes",
    "instance-parameter-unknown": "unknown parameter",
    "model-undefined": "could not find a valid modelname",
    "model-type": "model type mismatch|incorrect model type|valid modelname",
    "model-parameter-unknown": "unrecognized parameter",
    "subcircuit-undefined": "unknown subckt",
    "subcircuit-ports": "Too few parameters",
    "subcircuit-open": "Mismatch of .subckt",
    "element-duplicate": "device already exists",
    "unknown-card": "unimplemented control card",
    "include-missing": "Could not find include file",
    "library-section-missing": "section definition slow not found",
    "library-section-stray": "unimplemented control card",
}


@pytest.mark.parametrize("slug", sorted(_STOPS))
def test_ngspice_stops_at_these_decks(slug: str, ask: Ask) -> None:
    said = ask(_deck(slug), "op", "print v(in)")
    assert re.search(_STOPS[slug], said.errors)
    assert "v(in)" not in said.values


_NO_POINT = ["no-ground", "no-dc-path", "floating-gate", "source-loop"]


@pytest.mark.parametrize("slug", _NO_POINT)
def test_ngspice_finds_no_operating_point_of_these_decks(slug: str, ask: Ask) -> None:
    said = ask(_deck(slug), "op", "print v(in)")
    assert "singular matrix" in said.errors
    assert "v(in)" not in said.values


@pytest.mark.parametrize(
    ("cards", "volts"), [("I1 0 lost 1m", 1e-3), ("I1 lost 0 1", -1.0), ("I1 0 lost 1m\nC1 lost 0 1u", None)]
)
def test_a_current_into_an_empty_node_gives_its_amperes_as_volts_or_nothing(
    cards: str, volts: float | None, ask: Ask
) -> None:
    said = ask(_cards("R1 in 0 1k\n" + cards), "op", "print v(lost)")
    assert said.values.get("v(lost)") == (None if volts is None else pytest.approx(volts))


@pytest.mark.parametrize(
    ("geometry", "model", "current"),
    [
        ("W=10u L=2u", "KP=100u", 2.5e-4),
        ("W=-10u L=2u", "KP=100u", -2.5e-4),
        ("W=10u L=-2u", "KP=100u", -2.5e-4),
        ("W=0 L=2u", "KP=100u", 0.0),
        ("W=10u L=2u", "KP=-100u", -2.5e-4),
        ("W=10u L=2u", "KP=0", 0.0),
        ("W=10u L=2u", "KP=100u LD=2u", -2.5e-4),
        ("W=10u L=2u", "KP=100u LD=1u", float("inf")),
        ("W=10u L=0", "KP=100u", float("inf")),
    ],
)
def test_impossible_geometry_turns_the_current_round_or_ends_it(
    geometry: str, model: str, current: float, ask: Ask
) -> None:
    """By the square law ½·KP·W/(L - 2·LD)·VOV² with VOV = 1 V."""
    deck = f"test\nVD d 0 5\nVG g 0 2\nM1 d g 0 0 N {geometry}\n.model N NMOS(LEVEL=1 VTO=1 {model})\n"
    said = ask(deck, "op", "print @m1[id]")
    assert said.values["@m1[id]"] == pytest.approx(current, rel=1e-6, abs=1e-10)


def test_missing_width_and_length_are_100_micrometre_or_those_of_the_options(ask: Ask) -> None:
    cards = "M1 in in 0 0 N\n.model N NMOS"
    bare = ask(_cards(cards), "op", "print @m1[w] @m1[l]").values
    assert bare == {"@m1[w]": pytest.approx(1e-4), "@m1[l]": pytest.approx(1e-4)}
    given = ask(_cards(cards + "\n.options defw=20u defl=2u"), "op", "print @m1[w] @m1[l]").values
    assert given == {"@m1[w]": pytest.approx(2e-5), "@m1[l]": pytest.approx(2e-6)}
    on_model = ask(_cards(cards + "(W=3u L=4u)"), "op", "print @m1[w] @m1[l]").values
    assert on_model == {"@m1[w]": pytest.approx(3e-6), "@m1[l]": pytest.approx(4e-6)}


def test_of_two_values_the_last_counts_and_of_two_models_the_first(ask: Ask) -> None:
    cards = (
        "R1 in 0 1k 2k\nR2 in 0 1k R=3k\nM1 in in 0 0 N W=10u W=20u\n.model N NMOS(VTO=1)\n"
        ".model N NMOS(VTO=2)\nM2 in in 0 0 K\n.model K NMOS(VTO=1 VTO=2)\n"
        ".param a=1k\n.param A=4k\nR3 in 0 {a}"
    )
    said = ask(
        _cards(cards),
        "op",
        "print @r1[resistance] @r2[resistance] @r3[resistance] @m1[w] @n[vto] @k[vto]",
    )
    assert said.values == {
        "@r1[resistance]": pytest.approx(2e3),
        "@r2[resistance]": pytest.approx(3e3),
        "@r3[resistance]": pytest.approx(4e3),
        "@m1[w]": pytest.approx(20e-6),
        "@n[vto]": pytest.approx(1.0),
        "@k[vto]": pytest.approx(2.0),
    }
    assert "Warning" not in said.errors


def test_a_part_without_a_value_gets_one_milliohm_or_nothing(ask: Ask) -> None:
    cards = "R1 in 0\nR2 in 0 0\nC1 in 0\nL1 in x\nR3 x 0 1k"
    said = ask(_cards(cards), "op", "print @r1[resistance] @r2[resistance] @c1[capacitance] @l1[inductance]")
    assert said.values == {
        "@r1[resistance]": pytest.approx(1e-3),
        "@r2[resistance]": pytest.approx(1e-3),
        "@c1[capacitance]": pytest.approx(0.0, abs=1e-30),
        "@l1[inductance]": pytest.approx(0.0, abs=1e-30),
    }
    assert "r1: resistance to low" in said.errors
    assert "r2" not in said.errors


@pytest.mark.parametrize("slug", ["option-unknown", "subcircuit-parameter-unknown", "names-differ-in-case"])
def test_ngspice_is_silent_about_these_decks(slug: str, ask: Ask) -> None:
    said = ask(_deck(slug), "op", "print v(out)")
    assert said.values["v(out)"] > 0.0
    assert not re.search("warning|error", said.errors, re.IGNORECASE)


def test_an_unknown_parameter_of_a_call_changes_nothing(ask: Ask) -> None:
    said = ask(_deck("subcircuit-parameter-unknown"), "op", "print @r.x1.ra[resistance]")
    assert said.values == {"@r.x1.ra[resistance]": pytest.approx(1e3)}


def test_a_second_subcircuit_is_ignored_but_for_its_parameters(ask: Ask) -> None:
    said = ask(_deck("subcircuit-duplicate"), "op", "print @r.x1.ra[resistance] @r.x1.rb[resistance]")
    assert "redefinition of .subckt" in said.errors
    assert said.values == {
        "@r.x1.ra[resistance]": pytest.approx(2e3),
        "@r.x1.rb[resistance]": pytest.approx(1e3),
    }


@pytest.mark.parametrize(
    ("slug", "current"),
    [
        ("title-swallows-card", 1.0 / 2e3),
        ("text-after-end", 1.0 / 1.5e3),
        ("include-on-title-line", 1.0 / 1.5e3),
        ("names-differ-in-case", 1.0 / 2e3),
    ],
)
def test_which_parts_of_a_deck_count(slug: str, current: float, ask: Ask) -> None:
    said = ask(_deck(slug), "op", "print i(v1)")
    assert said.values["i(v1)"] == pytest.approx(-current, rel=1e-6)


def test_a_dot_card_on_the_title_line_stops_ngspice(ask: Ask) -> None:
    assert "title line is missing" in ask(".param a=1k" + _cards("R1 in 0 {a}")[4:], "op").errors


def test_control_blocks_and_command_comments_run(ask: Ask) -> None:
    altered = ask(_deck("control-block-alters"), "op", "print @r2[resistance]").values
    assert altered == {"@r2[resistance]": pytest.approx(3e3)}
    assert "v(out)" in ask(_deck("command-comment").replace("print all", "echo v(out) = 1"), "op").out


def test_an_unclosed_control_block_swallows_the_circuit_behind_it(ask: Ask) -> None:
    # The commands of the test go on in the block of the deck.
    said = ask(_deck("control-block-open"), "print i(v1)", block="")
    assert said.values["i(v1)"] == pytest.approx(-5e-4)


@pytest.mark.parametrize("slug", ["utf-16", "cr-line-ends"])
def test_ngspice_finds_no_circuit_in_these_encodings(slug: str, ask: Ask) -> None:
    said = ask((DATA / f"{slug}.cir").read_bytes(), "op", "print v(in)")
    assert "v(in)" not in said.values


def test_a_nul_byte_cuts_its_line_off(ask: Ask) -> None:
    said = ask(b"test\nV1 in 0 1\nR1 in 0 \x002k\nR2 in 0 1k\n", "op", "print @r1[resistance]")
    assert said.values == {"@r1[resistance]": pytest.approx(1e-3)}


def test_a_file_that_includes_itself_ends_ngspice(ask: Ask) -> None:
    said = ask("test\nV1 in 0 1\n.include include-itself/self.inc\n", "op", "print v(in)")
    assert "v(in)" not in said.values


def test_a_node_called_time_leaves_a_transient_run_without_its_axis(ask: Ask) -> None:
    deck = "test\nV1 in 0 1\nR1 in time 1k\nR2 time 0 1k\n"
    said = ask(deck, "tran 1u 3u", "let last = length(time) - 1", "print time[last]")
    fine = ask(deck.replace("time", "node"), "tran 1u 3u", "let last = length(time) - 1", "print time[last]")
    assert fine.values["time[last]"] == pytest.approx(3e-6)
    assert said.out.count("time") != fine.out.count("time")


def test_a_node_called_temper_crashes_ngspice(ask: Ask) -> None:
    said = ask("test\nV1 temper 0 1\nR1 temper 0 1k\n", "op", "print i(v1)")
    assert said.returncode is not None
    assert said.returncode < 0
    assert "i(v1)" not in said.values


def test_an_amplitude_multiplies_the_output(ask: Ask) -> None:
    said = ask(_deck("ac-amplitude"), "ac lin 1 1k 1k", "let gain = mag(v(out))", "print gain")
    assert said.values["gain"] == pytest.approx(0.5 * 0.01, rel=1e-6)


def test_a_bulk_at_the_supply_conducts(ask: Ask) -> None:
    names = ["vdd", "in", "d"]
    said = ask(_deck("bulk-forward-biased"), "op", *(f"print v({n})" for n in names), "print @m1[ib]")
    voltages = {name: said.values[f"v({name})"] for name in names}
    circuit = read_flat(_deck("bulk-forward-biased"))
    assert [one.slug for one in bulk_findings(circuit, voltages)] == ["bulk-forward-biased"]
    assert abs(said.values["@m1[ib]"]) > 1e-3


def test_a_coupling_capacitor_turned_round_has_a_negative_voltage(ask: Ask) -> None:
    names = sorted(VOLTAGES["capacitor-reversed"])
    said = ask(_deck("capacitor-reversed"), "op", *(f"print v({name})" for name in names))
    voltages = {name: said.values[f"v({name})"] for name in names}
    assert voltages == pytest.approx(VOLTAGES["capacitor-reversed"], rel=2e-3, abs=1e-6)
    circuit = read_flat(_deck("capacitor-reversed"))
    assert [one.slug for one in polarity_findings(circuit, voltages, frozenset())] == ["capacitor-reversed"]


@pytest.mark.parametrize(
    ("slug", "node", "volts"),
    [
        # The generator alone sets the gate; through 1 kΩ it holds it near its 0 V against the divider.
        ("generator-sets-bias", "in", 2.0),
        ("generator-overrides-bias", "g", 12e-3),
    ],
)
def test_a_generator_without_a_capacitor_sets_the_gate(slug: str, node: str, volts: float, ask: Ask) -> None:
    said = ask(_deck(slug), "op", f"print v({node})")
    assert said.values[f"v({node})"] == pytest.approx(volts, rel=0.01)


def test_a_direct_current_of_the_input_moves_the_bias_and_an_input_of_0_a_does_not(ask: Ask) -> None:
    deck = _deck("generator-current-in-bias")
    card = "IIN s 0 DC 100u AC 1"
    drains = [
        ask(text, "op", "print @m1[id]").values["@m1[id]"]
        for text in (deck, deck.replace(card, card.replace("100u", "0")), deck.replace(card, "* none"))
    ]
    assert drains[0] > 1.5 * drains[1]
    assert drains[1] == pytest.approx(drains[2], rel=1e-12)


def test_a_loose_end_carries_no_current(ask: Ask) -> None:
    said = ask(_deck("node-dangling"), "op", "print @r3[i]")
    assert abs(said.values["@r3[i]"]) < 1e-12


def test_a_bulk_elsewhere_moves_the_threshold(ask: Ask) -> None:
    deck = _deck("bulk-not-at-source-or-rail").replace("KP=100u", "KP=100u GAMMA=0.5\n+ PHI=0.7")
    lower = ask(deck.replace("RB b 0 1k", "RB b v2 1k\nV2 v2 0 -3"), "op", "print @m1[von]").values
    assert lower["@m1[von]"] > 1.4


_HELP = [
    ("mos1", catalogue.LEVEL1_MODEL, catalogue.LEVEL1_INSTANCE),
    ("resistor", catalogue.RESISTOR_MODEL, catalogue.RESISTOR_INSTANCE),
    ("capacitor", catalogue.CAPACITOR_MODEL, catalogue.CAPACITOR_INSTANCE),
    ("inductor", catalogue.INDUCTOR_MODEL, catalogue.INDUCTOR_INSTANCE),
    ("diode", catalogue.DIODE_MODEL, catalogue.DIODE_INSTANCE),
]


@pytest.mark.parametrize(("device", "model", "instance"), _HELP, ids=[row[0] for row in _HELP])
def test_the_parameters_known_are_those_that_ngspice_lists(
    device: str, model: frozenset[str], instance: frozenset[str], ask: Ask
) -> None:
    text = ask(_cards("R1 in 0 1k"), f"devhelp {device}").out
    of_model, of_instance = text.split("Model Parameters")[1].split("Instance Parameters")
    row = re.compile(r"^\s*\d+\s+(\S+)\s+(?:in|inout)\s", re.MULTILINE)
    assert set(row.findall(of_model)) == model
    assert set(row.findall(of_instance)) == instance


@pytest.mark.parametrize("letter", ["r", "c", "l"])
def test_every_instance_parameter_known_is_taken(letter: str, ask: Ask) -> None:
    known = catalogue.INSTANCE_PARAMETERS[letter] - {"q", "ic", letter}
    names = sorted(name for name in known if not name.startswith("sens_"))  # these are words without a value
    cards = "\n".join(f"{letter}{n} in n{n} 1k {name}=1\nRX{n} n{n} 0 1k" for n, name in enumerate(names))
    assert "unknown parameter" not in ask(_cards(cards), "op", "print v(in)").errors


_CLEAN = sorted((DATA / "clean").glob("*.cir"))


def test_decks_without_faults_flatten_and_have_no_faults_in_their_connections(simulator: Simulator) -> None:
    sources = [read_source(path, shown=path.name) for path in _CLEAN]
    flats = flatten([source.text("* test") for source in sources], simulator=simulator)
    for source, flat in zip(sources, flats, strict=True):
        assert flat.text is not None, (source.file, flat.said)
        found = graph_findings(read_flat("* flat\n" + flat.text))
        assert [one for one in found if one.severity is not Severity.NOTE] == [], source.file


@pytest.mark.parametrize("path", _CLEAN, ids=lambda path: path.stem)
def test_decks_without_faults_have_an_operating_point(path: Path, ask: Ask) -> None:
    source = read_source(path)
    said = ask(source.text("* test"), "op", "print all")
    assert not re.search("error|singular|warning", said.errors, re.IGNORECASE)
    assert [name for name in said.values if name.endswith("#branch")]
