"""``deckgen write``: the deck of a stage, to run anywhere."""

from __future__ import annotations

from pathlib import Path

import click

from deckgen.cli.common import (
    STDOUT,
    deliver,
    include_root_option,
    include_roots,
    require_folder,
    say,
)


@click.command(name="write")
@click.argument("stage", type=click.Path(path_type=Path))
@click.option(
    "-o",
    "--output",
    type=click.Path(dir_okay=False, allow_dash=True, path_type=Path),
    default=STDOUT,
    metavar="FILE",
    help="File to write; - is stdout, and the default.",
)
@click.option("--force", is_flag=True, help="Overwrite a file that is there.")
@include_root_option
@click.pass_context
def command(
    ctx: click.Context, stage: Path, output: Path, force: bool, include_root: tuple[Path, ...]
) -> int:
    """Write the deck of a stage file or deck. It runs in plain ngspice and prints its operating point.

    Of a deck, what describes the circuit is written, includes put in place, without its commands.
    """
    from deckgen import pipeline

    if output != STDOUT:
        require_folder(output)
    text = pipeline.runnable_deck(stage, include_roots=include_roots(include_root))
    if output != STDOUT and output.exists() and not force:
        raise click.UsageError(f"{output} is there already; name another file, or add --force.")
    deliver(text, output)
    if output != STDOUT:
        say(ctx, f"wrote {output}; run it with: ngspice -b {output}")
    return 0
