"""Which ngspice runs: the one ``DECKGEN_NGSPICE`` names, else the one on PATH."""

from __future__ import annotations

import os
import re
import shutil
import tempfile
from collections.abc import Mapping
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path

from deckgen.errors import Outcome, SimulatorError
from deckgen.simulator.process import limited, run_to_end

VARIABLE = "DECKGEN_NGSPICE"
_REMEDY = f"install the Debian package ngspice, or set {VARIABLE} to the program"
_VERSION = re.compile(r"\bngspice-(\d[\w.+-]*)")
_SECONDS = 10.0
_LONGEST_ANSWER = 65_536
_MEMORY = 2**31


@dataclass(frozen=True, slots=True)
class Simulator:
    """A simulator that answered: its name, its version in its own words, its absolute path."""

    name: str
    version: str
    path: str


def find(environment: Mapping[str, str] | None = None) -> Simulator:
    """Find the simulator to use. ``SimulatorError`` says what is wrong and what to do."""
    environment = os.environ if environment is None else environment
    path = _path(environment)
    status = path.stat()
    return _ask(str(path), status.st_mtime_ns, status.st_size, environment.get("PATH", os.defpath))


def _missing(meaning: str, *said: str) -> SimulatorError:
    return SimulatorError(Outcome.SIMULATOR_MISSING, meaning, said)


def _path(environment: Mapping[str, str]) -> Path:
    wanted = environment.get(VARIABLE, "")
    search = environment.get("PATH", os.defpath)
    if not wanted:
        found = shutil.which("ngspice", path=search)
        if found is None:
            raise _missing(f"no ngspice on PATH; {_REMEDY}")
        return Path(found).absolute()
    found = shutil.which(wanted, path=search)
    if found is not None:
        return Path(found).absolute()
    if not Path(wanted).exists():
        raise _missing(f"{VARIABLE} names {wanted!r}, which does not exist; correct it, or {_REMEDY}")
    if Path(wanted).is_dir():
        raise _missing(f"{VARIABLE} names {wanted!r}, a folder; name the program in it")
    raise _missing(f"{VARIABLE} names {wanted!r}, which is not executable; make it so, or {_REMEDY}")


@lru_cache(maxsize=32)
def _ask(path: str, _changed: int, _size: int, search: str) -> Simulator:
    """Ask the program for its version, once as long as its file doesn't change."""
    with tempfile.TemporaryDirectory(prefix="deckgen-") as folder, tempfile.TemporaryFile() as answer:
        try:
            ended = run_to_end(
                limited(
                    (path, "--version"),
                    memory_bytes=_MEMORY,
                    file_bytes=_LONGEST_ANSWER,
                    processor_seconds=_SECONDS,
                ),
                folder=Path(folder),
                environment={"PATH": search, "HOME": folder, "LC_ALL": "C"},
                stdout=answer,
                stderr=answer,
                seconds=_SECONDS,
            )
        except OSError as error:
            raise _missing(f"{path} can't be started ({error.strerror}); {_REMEDY}") from error
        answer.seek(0)
        text = answer.read(_LONGEST_ANSWER).decode("utf-8", "replace")
    if ended.timed_out:
        raise _missing(f"{path} did not tell its version within {_SECONDS:g} s; {_REMEDY}")
    version = _VERSION.search(text)
    if version is None:
        said = next((line.strip() for line in text.splitlines() if line.strip()), "")
        raise _missing(f"{path} is not an ngspice; {_REMEDY}", *([said[:200]] if said else []))
    return Simulator(name="ngspice", version=version.group(1), path=path)
