"""Placeholder of the graph findings, to be overwritten by the one who builds them."""

from collections.abc import Mapping

from deckgen.circuit.model import Circuit
from deckgen.comparison import Finding


def graph_findings(circuit: Circuit) -> tuple[Finding, ...]:
    """None yet."""
    return ()


def polarity_findings(
    circuit: Circuit, voltages: Mapping[str, float], polarised: frozenset[str]
) -> tuple[Finding, ...]:
    """None yet."""
    return ()


def bulk_findings(circuit: Circuit, voltages: Mapping[str, float]) -> tuple[Finding, ...]:
    """None yet."""
    return ()
