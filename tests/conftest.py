"""What all tests share: the counts of property tests, short by default and long under DECKGEN_SOAK=1."""

from __future__ import annotations

import os
from collections.abc import Callable
from pathlib import Path

import pytest
from hypothesis import settings

SOAK = os.environ.get("DECKGEN_SOAK") == "1"

settings.register_profile("short", max_examples=100, deadline=None, derandomize=True)
settings.register_profile("soak", max_examples=5000, deadline=None)
settings.load_profile("soak" if SOAK else "short")


@pytest.fixture(scope="session")
def count() -> Callable[[int, int], int]:
    """``count(short, long)``: how often to repeat, in ``make test`` and in ``make soak``."""

    def choose(short: int, long: int) -> int:
        return long if SOAK else short

    return choose


@pytest.fixture(scope="session")
def project() -> Path:
    """The folder of the checkout."""
    return Path(__file__).resolve().parent.parent
