"""From an effect of the attribution engine to what is kept of an excursion.

Stamps are microseconds under keys that end in `_us`; `spc.records.findings` turns them into the
contract's ISO stamps. `engine` keeps what the next night needs to take the effect up again.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy.special import chdtri
from sqlalchemy import Connection

from config.control_plan import Characteristic
from spc.monitoring.effect_lots import WHOLE, Span, finite, lots_of, own_steps, us
from spc.monitoring.events import events_near
from spc.monitoring.evidence import US, Case, stream_context
from spc.monitoring.forecast import Line, crossing
from spc.monitoring.limit_sets import kind_of
from spc.stats.attribution import Effect, FamilySize, Level

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


def span_of(effect: Effect, as_of_us: int) -> Span:
    """The span that the effect may have acted in."""
    last = as_of_us if effect.end is None else us(effect.end)
    return Span(us(effect.onset.earliest), max(last, us(effect.onset.estimate)))


def affected_rows(case: Case, effect: Effect) -> pd.DataFrame:
    """Points of the series that the effect moved, from its earliest onset to its end."""
    moved = {s.series for s in effect.series if s.moved}
    if not moved:
        moved = {s.series for s in effect.series}
    points = case.points
    on_measure = effect.onset.axis == "t_measure"
    stamp = points["measured_us"] if on_measure else points["at_us"]
    begin = us(min(effect.onset.estimate, effect.onset.latest)) - 1
    keep = points["series"].isin(moved) & (points["phase"] == "monitoring") & (stamp >= begin)
    if effect.end is not None:
        keep &= stamp <= us(effect.end)
    if effect.shape.lot >= 0:
        keep &= points["lot"] == case.lots[effect.shape.lot]
    return points[keep]


def payload_of(connection: Connection, case: Case, effect: Effect, as_of_us: int) -> dict[str, Any]:
    """Everything that is kept of the effect (see the contract's `excursions`)."""
    rows = affected_rows(case, effect)
    lead = effect.sizes[effect.leading]
    characteristic = case.plan.characteristic[lead.characteristic]
    names = _Names(case, effect)
    magnitude = _magnitude(case, effect, rows, characteristic, lead)
    suspects = _suspects(case, effect, names, magnitude["value"], lead)
    span = span_of(effect, as_of_us)
    lots = lots_of(connection, case, effect, suspects, span, as_of_us)
    return {
        "streams": _streams(case, effect, rows),
        "onset": {
            "estimate_us": us(effect.onset.estimate),
            "earliest_us": us(min(effect.onset.earliest, effect.onset.estimate)),
            "latest_us": us(max(effect.onset.latest, effect.onset.estimate)),
            "lot": case.lots[effect.onset.lot],
        },
        "magnitude": magnitude,
        "suspects": suspects,
        "lots_at_risk": lots,
        "events": events_near(connection, span.first_us, us(effect.onset.latest)),
        "forecast": _forecast(case, effect, rows, characteristic, as_of_us),
        "end_us": None if effect.end is None else us(effect.end),
        "p_chance": float(effect.p_adjusted),
        "out_of_spec": _out_of_spec(case, rows),
        "sizes": _sizes(case, effect),
        "ruled_out": _ruled_out(effect, names),
        "separations": [
            {
                "keep": names.level(one.keep),
                "instead_of": names.level(one.instead_of),
                "with_level": names.level(one.with_level),
                "seen": one.seen,
            }
            for one in effect.separations
        ],
        "engine": {"factors": list(effect.level.factors), "names": list(effect.level.names)},
    }


class _Names:
    """Names of factors as people say them: those of the step that the moved readings belong to
    are said bare (`tool`, not `coat.tool`, for a resist thickness)."""

    def __init__(self, case: Case, effect: Effect) -> None:
        self._own = own_steps(case, effect)

    def factor(self, name: str) -> str:
        step, dot, bare = name.rpartition(".")
        return bare if dot and step in self._own else name

    def level(self, level: Level) -> dict[str, str]:
        return {
            "factor": "+".join(self.factor(f) for f in level.factors),
            "level": "+".join(level.names),
        }


def _ruled_out(effect: Effect, names: _Names) -> list[dict[str, Any]]:
    found: dict[tuple[str, str], dict[str, Any]] = {}
    for one in effect.ruled_out:
        if one.level.factors == (WHOLE,):
            continue
        said = names.level(one.level)
        found.setdefault(
            (said["factor"], said["level"]),
            {
                **said,
                "reason": one.reason,
                "moved": one.moved,
                "members": one.members,
                "odds": finite(one.odds),
            },
        )
    return list(found.values())


def _lots_of(case: Case, level: Level, begin: float) -> int:
    """Lots of a level that were searched since the effect began."""
    evidence = case.evidence
    mine = evidence.monitoring & (evidence.t_process >= begin)
    for factor, name in zip(level.factors, level.names, strict=True):
        if factor not in evidence.factors:
            return 0
        column = evidence.factors.index(factor)
        names = evidence.level_names[column]
        mine &= evidence.levels[:, column] == (names.index(name) if name in names else -2)
    return int(np.unique(evidence.lot[mine]).size)


def _suspects(
    case: Case, effect: Effect, names: _Names, value: float | None, lead: FamilySize
) -> list[dict[str, Any]]:
    # The engine sizes spreads and maps in normal scores; their change is told in the unit of the
    # magnitude, in proportion. Where that is not known (no wafer in the window lies before the
    # effect) neither is theirs.
    scale = 1.0
    if kind_of(lead.statistic) != "mean" and lead.value:
        scale = np.nan if value is None else value / lead.value
    out: list[dict[str, Any]] = []
    seen: set[tuple[str, str]] = set()
    for one in effect.suspects:
        levels = [level for level in (one.level, *one.aliases) if level.factors != (WHOLE,)]
        said = [names.level(level) for level in levels]
        keys = list(dict.fromkeys((s["factor"], s["level"]) for s in said))
        keys = [key for key in keys if key not in seen]
        if not keys:
            continue
        seen |= set(keys)
        out.append(
            {
                "factor": keys[0][0],
                "level": keys[0][1],
                "effect": finite(one.effect * scale),
                "effect_se": finite(one.se * abs(scale)),
                "p_adjusted": finite(min(one.p_adjusted, 1.0)),
                "n_lots": _lots_of(case, one.level, effect.onset.estimate),
                "aliased_with": [{"factor": f, "level": v} for f, v in keys[1:]],
            }
        )
    return out


def _streams(case: Case, effect: Effect, rows: pd.DataFrame) -> list[dict[str, Any]]:
    moved = [s.series for s in effect.series if s.moved]
    signalled = rows[rows["rules"] != ""]
    lead = effect.sizes[effect.leading].family

    def order(series: int) -> tuple[bool, int]:
        return (int(case.evidence.family[series]) != lead, series)

    out = []
    for series in sorted(set(moved) | set(signalled["series"].tolist()), key=order):
        stream, statistic = case.series[series]
        hits = signalled[signalled["series"] == series]
        rules = sorted({rule for text in hits["rules"] for rule in text.split(",")})
        characteristic = case.plan.characteristic[int(case.evidence.characteristic[series])]
        out.append(
            {
                "characteristic": characteristic.name,
                "statistic": statistic,
                "context": stream_context(case, stream),
                "first_signal_at_us": None if hits.empty else int(hits["at_us"].min()),
                "rules": rules,
            }
        )
    return out


def _magnitude(
    case: Case,
    effect: Effect,
    rows: pd.DataFrame,
    characteristic: Characteristic,
    lead: FamilySize,
) -> dict[str, Any]:
    if effect.form in ("spread", "map") and not characteristic.is_overlay:
        return spread_change(case, rows, characteristic)
    if kind_of(lead.statistic) == "mean":
        return {
            "value": finite(lead.value),
            "low": finite(lead.low),
            "high": finite(lead.high),
            "unit": characteristic.unit_of(lead.statistic),
            "sigmas": finite(lead.sigmas),
        }
    return spread_change(case, rows, characteristic, lead.statistic)


def spread_change(
    case: Case, rows: pd.DataFrame, characteristic: Characteristic, statistic: str = "within-wafer"
) -> dict[str, Any]:
    """Change of the within-wafer sd (signature out) over the affected lots, with an interval.

    The pooled sd of the affected wafers minus that of the same streams' monitored wafers before;
    the interval is that of a pooled sd (chi-square on its degrees of freedom).
    """
    mine = rows[rows["characteristic"] == characteristic.name]
    wafers = case.wafers
    streams = mine["stream_id"].unique()
    of_streams = wafers[wafers["stream_id"].isin(streams) & (wafers["df"] > 0)]
    keys = set(zip(mine["stream_id"], mine["lot"], strict=True))
    pairs = zip(of_streams["stream_id"], of_streams["lot"], strict=True)
    after = np.array([pair in keys for pair in pairs], bool)
    begin = mine["at_us"].min() if len(mine) else 0
    before = ~after & (of_streams["at_us"].to_numpy() < begin)
    sd_after, df_after = _pooled(of_streams[after])
    sd_before, _ = _pooled(of_streams[before])
    unit = characteristic.unit
    if df_after <= 0 or not np.isfinite(sd_before):
        return {"value": None, "low": None, "high": None, "unit": unit, "sigmas": None}
    low = sd_after * np.sqrt(df_after / chdtri(df_after, 0.025))
    high = sd_after * np.sqrt(df_after / chdtri(df_after, 0.975))
    change = sd_after - sd_before
    plotted = case.points[
        case.points["stream_id"].isin(streams) & (case.points["statistic"] == statistic)
    ]["sigma"]
    sigma = float(plotted.median()) if len(plotted) else float("nan")
    return {
        "value": finite(change),
        "low": finite(low - sd_before),
        "high": finite(high - sd_before),
        "unit": unit,
        "sigmas": finite(change / sigma) if sigma > 0 else None,
    }


def _pooled(wafers: pd.DataFrame) -> tuple[float, float]:
    df = float(wafers["df"].sum())
    return (float(np.sqrt(wafers["sum_squares"].sum() / df)), df) if df > 0 else (np.nan, 0.0)


def _sizes(case: Case, effect: Effect) -> list[dict[str, Any]]:
    out = []
    for size in effect.sizes:
        characteristic = case.plan.characteristic[size.characteristic]
        plain = kind_of(size.statistic) == "mean"
        out.append(
            {
                "characteristic": characteristic.name,
                "statistic": size.statistic,
                "value": finite(size.value),
                "low": finite(size.low),
                "high": finite(size.high),
                "unit": characteristic.unit_of(size.statistic) if plain else "normal score",
                "sigmas": finite(size.sigmas),
                "moved": bool(size.moved),
            }
        )
    return out


def _forecast(
    case: Case,
    effect: Effect,
    rows: pd.DataFrame,
    characteristic: Characteristic,
    as_of_us: int,
) -> dict[str, Any] | None:
    lead = effect.sizes[effect.leading]
    drift = effect.drift
    if drift is None or effect.end is not None or lead.statistic != "mean":
        return None
    mine = rows[(rows["statistic"] == "mean") & (rows["characteristic"] == characteristic.name)]
    if mine.empty:
        return None
    center = float(mine["center"].median())
    line = Line(drift.reference, center + drift.change, drift.per_second, drift.covariance)
    found = crossing(line, characteristic.lower_spec, characteristic.upper_spec, as_of_us / US)
    if found is None:
        return None
    return {
        "spec": found.spec,
        "expected_us": us(found.expected),
        "earliest_us": us(found.earliest),
        "latest_us": None if found.latest is None else us(found.latest),
        **_cpk_course(case, mine, line, characteristic, as_of_us / US, found.expected),
    }


def _cpk_course(
    case: Case,
    mine: pd.DataFrame,
    line: Line,
    characteristic: Characteristic,
    now: float,
    then: float,
) -> dict[str, float | None]:
    """Cpk of the drifting streams now and when the limit is reached, spread as in the baseline."""
    from spc.stats.capability_indices import SpecLimits, cpk

    variances = []
    for number in mine["baseline_id"].unique():
        part = (case.sets[int(number)].statistic("mean") or {}).get("components") or {}
        variances.append(sum(part.get(key) or 0.0 for key in ("lot", "wafer", "site")))
    sd = float(np.sqrt(np.mean(variances))) if variances else float("nan")
    if not sd > 0:
        return {"cpk_now": None, "cpk_then": None}
    spec = SpecLimits(characteristic.lower_spec, characteristic.upper_spec)
    return {
        "cpk_now": finite(float(cpk(line.at(now), sd, spec))),
        "cpk_then": finite(float(cpk(line.at(then), sd, spec))),
    }


def _out_of_spec(case: Case, rows: pd.DataFrame) -> list[str]:
    """Lots among the affected whose plotted mean lies out of specification."""
    out = []
    for name, some in rows[rows["statistic"] == "mean"].groupby("characteristic"):
        plan = case.plan.named(str(name))
        assert plan is not None  # the case holds only characteristics of the plan
        low = -np.inf if plan.lower_spec is None else plan.lower_spec
        high = np.inf if plan.upper_spec is None else plan.upper_spec
        bad = some[(some["value"] < low) | (some["value"] > high)]
        out += bad["lot"].tolist()
    return sorted(set(out))
