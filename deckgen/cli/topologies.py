"""``deckgen topologies``: what can be started from."""

from __future__ import annotations

import click


@click.command(name="topologies")
@click.argument("topology", required=False)
def command(topology: str | None) -> int:
    """List the topologies, or the parts of one TOPOLOGY."""
    from deckgen.stage.topology import list_topologies, load_topology

    if topology is None:
        names = list_topologies()
        width = max((len(name) for name in names), default=0)
        for name in names:
            described = load_topology(name)
            click.echo(f"{name:{width}}  {described.title}")
        return 0
    described = load_topology(topology)
    click.echo(f"{described.name}: {described.title}\n{described.about}\n")
    for part in described.parts:
        needs = f", with {' and '.join(part.needs)}" if part.needs else ""
        kind = "required" if part.required else f"optional{needs}"
        click.echo(f"  {part.name:6} {part.unit:3} {part.about} ({kind})")
    for transistor in described.transistors:
        click.echo(f"  {transistor.name:6}     {transistor.about}")
    return 0
