"""The wheel, built and installed into an empty environment, works from an unrelated folder.

Its dependencies are taken from the environment that runs the tests, through a path file, so that no
network is needed: what is tested is what the wheel itself carries.
"""

from __future__ import annotations

import itertools
import json
import os
import subprocess
import sys
import sysconfig
import venv
import zipfile
from collections.abc import Callable
from pathlib import Path

import pytest

from tests.simulator.command_line import TOPOLOGIES

Deckgen = Callable[..., subprocess.CompletedProcess[str]]


@pytest.fixture(scope="module")
def wheel(project: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("dist")
    command = [sys.executable, "-m", "build", "--no-isolation", "--wheel", "--outdir", str(folder)]
    subprocess.run(command, cwd=project, check=True, capture_output=True, timeout=120)
    (built,) = folder.glob("deckgen-*.whl")
    return built


@pytest.fixture(scope="module")
def installed(wheel: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Folder of an environment that holds this wheel, and nothing else of deckgen."""
    folder = tmp_path_factory.mktemp("empty") / "venv"
    venv.create(folder, with_pip=False, symlinks=True)
    python = str(folder / "bin" / "python")
    command = [
        sys.executable,
        "-m",
        "pip",
        "--python",
        python,
        "install",
        "--quiet",
        "--no-deps",
        "--no-index",
    ]
    subprocess.run([*command, str(wheel)], check=True, capture_output=True, timeout=120)
    (site_packages,) = (folder / "lib").glob("python3*/site-packages")
    # Path files are not followed from here, so the checkout that is installed there stays out of sight.
    (site_packages / "dependencies.pth").write_text(sysconfig.get_path("purelib") + "\n")
    return folder


@pytest.fixture
def deckgen(installed: Path, tmp_path: Path) -> Deckgen:
    """The installed command, run in an unrelated folder."""

    def run(*arguments: str) -> subprocess.CompletedProcess[str]:
        environment = {key: value for key, value in os.environ.items() if not key.startswith("PYTHON")}
        return subprocess.run(
            [str(installed / "bin" / "deckgen"), *arguments],
            cwd=tmp_path,
            env=environment,
            capture_output=True,
            text=True,
            timeout=60,
        )

    return run


def test_the_wheel_carries_templates_start_up_file_schemas_and_licence(wheel: Path, project: Path) -> None:
    names = set(zipfile.ZipFile(wheel).namelist())
    templates = {f"deckgen/templates/{path.name}" for path in (project / "templates").iterdir()}
    schemas = {f"deckgen/schemas/{path.name}" for path in (project / "deckgen/schemas").glob("*.json")}
    assert {"deckgen/templates/frame.cir.j2", "deckgen/templates/common-source.toml"} <= templates
    assert schemas
    assert templates | schemas | {"deckgen/simulator/data/spinit", "deckgen/py.typed"} <= names
    assert any(name.endswith("licenses/LICENSE") for name in names)


def test_the_wheel_carries_neither_tests_nor_stages(wheel: Path) -> None:
    tops = {name.split("/")[0] for name in zipfile.ZipFile(wheel).namelist()}
    assert {top for top in tops if not top.endswith(".dist-info")} == {"deckgen"}


def test_the_installed_package_is_the_one_of_the_wheel(installed: Path, tmp_path: Path) -> None:
    command = [str(installed / "bin" / "python"), "-c", "import deckgen; print(deckgen.__file__)"]
    environment = {key: value for key, value in os.environ.items() if not key.startswith("PYTHON")}
    answer = subprocess.run(
        command, cwd=tmp_path, env=environment, capture_output=True, text=True, check=True, timeout=60
    )
    assert Path(answer.stdout.strip()).is_relative_to(installed)


def test_topologies_are_listed_from_the_wheel(deckgen: Deckgen) -> None:
    answer = deckgen("topologies")
    assert answer.returncode == 0, answer.stderr
    assert [line.split()[0] for line in answer.stdout.splitlines()] == list(TOPOLOGIES)


def test_stages_of_every_topology_started_from_the_wheel_pass_their_check(
    deckgen: Deckgen, tmp_path: Path
) -> None:
    for topology, polarity in zip(TOPOLOGIES, itertools.cycle("np")):
        started = deckgen("start", topology, "--polarity", polarity)
        assert started.returncode == 0, started.stderr
    files = [f"{topology}.toml" for topology in TOPOLOGIES]
    checked = deckgen("check", *files, "--json", "all.json")
    assert checked.returncode == 0, checked.stdout + checked.stderr
    stages = json.loads((tmp_path / "all.json").read_text())["stages"]
    assert [stage["name"] for stage in stages] == list(TOPOLOGIES)
    for stage in stages:
        assert stage["outcome"] == "measured"
        assert {row["name"] for row in stage["quantities"]} >= {"ID(M1)", "gm(M1)", "Av", "Rin", "Rout"}


def test_the_wheel_writes_the_deck_that_start_left(deckgen: Deckgen, tmp_path: Path) -> None:
    deckgen("start", "common-source", "--output", "amplifier.toml")
    written = deckgen("write", "amplifier.toml", "--output", "written.cir")
    assert written.returncode == 0, written.stderr
    assert (tmp_path / "written.cir").read_text() == (tmp_path / "amplifier.cir").read_text()
