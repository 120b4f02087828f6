"""Whether feedback can give a network several operating points.

Each transistor is set to a state that it could be in: off, a conductance, a source controlled by the gate
from the source, or from the drain where it conducts backwards. The determinant of the network is a sum of
products of such states, one for each choice. If all products have the sign of the passive network, no two
voltages can solve the equations both, and there is one point at most (I. W. Sandberg, A. N. Willson, Some
theorems on properties of dc equations of nonlinear networks, Bell System Technical Journal 48, 1969, 1-34).
Two transistors close such a loop, with the others open or short (R. O. Nielsen, A. N. Willson, A fundamental
result concerning the topology of transistor circuits with multiple equilibria, Proc. IEEE 68(2), 1980,
196-208; both from memory). Up to four transistors all choices are tried, of more all pairs in a few
surroundings each: strong evidence, no proof.
"""

from __future__ import annotations

from functools import lru_cache
from itertools import combinations

import numpy as np

from deckgen.hand.dc.reduced import Reduced
from deckgen.hand.laws.base import Array, Indices

_ALL_CHOICES = 4  # transistors
_SURROUNDINGS = 120  # choices for all pairs together, and at least this many for each:
_FEWEST = 3
_LARGE = 1e3  # S, against which every part is small: it leaves the product alone
_BULK = 0.3  # gmb over gm
_STIFF = 1e9  # S at every port
_OFF, _CONDUCTS, _FORWARD, _BACKWARD = range(4)


def _state(drain: tuple[float, float, float, float]) -> Array:
    """Conductances of a device with this row for its drain current."""
    rows = np.zeros((4, 4))
    rows[0], rows[2] = drain, tuple(-value for value in drain)
    return rows


_STATES = np.stack(
    [
        np.zeros((4, 4)),
        _state((1.0, 0.0, -1.0, 0.0)),
        _state((0.0, 1.0, -1.0 - _BULK, _BULK)),
        _state((1.0 + _BULK, -1.0, 0.0, -_BULK)),
    ]
)


def has_gaining_loop(reduced: Reduced) -> bool:
    """Whether some choice of states turns the sign of the determinant of the linearized network."""
    choices = _choices(reduced.devices)
    matrix = reduced.jacobian(_LARGE * _STATES[choices]) + reduced.held[..., None]
    held = reduced.held + _STIFF * reduced.inject
    signs = np.linalg.slogdet(np.concatenate([held[None], matrix.transpose(2, 0, 1)]))[0]
    return bool((signs[1:] * signs[0] < 0.0).any())


@lru_cache(maxsize=32)
def _choices(devices: int) -> Indices:
    """States of all transistors, (choices, devices)."""
    if devices <= _ALL_CHOICES:
        return np.indices((len(_STATES),) * devices).reshape(devices, -1).T
    pairs = list(combinations(range(devices), 2))
    each = max(_SURROUNDINGS // len(pairs), _FEWEST)
    choices = np.random.default_rng(devices).integers(0, len(_STATES), (len(pairs) * each, devices))
    for number, pair in enumerate(pairs):
        rows = slice(number * each, (number + 1) * each)
        choices[rows, pair[0]] = choices[rows, pair[1]] = _FORWARD
    return choices
