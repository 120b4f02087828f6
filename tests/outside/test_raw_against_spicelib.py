"""The raw file reader against spicelib's on files that ngspice has just written.

Every check here is independent: spicelib (GPL-3.0, `RawRead` with the ngspice dialect) is a reader by
other people.
"""

from __future__ import annotations

import subprocess
from pathlib import Path

import numpy as np
import pytest
from spicelib import RawRead

from deckgen.simulator import Plot, Simulator, find, read_raw

CIRCUIT = """\
* a stage with a transistor, a time constant and three kinds of analysis
vdd vdd 0 10
vin in 0 dc 2 ac 1 sin(2 0.1 1k)
rs in g 1k
cg g 0 10p
rd vdd out 10k
m1 out g 0 0 nm w=10u l=1u
.model nm nmos (level=1 vto=1 kp=20u lambda=0.02 tox=20n cgso=1n)
"""
ANALYSES = {
    "op": ("op", "v(in) v(out) i(vdd)"),
    "dc": ("dc vin 1 3 0.1", "v(out) i(vdd)"),
    "ac": ("ac dec 7 10 100meg", "frequency v(out) i(vdd)"),
    "tran": ("tran 10u 2m", "v(in) v(out)"),
}
STREAMED = {
    "op": ".op",
    "dc": ".dc vin 1 3 0.1",
    "ac": ".ac dec 7 10 100meg",
    "tran": ".tran 10u 2m",
}


@pytest.fixture(scope="module")
def simulator() -> Simulator:
    return find()


def simulate(simulator: Simulator, folder: Path, deck: str, *options: str) -> None:
    (folder / "deck.cir").write_text(deck, encoding="utf-8")
    command = [simulator.path, "-n", "-b", *options, "deck.cir"]
    subprocess.run(command, cwd=folder, capture_output=True, timeout=20, check=True)


def agree(path: Path) -> tuple[Plot, ...]:
    """Hold every value of every plot of a file against what spicelib reads."""
    plots = read_raw(path.read_bytes())
    others = RawRead(path, dialect="ngspice", verbose=False).plots
    assert [plot.name for plot in plots] == [other.get_plot_name() for other in others]
    for plot, other in zip(plots, others, strict=True):
        names = other.get_trace_names()
        assert [variable.name for variable in plot.variables] == names
        other.read_trace_data(names)
        for index, variable in enumerate(plot.variables):
            theirs = np.asarray(other.get_trace(variable.name).data)
            ours = plot.data[:, index]
            if variable.kind == "frequency":  # its imaginary part is garbage, which spicelib keeps
                theirs, ours = theirs.real, ours.real
            assert np.iscomplexobj(theirs) == np.iscomplexobj(ours)
            np.testing.assert_array_equal(ours, theirs)
    return plots


@pytest.mark.parametrize("filetype", ["binary", "ascii"])
@pytest.mark.parametrize("analysis", ANALYSES)
def test_a_plot_that_write_wrote_is_read_as_spicelib_reads_it(
    analysis: str, filetype: str, simulator: Simulator, tmp_path: Path
) -> None:
    command, vectors = ANALYSES[analysis]
    control = f".control\nset filetype={filetype}\n{command}\nwrite out.raw {vectors}\nquit\n.endc"
    simulate(simulator, tmp_path, f"{CIRCUIT}{control}\n.end\n")
    (plot,) = agree(tmp_path / "out.raw")
    assert plot.is_complex == (analysis == "ac")
    assert (plot.points == 1) == (analysis == "op")


@pytest.mark.parametrize("analysis", STREAMED)
def test_a_plot_that_was_streamed_is_read_as_spicelib_reads_it(
    analysis: str, simulator: Simulator, tmp_path: Path
) -> None:
    simulate(simulator, tmp_path, f"{CIRCUIT}{STREAMED[analysis]}\n.end\n", "-r", "out.raw")
    (plot,) = agree(tmp_path / "out.raw")
    assert plot.is_complex == (analysis == "ac")


@pytest.mark.parametrize("filetype", ["binary", "ascii"])
def test_several_plots_in_one_file_are_read_as_spicelib_reads_them(
    filetype: str, simulator: Simulator, tmp_path: Path
) -> None:
    commands = "\n".join(f"{command}\nwrite out.raw {vectors}" for command, vectors in ANALYSES.values())
    control = f".control\nset filetype={filetype}\nset appendwrite\n{commands}\nquit\n.endc"
    simulate(simulator, tmp_path, f"{CIRCUIT}{control}\n.end\n")
    assert [plot.is_complex for plot in agree(tmp_path / "out.raw")] == [False, False, True, False]


def test_device_values_of_an_operating_point_are_read_as_spicelib_reads_them(
    simulator: Simulator, tmp_path: Path
) -> None:
    control = (
        ".control\nset filetype=binary\nop\nwrite out.raw @m1[gm] @m1[id] @m1[vgs] @m1[von]\nquit\n.endc"
    )
    simulate(simulator, tmp_path, f"{CIRCUIT}{control}\n.end\n")
    (plot,) = agree(tmp_path / "out.raw")
    assert plot.column("@m1[gm]")[0] > 0
