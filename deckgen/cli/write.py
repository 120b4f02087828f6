"""``deckgen write``: the deck of a stage, to run anywhere."""

from __future__ import annotations

from pathlib import Path

import click

from deckgen.cli.common import STDOUT, deliver, require_folder, say


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
@click.pass_context
def command(ctx: click.Context, stage: Path, output: Path, force: bool) -> int:
    """Write the deck of a stage file. It runs in plain ngspice and prints its operating point."""
    from deckgen.render.engine import render_runnable
    from deckgen.stage.read import read_stage
    from deckgen.stage.topology import load_topology

    if output != STDOUT:
        require_folder(output)
    found = read_stage(stage)
    text = render_runnable(found, load_topology(found.topology))
    if output != STDOUT and output.exists() and not force:
        raise click.UsageError(f"{output} is there already; name another file, or add --force.")
    deliver(text, output)
    if output != STDOUT:
        say(ctx, f"wrote {output}; run it with: ngspice -b {output}")
    return 0
