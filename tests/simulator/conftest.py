"""Simulator tests need ngspice; without it they fail, they never skip."""

from __future__ import annotations

import pytest

from deckgen.simulator import Simulator, find


@pytest.fixture(scope="session")
def simulator() -> Simulator:
    """The ngspice that deckgen itself would use."""
    return find()
