"""What ``deckgen simulator`` tells of a simulator, on the real one and on ones that can't."""

from __future__ import annotations

import time
from pathlib import Path

from deckgen.simulator import Simulator, capabilities
from tests.simulator.fakes import fake, wrapped


def test_the_installed_simulator_can_do_all_within_a_second(simulator: Simulator) -> None:
    started = time.perf_counter()
    found = capabilities(simulator)
    assert time.perf_counter() - started < 1.0
    assert len(found) == 5
    assert [each for each in found if not each.works] == []
    assert all(each.detail for each in found)


def test_values_are_seen(simulator: Simulator) -> None:
    details = [each.detail for each in capabilities(simulator)]
    assert details[0] == "v(out) = 3"
    assert details[1] == "v(out) = 0.5-0.5j"
    assert details[2] == "@m1[gm] = 0.0002"


def test_a_simulator_that_is_not_there_can_do_nothing(tmp_path: Path) -> None:
    found = capabilities(Simulator("ngspice", "39", str(tmp_path / "gone")))
    assert not any(each.works for each in found)
    assert "simulator missing" in found[0].detail


def test_a_simulator_that_gives_up_on_everything_can_do_nothing(tmp_path: Path) -> None:
    found = capabilities(fake(tmp_path, "echo 'Error: no' >&2; exit 1"))
    # It refuses the misspelt card as well as everything else, so that one thing says little alone.
    assert [each.works for each in found] == [False, False, False, True, False]


def test_a_simulator_without_our_start_up_file_is_found_out(simulator: Simulator, tmp_path: Path) -> None:
    found = capabilities(wrapped(tmp_path, simulator, before="unset SPICE_SCRIPTS"))
    works = {each.name: each.works for each in found}
    # The misspelt parameter is only ignored then, but with a warning, and a warning is enough.
    assert works.pop("a circuit without an operating point has none") is False
    assert all(works.values())


def test_a_wrong_value_is_found_out(simulator: Simulator, tmp_path: Path) -> None:
    wrong = wrapped(tmp_path, simulator, before="sed -i 's/^r1 in out 2k/r1 in out 2.00001k/' deck.cir")
    found = capabilities(wrong)[0]
    assert not found.works
    assert "should be 3" in found.detail


def test_nothing_is_left_behind(simulator: Simulator, tmp_path: Path) -> None:
    keeping = wrapped(tmp_path, simulator, before=f"pwd >>{tmp_path}/where")
    capabilities(keeping)
    folders = (tmp_path / "where").read_text("utf-8").split()
    assert len(folders) == 5
    assert not any(Path(folder).exists() for folder in folders)
