"""``deckgen simulator``: which ngspice runs, and whether it does what deckgen relies on."""

from __future__ import annotations

import click

from deckgen.cli.common import show, tell
from deckgen.errors import ExitCode


@click.command(name="simulator")
def command() -> int:
    """Show which ngspice runs, its version, and what it can do of what deckgen needs."""
    from deckgen.simulator import capabilities, find

    found = find()
    abilities = capabilities(found)
    width = max(len(ability.name) for ability in abilities)
    lines = [f"{found.name} {found.version}", found.path, ""]
    for ability in abilities:
        mark = "yes" if ability.works else "NO "
        lines.append(f"  {mark}  {ability.name:{width}}  {ability.detail}".rstrip())
    show("\n".join(lines) + "\n")
    if all(ability.works for ability in abilities):
        return int(ExitCode.OK)
    tell("\nResults of this simulator are not to be relied on where it says NO.")
    return int(ExitCode.SIMULATOR)
