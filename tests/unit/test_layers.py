"""The layer of unit tests holds itself to its rule."""

from __future__ import annotations

import os
import subprocess
from collections.abc import Callable

import pytest


@pytest.mark.parametrize(
    "start",
    [
        lambda: subprocess.run(["true"], check=True),
        lambda: os.system("true"),
        lambda: os.posix_spawn("/bin/true", ["true"], {}),
        lambda: os.fork(),
    ],
    ids=["subprocess", "system", "posix_spawn", "fork"],
)
def test_a_unit_test_that_starts_a_process_fails(start: Callable[[], object]) -> None:
    with pytest.raises(pytest.fail.Exception, match="may not start a process"):
        start()
