"""One pass over the drop folder: drop file -> records, one transaction a file.

A file and its row in the ledger land together: after any crash a file is in whole or not at all,
and the next pass takes up what is missing. Files are never moved, changed or deleted; one that is
no drop is put in quarantine by its entry in the ledger, with the reason, and stays where it lies.
It is tried again when its content changes, or when the feeds of the configuration do.
"""

from __future__ import annotations

from collections.abc import Callable
from contextlib import closing
from dataclasses import dataclass
from datetime import datetime

from sqlalchemy import Connection, Engine

from config.load import Bay
from ingest.drops import Drop, find_drops, settled
from ingest.feeds import feeds_of
from ingest.report import FileReport, IngestReport, LateFeed, waiting
from spc.records import ledger
from spc.records.sessions import reading
from spc.records.stamps import to_us

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
    found = _sorted_out(engine, bay, to_us(now or clock) * 1000)
    stopped = _store_all(engine, bay, clock_us, found, stop, progress) if found.todo else False
    with reading(engine) as connection:
        late = late_feeds(connection, bay, clock_us)
    return IngestReport(
        files=tuple(sorted(found.reports, key=lambda one: one.path)),
        late=late,
        stopped=stopped,
        unchanged=found.unchanged,
    )


@dataclass
class _Sorted:
    """The files of the drop folder: to be taken in, reported on, and how many are in already."""

    todo: list[Drop]
    reports: list[FileReport]
    unchanged: int = 0


def _sorted_out(engine: Engine, bay: Bay, now_ns: int) -> _Sorted:
    settings = bay.settings
    found = find_drops(bay.path(settings.drops.folder))
    with reading(engine) as connection:
        seen = ledger.sightings_of(connection)
        stale = ledger.stale_hashes(connection, feeds_of(settings).digest)
    result = _Sorted([], [_unreadable(path, why) for path, why in found.unreadable])
    for drop in found.drops:
        known = seen.get(drop.path)
        if (
            known is not None
            and (known.bytes, known.modified_ns) == (drop.size, drop.modified_ns)
            and known.content_hash not in stale
        ):
            result.unchanged += 1
        elif settled(drop, now_ns, settings.drops.settle_seconds):
            result.todo.append(drop)
        else:
            result.reports.append(
                waiting(drop.path, "was changed just now and may still be written")
            )
    return result


def _store_all(
    engine: Engine,
    bay: Bay,
    clock_us: int,
    found: _Sorted,
    stop: Callable[[], bool],
    progress: Progress | None,
) -> bool:
    """Take in the files to do; True when asked to stop before the last."""
    # A pass with nothing to take in does without these imports.
    from ingest.in_hand import reports_of, store_of

    with closing(reports_of(found.todo, store_of(engine, bay, clock_us), progress)) as reports:
        for _ in found.todo:
            if stop():
                return True
            report = next(reports)
            if report is None:
                found.unchanged += 1
            else:
                found.reports.append(report)
    return False


def _unreadable(folder: str, why: str) -> FileReport:
    return waiting(folder + "/", f"the folder cannot be read: {why}; mend its permissions")


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
