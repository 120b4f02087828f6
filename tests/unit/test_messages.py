"""The translation of ngspice's messages, on texts as ngspice 39 wrote them to standard error."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from deckgen.errors import Outcome
from deckgen.simulator.messages import TABLE, translate
from deckgen.simulator.remarks import clean, failures_on_stdout, objections, search_notes, spoken

REFUSED = Outcome.REFUSED_BY_SIMULATOR
NO_SOLUTION = Outcome.NO_CONVERGENCE
INTERRUPTED = """\
    Simulation interrupted due to error!

Note: No ".plot", ".print", or ".fourier" lines; no simulations run
"""
FATAL = "\nERROR: fatal error in ngspice, exit(1)\n"
SINGULAR_NODE = """\
Warning: singular matrix:  check node x

Note: Starting dynamic gmin stepping
Trying gmin =   1.0000E-03 Note: One successful gmin step
Trying gmin =   1.0000E-12 Note: One successful gmin step
Warning: singular matrix:  check node x

Warning: Dynamic gmin stepping failed
Note: Starting true gmin stepping
Trying gmin =   1.0000E-03 Warning: singular matrix:  check node x

Warning: Further gmin increment
Trying gmin =   9.9996E-03 Warning: Last gmin step failed
Warning: True gmin stepping failed
Note: Starting source stepping
Supplies reduced to   0.0000%\x20
Trying gmin =   1.0000E-02 Note: One successful gmin step
Note: One successful source step
Supplies reduced to   0.1000% Supplies reduced to   0.0000% Warning: source stepping failed
doAnalyses: iteration limit reached

op simulation(s) aborted
Warning from checkvalid: vector out is not available or has zero length.
"""
NOT_FINITE = """\
Note: Starting dynamic gmin stepping
Trying gmin =   1.0000E-03 Warning: Further gmin increment
Trying gmin =   9.9996E-03 Warning: Last gmin step failed
Warning: Dynamic gmin stepping failed
Note: Starting true gmin stepping
Trying gmin =   9.9996E-03 Warning: Last gmin step failed
Warning: True gmin stepping failed
Note: Starting source stepping
Supplies reduced to   0.0000%\x20
Trying gmin =   1.0000E-02 Warning: gmin step failed
Warning: source stepping failed
doAnalyses: Too many iterations without convergence

op simulation(s) aborted
"""
FOUND_BY_GMIN = """\
Note: Starting dynamic gmin stepping
Trying gmin =   1.0000E-03 Note: One successful gmin step
Trying gmin =   1.0000E-04 Warning: Further gmin increment
Trying gmin =   1.0000E-12 Note: One successful gmin step
Note: Dynamic gmin stepping completed
"""
FOUND_BY_SPICE3_GMIN = """\
Note: Starting spice3 gmin stepping
Trying gmin =   1.0000E-02 Note: One successful gmin step
Note: spice3 gmin stepping completed
"""
FOUND_BY_SOURCES = """\
Note: Starting dynamic gmin stepping
Trying gmin =   9.9996E-03 Warning: Last gmin step failed
Warning: Dynamic gmin stepping failed
Note: Starting true gmin stepping
Warning: True gmin stepping failed
Note: Starting source stepping
Supplies reduced to   0.0000% Note: One successful source step
Supplies reduced to 100.0000% Note: One successful source step
Note: Source stepping completed
"""
BSIM = """

Checking parameters for BSIM 3.3 model nm
Warning: Pd = 0 is less than W.
Warning: Ps = 0 is less than W.
"""

MEANT: dict[str, tuple[str, Outcome, str]] = {
    "not startable": ("sh: 1: exec: /opt/ngspice: not found\n", Outcome.SIMULATOR_MISSING, "executable"),
    "memory": (
        "malloc: Internal Error: can't allocate 8000000800 bytes. \n",
        Outcome.INCOMPLETE,
        "8000000800 bytes more",
    ),
    "disk full": (
        "Warning: rawfile write error !!\ndoAnalyses: pause requested\n\nrun simulation interrupted\n",
        Outcome.INCOMPLETE,
        "make room on the disk",
    ),
    "include": (
        f"Error: Could not find include file nothere.inc\n{INTERRUPTED}",
        REFUSED,
        "include file nothere.inc",
    ),
    "section": (
        f"ERROR, library file deck.cir, section definition nosec not found\n{FATAL}",
        REFUSED,
        "library deck.cir has no section nosec",
    ),
    "circle": (
        "ERROR: A level depth greater 1000 for dependent parameters is not supported!\n"
        f"    You probably do have a circular parameter dependency at line\n    .param a={{b}}\n{FATAL}",
        REFUSED,
        ".param a={b}: parameters that depend on each other",
    ),
    "expression": (
        "Netlist line no. 6:\n Misplaced operator\nNetlist line no. 6:\n Expression err: 3 * * 4\n"
        "Netlist line no. 6:\n Formula() error.\n      |.param a=3 * * 4| : |a|=|3 * * 4|\n"
        "Netlist line no. 7:\nUndefined parameter [a]\n"
        f"Netlist line no. 7:\nCannot compute substitute\n{FATAL}",
        REFUSED,
        "the expression '3 * * 4'",
    ),
    "parameter": (
        "Netlist line no. 6:\nUndefined parameter [nope]\n"
        f"Netlist line no. 6:\nCannot compute substitute\n{FATAL}",
        REFUSED,
        "parameter nope is used but never set",
    ),
    "brace": (
        f'Netlist line no. 6:\nClosing "}}" not found.\n{FATAL}',
        REFUSED,
        "line 6 can't be read (Closing \"}",
    ),
    "open subcircuit": (
        "\nError: Mismatch of .subckt ... .ends statements!\n    This will cause subsequent errors.\n\n"
        f"Check line .subckt foo a b\n{FATAL}",
        REFUSED,
        "a .subckt has no .ends",
    ),
    "instance parameter": (
        "Error on line 5 or its substitute:\n  m1 out g 0 0 nm w=10u l=1u zz=3\n"
        f"  unknown parameter (zz) \n{INTERRUPTED}",
        REFUSED,
        "'m1 out g 0 0 nm w=10u l=1u zz=3': 'zz' is neither",
    ),
    "value": (
        "warning, can't find model 'abc' from line\n    r7 in 0 abc\nError on line 6 or its substitute:\n"
        f"  r7 in 0 abc\n  unknown parameter (abc) \n{INTERRUPTED}",
        REFUSED,
        "'r7 in 0 abc': 'abc' is neither",
    ),
    "model parameter": (
        "Warning: Model issue on line 6 :\n  .model nm nmos (level=1 vto=1 kp=1e-4 foo=3) ...\n"
        f"unrecognized parameter (foo) - ignored\n{FATAL}",
        REFUSED,
        "foo is no parameter of such a model",
    ),
    "first character": (
        f"Error: '?' is not allowed as first character in line ?1 a b 1.\n{FATAL}",
        REFUSED,
        "'?1 a b 1': no device begins with ?",
    ),
    "device type": (
        f"Error on line 6 or its substitute:\n  1x a b 1\n unknown device type - error \n{INTERRUPTED}",
        REFUSED,
        "'1x a b 1': no such kind of device",
    ),
    "dot line": (
        f"Error on line 6 or its substitute:\n  .frob 3\n unimplemented control card - error \n{INTERRUPTED}",
        REFUSED,
        "'.frob 3': this ngspice has no such dot line",
    ),
    "twice": (
        "Error on line 6 or its substitute:\n  r1 in 0 2k\n"
        f"device already exists, existing one being used\n{INTERRUPTED}",
        REFUSED,
        "'r1 in 0 2k': a second device of this name",
    ),
    "incomplete line": (
        "Error: not enough parameters in line\n   e1 x 0 in\nNo circuit loaded!\n",
        REFUSED,
        "'e1 x 0 in': nodes or a value are missing",
    ),
    "subcircuit": (
        f"Error: unknown subckt: x1 in 0 nosuch\n{INTERRUPTED}",
        REFUSED,
        "'x1 in 0 nosuch': no such subcircuit",
    ),
    "ports": (
        f'Too many parameters for subcircuit type "sub" (instance: xx1)\n{INTERRUPTED}',
        REFUSED,
        "x1: too many nodes for subcircuit sub",
    ),
    "shorted source": (
        "Fatal error: instance v5 is a shorted VSRC\ndoAnalyses: operation not supported\n",
        REFUSED,
        "v5: both ends of the source are on one node",
    ),
    "controlling source": (
        "Fatal error: f1: unknown controlling source vnope\ndoAnalyses: no such parameter on this device\n",
        REFUSED,
        "f1: its controlling source vnope is not there",
    ),
    "coupled inductor": (
        "Fatal error: k1: coupling to non-existant inductor la.\n"
        "doAnalyses: impossible error - can't occur\n",
        REFUSED,
        "k1: its inductor la is not there",
    ),
    "function": (f"Error: no such function 'foo'\n{FATAL}", REFUSED, "an expression calls foo"),
    "domain": (f"Error: -1 out of range for sqrt\n{FATAL}", REFUSED, "takes sqrt of -1"),
    "initial condition": (
        "Warning : IC on non-existent node - nope, ignored\n   Please check line .ic v(nope)=3\n",
        REFUSED,
        "node nope of an .ic or .nodeset line",
    ),
    "temperature": (
        "Warning: Could not set temperature to 50 60\n   Set to default 27 C instead.\n",
        REFUSED,
        "'50 60' is not one temperature",
    ),
    "model type": (
        "warning, model type mismatch in line\n    m1 out g 0 0 nm w=10u l=1u\n"
        "Error on line 5 or its substitute:\n  m1 out g 0 0 nm w=10u l=1u\n"
        f"incorrect model type\n{INTERRUPTED}",
        REFUSED,
        "'m1 out g 0 0 nm w=10u l=1u': its .model card is of another type",
    ),
    "no model": (
        "warning, can't find model 'nm' from line\n    m1 out g 0 0 nm w=10u l=1u\n"
        "Error on line 5 or its substitute:\n  m1 out g 0 0 nm w=10u l=1u\n"
        f"could not find a valid modelname\n{INTERRUPTED}",
        Outcome.MODEL_MISSING,
        "there is no .model nm",
    ),
    "code model": (
        "Error on line 6 or its substitute:\n  a1 in x foo\n"
        f" MIF-ERROR - unable to find definition of model foo\n{INTERRUPTED}",
        Outcome.MODEL_MISSING,
        "foo: needs a code model",
    ),
    "level": (
        "Error on line 5 or its substitute:\n  m1 out g 0 0 nm w=10u l=1u\n"
        f"could not find a valid modelname\n{INTERRUPTED}",
        Outcome.MODEL_MISSING,
        "no model that ngspice can use",
    ),
    "anything else in a line": (
        f"Error on line 5 or its substitute:\n  m1 out g 0 nm w=10u\nnot enough nodes\n{INTERRUPTED}",
        REFUSED,
        "'m1 out g 0 nm w=10u': not enough nodes;",
    ),
    "card value": (
        "Fatal error: nm: Phi is not positive.\ndoAnalyses: no such parameter on this device\n\n"
        "op simulation(s) aborted\n",
        REFUSED,
        "can't use a value: nm: Phi is not positive;",
    ),
    "channel length": (
        "Warning: nm: effective channel length less than zero\n",
        REFUSED,
        "model nm: LD takes away more than the channel's length",
    ),
    "no resistance": ("Warning: r9: resistance to low, set to 1 mOhm\n", REFUSED, "r9: no resistance given"),
    "swept source": (
        "Fatal error: DC Transfer Function: Voltage source, current source, or resistor named"
        ' "v9" is not in the circuit\ndoAnalyses: no such device\n\ndc simulation(s) aborted\n',
        REFUSED,
        "v9: the source to sweep",
    ),
    "noise source": (
        "Warning: Noise input source v9 not in circuit\n"
        "doAnalyses: not found\n\nnoise simulation(s) aborted\n",
        REFUSED,
        "v9: the source of the noise analysis",
    ),
    "start frequency": (
        "ERROR: AC startfreq <= 0\ndoAnalyses: parameter value out of range or the wrong type\n\n"
        "ac simulation(s) aborted\n",
        REFUSED,
        "must start above 0 Hz",
    ),
    "save": (
        "Error: no data saved for D.C. Operating point analysis; analysis not run\ndoAnalyses: not found\n",
        REFUSED,
        "D.C. Operating point analysis: the .save lines name nothing",
    ),
    "command": ("frob: no such command available in ngspice\n", REFUSED, "this ngspice has no command frob"),
    "loop": (
        "Warning: singular matrix:  check node v1#branch\n\nNote: Starting dynamic gmin stepping\n"
        "doAnalyses: iteration limit reached\n\nop simulation(s) aborted\n",
        NO_SOLUTION,
        "the current through v1 is not determined",
    ),
    "floating node": (SINGULAR_NODE, NO_SOLUTION, "the voltage of node x is not determined"),
    "time step": (
        'doAnalyses: TRAN:  Timestep too small; time = 1e-06, timestep = 1.25e-18: trouble with node "x"\n\n'
        "tran simulation(s) aborted\n",
        NO_SOLUTION,
        "the transient analysis stuck at node x",
    ),
    "time step, device": (
        "doAnalyses: TRAN:  Timestep too small; time = 1e-06, timestep = 1e-18: "
        "trouble with dm-instance d1\n",
        NO_SOLUTION,
        "stuck at d1; see its model dm",
    ),
    "transient instead of operating point": (
        "Note: Transient op started\nNote: Transient op finished successfully\n",
        NO_SOLUTION,
        "only a transient run instead of one",
    ),
    "singular": (
        "doAnalyses: matrix is singular\n\nac simulation(s) aborted\n",
        NO_SOLUTION,
        "the equations have no single solution",
    ),
    "no convergence": (NOT_FINITE, NO_SOLUTION, "no operating point was found"),
    "device to look at": (
        "Error: no such device or model name m77\n"
        "Warning from checkvalid: vector @m77[gm] is not available or has zero length.\n",
        Outcome.INCOMPLETE,
        "m77 is not in the circuit",
    ),
    "parameter to look at": (
        "Error: no such parameter nope.\n"
        "Warning from checkvalid: vector @m1[nope] is not available or has zero length.\n",
        Outcome.INCOMPLETE,
        "the device has no parameter nope",
    ),
    "vector": (
        "Warning from checkvalid: vector frequency is not available or has zero length.\n",
        Outcome.INCOMPLETE,
        "no values of frequency",
    ),
    "aborted": ("\nac simulation(s) aborted\n", Outcome.INCOMPLETE, "the ac analysis was aborted"),
    "on standard output": (
        "DC solution failed -\n",
        NO_SOLUTION,
        "no operating point was found",
    ),
}


@pytest.mark.parametrize("name", MEANT)
def test_a_message_has_its_outcome_and_carries_the_names_in_it(name: str) -> None:
    text, outcome, meaning = MEANT[name]
    translation = translate(clean(text))
    assert translation is not None
    assert translation.outcome is outcome
    assert meaning in translation.meaning
    assert translation.said


@pytest.mark.parametrize("name", MEANT)
def test_none_of_these_messages_is_taken_for_harmless(name: str) -> None:
    assert objections(clean(MEANT[name][0]))


def test_every_row_of_the_table_is_reached_by_a_message() -> None:
    reached = set()
    for text, _, _ in MEANT.values():
        lines = "\n".join(clean(text))
        reached.add(next(index for index, row in enumerate(TABLE) if row.pattern.search(lines)))
    assert [row.pattern.pattern for index, row in enumerate(TABLE) if index not in reached] == []


def test_every_meaning_is_one_line_that_says_what_to_do_with_the_groups_it_names() -> None:
    for row in TABLE:
        filled = row.meaning.format_map(dict.fromkeys(row.pattern.groupindex, "x"))
        assert "\n" not in filled
        assert "; " in filled
        assert row.outcome is not Outcome.MEASURED


@pytest.mark.parametrize(
    "text",
    [
        "",
        "\n\n",
        "Note: v1: dc value used for op instead of transient time=0 value.\n",
        " Reference value :  1.09788e-04\r Reference value :  2.25703e-04\r",
        BSIM,
        FOUND_BY_GMIN,
        FOUND_BY_SPICE3_GMIN,
        FOUND_BY_SOURCES,
        FOUND_BY_GMIN + BSIM + FOUND_BY_SOURCES,
    ],
)
def test_what_is_harmless_alone_and_together_leaves_no_objection(text: str) -> None:
    assert objections(clean(text)) == ()


def test_a_search_with_a_singular_matrix_is_objected_to_even_when_completed() -> None:
    text = FOUND_BY_GMIN.replace("Note: Dynamic", "Warning: singular matrix:  check node x\n\nNote: Dynamic")
    assert objections(clean(text)) == ("Warning: singular matrix:  check node x",)


@pytest.mark.parametrize("text", [FOUND_BY_GMIN, FOUND_BY_SPICE3_GMIN, FOUND_BY_SOURCES])
def test_a_search_that_is_not_completed_is_objected_to(text: str) -> None:
    unfinished = "\n".join(text.splitlines()[:-1])
    assert objections(clean(unfinished))
    assert objections(clean(text + unfinished))


@pytest.mark.parametrize(
    "text",
    [
        "Note: v1: dc value used for op instead of transient time=0 value. And more",
        "Warning: Pd = 0.1 is less than W.",
        "Warning: Toxe = -1 is less than 1A. Recommended Toxe >= 5A",
        "something new",
    ],
)
def test_only_whole_known_lines_are_harmless(text: str) -> None:
    assert objections(clean(f"{BSIM}{text}\n{FOUND_BY_GMIN}")) == (text,)


def test_a_way_of_finding_the_operating_point_is_noted_once() -> None:
    lines = clean(FOUND_BY_GMIN + FOUND_BY_SOURCES + FOUND_BY_GMIN)
    assert search_notes(lines) == ("Note: Dynamic gmin stepping completed", "Note: Source stepping completed")
    assert search_notes(clean(BSIM)) == ()


def test_several_faults_are_said_together_and_the_rest_counted() -> None:
    text = "".join(f"Error: unknown subckt: x{number} a 0 s{number}\n" for number in range(1, 6))
    translation = translate(clean(text))
    assert translation is not None
    for number in (1, 2, 3):
        assert f"x{number} a 0 s{number}" in translation.meaning
    assert translation.meaning.endswith("; and 2 more")
    assert "\n" not in translation.meaning


def test_a_cause_is_named_before_what_follows_from_it() -> None:
    translation = translate(clean(SINGULAR_NODE))
    assert translation is not None
    assert translation.said[0] == "Warning: singular matrix:  check node x"
    assert "aborted" not in translation.meaning
    assert "iteration" not in translation.meaning


def test_an_unknown_message_has_no_translation() -> None:
    assert translate(("something new",)) is None
    assert translate(()) is None


def test_failures_are_found_on_standard_output_but_not_in_a_title() -> None:
    text = "Circuit: * DC solution failed -\n\nDC solution failed -\n\nLast Node Voltages\nin   0  0\n"
    assert failures_on_stdout(text) == ("DC solution failed -",)
    assert failures_on_stdout('No. of Data Rows : 1\nbinary raw file "out.raw"\nngspice-39 done\n') == ()


def test_words_of_the_simulator_are_few_short_different_and_say_something() -> None:
    lines = clean(
        INTERRUPTED + FATAL + "No circuit loaded!\n" + "x" * 5000 + "\nb\nb\n" + "\n".join("cdefghijkl")
    )
    said = spoken(lines)
    assert said[:3] == ("x" * 200, "b", "c")
    assert len(said) == 8


def test_control_characters_of_a_deck_do_not_reach_the_terminal() -> None:
    text = "Error: unknown subckt: x1 \x1b[31mred\x07 \x9b0m\u202e in\n"
    (line,) = clean(text)
    assert line == "Error: unknown subckt: x1 [31mred 0m in"


@given(st.text())
def test_cleaned_lines_are_printable_and_any_text_can_be_judged(text: str) -> None:
    lines = clean(text)
    assert all(line.isprintable() and line == line.strip() and line for line in lines)
    assert set(objections(lines)) <= set(lines)
    translation = translate(lines)
    assert translation is None or translation.meaning.isprintable()
