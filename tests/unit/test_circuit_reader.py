"""Numbers of a deck as SPICE reads them, and flat netlists: card by card, every fault with its line."""

from __future__ import annotations

import cmath
import contextlib
import math
import pickle
from dataclasses import replace

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from deckgen.circuit.model import (
    GROUND,
    Capacitor,
    Cccs,
    Ccvs,
    Circuit,
    CurrentSource,
    Element,
    Inductor,
    ModelCard,
    Mosfet,
    Origin,
    OtherDevice,
    Resistor,
    Vccs,
    Vcvs,
    VoltageSource,
    display,
)
from deckgen.circuit.netlist import netlist_text
from deckgen.circuit.numbers import spice_number, spice_text
from deckgen.circuit.reader import read_flat
from deckgen.errors import InputError

# SPICE's rules (as ngspice 39 reads them): M is milli in either case, letters behind a suffix are units.
NUMBERS = [
    ("1M", 1e-3), ("1m", 1e-3), ("1MEG", 1e6), ("1Meg", 1e6), ("1megohm", 1e6), ("2.2Mohm", 2.2e-3),
    ("1mil", 25.4e-6), ("1MIL", 25.4e-6), ("3mils", 76.2e-6), ("1mi", 1e-3), ("1me", 1e-3),
    ("1T", 1e12), ("1g", 1e9), ("4.7k", 4700.0), ("4.7K", 4700.0), ("10kohm", 1e4),
    ("10u", 1e-5), ("10\u00b5", 1e-5), ("10uF", 1e-5), ("10n", 1e-8), ("10nF", 1e-8), ("3p", 3e-12),
    ("1F", 1e-15), ("1f", 1e-15), ("1fF", 1e-15),
    ("1d3", 1000.0), ("1D03", 1000.0), ("1e3", 1000.0), ("1E+3", 1000.0), ("2.5e-6", 2.5e-6), ("1e3k", 1e6),
    ("5", 5.0), ("5.", 5.0), (".5", 0.5), ("-.5", -0.5), ("+5V", 5.0), ("5V", 5.0), ("5Volt", 5.0),
    ("1a", 1.0), ("1x", 1.0), ("-0.9", -0.9), ("0", 0.0), (" 1k ", 1e3), ("1e-6m", 1e-9),
]  # fmt: skip

# What follows the suffix is ignored, whatever it is: read as the simulator reads it, however it looks.
MISLEADING = [
    ("4k7", 4000.0), ("2u2", 2e-6), ("1M5", 1e-3), ("1,5", 1.0), ("1.2.3", 1.2), ("0x10", 0.0),
    ("1_000", 1.0), ("1%", 1.0), ("1Ω", 1.0), ("10kΩ", 1e4), ("1e5.5", 1e5), ("1e3e3", 1e3), ("1.5.5k", 1.5),
    ("1e", 1.0), ("1e+", 1.0), ("1ek", 1e3), ("1dk", 1e3), ("2r2", 2.0), ("1mile", 25.4e-6),
    ("1\u03bcF", 1.0),  # the Greek letter is no suffix, the micro sign is
    ("1\u212a", 1.0),  # the sign for kelvin, though it lower-cases to k
]  # fmt: skip

NO_NUMBERS = [
    "", "k", "abc", "--1", "1 k", "+", ".", "e3", "inf", "nan", "-inf", "{rd}", "'rd'",
    "1e999", "9e307k",
    "1D-3", "1-5", "1k+5", "1*2", "1/2", "10k-ohm",  # the simulator begins another word at the sign
    "\u0661k",  # an Arabic digit, which float() would read
]  # fmt: skip


@pytest.mark.parametrize(("text", "value"), NUMBERS + MISLEADING)
def test_a_number_is_read_as_spice_reads_it(text: str, value: float) -> None:
    assert spice_number(text) == pytest.approx(value, rel=1e-15, abs=0.0)


@pytest.mark.parametrize("text", NO_NUMBERS)
def test_what_is_not_a_number_is_refused(text: str) -> None:
    with pytest.raises(ValueError, match=r"is not a number|too large"):
        spice_number(text)


@given(st.floats(allow_nan=False, allow_infinity=False))
def test_a_written_float_reads_back_bit_by_bit(value: float) -> None:
    assert spice_number(spice_text(value)).hex() == value.hex()


@pytest.mark.parametrize("value", [math.nan, math.inf, -math.inf])
def test_what_is_not_finite_can_not_be_written(value: float) -> None:
    with pytest.raises(ValueError, match="can't stand in a netlist"):
        spice_text(value)


SCALES = {
    "t": 1e12, "g": 1e9, "meg": 1e6, "k": 1e3, "mil": 25.4e-6, "m": 1e-3, "u": 1e-6, "n": 1e-9, "p": 1e-12,
    "f": 1e-15,
}  # fmt: skip


@given(
    mantissa=st.floats(-1e6, 1e6).map(lambda x: round(x, 6)),
    suffix=st.sampled_from(sorted(SCALES)),
    unit=st.sampled_from(["", "Hz", "V", "ohm", "Farad", "H", "s"]),
    upper=st.booleans(),
)
def test_any_suffix_scales_and_the_unit_behind_it_does_not(
    mantissa: float, suffix: str, unit: str, upper: bool
) -> None:
    text = f"{mantissa:f}{suffix}{unit}"
    read = spice_number(text.upper() if upper else text)
    assert read == pytest.approx(mantissa * SCALES[suffix], rel=1e-15, abs=0.0)


# --- cards ---

MODEL = ".model nm nmos level=1 vto=0.7 kp=100u"


def read(*cards: str) -> Circuit:
    """Read cards behind a title, so that the first stands on line 2."""
    return read_flat("\n".join(["a title", *cards]), file="deck.cir")


def faults(*cards: str) -> list[str]:
    with pytest.raises(InputError) as caught:
        read(*cards)
    return [str(fault) for fault in caught.value.faults]


def test_the_first_line_is_the_title_even_if_it_looks_like_a_card() -> None:
    circuit = read_flat("r1 a 0 1k\nr2 a 0 2k\n")
    assert circuit.title == "r1 a 0 1k"
    assert [element.name for element in circuit.elements] == ["r2"]


def test_a_comment_star_is_no_part_of_the_title() -> None:
    assert read_flat("*  My stage \nr1 a 0 1\n").title == "My stage"
    assert read_flat("").title == ""


def test_every_kind_of_part_is_read() -> None:
    circuit = read(
        MODEL, "R1 A B 4.7k", "C1 b 0 1e-5", "L1 b 0 1m", "V1 a 0 5", "I1 0 a 1m",
        "M1 b a 0 0 NM W=1e-5 L=2u M=3",
    )  # fmt: skip
    assert circuit.elements == (
        Resistor("r1", ("a", "b"), 4700.0),
        Capacitor("c1", ("b", "0"), 10e-6),
        Inductor("l1", ("b", "0"), 1e-3),
        VoltageSource("v1", ("a", "0"), 5.0),
        CurrentSource("i1", ("0", "a"), 1e-3),
        Mosfet("m1", ("b", "a", "0", "0"), "nm", 10e-6, 2e-6, 3.0),
    )


def test_names_are_lower_case_and_gnd_is_ground() -> None:
    circuit = read("R1 OUT GND 1", "R2 Gnd out 2")
    assert circuit.nodes == ("out",)
    assert [element.nodes for element in circuit.elements] == [("out", GROUND), (GROUND, "out")]


def test_width_and_length_default_to_100_micrometres() -> None:
    (device,) = read(MODEL, "m1 d g s b nm").transistors
    assert (device.w, device.l, device.m) == pytest.approx((100e-6, 100e-6, 1.0))


@pytest.mark.parametrize(
    ("text", "direct", "alternating"),
    [
        ("", 0.0, 0j),
        ("5", 5.0, 0j),
        ("dc 5", 5.0, 0j),
        ("ac", 0.0, 1 + 0j),
        ("ac 2", 0.0, 2 + 0j),
        ("ac 2 90", 0.0, 2j),
        ("AC 1 180", 0.0, -1 + 0j),
        ("5 ac 1", 5.0, 1 + 0j),
        ("dc 5 ac 1 -90", 5.0, -1j),
        ("ac 1 90 dc 5", 5.0, 1j),
        ("ac 1 dc 5", 5.0, 1 + 0j),
        ("-3m ac 1m", -3e-3, 1e-3 + 0j),
        ("sin(0.5 1 1k)", 0.5, 0j),
        ("2 ac 1 sin(0.5 1 1k)", 2.0, 1 + 0j),
        ("pulse(1 2 0 1n 1n 1u 2u) ac 1", 1.0, 1 + 0j),
        ("pwl(0 3 1m 4)", 3.0, 0j),
        ("exp(1 2 0 1n)", 1.0, 0j),
        ("dc", 0.0, 0j),
        ("dc ac", 0.0, 1 + 0j),
        ("dc=5 ac=2", 5.0, 2 + 0j),
        ("dc 1 dc 2 ac 3 ac 4", 2.0, 4 + 0j),
        ("distof1 0.1 90 dc 3 distof2 1", 3.0, 0j),
        ("sin(1 2 1k 0 0 90)", 3.0, 0j),
        ("sin 3 1 1k", 3.0, 0j),
        ("pulse(1 2) 5", 1.0, 0j),
        ("pwl(1m 3 2m 4)", 3.0, 0j),
        ("pwl(-1m 2 1m 4 2m 9)", 3.0, 0j),
        ("pwl(-2m 2 -1m 4)", 4.0, 0j),
        ("pwl(0 3 1m 4) r=0 td=1m", 3.0, 0j),
    ],
)
@pytest.mark.parametrize("letter", ["v", "i"])
def test_sources_have_dc_and_ac_in_either_order_and_start_where_their_function_does(
    letter: str, text: str, direct: float, alternating: complex
) -> None:
    (source,) = read(f"{letter}1 a 0 {text}").elements
    assert isinstance(source, VoltageSource if letter == "v" else CurrentSource)
    assert source.dc == pytest.approx(direct, abs=1e-18)
    assert cmath.isclose(source.ac, alternating, rel_tol=1e-15, abs_tol=1e-15)


def test_a_current_source_counts_as_often_as_m_says() -> None:
    (source,) = read("i1 a 0 dc 2 ac 3 m=4").elements
    assert source == CurrentSource("i1", ("a", "0"), 8.0, 12 + 0j)


def test_parameters_of_a_model_stand_in_brackets_or_not_and_around_blanks() -> None:
    expected = (("level", 1.0), ("vto", 0.7), ("kp", 1e-4))
    for text in (
        ".model nm nmos level=1 vto=0.7 kp=1e-4",
        ".MODEL NM NMOS(LEVEL=1 VTO=0.7 KP=1e-4)",
        ".model nm nmos ( level = 1, vto = 0.7 , kp=1e-4 )",
        ".model nm\n+ nmos (level=1\n* a comment between\n\n+ vto=0.7\n+kp=1e-4)",
    ):
        (model,) = read(*text.split("\n")).models
        assert model == ModelCard("nm", "nmos", expected)
    assert read(".model pm pmos vto=-1").model("PM").kind == "pmos"


def test_comments_and_blank_lines_are_passed_over() -> None:
    circuit = read(
        "* whole line", "", "   ", "  * indented", "r1 a 0 1k $ behind", "r2 a 0 2k ; behind", "r3 a 0 3k;x"
    )
    assert [element.name for element in circuit.elements] == ["r1", "r2", "r3"]
    circuit = read(
        "r1 a/b 0 1k // behind", "r2 a$b 0 2k $behind", "r3 a 0 3k,$x", "r4", "# so", "$ and so", "+ a 0 4"
    )
    assert [element.nodes[0] for element in circuit.elements] == ["a/b", "a$b", "a", "a"]


def test_a_continuation_reaches_over_comments_and_its_card_keeps_the_first_line() -> None:
    circuit = read("r1", "* between", "+ a 0", "", "+ 1k", "r2 a 0 2k")
    assert circuit.elements == (Resistor("r1", ("a", "0"), 1e3), Resistor("r2", ("a", "0"), 2e3))
    assert [element.origin for element in circuit.elements] == [Origin("deck.cir", 2), Origin("deck.cir", 7)]


def test_a_continuation_of_nothing_is_refused() -> None:
    (fault,) = faults("+ r1 a 0 1k")
    assert fault.startswith("deck.cir: line 2: found `+ r1 a 0 1k`, expected an element")


def test_lines_end_where_the_simulator_ends_them() -> None:
    circuit = read_flat("t\r\nr1 a 0 1k\r\n* note\u2028r2 a 0 1k\u0085r3 a 0 1k\x0cr4 a 0 1k\r\n")
    assert [element.name for element in circuit.elements] == ["r1"]
    (resistor,) = read("r1 a\u00a0b 0 1k").elements
    assert resistor.nodes == ("a__b", "0")  # a hard space parts no words


def test_letters_of_other_alphabets_are_underscores_as_in_the_simulator() -> None:
    """Seen with ngspice 39: the micro sign becomes u, each other byte an underscore."""
    (resistor,) = read("R\u00c9 \u00b5 \u03a9\x7f 2\u00b5\u03a9").elements
    assert resistor == Resistor("r__", ("u", "___"), 2e-6)


@pytest.mark.parametrize(
    ("card", "nodes"),
    [
        ("r1 (a 0) 1k", ("a", "0")),
        ("r1 (a,0) 1k", ("a", "0")),
        ("r1 a,0 1k", ("a", "0")),
        ("v1 a 0 dc(1) sin(0 1 1k)", ("a", "0")),
        ("e1 (a 0) (b,c) 2", ("a", "0", "b", "c")),
        ("b1 a 0 v=v(b)*(2)", ("a", "0")),
    ],
)
def test_parentheses_and_commas_may_part_nodes(card: str, nodes: tuple[str, ...]) -> None:
    assert read(card).elements[0].nodes == nodes


@pytest.mark.parametrize(
    "card",
    [
        "r1 Net-(R1-Pad1) 0 1k",
        "r1 a b(c) 1k",
        "r1(a 0) 1k",
        "c1 0 a(1) 1p",
        "v1 a(b) 0 1",
        "e1 a(b) 0 c 0 2",
        "f1 a b(c) v9 2",
        "b1 a(b) 0 v=1",
        "m1 Net-(M1-D) g 0 0 nm",
        "m1 (d g 0 0) nm",
        "m1 d,g,0,0 nm",
        "d1 (a 0) dm",
        "q1 c,b,e qn",
        "j1 d g s(1) jn",
    ],
)
def test_nodes_that_the_simulator_would_tear_are_refused(card: str) -> None:
    """Seen with ngspice 39: it cuts names off at parentheses, and reads no transistor with separators."""
    (fault,) = faults(MODEL, card, "v9 z 0 1")
    assert fault.startswith("deck.cir: line 3: found")
    assert "nodes parted by blanks, without ( or ," in fault


def test_a_long_row_of_anything_takes_no_long_time() -> None:
    many = 100_000
    rows = [" " * many, "=" * many, "(" * many, "," * many, "$" * many, "ac 1 " * many, "x" * many]
    for row in rows:
        with contextlib.suppress(InputError):
            read(f"v1 a 0 {row}1", f"r1 a 0 {row}1")


def test_temperatures_are_27_degrees_unless_stated() -> None:
    assert (read("r1 a 0 1").temperature, read("r1 a 0 1").tnom) == pytest.approx((300.15, 300.15))
    stated = read("r1 a 0 1", ".options temp=85 tnom=25 reltol=1e-6")
    assert (stated.temperature, stated.tnom) == pytest.approx((358.15, 298.15))
    assert stated.options == (("temp", "85"), ("tnom", "25"), ("reltol", "1e-6"))
    for cards in (
        [".temp -40", ".options temp=85"],
        [".options temp=85", ".temp=-40"],
        [".temp 1", ".temp -40"],
    ):
        assert read("r1 a 0 1", *cards).temperature == pytest.approx(233.15)


def test_a_switch_among_the_options_is_on() -> None:
    assert read("r1 a 0 1", ".option keepopinfo").options == (("keepopinfo", "1"),)


def test_analyses_and_outputs_are_passed_over() -> None:
    cards = [
        ".op",
        ".ac dec 10 1 1meg",
        ".dc v1 0 1 .1",
        ".tran 1n 1u",
        ".noise v(a) v1 dec 1 1 10",
        ".tf v(a) v1",
    ]
    cards += [".save all", ".print op v(a)", ".plot ac v(a)", ".probe v(a)", ".width out=80", ".end"]
    assert read("r1 a 0 1k", *cards).elements == (Resistor("r1", ("a", "0"), 1e3),)


REFUSED = [
    ("x1 a b sub", "an element: a letter from A to Z that SPICE knows"),
    ("1r a 0 1k", "an element: a letter from A to Z that SPICE knows"),
    ("=a b", "an element: a letter from A to Z that SPICE knows"),
    (".subckt a b", "a flat deck"),
    (".include x.lib", "a flat deck"),
    (".param a=1", "a flat deck"),
    (".control", "a flat deck"),
    ("r1 a", "name and 2 nodes"),
    ("r1 a r=1k", "name and 2 nodes"),
    ("r1 a 0 1k m=0", "M above zero"),
    ("l1 a 0 1m m=-1", "M above zero"),
    ("r1 a 0 r=x", "'x' is not a number"),
    ("c1 a 0", "a value"),
    ("l1 a 0", "a value"),
    ("v1 a", "name and 2 nodes"),
    ("v1 a 0 5 V", "'v' is not a number"),
    ("v1 a 0 m=2", "'m' is not a number"),
    ("v1 a 0 dc 1e999", "too large for a number"),
    ("i1 a 0 nonsense 1", "'nonsense' is not a number"),
    ("e1 a", "name and 2 nodes"),
    ("f1 a 0 vnone 2", "a voltage source vnone in the deck"),
    ("h1 a 0 vnone 2", "a voltage source vnone in the deck"),
    ("m1 d g s b", "drain, gate, source, bulk, and one of the models nm"),
    ("m1 d g s b other", "drain, gate, source, bulk, and one of the models nm"),
    ("m1 d g s b nm w=0", "W above zero"),
    ("m1 d g s b nm l=-1u", "L above zero"),
    ("m1 d g s b nm m=0", "M above zero"),
    ("m1 d g s b nm w=", "NAME=VALUE (found w=)"),
    ("m1 d g s b nm w=x", "'x' is not a number"),
    ("r9 b 0 2", "a name used once"),
    (".model nm2", "`.model NAME KIND PARAMETER=VALUE …`"),
    (".model n3 nmos level=x", "'x' is not a number"),
    (".model n1 nmos vto 0.7", "NAME=VALUE (found vto)"),
    (".model n1 nmos vto=x", "'x' is not a number"),
    (".temp", "one temperature in °C"),
    (".temp 27 85", "one temperature in °C"),
    (".temp hot", "'hot' is not a number"),
    (".temp -300", "a temperature above absolute zero, in °C"),
    (".options temp=hot", "'hot' is not a number"),
    (".options defw=nan", "'nan' is not a number"),
    (".options tnom=-273.15", "a temperature above absolute zero, in °C"),
]


@pytest.mark.parametrize(("card", "expected"), REFUSED)
def test_a_card_that_can_not_be_read_is_refused_with_its_line(card: str, expected: str) -> None:
    (fault,) = faults(MODEL, "r9 a 0 1", card)
    assert fault.startswith(f"deck.cir: line 4: found `{card.split()[0]}")
    assert expected in fault.partition("`, expected ")[2]


def test_all_faults_come_together_with_their_lines() -> None:
    found = faults(
        "c1 a 0", MODEL, "x1 a b", "r2 a 0 1k", "R2 a 0 2k", "m1 a b 0 0 nope", ".lib x", ".temp x"
    )
    lines = [fault.split(": ")[1] for fault in found]
    assert sorted(lines) == [f"line {n}" for n in (2, 4, 6, 7, 8, 9)]


def test_a_transistor_without_any_model_says_so() -> None:
    (fault,) = faults("m1 d g s b nm")
    assert fault.endswith("one of the models (none in the deck)")


def test_the_first_of_two_models_counts_as_in_the_simulator() -> None:
    circuit = read(".model nm nmos vto=0.7", ".model nm nmos vto=1", "m1 d g s b nm")
    assert [model.get("vto", 0.0) for model in circuit.models] == pytest.approx([0.7])


# --- values as the simulator takes them, and devices that are only simulated ---


@pytest.mark.parametrize(
    ("card", "part"),
    [
        ("r1 a 0", Resistor("r1", ("a", "0"), 1e-3)),
        ("r1 a 0 0", Resistor("r1", ("a", "0"), 1e-3)),
        ("r1 a 0 -5", Resistor("r1", ("a", "0"), -5.0)),
        ("r1 a 0 1k 2k", Resistor("r1", ("a", "0"), 2e3)),
        ("r1 a 0 1,5", Resistor("r1", ("a", "0"), 5.0)),
        ("r1 a 0 r=2k", Resistor("r1", ("a", "0"), 2e3)),
        ("r1 a 0 2k m=2", Resistor("r1", ("a", "0"), 1e3)),
        ("c1 a 0 2 m=3 ic=1", Capacitor("c1", ("a", "0"), 6.0)),
        ("c1 a 0 0", Capacitor("c1", ("a", "0"), 0.0)),
        ("l1 a 0 6 m=3", Inductor("l1", ("a", "0"), 2.0)),
        ("e1 a 0 b c 10", Vcvs("e1", ("a", "0", "b", "c"), 10.0)),
        ("g1 a 0 b gnd 2", Vccs("g1", ("a", "0", "b", "0"), 2.0)),
        ("f1 a 0 v9 2", Cccs("f1", ("a", "0"), "v9", 2.0)),
        ("h1 a 0 v9 5", Ccvs("h1", ("a", "0"), "v9", 5.0)),
        (
            "m1 d g s b nm ad=1p pd=2u nrs=0.5 off",
            Mosfet("m1", ("d", "g", "s", "b"), "nm", 100e-6, 100e-6, ad=1e-12, pd=2e-6, nrs=0.5),
        ),
    ],
)
def test_a_card_is_taken_as_the_simulator_takes_it(card: str, part: Element) -> None:
    assert read(MODEL, card, "v9 z 0 1").elements[0] == part


@pytest.mark.parametrize(
    ("card", "nodes", "why"),
    [
        ("r1 a 0 1k tc1=1m", ("a", "0"), "a part with TC1"),
        ("r1 a 0 rmod", ("a", "0"), "a part with a model"),
        ("r1 a 0 {rd}", ("a", "0"), "a part with a model"),
        ("c1 a 0 -1n", ("a", "0"), "a part with a value below zero"),
        ("v1 a 0 trnoise(1 2)", ("a", "0"), "a source with TRNOISE"),
        ("v1 a 0 am(1 2 1k)", ("a", "0"), "a source with AM"),
        ("v1 a 0 1 portnum 1 z0 50", ("a", "0"), "a source that is a port"),
        ("e1 a 0 vol='v(b)'", ("a", "0"), "a source with an expression"),
        ("g1 a 0 poly(1) b 0 0 1", ("a", "0"), "a source with an expression"),
        ("d1 a gnd dm", ("a", "0"), "a diode"),
        ("q1 c b e qn", ("c", "b", "e"), "a bipolar transistor"),
        ("q1 c b e sub qn", ("c", "b", "e", "sub"), "a bipolar transistor"),
        ("j1 d g s jn", ("d", "g", "s"), "a JFET"),
        ("k1 l1 l2 0.9", (), "coupled inductors"),
        ("b1 a 0 v=v(b)", ("a", "0"), "a behavioural source"),
        ("m1 d g s b n3", ("d", "g", "s", "b"), "a MOSFET of level 3"),
        ("m1 d g s b nm temp=50", ("d", "g", "s", "b"), "a transistor with TEMP"),
        ("m1 d g s b nt", ("d", "g", "s", "b"), "a level-1 model with TEMP"),
        ("m1 d g s b nr", ("d", "g", "s", "b"), "a level-1 model with RD below zero"),
        ("m1 d g s b no", ("d", "g", "s", "b"), "a level-1 model with RSH and RS of zero"),
        ("m1 d g s b nq nrd=0", ("d", "g", "s", "b"), "a level-1 model with RSH and NRD of zero"),
        ("m1 d g s b nm as=-1p", ("d", "g", "s", "b"), "a transistor with AS below zero"),
        (
            "m1 d g s b nd",
            ("d", "g", "s", "b"),
            "a level-1 model with NSUB below the density of carriers in pure silicon",
        ),
        ("m1 d g s b nm nf=2", ("d", "g", "s", "b"), "a transistor with NF"),
        ("m1 d g s vd", ("d", "g", "s"), "a transistor of kind VDMOS"),
        ("m1 d g s nm", ("d", "g", "s"), "a transistor without four terminals"),
    ],
)
def test_a_device_without_hand_analysis_is_kept_with_its_nodes_and_the_reason(
    card: str, nodes: tuple[str, ...], why: str
) -> None:
    models = (
        ".model n3 nmos level=3",
        ".model nr nmos rd=-5",
        ".model nt nmos temp=50",
        ".model no nmos rsh=10 rs=0",
        ".model nq nmos rsh=10",
        ".model nd nmos tox=20n nsub=1e10",
        ".model vd vdmos",
        ".model qn npn",
        ".model jn njf",
    )
    (device,) = read(MODEL, *models, card).elements
    assert device == OtherDevice(card.split()[0], nodes, why)


@pytest.mark.parametrize(
    "parameters",
    [
        "vto=0.7 is=1f kf=1e-25 rd=0 cbd=0",
        "rd=10 rs=20 rsh=5 cbd=1p cbs=1p fc=0.4",
        "nsub=1e15 nss=1e10 tpg=-1 tox=50n uo=600 tnom=25",
        "js=1u cj=0.2m cjsw=0.3n mj=0.4 mjsw=0.3 pb=0.9",
        "nsub=1e10",
        "rsh=0 rd=0",
    ],
)
def test_every_parameter_of_level_1_leaves_a_device_to_the_hand_analysis(parameters: str) -> None:
    (device,) = read(f".model nm nmos {parameters}", "m1 d g s b nm").elements
    assert isinstance(device, Mosfet)


def test_synonyms_of_parameters_are_written_in_one_way() -> None:
    assert read(".model nm nmos vt0=0.7 u0=500").models[0].parameters == (("vto", 0.7), ("uo", 500.0))


def test_options_set_the_width_and_length_of_cards_without() -> None:
    (device,) = read(".options defw=5u defl=1u", MODEL, "m1 d g s b nm l=3u").transistors
    assert (device.w, device.l) == pytest.approx((5e-6, 3e-6), rel=1e-12)


GEOMETRY = [
    # options, model card, element card: w, l, m, ad, as, pd, nrd
    ("", "", "", (100e-6, 100e-6, 1.0, 0.0, 0.0, 0.0, 1.0)),
    ("", "w=20u l=4u m=7 ad=3p pd=1u nrd=2", "", (20e-6, 4e-6, 1.0, 3e-12, 0.0, 1e-6, 2.0)),
    ("", "w=20u l=4u ad=3p", "w=5u m=2", (5e-6, 4e-6, 2.0, 3e-12, 0.0, 0.0, 1.0)),
    (".options defw=9u defl=2u defm=3", "l=4u", "", (9e-6, 4e-6, 3.0, 0.0, 0.0, 0.0, 1.0)),
    (".options defas=2p", "", "", (100e-6, 100e-6, 1.0, 2e-12, 0.0, 0.0, 1.0)),
    (".options defad=1p defas=2p", "", "", (100e-6, 100e-6, 1.0, 1e-12, 0.0, 0.0, 1.0)),
    (".options defad=1p\n.options defas=2p", "", "", (100e-6, 100e-6, 1.0, 2e-12, 0.0, 0.0, 1.0)),
    (".options defw=1u defw=2u", "", "", (1e-6, 100e-6, 1.0, 0.0, 0.0, 0.0, 1.0)),
    (".options scale=0.5", "l=4u ad=8p", "w=6u pd=2u nrd=3", (3e-6, 2e-6, 1.0, 2e-12, 0.0, 1e-6, 3.0)),
    (".options scale=0.5 defw=9u defad=8p", "", "l=4u", (9e-6, 2e-6, 1.0, 8e-12, 0.0, 0.0, 1.0)),
    (".options scale=0.5 scale=2", "", "w=6u", (12e-6, 100e-6, 1.0, 0.0, 0.0, 0.0, 1.0)),
    (".options scale=0.5\n.options scale=2", "", "w=6u", (3e-6, 100e-6, 1.0, 0.0, 0.0, 0.0, 1.0)),
]
"""As ngspice 39's read-outs of w, l, m, ad, as, pd, nrd show them."""


@pytest.mark.parametrize(("options", "on_model", "on_card", "expected"), GEOMETRY)
def test_geometry_comes_from_the_card_the_model_or_the_options(
    options: str, on_model: str, on_card: str, expected: tuple[float, ...]
) -> None:
    (m,) = read(options, f".model nm nmos {on_model}", f"m1 d g s b nm {on_card}").transistors
    assert (m.w, m.l, m.m, m.ad, m.as_, m.pd, m.nrd) == pytest.approx(expected, rel=1e-12, abs=1e-30)


@pytest.mark.parametrize(
    ("options", "gmin"),
    [("", 1e-12), (".options gmin=1n", 1e-9), (".options gmin=1n gmin=2n", 1e-9), (".options gmin=0", 0.0)],
)
def test_gmin_is_that_of_the_options(options: str, gmin: float) -> None:
    assert read(options, MODEL).gmin == pytest.approx(gmin)


def test_origins_can_come_from_where_the_deck_was_written() -> None:
    written = Origin("user.cir", 17)
    find = {("r2", "a", "0", "1k"): written}.get
    circuit = read_flat("t\nr1 a 0 1k\nr2 a 0 1k\n", file="flat", origin_of=lambda words: find(tuple(words)))
    assert [element.origin for element in circuit.elements] == [Origin("flat", 2), written]


def test_a_fault_is_told_where_the_deck_was_written() -> None:
    with pytest.raises(InputError) as caught:
        read_flat("t\nr1 a 0 x=\nc1 a 0\n", file="flat", origin_of=lambda words: Origin("user.cir", 17))
    assert {(fault.file, fault.where) for fault in caught.value.faults} == {("user.cir", "line 17")}


def test_a_long_card_is_shown_in_part() -> None:
    (fault,) = faults(f"c1 a{'x' * 1_000_000} 0")
    assert len(fault) < 300


# --- the frozen circuit ---


def test_a_circuit_is_hashable_picklable_and_equal_by_value_wherever_it_stands() -> None:
    first = read(MODEL, "m1 d g 0 0 nm w=1u", "r1 d 0 1k")
    moved = read("* a line more", MODEL, "m1 d g 0 0 nm w=1u", "r1 d 0 1k")
    assert first == moved
    assert hash(first) == hash(moved)
    assert first.elements[0].origin != moved.elements[0].origin
    assert pickle.loads(pickle.dumps(first)) == first  # noqa: S301
    assert replace(first, title="x") != first


def test_parts_are_found_by_name_in_any_case() -> None:
    circuit = read(MODEL, "m1 d g 0 0 nm", "r1 d 0 1k")
    assert circuit.element("R1") == circuit.elements[1]
    assert circuit.transistors == circuit.elements[:1]
    deep = read(MODEL, "m.x1.m1 d g 0 0 nm")
    assert deep.element("M1@x1") == deep.element("m.x1.m1") == deep.elements[0]
    for missing in (circuit.element, circuit.model):
        with pytest.raises(KeyError):
            missing("r7")


@pytest.mark.parametrize(
    ("name", "shown"),
    [
        ("m1", "M1"),
        ("m.x1.m1", "M1@X1"),
        ("m.x2.x1.m1", "M1@X1@X2"),
        ("m.x2.m.x1.m1", "M1@X1@X2"),  # of a subcircuit that is defined in the other one
        ("rload", "RLOAD"),
        ("r_1.2", "R_1.2"),
        ("r.1", "R.1"),
    ],
)
def test_a_device_in_subcircuits_is_shown_from_the_inside_out(name: str, shown: str) -> None:
    assert display(name) == shown


# --- round trip ---

NODES = st.sampled_from(["0", "a", "b", "out", "n+1", "x1.d", "net_3"])
POSITIVE = st.floats(1e-18, 1e15)
FINITE = st.floats(-1e6, 1e6)
# Magnitude and phase are what a deck holds: phasors that a round trip through them leaves alone.
PHASOR = st.sampled_from([0j, 1 + 0j, 2.5 + 0j, 1e-3 + 0j])


@st.composite
def circuits(draw: st.DrawFn) -> Circuit:
    """Any flat circuit of the parts that the hand analysis knows."""
    elements: list[Element] = []
    models = [
        ModelCard(f"m{number}", draw(st.sampled_from(["nmos", "pmos"])), draw(_parameters()))
        for number in range(draw(st.integers(1, 3)))
    ]
    for number in range(draw(st.integers(0, 8))):
        kind = draw(st.sampled_from("rclvimegfh"))
        name, two = f"{kind}{number}", (draw(NODES), draw(NODES))
        if kind in "rcl":
            elements.append({"r": Resistor, "c": Capacitor, "l": Inductor}[kind](name, two, draw(POSITIVE)))
        elif kind in "vi":
            source = VoltageSource if kind == "v" else CurrentSource
            elements.append(source(name, two, draw(FINITE), draw(PHASOR)))
        elif kind in "eg":
            four = (*two, draw(NODES), draw(NODES))
            elements.append((Vcvs if kind == "e" else Vccs)(name, four, draw(FINITE)))
        elif kind in "fh":
            controls = [element.name for element in elements if isinstance(element, VoltageSource)]
            if controls:
                control = draw(st.sampled_from(controls))
                elements.append((Cccs if kind == "f" else Ccvs)(name, two, control, draw(FINITE)))
        else:
            four = (*two, draw(NODES), draw(NODES))
            model = draw(st.sampled_from(models)).name
            size = [draw(POSITIVE) for _ in range(3)]
            more = [draw(st.sampled_from([0.0, 1.0]) | POSITIVE) for _ in range(6)]
            keys = ("ad", "as_", "pd", "ps", "nrd", "nrs")
            elements.append(Mosfet(name, four, model, *size, **dict(zip(keys, more, strict=True))))
    return Circuit(draw(st.text("abc XYZ-.", max_size=20)).strip() or "t", tuple(elements), tuple(models))


def _parameters() -> st.SearchStrategy[tuple[tuple[str, float], ...]]:
    names = st.lists(st.sampled_from(["vto", "kp", "lambda", "gamma", "tox"]), unique=True)
    values = names.flatmap(lambda chosen: st.tuples(*(st.tuples(st.just(name), FINITE) for name in chosen)))
    return values.map(lambda pairs: (*pairs, ("level", 1.0)))


def _sorted_parameters(circuit: Circuit) -> Circuit:
    models = tuple(replace(m, parameters=tuple(sorted(m.parameters))) for m in circuit.models)
    return replace(circuit, title=" ".join(circuit.title.split()), models=tuple(sorted(models, key=repr)))


@settings(max_examples=60)
@given(circuits())
def test_a_circuit_written_and_read_again_is_the_same(circuit: Circuit) -> None:
    again = read_flat(netlist_text(circuit))
    assert _sorted_parameters(again) == _sorted_parameters(circuit)


def test_a_node_may_be_called_off_and_the_flag_of_that_name_stands_behind_the_model() -> None:
    circuit = read_flat("t\n.model nm nmos level=1\nm1 off off 0 0 nm w=1u l=1u off\n.end\n")
    assert circuit.transistors[0].nodes == ("off", "off", "0", "0")
