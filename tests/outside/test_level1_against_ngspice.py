"""The channel of the level-1 law against ngspice over a grid of bias points in all regions.

Every check here is independent: the reference is ngspice's own level 1 (version 39.3 when this was
written), run through ``deckgen.simulator``. Nothing is pinned.

One deck holds all devices, hung between nodes that ideal sources fix, so that a process answers a
whole grid. What ngspice's read-outs mean was measured first:

* the pure channel current is ``id + ibd``, for either polarity and either sign of VDS: ``ibd`` takes out
  the leakage of the bulk-drain junction, and ``ibs`` never enters ``id``;
* all read-outs include M;
* where VDS < 0, ``gm``, ``gds``, ``gmbs`` and ``von`` are those of the device with drain and source
  exchanged. deckgen's are derivatives by the terminal voltages: gm, gmb change sign and gds becomes the sum;
* with the bulk forward biased ``gmbs`` is γ·gm/(2·root) with the same root that ngspice continues as a
  tangent, which is not the slope of its own threshold. deckgen takes the one at small signal, where ngspice
  takes it too, and the other, the slope of the current, in its search for the bias.

Junctions are left out here; ``test_level1_devices_against_ngspice.py`` has whole devices.
"""

from __future__ import annotations

import itertools
import re
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

from deckgen.circuit.model import Circuit, Mosfet
from deckgen.circuit.reader import read_flat
from deckgen.errors import Outcome
from deckgen.hand.batch import SQUARE, Batch, prepare_devices
from deckgen.hand.effects import effects_under
from deckgen.hand.laws.parameters import SquareParameters
from deckgen.simulator import ExpectedPlot, Job, Plot, Simulator, run
from deckgen.units import CELSIUS_ZERO

Array = NDArray[np.float64]

CARDS = """\
.model nm nmos level=1 vto=0.7 kp=100u gamma=0.4 phi=0.65 lambda=0.03 ld=0.1u tox=20n
+ cgso=0.2n cgdo=0.3n cgbo=0.4n
.model pm pmos level=1 vto=-0.8 kp=40u gamma=0.5 phi=0.7 lambda=0.05 ld=0.05u tox=25n
+ cgso=0.2n cgdo=0.3n cgbo=0.4n
"""
SIGN = {"nm": 1.0, "pm": -1.0}
GAMMA_PHI = {"nm": (0.4, 0.65), "pm": (0.5, 0.7)}

# Counted as for an n-channel device; bulk against the lower of drain and source. 0.7 V and 0.8 V on
# gate or drain put points on the very edges VOV = 0 and VDS = VOV. Near VDS = 0 ngspice shares the gate
# capacitance out between source and drain as if VOV were at least 25 mV.
GATE = (-1.0, 0.3, 0.7, 0.71, 0.8, 1.1, 1.5, 2.4, 4.0)
DRAIN = (-3.0, -0.7, -0.01, 0.0, 0.02, 0.1, 0.4, 0.8, 1.7, 5.0)
BULK = (-3.0, -0.7, 0.0, 0.12, 0.3)
SOURCE_OF_M = {1: 0.0, 2: 1.3}

READOUTS = ("id", "ibd", "gm", "gds", "gmbs", "von", "cgs", "cgd", "cgb")
OPTIONS = ".options reltol=1e-6 vntol=1e-9 abstol=1e-15"


@dataclass(frozen=True)
class Point:
    """One device of the grid with its terminal voltages [V]: drain, gate, source, bulk."""

    name: str
    model: str
    m: int
    volts: tuple[float, float, float, float]

    @property
    def sign(self) -> float:
        return SIGN[self.model]

    @property
    def v_ds(self) -> float:
        """s·VDS."""
        return self.sign * (self.volts[0] - self.volts[2])

    @property
    def v_bx(self) -> float:
        """s·V of the bulk against whichever of drain and source plays the source."""
        return self.sign * self.volts[3] - min(self.sign * self.volts[0], self.sign * self.volts[2])


@dataclass(frozen=True)
class Grid:
    """The points, ngspice's read-outs and deckgen's values, one row a point."""

    points: tuple[Point, ...]
    simulated: Mapping[str, Array]
    law: Mapping[str, Array]
    capacitances: Array
    parameters: SquareParameters
    terminals: Array

    def where(self, chosen: Callable[[Point], bool]) -> NDArray[np.bool_]:
        return np.array([chosen(point) for point in self.points])


def points(gate: tuple[float, ...], drain: tuple[float, ...], bulk: tuple[float, ...]) -> Iterator[Point]:
    grid = itertools.product(SIGN, SOURCE_OF_M, gate, drain, bulk)
    for number, (model, m, v_g, v_d, v_b) in enumerate(grid):
        s, origin = SIGN[model], SOURCE_OF_M[m]
        relative = (v_d, v_g, 0.0, v_b + min(v_d, 0.0))
        d, g, source, b = (origin + s * v for v in relative)
        yield Point(f"m{number}", model, m, (d, g, source, b))


def netlist(grid: tuple[Point, ...], *, celsius: float, tnom: float) -> str:
    voltages = sorted({v for point in grid for v in point.volts})
    node = {v: f"n{number}" for number, v in enumerate(voltages)}
    lines = ["* a grid of level-1 devices", *CARDS.splitlines()]
    lines += [f"v{name} {name} 0 {v!r}" for v, name in node.items()]
    for p in grid:
        lines.append(f"{p.name} {' '.join(node[v] for v in p.volts)} {p.model} w=20u l=2u m={p.m}")
    return "\n".join([*lines, f"{OPTIONS} tnom={tnom:g}", f".temp {celsius:g}", ""])


def simulate(simulator: Simulator, folder: Path, text: str, grid: tuple[Point, ...]) -> dict[str, Array]:
    vectors = [f"@{point.name}[{what}]" for point in grid for what in READOUTS]
    saves = ["save " + " ".join(vectors[at : at + 20]) for at in range(0, len(vectors), 20)]
    block = [".control", "set filetype=binary", *saves, "op", "write out.raw", "quit", ".endc", ".end", ""]
    # Only the ends are asked for by name: each of thousands of names is looked up among all others.
    expected = ExpectedPlot("Operating Point", 1, (vectors[0], vectors[-1]))
    job = Job(text + "\n".join(block), (expected,))
    execution = run(job, simulator=simulator, folder=folder)
    assert (execution.outcome, execution.meaning) == (Outcome.MEASURED, "")
    return _columns(execution.plots[0], grid)


def _columns(plot: Plot, grid: tuple[Point, ...]) -> dict[str, Array]:
    names = [re.sub(r"[iv]\((@.*)\)", r"\1", variable.name.lower()) for variable in plot.variables]
    found = dict(zip(names, plot.data[0].real, strict=True))
    return {what: np.array([found[f"@{p.name}[{what}]"] for p in grid]) for what in READOUTS}


def measure(
    simulator: Simulator,
    folder: Path,
    grid: tuple[Point, ...],
    *,
    celsius: float = 27.0,
    tnom: float = 27.0,
) -> Grid:
    text = netlist(grid, celsius=celsius, tnom=tnom)
    circuit = read_flat(text)
    assert circuit.temperature == pytest.approx(celsius + CELSIUS_ZERO, abs=1e-9)
    parameters, terminals = prepared(circuit, grid)
    law = {kind: column[0] for kind, column in SQUARE.report(parameters, terminals[None]).items()}
    return Grid(
        points=grid,
        simulated=simulate(simulator, folder, text, grid),
        law=law,
        capacitances=SQUARE.capacitances(parameters, terminals[None])[0, :, :3],
        parameters=parameters,
        terminals=terminals,
    )


def prepared(circuit: Circuit, grid: tuple[Point, ...]) -> tuple[SquareParameters, Array]:
    """Parameters of all devices as the bias solver prepares them, and their terminal voltages."""
    devices: tuple[Mosfet, ...] = circuit.transistors
    assert [device.name for device in devices] == [point.name for point in grid]
    batch = Batch(effects=(effects_under(["no-bulk-junctions"]),), temperatures=(circuit.temperature,))
    return prepare_devices(circuit, batch), np.array([point.volts for point in grid])


@pytest.fixture(scope="module")
def grid(simulator: Simulator, tmp_path_factory: pytest.TempPathFactory) -> Grid:
    return measure(simulator, tmp_path_factory.mktemp("grid") / "run", tuple(points(GATE, DRAIN, BULK)))


def close(found: Array, expected: Array, *, rel: float, floor: float) -> None:
    """Hold ``found`` to ``expected`` within ``rel`` of it, or ``floor`` where it is next to nothing."""
    assert found.shape == expected.shape
    assert np.isfinite(found).all()
    np.testing.assert_allclose(found, expected, rtol=rel, atol=floor)


def test_the_grid_covers_every_region_of_both_polarities(grid: Grid) -> None:
    assert len(grid.points) >= 500
    v_ov, v_ds = grid.law["VOV"], np.array([point.v_ds for point in grid.points])
    regions = {
        "cut-off": (v_ov < 0.0) & (v_ds > 0.0),
        "triode": (v_ov > 0.0) & (v_ds > 0.0) & (v_ds < v_ov),
        "saturation": (v_ov > 0.0) & (v_ds > v_ov),
        "exchanged": (v_ds < 0.0) & (np.abs(grid.law["ID"]) > 1e-9),
        "forward bulk": np.array([point.v_bx > 0.0 for point in grid.points]),
    }
    for model, m in itertools.product(SIGN, SOURCE_OF_M):
        chosen = grid.where(lambda p, model=model, m=m: (p.model, p.m) == (model, m))
        for name, members in regions.items():
            assert np.count_nonzero(members & chosen) >= 20, (model, m, name)


def test_channel_current_is_id_plus_ibd(grid: Grid) -> None:
    """With the drain's junction current added to ``id`` all that is left is the channel."""
    channel = grid.simulated["id"] + grid.simulated["ibd"]
    close(grid.law["ID"], channel, rel=1e-9, floor=1e-18)


def test_terminal_currents_of_the_law_add_up_and_follow_the_polarity(grid: Grid) -> None:
    currents = SQUARE.evaluate(grid.parameters, grid.terminals[None]).currents[0]
    sign = np.array([point.sign for point in grid.points])
    channel = grid.simulated["id"] + grid.simulated["ibd"]
    close(currents[:, 0], sign * channel, rel=1e-9, floor=1e-18)
    close(currents.sum(axis=-1), np.zeros(len(sign)), rel=0.0, floor=1e-18)


def test_conductances_are_those_of_ngspice(grid: Grid) -> None:
    """Forward as they stand; exchanged, by the terminal voltages."""
    exchanged = grid.where(lambda p: p.v_ds < 0.0)
    gm, gds, gmb = (grid.simulated[name] for name in ("gm", "gds", "gmbs"))
    close(grid.law["gm"], np.where(exchanged, -gm, gm), rel=1e-9, floor=1e-18)
    close(grid.law["gmb"], np.where(exchanged, -gmb, gmb), rel=1e-9, floor=1e-18)
    close(grid.law["gds"], np.where(exchanged, gm + gds + gmb, gds), rel=1e-9, floor=1e-18)


def test_threshold_is_von_of_the_end_that_plays_the_source(grid: Grid) -> None:
    normal = grid.where(lambda p: p.v_ds >= 0.0)
    close(grid.law["VTH"][normal], grid.simulated["von"][normal], rel=1e-9, floor=1e-12)


def slope_by_bulk(grid: Grid) -> Array:
    """D (drain current)/d (bulk voltage) of the law, positive in normal conduction."""
    return SQUARE.evaluate(grid.parameters, grid.terminals[None]).jacobian[0, :, 0, 3]


def test_forward_bulk_readout_is_gamma_over_twice_the_continued_root(grid: Grid) -> None:
    """Ngspice's ``gmbs`` is larger than the slope of the current by √φ over its continued root."""
    forward = grid.where(lambda p: p.v_bx > 1e-9)
    phi = np.array([GAMMA_PHI[p.model][1] for p in grid.points])[forward]
    v_bx = np.array([p.v_bx for p in grid.points])[forward]
    root = np.sqrt(phi) - v_bx / (2.0 * np.sqrt(phi))
    ratio = np.sqrt(phi) / root
    assert ratio.max() > 1.2
    found = np.abs(slope_by_bulk(grid)[forward]) * ratio
    close(found, grid.simulated["gmbs"][forward], rel=1e-9, floor=1e-18)


def test_the_jacobian_with_forward_bulk_is_the_slope_of_ngspices_own_current(
    simulator: Simulator, tmp_path: Path
) -> None:
    """Central difference of ``id + ibd`` over the bulk voltage, which the read-out ``gmbs`` misses."""
    step, middle = 1e-4, 0.2
    bulks = (middle - step, middle, middle + step)
    grid = measure(simulator, tmp_path / "run", tuple(points((1.5, 2.4), (0.4, 5.0), bulks)))
    channel = (grid.simulated["id"] + grid.simulated["ibd"]).reshape(-1, 3)
    slope = (channel[:, 2] - channel[:, 0]) / (2.0 * step)
    np.testing.assert_allclose(slope_by_bulk(grid).reshape(-1, 3)[:, 1], slope, rtol=1e-6)
    readout = grid.simulated["gmbs"].reshape(-1, 3)[:, 1]
    assert (readout > 1.1 * slope).all()


def test_capacitances_with_overlaps_are_ngspices(grid: Grid) -> None:
    """Meyer's model with its hand-over below threshold; 5 ppm is the oxide's permittivity alone.

    ngspice takes 8.854214871e-12 F/m (from memory), 3 ppm above CODATA: one and the same factor for
    the intrinsic part of every capacitance, at 1e-9.
    """
    for column, name in enumerate(("cgs", "cgd", "cgb")):
        close(grid.capacitances[:, column], grid.simulated[name], rel=5e-6, floor=1e-24)
    overlap = np.array([[0.2e-9 * 20e-6, 0.3e-9 * 20e-6, 0.4e-9] for _ in grid.points])
    overlap[:, 2] *= [1.8e-6 if p.model == "nm" else 1.9e-6 for p in grid.points]
    overlap *= np.array([p.m for p in grid.points])[:, None]
    ours = grid.capacitances - overlap
    theirs = np.stack([grid.simulated[name] for name in ("cgs", "cgd", "cgb")], axis=-1) - overlap
    intrinsic = ours > 1e-3 * ours.max()
    ratio = theirs[intrinsic] / ours[intrinsic]
    assert np.count_nonzero(intrinsic) > 500
    np.testing.assert_allclose(ratio, np.median(ratio), rtol=1e-9)
    assert abs(float(np.median(ratio)) - 1.0) < 5e-6


@pytest.mark.parametrize("tnom", [27.0, 50.0])
@pytest.mark.parametrize("celsius", [-40.0, 27.0, 85.0, 125.0])
def test_temperature_moves_the_law_as_it_moves_ngspice(
    simulator: Simulator, tmp_path: Path, celsius: float, tnom: float
) -> None:
    """A thousand times closer than the full set's 0.1 %; what is left are two sets of physical constants.

    Largest differences seen: VTH 8e-9 V; above VOV = 0.15 V 6e-8 of ID, gm and gmb, and 1.2e-6 of gds at
    the edge of saturation, where it is a small difference.
    """
    gate, drain, bulk = (0.3, 1.1, 1.5, 4.0), (-0.7, 0.05, 0.4, 1.7, 5.0), (-3.0, 0.0)
    grid = measure(simulator, tmp_path / "run", tuple(points(gate, drain, bulk)), celsius=celsius, tnom=tnom)
    normal = grid.where(lambda p: p.v_ds >= 0.0)
    channel = grid.simulated["id"] + grid.simulated["ibd"]
    close(grid.law["VTH"][normal], grid.simulated["von"][normal], rel=0.0, floor=2e-8)
    strong = normal & (grid.law["VOV"] > 0.15)
    assert np.count_nonzero(strong) > 50
    close(grid.law["ID"][strong], channel[strong], rel=2e-7, floor=0.0)
    for ours, theirs, rel in (("gm", "gm", 2e-7), ("gmb", "gmbs", 2e-7), ("gds", "gds", 5e-6)):
        close(grid.law[ours][strong], grid.simulated[theirs][strong], rel=rel, floor=0.0)
    close(grid.law["ID"], channel, rel=1e-6, floor=1e-18)
