"""The command ``deckgen``: a group whose commands are loaded only when they are called."""

from __future__ import annotations

import importlib
import io
import logging
import os
import signal
import sys
import traceback
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from types import FrameType
from typing import NoReturn

import click

from deckgen import __version__
from deckgen.cli.common import let_go, tell
from deckgen.errors import DeckgenError, ExitCode

log = logging.getLogger("deckgen")

_COMMANDS = {
    "start": "Write a starter stage file and its deck.",
    "predict": "Show the hand analysis with its working.",
    "write": "Write the deck of a stage.",
    "check": "Predict, simulate, compare: stage files or folders.",
    "topologies": "List the topologies.",
    "simulator": "Show which ngspice runs and what it can do.",
}
CONTEXT = {"help_option_names": ["-h", "--help"], "max_content_width": 100}


class _Commands(click.Group):
    """Commands by name; the help of the group is shown without importing any of them."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(_COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        if cmd_name not in _COMMANDS:
            return None
        command = importlib.import_module(f"deckgen.cli.{cmd_name}").command
        if not isinstance(command, click.Command):
            raise TypeError(f"deckgen.cli.{cmd_name} holds no command")
        return command

    def resolve_command(
        self, ctx: click.Context, args: list[str]
    ) -> tuple[str | None, click.Command | None, list[str]]:
        from difflib import get_close_matches

        try:
            return super().resolve_command(ctx, args)
        except click.UsageError as error:
            near = get_close_matches(args[0], _COMMANDS, n=1) if args else []
            if not near:
                raise
            raise click.UsageError(f"{error.message} Did you mean {near[0]}?", ctx) from error

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        with formatter.section("Commands"):
            formatter.write_dl(list(_COMMANDS.items()))


@click.group(cls=_Commands, context_settings=CONTEXT)
@click.version_option(__version__, prog_name="deckgen")
@click.option("-v", "--verbose", is_flag=True, help="Say more on stderr, and show tracebacks.")
@click.option("-q", "--quiet", is_flag=True, help="Say less: no progress, only what fails.")
@click.option(
    "--log-file", type=click.Path(dir_okay=False, path_type=Path), help="Append a log to this file."
)
@click.pass_context
def group(ctx: click.Context, verbose: bool, quiet: bool, log_file: Path | None) -> None:
    """Hand analysis of MOSFET amplifier stages, proved in ngspice, gap by gap.

    Exit codes: 0 all within tolerance, 1 a gap, 2 input refused, 3 the simulator could not answer,
    4 a bug in deckgen, 130 interrupted.
    """
    ctx.obj = {"verbose": verbose, "quiet": quiet}
    _set_up_log(verbose=verbose, log_file=log_file)
    _tell_platform()


def _tell_platform() -> None:
    """Where deckgen was never run, say so once."""
    if sys.platform == "darwin":
        log.info("macOS: not tested by the project, best effort")
    elif sys.platform != "linux":
        click.echo(f"deckgen: {sys.platform} is not supported; Linux is, macOS with luck", err=True)


def _set_up_log(*, verbose: bool, log_file: Path | None) -> None:
    log.setLevel(logging.DEBUG)
    for old in tuple(log.handlers):
        log.removeHandler(old)
        old.close()
    # Without a handler of ours Python prints errors, with their tracebacks, on stderr.
    log.addHandler(logging.StreamHandler(sys.stderr) if verbose else logging.NullHandler())
    if log_file is not None:
        try:
            handler = logging.FileHandler(log_file, encoding="utf-8")
        except OSError as error:
            raise click.BadParameter(f"{log_file}: {error.strerror}", param_hint="--log-file") from error
        handler.setFormatter(logging.Formatter("%(asctime)s %(levelname)s %(message)s"))
        log.addHandler(handler)


def main(arguments: Sequence[str] | None = None) -> None:
    """Run the command and leave with its exit code; no traceback for what a user does."""
    _prepare_streams()
    with _ended_like_an_interruption():
        code = _run(arguments)
    sys.exit(code)


def _prepare_streams() -> None:
    """Make sure that there is something to write to, and that no character stops the work."""
    if sys.stdout is None:
        sys.stdout = _nowhere()
    if sys.stderr is None:
        sys.stderr = _nowhere()
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, io.TextIOWrapper):
            stream.reconfigure(errors="backslashreplace")


def _nowhere() -> io.TextIOWrapper:
    return io.TextIOWrapper(Path(os.devnull).open("wb"), encoding="utf-8")


@contextmanager
def _ended_like_an_interruption() -> Iterator[None]:
    """Stop the simulators and tidy up also when asked to end, or when the terminal goes away."""
    held = {}
    try:
        for number in (signal.SIGTERM, signal.SIGHUP):
            if signal.getsignal(number) is signal.SIG_DFL:  # not under nohup
                held[number] = signal.signal(number, _interrupt)
        yield
    finally:
        for number, before in held.items():
            signal.signal(number, before)


def _interrupt(_number: int, _frame: FrameType | None) -> NoReturn:
    raise KeyboardInterrupt


def _run(arguments: Sequence[str] | None) -> int:
    _set_up_log(verbose=False, log_file=None)
    try:
        code = group.main(args=arguments, prog_name="deckgen", standalone_mode=False)
        sys.stdout.flush()
        return int(code or 0)
    except click.exceptions.Exit as stop:
        return stop.exit_code
    except click.ClickException as error:
        error.show()
        return int(ExitCode.INPUT)
    except (click.Abort, KeyboardInterrupt):
        return _interrupted()
    except BrokenPipeError:
        # Whoever read our output has had enough: no error.
        let_go(sys.stdout)
        return int(ExitCode.OK)
    except DeckgenError as error:
        tell(f"deckgen: {error}")
        return int(error.exit_code)
    except Exception as error:
        return _bug(error)


def _interrupted() -> int:
    from deckgen.simulator.process import stop_all

    stop_all()
    tell("deckgen: interrupted")
    return int(ExitCode.INTERRUPTED)


def _bug(error: Exception) -> int:
    """Tell in one line what happened and where; the traceback is for the log."""
    log.error("a bug in deckgen", exc_info=error)
    what = " ".join(f"{type(error).__name__}: {error}".split())
    place = traceback.extract_tb(error.__traceback__)[-1]
    where = f"{Path(place.filename).name}, line {place.lineno}"
    tell(f"deckgen: a bug in deckgen: {what} (at {where}; -v shows the whole traceback)")
    return int(ExitCode.BUG)
