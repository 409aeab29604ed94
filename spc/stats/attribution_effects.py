"""What the attribution engine returns: effects with onset, size, suspects and what was ruled out.

All times are seconds on the clock of the evidence; amplitudes are in the unit of their family.
"""

from __future__ import annotations

from dataclasses import dataclass

from spc.stats.attribution_evidence import FloatArray, IntArray
from spc.stats.attribution_profile import Shape


@dataclass(frozen=True)
class Level:
    """A level of a factor or of a conjunction: (`tool`, `module`) with (`T1`, `C2`)."""

    factors: tuple[str, ...]
    names: tuple[str, ...]


@dataclass(frozen=True)
class Onset:
    """When it began: `estimate` is the time of the first affected lot; the fault began after
    `earliest` (the last unaffected lot of the confidence set) and not later than `latest`. `lot`
    is the first affected lot, `lots_between` counts the level's lots after `earliest` up to
    `latest`. `axis` is `t_process` or `t_measure`."""

    estimate: float
    earliest: float
    latest: float
    lot: int
    lots_between: int
    axis: str


@dataclass(frozen=True)
class FamilySize:
    """Size in one family (characteristic x statistic): the change of a step, the change reached at
    the last affected cell of a ramp. `low`, `high` bound it; `sigmas` is `value` over the sigma of
    a plotted point; `gain` is its log Bayes factor, `moved` whether it moved (odds of 4 to 1)."""

    family: int
    characteristic: int
    statistic: str
    value: float
    low: float
    high: float
    se: float
    sigmas: float
    gain: float
    moved: bool


@dataclass(frozen=True)
class SeriesSize:
    """Size in one series of the level; `moved` tells whether the series by itself bears it out
    (right sign and beyond two standard errors)."""

    series: int
    points: int
    value: float
    se: float
    moved: bool


@dataclass(frozen=True)
class Drift:
    """A free line through the affected cells of the leading family, for forecasts: `change` at the
    time `reference` and `per_second`, with their 2 x 2 `covariance`."""

    family: int
    reference: float
    change: float
    per_second: float
    covariance: FloatArray


@dataclass(frozen=True)
class Suspect:
    """A candidate cause: its size in the leading family over the effect's window, with standard
    error; `p_adjusted` for all that was searched; `score` log score (differences are log posterior
    odds); `aliases` are levels the data cannot tell from it."""

    level: Level
    effect: float
    se: float
    p_adjusted: float
    score: float
    aliases: tuple[Level, ...] = ()


@dataclass(frozen=True)
class RuledOut:
    """A level that was considered and why it is not the cause.

    `reason`: `members-quiet` (only `moved` of `members` of its series moved), `others-moved`
    (`moved` series outside it moved too), `onset-differs`, `less-likely`. `odds` is the log
    posterior odds against it.
    """

    level: Level
    reason: str
    moved: int
    members: int
    odds: float


@dataclass(frozen=True)
class Separation:
    """An experiment that tells two aliased levels apart: run a lot with the level `keep` but with
    `with_level` instead of `instead_of`. If the lot is affected, `keep` is to blame, else
    `instead_of`. `seen` counts the lots already run so: the higher the cheaper to arrange."""

    keep: Level
    instead_of: Level
    with_level: Level
    seen: int


@dataclass(frozen=True)
class Effect:
    """One thing that happened.

    `form`: shift, drift, spike, spread or map; `shape` its form in time; `end` when it ended
    (None: still on, or as long as the level itself lasted). `p_adjusted` is the expected number of
    false effects as strong in one look at the whole bay, at most 1; `evidence` the log score,
    `gain` the log Bayes factor. `lots` are the affected lots seen. `leading` is the index into
    `sizes` of the family that tells most; `previous` the index of the earlier effect that this one
    continues, or None; `absorbed` are levels of consequences counted into this effect.
    """

    form: str
    shape: Shape
    level: Level
    aliased_with: tuple[Level, ...]
    suspects: tuple[Suspect, ...]
    onset: Onset
    end: float | None
    p_adjusted: float
    evidence: float
    gain: float
    sizes: tuple[FamilySize, ...]
    leading: int
    series: tuple[SeriesSize, ...]
    drift: Drift | None
    lots: IntArray
    ruled_out: tuple[RuledOut, ...]
    separations: tuple[Separation, ...]
    previous: int | None = None
    absorbed: tuple[Level, ...] = ()
