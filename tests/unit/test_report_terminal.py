"""Terminal reports show everything, fit their width, and never act on the terminal."""

from __future__ import annotations

import ast
import copy
import io
import re
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import pytest
from rich.cells import cell_len

from deckgen.comparison import Comparison, Finding, Severity
from deckgen.errors import InputError
from deckgen.hand.prediction import HalfPlane, Root, TimeConstantKind, TimeConstantRow
from deckgen.report import cells, terminal
from deckgen.report.document import check_document
from deckgen.report.terminal import Look, check_report, look_of, predict_report
from deckgen.report.wording import CAUTION, EXIT_MEANING, PORT_CONVENTION, SQUARE_LAW_CONVENTION
from tests.unit import report_samples as samples

WIDTHS = pytest.mark.parametrize("width", [80, 100, 119, 120, 160])
_ANSI = re.compile(r"\x1b\[[0-9;]*m")


def squeezed(text: str) -> str:
    """The text with all blanks and line ends taken out, so that folding doesn't show."""
    return re.sub(r"\s+", "", text)


def single_spaced(text: str) -> list[str]:
    return [" ".join(line.split()) for line in text.splitlines()]


def _line(report: str, start: str) -> str:
    """The one line that begins with this text, any mark before it."""
    found = [line for line in single_spaced(report) if re.match(rf"([!~] )?{re.escape(start)}( |$)", line)]
    assert found, f"no line begins with {start!r}"
    return found[0]


@WIDTHS
@pytest.mark.parametrize("comparison", samples.ALL, ids=lambda comparison: comparison.name)
def test_every_value_and_verdict_stands_beside_its_quantity(width: int, comparison: Comparison) -> None:
    document = samples.checked(comparison)
    report = check_report(document, Look(width))
    for quantity in document["stages"][0]["quantities"]:
        line = _line(report, quantity["name"])
        assert cells.hand_cell(quantity) in line
        if comparison.outcome != "timed out":
            assert cells.simulated_cell(quantity) in line
            assert cells.gap_cell(quantity) in line
            assert cells.tolerance_cell(quantity) in line
            assert line.endswith(cells.verdict_cell(quantity))


@WIDTHS
@pytest.mark.parametrize("colour", [False, True])
def test_no_line_of_the_samples_is_wider_than_the_terminal(width: int, colour: bool) -> None:
    for report in (
        check_report(samples.checked(), Look(width, colour)),
        predict_report(samples.predicted(), Look(width, colour)),
    ):
        plain = _ANSI.sub("", report)
        assert max(map(cell_len, plain.splitlines())) <= width
        assert all(line == line.rstrip() for line in plain.splitlines())


def test_a_terminal_narrower_than_eighty_gets_the_lines_of_eighty() -> None:
    assert check_report(samples.checked(), Look(40)) == check_report(samples.checked(), Look(80))


@WIDTHS
def test_colour_adds_codes_and_changes_nothing_else(width: int) -> None:
    for make, document in ((check_report, samples.checked()), (predict_report, samples.predicted())):
        plain, coloured = make(document, Look(width)), make(document, Look(width, colour=True))
        assert "\x1b" not in plain
        assert _ANSI.sub("", coloured) == plain
        assert coloured != plain


def test_every_style_ends_on_its_own_line() -> None:
    for line in check_report(samples.checked(), Look(colour=True)).splitlines():
        codes = _ANSI.findall(line)
        assert not codes or codes[-1] == "\x1b[0m"


def test_what_fails_is_marked_and_named_without_colour() -> None:
    report = check_report(samples.checked(samples.BEYOND))
    marked = [line.split()[1] for line in report.splitlines() if line.startswith("! ")]
    assert marked[:2] == ["ID(M1)", "Av"]
    lines = {line.split()[1]: line for line in report.splitlines() if line.startswith(("!", "~"))}
    assert lines["ID(M1)"].endswith("BEYOND")
    assert lines["Rout"].startswith("~")
    assert lines["Rout"].endswith("beyond, excused")
    assert "excused Rout: known gap until 2026-03-31: RD under review" in " ".join(report.split())
    assert " FAILS ──" in report.splitlines()[0]


def test_a_clean_stage_has_no_marks() -> None:
    report = check_report(samples.checked(samples.CLEAN))
    assert not [line for line in report.splitlines() if line.startswith(("!", "~"))]
    assert " passes ──" in report.splitlines()[0]


def test_numbers_stand_under_one_another_by_point_and_unit() -> None:
    report = check_report(samples.checked(samples.CLEAN)).splitlines()
    start = next(i for i, line in enumerate(report) if line.split()[:2] == ["quantity", "hand"])
    table = report[start + 1 : start + 1 + len(samples.VALUES)]
    simulated_from = report[start].index("simulated")
    hand = [line[:simulated_from] for line in table]
    assert len({line.index(".", 13) for line in hand if "." in line[13:]}) == 1
    assert len({re.search(r"\d +[^\s\d]+ *$", line).end() for line in hand}) == 1  # type: ignore[union-attr]


def test_the_gap_is_given_in_the_measure_of_its_tolerance() -> None:
    report = check_report(samples.checked(samples.CLEAN))
    assert "+0.41 dB ±1 dB" in _line(report, "Av")
    assert "+1.5 % ±10 %" in _line(report, "ID(M1)")
    assert "180.00 deg 179.93 deg -0.1 deg ±5 deg" in _line(report, "Av.phase")
    assert "0 V ±240 mV" in _line(report, "V(out)")


def test_a_roomy_terminal_shows_the_gap_in_the_quantity_s_unit_and_where_the_tolerance_is_from() -> None:
    line = _line(check_report(samples.checked(samples.BEYOND), Look(160)), "fH")
    assert "-310 kHz" in line
    assert "stage file" in line
    assert "closed form" in line
    narrow = " ".join(check_report(samples.checked(samples.BEYOND), Look(80)).split())
    assert "tolerance stage file: fH; default: the rest" in narrow


def test_claims_are_held_against_the_simulation_and_against_hand() -> None:
    report = check_report(samples.checked(samples.BEYOND))
    assert "! Av -6.2 V/V … -5.2 V/V -7.120 V/V MISSED -5.631 V/V met" in single_spaced(report)
    assert "Rin ≥ 50 kΩ 68.75 kΩ met 68.75 kΩ met" in single_spaced(report)


def test_a_region_that_differs_fails_its_row_and_the_reason_is_given_once() -> None:
    report = check_report(samples.checked(samples.TRIODE))
    row = _line(report, "M1")
    assert row == "! M1 common source saturation triode saturation 41 mV -592 mV"
    flat = " ".join(report.split())
    assert flat.count(samples.REGION_REASON) == 1
    assert f"not compared {', '.join(samples.SMALL_SIGNAL)}: {samples.REGION_REASON}" in flat


def test_a_stage_without_answer_says_what_it_means_in_both_tongues() -> None:
    report = check_report(samples.checked(samples.TIMED_OUT))
    assert " TIMED OUT ──" in report.splitlines()[0]
    assert "! timed out ngspice was stopped after 30 s; give it more time" in single_spaced(report)
    assert '│ trouble with node "d"' in single_spaced(report)
    assert "not compared all 17: no simulated values" in single_spaced(report)
    assert "evidence runs/20250301T071502-probe-preamp" in single_spaced(report)


def test_every_fault_of_a_refused_stage_is_a_line() -> None:
    flat = " ".join(check_report(samples.checked(samples.REFUSED)).split())
    for fault in samples.REFUSED.meaning.splitlines():
        assert f"! refused {fault}" in flat


def test_ratings_are_exceeded_within_or_not_checked() -> None:
    assert "! VDS(M1) 20 V 48.03 V 47.20 V EXCEEDED" in single_spaced(
        check_report(samples.checked(samples.RATED))
    )
    clean = single_spaced(check_report(samples.checked(samples.CLEAN)))
    assert "VDS(M1) 20 V 5.030 V 4.960 V within" in clean
    assert "ratings not stated, so not checked: P(RD)" in clean
    assert "ratings none stated, so not checked" in single_spaced(
        check_report(samples.checked(samples.BEYOND))
    )


def test_absent_quantities_show_no_numbers_and_why() -> None:
    report = check_report(samples.checked(samples.ABSENT))
    assert _line(report, "Rin") == "Rin - - - ±10 % absent"
    assert "absent Rin: a driven gate draws no current" in single_spaced(report)


def test_causes_are_given_with_signs_and_units() -> None:
    flat = " ".join(check_report(samples.checked(samples.BEYOND)).split())
    assert "causes fH: channel-length modulation -250 kHz, closed form -50 kHz, residual -10 kHz" in flat
    assert "explained fH: bare-source" in flat


def test_findings_say_where_what_and_under_which_slug() -> None:
    flat = " ".join(check_report(samples.checked(samples.BEYOND)).split())
    assert "~ warning line 14: the claim fits RD = 5.6 kΩ: check the decimal point [claim-part-value]" in flat
    elsewhere = Finding("loop", Severity.REFUSED, "is included twice", "models/n.lib", 3, "NH1")
    flat = " ".join(check_report(samples.checked(replace(samples.CLEAN, findings=(elsewhere,)))).split())
    assert "! refused models/n.lib, line 3, NH1: is included twice [loop]" in flat


def test_the_summary_counts_every_stage_and_names_its_worst_gap() -> None:
    report = check_report(samples.checked(), Look(120))
    summary = single_spaced(report[report.index("── summary") :])
    assert "── summary" in report
    assert " 5 of 7 fail ──" in report
    assert "probe-preamp 17 0 0 0 0 gm(M1) +4.6 %" in summary
    assert "! line-driver 14 2 0 0 1 ID(M1) +22.1 %, 1 excused, 1 claim missed" in summary
    assert "! offset-stage 7 1 9 0 1 V(d) -400 mV" in summary
    assert "! slow-buffer 0 0 17 0 3 timed out" in summary
    assert "! typo 0 0 0 0 2 refused" in summary
    assert "! high-voltage 17 0 0 0 1 gm(M1) +4.6 %, 1 rating exceeded" in summary
    assert "! exit code 3: the simulator could not answer" in summary


@pytest.mark.parametrize("exit_code", [0, 1, 2, 3])
def test_the_exit_code_is_explained(exit_code: int) -> None:
    stages = [one for one in samples.ALL if one.exit_code <= exit_code]
    flat = " ".join(check_report(samples.checked(*stages)).split())
    assert f"exit code {exit_code}: {EXIT_MEANING[exit_code]}" in flat


@WIDTHS
def test_caution_and_conventions_stand_there_once(width: int) -> None:
    for report in (
        check_report(samples.checked(), Look(width)),
        predict_report(samples.predicted(), Look(width)),
    ):
        flat = " ".join(report.split())
        for sentence in (CAUTION, SQUARE_LAW_CONVENTION, PORT_CONVENTION):
            assert flat.count(sentence) == 1


def test_quiet_shows_failing_stages_and_the_whole_summary() -> None:
    report = check_report(samples.checked(), quiet=True)
    headings = re.findall(r"^── (\S+)", report, re.MULTILINE)
    assert headings == ["line-driver", "offset-stage", "slow-buffer", "typo", "high-voltage", "summary"]
    assert "probe-preamp" in report[report.index("── summary") :]
    assert CAUTION in " ".join(report.split())


def test_no_stages_at_all_give_a_summary() -> None:
    report = check_report(check_document([], simulator=None))
    assert "0 of 0 pass" in report
    assert "no simulator" in report


@WIDTHS
def test_the_working_shows_formula_numbers_result_and_source_of_every_step(width: int) -> None:
    report = predict_report(samples.predicted(), Look(width))
    working = squeezed(report[: report.index("quantity ")])
    for step in samples.PREDICTION.working:
        assert squeezed(step.symbol) in working
        assert squeezed(f"= {cells.value_cell(step.value, step.unit)}") in working
    short = samples.PREDICTION.working[0]
    assert squeezed(f"= {short.formula}") in working
    assert squeezed(f"= {short.numbers}") in working
    assert short.source in report


def test_a_short_step_is_one_line_at_160_and_with_its_source_beneath_at_80() -> None:
    roomy = single_spaced(predict_report(samples.predicted(), Look(160)))
    assert "V(g) = VDD·R2/(R1 + R2) = 12 V·100 kΩ/(220 kΩ + 100 kΩ) = 3.750 V divider" in roomy
    narrow = single_spaced(predict_report(samples.predicted(), Look(80)))
    at = narrow.index("V(g) = VDD·R2/(R1 + R2) = 12 V·100 kΩ/(220 kΩ + 100 kΩ) = 3.750 V")
    assert narrow[at + 1] == "divider"


def test_numbers_that_are_a_list_of_values_are_joined_with_with() -> None:
    for width in (80, 160):
        flat = " ".join(predict_report(samples.predicted(), Look(width)).split())
        assert "ro = 1/gds with ID = 994 µA, λ = 0.01/V" in flat


def test_hand_values_nodes_and_assumptions_follow_the_working() -> None:
    lines = single_spaced(predict_report(samples.predicted()))
    assert "Rin2 - nodal a driven gate draws no current" in lines
    assert "gm(M1) 2.180 mS closed form" in lines
    assert "M1 common source square saturation 4.12 V 912 mV 994 µA" in lines
    assert "d 7.03 V 5.63 V/V 179.80 deg" in lines
    assert "vdd 12 V 0 V/V -" in lines
    flat = " ".join(lines)
    assert "mid-band 13.46 kHz: √(fL·fH) of the exact hand curve, 0.12 dB below the maximum" in flat
    assert "exact curve fL 35.9 Hz, fH -" in flat
    assert "λ = 0 in ID and gm; ro stays in the gain [no-channel-length-modulation]" in flat


@WIDTHS
def test_band_edges_show_each_capacitor_then_sum_miller_and_exact_value(width: int) -> None:
    lines = single_spaced(predict_report(samples.predicted(), Look(width)))
    at = lines.index("sets fL sees R C τ f share")
    assert lines[at + 1 : at + 5] == [
        "CS 477.9 Ω 22.00 µF 10.51 ms 15.14 Hz 72.1 %",
        "CIN 271.0 kΩ 100.0 nF 27.10 ms 5.874 Hz 27.9 %",
        "sum 21.01 Hz +25.5 % off",
        "exact 16.74 Hz",
    ]
    at = lines.index("sets fH sees R C τ f share")
    assert lines[at + 1 : at + 7] == [
        "CL 9.625 kΩ 150.0 pF 1.444 µs 110.2 kHz 120.0 %",
        "CX ∞ 10.00 pF ∞ ∞ 0.0 %",
        "~ CB -2.407 kΩ 100.0 pF -240.7 ns -661.2 kHz -20.0 %",
        "sum 132.2 kHz +19.9 % off",
        "Miller 394.4 MHz ×3576",
        "exact 110.3 kHz",
    ]
    assert "~ fL the sum of time constants is 26 % above the exact value" in lines


def test_poles_and_zeros_are_a_line_each() -> None:
    lines = single_spaced(predict_report(samples.predicted()))
    assert "poles 5.870 Hz, 41.20 kHz (Q 2.13), 1.200 MHz RHP" in lines
    assert "zeros 0 Hz (2 times), 50.00 Hz (Q ∞), 8.490 GHz RHP" in lines


def test_of_many_capacitors_poles_and_zeros_the_first_twelve_are_written_out() -> None:
    shares = [0.5, 0.3, *[0.2 / 13] * 13, -0.01]
    many = tuple(
        TimeConstantRow(f"C{n}", TimeConstantKind.OPEN_CIRCUIT, 1e-12, 1e3 * share, 1e-9 * share, 1e6, share)
        for n, share in enumerate(shares)
    )
    poles = tuple(Root(10.0**n, None, HalfPlane.LEFT) for n in range(15))
    zeros = tuple(Root(0.0, None, HalfPlane.AXIS) for _ in range(13))
    crowded = replace(samples.PREDICTION, time_constants=many, poles=poles, zeros=zeros)
    report = predict_report(samples.predicted(replace(samples.PREDICTED, prediction=crowded)), Look(160))
    lines = single_spaced(report)
    at = lines.index("C11 15.38 Ω 1.000 pF 15.38 ps 1.000 MHz 1.5 %")
    assert lines[at + 1 : at + 3] == ["3 more 4.6 %", "~ C15 -10.00 Ω 1.000 pF -10.00 ps 1.000 MHz -1.0 %"]
    flat = " ".join(report.split())
    assert "100.0 GHz and 3 more" in flat
    assert "zeros 0 Hz (13 times)" in lines


def test_a_check_names_what_sets_the_band_edges_in_one_line() -> None:
    lines = single_spaced(check_report(samples.checked(samples.CLEAN)))
    assert "set by fL: CS, 84 %; fH: Cgd(M1), 62 % of the sum of time constants" in lines
    assert not [
        line for line in single_spaced(check_report(samples.checked(samples.ABSENT))) if "set by" in line
    ]


def test_a_region_s_finding_is_said_once_with_its_slug() -> None:
    finding = Finding("region-differs", Severity.WARNING, samples.REGION_REASON, subject="M1")
    flat = " ".join(check_report(samples.checked(replace(samples.TRIODE, findings=(finding,)))).split())
    assert flat.count(samples.REGION_REASON) == 1
    assert f"{samples.REGION_REASON} [region-differs]" in flat


def test_that_nothing_is_rated_is_said_once() -> None:
    finding = Finding("ratings-not-stated", Severity.NOTE, "no rating stated, not checked: M1, RD")
    flat = " ".join(check_report(samples.checked(replace(samples.BEYOND, findings=(finding,)))).split())
    assert flat.count("not checked") == 1


class _Stream(io.StringIO):
    def __init__(self, *, terminal: bool) -> None:
        super().__init__()
        self._terminal = terminal

    def isatty(self) -> bool:
        return self._terminal


@pytest.mark.parametrize(
    ("on_terminal", "environ", "colour"),
    [
        (True, {}, True),
        (False, {}, False),
        (True, {"NO_COLOR": "1"}, False),
        (True, {"NO_COLOR": ""}, True),
        (True, {"TERM": "dumb"}, False),
        (False, {"FORCE_COLOR": "1"}, False),
    ],
)
def test_colour_is_for_terminals_that_want_it(
    on_terminal: bool, environ: dict[str, str], colour: bool
) -> None:
    assert look_of(_Stream(terminal=on_terminal), environ).colour is colour


def test_the_width_is_what_the_environment_says_or_eighty() -> None:
    assert look_of(_Stream(terminal=False), {}).width == 80
    assert look_of(_Stream(terminal=False), {"COLUMNS": "132"}).width == 132
    assert look_of(_Stream(terminal=False), {"COLUMNS": "wide"}).width == 80


def _imports(path: Path) -> Iterator[str]:
    for node in ast.parse(path.read_text(encoding="utf-8")).body:
        if isinstance(node, ast.Import):
            yield from (name.name for name in node.names)
        elif isinstance(node, ast.ImportFrom):
            yield node.module or ""


def test_heavy_modules_are_imported_late() -> None:
    for path in Path(terminal.__file__).parent.glob("*.py"):
        assert not {name.split(".")[0] for name in _imports(path)} & {
            "rich",
            "quantiphy",
            "numpy",
            "jsonschema",
        }


def test_another_document_is_refused() -> None:
    with pytest.raises(InputError, match=r"found 'deckgen.predict/1', expected 'deckgen.check/1'"):
        check_report(samples.predicted())
    with pytest.raises(InputError, match=r"found 'deckgen.check/1', expected 'deckgen.predict/1'"):
        predict_report(samples.checked())
    with pytest.raises(InputError, match="found None"):
        check_report({})


def test_a_report_leaves_the_document_as_it_was() -> None:
    document, before = samples.checked(), samples.checked()
    check_report(document, Look(160, colour=True))
    assert document == before
    assert copy.deepcopy(document) == before
