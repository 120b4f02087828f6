"""Writes the generated blocks of README.md anew: what commands print, and tables that the code holds.

    .venv/bin/python scripts/readme.py           write README.md
    .venv/bin/python scripts/readme.py --check   only say which blocks are out of date

A block stands below a marker, and is found and replaced by it::

    <!-- output: deckgen topologies -->             the command, run in a folder that all commands share
    <!-- only: FIRST … LAST | TEXT | FIRST … -->    optional: from a line with FIRST to one with LAST, …
    <!-- table: exit-codes -->                      one of TABLES

A block that differs only in run times, versions of ngspice, timestamps or the sign of a zero is left as
it is.
"""

from __future__ import annotations

import argparse
import os
import re
import shlex
import shutil
import subprocess
import sys
import tempfile
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Literal

ROOT = Path(__file__).resolve().parent.parent
README = ROOT / "README.md"

LEFT_OUT = "   […]"
"""Stands for lines that a block does not show."""

_SECONDS = 120
_NOT_FOUND, _NOT_EXECUTABLE = 127, 126
_MARKER = re.compile(
    r"^<!-- (?P<kind>output|table): (?P<what>.*?) -->\n(?:<!-- only: (?P<only>.*?) -->\n)?"
    r"(?P<body>```console\n.*?^```\n|(?:\|[^\n]*\n)*)",
    re.DOTALL | re.MULTILINE,
)
_FIELD = re.compile(r"\{([\w\\]+)[^}]*\}")
_VARYING = (
    (re.compile(r"(?<=· )\d+\.\d+ s$", re.MULTILINE), "SECONDS"),
    (re.compile(r"\bngspice[ -]\d[\w.+-]*(?: · /\S+)?"), "ngspice VERSION"),
    (re.compile(r"\b\d{8}-\d{6}(?=-)"), "TIME"),
    (re.compile(r"[-+](0\.0+)(?![\d.])"), r"±\1"),
)


@dataclass(frozen=True, slots=True)
class Block:
    """A generated block as it stands in the text: what it shows, and where its body begins and ends."""

    kind: Literal["output", "table"]
    what: str
    only: str | None
    body: str
    start: int
    end: int


def blocks_of(text: str) -> tuple[Block, ...]:
    """All generated blocks of a text, in order."""
    return tuple(
        Block(
            kind="output" if found["kind"] == "output" else "table",
            what=found["what"],
            only=found["only"],
            body=found["body"],
            start=found.start("body"),
            end=found.end("body"),
        )
        for found in _MARKER.finditer(text)
    )


def normalised(body: str) -> str:
    """A body without what differs from run to run: seconds, version of ngspice, times, signs of zeros."""
    for pattern, stands_for in _VARYING:
        body = pattern.sub(stands_for, body)
    return body


def generated(blocks: Sequence[Block]) -> tuple[str, ...]:
    """The body that each block should have; the commands run in order, in one fresh folder."""
    with tempfile.TemporaryDirectory(prefix="deckgen-readme-") as place:
        shell = Shell(Path(place))
        return tuple(
            _console(block, shell) if block.kind == "output" else table(block.what) for block in blocks
        )


def renewed(text: str) -> str:
    """The text with every block that is out of date replaced."""
    blocks = blocks_of(text)
    for block, body in reversed(list(zip(blocks, generated(blocks), strict=True))):
        if normalised(body) != normalised(block.body):
            text = text[: block.start] + body + text[block.end :]
    return text


# --- output of commands ---------------------------------------------------------


class Shell:
    """Runs commands in a folder of its own that holds a copy of the demo library, without user settings."""

    def __init__(self, place: Path) -> None:
        programs, self._home, self._folder = place / "bin", place / "home", place / "tour"
        for folder in (programs, self._home, self._folder):
            folder.mkdir()
        deckgen = programs / "deckgen"
        deckgen.write_text(f'#!/bin/sh\nexec {shlex.quote(sys.executable)} -P -m deckgen "$@"\n')
        deckgen.chmod(0o755)
        shutil.copytree(ROOT / "stages", self._folder / "stages")
        self._environment = {
            **{name: value for name, value in os.environ.items() if name == "DECKGEN_NGSPICE"},
            "PATH": f"{programs}:{os.environ.get('PATH', os.defpath)}",
            "PYTHONPATH": str(ROOT),
            "HOME": str(self._home),
            "LC_ALL": "C.UTF-8",
            "COLUMNS": "80",
        }

    def output(self, command: str) -> str:
        """All that a command prints, to stdout and stderr; its exit code is its own affair."""
        answer = subprocess.run(
            ["bash", "-c", command],
            cwd=self._folder,
            env=self._environment,
            stdin=subprocess.DEVNULL,
            stdout=subprocess.PIPE,
            stderr=subprocess.STDOUT,
            timeout=_SECONDS,
            check=False,
        )
        text = answer.stdout.decode("utf-8")
        if answer.returncode in (_NOT_FOUND, _NOT_EXECUTABLE):
            raise RuntimeError(f"{command}: can't be run: {text}")
        return text


def _console(block: Block, shell: Shell) -> str:
    lines = [line.expandtabs().rstrip() for line in shell.output(block.what).strip("\n").split("\n")]
    if block.only is not None:
        lines = list(excerpt(lines, block.only))
    shown = "\n".join([f"$ {block.what}", *lines]).rstrip()
    return f"```console\n{shown}\n```\n"


def excerpt(lines: Sequence[str], only: str) -> Iterator[str]:
    """The lines that ``only`` asks for; a mark stands where lines are left out.

    Raises ValueError for a text that no further line holds.
    """
    at = 0
    for part in only.split(" | "):
        first, dots, last = (text.strip() for text in part.partition("…"))
        start = _line_with(first, lines, at) if first else at
        end = (_line_with(last, lines, start) if last else len(lines) - 1) if dots else start
        if start > at:
            yield LEFT_OUT
        yield from lines[start : end + 1]
        at = end + 1
    if any(lines[at:]):
        yield LEFT_OUT


def _line_with(text: str, lines: Sequence[str], start: int) -> int:
    for number in range(start, len(lines)):
        if text in lines[number]:
            return number
    printed = "\n".join(lines[start:])
    raise ValueError(f"no line with {text!r} is printed; there is:\n{printed}")


# --- tables ---------------------------------------------------------------------


def table(name: str) -> str:
    """A Markdown table of TABLES. Raises ValueError for another name."""
    if name not in TABLES:
        raise ValueError(f"{name!r} is no table; known: {', '.join(TABLES)}")
    head, *rows = TABLES[name]()
    lines = [head, ["---"] * len(head), *rows]
    return "".join(f"| {' | '.join(map(_cell, line))} |\n" for line in lines)


def _cell(text: str) -> str:
    return " ".join(text.split()).replace("|", "\\|")


def _code(text: str) -> str:
    return f"`{text}`"


Rows = Iterable[Sequence[str]]


def _commands() -> Rows:
    import click

    from deckgen.cli.main import group

    yield "command", "what it does"
    context = click.Context(group, info_name="deckgen")
    for name in group.list_commands(context):
        command = _found(group.get_command(context, name))
        inner = click.Context(command, info_name=name, parent=context)
        pieces = [piece for piece in command.collect_usage_pieces(inner) if piece != "[OPTIONS]"]
        yield _code(" ".join(["deckgen", name, *pieces])), command.get_short_help_str(400)


def _options() -> Rows:
    import click

    from deckgen.cli.main import group

    yield "command", "option", "what it does"
    context = click.Context(group, info_name="deckgen")
    yield from _option_rows("any, before the command", group, context)
    for name in group.list_commands(context):
        command = _found(group.get_command(context, name))
        inner = click.Context(command, info_name=name, parent=context)
        yield from _option_rows(_code(name), command, inner)


def _option_rows(label: str, command: Any, context: Any) -> Rows:
    for parameter in command.get_params(context):
        record = parameter.get_help_record(context)
        if record is None or parameter.param_type_name != "option" or "--help" in parameter.opts:
            continue
        # A range of numbers is no name for a number.
        yield label, _code(re.sub(r" (?:INTEGER|FLOAT) RANGE", " N", record[0])), record[1]
        label = ""


def _found(command: Any) -> Any:
    if command is None:
        raise LookupError("a command that is listed but not there")
    return command


def _exit_codes() -> Rows:
    from deckgen.errors import ExitCode, Outcome
    from deckgen.report.wording import EXIT_MEANING

    yield "exit code", "meaning"
    failures = [str(outcome) for outcome in Outcome if outcome.exit_code is ExitCode.SIMULATOR]
    meanings = {**EXIT_MEANING, ExitCode.INTERRUPTED: "interrupted"}
    meanings[ExitCode.SIMULATOR] += f". The outcome says how: {', '.join(failures)}"
    for code in ExitCode:
        yield str(int(code)), meanings[code]


def _assumptions() -> Rows:
    from deckgen.assumptions import ASSUMPTIONS

    yield "slug", "assumption", "what it means", "paper", "full"
    for each in ASSUMPTIONS.values():
        sets = ("yes" if made else "" for made in (each.paper, each.full))
        yield _code(each.slug), each.name, each.meaning, *sets


def _tolerances() -> Rows:
    from deckgen.quantities import KINDS

    yield "quantity", "what it is", "unit", "paper set", "full set"
    of = {"transistor": "(M1)", "node": "(node)", "stage": ""}
    for kind in KINDS.values():
        limits = (_limit(limit, kind.unit) for limit in (kind.paper, kind.full))
        yield _code(kind.name + of[kind.scope]), kind.label, kind.unit, *limits


def _limit(limit: Any, unit: str) -> str:
    from deckgen.units import format_value

    ways = []
    if limit.db is not None:
        ways.append(format_value(limit.db, "dB"))
    if limit.relative is not None:
        ways.append(format_value(limit.relative, "%"))
    if limit.absolute is not None:
        ways.append(format_value(limit.absolute, unit))
    if limit.of_supply is not None:
        ways.append(f"{format_value(limit.of_supply, '%')} of the supply")
    return " or ".join(ways)


def _findings() -> Rows:
    from deckgen.findings.table import TABLE

    yield "slug", "severity", "text"
    for slug, entry in TABLE.items():
        yield _code(slug), str(entry.severity), _pattern(entry.text)


def _pattern(text: str) -> str:
    """A format string as Markdown: what is filled in stands in italics, in code in capitals."""
    prose, code = text.split("`")[::2], text.split("`")[1::2]
    escaped = [re.sub(r"([*_<])", r"\\\1", piece) for piece in prose]
    shown = [_FIELD.sub(lambda field: f"*{field[1]}*", piece) for piece in escaped]
    shown_code = [_code(_FIELD.sub(lambda field: field[1].upper(), piece)) for piece in code]
    return "".join(piece for pair in zip(shown, [*shown_code, ""], strict=True) for piece in pair)


_SECTIONS = {
    "models": "[models.NAME]",
    "transistors": "[transistors.M1]",
    "claims": "[claims]",
    "known_gap": "[known_gap.QUANTITY]",
    "ratings": "[ratings.PART]",
}
_FREE_KEYS = {"parts": "each part's name", "tolerance": "a kind or a quantity"}


def _stage_file() -> Rows:
    from deckgen.stage.schema import StageFile, StageSchema

    yield "section", "key", "what it says"
    schema = StageFile.model_json_schema(schema_generator=StageSchema)
    for name, entry in schema["properties"].items():
        section = _section(entry, schema["$defs"])
        if section is not None:
            label = _code(_SECTIONS.get(name, f"[{name}]"))
            for key, value in section["properties"].items():
                yield label, _need(key, section), _meaning(value)
                label = ""
        elif name in _FREE_KEYS:
            yield _code(f"[{name}]"), _FREE_KEYS[name], entry["description"]
        else:
            yield "top of the file", _need(name, schema), entry["description"]


def _need(key: str, section: Mapping[str, Any]) -> str:
    return f"**{_code(key)}**" if key in section.get("required", ()) else _code(key)


def _meaning(value: Mapping[str, Any]) -> str:
    choices = ", ".join(f'"{choice}"' for choice in value.get("enum", ()))
    text = str(value["description"])
    return f"{text}: {choices}" if choices and choices.partition(",")[0] not in text else text


def _section(entry: Mapping[str, Any], definitions: Mapping[str, Any]) -> Mapping[str, Any] | None:
    """The table that a property of the schema is, or holds under names of the user's; None if it is none."""
    inner = entry.get("additionalProperties")
    inside = [entry, *entry.get("patternProperties", {}).values()]
    inside += [inner, *inner.get("anyOf", ())] if isinstance(inner, dict) else []
    for each in inside:
        if "$ref" in each:
            found: Mapping[str, Any] = definitions[each["$ref"].rpartition("/")[2]]
            return found
    return None


TABLES: dict[str, Callable[[], Rows]] = {
    "commands": _commands,
    "options": _options,
    "exit-codes": _exit_codes,
    "assumptions": _assumptions,
    "tolerances": _tolerances,
    "findings": _findings,
    "stage-file": _stage_file,
}


def main() -> int:
    """Renew README.md, or with ``--check`` say what is out of date and return 1."""
    parser = argparse.ArgumentParser(description="Write the generated blocks of README.md anew.")
    parser.add_argument("--check", action="store_true", help="write nothing; exit 1 if any is out of date")
    check = parser.parse_args().check
    old = README.read_text(encoding="utf-8")
    new = renewed(old)
    stale = [
        before.what
        for before, after in zip(blocks_of(old), blocks_of(new), strict=True)
        if before.body != after.body
    ]
    for what in stale:
        print(f"{'out of date' if check else 'renewed'}: {what.partition(chr(10))[0]}")
    if not check and new != old:
        README.write_text(new, encoding="utf-8")
    return 1 if check and stale else 0


if __name__ == "__main__":
    sys.exit(main())
