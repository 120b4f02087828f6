"""What a designer expects of a stage: tolerances, claims, known gaps, ratings and the quantities wanted."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

from deckgen.quantities import KINDS, Kind, Quantity, parse_quantity
from deckgen.stage.faults import Faults, listed
from deckgen.stage.model import Claim, KnownGap, Part, Rating, Signal, SourceUnit, ToleranceRule
from deckgen.stage.topology import Topology
from deckgen.units import UnitError, parse_number, shown

if TYPE_CHECKING:
    from deckgen.stage.schema import ClaimSection, KnownGapSection, RatingSection

RatingName = Literal["VDS", "VGS", "ID", "PD", "P", "V"]

_TRANSISTOR_RATINGS: dict[RatingName, str] = {"VDS": "V", "VGS": "V", "ID": "A", "PD": "W"}
_PART_RATINGS: dict[str, dict[RatingName, str]] = {"Ω": {"P": "W"}, "F": {"V": "V"}}
_RATING_UNITS: dict[RatingName, str] = {**_TRANSISTOR_RATINGS, "P": "W", "V": "V"}
_CLAIM_KINDS: tuple[Literal["equals", "at_least", "at_most", "within"], ...] = (
    "equals", "at_least", "at_most", "within",
)  # fmt: skip

_OTHER_GAIN: dict[SourceUnit, dict[str, str]] = {
    "A": {"Av": "Rm", "Av.phase": "Rm.phase"},
    "V": {"Rm": "Av", "Rm.phase": "Av.phase"},
}
"""By the unit of the input source: the gain that it does not have -> the one that it has."""


@dataclass(frozen=True, slots=True)
class Reader:
    """Reads the expectations of one file; ``topology`` is None and ``signal`` empty where unknown."""

    topology: Topology | None
    faults: Faults
    signal: Signal

    def _kind_or_quantity(self, path: tuple[str, ...], text: str) -> Quantity | None:
        return self._of_this_input(path, Quantity(text)) if text in KINDS else self.quantity(path, text)

    def _of_this_input(self, path: tuple[str, ...], quantity: Quantity) -> Quantity | None:
        """The quantity, unless it is the gain from the other kind of source: then note which one it is."""
        instead = _OTHER_GAIN[self.signal.unit].get(quantity.kind)
        if instead is None or not self.signal.input:
            return quantity
        what = {"A": "a current source, so its gain is in Ω", "V": "a voltage source, so its gain is in V/V"}
        expected = f"{instead}: the input {self.signal.input} is {what[self.signal.unit]}"
        self.faults.add(path, found=shown(str(quantity)), expected=expected)
        return None

    def quantity(self, path: tuple[str, ...], text: str) -> Quantity | None:
        """Read one quantity, of a transistor or node that the topology has; else note what is wrong."""
        try:
            quantity = parse_quantity(text)
        except ValueError:
            self._refuse_quantity(path, text)
            return None
        if self.topology is not None and quantity.of is not None:
            transistor = quantity.description.scope == "transistor"
            known = self.topology.transistor_names if transistor else self.topology.nodes
            if quantity.of not in known:
                close = self.faults.nearest(quantity.of, known)
                hint = None if close is None else f"{quantity.kind}({close})"
                expected = f"{'a transistor' if transistor else 'a node'} of the topology: {listed(known)}"
                self.faults.add(path, found=shown(text), expected=expected, nearest=hint)
                return None
        return self._of_this_input(path, quantity)

    def _refuse_quantity(self, path: tuple[str, ...], text: str) -> None:
        head, bracket, tail = text.strip().partition("(")
        kind = KINDS.get(head) or KINDS.get(self.faults.nearest(head, KINDS) or "")
        expected = "a quantity such as ID(M1), V(out) or Av"
        if kind is None:
            self.faults.add(path, found=shown(text), expected=f"{expected}; kinds: {', '.join(KINDS)}")
        elif kind.scope == "stage":
            self.faults.add(path, found=shown(text), expected=expected, nearest=kind.name)
        else:
            of = tail.rstrip(") ") if bracket else ""
            hint = f"{kind.name}({of or self._example(kind)})"
            self.faults.add(path, found=shown(text), expected=expected, nearest=hint)

    def _example(self, kind: Kind) -> str:
        if kind.scope == "node":
            return "out" if self.topology is None else self.topology.signal.output
        names = () if self.topology is None else self.topology.transistor_names
        return names[0] if names else "M1"

    def tolerances(self, texts: Mapping[str, tuple[str, ...]]) -> tuple[ToleranceRule, ...]:
        """Tolerances per kind or single quantity."""
        rules: dict[str, ToleranceRule] = {}
        for key, values in texts.items():
            path = ("tolerance", key)
            quantity = self._kind_or_quantity(path, key)
            if quantity is not None and self._once(path, str(quantity), rules):
                rules[str(quantity)] = self.tolerance(path, values, quantity)
        return tuple(rules.values())

    def tolerance(self, path: tuple[str, ...], texts: Iterable[str], quantity: Quantity) -> ToleranceRule:
        """Read one tolerance; what is wrong in it is noted and left out."""
        found: dict[str, float] = {}
        for text in texts:
            measure, unit = _measure(text, quantity.description)
            value = self._tolerance_part(path, text, measure, unit, quantity.description)
            if value is None:
                continue
            if measure in found or {measure, *found} >= {"relative", "db"}:
                expected = "one of a percentage and dB, and one absolute value beside it"
                self.faults.add(path, found=f"{shown(text)} as well", expected=expected)
            found[measure] = value
        return ToleranceRule(
            str(quantity), found.get("relative"), found.get("absolute"), found.get("db")
        )  # fmt: skip

    def _tolerance_part(
        self, path: tuple[str, ...], text: str, measure: str, unit: str, kind: Kind
    ) -> float | None:
        if measure == "relative" and kind.modulo is not None:
            self.faults.add(path, found=shown(text), expected=f'an angle such as "5 {kind.unit}"')
            return None
        if measure == "db" and not kind.ratio:
            self.faults.add(path, found=shown(text), expected=_tolerance_ways(kind))
            return None
        if measure == "absolute" and _is_plain(text):
            self.faults.add(path, found=f"{shown(text)} without a unit", expected=_tolerance_ways(kind))
            return None
        return self.faults.positive(path, text, unit)

    def claims(self, sections: Mapping[str, ClaimSection]) -> tuple[Claim, ...]:
        """Claims, one a quantity."""
        claims: dict[str, Claim] = {}
        for key, section in sections.items():
            path = ("claims", key)
            quantity = self.quantity(path, key)
            if quantity is None or not self._once(path, str(quantity), claims):
                continue
            claim = self._claim(path, section, quantity)
            if claim is not None:
                claims[claim.quantity] = claim
        return tuple(claims.values())

    def _claim(self, path: tuple[str, ...], section: ClaimSection, quantity: Quantity) -> Claim | None:
        tolerance = None
        if section.tolerance is not None:
            tolerance = self.tolerance((*path, "tolerance"), section.tolerance, quantity)
        given = [kind for kind in _CLAIM_KINDS if getattr(section, kind) is not None]
        limits = [self._limits((*path, kind), getattr(section, kind), quantity) for kind in given]
        if len(given) > 1 or (not given and not self.faults.below(path)):
            both = "; within = [low, high] gives both ends" if given else ""
            found = " and ".join(given) or "no value"
            self.faults.add(path, found=found, expected=f"one of {', '.join(_CLAIM_KINDS)}{both}")
        if len(given) != 1 or limits[0] is None:
            return None
        low, high = limits[0]
        return Claim(str(quantity), given[0], low, high, tolerance)

    def _limits(
        self, path: tuple[str, ...], entry: str | float | list[str | float], quantity: Quantity
    ) -> tuple[float, float | None] | None:
        """The value of a claim, and the upper end where there are two."""
        entries = entry if isinstance(entry, list) else [entry]
        unit = quantity.description.unit
        values = [self.faults.number(path, text, unit) for text in entries]
        low, high = values[0], values[-1]
        if low is None or high is None:
            return None
        if len(values) == 1:
            return low, None
        if not low < high:
            found = f"{shown(entries[0])} before {shown(entries[1])}"
            self.faults.add(path, found=found, expected="the lower value first")
        return low, high

    def known_gaps(self, sections: Mapping[str, KnownGapSection]) -> tuple[KnownGap, ...]:
        """Known gaps, one a quantity."""
        gaps: dict[str, KnownGap] = {}
        for key, section in sections.items():
            path = ("known_gap", key)
            quantity = self.quantity(path, key)
            if quantity is None or not self._once(path, str(quantity), gaps):
                continue
            if section.limit is not None and section.reason is not None and section.until is not None:
                limit = self.tolerance((*path, "limit"), section.limit, quantity)
                gaps[str(quantity)] = KnownGap(str(quantity), section.reason, limit, section.until)
        return tuple(gaps.values())

    def ratings(self, sections: Mapping[str, RatingSection], parts: tuple[Part, ...]) -> tuple[Rating, ...]:
        """Ratings of transistors and of the parts that this stage has."""
        ratings = []
        for name, section in sections.items():
            units = self._rated(name, parts)
            for key in _RATING_UNITS:
                text = getattr(section, key)
                if text is None:
                    continue
                path = ("ratings", name, key)
                if units is not None and key not in units:
                    self.faults.unknown(path, key, units)
                    continue
                limit = self.faults.positive(path, text, _RATING_UNITS[key])
                if limit is not None:
                    ratings.append(Rating(name, key, limit))
        return tuple(ratings)

    def _rated(self, name: str, parts: tuple[Part, ...]) -> dict[RatingName, str] | None:
        """Ratings that a part can have with their units; None where it is unknown, which is noted."""
        if self.topology is None:
            return None
        if name in self.topology.transistor_names:
            return _TRANSISTOR_RATINGS
        present = {part.name: spec.unit for part in parts if (spec := self.topology.part(part.name))}
        ratable = [part for part, unit in present.items() if unit in _PART_RATINGS]
        if name in self.faults.blamed("parts"):
            return None
        if name not in ratable:
            self.faults.unknown(("ratings", name), name, (*self.topology.transistor_names, *ratable))
            return None
        return _PART_RATINGS[present[name]]

    def wanted(self, texts: Iterable[str]) -> tuple[str, ...]:
        """Kinds and single quantities that are to be compared."""
        path = ("wanted", "quantities")
        wanted: dict[str, None] = {}
        for text in texts:
            quantity = self._kind_or_quantity(path, text)
            if quantity is not None and self._once(path, str(quantity), wanted):
                wanted[str(quantity)] = None
        return tuple(wanted)

    def _once(self, path: tuple[str, ...], name: str, earlier: Iterable[str]) -> bool:
        if name not in earlier:
            return True
        self.faults.add(path, found=f"{name} twice", expected="each quantity once")
        return False


def _measure(text: str, kind: Kind) -> tuple[Literal["relative", "db", "absolute"], str]:
    """What kind of tolerance a text states, and the unit it is read in."""
    if text.rstrip().endswith("%"):
        return "relative", "%"
    return ("db", "dB") if text.rstrip().endswith("dB") else ("absolute", kind.unit)


def _is_plain(text: str) -> bool:
    """Whether a text is a number with no unit: 0.03 could be meant as 3 % or as 30 mV."""
    try:
        parse_number(text, unit="")
    except UnitError:
        return False
    return True


def _tolerance_ways(kind: Kind) -> str:
    ways = [] if kind.modulo is not None else ['"3 %"']
    ways += ['"0.5 dB"'] if kind.ratio else []
    return " or ".join((*ways, f"a value with its unit, {kind.unit}"))
