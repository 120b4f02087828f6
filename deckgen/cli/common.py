"""What the commands share: where results go, and the options for it."""

from __future__ import annotations

import os
import sys
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

import click

if TYPE_CHECKING:
    from deckgen.report.terminal import Look

Command = TypeVar("Command", bound=Callable[..., Any])

STDOUT = Path("-")

stage_arguments = click.argument(
    "stages", nargs=-1, required=True, type=click.Path(path_type=Path), metavar="STAGE…"
)


def report_file(option: str, what: str) -> Callable[[Command], Command]:
    """An option that takes a file to write a report to, ``-`` for stdout."""
    kind = click.Path(dir_okay=False, allow_dash=True, path_type=Path)
    return click.option(option, type=kind, metavar="FILE", help=f"Write {what} to FILE; - is stdout.")


def one_on_stdout(**targets: Path | None) -> bool:
    """Whether a report goes to stdout; refuses two of them there."""
    chosen = [name for name, target in targets.items() if target == STDOUT]
    if len(chosen) > 1:
        names = " and ".join(f"--{name}" for name in chosen)
        raise click.UsageError(f"{names} can't both go to stdout; name a file for one of them.")
    return bool(chosen)


def deliver(text: str, target: Path) -> None:
    """Write a result to a file, whole or not at all, or to stdout."""
    from deckgen.store.runs import write_atomically

    if target == STDOUT:
        sys.stdout.write(text)
    else:
        write_atomically(target, text)


def look() -> Look:
    """How wide the terminal is and whether it takes colour."""
    from deckgen.report.terminal import look_of

    return look_of(sys.stdout, os.environ)


def say(ctx: click.Context, text: str) -> None:
    """Tell the user something on stderr, unless asked to be quiet."""
    if not ctx.obj["quiet"]:
        click.echo(text, err=True)
