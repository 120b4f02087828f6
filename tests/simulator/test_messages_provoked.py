"""Every row of the table of messages, provoked in the real simulator; outcomes as an owner sees them."""

from __future__ import annotations

import subprocess
from pathlib import Path
from typing import NamedTuple

import pytest

from deckgen.errors import Outcome
from deckgen.simulator import Execution, Job, Limits, Simulator, run
from deckgen.simulator.messages import TABLE, translate
from deckgen.simulator.remarks import clean
from tests.simulator.fakes import AC, CARD, DIVIDER, OP, STAGE, TRANSISTOR, deck

REFUSED = Outcome.REFUSED_BY_SIMULATOR
NO_MODEL = Outcome.MODEL_MISSING
NO_SOLUTION = Outcome.NO_CONVERGENCE
INCOMPLETE = Outcome.INCOMPLETE

TRAN = "tran 1u 1m\nwrite out.raw v(out)"
RUNAWAY = "v1 in 0 dc 0 pulse(0 5 1u 1n 1n 1u 2u)\nb1 0 out i=v(in)*exp(v(out))\nr1 out 0 1k\nc1 out 0 1p"


class Case(NamedTuple):
    """A deck that ngspice can't simulate, how that ends, and words that must be in the meaning."""

    deck: str
    outcome: Outcome
    meaning: str


CASES: dict[str, Case] = {
    # exit status 1
    "no model": Case(deck(TRANSISTOR), NO_MODEL, "there is no .model nm"),
    "unknown model type": Case(deck(f"{TRANSISTOR}\n.model nm nmoz (vto=1)"), REFUSED, "of another type"),
    "model of another type": Case(deck(f"{TRANSISTOR}\n.model nm npn (bf=100)"), REFUSED, "of another type"),
    "unknown level": Case(deck(f"{TRANSISTOR}\n.model nm nmos (level=77)"), NO_MODEL, "its LEVEL"),
    "a node too few": Case(
        deck(STAGE.replace("out g 0 0", "out g 0")), REFUSED, "0 nm w=10u l=1u': not enough nodes"
    ),
    "two nodes too few": Case(deck(STAGE.replace("out g 0 0", "out g")), NO_MODEL, "the number of nodes"),
    "unknown model parameter": Case(
        deck(f"{TRANSISTOR}\n.model nm nmos (level=1 vto=1 foo=3)"), REFUSED, "foo is no parameter"
    ),
    "unknown instance parameter": Case(deck(STAGE.replace("l=1u", "l=1u zz=3")), REFUSED, "'zz' is neither"),
    "no number": Case(deck(f"{DIVIDER}\nr7 in 0 abc"), REFUSED, "'r7 in 0 abc': 'abc' is neither"),
    "source that is no number": Case(deck("v1 out 0 dc nan"), REFUSED, "'nan' is neither"),
    "unknown first character": Case(deck(f"{DIVIDER}\n?1 a b 1"), REFUSED, "no device begins with ?"),
    "unknown kind of device": Case(deck(f"{DIVIDER}\n1x a b 1"), REFUSED, "'1x a b 1': no such kind"),
    "unknown dot line": Case(deck(f"{DIVIDER}\n.frob 3"), REFUSED, "'.frob 3'"),
    "a name twice": Case(deck(f"{DIVIDER}\nr1 in 0 2k"), REFUSED, "'r1 in 0 2k': a second device"),
    "no such subcircuit": Case(deck(f"{DIVIDER}\nx1 in 0 nosuch"), REFUSED, "'x1 in 0 nosuch'"),
    "a port too many": Case(
        deck(f"{DIVIDER}\nx1 in 0 out s\n.subckt s a b\nr1 a b 1k\n.ends"), REFUSED, "x1: too many nodes"
    ),
    "a port too few": Case(
        deck(f"{DIVIDER}\nx1 in s\n.subckt s a b\nr1 a b 1k\n.ends"), REFUSED, "x1: too few nodes"
    ),
    "open subcircuit": Case(deck(f"{DIVIDER}\n.subckt s a b\nr1 a b 1k"), REFUSED, ".subckt has no .ends"),
    "incomplete line": Case(
        deck(f"{DIVIDER}\ne1 x 0 in\nr9 x 0 1"), REFUSED, "'e1 x 0 in': nodes or a value"
    ),
    "no such include file": Case(
        deck(f"{DIVIDER}\n.include nothere.inc"), REFUSED, "nothere.inc is not there"
    ),
    "no such library file": Case(
        deck(f"{DIVIDER}\n.lib nothere.lib tt"), REFUSED, "nothere.lib is not there"
    ),
    "no such section": Case(deck(f"{DIVIDER}\n.lib 'deck.cir' nosec"), REFUSED, "no section nosec"),
    "undefined parameter": Case(deck(f"{DIVIDER}\nr5 in 0 {{nope}}"), REFUSED, "parameter nope"),
    "circular parameters": Case(
        deck(f"{DIVIDER}\n.param a={{b}} b={{a}}\nr5 in 0 {{a}}"), REFUSED, ".param a={b}"
    ),
    "bad expression": Case(deck(f"{DIVIDER}\n.param a = 3 * * 4\nr5 in 0 {{a}}"), REFUSED, "'3 * * 4'"),
    "open brace": Case(deck(f"{DIVIDER}\nr5 in 0 {{1+2"), REFUSED, "line 6"),
    "no such function": Case(deck(f"{DIVIDER}\nb1 x 0 v=foo(v(in))\nr9 x 0 1"), REFUSED, "calls foo"),
    "root of a negative number": Case(deck("v1 in 0 1\nb1 out 0 v=sqrt(-1-v(in))"), REFUSED, "sqrt of -1"),
    "code model": Case(
        deck(f"{DIVIDER}\na1 in x foo\n.model foo gain(gain=2)"), NO_MODEL, "foo: needs a code model"
    ),
    # exit status 0
    "floating node": Case(deck(f"{DIVIDER}\nc7 out x 1n\nc8 x 0 1n"), NO_SOLUTION, "node x"),
    "no ground": Case(deck("v1 in b 1\nr1 in out 1k\nr2 out b 1k"), NO_SOLUTION, "node out"),
    "current into a capacitor": Case(deck(f"{DIVIDER}\ni1 0 x 1m\nc9 x 0 1n"), NO_SOLUTION, "node x"),
    "loop of voltage sources": Case(deck(f"{DIVIDER}\nv2 in 0 2"), NO_SOLUTION, "current through v1"),
    "loop of inductors": Case(deck(f"{DIVIDER}\nl1 in 0 1m"), NO_SOLUTION, "current through l1"),
    "no solution": Case(deck("v1 in 0 1\nb1 out 0 v=v(out)+1\nr1 out 0 1k"), NO_SOLUTION, "through b1"),
    "infinite source": Case(
        deck(f"v1 in 0 1e400\n{DIVIDER[DIVIDER.index('r1') :]}"), NO_SOLUTION, "operating point"
    ),
    "impossible temperature": Case(deck(f"{STAGE}\n.temp -300"), NO_SOLUTION, "operating point"),
    "two temperatures": Case(deck(f"{STAGE}\n.temp 50 60"), REFUSED, "'50 60'"),
    "transient instead of an operating point": Case(
        deck(
            "v1 in 0 1\nb1 out 0 v=v(x)+1\nc1 x 0 1n\nc2 out x 1n",
            "optran 0 0 0 100n 10u 0\nop\nwrite out.raw v(out)",
        ),
        NO_SOLUTION,
        "only a transient run",
    ),
    "time step too small": Case(deck(RUNAWAY, TRAN), NO_SOLUTION, "stuck at node out"),
    "shorted source": Case(deck(f"{DIVIDER}\nv5 in in 1"), REFUSED, "v5: both ends"),
    "shorted controlled source": Case(deck(f"{DIVIDER}\ne5 in in out 0 1"), REFUSED, "e5: both ends"),
    "no controlling source": Case(
        deck(f"{DIVIDER}\nf1 x 0 vnope 2\nr9 x 0 1"), REFUSED, "f1: its controlling"
    ),
    "no coupled inductor": Case(deck(f"{DIVIDER}\nk1 la lb 0.9"), REFUSED, "k1: its inductor la"),
    "impossible card value": Case(
        deck(f"{TRANSISTOR}\n.model nm nmos (level=1 phi=-1 gamma=0.5)"), REFUSED, "Phi is not positive"
    ),
    "LD beyond L/2": Case(deck(f"{TRANSISTOR}\n.model nm nmos (level=1 ld=0.6u)"), REFUSED, "model nm: LD"),
    "R without value": Case(deck(f"{DIVIDER}\nr9 out x\nr10 x 0 1k"), REFUSED, "r9: no resistance"),
    "initial condition of no node": Case(deck(f"{DIVIDER}\n.ic v(nope)=3"), REFUSED, "node nope"),
    "nodeset of no node": Case(deck(f"{DIVIDER}\n.nodeset v(nope)=3"), REFUSED, "node nope"),
    "save of nothing": Case(deck(f"{DIVIDER}\n.save v(nope)"), REFUSED, "add .save all"),
    "save of no device": Case(
        deck(f".save all @m77[gm]\n{STAGE}", "op\nwrite out.raw v(out) @m77[gm]"), INCOMPLETE, "@m77[gm]"
    ),
    "value of no node": Case(
        deck(DIVIDER, "op\nwrite out.raw v(out) v(nope)"), INCOMPLETE, "no values of nope"
    ),
    "value of no device": Case(
        deck(STAGE, "op\nwrite out.raw @m77[gm]"), INCOMPLETE, "m77 is not in the circuit"
    ),
    "no such value of a device": Case(
        deck(STAGE, "op\nwrite out.raw @m1[nope]"), INCOMPLETE, "no parameter nope"
    ),
    "alter of no device": Case(
        deck(DIVIDER, "alter rxx = 5\nop\nwrite out.raw v(out)"), INCOMPLETE, "rxx is not"
    ),
    "ac of one frequency by the decade": Case(
        deck(DIVIDER, "ac dec 10 1k 1k\nwrite out.raw frequency v(out)"), INCOMPLETE, "no values of frequency"
    ),
    "ac backwards": Case(
        deck(DIVIDER, "ac dec 10 1meg 1\nwrite out.raw frequency v(out)"),
        INCOMPLETE,
        "no values of frequency",
    ),
    "ac from 0 Hz": Case(deck(DIVIDER, "ac dec 10 0 1meg\nwrite out.raw v(out)"), REFUSED, "above 0 Hz"),
    "ac from below 0 Hz": Case(
        deck(DIVIDER, "ac dec 10 -1 1meg\nwrite out.raw v(out)"), REFUSED, "above 0 Hz"
    ),
    "dc sweep the wrong way": Case(
        deck(DIVIDER, "dc v1 0 -1 0.1\nwrite out.raw v(out)"), INCOMPLETE, "no values"
    ),
    "dc sweep of no source": Case(
        deck(DIVIDER, "dc v9 0 1 0.1\nwrite out.raw v(out)"), REFUSED, "v9: the source"
    ),
    "noise of no source": Case(
        deck(DIVIDER, "noise v(out) v9 dec 10 1 1meg\nwrite out.raw all"),
        REFUSED,
        "v9: the source of the noise",
    ),
    "no such command": Case(deck(DIVIDER, "frob\nop\nwrite out.raw v(out)"), REFUSED, "no command frob"),
    "out of memory": Case(deck(DIVIDER, "tran 1n 1 0 1n\nwrite out.raw v(out)"), INCOMPLETE, "out of memory"),
}
NOT_BY_A_DECK = {"can't be started", "make room on the disk", "see its model {model}"}


def provoke(case: Case, simulator: Simulator, folder: Path) -> tuple[Execution, str]:
    """Run a case; also give all that the simulator said, on both streams."""
    job = Job(case.deck, (OP, AC))
    execution = run(job, simulator=simulator, folder=folder, limits=Limits(seconds=20))
    streams = [(folder / name).read_text("utf-8") for name in ("stderr.txt", "stdout.txt")]
    return execution, "\n".join(line for stream in streams for line in clean(stream))


@pytest.mark.parametrize("name", CASES)
def test_a_case_ends_in_its_outcome_with_the_names_in_the_meaning(
    name: str, simulator: Simulator, tmp_path: Path
) -> None:
    case = CASES[name]
    execution, _ = provoke(case, simulator, tmp_path)
    assert (execution.outcome, execution.plots) == (case.outcome, ())
    assert case.meaning in execution.meaning
    assert execution.meaning.isprintable()
    assert execution.said


def test_every_row_of_the_table_is_provoked_by_a_case(simulator: Simulator, tmp_path: Path) -> None:
    said = [provoke(case, simulator, tmp_path / str(number))[1] for number, case in enumerate(CASES.values())]
    missed = [row.meaning for row in TABLE if not any(row.pattern.search(text) for text in said)]
    assert [meaning for meaning in missed if not any(words in meaning for words in NOT_BY_A_DECK)] == []


def test_a_full_disk_is_said_by_the_simulator_while_it_streams(simulator: Simulator, tmp_path: Path) -> None:
    (tmp_path / "deck.cir").write_text(f"* t\n{DIVIDER}\n.ac dec 1000 1 1g\n.end\n", encoding="utf-8")
    command = [simulator.path, "-n", "-b", "-r", "/dev/full", "deck.cir"]
    said = subprocess.run(
        command, cwd=tmp_path, capture_output=True, text=True, timeout=20, check=False
    ).stderr
    translation = translate(clean(said))
    assert translation is not None
    assert (translation.outcome, "make room" in translation.meaning) == (INCOMPLETE, True)


def test_a_card_is_named_as_it_stands_in_the_deck(simulator: Simulator, tmp_path: Path) -> None:
    circuit = f"{TRANSISTOR}\n{CARD}\nm2 out g 0 0 other w=1u l=1u"
    execution = run(Job(deck(circuit), (OP, AC)), simulator=simulator, folder=tmp_path)
    assert execution.meaning == (
        "'m2 out g 0 0 other w=1u l=1u': there is no .model other; add the card or correct the name"
    )
