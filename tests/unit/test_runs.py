"""Run folders: no two runs share one, a file is replaced as a whole or not at all, names stay inside."""

from __future__ import annotations

import errno
import hashlib
import json
import os
import resource
import threading
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from contextlib import contextmanager
from datetime import datetime
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from deckgen.errors import ExitCode, OutputError
from deckgen.store import runs

NOW = datetime(2026, 3, 31, 7, 5, 9)


# --- folders ---


def test_a_folder_is_named_by_time_and_stage_and_the_next_one_is_numbered(tmp_path: Path) -> None:
    made = [runs.new_folder(tmp_path / "runs", "first-gain", now=NOW) for _ in range(3)]
    base = "20260331-070509-first-gain"
    assert [folder.name for folder in made] == [base, f"{base}-2", f"{base}-3"]
    assert all(folder.is_dir() and folder.parent == tmp_path / "runs" for folder in made)


def test_runs_at_the_same_moment_never_get_the_same_folder(tmp_path: Path) -> None:
    workers, each = 8, 25
    gate = threading.Barrier(workers)

    def many(_: int) -> list[Path]:
        gate.wait()
        return [runs.new_folder(tmp_path, "stage", now=NOW) for _ in range(each)]

    with ThreadPoolExecutor(workers) as pool:
        made = [folder for found in pool.map(many, range(workers)) for folder in found]
    assert len(set(made)) == len(made) == workers * each
    assert sorted(tmp_path.iterdir()) == sorted(made)


def test_a_file_of_the_same_name_is_left_alone(tmp_path: Path) -> None:
    (tmp_path / "20260331-070509-stage").write_text("mine")
    assert runs.new_folder(tmp_path, "stage", now=NOW).name == "20260331-070509-stage-2"
    assert (tmp_path / "20260331-070509-stage").read_text() == "mine"


NAMES = [
    ("../../etc/passwd", "etc-passwd"),
    ("/abs/olute", "abs-olute"),
    ("a b\tc\nd", "a-b-c-d"),
    (".hidden", "hidden"),
    ("..", "stage"),
    ("", "stage"),
    ("Ωµ", "stage"),
    ("vo\u0308lt", "vo-lt"),
    ("con$(rm -rf ~)`x`;|&", "con-rm--rf-x"),
    ("-rf", "rf"),
    ("a" * 300, "a" * 80),
    ("ok_1.2-x", "ok_1.2-x"),
    ("\x00\x1b[31m", "31m"),
]


@pytest.mark.parametrize(("name", "safe"), NAMES)
def test_a_name_becomes_one_plain_part_of_a_path(tmp_path: Path, name: str, safe: str) -> None:
    folder = runs.new_folder(tmp_path / "runs", name, now=NOW)
    assert folder.name == f"20260331-070509-{safe}"


@settings(max_examples=60)
@given(name=st.text(max_size=120))
def test_no_name_leads_out_of_the_folder_of_runs(tmp_path_factory: pytest.TempPathFactory, name: str) -> None:
    parent = tmp_path_factory.mktemp("runs")
    folder = runs.new_folder(parent, name, now=NOW)
    assert folder.resolve().parent == parent.resolve()
    assert folder.is_dir()
    assert len(os.fsencode(folder.name)) < 200


def test_where_no_folder_can_be_made_the_error_says_where_and_why(tmp_path: Path) -> None:
    blocked = tmp_path / "file"
    blocked.write_text("x")
    with pytest.raises(OutputError, match=r"file/runs: no run folder can be made there \(Not a directory\)"):
        runs.new_folder(blocked / "runs", "s", now=NOW)


def test_a_folder_full_of_twins_is_an_error_and_no_endless_search(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(runs, "_MOST_TWINS", 3)
    for _ in range(2):
        runs.new_folder(tmp_path, "s", now=NOW)
    with pytest.raises(OutputError, match="clear some away"):
        runs.new_folder(tmp_path, "s", now=NOW)


# --- files ---


@contextmanager
def no_file_above(size: int) -> Iterator[None]:
    """The kernel itself refuses to write files beyond a size, as a full disk does."""
    soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (size, hard))
    try:
        yield
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))


def test_a_file_is_written_and_replaced_whole(tmp_path: Path) -> None:
    path = tmp_path / "comparison.json"
    for text in ("first Ω\n", "second\n"):
        runs.write_atomically(path, text)
        assert path.read_text(encoding="utf-8") == text
    assert list(tmp_path.iterdir()) == [path]


def test_when_the_disk_refuses_the_old_file_stays_and_nothing_is_left_beside_it(tmp_path: Path) -> None:
    path = tmp_path / "comparison.json"
    runs.write_atomically(path, "old")
    with no_file_above(1000), pytest.raises(OutputError, match=r"comparison.json: can't be written \("):
        runs.write_atomically(path, "x" * 5000)
    assert path.read_text() == "old"
    assert list(tmp_path.iterdir()) == [path]
    with no_file_above(1000):
        runs.write_atomically(path, "small")
    assert path.read_text() == "small"


@pytest.mark.parametrize("step", ["open", "replace"])
def test_the_first_error_is_the_one_that_is_told(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, step: str
) -> None:
    path = tmp_path / "out.json"
    path.write_text("old")

    def refuse(*_: Any, **__: Any) -> None:
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    def unlink(*_: Any, **__: Any) -> None:
        raise OSError(errno.EACCES, "not this one")

    with monkeypatch.context() as patched:
        patched.setattr(Path, step, refuse)
        patched.setattr(Path, "unlink", unlink)
        with pytest.raises(OutputError, match="No space left on device") as caught:
            runs.write_atomically(path, "new")
    assert path.read_text() == "old"
    assert caught.value.exit_code is ExitCode.SIMULATOR


def test_a_folder_in_the_way_is_not_replaced(tmp_path: Path) -> None:
    (tmp_path / "taken").mkdir()
    with pytest.raises(OutputError, match=r"taken: can't be written \(Is a directory\)"):
        runs.write_atomically(tmp_path / "taken", "x")
    assert [path.name for path in tmp_path.iterdir()] == ["taken"]


def test_readers_of_a_file_that_is_written_again_and_again_see_it_whole(tmp_path: Path) -> None:
    path = tmp_path / "c.json"
    texts = ["a" * 40_000, "b" * 40_000]
    runs.write_atomically(path, texts[0])
    over = threading.Event()

    def write() -> None:
        for number in range(60):
            runs.write_atomically(path, texts[number % 2])
        over.set()

    writer = threading.Thread(target=write)
    writer.start()
    seen = set()
    while not over.is_set():
        seen.add(path.read_text())
    writer.join()
    assert seen <= set(texts)


# --- the record ---


def test_the_record_holds_a_hash_of_every_other_file(tmp_path: Path) -> None:
    (tmp_path / "deck.cir").write_bytes(b"* deck\n")
    (tmp_path / "start-up").mkdir()
    (tmp_path / "start-up" / "spinit").write_bytes(b"set x\n")
    runs.write_record(tmp_path, {"outcome": "measured", "title": "µ"})
    record = json.loads((tmp_path / runs.RECORD).read_text(encoding="utf-8"))
    assert record["outcome"] == "measured"
    assert record["title"] == "µ"
    assert record["files"] == {
        "deck.cir": hashlib.sha256(b"* deck\n").hexdigest(),
        "start-up/spinit": hashlib.sha256(b"set x\n").hexdigest(),
    }
    assert runs.hash_of(b"") == hashlib.sha256(b"").hexdigest()


def test_a_record_that_can_not_be_written_is_an_error(tmp_path: Path) -> None:
    with no_file_above(10), pytest.raises(OutputError, match=r"run.json: can't be written"):
        runs.write_record(tmp_path, {"outcome": "measured"})
    assert list(tmp_path.iterdir()) == []
