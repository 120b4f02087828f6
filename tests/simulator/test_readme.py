"""What README.md shows is what the commands print, and what both documents name is there.

Regression: the blocks are pinned; ``scripts/readme.py`` writes them anew after a change that is meant.
"""

from __future__ import annotations

import datetime
import os
import re
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

from deckgen.errors import ExitCode
from deckgen.findings.table import TABLE as FINDINGS
from deckgen.pipeline import CheckSettings, check_stage
from deckgen.render.engine import render_runnable
from deckgen.render.starter import starter_stage_file
from deckgen.simulator import Simulator
from deckgen.stage.read import stage_from_text
from deckgen.stage.topology import load_topology
from scripts import readme

TEXT = readme.README.read_text(encoding="utf-8")
BLOCKS = readme.blocks_of(TEXT)
DOCUMENTS = ("README.md", "DEVELOPERS.md")

_FENCE = re.compile(r"^```(\w*)\n(.*?)^```$", re.DOTALL | re.MULTILINE)
_LINK = re.compile(r"\]\(([^)#\s]+)(?:#[^)\s]*)?\)")
_ANCHOR = re.compile(r"\]\(#([^)\s]+)\)")
_PLACE = re.compile(r"`((?:deckgen|templates|stages|scripts|tests|\.ci)/[\w./*-]*)`")


@pytest.fixture(scope="module")
def bodies(simulator: Simulator) -> tuple[str, ...]:
    """What every block should show; the commands ran once, in order."""
    return readme.generated(BLOCKS)


@pytest.mark.parametrize("number", range(len(BLOCKS)), ids=[block.what[:40] for block in BLOCKS])
def test_a_block_shows_what_its_command_prints(number: int, bodies: tuple[str, ...]) -> None:
    shown, printed = BLOCKS[number].body, bodies[number]
    assert readme.normalised(shown) == readme.normalised(printed), "run scripts/readme.py"


def test_all_output_in_the_readme_is_generated() -> None:
    consoles = [found.group(0) + "\n" for found in _FENCE.finditer(TEXT) if "$ " in found[2]]
    assert consoles == [block.body for block in BLOCKS if block.kind == "output"]


def test_every_table_that_the_code_holds_stands_in_the_readme() -> None:
    assert {block.what for block in BLOCKS if block.kind == "table"} == set(readme.TABLES)


def test_the_tour_goes_from_a_starter_to_a_gap_a_claim_a_region_and_a_bare_deck() -> None:
    commands = [block.what for block in BLOCKS if block.kind == "output"]
    for wanted in ("deckgen start", "deckgen predict", "deckgen check", "deckgen write", "ngspice -b"):
        assert any(command.startswith(wanted) for command in commands), wanted
    shown = "".join(block.body for block in BLOCKS)
    for wanted in ("BEYOND", "MISSED", "not compared", "passes", "FAILS"):
        assert wanted in shown


def test_the_stage_file_of_the_reference_uses_every_section_and_passes(
    simulator: Simulator, tmp_path: Path
) -> None:
    example, _ = (found[2] for found in _FENCE.finditer(TEXT) if found[1] == "toml")
    path = tmp_path / "example.toml"
    path.write_text(example, encoding="utf-8")
    settings = CheckSettings(keep=False, today=datetime.date(2030, 1, 1))
    comparison = check_stage(path, simulator=simulator, settings=settings)
    assert comparison.exit_code is ExitCode.OK, comparison.meaning
    named = set(re.findall(r"^\| `\[(\w+)", readme.table("stage-file"), re.MULTILINE))
    assert named >= {"parts", "claims", "wanted"}
    assert {name for name in named if not re.search(rf"^\[{name}\b", example, re.MULTILINE)} == set()


def test_the_stage_file_for_a_deck_passes_beside_a_deck_that_deckgen_wrote(
    simulator: Simulator, tmp_path: Path
) -> None:
    _, example = (found[2] for found in _FENCE.finditer(TEXT) if found[1] == "toml")
    topology = load_topology("common-source")
    starter = stage_from_text(starter_stage_file(topology, "n"), file="starter.toml")
    (tmp_path / "amp.cir").write_text(render_runnable(starter, topology), encoding="utf-8")
    path = tmp_path / "amp.toml"
    path.write_text(example, encoding="utf-8")
    comparison = check_stage(path, simulator=simulator, settings=CheckSettings(keep=False))
    assert comparison.exit_code is ExitCode.OK, comparison.meaning
    claimed = [row.name for row in comparison.quantities if row.claim is not None]
    assert claimed == ["ID(M1)"]


@pytest.mark.parametrize("document", DOCUMENTS)
def test_links_and_places_named_in_a_document_are_there(project: Path, document: str) -> None:
    text = (project / document).read_text(encoding="utf-8")
    prose = _FENCE.sub("", text)
    named = _LINK.findall(prose) + _PLACE.findall(prose)
    assert named
    local = [name for name in named if "://" not in name]
    assert [name for name in local if not any(project.glob(name.rstrip("/")))] == []
    headings = {_anchor(line) for line in re.findall(r"^#+ (.*)$", prose, re.MULTILINE)}
    assert set(_ANCHOR.findall(prose)) <= headings


def _anchor(heading: str) -> str:
    return re.sub(r"[^\w\- ]", "", heading.lower()).replace(" ", "-")


@pytest.mark.parametrize("document", DOCUMENTS)
def test_the_rows_of_every_table_have_as_many_cells_as_its_head(project: Path, document: str) -> None:
    text = (project / document).read_text(encoding="utf-8")
    tables = re.findall(r"(?:^\|.*\n)+", _FENCE.sub("", text), re.MULTILINE)
    assert tables
    for table in tables:
        counts = {len(re.findall(r"(?<!\\)\|", row)) for row in table.splitlines()}
        assert len(counts) == 1, table


def test_a_changed_number_makes_a_block_stale() -> None:
    block = next(block for block in BLOCKS if block.what.startswith("deckgen check"))
    changed = re.sub(r"within  ", "beyond  ", block.body, count=1)
    assert readme.normalised(changed) != readme.normalised(block.body)


@pytest.mark.parametrize(
    ("one", "other", "same"),
    [
        ("measured · 16 within · 0.17 s", "measured · 16 within · 1.23 s", True),
        ("measured · 16 within · 0.17 s", "measured · 15 within · 0.17 s", False),
        (
            "deckgen 0.1.0 · ngspice 39 · /usr/bin/ngspice",
            "deckgen 0.1.0 · ngspice 44.2 · /opt/ngspice",
            True,
        ),
        ("deckgen 0.1.0 · ngspice 39", "deckgen 0.2.0 · ngspice 39", False),
        ("runs/20261201-122841-first", "runs/20270102-000000-first", True),
        ("runs/20261201-122841-first", "runs/20261201-122841-second", False),
        ("240.0 kΩ  +0.0 %", "240.0 kΩ  -0.0 %", True),
        ("240.0 kΩ  +0.1 %", "240.0 kΩ  -0.1 %", False),
    ],
)
def test_only_run_times_versions_timestamps_and_signs_of_zeros_may_differ(
    one: str, other: str, same: bool
) -> None:
    assert (readme.normalised(one) == readme.normalised(other)) is same


@pytest.mark.parametrize(
    ("only", "shown"),
    [
        ("… two", ["one", "two", readme.LEFT_OUT]),
        ("two", [readme.LEFT_OUT, "two", readme.LEFT_OUT]),
        ("two … | ", [readme.LEFT_OUT, "two", "three", "four"]),
        ("one | three … four", ["one", readme.LEFT_OUT, "three", "four"]),
    ],
)
def test_an_excerpt_says_where_lines_are_left_out(only: str, shown: list[str]) -> None:
    assert list(readme.excerpt(["one", "two", "three", "four"], only.removesuffix(" | "))) == shown


def test_an_excerpt_of_a_line_that_is_not_printed_is_refused() -> None:
    with pytest.raises(ValueError, match="no line with 'five' is printed"):
        list(readme.excerpt(["one", "two"], "five"))


def test_a_table_that_the_code_does_not_hold_is_refused() -> None:
    with pytest.raises(ValueError, match="no table"):
        readme.table("prices")


def test_a_marker_with_nothing_below_it_gets_its_block() -> None:
    assert readme.renewed("a\n<!-- table: exit-codes -->\nb\n") == (
        f"a\n<!-- table: exit-codes -->\n{readme.table('exit-codes')}b\n"
    )
    assert readme.renewed("<!-- output: echo yes; echo no >&2 -->\n\nb\n") == (
        "<!-- output: echo yes; echo no >&2 -->\n```console\n$ echo yes; echo no >&2\nyes\nno\n```\n\nb\n"
    )


def test_a_program_that_is_not_there_is_no_output() -> None:
    with pytest.raises(RuntimeError, match="can't be run"):
        readme.renewed("<!-- output: no-such-program-anywhere -->\n")


def test_the_topology_of_the_walk_through_is_two_files_and_nothing_else(
    project: Path, simulator: Simulator, tmp_path: Path
) -> None:
    text = (project / "DEVELOPERS.md").read_text(encoding="utf-8")
    fences = {found[1]: found[2] for found in _FENCE.finditer(text)}
    templates = tmp_path / "templates"
    shutil.copytree(project / "templates", templates)
    (templates / "fixed-gate.cir.j2").write_text(fences["jinja"], encoding="utf-8")
    (templates / "fixed-gate.toml").write_text(fences["toml"], encoding="utf-8")
    topology = load_topology("fixed-gate", templates)
    starter = starter_stage_file(topology, "n")
    stage = stage_from_text(starter, file="fixed-gate.toml", templates=templates)
    deck = tmp_path / "fixed-gate.cir"
    deck.write_text(render_runnable(stage, topology, templates=templates), encoding="utf-8")
    answer = subprocess.run(
        [simulator.path, "-n", "-b", str(deck)], cwd=tmp_path, capture_output=True, text=True, timeout=60
    )
    assert (answer.returncode, answer.stderr.strip()) in [
        (0, ""),
        (0, "Note: No compatibility mode selected!"),
    ]
    # 9 V less 10 kΩ times ½·2.5 mA/V²·(0.4 V)²·(1 + 0.01·VDS): 6.863 V.
    drain = re.search(r"^\s*out\s+(\S+)", answer.stdout, re.MULTILINE)
    assert drain is not None
    assert float(drain[1]) == pytest.approx(6.863, abs=1e-3)


def test_the_example_for_a_notebook_runs(project: Path) -> None:
    text = (project / "DEVELOPERS.md").read_text(encoding="utf-8")
    (example,) = (found[2] for found in _FENCE.finditer(text) if found[1] == "python")
    answer = subprocess.run(
        [sys.executable, "-c", example],
        cwd=project,
        capture_output=True,
        text=True,
        timeout=60,
        env={**os.environ, "PYTHONPATH": str(project)},
    )
    assert answer.returncode == 0, answer.stderr
    assert re.search(r"name='Av'.*\n0 \[\]$", answer.stdout.strip())


def test_the_text_of_a_finding_keeps_its_stars_and_shows_what_is_filled_in() -> None:
    rows = readme.table("findings").splitlines()
    slugs = {row.split("`")[1] for row in rows[2:]}
    assert slugs == set(FINDINGS)
    assert any("VOV(*device*) = *v\\_ov* is below" in row for row in rows)
    assert not any(re.search(r"\{\w", row) for row in rows)
