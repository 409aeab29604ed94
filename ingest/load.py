"""One pass over the drop folder: drop file -> records, one transaction a file.

A file and its row in the ledger land together: after any crash a file is in whole or not at all,
and the next pass takes up what is missing. Files are never moved, changed or deleted; one that is
no drop is put in quarantine by its entry in the ledger, with the reason, and stays where it lies.
It is tried again when its content changes, or when the feeds of the configuration do.
"""

from __future__ import annotations

from collections.abc import Callable, Generator, Sequence
from concurrent.futures import Future, ThreadPoolExecutor
from contextlib import ExitStack, closing
from dataclasses import dataclass
from datetime import datetime

from sqlalchemy import Connection, Engine

from config.load import Bay
from ingest.drops import Drop, NotSettledError, find_drops, read_drop, settled
from ingest.feeds import feeds_of
from ingest.prepare import Rulebook
from ingest.report import FileReport, IngestReport, LateFeed, Reason
from ingest.store import Fetched, Store
from ingest.units import planned_units
from spc.records import ledger
from spc.records.sessions import reading
from spc.records.stamps import to_us

# Larger files are not read ahead: two of the largest at once would need too much memory.
READ_AHEAD_BYTES = 16 * 1024 * 1024

Progress = Callable[[int, int, str], None]


def take_in(
    engine: Engine,
    bay: Bay,
    clock: datetime,
    *,
    now: datetime | None = None,
    stop: Callable[[], bool] = lambda: False,
    progress: Progress | None = None,
) -> IngestReport:
    """Take in what has landed in the drop folder and is not in yet.

    Parameters
    ----------
    engine : the database, its schema up to date.
    bay : the configuration.
    clock : clock of the pass (aware), written to the ledger. Rows later than it are stored as well.
    now : time of day (aware) against which the age of files is held; `clock` without it. They
        differ where a pass looks back: a file still being written must wait all the same.
    stop : asked between files; the pass ends early, and whole, when it says True.
    progress : called with (files done, files to do, path) before each file.

    Raises
    ------
    ingest.drops.DropFolderError
        When the drop folder is missing or cannot be read.
    sqlalchemy.exc.DBAPIError
        When the database fails; the file in hand is not in, those before it are.
    """
    clock_us = to_us(clock)
    now_ns = to_us(now or clock) * 1000
    settings = bay.settings
    feeds = feeds_of(settings)
    found = find_drops(bay.path(settings.drops.folder))
    with reading(engine) as connection:
        seen = ledger.sightings_of(connection)
        stale = ledger.stale_hashes(connection, feeds.digest)
        units = ledger.parameter_units(connection)
    todo, unchanged = [], 0
    waiting = [_unreadable(path, why) for path, why in found.unreadable]
    for drop in found.drops:
        known = seen.get(drop.path)
        if (
            known is not None
            and (known.bytes, known.modified_ns) == (drop.size, drop.modified_ns)
            and known.content_hash not in stale
        ):
            unchanged += 1
        elif settled(drop, now_ns, settings.drops.settle_seconds):
            todo.append(drop)
        else:
            waiting.append(_waiting(drop, "was changed just now and may still be written"))
    rulebook = Rulebook(settings, planned_units(bay.plan), units)
    store = Store(engine, clock_us, feeds, rulebook)
    reports: list[FileReport] = []
    stopped = False
    with closing(_in_hand(todo, store)) as in_hand:
        for done, drop in enumerate(todo):
            if stop():
                stopped = True
                break
            if progress is not None:
                progress(done, len(todo), drop.path)
            claimed = next(in_hand)
            report = claimed.waiting
            if claimed.fetched is not None:
                report = store.store(claimed.fetched)
            if report is None:
                unchanged += 1
            else:
                reports.append(report)
    with reading(engine) as connection:
        late = late_feeds(connection, bay, clock_us)
    return IngestReport(
        files=tuple(sorted([*reports, *waiting], key=lambda one: one.path)),
        late=late,
        stopped=stopped,
        unchanged=unchanged,
    )


@dataclass(frozen=True)
class _Claimed:
    """A file in hand: read, or the reason why it has to wait. `release` gives it back."""

    fetched: Fetched | None
    waiting: FileReport | None
    release: Callable[[], None]


def _fetch(drop: Drop, store: Store) -> _Claimed:
    """Claim, read and prepare one file; needs no transaction and may run beside the storing."""
    with ExitStack() as stack:
        if not stack.enter_context(ledger.claimed(store.engine, drop.path)):
            return _Claimed(None, _waiting(drop, "another worker has it in hand"), _nothing)
        try:
            content = read_drop(drop, store.rulebook.settings.drops.max_file_bytes)
        except NotSettledError as error:
            return _Claimed(None, _waiting(drop, str(error)), _nothing)
        with reading(store.engine) as connection:
            entry = ledger.entry_of(connection, content.digest)
        prepared = store.prepare(drop, content) if store.deserves_a_try(entry) else None
        return _Claimed(Fetched(drop, content, prepared), None, stack.pop_all().close)
    raise AssertionError  # pragma: no cover - the stack swallows nothing


def _nothing() -> None:
    """Release of what was never claimed."""


def _in_hand(todo: Sequence[Drop], store: Store) -> Generator[_Claimed, None, None]:
    """Each file in turn; while one is stored the next is read already, if it is not too large."""
    with ThreadPoolExecutor(1, thread_name_prefix="ingest") as pool:
        ahead: Future[_Claimed] | None = None
        try:
            for i, drop in enumerate(todo):
                current = ahead.result() if ahead is not None else _fetch(drop, store)
                ahead = None
                if i + 1 < len(todo) and todo[i + 1].size <= READ_AHEAD_BYTES:
                    ahead = pool.submit(_fetch, todo[i + 1], store)
                try:
                    yield current
                finally:
                    current.release()
        finally:
            if ahead is not None:
                ahead.result().release()


def _unreadable(folder: str, why: str) -> FileReport:
    reason = Reason(None, None, None, f"the folder cannot be read: {why}; mend its permissions")
    return FileReport(folder + "/", "waiting", reasons=(reason,))


def _waiting(drop: Drop, why: str) -> FileReport:
    return FileReport(drop.path, "waiting", reasons=(Reason(None, None, None, why),))


def late_feeds(connection: Connection, bay: Bay, clock_us: int) -> tuple[LateFeed, ...]:
    """Feeds whose last file is longer ago than they should be silent."""
    newest = ledger.newest_by_feed(connection)
    late = []
    for feed in bay.settings.feed:
        if feed.expected_every is None:
            continue
        seconds = feed.expected_every.total_seconds()
        last = newest.get(feed.name)
        if last is None or clock_us - last > seconds * 1e6:
            late.append(LateFeed(feed.name, last, seconds))
    return tuple(late)
