"""Ratios of speed, each measured within one run: `make bench`.

Absolute times depend on the machine; what counts is the ratio beside its limit.
"""

from __future__ import annotations

import datetime
import os
import shutil
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, ParamSpec, TypeVar

if TYPE_CHECKING:
    from deckgen.simulator.flatten import Flat

ROOT = Path(__file__).resolve().parent.parent
STAGES = ROOT / "stages"
PYTHON = sys.executable
MANY = 200

Given = ParamSpec("Given")
Result = TypeVar("Result")

for library in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS"):
    os.environ.setdefault(library, "1")  # before numpy is loaded: what is measured on one core stays there


@dataclass(frozen=True)
class Figure:
    """One measured figure and its limit, if it has one; ``at_least`` turns the comparison round."""

    name: str
    value: float
    unit: str
    limit: float | None
    at_least: bool = False

    @property
    def kept(self) -> bool:
        """Whether the limit is kept."""
        if self.limit is None:
            return True
        return self.value >= self.limit if self.at_least else self.value <= self.limit

    def __str__(self) -> str:
        mark = "ok  " if self.kept else "MISS"
        limit = "" if self.limit is None else f" {'≥' if self.at_least else '≤'} {self.limit:,g}"
        return f"{mark} {self.name:58} {self.value:12,.3f} {self.unit:9}{limit}"


@contextmanager
def folder() -> Iterator[Path]:
    """A folder that is gone afterwards."""
    path = Path(tempfile.mkdtemp(prefix="deckgen-bench-"))
    try:
        yield path
    finally:
        shutil.rmtree(path)


def seconds(work: Callable[[], object], times: int = 1) -> float:
    """Median time of a call [s]."""
    taken = []
    for _ in range(times):
        begun = time.perf_counter()
        work()
        taken.append(time.perf_counter() - begun)
    return statistics.median(taken)


def start_up() -> Iterator[Figure]:
    """What ``deckgen -h`` loads, and how long it takes over Python itself."""
    code = (
        "import sys; from deckgen.cli.main import group\n"
        "try: group.main(['-h'], standalone_mode=False)\n"
        "except SystemExit: pass\n"
        "print('|', sum(name in sys.modules for name in ('numpy', 'PySpice', 'scipy', 'pydantic', 'rich')))"
    )
    answer = subprocess.run([PYTHON, "-c", code], capture_output=True, text=True, check=True, cwd=ROOT)
    yield Figure("heavy modules loaded by deckgen -h", float(answer.stdout.rsplit("|", 1)[1]), "modules", 0)

    def run(*command: str) -> None:
        subprocess.run([PYTHON, *command], check=True, cwd=ROOT, stdout=subprocess.DEVNULL)

    bare = seconds(lambda: run("-c", "pass"), 7)
    ours = seconds(lambda: run("-m", "deckgen", "-h"), 7)
    yield Figure("deckgen -h over bare Python", ours / bare, "×", 10)


def predicting() -> Iterator[Figure]:
    """Own code of one ``predict`` once everything is imported."""
    from deckgen import pipeline
    from deckgen.report import document, terminal

    def predict() -> None:
        (stage,) = pipeline.predict_files([STAGES / "first-gain.toml"])
        terminal.predict_report(document.predict_document([stage]))

    predict()
    yield Figure("predict, own code after imports", 1e3 * seconds(predict, 15), "ms", 50)


AMPLIFIER = """Two stages and a follower, fed back to the inverting input
vdd vdd 0 5
vin inp 0 dc 2.5 ac 1
rb vdd nb 180k
m8 nb nb 0 0 nm w=10u l=2u
m5 tail nb 0 0 nm w=20u l=2u
m1 d1 inn tail 0 nm w=40u l=2u
m2 d2 inp tail 0 nm w=40u l=2u
m3 d1 d1 vdd vdd pm w=20u l=2u
m4 d2 d1 vdd vdd pm w=20u l=2u
m6 o1 d2 vdd vdd pm w=80u l=2u
m7 o1 nb 0 0 nm w=40u l=2u
m9 vdd o1 out 0 nm w=100u l=2u
m10 out nb 0 0 nm w=50u l=2u
rf out inn 10k
rl out 0 100k
.model nm nmos level=1 vto=0.7 kp=110u lambda=0.04 gamma=0.4 phi=0.7
.model pm pmos level=1 vto=-0.8 kp=50u lambda=0.05 gamma=0.5 phi=0.7
"""


def bias() -> Iterator[Figure]:
    """Bias of one stage, of ten transistors in a loop, and of many rows at once; all on one core."""
    import numpy as np

    from deckgen import pipeline
    from deckgen.circuit.reader import read_flat
    from deckgen.hand.batch import Batch
    from deckgen.hand.bias import solve_bias
    from deckgen.hand.effects import ALL_EFFECTS
    from deckgen.stage.read import read_stage

    circuit = pipeline.analyse(read_stage(STAGES / "first-gain.toml")).circuit
    full = Batch(effects=(ALL_EFFECTS,))
    yield Figure("bias of one stage", 1e3 * seconds(lambda: solve_bias(circuit, full), 50), "ms", 2)
    amplifier = read_flat(AMPLIFIER)
    assert len(amplifier.transistors) == 10
    # Of several rows no further operating points are looked for: that is a search of its own.
    two = Batch(effects=(ALL_EFFECTS, ALL_EFFECTS))
    yield Figure("bias of 10 transistors", 1e3 * seconds(lambda: solve_bias(amplifier, two), 30), "ms", 10)
    searched = 1e3 * seconds(lambda: solve_bias(amplifier, full), 30)
    yield Figure("the same with the search for further operating points", searched, "ms", None)
    rows = 100_000
    random = np.random.default_rng(1)
    card = circuit.models[0]
    spread = {
        "vto": random.normal(card.get("vto", 0.0), 0.05, rows),
        "kp": card.get("kp", 0.0) * random.normal(1, 0.1, rows),
    }
    samples = tuple((("m1", name), values) for name, values in spread.items())
    many = Batch(effects=(ALL_EFFECTS,), samples=samples)
    yield Figure(
        "bias of 100,000 rows of one transistor", seconds(lambda: solve_bias(circuit, many), 3), "s", 1.5
    )


def steps_of_a_check() -> Iterator[Figure]:
    """What each step of ``check`` takes of the time of one stage; no limits."""
    from deckgen import pipeline
    from deckgen.bench.measure import measure
    from deckgen.bench.plan import make_plan, sweep_around
    from deckgen.intake import Taken, take_in
    from deckgen.judge import judge
    from deckgen.report import document, terminal
    from deckgen.simulator import find, run

    simulator, today = find(), datetime.date(2026, 1, 1)
    taken: dict[str, list[float]] = {}

    def timed(name: str, work: Callable[Given, Result], *given: Given.args, **named: Given.kwargs) -> Result:
        begun = time.perf_counter()
        result = work(*given, **named)
        taken.setdefault(name, []).append(time.perf_counter() - begun)
        return result

    for number in range(16):
        with folder() as place:
            (stage,) = timed("intake", take_in, [STAGES / "first-gain.toml"], flattener=lambda _: ())
            assert isinstance(stage, Taken)
            hand = timed("hand", pipeline.analyse_taken, stage, told=False)
            mid, circuit, ports = hand.prediction.mid_band, hand.circuit, hand.ports
            assert mid is not None
            sweep = sweep_around(mid.exact_f_l, mid.exact_f_h)
            plan = timed(
                "plan", make_plan, circuit, hand.netlist, ports, frequency=mid.frequency, sweep=sweep
            )
            ended = timed("simulator", run, plan.job, simulator=simulator, folder=place)
            measured = timed("measure", measure, circuit, ports, plan, ended.plots)
            judged = timed("judge", judge, hand, measured, today=today)
            whole = timed("report", document.check_document, [judged], simulator=simulator)
            timed("report", terminal.check_report, whole)
        if number == 0:
            taken.clear()  # imports
    total = sum(sum(values) for values in taken.values())
    for name, values in taken.items():
        yield Figure(f"share of a check of one stage: {name}", 100.0 * sum(values) / total, "%", None)


def bare_simulator(decks: Path) -> float:
    """Time of the simulator itself over the deck.cir of every folder, two at a time [s]."""
    one_run = "cd {} && ngspice -n -b deck.cir >/dev/null 2>&1 </dev/null"
    script = f"ls -d {decks}/* | xargs -P2 -I{{}} sh -c '{one_run}'"
    return seconds(lambda: subprocess.run(["sh", "-c", script], check=True))


STAGE_LINES = """vdd vdd 0 12
vin sig 0 dc 0 ac 1
rsig sig a 1k
cin a g 10u
r1 vdd g 1meg
r2 g 0 470k
rd vdd d 4.7k
rs s 0 1k
cs s 0 47u
m1 d g s 0 nch w=50u l=2u
cout d out 10u
rl out 0 47k
.model nch nmos level=1 vto=1 kp=100u lambda=0.01
* deckgen: input VIN
* deckgen: output out
"""


def reading_decks() -> Iterator[Figure]:
    """Reading a flat deck of 30 lines, and one of 100,000 with all that is looked for in it."""
    from deckgen.circuit.reader import read_flat
    from deckgen.intake import Taken, take_in

    short = f"* title\n{STAGE_LINES}" + "".join(f"rx{n} d s {n + 1}meg\n" for n in range(13)) + ".end\n"
    assert short.count("\n") == 30
    read_flat(short)
    yield Figure("reading a flat deck of 30 lines", 1e3 * seconds(lambda: read_flat(short), 200), "ms", 0.5)
    with folder() as work:
        deck = work / "long.cir"
        parts = "".join(f"rx{n} d s {n + 1}meg\n" for n in range(100_000 - 17))
        deck.write_text(f"title\n{STAGE_LINES}{parts}.end\n", encoding="utf-8")

        def read() -> None:
            (taken,) = take_in([deck], flattener=lambda _: ())
            assert isinstance(taken, Taken)

        yield Figure("reading and looking over a deck of 100,000 lines", seconds(read), "s", None)


def flattening() -> Iterator[Figure]:
    """The simulator as front end of 200 decks against itself over the same decks, two at a time."""
    from deckgen import pipeline
    from deckgen.intake import take_in
    from deckgen.simulator import find
    from deckgen.simulator.flatten import flatten

    simulator = find()
    with folder() as work:
        files = [work / f"deck{number:04}.cir" for number in range(MANY)]
        for number, file in enumerate(files):
            text = STAGE_LINES.replace("4.7k", f"{{{4000 + number}}}")
            file.write_text(f"title\n.param unused=1\n{text}.end\n", encoding="utf-8")
        texts: list[str] = []

        def front_end(decks: Sequence[str]) -> Sequence[Flat]:
            texts.extend(decks)
            return flatten(decks, simulator=simulator)

        take_in(files, flattener=front_end)
        taken = seconds(lambda: flatten(texts, simulator=simulator), 3)
        settings = pipeline.CheckSettings(run_dir=work / "runs")
        pipeline.check_all(files, simulator=simulator, settings=settings, jobs=2)
        decks = work / "decks"
        for deck in sorted((work / "runs").glob("*/deck.cir")):
            (decks / deck.parent.name).mkdir(parents=True)
            shutil.copy(deck, decks / deck.parent.name)
        yield Figure(
            f"flattening {MANY} decks over the bare simulator", taken / bare_simulator(decks), "×", 0.3
        )


def many_stages() -> Iterator[Figure]:
    """200 stages with two jobs against the bare simulator over the same decks."""
    with folder() as work:
        stages, decks = work / "stages", work / "decks"
        stages.mkdir()
        decks.mkdir()
        text = (STAGES / "first-gain.toml").read_text(encoding="utf-8")
        for number in range(MANY):
            changed = text.replace('title = "', f'title = "{number} ', 1)
            (stages / f"stage{number:04}.toml").write_text(changed, encoding="utf-8")
        one = stages / "stage0000.toml"
        check = [PYTHON, "-m", "deckgen", "-q", "check", "--jobs", "2", "--run-dir", str(work / "runs")]
        environment = {**os.environ, "PYTHONPATH": str(ROOT)}

        def run(*what: str) -> None:
            subprocess.run([*check, *what], cwd=work, env=environment, stdout=subprocess.DEVNULL, check=False)

        start = seconds(lambda: run(str(one)), 3)
        whole = seconds(lambda: run(str(stages)))
        for deck in sorted((work / "runs").glob("*/deck.cir"))[:MANY]:
            place = decks / deck.parent.name
            place.mkdir()
            shutil.copy(deck, place)
        bare = bare_simulator(decks)
        yield Figure(
            f"{MANY} stages, 2 jobs, beyond start-up, over the bare simulator", (whole - start) / bare, "×", 3
        )


def main() -> int:
    """Print all figures; exit code 1 if a limit is missed."""
    missed = 0
    groups = (start_up, predicting, bias, steps_of_a_check, reading_decks, flattening, many_stages)
    for group in groups:
        for figure in group():
            print(figure, flush=True)
            missed += not figure.kept
    return 1 if missed else 0


if __name__ == "__main__":
    sys.exit(main())
