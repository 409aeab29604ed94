"""Causes: effects of the attribution engine, and what they leave, as excursions."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from datetime import timedelta
from typing import Any

import pandas as pd

from spc.monitoring import effect_payload, watch
from spc.monitoring.book import DAY_US, EFFECT_SHARE, QUIET_DAYS, Book, stream_keys
from spc.monitoring.effect_payload import affected_rows
from spc.monitoring.evidence import Case, build_case
from spc.monitoring.map_form import form_of
from spc.records import findings
from spc.records.findings import Excursion
from spc.records.stamps import to_us
from spc.stats.attribution import AttributionOptions, Effect, Level, attribute

Progress = Callable[[str, int, int], None]


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
        """Open and update what the engine finds; returns the points that are explained by it.

        Every pass looks at the whole window afresh, so that an early guess does not bind a later
        one; what is the same thing as before is told by level, streams and time.
        """
        known = [e for e in self._book.known() if "engine" in e.payload and self._may_go_on(e)]
        known.sort(key=lambda e: e.id)
        budget = self._book.bay.settings.nightly.false_excursions_per_night
        options = AttributionOptions(alpha=min(1.0, budget * EFFECT_SHARE))
        found = attribute(self._case.evidence, options, self._book.as_of.timestamp())
        explained: pd.Index[int] = pd.Index([], dtype="int64")
        connection, now_us = self._book.connection, self._book.now_us
        payloads = [
            effect_payload.payload_of(connection, self._case, effect, now_us) for effect in found
        ]
        same = continued(found, payloads, known, now_us)
        for i, (effect, payload) in enumerate(zip(found, payloads, strict=True)):
            rows = affected_rows(self._case, effect)
            if self._keep_effect(effect, rows, payload, same.get(i)):
                explained = explained.union(self._explains(effect, rows))
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

    def _keep_effect(
        self, effect: Effect, rows: pd.DataFrame, payload: dict[str, Any], same: Excursion | None
    ) -> bool:
        """Keep an effect: as the excursion it goes on as, or as a new one if it rests on something
        that this pass is the first to see. Returns whether it is kept."""
        form = form_of(self._book.connection, self._case, effect, rows)
        if same is None:
            before = self._book.before_us
            if before is not None and not (rows["measured_us"] > before).any():
                return False
            identity = f"effect:{'+'.join(effect.level.factors)}:{'+'.join(effect.level.names)}"
            number = self._book.open("act", form, identity, payload)
            self._merge_loose(number, payload)
            return True
        self._book.touched.add(same.id)
        if same.status != "closed":
            self._book.update(same, "act", form, payload)
            self._merge_loose(same.id, payload)
        return True

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


def continued(
    effects: Sequence[Effect],
    payloads: Sequence[dict[str, Any]],
    known: Sequence[Excursion],
    now_us: int,
) -> dict[int, Excursion]:
    """The excursion that each effect continues, by position; each excursion goes on once.

    First under its own level while their spans meet; then under another level with most of its
    streams and an onset that meets; last what a longer effect on most of its streams has swallowed:
    what looked over has come back, and was only the beginning.
    """

    def most_streams(payload: dict[str, Any], one: Excursion) -> bool:
        mine, theirs = stream_keys(payload), stream_keys(one.payload)
        return len(mine & theirs) / max(min(len(mine), len(theirs)), 1) >= 0.5

    def by_level(i: int, one: Excursion) -> bool:
        named = _level_of(one.payload["engine"]) == effects[i].level
        return named and _spans_meet(payloads[i], one.payload, now_us)

    def by_streams(i: int, one: Excursion) -> bool:
        meets = _overlap(payloads[i]["onset"], one.payload["onset"])
        return meets and most_streams(payloads[i], one)

    def swallowed(i: int, one: Excursion) -> bool:
        end, ends = one.payload.get("end_us"), payloads[i].get("end_us") or now_us
        over = one.status != "closed" and end is not None and end <= ends
        begins = payloads[i]["onset"]["earliest_us"] <= one.payload["onset"]["latest_us"]
        return over and begins and most_streams(payloads[i], one)

    found: dict[int, Excursion] = {}
    for rule in (by_level, by_streams, swallowed):
        for i in range(len(effects)):
            taken = {one.id for one in found.values()}
            if i not in found:
                fits = (one for one in known if one.id not in taken and rule(i, one))
                same = next(fits, None)
                if same is not None:
                    found[i] = same
    return found


def _spans_meet(a: dict[str, Any], b: dict[str, Any], now_us: int) -> bool:
    """Whether two effects were on at the same time."""
    ends = [one.get("end_us") or now_us for one in (a, b)]
    starts = [one["onset"]["earliest_us"] for one in (a, b)]
    return bool(starts[0] <= ends[1] and starts[1] <= ends[0])


def _level_of(engine: dict[str, Any]) -> Level:
    return Level(tuple(engine["factors"]), tuple(engine["names"]))


def _overlap(a: dict[str, Any], b: dict[str, Any]) -> bool:
    return bool(a["earliest_us"] <= b["latest_us"] and b["earliest_us"] <= a["latest_us"])


def _goes_on(known: Excursion, loose: watch.Loose) -> bool:
    """Whether the signals are of the stream of a watched excursion, and not long after it."""
    if int(known.identity.split(":")[1]) != loose.stream_id:
        return False
    return loose.first_us <= known.payload["last_signal_us"] + QUIET_DAYS * DAY_US
