"""Reader of physical lines: includes resolved, whatever could run a command dropped, every card placed.

ngspice carries out control blocks and ``*#`` lines wherever they stand: in included files, after ``.end``,
between ``.if (0)`` and ``.endif``, in any case, behind blanks. So every line is looked at, and of the dot
cards only those that describe a circuit are carried over.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence
from pathlib import Path

from deckgen.circuit.model import Origin
from deckgen.circuit.reader import without_comment as without_comment
from deckgen.source.files import FileError, Roots, read_lines
from deckgen.source.model import Card, Gathering, Line, Note, Source

CARRIED_OVER = frozenset(
    ".model .param .params .subckt .ends .if .elseif .else .endif .func .global .ic .nodeset .temp".split()
)
OPTIONS = frozenset({".option", ".options", ".opt"})
ANALYSES = frozenset(
    ".op .ac .dc .tran .noise .tf .pz .disto .sens .sp .pss .hb .four .meas .measure .print .plot .probe "
    ".save .width .title".split()
)
_INCLUDES = frozenset({".include", ".inc", ".incl"})
_EXECUTED = re.compile(r"\s*(\*\s*#|\.control)", re.IGNORECASE)
_BLOCK_START = re.compile(r"\s*\.control", re.IGNORECASE)
_BLOCK_END = re.compile(r"\s*\.endc", re.IGNORECASE)
_NOTE = re.compile(r"\s*\*\s*deckgen\s*:\s*(\S+)\s*(.*)", re.IGNORECASE)
_BRACKETED = re.compile(r"(?<=\s)([^\s=(){},'\";$]*-)\(([^\s=(){},'\";$]+)\)(?=\s|$)")
_DEEPEST = 24
_MOST_LINES = 2_000_000
_MOST_CHARACTERS = 64 * 2**20
_MOST_FILES = 10_000


def read_source(path: Path, *, include_roots: Sequence[Path] = (), shown: str | None = None) -> Source:
    """Read a deck file and all that it includes. Faults become problems, never exceptions."""
    file = shown or str(path)
    gathering = Gathering(files=[file])
    try:
        roots = Roots.of(path, include_roots)
        lines = read_lines(path, name=file)
    except FileError as refusal:
        gathering.problem(refusal.slug, Origin(file, 1), **refusal.parts)
        return finished(file, Line("", Origin(file, 1)), gathering)
    resolved = roots.own / path.name
    title = Line(lines[0] if lines else "", Origin(file, 1))
    if re.match(r"\s*\.(inc|lib)", title.text, re.IGNORECASE):
        # ngspice carries out an include on the title line.
        gathering.problem("include-on-title-line", title.origin)
    gathering.own_lines += [Line(text, Origin(file, number)) for number, text in enumerate(lines[1:], 2)]
    _Reader(roots, gathering).take(lines[1:], 2, file, resolved, (resolved,))
    return finished(file, title, gathering)


def finished(file: str, title: Line, gathering: Gathering) -> Source:
    """The frozen source; cards are joined from the lines that are carried over."""
    return Source(
        file=file,
        title=title,
        lines=tuple(gathering.lines),
        cards=tuple(join_cards(gathering.lines)),
        notes=tuple(gathering.notes),
        left_out=tuple(gathering.left_out),
        problems=tuple(gathering.problems),
        files=tuple(gathering.files),
        own_lines=tuple(gathering.own_lines),
    )


class _Reader:
    """Walks the lines of a file and of what it includes; one instance a deck."""

    def __init__(self, roots: Roots, gathering: Gathering) -> None:
        self._roots = roots
        self._out = gathering
        self._lines = self._characters = self._opened = 0
        self._renamed = False

    def _too_much(self, text: str) -> bool:
        """Count a line; whether that is more than can be read, however the files are nested."""
        self._lines += 1
        self._characters += len(text)
        return self._lines > _MOST_LINES or self._characters > _MOST_CHARACTERS or self._opened > _MOST_FILES

    def take(self, lines: Sequence[str], first: int, file: str, path: Path, stack: tuple[Path, ...]) -> None:
        """Sort the lines of one file: executed, left out, included, or carried over."""
        ended = False
        keep: list[Line] = []
        numbered = iter(enumerate(lines, start=first))
        for number, text in numbered:
            line = Line(text, Origin(file, number))
            if self._too_much(text):
                self._out.problem("too-many-lines", line.origin)
                return
            if _EXECUTED.match(text):
                self._drop_executed(line, numbered, file)
                continue
            note = _NOTE.match(text)
            if note:
                self._out.notes.append(Note(note[1].lower(), note[2].strip(), line.origin))
            if text.rstrip().endswith("\\") and not text.lstrip().startswith("*"):
                self._out.problem("line-ends-in-backslash", line.origin)
                continue
            word = first_word(text)
            if ended and word and not word.startswith("*"):
                self._out.problem("text-after-end", line.origin)
                ended = False
            keep = self._sort(line, word, keep, path, stack)
            ended = ended or word == ".end"

    def _drop_executed(self, line: Line, numbered: Iterator[tuple[int, str]], file: str) -> None:
        """A control block up to its end, or a ``*#`` line: never carried over."""
        dropped = [line]
        if _BLOCK_START.match(line.text):
            for number, text in numbered:
                dropped.append(Line(text, Origin(file, number)))
                if _BLOCK_END.match(text):
                    break
            else:
                self._out.problem("control-block-open", line.origin)
            self._out.problem("control-block", line.origin, lines=str(len(dropped)))
        else:
            self._out.problem("command-comment", line.origin)
        self._out.left_out.append(Card((line.text.split()[0].lower(),), tuple(dropped)))

    def _sort(
        self, line: Line, word: str, leaving: list[Line], path: Path, stack: tuple[Path, ...]
    ) -> list[Line]:
        """Carry a line over, or leave its card out; a continuation line goes where its card went.

        ``leaving`` holds the lines of the card that is being left out, if any; its new state is returned.
        """
        if word in ("", "*"):
            self._out.lines.append(line)  # blank and comment lines may stand inside a card
            return leaving
        line = self._without_brackets(line)
        if word == "+":
            if leaving:
                leaving.append(line)
                self._out.left_out[-1] = Card(self._out.left_out[-1].words, tuple(leaving))
            else:
                self._out.lines.append(line)
            return leaving
        if word in ANALYSES:
            self._out.left_out.append(Card(tuple(line.text.split()), (line,)))
            return [line]
        if word in _INCLUDES:
            self._include(line, path, stack)
        elif word in (".lib", ".endl"):
            self._library(line, word, path, stack)
        elif word == ".end":
            pass  # one .end of ours closes the deck
        elif word.startswith(".") and word not in CARRIED_OVER and word not in OPTIONS:
            self._out.problem("unknown-card", line.origin, card=word)
            self._out.left_out.append(Card(tuple(line.text.split()), (line,)))
            return [line]
        else:
            self._out.lines.append(line)
        return []

    def _without_brackets(self, line: Line) -> Line:
        """Nodes as some schematic editors name them, ``Net-(R1-Pad2)``, in a way that ngspice can read.

        ngspice cuts a name off at a parenthesis, and stops at the card of a transistor then.
        """
        if "-(" not in line.text or line.text.lstrip()[:1] in ".*":
            return line
        text = _BRACKETED.sub(r"\1_\2_", line.text)
        if text == line.text:
            return line
        found = _BRACKETED.search(line.text)
        if found and not self._renamed:
            self._renamed = True
            self._out.problem("node-renamed", line.origin, node=found[0], called=f"{found[1]}_{found[2]}_")
        return Line(text, line.origin)

    def _include(self, line: Line, path: Path, stack: tuple[Path, ...]) -> None:
        opened = self._open(_file_name(line.text), line, path, stack)
        if opened is not None:
            found, lines = opened
            self.take(lines, 1, self._roots.shown(found), found, (*stack, found))

    def _library(self, line: Line, word: str, path: Path, stack: tuple[Path, ...]) -> None:
        """``.lib file section`` brings in one section; ``.lib section`` … ``.endl`` marks one."""
        rest = _arguments(line.text)
        if word == ".endl" or len(rest) < 2:
            self._out.problem("library-section-stray", line.origin)
            return
        name, section = rest[0], rest[1].lower()
        opened = self._open(name, line, path, stack)
        if opened is None:
            return
        found, lines = opened
        span = _section(lines, section)
        if span is None:
            self._out.problem("library-section-missing", line.origin, name=name, section=section)
            return
        shown = self._roots.shown(found)
        self.take(lines[span[0] : span[1]], span[0] + 1, shown, found, (*stack, found))

    def _open(
        self, name: str, line: Line, path: Path, stack: tuple[Path, ...]
    ) -> tuple[Path, list[str]] | None:
        try:
            if not name:
                raise FileError("include-missing", name="(no file named)")
            found = self._roots.find(name, path)
            if len(stack) > _DEEPEST or (found in stack and first_word(line.text) in _INCLUDES):
                raise FileError("include-itself", name=name)
            lines = read_lines(found, name=name)
        except FileError as refusal:
            self._out.problem(refusal.slug, line.origin, **refusal.parts)
            return None
        self._opened += 1
        shown = self._roots.shown(found)
        if shown not in self._out.files:
            self._out.files.append(shown)
        return found, lines


def forbidden_lines(text: str) -> tuple[tuple[int, str], ...]:
    """Lines of a text, by number, that would run a command, bring in a file or end the deck early.

    Each with its first word. For text that goes to the simulator, where none may stand: ngspice stops
    reading, in silence, at a line that starts with ``@``.
    """
    found = []
    for number, line in enumerate(text.replace("\r\n", "\n").split("\n"), start=1):
        word = first_word(line)
        if _EXECUTED.match(line) or word in _INCLUDES or word in (".lib", ".endl") or word[:1] == "@":
            found.append((number, line.split()[0]))
        elif "\r" in line or (word != "*" and line.rstrip().endswith("\\")):
            found.append((number, "a line end of another kind"))
    return tuple(found)


def first_word(text: str) -> str:
    """First word of a line, lower case; a comment line gives ``*``, a continuation ``+``."""
    stripped = text.strip().lower()
    if not stripped or stripped[0] in "*+":
        return stripped[:1]
    return re.split(r"[\s=(]", stripped, maxsplit=1)[0]


def _arguments(text: str) -> list[str]:
    """Words behind the first, quoted ones whole."""
    found = re.findall(r'"([^"]*)"|\'([^\']*)\'|(\S+)', text.strip())
    return [next(part for part in parts if part) for parts in found if any(parts)][1:]


def _file_name(text: str) -> str:
    arguments = _arguments(text)
    return arguments[0] if arguments else ""


def _section(lines: Sequence[str], section: str) -> tuple[int, int] | None:
    """Index range of the lines of a library's section."""
    start: int | None = None
    for index, text in enumerate(lines):
        word = first_word(text)
        rest = _arguments(text) if word == ".lib" else []
        if start is None and word == ".lib" and len(rest) == 1 and rest[0].lower() == section:
            start = index + 1
        elif start is not None and word == ".endl":
            return start, index
    return None if start is None else (start, len(lines))


def join_cards(lines: Sequence[Line]) -> Iterator[Card]:
    """Logical cards of physical lines: continuation joined, comments taken off, words split."""
    words: list[str] = []
    parts: list[Line] = []
    for line in lines:
        body = without_comment(line.text).strip()
        if not body or body[0] in "*#$":
            continue
        if body.startswith("+"):
            if parts:
                words += split_words(body[1:])
                parts.append(line)
            continue
        if words:
            yield Card(tuple(words), tuple(parts))
        words, parts = split_words(body), [line]
    if words:
        yield Card(tuple(words), tuple(parts))


def split_words(body: str) -> list[str]:
    """Words of a card; braces and quotes hold expressions together, ``a = b`` becomes ``a=b``."""
    # The blanks are looked at from their first one only: a long row of them would take for ever.
    body = re.sub(r"(?<!\s)\s*=\s*", "=", body)
    return re.findall(r"(?:[^\s,(){}'\"]|\{[^}]*\}?|'[^']*'?|\"[^\"]*\"?)+|[()]", body)
