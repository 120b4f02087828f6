"""The raw file reader on files built by hand, byte by byte, after the layout ngspice 39 writes."""

from __future__ import annotations

import math
import struct
import time

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from deckgen.simulator.raw import Plot, RawFileError, Variable, read_raw


def header(
    name: str,
    flags: str,
    variables: list[str],
    points: int | str,
    *,
    end: str,
    title: str = "* a stage",
) -> bytes:
    """Build a plot's header; ``variables`` are ``name<tab>kind`` with or without attributes."""
    lines = [
        f"Title: {title}",
        "Date: Tue Dec  1 11:38:46  2026",
        f"Plotname: {name}",
        f"Flags: {flags}",
        f"No. Variables: {len(variables)}",
        f"No. Points: {points}",
        "Variables:",
        *(f"\t{index}\t{variable}" for index, variable in enumerate(variables)),
        end,
        "",
    ]
    return "\n".join(lines).encode()


def doubles(*values: float) -> bytes:
    return struct.pack(f"<{len(values)}d", *values)


OP_BINARY = header(
    "Operating Point", "real", ["v(in)\tvoltage", "v(out)\tvoltage", "i(v1)\tcurrent"], 1, end="Binary:"
) + doubles(1.0, 0.5, -5e-4)
OP_ASCII = (
    header("Operating Point", "real", ["v(in)\tvoltage", "v(out)\tvoltage"], 1, end="Values:")
    + b" 0\t1.000000000000000e+00\n\t5.000000000000000e-01\n\n"
)
AC_BINARY = header(
    "AC Analysis", "complex", ["frequency\tfrequency grid=3", "v(out)\tvoltage"], 2, end="Binary:"
) + doubles(10.0, 0.0, 0.5, -0.25, 100.0, 0.0, 0.25, -0.5)
AC_ASCII = (
    header("AC Analysis", "complex", ["frequency\tfrequency grid=3", "v(out)\tvoltage"], 2, end="Values:")
    + b" 0\t1.0e+01,0.0e+00\n\t5.0e-01,-2.5e-01\n\n 1\t1.0e+02,0.0e+00\n\t2.5e-01,-5.0e-01\n\n"
)
STREAMED_VARIABLES = [
    "frequency\tfrequency\tgrid=3",
    "v(out)\tvoltage",
    "@m1[gm]\tadmittance",
    "i(@m1[id])\tcurrent",
]
GARBAGE = -4.506340545289493e210
STREAMED = header("AC Analysis", "complex", STREAMED_VARIABLES, "2       ", end="Binary:") + doubles(
    *(10.0, GARBAGE, 0.5, -0.25, 1e-4, 5e-5, 0.0, 0.0),
    *(100.0, GARBAGE, 0.25, -0.5, 1e-4, 5e-5, 0.0, 0.0),
)
STREAMED_ASCII = (
    header("AC Analysis", "complex", STREAMED_VARIABLES, "1       ", end="Values:")
    + b"0\t\t1.0e+01,-7.2e-101\n\t5.0e-01,-2.5e-01\n\t1.0e-04\n\t5.0e-05\n"
)
SHORT = header(
    "AC Analysis",
    "complex",
    ["frequency\tfrequency grid=3", "@m1[gm]\tnotype dims=1"],
    2,
    end="Binary:",
) + doubles(10.0, 0.0, 1e-4, 0.0, 100.0, 0.0, 0.0, 0.0)
WHOLE_FILES = {
    "op binary": OP_BINARY,
    "op ascii": OP_ASCII,
    "ac binary": AC_BINARY,
    "ac ascii": AC_ASCII,
    "streamed binary": STREAMED,
    "streamed ascii": STREAMED_ASCII,
    "short column": SHORT,
}


def only(data: bytes) -> Plot:
    (plot,) = read_raw(data)
    return plot


def test_an_operating_point_is_one_row_of_reals() -> None:
    plot = only(OP_BINARY)
    assert (plot.title, plot.name, plot.flags) == ("* a stage", "Operating Point", ("real",))
    assert plot.variables == (
        Variable("v(in)", "voltage"),
        Variable("v(out)", "voltage"),
        Variable("i(v1)", "current"),
    )
    assert plot.points == 1
    assert not plot.is_complex
    assert plot.data.tolist() == [[1.0, 0.5, -5e-4]]


@pytest.mark.parametrize("data", [AC_BINARY, AC_ASCII], ids=["binary", "ascii"])
def test_an_ac_analysis_has_complex_rows(data: bytes) -> None:
    plot = only(data)
    assert plot.is_complex
    assert plot.data.tolist() == [[10, 0.5 - 0.25j], [100, 0.25 - 0.5j]]


def test_ascii_and_binary_of_one_plot_are_the_same() -> None:
    assert only(OP_ASCII).data.tolist() == [[1.0, 0.5]]
    assert np.array_equal(only(AC_ASCII).data, only(AC_BINARY).data)


def test_plots_follow_each_other_in_one_file_binary_and_ascii_mixed() -> None:
    plots = read_raw(OP_BINARY + AC_BINARY + OP_ASCII + AC_ASCII + STREAMED)
    assert [plot.name for plot in plots] == [
        "Operating Point",
        "AC Analysis",
        "Operating Point",
        "AC Analysis",
        "AC Analysis",
    ]


def test_data_is_read_only_and_does_not_hold_the_files_bytes() -> None:
    for data in WHOLE_FILES.values():
        plot = only(data)
        assert not plot.data.flags.writeable
        assert plot.data.flags.aligned
        with pytest.raises(ValueError, match="read-only"):
            plot.data[0, 0] = 1.0
        with pytest.raises(ValueError, match="read-only"):
            plot.column(plot.variables[0].name)[0] = 1.0


@pytest.mark.parametrize("data", [STREAMED, STREAMED_ASCII], ids=["binary", "ascii"])
def test_a_streamed_device_parameter_is_one_real_among_complex_numbers(data: bytes) -> None:
    plot = only(data)
    assert plot.column("v(out)")[0] == 0.5 - 0.25j
    assert plot.column("@m1[gm]")[0] == 1e-4
    assert plot.column("i(@m1[id])")[0] == 5e-5


@pytest.mark.parametrize("data", [STREAMED, STREAMED_ASCII], ids=["binary", "ascii"])
def test_the_imaginary_part_of_frequency_is_dropped(data: bytes) -> None:
    assert not only(data).column("frequency").imag.any()
    assert only(data).column("frequency").real[0] == 10.0


def test_a_device_parameter_that_is_not_streamed_is_a_pair() -> None:
    variables = ["frequency\tfrequency grid=3", "@m1[gm]\tadmittance", "v(out)\tvoltage"]
    plot = only(
        header("AC Analysis", "complex", variables, 1, end="Binary:") + doubles(10, 0, 1e-4, 0, 0.5, -0.25)
    )
    assert plot.data.tolist() == [[10, 1e-4, 0.5 - 0.25j]]


def test_a_streamed_row_that_does_not_end_in_zeros_is_refused() -> None:
    with pytest.raises(RawFileError, match="does not end in zeros"):
        read_raw(STREAMED[:-8] + doubles(1.0))


def test_a_short_column_is_nan_where_it_has_no_value() -> None:
    column = only(SHORT).column("@m1[gm]")
    assert column[0] == 1e-4
    assert np.isnan(column[1])


def test_a_short_column_in_an_unpadded_plot_is_refused() -> None:
    with pytest.raises(RawFileError, match="unpadded"):
        read_raw(SHORT.replace(b"Flags: complex", b"Flags: complex unpadded"))


def test_an_unpadded_plot_of_full_columns_is_read() -> None:
    plot = only(AC_BINARY.replace(b"Flags: complex", b"Flags: complex unpadded"))
    assert plot.flags == ("complex", "unpadded")
    assert plot.data[1, 1] == 0.25 - 0.5j


def test_a_dimensions_line_and_unknown_header_lines_change_nothing() -> None:
    more = OP_BINARY.replace(b"Variables:\n", b"Dimensions: 1\nCommand: version 43\nVariables:\n", 1)
    assert more != OP_BINARY
    assert only(more).data.tolist() == only(OP_BINARY).data.tolist()


def test_a_sweep_in_two_dimensions_keeps_all_its_points() -> None:
    variables = ["v(v-sweep)\tvoltage dims=2,3", "v(out)\tvoltage dims=2,3"]
    plot = only(
        header("DC transfer characteristic", "real", variables, 6, end="Binary:") + doubles(*range(12))
    )
    assert np.isfinite(plot.data).all()


def test_a_plot_without_variables_is_empty() -> None:
    plot = only(header("Pole-Zero Analysis", "complex", [], 1, end="Binary:"))
    assert plot.data.shape == (1, 0)


def test_a_plot_of_no_points_is_empty_and_data_after_it_are_not_its_own() -> None:
    empty = header("AC Analysis", "complex", ["frequency\tfrequency"], "0       ", end="Binary:")
    assert only(empty).points == 0
    with pytest.raises(RawFileError, match="16 other bytes follow"):
        read_raw(empty + doubles(10.0, 0.0))


def test_a_title_may_hold_anything_but_a_line_break() -> None:
    for title in ("", "Binary:", "Title: x", "µ Ω \x1b[31m", "Variables:"):
        plot = only(
            header("Operating Point", "real", ["v(a)\tvoltage"], 1, end="Binary:", title=title) + doubles(1)
        )
        assert plot.title == title


def test_a_column_is_found_in_any_case() -> None:
    assert only(OP_BINARY).column("V(Out)").tolist() == [0.5]


def test_a_device_parameter_is_found_with_and_without_the_sign_of_its_kind() -> None:
    for name in ("@m1[id]", "@M1[ID]", "i(@m1[id])", "I(@M1[id])"):
        assert only(STREAMED).column(name)[0] == 5e-5


def test_a_missing_column_names_what_there_is() -> None:
    with pytest.raises(
        KeyError, match=r"no column v\(nope\) in plot 'Operating Point'; it has v\(in\), v\(out\)"
    ):
        only(OP_BINARY).column("v(nope)")
    with pytest.raises(KeyError, match="it has nothing"):
        only(header("Pole-Zero Analysis", "complex", [], 1, end="Binary:")).column("v(a)")


def test_the_first_of_two_columns_of_one_name_is_taken() -> None:
    variables = ["v(in)\tvoltage", "v(out)\tvoltage", "v(in)\tvoltage"]
    data = header("Operating Point", "real", variables, 1, end="Binary:") + doubles(1.0, 0.5, 1.0)
    assert only(data).column("v(in)").tolist() == [1.0]


@pytest.mark.parametrize("name", WHOLE_FILES)
def test_a_file_cut_at_any_byte_is_an_error(name: str) -> None:
    data = WHOLE_FILES[name]
    assert read_raw(data)
    for length in range(len(data)):
        with pytest.raises(RawFileError):
            read_raw(data[:length])


@pytest.mark.parametrize("name", WHOLE_FILES)
def test_bytes_that_belong_to_no_plot_are_an_error(name: str) -> None:
    for extra in (b"\n", b"\0", b" ", bytes(8), b"Titl", b"1.0\n"):
        with pytest.raises(RawFileError, match="plot 2"):
            read_raw(WHOLE_FILES[name] + extra)


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        (b"Title: ", b"title: ", "a plot begins with 'Title:'"),
        (b"Flags: real", b"Flags: real double", "'Flags: real double'"),
        (b"Flags: real", b"Flags: unpadded", "not real or complex"),
        (b"Flags: real", b"Flags: real complex", "not real or complex"),
        (b"Flags: real\n", b"", "no line 'Flags'"),
        (b"Plotname: Operating Point\n", b"", "no line 'Plotname'"),
        (b"No. Points: 1\n", b"", "no line 'No. Points'"),
        (b"No. Points: 1", b"No. Points: -1", "not a count"),
        (b"No. Points: 1", b"No. Points: 1e3", "not a count"),
        (b"No. Points: 1", b"No. Points: \xd9\xa1", "not a count"),
        (b"No. Points: 1", b"No. Points: 2", "2 points take 48 bytes, only 24 are there"),
        (b"No. Points: 1", b"No. Points: 999999999999999999", "only 24 are there"),
        (b"No. Variables: 3", b"No. Variables: 2", "'Binary:' or 'Values:' should follow"),
        (b"No. Variables: 3", b"No. Variables: 4", "expected variable 3"),
        (b"\t1\tv(out)", b"\t2\tv(out)", "expected variable 1"),
        (b"\t1\tv(out)\tvoltage", b"\t1\tv(out)", "expected variable 1"),
        (b"\tvoltage\n\t1", b"\tvoltage dims=x\n\t1", "'dims=x' is not a size"),
        (b"Date: Tue Dec  1 11:38:46", b"Date Tue Dec  1", "not of the form 'Key: value'"),
        (b"\nVariables:\n", b"\nVariables\n", "'Variables' is not of the form"),
        (b"Binary:", b"Binary", "'Binary:' or 'Values:' should follow"),
        (b"Binary:\n", b"Binary:\r\n", "'Binary:' or 'Values:' should follow"),
    ],
)
def test_a_header_that_is_not_understood_is_an_error(old: bytes, new: bytes, message: str) -> None:
    wrong = OP_BINARY.replace(old, new, 1)
    assert wrong != OP_BINARY
    with pytest.raises(RawFileError, match=message):
        read_raw(wrong)


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        (b" 1\t", b" 2\t", "expected point 1"),
        (b" 1\t", b"", "expected point 1"),
        (b"5.0e-01,-2.5e-01", b"5.0e-01", r"v\(out\) should be a pair of numbers"),
        (b"5.0e-01,-2.5e-01", b"5.0e-01,x", r"v\(out\) should be a pair of numbers"),
        (b"-2.5e-01\n\n", b"-2.5e-01\n", "no empty line after point 0"),
    ],
)
def test_ascii_values_that_are_not_understood_are_an_error(old: bytes, new: bytes, message: str) -> None:
    wrong = AC_ASCII.replace(old, new, 1)
    assert wrong != AC_ASCII
    with pytest.raises(RawFileError, match=message):
        read_raw(wrong)


def test_a_pair_in_a_real_ascii_plot_is_an_error() -> None:
    with pytest.raises(RawFileError, match="should be a number"):
        read_raw(OP_ASCII.replace(b"5.000000000000000e-01", b"5.0e-01,0.0"))


def test_an_impossible_number_of_ascii_points_is_an_error_at_once() -> None:
    with pytest.raises(RawFileError, match="can't be in the bytes"):
        read_raw(OP_ASCII.replace(b"No. Points: 1", b"No. Points: 99999999999999"))


def test_an_error_says_which_plot_and_where() -> None:
    with pytest.raises(
        RawFileError, match=rf"plot 2 \(AC Analysis\): .*\(byte {len(OP_BINARY + AC_BINARY) - 64}\)"
    ):
        read_raw(OP_BINARY + AC_BINARY[:-1])


def test_an_empty_file_is_an_error() -> None:
    with pytest.raises(RawFileError, match="empty"):
        read_raw(b"")


@given(st.binary(max_size=400))
def test_no_bytes_raise_anything_else(data: bytes) -> None:
    for start in (b"", OP_BINARY[: OP_BINARY.index(b"Flags")], AC_ASCII[:-20]):
        try:
            plots = read_raw(start + data)
        except RawFileError:
            continue
        assert plots


numbers = st.floats(allow_nan=False, width=64)
sizes = st.tuples(st.integers(1, 6), st.integers(1, 5))


@st.composite
def tables(draw: st.DrawFn) -> tuple[bool, list[list[complex]]]:
    points, columns = draw(sizes)
    is_complex = draw(st.booleans())
    value = st.builds(complex, numbers, numbers) if is_complex else st.builds(complex, numbers)
    row = st.lists(value, min_size=columns, max_size=columns)
    return is_complex, draw(st.lists(row, min_size=points, max_size=points))


def written(is_complex: bool, rows: list[list[complex]], *, binary: bool) -> bytes:
    """Write a table as ``write`` does (17 digits in ASCII, so that nothing is lost)."""
    variables = [f"v(n{index})\tvoltage" for index in range(len(rows[0]))]
    flags = "complex" if is_complex else "real"
    head = header("AC Analysis", flags, variables, len(rows), end="Binary:" if binary else "Values:")
    if binary:
        flat = [part for row in rows for v in row for part in ((v.real, v.imag) if is_complex else (v.real,))]
        return head + doubles(*flat)
    text = ""
    for point, row in enumerate(rows):
        shown = [f"{v.real:.17e},{v.imag:.17e}" if is_complex else f"{v.real:.17e}" for v in row]
        text += f" {point}\t" + "\n\t".join(shown) + "\n\n"
    return head + text.encode()


@given(st.lists(tables(), min_size=1, max_size=3), st.lists(st.booleans(), min_size=3, max_size=3))
def test_what_was_written_is_read(plots: list[tuple[bool, list[list[complex]]]], binary: list[bool]) -> None:
    pairs = list(zip(plots, binary, strict=False))
    data = b"".join(written(is_complex, rows, binary=way) for (is_complex, rows), way in pairs)
    for plot, ((is_complex, rows), _) in zip(read_raw(data), pairs, strict=True):
        assert plot.is_complex == is_complex
        assert plot.data.tolist() == [[v if is_complex else v.real for v in row] for row in rows]


def test_nan_and_infinity_are_read_as_such() -> None:
    plot = only(OP_BINARY[:-24] + doubles(math.nan, math.inf, -math.inf))
    assert math.isnan(plot.data[0, 0])
    assert plot.data[0, 1:].tolist() == [math.inf, -math.inf]
    assert math.isnan(only(OP_ASCII.replace(b"5.000000000000000e-01", b"-nan")).data[0, 1])


def test_a_hundred_megabytes_are_read_in_well_under_a_second() -> None:
    columns, points = 8, 800_000
    variables = ["frequency\tfrequency grid=3", *(f"v({index})\tvoltage" for index in range(1, columns))]
    data = header("AC Analysis", "complex", variables, points, end="Binary:") + bytes(16 * columns * points)
    assert len(data) > 100e6
    started = time.process_time()
    plot = only(data)
    assert time.process_time() - started < 1.0
    assert plot.data.shape == (points, columns)
