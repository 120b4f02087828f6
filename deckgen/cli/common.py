"""What the commands share: where results go, and the options for it."""

from __future__ import annotations

import contextlib
import io
import os
import sys
from collections.abc import Callable
from pathlib import Path
from typing import IO, TYPE_CHECKING, Any, TypeVar

import click

from deckgen.errors import OutputError

if TYPE_CHECKING:
    from deckgen.errors import DeckgenError
    from deckgen.report.terminal import Look

Command = TypeVar("Command", bound=Callable[..., Any])

STDOUT = Path("-")

stage_arguments = click.argument(
    "stages", nargs=-1, required=True, type=click.Path(path_type=Path), metavar="STAGE…"
)


include_root_option = click.option(
    "--include-root",
    multiple=True,
    type=click.Path(exists=True, file_okay=False, path_type=Path),
    metavar="FOLDER",
    help="Folder that decks may include from, besides their own; also DECKGEN_INCLUDE_ROOTS.",
)


def include_roots(given: tuple[Path, ...]) -> tuple[Path, ...]:
    """Folders that decks may include from: those of the option, then those of the environment."""
    listed = os.environ.get("DECKGEN_INCLUDE_ROOTS", "").split(os.pathsep)
    return (*given, *(Path(name) for name in listed if name))


def named(path: Path, error: DeckgenError) -> str:
    """One line or more on what is wrong with a file, its name in front where it isn't said already."""
    from deckgen.errors import InputError

    return str(error) if isinstance(error, InputError) else f"{path}: {error}"


def report_file(option: str, what: str) -> Callable[[Command], Command]:
    """An option that takes a file to write a report to, ``-`` for stdout."""
    kind = click.Path(dir_okay=False, allow_dash=True, path_type=Path)
    help_text = f"Write {what} to FILE; - is stdout."
    return click.option(option, type=kind, metavar="FILE", callback=_report_target, help=help_text)


def _report_target(_ctx: click.Context, _option: click.Parameter, target: Path | None) -> Path | None:
    """Refuse, before any work is done, a file that can't be meant."""
    from deckgen.stage.collect import is_deck

    if target is None or target == STDOUT:
        return target
    if target.suffix == ".toml" or is_deck(target):
        # `--json amp.toml` by somebody who takes the option for a switch would cost him his stage.
        raise click.BadParameter(
            f"{target} would be a stage file or deck; name the file to write the report to."
        )
    require_folder(target)
    return target


def require_folder(target: Path) -> None:
    """Refuse a file to write whose folder isn't there."""
    if not target.parent.is_dir():
        raise click.UsageError(f"{target.parent} is no folder; make it, or name another file than {target}.")


def one_on_stdout(**targets: Path | None) -> bool:
    """Whether a report goes to stdout; refuses two of them there."""
    chosen = [name for name, target in targets.items() if target == STDOUT]
    if len(chosen) > 1:
        names = " and ".join(f"--{name}" for name in chosen)
        raise click.UsageError(f"{names} can't both go to stdout; name a file for one of them.")
    return bool(chosen)


def deliver(text: str, target: Path) -> None:
    """Write a file that is a result, whole or not at all; to stdout as the same bytes."""
    from deckgen.store.runs import write_atomically

    if target != STDOUT:
        write_atomically(target, text)
        return
    if isinstance(sys.stdout, io.TextIOWrapper):
        sys.stdout.reconfigure(encoding="utf-8")
    show(text)


def show(text: str) -> None:
    """Write to stdout. A reader that has had enough is no error; OutputError where there is no room."""
    try:
        sys.stdout.write(text)
        sys.stdout.flush()
    except BrokenPipeError:
        let_go(sys.stdout)
    except OSError as error:
        let_go(sys.stdout)
        raise OutputError(f"standard output can't be written ({error.strerror})") from error


def tell(text: str, *, end: str = "\n") -> None:
    """Write to stderr. Whoever closed it doesn't want to know, and the work goes on."""
    try:
        print(text, end=end, file=sys.stderr, flush=True)
    except OSError:
        let_go(sys.stderr)


def let_go(stream: IO[str]) -> None:
    """Send what a stream still holds nowhere; Python would complain of it at the end."""
    nowhere = os.open(os.devnull, os.O_WRONLY)
    with contextlib.suppress(io.UnsupportedOperation):  # a stream in memory has nothing to be let go
        os.dup2(nowhere, stream.fileno())
    os.close(nowhere)


def look() -> Look:
    """How wide the terminal is and whether it takes colour."""
    from deckgen.report.terminal import look_of

    return look_of(sys.stdout, os.environ)


def say(ctx: click.Context, text: str) -> None:
    """Tell the user something on stderr, unless asked to be quiet."""
    if not ctx.obj["quiet"]:
        tell(text)
