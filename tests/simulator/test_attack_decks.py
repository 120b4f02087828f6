"""A deck is a program, and nothing in a deck runs: every way that was found to make ngspice run a command,
write a file or show one, tried on ``deckgen check``.

Each attack is carried out in a sandbox with a secret beside it. Afterwards no file may be there that was not,
none may be changed, except the run folder, and that holds what a run leaves and nothing else; the secret
stands nowhere in what deckgen wrote or printed. Where plain ngspice 39 carries an attack out, that is shown
too, so that a test which could not fail is noticed.
"""

from __future__ import annotations

import os
import re
import tempfile
import time
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path

import pytest

from deckgen.errors import InputError
from deckgen.render.engine import render
from deckgen.simulator import Simulator
from deckgen.stage.files import parse_toml
from deckgen.stage.read import stage_from_table
from deckgen.stage.topology import load_topology
from tests.simulator.command_line import Answer, inside, stage_text
from tests.simulator.plain import run_plainly

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

    def lay(self, name: str, text: str | bytes) -> Path:
        """Write a file among the decks."""
        path = self.decks / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_bytes(text if isinstance(text, bytes) else text.encode("utf-8", "surrogateescape"))
        return path

    def check(self, *arguments: str | Path, options: Sequence[str | Path] = ()) -> Answer:
        """Run ``deckgen check`` with all its reports, and see that nothing happened but a check."""
        self.before = self._state()
        reports = ("--json", self.root / "cache" / "json", "--markdown", self.root / "cache" / "markdown")
        limits = ("--time-limit", "20", "--jobs", "2")
        answer = inside(self.capsys, "check", *limits, *reports, *options, "--", *arguments)
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
        return f"link to {os.readlink(path)}"
    if path.is_file() and path.stat().st_size < 1 << 20:
        return path.read_bytes().decode("latin-1")
    return "folder" if path.is_dir() else "special or large"


def _left_by_a_run(path: str) -> bool:
    name = path.removeprefix("decks/")
    return name == "runs" or LEFT_BY_A_RUN.fullmatch(name) is not None


@pytest.fixture
def sandbox(monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> Iterator[Sandbox]:
    """A fresh sandbox; ngspice writes names in lower case, so its path is in lower case too."""
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


# --- commands ----------------------------------------------------------------------------------------

COMMANDS = {
    "shell": "shell touch PWNED",
    "backticks": "echo `touch PWNED`",
    "redirection": "echo x > PWNED",
    "write": "op\nwrite PWNED",
    "wrdata": "op\nwrdata PWNED v(d)",
    "source": "source SECRET-FILE",
    "variables": "set sourcepath = ( OUTSIDE )\nset unixcom\ntouch PWNED",
    "before": "pre_shell touch PWNED",
    "quiet ones": "quit",
    "no end": "while 1\nend",
}


def _armed(text: str, sandbox: Sandbox) -> str:
    """Put the paths into an attack: a canary beside the decks, and one in the run's own folder."""
    names = {
        "PWNED": str(sandbox.root / "pwned"),
        "SECRET-FILE": str(sandbox.secret),
        "OUTSIDE": str(sandbox.root / "outside"),
    }
    for name, path in names.items():
        text = text.replace(name, path)
    return text


@pytest.mark.parametrize("stage", [STAGE, FLATTENED], ids=["flat", "flattened"])
@pytest.mark.parametrize("command", COMMANDS.values(), ids=COMMANDS)
def test_no_command_of_a_control_block_runs(sandbox: Sandbox, command: str, stage: str) -> None:
    deck = f"attack\n{stage}.control\n{_armed(command, sandbox)}\n.endc\n.end\n"
    sandbox.lay("x.cir", deck)
    assert sandbox.check("x.cir").code == 0


HIDING = {
    "plain": "attack\nSTAGE.control\nCOMMAND\n.endc\n.end\n",
    "capitals": "attack\nSTAGE.CONTROL\nCOMMAND\n.ENDC\n.end\n",
    "odd case": "attack\nSTAGE.ConTrol\nCOMMAND\n.eNdC\n.end\n",
    "blanks in front": "attack\nSTAGE   .control\n COMMAND\n  .endc\n.end\n",
    "tabs in front": "attack\nSTAGE\t\t.control\n\tCOMMAND\n\t.endc\n.end\n",
    "letters behind": "attack\nSTAGE.controlling\nCOMMAND\n.endcontrol\n.end\n",
    "words behind": "attack\nSTAGE.control ; a comment\nCOMMAND\n.endc\n.end\n",
    "first": "attack\n.control\nCOMMAND\n.endc\nSTAGE.end\n",
    "after the end": "attack\nSTAGE.end\n.control\nCOMMAND\n.endc\n",
    "in a condition": "attack\nSTAGE.if (0)\n.control\nCOMMAND\n.endc\n.endif\n.end\n",
    "in a subcircuit": "attack\nSTAGE.subckt s a\n.control\nCOMMAND\n.endc\nr1 a 0 1meg\n.ends\nxs d s\n.end\n",
    "in a card": "attack\nSTAGErx d\n.control\nCOMMAND\n.endc\n+ 0 1meg\n.end\n",
    "behind a block": "attack\nSTAGE.control\n.endc\n.control\nCOMMAND\n.endc\n.end\n",
    "comment": "attack\nSTAGE*# COMMAND\n.end\n",
    "comment, nothing between": "attack\nSTAGE*#COMMAND\n.end\n",
    "comment, blanks in front": "attack\nSTAGE   *# COMMAND\n.end\n",
    "comment, tab": "attack\nSTAGE\t*#\tCOMMAND\n.end\n",
    "comment after the end": "attack\nSTAGE.end\n*# COMMAND\n",
    "comment in a condition": "attack\nSTAGE.if (0)\n*# COMMAND\n.endif\n.end\n",
    "comment first": "attack\n*# COMMAND\nSTAGE.end\n",
    "CRLF": "attack\r\nSTAGE.control\r\nCOMMAND\r\n.endc\r\n*# COMMAND\r\n.end\r\n",
}
"""Where and how commands stand, that plain ngspice runs."""


@pytest.mark.parametrize("stage", [STAGE, FLATTENED], ids=["flat", "flattened"])
@pytest.mark.parametrize("deck", HIDING.values(), ids=HIDING)
def test_commands_run_in_ngspice_and_not_in_deckgen(
    sandbox: Sandbox, simulator: Simulator, tmp_path: Path, deck: str, stage: str
) -> None:
    canary = tmp_path / "pwned"
    for place, path in ((sandbox.decks, sandbox.root / "pwned"), (tmp_path, canary)):
        text = deck.replace("STAGE", stage).replace("COMMAND", f"shell touch {path}")
        (place / "x.cir").write_text(text, encoding="utf-8", newline="")
    assert sandbox.check("x.cir").code == 0
    run_plainly(simulator, tmp_path, "x.cir")
    assert canary.exists(), "plain ngspice was expected to run this"


NEARLY = {
    "comment in a card": "attack\nSTAGErx d\n*# COMMAND\n+ 0 1meg\n.end\n",
    "in a block": "attack\nSTAGE.control\n.control\nCOMMAND\n.endc\n.endc\n.end\n",
    "form feed": "attack\nSTAGE\f.control\nCOMMAND\n.endc\n.end\n",
    "vertical tab": "attack\nSTAGE\v.control\nCOMMAND\n.endc\n.end\n",
    "hard space": "attack\nSTAGE\u00a0.control\nCOMMAND\n.endc\n.end\n",
    "form feed comment": "attack\nSTAGE\f*# COMMAND\n.end\n",
    "blank in the comment": "attack\nSTAGE* # COMMAND\n.end\n",
    "escape": "attack\nSTAGE\x1b.control\nCOMMAND\n.endc\n.end\n",
    "open": "attack\nSTAGE.control\nCOMMAND\n",
    "open in a condition": "attack\nSTAGE.if (0)\n.control\nCOMMAND\n.endif\n",
    "title block": ".control\nCOMMAND\n.endc\nSTAGE.end\n",
    "title comment": "*# COMMAND\nSTAGE.end\n",
    "title backticks": "attack `COMMAND`\nSTAGE.end\n",
    "script": "*ng_script\nCOMMAND\nSTAGE.end\n",
    "other line separators": "attack\nSTAGE* x\u2028.control\u2028COMMAND\u2028.endc\x85.control\x1c.control\n.end\n",
    "continued line": "attack\nSTAGErx d 0 1meg \\\\\n.control\nCOMMAND\n.endc\n.end\n",
    "continued control": "attack\nSTAGE.con\n+trol\nCOMMAND\n.end\n",
    "title card": "attack\nSTAGE.title x `COMMAND`\n.end\n",
    "end of reading": "attack\n@ `COMMAND`\nSTAGE.end\n",
    "end of reading later": "attack\nSTAGE@\n.control\nCOMMAND\n.endc\n.end\n",
    "outputs": "attack\nSTAGE.print op v(d) > PWNED\n.plot ac `COMMAND`\n.save `COMMAND`\n.four 1k `COMMAND`\n.end\n",
    "measurement": "attack\nSTAGE.meas ac x param='`COMMAND`'\n.tf `COMMAND` vin\n.end\n",
    "constants": "attack\nSTAGE.csparam x={`COMMAND`}\n.end\n",
    "code model": "attack\nSTAGEafile [d] rd\n.model rd filesource (file=\"SECRET-FILE\" amploffset=[0])\n.end\n",
    "osdi": "attack\nSTAGE.pre_osdi SECRET-FILE\n.osdi SECRET-FILE\n.hdl SECRET-FILE\n.verilog SECRET-FILE\n.end\n",
    "other includes": "attack\nSTAGE.incl SECRET-FILE\n.includes SECRET-FILE\n.lib SECRET-FILE\n.library SECRET-FILE\n"
    ".inclib SECRET-FILE\n.load SECRET-FILE\n.source SECRET-FILE\n.end\n",
    "wave file": "attack\nSTAGEvw w 0 pwl file=SECRET-FILE\nvw2 w2 0 pwl(file=\"SECRET-FILE\")\n.end\n",
    "saved bias": "attack\nSTAGE.loadbias SECRET-FILE\n.savebias PWNED\n.store PWNED\n.restart PWNED\n.wrnodev PWNED\n.end\n",
}  # fmt: skip


@pytest.mark.parametrize("stage", [STAGE, FLATTENED], ids=["flat", "flattened"])
@pytest.mark.parametrize("deck", NEARLY.values(), ids=NEARLY)
def test_what_could_be_taken_for_a_command_does_nothing(sandbox: Sandbox, deck: str, stage: str) -> None:
    text = deck.replace("STAGE", stage).replace("COMMAND", "shell touch PWNED")
    sandbox.lay("x.cir", _armed(text, sandbox))
    sandbox.check("x.cir")


WRAPPED = {
    "include": {"x.cir": "attack\n.include a.inc\nSTAGE.end\n", "a.inc": "BLOCK"},
    "include in capitals, quoted": {"x.cir": "attack\n.INCLUDE \"a.inc\"\nSTAGE", "a.inc": "BLOCK"},
    "nested include": {
        "x.cir": "attack\nSTAGE.inc sub/a.inc\n", "sub/a.inc": "* a\n.inc 'b.inc'\n", "sub/b.inc": "BLOCK"
    },
    "include behind the end": {"x.cir": "attack\nSTAGE.end\n.include a.inc\n", "a.inc": "BLOCK"},
    "end inside the include": {"x.cir": "attack\n.include a.inc\nSTAGE", "a.inc": "* a\n.end\nBLOCK"},
    "include in a condition": {"x.cir": "attack\nSTAGE.if (0)\n.include a.inc\n.endif\n", "a.inc": "BLOCK"},
    "include in a subcircuit": {
        "x.cir": "attack\nSTAGE.subckt s a\n.include a.inc\nr1 a 0 1meg\n.ends\nxs d s\n", "a.inc": "BLOCK"
    },
    "library section": {"x.cir": "attack\n.lib a.lib s\nSTAGE", "a.lib": "* l\n.lib s\nBLOCK.endl s\n"},
    "library in a library": {
        "x.cir": "attack\n.lib a.lib s\nSTAGE",
        "a.lib": "* l\n.lib s\n.lib b.lib t\n.endl s\n", "b.lib": "* l\n.lib t\nBLOCK.endl\n",
    },
}  # fmt: skip
BLOCKS = {
    "block": ".control\nCOMMAND\n.endc\n",
    "comment": "*# COMMAND\n",
    "both, odd": "  .CONTROL\n\tCOMMAND\n .ENDC\n\t*#COMMAND\n",
}


@pytest.mark.parametrize("block", BLOCKS.values(), ids=BLOCKS)
@pytest.mark.parametrize("files", WRAPPED.values(), ids=WRAPPED)
def test_commands_in_included_files_run_in_ngspice_and_not_in_deckgen(
    sandbox: Sandbox, simulator: Simulator, tmp_path: Path, files: dict[str, str], block: str
) -> None:
    canary = tmp_path / "pwned"
    for place, path in ((sandbox.decks, sandbox.root / "pwned"), (tmp_path, canary)):
        for name, text in files.items():
            armed = block.replace("COMMAND", f"shell touch {path}")
            file = place / name
            file.parent.mkdir(exist_ok=True)
            file.write_text(text.replace("STAGE", STAGE).replace("BLOCK", armed), encoding="utf-8")
    assert sandbox.check("x.cir").code == 0
    run_plainly(simulator, tmp_path, "x.cir")
    assert canary.exists(), "plain ngspice was expected to run this"


# --- names -------------------------------------------------------------------------------------------

TRICKS = [
    "`touch$IFS$9pwned`", "`id>pwned`", "$(id>pwned)", "${HOME}", ">pwned", ">>pwned", "<x", ";id>pwned", "|id>pwned",
    "&id>pwned&", "a;touch", "a\\nb", "%pwned", "[all]", "all", "@vdd[dc]", "{1}", "'1'", '"a b"', "#pwned", "$&d", "!1",
    "../../pwned", "-o=pwned", "a,b", "*", "?", "~", "%n%s",
]  # fmt: skip
NAMED = {
    "second source": "attack\nSTAGEvTRICK y 0 1 ac 1\nry y 0 1k\n",
    "second source, its number": "attack\nSTAGEv9TRICK y 0 1 ac 1\nry y 0 1k\n",
    "current source": "attack\nSTAGEiTRICK 0 y 1m ac 1\nry y 0 1k\n",
    "input": "attack\nSTAGE* deckgen: input V2TRICK\nv2TRICK y 0 1 ac 1\nry y 0 1k\n",
    "output": "attack\nSTAGE* deckgen: output oTRICK\nrx d oTRICK 1\nry oTRICK 0 1meg\n",
    "node": "attack\nSTAGErx d nTRICK 1k\nry nTRICK 0 1meg\n",
    "part": "attack\nSTAGErTRICK d 0 1meg\n",
    "transistor": "attack\nSTAGErx vdd dd 10k\nmTRICK dd in 0 0 nch w=10u l=2u\n",
    "model": "attack\nSTAGErx vdd dd 10k\nm2 dd in 0 0 kTRICK w=1u l=2u\n.model kTRICK nmos level=1 vto=0.7 kp=1e-4\n",
    "subcircuit": "attack\nSTAGE.subckt sTRICK a\nr1 a 0 1meg\n.ends\nxTRICK d sTRICK\n",
    "parameter": "attack\n.param pTRICK=1k\nSTAGErx d 0 {1meg}\n",
    "parameter's value": "attack\n.param p='TRICK'\n.param q={TRICK}\nSTAGErx d 0 {1meg}\n",
    "value": "attack\nSTAGErx d 0 1megTRICK\n",
    "model parameter": "attack\nSTAGE.model k2 nmos TRICK=1\nm2 vdd in 0 0 k2\n",
    "option": "attack\nSTAGE.options TRICK\n.options xTRICK=1 y=TRICK\n",
    "initial values": "attack\nSTAGE.ic v(TRICK)=1\n.nodeset v(TRICK)=TRICK\n.temp TRICK\n.global gTRICK\n",
    "function": "attack\n.func fTRICK(x) {x TRICK}\nSTAGE",
    "title": "attack TRICK\nSTAGE",
    "comment": "attack\n* TRICK\nSTAGE*TRICK\n",
    "note's word": "attack\n* deckgen: TRICK 1\nSTAGE",
    "notes": "attack\n* deckgen: frequency TRICK\n* deckgen: claim TRICK TRICK\n* deckgen: load TRICK\nSTAGE",
    "analysis": "attack\nSTAGE.ac dec TRICK 1 10\n.print ac v(TRICK)\n.save TRICK\n",
    "include": "attack\n.include TRICK\n.lib TRICK TRICK\nSTAGE",
}  # fmt: skip


@pytest.mark.parametrize("deck", NAMED.values(), ids=NAMED)
def test_no_name_and_no_value_is_a_command(sandbox: Sandbox, deck: str) -> None:
    """All tricks of a kind in a file of their own, flat and flattened, checked together."""
    for number, trick in enumerate(TRICKS):
        for kind, stage in (("flat", STAGE), ("deep", FLATTENED)):
            text = deck.replace("STAGE", stage).replace("TRICK", trick)
            sandbox.lay(f"{kind}{number}.cir", text)
    sandbox.check(*sorted(path.name for path in sandbox.decks.glob("*.cir")))


FILE_NAMES = [
    "x\n.control\nshell touch pwned\n.endc\n.cir", "x\n*# shell touch pwned\n.cir", "*# shell touch pwned.cir",
    "`touch pwned`.cir", "$(touch pwned).cir", "; touch pwned;.cir", "> pwned.cir", "| touch pwned.cir", "-rf.cir",
    "a b\tc.cir", "\x1b[31mred.cir", "x\r.control\r.cir", "\udcff\udcfe.cir", "é\u2028.control\u2028.cir",
    "%s%n.cir", ".cir.cir", "{x}.cir", "a'b\"c.cir", "deck.cir", "run.json.cir", "x" * 240 + ".cir",
]  # fmt: skip


@pytest.mark.parametrize("title", ["", "a title"], ids=["no title", "title"])
@pytest.mark.parametrize("stage", [STAGE, FLATTENED], ids=["flat", "flattened"])
def test_no_file_name_is_a_command(sandbox: Sandbox, stage: str, title: str) -> None:
    paths = [sandbox.lay(name, f"{title}\n{stage}") for name in FILE_NAMES]
    answer = sandbox.check(*(path.relative_to(sandbox.decks) for path in paths))
    assert answer.code == 0
    assert "\x1b" not in answer.out


# --- options -----------------------------------------------------------------------------------------

OPTIONS = [
    "rawfile=PWNED", "filetype=ascii", "sourcepath=(OUTSIDE)", "sourcepath=OUTSIDE", "unixcom", "noparse", "nosubckt",
    "subend=.end", "substart=.end", "subinvoke=r", "modelcard=.end", "modelline=.end", "history=1000", "editor=touch",
    "prompt=`touch_pwned`", "ngbehavior=psa", "ngbehavior=lta", "ngbehavior=spe", "ngbehavior=s3", "ngdebug", "debug=1",
    "savecurrents", "program=touch", "noclobber", "appendwrite", "brief", "renumber", "hcopydev=PWNED",
    "hcopycommand=touch", "plotwinsize=0", "no_auto_gnd", "rseries=1", "cshunt=1p", "scale=1u", "seed=random", "acct",
    "list", "node", "opts", "inputdir=OUTSIDE", "addcontrol", "autorun", "controlswait", "batchmode", "interactive",
    "numdgt=1000", "maxord=1", "method=gear", "itl1=100000000", "gminsteps=1000000", "srcsteps=1000000", "reltol=0",
    "reltol=-1", "gmin=0", "temp=-300", "temp=nan", "tnom=1e99", "defw=-1", "defl=0", "optran=1", "klu", "sparse",
    "probe_alli", "xtrtol=1", "interp", "rndseed=1", "askquit", "color0=white", "xbrushwidth=1", "echo", "cpdebug",
]  # fmt: skip


@pytest.mark.parametrize("stage", [STAGE, FLATTENED], ids=["flat", "flattened"])
def test_no_option_runs_or_writes_anything(sandbox: Sandbox, stage: str) -> None:
    for number, option in enumerate(OPTIONS):
        sandbox.lay(f"x{number:02}.cir", _armed(f"attack\n{stage}.options {option}\n", sandbox))
    sandbox.check(*sorted(path.name for path in sandbox.decks.glob("*.cir")))


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


PATHS: dict[str, tuple[str, Callable[[Sandbox], None], str]] = {
    "absolute": (".include SECRET-FILE", _nothing, "include-outside"),
    "absolute, quoted": ('.include "SECRET-FILE"', _nothing, "include-outside"),
    "library": (".lib SECRET-FILE tt", _nothing, "include-outside"),
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
        ".include l1", lambda s: (_link(s, "l1", "l2"), _link(s, "l2", s.secret)) and None, "include-outside"
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
    "zero bytes": (".include b", lambda s: s.lay("b", b"r1 a 0 1\0\n") and None, "nul-bytes"),
    "binary": (".include b", lambda s: s.lay("b", bytes(range(256)) * 8) and None, "nul-bytes"),
    "long name": (f".include {'n' * 5000}", _nothing, "include-missing"),
    "long path": (f".include {'n/' * 3000}x", _nothing, "include-missing"),
    "no name": (".include", _nothing, "include-missing"),
    "empty name": ('.include ""', _nothing, "include-missing"),
    "absent": (".include nowhere.inc", _nothing, "include-missing"),
}  # fmt: skip


@pytest.mark.parametrize(("card", "prepare", "slug"), PATHS.values(), ids=PATHS)
def test_no_file_outside_is_read_and_none_is_waited_for(
    sandbox: Sandbox, card: str, prepare: Callable[[Sandbox], None], slug: str
) -> None:
    prepare(sandbox)
    sandbox.lay("x.cir", _armed(f"attack\n{STAGE}{card}\n.end\n", sandbox))
    begun = time.monotonic()
    answer = sandbox.check("x.cir")
    assert time.monotonic() - begun < 10.0
    assert answer.code == 2
    assert f"[{slug}]" in answer.out
    assert "line 9" in answer.out or slug in ("include-itself", "too-many-lines")


@pytest.mark.parametrize(
    "card", [".include SECRET-FILE", ".lib SECRET-FILE tt", ".inc 'SECRET-FILE'", ".incl SECRET-FILE"]
)
def test_an_include_on_the_title_line_is_refused(sandbox: Sandbox, card: str) -> None:
    sandbox.lay("x.cir", _armed(f"{card}\n{STAGE}", sandbox))
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
    for name in ("out.inc", "../outside/secret.inc", str(sandbox.secret)):
        sandbox.lay("bad.cir", f"bad\n{STAGE}.include {name}\n")
        answer = sandbox.check("bad.cir", options=roots)
        assert answer.code == 2
        assert "[include-outside]" in answer.out


# --- what names decks --------------------------------------------------------------------------------


def _deck_outside(sandbox: Sandbox) -> Path:
    path = sandbox.root / "outside" / "x.cir"
    path.write_text(f"{SECRET}\n{STAGE}* deckgen: {SECRET}\n", encoding="utf-8")
    return path


@pytest.mark.parametrize(
    "named",
    ["../outside/x.cir", "ABSOLUTE", "link.cir", "folder/x.cir", "loop.cir", "..", ".", "", "a\\u0000b", "/dev/zero",
     "fifo", "n" * 400, "//etc/passwd", "sub/../../outside/x.cir"],
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
