"""The demo library shows what its page says it shows: most stages clean, some each with its own trouble."""

from __future__ import annotations

import json
import re
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest

from deckgen.circuit.reader import read_flat
from deckgen.stage.read import read_stage
from tests.simulator.command_line import TOPOLOGIES


@pytest.fixture(scope="module")
def checked(project: Path, tmp_path_factory: pytest.TempPathFactory) -> dict[str, Any]:
    """The JSON document of a check of the whole library, run once."""
    folder = tmp_path_factory.mktemp("demo")
    report, runs = folder / "check.json", folder / "runs"
    command = [sys.executable, "-m", "deckgen", "-q", "check", "stages"]
    answer = subprocess.run(
        [*command, "--json", str(report), "--run-dir", str(runs)],
        cwd=project,
        capture_output=True,
        text=True,
        timeout=120,
    )
    assert answer.returncode == 1, answer.stderr
    document: dict[str, Any] = json.loads(report.read_text(encoding="utf-8"))
    assert document["exit_code"] == 1
    return {stage["name"]: stage for stage in document["stages"]}


def rows(stage: dict[str, Any], **wanted: object) -> set[str]:
    """Names of the quantities whose keys have the values wanted."""
    return {
        row["name"] for row in stage["quantities"] if all(row[key] == value for key, value in wanted.items())
    }


def slugs(stage: dict[str, Any], severity: str) -> set[str]:
    return {finding["slug"] for finding in stage["findings"] if finding["severity"] == severity}


def missed_claims(stage: dict[str, Any]) -> set[str]:
    return {row["name"] for row in stage["quantities"] if row["claim_verdict"] == "beyond"}


FAILING = {"level-trim", "wind-channel"}
CLEAN = [
    "box-knock",
    "burst-gain",
    "disc-buffer",
    "first-gain",
    "gust-meter",
    "line-driver",
    "range-switch",
    "recorder-input",
    "second-mast",
    "trip-level",
]


def test_all_stages_and_decks_are_measured_and_two_fail(checked: dict[str, Any]) -> None:
    assert set(checked) == {*CLEAN, "second-gain", *FAILING}
    assert {stage["outcome"] for stage in checked.values()} == {"measured"}
    assert {name for name, stage in checked.items() if stage["exit_code"] != 0} == FAILING


def test_the_page_of_the_library_names_every_stage_in_its_table_and_in_its_drawing(
    checked: dict[str, Any], project: Path
) -> None:
    page = (project / "stages/README.md").read_text(encoding="utf-8")
    assert set(re.findall(r"(?m)^\| `([\w-]+)` \|", page)) == set(checked)
    drawing = "\n".join(line for line in page.splitlines() if line.startswith("    "))
    assert set(re.findall(r"[a-z]+-[a-z]+", drawing)) == set(checked)


def test_every_topology_and_both_polarities_have_a_stage(project: Path) -> None:
    stages = [read_stage(path) for path in sorted((project / "stages").glob("*.toml"))]
    assert {stage.topology for stage in stages} == set(TOPOLOGIES)
    assert {model.polarity for stage in stages for model in stage.models} == {"n", "p"}


def test_every_stage_has_the_same_two_transistors(project: Path) -> None:
    models = {model for path in (project / "stages").glob("*.toml") for model in read_stage(path).models}
    assert {model.name for model in models} == {"NH1", "PH1"}
    assert len(models) == 2
    (n_channel,) = (dict(model.parameters) for model in models if model.polarity == "n")
    for path in sorted((project / "stages").glob("*.cir")):
        (card,) = read_flat(path.read_text(encoding="utf-8")).models
        written = {name.upper(): value for name, value in card.parameters if name != "level"}
        assert written == pytest.approx(n_channel)


@pytest.mark.parametrize("name", CLEAN)
def test_the_clean_stages_have_no_gap_that_counts_and_no_warning(checked: dict[str, Any], name: str) -> None:
    stage = checked[name]
    assert rows(stage, verdict="beyond", excused=None) == set()
    assert rows(stage, verdict="not compared") == set()
    assert missed_claims(stage) == set()
    assert slugs(stage, "warning") == set()


def test_the_known_gap_of_the_buffer_is_excused_with_its_reason(checked: dict[str, Any]) -> None:
    assert rows(checked["disc-buffer"], verdict="beyond") == {"fH"}
    (row,) = (row for row in checked["disc-buffer"]["quantities"] if row["name"] == "fH")
    assert "time constants" in row["excused"]


def test_the_known_gap_of_the_recorder_input_is_that_of_channel_length_modulation(
    checked: dict[str, Any], project: Path
) -> None:
    assert rows(checked["recorder-input"], verdict="beyond") == {"gds(M1)"}
    (row,) = (row for row in checked["recorder-input"]["quantities"] if row["name"] == "gds(M1)")
    assert "1 + λ·VDS" in row["excused"]
    values = {each["name"]: each["simulated"] for each in checked["recorder-input"]["quantities"]}
    (model,) = read_stage(project / "stages/recorder-input.toml").models
    modulation = 1.0 + dict(model.parameters)["LAMBDA"] * abs(values["VDS(M1)"])
    assert row["simulated"] / row["hand"] == pytest.approx(1.0 / modulation, rel=1e-4)


def test_the_degenerated_stage_takes_what_is_too_much_for_the_second_gain(
    checked: dict[str, Any], project: Path
) -> None:
    amplitudes = {
        name: read_stage(project / f"stages/{name}.toml").signal.amplitude
        for name in ("gust-meter", "second-gain")
    }
    assert amplitudes["gust-meter"] == amplitudes["second-gain"]
    assert slugs(checked["gust-meter"], "warning") == set()


def test_the_range_switch_has_one_transistor_in_triode_and_one_cut_off_as_stated(
    checked: dict[str, Any],
) -> None:
    regions = [
        (device["name"], device["region_stated"], device["region"], device["region_simulated"])
        for device in checked["range-switch"]["transistors"]
    ]
    assert regions == [("M1", "triode", "triode", "triode"), ("M2", "cut-off", "cut-off", "cut-off")]
    assert rows(checked["range-switch"], verdict="within") >= {"gds(M1)", "gds(M2)", "Av", "Rout"}


def test_the_cascode_is_within_the_tolerances_of_the_full_set(checked: dict[str, Any]) -> None:
    stage = checked["burst-gain"]
    assert stage["assumptions"] == "full"
    assert len(stage["transistors"]) == 2
    assert {row["verdict"] for row in stage["quantities"]} <= {"within", "absent"}
    assert "analysis-left-out" in slugs(stage, "note")


def test_the_claims_that_the_page_tells_of_are_made_and_met(checked: dict[str, Any]) -> None:
    claimed = {"box-knock": "Rin", "second-mast": "Rin", "trip-level": "V(out)"}
    for name, quantity in claimed.items():
        assert quantity in rows(checked[name], claim_verdict="within")


def test_the_mistyped_resistor_shows_only_in_the_claim(checked: dict[str, Any]) -> None:
    stage = checked["level-trim"]
    assert missed_claims(stage) == {"ID(M1)"}
    assert {row["verdict"] for row in stage["quantities"]} == {"within"}


def test_with_the_resistor_as_it_was_meant_the_claim_is_met(project: Path, tmp_path: Path) -> None:
    text = (project / "stages/level-trim.toml").read_text(encoding="utf-8")
    assert 'RS = "1.5k"' in text
    (tmp_path / "level-trim.toml").write_text(text.replace('RS = "1.5k"', 'RS = "5.1k"'), encoding="utf-8")
    command = [sys.executable, "-m", "deckgen", "-q", "check", "level-trim.toml", "--no-keep"]
    answer = subprocess.run(command, cwd=tmp_path, capture_output=True, text=True, timeout=60)
    assert answer.returncode == 0, answer.stdout


def test_the_gain_of_the_stage_in_triode_is_not_compared(checked: dict[str, Any]) -> None:
    stage = checked["wind-channel"]
    (m1,) = stage["transistors"]
    assert (m1["region"], m1["region_simulated"], m1["region_stated"]) == ("triode", "triode", "saturation")
    assert rows(stage, verdict="not compared") >= {"gm(M1)", "Av", "Rout"}
    assert rows(stage, verdict="within") >= {"ID(M1)", "VDS(M1)"}


def test_the_stage_driven_too_hard_is_warned_of_and_keeps_its_verdicts(checked: dict[str, Any]) -> None:
    stage = checked["second-gain"]
    assert "signal-too-large" in slugs(stage, "warning")
    assert {row["verdict"] for row in stage["quantities"]} == {"within"}
