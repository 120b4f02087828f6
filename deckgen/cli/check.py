"""``deckgen check``: predict, simulate and compare stage files."""

from __future__ import annotations

import os
import sys
import threading
from pathlib import Path
from typing import TYPE_CHECKING

import click

from deckgen.cli.common import deliver, look, one_on_stdout, report_file, stage_arguments

if TYPE_CHECKING:
    from deckgen.comparison import Comparison


@click.command(name="check")
@stage_arguments
@report_file("--json", "the whole comparison as JSON")
@report_file("--markdown", "a Markdown report")
@click.option("-j", "--jobs", type=click.IntRange(1), help="Stages at a time.  [default: processor cores]")
@click.option(
    "--run-dir",
    type=click.Path(file_okay=False, path_type=Path),
    default=Path("runs"),
    show_default=True,
    help="Folder in which each run leaves a folder of evidence.",
)
@click.option("--keep/--no-keep", default=True, show_default=True, help="Keep the folders of evidence.")
@click.option(
    "--time-limit",
    type=click.FloatRange(min=0.0, min_open=True),
    default=60.0,
    show_default=True,
    metavar="SECONDS",
    help="Longest time the simulator may take for one stage.",
)
@click.pass_context
def command(
    ctx: click.Context,
    stages: tuple[Path, ...],
    json: Path | None,
    markdown: Path | None,
    jobs: int | None,
    run_dir: Path,
    keep: bool,
    time_limit: float,
) -> int:
    """Predict, simulate and compare stage files, or all stage files below a folder.

    A gap beyond its tolerance, or a wanted quantity that could not be compared, ends in exit code 1.
    """
    from deckgen import pipeline
    from deckgen.errors import SimulatorError
    from deckgen.report import document, terminal
    from deckgen.report import markdown as markdown_report
    from deckgen.simulator import Limits, Simulator, find
    from deckgen.stage.collect import stage_files

    taken = one_on_stdout(json=json, markdown=markdown)
    files = stage_files(stages)
    simulator: Simulator | SimulatorError
    try:
        simulator = find()
    except SimulatorError as error:
        simulator = error
    comparisons = pipeline.check_all(
        files,
        simulator=simulator,
        settings=pipeline.CheckSettings(run_dir=run_dir, keep=keep, limits=Limits(seconds=time_limit)),
        jobs=jobs or os.cpu_count() or 1,
        told=_Progress(len(files), quiet=ctx.obj["quiet"]),
    )
    known = simulator if isinstance(simulator, Simulator) else None
    whole = document.check_document(comparisons, simulator=known)
    if json is not None:
        deliver(document.dump(whole), json)
    if markdown is not None:
        deliver(markdown_report.check_report(whole), markdown)
    if not taken:
        sys.stdout.write(terminal.check_report(whole, look(), quiet=ctx.obj["quiet"]))
    return int(whole["exit_code"])


class _Progress:
    """A line that counts on a terminal, a plain line a stage elsewhere; nothing for a single stage."""

    def __init__(self, total: int, *, quiet: bool) -> None:
        self._total = total
        self._done = 0
        self._silent = quiet or total < 2
        self._lock = threading.Lock()
        self._terminal = sys.stderr.isatty()

    def __call__(self, comparison: Comparison) -> None:
        if self._silent:
            return
        with self._lock:
            self._done += 1
            count = f"{self._done}/{self._total}"
            if not self._terminal:
                print(f"{count} {comparison.name}: {comparison.outcome}", file=sys.stderr, flush=True)
            elif self._done < self._total:
                print(f"\r\x1b[K{count} checked", end="", file=sys.stderr, flush=True)
            else:
                print("\r\x1b[K", end="", file=sys.stderr, flush=True)
