"""Decks of our own over the whole grammar are read right: what is read gives ngspice's own operating point.

The operating point of each deck file as plain ngspice finds it (independent: the file itself, includes and
all, nothing of deckgen in between) is held against that of the text that deckgen makes of it, and against
that of the circuit that deckgen reads, printed and run again. Seen with ngspice 39.
"""

from __future__ import annotations

import json
import re
from collections.abc import Iterator
from functools import partial
from pathlib import Path

import pytest

from deckgen.circuit.model import Circuit, CurrentSource, Mosfet, Origin, Resistor, VoltageSource
from deckgen.circuit.netlist import netlist_text
from deckgen.circuit.numbers import spice_number
from deckgen.errors import DeckgenError, Outcome
from deckgen.intake import Taken, take_in
from deckgen.simulator import Simulator
from deckgen.simulator.flatten import flatten
from deckgen.source.deck import read_source
from deckgen.units import celsius
from tests.simulator.command_line import Answer, inside
from tests.simulator.plain import operating_points, run_plainly
from tests.unit.test_circuit_reader import MISLEADING, NUMBERS

FOLDER = Path(__file__).resolve().parents[1] / "data" / "decks"
PATHS = sorted(FOLDER.glob("*.cir"))
NAMES = [path.name for path in PATHS]

TORN = {"v(net-(r1-pad2)": "v(net-_r1-pad2_)"}
"""How ngspice calls a node with a parenthesis, which it cuts off, and how deckgen carries it over."""

UNPRINTABLE = {"export-signs.cir"}
"""Decks with names that deckgen never writes itself, only carries over."""

CARRIED = (".temp", ".option", ".opt", ".ic", ".nodeset")

Points = dict[str, dict[str, float]]


@pytest.fixture(scope="module")
def results(simulator: Simulator) -> dict[str, Taken | DeckgenError]:
    """What taking in all decks together gives, by file name."""
    found = take_in(PATHS, flattener=partial(flatten, simulator=simulator))
    return {path.name: one for path, one in zip(PATHS, found, strict=True)}


@pytest.fixture(scope="module")
def decks(results: dict[str, Taken | DeckgenError]) -> dict[str, Taken]:
    """The decks that were taken in."""
    return {name: one for name, one in results.items() if isinstance(one, Taken)}


@pytest.fixture(scope="module")
def originals(simulator: Simulator, tmp_path_factory: pytest.TempPathFactory) -> Points:
    """Operating points of the files as they are."""
    points = operating_points(simulator, tmp_path_factory.mktemp("originals"), PATHS)
    return {name: {TORN.get(node, node): value for node, value in of.items()} for name, of in points.items()}


@pytest.fixture(scope="module")
def of_texts(
    simulator: Simulator, decks: dict[str, Taken], tmp_path_factory: pytest.TempPathFactory
) -> Points:
    """Operating points of the texts that deckgen runs."""
    texts = {name: taken.netlist for name, taken in decks.items()}
    return _points(simulator, texts, tmp_path_factory.mktemp("texts"))


@pytest.fixture(scope="module")
def of_circuits(
    simulator: Simulator, decks: dict[str, Taken], tmp_path_factory: pytest.TempPathFactory
) -> Points:
    """Operating points of the circuits that were read, written anew."""
    texts = {name: _printed(decks[name]) for name in decks if _can_be_printed(name, decks[name].circuit)}
    return _points(simulator, texts, tmp_path_factory.mktemp("circuits"))


def _points(simulator: Simulator, texts: dict[str, str], folder: Path) -> Points:
    sources = folder / "decks"
    sources.mkdir()
    for name, text in texts.items():
        (sources / name).write_text(f"{text}.end\n", encoding="utf-8")
    return operating_points(simulator, folder / "runs", [sources / name for name in texts])


def _can_be_printed(name: str, circuit: Circuit) -> bool:
    return not circuit.others and name not in UNPRINTABLE


def _printed(taken: Taken) -> str:
    """The circuit as text, with its temperatures and what the deck says of the search for its bias."""
    circuit = taken.circuit
    hints = [line for line in taken.netlist.splitlines() if line.lower().startswith((".nodeset", ".ic"))]
    temperatures = f".options tnom={celsius(circuit.tnom)!r}\n.temp {celsius(circuit.temperature)!r}\n"
    options = [f"{name}={value}" for name, value in circuit.options if name == "gmin"]
    return netlist_text(circuit) + temperatures + "\n".join([".options " + " ".join(options), *hints, ""])


def _differing(found: dict[str, float], wanted: dict[str, float]) -> Iterator[str]:
    """Node voltages and source currents that are not the same to one part in a thousand million."""
    for name, value in wanted.items():
        # Currents hold the leakage of gmin, of rounding and of nothing else where they should be zero.
        least = 1e-12 if name.startswith("v(") else 1e-15
        if found.get(name) != pytest.approx(value, rel=1e-9, abs=least):
            yield f"{name}: {found.get(name)}, not {value}"


def test_there_are_decks_enough() -> None:
    assert len(NAMES) >= 60


@pytest.mark.parametrize("name", NAMES)
def test_a_deck_is_taken_in(results: dict[str, Taken | DeckgenError], name: str) -> None:
    assert isinstance(results[name], Taken), str(results[name])


@pytest.mark.parametrize("name", NAMES)
def test_the_text_that_is_run_gives_the_operating_point_of_the_file(
    originals: Points, of_texts: Points, name: str
) -> None:
    assert list(_differing(of_texts[name], originals[name])) == []
    assert len(originals[name]) > 1


@pytest.mark.parametrize("name", NAMES)
def test_the_circuit_that_is_read_gives_the_operating_point_of_the_file(
    originals: Points, of_circuits: Points, decks: dict[str, Taken], name: str
) -> None:
    if not _can_be_printed(name, decks[name].circuit):
        assert decks[name].circuit.others or name in UNPRINTABLE
        return
    assert list(_differing(of_circuits[name], originals[name])) == []


def test_most_decks_are_read_to_the_last_element(decks: dict[str, Taken]) -> None:
    assert sum(not taken.circuit.others for taken in decks.values()) >= 60


OTHERS = {
    "behavioural.cir": {"b1", "b2", "be1", "be2", "bg1", "brv"},
    "bipolar.cir": {"q1", "q2"},
    "bsim3.cir": {"m1"},
    "bsim4.cir": {"m1", "m2"},
    "controlled.cir": {"e2"},
    "coupled-inductors.cir": {"k1"},
    "diodes.cir": {"d1", "d2"},
    "jfet.cir": {"j1", "z1"},
    "level-3.cir": {"m2"},
    "lines.cir": {"t1", "o1", "u1"},
    "parts-with-models.cir": {"rd", "rl", "rk", "c1"},
    "sources-without-value-at-start.cir": {"va", "vn", "vp"},
    "switches.cir": {"s1", "w1"},
    "vdmos.cir": {"m1"},
}
"""What is simulated, and has no hand analysis."""


def test_exactly_what_has_no_hand_analysis_is_another_device(decks: dict[str, Taken]) -> None:
    found = {name: {other.name for other in taken.circuit.others} for name, taken in decks.items()}
    assert {name: others for name, others in found.items() if others} == OTHERS


ORIGINS = [
    ("plain.cir", "rl", "", 13),
    ("continued.cir", "vin", "", 4),
    ("continued.cir", "m1", "", 13),
    ("continued.cir", "rs", "", 20),
    ("conditions.cir", "rd", "", 6),
    ("conditions.cir", "m1", "", 7),
    ("conditions.cir", "rl", "", 15),
    ("conditions-nested.cir", "r.xl.r1", "", 4),
    ("text-after-end.cir", "rl", "", 15),
    ("subcircuit-nested.cir", "r.xa.r.x1.r2", "", 5),
    ("subcircuit-nested.cir", "m.xa.m1", "", 9),
    ("subcircuit-nested.cir", "r.xb.r.x1.r1", "", 13),
    ("subcircuit-nested.cir", "m.xb.m1", "", 16),
    ("subcircuit-three-deep.cir", "r.xs.xd.xl.r1", "", 3),
    ("subcircuit-three-deep.cir", "r.xs.xr.r1", "", 3),
    ("subcircuit-three-deep.cir", "m.xs.m1", "", 12),
    ("subcircuit-same-names.cir", "rd", "", 4),
    ("subcircuit-same-names.cir", "r.x1.rd", "", 7),
    ("subcircuit-same-names.cir", "m.x1.m1", "", 8),
    ("subcircuit-brackets.cir", "m.x1.m1", "", 4),
    ("three-stages.cir", "m.x3.m1", "", 8),
    ("export-net-names.cir", "m.xm1.m1", "", 9),
    ("include-nested.cir", "m.x1.m1", "lib/amp.sub", 5),
    ("include-nested.cir", "m2", "", 6),
    ("include-blank-in-name.cir", "r2", "lib/with blank/bias.inc", 3),
    ("include-in-subcircuit.cir", "r.xl.rl", "lib/load.inc", 1),
]
"""Deck, element, file as seen from the deck (empty: the deck itself), line: counted by hand."""


@pytest.mark.parametrize(("name", "element", "file", "line"), ORIGINS)
def test_an_element_knows_where_it_was_written(
    decks: dict[str, Taken], name: str, element: str, file: str, line: int
) -> None:
    assert decks[name].circuit.element(element).origin == Origin(file or str(FOLDER / name), line)


def test_every_element_comes_from_a_line_that_names_it(decks: dict[str, Taken]) -> None:
    for name, taken in decks.items():
        for element in taken.circuit.elements:
            assert element.origin is not None, f"{name}: {element.name}"
            file = FOLDER / element.origin.file
            lines = file.read_bytes().decode("utf-8-sig", "replace").split("\n")
            line = lines[element.origin.line - 1].lower().split()[0]
            called = element.name.rpartition(".")[2] if "." not in line else element.name
            assert called in (line, f"b{line}"), f"{name}: {element.name}"


TEMPERATURES = {
    "options-of-geometry.cir": (27.0, 35.0),
    "temperature.cir": (85.0, 27.0),
    "temperature-flattened.cir": (-40.0, 27.0),
    "temperature-equal-sign.cir": (55.0, 27.0),
    "temperature-option.cir": (60.0, 20.0),
    "temperature-option-flattened.cir": (60.0, 20.0),
    "parts-with-models.cir": (60.0, 27.0),
}
"""Temperature and TNOM in degrees; 27 in all other decks."""


@pytest.mark.parametrize("name", NAMES)
def test_temperatures_are_those_of_the_deck(decks: dict[str, Taken], name: str) -> None:
    circuit = decks[name].circuit
    found = (celsius(circuit.temperature), celsius(circuit.tnom))
    assert found == pytest.approx(TEMPERATURES.get(name, (27.0, 27.0)))
    conditions = decks[name].stage.conditions
    assert (conditions.temperature, conditions.tnom) == pytest.approx((circuit.temperature, circuit.tnom))


@pytest.mark.parametrize("name", NAMES)
def test_what_flattening_would_lose_is_carried_over(decks: dict[str, Taken], name: str) -> None:
    written = [card for card in read_source(FOLDER / name).cards if card.head.startswith(CARRIED)]
    lines = decks[name].netlist.splitlines()
    assert all(line.text in lines for card in written for line in card.lines)


def test_tolerances_of_the_deck_stand_and_those_it_lacks_are_added(decks: dict[str, Taken]) -> None:
    own = decks["own-tolerances.cir"].netlist
    assert own.splitlines()[-1] == ".options vntol=1e-09"
    assert decks["plain.cir"].netlist.splitlines()[-1] == ".options reltol=1e-06 vntol=1e-09 abstol=1e-15"


def test_values_are_those_of_the_deck(decks: dict[str, Taken]) -> None:
    def value(name: str, element: str) -> float:
        found = decks[name].circuit.element(element)
        assert isinstance(found, Resistor)
        return found.value

    assert value("passives.cir", "rs") == pytest.approx(1e3)  # 2k, twice
    assert value("passives.cir", "rx") == pytest.approx(100e3)  # the last of two values
    assert value("passives.cir", "rz") == pytest.approx(1e-3)  # no value
    assert value("functions.cir", "rd") == pytest.approx(11e3)
    assert value("subcircuit-three-deep.cir", "r.xs.xd.xl.r1") == pytest.approx(250e3)
    assert value("numbers.cir", "rb5") == pytest.approx(25.4)
    geometry = {
        ("default-geometry.cir", "m1"): (20e-6, 2e-6, 1.0),
        ("default-geometry.cir", "m2"): (10e-6, 2e-6, 1.0),
        ("no-geometry.cir", "m1"): (100e-6, 100e-6, 1.0),
        ("multiplier.cir", "m1"): (10e-6, 2e-6, 4.0),
        ("subcircuit-multiplied.cir", "m.x1.m1"): (10e-6, 2e-6, 3.0),
    }
    for (name, element), wanted in geometry.items():
        device = decks[name].circuit.element(element)
        assert isinstance(device, Mosfet)
        assert (device.w, device.l, device.m) == pytest.approx(wanted), name


def test_sources_have_the_value_that_ngspice_takes_at_dc(decks: dict[str, Taken]) -> None:
    """Seen with ngspice 39: a DC value counts before a function's value at time zero."""
    found = {
        e.name: e.dc
        for e in decks["sources.cir"].circuit.elements
        if isinstance(e, VoltageSource | CurrentSource)
    }
    assert found == pytest.approx(
        {"vdd": 10.0, "vin": 1.2, "v1": 0.5, "v2": 1.5, "v3": 1.0, "v4": 3.0, "v5": 1.5, "v6": 2.0,
         "v7": 0.25, "v8": 2.0, "v9": 3.0, "v10": 0.0, "v11": 0.0, "v12": 4.0, "v13": 2.0, "v14": 6.0,
         "v15": 3.0, "v16": 5.0, "i1": 1e-3, "i2": 2e-3, "i3": 3e-3, "i4": 3e-3, "i5": -1e-3}
    )  # fmt: skip


def test_nodes_in_parentheses_that_ngspice_tears_are_carried_over_whole(
    simulator: Simulator, tmp_path: Path
) -> None:
    """Seen with ngspice 39: it finds no model on the card of a transistor with such a node."""
    torn = (FOLDER / "export-net-names.cir").read_text(encoding="utf-8")
    torn = re.sub(r"Net-_(\S+)_(?=\s)", r"Net-(\1)", torn)
    torn = torn.replace("XM1 Net-(M1-D) Net-(M1-G) 0 NFET", "M1 Net-(M1-D) Net-(M1-G) 0 0 NMODEL W=20u L=2u")
    torn = torn.replace(".subckt NFET D G S\nM1 D G S S NMODEL W=20u L=2u\n", "").replace(".ends\n", "")
    assert torn.count("Net-(") == 8
    (tmp_path / "torn.cir").write_text(torn, encoding="utf-8")
    assert "could not find a valid modelname" in run_plainly(simulator, tmp_path, "torn.cir").stderr
    (taken,) = take_in([tmp_path / "torn.cir"], flattener=lambda _: ())
    assert isinstance(taken, Taken), str(taken)
    (device,) = taken.circuit.transistors
    assert device.nodes == ("net-_m1-d_", "net-_m1-g_", "0", "0")
    (tmp_path / "whole.cir").write_text(f"{taken.netlist}.end\n", encoding="utf-8")
    points = operating_points(
        simulator, tmp_path / "points", [tmp_path / "whole.cir", FOLDER / "export-net-names.cir"]
    )
    whole, other = points["whole.cir"], points["export-net-names.cir"]
    for node in device.nodes[:2]:
        assert whole[f"v({node})"] == pytest.approx(other[f"v({node})"], rel=1e-9)


def test_numbers_are_those_that_ngspice_reads(simulator: Simulator, tmp_path: Path) -> None:
    """Independent: ngspice's own values of resistors, one for each spelling."""
    spellings = [(text.strip(), value) for text, value in NUMBERS + MISLEADING if value and "," not in text]
    parts = [f"r{n} a 0 {text}" for n, (text, _) in enumerate(spellings)]
    prints = [f"print @r{n}[resistance]" for n in range(len(spellings))]
    deck = [
        "* numbers",
        "v1 a 0 0",
        *parts,
        ".control",
        "set numdgt=15",
        "op",
        *prints,
        "quit",
        ".endc",
        ".end",
    ]
    (tmp_path / "deck.cir").write_text("\n".join([*deck, ""]), encoding="utf-8")
    answer = run_plainly(simulator, tmp_path).stdout
    found = dict(re.findall(r"^@(r\d+)\[resistance\] = (\S+)", answer, re.MULTILINE))
    for n, (text, value) in enumerate(spellings):
        assert float(found[f"r{n}"]) == pytest.approx(value, rel=1e-12), text
        assert spice_number(text) == pytest.approx(value, rel=1e-12)


def test_notes_of_every_kind_reach_the_stage(decks: dict[str, Taken]) -> None:
    stage = decks["notes-all.cir"].stage
    assert (stage.signal.input, stage.signal.output) == ("VIN", "out")
    assert (stage.signal.source_resistance, stage.signal.load) == ("RSIG", "RL")
    assert (stage.signal.frequency, stage.signal.amplitude) == pytest.approx((1e3, 10e-3))
    assert {tolerance.target for tolerance in stage.tolerances} == {"gm", "ID(M1)"}
    assert {(claim.quantity, claim.kind) for claim in stage.claims} == {
        ("ID(M1)", "equals"), ("Av", "at_most"), ("Rin", "within")
    }  # fmt: skip
    assert stage.regions == (("M1", "saturation"),)
    assert stage.hand.assumptions == "full"
    assert [(rating.part, rating.quantity) for rating in stage.ratings] == [("M1", "VDS")]
    assert list(stage.wanted) == ["ID(M1)", "Av"]
    assert stage.polarised == ("CS",)


def test_a_check_of_all_decks_ends_in_an_outcome_for_each(
    capsys: pytest.CaptureFixture[str], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "cache"))
    monkeypatch.chdir(tmp_path)
    answer: Answer = inside(capsys, "check", *PATHS, "--json", "-", "--no-keep", "--jobs", "2")
    stages = json.loads(answer.out)["stages"]
    outcomes = {Path(stage["file"]).name: stage["outcome"] for stage in stages}
    assert outcomes == dict.fromkeys(NAMES, Outcome.MEASURED.value)
    assert "Traceback" not in answer.err
    assert answer.code == max(stage["exit_code"] for stage in stages) == 1
    assert [path.name for path in tmp_path.iterdir()] == ["cache"]
