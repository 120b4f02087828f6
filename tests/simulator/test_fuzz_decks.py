"""Spoilt decks: each ends in an outcome within its limit, runs no command and leaves no file."""

from __future__ import annotations

import shutil
import tempfile
from collections import Counter
from collections.abc import Callable, Iterator
from functools import partial
from pathlib import Path

import pytest

from deckgen import pipeline
from deckgen.comparison import Comparison
from deckgen.errors import Outcome
from deckgen.intake import Taken, take_in
from deckgen.simulator import Limits, Simulator
from deckgen.simulator.flatten import flatten
from tests.simulator.mutants import mutant
from tests.simulator.plain import attempted_point

DECKS = Path(__file__).resolve().parents[1] / "data" / "decks"
SEEDS = sorted(DECKS.glob("*.cir"))
SECONDS = 10.0
AT_A_TIME = 500


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Iterator[Path]:
    """A copy of the decks' folder to work in; temporary files and the cache beside it."""
    place = tmp_path / "decks"
    shutil.copytree(DECKS, place)
    for name in ("tmp", "cache", "home"):
        (tmp_path / name).mkdir()
    monkeypatch.chdir(place)
    monkeypatch.setattr(tempfile, "tempdir", str(tmp_path / "tmp"))
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "cache"))
    monkeypatch.setenv("HOME", str(tmp_path / "home"))
    yield place
    assert list((tmp_path / "tmp").iterdir()) == []
    assert list((tmp_path / "home").iterdir()) == []


def _checked(folder: Path, numbers: range, simulator: Simulator) -> tuple[Comparison, ...]:
    """Check the mutants of these numbers; see that they leave nothing behind."""
    paths = [Path(f"mutant{number}.cir") for number in numbers]
    for path, number in zip(paths, numbers, strict=True):
        path.write_bytes(mutant(SEEDS, number))
    before = {path: path.stat().st_mtime_ns for path in folder.rglob("*")}
    settings = pipeline.CheckSettings(run_dir=folder / "runs", keep=False, limits=Limits(seconds=SECONDS))
    comparisons = pipeline.check_all(paths, simulator=simulator, settings=settings, jobs=2)
    assert {path: path.stat().st_mtime_ns for path in folder.rglob("*")} == before
    for path in paths:
        path.unlink()
    return comparisons


def test_a_spoilt_deck_ends_in_an_outcome(
    folder: Path, simulator: Simulator, count: Callable[[int, int], int]
) -> None:
    total = count(300, 20_000)
    outcomes: Counter[Outcome] = Counter()
    for start in range(0, total, AT_A_TIME):
        numbers = range(start, min(start + AT_A_TIME, total))
        for number, comparison in zip(numbers, _checked(folder, numbers, simulator), strict=True):
            what = f"mutant {number}: {comparison.meaning}"
            assert comparison.outcome is not Outcome.BUG, what
            assert int(comparison.exit_code) in (0, 1, 2, 3), what
            assert comparison.seconds is None or comparison.seconds < SECONDS + 5.0, what
            outcomes[comparison.outcome] += 1
    # A test in which all decks are refused at once would show nothing.
    assert outcomes[Outcome.MEASURED] > total / 5
    assert outcomes[Outcome.REFUSED] > total / 20


def test_a_spoilt_deck_that_is_read_is_read_as_ngspice_reads_it(
    folder: Path, simulator: Simulator, tmp_path: Path, count: Callable[[int, int], int]
) -> None:
    """Independent: operating points of plain ngspice, of the file itself and of what deckgen makes of it."""
    compared = 0
    paths = [folder / f"mutant{number}.cir" for number in range(count(150, 5000))]
    for number, path in enumerate(paths):
        path.write_bytes(mutant(SEEDS, number))
    # Some mutants keep ngspice busy for ever.
    flattener = partial(flatten, simulator=simulator, limits=Limits(seconds=SECONDS))
    for path, taken in zip(paths, take_in(paths, flattener=flattener), strict=True):
        if not isinstance(taken, Taken):
            continue
        text = path.with_suffix(".text")
        text.write_text(f"{taken.netlist}.end\n", encoding="utf-8")
        original = attempted_point(simulator, tmp_path / path.stem / "original", path)
        ours = attempted_point(simulator, tmp_path / path.stem / "ours", text)
        if original is None or ours is None:
            continue  # a reason of its own, which the check tells
        compared += 1
        for name, value in original.items():
            if name.startswith("v(") and name != "v(all)":
                assert ours[name] == pytest.approx(value, rel=1e-9, abs=1e-11), f"{path.name}: {name}"
    assert compared > len(paths) / 8


def test_a_number_gives_the_same_mutant_each_time() -> None:
    assert [mutant(SEEDS, number) for number in range(20)] == [mutant(SEEDS, number) for number in range(20)]
    assert len({mutant(SEEDS, number) for number in range(20)}) == 20
