"""Our formulas called with symbols, and small-signal circuits drawn with the same symbols."""

from __future__ import annotations

from typing import Any

import sympy as sp

from deckgen.hand.formulas.gain import parallel
from tests.outside.kirchhoff import Device, Network


class Positive(sp.Symbol):
    """A positive symbol that functions of ``math`` take for a finite number."""

    def __new__(cls, name: str) -> Positive:
        return super().__new__(cls, name, positive=True)

    def __float__(self) -> float:
        return 1.0


BULKS = ("rail", "source")

GM, GMB, RO = Positive("gm"), Positive("gmb"), Positive("ro")
R_D, R_S, R_G, R_F, R_INTO, R_L, R_SIG = map(Positive, ("r_d", "r_s", "r_g", "r_f", "r_into", "r_l", "r_sig"))
ONE, QUIET = sp.Integer(1), sp.Integer(0)


def by_formula(formula: Any, **given: Any) -> Any:
    """What one of our functions returns for symbols, its arguments replaced by expressions afterwards."""
    symbols = {name: Positive(name) for name in formula.domains}
    answer = sp.nsimplify(formula.__wrapped__(**symbols), rational=True)
    return answer.subs({symbols[name]: value for name, value in given.items()}, simultaneous=True)


def shunt(*resistances: Any) -> Any:
    """Resistances in parallel, by our function."""
    places = tuple(Positive(f"p{i}") for i in range(len(resistances)))
    answer = sp.nsimplify(parallel.__wrapped__(*places), rational=True)
    return answer.subs(dict(zip(places, resistances, strict=True)), simultaneous=True)


def same(one: Any, other: Any) -> bool:
    return bool(sp.cancel(sp.together(one - other)) == 0)


def network(*resistors: tuple[str, str, Any], bulk: str = "rail", **nodes: str) -> Network:
    """A transistor at d, g and s, unless ``nodes`` puts a terminal elsewhere."""
    at = {"drain": "d", "gate": "g", "source": "s"} | nodes
    return Network(
        Device(**at, bulk=at["source"] if bulk == "source" else "0", gm=GM, gmb=GMB, gds=1 / RO), resistors
    )


def ratio(circuit: Network, entry: str, leave: str, *quiet: str) -> Any:
    """Gain from a node that is held to another, the ``quiet`` ones at signal ground."""
    return circuit.solved(held={entry: ONE} | dict.fromkeys(quiet, QUIET))[leave]


def into(circuit: Network, node: str, *quiet: str) -> Any:
    return circuit.resistance(node, held=dict.fromkeys(quiet, QUIET))
