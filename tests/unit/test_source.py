"""Physical lines of decks: what is carried over, what is left out, which files are read, where cards are."""

from __future__ import annotations

import os
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from deckgen.circuit.model import Origin
from deckgen.circuit.reader import without_comment
from deckgen.source.deck import first_word, forbidden_lines, join_cards, read_source, split_words
from deckgen.source.files import FileError, Roots, read_lines, split_lines
from deckgen.source.model import Line, Source
from deckgen.source.origins import origin_finder, places_of


def lay(folder: Path, **files: str | bytes) -> Path:
    """Write files, in whose names ``__`` is a dot and ``_`` a slash; the deck is ``deck__cir``."""
    for name, text in files.items():
        path = folder / name.replace("__", ".").replace("_", "/")
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_bytes(text if isinstance(text, bytes) else text.encode("utf-8"))
    return folder / "deck.cir"


def read(folder: Path, text: str | bytes, **files: str | bytes) -> Source:
    return read_source(lay(folder, deck__cir=text, **files), shown="deck.cir")


def slugs(source: Source) -> list[str]:
    return [problem.slug for problem in source.problems]


def texts(source: Source) -> list[str]:
    return [line.text for line in source.lines]


# --- lines and characters ---


@pytest.mark.parametrize("text", ["a\nb\n", "a\nb", "a\r\nb\r\n", "a\r\nb", "\ufeffa\nb\n"])
def test_lines_end_at_line_feeds_with_or_without_a_return(text: str) -> None:
    assert split_lines(text.encode("utf-8"), name="x") == ["a", "b"]


def test_other_line_separators_end_no_line() -> None:
    text = "a\x0bb\x0cc\x1cd\x85e\u2028f\u2029g"
    assert split_lines(text.encode("utf-8"), name="x") == [text]


def test_what_is_not_utf_8_is_latin_1() -> None:
    assert split_lines("10 µF, 4,7 kΩ".encode(), name="x") == ["10 µF, 4,7 kΩ"]
    assert split_lines(b"10 \xb5F \xe4", name="x") == ["10 µF ä"]


def test_blank_lines_count_and_the_last_need_not_be_ended() -> None:
    assert split_lines(b"", name="x") == []
    assert split_lines(b"\n\na", name="x") == ["", "", "a"]


@pytest.mark.parametrize(
    ("data", "slug"),
    [
        ("a\nb\n".encode("utf-16"), "utf-16"),
        ("title\nr1 a 0 1k\n".encode("utf-16-le"), "utf-16"),
        (b"title\nr1 a 0 1k\0\n", "nul-bytes"),
        (b"title\rr1 a 0 1k\r", "cr-line-ends"),
        (b"title\r\nr1 a\r0 1k\r\n", "cr-line-ends"),
        (b"title\r\r\nr1 a 0 1k\n", "cr-line-ends"),
    ],
)
def test_what_ngspice_reads_as_nothing_is_refused(tmp_path: Path, data: bytes, slug: str) -> None:
    with pytest.raises(FileError) as refusal:
        split_lines(data, name="x.cir")
    assert (refusal.value.slug, refusal.value.parts) == (slug, {"name": "x.cir"})
    assert slugs(read(tmp_path, data)) == [slug]


@given(st.binary(max_size=200))
def test_bytes_are_lines_or_refused(data: bytes) -> None:
    try:
        lines = split_lines(data, name="x")
    except FileError:
        return
    assert not any("\n" in line or "\r" in line or "\0" in line for line in lines)


# --- words and comments ---


@pytest.mark.parametrize(
    ("line", "left"),
    [
        ("r1 a 0 1k", "r1 a 0 1k"),
        ("r1 a 0 1k ; x", "r1 a 0 1k "),
        ("r1 a 0 1k;x", "r1 a 0 1k"),
        ("r1 a 0 1k $ x", "r1 a 0 1k "),
        ("r1 a 0 1k $x", "r1 a 0 1k "),
        ("r1 a 0 1k\t$x", "r1 a 0 1k\t"),
        ("r1 a 0 1k,$x", "r1 a 0 1k,"),
        ("r1 a$b 0 1k", "r1 a$b 0 1k"),
        ("r1 a 0 1k // x", "r1 a 0 1k "),
        ("r1 a/b//c 0 1k", "r1 a/b"),
        ("r1 a/b 0 1k", "r1 a/b 0 1k"),
        ("$x", "$x"),
    ],
)
def test_a_comment_at_the_end_begins_where_ngspice_39_lets_it_begin(line: str, left: str) -> None:
    assert without_comment(line) == left


@pytest.mark.parametrize(
    ("body", "words"),
    [
        ("r1 a 0 1k", ["r1", "a", "0", "1k"]),
        ("m1 d g s b n w = 1u l =2u m= 3", ["m1", "d", "g", "s", "b", "n", "w=1u", "l=2u", "m=3"]),
        ("r1 a 0 {r + 1}", ["r1", "a", "0", "{r + 1}"]),
        ("r1 a 0 'r + 1' tc={x, y}", ["r1", "a", "0", "'r + 1'", "tc={x, y}"]),
        ("v1 (a,0) sin(0 1)", ["v1", "(", "a", "0", ")", "sin", "(", "0", "1", ")"]),
        ("r1 a 0 {open", ["r1", "a", "0", "{open"]),
        ("", []),
    ],
)
def test_words_hold_expressions_together(body: str, words: list[str]) -> None:
    assert split_words(body) == words


def test_a_long_row_of_blanks_takes_no_long_time() -> None:
    assert split_words("r1" + " " * 1_000_000 + "a") == ["r1", "a"]


@pytest.mark.parametrize(
    ("text", "word"),
    [
        ("  .Control x", ".control"), (".temp=85", ".temp"), (".subckt(a)", ".subckt"), ("*x", "*"),
        ("+x", "+"), ("", ""), (" \t", ""), ("R1 a", "r1"), ("\x0c.end", ".end"), ("\u00a0.end", ".end"),
    ],
)  # fmt: skip
def test_the_first_word_decides_what_a_line_is(text: str, word: str) -> None:
    assert first_word(text) == word


def test_cards_join_their_lines_over_blank_and_comment_lines() -> None:
    written = ["r1 a", "* between", "", "# and", "$ so", "+ 0 ; end", "+", " + 1k", "+= 3", "r2 b 0 1"]
    lines = [Line(text, Origin("x", number)) for number, text in enumerate(written, start=2)]
    first, second = join_cards(lines)
    assert first.words == ("r1", "a", "0", "1k", "=3")
    assert (first.origin, [line.origin.line for line in first.lines]) == (Origin("x", 2), [2, 7, 8, 9, 10])
    assert (second.head, second.origin.line) == ("r2", 11)


def test_a_continuation_of_nothing_is_no_card() -> None:
    assert list(join_cards([Line("+ a 0 1k", Origin("x", 2))])) == []


# --- what is carried over ---


def test_circuit_lines_are_carried_over_as_they_are(tmp_path: Path) -> None:
    kept = [
        "R1  a 0 1K ; x",
        "",
        "* comment",
        ".MODEL n NMOS",
        " .param a=1",
        ".ic v(a)=1",
        "+ v(b)=2",
        ".OPT reltol=1m",
    ]
    source = read(tmp_path, "\n".join(["title", *kept, ".end"]))
    assert (source.title.text, texts(source), source.problems) == ("title", kept, ())
    assert source.text("* ours") == "\n".join(["* ours", *kept, ""])


@pytest.mark.parametrize(
    "card",
    [".op", ".AC dec 1 1 2", " .tran 1 2", ".dc v1 0 1 1", ".noise v(a) v1 dec 1 1 2", ".print ac v(a)",
     ".save all", ".meas ac x max v(a)", ".four 1k v(a)", ".plot ac v(a)", ".probe v(a)", ".width out=80",
     ".title x"],
)  # fmt: skip
def test_analyses_and_outputs_are_left_out_with_their_continuation(tmp_path: Path, card: str) -> None:
    source = read(tmp_path, f"t\nr1 a 0 1k\n{card}\n* comment\n+ more\nr2 a 0 1k\n+ m=2\n")
    assert texts(source) == ["r1 a 0 1k", "* comment", "r2 a 0 1k", "+ m=2"]
    (left,) = source.left_out
    assert left.head == card.split()[0].lower()
    assert [line.origin.line for line in left.lines] == [3, 5]


def test_an_unknown_card_is_left_out_with_its_continuation(tmp_path: Path) -> None:
    source = read(tmp_path, "t\nr1 a 0 1k\n.foo x\n+ 2k\nr2 a 0 1k\n")
    assert texts(source) == ["r1 a 0 1k", "r2 a 0 1k"]
    assert [(p.slug, p.origin.line, dict(p.parts)) for p in source.problems] == [
        ("unknown-card", 3, {"card": ".foo"})
    ]


BLOCKS = [
    ".control\nop\n.endc",
    ".CONTROL\nop\n.ENDC",
    "  .control\n op\n  .endc",
    "\t.Control x\nop\n.endc x",
    ".controls\nop\n.endcs",
]


@pytest.mark.parametrize("block", BLOCKS)
def test_control_blocks_are_left_out(tmp_path: Path, block: str) -> None:
    source = read(tmp_path, f"t\nr1 a 0 1k\n{block}\nr2 a 0 1k\n")
    assert texts(source) == ["r1 a 0 1k", "r2 a 0 1k"]
    assert [(p.slug, p.origin.line, dict(p.parts)) for p in source.problems] == [
        ("control-block", 3, {"lines": "3"})
    ]
    assert [line.text for line in source.left_out[0].lines] == block.split("\n")


def test_an_open_control_block_takes_the_rest_of_its_file(tmp_path: Path) -> None:
    source = read(tmp_path, "t\n.include a.inc\nr2 a 0 1k\n", a__inc="r1 a 0 1k\n.control\nop\nr9 a 0 1\n")
    assert texts(source) == ["r1 a 0 1k", "r2 a 0 1k"]
    assert slugs(source) == ["control-block-open", "control-block"]


@pytest.mark.parametrize("line", ["*# shell x", "*#shell x", "  *# x", "* # x", "\t*#", "*\t#"])
def test_comments_that_are_commands_are_left_out(tmp_path: Path, line: str) -> None:
    source = read(tmp_path, f"t\nr1 a 0 1k\n{line}\n.end\n{line}\n")
    assert texts(source) == ["r1 a 0 1k"]
    assert slugs(source) == ["command-comment", "command-comment"]


def test_text_behind_the_end_is_vetted_and_carried_over(tmp_path: Path) -> None:
    source = read(tmp_path, "t\nr1 a 0 1k\n.end\n\n* comment\nr2 a 0 1k\n.control\n.endc\n.END\nr3 a 0 1\n")
    assert texts(source) == ["r1 a 0 1k", "", "* comment", "r2 a 0 1k", "r3 a 0 1"]
    assert [(p.slug, p.origin.line) for p in source.problems] == [
        ("text-after-end", 6), ("control-block", 7), ("text-after-end", 10)
    ]  # fmt: skip


def test_a_backslash_at_the_end_is_refused(tmp_path: Path) -> None:
    source = read(tmp_path, "t\nr1 a 0 1k \\\nr2 a 0 1k \\\\  \nr3 a 0 1\n")
    assert texts(source) == ["r3 a 0 1"]
    assert slugs(source) == ["line-ends-in-backslash"] * 2


def test_the_title_is_never_a_card(tmp_path: Path) -> None:
    for title in ("r1 a 0 1k", ".control", "*# shell x", "", ".end"):
        source = read(tmp_path, f"{title}\nr2 a 0 1k\n")
        assert (source.title.text, texts(source), slugs(source)) == (title, ["r2 a 0 1k"], [])


@pytest.mark.parametrize(
    "title", [".include a.inc", " .INC a.inc", ".incl a.inc", ".lib a.lib x", ".library x"]
)
def test_an_include_on_the_title_line_is_not_carried_out(tmp_path: Path, title: str) -> None:
    source = read(tmp_path, f"{title}\nr2 a 0 1k\n", a__inc="r1 a 0 1\n")
    assert (texts(source), slugs(source)) == (["r2 a 0 1k"], ["include-on-title-line"])


def test_notes_are_found_wherever_they_stand(tmp_path: Path) -> None:
    deck = (
        "t\n* deckgen: input VIN\n.include a.inc\n  *DECKGEN : Output  out  2 \n"
        "r1 a\n*deckgen:x\n+ 0 1k\n.end\n* deckgen: y z\n"
    )
    source = read(tmp_path, deck, a__inc="* deckgen: load RL\n")
    assert [(note.keyword, note.rest, note.origin) for note in source.notes] == [
        ("input", "VIN", Origin("deck.cir", 2)), ("load", "RL", Origin("a.inc", 1)),
        ("output", "out  2", Origin("deck.cir", 4)), ("x", "", Origin("deck.cir", 6)),
        ("y", "z", Origin("deck.cir", 9)),
    ]  # fmt: skip


NASTY = st.sampled_from(
    [
        ".control",
        ".endc",
        "*#",
        ".include x",
        ".lib a b",
        ".end",
        "r1 a 0 1",
        "+",
        "@x",
        " ",
        "\t",
        ".IF",
        "x\\",
    ]
)


@given(st.lists(st.lists(NASTY, max_size=3).map("".join), max_size=8))
def test_nothing_that_could_run_is_ever_carried_over(
    tmp_path_factory: pytest.TempPathFactory, lines: list[str]
) -> None:
    source = read(tmp_path_factory.mktemp("x"), "\n".join(["title", *lines, ""]))
    forbidden = [word for _, word in forbidden_lines("\n".join(texts(source))) if not word.startswith("@")]
    assert forbidden == []


@pytest.mark.parametrize(
    "line",
    [
        "*# x",
        " .control",
        ".CONTROLS",
        ".include x",
        ".inc x",
        ".lib a b",
        ".endl",
        "@",
        " @x",
        "x\\",
        "a\rb",
    ],
)
def test_lines_that_may_not_reach_the_simulator_are_told_by_number(line: str) -> None:
    ((number, _),) = forbidden_lines(f"* t\nr1 a 0 1\n{line}\n")
    assert number == 3


# --- files ---


def test_includes_come_in_where_they_stand_and_lines_know_their_file(tmp_path: Path) -> None:
    deck = "t\nr1 a 0 1\n.include sub/a.inc\nr4 a 0 4\n"
    source = read(tmp_path, deck, sub_a__inc="r2 a 0 2\n.INC 'b.inc' ; more\n", sub_b__inc="r3 a 0 3\n")
    assert [(line.text, line.origin.file, line.origin.line) for line in source.lines] == [
        ("r1 a 0 1", "deck.cir", 2), ("r2 a 0 2", "sub/a.inc", 1), ("r3 a 0 3", "sub/b.inc", 1),
        ("r4 a 0 4", "deck.cir", 4),
    ]  # fmt: skip
    assert source.files == ("deck.cir", "sub/a.inc", "sub/b.inc")
    assert [line.text for line in source.own_lines] == deck.split("\n")[1:-1]


@pytest.mark.parametrize("written", ["a b.inc", "./a b.inc", "x/../a b.inc"])
@pytest.mark.parametrize("quote", ["'", '"'])
def test_names_in_quotes_may_hold_blanks(tmp_path: Path, quote: str, written: str) -> None:
    source = read(tmp_path, f"t\n.include {quote}{written}{quote}\n", **{"a b__inc": "r1 a 0 1\n"})
    assert texts(source) == ["r1 a 0 1"]


def test_a_file_is_looked_for_beside_its_includer_then_beside_the_deck_then_in_the_roots(
    tmp_path: Path,
) -> None:
    (tmp_path / "models").mkdir()
    for place in ("d/sub/x.inc", "d/x.inc", "models/x.inc"):
        path = tmp_path / place
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text(f"r1 a 0 1 ; {place}\n", encoding="utf-8")
    deck = lay(tmp_path / "d", deck__cir="t\n.include sub/a.inc\n", sub_a__inc=".include x.inc\n")
    for place in ("d/sub/x.inc", "d/x.inc", "models/x.inc"):
        source = read_source(deck, include_roots=[tmp_path / "models"])
        assert texts(source) == [f"r1 a 0 1 ; {place}"]
        (tmp_path / place).unlink()
    assert slugs(read_source(deck, include_roots=[tmp_path / "models"])) == ["include-missing"]


LIBRARY = """* a library
.lib tt
r1 a 0 1
.lib other.lib deep
.endl tt
r9 a 0 9
.LIB ss
r2 a 0 2
.ENDL
"""


@pytest.mark.parametrize(
    ("card", "kept"),
    [
        (".lib a.lib tt", [("r1 a 0 1", "a.lib", 3), ("r3 a 0 3", "other.lib", 2)]),
        (".LIB 'a.lib' SS", [("r2 a 0 2", "a.lib", 8)]),
        (".lib other.lib deep", [("r3 a 0 3", "other.lib", 2)]),
    ],
)
def test_one_section_of_a_library_comes_in(
    tmp_path: Path, card: str, kept: list[tuple[str, str, int]]
) -> None:
    source = read(tmp_path, f"t\n{card}\n", a__lib=LIBRARY, other__lib=".lib deep\nr3 a 0 3\n.endl\n")
    assert [(line.text, line.origin.file, line.origin.line) for line in source.lines] == kept
    assert source.problems == ()


@pytest.mark.parametrize(
    ("card", "slug"),
    [
        (".lib a.lib nope", "library-section-missing"),
        (".lib a.lib", "library-section-stray"),
        (".lib", "library-section-stray"),
        (".endl", "library-section-stray"),
        (".lib nope.lib tt", "include-missing"),
        (".include nope", "include-missing"),
        (".include", "include-missing"),
        (".include ''", "include-missing"),
        (".include ..", "include-outside"),
        (".include /etc/passwd", "include-outside"),
        (".include ~root/x", "include-missing"),
        (".include .", "not-a-file"),
        (".include deck.cir", "include-itself"),
        (".include ./x/../deck.cir", "include-itself"),
        (f".include {'n' * 300}", "include-missing"),
        (f".include {'n/' * 4000}n", "include-missing"),
    ],
)
def test_what_can_not_be_included_is_told_with_its_line(tmp_path: Path, card: str, slug: str) -> None:
    source = read(tmp_path, f"t\nr1 a 0 1\n{card}\nr2 a 0 2\n", a__lib=LIBRARY)
    assert texts(source) == ["r1 a 0 1", "r2 a 0 2"]
    assert [(p.slug, p.origin) for p in source.problems] == [(slug, Origin("deck.cir", 3))]


def test_links_are_followed_inside_and_refused_where_they_lead_out(tmp_path: Path) -> None:
    (tmp_path / "out").mkdir()
    (tmp_path / "out" / "x.inc").write_text("r9 secret 0 1\n", encoding="utf-8")
    deck = lay(
        tmp_path / "d",
        deck__cir="t\n.include in\n.include out\n.include loop\n.include gone\n",
        a__inc="r1 a 0 1\n",
    )
    for name, target in {
        "in": "a.inc",
        "out": tmp_path / "out" / "x.inc",
        "loop": "loop",
        "gone": "nowhere",
    }.items():
        (deck.parent / name).symlink_to(target)
    source = read_source(deck, shown="deck.cir")
    assert texts(source) == ["r1 a 0 1"]
    assert [(p.slug, p.origin.line) for p in source.problems] == [
        ("include-outside", 3), ("include-missing", 4), ("include-missing", 5)
    ]  # fmt: skip


def test_files_that_include_each_other_are_opened_once(tmp_path: Path) -> None:
    source = read(
        tmp_path, "t\n.include a\n", a="r1 a 0 1\n.include b\n", b="r2 a 0 2\n.include a\n.include deck.cir\n"
    )
    assert texts(source) == ["r1 a 0 1", "r2 a 0 2"]
    assert slugs(source) == ["include-itself", "include-itself"]


def test_a_file_may_come_in_twice_side_by_side(tmp_path: Path) -> None:
    source = read(tmp_path, "t\n.include a\n.include a\n", a="r1 a 0 1\n")
    assert (texts(source), source.problems) == (["r1 a 0 1"] * 2, ())


def test_pipes_folders_and_large_files_are_not_read(tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "pipe")
    with (tmp_path / "large").open("wb") as file:
        file.truncate(32 * 2**20 + 1)
    for name, slug in (
        ("pipe", "not-a-file"),
        (".", "not-a-file"),
        ("large", "file-too-large"),
        ("no", "file-unreadable"),
    ):
        with pytest.raises(FileError) as refusal:
            read_lines(tmp_path / name, name=name)
        assert refusal.value.slug == slug


def test_a_deck_that_can_not_be_read_is_a_source_with_that_problem(tmp_path: Path) -> None:
    source = read_source(tmp_path / "nowhere.cir", shown="nowhere.cir")
    assert [(p.slug, p.origin) for p in source.problems] == [("file-unreadable", Origin("nowhere.cir", 1))]
    (tmp_path / "loop.cir").symlink_to("loop.cir")
    assert slugs(read_source(tmp_path / "loop.cir")) == ["file-unreadable"]


def test_roots_are_the_folder_that_the_deck_really_lies_in(tmp_path: Path) -> None:
    (tmp_path / "real").mkdir()
    (tmp_path / "real" / "x.cir").write_text("t\n", encoding="utf-8")
    (tmp_path / "x.cir").symlink_to("real/x.cir")
    roots = Roots.of(tmp_path / "x.cir", [tmp_path / "real" / ".." / "real"])
    assert (roots.own, roots.declared) == (tmp_path / "real", (tmp_path / "real",))
    assert roots.shown(tmp_path / "real" / "a" / "b.inc") == "a/b.inc"
    assert roots.shown(tmp_path / "other.inc") == str(tmp_path / "other.inc")


def test_includes_within_includes_end(tmp_path: Path) -> None:
    """2^20 files that hold nothing but the names of two others each."""
    files = {f"f{n}__inc": f".include f{n + 1}.inc\n" * 2 for n in range(20)}
    source = read(tmp_path, "t\n.include f0.inc\n", f20__inc="* nothing\n", **files)
    assert "too-many-lines" in slugs(source)


# --- origins ---

NESTED = """t
.subckt outer a b
.subckt cell p q
r1 p q 1k
.ends
x1 a m cell
.subckt other p q
r1 p q 2k
.ends
x2 m b params: k=1 other
x3 m b cell k = 2
.ends outer
.subckt cell p q
r1 p q 3k
.ends
xa (1 0) outer
xb 1 0 cell
r1 1 0 4k
.if (1)
r2 1 0 5k
.else
r2 1 2 6k
.endif
"""


@pytest.mark.parametrize(
    ("words", "line"),
    [
        ("r1 1 0 4k", 18), ("r.xb.r1 1 0 3k", 14), ("r.xa.r.x1.r1 1 m 1k", 4), ("r.xa.x1.r1 1 m 1k", 4),
        ("r.xa.r.x3.r1 m 0 1k", 4), ("r2 1 0 5k", 20), ("r2 1 2 6k", 22), ("br1 1 0 4k", 18),
        ("b.xb.br1 1 0 v=2", 14), ("r7 1 0 4k", None), ("r.xc.r1 1 0 3k", None), ("r", None),
    ],
)  # fmt: skip
def test_a_flat_card_is_traced_to_its_line(tmp_path: Path, words: str, line: int | None) -> None:
    find = origin_finder(places_of(read(tmp_path, NESTED).cards))
    assert find(words.split()) == (None if line is None else Origin("deck.cir", line))


def test_subcircuits_that_call_themselves_are_traced_for_a_while(tmp_path: Path) -> None:
    source = read(tmp_path, "t\n.subckt s a\nr1 a 0 1\nx1 a s\n.ends\nx1 1 s\n")
    assert len(places_of(source.cards)) < 50
