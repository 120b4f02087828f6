"""Findings about the lines and files of a deck."""

from __future__ import annotations

from deckgen.comparison import Severity
from deckgen.findings.entry import Entry

_R, _W, _N = Severity.REFUSED, Severity.WARNING, Severity.NOTE

SOURCE_ENTRIES: dict[str, Entry] = {
    "title-swallows-card": Entry(
        _R,
        "line 1 is always the title, so {card} is not part of the circuit. Put a title line above it",
    ),
    "include-on-title-line": Entry(
        _R,
        "line 1 is the title, yet ngspice carries out an include there; it was left out, and what it brings "
        "is missing. Put a title line above it",
    ),
    "text-after-end": Entry(
        _W,
        "lines behind .end are part of the circuit all the same, for ngspice as for deckgen. Move .end to "
        "the end, or remove the lines",
    ),
    "control-block": Entry(
        _N,
        "a control block of {lines} lines was left out{more}: no command of a deck ever runs, and deckgen "
        "adds analyses of its own",
    ),
    "control-block-alters": Entry(
        _W,
        "the control block changes the circuit ({command}), and no command of a deck ever runs: everything "
        "here holds for the circuit as the cards have it. Write the changed values into the cards",
    ),
    "control-block-open": Entry(
        _R,
        "this .control has no .endc: all lines down to the end of the file count as commands and were left "
        "out. Close the block with .endc",
    ),
    "command-comment": Entry(
        _W,
        "ngspice carries out a comment that starts with *# as a command; it was left out{more}. Remove it, "
        "or write it as a plain * comment",
    ),
    "node-renamed": Entry(
        _N,
        "nodes such as {node} are called {called} here, because ngspice cuts names off at a parenthesis. "
        "Notes and claims need the new name",
    ),
    "analysis-left-out": Entry(
        _N, "{card} was left out{more}: deckgen adds analyses, saves and prints of its own"
    ),
    "unknown-card": Entry(
        _W,
        "ngspice knows no {card} card and stops there; it was left out, and nothing of what it means is in "
        "the result. Remove it, or say it with a card that ngspice knows",
    ),
    "line-ends-in-backslash": Entry(
        _R,
        "a line that ends in a backslash was left out: whether it goes on in the next one depends on the "
        "simulator. Start the next line with + instead",
    ),
    "too-many-lines": Entry(
        _R, "the deck, with all that it includes, has more lines than can be read. Include less"
    ),
    "include-missing": Entry(
        _R,
        "the file {name} is not there, so what it holds is missing from the circuit. Correct its name; it "
        "is looked for beside the file that names it, then beside the deck, then in the include roots",
    ),
    "include-outside": Entry(
        _R,
        "the file {name} lies outside the deck's folder and was not opened. Copy it into the folder, or "
        "declare its folder with --include-root or DECKGEN_INCLUDE_ROOTS",
    ),
    "include-itself": Entry(
        _R,
        "the file {name} includes itself, directly or through others, or files are nested too deep; it was "
        "not opened again. Remove one of the includes",
    ),
    "library-section-missing": Entry(
        _R,
        "the library {name} has no section {section}, so its models are missing. Correct the name of the "
        "section",
    ),
    "library-section-stray": Entry(
        _R,
        "this .lib or .endl stands where ngspice stops at it. Write `.lib FILE SECTION` to bring in a "
        "section, .include for a file without sections",
    ),
    "not-a-file": Entry(_R, "{name} is no regular file and was not read. Name a text file"),
    "file-too-large": Entry(
        _R, "{name} has more than {limit} and was not read. Include only what the circuit needs"
    ),
    "file-unreadable": Entry(_R, "{name} can't be read ({why}). Correct its name or its permissions"),
    "utf-16": Entry(
        _R, "{name} is UTF-16 text, in which ngspice finds no circuit and says nothing. Save it as UTF-8"
    ),
    "nul-bytes": Entry(
        _R, "{name} holds NUL bytes, at which ngspice cuts lines off. It is no text file: export it again"
    ),
    "cr-line-ends": Entry(
        _R,
        "{name} has lines that end in CR alone: for ngspice they are one line, and that is the title. Save "
        "it with LF or CRLF line ends",
    ),
    "note-unknown": Entry(
        _W,
        "there is no note `deckgen: {keyword}`, and it changes nothing{hint}. Correct or remove it",
    ),
}
