"""The folder of evidence that a run leaves: enough to repeat it and to see what was compared.

The simulator's own files (deck, raw file, output, start-up file) are laid in by the runner; here come
the stage file, the comparison and the record of versions and hashes.
"""

from __future__ import annotations

import contextlib
import hashlib
import json
import re
import secrets
import shutil
import tempfile
from collections.abc import Iterator, Mapping
from datetime import datetime
from pathlib import Path
from typing import Any

from deckgen.errors import OutputError

RECORD = "run.json"
COMPARISON = "comparison.json"
_LONGEST_NAME = 80
_MOST_TWINS = 10_000


@contextlib.contextmanager
def run_folder(parent: Path | None, name: str, *, now: datetime) -> Iterator[Path]:
    """A fresh folder for one run: below ``parent``, or for None a temporary one that goes away again.

    An interrupted run leaves none: half of one is no evidence. Raises OutputError where it can't be made.
    """
    folder = _temporary_folder() if parent is None else new_folder(parent, name, now=now)
    keep = parent is not None
    try:
        yield folder
    except KeyboardInterrupt:
        keep = False
        raise
    finally:
        if not keep:
            shutil.rmtree(folder, ignore_errors=True)


def _temporary_folder() -> Path:
    try:
        return Path(tempfile.mkdtemp(prefix="deckgen-"))
    except OSError as error:
        raise OutputError(f"no temporary folder can be made ({error.strerror}); set TMPDIR") from error


def new_folder(parent: Path, name: str, *, now: datetime) -> Path:
    """A folder ``<time>-<name>`` that did not exist before; two runs at once get two folders.

    Raises OutputError where it can't be made.
    """
    safe = re.sub(r"[^A-Za-z0-9_.-]+", "-", name).strip(".-")[:_LONGEST_NAME] or "stage"
    base = f"{now:%Y%m%d-%H%M%S}-{safe}"
    try:
        parent.mkdir(parents=True, exist_ok=True)
        for twin in range(1, _MOST_TWINS):
            folder = parent / (base if twin == 1 else f"{base}-{twin}")
            try:
                folder.mkdir()
            except FileExistsError:
                continue
            return folder
    except OSError as error:
        raise OutputError(f"{parent}: no run folder can be made there ({error.strerror})") from error
    raise OutputError(f"{parent}: {_MOST_TWINS} run folders named {base} already; clear some away")


def write_atomically(path: Path, text: str) -> None:
    """Replace a file as a whole, or leave it as it was. Raises OutputError."""
    temporary = path.with_name(f".{path.name}.{secrets.token_hex(6)}")
    try:
        with temporary.open("x", encoding="utf-8") as file:
            file.write(text)
        temporary.replace(path)
    except OSError as error:
        with contextlib.suppress(OSError):  # the first error is the one to report
            temporary.unlink(missing_ok=True)
        raise OutputError(f"{path}: can't be written ({error.strerror})") from error


def hash_of(data: bytes) -> str:
    """SHA-256, hexadecimal."""
    return hashlib.sha256(data).hexdigest()


def hashes_in(folder: Path) -> dict[str, str]:
    """SHA-256 of every file below a run folder, by path relative to it."""
    files = sorted(path for path in folder.rglob("*") if path.is_file())
    return {path.relative_to(folder).as_posix(): hash_of(path.read_bytes()) for path in files}


def write_record(folder: Path, record: Mapping[str, Any]) -> None:
    """Write ``run.json``: versions, temperature, how it ended, and the hash of every other file."""
    try:
        whole = {**record, "files": hashes_in(folder)}
    except OSError as error:
        raise OutputError(f"{folder}: can't be read ({error.strerror})") from error
    write_atomically(folder / RECORD, json.dumps(whole, indent=2, ensure_ascii=False) + "\n")
