"""A folder to attack deckgen from, and the eye that sees whether anything happened that should not."""

from __future__ import annotations

import os
import re
import tempfile
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path

import pytest

from tests.simulator.command_line import Answer, inside

SECRET = "xyzzy-plugh-4711"
STAGE = """vdd vdd 0 10
vin in 0 dc 1.2 ac 1
rd vdd d 10k
m1 d in 0 0 nch w=20u l=2u
.model nch nmos level=1 vto=0.7 kp=100u
* deckgen: input VIN
* deckgen: output d
"""
FLATTENED = f".param unused=1\n{STAGE}"
"""The same stage, for the simulator's front end to read first."""

LEFT_BY_A_RUN = re.compile(
    r"runs/[^/]+(/(deck\.cir|stdout\.txt|stderr\.txt|out\.raw|start-up(/spinit)?|home|run\.json|"
    r"comparison\.json|source-[A-Za-z0-9_.-]+|[A-Za-z0-9_.-]+\.toml))?"
)
LEFT_IN_THE_CACHE = re.compile(r"cache/(json|markdown|deckgen(/flat(/[0-9a-f]{64})?)?)")


@dataclass
class Sandbox:
    """A folder to attack from, with a secret outside of what its decks may read."""

    root: Path
    capsys: pytest.CaptureFixture[str]
    before: dict[str, str] = field(default_factory=dict)

    @property
    def decks(self) -> Path:
        """Where decks lie, and deckgen is called."""
        return self.root / "decks"

    @property
    def secret(self) -> Path:
        """A file that no deck may include."""
        return self.root / "outside" / "secret.inc"

    def armed(self, text: str) -> str:
        """Put paths into an attack: those of a canary, of the secret, and of its folder."""
        names = {"PWNED": self.root / "pwned", "HIDDEN": self.secret, "OUTSIDE": self.root / "outside"}
        for name, path in names.items():
            text = text.replace(name, str(path))
        return text

    def lay(self, name: str, text: str | bytes) -> Path:
        """Write a file among the decks."""
        path = self.decks / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_bytes(text if isinstance(text, bytes) else text.encode("utf-8", "surrogateescape"))
        return path

    def check(self, *arguments: str | Path, options: Sequence[str | Path] = ()) -> Answer:
        """Run ``deckgen check`` with all its reports, and see that nothing happened but a check."""
        reports = ("--json", self.root / "cache" / "json", "--markdown", self.root / "cache" / "markdown")
        limits = ("--time-limit", "20", "--jobs", "2")
        return self.call("check", *limits, *reports, *options, "--", *arguments)

    def call(self, *arguments: str | Path) -> Answer:
        """Run deckgen, and see that nothing happened but what it is for."""
        self.before = self._state()
        answer = inside(self.capsys, *arguments)
        self._see_that_nothing_happened(answer)
        return answer

    def _state(self) -> dict[str, str]:
        """Every path below the sandbox with what it holds; sparse and special files by their kind alone."""
        return {path.relative_to(self.root).as_posix(): _content(path) for path in self._paths()}

    def _paths(self) -> Iterator[Path]:
        for folder, folders, files in os.walk(self.root):
            yield from (Path(folder) / name for name in (*folders, *files))

    def _see_that_nothing_happened(self, answer: Answer) -> None:
        after = self._state()
        new = {path for path in after if path not in self.before}
        runs = {path for path in new if path.startswith("decks/runs")}
        cache = {path for path in new if path.startswith("cache/")}
        assert new - runs - cache == set()
        assert [path for path in runs if not _left_by_a_run(path)] == []
        assert [path for path in cache if not LEFT_IN_THE_CACHE.fullmatch(path)] == []
        changed = {path for path in self.before if after.get(path) != self.before[path]}
        assert changed - {"cache/json", "cache/markdown"} == set()
        said = [answer.out, answer.err, *(after[path] for path in runs | cache)]
        assert not any(SECRET in text for text in said)
        assert "Traceback" not in answer.err
        assert answer.code in (0, 1, 2, 3)


def _content(path: Path) -> str:
    if path.is_symlink():
        return f"link to {path.readlink()}"
    if path.is_file() and path.stat().st_size < 1 << 20:
        return path.read_bytes().decode("latin-1")
    return "folder" if path.is_dir() else "special or large"


def _left_by_a_run(path: str) -> bool:
    name = path.removeprefix("decks/")
    return name == "runs" or LEFT_BY_A_RUN.fullmatch(name) is not None


@contextmanager
def opened(monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> Iterator[Sandbox]:
    """A fresh sandbox, deckgen called in it; its path in lower case, as ngspice writes names of files."""
    with tempfile.TemporaryDirectory(prefix="deckgen-attack-") as name:
        root = Path(name)
        for folder in ("decks", "outside", "cache", "home"):
            (root / folder).mkdir()
        secret = f"r_{SECRET} {SECRET} 0 1k\n.model {SECRET} nmos (\n{SECRET}\n"
        (root / "outside" / "secret.inc").write_text(secret, encoding="utf-8")
        (root / "home" / ".spiceinit").write_text("shell touch spiceinit-ran\n", encoding="utf-8")
        (root / "decks" / ".spiceinit").write_text("shell touch spiceinit-ran\n", encoding="utf-8")
        monkeypatch.chdir(root / "decks")
        monkeypatch.setenv("HOME", str(root / "home"))
        monkeypatch.setenv("XDG_CACHE_HOME", str(root / "cache"))
        monkeypatch.setenv("TMPDIR", str(root / "cache"))
        monkeypatch.delenv("DECKGEN_INCLUDE_ROOTS", raising=False)
        yield Sandbox(root, capsys)
