"""``deckgen predict``: the hand analysis with its working."""

from __future__ import annotations

from pathlib import Path

import click

from deckgen.cli.common import (
    deliver,
    include_root_option,
    include_roots,
    look,
    named,
    one_on_stdout,
    report_file,
    show,
    stage_arguments,
    tell,
)


@click.command(name="predict")
@stage_arguments
@report_file("--json", "the analysis as JSON")
@report_file("--markdown", "a Markdown report")
@include_root_option
def command(
    stages: tuple[Path, ...], json: Path | None, markdown: Path | None, include_root: tuple[Path, ...]
) -> int:
    """Show the hand analysis of stage files and decks: every step with formula, numbers, result, source."""
    from deckgen import pipeline
    from deckgen.errors import DeckgenError, ExitCode
    from deckgen.report import document, terminal
    from deckgen.report import markdown as markdown_report
    from deckgen.stage.collect import stage_files

    taken = one_on_stdout(json=json, markdown=markdown)
    files = stage_files(stages)
    results = pipeline.predict_files(files, include_roots=include_roots(include_root))
    worst = ExitCode.OK
    for path, result in zip(files, results, strict=True):
        if isinstance(result, DeckgenError):
            tell(f"deckgen: {named(path, result)}")
            worst = max(worst, result.exit_code)
    if worst is not ExitCode.OK:
        return int(worst)
    whole = document.predict_document([one for one in results if not isinstance(one, DeckgenError)])
    if not taken:
        show(terminal.predict_report(whole, look()))
    if json is not None:
        deliver(document.dump(whole), json)
    if markdown is not None:
        deliver(markdown_report.predict_report(whole), markdown)
    return int(ExitCode.OK)
