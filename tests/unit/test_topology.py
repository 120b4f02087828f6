"""Descriptions of topologies: those that come along, and what is wrong with those that don't hold up."""

from __future__ import annotations

import os
from collections.abc import Iterator
from pathlib import Path

import pytest

from deckgen.errors import InputError
from deckgen.stage import topology as module
from deckgen.stage.read import stage_from_text
from deckgen.stage.topology import (
    Starter,
    Topology,
    is_topology,
    list_topologies,
    load_topology,
    templates_folder,
)

DESCRIPTION = """\
format = 1
title = "Diode-connected device"
about = "Shows what a description may hold."
nodes = ["vdd", "out"]
one_of = [["RL", "IL"]]
[signal]
input = "ISIG"
output = "out"
load = "RL"
[parts.VDD]
unit = "V"
about = "supply"
required = true
[parts.RL]
unit = "Ω"
about = "load"
[parts.IL]
unit = "A"
about = "load current"
[parts.CL]
unit = "F"
about = "across the load"
needs = ["RL"]
[transistors.M1]
about = "the device"
[starter.n]
title = "Diode-connected, n-channel"
parts = { VDD = "5 V", RL = 1000 }
transistors.M1 = { W = "10u", L = "1u" }
model = { VTO = "0.7", KP = "100u" }
"""


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    write(tmp_path, "diode", DESCRIPTION)
    return tmp_path


def write(folder: Path, name: str, description: str) -> None:
    (folder / f"{name}.toml").write_text(description, encoding="utf-8")
    (folder / f"{name}.cir.j2").write_text("", encoding="utf-8")


def test_a_description_becomes_a_frozen_topology(folder: Path) -> None:
    topology = load_topology("diode", folder)
    assert topology.name == "diode"
    assert topology.title == "Diode-connected device"
    assert topology.nodes == ("vdd", "out")
    assert topology.part_names == ("VDD", "RL", "IL", "CL")
    assert topology.one_of == (("RL", "IL"),)
    assert topology.transistor_names == ("M1",)
    assert topology.sources == ("ISIG", "VDD", "IL")
    assert topology.signal.load == "RL"
    assert topology.signal.source_resistance is None
    supply, *_, capacitor = topology.parts
    assert (supply.unit, supply.required, supply.needs) == ("V", True, ())
    assert (capacitor.unit, capacitor.required, capacitor.needs) == ("F", False, ("RL",))
    assert topology.part("RL") is topology.parts[1]
    assert topology.part("rl") is None
    assert topology.starter("p") is None
    assert topology.starter("n") == Starter(
        polarity="n",
        title="Diode-connected, n-channel",
        parts=(("VDD", "5 V"), ("RL", "1000")),
        transistors=(("M1", (("W", "10u"), ("L", "1u"))),),
        model=(("VTO", "0.7"), ("KP", "100u")),
    )
    with pytest.raises(AttributeError):
        topology.name = "other"  # type: ignore[misc]
    assert hash(topology)


def test_a_topology_is_a_pair_and_neither_a_frame_nor_hidden(folder: Path) -> None:
    write(folder, "_shared", DESCRIPTION)
    write(folder, "frame", DESCRIPTION)
    write(folder, "frame-two", DESCRIPTION)
    write(folder, "another", DESCRIPTION)
    (folder / "alone.toml").write_text(DESCRIPTION, encoding="utf-8")
    (folder / "lonely.cir.j2").write_text("", encoding="utf-8")
    (folder / "notes.txt").write_text("", encoding="utf-8")
    assert list_topologies(folder) == ("another", "diode")
    assert is_topology("diode", folder)
    assert not is_topology("alone", folder)
    assert not is_topology("frame", folder)


@pytest.mark.parametrize(
    "name", ["../diode", "sub/diode", "/etc/passwd", "diode.toml", "Diode", "", ".", "diode\n"]
)
def test_a_name_cannot_lead_out_of_the_folder(folder: Path, name: str) -> None:
    inner = folder / "inner"
    inner.mkdir()
    assert not is_topology(name, inner)
    with pytest.raises(InputError):
        load_topology(name, inner)


def test_an_unknown_topology_is_refused_with_the_nearest_name(folder: Path) -> None:
    with pytest.raises(InputError) as caught:
        load_topology("doide", folder)
    (fault,) = caught.value.faults
    assert fault.file == "topology"
    assert (fault.found, fault.expected, fault.nearest) == ('"doide"', "diode", "diode")


def test_a_topology_is_read_once_and_again_when_its_file_changes(folder: Path) -> None:
    first = load_topology("diode", folder)
    assert load_topology("diode", folder) is first
    path = folder / "diode.toml"
    path.write_text(DESCRIPTION.replace("Diode-connected device", "Changed"), encoding="utf-8")
    os.utime(path, ns=(1, 1))
    assert load_topology("diode", folder).title == "Changed"


FAULTS = [
    # what is replaced, by what, key path, found, expected, nearest
    ("format = 1\n", "", "format", "nothing", "version of this file format, 1", None),
    ("format = 1", "format = 2", "format", "2", "1, the version", None),
    ("format = 1", "format = true", "format", "true", "1, the version", None),
    ('about = "Shows', 'abuot = "Shows', "abuot", '"abuot"', "one of format, title, about", "about"),
    ('nodes = ["vdd", "out"]', "nodes = []", "nodes", "a list", "at least one entry", None),
    ('nodes = ["vdd", "out"]', 'nodes = ["out", "VDD"]', "nodes", '"VDD"', "lower case", None),
    ('output = "out"', 'output = "oot"', "signal.output", '"oot"', "one of vdd, out", "out"),
    ('input = "ISIG"\n', "", "signal.input", "nothing", "the source that drives", None),
    ('load = "RL"', 'load = "CL"', "signal.load", '"CL"', "RL", None),
    ('unit = "Ω"', 'unit = "Ohm"', "parts.RL.unit", '"Ohm"', '"V" or "A" or "Ω" or "F" or "H"', None),
    ('unit = "F"\n', "", "parts.CL.unit", "nothing", "one of V, A, Ω, F, H", None),
    ("required = true", 'required = "yes"', "parts.VDD.required", '"yes"', "true or false", None),
    ('needs = ["RL"]', 'needs = ["RLL"]', "parts.CL.needs", '"RLL"', "one of VDD, RL, IL, CL", "RL"),
    ('needs = ["RL"]', 'needs = "RL"', "parts.CL.needs", '"RL"', "a list", None),
    ('"RL", "IL"', '"RL", "Il"', "one_of", '"Il"', "one of VDD, RL, IL, CL", "IL"),
    ('[["RL", "IL"]]', "[[]]", "one_of", "a list", "at least one entry", None),
    ("[parts.CL]", '[parts."C L"]', 'parts."C L"', '"C L"', "letters and digits", None),
    ("[transistors.M1]", "[transistors.m1]", "transistors.m1", '"m1"', "upper case that starts with M", None),
    ("starter.n", "starter.q", "starter.q", '"q"', "one of n, p", None),
    ("RL = 1000", "RLL = 1000", "starter.n.parts.RLL", '"RLL"', "one of VDD, RL, IL, CL", "RL"),
    ("transistors.M1 = {", "transistors.M2 = {", "starter.n.transistors.M2", '"M2"', "M1", None),
    ('W = "10u"', "W = true", "starter.n.transistors.M1.W", "true", "a number", None),
    ('model = { VTO = "0.7", KP = "100u" }\n', "", "starter.n.model", "nothing", "the parameters", None),
]


@pytest.mark.parametrize(
    ("old", "new", "where", "found", "expected", "nearest"), FAULTS, ids=lambda v: str(v)[:30]
)
def test_a_faulty_description_names_the_key(
    folder: Path, old: str, new: str, where: str, found: str, expected: str, nearest: str | None
) -> None:
    assert old in DESCRIPTION
    write(folder, "faulty", DESCRIPTION.replace(old, new))
    with pytest.raises(InputError) as caught:
        load_topology("faulty", folder)
    fault = next(fault for fault in caught.value.faults if fault.where == where)
    assert fault.file == str(folder / "faulty.toml")
    assert fault.found == found
    assert expected in fault.expected
    assert fault.nearest == nearest


def test_all_faults_of_a_description_come_together(folder: Path) -> None:
    text = DESCRIPTION.replace("required = true", "required = 1").replace('output = "out"', 'output = "x"')
    write(folder, "faulty", text)
    with pytest.raises(InputError) as caught:
        load_topology("faulty", folder)
    assert [fault.where for fault in caught.value.faults] == ["signal.output", "parts.VDD.required"]


def test_the_templates_lie_beside_the_package_in_a_checkout(project: Path) -> None:
    assert templates_folder() == project / "templates"


@pytest.fixture
def elsewhere(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Iterator[Path]:
    """A package that lies somewhere else."""
    package = tmp_path / "site" / "deckgen"
    (package / "stage").mkdir(parents=True)
    monkeypatch.setattr(module, "__file__", str(package / "stage" / "topology.py"))
    templates_folder.cache_clear()
    yield package
    templates_folder.cache_clear()


def test_the_templates_lie_inside_an_installed_package(elsewhere: Path) -> None:
    (elsewhere / "templates").mkdir()
    assert templates_folder() == elsewhere / "templates"


def test_a_folder_beside_an_installed_package_is_not_ours(elsewhere: Path) -> None:
    (elsewhere.parent / "templates").mkdir()
    with pytest.raises(InputError, match="no folder of templates"):
        templates_folder()


STAGE = """\
format = 1
title = "Diode"
topology = "diode"
[parts]
VDD = "5 V"
RL = "1k"
[models.N1]
polarity = "n"
VTO = "0.7"
KP = "100u"
[transistors.M1]
model = "N1"
W = "10u"
L = "1u"
"""


@pytest.mark.parametrize("lines", ['RL = "1k"', 'IL = "1 mA"', 'RL = "1k"\nIL = "1 mA"'])
def test_one_part_of_a_group_is_enough_and_all_may_be_there(folder: Path, lines: str) -> None:
    text = STAGE.replace('RL = "1k"', lines)
    stage = stage_from_text(text, file="diode.toml", templates=folder)
    assert [part.name for part in stage.parts[1:]] == [line.split()[0] for line in lines.split("\n")]


def test_a_stage_without_any_part_of_a_group_is_refused(folder: Path) -> None:
    with pytest.raises(InputError) as caught:
        stage_from_text(STAGE.replace('RL = "1k"\n', ""), file="diode.toml", templates=folder)
    (fault,) = caught.value.faults
    assert (fault.where, fault.found, fault.expected) == ("parts", "none of RL, IL", "at least one of them")


def test_a_misspelt_part_of_a_group_is_one_fault(folder: Path) -> None:
    with pytest.raises(InputError) as caught:
        stage_from_text(STAGE.replace("RL = ", "RLL = "), file="diode.toml", templates=folder)
    (fault,) = caught.value.faults
    assert (fault.where, fault.nearest) == ("parts.RLL", "RL")


def stage_text(topology: Topology, starter: Starter) -> str:
    """A stage file with the values of a starter."""
    lines = ["format = 1", f'title = "{starter.title}"', f'topology = "{topology.name}"', "[parts]"]
    lines += [f'{name} = "{value}"' for name, value in starter.parts]
    lines += ["[models.N1]", f'polarity = "{starter.polarity}"']
    lines += [f'{name} = "{value}"' for name, value in starter.model]
    for name, values in starter.transistors:
        lines += [f"[transistors.{name}]", 'model = "N1"', *(f'{key} = "{value}"' for key, value in values)]
    lines += ["[signal]", *(f'{key} = "{value}"' for key, value in starter.signal)]
    return "\n".join(lines)


def test_every_topology_that_comes_along_loads_and_its_starters_are_stages_without_faults() -> None:
    names = list_topologies()
    assert set(names) == {
        "common-gate",
        "common-source",
        "common-source-current-bias",
        "common-source-degenerated",
        "common-source-drain-feedback",
        "diode-connected",
        "source-follower",
    }
    for name in names:
        topology = load_topology(name)
        assert {starter.polarity for starter in topology.starters} == {"n", "p"}
        for starter in topology.starters:
            stage = stage_from_text(stage_text(topology, starter), file=f"{name}.toml")
            assert stage.title == starter.title
            assert len(stage.parts) == len(starter.parts)
