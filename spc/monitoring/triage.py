"""The night's triage: what really happened, one excursion each.

Effects of the attribution engine come first: they are explained by a level and an onset and hold
up against all that was looked at. What they leave is watched stream by stream. Silence is
separate. An excursion of an earlier night that goes on is updated, not opened again; one that was
closed stays closed while the same effect lasts.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from datetime import datetime, timedelta
from typing import Any, cast

import pandas as pd
from sqlalchemy import Connection

from config.load import Bay
from spc.monitoring import effect_payload, silence_findings, watch
from spc.monitoring.effect_payload import affected_rows
from spc.monitoring.evidence import Case, build_case
from spc.monitoring.silence import silent_streams
from spc.records import actions, findings
from spc.records import passes as pass_records
from spc.records.findings import Excursion
from spc.records.stamps import to_us
from spc.stats.attribution import AttributionOptions, Effect, Level, attribute

Progress = Callable[[str, int, int], None]
DAY_US = 86_400_000_000

ENGINE = "yellowbay"  # who acts when the program closes or merges by itself
# The part of the alarm budget that effects may spend; the rest is for what else is acted on.
EFFECT_SHARE = 0.5
QUIET_DAYS = 7  # a watched stream without a new signal for so long is closed


@dataclass
class Changes:
    """What one triage did."""

    opened: list[int] = field(default_factory=list)
    updated: list[int] = field(default_factory=list)
    n_open: int = 0


@dataclass(frozen=True)
class _Known:
    """What the engine needs of an effect of an earlier night."""

    level: Level


def update_excursions(
    connection: Connection, bay: Bay, as_of: datetime, progress: Progress = lambda _w, _d, _t: None
) -> Changes:
    """Open, update and close excursions for a clock, in the caller's transaction."""
    return _Triage(connection, bay, as_of).run(progress)


class _Triage:
    def __init__(self, connection: Connection, bay: Bay, as_of: datetime) -> None:
        self._connection = connection
        self._bay = bay
        self._as_of = as_of
        self._now_us = to_us(as_of)
        self._before_us = pass_records.last_before(connection, self._now_us)
        self._changes = Changes()
        self._touched: set[int] = set()

    def run(self, progress: Progress) -> Changes:
        progress("looking for causes", 0, 3)
        since = self._as_of - timedelta(days=self._bay.settings.nightly.keep_history_days)
        case = build_case(self._connection, self._bay.plan, to_us(since), self._now_us)
        if case is not None:
            explained = self._effects(case)
            progress("looking at loose signals", 1, 3)
            self._loose(case, explained)
        progress("looking for silence", 2, 3)
        self._silence()
        self._close_quiet()
        changed = findings.changed_at(self._connection, self._as_of)
        self._changes.opened, self._changes.updated = changed["opened"], changed["updated"]
        self._changes.n_open = findings.count_open(self._connection)
        progress("triage done", 3, 3)
        return self._changes

    # ---- effects ------------------------------------------------------------------------------

    def _effects(self, case: Case) -> pd.Index[int]:
        known = [
            e
            for e in findings.listed(self._connection, until=self._as_of)
            if "engine" in e.payload and self._may_go_on(e)
        ]
        known.sort(key=lambda e: e.id)
        previous = [
            _Known(
                Level(tuple(e.payload["engine"]["factors"]), tuple(e.payload["engine"]["names"]))
            )
            for e in known
        ]
        budget = self._bay.settings.nightly.false_excursions_per_night
        options = AttributionOptions(
            alpha=min(1.0, budget * EFFECT_SHARE),
            since=None if self._before_us is None else self._before_us / 1e6,
        )
        found = attribute(
            case.evidence, options, self._as_of.timestamp(), cast("list[Effect]", previous)
        )
        explained: pd.Index[int] = pd.Index([], dtype="int64")
        for effect in found:
            rows = affected_rows(case, effect)
            explained = explained.union(self._explains(case, effect, rows))
            self._keep_effect(case, effect, known)
        return explained

    def _may_go_on(self, excursion: Excursion) -> bool:
        """Effects older than the window of triage are history."""
        reach = self._bay.settings.nightly.keep_history_days * DAY_US
        onset = excursion.payload["onset"]["estimate_us"]
        return bool(onset > self._now_us - reach)

    def _explains(self, case: Case, effect: Effect, rows: pd.DataFrame) -> pd.Index[int]:
        """Every point of the affected streams in the span, whatever the statistic: a shifted mean
        also shows on the spread between wafers and on the map."""
        span = effect_payload.span_of(effect, self._now_us)
        points = case.points
        inside = points["stream_id"].isin(rows["stream_id"].unique())
        inside &= (points["at_us"] >= span.first_us) & (points["at_us"] <= span.last_us)
        return points.index[inside]

    def _keep_effect(self, case: Case, effect: Effect, known: list[Excursion]) -> None:
        payload = effect_payload.payload_of(self._connection, case, effect, self._now_us)
        same = known[effect.previous] if effect.previous is not None else None
        same = same or self._alike(payload, effect.form, known)
        if same is not None and same.id in self._touched:
            return
        if same is None:
            identity = f"effect:{'+'.join(effect.level.factors)}:{'+'.join(effect.level.names)}"
            number = self._open("act", effect.form, identity, payload)
            self._merge_loose(number, payload)
        else:
            self._touched.add(same.id)
            if same.status != "closed":
                self._update(same, "act", effect.form, payload)
                self._merge_loose(same.id, payload)

    def _alike(
        self, payload: dict[str, Any], form: str, known: list[Excursion]
    ) -> Excursion | None:
        """An excursion that tells of the same thing under another level: most of its streams and
        an onset that overlaps."""
        mine = _stream_keys(payload)
        for one in known:
            if one.id in self._touched:
                continue
            theirs = _stream_keys(one.payload)
            common = len(mine & theirs) / max(min(len(mine), len(theirs)), 1)
            if common >= 0.5 and _overlap(payload["onset"], one.payload["onset"]):
                return one
        return None

    def _merge_loose(self, number: int, payload: dict[str, Any]) -> None:
        """Watched signals that the effect explains become part of it."""
        mine = _stream_keys(payload)
        begin = payload["onset"]["earliest_us"]
        for one in findings.listed(
            self._connection, until=self._as_of, statuses=("open", "contained")
        ):
            if not one.identity.startswith("stream:") or not _stream_keys(one.payload) & mine:
                continue
            if one.payload.get("last_signal_us", 0) >= begin:
                findings.set_merged(self._connection, one.id, number)
                text = f"explained by excursion {number}"
                self._act(one.id, "merge", text, {"into": number})

    # ---- what effects leave -------------------------------------------------------------------

    def _loose(self, case: Case, explained: pd.Index[int]) -> None:
        open_ones = [
            e
            for e in findings.listed(
                self._connection, until=self._as_of, statuses=("open", "contained")
            )
            if e.identity.startswith("stream:")
        ]
        closed = {
            e.identity
            for e in findings.listed(
                self._connection, until=self._as_of, statuses=("closed",), merged=True
            )
        }
        merged = {
            e.identity
            for e in findings.listed(self._connection, until=self._as_of, merged=True)
            if e.merged_into is not None
        }
        # A first pass over weeks of history is not the time to report every old rule hit.
        newer = self._before_us
        if newer is None:
            newer = self._now_us - QUIET_DAYS * DAY_US
        for loose in watch.loose_signals(case, explained, newer):
            payload = watch.payload_of(self._connection, case, loose, self._now_us)
            pattern = watch.pattern_of(loose.rows)
            same = next((e for e in open_ones if _goes_on(e, loose)), None)
            if same is not None:
                self._update(same, loose.tier, pattern, payload)
            elif loose.identity not in closed | merged:
                self._open(loose.tier, pattern, loose.identity, payload)

    # ---- silence ------------------------------------------------------------------------------

    def _silence(self) -> None:
        silent = silent_streams(self._connection, self._bay, self._as_of)
        plan = self._bay.plan
        open_ones = {
            e.identity: e
            for e in findings.listed(
                self._connection, until=self._as_of, statuses=("open", "contained")
            )
            if e.pattern == "silence"
        }
        seen = silence_findings.seen_streams(self._connection, plan, silent)
        pace = pass_records.mean_gaps(self._connection, [s.stream_id for s in silent])
        groups = silence_findings.group_silent(silent, seen)
        spoken = {}
        for group in groups:
            payload = silence_findings.payload_of(self._connection, plan, group, self._now_us)
            tier = silence_findings.tier_of(group, pace, self._now_us, len(seen))
            same = open_ones.get(group.identity) or _same_streams(payload, open_ones.values())
            if same is None:
                if not self._closed_since(group.identity, payload["onset"]["estimate_us"]):
                    self._open(tier, "silence", group.identity, payload)
            else:
                spoken[same.id] = True
                self._update(same, tier, "silence", payload)
        for one in open_ones.values():
            if one.id not in spoken:
                self._end_silence(one)

    def _closed_since(self, identity: str, since_us: int) -> bool:
        """Whether a person closed this very silence: it does not come back until readings do."""
        return any(
            e.identity == identity and e.payload["onset"]["estimate_us"] == since_us
            for e in findings.listed(self._connection, until=self._as_of, statuses=("closed",))
        )

    def _end_silence(self, one: Excursion) -> None:
        payload = {**one.payload, "end_us": self._now_us}
        self._update(one, one.tier, "silence", payload)
        findings.set_status(self._connection, one.id, "closed")
        self._act(one.id, "close", "readings came again", {"outcome": "ended", "cause": ""})

    # ---- housekeeping -------------------------------------------------------------------------

    def _close_quiet(self) -> None:
        for one in findings.listed(self._connection, until=self._as_of, statuses=("open",)):
            last = one.payload.get("last_signal_us")
            if one.tier != "watch" or last is None or last > self._now_us - QUIET_DAYS * DAY_US:
                continue
            if one.opened_us == self._now_us:
                continue
            findings.set_status(self._connection, one.id, "closed")
            text = f"no new signal for {QUIET_DAYS} days"
            self._act(one.id, "close", text, {"outcome": "quiet", "cause": ""})

    def _open(self, tier: str, pattern: str, identity: str, payload: dict[str, Any]) -> int:
        number = findings.opened(
            self._connection,
            tier=tier,
            pattern=pattern,
            identity=identity,
            as_of=self._as_of,
            payload=payload,
        )
        self._touched.add(number)
        return number

    def _update(self, one: Excursion, tier: str, pattern: str, payload: dict[str, Any]) -> None:
        # What was to act on stays so until a person closes it.
        tier = "act" if "act" in (tier, one.tier) else tier
        gone = one.payload.get("split_out", [])
        if gone:
            kept = [s for s in payload["streams"] if findings.stream_key(s) not in gone]
            payload = {**payload, "streams": kept, "split_out": gone}
        findings.updated(
            self._connection, one, tier=tier, pattern=pattern, as_of=self._as_of, payload=payload
        )

    def _act(self, number: int, action: str, text: str, detail: dict[str, Any]) -> None:
        subject = findings.subject(number)
        actions.append(
            self._connection, actions.Action(self._as_of, ENGINE, subject, action, text, detail)
        )


def _level_of(engine: dict[str, Any]) -> Level:
    return Level(tuple(engine["factors"]), tuple(engine["names"]))


def _stream_keys(payload: dict[str, Any]) -> set[str]:
    return {findings.stream_key(s, statistic=False) for s in payload["streams"]}


def _overlap(a: dict[str, Any], b: dict[str, Any]) -> bool:
    return bool(a["earliest_us"] <= b["latest_us"] and b["earliest_us"] <= a["latest_us"])


def _goes_on(known: Excursion, loose: watch.Loose) -> bool:
    """Whether the signals are of the stream of a watched excursion, and not long after it."""
    if int(known.identity.split(":")[1]) != loose.stream_id:
        return False
    return loose.first_us <= known.payload["last_signal_us"] + QUIET_DAYS * DAY_US


def _same_streams(payload: dict[str, Any], known: Any) -> Excursion | None:
    mine = _stream_keys(payload)
    return next((e for e in known if _stream_keys(e.payload) & mine), None)
