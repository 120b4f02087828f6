"""What a check of one stage gives: rows with verdicts, findings, ratings, and how the run ended.

Values only; `compare` fills them in, `report` prints them.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum

from deckgen.errors import ExitCode, Outcome


class Verdict(StrEnum):
    """How one quantity came out."""

    WITHIN = "within"
    BEYOND = "beyond"
    ABSENT = "absent"
    NOT_COMPARED = "not compared"


class Severity(StrEnum):
    """How much a finding matters."""

    REFUSED = "refused"
    WARNING = "warning"
    NOTE = "note"


@dataclass(frozen=True, slots=True)
class Finding:
    """Something wrong or doubtful, under a fixed slug, with the place where it stands."""

    slug: str
    severity: Severity
    text: str
    file: str | None = None
    line: int | None = None
    subject: str | None = None


@dataclass(frozen=True, slots=True)
class Gap:
    """Simulated minus hand: in the quantity's unit, as a fraction of hand, and in dB."""

    absolute: float
    relative: float | None = None
    db: float | None = None


@dataclass(frozen=True, slots=True)
class AppliedTolerance:
    """The tolerance that decided, and where it came from (``default``, ``stage file`` …)."""

    relative: float | None
    absolute: float | None
    db: float | None
    origin: str


@dataclass(frozen=True, slots=True)
class ClaimResult:
    """A claim held against the simulated value (decides) and against the hand value (informs)."""

    kind: str
    value: float
    upper: float | None
    verdict: Verdict
    hand_verdict: Verdict


@dataclass(frozen=True, slots=True)
class Cause:
    """An effect that an assumption left out, with its share of the gap in the quantity's unit."""

    name: str
    share: float


@dataclass(frozen=True, slots=True)
class Row:
    """One compared quantity."""

    name: str
    unit: str
    hand: float | None
    simulated: float | None
    verdict: Verdict
    how: str
    gap: Gap | None = None
    tolerance: AppliedTolerance | None = None
    claim: ClaimResult | None = None
    excused: str | None = None
    reason: str | None = None
    wanted: bool = True
    causes: tuple[Cause, ...] = ()
    residual: float | None = None
    explained_by: tuple[str, ...] = ()

    @property
    def fails(self) -> bool:
        """Whether this row makes the check fail."""
        if self.claim is not None and self.claim.verdict is not Verdict.WITHIN:
            return True
        if self.verdict is Verdict.BEYOND:
            return self.excused is None
        return self.verdict is Verdict.NOT_COMPARED and self.wanted


@dataclass(frozen=True, slots=True)
class TransistorRow:
    """A transistor: role, law, and its region by hand, simulated and as stated; margins in volt.

    Nothing by hand where it depends on a device without hand analysis.
    """

    name: str
    role: str
    law: str
    region: str | None
    region_simulated: str | None
    region_stated: str | None
    margin: float | None
    margin_simulated: float | None


@dataclass(frozen=True, slots=True)
class RatingRow:
    """A rating of a part against hand and simulated values; ``limit`` None: not stated, not checked."""

    part: str
    quantity: str
    unit: str
    limit: float | None
    hand: float | None
    simulated: float | None
    verdict: Verdict


@dataclass(frozen=True, slots=True)
class MidBandRow:
    """Frequency at which mid-band quantities were taken [Hz], and where it comes from."""

    frequency: float
    source: str


@dataclass(frozen=True, slots=True)
class BandEdgeRow:
    """The capacitor with the largest share of a hand value's sum of time constants, and that share."""

    quantity: str
    set_by: str
    share: float


@dataclass(frozen=True, slots=True)
class Comparison:
    """One stage, checked."""

    name: str
    title: str
    file: str
    outcome: Outcome
    assumptions: str
    meaning: str = ""
    said: tuple[str, ...] = ()
    findings: tuple[Finding, ...] = ()
    transistors: tuple[TransistorRow, ...] = ()
    quantities: tuple[Row, ...] = ()
    ratings: tuple[RatingRow, ...] = ()
    mid_band: MidBandRow | None = None
    band_edges: tuple[BandEdgeRow, ...] = ()
    run_folder: str | None = None
    seconds: float = 0.0

    @property
    def exit_code(self) -> ExitCode:
        """Exit code of this stage alone."""
        if self.outcome is not Outcome.MEASURED:
            return self.outcome.exit_code
        rated = any(rating.verdict is Verdict.BEYOND for rating in self.ratings)
        failed = rated or any(row.fails for row in self.quantities)
        return ExitCode.GAP if failed else ExitCode.OK
