"""``deckgen simulator``: which ngspice runs, and whether it does what deckgen relies on."""

from __future__ import annotations

import click

from deckgen.errors import ExitCode


@click.command(name="simulator")
def command() -> int:
    """Show which ngspice runs, its version, and what it can do of what deckgen needs."""
    from deckgen.simulator import capabilities, find

    found = find()
    click.echo(f"{found.name} {found.version}\n{found.path}\n")
    abilities = capabilities(found)
    width = max(len(ability.name) for ability in abilities)
    for ability in abilities:
        mark = "yes" if ability.works else "NO "
        click.echo(f"  {mark}  {ability.name:{width}}  {ability.detail}".rstrip())
    if all(ability.works for ability in abilities):
        return int(ExitCode.OK)
    click.echo("\nResults of this simulator are not to be relied on where it says NO.", err=True)
    return int(ExitCode.SIMULATOR)
