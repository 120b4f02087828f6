"""Which files a check means: those named, and of folders the stage files and the decks that hold a note."""

from __future__ import annotations

import os
from pathlib import Path

import pytest

from deckgen.errors import InputError
from deckgen.stage.collect import DECK_SUFFIXES, is_deck, stage_files

NOTED = "title\n* deckgen: input VIN\n"


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """An empty folder, the current one."""
    monkeypatch.chdir(tmp_path)
    return tmp_path


def lay(*names: str, text: str = NOTED) -> None:
    for name in names:
        path = Path(name)
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text(text, encoding="utf-8")


def found(*paths: str) -> list[str]:
    return [path.as_posix() for path in stage_files([Path(path) for path in paths])]


@pytest.mark.parametrize(
    "name", [f"x{suffix}" for suffix in sorted(DECK_SUFFIXES)] + ["X.CIR", "a.b.cir", ".x.cir"]
)
def test_a_deck_is_one_by_the_end_of_its_name(name: str) -> None:
    assert is_deck(Path(name))


@pytest.mark.parametrize("name", ["x.toml", "x.inc", "x.lib", "cir", "x.cir.bak", "x", ".cir", ""])
def test_other_files_are_no_decks(name: str) -> None:
    assert not is_deck(Path(name))


def test_files_that_are_named_are_taken_whatever_they_are(folder: Path) -> None:
    lay("a.toml", "b.cir", "c.txt", text="no note")
    assert found("c.txt", "b.cir", "nowhere.cir", "a.toml") == ["c.txt", "b.cir", "nowhere.cir", "a.toml"]


def test_any_mix_of_files_and_folders_keeps_its_order_and_names_none_twice(folder: Path) -> None:
    lay("s/b.toml", "s/a.cir", "s/deep/c.sp", "x.cir")
    assert found("x.cir", "s", "s/b.toml", "x.cir") == ["x.cir", "s/a.cir", "s/b.toml", "s/deep/c.sp"]
    assert found("s/deep/c.sp", "s") == ["s/deep/c.sp", "s/a.cir", "s/b.toml"]


@pytest.mark.parametrize(
    "text",
    ["t\n* deckgen: output d\n", "t\n  *DeckGen : x\n", "t\n*deckgen:\n", "t\r\n* deckgen: output d\r\n",
     "t\n" + "* long\n" * 1000 + "\t*\tdeckgen\t:x"],
)  # fmt: skip
def test_a_deck_in_a_folder_counts_when_it_holds_a_note(folder: Path, text: str) -> None:
    lay("s/a.cir", text=text)
    lay("s/model.cir", "s/c.lib", text="* a model, no note: deckgen\n")
    assert found("s") == ["s/a.cir"]


@pytest.mark.parametrize(
    "text", ["", "t\n* deckgen output d\n", "t\nr1 a 0 1 ; * deckgen: x\n", "t\n* not deckgen: x\n"]
)
def test_a_deck_without_a_note_is_not_meant_by_its_folder(folder: Path, text: str) -> None:
    lay("s/a.cir", text=text)
    lay("s/b.toml")
    assert found("s") == ["s/b.toml"]


def test_a_stage_file_speaks_for_the_deck_of_its_name(folder: Path) -> None:
    lay("s/a.cir", "s/a.toml", "s/b.cir", "s/deep/a.sp", "s/c.toml", "s/c.net")
    assert found("s") == ["s/a.toml", "s/b.cir", "s/c.toml", "s/deep/a.sp"]
    assert found("s/a.cir") == ["s/a.cir"]


def test_settings_of_a_library_are_no_stage(folder: Path) -> None:
    lay("s/library.toml", "s/a.toml", "s/deep/library.toml")
    assert found("s") == ["s/a.toml"]


def test_evidence_of_runs_is_no_stage(folder: Path) -> None:
    lay(
        "s/a.toml",
        "s/runs/1-a/a.toml",
        "s/runs/1-a/deck.cir",
        "s/runs/1-a/run.json",
        "s/runs/1-a/deep/x.toml",
    )
    lay("s/runs/b.toml")
    assert found("s") == ["s/a.toml", "s/runs/b.toml"]


def test_a_folder_without_any_is_refused_and_all_such_together(folder: Path) -> None:
    for name in ("e", "f"):
        (folder / name).mkdir()
    lay("f/readme.txt", "f/unnoted.cir", text="title\n")
    lay("g/a.toml")
    with pytest.raises(InputError) as refusal:
        stage_files([Path("e"), Path("g"), Path("f")])
    assert [fault.file for fault in refusal.value.faults] == ["e", "f"]


def test_links_inside_are_followed_and_links_that_lead_out_are_no_files_of_the_folder(folder: Path) -> None:
    lay("s/a.toml", "out/b.toml", "out/c.cir")
    links = {"s/in.toml": "a.toml", "s/b.toml": "../out/b.toml", "s/c.cir": "../out/c.cir", "s/d": "../out",
             "s/loop.toml": "loop.toml", "s/gone.toml": "nowhere"}  # fmt: skip
    for name, target in links.items():
        Path(name).symlink_to(target)
    assert found("s") == ["s/a.toml", "s/in.toml"]
    assert found("s/b.toml") == ["s/b.toml"]
    Path("t").symlink_to("out")
    assert found("t") == ["t/b.toml", "t/c.cir"]


def test_pipes_and_folders_with_such_names_are_passed_over(folder: Path) -> None:
    lay("s/a.toml")
    os.mkfifo("s/pipe.cir")
    os.mkfifo("s/pipe.toml")
    Path("s/folder.cir").mkdir()
    assert found("s") == ["s/a.toml"]


def test_a_name_longer_than_any_is_left_to_whoever_reads_it(folder: Path) -> None:
    assert found("n" * 5000 + ".cir") == ["n" * 5000 + ".cir"]
