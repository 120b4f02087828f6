"""Netlists that deckgen writes itself: nothing in a name or title can become a line; and the pin graph."""

from __future__ import annotations

import ast
import tomllib
from dataclasses import replace
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from deckgen.circuit.model import (
    Capacitor,
    Circuit,
    CurrentSource,
    Element,
    Inductor,
    ModelCard,
    Mosfet,
    Resistor,
    VoltageSource,
)
from deckgen.circuit.netlist import element_lines, netlist_text, pins_of_nodes
from deckgen.circuit.reader import read_flat

# PySpice writes the parameters of a card in alphabetical order.
NM = ModelCard("nm", "nmos", (("level", 1.0), ("vto", 0.7)))
PARTS: tuple[Element, ...] = (
    Resistor("r1", ("a", "0"), 4700.0),
    Capacitor("cin", ("a", "b"), 1e-7),
    Inductor("l1", ("b", "0"), 1e-3),
    VoltageSource("vdd", ("a", "0"), 5.0, 1 + 0j),
    CurrentSource("ibias", ("0", "b"), 1e-3),
    Mosfet("m1", ("a", "b", "0", "0"), "nm", 1e-5, 2e-6, 2.0),
)
INJECTIONS = [
    "a\n.control", "a\r", "a\tb", "a b", "", "a;b", "a$b", "a*", "a=b", "a,b", "a(1)", "a'", 'a"', "a`id`",
    "a{x}", "a|b", "a>f", "a&b", "a\\", "µ", "A", "a\u2028b", "a\x00",
]  # fmt: skip


def only(element: Element, model: ModelCard = NM) -> Circuit:
    return Circuit("t", (element,), (model,))


@pytest.mark.parametrize("bad", INJECTIONS)
def test_what_could_be_more_than_a_name_is_refused_wherever_a_name_stands(bad: str) -> None:
    device = PARTS[5]
    assert isinstance(device, Mosfet)
    attempts = [
        only(Resistor(f"r{bad}" if bad else "r", ("a", "0"), 1.0)),
        only(Resistor("r1", ("a", bad), 1.0)),
        only(replace(device, model=bad)),
        only(device, replace(NM, name=bad)),
        only(device, replace(NM, parameters=((bad, 1.0),))),
    ]
    for circuit in attempts:
        with pytest.raises(ValueError, match=r"can't stand in a netlist|can't be the name"):
            netlist_text(circuit)


@given(name=st.text(max_size=6), node=st.text(max_size=6))
def test_no_name_ever_adds_a_line_or_a_word(name: str, node: str) -> None:
    circuit = Circuit("t", (Resistor(f"r{name}", (node, "0"), 1.0),))
    try:
        text = netlist_text(circuit)
    except ValueError:
        return
    assert text == f"* t\nR{name} {node} 0 1.0\n"


def test_a_title_stays_one_comment_line_whatever_it_holds() -> None:
    title = "My stage\n.control\nshell rm x\r\n*# more\u2028.endc " + "x" * 5000
    lines = netlist_text(Circuit(title, PARTS[:1])).splitlines()
    assert lines[0].startswith("* My stage .control shell rm x")
    assert len(lines[0]) < 250
    assert lines[1:] == ["R1 a 0 4700.0"]


def test_a_title_that_starts_with_a_hash_is_no_command() -> None:
    assert netlist_text(Circuit("# shell id", ())).startswith("* # shell id\n")


def test_values_that_are_no_numbers_are_refused() -> None:
    for value in (float("nan"), float("inf")):
        with pytest.raises(ValueError, match=r"can't stand in a netlist"):
            netlist_text(only(Resistor("r1", ("a", "0"), value)))
        with pytest.raises(ValueError, match=r"can't stand in a netlist"):
            netlist_text(only(PARTS[5], replace(NM, parameters=(("vto", value),))))


@pytest.mark.parametrize("part", PARTS, ids=lambda part: part.name)
def test_a_part_is_written_under_its_own_name_with_one_letter_of_its_kind(part: Element) -> None:
    (line,) = element_lines([part])
    name, *nodes = line.split()[: 1 + len(part.nodes)]
    assert name.lower() == part.name
    assert tuple(nodes) == part.nodes


@pytest.mark.parametrize(
    "part", [replace(part, name=name) for part in PARTS for name in ("q1", "1", part.name[0], "")]
)
def test_a_name_that_would_come_out_as_another_part_is_refused(part: Element) -> None:
    with pytest.raises(ValueError, match=r"can't be the name|can't stand in a netlist"):
        element_lines([part])


def test_a_node_named_gnd_is_refused_because_the_simulator_takes_it_for_ground() -> None:
    with pytest.raises(ValueError, match="ground is 0"):
        netlist_text(only(Resistor("r1", ("gnd", "a"), 1.0)))


def test_the_netlist_reads_back_and_holds_neither_analyses_nor_an_end() -> None:
    circuit = Circuit("t", PARTS, (NM,))
    text = netlist_text(circuit)
    assert read_flat(text) == circuit
    words = {line.split()[0] for line in text.splitlines() if line.startswith(".")}
    assert words == {".model"}


def test_a_model_without_a_level_is_written_as_level_1() -> None:
    text = netlist_text(only(PARTS[5], ModelCard("nm", "nmos", (("vto", 0.7),))))
    assert read_flat(text).model("nm").get("level", 0.0) == pytest.approx(1.0)


def test_an_ac_phasor_is_written_as_magnitude_and_phase() -> None:
    (line,) = element_lines([VoltageSource("v1", ("a", "0"), 0.0, -2j)])
    assert line.split() == ["V1", "a", "0", "dc", "0.0", "ac", "2.0", "-90.0"]


def test_pins_name_every_part_at_a_node_and_twice_what_hangs_there_twice() -> None:
    diode = Mosfet("m2", ("b", "b", "0", "0"), "nm", 1e-5, 2e-6)
    assert pins_of_nodes(Circuit("t", (*PARTS, diode), (NM,))) == {
        "a": ("r1", "cin", "vdd", "m1"),
        "0": ("r1", "l1", "vdd", "ibias", "m1", "m1", "m2", "m2"),
        "b": ("cin", "l1", "ibias", "m1", "m2", "m2"),
    }


# --- the one place of PySpice ---


def _imports(path: Path) -> set[str]:
    found: set[str] = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            found |= {alias.name.split(".")[0] for alias in node.names}
        elif isinstance(node, ast.ImportFrom) and node.module:
            found.add(node.module.split(".")[0])
    return found


def test_no_other_module_imports_pyspice(project: Path) -> None:
    users = [p for p in (project / "deckgen").rglob("*.py") if "PySpice" in _imports(p)]
    assert [p.relative_to(project).as_posix() for p in users] == ["deckgen/circuit/netlist.py"]


def test_a_contract_keeps_it_so(project: Path) -> None:
    settings = tomllib.loads((project / "pyproject.toml").read_text(encoding="utf-8"))
    contracts = settings["tool"]["importlinter"]["contracts"]
    (contract,) = [c for c in contracts if "PySpice" in c.get("forbidden_modules", ())]
    assert contract["source_modules"] == ["deckgen"]
    assert contract["ignore_imports"] == ["deckgen.circuit.netlist -> PySpice"]
