"""``deckgen topologies``: what can be started from."""

from __future__ import annotations

import click

from deckgen.cli.common import show


@click.command(name="topologies")
@click.argument("topology", required=False)
def command(topology: str | None) -> int:
    """List the topologies, or the parts of one TOPOLOGY."""
    from deckgen.stage.topology import list_topologies, load_topology

    lines = []
    if topology is None:
        names = list_topologies()
        width = max((len(name) for name in names), default=0)
        lines += [f"{name:{width}}  {load_topology(name).title}" for name in names]
    else:
        described = load_topology(topology)
        lines += [f"{described.name}: {described.title}", described.about, ""]
        for part in described.parts:
            others = [name for group in described.one_of if part.name in group for name in group]
            instead = "".join(f", needed without {name}" for name in others if name != part.name)
            needs = f", with {' and '.join(part.needs)}" if part.needs else ""
            kind = "required" if part.required else f"optional{needs}{instead}"
            lines.append(f"  {part.name:6} {part.unit:3} {part.about} ({kind})")
        lines += [f"  {transistor.name:6}     {transistor.about}" for transistor in described.transistors]
    show("\n".join(lines) + "\n")
    return 0
