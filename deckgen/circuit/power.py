"""Supply power, by the one definition that hand and simulated values share."""

from __future__ import annotations

import math
from collections.abc import Callable

from deckgen.circuit.model import Circuit, CurrentSource, VoltageSource


def delivered(
    circuit: Circuit, *, volts: Callable[[str], float], amperes: Callable[[str], float]
) -> tuple[tuple[VoltageSource | CurrentSource, float], ...]:
    """Power that each independent source delivers [W], below zero for one that absorbs.

    ``volts`` gives the voltage of a node, ``amperes`` the current that flows through a voltage source from
    its first node to its second.
    """
    powers: list[tuple[VoltageSource | CurrentSource, float]] = []
    for element in circuit.elements:
        if isinstance(element, VoltageSource):
            powers.append((element, -element.dc * amperes(element.name)))
        elif isinstance(element, CurrentSource):
            first, second = element.nodes
            powers.append((element, element.dc * (volts(second) - volts(first))))
    return tuple(powers)


def supply_power(
    circuit: Circuit, *, volts: Callable[[str], float], amperes: Callable[[str], float]
) -> float:
    """Psupply [W]: what the sources that deliver deliver.

    A current source that sinks a bias current stands for a transistor: what it absorbs is turned into heat,
    not given back.
    """
    return math.fsum(max(power, 0.0) for _, power in delivered(circuit, volts=volts, amperes=amperes))
