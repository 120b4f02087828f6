"""Each finding about a deck is provoked by a deck of its own, at the right place, and by nothing else."""

from __future__ import annotations

import random
from collections.abc import Callable
from pathlib import Path

import pytest

from deckgen.circuit.reader import read_flat
from deckgen.comparison import Finding, Severity
from deckgen.errors import DeckgenError, InputError
from deckgen.findings.cards import card_findings
from deckgen.findings.graph import bulk_findings, graph_findings, polarity_findings
from deckgen.findings.source import source_findings
from deckgen.findings.table import TABLE
from deckgen.intake import is_flat, take_in
from deckgen.source.deck import read_source
from tests.unit.deck_findings_cases import DATA, DECK_SLUGS, FILES, LINES, NO_LINE, VOLTAGES, deck_of

_CLEAN = sorted((DATA / "clean").glob("*.cir"))
_REFUSED, _NOTE = Severity.REFUSED, Severity.NOTE


def _looked_over(path: Path, slug: str = "") -> tuple[Finding, ...]:
    """All findings on a deck before it runs, and those on its voltages where a test gives them."""
    source = read_source(path, shown=path.name)
    found = (*source_findings(source), *card_findings(source))
    if any(one.severity is _REFUSED for one in found) or not is_flat(source):
        return found
    circuit = read_flat(source.text("* test"), file=path.name)
    found += graph_findings(circuit)
    if slug in VOLTAGES:
        found += bulk_findings(circuit, VOLTAGES[slug])
        found += polarity_findings(circuit, VOLTAGES[slug], frozenset())
    return found


def _written(tmp_path: Path, text: str) -> tuple[Finding, ...]:
    path = tmp_path / "deck.cir"
    path.write_text(text, encoding="utf-8")
    return _looked_over(path)


def _of_cards(tmp_path: Path, text: str) -> tuple[Finding, ...]:
    """Findings on the cards alone."""
    path = tmp_path / "deck.cir"
    path.write_text(text, encoding="utf-8")
    return card_findings(read_source(path, shown=path.name))


def _slugs(found: tuple[Finding, ...]) -> list[str]:
    return [one.slug for one in found if one.severity is not _NOTE]


@pytest.mark.parametrize("slug", [slug for slug in DECK_SLUGS if slug not in NO_LINE])
def test_a_deck_provokes_its_finding_at_its_place(
    slug: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = deck_of(slug, tmp_path, monkeypatch)
    found = [one for one in _looked_over(path, slug) if one.slug == slug]
    assert [(one.file, one.line) for one in found] == [(FILES.get(slug, path.name), LINES[slug])]
    assert found[0].severity is TABLE[slug].severity


@pytest.mark.parametrize("slug", [slug for slug in DECK_SLUGS if slug not in NO_LINE])
def test_a_deck_provokes_no_other_warning_or_refusal(
    slug: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    others = [s for s in _slugs(_looked_over(deck_of(slug, tmp_path, monkeypatch), slug)) if s != slug]
    assert others == []


@pytest.mark.parametrize("slug", sorted(NO_LINE))
def test_a_deck_without_a_known_signal_path_provokes_its_finding(slug: str) -> None:
    (result,) = take_in([DATA / f"{slug}.cir"], flattener=lambda _: ())
    assert not isinstance(result, DeckgenError)
    assert _slugs(result.findings) == [slug]


def test_every_deck_slug_has_its_deck_and_every_deck_its_slug() -> None:
    assert {path.stem for path in DATA.glob("*.cir")} == set(DECK_SLUGS)
    assert set(LINES) | NO_LINE == set(DECK_SLUGS)


def test_no_slug_stands_in_two_parts_of_the_table() -> None:
    assert len(set(DECK_SLUGS)) == len(DECK_SLUGS)


@pytest.mark.parametrize("path", _CLEAN, ids=lambda path: path.stem)
def test_a_deck_without_faults_has_no_warnings_or_refusals(path: Path) -> None:
    assert _slugs(_looked_over(path)) == []


@pytest.mark.parametrize("path", _CLEAN, ids=lambda path: path.stem)
def test_a_deck_without_faults_has_none_with_other_line_ends_either(path: Path, tmp_path: Path) -> None:
    for file in path.parent.iterdir():
        (tmp_path / file.name).write_bytes(b"\xef\xbb\xbf" + file.read_bytes().replace(b"\n", b"\r\n"))
    assert _slugs(_looked_over(tmp_path / path.name)) == []


def test_a_text_says_what_to_do() -> None:
    """After what it does to the result, each text of a warning or refusal goes on with a sentence."""
    for slug in DECK_SLUGS:
        if TABLE[slug].severity is not _NOTE:
            assert ". " in TABLE[slug].text, slug


_HEAD = "test\nV1 in 0 1 AC 1\nR1 in out 1k\nR2 out 0 1k\n"


@pytest.mark.parametrize(
    ("card", "slug", "reading"),
    [
        ("R3 out 0 1MOhm", "bare-m", "0.001"),
        ("R3 out 0 10MΩ", "bare-m", "0.01"),
        (".param r=10M\nR3 out 0 {r}", "bare-m", "0.01"),
        ("V2 x 0 SIN(0 1 1M)\nR3 x out 1k", "bare-m", "0.001"),
        ("R3 out 0 1M5", "digits-after-suffix", "0.001"),
        ("R3 out 0 4R7", "digits-after-suffix", "4"),
        ("R3 out 0 4Ω7", "digits-after-suffix", "4"),
        ("C3 out 0 2u2", "digits-after-suffix", "2e-06"),
        ("V2 x 0 3V3\nR3 x out 1k", "digits-after-suffix", "3"),
        ("L3 out x 10\u03bc\nR3 x 0 1k", "greek-mu", "10"),
        ("C3 out 0 1farad", "farad-is-femto", "1e-15"),
        ("R3 out 0 5%", "suffix-unknown", "5"),
        ("R3 out 0 1_000", "suffix-unknown", "1"),
        ("R3 out 0 1.2.3", "suffix-unknown", "1.2"),
        ("R3 out 0 1x", "suffix-unknown", "1"),
        ("R3 out 0 0x10", "suffix-unknown", "0"),
        ("C3 out 0 10aF", "suffix-unknown", "10"),
    ],
)
def test_a_number_that_looks_otherwise_than_it_reads_is_found(
    card: str, slug: str, reading: str, tmp_path: Path
) -> None:
    found = [one for one in _written(tmp_path, _HEAD + card + "\n") if one.slug == slug]
    assert len(found) == 1
    assert f"is {reading}." in found[0].text or f"is {reading} F." in found[0].text


@pytest.mark.parametrize(
    "card",
    [
        "R3 out 0 1Meg", "R3 out 0 1MEG", "R3 out 0 1MegOhm", "R3 out 0 10m", "R3 out 0 1k0",
        "R3 out 0 4.7kΩ",
        "R3 out 0 1d3", "R3 out 0 1e3", "R3 out 0 10R", "R3 out 0 25mil", "R3 out 0 +1.E+3ohms",
        "C3 out 0 10uF", "C3 out 0 10\u00b5F", "C3 out 0 5fF", "C3 out 0 5f", "C3 out 0 10MF",
        "I3 out 0 1A", "I3 out 0 2amps", "V3 x 0 10M\nR3 x out 1k", "V3 x 0 5V\nR3 x out 1k",
        ".param x=0x10\nR3 out 0 {x}", ".PARAM X=10M\nR3 out 0 {X}", ".param x=2*4k\nR3 out 0 {x}",
        "R3 out 0 {1M}", ".model RM R(RSH=10 TC1=1M)\nR3 out 0 RM L=10u W=1u",
        "V3 x 0 SIN(0 1 1k 1M)\nR3 x out 1k",
    ],
)  # fmt: skip
def test_a_number_that_reads_as_it_looks_is_not_found(card: str, tmp_path: Path) -> None:
    assert _slugs(_written(tmp_path, _HEAD + card + "\n")) == []


@pytest.mark.parametrize(
    ("card", "said"),
    [
        ("C3 out 0 c=1,5u", "reads 5u"),
        ("I3 out 0 ac 1,5m", "reads the magnitude 1 and the phase 5m"),
        ("I3 out 0 1,5m", "stops there"),
        ("D3 out 0 DM\n.model DM D(IS=1f\n+ N=1,5)", "reads 1"),
    ],
)
def test_a_decimal_comma_is_told_with_what_becomes_of_it(card: str, said: str, tmp_path: Path) -> None:
    (found,) = (one for one in _written(tmp_path, _HEAD + card + "\n") if one.slug == "decimal-comma")
    assert said in found.text
    assert found.line == _HEAD.count("\n") + card.count("\n") + 1


@pytest.mark.parametrize(
    "card",
    [
        "R3 out,0 1k",
        "M3 out in 0 0 NM W=1u L=1u IC=1,2\n.model NM NMOS(VTO=1, KP=1m)",
        "V3 x 0 PWL(0,0 1m,1)\nR3 x out 1k",
        "R3 out 0 1k TC=1m",
    ],
)
def test_a_comma_that_separates_is_no_decimal_comma(card: str, tmp_path: Path) -> None:
    assert "decimal-comma" not in _slugs(_written(tmp_path, _HEAD + card + "\n"))


_STAGE = "test\nVDD vdd 0 5\nV1 in 0 2 AC 1\nR1 vdd out 10k\n"


@pytest.mark.parametrize(
    ("cards", "slugs"),
    [
        ("M1 out in 0 0 NM\n.model NM NMOS(KP=1m)", ["w-or-l-missing"]),
        ("M1 out in 0 0 NM\n.options defw=1u\n.model NM NMOS(KP=1m)", ["w-or-l-missing"]),
        ("M1 out in 0 0 NM L=1u\n.options defw=1u\n.model NM NMOS(KP=1m)", []),
        ("M1 out in 0 0 NM\n.model NM NMOS(KP=1m W=1u L=1u)", []),
        ("M1 out in 0 0 NM\n.model NM NMOS(LEVEL=14)", []),
        ("M1 out in 0 NM\n.model NM VDMOS(KP=1)", []),
        ("M1 out in 0 0 NM W={a} L=1u\n.param a=-1u\n.model NM NMOS(KP=1m)", []),
        ("M1 out in 0 0 NM W=1u L=0\n.model NM NMOS(KP=1m)", ["width-or-length-not-positive"]),
        ("M1 out in 0 0 NM W=1u L=1u\n.model NM NMOS(LD=0.5u)", ["ld-too-large"]),
        ("M1 out in 0 0 NM W=1u L=1u\n.model NM NMOS(LD=0.49u)", []),
        ("M1 out in 0 0 NM W=1u L=1u\n.model NM NMOS(KP=0)", ["kp-not-positive"]),
        ("M1 out in 0 0 0 NM W=1u L=1u\n.model NM NMOS(KP=1m)", ["node-count"]),
        ("M1 out in", ["node-count"]),
        ("M1 out in 0 0 NM.1 W=1u L=1u\n.model NM.1 NMOS(KP=1m)", []),
        ("M1 out in 0 0 NM W=1u L=1u\n.model NM.1 NMOS(LEVEL=14)\n.model NM.2 NMOS(LEVEL=14)", []),
        ("M1 out in 0 0 NM W=1u L=1u OFF\n.model NM NMOS VTO 1 KP 1m", []),
        ("M1 out in 0 0 NM W=1u L=1u\n.model NM NMOS(KP=1m VTO=1 VTO=2)", ["parameter-duplicate"]),
        ("M1 out in 0 0 NM W=1u L=1u\n.model NM NMSO(KP=1m)", ["model-type"]),
        ("M1 out in 0 0 NM W=1u L=1u\n.model NM NMOS(LEVEL=3 THETA=0.1)", []),
        ("M1 out in 0 0 NM W=1u L=1u\n.model NM NMOS(LEVEL=1 THETA=0.1)", ["model-parameter-unknown"]),
        ("R2 out 0 RM L=1u W=1u\n.model RM R(RSH=1k RS=1)", ["model-parameter-unknown"]),
        ("D1 out 0 DM\n.model DM D(IS=1f RON=1)", ["model-parameter-unknown"]),
        ("R2 out 0 1k\n.model UNUSED NMOS(LEVEL=1 THETA=0.1 W=1M)", []),
        ("R2 out 0 1k\n.model UNUSED NMOS(KP=1m)\n.model UNUSED NMOS(KP=1m)", ["model-duplicate"]),
        ("R2 out 0 1k foo", ["instance-parameter-unknown"]),
        ("R2 out 0 foo", ["model-undefined"]),
        ("R2 out 0 1k Rser=1", ["instance-parameter-unknown"]),
        ("C2 out 0 1u Rser=1", ["instance-parameter-unknown"]),
        ("I2 out 0 1m 2m", ["instance-parameter-unknown"]),
        ("I2 out 0 DC 1m AC 0 0 0", ["instance-parameter-unknown"]),
        ("V2 x 0 5 Rser=1\nR2 x out 1k", ["instance-parameter-unknown"]),
        ("V2 x 0 DC 5 SIN 0 1 1k 0 0\nR2 x out 1k", []),
        ("I2 out 0 1m M=2", []),
        ("R2 out 0 1k R=2k", ["value-extra"]),
        ("R2 out 0 R=1k M=2 M=3", ["parameter-duplicate"]),
        ("R2 out 0 0k", ["resistor-zero"]),
        ("R2 out 0 {0}", []),
        ("C2 out 0", ["value-missing"]),
        ("R2 out", ["node-count"]),
        ("R2 out 0 10 Ohm", ["unit-apart"]),
        ("V2 x 0 DC 5 V\nR2 x out 1k", ["unit-apart"]),
        ("R2 out 0 10 k\n.model k R(TC1=1m)", []),
        (".param a=1\n.param A=2\nR2 out 0 {a}", ["parameter-duplicate"]),
        (".func f(x) {x}\n.param a=1 b=2\nR2 out 0 {a}", []),
        (".options foo temp=30", ["option-unknown"]),
        ("R2 temper 0 1k\nR3 temper out 1k", ["node-name-reserved"]),
        ("R2 Out 0 1k\nR3 OUT 0 1k\nR4 Out 0 1k", ["names-differ-in-case"]),
    ],
)
def test_cards_provoke_these_findings(cards: str, slugs: list[str], tmp_path: Path) -> None:
    assert _slugs(_of_cards(tmp_path, _STAGE + cards + "\n")) == slugs


_CALL = "test\nV1 in 0 2 AC 1\nX1 in 0 cell\nR9 in 0 1k\n"


@pytest.mark.parametrize(
    ("cards", "slugs"),
    [
        # What is inside a subcircuit has names of its own.
        (".subckt cell a b\nR9 a b 1k\n.ends", []),
        (".subckt cell a b\nR1 a b 1k\nr1 a b 2k\n.ends", ["element-duplicate"]),
        (".subckt cell a b\nM1 a a b b N W=1u L=1u\n.ends\n.model N NMOS(KP=1m)", []),
        (".subckt cell a b\nM1 a a b b N W=1u L=1u\n.ends\n.subckt d x\n.model N NMOS(KP=1m)\n.ends",
         ["model-undefined"]),
        (".subckt cell a b\n.model N NMOS(KP=1m)\nX1 a b in\n.subckt in a b\nM1 a a b b N W=1u L=1u\n.ends\n"
         ".ends", []),
        (".subckt cell a b\n.model N D\nM1 a a b b N W=1u L=1u\n.ends\n.model N NMOS(KP=1m)", ["model-type"]),
        (".subckt cell a b\n.model N NMOS(KP=1m)\n.ends\n.model N NMOS(KP=2m)", []),
        (".subckt cell A b\nR1 a b 1k\n.ends", ["names-differ-in-case"]),
        (".subckt cell a b\nR1 a B 1k\nR2 b a 1k\n.ends", ["names-differ-in-case"]),
        # Subcircuits that nothing uses change nothing.
        (".subckt cell a b\nR1 a b 1k\n.ends\n.subckt idle a b\nR1 a b 4k7 foo=1\n.ends", []),
        (".subckt cell a b\nX1 a b inner\n.ends\n.subckt inner a b\nR1 a b 4k7\n.ends",
         ["digits-after-suffix"]),
        (".subckt cell a b\nX1 a b cell\n.ends", []),
        (".subckt outer a b\n.subckt cell a b\nR1 a b 1k\n.ends\n.ends", ["subcircuit-undefined"]),
        (".subckt cell a b\nR1 a b 1k\n.ends\n.ends", ["subcircuit-open"]),
        # What depends on a condition is not judged.
        (".if (1)\n.subckt cell a b\nR1 a b 4k7 foo=1\n.ends\n.endif", []),
        (".subckt cell a b\nR1 a b 1k\n.ends\n.if (0)\nR9 in 0 4k7 foo=1\n.else\nM9 a b c d NO\n.endif", []),
    ],
)  # fmt: skip
def test_scopes_decide_what_is_judged(cards: str, slugs: list[str], tmp_path: Path) -> None:
    assert _slugs(_written(tmp_path, _CALL + cards + "\n")) == slugs


@pytest.mark.parametrize(
    ("call", "header", "slugs"),
    [
        ("X1 in 0 cell R=2k", "a b R=1k", []),
        ("X1 in 0 cell PARAMS: R=2k", "a b PARAMS: R=1k", []),
        ("X1 in 0 cell m=2", "a b", []),
        ("X1 in 0 cell q=2", "a b\n.param q=1", []),
        ("X1 in 0 cell r=2 R=3", "a b r=1", ["parameter-duplicate"]),
        ("X1 in 0 cell r=4k7", "a b r=1", ["number-in-expression"]),
        ("X1 in 0 cell", "a b r=4k7", ["number-in-expression"]),
        ("X1 in 0 0 cell", "a b", ["subcircuit-ports"]),
    ],
)
def test_a_call_is_held_against_its_subcircuit(
    call: str, header: str, slugs: list[str], tmp_path: Path
) -> None:
    text = f"test\nV1 in 0 2 AC 1\n{call}\nR9 in 0 1k\n.subckt cell {header}\nRA a b 1k\n.ends\n"
    assert _slugs(_written(tmp_path, text)) == slugs


def test_nodes_of_schematic_editors_are_one_word_each(tmp_path: Path) -> None:
    text = (
        "test\nV1 /in 0 DC 2 AC 1\nR1 /in Net-(M1-D) 1k\nM1 Net-(M1-D) /in Net-(M1-S) 0 N W=1u L=1u\n"
        "R2 Net-(M1-S) 0 1k\n.model N NMOS(LEVEL=1)\n"
    )
    assert _of_cards(tmp_path, text) == ()
    assert _slugs(_of_cards(tmp_path, text + "R3 net-(m1-d) 0 1k\n")) == ["names-differ-in-case"]


def test_a_finding_inside_a_subcircuit_names_it(tmp_path: Path) -> None:
    (found,) = _written(tmp_path, _CALL + ".subckt cell a b\nR1 a b 4k7\n.ends\n")
    assert found.text.startswith("R1 of subcircuit cell: ")
    assert found.line == 6


def test_a_finding_in_a_continued_card_is_at_the_line_of_the_word(tmp_path: Path) -> None:
    text = "test\nV1 in 0 1 AC 1\nM1 in in 0 0 N\n+ W=1u\n* between\n+ L=1u\n+ NF=2\n.model N NMOS\n"
    assert [(one.slug, one.line) for one in _of_cards(tmp_path, text)] == [("instance-parameter-unknown", 7)]


def test_names_are_not_judged_where_a_file_is_missing(tmp_path: Path) -> None:
    text = "test\nV1 in 0 1\nM1 in in 0 0 N W=1u L=1u\nX1 in cell\n.include nowhere.inc\n"
    assert _slugs(_written(tmp_path, text)) == ["include-missing"]


@pytest.mark.parametrize(
    "title",
    [
        "Common source amplifier",
        "Rd d 0 1k and other parts",
        "M1 amplifier with 2 stages, gain 10",
        "Load test of 10",
        "* R3 out 0 1k",
        ".title as schematic editors write it",
        ".op",
        "",
        "R3 elsewhere 0 1k",
        "X1 alone",
    ],
)
def test_a_title_is_not_taken_for_a_card(title: str, tmp_path: Path) -> None:
    assert _slugs(_written(tmp_path, title + _HEAD.removeprefix("test"))) == []


@pytest.mark.parametrize(
    "title",
    ["R3 out 0 1k", "C1 out 0 {c}", "V2 out 0 DC 5", "E1 out 0 in 0 2", "D1 out 0 DM",
     "M1 out in 0 0 NM W=1u", "X1 out 0 cell", ".param a=1", ".OPTIONS temp=30", ".model NM NMOS"],
)  # fmt: skip
def test_a_title_that_is_a_card_is_found(title: str, tmp_path: Path) -> None:
    rest = "\nR9 out 0 1k\n.model DM D\n.model NM NMOS\n.subckt cell a b\nR1 a b 1k\n.ends\n"
    text = title + _HEAD.removeprefix("test") + rest
    assert _slugs(_written(tmp_path, text))[:1] == ["title-swallows-card"]


@pytest.mark.parametrize(
    ("cards", "slugs"),
    [
        ("V1 in 0 1 AC\nR1 in 0 1k", []),
        ("V1 in 0 1 AC={a}\nR1 in 0 1k\n.param a=1", []),
        ("V1 in 0 1 AC 0\nR1 in 0 1k", ["ac-source-missing"]),
        ("V1 in 0 1 AC 0\nR1 in 0 1k\n* deckgen: input V1", []),
        ("V1 in 0 1 AC 1\nV2 x 0 1 AC -1\nR1 in x 1k", ["ac-sources-several"]),
        ("V1 in 0 1 AC 1\nV2 x 0 1 AC -1\nR1 in x 1k\n* deckgen: input V2", []),
        ("V1 in 0 1\nR1 in 0 1k\n.if (1)\nV2 x 0 1 AC 1\n.endif", []),
        (".subckt s a\nV1 a 0 AC 1\n.ends\nX1 in s\nR1 in 0 1k", []),
        (".subckt s a\nV1 a 0 AC 1\n.ends\nR1 in 0 1k", ["ac-source-missing"]),
    ],
)
def test_the_input_is_the_only_source_with_an_ac_value(cards: str, slugs: list[str], tmp_path: Path) -> None:
    path = tmp_path / "deck.cir"
    path.write_text("test\n" + cards + "\n")
    assert _slugs(card_findings(read_source(path))) == slugs


def test_no_input_is_looked_for_where_a_stage_file_names_it(tmp_path: Path) -> None:
    path = tmp_path / "deck.cir"
    path.write_text("test\nV1 in 0 1\nR1 in 0 1k\n")
    assert card_findings(read_source(path), input_stated=True) == ()


def _graph(text: str, **stated: str) -> list[str]:
    return _slugs(graph_findings(read_flat("test\n" + text + "\n"), **stated))


_MODELS = "\n.model N NMOS(LEVEL=1 VTO=1)\n.model P PMOS(LEVEL=1 VTO=-1)"


@pytest.mark.parametrize(
    ("cards", "slugs"),
    [
        ("R1 a 0 1k\nR2 a 0 1k", []),
        ("V1 a 0 1\nR1 a b 1k\nC1 b 0 1u\nR2 b 0 1k", []),
        # Sources and inductors in loops, seen through others.
        ("V1 a 0 1\nV2 b a 1\nV3 b 0 2\nR1 b 0 1k", ["source-loop"]),
        ("V1 a 0 1\nL1 a 0 1m\nR1 a 0 1k", ["source-loop"]),
        ("R1 a 0 1k\nL1 a b 1m\nL2 a b 1m\nR2 b 0 1k", ["source-loop"]),
        ("V1 a 0 1\nE1 a 0 a 0 1\nR1 a 0 1k", ["source-loop"]),
        ("V1 a 0 1\nH1 a 0 V1 1\nR1 a 0 1k", ["source-loop"]),
        ("V1 a 0 1\nV2 b b 1\nR1 a b 1k\nR2 b 0 1k", ["source-loop"]),
        ("V1 a 0 1\nC1 a 0 1u\nI1 a 0 1m\nR1 a 0 1k", []),
        # Paths for direct current.
        ("V1 a 0 1\nR1 b c 1k\nR2 b c 1k\nC1 a b 1u", ["no-dc-path"]),
        ("V1 a 0 1\nE1 b 0 c 0 2\nR1 b a 1k\nC1 c 0 1u", ["no-dc-path"]),
        ("V1 a 0 1\nG1 b 0 a 0 2\nC1 b 0 1u", ["current-source-into-empty-node"]),
        ("V1 a 0 1\nR1 a 0 1k\nF1 0 b V1 2\nC1 b 0 1u", ["current-source-into-empty-node"]),
        ("V1 a 0 1\nI1 a b 1u\nM1 a b 0 0 N W=1u L=1u" + _MODELS, ["current-source-into-empty-node"]),
        ("V1 a 0 1\nM1 a a b 0 N W=1u L=1u\nC1 b 0 1u" + _MODELS, []),
        ("V1 a 0 1\nD1 a b D1\nC1 b 0 1u\n.model D1 D", []),
        ("V1 a 0 1\nQ1 a b 0 Q1\nC1 b a 1u\n.model Q1 NPN", []),
        ("V1 a 0 1\nS1 a b a c SM\nR1 b 0 1k\nR2 c 0 1k\n.model SM SW", []),
        # Bulks.
        ("V1 a 0 1\nR1 a b 1k\nM1 b a 0 b N W=1u L=1u" + _MODELS, ["bulk-not-at-source-or-rail"]),
        ("V1 a 0 1\nV2 a b 1\nM1 b a 0 b N W=1u L=1u" + _MODELS, []),
        ("V1 a 0 5\nR1 s a 1k\nR2 d 0 1k\nM1 d 0 s a P W=1u L=1u" + _MODELS, []),
        # Generators.
        ("V1 g 0 1 AC 1\nR2 d 0 1k\nM1 d g d 0 N W=1u L=1u" + _MODELS, []),
        ("V2 d 0 5\nV1 i 0 AC 1\nR1 i g 1k\nR2 d g 1Meg\nM1 d g 0 0 N W=1u L=1u" + _MODELS,
         ["generator-overrides-bias"]),
        ("V2 v 0 5\nV1 i 0 AC 1\nR1 i g 1k\nR2 d g 1Meg\nR3 v d 1k\nM1 d g 0 0 N W=1u L=1u" + _MODELS,
         ["generator-overrides-bias"]),
        ("V2 d 0 5\nV1 i 0 AC 1\nC1 i g 1u\nR2 d g 1Meg\nM1 d g 0 0 N W=1u L=1u" + _MODELS, []),
        ("V2 d 0 5\nV1 i 0 AC 1\nR1 i g 1k\nR2 g 0 1Meg\nM1 d g 0 0 N W=1u L=1u" + _MODELS, []),
    ],
)  # fmt: skip
def test_connections_provoke_these_findings(cards: str, slugs: list[str]) -> None:
    assert _graph(cards) == slugs


def test_the_output_may_have_one_connection() -> None:
    text = "V1 a 0 1\nR1 a 0 1k\nE1 out 0 a 0 2"
    assert _graph(text) == ["node-dangling"]
    assert _graph(text, output="OUT") == []


def test_a_loop_is_told_with_all_that_close_it() -> None:
    circuit = read_flat("test\nV1 a 0 1\nL1 b a 1\nR1 b 0 1\nV2 b c 1\nV9 x 0 1\nR9 x 0 1\nE1 c 0 x 0 1\n")
    (found,) = graph_findings(circuit)
    assert found.text.startswith("V2, L1, V1 and E1 close a loop")
    assert found.line == 8


_CAPACITOR = "test\nV1 a 0 1\nC1 a 0 {value}\nR1 a 0 1k\n"


@pytest.mark.parametrize(
    ("value", "voltage", "marked", "slugs"),
    [
        ("1u", -5.0, "c1", ["capacitor-reversed"]),
        ("1u", -5.0, "C1", ["capacitor-reversed"]),
        ("1u", -5.0, "C2", []),
        ("1.1u", -5.0, "", ["capacitor-reversed"]),
        ("1.1u", 5.0, "C1", []),
        ("1.1u", -1e-6, "C1", []),
    ],
)
def test_polarity_is_that_of_the_first_node(
    value: str, voltage: float, marked: str, slugs: list[str]
) -> None:
    circuit = read_flat(_CAPACITOR.format(value=value))
    assert _slugs(polarity_findings(circuit, {"a": voltage}, frozenset({marked}))) == slugs


@pytest.mark.parametrize(
    ("model", "bulk", "drain", "slugs"),
    [
        ("N", 0.0, 3.0, []),
        ("N", 0.29, 3.0, []),
        ("N", 0.31, 3.0, ["bulk-forward-biased"]),
        ("N", 0.0, -0.5, ["bulk-forward-biased"]),
        ("P", 0.0, -3.0, []),
        ("P", -0.31, -3.0, ["bulk-forward-biased"]),
        ("P", 5.0, -3.0, []),
    ],
)
def test_a_junction_conducts_by_the_polarity_of_its_transistor(
    model: str, bulk: float, drain: float, slugs: list[str]
) -> None:
    circuit = read_flat(f"test\nM1 d 0 0 b {model} W=1u L=1u" + _MODELS)
    assert _slugs(bulk_findings(circuit, {"d": drain, "b": bulk})) == slugs


def test_many_findings_of_a_kind_are_summed_up(tmp_path: Path) -> None:
    cards = "".join(f"R{n} out 0 4k7\n" for n in range(3, 103))
    found = _written(tmp_path, _HEAD + cards)
    assert len(found) == 20
    assert found[-1].text.endswith("(and 80 more of this kind)")


@pytest.mark.parametrize(
    "evil",
    ["\x1b[31m", "{called}", "{0}", "%s", "\u202e", "<b>", "`id`", "a" * 5000, "9" * 50_000 + "k7"],
    ids=lambda text: ascii(text[:8]),
)
def test_words_of_a_deck_can_neither_break_a_text_nor_fill_a_page(evil: str, tmp_path: Path) -> None:
    text = _STAGE + f"R3 out 0 {evil}\nM1 out in 0 {evil} N{evil} W=1u\nX1 out {evil}\n.options {evil}\n"
    found = _written(tmp_path, text)
    assert found
    assert all(len(one.text) < 500 and one.text.isprintable() for one in found)


def test_no_mutilated_deck_makes_the_findings_fail(tmp_path: Path, count: Callable[[int, int], int]) -> None:
    """Lines of all decks in any order, characters changed, dropped or put in: never an exception."""
    lines = [line for path in sorted(DATA.rglob("*.cir")) for line in _lines_of(path)]
    chance = random.Random(1)
    for _ in range(count(300, 20_000)):
        text = "\n".join(["t", *(chance.choice(lines) for _ in range(chance.randint(1, 25)))])
        for _ in range(chance.randint(0, 12)):
            place, kept = chance.randrange(len(text)), chance.randint(0, 1)
            text = text[:place] + chance.choice(["", *_LIKELY]) + text[place + kept :] or "x"
        path = tmp_path / "deck.cir"
        path.write_text(text, encoding="utf-8")
        try:
            found = _looked_over(path)
        except InputError:
            continue  # the reader of flat decks may refuse
        assert all(one.file is not None and one.text for one in found)


_LIKELY = "()={}'\",;$*+.-0123456789 \tmMkKuµμΩ/#x\\\n"


def _lines_of(path: Path) -> list[str]:
    return path.read_bytes().decode("utf-8", "replace").split("\n")


def test_findings_of_long_decks_take_time_in_proportion(tmp_path: Path) -> None:
    """Ten times the lines, each with its own fault: less than forty times the time."""
    import time

    def seconds(count: int) -> float:
        lines = "".join(f"R{n} n{n} N{n + 1} 4k7 foo{n}=1\nM{n} n{n} n{n} 0 0 mod{n}\n" for n in range(count))
        path = tmp_path / f"{count}.cir"
        path.write_text("test\n" + lines)
        source = read_source(path)
        begun = time.perf_counter()
        card_findings(source)
        source_findings(source)
        return time.perf_counter() - begun

    assert seconds(5000) < 40.0 * max(seconds(500), 0.005)
