"""What a small extra drain current of every transistor does to a bias point, to first order.

A nodal matrix of our own in plain numpy: resistors, sources, and gm and gmb of transistors that are
saturated at λ = 0, where they have no output conductance. It shares no code with the hand analysis.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from deckgen.circuit.model import Capacitor, Circuit, CurrentSource, Mosfet, Resistor, VoltageSource, display


def current_shifts(
    circuit: Circuit, bias: Mapping[str, float], extra: Mapping[str, float]
) -> dict[str, float]:
    """Relative changes of ID by transistor, for relative ``extra`` currents that leave the voltages alone.

    ``bias`` has ID, gm and gmb of each transistor, as ``ID(M1)``. A current pushed through the channel
    moves the nodes, which move all currents: one linear solve.
    """
    sources = [e for e in circuit.elements if isinstance(e, VoltageSource)]
    at = {node: i for i, node in enumerate((*circuit.nodes, *(f"i({s.name})" for s in sources)))}
    matrix, side = np.zeros((len(at), len(at))), np.zeros(len(at))

    def add(row: str, column: str, value: float) -> None:
        if row in at and column in at:
            matrix[at[row], at[column]] += value

    for element in circuit.elements:
        if isinstance(element, Resistor):
            a, b = element.nodes
            for row, column, sign in ((a, a, 1.0), (b, b, 1.0), (a, b, -1.0), (b, a, -1.0)):
                add(row, column, sign / element.value)
        elif isinstance(element, VoltageSource):
            for node, sign in zip(element.nodes, (1.0, -1.0), strict=True):
                add(node, f"i({element.name})", sign)
                add(f"i({element.name})", node, sign)
        elif isinstance(element, Mosfet):
            name, (d, g, s, b) = display(element.name), element.nodes
            gm, gmb = bias[f"gm({name})"], bias[f"gmb({name})"]
            for node, sign in ((d, 1.0), (s, -1.0)):
                for control, conductance in ((g, gm), (b, gmb), (s, -gm - gmb)):
                    add(node, control, sign * conductance)
                if node in at:
                    side[at[node]] -= sign * _sign(circuit, element) * extra[name] * bias[f"ID({name})"]
        else:
            assert isinstance(element, Capacitor | CurrentSource), element
    moved = dict(zip(at, np.linalg.solve(matrix, side), strict=True)) | {"0": 0.0}
    shifts = {}
    for device in circuit.transistors:
        name, (_, g, s, b) = display(device.name), device.nodes
        gm, gmb = bias[f"gm({name})"], bias[f"gmb({name})"]
        inner = gm * (moved[g] - moved[s]) + gmb * (moved[b] - moved[s])
        shifts[name] = extra[name] + _sign(circuit, device) * inner / bias[f"ID({name})"]
    return shifts


def _sign(circuit: Circuit, device: Mosfet) -> float:
    return 1.0 if circuit.model(device.model).kind == "nmos" else -1.0
