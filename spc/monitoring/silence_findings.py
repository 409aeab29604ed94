"""Silent streams as excursions: one for each reason that explains who fell silent."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import pandas as pd
from sqlalchemy import Connection

from config.control_plan import ControlPlan
from spc.monitoring.events import events_near
from spc.monitoring.lots_at_risk import Suspicion, lots_at_risk
from spc.monitoring.silence import SilentStream
from spc.records import plotted

# A gap this much longer than chance would give (natural log), pooled over the streams, is acted on.
_SURE = math.log(1000.0)
_REASONS = (("gauge",), ("tool",), ("tool", "module"), ("module",))


@dataclass(frozen=True)
class Seen:
    """A stream that could fall silent: its columns, whether it has, and when each gauge last
    measured it (us)."""

    stream_id: int
    columns: dict[str, str]
    silent: bool
    gauges: dict[str, int]


@dataclass(frozen=True)
class SilentGroup:
    """Streams silent for one reason: `factors` and `levels` of it (empty: no common one), and
    other reasons that the streams cannot tell from it."""

    factors: tuple[str, ...]
    levels: tuple[str, ...]
    aliases: tuple[tuple[tuple[str, ...], tuple[str, ...]], ...]
    streams: tuple[SilentStream, ...]

    @property
    def identity(self) -> str:
        """What makes it the same excursion next night."""
        if not self.factors:
            return f"silence:stream:{self.streams[0].stream_id}"
        return f"silence:{'+'.join(self.factors)}:{'+'.join(self.levels)}"


def group_silent(silent: Sequence[SilentStream], seen: Sequence[Seen]) -> list[SilentGroup]:
    """Explain who fell silent by as few reasons as possible.

    A reason explains its silent streams only if none of its streams still reports, and a gauge only
    if it has measured nothing else since; of those that do, the one with most silent streams comes
    first, a gauge before a tool before a module.
    """
    left = {s.stream_id: s for s in silent}
    groups = []
    while left:
        best = _best_reason(list(left.values()), seen)
        if best is None:
            groups += [SilentGroup((), (), (), (s,)) for s in left.values()]
            break
        factors, levels, members, aliases = best
        streams = tuple(left.pop(s.stream_id) for s in members)
        groups.append(SilentGroup(factors, levels, aliases, streams))
    return groups


def _key(columns: dict[str, str], factors: tuple[str, ...]) -> tuple[str, ...] | None:
    levels = tuple(columns.get(f, "") for f in factors)
    return levels if all(levels) else None


def _best_reason(
    silent: list[SilentStream], seen: Sequence[Seen]
) -> tuple[tuple[str, ...], tuple[str, ...], list[SilentStream], Any] | None:
    found: list[tuple[int, int, tuple[str, ...], tuple[str, ...], list[SilentStream]]] = []
    for rank, factors in enumerate(_REASONS):
        alive = {_key(s.columns, factors) for s in seen if not s.silent}
        by_level: dict[tuple[str, ...], list[SilentStream]] = {}
        for stream in silent:
            key = _key(stream.columns, factors)
            if key is not None and key not in alive:
                by_level.setdefault(key, []).append(stream)
        for key, members in by_level.items():
            if factors != ("gauge",) or not _still_measures(key[0], members, seen):
                found.append((-len(members), rank, factors, key, members))
    if not found:
        return None
    found.sort(key=lambda f: (f[0], f[1], f[3]))
    _, _, factors, levels, members = found[0]
    same = {m.stream_id for m in members}
    aliases = tuple(
        (f, key)
        for _, _, f, key, m in found[1:]
        if {s.stream_id for s in m} == same and not set(factors) < set(f)
    )
    return factors, levels, members, aliases


def _still_measures(gauge: str, members: list[SilentStream], seen: Sequence[Seen]) -> bool:
    """Whether a gauge measured another stream well after the last reading of those it is to have
    silenced: the newest wafers of all others may by chance have been on other gauges."""
    patience = min(m.expected_every.total_seconds() for m in members) * 1e6
    after = max(m.last_measured_us for m in members) + 0.5 * patience
    return any(s.gauges.get(gauge, 0) > after for s in seen if not s.silent)


def seen_streams(
    connection: Connection, plan: ControlPlan, silent: Sequence[SilentStream]
) -> list[Seen]:
    """Every stream of the characteristics that expect readings."""
    quiet = {s.stream_id for s in silent}
    return [
        Seen(one.stream_id, one.columns, one.stream_id in quiet, one.gauges)
        for c in plan.characteristic
        if c.expected_every is not None
        for one in plotted.last_seen(connection, c.name)
    ]


def chance_exponent(group: SilentGroup, pace: dict[int, float], now_us: int) -> float:
    """-log of the chance of gaps as long in all streams, were readings to come at random.

    `pace` is the mean gap of each stream in us; a stream of unknown pace counts its expected gap
    as one mean gap.
    """
    total = 0.0
    for stream in group.streams:
        mean = pace.get(stream.stream_id) or stream.expected_every.total_seconds() * 1e6
        total += (now_us - stream.last_measured_us) / max(mean, 1.0)
    return total


def tier_of(group: SilentGroup, pace: dict[int, float], now_us: int, n_streams: int) -> str:
    """`act` where chance does not make such gaps in any of the bay's streams, else `watch`."""
    sure = chance_exponent(group, pace, now_us) > _SURE + math.log(max(n_streams, 1))
    return "act" if sure else "watch"


def payload_of(
    connection: Connection, plan: ControlPlan, group: SilentGroup, as_of_us: int
) -> dict[str, Any]:
    """What is kept of a silence (see the contract's `excursions`)."""
    last = max(s.last_measured_us for s in group.streams)
    # A gauge falls silent when it measures no more, a tool with its first wafer not measured.
    of_gauge = group.factors == ("gauge",)
    begin = last if of_gauge else max(s.last_at_us for s in group.streams)
    lots = _unmeasured(connection, plan, group, as_of_us)
    suspects = []
    if group.factors:
        said = [(group.factors, group.levels), *group.aliases]
        names = [{"factor": "+".join(f), "level": "+".join(v)} for f, v in said]
        suspects = [{**names[0], "effect": None, "p_adjusted": None, "aliased_with": names[1:]}]
    return {
        "streams": [
            {
                "characteristic": s.characteristic,
                "statistic": "mean",
                "context": s.context,
                "first_signal_at_us": s.silent_since_us,
                "rules": [],
            }
            for s in sorted(group.streams, key=lambda s: (s.characteristic, s.stream_id))
        ],
        "onset": {
            "estimate_us": begin,
            "earliest_us": begin,
            "latest_us": max(begin, min(s.silent_since_us for s in group.streams)),
            "lot": lots[0]["lot"] if lots else None,
        },
        "magnitude": {"value": None, "low": None, "high": None, "unit": None, "sigmas": None},
        "suspects": suspects,
        "lots_at_risk": lots,
        "events": events_near(connection, begin, last),
        "forecast": None,
        "end_us": None,
        "silent_hours": round((as_of_us - last) / 3.6e9, 2),
    }


def _unmeasured(
    connection: Connection, plan: ControlPlan, group: SilentGroup, as_of_us: int
) -> list[dict[str, Any]]:
    """Lots processed since the last reading of their stream that nobody measured."""
    frames = []
    for stream in group.streams:
        characteristic = plan.named(stream.characteristic)
        assert characteristic is not None  # silent streams come from the plan
        wanted = {**characteristic.where, **{k: v for k, v in stream.context.items() if v}}
        suspicion = Suspicion(
            tuple(wanted), tuple(wanted.values()), stream.last_at_us + 1, as_of_us
        )
        frames.append(lots_at_risk(connection, suspicion, characteristic.parameters, as_of_us))
    frame = pd.concat(frames, ignore_index=True) if frames else pd.DataFrame()
    if frame.empty:
        return []
    frame = frame[~frame["measured"].astype(bool)]
    frame = frame.sort_values(["processed_us", "lot"]).drop_duplicates(["lot", "layer"])
    return [
        {
            "lot": row.lot,
            "layer": row.layer,
            "wafers": list(row.wafers),
            "measured": False,
            "processed_at_us": int(row.processed_us),
            "predicted": None,
            "unit": None,
            "p_out_of_spec": None,
        }
        for row in _rows(frame)
    ]


def _rows(frame: pd.DataFrame) -> Any:
    return frame.itertuples(index=False)
