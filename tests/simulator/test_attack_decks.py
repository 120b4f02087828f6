"""A deck is a program, and nothing in a deck runs: every way that was found to make ngspice run a command,
write a file or show one, tried on ``deckgen check``.

Each attack is carried out in a sandbox with a secret beside it. Afterwards no file may be there that was not,
none may be changed, except the run folder, and that holds what a run leaves and nothing else; the secret
stands nowhere in what deckgen wrote or printed. Where plain ngspice 39 carries an attack out, that is shown
too, so that a test which could not fail is noticed.
"""

from __future__ import annotations

import time
from collections.abc import Iterator
from pathlib import Path

import pytest

from deckgen.simulator import Simulator
from tests.simulator.plain import run_plainly
from tests.simulator.sandbox import FLATTENED, STAGE, Sandbox, opened


@pytest.fixture
def sandbox(monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> Iterator[Sandbox]:
    """A fresh sandbox."""
    with opened(monkeypatch, capsys) as place:
        yield place


# --- commands ----------------------------------------------------------------------------------------

COMMANDS = {
    "shell": "shell touch PWNED",
    "backticks": "echo `touch PWNED`",
    "redirection": "echo x > PWNED",
    "write": "op\nwrite PWNED",
    "wrdata": "op\nwrdata PWNED v(d)",
    "source": "source HIDDEN",
    "variables": "set sourcepath = ( OUTSIDE )\nset unixcom\ntouch PWNED",
    "before": "pre_shell touch PWNED",
    "quiet ones": "quit",
    "no end": "while 1\nend",
}


@pytest.mark.parametrize("stage", [STAGE, FLATTENED], ids=["flat", "flattened"])
@pytest.mark.parametrize("command", COMMANDS.values(), ids=COMMANDS)
def test_no_command_of_a_control_block_runs(sandbox: Sandbox, command: str, stage: str) -> None:
    deck = f"attack\n{stage}.control\n{sandbox.armed(command)}\n.endc\n.end\n"
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
    "in a subcircuit": "attack\nSTAGE.subckt s a\n.control\nCOMMAND\n.endc\nr1 a 0 1meg\n.ends\nxs d s\n",
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


@pytest.mark.parametrize("deck", HIDING.values(), ids=HIDING)
def test_what_deckgen_predicts_and_writes_of_such_a_deck_runs_nothing_either(
    sandbox: Sandbox, simulator: Simulator, tmp_path: Path, deck: str
) -> None:
    text = deck.replace("STAGE", FLATTENED).replace("COMMAND", "shell touch PWNED")
    sandbox.lay("x.cir", sandbox.armed(text))
    assert sandbox.call("predict", "x.cir").code == 0
    written = sandbox.call("write", "x.cir")
    assert written.code == 0
    (tmp_path / "x.cir").write_text(written.out, encoding="utf-8")
    done = run_plainly(simulator, tmp_path, "x.cir")
    assert "vdb" in done.stdout
    assert not (sandbox.root / "pwned").exists()


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
    "other line separators": "attack\nSTAGE* x\u2028.control\u2028COMMAND\x85.control\x1c.control\n.end\n",
    "continued line": "attack\nSTAGErx d 0 1meg \\\\\n.control\nCOMMAND\n.endc\n.end\n",
    "continued control": "attack\nSTAGE.con\n+trol\nCOMMAND\n.end\n",
    "title card": "attack\nSTAGE.title x `COMMAND`\n.end\n",
    "end of reading": "attack\n@ `COMMAND`\nSTAGE.end\n",
    "end of reading later": "attack\nSTAGE@\n.control\nCOMMAND\n.endc\n.end\n",
    "outputs": "attack\nSTAGE.print op v(d) > PWNED\n.plot ac `COMMAND`\n.save `COMMAND`\n.four `COMMAND`\n",
    "measurement": "attack\nSTAGE.meas ac x param='`COMMAND`'\n.tf `COMMAND` vin\n.end\n",
    "constants": "attack\nSTAGE.csparam x={`COMMAND`}\n.end\n",
    "code model": "attack\nSTAGEafile [d] rd\n.model rd filesource (file=\"HIDDEN\" amploffset=[0])\n.end\n",
    "osdi": "attack\nSTAGE.pre_osdi HIDDEN\n.osdi HIDDEN\n.hdl HIDDEN\n.verilog HIDDEN\n.end\n",
    "other includes": "attack\nSTAGE.incl HIDDEN\n.includes HIDDEN\n.lib HIDDEN\n.library HIDDEN\n",
    "commands as cards": "attack\nSTAGE.inclib HIDDEN\n.load HIDDEN\n.source HIDDEN\n.shell touch PWNED\n",
    "wave file": "attack\nSTAGEvw w 0 pwl file=HIDDEN\nvw2 w2 0 pwl(file=\"HIDDEN\")\n.end\n",
    "saved bias": "attack\nSTAGE.loadbias HIDDEN\n.savebias PWNED\n.store PWNED\n.wrnodev PWNED\n",
}  # fmt: skip


@pytest.mark.parametrize("stage", [STAGE, FLATTENED], ids=["flat", "flattened"])
@pytest.mark.parametrize("deck", NEARLY.values(), ids=NEARLY)
def test_what_could_be_taken_for_a_command_does_nothing(sandbox: Sandbox, deck: str, stage: str) -> None:
    text = deck.replace("STAGE", stage).replace("COMMAND", "shell touch PWNED")
    sandbox.lay("x.cir", sandbox.armed(text))
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
    "`touch$IFS$9pwned`", "`id>pwned`", "$(id>pwned)", ">pwned", ";id>pwned", "|id>pwned", "&id>pwned&",
    ">>../../pwned", "a\\nb", "%pwned", "[all]", "all", "@vdd[dc]", "{1}", "'1'", '"a b"', "#pwned",
    "$&d", "!1", "a,b", "*", "~",
]  # fmt: skip
"""What a shell or ngspice's commands could take for more than a name."""

ALSO_FLATTENED = 8
"""So many of them are tried behind the simulator's front end as well."""

NAMED = {
    "second source": "attack\nSTAGEvTRICK y 0 1 ac 1\nry y 0 1k\n",
    "second source, its number": "attack\nSTAGEv9TRICK y 0 1 ac 1\nry y 0 1k\n",
    "current source": "attack\nSTAGEiTRICK 0 y 1m ac 1\nry y 0 1k\n",
    "input": "attack\nSTAGE* deckgen: input V2TRICK\nv2TRICK y 0 1 ac 1\nry y 0 1k\n",
    "output": "attack\nSTAGE* deckgen: output oTRICK\nrx d oTRICK 1\nry oTRICK 0 1meg\n",
    "node": "attack\nSTAGErx d nTRICK 1k\nry nTRICK 0 1meg\n",
    "part": "attack\nSTAGErTRICK d 0 1meg\n",
    "transistor": "attack\nSTAGErx vdd dd 10k\nmTRICK dd in 0 0 nch w=10u l=2u\n",
    "model": "attack\nSTAGErx vdd dd 10k\nm2 dd in 0 0 kTRICK w=1u l=2u\n.model kTRICK nmos vto=0.7\n",
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
    "note's value": "attack\n* deckgen: frequency TRICK\n* deckgen: load TRICK\nSTAGE",
    "claims": "attack\n* deckgen: claim TRICK TRICK\n* deckgen: tolerance TRICK TRICK\nSTAGE",
    "analysis": "attack\nSTAGE.ac dec TRICK 1 10\n.print ac v(TRICK)\n.save TRICK\n",
    "include": "attack\n.include TRICK\n.lib TRICK TRICK\nSTAGE",
}  # fmt: skip


@pytest.mark.parametrize("deck", NAMED.values(), ids=NAMED)
def test_no_name_and_no_value_is_a_command(sandbox: Sandbox, deck: str) -> None:
    """All tricks of a kind, each in a file of its own, checked together."""
    for number, trick in enumerate(TRICKS):
        stages = (("flat", STAGE), ("deep", FLATTENED)) if number < ALSO_FLATTENED else (("flat", STAGE),)
        for kind, stage in stages:
            text = deck.replace("STAGE", stage).replace("TRICK", trick)
            sandbox.lay(f"{kind}{number}.cir", text)
    sandbox.check(*sorted(path.name for path in sandbox.decks.glob("*.cir")))


FILE_NAMES = [
    "x\n.control\nshell touch pwned\n.endc\n.cir", "x\n*# shell touch pwned\n.cir",
    "*# shell touch pwned.cir", "`touch pwned`.cir", "$(touch pwned).cir", "; touch pwned;.cir",
    "> pwned.cir", "| touch pwned.cir", "-rf.cir", "a b\tc.cir", "\x1b[31mred.cir", "x\r.control\r.cir",
    "\udcff\udcfe.cir", "é\u2028.control\u2028.cir", "%s%n.cir", ".cir.cir", "{x}.cir", "a'b\"c.cir",
    "deck.cir", "run.json.cir", "x" * 240 + ".cir",
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
    "rawfile=PWNED", "filetype=ascii", "sourcepath=(OUTSIDE)", "sourcepath=OUTSIDE", "unixcom", "noparse",
    "nosubckt", "subend=.end", "substart=.end", "subinvoke=r", "modelcard=.end", "modelline=.end",
    "history=1000", "editor=touch", "prompt=`touch_pwned`", "ngbehavior=psa", "ngbehavior=lta",
    "ngbehavior=spe", "ngbehavior=s3", "ngdebug", "debug=1", "savecurrents", "program=touch", "noclobber",
    "appendwrite", "brief", "renumber", "hcopydev=PWNED", "hcopycommand=touch", "plotwinsize=0",
    "no_auto_gnd", "rseries=1", "cshunt=1p", "scale=1u", "seed=random", "acct", "list", "node", "opts",
    "inputdir=OUTSIDE", "addcontrol", "autorun", "controlswait", "batchmode", "interactive",
    "numdgt=1000", "maxord=1", "method=gear", "itl1=100000000", "gminsteps=1000000", "srcsteps=1000000",
    "reltol=0", "reltol=-1", "gmin=0", "temp=-300", "temp=nan", "tnom=1e99", "defw=-1", "defl=0",
    "optran=1", "klu", "sparse", "probe_alli", "xtrtol=1", "interp", "rndseed=1", "askquit",
    "color0=white", "xbrushwidth=1", "echo", "cpdebug",
]  # fmt: skip


@pytest.mark.parametrize("stage", [STAGE, FLATTENED], ids=["flat", "flattened"])
def test_no_option_runs_or_writes_anything(sandbox: Sandbox, stage: str) -> None:
    for number, option in enumerate(OPTIONS):
        sandbox.lay(f"x{number:02}.cir", sandbox.armed(f"attack\n{stage}.options {option}\n"))
    sandbox.check(*sorted(path.name for path in sandbox.decks.glob("*.cir")))


# --- size ---------------------------------------------------------------------------------------------

MANY = 50_000
LARGE = {
    "blanks": f"rx d{' ' * MANY}0 1meg",
    "blanks and a sign": f"rx d 0 r{' ' * MANY}=1meg",
    "commas": f"rx d 0 {',' * MANY}1meg",
    "parentheses": f"rx d 0 {'(' * MANY}1meg",
    "equal signs": f"rx d 0 1meg {'=' * MANY}",
    "dollars": f"rx d 0 1meg {'$' * MANY}",
    "braces": f".param p={'{' * MANY}",
    "quotes": f".param p={chr(39) * (MANY + 1)}",
    "one word": f"rx d 0 {'1' * MANY}",
    "a name": f"r{'x' * MANY} d 0 1meg",
    "values": f"vq q 0 pwl({'0 1 ' * MANY})\nrq q 0 1k",
    "phasors": f"vq q 0 {'ac 1 ' * MANY}\nrq q 0 1k",
    "odd letters": f"* {chr(0x3A9) * MANY}\nr{chr(0x3A9) * 1000} d 0 1meg",
    "notes": "* deckgen: imput VIN\n" * 20_000,
    "claims": "".join(f"* deckgen: claim ID(M{n}) 1m\n" for n in range(5_000)),
    "unknown cards": ".foo x\n" * 20_000,
    "control blocks": ".control\n.endc\n" * 10_000,
    "commands": "*# shell x\n" * 20_000,
    "doubles": "rx d 0 1meg\n" * 5_000,
    "models": "".join(f".model n{n} nmos vto=1\n" for n in range(5_000)),
    "nested subcircuits": f"{'.subckt s a' + chr(10)}" * 2_000 + "r1 a 0 1\n" + ".ends\n" * 2_000,
    "subcircuit in itself": ".subckt s a\nx1 a s\n.ends\nx1 d s",
    "doubling subcircuits": "".join(
        f".subckt s{n} a\nx1 a s{n + 1}\nx2 a s{n + 1}\n.ends\n" for n in range(12)
    )
    + ".subckt s12 a\nr1 a 0 1meg\n.ends\nx1 d s0",
}


@pytest.mark.parametrize("body", LARGE.values(), ids=LARGE)
def test_large_decks_take_no_long_time(sandbox: Sandbox, body: str) -> None:
    """What takes a time that grows with the square of its size would take minutes."""
    sandbox.lay("x.cir", f"attack\n{STAGE}{body}\n.end\n")
    begun = time.monotonic()
    sandbox.check("x.cir")
    assert time.monotonic() - begun < 15.0
