"""No deck, stage file or template makes deckgen read a file that it may not read, wait for one, or show one.

Seen from a sandbox with a secret beside it: see ``sandbox.py``.
"""

from __future__ import annotations

import os
import re
import time
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

from deckgen.errors import InputError
from deckgen.render.engine import render
from deckgen.stage.files import parse_toml
from deckgen.stage.read import stage_from_table
from deckgen.stage.topology import load_topology
from tests.simulator.command_line import stage_text
from tests.simulator.sandbox import SECRET, STAGE, Sandbox, opened


@pytest.fixture
def sandbox(monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> Iterator[Sandbox]:
    """A fresh sandbox."""
    with opened(monkeypatch, capsys) as place:
        yield place


# --- includes ----------------------------------------------------------------------------------------


def _link(sandbox: Sandbox, name: str, target: Path | str) -> None:
    path = sandbox.decks / name
    path.parent.mkdir(parents=True, exist_ok=True)
    path.symlink_to(target)


def _fifo(sandbox: Sandbox) -> None:
    os.mkfifo(sandbox.decks / "fifo")


def _sparse(sandbox: Sandbox) -> None:
    with (sandbox.decks / "huge.inc").open("wb") as file:
        file.truncate(33 * 2**20)


def _mutual(sandbox: Sandbox) -> None:
    sandbox.lay("a.inc", "* a\n.include b.inc\n")
    sandbox.lay("b.inc", "* b\n.include a.inc\n")


def _deep(sandbox: Sandbox) -> None:
    for number in range(60):
        sandbox.lay(f"deep{number}.inc", f"* {number}\n.include deep{number + 1}.inc\n")


def _bomb(sandbox: Sandbox) -> None:
    """Each file includes the next one twice: 2^22 files, none of which holds anything."""
    for number in range(22):
        sandbox.lay(f"bomb{number}.inc", f".include bomb{number + 1}.inc\n" * 2)
    sandbox.lay("bomb22.inc", "* nothing\n")


def _nothing(_: Sandbox) -> None:
    pass


PATHS: dict[str, tuple[str, Callable[[Sandbox], object], str]] = {
    "absolute": (".include HIDDEN", _nothing, "include-outside"),
    "absolute, quoted": ('.include "HIDDEN"', _nothing, "include-outside"),
    "library": (".lib HIDDEN tt", _nothing, "include-outside"),
    "above": (".include ../outside/secret.inc", _nothing, "include-outside"),
    "there and back": (".include ./x/../../outside/secret.inc", _nothing, "include-outside"),
    "home": (".include ~/.spiceinit", _nothing, "include-missing"),
    "variable": (".include $HOME/.spiceinit", _nothing, "include-missing"),
    "url": (".include file:///etc/passwd", _nothing, "include-missing"),
    "passwords": (".include /etc/passwd", _nothing, "include-outside"),
    "link to a file": (".include l.inc", lambda s: _link(s, "l.inc", s.secret), "include-outside"),
    "relative link": (
        ".include l.inc", lambda s: _link(s, "l.inc", "../outside/secret.inc"), "include-outside"
    ),
    "link to a folder": (
        ".include l/secret.inc", lambda s: _link(s, "l", s.root / "outside"), "include-outside"
    ),
    "link to a link": (
        ".include l1", lambda s: (_link(s, "l1", "l2"), _link(s, "l2", s.secret)), "include-outside"
    ),
    "link to itself": (".include l", lambda s: _link(s, "l", "l"), "include-missing"),
    "dangling link": (".include l", lambda s: _link(s, "l", "nowhere"), "include-missing"),
    "zeros": (".include /dev/zero", _nothing, "include-outside"),
    "standard input": (".include /dev/stdin", _nothing, "include-outside"),
    "link to zeros": (".include z", lambda s: _link(s, "z", "/dev/zero"), "include-outside"),
    "descriptors": (".include /proc/self/fd/0", _nothing, "include-outside"),
    "environment": (".include /proc/self/environ", _nothing, "include-outside"),
    "pipe": (".include fifo", _fifo, "not-a-file"),
    "folder": (".include sub", lambda s: (s.decks / "sub").mkdir(), "not-a-file"),
    "itself": (".include x.cir", _nothing, "include-itself"),
    "itself by a link": (".include l.cir", lambda s: _link(s, "l.cir", "x.cir"), "include-itself"),
    "each other": (".include a.inc", _mutual, "include-itself"),
    "too deep": (".include deep0.inc", _deep, "include-itself"),
    "bomb": (".include bomb0.inc", _bomb, "too-many-lines"),
    "huge": (".include huge.inc", _sparse, "file-too-large"),
    "zero bytes": (".include b", lambda s: s.lay("b", b"r1 a 0 1\0\n"), "nul-bytes"),
    "binary": (".include b", lambda s: s.lay("b", bytes(range(256)) * 8), "nul-bytes"),
    "long name": (f".include {'n' * 5000}", _nothing, "include-missing"),
    "long path": (f".include {'n/' * 3000}x", _nothing, "include-missing"),
    "no name": (".include", _nothing, "include-missing"),
    "empty name": ('.include ""', _nothing, "include-missing"),
    "absent": (".include nowhere.inc", _nothing, "include-missing"),
}  # fmt: skip


@pytest.mark.parametrize(("card", "prepare", "slug"), PATHS.values(), ids=PATHS)
def test_no_file_outside_is_read_and_none_is_waited_for(
    sandbox: Sandbox, card: str, prepare: Callable[[Sandbox], object], slug: str
) -> None:
    prepare(sandbox)
    sandbox.lay("x.cir", sandbox.armed(f"attack\n{STAGE}{card}\n.end\n"))
    begun = time.monotonic()
    answer = sandbox.check("x.cir")
    assert time.monotonic() - begun < 10.0
    assert answer.code == 2
    assert f"[{slug}]" in answer.out
    assert "line 9" in answer.out or slug in ("include-itself", "too-many-lines")


@pytest.mark.parametrize("card", [".include HIDDEN", ".lib HIDDEN tt", ".inc 'HIDDEN'", ".incl HIDDEN"])
def test_an_include_on_the_title_line_is_refused(sandbox: Sandbox, card: str) -> None:
    sandbox.lay("x.cir", sandbox.armed(f"{card}\n{STAGE}"))
    answer = sandbox.check("x.cir")
    assert answer.code == 2
    assert "[include-on-title-line]" in answer.out


def test_a_declared_root_opens_that_folder_and_no_other(sandbox: Sandbox) -> None:
    (sandbox.root / "models").mkdir()
    (sandbox.root / "models" / "load.inc").write_text("rl d 0 1meg\n", encoding="utf-8")
    (sandbox.root / "models" / "out.inc").symlink_to(sandbox.secret)
    roots = ("--include-root", sandbox.root / "models")
    sandbox.lay("good.cir", f"good\n{STAGE}.include load.inc\n")
    assert sandbox.check("good.cir", options=roots).code == 0
    for name, slug in (
        ("out.inc", "include-missing"),
        ("../outside/secret.inc", "include-outside"),
        (str(sandbox.secret), "include-outside"),
    ):
        sandbox.lay("bad.cir", f"bad\n{STAGE}.include {name}\n")
        answer = sandbox.check("bad.cir", options=roots)
        assert answer.code == 2
        assert f"[{slug}]" in answer.out


# --- what names decks --------------------------------------------------------------------------------


def _deck_outside(sandbox: Sandbox) -> Path:
    path = sandbox.root / "outside" / "x.cir"
    path.write_text(f"{SECRET}\n{STAGE}* deckgen: {SECRET}\n", encoding="utf-8")
    return path


@pytest.mark.parametrize(
    "named",
    ["../outside/x.cir", "ABSOLUTE", "link.cir", "folder/x.cir", "loop.cir", "..", ".", "", "a\\u0000b",
     "/dev/zero", "fifo", "n" * 400, "//etc/passwd", "sub/../../outside/x.cir"],
)  # fmt: skip
def test_a_stage_file_names_no_deck_outside_its_folder(sandbox: Sandbox, named: str) -> None:
    outside = _deck_outside(sandbox)
    _link(sandbox, "link.cir", outside)
    _link(sandbox, "folder", outside.parent)
    _link(sandbox, "loop.cir", "loop.cir")
    _fifo(sandbox)
    sandbox.lay("x.toml", f'format = 1\ndeck = "{named.replace("ABSOLUTE", str(outside))}"\n')
    assert sandbox.check("x.toml").code == 2


def test_links_in_a_folder_lead_to_no_file_outside(sandbox: Sandbox) -> None:
    outside = _deck_outside(sandbox)
    (outside.parent / "y.toml").write_text(f"{SECRET} =\n", encoding="utf-8")
    _link(sandbox, "all/link.cir", outside)
    _link(sandbox, "all/link.toml", outside.parent / "y.toml")
    _link(sandbox, "all/folder", outside.parent)
    sandbox.lay("all/good.cir", f"good\n{STAGE}")
    assert sandbox.check("all").code == 0


@pytest.mark.parametrize(
    "name", ["fifo.cir", "folder.cir", "zero.cir", "nowhere.cir", "n" * 300 + ".cir", "loop.cir"]
)
def test_a_deck_that_is_no_file_is_refused_without_waiting(sandbox: Sandbox, name: str) -> None:
    os.mkfifo(sandbox.decks / "fifo.cir")
    (sandbox.decks / "folder.cir").mkdir()
    _link(sandbox, "zero.cir", "/dev/zero")
    _link(sandbox, "loop.cir", "loop.cir")
    assert sandbox.check(name).code == 2


@pytest.mark.parametrize(
    "text", ["x\\n*# shell touch pwned", "x\\n.control\\nshell touch pwned\\n.endc", "# shell touch pwned"]
)
def test_no_title_of_a_stage_file_is_a_command(sandbox: Sandbox, text: str) -> None:
    stage = re.sub(r'(?m)^title = ".*"$', lambda _: f'title = "{text}"', stage_text())
    sandbox.lay("x.toml", stage)
    sandbox.check("x.toml")


@pytest.mark.parametrize(
    "line", ["*# shell touch pwned", " .CONTROL", ".include /etc/passwd", ".lib /etc/passwd x", "@", "x \\"]
)
def test_no_template_brings_in_a_command(tmp_path: Path, line: str) -> None:
    (tmp_path / "common-source.cir.j2").write_text(f"* title\nr1 a 0 1k\n{line}\n", encoding="utf-8")
    stage = stage_from_table(parse_toml(stage_text(), "x.toml"), file="x.toml")
    with pytest.raises(InputError, match="line 3"):
        render(stage, load_topology("common-source"), templates=tmp_path)
