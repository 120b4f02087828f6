"""Whole level-1 devices against ngspice: thousands of random cards, geometries and bias points.

Every check here is independent: the reference is ngspice's own level 1 (version 39.3 when this was written),
run through ``deckgen.simulator``. Nothing is pinned.

Cards state any of their parameters or leave them to the doping, to others or to defaults; devices have
resistances, areas and perimeters, or none; voltages lie in all regions, drain below source and bulk in
forward conduction included. One deck holds hundreds of devices, each between four ideal sources.

ngspice 39 computes with k/q smaller by 3.4·10⁻⁷ than CODATA's of 2018 and ε0 larger by 3·10⁻⁶ (read from its
answers). An exponential multiplies the first by up to 60. So everything is compared twice: as it is,
within 10⁻⁴, and with ngspice's constants put in the place of deckgen's, within 10⁻⁸.
"""

from __future__ import annotations

import random
import re
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

from deckgen import constants
from deckgen.circuit.reader import read_flat
from deckgen.errors import Outcome
from deckgen.hand.batch import SQUARE, Batch, prepare_devices, prepared_once
from deckgen.hand.effects import ALL_EFFECTS
from deckgen.hand.laws import level1, temperature
from deckgen.hand.laws.parameters import SquareParameters
from deckgen.simulator import ExpectedPlot, Job, Plot, Simulator, run

Array = NDArray[np.float64]

CONDITIONS = ((27.0, 27.0), (-40.0, 27.0), (125.0, 27.0), (60.0, 0.0), (27.0, 50.0), (100.0, 60.0))
"""Temperature and TNOM of each deck [°C]."""

PER_DECK = 100
"""More of them take longer: ngspice looks each saved name up among all others."""

READOUTS = ("id", "ibd", "ibs", "gm", "gds", "gmbs", "von", "vgs", "vds", "vbs", "vbd",
            "cgs", "cgd", "cgb", "cbd", "cbs")  # fmt: skip
CAPACITANCES = ("cgs", "cgd", "cgb", "cbd", "cbs")
PINS = "dgsb"
OPTIONS = ".options reltol=1e-8 vntol=1e-11 abstol=1e-16 itl1=1000"
FREQUENCY = 3e8

AS_IS, ALIKE = 1e-4, 1e-8
"""Relative differences allowed with deckgen's constants, and with ngspice's."""


@dataclass(frozen=True)
class Device:
    """A random device: polarity, card, geometry, and true voltages [V] of drain, gate, source, bulk."""

    name: str
    sign: float
    card: Mapping[str, float]
    size: Mapping[str, float]
    volts: tuple[float, float, float, float]
    driven: str


@dataclass(frozen=True)
class Grid:
    """One deck's devices, the circuit's temperatures, and what ngspice answers."""

    devices: tuple[Device, ...]
    text: str
    read: Mapping[str, Array]
    currents: Array
    admittances: NDArray[np.complex128]

    @property
    def sign(self) -> Array:
        return np.array([device.sign for device in self.devices])

    @property
    def exchanged(self) -> NDArray[np.bool_]:
        """Devices whose channel runs from source to drain."""
        return self.read["vds"] < 0.0


@dataclass(frozen=True)
class Hand:
    """What the law says of the same devices."""

    parameters: SquareParameters
    currents: Array
    report: Mapping[str, Array]
    capacitances: Array
    admittances: NDArray[np.complex128]
    stiffest: Array
    """Largest conductance of each device, its resistances included [S]."""


def _card(draw: random.Random, sign: float) -> dict[str, float]:
    """A card that states each parameter or leaves it."""

    def decades(low: float, high: float) -> Callable[[], float]:
        return lambda: 10.0 ** draw.uniform(low, high)

    def between(low: float, high: float) -> Callable[[], float]:
        return lambda: draw.uniform(low, high)

    resistances = (draw.random() < 0.4, draw.random() < 0.4, draw.random() < 0.3)
    choices: dict[str, tuple[float, Callable[[], float]]] = {
        "vto": (0.6, lambda: sign * draw.uniform(-1.0, 1.5)), "kp": (0.6, decades(-5, -3.5)),
        "gamma": (0.5, between(0, 1)), "phi": (0.5, between(0.5, 0.9)), "lambda": (0.6, between(0, 0.15)),
        "ld": (0.5, between(0, 3e-7)), "tox": (0.7, decades(-8.3, -7)), "uo": (0.4, between(100, 900)),
        "nsub": (0.4, decades(14.5, 18)), "nss": (0.3, decades(9, 12)),
        "tpg": (0.4, lambda: float(draw.randint(-1, 1))),
        "cgso": (0.5, decades(-11, -9)), "cgdo": (0.5, decades(-11, -9)), "cgbo": (0.5, decades(-11, -9)),
        "rd": (resistances[0], decades(-1, 4)), "rs": (resistances[1], decades(-1, 4)),
        "rsh": (resistances[2], between(1, 100)),
        "is": (0.4, decades(-18, -11)), "js": (0.3, decades(-8, -3)),
        "cbd": (0.3, decades(-14, -11)), "cbs": (0.3, decades(-14, -11)),
        "cj": (0.5, decades(-5, -3)), "cjsw": (0.5, decades(-11, -9)),
        "pb": (0.5, between(0.6, 1)), "mj": (0.5, between(0.2, 0.6)), "mjsw": (0.5, between(0.2, 0.6)),
        "fc": (0.5, between(0.2, 0.8)), "tnom": (0.2, between(0, 60)),
    }  # fmt: skip
    return {name: make() for name, (chance, make) in choices.items() if draw.random() < chance}


def _size(draw: random.Random) -> dict[str, float]:
    size = {"w": 10.0 ** draw.uniform(-5.7, -3.7), "l": 10.0 ** draw.uniform(-6, -4.7)}
    if draw.random() < 0.3:
        size["m"] = float(draw.randint(1, 6))
    for name, low, high in (("ad", -12, -9), ("as", -12, -9), ("pd", -6, -4), ("ps", -6, -4)):
        if draw.random() < 0.5:
            size[name] = 10.0 ** draw.uniform(low, high)
    for name in ("nrd", "nrs"):
        if draw.random() < 0.4:
            size[name] = draw.uniform(0.1, 5.0)
    return size


def random_device(draw: random.Random, number: int) -> Device:
    sign = draw.choice((1.0, -1.0))
    card, size = _card(draw, sign), _size(draw)
    d, g, s = draw.uniform(-3, 6), draw.uniform(-2, 6), draw.uniform(-0.5, 0.5)
    guarded = "rsh" in card or {"rd", "rs"} <= card.keys()
    forward = draw.uniform(0.0, 1.5 if guarded else 0.6)
    b = min(d, s) + (draw.uniform(-5.0, 0.0) if draw.random() < 0.5 else forward)
    volts = tuple(sign * v for v in (d, g, s, b))
    return Device(f"m{number}", sign, card, size, volts, draw.choice(PINS))  # type: ignore[arg-type]


def netlist(devices: Sequence[Device], *, celsius: float, tnom: float) -> str:
    lines = ["* random level-1 devices"]
    for device in devices:
        n = device.name.removeprefix("m")
        card = " ".join(f"{name}={value!r}" for name, value in device.card.items())
        size = " ".join(f"{name}={value!r}" for name, value in device.size.items())
        kind = "nmos" if device.sign > 0.0 else "pmos"
        lines.append(f".model x{n} {kind} level=1 {card}")
        lines.append(f"{device.name} d{n} g{n} s{n} b{n} x{n} {size}")
        for pin, value in zip(PINS, device.volts, strict=True):
            lines.append(f"v{pin}{n} {pin}{n} 0 dc {value!r}" + (" ac 1" if pin == device.driven else ""))
    return "\n".join([*lines, f"{OPTIONS} tnom={tnom:g}", f".temp {celsius:g}", ""])


def simulate(simulator: Simulator, folder: Path, devices: tuple[Device, ...], text: str) -> Grid:
    numbers = [device.name.removeprefix("m") for device in devices]
    readouts = [f"@m{n}[{what}]" for n in numbers for what in READOUTS]
    sources = [f"i(v{pin}{n})" for n in numbers for pin in PINS]
    everything = [*readouts, *sources]
    saves = ["save " + " ".join(everything[at : at + 20]) for at in range(0, len(everything), 20)]
    block = [".control", "set filetype=binary", "set appendwrite", *saves, "op", "write out.raw"]
    block += [f"ac lin 1 {FREQUENCY!r} {FREQUENCY!r}", "write out.raw", "quit", ".endc", ".end", ""]
    # Only the ends are asked for by name: each of thousands of names is looked up among all others.
    expected = (
        ExpectedPlot("Operating Point", 1, (readouts[0], sources[-1])),
        ExpectedPlot("AC Analysis", 1, (sources[-1],)),
    )
    job = Job(text + "\n".join(block), expected)
    execution = run(job, simulator=simulator, folder=folder)
    assert (execution.outcome, execution.meaning) == (Outcome.MEASURED, "")
    point, signal = (_columns(plot) for plot in execution.plots)
    return Grid(
        devices,
        text,
        {what: np.array([point[f"@m{n}[{what}]"].real for n in numbers]) for what in READOUTS},
        np.array([[-point[f"v{pin}{n}"].real for pin in PINS] for n in numbers]),
        np.array([[-signal[f"v{pin}{n}"] for pin in PINS] for n in numbers]),
    )


def _columns(plot: Plot) -> dict[str, complex]:
    names = [re.sub(r"[iv]\((.*)\)", r"\1", variable.name.lower()) for variable in plot.variables]
    return {name: complex(value) for name, value in zip(names, plot.data[0], strict=True)}


@contextmanager
def ngspice_constants() -> Iterator[None]:
    """Ngspice's physical constants in the place of those of the law."""
    with pytest.MonkeyPatch.context() as patch:
        for module in (constants, temperature):
            patch.setattr(module, "BOLTZMANN", 1.38064852e-23)
        for module in (constants, temperature, level1):
            patch.setattr(module, "ELEMENTARY_CHARGE", 1.6021766208e-19)
        patch.setattr(level1, "OXIDE_PERMITTIVITY", 3.9 * 8.854214871e-12)
        patch.setattr(level1, "SILICON_PERMITTIVITY", 11.7 * 8.854214871e-12)
        prepared_once.cache_clear()
        yield
    prepared_once.cache_clear()


def by_hand(grid: Grid) -> Hand:
    """The same devices by the law, prepared as the bias solver prepares them."""
    circuit = read_flat(grid.text)
    assert [device.name for device in circuit.transistors] == [device.name for device in grid.devices]
    p = prepare_devices(circuit, Batch(effects=(ALL_EFFECTS,), temperatures=(circuit.temperature,)))
    volts = np.array([device.volts for device in grid.devices])[None]
    return Hand(
        p,
        SQUARE.evaluate(p, volts).currents[0],
        {name: column[0] for name, column in SQUARE.report(p, volts).items()},
        SQUARE.capacitances(p, volts)[0],
        _admittances(p, volts, [PINS.index(device.driven) for device in grid.devices]),
        np.abs(SQUARE.linearize(p, volts)[0]).max(axis=(1, 2)),
    )


def _admittances(p: SquareParameters, volts: Array, driven: Sequence[int]) -> NDArray[np.complex128]:
    """Currents into all pins for 1 V at one, the inner nodes eliminated device by device."""
    conductances, capacitances = SQUARE.linearize(p, volts)[0], SQUARE.capacitances(p, volts)[0]
    apart = np.broadcast_to(SQUARE.separate(p), (1, len(driven), 2))[0]
    found = []
    for g, values, own, pin in zip(conductances, capacitances, apart, driven, strict=True):
        y = np.array(g, complex)
        for (_, first, second), value in zip(SQUARE.capacitors, values, strict=True):
            ends = np.zeros(6)
            ends[first], ends[second] = 1.0, -1.0
            y += 2j * np.pi * FREQUENCY * value * np.outer(ends, ends)
        places = [0, 1, 2, 3, 4 if own[0] else 0, 4 + int(own[0]) if own[1] else 2]
        pick = np.eye(4 + int(own.sum()))[places]
        y = pick.T @ y @ pick
        outer = y[:4, :4] - y[:4, 4:] @ np.linalg.solve(y[4:, 4:], y[4:, :4])
        found.append(outer[:, pin])
    return np.array(found)


@pytest.fixture(scope="module")
def grids(
    simulator: Simulator, tmp_path_factory: pytest.TempPathFactory, count: Callable[[int, int], int]
) -> tuple[Grid, ...]:
    found = []
    for repeat in range(count(4, 60)):
        for place, (celsius, tnom) in enumerate(CONDITIONS):
            draw = random.Random(f"{repeat} {place}")
            devices = tuple(random_device(draw, number) for number in range(PER_DECK))
            text = netlist(devices, celsius=celsius, tnom=tnom)
            folder = tmp_path_factory.mktemp("devices") / "run"
            found.append(simulate(simulator, folder, devices, text))
    return tuple(found)


@pytest.fixture(scope="module")
def pairs(grids: tuple[Grid, ...]) -> tuple[tuple[Grid, Hand, float], ...]:
    """Each grid with the law's answer and the difference allowed, with both sets of constants."""
    as_is = [(grid, by_hand(grid), AS_IS) for grid in grids]
    with ngspice_constants():
        alike = [(grid, by_hand(grid), ALIKE) for grid in grids]
    return (*as_is, *alike)


Pairs = tuple[tuple[Grid, Hand, float], ...]


def close(found: Array, expected: Array, *, rel: float, floor: Array | float) -> None:
    """Hold ``found`` to ``expected`` within ``rel`` of it, or ``floor`` where it is next to nothing."""
    assert found.shape == expected.shape
    assert np.isfinite(found).all()
    excess = np.abs(found - expected) - (rel * np.abs(expected) + floor)
    worst = np.unravel_index(np.argmax(excess), excess.shape)
    assert excess[worst] <= 0.0, (worst, found[worst], expected[worst])


def test_the_devices_cover_all_there_is(pairs: Pairs) -> None:
    assert sum(len(grid.devices) for grid, _, _ in pairs) >= 2 * 2400
    counts = dict.fromkeys(
        ("cut-off", "triode", "saturation", "exchanged", "forward bulk", "conducting junction", "series"), 0
    )
    for grid, hand, _ in pairs:
        v_ds, v_ov = grid.read["vds"], grid.read["vgs"] - grid.sign * grid.read["von"]
        forward = np.maximum(grid.read["vbs"], grid.read["vbd"])
        junction = np.maximum(np.abs(grid.read["ibs"]), np.abs(grid.read["ibd"]))
        series = (hand.parameters.r_drain > 0.0) | (hand.parameters.r_source > 0.0)
        for name, members in (
            ("cut-off", (v_ds > 0.0) & (v_ov < 0.0)),
            ("triode", (v_ds > 0.0) & (v_ds < v_ov)),
            ("saturation", (v_ds > v_ov) & (v_ov > 0.0)),
            ("exchanged", grid.exchanged & (np.abs(grid.read["id"]) > 1e-9)),
            ("forward bulk", forward > 0.0),
            ("conducting junction", junction > 1e-6),
            ("series", series[0]),
        ):
            counts[name] += int(np.count_nonzero(members))
    assert min(counts.values()) >= 400, counts


def _around(grid: Grid, rel: float) -> Array:
    """Floor of a current [A]: what a tenth of ``rel`` in a voltage of 1 V makes of the channel's current.

    Thresholds from the doping have the constants in them; and currents that all but cancel at a pin are no
    righter than what cancels.
    """
    steep = grid.read["gm"] + grid.read["gds"] + grid.read["gmbs"]
    junctions = np.abs(grid.read["ibs"]) + np.abs(grid.read["ibd"])
    return rel * (0.1 * steep + junctions) + 1e-20


def test_currents_into_all_terminals_are_ngspices(pairs: Pairs) -> None:
    """Ngspice has the current of a pin with a resistance from the small voltage across it: so the floor."""
    for grid, hand, rel in pairs:
        # What the rounding of the largest voltage is through the resistance of each pin.
        rounding = 1e-15 * np.abs([device.volts for device in grid.devices]).max(axis=1)
        floor = np.zeros_like(hand.currents)
        for pin, resistance in ((0, hand.parameters.r_drain[0]), (2, hand.parameters.r_source[0])):
            floor[:, pin] = np.where(
                resistance > 0.0, rounding / np.where(resistance > 0.0, resistance, 1.0), 0.0
            )
        floor += _around(grid, rel)[:, None]
        close(hand.currents, grid.currents, rel=rel, floor=floor)


def test_reported_quantities_are_ngspices_readouts(pairs: Pairs) -> None:
    """ID as ``id``, leakage and all; threshold, overdrive and margin behind the resistances."""
    for grid, hand, rel in pairs:
        close(hand.report["ID"], grid.read["id"], rel=rel, floor=_around(grid, rel))
        close(hand.report["VDS'"], grid.read["vds"], rel=rel, floor=rel)
        forward = ~grid.exchanged
        close(hand.report["VTH"][forward], grid.read["von"][forward], rel=rel, floor=rel)
        overdrive = (grid.read["vgs"] - grid.sign * grid.read["von"])[forward]
        close(hand.report["VOV"][forward], overdrive, rel=rel, floor=rel)


def test_conductances_of_the_channel_are_ngspices(pairs: Pairs) -> None:
    """Exchanged, gm and gmb turn their sign, and gds by the terminals is the sum of all three."""
    for grid, hand, rel in pairs:
        gm, gds, gmb = (grid.read[name] for name in ("gm", "gds", "gmbs"))
        # gm and gds go through zero at the edges of their regions: a share of the largest slope there, and
        # more of it where the overdrive is no more than what the constants make of a threshold.
        v_ov = np.abs(hand.report["VOV"] - np.minimum(hand.report["VDS'"], 0.0))
        v_ov = np.maximum(v_ov, 1e-6)
        floor = rel * (gm + gds + gmb) * (1.0 + 0.1 / v_ov) + 1e-18
        close(hand.report["gm"], np.where(grid.exchanged, -gm, gm), rel=rel, floor=floor)
        close(hand.report["gmb"], np.where(grid.exchanged, -gmb, gmb), rel=rel, floor=floor)
        close(hand.report["gds"], np.where(grid.exchanged, gm + gds + gmb, gds), rel=rel, floor=floor)


def test_capacitances_of_gate_and_junctions_are_ngspices(pairs: Pairs) -> None:
    """To 3·10⁻⁸: ngspice has 1.1150877 eV for the gap of silicon at 27 °C, 6·10⁻⁹ off its own formula."""
    for grid, hand, rel in pairs:
        allowed = max(rel, 3e-8)
        whole = grid.read["cgs"] + grid.read["cgd"] + grid.read["cgb"]
        for column, name in enumerate(CAPACITANCES):
            floor = allowed * whole if name.startswith("cg") else 1e-23
            close(hand.capacitances[:, column], grid.read[name], rel=allowed, floor=floor)


def test_admittances_at_a_high_frequency_are_ngspices(pairs: Pairs) -> None:
    """One column of each device's admittance matrix at 300 MHz, where inner nodes and capacitances show."""
    for grid, hand, rel in pairs:
        allowed = max(rel, 3e-8)
        largest = np.abs(grid.admittances).max(axis=1, keepdims=True)
        gate = 2.0 * np.pi * FREQUENCY * (grid.read["cgs"] + grid.read["cgd"] + grid.read["cgb"])
        floor = allowed * (largest + gate[:, None]) + 1e-15 * hand.stiffest[:, None]
        for part in (np.real, np.imag):
            close(part(hand.admittances), part(grid.admittances), rel=allowed, floor=floor)
        assert np.count_nonzero(largest) > 0.9 * len(largest)
