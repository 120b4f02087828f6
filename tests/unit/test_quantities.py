"""Names, units and default tolerances of every quantity: the table that verdicts stand on."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from deckgen.quantities import KINDS, Limit, Quantity, parse_quantity

# Default tolerances, paper and full set: relative, absolute, dB, share of the supply.
DEFAULTS = {
    "ID": ((0.10, 1e-9, None, None), (1e-3, 1e-9, None, None)),
    "Psupply": ((0.10, 1e-9, None, None), (1e-3, 1e-9, None, None)),
    "VGS": ((0.05, 20e-3, None, None), (1e-3, 1e-3, None, None)),
    "VTH": ((0.05, 20e-3, None, None), (1e-3, 1e-3, None, None)),
    "VOV": ((0.05, 20e-3, None, None), (1e-3, 1e-3, None, None)),
    "VDS": ((0.05, None, None, 0.02), (1e-3, 1e-3, None, None)),
    "V": ((0.05, None, None, 0.02), (1e-3, 1e-3, None, None)),
    "gm": ((0.10, 1e-9, None, None), (1e-3, 1e-9, None, None)),
    "gmb": ((0.10, 1e-9, None, None), (1e-3, 1e-9, None, None)),
    "gds": ((0.25, 1e-9, None, None), (1e-3, 1e-9, None, None)),
    "Av": ((None, None, 1.0, None), (None, None, 0.02, None)),
    "Av.phase": ((None, 5.0, None, None), (None, 0.2, None, None)),
    "Rm": ((None, None, 1.0, None), (None, None, 0.02, None)),
    "Rm.phase": ((None, 5.0, None, None), (None, 0.2, None, None)),
    "Avi": ((None, None, 1.0, None), (None, None, 0.02, None)),
    "Rin": ((0.10, None, None, None), (2e-3, None, None, None)),
    "Rout": ((0.15, None, None, None), (2e-3, None, None, None)),
    "fL": ((0.25, None, None, None), (2e-3, None, None, None)),
    "fH": ((0.25, None, None, None), (2e-3, None, None, None)),
}
UNITS = {
    "A": {"ID"},
    "V": {"VGS", "VDS", "VTH", "VOV", "V"},
    "S": {"gm", "gds", "gmb"},
    "W": {"Psupply"},
    "V/V": {"Av", "Avi"},
    "deg": {"Av.phase", "Rm.phase"},
    "Ω": {"Rm", "Rin", "Rout"},
    "Hz": {"fL", "fH"},
}


def test_the_first_kinds_and_their_order_are_a_contract() -> None:
    order = ["ID", "VGS", "VDS", "VTH", "VOV", "gm", "gds", "gmb", "V", "Psupply", "Av", "Av.phase"]
    assert list(KINDS)[:19] == [*order, "Rm", "Rm.phase", "Avi", "Rin", "Rout", "fL", "fH"]
    assert all(kind.name == name for name, kind in KINDS.items())


@pytest.mark.parametrize("name", DEFAULTS)
def test_default_tolerances_are_those_that_are_published(name: str) -> None:
    for limit, expected in zip((KINDS[name].paper, KINDS[name].full), DEFAULTS[name], strict=True):
        found = (limit.relative, limit.absolute, limit.db, limit.of_supply)
        assert found == tuple(None if e is None else pytest.approx(e, rel=1e-12) for e in expected)


def test_units_scopes_and_sorts_of_every_kind() -> None:
    for unit, names in UNITS.items():
        assert {KINDS[name].unit for name in names} == {unit}
    assert {n for n, k in KINDS.items() if k.scope == "transistor"} >= {"ID", "VGS", "gm", "gds", "gmb"}
    assert KINDS["V"].scope == "node"
    small = {n for n in DEFAULTS if KINDS[n].small_signal}
    gains = {"Av", "Av.phase", "Rm", "Rm.phase", "Avi"}
    assert small == {"gm", "gds", "gmb", *gains, "Rin", "Rout", "fL", "fH"}
    assert {n for n in DEFAULTS if KINDS[n].ratio} == {"Av", "Rm", "Avi"}
    turning = {n: KINDS[n].modulo for n in DEFAULTS if KINDS[n].modulo is not None}
    assert turning == {"Av.phase": 360.0, "Rm.phase": 360.0}


def test_every_kind_has_some_tolerance_in_either_set_and_the_full_one_is_tighter() -> None:
    for kind in KINDS.values():
        for limit in (kind.paper, kind.full):
            assert limit != Limit()
        for measure in ("relative", "db"):
            paper, full = getattr(kind.paper, measure), getattr(kind.full, measure)
            assert paper is None or full is None or full < paper, kind.name


@pytest.mark.parametrize(
    ("text", "kind", "of", "written"),
    [
        ("ID(M1)", "ID", "M1", "ID(M1)"),
        ("gm(m1)", "gm", "M1", "gm(M1)"),
        (" gds(M1@X1) ", "gds", "M1@X1", "gds(M1@X1)"),
        ("V(OUT)", "V", "out", "V(out)"),
        ("V(x1.d)", "V", "x1.d", "V(x1.d)"),
        ("Av", "Av", None, "Av"),
        ("Av.phase", "Av.phase", None, "Av.phase"),
        ("fL", "fL", None, "fL"),
        ("Psupply", "Psupply", None, "Psupply"),
    ],
)
def test_a_name_is_read_and_written_in_one_way(text: str, kind: str, of: str | None, written: str) -> None:
    quantity = parse_quantity(text)
    assert quantity == Quantity(kind, of)
    assert str(quantity) == written
    assert quantity.description is KINDS[kind]
    assert parse_quantity(str(quantity)) == quantity


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("", "is not a quantity; known: ID, VGS"),
        ("id(M1)", "is not a quantity"),
        ("av", "is not a quantity"),
        ("Gm(M1)", "is not a quantity"),
        ("ID(M1", "is not a quantity"),
        ("ID(M 1)", "is not a quantity"),
        ("ID()", "is not a quantity"),
        ("ID(M1)(M2)", "is not a quantity"),
        ("ID(M1))", "is not a quantity"),
        ("Av\nfL", "is not a quantity"),
        ("Av(M1)", "Av belongs to the stage; write Av alone"),
        ("ID", r"ID needs to say of what; write for example ID\(M1\)"),
        ("V", r"V needs to say of what; write for example V\(out\)"),
    ],
)
def test_what_is_no_quantity_is_refused_with_what_to_write(text: str, says: str) -> None:
    with pytest.raises(ValueError, match=says):
        parse_quantity(text)


@given(st.sampled_from(sorted(KINDS)), st.from_regex(r"[A-Za-z0-9_.@]{1,8}", fullmatch=True))
def test_every_kind_reads_back_what_it_writes(name: str, of: str) -> None:
    kind = KINDS[name]
    text = name if kind.scope == "stage" else f"{name}({of})"
    assert parse_quantity(str(parse_quantity(text))) == parse_quantity(text)
