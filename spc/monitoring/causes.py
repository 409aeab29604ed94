"""Causes: effects of the attribution engine, and what they leave, as excursions."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from datetime import timedelta
from typing import Any, cast

import pandas as pd

from spc.monitoring import effect_payload, watch
from spc.monitoring.book import DAY_US, EFFECT_SHARE, QUIET_DAYS, Book, stream_keys
from spc.monitoring.effect_payload import affected_rows
from spc.monitoring.evidence import Case, build_case
from spc.records import findings
from spc.records.findings import Excursion
from spc.records.stamps import to_us
from spc.stats.attribution import AttributionOptions, Effect, Level, attribute

Progress = Callable[[str, int, int], None]


@dataclass(frozen=True)
class _Known:
    """What the engine needs of an effect of an earlier night."""

    level: Level


def find_causes(book: Book, progress: Progress) -> None:
    """Look for what explains the readings up to the clock; open and update excursions."""
    since = book.as_of - timedelta(days=book.bay.settings.nightly.keep_history_days)
    case = build_case(book.connection, book.bay.plan, to_us(since), book.now_us)
    if case is not None:
        causes = _Causes(book, case)
        explained = causes.effects()
        progress("looking at loose signals", 1, 3)
        causes.loose(explained)


class _Causes:
    def __init__(self, book: Book, case: Case) -> None:
        self._book = book
        self._case = case

    def effects(self) -> pd.Index[int]:
        known = [e for e in self._book.known() if "engine" in e.payload and self._may_go_on(e)]
        known.sort(key=lambda e: e.id)
        previous = [_Known(_level_of(e.payload["engine"])) for e in known]
        budget = self._book.bay.settings.nightly.false_excursions_per_night
        options = AttributionOptions(
            alpha=min(1.0, budget * EFFECT_SHARE),
            since=None if self._book.before_us is None else self._book.before_us / 1e6,
        )
        found = attribute(
            self._case.evidence,
            options,
            self._book.as_of.timestamp(),
            cast("list[Effect]", previous),
        )
        explained: pd.Index[int] = pd.Index([], dtype="int64")
        for effect in found:
            rows = affected_rows(self._case, effect)
            explained = explained.union(self._explains(effect, rows))
            self._keep_effect(effect, known)
        return explained

    def _may_go_on(self, excursion: Excursion) -> bool:
        """Effects older than the window of triage are history."""
        reach = self._book.bay.settings.nightly.keep_history_days * DAY_US
        onset = excursion.payload["onset"]["estimate_us"]
        return bool(onset > self._book.now_us - reach)

    def _explains(self, effect: Effect, rows: pd.DataFrame) -> pd.Index[int]:
        """Every point of the affected streams in the span, whatever the statistic: a shifted mean
        also shows on the spread between wafers and on the map."""
        span = effect_payload.span_of(effect, self._book.now_us)
        points = self._case.points
        inside = points["stream_id"].isin(rows["stream_id"].unique())
        inside &= (points["at_us"] >= span.first_us) & (points["at_us"] <= span.last_us)
        return points.index[inside]

    def _keep_effect(self, effect: Effect, known: list[Excursion]) -> None:
        payload = effect_payload.payload_of(
            self._book.connection, self._case, effect, self._book.now_us
        )
        same = known[effect.previous] if effect.previous is not None else None
        if same is not None and not _same_thing(effect, payload, same):
            same = None  # the engine took the name of an old effect for a new one
        same = same or self._alike(payload, effect.form, known)
        if same is not None and same.id in self._book.touched:
            return
        if same is None:
            identity = f"effect:{'+'.join(effect.level.factors)}:{'+'.join(effect.level.names)}"
            number = self._book.open("act", effect.form, identity, payload)
            self._merge_loose(number, payload)
        else:
            self._book.touched.add(same.id)
            if same.status != "closed":
                self._book.update(same, "act", effect.form, payload)
                self._merge_loose(same.id, payload)

    def _alike(
        self, payload: dict[str, Any], form: str, known: list[Excursion]
    ) -> Excursion | None:
        """An excursion that tells of the same thing under another level: most of its streams and
        an onset that overlaps."""
        mine = stream_keys(payload)
        for one in known:
            if one.id in self._book.touched:
                continue
            theirs = stream_keys(one.payload)
            common = len(mine & theirs) / max(min(len(mine), len(theirs)), 1)
            if common >= 0.5 and _overlap(payload["onset"], one.payload["onset"]):
                return one
        return None

    def _merge_loose(self, number: int, payload: dict[str, Any]) -> None:
        """Watched signals that the effect explains become part of it."""
        mine = stream_keys(payload)
        begin = payload["onset"]["earliest_us"]
        for one in self._book.known("open", "contained"):
            if not one.identity.startswith("stream:") or not stream_keys(one.payload) & mine:
                continue
            if one.payload.get("last_signal_us", 0) >= begin:
                findings.set_merged(self._book.connection, one.id, number)
                text = f"explained by excursion {number}"
                self._book.act(one.id, "merge", text, {"into": number})

    def loose(self, explained: pd.Index[int]) -> None:
        open_ones = [
            e for e in self._book.known("open", "contained") if e.identity.startswith("stream:")
        ]
        closed = {e.identity for e in self._book.known("closed", merged=True)}
        merged = {e.identity for e in self._book.known(merged=True) if e.merged_into is not None}
        # A first pass over weeks of history is not the time to report every old rule hit.
        newer = self._book.before_us
        if newer is None:
            newer = self._book.now_us - QUIET_DAYS * DAY_US
        for loose in watch.loose_signals(self._case, explained, newer):
            payload = watch.payload_of(self._book.connection, self._case, loose, self._book.now_us)
            pattern = watch.pattern_of(loose.rows)
            same = next((e for e in open_ones if _goes_on(e, loose)), None)
            if same is not None:
                kept = watch.carried_on(same.payload, payload)
                self._book.update(same, loose.tier, same.pattern, kept)
            elif loose.identity not in closed | merged:
                self._book.open(loose.tier, pattern, loose.identity, payload)


def _same_thing(effect: Effect, payload: dict[str, Any], known: Excursion) -> bool:
    """An effect goes on under its own level, or under another one from the same time on."""
    if effect.level == _level_of(known.payload["engine"]):
        return True
    return _overlap(payload["onset"], known.payload["onset"])


def _level_of(engine: dict[str, Any]) -> Level:
    return Level(tuple(engine["factors"]), tuple(engine["names"]))


def _overlap(a: dict[str, Any], b: dict[str, Any]) -> bool:
    return bool(a["earliest_us"] <= b["latest_us"] and b["earliest_us"] <= a["latest_us"])


def _goes_on(known: Excursion, loose: watch.Loose) -> bool:
    """Whether the signals are of the stream of a watched excursion, and not long after it."""
    if int(known.identity.split(":")[1]) != loose.stream_id:
        return False
    return loose.first_us <= known.payload["last_signal_us"] + QUIET_DAYS * DAY_US
