"""``deckgen start``: a starter stage file and its deck."""

from __future__ import annotations

from pathlib import Path

import click

from deckgen.cli.common import deliver, require_folder, say


@click.command(name="start")
@click.argument("topology")
@click.option("-p", "--polarity", type=click.Choice(["n", "p"]), default="n", show_default=True)
@click.option(
    "-o",
    "--output",
    type=click.Path(path_type=Path),
    metavar="FILE",
    help="Stage file to write; the deck stands beside it.  [default: TOPOLOGY.toml here]",
)
@click.option("--title", help="Title of the stage.")
@click.option("--force", is_flag=True, help="Overwrite files that are there.")
@click.pass_context
def command(
    ctx: click.Context, topology: str, polarity: str, output: Path | None, title: str | None, force: bool
) -> int:
    """Write a starter stage file of a topology, with values that work, and its deck beside it."""
    from deckgen.render.engine import render_runnable
    from deckgen.render.starter import starter_stage_file
    from deckgen.stage.read import stage_from_text
    from deckgen.stage.topology import load_topology

    described = load_topology(topology)
    stage_path = output or Path(f"{topology}.toml")
    if stage_path.suffix != ".toml":
        raise click.UsageError(f"{stage_path}: a stage file ends in .toml; write {stage_path}.toml")
    require_folder(stage_path)
    deck_path = stage_path.with_suffix(".cir")
    there = [str(path) for path in (stage_path, deck_path) if path.exists()]
    if there and not force:
        raise click.UsageError(f"{' and '.join(there)} there already; name another file, or add --force.")
    text = starter_stage_file(described, "n" if polarity == "n" else "p", title=title)
    deck = render_runnable(stage_from_text(text, file=str(stage_path)), described)
    deliver(text, stage_path)
    deliver(deck, deck_path)
    say(ctx, f"wrote {stage_path} and {deck_path}; next: deckgen check {stage_path}")
    return 0
