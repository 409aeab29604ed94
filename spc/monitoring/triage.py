"""The night's triage: what really happened, one excursion each.

Effects of the attribution engine come first: they are explained by a level and an onset and hold
up against all that was looked at. What they leave is watched stream by stream. Silence is
separate. An excursion of an earlier night that goes on is updated, not opened again; one that was
closed stays closed while the same effect lasts.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass
from datetime import datetime
from typing import Any

from sqlalchemy import Connection

from config.load import Bay
from spc.monitoring.book import DAY_US, QUIET_DAYS, Book, stream_keys
from spc.monitoring.silence import silent_streams
from spc.records import findings
from spc.records import passes as pass_records
from spc.records.findings import Excursion

Progress = Callable[[str, int, int], None]


@dataclass(frozen=True)
class Changes:
    """What one triage did: numbers opened and updated, and how many are open after it."""

    opened: list[int]
    updated: list[int]
    n_open: int


def update_excursions(
    connection: Connection,
    bay: Bay,
    as_of: datetime,
    progress: Progress = lambda _w, _d, _t: None,
    *,
    new_points: bool = True,
) -> Changes:
    """Open, update and close excursions for a clock, in the caller's transaction.

    `new_points` false says that no point is new or changed since the last pass. Where no file has
    come either, causes are not looked for again; silence is.
    """
    book = Book(connection, bay, as_of)
    progress("looking for causes", 0, 3)
    if new_points or book.before_us is None or book.has_new_files():
        # The statistics are loaded only on nights with something to look at.
        from spc.monitoring.causes import find_causes

        find_causes(book, progress)
    progress("looking for silence", 2, 3)
    _silence(book)
    _close_quiet(book)
    changed = findings.changed_at(connection, as_of)
    progress("triage done", 3, 3)
    return Changes(changed["opened"], changed["updated"], findings.count_open(connection))


def _silence(book: Book) -> None:
    silent = silent_streams(book.connection, book.bay, book.as_of)
    plan = book.bay.plan
    open_ones = {e.identity: e for e in book.known("open", "contained") if e.pattern == "silence"}
    if not silent and not open_ones:
        return
    from spc.monitoring import silence_findings

    seen = silence_findings.seen_streams(book.connection, plan, silent)
    pace = pass_records.mean_gaps(book.connection, [s.stream_id for s in silent])
    groups = silence_findings.group_silent(silent, seen)
    spoken = {}
    for group in groups:
        payload = silence_findings.payload_of(book.connection, plan, group, book.now_us)
        tier = silence_findings.tier_of(group, pace, book.now_us, len(seen))
        same = open_ones.get(group.identity) or _same_streams(payload, open_ones.values())
        if same is None:
            if not _closed_since(book, group.identity, payload["onset"]["estimate_us"]):
                book.open(tier, "silence", group.identity, payload)
        else:
            spoken[same.id] = True
            book.update(same, tier, "silence", payload)
    for one in open_ones.values():
        if one.id not in spoken:
            _end_silence(book, one)


def _closed_since(book: Book, identity: str, since_us: int) -> bool:
    """Whether a person closed this very silence: it does not come back until readings do."""
    return any(
        e.identity == identity and e.payload["onset"]["estimate_us"] == since_us
        for e in book.known("closed")
    )


def _end_silence(book: Book, one: Excursion) -> None:
    payload = {**one.payload, "end_us": book.now_us}
    book.update(one, one.tier, "silence", payload)
    findings.set_status(book.connection, one.id, "closed")
    book.act(one.id, "close", "readings came again", {"outcome": "ended", "cause": ""})


def _close_quiet(book: Book) -> None:
    for one in book.known("open"):
        last = one.payload.get("last_signal_us")
        if one.tier != "watch" or last is None or last > book.now_us - QUIET_DAYS * DAY_US:
            continue
        if one.opened_us == book.now_us:
            continue
        findings.set_status(book.connection, one.id, "closed")
        text = f"no new signal for {QUIET_DAYS} days"
        book.act(one.id, "close", text, {"outcome": "quiet", "cause": ""})


def _same_streams(payload: dict[str, Any], known: Iterable[Excursion]) -> Excursion | None:
    mine = stream_keys(payload)
    return next((e for e in known if stream_keys(e.payload) & mine), None)
