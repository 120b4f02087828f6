"""``deckgen check``: predict, simulate and compare stage files."""

from __future__ import annotations

import math
import os
import sys
import threading
from pathlib import Path
from types import TracebackType
from typing import TYPE_CHECKING

import click

from deckgen.cli.common import (
    deliver,
    include_root_option,
    include_roots,
    look,
    one_on_stdout,
    report_file,
    show,
    stage_arguments,
    tell,
)

if TYPE_CHECKING:
    from deckgen.comparison import Comparison


def _finite(_ctx: click.Context, _option: click.Parameter, value: float) -> float:
    if not math.isfinite(value):
        raise click.BadParameter(f"{value} is no number of seconds.")
    return value


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
    callback=_finite,
    help="Longest time the simulator may take for one stage.",
)
@include_root_option
@click.option("-q", "--quiet", is_flag=True, help="Show only what fails, and no progress.")
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
    include_root: tuple[Path, ...],
    quiet: bool,
) -> int:
    """Predict, simulate and compare stage files and decks, or all of them below a folder.

    A gap beyond its tolerance, or a wanted quantity that could not be compared, ends in exit code 1.
    """
    from deckgen import pipeline
    from deckgen.errors import SimulatorError
    from deckgen.report import document, terminal
    from deckgen.report import markdown as markdown_report
    from deckgen.simulator import Limits, Simulator, find
    from deckgen.stage.collect import stage_files

    quiet = quiet or ctx.obj["quiet"]
    taken = one_on_stdout(json=json, markdown=markdown)
    files = stage_files(stages)
    simulator: Simulator | SimulatorError
    try:
        simulator = find()
    except SimulatorError as error:
        simulator = error
    with _Progress(len(files), quiet=quiet) as told:
        comparisons = pipeline.check_all(
            files,
            simulator=simulator,
            settings=pipeline.CheckSettings(
                run_dir=run_dir,
                keep=keep,
                limits=Limits(seconds=time_limit),
                include_roots=include_roots(include_root),
            ),
            jobs=jobs or os.cpu_count() or 1,
            told=told,
        )
    known = simulator if isinstance(simulator, Simulator) else None
    whole = document.check_document(comparisons, simulator=known)
    if not taken:
        show(terminal.check_report(whole, look(), quiet=quiet))
    if json is not None:
        deliver(document.dump(whole), json)
    if markdown is not None:
        deliver(markdown_report.check_report(whole), markdown)
    return int(whole["exit_code"])


class _Progress:
    """A line that counts on a terminal, a plain line a stage elsewhere; nothing for a single stage."""

    def __init__(self, total: int, *, quiet: bool) -> None:
        self._total = total
        self._done = 0
        self._silent = quiet or total < 2
        self._lock = threading.Lock()
        self._terminal = sys.stderr.isatty()

    def __enter__(self) -> _Progress:
        self._count()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        """Take the line that counts away, however the work ended."""
        if self._terminal and not self._silent:
            tell("\r\x1b[K", end="")

    def __call__(self, comparison: Comparison) -> None:
        with self._lock:
            self._done += 1
            if not self._terminal and not self._silent:
                tell(f"{self._done}/{self._total} {comparison.name}: {comparison.outcome}")
            self._count()

    def _count(self) -> None:
        if self._terminal and not self._silent:
            tell(f"\r\x1b[K{self._done}/{self._total} checked", end="")
