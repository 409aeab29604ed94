"""What the investigation, the monthly review and the index need to know: frozen values.

The shared values (excursions, pictures, the night) are in `reports.model`.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import datetime
from typing import Literal

from reports.model import (
    ChartSeries,
    Context,
    Edition,
    Excursion,
    Level,
    LevelEffect,
    Magnitude,
    OverlayVectors,
    Pattern,
    Status,
    WaferMapPicture,
)

# ---- the investigation --------------------------------------------------------------------------


@dataclass(frozen=True)
class RuledOut:
    """A level that was weighed and dropped, and why."""

    factor: str
    level: str
    reason: Literal["did-not-move", "moved-before", "too-few-lots", "explained", "partly-moved"]
    effect: float | None = None
    low: float | None = None
    high: float | None = None
    unit: str = ""
    n_lots: int | None = None
    explained_by: Level | None = None


@dataclass(frozen=True)
class ExperimentArm:
    """One arm of the separating experiment: what to run where, and what each answer means."""

    lot: str
    wafers: int
    route: Context
    moves_if: Level


@dataclass(frozen=True)
class SeparatingExperiment:
    """The cheapest run that tells levels apart which the data cannot."""

    between: tuple[Level, ...]
    arms: tuple[ExperimentArm, ...]
    power: float | None = None


@dataclass(frozen=True)
class BehindPoint:
    """A measurement behind a point of the excursion, and the lines it came from."""

    at: datetime
    measured_at: datetime
    lot: str
    wafer: str
    context: Context
    mean: float
    unit: str
    n_sites: int
    gauge: str | None
    file: str
    first_line: int
    last_line: int
    superseded: bool = False


@dataclass(frozen=True)
class HandAction:
    """A comment, a containment or another act by hand."""

    at: datetime
    who: str
    action: str
    text: str = ""


@dataclass(frozen=True)
class PastCause:
    """A closed excursion that looked alike, and what it turned out to be."""

    excursion: int
    closed_at: datetime
    cause: str
    who: str
    pattern: Pattern
    similarity: float | None = None
    href: str | None = None


@dataclass(frozen=True)
class TrimAdvice:
    """The setting that would return the film to target, with uncertainty and allowed range."""

    parameter: str
    unit: str
    present: float
    proposed: float
    low: float
    high: float
    allowed_low: float
    allowed_high: float

    @property
    def allowed(self) -> bool:
        """Whether the proposal lies in the allowed range."""
        return self.allowed_low <= self.proposed <= self.allowed_high


@dataclass(frozen=True)
class InvestigationPage:
    """Everything known on one excursion."""

    edition: Edition
    excursion: Excursion
    charts: tuple[ChartSeries, ...]  # affected and unaffected
    n_quiet_not_shown: int = 0
    wafer_map: WaferMapPicture | None = None
    overlay: OverlayVectors | None = None
    effects: tuple[LevelEffect, ...] = ()
    ruled_out: tuple[RuledOut, ...] = ()
    experiment: SeparatingExperiment | None = None
    behind: tuple[BehindPoint, ...] = ()
    actions: tuple[HandAction, ...] = ()
    past_causes: tuple[PastCause, ...] = ()
    action_plan: str | None = None
    owners: tuple[str, ...] = ()
    trim: TrimAdvice | None = None
    cd_change: Magnitude | None = None
    merged_into: int | None = None
    sites_gone: bool = False  # of wafers that the maps would show (retention)


# ---- the monthly review and the index -----------------------------------------------------------


@dataclass(frozen=True)
class Bin:
    """A bar of a histogram: readings between `low` and `high`."""

    low: float
    high: float
    count: int


@dataclass(frozen=True)
class CurvePoint:
    """A point of the fitted curve, in readings a bar."""

    x: float
    count: float


@dataclass(frozen=True)
class MonthIndex:
    """Indices of one month, for month against month."""

    month: str  # YYYY-MM
    cpk: float | None
    cpk_low: float | None
    cpk_high: float | None
    ppk: float | None
    ppk_low: float | None
    ppk_high: float | None
    stable: bool | None
    n_lots: int


@dataclass(frozen=True)
class CapabilityRow:
    """A characteristic as a whole (`context` empty) or one stream, as in the contract."""

    characteristic: str
    context: Context
    month: str
    unit: str
    n_lots: int
    n_wafers: int
    n_readings: int
    mean: float | None = None
    sd_overall: float | None = None
    sd_within: float | None = None
    components: Mapping[str, float | None] = field(default_factory=dict)  # lot, wafer, site
    cp: float | None = None
    cpk: float | None = None
    pp: float | None = None
    ppk: float | None = None
    cpm: float | None = None
    intervals: Mapping[str, tuple[float, float]] = field(default_factory=dict)  # cpk -> (low, high)
    ppm_expected: float | None = None
    ppm_observed: float | None = None
    distribution: str | None = None
    stable: bool | None = None
    excursions: tuple[int, ...] = ()
    target: float | None = None
    lower_spec: float | None = None
    upper_spec: float | None = None
    gauge_share: float | None = None  # of the overall variance
    histogram: tuple[Bin, ...] = ()
    curve: tuple[CurvePoint, ...] = ()
    history: tuple[MonthIndex, ...] = ()


@dataclass(frozen=True)
class ToolGap:
    """Best and worst level of a characteristic and the gap between their Ppk."""

    characteristic: str
    best: str
    best_ppk: float
    worst: str
    worst_ppk: float
    gap: float
    low: float | None = None
    high: float | None = None


@dataclass(frozen=True)
class ReviewChange:
    """An index that moved between two months beyond its interval."""

    characteristic: str
    context: Context
    index: str
    before: float
    after: float


@dataclass(frozen=True)
class ReviewDecision:
    """Something that a person must decide."""

    kind: Literal["below-goal", "unstable", "tool-gap", "too-few", "not-normal", "gauge"]
    characteristic: str
    context: Context = field(default_factory=dict)
    value: float | None = None
    low: float | None = None
    high: float | None = None
    goal: float | None = None
    detail: str = ""


@dataclass(frozen=True)
class MonthExcursion:
    """An excursion of the month, and the cause found for it."""

    excursion: Excursion
    cause: str | None = None
    href: str | None = None


@dataclass(frozen=True)
class ReviewPage:
    """The monthly capability review."""

    edition: Edition
    month: str
    rows: tuple[CapabilityRow, ...]
    gaps: tuple[ToolGap, ...] = ()
    changes: tuple[ReviewChange, ...] = ()
    decisions: tuple[ReviewDecision, ...] = ()
    excursions: tuple[MonthExcursion, ...] = ()
    goal: float | None = None
    xlsx_href: str | None = None
    notes: tuple[str, ...] = ()  # what the figures lack, and why


@dataclass(frozen=True)
class IndexEntry:
    """A page of the reports folder; `href` is relative to it."""

    kind: Literal["night", "excursion", "review"]
    href: str
    at: datetime
    headline: str
    n_act: int = 0
    n_watch: int = 0
    status: Status | None = None
    number: int | None = None
    month: str | None = None


@dataclass(frozen=True)
class IndexPage:
    """The front page of the reports folder."""

    edition: Edition
    entries: tuple[IndexEntry, ...]
