"""Findings as notes, the same in every report."""

from __future__ import annotations

from typing import Any

from deckgen.report.blocks import Note, Tone

_TONES = {"refused": Tone.FAIL, "warning": Tone.DOUBT}


def finding_note(finding: dict[str, Any], stage_file: str) -> Note:
    """Write a finding: its place, unless that is the stage file as a whole, its text and its slug."""
    file, line, subject, text = (finding[key] for key in ("file", "line", "subject", "text"))
    place = [] if file in (None, stage_file) else [file]
    if line is not None:
        place.append(f"line {line}")
    if subject is not None and subject.lower() not in text.lower():
        place.append(subject)
    prefix = f"{', '.join(place)}: " if place else ""
    return Note(
        finding["severity"],
        f"{prefix}{text} [{finding['slug']}]",
        _TONES.get(finding["severity"], Tone.PLAIN),
    )
