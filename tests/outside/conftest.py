"""Outside tests hold deckgen against what the project didn't make; a program that is missing is a failure."""

from __future__ import annotations

import pytest

from deckgen.simulator import Simulator, find


@pytest.fixture(scope="session")
def simulator() -> Simulator:
    """The ngspice that deckgen itself would use."""
    return find()
