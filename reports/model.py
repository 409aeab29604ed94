"""What a page needs to know: frozen values, filled from the records elsewhere.

Field names follow the JSON of the contract, so that a page and a document say the same thing
under the same name. Stamps are aware datetimes; a context is {column: text}. Nothing here is
computed from readings: counts and choices at the most.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from datetime import datetime, tzinfo
from typing import Literal

Status = Literal["open", "contained", "closed"]
Tier = Literal["act", "watch"]
Pattern = Literal["shift", "drift", "spike", "spread", "map", "silence"]
Phase = Literal["baseline", "monitoring"]
Context = Mapping[str, str]


@dataclass(frozen=True)
class Edition:
    """Which bay and which pass a page speaks of: `as_of` is its clock, `zone` the bay's zone."""

    bay: str
    zone: tzinfo
    as_of: datetime

    def __post_init__(self) -> None:
        if self.as_of.tzinfo is None:
            raise ValueError("as_of has no time zone")


# ---- excursions, as in the contract -------------------------------------------------------------


@dataclass(frozen=True)
class ExcursionStream:
    """One stream an excursion shows on."""

    characteristic: str
    statistic: str
    context: Context
    first_signal_at: datetime | None = None
    rules: tuple[str, ...] = ()


@dataclass(frozen=True)
class Onset:
    """When it began: best estimate and the ends of its 95 % confidence set."""

    estimate: datetime
    earliest: datetime
    latest: datetime
    lot: str | None = None


@dataclass(frozen=True)
class Magnitude:
    """How much it moved, with a 95 % interval, in `unit`; `sigmas` of a plotted point."""

    value: float
    low: float | None
    high: float | None
    unit: str
    sigmas: float | None = None


@dataclass(frozen=True)
class Level:
    """A level of a factor: `factor` is a column or several joined by +, `level` likewise."""

    factor: str
    level: str


@dataclass(frozen=True)
class Suspect:
    """A level that explains who moved; `effect` in `unit` (the excursion's own by default)."""

    factor: str
    level: str
    effect: float | None = None
    p_adjusted: float | None = None
    aliased_with: tuple[Level, ...] = ()


@dataclass(frozen=True)
class BayEvent:
    """Something that was done in the bay."""

    at: datetime
    kind: str
    tool: str | None = None
    module: str | None = None
    text: str | None = None


@dataclass(frozen=True)
class LotAtRisk:
    """A lot that the fault may have touched; `predicted` in `unit`, where a model gives it."""

    lot: str
    wafers: tuple[str, ...]
    measured: bool
    processed_at: datetime | None = None
    p_out_of_spec: float | None = None
    predicted: float | None = None
    unit: str = ""


@dataclass(frozen=True)
class Forecast:
    """When a drift reaches a spec limit, and what it does to Cpk until then."""

    spec: Literal["lower", "upper"]
    expected: datetime
    earliest: datetime | None = None
    latest: datetime | None = None
    cpk_now: float | None = None
    cpk_then: float | None = None


@dataclass(frozen=True)
class Excursion:
    """One thing that happened. `p_chance`: probability that noise alone gives as much; `end`: when
    it was last seen (silence: when readings came again), None while it lasts."""

    id: int
    status: Status
    tier: Tier
    opened_at: datetime
    updated_at: datetime
    pattern: Pattern
    streams: tuple[ExcursionStream, ...]
    onset: Onset
    magnitude: Magnitude | None = None
    suspects: tuple[Suspect, ...] = ()
    lots_at_risk: tuple[LotAtRisk, ...] = ()
    events: tuple[BayEvent, ...] = ()
    forecast: Forecast | None = None
    p_chance: float | None = None
    end: datetime | None = None

    @property
    def n_lots_measured(self) -> int:
        """How many of the lots at risk were measured."""
        return sum(lot.measured for lot in self.lots_at_risk)


# ---- pictures -----------------------------------------------------------------------------------


@dataclass(frozen=True)
class ChartPoint:
    """A plotted point, as in `points` of the contract, and where its readings stand."""

    at: datetime
    lot: str
    value: float
    n_wafers: int
    n_sites: int
    wafer: str | None = None
    center: float | None = None
    lower_limit: float | None = None
    upper_limit: float | None = None
    sigma: float | None = None
    phase: Phase = "monitoring"
    rules: tuple[str, ...] = ()
    file: str | None = None
    first_line: int | None = None
    last_line: int | None = None


@dataclass(frozen=True)
class LimitSet:
    """From when a set of limits holds, and who set it, why."""

    since: datetime
    status: str  # automatic | approved | …
    who: str = ""
    why: str = ""


@dataclass(frozen=True)
class ChartSeries:
    """One stream and statistic over time."""

    characteristic: str
    statistic: str
    context: Context
    unit: str
    points: tuple[ChartPoint, ...]
    target: float | None = None
    lower_spec: float | None = None
    upper_spec: float | None = None
    onset: Onset | None = None
    events: tuple[BayEvent, ...] = ()
    limit_sets: tuple[LimitSet, ...] = ()
    forecast: Forecast | None = None
    affected: bool = True


@dataclass(frozen=True)
class MapSite:
    """A site of a wafer map: its place from the centre in mm and its mean values."""

    site: str
    x_mm: float
    y_mm: float
    before: float | None
    after: float | None
    difference: float | None


@dataclass(frozen=True)
class WaferMapPicture:
    """The mean wafer before and after the onset, and what changed."""

    characteristic: str
    unit: str
    radius_mm: float
    sites: tuple[MapSite, ...]
    n_wafers_before: int
    n_wafers_after: int


@dataclass(frozen=True)
class OverlayVector:
    """Displacement (dx, dy) at a place of the wafer."""

    x_mm: float
    y_mm: float
    dx: float
    dy: float


@dataclass(frozen=True)
class OverlayPanel:
    """One wafer of vectors: before, after, difference or residual."""

    name: Literal["before", "after", "difference", "residual"]
    vectors: tuple[OverlayVector, ...]


@dataclass(frozen=True)
class OverlayVectors:
    """Overlay vectors of one layer."""

    characteristic: str
    unit: str
    radius_mm: float
    panels: tuple[OverlayPanel, ...]


@dataclass(frozen=True)
class LevelEffect:
    """How far the lots of one level moved, with a 95 % interval."""

    factor: str
    level: str
    effect: float
    low: float
    high: float
    unit: str
    n_lots: int
    verdict: Literal["suspect", "aliased", "moved", "quiet"] = "quiet"


@dataclass(frozen=True)
class RunLength:
    """Average run length of one chart design at one shift (in sigmas of the plotted point)."""

    design: str
    shift: float
    arl: float
    sdrl: float | None = None
    median: float | None = None


# ---- the night ----------------------------------------------------------------------------------


@dataclass(frozen=True)
class ExcursionCard:
    """An excursion with its pictures, as the night page and the mail show it."""

    excursion: Excursion
    chart: ChartSeries | None = None
    wafer_map: WaferMapPicture | None = None
    overlay: OverlayVectors | None = None
    action_plan: str | None = None
    owners: tuple[str, ...] = ()
    href: str | None = None  # of the investigation page, relative to the reports folder
    change: Literal["opened", "updated", "unchanged"] = "opened"


@dataclass(frozen=True)
class FeedNotice:
    """A feed that was late, or a file that was refused or lost rows on its way in."""

    name: str  # of the feed, or the path of the file
    kind: Literal["late", "quarantined", "rejected", "waiting", "warned"]
    reason: str = ""
    last_seen: datetime | None = None
    expected_every: str | None = None
    rows: int | None = None
    line: int | None = None
    column: str | None = None
    value: str | None = None


@dataclass(frozen=True)
class IngestAccount:
    """Counts of this pass, as in the contract."""

    files_loaded: int = 0
    files_duplicate: int = 0
    files_quarantined: int = 0
    files_waiting: int = 0
    readings_loaded: int = 0
    readings_duplicate: int = 0
    readings_superseded: int = 0
    readings_rejected: int = 0


@dataclass(frozen=True)
class SignalAccount:
    """What was looked at, and how much of it noise would have rung."""

    streams: int
    points_evaluated: int
    signals: int
    expected_false_signals: float | None
    false_excursions_per_night: float | None = None  # the budget
    expected_false_excursions: float | None = None


@dataclass(frozen=True)
class QuietStreams:
    """Streams with new points and nothing to tell, and those still without limits."""

    n_streams: int
    n_points: int
    n_without_limits: int = 0
    n_without_points: int = 0


@dataclass(frozen=True)
class NightPage:
    """One night. `cards`: what opened or moved on; `standing`: open before and unchanged."""

    edition: Edition
    cards: tuple[ExcursionCard, ...]
    signals: SignalAccount
    ingest: IngestAccount
    quiet: QuietStreams
    feeds: tuple[FeedNotice, ...] = ()
    standing: tuple[ExcursionCard, ...] = ()
    href: str | None = None  # of this page, relative to the reports folder
    page_url: str | None = None  # address of the reports folder, for links in mail
