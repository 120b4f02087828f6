"""ngspice as the front end of many decks: each gets its own listing or reason, and leaves no trace."""

from __future__ import annotations

import shutil
import tempfile
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

from deckgen.circuit.model import Resistor, VoltageSource
from deckgen.circuit.reader import read_flat
from deckgen.errors import Outcome
from deckgen.simulator import Limits, Simulator
from deckgen.simulator import flatten as front_end
from deckgen.simulator.flatten import Flat, flatten
from tests.simulator.fakes import fake, wrapped


@pytest.fixture(autouse=True)
def temporary(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Iterator[Path]:
    """The folder of temporary files, which has to be empty again."""
    place = tmp_path / "temporary"
    place.mkdir()
    monkeypatch.setattr(tempfile, "tempdir", str(place))
    yield place
    assert list(place.iterdir()) == []


def good(number: int) -> str:
    """A deck that needs flattening, unlike any other; its title doesn't matter."""
    return f"* good\n.param r={number}k\n.subckt s a\nr1 a gnd {{r}}\n.ends\nv1 in 0 {number}\nx1 in s\n"


def wanted(number: int) -> list[str]:
    return [f"r.x1.r1 in 0 {number}e3", f"v1 in 0 {number}"]


def cards(flat: Flat) -> list[str]:
    """The cards of a listing with numbers short."""
    assert flat.text is not None, flat.meaning
    circuit = read_flat(f"* t\n{flat.text}")
    assert flat.text.endswith("\n.end\n")
    parts = (e for e in circuit.elements if isinstance(e, Resistor))
    sources = (e for e in circuit.elements if isinstance(e, VoltageSource))
    return [
        *(f"{e.name} {' '.join(e.nodes)} {e.value / 1e3:g}e3" for e in parts),
        *(f"{e.name} {' '.join(e.nodes)} {e.dc:g}" for e in sources),
    ]


BAD = {
    "an unknown parameter": ("r1 a 0 {nope}", Outcome.REFUSED_BY_SIMULATOR, "nope"),
    "an unknown subcircuit": ("r1 a 0 1\nx1 a nope1", Outcome.REFUSED_BY_SIMULATOR, "nope1"),
    "a subcircuit in itself": (
        ".subckt s a\nx1 a s\n.ends\nx1 a s",
        Outcome.REFUSED_BY_SIMULATOR,
        "subcircuit",
    ),
    "an open subcircuit": (".subckt s a\nr1 a 0 1", Outcome.REFUSED_BY_SIMULATOR, ".ends"),
    "too few ports": (".subckt s a b\nr1 a b 1\n.ends\nx1 a s", Outcome.REFUSED_BY_SIMULATOR, "x1"),
    "parameters in a circle": (
        ".param a={b}\n.param b={a}\nr1 a 0 {a}",
        Outcome.REFUSED_BY_SIMULATOR,
        "circle",
    ),
    "an unknown model": ("m1 a b 0 0 nope2", Outcome.MODEL_MISSING, "nope2"),
    "an unknown device": ("!1 a 0 1", Outcome.REFUSED_BY_SIMULATOR, "!1"),
    "a device twice": ("r1 a 0 1\nr1 a 0 2", Outcome.REFUSED_BY_SIMULATOR, "second device"),
    "an open brace": ("r1 a 0 {1", Outcome.REFUSED_BY_SIMULATOR, "}"),
    "an unknown card": (".nope3\nr1 a 0 1", Outcome.REFUSED_BY_SIMULATOR, ".nope3"),
    "a code model": ("e1 a 0 poly(2) b 0 c 0 0 1 1", Outcome.MODEL_MISSING, "code model"),
    "nothing": ("", Outcome.REFUSED_BY_SIMULATOR, "no listing"),
    "nothing but an end": (".end", Outcome.REFUSED_BY_SIMULATOR, "no listing"),
    "an option in parentheses": ("r1 a 0 1\n.options x=(", Outcome.REFUSED_BY_SIMULATOR, "status 1"),
}
"""Bodies of decks, what becomes of them in ngspice 39, and words of the reason."""


@pytest.mark.parametrize(("body", "outcome", "words"), BAD.values(), ids=BAD)
def test_a_bad_deck_hurts_no_other_and_has_the_reason_that_it_has_alone(
    simulator: Simulator, body: str, outcome: Outcome, words: str
) -> None:
    bad = f"* bad\n{body}\n"
    before, found, after, again, last = flatten([good(2), bad, good(3), bad, good(4)], simulator=simulator)
    assert (found.text, found.outcome) == (None, outcome)
    assert words in found.meaning
    assert found == again
    assert (found,) == flatten([bad], simulator=simulator)
    assert [cards(flat) for flat in (before, after, last)] == [wanted(2), wanted(3), wanted(4)]


def test_each_bad_deck_of_a_batch_has_its_own_reason(simulator: Simulator) -> None:
    decks = [good(1)]
    for body, _, _ in BAD.values():
        decks += [f"* bad\n{body}\n", good(2)]
    flats = flatten(decks, simulator=simulator)
    assert [cards(flat) for flat in flats[2::2]] == [wanted(2)] * len(BAD)
    for flat, (_, outcome, words) in zip(flats[1::2], BAD.values(), strict=True):
        assert (flat.text, flat.outcome) == (None, outcome)
        assert words in flat.meaning


CONTAGIOUS = [
    "nosubckt", "noparse", "subend=.foo", "substart=.foo", "subinvoke=y", "no_auto_gnd", "ngbehavior=psa",
    "ngbehavior=s3", "rseries=1", "cshunt=1p", "scale=1u", "seed=3", "temp=90", "savecurrents", "renumber",
    "brief", "nomod", "modelcard=.foo", "addcontrol", "strictnumparse",
]  # fmt: skip
"""Options, of which ngspice 39 keeps some in force for the next deck as long as it keeps the circuit."""


@pytest.mark.parametrize("option", CONTAGIOUS)
def test_no_option_of_a_deck_changes_another(simulator: Simulator, option: str) -> None:
    infected = f"* options\n.options {option}\nv1 a 0 1\nr1 a 0 1k\nl1 a b 1m\nr2 b 0 1\n.temp 90\n"
    _, first, second = flatten([infected, good(2), good(3)], simulator=simulator)
    assert (first,) == flatten([good(2)], simulator=simulator)
    assert (second,) == flatten([good(3)], simulator=simulator)


def test_functions_and_parameters_of_a_deck_are_forgotten(simulator: Simulator) -> None:
    rich = (
        "* rich\n.param nope=1\n.func f(x) {x}\n.global g\n.model nm nmos vto=1\n"
        ".subckt q a\nr1 a 0 1\n.ends\nv1 in 0 1\n"
    )
    for body in ("r1 in 0 {nope}", "r1 in 0 {f(1)}", "m1 in in 0 0 nm", "x1 in q"):
        _, poor = flatten([rich, f"* poor\nv1 in 0 1\n{body}\n"], simulator=simulator)
        assert poor.text is None, body


def test_what_flattening_keeps_and_what_it_loses(simulator: Simulator) -> None:
    deck = (
        "* title\n.param w=10u\nM1 D G 0 0 NM W={w} L=2u\nR1 d 0 1K\nVg G 0 DC 1 AC 1\n.MODEL NM NMOS VTO=1\n"
        ".options reltol=1m\n.temp 85\n.ic v(d)=1\n.nodeset v(d)=1\n"
        ".if (1)\nC1 d 0 1p\n.else\nC1 d 0 2p\n.endif\n"
    )
    (flat,) = flatten([deck], simulator=simulator)
    assert flat.text is not None
    lines = [" ".join(line.split()) for line in flat.text.splitlines()]
    assert lines == [
        "m1 d g 0 0 nm w= 9.999999999999999e-06 l=2u", "r1 d 0 1k", "vg g 0 dc 1 ac 1",
        ".model nm nmos vto=1", ".ic v(d)=1", ".nodeset v(d)=1", "c1 d 0 1p", ".options reltol=1m", ".end",
    ]  # fmt: skip


def test_random_values_are_the_same_wherever_a_deck_with_a_seed_stands(simulator: Simulator) -> None:
    deck = "* random\n.param r={agauss(1k,100,3)}\nv1 a 0 1\nr1 a 0 {r}\n.options seed=5\n"
    first, _, second = flatten([deck, good(1), deck], simulator=simulator)
    assert first == second
    assert (first,) == flatten([deck], simulator=simulator)


def test_decks_come_back_in_their_order_however_many_there_are(
    simulator: Simulator, count: Callable[[int, int], int], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(front_end, "_MOST_AT_ONCE", 20)
    numbers = range(1, count(50, 2000))
    decks = ["* bad\nr1 a 0 {nope}\n" if number % 7 == 0 else good(number) for number in numbers]
    flats = flatten(decks, simulator=simulator)
    assert len(flats) == len(decks)
    for number, flat in zip(numbers, flats, strict=True):
        if number % 7 == 0:
            assert flat.outcome is Outcome.REFUSED_BY_SIMULATOR
        else:
            assert cards(flat) == wanted(number)


def test_no_decks_are_no_process(tmp_path: Path) -> None:
    assert flatten([], simulator=fake(tmp_path, f"touch {tmp_path}/ran")) == ()
    assert not (tmp_path / "ran").exists()


def test_a_deck_that_takes_too_long_is_one_that_timed_out(simulator: Simulator, tmp_path: Path) -> None:
    slow = wrapped(tmp_path, simulator, before="grep -q slow in0.cir && sleep 60")
    fast, late = flatten([good(1), "* slow\nr1 a 0 1\n"], simulator=slow, limits=Limits(seconds=0.5))
    assert cards(fast) == wanted(1)
    assert late.text is not None  # it stands second, where the stand-in doesn't look
    (late,) = flatten(["* slow\nr1 a 0 1\n"], simulator=slow, limits=Limits(seconds=0.5))
    assert (late.text, late.outcome) == (None, Outcome.TIMED_OUT)


@pytest.mark.parametrize(
    ("script", "outcome"),
    [
        ("kill -11 $$", Outcome.CRASHED),
        ("exit 0", Outcome.REFUSED_BY_SIMULATOR),
        ("exit 1", Outcome.REFUSED_BY_SIMULATOR),
        ("printf .end >out0.txt", Outcome.REFUSED_BY_SIMULATOR),
        ("printf 'r1 a 0 1\\n' >out0.txt", Outcome.REFUSED_BY_SIMULATOR),
        ("mkdir out0.txt", Outcome.INCOMPLETE),
        ("exec nowhere", Outcome.REFUSED_BY_SIMULATOR),
    ],
)
def test_a_simulator_that_misbehaves_is_an_outcome(tmp_path: Path, script: str, outcome: Outcome) -> None:
    (flat,) = flatten([good(1)], simulator=fake(tmp_path, script))
    assert (flat.text, flat.outcome) == (None, outcome)
    assert flat.meaning


def test_a_simulator_that_is_not_there_is_an_outcome(tmp_path: Path) -> None:
    (flat,) = flatten([good(1)], simulator=Simulator("ngspice", "39", str(tmp_path / "nowhere")))
    assert (flat.text, flat.outcome) == (None, Outcome.SIMULATOR_MISSING)


def test_no_room_for_temporary_files_is_an_outcome(simulator: Simulator, temporary: Path) -> None:
    shutil.rmtree(temporary)
    flats = flatten([good(1), good(2)], simulator=simulator)
    temporary.mkdir()
    assert [(flat.text, flat.outcome) for flat in flats] == [(None, Outcome.INCOMPLETE)] * 2


def test_text_that_is_no_unicode_is_read_all_the_same(simulator: Simulator) -> None:
    (flat,) = flatten(["* \udcff title\n.param r=1k\nr\udcff1 a 0 {r}\n"], simulator=simulator)
    assert flat.text is not None
