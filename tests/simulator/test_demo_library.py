"""The demo library shows what it says it shows: three stages clean, three each with its own trouble."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest


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


def test_six_stages_of_both_polarities_and_topologies_are_measured(checked: dict[str, Any]) -> None:
    assert set(checked) == {
        "disc-buffer",
        "first-gain",
        "second-gain",
        "line-driver",
        "level-trim",
        "wind-channel",
    }
    assert {stage["outcome"] for stage in checked.values()} == {"measured"}
    roles = {name: stage["transistors"][0]["role"] for name, stage in checked.items()}
    assert set(roles.values()) >= {"common-source", "follower"}


@pytest.mark.parametrize("name", ["disc-buffer", "first-gain", "line-driver"])
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
