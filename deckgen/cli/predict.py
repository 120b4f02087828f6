"""``deckgen predict``: the hand analysis with its working."""

from __future__ import annotations

from pathlib import Path

import click

from deckgen.cli.common import deliver, look, one_on_stdout, report_file, show, stage_arguments, tell


@click.command(name="predict")
@stage_arguments
@report_file("--json", "the analysis as JSON")
@report_file("--markdown", "a Markdown report")
def command(stages: tuple[Path, ...], json: Path | None, markdown: Path | None) -> int:
    """Show the hand analysis of stage files: every step with its formula, numbers, result and source."""
    from deckgen import pipeline
    from deckgen.errors import ExitCode, InputError, NoBiasError
    from deckgen.report import document, terminal
    from deckgen.report import markdown as markdown_report
    from deckgen.stage.collect import stage_files

    taken = one_on_stdout(json=json, markdown=markdown)
    predicted: list[document.PredictedStage] = []
    refused = False
    for path in stage_files(stages):
        try:
            predicted.append(pipeline.predict_stage(path))
        except InputError as error:
            tell(f"deckgen: {error}")
            refused = True
        except NoBiasError as error:
            tell(f"deckgen: {path}: {error}")
            refused = True
    if refused:
        return int(ExitCode.INPUT)
    whole = document.predict_document(predicted)
    if not taken:
        show(terminal.predict_report(whole, look()))
    if json is not None:
        deliver(document.dump(whole), json)
    if markdown is not None:
        deliver(markdown_report.predict_report(whole), markdown)
    return int(ExitCode.OK)
