"""Unit tests can't start a process: whoever tries gets a failure that names the call."""

from __future__ import annotations

import os
import subprocess
from collections.abc import Callable
from typing import Any

import pytest

_STARTERS = ("fork", "forkpty", "posix_spawn", "posix_spawnp", "system", "popen", "execv", "execve")


def _refuse(name: str) -> Callable[..., Any]:
    def refuse(*args: object, **_: object) -> None:
        pytest.fail(f"a unit test may not start a process: {name}{args!r}")

    return refuse


@pytest.fixture(autouse=True)
def _no_process(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(subprocess, "Popen", _refuse("subprocess.Popen"))
    for name in _STARTERS:
        monkeypatch.setattr(os, name, _refuse(f"os.{name}"))
